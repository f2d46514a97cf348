"""Files that the simulator writes: frame times, losses, depth, truth, and the sample recordings."""

from __future__ import annotations

import csv
import json
from itertools import pairwise
from pathlib import Path

import av
import cv2
import numpy as np
import pytest
import tifffile

from physics.errors import FallriseError
from tracker import cli
from tracker.simulate import Logger, Scene, read_scene, scene_from_mapping, simulate, write_log
from tracker.simulate.motion import draw_drops

SAMPLES = Path(__file__).parents[2] / "sample_videos"
SMALL = {"seconds": 1.2, "width": 96, "height": 64, "droplets": 4, "first": 0.5, "plateau": 0.5}


def decoded(path):
    """Frame times in s and luma planes of a video."""
    times, planes = [], []
    with av.open(str(path)) as container:
        for frame in container.decode(video=0):
            times.append(float(frame.pts * frame.time_base))
            deep = frame.format.name.startswith("gray1")
            planes.append(frame.to_ndarray() if deep else np.asarray(frame.to_ndarray(format="gray")))
    return np.array(times), np.array(planes)


def truth(files):
    """Truth of a simulation as a plain dictionary of arrays."""
    with np.load(files.truth_npz) as stored:
        return dict(stored)


@pytest.mark.parametrize(
    ("name", "changes"),
    [
        ("a.avi", {}),
        ("lossy.avi", {"lost": 0.2}),
        ("b.mp4", {"uneven": 0.2, "lost": 0.1}),
        ("ntsc.mp4", {"frame_rate": 30000 / 1001}),
        ("c.mkv", {"uneven": 0.25, "lost": 0.2}),
        ("d.mov", {"codec": "mpeg4"}),
        ("e.webm", {"uneven": 0.1}),
        ("g.mp4", {"codec": "hevc"}),
    ],
)
def test_file_holds_the_true_frame_times(tmp_path, name, changes):
    """Every container gives back the start of exposure of each written frame, and no other frame."""
    files = simulate(Scene(**(SMALL | changes)), tmp_path / name, seed=8)
    times, planes = decoded(files.recording)
    true = truth(files)
    assert len(times) == files.frames == true["written"].sum()
    # Ticks of the containers: MP4 1/100 of a frame at 1001-type rates, else exact.
    np.testing.assert_allclose(times, true["time_s"][true["written"]], atol=2e-5)
    assert planes.shape[1:] == (64, 96)
    assert sorted(p.name for p in tmp_path.iterdir()) == sorted(
        [name, f"{Path(name).stem}.truth.json", f"{Path(name).stem}.truth.npz"]
    )


@pytest.mark.parametrize(
    ("bits", "name"), [(8, "a.mkv"), (16, "b.mkv"), (12, "c.mkv"), (16, "d.tif"), (8, "folder")]
)
def test_lossless_files_hold_the_same_pictures(tmp_path, bits, name):
    """The same seed gives, in every lossless form, the pictures of an 8-bit camera scaled to its depth."""
    scene = Scene(**SMALL, bits=bits)
    files = simulate(scene, tmp_path / name, seed=3)
    if name.endswith(".tif"):
        pictures = tifffile.imread(files.recording)
    elif name == "folder":
        paths = sorted(files.recording.iterdir())
        pictures = np.array([cv2.imread(str(p), cv2.IMREAD_UNCHANGED) for p in paths])
    else:
        pictures = decoded(files.recording)[1]
    plain = decoded(simulate(Scene(**SMALL), tmp_path / "plain.mkv", seed=3).recording)[1]
    assert pictures.shape == plain.shape
    # One grey step of each depth by rounding.
    assert np.max(np.abs(pictures / 2.0 ** (bits - 8) - plain)) <= 0.5 + 2.0 ** (8 - bits)


def test_same_seed_same_recording_other_seed_other_droplets(tmp_path):
    """A seed fixes every byte of a recording and its truth; another camera sees the same droplets move."""
    first = simulate(Scene(**SMALL), tmp_path / "a.avi", seed=5)
    again = simulate(Scene(**SMALL), tmp_path / "b.avi", seed=5)
    assert first.recording.read_bytes() == again.recording.read_bytes()
    other = simulate(Scene(**SMALL), tmp_path / "c.avi", seed=6)
    assert first.recording.read_bytes() != other.recording.read_bytes()
    camera = simulate(Scene(**SMALL, read_noise=4.0, lines=3), tmp_path / "d.avi", seed=5)
    np.testing.assert_array_equal(truth(first)["y_px"], truth(camera)["y_px"])


