"""Whole passes over small recordings: what is odd about a recording costs no droplet and is told."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import tifffile
from tracking_scores import Track, as_tracks, score

from tracker.errors import UsageError
from tracker.records import Flag, Recording, Seen, Settings
from tracker.seeing.link import link
from tracker.seeing.see import see
from tracker.simulate import Scene, simulate

SCENE = Scene(
    droplets=5, seconds=6, width=240, height=180, metres_per_pixel=4e-6, first=1.5, plateau=1.5, codec="ffv1",
    radius=(0.5e-6, 0.9e-6), charge_number=(1, 4),
)  # fmt: skip


def make(
    folder: Path, scene: Scene = SCENE, *, name: str = "clip.mkv", seed: int = 5
) -> tuple[Path, dict[str, np.ndarray]]:
    """A recording and its truth, one row a written frame."""
    path = folder / name
    files = simulate(scene, path, seed=seed)
    truth = dict(np.load(files.truth_npz))
    written = truth["written"]
    return path, {k: v[written] for k, v in truth.items()}


def errors(seen: Seen, truth: dict[str, np.ndarray]) -> tuple[np.ndarray, np.ndarray, float, float]:
    """Errors of x and y of lone droplets, share of visible droplets found, false sightings a frame."""
    s = seen.sightings
    x, y = truth["x_px"], truth["y_px"]
    d = np.hypot(x[s.frame] - s.x[:, None], y[s.frame] - s.y[:, None])
    own, near = d.argmin(1), d.min(1)
    lone = np.sort(d, axis=1)[:, 1] > 15
    m = 4
    inside = (x > m) & (y > m) & (x < seen.recording.width - m) & (y < seen.recording.height - m)
    hit = np.zeros(x.shape, np.bool_)
    hit[s.frame[near < 3], own[near < 3]] = True
    good = lone & (near < 2)
    return (
        (s.x - x[s.frame, own])[good], (s.y - y[s.frame, own])[good],
        float(hit[inside].mean()), float(np.count_nonzero(near > 4) / len(x)),
    )  # fmt: skip


@pytest.mark.parametrize("spot", [1.0, 1.7, 3.0])
def test_lossless_recording_is_seen_at_the_noise(tmp_path, spot):
    """All droplets are found, the width comes out, and the standard deviations are true."""
    path, truth = make(tmp_path, replace(SCENE, spot=spot))
    seen = see(path, settings=Settings())
    _, _, found, false = errors(seen, truth)
    assert found > 0.99
    assert false < 0.2  # 0.05 asked for: 7.5 expected in 150 frames
    assert seen.report["spot_width_px"] == pytest.approx(spot, rel=0.05)  # motion widens it by up to 3 %
    s = seen.sightings
    d = np.hypot(truth["x_px"][s.frame] - s.x[:, None], truth["y_px"][s.frame] - s.y[:, None])
    own = d.argmin(1)
    fine = (d.min(1) < 1) & (s.flags == 0)
    pulls = ((s.x - truth["x_px"][s.frame, own]) / s.x_std)[fine]
    # 4 / sqrt(2 n) by chance, and a tenth for what the camera's noise is known to
    assert pulls.std() == pytest.approx(1, abs=0.1 + 4 / np.sqrt(2 * len(pulls)))


@pytest.mark.parametrize(
    "change",
    [
        {"flicker": 0.03}, {"lines": 5, "columns": 4}, {"lines": 4, "line_depth": -0.4},
        {"background": 0.0, "gradient": 0.0}, {"bits": 12}, {"stuck": 4}, {"lamp": (8, 8, 14, 14)},
        {"peak": 330.0}, {"repeated": 0.05, "lost": 0.05},
    ],
    ids=["flicker", "dark lines", "bright lines", "black ground", "12 bit", "specks", "lamp", "saturated", "losses"],
)  # fmt: skip
def test_hard_recordings_keep_every_droplet(tmp_path, change):
    """Each difficulty leaves one track a droplet, none beside, and errors of the usual size."""
    path, truth = make(tmp_path, replace(SCENE, **change))
    seen = see(path, settings=Settings())
    dx, dy, found, false = errors(seen, truth)
    repeated = len(seen.recording.repeated) / len(truth["x_px"])
    assert found > 0.985 - repeated
    assert false < 0.3
    tracks = link(seen, field=None, settings=Settings())
    t = tracks.sightings
    d = np.hypot(truth["x_px"][t.frame] - t.x[:, None], truth["y_px"][t.frame] - t.y[:, None])
    for number in tracks.numbers:
        rows = tracks.rows(int(number))
        assert np.median(d[rows].min(1)) < 0.5
    plain = np.sqrt(np.mean(np.concatenate([dx, dy]) ** 2))
    assert plain < 0.12  # about 0.04 px on the plain scene; dark lines take half of the light


def test_light_switched_on_in_the_middle_is_followed(tmp_path):
    """When the ground gets much brighter, the droplets before and after are both seen, and it is told."""
    rng = np.random.default_rng(1)
    y, x = np.mgrid[:120, :160]
    pictures = []
    for i in range(160):
        spot = 90 * np.exp(-((x - 30 - 0.5 * i) ** 2 + (y - 60) ** 2) / (2 * 1.7**2))
        ground = 20 + 0.1 * x if i < 80 else 75 + 0.2 * y
        pictures.append(np.clip(rng.normal(ground + spot, 2), 0, 255).astype(np.uint8))
    tifffile.imwrite(tmp_path / "light.tif", np.stack(pictures))
    seen = see(tmp_path / "light.tif", settings=Settings(), frame_rate=25.0)
    s = seen.sightings
    near = np.hypot(s.x - 30 - 0.5 * s.frame, s.y - 60) < 1
    assert len(np.unique(s.frame[near])) >= 156
    assert np.count_nonzero(~near) < 20
    assert any("light changes" in w for w in seen.warnings)
    assert len(seen.cuts) == 0


def test_droplet_held_for_half_the_recording_is_followed(tmp_path):
    """A droplet that sits at one place for the first half is seen in every frame of it, and is one track."""
    rng = np.random.default_rng(1)
    y, x = np.mgrid[:120, :160]
    pictures = []
    for i in range(200):
        light = 30 + 90 * np.exp(-((x - 30 - 0.3 * i) ** 2 + (y - 30) ** 2) / (2 * 1.7**2))
        if i < 100:
            light += 90 * np.exp(-((x - 100.3) ** 2 + (y - 70.4) ** 2) / (2 * 1.7**2))
        pictures.append(np.clip(rng.normal(light, 2), 0, 255).astype(np.uint8))
    tifffile.imwrite(tmp_path / "held.tif", np.stack(pictures))
    seen = see(tmp_path / "held.tif", settings=Settings(), frame_rate=25.0)
    tracks = link(seen, field=None, settings=Settings())
    t = tracks.sightings
    held = np.hypot(t.x - 100.3, t.y - 70.4) < 0.5
    assert len(np.unique(t.frame[held])) == 100
    assert len(np.unique(tracks.droplet[held])) == 1


def test_moved_camera_is_told_and_cuts(tmp_path):
    """A shift of the whole picture with its lines is a cut and a warning."""
    rng = np.random.default_rng(1)
    pictures = []
    for i in range(160):
        shift = 0 if i < 90 else 5
        y, x = np.mgrid[:120, :160] + shift
        light = (40 + 0.1 * x) * (1 - 0.6 * np.exp(-0.5 * ((y % 30) - 15) ** 2))
        light *= 1 - 0.5 * np.exp(-0.5 * ((x % 40) - 20) ** 2)
        for a, b in ((30, 40), (55, 70)):
            light += 90 * np.exp(-((x - a - 0.4 * i) ** 2 + (y - b) ** 2) / (2 * 1.7**2))
        pictures.append(np.clip(rng.normal(light, 1.5), 0, 255).astype(np.uint8))
    tifffile.imwrite(tmp_path / "bump.tif", np.stack(pictures))
    seen = see(tmp_path / "bump.tif", settings=Settings(), frame_rate=25.0)
    assert 90 in seen.cuts.tolist()
    assert any("camera was moved" in w or "jump" in w for w in seen.warnings)
    tracks = link(seen, field=None, settings=Settings())
    for number in tracks.numbers:
        frames = tracks.sightings.frame[tracks.rows(int(number))]
        assert frames.max() < 90 or frames.min() >= 90


def test_region_and_time_window_restrict(tmp_path):
    """Sightings outside the region and the time window are left out; places stay those of the whole picture."""
    path, _ = make(tmp_path, replace(SCENE, droplets=12, seconds=5))
    whole = see(path, settings=Settings()).sightings
    part = see(path, settings=Settings(roi=(40, 30, 160, 120), start=2.0, end=4.0))
    s = part.sightings
    assert (s.x.min(), s.y.min()) >= (39.5, 29.5)
    assert (s.x.max(), s.y.max()) <= (199.5, 149.5)
    times = part.recording.frame_times[s.frame]
    assert (times.min(), times.max()) >= (2.0, 3.9)
    inner = (whole.x > 50) & (whole.x < 190) & (whole.y > 40) & (whole.y < 140)
    inner &= (part.recording.frame_times[whole.frame] >= 2) & (part.recording.frame_times[whole.frame] <= 4)
    d = [
        np.hypot(s.x[s.frame == f] - a, s.y[s.frame == f] - b).min(initial=9)
        for f, a, b in zip(whole.frame[inner], whole.x[inner], whole.y[inner], strict=True)
    ]
    assert len(d) > 100
    assert np.quantile(d, 0.98) < 0.1


@pytest.mark.parametrize("lamp", [(1300, 8, 10, 10), (8, 2000, 10, 10), (8, 8, 5000, 4)])
def test_a_lamp_outside_the_picture_is_refused_in_one_line(tmp_path, lamp):
    """The rectangle and the picture's size are named, with the exit status of a wrong bench file."""
    path, _ = make(tmp_path, SCENE)
    with pytest.raises(
        UsageError, match=rf"field.lamp.*\[{lamp[0]}, .*outside the picture of \d+ x \d+ px"
    ) as told:
        see(path, settings=Settings(), lamp=lamp)
    assert told.value.exit_status == 2


