"""The charge unit of a set of charges: found without e, or refused."""

from __future__ import annotations

import pickle

import numpy as np
import pytest
from charge_sets import Setting, changed_droplets, count_units, units_of_changed
from scipy.stats import binom, norm

from physics.comb import ChargeSample, log_ratios, wrapped_normal
from physics.errors import PhysicsError
from physics.quanta import (
    ELEMENTARY_CHARGE,
    charge_sample,
    charge_unit,
    droplets_to_resolve,
    pooled_charge_unit,
    unit_ratio,
)

E = ELEMENTARY_CHARGE


def rng(seed: int) -> np.random.Generator:
    return np.random.default_rng(seed)


# R. A. Millikan, The Electron (1917), table of the drop that changed its sign, as printed: time of fall in s, times of
# rise in the field in s, number that he gives. A charge is proportional to 1/t_fall + 1/t_rise at one voltage.
SIGN_CHANGE = (
    (62.976, (41.728, 41.590), 8), (62.976, (25.740, 25.798, 25.510, 25.806), 11), (63.325, (22.694, 22.830), 12),
    (63.325, (25.870, 25.876, 25.484), 11), (63.325, (10.830, 10.682, 10.756, 10.778, 10.672, 10.646), 22),
    (63.407, (71.664, 71.248), 6), (63.407, (52.668, 52.800, 52.496, 52.860), 7), (63.407, (71.708,), 6),
    (63.335, (42.006, 41.920, 42.108), 8), (63.335, (53.210, 52.922, 53.034, 53.438), 7),
    (63.335, (12.888, 12.812, 12.748, 12.824), 19),
)  # fmt: skip


def test_numbers_of_the_drop_that_changed_its_sign_are_found_blind():
    """The charge numbers that Millikan gives come out of his times alone.

    Source: R. A. Millikan, The Electron (1917), sign-change drop. Voltage fell by 1.2 % over the series, so
    0.5 % is stated for each charge. The search, 1e-3 to 2e-2 per s, presumes no unit.
    """
    charge = np.array([1 / fall + 1 / np.mean(rises) for fall, rises, _ in SIGN_CHANGE])
    found = charge_unit(charge, 0.005 * charge, search=(1e-3, 2e-2))
    assert found.resolved
    np.testing.assert_array_equal(np.rint(charge / found.unit), [row[2] for row in SIGN_CHANGE])
    # The printed times give 4.937e-3 to 4.985e-3 per charge, mean 4.957e-3; the voltage fell slowly.
    assert found.unit == pytest.approx(4.957e-3, rel=2.5e-3)


def test_each_rise_of_that_drop_counts_as_a_charge():
    """All 35 rises together give the published mean per charge with a margin that no rival comes near."""
    charge = np.array([1 / fall + 1 / rise for fall, rises, _ in SIGN_CHANGE for rise in rises])
    found = charge_unit(charge, 0.005 * charge, search=(1e-3, 2e-2))
    number = np.repeat([row[2] for row in SIGN_CHANGE], [len(row[1]) for row in SIGN_CHANGE])
    np.testing.assert_array_equal(np.rint(charge / found.unit), number)
    assert found.margin > 20  # 35 charges can give at most 35 ln 2 = 24 nats against half the unit
    assert found.unit == pytest.approx(np.mean(charge / number), rel=1e-3)


def test_wrapped_normal_is_the_sum_over_all_teeth():
    """Both branches equal the plain sum of normal densities over 41 teeth.

    What is left out is below 7e-6 of the mean density.
    """
    phase = np.linspace(-1.5, 1.5, 301)
    for std in (0.01, 0.1, 0.19, 0.21, 0.6, 1.5):
        exact = norm.pdf(phase[:, None] - np.arange(-20, 21), scale=std).sum(axis=1)
        np.testing.assert_allclose(wrapped_normal(phase, std), exact, rtol=0, atol=1e-5)


