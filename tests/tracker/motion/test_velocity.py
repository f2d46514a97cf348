"""Tracks in metres along gravity: direction, steps left out, single wrong sightings and lasting jumps."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from happening_droplets import Camera, Life, made_bench, made_tracks, record_path, schedule

from tracker.motion.field import field_from_list, field_of_steps
from tracker.motion.velocity import Orientation, View, fit_orientation, paths, without_outliers
from tracker.records import Flag, Tracks

CAMERA = Camera(seconds=20.0, steps=schedule(4e4, seconds=20.0))
LIVES = [Life(r, n) for r, n in ((0.6e-6, 4), (0.8e-6, -6), (0.9e-6, 5), (0.7e-6, -3), (1.0e-6, 7))]


def evenly(tmp_path, rng, *, tilt=0.0, camera=CAMERA, lives=LIVES, air=(0.0, 0.0)):
    tracks, recording = made_tracks(rng, lives, camera, tilt_deg=tilt, air=air)
    bench = made_bench(tmp_path, CAMERA)
    field = field_from_list(bench.field.entries if camera is CAMERA else [(0.0, 0.0)], recording)
    return tracks, recording, field, bench


@pytest.mark.parametrize("tilt", [0.0, -2.0, 7.0, 90.0, 180.0])
def test_gravity_is_found_from_the_drive_of_all_droplets(tmp_path, tilt):
    """At any turn of the camera, also upside down, and with air that drifts sideways; honest uncertainty."""
    tracks, recording, field, bench = evenly(tmp_path, np.random.default_rng(51), tilt=tilt, air=(0.0, 10e-6))
    found = fit_orientation(tracks, View(recording, field, bench.scale, CAMERA.exposure))
    assert found.origin == "drive"
    apart = (found.down_deg - tilt + 180) % 360 - 180
    assert abs(apart) < 4 * found.down_deg_std
    assert found.down_deg_std < 0.5
    assert bool(found.warnings) == (abs(tilt) > 20)


def test_gravity_pulls_about_the_truth_with_its_stated_uncertainty(tmp_path):
    """Over 40 recordings the error over the uncertainty has unit variance."""
    rng = np.random.default_rng(52)
    pulls = []
    for _ in range(40):
        tracks, recording, field, bench = evenly(tmp_path, rng, tilt=2.0)
        found = fit_orientation(tracks, View(recording, field, bench.scale, CAMERA.exposure))
        pulls.append((found.down_deg - 2.0) / found.down_deg_std)
    assert np.sqrt(np.mean(np.square(pulls))) == pytest.approx(1.0, abs=4 / np.sqrt(80))


def test_a_stated_direction_is_taken_and_checked(tmp_path):
    """A stated direction stands; a drive that points elsewhere is told."""
    tracks, recording, field, bench = evenly(tmp_path, np.random.default_rng(53), tilt=3.0)
    view = View(recording, field, bench.scale, CAMERA.exposure)
    right = fit_orientation(tracks, view, down_deg=3.0)
    assert (right.down_deg, right.origin, right.warnings) == (3.0, "bench", ())
    wrong = fit_orientation(tracks, view, down_deg=-3.0)
    assert wrong.down_deg == -3.0
    assert "drive" in wrong.warnings[0]


def test_without_a_drive_the_fall_gives_the_direction_with_a_warning(tmp_path):
    """Field never on: the mean fall, and a warning that sideways air turns it."""
    idle = Camera(seconds=20.0, steps=((0.0, 0.0),))
    tracks, recording, field, bench = evenly(tmp_path, np.random.default_rng(54), tilt=4.0, camera=idle)
    found = fit_orientation(tracks, View(recording, field, bench.scale, idle.exposure))
    assert found.origin == "fall"
    assert found.down_deg == pytest.approx(4.0, abs=4 * found.down_deg_std)
    assert "drifts" in found.warnings[0]


def test_no_tracks_leave_the_pictures_own_vertical(tmp_path):
    """An empty recording has a direction, and says that it was not measured."""
    tracks, recording, field, bench = evenly(tmp_path, np.random.default_rng(55))
    none = Tracks(tracks.droplet[:0], tracks.sightings.take(np.arange(0)))
    found = fit_orientation(none, View(recording, field, bench.scale, CAMERA.exposure))
    assert (found.down_deg, found.origin) == (0.0, "picture")


def test_places_are_turned_and_scaled(tmp_path):
    """Down and side are the picture's axes turned by gravity's angle, in metres."""
    tracks, recording, field, bench = evenly(tmp_path, np.random.default_rng(56))
    path = paths(
        tracks, View(recording, field, bench.scale, CAMERA.exposure), Orientation(90.0, 0.0, "bench")
    )[0]
    rows = tracks.rows(0)
    assert path.down == pytest.approx(tracks.sightings.x[rows] * 3e-6)
    assert path.side == pytest.approx(-tracks.sightings.y[rows] * 3e-6)


def test_repeated_frames_biased_places_and_a_persons_rows_are_left_out(tmp_path):
    """A copy of the frame before, merged or cut spots, and trimmed rows give no place; steps over them are longer."""
    tracks, recording, field, bench = evenly(tmp_path, np.random.default_rng(57))
    rows = tracks.rows(0)
    flags = tracks.sightings.flags.copy()
    flags[rows.start + 10], flags[rows.start + 20] = Flag.MERGED, Flag.EDGE | Flag.SATURATED
    flags[rows.start + 30] = Flag.SATURATED
    frame = int(tracks.sightings.frame[rows.start + 40])
    left_out = np.zeros(len(tracks), bool)
    left_out[rows.start + 50] = True
    path = paths(
        replace(tracks, sightings=replace(tracks.sightings, flags=flags)),
        View(replace(recording, repeated=[frame]), field, bench.scale, CAMERA.exposure),
        Orientation(0, 0, "bench"), left_out=left_out,
    )[0]  # fmt: skip
    frames = tracks.sightings.frame[rows]
    assert np.setdiff1d(frames, path.frames).tolist() == frames[[10, 20, 40, 50]].tolist()
    assert path.steps.dt.max() >= 2 / CAMERA.frame_rate - 1e-9


def test_steps_over_an_uncertain_toggle_and_a_bump_are_left_out(tmp_path):
    """A copy of the frame before, merged or cut spots and trimmed rows give no place; steps over them are longer."""
    tracks, recording, _, bench = evenly(tmp_path, np.random.default_rng(58))
    field = field_of_steps("lamp", [0.0, 6.0], [0.0, 240.0], span=(0.0, 20.0), toggle_std=0.02)
    path = paths(
        tracks, View(recording, field, bench.scale, CAMERA.exposure), Orientation(0, 0, "bench"), cuts=[450]
    )[0]
    begin, end = path.times[:-1][path.breaks], path.times[1:][path.breaks] + CAMERA.exposure
    near_toggle = (begin < 6.06) & (end > 5.94)
    assert near_toggle.sum() >= 4
    assert (~near_toggle).sum() == 1
    assert (
        path.frames[:-1][path.breaks][~near_toggle][0] < 450 <= path.frames[1:][path.breaks][~near_toggle][0]
    )
    assert len(path.steps) == len(path) - 1 - path.breaks.sum()


def test_a_single_wrong_sighting_is_left_out_and_a_lasting_jump_breaks_the_track():
    """One sighting 8 um off is an outlier; a shift of 10 um for good is a hop; a step takes it 1 um; the rest stays."""
    path = record_path(np.random.default_rng(59), Life(0.8e-6, 5), CAMERA)
    down = path.down.copy()
    down[100] += 8e-6
    down[300:] += 10e-6
    cleaned, outliers, hops, _ = without_outliers(replace(path, down=down))
    assert outliers == 1
    assert path.frames[100] not in cleaned.frames
    assert hops == (int(path.frames[300]),)
    assert len(cleaned) == len(path) - 1


def test_clean_tracks_lose_nothing():
    """Of 100 clean tracks with 57 000 sightings none is touched, as one in 1.7 million would be by chance."""
    rng = np.random.default_rng(60)
    for _ in range(100):
        path = record_path(rng, Life(float(rng.uniform(0.3e-6, 1.2e-6)), int(rng.integers(-9, 10))), CAMERA)
        cleaned, outliers, hops, _ = without_outliers(path)
        assert (len(cleaned), outliers, hops) == (len(path), 0, ())


def test_leaving_a_sighting_out_keeps_the_steps_that_are_broken():
    """The step over a sighting that is left out is broken if either of its parts was."""
    path = record_path(np.random.default_rng(61), Life(0.8e-6, 5), CAMERA)
    broken = path.cut(9)
    for sighting in (9, 10):
        shorter = broken.without(sighting)
        assert shorter.breaks.sum() == 1
        step = int(np.flatnonzero(shorter.breaks)[0])
        assert shorter.times[step] <= path.times[9]
        assert shorter.times[step + 1] >= path.times[10]
    assert len(path.without(0)) == len(path.without(len(path) - 1)) == len(path) - 1
