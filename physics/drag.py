"""Stokes drag on a sphere in a rarefied gas: slip correlations, mobility, Reynolds number."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike, NDArray

from physics.errors import PhysicsError

Floats = NDArray[np.float64]

# lambda = eta / (factor rho c): the factor of the ISO 15900 pair (67.3 nm, 1.83245e-5 Pa s) in dry air.
ISO_PATH_NUMBER = 0.4908


@dataclass(frozen=True, slots=True)
class SlipModel:
    """A published correlation Cc = 1 + Kn (alpha + beta exp(-gamma / Kn)), Kn = path_factor lambda / r.

    Attributes
    ----------
    name : str
        Key in `SLIP_MODELS`.
    alpha, beta, gamma : float
        Coefficients as printed.
    path_factor : float
        The correlation's own mean free path over the ISO 15900 one.
    kn_low, kn_high : float
        Knudsen numbers (own convention) of the data behind the fit. Above `kn_high` is an error. Below
        `kn_low` the form goes over into first-order slip and then into Stokes' law, Cc = 1 + alpha Kn -> 1,
        so that this side is bounded by theory and is allowed.
    std_rel : float
        Standard uncertainty of the slip term Cc - 1, relative to it, the same for all sizes.
    source : str
        Publication, material of the spheres, and convention of the mean free path.
    """

    name: str
    alpha: float
    beta: float
    gamma: float
    path_factor: float
    kn_low: float
    kn_high: float
    std_rel: float
    source: str


# std_rel: alpha x path_factor of the five lies between 1.142 and 1.236 (sd 3.5 %), which is more than the
# authors state for the slip term; Kim et al. give U95 = 2 to 3 % of Cc itself for Kn >= 0.5.
_MODELS = (
    SlipModel(
        "kim2005", 1.165, 0.483, 0.997, 1.0, 0.5, 83.0, 0.03,
        "Kim et al., J. Res. NIST 110 (2005) 31; polystyrene, ISO 15900 mean free path (67.3 nm)",
    ),
    SlipModel(
        "davies1945", 1.257, 0.400, 1.10, ISO_PATH_NUMBER / 0.499, 0.01, 100.0, 0.04,
        "Davies, Proc. Phys. Soc. 57 (1945) 259; older data joined, mean free path eta / (0.499 rho c)",
    ),
    SlipModel(
        "allen_raabe1985", 1.142, 0.558, 0.999, 1.0, 0.03, 7.2, 0.03,
        "Allen and Raabe, Aerosol Sci. Technol. 4 (1985) 269; polystyrene, mean free path 67.3 nm",
    ),
    SlipModel(
        "hutchins1995", 1.2310, 0.4695, 1.1783, 1.0, 0.06, 500.0, 0.03,
        "Hutchins, Harper, Felder, Aerosol Sci. Technol. 22 (1995) 202; polystyrene, mean free path 67.3 nm",
    ),
    SlipModel(
        "millikan1923", 0.864, 0.290, 1.25, ISO_PATH_NUMBER / 0.3502, 0.5, 134.0, 0.03,
        "Millikan, Phys. Rev. 22 (1923) 1; oil, mean free path eta / (0.3502 rho c), 94 nm at 296 K, 76 cmHg",
    ),
)  # fmt: skip

SLIP_MODELS: Mapping[str, SlipModel] = MappingProxyType({model.name: model for model in _MODELS})


@dataclass(frozen=True, slots=True)
class StokesCheck:
    """Whether Stokes drag may be used at the largest of some speeds.

    Attributes
    ----------
    reynolds : float
        Largest Reynolds number, by diameter.
    drag_excess : float
        Relative excess of the drag over Stokes' law at it, 3/16 Re (Oseen).
    holds : bool
        Whether the excess is at most the tolerance.
    warning : str
        One line for the user; empty if Stokes' law holds.
    """

    reynolds: float
    drag_excess: float
    holds: bool
    warning: str


def slip_model(name: str) -> SlipModel:
    """Slip correlation of a name.

    Parameters
    ----------
    name : str
        A key of `SLIP_MODELS`.

    Returns
    -------
    SlipModel
        Its coefficients, range, uncertainty and source.

    Raises
    ------
    PhysicsError
        If there is none of this name.
    """
    if name not in SLIP_MODELS:
        raise PhysicsError("slip", name, "one of " + ", ".join(SLIP_MODELS))
    return SLIP_MODELS[name]


def slip_correction(
    radius: ArrayLike, *, mean_free_path: ArrayLike, slip: str = "kim2005", slip_factor: ArrayLike = 1.0
) -> Floats:
    """Slip (Cunningham) correction Cc, by which a gas drags a small sphere less than Stokes' law says.

    Parameters
    ----------
    radius : array_like
        In m, finite and > 0; any shape.
    mean_free_path : array_like
        ISO 15900 mean free path in m; broadcasts with `radius`. The model's own convention is applied here.
    slip : str, optional
        Key of `SLIP_MODELS`.
    slip_factor : array_like, optional
        On Cc - 1, about 1: to see what an error of the model does.

    Returns
    -------
    correction : ndarray
        Cc > 1, shape of the broadcast.

    Raises
    ------
    PhysicsError
        If a radius is not finite and positive, or so small that Kn is above the model's range.

    References
    ----------
    .. [1] E. Cunningham, Proc. R. Soc. A 83 (1910), 357-365.
    .. [2] M. Knudsen, S. Weber, Ann. Phys. 36 (1911), 981-994.
    """
    model = slip_model(slip)
    knudsen = (
        model.path_factor * np.asarray(mean_free_path, dtype=np.float64) / np.asarray(radius, np.float64)
    )
    _check_knudsen(knudsen, radius, model)
    return np.asarray(1.0 + np.asarray(slip_factor, dtype=np.float64) * _term(knudsen, model))


def slip_slope(radius: ArrayLike, *, mean_free_path: ArrayLike, slip: str = "kim2005") -> Floats:
    """Logarithmic derivative d ln Cc / d ln r of the slip correction.

    Parameters
    ----------
    radius, mean_free_path, slip
        As for `slip_correction`.

    Returns
    -------
    slope : ndarray
        Between -1 and 0. The derivative by ln(mean_free_path) is its negative.

    Raises
    ------
    PhysicsError
        As for `slip_correction`.
    """
    model = slip_model(slip)
    knudsen = (
        model.path_factor * np.asarray(mean_free_path, dtype=np.float64) / np.asarray(radius, np.float64)
    )
    _check_knudsen(knudsen, radius, model)
    return _slope(knudsen, model)


def mobility(
    radius: ArrayLike, *, viscosity: ArrayLike, mean_free_path: ArrayLike, slip: str = "kim2005"
) -> Floats:
    """Mechanical mobility B = Cc / (6 pi eta r): speed over force.

    Parameters
    ----------
    radius : array_like
        In m, > 0.
    viscosity : array_like
        In Pa s.
    mean_free_path : array_like
        ISO 15900 mean free path in m.
    slip : str, optional
        Key of `SLIP_MODELS`.

    Returns
    -------
    mobility : ndarray
        In s/kg (that is m/s per N), shape of the broadcast.

    Raises
    ------
    PhysicsError
        As for `slip_correction`.

    References
    ----------
    .. [1] G. G. Stokes, Trans. Camb. Philos. Soc. 9 (1851), 8-106.
    """
    correction = slip_correction(radius, mean_free_path=mean_free_path, slip=slip)
    resistance = 6.0 * math.pi * np.asarray(viscosity, np.float64) * np.asarray(radius, np.float64)
    return np.asarray(correction / resistance)


def solve_radius(
    target: ArrayLike,
    *,
    power: int,
    mean_free_path: ArrayLike,
    slip: str = "kim2005",
    slip_factor: ArrayLike = 1.0,
) -> Floats:
    """Radius r that solves r^2 Cc(r) = target (a fall speed) or r / Cc(r) = target (a mobility).

    Parameters
    ----------
    target : array_like
        In m^2 or m, finite and > 0.
    power : int
        2 for r^2 Cc, 1 for r / Cc.
    mean_free_path : array_like
        ISO 15900 mean free path in m; broadcasts.
    slip : str, optional
        Key of `SLIP_MODELS`.
    slip_factor : array_like, optional
        As for `slip_correction`.

    Returns
    -------
    radius : ndarray
        In m, to round-off; shape of the broadcast.

    Raises
    ------
    PhysicsError
        If a target is not positive, or the radius is outside the slip model's range.

    Notes
    -----
    Newton's method in ln r from the radius without slip. Both left sides grow with a slope between 1 and 2, the
    first convex and the second concave, so that the steps approach the root from one side and end after about
    five.
    """
    if power not in (1, 2):
        raise PhysicsError("power", power, "1 or 2")
    sign = 2 * power - 3
    model = slip_model(slip)
    goal = np.log(_positive("target", target))
    path = model.path_factor * np.asarray(mean_free_path, dtype=np.float64)
    factor = np.asarray(slip_factor, dtype=np.float64)
    shape = np.broadcast_shapes(goal.shape, path.shape, factor.shape)
    log_radius = np.broadcast_to(goal / power, shape).copy()
    for _ in range(60):
        knudsen = path * np.exp(-log_radius)
        wave = model.beta * np.exp(-model.gamma / knudsen)
        term = factor * knudsen * (model.alpha + wave)
        slope = power - sign * (term + factor * model.gamma * wave) / (1.0 + term)
        step = (power * log_radius + sign * np.log1p(term) - goal) / slope
        log_radius = log_radius - step
        if not np.any(np.abs(step) > 1e-13):
            break
    radius = np.exp(log_radius)
    _check_knudsen(path / radius, radius, model)
    return np.asarray(radius)


def reynolds_number(
    radius: ArrayLike, speed: ArrayLike, *, air_density: ArrayLike, viscosity: ArrayLike
) -> Floats:
    """Reynolds number of a sphere by its diameter, 2 r v rho / eta.

    Parameters
    ----------
    radius : array_like
        In m.
    speed : array_like
        Against the air, in m/s; its sign does not matter.
    air_density : array_like
        In kg/m^3.
    viscosity : array_like
        In Pa s.

    Returns
    -------
    reynolds : ndarray
        Without unit, shape of the broadcast.
    """
    return np.asarray(
        2.0 * np.asarray(radius) * np.abs(speed) * np.asarray(air_density) / np.asarray(viscosity)
    )


def stokes_check(reynolds: ArrayLike, *, tolerance: float = 1e-3) -> StokesCheck:
    """Say whether Stokes drag holds up to the largest of some Reynolds numbers.

    Parameters
    ----------
    reynolds : array_like
        By diameter, >= 0; empty counts as 0.
    tolerance : float, optional
        Largest relative excess of the drag that may be neglected.

    Returns
    -------
    StokesCheck
        With a line of warning if the tolerance is passed (at 1e-3: Re above 0.0053).

    Raises
    ------
    PhysicsError
        If a number is negative or not finite.

    Notes
    -----
    Drag = Stokes x (1 + 3/16 Re + ...) for Re < 1.

    References
    ----------
    .. [1] C. W. Oseen, Ark. Mat. Astron. Fys. 6 (1910), No. 29.
    """
    values = np.asarray(reynolds, dtype=np.float64)
    bad = ~(np.isfinite(values) & (values >= 0.0))
    if np.any(bad):
        raise PhysicsError("reynolds", float(values[bad].flat[0]), "finite and 0 or more")
    largest = float(values.max()) if values.size else 0.0
    excess = 3.0 / 16.0 * largest
    holds = excess <= tolerance
    warning = ""
    if not holds:
        warning = f"Reynolds number {largest:.2g}: the drag is {100 * excess:.2g} % above Stokes' law"
    return StokesCheck(largest, excess, holds, warning)


def _term(knudsen: Floats, model: SlipModel) -> Floats:
    """Cc - 1 at a Knudsen number of the model's own convention, unchecked."""
    return knudsen * (model.alpha + model.beta * np.exp(-model.gamma / knudsen))


