"""Registry of the reasons that a track is doubted, rejected or noted: one frozen entry each."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Literal

Effect = Literal["note", "doubt", "reject"]


@dataclass(frozen=True, slots=True)
class Reason:
    """One reason."""

    code: str  # as in droplets.csv
    sentence: str  # that a person reads
    statistic: str  # what is compared with the threshold
    threshold: str  # with its unit
    false_alarm_rate: str  # per droplet, that the threshold stands for
    effect: Effect  # on the verdict of the droplet


_ALL = (
    Reason("too_short", "Seen too briefly for a charge.",
           "sightings used", "below 15, or below 8 steps between them", "none: counted, not estimated", "reject"),
    Reason("sparse", "Seen only here and there: chance detections, no droplet.",
           "share of the frames from first to last in which it is seen, with and without gaps over 25 frames",
           "below 0.2 and below 0.9", "none: counted, not estimated", "reject"),
    Reason("stuck", "Does not move: dirt on a window or a bright pixel, no droplet.",
           "variance of the place about its mean, times 3 over the time seen: an apparent D",
           "below a tenth of D at 5 um radius", "below 1e-4 for droplets below 3 um", "reject"),
    Reason("never_field_on", "Never seen with the field on, so it has no charge.",
           "volt seconds that the steps hold", "0", "none: known from the voltage", "reject"),
    Reason("one_voltage", "Seen at one voltage only: fall and drive cannot be told apart.",
           "share of the drive that is not drift", "below 1e-9", "none: known from the voltage", "reject"),
    Reason("not_falling", "Does not fall with the field off, so it has no radius.",
           "fall speed less 5 standard uncertainties", "below 0 on the upper side", "3e-7", "reject"),
    Reason("out_of_range", "Falls or diffuses like no droplet from 0.03 to 15 um radius.",
           "fall speed and diffusion", "beyond those of both ends", "below 1e-6", "reject"),
    Reason("imprecise", "The fall speed is too uncertain for a radius that can be used.",
           "standard uncertainty of ln radius", "above 0.3", "none: an uncertainty, not a test", "doubt"),
    Reason("charge_step", "Changed its charge; the row holds the charge of its longest part, changes.csv all of them.",
           "likelihood ratio of one more drive, largest over all times", "18", "1e-3", "note"),
    Reason("evaporation", "Shrinks; radius and charge hold at the middle of the track.",
           "likelihood ratio of a linear trend of ln radius", "10.83", "5e-4", "note"),
    Reason("growth", "Seems to grow: the air, another droplet or a changing focus moves it.",
           "likelihood ratio of a linear trend of ln radius", "10.83", "5e-4", "doubt"),
    Reason("switch", "Speed and drive both change: the track jumps to another droplet.",
           "likelihood ratio of one more speed and drive, largest over all times", "22", "1e-3", "doubt"),
    Reason("hop", "The place jumps by more than Brownian motion can explain.",
           "largest whitened step away from neighbours and lines, wrong single sightings left out", "5",
           "1e-3 in 1000 frames", "doubt"),
    Reason("outliers", "Many sightings lie far off the track and were left out.",
           "share of sightings beyond 5 standard deviations", "above 0.05", "below 1e-6", "doubt"),
    Reason("diffusion", "Its Brownian motion does not fit its fall speed: no sphere of this oil, or not one droplet.",
           "z of ln(D seen / D at the radius of the fall speed)", "beyond 3.29", "1e-3", "doubt"),
    Reason("inconsistent", "Fall speed and Brownian motion point to radii that exclude each other.",
           "overlap of the ranges of ln radius: 5 and 6 standard deviations", "none", "below 1e-6", "doubt"),
    Reason("side_drift", "Drifts sideways against the other droplets.",
           "z of the side speed less that of all droplets", "beyond 3.29", "1e-3", "doubt"),
    Reason("merged", "Often one spot with a neighbour, so that its place is uncertain.",
           "share of sightings joined with another droplet", "above 0.2", "none: counted, not estimated", "doubt"),
    Reason("out_of_focus", "Mostly out of focus.",
           "share of sightings much wider than the recording's spot", "above 0.5", "none: counted, not estimated",
           "doubt"),
    Reason("saturated", "Mostly saturated: the middle of its spot was left out of the fits.",
           "share of sightings with pixels at full scale", "above 0.5", "none: counted, not estimated", "note"),
    Reason("edge", "Mostly cut by the edge of the picture.",
           "share of sightings whose spot is cut", "above 0.3", "none: counted, not estimated", "doubt"),
    Reason("streak", "Faster than the camera can follow: its spots are streaks.",
           "share of sightings that move by more than their width in an exposure", "above 0.3",
           "none: counted, not estimated", "doubt"),
    Reason("balance", "Rests, within its uncertainty, with the field on; its balance voltage, with uncertainty,"
           " stands in recording.json under details, balances.",
           "speed with the field on, in the segment and from all segments, over its standard uncertainty",
           "below 2, and the uncertainty below a fifth of the fall speed",
           "none: an observation", "note"),
    Reason("neutral", "Carries no charge that can be seen; charge number 0.",
           "probability of charge number 0", "above 0.95", "0.05", "note"),
    Reason("number_open", "The charge number is not certain.",
           "probability of the most probable number", "below 0.95", "0.05", "note"),
    Reason("between_numbers", "The charge lies between whole numbers of e by more than its uncertainty allows.",
           "probability that the charge is on no whole number", "above 0.9", "5e-3", "note"),
    Reason("slight_inertia", "Moves so fast that the drag begins to exceed Stokes' law.",
           "excess of the drag by inertia (Oseen) at the largest speed of a segment", "above 0.1 % (Reynolds 0.0053)",
           "none: known from the speed", "note"),
    Reason("inertia", "Moves so fast that Stokes' law fails.",
           "excess of the drag by inertia (Oseen) at the largest speed of a segment", "above 1 % (Reynolds 0.053)",
           "none: known from the speed", "doubt"),
    Reason("trimmed", "A person left out part of the track.", "a decision", "made", "none", "note"),
    Reason("decided", "A person gave this verdict.", "a decision", "made", "none", "note"),
)  # fmt: skip

REASONS: Mapping[str, Reason] = MappingProxyType({reason.code: reason for reason in _ALL})
"""Every reason by its code, in the order in which they are listed."""

VERDICTS: tuple[str, str, str] = ("keep", "doubt", "reject")


def verdict_of(codes: Iterable[str]) -> str:
    """Verdict that follows from reasons.

    Parameters
    ----------
    codes : iterable of str
        Keys of `REASONS`.

    Returns
    -------
    verdict : str
        ``reject`` if any reason rejects, else ``doubt`` if any doubts, else ``keep``.
    """
    effects = {REASONS[code].effect for code in codes}
    return "reject" if "reject" in effects else "doubt" if "doubt" in effects else "keep"


def ordered(codes: Iterable[str]) -> tuple[str, ...]:
    """Put codes into the order of the registry, each once.

    Parameters
    ----------
    codes : iterable of str
        Keys of `REASONS`.

    Returns
    -------
    codes : tuple of str
        For `droplets.csv`.
    """
    given = set(codes)
    unknown = given - set(REASONS)
    if unknown:
        raise ValueError(f"unknown reason {sorted(unknown)[0]!r}: must be one of {', '.join(REASONS)}")
    return tuple(code for code in REASONS if code in given)


def reasons_table() -> str:
    """Give the README's table of reasons.

    Returns
    -------
    text : str
        Markdown, one row a reason, in the order of the registry, with a newline at the end.
    """
    lines = [
        "| code | what it says | statistic | threshold | false alarms per droplet | effect |",
        "|---|---|---|---|---|---|",
    ]
    for reason in REASONS.values():
        cells = (
            f"`{reason.code}`",
            reason.sentence,
            reason.statistic,
            reason.threshold,
            reason.false_alarm_rate,
            reason.effect,
        )
        lines.append("| " + " | ".join(cells) + " |")
    return "\n".join(lines) + "\n"
