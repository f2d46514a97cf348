"""Tracks, voltage and bench -> droplets with radius, charge, charge number, verdict; all of one recording together."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from physics.droplet import Conditions
from tracker.bench import Bench
from tracker.motion.aircurrent import AirCurrent, find_air_current, find_drift
from tracker.motion.charges import Number, SharedPart, charge_numbers, charge_unit_of, unit_json
from tracker.motion.decided import Decided, apply_decisions
from tracker.motion.droplet import Droplet, cleaned, is_one_droplet, with_histories, with_posteriors
from tracker.motion.field import blur_of, exposure_of
from tracker.motion.fieldclock import clock_warnings
from tracker.motion.judge import Facts, balances, fastest_of, reasons_of
from tracker.motion.rows import ChangeRow, DropletRow, SegmentRow
from tracker.motion.tablerows import (
    change_rows,
    decided_row,
    details,
    droplet_row,
    segment_rows,
    shrinking_warnings,
    swap_warnings,
)
from tracker.motion.velocity import Orientation, Path, fit_orientation, paths
from tracker.motion.verdict import REASONS
from tracker.records import Decision, Field, Flag, IntArray, Recording, Settings, Tracks, readonly

NEAR_FRAMES = 3  # about a jump, in which a neighbour or a line excuses it
NO_NOISE = 2e-3  # of the frame interval: noise of the places over D that is as good as none
TOO_SHORT = 1e-3  # false alarms per recording of an exposure that is stated too short
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
class Analysis:
    """Fits of all droplets of one recording: all that a person's verdicts do not change."""

    orientation: Orientation
    droplets: list[Droplet]
    air: AirCurrent
    shared: SharedPart
    numbers: list[Number]
    segments: list[list[SegmentRow]]


@dataclass(slots=True)
class Memo:
    """The last analysis and what it was made from, for someone who evaluates one recording again and again."""

    key: str = ""
    analysis: Analysis | None = None


