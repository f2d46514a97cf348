"""A simulated term: three benches, one with a wrong scale, one whose voltage falls; writes `term.md`.

    python tests/benchmarks/study_term.py [--recordings 300] [--kills 10] [--folder DIR]

Measures with one and with two workers, kills a third batch at random moments, and compares what the report
says with what was simulated. Takes about 20 minutes on two idle cores with 300 recordings.
"""

from __future__ import annotations

import argparse
import os
import platform
import random
import signal
import subprocess
import sys
import tempfile
import time
from datetime import date, timedelta
from pathlib import Path

import numpy as np
import pandas as pd

from physics.droplet import ELEMENTARY_CHARGE, droplet_mobility, fall_speed
from tracker.simulate import Scene, bench_text, simulate
from tracker.simulate.motion import scene_conditions
from tracker.term.drift import bench_drifts
from tracker.term.ledger import read_ledger
from tracker.term.pool import pool_of
from tracker.term.reading import read_results

BENCHES = ("bench A", "bench B", "bench C")
WEEKS = 12
FIRST = date(2026, 9, 7)
SCALE_ERROR = 0.015  # bench B: stated too large
VOLTAGE_LOSS = 0.005  # bench C: of the voltage, each week
VOLTS = 400.0
BAD_SHARE = 0.04
SCENE = Scene(droplets=6, seconds=12.0, frame_rate=12.0, width=160, height=240, voltages=(0.0, VOLTS), first=1.0,
              plateau=2.2, peak=120.0)  # fmt: skip


def scene(rng: np.random.Generator, volts: float) -> Scene:
    """Droplets that stay in view: about twice the charge that balances them, field off and on in turn."""
    conditions = scene_conditions(SCENE)
    radii = rng.uniform(0.55e-6, 0.95e-6, SCENE.droplets)
    per_e = droplet_mobility(radii, conditions) * ELEMENTARY_CHARGE * VOLTS / conditions.plate_gap
    numbers = np.maximum(
        1, np.rint(2 * fall_speed(radii, conditions) / per_e + rng.normal(0, 0.3, len(radii)))
    )
    values = {name: getattr(SCENE, name) for name in SCENE.__dataclass_fields__}
    return Scene(**(values | {
        "radii": tuple(radii.tolist()), "charge_numbers": tuple(int(-n) for n in numbers), "voltages": (0.0, volts),
    }))  # fmt: skip


def stated_bench(name: str) -> str:
    """Bench file of a bench, with uncertainties; that of bench B has the wrong scale."""
    error = SCALE_ERROR if name == "bench B" else 0.0
    pairs = (
        ('"3 um"', f'"{3 * (1 + error):.3f}(6) um"'), ('"6 mm"', '"6.00(1) mm"'), ('"400 V"', '"400.0(8) V"'),
        ('"886 kg/m^3"', '"886(1) kg/m^3"'), ('"22 degC"', '"22.0(3) degC"'), ('"1008 hPa"', '"1008(1) hPa"'),
        ('"45 percent"', '"45(5) percent"'),
    )  # fmt: skip
    text = bench_text(SCENE).replace("# a simulated bench", f"# {name}")
    for plain, with_doubt in pairs:
        if plain not in text:
            raise SystemExit(f"the bench text has no {plain}")
        text = text.replace(plain, with_doubt, 1)
    return text


