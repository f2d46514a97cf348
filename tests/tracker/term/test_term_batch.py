"""A batch: every recording once, resumed by content, whole tables whatever happens."""

from __future__ import annotations

import errno
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import pandas as pd
import pytest
import small_term

from tracker import cli
from tracker.errors import ResultError
from tracker.keeping.store import read_result
from tracker.keeping.tables import BATCH, DROPLETS
from tracker.records import Settings
from tracker.term import batch as batch_room
from tracker.term.batch import Options, run_batch
from tracker.term.ledger import LEDGER, read_ledger
from tracker.term.lock import locked
from tracker.term.reading import Reading, read_results
from tracker.term.resume import made_entry, settings_key, task_stamps
from tracker.term.terminal import batch_bar
from tracker.term.walk import find_tasks
from tracker.term.work import Outcome

EVIL = "=cmd&<img src=x onerror=alert(1)>.avi"


@pytest.fixture
def inline(monkeypatch):
    """Measure in this process, since a batch knows only an executor; the report, slow to draw, is left blank."""
    monkeypatch.setattr(batch_room, "_crew", lambda options, lock: small_term.InlineCrew())
    blank = lambda out, *_: (out / "report.html").write_text("")  # noqa: E731
    monkeypatch.setattr("tracker.term.report.write_term_report", blank)


@pytest.fixture(scope="module")
def original(tmp_path_factory):
    """A term of two benches with a bad recording, and its results."""
    root = tmp_path_factory.mktemp("original")
    small_term.make_term(root / "term")
    (root / "term/north/2026-10-05" / EVIL).write_text("no video")
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(batch_room, "_crew", lambda options, lock: small_term.InlineCrew())
        run_batch(root / "term", out=root / "out")
    return root


@pytest.fixture
def term(original, tmp_path):
    """An own copy of the term and its results, times included."""
    for name in ("term", "out"):
        shutil.copytree(original / name, tmp_path / name)
    return tmp_path


def tables(out: Path) -> tuple[str, pd.DataFrame]:
    """The term's droplets as text, and the batch's table without the time it took."""
    return (out / "droplets.csv").read_text(), pd.read_csv(out / "batch.csv").drop(columns="seconds")


def result_times(out: Path) -> dict[str, int]:
    """When each result was written."""
    return {str(p.relative_to(out)): p.stat().st_mtime_ns for p in out.rglob("recording.json")}


def test_batch_makes_results_and_tables(original):
    """Every recording has its result, the tables hold the design's columns, and the bad one has its reason."""
    out = original / "out"
    rows = pd.read_csv(out / "batch.csv")
    assert list(rows.columns) == ["recording", "sha256", "status", "droplets", "kept", "seconds", "reason"]
    assert rows["status"].value_counts().to_dict() == {"done": 4, "failed": 1}
    failed = rows[rows["status"] == "failed"].iloc[0]
    assert "no recording that can be decoded" in failed["reason"]
    droplets = pd.read_csv(out / "droplets.csv")
    assert list(droplets.columns) == ["recording", *(c.name for c in DROPLETS)]
    done = rows[rows["status"] == "done"]
    assert droplets.groupby("recording").size().to_dict() == dict(
        zip(done["recording"], done["droplets"], strict=True)
    )
    for name in done["recording"]:
        result = read_result(out / name.replace(".avi", ".fallrise"))
        assert result.recording["sha256"] == done.set_index("recording").loc[name, "sha256"]
    assert droplets["charge_c"].notna().sum() > 8


def test_text_from_outside_is_harmless(original):
    """A file name that begins a formula and holds markup is neither in the tables nor on the page."""
    out = original / "out"
    for line in (out / "batch.csv").read_text().splitlines():
        assert not line.strip('"').startswith(("=", "+", "-", "@"))
    page = (out / "report.html").read_text()
    assert "<img src=x" not in page
    assert "&lt;img src=x onerror=alert(1)&gt;" in page


def test_nothing_to_do_changes_nothing(term, inline):
    """A second run measures nothing and writes no file."""
    # The copies' paths are new, so the first run here compares contents and notes the new paths.
    assert run_batch(term / "term", out=term / "out").measured == 0
    before = {
        p: p.stat().st_mtime_ns for p in (term / "out").rglob("*") if p.is_file() and p.name != ".batch.lock"
    }
    again = run_batch(term / "term", out=term / "out")
    assert (again.measured, again.changed, len(again.failed)) == (0, False, 1)
    after = {
        p: p.stat().st_mtime_ns for p in (term / "out").rglob("*") if p.is_file() and p.name != ".batch.lock"
    }
    assert after == before