def test_tooth_by_tooth_width_is_that_of_the_tooth():
    """With a radius part the statistic is the mixture of teeth that each have their own width."""
    sample = charge_sample(np.array([3.02, 9.4]) * E, np.array([0.1, 0.3]) * E, rel_stds=[0.02, 0.03])
    number = np.arange(0, 30)
    expected = []
    for charge, floor, rel in zip(sample.charge / E, sample.floor_std / E, sample.rel_std, strict=True):
        width = np.hypot(floor, rel * number)
        expected.append(norm.pdf(charge, number, width).sum())
    first = log_ratios(sample, np.array([1 / E]))[0, 0]  # outliers 2 %, stated widths
    plain = np.sum(np.log(0.98 * np.array(expected) + 0.02))
    # Three teeth are summed; the fourth, 1.6 away at a width of 0.345, adds 2e-5 of the height.
    assert first == pytest.approx(plain, rel=1e-4)


def test_pair_statistic_is_the_double_sum_over_teeth():
    """Two charges of one droplet have the likelihood of the two-dimensional lattice of teeth."""
    pair = np.array([[5.1, 7.2]]) * E
    cov = np.array([[[0.0325, 0.03], [0.03, 0.0545]]]) * E**2
    sample = charge_sample([], [], pairs=(pair, cov))
    lattice = np.stack(np.meshgrid(np.arange(-10, 30), np.arange(-10, 30)), axis=-1).reshape(-1, 2)
    off = pair[0] / E - lattice
    inverse = np.linalg.inv(cov[0] / E**2)
    density = np.exp(-0.5 * np.einsum("ni,ij,nj->n", off, inverse, off))
    exact = np.sum(density) * np.sqrt(np.linalg.det(inverse)) / (2 * np.pi)
    found = log_ratios(sample, np.array([1 / E]))[0, 0]
    # Five teeth of the step at a width of 0.16 leave out nothing that shows.
    assert found == pytest.approx(np.log(0.98 * exact + 0.02), rel=1e-6)


def test_likelihood_ratio_of_smooth_charges_has_mean_one():
    """Under a smooth distribution the likelihood ratio of any comb averages to 1, so that its height is a p-value.

    20000 single charges; the ratio is at most 8, its standard deviation below 1.7: 5 standard errors are
    0.06.
    """
    draw = rng(11)
    charge = draw.uniform(5, 15, 20000) * E
    ratios = [
        wrapped_normal(charge / (a * E), 0.05 / a).mean() for a in (0.7, 1.0, 1.9)
    ]  # fmt: skip
    np.testing.assert_allclose(ratios, 1.0, atol=0.06)


@pytest.mark.parametrize(
    ("setting", "sets"),
    [(Setting(400, 0.2, largest=3), 25), (Setting(1000, 0.15, largest=6), 12)],
    ids=["400 at 0.20 up to 3", "1000 at 0.15 up to 6"],
)
def test_many_small_numbers_do_not_draw_the_unit_to_large_spacings(setting, sets):
    """Where many charges carry few different numbers the unit is still as near to e as its uncertainty says.

    The mean of errors over own uncertainties is 0 within 3.3 / sqrt(sets), plus 0.2 for the approximate count
    of charges that tell their number; the likelihood ratio to a smooth distribution alone is 1.5 off.
    """
    found = count_units(setting, sets, rng(3))
    assert found.wrong == 0
    assert abs(found.bias) < 3.3 / np.sqrt(sets) + 0.2
    good = round(found.resolved * sets)
    assert found.cover_95 * good >= binom.ppf(0.001, good, 0.92)


@pytest.mark.parametrize(
    ("setting", "sets"),
    [(Setting(30, 0.1), 40), (Setting(100, 0.15), 20), (Setting(60, (0.03, 0.3)), 30)],
    ids=["30 at 0.10", "100 at 0.15", "60 mixed"],
)
def test_unit_is_resolved_where_it_should_be(setting, sets):
    """Sets that hold enough are resolved, rightly, and the intervals cover e as often as they say.

    Demand: 95 % resolved. A count of successes below its 0.1 % quantile fails; the coverages likewise.
    """
    found = count_units(setting, sets, rng(1))
    assert found.wrong == 0
    assert found.resolved * sets >= binom.ppf(0.001, sets, 0.95)
    good = round(found.resolved * sets)
    assert binom.ppf(0.001, good, 0.63) <= found.cover_68 * good <= binom.ppf(0.999, good, 0.75)
    assert found.cover_95 * good >= binom.ppf(0.001, good, 0.92)
    assert (
        found.error_95 < 0.005
    )  # 0.4 % demanded at the 95 % quantile, which 20 to 40 sets know to a quarter


