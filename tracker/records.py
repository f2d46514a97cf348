"""Frozen records that pass between the stages; arrays inside are read-only, and all of them pickle.

Columns of one record have equal length. Pixels: x right, y down, the centre of the first pixel at (0, 0).
Everything that carries no suffix is SI.
"""

from __future__ import annotations

from dataclasses import dataclass, field, fields, replace
from enum import IntFlag
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, DTypeLike, NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def readonly(values: ArrayLike, dtype: DTypeLike = np.float64) -> NDArray[Any]:
    """Give a read-only array of `dtype`; the caller's own array stays as it is.

    Parameters
    ----------
    values : array_like
        Anything that numpy takes.
    dtype : dtype, optional
        Of the result; float64 if not given.

    Returns
    -------
    array : ndarray
        A view or copy that cannot be written to.
    """
    array = np.asarray(values, dtype=dtype).view()
    array.flags.writeable = False
    return array


def _freeze_columns(record: object, types: dict[str, DTypeLike]) -> None:
    """Make the named columns read-only and check that they are flat and of one length."""
    lengths = {}
    for name, dtype in types.items():
        column = readonly(getattr(record, name), dtype)
        if column.ndim != 1:
            raise ValueError(f"{type(record).__name__}.{name} must be one-dimensional, not {column.shape}")
        object.__setattr__(record, name, column)
        lengths[name] = len(column)
    if len(set(lengths.values())) > 1:
        raise ValueError(f"{type(record).__name__}: columns differ in length: {lengths}")


class Flag(IntFlag):
    """What the detector saw at one sighting beside its place."""

    NONE = 0
    SATURATED = 1  # pixels at full scale were left out of the fit
    EDGE = 2  # the spot's window is cut by the edge of the picture
    CROWDED = 4  # a neighbour nearer than 6 px was fitted jointly
    STREAK = 8  # motion within the exposure is longer than the spot is wide
    SOFT = 16  # much wider than the recording's spot: out of focus
    LINE = 32  # lies on a line of the reticle
    MERGED = 64  # one spot where the tracks expect two: place uncertain


@dataclass(frozen=True, slots=True)
class Recording:
    """One recording as it was read: identity, times and what is odd about them."""

    path: Path
    sha256: str
    width: int  # px, after a rotation flag was obeyed
    height: int  # px
    frame_times: FloatArray  # (frames,) s, strictly increasing, start of exposure
    repeated: IntArray  # frames whose picture is a copy of the one before; they are left out of fits
    lost: int  # frames that the times say are missing
    uneven: bool  # intervals differ by more than the container's time step
    bit_depth: int  # significant bits of a grey value
    full_scale: float  # grey value at saturation
    codec: str
    warnings: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        times = readonly(self.frame_times)
        if len(times) == 0:
            raise ValueError("a recording has at least one frame")
        if np.any(np.diff(times) <= 0):
            raise ValueError("frame times must increase")
        object.__setattr__(self, "frame_times", times)
        object.__setattr__(self, "repeated", readonly(self.repeated, np.int64))

    @property
    def frame_interval(self) -> float:
        """Median time between frames in s; 0 for a single frame."""
        return float(np.median(np.diff(self.frame_times))) if len(self.frame_times) > 1 else 0.0


@dataclass(frozen=True, slots=True)
class Sightings:
    """Droplets seen, one row a sighting, ordered by frame."""

    frame: IntArray  # (N,) decoded frames from 0
    x: FloatArray  # (N,) px
    y: FloatArray  # (N,) px
    x_std: FloatArray  # (N,) px, standard deviation of x: noise of the picture and what its codec adds
    y_std: FloatArray  # (N,) px
    brightness: FloatArray  # (N,) integrated grey values of the spot
    width: FloatArray  # (N,) px, standard deviation of the spot
    flags: IntArray  # (N,) of `Flag`

    def __post_init__(self) -> None:
        _freeze_columns(self, _SIGHTING_COLUMNS)

    def __len__(self) -> int:
        return len(self.frame)

    def take(self, rows: NDArray[Any]) -> Sightings:
        """Give the chosen rows (indices or a mask) as a record of the same kind."""
        return replace(self, **{name: getattr(self, name)[rows] for name in _SIGHTING_COLUMNS})


