"""One droplet: from speeds to radius, mass and charge, and back.

Speeds are along gravity, downward positive. The voltage is that of the top plate against the bottom plate,
so V / d is the field's downward component and a charge q gets the downward speed B q V / d, its drive. A
negative droplet rises when the top plate is positive.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from physics import drag
from physics.errors import PhysicsError

Floats = NDArray[np.float64]

ELEMENTARY_CHARGE = 1.602176634e-19
"""In C, exact (SI 2019)."""
BOLTZMANN = 1.380649e-23
"""In J/K, exact (SI 2019)."""


@dataclass(frozen=True, slots=True)
class Conditions:
    """All that is common to the droplets of one recording.

    Attributes
    ----------
    temperature : float
        Of the air, in K.
    viscosity : float
        Of the air, in Pa s.
    mean_free_path : float
        Of the air, ISO 15900 convention, in m.
    air_density, oil_density : float
        In kg/m^3.
    gravity : float
        In m/s^2.
    plate_gap : float
        In m.
    slip : str
        Key of `physics.drag.SLIP_MODELS`.

    Raises
    ------
    PhysicsError
        If a value is not finite and positive, or the oil is not heavier than the air.
    """

    temperature: float
    viscosity: float
    mean_free_path: float
    air_density: float
    oil_density: float
    gravity: float
    plate_gap: float
    slip: str = "kim2005"

    def __post_init__(self) -> None:
        for name in ("temperature", "viscosity", "mean_free_path", "oil_density", "gravity", "plate_gap"):
            value = getattr(self, name)
            if not 0.0 < value < math.inf:
                raise PhysicsError(name, value, "finite and above 0")
        if not 0.0 <= self.air_density < self.oil_density:
            raise PhysicsError(
                "oil_density", self.oil_density, f"above the air's {self.air_density:g} kg/m^3"
            )
        drag.slip_model(self.slip)

    @property
    def density_excess(self) -> float:
        """Density of the oil less that of the air, in kg/m^3: weight less buoyancy per volume and gravity."""
        return self.oil_density - self.air_density


def droplet_mobility(radius: ArrayLike, conditions: Conditions) -> Floats:
    """Mechanical mobility of droplets, B = Cc / (6 pi eta r).

    Parameters
    ----------
    radius : array_like
        In m, > 0.
    conditions : Conditions
        Air and slip model.

    Returns
    -------
    mobility : ndarray
        In s/kg.
    """
    return drag.mobility(
        radius,
        viscosity=conditions.viscosity,
        mean_free_path=conditions.mean_free_path,
        slip=conditions.slip,
    )


def diffusion(radius: ArrayLike, conditions: Conditions) -> Floats:
    """Diffusion coefficient of droplets by the Stokes-Einstein relation, D = k T B.

    Parameters
    ----------
    radius : array_like
        In m, > 0.
    conditions : Conditions
        Air and slip model.

    Returns
    -------
    diffusion : ndarray
        In m^2/s; the variance of a displacement along one axis is 2 D t.

    References
    ----------
    .. [1] A. Einstein, Ann. Phys. 17 (1905), 549-560.
    """
    return BOLTZMANN * conditions.temperature * droplet_mobility(radius, conditions)


def mass(radius: ArrayLike, conditions: Conditions) -> Floats:
    """Mass of droplets, 4/3 pi r^3 rho, buoyancy not taken off.

    Parameters
    ----------
    radius : array_like
        In m.
    conditions : Conditions
        Oil density.

    Returns
    -------
    mass : ndarray
        In kg.
    """
    return 4.0 / 3.0 * math.pi * conditions.oil_density * np.asarray(radius, dtype=np.float64) ** 3


def weight(radius: ArrayLike, conditions: Conditions) -> Floats:
    """Weight of droplets less the buoyancy of the air.

    Parameters
    ----------
    radius : array_like
        In m.
    conditions : Conditions
        Densities and gravity.

    Returns
    -------
    weight : ndarray
        In N, downward positive.
    """
    volume = 4.0 / 3.0 * math.pi * np.asarray(radius, dtype=np.float64) ** 3
    return volume * (conditions.density_excess * conditions.gravity)


def fall_speed(radius: ArrayLike, conditions: Conditions) -> Floats:
    """Terminal speed of droplets with the field off, 2 (rho_o - rho_a) g r^2 Cc / (9 eta).

    Parameters
    ----------
    radius : array_like
        In m, > 0.
    conditions : Conditions
        Air, oil, gravity and slip model.

    Returns
    -------
    speed : ndarray
        In m/s, downward positive.

    Raises
    ------
    PhysicsError
        If a radius is not positive or is outside the slip model's range.
    """
    return weight(radius, conditions) * droplet_mobility(radius, conditions)


def radius_from_fall_speed(speed: ArrayLike, conditions: Conditions) -> Floats:
    """Radius of droplets that fall at a terminal speed, with buoyancy and slip: the inverse of `fall_speed`.

    Parameters
    ----------
    speed : array_like
        Downward, in m/s; finite and > 0.
    conditions : Conditions
        Air, oil, gravity and slip model.

    Returns
    -------
    radius : ndarray
        In m, solved to round-off; unique, because the fall speed grows with the radius.

    Raises
    ------
    PhysicsError
        If a speed is not finite and positive, or so low that the slip model does not hold.
    """
    down = np.asarray(speed, dtype=np.float64)
    bad = ~(np.isfinite(down) & (down > 0.0))
    if np.any(bad):
        where = int(np.flatnonzero(bad)[0])
        raise PhysicsError(
            "fall_speed", f"{float(down.flat[where]):g} m/s at index {where}", "finite and above 0"
        )
    area = down * (9.0 * conditions.viscosity / (2.0 * conditions.density_excess * conditions.gravity))
    return drag.solve_radius(area, power=2, mean_free_path=conditions.mean_free_path, slip=conditions.slip)


def radius_from_diffusion(coefficient: ArrayLike, conditions: Conditions) -> Floats:
    """Radius of droplets that diffuse at a rate: the inverse of `diffusion`.

    Parameters
    ----------
    coefficient : array_like
        Diffusion coefficient in m^2/s; finite and > 0.
    conditions : Conditions
        Air and slip model.

    Returns
    -------
    radius : ndarray
        In m, solved to round-off.

    Raises
    ------
    PhysicsError
        If a coefficient is not finite and positive, or so large that the slip model does not hold.
    """
    rate = np.asarray(coefficient, dtype=np.float64)
    if np.any(~(np.isfinite(rate) & (rate > 0.0))):
        raise PhysicsError("diffusion", coefficient, "finite and above 0 m^2/s")
    stokes = BOLTZMANN * conditions.temperature / (6.0 * math.pi * conditions.viscosity * rate)
    return drag.solve_radius(stokes, power=1, mean_free_path=conditions.mean_free_path, slip=conditions.slip)


def charge_from_drive(
    drive: ArrayLike, voltage: ArrayLike, radius: ArrayLike, conditions: Conditions
) -> Floats:
    """Charge from the speed that a field adds, q = drive d / (B V).

    Parameters
    ----------
    drive : array_like
        Speed in the field less the fall speed, downward positive, in m/s.
    voltage : array_like
        Of the top plate against the bottom plate, in V; not 0.
    radius : array_like
        In m.
    conditions : Conditions
        Plate gap, air and slip model.

    Returns
    -------
    charge : ndarray
        Signed, in C.

    Raises
    ------
    PhysicsError
        If a voltage is 0 or not finite.
    """
    volts = _nonzero_voltage(voltage)
    force = np.asarray(drive, dtype=np.float64) / droplet_mobility(radius, conditions)
    return np.asarray(force * conditions.plate_gap / volts)


def charge_at_balance(radius: ArrayLike, voltage: ArrayLike, conditions: Conditions) -> Floats:
    """Charge of droplets that hang still, q = -(weight less buoyancy) d / V.

    Parameters
    ----------
    radius : array_like
        In m.
    voltage : array_like
        Of the top plate against the bottom plate, in V; not 0.
    conditions : Conditions
        Plate gap, densities and gravity.

    Returns
    -------
    charge : ndarray
        Signed, in C: negative for a positive top plate.

    Raises
    ------
    PhysicsError
        If a voltage is 0 or not finite.
    """
    return np.asarray(-weight(radius, conditions) * conditions.plate_gap / _nonzero_voltage(voltage))


def charge_from_speeds(
    fall: ArrayLike, driven: ArrayLike, voltage: ArrayLike, conditions: Conditions
) -> Floats:
    """Charge from the speed without field and the speed in a field.

    Parameters
    ----------
    fall : array_like
        Speed with the field off, downward positive, in m/s; > 0.
    driven : array_like
        Speed in the field, downward positive (a rising droplet's is negative), in m/s.
    voltage : array_like
        Of the top plate against the bottom plate, in V; not 0.
    conditions : Conditions
        Cell, air and oil.

    Returns
    -------
    charge : ndarray
        Signed, in C.

    Raises
    ------
    PhysicsError
        As for `radius_from_fall_speed` and `charge_from_drive`.
    """
    drive = np.asarray(driven, dtype=np.float64) - np.asarray(fall, dtype=np.float64)
    return charge_from_drive(drive, voltage, radius_from_fall_speed(fall, conditions), conditions)


def two_polarities(
    speed_positive: ArrayLike, speed_negative: ArrayLike, voltage: ArrayLike, conditions: Conditions
) -> tuple[Floats, Floats]:
    """Radius and charge from the speeds at +V and -V, without any time with the field off.

    Parameters
    ----------
    speed_positive, speed_negative : array_like
        Speeds with the top plate at +`voltage` and at -`voltage`, downward positive, in m/s.
    voltage : array_like
        In V, not 0.
    conditions : Conditions
        Cell, air and oil.

    Returns
    -------
    radius : ndarray
        In m.
    charge : ndarray
        Signed, in C.

    Raises
    ------
    PhysicsError
        If the mean of the two speeds, which is the fall speed, is not positive; or the voltage is 0.
    """
    first = np.asarray(speed_positive, dtype=np.float64)
    second = np.asarray(speed_negative, dtype=np.float64)
    radius = radius_from_fall_speed(0.5 * (first + second), conditions)
    return radius, charge_from_drive(0.5 * (first - second), voltage, radius, conditions)


def _nonzero_voltage(voltage: ArrayLike) -> Floats:
    """Return the voltages as an array, or raise if one is 0 or not finite."""
    volts = np.asarray(voltage, dtype=np.float64)
    if np.any(~np.isfinite(volts) | (volts == 0.0)):
        raise PhysicsError("voltage", voltage, "finite and not 0 V")
    return volts