def test_lamp_series_follows_the_field(tmp_path):
    """The lamp's mean grey is high in the frames with the field on and low in the others."""
    path, truth = make(tmp_path, replace(SCENE, lamp=(8, 8, 14, 14)))
    seen = see(path, settings=Settings(), lamp=(8, 8, 14, 14))
    assert seen.lamp is not None
    on, off = truth["voltage_v"] > 259, truth["voltage_v"] < 1
    assert seen.lamp[on].min() > seen.lamp[off].max() + 20


def test_empty_recording_gives_no_sightings(tmp_path):
    """Pictures without droplets give hardly a sighting, and no track."""
    pictures = np.random.default_rng(1).normal(30, 2, (60, 96, 128)).clip(0, 255).astype(np.uint8)
    tifffile.imwrite(tmp_path / "none.tif", pictures)
    seen = see(tmp_path / "none.tif", settings=Settings(), frame_rate=25.0)
    assert len(seen.sightings) < 15  # 0.05 a frame asked for: 3 expected
    assert len(link(seen, field=None, settings=Settings())) == 0


def test_one_frame_is_enough_to_look_at(tmp_path):
    """A single picture is looked at with its own surroundings as background."""
    y, x = np.mgrid[:96, :128]
    light = 30 + 100 * np.exp(-((x - 50.3) ** 2 + (y - 40.6) ** 2) / (2 * 1.7**2))
    picture = np.random.default_rng(1).normal(light, 2).clip(0, 255).astype(np.uint8)
    tifffile.imwrite(tmp_path / "one.tif", picture)
    seen = see(tmp_path / "one.tif", settings=Settings(), frame_rate=25.0)
    assert isinstance(seen.recording, Recording)
    near = np.hypot(seen.sightings.x - 50.3, seen.sightings.y - 40.6)
    assert near.min() < 0.2
    assert not seen.sightings.flags[near.argmin()] & Flag.EDGE


