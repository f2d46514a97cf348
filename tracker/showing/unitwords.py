"""The charge unit of a recording in words: the number first, then what it rests on."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from physics.droplet import ELEMENTARY_CHARGE
from physics.resolution import LOG_RATIO_NEEDED, MARGIN_NEEDED
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
    return f"charge unit {pair(value, std, 1e19)}e-19 C{parts}, {over_e} e", _grounds(unit)


def _grounds(unit: Mapping[str, Any]) -> str:
    """Say on what a resolved unit rests."""
    log_ratio, margin = unit.get("log_ratio") or 0.0, unit.get("margin") or 0.0
    return (
        f"Found from {unit.get('droplets_used')} charges without assuming a unit (a droplet whose charge changed "
        "counts as its charge and the change). Multiples of this unit explain them better than a smooth spread, by "
        f"{log_ratio:.0f} nats of log likelihood ({LOG_RATIO_NEEDED:.0f} are asked for), and better than multiples of "
        f"any other unit, by {margin:.1f} ({MARGIN_NEEDED:.0f} are asked for). It is the largest unit that fits."
    )
