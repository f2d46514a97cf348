"""Study of charge unit, charge numbers and planned precision: many seeded sets, written as a table beside this file.

Run it from the root of the project, about six minutes on one core::

    OMP_NUM_THREADS=1 python tests/benchmarks/study_quanta.py

``--sets 0.2`` makes a fifth of the sets.
"""

from __future__ import annotations

import argparse
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parent.parent / "helpers"))

from charge_sets import Setting, changed_droplets, count_numbers, count_units, units_of_changed
from diffusing_droplets import CONDITIONS, PIXEL, Plan, record

from physics.motion import droplet_posterior, input_responses
from physics.precision import Camera, expected_precision, track_information
from physics.quanta import (
    ELEMENTARY_CHARGE,
    charge_sample,
    charge_unit,
    droplets_to_resolve,
    pooled_charge_unit,
)

OUT = Path(__file__).with_suffix("").with_name("quanta.md")
E = ELEMENTARY_CHARGE

RESOLVED = (
    (Setting(20, (0.03, 0.08), outliers=0.07), 400), (Setting(30, 0.1), 400), (Setting(30, 0.1, outliers=0.07), 400),
    (Setting(50, 0.15, outliers=0.07), 200), (Setting(100, 0.15), 200), (Setting(100, 0.15, outliers=0.07), 200),
    (Setting(60, (0.03, 0.3)), 300), (Setting(60, (0.03, 0.3), outliers=0.07), 300), (Setting(100, 0.2), 150),
    (Setting(500, 0.25), 40), (Setting(60, 0.1, largest=6), 200), (Setting(30, 0.1, stated=0.6), 200),
    (Setting(30, 0.1, stated=1.3), 200), (Setting(100, 0.06, rel_std=0.03), 100),
    (Setting(15, (0.03, 0.08), outliers=0.07), 400), (Setting(20, (0.03, 0.3), outliers=0.07), 400),
)  # fmt: skip
REFUSED = (
    (Setting(10, 0.05), 1000), (Setting(10, (0.03, 0.3)), 1000), (Setting(20, 0.2), 1000), (Setting(100, 0.3), 200),
    (Setting(20, 0.1, smooth=True), 1500), (Setting(50, 0.1, smooth=True), 800),
    (Setting(15, (0.02, 0.1), smooth=True), 1500), (Setting(15, 0.15, largest=6), 1500),
)  # fmt: skip
NUMBERS = (
    (10, (0.05, 0.2)),
    (30, (0.05, 0.2)),
    (100, (0.05, 0.2)),
    (1, (0.05, 0.2)),
    (5, (0.05, 0.2)),
    (30, (0.25, 0.6)),
)
TRACKS = ((3e-7, 2), (4e-7, 3), (5e-7, 5), (7e-7, -6), (1e-6, 8), (1.5e-6, 12))


def words(setting: Setting) -> list[str]:
    """First cells of a row."""
    std = f"{setting.std:g}" if np.isscalar(setting.std) else f"{setting.std[0]:g} to {setting.std[1]:g}"
    extra = [f"{100 * setting.outliers:.0f} % outliers"] if setting.outliers else []
    extra += ["smooth"] if setting.smooth else []
    extra += [f"std stated x {setting.stated:g}"] if setting.stated != 1 else []
    extra += [f"radius part {100 * setting.rel_std:g} %"] if setting.rel_std else []
    return [str(setting.droplets), std, f"1 to {setting.largest}", ", ".join(extra)]


def table(title: str, head: list[str], rows: list[list[str]]) -> str:
    """One table in Markdown."""
    lines = [f"## {title}", "", "| " + " | ".join(head) + " |", "|" + "---|" * len(head)]
    return "\n".join([*lines, *("| " + " | ".join(plain(row)) + " |" for row in rows)]) + "\n"


def unit_rows(settings, share: float, seed: int) -> list[list[str]]:
    """Charge unit of many sets of each kind."""
    rows = []
    for i, (setting, sets) in enumerate(settings):
        count = max(10, round(share * sets))
        found = count_units(setting, count, np.random.default_rng([seed, i]), per_tooth=setting.rel_std > 0)
        rows.append([*words(setting), str(count), f"{found.best_right:.3f}", f"{found.resolved:.3f}",
                     str(found.wrong), f"{found.cover_68:.2f}", f"{found.cover_95:.3f}",
                     f"{100 * found.error_95:.2f}", f"{found.bias:+.2f}", f"{found.needed:.0f}"])  # fmt: skip
    return rows


