"""How the shared inputs of a bench move what the law of one droplet uses."""

from __future__ import annotations

import numpy as np

from physics import air
from physics.droplet import Conditions

__all__ = ["STEP", "input_responses"]

STEP = 1e-4  # relative change of an input for its sensitivity; second order stays below 1e-4 of it


def input_responses(
    conditions: Conditions,
    *,
    relative_humidity: float = 0.5,
    expansion: float = 0.0,
    viscosity_given: bool = False,
) -> dict[str, dict[str, float]]:
    """Relative change of what the law uses for a change of each shared input.

    Parameters
    ----------
    conditions : Conditions
        The state at which to differentiate.
    relative_humidity : float
        Of the air, 0 to 1; at which to differentiate.
    expansion : float
        Of the oil in 1/K, where its density follows the air's temperature.
    viscosity_given : bool
        The viscosity was stated, so that temperature and humidity do not move it.

    Returns
    -------
    responses : dict
        Input -> primitive -> d ln primitive / d ln input. Primitives: scale, friction (viscosity), slip (the
        term Cc - 1), weight, thermal (k T), path (mean free path), gap, voltage. For ``relative_humidity`` the
        derivative is by the humidity itself (a fraction, 0 to 1), because it may be 0.

    Notes
    -----
    Temperature, pressure and humidity act through `physics.air.moist_air`; the pressure is the one that gives
    the mean free path. ``viscosity_model`` and ``slip_model`` are factors on the viscosity and on the slip term Cc - 1.
    """
    kelvin, buoyancy = conditions.temperature, conditions.air_density / conditions.density_excess
    oil = conditions.oil_density / conditions.density_excess
    pressure = 101_325.0 * air.dry_mean_free_path(kelvin, 101_325.0) / conditions.mean_free_path
    kelvin, pressure = (
        float(np.clip(value, limits[0], limits[1] / (1 + 2 * STEP)))
        for value, limits in ((kelvin, air.TEMPERATURE_RANGE), (pressure, air.PRESSURE_RANGE))
    )
    most = air.highest_humidity(kelvin * (1 + STEP), pressure)  # below 1 in hot and thin air
    damp = min(relative_humidity, 0.8 * most)
    damper = min(damp + 0.1, 0.96 * most)
    base = air.moist_air(kelvin, pressure, relative_humidity=damp)
    moved = {
        "temperature": (air.moist_air(kelvin * (1 + STEP), pressure, relative_humidity=damp), STEP),
        "pressure": (air.moist_air(kelvin, pressure * (1 + STEP), relative_humidity=damp), STEP),
        "relative_humidity": (air.moist_air(kelvin, pressure, relative_humidity=damper), damper - damp),
    }
    responses: dict[str, dict[str, float]] = {}
    for name, (state, step) in moved.items():
        friction = 0.0 if viscosity_given else np.log(state.viscosity / base.viscosity) / step
        responses[name] = {
            "friction": float(friction),
            "path": float(np.log(state.mean_free_path / base.mean_free_path) / step),
            "weight": float(-buoyancy * np.log(state.density / base.density) / step),
        }
    responses["temperature"]["thermal"] = 1.0
    responses["temperature"]["weight"] -= expansion * kelvin * oil
    return responses | {
        "scale": {"scale": 1.0}, "plate_gap": {"gap": 1.0}, "voltage": {"voltage": 1.0},
        "viscosity_model": {"friction": 1.0}, "slip_model": {"slip": 1.0},
        "oil_density": {"weight": oil}, "gravity": {"weight": 1.0},
    }  # fmt: skip
