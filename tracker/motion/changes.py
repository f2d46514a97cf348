"""What happens to a droplet within its track: charge steps, evaporation, a switch to another droplet.

All tests are likelihood ratios on whitened steps. Times of change are scanned with cumulative sums, so a scan
costs as much as one fit.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from physics.droplet import Conditions, droplet_mobility, fall_speed, radius_from_fall_speed
from physics.errors import PhysicsError
from physics.motion import MIN_INCREMENTS, FreeFit, Increments, Whitened, free_fit, whitened
from tracker.records import FloatArray, IntArray

STEP_THRESHOLD = 18.0  # one false step in 1000 droplets
SWITCH_THRESHOLD = 22.0  # one false switch in 1000 droplets
TREND_THRESHOLD = 10.83  # chi-square with one degree of freedom, 1 in 1000
Z_LIMIT = 3.29  # two-sided 1 in 1000
LEAST_SHARE = 0.04  # of the information on the drive that must lie on either side of a change
LEAST_DETERMINANT = 0.02  # relative: below, speed and drive of one side cannot be told apart
MOST_CHANGES = 8  # in one track
Rate = tuple[float, float]  # d(r^2)/dt in m^2/s with its standard uncertainty


@dataclass(frozen=True, slots=True)
class Change:
    """One thing that happened to a droplet."""

    kind: str  # charge_step, evaporation, growth or switch
    step: int  # first step after the change, of all steps of the track; for a trend, the one at mid time
    time: float  # s
    time_std: float  # s
    statistic: float
    threshold: float
    rate: float = float("nan")  # of a trend: d ln r / dt in 1/s
    rate_std: float = float("nan")


@dataclass(frozen=True, slots=True)
class History:
    """A droplet's steps with all that happened to it."""

    steps: Increments  # numbered by charge part, the trend of the size taken out of `down`
    kept: IntArray  # (N,) which of the steps given, those of one and the same droplet
    fit: FreeFit  # of `steps`
    changes: tuple[Change, ...]  # in order of time
    trend: Change | None  # evaporation or growth; radius and charge hold at its time
    size_rate: float = float("nan")  # d ln r / dt in 1/s, significant or not; nan where it cannot be had
    size_rate_std: float = float("nan")
    doubt: FloatArray | None = None  # (N,) m in `steps.down` by one standard uncertainty of the rate
    begins: FloatArray | None = None  # (N,) s at which the steps begin
    weighed: tuple[
        tuple[Rate, bool], ...
    ] = ()  # rates held against the shared one, and whether they contradict it

    def holds_for(self, shared_rate: Rate | None) -> bool:
        """Whether another rate that all droplets share would have led to the same history."""
        return all(_is_odd(rate, shared_rate) == odd for rate, odd in self.weighed)

    def part_at(self, time: float) -> int | None:
        """Number of the charge part that holds at a time; None where the track is of another droplet."""
        if self.begins is None or not len(self.begins) or not self.begins[0] <= time <= self.begins[-1]:
            return None
        return int(self.steps.part[np.searchsorted(self.begins, time, side="right") - 1])

    def parts_about(self, change: Change) -> tuple[int, int] | None:
        """Numbers of the charge parts before and after a charge step; None on a side that a switch left out."""
        after = int(np.searchsorted(self.kept, change.step))
        if not 0 < after < len(self.kept):
            return None
        return int(self.steps.part[after - 1]), int(self.steps.part[after])