def test_repeated_frames_show_the_picture_before(tmp_path):
    """A frame marked as repeated holds the same picture as the written frame before it, and only those do."""
    files = simulate(Scene(**(SMALL | {"seconds": 4.0}), repeated=0.2, lost=0.2), tmp_path / "a.mkv", seed=2)
    true, (_, planes) = truth(files), decoded(files.recording)
    same = np.array([False, *(np.array_equal(a, b) for a, b in pairwise(planes))])
    np.testing.assert_array_equal(same, true["repeated"][true["written"]])
    assert same.sum() > 5


def test_truth_file_names_droplets_and_changes(tmp_path):
    """The JSON truth holds scene, radii, charge numbers and charge steps as drawn."""
    scene = Scene(**SMALL, charge_steps=2)
    files = simulate(scene, tmp_path / "a.avi", seed=1)
    told, true = json.loads(files.truth_json.read_text()), truth(files)
    assert scene_from_mapping(told["scene"]) == scene
    np.testing.assert_allclose([d["radius_m"] for d in told["droplets"]], true["radius_m"][0])
    assert [d["charge_number"] for d in told["droplets"]] == true["charge_number"][0].tolist()
    for change in told["changes"]:
        numbers = true["charge_number"][:, change["droplet"]]
        assert numbers[-1] - numbers[0] == change["step"]
        assert np.all(numbers[true["time_s"] < change["time_s"]] == numbers[0])
    assert len(told["changes"]) == 2


@pytest.mark.parametrize(
    ("name", "changes", "words"),
    [
        ("a.avi", {"uneven": 0.1}, "uneven frame times"),
        ("a.tif", {"lost": 0.1}, "lost frames"),
        ("a.gif", {}, "known are .avi"),
        ("a.avi", {"bits": 12}, "12 bits need codec ffv1"),
        ("a.mkv", {"bits": 9}, "9 bits need codec ffv1"),
        ("a.avi", {"codec": "cinepak"}, "unknown codec 'cinepak'"),
    ],
)
def test_container_that_cannot_hold_the_scene_is_refused(tmp_path, name, changes, words):
    """A scene that does not fit its file is one clear line, and leaves nothing behind."""
    with pytest.raises(FallriseError, match=words) as caught:
        simulate(Scene(**(SMALL | changes)), tmp_path / name, seed=1)
    assert caught.value.exit_status == 2
    assert list(tmp_path.iterdir()) == []


def test_log_has_the_clock_and_noise_of_its_logger(tmp_path):
    """A log that is 2 s early and 1 % fast shows each change of voltage at t (1 + 0.01) - 2."""
    scene = Scene(seconds=10.0, schedule=((0.0, 0.0), (3.0, 260.0), (7.0, -260.0)))
    path = write_log(scene, tmp_path / "v.csv", logger=Logger(early=2.0, fast=0.01, noise=0.5), seed=1)
    with path.open() as stream:
        rows = list(csv.DictReader(stream))
    times, volts = (np.array([float(r[c]) for r in rows]) for c in ("time_s", "voltage_v"))
    for change, at in ((3.0, np.argmax(volts > 130)), (7.0, np.argmax(volts < -130))):
        # One row of the log.
        assert change * 1.01 - 2.0 <= times[at] + 1e-9 < change * 1.01 - 2.0 + 0.0203
    off = volts[times < 3.0 * 1.01 - 2.1]
    assert off.std() == pytest.approx(0.5, rel=5 / np.sqrt(2 * len(off)))


