"""Speeds, radius, charge: closed forms, printed tables and properties."""

import math
from dataclasses import replace

import fluids
import numpy as np
import pytest
import scipy.constants
from hypothesis import given
from hypothesis import strategies as st

from physics import droplet
from physics.air import moist_air
from physics.droplet import BOLTZMANN, ELEMENTARY_CHARGE, Conditions
from physics.errors import PhysicsError

AIR = moist_air(296.15, 101_325.0)
BENCH = Conditions(
    temperature=296.15,
    viscosity=AIR.viscosity,
    mean_free_path=AIR.mean_free_path,
    air_density=1.1873296,
    oil_density=886.0,
    gravity=9.80665,
    plate_gap=6e-3,
)
PLAIN = replace(BENCH, mean_free_path=1e-20, air_density=0.0)  # neither slip nor buoyancy

radii = st.floats(1e-7, 5e-6)
volts = st.floats(-2000, 2000).filter(lambda v: abs(v) > 1)


def test_constants_are_exact():
    """The elementary charge and the Boltzmann constant are those of the SI of 2019.

    Source: scipy.constants (CODATA 2018 and later; exact).
    """
    assert scipy.constants.e == ELEMENTARY_CHARGE
    assert scipy.constants.k == BOLTZMANN


def test_one_droplet_worked_by_hand():
    """A droplet of 0.6 um with five charges has the speeds that an independent computation gives.

    Source: computed apart from this package, to nine digits: Cc 1.1306816, weight 7.8508082e-15 N, fall
    4.28321823e-5 m/s, rise 3.21380434e-4 m/s and 4.07044799e-4 m/s when driven down, by 500 V over 6 mm.
    """
    radius = 0.6e-6
    assert droplet.weight(radius, BENCH) == pytest.approx(7.8508082e-15, rel=1e-8)
    fall = droplet.fall_speed(radius, BENCH)
    assert fall == pytest.approx(4.28321823e-5, rel=2e-9)
    up, down = -3.21380434e-4, 4.07044799e-4
    # The rise is printed to nine digits, of which the charge keeps eight.
    assert droplet.charge_from_speeds(fall, up, -500.0, BENCH) == pytest.approx(
        5 * ELEMENTARY_CHARGE, rel=1e-8
    )
    assert droplet.charge_from_speeds(fall, down, 500.0, BENCH) == pytest.approx(
        5 * ELEMENTARY_CHARGE, rel=1e-8
    )


def test_negative_droplet_rises_under_a_positive_top_plate():
    """With the top plate positive a negative droplet is driven up and a positive one down.

    Source: the field points from the positive to the negative plate, here down, and F = q E.
    """
    radius, charge = 0.5e-6, -3 * ELEMENTARY_CHARGE
    drive = droplet.droplet_mobility(radius, BENCH) * charge * 300.0 / BENCH.plate_gap
    assert drive < 0
    assert droplet.charge_from_drive(drive, 300.0, radius, BENCH) == pytest.approx(charge, rel=1e-14)
    assert droplet.charge_from_drive(-drive, 300.0, radius, BENCH) == pytest.approx(-charge, rel=1e-14)
    assert (
        droplet.charge_at_balance(radius, 300.0, BENCH) < 0 < droplet.charge_at_balance(radius, -300.0, BENCH)
    )


@given(speed=st.floats(1e-6, 1e-3), volt=volts)
def test_closed_forms_without_slip_and_buoyancy(speed, volt):
    """Without slip and buoyancy r = sqrt(9 eta v / (2 rho g)), and at balance |q| = m g d / |V|.

    Source: Stokes' law and the balance of forces in closed form; 1e-12 is round-off of the logarithms.
    """
    radius = math.sqrt(9 * PLAIN.viscosity * speed / (2 * PLAIN.oil_density * PLAIN.gravity))
    assert droplet.radius_from_fall_speed(speed, PLAIN) == pytest.approx(radius, rel=1e-12)
    heavy = 4 / 3 * math.pi * radius**3 * PLAIN.oil_density * PLAIN.gravity
    assert droplet.charge_at_balance(radius, volt, PLAIN) == pytest.approx(
        -heavy * PLAIN.plate_gap / volt, rel=1e-12
    )
    assert droplet.charge_from_speeds(speed, 0.0, volt, PLAIN) == pytest.approx(
        -heavy * PLAIN.plate_gap / volt, rel=1e-11
    )


