"""Voltage over time from the droplets' own motion: toggles by exact dynamic programming, then by their likelihood."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from physics.motion import MIN_INCREMENTS, Increments, field_impulse, free_fit, whitened
from tracker.bench import Bench
from tracker.errors import FieldError
from tracker.motion.field import field_of_steps, recording_span
from tracker.motion.fieldclock import fit_clock_offset
from tracker.motion.fieldstates import SHORT, side_diffusion, states_of_motion
from tracker.motion.velocity import Orientation, Path, View, paths
from tracker.records import Field, FloatArray, IntArray, Recording, Tracks

__all__ = ["field_from_motion", "fit_clock_offset", "segments_of_motion", "sharpened"]

FALSE_TOGGLES = 1e-3  # per recording
LEAST_SEGMENT = 6  # frames
LEAST_DROPLET = 30  # steps of a droplet that takes part
GRID = 33  # points of a toggle's likelihood
LEAST_TIMING = 6.0  # chi-square by which places of a toggle must differ, or the droplets say nothing of it


def field_from_motion(tracks: Tracks, recording: Recording, bench: Bench) -> Field:
    """Find when the field was on from the droplets' motion alone.

    Parameters
    ----------
    tracks : Tracks
        Linked without the voltage.
    recording : Recording
        Frame times.
    bench : Bench
        `voltage` of the field-on state, scale, exposure, air and oil.

    Returns
    -------
    field : Field
        With source ``motion``, two states (off, on) or three (off, on, reversed), and the uncertainty of every
        toggle. The first field-on segment has the bench's voltage; that its sign is so cannot be seen, hence
        `sign_known` is False and a warning says so.

    Raises
    ------
    FieldError
        If no toggle is seen, if the states are not off, on and reversed, or if they cannot be told apart.

    Notes
    -----
    Steps over sqrt(2 D dt) of each droplet are independent with unit variance about a mean that only a toggle
    changes. The partition of the recording that minimises the residual sum of squares plus a penalty for each
    toggle is found exactly by dynamic programming [1]_; the step that holds the toggle is left out. With K
    droplets and L = ln(frames / 0.001) the penalty is 2 K + 2 sqrt(K L) + 2 L, at which one recording in a
    thousand shows a toggle that is none. Then the time of each toggle is its posterior mean given the
    neighbouring segments, with the full covariance of the steps.

    References
    ----------
    .. [1] B. Jackson et al., IEEE Signal Process. Lett. 12 (2005), 105-108.
    """
    voltage = bench.voltage
    if voltage is None:
        raise FieldError(str(recording.path), "toggles from motion need cell.voltage in the bench file")
    droplets = _droplets(tracks, recording, bench)
    if not droplets:
        problem = f"no droplet is tracked for {LEAST_DROPLET} frames, so the motion cannot tell when the field was on"
        raise FieldError(str(recording.path), problem)
    edges = segments_of_motion(*_scaled_steps(droplets, recording))
    if len(edges) < 2:
        raise FieldError(
            str(recording.path),
            "no toggle of the field is seen in the motion; state it as a list, log or lamp",
        )
    states, unclear = states_of_motion(droplets, edges, recording, bench.conditions)
    times = recording.frame_times
    coarse = np.concatenate(([times[0]], [0.5 * (times[a] + times[b]) for a, b in zip(
        [e for _, e in edges[:-1]], [s for s, _ in edges[1:]], strict=True)]))  # fmt: skip
    volts = voltage.value * states
    # A stretch has six frames at least, so a toggle near the first or last frame may lie inside its stretch.
    toggle_std = np.full(len(edges), recording.frame_interval)
    for toggle, (first, end) in ((1, edges[0]), (-1, edges[-1])):
        toggle_std[toggle] *= 2.0 if end - first < SHORT else 1.0
    field = field_of_steps(
        "motion", coarse, volts, span=recording_span(recording), toggle_std=toggle_std,
        sign_known=False,
    )  # fmt: skip
    field = replace(field, warnings=_sign_warning(voltage.value, states))
    return _without_unclear(_refined(field, droplets, recording, np.arange(len(field.segments) - 1)), unclear)


def _without_unclear(field: Field, unclear: np.ndarray) -> Field:
    """Let the toggle of a short first or last segment of open state be so uncertain that no fit uses the segment."""
    if not unclear.any() or len(field.segments) != len(unclear):
        return field
    std = np.array(field.toggle_std)
    for i, toggle in ((0, 0), (-1, -1)):
        if unclear[i]:
            std[toggle] = max(std[toggle], (field.segments[i].end - field.segments[i].start) / 3)
    edge = " and ".join(name for name, i in (("first", 0), ("last", -1)) if unclear[i])
    warning = f"the motion does not tell the voltage of the {edge} frames, which are left out"
    return replace(field, toggle_std=std, warnings=(*field.warnings, warning))


def sharpened(field: Field, tracks: Tracks, recording: Recording, bench: Bench) -> Field:
    """Place toggles that a lamp or a slow log leaves open better, by the droplets' motion.

    Parameters
    ----------
    field : Field
        With jumps between constant voltages.
    tracks : Tracks
        Linked.
    recording : Recording
        Frame times.
    bench : Bench
        Scale and exposure.

    Returns
    -------
    field : Field
        Each toggle whose uncertainty exceeds a hundredth of the frame interval is moved within three of its
        standard uncertainties; where the droplets say nothing, it stays.
    """
    jumps = np.array(
        [a.end == b.start for a, b in zip(field.segments, field.segments[1:], strict=False)], bool
    )
    open_ones = np.flatnonzero(jumps & (field.toggle_std > 0.01 * recording.frame_interval))
    if len(open_ones) == 0:
        return field
    droplets = _droplets(tracks, recording, bench)
    return _refined(field, droplets, recording, open_ones)


def _sign_warning(voltage: float, states: FloatArray) -> tuple[str, ...]:
    first = float(voltage * states[np.flatnonzero(states)[0]])
    return (
        f"the sign of every charge rests on the first field-on segment having {first:+.4g} V, as cell.voltage says; "
        "motion cannot tell it",
    )


def _droplets(tracks: Tracks, recording: Recording, bench: Bench) -> list[Path]:
    """Paths along the stated or the picture's vertical, of droplets seen long enough."""
    span = recording_span(recording)
    idle = field_of_steps("motion", [span[0]], [0.0], span=span)
    orientation = Orientation(bench.down_deg or 0.0, 0.0, "picture")
    found = paths(tracks, View.of(recording, idle, bench), orientation)
    return [path for path in found if len(path) > LEAST_DROPLET and len(path.steps) >= LEAST_DROPLET]


