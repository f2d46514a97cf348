"""Decisions of a person find their tracks by place and time, and survive a new measurement."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from happening_droplets import Camera, Life, made_tracks, schedule

from tracker.motion.decided import apply_decisions, effective
from tracker.records import Decision, Tracks

CAMERA = Camera(seconds=24.0, steps=schedule(4e4))
LIVES = [Life(0.7e-6, 4), Life(0.8e-6, -3, begin=2.0, end=15.0), Life(0.9e-6, 5)]


@pytest.fixture
def measured():
    return made_tracks(np.random.default_rng(101), LIVES, CAMERA)


def place(tracks, recording, number, rows=None):
    rows = np.arange(len(tracks))[tracks.rows(number)] if rows is None else rows
    chosen = rows[np.unique(np.linspace(0, len(rows) - 1, 25).astype(int))]
    times = recording.frame_times[tracks.sightings.frame[chosen]]
    columns = (times.tolist(), tracks.sightings.x[chosen].tolist(), tracks.sightings.y[chosen].tolist())
    return tuple(zip(*columns, strict=True))


def decision(verdict, where, minute=0, **options):
    return Decision(f"2026-03-02T10:{minute:02d}:00+00:00", 0, verdict, "seen by eye", where, **options)


def renumbered(tracks, order, rng, *, keep=1.0, shift=0.3):
    """The same recording measured again: other numbers, other sightings lost, places moved by a fraction of a pixel."""
    stay = np.flatnonzero(rng.random(len(tracks)) < keep)
    numbers = np.asarray(order)[tracks.droplet[stay]]
    rows = stay[np.lexsort((tracks.sightings.frame[stay], numbers))]
    seen = tracks.sightings.take(rows)
    moved = replace(seen, x=seen.x + shift * rng.standard_normal(len(rows)), y=seen.y + shift)
    return Tracks(np.sort(numbers), moved)


def test_a_verdict_finds_its_track_after_a_new_measurement(measured):
    """Numbers changed, a fifth of the sightings lost, places moved: the same droplet is judged, and no other."""
    tracks, recording = measured
    kept = decision("reject", place(tracks, recording, 1))
    again = renumbered(tracks, [2, 0, 1], np.random.default_rng(102), keep=0.8)
    found = apply_decisions(again, recording, [kept])
    assert found.verdicts == {0: ("reject", "seen by eye")}
    assert found.warnings == ()


def test_a_decision_without_its_track_is_told(measured):
    """A droplet that the new measurement does not find leaves a warning with date, verdict and reason."""
    tracks, recording = measured
    rest = Tracks(
        tracks.droplet[tracks.droplet < 2], tracks.sightings.take(np.flatnonzero(tracks.droplet < 2))
    )
    found = apply_decisions(rest, recording, [decision("doubt", place(tracks, recording, 2))])
    assert found.verdicts == {}
    assert "'doubt' of 2026-03-02" in found.warnings[0]
    assert "seen by eye" in found.warnings[0]
    assert "no longer finds its track" in found.warnings[0]


def test_a_track_that_came_back_in_two_pieces_is_judged_in_both(measured):
    """A verdict on a track holds for every piece of it."""
    tracks, recording = measured
    numbers = tracks.droplet.copy()
    rows = np.arange(len(tracks))[tracks.rows(2)]
    numbers[rows[len(rows) // 2 :]] = 3
    found = apply_decisions(
        Tracks(numbers, tracks.sightings), recording, [decision("reject", place(tracks, recording, 2))]
    )
    assert set(found.verdicts) == {2, 3}


def test_a_split_gives_the_later_part_the_next_number_and_keeps_the_linkers(measured):
    """Rows of the later part move to the end; `linked` still says where they came from, so nothing is lost."""
    tracks, recording = measured
    found = apply_decisions(tracks, recording, [decision("split", place(tracks, recording, 0), at=9.0)])
    times = recording.frame_times[found.tracks.sightings.frame]
    assert found.tracks.numbers.tolist() == [0, 1, 2, 3]
    assert times[found.tracks.droplet == 0].max() < 9.0 <= times[found.tracks.droplet == 3].min()
    assert np.array_equal(np.bincount(found.linked), np.bincount(tracks.droplet))
    back = np.lexsort((found.tracks.sightings.frame, found.linked))
    assert np.array_equal(found.tracks.sightings.x[back], tracks.sightings.x)


def test_a_verdict_on_one_part_of_a_split_leaves_the_other(measured):
    """Decisions made after a split are tied to the part they were made on, also in a new measurement."""
    tracks, recording = measured
    split = decision("split", place(tracks, recording, 0), at=9.0)
    parts = apply_decisions(tracks, recording, [split])
    later = np.flatnonzero(parts.tracks.droplet == 3)
    verdict = decision("reject", place(parts.tracks, recording, 3, rows=later), minute=1)
    again = renumbered(tracks, [1, 2, 0], np.random.default_rng(103), keep=0.9)
    found = apply_decisions(again, recording, [split, verdict])
    assert found.verdicts == {3: ("reject", "seen by eye")}


def test_a_trim_marks_what_is_left_out_and_deletes_nothing(measured):
    """Sightings outside the kept time stay in the tracks."""
    tracks, recording = measured
    found = apply_decisions(
        tracks, recording, [decision("trim", place(tracks, recording, 2), start=3.0, end=20.0)]
    )
    times = recording.frame_times[tracks.sightings.frame]
    expected = (tracks.droplet == 2) & ((times < 3.0) | (times > 20.0))
    assert np.array_equal(found.trimmed, expected)
    assert len(found.tracks) == len(tracks)


def test_a_join_puts_two_pieces_together_and_refuses_two_droplets(measured):
    """Pieces that follow one another become one; tracks in the same frames are told to be two."""
    tracks, recording = measured
    numbers = tracks.droplet.copy()
    rows = np.arange(len(tracks))[tracks.rows(2)]
    numbers[rows[300:]] = 3
    pieces = Tracks(numbers, tracks.sightings)
    first, second = place(pieces, recording, 2), place(pieces, recording, 3)
    found = apply_decisions(pieces, recording, [decision("join", first, other=3, other_place=second)])
    assert np.array_equal(found.tracks.droplet, tracks.droplet)
    both = decision("join", place(tracks, recording, 0), other=2, other_place=place(tracks, recording, 2))
    refused = apply_decisions(tracks, recording, [both])
    assert np.array_equal(refused.tracks.droplet, tracks.droplet)
    assert "same frames" in refused.warnings[0]


def test_undo_takes_back_the_last_and_reset_all_decisions_on_a_track(measured):
    """Other tracks keep theirs."""
    tracks, recording = measured
    where, elsewhere = place(tracks, recording, 0), place(tracks, recording, 2)
    made = [
        decision("trim", where, 0, start=3.0),
        decision("reject", elsewhere, 1),
        decision("doubt", where, 2),
    ]
    assert effective([*made, decision("undo", where, 3)]) == made[:2]
    assert effective([*made, decision("undo", where, 3), decision("undo", where, 4)]) == made[1:2]
    assert effective([*made, decision("reset", where, 3)]) == made[1:2]


def test_a_later_verdict_stands_before_an_earlier_one(measured):
    """The last word on a droplet counts."""
    tracks, recording = measured
    where = place(tracks, recording, 0)
    found = apply_decisions(tracks, recording, [decision("reject", where), decision("keep", where, 1)])
    assert found.verdicts[0][0] == "keep"


def test_a_split_outside_the_track_is_told(measured):
    """A split at a time at which the new track is not seen changes nothing and says so."""
    tracks, recording = measured
    found = apply_decisions(tracks, recording, [decision("split", place(tracks, recording, 1), at=20.0)])
    assert np.array_equal(found.tracks.droplet, tracks.droplet)
    assert "at 20.000 s" in found.warnings[0]


def test_inputs_stay_as_they_are(measured):
    """Tracks that go in are not changed."""
    tracks, recording = measured
    before = tracks.droplet.copy()
    apply_decisions(tracks, recording, [decision("split", place(tracks, recording, 0), at=9.0)])
    assert np.array_equal(tracks.droplet, before)
