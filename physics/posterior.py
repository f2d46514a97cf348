"""Radius and charges of one droplet from its steps: joint posterior over radius, charges and place noise.

The law ties three things to one radius: fall speed v_g(r), mobility B(r) and diffusion D(r) = k T B(r). For each
radius and each noise ratio rho the charges are Gaussian in closed form, so the posterior is a sum over a grid of
(ln r, ln rho). Place noise and side drift are integrated out, never held at their best values. Flat priors in
ln r, ln rho, side drift and charge: a charge may be 0 or of either sign, and no charge quantum is assumed.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr

from physics.drag import slip_correction, slip_model
from physics.droplet import BOLTZMANN, ELEMENTARY_CHARGE, Conditions, mass, weight
from physics.errors import PhysicsError
from physics.freefit import FreeFit, free_fit
from physics.increments import FloatArray, Increments, freeze_arrays
from physics.likelihood import MIN_INCREMENTS, Sums
from physics.responses import STEP, input_responses

__all__ = ["NO_CHARGE_REASONS", "DropletPosterior", "droplet_posterior"]

NO_CHARGE_REASONS: Mapping[str, str] = {
    "too_few_steps": f"fewer than {MIN_INCREMENTS} steps between sightings",
    "never_field_on": "never seen with the field on",
    "not_falling": "does not fall: its speed without field is not downward within 5 standard deviations",
    "out_of_range": "falls or diffuses like no droplet from 0.03 to 15 um",
}
RADIUS_RANGE = (3e-8, 1.5e-5)  # m; below, a droplet diffuses out of sight, above, Stokes' law has ended
RADIUS_POINTS = 80  # an eighth of a standard deviation apart; the sum is exact to round-off at one
SPEED_SPAN, DIFFUSION_SPAN = 5.0, 6.0  # standard deviations of either that the radius grid holds
LEAST_NUMBERS, MOST_NUMBERS = 10, 2000  # charge numbers beyond are never resolved
RATIO_LIMIT = 0.3  # relative uncertainty of the fall speed up to which diffusion is compared with it


@dataclass(frozen=True, slots=True)
class DropletPosterior:
    """What one track says of radius and charge; all uncertainties are the droplet's own, none is shared.

    `reason` is empty if every part that counts has a charge; else a key of `NO_CHARGE_REASONS`, and the values
    that could not be had are NaN.
    """

    reason: str
    radius: float  # m, posterior mean of ln r, as a radius
    radius_std: float  # m
    log_radius_std: float
    radius_interval_68: tuple[float, float]  # m, equal tails
    radius_interval_95: tuple[float, float]  # m
    charge: FloatArray  # (parts,) C, posterior mean; NaN for a part that never saw the field
    charge_std: FloatArray  # (parts,) C
    charge_cov: FloatArray  # (parts, parts) C^2, the common radius makes parts covary
    charge_interval_68: FloatArray  # (parts, 2) C, equal tails
    charge_interval_95: FloatArray  # (parts, 2) C
    fall_speed: float  # m/s, terminal speed in still air
    fall_speed_std: float  # m/s
    mass: float  # kg
    mass_std: float  # kg
    diffusion_ratio: float  # free D over that of the radius from the fall speed; NaN if the latter is vague
    diffusion_z: float  # ln(diffusion_ratio) over its standard deviation
    diffusion_speed_std: float  # part of that standard deviation that comes from the fall speed
    inconsistent: bool  # fall speed and Brownian motion point to radii that do not overlap
    main_part: int  # longest part that saw the field; -1 if none
    number_values: NDArray[np.int64]  # (M,) charge numbers, -nmax..nmax, 8 deviations beyond the charges
    number_log_likelihood: FloatArray  # (M,) of the main part, up to a constant; no prior
    part_number_log_likelihood: FloatArray  # (parts, M), NaN rows for parts without charge
    log_radius: FloatArray  # (R,) ln m, grid
    radius_weight: FloatArray  # (R,) posterior probability, sum 1
    charge_at_radius: FloatArray  # (R, parts) C, mean of the charge given the radius
    charge_std_at_radius: FloatArray  # (R, parts) C
    sensitivities: Mapping[str, tuple[float, float]]  # `input_responses` -> d ln r, d ln q of the main part
    charge_sensitivities: Mapping[str, FloatArray]  # `input_responses` -> (parts,) d ln q
    charge_per_air_speed: FloatArray  # (parts,) C per m/s, change of the charge with the air speed assumed
    free: FreeFit | None  # the fit without the law; None with too few steps

    def __post_init__(self) -> None:
        freeze_arrays(self, _POSTERIOR_ARRAYS)

    def charge_log_density(self, charge: ArrayLike, *, part: int | None = None) -> FloatArray:
        """Log posterior density of a charge: the mixture itself, no normal approximation.

        Parameters
        ----------
        charge : array_like of shape (M,)
            In C.
        part : int, optional
            Charge part; `main_part` if not given.

        Returns
        -------
        log_density : ndarray of shape (M,)
            Per C; NaN if the part has no charge.
        """
        chosen = self.main_part if part is None else part
        value = np.atleast_1d(np.asarray(charge, dtype=np.float64))
        if chosen < 0 or not np.isfinite(self.charge[chosen]):
            return np.full(value.shape, np.nan)
        return _log_density(
            value, self.radius_weight, self.charge_at_radius[:, chosen], self.charge_std_at_radius[:, chosen]
        )


_POSTERIOR_ARRAYS = (
    "charge", "charge_std", "charge_cov", "charge_interval_68", "charge_interval_95", "number_values",
    "number_log_likelihood", "part_number_log_likelihood", "log_radius", "radius_weight", "charge_at_radius",
    "charge_std_at_radius", "charge_per_air_speed",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Law:
    """What the law says on a grid of radii."""

    log_radius: FloatArray  # (R,)
    speed: FloatArray  # (R,) m/s, in still air
    mobility: FloatArray  # (R,) s/kg
    diffusion: FloatArray  # (R,) m^2/s


def law_at(log_radius: FloatArray, conditions: Conditions, *, slip_factor: float = 1.0) -> Law:
    """Evaluate the law; `slip_factor` multiplies the slip term Cc - 1."""
    radius = np.exp(log_radius)
    path, slip = conditions.mean_free_path, conditions.slip
    correction = slip_correction(radius, mean_free_path=path, slip=slip, slip_factor=slip_factor)
    mobility = correction / (6 * np.pi * conditions.viscosity * radius)
    thermal = BOLTZMANN * conditions.temperature
    return Law(log_radius, weight(radius, conditions) * mobility, mobility, thermal * mobility)


def law_table(conditions: Conditions) -> Law:
    """Evaluate the law on all radii that can be measured and that the slip model holds for."""
    model = slip_model(conditions.slip)
    smallest = 1.001 * model.path_factor * conditions.mean_free_path / model.kn_high
    return law_at(
        np.linspace(np.log(max(RADIUS_RANGE[0], smallest)), np.log(RADIUS_RANGE[1]), 300), conditions
    )


@dataclass(frozen=True, slots=True)
class _Mixture:
    """Posterior on a radius grid, rho integrated; P parts that saw the field."""

    log_radius: FloatArray  # (R,)
    weight: FloatArray  # (R,) sum 1
    charge: FloatArray  # (R, P)
    charge_cov: FloatArray  # (R, P, P)

    @property
    def mean_log_radius(self) -> float:
        """Posterior mean of ln r."""
        return float(self.weight @ self.log_radius)

    @property
    def mean_charge(self) -> FloatArray:
        """Posterior mean of the charges (P,)."""
        return np.asarray(self.weight @ self.charge)


def _log_likelihood(
    sums: Sums, law: Law, air_speed: float, air_std: float, scale: FloatArray | float = 1.0
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Log likelihood (R, K) with charges, side drift and air speed integrated; mean and variance of the drift.

    The drift is w = v_g + u with the air's u normal. Completing the square in w gives all three in closed form,
    also where drift and drive are one column (sums.drift = 0). `scale` multiplies all lengths that were seen.
    """
    speed, diffusion = (law.speed + air_speed)[:, None], law.diffusion[:, None]
    data = scale**2 * (sums.data + sums.side_data)
    cross = scale * sums.drift_data
    spread = 1 + sums.drift * air_std**2 / diffusion
    chi2 = data + (sums.drift * speed**2 - 2 * speed * cross - air_std**2 * cross**2 / diffusion) / spread
    parts = len(sums.parts)
    constant = sums.log_det + sums.log_det_drive + np.log(sums.side_drift) - 2 * sums.log_width
    value = (
        -0.5 * (2 * sums.count - parts - 1) * np.log(diffusion) - parts * np.log(law.mobility)[:, None]
        - 0.5 * (constant + np.log(spread) + chi2 / diffusion)
    )  # fmt: skip
    return value, (speed + air_std**2 * cross / diffusion) / spread, air_std**2 / spread