@given(speed=st.floats(1e-6, 1e-4), factor=st.floats(1.1, 5.0))
def test_speed_times_square_is_radius_times_factor(speed, factor):
    """Without slip the radius grows as the root of the speed."""
    one, many = droplet.radius_from_fall_speed([speed, speed * factor**2], PLAIN)
    assert many == pytest.approx(one * factor, rel=1e-12)


def test_printed_table_of_settling_and_diffusion():
    """Settling speed, mobility and diffusion of spheres of unit density agree with a textbook table.

    Source: W. C. Hinds, Aerosol Technology, 2nd ed. (1999), table A11, from memory: 20 degC, 1 atm, eta 1.81e-5 Pa
    s, free path 66 nm, no buoyancy. Its slip fit differs from Kim et al. by 3.2 % at 0.1 um, 0.5 % at 0.5 um and
    0.15 % above; three printed digits add up to 0.5 %.
    """
    table = np.array([
        [0.1, 8.82e-7, 1.72e11, 6.95e-10],
        [0.5, 9.91e-6, 1.54e10, 6.25e-11],
        [1.0, 3.48e-5, 6.77e9, 2.74e-11],
        [2.0, 1.30e-4, 3.16e9, 1.28e-11],
        [5.0, 7.76e-4, 1.21e9, 4.89e-12],
        [10.0, 3.06e-3, 5.95e8, 2.41e-12],
    ])  # fmt: skip
    air = Conditions(293.15, 1.81e-5, 66e-9, 0.0, 1000.0, 9.81, 1.0)
    radius = table[:, 0] * 0.5e-6
    ours = np.stack(
        [f(radius, air) for f in (droplet.fall_speed, droplet.droplet_mobility, droplet.diffusion)]
    )
    tolerance = np.array([0.033, 0.0065, 0.0055, 0.0055, 0.0055, 0.0055])
    assert np.all(np.abs(ours / table[:, 1:].T - 1) < tolerance)


def test_settling_of_a_large_sphere_in_a_general_library():
    """A 4 um sphere falls as fast as a library of fluid mechanics says, when slip is left out.

    Source: fluids.v_terminal; its drag curve is Stokes' law within 2 % at Reynolds numbers of 1e-3.
    """
    bench = replace(BENCH, mean_free_path=1e-20)
    library = fluids.v_terminal(D=4e-6, rhop=886.0, rho=BENCH.air_density, mu=BENCH.viscosity)
    assert droplet.fall_speed(2e-6, bench) == pytest.approx(library, rel=0.02)


def test_diffusion_of_droplets():
    """Diffusion and fall speed of oil droplets agree with an independent computation to four digits.

    Source: computed apart from this package at 296.15 K with the slip of Kim et al., density excess 898.8 kg/m^3.
    """
    bench = replace(BENCH, oil_density=900.0, air_density=1.2)
    radius = np.array([0.3, 0.5, 0.75, 1.0, 1.5]) * 1e-6
    diffusion = [4.982e-11, 2.739e-11, 1.743e-11, 1.277e-11, 8.304e-12]
    np.testing.assert_allclose(
        droplet.diffusion(radius, bench), diffusion, rtol=4e-4
    )  # half a unit of the fourth digit
    fall = [1.215e-5, 3.093e-5, 6.644e-5, 1.153e-4, 2.532e-4]
    np.testing.assert_allclose(droplet.fall_speed(radius, bench), fall, rtol=6e-4)
    np.testing.assert_allclose(
        droplet.radius_from_diffusion(droplet.diffusion(radius, bench), bench), radius, rtol=1e-12
    )


