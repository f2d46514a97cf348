"""Charge unit of each bench from week to week: a bench whose charges drift is named with the size of the drift."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date, timedelta

import numpy as np
from numpy.typing import NDArray

from physics.budget import explaining_errors
from physics.droplet import ELEMENTARY_CHARGE
from physics.quanta import unit_ratio
from tracker.term.pool import BenchUnit, Pool
from tracker.term.poolcharges import Charges, joined, sample_of

FloatArray = NDArray[np.float64]

CALLED_DRIFT = (
    3.0  # standard uncertainties of the slope; 0.3 % of steady benches are called drifting by chance
)
_PRIOR = 0.06  # relative: how far a week may lie from its bench; wide, so that a drift is not held back
_FEWEST = 4  # charges in a week
_EXPLAINED_BY = ("voltage", "plate_gap", "scale")


@dataclass(frozen=True, slots=True)
class Week:
    """One week of one bench."""

    monday: date
    recordings: int
    charges: int
    ratio: float  # charge unit over e; nan with fewer than four charges
    own_std: float


@dataclass(frozen=True, slots=True)
class Drift:
    """One bench over the weeks."""

    label: str
    weeks: tuple[Week, ...]  # in order
    start: float  # ratio of the fitted line in the term's first week; nan with fewer than two weeks
    slope: float  # change of the ratio per week
    slope_std: float  # own standard uncertainty
    scatter: float  # weighted sum of squares about the line over its degrees of freedom; nan without any
    sentence: str

    @property
    def drifts(self) -> bool:
        """Tell whether the slope differs from 0 by more than three standard uncertainties."""
        return bool(abs(self.slope) > CALLED_DRIFT * self.slope_std)


def monday_of(day: date) -> date:
    """Give the Monday of a day's week.

    Parameters
    ----------
    day : date
        Any day.

    Returns
    -------
    monday : date
        That day or up to six days earlier.
    """
    return day - timedelta(days=day.weekday())


def bench_drifts(pool: Pool, days: Mapping[str, date]) -> list[Drift]:
    """Follow every bench of a pool over the weeks.

    Parameters
    ----------
    pool : Pool
        Of the results of a term.
    days : mapping of str to date
        Day of each recording, by the names of results that the pool's benches list.

    Returns
    -------
    drifts : list of Drift
        In the order of the pool's benches.

    Notes
    -----
    Each week's ratio rests on its own charges against the bench's unit; uncertainties are own ones, since what
    the droplets of a bench share does not change from week to week. The line is fitted with weights 1/std^2,
    and the stated uncertainties are absolute.
    """
    first = min(map(monday_of, days.values()), default=date(2000, 1, 3))
    return [_drift(bench, days, first) for bench in pool.benches]


def _drift(bench: BenchUnit, days: Mapping[str, date], first: date) -> Drift:
    members: defaultdict[date, list[Charges]] = defaultdict(list)
    for name, part in zip(bench.results, bench.parts, strict=True):
        if name in days:
            members[monday_of(days[name])].append(part)
    unit = bench.ratio * ELEMENTARY_CHARGE if np.isfinite(bench.ratio) else ELEMENTARY_CHARGE
    weeks = tuple(_week(monday, members[monday], unit, bench) for monday in sorted(members))
    told = [week for week in weeks if np.isfinite(week.ratio)]
    at = np.array([(week.monday - first).days / 7 for week in told])
    start, slope, std, scatter = fit_line(
        at, np.array([w.ratio for w in told]), np.array([w.own_std for w in told])
    )
    drift = Drift(bench.label, weeks, start, slope, std, scatter, "")
    return Drift(bench.label, weeks, start, slope, std, scatter, _sentence(drift, bench, at))


def _week(monday: date, members: Sequence[Charges], unit: float, bench: BenchUnit) -> Week:
    """One week's ratio from its own charges."""
    sample = sample_of(joined(members), bench.sample.shared_rel_std)
    if len(sample) < _FEWEST:
        return Week(monday, len(members), len(sample), float("nan"), float("nan"))
    ratio, std = unit_ratio(sample, unit, prior_rel_std=_PRIOR)
    factor = unit / ELEMENTARY_CHARGE
    return Week(monday, len(members), len(sample), ratio * factor, std * factor)


def fit_line(at: FloatArray, value: FloatArray, std: FloatArray) -> tuple[float, float, float, float]:
    """Fit a straight line with absolute uncertainties.

    Parameters
    ----------
    at, value, std : ndarray of shape (N,)
        Place, value and standard uncertainty of each point.

    Returns
    -------
    start, slope, slope_std, scatter : float
        Value at 0, slope and its standard uncertainty, and the reduced sum of squares; nan where N is too small
        (slope: 2 different places; scatter: 3 points).

    References
    ----------
    .. [1] P. R. Bevington, D. K. Robinson, Data Reduction and Error Analysis for the Physical Sciences, 3rd ed.
       (2003), section 6.3.
    """
    nan = float("nan")
    if len(set(at.tolist())) < 2:
        return nan, nan, nan, nan
    weight = std**-2.0
    mean_at, mean = np.average(at, weights=weight), np.average(value, weights=weight)
    spread = float(np.sum(weight * (at - mean_at) ** 2))
    slope = float(np.sum(weight * (at - mean_at) * (value - mean)) / spread)
    start = float(mean - slope * mean_at)
    rest = float(np.sum(weight * (value - start - slope * at) ** 2))
    return start, slope, spread**-0.5, rest / (len(at) - 2) if len(at) > 2 else nan


def _sentence(drift: Drift, bench: BenchUnit, at: FloatArray) -> str:
    """Say whether a bench drifts, by how much, and what would explain it."""
    if not np.isfinite(drift.slope):
        return f"{drift.label}: seen in one week only, or with too few charges; a drift cannot be told."
    percent, std = 100 * drift.slope, 100 * drift.slope_std
    if not drift.drifts:
        return f"{drift.label}: no drift seen, {percent:+.3f} % a week with a standard uncertainty of {std:.3f} %."
    length = float(at.max() - at.min())
    found = explaining_errors(1 + drift.slope * length, bench.budget)
    ways = "; ".join(
        _way(name, found[name], abs(_slope(bench, name)) * drift.slope_std * length)
        for name in _EXPLAINED_BY
        if name in found
    )
    return (
        f"{drift.label}: DRIFTS: its charge unit changes by {percent:+.3f} % ({std:.3f} %) a week, "
        f"{percent * length:+.2f} % from the first to the last week. One of these would explain it: {ways}."
    )


def _way(name: str, error: float, std: float) -> str:
    """Words for one input that would explain a drift: `error` is stated less true, over true, at the end."""
    side = "below" if error > 0 else "above"
    return f"a {name.replace('_', ' ')} that went {100 * abs(error):.2f} % ({100 * std:.2f} %) {side} the stated one"


def _slope(bench: BenchUnit, name: str) -> float:
    """Relative error of an input per relative error of the charges."""
    row = next(row for row in bench.budget.rows if row.input == name)
    return 1 / (row.sensitivity * row.value)
