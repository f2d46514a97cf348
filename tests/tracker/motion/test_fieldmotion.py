"""Toggles from motion and the clock of a log, against simulated droplets whose field is known exactly.

Bounds on errors are the reachable figures of this method (droplets of 0.3 to 1 um, 30 frames a second), by Monte Carlo;
the full study is tests/benchmarks/study_happenings.py.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from diffusing_droplets import CONDITIONS
from happening_droplets import Camera, Life, made_bench, made_tracks, schedule

from tracker.errors import FieldError
from tracker.motion.field import field_from_lamp, field_from_list
from tracker.motion.fieldlog import Log
from tracker.motion.fieldmotion import field_from_motion, fit_clock_offset, segments_of_motion, sharpened
from tracker.records import Tracks
from tracker.voltage import compare_sources, field_of_tracks, known_field


def lives(rng, count):
    return [
        Life(float(r), int(n) * int(s))
        for r, n, s in zip(rng.uniform(0.3e-6, 1e-6, count), rng.integers(1, 16, count), rng.choice([-1, 1], count),
                           strict=True)
    ]  # fmt: skip


def toggles(field):
    return np.array([segment.end for segment in field.segments[:-1]])


def movie(rng, tmp_path, *, strength=4e4, count=10, seconds=24.0, signs=(0, 1, 0, -1), **bench):
    camera = Camera(seconds=seconds, steps=schedule(strength, seconds=seconds, signs=signs, jitter=rng))
    tracks, recording = made_tracks(rng, lives(rng, count), camera)
    return (
        camera,
        tracks,
        recording,
        made_bench(tmp_path, camera, source="motion", voltage=strength * 6e-3, **bench),
    )


@pytest.mark.parametrize(("strength", "limit_68", "limit_95"), [(4e4, 2.5e-3, 6e-3), (1e4, 10e-3, 25e-3)])
def test_toggles_of_ten_droplets_are_all_found_and_placed(tmp_path, strength, limit_68, limit_95):
    """No toggle missed or invented; 68 and 95 % of the errors within what the method reaches; honest uncertainties."""
    rng = np.random.default_rng(31)
    errors, pulls = [], []
    for _ in range(6):
        camera, tracks, recording, bench = movie(rng, tmp_path, strength=strength)
        field = field_from_motion(tracks, recording, bench)
        truth = np.array([t for t, _ in camera.steps[1:]])
        assert len(toggles(field)) == len(truth)
        errors += (toggles(field) - truth).tolist()
        pulls += ((toggles(field) - truth) / field.toggle_std).tolist()
    # 42 errors: the quantiles of so few scatter, so the demands are met with a quarter to spare for chance.
    assert np.quantile(np.abs(errors), 0.68) < 1.25 * limit_68
    assert np.quantile(np.abs(errors), 0.90) < 1.25 * limit_95
    # rms of 42 pulls within 4 / sqrt(2 * 42) of 1.
    assert np.sqrt(np.mean(np.square(pulls))) == pytest.approx(1.0, abs=4 / np.sqrt(84))


def test_three_states_are_told_apart_and_the_sign_is_left_open(tmp_path):
    """Off, on and reversed come out with the stated voltage; the sign rests on the bench file, and is said to."""
    camera, tracks, recording, bench = movie(np.random.default_rng(32), tmp_path)
    field = field_from_motion(tracks, recording, bench)
    assert [s.voltage for s in field.segments] == pytest.approx([e * 6e-3 for _, e in camera.steps])
    assert not field.sign_known
    assert any("sign" in warning for warning in field.warnings)


@pytest.mark.parametrize("signs", [(0, 1), (1, 0)])
def test_on_and_off_are_told_apart_by_the_fall(tmp_path, signs):
    """Two states: the one in which droplets fall as their Brownian motion asks for is off, first or second."""
    camera, tracks, recording, bench = movie(np.random.default_rng(33), tmp_path, signs=signs)
    field = field_from_motion(tracks, recording, bench)
    assert [s.voltage for s in field.segments] == pytest.approx([e * 6e-3 for _, e in camera.steps])


@pytest.mark.parametrize("frames", [3, 4, 5, 7])
def test_a_recording_that_ends_just_after_a_toggle_has_no_third_state(tmp_path, frames):
    """The last stretch, of six frames at least, then holds both states; it is not taken for a field between them."""
    camera, tracks, recording, bench = movie(np.random.default_rng(43), tmp_path, signs=(0, 1))
    ends = round(30 * camera.steps[5][0]) + frames
    kept = tracks.sightings.frame < ends
    shorter = replace(recording, frame_times=recording.frame_times[:ends])
    field = field_from_motion(Tracks(tracks.droplet[kept], tracks.sightings.take(kept)), shorter, bench)
    assert set(np.round([s.voltage for s in field.segments], 6)) == {0.0, 240.0}
    assert field.segments[0].voltage == 0.0
    truth = np.array([t for t, _ in camera.steps[1:]])[: len(toggles(field))]
    assert len(truth) >= 4
    assert np.all(np.abs(toggles(field) - truth) < 4 * field.toggle_std)


def test_a_field_that_is_only_reversed_is_not_read_as_on_and_off(tmp_path):
    """Droplets of both signs driven one way and the other never fall freely: an error, not a wrong table."""
    _, tracks, recording, bench = movie(np.random.default_rng(44), tmp_path, signs=(1, -1))
    with pytest.raises(FieldError, match="never off"):
        field_from_motion(tracks, recording, bench)


def test_an_open_reading_of_the_motion_is_an_error_that_names_both(tmp_path):
    """Where the field hastens one droplet by a third, its Brownian motion suits both speeds: no guess is made."""
    rng = np.random.default_rng(45)
    camera = Camera(seconds=9.0, steps=schedule(4e4, signs=(0, 1)))
    tracks, recording = made_tracks(rng, [Life(1e-6, 2)], camera)
    with pytest.raises(FieldError, match=r"cannot be told apart.*chi-square"):
        field_from_motion(tracks, recording, made_bench(tmp_path, camera, source="motion"))


def test_movies_without_field_show_no_toggle(tmp_path):
    """With the field always off, 25 recordings of ten droplets give no toggle: the penalty stands for 1 in 1000."""
    rng = np.random.default_rng(34)
    for _ in range(25):
        camera = Camera(seconds=20.0, steps=((0.0, 0.0),))
        tracks, recording = made_tracks(rng, lives(rng, 10), camera)
        with pytest.raises(FieldError, match="no toggle"):
            field_from_motion(
                tracks, recording, made_bench(tmp_path, Camera(steps=((0.0, 1.0),)), source="motion")
            )


def test_dynamic_programming_finds_the_best_of_all_partitions():
    """On 22 intervals the partition equals that of a search through every possible one."""
    rng = np.random.default_rng(35)
    for _ in range(20):
        scaled = rng.standard_normal((2, 22))
        scaled[:, 11:] += rng.choice([0.0, 4.0])
        seen = rng.random((2, 22)) < 0.9
        scaled = np.where(seen, scaled, 0.0)
        assert segments_of_motion(scaled, seen) == exhaustive(scaled, seen)


def exhaustive(scaled, seen):
    """Best partition by recursion over all starts, without any short cut."""
    count, most = scaled.shape[1], max(seen.sum(axis=0).max(), 1)
    log = np.log(count / 1e-3)
    penalty = 2 * most + 2 * np.sqrt(most * log) + 2 * log

    def value(first, end):
        number = np.maximum(seen[:, first:end].sum(axis=1), 1)
        return float(np.sum(scaled[:, first:end].sum(axis=1) ** 2 / number))

    def best(first):
        found = (value(first, count), [(first, count)]) if count - first >= 6 else (-np.inf, [])
        for end in range(first + 6, count - 6):
            rest = best(end + 1)
            total = value(first, end) - penalty + rest[0]
            if total > found[0]:
                found = (total, [(first, end), *rest[1]])
        return found

    return best(0)[1]


def log_of(camera, *, shift, rate=0.0, interval=None, rng=None):
    """Log of the camera's field: its clock reads `shift` at the recording's zero and runs fast by `rate`."""
    times = np.array([t for t, _ in camera.steps])
    volts = np.array([e * 6e-3 for _, e in camera.steps])
    if interval is None:
        return Log((times + shift) * (1 + rate), volts, False, "log.csv")
    t = np.arange(-shift, camera.seconds + 4.0, interval)
    sampled = volts[np.clip(np.searchsorted(times, t, side="right") - 1, 0, None)]
    return Log((t + shift) * (1 + rate), sampled + 0.3 * rng.standard_normal(len(t)), True, "log.csv")


@pytest.mark.parametrize(("strength", "limit"), [(4e4, 4e-3), (1e4, 15e-3)])
def test_the_clock_offset_of_a_log_is_found_by_three_droplets(tmp_path, strength, limit):
    """Errors within the reachable 95 % bound, and pulls of unit variance."""
    rng = np.random.default_rng(36)
    errors, pulls = [], []
    for _ in range(8):
        camera, tracks, recording, bench = movie(rng, tmp_path, strength=strength, count=3)
        field = fit_clock_offset(tracks, log_of(camera, shift=1.3), recording, bench)
        errors.append(field.clock_offset + 1.3)
        pulls.append(errors[-1] / field.clock_offset_std)
    assert (
        np.sort(np.abs(errors))[-2] < limit
    )  # all but one of eight: with 95 % inside, two outside happen in 6 % of seeds
    assert np.sqrt(np.mean(np.square(pulls))) == pytest.approx(1.0, abs=4 / np.sqrt(16))


def test_jumps_that_all_lie_alike_between_two_readings_are_within_the_offsets_uncertainty(tmp_path):
    """Switched and read at whole 20 ms, all jumps show half a reading early: their number does not average that."""
    rng = np.random.default_rng(46)
    steps = tuple((3.0 * i, 4e4 * (i % 2)) for i in range(8))
    camera = Camera(seconds=24.0, steps=steps)
    tracks, recording = made_tracks(rng, lives(rng, 10), camera)
    bench = made_bench(tmp_path, camera, source="motion")
    field = fit_clock_offset(
        tracks, log_of(camera, shift=0.7, rate=1e-4, interval=0.02, rng=rng), recording, bench
    )
    # A uniform distribution over one interval: 5.8 ms; half the interval is its most.
    assert field.clock_offset_std > 0.02 / np.sqrt(12)
    assert abs(field.clock_offset + 0.7) < 2.5 * field.clock_offset_std


@pytest.mark.parametrize(("late", "agree"), [(0.0, True), (1.0, False)])
def test_a_list_beside_a_log_of_open_clock_is_compared_once_the_clock_is_found(tmp_path, late, agree):
    """Whichever of the two is chosen, a list 1 s wrong is an error that shows both; the right one is accepted."""
    camera, tracks, recording, bench = movie(np.random.default_rng(47), tmp_path, signs=(0, 1))
    log = log_of(camera, shift=0.7)
    lines = [f"{t!r},{v!r}" for t, v in zip(log.times.tolist(), log.volts.tolist(), strict=True)]
    (tmp_path / "voltage.csv").write_text("\n".join(["time_s,voltage_v", *lines]), encoding="utf-8")
    entries = tuple((t + late if t else 0.0, e * 6e-3) for t, e in camera.steps)
    spec = replace(bench.field, entries=entries, log=tmp_path / "voltage.csv", clock_offset=None)
    fitted = replace(bench, field=replace(spec, source="log"))
    listed = replace(bench, field=replace(spec, source="list"))
    for field, given in (
        (field_of_tracks(tracks, recording, fitted), fitted), (known_field("list", recording, listed), listed),
    ):  # fmt: skip
        if agree:
            compare_sources(field, tracks, recording, given)
        else:
            with pytest.raises(FieldError, match=r"(log and list|list and log) disagree"):
                compare_sources(field, tracks, recording, given)


def test_a_log_that_starts_early_and_runs_fast_gives_the_toggles(tmp_path):
    """3.7 s early, 200 ppm fast, read every 10 ms: toggles within a few ms over the whole recording."""
    rng = np.random.default_rng(37)
    camera, tracks, recording, bench = movie(rng, tmp_path, count=12, seconds=40.0)
    log = log_of(camera, shift=3.7, rate=2e-4, interval=0.01, rng=rng)
    field = fit_clock_offset(tracks, log, recording, bench)
    middle = 20.0
    assert field.clock_offset == pytest.approx(
        middle - (middle + 3.7) * (1 + 2e-4), abs=5 * field.clock_offset_std
    )
    found = np.array(
        [0.5 * (a.end + b.start) for a, b in zip(field.segments, field.segments[1:], strict=False)]
    )
    truth = np.array([t for t, _ in camera.steps[1:]])
    # Reading every 10 ms places a toggle to 2.9 ms; a rate that is wrong by 1e-4 moves the ends by 2 ms.
    assert np.max(np.abs(found - truth)) < 10e-3


def test_a_schedule_that_repeats_beyond_the_recording_is_refused(tmp_path):
    """With plateaus of equal length before, during and after the recording the offset is open by whole periods."""
    rng = np.random.default_rng(38)
    camera = Camera(seconds=24.0, steps=schedule(4e4, signs=(0, 1)))
    tracks, recording = made_tracks(rng, lives(rng, 8), camera)
    bench = made_bench(tmp_path, camera, source="motion")
    times = 3.0 * np.arange(40)
    log = Log(times, 240.0 * (np.arange(40) % 2), False, "log.csv")
    with pytest.raises(FieldError, match="ambiguous"):
        fit_clock_offset(tracks, log, recording, bench)


def test_a_log_of_another_recording_is_refused(tmp_path):
    """Droplets that were never in the field follow no log."""
    rng = np.random.default_rng(39)
    idle = Camera(seconds=24.0, steps=((0.0, 0.0),))
    tracks, recording = made_tracks(rng, lives(rng, 4), idle)
    bench = made_bench(tmp_path, Camera(steps=((0.0, 1.0),)), source="motion")
    log = log_of(Camera(steps=schedule(4e4, jitter=rng)), shift=0.0)
    with pytest.raises(FieldError, match="do not follow"):
        fit_clock_offset(tracks, log, recording, bench)


def test_lamp_toggles_in_the_dead_time_are_sharpened_by_the_droplets(tmp_path):
    """Where the lamp leaves 17 ms of dead time open, ten droplets place the toggle to a few ms, honestly."""
    rng = np.random.default_rng(40)
    camera = Camera(seconds=24.0, open_share=0.5, steps=schedule(4e4, signs=(0, 1), jitter=rng))
    tracks, recording = made_tracks(rng, lives(rng, 10), camera)
    bench = made_bench(tmp_path, camera, source="motion")
    truth = np.array([t for t, _ in camera.steps[1:]])
    on = np.zeros(len(recording.frame_times))
    for first, last in zip(truth[::2], [*truth[1::2], 1e9], strict=False):
        start = recording.frame_times
        on += (
            np.clip(np.minimum(start + camera.exposure, last) - np.maximum(start, first), 0, None)
            / camera.exposure
        )
    lamp = field_from_lamp(20 + 100 * on + 0.5 * rng.standard_normal(len(on)), recording, exposure=camera.exposure,
                           voltage=240.0)  # fmt: skip
    better = sharpened(lamp, tracks, recording, bench)
    dead = lamp.toggle_std > 3e-3
    assert 1 <= dead.sum() < len(truth)
    assert np.all(better.toggle_std[dead] < lamp.toggle_std[dead])
    assert np.all(np.abs(toggles(better) - truth) < 4 * better.toggle_std + 1e-4)


def test_a_list_known_exactly_is_not_moved(tmp_path):
    """Sharpening leaves toggles alone that are known already."""
    camera, tracks, recording, bench = movie(np.random.default_rng(41), tmp_path)
    field = field_from_list([(t, e * 6e-3) for t, e in camera.steps], recording)
    assert sharpened(field, tracks, recording, bench) is field


def test_too_few_or_short_tracks_are_an_error_that_says_so(tmp_path):
    """Without a track of 30 frames the motion says nothing."""
    rng = np.random.default_rng(42)
    camera = Camera(seconds=24.0, steps=schedule(4e4))
    tracks, recording = made_tracks(rng, [Life(0.5e-6, 3, end=0.9)], camera)
    with pytest.raises(FieldError, match="no droplet is tracked"):
        field_from_motion(tracks, recording, made_bench(tmp_path, camera, source="motion"))


def test_the_helpers_conditions_are_those_of_the_bench(tmp_path):
    """The simulated air and oil are the bench's within its uncertainty, so charges may be compared."""
    bench = made_bench(tmp_path, Camera(steps=((0.0, 0.0), (1.0, 4e4))))
    assert bench.conditions.viscosity == pytest.approx(CONDITIONS.viscosity, rel=1e-3)
    assert bench.conditions.mean_free_path == pytest.approx(CONDITIONS.mean_free_path, rel=2e-3)
