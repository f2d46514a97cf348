"""What `fallrise pool` writes and prints: `charge_unit.json`, `charge_unit.png` and a few lines."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from physics.quanta import SEARCH, ChargeUnit
from tracker.keeping.store import replace_file, write_json
from tracker.showing.terminal import count, pair
from tracker.showing.units import ChargeGroup, UnitRatio, unit_figure
from tracker.term.pool import BenchUnit, Pool


def charge_groups(pool: Pool) -> list[ChargeGroup]:
    """Give the charges for the pictures, one group a bench, as many as the unit counts.

    Parameters
    ----------
    pool : Pool
        As found.

    Returns
    -------
    groups : list of ChargeGroup
        For `tracker.showing.units`; a droplet whose charge changed gives two, its first charge and the change.
    """
    return [ChargeGroup(bench.label, *bench.sample.independent) for bench in pool.benches]


def counted(pool: Pool) -> str:
    """Say what the charges are that are counted and drawn.

    Parameters
    ----------
    pool : Pool
        As found.

    Returns
    -------
    text : str
        One sentence.
    """
    drawn = sum(len(bench.sample) for bench in pool.benches)
    changed = sum(len(bench.sample.pair) for bench in pool.benches)
    aside = drawn - pool.unit.droplets_used
    text = f"The kept droplets give {count(drawn, 'charge')} that can be told from 0"
    if changed:
        text += f"; two from {count(changed, 'droplet')} whose charge changed: the charge and its change"
    if aside:
        text += (
            f"; {aside} of them are left out of the unit, being too blurred or of a bench that is left out"
        )
    return f"{text}."


def bench_ratios(pool: Pool) -> list[UnitRatio]:
    """Give the benches' units over e for the picture.

    Parameters
    ----------
    pool : Pool
        As found.

    Returns
    -------
    ratios : list of UnitRatio
        For `tracker.showing.units`.
    """
    return [UnitRatio(b.label, b.ratio, b.ratio_own_std, b.ratio_shared_std) for b in pool.benches]


def pool_json(pool: Pool) -> dict[str, Any]:
    """Give the pool as plain values, as ``charge_unit.json`` holds them.

    Parameters
    ----------
    pool : Pool
        As found.

    Returns
    -------
    values : dict
        Not a number where a unit is not resolved; it is written as null.
    """
    benches = {bench.label: _bench_json(bench) for bench in pool.benches}
    skipped = [{"result": name, "reason": reason} for name, reason in pool.skipped]
    return unit_json(pool.unit) | {"search_c": list(SEARCH), "benches": benches, "skipped": skipped}


def _bench_json(bench: BenchUnit) -> dict[str, Any]:
    """One bench as plain values."""
    spread = float(np.hypot(bench.ratio_own_std, bench.ratio_shared_std))
    errors = {n: {"relative_error": e, "relative_error_std": s} for n, (e, s) in bench.errors.items()}
    rows = [
        {"input": row.input, "relative_std": abs(row.sensitivity * row.std), "share": row.share}
        for row in bench.budget.rows
        if row.input != "own"
    ]
    return unit_json(bench.unit) | {
        "over_e": bench.ratio, "over_e_own_std": bench.ratio_own_std, "over_e_shared_std": bench.ratio_shared_std,
        "over_e_std": spread, "from_pool": bench.from_pool, "left_out": bench.left_out, "sentence": bench.sentence,
        "results": list(bench.results), "explaining_errors": errors, "budget": rows,
    }  # fmt: skip


def unit_json(unit: ChargeUnit) -> dict[str, Any]:
    """Give a charge unit as plain values.

    Parameters
    ----------
    unit : ChargeUnit
        As found; not a number where it is not resolved.

    Returns
    -------
    values : dict
        The keys of ``charge_unit.json``.
    """
    advice = unit.advice
    return {
        "charge_unit_c": unit.unit, "charge_unit_std_c": unit.unit_std, "charge_unit_own_std_c": unit.unit_own_std,
        "charge_unit_shared_std_c": unit.unit_shared_std, "resolved": unit.resolved, "reason": unit.reason,
        "droplets_used": unit.droplets_used, "over_e": unit.over_e, "over_e_std": unit.over_e_std,
        "interval_68_c": list(unit.interval_68), "interval_95_c": list(unit.interval_95),
        "best_spacing_c": unit.best, "log_ratio": unit.log_ratio, "margin": unit.margin,
        "rivals": [{"unit_c": u, "log_ratio": value} for u, value in unit.rivals],
        "to_resolve": None if advice is None else {
            "droplets": advice.droplets, "more_droplets": advice.more_droplets, "time_factor": advice.time_factor,
            "sentence": advice.sentence,
        },
    }  # fmt: skip


def write_pool(pool: Pool, out: Path) -> tuple[Path, Path]:
    """Write ``charge_unit.json`` and ``charge_unit.png``.

    Parameters
    ----------
    pool : Pool
        As found.
    out : Path
        Folder; made if missing.

    Returns
    -------
    json, picture : Path
        What was written.

    Raises
    ------
    ResultError
        If the folder cannot be written.
    """
    table, picture = out / "charge_unit.json", out / "charge_unit.png"
    figure = unit_figure(pool.unit, charge_groups(pool), bench_ratios(pool))
    replace_file(picture, lambda part: figure.savefig(part, dpi=120))
    write_json(pool_json(pool), table)
    return table, picture


def pool_text(pool: Pool) -> str:
    """Say the result in a few lines.

    Parameters
    ----------
    pool : Pool
        As found.

    Returns
    -------
    text : str
        Lines for the terminal.
    """
    unit = pool.unit
    lines = [unit.reason]
    if unit.resolved:
        lines.insert(0, f"charge unit {unit.unit:.5e} C +/- {unit.unit_own_std:.1e} C (own) +/- "
                     f"{unit.unit_shared_std:.1e} C (shared), {pair(unit.over_e, unit.over_e_std, 1)} e")  # fmt: skip
    lines.append(counted(pool))
    lines += [bench.sentence for bench in pool.benches if not bench.sentence.endswith(unit.reason)]
    lines += [f"left out {name}: {reason}" for name, reason in pool.skipped]
    return "\n".join(lines)
