"""Steps between sightings of one diffusing droplet: their mean, their covariance, and the whitening of both.

The camera averages the droplet's place over each exposure, so with steady drift and Brownian motion the steps
between sightings are exactly Gaussian, and only neighbours are correlated::

    C = D (A + rho M),   rho = s^2 / D
    A_kk = 2 dt_k - 2 tau/3,   A_k,k+1 = tau/3          (Brownian motion, exposure tau)
    M_kk = w_k^2 + w_k+1^2,    M_k,k+1 = -w_k+1^2       (noise of the places, s w_k at sighting k)

A missing frame is a longer dt_k. A step that is left out ends a chain: its neighbours share nothing. [1]_ [2]_

References
----------
.. [1] A. J. Berglund, Statistics of camera-based single-particle tracking, Phys. Rev. E 82 (2010), 011917.
.. [2] C. L. Vestergaard, P. C. Blainey, H. Flyvbjerg, Optimal estimation of diffusion coefficients from
   single-particle trajectories, Phys. Rev. E 89 (2014), 022726.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, DTypeLike, NDArray
from scipy.linalg import lapack

from physics.errors import PhysicsError

__all__ = ["Increments", "Whitened", "field_impulse", "increments", "segment_occupancy", "whitened"]

FloatArray = NDArray[np.float64]
Axis = Literal["down", "side"]


def field_impulse(
    knot_times: ArrayLike, knot_volts: ArrayLike, starts: ArrayLike, exposure: float
) -> FloatArray:
    """Time integral of the voltage, averaged over each exposure.

    Parameters
    ----------
    knot_times : array_like of shape (K,)
        In s, never decreasing; two equal times make a jump. Straight lines between knots, constant outside.
    knot_volts : array_like of shape (K,)
        Voltage of the top plate against the bottom plate in V.
    starts : array_like of shape (N,)
        Starts of the exposures in s, on the same clock, in any order.
    exposure : float
        Length of each exposure in s; 0 gives the integral at `starts`.

    Returns
    -------
    impulse : ndarray of shape (N,)
        In V s, counted from the first knot; only differences matter.

    Raises
    ------
    PhysicsError
        If the knots are not finite, of one length and ordered, or the exposure is negative.

    Notes
    -----
    With F(t) the integral of V from the first knot, the result is (1/tau) times the integral of F from s to
    s + tau. F is a quadratic between knots, so Simpson's rule on each stretch without a knot is exact.
    """
    times, volts = _knots(knot_times, knot_volts)
    start = np.asarray(starts, dtype=np.float64)
    if not exposure >= 0:
        raise PhysicsError("exposure", exposure, "0 s or longer")
    if exposure == 0 or start.size == 0:
        return _integral(times, volts, start)
    edges = np.unique(np.concatenate([start, start + exposure, times]))
    middle = 0.5 * (edges[1:] + edges[:-1])
    at_edge = _integral(times, volts, edges)
    cell = np.diff(edges) / 6 * (at_edge[1:] + at_edge[:-1] + 4 * _integral(times, volts, middle))
    bounds = np.searchsorted(edges, np.stack([start, start + exposure], axis=1)).ravel()
    return np.asarray(np.add.reduceat(np.append(cell, 0.0), bounds)[::2] / exposure)


def _knots(knot_times: ArrayLike, knot_volts: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Check the knots of a voltage."""
    times = np.atleast_1d(np.asarray(knot_times, dtype=np.float64))
    volts = np.atleast_1d(np.asarray(knot_volts, dtype=np.float64))
    if times.shape != volts.shape or times.ndim != 1 or times.size == 0:
        raise PhysicsError("knot_volts", volts.shape, f"one value for each of the {times.size} knot times")
    if not (np.all(np.isfinite(times)) and np.all(np.isfinite(volts))):
        raise PhysicsError("knots", "not finite", "finite times and volts")
    if np.any(np.diff(times) < 0):
        raise PhysicsError("knot_times", "decreasing", "never decreasing")
    return times, volts


