"""Result folders with droplets whose charges are known, as a measurement would have written them."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
import pandas as pd

from calibration.scale import scale_to_json
from physics.quanta import ELEMENTARY_CHARGE
from tracker.bench import load_bench
from tracker.keeping.store import Result, write_result
from tracker.keeping.tables import CHANGES, DROPLETS, SEGMENTS, TRACKS
from tracker.provenance import bench_json

BENCH = """
[cell]
plate_gap = "6.00(2) mm"
voltage = "260.0(5) V"
[oil]
density = "886(1) kg/m^3"
[air]
temperature = "22.0(3) degC"
pressure = "1008(1) hPa"
relative_humidity = "45(5) percent"
[site]
gravity = "9.8100(2) m/s^2"
[camera]
metres_per_pixel = "2.980(5) um"
exposure = "20 ms"
[field]
source = "list"
list = [["0 s", "0 V"], ["2 s", "260 V"], ["4.4 s", "0 V"]]
"""


def made_bench(folder: Path, *, text: str = BENCH) -> Path:
    """Write a bench file in a folder, whose name is the bench's."""
    folder.mkdir(parents=True, exist_ok=True)
    file = folder / "bench.toml"
    file.write_text(text, encoding="utf-8")
    return file


def made_result(
    folder: Path,
    bench_file: Path,
    rng: np.random.Generator,
    *,
    droplets: int = 20,
    factor: float = 1.0,
    own: tuple[float, float] = (0.05, 0.15),
    largest: int = 12,
    steps: int = 0,
    shared: float = 0.012,
    rejected: int = 0,
    air_std: float = 0.0,
) -> Result:
    """Write a result folder; measured charge = factor x number x e + noise, `own` in units of e."""
    bench = load_bench(bench_file)
    number = rng.integers(1, largest + 1, droplets) * rng.choice([-1, 1], droplets)
    std = rng.uniform(*own, droplets)
    charge = (factor * number + std * rng.normal(size=droplets)) * ELEMENTARY_CHARGE
    table = pd.DataFrame({column.name: [np.nan] * droplets for column in DROPLETS})
    table["droplet"] = np.arange(droplets)
    table["verdict"] = ["reject"] * rejected + ["keep"] * (droplets - rejected)
    table["reasons"] = ""
    table["fall_speed_m_s"] = 4e-5
    table["radius_m"], table["radius_std_m"] = 6e-7, 2e-9
    table["charge_c"], table["charge_own_std_c"] = charge, std * ELEMENTARY_CHARGE
    table["charge_shared_std_c"] = shared * np.abs(charge)
    table["charge_std_c"] = np.hypot(table["charge_own_std_c"], table["charge_shared_std_c"])
    kind = {c.name: {"text": "string", "int": "Int64"}.get(c.kind, "float64") for c in DROPLETS}
    changes = pd.DataFrame({column.name: [np.nan] * steps for column in CHANGES})
    if steps:
        step_std = 0.08 * ELEMENTARY_CHARGE
        jump = rng.choice([-2, -1, 1, 2], steps)
        seen = (factor * jump + 0.08 * rng.normal(size=steps)) * ELEMENTARY_CHARGE
        changes["droplet"], changes["kind"] = np.arange(rejected, rejected + steps), "charge_step"
        changes["before_c"] = charge[rejected : rejected + steps]
        changes["after_c"] = changes["before_c"] + seen
        changes["statistic"], changes["threshold"] = (seen / step_std) ** 2, 18.0
    recording = {
        "file": folder.stem, "sha256": hashlib.sha256(rng.bytes(16)).hexdigest(), "bench": bench_json(bench, folder),
        "scale": scale_to_json(bench.scale), "field": {"segments": []},
        "air_current": {"down_std_m_s": air_std},
    }  # fmt: skip
    empty = [pd.DataFrame({column.name: [] for column in columns}) for columns in (TRACKS, SEGMENTS)]
    changes = changes.astype({c.name: "string" if c.kind == "text" else "float64" for c in CHANGES})
    changes = changes.astype({"droplet": "Int64"})
    return write_result(Result(None, *empty, table.astype(kind), changes, recording), folder)