def _scaled_steps(droplets: Sequence[Path], recording: Recording) -> tuple[FloatArray, np.ndarray]:
    """Steps over sqrt(2 D dt) for each droplet and frame interval; 0 where there is none, and where there is."""
    shape = len(droplets), max(len(recording.frame_times) - 1, 1)
    scaled, seen = np.zeros(shape), np.zeros(shape, bool)
    for j, path in enumerate(droplets):
        steps = path.steps
        frames = path.frames[steps.first]
        single = path.frames[steps.first + 1] - frames == 1
        unit = np.sqrt(2 * side_diffusion(steps) * steps.dt)
        scaled[j, frames[single]] = (steps.down / unit)[single]
        seen[j, frames[single]] = True
    return scaled, seen


def segments_of_motion(scaled: FloatArray, seen: np.ndarray) -> list[tuple[int, int]]:
    """Partition frame intervals into stretches of constant mean, exactly.

    Parameters
    ----------
    scaled : ndarray of shape (droplets, N)
        Steps with unit variance; 0 where a droplet was not seen.
    seen : ndarray of bool, same shape
        Where it was.

    Returns
    -------
    segments : list of (first, end)
        Frame intervals first..end-1 of each stretch, in order. One interval, the one that holds the toggle,
        lies between two stretches and belongs to neither.
    """
    count = scaled.shape[1]
    most = max(float(np.max(seen.sum(axis=0))), 1.0)
    log = float(np.log(max(count, 2) / FALSE_TOGGLES))
    penalty = 2 * most + 2 * np.sqrt(most * log) + 2 * log
    total = np.concatenate([np.zeros((len(scaled), 1)), np.cumsum(scaled, axis=1)], axis=1).T
    number = np.concatenate([np.zeros((len(scaled), 1)), np.cumsum(seen, axis=1)], axis=1).T
    single = np.append(np.sum(scaled**2, axis=0), 0.0)
    # best[e]: largest sum over segments of sum_j (sum Z)^2 / n, less the penalties, of intervals before e.
    best, begin = np.full(count + 1, -np.inf), np.zeros(count + 1, np.int64)
    alive, dead = np.array([0]), np.array([count + LEAST_SEGMENT + 2])
    offer = np.full(count + 2, -np.inf)  # value with which a segment may start at s
    offer[0] = 0.0
    for end in range(1, count + 1):
        ready = alive[alive <= end - min(LEAST_SEGMENT, count)]
        if len(ready):
            sums, length = total[end] - total[ready], number[end] - number[ready]
            gain = offer[ready] + np.sum(sums**2 / np.maximum(length, 1), axis=1)
            top = int(np.argmax(gain))
            best[end], begin[end] = gain[top], ready[top]
            # A later start at end + 1 then beats these for every later end, the step between counted in their favour.
            worse = gain + single[end] < best[end] - penalty
            late = np.where(worse, end + LEAST_SEGMENT + 1, count + LEAST_SEGMENT + 2)
            dead[: len(ready)] = np.minimum(dead[: len(ready)], late)
        if end + 1 <= count - LEAST_SEGMENT and np.isfinite(best[end]):
            offer[end + 1] = best[end] - penalty
            alive, dead = np.append(alive, end + 1), np.append(dead, count + LEAST_SEGMENT + 2)
        keep = dead > end
        alive, dead = alive[keep], dead[keep]
    segments, end = [], count
    while end > 0 and np.isfinite(best[end]):
        segments.append((int(begin[end]), end))
        end = int(begin[end]) - 1
    return segments[::-1]


