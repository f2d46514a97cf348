"""How much of the droplets' motion a voltage explains when its clock is moved, for thousands of offsets at once."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from tracker.motion.fieldlog import Log
from tracker.motion.velocity import Path
from tracker.records import FloatArray, IntArray, Recording

NUMBERS_AT_ONCE = 1_000_000  # of volt seconds at frames, which bounds the memory
LEAST_FREE = 1e-9  # of the largest power at any offset: below, the voltage is as good as constant
LEAST_FALL = 1e-6  # of a drift's power that the drive must leave free
ROUND_OFF = 1e-12  # of a sum of squares


def drive_gains(
    droplets: Sequence[Path], log: Log, offsets: FloatArray, recording: Recording, *, falling: bool = False
) -> FloatArray:
    """Chi-square that the drive of each droplet explains at each offset of a voltage.

    Parameters
    ----------
    droplets : sequence of Path
        At least one.
    log : Log
        Voltage on its own clock.
    offsets : ndarray of shape (K,)
        In s, added to the log's times.
    recording : Recording
        Frame times.
    falling : bool
        Gravity's direction is known: less the chi-square of a droplet that would rise with the field off.

    Returns
    -------
    gains : ndarray of shape (droplets, K)
        Of both axes together, steps taken as independent; 0 where the voltage is constant.
    """
    times, volts = np.asarray(log.times), np.asarray(log.volts)
    if not log.sampled:
        times, volts = np.repeat(times, 2)[1:], np.repeat(volts, 2)[:-1]
    total = np.concatenate([[0.0], np.cumsum(0.5 * np.diff(times) * (volts[1:] + volts[:-1]))])
    middle = recording.frame_times + 0.5 * droplets[0].exposure
    weights = [_Weights.of(path, len(middle)) for path in droplets]
    rows = max(1, NUMBERS_AT_ONCE // len(middle))
    parts = [offsets[first : first + rows, None] for first in range(0, len(offsets), rows)]
    sums = [_sums(weights, _integral(middle - part, times, volts, total)) for part in parts]
    return np.stack([
        weights[j].gain(*(np.concatenate([made[j][k] for made in sums]) for k in (0, 1)), falling=falling)
        for j in range(len(weights))
    ])  # fmt: skip


@dataclass(frozen=True, slots=True)
class _Weights:
    """What turns volt seconds between frames into sums over one droplet's steps, each divided by sqrt(dt)."""

    linear: FloatArray  # (frames - 1, 3) sums with a drift of unit power, with the steps down and to the side
    square: FloatArray  # (frames - 1,) sum of squares, of steps from one frame to the next
    wide: IntArray  # (2, M) first and last frames of the other steps
    wide_square: FloatArray  # (M,)
    drift: FloatArray  # (2,) sums of the unit drift with the steps down and to the side
    variances: FloatArray  # (2,) of those steps

    @classmethod
    def of(cls, path: Path, frames: int) -> _Weights:
        """Spread each step's weight over the frames that it passes."""
        steps = path.steps
        first, last = path.frames[steps.first], path.frames[steps.last]
        per_root = 1 / np.sqrt(steps.dt)[:, None]
        data = np.column_stack([steps.down, steps.side]) * per_root
        drift = np.sqrt(steps.dt / steps.dt.sum())
        columns = np.column_stack([drift, data]) * per_root
        edges = np.zeros((frames, 3))
        edges[first] += columns
        edges[last] -= columns
        square = np.zeros(frames - 1)
        single = last == first + 1
        square[first[single]] = 1 / steps.dt[single]
        variances = np.array([_step_variance(column) for column in data.T])
        wide = np.stack([first, last])[:, ~single]
        return cls(
            np.cumsum(edges, axis=0)[:-1], square, wide, 1 / steps.dt[~single], drift @ data, variances
        )

    def gain(self, linear: FloatArray, power: FloatArray, *, falling: bool) -> FloatArray:
        """Chi-square for each offset from its sums: linear (K, 3), power (K,)."""
        along, scores = linear[:, 0], linear[:, 1:]
        free = power - along**2  # what the drift leaves of the drive
        sound = free > np.maximum(LEAST_FREE * free.max(), ROUND_OFF * power)
        explained = (scores - along[:, None] * self.drift) ** 2 @ (1 / self.variances)
        gain = np.where(sound, explained / np.where(sound, free, 1.0), 0.0)
        if not falling:
            return np.asarray(gain)
        some = np.where(power > 0, power, 1.0)
        left = np.where(power > 0, free / some, 1.0)  # what the drive leaves of the drift
        rise = np.minimum(self.drift[0] - scores[:, 0] * along / some, 0.0)
        apart = left > LEAST_FALL
        return np.asarray(
            gain - np.where(apart, rise**2 / np.where(apart, left, 1.0), 0.0) / self.variances[0]
        )


def _sums(weights: Sequence[_Weights], at_frame: FloatArray) -> list[tuple[FloatArray, FloatArray]]:
    """Linear sums (K, 3) and sum of squares (K,) of each droplet for K rows of volt seconds at the frames."""
    between = np.diff(at_frame, axis=1)
    linear = between @ np.column_stack([w.linear for w in weights])
    power = between**2 @ np.column_stack([w.square for w in weights])
    return [
        (linear[:, 3 * j : 3 * j + 3],
         power[:, j] + (at_frame[:, w.wide[1]] - at_frame[:, w.wide[0]]) ** 2 @ w.wide_square)
        for j, w in enumerate(weights)
    ]  # fmt: skip


def _integral(at: FloatArray, times: FloatArray, volts: FloatArray, total: FloatArray) -> FloatArray:
    """Integral of the logged voltage to each time, the end voltages holding outside."""
    inside = np.interp(at, times, total)
    before, after = np.minimum(at - times[0], 0.0), np.maximum(at - times[-1], 0.0)
    return np.asarray(inside + volts[0] * before + volts[-1] * after)


def _step_variance(steps: FloatArray) -> float:
    """Variance of steps that toggles do not widen: from the middle half of second differences."""
    second = np.abs(np.diff(steps))
    return max(float(np.median(second) / 0.6745) ** 2 / 2, 1e-300)
