"""One droplet on its way through the evaluation: cleaned track, history, posterior."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from physics.droplet import Conditions
from physics.motion import DropletPosterior, FreeFit, Increments, droplet_posterior, free_fit, input_responses
from tracker.bench import Bench
from tracker.motion.aircurrent import AirCurrent, Drift, robust_mean
from tracker.motion.changes import History, Rate, find_changes, size_rate
from tracker.motion.judge import is_sparse, is_stuck
from tracker.motion.rows import NAN
from tracker.motion.shelf import Shelf, digest
from tracker.motion.velocity import Path, without_outliers
from tracker.records import FloatArray, IntArray, Settings, Tracks

LEAST_SHARING = 5  # droplets whose rates of shrinking are compared


@dataclass(frozen=True, slots=True)
class Droplet:
    """What is known of one droplet."""

    path: Path
    outliers: int = 0  # sightings that were left out
    hops: tuple[int, ...] = ()  # frames at which the place jumped for good
    fit: FreeFit | None = None  # of the path as one droplet with one charge; None: too few steps
    history: History | None = None  # None: too few steps, or dirt
    posterior: DropletPosterior | None = None
    key: str = ""  # digest of all that it was worked out from, but for the posterior

    @property
    def charge(self) -> tuple[float, float]:
        """Charge of the longest part with its own standard uncertainty in C; nan if there is none."""
        p = self.posterior
        if p is None or p.main_part < 0:
            return NAN, NAN
        return float(p.charge[p.main_part]), float(p.charge_std[p.main_part])

    def used_rows(self, tracks: Tracks) -> IntArray:
        """Rows of the tracks that the fit rests on."""
        if self.history is None:
            return np.empty(0, np.int64)
        first = self.path.steps.first[self.history.kept]
        span = tracks.rows(self.path.droplet)
        used = self.path.frames[np.union1d(first, first + 1)]
        return np.asarray(span.start + np.searchsorted(tracks.sightings.frame[span], used))


def cleaned(path: Path, settings: Settings, key: str = "") -> Droplet:
    """Leave out what does not belong to one droplet.

    Parameters
    ----------
    path : Path
        Of one track.
    settings : Settings
        Least number of sightings.
    key : str, optional
        Digest of path, settings and all else that the recording's droplets rest on; if not given, of the path.

    Returns
    -------
    droplet : Droplet
        With a first fit if the track is long enough.
    """
    key = key or path.digest
    if len(path) < max(settings.min_frames, 2):
        return Droplet(path, key=key)
    left = Droplet(*without_outliers(path), key=key)
    return left if len(left.path) >= settings.min_frames else replace(left, fit=None)


def is_one_droplet(droplet: Droplet, conditions: Conditions) -> bool:
    """Tell whether a track may say something of what all droplets share.

    Parameters
    ----------
    droplet : Droplet
        Cleaned.
    conditions : Conditions
        Of the bench.

    Returns
    -------
    sound : bool
        False for dirt, for chance detections and for tracks whose place jumps.
    """
    return not (droplet.hops or is_sparse(droplet.path) or is_stuck(droplet.path, conditions))


def with_histories(
    droplets: list[Droplet], conditions: Conditions, drift: Drift, *, shelf: Shelf | None = None
) -> list[Droplet]:
    """Look for what happened to the droplets, the air's change of speed taken out.

    Parameters
    ----------
    droplets : list of Droplet
        Cleaned.
    conditions : Conditions
        Of the bench.
    drift : Drift
        Of the air.
    shelf : Shelf, optional
        Keeps what does not change from one evaluation to the next.

    Returns
    -------
    droplets : list of Droplet
        In the same order; without a history where a track is too short, does not move or is no droplet.
    """
    shelf = Shelf() if shelf is None else shelf
    air = digest(arrays=(drift.times, drift.down, drift.side))
    ready = [
        shelf.once("steps", d.key + air, partial(_in_still_air, d, conditions, drift))
        if d.fit is not None and not is_sparse(d.path) and not is_stuck(d.path, conditions) else None
        for d in droplets
    ]  # fmt: skip
    shared = _shared_rate([still.rate for still in ready if still is not None and still.rate is not None])
    return [
        d if still is None else _with_history(d, still, conditions, shared, shelf)
        for d, still in zip(droplets, ready, strict=True)
    ]


@dataclass(frozen=True, slots=True)
class _Still:
    """A droplet's steps as in air that keeps its mean speed."""

    steps: Increments
    fit: FreeFit
    rate: Rate | None
    key: str