def _slope(knudsen: Floats, model: SlipModel) -> Floats:
    """Return d ln Cc / d ln r at a Knudsen number of the model's own convention, unchecked."""
    wave = model.beta * np.exp(-model.gamma / knudsen)
    term = knudsen * (model.alpha + wave)
    return -(term + model.gamma * wave) / (1.0 + term)


def _check_knudsen(knudsen: Floats, radius: ArrayLike, model: SlipModel) -> None:
    """Raise unless every Knudsen number is positive, finite and not above the model's range."""
    if knudsen.size and not (knudsen.min() > 0.0 and knudsen.max() <= model.kn_high):
        bad = ~((knudsen > 0.0) & (knudsen <= model.kn_high))
        value = float(np.broadcast_to(np.asarray(radius, dtype=np.float64), knudsen.shape)[bad].flat[0])
        allowed = f"finite, above 0 m, and Knudsen number at most {model.kn_high:g} for slip {model.name}"
        raise PhysicsError("radius", value, allowed)


def _positive(name: str, value: ArrayLike) -> Floats:
    """Return the array of values that are all finite and above 0, or raise with the first that is not."""
    array = np.asarray(value, dtype=np.float64)
    bad = ~(np.isfinite(array) & (array > 0.0))
    if np.any(bad):
        where = int(np.flatnonzero(bad)[0])
        raise PhysicsError(name, f"{float(array.flat[where]):g} at index {where}", "finite and above 0")
    return array
