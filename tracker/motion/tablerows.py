"""From droplets to the rows of the tables."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from physics.motion import segment_occupancy, segment_speeds
from tracker.motion.aircurrent import AirCurrent, robust_mean
from tracker.motion.charges import Number, SharedStds
from tracker.motion.droplet import Droplet
from tracker.motion.judge import Balance
from tracker.motion.rows import NAN, ChangeRow, DropletRow, SegmentRow
from tracker.motion.verdict import ordered
from tracker.records import Field

SWAP_REACH = 1e-4  # m between two tracks that may have been swapped
SWAP_TIME = 0.5  # s beyond their uncertainties


def measured_row(
    row: DropletRow, droplet: Droplet, air: AirCurrent, shared: SharedStds, number: Number
) -> DropletRow:
    """Give the row of one droplet its values; empty where one could not be had.

    Parameters
    ----------
    row : DropletRow
        With the reasons of the verdict.
    droplet : Droplet
        With all that is known of it.
    air : AirCurrent
        Taken off the fall speed.
    shared : SharedStds
        Parts of its uncertainties that all droplets share.
    number : Number
        Charge number.

    Returns
    -------
    row : DropletRow
        With values.
    """
    p = droplet.posterior
    if p is None or droplet.history is None:
        return row
    if not np.isfinite(p.radius):
        fit = droplet.history.fit
        speed, own = fit.fall_speed - air.down, float(np.hypot(fit.fall_speed_std, air.down_std))
        std = float(np.hypot(own, speed * shared.log_speed))
        return replace(row, fall_speed_m_s=speed, fall_speed_std_m_s=std)
    row = replace(
        row, fall_speed_m_s=p.fall_speed, radius_m=p.radius,
        fall_speed_std_m_s=float(np.hypot(p.fall_speed_std, p.fall_speed * shared.log_speed)),
        radius_std_m=float(np.hypot(p.radius_std, p.radius * shared.log_radius)),
        mass_kg=p.mass, diffusion_ratio=p.diffusion_ratio,
    )  # fmt: skip
    charge, own = droplet.charge
    if not np.isfinite(charge) or "one_voltage" in row.reasons:
        return row
    return replace(
        row, charge_c=charge, charge_std_c=float(np.hypot(own, shared.charge)), charge_own_std_c=own,
        charge_shared_std_c=shared.charge, charge_number=number.number,
        charge_number_probability=number.probability,
    )  # fmt: skip


def decided_row(row: DropletRow, verdict: tuple[str, str] | None, trimmed: bool) -> DropletRow:
    """Let a person's verdict stand before what the tool thinks; its reasons stay listed.

    Parameters
    ----------
    row : DropletRow
        As measured.
    verdict : tuple of str or None
        Verdict and reason of a person.
    trimmed : bool
        A person left out part of the track.

    Returns
    -------
    row : DropletRow
        As decided.
    """
    codes = set(row.reasons)
    if trimmed:
        codes.add("trimmed")
    if verdict is not None:
        codes.add("decided")
        row = replace(row, verdict=verdict[0])
    return replace(row, reasons=ordered(codes))


def segment_rows(droplet: Droplet, field: Field) -> list[SegmentRow]:
    """Give the speeds of one droplet in each segment that it was seen in.

    Parameters
    ----------
    droplet : Droplet
        With a history; without one there are no rows.
    field : Field
        With the segments.

    Returns
    -------
    rows : list of SegmentRow
        In order of time.
    """
    if droplet.history is None:
        return []
    path, fit = droplet.path, droplet.history.fit
    steps = path.steps
    seen = [
        (i, s) for i, s in enumerate(field.segments) if s.end > path.times[0] and s.start < path.times[-1]
    ]
    if not seen:
        return []
    occupancy = segment_occupancy(
        [s.start for _, s in seen], [s.end for _, s in seen], path.times, path.exposure
    )[steps.first]
    # A segment of which one step or less was seen has no speed of its own.
    whole = np.flatnonzero(np.sum(occupancy > 0.5 * steps.dt[:, None], axis=0) >= 2)
    seen, occupancy = [seen[k] for k in whole], occupancy[:, whole]
    if not seen:
        return []
    speeds = segment_speeds(steps, occupancy, diffusion=fit.diffusion, rho=float(np.exp(fit.log_rho)))
    inside = field.segment_of(path.times)
    return [
        SegmentRow(
            path.droplet, i, s.voltage, s.start, s.end, int(np.sum(inside == i)), float(speeds.down[k]),
            float(speeds.down_std[k]), float(speeds.side[k]), float(speeds.side_std[k]),
        )
        for k, (i, s) in enumerate(seen) if np.isfinite(speeds.down[k])
    ]  # fmt: skip


def change_rows(droplet: Droplet, rests: list[Balance]) -> list[ChangeRow]:
    """Give what happened to one droplet.

    Parameters
    ----------
    droplet : Droplet
        With history and posterior; without there are no rows.
    rests : list of Balance
        Where it rests with the field on.

    Returns
    -------
    rows : list of ChangeRow
        In order of time. What lies on the side that a switch left out has no charges.
    """
    history, p = droplet.history, droplet.posterior
    if history is None or p is None:
        return []
    rows = []
    for change in history.changes:
        part = None if change.kind == "switch" else history.part_at(change.time)
        sides = (part, part) if change.kind != "charge_step" else history.parts_about(change) or (None, None)
        before, after = (NAN if side is None else float(p.charge[side]) for side in sides)
        rows.append(ChangeRow(
            droplet.path.droplet, change.kind, change.time, change.time_std, before, after, change.statistic,
            change.threshold,
        ))  # fmt: skip
    charge = droplet.charge[0]
    rows += [
        ChangeRow(
            droplet.path.droplet, "balance", r.time, r.time_std, charge, charge, r.statistic, r.threshold
        )
        for r in rests
    ]
    return sorted(rows, key=lambda row: row.time_s)


def details(droplets: list[Droplet], rests: list[list[Balance]]) -> dict[str, Any]:
    """Give balance voltages, rates of evaporation and charges of all parts as plain values.

    Parameters
    ----------
    droplets : list of Droplet
        With posteriors.
    rests : list of list of Balance
        Of the same droplets.

    Returns
    -------
    values : dict
        Lists of balances and trends; charges of the parts of droplets that changed, by droplet number.
    """
    plain: dict[str, Any] = {
        "balances": [],
        "trends": [],
        "charge_parts": {},
        "shrinking": shrinking(droplets),
    }
    for droplet, rest in zip(droplets, rests, strict=True):
        number = droplet.path.droplet
        plain["balances"] += [
            {"droplet": number, "segment": r.segment, "voltage_v": r.voltage, "voltage_std_v": r.voltage_std}
            for r in rest
        ]  # fmt: skip
        history, p = droplet.history, droplet.posterior
        if history is not None and history.trend is not None:
            plain["trends"].append({
                "droplet": number, "kind": history.trend.kind, "time_s": history.trend.time,
                "log_radius_rate_1_s": history.trend.rate, "log_radius_rate_std_1_s": history.trend.rate_std,
            })  # fmt: skip
        if p is not None and len(p.charge) > 1:
            plain["charge_parts"][str(number)] = {
                "charge_c": [value if np.isfinite(value) else None for value in p.charge.tolist()],
                "covariance_c2": np.where(np.isfinite(p.charge_cov), p.charge_cov, 0.0).tolist(),
            }
    return plain


def shrinking(droplets: list[Droplet]) -> dict[str, Any]:
    """Give the change of size that all droplets share.

    Parameters
    ----------
    droplets : list of Droplet
        With histories and posteriors.

    Returns
    -------
    values : dict
        Mean of d(r^2)/dt over the droplets, weighted, strange ones left out, in m^2/s, with its standard
        uncertainty: evaporation limited by diffusion of the vapour changes r^2 of all droplets of an oil at one
        rate. None where no droplet tells.
    """
    rates = []
    for droplet in droplets:
        history, p = droplet.history, droplet.posterior
        if history is None or p is None or not np.isfinite(p.radius) or not history.size_rate_std > 0:
            continue
        rates.append((2 * p.radius**2 * history.size_rate, 2 * p.radius**2 * history.size_rate_std))
    if not rates:
        return {"radius2_rate_m2_s": None, "radius2_rate_std_m2_s": None, "droplets": 0}
    mean, std = robust_mean(*np.array(rates).T)
    return {"radius2_rate_m2_s": mean, "radius2_rate_std_m2_s": std, "droplets": len(rates)}


def shrinking_warnings(droplets: list[Droplet]) -> tuple[str, ...]:
    """Say if all droplets together shrink, also where no single one shows it.

    Parameters
    ----------
    droplets : list of Droplet
        With histories and posteriors.

    Returns
    -------
    warnings : tuple of str
        One line, if the mean rate differs from 0 by more than 3.29 standard uncertainties.
    """
    found = shrinking(droplets)
    rate, std = found["radius2_rate_m2_s"], found["radius2_rate_std_m2_s"]
    if rate is None or found["droplets"] < 3 or abs(rate) <= 3.29 * std:
        return ()
    what = "shrink" if rate < 0 else "seem to grow"
    return (
        f"the droplets {what} together: d(r^2)/dt = {rate:.2g} +/- {std:.1g} m^2/s; radii hold at mid track",
    )


def swaps(droplets: list[Droplet]) -> list[tuple[int, int, float]]:
    """Find pairs of tracks that may have taken each other's droplet.

    Parameters
    ----------
    droplets : list of Droplet
        With histories.

    Returns
    -------
    pairs : list of (droplet, droplet, time)
        Both switch at one time, within their uncertainty, at nearly one place; the time is in s.
    """
    seen = []
    for droplet in droplets:
        for change in () if droplet.history is None else droplet.history.changes:
            if change.kind == "switch":
                path = droplet.path
                at = int(np.argmin(np.abs(path.times - change.time)))
                seen.append(
                    (path.droplet, change.time, change.time_std, float(path.down[at]), float(path.side[at]))
                )
    pairs = []
    for i, (one, t1, s1, y1, x1) in enumerate(seen):
        for two, t2, s2, y2, x2 in seen[i + 1 :]:
            near = float(np.hypot(y1 - y2, x1 - x2)) < SWAP_REACH
            if one != two and near and abs(t1 - t2) < 3 * float(np.hypot(s1, s2)) + SWAP_TIME:
                pairs.append((one, two, 0.5 * (t1 + t2)))
    return pairs


def swap_warnings(droplets: list[Droplet]) -> tuple[str, ...]:
    """Say which tracks may have been swapped.

    Parameters
    ----------
    droplets : list of Droplet
        With histories.

    Returns
    -------
    warnings : tuple of str
        One line a pair, with what a person can do.
    """
    return tuple(
        f"droplets {one} and {two} may have been swapped at {time:.2f} s: split both there and join them crosswise"
        for one, two, time in swaps(droplets)
    )