def make_term(folder: Path, count: int) -> list[str]:
    """Write the recordings; give the names of the bad ones."""
    rng = np.random.default_rng(20260907)
    bad = set(rng.choice(count, round(BAD_SHARE * count), replace=False).tolist())
    names = []
    for i in range(count):
        bench, week = BENCHES[i % 3], (i // 3) % WEEKS
        day = FIRST + timedelta(days=7 * week + int(rng.integers(0, 5)))
        path = folder / bench / day.isoformat() / f"clip{i:03d}.avi"
        volts = VOLTS * (1 - VOLTAGE_LOSS * week) if bench == "bench C" else VOLTS
        made = simulate(scene(rng, volts), path, seed=i)
        made.truth_json.unlink()
        made.truth_npz.unlink()
        if i in bad:
            path.write_bytes((b"", b"no video at all\n", path.read_bytes()[:300])[i % 3])
            names.append(path.relative_to(folder).as_posix())
    for bench in BENCHES:
        (folder / bench / "bench.toml").write_text(stated_bench(bench), encoding="utf-8")
    return names


def command(term: Path, out: Path, workers: int) -> list[str]:
    """The batch as a person starts it."""
    code = "import sys; from tracker.cli import main; main(sys.argv[1:])"
    return [sys.executable, "-c", code, "batch", str(term), "--out", str(out), "--workers", str(workers)]


def timed(term: Path, out: Path, workers: int) -> float:
    """Wall time of a batch in s."""
    start = time.perf_counter()
    done = subprocess.run(command(term, out, workers), capture_output=True, text=True, check=False)
    if done.returncode not in (0, 1) or done.stderr:
        raise SystemExit(done.stderr)
    return time.perf_counter() - start


def decode_time(term: Path) -> float:
    """Time in s that one thread needs to decode all recordings, luma only, without any work on them."""
    import av

    start = time.perf_counter()
    for path in sorted(term.rglob("*.avi")):
        try:
            with av.open(str(path)) as container:
                container.streams.video[0].thread_type = "NONE"
                for frame in container.decode(video=0):
                    bytes(frame.planes[0])
        except (av.FFmpegError, IndexError):
            continue
    return time.perf_counter() - start


def finished(out: Path) -> dict[str, int]:
    """Results that are whole, with the time at which each was written."""
    return {str(p.relative_to(out)): p.stat().st_mtime_ns for p in out.rglob("recording.json")}


def kill_rows(term: Path, out: Path, kills: int, seconds: float) -> list[tuple[str, ...]]:
    """Kill batches at random moments, each going on after the last; then let one end."""
    chance, rows = random.Random(7), []
    before: dict[str, int] = {}
    for k in range(kills):
        moment = chance.uniform(0.5, max(6.0, 1.6 * seconds / max(kills, 1)))
        started = subprocess.Popen(command(term, out, 2), stdout=subprocess.DEVNULL, start_new_session=True)
        time.sleep(moment)
        os.killpg(started.pid, signal.SIGKILL)
        started.wait()
        time.sleep(0.5)
        now = finished(out)
        again = sum(now.get(name) != changed for name, changed in before.items())
        parts = sum(1 for _ in out.rglob("*.part*"))
        rows.append((str(k + 1), f"{moment:.1f}", str(len(before)), str(len(now)), str(again), str(parts)))
        before = now
    timed(term, out, 2)
    now = finished(out)
    again = sum(now.get(name) != changed for name, changed in before.items())
    parts = sum(1 for _ in out.rglob("*.part*"))
    return [*rows, ("to the end", "-", str(len(before)), str(len(now)), str(again), str(parts))]


def verdict_rows(out: Path) -> list[tuple[str, ...]]:
    """What the report says of each bench against what was simulated."""
    entries = sorted(read_ledger(out).values(), key=lambda entry: entry.recording)
    results = read_results(out, entries)
    pool = pool_of(list(results.values()))
    days = {
        str(results[e.recording].folder): date.fromisoformat(e.day) for e in entries if e.recording in results
    }
    drifts = bench_drifts(pool, days)
    rows = []
    for bench, drift in zip(pool.benches, drifts, strict=True):
        true_scale = SCALE_ERROR if bench.label == "bench B" else 0.0
        true_slope = -VOLTAGE_LOSS / (1 - VOLTAGE_LOSS * (WEEKS - 1) / 2) if bench.label == "bench C" else 0.0
        error, std = bench.errors.get("scale", (float("nan"), float("nan")))
        slope, slope_std = drift.slope / bench.ratio, drift.slope_std / bench.ratio
        rows.append((bench.label, str(len(bench.sample)), f"{bench.ratio:.4f}", f"{bench.ratio_own_std:.4f}",
                     f"{bench.ratio_shared_std:.4f}", f"{100 * error:+.2f} ({100 * std:.2f})",
                     f"{100 * true_scale:+.2f}",
                     f"{100 * slope:+.3f} ({100 * slope_std:.3f})", f"{100 * true_slope:+.3f}",
                     "yes" if drift.drifts else "no"))  # fmt: skip
    return rows


def grid(heads: tuple[str, ...], rows: list[tuple[str, ...]]) -> str:
    """A table in Markdown."""
    lines = ["| " + " | ".join(heads) + " |", "|" + "---|" * len(heads)]
    return "\n".join([*lines, *("| " + " | ".join(row) + " |" for row in rows)])


def same_tables(here: Path, there: Path) -> bool:
    """Tell whether two batches gave the same droplets and, but for the time, the same recordings."""
    droplets = (here / "droplets.csv").read_bytes() == (there / "droplets.csv").read_bytes()
    batch = [pd.read_csv(out / "batch.csv").drop(columns="seconds") for out in (here, there)]
    return droplets and batch[0].equals(batch[1])


def study(folder: Path, count: int, kills: int) -> str:
    """Run everything and give the text of the table file."""
    term = folder / "term"
    bad = make_term(term, count)
    load = os.getloadavg()[0] if hasattr(os, "getloadavg") else float("nan")
    decode = decode_time(term)
    one, two = timed(term, folder / "one", 1), timed(term, folder / "two", 2)
    idle = timed(term, folder / "two", 2)
    rows = kill_rows(term, folder / "killed", kills, two)
    entries = read_ledger(folder / "two").values()
    failed = sorted(entry.recording for entry in entries if entry.status == "failed")
    peaks = [entry.peak_bytes / 1e6 for entry in entries if entry.status == "done"]
    spent = sum(entry.seconds for entry in read_ledger(folder / "one").values())
    times = [
        ("decode all recordings, one thread, nothing else", f"{decode:.1f} s"),
        ("batch, 1 worker", f"{one:.1f} s, of which {spent:.1f} s in `measure`"),
        ("batch, 2 workers", f"{two:.1f} s: {one / two:.2f} times as fast, {two / decode:.1f} times the decoding"),
        ("batch with nothing to do", f"{idle:.2f} s"),
        ("peak memory of a worker", f"{np.median(peaks):.0f} MB median, {max(peaks):.0f} MB largest"),
        ("failed recordings", f"{len(failed)}, the {len(bad)} bad ones: {failed == sorted(bad)}"),
        ("tables with 1 worker, 2 workers, and after the kills equal",
         f"{same_tables(folder / 'one', folder / 'two')}, {same_tables(folder / 'two', folder / 'killed')}"),
    ]  # fmt: skip
    bench_heads = ("bench", "charges", "unit / e", "own", "shared", "scale error that explains it / %", "true / %",
                   "drift of the charges / % a week", "true / % a week", "called a drift")  # fmt: skip
    kill_heads = ("kill", "after s", "results before", "results then", "done again (lost)", "half files left")
    return "\n".join([
        "# A simulated term", "",
        f"Made by `study_term.py` with {count} recordings of {SCENE.seconds:g} s ({SCENE.width} x {SCENE.height} px, "
        f"{SCENE.frame_rate:g} Hz, {SCENE.droplets} droplets) over {WEEKS} weeks; Python {platform.python_version()}, "
        f"{os.cpu_count()} cores, load {load:.1f} before the start.", "",
        "## What the report says of the benches", "", grid(bench_heads, verdict_rows(folder / "two")), "",
        f"Bench B's scale is stated {100 * SCALE_ERROR:.1f} % too large; bench C loses {100 * VOLTAGE_LOSS:.1f} % of "
        "its first week's voltage each week. In brackets: standard uncertainties (of the scale: own and shared, "
        "without its own stated one; of the drift: own).", "",
        "## Time and memory", "", grid(("what", "figure"), times), "",
        *(["Other work ran on the machine at the same time: the wall times are not those of a quiet one.", ""]
          if load > 1 else []),
        "## Batches killed with SIGKILL at random moments", "", grid(kill_heads, rows), "",
        "Half files that a kill leaves are removed by the next batch. Lost would be a result that was whole before a "
        "kill and was made again later.", "",
    ])  # fmt: skip


def main() -> None:
    """Parse, run, write the table beside this file."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--recordings", type=int, default=300)
    parser.add_argument("--kills", type=int, default=10)
    parser.add_argument(
        "--folder", type=Path, help="where to work; default: a temporary folder that is removed"
    )
    parser.add_argument("--out", type=Path, default=Path(__file__).with_name("term.md"))
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as temporary:
        folder = options.folder or Path(temporary)
        text = study(folder, options.recordings, options.kills)
    options.out.write_text(text, encoding="utf-8")
    print(text)


if __name__ == "__main__":
    main()
