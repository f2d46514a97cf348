"""From pictures and recordings of a pattern to a scale and its uncertainty."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from dataclasses import replace
from datetime import datetime
from pathlib import Path

import av
import cv2
import numpy as np
import pytest
from PIL import Image
from reference_pictures import Pattern, lattice_coordinates, render, sample_reticle

from calibration.drawing import draw_scale, write_scale_files
from calibration.errors import PatternError, QuantityError, ScaleError
from calibration.measure import measure_scale, pool_scales
from calibration.pictures import read_picture
from calibration.scale import Scale, read_scale, to_metres

SAMPLES = Path(__file__).parents[2] / "sample_videos"
SMALL = Pattern("grid", width=400, height=300, pitch=25.0, rotation=5.0, duty=0.15)


def saved(pattern: Pattern, path: Path, *, seed: int = 0) -> Path:
    """Draw a pattern into a picture file."""
    assert cv2.imwrite(str(path), render(pattern, np.random.default_rng(seed)).picture)
    return path


def test_scale_of_a_grid_is_right_along_both_axes(tmp_path):
    """Pixels that are not square give two scales, each within four standard uncertainties, and a warning."""
    path = saved(replace(SMALL, aspect=1.03), tmp_path / "grid.png")
    scale, found = measure_scale([path], pitch_text="0.1000(0) mm")
    truth = render(replace(SMALL, aspect=1.03), np.random.default_rng(0))
    assert (
        abs(scale.metres_per_pixel_x * truth.pitch_x / 1e-4 - 1)
        < 4 * scale.metres_per_pixel_x_std / scale.metres_per_pixel_x
    )
    assert (
        abs(scale.metres_per_pixel_y * truth.pitch_y / 1e-4 - 1)
        < 4 * scale.metres_per_pixel_y_std / scale.metres_per_pixel_y
    )
    assert scale.metres_per_pixel_y / scale.metres_per_pixel_x == pytest.approx(1.03, rel=3e-4)
    assert any("not square" in warning for warning in scale.warnings)
    assert (scale.pattern, scale.width_px, scale.height_px) == ("grid", 400, 300)
    assert found[0].lattice.counts[0] >= 15


def test_tolerance_of_the_pattern_goes_into_the_uncertainty(tmp_path):
    """A 0.1 mm micrometer good to 0.2 um has 0.2 % in its scale, in quadrature with the fit.

    Source: ASTM B487-85: spacing of a stage micrometer known within 0.2 um or 0.1 %, whichever is greater.
    """
    path = saved(SMALL, tmp_path / "grid.png")
    exact, _ = measure_scale([path], pitch_text="0.1000(0) mm")
    within, _ = measure_scale([path], pitch_text="0.1000(2) mm")
    assert within.metres_per_pixel_x == exact.metres_per_pixel_x
    fit = exact.metres_per_pixel_x_std / exact.metres_per_pixel_x
    assert within.metres_per_pixel_x_std / within.metres_per_pixel_x == pytest.approx(
        np.hypot(fit, 2e-3), rel=1e-9
    )
    assert within.pitch_std == pytest.approx(2e-7)
    assert not any("no uncertainty" in warning for warning in within.warnings)


def test_a_pitch_without_tolerance_is_warned_of(tmp_path):
    """Where none is stated none is taken, and the result says so."""
    scale, _ = measure_scale([saved(SMALL, tmp_path / "grid.png")], pitch_text="0.1 mm")
    assert scale.pitch_std == 0
    assert any("no uncertainty" in warning for warning in scale.warnings)
    with pytest.raises(QuantityError, match="above 0"):
        measure_scale([tmp_path / "grid.png"], pitch_text="-0.1 mm")


def test_ruled_lines_say_which_direction_they_measure(tmp_path):
    """For ruled lines the other axis equals the measured one, and a warning says so."""
    scale, _ = measure_scale(
        [saved(replace(SMALL, kind="lines"), tmp_path / "lines.png")], pitch_text="0.1(0) mm"
    )
    assert scale.metres_per_pixel_x == scale.metres_per_pixel_y
    assert any("across them only" in warning for warning in scale.warnings)


def test_a_lens_is_corrected_on_points(tmp_path):
    """With the stored correction true lattice places become evenly spaced metres; without it they are bent.

    The spacing of the places is exact; corrected they stray by less than the uncertainty over the picture, uncorrected
    by the lens's 1.5 % of half the diagonal, 3.75 px.
    """
    pattern = replace(SMALL, kind="dots", duty=0.4, radial=-0.015)
    scale, _ = measure_scale([saved(pattern, tmp_path / "dots.png")], pitch_text="0.1(0) mm")
    assert scale.distortion is not None
    assert scale.distortion.corrected
    assert scale.distortion.radial == pytest.approx(-0.015, abs=5e-4)
    assert any("lens" in warning for warning in scale.warnings)
    x, y = (v.ravel() for v in np.meshgrid(np.linspace(0, 399, 9), np.linspace(0, 299, 7)))
    i, j, _ = lattice_coordinates(pattern, x, y)
    x_m, y_m = to_metres(scale, x, y)
    turned = np.stack([x_m, y_m, np.ones_like(x_m)], axis=1)
    for coordinate in (i, j):
        rest = coordinate - turned @ np.linalg.lstsq(turned, coordinate, rcond=None)[0]
        assert np.abs(rest).max() * pattern.pitch < 0.1  # px
    bare = np.stack([x, y, np.ones_like(x)], axis=1)
    assert np.abs(i - bare @ np.linalg.lstsq(bare, i, rcond=None)[0]).max() * pattern.pitch > 0.8


def test_a_tilted_pattern_widens_the_uncertainty_and_is_told(tmp_path):
    """A perspective that changes the scale by some per cent over the picture is in its uncertainty, not corrected."""
    pattern = replace(SMALL, tilt=(0.04, 0.0))
    scale, _ = measure_scale([saved(pattern, tmp_path / "grid.png")], pitch_text="0.1(0) mm")
    assert scale.distortion is not None
    assert not scale.distortion.corrected
    assert any("tilted" in warning for warning in scale.warnings)
    # Spacing goes as (1 + t q)^2 along x and 1 + t q along y, q up to 0.8 at the sides: 4 % rms and 2 % rms.
    assert scale.metres_per_pixel_x_std / scale.metres_per_pixel_x == pytest.approx(0.03, rel=0.5)
    truth = render(pattern, np.random.default_rng(0))
    assert scale.metres_per_pixel_x * truth.pitch_x / 1e-4 == pytest.approx(1, abs=1e-3)  # at the centre


def scales(values, *, std=1e-9, dates=None):
    """Scales of several pictures."""
    dates = dates or ["2026-10-05T10:00:00"] * len(values)
    return [
        Scale(
            "grid",
            1e-4,
            0.0,
            value,
            std,
            value,
            std,
            picture=f"{n}.png",
            width_px=640,
            height_px=480,
            date=date,
        )
        for n, (value, date) in enumerate(zip(values, dates, strict=True))
    ]


def test_pictures_that_agree_are_averaged():
    """Weighted mean and its uncertainty are the closed forms; no warning."""
    pooled = pool_scales(scales([3.000e-6, 3.001e-6, 3.002e-6]))
    assert pooled.metres_per_pixel_x == pytest.approx(3.001e-6)
    assert pooled.metres_per_pixel_x_std == pytest.approx(1e-9 / np.sqrt(3))
    assert pooled.warnings == ()
    assert [entry.picture for entry in pooled.pictures] == ["0.png", "1.png", "2.png"]


def test_pictures_that_differ_widen_the_uncertainty():
    """Scatter beyond the uncertainties grows the mean's by the root of chi-squared over its degrees of freedom.

    Source: R. T. Birge, Phys. Rev. 40 (1932), 207-227; closed form for values at -10, 0 and 10 standard deviations.
    """
    pooled = pool_scales(scales([2.99e-6, 3.00e-6, 3.01e-6]))
    assert pooled.metres_per_pixel_x_std == pytest.approx(1e-9 / np.sqrt(3) * np.sqrt(200 / 2))
    assert any("more than their uncertainties allow" in warning for warning in pooled.warnings)


def test_a_drift_with_the_date_is_told():
    """A scale that grows by 0.1 % a day over five days is told with its rate; pictures of one hour have no drift."""
    days = [f"2026-10-{5 + n:02d}T10:00:00" for n in range(6)]
    values = [3e-6 * (1 + 1e-3 * n) for n in range(6)]
    told = pool_scales(scales(values, dates=days)).warnings
    assert any("drifts" in warning and "+0.1" in warning for warning in told)
    steady = [3e-6 + 1e-9 * (-1) ** n for n in range(6)]
    assert not any("drifts" in w for w in pool_scales(scales(steady, dates=days)).warnings)
    hours = [f"2026-10-05T10:0{n}:00" for n in range(6)]
    assert not any("drifts" in w for w in pool_scales(scales(values, dates=hours)).warnings)


def test_pictures_of_different_size_are_not_pooled():
    """Pictures with other numbers of pixels are of another camera setting."""
    one, two = scales([3e-6, 3e-6])
    with pytest.raises(PatternError, match="one size"):
        pool_scales([one, replace(two, width_px=320)])


def test_two_pictures_give_one_scale(tmp_path):
    """Two pictures of one bench, turned and moved between them, agree and are joined."""
    one = saved(SMALL, tmp_path / "one.png", seed=1)
    two = saved(replace(SMALL, rotation=-7.0, phase=(0.9, 0.1)), tmp_path / "two.png", seed=2)
    scale, found = measure_scale([one, two], pitch_text="0.1000(0) mm")
    assert len(found) == 2
    assert scale.metres_per_pixel_x * 25.0 / 1e-4 == pytest.approx(1, abs=2e-4)
    singles = [one.scale.metres_per_pixel_x_std for one in found]
    assert scale.metres_per_pixel_x_std < min(singles)
    assert len(scale.pictures) == 2


def test_a_picture_tells_its_date(tmp_path):
    """The camera's date is taken where the file has one, the date of the file otherwise."""
    path = tmp_path / "dated.tif"
    exif = Image.Exif()
    exif[0x0132] = "2026:10:05 11:12:13"
    Image.fromarray(render(SMALL, np.random.default_rng(0)).picture).save(path, exif=exif)
    assert read_picture(path).date == "2026-10-05T11:12:13"
    bare = saved(SMALL, tmp_path / "bare.png")
    os.utime(bare, (1_700_000_000, 1_700_000_000))
    assert datetime.fromisoformat(read_picture(bare).date).timestamp() == 1_700_000_000


