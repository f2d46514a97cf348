"""What is drawn of one droplet: height and fitted speeds, residuals in their deviations, charge numbers.

Heights and speeds are those of the tables. The whitened residuals and the distribution over charge numbers are
not kept in files; they are worked out again from the tracks that the tables used, with the same functions.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from physics.droplet import ELEMENTARY_CHARGE, Conditions
from physics.errors import PhysicsError
from physics.motion import MIN_INCREMENTS, DropletPosterior, droplet_posterior
from physics.quanta import ChargeNumbers, number_probabilities
from tracker.motion.changes import History, find_changes
from tracker.motion.velocity import Orientation, Path, paths, without_outliers
from tracker.page.errors import RefusedError
from tracker.page.results import Opened
from tracker.provenance import field_from_json, recording_from_json, stored_scale
from tracker.records import FloatArray, Sightings, Tracks
from tracker.showing.plots import track_path

MOST_RELATIVE = 0.24  # shared uncertainty up to which charge numbers are looked for
MOST_NUMBERS = 41  # bars of the plot


@dataclass(slots=True)
class Analysis:
    """Fits of one state of a result, each found when it is first looked at."""

    paths: dict[int, Path]
    conditions: Conditions
    histories: dict[int, tuple[Path, History] | None] = field(default_factory=dict)
    numbers: dict[int, tuple[list[int], list[float]]] | None = (
        None  # droplet -> charge numbers, probabilities
    )

    def history(self, droplet: int) -> tuple[Path, History] | None:
        """Fit of one droplet; None where there are too few steps."""
        if droplet not in self.histories:
            path = self.paths.get(droplet)
            self.histories[droplet] = None if path is None else _history(path, self.conditions)
        return self.histories[droplet]


def droplet_detail(opened: Opened, droplet: int) -> dict[str, Any]:
    """Give what is drawn of one droplet.

    Parameters
    ----------
    opened : Opened
        The result.
    droplet : int
        Its number.

    Returns
    -------
    detail : dict
        Heights in um over times in s, whether each was used, the fitted speed of each segment as a line, whitened
        residuals, changes, and a sentence that says the same.

    Raises
    ------
    RefusedError
        404 if there is no such droplet.
    """
    _row(opened, droplet)
    path = track_path(opened.result, droplet)
    fits = _lines(opened, droplet, path)
    with opened.working:
        residual_time, residual = _residuals(_analysis(opened).history(droplet))
    changes = opened.result.changes[opened.result.changes["droplet"] == droplet]
    return {
        "droplet": droplet, "time": path["time"].tolist(), "height": np.round(path["height"] * 1e6, 3).tolist(),
        "used": path["used"].astype(int).tolist(), "fits": fits, "residual_time": residual_time.tolist(),
        "residual": np.round(residual, 3).tolist(),
        "segments": [{"start": s["start_s"], "end": s["end_s"], "voltage": s["voltage_v"]}
                     for s in opened.recording["field"]["segments"]],
        "changes": [{"kind": str(kind), "time": float(time) if np.isfinite(time) else None}
                    for kind, time in zip(changes["kind"], changes["time_s"].to_numpy(float), strict=True)],
        "motion_text": _motion_text(path, fits, residual),
    }  # fmt: skip


def droplet_numbers(opened: Opened, droplet: int) -> dict[str, Any]:
    """Give how probable each charge number of one droplet is.

    Parameters
    ----------
    opened : Opened
        The result; its droplets share the uncertainty of the bench, so that all are fitted together, once.
    droplet : int
        Its number.

    Returns
    -------
    numbers : dict
        ``numbers``: charge numbers `n`, probabilities `p`, charge and own uncertainty over e, or None; ``text``.

    Raises
    ------
    RefusedError
        404 if there is no such droplet.
    """
    row = _row(opened, droplet)
    with opened.working:
        analysis = _analysis(opened)
        if analysis.numbers is None:
            analysis.numbers = _all_numbers(opened, analysis)
        bars = analysis.numbers.get(droplet)
    numbers = _numbers(bars, row["charge_c"], row["charge_own_std_c"])
    return {"droplet": droplet, "numbers": numbers, "text": _number_text(numbers)}


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


def _analysis(opened: Opened) -> Analysis:
    """Fits of a result, begun once for each state of it; the caller holds `working`."""
    if opened.analysis is None:
        opened.analysis = _begin(opened)
    analysis: Analysis = opened.analysis
    return analysis


def _begin(opened: Opened) -> Analysis:
    """Bring the sightings that the tables used into metres along and across gravity."""
    stored, table = opened.recording, opened.result.tracks
    stated = stored["orientation"]
    tracks, used = _used_tracks(table)
    found = paths(
        tracks, recording_from_json(stored, opened.folder), field=field_from_json(stored["field"]),
        scale=stored_scale(stored), exposure=float(stored["exposure"]),
        orientation=Orientation(stated["down_deg"], stated["down_deg_std"], stated["origin"]),
        cuts=stored["seeing"].get("cuts", ()), left_out=~used,
    )  # fmt: skip
    return Analysis({path.droplet: path for path in found}, conditions_of(stored))


def _used_tracks(table: Any) -> tuple[Tracks, NDArray[np.bool_]]:
    """Tracks as the table has them, after a person's splits and joins, numbered without gaps where they are."""
    names = {"frame": "frame", "x": "x_px", "y": "y_px", "x_std": "x_std_px", "y_std": "y_std_px",
             "brightness": "brightness", "width": "width_px", "flags": "flags"}  # fmt: skip
    sightings = Sightings(**{name: table[column].to_numpy() for name, column in names.items()})
    return Tracks(table["droplet"].to_numpy(np.int64), sightings), table["used"].to_numpy(np.int64) == 1


