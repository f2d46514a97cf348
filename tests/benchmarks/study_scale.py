"""Scale of simulated reference pictures over the whole range: errors, counts, pulls and times.

    python tests/benchmarks/study_scale.py [pictures] [first seed]

writes tests/benchmarks/scale.md. Every picture is drawn from `reference_pictures.random_pattern`: lines, grids and dots,
pitches from 6 px to a third of the picture, any rotation, bright and dark, 8 to 16 bits, grey and colour, uneven light,
dust, droplets, missing and false lines, lines of two lengths, a part of the picture, lenses.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np

sys.path[:0] = [str(Path(__file__).parents[1] / "helpers"), str(Path(__file__).parents[2])]

from reference_pictures import Pattern, Reference, lattice_coordinates, random_pattern, render

from calibration.errors import PatternError
from calibration.measure import scale_of
from calibration.pattern import Lattice, find_pattern
from calibration.pictures import Picture

PITCH = 1e-4  # m; only the ratio to pixels counts


def true_pitch(pattern: Pattern, truth: Reference, lattice: Lattice) -> float:
    """Pitch in px at the centre, along x for grids and dots, across the family of lines that was found for lines."""
    if lattice.pattern != "lines":
        return truth.pitch_x
    angle = np.arctan2(*lattice.fit.coefficients[0, [2, 1]])
    first = np.arctan2(*truth.gradient[0, ::-1])
    along_first = abs((angle - first + np.pi / 2) % np.pi - np.pi / 2) < np.pi / 4
    return truth.pitch_across if along_first else 1 / float(np.hypot(*truth.gradient[1]))


def miscounted(pattern: Pattern, lattice: Lattice) -> int:
    """Marks whose number differs from the truth by anything but one shift and sign common to all of their axis."""
    marks = lattice.marks
    true = lattice_coordinates(pattern, marks.x, marks.y)[:2]
    wrong = 0
    for axis in marks.axes:
        rows = marks.axis == axis
        shifts = [sign * np.rint(c[rows]) - marks.index[rows] for c in true for sign in (1, -1)]
        wrong += min(int((shift != np.median(shift)).sum()) for shift in shifts)
    return wrong


def one(seed: int) -> dict[str, object]:
    """Draw, measure and compare one picture."""
    rng = np.random.default_rng(seed)
    size = [(640, 480), (1280, 960)][int(rng.random() < 0.7)]
    pattern = random_pattern(rng, width=size[0], height=size[1])
    truth = render(pattern, rng)
    grey = truth.picture.mean(axis=2) if truth.picture.ndim == 3 else truth.picture
    picture = Picture(Path(f"{seed}.png"), grey.astype(np.float32), "", "")
    row: dict[str, object] = {"seed": seed, "kind": pattern.kind, "pitch": pattern.pitch, "pattern": pattern}
    start = time.perf_counter()
    try:
        lattice = find_pattern(picture.grey)
    except PatternError as error:
        return row | {"refused": error.problem}
    scale = scale_of(picture, lattice, pitch=PITCH).scale
    row["seconds"] = time.perf_counter() - start
    error = scale.metres_per_pixel_x * true_pitch(pattern, truth, lattice) / PITCH - 1
    std = scale.metres_per_pixel_x_std / scale.metres_per_pixel_x
    return row | {
        "error": error, "pull": error / std, "wrong": miscounted(pattern, lattice), "found": lattice.pattern,
        "terms": lattice.fit.terms, "marks": len(lattice.marks.x), "size": size,
    }  # fmt: skip


def report(rows: list[dict[str, object]]) -> str:
    """Give the table as Markdown."""
    done = [row for row in rows if "error" in row]
    text = [
        "# Scale from simulated reference pictures",
        "",
        f"{len(rows)} pictures, `python tests/benchmarks/study_scale.py`.",
        "",
    ]
    text += ["| kind | pictures | refused | wrong counts | error median | error 99 % | within 0.05 % | pull rms | pulls beyond 3 | s a picture |",
             "|---|---|---|---|---|---|---|---|---|---|"]  # fmt: skip
    for kind in ("lines", "grid", "dots", "all"):
        own = [r for r in rows if kind in (r["kind"], "all")]
        good = [r for r in done if kind in (r["kind"], "all")]
        error, pull = np.abs([r["error"] for r in good]), np.array([r["pull"] for r in good])
        text.append(
            f"| {kind} | {len(own)} | {len(own) - len(good)} | {sum(r['wrong'] > 0 for r in good)} | {100 * np.median(error):.4f} % |"
            f" {100 * np.percentile(error, 99):.3f} % | {100 * np.mean(error < 5e-4):.1f} % | {np.sqrt(np.mean(pull**2)):.2f} |"
            f" {int((np.abs(pull) > 3).sum())} | {np.median([r['seconds'] for r in good]):.2f} |"
        )
    text += [
        "",
        "Refused pictures: "
        + ("; ".join(f"{r['seed']} ({r['kind']}): {r['refused']}" for r in rows if "refused" in r) or "none")
        + ".",
    ]
    text += ["", "Errors above 0.05 %:", ""]
    text += [f"- {r['seed']}: {r['kind']}, pitch {r['pitch']:.1f} px, {r['size'][0]} x {r['size'][1]}, error {100 * r['error']:+.3f} %, "
             f"pull {r['pull']:+.1f}" for r in done if abs(r["error"]) > 5e-4] or ["none"]  # fmt: skip
    return "\n".join(text) + "\n"


def main() -> None:
    """Run the study and write its table."""
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 240
    first = int(sys.argv[2]) if len(sys.argv) > 2 else 1000
    rows = []
    for seed in range(first, first + count):
        row = one(seed)
        rows.append(row)
        odd = "refused" in row or row["wrong"] or abs(row["error"]) > 5e-4 or abs(row["pull"]) > 3
        if odd or row["found"] != row["kind"]:
            print({k: v for k, v in row.items()}, flush=True)
    table = report(rows)
    print(table)
    if len(sys.argv) < 3:
        (Path(__file__).parent / "scale.md").write_text(table, encoding="utf-8")


if __name__ == "__main__":
    main()