def _mixture(sums: Sums, law: Law, gap: float, *, air_speed: float, air_std: float) -> _Mixture:
    """Posterior on the radius grid: weight, and moments of the charges given the radius."""
    value, drift, drift_var = _log_likelihood(sums, law, air_speed, air_std)
    joint = np.exp(value - value.max())
    of_radius = joint.sum(axis=1)
    given = joint / np.maximum(of_radius, 1e-300)[:, None]  # p(rho | r)
    drive = sums.drive - sums.drive_slope * drift[:, :, None]
    mean = np.einsum("rk,rkp->rp", given, drive)
    off = drive - mean[:, None, :]
    slopes = sums.drive_slope[:, :, None] * sums.drive_slope[:, None, :]
    cov = (
        law.diffusion[:, None, None] * np.einsum("rk,kpq->rpq", given, sums.drive_cov)
        + np.einsum("rk,kpq->rpq", given * drift_var, slopes)
        + np.einsum("rk,rkp,rkq->rpq", given, off, off)
    )
    per_drive = gap / law.mobility
    charge, charge_cov = mean * per_drive[:, None], cov * per_drive[:, None, None] ** 2
    return _Mixture(law.log_radius, of_radius / of_radius.sum(), charge, charge_cov)


def radius_span(
    fit: FreeFit, table: Law, air_speed: float, air_std: float
) -> tuple[float, float, bool] | None:
    """Range of ln r that fall speed and diffusion leave, and whether they exclude each other; None: not falling."""
    log_d = np.log(fit.diffusion) + DIFFUSION_SPAN * fit.log_diffusion_std * np.array([1.0, -1.0])
    by_motion = np.interp(-log_d, -np.log(table.diffusion), table.log_radius)
    if not np.isfinite(fit.fall_speed):
        return float(by_motion[0]), float(by_motion[1]), False
    reach = SPEED_SPAN * np.hypot(fit.fall_speed_std, air_std)
    speeds = fit.fall_speed - air_speed + reach * np.array([-1.0, 1.0])
    if speeds[1] <= table.speed[0]:
        return None
    by_speed = np.interp(speeds, table.speed, table.log_radius)
    low, high = max(by_motion[0], by_speed[0]), min(by_motion[1], by_speed[1])
    apart = bool(low >= high)
    if apart:
        low, high = min(by_motion[0], by_speed[0]), max(by_motion[1], by_speed[1])
    return float(low), float(high), apart


