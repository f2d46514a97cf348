"""Tracks in metres along and across gravity: gravity's direction, steps, and sightings that are left out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from calibration.scale import Scale, to_metres
from physics.motion import (
    MIN_INCREMENTS,
    FreeFit,
    Increments,
    field_impulse,
    free_fit,
    increments,
    robust_increments,
)
from tracker.bench import Bench
from tracker.motion.field import blur_of, exposure_of, uncertain_spans
from tracker.motion.shelf import digest
from tracker.records import Field, Flag, FloatArray, IntArray, Recording, Tracks, readonly

OUTLIER = 5.0  # whitened residual of a step beyond which the place of the droplet jumped
LEFT_OUT = Flag.MERGED | Flag.EDGE  # sightings whose place may be biased by more than it is uncertain
MOST_HOPS = 5  # a track with more is no track of one droplet
LEAST_DRIVE = 5.0  # significance that the drive must reach, over all droplets, to give gravity's direction


@dataclass(frozen=True, slots=True)
class Orientation:
    """Gravity in the picture."""

    down_deg: float  # from straight down toward +x
    down_deg_std: float
    origin: str  # bench, drive, fall or picture
    warnings: tuple[str, ...] = ()


@dataclass(frozen=True)
class Path:
    """One droplet's sightings that may be used, along and across gravity."""

    droplet: int
    frames: IntArray  # (N,)
    times: FloatArray  # (N,) s, start of exposure
    down: FloatArray  # (N,) m along gravity
    side: FloatArray  # (N,) m across gravity, +x for gravity straight down
    down_std: FloatArray  # (N,) m
    side_std: FloatArray  # (N,) m
    impulse: FloatArray  # (N,) V s, exposure average of the time integral of the voltage
    exposure: float  # s
    breaks: np.ndarray  # (N - 1,) bool: steps over an uncertain toggle, a bump of the camera or a hop
    blur: float | None = None  # s, exposure for the blur of Brownian motion; None: `exposure`

    def __post_init__(self) -> None:
        for name in ("times", "down", "side", "down_std", "side_std", "impulse"):
            object.__setattr__(self, name, readonly(getattr(self, name)))
        object.__setattr__(self, "frames", readonly(self.frames, np.int64))
        object.__setattr__(self, "breaks", readonly(self.breaks, np.bool_))

    def __len__(self) -> int:
        return len(self.times)

    def without(self, sighting: int) -> Path:
        """Leave one sighting out; the steps beside it become one."""
        keep = np.arange(len(self)) != sighting
        breaks = np.delete(self.breaks, min(sighting, len(self.breaks) - 1))
        if 0 < sighting < len(self) - 1:
            breaks[sighting - 1] = self.breaks[sighting - 1] | self.breaks[sighting]
        return replace(self, **{name: getattr(self, name)[keep] for name in _COLUMNS}, breaks=breaks)

    def cut(self, step: int) -> Path:
        """Leave one step out."""
        breaks = self.breaks.copy()
        breaks[step] = True
        return replace(self, breaks=breaks)

    @property
    def digest(self) -> str:
        """Digest of all that the path holds."""
        arrays = (*(getattr(self, name) for name in _COLUMNS), self.breaks)
        return digest(self.droplet, self.exposure, self.blur, arrays=arrays)

    @cached_property
    def steps(self) -> Increments:
        """Steps between neighbouring sightings."""
        return increments(
            self.times, self.down, self.side, down_std=self.down_std, side_std=self.side_std,
            impulse=self.impulse, exposure=self.exposure, blur=self.blur, breaks=self.breaks,
        )  # fmt: skip


_COLUMNS = ("frames", "times", "down", "side", "down_std", "side_std", "impulse")