def film(path: Path, *, frames: int = 24, droplets: int = 12) -> Pattern:
    """Write a recording: droplets fall over a ruled reticle that stands still."""
    pattern = Pattern(width=320, height=240, pitch=24.0, rotation=-0.8, duty=0.12, contrast=0.35, noise=0.0)
    still = render(replace(pattern, supersample=2), np.random.default_rng(0)).picture.astype(float)
    rng = np.random.default_rng(5)
    start = rng.uniform([0, -240], [320, 240], (droplets, 2))
    speed = rng.uniform(4, 12, droplets)
    gy, gx = np.mgrid[:240, :320]
    with av.open(str(path), "w") as container:
        stream = container.add_stream("ffv1", rate=25)
        stream.width, stream.height, stream.pix_fmt = 320, 240, "gray"
        for n in range(frames):
            picture = still + rng.normal(0, 3, still.shape)
            for (x, y), v in zip(start, speed, strict=True):
                picture += 90 * np.exp(-((gx - x) ** 2 + (gy - y - v * n) ** 2) / (2 * 2.0**2))
            frame = av.VideoFrame.from_ndarray(np.clip(picture, 0, 255).astype(np.uint8), format="gray")
            container.mux(stream.encode(frame))
        container.mux(stream.encode())
    return pattern


