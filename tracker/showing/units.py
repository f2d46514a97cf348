"""Pictures of a charge unit: charges over it with the comb, the statistic against the unit, benches over e.

Markers, line styles and text carry the meaning; colour is never needed.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from physics.quanta import ELEMENTARY_CHARGE, ChargeUnit
from physics.resolution import LOG_RATIO_NEEDED

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

MARKERS = "osD^v<>P*X"
HIGHEST_NUMBER = 30  # charges above so many units are left out of the picture, and counted in it


@dataclass(frozen=True, slots=True)
class ChargeGroup:
    """Charges that are drawn with one marker, those of one bench."""

    label: str
    charge: NDArray[np.float64]  # (N,) C
    own_std: NDArray[np.float64]  # (N,) C


@dataclass(frozen=True, slots=True)
class UnitRatio:
    """Charge unit of one bench over e."""

    label: str
    ratio: float  # nan: not resolved
    own_std: float
    shared_std: float


def draw_charges(axes: Axes, groups: Sequence[ChargeGroup], unit: ChargeUnit) -> None:
    """Draw the charges over the unit, ordered by size, with their own uncertainties on the teeth of the comb.

    Parameters
    ----------
    axes : Axes
        Of matplotlib; drawn into.
    groups : sequence of ChargeGroup
        One marker each.
    unit : ChargeUnit
        If it is not resolved the charges are drawn over e, and the title says so.
    """
    spacing = unit.unit if unit.resolved else ELEMENTARY_CHARGE
    rows = [(abs(q) / spacing, s / spacing, g) for g, x in enumerate(groups)
            for q, s in zip(x.charge, x.own_std, strict=True)]  # fmt: skip
    shown = sorted(row for row in rows if row[0] <= HIGHEST_NUMBER)
    top = int(np.ceil(max((row[0] for row in shown), default=1.0) + 0.5))
    for tooth in range(top + 1):
        axes.axhline(tooth, color="0.8", lw=0.8, zorder=0)
    place = np.arange(1, len(shown) + 1)
    for g, group in enumerate(groups):
        mine = [i for i, row in enumerate(shown) if row[2] == g]
        values, stds = [shown[i][0] for i in mine], [shown[i][1] for i in mine]
        axes.errorbar(place[mine], values, stds, fmt=MARKERS[g % len(MARKERS)], ms=3.5, lw=0.8, mfc="none",
                      label=label_of(group.label))  # fmt: skip
    title = "Charges over the unit" if unit.resolved else "Charges over e: unit not resolved"
    hidden = len(rows) - len(shown)
    note = f" ({hidden} above {HIGHEST_NUMBER} left out)" if hidden else ""
    axes.set(title=title + note, xlabel="droplet, ordered by charge", ylim=(0, top),
             ylabel="charge / unit" if unit.resolved else "charge / e")  # fmt: skip
    if top <= 2 * HIGHEST_NUMBER // 3:
        axes.set_yticks(range(0, top + 1, 1 if top <= 12 else 2))
    if len(groups) > 1:
        axes.legend(fontsize="small")


def draw_distances(axes: Axes, groups: Sequence[ChargeGroup], unit: ChargeUnit) -> None:
    """Draw each charge's distance from the nearest tooth against the charge; a wrong scale shows as a slope.

    Parameters
    ----------
    axes : Axes
        Of matplotlib; drawn into.
    groups : sequence of ChargeGroup
        One marker each.
    unit : ChargeUnit
        If it is not resolved the teeth are those of e.
    """
    spacing = unit.unit if unit.resolved else ELEMENTARY_CHARGE
    for g, group in enumerate(groups):
        value, std = np.abs(group.charge) / spacing, group.own_std / spacing
        shown = value <= HIGHEST_NUMBER
        axes.errorbar(value[shown], (value - np.rint(value))[shown], std[shown], fmt=MARKERS[g % len(MARKERS)],
                      ms=3.5, lw=0.6, mfc="none")  # fmt: skip
    axes.axhline(0, color="k", lw=0.8)
    name = "unit" if unit.resolved else "e"
    axes.set(title="Distance from the nearest tooth of the comb; bars: own uncertainty", ylim=(-0.6, 0.6),
             xlabel=f"charge / {name}", ylabel=f"distance / {name}")  # fmt: skip


def draw_statistic(axes: Axes, unit: ChargeUnit) -> None:
    """Draw the log likelihood ratio of the comb against its spacing, with the threshold, the best and its rivals.

    Parameters
    ----------
    axes : Axes
        Of matplotlib; drawn into.
    unit : ChargeUnit
        With its curve.
    """
    low = min(0.0, -0.15 * max(unit.log_ratio, LOG_RATIO_NEEDED))
    high = 1.2 * max(unit.log_ratio, LOG_RATIO_NEEDED)
    units = np.asarray(unit.curve_units) / ELEMENTARY_CHARGE
    axes.plot(units, np.maximum(unit.curve_log_ratio, 2 * low), "k-", lw=0.8)
    axes.axhline(LOG_RATIO_NEEDED, color="k", ls="--", lw=0.8)
    axes.annotate(
        "needed", (1, LOG_RATIO_NEEDED), xycoords=("axes fraction", "data"), ha="right", va="bottom"
    )
    if np.isfinite(unit.best):
        word = "unit" if unit.resolved else "best, not resolved"
        axes.plot(unit.best / ELEMENTARY_CHARGE, unit.log_ratio, "v", color="k", ms=7, mfc="none", label=word)
    inside = [(u / ELEMENTARY_CHARGE, value) for u, value in unit.rivals if value > low]
    if inside:
        axes.plot(*zip(*inside, strict=True), "x", color="k", ms=6, label="rival")
    axes.set(title="Comb against a smooth distribution", xlabel="spacing of the comb / e", xscale="log",
             ylabel="log likelihood ratio / nat", ylim=(low, high))  # fmt: skip
    ticks = [tick for tick in (0.2, 0.5, 1, 2, 4) if units.size and units.min() <= tick <= units.max()]
    axes.set_xticks(ticks, [f"{tick:g}" for tick in ticks])
    axes.minorticks_off()
    if np.isfinite(unit.best):
        axes.legend(fontsize="small", loc="upper left")


def draw_ratios(axes: Axes, ratios: Sequence[UnitRatio]) -> None:
    """Draw each bench's charge unit over e; thick bar: own uncertainty, thin bar: own and shared.

    Parameters
    ----------
    axes : Axes
        Of matplotlib; drawn into.
    ratios : sequence of UnitRatio
        From top to bottom.
    """
    axes.axvline(1.0, color="k", lw=0.8, ls="--")
    for i, row in enumerate(ratios):
        if not np.isfinite(row.ratio):
            axes.annotate("not resolved", (1.0, i), ha="center", va="bottom")
            continue
        axes.errorbar(row.ratio, i, xerr=np.hypot(row.own_std, row.shared_std), color="k", lw=0.8, capsize=3)
        axes.errorbar(row.ratio, i, xerr=row.own_std, fmt=MARKERS[i % len(MARKERS)], color="k", lw=3, mfc="w")
    axes.set_yticks(range(len(ratios)), [label_of(row.label) for row in ratios])
    axes.set(title="Charge unit over e", xlabel="charge unit / e", ylim=(len(ratios) - 0.5, -0.5))


def unit_figure(unit: ChargeUnit, groups: Sequence[ChargeGroup], ratios: Sequence[UnitRatio] = ()) -> Figure:
    """Draw all there is to see of a charge unit.

    Parameters
    ----------
    unit : ChargeUnit
        Of all charges.
    groups : sequence of ChargeGroup
        The charges, one group a bench.
    ratios : sequence of UnitRatio, optional
        Of the benches; drawn if there are two or more.

    Returns
    -------
    figure : Figure
        Of matplotlib, in no window.
    """
    from matplotlib.figure import Figure

    with_benches = len(ratios) > 1
    figure = Figure(figsize=(9, 10.5 if with_benches else 9), layout="constrained")
    heights = [1.25, 1, 1, 0.25 + 0.15 * len(ratios)] if with_benches else [1.25, 1, 1]
    axes = figure.subplots(len(heights), 1, height_ratios=heights)
    draw_charges(axes[0], groups, unit)
    draw_distances(axes[1], groups, unit)
    draw_statistic(axes[2], unit)
    if with_benches:
        draw_ratios(axes[3], ratios)
    return figure


def label_of(text: str) -> str:
    """Give a text that matplotlib does not read as mathematics, and that does not vanish from a legend.

    Parameters
    ----------
    text : str
        From outside, such as a file name.

    Returns
    -------
    label : str
        For titles and legends.
    """
    return text.replace("$", r"\$").lstrip("_") or "-"
