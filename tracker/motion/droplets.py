"""Tracks, voltage and bench -> droplets with radius, charge, charge number, verdict; all of one recording together."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from physics.droplet import Conditions
from tracker.bench import Bench
from tracker.motion.analysis import Analysis, Given, Memo, analyse
from tracker.motion.charges import Number, charge_unit_of, unit_json
from tracker.motion.decided import Decided, apply_decisions
from tracker.motion.droplet import Droplet, is_one_droplet
from tracker.motion.fieldclock import clock_warnings
from tracker.motion.judge import Balance, Facts, balances, fastest_of, reasons_of
from tracker.motion.rows import ChangeRow, DropletRow, SegmentRow
from tracker.motion.tablerows import (
    change_rows,
    decided_row,
    details,
    measured_row,
    shrinking_warnings,
    swap_warnings,
)
from tracker.motion.velocity import Orientation, Path
from tracker.motion.verdict import ordered, verdict_of
from tracker.records import Decision, Flag, IntArray, Tracks, readonly

NEAR_FRAMES = 3  # about a jump, in which a neighbour or a line excuses it
NO_NOISE = 2e-3  # of the frame interval: noise of the places over D that is as good as none
TOO_SHORT = 1e-3  # false alarms per recording of an exposure that is stated too short


@dataclass(frozen=True, slots=True)
class Evaluation:
    """All that the motion wing says of one recording; plain values where provenance wants them."""

    tracks: Tracks  # after a person's splits and joins
    linked: IntArray  # (N,) droplet number that the linker gave each row
    used: np.ndarray  # (N,) bool: rows that a fit rests on
    droplets: tuple[DropletRow, ...]
    segments: tuple[SegmentRow, ...]
    changes: tuple[ChangeRow, ...]
    orientation: dict[str, Any]
    air_current: dict[str, Any]
    exposure: float  # s
    charge_unit: dict[str, Any]
    budget: dict[str, Any]
    details: dict[str, Any] = field(default_factory=dict)  # balances, evaporation rates, charges of all parts
    warnings: tuple[str, ...] = ()


def evaluate_droplets(
    tracks: Tracks, given: Given, *, decisions: Sequence[Decision] = (), memo: Memo | None = None
) -> Evaluation:
    """Work out speeds, radii, charges and verdicts of all droplets of one recording.

    Parameters
    ----------
    tracks : Tracks
        As linked.
    given : Given
        Recording, voltage over time, bench and settings.
    decisions : sequence of Decision, optional
        Of a person, in the order in which they were made.
    memo : Memo, optional
        Kept by someone who evaluates the recording again and again: what it holds is not worked out again.

    Returns
    -------
    evaluation : Evaluation
        One row for every droplet number; what could not be measured is empty and has a reason.
    """
    decided = apply_decisions(tracks, given.recording, decisions)
    made = analyse(tracks, decided, given, Memo() if memo is None else memo)
    rests = [
        [] if d.history is None else balances(rows, d.history)
        for d, rows in zip(made.droplets, made.segments, strict=True)
    ]
    rows = [_row(i, made, decided, given, rest) for i, rest in enumerate(rests)]
    used = np.zeros(len(decided.tracks), bool)
    for droplet in made.droplets:
        used[droplet.used_rows(decided.tracks)] = True
    return Evaluation(
        decided.tracks, readonly(decided.linked, np.int64), readonly(used, np.bool_), tuple(rows),
        tuple(row for part in made.segments for row in part),
        tuple(row for d, rest in zip(made.droplets, rests, strict=True) for row in change_rows(d, rest)),
        _orientation_json(made.orientation), made.air.plain(), given.view.exposure,
        unit_json(charge_unit_of(made.droplets, rows, made.shared)), made.shared.budget(made.droplets, rows),
        details(made.droplets, rests) | _decisions_json(decided),
        (*made.orientation.warnings, *decided.warnings, *_exposure_warning(given, made.droplets),
         *_voltage_warning(given.bench), *shrinking_warnings(made.droplets), *swap_warnings(made.droplets),
         *clock_warnings(given.field, _trusted(made.droplets, rows), given.recording)),
    )  # fmt: skip


def _row(i: int, made: Analysis, decided: Decided, given: Given, rests: Sequence[Balance]) -> DropletRow:
    """Row of one droplet, with its reasons and what a person decided."""
    droplet, tracks, number = made.droplets[i], decided.tracks, made.numbers[i]
    facts = _facts(droplet, tracks, given.bench.conditions, number, made.segments[i])
    reasons = reasons_of(facts, made.air, rests, given.settings)
    span, used = tracks.rows(droplet.path.droplet), droplet.used_rows(tracks)
    times = given.recording.frame_times[tracks.sightings.frame[used if len(used) else span]]
    row = DropletRow(
        droplet.path.droplet,
        verdict_of(reasons),
        ordered(reasons),
        len(used),
        float(times[0]),
        float(times[-1]),
    )
    row = measured_row(row, droplet, made.air, made.shared.of_droplet(i), number)
    return decided_row(row, decided.verdicts.get(row.droplet), bool(np.any(decided.trimmed[span])))


def _trusted(droplets: list[Droplet], rows: list[DropletRow]) -> list[Path]:
    """Paths of the droplets that are not rejected."""
    return [droplet.path for droplet, row in zip(droplets, rows, strict=True) if row.verdict != "reject"]


def _decisions_json(decided: Decided) -> dict[str, Any]:
    """Give what a person decided on the droplets of the present numbering."""
    return {"decisions": {
        str(droplet): {"verdict": verdict, "reason": reason}
        for droplet, (verdict, reason) in sorted(decided.verdicts.items())
    }}  # fmt: skip


def _orientation_json(orientation: Orientation) -> dict[str, Any]:
    std = orientation.down_deg_std
    return {"down_deg": orientation.down_deg, "down_deg_std": std if np.isfinite(std) else None,
            "origin": orientation.origin}  # fmt: skip


def _exposure_warning(given: Given, droplets: Sequence[Droplet]) -> tuple[str, ...]:
    """Say where the exposure comes from if nobody stated it, or that the stated one is too short."""
    bench, exposure = given.bench, given.view.exposure
    if bench.exposure is None:
        return (
            f"camera.exposure is not stated: half the frame interval, {exposure * 1e3:.3g} ms, is taken for the times"
            " of the field; the blur of Brownian motion is fitted together with the place noise",
        )
    from scipy.special import bdtrc  # scipy.stats, which says it in more words, takes a second to import

    usable = [d.history for d in droplets if d.history is not None and is_one_droplet(d, bench.conditions)]
    bare = sum(h.fit.log_rho < np.log(NO_NOISE * np.median(h.steps.dt)) for h in usable)
    # With the right blur, chance leaves a droplet without place noise in at most one case of two.
    if bare == 0 or bdtrc(bare - 1, len(usable), 0.5) > TOO_SHORT:
        return ()
    return (
        f"{bare} of {len(usable)} droplets seem to have no place noise: camera.exposure, {exposure * 1e3:.3g} ms, is"
        " shorter than the camera's, or the noise of the places is far below Brownian motion",
    )


def _voltage_warning(bench: Bench) -> tuple[str, ...]:
    """Say if nobody stated how well the voltage is known."""
    if bench.voltage is not None or bench.voltage_rel_std > 0:
        return ()
    return (
        f"field.source is {bench.field.source} and cell.voltage is not stated: its voltages count as exact; state one"
        ' with its uncertainty, such as voltage = "260.0(5) V"',
    )


def _facts(
    droplet: Droplet, tracks: Tracks, conditions: Conditions, number: Number, segments: Sequence[SegmentRow]
) -> Facts:
    """Gather what the verdict rests on."""
    rows = tracks.rows(droplet.path.droplet)
    flags = np.asarray(tracks.sightings.flags[rows])
    # Beside a neighbour or a line of the reticle a place may be off for some frames: no jump of the droplet.
    uneasy = tracks.sightings.frame[rows][(flags & int(Flag.CROWDED | Flag.MERGED | Flag.LINE)) != 0]
    hops = sum(bool(np.all(np.abs(uneasy - frame) > NEAR_FRAMES)) for frame in droplet.hops)
    return Facts(
        path=droplet.path, flags=flags, outliers=droplet.outliers, hops=hops, history=droplet.history,
        posterior=droplet.posterior, conditions=conditions, number=number.number,
        number_probability=number.probability, on_no_number=number.none, fastest=fastest_of(segments, droplet.history),
    )  # fmt: skip
