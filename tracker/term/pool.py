"""Charge unit over many results, and what it says of each bench."""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from physics.budget import Budget, explaining_errors
from physics.droplet import ELEMENTARY_CHARGE
from physics.quanta import SEARCH, ChargeSample, ChargeUnit, pooled_charge_unit, unit_ratio
from tracker.errors import ResultError, UsageError
from tracker.keeping.store import PROVENANCE, Result, read_result
from tracker.term.duplicates import duplicates, result_name
from tracker.term.poolcharges import (
    Charges,
    air_rel_std,
    factor_budget,
    joined,
    result_charges,
    sample_of,
    shared_rel_std,
)

FloatArray = NDArray[np.float64]

COMMON_INPUTS = ("viscosity_model", "slip_model")  # models that err alike on all benches
EXPLAINING = ("scale", "plate_gap", "voltage", "viscosity_model")  # single errors that a bench is asked for
AGREES_WITHIN = 2.0  # standard uncertainties off e, below which nothing needs to be explained
ODD_FROM = 3.0  # standard uncertainties off the other benches, from which a bench leaves the pool
_WORDS = {
    "scale": "a scale",
    "plate_gap": "a plate gap",
    "voltage": "a voltage",
    "viscosity_model": "a viscosity",
}


@dataclass(frozen=True, slots=True)
class BenchUnit:
    """What the charges of one bench say of it."""

    label: str
    results: tuple[str, ...]
    parts: tuple[Charges, ...]  # of the results, in their order
    sample: ChargeSample
    unit: ChargeUnit  # of this bench alone
    ratio: float  # charge unit over e; nan if neither the bench nor the pool is resolved
    ratio_own_std: float
    ratio_shared_std: float
    left_out: str  # why the bench takes no part in the pooled unit; empty if it does
    from_pool: bool  # the bench alone is not resolved; its ratio rests on the unit of all benches
    budget: Budget  # of the factor on all its charges
    errors: Mapping[
        str, tuple[float, float]
    ]  # input -> relative error that would explain the ratio, and its std
    sentence: str

    @property
    def deviation(self) -> float:
        """Deviation of the unit from e in standard uncertainties, own and shared joined."""
        return (self.ratio - 1) / float(np.hypot(self.ratio_own_std, self.ratio_shared_std))


@dataclass(frozen=True, slots=True)
class Pool:
    """Charge unit of all results together, and of each bench."""

    unit: ChargeUnit
    benches: tuple[BenchUnit, ...]
    skipped: tuple[tuple[str, str], ...]  # result, why it was left out


@dataclass(frozen=True, slots=True)
class _Bench:
    """Rows of one bench before the unit is looked for."""

    label: str
    results: tuple[str, ...]
    parts: tuple[Charges, ...]
    sample: ChargeSample
    budget: Budget
    common: float  # relative uncertainty by the models, which err alike on all benches


def find_results(paths: Iterable[Path | str]) -> list[Path]:
    """Give the result folders that the paths name or hold.

    Parameters
    ----------
    paths : iterable of path
        Result folders, or folders with results anywhere below.

    Returns
    -------
    folders : list of Path
        Sorted within each path, each once.

    Raises
    ------
    UsageError
        If a path is no folder, or holds no result.
    """
    found: dict[Path, None] = {}
    for path in map(Path, paths):
        if (path / PROVENANCE).is_file():
            found[path] = None
            continue
        inside = (p.parent for p in path.rglob(PROVENANCE) if (p.parent / "droplets.csv").is_file())
        below = sorted(folder for folder in inside if not folder.name.startswith("."))  # no drafts
        if not below:
            raise UsageError(f"{path}: neither a result folder nor a folder that holds one; measure first")
        found.update(dict.fromkeys(below))
    return list(found)