def _settled_mixture(
    sums: Sums, span: tuple[float, float], conditions: Conditions, air_speed: float, air_std: float
) -> tuple[Law, _Mixture]:
    """Posterior on a radius grid that is narrowed until at least a third of its points carry it."""
    for _ in range(4):
        law = law_at(np.linspace(*span, RADIUS_POINTS), conditions)
        mixture = _mixture(sums, law, conditions.plate_gap, air_speed=air_speed, air_std=air_std)
        carrying = np.flatnonzero(mixture.weight > 1e-8 * mixture.weight.max())
        if len(carrying) >= RADIUS_POINTS // 3:
            break
        first, last = max(carrying[0] - 1, 0), min(carrying[-1] + 1, RADIUS_POINTS - 1)
        span = (float(law.log_radius[first]), float(law.log_radius[last]))
    rows = slice(carrying[0], carrying[-1] + 1)
    law = Law(*(getattr(law, name)[rows] for name in ("log_radius", "speed", "mobility", "diffusion")))
    return law, _mixture(sums, law, conditions.plate_gap, air_speed=air_speed, air_std=air_std)


def droplet_posterior(
    steps: Increments,
    conditions: Conditions,
    *,
    air_speed: float = 0.0,
    air_speed_std: float = 0.0,
    responses: Mapping[str, Mapping[str, float]] | None = None,
    fit: FreeFit | None = None,
) -> DropletPosterior:
    """Joint posterior of radius and charges of one droplet.

    Parameters
    ----------
    steps : Increments
        All segments and charge parts of the droplet together.
    conditions : Conditions
        Air, oil, gravity, plate gap, slip model: taken as exact here, their doubt goes through `sensitivities`.
    air_speed, air_speed_std : float
        Vertical speed of the air in m/s, downward, and its standard uncertainty (normal): it adds to the fall
        speed and is integrated out, so that its doubt is part of the standard deviations of the result.
    responses : mapping, optional
        As `input_responses` gives; None calls it.
    fit : FreeFit, optional
        Of these steps, if it was made already.

    Returns
    -------
    posterior : DropletPosterior
        With a reason and NaN in place of what could not be had.

    Raises
    ------
    PhysicsError
        If `air_speed` is not finite or `air_speed_std` is negative.

    Notes
    -----
    Brownian motion of both axes takes part in the radius. Of free fit, noise grid and radius grid nothing is
    frozen: with the noise held at its best value a 68 % interval would hold 46 %.
    """
    if not np.isfinite(air_speed):
        raise PhysicsError("air_speed", air_speed, "finite")
    if not air_speed_std >= 0:
        raise PhysicsError("air_speed_std", air_speed_std, "0 m/s or more")
    if len(steps) < MIN_INCREMENTS:
        return _empty("too_few_steps", steps.parts, None)
    fit = free_fit(steps) if fit is None else fit
    sums = fit.grid
    table = law_table(conditions)
    span = radius_span(fit, table, air_speed, air_speed_std)
    if span is None or not span[1] > span[0]:
        return _empty("not_falling" if span is None else "out_of_range", steps.parts, fit)
    law, mixture = _settled_mixture(sums, span[:2], conditions, air_speed, air_speed_std)
    result = replace(
        _empty("" if len(sums.parts) else "never_field_on", steps.parts, fit), inconsistent=span[2],
        **_radius_results(mixture, law, conditions),
        **_diffusion_check(fit, table, air_speed, air_speed_std),
    )  # fmt: skip
    changes = _primitive_changes(sums, law, mixture, conditions, air_speed, air_speed_std)
    result = replace(result, **_charge_results(result, steps, sums, mixture))
    by_air = result.charge_per_air_speed.copy()
    by_air[sums.parts] = changes.pop("air")[1] / float(mixture.weight @ law.speed)
    result = replace(result, charge_per_air_speed=by_air)
    return replace(result, **_sensitivities(result, sums, changes, responses or input_responses(conditions)))


