"""The page of a term, and the short one of a recording: gathered from result folders, shown by `tracker.showing`."""

from __future__ import annotations

from collections import Counter, defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from physics.droplet import ELEMENTARY_CHARGE
from tracker.errors import ResultError
from tracker.keeping.store import PROVENANCE, Result, read_result, replace_file
from tracker.showing.html import Grid, Picture, Section, render
from tracker.showing.report import (
    Trend,
    bars_figure,
    cautions,
    distribution_figure,
    reason_counts,
    reason_grid,
    recording_page,
    taken_as_exact,
    trend_figure,
)
from tracker.showing.terminal import count
from tracker.showing.units import unit_figure
from tracker.showing.unitwords import sentence
from tracker.term.drift import Drift, bench_drifts, monday_of
from tracker.term.duplicates import duplicates
from tracker.term.findings import doubtful
from tracker.term.ledger import LEDGER, Entry, read_ledger
from tracker.term.pool import Pool, pool_of
from tracker.term.poolfiles import bench_ratios, charge_groups, counted
from tracker.term.reading import read_results

if TYPE_CHECKING:
    import pandas as pd

REPORT = "report.html"
_OFF_FROM = 2.0  # standard uncertainties off e, from which a bench is named at the top


def write_report(folder: Path | str) -> Path:
    """Write the report of a result folder or of a batch's output folder again.

    Parameters
    ----------
    folder : path-like
        Either.

    Returns
    -------
    report : Path
        ``report.html`` in the folder.

    Raises
    ------
    ResultError
        If the folder is neither, or the file cannot be written.
    """
    folder = Path(folder)
    if (folder / LEDGER).is_file():
        entries = sorted(read_ledger(folder).values(), key=lambda entry: entry.recording)
        results = read_results(folder, entries)
        return write_term_report(folder, entries, results)
    if (folder / PROVENANCE).is_file():
        page = recording_page(read_result(folder))
        replace_file(folder / REPORT, lambda part: part.write_text(page, encoding="utf-8"))
        return folder / REPORT
    raise ResultError(str(folder), "neither a result folder nor the output folder of a batch")


def write_term_report(out: Path, entries: Sequence[Entry], results: Mapping[str, Result]) -> Path:
    """Write the report of a term.

    Parameters
    ----------
    out : Path
        Output folder of the batch.
    entries : sequence of Entry
        One a recording, failed ones too.
    results : mapping of str to Result
        As `read_results` gives them.

    Returns
    -------
    report : Path
        What was written.

    Raises
    ------
    ResultError
        If it cannot be written; the old one stays.
    """
    page = term_page(entries, results)
    replace_file(out / REPORT, lambda part: part.write_text(page, encoding="utf-8"))
    return out / REPORT


def term_page(entries: Sequence[Entry], results: Mapping[str, Result]) -> str:
    """Give the page of a term.

    Parameters
    ----------
    entries : sequence of Entry
        One a recording.
    results : mapping of str to Result
        Of those that are done.

    Returns
    -------
    page : str
        HTML, one file.
    """
    import pandas as pd

    twice = repeated_recordings(results)
    results = {name: result for name, result in results.items() if name not in twice}
    entries = [replace(entry, droplets=0, kept=0) if entry.recording in twice else entry for entry in entries]
    days = {entry.recording: date.fromisoformat(entry.day) for entry in entries}
    benches = {entry.recording: entry.bench or "not known" for entry in entries}
    tables = [
        r.droplets.assign(recording=name, bench=benches[name])
        for name, r in results.items()
        if len(r.droplets)
    ]
    droplets = pd.concat(tables, ignore_index=True) if tables else None
    failed = [entry for entry in entries if entry.status == "failed"]
    kept = 0 if droplets is None else int((droplets["verdict"] == "keep").sum())
    span = f", {min(days.values())} to {max(days.values())}" if days else ""
    lead = [f"{count(len(entries), 'recording')}{span}: {len(entries) - len(failed)} measured, {len(failed)} failed; "
            f"{count(0 if droplets is None else len(droplets), 'droplet')}, {kept} of them kept."]  # fmt: skip
    lead += [f"{name}: {why}. Its droplets are not counted again." for name, why in twice.items()]
    sections = [Section("What was measured", (), (coverage_grid(entries),))]
    findings = (
        [f"{len(failed)} of {count(len(entries), 'recording')} failed; the list below says why."]
        if failed
        else []
    )
    findings = [*doubtful(results), *findings]
    if results:
        pool, drifts = _pool_and_drifts(results, days)
        findings = [*notable(pool, drifts), *findings]
        sections += _unit_sections(pool, drifts)
    if droplets is not None:
        sections += [_reasons_section(droplets), _distribution_section(droplets)]
    first = Section("What to look at", tuple(findings) or ("Nothing stands out.",))
    return render("Report of a term", lead, [first, *sections, failed_section(failed), cautions()])


