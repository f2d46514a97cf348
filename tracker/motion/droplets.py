"""Tracks, voltage and bench -> droplets with radius, charge, charge number, verdict; all of one recording together."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from physics.budget import SHARED_INPUTS, bench_budget, shared_errors
from physics.droplet import Conditions
from physics.motion import (
    MIN_INCREMENTS,
    DropletPosterior,
    droplet_posterior,
    input_responses,
    segment_occupancy,
    segment_speeds,
)
from physics.quanta import ChargeNumbers, ChargeUnit, charge_sample, number_probabilities, pooled_charge_unit
from tracker.bench import Bench
from tracker.motion.aircurrent import AirCurrent, Drift, find_air_current, find_drift
from tracker.motion.changes import History, find_changes
from tracker.motion.decided import apply_decisions
from tracker.motion.field import exposure_of
from tracker.motion.judge import Balance, Facts, balances, is_stuck, reasons_of
from tracker.motion.rows import NAN, ChangeRow, DropletRow, SegmentRow
from tracker.motion.velocity import Path, fit_orientation, paths, without_outliers
from tracker.motion.verdict import REASONS, ordered, verdict_of
from tracker.records import Decision, Field, FloatArray, IntArray, Recording, Settings, Tracks, readonly

LAMP_RIM = 4.0  # px about the lamp's rectangle that its light blurs into


@dataclass(frozen=True, slots=True)
class Evaluation:
    """All that the motion wing says of one recording; plain values where provenance wants them."""

    tracks: Tracks  # after a person's splits and joins
    linked: IntArray  # (N,) droplet number that the linker gave each row
    used: np.ndarray  # (N,) bool: rows that a fit rests on
    droplets: tuple[DropletRow, ...]
    segments: tuple[SegmentRow, ...]
    changes: tuple[ChangeRow, ...]
    orientation: dict[str, Any]
    air_current: dict[str, Any]
    exposure: float  # s
    charge_unit: dict[str, Any]
    budget: dict[str, Any]
    details: dict[str, Any] = field(default_factory=dict)  # balances, evaporation rates, charges of all parts
    warnings: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class _Droplet:
    """What is known of one droplet on the way through the evaluation."""

    path: Path
    outliers: int
    hops: tuple[int, ...]
    history: History | None  # None: too few steps
    posterior: DropletPosterior | None = None


def evaluate_droplets(
    tracks: Tracks,
    recording: Recording,
    field: Field,
    bench: Bench,
    *,
    settings: Settings,
    decisions: Sequence[Decision] = (),
    cuts: Sequence[int] | IntArray = (),
) -> Evaluation:
    """Work out speeds, radii, charges and verdicts of all droplets of one recording.

    Parameters
    ----------
    tracks : Tracks
        As linked.
    recording : Recording
        Frame times.
    field : Field
        Voltage over time.
    bench : Bench
        Cell, oil, air, site and camera; its scale is that of the recording's pixels.
    settings : Settings
        Least number of sightings of a droplet.
    decisions : sequence of Decision, optional
        Of a person, in the order in which they were made.
    cuts : sequence of int, optional
        Frames at which the camera was bumped.

    Returns
    -------
    evaluation : Evaluation
        One row for every droplet number; what could not be measured is empty and has a reason.
    """
    exposure, conditions = exposure_of(bench, recording), bench.conditions
    decided = apply_decisions(tracks, recording, decisions)
    left_out = decided.trimmed | _in_lamp(decided.tracks, bench)
    orientation = fit_orientation(
        decided.tracks, recording, field=field, scale=bench.scale, exposure=exposure, down_deg=bench.down_deg
    )
    found = paths(
        decided.tracks, recording, field=field, scale=bench.scale, exposure=exposure, orientation=orientation,
        cuts=cuts, left_out=left_out,
    )  # fmt: skip
    cleaned = [_cleaned(path, settings) for path in found]
    moving = [droplet.path for droplet in cleaned if not is_stuck(droplet.path, conditions)]
    drift = find_drift([path for path in moving if len(path) >= settings.min_frames])
    droplets = [_with_history(droplet, conditions, settings, drift) for droplet in cleaned]
    air = replace(_air(droplets, conditions), drift=drift)
    droplets = _posteriors(droplets, bench, air)
    shared = _SharedPart.of(droplets, bench)
    numbers = _numbers(droplets, shared)
    facts = [_facts(d, decided.tracks, recording, conditions, i, numbers) for i, d in enumerate(droplets)]
    rests = [_balances(d, field) for d in droplets]
    reasons = [set(reasons_of(fact, air, rest, settings)) for fact, rest in zip(facts, rests, strict=True)]
    rows = []
    for i, droplet in enumerate(droplets):
        row = _row(droplet, decided.tracks, recording, air, shared.std[i], numbers[i], reasons[i])
        trimmed = bool(np.any(decided.trimmed[decided.tracks.rows(droplet.path.droplet)]))
        rows.append(_decided_row(row, decided.verdicts.get(row.droplet), trimmed))
    used = np.zeros(len(decided.tracks), bool)
    for droplet in droplets:
        used[_used_rows(droplet)] = True
    unit = _charge_unit(droplets, rows, shared)
    return Evaluation(
        decided.tracks, readonly(decided.linked, np.int64), readonly(used, np.bool_), tuple(rows),
        tuple(row for d in droplets for row in _segment_rows(d, field)),
        tuple(row for d, rest in zip(droplets, rests, strict=True) for row in _change_rows(d, rest)),
        {"down_deg": orientation.down_deg, "down_deg_std": orientation.down_deg_std, "origin": orientation.origin},
        air.plain(), exposure, _unit_json(unit), shared.budget(droplets, rows), _details(droplets, rests),
        (*orientation.warnings, *decided.warnings, *_exposure_warning(bench, exposure)),
    )  # fmt: skip


def _exposure_warning(bench: Bench, exposure: float) -> tuple[str, ...]:
    """Say where the exposure comes from if nobody stated it."""
    if bench.exposure is not None:
        return ()
    return (f"camera.exposure is not stated: half the frame interval, {exposure * 1e3:.3g} ms, is assumed",)


def _in_lamp(tracks: Tracks, bench: Bench) -> np.ndarray:
    """Mark sightings inside the lamp's rectangle: its light, no droplets."""
    if bench.field.lamp is None:
        return np.zeros(len(tracks), bool)
    left, top, width, height = bench.field.lamp
    x, y = tracks.sightings.x, tracks.sightings.y
    inside = (x > left - LAMP_RIM) & (x < left + width + LAMP_RIM)
    return np.asarray(inside & (y > top - LAMP_RIM) & (y < top + height + LAMP_RIM))


