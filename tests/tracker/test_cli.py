"""The command line: what it prints, and with which exit status it ends."""

from __future__ import annotations

import subprocess
import sys

import pytest
from bench_files import write_bench

COMMANDS = (
    "measure",
    "evaluate",
    "overlay",
    "decide",
    "scale",
    "simulate",
    "pool",
    "plan",
    "batch",
    "report",
    "inspect",
)


def run(*arguments: object, cwd=None) -> subprocess.CompletedProcess[str]:
    """Run `fallrise` as a user does."""
    command = [sys.executable, "-m", "tracker.cli", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, cwd=cwd, check=False, timeout=120)


def test_help_lists_every_command():
    """The help names all commands of the design."""
    done = run("--help")
    assert done.returncode == 0
    assert all(command in done.stdout for command in COMMANDS)


@pytest.mark.parametrize("command", COMMANDS)
def test_help_of_each_command_shows_one_worked_example(command):
    """Each help ends with a line that can be typed."""
    done = run(command, "--help")
    assert done.returncode == 0
    assert f"Example:  fallrise {command}" in " ".join(done.stdout.split()).replace("Example: ", "Example:  ")


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["measure"], "recordings"),
        (["nonsense"], "nonsense"),
        (["measure", "a.avi", "--roi", "1,2,3"], "--roi 1,2,3"),
        (["measure", "a.avi", "--from", "5", "--to", "3"], "--from 5"),
        (["measure", "a.avi", "--tables", "xls"], "--tables xls"),
    ],
)
def test_wrong_usage_ends_with_status_2(arguments, words):
    """A wrong call says what is wrong and ends with 2."""
    done = run(*arguments)
    assert done.returncode == 2
    assert words in done.stderr.lower() or words in done.stderr
    assert "Traceback" not in done.stderr


def make_text(folder):
    (folder / "notes.avi").write_text("no video, but plenty of words\n" * 100)
    return folder / "notes.avi"


def make_empty(folder):
    (folder / "empty.avi").touch()
    return folder / "empty.avi"


def make_folder(folder):
    (folder / "pictures").mkdir()
    return folder / "pictures"


BAD = {
    "missing": (lambda folder: folder / "none.avi", "no such file"),
    "empty": (make_empty, "empty"),
    "text": (make_text, "notes.avi"),
    "folder without pictures": (make_folder, "pictures"),
}


@pytest.mark.parametrize("case", BAD)
def test_a_bad_recording_is_one_line_and_status_1(tmp_path, case):
    """What, which file, what to do: one line, no traceback, status 1, nothing written."""
    make, words = BAD[case]
    write_bench(tmp_path)
    recording = make(tmp_path)
    before = sorted(tmp_path.rglob("*"))
    done = run("measure", recording)
    assert done.returncode == 1
    assert len(done.stderr.strip().splitlines()) == 1
    assert words in done.stderr
    assert recording.name in done.stderr
    assert sorted(tmp_path.rglob("*")) == before


def test_a_wrong_bench_file_ends_with_status_2(tmp_path):
    """A bench file's mistake is one line with its key, and status 2."""
    write_bench(tmp_path, ('"6.00(2) mm"', '"6 V"'))
    (tmp_path / "clip.avi").write_bytes(b"x")
    done = run("measure", tmp_path / "clip.avi")
    assert done.returncode == 2
    assert "cell.plate_gap" in done.stderr
    assert len(done.stderr.strip().splitlines()) == 1


def test_a_traceback_is_shown_only_when_asked_for(tmp_path):
    """`--debug` adds the traceback of a known failure."""
    write_bench(tmp_path)
    assert "Traceback" not in run("measure", tmp_path / "none.avi").stderr
    assert "Traceback" in run("measure", tmp_path / "none.avi", "--debug").stderr


def test_several_recordings_go_on_after_a_bad_one(tmp_path):
    """Every bad recording of a call gets its line; the status tells that something failed."""
    write_bench(tmp_path)
    done = run("measure", tmp_path / "a.avi", tmp_path / "b.avi")
    assert done.returncode == 1
    assert [line.split(":")[1].strip()[-5:] for line in done.stderr.strip().splitlines()] == [
        "a.avi",
        "b.avi",
    ]
