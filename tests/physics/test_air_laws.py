"""Air, oil and gravity against CoolProp, fluids, CIPM and printed tables."""

import math
import pickle

import fluids
import numpy as np
import pytest
from CoolProp.CoolProp import HAPropsSI, PropsSI
from hypothesis import given
from hypothesis import strategies as st

from physics import air
from physics.air import moist_air
from physics.errors import PhysicsError
from physics.oil import oil_density
from physics.site import local_gravity

LABORATORY = [283.15, 288.15, 293.15, 296.15, 298.15, 303.15, 308.15, 313.15]


def test_dry_air_is_the_iso_reference():
    """Dry air has the reference viscosity and mean free path of ISO 15900, and their law of temperature.

    Source: ISO 15900, 1.83245e-5 Pa s and 67.3 nm at 296.15 K and 101 325 Pa, Sutherland constant 110.4 K. The values
    at 295.15 K and 100 800 Pa are worked by hand from these formulas, to five digits.
    """
    reference = moist_air(296.15, 101_325.0)
    assert reference.viscosity == pytest.approx(1.83245e-5, rel=1e-15)
    assert reference.mean_free_path == pytest.approx(67.3e-9, rel=1e-15)
    assert moist_air(295.15, 100_800.0).viscosity == pytest.approx(1.82767e-5, abs=0.5e-10)
    assert moist_air(295.15, 100_800.0).mean_free_path == pytest.approx(6.7360e-8, abs=0.5e-12)


@pytest.mark.parametrize("temperature", LABORATORY)
def test_dry_viscosity_lies_among_the_sources(temperature):
    """The viscosity of dry air agrees with Lemmon and Jacobsen and with the 1976 standard atmosphere.

    Sources: CoolProp (Lemmon and Jacobsen 2004), fluids (U.S. Standard Atmosphere 1976). At 23 degC these two differ
    from ISO 15900 by +0.15 % and -0.26 %; over 10 to 40 degC by at most 0.21 % and 0.27 %.
    """
    ours = moist_air(temperature, 101_325.0)
    modern = PropsSI("V", "T", temperature, "P", 101_325.0, "Air")
    standard = fluids.ATMOSPHERE_1976.viscosity(temperature)
    assert standard < ours.viscosity < modern
    assert ours.viscosity == pytest.approx(modern, rel=2.2e-3)
    assert ours.viscosity == pytest.approx(standard, rel=2.8e-3)
    # ... and the model's stated uncertainty covers both: neither is further than 1.5 standard uncertainties.
    assert abs(ours.viscosity / modern - 1) < 1.5 * ours.viscosity_rel_std
    assert abs(ours.viscosity / standard - 1) < 1.5 * ours.viscosity_rel_std


def test_stated_viscosity_uncertainty_covers_a_third_source():
    """The correlation of Kadoya, Matsunaga and Nagashima is within two stated standard uncertainties.

    Source: J. Phys. Chem. Ref. Data 14 (1985), 947; 18.382 uPa s at 296.15 K (coefficients from memory).
    """
    ours = moist_air(296.15, 101_325.0)
    assert abs(18.382e-6 / ours.viscosity - 1) < 2 * ours.viscosity_rel_std


@pytest.mark.parametrize("temperature", LABORATORY)
@pytest.mark.parametrize("humidity", [0.2, 0.5, 0.8, 1.0])
def test_humidity_lowers_the_viscosity(temperature, humidity):
    """The effect of humidity on the viscosity lies between measurements and CoolProp, within what is stated.

    Sources: fit of Zuckerwar and Meredith (1985) to measurements, as printed by Rasmussen (1997), from memory;
    CoolProp's humid air (Wilke's rule). At 23 degC and 50 % they give -0.14 % and -0.42 %.
    """
    state = moist_air(temperature, 101_325.0, relative_humidity=humidity)
    ours = state.viscosity / moist_air(temperature, 101_325.0).viscosity - 1
    coolprop = HAPropsSI("mu", "T", temperature, "P", 101_325.0, "R", humidity)
    coolprop = coolprop / HAPropsSI("mu", "T", temperature, "P", 101_325.0, "R", 0.0) - 1
    x = HAPropsSI("psi_w", "T", temperature, "P", 101_325.0, "R", humidity)
    base = 84.986 + 7.0 * temperature - 3.7501e-3 * temperature**2
    measured = ((113.157 - temperature) * x - 100.015 * x**2) / base
    assert coolprop < measured < 0
    # 1.5 standard uncertainties of the mixture rule reach both sources.
    reach = 1.5 * air.MIXTURE_RULE_REL_STD * abs(ours)
    assert abs(ours - coolprop) < reach
    assert abs(ours - measured) < reach
    assert state.viscosity_rel_std > air.VISCOSITY_MODEL_REL_STD