def _cleaned(path: Path, settings: Settings) -> _Droplet:
    """Leave out what does not belong to one droplet."""
    if len(path) < max(settings.min_frames, 2):
        return _Droplet(path, 0, (), None)
    return _Droplet(*without_outliers(path), None)


def _with_history(droplet: _Droplet, conditions: Conditions, settings: Settings, drift: Drift) -> _Droplet:
    """Look for what happened to a droplet, the air's change of speed taken out."""
    path = droplet.path
    if len(path) < max(settings.min_frames, 2) or is_stuck(path, conditions):
        return droplet
    steps = path.steps()
    if len(steps) < MIN_INCREMENTS:
        return droplet
    times = np.asarray(path.times)
    return replace(droplet, history=find_changes(drift.taken_out(steps, times), times, conditions))


def _air(droplets: list[_Droplet], conditions: Conditions) -> AirCurrent:
    """Speed of the air that all droplets share."""
    usable = [d.history for d in droplets if d.history is not None and np.isfinite(d.history.fit.fall_speed)]
    moving = [h for h in usable if h.fit.fall_speed > 0]
    return find_air_current([h.steps for h in moving], [h.fit for h in moving], conditions)


def _posteriors(droplets: list[_Droplet], bench: Bench, air: AirCurrent) -> list[_Droplet]:
    """Posterior of radius and charges of every droplet that has a history."""
    conditions = bench.conditions
    responses = input_responses(conditions, viscosity_given="air.viscosity" in bench.viscosity.origin)
    done = []
    for d in droplets:
        if d.history is not None:
            std = float(
                np.hypot(air.down_std, air.drift.std_of_mean(d.history.steps, np.asarray(d.path.times)))
            )
            found = droplet_posterior(
                d.history.steps, conditions, air_speed=air.down, air_speed_std=std, responses=responses
            )
            d = replace(d, posterior=found)  # noqa: PLW2901 - the same droplet, known better
        done.append(d)
    return done


