"""The file of decisions: appended, read back, robust to a half-written line, tied to place and time."""

from __future__ import annotations

import json
from datetime import UTC, datetime

import numpy as np
import pandas as pd
import pytest

from tracker.errors import DecisionError
from tracker.keeping.decisions import append_decision, make_decision, read_decisions
from tracker.keeping.store import Result

NOW = datetime(2026, 3, 2, 10, 15, 4, 250_000, tzinfo=UTC)


@pytest.fixture
def result(tmp_path):
    """Droplet 0 for 100 frames, droplet 1 for the 50 frames after, droplet 2 for all."""
    parts = []
    for number, frames in ((0, range(100)), (1, range(100, 150)), (2, range(150))):
        f = np.array(frames)
        parts.append(pd.DataFrame({"droplet": number, "frame": f, "time_s": f * 0.04, "x_px": 50.0 + 100 * number,
                                   "y_px": 20.0 + 0.5 * f}))  # fmt: skip
    empty = pd.DataFrame()
    return Result(tmp_path, pd.concat(parts, ignore_index=True), empty, empty, empty)


def test_a_decision_is_appended_and_read_back_as_it_was_made(result, tmp_path):
    """Three decisions come back equal and in order; the file holds the columns of the contract and is only longer."""
    made = [
        make_decision(result, droplet=2, verdict="reject", reason=' two "droplets",\nagain ', now=NOW),
        make_decision(result, droplet=0, verdict="split", at=2.0, now=NOW),
        make_decision(result, droplet=0, verdict="join", other=1, reason="one droplet", now=NOW),
    ]
    before = b""
    for decision in made:
        append_decision(tmp_path, decision)
        after = (tmp_path / "decisions.jsonl").read_bytes()
        assert after.startswith(before)
        before = after
    assert read_decisions(tmp_path) == tuple(made)
    lines = [json.loads(line) for line in before.decode().splitlines()]
    assert all({"time", "droplet", "verdict", "reason"} <= set(line) for line in lines)
    assert lines[0]["time"] == "2026-03-02T10:15:04.250+00:00"
    assert lines[0]["reason"] == 'two "droplets", again'
    assert (lines[1]["at_s"], lines[2]["other"]) == (2.0, 1)


def test_a_decision_carries_samples_of_its_track(result):
    """First and last sighting and 23 between, as time and place."""
    place = make_decision(result, droplet=2, verdict="doubt", reason="blurred").place
    assert len(place) == 25
    assert place[0] == (0.0, 250.0, 20.0)
    assert place[-1] == (149 * 0.04, 250.0, 94.5)


def test_a_half_written_last_line_is_passed_over_and_the_next_append_is_whole(result, tmp_path):
    """A crash in the middle of a line loses that line only, wherever it is cut."""
    first = make_decision(result, droplet=0, verdict="reject", reason="dirt")
    second = make_decision(result, droplet=1, verdict="doubt", reason="blurred")
    append_decision(tmp_path, first)
    path = tmp_path / "decisions.jsonl"
    whole = path.read_bytes()
    line = whole.rstrip(b"\n")
    for cut in (1, len(line) // 2, len(line) - 1):
        path.write_bytes(whole + line[:cut])
        assert read_decisions(tmp_path) == (first,)
        append_decision(tmp_path, second)
        assert read_decisions(tmp_path)[-1] == second
        assert first in read_decisions(tmp_path)


def test_a_damaged_line_in_the_middle_is_an_error_with_its_number(result, tmp_path):
    """What is not the beginning of a decision is not passed over in silence."""
    append_decision(tmp_path, make_decision(result, droplet=0, verdict="reject", reason="dirt"))
    path = tmp_path / "decisions.jsonl"
    path.write_text('{"verdict": "burn"}\n' + path.read_text(), encoding="utf-8")
    with pytest.raises(DecisionError, match="line 1") as caught:
        read_decisions(tmp_path)
    assert "decisions.jsonl" in str(caught.value)


def test_no_file_is_no_decision(tmp_path):
    """A folder without decisions, or no folder at all, gives none."""
    assert read_decisions(tmp_path) == ()
    assert read_decisions(tmp_path / "none") == ()


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"droplet": 7, "verdict": "reject", "reason": "x"}, "no droplet 7; the result has 0 to 2"),
        ({"droplet": 0, "verdict": "burn", "reason": "x"}, "must be one of keep, doubt, reject"),
        ({"droplet": 0, "verdict": "reject"}, "needs a reason"),
        ({"droplet": 0, "verdict": "reject", "reason": "  "}, "needs a reason"),
        ({"droplet": 0, "verdict": "split"}, "seen from 0.000 to 3.960 s"),
        ({"droplet": 0, "verdict": "split", "at": 5.0}, "time within the track"),
        ({"droplet": 0, "verdict": "trim"}, "from or to which"),
        ({"droplet": 0, "verdict": "trim", "start": 9.0}, "leave some"),
        ({"droplet": 0, "verdict": "join"}, "another droplet"),
        ({"droplet": 0, "verdict": "join", "other": 0}, "another droplet"),
        ({"droplet": 0, "verdict": "join", "other": 2}, "same frames"),
    ],
)
def test_what_cannot_be_decided_is_one_line_that_says_why(result, options, words):
    """Droplet, verdict, reason and times are checked before anything is written."""
    with pytest.raises(DecisionError, match=words) as caught:
        make_decision(result, **options)
    assert "\n" not in str(caught.value)


def test_a_folder_that_cannot_be_written_is_told(result, tmp_path):
    """The error names the file."""
    decision = make_decision(result, droplet=0, verdict="reset")
    (tmp_path / "decisions.jsonl").mkdir()
    with pytest.raises(DecisionError, match="cannot be written"):
        append_decision(tmp_path, decision)


def test_undo_and_reset_need_no_reason(result):
    """They say what they do by themselves."""
    assert make_decision(result, droplet=0, verdict="reset").reason == ""
