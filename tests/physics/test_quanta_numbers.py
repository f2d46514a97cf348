"""Charge numbers of a bench's droplets with their common factor."""

from __future__ import annotations

import numpy as np
import pytest
from charge_sets import Setting, count_numbers
from scipy.stats import binom, norm

from physics.charge_numbers import certain_share
from physics.errors import PhysicsError
from physics.quanta import ELEMENTARY_CHARGE, number_probabilities

E = ELEMENTARY_CHARGE


def rng(seed: int) -> np.random.Generator:
    return np.random.default_rng(seed)


@pytest.mark.parametrize("droplets", [10, 30, 100])
def test_common_factor_is_found_together_with_the_numbers(droplets):
    """With 2 % of common error 99 % of the numbers are right, and hardly one that is claimed is wrong.

    Demand: right >= 0.99, wrong among P > 0.95 at most 0.5 %; droplets of one set share their factor, so a
    set counts as one trial for its outliers: 3 binomial standard deviations of the droplets are allowed
    beside.
    """
    found = count_numbers(Setting(droplets, (0.05, 0.2)), 2000 // droplets, rng(1), shared=0.02)
    assert found.right >= 0.99 - 3 * np.sqrt(0.01 * 0.99 / found.droplets)
    assert found.wrong_of_claimed <= 0.005
    assert found.claimed > 0.95
    assert abs(found.mean_probability - found.right) < 0.01


def test_factor_left_out_makes_wrong_numbers_look_certain():
    """The same sets without the common factor claim wrong numbers; with it on each droplet apart they claim few."""
    setting = Setting(20, (0.05, 0.2))
    ignored = count_numbers(setting, 100, rng(2), shared=0.02, treatment="ignored")
    apart = count_numbers(setting, 100, rng(2), shared=0.02, treatment="apart")
    joint = count_numbers(setting, 100, rng(2), shared=0.02)
    assert ignored.wrong_of_claimed > 0.03
    assert apart.claimed < 0.75
    assert joint.claimed > 0.95
    assert joint.right > apart.right + 0.03


@pytest.mark.parametrize(("droplets", "std"), [(1, (0.05, 0.2)), (3, (0.05, 0.2)), (20, (0.25, 0.6))],
                         ids=["one droplet", "three droplets", "blurred"])  # fmt: skip
def test_probabilities_hold_where_the_comb_is_not_resolved(droplets, std):
    """Few or blurred droplets: the mean of the stated probability equals the share that is right.

    Tolerance: 3.3 binomial standard deviations of the droplets.
    """
    found = count_numbers(Setting(droplets, std), 1500 // droplets, rng(3), shared=0.02)
    assert found.mean_probability == pytest.approx(found.right, abs=3.3 * np.sqrt(0.25 / found.droplets))
    claimed = round(found.claimed * found.droplets)
    assert claimed == 0 or found.wrong_of_claimed * claimed <= binom.ppf(0.999, claimed, 0.05)


def test_blurred_set_falls_back_to_droplets_apart():
    """Charges that show no comb leave the factor at its prior, and each droplet carries the shared part by itself."""
    draw = rng(4)
    charge = draw.uniform(5, 20, 60) * E
    std = np.full(60, 0.7 * E)
    joint = number_probabilities(charge, std, shared_rel_std=0.02)
    apart = number_probabilities(charge, np.hypot(std, 0.02 * charge))
    assert not joint.joint
    assert joint.factor_std == pytest.approx(0.02, rel=0.05)
    # Apart, the shared width goes with the charge; jointly with the number: they differ by less than 2 % of it.
    np.testing.assert_allclose(joint.probability, apart.probability, atol=0.02)


def test_single_droplet_probability_is_that_of_the_textbook():
    """Without a shared part P(n) is the normal density at each whole number over their sum."""
    found = number_probabilities([2.3 * E], [0.4 * E])
    number = np.arange(-20, 21)
    expected = norm.pdf(2.3, number, 0.4)
    expected /= expected.sum()
    assert found.number[0] == 2
    assert found.probability[0] == pytest.approx(expected[number == 2][0], rel=1e-9)
    assert found.number_probability.sum() == pytest.approx(1.0, rel=1e-12)
    row = dict(zip(found.number_values[0].tolist(), found.number_probability[0], strict=True))
    for n in (0, 1, 3, 4):
        assert row[n] == pytest.approx(expected[number == n][0], rel=1e-6, abs=1e-12)


def test_turning_the_field_turns_the_numbers():
    """Charges of the other sign have the numbers of the other sign, with the same probabilities."""
    charge, std = Setting(25, 0.15).draw(rng(5))
    plus = number_probabilities(charge, std, shared_rel_std=0.01)
    minus = number_probabilities(-charge, std, shared_rel_std=0.01)
    np.testing.assert_array_equal(plus.number, -minus.number)
    np.testing.assert_allclose(plus.probability, minus.probability, rtol=1e-9)


def skewed(center: float, width: float):
    """Log density of a charge over e with a long tail, and its mean and standard deviation."""
    grid = np.linspace(center - 8 * width, center + 12 * width, 4001)
    log_density = norm.logpdf(grid, center, width) + np.log(norm.cdf(3 * (grid - center) / width) + 1e-9)
    weight = np.exp(log_density - log_density.max())
    weight /= weight.sum()
    mean = weight @ grid
    return grid, log_density, mean, np.sqrt(weight @ (grid - mean) ** 2)


@pytest.mark.parametrize("form", ["function", "whole numbers"])
def test_shape_of_a_blurred_charge_is_used(form):
    """A skew density gives its own probabilities, from a function or from its values at whole numbers.

    Whole numbers lie 1.7 standard deviations apart; the local cubic between them errs by 1 % there.
    """
    grid, log_density, mean, std = skewed(4.1, 0.9)
    number = np.arange(-4, 16)
    exact = np.exp(np.interp(number, grid, log_density))
    exact /= exact.sum()

    def density(charge):
        return np.interp(charge / E, grid, log_density)

    given = density if form == "function" else (number, np.interp(number, grid, log_density))
    found = number_probabilities([mean * E], [std * E], log_likelihoods=[given])
    plain = number_probabilities([mean * E], [std * E])
    row = dict(zip(found.number_values[0].tolist(), found.number_probability[0], strict=True))
    for n in (3, 4, 5, 6):
        assert row[n] == pytest.approx(exact[number == n][0], abs=0.004)
    other = dict(zip(plain.number_values[0].tolist(), plain.number_probability[0], strict=True))
    assert abs(other[4] - exact[number == 4][0]) > 0.008  # the normal density does not do


def test_whole_number_likelihood_with_a_factor_equals_the_function():
    """Between whole numbers the interpolated likelihood of a normal charge is the normal one."""
    draw = rng(6)
    number = draw.integers(1, 15, 30)
    std = draw.uniform(0.26, 0.5, 30)
    charge = 1.01 * number + std * draw.standard_normal(30)
    values = np.arange(-30, 31)
    pairs = [(values, norm.logpdf(values, q, s)) for q, s in zip(charge, std, strict=True)]
    with_pairs = number_probabilities(charge * E, std * E, shared_rel_std=0.015, log_likelihoods=pairs)
    plain = number_probabilities(charge * E, std * E, shared_rel_std=0.015)
    np.testing.assert_allclose(with_pairs.probability, plain.probability, atol=1e-3)


def test_charge_on_no_tooth_is_told():
    """A sharp charge half way between two numbers, among good ones, is an outlier and does not spoil the others."""
    draw = rng(7)
    number = draw.integers(1, 15, 20)
    charge = number + 0.05 * draw.standard_normal(20)
    charge[3] = 7.5
    found = number_probabilities(charge * E, np.full(20, 0.05 * E), shared_rel_std=0.02)
    assert found.outlier_probability[3] > 0.99
    others = np.arange(20) != 3
    assert np.all(found.outlier_probability[others] < 0.5)
    np.testing.assert_array_equal(found.number[others], number[others])


def test_factor_of_the_bench_comes_out():
    """A common error of 2.5 % is measured by the droplets themselves, with its uncertainty."""
    pulls = []
    for seed in range(25):
        draw = rng(200 + seed)
        number = draw.integers(1, 15, 25)
        found = number_probabilities((1.025 * number + 0.1 * draw.standard_normal(25)) * E, np.full(25, 0.1 * E),
                                     shared_rel_std=0.02)  # fmt: skip
        assert found.joint
        pulls.append((found.factor - 1.025) / found.factor_std)
    assert np.std(pulls) < 1.5  # 25 pulls know their spread to 14 %
    assert abs(np.mean(pulls)) < 0.8  # 0.2 is one standard error; the prior about 1 pulls by 0.1


def test_sensitivities_of_single_droplets_are_obeyed():
    """Droplets whose charge follows the common error twice as much are moved twice as far."""
    draw = rng(8)
    number = draw.integers(6, 15, 30)
    slope = np.where(np.arange(30) % 2, 0.02, 0.01)
    charge = number * (1 + 1.8 * slope) + 0.08 * draw.standard_normal(30)
    found = number_probabilities(charge * E, np.full(30, 0.08 * E), shared_rel_std=slope)
    np.testing.assert_array_equal(found.number, number)
    assert np.all(found.probability > 0.9)


@pytest.mark.parametrize("std", [0.08, 0.15, 0.2, 0.25, 0.3, 0.45])
def test_certain_share_is_that_of_trials(std):
    """The share of certain numbers equals that of 4000 simulated droplets within 3.3 standard deviations."""
    found = count_numbers(Setting(4000, std), 1, rng(9), shared=0.0)
    expected = certain_share(std)
    assert found.claimed == pytest.approx(expected, abs=3.3 * np.sqrt(0.25 / 4000) + 1e-3)


def test_no_droplets_is_an_answer():
    """Nothing in, nothing out, of the normal type."""
    found = number_probabilities([], [])
    assert len(found.number) == 0
    assert not found.joint


@pytest.mark.parametrize(
    ("call", "name"),
    [
        (lambda: number_probabilities([E], [0.0]), "own_stds"),
        (lambda: number_probabilities([E, E], [E]), "own_stds"),
        (lambda: number_probabilities([E], [E], shared_rel_std=-0.1), "shared_rel_std"),
        (
            lambda: number_probabilities([E], [E], log_likelihoods=[([1, 3, 4], [0.0, 0.0, 0.0])]),
            "log_likelihoods",
        ),
        (lambda: certain_share(0.0), "own_std"),
    ],
    ids=["std of 0", "lengths", "negative", "gap", "share"],
)
def test_impossible_input_is_named(call, name):
    """A wrong argument is an error that names it."""
    with pytest.raises(PhysicsError) as caught:
        call()
    assert caught.value.name == name


def test_highly_charged_droplets_are_told_to_be_uncertain():
    """A charge of 5000(100) e has no number, its best one the probability of one step under a normal density.

    It moves neither the factor nor the numbers of the others.
    """
    draw = rng(10)
    number = draw.integers(1, 15, 20)
    charge = 1.01 * number + 0.08 * draw.standard_normal(20)
    alone = number_probabilities(charge * E, np.full(20, 0.08 * E), shared_rel_std=0.015)
    mixed = number_probabilities(np.append(charge, 5000.0) * E, np.append(np.full(20, 0.08), 100.0) * E,
                                 shared_rel_std=0.015)  # fmt: skip
    np.testing.assert_allclose(mixed.probability[:20], alone.probability, rtol=1e-9)
    assert mixed.factor == pytest.approx(alone.factor, rel=1e-9)
    width = np.hypot(100.0, 5000.0 * mixed.factor_std) / mixed.factor
    assert mixed.probability[20] == pytest.approx(1 / (np.sqrt(2 * np.pi) * width), rel=1e-3)
    assert mixed.number[20] == pytest.approx(5000 / mixed.factor, abs=1)
