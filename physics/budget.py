"""Uncertainty budget of droplets: what is a droplet's own, and what all droplets of a bench share.

Every shared input counts by its relative error, relative humidity by its absolute one (it may be 0), so that all
sensitivities are derivatives of ln radius or ln charge without a unit. The input's true value is the stated one
times (1 + error); the speeds and the diffusion that the pictures gave stay as they are, in px and s.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from physics import drag
from physics.air import PRESSURE_RANGE, Air, air_slopes, dry_mean_free_path, moist_air
from physics.droplet import BOLTZMANN, Conditions, diffusion, droplet_mobility, fall_speed
from physics.errors import PhysicsError
from physics.propagation import MonteCarlo, Trials, joint_normal, monte_carlo, normal, validate_linear

Floats = NDArray[np.float64]

SHARED_UNITS: Mapping[str, str] = MappingProxyType({
    "scale": "m", "plate_gap": "m", "voltage": "V", "temperature": "K", "pressure": "Pa",
    "relative_humidity": "1", "viscosity_model": "1", "slip_model": "1", "oil_density": "kg/m^3", "gravity": "m/s^2",
})  # fmt: skip
SHARED_INPUTS = tuple(SHARED_UNITS)


class Estimate(Protocol):
    """A value with one standard uncertainty."""

    @property
    def value(self) -> float:
        """Best estimate, SI."""

    @property
    def std(self) -> float:
        """Standard uncertainty, in the unit of the value."""


@dataclass(frozen=True, slots=True)
class DropletModel:
    """One droplet as it was evaluated, from which the effect of errors of the bench follows.

    Attributes
    ----------
    radius : float
        In m.
    charge : float
        Signed, in C.
    conditions : Conditions
        That radius and charge were had with.
    air : Air or None
        Of the bench; None: dry air of the conditions' temperature and mean free path.
    diffusion_weight : float
        Share of the Brownian variance in what is known of ln radius, 0 (fall speed alone) to 1.
    expansion : float
        Of the oil, in 1/K, if its density was carried over from another temperature.
    """

    radius: float
    charge: float
    conditions: Conditions
    air: Air | None = None
    diffusion_weight: float = 0.0
    expansion: float = 0.0


@dataclass(frozen=True, slots=True)
class BudgetRow:
    """One line of a budget.

    Attributes
    ----------
    input : str
        Name of the input; ``own`` is the droplet's own motion.
    value : float
        Its best estimate.
    unit : str
        Of value and std.
    std : float
        Its standard uncertainty.
    sensitivity : float
        Change of the result per unit of the input.
    share : float
        Share of this input in the variance of the result; the rows add up to 1.
    """

    input: str
    value: float
    unit: str
    std: float
    sensitivity: float
    share: float


@dataclass(frozen=True, slots=True)
class Budget:
    """Budget of one result.

    Attributes
    ----------
    quantity, unit : str
        What it is, and its SI unit.
    value, std : float
        Result and standard uncertainty; of the mean and spread of the draws if `method` is ``"monte carlo"``.
    own_std, shared_std : float
        Linear parts of the uncertainty: of this droplet alone, and common to the bench.
    rows : tuple of BudgetRow
        Largest share first.
    interval_95 : tuple of float
        Coverage interval (low, high).
    method : str
        ``"linear"`` or ``"monte carlo"``.
    note : str
        Whether, and how, the linear result was checked.
    """

    quantity: str
    unit: str
    value: float
    std: float
    own_std: float
    shared_std: float
    rows: tuple[BudgetRow, ...]
    interval_95: tuple[float, float]
    method: str = "linear"
    note: str = "linear propagation, not checked by Monte Carlo"


def shared_errors(inputs: Mapping[str, Estimate]) -> Floats:
    """Standard uncertainties of the shared inputs as this module counts them.

    Parameters
    ----------
    inputs : mapping
        Of the names `SHARED_INPUTS` to values with standard uncertainties in SI; the models of viscosity
        and slip are factors of value 1. A name that is missing counts as exact.

    Returns
    -------
    stds : ndarray of shape (10,)
        Relative, and absolute for the relative humidity, in the order of `SHARED_INPUTS`.

    Raises
    ------
    PhysicsError
        If a name is unknown, a std is negative or not finite, or a value is 0 where a relative error is needed.
    """
    stds = np.zeros(len(SHARED_INPUTS))
    for name, estimate in inputs.items():
        if name not in SHARED_UNITS:
            raise PhysicsError("shared input", name, "one of " + ", ".join(SHARED_INPUTS))
        reference = 1.0 if name == "relative_humidity" else abs(estimate.value)
        if not 0.0 <= estimate.std < math.inf or not 0.0 < reference < math.inf:
            raise PhysicsError(
                name, f"{estimate.value} +/- {estimate.std}", "a value other than 0, with a std >= 0"
            )
        stds[SHARED_INPUTS.index(name)] = estimate.std / reference
    return stds


def shared_effect(
    model: DropletModel, errors: Mapping[str, ArrayLike], *, radius: ArrayLike | None = None
) -> tuple[Floats, Floats]:
    """Give radius and charge that the same pictures yield if the bench's true values differ by given errors.

    Parameters
    ----------
    model : DropletModel
        The droplet as it was evaluated.
    errors : mapping of str to array_like
        Errors of the shared inputs, as counted in this module; arrays broadcast.
    radius : array_like, optional
        In m, instead of the model's; broadcasts with the errors.

    Returns
    -------
    radius_ratio, charge_ratio : ndarray
        Over the radius and charge as evaluated; the latter's sign and size do not matter.

    Notes
    -----
    Exact in scale, gap, voltage, models, density and gravity; temperature, pressure and humidity act through
    the logarithmic slopes of the air's viscosity, mean free path and density, which are straight within 1e-3
    of their effect for errors of a laboratory. A given viscosity does not follow the air.
    """
    c, start = model.conditions, np.asarray(model.radius if radius is None else radius, dtype=np.float64)
    e = {name: np.asarray(errors.get(name, 0.0), dtype=np.float64) for name in SHARED_INPUTS}
    changes = np.stack(
        np.broadcast_arrays(np.log1p(e["temperature"]), np.log1p(e["pressure"]), e["relative_humidity"])
    )
    log_viscosity, log_path, log_density = np.tensordot(
        air_slopes(model.air or _dry_air(c)), changes, axes=(1, 0)
    )
    viscosity = c.viscosity * np.exp(log_viscosity) * (1.0 + e["viscosity_model"])
    gas = {"mean_free_path": c.mean_free_path * np.exp(log_path), "slip": c.slip}
    gas["slip_factor"] = 1.0 + e["slip_model"]
    warmth = model.expansion * c.temperature * e["temperature"]
    excess = c.oil_density * (1.0 + e["oil_density"]) / (1.0 + warmth) - c.air_density * np.exp(log_density)
    size = 1.0 + e["scale"]
    area = 9.0 * viscosity * fall_speed(start, c) * size / (
        2.0 * excess * c.gravity * (1.0 + e["gravity"])
    )  # fmt: skip
    log_radius = np.log(drag.solve_radius(area, power=2, **gas))
    if model.diffusion_weight > 0.0:
        thermal = BOLTZMANN * c.temperature * (1.0 + e["temperature"])
        stokes = thermal / (6.0 * math.pi * viscosity * diffusion(start, c) * size**2)
        by_diffusion = np.log(drag.solve_radius(stokes, power=1, **gas))
        log_radius = log_radius + model.diffusion_weight * (by_diffusion - log_radius)
    new = np.exp(log_radius)
    mobility = drag.slip_correction(new, **gas) / (6.0 * math.pi * viscosity * new)
    drive = size * (1.0 + e["plate_gap"]) / (1.0 + e["voltage"])
    return new / start, drive * droplet_mobility(start, c) / mobility


def shared_sensitivities(model: DropletModel) -> Floats:
    """Sensitivities of a droplet's radius and charge to the errors of the bench.

    Parameters
    ----------
    model : DropletModel
        The droplet as it was evaluated.

    Returns
    -------
    sensitivities : ndarray of shape (2, 10)
        d ln radius (row 0) and d ln charge (row 1) by each of `SHARED_INPUTS`; central differences.
    """
    step = 1e-4
    moves = step * np.eye(len(SHARED_INPUTS))
    moves = np.concatenate([moves, -moves])
    ratios = np.stack(shared_effect(model, dict(zip(SHARED_INPUTS, moves.T, strict=True))))
    logs = np.log(ratios)
    return np.asarray((logs[:, : len(SHARED_INPUTS)] - logs[:, len(SHARED_INPUTS) :]) / (2.0 * step))


def shared_covariance(sensitivities: ArrayLike, stds: ArrayLike, *, values: ArrayLike = 1.0) -> Floats:
    """Covariance between droplets of one bench that the shared inputs cause.

    Parameters
    ----------
    sensitivities : array_like of shape (N, K)
        Of each droplet to each shared input, as rows of `shared_sensitivities`.
    stds : array_like of shape (K,)
        Of the shared inputs, as from `shared_errors`.
    values : array_like of shape () or (N,), optional
        Charges (or radii) in SI, to get their covariance; 1: relative covariance.

    Returns
    -------
    covariance : ndarray of shape (N, N)
        Symmetric, of rank K at most. Droplets' own variances are to be added on the diagonal.

    Raises
    ------
    PhysicsError
        If the shapes do not fit.
    """
    matrix = np.asarray(sensitivities, dtype=np.float64)
    errors = np.asarray(stds, dtype=np.float64)
    if matrix.ndim != 2 or errors.shape != matrix.shape[1:]:
        raise PhysicsError("sensitivities", matrix.shape, f"of shape (N, {errors.size})")
    scaled = (
        matrix * errors * np.broadcast_to(np.asarray(values, dtype=np.float64), matrix.shape[:1])[:, None]
    )
    return np.asarray(scaled @ scaled.T)


def droplet_budget(
    value: float,
    own_std: float,
    sensitivities: ArrayLike,
    inputs: Mapping[str, Estimate],
    *,
    quantity: str = "charge",
) -> Budget:
    """Budget of one droplet's charge or radius by linear propagation.

    Parameters
    ----------
    value : float
        Charge in C, or radius in m.
    own_std : float
        Standard uncertainty from the droplet's own motion, in the unit of `value`.
    sensitivities : array_like of shape (10,)
        d ln value by each of `SHARED_INPUTS`.
    inputs : mapping
        As for `shared_errors`.
    quantity : str, optional
        ``"charge"`` or ``"radius"``.

    Returns
    -------
    Budget
        With the row ``own`` and one row per input that is given; normal interval at 95 %.

    Raises
    ------
    PhysicsError
        If the quantity is another one, or as for `shared_errors`.

    References
    ----------
    .. [1] JCGM 100:2008, 8.1 to 8.8.
    """
    if quantity not in ("charge", "radius"):
        raise PhysicsError("quantity", quantity, "charge or radius")
    unit = "C" if quantity == "charge" else "m"
    slopes = value * np.asarray(sensitivities, dtype=np.float64)
    return _assemble(quantity, unit, value, own_std=own_std, slopes=slopes, inputs=inputs)


def bench_budget(sensitivities: ArrayLike, inputs: Mapping[str, Estimate], *, weights: ArrayLike) -> Budget:
    """Budget of the factor that a bench puts on all its charges alike.

    Parameters
    ----------
    sensitivities : array_like of shape (N, 10)
        d ln charge of each droplet by each of `SHARED_INPUTS`.
    inputs : mapping
        As for `shared_errors`.
    weights : array_like of shape (N,)
        Of the droplets in the mean, such as (n / own_std)^2 for a charge unit; not all 0.

    Returns
    -------
    Budget
        Of ``charge factor``, value 1; its own part is 0.

    Raises
    ------
    PhysicsError
        If a weight is negative or all are 0, or as for `shared_errors`.
    """
    share = np.asarray(weights, dtype=np.float64)
    if not share.sum() > 0.0 or np.any(share < 0.0):
        raise PhysicsError("weights", share.tolist(), "0 or more, and not all 0")
    slopes = share @ np.asarray(sensitivities, dtype=np.float64) / share.sum()
    return _assemble("charge factor", "1", 1.0, own_std=0.0, slopes=slopes, inputs=inputs)


def checked_budget(
    budget: Budget,
    model: DropletModel,
    own_covariance: ArrayLike,
    inputs: Mapping[str, Estimate],
    rng: np.random.Generator,
    *,
    digits: int = 2,
) -> Budget:
    """Check a droplet's linear budget by Monte Carlo, and state that result where the two disagree.

    Parameters
    ----------
    budget : Budget
        From `droplet_budget`.
    model : DropletModel
        The droplet as it was evaluated.
    own_covariance : array_like of shape (2, 2)
        Own covariance of (ln radius, charge in C).
    inputs : mapping
        As for `shared_errors`; normal, the models of viscosity and slip too.
    rng : Generator
        Source of randomness.
    digits : int, optional
        Significant digits of the uncertainty that must agree.

    Returns
    -------
    Budget
        The same, its note saying that it was checked; or value, std and interval of Monte Carlo, its note
        saying by how much the linear interval is off.

    References
    ----------
    .. [1] JCGM 101:2008, clauses 7 and 8.
    """
    simulated = _simulate(budget.quantity, model, own_covariance, inputs, rng, digits=digits)
    check = validate_linear(
        budget.value, budget.std, coverage=1.959963984540054, simulated=simulated, digits=digits
    )
    worst = max(check.low_difference, check.high_difference)
    found = (
        f"{simulated.trials} draws: the ends of the 95 % interval differ by at most {worst:.2g} {budget.unit}"
    )
    if check.valid:
        return replace(budget, note=f"linear propagation agrees with {found}")
    return replace(
        budget,
        value=simulated.mean,
        std=simulated.std,
        interval_95=simulated.symmetric,
        method="monte carlo",
        note=f"Monte Carlo, as linear propagation fails: {found}, allowed {check.tolerance:.1g}",
    )


def explaining_errors(ratio: float, budget: Budget) -> dict[str, float]:
    """Single error of each shared input that would explain a charge unit off by a ratio.

    Parameters
    ----------
    ratio : float
        Measured over expected, > 0.
    budget : Budget
        From `bench_budget`.

    Returns
    -------
    errors : dict of str to float
        Relative error of the stated value of each input (absolute for the relative humidity), stated less
        true over true: 0.008 for ``scale`` reads "the stated scale is 0.8 % too large". Inputs whose
        sensitivity is below 0.05 are left out, since no sensible error of theirs explains anything.

    Raises
    ------
    PhysicsError
        If the ratio is not finite and above 0.
    """
    if not 0.0 < ratio < math.inf:
        raise PhysicsError("ratio", ratio, "finite and above 0")
    relative = {
        row.input: row.sensitivity * (1.0 if row.input == "relative_humidity" else row.value)
        for row in budget.rows
    }
    return {
        name: math.log(ratio) / slope if name == "relative_humidity" else math.expm1(math.log(ratio) / slope)
        for name, slope in relative.items()
        if name in SHARED_UNITS and abs(slope) >= 0.05
    }


def _dry_air(conditions: Conditions) -> Air:
    """Dry air of the temperature and mean free path of some conditions."""
    unit = dry_mean_free_path(conditions.temperature, 1.0)
    pressure = min(max(unit / conditions.mean_free_path, PRESSURE_RANGE[0]), PRESSURE_RANGE[1])
    return moist_air(conditions.temperature, pressure)


def _assemble(
    quantity: str, unit: str, value: float, *, own_std: float, slopes: Floats, inputs: Mapping[str, Estimate]
) -> Budget:
    """Rows and sums of a budget from slopes of the value by each input as counted here."""
    errors = shared_errors(inputs)
    parts = slopes * errors
    shared_std = float(np.sqrt(np.sum(parts**2)))
    std = math.hypot(own_std, shared_std)
    rows = [BudgetRow("own", value, unit, own_std, 1.0, (own_std / std) ** 2 if std > 0.0 else 0.0)]
    for name, estimate in inputs.items():
        index = SHARED_INPUTS.index(name)
        reference = 1.0 if name == "relative_humidity" else abs(estimate.value)
        share = float(parts[index] / std) ** 2 if std > 0.0 else 0.0
        slope = float(slopes[index]) / reference
        rows.append(BudgetRow(name, estimate.value, SHARED_UNITS[name], estimate.std, slope, share))
    half = 1.959963984540054 * std
    ordered = tuple(sorted(rows, key=lambda row: -row.share))
    return Budget(quantity, unit, value, std, own_std, shared_std, ordered, (value - half, value + half))


def _simulate(
    quantity: str,
    model: DropletModel,
    own_covariance: ArrayLike,
    inputs: Mapping[str, Estimate],
    rng: np.random.Generator,
    *,
    digits: int,
) -> MonteCarlo:
    """Monte Carlo of charge or radius over own motion and shared inputs."""

    def result(log_radius: Floats, charge: Floats, *errors: Floats) -> Floats:
        named = dict(zip(SHARED_INPUTS, errors, strict=True))
        by_radius, by_charge = shared_effect(model, named, radius=np.exp(log_radius))
        return np.exp(log_radius) * by_radius if quantity == "radius" else charge * by_charge

    draws = [joint_normal((math.log(model.radius), model.charge), own_covariance)]
    draws.extend(normal(0.0, float(std)) for std in shared_errors(inputs))
    return monte_carlo(result, draws, rng, trials=Trials(digits=digits, share=0.2))
