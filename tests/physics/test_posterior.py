"""Radius, charges and charge numbers of one droplet: against brute-force integration, and against simulated truth."""

from __future__ import annotations

import pickle
import time
from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from dense_motion import step_covariance
from diffusing_droplets import CONDITIONS, Plan, record
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import logsumexp

from physics.air import dry_mean_free_path, moist_air
from physics.budget import SHARED_INPUTS
from physics.droplet import (
    BOLTZMANN,
    ELEMENTARY_CHARGE,
    Conditions,
    diffusion,
    droplet_mobility,
    fall_speed,
    mass,
    radius_from_fall_speed,
)
from physics.errors import PhysicsError
from physics.motion import NO_CHARGE_REASONS, droplet_posterior, free_fit, input_responses

# --- against brute force -----------------------------------------------------------------------------------------


def brute_force(track, log_radius, numbers, log_rho):
    """Log likelihood on a grid (radius, number, rho), side drift integrated, from dense matrices."""
    radius = np.exp(log_radius)
    v, b, d = (
        fall_speed(radius, CONDITIONS),
        droplet_mobility(radius, CONDITIONS),
        diffusion(radius, CONDITIONS),
    )
    drift, drive = np.diff(track.times), np.diff(track.impulse)
    down, side = np.diff(track.down), np.diff(track.side)
    typical = np.sqrt(np.median(track.std**2))
    table = np.empty((len(radius), len(numbers), len(log_rho)))
    for k, rho in enumerate(np.exp(log_rho)):
        matrix = step_covariance(track.times, track.exposure, 1.0, np.sqrt(rho) * track.std / typical)
        factor, log_det = np.linalg.cholesky(matrix), np.linalg.slogdet(matrix)[1]
        g, field, y, x = np.linalg.solve(factor, np.stack([drift, drive, down, side], axis=1)).T
        side_left = x @ x - (g @ x) ** 2 / (g @ g)
        for i in range(len(radius)):
            per_volt = b[i] * numbers * ELEMENTARY_CHARGE / CONDITIONS.plate_gap
            chi2 = (np.sum((y - v[i] * g - per_volt[:, None] * field) ** 2, axis=1) + side_left) / d[i]
            constant = (2 * len(drift) - 1) * np.log(d[i]) + 2 * log_det + np.log(g @ g)
            table[i, :, k] = -0.5 * (constant + chi2)
    return table


@pytest.mark.parametrize(("radius", "number", "seed"), [(3e-7, 3, 1), (4e-7, -2, 2), (8e-7, 4, 3)])
def test_posterior_equals_brute_force_integration(radius, number, seed):
    """Means, spreads and charge-number likelihoods equal those of a three-dimensional grid of dense likelihoods."""
    track = record(
        np.random.default_rng(seed), radius, number, plan=Plan(seconds=6.0, noise_px=0.5, noise_spread=0.2)
    )
    result = droplet_posterior(track.steps(), CONDITIONS)
    fit = result.free
    log_radius = np.log(result.radius) + result.log_radius_std * np.linspace(-6, 6, 33)
    numbers = (result.charge[0] + result.charge_std[0] * np.linspace(-6, 6, 33)) / ELEMENTARY_CHARGE
    log_rho = fit.log_rho + fit.log_rho_std * np.linspace(-4, 4, 17)
    table = brute_force(track, log_radius, numbers, log_rho)
    weight = np.exp(table - table.max())
    weight /= weight.sum()
    of_radius, of_number = weight.sum(axis=(1, 2)), weight.sum(axis=(0, 2))
    mean_r, mean_n = of_radius @ log_radius, of_number @ numbers
    std_r = np.sqrt(of_radius @ (log_radius - mean_r) ** 2)
    std_n = np.sqrt(of_number @ (numbers - mean_n) ** 2)
    # the noise grids end at 3.5 and 4 standard deviations: 1e-2 of a standard deviation is left open by that
    assert np.log(result.radius) == pytest.approx(mean_r, abs=0.02 * std_r)
    assert result.log_radius_std == pytest.approx(std_r, rel=0.02)
    assert result.charge[0] / ELEMENTARY_CHARGE == pytest.approx(mean_n, abs=0.02 * std_n)
    assert result.charge_std[0] / ELEMENTARY_CHARGE == pytest.approx(std_n, rel=0.02)
    whole = np.arange(-10, 11)
    exact = logsumexp(brute_force(track, log_radius, whole, log_rho), axis=(0, 2))
    ours = result.number_log_likelihood[np.searchsorted(result.number_values, whole)]
    near = exact > exact.max() - 5  # farther out the ends of the noise grids decide
    assert (ours - ours[near].max())[near] == pytest.approx((exact - exact.max())[near], abs=0.05)


