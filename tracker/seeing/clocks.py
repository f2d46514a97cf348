"""Time spent at each voltage, so that a droplet's way between two frames is a sum over voltages."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.records import Field, FloatArray, Recording

_SAME_VOLTAGE = 0.03  # of the largest voltage: nearer ones are one state
_EXPOSURE_MIDDLE = 0.25  # of a frame interval after the frame's time, where the exposure is half of it
_OPEN_FRAMES = 3  # frames either side of a change of voltage in which the log may be late


@dataclass(frozen=True, slots=True)
class Clocks:
    """How long each state of the field had lasted at each frame."""

    elapsed: FloatArray  # (frames, states) s spent in each state up to the middle of the frame's exposure
    toggles: FloatArray  # (K,) s, times at which the state changes, on the same clock as `times`
    times: FloatArray  # (frames,) s, middle of the exposure
    slack: float  # s, doubt about the time of a change
    known: bool  # whether the voltage is known

    @property
    def states(self) -> int:
        """Number of different voltages."""
        return int(self.elapsed.shape[1])

    def open(self, first: NDArray[np.int64], last: NDArray[np.int64]) -> NDArray[np.bool_]:
        """Whether a change of state may lie between frames `first` and `last`."""
        low = np.searchsorted(self.toggles, self.times[first] - self.slack)
        high = np.searchsorted(self.toggles, self.times[last] + self.slack)
        return np.asarray(high > low)


def clocks_of(recording: Recording, field: Field | None) -> Clocks:
    """Set up the clocks of a recording.

    Parameters
    ----------
    recording : Recording
    field : Field or None
        Voltage over time; None if it is not known: one state.

    Returns
    -------
    clocks : Clocks
    """
    interval = recording.frame_interval
    times = recording.frame_times + _EXPOSURE_MIDDLE * interval
    if field is None or len(field.segments) == 0:
        return Clocks(times[:, None] - times[0], np.empty(0), times, 0.0, False)
    volts = np.array([s.voltage for s in field.segments])
    state = _group(volts)
    starts = np.array([s.start for s in field.segments])
    ends = np.array([s.end for s in field.segments])
    bounds = 0.5 * (ends[:-1] + starts[1:])
    edges = np.concatenate([[-np.inf], bounds, [np.inf]])
    elapsed = np.zeros((len(times), int(state.max()) + 1))
    for i, s in enumerate(state):
        low = max(edges[i], times[0])
        elapsed[:, s] += np.clip(np.minimum(times, edges[i + 1]) - low, 0, None)
    changed = np.flatnonzero(np.diff(state) != 0)
    slack = max(_OPEN_FRAMES * interval, float(field.toggle_std.max(initial=0)) * 3)
    return Clocks(elapsed, bounds[changed], times, slack, True)


def _group(volts: FloatArray) -> NDArray[np.int64]:
    """Number of the state of each segment; nearly equal voltages are one state."""
    order = np.argsort(volts)
    width = _SAME_VOLTAGE * max(float(np.abs(volts).max()), 1e-9)
    steps = np.diff(volts[order]) > width
    group = np.empty(len(volts), np.int64)
    group[order] = np.concatenate([[0], np.cumsum(steps)])
    return group
