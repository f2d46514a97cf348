"""One droplet on its way through the evaluation: cleaned track, history, posterior."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from physics.droplet import Conditions
from physics.motion import DropletPosterior, FreeFit, Increments, droplet_posterior, free_fit, input_responses
from tracker.bench import Bench
from tracker.motion.aircurrent import AirCurrent, Drift, robust_mean
from tracker.motion.changes import History, find_changes, size_rate
from tracker.motion.judge import is_sparse, is_stuck
from tracker.motion.rows import NAN
from tracker.motion.velocity import Path, without_outliers
from tracker.records import IntArray, Settings

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
        first = self.path.steps().first[self.history.kept]
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
        steps = droplet.path.steps()
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
    responses = input_responses(conditions, viscosity_given="air.viscosity" in bench.viscosity.origin)
    done = []
    for d in droplets:
        if d.history is not None:
            std = float(
                np.hypot(air.down_std, air.drift.std_of_mean(d.history.steps, np.asarray(d.path.times)))
            )
            found = droplet_posterior(
                d.history.steps, conditions, air_speed=air.down, air_speed_std=std, responses=responses
            )
            d = replace(d, posterior=found)  # noqa: PLW2901 - the same droplet, known better
        done.append(d)
    return done