def test_intervals_hold_their_share_of_the_density():
    """Equal-tailed intervals of radius and charge hold 68.3 and 95 % of the posterior that is handed out."""
    result = droplet_posterior(
        record(np.random.default_rng(4), 3e-7, 5, plan=Plan(seconds=12.0)).steps(), CONDITIONS
    )
    cumulative = np.cumsum(result.radius_weight)
    grid = np.exp(result.log_radius)
    for interval, share in ((result.radius_interval_68, 0.683), (result.radius_interval_95, 0.95)):
        low, high = np.interp(interval, grid, cumulative)
        assert high - low == pytest.approx(share, abs=0.02)  # steps of the grid's cumulative sum
    charge = np.linspace(-20, 30, 20001) * ELEMENTARY_CHARGE
    density = np.exp(result.charge_log_density(charge)) * (charge[1] - charge[0])
    assert density.sum() == pytest.approx(1.0, abs=1e-6)
    for interval, share in ((result.charge_interval_68[0], 0.6827), (result.charge_interval_95[0], 0.95)):
        inside = (charge > interval[0]) & (charge < interval[1])
        assert density[inside].sum() == pytest.approx(share, abs=0.005)
    mean = density @ charge
    assert result.charge[0] == pytest.approx(mean, rel=1e-6)
    assert result.charge_std[0] == pytest.approx(np.sqrt(density @ (charge - mean) ** 2), rel=1e-4)
    assert result.mass == pytest.approx(result.radius_weight @ mass(grid, CONDITIONS))
    assert result.fall_speed == pytest.approx(result.radius_weight @ fall_speed(grid, CONDITIONS))


# --- against simulated truth -------------------------------------------------------------------------------------

COUNT = 180


@cache
def study(radius: float):
    """Posteriors of droplets of one radius, n 1..15, noise .05 to .3 px, 24 s at 4e4 V/m."""
    rng = np.random.default_rng(round(1e9 * radius))
    rows = []
    for _ in range(COUNT):
        number = int(rng.integers(1, 16))
        track = record(rng, radius, number, plan=Plan(noise_px=float(rng.uniform(0.05, 0.3))))
        rows.append((number, droplet_posterior(track.steps(), CONDITIONS)))
    return rows


@pytest.mark.parametrize(("radius", "most"), [(3e-7, 0.048), (5e-7, 0.026), (1e-6, 0.0052)])
def test_radius_is_as_sharp_as_the_bound_and_its_interval_holds(radius, most):
    """Ln r has the demanded error, hardly any bias, and intervals that hold; Brownian motion included."""
    results = [result for _, result in study(radius)]
    error = np.log([result.radius / radius for result in results])
    pull = error / np.array([result.log_radius_std for result in results])
    # spread of an rms from 180 values: 5.3 %, times 2.3
    assert np.sqrt(np.mean(error**2)) < most * 1.12
    assert abs(np.mean(pull)) < 0.2 + 2.5 / np.sqrt(COUNT)
    for name, share in (("radius_interval_68", 0.683), ("radius_interval_95", 0.95)):
        inside = np.mean([low < radius < high for low, high in (getattr(result, name) for result in results)])
        # binomial, 3 standard deviations, and 0.02 for few degrees of freedom
        assert inside == pytest.approx(share, abs=0.02 + 3 * np.sqrt(share * (1 - share) / COUNT))