def test_new_time_with_old_content_is_done(term, inline):
    """Files that were only touched, or a comment in a bench file, cost no measurement."""
    for path in (term / "term").rglob("*.*"):
        os.utime(path)
    bench = term / "term/south/bench.toml"
    bench.write_text(f"# copied\n{bench.read_text()}")
    assert run_batch(term / "term", out=term / "out").measured == 0


def test_changed_inputs_are_measured_again_and_decisions_kept(term, inline):
    """A new value in a bench file renews that bench's results only; a person's decisions stay in them."""
    folder = term / "out/north/2026-10-05/clip0.fallrise"
    cli_status(["decide", str(folder), "--droplet", "0", "--verdict", "reject", "--reason", "two droplets"])
    run_batch(term / "term", out=term / "out")
    assert "reject" in (term / "out/droplets.csv").read_text().splitlines()[1]
    before = result_times(term / "out")
    bench = term / "term/north/bench.toml"
    bench.write_text(bench.read_text().replace("3.000(6) um", "3.030(6) um"))
    made = run_batch(term / "term", out=term / "out")
    # The unreadable recording lies under that bench and is tried again, too.
    assert made.measured == 3
    after = result_times(term / "out")
    changed = {name for name in before if before[name] != after[name]}
    assert len(changed) == 2
    assert {name.split("/")[0] for name in changed} == {"north"}
    drops = pd.read_csv(folder / "droplets.csv")
    assert drops.loc[drops["droplet"] == 0, "verdict"].item() == "reject"
    assert len((folder / "decisions.jsonl").read_text().splitlines()) == 1


def cli_status(arguments):
    """Exit status of a command."""
    with pytest.raises(SystemExit) as ended:
        cli.main(arguments)
    return ended.value.code


def test_lost_result_and_lost_ledger_are_made_good(term, inline):
    """A deleted result is measured again; results without a ledger are taken over by what they say themselves."""
    first = tables(term / "out")
    (term / "out" / LEDGER).unlink()
    (term / "out/droplets.csv").unlink()
    shutil.rmtree(term / "out/south/2026-10-12/clip1.fallrise")
    made = run_batch(term / "term", out=term / "out")
    assert made.measured == 2  # the deleted one, and the bad one, which has no result to take over
    second = tables(term / "out")
    assert second[0] == first[0]
    pd.testing.assert_frame_equal(second[1], first[1])