@pytest.mark.parametrize(
    "setting",
    [
        Setting(10, 0.05),
        Setting(20, 0.2),
        Setting(100, 0.3),
        Setting(20, 0.1, smooth=True),
        Setting(50, 0.1, smooth=True),
    ],
    ids=["10 sharp", "20 at 0.2", "100 at 0.3", "20 smooth", "50 smooth"],
)
def test_unit_is_refused_where_it_cannot_be_known(setting):
    """Sets that hold too little, or no comb, are never resolved, and say what would resolve them."""
    found = count_units(setting, 25, rng(2))
    assert found.resolved == 0
    assert found.needed > 0


def test_unit_of_even_numbers_is_twice_e():
    """If all charges are even the answer is 2 e: the largest comb compatible, and the reason says so."""
    draw = rng(3)
    number = 2 * draw.integers(1, 10, 40)
    found = charge_unit((number + 0.05 * draw.standard_normal(40)) * E, np.full(40, 0.05 * E))
    assert found.resolved
    assert found.over_e == pytest.approx(2.0, rel=3e-3)  # 5 standard deviations of 0.05 / (11 sqrt 40) / 2
    assert "largest unit" in found.reason


def test_uncharged_droplets_are_no_evidence():
    """Charges that are compatible with 0 fit every comb, so they do not count."""
    draw = rng(4)
    charge, std = Setting(12, 0.05).draw(draw)
    none = 0.05 * E * draw.standard_normal(200)
    alone = charge_unit(charge, std)
    mixed = charge_unit(np.concatenate([charge, none[np.abs(none) < 0.12 * E]]),
                        np.concatenate([std, np.full(np.sum(np.abs(none) < 0.12 * E), 0.05 * E)]))  # fmt: skip
    assert mixed.droplets_used == alone.droplets_used
    assert mixed.log_ratio == alone.log_ratio


@pytest.mark.parametrize("factor", [1.0, -1.0, 3.7, 1e-3])
def test_unit_scales_with_the_charges(factor):
    """Charges in another unit, or of the other sign, have the same comb in that unit."""
    charge, std = Setting(40, 0.1).draw(rng(5))
    size = abs(factor)
    found = charge_unit(charge, std)
    scaled = charge_unit(factor * charge, size * std, search=(0.2 * E * size, 4 * E * size))
    assert scaled.resolved
    assert scaled.unit == pytest.approx(size * found.unit, rel=1e-6)
    assert scaled.margin == pytest.approx(found.margin, abs=1e-6)


def test_shared_uncertainty_does_not_fall_with_the_number_of_droplets():
    """The own part falls as 1/sqrt(N), the shared part stays, and both join in quadrature."""
    few, many = (charge_unit(*Setting(n, 0.1).draw(rng(6)), shared_rel_std=0.013) for n in (40, 640))
    assert many.unit_own_std / few.unit_own_std == pytest.approx(0.25, rel=0.25)  # numbers differ by chance
    for found in (few, many):
        assert found.unit_shared_std == pytest.approx(0.013 * found.unit, rel=1e-12)
        assert found.unit_std == pytest.approx(np.hypot(found.unit_own_std, found.unit_shared_std), rel=1e-12)
        assert found.over_e_std == pytest.approx(found.unit_std / E, rel=1e-12)
        width = found.interval_68[1] - found.interval_68[0]
        assert width == pytest.approx(2 * found.unit_std, rel=0.1)  # the own posterior is only nearly normal


