"""`fallrise plan`: the precision that a planned recording can reach, and the voltage and plateau that suit it best."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from calibration.errors import QuantityError
from calibration.quantity import parse_quantity
from physics.budget import DropletModel, shared_errors, shared_sensitivities
from physics.charge_numbers import certain_share
from physics.droplet import ELEMENTARY_CHARGE, Conditions, diffusion, droplet_mobility, fall_speed
from physics.precision import Camera, Precision, TrackInformation, expected_precision, track_information
from physics.resolution import droplets_to_resolve
from tracker.bench import Bench
from tracker.errors import UsageError
from tracker.records import FloatArray

STREAK_PX = 8.0  # motion within one exposure beyond which a droplet is a streak and not a spot
BREAKDOWN_FIELD = 3.0e6  # V/m, see `breakdown_voltage`
_REFERENCE_DENSITY = 1.204  # kg/m^3, dry air at 20 degC and 101.325 kPa
SAFE_SHARE = 0.5  # of the breakdown voltage: common practice, since edges, dust and droplets lower it
_SUPPLY = 1000.0  # V, taken as the supply's limit if none is stated
_STARTS = 9  # heights, evenly over the view, at which droplets begin
_VOLTAGES, _PLATEAUS = 13, 10  # points of the search
_LONGEST_PLATEAU = 20.0  # s
_TIME_STEP = 1.04  # ratio of the lengths of tracks that the search tells apart


@dataclass(frozen=True, slots=True)
class Planned:
    """A planned recording, SI."""

    duration: float  # s, longest time that one droplet is watched
    plateau: float  # s, between two changes of the voltage
    voltage: float  # V, size of the field-on voltage
    settling: (
        float  # s after each change of the voltage that no fit can use: supply, and toggles known to a frame
    )
    pattern: tuple[int, ...]  # sign of the voltage in one plateau after the other, repeated: 0, 1 or -1
    frame_rate: float  # Hz
    exposure: float  # s
    pixel: float  # m
    place_std: float  # m, standard deviation of one place along one axis
    view_height: float  # m, along gravity
    radii: tuple[float, ...]  # m
    numbers: tuple[int, ...]  # signed charge numbers; negative ones rise when the top plate is positive
    droplets: int  # measured together, on one bench
    voltage_max: float  # V, of the supply, or what the air stands safely: the search goes no further
    notes: tuple[str, ...] = ()  # what was supposed of the plan

    def __post_init__(self) -> None:
        for name in ("duration", "plateau", "voltage", "frame_rate", "exposure", "pixel", "place_std", "view_height",
                     "voltage_max"):  # fmt: skip
            if not 0 < getattr(self, name) < np.inf:
                raise UsageError(f"{name} = {getattr(self, name)}: must be above 0")
        if self.exposure > 1 / self.frame_rate * (1 + 1e-9):
            raise UsageError(f"exposure {self.exposure:g} s: must not exceed the frame interval, "
                             f"{1 / self.frame_rate:g} s")  # fmt: skip
        if not 0 <= self.settling < self.plateau:
            raise UsageError(f"settling {self.settling:g} s: must be 0 or more and shorter than the plateau")
        if not self.pattern or set(self.pattern) - {-1, 0, 1} or not any(self.pattern):
            raise UsageError("pattern: must be a list of 0, + and -, with at least one plateau that is on")
        if (
            not self.radii
            or min(self.radii) <= 0
            or not self.numbers
            or 0 in self.numbers
            or self.droplets < 1
        ):
            raise UsageError("radii must be above 0, numbers not 0, and at least one droplet is needed")


def breakdown_voltage(conditions: Conditions) -> float:
    """Voltage near which the air between the plates breaks down.

    Parameters
    ----------
    conditions : Conditions
        Plate gap and density of the air.

    Returns
    -------
    voltage : float
        In V.

    Notes
    -----
    The rounded value of common practice, 3 MV/m in air of 1 atm and 20 degC, in proportion to the air's density
    (Paschen). Between level plates without sharp edges a gap of 10 mm stands 3.1 MV/m and a smaller one more, 3.3
    MV/m at 6 mm [1]_; edges, dust and droplets lower it, so no gap may be run near it.

    References
    ----------
    .. [1] E. Kuffel, W. S. Zaengl, J. Kuffel, High Voltage Engineering: Fundamentals, 2nd ed. (Newnes, 2000),
       chapter 5: for air at 20 degC V = 6.72 sqrt(p d) + 24.36 p d, in kV with p d in bar cm.
    """
    return BREAKDOWN_FIELD * conditions.air_density / _REFERENCE_DENSITY * conditions.plate_gap


@dataclass(frozen=True, slots=True)
class PlanOptions:
    """A planned recording as a person types it; None takes what the bench file says."""

    duration: str = "60 s"
    plateau: str = "3 s"
    voltage: str | None = None
    voltage_max: str | None = None
    settling: str = "0.1 s"
    pattern: str = "0,+,0,-"
    frame_rate: str | None = None
    pixel: str | None = None
    place_noise_px: float = 0.1
    view_height: str | None = None
    radii: str = "0.3,0.4,0.5,0.7,1.0 um"
    numbers: str = "-1,-2,-5,-10"
    droplets: int = 20


def planned_recording(bench: Bench, options: PlanOptions) -> Planned:
    """Read what a person typed.

    Parameters
    ----------
    bench : Bench
        Gives voltage, exposure, frame rate, pixel and height of the picture where they are not typed.
    options : PlanOptions
        As typed.

    Returns
    -------
    planned : Planned
        In SI.

    Raises
    ------
    UsageError
        One line that names the option, what was read and what is allowed.
    """
    entries = max((abs(volts) for _, volts in bench.field.entries), default=0.0)
    voltage = _typed(
        "--voltage", options.voltage, "V", abs(bench.voltage.value) if bench.voltage else entries
    )
    voltage_max, notes = _limits(bench, options, voltage)
    rate = _typed("--frame-rate", options.frame_rate, "Hz", bench.frame_rate or 25.0)
    pixel = _typed("--pixel", options.pixel, "m", bench.scale.metres_per_pixel_y)
    exposure = bench.exposure.value if bench.exposure is not None else 0.5 / rate
    values, _, unit = options.radii.rpartition(" ")
    try:
        pattern = tuple(
            {"0": 0, "off": 0, "+": 1, "-": -1}[word.strip()] for word in options.pattern.split(",")
        )
    except KeyError as error:
        raise UsageError(
            f"--pattern {options.pattern}: {error} must be 0, + or -, separated by commas"
        ) from None
    try:
        numbers = tuple(int(word) for word in options.numbers.split(","))
    except ValueError:
        raise UsageError(f"--numbers {options.numbers}: must be whole numbers separated by commas") from None
    return Planned(
        duration=_typed("--duration", options.duration, "s"), plateau=_typed("--plateau", options.plateau, "s"),
        settling=_typed("--settling", options.settling, "s"),
        voltage=voltage, pattern=pattern, frame_rate=rate, exposure=exposure, pixel=pixel,
        place_std=options.place_noise_px * pixel,
        view_height=_typed("--height", options.view_height, "m", pixel * (bench.scale.height_px or 1080)),
        radii=tuple(_typed("--radii", f"{value} {unit}", "m") for value in values.split(",")), numbers=numbers,
        droplets=options.droplets, voltage_max=voltage_max, notes=notes,
    )  # fmt: skip


def _limits(bench: Bench, options: PlanOptions, voltage: float) -> tuple[float, tuple[str, ...]]:
    """Highest voltage of the search, and what to say of it; a voltage that the air does not stand is refused."""
    breakdown, gap = breakdown_voltage(bench.conditions), bench.conditions.plate_gap
    name = "cell.voltage" if options.voltage is None else f"--voltage {options.voltage}"
    told = (f"{voltage / gap * 1e-5:.3g} kV/cm in a gap of {gap * 1e3:.3g} mm; air of this density breaks down near "
            f"{breakdown / gap * 1e-5:.2g} kV/cm, that is {breakdown:.0f} V (Paschen; rounded)")  # fmt: skip
    if voltage >= breakdown:
        raise UsageError(f"{name}: {told}; plan with {SAFE_SHARE * breakdown:.0f} V or less")
    supply = _typed("--voltage-max", options.voltage_max, "V", max(voltage, _SUPPLY))
    if supply < voltage:
        raise UsageError(f"--voltage-max {options.voltage_max}: below the planned voltage, {voltage:g} V")
    notes, safe = [], SAFE_SHARE * breakdown
    if options.voltage_max is None and voltage > _SUPPLY:
        notes.append(
            f"no --voltage-max was stated: the supply is taken to reach the planned {voltage:g} V, not more"
        )
    if voltage > safe:
        notes.append(f"WARNING, risk of sparks: {told}; common practice is half of it or less, {safe:.0f} V")
    elif supply > safe:
        notes.append(
            f"the search stops at {safe:.0f} V, half of what the air of the gap stands (common practice)"
        )
    return max(min(supply, safe), min(voltage, safe)), tuple(notes)


def _typed(option: str, text: str | None, unit: str, default: float = 0.0) -> float:
    """One quantity that a person typed, in SI."""
    if text is None:
        return default
    try:
        return parse_quantity(text, unit)[0]
    except QuantityError as error:
        raise UsageError(f"{option} {text}: {error.problem}") from error


@dataclass(frozen=True, slots=True)
class PlanRow:
    """What is expected of droplets of one radius and charge number; infinite where nothing can be had."""

    radius: float  # m
    number: int
    fall_speed: float  # m/s
    drive: float  # m/s, speed that the field-on voltage adds, without sign
    seconds: float  # in view, median over where the droplet begins
    radius_own_std: float  # relative
    radius_shared_std: float  # relative
    charge_own_std: float  # C
    charge_shared_std: float  # C
    certain: float  # share of such droplets whose number will be certain (probability above 0.95)
    limit: str  # what limits the charge


@dataclass(frozen=True, slots=True)
class Search:
    """Typical uncertainty of a charge over voltage and plateau."""

    voltages: FloatArray  # (V,) V
    plateaus: FloatArray  # (P,) s
    typical: FloatArray  # (P, V) geometric mean over the droplets of own std over e; a droplet that is lost counts 1;
    # nan where all are lost
    voltage: float  # V, best; nan if there is none
    plateau: float  # s, best; nan if there is none
    best: float  # typical uncertainty there


@dataclass(frozen=True, slots=True)
class Plan:
    """Expected precision of a planned recording, and what would be better."""

    planned: Planned
    rows: tuple[PlanRow, ...]
    typical: float  # as in `Search`, for the plan as it stands
    droplets_to_resolve: (
        int | None
    )  # of this mixture, for a charge unit in 95 of 100 cases; None: no reasonable number
    search: Search
    warnings: tuple[str, ...]

    @property
    def certain(self) -> float:
        """Share of all planned droplets whose number will be certain."""
        return float(np.mean([row.certain for row in self.rows]))


def knots(planned: Planned) -> tuple[FloatArray, FloatArray]:
    """Voltage over time as knots for `physics.increments.field_impulse`, at 1 V.

    Parameters
    ----------
    planned : Planned
        Pattern, plateau and duration.

    Returns
    -------
    times, signs : ndarray of shape (K,)
        In s, and the sign of the voltage.
    """
    count = int(np.ceil(planned.duration / planned.plateau)) + 1
    edges = planned.plateau * np.arange(count + 1)
    signs = np.array([planned.pattern[i % len(planned.pattern)] for i in range(count)], dtype=float)
    return np.repeat(edges, 2)[1:-1], np.repeat(signs, 2)


def seconds_in_view(planned: Planned, fall: float, drive: float) -> float:
    """Time until a droplet leaves the picture at its top or bottom, median over evenly spread beginnings.

    Parameters
    ----------
    planned : Planned
        Pattern, plateau, duration and view.
    fall : float
        Fall speed in m/s.
    drive : float
        Speed at a positive voltage less the fall speed, downward positive, in m/s.

    Returns
    -------
    seconds : float
        At most the duration.
    """
    times, signs = knots(planned)
    edges = np.concatenate([times[::2], times[-1:]])
    path = np.concatenate([[0.0], np.cumsum(np.diff(edges) * (fall + drive * signs[::2]))])
    fine = np.linspace(0, planned.duration, 2001)
    place = np.interp(fine, edges, path)
    lowest, highest = np.maximum.accumulate(place), np.maximum.accumulate(-place)
    start = planned.view_height * (np.arange(_STARTS) + 0.5) / _STARTS  # from the top of the view
    out = np.minimum(np.searchsorted(lowest, planned.view_height - start), np.searchsorted(highest, start))
    return float(np.median(fine[np.minimum(out, len(fine) - 1)]))


class _Tracks:
    """Information of tracks, remembered: many voltages and charges share one."""

    def __init__(self, planned: Planned, conditions: Conditions) -> None:
        self._planned, self._conditions = planned, conditions
        self.of = lru_cache(maxsize=4096)(self._of)

    def _of(self, radius: float, plateau: float, seconds: float) -> TrackInformation | None:
        planned = replace(self._planned, plateau=plateau)
        camera = Camera(planned.frame_rate, planned.exposure, planned.place_std)
        found = track_information(radius, seconds, knots(planned), camera=camera, conditions=self._conditions)
        return None if found is None else found.shortened(1 - planned.settling / plateau)


def plan_recording(bench: Bench, planned: Planned) -> Plan:
    """Tell what a planned recording can reach.

    Parameters
    ----------
    bench : Bench
        Cell, oil, air and site; its shared inputs give the shared uncertainties.
    planned : Planned
        The recording.

    Returns
    -------
    plan : Plan
        A row for each radius and charge number, the best voltage and plateau, and warnings.

    Notes
    -----
    Own uncertainties are the Cramer-Rao bound of the exact model of the steps, with the air's vertical speed
    known as well as the side drift of the planned number of droplets tells it. Certainty of a number supposes
    that the factor common to all droplets is found from them together.
    """
    tracks = _Tracks(planned, bench.conditions)
    errors = shared_errors(bench.shared_inputs)
    rows = tuple(_with_limit(row, precision, errors, bench.conditions, planned)
                 for row, precision in _rows(planned, bench.conditions, tracks))  # fmt: skip
    rows = _with_certainty(rows, planned)
    own = np.array([row.charge_own_std for row in rows]) / ELEMENTARY_CHARGE
    numbers = np.abs([row.number for row in rows])
    seen = np.isfinite(own)
    need = droplets_to_resolve(numbers[seen], own[seen]) if seen.any() else None
    search = _search(planned, bench.conditions, tracks)
    return Plan(planned, rows, _typical(own), need, search, _warnings(planned, rows))


def _rows(planned: Planned, conditions: Conditions, tracks: _Tracks) -> Iterator[tuple[PlanRow, Precision]]:
    """Rows with own uncertainties; limit and certainty are still to come."""
    for radius in planned.radii:
        fall, mobility = float(fall_speed(radius, conditions)), float(droplet_mobility(radius, conditions))
        for number in planned.numbers:
            charge = number * ELEMENTARY_CHARGE
            drive = mobility * charge * planned.voltage / conditions.plate_gap
            seconds = seconds_in_view(planned, fall, drive)
            if (fall + abs(drive)) * planned.exposure > STREAK_PX * planned.pixel:
                seconds = 0.0
            step = _TIME_STEP ** np.floor(np.log(max(seconds, 1e-3)) / np.log(_TIME_STEP))
            info = tracks.of(radius, planned.plateau, min(seconds, float(step)))
            precision = expected_precision(info, charge, conditions=conditions, voltage_factor=planned.voltage,
                                           air_speed_std=_air_std(planned, conditions))  # fmt: skip
            yield PlanRow(radius, number, fall, abs(drive), seconds, precision.log_radius_std, np.nan,
                          precision.charge_std, np.nan, 0.0, ""), precision  # fmt: skip


def _air_std(planned: Planned, conditions: Conditions) -> float:
    """Uncertainty of the air's vertical speed: that of the mean side drift of all droplets, in m/s."""
    typical = float(np.exp(np.mean(np.log(planned.radii))))
    return float(np.sqrt(2 * diffusion(typical, conditions) / planned.duration / planned.droplets))