def test_brownian_motion_sharpens_small_droplets():
    """At 0.3 um the error of ln r is at most 0.55 of what the fall speed alone would leave.

    Source: bound of the fall speed alone, sqrt(D / information) / (v dln v/dln r).
    """
    results = [result for _, result in study(3e-7)]
    error = np.log([result.radius / 3e-7 for result in results])
    steps = record(np.random.default_rng(1), 3e-7, 5).steps()
    fit = free_fit(steps)
    up, down = (float(fall_speed(3e-7 * f, CONDITIONS)) for f in (1.01, 1 / 1.01))
    slope = np.log(up / down) / (2 * np.log(1.01))
    true_std = fit.fall_speed_std * np.sqrt(float(diffusion(3e-7, CONDITIONS)) / fit.diffusion)
    alone = true_std / float(fall_speed(3e-7, CONDITIONS)) / slope
    assert np.sqrt(np.mean(error**2)) < 0.55 * alone * 1.12


@pytest.mark.parametrize("radius", [3e-7, 5e-7, 1e-6])
def test_charge_pulls_are_standard_normal(radius):
    """Error over stated standard deviation has spread 1, and the charge's intervals hold."""
    rows = study(radius)
    pull = np.array([(r.charge[0] - n * ELEMENTARY_CHARGE) / r.charge_std[0] for n, r in rows])
    assert np.std(pull) == pytest.approx(1.0, abs=0.05 + 3 / np.sqrt(2 * COUNT))
    assert abs(np.mean(pull)) < 0.2 + 2.5 / np.sqrt(COUNT)
    for name, share in (("charge_interval_68", 0.683), ("charge_interval_95", 0.95)):
        inside = np.mean(
            [getattr(r, name)[0, 0] < n * ELEMENTARY_CHARGE < getattr(r, name)[0, 1] for n, r in rows]
        )
        assert inside == pytest.approx(share, abs=0.02 + 3 * np.sqrt(share * (1 - share) / COUNT))


@pytest.mark.parametrize(("radius", "most"), [(3e-7, 0.29), (5e-7, 0.16), (1e-6, 0.085)])
def test_charge_of_five_is_as_sharp_as_demanded(radius, most):
    """At n = 5 the error of q / e is what the bound allows: the stated one, averaged over n, scaled to n = 5."""
    rows = [(n, r) for n, r in study(radius) if 3 <= n <= 7]
    error = np.array([r.charge[0] / ELEMENTARY_CHARGE - n for n, r in rows])
    scale = np.array(
        [most * np.hypot(0.3, n / 5 * 0.954) for n, _ in rows]
    )  # a part fixed by the drive, one by r
    assert np.sqrt(np.mean((error / scale) ** 2)) < 1 + 2.5 / np.sqrt(2 * len(rows))


@pytest.mark.parametrize(("radius", "least"), [(3e-7, 0.71), (5e-7, 0.92), (1e-6, 0.995)])
def test_charge_numbers_are_right_as_often_as_stated(radius, least):
    """The likeliest number is right at the demanded rate, as often as its probability says; sure ones are right."""
    rows = study(radius)
    top, right = [], []
    for number, result in rows:
        probability = np.exp(result.number_log_likelihood - logsumexp(result.number_log_likelihood))
        top.append(probability.max())
        right.append(result.number_values[np.argmax(probability)] == number)
    top, right = np.array(top), np.array(right)
    noise = np.sqrt(np.mean(top * (1 - top)) / COUNT)
    assert right.mean() > least - 2.5 * np.sqrt(least * (1 - least) / COUNT)
    assert np.mean(top) == pytest.approx(right.mean(), abs=0.02 + 2.5 * noise)
    sure = top > 0.95
    # at most 1.5 % of the sure ones, Poisson, 2.5 standard deviations
    assert np.sum(~right[sure]) <= 0.015 * sure.sum() + 2.5 * np.sqrt(0.015 * sure.sum())


