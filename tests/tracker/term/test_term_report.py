"""Drift from week to week and the page of a term, on results whose charges are known."""

from __future__ import annotations

import re
from dataclasses import replace
from datetime import date, timedelta
from html.parser import HTMLParser

import numpy as np
import pytest
from made_results import BENCH, made_bench, made_result
from scipy.optimize import curve_fit

from physics.quanta import ELEMENTARY_CHARGE
from tracker import cli
from tracker.keeping.store import read_result, write_result
from tracker.showing.html import Grid, Section, render
from tracker.term.drift import bench_drifts, fit_line, monday_of
from tracker.term.findings import doubtful
from tracker.term.ledger import Entry, write_ledger
from tracker.term.pool import pool_of
from tracker.term.report import term_page, write_report

FIRST = date(2026, 9, 7)  # a Monday
WEEKS = 10
SCALE_ERROR = 0.015  # stated too large, on "south"
VOLTAGE_LOSS = 0.004  # a week, on "west"


def bench_factor(bench: str, week: int) -> float:
    """Charge measured over charge: a scale error counts about to the power 1.6, a lost voltage as such."""
    if bench == "south":
        return (1 + SCALE_ERROR) ** 1.6
    return (1 - VOLTAGE_LOSS) ** week if bench == "west" else 1.0


@pytest.fixture(scope="module")
def term(tmp_path_factory):
    """Thirty results of three benches over ten weeks, and two failures."""
    root = tmp_path_factory.mktemp("made")
    rng = np.random.default_rng(20261201)
    results, days, entries = {}, {}, []
    for bench in ("north", "south", "west"):
        file = made_bench(root / bench, text=BENCH.replace("2.980(5)", "2.980(9)"))
        for week in range(WEEKS):
            name = f"{bench}/clip{week}.avi"
            folder = root / "out" / bench / f"clip{week}.fallrise"
            made = made_result(folder, file, rng, droplets=22, factor=bench_factor(bench, week), own=(0.04, 0.1),
                               largest=8, rejected=2, shared=0.008)  # fmt: skip
            made.droplets.loc[:1, "reasons"] = "too_short edge"
            write_result(made, folder)
            results[name] = read_result(folder, tracks=False)
            days[name] = FIRST + timedelta(days=7 * week + 2)
            entries.append(entry(name, bench, days[name], folder.relative_to(root / "out").as_posix()))
    evil = "north/<script>alert(1)</script>=x.avi"
    entries.append(
        replace(entry(evil, "north", FIRST, "x.fallrise"), status="failed", reason="the file is <empty>")
    )
    entries.append(
        replace(entry("west/late.avi", "", FIRST, "y.fallrise"), status="failed", reason="died", again=True)
    )
    return root, entries, results, days


def entry(name: str, bench: str, day: date, folder: str) -> Entry:
    """One line of a ledger."""
    return Entry(
        name, folder, "done", "", False, 22, 20, 1.0, "", "", bench, "key", day.isoformat(), (), (), (0, 0)
    )


@pytest.fixture(scope="module")
def drifts(term):
    """The benches over the weeks."""
    _, _, results, days = term
    pool = pool_of(list(results.values()))
    by_folder = {str(results[name].folder): day for name, day in days.items()}
    return pool, {d.label: d for d in bench_drifts(pool, by_folder)}


def test_bench_with_a_falling_voltage_is_named_with_the_size(drifts):
    """Only the bench whose voltage falls is told to drift, by its true slope and the voltage's loss."""
    _, found = drifts
    assert [label for label, drift in found.items() if drift.drifts] == ["west"]
    west = found["west"]
    # The true slope of (1 - a)^week over ten weeks is -a within 2 % of a; three standard uncertainties.
    assert west.slope == pytest.approx(-VOLTAGE_LOSS, abs=3 * west.slope_std + 0.02 * VOLTAGE_LOSS)
    assert west.slope_std < 0.25 * VOLTAGE_LOSS
    told = re.search(r"a voltage that went ([\d.]+) % \(([\d.]+) %\) below the stated one", west.sentence)
    lost = 100 * ((1 - VOLTAGE_LOSS) ** -(WEEKS - 1) - 1)
    assert float(told[1]) == pytest.approx(lost, abs=3 * float(told[2]))
    assert "DRIFTS" in west.sentence
    assert "no drift seen" in found["north"].sentence


