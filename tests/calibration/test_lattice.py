"""Numbering and fitting of marks, against closed forms, matrix algebra and scipy."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import least_squares
from scipy.stats import t as student

from calibration.lattice import Marks, decorrelate, fit_lattice, grow_numbers, lattice_map, local_gradient
from calibration.lattice import _student as student_factor

WIDTH, HEIGHT = 640, 480


def grid_marks(*, pitch=25.0, angle=0.2, radial=0.0, tilt=(0.0, 0.0), noise=0.0, seed=0):
    """Marks of both families of a square grid whose map is known, and its parameters."""
    rng = np.random.default_rng(seed)
    radius = np.hypot(WIDTH, HEIGHT) / 2
    turn = np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]]) * radius / pitch
    theta = np.array([0.3, *turn[0], 0.6, *turn[1], radial, *tilt])
    x, y = rng.uniform(0, WIDTH - 1, 4000), rng.uniform(0, HEIGHT - 1, 4000)
    axis = np.arange(4000) % 2
    # Move each place along its coordinate until that is a whole number: Newton's method on the exact map.
    q = np.stack([(x - (WIDTH - 1) / 2) / radius, (y - (HEIGHT - 1) / 2) / radius], axis=1)
    terms = ("radial", "tilt")
    index = np.rint(lattice_map(theta, q, axis, terms=terms)[0])
    for _ in range(8):
        step = 1e-6
        value = lattice_map(theta, q, axis, terms=terms)[0]
        slope = np.stack(
            [(lattice_map(theta, q + d, axis, terms=terms)[0] - value) / step for d in step * np.eye(2)],
            axis=1,
        )
        q = q - slope * ((value - index) / (slope**2).sum(axis=1))[:, None]
    place = q * radius + np.array([(WIDTH - 1) / 2, (HEIGHT - 1) / 2])
    place = place + rng.normal(0, noise, place.shape)
    cluster = (index - index.min()).astype(np.int64) * 2 + axis
    marks = Marks(place[:, 0], place[:, 1], axis, index.astype(np.int64), cluster, np.ones(len(x)))
    return marks.take(np.arange(len(x)) % 5 == 0), theta


def test_fit_gives_back_an_exact_map():
    """Marks without noise on a bent and tilted grid give its lens, tilt and gradient to round-off."""
    marks, theta = grid_marks(radial=-0.015, tilt=(0.02, -0.01))
    fit = fit_lattice(marks, width=WIDTH, height=HEIGHT)
    assert fit.terms == ("radial", "tilt")
    # Newton's steps end below 1e-5 px; over the pattern of some 400 px that is 3e-8.
    assert fit.radial == pytest.approx(-0.015, abs=1e-7)
    assert fit.tilt == pytest.approx([0.02, -0.01], abs=1e-7)
    assert fit.coefficients.ravel() == pytest.approx(theta[:6], abs=1e-5)


def test_plain_grid_gets_no_lens_and_no_tilt():
    """With noise of 0.05 px and nothing bent, neither term passes its test, and the rotation's closed form holds."""
    marks, _ = grid_marks(noise=0.05, angle=0.2)
    fit = fit_lattice(marks, width=WIDTH, height=HEIGHT)
    assert fit.terms == ()
    gradient = local_gradient(fit, np.array([319.5]), np.array([239.5]))[0]
    spread = np.sqrt(fit.covariance[1, 1]) / np.hypot(*fit.coefficients[0, 1:])
    # Four standard uncertainties: the gradient of a square grid turned by 0.2 rad is (cos, sin; -sin, cos) / 25.
    assert gradient * 25 == pytest.approx(
        np.array([[np.cos(0.2), np.sin(0.2)], [-np.sin(0.2), np.cos(0.2)]]), abs=4 * spread
    )


