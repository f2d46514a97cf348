"""What a person sees on the terminal: progress and the droplet table."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from physics.droplet import ELEMENTARY_CHARGE

if TYPE_CHECKING:
    from physics.budget import Budget
    from tracker.keeping.store import Result

Progress = Callable[[float, float], None]  # done, total (0: not known)


@contextmanager
def progress_bar(label: str, *, hidden: bool = False) -> Iterator[Progress | None]:
    """Show a progress bar on standard error while the context lasts.

    Parameters
    ----------
    label : str
        What is being worked on.
    hidden : bool, optional
        True shows nothing.

    Yields
    ------
    progress : callable or None
        Takes (done, total); total 0 means that the end is not known. None if hidden.
    """
    if hidden:
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        TextColumn("{task.percentage:>3.0f} %"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(label, total=None)
        yield lambda done, total: bar.update(task, completed=done, total=total or None)


def show_result(result: Result) -> None:
    """Print what was measured: a heading, the droplet table, warnings, the folder.

    Parameters
    ----------
    result : Result
        A measured recording.
    """
    from rich.console import Console

    from tracker.showing.unitwords import charge_unit_lines

    # Piped output is never cut to the width of a terminal that is not there.
    console = Console(highlight=False, width=None if sys.stdout.isatty() else 160)
    drops, frames = result.droplets, result.recording.get("frames", {})
    counts = drops["verdict"].value_counts()
    told = ", ".join(f"{counts.get(v, 0)} {v}" for v in ("keep", "doubt", "reject"))
    console.print(
        f"{result.recording.get('file', '')}: {length(frames)}; {count(len(drops), 'droplet')}: {told}",
        markup=False,
    )
    if len(drops):
        console.print(_droplet_table(result))
    for line in charge_unit_lines(result.recording.get("charge_unit")):
        console.print(line, markup=False)
    for warning in result.recording.get("warnings", []):
        console.print(f"warning: {warning}", markup=False)
    if result.folder is not None:
        console.print(f"result: {result.folder}", markup=False)


def _droplet_table(result: Result) -> Any:
    """Give one line a droplet, in units that a person reads; charges in units of e beside C."""
    from rich import box
    from rich.table import Table

    heads = ("droplet", "verdict", "frames", "fall um/s", "radius um", "charge 1e-19 C", "own", "shared", "charge/e",
             "number", "P", "reasons")  # fmt: skip
    made = Table(box=box.SIMPLE, pad_edge=False)
    for head in heads:
        made.add_column(
            head, justify="left" if head in ("verdict", "reasons") else "right", no_wrap=head != "reasons"
        )
    for row in result.droplets.itertuples(index=False):
        made.add_row(*droplet_cells(row), "" if missing(row.reasons) else str(row.reasons))
    return made


def droplet_cells(row: Any) -> tuple[str, ...]:
    """Write one droplet in units that a person reads, without its reasons.

    Parameters
    ----------
    row : namedtuple
        A row of `tracker.keeping.tables.DROPLETS`.

    Returns
    -------
    cells : tuple of str
        Number, verdict, frames, fall speed in um/s, radius in um, charge with its own and shared uncertainty in
        1e-19 C, charge over e, charge number, its probability.
    """
    return (
        str(row.droplet), str(row.verdict), str(row.frames), pair(row.fall_speed_m_s, row.fall_speed_std_m_s, 1e6),
        pair(row.radius_m, row.radius_std_m, 1e6), number(row.charge_c, 1e19, 3),
        number(row.charge_own_std_c, 1e19, 3), number(row.charge_shared_std_c, 1e19, 3),
        number(row.charge_c, 1 / ELEMENTARY_CHARGE, 2),
        "" if missing(row.charge_number) else str(row.charge_number),
        probability(row.charge_number_probability),
    )  # fmt: skip


def show_budgets(made: Mapping[int | None, Budget]) -> None:
    """Print budgets, largest share first, and what their check found.

    Parameters
    ----------
    made : mapping
        Droplet number, or None for the bench, to its budget.
    """
    from rich import box
    from rich.console import Console
    from rich.table import Table

    console = Console(highlight=False, width=None if sys.stdout.isatty() else 160)
    for number_, budget in made.items():
        name = "bench, factor on all charges" if number_ is None else f"droplet {number_}, charge"
        unit = "" if budget.unit == "1" else f" {budget.unit}"
        title = (
            f"{name}: {budget.value:.5g}{unit}, standard uncertainty {budget.std:.2g}{unit} ({budget.method})"
        )
        shown = Table(box=box.SIMPLE, pad_edge=False, title=title, title_justify="left")
        for head in ("input", "value", "unit", "standard uncertainty", "sensitivity", "share / percent"):
            shown.add_column(head, justify="left" if head in ("input", "unit") else "right")
        for row in (row for row in budget.rows if number_ is not None or row.input != "own"):
            shown.add_row(row.input, f"{row.value:.6g}", row.unit, f"{row.std:.2g}", f"{row.sensitivity:.3g}",
                          f"{100 * row.share:.2f}")  # fmt: skip
        console.print(shown)
        if budget.note:
            console.print(budget.note, markup=False)


def count(number_: int, noun: str) -> str:
    """Write a number of things.

    Parameters
    ----------
    number_ : int
        How many.
    noun : str
        In the singular; its plural ends in s.

    Returns
    -------
    text : str
        Such as ``1 droplet`` and ``0 droplets``.
    """
    return f"{number_} {noun}{'' if number_ == 1 else 's'}"


def length(frames: Mapping[str, Any]) -> str:
    """Say how long a recording is.

    Parameters
    ----------
    frames : mapping
        ``frames`` of ``recording.json``.

    Returns
    -------
    text : str
        Such as ``1500 frames, 0 to 59.96 s``.
    """
    first, last = frames.get("first_s", 0), frames.get("last_s", 0)
    return f"{count(frames.get('count', 0), 'frame')}, {first:.6g} to {last:.6g} s"


def missing(value: object) -> bool:
    """Tell if a cell is empty.

    Parameters
    ----------
    value : object
        A cell of a table.

    Returns
    -------
    empty : bool
        True for None, NaN and pandas' missing value.
    """
    import pandas as pd

    return bool(pd.isna(value))


def number(value: Any, factor: float, decimals: int) -> str:
    """Write a cell with a fixed number of decimals.

    Parameters
    ----------
    value : float or missing
        In SI.
    factor : float
        To the unit that is shown.
    decimals : int
        Digits behind the point.

    Returns
    -------
    text : str
        Empty if the cell is.
    """
    return "" if missing(value) else f"{value * factor:.{decimals}f}"


def probability(value: Any) -> str:
    """Write a probability; one that three decimals would make a certainty is written as above the last of them.

    Parameters
    ----------
    value : float or missing
        From 0 to 1.

    Returns
    -------
    text : str
        Such as ``0.953`` and ``> 0.999``; empty if the cell is.
    """
    return "" if missing(value) else "> 0.999" if value > 0.9995 else f"{value:.3f}"


def pair(value: Any, std: Any, factor: float) -> str:
    """Write a value with its uncertainty in brackets, two digits of it.

    Parameters
    ----------
    value, std : float or missing
        In SI.
    factor : float
        To the unit that is shown.

    Returns
    -------
    text : str
        Such as ``75.3(21)``; empty if the cell is.
    """
    from math import floor, log10

    if missing(value):
        return ""
    if missing(std) or not std > 0:
        return f"{value * factor:.4g}"
    decimals = max(0, 1 - floor(log10(std * factor)))
    if decimals > 0 and round(std * factor * 10**decimals) >= 100:
        decimals -= 1  # 0.00996 is 0.0100: two digits of it are 0.010
    digits = round(std * factor * 10**decimals)
    return f"{value * factor:.{decimals}f}({digits})"