def _in_still_air(droplet: Droplet, conditions: Conditions, drift: Drift) -> _Still:
    """Take the air's change of speed out of a droplet's steps."""
    path = droplet.path
    steps = drift.taken_out(path.steps, path.times)
    fit = droplet.fit if steps is path.steps and droplet.fit is not None else free_fit(steps)
    key = droplet.key if steps is path.steps else digest(droplet.key, arrays=(steps.down, steps.side))
    return _Still(steps, fit, size_rate(steps, path.times, conditions, fit), key)


def _with_history(
    droplet: Droplet, still: _Still, conditions: Conditions, shared: Rate | None, shelf: Shelf
) -> Droplet:
    """Look for what happened to one droplet; a history that another shared rate would not change is kept."""
    look = partial(
        find_changes, still.steps, droplet.path.times, conditions, fit=still.fit, shared_rate=shared
    )
    key = still.key
    history = shelf.once("history", key, look)
    if not history.holds_for(shared):
        key = digest(key, shared)
        history = shelf.once("history", key, look)
    return replace(droplet, history=history, key=key)


def _shared_rate(rates: list[Rate]) -> Rate | None:
    """Find d(r^2)/dt common to all droplets in m^2/s; None if they are too few to say."""
    return robust_mean(*np.array(rates).T) if len(rates) >= LEAST_SHARING else None


def with_posteriors(droplets: list[Droplet], bench: Bench, air: AirCurrent) -> list[Droplet]:
    """Find radius and charges of every droplet that has a history.

    Parameters
    ----------
    droplets : list of Droplet
        With histories.
    bench : Bench
        Of the recording.
    air : AirCurrent
        Its vertical speed adds to every fall speed.

    Returns
    -------
    droplets : list of Droplet
        In the same order.
    """
    conditions = bench.conditions
    responses = input_responses(
        conditions, relative_humidity=bench.relative_humidity.value, expansion=bench.oil_expansion,
        viscosity_given="air.viscosity" in bench.viscosity.origin,
    )  # fmt: skip
    done = []
    for d in droplets:
        if d.history is not None:
            std = float(
                np.hypot(air.down_std, air.drift.std_of_mean(d.history.steps, np.asarray(d.path.times)))
            )
            of_steps = partial(
                droplet_posterior, conditions=conditions, air_speed=air.down, air_speed_std=std, responses=responses
            )  # fmt: skip
            steps, doubt = d.history.steps, d.history.doubt
            found = of_steps(steps, fit=d.history.fit)
            if doubt is not None and np.isfinite(found.radius):
                found = _widened(found, of_steps(replace(steps, down=steps.down + doubt)))
            d = replace(d, posterior=found)  # noqa: PLW2901 - the same droplet, known better
        done.append(d)
    return done


def _widened(found: DropletPosterior, other: DropletPosterior) -> DropletPosterior:
    """Add to all uncertainties what one standard uncertainty of a trend's rate does, as `other` shows.

    The rate is fitted together with speed and drives, so values at the best rate are those of the joint fit, and the
    rate's part adds in quadrature.
    """
    shift = np.where(np.isfinite(other.charge), other.charge - found.charge, 0.0)
    if not np.isfinite(other.radius):
        return found
    grown = float(np.hypot(1.0, np.log(other.radius / found.radius) / found.log_radius_std))
    return replace(
        found, radius_std=grown * found.radius_std, log_radius_std=grown * found.log_radius_std,
        radius_interval_68=_stretched(found.radius_interval_68, found.radius, grown),
        radius_interval_95=_stretched(found.radius_interval_95, found.radius, grown),
        fall_speed_std=float(np.hypot(found.fall_speed_std, other.fall_speed - found.fall_speed)),
        mass_std=float(np.hypot(found.mass_std, other.mass - found.mass)),
        charge_std=np.hypot(found.charge_std, shift), charge_cov=found.charge_cov + np.outer(shift, shift),
        charge_std_at_radius=np.hypot(found.charge_std_at_radius, shift),
        charge_interval_68=_charge_bands(found.charge_interval_68, found, shift),
        charge_interval_95=_charge_bands(found.charge_interval_95, found, shift),
    )  # fmt: skip


def _stretched(interval: tuple[float, float], centre: float, factor: float) -> tuple[float, float]:
    """Move both ends of an interval away from a value by a factor."""
    return centre + factor * (interval[0] - centre), centre + factor * (interval[1] - centre)


def _charge_bands(bands: FloatArray, found: DropletPosterior, shift: FloatArray) -> FloatArray:
    """Intervals of the charges, stretched as their standard uncertainties grow."""
    factor = np.hypot(1.0, shift / found.charge_std)[:, None]
    centre = found.charge[:, None]
    return np.asarray(centre + factor * (bands - centre))
