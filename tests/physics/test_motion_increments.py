"""Steps between sightings: the field's impulse, their covariance against published forms, whitening, breaks."""

from __future__ import annotations

import dataclasses
import pickle
from itertools import pairwise

import numpy as np
import pytest
from dense_motion import generalised_least_squares, step_covariance
from diffusing_droplets import Plan, mean_impulse, record
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from physics.errors import PhysicsError
from physics.motion import field_impulse, increments, segment_occupancy, whitened


def numbers(low: float, high: float) -> st.SearchStrategy[float]:
    """Numbers of three decimals: quadrature needs pieces longer than round-off."""
    return st.integers(round(1000 * low), round(1000 * high)).map(lambda thousandths: thousandths / 1000)


def straight(count: int, *, dt: float = 1.0, exposure: float = 1.0, std: float = 1.0):
    """Steps of a droplet at rest, evenly seen: only their covariance matters."""
    zeros = np.zeros(count + 1)
    times = dt * np.arange(count + 1)
    return increments(times, zeros, zeros, down_std=std, side_std=std, impulse=zeros, exposure=exposure)


def dense(steps, *, diffusion: float, noise_var: float) -> np.ndarray:
    """Write the covariance of steps out as a matrix."""
    rows = np.arange(len(steps))
    matrix = np.zeros((len(steps), len(steps)))
    matrix[rows, rows] = diffusion * steps.blur_diag + noise_var * steps.noise_diag
    off = diffusion * steps.blur_off + noise_var * steps.noise_off
    matrix[rows[:-1], rows[1:]] = matrix[rows[1:], rows[:-1]] = off
    return matrix


# --- the field's impulse ---------------------------------------------------------------------------------------


@settings(max_examples=40, deadline=None)
@given(
    st.lists(st.tuples(numbers(0.0, 1.5), numbers(-500, 500)), min_size=1, max_size=8),
    numbers(-2.0, 8.0),
    numbers(1e-3, 2.0),
)
def test_impulse_is_the_double_integral_of_the_voltage(knots, start, exposure):
    """The impulse of a voltage with ramps and jumps equals its double integral by numerical quadrature."""
    gaps, volts = np.array(knots).T
    times = np.cumsum(np.where(gaps < 0.3, 0.0, gaps))  # short gaps become jumps
    end = start + exposure

    def share_later(t: float) -> float:
        """Voltage times the share of the exposure after t: its integral is the mean of the integral of V."""
        row = (
            min(max(int(np.searchsorted(times, t, side="right")), 1), len(times) - 1) if len(times) > 1 else 0
        )
        if not times[0] <= t <= times[-1] or row == 0:
            volt = volts[0] if t < times[0] else volts[-1]
        else:
            volt = np.interp(t, times[row - 1 : row + 1], volts[row - 1 : row + 1])
        return float(volt) * min(1.0, (end - t) / exposure)

    first = min(times[0], start) - 1.0
    edges = [first, *sorted({t for t in (*times.tolist(), start) if first < t < end}), end]
    expected = sum(quad(share_later, a, b, epsabs=1e-11)[0] for a, b in pairwise(edges))
    # quad counts from a second before everything, field_impulse from the first knot
    before = volts[0] * (times[0] - first)
    impulse = field_impulse(times, volts, [start], exposure)[0]
    # each piece is a quadratic: quad is exact to round-off of values up to 1e4 V s
    assert impulse + before == pytest.approx(expected, abs=1e-8)


def test_impulse_of_a_toggle_within_an_exposure_is_exact():
    """A stepped schedule gives the sum of its closed-form ramps, toggles inside exposures included."""
    plan = Plan(seconds=24.0, segment=3.013)
    times = np.arange(700) / 30.0
    pattern = [plan.pattern[i % 4] for i in range(9)]
    knots = np.repeat(3.013 * np.arange(10), 2)[1:-1]
    volts = 240.0 * np.repeat(pattern, 2)
    ours = np.diff(field_impulse(knots, volts, times, plan.exposure))
    # round-off of sums that reach 1e3 V s
    assert ours == pytest.approx(np.diff(mean_impulse(plan, times, 6e-3)), abs=1e-9)