def test_ratio_of_diffusions_is_standard_normal_and_sees_a_wrong_droplet():
    """Z of the diffusion ratio has spread 1 for true droplets, and D times 1.5 is beyond 3.29 nearly always."""
    for radius in (5e-7, 1e-6):
        z = np.array([r.diffusion_z for _, r in study(radius)])
        assert np.std(z) == pytest.approx(1.0, abs=0.05 + 3 / np.sqrt(2 * COUNT))
        assert np.mean(z) == pytest.approx(0.0, abs=0.1 + 3 / np.sqrt(COUNT))
    rng = np.random.default_rng(5)
    odd = [record(rng, 5e-7, 5, plan=Plan(diffusion_factor=1.5)) for _ in range(40)]
    z = np.array([droplet_posterior(track.steps(), CONDITIONS).diffusion_z for track in odd])
    assert np.mean(z > 3.29) > 0.97 - 2.5 * np.sqrt(0.97 * 0.03 / 40)


def test_vague_fall_speeds_give_no_ratio():
    """Where the fall speed is uncertain by more than 30 % there is nothing to compare diffusion with."""
    result = droplet_posterior(
        record(np.random.default_rng(6), 3e-7, 5, plan=Plan(seconds=6.0)).steps(), CONDITIONS
    )
    assert result.free.fall_speed_std > 0.3 * abs(result.free.fall_speed)
    assert np.isnan([result.diffusion_ratio, result.diffusion_z]).all()
    assert np.isfinite(result.radius)


# --- charge parts ------------------------------------------------------------------------------------------------


def stepped(rng, radius=6e-7, before=5, after=6):
    """Track whose droplet changes its charge at 12 s, where the field is off."""
    track = record(rng, radius, before)
    per_volt = float(droplet_mobility(radius, CONDITIONS)) * ELEMENTARY_CHARGE / CONDITIONS.plate_gap
    at = np.interp(12.0, track.times, track.impulse)
    change = np.where(track.times > 12.0, (after - before) * per_volt * (track.impulse - at), 0.0)
    track = replace(track, down=track.down + change)
    return track.steps(part=(track.times[1:] > 12.0).astype(int))


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


def test_speeds_that_contradict_brownian_motion_are_marked():
    """With four times the diffusion of its weight a droplet is marked; an ordinary one is not."""
    rng = np.random.default_rng(14)
    odd = droplet_posterior(record(rng, 6e-7, 5, plan=Plan(diffusion_factor=4.0)).steps(), CONDITIONS)
    assert odd.inconsistent
    assert not any(result.inconsistent for _, result in study(5e-7))


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


# --- sensitivities -----------------------------------------------------------------------------------------------


def changed(name: str, factor: float) -> tuple[Conditions, float, float]:
    """Conditions, factor on lengths and factor on volts when one input is stated larger by a relative amount."""
    state = {"temperature": 295.15, "pressure": 1e5, "relative_humidity": 0.5}
    if name == "relative_humidity":
        state[name] += factor - 1
    elif name in state:
        state[name] *= factor
    moved = moist_air(state["temperature"], state["pressure"], relative_humidity=state["relative_humidity"])
    conditions = Conditions(
        temperature=state["temperature"], viscosity=moved.viscosity, mean_free_path=moved.mean_free_path,
        air_density=moved.density, oil_density=886.0, gravity=9.81, plate_gap=6e-3,
    )  # fmt: skip
    if name in ("plate_gap", "oil_density", "gravity"):
        conditions = replace(conditions, **{name: factor * getattr(conditions, name)})
    if name == "viscosity_model":
        conditions = replace(conditions, viscosity=factor * conditions.viscosity)
    return conditions, factor if name == "scale" else 1.0, factor if name == "voltage" else 1.0


