"""The charge unit in words."""

from __future__ import annotations

import pytest

from tracker.showing.terminal import count, pair, probability
from tracker.showing.unitwords import charge_unit_lines

UNIT = {
    "charge_unit_c": 1.595e-19, "charge_unit_std_c": 1.5e-21, "charge_unit_own_std_c": 1.0e-21,
    "charge_unit_shared_std_c": 1.1e-21, "resolved": True, "reason": "it is the largest unit that fits",
    "droplets_used": 32,
}  # fmt: skip


def test_number_with_its_uncertainty_comes_first():
    """The first line holds unit, both parts of the uncertainty and the ratio to e: 1.595 / 1.602177 = 0.99552."""
    first, second = charge_unit_lines(UNIT)
    assert first == "charge unit 1.595(15)e-19 C (own 0.010, shared 0.011), 0.9955(94) e"
    assert second.startswith("It is the largest unit that fits. No unit was assumed; ")


def test_unit_that_is_not_resolved_gives_its_reason_only():
    """Without a resolved unit no number is shown that could be taken for one."""
    assert charge_unit_lines({**UNIT, "resolved": False, "reason": "not resolved from 9 charges"}) == (
        "charge unit: not resolved from 9 charges",
    )
    assert charge_unit_lines(None) == ()


@pytest.mark.parametrize(
    ("value", "std", "text"),
    [
        (1.0, 0.0099, "1.0000(99)"), (1.0, 0.00996, "1.000(10)"), (1.0, 0.0101, "1.000(10)"),
        (100.02147, 0.00035, "100.02147(35)"), (886.0, 12.0, "886(12)"), (2.0, 0.0, "2"),
    ],
)  # fmt: skip
def test_brackets_hold_two_digits(value, std, text):
    """Brackets hold the standard uncertainty in units of the last digit (GUM, 7.2.2), two digits of it."""
    assert pair(value, std, 1.0) == text


def test_no_probability_is_written_as_a_certainty():
    """What three decimals would round to 1 is told to lie above 0.999; an empty cell stays empty."""
    assert [probability(p) for p in (0.9531, 0.9994, 0.99951, 1.0, float("nan"))] == [
        "0.953", "0.999", "> 0.999", "> 0.999", "",
    ]  # fmt: skip


def test_one_thing_is_counted_in_the_singular():
    """Only one takes no s."""
    assert [count(n, "droplet") for n in (0, 1, 2)] == ["0 droplets", "1 droplet", "2 droplets"]