def test_bench_with_a_wrong_scale_is_named_with_the_size(drifts):
    """The bench whose scale is stated 1.5 % too large is off beyond its uncertainty, by that error."""
    pool, _ = drifts
    south = next(bench for bench in pool.benches if bench.label == "south")
    assert abs(south.deviation) > 2
    error, std = south.errors["scale"]
    assert error == pytest.approx(SCALE_ERROR, abs=2.5 * std)
    assert std < SCALE_ERROR / 2


def test_weeks_hold_the_ratio_of_their_own_charges(drifts):
    """Each week's ratio lies about the true one as its own uncertainty says."""
    _, found = drifts
    pulls = [
        (week.ratio - bench_factor(label, i)) / week.own_std
        for label, drift in found.items() for i, week in enumerate(drift.weeks)
    ]  # fmt: skip
    # Thirty pulls of unit variance: five standard errors of their mean square, sqrt(2/30).
    assert np.mean(np.square(pulls)) == pytest.approx(1.0, abs=5 * np.sqrt(2 / 30))
    assert all(week.charges >= 18 for drift in found.values() for week in drift.weeks)


def test_line_fit_is_the_weighted_least_squares_of_scipy():
    """Start, slope and its uncertainty are those of `scipy.optimize.curve_fit` with absolute uncertainties."""
    rng = np.random.default_rng(5)
    at, std = np.array([0.0, 1, 2, 4, 7]), np.array([0.1, 0.3, 0.2, 0.1, 0.4])
    value = 1.0 - 0.01 * at + std * rng.normal(size=5)
    best, covariance = curve_fit(
        lambda t, a, b: a + b * t, at, value, sigma=std, absolute_sigma=True, p0=(1, 0)
    )
    start, slope, slope_std, scatter = fit_line(at, value, std)
    # curve_fit stops at a relative change of 1.5e-8.
    assert (start, slope) == pytest.approx(tuple(best), rel=1e-6)
    assert slope_std == pytest.approx(np.sqrt(covariance[1, 1]), rel=1e-6)
    assert scatter == pytest.approx(np.sum(((value - best[0] - best[1] * at) / std) ** 2) / 3, rel=1e-6)


def test_one_week_tells_no_drift():
    """Without two different weeks there is no slope, and no number for it."""
    assert all(np.isnan(fit_line(np.array([2.0]), np.array([1.0]), np.array([0.1]))))
    assert all(np.isnan(fit_line(np.array([2.0, 2.0]), np.ones(2), np.ones(2))))


def test_week_begins_on_monday():
    """A week is named by its Monday."""
    assert monday_of(date(2026, 9, 13)) == FIRST
    assert monday_of(FIRST) == FIRST
    assert monday_of(date(2026, 9, 14)) == FIRST + timedelta(days=7)


