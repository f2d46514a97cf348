"""A plan as a table, as plain values and as a picture."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from physics.droplet import ELEMENTARY_CHARGE
from tracker.keeping.store import replace_file
from tracker.planning import Plan, PlanRow
from tracker.showing.report import CAUTIONS

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from tracker.records import FloatArray

_HEAD = (
    ("radius", "um"), ("number", ""), ("fall", "um/s"), ("drive", "um/s"), ("in view", "s"), ("radius own", "%"),
    ("shared", "%"), ("charge own", "e"), ("shared", "e"), ("certain", "%"), ("limited by", ""),
)  # fmt: skip
_STYLES = ("o-", "s--", "D-.", "^:", "v-", "P--", "X-.", "*:")


def plan_table(plan: Plan) -> str:
    """Give the plan as text.

    Parameters
    ----------
    plan : Plan
        As worked out.

    Returns
    -------
    text : str
        Rows, summary, best setting, warnings and cautions; standard uncertainties.
    """
    cells = [[name for name, _ in _HEAD], [unit for _, unit in _HEAD], *(_cells(row) for row in plan.rows)]
    widths = [max(len(line[i]) for line in cells) for i in range(len(_HEAD))]
    lines = ["  ".join(cell.rjust(w) for cell, w in zip(line[:-1], widths, strict=False)) + "  " + line[-1]
             for line in cells]  # fmt: skip
    return "\n".join([*lines, "", *summary(plan), *(f"note: {w}" for w in plan.warnings), "", "Cautions",
                      *(f"- {caution}" for caution in CAUTIONS)])  # fmt: skip


def _cells(row: PlanRow) -> list[str]:
    """One row as text."""

    def number(value: float, digits: str) -> str:
        return format(value, digits) if np.isfinite(value) else "-"

    return [
        f"{row.radius * 1e6:.2f}", f"{row.number:d}", f"{row.fall_speed * 1e6:.1f}", f"{row.drive * 1e6:.1f}",
        f"{row.seconds:.1f}", number(100 * row.radius_own_std, ".2f"), number(100 * row.radius_shared_std, ".2f"),
        number(row.charge_own_std / ELEMENTARY_CHARGE, ".3f"), number(row.charge_shared_std / ELEMENTARY_CHARGE, ".3f"),
        f"{100 * row.certain:.0f}", row.limit,
    ]  # fmt: skip


def summary(plan: Plan) -> list[str]:
    """Say what the plan comes to.

    Parameters
    ----------
    plan : Plan
        As worked out.

    Returns
    -------
    lines : list of str
        Certain numbers, droplets for a charge unit, best voltage and plateau.
    """
    if np.isnan(plan.typical):
        limits = "; ".join(sorted({row.limit for row in plan.rows}))
        return [f"None of these droplets gives a charge with this plan ({limits}).", _best_words(plan)]
    need, planned = plan.droplets_to_resolve, plan.planned
    words = "more than 20000 droplets" if need is None else f"about {need} droplets"
    shared = [
        row.charge_shared_std / abs(row.number) / ELEMENTARY_CHARGE for row in plan.rows if row.certain > 0
    ]
    lines = [
        f"Numbers certain (probability above 0.95) for {100 * plan.certain:.0f} % of these droplets, "
        f"{planned.droplets} of them measured together.",
        f"Charge unit resolved by {words} of this mixture (95 of 100 sets).",
    ]
    if shared:
        percent = 100 * float(np.median(shared))
        lines.append(
            f"Shared inputs leave the charge unit uncertain by {percent:.2f} %, however many droplets."
        )
    return [*lines, f"Typical own uncertainty of a charge {plan.typical:.3f} e. {_best_words(plan)}"]


def _best_words(plan: Plan) -> str:
    """Say what the search found best, and whether that is an end of what was tried."""
    search = plan.search
    low, high = search.voltages[0], search.voltages[-1]
    tried = (
        f"{low:.0f} to {high:.0f} V and plateaus of {search.plateaus[0]:.2g} to {search.plateaus[-1]:.2g} s"
    )
    if np.isnan(search.best):
        return f"Nothing that was tried gives a charge: {tried}."
    at_voltage = _end_word(search.voltage, search.voltages, ("the lowest tried", "the highest tried"))
    at_plateau = _end_word(search.plateau, search.plateaus, ("the shortest tried", "the longest tried"))
    return (f"At best {search.best:.3f} e, at about {search.voltage:.0f} V{at_voltage} and plateaus of "
            f"{search.plateau:.1f} s{at_plateau}; tried were {tried}.")  # fmt: skip


def _end_word(value: float, tried: FloatArray, words: tuple[str, str]) -> str:
    """Word in brackets for a value at an end of what was tried; empty within."""
    if value in (tried[0], tried[-1]):
        return f" ({words[int(value == tried[-1])]})"
    return ""


def plan_json(plan: Plan) -> dict[str, Any]:
    """Give the plan as plain values, SI; nan and infinite values are left to the writer.

    Parameters
    ----------
    plan : Plan
        As worked out.

    Returns
    -------
    values : dict
        With units in the names.
    """
    rows = [
        {"radius_m": r.radius, "charge_number": r.number, "fall_speed_m_s": r.fall_speed, "drive_m_s": r.drive,
         "seconds_in_view_s": r.seconds, "radius_own_rel_std": r.radius_own_std,
         "radius_shared_rel_std": r.radius_shared_std,
         "charge_own_std_c": r.charge_own_std, "charge_shared_std_c": r.charge_shared_std, "certain": r.certain,
         "limit": r.limit}
        for r in plan.rows
    ]  # fmt: skip
    return {
        "planned": asdict(plan.planned), "rows": rows, "certain": plan.certain,
        "typical_charge_own_std_c": plan.typical * ELEMENTARY_CHARGE, "droplets_to_resolve": plan.droplets_to_resolve,
        "best_voltage_v": plan.search.voltage, "best_plateau_s": plan.search.plateau,
        "best_typical_charge_own_std_c": plan.search.best * ELEMENTARY_CHARGE, "warnings": list(plan.warnings),
        "cautions": list(CAUTIONS),
    }  # fmt: skip


def draw(plan: Plan, path: Path) -> None:
    """Draw the plan: uncertainty of charge and radius against the radius, and the search over voltage and plateau.

    Parameters
    ----------
    plan : Plan
        As worked out.
    path : Path
        Picture file, such as ``plan.png``; it is replaced.
    """
    from matplotlib.figure import Figure

    figure = Figure(figsize=(11, 8.5), layout="constrained")
    axes = figure.subplots(2, 2)
    _draw_charge(axes[0, 0], plan)
    _draw_radius(axes[0, 1], plan)
    _draw_search(axes[1, 0], plan)
    axes[1, 1].axis("off")
    text = "\n".join(_wrapped([*summary(plan), *plan.warnings, *CAUTIONS]))
    axes[1, 1].text(0, 1, text, va="top", fontsize="x-small", transform=axes[1, 1].transAxes)
    replace_file(path, lambda part: figure.savefig(part, dpi=120))


def _wrapped(lines: list[str]) -> list[str]:
    """Lines broken to the width of the picture's text."""
    import textwrap

    return [part for line in lines for part in textwrap.wrap(line, 68, subsequent_indent="   ")]