def _empty(reason: str, parts: int, fit: FreeFit | None) -> DropletPosterior:
    """Result in which nothing could be had."""
    nan, none = float("nan"), np.empty(0)
    return DropletPosterior(
        reason=reason, radius=nan, radius_std=nan, log_radius_std=nan, radius_interval_68=(nan, nan),
        radius_interval_95=(nan, nan), charge=np.full(parts, nan), charge_std=np.full(parts, nan),
        charge_cov=np.full((parts, parts), nan), charge_interval_68=np.full((parts, 2), nan),
        charge_interval_95=np.full((parts, 2), nan), fall_speed=nan, fall_speed_std=nan, mass=nan, mass_std=nan,
        diffusion_ratio=nan, diffusion_z=nan, diffusion_speed_std=nan, inconsistent=False, main_part=-1,
        number_values=np.empty(0, np.int64), number_log_likelihood=none,
        part_number_log_likelihood=np.empty((parts, 0)), log_radius=none, radius_weight=none,
        charge_at_radius=np.empty((0, parts)), charge_std_at_radius=np.empty((0, parts)),
        sensitivities={}, charge_sensitivities={}, charge_per_air_speed=np.full(parts, nan), free=fit,
    )  # fmt: skip


def moments(weight: FloatArray, values: FloatArray) -> tuple[float, float]:
    """Mean and standard deviation of values with weights."""
    mean = float(weight @ values)
    return mean, float(np.sqrt(weight @ (values - mean) ** 2))


def _quantiles(grid: FloatArray, weight: FloatArray, levels: Sequence[float]) -> FloatArray:
    """Quantiles of a density given by its weights at the points of an even grid."""
    cumulative = np.concatenate([[0.0], np.cumsum(0.5 * (weight[1:] + weight[:-1]))])
    return np.asarray(np.interp(np.asarray(levels) * cumulative[-1], cumulative, grid))


LEVELS_68 = (0.5 - 0.6826894921370859 / 2, 0.5 + 0.6826894921370859 / 2)
LEVELS_95 = (0.025, 0.975)