@dataclass(frozen=True, slots=True)
class View:
    """How the camera saw a recording, and the field meanwhile."""

    recording: Recording
    field: Field  # voltage over time
    scale: Scale  # of the recording's pixels
    exposure: float  # of a frame in s
    blur: float | None = None  # exposure in s for the blur of Brownian motion; None: `exposure`

    @classmethod
    def of(cls, recording: Recording, field: Field, bench: Bench) -> View:
        """Take scale and exposure from the bench."""
        return cls(recording, field, bench.scale, exposure_of(bench, recording), blur_of(bench, recording))


def paths(
    tracks: Tracks,
    view: View,
    orientation: Orientation,
    *,
    cuts: Sequence[int] | IntArray = (),
    left_out: np.ndarray | None = None,
) -> list[Path]:
    """Bring tracks into metres along and across gravity, without the sightings that cannot be used.

    Parameters
    ----------
    tracks : Tracks
        In px.
    view : View
        A repeated picture says nothing of its own time and is left out, and so are steps over a toggle whose time
        is uncertain.
    orientation : Orientation
        Gravity in the picture.
    cuts : sequence of int, optional
        Frames at which the camera was bumped: the step that reaches such a frame is left out.
    left_out : ndarray of bool, shape (len(tracks),), optional
        Rows that a person left out.

    Returns
    -------
    paths : list of Path
        One for each droplet number, in that order; a path may be empty.
    """
    sightings, recording, times = tracks.sightings, view.recording, view.recording.frame_times
    x, y = to_metres(view.scale, sightings.x, sightings.y)
    angle = np.deg2rad(orientation.down_deg)
    cos, sin = np.cos(angle), np.sin(angle)
    x_std = sightings.x_std * view.scale.metres_per_pixel_x
    y_std = sightings.y_std * view.scale.metres_per_pixel_y
    impulse = field_impulse(view.field.knot_times, view.field.knot_volts, times, view.exposure)
    spans = uncertain_spans(view.field, frame_interval=recording.frame_interval)
    usable = (
        np.isfinite(x) & np.isfinite(y) & (x_std > 0) & (y_std > 0)
        & ((sightings.flags & int(LEFT_OUT)) == 0) & ~np.isin(sightings.frame, recording.repeated)
    )  # fmt: skip
    if left_out is not None:
        usable &= ~left_out
    found = []
    for droplet in tracks.numbers:
        span = tracks.rows(int(droplet))
        rows = np.arange(span.start, span.stop)[usable[span]]
        frames = sightings.frame[rows]
        breaks = _breaks(times[frames], frames, exposure=view.exposure, spans=spans, cuts=cuts)
        found.append(Path(
            int(droplet), frames, times[frames],
            y[rows] * cos + x[rows] * sin, x[rows] * cos - y[rows] * sin,
            np.hypot(y_std[rows] * cos, x_std[rows] * sin), np.hypot(x_std[rows] * cos, y_std[rows] * sin),
            impulse[frames], view.exposure, breaks, view.blur,
        ))  # fmt: skip
    return found


def _breaks(
    times: FloatArray, frames: IntArray, *, exposure: float, spans: FloatArray, cuts: Sequence[int] | IntArray
) -> np.ndarray:
    """Mark steps whose change of voltage is not known, or over which the camera was bumped."""
    broken = np.zeros(max(len(times) - 1, 0), bool)
    for first, last in spans:
        broken |= (times[:-1] < last) & (times[1:] + exposure > first)
    for cut in cuts:
        broken |= (frames[:-1] < cut) & (frames[1:] >= cut)
    return broken


@dataclass(frozen=True, slots=True)
class _Speeds:
    """Speeds of one droplet along both picture axes."""

    fall: FloatArray  # (2,) m/s along down and side, field off
    drive: FloatArray  # (2,) m/s per V
    fall_var: float  # (m/s)^2 of each component
    drive_var: float  # (m/s per V)^2 of each component; inf if the field never changed