def _integral(times: FloatArray, volts: FloatArray, at: FloatArray) -> FloatArray:
    """Integral of the piecewise linear voltage from the first knot to `at`."""
    step = np.diff(times)
    to_knot = np.concatenate([[0.0], np.cumsum(0.5 * step * (volts[1:] + volts[:-1]))])
    slope = np.append(np.divide(np.diff(volts), step, out=np.zeros_like(step), where=step > 0), 0.0)
    knot = np.searchsorted(times, at, side="right") - 1
    before = knot < 0
    knot = np.maximum(knot, 0)
    since = at - times[knot]
    bend = np.where(before, 0.0, slope[knot])
    return np.asarray(to_knot[knot] + since * (volts[knot] + 0.5 * bend * since))


def segment_occupancy(starts: ArrayLike, ends: ArrayLike, times: ArrayLike, exposure: float) -> FloatArray:
    """Seconds that each step between sightings spends in each segment, averaged over the exposures.

    Parameters
    ----------
    starts, ends : array_like of shape (S,)
        Start and end of each segment in s.
    times : array_like of shape (N + 1,)
        Starts of the exposures of the sightings in s, increasing.
    exposure : float
        In s.

    Returns
    -------
    occupancy : ndarray of shape (N, S)
        In s; a row sums to the step's dt where the segments cover it. A segment's speed times its column is
        what that segment adds to the steps, exactly, also where a change falls within an exposure.
    """
    begin, end = np.atleast_1d(starts)[None, :], np.atleast_1d(ends)[None, :]
    opens = np.asarray(times, dtype=np.float64)[:, None]
    before, after = (np.clip(at, begin, end) - begin for at in (opens, opens + exposure))
    if exposure > 0:  # mean over the exposure of the seconds spent until then, which run in straight lines
        beyond = np.clip(opens + exposure - end, 0.0, exposure)
        inside = 0.5 * (after - before) * (after + before)
        before = (inside + beyond * (end - begin)) / exposure
    return np.asarray(np.diff(before, axis=0))


@dataclass(frozen=True, slots=True)
class Increments:
    """Steps of one droplet between neighbouring sightings, with all that their likelihood needs."""

    dt: FloatArray  # (N,) s between starts of exposure
    down: FloatArray  # (N,) m along gravity
    side: FloatArray  # (N,) m across gravity
    impulse: FloatArray  # (N,) V s, step of `field_impulse`
    blur_diag: FloatArray  # (N,) s, A_kk
    blur_off: FloatArray  # (N - 1,) s, A_k,k+1; 0 between chains
    noise_diag: FloatArray  # (N,) M_kk of the places along gravity
    noise_off: FloatArray  # (N - 1,) M_k,k+1; 0 between chains
    side_noise_diag: FloatArray  # (N,) M_kk of the places across gravity
    side_noise_off: FloatArray  # (N - 1,)
    part: NDArray[np.int64]  # (N,) number of the charge part, from 0
    first: NDArray[np.int64]  # (N,) index of the sighting that each step starts from
    last: NDArray[np.int64]  # (N,) and of the one that it ends at
    typical_std: float  # m, the place noise that relative weight 1 stands for, as it was given
    exposure: float  # s

    def __post_init__(self) -> None:
        for name in _FLOAT_COLUMNS:
            object.__setattr__(self, name, readonly(getattr(self, name), np.float64))
        for name in ("part", "first", "last"):
            object.__setattr__(self, name, readonly(getattr(self, name), np.int64))

    def __len__(self) -> int:
        return len(self.dt)

    @property
    def parts(self) -> int:
        """Number of charge parts."""
        return int(self.part.max()) + 1 if len(self) else 1

    @property
    def same_noise(self) -> bool:
        """Both axes have the same covariance."""
        same = np.array_equal(self.noise_diag, self.side_noise_diag)
        return same and np.array_equal(self.noise_off, self.side_noise_off)

    def select(self, keep: ArrayLike) -> Increments:
        """Leave out steps: a mask of those that stay; the steps around a gap share nothing."""
        rows = np.flatnonzero(keep)
        joined = np.diff(rows) == 1
        columns = {name: getattr(self, name)[rows] for name in _STEP_COLUMNS}
        off = {name: getattr(self, name)[rows[:-1]] * joined for name in _OFF_COLUMNS}
        return replace(self, **columns, **off)

    def without_sightings(self, sightings: ArrayLike) -> Increments:
        """Leave out sightings: the steps to and from each become one, exactly as if it had been a missing frame.

        Where its steps belong to different charge parts, or a chain begins or ends there, they are left out.
        """
        out = np.asarray(sightings, dtype=np.int64)
        joined = self.last[:-1] == self.first[1:]
        merge = joined & np.isin(self.last[:-1], out) & (self.part[:-1] == self.part[1:])
        start = np.flatnonzero(np.concatenate([[True], ~merge])) if len(self) else np.empty(0, np.int64)
        columns: dict[str, Any] = {
            name: _sum_groups(getattr(self, name), start) for name in ("dt", "down", "side", "impulse")
        }
        for name, off in _DIAGONALS.items():
            inner = np.append(2 * getattr(self, off) * merge, 0.0)[: len(self)]
            columns[name] = _sum_groups(getattr(self, name) + inner, start)
        columns |= {off: getattr(self, off)[start[1:] - 1] for off in _OFF_COLUMNS}
        end = np.append(start[1:], len(self)) - 1 if len(self) else start
        columns |= {"part": self.part[start], "first": self.first[start], "last": self.last[end]}
        merged = replace(self, **columns)
        return merged.select(~(np.isin(merged.first, out) | np.isin(merged.last, out)))