def _charge(droplet: _Droplet) -> tuple[float, float]:
    """Charge of the main part with its own standard uncertainty in C; nan if there is none."""
    p = droplet.posterior
    if p is None or p.main_part < 0:
        return NAN, NAN
    return float(p.charge[p.main_part]), float(p.charge_std[p.main_part])


@dataclass(frozen=True, slots=True)
class _SharedPart:
    """What the bench's inputs put on all charges of a recording alike."""

    errors: FloatArray  # (10,) of SHARED_INPUTS
    sensitivities: FloatArray  # (droplets, 10) d ln charge; nan without charge
    std: FloatArray  # (droplets,) C
    bench: Bench

    @classmethod
    def of(cls, droplets: list[_Droplet], bench: Bench) -> _SharedPart:
        """Gather the sensitivities of all droplets."""
        errors = shared_errors(bench.shared_inputs)
        table = np.full((len(droplets), len(SHARED_INPUTS)), np.nan)
        charge = np.array([_charge(d) for d in droplets]).reshape(-1, 2)
        for i, droplet in enumerate(droplets):
            p = droplet.posterior
            if p is not None and p.main_part >= 0:
                table[i] = [p.sensitivities[name][1] for name in SHARED_INPUTS]
        # As in the sensitivities, a charge of 0 counts as one standard deviation.
        size = np.maximum(np.abs(charge[:, 0]), charge[:, 1])
        return cls(errors, table, size * np.sqrt(np.sum((table * errors) ** 2, axis=1)), bench)

    @property
    def relative(self) -> FloatArray:
        """(droplets,) relative standard uncertainty of the charge."""
        return np.asarray(np.sqrt(np.sum((self.sensitivities * self.errors) ** 2, axis=1)))

    def budget(self, droplets: list[_Droplet], rows: list[DropletRow]) -> dict[str, Any]:
        """Budget of the factor on all charges, and the sensitivities from which all covariances follow."""
        plain: dict[str, Any] = {
            "inputs": list(SHARED_INPUTS), "errors": self.errors.tolist(),
            "log_charge_sensitivities": {
                str(row.droplet): line.tolist()
                for row, line in zip(rows, self.sensitivities, strict=True) if np.all(np.isfinite(line))
            },
        }  # fmt: skip
        charge = np.array([_charge(d) for d in droplets]).reshape(-1, 2)
        good = np.all(np.isfinite(self.sensitivities), axis=1) & (np.abs(charge[:, 0]) > 0)
        if np.any(good):
            weights = (charge[good, 0] / charge[good, 1]) ** 2
            made = bench_budget(self.sensitivities[good], self.bench.shared_inputs, weights=weights)
            plain["charge_factor_std"] = made.std
            plain["charge_factor"] = [
                {"input": r.input, "value": r.value, "unit": r.unit, "std": r.std, "sensitivity": r.sensitivity,
                 "share": r.share} for r in made.rows if r.input != "own"
            ]  # fmt: skip
        return plain


@dataclass(frozen=True, slots=True)
class _Number:
    """Charge number of one droplet."""

    number: int | None = None
    probability: float = NAN
    none: float = NAN  # probability that the charge is on no whole number


def _numbers(droplets: list[_Droplet], shared: _SharedPart) -> list[_Number]:
    """Charge numbers of all droplets, found together with the factor that they share."""
    charge = np.array([_charge(d) for d in droplets]).reshape(-1, 2)
    good = np.flatnonzero(np.all(np.isfinite(charge), axis=1) & (charge[:, 1] > 0))
    found = [_Number() for _ in droplets]
    if len(good) == 0:
        return found
    posteriors = [droplets[i].posterior for i in good]
    numbers: ChargeNumbers = number_probabilities(
        charge[good, 0], charge[good, 1], shared_rel_std=np.minimum(shared.relative[good], 0.24),
        log_likelihoods=[None if p is None else p.charge_log_density for p in posteriors],
    )  # fmt: skip
    for k, i in enumerate(good):
        found[i] = _Number(
            int(numbers.number[k]), float(numbers.probability[k]), float(numbers.outlier_probability[k])
        )
    return found


