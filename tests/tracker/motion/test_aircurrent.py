"""The air that carries all droplets: steady and changing."""

from __future__ import annotations

import numpy as np
import pytest
from diffusing_droplets import CONDITIONS, Plan, record
from happening_droplets import Camera, Life, made_bench, made_tracks, record_path, schedule

from physics.motion import free_fit
from tracker.motion.aircurrent import Drift, find_air_current, find_drift, robust_mean
from tracker.motion.field import field_from_list
from tracker.motion.velocity import Orientation, View, paths

CAMERA = Camera(seconds=30.0, steps=schedule(4e4, seconds=30.0))


def recorded(tmp_path, rng, count=12, **motion):
    lives = [Life(float(r), int(n)) for r, n in zip(rng.uniform(0.5e-6, 1e-6, count), rng.integers(-6, 7, count),
                                                    strict=True)]  # fmt: skip
    tracks, recording = made_tracks(rng, lives, CAMERA, **motion)
    bench = made_bench(tmp_path, CAMERA)
    field = field_from_list(bench.field.entries, recording)
    return paths(tracks, View(recording, field, bench.scale, CAMERA.exposure), Orientation(0.0, 0.0, "bench"))


def drift_of(given):
    return find_drift(given, [free_fit(path.steps) for path in given])


def test_still_air_has_no_changing_current(tmp_path):
    """Of 60 recordings in steady air at most two show a change: two tests at 1 in 1000 each."""
    rng = np.random.default_rng(71)
    found = [drift_of(recorded(tmp_path, rng, count=6, air=(2e-6, -5e-6))) for _ in range(60)]
    assert sum(len(drift.times) > 0 for drift in found) <= 2


def test_a_swinging_current_is_found_and_taken_out(tmp_path):
    """A gust of 8 um/s amplitude along and across gravity: its course is followed, and the steps lose it."""
    rng = np.random.default_rng(72)
    given = recorded(tmp_path, rng, gust=(8e-6, -8e-6))
    drift = drift_of(given)
    truth = np.sin(2 * np.pi * drift.times / 20.0)
    truth -= truth.mean()
    # Straight lines between knots 3 s apart miss a swing of 20 s by 5 %; each knot is known to about 1 um/s.
    std = np.sqrt(np.diag(drift.covariance))
    assert np.max(np.abs(drift.down - 8e-6 * truth) / np.hypot(std, 0.6e-6)) < 4
    assert np.max(np.abs(drift.side + 8e-6 * truth) / np.hypot(std, 0.6e-6)) < 4
    before = np.mean([free_fit(path.steps).diffusion for path in given])
    after = np.mean(
        [free_fit(drift.taken_out(path.steps, np.asarray(path.times))).diffusion for path in given]
    )
    still = np.mean(
        [free_fit(path.steps).diffusion for path in recorded(tmp_path, np.random.default_rng(72))]
    )
    assert abs(after / still - 1) < abs(before / still - 1) + 0.02


def test_one_droplet_that_changes_its_charge_is_no_air(tmp_path):
    """A charge step of one droplet does not count as a current of all."""
    rng = np.random.default_rng(73)
    lives = [Life(0.7e-6, 3), Life(0.8e-6, -4), Life(0.6e-6, 2), Life(0.9e-6, 5), Life(0.7e-6, -6),
             Life(0.8e-6, 2, changes=((15.0, 0.8e-6, 9),))]  # fmt: skip
    drift = drift_of([record_path(rng, life, CAMERA) for life in lives])
    assert len(drift.times) == 0


def test_few_droplets_or_short_recordings_have_no_changing_current():
    """With three droplets nothing can be told apart, and the empty drift leaves steps as they are."""
    path = record_path(np.random.default_rng(74), Life(0.7e-6, 3), CAMERA)
    assert len(drift_of([path] * 3).times) == 0
    steps = path.steps
    assert Drift().taken_out(steps, np.asarray(path.times)) is steps
    assert Drift().std_of_mean(steps, np.asarray(path.times)) == 0.0


def test_the_steady_current_pulls_about_the_truth(tmp_path):
    """Side speeds of all droplets give the air's side speed; Brownian motion gives the vertical one, weakly."""
    rng = np.random.default_rng(75)
    pulls = []
    for _ in range(12):
        steps = [path.steps for path in recorded(tmp_path, rng, count=20, air=(4e-6, 6e-6))]
        air = find_air_current([free_fit(s) for s in steps], CONDITIONS)
        pulls.append(((air.down - 4e-6) / air.down_std, (air.side - 6e-6) / air.side_std))
        assert air.down_std < 6e-6
    # rms of 12 pulls of unit variance within 4 / sqrt(24) of 1.
    assert np.sqrt(np.mean(np.square(pulls), axis=0)) == pytest.approx([1.0, 1.0], abs=4 / np.sqrt(24))


def test_no_droplets_have_no_current():
    """Nothing seen is still air without uncertainty of its own."""
    air = find_air_current([], CONDITIONS)
    assert (air.down, air.down_std, air.droplets) == (0.0, 0.0, 0)


def test_a_strange_value_does_not_move_the_mean():
    """A value 100 standard deviations off is left out; the rest is the weighted mean."""
    values, stds = np.array([1.0, 2.0, 3.0, 102.0]), np.array([1.0, 0.5, 1.0, 1.0])
    mean, std = robust_mean(values, stds)
    assert mean == pytest.approx((1 + 2 * 4 + 3) / 6)
    assert std == pytest.approx(1 / np.sqrt(6))


def swayed(rng, air, count=12, **plan):
    """Fits of droplets in air of a speed (down, side)."""
    made = Plan(air_speed=air[0], side_speed=air[1], **plan)
    return [
        free_fit(record(rng, rng.uniform(0.6e-6, 1.1e-6), int(rng.integers(1, 9)), plan=made).steps())
        for _ in range(count)
    ]


@pytest.mark.parametrize("speed", [0.0, 3e-6])
def test_air_that_moves_along_more_than_across_is_within_its_uncertainty(speed):
    """Speeds along and across are drawn independently: a side speed near 0 must not hold the other at 0."""
    rng = np.random.default_rng(76)
    pulls, stds = [], []
    for _ in range(20):
        air = speed * rng.standard_normal(2)
        found = find_air_current(swayed(rng, air), CONDITIONS)
        pulls.append((found.down - air[0]) / found.down_std)
        stds.append(found.down_std)
    # rms of 20 pulls of unit variance within four of its standard deviations; a normal prior of the side speed's
    # width gives 4.9 at 3 um/s. In still air the prior helps, and pulls are smaller.
    assert np.sqrt(np.mean(np.square(pulls))) < 1 + 4 / np.sqrt(40)
    assert np.max(np.abs(pulls)) < 4
    # twelve droplets alone, without prior, tell the air to 5 um/s
    assert np.median(stds) < (2e-6 if speed == 0 else 6e-6)


def test_strange_droplets_take_no_part_in_fast_air():
    """Of 12 droplets in air of 10 um/s two diffuse twice as much as they should: the other ten give the speed."""
    rng = np.random.default_rng(77)
    good = swayed(rng, (1e-5, 5e-6), count=10)
    odd = swayed(rng, (1e-5, 5e-6), count=2, diffusion_factor=2.0)
    alone, joined = find_air_current(good, CONDITIONS), find_air_current([*odd, *good], CONDITIONS)
    assert joined.droplets == 10
    assert joined.down == pytest.approx(alone.down, abs=0.3 * alone.down_std)
    assert abs(joined.down - 1e-5) < 3 * joined.down_std
