"""Simulate a recording: the file, its truth, and the bench file and voltage log that a lab would keep."""

from __future__ import annotations

import csv
import json
import os
import shutil
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from dataclasses import asdict, dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from physics.droplet import fall_speed
from tracker.errors import FileError
from tracker.simulate.files import is_video, open_writer, tick
from tracker.simulate.motion import (
    Drops,
    Motion,
    draw_drops,
    frame_starts,
    move,
    scene_air,
    scene_conditions,
    voltage_course,
)
from tracker.simulate.picture import Looks, draw_looks, pictures
from tracker.simulate.scene import Scene


@dataclass(frozen=True, slots=True)
class Simulated:
    """Files that one simulation wrote."""

    recording: Path
    truth_json: Path
    truth_npz: Path
    frames: int  # written


def simulate(
    scene: Scene, out: str | Path, *, seed: int, progress: Callable[[float, float], None] | None = None
) -> Simulated:
    """Write a recording with known truth.

    Parameters
    ----------
    scene : Scene
        What it shows.
    out : path-like
        The recording: ``.avi .mp4 .mov .mkv .webm`` video, ``.tif`` stack, or a name without suffix for a
        folder of PNG pictures. ``NAME.truth.json`` and ``NAME.truth.npz`` are written beside it.
    seed : int
        Not negative. Droplets, motion and camera have their own streams: the same seed gives the same
        droplets to another camera.
    progress : callable, optional
        Called with frames done and frames in all.

    Returns
    -------
    files : Simulated
        Paths of what was written.

    Raises
    ------
    UsageError
        If the container cannot hold the scene.
    FileError
        If a file cannot be written.

    Notes
    -----
    ``NAME.truth.npz`` holds, one row a frame with lost ones: `time_s`, `written`, `repeated`, `voltage_v`
    (mean over the exposure), and with one column a droplet `x_px`, `y_px` (means over the exposure),
    `charge_number`, `radius_m`. Decoded frame i is the i-th row with `written`.
    """
    out = Path(out)
    droplet_rng, motion_rng, camera_rng, file_rng = (
        np.random.default_rng(s) for s in np.random.SeedSequence(seed).spawn(4)
    )
    drops = draw_drops(scene, droplet_rng)
    starts = frame_starts(scene, file_rng, tick=tick(out, scene))
    motion = move(scene, drops, starts, motion_rng)
    looks = draw_looks(scene, camera_rng)
    written, repeated = _losses(scene, len(starts), file_rng)
    with _whole(out) as part, open_writer(part, scene, shown=out) as write:
        shown = None
        for k, picture in enumerate(pictures(scene, looks, motion, camera_rng)):
            if written[k]:
                shown = shown if repeated[k] and shown is not None else picture
                write(shown, float(starts[k]))
            if progress is not None:
                progress(k + 1, len(starts))
    truth = _write_truth(scene, out, seed, (drops, motion, looks, written, repeated))
    return Simulated(out, *truth, frames=int(written.sum()))


def _losses(
    scene: Scene, count: int, rng: np.random.Generator
) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Which frames are written, and which of these show the one before; the first is always its own."""
    written, repeated = rng.random((2, count))
    written, repeated = written >= scene.lost, repeated < scene.repeated
    written[0], repeated[0] = True, False
    return written, repeated & written


@contextmanager
def _whole(out: Path) -> Iterator[Path]:
    """Give a temporary name beside `out` that takes its place once all is written."""
    part = out.with_name(f".part-{out.name}")
    try:
        yield part
        if part.is_dir():
            shutil.rmtree(out, ignore_errors=True)
        part.replace(out)
    except OSError as error:
        raise FileError(str(out), f"cannot be written: {error.strerror or error}") from error
    finally:
        if part.is_dir():
            shutil.rmtree(part, ignore_errors=True)
        with suppress(OSError):
            part.unlink()


def _beside(out: Path, ending: str) -> Path:
    """Name of a file that belongs to the recording."""
    return out.with_name((out.stem if out.suffix else out.name) + ending)


def _write_truth(
    scene: Scene,
    out: Path,
    seed: int,
    made: tuple[Drops, Motion, Looks, NDArray[np.bool_], NDArray[np.bool_]],
) -> tuple[Path, Path]:
    """Write the truth files: settings and droplets as JSON, motion as NPZ."""
    drops, motion, looks, written, repeated = made
    air = scene_air(scene)
    truth = {
        "recording": out.name, "seed": seed, "version": version("fallrise"),
        "scene": asdict(scene), "schedule": [list(p) for p in scene.plan],
        "air": {"viscosity": air.viscosity, "mean_free_path": air.mean_free_path, "density": air.density},
        "frames": {
            "written": int(written.sum()), "lost": int((~written).sum()), "repeated": int(repeated.sum()),
        },
        "droplets": _true_droplets(scene, drops, looks), "changes": _true_changes(drops, motion),
        "stuck_px": looks.stuck.tolist(),
    }  # fmt: skip
    arrays: dict[str, Any] = {
        "time_s": motion.starts, "written": written, "repeated": repeated, "voltage_v": motion.voltage,
        "x_px": motion.x_px, "y_px": motion.y_px, "charge_number": motion.number, "radius_m": motion.radius,
    }  # fmt: skip
    json_path, npz_path = _beside(out, ".truth.json"), _beside(out, ".truth.npz")
    with _whole(json_path) as part:
        part.write_text(json.dumps(truth, indent=1), encoding="utf-8")
    with _whole(npz_path) as part:
        np.savez_compressed(part, **arrays)
    return json_path, npz_path


def _true_droplets(scene: Scene, drops: Drops, looks: Looks) -> list[dict[str, Any]]:
    """What each droplet is, at the start of the recording."""
    speeds = np.atleast_1d(fall_speed(drops.radius, scene_conditions(scene)))
    columns = (
        drops.radius.tolist(),
        drops.number.tolist(),
        speeds.tolist(),
        looks.peak.tolist(),
        looks.width.tolist(),
    )
    return [
        {"droplet": j, "radius_m": r, "charge_number": n, "fall_speed_m_s": v, "peak_grey": p, "spot_px": w}
        for j, (r, n, v, p, w) in enumerate(zip(*columns, strict=True))
    ]


def _true_changes(drops: Drops, motion: Motion) -> list[dict[str, Any]]:
    """Charge steps and returns of the droplets."""
    changes: list[dict[str, Any]] = [
        {"droplet": int(j), "kind": "charge", "time_s": float(drops.step_time[j]), "step": int(drops.step[j])}
        for j in np.flatnonzero(drops.step)
    ]
    frames, columns = np.nonzero(motion.returned)
    back = zip(frames.tolist(), columns.tolist(), strict=True)
    return changes + [{"droplet": j, "kind": "return", "frame": k} for k, j in back]


def bench_text(scene: Scene, *, video: bool = True, log: str | None = None) -> str:
    """Give the bench file of a scene.

    Parameters
    ----------
    scene : Scene
        The simulated bench, taken as known exactly.
    video : bool, optional
        False for pictures without frame times: their frame rate is written, too.
    log : str, optional
        Voltage log beside the bench file, which then gives the voltage; its clock is fitted.

    Returns
    -------
    text : str
        TOML, as `fallrise measure` reads it. Without a log the voltage is from the scene's lamp, if it has one and
        one voltage besides 0, else from a list.
    """
    volts = next((v for _, v in scene.plan if v), 0.0)
    voltage = f'voltage = "{volts:.12g} V"\n' if volts else ""
    rate = "" if video else f'frame_rate = "{scene.frame_rate:.12g} Hz"\n'
    return f"""# a simulated bench
