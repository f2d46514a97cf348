"""Rows of the tables that the motion wing gives; field names are the columns of the files."""

from __future__ import annotations

from dataclasses import dataclass

NAN = float("nan")


@dataclass(frozen=True, slots=True)
class DropletRow:
    """One droplet; NaN or None is an empty cell, and `reasons` says why."""

    droplet: int
    verdict: str  # keep, doubt or reject
    reasons: tuple[str, ...]  # codes of `tracker.motion.verdict.REASONS`
    frames: int  # sightings used
    first_s: float
    last_s: float
    fall_speed_m_s: float = NAN  # in still air
    fall_speed_std_m_s: float = NAN
    radius_m: float = NAN
    radius_std_m: float = NAN
    mass_kg: float = NAN
    charge_c: float = NAN
    charge_std_c: float = NAN
    charge_own_std_c: float = NAN
    charge_shared_std_c: float = NAN
    charge_number: int | None = None
    charge_number_probability: float = NAN
    diffusion_ratio: float = NAN


@dataclass(frozen=True, slots=True)
class SegmentRow:
    """One droplet in one segment."""

    droplet: int
    segment: int
    voltage_v: float
    start_s: float
    end_s: float
    frames: int  # sightings used
    down_speed_m_s: float  # as the picture shows it, the air's speed included
    down_speed_std_m_s: float
    side_speed_m_s: float
    side_speed_std_m_s: float


@dataclass(frozen=True, slots=True)
class ChangeRow:
    """One thing that happened to a droplet."""

    droplet: int
    kind: str  # charge_step, evaporation, growth, switch or balance
    time_s: float
    time_std_s: float
    before_c: float
    after_c: float
    statistic: float
    threshold: float