def find_changes(
    steps: Increments, times: FloatArray, conditions: Conditions, *, fit: FreeFit | None = None,
    shared_rate: Rate | None = None,
) -> History:  # fmt: skip
    """Look for charge steps, evaporation and a switch to another droplet, until nothing more is found.

    Parameters
    ----------
    steps : Increments
        Of one droplet, one charge part.
    times : ndarray of shape (sightings,)
        Start of exposure in s of the sightings that `steps` were made from.
    conditions : Conditions
        Of the bench, for what a change of radius does to speed and drive.
    fit : FreeFit, optional
        Of the steps, if it was made already.
    shared_rate : tuple of float, optional
        d(r^2)/dt that the droplets of the recording share, with its standard uncertainty, in m^2/s. A trend that
        contradicts it is called one only where no charge step explains the track as well.

    Returns
    -------
    history : History
        With the steps split into charge parts; after a switch only those of the longer stay.

    Notes
    -----
    The model is made larger one change at a time, by the test that exceeds its threshold by most. A charge
    step is one more drive, with the fall speed shared. A switch frees speed and drive; it is preferred to a
    step only where the speed itself differs with the significance of a trend (1 in 1000).
    """
    kept = np.arange(len(steps))
    changes: list[Change] = []
    trend: Change | None = None
    last: Change | None = None
    weighed: list[tuple[Rate, bool]] = []
    column = np.empty((len(steps), 0))
    part = np.zeros(len(steps), np.int64)
    fit = free_fit(steps) if fit is None else fit
    for _ in range(MOST_CHANGES):
        if not np.all(np.isfinite(fit.drive_per_volt)) or len(steps) < 2 * MIN_INCREMENTS:
            break
        model = _Model(steps, part, column, fit)
        last = _trend(model, times, conditions) if trend is None else None
        held = _held_against(shared_rate, last, fit, conditions)
        weighed += held
        found = _best_change(model, times, last, odd=any(odd for _, odd in held))
        if found is None:
            break
        changes.append(replace(found, step=int(kept[found.step])))
        if found.kind == "charge_step":
            part = _split(part, found.step)
        elif found.kind == "switch":
            side = _longer_side(steps, found.step)
            steps, kept, part, column = steps.select(side), kept[side], part[side], column[side]
            part = np.unique(part, return_inverse=True)[1].astype(np.int64)
        else:
            trend = found
            column = _trend_column(model, times, conditions)
        steps, fit, trend = _refit(steps, part, column, trend)
    rate = trend or last
    size = (float("nan"), float("nan")) if rate is None else (rate.rate, rate.rate_std)
    doubt = None if trend is None or column.shape[1] == 0 else trend.rate_std * column[:, 0]
    return History(
        _take_out(steps, column, trend), kept, fit, tuple(sorted(changes, key=_by_time)), trend, *size, doubt,
        times[steps.first], tuple(weighed),
    )  # fmt: skip


def _by_time(change: Change) -> float:
    return change.time


