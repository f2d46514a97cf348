"""One droplet on its way through the evaluation: cleaned track, history, posterior."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from physics.droplet import Conditions
from physics.motion import DropletPosterior, FreeFit, Increments, droplet_posterior, free_fit, input_responses
from tracker.bench import Bench
from tracker.motion.aircurrent import AirCurrent, Drift, robust_mean
from tracker.motion.changes import History, find_changes, size_rate
from tracker.motion.judge import is_sparse, is_stuck
from tracker.motion.rows import NAN
from tracker.motion.velocity import Path, without_outliers
from tracker.records import FloatArray, IntArray, Settings

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

    @property
    def charge(self) -> tuple[float, float]:
        """Charge of the longest part with its own standard uncertainty in C; nan if there is none."""
        p = self.posterior
        if p is None or p.main_part < 0:
            return NAN, NAN
        return float(p.charge[p.main_part]), float(p.charge_std[p.main_part])

    @property
    def used_rows(self) -> IntArray:
        """Rows of the tracks that the fit rests on."""
        if self.history is None:
            return np.empty(0, np.int64)
        first = self.path.steps.first[self.history.kept]
        return np.asarray(self.path.rows[np.union1d(first, first + 1)])


def cleaned(path: Path, settings: Settings) -> Droplet:
    """Leave out what does not belong to one droplet.

    Parameters
    ----------
    path : Path
        Of one track.
    settings : Settings
        Least number of sightings.

    Returns
    -------
    droplet : Droplet
        With a first fit if the track is long enough.
    """
    if len(path) < max(settings.min_frames, 2):
        return Droplet(path)
    left = Droplet(*without_outliers(path))
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


def with_histories(droplets: list[Droplet], conditions: Conditions, drift: Drift) -> list[Droplet]:
    """Look for what happened to the droplets, the air's change of speed taken out.

    Parameters
    ----------
    droplets : list of Droplet
        Cleaned.
    conditions : Conditions
        Of the bench.
    drift : Drift
        Of the air.

    Returns
    -------
    droplets : list of Droplet
        In the same order; without a history where a track is too short, does not move or is no droplet.
    """
    ready: dict[int, tuple[Increments, FreeFit]] = {}
    for i, droplet in enumerate(droplets):
        if droplet.fit is None or is_sparse(droplet.path) or is_stuck(droplet.path, conditions):
            continue
        steps = droplet.path.steps
        still = drift.taken_out(steps, np.asarray(droplet.path.times))
        ready[i] = (still, droplet.fit if still is steps else free_fit(still))
    shared = _shared_rate(droplets, ready, conditions)
    done = list(droplets)
    for i, (steps, fit) in ready.items():
        times = np.asarray(droplets[i].path.times)
        history = find_changes(steps, times, conditions, fit=fit, shared_rate=shared)
        done[i] = replace(droplets[i], history=history)
    return done


def _shared_rate(
    droplets: list[Droplet], ready: dict[int, tuple[Increments, FreeFit]], conditions: Conditions
) -> tuple[float, float] | None:
    """Find d(r^2)/dt common to all droplets in m^2/s; None if they are too few to say."""
    rates = [
        size_rate(s, np.asarray(droplets[i].path.times), conditions, fit) for i, (s, fit) in ready.items()
    ]
    known = [rate for rate in rates if rate is not None]
    if len(known) < LEAST_SHARING:
        return None
    return robust_mean(*np.array(known).T)


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
