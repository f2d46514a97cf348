"""The main job end to end: a recording with known truth in, right tables out; odd recordings handled."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import tracker
from physics.droplet import ELEMENTARY_CHARGE
from tracker.errors import RecordingError, ResultError, UsageError
from tracker.evaluate import decide_and_evaluate, evaluate_result
from tracker.export import write_overlay
from tracker.keeping.tables import TABLES
from tracker.simulate import Scene, simulate, write_bench

SCENE = Scene(
    droplets=6, seconds=14.0, width=320, height=320, radii=(0.6e-6, 0.7e-6, 0.7e-6, 0.8e-6, 0.8e-6, 0.9e-6),
    charge_numbers=(-3, -2, 2, -4, -5, -6), plateau=1.6, first=1.6,
)  # fmt: skip


def command(*arguments: object) -> subprocess.CompletedProcess[str]:
    """Run `fallrise` as a user does."""
    line = [sys.executable, "-m", "tracker.cli", *map(str, arguments)]
    return subprocess.run(line, capture_output=True, text=True, check=False, timeout=240)


@pytest.fixture(scope="module")
def home(tmp_path_factory) -> Path:
    """A folder with one simulated recording, its truth and its bench file."""
    folder = tmp_path_factory.mktemp("Halden Quay")
    simulate(SCENE, folder / "clip.avi", seed=41)
    write_bench(SCENE, folder / "bench.toml", recording=folder / "clip.avi")
    return folder


@pytest.fixture(scope="module")
def measured(home) -> Path:
    """The result folder of that recording, made by the command."""
    done = command("measure", home / "clip.avi")
    assert done.returncode == 0, done.stderr
    assert "clip.avi" in done.stdout
    assert "\r" not in done.stderr  # no progress bar when piped
    return home / "clip.fallrise"


@pytest.fixture
def copy(measured, home, tmp_path) -> Path:
    """A copy of recording, bench and result that a test may change."""
    shutil.copytree(home, tmp_path / "copy")
    return tmp_path / "copy" / "clip.fallrise"


def test_every_droplet_gets_its_charge(measured, home):
    """Charges agree with the truth within their own stated uncertainty, radii likewise.

    Statistics: of 6 droplets the sum of squared pulls is chi-squared with 6 degrees of freedom; 24.1 is exceeded
    with a chance of 5e-4.
    """
    drops = pd.read_csv(measured / "droplets.csv")
    tracks = pd.read_csv(measured / "tracks.csv")
    truth = np.load(home / "clip.truth.npz")
    written = truth["written"]
    charges, radii = [], []
    for row in drops[drops["charge_c"].notna()].itertuples():
        own = tracks[tracks["droplet"] == row.droplet]
        seen = own.iloc[len(own) // 2]
        frame = int(seen["frame"])
        x, y = truth["x_px"][written][frame], truth["y_px"][written][frame]
        nearest = int(np.hypot(x - seen["x_px"], y - seen["y_px"]).argmin())
        number = SCENE.charge_numbers[nearest]
        charges.append((row.charge_c - number * ELEMENTARY_CHARGE) / row.charge_own_std_c)
        radii.append((row.radius_m - SCENE.radii[nearest]) / row.radius_std_m)
    assert len(charges) == 6
    assert np.sum(np.square(charges)) < 24.1
    assert np.sum(np.square(radii)) < 24.1


def test_the_tables_have_the_columns_of_the_design(measured):
    """Each table has its columns, in order, and nothing else."""
    for name, columns in TABLES.items():
        assert list(pd.read_csv(measured / f"{name}.csv").columns) == [c.name for c in columns]


def test_the_provenance_is_enough_to_repeat_the_run(measured, home, tmp_path):
    """A run with the bench and settings that the provenance names gives the same tables byte for byte."""
    told = json.loads((measured / "recording.json").read_text())
    for key in (
        "file",
        "sha256",
        "frames",
        "bench",
        "scale",
        "air",
        "field",
        "settings",
        "versions",
        "warnings",
        "charge_unit",
    ):
        assert key in told
    assert told["bench"]["plate_gap"]["origin"] == "bench.toml: cell.plate_gap"
    recording = (measured / told["path"]).resolve()
    settings = tracker.Settings(**told["settings"])
    again = tracker.measure(
        recording, bench=measured / told["bench"]["files"][0], out=tmp_path / "again", settings=settings
    )
    for name in TABLES:
        assert (again.folder / f"{name}.csv").read_bytes() == (measured / f"{name}.csv").read_bytes()


def test_evaluate_without_the_video_gives_the_same_tables(copy):
    """Stored tracks alone give the tables again, to the last digit."""
    before = {name: (copy / f"{name}.csv").read_bytes() for name in TABLES}
    (copy.parent / "clip.avi").unlink()
    evaluate_result(copy)
    assert {name: (copy / f"{name}.csv").read_bytes() for name in TABLES} == before


def test_evaluate_takes_the_present_bench(copy):
    """A plate gap twice as large makes every charge twice as large: the drive is B q V / d."""
    before = pd.read_csv(copy / "droplets.csv")
    bench = copy.parent / "bench.toml"
    gap = next(line for line in bench.read_text().splitlines() if line.startswith("plate_gap"))
    bench.write_text(bench.read_text().replace(gap, 'plate_gap = "12 mm"'))
    after = evaluate_result(copy).droplets
    # The radius posterior does not know the gap, so the ratio is exact up to round-off of the r grid.
    ratio = after["charge_c"].to_numpy(float) / before["charge_c"].to_numpy(float)
    assert ratio[np.isfinite(ratio)] == pytest.approx(2.0, rel=1e-6)


def test_decisions_survive_a_second_measurement(copy):
    """A person's verdict is obeyed at once and after measuring again, and its file only grows."""
    done = decide_and_evaluate(copy, droplet=2, verdict="reject", reason="touches the reticle")
    assert done.droplets.set_index("droplet")["verdict"][2] == "reject"
    text = (copy / "decisions.jsonl").read_bytes()
    again = tracker.measure(copy.parent / "clip.avi")
    assert again.droplets.set_index("droplet")["verdict"][2] == "reject"
    assert (copy / "decisions.jsonl").read_bytes() == text