@pytest.mark.parametrize("radius", [3e-7, 6e-7])
@pytest.mark.parametrize("name", [n for n in SHARED_INPUTS if n != "slip_model"])
def test_sensitivities_are_those_of_a_new_evaluation(radius, name):
    """Each sensitivity equals the change of ln r and ln q when the droplet is evaluated again, input changed."""
    track = record(np.random.default_rng(18), radius, 5)
    ends = []
    for factor in (0.999, 1.001):
        conditions, lengths, volts = changed(name, factor)
        other = replace(
            track, down=lengths * track.down, side=lengths * track.side, impulse=volts * track.impulse
        )
        result = droplet_posterior(other.steps(), conditions)
        ends.append((np.log(result.radius), np.log(result.charge[0])))
    ours = droplet_posterior(track.steps(), changed(name, 1.0)[0]).sensitivities[name]
    slope = np.diff(ends, axis=0)[0] / 0.002
    # grids are laid anew for each evaluation, 2e-5 of ln r; pressure comes back from the mean free path to 2 %
    assert ours == pytest.approx(slope, abs=0.02, rel=0.02)


def test_sensitivities_name_all_shared_inputs():
    """One pair for each shared input of a bench's budget, and one array for all charge parts."""
    result = droplet_posterior(stepped(np.random.default_rng(19)), CONDITIONS)
    assert set(result.sensitivities) == set(SHARED_INPUTS)
    assert set(result.charge_sensitivities) == set(SHARED_INPUTS)
    assert all(row.shape == (2,) for row in result.charge_sensitivities.values())
    # gap and voltage act on the charge alone, as 1 and -1
    assert result.sensitivities["plate_gap"] == pytest.approx((0.0, 1.0))
    assert result.sensitivities["voltage"] == pytest.approx((0.0, -1.0))


@pytest.mark.parametrize(
    ("radius", "scale", "weight"),
    [(1e-6, (0.52, 1.56), (-0.52, -0.56)), (1.5e-6, (0.51, 1.54), (-0.51, -0.54))],
)
def test_large_droplets_have_the_sensitivities_of_their_fall_speed(radius, scale, weight):
    """Where the fall speed alone gives the radius: 1 / (dln v/dln r), and for the charge with mobility and drive.

    Source: derivatives of v_g(r) = 2 r^2 drho g Cc / (9 eta) and q = b d / B at the two radii.
    """
    sensitivities = [
        droplet_posterior(
            record(np.random.default_rng(seed), radius, 8, plan=Plan(seconds=48.0)).steps(), CONDITIONS
        )
        for seed in range(20, 28)
    ]
    mean = {
        n: np.mean([r.sensitivities[n] for r in sensitivities], axis=0)
        for n in ("scale", "viscosity_model", "gravity")
    }
    # two printed digits; Brownian motion keeps 0.5 % of the weight at 1 um
    assert mean["scale"] == pytest.approx(scale, abs=0.02)
    assert mean["viscosity_model"] == pytest.approx(scale, abs=0.02)
    assert mean["gravity"] == pytest.approx(weight, abs=0.02)


def test_small_droplets_share_their_sensitivity_between_speed_and_diffusion():
    """At 0.3 um the sensitivity to the scale is the mean of both, weighted with their information on ln r.

    Closed form: dln r = +1 / (dln v/dln r) from the fall speed, 2 / (dln D/dln r) from diffusion (D goes as length
    squared), weights 1 / sd^2 of either.
    """
    radius = 3e-7
    up, down = np.array([radius * 1.01, radius / 1.01])
    slopes = [
        float(np.log(f(up, CONDITIONS) / f(down, CONDITIONS)) / (2 * np.log(1.01)))
        for f in (fall_speed, diffusion)
    ]
    expected, ours = [], []
    for seed in range(30, 50):
        result = droplet_posterior(
            record(np.random.default_rng(seed), radius, 5, plan=Plan(seconds=60.0)).steps(), CONDITIONS
        )
        fit = result.free
        by_speed = (fit.fall_speed_std / float(fall_speed(radius, CONDITIONS)) / slopes[0]) ** -2
        by_motion = (fit.log_diffusion_std / slopes[1]) ** -2
        expected.append((by_speed / slopes[0] + by_motion * 2 / slopes[1]) / (by_speed + by_motion))
        ours.append(result.sensitivities["scale"][0])
    # the weights are those of a normal approximation; the two limits are +0.56 and -1.5
    assert np.mean(ours) == pytest.approx(np.mean(expected), abs=0.1)
    assert np.mean(ours) < 0


