"""The same model by whole matrices: slow, plain, and built from positions instead of steps.

Brownian motion from a common start has Cov(z(s), z(t)) = 2 D min(s, t). Averages over exposures [t_i, t_i + tau]:
2 D (t_i + tau / 2) between different exposures, i the earlier one, and 2 D (t_i + tau / 3) of one with itself.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def position_covariance(times: Floats, exposure: float, diffusion: float, noise_std: Floats) -> Floats:
    """Covariance of the seen places, counted from the first start of exposure."""
    since = times - times[0]
    matrix = 2 * diffusion * (np.minimum.outer(since, since) + exposure / 2)
    np.fill_diagonal(matrix, 2 * diffusion * (since + exposure / 3) + noise_std**2)
    return matrix


def step_covariance(times: Floats, exposure: float, diffusion: float, noise_std: Floats) -> Floats:
    """Covariance of the steps between neighbouring sightings."""
    difference = np.diff(np.eye(len(times)), axis=0)
    return difference @ position_covariance(times, exposure, diffusion, noise_std) @ difference.T


def generalised_least_squares(
    columns: Floats, data: Floats, covariance: Floats
) -> tuple[Floats, Floats, float]:
    """Parameters, their covariance and the weighted sum of squared residuals."""
    inverse = np.linalg.inv(covariance)
    spread = np.linalg.inv(columns.T @ inverse @ columns)
    values = spread @ columns.T @ inverse @ data
    rest = data - columns @ values
    return values, spread, float(rest @ inverse @ rest)