_FLOAT_COLUMNS = (
    "dt", "down", "side", "impulse", "blur_diag", "blur_off",
    "noise_diag", "noise_off", "side_noise_diag", "side_noise_off",
)  # fmt: skip


_DIAGONALS = {"blur_diag": "blur_off", "noise_diag": "noise_off", "side_noise_diag": "side_noise_off"}
_OFF_COLUMNS = tuple(_DIAGONALS.values())
_STEP_COLUMNS = ("dt", "down", "side", "impulse", *_DIAGONALS, "part", "first", "last")


def _sum_groups(values: FloatArray, start: NDArray[np.int64]) -> FloatArray:
    """Sum runs of values that begin at `start`."""
    return np.asarray(np.add.reduceat(values, start)) if len(start) else values


def readonly(values: ArrayLike, dtype: DTypeLike | None = None) -> NDArray[Any]:
    """Give a read-only view of the values."""
    array: NDArray[Any] = np.asarray(values, dtype=dtype).view()
    array.flags.writeable = False
    return array


def freeze_arrays(record: object, names: tuple[str, ...]) -> None:
    """Make the named arrays of a frozen record read-only."""
    for name in names:
        object.__setattr__(record, name, readonly(getattr(record, name)))


def increments(  # noqa: PLR0913 - one sighting has that many columns
    times: ArrayLike,
    down: ArrayLike,
    side: ArrayLike,
    *,
    down_std: ArrayLike,
    side_std: ArrayLike,
    impulse: ArrayLike,
    exposure: float,
    blur: float | None = None,
    breaks: ArrayLike | None = None,
    part: ArrayLike | None = None,
) -> Increments:
    """Take the steps between neighbouring sightings of one droplet.

    Parameters
    ----------
    times : array_like of shape (N + 1,)
        Starts of exposure in s, increasing; missing frames are simply absent.
    down, side : array_like of shape (N + 1,)
        Places along and across gravity in m.
    down_std, side_std : array_like of shape (N + 1,) or float
        Standard deviations of the places in m, above 0. Only their ratios enter: the common size is free in
        every fit. The typical one (root of the median variance of both axes) has weight 1.
    impulse : array_like of shape (N + 1,)
        `field_impulse` at `times`, in V s.
    exposure : float
        In s; at least 0. The covariance is exact up to the shortest step; up to 1.25 times the shortest step is
        taken too, so that rounded frame times of an always open shutter pass.
    blur : float, optional
        Exposure in s that the blur of Brownian motion is worked out with; `exposure` if not given. An exposure
        longer than the true one is exact for places of equal noise: A(tau) = A(tau') + (tau' - tau)/3 M, so the
        difference is place noise, which every fit leaves free. A shorter one is not, since noise is never negative.
    breaks : array_like, optional
        Steps to leave out (a toggle whose time is uncertain, a bumped camera, a cut): a mask of shape (N,) or
        indices. The steps on both sides are then uncorrelated.
    part : array_like of shape (N,), optional
        Number of the charge part of each step, from 0; the default is one part.

    Returns
    -------
    steps : Increments
        The steps that are not left out, in order of time.

    Raises
    ------
    PhysicsError
        If lengths differ, a value is not finite, times do not increase or a standard deviation is not above 0.
    """
    columns = _sighting_columns(times, down, side, down_std, side_std, impulse)
    time, y, x, y_std, x_std, volt_seconds = columns
    count = len(time) - 1
    dt = np.diff(time)
    blurred = exposure if blur is None else blur
    for name, value in (("exposure", exposure), ("blur", blurred)):
        if not value >= 0 or np.any(value > 1.25 * dt):
            raise PhysicsError(name, value, "from 0 s to 1.25 times the shortest step")
    keep = ~_mask(breaks, count)
    first = np.flatnonzero(keep)
    joined = np.diff(first) == 1
    typical = float(np.sqrt(np.median(np.concatenate([y_std, x_std]) ** 2)))
    noise = [_noise((std / typical) ** 2, first, joined) for std in (y_std, x_std)]
    numbers = np.zeros(count, np.int64) if part is None else np.asarray(part, dtype=np.int64)
    if numbers.shape != (count,) or np.any(numbers < 0):
        raise PhysicsError("part", numbers.shape, f"{count} numbers from 0, one a step")
    return Increments(
        dt=dt[first], down=np.diff(y)[first], side=np.diff(x)[first], impulse=np.diff(volt_seconds)[first],
        blur_diag=2 * dt[first] - 2 * blurred / 3, blur_off=joined * (blurred / 3),
        noise_diag=noise[0][0], noise_off=noise[0][1], side_noise_diag=noise[1][0], side_noise_off=noise[1][1],
        part=numbers[first], first=first, last=first + 1, typical_std=typical, exposure=float(exposure),
    )  # fmt: skip