@pytest.mark.parametrize(
    ("reduced", "momentum", "diffusive"),
    [(1.0, 1.587, 1.439), (2.0, 1.175, 1.075), (4.0, 0.9700, 0.8836), (10.0, 0.8242, 0.7424)],
)
def test_pair_viscosity_uses_the_tabled_collision_integrals(reduced, momentum, diffusive):
    """Viscosity and A* of the unlike pair follow from the Lennard-Jones collision integrals.

    Source: Hirschfelder, Curtiss and Bird (1954), table I-M, from memory; the fits of Neufeld et al. (1972) are good
    to 0.2 %, to which 0.3 % for other tables' digits is added.
    """
    temperature = reduced * air.PAIR_WELL_DEPTH
    viscosity, a_star = air._pair_viscosity(temperature)
    molar_mass = 2 * 28.96546 * 18.01528 / (28.96546 + 18.01528)
    expected = 26.693e-7 * math.sqrt(molar_mass * temperature) / (air.PAIR_DIAMETER**2 * momentum)
    assert viscosity == pytest.approx(expected, rel=5e-3)
    assert a_star == pytest.approx(momentum / diffusive, rel=5e-3)


def test_mixture_ends_in_its_pure_gases():
    """The mixture rule gives dry air at fraction 0 and water vapour at fraction 1, and vapour is CoolProp's.

    Source: IAPWS R12-08 through CoolProp at 1 Pa; equal formulas, so that 1e-4 allows for the density only.
    """
    for temperature in (283.15, 303.15):
        vapour = air.vapour_viscosity(temperature)
        assert air.moist_viscosity(temperature, vapour_fraction=0.0) == air.dry_viscosity(temperature)
        assert air.moist_viscosity(temperature, vapour_fraction=1e-12) == pytest.approx(
            air.dry_viscosity(temperature), rel=1e-11
        )
        assert air.moist_viscosity(temperature, vapour_fraction=1.0) == pytest.approx(vapour, rel=1e-12)
        assert vapour == pytest.approx(PropsSI("V", "T", temperature, "P", 1.0, "Water"), rel=1e-4)


@pytest.mark.parametrize("temperature", [273.15, *LABORATORY, 323.15])
@pytest.mark.parametrize(
    ("pressure", "humidity"), [(101_325.0, 0.0), (101_325.0, 0.5), (101_325.0, 1.0), (60e3, 0.5)]
)
def test_density_agrees_with_the_virial_equation_of_humid_air(temperature, pressure, humidity):
    """CIPM-2007 agrees with the humid air of CoolProp, also outside its own range of temperature.

    Source: CoolProp (Herrmann, Kretzschmar and Gatley 2009), whose molar mass of dry air is 3.6e-5 lower; 1.1e-4 is
    met at 50 degC and saturation, 4e-5 in the range of the equation.
    """
    ours = moist_air(temperature, pressure, relative_humidity=humidity)
    volume = HAPropsSI("Vha", "T", temperature, "P", pressure, "R", humidity)
    own_range = 288.15 <= temperature <= 300.15
    assert ours.density * volume == pytest.approx(1.0, abs=4e-5 if own_range else 1.1e-4)
    assert ours.density_rel_std == (2.2e-5 if own_range else 5e-4)


def test_density_goes_over_into_the_ideal_gas():
    """At a tenth of an atmosphere the dry density is that of an ideal gas to 1e-4.

    Source: p M / (R T) with M and R of CIPM-2007; the compressibility is then 1 - 3.6e-5.
    """
    ideal = 10_000.0 * 28.96546e-3 / (8.314472 * 296.15)
    assert moist_air(296.15, 10_000.0).density == pytest.approx(ideal, rel=1e-4)


@pytest.mark.parametrize(
    ("celsius", "pressure", "humidity"),
    [(20, 101_325, 0.5), (20, 100_000, 0.5), (23, 101_325, 0.4), (25, 95_000, 0.3)],
)
def test_density_agrees_with_the_weighing_approximation(celsius, pressure, humidity):
    """CIPM-2007 agrees with the approximation of legal metrology within the 2e-4 that is stated there.

    Source: OIML R 111-1 (2004), eq. E.3-1, (0.34848 p - 0.009 RH exp(0.061 t)) / (273.15 + t), p in hPa, RH in %.
    """
    approximate = (0.34848 * pressure / 100 - 0.9 * humidity * math.exp(0.061 * celsius)) / (273.15 + celsius)
    ours = moist_air(celsius + 273.15, pressure, relative_humidity=humidity).density
    assert ours == pytest.approx(approximate, rel=2e-4)


