"""Changes of light and place are told on compressed recordings; what a codec does to the noise is none."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tracker.records import Settings
from tracker.seeing.light import Light, compare, light_of, strange
from tracker.seeing.see import see
from tracker.simulate import Scene
from tracker.simulate.files import open_writer

SAMPLES = Path(__file__).parents[3] / "sample_videos"
SIZE = (144, 192)
ENDINGS = {"h264": "mp4", "mjpeg": "avi"}


def film(folder: Path, codec: str, grounds: list[np.ndarray], *, lit: int = 3) -> Path:
    """A recording of 25 frames a second: the grounds one by one, some droplets that drift, camera noise."""
    height, width = SIZE
    path = folder / f"film.{ENDINGS[codec]}"
    rng = np.random.default_rng(4)
    y, x = np.mgrid[:height, :width]
    scene = Scene(width=width, height=height, codec=codec)
    with open_writer(path, scene, shown=path) as write:
        for i, ground in enumerate(grounds):
            light = ground.copy()
            for n in range(lit):
                a, b = 20 + 50 * n + 0.3 * i, 30 + 40 * n + 0.2 * i
                light += 90 * np.exp(-((x - a) ** 2 + (y - b) ** 2) / (2 * 1.7**2))
            write(np.clip(np.rint(rng.normal(light, 2)), 0, 255).astype(np.uint8), i / 25)
    return path


def test_noise_that_a_codec_holds_and_lets_go_is_no_change_of_light():
    """The light of this recording does not change, though its noise doubles where the codec shows it again."""
    seen = see(SAMPLES / "changing.mp4", settings=Settings(end=4.5))
    assert not [w for w in seen.warnings if "light" in w or "camera" in w]
    assert seen.report["illuminations"] == 1


@pytest.mark.parametrize("codec", ["h264", "mjpeg"])
def test_another_light_is_told_on_compressed_recordings(tmp_path, codec):
    """A lamp that throws up to 12 grey on one side from frame 60 on is told at its time, and nothing else is."""
    y, x = np.mgrid[: SIZE[0], : SIZE[1]]
    before = 25 + 0.05 * y
    after = before + 12 * x / SIZE[1]
    seen = see(film(tmp_path, codec, [before] * 60 + [after] * 60), settings=Settings())
    assert seen.warnings == ("the light changes at 2.40 s",)
    assert len(seen.cuts) == 0


@pytest.mark.parametrize("codec", ["h264", "mjpeg"])
def test_a_moved_camera_is_told_on_compressed_recordings(tmp_path, codec):
    """A reticle that is shifted by (4, 3) px at frame 60 is told with its shift, which the picture gives to 0.3 px."""
    y, x = np.mgrid[: SIZE[0], : SIZE[1]]

    def reticle(across: int, down: int) -> np.ndarray:
        lines = np.exp(-0.5 * ((x - across) % 40 - 20) ** 2) + np.exp(-0.5 * ((y - down) % 32 - 16) ** 2)
        return 45 * (1 - 0.6 * np.minimum(lines, 1))

    seen = see(film(tmp_path, codec, [reticle(0, 0)] * 60 + [reticle(4, 3)] * 60), settings=Settings())
    told = next(w for w in seen.warnings if "camera was moved" in w)
    shift = [float(v) for v in told.split("(")[1].split(")")[0].split(",")]
    np.testing.assert_allclose(shift, (4, 3), atol=0.3)
    assert "at 2.40 s" in told
    assert 60 in seen.cuts.tolist()


def test_a_lamp_in_a_corner_is_no_other_light():
    """A bright square of a hundredth of the picture is weighed lightly; a weak change everywhere counts."""
    rng = np.random.default_rng(1)
    ground = np.full((240, 320), 30.0)
    light = Light(np.full((30, 40), 30.0, np.float32), 0.0, 0.3, False)
    lamp, everywhere = ground.copy(), ground.copy()
    lamp[8:36, 8:36] += 150
    everywhere += np.linspace(-8, 8, 320)
    pictures = [rng.normal(p, 2).astype(np.float32) for p in (ground, lamp, everywhere)]
    assert strange(light, *compare(light, pictures)).tolist() == [False, False, True]


def test_flicker_of_a_bright_background_is_corrected_where_it_exceeds_the_noise():
    """Whole grey values of 500 with 0.3 % of flicker, 1.5 grey, twice what a filter of 2 px leaves of 5 grey of noise.

    The light of 1024 pixels is known to 5 / 500 / sqrt(1024) = 3e-4; the bound is twice that, as the ground and the
    limits of what is near take part. Without flicker, there is nothing to correct.
    """
    rng = np.random.default_rng(6)
    light = 1 + 0.003 * rng.normal(size=40)
    for true, flickers in ((light, True), (np.ones(40), False)):
        noise = rng.normal(0, 5, (40, 256, 256))
        pictures = np.rint(500 * true[:, None, None] + noise).astype(np.uint16)
        found = light_of(pictures, None, 0.0)
        assert found.flickers == flickers
        ratio, _ = compare(found, list(pictures))
        assert np.std(ratio / ratio.mean() - true / true.mean()) < 2 * 5 / 500 / np.sqrt(1024)