def _speeds(path: Path) -> _Speeds | None:
    """Fit speed and drive along both axes, quickly; None if the track is too short or stands still.

    Steps are weighed as if independent, which costs a few per cent of precision. The diffusion behind the variances
    is the covariance-based estimate of both axes, <d^2>/2dt + <d d'>/dt (Vestergaard et al., Phys. Rev. E 89, 022726).
    """
    steps = path.steps
    if len(steps) < MIN_INCREMENTS:
        return None
    driven = bool(np.ptp(steps.impulse / steps.dt) > 0)
    weight = 1 / np.sqrt(steps.dt)[:, None]
    design = np.column_stack([steps.dt, steps.impulse]) if driven else steps.dt[:, None]
    both = np.column_stack([steps.down, steps.side])
    found = np.linalg.lstsq(design * weight, both * weight, rcond=None)[0]
    left = both - design @ found
    joined = steps.last[:-1] == steps.first[1:]
    size, beside = (
        float(np.mean(left**2)),
        float(np.mean((left[:-1] * left[1:])[joined])) if np.any(joined) else 0.0,
    )
    diffusion = max(size + 2 * beside, 0.1 * size) / (2 * float(np.mean(steps.dt)))
    normal = (design * weight).T @ (design * weight)
    if not diffusion > 0 or np.linalg.matrix_rank(normal, hermitian=True) < len(normal):
        return None
    variance = 2 * diffusion * np.diag(np.linalg.inv(normal))
    drive, drive_var = (found[1], float(variance[1])) if driven else (np.zeros(2), float("inf"))
    return _Speeds(found[0], drive, float(variance[0]), drive_var)


def fit_orientation(tracks: Tracks, view: View, *, down_deg: float | None = None) -> Orientation:
    """Find gravity's direction in the picture from the motion that is common to all droplets.

    Parameters
    ----------
    tracks : Tracks
        In px.
    view : View
        Recording, voltage and scale.
    down_deg : float, optional
        Gravity as the bench file states it; it is then only checked.

    Returns
    -------
    orientation : Orientation
        From the bench; else from the drive, which points along the field and so along gravity between level
        plates whatever the air does; else from the fall, where air that drifts sideways turns it.

    Notes
    -----
    With drives b_j = b_j u of equal variance along x and y, the direction u is the principal axis of
    sum_j b_j b_j^T / var_j; its sense is the one in which the droplets fall.
    """
    assumed, seen = Orientation(down_deg or 0.0, 0.0, "picture"), None
    for _ in range(2):  # the weights of the second look are those of the right axes
        found = paths(tracks, view, assumed)
        fits = [fit for fit in (_speeds(path) for path in found if len(path) > MIN_INCREMENTS) if fit]
        drive, significance = _axis([fit.drive for fit in fits], [fit.drive_var for fit in fits])
        fall = np.sum([fit.fall / fit.fall_var for fit in fits], axis=0) if fits else np.zeros(2)
        if drive is not None and _falls_along(fits, drive) < 0:
            drive = -drive
        turned = 0.0 if drive is None else float(np.rad2deg(np.arctan2(drive[1], drive[0])))
        seen = None if drive is None else (assumed.down_deg + turned + 180) % 360 - 180
        if seen is None or significance <= LEAST_DRIVE or abs(turned) < 5:
            break
        assumed = Orientation(seen, 0.0, "drive")
    std = float(np.rad2deg(1 / significance)) if significance > 0 else float("inf")
    if down_deg is not None:
        return Orientation(down_deg, 0.0, "bench", _stated_warning(down_deg, seen, std, significance))
    if seen is not None and significance > LEAST_DRIVE:
        return Orientation(seen, std, "drive", _turned_warning(seen))
    return _from_fall(fits, fall, assumed.down_deg)


def _falls_along(fits: list[_Speeds], axis: FloatArray) -> float:
    """Sum of the droplets' votes for the sense of an axis; one strange track has one vote."""
    return float(sum(np.clip(fit.fall @ axis / np.sqrt(fit.fall_var), -5, 5) for fit in fits))