def _plain_ticks(axes: Axes, along: str, values: tuple[float, ...]) -> None:
    """Ticks of a logarithmic axis as plain numbers, as far as they are in view."""
    axis = axes.xaxis if along == "x" else axes.yaxis
    low, high = axes.get_xlim() if along == "x" else axes.get_ylim()
    shown = [value for value in values if low <= value <= high]
    axis.set_ticks(shown, [f"{value:g}" for value in shown])
    axis.set_ticks([], minor=True)


def _draw_charge(axes: Axes, plan: Plan) -> None:
    """Own uncertainty of the charge against the radius, a line for each number."""
    for k, number in enumerate(plan.planned.numbers):
        rows = [row for row in plan.rows if row.number == number]
        axes.plot([r.radius * 1e6 for r in rows], [r.charge_own_std / ELEMENTARY_CHARGE for r in rows],
                  _STYLES[k % len(_STYLES)], color="k", mfc="w", label=f"number {number}")  # fmt: skip
    axes.axhline(0.2, color="0.5", lw=0.8, label="below: most numbers certain")
    axes.set(
        title="Charge: own standard uncertainty", xlabel="radius / um", ylabel="uncertainty / e", yscale="log"
    )
    _plain_ticks(axes, "y", (0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1, 2, 5, 10))
    axes.legend(fontsize="small")


def _draw_radius(axes: Axes, plan: Plan) -> None:
    """Own and shared uncertainty of the radius against the radius, for the first number."""
    rows = [row for row in plan.rows if row.number == plan.planned.numbers[0]]
    radius = [row.radius * 1e6 for row in rows]
    axes.plot(radius, [100 * row.radius_own_std for row in rows], "o-", color="k", mfc="w", label="own")
    axes.plot(
        radius, [100 * row.radius_shared_std for row in rows], "s--", color="k", mfc="w", label="shared"
    )
    axes.set(title=f"Radius: standard uncertainty (number {plan.planned.numbers[0]})", xlabel="radius / um",
             ylabel="uncertainty / %", yscale="log")  # fmt: skip
    _plain_ticks(axes, "y", (0.05, 0.1, 0.2, 0.5, 1, 2, 5, 10, 20))
    axes.legend(fontsize="small")


def _around(values: list[float]) -> tuple[float, float]:
    """Limits of a logarithmic axis that leave room for a marker at either end."""
    room = (max(values) / min(values)) ** 0.05
    return min(values) / room, max(values) * room


def _draw_search(axes: Axes, plan: Plan) -> None:
    """Typical uncertainty over voltage and plateau, with the plan and the best."""
    search, planned = plan.search, plan.planned
    if np.nanmin(search.typical, initial=np.inf) < np.nanmax(search.typical, initial=-np.inf):
        lines = axes.contour(search.voltages, search.plateaus, search.typical, 10, colors="0.4")
        axes.clabel(lines, fontsize="small")
    axes.plot(planned.voltage, planned.plateau, "x", color="k", ms=9, label="planned")
    axes.plot(search.voltage, search.plateau, "o", color="k", ms=9, mfc="w", label="best")
    axes.set(title="Typical own uncertainty of a charge / e", xlabel="voltage / V", ylabel="plateau / s", xscale="log",
             yscale="log", xlim=_around([*search.voltages, planned.voltage]),
             ylim=_around([*search.plateaus, planned.plateau]))  # fmt: skip
    _plain_ticks(axes, "x", (10, 20, 50, 100, 200, 500, 1000, 2000, 5000))
    _plain_ticks(axes, "y", (0.1, 0.2, 0.5, 1, 2, 5, 10, 20))
    axes.legend(fontsize="small")