def _radius_results(mixture: _Mixture, law: Law, conditions: Conditions) -> dict[str, Any]:
    """Radius, fall speed and mass from the weights of the radii."""
    weights = mixture.weight
    log_mean, log_std = moments(weights, mixture.log_radius)
    radius = np.exp(mixture.log_radius)
    speed = moments(weights, law.speed)
    masses = moments(weights, mass(radius, conditions))
    edges = np.exp(_quantiles(mixture.log_radius, weights, LEVELS_68 + LEVELS_95)).tolist()
    return {
        "radius": float(np.exp(log_mean)), "radius_std": moments(weights, radius)[1], "log_radius_std": log_std,
        "radius_interval_68": tuple(edges[:2]), "radius_interval_95": tuple(edges[2:]),
        "fall_speed": speed[0], "fall_speed_std": speed[1], "mass": masses[0], "mass_std": masses[1],
        "log_radius": mixture.log_radius, "radius_weight": weights,
    }  # fmt: skip


def _diffusion_check(fit: FreeFit, table: Law, air_speed: float, air_std: float) -> dict[str, Any]:
    """Free diffusion over that of the radius from the fall speed, and its z."""
    speed = fit.fall_speed - air_speed
    if not table.speed[0] < speed < table.speed[-1]:
        return {}
    log_speed, log_diffusion = np.log(table.speed), np.log(table.diffusion)
    law_diffusion = float(np.exp(np.interp(np.log(speed), log_speed, log_diffusion)))
    slope = float(np.interp(np.log(speed), log_speed, np.gradient(log_diffusion, log_speed)))
    # the law's diffusion in the speed's variance: a large free value must not widen its own test
    variance = fit.fall_speed_std**2 * law_diffusion / fit.diffusion + air_std**2
    if variance > (RATIO_LIMIT * speed) ** 2:
        return {}
    log_ratio, by_speed = (
        float(np.log(fit.diffusion / law_diffusion)),
        abs(slope) * float(np.sqrt(variance)) / speed,
    )
    return {
        "diffusion_ratio": float(np.exp(log_ratio)), "diffusion_speed_std": by_speed,
        "diffusion_z": log_ratio / float(np.hypot(fit.log_diffusion_std, by_speed)),
    }  # fmt: skip


def _charge_results(
    empty: DropletPosterior, steps: Increments, sums: Sums, mixture: _Mixture
) -> dict[str, Any]:
    """Charges, their covariance and intervals, and the likelihood of the charge numbers."""
    if not len(sums.parts):
        return {}
    seen, weights, parts = sums.parts, mixture.weight, steps.parts
    mean = mixture.mean_charge
    off = mixture.charge - mean
    cov = np.einsum("r,rpq->pq", weights, mixture.charge_cov + off[:, :, None] * off[:, None, :])
    std = np.sqrt(np.diag(cov))
    own: FloatArray = np.sqrt(np.einsum("rpp->rp", mixture.charge_cov))
    reach = float(np.max(np.abs(mean) + 8 * std)) / ELEMENTARY_CHARGE
    most = int(np.clip(np.ceil(reach), LEAST_NUMBERS, MOST_NUMBERS))
    numbers = np.arange(-most, most + 1)
    at_numbers = np.asarray(numbers * ELEMENTARY_CHARGE, dtype=np.float64)
    likelihood = np.full((parts, len(numbers)), np.nan)
    edges = np.full((parts, 4), np.nan)
    for i, p in enumerate(seen):
        likelihood[p] = _log_density(at_numbers, weights, mixture.charge[:, i], own[:, i])
        edges[p] = _charge_quantiles(mean[i], std[i], weights, mixture.charge[:, i], own[:, i])
    length = np.bincount(steps.part, minlength=parts)
    main = int(seen[np.argmax(length[seen])])
    full = {name: getattr(empty, name).copy() for name in ("charge", "charge_std", "charge_cov")}
    full["charge"][seen], full["charge_std"][seen] = mean, std
    full["charge_cov"][np.ix_(seen, seen)] = cov
    given = np.full((2, len(weights), parts), np.nan)
    given[0][:, seen], given[1][:, seen] = mixture.charge, own
    return {
        **full, "charge_interval_68": edges[:, :2], "charge_interval_95": edges[:, 2:], "main_part": main,
        "number_values": numbers, "number_log_likelihood": likelihood[main],
        "part_number_log_likelihood": likelihood, "charge_at_radius": given[0], "charge_std_at_radius": given[1],
    }  # fmt: skip


