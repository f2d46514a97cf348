"""Patterns in simulated pictures and in photographs of other things."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import cv2
import numpy as np
import pytest
from reference_pictures import Pattern, lattice_coordinates, random_pattern, render
from skimage import data

from calibration.errors import PatternError
from calibration.measure import scale_of
from calibration.pattern import Lattice, find_pattern
from calibration.pictures import Picture


def found(pattern: Pattern, *, seed: int = 0, kind: str | None = None) -> tuple[Lattice, float]:
    """Find a pattern in its picture; also the relative error of the pitch along x, or across lines."""
    truth = render(pattern, np.random.default_rng(seed))
    grey = truth.picture.mean(axis=2) if truth.picture.ndim == 3 else truth.picture
    lattice = find_pattern(grey, kind)
    scale = scale_of(Picture(Path("a.png"), grey.astype(np.float32), "", ""), lattice, pitch=1.0).scale
    true = truth.pitch_across if lattice.pattern == "lines" else truth.pitch_x
    return lattice, scale.metres_per_pixel_x * true - 1


def miscounted(pattern: Pattern, lattice: Lattice) -> int:
    """Marks whose number is not the true one but for a shift and sign common to their coordinate."""
    marks = lattice.marks
    true = lattice_coordinates(pattern, marks.x, marks.y)[:2]
    wrong = 0
    for axis in marks.axes:
        rows = marks.axis == axis
        shifts = [s * np.rint(c[rows]) - marks.index[rows] for c in true for s in (1, -1)]
        # Of lines as wide as their gaps the gaps may be taken, which lie at halves.
        shifts += [s * np.floor(c[rows]) - marks.index[rows] for c in true for s in (1, -1)]
        wrong += min(int((np.abs(shift - np.median(shift)) > 0.5).sum()) for shift in shifts)
    return wrong


@pytest.mark.parametrize("dark", [True, False])
@pytest.mark.parametrize("rotation", [0.0, 0.7, -88.0, 31.0])
@pytest.mark.parametrize("kind", ["lines", "grid", "dots"])
def test_each_kind_is_found_at_any_rotation_on_both_grounds(kind, rotation, dark):
    """Kind, count and pitch are right without being told the kind."""
    pattern = Pattern(kind, rotation=rotation, dark=dark, duty=0.35 if kind == "dots" else 0.12, pitch=23.4, uneven=0.3,
                      width=480, height=360)  # fmt: skip
    lattice, error = found(pattern)
    assert lattice.pattern == kind
    assert miscounted(pattern, lattice) == 0
    # Noise of 1 % of full scale on a contrast of 50 %: a few hundredths of a pixel a mark, over 480 px.
    assert abs(error) < 1e-4


@pytest.mark.parametrize(
    "changes",
    [
        {"bits": 12}, {"bits": 16}, {"colour": True}, {"pitch": 6.0, "duty": 0.4, "blur": 0.8}, {"long_every": 5},
        {"long_every": 10, "pitch": 12.0}, {"pitch": 195.0, "duty": 0.08, "phase": (0.5, 0.5)},
        {"dust": 40, "droplets": 25},
        {"missing": 0.15, "pitch": 16.0}, {"false_lines": 3, "pitch": 25.0}, {"part": 0.5, "pitch": 18.0},
        {"duty": 0.5}, {"uneven": 0.7}, {"contrast": 0.1, "noise": 0.02},
    ],
    ids=" ".join,
)  # fmt: skip
def test_lines_are_found_in_hard_pictures(changes):
    """Depth, colour, pitch from 6 px to a third of the picture, long lines, debris, gaps, scratches: all hold."""
    pattern = replace(Pattern(rotation=1.3, width=640, height=400), **changes)
    lattice, error = found(pattern, seed=4)
    assert lattice.pattern == "lines"
    assert miscounted(pattern, lattice) == 0
    assert abs(error) < 5e-4  # what is asked of 99 pictures in 100


def test_random_pictures_keep_count_error_and_uncertainty():
    """Twelve pictures drawn from the whole range: no wrong count, errors within 0.05 %, pulls of spread about 1."""
    pulls = []
    for seed in range(300, 312):
        rng = np.random.default_rng(seed)
        pattern = replace(random_pattern(rng), radial=0.0)
        truth = render(pattern, rng)
        grey = (truth.picture.mean(axis=2) if truth.picture.ndim == 3 else truth.picture).astype(np.float32)
        lattice = find_pattern(grey)
        scale = scale_of(Picture(Path("a.png"), grey, "", ""), lattice, pitch=1.0).scale
        gradient = truth.gradient[:, 0] if lattice.pattern != "lines" else truth.gradient[0]
        error = scale.metres_per_pixel_x / np.hypot(*gradient) - 1
        assert miscounted(pattern, lattice) == 0, seed
        assert abs(error) < 5e-4, seed
        pulls.append(error * scale.metres_per_pixel_x / scale.metres_per_pixel_x_std)
    # A spread from 12 values scatters by 1 / sqrt(24) = 0.2; three of these, and the floor makes some pulls small.
    assert 0.3 < np.sqrt(np.mean(np.square(pulls))) < 1.6


def test_places_on_lines_are_good_to_hundredths_of_a_pixel():
    """Marks lie within 0.03 px rms of the true lines, in bright light and at a contrast of 50 to 1 noise."""
    pattern = Pattern(rotation=12.0, pitch=30.0)
    lattice, _ = found(pattern)
    i = lattice_coordinates(pattern, lattice.marks.x, lattice.marks.y)[0]
    assert np.sqrt(np.mean(((i - np.rint(i)) * pattern.pitch) ** 2)) < 0.03


@pytest.mark.parametrize("rotation", [-40.0, -3.0, 10.0, 44.0])
def test_rotation_is_told_with_its_sign(rotation):
    """A grid turned from +x toward +y by an angle is told to be turned by it, modulo the grid's quarter turn."""
    pattern = Pattern("grid", rotation=rotation, pitch=27.0, width=480, height=360)
    truth = render(pattern, np.random.default_rng(1)).picture.astype(np.float32)
    scale = scale_of(Picture(Path("a.png"), truth, "", ""), find_pattern(truth), pitch=1.0).scale
    assert scale.rotation_deg == pytest.approx(rotation, abs=0.01)  # 0.01 degree is 0.06 px over the picture


