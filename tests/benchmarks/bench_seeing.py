"""Accuracy, links and speed of the frame pipeline on fresh simulated recordings, with plain peers in the same run.

Run ``python tests/benchmarks/bench_seeing.py`` (a quarter of an hour on a free machine with two cores; ``--quick``
for the first two rows of each table, ``--only Speed`` for one table). It prints the tables
and the machine and writes both to ``tests/benchmarks/seeing.md``. Peers: a plain script of trackpy.batch and
trackpy.link on the first 20 frames of a part of each recording, as it takes half a second a picture, and OpenCV's
plain reading in one thread.
"""

from __future__ import annotations

import argparse
import itertools
import os
import platform
import subprocess
import sys
import tempfile
import time
import warnings
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import cv2
import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "helpers"))

from tracking_scores import Track, as_tracks, score, switches

from tracker.records import Field, Segment, Settings, Tracks
from tracker.seeing.frames import open_recording
from tracker.seeing.link import link
from tracker.seeing.see import see
from tracker.simulate import Scene, simulate

SEED = 20_000
RIM = 4.0  # px that are not scored at the picture's edge
BASE = Scene(seconds=20, codec="ffv1")
CROWD = Scene(droplets=60, seconds=16, width=960, height=720, metres_per_pixel=2e-6)
DENSE = replace(CROWD, droplets=200, width=1280, height=960)
SWARM = replace(DENSE, droplets=500)
ACCURACY = {
    **{f"lossless, spot {s:g} px": (replace(BASE, spot=s), "mkv") for s in (1.0, 1.4, 1.7, 2.2, 3.0)},
    **{f"Motion-JPEG, quality {q}": (replace(BASE, codec="mjpeg", quality=q), "avi") for q in (2, 3, 4)},
    **{f"H.264, crf {q}": (replace(BASE, codec="h264", quality=q), "mp4") for q in (18, 20, 23, 26)},
    "VP9, crf 30": (replace(BASE, codec="vp9", quality=30), "webm"),
    "HEVC, crf 22": (replace(BASE, codec="hevc", quality=22), "mp4"),
    "dark lines, lossless": (replace(BASE, lines=9, down_deg=2.0), "mkv"),
    "dark lines, H.264, crf 21": (replace(BASE, lines=9, down_deg=2.0, codec="h264", quality=21), "mp4"),
    "peak 25 grey, lossless": (replace(BASE, peak=25.0), "mkv"),
}
LINKS = {
    "60 droplets, H.264": (replace(CROWD, codec="h264"), "mp4"),
    "200 droplets, Motion-JPEG": (replace(DENSE, codec="mjpeg", seconds=10), "avi"),
    "500 droplets, Motion-JPEG": (replace(SWARM, codec="mjpeg", seconds=6), "avi"),
    "returning, Motion-JPEG": (replace(BASE, codec="mjpeg", droplets=20, seconds=40), "avi"),
}
FAINT = {
    "lossless": (replace(BASE, peak_spread=0.0), "mkv"),
    "lossless, spot 2.6 px": (replace(BASE, peak_spread=0.0, spot=2.6), "mkv"),
    "Motion-JPEG, quality 2": (replace(BASE, peak_spread=0.0, codec="mjpeg", quality=2), "avi"),
    "H.264, crf 17": (replace(BASE, peak_spread=0.0, codec="h264", quality=17), "mp4"),
}
FAINT_PEAK = 3.0  # times the noise of an empty pixel
PEER_FRAMES, PEER_WIDTH, PEER_HEIGHT = 20, 640, 480
RETURN = 5.0  # s, longest absence that counts
SPEED = {
    "640 x 480, Motion-JPEG, a minute": (
        replace(BASE, codec="mjpeg", width=640, height=480, seconds=60),
        "avi",
    ),
    "640 x 480, H.264, a minute": (replace(BASE, codec="h264", width=640, height=480, seconds=60), "mp4"),
    "960 x 720, 60 droplets, H.264": (replace(CROWD, codec="h264", seconds=40), "mp4"),
}


