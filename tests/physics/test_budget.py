"""Own and shared uncertainty: sensitivities, covariance between droplets, tables, and the check by Monte Carlo."""

import math
from dataclasses import dataclass, replace

import numpy as np
import pytest
from diffusing_droplets import CONDITIONS, record
from hypothesis import given
from hypothesis import strategies as st

from physics import budget, droplet
from physics.air import moist_air
from physics.budget import SHARED_INPUTS, DropletModel
from physics.droplet import ELEMENTARY_CHARGE, Conditions
from physics.errors import PhysicsError
from physics.motion import droplet_posterior


@dataclass(frozen=True)
class Stated:
    """A value with its standard uncertainty, as a bench file states it."""

    value: float
    std: float


AIR = moist_air(296.15, 101_325.0, relative_humidity=0.4)
INPUTS = {
    "scale": Stated(2.98e-6, 0.005e-6),
    "plate_gap": Stated(6.00e-3, 0.02e-3),
    "voltage": Stated(260.0, 0.5),
    "temperature": Stated(296.15, 0.3),
    "pressure": Stated(101_325.0, 100.0),
    "relative_humidity": Stated(0.40, 0.05),
    "viscosity_model": Stated(1.0, 0.002),
    "slip_model": Stated(1.0, 0.03),
    "oil_density": Stated(886.0, 1.0),
    "gravity": Stated(9.81, 0.0005),
}


def bench(air=AIR, **changes) -> Conditions:
    """Bench with the air's properties."""
    plain = Conditions(
        temperature=air.temperature,
        viscosity=air.viscosity,
        mean_free_path=air.mean_free_path,
        air_density=air.density,
        oil_density=886.0,
        gravity=9.80665,
        plate_gap=6e-3,
    )
    return replace(plain, **changes)


def model(radius=0.6e-6, number=5, **changes) -> DropletModel:
    """Droplet of a charge number on this bench."""
    return DropletModel(radius, number * ELEMENTARY_CHARGE, bench(), AIR, **changes)


def slopes(droplet_model: DropletModel) -> tuple[dict[str, float], dict[str, float]]:
    """Sensitivities of ln radius and ln charge by name."""
    of_radius, of_charge = budget.shared_sensitivities(droplet_model)
    return dict(zip(SHARED_INPUTS, of_radius, strict=True)), dict(zip(SHARED_INPUTS, of_charge, strict=True))


def test_sensitivities_of_one_droplet():
    """Sensitivities of the charge of a 0.6 um droplet agree with an independent computation to its printed digits.

    Source: computed apart from this package (r 0.6 um, rho 886, Kim et al. with ISO air): viscosity 1.592, oil
    density -0.593, gravity -0.592, mean free path -0.184 (which the pressure carries with the opposite sign), V -1,
    d +1.
    """
    dry = moist_air(296.15, 101_325.0)
    _, q = slopes(DropletModel(0.6e-6, 8e-19, bench(dry, air_density=1.1873296), dry))
    assert q["viscosity_model"] == pytest.approx(1.592, abs=6e-4)
    assert q["scale"] == pytest.approx(0.710 + 0.882, abs=1e-3)
    assert q["oil_density"] == pytest.approx(-0.593, abs=6e-4)
    assert q["gravity"] == pytest.approx(-0.592, abs=6e-4)
    assert q["voltage"] == pytest.approx(-1.0, abs=1e-7)
    assert q["plate_gap"] == pytest.approx(1.0, abs=1e-7)
    assert q["slip_model"] == pytest.approx(-0.184, abs=6e-4)
    assert q["pressure"] == pytest.approx(0.184 + 0.0008, abs=6e-4)


@pytest.mark.parametrize(
    ("radius", "of_radius", "of_charge"), [(0.3e-6, 0.56, 1.68), (0.5e-6, 0.54, 1.61), (1.0e-6, 0.52, 1.56)]
)
def test_sensitivities_over_radius(radius, of_radius, of_charge):
    """Scale and viscosity act alike on radius and charge, more strongly the smaller the droplet; density the other way.

    Source: an independent numerical study of the same model, two digits.
    """
    r, q = slopes(model(radius))
    for name in ("scale", "viscosity_model"):
        assert r[name] == pytest.approx(of_radius, abs=0.006)
        assert q[name] == pytest.approx(of_charge, abs=0.006)
    assert r["oil_density"] == pytest.approx(-of_radius, abs=0.006)
    assert q["oil_density"] == pytest.approx(1 - of_charge, abs=0.006)


