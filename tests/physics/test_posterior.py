"""Radius and charge of one droplet: against brute force, simulated truth and exact limits."""

from __future__ import annotations

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

from physics.droplet import (
    BOLTZMANN,
    ELEMENTARY_CHARGE,
    diffusion,
    droplet_mobility,
    fall_speed,
    mass,
    radius_from_fall_speed,
)
from physics.motion import droplet_posterior, free_fit

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


def test_speeds_that_contradict_brownian_motion_are_marked():
    """With four times the diffusion of its weight a droplet is marked; an ordinary one is not."""
    rng = np.random.default_rng(14)
    odd = droplet_posterior(record(rng, 6e-7, 5, plan=Plan(diffusion_factor=4.0)).steps(), CONDITIONS)
    assert odd.inconsistent
    assert not any(result.inconsistent for _, result in study(5e-7))


def test_vague_fall_speeds_give_no_ratio():
    """Where the fall speed is uncertain by more than 30 % there is nothing to compare diffusion with."""
    result = droplet_posterior(
        record(np.random.default_rng(6), 3e-7, 5, plan=Plan(seconds=6.0)).steps(), CONDITIONS
    )
    assert result.free.fall_speed_std > 0.3 * abs(result.free.fall_speed)
    assert np.isnan([result.diffusion_ratio, result.diffusion_z]).all()
    assert np.isfinite(result.radius)


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