def notable(pool: Pool, drifts: Sequence[Drift]) -> list[str]:
    """Say which benches a head of laboratory should look at.

    Parameters
    ----------
    pool : Pool
        Charge unit of the benches.
    drifts : sequence of Drift
        The same benches over the weeks.

    Returns
    -------
    findings : list of str
        Benches off e by more than two standard uncertainties, and benches that drift.
    """
    off = [bench.sentence for bench in pool.benches if abs(bench.deviation) > _OFF_FROM]
    return [*off, *(drift.sentence for drift in drifts if drift.drifts)]


def repeated_recordings(results: Mapping[str, Result]) -> dict[str, str]:
    """Name the recordings that another one repeats, told by their contents.

    Parameters
    ----------
    results : mapping of str to Result
        By the recording's path.

    Returns
    -------
    repeated : dict of str to str
        Path of a recording that does not count -> which one counts, and why.
    """
    names = list(results)
    return {names[one.left_out]: one.sentence for one in duplicates(list(results.values()), names)}


def coverage_grid(entries: Sequence[Entry]) -> Grid:
    """Tabulate recordings and droplets by bench and week.

    Parameters
    ----------
    entries : sequence of Entry
        One a recording.

    Returns
    -------
    grid : Grid
        One row for each bench and week.
    """
    groups: defaultdict[tuple[str, date], list[Entry]] = defaultdict(list)
    for entry in entries:
        groups[entry.bench or "not known", monday_of(date.fromisoformat(entry.day))].append(entry)
    rows = []
    for (bench, monday), members in sorted(groups.items()):
        failed = sum(entry.status == "failed" for entry in members)
        rows.append((bench, week_name(monday), str(len(members)), str(failed), str(sum(e.droplets for e in members)),
                     str(sum(e.kept for e in members))))  # fmt: skip
    heads = ("bench", "week of", "recordings", "failed", "droplets", "kept")
    return Grid("Recordings by bench and week", heads, tuple(rows))


def week_name(monday: date) -> str:
    """Give a week's name: the date of its Monday.

    Parameters
    ----------
    monday : date
        The day.

    Returns
    -------
    name : str
        ISO date.
    """
    return monday.isoformat()


def _pool_and_drifts(results: Mapping[str, Result], days: Mapping[str, date]) -> tuple[Pool, list[Drift]]:
    """Charge unit as `fallrise pool` finds it, and the benches over the weeks."""
    pool = pool_of(list(results.values()))
    return pool, bench_drifts(pool, {str(result.folder): days[name] for name, result in results.items()})


