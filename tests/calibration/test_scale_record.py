"""The scale's record, file, use on points and fit to a recording."""

from __future__ import annotations

import json
import pickle

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from calibration.errors import ScaleError
from calibration.scale import (
    Distortion,
    PictureScale,
    Scale,
    binned,
    fit_recording,
    read_scale,
    to_metres,
    undistort,
    write_scale,
    write_whole,
)

LENS = Distortion(radial=0.02, centre_x_px=319.5, centre_y_px=239.5, radius_px=400.0, scale_variation=0.03)


def a_scale(**changes):
    values = {
        "pattern": "grid", "pitch": 1e-4, "pitch_std": 2e-7, "metres_per_pixel_x": 3e-6, "metres_per_pixel_x_std": 6e-9,
        "metres_per_pixel_y": 3.1e-6, "metres_per_pixel_y_std": 7e-9, "rotation_deg": 0.4, "residual_px": 0.02,
        "picture": "a.png", "picture_sha256": "00", "width_px": 640, "height_px": 480, "warnings": ("one", "two"),
    }  # fmt: skip
    return Scale(**(values | changes))


def test_file_holds_the_keys_of_the_contract_and_reads_back(tmp_path):
    """Writing and reading gives the same record, under keys that say their unit."""
    scale = a_scale(distortion=LENS, pictures=(PictureScale("a.png", "00", "2026-01-01", 3e-6, 1e-9),))
    write_scale(scale, tmp_path / "scale.json")
    values = json.loads((tmp_path / "scale.json").read_text(encoding="utf-8"))
    assert {
        "pattern", "pitch_m", "pitch_std_m", "metres_per_pixel_x", "metres_per_pixel_x_std", "metres_per_pixel_y",
        "metres_per_pixel_y_std", "rotation_deg", "residual_px", "distortion", "picture", "picture_sha256", "width_px",
        "height_px", "warnings",
    } <= set(values)  # fmt: skip
    assert values["pitch_m"] == 1e-4
    assert read_scale(tmp_path / "scale.json") == scale
    assert pickle.loads(pickle.dumps(scale)) == scale
    assert [path.name for path in tmp_path.iterdir()] == ["scale.json"]


@pytest.mark.parametrize(
    ("damage", "told"),
    [
        (lambda values: values.pop("metres_per_pixel_x"), "metres_per_pixel_x is missing"),
        (lambda values: values.update(pitch_m="x"), "pitch_m"),
        (lambda values: values.update(metres_per_pixel_y=-1.0), "metres_per_pixel_y"),
        (lambda values: values.update(distortion={"radius_px": 0}), "radius"),
    ],
)
def test_a_damaged_file_is_told_with_its_key(tmp_path, damage, told):
    """A missing or impossible value is one line with file, key and remedy."""
    path = tmp_path / "scale.json"
    write_scale(a_scale(), path)
    values = json.loads(path.read_text(encoding="utf-8"))
    damage(values)
    path.write_text(json.dumps(values), encoding="utf-8")
    with pytest.raises(ScaleError, match=told) as caught:
        read_scale(path)
    assert "fallrise scale" in str(caught.value)


def test_a_file_that_is_none_is_told(tmp_path):
    """No file, no JSON and a bare list are each one clear line."""
    for content in (None, "no json", "[1, 2]"):
        path = tmp_path / "scale.json"
        if content is not None:
            path.write_text(content, encoding="utf-8")
        with pytest.raises(ScaleError, match="fallrise scale"):
            read_scale(path)


def test_files_that_belong_together_are_written_whole_or_not_at_all(tmp_path):
    """If one of two files cannot be written the other stays as it was, and no draft is left."""
    (tmp_path / "scale.json").write_text("old", encoding="utf-8")
    with pytest.raises(ScaleError, match="cannot be written"):
        write_whole({tmp_path / "scale.json": b"new", tmp_path / "no" / "scale.png": b"new"})
    assert (tmp_path / "scale.json").read_text(encoding="utf-8") == "old"
    assert [path.name for path in tmp_path.iterdir()] == ["scale.json"]


def test_impossible_values_are_refused():
    """A scale of nought, an infinite or a negative uncertainty is no record."""
    for wrong in ({"metres_per_pixel_x": 0.0}, {"metres_per_pixel_y_std": float("inf")}, {"pitch_std": -1.0}):
        with pytest.raises(ValueError, match=next(iter(wrong))):
            a_scale(**wrong)


