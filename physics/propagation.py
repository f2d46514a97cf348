"""Propagation of uncertainty in general: linear (JCGM 100), Monte Carlo (JCGM 101), one checked by the other."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import ArrayLike, NDArray

from physics.errors import PhysicsError

Floats = NDArray[np.float64]
Draw = Callable[[np.random.Generator, int], Floats]
"""Draws `size` values of one input, shape (size,), or of k correlated inputs, shape (size, k)."""


@dataclass(frozen=True, slots=True)
class Propagated:
    """Result of linear propagation.

    Attributes
    ----------
    values : ndarray of shape (M,)
        The function at the best estimates.
    covariance : ndarray of shape (M, M)
        J U J^T.
    jacobian : ndarray of shape (M, N)
        Derivative of each output by each input.
    """

    values: Floats
    covariance: Floats
    jacobian: Floats

    @property
    def stds(self) -> Floats:
        """Standard uncertainties, shape (M,)."""
        return np.sqrt(np.diag(self.covariance))

    @property
    def correlation(self) -> Floats:
        """Correlation coefficients of the outputs, shape (M, M); all stds must be above 0."""
        return self.covariance / np.outer(self.stds, self.stds)


@dataclass(frozen=True, slots=True)
class Trials:
    """How long to draw.

    Attributes
    ----------
    digits : int
        Significant digits of the standard uncertainty that must be steady, 1 or 2.
    probability : float
        Of the coverage intervals.
    share : float
        Part of the numerical tolerance within which the result must be steady; a fifth where a linear result is
        to be judged by it (JCGM 101, 8.2).
    most : int
        Draws at which to stop in any case.
    """

    digits: int = 2
    probability: float = 0.95
    share: float = 1.0
    most: int = 2_000_000


@dataclass(frozen=True, slots=True)
class MonteCarlo:
    """Result of a propagation of distributions.

    Attributes
    ----------
    mean, std : float
        Of the output.
    symmetric : tuple of float
        Probabilistically symmetric coverage interval (low, high).
    shortest : tuple of float
        Shortest coverage interval (low, high).
    probability : float
        Of both intervals.
    trials : int
        Number of draws used.
    stable : bool
        Whether mean, std and interval were steady to the tolerance before the draws ran out.
    """

    mean: float
    std: float
    symmetric: tuple[float, float]
    shortest: tuple[float, float]
    probability: float
    trials: int
    stable: bool


@dataclass(frozen=True, slots=True)
class Validation:
    """Comparison of a linear result with Monte Carlo (JCGM 101, clause 8).

    Attributes
    ----------
    tolerance : float
        Numerical tolerance delta of the linear standard uncertainty.
    low_difference, high_difference : float
        Distances of the ends of the two coverage intervals.
    valid : bool
        Whether neither exceeds the tolerance.
    """

    tolerance: float
    low_difference: float
    high_difference: float
    valid: bool


def propagate(
    function: Callable[[Floats], ArrayLike],
    values: ArrayLike,
    covariance: ArrayLike,
    *,
    jacobian: ArrayLike | None = None,
) -> Propagated:
    """Propagate a covariance of inputs linearly to one or more outputs.

    Parameters
    ----------
    function : callable
        From inputs of shape (N,) to a scalar or to outputs of shape (M,).
    values : array_like of shape (N,)
        Best estimates of the inputs.
    covariance : array_like of shape (N, N) or (N,)
        Of the inputs; one-dimensional: standard uncertainties of uncorrelated inputs.
    jacobian : array_like of shape (M, N) or (N,), optional
        None: central differences over a hundredth of each standard uncertainty.

    Returns
    -------
    Propagated
        Values, covariance and Jacobian.

    Raises
    ------
    PhysicsError
        If shapes do not fit, or a variance is negative or not finite.

    References
    ----------
    .. [1] JCGM 100:2008, Guide to the expression of uncertainty in measurement, eqs. 10, 13 and H.9.
    """
    inputs = np.asarray(values, dtype=np.float64)
    matrix = _covariance(covariance, inputs.size)
    outputs = np.atleast_1d(np.asarray(function(inputs), dtype=np.float64))
    if jacobian is None:
        slopes = _central_differences(function, inputs, np.sqrt(np.diag(matrix)))
    else:
        slopes = np.atleast_2d(np.asarray(jacobian, dtype=np.float64))
    if slopes.shape != (outputs.size, inputs.size):
        raise PhysicsError("jacobian", slopes.shape, f"of shape {(outputs.size, inputs.size)}")
    return Propagated(outputs, slopes @ matrix @ slopes.T, slopes)


def second_order_variance(
    function: Callable[[Floats], ArrayLike], values: ArrayLike, stds: ArrayLike
) -> float:
    """Second-order addition to the variance of a scalar function of independent normal inputs.

    Parameters
    ----------
    function : callable
        From inputs of shape (N,) to a scalar.
    values, stds : array_like of shape (N,)
        Best estimates and standard uncertainties.

    Returns
    -------
    variance : float
        To be added to the linear variance.

    References
    ----------
    .. [1] JCGM 100:2008, note to 5.1.2.
    """
    inputs, steps = np.asarray(values, dtype=np.float64), np.asarray(stds, dtype=np.float64)

    def at(*moves: tuple[int, float]) -> float:
        moved = inputs.copy()
        for index, factor in moves:
            moved[index] += factor * steps[index]
        return float(np.asarray(function(moved)))

    total, count = 0.0, inputs.size
    slope = [0.5 * (at((i, 1.0)) - at((i, -1.0))) for i in range(count)]
    for i, j in product(range(count), repeat=2):
        up = at((i, 1.0), (j, 1.0)), at((i, 1.0), (j, -1.0))
        down = at((i, -1.0), (j, 1.0)), at((i, -1.0), (j, -1.0))
        mixed = 0.25 * (up[0] - up[1] - down[0] + down[1])  # d2f / dx_i dx_j; for i = j over a double step
        third = 0.5 * (sum(up) - sum(down)) - 2.0 * slope[i]  # d3f / dx_i dx_j^2
        total += 0.5 * mixed**2 + slope[i] * third
    return total


def effective_degrees_of_freedom(contributions: ArrayLike, degrees: ArrayLike) -> float:
    """Effective degrees of freedom of a combined uncertainty (Welch and Satterthwaite).

    Parameters
    ----------
    contributions : array_like of shape (N,)
        Standard uncertainties that each input causes in the output, |c_i| u_i.
    degrees : array_like of shape (N,)
        Degrees of freedom of each, > 0; ``inf`` for an input known by judgement.

    Returns
    -------
    degrees : float
        ``inf`` if all contributing inputs have infinitely many.

    Raises
    ------
    PhysicsError
        If a number of degrees of freedom is not above 0.

    References
    ----------
    .. [1] JCGM 100:2008, eq. G.2b.
    """
    parts, counts = np.asarray(contributions, dtype=np.float64), np.asarray(degrees, dtype=np.float64)
    if np.any(~(counts > 0.0)):
        raise PhysicsError("degrees", counts.tolist(), "above 0")
    bottom = float(np.sum(parts**4 / counts))
    return math.inf if bottom == 0.0 else float(np.sum(parts**2)) ** 2 / bottom


def coverage_factor(degrees: float, *, probability: float = 0.95) -> float:
    """Coverage factor k for an expanded uncertainty from Student's t.

    Parameters
    ----------
    degrees : float
        Effective degrees of freedom, at least 1; truncated to a whole number as JCGM 100 G.4.1 says.
    probability : float, optional
        Coverage probability, 0 < p < 1.

    Returns
    -------
    factor : float
        Expanded over standard uncertainty.

    Raises
    ------
    PhysicsError
        If there is less than one degree of freedom, or the probability is not within 0 and 1.
    """
    from scipy.special import ndtri, stdtrit

    if not degrees >= 1.0 or not 0.0 < probability < 1.0:
        raise PhysicsError("degrees, probability", (degrees, probability), "at least 1, and within 0 and 1")
    upper = 0.5 + 0.5 * probability
    return float(ndtri(upper)) if math.isinf(degrees) else float(stdtrit(math.floor(degrees), upper))


def normal(mean: float, std: float) -> Draw:
    """Draw from a normal distribution.

    Parameters
    ----------
    mean, std : float
        Expectation and standard deviation.

    Returns
    -------
    Draw
        For `monte_carlo`.
    """
    return lambda rng, size: rng.normal(mean, std, size)


def rectangular(low: float, high: float) -> Draw:
    """Draw from a rectangular distribution.

    Parameters
    ----------
    low, high : float
        Limits.

    Returns
    -------
    Draw
        For `monte_carlo`.
    """
    return lambda rng, size: rng.uniform(low, high, size)


def student(location: float, scale: float, degrees: float) -> Draw:
    """Draw from a scaled and shifted t distribution (JCGM 101, 6.4.9).

    Parameters
    ----------
    location, scale : float
        Estimate and its standard uncertainty from repeated readings.
    degrees : float
        Degrees of freedom, > 0.

    Returns
    -------
    Draw
        For `monte_carlo`.
    """
    return lambda rng, size: location + scale * rng.standard_t(degrees, size)


def joint_normal(means: ArrayLike, covariance: ArrayLike) -> Draw:
    """Draw correlated inputs from a multivariate normal distribution.

    Parameters
    ----------
    means : array_like of shape (K,)
        Expectations.
    covariance : array_like of shape (K, K)
        Positive semidefinite.

    Returns
    -------
    Draw
        Gives K inputs at once.
    """
    centre, matrix = np.asarray(means, dtype=np.float64), np.asarray(covariance, dtype=np.float64)
    return lambda rng, size: rng.multivariate_normal(centre, matrix, size, method="eigh")


def monte_carlo(
    function: Callable[..., ArrayLike],
    distributions: Sequence[Draw],
    rng: np.random.Generator,
    *,
    trials: Trials = Trials(),
) -> MonteCarlo:
    """Propagate distributions adaptively, until the result is steady to the digits wanted.

    Parameters
    ----------
    function : callable
        Vectorised over draws: one argument of shape (size,) per input, result of shape (size,).
    distributions : sequence of Draw
        One per input, or one per group of correlated inputs.
    rng : Generator
        Source of randomness.
    trials : Trials, optional
        Digits, probability and bounds.

    Returns
    -------
    MonteCarlo
        `stable` says whether `trials.most` was enough.

    References
    ----------
    .. [1] JCGM 101:2008, 7.9.4; blocks of 10 000 draws.
    """
    tail = 0.5 - 0.5 * trials.probability
    size = max(10_000, math.ceil(100.0 / (1.0 - trials.probability)))
    blocks: list[Floats] = []
    figures: list[tuple[float, float, float, float]] = []
    stable = False
    while not stable and (len(blocks) + 1) * size <= max(trials.most, 2 * size):
        block = _one_block(function, distributions, rng, size)
        blocks.append(block)
        low, high = np.quantile(block, [tail, 1.0 - tail])
        figures.append((float(block.mean()), float(block.std(ddof=1)), float(low), float(high)))
        if len(blocks) >= 2:
            std = math.sqrt(sum(f[1] ** 2 for f in figures) / len(figures))
            spread = float(np.std(figures, axis=0, ddof=1).max()) / math.sqrt(len(figures))
            stable = 2.0 * spread <= trials.share * numerical_tolerance(std, digits=trials.digits)
    values = np.sort(np.concatenate(blocks))
    low, high = np.quantile(values, [tail, 1.0 - tail])
    return MonteCarlo(
        mean=float(values.mean()),
        std=float(values.std(ddof=1)),
        symmetric=(float(low), float(high)),
        shortest=_shortest(values, trials.probability),
        probability=trials.probability,
        trials=values.size,
        stable=stable,
    )


def numerical_tolerance(std: float, *, digits: int = 2) -> float:
    """Half a unit of the last significant digit of a standard uncertainty (JCGM 101, 7.9.2).

    Parameters
    ----------
    std : float
        Standard uncertainty, >= 0.
    digits : int, optional
        Significant digits that are regarded as meaningful.

    Returns
    -------
    tolerance : float
        In the unit of `std`; 0 for 0.
    """
    if std == 0.0:
        return 0.0
    exponent = int(f"{std:.{digits - 1}e}".split("e")[1])  # after rounding: 0.0996 counts as 0.10
    return 0.5 * 10.0 ** (exponent - digits + 1)


def validate_linear(
    value: float, std: float, *, coverage: float, simulated: MonteCarlo, digits: int = 2
) -> Validation:
    """Compare the coverage interval of a linear result with that of Monte Carlo.

    Parameters
    ----------
    value, std : float
        Linear result and standard uncertainty.
    coverage : float
        Coverage factor of the interval value +- coverage std, of the same probability as `simulated`.
    simulated : MonteCarlo
        Its symmetric interval is compared.
    digits : int, optional
        Significant digits of `std` that must agree.

    Returns
    -------
    Validation
        If it is not valid, the Monte Carlo result is the one to state.

    References
    ----------
    .. [1] JCGM 101:2008, 8.1.
    """
    tolerance = numerical_tolerance(std, digits=digits)
    low = abs(value - coverage * std - simulated.symmetric[0])
    high = abs(value + coverage * std - simulated.symmetric[1])
    return Validation(tolerance, low, high, low <= tolerance and high <= tolerance)


def _covariance(covariance: ArrayLike, count: int) -> Floats:
    """Return the covariance matrix of inputs, from a matrix or from standard uncertainties."""
    matrix = np.asarray(covariance, dtype=np.float64)
    if matrix.ndim == 1:
        matrix = np.diag(matrix**2)
    if matrix.shape != (count, count):
        raise PhysicsError("covariance", matrix.shape, f"of shape {(count, count)}")
    if np.any(~np.isfinite(matrix)) or np.any(np.diag(matrix) < 0.0):
        raise PhysicsError("covariance", np.diag(matrix).tolist(), "finite, with variances of 0 or more")
    return matrix


def _central_differences(function: Callable[[Floats], ArrayLike], inputs: Floats, stds: Floats) -> Floats:
    """Jacobian by central differences; an exact input is moved by the cube root of round-off instead."""
    least = 6e-6 * np.where(inputs == 0.0, 1.0, np.abs(inputs))
    steps = np.where(stds > 0.0, 0.01 * stds, least)
    columns = []
    for index, step in enumerate(steps):
        move = np.zeros_like(inputs)
        move[index] = step
        higher = np.asarray(function(inputs + move), dtype=np.float64)
        lower = np.asarray(function(inputs - move), dtype=np.float64)
        columns.append(np.atleast_1d(higher - lower) / (2.0 * step))
    return np.stack(columns, axis=1)


def _one_block(
    function: Callable[..., ArrayLike], distributions: Sequence[Draw], rng: np.random.Generator, size: int
) -> Floats:
    """Draw all inputs once and evaluate the function."""
    columns: list[Floats] = []
    for draw in distributions:
        drawn = np.asarray(draw(rng, size), dtype=np.float64)
        columns.extend(drawn.T if drawn.ndim == 2 else [drawn])
    return np.asarray(function(*columns), dtype=np.float64)


def _shortest(ordered: Floats, probability: float) -> tuple[float, float]:
    """Shortest interval that holds the probability, from sorted draws (JCGM 101, 7.7.3)."""
    held = math.floor(probability * ordered.size + 0.5)
    widths = ordered[held:] - ordered[: ordered.size - held]
    first = int(np.argmin(widths))
    return float(ordered[first]), float(ordered[first + held])
