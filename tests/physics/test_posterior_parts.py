"""Charge parts, what gives no charge or radius and why, and air of a known speed."""

from __future__ import annotations

import pickle
from dataclasses import replace

import numpy as np
import pytest
from diffusing_droplets import CONDITIONS, Plan, record, stepped
from scipy.special import logsumexp

from physics.droplet import (
    ELEMENTARY_CHARGE,
    droplet_mobility,
    fall_speed,
)
from physics.errors import PhysicsError
from physics.motion import NO_CHARGE_REASONS, droplet_posterior, free_fit

# --- charge parts ------------------------------------------------------------------------------------------------


def test_parts_share_the_radius_and_have_charges_of_their_own():
    """Over 60 droplets with a step of one e both charges, their difference and their correlation come out right."""
    rng = np.random.default_rng(7)
    results = [droplet_posterior(stepped(rng), CONDITIONS) for _ in range(60)]
    charge = np.array([r.charge for r in results]) / ELEMENTARY_CHARGE - np.array([5, 6])
    cov = np.mean([r.charge_cov for r in results], axis=0) / ELEMENTARY_CHARGE**2
    sample = np.cov(charge.T)
    # variances of 60: 18 %, times 2.5
    assert np.diag(sample) == pytest.approx(np.diag(cov), rel=0.46)
    assert cov[0, 1] / np.sqrt(cov[0, 0] * cov[1, 1]) > 0.5
    assert np.corrcoef(charge.T)[0, 1] == pytest.approx(cov[0, 1] / np.sqrt(cov[0, 0] * cov[1, 1]), abs=0.25)
    difference = charge[:, 1] - charge[:, 0]
    assert np.var(difference) == pytest.approx(cov[0, 0] + cov[1, 1] - 2 * cov[0, 1], rel=0.46)
    for r in results[:5]:
        assert r.part_number_log_likelihood.shape == (2, len(r.number_values))
        assert np.array_equal(r.number_log_likelihood, r.part_number_log_likelihood[r.main_part])
        assert r.charge_std == pytest.approx(np.sqrt(np.diag(r.charge_cov)))


def test_a_part_without_field_has_no_charge_and_the_rest_has():
    """The part that never saw the field is NaN; the droplet's charge is that of the other part."""
    track = record(np.random.default_rng(8), 6e-7, 5, plan=Plan(pattern=(0, 1, 0, -1, 0, 0, 0, 0)))
    result = droplet_posterior(track.steps(part=(track.times[1:] > 13.0).astype(int)), CONDITIONS)
    assert result.reason == ""
    assert result.main_part == 0
    assert np.isnan(result.charge[1])
    assert np.isnan(result.charge_log_density([0.0], part=1)).all()
    assert result.charge[0] == pytest.approx(5 * ELEMENTARY_CHARGE, abs=4 * result.charge_std[0])


# --- no charge, no radius ----------------------------------------------------------------------------------------


def test_never_field_on_gives_a_radius_and_a_reason():
    """Without field there is a radius but no charge, and the reason says why."""
    result = droplet_posterior(
        record(np.random.default_rng(9), 6e-7, 5, plan=Plan(pattern=(0,))).steps(), CONDITIONS
    )
    assert result.reason == "never_field_on"
    assert np.isnan(result.charge).all()
    assert result.radius == pytest.approx(6e-7, rel=4 * result.log_radius_std)
    assert np.isnan(result.sensitivities["scale"][1])
    assert result.sensitivities["scale"][0] > 0


def test_rising_without_field_gives_no_radius():
    """Upside down the droplet rises without field, which no weight explains."""
    track = record(np.random.default_rng(10), 6e-7, 5)
    result = droplet_posterior(replace(track, down=-track.down).steps(), CONDITIONS)
    assert result.reason == "not_falling"
    assert np.isnan([result.radius, result.fall_speed, result.charge[0]]).all()
    assert result.free.fall_speed < 0


def test_too_few_steps_give_a_reason():
    """Seven steps are no droplet, and no error."""
    track = record(np.random.default_rng(11), 6e-7, 5)
    result = droplet_posterior(track.steps(breaks=np.arange(len(track.times) - 1) >= 7), CONDITIONS)
    assert result.reason == "too_few_steps"
    assert result.free is None
    assert set(NO_CHARGE_REASONS) == {"too_few_steps", "never_field_on", "not_falling", "out_of_range"}


@pytest.mark.parametrize(
    ("down", "reason"),
    [(0.0, "not_falling"), (1e-4, ""), (0.1, "out_of_range")],
    ids=["still", "ruled", "fast"],
)
def test_motion_that_no_droplet_makes_gives_a_reason(down, reason):
    """A spot that stands still, one drawn with a ruler and one at 10 cm/s pass through without an error."""
    track = record(np.random.default_rng(24), 6e-7, 5, plan=Plan(seconds=6.0))
    ruled = replace(track, down=down * track.times, side=np.zeros_like(track.times))
    result = droplet_posterior(ruled.steps(), CONDITIONS)
    assert result.reason == reason
    assert result.free.diffusion < 1e-17
    if not reason:  # only the fall speed is believable: diffusion contradicts it
        assert result.inconsistent


