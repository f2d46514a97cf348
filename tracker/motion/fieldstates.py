"""Which stretches of the droplets' motion are field off, on and reversed: weighed by likelihood, told if open."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from physics.droplet import Conditions, diffusion, fall_speed
from physics.motion import Increments
from tracker.errors import FieldError
from tracker.motion.velocity import Path
from tracker.records import FloatArray, Recording

OFF_MARGIN, OFF_RELATIVE_MARGIN = (
    9.0,
    0.05,
)  # chi-square, and its share of the best, by which the best must win
MOST_OF_ONE = (
    25.0  # chi-square of one speed or droplet at most: a clump or mistaken link must not decide for all
)
LEVEL_TOLERANCE = 0.25  # of the step between states: what lies further from its state belongs to none
SHORT = (
    12  # frames: a first or last stretch so short may hold its toggle inside, and must not tell the states
)
LEAST_SPEED = 3  # steps of which a speed is made
RADII = np.geomspace(0.1e-6, 6e-6, 300)  # m, of the falling spheres that are tried


def side_diffusion(steps: Increments) -> float:
    """Diffusion from the motion across the field, which toggles do not touch: <x^2>/2dt + <x x'>/dt.

    Parameters
    ----------
    steps : Increments
        Of one droplet.

    Returns
    -------
    diffusion : float
        In m^2/s.
    """
    side = steps.side - steps.dt * (np.sum(steps.side) / np.sum(steps.dt))
    joined = steps.first[1:] - steps.first[:-1] == 1
    mean_dt = float(np.mean(steps.dt))
    size = float(np.mean(side**2))
    neighbours = float(np.mean((side[:-1] * side[1:])[joined])) if np.any(joined) else 0.0
    return max(size + 2 * neighbours, 0.2 * size) / (2 * mean_dt)


def states_of_motion(
    droplets: Sequence[Path], edges: Sequence[tuple[int, int]], recording: Recording, conditions: Conditions
) -> tuple[FloatArray, np.ndarray]:
    """Voltage of every stretch over the first field-on one.

    Parameters
    ----------
    droplets : sequence of Path
        Along gravity.
    edges : list of (first, end)
        Frame intervals of two stretches at least, as `segments_of_motion` gives them.
    recording : Recording
        Named in errors.
    conditions : Conditions
        Air, oil and gravity.

    Returns
    -------
    states : ndarray of shape (stretches,)
        0 with the field off, else 1 or -1; the first that is not 0 is 1.
    unclear : ndarray of bool, same shape
        Short first or last stretches that may have another state.

    Raises
    ------
    FieldError
        If two ways to read the motion fit about as well, if the field seems never off, or if a stretch fits none
        of the states.

    Notes
    -----
    In a state s of 0, 1 or -1 a droplet's speed is a + b s, with a and b of its own. Four readings are weighed:
    off and on (either may be the higher), on and reversed without off, and all three. To the chi-square of the
    speeds each adds that of a being the fall of a sphere whose diffusion is the droplet's, with its radius free.
    The reading of the least sum must win by 9 and by 5 % of it.
    """
    means = _means(droplets, edges)
    inner = _inner(edges)
    kept = _Means(means.speed[:, inner], means.variance[:, inner], means.diffusion, means.diffusion_std)
    readings = sorted(_readings(kept, conditions), key=lambda reading: reading.misfit)
    best = _clear_best(readings, recording)
    _check_levels(kept, best, recording)
    states, unclear = np.zeros(len(edges)), np.zeros(len(edges), bool)
    states[inner] = best.states
    for i in np.setdiff1d(np.arange(len(edges)), inner):
        beside = states[1] if i == 0 else states[-2]
        first, end = edges[i]
        half = (first, max(first + LEAST_SPEED, (first + end) // 2)) if i == 0 else \
            (min(end - LEAST_SPEED, (first + end) // 2), end)  # fmt: skip
        states[i], unclear[i] = _edge_state(kept, best, _means(droplets, [half]), beside)
    return np.asarray(states * states[np.flatnonzero(states)[0]]) + 0.0, unclear


@dataclass(frozen=True, slots=True)
class _Means:
    """Speed of every droplet in every stretch, and its variance; nan where it was not seen."""

    speed: FloatArray  # (droplets, stretches) m/s
    variance: FloatArray  # (m/s)^2
    diffusion: FloatArray  # (droplets,) m^2/s
    diffusion_std: FloatArray  # (droplets,) of ln D

    @property
    def weight(self) -> FloatArray:
        """1 / variance; 0 where a droplet was not seen."""
        return np.asarray(np.where(np.isfinite(self.speed), 1 / self.variance, 0.0))


@dataclass(frozen=True, slots=True)
class _Reading:
    """One way to read the motion."""

    name: str
    levels: tuple[float, ...]  # states that may occur
    states: FloatArray  # (stretches,)
    misfit: float  # chi-square


def _means(droplets: Sequence[Path], edges: Sequence[tuple[int, int]]) -> _Means:
    """Mean speeds within stretches."""
    speed = np.full((len(droplets), len(edges)), np.nan)
    variance = speed.copy()
    diffusions, stds = np.zeros(len(droplets)), np.zeros(len(droplets))
    for j, path in enumerate(droplets):
        steps = path.steps
        diffusions[j] = side_diffusion(steps)
        stds[j] = np.sqrt(3.0 / len(steps))  # the covariance estimator's, noise small against D dt
        frames, last = path.frames[steps.first], path.frames[steps.first + 1]
        for i, (first, end) in enumerate(edges):
            inside = (frames >= first) & (last <= end)
            if np.sum(inside) >= LEAST_SPEED:
                duration = float(np.sum(steps.dt[inside]))
                speed[j, i] = np.sum(steps.down[inside]) / duration
                variance[j, i] = 2 * diffusions[j] / duration
    return _Means(speed, variance, diffusions, stds)


def _inner(edges: Sequence[tuple[int, int]]) -> np.ndarray:
    """Stretches that tell the states: all but a short first and last one, if two are left."""
    long = np.array([end - first >= SHORT for first, end in edges])
    long[1:-1] = True
    return np.flatnonzero(long) if np.sum(long) >= 2 else np.arange(len(edges))


def _readings(means: _Means, conditions: Conditions) -> list[_Reading]:
    """All ways to read the motion, with their misfit."""
    score = _scores(means)
    found = []
    for name, levels in (
        ("field off where droplets move lower", (0.0, 1.0)), ("field off where droplets move higher", (-1.0, 0.0)),
        ("on and reversed, never off", (-1.0, 1.0)), ("off, on and reversed", (-1.0, 0.0, 1.0)),
    ):  # fmt: skip
        states = _nearest_states(means, levels, score)
        if len(np.unique(states)) < len(levels):
            continue
        fall, drive, fall_variance = _lines(means, states)
        speeds = float(np.nansum(_cell_misfit(means, fall, drive, states)))
        spheres = float(np.sum(_fall_misfit(means, fall, fall_variance, conditions)))
        found.append(_Reading(name, levels, states, speeds + spheres))
    return found


def _nearest_states(means: _Means, levels: Sequence[float], score: FloatArray) -> FloatArray:
    """State of each stretch of those allowed: nearest to the scores first, then by the droplets' speeds."""
    allowed = np.array(levels)
    scaled = allowed[0] + (allowed[-1] - allowed[0]) * score
    states = allowed[np.argmin(np.abs(scaled[:, None] - allowed), axis=1)]
    for _ in range(20):
        fall, drive, _ = _lines(means, states)
        cost = [np.nansum(_cell_misfit(means, fall, drive, np.full(len(states), s)), axis=0) for s in levels]
        new: FloatArray = allowed[np.argmin(cost, axis=0)]
        if np.all(new == states):
            break
        states = new
    return np.asarray(states)


