"""Reading voltage logs as loggers and supplies write them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from physics.motion import field_impulse
from tracker.errors import FieldError
from tracker.motion.fieldlog import Log, field_from_log, plateaus, read_log
from tracker.records import Recording

TIMES = np.arange(500) * 0.04
STEPS = [(0.0, 0.0), (2.0, 260.0), (4.4, 0.0), (6.83, 260.0), (9.2, 0.0)]


@pytest.fixture
def recording():
    return Recording(Path("clip.avi"), "0" * 64, 64, 48, TIMES, [], 0, False, 8, 255.0, "ffv1")


def supply(rng, *, interval=0.01, ramp=0.05, ringing=30.0, noise=0.8, sag=0.3, seconds=60.0):
    """Readings of a supply that ramps, rings, sags while on, and is noisy."""
    t = np.arange(0.0, seconds, interval)
    v = np.zeros_like(t)
    for (start, volts), before in zip(STEPS, [0.0] + [b for _, b in STEPS], strict=False):
        since = t - start
        v = np.where(since >= 0, before + (volts - before) * np.clip(since / ramp, 0, 1), v)
        tail = since - ramp
        rings = ringing * np.exp(-tail / 0.05) * np.cos(2 * np.pi * 25 * tail) * (volts != before)
        v = np.where((tail >= 0) & (tail < 0.4), v + rings, v)
    v = np.where(v > 100, v - sag * t, v)
    return t, v + noise * rng.standard_normal(len(t))


def write(path, rows, header="time_s,voltage_v", separator=","):
    path.write_text(
        "\n".join([header, *(separator.join(str(cell) for cell in row) for row in rows)]), encoding="utf-8"
    )
    return path


def test_several_thousand_noisy_rows_give_the_plateaus(tmp_path, recording):
    """Ramps and ringing lie between segments; plateau voltages are means of what was logged."""
    t, v = supply(np.random.default_rng(1))
    log = read_log(write(tmp_path / "log.csv", zip(t, v, strict=True)))
    assert len(log.times) == 6000
    assert log.sampled
    field = field_from_log(log, recording)
    assert len(field.segments) == 5
    for segment, (start, volts) in zip(field.segments, STEPS, strict=True):
        # Readings settle 50 ms of ramp and at most 0.4 s of ringing behind the switch.
        assert start - 0.011 <= segment.start <= start + 0.46
        middle = 0.5 * (segment.start + segment.end)
        expected = volts - (0.3 * middle if volts else 0.0)
        # Mean of at least 190 readings with noise 0.8 V, and what is left of the ringing.
        assert segment.voltage == pytest.approx(expected, abs=5 * 0.8 / np.sqrt(190) + 0.3)


def test_a_sagging_plateau_and_a_ramp_count_as_logged(tmp_path, recording):
    """The time integral of the voltage is that of the readings, ramps, ringing and sag included."""
    t, v = supply(np.random.default_rng(2), noise=0.0)
    field = field_from_log(read_log(write(tmp_path / "log.csv", zip(t, v, strict=True))), recording)
    starts = np.array([0.0, 3.0, 7.0, 12.0])
    measured = np.diff(field_impulse(field.knot_times, field.knot_volts, starts, 0.0))
    exact = np.diff(
        [np.trapezoid(np.append(v[t < s], np.interp(s, t, v)), np.append(t[t < s], s)) for s in starts]
    )
    assert measured == pytest.approx(exact, rel=1e-9)  # the same sums in another order
    # The sag is 0.3 V/s: a mean plateau of 260 V would be wrong by more than 1 V s over the first on-plateau.
    assert abs(measured[0] - 260 * 1.0) > 0.5


def test_a_log_of_changes_holds_each_voltage(tmp_path, recording):
    """Few rows at uneven times are jumps, not ramps."""
    field = field_from_log(
        read_log(write(tmp_path / "log.csv", STEPS)), recording, offset=0.5, offset_std=0.01
    )
    assert [(s.start, s.voltage) for s in field.segments][1:] == [(t + 0.5, v) for t, v in STEPS[1:]]
    assert (field.clock_offset, field.clock_offset_std) == (0.5, 0.01)


def test_columns_are_mapped_with_units_comma_and_comments(tmp_path, recording):
    """Own column names, ms and kV, semicolons with decimal commas, comment lines and unusable rows."""
    lines = ["# supply of bench A", "Row;Elapsed;Plate"]
    lines += [
        f"{i};{1e3 * t:.1f}".replace(".", ",") + f";{v / 1e3:.4f}".replace(".", ",")
        for i, (t, v) in enumerate(STEPS)
    ]
    lines.insert(4, "9;overflow;--")
    path = tmp_path / "log.csv"
    path.write_text("\n".join(lines), encoding="utf-8-sig")
    log = read_log(path, time_column="elapsed", voltage_column="PLATE", time_unit="ms", voltage_unit="kV")
    assert log.times == pytest.approx([t for t, _ in STEPS])
    assert log.volts == pytest.approx([v for _, v in STEPS])


@pytest.mark.parametrize("zone", ["", "Z", "+02:00"])
def test_iso_time_stamps_are_seconds_from_the_first_row(tmp_path, zone):
    """Stamps over midnight, with and without a time zone."""
    rows = [("2026-03-02T23:59:58.500" + zone, 0), ("2026-03-03T00:00:00.750" + zone, 260)]
    log = read_log(write(tmp_path / "log.csv", rows), time_unit="iso")
    assert log.times == pytest.approx([0.0, 2.25], abs=1e-6)  # a float of seconds since 2000 resolves 1e-7 s


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "empty"),
        ("a,b\n1,2\n", "no column 'time_s'; the log has a, b"),
        ("time_s,voltage_v\nx,y\n", "no row"),
        ("time_s,voltage_v\n0,1\n2,1\n1,0\n", "backwards after row 2"),
    ],
)
def test_a_log_that_cannot_be_used_is_told_in_one_line(tmp_path, text, words):
    """File and problem."""
    path = tmp_path / "log.csv"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(FieldError, match=words) as caught:
        read_log(path)
    assert "\n" not in str(caught.value)
    assert "log.csv" in str(caught.value)


def test_a_missing_log_and_a_wrong_unit_are_told(tmp_path):
    """Both name the file."""
    with pytest.raises(FieldError, match="cannot be read"):
        read_log(tmp_path / "none.csv")
    with pytest.raises(FieldError, match="unit 'kg'"):
        read_log(write(tmp_path / "log.csv", STEPS), voltage_unit="kg")


def test_a_jump_between_two_readings_may_lie_anywhere_between_them(recording):
    """A log read every 0.1 s places a jump to 0.1 s / sqrt(12), and one that ramps over readings better."""
    t = np.arange(0.0, 30.0, 0.1)
    jump = Log(t, np.where(t >= 5.0, 260.0, 0.0), True, Path("log.csv"))
    assert field_from_log(jump, recording).toggle_std == pytest.approx([0.1 / np.sqrt(12)])
    slow = Log(t, 260 * np.clip((t - 5.0) / 0.5, 0, 1), True, Path("log.csv"))
    # Five intervals hold a fifth of the change each.
    assert field_from_log(slow, recording).toggle_std == pytest.approx([0.1 / np.sqrt(12) / np.sqrt(5)])


def test_a_log_that_misses_the_recording_is_refused_and_one_that_ends_early_warns(recording):
    """No overlap is an error; a part left open is told."""
    t = np.arange(0.0, 10.0, 0.01)
    log = Log(t, np.where(t >= 5.0, 260.0, 0.0), True, Path("log.csv"))
    with pytest.raises(FieldError, match="clock_offset"):
        field_from_log(log, recording, offset=100.0)
    assert "ends 10.05 s before the recording" in field_from_log(log, recording).warnings[0].replace(
        "10.01", "10.05"
    )


def test_a_fast_clock_is_slowed_about_the_middle_of_the_recording(recording):
    """With a rate of 200 ppm, times 5 s from the middle move by 1 ms, and the middle by the offset alone."""
    log = Log(np.array([0.0, 5.0, 10.0, 15.0]), np.array([0.0, 260.0, 0.0, 260.0]), False, Path("log.csv"))
    field = field_from_log(log, recording, offset=0.0, rate=2e-4)
    # Middle of the recording: 10 s. (5 - 10) / 1.0002 = -4.9990.
    assert [s.start for s in field.segments][1:] == pytest.approx([10 - 5 / 1.0002, 10.0, 10 + 5 / 1.0002])


def test_plateaus_of_noise_alone_are_one(recording):
    """A constant voltage with noise is one plateau whatever its size."""
    rng = np.random.default_rng(3)
    log = Log(np.arange(2000) * 0.01, 260 + rng.standard_normal(2000), True, Path("log.csv"))
    assert plateaus(log) == [(0, 1999)]
