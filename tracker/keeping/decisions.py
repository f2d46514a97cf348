"""Decisions of a person on single droplets: `decisions.jsonl`, appended, never rewritten.

A decision carries samples of its track, so that it finds the track again after a new measurement.
"""

from __future__ import annotations

import json
import os
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from tracker.errors import DecisionError
from tracker.keeping.store import DECISIONS, Result
from tracker.records import Decision

if TYPE_CHECKING:
    import pandas as pd

VERDICTS = ("keep", "doubt", "reject", "split", "trim", "join", "reset", "undo")
_FIRST_KEY = '{"time"'  # how every line begins
SAMPLES = 25  # points of a track that a decision carries


def read_decisions(folder: Path | str) -> tuple[Decision, ...]:
    """Read the decisions of a result folder.

    Parameters
    ----------
    folder : Path or str
        Result folder; it need not exist.

    Returns
    -------
    decisions : tuple of Decision
        In the order in which they were made. A last line that was not written to its end is passed over, since
        whoever wrote it was never told that it was kept.

    Raises
    ------
    DecisionError
        File and line of a decision that cannot be read.
    """
    path = Path(folder) / DECISIONS
    try:
        text = path.read_text(encoding="utf-8", errors="replace")
    except FileNotFoundError:
        return ()
    except OSError as error:
        raise DecisionError(str(path), f"cannot be read: {error.strerror}") from error
    lines = text.split("\n")
    found = []
    for number, line in enumerate(lines, start=1):
        if not line.strip():
            continue
        try:
            found.append(_decision(json.loads(line)))
        except (ValueError, KeyError, TypeError) as error:
            if number == len(lines):
                break
            if _is_broken_tail(line):
                continue
            raise DecisionError(
                str(path), f"line {number} is no decision ({error}); mend or remove it"
            ) from error
    return tuple(found)


def _is_broken_tail(line: str) -> bool:
    """Whether a line is the beginning of a decision that was cut off, closed later by the next append."""
    begins = line.startswith(_FIRST_KEY) or _FIRST_KEY.startswith(line)
    return begins and not line.rstrip().endswith("}")


def append_decision(folder: Path | str, decision: Decision) -> None:
    """Append one decision and force it to the disk.

    Parameters
    ----------
    folder : Path or str
        Result folder; must exist.
    decision : Decision
        As `make_decision` gives it.

    Raises
    ------
    DecisionError
        If the file cannot be written; nothing that was there before is lost.
    """
    path = Path(folder) / DECISIONS
    line = json.dumps(_plain(decision), ensure_ascii=False, allow_nan=False) + "\n"
    try:
        with path.open("a+b") as file:
            if file.seek(0, os.SEEK_END) > 0:
                file.seek(-1, os.SEEK_END)
                if file.read(1) != b"\n":  # a line that was cut off must not swallow this one
                    line = "\n" + line
            file.write(line.encode("utf-8"))
            file.flush()
            os.fsync(file.fileno())
    except OSError as error:
        raise DecisionError(str(path), f"cannot be written: {error.strerror}") from error


def make_decision(  # noqa: PLR0913 - one keyword for each option of the command
    result: Result, *, droplet: int, verdict: str, reason: str = "", at: float | None = None,
    start: float | None = None, end: float | None = None, other: int | None = None, now: datetime | None = None,
) -> Decision:  # fmt: skip
    """Check a decision against a result and tie it to the track's place and time.

    Parameters
    ----------
    result : Result
        With its tracks.
    droplet : int
        Number of the droplet in the result.
    verdict : str
        ``keep``, ``doubt`` or ``reject``; ``split`` at a time; ``trim`` to a time or between two; ``join``
        with another droplet; ``reset``: back to what was measured; ``undo``: forget the last decision on it.
    reason : str, optional
        Needed for a verdict; in the person's words.
    at : float, optional
        Time of a split in s.
    start, end : float, optional
        Times in s that a trim keeps.
    other : int, optional
        Droplet to join with.
    now : datetime, optional
        Time of the decision; the present if not given.

    Returns
    -------
    decision : Decision
        Not yet kept.

    Raises
    ------
    DecisionError
        What is wrong and what is allowed.
    """
    folder = str(result.folder or "result")
    if verdict not in VERDICTS:
        raise DecisionError(folder, f"verdict {verdict!r}: must be one of {', '.join(VERDICTS)}")
    if verdict in ("keep", "doubt", "reject") and not reason.strip():
        raise DecisionError(folder, f"a verdict {verdict!r} needs a reason, in your words")
    track = _track(result, droplet, folder)
    if verdict == "undo" and not (result.folder and read_decisions(result.folder)):
        raise DecisionError(folder, f"droplet {droplet} has no decision to undo")
    times = track["time_s"].to_numpy(float)
    _check_times(folder, verdict, times, at, start, end)
    other_place: tuple[tuple[float, float, float], ...] = ()
    if verdict == "join":
        if other is None or other == droplet:
            raise DecisionError(folder, "a join needs the number of another droplet")
        second = _track(result, other, folder)
        if np.intersect1d(track["frame"], second["frame"]).size:
            raise DecisionError(
                folder, f"droplets {droplet} and {other} are seen in the same frames: they are two"
            )
        other_place = _place(second)
    moment = (now or datetime.now(UTC)).astimezone(UTC).isoformat(timespec="milliseconds")
    return Decision(
        moment, int(droplet), verdict, " ".join(reason.split()), _place(track),
        at if verdict == "split" else None, start if verdict == "trim" else None,
        end if verdict == "trim" else None, other if verdict == "join" else None, other_place,
    )  # fmt: skip