def make(folder: Path, scene: Scene, ending: str, seed: int) -> tuple[Path, dict[str, np.ndarray]]:
    """A recording and its truth, one row a written frame."""
    path = folder / f"clip-{seed}.{ending}"
    files = simulate(scene, path, seed=seed)
    truth = dict(np.load(files.truth_npz))
    return path, {k: v[truth["written"]] for k, v in truth.items()}


def field_of(scene: Scene) -> Field:
    """The schedule as a field."""
    times = [t for t, _ in scene.plan] + [scene.seconds]
    segments = tuple(Segment(t, times[i + 1], v) for i, (t, v) in enumerate(scene.plan))
    knots = np.repeat(times, 2)[1:-1]
    return Field(
        "list", segments, knots, np.repeat([v for _, v in scene.plan], 2), np.zeros(len(segments) - 1)
    )


def inside(scene: Scene, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Which places are scored."""
    return (x > RIM) & (x < scene.width - RIM) & (y > RIM) & (y < scene.height - RIM)


def true_tracks(scene: Scene, truth: dict[str, np.ndarray]) -> list[Track]:
    """Truth as tracks, within the rim."""
    x, y = truth["x_px"], truth["y_px"]
    frame, number = (i.ravel() for i in np.indices(x.shape))
    use = inside(scene, x, y).ravel()
    return as_tracks(number[use], frame[use], x.ravel()[use], y.ravel()[use])


def owners(
    truth: dict[str, np.ndarray], frame: np.ndarray, x: np.ndarray, y: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Nearest droplet of each point, -1 beyond 4 px, and the distance."""
    d = np.hypot(truth["x_px"][frame] - x[:, None], truth["y_px"][frame] - y[:, None])
    own, near = d.argmin(1), d.min(1)
    own[near > 4] = -1
    return own, near


def bound(scene: Scene, peak: np.ndarray) -> np.ndarray:
    """Cramer-Rao bound of a place in px for droplets at rest: sums over the pixels, shot, read and rounding noise."""
    reach = int(np.ceil(4 * scene.spot))
    at = np.arange(-reach, reach + 1)
    shape = np.exp(-0.5 * (at[:, None] ** 2 + at**2) / scene.spot**2)
    ground = scene.background + 0.5 * scene.gradient
    light = peak[:, None, None] * shape
    variance = scene.read_noise**2 + 1 / 12 + scene.gain * (ground + light)
    return 1 / np.sqrt(((light * at / scene.spot**2) ** 2 / variance).sum((1, 2)))


def accuracy_row(name: str, scene: Scene, ending: str, folder: Path) -> str:
    """One recording: found, false sightings, rms, rms over bound, pulls, also by kind of picture."""
    path, truth = make(folder, scene, ending, SEED + len(name))
    seen = see(path, settings=Settings())
    s = seen.sightings
    own, near = owners(truth, s.frame, s.x, s.y)
    visible = inside(scene, truth["x_px"], truth["y_px"])
    hit = np.zeros(visible.shape, np.bool_)
    hit[s.frame[own >= 0], own[own >= 0]] = True
    d = np.hypot(truth["x_px"][s.frame] - s.x[:, None], truth["y_px"][s.frame] - s.y[:, None])
    lone = (near < 1.5) & (np.partition(d, 1, axis=1)[:, 1] > 15) & inside(scene, s.x, s.y)
    dx = s.x[lone] - truth["x_px"][s.frame[lone], own[lone]]
    dy = s.y[lone] - truth["y_px"][s.frame[lone], own[lone]]
    limits = bound(scene, looks(path))
    ratio = np.sqrt(np.mean((dx / limits[own[lone]]) ** 2))
    pulls = np.stack([e / std[lone] for e, std in ((dx, s.x_std), (dy, s.y_std))])
    kinds = kinds_of(path)[s.frame[lone]]
    by_kind = " ".join(f"{k} {pulls[:, kinds == k].std():.2f}" for k in "IPB" if (kinds == k).any())
    return (
        f"| {name} | {hit[visible].mean():.4f} | {np.count_nonzero(near > 4) / len(visible):.3f} | "
        f"{seen.report['spot_width_px']:.2f} | {dx.std():.4f} / {dy.std():.4f} | {ratio:.2f} | "
        f"{pulls[0].std():.2f} / {pulls[1].std():.2f} | {by_kind} |"
    )


def faint_row(name: str, scene: Scene, ending: str, folder: Path) -> str:
    """One recording of droplets whose peak is three times the noise of a pixel: found, and false sightings."""
    ground = scene.background + 0.5 * scene.gradient
    noise = float(np.sqrt(scene.read_noise**2 + 1 / 12 + scene.gain * ground))
    scene = replace(scene, peak=FAINT_PEAK * noise)
    path, truth = make(folder, scene, ending, SEED + 500 + len(name))
    seen = see(path, settings=Settings())
    s = seen.sightings
    own, near = owners(truth, s.frame, s.x, s.y)
    visible = inside(scene, truth["x_px"], truth["y_px"])
    apart = np.hypot(*(truth[c][:, :, None] - truth[c][:, None, :] for c in ("x_px", "y_px")))
    visible &= np.sort(apart, axis=2)[:, :, 1] > 4 * scene.spot  # nearer ones are one spot at this noise
    hit = np.zeros(visible.shape, np.bool_)
    hit[s.frame[own >= 0], own[own >= 0]] = True
    report = seen.report
    return (
        f"| {name} | {hit[visible].mean():.4f} | {np.count_nonzero(near > 4) / len(visible):.3f} | "
        f"{report['false_alarms_found']:.3f} | {max(report['threshold'], report['threshold_of_strays']):.2f} |"
    )


def kinds_of(path: Path) -> np.ndarray:
    """Kind of each picture, empty without loss."""
    with open_recording(path) as reader:
        for _ in reader:
            pass
        return reader.kinds


def looks(path: Path) -> np.ndarray:
    """Peaks of the droplets from the truth file."""
    import json

    truth = json.loads(path.with_name(f"{path.stem}.truth.json").read_text())
    return np.array([d["peak_grey"] for d in truth["droplets"]])


def link_row(name: str, scene: Scene, ending: str, folder: Path) -> str:
    """One recording: scores with and without the voltage, re-entries, and the peer on a part of the recording."""
    path, truth = make(folder, scene, ending, SEED + len(name))
    begin = time.process_time()
    seen = see(path, settings=Settings())
    linked = link(seen, field=field_of(scene), settings=Settings())
    own_time = (time.process_time() - begin) / len(truth["x_px"])
    blind = link(seen, field=None, settings=Settings())
    true = true_tracks(scene, truth)
    cells = [_scored(scene, truth, true, _columns(t)) for t in (linked, blind)]
    relinked, returned = returns(scene, truth, linked)
    begin = time.process_time()
    peer, frames = peer_tracks(path)
    peer_time = (time.process_time() - begin) / frames
    view = replace(scene, width=min(scene.width, PEER_WIDTH), height=min(scene.height, PEER_HEIGHT))
    part = {k: v[:frames] for k, v in truth.items()}
    cells.append(_scored(view, part, true_tracks(view, part), peer))
    return (
        f"| {name} | {len(true)} | {' | '.join(cells)} | {relinked} of {returned} | "
        f"{1e3 * own_time:.1f} ms, {1e3 * peer_time:.0f} ms |"
    )


def returns(scene: Scene, truth: dict[str, np.ndarray], tracks: Tracks) -> tuple[int, int]:
    """Re-entries after at most five seconds out of the picture that are in one track with the time before; and all.

    A droplet counts that is in the picture for 15 frames before and after, and out of it for more than ten.
    """
    number, frame, x, y = _columns(tracks)
    own, _ = owners(truth, frame, x, y)
    owner = np.full(truth["x_px"].shape, -1)
    owner[frame[own >= 0], own[own >= 0]] = number[own >= 0]
    visible = inside(scene, truth["x_px"], truth["y_px"])
    relinked = returned = 0
    for j, seen in enumerate(visible.T):
        edges = np.flatnonzero(np.diff(np.concatenate([[0], seen.astype(int), [0]])))
        stays = [(a, b) for a, b in edges.reshape(-1, 2) if b - a >= 15]
        for (a, b), (c, d) in itertools.pairwise(stays):
            if 10 < c - b <= RETURN * scene.frame_rate and not seen[b:c].any():
                before, after = (o[o >= 0] for o in (owner[a:b, j], owner[c:d, j]))
                returned += 1
                relinked += len(before) > 0 and len(after) > 0 and before[-1] == after[0]
    return int(relinked), returned


def _columns(tracks: Tracks) -> tuple[np.ndarray, ...]:
    t = tracks.sightings
    return tracks.droplet, t.frame, t.x, t.y


def _scored(
    scene: Scene, truth: dict[str, np.ndarray], true: list[Track], columns: tuple[np.ndarray, ...]
) -> str:
    number, frame, x, y = columns
    use = inside(scene, x, y)
    number, frame, x, y = number[use], frame[use], x[use], y[use]
    result = score(true, as_tracks(number, frame, x, y))
    swapped = switches(number, owners(truth, frame, x, y)[0])
    scores = f"{result.jaccard:.3f}, {result.alpha:.3f}, {result.beta:.3f}"
    return f"{scores}, {swapped}, {len(np.unique(number))}, {result.rms:.3f}"


def peer_tracks(path: Path) -> tuple[tuple[np.ndarray, ...], int]:
    """A plain script of trackpy on part of the first frames: locate in batch, link with memory, drop stubs."""
    import trackpy

    trackpy.quiet()
    with open_recording(path) as reader:
        pictures = []
        for batch in reader:
            pictures += [p[:PEER_HEIGHT, :PEER_WIDTH].copy() for p in batch.pictures]
            if len(pictures) >= PEER_FRAMES:
                break
    pictures = pictures[:PEER_FRAMES]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        found = trackpy.batch(pictures, 9, minmass=300, processes=1)
        linked = trackpy.filter_stubs(trackpy.link(found, 12, memory=3), PEER_FRAMES // 3)
    return tuple(linked[c].to_numpy() for c in ("particle", "frame", "x", "y")), len(pictures)


def speed_row(name: str, scene: Scene, ending: str, folder: Path) -> str:
    """One recording: OpenCV's plain reading, our reading, our whole pass with links; interleaved, medians of five."""
    path, _ = make(folder, scene, ending, SEED + len(name))

    def opencv() -> None:
        capture = cv2.VideoCapture(str(path), cv2.CAP_FFMPEG, [cv2.CAP_PROP_N_THREADS, 1])
        while capture.read()[0]:
            pass

    def read() -> None:
        with open_recording(path) as reader:
            for _ in reader:
                pass

    def whole() -> None:
        link(see(path, settings=Settings()), field=field_of(scene), settings=Settings())

    walls = np.array([[_timed(job) for job in (opencv, read, whole)] for _ in range(5)])
    plain, own, all_ = np.median(walls, axis=0)
    return f"| {name} | {plain:.2f} s | {own:.2f} s | {all_:.2f} s | {np.median(walls[:, 2] / walls[:, 0]):.2f} |"


def _timed(job: Callable[[], None]) -> float:
    begin = time.perf_counter()
    job()
    return time.perf_counter() - begin


def memory_row(folder: Path) -> str:
    """Peak memory of a fresh process over a recording and over one four times as long."""
    peaks = []
    for seconds in (15, 60):
        path, _ = make(
            folder,
            replace(BASE, codec="mjpeg", width=640, height=480, seconds=seconds),
            "avi",
            SEED + seconds,
        )
        code = (
            "import resource; from tracker.records import Settings; from tracker.seeing.see import see; "
            "from tracker.seeing.link import link; "
            f"s = see({str(path)!r}, settings=Settings()); link(s, field=None, settings=Settings()); "
            "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)"
        )
        done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
        peaks.append(int(done.stdout) / 1024)
    growth = 100 * (peaks[1] / peaks[0] - 1)
    return f"| 640 x 480, Motion-JPEG | {peaks[0]:.0f} MB | {peaks[1]:.0f} MB | {growth:+.0f} % |"


def machine() -> str:
    """Processor, cores and versions."""
    names = [
        t.split(":")[1].strip() for t in Path("/proc/cpuinfo").read_text().splitlines() if "model name" in t
    ]
    versions = f"Python {platform.python_version()}, numpy {np.__version__}, OpenCV {cv2.__version__}"
    load = ", ".join(f"{v:.2f}" for v in os.getloadavg())
    return (
        f"{names[0] if names else platform.processor()}, {os.cpu_count()} cores, load at the start {load} "
        f"(1, 5, 15 minutes); {versions}"
    )


NOTES = {
    "Faint": "Peak three times the noise of an empty pixel, droplets 4 widths apart. Goal: 0.995 found without loss.",
    "Links": (
        "Jaccard similarity, alpha, beta, switches, tracks, rms px. Goals for the Jaccard similarity with the "
        "voltage known: 0.99 to 60 droplets, 0.97 to 200, 0.91 to 500; 0.92 to 60 without it. Re-entries: after "
        f"at most 5 s out of the picture; goal 90 %. trackpy: {PEER_FRAMES} frames of {PEER_WIDTH} x {PEER_HEIGHT} px."
    ),
    "Speed": "Medians of five interleaved runs, wall time.",
}  # fmt: skip


TABLES: list[tuple[str, list[str], dict[str, tuple[Scene, str]], Callable[..., str]]] = [
    (
        "Places and detection",
        [
            "recording",
            "found",
            "false a frame (asked 0.05)",
            "width px",
            "rms px x / y",
            "rms / bound",
            "pulls x / y",
            "pulls by kind of picture",
        ],
        ACCURACY,
        accuracy_row,
    ),
    (
        "Faint droplets",
        ["recording", "found", "false a frame (asked 0.05)", "as told", "threshold"],
        FAINT,
        faint_row,
    ),
    (
        "Links",
        [
            "recording",
            "droplets",
            "voltage known",
            "voltage unknown",
            "trackpy",
            "re-entries relinked",
            "CPU a frame: ours, trackpy",
        ],
        LINKS,
        link_row,
    ),
    (
        "Speed",
        ["recording", "OpenCV, one thread", "our reading", "see and link", "ratio to OpenCV"],
        SPEED,
        speed_row,
    ),
]


def main() -> None:
    """Print the tables and write them down."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--quick", action="store_true", help="the first two recordings of each table")
    parser.add_argument("--only", default="", help="first word of the table that is wanted")
    chosen = parser.parse_args()
    quick, only = chosen.quick, chosen.only
    lines = ["# The frame pipeline, measured", "", f"Seeds from {SEED}. {machine()}.", ""]
    for title, heads, scenes, row in TABLES:
        if not title.startswith(only):
            continue
        note = [NOTES[title.split()[0]], ""] if title.split()[0] in NOTES else []
        lines += [f"## {title}", "", *note, f"| {' | '.join(heads)} |", "|" + "---|" * len(heads)]
        print("\n".join(lines[-4 - len(note) :]), flush=True)
        for name, (scene, ending) in list(scenes.items())[: 2 if quick else None]:
            with tempfile.TemporaryDirectory() as folder:
                lines.append(row(name, scene, ending, Path(folder)))
            print(lines[-1], flush=True)
        lines.append("")
    if not only or "Memory".startswith(only):
        lines += memory_table()
        print("\n".join(lines[-5:]))
    if not (quick or only):
        Path(__file__).with_name("seeing.md").write_text("\n".join(lines) + "\n")


def memory_table() -> list[str]:
    """Lines of the table of memory."""
    heads = ["recording", "a quarter of a minute", "a minute", "growth"]
    with tempfile.TemporaryDirectory() as folder:
        row = memory_row(Path(folder))
    return ["## Memory", "", f"| {' | '.join(heads)} |", "|" + "---|" * len(heads), row]


if __name__ == "__main__":
    main()