def _with_limit(
    row: PlanRow, precision: Precision, errors: FloatArray, conditions: Conditions, planned: Planned
) -> PlanRow:  # fmt: skip
    """Add shared uncertainties and what limits the charge."""
    if not np.isfinite(row.charge_own_std):
        fast = row.seconds == 0.0
        return replace(row, limit="streaks: too fast for the exposure" if fast else "not long enough in view",
                       radius_shared_std=np.inf, charge_shared_std=np.inf)  # fmt: skip
    weight = 1 - (precision.log_radius_std / precision.log_radius_std_by_speed) ** 2
    charge = row.number * ELEMENTARY_CHARGE
    model = DropletModel(row.radius, charge, conditions, diffusion_weight=float(np.clip(weight, 0, 1)))
    shared = np.sqrt(((shared_sensitivities(model) * errors) ** 2).sum(axis=1))
    direct = precision.charge_std_at_radius**2
    still = _without_place_noise(row, planned, conditions) ** 2
    parts = {
        "Brownian motion": still, "place noise": direct - still, "radius": row.charge_own_std**2 - direct,
        "shared inputs": float(shared[1] * charge) ** 2,
    }  # fmt: skip
    return replace(row, radius_shared_std=float(shared[0]), charge_shared_std=float(shared[1]) * abs(charge),
                   limit=max(parts, key=lambda name: parts[name]))  # fmt: skip