def _facts(
    droplet: _Droplet, tracks: Tracks, recording: Recording, conditions: Conditions, index: int,
    numbers: list[_Number],
) -> Facts:  # fmt: skip
    """Gather what the verdict rests on."""
    rows = tracks.rows(droplet.path.droplet)
    number = numbers[index]
    return Facts(
        path=droplet.path, flags=np.asarray(tracks.sightings.flags[rows]), outliers=droplet.outliers,
        hops=len(droplet.hops), history=droplet.history, posterior=droplet.posterior, conditions=conditions,
        number=number.number, number_probability=number.probability, on_no_number=number.none,
    )  # fmt: skip


def _used_rows(droplet: _Droplet) -> IntArray:
    """Rows of the tracks that the droplet's fit rests on."""
    if droplet.history is None:
        return np.empty(0, np.int64)
    first = droplet.path.steps().first[droplet.history.kept]
    return np.asarray(droplet.path.rows[np.union1d(first, first + 1)])


def _row(
    droplet: _Droplet, tracks: Tracks, recording: Recording, air: AirCurrent, shared_std: float, number: _Number,
    reasons: set[str],
) -> DropletRow:  # fmt: skip
    """Row of one droplet; empty where a value could not be had."""
    rows = tracks.rows(droplet.path.droplet)
    times = recording.frame_times[tracks.sightings.frame[rows]]
    codes = ordered(reasons)
    row = DropletRow(
        droplet.path.droplet,
        verdict_of(codes),
        codes,
        len(_used_rows(droplet)),
        float(times[0]),
        float(times[-1]),
    )
    p = droplet.posterior
    if p is None or droplet.history is None:
        return row
    if not np.isfinite(p.radius):
        fit = droplet.history.fit
        std = float(np.hypot(fit.fall_speed_std, air.down_std))
        return replace(row, fall_speed_m_s=fit.fall_speed - air.down, fall_speed_std_m_s=std)
    row = replace(
        row, fall_speed_m_s=p.fall_speed, fall_speed_std_m_s=p.fall_speed_std, radius_m=p.radius,
        radius_std_m=p.radius_std, mass_kg=p.mass, diffusion_ratio=p.diffusion_ratio,
    )  # fmt: skip
    charge, own = _charge(droplet)
    if not np.isfinite(charge) or "one_voltage" in reasons:
        return row
    return replace(
        row, charge_c=charge, charge_std_c=float(np.hypot(own, shared_std)), charge_own_std_c=own,
        charge_shared_std_c=float(shared_std), charge_number=number.number,
        charge_number_probability=number.probability,
    )  # fmt: skip


def _decided_row(row: DropletRow, verdict: tuple[str, str] | None, trimmed: bool) -> DropletRow:
    """Let a person's verdict stand before what the tool thinks; its reasons stay listed."""
    codes = set(row.reasons)
    if trimmed:
        codes.add("trimmed")
    if verdict is not None:
        codes.add("decided")
        row = replace(row, verdict=verdict[0])
    return replace(row, reasons=ordered(codes))


def _segment_rows(droplet: _Droplet, field: Field) -> list[SegmentRow]:
    """Speeds of one droplet in each segment that it was seen in."""
    if droplet.history is None:
        return []
    path, fit = droplet.path, droplet.history.fit
    steps = path.steps()
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


def _balances(droplet: _Droplet, field: Field) -> list[Balance]:
    """Segments with the field on in which the droplet rests."""
    if droplet.history is None:
        return []
    return balances(_segment_rows(droplet, field), droplet.history)


