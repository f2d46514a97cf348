"""The field from a list and from a lamp, and two sources against one another."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tracker.errors import FieldError
from tracker.motion.field import (
    compare_fields,
    describe,
    field_from_lamp,
    field_from_list,
    field_of_steps,
    uncertain_spans,
    voltage_at,
)
from tracker.records import Recording

TIMES = np.arange(500) * 0.04
EXPOSURE = 0.02
STEPS = [(0.0, 0.0), (2.0, 260.0), (4.4, 0.0), (6.8, 260.0)]


@pytest.fixture
def recording():
    return Recording(Path("clip.avi"), "0" * 64, 64, 48, TIMES, [], 0, False, 8, 255.0, "ffv1")


def lamp_grey(toggles, rng, *, noise=0.5, flicker=0.0):
    """Mean grey of a lamp: 20 dark, 180 lit, in proportion to the lit share of each exposure."""
    lit = np.zeros(len(TIMES))
    for on, off in zip(toggles[::2], [*toggles[1::2], 1e9][: len(toggles[::2])], strict=True):
        lit += np.clip(np.minimum(TIMES + EXPOSURE, off) - np.maximum(TIMES, on), 0, None) / EXPOSURE
    wave = 1 + flicker * np.sin(2 * np.pi * 3.7 * TIMES)
    return 20 + 160 * lit * wave + noise * rng.standard_normal(len(TIMES))


def test_a_list_holds_each_voltage_until_the_next_time(recording):
    """Segments and knots follow the list to the end of the recording."""
    field = field_from_list(STEPS, recording)
    assert [(s.start, s.voltage) for s in field.segments] == STEPS
    assert field.segments[-1].end == pytest.approx(
        TIMES[-1] + 0.04
    )  # one frame interval behind the last frame
    assert voltage_at(field, [1.9, 2.1, 5.0, 100.0]).tolist() == [0.0, 260.0, 0.0, 260.0]
    assert field.toggle_std.tolist() == [0.0, 0.0, 0.0]


def test_equal_neighbours_and_entries_outside_the_recording_make_no_segment(recording):
    """A voltage stated twice is one segment; entries before and behind the recording leave only what holds."""
    field = field_from_list([(-5.0, 100.0), (-1.0, 0.0), (2.0, 260.0), (3.0, 260.0), (50.0, 0.0)], recording)
    assert [(s.start, s.voltage) for s in field.segments] == [(0.0, 0.0), (2.0, 260.0)]


@pytest.mark.parametrize(("entries", "words"), [([], "empty"), ([(1.0, 0.0)], "after the first frame")])
def test_a_list_that_leaves_the_start_open_is_refused(recording, entries, words):
    """The message says what is missing."""
    with pytest.raises(FieldError, match=words):
        field_from_list(entries, recording)


def test_only_badly_known_toggles_give_an_uncertain_stretch(recording):
    """A toggle known to 1 ms counts as known at 40 ms a frame; one known to 20 ms leaves 3 of them to either side."""
    field = field_of_steps(
        "list", [0.0, 2.0, 4.0], [0.0, 260.0, 0.0], span=(0.0, 20.0), toggle_std=[0, 1e-3, 2e-2]
    )
    spans = uncertain_spans(field, frame_interval=0.04)
    assert spans == pytest.approx(np.array([[3.94, 4.06]]))


def test_lamp_toggles_are_placed_within_the_frame_by_the_grey_value(recording):
    """Half-lit frames give toggles whose errors are as stated, far below an exposure."""
    rng = np.random.default_rng(11)
    toggles = np.array([2.005, 4.416, 6.812, 9.204, 11.618, 14.009])  # each inside an exposure
    field = field_from_lamp(lamp_grey(toggles, rng), recording, exposure=EXPOSURE, voltage=260.0)
    found = np.array([s.end for s in field.segments[:-1]])
    assert [s.voltage for s in field.segments] == [0.0, 260.0] * 3 + [0.0]
    # Grey noise 0.5 of 160 makes 0.06 ms of an exposure of 20 ms; the median of 11 frames on either side adds a third.
    assert np.max(np.abs(found - toggles)) < 5 * 0.07e-3
    assert np.all(field.toggle_std < 0.3e-3)


def test_a_lamp_toggle_between_two_exposures_lies_in_the_dead_time(recording):
    """Without a half-lit frame the toggle is amid the dead time, with a uniform distribution's deviation."""
    rng = np.random.default_rng(12)
    field = field_from_lamp(lamp_grey([2.033, 4.425], rng), recording, exposure=EXPOSURE, voltage=260.0)
    found = np.array([s.end for s in field.segments[:-1]])
    assert np.abs(found - [2.033, 4.425]) == pytest.approx(
        [0.003, 0.005], abs=0.1e-3
    )  # middles: 2.030 and 4.430
    # 20 ms dead time over sqrt(12), widened by the shares of an exposure that cannot be told (about 5 % each).
    assert field.toggle_std == pytest.approx(0.02 / np.sqrt(12), rel=0.15)