def test_sensitivities_in_the_limit_without_slip():
    """Without slip and buoyancy the exponents are those of Stokes' law.

    Source: r ~ (eta v / (rho g))^(1/2) and q ~ eta^(3/2) v^(1/2) d / ((rho g)^(1/2) V) times the drive, closed form.
    """
    plain = bench(mean_free_path=1e-20, air_density=0.0)
    r, q = slopes(DropletModel(1e-6, 8e-19, plain, AIR))
    expected = {
        "scale": (0.5, 1.5),
        "viscosity_model": (0.5, 1.5),
        "oil_density": (-0.5, -0.5),
        "gravity": (-0.5, -0.5),
    }
    for name, (of_radius, of_charge) in expected.items():
        assert r[name] == pytest.approx(of_radius, abs=1e-6)
        assert q[name] == pytest.approx(of_charge, abs=1e-6)
    assert q["slip_model"] == pytest.approx(0.0, abs=1e-9)


def test_radius_from_diffusion_alone_needs_no_viscosity():
    """With the radius from Brownian motion alone the charge is free of viscosity, density and gravity.

    Source: q = (drive / D) k T d / V by the Stokes-Einstein relation, whatever the drag: scale -1, temperature +1.
    """
    _, q = slopes(model(diffusion_weight=1.0))
    expected = {"scale": -1.0, "temperature": 1.0, "plate_gap": 1.0, "voltage": -1.0}
    for name in SHARED_INPUTS:
        assert q[name] == pytest.approx(expected.get(name, 0.0), abs=1e-6)


def test_weight_between_fall_and_diffusion_that_is_free_of_scale():
    """There is a mixture of the two ways to the charge in which the scale cancels.

    Source: charge goes as scale^1.6 by the fall speed and as scale^-1 by diffusion, so that weights 1/2.6 and 1.6/2.6
    cancel (two digits, at 0.5 um). The mixture here is of ln radius; both charges share the same drive.
    """
    by_fall = slopes(model(0.5e-6))[1]["scale"]
    assert by_fall == pytest.approx(1.61, abs=0.01)
    mixed = slopes(model(0.5e-6, diffusion_weight=by_fall / (by_fall + 1)))[1]["scale"]
    assert mixed == pytest.approx(0.0, abs=1e-3)


def test_temperature_acts_through_the_air():
    """The slopes by temperature, pressure and humidity are those of evaluating anew with the other air.

    Source: the droplet laws themselves with `moist_air` at the shifted state; 5e-3 of
    each change allows for curvature.
    """
    start = model()
    conditions = start.conditions
    fall = droplet.fall_speed(start.radius, conditions)
    drive = droplet.droplet_mobility(start.radius, conditions) * start.charge * 300.0 / conditions.plate_gap
    moves = {"temperature": 1e-3, "pressure": 1e-2, "relative_humidity": 0.05}
    for name, move in moves.items():
        state = {"temperature": 296.15, "pressure": 101_325.0, "relative_humidity": 0.4}
        state[name] = state[name] + move if name == "relative_humidity" else state[name] * (1 + move)
        air = moist_air(state["temperature"], state["pressure"], relative_humidity=state["relative_humidity"])
        other = bench(air)
        charge = droplet.charge_from_speeds(fall, fall + drive, 300.0, other)
        radius = droplet.radius_from_fall_speed(fall, other)
        by_radius, by_charge = budget.shared_effect(start, {name: move})
        scale = abs(math.log(charge / start.charge)) + 1e-9
        assert math.log(by_charge) == pytest.approx(math.log(charge / start.charge), abs=5e-3 * scale)
        assert math.log(by_radius) == pytest.approx(math.log(radius / start.radius), abs=5e-3 * scale)


def test_given_viscosity_does_not_follow_the_weather():
    """A viscosity from the bench file leaves temperature only the free path, the density and the oil.

    Source: with the model's viscosity a kelvin makes 0.33 % of charge; without it the free path's 0.07 % the other
    way.
    """
    air = moist_air(296.15, 101_325.0, viscosity=1.83e-5)
    given_q = slopes(DropletModel(0.6e-6, 8e-19, bench(air), air))[1]
    model_q = slopes(model())[1]
    assert given_q["temperature"] < 0 < model_q["temperature"]
    assert given_q["viscosity_model"] == pytest.approx(model_q["viscosity_model"], abs=2e-3)
    assert abs(given_q["relative_humidity"]) < 0.1 * abs(model_q["relative_humidity"])


