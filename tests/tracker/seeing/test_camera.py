"""Saturation of cameras whose files could hold more bits than they have."""

from __future__ import annotations

import numpy as np
import pytest
import tifffile

from tracker.records import Flag, Settings
from tracker.seeing.camera import saturation
from tracker.seeing.see import see


@pytest.mark.parametrize(("top", "kept"), [(4095, 12), (4095 << 4, 12), (1023, 12), (3000, 3000), (4095, 3)])
def test_saturation_is_where_samples_end_at_a_camera_s_last_value(top, kept):
    """Several pixels at the largest value of 10 or 12 bits are saturation; few, or another value, are not."""
    samples = np.random.default_rng(1).integers(0, top, (4, 20, 20)).astype(np.uint16)
    samples.reshape(-1)[:kept] = top
    ends = top in {4095, 4095 << 4, 1023} and kept >= 8
    assert saturation(samples, 65535.0) == (top if ends else 65535.0)


def test_cores_cut_off_at_twelve_bits_of_sixteen_are_left_out(tmp_path):
    """Droplets of twice the range of a 12 bit camera are flagged, and placed within what their flanks tell."""
    rng = np.random.default_rng(4)
    frames, height, width = 60, 96, 128
    at = np.stack([30 + 1.1 * np.arange(frames), 20 + 0.9 * np.arange(frames)], 1)
    y, x = np.mgrid[:height, :width]
    light = 8000 * np.exp(-0.5 * ((x - at[:, :1, None]) ** 2 + (y - at[:, 1:, None]) ** 2) / 2.0**2)
    grey = 200 + light + rng.normal(0, 1, light.shape) * np.sqrt(100 + light)
    tifffile.imwrite(tmp_path / "clip.tif", np.clip(np.rint(grey), 0, 4095).astype(np.uint16))
    seen = see(tmp_path / "clip.tif", settings=Settings(), frame_rate=25.0)
    s = seen.sightings
    assert seen.report["saturation"] == 4095
    near = np.hypot(s.x - at[s.frame, 0], s.y - at[s.frame, 1]) < 3
    assert np.bincount(s.frame[near], minlength=frames).min() == 1
    assert (s.flags[near] & Flag.SATURATED).all()
    # flanks of 60 grey levels of noise under 4000 of light tell a place of 2 px width to some hundredths of a px
    assert np.hypot(s.x - at[s.frame, 0], s.y - at[s.frame, 1])[near].max() < 0.15
