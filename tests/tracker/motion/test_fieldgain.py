"""What a moved voltage explains, for all offsets at once, is what plain least squares gives for each."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from happening_droplets import Camera, Life, knots_of, record_path, schedule

from tracker.motion import fieldgain
from tracker.motion.fieldgain import drive_gains
from tracker.motion.fieldlog import Log
from tracker.records import Recording

CAMERA = Camera(seconds=12.0, missing=0.2, steps=schedule(4e4, seconds=12.0))
OFFSETS = np.array([-40.0, -1.3, -0.2, 0.0, 0.05, 0.9, 4.4])


def recording():
    return Recording(Path("clip.avi"), "0" * 64, 640, 480, CAMERA.times, np.empty(0, np.int64), 0, False, 8, 255.0,
                     "ffv1")  # fmt: skip


def droplets(rng):
    """One that falls and is driven, one that rises with the field off, one with a step left out."""
    one, two, three = (record_path(rng, Life(0.7e-6, n), CAMERA, number=n) for n in (4, -3, 2))
    return [one, replace(two, down=two.down - 3e-4 * two.times), three.cut(100)]


def plain_gain(path, volts_at, offset, *, falling):
    """Chi-squares of one droplet from sums of squares with and without the drive, one fit at a time."""
    steps = path.steps
    seconds = volts_at(path.times + 0.5 * path.exposure - offset)
    root = np.sqrt(steps.dt)
    drift, drive = root, (seconds[steps.last] - seconds[steps.first]) / root

    def left(data, *columns):
        design = np.column_stack(columns)
        return float(np.sum((data - design @ np.linalg.lstsq(design, data, rcond=None)[0]) ** 2))

    if np.ptp(drive / root) < 1e-9 * np.abs(drive / root).max(initial=1e-300):
        return 0.0
    gain = 0.0
    for data in (steps.down / root, steps.side / root):
        variance = (np.median(np.abs(np.diff(data))) / 0.6745) ** 2 / 2
        gain += (left(data, drift) - left(data, drift, drive)) / variance
    data = steps.down / root
    fall = np.linalg.lstsq(np.column_stack([drift, drive]), data, rcond=None)[0][0]
    if falling and fall < 0:
        variance = (np.median(np.abs(np.diff(data))) / 0.6745) ** 2 / 2
        gain -= (left(data, drive) - left(data, drift, drive)) / variance
    return gain


@pytest.mark.parametrize("falling", [False, True])
@pytest.mark.parametrize("at_once", [1, 1000, 10**6])
def test_gains_equal_those_of_single_fits(monkeypatch, falling, at_once):
    """Missing frames, a step left out and offsets beyond the schedule included, whatever is held at once."""
    monkeypatch.setattr(fieldgain, "NUMBERS_AT_ONCE", at_once)
    knots, volts = knots_of(CAMERA)
    fine = np.linspace(knots[0], knots[-1], 200_001)  # the voltage's integral by plain summing
    height = volts[np.clip(np.searchsorted(knots, 0.5 * (fine[1:] + fine[:-1]), side="right") - 1, 0, None)]
    total = np.concatenate([[0.0], np.cumsum(height * np.diff(fine))])

    def volts_at(times):
        ends = volts[0] * np.minimum(times - fine[0], 0) + volts[-1] * np.maximum(times - fine[-1], 0)
        return np.interp(times, fine, total) + ends

    paths = droplets(np.random.default_rng(601))
    found = drive_gains(paths, Log(knots, volts, True, Path("v.csv")), OFFSETS, recording(), falling=falling)
    wanted = [[plain_gain(path, volts_at, offset, falling=falling) for offset in OFFSETS] for path in paths]
    # Summing in 60 us slices misplaces each toggle by up to 30 us of 30 ms steps: 1e-3 of a toggled step's drive.
    assert found == pytest.approx(np.array(wanted), rel=2e-3, abs=0.02)
    assert found[0].argmax() == OFFSETS.tolist().index(0.0)
    assert found[:, 0].tolist() == [0.0, 0.0, 0.0]  # there one voltage holds all the time
    assert (found[1, 3] > 0) is not falling  # rising without field weighs more than what the drive explains
