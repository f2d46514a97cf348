"""Charges of one bench from its results, and the budget of the factor that they share."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from physics.budget import SHARED_INPUTS, Budget, DropletModel, bench_budget, shared_sensitivities
from physics.drag import slip_model
from physics.droplet import Conditions
from physics.quanta import ChargeSample, charge_sample
from tracker.keeping.store import Result
from tracker.records import Measured

if TYPE_CHECKING:
    import pandas as pd

FloatArray = NDArray[np.float64]

_RADII = 7  # radii at which sensitivities are worked out; between them they are straight
_USUAL_RADIUS = 5e-7  # m, where none is known


@dataclass(frozen=True, slots=True)
class Charges:
    """Kept charges of one result; a droplet whose charge changed is a pair, or a charge and a step."""

    charge: FloatArray  # (N,) C
    own_std: FloatArray  # (N,) C
    shared_std: FloatArray  # (N,) C, nan where not stored
    rel_std: FloatArray  # (N,) relative part of the own one, through the radius
    radius: FloatArray  # (N,) m, nan where unknown
    sensitivity: FloatArray  # (N, 10) d ln charge by `SHARED_INPUTS`, nan where not stored
    step: FloatArray  # (M,) C
    step_std: FloatArray  # (M,) C
    pair: FloatArray  # (K, 2) C
    pair_cov: FloatArray  # (K, 2, 2) C^2
    air: FloatArray  # (1, 2) relative effect of the air current's uncertainty, and the weight of the result in a mean


def result_charges(result: Result) -> Charges:
    """Gather the kept charges of one result.

    Parameters
    ----------
    result : Result
        Its tracks are not needed.

    Returns
    -------
    charges : Charges
    """
    kept = kept_droplets(result.droplets, own_radius_stds(result.recording))
    paired = charge_pairs(result.recording, kept)
    alone = kept[~kept["droplet"].isin(list(paired))]
    names = ("charge_c", "charge_own_std_c", "charge_shared_std_c", "rel_std", "radius_m")
    charge, own_std, shared_std, rel_std, radius = (alone[name].to_numpy(float) for name in names)
    none = [np.nan] * len(SHARED_INPUTS)
    stored = [none if row is None else row for row in _stored_sensitivities(result.recording, alone)]
    step, step_std = charge_steps(result.changes, alone)
    pairs, covs = [q for q, _ in paired.values()], [cov for _, cov in paired.values()]
    return Charges(
        charge, own_std, shared_std, rel_std, radius, np.array(stored, float).reshape(-1, len(SHARED_INPUTS)),
        step, step_std, np.array(pairs).reshape(-1, 2), np.array(covs).reshape(-1, 2, 2),
        np.array([_air_part(result.recording, kept)]),
    )  # fmt: skip


def joined(parts: Sequence[Charges]) -> Charges:
    """Join the charges of several results of one bench.

    Parameters
    ----------
    parts : sequence of Charges
        At least one.

    Returns
    -------
    charges : Charges
        In the order of the parts.
    """
    return Charges(*(np.concatenate([getattr(part, f.name) for part in parts]) for f in fields(Charges)))


def sample_of(charges: Charges, shared: float) -> ChargeSample:
    """Give charges as the search for their unit takes them.

    Parameters
    ----------
    charges : Charges
        Of one bench.
    shared : float
        Relative standard uncertainty of the factor on all of them.

    Returns
    -------
    sample : ChargeSample
    """
    return charge_sample(
        charges.charge, charges.own_std, rel_stds=charges.rel_std, shared_rel_std=shared,
        steps=(charges.step, charges.step_std), pairs=(charges.pair, charges.pair_cov),
    )  # fmt: skip


def shared_rel_std(charges: Charges) -> float:
    """Relative standard uncertainty of the factor on all charges of a bench, by what its inputs leave open.

    Parameters
    ----------
    charges : Charges
        Of the bench.

    Returns
    -------
    std : float
        Mean over the droplets, which count by (charge / own uncertainty)^2; nan if the results do not say.
    """
    relative = charges.shared_std / np.abs(charges.charge)
    usable = np.isfinite(relative)
    weights = (charges.charge / charges.own_std)[usable] ** 2
    return float(np.average(relative[usable], weights=weights)) if usable.any() else float("nan")


def air_rel_std(charges: Charges) -> float:
    """Relative standard uncertainty of a bench's mean charge by air currents, each common to one recording.

    Parameters
    ----------
    charges : Charges
        Of the bench.

    Returns
    -------
    std : float
        Of the weighted mean of independent parts.
    """
    std, weight = charges.air.T
    return float(np.sqrt(np.sum((weight * std) ** 2)) / weight.sum()) if weight.sum() > 0 else 0.0


def _air_part(recording: Mapping[str, Any], kept: pd.DataFrame) -> tuple[float, float]:
    """Relative effect of the air current's uncertainty on a recording's charges, and the recording's weight.

    An unknown current adds to all fall speeds; the charge goes with the fall speed to the power 0.6.
    """
    weight = ((kept["charge_c"] / kept["charge_own_std_c"]) ** 2).to_numpy(float)
    std = float((recording.get("air_current") or {}).get("down_std_m_s") or 0.0)
    relative = 0.6 * std / kept["fall_speed_m_s"].to_numpy(float)
    good = np.isfinite(relative) & (relative > 0)
    part = float(np.average(relative[good], weights=weight[good])) if good.any() else 0.0
    return part, float(weight.sum())


def _stored_sensitivities(recording: Mapping[str, Any], kept: pd.DataFrame) -> list[list[float] | None]:
    """Sensitivities of the kept droplets, as the measurement stored them."""
    budget = recording.get("budget") or {}
    stored = budget.get("log_charge_sensitivities") or {}
    if tuple(budget.get("inputs", ())) != SHARED_INPUTS:
        stored = {}
    return [stored.get(str(droplet)) for droplet in kept["droplet"]]


def own_radius_stds(recording: Mapping[str, Any]) -> dict[int, float]:
    """Own standard uncertainties of ln radius, without what all droplets of the bench share.

    Parameters
    ----------
    recording : mapping
        As in ``recording.json``.

    Returns
    -------
    stds : dict of int to float
        By droplet number; empty if the result does not hold them.
    """
    stored = (recording.get("budget") or {}).get("log_radius_own_stds") or {}
    return {int(droplet): float(std) for droplet, std in stored.items()}


def kept_droplets(droplets: pd.DataFrame, own_radius: Mapping[int, float] | None = None) -> pd.DataFrame:
    """Rows of droplets that are kept and have a charge, with the part of its uncertainty that grows with the charge.

    Parameters
    ----------
    droplets : DataFrame
        As in ``droplets.csv``.
    own_radius : mapping of int to float, optional
        As `own_radius_stds` gives it; for a droplet that is not there the radius's whole uncertainty counts.

    Returns
    -------
    kept : DataFrame
        The same columns and ``rel_std``: relative, through the radius; a charge at a given drive goes with
        the radius to the power 1.1.
    """
    charge, std = (droplets[name].to_numpy(float) for name in ("charge_c", "charge_own_std_c"))
    kept_rows = (droplets["verdict"] == "keep").to_numpy(bool, na_value=False) & ~np.isnan(charge) & (std > 0)
    kept = droplets[kept_rows].copy()
    radius, radius_std = (kept[name].to_numpy(float) for name in ("radius_m", "radius_std_m"))
    stated = dict(own_radius or {})
    own = np.array([stated.get(droplet, np.nan) for droplet in kept["droplet"]], float)
    relative = 1.1 * np.where(np.isnan(own), radius_std / radius, own)
    kept["rel_std"] = np.where(np.isnan(relative), 0.0, relative)
    return kept


def charge_steps(changes: pd.DataFrame, kept: pd.DataFrame) -> tuple[FloatArray, FloatArray]:
    """Changes of charge of the kept droplets, as charges of their own.

    Parameters
    ----------
    changes : DataFrame
        As in ``changes.csv``; only charge steps are used.
    kept : DataFrame
        As `kept_droplets` gives it.

    Returns
    -------
    change : ndarray of shape (M,)
        In C, signed.
    std : ndarray of shape (M,)
        Own standard uncertainty in C: the test statistic is (change / std)^2 at a known radius; the radius
        adds its part.
    """
    if not (
        changes["kind"] == "charge_step"
    ).any():  # as in most recordings; what follows takes a millisecond
        return np.empty(0), np.empty(0)
    steps = changes[(changes["kind"] == "charge_step") & changes["droplet"].isin(kept["droplet"])]
    change = (steps["after_c"] - steps["before_c"]).to_numpy(float)
    statistic = steps["statistic"].to_numpy(float)
    radius_part = kept.set_index("droplet")["rel_std"].reindex(steps["droplet"]).to_numpy(float)
    good = np.isfinite(change) & (change != 0) & (statistic > 0)
    change, statistic, radius_part = change[good], statistic[good], radius_part[good]
    return change, np.abs(change) * np.hypot(1 / np.sqrt(statistic), radius_part)


def charge_pairs(
    recording: Mapping[str, Any], kept: pd.DataFrame
) -> dict[int, tuple[FloatArray, FloatArray]]:
    """Two charges and their covariance of each kept droplet that changed its charge, where the result holds them.

    Parameters
    ----------
    recording : mapping
        As in ``recording.json``.
    kept : DataFrame
        As `kept_droplets` gives it.

    Returns
    -------
    pairs : dict of int to (charge of shape (2,), covariance of shape (2, 2))
        In C and C^2: the charge of the longest part, and that other part whose difference from it is best
        known.
    """
    parts = (recording.get("details") or {}).get("charge_parts") or {}
    found = {}
    for droplet, main_charge in zip(kept["droplet"], kept["charge_c"], strict=True):
        stored = parts.get(str(droplet))
        if stored is None:
            continue
        charge = np.array([np.nan if q is None else q for q in stored["charge_c"]])
        cov = np.array(stored["covariance_c2"], dtype=float)
        main = int(np.nanargmin(np.abs(charge - main_charge)))
        step_var = np.diag(cov) + cov[main, main] - 2 * cov[main]
        step_var[~np.isfinite(charge) | (step_var <= 0)] = np.inf
        step_var[main] = np.inf
        other = int(np.argmin(step_var))
        if np.isfinite(step_var[other]):
            rows = [main, other]
            found[int(droplet)] = charge[rows], cov[np.ix_(rows, rows)]
    return found


def shared_inputs(recording: Mapping[str, Any]) -> dict[str, Measured]:
    """Inputs that all droplets of a recording share, from its provenance.

    Parameters
    ----------
    recording : mapping
        As in ``recording.json``.

    Returns
    -------
    inputs : dict of str to Measured
        Under the names of `physics.budget.SHARED_INPUTS`; models count as factors of value 1.
    """
    bench, scale = recording["bench"], recording["scale"]
    same = ("plate_gap", "temperature", "pressure", "relative_humidity", "oil_density", "gravity")
    inputs = {
        name: Measured(bench[name]["value"], bench[name]["std"], bench[name]["origin"]) for name in same
    }
    per_pixel = scale["metres_per_pixel_y"]
    volts = bench.get("voltage", {}).get("value") or _largest_voltage(recording)
    viscosity, slip = bench["viscosity"], slip_model(bench["slip"])
    worse = max(scale[f"metres_per_pixel_{axis}_std"] / scale[f"metres_per_pixel_{axis}"] for axis in "xy")
    inputs["scale"] = Measured(per_pixel, per_pixel * worse, scale.get("picture") or "stated")
    inputs["voltage"] = Measured(
        abs(volts), abs(volts) * bench["voltage_rel_std"], "cell.voltage or field.list"
    )
    inputs["viscosity_model"] = Measured(1.0, viscosity["std"] / viscosity["value"], viscosity["origin"])
    inputs["slip_model"] = Measured(1.0, slip.std_rel, slip.source)
    return inputs


def _largest_voltage(recording: Mapping[str, Any]) -> float:
    """Largest voltage of the segments, 1 V if there is none: only its relative error counts."""
    segments = recording.get("field", {}).get("segments", ())
    return max((abs(s["voltage_v"]) for s in segments), default=0.0) or 1.0


def factor_budget(results: Sequence[Result], charges: Charges) -> Budget:
    """Budget of the factor on all charges of a bench.

    Parameters
    ----------
    results : sequence of Result
        Of that bench; the first one's provenance gives the inputs.
    charges : Charges
        Of the same results; droplets count by (charge / own uncertainty)^2.

    Returns
    -------
    budget : Budget
        With the sensitivities that the measurement stored, or those of the closed form at the droplets'
        radii.
    """
    recording = results[0].recording
    stored = np.all(np.isfinite(charges.sensitivity), axis=1)
    if stored.any():
        weights = (charges.charge / charges.own_std)[stored] ** 2
        return bench_budget(charges.sensitivity[stored], shared_inputs(recording), weights=weights)
    known = np.isfinite(charges.radius)
    radius = charges.radius[known] if known.any() else np.array([_USUAL_RADIUS])
    weights = (charges.charge / charges.own_std)[known] ** 2 if known.any() else np.ones(1)
    return bench_budget(_closed_form(recording, radius), shared_inputs(recording), weights=weights)


def _closed_form(recording: Mapping[str, Any], radius: FloatArray) -> FloatArray:
    """Sensitivities (N, 10) of charges at given radii, from a few radii."""
    bench = recording["bench"]
    values = {name: bench[name]["value"] for name in ("temperature", "viscosity", "mean_free_path", "air_density",
                                                      "oil_density", "gravity", "plate_gap")}  # fmt: skip
    conditions = Conditions(**values, slip=bench["slip"])
    grid = np.geomspace(radius.min(), radius.max() * 1.001, _RADII)
    slopes = np.stack([shared_sensitivities(DropletModel(r, 1e-18, conditions))[1] for r in grid])
    return np.stack([np.interp(np.log(radius), np.log(grid), column) for column in slopes.T], axis=1)
