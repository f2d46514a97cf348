"""One droplet on its way through the evaluation: cleaned track, history, posterior."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from physics.droplet import Conditions
from physics.motion import MIN_INCREMENTS, DropletPosterior, FreeFit, droplet_posterior, input_responses
from tracker.bench import Bench
from tracker.motion.aircurrent import AirCurrent, Drift
from tracker.motion.changes import History, find_changes
from tracker.motion.judge import is_stuck
from tracker.motion.rows import NAN
from tracker.motion.velocity import Path, without_outliers
from tracker.records import IntArray, Settings


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
    return Droplet(*without_outliers(path))


def with_history(droplet: Droplet, conditions: Conditions, settings: Settings, drift: Drift) -> Droplet:
    """Look for what happened to a droplet, the air's change of speed taken out.

    Parameters
    ----------
    droplet : Droplet
        Cleaned.
    conditions : Conditions
        Of the bench.
    settings : Settings
        Least number of sightings.
    drift : Drift
        Of the air.

    Returns
    -------
    droplet : Droplet
        Without a history if it is too short or does not move.
    """
    path = droplet.path
    if len(path) < max(settings.min_frames, 2) or is_stuck(path, conditions):
        return droplet
    steps = path.steps()
    if len(steps) < MIN_INCREMENTS:
        return droplet
    times = np.asarray(path.times)
    still = drift.taken_out(steps, times)
    fit = droplet.fit if still is steps else None
    return replace(droplet, history=find_changes(still, times, conditions, fit=fit))


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