def _axis(vectors: list[FloatArray], variances: list[float]) -> tuple[FloatArray | None, float]:
    """Principal axis of vectors, and how many of its standard deviations it is long."""
    matrix = np.zeros((2, 2))
    for vector, variance in zip(vectors, variances, strict=True):
        if np.isfinite(variance) and variance > 0:
            matrix += np.outer(vector, vector) / variance
    values, axes = np.linalg.eigh(matrix)
    # The smaller eigenvalue is the noise of all droplets across the axis; the larger holds as much of it.
    signal = float(values[1] - values[0])
    return (axes[:, 1], float(np.sqrt(signal))) if signal > 0 else (None, 0.0)


def _from_fall(fits: list[_Speeds], fall: FloatArray, assumed: float) -> Orientation:
    """Direction of the mean fall, if it is sure enough; else the picture's own."""
    weight = float(np.sum([1 / fit.fall_var for fit in fits]))
    length = float(np.hypot(*fall))
    if weight == 0 or length / np.sqrt(weight) < LEAST_DRIVE:
        note = "gravity's direction cannot be told from the motion; straight down in the picture is used"
        return Orientation(0.0, 0.0, "picture", (note,))
    angle = assumed + float(np.rad2deg(np.arctan2(fall[1], fall[0])))
    std = float(np.rad2deg(np.sqrt(weight) / length))
    note = (
        "gravity's direction is that of the fall, since no drive is seen; air that drifts sideways turns it"
    )
    return Orientation(angle, std, "fall", (note, *_turned_warning(angle)))


def _turned_warning(angle: float) -> tuple[str, ...]:
    if abs(angle) <= 20:
        return ()
    return (
        f"gravity points {angle:.1f} degrees from straight down in the picture; if so, state camera.down",
    )


def _stated_warning(stated: float, seen: float | None, std: float, significance: float) -> tuple[str, ...]:
    """Say if the drive contradicts the stated direction."""
    if seen is None or significance <= LEAST_DRIVE:
        return ()
    apart = (seen - stated + 180) % 360 - 180
    if abs(apart) <= 4 * std + 0.5:
        return ()
    return (
        f"camera.down is {stated:.2f} degrees, the drive of the droplets points to {seen:.2f}({std:.2f})",
    )


def without_outliers(path: Path) -> tuple[Path, int, tuple[int, ...], FreeFit | None]:
    """Leave out single sightings, and steps, that do not belong to the droplet's motion.

    Parameters
    ----------
    path : Path
        Of one droplet.

    Returns
    -------
    path : Path
        Without them.
    outliers : int
        Sightings that were left out.
    hops : tuple of int
        Frames at which the droplet's place jumped for good: the step is left out, the sightings stay.
    fit : FreeFit or None
        Of what is left; None if the steps are too few.

    Notes
    -----
    Sightings by `physics.freefit.robust_increments`. A whitened residual beyond 5 that is left after that is a
    lasting jump; chance gives one step in 1.7 million.
    """
    hops: list[int] = []
    if len(path.steps) < MIN_INCREMENTS:
        return path, 0, (), None
    _, marked, fit = robust_increments(path.steps)
    for sighting in marked[::-1]:
        path = path.without(int(sighting))
    if len(marked) or fit is None:
        fit = _fit(path)
    while fit is not None and len(hops) < MOST_HOPS:
        size = np.maximum(np.abs(fit.down_residuals), np.abs(fit.side_residuals))
        worst = int(np.argmax(size))
        if size[worst] <= OUTLIER:
            break
        step = int(path.steps.first[worst])
        hops.append(int(path.frames[step + 1]))
        path = path.cut(step)
        fit = _fit(path)
    return path, len(marked), tuple(sorted(hops)), fit


def _fit(path: Path) -> FreeFit | None:
    """Fit a path; None if the steps are too few."""
    return free_fit(path.steps) if len(path.steps) >= MIN_INCREMENTS else None