@given(radius=radii, number=st.integers(-40, 40).filter(bool), volt=volts)
def test_speeds_give_back_radius_and_charge(radius, number, volt):
    """Fall, driven, reversed and balanced speeds of one droplet all give its radius and charge."""
    charge = number * ELEMENTARY_CHARGE
    fall = droplet.fall_speed(radius, BENCH)
    drive = droplet.droplet_mobility(radius, BENCH) * charge * volt / BENCH.plate_gap
    assert droplet.radius_from_fall_speed(fall, BENCH) == pytest.approx(radius, rel=1e-11)
    # The drive may be much smaller than the fall speed: their difference loses digits accordingly.
    loss = 1e-15 * abs(float(fall / drive)) + 1e-11
    assert droplet.charge_from_speeds(fall, fall + drive, volt, BENCH) == pytest.approx(charge, rel=2 * loss)
    both = droplet.two_polarities(fall + drive, fall - drive, volt, BENCH)
    slow = 1e-15 * abs(float(drive / fall)) + 1e-11
    assert both[0] == pytest.approx(radius, rel=2 * slow)
    assert both[1] == pytest.approx(charge, rel=2 * (loss + slow))
    balance = -droplet.weight(radius, BENCH) * BENCH.plate_gap / charge
    assert droplet.charge_at_balance(radius, balance, BENCH) == pytest.approx(charge, rel=1e-12)


@given(radius=radii, drive=st.floats(-1e-3, 1e-3), volt=volts)
def test_reversal_of_plates_or_picture_changes_the_sign(radius, drive, volt):
    """Reversing the plates, or the direction of the drive, turns the sign of the charge and nothing else."""
    charge = droplet.charge_from_drive(drive, volt, radius, BENCH)
    assert droplet.charge_from_drive(-drive, volt, radius, BENCH) == -charge
    assert droplet.charge_from_drive(drive, -volt, radius, BENCH) == -charge


def test_mass_keeps_what_buoyancy_takes_from_weight():
    """Mass is 4/3 pi r^3 rho, and weight is mass times gravity less that of the displaced air."""
    volume = 4 / 3 * math.pi * 1e-18
    assert droplet.mass(1e-6, BENCH) == pytest.approx(volume * 886.0, rel=1e-14)
    assert droplet.weight(1e-6, BENCH) == pytest.approx(volume * (886.0 - 1.1873296) * 9.80665, rel=1e-14)


def test_arrays_keep_their_shape_and_are_not_changed():
    """Functions broadcast over arrays of any shape and leave them as they were."""
    speed = np.array([[1e-5, 2e-5], [3e-5, 4e-5]])
    before = speed.copy()
    radius = droplet.radius_from_fall_speed(speed, BENCH)
    charge = droplet.charge_from_speeds(speed, -speed, [100.0, 200.0], BENCH)
    assert radius.shape == charge.shape == (2, 2)
    np.testing.assert_array_equal(speed, before)
    for index in np.ndindex(2, 2):
        assert radius[index] == pytest.approx(
            float(droplet.radius_from_fall_speed(speed[index], BENCH)), rel=1e-13
        )
    assert droplet.fall_speed(np.array([]), BENCH).shape == (0,)
    assert droplet.radius_from_fall_speed(np.array([]), BENCH).shape == (0,)


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: droplet.radius_from_fall_speed([1e-5, 0.0], BENCH), "fall_speed = 0 m/s at index 1"),
        (lambda: droplet.radius_from_fall_speed(-1e-5, BENCH), "fall_speed"),
        (lambda: droplet.radius_from_fall_speed(math.nan, BENCH), "fall_speed"),
        (lambda: droplet.radius_from_fall_speed(1e-12, BENCH), "Knudsen"),
        (lambda: droplet.radius_from_diffusion(0.0, BENCH), "diffusion"),
        (lambda: droplet.charge_from_drive(1e-4, 0.0, 1e-6, BENCH), "voltage"),
        (lambda: droplet.charge_at_balance(1e-6, math.inf, BENCH), "voltage"),
        (lambda: droplet.two_polarities(-2e-4, 1e-4, 300.0, BENCH), "fall_speed"),
        (lambda: droplet.fall_speed(-1e-6, BENCH), "radius"),
        (lambda: replace(BENCH, oil_density=1.0), "oil_density"),
        (lambda: replace(BENCH, temperature=0.0), "temperature"),
        (lambda: replace(BENCH, plate_gap=math.inf), "plate_gap"),
        (lambda: replace(BENCH, gravity=math.nan), "gravity"),
        (lambda: replace(BENCH, slip="none"), "slip"),
    ],
)
def test_impossible_values_are_errors(call, words):
    """An impossible speed, voltage, radius or bench raises at once and names what was wrong."""
    with pytest.raises(PhysicsError, match=words):
        call()