def test_a_flickering_lamp_gives_the_same_segments_with_wider_uncertainty(recording):
    """A lamp that flickers by 20 %, with single dark frames, has the same toggles within three of its deviations."""
    rng = np.random.default_rng(13)
    toggles = np.array([2.005, 4.416, 6.812, 9.204])
    grey = lamp_grey(toggles, rng, flicker=0.2)
    grey[[70, 200]] = 20.0  # dropped out for one frame
    field = field_from_lamp(grey, recording, exposure=EXPOSURE, voltage=260.0)
    found = np.array([s.end for s in field.segments[:-1]])
    assert len(found) == 4
    assert np.all(np.abs(found - toggles) < 3 * field.toggle_std + 1e-4)
    assert np.all(field.toggle_std < 0.02)


def test_a_saturated_lamp_does_not_tell_the_place_within_the_exposure(recording):
    """A lamp at full scale that is lit for part of an exposure looks lit for all of it."""
    grey = np.minimum(lamp_grey([2.005, 4.413], np.random.default_rng(14)) * 2, 255.0)
    field = field_from_lamp(grey, recording, exposure=EXPOSURE, voltage=260.0)
    # From the end of the last dark exposure at 1.98 s to the end of the first lit one at 2.02 s, and the reverse.
    assert [s.end for s in field.segments[:-1]] == pytest.approx([2.0, 4.42], abs=1e-3)
    assert field.toggle_std == pytest.approx(0.04 / np.sqrt(12), rel=0.1)


def test_a_lamp_that_never_changes_is_refused(recording):
    """Grey values of one group are an error that shows their range; 200 recordings of noise give none that passes."""
    rng = np.random.default_rng(15)
    for _ in range(200):
        with pytest.raises(FieldError, match="one group"):
            field_from_lamp(30 + rng.standard_normal(len(TIMES)), recording, exposure=EXPOSURE, voltage=260.0)


def test_two_sources_that_agree_within_a_frame_are_accepted(recording):
    """Toggles that differ by less than a frame, and voltages by a few per cent, are no disagreement."""
    moved = [(0.0, 0.0)] + [(t + 0.03, v * 1.03) for t, v in STEPS[1:]]
    compare_fields(field_from_list(STEPS, recording), field_from_list(moved, recording), recording)


def test_two_sources_that_disagree_are_an_error_that_shows_both(recording):
    """The message holds the time, both voltages and both sources."""
    late = [(0.0, 0.0)] + [(t + 0.5, v) for t, v in STEPS[1:]]
    lamp = field_of_steps("lamp", *np.transpose(late), span=(0.0, 20.0))
    with pytest.raises(FieldError) as caught:
        compare_fields(field_from_list(STEPS, recording), lamp, recording)
    text = str(caught.value)
    assert "list" in text
    assert "lamp" in text
    assert "2.080 s: 260 V against 0 V" in text  # the first frame a whole interval behind the toggle at 2 s


def test_an_open_sign_is_no_disagreement(recording):
    """A field whose sign is not known is compared with the sign that fits."""
    flipped = field_of_steps(
        "motion", *np.transpose([(t, -v) for t, v in STEPS]), span=(0.0, 20.0), sign_known=False
    )
    compare_fields(field_from_list(STEPS, recording), flipped, recording)
    with pytest.raises(FieldError):
        compare_fields(
            field_from_list(STEPS, recording),
            field_of_steps("log", *np.transpose([(t, -v) for t, v in STEPS]), span=(0.0, 20.0)),
            recording,
        )


def test_a_description_names_source_and_first_segments(recording):
    """More than six segments are counted, not listed."""
    many = [(2.0 * i, 260.0 * (i % 2)) for i in range(9)]
    assert describe(field_from_list(many, recording)).endswith("and 3 more")


def test_a_toggle_known_to_a_tenth_of_a_frame_counts_as_known(recording):
    """From 0.1 of the frame interval on, the steps about a toggle are left out, three uncertainties to either side."""
    sharp = field_from_list(STEPS, recording, toggle_std=0.09 * 0.04)
    assert len(uncertain_spans(sharp, frame_interval=0.04)) == 0
    vague = field_from_list(STEPS, recording, toggle_std=0.15 * 0.04)
    spans = uncertain_spans(vague, frame_interval=0.04)
    assert spans[0] == pytest.approx([2.0 - 0.018, 2.0 + 0.018])
