"""Voltage over time from a log file of the supply or of a data logger, and the log's clock."""

from __future__ import annotations

import csv
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime
from itertools import pairwise
from pathlib import Path

import numpy as np

from calibration.errors import QuantityError
from calibration.quantity import parse_quantity
from tracker.errors import FieldError
from tracker.motion.field import field_of_steps, recording_span
from tracker.records import Field, FloatArray, Recording, Segment, readonly

PLATEAU_TOLERANCE = 0.02  # of the log's range: a plateau's readings stay so near to one another
PLATEAU_DRIFT = 0.1  # of the log's range: what drifts further within one stretch is a ramp
LEAST_PLATEAU = 0.1  # s
WINDOW = 5  # readings that must agree for a stretch to count as settled


@dataclass(frozen=True, slots=True)
class Log:
    """Readings of a voltage over time, on the log's own clock."""

    times: FloatArray  # (N,) s from the log's zero, or from its first row for time stamps; never decreasing
    volts: FloatArray  # (N,) V
    sampled: (
        bool  # True: readings at a steady pace; False: one row a change, its voltage holds until the next
    )
    path: Path

    def __post_init__(self) -> None:
        for name in ("times", "volts"):
            object.__setattr__(self, name, readonly(getattr(self, name)))
        if len(self.times) == 0 or len(self.times) != len(self.volts):
            raise ValueError("a log has at least one row, and a voltage for each time")
        if np.any(np.diff(self.times) < 0):
            raise ValueError("log times must not decrease")

    @property
    def interval(self) -> float:
        """Median time between readings in s; 0 for one reading or a log of changes."""
        return float(np.median(np.diff(self.times))) if self.sampled and len(self.times) > 1 else 0.0


def read_log(
    path: Path, *, time_column: str = "time_s", voltage_column: str = "voltage_v", time_unit: str = "s",
    voltage_unit: str = "V",
) -> Log:  # fmt: skip
    """Read a voltage log.

    Parameters
    ----------
    path : Path
        Text with one header line and columns parted by comma, semicolon or tab. Lines that begin with ``#``
        and empty lines are passed over. A decimal comma is understood where columns are parted otherwise.
    time_column, voltage_column : str, optional
        Names in the header; case and blanks at the ends do not count.
    time_unit : str, optional
        Unit of the time column, or ``iso`` for time stamps such as ``2026-03-02T10:15:04.250``, which are
        also known by their look.
    voltage_unit : str, optional
        Unit of the voltage column.

    Returns
    -------
    log : Log
        Times in s, voltages in V. Rows without a number in either column are left out.

    Raises
    ------
    FieldError
        File, and what is wrong: missing, no such column, no usable row, times that run backwards.
    """
    rows, header = _rows(path)
    columns = {name.strip().casefold(): i for i, name in enumerate(header)}
    places = []
    for wanted in (time_column, voltage_column):
        if wanted.strip().casefold() not in columns:
            raise FieldError(str(path), f"no column {wanted!r}; the log has {', '.join(header)}")
        places.append(columns[wanted.strip().casefold()])
    cells = [(row[places[0]].strip(), row[places[1]].strip()) for row in rows if len(row) > max(places)]
    time_factor = 1.0 if time_unit == "iso" else _factor(path, time_unit, "s")
    voltage_factor = _factor(path, voltage_unit, "V")
    pairs = [(_time(time), _number(volts)) for time, volts in cells]
    table = np.array([pair for pair in pairs if np.all(np.isfinite(pair))]).reshape(-1, 2)
    if len(table) == 0:
        raise FieldError(str(path), f"no row holds numbers in {time_column!r} and {voltage_column!r}")
    stamped = time_unit == "iso" or any(_stamp(time) is not None for time, _ in cells[:1])
    times = table[:, 0] - table[0, 0] if stamped else table[:, 0] * time_factor
    back = np.flatnonzero(np.diff(times) < 0)
    if len(back):
        raise FieldError(
            str(path), f"times run backwards after row {int(back[0]) + 1} ({times[back[0]]:g} s)"
        )
    volts = table[:, 1] * voltage_factor
    return Log(times, volts, _is_sampled(times, volts), path)


