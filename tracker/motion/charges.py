"""What the charges of a recording share: the bench's part of their uncertainty, charge numbers, the charge unit."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from physics.budget import SHARED_INPUTS, bench_budget, shared_errors
from physics.quanta import ChargeNumbers, ChargeUnit, charge_sample, number_probabilities, pooled_charge_unit
from tracker.bench import Bench
from tracker.motion.droplet import Droplet
from tracker.motion.rows import NAN, DropletRow
from tracker.records import FloatArray, IntArray

LEAST_LEFT = 0.1  # of a variance when the part of the air is taken out


@dataclass(frozen=True, slots=True)
class SharedStds:
    """Shared parts of the standard uncertainties of one droplet."""

    charge: float  # C
    log_radius: float
    log_speed: float


@dataclass(frozen=True, slots=True)
class SharedPart:
    """What the bench's inputs, and the air that carries them, put on all charges of a recording alike."""

    errors: FloatArray  # (10,) of SHARED_INPUTS
    sensitivities: FloatArray  # (droplets, 10) d ln charge; nan without charge
    radius_sensitivities: FloatArray  # (droplets, 10) d ln radius; nan without radius
    std: FloatArray  # (droplets,) C
    bench: Bench
    air_std: float = 0.0  # m/s, of the air current; it is in the droplets' own uncertainty

    @classmethod
    def of(cls, droplets: list[Droplet], bench: Bench, air_std: float) -> SharedPart:
        """Gather the sensitivities of all droplets."""
        errors = shared_errors(bench.shared_inputs)
        table, radius = np.full((2, len(droplets), len(SHARED_INPUTS)), np.nan)
        charge = np.array([d.charge for d in droplets]).reshape(-1, 2)
        for i, droplet in enumerate(droplets):
            p = droplet.posterior
            if p is not None and p.sensitivities:
                radius[i] = [p.sensitivities[name][0] for name in SHARED_INPUTS]
            if p is not None and p.main_part >= 0:
                table[i] = [p.sensitivities[name][1] for name in SHARED_INPUTS]
        # As in the sensitivities, a charge of 0 counts as one standard deviation.
        size = np.maximum(np.abs(charge[:, 0]), charge[:, 1])
        std = size * np.sqrt(np.sum((table * errors) ** 2, axis=1))
        return cls(errors, table, radius, std, bench, air_std)

    @property
    def relative(self) -> FloatArray:
        """(droplets,) relative standard uncertainty of the charge."""
        return np.asarray(np.sqrt(np.sum((self.sensitivities * self.errors) ** 2, axis=1)))

    def of_droplet(self, i: int) -> SharedStds:
        """Shared standard uncertainties of one droplet: charge in C, radius and fall speed relative."""
        radius = float(np.sqrt(np.sum((self.radius_sensitivities[i] * self.errors) ** 2)))
        return SharedStds(float(self.std[i]), radius, float(self.errors[SHARED_INPUTS.index("scale")]))

    def budget(self, droplets: list[Droplet], rows: list[DropletRow]) -> dict[str, Any]:
        """Budget of the factor on all charges, sensitivities from which covariances follow, own part of radii."""
        plain: dict[str, Any] = {
            "inputs": list(SHARED_INPUTS), "errors": self.errors.tolist(),
            "log_charge_sensitivities": {
                str(row.droplet): line.tolist()
                for row, line in zip(rows, self.sensitivities, strict=True) if np.all(np.isfinite(line))
            },
            "log_radius_own_stds": {
                str(row.droplet): droplet.posterior.log_radius_std
                for row, droplet in zip(rows, droplets, strict=True)
                if droplet.posterior is not None and np.isfinite(droplet.posterior.log_radius_std)
            },
        }  # fmt: skip
        charge = np.array([d.charge for d in droplets]).reshape(-1, 2)
        good = np.all(np.isfinite(self.sensitivities), axis=1) & (np.abs(charge[:, 0]) > 0)
        if np.any(good):
            weights = (charge[good, 0] / charge[good, 1]) ** 2
            made = bench_budget(self.sensitivities[good], self.bench.shared_inputs, weights=weights)
            plain["charge_factor_std"] = made.std
            plain["charge_factor"] = [
                {"input": r.input, "value": r.value, "unit": r.unit, "std": r.std, "sensitivity": r.sensitivity,
                 "share": r.share} for r in made.rows if r.input != "own"
            ]  # fmt: skip
        return plain


@dataclass(frozen=True, slots=True)
class Number:
    """Charge number of one droplet."""

    number: int | None = None
    probability: float = NAN
    none: float = NAN  # probability that the charge is on no whole number
    values: IntArray | None = None  # (K,) the numbers that were weighed
    shares: FloatArray | None = None  # (K,) their probabilities