def _sighting_columns(*columns: ArrayLike) -> list[FloatArray]:
    """Check the columns of the sightings and give them one length."""
    names = ("times", "down", "side", "down_std", "side_std", "impulse")
    times = np.asarray(columns[0], dtype=np.float64)
    if times.ndim != 1 or len(times) == 0:
        raise PhysicsError("times", times.shape, "a flat array with at least one sighting")
    checked = []
    for name, column in zip(names, columns, strict=True):
        array = np.asarray(column, dtype=np.float64)
        if array.shape not in ((), times.shape):
            raise PhysicsError(name, array.shape, f"of the shape of times, {times.shape}")
        if not np.all(np.isfinite(array)):
            raise PhysicsError(name, array[~np.isfinite(array)].ravel()[0], "finite")
        checked.append(np.broadcast_to(array, times.shape))
    if np.any(np.diff(times) <= 0):
        raise PhysicsError("times", float(np.diff(times).min()), "increasing")
    for name, column in zip(names[3:5], checked[3:5], strict=True):
        if np.any(column <= 0):
            raise PhysicsError(name, float(column.min()), "above 0 m")
    return checked


def _mask(breaks: ArrayLike | None, count: int) -> NDArray[np.bool_]:
    """Turn a mask or indices into a mask."""
    mask = np.zeros(count, dtype=bool)
    if breaks is None:
        return mask
    chosen = np.asarray(breaks)
    if chosen.dtype == bool and chosen.shape != (count,):
        raise PhysicsError("breaks", chosen.shape, f"a mask of {count} steps or indices")
    if chosen.dtype != bool and chosen.size and (chosen.min() < 0 or chosen.max() >= count):
        raise PhysicsError("breaks", chosen, f"indices from 0 to {count - 1}")
    mask[chosen if chosen.dtype == bool else chosen.astype(np.int64)] = True
    return mask


def _noise(
    variance: FloatArray, first: NDArray[np.int64], joined: NDArray[np.bool_]
) -> tuple[FloatArray, FloatArray]:
    """Diagonal and neighbour terms of M from relative variances of the sightings."""
    return variance[first] + variance[first + 1], -variance[first[1:]] * joined


@dataclass(frozen=True, slots=True)
class Whitened:
    """Columns and data of one axis after whitening, rows in order of time; rows are independent, unit variance."""

    columns: FloatArray  # (N, M)
    data: FloatArray  # (N,)
    log_det: float  # ln det of the covariance C

    def __post_init__(self) -> None:
        freeze_arrays(self, ("columns", "data"))


