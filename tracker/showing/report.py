"""What reports show: the sections of one recording, and the pictures of a term."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from tracker.motion.verdict import REASONS
from tracker.showing.html import Grid, Picture, Section, render
from tracker.showing.plots import new_figure, plot_recording
from tracker.showing.terminal import count, droplet_cells, length, missing
from tracker.showing.units import MARKERS, label_of
from tracker.showing.unitwords import charge_unit_lines, sentence

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.figure import Figure

    from tracker.keeping.store import Result

HATCHES = ("", "//", "..", "xx", "\\\\", "++", "oo", "--")
CAUTIONS = (
    "The plates carry hundreds of volts or more: use a supply whose current is limited to what a person survives, "
    "discharge the plates before touching the cell, and keep covers and interlocks in place.",
    "Where an ionising source changes the charges, it stays in its holder; the person appointed for radiation "
    "protection decides who handles it, and where it is kept.",
    "Never look into the microscope while a lamp's or laser's beam can reach the eye; look at the camera's picture.",
    "Oil mist does not belong in the breath or on the floor: spray little, ventilate, wipe up.",
    "Local codes and the persons licensed or appointed for these matters come before this page.",
)


@dataclass(frozen=True, slots=True)
class Trend:
    """Charge unit of one bench from week to week, for a picture."""

    label: str
    weeks: NDArray[np.float64]  # (N,) weeks since the first of all
    ratio: NDArray[np.float64]  # (N,) charge unit over e
    own_std: NDArray[np.float64]  # (N,)
    slope: float  # per week
    start: float  # ratio of the fitted line at week 0


def cautions() -> Section:
    """Give the section of usual cautions.

    Returns
    -------
    section : Section
        Last in every report.
    """
    return Section("Cautions", CAUTIONS)


def trend_figure(trends: Sequence[Trend], names: Sequence[str]) -> Figure:
    """Draw the charge units of benches over the weeks, each with its fitted line.

    Parameters
    ----------
    trends : sequence of Trend
        One marker and line style each.
    names : sequence of str
        Names of the weeks from week 0 on.

    Returns
    -------
    figure : Figure
        One pair of axes.
    """
    figure = new_figure(9, 4.5)
    axes = figure.subplots()
    axes.axhline(1, color="k", lw=0.8, ls=":")
    for i, trend in enumerate(trends):
        shift = 0.06 * (i - (len(trends) - 1) / 2)
        axes.errorbar(trend.weeks + shift, trend.ratio, trend.own_std, fmt=MARKERS[i % len(MARKERS)], ms=5, capsize=2,
                      mfc="none", label=label_of(trend.label))  # fmt: skip
        ends = np.array([trend.weeks.min(), trend.weeks.max()])
        style = ("-", "--", "-.", ":")[i % 4]
        axes.plot(ends, trend.start + trend.slope * ends, style, color=f"C{i % 10}", lw=1)
    step = max(1, -(-len(names) // 12))
    axes.set_xticks(range(0, len(names), step), list(names)[::step], rotation=30, ha="right")
    axes.set(xlabel="week", ylabel="charge unit / e", title="Charge unit of each bench from week to week")
    axes.legend(fontsize="small")
    return figure


def bars_figure(counts: Mapping[str, int], *, title: str, xlabel: str) -> Figure:
    """Draw counts as level bars with their numbers.

    Parameters
    ----------
    counts : mapping of str to int
        From top to bottom.
    title, xlabel : str
        Words for title and axis.

    Returns
    -------
    figure : Figure
        One pair of axes.
    """
    from matplotlib.ticker import MaxNLocator

    figure = new_figure(9, 1.2 + 0.3 * max(1, len(counts)))
    axes = figure.subplots()
    bars = axes.barh([label_of(name) for name in counts], list(counts.values()), color="0.7", edgecolor="k")
    axes.bar_label(bars, padding=3)
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    axes.invert_yaxis()
    axes.margins(x=0.12)
    axes.set(title=title, xlabel=xlabel)
    return figure


def distribution_figure(
    groups: Mapping[str, NDArray[np.float64]], *, title: str, xlabel: str, step: float | None = None
) -> Figure:
    """Draw histograms of one quantity, stacked, one hatching a group.

    Parameters
    ----------
    groups : mapping of str to ndarray
        Values of each group, finite, in the unit of the label.
    title, xlabel : str
        Words for title and axis.
    step : float, optional
        Width of a bin, the middle of one being 0; None: by the number of values.

    Returns
    -------
    figure : Figure
        One pair of axes.
    """
    figure = new_figure(9, 3.6)
    axes = figure.subplots()
    values = [np.asarray(v, float) for v in groups.values()]
    joined = np.concatenate([*values, np.empty(0)])
    if len(joined):
        edges = _bin_edges(joined, step).tolist()
        drawn: Any = axes.hist(values, edges, stacked=True, color=["0.85"] * len(values), edgecolor="k", lw=0.6,
                               label=[label_of(name) for name in groups])  # fmt: skip
        containers = drawn[2] if len(values) > 1 else [drawn[2]]
        for i, container in enumerate(containers):
            for patch in container:
                patch.set_hatch(HATCHES[i % len(HATCHES)])
        if len(values) > 1:
            axes.legend(fontsize="small")
    axes.set(title=title, xlabel=xlabel, ylabel="droplets")
    return figure


def _bin_edges(values: NDArray[np.float64], step: float | None) -> NDArray[np.float64]:
    """Edges of at most 160 bins."""
    if step is not None and np.ptp(values) / step < 160:
        return np.asarray(
            step * np.arange(np.floor(values.min() / step - 0.5), values.max() / step + 2) + step / 2
        )
    return np.histogram_bin_edges(values, bins=min(40, max(8, int(np.sqrt(len(values)) * 2))))


def reason_counts(droplets: pd.DataFrame) -> Counter[str]:
    """Count the reasons of droplets that are not kept.

    Parameters
    ----------
    droplets : DataFrame
        With the columns ``verdict`` and ``reasons``.

    Returns
    -------
    counts : Counter
        Code of a reason that doubts or rejects -> droplets that carry it.
    """
    counts: Counter[str] = Counter()
    for verdict, codes in zip(droplets["verdict"], droplets["reasons"], strict=True):
        if verdict != "keep" and not missing(codes):
            counts.update(code for code in str(codes).split() if _counts_against(code))
    return counts


def _counts_against(code: str) -> bool:
    return code == "decided" or code not in REASONS or REASONS[code].effect != "note"


def reason_grid(counts: Counter[str], total: int) -> Grid:
    """Tabulate reasons with their sentences.

    Parameters
    ----------
    counts : Counter
        As `reason_counts` gives them.
    total : int
        All droplets.

    Returns
    -------
    grid : Grid
        Most frequent first.
    """
    rows = tuple(
        (
            code,
            str(count),
            f"{100 * count / max(total, 1):.1f} %",
            REASONS[code].sentence if code in REASONS else "",
        )
        for code, count in counts.most_common()
    )
    return Grid(
        "Reasons against droplets (one droplet may have several)",
        ("reason", "droplets", "share", "meaning"),
        rows,
    )


def recording_page(result: Result) -> str:
    """Give the short report of one recording.

    Parameters
    ----------
    result : Result
        A measured recording.

    Returns
    -------
    page : str
        HTML, one file.
    """
    provenance, drops = result.recording, result.droplets
    frames = provenance.get("frames", {})
    counts = drops["verdict"].value_counts()
    told = ", ".join(f"{counts.get(v, 0)} {v}" for v in ("keep", "doubt", "reject"))
    lead = [
        f"{length(frames)}; {count(len(drops), 'droplet')}: {told}.",
        f"Bench {provenance.get('bench', {}).get('name', '')}, fallrise "
        f"{provenance.get('versions', {}).get('fallrise', '')}.",
        f"SHA-256 of the recording: {provenance.get('sha256', '')}.",
    ]
    unit = tuple(line[:1].upper() + line[1:] for line in charge_unit_lines(provenance.get("charge_unit")))
    seen = Picture("The recording", plot_recording(result), _recording_text(result))
    sections = [
        Section("Droplets", unit, (droplet_grid(drops), seen)),
        Section("Verdicts", (), (reason_grid(reason_counts(drops), len(drops)), verdict_grid(drops))),
        Section("Warnings", tuple(provenance.get("warnings", [])) or ("None.",)),
        Section("Field and bench", (), (field_grid(provenance), bench_grid(provenance))),
        *_budget_section(provenance.get("budget")),
        cautions(),
    ]
    return render(f"{provenance.get('file', 'recording')}: droplets", lead, sections)


def _recording_text(result: Result) -> str:
    kept = result.droplets[result.droplets["verdict"] == "keep"]
    radii = kept["radius_m"].dropna() * 1e6
    span = f", radii {radii.min():.2f} to {radii.max():.2f} um" if len(radii) else ""
    return (f"Tracks in the picture, heights over time with the field-on segments shaded, and charges over e with "
            f"their own uncertainties: {count(len(kept), 'kept droplet')}{span}.")  # fmt: skip


def droplet_grid(droplets: pd.DataFrame) -> Grid:
    """Tabulate droplets in units that a person reads.

    Parameters
    ----------
    droplets : DataFrame
        Columns of `tracker.keeping.tables.DROPLETS`.

    Returns
    -------
    grid : Grid
        One row a droplet.
    """
    heads = ("droplet", "verdict", "frames", "fall speed / (um/s)", "radius / um", "charge / 1e-19 C", "own", "shared",
             "charge / e", "number", "probability")  # fmt: skip
    rows = [droplet_cells(row) for row in droplets.itertuples(index=False)]
    title = "Droplets; in brackets: standard uncertainty of the last digits; own and shared: of the charge, in 1e-19 C"
    return Grid(title, heads, tuple(rows))


def verdict_grid(droplets: pd.DataFrame) -> Grid:
    """List the droplets that are not kept with their reasons.

    Parameters
    ----------
    droplets : DataFrame
        Columns of `tracker.keeping.tables.DROPLETS`.

    Returns
    -------
    grid : Grid
        One row a droplet.
    """
    rows = []
    for row in droplets[droplets["verdict"] != "keep"].itertuples(index=False):
        codes = [] if missing(row.reasons) else str(row.reasons).split()
        told = " ".join(REASONS[code].sentence if code in REASONS else code for code in codes)
        rows.append((str(row.droplet), str(row.verdict), told))
    return Grid("Droplets that are not kept", ("droplet", "verdict", "why"), tuple(rows))


def field_grid(provenance: Mapping[str, Any]) -> Grid:
    """Tabulate the segments of constant voltage.

    Parameters
    ----------
    provenance : mapping
        As in ``recording.json``.

    Returns
    -------
    grid : Grid
        One row a segment.
    """
    field = provenance.get("field", {})
    rows = tuple(
        (f"{s['start_s']:.3f}", f"{s['end_s']:.3f}", f"{s['voltage_v']:.2f}")
        for s in field.get("segments", ())
    )
    return Grid(
        f"Voltage over time, from the {field.get('source', '')}",
        ("start / s", "end / s", "voltage / V"),
        rows,
    )


def bench_grid(provenance: Mapping[str, Any]) -> Grid:
    """Tabulate what was known of the bench.

    Parameters
    ----------
    provenance : mapping
        As in ``recording.json``.

    Returns
    -------
    grid : Grid
        One row a quantity.
    """
    rows = [
        (name.replace("_", " "), f"{q['value']:.8g}", f"{q['std']:.2g}", q["unit"], str(q["origin"]))
        for name, q in provenance.get("bench", {}).items()
        if isinstance(q, dict) and "value" in q
    ]
    scale = provenance.get("scale", {})
    for axis in "xy":
        key = f"metres_per_pixel_{axis}"
        if key in scale:
            std = scale.get(f"{key}_std") or 0.0
            rows.append(
                (
                    f"scale along {axis}",
                    f"{scale[key]:.6g}",
                    f"{std:.2g}",
                    "m",
                    str(scale.get("picture") or "stated"),
                )
            )
    heads = ("quantity", "value", "standard uncertainty", "unit", "from")
    return Grid("Bench", heads, tuple(rows))


def _budget_section(budget: Any) -> list[Section]:
    """The bench's budget as `recording.json` holds it; nothing if it holds none."""
    rows = budget.get("charge_factor") if isinstance(budget, dict) else None
    if not rows:
        return []
    made = tuple(
        (str(r["input"]).replace("_", " "), f"{r['value']:.6g}", str(r["unit"]), f"{r['std']:.2g}",
         f"{r['sensitivity']:.3g}", f"{100 * r['share']:.1f} %")
        for r in rows
    )  # fmt: skip
    heads = ("input", "value", "unit", "standard uncertainty", "relative change of a charge a unit", "share")
    told = (
        f"Inputs that all droplets share; together {100 * budget['charge_factor_std']:.2g} % of every charge."
    )
    exact = map(sentence, taken_as_exact({str(r["input"]): float(r["std"]) for r in rows}))
    return [
        Section("Uncertainty budget of the charges", (told, *exact), (Grid("Shared inputs", heads, made),))
    ]


def taken_as_exact(stds: Mapping[str, float]) -> tuple[str, ...]:
    """Say which inputs count as exact, since the bench file gives them no uncertainty.

    Parameters
    ----------
    stds : mapping of str to float
        Standard uncertainty of each input.

    Returns
    -------
    told : tuple of str
        One sentence; none if every input has an uncertainty.
    """
    exact = [name.replace("_", " ") for name, std in stds.items() if std == 0]
    if not exact:
        return ()
    return (f"taken as exact, since the bench file states no uncertainty: {', '.join(exact)}.",)