# --- properties --------------------------------------------------------------------------------------------------


@settings(max_examples=10, deadline=None)
@given(seed=st.integers(0, 30), number=st.integers(-8, 8))
def test_reversed_voltages_flip_the_charge(seed, number):
    """The same motion under reversed voltages gives the opposite charge, and the numbers mirrored."""
    track = record(np.random.default_rng(seed), 5e-7, number, plan=Plan(seconds=8.0))
    one = droplet_posterior(track.steps(), CONDITIONS)
    two = droplet_posterior(replace(track, impulse=-track.impulse).steps(), CONDITIONS)
    assert two.charge == pytest.approx(-one.charge, rel=1e-9, abs=1e-28)
    assert two.radius == pytest.approx(one.radius, rel=1e-12)
    assert two.number_log_likelihood == pytest.approx(one.number_log_likelihood[::-1], rel=1e-6, abs=1e-6)


def test_a_droplet_without_brownian_motion_comes_back_exactly():
    """A droplet whose Brownian motion is all but switched off comes back with its radius and charge."""
    cold = replace(CONDITIONS, temperature=1e-3)  # k T of the evaluation and of the motion alike
    track = record(np.random.default_rng(21), 8e-7, -7, plan=Plan(noise_px=0.01), conditions=cold)
    result = droplet_posterior(track.steps(), cold, responses={"gravity": {"weight": 1.0}})
    assert result.radius == pytest.approx(8e-7, rel=1e-4)
    assert result.charge[0] / ELEMENTARY_CHARGE == pytest.approx(-7.0, abs=1e-3)
    assert float(radius_from_fall_speed(result.fall_speed, cold)) == pytest.approx(result.radius, rel=1e-5)
    assert float(diffusion(8e-7, cold)) == pytest.approx(
        BOLTZMANN * 1e-3 * float(droplet_mobility(8e-7, cold))
    )


def test_a_droplet_takes_milliseconds():
    """720 frames take less than three times the 5 ms that an idle core is allowed; the benchmark gives the figure."""
    steps = record(np.random.default_rng(22), 5e-7, 5, plan=Plan(missing=0.0)).steps()
    spent = []
    for _ in range(15):
        start = time.process_time()
        droplet_posterior(steps, CONDITIONS)
        spent.append(time.process_time() - start)
    assert min(spent) < 0.015


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


def test_humidity_and_expansion_move_the_inputs_responses():
    """Damp air bends the viscosity's slope; an oil that expands loses weight with the air's temperature."""
    dry = input_responses(CONDITIONS, relative_humidity=0.0)
    damp = input_responses(CONDITIONS, relative_humidity=0.9, expansion=7e-4)
    pressure = 101_325.0 * dry_mean_free_path(CONDITIONS.temperature, 101_325.0) / CONDITIONS.mean_free_path
    for made, humidity in ((dry, 0.0), (damp, 0.9)):
        low, high = (
            moist_air(CONDITIONS.temperature, pressure, relative_humidity=humidity + h).viscosity for h in (0.0, 0.1)
        )  # fmt: skip
        assert made["relative_humidity"]["friction"] == pytest.approx(10 * np.log(high / low), rel=0.02)
    weight = damp["temperature"]["weight"] - dry["temperature"]["weight"]
    # d ln weight / d ln T by expansion is -alpha T rho / (rho - rho_air); damp air's own density adds 1e-4
    expected = -7e-4 * CONDITIONS.temperature * CONDITIONS.oil_density / CONDITIONS.density_excess
    assert weight == pytest.approx(expected, rel=0.01)