def test_oil_expansion_joins_temperature():
    """An oil of 7e-4 1/K makes the temperature act through its density too.

    Source: d ln rho / d ln T = -alpha T, times the slope by the density.
    """
    still, warm = slopes(model())[1], slopes(model(expansion=7e-4))[1]
    expected = -7e-4 * 296.15 * still["oil_density"]
    assert warm["temperature"] - still["temperature"] == pytest.approx(expected, rel=1e-3)


def test_air_is_rebuilt_from_conditions():
    """Without a record of the air, dry air of the same temperature and free path stands in, with the same slopes.

    Warm air holds more vapour, which lowers its viscosity: at 40 % humidity that takes 0.08 of the slope by
    temperature, which dry air does not have. All other slopes agree within 0.01.
    """
    known, unknown = slopes(model())[1], slopes(replace(model(), air=None))[1]
    for name in SHARED_INPUTS:
        assert unknown[name] == pytest.approx(known[name], abs=0.09 if name == "temperature" else 0.01)


@pytest.mark.parametrize(("radius", "tolerance"), [(0.3e-6, 0.02), (0.5e-6, 0.012), (1.0e-6, 0.012)])
def test_sensitivities_agree_with_the_joint_posterior(radius, tolerance):
    """The closed forms agree with a small change of the whole posterior over radius, charge and noise.

    The posterior moves a grid, the closed form joins two radii with the weight of the Brownian motion, taken here from
    the slope by gravity. They differ by the posterior's skewness, largest where the radius is known to 4 % only, and by
    0.012 in the slope by temperature, for which the posterior takes half-saturated air.
    """
    track = record(np.random.default_rng(11), radius, 5).steps()
    found = droplet_posterior(track, CONDITIONS)
    air = moist_air(CONDITIONS.temperature, 101_325.0, relative_humidity=0.5)
    by_fall = DropletModel(found.radius, float(found.charge[0]), CONDITIONS, air)
    weight = 1 - found.sensitivities["gravity"][0] / slopes(by_fall)[0]["gravity"]
    closed = budget.shared_sensitivities(replace(by_fall, diffusion_weight=weight))
    for name, expected in zip(SHARED_INPUTS, closed.T, strict=True):
        np.testing.assert_allclose(found.sensitivities[name], expected, atol=tolerance, err_msg=name)


def test_hot_and_thin_air_has_slopes_too():
    """Where saturated air would be beyond the laws of the air, sensitivities can still be had.

    At 40 degC and 100 hPa the laws end at a third of saturation. The pressure acts more strongly than at 1013 hPa,
    since the slip term Cc - 1 is about 0.9 there instead of 0.08.
    """
    thin = moist_air(313.15, 10_000.0, relative_humidity=0.2)
    known = slopes(DropletModel(1e-6, 8e-19, bench(thin), thin))[1]
    unknown = slopes(DropletModel(1e-6, 8e-19, bench(thin)))[1]
    for table in (known, unknown):
        assert all(math.isfinite(value) for value in table.values())
    assert known["pressure"] > 2 * slopes(model(1e-6))[1]["pressure"]
    found = droplet_posterior(record(np.random.default_rng(12), 1e-6, 5).steps(), bench(thin))
    assert math.isfinite(found.sensitivities["relative_humidity"][1])


@given(
    radius=st.floats(2e-7, 3e-6),
    errors=st.lists(st.floats(-0.05, 0.05), min_size=10, max_size=10),
    weight=st.floats(0, 1),
)
def test_effect_is_the_re_evaluated_droplet(radius, errors, weight):
    """The effect of errors is linear with the sensitivities to first order, and nothing happens without errors."""
    droplet_model = model(radius, diffusion_weight=weight)
    nothing = budget.shared_effect(droplet_model, {})
    np.testing.assert_allclose(nothing, 1.0, rtol=1e-11)
    small = dict(zip(SHARED_INPUTS, 1e-3 * np.array(errors), strict=True))
    effect = np.log(budget.shared_effect(droplet_model, small))
    linear = budget.shared_sensitivities(droplet_model) @ np.array(list(small.values()))
    # Second order: ten errors of up to 5e-5, curvatures up to about 3.
    np.testing.assert_allclose(effect, linear, atol=4e-7)


