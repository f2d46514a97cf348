"""From what is known of one droplet to the codes of its reasons; thresholds as `verdict` states them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from physics.drag import reynolds_number, stokes_check
from physics.droplet import Conditions, diffusion
from physics.motion import MIN_INCREMENTS, DropletPosterior
from tracker.motion.aircurrent import AirCurrent
from tracker.motion.changes import History
from tracker.motion.rows import SegmentRow
from tracker.motion.velocity import Path
from tracker.records import Flag, IntArray, Settings

Z_LIMIT = 3.29  # two-sided 1 in 1000
LARGEST_RADIUS = 5e-6  # m, of a droplet that must not be taken for dirt
STUCK_SHARE = 0.1  # of that droplet's diffusion
LONG_GAP = 25  # frames: a droplet may leave the picture and come back
LEAST_FILLED, LEAST_FILLED_NEAR = 0.2, 0.9  # shares of frames with a sighting: of all, and without long gaps
LITTLE_INERTIA, MUCH_INERTIA = 1e-3, 1e-2  # excess of the drag that is noted, and that is doubted
REST = 2.0  # standard uncertainties within which a speed is 0
SURE = 0.95  # probability from which a charge number is called certain
SHARES = (
    ("merged", Flag.MERGED, 0.2), ("out_of_focus", Flag.SOFT, 0.5), ("saturated", Flag.SATURATED, 0.5),
    ("edge", Flag.EDGE, 0.3), ("streak", Flag.STREAK, 0.3),
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Facts:
    """What a verdict rests on."""

    path: Path
    flags: IntArray  # of all sightings of the track
    outliers: int  # sightings left out
    hops: int
    history: History | None
    posterior: DropletPosterior | None
    conditions: Conditions
    number: int | None
    number_probability: float
    on_no_number: float  # probability that the charge is on no whole number
    fastest: float  # m/s, largest speed of a segment


@dataclass(frozen=True, slots=True)
class Balance:
    """A droplet at rest with the field on."""

    segment: int
    time: float  # s, middle of the segment
    time_std: float  # s, of a time somewhere in the segment
    voltage: float  # V at which it would hang still
    voltage_std: float  # V, own
    statistic: float  # |speed| over its standard uncertainty, in the segment or from all, whichever is larger
    threshold: float = REST


def reasons_of(facts: Facts, air: AirCurrent, rests: Sequence[Balance], settings: Settings) -> list[str]:
    """Give the codes of all reasons that hold for one droplet.

    Parameters
    ----------
    facts : Facts
        Of the droplet.
    air : AirCurrent
        That all droplets share.
    rests : sequence of Balance
        Where the droplet rests with the field on.
    settings : Settings
        Least number of sightings.

    Returns
    -------
    codes : list of str
        Keys of `tracker.motion.verdict.REASONS`.
    """
    codes = [code for code, flag, most in SHARES if _share(facts.flags, flag) > most]
    if is_stuck(facts.path, facts.conditions):
        return [*codes, "stuck"]
    if is_sparse(facts.path):
        return [*codes, "sparse"]
    history, posterior = facts.history, facts.posterior
    if len(facts.path) < settings.min_frames or history is None or posterior is None:
        return [*codes, "too_short"]
    if facts.hops:
        codes.append("hop")
    if facts.outliers > max(2, 0.05 * len(facts.flags)):
        codes.append("outliers")
    codes += [change.kind for change in history.changes]
    codes += _speed_codes(facts, history, posterior, air)
    codes += _charge_codes(facts, history, posterior)
    if rests:
        codes.append("balance")
    return codes


def _share(flags: IntArray, flag: Flag) -> float:
    return float(np.mean((flags & int(flag)) != 0)) if len(flags) else 0.0


def is_sparse(path: Path) -> bool:
    """Tell whether a track is held together by chance detections.

    Parameters
    ----------
    path : Path
        Of one track.

    Returns
    -------
    sparse : bool
        Seen in few of its frames, also without the long gaps of a droplet that left the picture and came back.
    """
    gaps = np.diff(path.frames)
    near = gaps[gaps <= LONG_GAP]
    filled = len(gaps) < LEAST_FILLED * np.sum(gaps)
    return bool(filled and len(near) < LEAST_FILLED_NEAR * max(np.sum(near), 1))


def is_stuck(path: Path, conditions: Conditions) -> bool:
    """Tell whether a place spreads less than Brownian motion of a large droplet makes it.

    Parameters
    ----------
    path : Path
        Of one track.
    conditions : Conditions
        Of the bench.

    Returns
    -------
    stuck : bool
        True for dirt on a window or a bright pixel; False for a track too short to tell.
    """
    if len(path) < MIN_INCREMENTS:
        return False
    spread = float(np.var(path.down) + np.var(path.side)) / 2
    # A diffusing place has the variance D T / 3 about its mean over a time T.
    apparent = 3 * spread / float(path.times[-1] - path.times[0])
    return apparent < STUCK_SHARE * float(diffusion(LARGEST_RADIUS, conditions))


def _speed_codes(facts: Facts, history: History, posterior: DropletPosterior, air: AirCurrent) -> list[str]:
    """Reasons that rest on speeds and Brownian motion."""
    codes, fit = [], history.fit
    drift = (fit.side_speed - air.side) / float(np.hypot(fit.side_speed_std, air.side_std))
    if abs(drift) > Z_LIMIT:
        codes.append("side_drift")
    if abs(posterior.diffusion_z) > Z_LIMIT:
        codes.append("diffusion")
    if posterior.inconsistent:
        codes.append("inconsistent")
    if posterior.log_radius_std > 0.3:
        codes.append("imprecise")
    return codes + inertia_codes(posterior.radius, facts.fastest, facts.conditions)


def inertia_codes(radius: float, speed: float, conditions: Conditions) -> list[str]:
    """Tell how far the inertia of the air lets the drag exceed Stokes' law.

    Parameters
    ----------
    radius : float
        In m; nan gives no code.
    speed : float
        Largest speed in m/s.
    conditions : Conditions
        Of the bench.

    Returns
    -------
    codes : list of str
        None up to 0.1 % of the drag, ``slight_inertia`` up to 1 %, then ``inertia``.
    """
    if not np.isfinite(radius):
        return []
    number = reynolds_number(
        radius, speed, air_density=conditions.air_density, viscosity=conditions.viscosity
    )  # fmt: skip
    if stokes_check(number, tolerance=LITTLE_INERTIA).holds:
        return []
    return ["slight_inertia" if stokes_check(number, tolerance=MUCH_INERTIA).holds else "inertia"]


def fastest_of(segments: Sequence[SegmentRow], history: History | None) -> float:
    """Largest speed along gravity that the fits show; single steps are mostly Brownian motion.

    Parameters
    ----------
    segments : sequence of SegmentRow
        Of one droplet; speeds uncertain by more than a fifth do not count.
    history : History or None
        Its fall speed counts, too.

    Returns
    -------
    speed : float
        In m/s, 0 or more.
    """
    sure = [abs(s.down_speed_m_s) for s in segments if s.down_speed_std_m_s < 0.2 * abs(s.down_speed_m_s)]
    fall = 0.0 if history is None or not np.isfinite(history.fit.fall_speed) else abs(history.fit.fall_speed)
    return float(max([fall, *sure]))


def _charge_codes(facts: Facts, history: History, posterior: DropletPosterior) -> list[str]:
    """Reasons that rest on the charge, or on why there is none."""
    if posterior.reason:
        return ["too_short" if posterior.reason == "too_few_steps" else posterior.reason]
    if not np.isfinite(history.fit.fall_speed):
        return ["one_voltage"]
    if facts.number is None:
        return []
    if facts.number == 0 and facts.number_probability > SURE:
        return ["neutral"]
    codes = [] if facts.number_probability >= SURE else ["number_open"]
    return [*codes, "between_numbers"] if facts.on_no_number > 0.9 else codes


def balances(segments: Sequence[SegmentRow], history: History) -> list[Balance]:
    """Find the segments with the field on in which a droplet rests.

    Parameters
    ----------
    segments : sequence of SegmentRow
        Of one droplet.
    history : History
        Of the same droplet.

    Returns
    -------
    balances : list of Balance
        A segment counts if its speed is 0 within 2 standard uncertainties, these are below a fifth of the fall
        speed, and the speed that all segments together give for its voltage is 0 within 2 of its own as well:
        one short segment alone would call a slow droplet at rest. The balance voltage comes from all segments:
        -fall speed / drive per volt, of the part of the charge that holds there.
    """
    fit = history.fit
    found: list[Balance] = []
    if not np.isfinite(fit.fall_speed):
        return found
    for row in segments:
        small = row.down_speed_std_m_s < 0.2 * abs(fit.fall_speed)
        if row.voltage_v == 0 or not small or abs(row.down_speed_m_s) > REST * row.down_speed_std_m_s:
            continue
        middle = 0.5 * (row.start_s + row.end_s)
        part = history.part_at(middle)
        if part is None:
            continue  # the part of a track that a switch left out
        drive = float(fit.drive_per_volt[part])
        if not abs(drive * row.voltage_v) > 0.5 * abs(fit.fall_speed):
            continue  # a slow droplet without drive rests nowhere
        voltage = -fit.fall_speed / drive
        std = _joint_std(history, part, (-1 / drive, fit.fall_speed / drive**2))
        here = abs(row.down_speed_m_s) / row.down_speed_std_m_s
        overall = abs(fit.fall_speed + drive * row.voltage_v) / _joint_std(
            history, part, (1.0, row.voltage_v)
        )
        if overall > REST:
            continue
        half = 0.5 * (row.end_s - row.start_s)
        found.append(Balance(row.segment, middle, half / np.sqrt(3), voltage, std, max(here, overall)))
    return found


def _joint_std(history: History, part: int, slopes: tuple[float, float]) -> float:
    """Standard uncertainty of what is linear in the fall speed and the drive per volt of one part."""
    covariance = np.where(np.isfinite(history.fit.covariance), history.fit.covariance, 0.0)
    slope = np.zeros(len(covariance))
    slope[0], slope[1 + part] = slopes
    return max(float(np.sqrt(slope @ covariance @ slope)), 1e-300)