@pytest.mark.parametrize(("name", "seed"), [("steady", 1), ("changing", 2), ("logged", 3)])
def test_sample_recordings_follow_their_recipe(name, seed):
    """The truth beside each sample is that of its scene file and the seed in the README, and no file is large."""
    scene = scene_from_mapping(read_scene(SAMPLES / "scenes" / f"{name}.toml"))
    told = json.loads((SAMPLES / f"{name}.truth.json").read_text())
    assert told["seed"] == seed
    assert scene_from_mapping(told["scene"]) == scene
    drops = draw_drops(scene, np.random.default_rng(np.random.SeedSequence(seed).spawn(4)[0]))
    np.testing.assert_allclose([d["radius_m"] for d in told["droplets"]], drops.radius)
    recording = SAMPLES / told["recording"]
    assert recording.stat().st_size <= 2_000_000
    assert f"--seed {seed} --out sample_videos/{recording.name}" in (SAMPLES / "README.md").read_text()
    assert len(decoded(recording)[0]) == told["frames"]["written"]


def test_simulate_command_writes_recording_bench_and_log(tmp_path, capsys):
    """The command makes all that `fallrise measure` needs and prints the names."""
    arguments = ["--out", str(tmp_path / "t.avi"), "--bench", str(tmp_path / "t.bench.toml")]
    arguments += [
        "--log",
        str(tmp_path / "t.csv"),
        "--seed",
        "4",
        *(f"--set={k}={v}" for k, v in SMALL.items()),
    ]
    with pytest.raises(SystemExit) as ended:
        cli.main(["simulate", *arguments])
    assert ended.value.code == 0
    names = {"t.avi", "t.truth.json", "t.truth.npz", "t.bench.toml", "t.csv"}
    assert {p.name for p in tmp_path.iterdir()} == names
    assert {Path(line).name for line in capsys.readouterr().out.split()} == names


def test_bench_of_a_scene_is_the_scene(tmp_path):
    """The bench file that belongs to a scene is read with the scene's values."""
    from tracker.bench import load_bench
    from tracker.simulate import write_bench

    scene = Scene(**SMALL, temperature=293.4, relative_humidity=0.3, metres_per_pixel=2.5e-6)
    files = simulate(scene, tmp_path / "a", seed=1)
    bench = load_bench(
        write_bench(scene, tmp_path / "b.toml", recording=files.recording), recording=files.recording
    )
    # The file has 9 digits and more.
    assert bench.temperature.value == pytest.approx(293.4, rel=1e-9)
    assert bench.relative_humidity.value == pytest.approx(0.3, rel=1e-9)
    assert bench.scale.metres_per_pixel_y == pytest.approx(2.5e-6, rel=1e-9)
    assert bench.plate_gap.value == pytest.approx(scene.plate_gap, rel=1e-9)
    assert bench.frame_rate == pytest.approx(25.0)
    np.testing.assert_allclose(bench.field.entries, scene.plan)


def test_bench_names_the_log_or_the_lamp_of_its_scene(tmp_path):
    """The voltage is from the log with a clock to be fitted, without one from the lamp, else from the list."""
    from tracker.bench import load_bench
    from tracker.simulate import write_bench

    def field(name, log=None, **changes):
        file = write_bench(Scene(**changes), tmp_path / "benches" / name, recording="a.avi", log=log)
        return load_bench(file, recording=tmp_path / "a.avi").field

    (tmp_path / "benches").mkdir()
    log = write_log(Scene(seconds=3.0), tmp_path / "v.csv", logger=Logger(early=0.4), seed=1)
    logged = field("log.toml", log, lamp=(8, 8, 16, 16))
    assert logged.source == "log"
    assert logged.log.resolve() == log.resolve()
    assert logged.clock_offset is None
    lit = field("lamp.toml", lamp=(8, 8, 16, 16))
    assert (lit.source, tuple(lit.lamp)) == ("lamp", (8, 8, 16, 16))
    # A lamp does not tell +260 V from -260 V.
    assert field("both.toml", lamp=(8, 8, 16, 16), voltages=(0.0, 260.0, -260.0)).source == "list"


@pytest.mark.parametrize("arguments", [["--set", "nonsense=1"], ["--set", "oops"], ["--out", "x.gif"]])
def test_wrong_simulate_command_ends_with_status_2(tmp_path, monkeypatch, capsys, arguments):
    """Wrong usage is one line on standard error and status 2."""
    monkeypatch.chdir(tmp_path)
    with pytest.raises(SystemExit) as ended:
        cli.main(["simulate", *arguments])
    assert ended.value.code == 2
    assert capsys.readouterr().err.count("\n") == 1