_SIGHTING_COLUMNS: dict[str, DTypeLike] = {
    "frame": np.int64, "x": np.float64, "y": np.float64, "x_std": np.float64, "y_std": np.float64,
    "brightness": np.float64, "width": np.float64, "flags": np.int64,
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Tracks:
    """Sightings with a droplet number, ordered by droplet, then by frame; at most one row a frame."""

    droplet: IntArray  # (N,) from 0 without gaps
    sightings: Sightings  # the same order

    def __post_init__(self) -> None:
        object.__setattr__(self, "droplet", readonly(self.droplet, np.int64))
        if len(self.droplet) != len(self.sightings):
            raise ValueError("Tracks: droplet and sightings differ in length")
        same = np.diff(self.droplet) == 0
        if np.any(np.diff(self.droplet) < 0) or np.any(np.diff(self.sightings.frame)[same] <= 0):
            raise ValueError("Tracks: rows must be ordered by droplet, then frame, one row a frame")

    def __len__(self) -> int:
        return len(self.droplet)

    @property
    def numbers(self) -> IntArray:
        """Droplet numbers that occur, increasing."""
        return np.unique(self.droplet)

    def rows(self, droplet: int) -> slice:
        """Rows of one droplet."""
        first, last = np.searchsorted(self.droplet, [droplet, droplet + 1])
        return slice(int(first), int(last))


@dataclass(frozen=True, slots=True)
class Segment:
    """A stretch of time at one voltage."""

    start: float  # s
    end: float  # s
    voltage: float  # V, top plate against bottom plate; the mean where it drifts

    def __post_init__(self) -> None:
        if not self.end > self.start:
            raise ValueError(f"a segment must end after it starts: {self.start} to {self.end} s")


@dataclass(frozen=True, slots=True)
class Field:
    """Voltage over the time of one recording.

    `knot_times` and `knot_volts` are the record itself: straight lines between knots, two knots at one time
    for a jump, constant before the first and after the last. `segments` are its plateaus.
    """

    source: str  # list, log, lamp or motion
    segments: tuple[Segment, ...]  # ordered, without overlap; ramps lie between them
    knot_times: FloatArray  # (K,) s on the recording's clock, never decreasing
    knot_volts: FloatArray  # (K,) V
    toggle_std: FloatArray  # (segments - 1,) s, standard uncertainty of each change of voltage
    clock_offset: float = 0.0  # s, added to the log's times to give the recording's
    clock_offset_std: float = 0.0  # s
    clock_rate: float = 0.0  # relative: the log's clock runs fast by this much
    sign_known: bool = True  # False: all voltages, and so all charges, may have the other sign
    warnings: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for name in ("knot_times", "knot_volts", "toggle_std"):
            object.__setattr__(self, name, readonly(getattr(self, name)))
        if len(self.knot_times) != len(self.knot_volts) or len(self.knot_times) == 0:
            raise ValueError("a field needs knots, times and volts of one length")
        if np.any(np.diff(self.knot_times) < 0):
            raise ValueError("knot times must not decrease")
        if len(self.toggle_std) != max(0, len(self.segments) - 1):
            raise ValueError("one toggle_std between each two segments")

    def segment_of(self, times: ArrayLike) -> IntArray:
        """Number of the segment at each time; -1 between segments."""
        times = np.asarray(times, dtype=float)
        number = np.full(times.shape, -1, dtype=np.int64)
        for i, segment in enumerate(self.segments):
            number[(times >= segment.start) & (times < segment.end)] = i
        return number


@dataclass(frozen=True, slots=True)
class Measured:
    """A value with its standard uncertainty and the place it came from."""

    value: float
    std: float = 0.0
    origin: str = "default"  # a file and key, "default", or the model that gave it

    def __post_init__(self) -> None:
        if not (np.isfinite(self.value) and np.isfinite(self.std) and self.std >= 0):
            raise ValueError(f"value and uncertainty must be finite, uncertainty >= 0: {self}")


@dataclass(frozen=True, slots=True)
class Decision:
    """What a person decided on a track; tied to the track's place and time, since numbers may change."""

    time: str  # of the decision, ISO 8601 in UTC
    droplet: int  # number at that time; for the reader, never for finding the track
    verdict: str  # keep, doubt, reject, split, trim, join, reset or undo
    reason: str
    place: tuple[tuple[float, float, float], ...]  # samples of the track: time in s, x and y in px
    at: float | None = None  # s, of a split
    start: float | None = None  # s, of a trim: sightings before are left out
    end: float | None = None  # s, of a trim: sightings after are left out
    other: int | None = None  # droplet that is joined
    other_place: tuple[tuple[float, float, float], ...] = ()  # its samples


@dataclass(frozen=True, slots=True)
class Settings:
    """All that a user may choose for the measurement of one recording."""

    roi: tuple[int, int, int, int] | None = None  # x, y, width, height in px of the part that is looked at
    start: float | None = None  # s, frames before are left out
    end: float | None = None  # s, frames after are left out
    false_alarms: float = 0.05  # false sightings a frame that the threshold stands for
    min_frames: int = 15  # a track with fewer sightings is no droplet
    tables: str = "csv"  # or "parquet": format of tracks

    def as_dict(self) -> dict[str, Any]:
        """Give the settings as plain values for provenance."""
        return {f.name: getattr(self, f.name) for f in fields(self)}


@dataclass(frozen=True, slots=True)
class Seen:
    """What the seeing wing found in one recording, before any physics."""

    recording: Recording
    sightings: Sightings
    report: dict[str, Any] = field(
        default_factory=dict
    )  # spot width, noise, gain, threshold, ...: for provenance
    lamp: FloatArray | None = None  # (frames,) mean grey of the lamp's rectangle
    cuts: IntArray = field(
        default_factory=lambda: np.empty(0, np.int64)
    )  # frames at which the camera was bumped
    warnings: tuple[str, ...] = ()
    cutouts: Any = None  # `Cutouts` of the seeing wing, for the links; None where nothing was kept