def _track(result: Result, droplet: int, folder: str) -> pd.DataFrame:
    """Rows of one droplet."""
    rows = result.tracks[result.tracks["droplet"] == droplet]
    if len(rows) == 0:
        numbers = sorted({int(number) for number in result.tracks["droplet"]})
        there = f"0 to {numbers[-1]}" if numbers else "none"
        raise DecisionError(folder, f"there is no droplet {droplet}; the result has {there}")
    return rows


def _check_times(
    folder: str, verdict: str, times: np.ndarray, at: float | None, start: float | None, end: float | None
) -> None:
    """A split or trim must leave something on either side."""
    seen = f"it is seen from {times[0]:.3f} to {times[-1]:.3f} s"
    if verdict == "split" and (at is None or not times[0] < at <= times[-1]):
        raise DecisionError(folder, f"a split needs a time within the track; {seen}")
    if verdict == "trim":
        if start is None and end is None:
            raise DecisionError(folder, f"a trim needs a time from or to which the track is kept; {seen}")
        low, high = -np.inf if start is None else start, np.inf if end is None else end
        if not np.any((times >= low) & (times <= high)):
            raise DecisionError(folder, f"a trim must leave some of the track; {seen}")


def _place(track: pd.DataFrame) -> tuple[tuple[float, float, float], ...]:
    """Samples of a track, first and last sighting included."""
    chosen = np.unique(np.linspace(0, len(track) - 1, SAMPLES).round().astype(int))
    values = track[["time_s", "x_px", "y_px"]].to_numpy(float)[chosen]
    return tuple((round(t, 6), round(x, 2), round(y, 2)) for t, x, y in values.tolist())


_KEYS = {"at": "at_s", "start": "from_s", "end": "to_s"}  # of what has a unit outside Python


def _plain(decision: Decision) -> dict[str, Any]:
    """One line of the file; keys without a value are left out."""
    plain: dict[str, Any] = {
        "time": decision.time, "droplet": decision.droplet, "verdict": decision.verdict,
        "reason": decision.reason,
    }  # fmt: skip
    for name, key in _KEYS.items():
        if getattr(decision, name) is not None:
            plain[key] = getattr(decision, name)
    plain["place"] = [list(sample) for sample in decision.place]
    if decision.other is not None:
        plain["other"] = decision.other
        plain["other_place"] = [list(sample) for sample in decision.other_place]
    return plain


def _decision(plain: dict[str, Any]) -> Decision:
    """Give a decision back from its line."""
    if plain["verdict"] not in VERDICTS:
        raise ValueError(f"verdict {plain['verdict']!r}")
    numbers = {name: None if plain.get(key) is None else float(plain[key]) for name, key in _KEYS.items()}
    return Decision(
        str(plain["time"]), int(plain["droplet"]), str(plain["verdict"]), str(plain.get("reason", "")),
        _samples(plain.get("place", [])), numbers["at"], numbers["start"], numbers["end"],
        None if plain.get("other") is None else int(plain["other"]), _samples(plain.get("other_place", [])),
    )  # fmt: skip


def _samples(rows: list[list[float]]) -> tuple[tuple[float, float, float], ...]:
    return tuple((float(t), float(x), float(y)) for t, x, y in rows)
