"""Whether stated uncertainties hold where what is not known enters: exposure, air, evaporation, the bench."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from happening_droplets import Camera, Life, evaporated, made_bench, made_tracks, record_path, schedule

from calibration.scale import Scale
from physics.budget import SHARED_INPUTS
from physics.droplet import ELEMENTARY_CHARGE
from tracker.motion.aircurrent import AirCurrent, Drift
from tracker.motion.analysis import Given
from tracker.motion.charges import SharedPart
from tracker.motion.droplet import cleaned, with_histories, with_posteriors
from tracker.motion.droplets import evaluate_droplets
from tracker.motion.field import field_from_list
from tracker.motion.velocity import Orientation, View, paths
from tracker.records import Settings

CAMERA = Camera(seconds=24.0, steps=schedule(4e4))


def cluster(rng, count, radii=(0.5e-6, 1.0e-6)):
    numbers = rng.integers(1, 7, count) * rng.choice([-1, 1], count)
    return [Life(float(r), int(n)) for r, n in zip(rng.uniform(*radii, count), numbers, strict=True)]


def evaluated(folder, rng, lives, *, camera=CAMERA, bench=None, **motion):
    """Evaluate droplets in air; `bench` changes the bench of the camera."""
    tracks, recording = made_tracks(rng, lives, camera, **motion)
    made = made_bench(folder, camera)
    made = made if bench is None else bench(made)
    return evaluate_droplets(
        tracks, Given(recording, field_from_list(made.field.entries, recording), made, Settings())
    )


def charge_pulls(lives, found):
    return [(row.charge_c - life.number * ELEMENTARY_CHARGE) / row.charge_own_std_c
            for life, row in zip(lives, found.droplets, strict=True)]  # fmt: skip


@pytest.mark.parametrize("share", [1.0, 0.5, 0.1])
def test_an_exposure_that_is_not_stated_does_not_bias(tmp_path, share):
    """Whatever the shutter did, diffusion and charges hold: the blur is fitted, and the result says so."""
    rng = np.random.default_rng(401)
    camera = replace(CAMERA, open_share=share)
    lives = cluster(rng, 30, radii=(0.35e-6, 0.6e-6))
    found = evaluated(
        tmp_path, rng, lives, camera=camera, bench=lambda b: replace(b, exposure=None), noise_px=0.03
    )
    ratio = [row.diffusion_ratio for row in found.droplets]
    # ln D of one droplet is known to 0.08 in 24 s; the mean of 30 within four of its standard deviations. Blur by
    # half the interval would make it 0.17 too small at an open shutter.
    assert np.mean(np.log(ratio)) == pytest.approx(0.0, abs=4 * 0.1 / np.sqrt(30))
    # rms of 30 pulls of unit variance within four standard deviations of 1.
    assert np.sqrt(np.mean(np.square(charge_pulls(lives, found)))) < 1 + 4 / np.sqrt(60)
    told = [line for line in found.warnings if "camera.exposure" in line]
    assert len(told) == 1
    assert "half the frame interval, 16.7 ms" in told[0]
    assert "fitted" in told[0]
    assert found.exposure == pytest.approx(1 / 60)


@pytest.mark.parametrize(("stated", "warned"), [(0.2, True), (1.0, False)])
def test_an_exposure_that_is_stated_too_short_is_told(tmp_path, stated, warned):
    """With a shutter that is always open, a fifth of it leaves nearly all droplets without place noise."""
    rng = np.random.default_rng(402)
    camera = replace(CAMERA, open_share=1.0)
    exposure = stated / camera.frame_rate
    found = evaluated(
        tmp_path, rng, cluster(rng, 14), camera=camera, noise_px=0.05,
        bench=lambda b: replace(b, exposure=replace(b.exposure, value=exposure)),
    )  # fmt: skip
    assert any("no place noise" in line for line in found.warnings) is warned


def test_the_air_current_is_a_shared_part_of_the_charge_unit(tmp_path):
    """Twice as many droplets in air that moves do not make the unit better known than the air lets it be."""
    rng = np.random.default_rng(403)
    lives = cluster(rng, 40, radii=(0.6e-6, 1.0e-6))
    found = evaluated(tmp_path, rng, lives, air=(0.0, 3e-5), noise_px=0.05)
    unit, std = found.charge_unit, found.air_current["down_std_m_s"]
    assert unit["resolved"]
    speed = np.array([row.fall_speed_m_s for row in found.droplets])
    weight = np.array([(row.charge_c / row.charge_own_std_c) ** 2 for row in found.droplets])
    bench = found.budget["charge_factor_std"]
    # The charge goes with the fall speed to the power 0.6 (1.5 of Stokes' law less slip and drive); Brownian motion
    # takes a tenth of it at these sizes.
    by_air = 0.6 * float(np.average(std / speed, weights=weight))
    shared = np.sqrt((unit["charge_unit_shared_std_c"] / unit["charge_unit_c"]) ** 2 - bench**2)
    assert by_air > 0.5 * bench
    assert shared == pytest.approx(by_air, rel=0.3)
    own = unit["charge_unit_own_std_c"] / unit["charge_unit_c"]
    assert own < 1.3 / np.sqrt(weight.sum())  # the own part holds no more than the droplets' own doubt
    assert unit["charge_unit_std_c"] > np.hypot(own, shared) * unit["charge_unit_c"]


def test_the_rate_of_evaporation_blurs_what_holds_at_mid_track(tmp_path):
    """With the field on in the second half alone, charge and rate are tied: pulls still have unit variance."""
    rng = np.random.default_rng(404)
    camera = Camera(seconds=24.0, missing=0.0, steps=((0.0, 0.0), (12.0, 4e4)))
    bench, air = made_bench(tmp_path, camera), AirCurrent(0.0, 0.0, 0.0, 0.0, 0)
    life = evaporated(Life(0.9e-6, 3), 0.2, 24.0)
    droplets = [cleaned(record_path(rng, life, camera), Settings()) for _ in range(40)]
    made = with_posteriors(with_histories(droplets, bench.conditions, Drift()), bench, air)
    with_trend = [d for d in made if d.history.trend is not None and len(d.posterior.charge) == 1]
    assert len(with_trend) > 20
    charge = [(d.charge[0] - 3 * ELEMENTARY_CHARGE) / d.charge[1] for d in with_trend]
    radius = [np.log(d.posterior.radius / 0.9e-6) / d.posterior.log_radius_std for d in with_trend]
    # rms of 20 to 40 pulls within three of its standard deviations; the rate taken as exact gives 1.7 and 1.8.
    assert np.sqrt(np.mean(np.square(charge))) == pytest.approx(1.0, abs=3 / np.sqrt(2 * 20))
    assert np.sqrt(np.mean(np.square(radius))) == pytest.approx(1.0, abs=3 / np.sqrt(2 * 20))
    for d in with_trend:
        density = np.exp(d.posterior.charge_log_density(d.charge[0] + d.charge[1] * np.linspace(-6, 6, 241)))
        assert np.sum(density) * 0.05 * d.charge[1] == pytest.approx(1.0, abs=1e-3)
        low, high = d.posterior.charge_interval_68[0]
        assert high - low == pytest.approx(2 * d.charge[1], rel=0.1)


def with_scale(bench, factor, rel_std):
    size = factor * bench.scale.metres_per_pixel_x
    return replace(bench, scale=Scale.from_metres_per_pixel(size, rel_std * size))


def test_radius_and_fall_speed_hold_what_the_scale_may_do_to_them(tmp_path):
    """Where the scale is known to 2 %, that and the droplet's own part are joined in both; the own part is stored."""
    lives = cluster(np.random.default_rng(405), 6)
    sharp, vague = (
        evaluated(
            tmp_path, np.random.default_rng(406), lives, bench=lambda b, std=std: with_scale(b, 1.0, std)
        )
        for std in (1e-6, 0.02)
    )
    for a, b in zip(sharp.droplets, vague.droplets, strict=True):
        assert (b.radius_m, b.fall_speed_m_s) == (a.radius_m, a.fall_speed_m_s)
        grown = np.sqrt(b.fall_speed_std_m_s**2 - a.fall_speed_std_m_s**2)
        assert grown == pytest.approx(0.02 * a.fall_speed_m_s, rel=0.01)
        assert b.radius_std_m > a.radius_std_m
        own = vague.budget["log_radius_own_stds"][str(b.droplet)]
        assert own == sharp.budget["log_radius_own_stds"][str(a.droplet)]
        assert own * b.radius_m == pytest.approx(a.radius_std_m, rel=0.05)  # all else is known to 0.1 %