def test_impulse_of_constant_and_ramped_voltage():
    """Constant V gives V (s + tau/2); a ramp a t gives a (s^2 / 2 + s tau / 2 + tau^2 / 6), by hand."""
    starts, tau = np.array([0.0, 0.5, 3.25]), 0.04
    assert field_impulse([0.0], [200.0], starts, tau) == pytest.approx(200 * (starts + tau / 2), rel=1e-13)
    ramp = field_impulse([0.0, 10.0], [0.0, 50.0], starts, tau)
    assert ramp == pytest.approx(5 * (starts**2 / 2 + starts * tau / 2 + tau**2 / 6), rel=1e-12)
    assert field_impulse([0.0], [200.0], starts, 0.0) == pytest.approx(200 * starts)


def test_occupancy_of_segments_covers_each_step():
    """Segments that touch fill each step, and a change within an exposure is shared between two segments."""
    times = np.arange(61) / 30.0
    occupancy = segment_occupancy([-1.0, 0.71], [0.71, 3.0], times, 0.03)
    assert occupancy.sum(axis=1) == pytest.approx(np.diff(times), rel=1e-12)
    # frame 21 starts at 0.700 s: its exposure has 20 of 30 ms after the change; frame 22 lies wholly after it
    late = (0.03 - 0.01) ** 2 / (2 * 0.03)
    assert occupancy[20, 1] == pytest.approx(late, rel=1e-10)
    assert occupancy[21, 1] == pytest.approx(22 / 30 + 0.015 - 0.71 - late, rel=1e-10)


@pytest.mark.parametrize("exposure", [0.0, 0.011, 0.033])
def test_occupancy_is_the_impulse_of_a_unit_voltage(exposure):
    """A segment's seconds are the volt seconds of 1 V that is on in that segment alone."""
    rng = np.random.default_rng(57)
    times = np.sort(rng.uniform(0.0, 4.0, 80))
    starts = rng.uniform(-1.0, 4.5, 30)
    ends = starts + rng.choice([0.004, 0.02, 0.9], 30)
    found = segment_occupancy(starts, ends, times, exposure)
    for start, end, column in zip(starts, ends, found.T, strict=True):
        on = field_impulse([start, start, end, end], [0.0, 1.0, 1.0, 0.0], times, exposure)
        assert column == pytest.approx(np.diff(on), abs=1e-13)  # s; round-off of seconds over the exposure
    assert segment_occupancy([], [], times, exposure).shape == (79, 0)


@pytest.mark.parametrize(
    ("knots", "volts", "exposure"),
    [([0.0, -1.0], [0.0, 1.0], 0.1), ([0.0], [np.nan], 0.1), ([0.0], [1.0, 2.0], 0.1), ([0.0], [1.0], -0.1)],
)
def test_impulse_refuses_impossible_voltages(knots, volts, exposure):
    """Knots out of order, not finite or unpaired, and a negative exposure, are errors."""
    with pytest.raises(PhysicsError):
        field_impulse(knots, volts, [0.0], exposure)


# --- covariance against published forms ------------------------------------------------------------------------


@pytest.mark.parametrize("blur", [0.0, 1 / 8, 1 / 6])
def test_covariance_of_even_steps_is_the_published_one(blur):
    """Diagonal 2 D dt (1 - 2 R) + 2 s^2, neighbours 2 R D dt - s^2.

    Source: A. J. Berglund, Phys. Rev. E 82 (2010), 011917, for a uniform exposure R = tau / (6 dt).
    """
    diffusion, noise_var, dt = 0.7, 0.3, 0.04
    steps = straight(6, dt=dt, exposure=6 * blur * dt)
    matrix = dense(steps, diffusion=diffusion, noise_var=noise_var)
    assert np.diag(matrix) == pytest.approx(2 * diffusion * dt * (1 - 2 * blur) + 2 * noise_var, rel=1e-13)
    assert np.diag(matrix, 1) == pytest.approx(2 * blur * diffusion * dt - noise_var, rel=1e-13)