def test_shared_covariance_between_droplets():
    """Droplets of one bench vary together: the matrix is S U S^T, and the mean of many keeps the shared part.

    Source: closed form for two droplets and one input; the average of N droplets with the same sensitivity s has the
    variance (s u)^2 + own^2 / N.
    """
    sensitivities = np.zeros((2, 10))
    sensitivities[:, 0] = [1.6, 1.5]
    stds = np.zeros(10)
    stds[0] = 0.01
    matrix = budget.shared_covariance(sensitivities, stds, values=[2.0, 3.0])
    np.testing.assert_allclose(matrix, [[0.032**2, 0.032 * 0.045], [0.032 * 0.045, 0.045**2]], rtol=1e-12)
    rows = np.stack([budget.shared_sensitivities(model(r))[1] for r in (0.4e-6, 0.6e-6, 0.9e-6)])
    errors = budget.shared_errors(INPUTS)
    relative = budget.shared_covariance(rows, errors)
    correlation = relative / np.sqrt(np.outer(np.diag(relative), np.diag(relative)))
    assert np.all(correlation > 0.9)  # slip alone acts differently on different radii
    assert np.linalg.matrix_rank(relative) <= 3
    for row, variance in zip(rows, np.diag(relative), strict=True):
        assert variance == pytest.approx(float(np.sum((row * errors) ** 2)), rel=1e-12)


def test_droplet_budget_table():
    """The table of a droplet names every input in its unit; shares add up to 1 and parts to the whole.

    Source: JCGM 100, sum of squares: share = (sensitivity x std / combined std)^2 with the numbers of the table
    itself.
    """
    droplet_model = model()
    own = 0.08 * ELEMENTARY_CHARGE
    table = budget.droplet_budget(
        droplet_model.charge, own, budget.shared_sensitivities(droplet_model)[1], INPUTS
    )
    assert {row.input for row in table.rows} == {"own", *SHARED_INPUTS}
    assert sum(row.share for row in table.rows) == pytest.approx(1.0, rel=1e-12)
    assert [row.share for row in table.rows] == sorted((row.share for row in table.rows), reverse=True)
    for row in table.rows:
        assert row.share == pytest.approx((row.sensitivity * row.std / table.std) ** 2, rel=1e-9)
    assert table.std == pytest.approx(math.hypot(table.own_std, table.shared_std), rel=1e-12)
    assert table.own_std == own
    by_name = {row.input: row for row in table.rows}
    assert by_name["voltage"].sensitivity == pytest.approx(-droplet_model.charge / 260.0, rel=1e-6)
    assert by_name["plate_gap"].unit == "m"
    assert table.interval_95[1] - table.interval_95[0] == pytest.approx(2 * 1.959964 * table.std, rel=1e-6)
    assert table.unit == "C"


def test_monte_carlo_agrees_with_a_well_behaved_droplet():
    """For small uncertainties the linear budget is confirmed, and says so.

    Two digits of the standard uncertainty, 1.0e-20 C: the ends of both intervals lie within half a unit of the
    second, while the second-order shift of the mean is 1e-22 C.
    """
    droplet_model = model(number=5)
    own = 0.05 * ELEMENTARY_CHARGE
    covariance = [[0.004**2, 0.0], [0.0, own**2]]
    table = budget.droplet_budget(
        droplet_model.charge, own, budget.shared_sensitivities(droplet_model)[1], INPUTS
    )
    checked = budget.checked_budget(table, droplet_model, covariance, INPUTS, np.random.default_rng(1))
    assert checked.method == "linear"
    assert "agrees" in checked.note
    assert (checked.value, checked.std, checked.rows) == (table.value, table.std, table.rows)


