"""Which charge part holds when, after a switch left out one side; and speeds at which Stokes' law fails."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from diffusing_droplets import CONDITIONS
from happening_droplets import Camera, Life, made_bench, made_tracks, schedule

from tracker.motion.analysis import Given
from tracker.motion.droplets import evaluate_droplets
from tracker.motion.field import field_from_list
from tracker.motion.judge import fastest_of, inertia_codes
from tracker.motion.rows import SegmentRow
from tracker.records import Settings


@pytest.mark.parametrize("seed", [411, 412, 413])
def test_parts_are_counted_on_the_side_that_a_switch_keeps(tmp_path, seed):
    """3 -> 5 e before a switch at 16 s to another droplet, 3 -> 5 e behind it: charges of the one kept alone."""
    camera = Camera(seconds=48.0, steps=schedule(4e4, seconds=48.0))
    changes = ((8.0, 0.6e-6, 5), (16.0, 0.75e-6, 3), (34.0, 0.75e-6, 5))
    rng = np.random.default_rng(seed)
    lives = [Life(0.6e-6, 3, changes=changes), *[Life(0.8e-6, 2)] * 4]
    tracks, recording = made_tracks(rng, lives, camera)
    bench = made_bench(tmp_path, camera)
    field = field_from_list(bench.field.entries, recording)
    found = evaluate_droplets(tracks, Given(recording, field, bench, Settings()))
    assert "switch" in found.droplets[0].reasons
    charges = found.details["charge_parts"].get("0", {"charge_c": [found.droplets[0].charge_c]})["charge_c"]
    rows = [row for row in found.changes if row.droplet == 0 and row.kind == "charge_step"]
    inside = [row for row in rows if np.isfinite(row.before_c)]
    # what is left of the track has one step less than parts, in order, and each row holds two that follow
    assert [(row.before_c, row.after_c) for row in inside] == list(pairwise(charges))
    kept = found.used & (found.tracks.droplet == 0)
    times = recording.frame_times[found.tracks.sightings.frame[kept]]
    for row in rows:
        lies_inside = times.min() < row.time_s < times.max()
        # the most likely step decides; its time is a mean over all likely ones and may lie a little off it
        near_end = min(abs(row.time_s - times.min()), abs(row.time_s - times.max())) < 3.0
        assert near_end or lies_inside == np.isfinite(row.before_c)


@pytest.mark.parametrize(("reynolds", "codes"), [
    (0.005, []), (0.0055, ["slight_inertia"]), (0.052, ["slight_inertia"]), (0.055, ["inertia"]),
])  # fmt: skip
def test_inertia_is_noted_from_a_thousandth_of_the_drag_and_doubted_from_a_hundredth(reynolds, codes):
    """Oseen: the drag exceeds Stokes' law by 3/16 Re, 0.1 % at Re 0.00533 and 1 % at 0.0533."""
    speed = reynolds * CONDITIONS.viscosity / (2 * 2e-6 * CONDITIONS.air_density)
    assert inertia_codes(2e-6, speed, CONDITIONS) == codes
    assert inertia_codes(float("nan"), speed, CONDITIONS) == []


def test_the_largest_speed_is_one_that_a_segment_is_sure_of():
    """A segment whose speed is uncertain by half does not count, however fast it seems."""
    rows = [SegmentRow(0, i, 0.0, 3.0 * i, 3.0 * i + 3, 90, speed, std, 0.0, 1e-6)
            for i, (speed, std) in enumerate([(5e-5, 1e-6), (-3e-4, 2e-6), (2e-3, 1e-3)])]  # fmt: skip
    assert fastest_of(rows, None) == 3e-4
    assert fastest_of([], None) == 0.0
