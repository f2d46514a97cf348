"""The precision that a planned track can reach, against published bounds and simulated tracks."""

from __future__ import annotations

import numpy as np
import pytest
from diffusing_droplets import CONDITIONS, PIXEL, Plan, record

from physics.errors import PhysicsError
from physics.motion import droplet_posterior, input_responses
from physics.precision import Camera, expected_precision, track_information
from physics.quanta import ELEMENTARY_CHARGE

CAMERA = Camera(30.0, 0.9 / 30, 0.1 * PIXEL)


def knots(seconds: float, plan: Plan) -> tuple[np.ndarray, np.ndarray]:
    """Field of a plan as knots."""
    count = int(np.ceil(seconds / plan.segment)) + 1
    volts = (
        plan.field
        * CONDITIONS.plate_gap
        * np.array([plan.pattern[i % len(plan.pattern)] for i in range(count)])
    )
    return np.repeat(plan.segment * np.arange(count + 1), 2)[1:-1], np.repeat(volts, 2)


def bound(radius: float, number: float, plan: Plan, *, camera: Camera = CAMERA, air: float = 0.0):
    """Precision of one droplet of a plan."""
    info = track_information(
        radius, plan.seconds, knots(plan.seconds, plan), camera=camera, conditions=CONDITIONS
    )
    return expected_precision(info, number * ELEMENTARY_CHARGE, conditions=CONDITIONS, air_speed_std=air)


@pytest.mark.parametrize(
    ("radius", "seconds", "by_speed", "both", "charge"),
    [
        (0.3, 12, 13.5, 6.0, 0.37), (0.3, 24, 9.5, 4.3, 0.26), (0.3, 60, 6.0, 2.7, 0.16), (0.4, 24, 4.6, 3.4, 0.20),
        (0.5, 12, 3.8, 3.3, 0.20), (0.5, 24, 2.65, 2.36, 0.143), (0.5, 60, 1.68, 1.49, 0.090),
        (0.7, 24, 1.15, 1.12, 0.086), (1.0, 24, 0.47, 0.47, 0.077), (1.5, 24, 0.17, 0.17, 0.091),
    ],
)  # fmt: skip
def test_bounds_equal_those_of_an_independent_computation(radius, seconds, by_speed, both, charge):
    """Bounds on ln r and charge equal those computed with full covariance matrices, to the digits given there.

    Source: numerical Fisher information from dense matrices for 5 charges at 4e4 V/m; two to three digits are
    given.
    """
    found = bound(radius * 1e-6, 5, Plan(seconds=seconds, missing=0.0))
    assert 100 * found.log_radius_std_by_speed == pytest.approx(by_speed, rel=0.02, abs=0.005)
    assert 100 * found.log_radius_std == pytest.approx(both, rel=0.02, abs=0.005)
    assert found.charge_std / ELEMENTARY_CHARGE == pytest.approx(charge, rel=0.01, abs=0.005)


def test_information_of_variances_is_the_trace_of_full_matrices():
    """The sum over eigenvalues equals 1/2 tr(C^-1 dC C^-1 dC) with dense matrices, to round-off."""
    radius, plan = 4e-7, Plan(seconds=5.0)
    info = track_information(radius, plan.seconds, knots(5.0, plan), camera=CAMERA, conditions=CONDITIONS)
    count = int(plan.seconds * 30)
    from physics.droplet import diffusion

    second = 2 * np.eye(count) - np.eye(count, k=1) - np.eye(count, k=-1)
    blur = 2 / 30 * np.eye(count) - CAMERA.exposure / 3 * second
    d, step = float(diffusion(radius, CONDITIONS)), 1e-5
    slope = float(
        np.log(diffusion(radius * np.exp(step), CONDITIONS) / diffusion(radius * np.exp(-step), CONDITIONS))
    )
    inverse = np.linalg.inv(d * blur + CAMERA.place_std**2 * second)
    by = [inverse @ (d * slope / (2 * step) * blur), inverse @ (CAMERA.place_std**2 * second)]
    exact = np.array([[np.trace(a @ b) for b in by] for a in by])  # two axes: twice the half
    np.testing.assert_allclose(info.variance, exact, rtol=1e-6)  # the slope's step errs by 1e-8 of it