@dataclass(frozen=True)
class _Model:
    """What is already known of a droplet when the next change is looked for."""

    steps: Increments
    part: IntArray  # (N,)
    column: FloatArray  # (N, 0 or 1) design column of a trend
    fit: FreeFit

    @cached_property
    def base(self) -> Whitened:
        """Whitened design of the model, drift, a drive for each part, a trend, and the data."""
        drives = self.steps.impulse[:, None] * (self.part[:, None] == np.arange(self.part.max() + 1))
        return self._white(np.column_stack([self.steps.dt, drives, self.column]))

    @cached_property
    def residual(self) -> float:
        """Sum of squares that the model leaves."""
        return _rss(self.base.columns, self.base.data)

    def white(self, extra: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Whitened base design, extra columns and data."""
        return self.base.columns, self._white(extra).columns, self.base.data

    def _white(self, columns: FloatArray) -> Whitened:
        rho = float(np.exp(self.fit.log_rho))
        return whitened(self.steps, diffusion=self.fit.diffusion, rho=rho, columns=columns)


def size_rate(steps: Increments, times: FloatArray, conditions: Conditions, fit: FreeFit) -> Rate | None:
    """Rate at which the square of a droplet's radius changes, as if nothing else happened to it.

    Parameters
    ----------
    steps : Increments
        Of one droplet.
    times : ndarray of shape (sightings,)
        Start of exposure in s.
    conditions : Conditions
        Of the bench.
    fit : FreeFit
        Of the steps.

    Returns
    -------
    rate, std : float
        d(r^2)/dt in m^2/s with its standard uncertainty; None in place of both where it cannot be had.
    """
    if not np.all(np.isfinite(fit.drive_per_volt)):
        return None
    trend = _trend(
        _Model(steps, np.zeros(len(steps), np.int64), np.empty((len(steps), 0)), fit), times, conditions
    )
    if trend is None or not trend.rate_std > 0:
        return None
    return _area_rate(trend, fit, conditions)


def _area_rate(trend: Change, fit: FreeFit, conditions: Conditions) -> Rate:
    """Rate of the square of the radius for a trend of ln r."""
    area = 2 * float(radius_from_fall_speed(fit.fall_speed, conditions)) ** 2
    return area * trend.rate, area * trend.rate_std


def _held_against(
    shared: Rate | None, trend: Change | None, fit: FreeFit, conditions: Conditions
) -> list[tuple[Rate, bool]]:
    """Rate of a trend that is significant, and whether it contradicts what all droplets share; else nothing."""
    if trend is None or trend.statistic <= trend.threshold:
        return []
    rate = _area_rate(trend, fit, conditions)
    return [(rate, _is_odd(rate, shared))]


def _is_odd(rate: Rate, shared: Rate | None) -> bool:
    """Whether a rate contradicts what all droplets share."""
    if shared is None:
        return False
    return abs(rate[0] - shared[0]) > Z_LIMIT * float(np.hypot(rate[1], shared[1]))


def _best_change(model: _Model, times: FloatArray, trend: Change | None, *, odd: bool) -> Change | None:
    """Change whose statistic exceeds its threshold by most; an odd trend counts less."""
    step, switch = _step(model, times), _switch(model, times)
    candidates = [step, switch, trend]
    found = [c for c in candidates if c is not None and c.statistic > c.threshold]
    rank = _RANK | ({"evaporation": STEP_THRESHOLD} if odd else {})
    best = max(found, key=lambda c: c.statistic - rank[c.kind], default=None)
    if best is switch and step in found and step is not None and switch is not None:
        # Two charge steps, of which only one is in the model yet, also look like a change of speed.
        second = _step(replace(model, part=_split(model.part, step.step)), times)
        if second is not None and second.statistic > max(STEP_THRESHOLD, switch.statistic - step.statistic):
            return step
    return best


# What a test's statistic is worth beside the others: its threshold. Oil does not grow, so what looks like growth is
# called that only where no switch explains it as well.
_RANK = {
    "charge_step": STEP_THRESHOLD, "switch": SWITCH_THRESHOLD, "evaporation": TREND_THRESHOLD, "growth": STEP_THRESHOLD,
}  # fmt: skip


def gains_of_suffix(base: FloatArray, extra: FloatArray, data: FloatArray) -> FloatArray:
    """Drop of the residual sum of squares when columns are added that begin at row c, for every c.

    Parameters
    ----------
    base : ndarray of shape (N, M)
        Whitened design that is there already.
    extra : ndarray of shape (N, H)
        Whitened columns; of each, the rows from c on are added.
    data : ndarray of shape (N,)
        Whitened.

    Returns
    -------
    gains : ndarray of shape (N,)
        Chi-square with H degrees of freedom for a c chosen beforehand; 0 where the columns are degenerate.

    Notes
    -----
    Cutting the whitened column instead of whitening the cut one differs in the few rows behind c over which
    neighbours are correlated; the place of the maximum is not moved by it.
    """
    inverse = np.linalg.pinv(base.T @ base)
    with_base = _suffix(extra[:, :, None] * base[:, None, :])
    with_self = _suffix(extra[:, :, None] * extra[:, None, :])
    with_data = _suffix(extra * data[:, None])
    inner = with_self - with_base @ inverse @ np.swapaxes(with_base, 1, 2)
    score = with_data - with_base @ (inverse @ (base.T @ data))
    diagonal = np.einsum("nii->ni", with_self)
    sound = np.all(np.einsum("nii->ni", inner) > 1e-6 * np.maximum(diagonal, 1e-300), axis=1)
    scale = np.sqrt(np.maximum(np.einsum("nii->ni", inner), 1e-300))
    correlation = np.where(sound[:, None, None], inner / (scale[:, :, None] * scale[:, None, :]), 0.0)
    sound &= np.linalg.det(correlation) > 1e-6
    gains = np.zeros(len(data))
    if np.any(sound):
        z = (score / scale)[sound]
        gains[sound] = np.einsum("ni,ni->n", z, np.linalg.solve(correlation[sound], z[:, :, None])[:, :, 0])
    return gains


def _suffix(rows: FloatArray) -> FloatArray:
    """Sums over rows k >= c for every c."""
    total: FloatArray = np.cumsum(rows[::-1], axis=0)[::-1]
    return total


def _gain_exact(model: _Model, extra: FloatArray) -> float:
    """Drop of the residual sum of squares by extra columns."""
    base, added, data = model.white(extra)
    return model.residual - _rss(np.column_stack([base, added]), data)


def _rss(design: FloatArray, data: FloatArray) -> float:
    scale = np.maximum(np.linalg.norm(design, axis=0), 1e-300)
    return float(
        np.sum((data - design @ (np.linalg.lstsq(design / scale, data, rcond=None)[0] / scale)) ** 2)
    )


def _step(model: _Model, times: FloatArray) -> Change | None:
    """Best charge step inside any of the parts."""
    best: Change | None = None
    for part in range(int(model.part.max()) + 1):
        inside = model.part == part
        drive = np.where(inside, model.steps.impulse, 0.0)
        base, extra, data = model.white(drive[:, None])
        share = _share(extra[:, 0])
        gains = np.where(inside & (share > LEAST_SHARE) & (share < 1 - LEAST_SHARE),
                         gains_of_suffix(base, extra, data), 0.0)  # fmt: skip
        c = int(np.argmax(gains))
        if gains[c] <= 0 or (best is not None and gains[c] < best.statistic - 2):
            continue
        after = np.where(np.arange(len(drive)) >= c, drive, 0.0)
        change = _placed("charge_step", model, gains, times, STEP_THRESHOLD)
        change = replace(change, statistic=_gain_exact(model, after[:, None]))
        if best is None or change.statistic > best.statistic:
            best = change
    return best


def _switch(model: _Model, times: FloatArray) -> Change | None:
    """Best switch: speed and drive both differ from some step on."""
    g, G = model.steps.dt, model.steps.impulse
    base, extra, data = model.white(np.column_stack([g, G]))
    gains = gains_of_suffix(base, extra, data)
    after, total = _suffix(extra[:, :, None] * extra[:, None, :]), extra.T @ extra
    gains[~(_apart(after) & _apart(total - after))] = 0.0
    for share in (_share(extra[:, 0]), _share(extra[:, 1])):
        gains[(share < LEAST_SHARE) | (share > 1 - LEAST_SHARE)] = 0.0
    c = int(np.argmax(gains))
    if gains[c] <= 0:
        return None
    later = np.where(np.arange(len(g)) >= c, 1.0, 0.0)[:, None]
    both = _gain_exact(model, later * np.column_stack([g, G]))
    drive_alone = _gain_exact(model, later * G[:, None])
    if both - drive_alone <= TREND_THRESHOLD:
        return None  # the speed is the same on both sides: a charge step, if anything
    return replace(_placed("switch", model, gains, times, SWITCH_THRESHOLD), statistic=both)


def _apart(gram: FloatArray) -> np.ndarray:
    """Whether drift and drive of one side are different columns."""
    product = gram[:, 0, 0] * gram[:, 1, 1]
    determinant = product - gram[:, 0, 1] ** 2
    return np.asarray((product > 0) & (determinant > LEAST_DETERMINANT * product))


def _share(column: FloatArray) -> FloatArray:
    """Share of the information of a whitened column that lies before each row."""
    power = np.cumsum(column**2)
    return np.concatenate(([0.0], power[:-1])) / max(float(power[-1]), 1e-300)


def _placed(kind: str, model: _Model, gains: FloatArray, times: FloatArray, threshold: float) -> Change:
    """Time of a change with its uncertainty: the likelihood of every step as a weight."""
    weight = np.exp(0.5 * (gains - gains.max())) * (gains > 0)
    weight /= weight.sum()
    begin = times[model.steps.first] + 0.5 * model.steps.exposure
    time = float(weight @ begin)
    std = float(np.sqrt(weight @ (begin - time) ** 2 + np.median(model.steps.dt) ** 2 / 12))
    return Change(kind, int(np.argmax(gains)), time, std, float(gains.max()), threshold)


def _trend(model: _Model, times: FloatArray, conditions: Conditions) -> Change | None:
    """Linear trend of ln r, by what it does to speed and drive."""
    column = _trend_column(model, times, conditions)
    if column.shape[1] == 0:
        return None
    gain = _gain_exact(model, column)
    rate, std = _rate(model, column)
    middle = _middle(model.steps, times)
    kind = "evaporation" if rate < 0 else "growth"
    index = int(np.searchsorted(times[model.steps.first], middle))
    half = 0.5 * float(times[model.steps.first[-1]] - times[model.steps.first[0]])
    return Change(
        kind, min(index, len(column) - 1), middle, half / np.sqrt(3), gain, TREND_THRESHOLD, rate, std
    )


def _middle(steps: Increments, times: FloatArray) -> float:
    """Mid time of the track's steps in s."""
    return 0.5 * float(times[steps.first[0]] + times[steps.first[-1]] + steps.dt[-1])


def _trend_column(model: _Model, times: FloatArray, conditions: Conditions) -> FloatArray:
    """What d ln r / dt = 1/s adds to each step, about mid time; no column where the droplet does not fall."""
    try:
        radius = float(radius_from_fall_speed(model.fit.fall_speed, conditions))
    except PhysicsError:
        return np.empty((len(model.steps), 0))
    pair = radius * np.exp([-1e-3, 1e-3])
    speed_slope = float(np.diff(fall_speed(pair, conditions))[0]) / 2e-3
    mobility_slope = float(np.diff(np.log(droplet_mobility(pair, conditions)))[0]) / 2e-3
    steps = model.steps
    drive = model.fit.drive_per_volt[model.part] * mobility_slope
    middle = times[steps.first] + 0.5 * (steps.dt + steps.exposure) - _middle(steps, times)
    return ((steps.dt * speed_slope + steps.impulse * drive) * middle)[:, None]


def _rate(model: _Model, column: FloatArray) -> tuple[float, float]:
    """Coefficient of a trend column with its standard uncertainty, in 1/s."""
    base, added, data = model.white(column)
    design = np.column_stack([base, added])
    scale = np.linalg.norm(design, axis=0)
    inverse = np.linalg.pinv((design / scale).T @ (design / scale))
    value = (inverse @ ((design / scale).T @ data)) / scale
    return float(value[-1]), float(np.sqrt(inverse[-1, -1]) / scale[-1])


def _refit(
    steps: Increments, part: IntArray, column: FloatArray, trend: Change | None
) -> tuple[Increments, FreeFit, Change | None]:
    """Fit again with the parts and the trend as they are now."""
    numbered = replace(steps, part=part)
    fit = free_fit(_take_out(numbered, column, trend))
    if trend is not None and column.shape[1]:
        rate, std = _rate(_Model(numbered, part, np.empty((len(part), 0)), fit), column)
        trend = replace(trend, rate=rate, rate_std=std)
        fit = free_fit(_take_out(numbered, column, trend))
    return numbered, fit, trend


def _take_out(steps: Increments, column: FloatArray, trend: Change | None) -> Increments:
    """Steps of a droplet that kept the size of mid time."""
    if trend is None or column.shape[1] == 0:
        return steps
    return replace(steps, down=steps.down - trend.rate * column[:, 0])


def _split(part: IntArray, step: int) -> IntArray:
    """Number the parts anew after a charge step before `step`."""
    later = (np.arange(len(part)) >= step) & (part >= part[step])
    return np.where(later, part + 1, part)


def _longer_side(steps: Increments, step: int) -> np.ndarray:
    """Mark the steps of the longer side of a switch."""
    before = np.arange(len(steps)) < step
    return before if np.sum(steps.dt[before]) >= np.sum(steps.dt[~before]) else ~before