def test_a_reticle_in_the_recording_itself_gives_the_scale(tmp_path):
    """Droplets that fall over a ruled reticle leave the average of the frames; the reticle stays in it."""
    pattern = film(tmp_path / "clip.mkv")
    scale, found = measure_scale([tmp_path / "clip.mkv"], pitch_text="0.1000(0) mm")
    assert found[0].picture.frames > 10
    error = scale.metres_per_pixel_x * pattern.pitch / 1e-4 - 1
    assert abs(error) < 4 * scale.metres_per_pixel_x_std / scale.metres_per_pixel_x
    assert abs(error) < 5e-4
    assert (scale.width_px, scale.height_px) == (320, 240)


def test_files_that_are_no_pictures_are_told(tmp_path):
    """A missing file, a text and a damaged video are each one line with the file's name."""
    (tmp_path / "text.png").write_text("no picture", encoding="utf-8")
    (tmp_path / "empty.png").write_bytes(b"")
    (tmp_path / "clip.mp4").write_bytes(b"no video at all")
    for name in ("text.png", "empty.png", "clip.mp4", "missing.png"):
        with pytest.raises(PatternError, match=name):
            measure_scale([tmp_path / name], pitch_text="0.1(0) mm")


def test_the_drawing_shows_a_panel_for_each_picture(tmp_path):
    """The drawing is a PNG of some size, and grows with the number of pictures."""
    path = saved(SMALL, tmp_path / "grid.png")
    one = draw_scale(*measure_scale([path], pitch_text="0.1(0) mm"))
    two = draw_scale(*measure_scale([path, path], pitch_text="0.1(0) mm"))
    heights = [cv2.imdecode(np.frombuffer(png, np.uint8), cv2.IMREAD_COLOR).shape[0] for png in (one, two)]
    assert heights[1] > 1.5 * heights[0]