def _change_rows(droplet: _Droplet, rests: list[Balance]) -> list[ChangeRow]:
    """What happened to one droplet, in order of time."""
    history, p = droplet.history, droplet.posterior
    if history is None or p is None:
        return []
    rows, part = [], 0
    for change in history.changes:
        before = after = float(p.charge[min(part, len(p.charge) - 1)])
        if change.kind == "charge_step":
            after = float(p.charge[min(part + 1, len(p.charge) - 1)])
            part += 1
        elif change.kind == "switch":
            before = after = NAN
        rows.append(ChangeRow(
            droplet.path.droplet, change.kind, change.time, change.time_std, before, after, change.statistic,
            change.threshold,
        ))  # fmt: skip
    charge = _charge(droplet)[0]
    rows += [
        ChangeRow(
            droplet.path.droplet, "balance", r.time, r.time_std, charge, charge, r.statistic, r.threshold
        )
        for r in rests
    ]
    return sorted(rows, key=lambda row: row.time_s)


def _charge_unit(droplets: list[_Droplet], rows: list[DropletRow], shared: _SharedPart) -> ChargeUnit:
    """Charge unit of the recording, from droplets that are kept; a droplet that changed gives two charges."""
    singles, pairs = [], []
    for droplet, row in zip(droplets, rows, strict=True):
        p = droplet.posterior
        if row.verdict != "keep" or p is None or not np.isfinite(row.charge_c):
            continue
        seen = np.flatnonzero(np.isfinite(p.charge))
        if len(seen) > 1:
            two = _two_longest(droplet, seen)
            pairs.append((p.charge[two], p.charge_cov[np.ix_(two, two)]))
        else:
            by_radius = np.sqrt(p.radius_weight @ (p.charge_at_radius[:, p.main_part] - row.charge_c) ** 2)
            singles.append((row.charge_c, row.charge_own_std_c, by_radius / max(abs(row.charge_c), 1e-30)))
    table = np.array(singles).reshape(-1, 3)
    relative = shared.relative[np.isfinite(shared.relative)]
    sample = charge_sample(
        table[:, 0], table[:, 1], rel_stds=np.minimum(table[:, 2], 1.0),
        shared_rel_std=float(np.median(relative)) if len(relative) else 0.0,
        pairs=(np.array([q for q, _ in pairs]), np.array([c for _, c in pairs])) if pairs else None,
    )  # fmt: skip
    return pooled_charge_unit((sample,))


def _two_longest(droplet: _Droplet, seen: IntArray) -> IntArray:
    """Two charge parts with the most steps, in order of time."""
    part = np.empty(0, np.int64) if droplet.history is None else droplet.history.steps.part
    length = np.bincount(part, minlength=int(seen.max()) + 1)
    return np.sort(seen[np.argsort(length[seen])[::-1][:2]])


def _unit_json(unit: ChargeUnit) -> dict[str, Any]:
    """Plain values of a charge unit; None where it is not resolved."""
    values = {
        "charge_unit_c": unit.unit, "charge_unit_std_c": unit.unit_std, "charge_unit_own_std_c": unit.unit_own_std,
        "charge_unit_shared_std_c": unit.unit_shared_std, "over_e": unit.over_e, "over_e_std": unit.over_e_std,
        "best_c": unit.best, "log_ratio": unit.log_ratio, "margin": unit.margin,
    }  # fmt: skip
    plain: dict[str, Any] = {key: value if np.isfinite(value) else None for key, value in values.items()}
    return plain | {
        "resolved": unit.resolved, "reason": unit.reason, "droplets_used": unit.droplets_used,
        "rivals": [list(rival) for rival in unit.rivals],
    }  # fmt: skip


def _details(droplets: list[_Droplet], rests: list[list[Balance]]) -> dict[str, Any]:
    """Balance voltages, rates of evaporation and charges of all parts, by droplet number."""
    plain: dict[str, Any] = {"balances": [], "trends": [], "charge_parts": {}}
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


def reason_sentences(codes: Sequence[str]) -> list[str]:
    """Give the sentences that a person reads.

    Parameters
    ----------
    codes : sequence of str
        Keys of `tracker.motion.verdict.REASONS`.

    Returns
    -------
    sentences : list of str
        In the same order.
    """
    return [REASONS[code].sentence for code in codes]