def _rows(path: Path) -> tuple[list[list[str]], list[str]]:
    """Rows and header of a delimited text file."""
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise FieldError(str(path), f"the voltage log cannot be read: {error}") from error
    lines = [line for line in lines if line.strip() and not line.lstrip().startswith("#")]
    if not lines:
        raise FieldError(str(path), "the voltage log is empty")
    delimiter = max("\t;,", key=lines[0].count)
    rows = list(csv.reader(lines, delimiter=delimiter))
    return rows[1:], [name.strip() for name in rows[0]]


def _factor(path: Path, unit: str, inside: str) -> float:
    try:
        return float(parse_quantity(f"1 {unit}", inside)[0])
    except QuantityError as error:
        raise FieldError(str(path), f"unit {unit!r} of the log: {error.problem}") from error


def _number(text: str) -> float:
    """Read a number, with point or comma; nan if it is none."""
    try:
        return float(text)
    except ValueError:
        try:
            return float(text.replace(",", "."))
        except ValueError:
            return float("nan")


def _stamp(text: str) -> datetime | None:
    """Read a time stamp, if the text is one and no plain number."""
    if np.isfinite(_number(text)):
        return None
    try:
        return datetime.fromisoformat(text)
    except ValueError:
        return None


def _time(text: str) -> float:
    """Time in the log's unit, or in s from a fixed day for a time stamp; nan if it is neither."""
    stamp = _stamp(text)
    if stamp is None:
        return _number(text)
    epoch = datetime(2000, 1, 1, tzinfo=stamp.tzinfo)
    return (stamp - epoch).total_seconds()


def _is_sampled(times: FloatArray, volts: FloatArray) -> bool:
    """Tell a steady sampling from one row a change: most neighbours agree, and the pace is steady."""
    if len(times) < 2 * WINDOW:
        return False
    steps, scale = np.diff(times), float(np.ptp(volts))
    steady = float(np.median(np.abs(steps - np.median(steps)))) <= 0.5 * float(np.median(steps))
    return steady and scale >= 0 and float(np.mean(np.abs(np.diff(volts)) <= PLATEAU_TOLERANCE * scale)) > 0.5


def plateaus(log: Log) -> list[tuple[int, int]]:
    """Stretches of a sampled log in which the voltage stands still, or drifts slowly.

    Parameters
    ----------
    log : Log
        Sampled. Ramps and ringing separate the stretches; noise within 2 % of the log's range does not.

    Returns
    -------
    stretches : list of (first, last)
        Rows, both included; each lasts 0.1 s at least.
    """
    volts = np.asarray(log.volts)
    noise = 1.4826 * float(np.median(np.abs(np.diff(volts)))) / np.sqrt(2)
    tolerance = max(PLATEAU_TOLERANCE * float(np.ptp(volts)), 6 * noise)
    width = min(WINDOW, len(volts))
    centre = (width - 1) // 2
    near = np.lib.stride_tricks.sliding_window_view(volts, width)
    calm = np.ptp(near, axis=1) <= tolerance  # of row i and the next `width` - 1
    settled = np.zeros(len(volts), bool)
    for shift in range(width):
        settled[shift : shift + len(calm)] |= calm
    joined = np.concatenate(([False], np.abs(np.diff(volts)) <= tolerance)) & settled
    starts = np.flatnonzero(settled & ~(joined & np.concatenate(([False], settled[:-1]))))
    found = []
    for k, first in enumerate(starts):
        stop = starts[k + 1] if k + 1 < len(starts) else len(volts)
        unsettled = np.flatnonzero(~settled[first:stop])
        last = int(first + (unsettled[0] if len(unsettled) else stop - first) - 1)
        if log.times[last] - log.times[first] < LEAST_PLATEAU or last - first < centre:
            continue
        ends = np.median(volts[first : first + width]), np.median(volts[last - width + 1 : last + 1])
        if abs(ends[1] - ends[0]) <= max(PLATEAU_DRIFT * float(np.ptp(volts)), tolerance):
            found.append((int(first), last))
    return found


def on_recording_clock(times: FloatArray, *, offset: float, rate: float, middle: float) -> FloatArray:
    """Give the times of a log on the recording's clock.

    Parameters
    ----------
    times : ndarray
        Of the log in s.
    offset : float
        Added to the log's times, in s; holds at `middle`.
    rate : float
        The log's clock runs fast by this part: of its seconds, 1 + rate make one of the recording.
    middle : float
        Time on the recording's clock in s at which the offset holds, the middle of the recording.

    Returns
    -------
    times : ndarray
        Of the recording in s.
    """
    return middle + (times + offset - middle) / (1.0 + rate)


