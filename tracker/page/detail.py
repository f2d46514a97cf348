"""What is drawn of one droplet: height and fitted speeds, residuals in their deviations, charge numbers.

Heights and speeds are those of the tables. The whitened residuals and the distribution over charge numbers are
not kept in files: they are taken from the same analysis that a new evaluation would rest on.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from physics.droplet import ELEMENTARY_CHARGE
from tracker.evaluate import analyse_result
from tracker.motion.analysis import Analysis
from tracker.motion.charges import Number
from tracker.motion.droplet import Droplet
from tracker.page.errors import RefusedError
from tracker.page.results import Opened, field_segments
from tracker.records import FloatArray
from tracker.showing.plots import track_path
from tracker.showing.terminal import pair, probability

MOST_NUMBERS = 41  # bars of the plot


def droplet_detail(opened: Opened, droplet: int) -> dict[str, Any]:
    """Give what the tables say of one droplet over time.

    Parameters
    ----------
    opened : Opened
        The result.
    droplet : int
        Its number.

    Returns
    -------
    detail : dict
        Heights in um over times in s, whether each was used, the fitted speed of each segment as a line, changes,
        and a sentence that says the same.

    Raises
    ------
    RefusedError
        404 if there is no such droplet.
    """
    _row(opened, droplet)
    path = track_path(opened.result, droplet)
    fits = _lines(opened, droplet, path)
    table = opened.result.changes[opened.result.changes["droplet"] == droplet]
    changes = [{"kind": str(kind), "time": float(time) if np.isfinite(time) else None}
               for kind, time in zip(table["kind"], table["time_s"].to_numpy(float), strict=True)]  # fmt: skip
    return {
        "droplet": droplet, "time": path["time"].tolist(), "height": np.round(path["height"] * 1e6, 3).tolist(),
        "used": path["used"].astype(int).tolist(), "fits": fits,
        "segments": field_segments(opened.recording),
        "changes": changes,
        "text": " ".join(filter(None, (_motion_text(path, fits), _changes_text(changes)))),
    }  # fmt: skip


def droplet_fits(opened: Opened, droplet: int) -> dict[str, Any]:
    """Give the residuals of one droplet and how probable each of its charge numbers is.

    Parameters
    ----------
    opened : Opened
        The result; its droplets share air and bench, so that all are fitted together, once for each state.
    droplet : int
        Its number.

    Returns
    -------
    fits : dict
        Whitened `residual` at `residual_time` in s; `numbers`: charge numbers `n`, probabilities `p`, charge and
        own uncertainty over e, or None; sentences that say the same.

    Raises
    ------
    RefusedError
        404 if there is no such droplet.
    FallriseError
        If the bench file is gone or wrong by now.
    """
    row = _row(opened, droplet)
    analysis = _analysis(opened)
    at = next((i for i, d in enumerate(analysis.droplets) if d.path.droplet == droplet), None)
    residual_time, residual = _residuals(None if at is None else analysis.droplets[at])
    number = Number() if at is None else analysis.numbers[at]
    numbers = _numbers(number, float(row["charge_c"]), float(row["charge_own_std_c"]))
    return {
        "droplet": droplet, "residual_time": residual_time.tolist(), "residual": np.round(residual, 3).tolist(),
        "numbers": numbers, "residual_text": _residual_text(residual), "number_text": _number_text(numbers),
    }  # fmt: skip


def _analysis(opened: Opened) -> Analysis:
    """Fits behind a result, worked out once for each state of it and kept for the next evaluation."""
    with opened.keeper.lock:
        if opened.analysis is None:
            opened.analysis = analyse_result(opened.result, opened.keeper.memo)
        return opened.analysis


def _row(opened: Opened, droplet: int) -> Any:
    """Row of the droplet table; refuses with 404."""
    table = opened.result.droplets
    rows = table[table["droplet"] == droplet]
    if rows.empty:
        raise RefusedError(404, f"there is no droplet {droplet} in this result")
    return rows.iloc[0]


def _lines(opened: Opened, droplet: int, path: dict[str, Any]) -> list[dict[str, float]]:
    """The fitted speed of each segment as a line through the mean place of what was used there."""
    table = opened.result.segments
    lines = []
    for row in table[table["droplet"] == droplet].itertuples():
        here = (path["time"] >= row.start_s) & (path["time"] < row.end_s) & path["used"]
        if not here.any() or not np.isfinite(row.down_speed_m_s):
            continue
        time, height = path["time"][here], path["height"][here]
        start, end = float(time[0]), float(time[-1])
        rise = [(height.mean() - row.down_speed_m_s * (t - time.mean())) * 1e6 for t in (start, end)]
        lines.append({
            "start": start, "end": end, "from": float(rise[0]), "to": float(rise[1]),
            "speed": float(row.down_speed_m_s) * 1e6, "std": float(row.down_speed_std_m_s) * 1e6,
            "voltage": float(row.voltage_v),
        })  # fmt: skip
    return lines


def _numbers(number: Number, charge: float, own_std: float) -> dict[str, Any] | None:
    """Numbers around the most probable one, at least those that hold 99.9 %."""
    if number.values is None or number.shares is None or not np.isfinite(charge):
        return None
    values, shares = number.values, number.shares
    there = np.flatnonzero(shares > 1e-3)
    best = int(np.argmax(shares))
    low, high = (int(there[0]), int(there[-1])) if len(there) else (best, best)
    low, high = max(0, min(low, best - 3)), min(len(values) - 1, max(high, best + 3))
    if high - low >= MOST_NUMBERS:
        low, high = max(0, best - MOST_NUMBERS // 2), min(len(values) - 1, best + MOST_NUMBERS // 2)
    return {
        "n": values[low : high + 1].tolist(), "p": np.round(shares[low : high + 1], 6).tolist(),
        "charge": charge / ELEMENTARY_CHARGE, "std": own_std / ELEMENTARY_CHARGE,
    }  # fmt: skip


def _residuals(droplet: Droplet | None) -> tuple[FloatArray, FloatArray]:
    """Whitened steps along gravity, each at the middle of its time; standard normal if the model holds."""
    if droplet is None or droplet.history is None:
        return np.empty(0), np.empty(0)
    path, history = droplet.path, droplet.history
    first = path.steps.first[history.kept]
    middle = 0.5 * (path.times[first] + path.times[first + 1])
    return np.asarray(middle), np.asarray(history.fit.down_residuals)


def _motion_text(path: dict[str, Any], fits: list[dict[str, float]]) -> str:
    """Say what the plot of heights shows."""
    left_out = int((~path["used"]).sum())
    said = f"{left_out} left out (crosses)" if left_out else "none left out"
    parts = [f"{len(path['time'])} places, {said}."]
    speeds: dict[float, list[float]] = {}
    for fit in fits:
        speeds.setdefault(round(fit["voltage"]), []).append(fit["speed"])
    for voltage, values in sorted(speeds.items()):
        mean = float(np.mean(values))
        way = "down" if mean >= 0 else "up"
        how = f"{len(values)} segments" if len(values) > 1 else "one segment"
        parts.append(f"At {_volts(voltage)}: {abs(mean):.1f} \u00b5m/s {way} ({how}).")
    return " ".join(parts)


def _changes_text(changes: list[dict[str, Any]]) -> str:
    """Say what the dashed lines stand for."""
    kinds: dict[str, list[str]] = {}
    for change in changes:
        if change["time"] is not None:
            kinds.setdefault(change["kind"].replace("_", " "), []).append(f"{change['time']:.1f}")
    told = "; ".join(f"{kind} at {', '.join(times)} s" for kind, times in kinds.items())
    return f"Dashed lines: {told}." if told else ""


def _volts(voltage: float) -> str:
    """A voltage with its sign, 0 without one."""
    return f"{voltage:+.0f} V".replace("-", "\u2212") if voltage else "0 V"


def _residual_text(residual: FloatArray) -> str:
    """Say what the plot of residuals shows."""
    if not len(residual):
        return "No residuals: too few steps for a fit."
    rms, share = float(np.sqrt(np.mean(residual**2))), float(np.mean(np.abs(residual) < 1))
    return (
        f"Residuals of the steps: rms {rms:.2f} \u03c3, {100 * share:.0f} % within 1 \u03c3 (68 % expected)."
    )


def _number_text(numbers: dict[str, Any] | None) -> str:
    """Say what the plot of charge numbers shows."""
    if numbers is None:
        return "This droplet has no charge, so no charge number; its reasons say why."
    best = int(np.argmax(numbers["p"]))
    charge = pair(numbers["charge"], numbers["std"], 1.0).replace("-", "\u2212")
    number = f"{numbers['n'][best]:+d}".replace("-", "\u2212")
    return (
        f"Measured {charge} e, own uncertainty (dot and bar). Most probable number {number}, "
        f"probability {probability(numbers['p'][best])} with all that is shared."
    )
