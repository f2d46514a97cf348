"""The uncertainty of the scale, from the picture of the pattern to the charge of a droplet."""

from __future__ import annotations

import shutil
from pathlib import Path

import cv2
import numpy as np
import pandas as pd
import pytest
from reference_pictures import Pattern, render
from small_term import SCENE, make_recording

from calibration.measure import measure_scale
from calibration.scale import write_scale
from tracker.evaluate import evaluate_result
from tracker.measure import measure
from tracker.simulate import Scene, write_bench

TOLERANCE = 0.004
# Droplets that fall fast against their diffusion, so that the radius rests on the fall speed alone.
LARGE = {
    "radii": (1.1e-6, 1.2e-6, 1.3e-6, 1.2e-6),
    "charge_numbers": (-9, -12, -14, -11),
    "height": 320,
    "seconds": 6.0,
}


@pytest.fixture(scope="module")
def home(tmp_path_factory) -> Path:
    """A recording, a picture of a grid with the same camera setting, and a bench file that names its scale."""
    folder = tmp_path_factory.mktemp("bench A")
    recording = make_recording(folder / "clip.avi", seed=3, **LARGE)
    text = write_bench(Scene(**(SCENE | LARGE)), folder / "bench.toml", recording=recording).read_text(
        encoding="utf-8"
    )
    lines = [
        'scale = "scale.json"\nbinning = 1' if line.startswith("metres_per_pixel") else line
        for line in text.splitlines()
    ]
    (folder / "bench.toml").write_text("\n".join(lines) + "\n", encoding="utf-8")
    pattern = Pattern("grid", width=320, height=330, pitch=100 / 3, rotation=2.0)  # 0.1 mm at 3 um a pixel
    assert cv2.imwrite(str(folder / "grid.png"), render(pattern, np.random.default_rng(0)).picture)
    return folder


def scale_file(home: Path, text: str) -> None:
    """Measure the scale with a pitch and its tolerance into the bench's scale file."""
    write_scale(measure_scale([home / "grid.png"], pitch_text=text)[0], home / "scale.json")


def test_tolerance_of_the_pattern_arrives_in_every_charge(home, tmp_path):
    """0.4 % in the pitch adds 0.4 % times the charge's sensitivity to the scale, and nothing to the own part.

    Closed form: charge goes with the root of the fall speed and with the drive, so with the scale to the power 3/2;
    slip and diffusion change this by some hundredths at radii above 1 um.
    """
    scale_file(home, "0.1000(0) mm")
    result = measure(home / "clip.avi", out=tmp_path / "clip.fallrise")
    exact = pd.read_csv(result.folder / "droplets.csv")
    scale_file(home, f"0.1000({round(TOLERANCE * 1000)}) mm")
    shutil.copytree(tmp_path / "clip.fallrise", home / "clip.fallrise")
    wide = pd.read_csv(
        evaluate_result(home / "clip.fallrise", bench=home / "bench.toml").folder / "droplets.csv"
    )
    charged = exact["charge_shared_std_c"].notna() & (exact["charge_c"].abs() > 0)
    assert charged.sum() >= 2
    added = np.sqrt(wide["charge_shared_std_c"] ** 2 - exact["charge_shared_std_c"] ** 2)[charged]
    power = added / exact["charge_c"].abs()[charged] / TOLERANCE
    assert power.to_numpy() == pytest.approx(1.5, abs=0.1)
    assert wide["charge_own_std_c"][charged].to_numpy() == pytest.approx(
        exact["charge_own_std_c"][charged].to_numpy(), rel=1e-3
    )
    joined = np.hypot(wide["charge_own_std_c"], wide["charge_shared_std_c"])
    assert wide["charge_std_c"][charged].to_numpy() == pytest.approx(joined[charged].to_numpy(), rel=1e-6)