def _log_density(value: FloatArray, weight: FloatArray, mean: FloatArray, std: FloatArray) -> FloatArray:
    """Log density of a mixture of normals at some values."""
    used = weight > 1e-12 * weight.max()
    z = (value[:, None] - mean[used]) / std[used]
    terms = np.log(weight[used] / (np.sqrt(2 * np.pi) * std[used])) - 0.5 * z**2
    top = terms.max(axis=1)
    return np.asarray(top + np.log(np.exp(terms - top[:, None]).sum(axis=1)))


def _charge_quantiles(
    centre: float, width: float, weight: FloatArray, mean: FloatArray, std: FloatArray
) -> FloatArray:
    """Bounds of the 68 and 95 % intervals of a mixture of normals."""
    used = weight > 1e-4 * weight.max()
    grid = centre + width * np.linspace(-4, 4, 81)
    cumulative = ndtr((grid[:, None] - mean[used]) / std[used]) @ weight[used]
    levels = np.array(LEVELS_68 + LEVELS_95) * weight[used].sum()
    return np.asarray(np.interp(levels, cumulative, grid))


def _primitive_changes(
    sums: Sums, law: Law, base: _Mixture, conditions: Conditions, air_speed: float, air_std: float
) -> dict[str, tuple[float, FloatArray]]:
    """Derivatives of (ln r, q) by the logarithm of each primitive, by a small change of the whole posterior.

    "air" is the air speed in units of the droplet's mean fall speed: only their sum is seen.
    """
    up = 1 + STEP
    laws = {
        "scale": law,
        "friction": Law(law.log_radius, law.speed / up, law.mobility / up, law.diffusion / up),
        "weight": replace(law, speed=law.speed * up),
        "thermal": replace(law, diffusion=law.diffusion * up),
        "slip": law_at(law.log_radius, conditions, slip_factor=up),
        "air": replace(law, speed=law.speed + STEP * float(base.weight @ law.speed)),
        "path": law_at(law.log_radius, replace(conditions, mean_free_path=conditions.mean_free_path * up)),
    }
    size, columns = len(law.log_radius), [f.name for f in fields(Law)]
    stacked = Law(*(np.concatenate([getattr(each, name) for each in laws.values()]) for name in columns))
    scale = np.repeat([up if name == "scale" else 1.0 for name in laws], size)[:, None]
    value, drift, _ = _log_likelihood(sums, stacked, air_speed, air_std, scale)
    weight = np.exp(value - value.max())
    drive = scale[:, :, None] * sums.drive - sums.drive_slope * drift[:, :, None]
    charge = np.einsum("rk,rkp,r->rp", weight, drive, conditions.plate_gap / stacked.mobility)
    of_radius = weight.sum(axis=1).reshape(len(laws), size)
    total = of_radius.sum(axis=1)
    log_radius = of_radius @ law.log_radius / total
    means = charge.reshape(len(laws), size, -1).sum(axis=1) / total[:, None]
    return {
        name: (float(r - base.mean_log_radius) / STEP, (q - base.mean_charge) / STEP)
        for name, r, q in zip(laws, log_radius, means, strict=True)
    }


def _sensitivities(
    result: DropletPosterior,
    sums: Sums,
    changes: Mapping[str, tuple[float, FloatArray]],
    responses: Mapping[str, Mapping[str, float]],
) -> dict[str, Any]:
    """Chain rule from inputs through primitives to ln r and ln q."""
    charge = result.charge[sums.parts]
    # ln q has no derivative at q = 0: there the charge counts as one standard deviation
    least = np.maximum(np.abs(charge), result.charge_std[sums.parts]) * np.where(charge < 0, -1.0, 1.0)
    by_gap = {"gap": (0.0, charge), "voltage": (0.0, -charge)}
    table = {**changes, **by_gap}
    both: dict[str, tuple[float, float]] = {}
    every: dict[str, FloatArray] = {}
    for name, response in responses.items():
        radius = sum(table[key][0] * factor for key, factor in response.items())
        row = np.full(len(result.charge), np.nan)
        row[sums.parts] = sum(table[key][1] * factor for key, factor in response.items()) / least
        every[name] = row
        both[name] = (float(radius), float(row[result.main_part]) if result.main_part >= 0 else float("nan"))
    return {"sensitivities": both, "charge_sensitivities": every}