def _lines(means: _Means, states: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Speed with the field off, drive, and variance of the first, of each droplet; nan if seen in one state only."""
    weight, speed = means.weight, np.nan_to_num(means.speed)
    w, ws, wss = weight.sum(axis=1), weight @ states, weight @ states**2
    wv, wvs = np.sum(weight * speed, axis=1), np.sum(weight * speed * states, axis=1)
    determinant = w * wss - ws**2
    sound = determinant > 1e-9 * np.maximum(w * wss, 1e-300)
    safe = np.where(sound, determinant, np.nan)
    return (wv * wss - ws * wvs) / safe, (w * wvs - ws * wv) / safe, wss / safe


def _cell_misfit(means: _Means, fall: FloatArray, drive: FloatArray, states: FloatArray) -> FloatArray:
    """Chi-square of each droplet's speed in each stretch; nan where there is none."""
    expected = fall[:, None] + drive[:, None] * states
    return np.asarray(np.minimum((means.speed - expected) ** 2 / means.variance, MOST_OF_ONE))


def _fall_misfit(means: _Means, fall: FloatArray, variance: FloatArray, conditions: Conditions) -> FloatArray:
    """Chi-square of each droplet for falling at a speed as a sphere of the oil that diffuses as it does."""
    known = np.isfinite(fall)
    speeds, log_diffusions = fall_speed(RADII, conditions), np.log(diffusion(RADII, conditions))
    off = (fall[known, None] - speeds) ** 2 / variance[known, None]
    off += ((np.log(means.diffusion[known, None]) - log_diffusions) / means.diffusion_std[known, None]) ** 2
    misfit = np.zeros(len(fall))
    misfit[known] = np.minimum(off.min(axis=1), MOST_OF_ONE)
    return misfit


def _clear_best(readings: Sequence[_Reading], recording: Recording) -> _Reading:
    """Reading that wins clearly, or an error that names those between which it is open."""
    if not readings:
        raise FieldError(
            str(recording.path), "the motion shows one state of the field; state it as a list, log or lamp"
        )
    best = readings[0]
    needed = max(OFF_MARGIN, OFF_RELATIVE_MARGIN * best.misfit)
    rivals = [reading for reading in readings[1:] if reading.misfit - best.misfit < needed]
    if rivals:
        problem = "on and off cannot be told apart by the motion: " + " and ".join(
            f"'{reading.name}' (chi-square {reading.misfit:.0f})" for reading in (best, *rivals)
        )
        raise FieldError(
            str(recording.path), f"{problem} fit about as well; state the field as a list, log or lamp"
        )
    if 0.0 not in best.levels:
        problem = "the droplets are driven both ways and the field seems never off"
        raise FieldError(str(recording.path), f"{problem}; state the voltages as a list or a log")
    return best


def _level(means: _Means, fall: FloatArray, drive: FloatArray) -> tuple[FloatArray, FloatArray]:
    """State of each stretch as a number that is not rounded, and its standard uncertainty."""
    power = means.weight * np.nan_to_num(drive[:, None]) ** 2
    moved = np.nan_to_num(means.weight * drive[:, None] * (means.speed - fall[:, None]))
    total = np.maximum(np.sum(power, axis=0), 1e-300)
    return np.asarray(np.sum(moved, axis=0) / total), np.asarray(1 / np.sqrt(total))


def _check_levels(means: _Means, best: _Reading, recording: Recording) -> None:
    """Refuse a stretch whose speeds fit none of the states."""
    fall, drive, _ = _lines(means, best.states)
    level, std = _level(means, fall, drive)
    far = np.flatnonzero(np.abs(level - best.states) > LEVEL_TOLERANCE + 4 * std)
    if len(far):
        problem = (
            f"the motion's states are not off, on and reversed: in stretch {far[0] + 1} of {len(level)} the drive is"
            f" {level[far[0]]:.2f} times that of the field on"
        )
        raise FieldError(str(recording.path), f"{problem}; state the voltages as a list or a log")


def _edge_state(means: _Means, best: _Reading, outer: _Means, beside: float) -> tuple[float, bool]:
    """State of a short first or last stretch from its outer half, and whether it may be another."""
    fall, drive, _ = _lines(means, best.states)
    level, std = (float(value[0]) for value in _level(outer, fall, drive))
    others = sorted((abs(level - state), state) for state in best.levels if state != beside)
    state = others[0][1]
    open_between = len(others) > 1 and others[1][0] - others[0][0] < 2 * LEVEL_TOLERANCE + 4 * std
    beyond = (level - state) * np.sign(state - beside) > LEVEL_TOLERANCE + 4 * std
    return state, bool(open_between or beyond)


def _scores(means: _Means) -> FloatArray:
    """One number from 0 to 1 for each stretch, the droplets' common pattern: rank-one fit with missing values."""
    weight, speed = means.weight, np.nan_to_num(means.speed)
    score = _start_scores(speed, weight)
    for _ in range(200):
        # Each droplet's speed is a + b score; then each stretch's score from all droplets.
        fall, drive, _ = _lines(means, score)
        a, b = np.nan_to_num(fall), np.nan_to_num(drive)
        power = np.sum(weight * (b**2)[:, None], axis=0)
        new = np.sum(weight * b[:, None] * (speed - a[:, None]), axis=0) / np.maximum(power, 1e-300)
        span = np.ptp(new)
        new = (new - new.min()) / (span if span > 0 else 1.0)
        if np.max(np.abs(new - score)) < 1e-9:
            break
        score = new
    return score


def _start_scores(speed: FloatArray, weight: FloatArray) -> FloatArray:
    """Start from the droplet whose speeds differ most significantly between stretches."""
    mean = np.sum(weight * speed, axis=1) / np.maximum(weight.sum(axis=1), 1e-300)
    spread = np.sum(weight * (speed - mean[:, None]) ** 2, axis=1)
    best = int(np.argmax(spread * (np.sum(weight > 0, axis=1) / weight.shape[1]) ** 2))
    score = np.where(weight[best] > 0, speed[best], mean[best])
    span = np.ptp(score)
    return np.asarray((score - score.min()) / (span if span > 0 else 1.0))