def test_points_turn_into_metres_along_each_axis():
    """Without a lens, metres are pixels times the scale of their axis."""
    x, y = to_metres(a_scale(), [0.0, 100.0], [10.0, 0.0])
    assert x == pytest.approx([0.0, 3e-4])
    assert y == pytest.approx([3.1e-5, 0.0])


def test_lens_correction_follows_its_closed_form():
    """At the distance of the radius a point moves by k times it; at the centre neither places nor steps change.

    Source: closed form of the third-order term, D. C. Brown, Photogrammetric Engineering 32 (1966), 444-462.
    """
    x, y = undistort(
        np.array([319.5, 719.5]), np.array([239.5, 239.5]), radial=0.02, centre=(319.5, 239.5), radius=400
    )
    assert x == pytest.approx([319.5, 719.5 + 8.0], abs=1e-12)
    assert y == pytest.approx([239.5, 239.5], abs=1e-12)
    x_m, _ = to_metres(a_scale(distortion=LENS), [319.5, 320.5], [239.5, 239.5])
    # The cubic term of a step of 1 px at the centre: 0.02 / 400^2 = 1.25e-7.
    assert (x_m[1] - x_m[0]) / 3e-6 == pytest.approx(1 + 1.25e-7, abs=1e-10)


@given(binning=st.integers(1, 8), column=st.integers(0, 79), row=st.integers(0, 59))
def test_a_binned_pixel_lies_at_the_middle_of_its_pixels(binning, column, row):
    """Metres between two places are the same before and after binning, with the lens corrected."""
    scale = a_scale(distortion=LENS)
    coarse = binned(scale, binning)
    middle = (
        np.array([column * binning, 0.0]) + (binning - 1) / 2,
        np.array([row * binning, 0.0]) + (binning - 1) / 2,
    )
    fine_x, fine_y = to_metres(scale, *middle)
    x, y = to_metres(coarse, [column, 0.0], [row, 0.0])
    assert x[0] - x[1] == pytest.approx(fine_x[0] - fine_x[1], rel=1e-12, abs=1e-18)
    assert y[0] - y[1] == pytest.approx(fine_y[0] - fine_y[1], rel=1e-12, abs=1e-18)
    assert coarse.relative_std == pytest.approx(scale.relative_std, rel=1e-12)


def test_a_recording_of_the_pictures_size_takes_the_scale_as_it_is():
    """Nothing changes where sizes agree, with and without the statement that nothing is binned."""
    scale = a_scale()
    assert fit_recording(scale, width=640, height=480) is scale
    assert fit_recording(scale, width=640, height=480, binning=1) is scale


def test_a_binned_recording_needs_the_key_and_then_scales():
    """A recording half as large is an error that names the key and its value; with it, pixels are twice as large."""
    scale = a_scale()
    with pytest.raises(ScaleError, match=r"camera\.binning = 2"):
        fit_recording(scale, width=320, height=240)
    fitted = fit_recording(scale, width=320, height=240, binning=2)
    assert fitted.metres_per_pixel_x == pytest.approx(6e-6)
    assert fitted.metres_per_pixel_y_std == pytest.approx(14e-9)


def test_a_cropped_recording_needs_the_key_and_keeps_the_scale():
    """A crop has the picture's pixels; it must be stated, and a lens correction does not survive it."""
    with pytest.raises(ScaleError, match=r"camera\.binning = 1"):
        fit_recording(a_scale(), width=500, height=480)
    assert fit_recording(a_scale(), width=500, height=480, binning=1).metres_per_pixel_x == 3e-6
    with pytest.raises(ScaleError, match="lens correction"):
        fit_recording(a_scale(distortion=LENS), width=500, height=480, binning=1)


def test_a_recording_larger_than_the_picture_is_refused():
    """More pixels than the picture had, times the binning, cannot be of that camera setting."""
    with pytest.raises(ScaleError, match="exceed"):
        fit_recording(a_scale(), width=640, height=480, binning=2)


def test_a_stated_scale_is_of_the_recordings_own_pixels():
    """Metres per pixel that a person states are never binned: that would count the binning twice."""
    stated = Scale.from_metres_per_pixel(2.98e-6, 5e-9)
    assert fit_recording(stated, width=123, height=45) is stated
    with pytest.raises(ScaleError, match="leave out"):
        fit_recording(stated, width=123, height=45, binning=2)