def test_monte_carlo_takes_over_where_linear_fails():
    """With a scale known to 20 % the Monte Carlo result is given, skewed, and the note says by how much it differs.

    Source: without slip q ~ scale^1.5 for a fixed ratio of speeds, so that for a normal scale error s the quantiles
    of q are (1 + 1.96 s)^1.5 in closed form.
    """
    plain = DropletModel(1e-6, 8e-19, bench(mean_free_path=1e-20, air_density=0.0), AIR)
    inputs = {"scale": Stated(3e-6, 0.6e-6)}
    table = budget.droplet_budget(plain.charge, 0.0, budget.shared_sensitivities(plain)[1], inputs)
    checked = budget.checked_budget(table, plain, np.zeros((2, 2)), inputs, np.random.default_rng(2))
    assert checked.method == "monte carlo"
    assert "linear propagation fails" in checked.note
    expected = [8e-19 * (1 - 1.959964 * 0.2) ** 1.5, 8e-19 * (1 + 1.959964 * 0.2) ** 1.5]
    # Two steady digits of a standard uncertainty of 2.4e-19 C.
    np.testing.assert_allclose(checked.interval_95, expected, atol=0.05e-19)
    assert checked.rows == table.rows


def test_bench_budget_and_what_would_explain_an_offset():
    """A charge unit 1.3 % too large is explained by a stated scale 0.8 % too large, or a voltage 1.3 % too small.

    Source: closed form with the slopes 1.6 (scale), 1 (gap), -1 (voltage): 1.013^(1/1.6) = 1.0081.
    """
    rows = np.stack([budget.shared_sensitivities(model(r))[1] for r in (0.55e-6, 0.6e-6)])
    table = budget.bench_budget(rows, INPUTS, weights=[1.0, 3.0])
    assert table.value == 1.0
    assert table.own_std == 0.0
    expected = np.sum((np.array([0.25, 0.75]) @ rows * budget.shared_errors(INPUTS)) ** 2)
    assert table.std == pytest.approx(math.sqrt(expected), rel=1e-12)
    causes = budget.explaining_errors(1.013, table)
    assert causes["scale"] == pytest.approx(0.0081, abs=1e-4)
    assert causes["plate_gap"] == pytest.approx(0.013, abs=1e-5)
    assert causes["voltage"] == pytest.approx(1 / 1.013 - 1, abs=1e-5)
    assert "relative_humidity" not in causes
    assert all(
        value == pytest.approx(0.0, abs=1e-15) for value in budget.explaining_errors(1.0, table).values()
    )


def test_explanation_holds_when_it_is_applied():
    """Correcting the stated scale by the explaining error removes the offset.

    The bench's true scale is the stated one over 1 + error; the charge then falls by the ratio that was seen.
    """
    droplet_model = model()
    table = budget.bench_budget(budget.shared_sensitivities(droplet_model)[1][None], INPUTS, weights=[1.0])
    error = budget.explaining_errors(1.02, table)["scale"]
    _, ratio = budget.shared_effect(droplet_model, {"scale": 1 / (1 + error) - 1})
    assert ratio == pytest.approx(1 / 1.02, rel=2e-4)  # the slope changes by 0.1 % over 1.2 % of scale


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: budget.shared_errors({"colour": Stated(1.0, 0.1)}), "shared input"),
        (lambda: budget.shared_errors({"scale": Stated(3e-6, -1e-9)}), "scale"),
        (lambda: budget.shared_errors({"scale": Stated(0.0, 1e-9)}), "scale"),
        (lambda: budget.shared_errors({"voltage": Stated(260.0, math.nan)}), "voltage"),
        (lambda: budget.shared_covariance(np.zeros((3, 9)), np.zeros(10)), "sensitivities"),
        (lambda: budget.droplet_budget(1.0, 0.1, np.zeros(10), {}, quantity="colour"), "quantity"),
        (lambda: budget.bench_budget(np.zeros((2, 10)), INPUTS, weights=[0.0, 0.0]), "weights"),
        (
            lambda: budget.explaining_errors(
                0.0, budget.bench_budget(np.ones((1, 10)), INPUTS, weights=[1.0])
            ),
            "ratio",
        ),
    ],
)
def test_wrong_budgets_are_errors(call, words):
    """Unknown inputs, negative uncertainties and shapes that do not fit raise and name what was wrong."""
    with pytest.raises(PhysicsError, match=words):
        call()


def test_humidity_counts_absolutely():
    """A humidity of 0 with an uncertainty is a valid input, counted in its own unit.

    Source: convention of this module; relative errors of the others are std over value.
    """
    errors = budget.shared_errors({"relative_humidity": Stated(0.0, 0.05), "voltage": Stated(-260.0, 0.52)})
    assert errors[SHARED_INPUTS.index("relative_humidity")] == 0.05
    assert errors[SHARED_INPUTS.index("voltage")] == pytest.approx(0.002, rel=1e-12)