def _history(path: Path, conditions: Conditions) -> tuple[Path, History] | None:
    """Fit one droplet; None where there are too few steps."""
    if len(path) < 2 or len(path.steps()) < MIN_INCREMENTS:
        return None
    path, _, _ = without_outliers(path)
    if len(path.steps()) < MIN_INCREMENTS:
        return None
    return path, find_changes(path.steps(), np.asarray(path.times), conditions)


def conditions_of(stored: dict[str, Any]) -> Conditions:
    """Give the conditions of the bench as recording.json holds them.

    Parameters
    ----------
    stored : dict
        What recording.json holds.

    Returns
    -------
    conditions : Conditions
    """
    names = (
        "temperature",
        "viscosity",
        "mean_free_path",
        "air_density",
        "oil_density",
        "gravity",
        "plate_gap",
    )
    bench = stored["bench"]
    return Conditions(**{name: float(bench[name]["value"]) for name in names}, slip=str(bench["slip"]))


def _all_numbers(opened: Opened, analysis: Analysis) -> dict[int, tuple[list[int], list[float]]]:
    """Charge numbers of all droplets together: they share the uncertainty of the bench."""
    rows = opened.result.droplets.set_index("droplet")
    air = opened.recording["air_current"]
    good, posteriors = [], []
    for droplet in analysis.paths:
        found = analysis.history(droplet)
        charge, own = (float(rows[name].get(droplet, np.nan)) for name in ("charge_c", "charge_own_std_c"))
        if found is not None and np.isfinite(charge) and own > 0:
            good.append(droplet)
            posteriors.append(droplet_posterior(found[1].steps, analysis.conditions, air_speed=air["down_m_s"],
                                                air_speed_std=air["down_std_m_s"]))  # fmt: skip
    if not good:
        return {}
    charges, own_stds, shared = (
        rows[name].loc[good].to_numpy(float)
        for name in ("charge_c", "charge_own_std_c", "charge_shared_std_c")
    )
    relative = np.minimum(shared / np.maximum(np.abs(charges), own_stds), MOST_RELATIVE)
    numbers = _probabilities(charges, own_stds, relative, posteriors)
    return {} if numbers is None else {d: _bars(numbers, i) for i, d in enumerate(good)}


def _probabilities(
    charges: FloatArray, own_stds: FloatArray, relative: FloatArray, posteriors: list[DropletPosterior]
) -> ChargeNumbers | None:
    shapes = [p.charge_log_density if p.main_part >= 0 else None for p in posteriors]
    try:
        return number_probabilities(charges, own_stds, shared_rel_std=relative, log_likelihoods=shapes)
    except PhysicsError:
        return None


def _bars(found: ChargeNumbers, row: int) -> tuple[list[int], list[float]]:
    """Numbers around the most probable one, at least those that hold 99.9 %."""
    values, shares = found.number_values[row], found.number_probability[row]
    there = np.flatnonzero(shares > 1e-3)
    best = int(np.argmax(shares))
    low, high = (int(there[0]), int(there[-1])) if len(there) else (best, best)
    low, high = max(0, min(low, best - 3)), min(len(values) - 1, max(high, best + 3))
    if high - low >= MOST_NUMBERS:
        low, high = max(0, best - MOST_NUMBERS // 2), min(len(values) - 1, best + MOST_NUMBERS // 2)
    return values[low : high + 1].tolist(), np.round(shares[low : high + 1], 6).tolist()


def _numbers(
    bars: tuple[list[int], list[float]] | None, charge: float, own_std: float
) -> dict[str, Any] | None:
    if bars is None or not np.isfinite(charge):
        return None
    return {"n": bars[0], "p": bars[1], "charge": float(charge) / ELEMENTARY_CHARGE,
            "std": float(own_std) / ELEMENTARY_CHARGE}  # fmt: skip


def _residuals(found: tuple[Path, History] | None) -> tuple[FloatArray, FloatArray]:
    """Whitened steps along gravity, each at the middle of its time; standard normal if the model holds."""
    if found is None:
        return np.empty(0), np.empty(0)
    path, history = found
    first = path.steps().first[history.kept]
    middle = 0.5 * (path.times[first] + path.times[first + 1])
    return np.asarray(middle), np.asarray(history.fit.down_residuals)


def _motion_text(path: dict[str, Any], fits: list[dict[str, float]], residual: FloatArray) -> str:
    """Say what the motion plot shows."""
    left_out = int((~path["used"]).sum())
    parts = [f"{len(path['time'])} places, {left_out} left out (crosses)."]
    speeds: dict[float, list[float]] = {}
    for fit in fits:
        speeds.setdefault(round(fit["voltage"]), []).append(fit["speed"])
    for voltage, values in sorted(speeds.items()):
        mean = float(np.mean(values))
        way = "down" if mean >= 0 else "up"
        parts.append(f"At {voltage:.0f} V: {abs(mean):.1f} \u00b5m/s {way} ({len(values)} \u00d7).")
    if len(residual):
        rms, share = float(np.sqrt(np.mean(residual**2))), float(np.mean(np.abs(residual) < 1))
        parts.append(
            f"Residuals of the steps: rms {rms:.2f} \u03c3, {share:.0%} within 1 \u03c3 (68 % expected)."
        )
    return " ".join(parts)


def _number_text(numbers: dict[str, Any] | None) -> str:
    """Say what the plot of charge numbers shows."""
    if numbers is None:
        return "This droplet has no charge, so no charge number; its reasons say why."
    best = int(np.argmax(numbers["p"]))
    return (
        f"Measured {numbers['charge']:+.2f}({numbers['std']:.2f}) e, own uncertainty (dot and bar). "
        f"Most probable number {numbers['n'][best]:+d}, probability {numbers['p'][best]:.3f} with all that is shared."
    )