def _refined(field: Field, droplets: Sequence[Path], recording: Recording, which: IntArray) -> Field:
    """Place the chosen toggles by their likelihood, with what the field says already as the prior."""
    times = np.array([segment.end for segment in field.segments[:-1]])
    stds = np.array(field.toggle_std)
    prepared = [_prepared(path, field) for path in droplets]
    for i in which:
        low = field.segments[i].start if i == 0 else times[i - 1]
        high = field.segments[i + 1].end if i + 2 == len(field.segments) else times[i + 1]
        placed = _toggle_posterior(prepared, (low, float(times[i]), high), std=float(stds[i]))
        if placed is not None:
            times[i], stds[i] = placed
    bounds = [field.segments[0].start, *times, field.segments[-1].end]
    volts = [segment.voltage for segment in field.segments]
    new = field_of_steps(
        field.source, bounds[:-1], volts, span=recording_span(recording), toggle_std=np.concatenate(([0.0], stds)),
        sign_known=field.sign_known,
    )  # fmt: skip
    return replace(new, clock_offset=field.clock_offset, clock_offset_std=field.clock_offset_std,
                   clock_rate=field.clock_rate, warnings=field.warnings)  # fmt: skip


@dataclass(frozen=True, slots=True)
class _Prepared:
    """One droplet's steps, and what their whitening needs."""

    path: Path
    steps: Increments
    diffusion: float
    rho: float


def _prepared(path: Path, field: Field) -> _Prepared:
    """Find diffusion and noise of a droplet with the field as it is known so far."""
    impulse = field_impulse(field.knot_times, field.knot_volts, path.times, path.exposure)
    steps = replace(path, impulse=impulse).steps
    fit = free_fit(steps)
    return _Prepared(path, steps, fit.diffusion, float(np.exp(fit.log_rho)))


def _toggle_posterior(
    droplets: Sequence[_Prepared], window: tuple[float, float, float], *, std: float
) -> tuple[float, float] | None:
    """Mean and standard deviation of the time of one toggle in s; None if the droplets say nothing."""
    low, start, high = window
    inside = []
    for droplet in droplets:
        begin = droplet.path.times[droplet.steps.first]
        within = (begin >= low) & (begin + droplet.steps.dt + droplet.path.exposure <= high)
        if np.sum(within) > MIN_INCREMENTS:
            inside.append((droplet, droplet.steps.select(within)))
    if not inside:
        return None
    grid = np.linspace(max(low, start - 3 * std), min(high, start + 3 * std), GRID)
    for finer in range(4):
        gain = np.sum([_ramp_gain(droplet, steps, grid) for droplet, steps in inside], axis=0)
        if finer == 0 and np.ptp(gain) < LEAST_TIMING:
            return None
        weight = np.exp(0.5 * (gain - gain.max()))
        weight /= weight.sum()
        mean, spacing = float(weight @ grid), float(grid[1] - grid[0])
        spread = float(np.sqrt(weight @ (grid - mean) ** 2))
        if spread > 2 * spacing:
            break
        reach = 5 * max(spread, 0.5 * spacing)
        grid = np.linspace(max(low, mean - reach), min(high, mean + reach), GRID)
    return mean, float(np.hypot(spread, spacing / np.sqrt(12)))


def _ramp_gain(droplet: _Prepared, steps: Increments, grid: FloatArray) -> FloatArray:
    """Chi-square that a change of speed at each time of the grid explains."""
    begin = droplet.path.times[steps.first]
    ramps = _ramp(begin + steps.dt, grid, droplet.path.exposure) - _ramp(begin, grid, droplet.path.exposure)
    white = whitened(
        steps, diffusion=droplet.diffusion, rho=droplet.rho, columns=np.column_stack([steps.dt, ramps])
    )
    drift, ramps = white.columns[:, 0], white.columns[:, 1:]
    drift = drift / np.linalg.norm(drift)
    free = ramps - np.outer(drift, drift @ ramps)
    power = np.sum(free**2, axis=0)
    gain = (free.T @ white.data) ** 2 / np.maximum(power, 1e-300)
    return np.asarray(np.where(power > 1e-9 * np.sum(ramps**2, axis=0), gain, 0.0))


def _ramp(begin: FloatArray, grid: FloatArray, exposure: float) -> FloatArray:
    """Exposure average of max(0, t - toggle), for exposures (rows) and toggles (columns)."""
    since = begin[:, None] - grid
    if exposure == 0:
        return np.asarray(np.maximum(since, 0.0))
    later, sooner = np.maximum(since + exposure, 0.0), np.maximum(since, 0.0)
    return np.asarray((later**2 - sooner**2) / (2 * exposure))
