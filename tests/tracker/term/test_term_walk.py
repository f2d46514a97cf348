"""What a folder's walk takes for recordings, and which files a result depends on."""

from __future__ import annotations

import os
from datetime import date, datetime

import cv2
import numpy as np
import pytest
import small_term
import tifffile

from tracker.errors import RecordingError
from tracker.term.walk import content_hash, find_tasks, input_files, recording_date, stamp


@pytest.fixture
def term(tmp_path):
    """A folder with recordings of every kind and much that is none."""
    folder = tmp_path / "term"
    pictures = {
        name: np.zeros((8, 8), np.uint8) for name in ("reticle.png", "week1/note.jpg", ".hidden/x.png")
    }
    for name in ("week1/clip.avi", "week1/clip.mp4", "week1/other.MKV", "week2/a b$.webm", ".hidden/no.avi",
                 "week1/done.fallrise/no.avi", "out/no.avi", "week1/notes.txt", "week1/bench.toml"):  # fmt: skip
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_bytes(b"x")
    for i in range(12):
        pictures[f"week2/series/{i}.png"] = np.zeros((8, 8), np.uint8)
    for name, picture in pictures.items():
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        cv2.imwrite(str(folder / name), picture)
    tifffile.imwrite(folder / "week2/stack.tif", np.zeros((3, 8, 8), np.uint8), photometric="minisblack")
    tifffile.imwrite(folder / "week2/reference.tif", np.zeros((8, 8), np.uint8), photometric="minisblack")
    (folder / "week2/broken.tif").write_bytes(b"no tiff")
    return folder


def test_walk_finds_recordings_and_nothing_else(term):
    """Videos of any case, stacks and picture folders are found; references, notes, results, hidden files are not."""
    names = [task.name for task in find_tasks(term, term / "out")]
    assert names == ["week1/clip.avi", "week1/clip.mp4", "week1/other.MKV", "week2/a b$.webm", "week2/series",
                     "week2/stack.tif"]  # fmt: skip


def test_results_lie_at_the_recordings_path_without_collisions(term):
    """A result folder is named as by `measure`, with the suffix kept only where two recordings would share it."""
    found = {
        task.name: task.out.relative_to(term / "out").as_posix() for task in find_tasks(term, term / "out")
    }
    assert found["week1/other.MKV"] == "week1/other.fallrise"
    assert found["week2/series"] == "week2/series.fallrise"
    assert found["week1/clip.avi"] == "week1/clip.avi.fallrise"
    assert found["week1/clip.mp4"] == "week1/clip.mp4.fallrise"


def test_missing_folder_is_one_line(tmp_path):
    """A folder that is not there is told with its name."""
    with pytest.raises(RecordingError, match="no such folder"):
        find_tasks(tmp_path / "nowhere", tmp_path / "out")


@pytest.mark.parametrize(
    ("name", "day"),
    [
        ("2026-11-03/clip.avi", date(2026, 11, 3)),
        ("term2026-09-01/bench A/20261103_clip.avi", date(2026, 11, 3)),
        ("run120261103.avi", None),
        ("2026-02-31/clip.avi", None),
    ],
)
def test_date_in_the_path_beats_the_file_time(tmp_path, name, day):
    """The last date in the path counts; a number that is no date does not, and then the file's own time does."""
    path = tmp_path / "term" / name
    path.parent.mkdir(parents=True)
    path.write_bytes(b"x")
    os.utime(path, (1_700_000_000, 1_700_000_000))
    task = find_tasks(tmp_path / "term", tmp_path / "out")[0]
    assert recording_date(task) == (day or date.fromtimestamp(1_700_000_000))


def test_inputs_are_bench_own_keys_scale_and_log(tmp_path):
    """Every file that a result depends on is listed, whether named or found by place."""
    folder = tmp_path / "bench"
    small_term.make_recording(folder / "week" / "clip.avi", seed=1, seconds=0.5)
    (folder / "bench.toml").write_text('[field]\nsource = "log"\nlog = "volts.csv"\n')
    (folder / "week" / "clip.toml").write_text('[field]\nlog = "own.csv"\n')
    for name in ("volts.csv", "week/own.csv", "scale.json", "week/bench2.toml"):
        (folder / name).write_text("{}")
    task = find_tasks(folder, tmp_path / "out")[0]
    assert {p.relative_to(folder).as_posix() for p in input_files(task)} == {
        "bench.toml", "week/clip.toml", "week/own.csv", "scale.json",
    }  # fmt: skip
    (folder / "bench.toml").write_text('[camera]\nscale = "named.json"\n')
    (folder / "named.json").write_text("{}")
    assert folder / "named.json" in input_files(task)
    assert folder / "scale.json" not in input_files(task)


def test_scale_valid_at_the_recordings_date_is_used(tmp_path):
    """Of several scales the newest that is not newer than the recording counts; before all of them, the oldest."""
    (tmp_path / "bench.toml").write_text('[cell]\nplate_gap = "6 mm"\n')
    for name, text in (
        ("scale-1.json", '{"date": "2026-09-01"}'),
        ("scale-2.json", '{"date": "2026-10-15"}'),
    ):
        (tmp_path / name).write_text(text)
    used = {}
    for name, day in (("a.avi", "2026-08-01"), ("b.avi", "2026-10-14"), ("c.avi", "2026-10-16")):
        (tmp_path / name).write_bytes(b"x")
        moment = datetime.fromisoformat(day).timestamp()
        os.utime(tmp_path / name, (moment, moment))
    for task in find_tasks(tmp_path, tmp_path / "out"):
        used[task.name] = [p.name for p in input_files(task) if p.name.startswith("scale")]
    assert used == {"a.avi": ["scale-1.json"], "b.avi": ["scale-1.json"], "c.avi": ["scale-2.json"]}


def test_hash_of_a_recording_is_that_of_its_result(tmp_path):
    """The walk hashes files and picture folders exactly as a result's provenance does."""
    from tracker.seeing.frames import open_recording

    for name in ("clip.avi", "series"):
        path = small_term.make_recording(tmp_path / name, seed=2, seconds=1.0)
        with open_recording(path, frame_rate=12.0) as reader:
            for _ in reader:
                pass
            assert content_hash(path) == reader.recording().sha256
    assert content_hash(tmp_path / "nowhere") == ""


def test_stamp_of_a_picture_folder_sees_every_picture(tmp_path):
    """A picture replaced by one of the same size, with a new time, changes the folder's stamp."""
    path = small_term.make_recording(tmp_path / "series", seed=2, seconds=1.0)
    before = stamp(path)
    first = sorted(path.iterdir())[0]
    os.utime(first, ns=(before[2] + 10**9, before[2] + 10**9))
    assert stamp(path) != before
    assert stamp(path)[1] == before[1]