def test_json_output_is_the_result(measured, home, tmp_path):
    """`--json` prints one object with droplets and provenance, and nothing else."""
    done = command("evaluate", measured, "--json")
    assert done.returncode == 0, done.stderr
    told = json.loads(done.stdout)
    assert len(told["droplets"]) == 6
    assert told["recording"]["sha256"]


def test_plots_of_a_track_and_of_the_recording(measured, tmp_path):
    """Both figures can be drawn and saved; a droplet that is not there is an error."""
    result = tracker.read_result(measured)
    for number, figure in enumerate((tracker.plot_track(result, 0), tracker.plot_recording(result))):
        figure.savefig(tmp_path / f"{number}.png")
        assert (tmp_path / f"{number}.png").stat().st_size > 10_000
    with pytest.raises(ResultError, match="no droplet 99"):
        tracker.plot_track(result, 99)


def test_residuals_of_a_kept_track_have_no_trend(measured):
    """Residuals against the fitted speeds average to nothing in every segment, by their definition."""
    from tracker.showing.plots import track_path

    path = track_path(tracker.read_result(measured), 0)
    assert np.nanmean(path["residual"]) == pytest.approx(0.0, abs=1e-12)
    assert np.nanstd(path["residual"]) < 5e-6


def test_overlay_of_one_frame_and_of_a_video(measured, tmp_path):
    """Marks stand where the tracks are: the drawn frame differs from the recording only around droplets."""
    import av
    import cv2

    picture = cv2.imread(str(write_overlay(measured, frames="100", out=tmp_path / "a.png")))
    tracks = pd.read_csv(measured / "tracks.csv")
    here = tracks[tracks["frame"] == 100]
    coloured = np.ptp(picture.astype(int), axis=2) > 20
    rows, columns = np.nonzero(coloured)
    distance = np.hypot(
        columns[:, None] - here["x_px"].to_numpy(), rows[:, None] - here["y_px"].to_numpy()
    ).min(1)
    assert len(here) > 0
    assert len(rows) > 50
    # circle of 9 px, number beside it, trail of at most 30 frames of at most about 4 px
    assert distance.max() < 9 + 30 * 4
    video = write_overlay(measured, frames="10:40", out=tmp_path / "a.mp4")
    with av.open(str(video)) as container:
        times = [float(frame.time) for frame in container.decode(video=0)]
    assert len(times) == 30
    assert np.diff(times) == pytest.approx(0.04, abs=1e-4)


@pytest.mark.parametrize(
    ("frames", "out"), [("900:1000", "a.mp4"), ("x", "a.mp4"), ("5:9", "a.png"), ("5", "a.doc")]
)
def test_overlay_refuses_what_it_cannot_draw(measured, tmp_path, frames, out):
    """Frames that are not there and unknown endings are told before any work."""
    with pytest.raises(UsageError):
        write_overlay(measured, frames=frames, out=tmp_path / out)
    assert not (tmp_path / out).exists()


def test_overlay_without_its_recording_says_what_to_do(copy):
    """A recording that was moved away is named with the option that helps."""
    (copy.parent / "clip.avi").unlink()
    with pytest.raises(RecordingError, match="--recording"):
        write_overlay(copy, frames="3", out=copy.parent / "a.png")