def test_the_drawing_never_takes_the_place_of_the_picture(tmp_path):
    """A scale file that would put its drawing over the reference picture is refused, and nothing is written."""
    path = saved(SMALL, tmp_path / "scale.png")
    before = path.read_bytes()
    scale, found = measure_scale([path], pitch_text="0.1(0) mm")
    with pytest.raises(ScaleError, match="overwritten"):
        write_scale_files(scale, found, tmp_path / "scale.json")
    assert path.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["scale.png"]


def command(*arguments: object, cwd: Path) -> subprocess.CompletedProcess[str]:
    """Run `fallrise scale` as a user does."""
    line = [sys.executable, "-m", "tracker.cli", "scale", *map(str, arguments)]
    return subprocess.run(line, capture_output=True, text=True, cwd=cwd, check=False, timeout=120)


def test_command_writes_scale_and_drawing(tmp_path):
    """The command writes scale.json and scale.png, prints the scale, and with --json the file's own values."""
    picture = saved(SMALL, tmp_path / "grid.png")
    done = command(picture, "--pitch", "0.1000(2) mm", "--json", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    assert json.loads(done.stdout) == json.loads((tmp_path / "scale.json").read_text(encoding="utf-8"))
    assert read_scale(tmp_path / "scale.json").pattern == "grid"
    assert (tmp_path / "scale.png").read_bytes()[:4] == b"\x89PNG"


@pytest.mark.parametrize(
    ("arguments", "status", "told"),
    [
        (["noise.png", "--pitch", "0.1(0) mm"], 1, "noise.png"),
        (["grid.png", "--pitch", "0.1"], 2, "unit is missing"),
        (["grid.png", "--pitch", "0.1(0) mm", "--pattern", "waves"], 2, "lines, grid or dots"),
        (["grid.png"], 2, "--pitch"),
    ],
)
def test_command_refuses_in_one_line_and_writes_nothing(tmp_path, arguments, status, told):
    """No pattern ends with 1, a wrong pitch or pattern with 2; no file appears."""
    saved(SMALL, tmp_path / "grid.png")
    cv2.imwrite(
        str(tmp_path / "noise.png"), np.random.default_rng(0).integers(0, 255, (240, 320), dtype=np.uint8)
    )
    done = command(*arguments, cwd=tmp_path)
    assert done.returncode == status
    assert told in done.stderr
    assert "Traceback" not in done.stderr
    assert sorted(path.name for path in tmp_path.iterdir()) == ["grid.png", "noise.png"]


def test_the_sample_picture_and_its_scale_belong_together():
    """The reference picture among the samples has its stored scale: 3.000 um a pixel, within the tolerance."""
    stored = read_scale(SAMPLES / "scale.json")
    fresh, _ = measure_scale([SAMPLES / "reticle.png"], pitch_text="0.1000(2) mm")
    assert stored.picture_sha256 == fresh.picture_sha256
    # Other builds of OpenCV round otherwise; a hundredth of the uncertainty without the tolerance is 1e-7.
    assert fresh.metres_per_pixel_x == pytest.approx(stored.metres_per_pixel_x, rel=1e-6)
    assert abs(stored.metres_per_pixel_x - 3e-6) < 2e-5 * 3e-6  # the picture was drawn with an exact pitch
    assert stored.relative_std == pytest.approx(2e-3, rel=0.01)
    assert (sample_reticle().shape[1], sample_reticle().shape[0]) == (stored.width_px, stored.height_px)