def test_saturation_pressure_is_that_of_water():
    """The vapour fraction at saturation is CoolProp's, enhancement included.

    Source: CoolProp psi_w; the formula of CIPM-2007 is good to about 1e-3 from 0 to 27 degC, 2e-3 up to 40 degC.
    """
    for temperature in LABORATORY:
        ours = air.vapour_fraction(temperature, 101_325.0, relative_humidity=1.0)
        assert ours == pytest.approx(HAPropsSI("psi_w", "T", temperature, "P", 101_325.0, "R", 1.0), rel=2e-3)


@pytest.mark.parametrize("humidity", [0.0, 0.5, 1.0])
def test_mean_free_path_follows_from_viscosity(humidity):
    """In moist air the mean free path is eta / (0.4908 rho c), c the mean speed of the mixture's molecules.

    Source: kinetic theory, c = sqrt(8 R T / (pi M)); the real density and the ideal one differ by 4e-4.
    """
    state = moist_air(298.15, 101_325.0, relative_humidity=humidity)
    x = air.vapour_fraction(298.15, 101_325.0, relative_humidity=humidity)
    molar_mass = (1 - x) * 28.96546e-3 + x * 18.01528e-3
    speed = math.sqrt(8 * 8.314472 * 298.15 / (math.pi * molar_mass))
    assert state.mean_free_path == pytest.approx(state.viscosity / (0.4908 * state.density * speed), rel=6e-4)


def test_given_viscosity_replaces_the_model_alone():
    """A viscosity that is given changes nothing but the viscosity, and its model uncertainty is gone."""
    model = moist_air(295.15, 100_800.0, relative_humidity=0.45)
    given_one = moist_air(295.15, 100_800.0, relative_humidity=0.45, viscosity=1.83e-5)
    assert (given_one.viscosity, given_one.viscosity_origin) == (1.83e-5, "given")
    assert given_one.viscosity_rel_std == 0.0
    assert given_one.mean_free_path == model.mean_free_path
    assert given_one.density == model.density
    assert model.viscosity_origin == "model"


@pytest.mark.parametrize(
    ("arguments", "name"),
    [
        ({"temperature": 0.0}, "temperature"),
        ({"temperature": 22.0}, "temperature"),
        ({"temperature": 324.0}, "temperature"),
        ({"temperature": math.nan}, "temperature"),
        ({"pressure": 1008.0}, "pressure"),
        ({"pressure": 120_000.0}, "pressure"),
        ({"relative_humidity": 45.0}, "relative_humidity"),
        ({"relative_humidity": -0.1}, "relative_humidity"),
        ({"viscosity": -1.8e-5}, "viscosity"),
        ({"temperature": 323.15, "pressure": 15_000.0, "relative_humidity": 1.0}, "relative_humidity"),
    ],
)
def test_air_outside_its_range_is_an_error(arguments, name):
    """A state outside the range of the laws raises and names the quantity; nothing is extrapolated."""
    state = {"temperature": 295.15, "pressure": 100_800.0, **arguments}
    with pytest.raises(PhysicsError) as caught:
        moist_air(state.pop("temperature"), state.pop("pressure"), **state)
    assert caught.value.name == name
    assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)


@given(
    temperature=st.floats(273.15, 313.15),
    pressure=st.floats(5e4, 1.1e5),
    humidity=st.floats(0.0, 0.95),
)
def test_air_changes_in_the_right_direction(temperature, pressure, humidity):
    """More humidity makes air lighter, less viscous and its free path shorter; pressure only denser and shorter."""
    here = moist_air(temperature, pressure, relative_humidity=humidity)
    damp = moist_air(temperature, pressure, relative_humidity=humidity + 0.05)
    assert damp.density < here.density
    assert damp.viscosity < here.viscosity
    assert damp.mean_free_path < here.mean_free_path
    dense = moist_air(temperature, pressure * 0.9, relative_humidity=0.0)
    dry = moist_air(temperature, pressure, relative_humidity=0.0)
    assert dense.viscosity == dry.viscosity
    assert dense.mean_free_path * 0.9 == pytest.approx(dry.mean_free_path, rel=1e-12)
    assert dense.density < dry.density