def test_own_uncertainty_is_that_of_known_numbers():
    """A resolved set knows the unit as well as a weighted mean of charge over number: 1/sqrt(sum (n/s)^2)."""
    draw = rng(7)
    number = draw.integers(1, 21, 50)
    found = charge_unit((number + 0.05 * draw.standard_normal(50)) * E, np.full(50, 0.05 * E))
    # The outlier share and the factor on the widths make the posterior wider by up to a third.
    assert 1.0 <= found.unit_own_std / E * np.sqrt(np.sum((number / 0.05) ** 2)) <= 1.35


def test_changes_of_charge_are_best_used_as_pairs():
    """With a radius error of 6 % pairs, or a charge and its step, resolve the unit; two charges taken apart do not."""
    counts = dict.fromkeys(("pairs", "charge and step", "two charges"), 0)
    pulls = []
    draw = rng(8)
    for _ in range(20):
        pair, cov = changed_droplets(draw, 30, std=0.05, rel_std=0.06)
        for name, found in units_of_changed(pair, cov, 0.06).items():
            counts[name] += found.resolved
            assert not found.resolved or found.over_e == pytest.approx(1.0, abs=0.05)
            if name == "pairs" and found.resolved:
                pulls.append((found.over_e - 1) / found.over_e_std)
    assert counts["pairs"] >= binom.ppf(0.001, 20, 0.95)
    assert counts["charge and step"] >= binom.ppf(0.001, 20, 0.9)
    assert counts["two charges"] <= binom.ppf(0.999, 20, 0.3)
    assert np.std(pulls) < 1.5  # 20 pulls know their spread to 16 %: three standard errors above 1


def test_benches_with_different_scales_pool_to_one_unit():
    """Three benches, each off by its own 1.5 %, give one unit with an honest uncertainty; lumped they do not."""
    draw = rng(9)
    pulls, lumped = [], []
    for _ in range(12):
        factors = 1 + 0.015 * draw.standard_normal(3)
        sets = [Setting(25, (0.05, 0.2), largest=15).draw(draw) for _ in factors]
        sets = [(k * charge, std) for k, (charge, std) in zip(factors, sets, strict=True)]
        found = pooled_charge_unit([charge_sample(q, s, shared_rel_std=0.015) for q, s in sets])
        assert found.resolved
        pulls.append((found.over_e - 1) / found.over_e_std)
        one = charge_unit(*(np.concatenate(column) for column in zip(*sets, strict=True)))
        if one.resolved:
            lumped.append((one.over_e - 1) / one.over_e_std)
    assert np.sqrt(np.mean(np.square(pulls))) < 1.65  # 12 pulls: the 99.9 % quantile of their rms is 1.66
    assert np.sqrt(np.mean(np.square(lumped))) > 2


def test_common_part_of_benches_does_not_average_out():
    """What all benches share stays whole, what each has alone falls with their number."""
    draw = rng(10)
    samples = [charge_sample(*Setting(60, 0.08).draw(draw), shared_rel_std=0.01) for _ in range(4)]
    found = pooled_charge_unit(samples, common_rel_std=0.007)
    expected = found.unit * np.hypot(0.01 / 2, 0.007)
    # The benches' own parts, about 0.1 %, are in the weights.
    assert found.unit_shared_std == pytest.approx(expected, rel=0.03)


@pytest.mark.parametrize(("std", "needed"), [(0.05, 20), (0.10, 30), (0.15, 50), (0.20, 120), (0.25, 350)])
def test_droplets_to_resolve_agree_with_trials(std, needed):
    """The predicted number of droplets is that found by simulation for numbers 1 to 20 with a few outliers.

    Reference: counts of an independent Monte Carlo of the rule, 95 % resolved; interpolated, so good to a
    quarter.
    """
    assert droplets_to_resolve(np.arange(1, 21), np.full(20, std)) == pytest.approx(needed, rel=0.25)


def test_advice_holds():
    """A set that is told to need so many droplets is resolved with them in most trials."""
    short = charge_unit(*Setting(26, 0.19).draw(rng(12)))
    assert not short.resolved
    need = short.advice.droplets
    assert short.advice.more_droplets == need - short.droplets_used
    assert f"{short.advice.more_droplets} more droplets" in short.reason
    found = count_units(Setting(need, 0.19), 25, rng(13))
    assert found.resolved * 25 >= binom.ppf(0.001, 25, 0.9)
    longer = count_units(Setting(26, 0.19 / np.sqrt(short.advice.time_factor)), 25, rng(14))
    assert longer.resolved * 25 >= binom.ppf(
        0.001, 25, 0.9
    )  # numbers drawn anew move the need by a few droplets