def field_from_log(
    log: Log, recording: Recording, *, offset: float = 0.0, offset_std: float = 0.0, rate: float = 0.0,
    warnings: Iterable[str] = (),
) -> Field:  # fmt: skip
    """Voltage of a recording from a log whose clock is known.

    Parameters
    ----------
    log : Log
        On its own clock.
    recording : Recording
        Whose time is covered.
    offset, offset_std : float, optional
        Added to the log's times to give the recording's, with its standard uncertainty, in s.
    rate : float, optional
        The log's clock runs fast by this part.
    warnings : iterable of str, optional
        Passed on.

    Returns
    -------
    field : Field
        With source ``log``: knots at the logged readings, so that ramps, ringing and a drifting plateau
        count as logged; segments are the plateaus with their mean voltage. A jump between two readings may
        lie anywhere between them: `toggle_std` is that of a uniform distribution.

    Raises
    ------
    FieldError
        If the log covers nothing of the recording.
    """
    span = recording_span(recording)
    times = on_recording_clock(
        np.asarray(log.times), offset=offset, rate=rate, middle=0.5 * (span[0] + span[1])
    )
    if times[0] > span[1] or times[-1] < span[0]:
        problem = f"the log covers {times[0]:.3f} to {times[-1]:.3f} s, the recording {span[0]:.3f}"
        raise FieldError(str(log.path), f"{problem} to {span[1]:.3f} s; check field.clock_offset")
    notes = [*warnings, *_coverage(log, times, span)]
    if not log.sampled:
        plain = field_of_steps("log", times, log.volts, span=span)
        segments, knot_times, knot_volts = plain.segments, plain.knot_times, plain.knot_volts
        toggle_std = np.zeros(len(segments) - 1)
    else:
        segments, toggle_std = _log_segments(log, times, span)
        near = slice(
            max(0, int(np.searchsorted(times, span[0])) - 1), int(np.searchsorted(times, span[1])) + 2
        )
        knot_times, knot_volts = times[near], np.asarray(log.volts)[near]
    return Field(
        "log", segments, knot_times, knot_volts, toggle_std, clock_offset=offset, clock_offset_std=offset_std,
        clock_rate=rate, warnings=tuple(notes),
    )  # fmt: skip


def _coverage(log: Log, times: FloatArray, span: tuple[float, float]) -> list[str]:
    """Say where a sampled log does not reach over the recording."""
    told, slack = [], max(2 * log.interval, 0.05)
    if times[0] > span[0] + slack:
        late = times[0] - span[0]
        told.append(f"the log begins {late:.2f} s after the recording; its first voltage is used before")
    if log.sampled and times[-1] < span[1] - slack:
        early = span[1] - times[-1]
        told.append(f"the log ends {early:.2f} s before the recording; its last voltage is used after")
    return told


def _log_segments(
    log: Log, times: FloatArray, span: tuple[float, float]
) -> tuple[tuple[Segment, ...], FloatArray]:
    """Plateaus inside the recording, and how well the change between each two is placed in s."""
    segments, rows = [], []
    for first, last in plateaus(log):
        begin = span[0] if first == 0 else max(float(times[first]), span[0])
        end = span[1] if last == len(times) - 1 else min(float(times[last]), span[1])
        if end - begin < LEAST_PLATEAU:
            continue
        inside = (times >= begin) & (times <= end)
        part = np.asarray(log.volts)[inside] if np.any(inside) else np.asarray(log.volts)[first : last + 1]
        segments.append(Segment(begin, end, float(np.mean(part))))
        rows.append((first, last))
    stds = []
    for (_, before), (after, _) in pairwise(rows):
        gaps = np.diff(times[before : after + 1])
        jumps = np.abs(np.diff(np.asarray(log.volts)[before : after + 1]))
        # The part of the change that one interval holds may lie anywhere in that interval.
        share = jumps / max(float(np.sum(jumps)), 1e-12)
        stds.append(float(np.sqrt(np.sum((gaps * share) ** 2) / 12)))
    return tuple(segments), np.array(stds)