def test_the_shared_part_of_a_radius_is_how_far_a_wrong_scale_moves_it(tmp_path):
    """The same tracks at a scale 1 % larger, the air known: the radius moves by its shared uncertainty for 1 %."""
    tracks, recording = made_tracks(
        np.random.default_rng(407), cluster(np.random.default_rng(408), 6), CAMERA
    )
    bench, air = made_bench(tmp_path, CAMERA), AirCurrent(0.0, 0.0, 0.0, 0.0, 0)
    field = field_from_list(bench.field.entries, recording)

    def posteriors(bench):
        found = paths(
            tracks, View(recording, field, bench.scale, CAMERA.exposure), Orientation(0.0, 0.0, "bench")
        )
        made = [cleaned(path, Settings()) for path in found]
        return with_posteriors(with_histories(made, bench.conditions, Drift()), bench, air)

    here, there = posteriors(bench), posteriors(with_scale(bench, 1.01, 0.0))
    only_scale = SharedPart.of(here, with_scale(bench, 1.0, 0.01), 0.0)
    errors = np.where(np.array(SHARED_INPUTS) == "scale", only_scale.errors, 0.0)
    only_scale = replace(only_scale, errors=errors)
    for i, (a, b) in enumerate(zip(here, there, strict=True)):
        moved = abs(np.log(b.posterior.radius / a.posterior.radius))
        # second order of 1 % is 1 % of it; the least moves where fall speed and Brownian motion pull apart
        assert only_scale.of_droplet(i).log_radius == pytest.approx(moved, rel=0.05, abs=1e-4)
        assert only_scale.of_droplet(i).log_speed == pytest.approx(0.01)


def test_voltages_that_count_as_exact_are_told(tmp_path):
    """Without cell.voltage and without brackets nothing says how well the voltage is known: the result does."""
    rng = np.random.default_rng(409)
    made = [evaluated(tmp_path, rng, [Life(0.8e-6, 4)], bench=lambda b, c=change: replace(b, **c))
            for change in ({"voltage": None, "voltage_rel_std": 0.0}, {})]  # fmt: skip
    told = [any("count as exact" in line for line in found.warnings) for found in made]
    assert told == [True, False]