class Page(HTMLParser):
    """Tags, pictures and text of a page."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags, self.pictures, self.text, self.links = [], [], [], []
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        given = dict(attrs)
        if tag == "img":
            self.pictures.append(given)
        self.links += [given[name] for name in ("src", "href") if name in given]

    def handle_data(self, data):
        self.text.append(data)


@pytest.fixture(scope="module")
def page(term):
    """The page of the term."""
    _, entries, results, _ = term
    return term_page(entries, results)


def test_page_shows_all_that_a_head_of_laboratory_asks_for(page):
    """Benches, weeks, unit, drift, reasons, distributions, failures, budget and cautions are all there."""
    found = Page(page)
    text = " ".join(found.text)
    for words in ("32 recordings, 2026-09-07 to 2026-11-11: 30 measured, 2 failed; 660 droplets, 600 of them kept",
                  "What to look at", "west drifts and is part of this unit.",
                  "Recordings by bench and week", "2026-11-09", "Charge unit of each bench", "south: charge unit",
                  "west: DRIFTS", "too_short", "Seen too briefly for a charge.", "Distribution of the radius",
                  "Distribution of the charge", "Recordings that failed", "the file is <empty>", "plate gap",
                  "the next batch tries it again", "Cautions", "Local codes"):  # fmt: skip
        assert words in text
    assert f"{ELEMENTARY_CHARGE / 1e-19:.1f}" in text  # the unit is close to e
    assert len(found.pictures) == 5


def test_page_is_one_file_without_scripts_or_requests(page):
    """Pictures lie in the page, each with a text alternative; nothing is fetched, nothing runs."""
    found = Page(page)
    assert "script" not in found.tags
    assert all(
        link.startswith(("data:image/svg+xml;base64,", "data:image/png;base64,", "#")) for link in found.links
    )
    assert all(len(picture["alt"]) > 20 for picture in found.pictures)
    assert "default-src 'none'" in page
    assert 'name="viewport"' in page
    assert "@media print" in page
    assert "alert(1)" in " ".join(found.text)  # shown, not run


def test_report_command_writes_the_same_page_again(term, page, tmp_path, capsys):
    """`fallrise report` reads ledger and results and writes the page of a batch, the same to the byte."""
    root, entries, *_ = term
    write_ledger(root / "out", entries)
    with pytest.raises(SystemExit) as ended:
        cli.main(["report", str(root / "out")])
    assert ended.value.code == 0
    written = root / "out/report.html"
    assert capsys.readouterr().out.strip() == str(written)
    assert written.read_text() == page
    with pytest.raises(SystemExit) as ended:
        cli.main(["report", str(tmp_path)])
    assert ended.value.code == 1


def test_term_without_a_single_result_has_a_page():
    """When every recording failed the page says so and shows no picture."""
    failed = [
        replace(
            entry("a.avi", "", FIRST, "a"), status="failed", reason="the file is empty", droplets=0, kept=0
        )
    ]
    found = Page(term_page(failed, {}))
    assert "1 recording, 2026-09-07 to 2026-09-07: 0 measured, 1 failed" in " ".join(found.text)
    assert found.pictures == []


def test_recording_has_a_short_report(tmp_path):
    """The report of one result shows droplets, verdicts with sentences, bench and cautions."""
    import small_term

    from tracker.measure import measure
    from tracker.simulate import Scene, write_bench

    path = small_term.make_recording(tmp_path / "a&b.avi", seed=4)
    write_bench(Scene(**small_term.SCENE), tmp_path / "bench.toml", recording=path)
    result = measure(path)
    found = Page(write_report(result.folder).read_text())
    text = " ".join(found.text)
    assert "a&b.avi: droplets" in text
    assert f"{len(result.droplets)} droplets" in text
    for words in ("Voltage over time, from the list", "plate gap", "Cautions", "radius / um"):
        assert words in text
    assert len(found.pictures) == 1
    assert len(read_result(result.folder).tracks) == len(result.tracks)


def test_recording_that_lies_there_twice_counts_once(term):
    """The page's totals count the droplets of two copies once, and it names the copy that is left out."""
    _, entries, results, _ = term
    name, copy = entries[0].recording, "north/copy of clip0.avi"
    some = {name: results[name], copy: results[name]}
    page = Page(term_page([entries[0], replace(entries[0], recording=copy)], some))
    text = " ".join(page.text)
    assert f"{len(results[name].droplets)} droplets" in text
    assert f"{copy}: the same recording as {name}, which counts" in text


def test_recordings_in_doubt_and_with_doubtful_voltages_are_pointed_out(term):
    """The top of the page names a recording with a warning about the field, and one with most droplets in doubt."""
    _, entries, results, _ = term
    first, second, third = (entry.recording for entry in entries[:3])
    late = "the droplets see the field change about 0.76 s later than the list says; check its times"
    warned = replace(
        results[first], recording=results[first].recording | {"warnings": [late, "dusty window"]}
    )
    poor = results[second].droplets.copy()
    poor.loc[2:14, ["verdict", "reasons"]] = "doubt", "diffusion"
    found = doubtful({first: warned, second: replace(results[second], droplets=poor), third: results[third]})
    assert found == [
        f"{first}: {late}.",
        f"{second}: 13 of 20 droplets that were measured are in doubt (diffusion 13 times).",
    ]
    page = term_page(entries[:1], {first: warned})
    start, end = page.index("What to look at</h2>"), page.index("What was measured</h2>")
    assert late in page[start:end]


def test_table_without_rows_is_a_sentence():
    """A grid that has heads only is not drawn; one with rows bears its title outside the part that scrolls."""
    grids = (Grid("Reasons", ("reason", "share"), ()), Grid("Segments", ("start / s",), (("1.0",),)))
    page = render("A page", [], [Section("Tables", (), grids)])
    assert page.count("<table") == page.count('Segments</p>\n<div class="wide"><table') == 1
    assert "Reasons: none." in page


def test_numbers_stand_right_and_a_unit_that_reads_as_a_number_does_not():
    """A column is set to the right if all its cells are numbers; the unit 1 of a share stays beside the other units."""
    grid = Grid("Bench", ("value", "unit"), (("0.45", "1"), ("> 0.999", "Pa"), ("", "")))
    page = render("A page", [], [Section("Tables", (), (grid,))])
    assert re.findall(r'<td class="(\w)">([^<]*)</td>', page) == [
        ("n", "0.45"), ("t", "1"), ("n", "&gt; 0.999"), ("t", "Pa"), ("n", ""), ("t", ""),
    ]  # fmt: skip