@pytest.mark.filterwarnings("ignore::DeprecationWarning", "ignore::FutureWarning")
def test_trackpy_sees_and_links_the_same_droplets(tmp_path):
    """An independent detector and linker agrees on places to a fifth of a pixel, and is not ahead in its scores."""
    import trackpy

    trackpy.quiet()
    scene = replace(SCENE, seconds=4)
    path, truth = make(tmp_path, scene)
    seen = see(path, settings=Settings())
    tracks = link(seen, field=None, settings=Settings())
    from tracker.seeing.frames import open_recording

    with open_recording(path) as reader:
        pictures = [p.copy() for b in reader for p in b.pictures]
    peer = pd.concat(
        [trackpy.locate(p, 9, minmass=300).assign(frame=i) for i, p in enumerate(pictures)], ignore_index=True
    )
    linked = trackpy.filter_stubs(trackpy.link(peer, 8, memory=3), 15)
    s = seen.sightings
    apart = []
    for f, x, y in zip(peer["frame"], peer["x"], peer["y"], strict=True):
        mine = s.frame == f
        apart.append(np.hypot(s.x[mine] - x, s.y[mine] - y).min(initial=9))
    near = np.array([a for a in apart if a < 2])
    assert len(near) > 0.9 * len(apart)
    assert np.median(near) < 0.2

    def inner(number: np.ndarray, frame: np.ndarray, x: np.ndarray, y: np.ndarray) -> list[Track]:
        use = (x > 6) & (x < scene.width - 6) & (y > 6) & (y < scene.height - 6)
        return as_tracks(number[use], frame[use], x[use], y[use])

    count, droplets = truth["x_px"].shape
    frame, number = (i.ravel() for i in np.indices((count, droplets)))
    true = inner(number, frame, truth["x_px"].ravel(), truth["y_px"].ravel())
    t = tracks.sightings
    ours = score(true, inner(tracks.droplet, t.frame, t.x, t.y))
    theirs = score(true, inner(*(linked[c].to_numpy() for c in ("particle", "frame", "x", "y"))))
    assert ours.jaccard >= theirs.jaccard - 0.01
    assert ours.rms < theirs.rms
