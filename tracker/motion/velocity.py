"""Tracks in metres along and across gravity: gravity's direction, steps, and sightings that are left out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from calibration.scale import Scale, to_metres
from physics.errors import PhysicsError
from physics.increments import Increments, field_impulse, increments, whitened
from tracker.motion.field import uncertain_spans
from tracker.records import Field, Flag, FloatArray, IntArray, Recording, Tracks, readonly

OUTLIER = 5.0  # whitened residual beyond which one sighting, or one step, does not belong to the droplet
LEFT_OUT = Flag.MERGED | Flag.EDGE  # sightings whose place may be biased by more than it is uncertain
LEAST_STEPS = 8  # for a fit of speeds, diffusion and noise
LEAST_DRIVE = 5.0  # significance that the drive must reach, over all droplets, to give gravity's direction


@dataclass(frozen=True, slots=True)
class Orientation:
    """Gravity in the picture."""

    down_deg: float  # from straight down toward +x
    down_deg_std: float
    origin: str  # bench, drive, fall or picture
    warnings: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Path:
    """One droplet's sightings that may be used, along and across gravity."""

    droplet: int
    rows: IntArray  # (N,) rows of the tracks
    frames: IntArray  # (N,)
    times: FloatArray  # (N,) s, start of exposure
    down: FloatArray  # (N,) m along gravity
    side: FloatArray  # (N,) m across gravity, +x for gravity straight down
    down_std: FloatArray  # (N,) m
    side_std: FloatArray  # (N,) m
    impulse: FloatArray  # (N,) V s, exposure average of the time integral of the voltage
    exposure: float  # s
    breaks: np.ndarray  # (N - 1,) bool: steps over an uncertain toggle, a bump of the camera or a hop

    def __post_init__(self) -> None:
        for name in ("times", "down", "side", "down_std", "side_std", "impulse"):
            object.__setattr__(self, name, readonly(getattr(self, name)))
        for name in ("rows", "frames"):
            object.__setattr__(self, name, readonly(getattr(self, name), np.int64))
        object.__setattr__(self, "breaks", readonly(self.breaks, np.bool_))

    def __len__(self) -> int:
        return len(self.times)

    def without(self, sighting: int) -> Path:
        """Leave one sighting out; the steps beside it become one."""
        keep = np.arange(len(self)) != sighting
        inner = 0 < sighting < len(self) - 1
        breaks = np.delete(self.breaks, min(sighting, len(self.breaks) - 1))
        if inner and self.breaks[sighting - 1]:
            breaks[sighting - 1] = True
        columns = ("rows", "frames", "times", "down", "side", "down_std", "side_std", "impulse")
        return replace(self, **{name: getattr(self, name)[keep] for name in columns}, breaks=breaks)

    def cut(self, step: int) -> Path:
        """Leave one step out."""
        breaks = self.breaks.copy()
        breaks[step] = True
        return replace(self, breaks=breaks)

    def steps(self, part: IntArray | None = None) -> Increments:
        """Give the steps between neighbouring sightings; `part` is the charge part of each of N - 1 steps."""
        return increments(
            self.times, self.down, self.side, down_std=self.down_std, side_std=self.side_std,
            impulse=self.impulse, exposure=self.exposure, breaks=self.breaks, part=part,
        )  # fmt: skip

    def used_rows(self) -> IntArray:
        """Rows of the tracks that at least one step rests on."""
        alone = np.concatenate(([True], self.breaks)) & np.concatenate((self.breaks, [True]))
        return self.rows[~alone]


def paths(
    tracks: Tracks, recording: Recording, *, field: Field, scale: Scale, exposure: float,
    orientation: Orientation, cuts: Sequence[int] = (),
) -> list[Path]:  # fmt: skip
    """Bring tracks into metres along and across gravity, without the sightings that cannot be used.

    Parameters
    ----------
    tracks : Tracks
        In px.
    recording : Recording
        Frame times and repeated frames; a repeated picture says nothing of its own time and is left out.
    field : Field
        Voltage over time; steps over a toggle whose time is uncertain are left out.
    scale : Scale
        Of the recording's pixels.
    exposure : float
        Of a frame in s.
    orientation : Orientation
        Gravity in the picture.
    cuts : sequence of int, optional
        Frames at which the camera was bumped: the step that reaches such a frame is left out.

    Returns
    -------
    paths : list of Path
        One for each droplet number, in that order; a path may be empty.
    """
    sightings, times = tracks.sightings, recording.frame_times
    x, y = to_metres(scale, sightings.x, sightings.y)
    angle = np.deg2rad(orientation.down_deg)
    cos, sin = np.cos(angle), np.sin(angle)
    x_std, y_std = sightings.x_std * scale.metres_per_pixel_x, sightings.y_std * scale.metres_per_pixel_y
    impulse = field_impulse(field.knot_times, field.knot_volts, times, exposure)
    spans = uncertain_spans(field, frame_interval=recording.frame_interval)
    usable = (
        np.isfinite(x) & np.isfinite(y) & (x_std > 0) & (y_std > 0)
        & ((sightings.flags & int(LEFT_OUT)) == 0) & ~np.isin(sightings.frame, recording.repeated)
    )  # fmt: skip
    found = []
    for droplet in tracks.numbers:
        span = tracks.rows(int(droplet))
        rows = np.arange(span.start, span.stop)[usable[span]]
        frames = sightings.frame[rows]
        breaks = _breaks(times[frames], frames, exposure=exposure, spans=spans, cuts=cuts)
        found.append(Path(
            int(droplet), rows, frames, times[frames],
            y[rows] * cos + x[rows] * sin, x[rows] * cos - y[rows] * sin,
            np.hypot(y_std[rows] * cos, x_std[rows] * sin), np.hypot(x_std[rows] * cos, y_std[rows] * sin),
            impulse[frames], exposure, breaks,
        ))  # fmt: skip
    return found