def test_covariance_of_uneven_steps_follows_from_the_positions():
    """With missing frames and unequal noise the tridiagonal form equals the differences of the dense positions."""
    rng = np.random.default_rng(7)
    times = np.sort(rng.choice(60, 25, replace=False)) * 0.04
    std = rng.uniform(0.5, 2.0, 25)
    zeros = np.zeros(25)
    steps = increments(times, zeros, zeros, down_std=std, side_std=std, impulse=zeros, exposure=0.03)
    ours = dense(steps, diffusion=1.3, noise_var=steps.typical_std**2)
    # closed forms on both sides: round-off only
    assert ours == pytest.approx(step_covariance(times, 0.03, 1.3, std), abs=1e-12)


@pytest.mark.parametrize("noise_var", [0.05, 1.0, 4.0])
def test_spread_of_the_covariance_estimator_is_the_published_one(noise_var):
    """Mean D and Var D / D^2 = (6 + 4 e + 2 e^2) / N + 4 (1 + e)^2 / N^2, e = s^2 / (D dt) - 2 R.

    Source: Vestergaard, Blainey, Flyvbjerg, Phys. Rev. E 89 (2014), 022726, eqs 14 and 16. The estimator
    <d^2> / 2 dt + <d d'> / dt is a quadratic form, so its moments under our covariance are traces.
    """
    count = 100
    matrix = dense(straight(count), diffusion=1.0, noise_var=noise_var)
    form = np.eye(count) / (2 * count) + (np.eye(count, k=1) + np.eye(count, k=-1)) / (2 * (count - 1))
    epsilon = noise_var - 2 / 6
    expected = (6 + 4 * epsilon + 2 * epsilon**2) / count + 4 * (1 + epsilon) ** 2 / count**2
    assert np.trace(form @ matrix) == pytest.approx(1.0, rel=1e-12)
    # the published form drops terms of order 1/N^2 beyond the one it keeps: (6 + 4 e + 2 e^2) / N^2
    assert 2 * np.trace(form @ matrix @ form @ matrix) == pytest.approx(expected, rel=2 / count)


@pytest.mark.parametrize(
    ("diffusion", "std", "blue", "endpoints", "straight_line"),
    [
        (1.0, 0.1, 0.0396781, 0.0397413, 0.0470658),
        (1.0, 1.0, 0.0404265, 0.0405333, 0.0471554),
        (1.0, 3.0, 0.0428098, 0.0469333, 0.0478793),
        (0.1, 1.0, 0.00430193, 0.00477333, 0.00479698),
    ],
)
def test_variance_of_drift_estimators(diffusion, std, blue, endpoints, straight_line):
    """Variance of the best, the last-minus-first and the straight-line speed, 50 steps, full exposure.

    Source: matrix algebra on the covariance of Berglund (2010), printed to 6 digits; limits of Michalet and
    Berglund, Phys. Rev. E 85 (2012), 061916.
    """
    steps = straight(50)
    white = whitened(steps, diffusion=diffusion, rho=std**2 / diffusion, columns=steps.dt)
    matrix = dense(steps, diffusion=diffusion, noise_var=std**2)
    times = np.arange(51) - 25.0
    line = np.array([times[k:].sum() for k in range(1, 51)]) / (
        times @ times
    )  # slope as weights of the steps
    # printed with 6 digits
    assert 1 / (white.columns[:, 0] @ white.columns[:, 0]) == pytest.approx(blue, rel=2e-6)
    assert np.full(50, 1 / 50) @ matrix @ np.full(50, 1 / 50) == pytest.approx(endpoints, rel=2e-6)
    assert line @ matrix @ line == pytest.approx(straight_line, rel=2e-6)


@pytest.mark.parametrize("count", [2, 3, 50, 101])
def test_drift_variance_in_the_two_limits(count):
    """Without noise the best speed has variance 2 D / T; without diffusion that of a straight line.

    Source: closed forms 2 D / (N dt) and 12 s^2 / (dt^2 N (N + 1) (N + 2)).
    """
    steps = straight(count, exposure=0.0)
    brownian = whitened(steps, diffusion=0.8, rho=0.0, columns=steps.dt)
    assert 1 / np.sum(brownian.columns**2) == pytest.approx(2 * 0.8 / count, rel=1e-12)
    noisy = whitened(steps, diffusion=1e-12, rho=1e12, columns=steps.dt)
    # D is not 0 but 1e-12: its share grows as N^3
    assert 1 / np.sum(noisy.columns**2) == pytest.approx(12 / (count * (count + 1) * (count + 2)), rel=1e-6)


