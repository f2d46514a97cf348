"""How many droplets, or how much longer tracks, resolve the charge unit: the expected gain of each droplet.

A droplet of charge n a, seen with the standard deviation s, adds on average a known amount to the statistic
of the true comb and takes a known amount from every rival. The sums over droplets are nearly normal, so that
their means and variances say how many droplets pass both thresholds.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from physics.comb import OUTLIER_SHARES, wrapped_normal

FloatArray = NDArray[np.float64]

LOG_RATIO_NEEDED = 13.0  # nats over a smooth distribution; chance below 1e-3 in about 300 independent combs
MARGIN_NEEDED = 7.0  # nats over the best other comb; at most ln 2 a sharp droplet, so ten can never do it
MOST_DROPLETS = 20_000  # beyond it no number is told
MOST_TIME = 10.0  # longest factor on the time that is told
_RIVALS = (1 / 2, 2.0, 3 / 2, 2 / 3, 3.0, 1 / 3, 4 / 3, 3 / 4)  # frequencies of the rivals over the true one
_POWER_Z = 1.645  # one-sided 95 %
_RIVAL_LEAD = 1.5  # nats that the best of all rivals gains by chance over the expected one
_BAD_SHARE = 0.05  # share of charges on no tooth that is reckoned with
_NOISE = 61  # points of the normal distribution over which gains are averaged


@dataclass(frozen=True, slots=True)
class Resolution:
    """What would make a set of charges resolve its unit with a probability of 95 %."""

    droplets: int | None  # droplets like these that are needed in all; None: no reasonable number
    more_droplets: int | None  # beyond those at hand
    time_factor: float | None  # tracks of the same droplets so many times as long; None: no reasonable time
    sentence: str


def droplets_to_resolve(numbers: ArrayLike, phase_stds: ArrayLike) -> int | None:
    """Number of droplets like these that resolve the charge unit in 95 % of sets.

    Parameters
    ----------
    numbers : array_like of shape (N,)
        Charge numbers, without the uncharged.
    phase_stds : array_like of shape (N,)
        Standard uncertainty of each charge over the unit, above 0.

    Returns
    -------
    droplets : int or None
        None if more than 20 000 are needed.

    Notes
    -----
    The mean and variance of a droplet's gain are taken over normal noise and over the droplets, 5 % of them
    on no tooth; gains against the combs of 1/3 to 3 times the unit decide.
    """
    gain, leads = _gains(np.abs(np.asarray(numbers, dtype=float)), np.asarray(phase_stds, dtype=float))
    needs = [_count(gain, LOG_RATIO_NEEDED), *(_count(lead, MARGIN_NEEDED + _RIVAL_LEAD) for lead in leads)]
    need = max(needs)
    return int(np.ceil(need)) if need <= MOST_DROPLETS else None


def _gains(numbers: FloatArray, stds: FloatArray) -> tuple[FloatArray, list[FloatArray]]:
    """Gain (N, Z) of each droplet and noise value over a smooth distribution, and over each rival."""
    bad = max(1, round(_BAD_SHARE * _NOISE))
    noise = stds[:, None] * _normal_points(_NOISE - bad)
    anywhere = (np.arange(bad) + 0.5) / bad + np.linspace(0, 1, len(numbers), endpoint=False)[:, None]
    phase = numbers[:, None] + np.concatenate([noise, anywhere], axis=1)
    own = _log_gain(phase, stds[:, None])
    return own, [own - _log_gain(ratio * phase, ratio * stds[:, None]) for ratio in _RIVALS]


def _normal_points(count: int) -> FloatArray:
    """Midpoints of equal shares of the standard normal distribution, scaled to unit variance."""
    from scipy.special import ndtri

    z = ndtri((np.arange(count) + 0.5) / count)
    return np.asarray(z / np.sqrt(np.mean(z**2)))


def _log_gain(phase: FloatArray, std: FloatArray) -> FloatArray:
    """Log ratio of one charge under the smaller share of outliers."""
    share = OUTLIER_SHARES[0]
    return np.asarray(np.log((1 - share) * wrapped_normal(phase, std) + share))


def _count(gain: FloatArray, needed: float) -> float:
    """Smallest N with N mean - z sqrt(N) sd = needed."""
    mean, sd = float(gain.mean()), float(gain.std())
    if mean <= 0:
        return float("inf")
    root = (_POWER_Z * sd + np.sqrt((_POWER_Z * sd) ** 2 + 4 * mean * needed)) / (2 * mean)
    return float(root**2)


def resolution(charges: ArrayLike, own_stds: ArrayLike, *, unit: float) -> Resolution:
    """What would resolve the unit of these charges.

    Parameters
    ----------
    charges, own_stds : array_like of shape (N,)
        Charges that differ from 0 and their own standard uncertainties, in C.
    unit : float
        The unit that is supposed, in C.

    Returns
    -------
    resolution : Resolution
        Droplets of the same kind, or the factor on the time for which these are watched; the uncertainty of a
        charge falls with the square root of that time.
    """
    numbers = np.maximum(1.0, np.rint(np.abs(np.asarray(charges, dtype=float)) / unit))
    stds = np.asarray(own_stds, dtype=float) / unit
    droplets = droplets_to_resolve(numbers, stds)
    more = None if droplets is None else max(1, droplets - len(numbers))
    factor = _time_factor(numbers, stds)
    return Resolution(droplets, more, factor, _sentence(len(numbers), more, factor))


def _time_factor(numbers: FloatArray, stds: FloatArray) -> float | None:
    """Smallest factor on the time at which the droplets at hand are enough."""
    if not _enough(numbers, stds / np.sqrt(MOST_TIME)):
        return None
    low, high = 1.0, MOST_TIME
    while high / low > 1.05:
        middle = float(np.sqrt(low * high))
        low, high = (low, middle) if _enough(numbers, stds / np.sqrt(middle)) else (middle, high)
    return high


def _enough(numbers: FloatArray, stds: FloatArray) -> bool:
    """Tell if the droplets at hand would resolve the unit with these uncertainties."""
    need = droplets_to_resolve(numbers, stds)
    return need is not None and need <= len(numbers)


def _sentence(count: int, more: int | None, factor: float | None) -> str:
    """Tell it in words."""
    by_number = None if more is None else f"about {more} more droplets like these {count}"
    by_time = None if factor is None else f"the same droplets watched {factor:.1f} times as long"
    ways = [way for way in (by_number, by_time) if way]
    if not ways:
        return (
            "Neither more droplets nor longer tracks of this kind would resolve it: "
            "use smaller charges or a higher voltage."
        )
    return f"What would resolve it: {', or '.join(ways)}."
