"""Speeds, charges and verdicts again from stored tracks, with the present bench and decisions; no video."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

from tracker.bench import Bench, load_bench
from tracker.errors import BenchError, ResultError
from tracker.keeping.decisions import append_decision, make_decision, read_decisions
from tracker.keeping.store import Result, read_result, write_result
from tracker.motion.analysis import Analysis, Given, Memo
from tracker.motion.droplets import evaluate_droplets
from tracker.provenance import assemble, field_from_json, recording_from_json, tracks_from_table
from tracker.records import Field, Recording, Settings, Tracks


def evaluate_result(
    folder: Path | str, *, bench: Bench | Path | str | None = None, memo: Memo | None = None
) -> Result:
    """Evaluate a result again and write it in place.

    Parameters
    ----------
    folder : Path or str
        Result folder.
    bench : Bench, Path or str, optional
        The bench or its file; if not given, the file that was used before, or one found by the recording's place.
    memo : Memo, optional
        Kept by someone who evaluates the same result again and again: fits are done again only if their input
        changed.

    Returns
    -------
    result : Result
        As written.

    Raises
    ------
    FallriseError
        If the folder, the bench or a decision cannot be used; the old result stays.
    """
    return _evaluate_again(read_result(folder), Path(folder), bench, memo)


def _evaluate_again(
    old: Result, folder: Path, bench: Bench | Path | str | None = None, memo: Memo | None = None
) -> Result:
    """Work out a result that was just read again and write it in place."""
    result = _evaluated(old, folder, bench, memo)
    return write_result(result, folder, tables=result.recording["settings"]["tables"])


def _evaluated(old: Result, folder: Path, bench: Bench | Path | str | None, memo: Memo | None) -> Result:
    """Work out a stored result again; nothing is written."""
    try:
        recording = recording_from_json(old.recording, (folder / old.recording["path"]).resolve())
        settings = _settings(old.recording["settings"])
        tracks = tracks_from_table(old.tracks)
    except (KeyError, TypeError, ValueError) as error:
        raise ResultError(str(folder), f"is damaged ({error}); measure the recording again") from error
    loaded = bench if isinstance(bench, Bench) else present_bench(old, recording, bench)
    loaded = loaded.fitted_to(recording.width, recording.height)
    field = _field(old, tracks, recording, loaded)
    stored = old.recording["seeing"]
    given = Given(recording, field, loaded, settings, stored.get("cuts", ()))
    evaluation = evaluate_droplets(tracks, given, decisions=read_decisions(folder), memo=memo)
    return assemble(
        evaluation, given, report=stored, warnings=tuple(stored.get("warnings", ())), folder=folder
    )


def analyse_result(result: Result, memo: Memo) -> Analysis:
    """Give the fits behind a result, with the present bench and decisions; nothing is written.

    Parameters
    ----------
    result : Result
        Read from its folder.
    memo : Memo
        Keeps the fits for the next evaluation.

    Returns
    -------
    analysis : Analysis
        Droplets with their paths, histories and posteriors, in the order of their numbers.

    Raises
    ------
    FallriseError
        If the bench or a decision cannot be used.
    """
    _evaluated(result, result.folder or Path(), None, memo)
    if memo.analysis is None:
        raise ResultError(str(result.folder), "gives no analysis; measure the recording again")
    return memo.analysis


def decide_and_evaluate(folder: Path | str, *, memo: Memo | None = None, **decision: Any) -> Result:
    """Append a person's decision to a result and evaluate it again.

    Parameters
    ----------
    folder : Path or str
        Result folder.
    memo : Memo, optional
        As for `evaluate_result`.
    **decision
        As `tracker.keeping.decisions.make_decision` takes it.

    Returns
    -------
    result : Result
        With the decision obeyed.
    """
    old = read_result(folder)
    append_decision(Path(folder), make_decision(old, **decision))
    return _evaluate_again(old, Path(folder), memo=memo)


def _settings(stored: dict[str, Any]) -> Settings:
    known: dict[str, Any] = {k: tuple(v) if isinstance(v, list) else v for k, v in stored.items()}
    return Settings(**known)


def present_bench(old: Result, recording: Recording, bench: Path | str | None = None) -> Bench:
    """Read the bench as its file says now: the named one, the one used before, or the one by the recording's place.

    Parameters
    ----------
    old : Result
        Names the file that was used before.
    recording : Recording
        Gives the place.
    bench : Path or str, optional
        The bench file.

    Returns
    -------
    bench : Bench
        Its scale is not fitted to the recording yet.

    Raises
    ------
    ResultError
        If the file is gone and none can be found.
    """
    stored = [(old.folder or Path()) / file for file in old.recording["bench"]["files"]]
    if bench is None and stored and stored[0].is_file():
        bench = stored[0].resolve()
    try:
        return load_bench(bench, recording=recording.path)
    except BenchError as error:
        if bench is None:
            raise ResultError(
                str(old.folder), f"its bench file is gone; name one with --bench ({error})"
            ) from error
        raise


def _field(old: Result, tracks: Tracks, recording: Recording, bench: Bench) -> Field:
    """The field as the present bench gives it; a lamp's toggles are those seen before, at the present voltage."""
    from tracker.voltage import compare_sources, field_of_tracks, known_field

    spec = bench.field
    stored = field_from_json(old.recording["field"])
    if spec.source == "lamp":
        if stored.source != "lamp" or bench.voltage is None:
            raise ResultError(str(old.folder), "was measured without the lamp; measure the recording again")
        field = scaled_field(stored, bench.voltage.value)
    elif spec.source == "list" or (spec.source == "log" and spec.clock_offset is not None):
        field = known_field(spec.source, recording, bench)
    else:
        field = field_of_tracks(tracks, recording, bench)
    compare_sources(field, tracks, recording, bench)
    return field


def scaled_field(field: Field, voltage: float) -> Field:
    """Give a two-state field at another field-on voltage.

    Parameters
    ----------
    field : Field
        On and off, as a lamp gives it.
    voltage : float
        In V, of the field-on state.

    Returns
    -------
    field : Field
        The same toggles; the largest voltage becomes the given one.
    """
    was = max((s.voltage for s in field.segments), key=abs, default=0.0)
    if was in (0.0, voltage):
        return field
    factor = voltage / was
    segments = tuple(replace(s, voltage=s.voltage * factor) for s in field.segments)
    return replace(field, segments=segments, knot_volts=field.knot_volts * factor)