[cell]
plate_gap = "{scene.plate_gap * 1e3:.12g} mm"
{voltage}[oil]
density = "{scene.oil_density:.12g} kg/m^3"
[air]
temperature = "{scene.temperature - 273.15:.9g} degC"
pressure = "{scene.pressure / 100:.12g} hPa"
relative_humidity = "{scene.relative_humidity * 100:.12g} percent"
slip = "{scene.slip}"
[site]
gravity = "{scene.gravity:.12g} m/s^2"
[camera]
metres_per_pixel = "{scene.metres_per_pixel * 1e6:.12g} um"
exposure = "{scene.exposure_time * 1e3:.12g} ms"
{rate}[field]
{_field_text(scene, log)}"""


def _field_text(scene: Scene, log: str | None) -> str:
    """Where the voltage over time is from: a log, the lamp or a list."""
    if log is not None:
        return f'source = "log"\nlog = {json.dumps(log)}\nclock_offset = "auto"\n'
    if scene.lamp is not None and len({v for _, v in scene.plan} - {0.0}) == 1:
        return f'source = "lamp"\nlamp = {list(scene.lamp)}\n'
    entries = ", ".join(f'["{t:.9g} s", "{v:.9g} V"]' for t, v in scene.plan)
    return f'source = "list"\nlist = [{entries}]\n'


def write_bench(
    scene: Scene, path: str | Path, *, recording: str | Path, log: str | Path | None = None
) -> Path:
    """Write the bench file of a scene, so that its recording can be measured at once.

    Parameters
    ----------
    scene : Scene
        The simulated bench.
    path : path-like
        The TOML file to be written.
    recording : path-like
        The recording that it belongs to.
    log : path-like, optional
        Voltage log that `write_log` writes; the bench file then names it.

    Returns
    -------
    path : Path
        What was written.

    Raises
    ------
    FileError
        If it cannot be written.
    """
    path = Path(path)
    beside = None if log is None else Path(os.path.relpath(log, path.parent)).as_posix()
    with _whole(path) as part:
        part.write_text(bench_text(scene, video=is_video(Path(recording)), log=beside), encoding="utf-8")
    return path


@dataclass(frozen=True, slots=True, kw_only=True)
class Logger:
    """A data logger at the supply, with a clock of its own."""

    interval: float = 0.02  # s between its rows
    early: float = 0.0  # s: its clock shows this much less than the recording's at the recording's start
    fast: float = 0.0  # relative: its clock runs fast by this much
    noise: float = 0.3  # V, standard deviation of a reading
    before: float = 1.0  # s that it runs before the recording starts, and after it ends


def write_log(scene: Scene, path: str | Path, *, logger: Logger, seed: int) -> Path:
    """Write the voltage log of a scene as CSV with the columns `time_s` and `voltage_v`.

    Parameters
    ----------
    scene : Scene
        Its voltages.
    path : path-like
        The CSV file to be written.
    logger : Logger
        Clock and noise.
    seed : int
        Not negative.

    Returns
    -------
    path : Path
        What was written.

    Raises
    ------
    FileError
        If it cannot be written.
    """
    path, rng = Path(path), np.random.default_rng(seed)
    times = np.arange(-logger.before, scene.seconds + logger.before, logger.interval)
    volts = voltage_course(scene.plan, ramp=scene.ramp, droop=scene.droop).at(np.maximum(times, 0.0))[0]
    shown = times * (1 + logger.fast) - logger.early
    with _whole(path) as part, part.open("w", newline="", encoding="utf-8") as stream:
        rows = csv.writer(stream, lineterminator="\n")
        rows.writerow(["time_s", "voltage_v"])
        rows.writerows(
            [f"{t:.4f}", f"{v + e:.2f}"]
            for t, v, e in zip(shown, volts, logger.noise * rng.standard_normal(len(times)), strict=True)
        )
    return path