def charge_numbers(droplets: list[Droplet], shared: SharedPart) -> list[Number]:
    """Find the charge numbers of all droplets together with the factor that they share.

    Parameters
    ----------
    droplets : list of Droplet
        With posteriors.
    shared : SharedPart
        Of the same droplets.

    Returns
    -------
    numbers : list of Number
        One for each droplet; empty where there is no charge.
    """
    charge = np.array([d.charge for d in droplets]).reshape(-1, 2)
    good = np.flatnonzero(np.all(np.isfinite(charge), axis=1) & (charge[:, 1] > 0))
    found = [Number() for _ in droplets]
    if len(good) == 0:
        return found
    posteriors = [droplets[i].posterior for i in good]
    numbers: ChargeNumbers = number_probabilities(
        charge[good, 0], charge[good, 1], shared_rel_std=np.minimum(shared.relative[good], 0.24),
        log_likelihoods=[None if p is None else p.charge_log_density for p in posteriors],
    )  # fmt: skip
    for k, i in enumerate(good):
        found[i] = Number(
            int(numbers.number[k]), float(numbers.probability[k]), float(numbers.outlier_probability[k]),
            numbers.number_values[k], numbers.number_probability[k],
        )  # fmt: skip
    return found


def charge_unit_of(droplets: list[Droplet], rows: list[DropletRow], shared: SharedPart) -> ChargeUnit:
    """Find the charge unit of a recording, without assuming the elementary charge.

    Parameters
    ----------
    droplets : list of Droplet
        With posteriors.
    rows : list of DropletRow
        Of the same droplets; only those that are kept take part.
    shared : SharedPart
        Of the same droplets.

    Returns
    -------
    unit : ChargeUnit
        A droplet that changed its charge gives two charges with their covariance.

    Notes
    -----
    The air current is common to all droplets: with the change g of a charge with the air speed, (g std)^2 is taken
    out of the own variance, exactly so for normal errors, and the mean of g std / charge, weighted as the charges
    are, joins the shared uncertainty, which does not fall with the number of droplets.
    """
    singles, pairs, weights, by_air = [], [], [], []
    for droplet, row in zip(droplets, rows, strict=True):
        p = droplet.posterior
        if row.verdict != "keep" or p is None or not np.isfinite(row.charge_c):
            continue
        seen = np.flatnonzero(np.isfinite(p.charge))
        air = p.charge_per_air_speed * shared.air_std
        size = max(abs(row.charge_c), 1e-30)
        weights.append((row.charge_c / row.charge_own_std_c) ** 2)
        by_air.append(abs(air[p.main_part]) / size)
        if len(seen) > 1:
            two = _two_longest(droplet, seen)
            pairs.append((p.charge[two], _without_air(p.charge_cov[np.ix_(two, two)], air[two])))
        else:
            by_radius = p.radius_weight @ (p.charge_at_radius[:, p.main_part] - row.charge_c) ** 2
            own = float(_without_air(np.array([[row.charge_own_std_c**2]]), air[[p.main_part]])[0, 0])
            rest = max(by_radius - air[p.main_part] ** 2, 0.0)
            singles.append((row.charge_c, np.sqrt(own), np.sqrt(rest) / size))
    table = np.array(singles).reshape(-1, 3)
    relative = shared.relative[np.isfinite(shared.relative)]
    common = float(np.median(relative)) if len(relative) else 0.0
    current = float(np.average(by_air, weights=weights)) if np.sum(weights) > 0 else 0.0
    sample = charge_sample(
        table[:, 0], table[:, 1], rel_stds=np.minimum(table[:, 2], 1.0),
        shared_rel_std=float(np.hypot(common, current)),
        pairs=(np.array([q for q, _ in pairs]), np.array([c for _, c in pairs])) if pairs else None,
    )  # fmt: skip
    return pooled_charge_unit((sample,))


def _without_air(covariance: FloatArray, air: FloatArray) -> FloatArray:
    """Own covariance of charges without the air current's part; at least a tenth of every variance stays."""
    share = float(air @ np.linalg.solve(covariance, air))  # of the variance along the air's direction
    part = min(1.0, (1 - LEAST_LEFT) / share) if share > 0 else 0.0
    return np.asarray(covariance - part * np.outer(air, air))


def _two_longest(droplet: Droplet, seen: IntArray) -> IntArray:
    """Two charge parts with the most steps, in order of time."""
    part = np.empty(0, np.int64) if droplet.history is None else droplet.history.steps.part
    length = np.bincount(part, minlength=int(seen.max()) + 1)
    return np.sort(seen[np.argsort(length[seen])[::-1][:2]])


def unit_json(unit: ChargeUnit) -> dict[str, Any]:
    """Give a charge unit as plain values.

    Parameters
    ----------
    unit : ChargeUnit
        Of one recording.

    Returns
    -------
    values : dict
        None where it is not resolved.
    """
    values = {
        "charge_unit_c": unit.unit, "charge_unit_std_c": unit.unit_std, "charge_unit_own_std_c": unit.unit_own_std,
        "charge_unit_shared_std_c": unit.unit_shared_std, "over_e": unit.over_e, "over_e_std": unit.over_e_std,
        "best_c": unit.best, "log_ratio": unit.log_ratio, "margin": unit.margin,
    }  # fmt: skip
    plain: dict[str, Any] = {key: value if np.isfinite(value) else None for key, value in values.items()}
    return plain | {
        "resolved": unit.resolved, "reason": unit.reason, "droplets_used": unit.droplets_used,
        "rivals": [list(rival) for rival in unit.rivals],
    }  # fmt: skip