def test_a_recording_cut_off_is_measured_as_far_as_it_goes(home, tmp_path):
    """Half of the bytes give about half of the frames, a table, and a warning."""
    data = (home / "clip.avi").read_bytes()
    (tmp_path / "half.avi").write_bytes(data[: len(data) // 2])
    result = tracker.measure(tmp_path / "half.avi", bench=home / "bench.toml")
    assert 0.3 * 350 < result.recording["frames"]["count"] < 0.7 * 350
    assert len(result.droplets) > 0
    assert any("as far as it goes" in w for w in result.recording["warnings"])


def test_a_recording_without_droplets_is_an_empty_table(tmp_path):
    """Nothing found is an empty result with all its columns, told as such, and no error."""
    scene = Scene(droplets=0, seconds=3.0, width=160, height=160)
    simulate(scene, tmp_path / "none.avi", seed=1)
    write_bench(scene, tmp_path / "bench.toml", recording="clip.avi")
    done = command("measure", tmp_path / "none.avi")
    assert done.returncode == 0, done.stderr
    assert "0 droplets" in done.stdout
    assert "no droplet was found" in done.stderr
    assert list(pd.read_csv(tmp_path / "none.fallrise" / "droplets.csv").columns) == [
        c.name for c in TABLES["droplets"]
    ]


def test_a_recording_of_one_frame_says_that_it_is_too_short(tmp_path):
    """One frame gives no speed: one line, status 1, and nothing written."""
    scene = Scene(droplets=3, seconds=0.04, width=160, height=160)
    simulate(scene, tmp_path / "one.avi", seed=1)
    write_bench(scene, tmp_path / "bench.toml", recording="clip.avi")
    done = command("measure", tmp_path / "one.avi")
    assert done.returncode == 1
    assert len(done.stderr.strip().splitlines()) == 1
    assert "only one frame" in done.stderr
    assert not (tmp_path / "one.fallrise").exists()


def test_an_output_folder_that_cannot_be_written_is_told_before_the_work(home, tmp_path):
    """A file where the folder should be is named at once."""
    (tmp_path / "taken").touch()
    with pytest.raises(ResultError, match="is a file"):
        tracker.measure(home / "clip.avi", out=tmp_path / "taken" / "deeper")


def test_a_full_disk_is_one_line_and_leaves_nothing(home, tmp_path, monkeypatch):
    """The kernel's own "no space left" while a table is written ends in one line and an empty folder."""
    from tracker.keeping import store

    def full(*_: object) -> None:
        Path("/dev/full").write_bytes(b"x")

    monkeypatch.setattr(store, "write_csv", full)
    with pytest.raises(ResultError, match="disk is full"):
        tracker.measure(home / "clip.avi", out=tmp_path / "out" / "clip.fallrise")
    assert list((tmp_path / "out").iterdir()) == []


def test_part_of_picture_and_time(home, tmp_path):
    """`--roi`, `--from` and `--to` restrict what is looked at; places stay those of the whole picture."""
    settings = tracker.Settings(roi=(100, 40, 200, 240), start=2.0, end=12.0)
    result = tracker.measure(home / "clip.avi", out=tmp_path / "part", settings=settings)
    seen = result.tracks
    assert len(seen) > 0
    assert seen["x_px"].between(100, 300).all()
    assert seen["y_px"].between(40, 280).all()
    assert seen["time_s"].between(2.0, 12.0).all()


@pytest.mark.parametrize("window", [{"start": 100.0}, {"end": -1.0}])
def test_a_time_window_beside_the_recording_is_refused(home, tmp_path, window):
    """A slip in `--from` or `--to` is told with the recording's own times, and writes no empty result."""
    with pytest.raises(UsageError, match=r"lasts from 0 s to 13\.96 s"):
        tracker.measure(home / "clip.avi", out=tmp_path / "none", settings=tracker.Settings(**window))
    assert not (tmp_path / "none").exists()


def test_recordings_of_one_stem_do_not_share_a_result(home, tmp_path):
    """`clip.avi` and `clip.mkv` side by side get a folder each; the first keeps its own when measured again."""
    shutil.copy(home / "bench.toml", tmp_path)
    shutil.copy(home / "clip.avi", tmp_path)
    simulate(Scene(droplets=2, seconds=3.0, width=160, height=160), tmp_path / "clip.mkv", seed=2)
    folders = [tracker.measure(tmp_path / name).folder.name for name in ("clip.avi", "clip.mkv", "clip.avi")]
    assert folders == ["clip.fallrise", "clip.mkv.fallrise", "clip.fallrise"]


def test_overlay_refuses_another_recording(copy, tmp_path):
    """Tracks are never drawn over a film that they were not measured from."""
    simulate(Scene(droplets=2, seconds=1.0, width=160, height=160), tmp_path / "other.avi", seed=2)
    with pytest.raises(RecordingError, match="not the recording"):
        write_overlay(copy, frames="3", out=tmp_path / "a.png", recording=tmp_path / "other.avi")


def test_warnings_of_the_recording_survive_an_evaluation(copy):
    """What was told of the pictures is told again without them."""
    told = json.loads((copy / "recording.json").read_text())
    told["seeing"]["warnings"] = ["the light changes at 3.00 s"]
    (copy / "recording.json").write_text(json.dumps(told))
    assert "the light changes at 3.00 s" in evaluate_result(copy).recording["warnings"]


def test_undo_without_a_decision_is_refused(copy):
    """There must be something to take back; the refusal is wrong usage, status 2."""
    done = command("decide", copy, "--droplet", 1, "--verdict", "undo")
    assert done.returncode == 2
    assert "no decision to undo" in done.stderr
    assert not (copy / "decisions.jsonl").exists()