def evaluate_droplets(
    tracks: Tracks,
    recording: Recording,
    field: Field,
    bench: Bench,
    *,
    settings: Settings,
    decisions: Sequence[Decision] = (),
    cuts: Sequence[int] | IntArray = (),
    memo: Memo | None = None,
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
    memo : Memo, optional
        Its analysis is used again if tracks, field, bench and settings are still the same; else it is replaced.

    Returns
    -------
    evaluation : Evaluation
        One row for every droplet number; what could not be measured is empty and has a reason.
    """
    decided = apply_decisions(tracks, recording, decisions)
    memo = Memo() if memo is None else memo
    key = _input_key(decided, recording, field, bench, settings=settings, cuts=cuts)
    if memo.analysis is None or memo.key != key:
        memo.analysis = _analyse(decided, recording, field, bench, settings=settings, cuts=cuts)
        memo.key = key
    made = memo.analysis
    orientation, droplets, air, shared, numbers = (
        made.orientation, made.droplets, made.air, made.shared, made.numbers,
    )  # fmt: skip
    rests = [
        [] if d.history is None else balances(rows, d.history)
        for d, rows in zip(droplets, made.segments, strict=True)
    ]
    rows = []
    for i, droplet in enumerate(droplets):
        facts = _facts(droplet, decided.tracks, bench.conditions, numbers[i], made.segments[i])
        reasons = reasons_of(facts, air, rests[i], settings)
        row = droplet_row(droplet, decided.tracks, recording, air, shared.of_droplet(i), numbers[i], reasons)
        trimmed = bool(np.any(decided.trimmed[decided.tracks.rows(row.droplet)]))
        rows.append(decided_row(row, decided.verdicts.get(row.droplet), trimmed))
    used = np.zeros(len(decided.tracks), bool)
    used[np.concatenate([np.empty(0, np.int64), *(droplet.used_rows for droplet in droplets)])] = True
    exposure = exposure_of(bench, recording)
    return Evaluation(
        decided.tracks, readonly(decided.linked, np.int64), readonly(used, np.bool_), tuple(rows),
        tuple(row for part in made.segments for row in part),
        tuple(row for d, rest in zip(droplets, rests, strict=True) for row in change_rows(d, rest)),
        _orientation_json(orientation), air.plain(), exposure, unit_json(charge_unit_of(droplets, rows, shared)),
        shared.budget(droplets, rows), details(droplets, rests) | _decisions_json(decided),
        (*orientation.warnings, *decided.warnings, *_exposure_warning(bench, exposure, droplets),
         *_voltage_warning(bench), *shrinking_warnings(droplets), *swap_warnings(droplets),
         *clock_warnings(field, _trusted(droplets, rows), recording)),
    )  # fmt: skip


def _analyse(
    decided: Decided, recording: Recording, field: Field, bench: Bench, *, settings: Settings,
    cuts: Sequence[int] | IntArray,
) -> Analysis:  # fmt: skip
    """Fit all droplets, the air that carries them and the charge numbers that they share."""
    orientation, droplets = _tracked(decided, recording, field, bench, settings=settings, cuts=cuts)
    moving = [(d.path, d.fit) for d in droplets if d.fit is not None and is_one_droplet(d, bench.conditions)]
    drift = find_drift([path for path, _ in moving], [fit for _, fit in moving])
    droplets = with_histories(droplets, bench.conditions, drift)
    air = replace(_air(droplets, bench.conditions), drift=drift)
    droplets = with_posteriors(droplets, bench, air)
    shared = SharedPart.of(droplets, bench, air.down_std)
    numbers = charge_numbers(droplets, shared)
    segments = [segment_rows(droplet, field) for droplet in droplets]
    return Analysis(orientation, droplets, air, shared, numbers, segments)


def _input_key(
    decided: Decided, recording: Recording, field: Field, bench: Bench, *, settings: Settings,
    cuts: Sequence[int] | IntArray,
) -> str:  # fmt: skip
    """Hash of all that an analysis depends on."""
    seen = decided.tracks.sightings
    arrays = (
        decided.tracks.droplet, seen.frame, seen.x, seen.y, seen.x_std, seen.y_std, seen.brightness, seen.width,
        seen.flags, decided.trimmed, recording.frame_times, recording.repeated, field.knot_times, field.knot_volts,
        field.toggle_std, np.asarray(cuts, np.int64),
    )  # fmt: skip
    made = hashlib.blake2b(repr((bench.digest, settings, field.segments)).encode(), digest_size=16)
    for array in arrays:
        made.update(np.ascontiguousarray(array).tobytes())
    return made.hexdigest()


def _tracked(
    decided: Decided, recording: Recording, field: Field, bench: Bench, *, settings: Settings,
    cuts: Sequence[int] | IntArray,
) -> tuple[Orientation, list[Droplet]]:  # fmt: skip
    """Bring tracks into metres along gravity and leave out what does not belong."""
    exposure = exposure_of(bench, recording)
    orientation = fit_orientation(
        decided.tracks, recording, field=field, scale=bench.scale, exposure=exposure, down_deg=bench.down_deg
    )
    found = paths(
        decided.tracks, recording, field=field, scale=bench.scale, exposure=exposure, orientation=orientation,
        blur=blur_of(bench, recording), cuts=cuts, left_out=decided.trimmed | _in_lamp(decided.tracks, bench),
    )  # fmt: skip
    return orientation, [cleaned(path, settings) for path in found]


def _trusted(droplets: list[Droplet], rows: list[DropletRow]) -> list[Path]:
    """Paths of the droplets that are not rejected."""
    return [droplet.path for droplet, row in zip(droplets, rows, strict=True) if row.verdict != "reject"]


def _decisions_json(decided: Decided) -> dict[str, Any]:
    """Give what a person decided on the droplets of the present numbering."""
    return {"decisions": {
        str(droplet): {"verdict": verdict, "reason": reason}
        for droplet, (verdict, reason) in sorted(decided.verdicts.items())
    }}  # fmt: skip


def _orientation_json(orientation: Orientation) -> dict[str, Any]:
    std = orientation.down_deg_std
    return {"down_deg": orientation.down_deg, "down_deg_std": std if np.isfinite(std) else None,
            "origin": orientation.origin}  # fmt: skip


def _exposure_warning(bench: Bench, exposure: float, droplets: Sequence[Droplet]) -> tuple[str, ...]:
    """Say where the exposure comes from if nobody stated it, or that the stated one is too short."""
    if bench.exposure is None:
        return (
            f"camera.exposure is not stated: half the frame interval, {exposure * 1e3:.3g} ms, is taken for the times"
            " of the field; the blur of Brownian motion is fitted together with the place noise",
        )
    from scipy.special import bdtrc  # scipy.stats, which says it in more words, takes a second to import

    usable = [d.history for d in droplets if d.history is not None and is_one_droplet(d, bench.conditions)]
    bare = sum(h.fit.log_rho < np.log(NO_NOISE * np.median(h.steps.dt)) for h in usable)
    # With the right blur, chance leaves a droplet without place noise in at most one case of two.
    if bare == 0 or bdtrc(bare - 1, len(usable), 0.5) > TOO_SHORT:
        return ()
    return (
        f"{bare} of {len(usable)} droplets seem to have no place noise: camera.exposure, {exposure * 1e3:.3g} ms, is"
        " shorter than the camera's, or the noise of the places is far below Brownian motion",
    )


def _voltage_warning(bench: Bench) -> tuple[str, ...]:
    """Say if nobody stated how well the voltage is known."""
    if bench.voltage is not None or bench.voltage_rel_std > 0:
        return ()
    return (
        f"field.source is {bench.field.source} and cell.voltage is not stated: its voltages count as exact; state one"
        ' with its uncertainty, such as voltage = "260.0(5) V"',
    )


def _in_lamp(tracks: Tracks, bench: Bench) -> np.ndarray:
    """Mark sightings inside the lamp's rectangle: its light, no droplets."""
    if bench.field.lamp is None:
        return np.zeros(len(tracks), bool)
    left, top, width, height = bench.field.lamp
    x, y = tracks.sightings.x, tracks.sightings.y
    inside = (x > left - LAMP_RIM) & (x < left + width + LAMP_RIM)
    return np.asarray(inside & (y > top - LAMP_RIM) & (y < top + height + LAMP_RIM))


def _air(droplets: list[Droplet], conditions: Conditions) -> AirCurrent:
    """Speed of the air that all droplets share."""
    usable = [d.history for d in droplets if d.history is not None and is_one_droplet(d, conditions)]
    moving = [h for h in usable if np.isfinite(h.fit.fall_speed) and h.fit.fall_speed > 0]
    return find_air_current([h.fit for h in moving], conditions)


def _facts(
    droplet: Droplet, tracks: Tracks, conditions: Conditions, number: Number, segments: Sequence[SegmentRow]
) -> Facts:
    """Gather what the verdict rests on."""
    rows = tracks.rows(droplet.path.droplet)
    flags = np.asarray(tracks.sightings.flags[rows])
    # Beside a neighbour or a line of the reticle a place may be off for some frames: no jump of the droplet.
    uneasy = tracks.sightings.frame[rows][(flags & int(Flag.CROWDED | Flag.MERGED | Flag.LINE)) != 0]
    hops = sum(bool(np.all(np.abs(uneasy - frame) > NEAR_FRAMES)) for frame in droplet.hops)
    return Facts(
        path=droplet.path, flags=flags, outliers=droplet.outliers, hops=hops, history=droplet.history,
        posterior=droplet.posterior, conditions=conditions, number=number.number,
        number_probability=number.probability, on_no_number=number.none, fastest=fastest_of(segments, droplet.history),
    )  # fmt: skip


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
