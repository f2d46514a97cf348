"""Sightings of one droplet become one track, through crowds, gaps, exits and changes of the field."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from moving_spots import Crowd, draw
from tracking_scores import as_tracks, score, switches

from tracker.records import Settings, Tracks
from tracker.seeing.clocks import clocks_of
from tracker.seeing.link import link
from tracker.seeing.stitch import best_joins


def owners(crowd: Crowd, tracks: Tracks) -> np.ndarray:
    """Owner of each row of the tracks, found again by frame and place."""
    s = crowd.seen.sightings
    known = {(f, x): o for f, x, o in zip(s.frame.tolist(), s.x.tolist(), crowd.owner.tolist(), strict=True)}
    rows = zip(tracks.sightings.frame.tolist(), tracks.sightings.x.tolist(), strict=True)
    return np.array([known[r] for r in rows])


def scores(crowd: Crowd, tracks: Tracks):
    """Scores against the sightings with owners, which linking cannot exceed."""
    s, real = crowd.seen.sightings, crowd.owner >= 0
    truth = as_tracks(crowd.owner[real], s.frame[real], s.x[real], s.y[real])
    t = tracks.sightings
    return score(truth, as_tracks(tracks.droplet, t.frame, t.x, t.y))


def test_crowd_with_known_field_keeps_every_droplet():
    """Of crossing droplets, with misses, merging, false sightings and re-entries, each is one track."""
    crowd = draw(droplets=40, seconds=16, size=(500, 400), seed=1)
    tracks = link(crowd.seen, field=crowd.field, settings=Settings())
    result = scores(crowd, tracks)
    assert result.jaccard_tracks >= 0.95
    assert switches(tracks.droplet, owners(crowd, tracks)) == 0
    assert result.jaccard >= 0.99
    assert result.alpha >= 0.98


def test_crowd_with_unknown_field_is_still_linked():
    """Without the voltage the same droplets are followed through most of their lives."""
    crowd = draw(droplets=40, seconds=16, size=(500, 400), seed=1)
    tracks = link(crowd.seen, field=None, settings=Settings())
    assert scores(crowd, tracks).jaccard >= 0.92
    assert switches(tracks.droplet, owners(crowd, tracks)) <= 2


def test_late_log_does_little_harm():
    """A voltage log three frames late costs no droplet."""
    crowd = draw(droplets=20, seconds=12, size=(500, 400), seed=4)
    late = replace(
        crowd.field,
        segments=tuple(replace(s, start=s.start + 0.12, end=s.end + 0.12) for s in crowd.field.segments),
        knot_times=crowd.field.knot_times + 0.12,
    )
    tracks = link(crowd.seen, field=late, settings=Settings())
    assert scores(crowd, tracks).jaccard >= 0.98
    assert switches(tracks.droplet, owners(crowd, tracks)) == 0


def test_gap_is_bridged_and_short_tracks_are_dropped():
    """A droplet hidden for 30 frames keeps its number; one with ten sightings is no droplet."""
    crowd = draw(droplets=8, seconds=8, size=(500, 400), seed=7, missed=0.0, false=0.0)
    s, lives = crowd.seen.sightings, np.bincount(crowd.owner)
    whole, brief = np.flatnonzero(lives == 200)[:2]  # in sight from the first frame to the last
    hidden = (crowd.owner == whole) & (s.frame >= 80) & (s.frame < 110)
    late = (crowd.owner == brief) & (s.frame >= 10)
    kept = crowd.seen.sightings.take(~hidden & ~late)
    tracks = link(replace(crowd.seen, sightings=kept), field=crowd.field, settings=Settings(min_frames=15))
    own = owners(crowd, tracks)
    numbers = np.unique(tracks.droplet[own == whole])
    assert len(numbers) == 1
    assert np.count_nonzero(tracks.droplet == numbers[0]) == 170
    assert brief not in own


def test_cut_parts_tracks():
    """No track goes across a frame at which the camera was moved."""
    crowd = draw(droplets=4, seconds=8, size=(500, 400), seed=8, missed=0.0, false=0.0)
    seen = replace(crowd.seen, cuts=np.array([100]))
    tracks = link(seen, field=crowd.field, settings=Settings())
    for d in tracks.numbers:
        frames = tracks.sightings.frame[tracks.rows(int(d))]
        assert frames.max() < 100 or frames.min() >= 100
    assert len(tracks.numbers) > len(np.unique(crowd.owner))


def test_nothing_seen_gives_empty_tracks():
    """No sighting is an empty table of tracks."""
    crowd = draw(droplets=2, seconds=2, size=(200, 200), seed=1)
    empty = replace(crowd.seen, sightings=crowd.seen.sightings.take(np.zeros(0, int)))
    assert len(link(empty, field=crowd.field, settings=Settings())) == 0


def test_clocks_add_up_to_the_time():
    """The times spent at all voltages add up to the time since the first frame."""
    crowd = draw(droplets=1, seconds=9, size=(200, 200), seed=1)
    clocks = clocks_of(crowd.seen.recording, crowd.field)
    np.testing.assert_allclose(clocks.elapsed.sum(1), clocks.times - clocks.times[0], atol=1e-12)
    assert clocks.states == 2
    np.testing.assert_allclose(clocks.toggles, [2, 4, 6, 8])


def test_joins_are_of_the_largest_total_gain():
    """Joins are chosen together: 6 + 6 beats 10 + nothing, and a pair that gains less than staying alone is left."""
    a, b = best_joins(np.array([0, 0, 1]), np.array([5, 6, 5]), np.array([10.0, 6.0, 6.0]))
    assert sorted(zip(a.tolist(), b.tolist(), strict=True)) == [(0, 6), (1, 5)]
    a, b = best_joins(np.array([0, 1]), np.array([5, 5]), np.array([3.0, 4.0]))
    assert (a.tolist(), b.tolist()) == ([1], [5])


@pytest.mark.parametrize("rate", [5.0, 200.0])
def test_slow_and_fast_cameras(rate):
    """Five and two hundred frames a second are linked alike."""
    crowd = draw(droplets=6, seconds=20 if rate < 10 else 4, size=(500, 400), seed=3, rate=rate)
    tracks = link(crowd.seen, field=crowd.field, settings=Settings())
    assert switches(tracks.droplet, owners(crowd, tracks)) == 0
    assert scores(crowd, tracks).jaccard >= 0.97