def test_tilt_and_lens_come_out_as_they_were_put_in():
    """The fitted perspective and radial terms are those of the map that drew the picture.

    Closed form: the renderer divides by 1 + t q after the radial term, as the fit does.
    """
    pattern = Pattern("dots", pitch=24.0, duty=0.4, rotation=8.0, tilt=(0.03, -0.02), radial=0.012)
    lattice, _ = found(pattern)
    assert lattice.fit.terms == ("radial", "tilt")
    assert lattice.fit.radial == pytest.approx(0.012, abs=4 * np.sqrt(lattice.fit.covariance[6, 6]) + 1e-4)
    assert lattice.fit.tilt == pytest.approx([0.03, -0.02], abs=5e-4)  # dots under tilt are not quite round


def test_board_agrees_with_opencvs_corners():
    """Corners of a rendered chessboard agree with OpenCV's own corner finder, and so does the pitch.

    Source: cv2.findChessboardCornersSB.
    """
    pattern = Pattern(
        "board", width=480, height=360, pitch=45.0, rotation=4.0, blur=1.2, phase=(0.1, 0.05), part=0.9
    )
    picture = render(pattern, np.random.default_rng(0)).picture
    lattice, error = found(pattern)
    assert (lattice.pattern, lattice.features) == ("grid", "corners")
    assert abs(error) < 2e-4
    ok, corners = cv2.findChessboardCornersSB(
        picture, (7, 5), flags=cv2.CALIB_CB_ACCURACY | cv2.CALIB_CB_EXHAUSTIVE
    )
    assert ok
    theirs = corners.reshape(-1, 2)  # OpenCV 4 and 5 shape them differently
    ours = np.stack([lattice.marks.x, lattice.marks.y], axis=1)[lattice.marks.axis == 0]
    nearest = np.sqrt(((theirs[:, None, :] - ours[None, :, :]) ** 2).sum(axis=2)).min(axis=1)
    # OpenCV states no uncertainty for these corners; both finders are good to some hundredths of a pixel.
    assert np.median(nearest) < 0.05
    edges = np.hypot(*(theirs.reshape(5, 7, 2)[:, -1] - theirs.reshape(5, 7, 2)[:, 0]).T) / 6
    assert edges.mean() == pytest.approx(45.0, rel=2e-3)