def _without_place_noise(row: PlanRow, planned: Planned, conditions: Conditions) -> float:
    """Standard deviation of the charge at a known radius if the places were seen without noise, in C."""
    camera = Camera(planned.frame_rate, planned.exposure, 1e-3 * planned.place_std)
    info = track_information(row.radius, row.seconds, knots(planned), camera=camera, conditions=conditions)
    charge = row.number * ELEMENTARY_CHARGE
    return expected_precision(
        info, charge, conditions=conditions, voltage_factor=planned.voltage
    ).charge_std_at_radius


def _with_certainty(rows: tuple[PlanRow, ...], planned: Planned) -> tuple[PlanRow, ...]:
    """Add the share of certain numbers, the common factor being found from all droplets together."""
    own = np.array([row.charge_own_std for row in rows]) / ELEMENTARY_CHARGE
    number = np.abs(np.array([row.number for row in rows], dtype=float))
    shared = np.array([row.charge_shared_std for row in rows]) / ELEMENTARY_CHARGE / number
    seen = np.isfinite(own)
    if not seen.any():
        return rows
    prior = float(np.median(shared[seen]))
    sharp = np.exp(-4 * np.pi**2 * own[seen] ** 2)  # a number that is not certain tells nothing of the factor
    told = planned.droplets * np.mean(sharp * (number[seen] / own[seen]) ** 2)
    factor = 1 / np.sqrt(1 / max(prior, 1e-12) ** 2 + told)
    return tuple(
        replace(row, certain=certain_share(float(np.hypot(s, n * factor)))) if ok else row
        for row, s, n, ok in zip(rows, own, number, seen, strict=True)
    )


