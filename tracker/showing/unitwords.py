"""The charge unit of a recording in words: the number first, then what it rests on."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from physics.droplet import ELEMENTARY_CHARGE
from tracker.showing.terminal import pair


def charge_unit_lines(unit: Mapping[str, Any] | None) -> tuple[str, ...]:
    """Say what charge unit a recording shows, or why none.

    Parameters
    ----------
    unit : mapping or None
        ``charge_unit`` of ``recording.json``.

    Returns
    -------
    lines : tuple of str
        The value with its standard uncertainty in brackets, its own and shared part and its ratio to e; then a
        sentence. Only the reason if the unit is not resolved; empty if none was looked for.
    """
    if not unit or not unit.get("reason"):
        return ()
    value, std = unit.get("charge_unit_c"), unit.get("charge_unit_std_c")
    if not unit.get("resolved") or not value or not std:
        return (f"charge unit: {unit['reason']}",)
    own, shared = unit.get("charge_unit_own_std_c"), unit.get("charge_unit_shared_std_c")
    parts = "" if own is None or shared is None else f" (own {own * 1e19:#.2g}, shared {shared * 1e19:#.2g})"
    over_e = pair(value, std, 1 / ELEMENTARY_CHARGE)
    used = (
        "No unit was assumed; a droplet whose charge changed counts twice, as its charge and as the change."
    )
    return (
        f"charge unit {pair(value, std, 1e19)}e-19 C{parts}, {over_e} e",
        f"{sentence(unit['reason'])} {used}",
    )


def sentence(text: str) -> str:
    """Make a sentence of a reason: a capital first, one full stop last.

    Parameters
    ----------
    text : str
        Such as the reason of a charge unit.

    Returns
    -------
    sentence : str
    """
    return f"{text[:1].upper()}{text[1:].rstrip('. ')}."