def number_rows(share: float) -> list[list[str]]:
    """Charge numbers with a common error of 2 %."""
    rows = []
    for i, (droplets, std) in enumerate(NUMBERS):
        for treatment in ("joint", "apart", "ignored"):
            sets = max(5, round(share * 6000 / droplets))
            found = count_numbers(Setting(droplets, std), sets, np.random.default_rng([3, i]), shared=0.02,
                                  treatment=treatment)  # fmt: skip
            rows.append([str(droplets), f"{std[0]:g} to {std[1]:g}", treatment, str(found.droplets),
                         f"{found.right:.4f}", f"{found.mean_probability:.4f}", f"{found.claimed:.3f}",
                         f"{100 * found.wrong_of_claimed:.2f}"])  # fmt: skip
    return rows


def changed_rows(share: float) -> list[list[str]]:
    """Droplets that changed their charge, by three treatments."""
    rows = []
    for std, rel in ((0.05, 0.0), (0.05, 0.03), (0.05, 0.06), (0.1, 0.03), (0.1, 0.06), (0.15, 0.03)):
        draw, sets = np.random.default_rng([4, int(100 * std), int(100 * rel)]), max(5, round(60 * share))
        counts = {"pairs": 0, "charge and step": 0, "two charges": 0}
        wrong = 0
        for _ in range(sets):
            pair, cov = changed_droplets(draw, 30, std=std, rel_std=rel)
            for name, found in units_of_changed(pair, cov, rel).items():
                counts[name] += found.resolved
                wrong += found.resolved and abs(found.over_e - 1) > 0.05
        rows.append(
            [
                f"{std:g}",
                f"{100 * rel:g}",
                str(sets),
                *(f"{n / sets:.2f}" for n in counts.values()),
                str(wrong),
            ]
        )
    return rows


def bench_rows(share: float) -> list[list[str]]:
    """Three benches, each with its own error of scale, pooled and lumped."""
    rows = []
    for droplets, spread in ((15, 0.01), (40, 0.01), (15, 0.02), (40, 0.02)):
        draw, sets = np.random.default_rng([5, droplets, int(1000 * spread)]), max(5, round(40 * share))
        pulls, lumped, resolved = [], [], 0
        for _ in range(sets):
            factors = 1 + spread * draw.standard_normal(3)
            made = [Setting(droplets, (0.05, 0.2), largest=15).draw(draw) for _ in factors]
            made = [(k * q, s) for k, (q, s) in zip(factors, made, strict=True)]
            found = pooled_charge_unit([charge_sample(q, s, shared_rel_std=spread) for q, s in made])
            one = charge_unit(*(np.concatenate(column) for column in zip(*made, strict=True)))
            resolved += found.resolved
            pulls += [(found.over_e - 1) / found.over_e_std] if found.resolved else []
            lumped += [(one.over_e - 1) / one.over_e_std] if one.resolved else []
        rows.append([str(droplets), f"{100 * spread:g}", str(sets), f"{resolved / sets:.2f}", f"{rms(pulls):.2f}",
                     f"{len(lumped) / sets:.2f}", f"{rms(lumped):.2f}"])  # fmt: skip
    return rows


def plain(row: list[str]) -> list[str]:
    """Empty cells where there is no number."""
    return ["" if cell.strip("+") == "nan" else cell for cell in row]


def rms(values: list[float]) -> float:
    """Root mean square; nan for none."""
    return float(np.sqrt(np.mean(np.square(values)))) if values else float("nan")


