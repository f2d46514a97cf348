"""How the shared inputs of a bench move radius and charge of one droplet."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from diffusing_droplets import CONDITIONS, Plan, record, stepped

from physics.air import dry_mean_free_path, moist_air
from physics.budget import SHARED_INPUTS
from physics.droplet import (
    Conditions,
    diffusion,
    fall_speed,
)
from physics.motion import droplet_posterior, input_responses

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