def _typical(own: NDArray[np.float64]) -> float:
    """Geometric mean of uncertainties over e, each at most 1; nan if no droplet gives a charge."""
    if not np.isfinite(own).any():
        return float("nan")
    return float(np.exp(np.mean(np.log(np.minimum(own, 1.0)))))


def _search(planned: Planned, conditions: Conditions, tracks: _Tracks) -> Search:
    """Try voltages up to the highest allowed one and plateaus up to a quarter of the duration."""
    voltages = np.geomspace(planned.voltage_max / 30, planned.voltage_max, _VOLTAGES)
    shortest = max(10 / planned.frame_rate, 5 * planned.settling)
    plateaus = np.geomspace(
        shortest, max(1.5 * shortest, min(planned.duration / 4, _LONGEST_PLATEAU)), _PLATEAUS
    )
    typical = np.empty((len(plateaus), len(voltages)))
    for i, plateau in enumerate(plateaus):
        for j, voltage in enumerate(voltages):
            trial = replace(planned, voltage=float(voltage), plateau=float(plateau))
            own = [row.charge_own_std for row, _ in _rows(trial, conditions, tracks)]
            typical[i, j] = _typical(np.array(own) / ELEMENTARY_CHARGE)
    if np.isnan(typical).all():
        return Search(voltages, plateaus, typical, np.nan, np.nan, np.nan)
    at_plateau, at_voltage = divmod(int(np.nanargmin(typical)), len(voltages))
    return Search(voltages, plateaus, typical, float(voltages[at_voltage]), float(plateaus[at_plateau]),
                  float(np.nanmin(typical)))  # fmt: skip


def _warnings(planned: Planned, rows: tuple[PlanRow, ...]) -> tuple[str, ...]:
    """Say what a person should know of this plan."""
    found = list(planned.notes)
    lost = [row for row in rows if not np.isfinite(row.charge_own_std)]
    if lost:
        found.append(f"{len(lost)} of {len(rows)} kinds of droplets give no charge: out of view or too fast")
    short = min((row.seconds for row in rows if np.isfinite(row.charge_own_std)), default=np.inf)
    if short < 12:
        found.append(f"tracks as short as {short:.1f} s: the true spread may exceed the plan by a tenth")
    if len(set(planned.pattern)) < 3:
        found.append("without all of off, + and - an offset of the field or of the air goes unseen")
    return tuple(found)
