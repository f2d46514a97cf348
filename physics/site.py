"""Gravity of the place."""

from __future__ import annotations

import math

from physics.errors import PhysicsError

# Rock and relief move real gravity from the normal value by some 5e-4 m/s^2 (50 mGal), seldom by 2e-3.
NORMAL_GRAVITY_STD = 5e-4


def local_gravity(latitude_deg: float, altitude: float) -> float:
    """Return normal gravity at a latitude and altitude.

    Parameters
    ----------
    latitude_deg : float
        Geodetic latitude in degrees, north positive, -90 to 90.
    altitude : float
        Above sea level in m, -500 to 9000.

    Returns
    -------
    gravity : float
        In m/s^2. Standard uncertainty `NORMAL_GRAVITY_STD`, because the rock below is not in it.

    Raises
    ------
    PhysicsError
        If latitude or altitude is outside its range.

    Notes
    -----
    Somigliana's closed formula on the WGS 84 ellipsoid, less the free-air gradient 3.086e-6 1/s^2.

    References
    ----------
    .. [1] National Imagery and Mapping Agency, TR8350.2, World Geodetic System 1984, 3rd ed. (2000), eq. 4-1.
    .. [2] H. Moritz, Geodetic Reference System 1980, J. Geod. 74 (2000), 128-133.
    """
    if not -90.0 <= latitude_deg <= 90.0:
        raise PhysicsError("latitude", latitude_deg, "-90 to 90 deg")
    if not -500.0 <= altitude <= 9000.0:
        raise PhysicsError("altitude", altitude, "-500 to 9000 m")
    squared_sine = math.sin(math.radians(latitude_deg)) ** 2
    normal = 9.7803253359 * (1.0 + 0.00193185265241 * squared_sine)
    return normal / math.sqrt(1.0 - 0.00669437999013 * squared_sine) - 3.086e-6 * altitude
