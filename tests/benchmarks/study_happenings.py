"""Full study of what the motion wing finds: false alarms, power and errors, against what the methods can reach.

    python tests/benchmarks/study_happenings.py [--tracks 1000] [--movies 40]

Writes happenings.md beside this file. About three minutes on one core with the default numbers; seeded. Targets are the
reachable figures by change-point theory and the Cramer-Rao bound for these settings: oil of 886 kg/m^3 in air at 22 C,
30 frames a second, exposure 0.9 of the interval, 0.1 px of 2.5 um place noise, 5 % of the frames missing, 24 s.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "helpers"))

from diffusing_droplets import CONDITIONS
from happening_droplets import Camera, Life, evaporated, made_bench, made_tracks, record_path, schedule

from physics.motion import droplet_posterior
from tracker.errors import FieldError
from tracker.motion.changes import find_changes
from tracker.motion.fieldlog import Log
from tracker.motion.fieldmotion import field_from_motion, fit_clock_offset

STRONG, WEAK = Camera(steps=schedule(4e4)), Camera(steps=schedule(1.5e4))
TIME_OF_CHANGE = 12.0  # s, mid track


def kinds_found(
    rng: np.random.Generator, make: Callable[[], Life], camera: Camera, tracks: int,
    shared: tuple[float, float] | None = None,
) -> list[list[str]]:  # fmt: skip
    """Kinds of change that are found in each of some tracks."""
    found = []
    for _ in range(tracks):
        path = record_path(rng, make(), camera)
        history = find_changes(path.steps, np.asarray(path.times), CONDITIONS, shared_rate=shared)
        found.append([change.kind for change in history.changes])
    return found


def share(found: list[list[str]], *kinds: str) -> float:
    """Share of the tracks with any change of the kinds."""
    return sum(any(kind in kinds for kind in one) for one in found) / len(found)


def rows_of_changes(rng: np.random.Generator, tracks: int) -> list[tuple[str, str, str, str]]:
    """False alarms and power of steps, evaporation and switches."""
    radii = np.array([0.3, 0.5, 0.7, 1.0, 1.5]) * 1e-6

    def steady() -> Life:
        return Life(float(rng.choice(radii)), float(rng.integers(-10, 11)))

    null = kinds_found(rng, steady, STRONG, 3 * tracks)
    rows = [
        (f"{name}: false alarms", f"{len(null)} steady tracks, 4e4 V/m", "<= 0.002", f"{share(null, *kinds):.4f}")
        for name, kinds in (("charge step", ["charge_step"]), ("evaporation or growth", ["evaporation", "growth"]),
                            ("switch", ["switch"]))
    ]  # fmt: skip
    for radius in (0.4e-6, 0.7e-6, 1.0e-6):
        life = Life(radius, 5, changes=((TIME_OF_CHANGE, radius, 6),))
        found = kinds_found(rng, lambda life=life: life, STRONG, tracks // 4, (0.0, 2e-16))
        setting = f"one e at {radius * 1e6:.1f} um, 4e4 V/m, 24 s, among steady droplets"
        right = sum(one == ["charge_step"] for one in found) / max(1, sum(bool(one) for one in found))
        rows.append(
            ("charge step: power", setting, ">= 0.98", f"{share(found, 'charge_step', 'switch'):.3f}")
        )
        rows.append(("charge step: called so", setting, ">= 0.97", f"{right:.3f}"))
    for radius, target in ((0.5e-6, ""), (1.0e-6, ">= 0.95")):
        life = evaporated(Life(radius, 5), 0.1, 24.0)
        found = kinds_found(rng, lambda life=life: life, STRONG, tracks // 4)
        setting = f"10 % of {radius * 1e6:.1f} um, 4e4 V/m, 24 s"
        rows.append(("evaporation: power", setting, target, f"{share(found, 'evaporation', 'switch'):.3f}"))
    for radius, target in ((0.3e-6, ">= 0.8"), (0.5e-6, ">= 0.8"), (1.0e-6, ">= 0.99")):
        life = Life(radius, 5, changes=((TIME_OF_CHANGE, 1.2 * radius, 5),))
        found = kinds_found(rng, lambda life=life: life, WEAK, tracks // 4)
        names = Counter(one[0] for one in found if one)
        told = ", ".join(f"{name} {count / len(found):.2f}" for name, count in names.most_common())
        rows.append(("switch: found", f"{radius * 1e6:.1f} um to x 1.2, 1.5e4 V/m, 24 s", target,
                     f"{sum(bool(one) for one in found) / len(found):.3f} ({told})"))  # fmt: skip
    return rows


def rows_of_diffusion(rng: np.random.Generator, tracks: int) -> list[tuple[str, str, str, str]]:
    """False alarms and power of the test of Brownian motion against fall speed."""

    def z_of(life: Life) -> float:
        return droplet_posterior(record_path(rng, life, STRONG).steps, CONDITIONS).diffusion_z

    null = [z_of(Life(float(r), 5)) for r in rng.uniform(0.4e-6, 1.2e-6, tracks)]
    spread = f"z: mean {np.nanmean(null):+.2f}, sd {np.nanstd(null):.2f}"
    told = f"{np.mean(np.abs(null) > 3.29):.4f} ({spread})"
    rows = [("variance ratio: false alarms", f"{tracks} steady tracks", "<= 0.002", told)]
    for radius in (0.5e-6, 1.0e-6):
        z = [z_of(Life(radius, 5, diffusion_factor=1.5)) for _ in range(tracks // 4)]
        setting = f"D x 1.5 at {radius * 1e6:.1f} um, 24 s"
        rows.append(("variance ratio: power", setting, ">= 0.97", f"{np.mean(np.abs(z) > 3.29):.3f}"))
    return rows


def cast(rng: np.random.Generator, count: int) -> list[Life]:
    """Droplets of 0.3 to 1 um with 1 to 15 charges of either sign."""
    radii, numbers = rng.uniform(0.3e-6, 1e-6, count), rng.integers(1, 16, count) * rng.choice([-1, 1], count)
    return [Life(float(r), float(n)) for r, n in zip(radii, numbers, strict=True)]


def quantiles(errors: list[float]) -> str:
    """Median, 68 and 95 % of absolute errors in ms."""
    return " / ".join(f"{1e3 * q:.1f}" for q in np.quantile(np.abs(errors), [0.5, 0.68, 0.95])) + " ms"


def rms(pulls: list[float]) -> str:
    """Root mean square of pulls."""
    return f"{np.sqrt(np.mean(np.square(pulls))):.2f}"


def rows_of_toggles(rng: np.random.Generator, movies: int, folder: Path) -> list[tuple[str, str, str, str]]:
    """Toggles from motion: missed, invented, placed."""
    rows = []
    for strength, target in (
        (4e4, "0 missed, 0 extra, 68 % <= 2.5, 95 % <= 6 ms"),
        (1e4, "0 missed, 68 % <= 10, 95 % <= 25 ms"),
    ):
        errors: list[float] = []
        pulls: list[float] = []
        missed = extra = 0
        for _ in range(movies):
            camera = Camera(steps=schedule(strength, jitter=rng))
            tracks, recording = made_tracks(rng, cast(rng, 10), camera)
            field = field_from_motion(tracks, recording, made_bench(folder, camera, voltage=strength * 6e-3))
            found = np.array([segment.end for segment in field.segments[:-1]])
            truth = np.array([t for t, _ in camera.steps[1:]])
            near = np.abs(found[:, None] - truth) < 0.3
            missed += int(np.sum(~near.any(axis=0)))
            extra += int(np.sum(~near.any(axis=1)))
            for i, j in zip(*np.nonzero(near), strict=True):
                errors.append(float(found[i] - truth[j]))
                pulls.append(errors[-1] / float(field.toggle_std[i]))
        rows.append((f"toggles at {strength:.0e} V/m", f"10 droplets, {movies} movies", target,
                     f"{missed} missed, {extra} extra, {quantiles(errors)}, pulls {rms(pulls)}"))  # fmt: skip
    false = 0
    for _ in range(2 * movies):
        camera = Camera(steps=((0.0, 0.0),))
        tracks, recording = made_tracks(rng, cast(rng, 10), camera)
        try:
            field_from_motion(tracks, recording, made_bench(folder, Camera(steps=((0.0, 1.0),))))
            false += 1
        except FieldError:
            continue
    rows.append(("toggles without field", f"10 droplets, {2 * movies} movies", "0", f"{false}"))
    return rows


def rows_of_offset(rng: np.random.Generator, movies: int, folder: Path) -> list[tuple[str, str, str, str]]:
    """Clock offset of a log of changes."""
    rows = []
    for strength, target in ((4e4, "95 % <= 4 ms"), (1e4, "95 % <= 15 ms")):
        errors: list[float] = []
        pulls: list[float] = []
        refused = 0
        for _ in range(movies):
            camera = Camera(steps=schedule(strength, jitter=rng))
            tracks, recording = made_tracks(rng, cast(rng, 3), camera)
            bench = made_bench(folder, camera, voltage=strength * 6e-3)
            times, volts = (
                np.array([t for t, _ in camera.steps]),
                np.array([e * 6e-3 for _, e in camera.steps]),
            )
            try:
                field = fit_clock_offset(
                    tracks, Log(times + 1.3, volts, False, Path("log.csv")), recording, bench
                )
            except FieldError:
                refused += 1
                continue
            errors.append(field.clock_offset + 1.3)
            pulls.append(errors[-1] / field.clock_offset_std)
        rows.append((f"log offset at {strength:.0e} V/m", f"3 droplets, {movies} movies", target,
                     f"{quantiles(errors)}, pulls {rms(pulls)}, {refused} refused as ambiguous"))  # fmt: skip
    return rows


def main() -> None:
    """Run the study and write its table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--tracks", type=int, default=1000)
    parser.add_argument("--movies", type=int, default=40)
    parser.add_argument("--seed", type=int, default=2026)
    options = parser.parse_args()
    rng, start = np.random.default_rng(options.seed), time.process_time()
    with tempfile.TemporaryDirectory() as folder:
        rows = rows_of_changes(rng, options.tracks) + rows_of_diffusion(rng, options.tracks)
        rows += rows_of_toggles(rng, options.movies, Path(folder)) + rows_of_offset(
            rng, options.movies, Path(folder)
        )
    call = f"--tracks {options.tracks} --movies {options.movies} --seed {options.seed}"
    lines = ["# What happens to a droplet, and when the field was on: figures", "",
             f"Made by `study_happenings.py {call}`.", "",
             "| what | setting | target | found |", "|---|---|---|---|"]  # fmt: skip
    lines += ["| " + " | ".join(row) + " |" for row in rows]
    (Path(__file__).parent / "happenings.md").write_text("\n".join(lines) + "\n", encoding="utf-8")
    print("\n".join(lines), f"\n{time.process_time() - start:.0f} s of CPU")


if __name__ == "__main__":
    main()
