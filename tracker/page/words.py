"""Sentences of the page that are made from numbers."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from physics.droplet import ELEMENTARY_CHARGE
from tracker.showing.terminal import pair


def unit_words(unit: Mapping[str, Any] | None, *, short: bool = False) -> str:
    """Say what charge unit a recording shows, or why none.

    Parameters
    ----------
    unit : mapping or None
        ``charge_unit`` of recording.json.
    short : bool
        Only the value; empty if none is resolved.

    Returns
    -------
    text : str
    """
    if not unit:
        return "" if short else "No charge unit was looked for."
    value, std = unit.get("charge_unit_c"), unit.get("charge_unit_std_c")
    if unit.get("resolved") and value:
        text = f"charge unit {pair(value, std, 1e19)} \u00d7 10\u207b\u00b9\u2079 C"
        if short:
            return text
        used = unit.get("droplets_used")
        over_e = f"{pair(value, std, 1 / ELEMENTARY_CHARGE)} e"
        parts = _parts(unit.get("charge_unit_own_std_c"), unit.get("charge_unit_shared_std_c"))
        return f"{text[0].upper()}{text[1:]}{parts}, {over_e}, from {used} charges. No quantum was assumed."
    reason = str(unit.get("reason") or "not resolved").rstrip(". ")
    return "" if short else f"Charge unit {reason}. Charges are shown over e."


def _parts(own: float | None, shared: float | None) -> str:
    """Say what of a charge's standard uncertainty is its own and what all droplets of the bench share."""
    if own is None or shared is None:
        return ""
    return f" (own {own * 1e19:#.2g}, shared {shared * 1e19:#.2g})"