def test_fit_is_the_least_squares_solution():
    """Parameters agree with scipy's own least squares on the same residuals.

    Source: scipy.optimize.least_squares, trust-region reflective, no bounds.
    """
    marks, theta = grid_marks(noise=0.05, radial=0.01, tilt=(0.01, 0.0), seed=3)
    fit = fit_lattice(marks, width=WIDTH, height=HEIGHT)
    used = fit.used
    radius = fit.radius
    q = np.stack([(marks.x - fit.centre[0]) / radius, (marks.y - fit.centre[1]) / radius], axis=1)[used]

    def residual(p):
        value = lattice_map(p, q, marks.axis[used], terms=("radial", "tilt"))[0] - marks.index[used]
        raw = value[:, None] * 25.0
        return decorrelate(raw, marks.take(used), fit.mark_std**2, fit.line_std**2)[:, 0]

    best = least_squares(residual, theta, xtol=1e-14, ftol=1e-14, gtol=1e-14)
    ours = np.concatenate([fit.coefficients.ravel(), [fit.radial], fit.tilt])
    # Both stop within a ten-thousandth of a standard uncertainty.
    assert np.abs(ours - best.x).max() < 1e-3 * np.sqrt(np.diag(fit.covariance)).max()
    jacobian = np.linalg.inv(best.jac.T @ best.jac) * fit.mark_std**2
    assert np.sqrt(np.diag(fit.covariance)) == pytest.approx(
        np.sqrt(np.diag(jacobian)), rel=0.02
    )  # pitch at tilt


def test_stated_covariance_is_the_scatter_of_repeated_fits():
    """Pulls of the pitch over 60 noisy grids have the spread 1 within four of its standard deviations."""
    pulls = []
    for seed in range(60):
        marks, theta = grid_marks(noise=0.1, seed=seed)
        fit = fit_lattice(marks.take(np.arange(len(marks.x)) % 4 == 0), width=WIDTH, height=HEIGHT)
        pulls.append((fit.coefficients[0, 1] - theta[1]) / np.sqrt(fit.covariance[1, 1]))
    # A spread from n values scatters by 1 / sqrt(2 n).
    assert np.sqrt(np.mean(np.square(pulls))) == pytest.approx(1.0, abs=4 / np.sqrt(2 * 60))


def test_lines_with_errors_of_their_own_widen_the_uncertainty():
    """Where each line is off by 0.2 px, the pitch scatters by the closed form for line errors, and the fit says so."""
    rng = np.random.default_rng(5)
    lines, strips, pitch = 20, 15, 30.0
    pulls, stds = [], []
    for _ in range(60):
        index = np.repeat(np.arange(lines), strips)
        off = rng.normal(0, 0.2, lines)[index] + rng.normal(0, 0.02, lines * strips)
        y = np.tile(np.linspace(20, HEIGHT - 20, strips), lines)
        marks = Marks(30 + index * pitch + off, y, np.zeros_like(index), index, index, np.ones(len(index)))
        fit = fit_lattice(marks, width=WIDTH, height=HEIGHT)
        gradient = fit.coefficients[0, 1] / fit.radius
        std = np.sqrt(fit.covariance[1, 1]) / fit.radius
        pulls.append((gradient * pitch - 1) / (std * pitch))
        stds.append(std * pitch)
    # Slope of a straight line through n equidistant points with errors s: s / sqrt(n (n^2 - 1) / 12), in pitches.
    closed = 0.2 / pitch / np.sqrt(lines * (lines**2 - 1) / 12)
    assert np.median(stds) == pytest.approx(
        closed, rel=0.15
    )  # 18 degrees of freedom scatter by 17 %, their median less
    assert np.sqrt(np.mean(np.square(pulls))) == pytest.approx(1.0, abs=4 / np.sqrt(2 * 60))