def _unit_sections(pool: Pool, drifts: Sequence[Drift]) -> list[Section]:
    """Charge unit, benches, weeks and budget."""
    unit = pool.unit
    value = (f"Charge unit {unit.unit:.5e} C, own uncertainty {unit.unit_own_std:.1e} C, shared "
             f"{unit.unit_shared_std:.1e} C; {unit.over_e:.4f} of e "
             f"with a standard uncertainty of {unit.over_e_std:.4f}.")  # fmt: skip
    reason = sentence(unit.reason)
    told = (value, reason) if unit.resolved else (reason,)
    aside = [f"{b.label} drifts and is part of this unit." for b, d in zip(pool.benches, drifts, strict=True)
             if d.drifts and not b.left_out]  # fmt: skip
    aside += [f"Left out {name}: {why}." for name, why in pool.skipped]
    comb = Picture("Charges over the unit, the comb, and the statistic",
                   unit_figure(unit, charge_groups(pool), bench_ratios(pool)), " ".join(told))  # fmt: skip
    return [
        Section("Charge unit", (*told, counted(pool), *aside), (comb,)),
        Section("What it says of each bench", tuple(bench.sentence for bench in pool.benches), (bench_grid(pool),)),
        drift_section(drifts),
        Section("Uncertainty budget", ("Relative standard uncertainty of all charges of a bench by what its droplets "
                "share; the own part of each droplet comes on top.", *_unstated(pool)), (budget_grid(pool),)),
    ]  # fmt: skip


def bench_grid(pool: Pool) -> Grid:
    """Tabulate the charge unit of each bench over e.

    Parameters
    ----------
    pool : Pool
        As found.

    Returns
    -------
    grid : Grid
        One row a bench.
    """
    rows = []
    for bench in pool.benches:
        errors = "; ".join(
            f"{name.replace('_', ' ')} {100 * e:+.2f} % ({100 * s:.2f} %)"
            for name, (e, s) in bench.errors.items()
        )
        known = np.isfinite(bench.ratio)
        rows.append((
            bench.label, str(len(bench.results)), str(len(bench.sample)),
            f"{bench.ratio:.4f}" if known else "not resolved",
            f"{bench.ratio_own_std:.4f}" if known else "", f"{bench.ratio_shared_std:.4f}" if known else "", errors,
        ))  # fmt: skip
    heads = ("bench", "recordings", "charges", "unit / e", "own", "shared",
             "single error of the stated value that would explain it")  # fmt: skip
    return Grid("Charge unit of each bench", heads, tuple(rows))


def drift_section(drifts: Sequence[Drift]) -> Section:
    """Show the benches over the weeks.

    Parameters
    ----------
    drifts : sequence of Drift
        One a bench.

    Returns
    -------
    section : Section
        Sentences, picture and table.
    """
    mondays = sorted({week.monday for drift in drifts for week in drift.weeks})
    rows = tuple(
        (d.label, week_name(w.monday), str(w.recordings), str(w.charges),
         f"{w.ratio:.4f}" if np.isfinite(w.ratio) else "too few charges",
         f"{w.own_std:.4f}" if np.isfinite(w.ratio) else "")
        for d in drifts for w in d.weeks
    )  # fmt: skip
    grid = Grid(
        "Charge unit by bench and week",
        ("bench", "week of", "recordings", "charges", "unit / e", "own"),
        rows,
    )
    sentences = tuple(drift.sentence for drift in drifts)
    trends = [trend for drift in drifts if (trend := _trend(drift, mondays[0])) is not None]
    if not trends:
        return Section("Benches over the weeks", sentences, (grid,))
    count = (mondays[-1] - mondays[0]).days // 7 + 1
    names = [week_name(date.fromordinal(mondays[0].toordinal() + 7 * i)) for i in range(count)]
    picture = Picture(
        "Charge unit of each bench from week to week", trend_figure(trends, names), " ".join(sentences)
    )
    return Section("Benches over the weeks", sentences, (picture, grid))


def _trend(drift: Drift, first: date) -> Trend | None:
    """The part of a drift that a picture shows; None if there is no line."""
    weeks = [week for week in drift.weeks if np.isfinite(week.ratio)]
    if not np.isfinite(drift.slope):
        return None
    at, ratio, std = (np.array(column, float) for column in zip(
        *(((w.monday - first).days / 7, w.ratio, w.own_std) for w in weeks), strict=True))  # fmt: skip
    return Trend(drift.label, at, ratio, std, drift.slope, drift.start)