def plan_rows(share: float) -> list[list[str]]:
    """Planned precision against the spread of simulated tracks."""
    rows, responses = [], input_responses(CONDITIONS)
    for i, (radius, number) in enumerate(TRACKS):
        for plan in (Plan(missing=0.0), Plan(missing=0.0, seconds=60.0, field=2e4)):
            count = int(np.ceil(plan.seconds / plan.segment)) + 1
            volts = plan.field * CONDITIONS.plate_gap * np.array([plan.pattern[k % 4] for k in range(count)])
            knots = np.repeat(plan.segment * np.arange(count + 1), 2)[1:-1], np.repeat(volts, 2)
            camera = Camera(plan.frame_rate, plan.exposure, plan.noise_px * PIXEL)
            info = track_information(radius, plan.seconds, knots, camera=camera, conditions=CONDITIONS)
            expected = expected_precision(info, number * E, conditions=CONDITIONS)
            draw, tracks = np.random.default_rng([6, i]), max(30, round(600 * share))
            found = [droplet_posterior(record(draw, radius, number, plan=plan).steps(), CONDITIONS, responses=responses)
                     for _ in range(tracks)]  # fmt: skip
            log_radius, charge = np.log([f.radius for f in found]), np.array([f.charge[0] for f in found])
            rows.append([f"{radius * 1e6:g}", str(number), f"{plan.seconds:g}", f"{plan.field:g}", str(tracks),
                         f"{100 * expected.log_radius_std:.2f}", f"{np.std(log_radius) / expected.log_radius_std:.3f}",
                         f"{expected.charge_std / E:.3f}", f"{np.std(charge) / expected.charge_std:.3f}"])  # fmt: skip
    return rows


def speed_rows() -> list[list[str]]:
    """Processor time of one set."""
    rows = []
    for droplets in (10, 20, 100, 500):
        charge, std = replace(Setting(droplets, 0.1)).draw(np.random.default_rng(7))
        times = []
        for _ in range(5):
            start = time.process_time()
            charge_unit(charge, std)
            times.append(time.process_time() - start)
        rows.append([str(droplets), f"{1e3 * min(times):.0f}"])
    return rows


def need_rows() -> list[list[str]]:
    """Droplets that a resolved unit needs, as predicted."""
    number = np.arange(1, 21)
    return [
        [f"{std:g}", str(droplets_to_resolve(number, np.full(20, std)))]
        for std in (0.05, 0.1, 0.15, 0.2, 0.25, 0.3)
    ]


def main() -> None:
    """Run all parts and write the table."""
    parser = argparse.ArgumentParser(
        description="Study of charge unit, charge numbers and planned precision."
    )
    parser.add_argument("--sets", type=float, default=1.0, help="share of the full number of sets")
    share = parser.parse_args().sets
    start = time.process_time()
    head = ["droplets", "std / e", "numbers", "remark", "sets", "best right", "resolved", "wrong", "68 %", "95 %",
            "error 95 % / %", "bias / std", "told to need"]  # fmt: skip
    parts = [
        "# Charge unit, charge numbers and planned precision\n\nWritten by `study_quanta.py`; all sets are seeded. "
        "Standard deviations are those of single charges. *wrong* counts resolved sets that are more than 5 % off e.\n",
        table("Charge unit where it can be resolved", head, unit_rows(RESOLVED, share, 1)),
        table("Charge unit where it must be refused", head, unit_rows(REFUSED, share, 2)),
        table("Charge numbers with a common error of 2 %, numbers 1 to 20",
              ["droplets", "std / e", "common factor", "all", "right", "mean probability", "claimed (P > 0.95)",
               "wrong of claimed / %"], number_rows(share)),
        table("Thirty droplets that changed their charge by 1 to 3 e",
              ["std / e", "radius error / %", "sets", "pairs", "charge and step", "two charges", "wrong"],
              changed_rows(share)),
        table("Three benches, each with its own factor",
              ["droplets each", "spread / %", "sets", "pooled resolved", "rms pull", "lumped resolved",
               "rms pull lumped"],
              bench_rows(share)),
        table("Planned precision against simulated tracks",
              ["radius / um", "number", "seconds", "field / V/m", "tracks", "ln r planned / %", "spread over planned",
               "charge planned / e", "spread over planned"], plan_rows(share)),
        table("Droplets needed, as predicted, numbers 1 to 20", ["std / e", "droplets"], need_rows()),
        table("Processor time of a charge unit", ["droplets", "ms"], speed_rows()),
    ]  # fmt: skip
    parts.append(f"All of it took {time.process_time() - start:.0f} s of processor time.\n")
    OUT.write_text("\n".join(parts), encoding="utf-8")


if __name__ == "__main__":
    main()