def test_a_few_lines_ruled_unevenly_are_no_lens():
    """Five straight lines off by 0.3 px each bend nothing: no lens is taken from their spacing."""
    rng = np.random.default_rng(11)
    index = np.repeat(np.arange(5), 14)
    y = np.tile(np.linspace(20, HEIGHT - 20, 14), 5)
    for _ in range(20):
        x = 60 + 125.0 * index + rng.normal(0, 0.3, 5)[index] + rng.normal(0, 0.02, len(index))
        fit = fit_lattice(
            Marks(x, y, 0 * index, index, index, np.ones(len(index))), width=WIDTH, height=HEIGHT
        )
        assert fit.radial == 0.0


def test_outliers_are_left_out():
    """Marks of dust, 2 px off, do not move the fit, and are told as not used."""
    marks, theta = grid_marks(noise=0.03, seed=2)
    off = np.arange(len(marks.x)) % 20 == 0
    dirty = Marks(
        marks.x + 2.0 * off, marks.y + 2.0 * off, marks.axis, marks.index, marks.cluster, marks.weight
    )
    fit = fit_lattice(dirty, width=WIDTH, height=HEIGHT)
    assert not fit.used[off].any()
    assert fit.used[~off].mean() > 0.99
    assert abs(fit.coefficients[0, 1] - theta[1]) < 4 * np.sqrt(fit.covariance[1, 1])


def test_decorrelation_is_the_inverse_root_of_the_covariance():
    """W V W' is the mark variance times one, V being the covariance of marks that share their line's error."""
    rng = np.random.default_rng(0)
    cluster = np.repeat([0, 1, 2], [5, 1, 9])
    weight = rng.uniform(0.5, 1.5, 15)
    zero = np.zeros(15)
    marks = Marks(zero, zero, zero.astype(int), zero.astype(int), cluster, weight)
    whitener = decorrelate(np.eye(15), marks, 0.04, 0.25)
    covariance = np.diag(0.04 / weight**2) + 0.25 * (cluster[:, None] == cluster[None, :])
    assert whitener @ covariance @ whitener.T == pytest.approx(0.04 * np.eye(15), abs=1e-12)  # round-off


@pytest.mark.parametrize("dof", [1, 2, 3, 5, 10, 50])
def test_few_values_widen_by_students_factor(dof):
    """The factor for few degrees of freedom is that of Student's t at 68.27 %.

    Source: scipy.stats.t; JCGM 100:2008 table G.2 has 1.84, 1.32, 1.20, 1.11, 1.05 for 1, 2, 3, 5, 10.
    """
    assert student_factor(dof) == pytest.approx(student.ppf(0.5 + 0.682689 / 2, dof), rel=0.004)


@settings(max_examples=25, deadline=None)
@given(
    seed=st.integers(0, 10_000),
    pitch=st.floats(8, 120),
    missing=st.floats(0, 0.4),
    false=st.integers(0, 5),
    bend=st.floats(-0.01, 0.01),
)
def test_neither_missing_nor_false_lines_shift_the_count(seed, pitch, missing, false, bend):
    """Numbers of the true lines differ from the truth by one shift, whatever is missing, added or bent."""
    rng = np.random.default_rng(seed)
    lines = int(600 // pitch)
    keep = rng.random(lines) >= missing
    keep[[0, lines // 2, lines // 2 + 1, -1]] = True
    index = np.repeat(np.flatnonzero(keep), 12)
    u = index * pitch
    true = np.stack(
        [u + bend * pitch * ((u - 300) / 100) ** 2, np.tile(np.arange(12) * 32.0, keep.sum())], axis=1
    )
    true = true + rng.normal(0, 0.02 * pitch, true.shape) * np.array([1.0, 0.0])
    along = np.tile(np.arange(12) * 32.0, false)
    place = np.concatenate([true, np.stack([np.repeat(rng.uniform(0, 600, false), 12), along], axis=1)])
    seed_mark = int(np.flatnonzero(index == lines // 2)[6])
    found = grow_numbers(
        place, np.array([[1 / pitch, 0.0]]), seed=seed_mark, unit=np.array([pitch, max(pitch, 32.0)])
    )
    numbers = np.rint(found[: len(true), 0])
    assert (numbers - index == numbers[0] - index[0]).all()