def pool_results(folders: Sequence[Path | str]) -> Pool:
    """Find the charge unit over result folders.

    Parameters
    ----------
    folders : sequence of path
        Result folders, or folders with results below; only droplets with the verdict keep are used.

    Returns
    -------
    pool : Pool
        With what was left out and why.

    Raises
    ------
    UsageError, ResultError
        If a path holds no result, or no result can be read.
    """
    results, skipped = [], []
    for folder in find_results(folders):
        try:
            results.append(read_result(folder, tracks=False))
        except ResultError as error:
            skipped.append((str(folder), error.problem))
    if not results:
        raise ResultError(*skipped[0])
    pool = pool_of(results)
    return Pool(pool.unit, pool.benches, (*skipped, *pool.skipped))


def pool_of(results: Sequence[Result]) -> Pool:
    """Find the charge unit over results that have been read.

    Parameters
    ----------
    results : sequence of Result
        Their tracks are not needed. A recording that comes twice counts once, by the result with more kept droplets.

    Returns
    -------
    pool : Pool
        Benches in the order in which they appear.

    Notes
    -----
    Each bench has one unknown factor on its charges, with the uncertainty of scale, gap, voltage, air and
    oil; the charges of one bench fix the comb, and benches are joined with their factors integrated out. The
    models of viscosity and slip err alike on all benches and are added at the end, and so is the tolerance of the
    reference pattern, or the density of the oil, where all benches state the same one: it is then taken to be one
    and the same slide, or batch.
    """
    by_bench: dict[tuple[object, ...], list[Result]] = {}
    twice = {one.left_out: one for one in duplicates(results)}
    skipped = [(result_name(results[place]), one.sentence) for place, one in twice.items()]
    for place, result in enumerate(results):
        if place not in twice:
            by_bench.setdefault(_bench_key(result), []).append(result)
    labels = _labels([members[0] for members in by_bench.values()])
    standards = _same_standards([members[0].recording for members in by_bench.values()])
    benches = [
        _bench(label, members, standards) for label, members in zip(labels, by_bench.values(), strict=True)
    ]
    common = _common_rel_std(benches)
    own = [_without_common(bench, common) for bench in benches]
    alone = [pooled_charge_unit((bench.sample,), search=SEARCH) for bench in benches]
    outside = _odd_benches(labels, alone, [s.shared_rel_std for s in own])
    inside = [s for label, s in zip(labels, own, strict=True) if label not in outside]
    unit = pooled_charge_unit(inside, common_rel_std=common, search=SEARCH)
    kept = [label not in outside for label in labels]
    unit = _widened(
        unit, [a for a, k in zip(alone, kept, strict=True) if k], [s.shared_rel_std for s in inside]
    )
    made = [_bench_unit(bench, one, unit, outside.get(bench.label, ""))
            for bench, one in zip(benches, alone, strict=True)]  # fmt: skip
    return Pool(unit, tuple(made), tuple(skipped))


def _odd_benches(
    labels: Sequence[str], units: Sequence[ChargeUnit], shared: Sequence[float]
) -> dict[str, str]:
    """Benches that differ from all others by more than the uncertainties allow; told only among three or more."""
    value = {label: u.over_e for label, u in zip(labels, units, strict=True) if u.resolved}
    std = {label: float(np.hypot(u.unit_own_std / ELEMENTARY_CHARGE, u.over_e * s))
           for label, u, s in zip(labels, units, shared, strict=True) if u.resolved}  # fmt: skip
    odd: dict[str, str] = {}
    while len(value) >= 3:
        off = {}
        for label, here in value.items():
            others = [other for other in value if other != label]
            weight = np.array([std[other] ** -2.0 for other in others])
            mean = float(np.average([value[other] for other in others], weights=weight))
            off[label] = (here - mean) / float(np.hypot(std[label], weight.sum() ** -0.5))
        worst = max(off, key=lambda label: abs(off[label]))
        if abs(off[worst]) <= ODD_FROM:
            break
        odd[worst] = f"its charge unit is {abs(off[worst]):.1f} standard uncertainties off the other benches'"
        del value[worst]
    return odd