def whitened(
    steps: Increments, *, diffusion: float, rho: float, columns: ArrayLike, axis: Axis = "down"
) -> Whitened:
    """Whiten data and design columns of one axis by the Cholesky factor of their covariance.

    Parameters
    ----------
    steps : Increments
        Of one droplet.
    diffusion : float
        D in m^2/s, above 0.
    rho : float
        Variance of a typical place over D, in s; at least 0.
    columns : array_like of shape (N,) or (N, M)
        Design: what one unit of each parameter adds to each step. `steps.dt` is drift, `steps.impulse` the
        drive per volt, ``steps.impulse * (number >= c)`` a charge step.
    axis : {"down", "side"}
        Which places, and so which noise.

    Returns
    -------
    whitened : Whitened
        L^-1 columns and L^-1 data with L L^T = C. Row k uses steps 0..k alone, so sums over rows up to k are
        the sums of squares of the data seen until then: a change at step c leaves the rows before it as they
        were. Chains do not touch each other.

    Notes
    -----
    O(N M). Fit anything by ordinary least squares on the result; the covariance of parameters is the inverse
    of ``columns.T @ columns``, residuals are standard normal.
    """
    if not diffusion > 0:
        raise PhysicsError("diffusion", diffusion, "above 0 m^2/s")
    if not rho >= 0:
        raise PhysicsError("rho", rho, "0 s or more")
    data = steps.down if axis == "down" else steps.side
    design = np.asarray(columns, dtype=np.float64).reshape(len(steps), -1)
    white, log_det = whiten(steps, rho, np.column_stack([design, data]), axis)
    scaled = white / np.sqrt(diffusion)
    return Whitened(scaled[:, :-1], scaled[:, -1], log_det + len(steps) * float(np.log(diffusion)))


def _factor(steps: Increments, rho: FloatArray, axis: Axis) -> tuple[FloatArray, FloatArray]:
    """Pivots (rho, N) and unit-lower factors (rho * N - 1,) of A + rho M for each rho.

    All rho are one long matrix with gaps in the neighbour terms, so LAPACK is entered once.
    """
    grid, size = len(rho), len(steps)
    down = axis == "down"
    diagonal = steps.blur_diag + rho[:, None] * (steps.noise_diag if down else steps.side_noise_diag)
    off = np.zeros((grid, size))
    off[:, :-1] = steps.blur_off + rho[:, None] * (steps.noise_off if down else steps.side_noise_off)
    pivots, lower, info = lapack.dpttrf(diagonal.ravel(), off.ravel()[:-1], overwrite_d=1, overwrite_e=1)
    if info:
        raise PhysicsError("rho", float(rho[(info - 1) // size]), "such that the covariance is positive")
    return pivots.reshape(grid, size), lower


def whiten(steps: Increments, rho: float, columns: FloatArray, axis: Axis) -> tuple[FloatArray, float]:
    """Whiten columns (N, M) by A + rho M; also its ln det."""
    pivots, lower = _factor(steps, np.array([rho]), axis)
    band = np.ones((2, len(steps)))
    band[1, :-1] = lower
    solved, _ = lapack.dtbtrs(band, columns, uplo="L", diag="U")
    return solved / np.sqrt(pivots[0])[:, None], float(np.log(pivots).sum())


def gram_grid(
    steps: Increments, rho: FloatArray, columns: FloatArray, axis: Axis
) -> tuple[FloatArray, FloatArray]:
    """Sums X' (A + rho M)^-1 X of columns X (N, M) for each rho: (rho, M, M), and ln det (rho,)."""
    grid, (size, width) = len(rho), columns.shape
    pivots, lower = _factor(steps, rho, axis)
    stacked = np.tile(columns.T, grid)  # (M, rho * N): each column is one long right-hand side
    solved, _ = lapack.dpttrs(pivots.ravel(), lower, stacked.T)
    gram = (solved.T.reshape(width * grid, size) @ columns).reshape(width, grid, width)
    return np.ascontiguousarray(np.swapaxes(gram, 0, 1)), np.log(pivots).sum(axis=1)
