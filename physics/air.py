"""Moist air: density, viscosity and mean free path, each with the standard uncertainty of its model."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from physics.errors import PhysicsError

# Reference pair of ISO 15900:2020, annex A (after Kim et al. 2005): dry air at 296.15 K and 101 325 Pa.
REFERENCE_TEMPERATURE = 296.15
REFERENCE_PRESSURE = 101_325.0
REFERENCE_VISCOSITY = 1.83245e-5
REFERENCE_PATH = 67.3e-9
SUTHERLAND_TEMPERATURE = 110.4

TEMPERATURE_RANGE = (273.15, 323.15)
PRESSURE_RANGE = (10_000.0, 110_000.0)
MOST_VAPOUR = 0.25

MOLAR_MASS_DRY = 28.96546e-3
MOLAR_MASS_WATER = 18.01528e-3
GAS_CONSTANT = 8.314472  # CODATA 2006, the value that belongs to CIPM-2007

# Good tables of dry air at 23 degC lie from -0.26 % to +0.31 % of the reference: a rectangle so wide.
VISCOSITY_MODEL_REL_STD = 0.002
# Part of the humidity's effect on the viscosity that the mixture rule may have wrong.
MIXTURE_RULE_REL_STD = 0.5
# Lennard-Jones pair of air (97.0 K, 3.617 A) and water (Stockmayer, 506 K, 2.71 A, 1.85 D), joined by the
# rule of Mason and Monchick (1962) for a polar with a non-polar molecule: well depth in K, diameter in A.
PAIR_WELL_DEPTH = 245.0
PAIR_DIAMETER = 3.137


@dataclass(frozen=True, slots=True)
class Air:
    """State of the air in the cell and what follows from it.

    Attributes
    ----------
    temperature : float
        In K.
    pressure : float
        In Pa.
    relative_humidity : float
        Fraction of saturation over water, 0 to 1.
    density : float
        In kg/m^3.
    viscosity : float
        In Pa s.
    mean_free_path : float
        In m, of the gas itself: it does not follow a viscosity that was given.
    viscosity_origin : str
        Where the viscosity comes from: ``"model"`` or ``"given"``.
    density_rel_std, viscosity_rel_std : float
        Relative standard uncertainty of the models alone; the viscosity's is 0 if it was given.
    """

    temperature: float
    pressure: float
    relative_humidity: float
    density: float
    viscosity: float
    mean_free_path: float
    viscosity_origin: str
    density_rel_std: float
    viscosity_rel_std: float


def moist_air(
    temperature: float, pressure: float, *, relative_humidity: float = 0.0, viscosity: float | None = None
) -> Air:
    """State of moist air from what hangs on the laboratory's wall.

    Parameters
    ----------
    temperature : float
        In K, 273.15 to 323.15.
    pressure : float
        In Pa, 10 000 to 110 000.
    relative_humidity : float, optional
        Fraction, 0 to 1.
    viscosity : float, optional
        In Pa s; replaces the model's. None: the model.

    Returns
    -------
    Air
        With the standard uncertainties of the models.

    Raises
    ------
    PhysicsError
        If an argument is outside its range.

    Notes
    -----
    The mean free path is defined by viscosity, lambda = eta / (0.491 rho c), the factor being the one of
    the ISO reference pair; in dry air this is the ISO formula. A given viscosity does not move it, because
    the slip correlations were fitted with the reference's mean free path.
    """
    _check("temperature", temperature, TEMPERATURE_RANGE, "K")
    _check("pressure", pressure, PRESSURE_RANGE, "Pa")
    _check("relative_humidity", relative_humidity, (0.0, 1.0), "(a fraction)")
    if viscosity is not None:
        _check("viscosity", viscosity, (1e-6, 1e-4), "Pa s")
    fraction = vapour_fraction(temperature, pressure, relative_humidity=relative_humidity)
    dry = dry_viscosity(temperature)
    moist = moist_viscosity(temperature, vapour_fraction=fraction)
    molar_mass_ratio = 1.0 - fraction * (1.0 - MOLAR_MASS_WATER / MOLAR_MASS_DRY)
    path = dry_mean_free_path(temperature, pressure) * (moist / dry) / math.sqrt(molar_mass_ratio)
    model_std = math.hypot(VISCOSITY_MODEL_REL_STD, MIXTURE_RULE_REL_STD * (1.0 - moist / dry))
    return Air(
        temperature=temperature,
        pressure=pressure,
        relative_humidity=relative_humidity,
        density=density_cipm(temperature, pressure, vapour_fraction=fraction),
        viscosity=moist if viscosity is None else viscosity,
        mean_free_path=path,
        viscosity_origin="model" if viscosity is None else "given",
        density_rel_std=_density_rel_std(temperature, pressure),
        viscosity_rel_std=model_std if viscosity is None else 0.0,
    )


def dry_viscosity(temperature: float) -> float:
    """Viscosity of dry air by Sutherland's law through the ISO 15900 reference.

    Parameters
    ----------
    temperature : float
        In K.

    Returns
    -------
    viscosity : float
        In Pa s; relative standard uncertainty `VISCOSITY_MODEL_REL_STD`.

    Notes
    -----
    Independent of pressure: between 10 and 110 kPa the viscosity of air changes by less than 0.02 %.

    References
    ----------
    .. [1] ISO 15900:2020, Determination of particle size distribution: differential electrical mobility
       analysis for aerosol particles, annex A.
    .. [2] J. H. Kim et al., J. Res. Natl. Inst. Stand. Technol. 110 (2005), 31-54.
    """
    ratio = temperature / REFERENCE_TEMPERATURE
    sutherland = (REFERENCE_TEMPERATURE + SUTHERLAND_TEMPERATURE) / (temperature + SUTHERLAND_TEMPERATURE)
    return REFERENCE_VISCOSITY * ratio * math.sqrt(ratio) * sutherland


def dry_mean_free_path(temperature: float, pressure: float) -> float:
    """Mean free path of dry air by the ISO 15900 formula.

    Parameters
    ----------
    temperature : float
        In K.
    pressure : float
        In Pa.

    Returns
    -------
    mean_free_path : float
        In m.

    References
    ----------
    .. [1] ISO 15900:2020, annex A; K. Willeke, J. Aerosol Sci. 7 (1976), 381-387.
    """
    ratio = temperature / REFERENCE_TEMPERATURE
    sutherland = (REFERENCE_TEMPERATURE + SUTHERLAND_TEMPERATURE) / (temperature + SUTHERLAND_TEMPERATURE)
    return REFERENCE_PATH * ratio**2 * (REFERENCE_PRESSURE / pressure) * sutherland


def vapour_viscosity(temperature: float) -> float:
    """Viscosity of water vapour in the limit of low density.

    Parameters
    ----------
    temperature : float
        In K.

    Returns
    -------
    viscosity : float
        In Pa s.

    References
    ----------
    .. [1] IAPWS R12-08, Release on the IAPWS Formulation 2008 for the Viscosity of Ordinary Water Substance,
       eq. 11 and table 1.
    """
    reduced = temperature / 647.096
    series = 1.67752 + 2.20462 / reduced + 0.6366564 / reduced**2 - 0.241605 / reduced**3
    return 1e-4 * math.sqrt(reduced) / series


def moist_viscosity(temperature: float, *, vapour_fraction: float) -> float:
    """Viscosity of a mixture of dry air and water vapour, first order of Chapman and Enskog.

    Parameters
    ----------
    temperature : float
        In K.
    vapour_fraction : float
        Mole fraction of water vapour; at 0 the dry value comes out exactly.

    Returns
    -------
    viscosity : float
        In Pa s.

    Notes
    -----
    At 23 degC and 50 % humidity this makes air 0.39 % less viscous than dry air; the fit of Zuckerwar and
    Meredith to measurements 0.14 %, CoolProp 8.0 0.42 %, Wilke's rule 0.71 % (it overdoes a polar with a
    non-polar gas). `MIXTURE_RULE_REL_STD` is made to cover this spread.

    References
    ----------
    .. [1] J. O. Hirschfelder, C. F. Curtiss, R. B. Bird, Molecular Theory of Gases and Liquids (1954),
       eq. 8.2-22.
    .. [2] E. A. Mason, L. Monchick, J. Chem. Phys. 36 (1962), 2746-2757 (a polar with a non-polar gas).
    .. [3] A. J. Zuckerwar, R. W. Meredith, J. Acoust. Soc. Am. 77 (1985), 1293-1299.
    """
    if vapour_fraction == 0.0:
        return dry_viscosity(temperature)
    dry, vapour = dry_viscosity(temperature), vapour_viscosity(temperature)
    pair, a_star = _pair_viscosity(temperature)
    one, two = 1.0 - vapour_fraction, vapour_fraction
    mass_ratio = MOLAR_MASS_DRY / MOLAR_MASS_WATER
    spread = (1.0 + mass_ratio) ** 2 / (4.0 * mass_ratio)
    x = one**2 / dry + 2.0 * one * two / pair + two**2 / vapour
    y = (
        one**2 / dry * mass_ratio
        + 2.0 * one * two * spread * pair / (dry * vapour)
        + two**2 / vapour / mass_ratio
    )
    z = one**2 * mass_ratio + 2.0 * one * two * (spread * pair * (1.0 / dry + 1.0 / vapour) - 1.0)
    z += two**2 / mass_ratio
    return (1.0 + 0.6 * a_star * z) / (x + 0.6 * a_star * y)


def vapour_fraction(temperature: float, pressure: float, *, relative_humidity: float) -> float:
    """Mole fraction of water vapour in moist air, CIPM-2007 appendix.

    Parameters
    ----------
    temperature : float
        In K.
    pressure : float
        In Pa.
    relative_humidity : float
        Fraction of saturation over liquid water.

    Returns
    -------
    fraction : float
        Between 0 and 0.25.

    Raises
    ------
    PhysicsError
        If the air would hold more vapour than that: hot, damp and thin air.

    References
    ----------
    .. [1] A. Picard, R. S. Davis, M. Glaeser, K. Fujii, Metrologia 45 (2008), 149-155.
    """
    fraction = relative_humidity * _saturated_fraction(temperature, pressure)
    if not fraction <= MOST_VAPOUR:
        most = highest_humidity(temperature, pressure)
        raise PhysicsError("relative_humidity", relative_humidity, f"at most {most:.2g} at this pressure")
    return fraction


def highest_humidity(temperature: float, pressure: float) -> float:
    """Highest relative humidity that the laws of this module take.

    Parameters
    ----------
    temperature : float
        In K.
    pressure : float
        In Pa.

    Returns
    -------
    humidity : float
        1, or less in hot and thin air, where saturation would be more than a quarter of vapour.
    """
    return min(1.0, MOST_VAPOUR / _saturated_fraction(temperature, pressure))


def density_cipm(temperature: float, pressure: float, *, vapour_fraction: float) -> float:
    """Density of moist air by the equation CIPM-2007, with 400 umol/mol of carbon dioxide.

    Parameters
    ----------
    temperature : float
        In K.
    pressure : float
        In Pa.
    vapour_fraction : float
        Mole fraction of water vapour.

    Returns
    -------
    density : float
        In kg/m^3. Relative standard uncertainty of the equation 2.2e-5 from 15 to 27 degC and 600 to
        1100 hPa. In the wider range of `moist_air` it lies within 8e-4 of the virial equation of Herrmann,
        Kretzschmar and Gatley (2009) at any humidity, and within 5e-5 up to 50 %; 5e-4 is stated there.

    References
    ----------
    .. [1] A. Picard, R. S. Davis, M. Glaeser, K. Fujii, Metrologia 45 (2008), 149-155.
    """
    t, x = temperature - 273.15, vapour_fraction
    ratio = pressure / temperature
    first = (
        1.58123e-6 - 2.9331e-8 * t + 1.1043e-10 * t**2 + (5.707e-6 - 2.051e-8 * t) * x
        + (1.9898e-4 - 2.376e-6 * t) * x**2
    )  # fmt: skip
    compressibility = 1.0 - ratio * first + ratio**2 * (1.83e-11 - 0.765e-8 * x**2)
    molar_mass = MOLAR_MASS_DRY * (1.0 - x * (1.0 - MOLAR_MASS_WATER / MOLAR_MASS_DRY))
    return pressure * molar_mass / (compressibility * GAS_CONSTANT * temperature)


def air_slopes(air: Air) -> NDArray[np.float64]:
    """Logarithmic slopes of what follows from the state of the air.

    Parameters
    ----------
    air : Air
        The state.

    Returns
    -------
    slopes : ndarray of shape (3, 3)
        Derivatives of ln viscosity, ln mean free path and ln density (rows) by ln temperature, ln pressure and
        relative humidity (columns; the last as a fraction, not logarithmic, since it may be 0). Differences over
        1e-3, 1e-3 and 5e-3, inside the laws' range. A given viscosity has slopes of 0.
    """
    most = highest_humidity(air.temperature * 1.001, air.pressure * 0.999)  # where the moves below end
    humidity = min(max(air.relative_humidity, 0.005), most - 0.005)
    columns = []
    for move in np.eye(3) * (1e-3, 1e-3, 5e-3):
        ends = []
        for sign in (1.0, -1.0):
            t, p = air.temperature * (1.0 + sign * move[0]), air.pressure * (1.0 + sign * move[1])
            t = min(max(t, TEMPERATURE_RANGE[0]), TEMPERATURE_RANGE[1])
            p = min(max(p, PRESSURE_RANGE[0]), PRESSURE_RANGE[1])
            state = moist_air(t, p, relative_humidity=humidity + sign * move[2])
            place = math.log(t) + math.log(p) + state.relative_humidity  # one of the three moves at a time
            ends.append((place, np.log((state.viscosity, state.mean_free_path, state.density))))
        columns.append((ends[0][1] - ends[1][1]) / (ends[0][0] - ends[1][0]))
    slopes = np.stack(columns, axis=1)
    if air.viscosity_origin == "given":
        slopes[0] = 0.0
    return slopes


def _saturated_fraction(temperature: float, pressure: float) -> float:
    """Mole fraction of water vapour at saturation, with the enhancement factor (CIPM-2007)."""
    celsius = temperature - 273.15
    saturation = math.exp(
        1.2378847e-5 * temperature**2 - 1.9121316e-2 * temperature + 33.93711047 - 6.3431645e3 / temperature
    )
    return (1.00062 + 3.14e-8 * pressure + 5.6e-7 * celsius**2) * saturation / pressure


def _pair_viscosity(temperature: float) -> tuple[float, float]:
    """Viscosity of unlike pairs (air, water) and A*, by the collision integrals of Neufeld et al. (1972)."""
    reduced = temperature / PAIR_WELL_DEPTH
    momentum = 1.16145 * reduced**-0.14874 + 0.52487 * math.exp(-0.77320 * reduced)
    momentum += 2.16178 * math.exp(-2.43787 * reduced)
    diffusive = 1.06036 * reduced**-0.15610 + 0.19300 * math.exp(-0.47635 * reduced)
    diffusive += 1.03587 * math.exp(-1.52996 * reduced) + 1.76474 * math.exp(-3.89411 * reduced)
    molar_mass = 2e3 * MOLAR_MASS_DRY * MOLAR_MASS_WATER / (MOLAR_MASS_DRY + MOLAR_MASS_WATER)  # g/mol
    viscosity = 2.6693e-6 * math.sqrt(molar_mass * temperature) / (PAIR_DIAMETER**2 * momentum)
    return viscosity, momentum / diffusive


def _density_rel_std(temperature: float, pressure: float) -> float:
    """Relative standard uncertainty of the density equation inside and outside its own range."""
    own = 288.15 <= temperature <= 300.15 and 60_000.0 <= pressure <= 110_000.0
    return 2.2e-5 if own else 5e-4


def _check(name: str, value: float, limits: tuple[float, float], unit: str) -> None:
    """Raise unless a scalar lies in its closed range (NaN does not)."""
    if not limits[0] <= value <= limits[1]:
        raise PhysicsError(name, value, f"{limits[0]:g} to {limits[1]:g} {unit}")