def _widened(unit: ChargeUnit, alone: Sequence[ChargeUnit], shared: Sequence[float]) -> ChargeUnit:
    """Widen the uncertainty of a unit whose benches differ by more than theirs say (Birge's ratio)."""
    from scipy.special import chdtri

    rows = [
        (u.unit, np.hypot(u.unit_own_std, u.unit * s))
        for u, s in zip(alone, shared, strict=True)
        if u.resolved
    ]
    if not unit.resolved or len(rows) < 2:
        return unit
    value, std = np.array(rows).T
    mean = np.average(value, weights=std**-2.0)
    square, dof = float(np.sum(((value - mean) / std) ** 2)), len(rows) - 1
    if square <= chdtri(dof, 0.003):
        return unit
    factor = float(np.sqrt(square / dof))
    bands = [tuple(unit.unit + factor * (end - unit.unit) for end in band)
             for band in (unit.interval_68, unit.interval_95)]  # fmt: skip
    return replace(
        unit, unit_std=factor * unit.unit_std, unit_shared_std=factor * unit.unit_shared_std,
        unit_own_std=factor * unit.unit_own_std, over_e_std=factor * unit.over_e_std,
        interval_68=(bands[0][0], bands[0][1]), interval_95=(bands[1][0], bands[1][1]),
        reason=f"{unit.reason}; the benches differ by more than their uncertainties say, "
               f"so all uncertainties are multiplied by {factor:.1f}",
    )  # fmt: skip


def _bench_key(result: Result) -> tuple[object, ...]:
    """What tells one bench from another: its file, its cell and its reference picture."""
    bench, scale = result.recording.get("bench", {}), result.recording.get("scale", {})
    file = os.path.normpath((result.folder or Path()).absolute() / (bench.get("files") or [""])[0])
    gap = bench.get("plate_gap", {}).get("value")
    return bench.get("name"), file, gap, scale.get("picture_sha256") or scale.get("metres_per_pixel_y")


def _labels(results: Sequence[Result]) -> list[str]:
    """One label for each bench, numbered where names repeat."""
    labels: list[str] = []
    for result in results:
        name = str(result.recording.get("bench", {}).get("name") or "bench")
        count = sum(label == name or label.startswith(f"{name} (") for label in labels)
        labels.append(f"{name} ({count + 1})" if count else name)
    return labels


def _same_standards(recordings: Sequence[Mapping[str, Any]]) -> frozenset[str]:
    """What all benches rest on alike: inputs whose value and uncertainty are the same on every bench."""
    scales = [recording.get("scale") or {} for recording in recordings]
    oils = [recording.get("bench", {}).get("oil_density") or {} for recording in recordings]
    pitches = {(scale.get("pitch_m"), scale.get("pitch_std_m")) for scale in scales}
    densities = {(oil.get("value"), oil.get("std")) for oil in oils}
    stated = {"scale": pitches, "oil_density": densities}
    return frozenset(
        name for name, pairs in stated.items() if len(pairs) == 1 and all(v for v in next(iter(pairs)))
    )


def _bench(label: str, results: Sequence[Result], standards: frozenset[str]) -> _Bench:
    """Gather the charges of one bench and the budget of their common factor."""
    parts = tuple(result_charges(result) for result in results)
    charges = joined(parts)
    budget = factor_budget(results, charges)
    shared = shared_rel_std(charges)
    shared = float(np.hypot(shared if np.isfinite(shared) else budget.shared_std, air_rel_std(charges)))
    sample = sample_of(charges, shared)
    common = min(_common_part(budget, results[0].recording, standards), shared)
    return _Bench(label, tuple(result_name(result) for result in results), parts, sample, budget, common)


def _common_part(budget: Budget, recording: Mapping[str, Any], standards: frozenset[str]) -> float:
    """Part of what errs alike on all benches in the uncertainty of the factor; a stated viscosity is no model."""
    stated = "air.viscosity" in str(recording["bench"]["viscosity"].get("origin"))
    common = {name for name in COMMON_INPUTS if not (stated and name == "viscosity_model")} | standards
    parts = []
    for row in budget.rows:
        if row.input in common:
            std = row.std
            if row.input == "scale":  # of the scale only the pattern's tolerance is common, not the fit
                std = min(std, row.value * recording["scale"]["pitch_std_m"] / recording["scale"]["pitch_m"])
            parts.append(row.sensitivity * std)
    return float(np.sqrt(np.sum(np.square(parts))))


