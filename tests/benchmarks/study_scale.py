"""Scale of simulated reference pictures over the whole range: errors, counts, pulls and times.

    python tests/benchmarks/study_scale.py [pictures] [first seed]

writes tests/benchmarks/scale.md. Every picture is drawn from `reference_pictures.random_pattern`: lines, grids and
dots, pitches from 6 px to a third of the picture, any rotation, bright and dark, 8 to 16 bits, grey and colour, uneven
light, dust, droplets, missing and false lines, lines of two lengths, a part of the picture, lenses.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path
from typing import Any

import numpy as np

sys.path[:0] = [str(Path(__file__).parents[1] / "helpers"), str(Path(__file__).parents[2])]

from reference_pictures import Pattern, lattice_coordinates, random_pattern, render  # noqa: E402

from calibration.errors import PatternError  # noqa: E402
from calibration.measure import scale_of  # noqa: E402
from calibration.pattern import Lattice, find_pattern  # noqa: E402
from calibration.pictures import Picture  # noqa: E402

PITCH = 1e-4  # m; only the ratio to pixels counts


def true_gradient(pattern: Pattern, lattice: Lattice) -> np.ndarray:
    """Lattice coordinates per px: at the centre, or, if no lens was found, the mean over the marks."""
    centre = np.array([(pattern.width - 1) / 2]), np.array([(pattern.height - 1) / 2])
    x, y = centre if "radial" in lattice.fit.terms else (lattice.marks.x, lattice.marks.y)
    steps = [(0.5, 0.0), (0.0, 0.5)]
    columns = []
    for dx, dy in steps:
        high = lattice_coordinates(pattern, x + dx, y + dy)[:2]
        low = lattice_coordinates(pattern, x - dx, y - dy)[:2]
        columns.append([float(np.mean(up - down)) for up, down in zip(high, low, strict=True)])
    return np.array(columns).T


def true_pitch(pattern: Pattern, lattice: Lattice) -> float:
    """Pitch in px along x for grids and dots, across the family of lines that was found for lines."""
    gradient = true_gradient(pattern, lattice)
    if lattice.pattern != "lines":
        return 1 / float(np.hypot(*gradient[:, 0]))
    angle = np.arctan2(*lattice.fit.coefficients[0, [2, 1]])
    first = np.arctan2(*gradient[0, ::-1])
    family = 0 if abs((angle - first + np.pi / 2) % np.pi - np.pi / 2) < np.pi / 4 else 1
    return 1 / float(np.hypot(*gradient[family]))


def miscounted(pattern: Pattern, lattice: Lattice) -> int:
    """Marks whose number differs from the truth by anything but one shift and sign common to all of their axis."""
    marks = lattice.marks
    true = lattice_coordinates(pattern, marks.x, marks.y)[:2]
    wrong = 0
    for axis in marks.axes:
        rows = marks.axis == axis
        shifts = [sign * np.rint(c[rows]) - marks.index[rows] for c in true for sign in (1, -1)]
        # Marks at half-integer truth would round either way: cells of a grid that were taken for dots.
        shifts += [sign * np.floor(c[rows]) - marks.index[rows] for c in true for sign in (1, -1)]
        wrong += min(int((np.abs(shift - np.median(shift)) > 0.5).sum()) for shift in shifts)
    return wrong


def one(seed: int) -> dict[str, Any]:
    """Draw, measure and compare one picture."""
    rng = np.random.default_rng(seed)
    size = [(640, 480), (1280, 960)][int(rng.random() < 0.5)]
    pattern = random_pattern(rng, width=size[0], height=size[1])
    truth = render(pattern, rng)
    grey = truth.picture.mean(axis=2) if truth.picture.ndim == 3 else truth.picture
    picture = Picture(Path(f"{seed}.png"), grey.astype(np.float32), "", "")
    row: dict[str, Any] = {
        "seed": seed,
        "kind": pattern.kind,
        "pitch": pattern.pitch,
        "size": size,
        "pattern": pattern,
    }
    start = time.process_time()
    try:
        lattice = find_pattern(picture.grey)
    except PatternError as error:
        return row | {"refused": error.problem}
    scale = scale_of(picture, lattice, pitch=PITCH).scale
    row["seconds"] = time.process_time() - start
    error = scale.metres_per_pixel_x * true_pitch(pattern, lattice) / PITCH - 1
    std = scale.metres_per_pixel_x_std / scale.metres_per_pixel_x
    return row | {
        "error": error, "pull": error / std, "wrong": miscounted(pattern, lattice), "found": lattice.pattern,
        "terms": lattice.fit.terms, "marks": len(lattice.marks.x),
    }  # fmt: skip


HEAD = (
    "kind", "pictures", "refused", "wrong counts", "error, median", "error, 99 %", "within 0.05 %", "pulls, rms",
    "pulls beyond 3", "CPU s for 1280 x 960, most",
)  # fmt: skip


def table_row(kind: str, rows: list[dict[str, Any]]) -> tuple[str, ...]:
    """Give the figures of one kind of pattern."""
    good = [r for r in rows if "error" in r]
    error, pull = np.abs([r["error"] for r in good]), np.array([r["pull"] for r in good])
    large = [r["seconds"] for r in good if r["size"][0] == 1280]
    return (
        kind, str(len(rows)), str(len(rows) - len(good)), str(sum(r["wrong"] > 0 for r in good)),
        f"{100 * np.median(error):.4f} %", f"{100 * np.percentile(error, 99):.3f} %",
        f"{100 * np.mean(error < 5e-4):.1f} %", f"{np.sqrt(np.mean(pull**2)):.2f}",
        str(int((np.abs(pull) > 3).sum())), f"{max(large, default=0.0):.2f}",
    )  # fmt: skip


def report(rows: list[dict[str, Any]]) -> str:
    """Give the table as Markdown."""
    lines = ["# Scale from simulated reference pictures", ""]
    lines += [
        f"{len(rows)} pictures, half 640 x 480, half 1280 x 960; `python tests/benchmarks/study_scale.py`.",
        "",
    ]
    lines += [
        "Error and pull are against the pitch at the picture's centre where a lens was found, else against its mean",
        "over the marks; the pattern's tolerance is left out. Refused pictures are in no figure but their own column.",
        "",
    ]  # fmt: skip
    lines += ["| " + " | ".join(HEAD) + " |", "|" + "---|" * len(HEAD)]
    for kind in ("lines", "grid", "dots"):
        lines.append("| " + " | ".join(table_row(kind, [r for r in rows if r["kind"] == kind])) + " |")
    lines += ["| " + " | ".join(table_row("all", rows)) + " |", "", "Refused:", ""]
    lines += [f"- {r['seed']}, {r['kind']}: {r['refused']}" for r in rows if "refused" in r] or ["- none"]
    lines += ["", "Errors above 0.05 %:", ""]
    lines += [
        f"- {r['seed']}, {r['kind']}, pitch {r['pitch']:.1f} px in {r['size'][0]} x {r['size'][1]}: "
        f"{100 * r['error']:+.3f} %, pull {r['pull']:+.1f}"
        for r in rows
        if abs(r.get("error", 0.0)) > 5e-4
    ] or ["- none"]
    return "\n".join(lines) + "\n"


def main() -> None:
    """Run the study and write its table."""
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 240
    first = int(sys.argv[2]) if len(sys.argv) > 2 else 1000
    rows = []
    for seed in range(first, first + count):
        row = one(seed)
        rows.append(row)
        if "refused" in row or row["wrong"] or abs(row["error"]) > 5e-4 or abs(row["pull"]) > 3:
            print(row, flush=True)
    table = report(rows)
    print(table)
    if len(sys.argv) < 3:
        (Path(__file__).parent / "scale.md").write_text(table, encoding="utf-8")


if __name__ == "__main__":
    main()