def test_drive_at_known_radius_has_the_closed_form():
    """Many toggles and no place noise: sigma_q = sqrt(2 k T / (B T_on)) d / V for a drive alone.

    The field's sign alternates, so that the drift takes nothing; frames and exposures blur the toggles by 2
    %.
    """
    from physics.droplet import BOLTZMANN, droplet_mobility

    plan = Plan(seconds=24.0, pattern=(1, -1), segment=2.0)
    found = bound(5e-7, 1, plan, camera=Camera(30.0, 0.0, 1e-10))
    force = np.sqrt(
        2 * BOLTZMANN * CONDITIONS.temperature / (float(droplet_mobility(5e-7, CONDITIONS)) * 24.0)
    )
    assert found.charge_std_at_radius == pytest.approx(force / plan.field, rel=0.02)


def test_unknown_air_speed_costs_most_where_brownian_motion_tells_little():
    """With the air's speed unknown the radius is known from Brownian motion alone: 5 to 6 % from 0.5 um on."""
    plan = Plan(seconds=24.0, missing=0.0)
    free = [bound(r * 1e-6, 5, plan, air=1.0).log_radius_std for r in (0.5, 0.7, 1.0, 1.5)]
    np.testing.assert_allclose(
        100 * np.array(free), [5.2, 5.4, 5.7, 6.0], atol=0.06
    )  # digits of the reference


@pytest.mark.parametrize(("radius", "number"), [(4e-7, 3), (7e-7, -6), (1e-6, 8)])
def test_planned_precision_is_the_spread_of_simulated_tracks(radius, number):
    """Standard deviations of radius and charge over 150 simulated tracks are those planned, within 10 %.

    Chance alone moves the spread of 150 tracks by 6 %, three times of which is allowed beside the 10 %,
    combined.
    """
    plan, rng = Plan(seconds=24.0, missing=0.0), np.random.default_rng(20)
    expected = bound(radius, number, plan)
    responses = input_responses(CONDITIONS)
    found = [droplet_posterior(record(rng, radius, number, plan=plan).steps(), CONDITIONS, responses=responses)
             for _ in range(150)]  # fmt: skip
    spread_r = np.std([np.log(f.radius) for f in found])
    spread_q = np.std([f.charge[0] for f in found])
    allowed = np.hypot(0.10, 3 / np.sqrt(2 * 150))
    assert spread_r == pytest.approx(expected.log_radius_std, rel=allowed)
    assert spread_q == pytest.approx(expected.charge_std, rel=allowed)
    # What each track says of itself is on the mean what was planned; the posterior knows its own width to a few %.
    assert np.mean([f.charge_std[0] for f in found]) == pytest.approx(expected.charge_std, rel=0.05)


def test_a_track_too_short_or_without_field_gives_nothing():
    """No steps, or no field, is an infinite uncertainty and no error."""
    plan = Plan(seconds=0.1)
    assert track_information(5e-7, 0.1, knots(1.0, plan), camera=CAMERA, conditions=CONDITIONS) is None
    assert expected_precision(None, ELEMENTARY_CHARGE, conditions=CONDITIONS).charge_std == np.inf
    off = ([0.0, 10.0], [0.0, 0.0])
    info = track_information(5e-7, 10.0, off, camera=CAMERA, conditions=CONDITIONS)
    assert expected_precision(info, ELEMENTARY_CHARGE, conditions=CONDITIONS).charge_std == np.inf


def test_exposure_longer_than_a_frame_is_refused():
    """An exposure beyond the frame interval has no exact model."""
    with pytest.raises(PhysicsError, match="exposure"):
        track_information(5e-7, 10.0, ([0.0], [0.0]), camera=Camera(30.0, 0.05, 1e-7), conditions=CONDITIONS)