def test_oil_expands():
    """Mineral oil of 7e-4 1/K loses 0.35 % over 5 K, and the way back gives the density again.

    Source: definition of the cubic expansion coefficient, V = V0 (1 + alpha dT): 886 / 1.0035.
    """
    warm = oil_density(886.0, density_temperature=293.15, temperature=298.15, expansion=7e-4)
    assert warm == pytest.approx(886.0 / 1.0035, rel=1e-14)
    assert oil_density(886.0, density_temperature=293.15, temperature=310.0) == 886.0


@pytest.mark.parametrize(
    ("density", "keywords", "name"),
    [
        (0.886, {}, "oil_density"),
        (886.0, {"expansion": -1e-4}, "expansion"),
        (886.0, {"expansion": 0.7}, "expansion"),
        (886.0, {"temperature": 22.0}, "temperature"),
        (886.0, {"density_temperature": 20.0}, "density_temperature"),
        (886.0, {"temperature": 370.0, "expansion": 7e-4}, "density_temperature"),
    ],
)
def test_oil_outside_its_range_is_an_error(density, keywords, name):
    """An oil in the wrong unit, or carried over too many kelvins, raises and names the quantity."""
    arguments = {"density_temperature": 293.15, "temperature": 295.15, **keywords}
    with pytest.raises(PhysicsError) as caught:
        oil_density(density, **arguments)
    assert caught.value.name == name


@pytest.mark.parametrize(
    ("latitude", "gravity"),
    [
        (0, 9.78032534),
        (30, 9.79324727),
        (45, 9.80619777),
        (51.5, 9.81203358),
        (60, 9.81917695),
        (90, 9.83218494),
    ],
)
def test_gravity_is_somigliana(latitude, gravity):
    """Normal gravity on WGS 84 comes out to the printed digits, on both halves of the Earth.

    Source: WGS 84 equatorial 9.7803253359 and polar 9.8321849379 m/s^2 (TR8350.2); latitudes between by the formula.
    """
    assert local_gravity(latitude, 0.0) == pytest.approx(gravity, abs=0.6e-8)
    assert local_gravity(-latitude, 0.0) == local_gravity(latitude, 0.0)


def test_gravity_at_a_known_place_and_height():
    """Gravity at Chicago, and against the formula of fluids over latitudes and heights.

    Sources: 980.28 Gal as used with the oil drops of 1913, from memory, 30 mGal for the rock below; fluids has an
    older normal gravity, 3e-5 m/s^2 higher at the equator and 1.1e-4 lower at 80 deg, and the same height term.
    """
    assert local_gravity(41.79, 182.0) == pytest.approx(9.8028, abs=3e-4)
    for latitude in np.linspace(-80, 80, 9):
        for height in (0.0, 500.0, 3000.0):
            assert local_gravity(latitude, height) == pytest.approx(
                fluids.gravity(latitude, height), abs=1.2e-4
            )


@pytest.mark.parametrize(("latitude", "height"), [(91.0, 0.0), (0.0, -1000.0), (math.nan, 0.0), (10.0, 1e5)])
def test_gravity_outside_the_earth_is_an_error(latitude, height):
    """A latitude or altitude that no laboratory has raises."""
    with pytest.raises(PhysicsError):
        local_gravity(latitude, height)


@pytest.mark.parametrize(
    ("temperature", "pressure"), [(296.15, 101_325.0), (273.15, 110_000.0), (313.15, 80_000.0)]
)
def test_slopes_of_dry_air_are_the_exponents_of_its_laws(temperature, pressure):
    """Viscosity, free path and density of dry air have the slopes of their formulas, at an end of the range too.

    Source: ISO 15900, d ln eta / d ln T = 3/2 - T/(T + S), d ln lambda / d ln T = 2 - T/(T + S), as -1 by pressure; the
    density as an ideal gas, +1 and -1, within 2e-3. Differences over 1e-3, one-sided at the ends, are good to 5e-4,
    and the half per cent of humidity at which slopes are taken lowers those by temperature by less than 3e-3.
    """
    slopes = air.air_slopes(moist_air(temperature, pressure))
    share = temperature / (temperature + 110.4)
    expected = [[1.5 - share, 0.0], [2.0 - share, -1.0], [-1.0, 1.0]]
    np.testing.assert_allclose(slopes[:, :2], expected, atol=5e-3)
    assert np.all(slopes[:, 2] < 0)