# --- whitening -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("axis", ["down", "side"])
def test_whitening_equals_a_dense_factor(axis):
    """Whitened columns, data and determinant equal those of the dense Cholesky factor, with breaks in the chain."""
    rng = np.random.default_rng(3)
    times = np.sort(rng.choice(80, 40, replace=False)) * 0.04
    place, noise = rng.normal(size=(2, 40)), rng.uniform(0.5, 2.0, (2, 40))
    kept = np.ones(39, dtype=bool)
    kept[[0, 11, 12, 38]] = False
    steps = increments(
        times, place[0], place[1], down_std=noise[0], side_std=noise[1], impulse=np.cumsum(place[0]),
        exposure=0.03, breaks=~kept,
    )  # fmt: skip
    row = ["down", "side"].index(axis)
    whole = step_covariance(times, 0.03, 0.4, noise[row] / steps.typical_std * np.sqrt(0.4 * 0.2))
    matrix = whole[np.ix_(kept, kept)]
    columns = rng.normal(size=(35, 3))
    white = whitened(steps, diffusion=0.4, rho=0.2, columns=columns, axis=axis)
    factor = np.linalg.cholesky(matrix)
    # condition of the matrix is about 1e2
    assert white.columns == pytest.approx(np.linalg.solve(factor, columns), abs=1e-11)
    assert white.data == pytest.approx(np.linalg.solve(factor, np.diff(place[row])[kept]), abs=1e-11)
    assert white.log_det == pytest.approx(np.linalg.slogdet(matrix)[1], rel=1e-11)


def test_a_whitened_row_depends_on_earlier_steps_alone():
    """Changing late steps leaves the whitened rows before them as they are, so sums up to a change stand."""
    rng = np.random.default_rng(4)
    times, place = 0.04 * np.arange(30), rng.normal(size=30)
    changed = place.copy()
    changed[20:] += 5.0
    zeros = np.zeros(30)
    both = [
        whitened(
            increments(times, y, zeros, down_std=1.0, side_std=1.0, impulse=zeros, exposure=0.03),
            diffusion=1.0, rho=0.1, columns=zeros[:29],
        ).data
        for y in (place, changed)
    ]  # fmt: skip
    assert np.array_equal(both[0][:19], both[1][:19])
    assert abs(both[1][19] - both[0][19]) > 1


# --- leaving out -----------------------------------------------------------------------------------------------


def test_a_sighting_left_out_is_a_missing_frame():
    """Leaving sightings out of steps gives exactly the steps of the track without them, chain ends included."""
    track = record(np.random.default_rng(5), 5e-7, 4, plan=Plan(seconds=3.0, noise_spread=0.3))
    out = np.array([0, 7, 8, 20, len(track.times) - 1])
    keep = np.setdiff1d(np.arange(len(track.times)), out)
    fewer = dataclasses.replace(
        track, **{n: getattr(track, n)[keep] for n in ("times", "down", "side", "std", "impulse")}
    ).steps()
    ours = track.steps().without_sightings(out)
    scale = (fewer.typical_std / ours.typical_std) ** 2  # the typical weight is that of the sightings given
    for name in ("dt", "down", "side", "impulse", "blur_diag", "blur_off"):
        assert getattr(ours, name) == pytest.approx(getattr(fewer, name), rel=1e-9, abs=1e-18), name
    for name in ("noise_diag", "noise_off", "side_noise_diag", "side_noise_off"):
        assert getattr(ours, name) == pytest.approx(getattr(fewer, name) * scale, rel=1e-9), name
    assert np.array_equal(keep[fewer.first], ours.first)
    assert np.array_equal(keep[fewer.last], ours.last)


def test_a_sighting_between_charge_parts_takes_both_steps_along():
    """A step is never joined over a charge change."""
    track = record(np.random.default_rng(6), 5e-7, 4, plan=Plan(seconds=1.0, missing=0.0))
    part = np.repeat([0, 1], [10, 19])
    steps = track.steps(part=part).without_sightings([10])
    assert len(steps) == 27
    assert np.bincount(steps.part).tolist() == [9, 18]