def budget_grid(pool: Pool) -> Grid:
    """Tabulate the shared uncertainty of each bench by input.

    Parameters
    ----------
    pool : Pool
        As found.

    Returns
    -------
    grid : Grid
        One row for each bench and input, largest share first.
    """
    rows = [
        (bench.label, row.input.replace("_", " "), f"{row.value:.6g}", row.unit, f"{row.std:.2g}",
         f"{100 * abs(row.sensitivity * row.std):.3f} %", f"{100 * row.share:.1f} %")
        for bench in pool.benches for row in bench.budget.rows if row.input != "own" and row.std > 0
    ]  # fmt: skip
    heads = ("bench", "input", "value", "unit", "standard uncertainty", "of the charge", "share")
    return Grid("Shared inputs", heads, tuple(rows))


def _unstated(pool: Pool) -> list[str]:
    """Say of each bench which inputs count as exact."""
    told = []
    for bench in pool.benches:
        stds = {row.input: row.std for row in bench.budget.rows if row.input != "own"}
        told += [f"{bench.label}: {text}" for text in taken_as_exact(stds)]
    return told


def _reasons_section(droplets: pd.DataFrame) -> Section:
    """Share of droplets that are not kept, by reason."""
    counts = reason_counts(droplets)
    verdicts = Counter(droplets["verdict"])
    told = ", ".join(f"{verdicts.get(v, 0)} {v}" for v in ("keep", "doubt", "reject"))
    text = f"{count(len(droplets), 'droplet')}: {told}."
    if not counts:
        return Section("Droplets that are not kept", (text, "No reason stands against any droplet."))
    figure = bars_figure(dict(counts.most_common()), title="Reasons against droplets", xlabel="droplets")
    said = "; ".join(f"{code}: {count}" for code, count in counts.most_common())
    return Section("Droplets that are not kept", (text,),
                   (Picture("Reasons against droplets", figure, said), reason_grid(counts, len(droplets))))  # fmt: skip


def _distribution_section(droplets: pd.DataFrame) -> Section:
    """Radii and charges of the kept droplets."""
    kept = droplets[droplets["verdict"] == "keep"]
    parts = []
    for column, factor, name, unit in (
        ("radius_m", 1e6, "radius", "um"),
        ("charge_c", 1 / ELEMENTARY_CHARGE, "charge", "e"),
    ):
        groups = {
            str(bench): rows[column].dropna().to_numpy(float) * factor
            for bench, rows in kept.groupby("bench", sort=True)
        }
        joined = np.concatenate([*groups.values(), np.empty(0)])
        text = "No kept droplet has one."
        if len(joined):
            low, middle, high = np.percentile(joined, [5, 50, 95])
            text = (f"{count(len(joined), 'kept droplet')}: median {middle:.3g} {unit}, 5 % below {low:.3g} {unit}, "
                    f"5 % above {high:.3g} {unit}.")  # fmt: skip
        title = f"Distribution of the {name}"
        figure = distribution_figure(
            groups, title=title, xlabel=f"{name} / {unit}", step=0.25 if unit == "e" else None
        )
        parts.append(Picture(title, figure, text))
    return Section("Radii and charges", (), tuple(parts))


def failed_section(failed: Sequence[Entry]) -> Section:
    """List the recordings that could not be measured, and what to do.

    Parameters
    ----------
    failed : sequence of Entry
        Each with its reason, which says what to do.

    Returns
    -------
    section : Section
        Also if there are none.
    """
    if not failed:
        return Section("Recordings that failed", ("None.",))
    later = (
        "mend or remove it; the next batch tries it again once it, its bench file or its scale has changed"
    )
    rows = tuple(
        (e.recording, e.reason, "the next batch tries it again" if e.again else later) for e in failed
    )
    grid = Grid("What failed and what to do", ("recording", "why", "then"), rows)
    return Section("Recordings that failed", (f"{len(failed)} could not be measured.",), (grid,))