def test_damaged_result_is_measured_again(term, inline):
    """A table that does not belong to its provenance, as a power cut may leave it, is replaced."""
    path = term / "out/south/2026-10-12/clip1.fallrise"
    whole = (path / "droplets.csv").read_bytes()
    (path / "droplets.csv").write_bytes(whole[: len(whole) // 2])
    os.utime(path / "recording.json")
    assert run_batch(term / "term", out=term / "out").measured == 1
    assert (path / "droplets.csv").read_bytes() == whole


def test_scale_of_a_binned_camera_is_recognised(original, tmp_path, inline):
    """Results whose scale was fitted to a binned recording are taken over, and renewed when the scale changes."""
    from calibration.scale import Scale, read_scale, write_scale

    folder = tmp_path / "term"
    shutil.copytree(original / "term/south", folder)
    scale = Scale.from_metres_per_pixel(1.5e-6, 3e-9)
    write_scale(replace(scale, width_px=288, height_px=320, picture="reticle.png"), folder / "scale.json")
    text = (folder / "bench.toml").read_text()
    (folder / "bench.toml").write_text(text.replace('metres_per_pixel = "3.000(6) um"', "binning = 2"))
    first = run_batch(folder, out=tmp_path / "out")
    assert [entry.status for entry in first.entries] == ["done", "done"], first.entries
    (tmp_path / "out" / LEDGER).unlink()
    assert run_batch(folder, out=tmp_path / "out").measured == 0
    changed = replace(read_scale(folder / "scale.json"), metres_per_pixel_y=1.52e-6)
    write_scale(changed, folder / "scale.json")
    assert run_batch(folder, out=tmp_path / "out").measured == 2


def test_other_settings_are_other_results(term, inline):
    """Tables in Parquet are asked for: every result is made again, with unit and meaning of each column."""
    import pyarrow.parquet as pq

    shutil.rmtree(term / "term/south")
    made = run_batch(term / "term", out=term / "out", options=Options(settings=Settings(tables="parquet")))
    assert made.measured == 3
    path = next((term / "out/north").rglob("tracks.parquet"))
    field = pq.read_schema(path).field("x_m")
    assert field.metadata[b"unit"] == b"m"
    assert b"scale" in field.metadata[b"meaning"]
    assert not list((term / "out/north").rglob("tracks.csv"))


def test_leftovers_of_a_killed_batch_are_removed(term, inline):
    """Half-written files and folders with the store's temporary names go away; all else stays."""
    folder = term / "out/north/2026-10-05"
    (folder / ".clip9.fallrise.x1.part").mkdir()
    (folder / ".clip9.fallrise.x1.part/tracks.csv").write_text("half")
    (folder / "clip0.fallrise/.recording.77.part.json").write_text("half")
    (term / "out/.droplets.77.part.csv").write_text("half")
    (folder / "my.part.notes").write_text("mine")
    run_batch(term / "term", out=term / "out")
    assert [p.name for p in (term / "out").rglob("*.part*")] == ["my.part.notes"]


def test_results_read_during_a_batch_are_those_read_afterwards(term):
    """Results that were read as they were made equal those read at the end, one that changed since then, too."""
    out = term / "out"
    entries = list(read_ledger(out).values())
    with Reading(out) as reading:
        reading.start(entries)
        reading.results(entries)  # all are read now
        folder = out / "north/2026-10-05/clip0.fallrise"
        cli_status(
            ["decide", str(folder), "--droplet", "0", "--verdict", "reject", "--reason", "two droplets"]
        )
        early = reading.results(entries)
    late = read_results(out, entries)
    assert list(early) == list(late)
    assert len(late) == 4
    for name, result in late.items():
        assert early[name].recording == result.recording
        pd.testing.assert_frame_equal(early[name].droplets, result.droplets)
        pd.testing.assert_frame_equal(early[name].changes, result.changes)
    assert "reject" in set(early["north/2026-10-05/clip0.avi"].droplets["verdict"])


def test_torn_line_of_the_ledger_is_left_out(original, tmp_path):
    """A line cut off by a crash, or garbage, is no entry; the others stand."""
    text = (original / "out" / LEDGER).read_text()
    lines = text.splitlines()
    (tmp_path / LEDGER).write_text("\n".join([*lines[:3], "{}", "[1]", "not json", lines[3][:40]]))
    assert list(read_ledger(tmp_path)) == list(read_ledger(original / "out"))[:3]
    assert read_ledger(tmp_path / "nowhere") == {}


def test_second_batch_on_one_folder_is_refused(term, inline):
    """While a batch holds the output folder another one ends with one clear line that names the holder."""
    with locked(term / "out"), pytest.raises(ResultError, match=f"another batch.*process {os.getpid()}"):
        run_batch(term / "term", out=term / "out")
    assert run_batch(term / "term", out=term / "out").measured == 0


def test_full_disk_stops_the_batch_and_the_next_one_completes(original, tmp_path, monkeypatch, inline):
    """When the disk is full the batch ends with one line, half files are gone, and a second run gives the same."""
    from tracker.keeping import store

    real, calls = store._sync, []

    def full_after_a_while(path):
        calls.append(path)
        if len(calls) > 12:
            raise OSError(errno.ENOSPC, "No space left on device")
        real(path)

    monkeypatch.setattr(store, "_sync", full_after_a_while)
    with pytest.raises(ResultError, match="disk is full"):
        run_batch(original / "term", out=tmp_path / "out")
    monkeypatch.setattr(store, "_sync", real)
    done = len(list((tmp_path / "out").rglob("recording.json")))
    assert 1 <= done < 4
    made = run_batch(original / "term", out=tmp_path / "out")
    assert made.measured == 4 - done  # the bad one, first in the order, stays failed
    assert tables(tmp_path / "out")[0] == tables(original / "out")[0]
    assert not list((tmp_path / "out").rglob("*.part*"))


def start_batch(root: Path, out: Path) -> subprocess.Popen:
    """Start the command in a process of its own."""
    code = "import sys; from tracker.cli import main; main(sys.argv[1:])"
    arguments = ["batch", str(root / "term"), "--out", str(out), "--workers", "1"]
    return subprocess.Popen([sys.executable, "-c", code, *arguments], stdout=subprocess.PIPE, stderr=subprocess.PIPE,
                            text=True, start_new_session=True)  # fmt: skip


@pytest.mark.timeout(240)
def test_killed_batch_goes_on_where_it_stopped(original, tmp_path, inline):
    """After kill -9 in the middle, a second run measures only the rest and gives the tables of a run without a kill."""
    out = tmp_path / "out"
    started = start_batch(original, out)
    end = time.monotonic() + 180
    while time.monotonic() < end and len(read_ledger(out)) < 2:
        time.sleep(0.02)
    os.killpg(started.pid, signal.SIGKILL)
    started.communicate()
    before, ledger = result_times(out), read_ledger(out)
    assert 2 <= len(ledger) < 5
    made = run_batch(original / "term", out=out)
    assert made.measured <= 5 - len(ledger)
    after = result_times(out)
    assert {name: after[name] for name in before} == before  # finished work was not done again
    assert tables(out)[0] == tables(original / "out")[0]
    pd.testing.assert_frame_equal(tables(out)[1], tables(original / "out")[1])
    assert not list(out.rglob("*.part*"))


def test_command_ends_with_status_1_if_a_recording_failed(term, inline, capsys):
    """The command prints counts and failures; with a failure its status is 1, without one 0."""
    arguments = ["batch", str(term / "term"), "--out", str(term / "out")]
    assert cli_status(arguments) == 1
    told = capsys.readouterr()
    assert "5 recordings: 4 done, 1 failed, 0 measured now" in told.out
    assert f"failed: north/2026-10-05/{EVIL}: no recording that can be decoded" in told.out
    assert told.err == ""
    (term / "term/north/2026-10-05" / EVIL).unlink()
    assert cli_status([*arguments, "--json"]) == 0
    assert [row["status"] for row in json.loads(capsys.readouterr().out)["recordings"]] == ["done"] * 4


def test_repeated_recordings_are_told(term, inline, capsys):
    """A copy of a recording under another name is said to repeat it, since report and pool count it once."""
    clip = term / "term/north/2026-10-05/clip0.avi"
    shutil.copy(clip, clip.with_name("again.avi"))
    cli_status(["batch", str(term / "term"), "--out", str(term / "out")])
    assert "1 recording repeats another one: in report and pool each counts once" in capsys.readouterr().out


def test_folder_without_recordings_is_one_line(tmp_path, capsys):
    """A folder with nothing to measure, or no folder, ends with status 1 and one line."""
    assert cli_status(["batch", str(tmp_path)]) == 1
    assert cli_status(["batch", str(tmp_path / "nowhere")]) == 1
    lines = capsys.readouterr().err.splitlines()
    assert len(lines) == 2
    assert "no recordings" in lines[0]


@pytest.mark.parametrize(
    "arguments", [[], ["--nonsense"], ["a", "b"], ["a", "--workers", "0"], ["a", "--tables", "x"]]
)
def test_wrong_usage_ends_with_status_2(arguments, tmp_path, monkeypatch):
    """A missing, unknown or impossible option is wrong usage, not a failure."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "a").mkdir()
    (tmp_path / "a/clip.avi").write_bytes(b"x")
    assert cli_status(["batch", *arguments]) == 2


def test_readme_describes_every_column(original):
    """The README beside the tables names each column of each table with its unit."""
    text = (original / "out/README.md").read_text()
    for column in (*BATCH, *DROPLETS):
        assert f"| `{column.name}` | {column.unit or '-'} |" in text


def test_thousand_recordings_with_nothing_to_do_take_seconds(tmp_path, inline):
    """A run over 1000 done recordings ends within 5 s."""
    for i in range(1000):
        path = tmp_path / f"term/bench{i % 3}/week{i % 12}/clip{i}.avi"
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(b"x")
    for i in range(3):
        (tmp_path / f"term/bench{i}/bench.toml").write_text('[camera]\nmetres_per_pixel = "3 um"\n')
    key, entries = settings_key(Settings()), []
    for task in find_tasks(tmp_path / "term", tmp_path / "out"):
        task.out.mkdir(parents=True)
        (task.out / "recording.json").write_text("{}")
        entries.append(made_entry(task, Outcome("done", ""), task_stamps(task), key))
    batch_room.write_ledger(tmp_path / "out", entries)
    assert run_batch(tmp_path / "term", out=tmp_path / "out").measured == 0  # writes the tables
    start = time.perf_counter()
    made = run_batch(tmp_path / "term", out=tmp_path / "out")
    taken = time.perf_counter() - start
    assert (made.measured, made.changed, len(made.entries)) == (0, False, 1000)
    assert taken < 5.0  # the bar of the job, on any machine


def test_bar_shows_on_a_terminal_only(monkeypatch, capsys):
    """On a terminal one bar tells done, all and failed; into a pipe nothing is written."""
    with batch_bar() as progress:
        assert progress is None
    assert capsys.readouterr().err == ""
    ours, theirs = os.openpty()
    with os.fdopen(theirs, "w") as screen:
        monkeypatch.setattr(sys, "stderr", screen)
        with batch_bar() as progress:
            progress(3, 8, 2)
        monkeypatch.undo()
        told = os.read(ours, 10_000).decode()
    os.close(ours)
    assert "3/8" in told
    assert "2 failed" in told


def test_progress_counts_recordings_and_failures(original, tmp_path, inline):
    """The bar is told how many recordings are done, of how many, and how many failed."""
    shutil.copytree(original / "out", tmp_path / "out")
    (tmp_path / "out" / LEDGER).unlink()
    told = []
    run_batch(original / "term", out=tmp_path / "out", progress=lambda *numbers: told.append(numbers))
    assert told == [(4, 5, 0), (5, 5, 1)]
    assert json.loads((tmp_path / "out/.batch.lock").read_text())["process"] == os.getpid()