def _breaks(
    times: FloatArray, frames: IntArray, *, exposure: float, spans: FloatArray, cuts: Sequence[int]
) -> np.ndarray:
    """Mark steps whose change of voltage is not known, or over which the camera was bumped."""
    broken = np.zeros(max(len(times) - 1, 0), bool)
    for first, last in spans:
        broken |= (times[:-1] < last) & (times[1:] + exposure > first)
    for cut in cuts:
        broken |= (frames[:-1] < cut) & (frames[1:] >= cut)
    return broken


@dataclass(frozen=True, slots=True)
class RoughFit:
    """Speeds along both picture axes with diffusion and noise; the first look at a droplet."""

    speed: FloatArray  # (2,) m/s along down and side, field off
    drive: FloatArray  # (2,) m/s per V
    speed_var: float  # (m/s)^2 of each component
    drive_var: float  # (m/s per V)^2 of each component; inf if the field never changed
    diffusion: float  # m^2/s
    rho: float  # s


def rough_fit(steps: Increments) -> RoughFit | None:
    """Fit speed and drive along both axes, with diffusion and noise from the steps' own covariance.

    Parameters
    ----------
    steps : Increments
        Of one droplet.

    Returns
    -------
    fit : RoughFit or None
        None if the steps are too few or do not vary.

    Notes
    -----
    Diffusion and noise by the covariance-based estimator (Vestergaard et al., Phys. Rev. E 89, 022726): with
    residuals d of the speeds, s^2 = -<d_k d_k+1> + D tau/3 and D = (<d^2> - 2 s^2) / <2 dt - 2 tau/3>. Good
    enough to weigh steps; final values come from `physics.motion`.
    """
    if len(steps) < LEAST_STEPS:
        return None
    driven = np.ptp(steps.impulse / steps.dt) > 0
    design = np.column_stack([steps.dt, steps.impulse]) if driven else steps.dt[:, None]
    diffusion, rho = _moments(steps, design)
    if not diffusion > 0:
        return None
    white = [whitened(steps, diffusion=diffusion, rho=rho, columns=design, axis=axis) for axis in _AXES]
    normal = white[0].columns.T @ white[0].columns
    if np.linalg.cond(normal) > 1e14:
        return None
    covariance = np.linalg.inv(normal)
    found = np.array([np.linalg.lstsq(w.columns, w.data, rcond=None)[0] for w in white])
    drive = found[:, 1] if driven else np.zeros(2)
    drive_var = float(covariance[1, 1]) if driven else float("inf")
    return RoughFit(found[:, 0], drive, float(covariance[0, 0]), drive_var, diffusion, rho)


_AXES: tuple[Literal["down"], Literal["side"]] = ("down", "side")


def _moments(steps: Increments, design: FloatArray) -> tuple[float, float]:
    """D in m^2/s and s^2/D in s from second moments of the residuals along both axes."""
    residuals = [_residual(data, design) for data in (steps.down, steps.side)]
    joined = steps.blur_off > 0 if steps.exposure > 0 else np.diff(steps.first) == 1
    size = float(np.mean([np.mean(r**2) for r in residuals]))
    if not (size > 0 and np.any(joined)):
        return size / (2 * float(np.mean(steps.dt))), 0.1 * float(np.median(steps.dt))
    neighbours = float(np.mean([np.mean(r[:-1][joined] * r[1:][joined]) for r in residuals]))
    third = steps.exposure / 3
    # <d^2> = D (2 dt - 2 tau/3) + 2 s^2 and <d d'> = D tau/3 - s^2, so <d^2> + 2 <d d'> = 2 D dt.
    diffusion = (size + 2 * neighbours) / (2 * float(np.mean(steps.dt)))
    diffusion = min(
        max(diffusion, 0.05 * size / (2 * float(np.mean(steps.dt)))), size / float(np.mean(steps.dt))
    )
    return diffusion, max((diffusion * third - neighbours) / diffusion, 1e-4 * float(np.median(steps.dt)))


def _residual(data: FloatArray, design: FloatArray) -> FloatArray:
    residual: FloatArray = data - design @ np.linalg.lstsq(design, data, rcond=None)[0]
    return residual