def test_ratio_of_a_week_is_found_against_a_known_unit():
    """Fifteen droplets of a week in which the charges are 1.2 % too large show it, within their uncertainty."""
    pulls = []
    for seed in range(20):
        charge, std = Setting(15, 0.1, largest=12).draw(rng(100 + seed))
        ratio, spread = unit_ratio(charge_sample(1.012 * charge, std), E, prior_rel_std=0.03)
        pulls.append((ratio - 1.012) / spread)
        assert spread < 0.012
    assert 0.5 < np.std(pulls) < 1.55  # 20 pulls: 0.1 % and 99.9 % quantiles of their spread about 1
    empty = charge_sample(np.array([0.01]) * E, np.array([0.1]) * E)
    with pytest.raises(PhysicsError, match="at least one charge"):
        unit_ratio(empty, E, prior_rel_std=0.03)


def test_no_charge_is_an_answer():
    """A set in which nothing is charged, or an empty one, is not resolved and says why."""
    for charge in ([], [0.0, 1e-21]):
        found = charge_unit(charge, np.full(len(charge), 1e-20))
        assert not found.resolved
        assert np.isnan(found.unit)
        assert "no charge differs from 0" in found.reason
        assert pickle.loads(pickle.dumps(found)).reason == found.reason


def test_inputs_are_not_changed():
    """The caller's arrays stay as they are."""
    charge, std = Setting(20, 0.1).draw(rng(15))
    before = charge.copy(), std.copy()
    charge_unit(charge, std, rel_stds=np.full(20, 0.01))
    np.testing.assert_array_equal(charge, before[0])
    np.testing.assert_array_equal(std, before[1])


@pytest.mark.parametrize(
    ("call", "name"),
    [
        (lambda: charge_unit([1e-19, np.nan], [1e-20, 1e-20]), "charges"),
        (lambda: charge_unit([1e-19], [0.0]), "own_stds"),
        (lambda: charge_unit([1e-19], [1e-20, 1e-20]), "own_stds"),
        (lambda: charge_unit([1e-19], [1e-20], search=(2e-19, 1e-19)), "search"),
        (
            lambda: charge_sample([], [], pairs=([[1e-19, 2e-19]], [[[1e-40, 2e-40], [2e-40, 1e-40]]])),
            "pairs",
        ),
    ],
    ids=["not finite", "std of 0", "lengths", "empty search", "covariance"],
)
def test_impossible_input_is_named(call, name):
    """A wrong argument is an error that names it."""
    with pytest.raises(PhysicsError) as caught:
        call()
    assert caught.value.name == name


def test_work_grows_gently_with_the_set():
    """A hundred droplets cost few evaluations: the scan and ten peaks, not a fine grid everywhere.

    Counted in evaluations of the statistic rather than in time, so that a busy machine does not matter: 13 ms
    on one idle core are about 8e5 densities.
    """
    charge, std = Setting(100, 0.1).draw(rng(16))
    sample = charge_sample(charge, std)
    assert isinstance(sample, ChargeSample)
    scan = (5 / E - 0.25 / E) * sample.largest / 0.08
    assert scan * len(sample) < 2e5


def test_charges_of_a_spray_do_not_hide_the_few_that_tell():
    """Charges to 10000 e known to 2 % leave the unit to the low ones, and the search to the range of these."""
    draw = rng(17)
    number = np.rint(10 ** draw.uniform(0, 4, 300))
    std = np.hypot(0.08, 0.02 * number)
    charge = number + std * draw.standard_normal(300)
    found = charge_unit(charge * E, std * E, rel_stds=np.full(300, 0.02))
    assert found.resolved
    assert found.over_e == pytest.approx(1.0, abs=4 * found.over_e_std)
    assert found.droplets_used < 200  # blurred beyond 0.6 of 4 e: above some 120 e