def refusal(picture: np.ndarray, kind: str | None = None) -> str:
    with pytest.raises(PatternError) as caught:
        find_pattern(picture, kind, name="a.png")
    message = str(caught.value)
    assert message.startswith("a.png: ")
    assert "\n" not in message
    return message


def test_noise_and_flat_fields_are_refused():
    """White noise, coarse noise, a flat field and a slope of light hold no pattern."""
    rng = np.random.default_rng(0)
    noise = rng.normal(100, 20, (360, 480))
    refusal(noise)
    refusal(cv2.GaussianBlur(noise, (0, 0), 4))
    refusal(np.rint(rng.normal(100, 1, (360, 480))))
    refusal(np.add.outer(np.arange(360.0), np.arange(480.0)))
    assert "flat" in refusal(np.full((360, 480), 90.0))
    assert "48" in refusal(np.zeros((20, 20)))


@pytest.mark.parametrize(
    "name", ["camera", "coins", "brick", "page", "text", "moon", "grass", "gravel", "coffee"]
)
def test_photographs_of_something_else_are_refused(name):
    """A man with a camera, rows of coins, a brick wall, print, the moon: nothing to measure a scale from.

    Source: pictures that come with scikit-image.
    """
    picture = getattr(data, name)()
    refusal(picture.mean(axis=2) if picture.ndim == 3 else picture)


def test_too_few_lines_are_refused():
    """Three lines are a picture of three lines; their number is told."""
    pattern = Pattern(width=480, height=360, pitch=150.0, duty=0.06, phase=(0.0, 0.0))
    assert "at least 4" in refusal(render(pattern, np.random.default_rng(0)).picture)


def ruled(strengths, *, pitch=30.0, first=20.0, width=640, height=400):
    """Dark ruled lines of given strengths, one after another."""
    x = np.arange(width)[None, :]
    profile = sum(s * np.exp(-0.5 * ((x - first - n * pitch) / 1.8) ** 2) for n, s in enumerate(strengths))
    noise = np.random.default_rng(1).normal(0, 2, (height, width))
    return 180 - 100 * np.broadcast_to(profile, (height, width)) + noise


def test_a_pitch_with_a_rival_is_refused():
    """Lines that are strong and faint in turn may be ruled at one pitch or at twice it: no answer."""
    assert find_pattern(ruled([1.0] * 20)).counts == (20,)
    assert "rival at twice" in refusal(ruled([1.0, 0.4] * 10))


def test_a_ruling_that_is_finer_at_one_end_is_refused():
    """Where the gaps hold lines too over half of the ruling, its pitch may be either: no answer."""
    strengths = np.zeros(40)
    strengths[::2] = 1.0
    strengths[1:22:2] = 1.0
    assert "rival" in refusal(ruled(strengths, pitch=15.0))


def test_the_kind_that_is_asked_for_is_the_kind_that_is_given():
    """A grid is no dot grid, and lines are no grid; asked for lines, a grid gives its stronger family."""
    grid = Pattern("grid", pitch=40.0, duty=0.1, width=480, height=360)
    picture = render(grid, np.random.default_rng(0)).picture
    refusal(picture, "dots")
    assert find_pattern(picture, "lines").pattern == "lines"
    refusal(render(replace(grid, kind="lines"), np.random.default_rng(0)).picture, "grid")
    with pytest.raises(ValueError, match="hexagons"):
        find_pattern(picture, "hexagons")


def test_the_picture_is_left_as_it_was():
    """Finding a pattern does not write to the picture."""
    picture = render(Pattern(width=320, height=240), np.random.default_rng(0)).picture
    before = picture.copy()
    find_pattern(picture)
    assert (picture == before).all()
