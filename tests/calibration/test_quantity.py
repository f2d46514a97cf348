"""Quantities as a person types them."""

from __future__ import annotations

import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from calibration.errors import QuantityError
from calibration.quantity import parse_quantity, states_uncertainty


@pytest.mark.parametrize(
    ("text", "unit", "value", "std"),
    [
        ("6.00(2) mm", "m", 6.00e-3, 0.02e-3),
        ("6.00 +/- 0.02 mm", "m", 6.00e-3, 0.02e-3),
        ("6.00 ± 0.02 mm", "m", 6.00e-3, 0.02e-3),
        ("(6.00 +/- 0.02)e-3 m", "m", 6.00e-3, 0.02e-3),
        ("6.00(2)e-3 m", "m", 6.00e-3, 0.02e-3),
        ("6.00 mm +/- 20 um", "m", 6.00e-3, 0.02e-3),
        ("6.00(12) mm", "m", 6.00e-3, 0.12e-3),
        ("1.2(1.5) mm", "m", 1.2e-3, 1.5e-3),
        ("45(5) percent", "", 0.45, 0.05),
        ("0.45", "", 0.45, 0.0),
        ("7e-4 1/K", "1/K", 7e-4, 0.0),
        ("1.5 deg", "deg", 1.5, 0.0),
        ("-3.2(1) V", "V", -3.2, 0.1),
        ("0.1(0) mm", "m", 1e-4, 0.0),
        ("886(1) kg/m^3", "kg/m^3", 886.0, 1.0),
        ("1008(1) hPa", "Pa", 100800.0, 100.0),
        ("1.83e-5 Pa s", "Pa s", 1.83e-5, 0.0),
        ("9.8100(2) m/s^2", "m/s^2", 9.81, 2e-4),
        ("2.980(5) µm", "m", 2.98e-6, 5e-9),
    ],
)
def test_value_and_uncertainty_come_out_in_the_asked_unit(text, unit, value, std):
    """Brackets count the last digit, plus-minus counts whole, and both turn into the asked unit.

    Source of the notation: JCGM 100:2008, 7.2.2.
    """
    found = parse_quantity(text, unit)
    # Powers of ten are not exact in binary; a few units in the last place.
    assert found[0] == pytest.approx(value, rel=1e-14)
    assert found[1] == pytest.approx(std, rel=1e-12, abs=1e-300)


@pytest.mark.parametrize(
    ("text", "kelvin", "std"),
    [
        ("22.0(3) degC", 295.15, 0.3),
        ("72(9) degF", 295.372222222, 5.0),
        ("295.0(2) K", 295.0, 0.2),
        ("0(1) degC", 273.15, 1),
    ],
)
def test_uncertainty_of_a_temperature_is_a_difference(text, kelvin, std):
    """The zero of a temperature scale moves the value and leaves the uncertainty; 0 degC is 273.15 K (ITS-90)."""
    value, found = parse_quantity(text, "K")
    assert value == pytest.approx(kelvin, rel=1e-11)  # published to that many digits here
    assert found == pytest.approx(std, rel=1e-9)  # the slope comes from a difference of two conversions


@pytest.mark.parametrize(
    ("text", "unit", "told"),
    [
        ("6.00", "m", "unit is missing"),
        ("6.00 V", "m", "wrong dimension"),
        ("6 foo", "m", "unknown unit 'foo'"),
        ("abc", "m", "not a quantity"),
        ("", "m", "not a quantity"),
        ("45 deg", "", "wrong dimension"),
        ("1.5", "deg", "unit is missing"),
        ("6 +/- -1 mm", "m", "negative"),
        ("1e999 m", "m", "too large"),
        ("5 12 mm", "m", "unknown unit"),
        ("6,00 mm", "m", "unknown unit"),
        ("5 mm)", "m", "unknown unit"),
    ],
)
def test_what_is_no_quantity_is_told_with_what_was_read(text, unit, told):
    """The one-line message names what was read, what is wrong and what is allowed."""
    with pytest.raises(QuantityError) as caught:
        parse_quantity(text, unit)
    message = str(caught.value)
    assert repr(text) in message
    assert told in message
    assert "\n" not in message
    assert str(pickle.loads(pickle.dumps(caught.value))) == message
    assert caught.value.exit_status == 2


def test_a_bare_number_is_no_quantity():
    """A number from a TOML file, without quotes, is refused: its unit is not known."""
    with pytest.raises(QuantityError, match="quotes"):
        parse_quantity(6.0, "m")  # type: ignore[arg-type]


@given(
    value=st.integers(-999_999, 999_999),
    decimals=st.integers(0, 5),
    std=st.integers(0, 99),
    prefix=st.sampled_from([("", 1.0), ("m", 1e-3), ("u", 1e-6), ("k", 1e3)]),
)
def test_brackets_say_the_same_as_plus_minus(value, decimals, std, prefix):
    """`1.23(4)` and `1.23 +/- 0.04` are one quantity, for all digits, signs and prefixes."""
    number, spread = f"{value / 10**decimals:.{decimals}f}", f"{std / 10**decimals:.{decimals}f}"
    brackets = parse_quantity(f"{number}({std}) {prefix[0]}V", "V")
    plus_minus = parse_quantity(f"{number} +/- {spread} {prefix[0]}V", "V")
    assert brackets == pytest.approx(plus_minus, rel=1e-12, abs=1e-18)
    assert brackets[0] == pytest.approx(value / 10**decimals * prefix[1], rel=1e-12)
    assert brackets[1] == pytest.approx(std / 10**decimals * prefix[1], rel=1e-12)


def test_a_stated_zero_is_an_uncertainty_and_none_is_not():
    """`0.1(0) mm` states an uncertainty of nought; `0.1 mm` states none."""
    assert states_uncertainty("0.1(0) mm")
    assert states_uncertainty("0.1 +/- 0.0 mm")
    assert not states_uncertainty("0.1 mm")
    assert not states_uncertainty("nonsense")