def _common_rel_std(benches: Sequence[_Bench]) -> float:
    """Relative uncertainty that all benches share, as far as it matters: one bench has nothing to share it with."""
    if len(benches) < 2:
        return 0.0
    return min(bench.common for bench in benches)


def _without_common(bench: _Bench, common: float) -> ChargeSample:
    """The bench's charges with only what it does not share with other benches."""
    s = bench.sample
    rest = float(np.sqrt(max(s.shared_rel_std**2 - common**2, 0.0)))
    return ChargeSample(s.charge, s.floor_std, s.rel_std, s.pair, s.pair_cov, rest)


def _explaining(ratio: float, own: float, shared: float, budget: Budget) -> dict[str, tuple[float, float]]:
    """Single errors that would explain a ratio; the uncertainty of each is that of all else."""
    if not np.isfinite(ratio):
        return {}
    rows = {row.input: row for row in budget.rows}
    errors = {}
    for name, error in explaining_errors(ratio, budget).items():
        if name in EXPLAINING:
            slope = rows[name].sensitivity * rows[name].value
            rest = max(shared**2 - (rows[name].sensitivity * rows[name].std) ** 2, 0.0)
            errors[name] = error, float(np.hypot(own / ratio, np.sqrt(rest)) / abs(slope))
    return {name: errors[name] for name in EXPLAINING if name in errors}


def _bench_unit(bench: _Bench, alone: ChargeUnit, pooled: ChargeUnit, left_out: str) -> BenchUnit:
    """Ratio of one bench's charge unit to e, and what single error would explain it."""
    shared = bench.sample.shared_rel_std
    ratio = own = float("nan")
    from_pool = not alone.resolved and pooled.resolved and len(bench.sample) > 0
    if alone.resolved:
        ratio, own = alone.over_e, alone.unit_own_std / ELEMENTARY_CHARGE
    elif from_pool:
        prior = min(max(1.5 * shared, 0.01), 0.03)
        relative, std = unit_ratio(bench.sample, pooled.unit, prior_rel_std=prior)
        ratio, own = relative * pooled.over_e, std * pooled.over_e
    made = BenchUnit(bench.label, bench.results, bench.parts, bench.sample, alone, ratio, own, ratio * shared, left_out,
                     from_pool, bench.budget, _explaining(ratio, own, shared, bench.budget), "")  # fmt: skip
    return _with_sentence(made)


def _with_sentence(bench: BenchUnit) -> BenchUnit:
    """Say in words what the charge unit says of the bench."""
    if not np.isfinite(bench.ratio):
        return replace(bench, sentence=f"{bench.label}: {bench.unit.reason}")
    origin = ", given the unit of all benches" if bench.from_pool else ""
    aside = f"; left out of the pooled unit: {bench.left_out}" if bench.left_out else ""
    start = (f"{bench.label}: charge unit over e {bench.ratio:.4f} +/- {bench.ratio_own_std:.4f} (own) "
             f"+/- {bench.ratio_shared_std:.4f} (shared){origin}{aside}")  # fmt: skip
    if abs(bench.ratio - 1) < AGREES_WITHIN * bench.ratio_own_std:
        return replace(bench, sentence=f"{start}; it agrees with e.")
    ways = "; ".join(_error_words(name, *error) for name, error in bench.errors.items())
    off = f"{abs(bench.deviation):.1f} standard uncertainties off e"
    if (
        abs(bench.deviation) < AGREES_WITHIN
    ):  # more than the droplets' own spread, less than what the bench allows
        return replace(bench, sentence=f"{start}; {off}, as what its droplets share allows. It would be e with one of "
                       f"these: {ways}.")  # fmt: skip
    return replace(bench, sentence=f"{start}; {off}. One of these would explain it: {ways}.")


def _error_words(name: str, error: float, std: float) -> str:
    """Words such as "a scale 0.80 % (0.12 %) too large"."""
    side = "large" if error > 0 else "small"
    return f"{_WORDS[name]} stated {100 * abs(error):.2f} % ({100 * std:.2f} %) too {side}"