def test_breaks_may_be_a_mask_or_indices():
    """Both ways of naming steps to leave out give the same steps, and the neighbours share nothing."""
    track = record(np.random.default_rng(7), 5e-7, 4, plan=Plan(seconds=1.0))
    mask = np.zeros(len(track.times) - 1, dtype=bool)
    mask[[3, 9]] = True
    one, two = track.steps(breaks=mask), track.steps(breaks=[3, 9])
    assert np.array_equal(one.down, two.down)
    assert one.blur_off[2] == one.noise_off[2] == 0.0
    assert one.first.tolist() == np.flatnonzero(~mask).tolist()


def test_records_cannot_be_changed_and_pickle():
    """Arrays are read-only, the caller's arrays stay writable and as they were, and the record pickles."""
    track = record(np.random.default_rng(8), 5e-7, 4, plan=Plan(seconds=1.0))
    before = track.down.copy()
    steps = track.steps()
    with pytest.raises(ValueError, match="read-only"):
        steps.down[0] = 0.0
    assert np.array_equal(track.down, before)
    assert track.down.flags.writeable
    assert np.array_equal(pickle.loads(pickle.dumps(steps)).impulse, steps.impulse)


@pytest.mark.parametrize(
    "wrong",
    [
        {"down": [0.0, np.nan, 0.0]},
        {"side": [0.0, 0.0]},
        {"down_std": 0.0},
        {"side_std": [1.0, -1.0, 1.0]},
        {"times": [0.0, 1.0, 1.0]},
        {"exposure": 2.0},
        {"breaks": [2]},
        {"breaks": [True]},
        {"part": [0]},
        {"part": [0, -1]},
    ],
)
def test_impossible_sightings_are_refused(wrong):
    """Each argument out of its range raises at once."""
    good = {
        "times": [0.0, 1.0, 2.0], "down": [0.0] * 3, "side": [0.0] * 3, "down_std": 1.0, "side_std": 1.0,
        "impulse": [0.0] * 3, "exposure": 0.5,
    }  # fmt: skip
    with pytest.raises(PhysicsError):
        increments(**(good | wrong))


def test_generalised_least_squares_reads_the_same_from_whitened_columns():
    """Ordinary least squares on whitened columns is generalised least squares on the steps."""
    track = record(np.random.default_rng(9), 5e-7, 4, plan=Plan(seconds=4.0, noise_spread=0.4))
    steps = track.steps()
    columns = np.column_stack([steps.dt, steps.impulse])
    white = whitened(steps, diffusion=3e-11, rho=2e-3, columns=columns)
    noise = track.std / steps.typical_std * np.sqrt(2e-3 * 3e-11)
    matrix = step_covariance(track.times, track.exposure, 3e-11, noise)
    values, spread, rest = generalised_least_squares(columns, steps.down, matrix)
    ours = np.linalg.lstsq(white.columns, white.data, rcond=None)
    assert ours[0] == pytest.approx(values, rel=1e-8)
    assert float(ours[1][0]) == pytest.approx(rest, rel=1e-8)
    assert np.linalg.inv(white.columns.T @ white.columns) == pytest.approx(spread, rel=1e-7)


def test_a_longer_exposure_is_place_noise_less():
    """A(tau) + rho M = A(tau') + (rho - (tau' - tau)/3) M for every tau, with gaps and uneven frames."""
    rng = np.random.default_rng(31)
    times = np.cumsum(rng.uniform(0.04, 0.09, 30))
    zeros = np.zeros(30)
    short, long = (
        increments(times, zeros, zeros, down_std=1.0, side_std=1.0, impulse=zeros, exposure=0.01, blur=blur,
                   breaks=[7, 20])
        for blur in (0.01, 0.04)
    )  # fmt: skip
    true = dense(short, diffusion=1.0, noise_var=0.002)
    assert dense(long, diffusion=1.0, noise_var=0.002 + 0.03 / 3) == pytest.approx(true, abs=1e-15)
    assert short.exposure == long.exposure == 0.01