def test_one_voltage_all_the_time_still_gives_a_charge():
    """Held at one voltage, radius comes from Brownian motion alone, and the charge with it, wide but right."""
    pulls = []
    rng = np.random.default_rng(12)
    for _ in range(40):
        result = droplet_posterior(record(rng, 6e-7, -3, plan=Plan(pattern=(1,))).steps(), CONDITIONS)
        pulls.append((result.charge[0] + 3 * ELEMENTARY_CHARGE) / result.charge_std[0])
        assert 0.03 < result.log_radius_std < 0.12
    assert np.std(pulls) == pytest.approx(1.0, abs=0.05 + 3 / np.sqrt(80))


def test_neutral_droplet_has_number_zero():
    """A droplet without charge gets the number 0 with its probability, and finite sensitivities."""
    result = droplet_posterior(record(np.random.default_rng(13), 6e-7, 0).steps(), CONDITIONS)
    probability = np.exp(result.number_log_likelihood - logsumexp(result.number_log_likelihood))
    assert result.number_values[np.argmax(probability)] == 0
    assert probability.max() > 0.99
    assert np.isfinite([pair for pairs in result.sensitivities.values() for pair in pairs]).all()


@pytest.mark.parametrize(
    "wrong", [{"air_speed": np.nan}, {"air_speed_std": -1e-6}, {"air_speed_std": np.nan}]
)
def test_impossible_air_speeds_are_refused(wrong):
    """An air speed that is not finite, or a negative uncertainty, raises."""
    with pytest.raises(PhysicsError):
        droplet_posterior(record(np.random.default_rng(15), 6e-7, 5).steps(), CONDITIONS, **wrong)


def test_result_pickles_and_is_the_same_with_the_fit_at_hand():
    """The record survives a worker process; a free fit that was made before changes nothing."""
    steps = record(np.random.default_rng(16), 6e-7, 5).steps()
    result = droplet_posterior(steps, CONDITIONS, fit=free_fit(steps))
    plain = droplet_posterior(steps, CONDITIONS)
    assert (result.charge.tolist(), result.radius) == (plain.charge.tolist(), plain.radius)
    assert result.number_values.tolist() == list(range(-10, 11))
    with pytest.raises(ValueError, match="read-only"):
        result.charge[0] = 0.0
    again = pickle.loads(pickle.dumps(result))
    assert np.array_equal(again.number_log_likelihood, result.number_log_likelihood)


# --- air current -------------------------------------------------------------------------------------------------


def test_air_speed_is_taken_off_and_its_doubt_widens_the_result():
    """A known updraught is corrected; its uncertainty adds to ln r in quadrature where Brownian motion is no help.

    Closed form: d ln r = du / (v dln v/dln r).
    """
    radius = 1e-6
    track = record(np.random.default_rng(17), radius, 5, plan=Plan(air_speed=-5e-6))
    plain = droplet_posterior(track.steps(), CONDITIONS)
    known = droplet_posterior(track.steps(), CONDITIONS, air_speed=-5e-6)
    doubtful = droplet_posterior(track.steps(), CONDITIONS, air_speed=-5e-6, air_speed_std=2e-6)
    up, down = (float(fall_speed(radius * f, CONDITIONS)) for f in (1.01, 1 / 1.01))
    slope = (up - down) / (2 * np.log(1.01))
    assert np.log(known.radius / plain.radius) == pytest.approx(5e-6 / slope, rel=0.05)
    assert np.log(known.radius / radius) == pytest.approx(0.0, abs=4 * known.log_radius_std)
    # at 1 um diffusion knows r to 6 %, which takes 2 % off a doubt of 1 %
    assert doubtful.log_radius_std == pytest.approx(np.hypot(known.log_radius_std, 2e-6 / slope), rel=0.05)
    # q = b d / B with b from the same steps: dln q = -dln B, at most
    bend = np.log(droplet_mobility(radius / 1.01, CONDITIONS) / droplet_mobility(radius * 1.01, CONDITIONS))
    charge_part = 5 * ELEMENTARY_CHARGE * float(bend) / (2 * np.log(1.01)) * 2e-6 / slope
    assert doubtful.charge_std[0] == pytest.approx(np.hypot(known.charge_std[0], charge_part), rel=0.05)
    far = droplet_posterior(track.steps(), CONDITIONS, air_speed_std=1.0)
    by_motion = free_fit(track.steps()).log_diffusion_std / 1.14  # dln D/dln r at 1 um
    assert far.log_radius_std == pytest.approx(by_motion, rel=0.1)


def test_the_part_of_the_air_in_a_charge_is_its_slope_times_the_airs_uncertainty():
    """In air one standard deviation off what is assumed, charges shift by the slope and scatter by what is left."""
    std = 3e-6
    below, above = (
        [
            droplet_posterior(
                record(np.random.default_rng(seed), 5e-7, 4, plan=Plan(air_speed=air)).steps(), CONDITIONS,
                air_speed_std=std,
            )
            for seed in range(80)
        ]
        for air in (-std, std)
    )  # fmt: skip
    low, high = (np.array([p.charge[0] for p in made]) for made in (below, above))
    by_air = np.mean([p.charge_per_air_speed[0] for p in [*below, *above]]) * std
    left = np.sqrt(np.mean([p.charge_std[0] ** 2 for p in [*below, *above]]) - by_air**2)
    assert abs(by_air) > 0.25 * left
    # the same Brownian motion in both airs, so that the difference is known to a few per cent; third order 5 %
    assert (high - low).mean() / 2 == pytest.approx(-by_air, rel=0.1)
    # the scatter of 80 to 8 %; four standard deviations
    assert high.std() == pytest.approx(left, rel=4 / np.sqrt(160))
