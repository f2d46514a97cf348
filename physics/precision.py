"""Precision that a planned track can reach: Fisher information of the exact model of its steps.

Unknown are ln r, the charge, the side drift, the size of the place noise and, with a prior, the vertical
speed of the air. The steps are Gaussian with a covariance that depends on the radius and the noise, so the
information has a part from their means and one from their variances; the latter is the Brownian motion that
tells of the radius.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from physics.droplet import BOLTZMANN, Conditions, droplet_mobility, fall_speed
from physics.errors import PhysicsError
from physics.increments import field_impulse, increments, whitened

FloatArray = NDArray[np.float64]

_STEP = 1e-4  # of ln r, for derivatives
_FEWEST = 8  # steps below which no precision is told


@dataclass(frozen=True, slots=True)
class Camera:
    """How a droplet is seen."""

    frame_rate: float  # Hz
    exposure: float  # s
    place_std: float  # m, standard deviation of one place along one axis


@dataclass(frozen=True, slots=True)
class Precision:
    """Standard uncertainties that a track allows at best; infinite where the track cannot give the quantity."""

    log_radius_std: float  # of ln r
    charge_std: float  # C, own
    charge_std_at_radius: (
        float  # C, if the radius were known: Brownian motion and place noise in the drive alone
    )
    log_radius_std_by_speed: float  # of ln r, if the Brownian motion did not tell of the radius
    correlation: float  # of ln r and charge


@dataclass(frozen=True, slots=True)
class TrackInformation:
    """Sums over one track, from which the precision follows for any charge and any voltage of the same time course."""

    drift: float  # g' C^-1 g, s^2/m^2
    drift_drive: float  # g' C^-1 G
    drive: float  # G' C^-1 G
    variance: FloatArray  # (2, 2) information on (ln r, ln s^2) from the variances of both axes
    radius: float  # m

    def shortened(self, share: float) -> TrackInformation:
        """Give the information if only a share of the steps can be used, evenly over the track."""
        return TrackInformation(share * self.drift, share * self.drift_drive, share * self.drive, share * self.variance,
                                self.radius)  # fmt: skip


def track_information(
    radius: float,
    seconds: float,
    knots: tuple[ArrayLike, ArrayLike],
    *,
    camera: Camera,
    conditions: Conditions,
) -> TrackInformation | None:
    """Sums over a track of even frames.

    Parameters
    ----------
    radius : float
        In m.
    seconds : float
        Length of the track.
    knots : tuple of array_like
        Times in s and voltages in V of the planned field, as for `field_impulse`; the track begins at 0 s.
    camera : Camera
        Frame rate, exposure and place noise.
    conditions : Conditions
        Air, oil, gravity and plate gap.

    Returns
    -------
    information : TrackInformation or None
        None if the track has fewer than 8 steps.

    Raises
    ------
    PhysicsError
        If the exposure is longer than the frame interval, or a value is not positive.
    """
    interval = 1 / camera.frame_rate
    if not 0 <= camera.exposure <= interval or not camera.place_std > 0:
        raise PhysicsError("exposure", camera.exposure, f"from 0 s to the frame interval, {interval:.4g} s")
    count = int(seconds * camera.frame_rate)
    if count < _FEWEST:
        return None
    times = interval * np.arange(count + 1)
    still = np.zeros(count + 1)
    impulse = field_impulse(*knots, times, camera.exposure)
    steps = increments(times, still, still, down_std=camera.place_std, side_std=camera.place_std, impulse=impulse,
                       exposure=camera.exposure)  # fmt: skip
    diffusion, slope = _diffusion(radius, conditions)
    design = np.column_stack([steps.dt, steps.impulse])
    white = whitened(steps, diffusion=diffusion, rho=camera.place_std**2 / diffusion, columns=design).columns
    sums = white.T @ white
    variance = _variance_information(count, diffusion, slope, camera)
    return TrackInformation(float(sums[0, 0]), float(sums[0, 1]), float(sums[1, 1]), variance, radius)


def _diffusion(radius: float, conditions: Conditions) -> tuple[float, float]:
    """Diffusion coefficient and d ln D / d ln r."""
    low, middle, high = droplet_mobility(radius * np.exp(_STEP * np.array([-1.0, 0.0, 1.0])), conditions)
    return BOLTZMANN * conditions.temperature * float(middle), float(np.log(high / low)) / (2 * _STEP)


def _variance_information(count: int, diffusion: float, slope: float, camera: Camera) -> FloatArray:
    """Information (2, 2) on (ln r, ln s^2) from the variances of both axes.

    With even frames all covariances share the eigenvectors of the second difference, whose eigenvalues are
    2 - 2 cos(k pi / (N + 1)); then 1/2 tr(C^-1 dC C^-1 dC) is a sum over k, twice for two axes.
    """
    second = 2 - 2 * np.cos(np.pi * np.arange(1, count + 1) / (count + 1))
    brownian = diffusion * (2 / camera.frame_rate - camera.exposure / 3 * second)
    noise = camera.place_std**2 * second
    by_radius, by_noise = slope * brownian / (brownian + noise), noise / (brownian + noise)
    cross = np.sum(by_radius * by_noise)
    return np.array([[np.sum(by_radius**2), cross], [cross, np.sum(by_noise**2)]])


def expected_precision(
    information: TrackInformation | None,
    charge: float,
    *,
    conditions: Conditions,
    voltage_factor: float = 1.0,
    air_speed_std: float = 0.0,
) -> Precision:
    """Precision of radius and charge.

    Parameters
    ----------
    information : TrackInformation or None
        None gives infinite uncertainties.
    charge : float
        Signed, in C.
    conditions : Conditions
        As for the information.
    voltage_factor : float, optional
        The voltages are so many times those of the information.
    air_speed_std : float, optional
        Standard uncertainty of the vertical speed of the air, in m/s; 0: still air.

    Returns
    -------
    precision : Precision
        Inverse of the Fisher information, the Cramer-Rao bound, which the estimator reaches for 12 s and
        more.

    References
    ----------
    .. [1] S. M. Kay, Fundamentals of Statistical Signal Processing: Estimation Theory (1993), section 3.9.
    """
    infinite = Precision(np.inf, np.inf, np.inf, np.inf, 0.0)
    if information is None:
        return infinite
    moved = information.radius * np.exp(_STEP * np.array([-1.0, 0.0, 1.0]))
    fall, mobility = fall_speed(moved, conditions), droplet_mobility(moved, conditions)
    per_volt = (
        voltage_factor * mobility / conditions.plate_gap
    )  # speed per charge and per volt of the schedule
    slope = np.array([fall[2] - fall[0], charge * (per_volt[2] - per_volt[0])]) / (2 * _STEP)
    by = np.array([slope, [0.0, per_volt[1]], [1.0, 0.0]])  # d(drift, drive) by ln r, charge, air speed
    sums = np.array(
        [[information.drift, information.drift_drive], [information.drift_drive, information.drive]]
    )
    mean = by @ sums @ by.T
    scale = np.array([1.0, 1 / max(abs(charge), 1e-19), 1.0])  # keeps the matrix well conditioned
    full = np.zeros((4, 4))  # ln r, charge, air speed, ln s^2
    full[:3, :3] = mean / np.outer(scale, scale)
    full[2, 2] += 1 / max(air_speed_std, 1e-12) ** 2
    speeds = full[:3, :3].copy()
    full[np.ix_((0, 3), (0, 3))] += information.variance
    known, whole = full[1, 1], _inverse(full)
    if whole is None or not known > 0:
        return infinite
    alone = _inverse(speeds)
    variance_q = whole[1, 1] / scale[1] ** 2
    return Precision(
        log_radius_std=float(np.sqrt(whole[0, 0])), charge_std=float(np.sqrt(variance_q)),
        charge_std_at_radius=float(np.sqrt(1 / known) / scale[1]),
        log_radius_std_by_speed=float("inf") if alone is None else float(np.sqrt(alone[0, 0])),
        correlation=float(whole[0, 1] / np.sqrt(whole[0, 0] * whole[1, 1])),
    )  # fmt: skip


def _inverse(matrix: FloatArray) -> FloatArray | None:
    """Inverse of a symmetric matrix, scaled to unit diagonal first; None if it is singular."""
    size = np.sqrt(np.diag(matrix))
    if not np.all(size > 0):
        return None
    scaled = matrix / np.outer(size, size)
    values = np.linalg.eigvalsh(scaled)
    if values[0] < 1e-9 * values[-1]:
        return None
    return np.asarray(np.linalg.inv(scaled) / np.outer(size, size))
