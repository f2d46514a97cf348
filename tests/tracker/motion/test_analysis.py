"""Decisions made one after another with a memo give what each gives alone, and fit no more than they must."""

from __future__ import annotations

from dataclasses import fields

import numpy as np
import pytest
from happening_droplets import Camera, Life, evaporated, made_bench, made_tracks, schedule

from tracker.motion import analysis
from tracker.motion.analysis import Given, Memo
from tracker.motion.droplets import evaluate_droplets
from tracker.motion.field import field_from_list
from tracker.records import Decision, Settings

CAMERA = Camera(seconds=18.0, steps=schedule(4e4, seconds=18.0))
STEADY = [
    Life(0.7e-6, 4),
    Life(0.8e-6, -3),
    Life(0.6e-6, 2),
    Life(0.9e-6, -5),
    Life(0.7e-6, 1),
    Life(0.75e-6, 3),
]
SHRINKING = [evaporated(life, 0.12, 18.0) for life in STEADY]


def case(tmp_path, seed, lives, **motion):
    """Droplets one of which was lost for a while, with what they are evaluated with."""
    lives = [*lives, Life(0.8e-6, 5, end=9.0), Life(0.8e-6, 5, begin=12.0)]
    tracks, recording = made_tracks(np.random.default_rng(seed), lives, CAMERA, **motion)
    bench = made_bench(tmp_path, CAMERA)
    return tracks, Given(recording, field_from_list(bench.field.entries, recording), bench, Settings())


def decision(verdict, tracks, given, number, **options):
    """A person's decision on one linked track."""
    rows = np.arange(len(tracks))[tracks.rows(number)]
    chosen = rows[np.unique(np.linspace(0, len(rows) - 1, 25).astype(int))]
    seen = tracks.sightings
    place = tuple(
        zip(given.recording.frame_times[seen.frame[chosen]], seen.x[chosen], seen.y[chosen], strict=True)
    )
    if "other" in options:
        options["other_place"] = decision("keep", tracks, given, options["other"]).place
    return Decision("2026-03-02T10:00:00+00:00", number, verdict, "seen by eye", place, **options)


def assert_same(one, two):
    """All parts of two evaluations are equal to the last digit; nan equals nan."""
    assert one.tracks.droplet.tolist() == two.tracks.droplet.tolist()
    for part in (f.name for f in fields(one) if f.name != "tracks"):
        assert repr(np.asarray(getattr(one, part)).tolist()) == repr(
            np.asarray(getattr(two, part)).tolist()
        ), part


@pytest.mark.parametrize(
    ("lives", "motion"),
    [(STEADY, {}), (SHRINKING, {}), (STEADY, {"gust": (8e-6, 1.2e-5)})],
    ids=["steady", "shrinking", "changing current"],
)
def test_a_memo_changes_nothing(tmp_path, lives, motion):
    """Split, trim, join, reject and taking back give the same rows with a memo as without one."""
    tracks, given = case(tmp_path, 501, lives, **motion)
    every = [
        decision("split", tracks, given, 1, at=10.0),
        decision("trim", tracks, given, 2, start=4.0, end=16.0),
        decision("join", tracks, given, 6, other=7),
        decision("reject", tracks, given, 3),
    ]
    memo, counts = Memo(), []
    for decisions in ((), every[:1], every[:3], every, every[1:], ()):
        found = evaluate_droplets(tracks, given, decisions=decisions, memo=memo)
        assert_same(found, evaluate_droplets(tracks, given, decisions=decisions))
        counts.append(len(found.droplets))
    assert counts == [8, 9, 8, 8, 7, 8]
    if motion:
        assert found.air_current["changing"]


def test_a_decision_on_one_droplet_fits_that_one_alone(tmp_path, monkeypatch):
    """A split cleans two tracks and a trim one; a verdict and what is taken back clean none."""
    tracks, given = case(tmp_path, 502, STEADY)
    cleaned = []
    monkeypatch.setattr(
        analysis,
        "cleaned",
        lambda path, *rest, clean=analysis.cleaned: cleaned.append(path.droplet) or clean(path, *rest),
    )
    split, trim = (
        decision("split", tracks, given, 1, at=10.0),
        decision("trim", tracks, given, 2, start=4.0, end=16.0),
    )
    memo = Memo()
    for decisions, wanted in (
        ((), list(range(8))), ((split,), [1, 8]), ((split, trim), [2]), ((split,), []),
        ((split, decision("reject", tracks, given, 0)), []),
    ):  # fmt: skip
        cleaned.clear()
        evaluate_droplets(tracks, given, decisions=decisions, memo=memo)
        assert cleaned == wanted


def test_a_memo_does_not_grow(tmp_path):
    """After a dozen trims it holds no more than three analyses need: four entries for a droplet, one for gravity."""
    tracks, given = case(tmp_path, 503, STEADY[:2])
    memo = Memo()
    for k in range(12):
        evaluate_droplets(
            tracks, given, decisions=[decision("trim", tracks, given, 0, start=0.4 * k)], memo=memo
        )
    assert len(memo.shelf) <= 3 * (4 * 4 + 1)
