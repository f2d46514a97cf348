"""Text with a unit and an uncertainty, as a person types it, into a number in the unit that is asked for."""

from __future__ import annotations

import math
import re
from functools import lru_cache
from pathlib import Path
from typing import Any

from calibration.errors import QuantityError

_NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)"
_EXPONENT = r"[eE][+-]?\d+"
_BRACKETED = re.compile(
    rf"(?P<number>{_NUMBER})\s?(?:\((?P<std>\d+\.?\d*|\.\d+)\))?(?P<exponent>{_EXPONENT})?\s*(?P<unit>.*)"
)
_PLUS_MINUS = re.compile(
    rf"(?P<open>\(?)\s*(?P<number>{_NUMBER}(?:{_EXPONENT})?)\s*(?P<own>[^\d()+±]*?)\s*(?:\+/-|\+-|±)"
    rf"\s*(?P<std>{_NUMBER}(?:{_EXPONENT})?)\s*(?P<close>\)?)(?P<exponent>{_EXPONENT})?\s*(?P<unit>.*)"
)
_UNIT = re.compile(r"(?:1\s*/\s*)?(?:[^\W\d_]|[%°])[\w\s%°·*/^()-]*")  # a letter, % or ° first, but for 1/
_EXAMPLE = 'a number, its standard uncertainty and its unit, such as "6.00(2) {0}" or "6.00 +/- 0.02 {0}"'


def parse_quantity(text: str, unit: str) -> tuple[float, float]:
    """Read a quantity as typed and give it in the asked unit.

    Parameters
    ----------
    text : str
        Such as ``"6.00(2) mm"``, ``"6.00 +/- 0.02 mm"``, ``"22.0(3) degC"``, ``"45(5) percent"``. Digits in
        brackets are one standard uncertainty in units of the number's last digit; with a decimal point in
        them they stand for themselves.
    unit : str
        The unit of the answer, such as ``"m"``, ``"K"``, ``"V"``; ``""`` for a plain number.

    Returns
    -------
    value : float
        In `unit`.
    std : float
        One standard uncertainty in `unit`, >= 0; 0 where the text states none. For temperatures it is a
        difference: ``"22.0(3) degC"`` has 0.3 K.

    Raises
    ------
    QuantityError
        If the text is no quantity, has no unit or an unknown one, or a unit of another dimension.

    Notes
    -----
    Short notation of uncertainty in brackets: JCGM 100:2008, 7.2.2.
    """
    number, std, own_unit, std_unit = _split(text, unit)
    value = _convert(text, number, own_unit, unit)
    slope = _slope(text, std_unit, unit) if std else 1.0
    if not (math.isfinite(value) and math.isfinite(std * slope)):
        raise QuantityError(text, "the number is too large")
    return value, std * slope


def states_uncertainty(text: str) -> bool:
    """Tell whether a quantity states an uncertainty; ``"0.1(0) mm"`` does, ``"0.1 mm"`` does not.

    Parameters
    ----------
    text : str
        As for `parse_quantity`.

    Returns
    -------
    stated : bool
        Whether brackets or a plus-minus sign stand in it.
    """
    match = _PLUS_MINUS.fullmatch(text.strip())
    if match:
        return True
    match = _BRACKETED.fullmatch(text.strip())
    return bool(match and match["std"] is not None)


def _split(text: str, unit: str) -> tuple[float, float, str, str]:
    """Give number, uncertainty, the number's unit and the uncertainty's unit."""
    if not isinstance(text, str):
        raise QuantityError(str(text), f"a quantity is a text in quotes; allowed is {_EXAMPLE.format(unit)}")
    match = _PLUS_MINUS.fullmatch(text.strip())
    if match and bool(match["open"]) == bool(match["close"]) and (match["open"] or not match["exponent"]):
        factor = float("1" + (match["exponent"] or ""))
        std = float(match["std"]) * factor
        if std < 0:
            raise QuantityError(text, "the uncertainty after the plus-minus sign is negative")
        return float(match["number"]) * factor, std, match["own"] or match["unit"], match["unit"]
    match = _BRACKETED.fullmatch(text.strip())
    if match is None:
        raise QuantityError(text, f"not a quantity; allowed is {_EXAMPLE.format(unit)}")
    power = match["exponent"] or ""
    std_text = match["std"] or "0"
    if "." not in std_text:
        decimals = len(match["number"].partition(".")[2])
        std_text = f"{std_text}e{-decimals}"
    std = float(std_text) * float(f"1{power}")
    return float(match["number"] + power), std, match["unit"], match["unit"]


@lru_cache(maxsize=1)
def _registry() -> Any:
    """Give pint's registry, made when the first quantity is read, with the units of a bench file only."""
    import pint

    return pint.UnitRegistry(Path(__file__).with_name("units.txt"), autoconvert_offset_to_baseunit=True)


@lru_cache(maxsize=256)
def _unit(name: str) -> Any:
    """Give pint's unit, or None where pint knows no such unit."""
    from tokenize import TokenError

    import pint

    try:
        return _registry().parse_units(name.replace("·", "*"))
    except (pint.PintError, TokenError, SyntaxError, ValueError, TypeError, AttributeError, KeyError):
        return None


def _checked(text: str, given: str, asked: str) -> Any:
    """Give the unit that was read, after comparing its dimension with the asked one."""
    target = _unit(asked)
    if target is None:
        raise QuantityError(asked, "no such unit to convert to")
    if not given and asked:
        raise QuantityError(text, f"the unit is missing; allowed is a unit such as {asked}")
    read = _unit(given) if not given or _UNIT.fullmatch(given) else None
    if read is None:
        raise QuantityError(text, f"unknown unit {given!r}; allowed is a unit such as {asked or 'percent'}")
    # pint takes an angle for a plain number, so an angle where none is asked for must be caught by name.
    if read.dimensionality != target.dimensionality or (given and _is_angle(read) != _is_angle(target)):
        raise QuantityError(
            text, f"{given!r} has the wrong dimension; allowed is a unit such as {asked or 'percent'}"
        )
    return read


def _is_angle(unit: Any) -> bool:
    """Tell whether a unit is an angle, which has no dimension in the SI."""
    return bool(unit.dimensionless) and any(
        word in str(unit) for word in ("degree", "radian", "arc", "turn", "grad", "revolution")
    )


def _convert(text: str, number: float, given: str, asked: str) -> float:
    """Convert a number between units, offsets of temperature scales included."""
    read = _checked(text, given, asked)
    return float(_registry().Quantity(number, read).to(_unit(asked)).magnitude)


def _slope(text: str, given: str, asked: str) -> float:
    """Asked units per given unit for a difference, so that the zero of a temperature scale plays no part."""
    read, target = _checked(text, given, asked), _unit(asked)
    quantity = _registry().Quantity
    zero = float(quantity(0.0, read).to(target).magnitude)
    one = float(quantity(1.0, read).to(target).magnitude)
    return one if zero == 0 else round(one - zero, 12)
