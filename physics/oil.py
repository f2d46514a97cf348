"""Density of an oil at a temperature."""

from __future__ import annotations

from physics.errors import PhysicsError


def oil_density(
    density: float, *, density_temperature: float, temperature: float, expansion: float = 0.0
) -> float:
    """Density of an oil from its density at another temperature.

    Parameters
    ----------
    density : float
        At `density_temperature`, in kg/m^3, 2 to 30 000.
    density_temperature : float
        In K.
    temperature : float
        Of the droplets, in K; at most 60 K away.
    expansion : float, optional
        Cubic expansion coefficient alpha in 1/K, referred to `density_temperature`; 0 to 5e-3.

    Returns
    -------
    density : float
        In kg/m^3.

    Raises
    ------
    PhysicsError
        If an argument is outside its range.

    Notes
    -----
    V = V0 (1 + alpha (T - T0)), hence rho = rho0 / (1 + alpha (T - T0)). For 20 K and 1e-3 1/K the forms
    1 - alpha dT and exp(-alpha dT) differ from it by 4e-4 and 2e-4.

    References
    ----------
    .. [1] ISO 80000-5:2019, item 5-3.2 (cubic expansion coefficient).
    """
    if not 2.0 <= density <= 30_000.0:
        raise PhysicsError("oil_density", density, "2 to 30000 kg/m^3")
    if not 0.0 <= expansion <= 5e-3:
        raise PhysicsError("expansion", expansion, "0 to 0.005 1/K")
    for name, value in (("density_temperature", density_temperature), ("temperature", temperature)):
        if not 200.0 <= value <= 400.0:
            raise PhysicsError(name, value, "200 to 400 K")
    change = temperature - density_temperature
    if expansion > 0.0 and abs(change) > 60.0:
        raise PhysicsError("density_temperature", density_temperature, "within 60 K of the air's temperature")
    return density / (1.0 + expansion * change)