def fit_orientation(
    tracks: Tracks, recording: Recording, *, field: Field, scale: Scale, exposure: float,
    down_deg: float | None = None,
) -> Orientation:  # fmt: skip
    """Find gravity's direction in the picture from the motion that is common to all droplets.

    Parameters
    ----------
    tracks : Tracks
        In px.
    recording : Recording
        Frame times.
    field : Field
        Voltage over time.
    scale : Scale
        Of the recording's pixels.
    exposure : float
        Of a frame in s.
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
    picture = Orientation(0.0, 0.0, "picture")
    found = paths(tracks, recording, field=field, scale=scale, exposure=exposure, orientation=picture)
    fits = [fit for fit in (rough_fit(path.steps()) for path in found if len(path) > LEAST_STEPS) if fit]
    drive, significance = _axis([fit.drive for fit in fits], [fit.drive_var for fit in fits])
    fall = np.sum([fit.speed / fit.speed_var for fit in fits], axis=0) if fits else np.zeros(2)
    if drive is not None and fall @ drive < 0:
        drive = -drive
    seen = None if drive is None else float(np.rad2deg(np.arctan2(drive[1], drive[0])))
    std = float(np.rad2deg(1 / significance)) if significance > 0 else float("inf")
    if down_deg is not None:
        return Orientation(down_deg, 0.0, "bench", _stated_warning(down_deg, seen, std, significance))
    if seen is not None and significance > LEAST_DRIVE:
        return Orientation(seen, std, "drive", _turned_warning(seen))
    return _from_fall(fits, fall)


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


def _from_fall(fits: list[RoughFit], fall: FloatArray) -> Orientation:
    """Direction of the mean fall, if it is sure enough; else the picture's own."""
    weight = float(np.sum([1 / fit.speed_var for fit in fits]))
    length = float(np.hypot(*fall))
    if weight == 0 or length / np.sqrt(weight) < LEAST_DRIVE:
        note = "gravity's direction cannot be told from the motion; straight down in the picture is used"
        return Orientation(0.0, 0.0, "picture", (note,))
    angle, std = float(np.rad2deg(np.arctan2(fall[1], fall[0]))), float(np.rad2deg(np.sqrt(weight) / length))
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


def without_outliers(path: Path) -> tuple[Path, int, tuple[int, ...]]:
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

    Notes
    -----
    A whitened residual beyond 5 marks a step; chance gives one in 1.7 million. If leaving out the sighting at
    one of its ends heals the track, that sighting was wrong; else the place itself jumped.
    """
    outliers, hops = 0, []
    limit = max(3, len(path) // 10)
    for _ in range(limit):
        worst = _worst_step(path)
        if worst is None:
            break
        step, size = worst
        healed = [(_size_at(path.without(end), path.times[end]), end) for end in (step, step + 1)]
        best, end = min(healed)
        if best < max(OUTLIER - 1.0, 0.6 * min(size, 8.0)) and best < size:
            path, outliers = path.without(end), outliers + 1
        else:
            hops.append(int(path.frames[step + 1]))
            path = path.cut(step)
    return path, outliers, tuple(sorted(hops))


def residuals(path: Path) -> tuple[Increments, FloatArray] | None:
    """Whitened residuals of the rough fit along gravity and across it.

    Parameters
    ----------
    path : Path
        Of one droplet.

    Returns
    -------
    steps : Increments
        That they belong to.
    residuals : ndarray of shape (2, N)
        Standard normal for one droplet with one charge. None in place of both if no fit is possible.
    """
    try:
        steps = path.steps()
        fit = rough_fit(steps)
    except PhysicsError:
        return None
    if fit is None:
        return None
    columns = np.column_stack([steps.dt, steps.impulse])
    scale = 1.0
    found = []
    for axis, data_speed, data_drive in zip(_AXES, fit.speed, fit.drive, strict=True):
        white = whitened(steps, diffusion=fit.diffusion, rho=fit.rho, columns=columns, axis=axis)
        found.append(white.data - white.columns @ np.array([data_speed, data_drive]))
    both = np.array(found)
    # One wrong sighting widens D; the spread of the middle half does not see it.
    spread = float(np.median(np.abs(both))) / 0.6745
    scale = min(scale, spread) if spread > 0 else 1.0
    return steps, both / scale


def _worst_step(path: Path) -> tuple[int, float] | None:
    """Step with the largest residual beyond `OUTLIER`, counted between the sightings of the path."""
    found = residuals(path)
    if found is None:
        return None
    steps, both = found
    size = np.max(np.abs(both), axis=0)
    worst = int(np.argmax(size))
    return (int(steps.first[worst]), float(size[worst])) if size[worst] > OUTLIER else None


def _size_at(path: Path, time: float) -> float:
    """Largest residual of the steps that hold, or neighbour, a time."""
    found = residuals(path)
    if found is None:
        return float("inf")
    steps, both = found
    begin, end = path.times[steps.first], path.times[steps.first + 1]
    near = np.flatnonzero((begin <= time) & (end >= time))
    if len(near) == 0:
        return 0.0
    window = slice(max(near[0] - 1, 0), near[-1] + 2)
    return float(np.max(np.abs(both[:, window])))
