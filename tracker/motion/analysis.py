"""Fits of all droplets of one recording: all that a person's verdicts do not change."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from functools import partial

import numpy as np

from physics.droplet import Conditions
from tracker.bench import Bench
from tracker.motion.aircurrent import AirCurrent, find_air_current, find_drift
from tracker.motion.charges import Number, SharedPart, charge_numbers
from tracker.motion.decided import Decided
from tracker.motion.droplet import Droplet, cleaned, is_one_droplet, with_histories, with_posteriors
from tracker.motion.rows import SegmentRow
from tracker.motion.shelf import Shelf, digest
from tracker.motion.tablerows import segment_rows
from tracker.motion.velocity import Orientation, Path, View, fit_orientation, paths
from tracker.records import Field, IntArray, Recording, Settings, Tracks

LAMP_RIM = 4.0  # px about the lamp's rectangle that its light blurs into


@dataclass(frozen=True, slots=True)
class Given:
    """What the tracks of one recording are evaluated with."""

    recording: Recording
    field: Field  # voltage over time
    bench: Bench  # its scale is that of the recording's pixels
    settings: Settings
    cuts: Sequence[int] | IntArray = ()  # frames at which the camera was bumped

    @property
    def view(self) -> View:
        """How the camera saw the recording."""
        return View.of(self.recording, self.field, self.bench)

    @property
    def digest(self) -> str:
        """Digest of all of it."""
        recording, volts = self.recording, self.field
        arrays = (
            recording.frame_times,
            recording.repeated,
            volts.knot_times,
            volts.knot_volts,
            volts.toggle_std,
        )
        plain = (self.bench.digest, self.settings, volts.segments, tuple(map(int, self.cuts)))
        return digest(*plain, recording.width, recording.height, arrays=arrays)


@dataclass(frozen=True, slots=True)
class Analysis:
    """Fits of all droplets of one recording."""

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
    shelf: Shelf = field(default_factory=Shelf)


def analyse(tracks: Tracks, decided: Decided, given: Given, memo: Memo) -> Analysis:
    """Fit all droplets, the air that carries them and the charge numbers that they share.

    Parameters
    ----------
    tracks : Tracks
        As linked. Gravity's direction is theirs, so that no decision on one droplet turns all others.
    decided : Decided
        The same after a person's decisions.
    given : Given
        Recording, voltage, bench and settings.
    memo : Memo
        What it holds already is not worked out again; it holds this analysis afterwards.

    Returns
    -------
    analysis : Analysis
        The same, to the last digit, whatever the memo held.
    """
    seen = tracks.sightings
    linked = digest(given.digest, arrays=(
        tracks.droplet, seen.frame, seen.x, seen.y, seen.x_std, seen.y_std, seen.brightness, seen.width, seen.flags,
    ))  # fmt: skip
    now = decided.tracks
    key = digest(linked, arrays=(decided.linked, now.droplet, now.sightings.frame, decided.trimmed))
    if memo.analysis is None or memo.key != key:
        memo.shelf.turn()
        orientation = memo.shelf.once("orientation", linked, partial(_orientation, tracks, given))
        memo.analysis, memo.key = _analysis(decided, given, orientation, memo.shelf), key
    return memo.analysis


def _analysis(decided: Decided, given: Given, orientation: Orientation, shelf: Shelf) -> Analysis:
    """Fit what is not on the shelf, and all that the droplets share."""
    bench, conditions = given.bench, given.bench.conditions
    droplets = [_cleaned(path, given, shelf) for path in _paths(decided, given, orientation)]
    moving = [(d.path, d.fit) for d in droplets if d.fit is not None and is_one_droplet(d, conditions)]
    drift = find_drift([path for path, _ in moving], [fit for _, fit in moving])
    droplets = with_histories(droplets, conditions, drift, shelf=shelf)
    air = replace(_air(droplets, conditions), drift=drift)
    droplets = with_posteriors(droplets, bench, air)
    shared = SharedPart.of(droplets, bench, air.down_std)
    numbers = charge_numbers(droplets, shared)
    segments = [shelf.once("segments", d.key, partial(segment_rows, d, given.field)) for d in droplets]
    return Analysis(orientation, droplets, air, shared, numbers, segments)


def _orientation(tracks: Tracks, given: Given) -> Orientation:
    """Find gravity in the picture."""
    return fit_orientation(tracks, given.view, down_deg=given.bench.down_deg)


def _paths(decided: Decided, given: Given, orientation: Orientation) -> list[Path]:
    """Bring tracks into metres along gravity."""
    left_out = decided.trimmed | _in_lamp(decided.tracks, given.bench)
    return paths(decided.tracks, given.view, orientation, cuts=given.cuts, left_out=left_out)


def _cleaned(path: Path, given: Given, shelf: Shelf) -> Droplet:
    """Leave out what does not belong to one droplet."""
    key = digest(path.digest, given.bench.digest, given.settings, given.field.segments)
    return shelf.once("cleaned", key, partial(cleaned, path, given.settings, key))


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
