"""One lattice for all marks of a pattern: which line or dot each mark is, and the map from the picture to it.

A mark says that one lattice coordinate is a whole number at a place in the picture: a point on a line says it of
one coordinate, a dot of both. Numbering grows outward from a seed, so that neither a missing nor a false line can
shift the count; the map is then fitted to all marks at once.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

SAME = 0.2  # of the pitch: a mark farther from a whole number belongs to no line
ENOUGH = 3000  # marks that fix a polynomial of third degree to far better than half a pitch
AFFINE = 3  # parameters for one coordinate of a map without lens or tilt


@dataclass(frozen=True, slots=True)
class Marks:
    """Where one lattice coordinate is a whole number; a dot is two marks."""

    x: FloatArray  # (N,) px
    y: FloatArray  # (N,) px
    axis: IntArray  # (N,) which coordinate: 0 or 1
    index: IntArray  # (N,) its whole number
    cluster: IntArray  # (N,) marks that share an error: one line, one block of dots
    weight: FloatArray  # (N,) inverse relative standard deviation

    def take(self, rows: NDArray[np.bool_]) -> Marks:
        """Give the chosen marks."""
        return Marks(
            *(getattr(self, name)[rows] for name in ("x", "y", "axis", "index", "cluster", "weight"))
        )

    @property
    def axes(self) -> tuple[int, ...]:
        """Coordinates that occur."""
        return tuple(int(a) for a in np.unique(self.axis))


@dataclass(frozen=True, slots=True)
class LatticeFit:
    """Map from the picture to lattice coordinates, fitted.

    With q = (place - centre) / radius and Q = q (1 + k |q|^2), coordinate a is (c0 + c1 Qx + c2 Qy) / (1 + g Q).
    """

    coefficients: FloatArray  # (axes, 3): c0, c1, c2
    radial: float  # k
    tilt: FloatArray  # (2,): g
    covariance: FloatArray  # of coefficients (flat), then k if it was fitted, then g if it was
    terms: tuple[str, ...]  # of "radial" and "tilt": what was fitted
    centre: tuple[float, float]  # px
    radius: float  # px
    residual: FloatArray  # (N,) px across the line
    used: BoolArray  # (N,) False: left out as an outlier
    hint_radial: (
        float  # k that shows at two to four standard uncertainties: too little to correct, 0 otherwise
    )
    hint_tilt: FloatArray  # (2,): the same of g
    mark_std: float  # px, of one mark against its line
    line_std: float  # px, common to the marks of one cluster


def grow_numbers(
    place: FloatArray, gradient: FloatArray, *, seed: int, unit: FloatArray, frame: FloatArray | None = None
) -> FloatArray:
    """Number marks outward from one of them.

    Parameters
    ----------
    place : ndarray of shape (N, 2)
        In px.
    gradient : ndarray of shape (K, 2)
        First estimate near the seed of K = 1 or 2 lattice coordinates per px.
    seed : int
        The mark to start from; it gets the number 0.
    unit : ndarray of shape (2,)
        Distance in px along both columns of `frame` that counts as one step of growth.
    frame : ndarray of shape (2, 2), optional
        Columns are the directions for `unit`; default the picture's axes.

    Returns
    -------
    coordinate : ndarray of shape (N, K)
        Lattice coordinates; those of true marks are whole numbers but for some hundredths.

    Notes
    -----
    Each round fits a polynomial map (first degree near the seed, third in the end) to the marks that lie on whole
    numbers within a radius, and widens the radius by a third: far less than it takes for a lens or a tilt to add
    half a pitch to what the map predicts.
    """
    offset = place - place[seed]
    steps = offset @ (np.eye(2) if frame is None else frame) / unit
    distance = np.hypot(steps[:, 0], steps[:, 1])
    scale = max(float(distance.max()), 1.0)
    coordinate = offset @ gradient.T
    radius = 3.2
    while True:
        inside = distance <= radius
        for _ in range(2):
            good = inside & (np.abs(coordinate - np.rint(coordinate)) < 0.25).all(axis=1)
            degree = _degree(
                int(good.sum()), radius, np.ptp(np.rint(coordinate[good]), axis=0) if good.any() else 0
            )
            basis = _powers(steps / min(radius, scale), degree)
            if good.sum() >= 2 * basis.shape[1] + 2:
                some = np.flatnonzero(good)[:: 1 + int(good.sum()) // ENOUGH]
                solution = np.linalg.lstsq(basis[some], np.rint(coordinate[some]), rcond=None)[0]
                coordinate = basis @ solution
        if radius >= scale:
            break
        radius *= 1.33
    return np.asarray(coordinate)


def _degree(count: int, radius: float, spans: NDArray[np.float64] | int) -> int:
    """Degree of the map that a number of marks over a number of lines can bear."""
    least = float(np.min(spans))
    if count >= 80 and radius > 9 and least >= 8:
        return 3
    return 2 if count >= 30 and radius > 5 and least >= 4 else 1


def _powers(t: FloatArray, degree: int) -> FloatArray:
    """Monomials of two variables up to a degree; columns."""
    return np.stack(
        [t[:, 0] ** (n - m) * t[:, 1] ** m for n in range(degree + 1) for m in range(n + 1)], axis=1
    )


def fit_lattice(marks: Marks, *, width: int, height: int) -> LatticeFit:
    """Fit the map from the picture to the lattice, with lens and tilt only where the residuals demand them.

    Parameters
    ----------
    marks : Marks
        Numbered.
    width, height : int
        Of the picture in px.

    Returns
    -------
    fit : LatticeFit
        Its covariance holds the scatter of single marks and what marks of one line share, both from the residuals.

    Notes
    -----
    Generalised least squares for marks that scatter by themselves and share an error with the marks of their line
    (J. C. Pinheiro and D. M. Bates, Mixed-Effects Models in S and S-PLUS, Springer 2000, 2.2); both variances come
    from the residuals, and marks beyond 4.5 standard deviations are left out. Lens and tilt are kept where their
    estimates exceed four standard uncertainties (Wald's test), lines taken to scatter as they do without them: so
    a few lines that are ruled unevenly are not taken for a lens, while lines that are bent are.
    """
    plain = _fit(marks, (), width, height)
    if len(marks.x) < 24:
        return plain
    terms: tuple[str, ...] = ("radial", "tilt")
    hints: dict[str, Any] = {}
    while terms:
        full = _fit(marks, terms, width, height, line_var=plain.line_std**2)
        strength = {name: _wald(full, name) for name in terms}
        weakest = min(strength, key=lambda name: strength[name])
        if strength[weakest] > 1:
            return replace(_fit(marks, terms, width, height), **hints)
        hints |= _hint(full, weakest, strength[weakest])
        terms = tuple(name for name in terms if name != weakest)
    return replace(plain, **hints)


def _hint(fit: LatticeFit, name: str, strength: float) -> dict[str, Any]:
    """Give a term that is left out, if it shows at more than two standard uncertainties, else nothing."""
    if strength < 0.25:
        return {}
    return {"hint_radial": fit.radial} if name == "radial" else {"hint_tilt": fit.tilt}


def _wald(fit: LatticeFit, name: str) -> float:
    """Wald statistic of a term over its limit: 16 for one parameter, 19.3 for two (both 4 standard deviations)."""
    first = fit.coefficients.size + (1 if name == "tilt" and "radial" in fit.terms else 0)
    rows = slice(first, first + (2 if name == "tilt" else 1))
    value = fit.tilt if name == "tilt" else np.array([fit.radial])
    spread = fit.covariance[rows, rows]
    if not np.isfinite(spread).all() or np.linalg.cond(spread) > 1e12:
        return 0.0
    return float(value @ np.linalg.solve(spread, value)) / (19.3 if name == "tilt" else 16.0)


def _fit(
    marks: Marks, terms: tuple[str, ...], width: int, height: int, line_var: float | None = None
) -> LatticeFit:
    """Fit one choice of terms, leaving outliers out; `line_var` None: from the residuals."""
    radius = float(np.hypot(width, height) / 2)
    centre = ((width - 1) / 2, (height - 1) / 2)
    q = np.stack([(marks.x - centre[0]) / radius, (marks.y - centre[1]) / radius], axis=1)
    theta = _affine_start(marks, q)
    split = len(theta)
    theta = np.concatenate([theta, np.zeros(("radial" in terms) + 2 * ("tilt" in terms))])
    pitch = _pitch_px(theta[:split], radius)[marks.axis]
    used = np.ones(len(q), dtype=bool)
    variances = 1.0, 0.0
    for _ in range(15):
        value, jacobian = lattice_map(theta, q, marks.axis, terms=terms)
        residual = (value - marks.index) * pitch
        left = marks.take(used)
        design = decorrelate(jacobian[used] * pitch[used, None], left, *variances)
        step = np.linalg.lstsq(
            design, -decorrelate(residual[used, None], left, *variances)[:, 0], rcond=None
        )[0]
        theta = theta + step
        residual = residual + jacobian @ step * pitch
        variances = _variances(residual[used], left, len(theta), line_var)
        again = _inliers(residual, marks)
        if np.abs(design @ step).max(initial=0) < 1e-5 and (again == used).all():
            break
        used = again if again.sum() > 2 * len(theta) else used
    value, jacobian = lattice_map(theta, q, marks.axis, terms=terms)
    residual = (value - marks.index) * pitch
    left = marks.take(used)
    variances = _variances(residual[used], left, len(theta), line_var)
    design = decorrelate(jacobian[used] * pitch[used, None], left, *variances)
    covariance = np.asarray(variances[0] * np.linalg.pinv(design.T @ design, rcond=1e-14), dtype=np.float64)
    radial = float(theta[split]) if "radial" in terms else 0.0
    tilt = theta[-2:].copy() if "tilt" in terms else np.zeros(2)
    stds = float(np.sqrt(variances[0])), float(np.sqrt(variances[1]))
    shape = np.asarray(theta[:split].reshape(-1, AFFINE), dtype=np.float64)
    return LatticeFit(
        shape, radial, tilt, covariance, terms, centre, radius, residual, used, 0.0, np.zeros(2), *stds
    )


def _inliers(residual: FloatArray, marks: Marks) -> BoolArray:
    """Marks within 4.5 robust standard deviations of their line's middle, and lines within 4.5 of theirs."""
    order = np.lexsort((residual, marks.cluster))
    bounds = np.searchsorted(marks.cluster[order], np.arange(int(marks.cluster.max()) + 2))
    last = np.maximum(bounds[1:], 1) - 1
    low, high = np.minimum((bounds[:-1] + last) // 2, last), np.minimum((bounds[:-1] + bounds[1:]) // 2, last)
    middle = 0.5 * (residual[order[low]] + residual[order[high]])  # medians; of empty clusters never used
    own = (residual - middle[marks.cluster]) * marks.weight
    spread = 1.4826 * float(np.median(np.abs(own)))
    all_spread = 1.4826 * float(np.median(np.abs(residual)))
    limit = max(4.5 * spread, 0.03)
    near: BoolArray = (np.abs(own) < limit) & (np.abs(residual) < max(4.5 * all_spread, limit))
    return near


def _affine_start(marks: Marks, q: FloatArray) -> FloatArray:
    """Coefficients of the plain map by linear least squares, for each coordinate."""
    parts = []
    for axis in marks.axes:
        rows = marks.axis == axis
        basis = np.column_stack([np.ones(rows.sum()), q[rows]])
        parts.append(np.linalg.lstsq(basis, marks.index[rows].astype(float), rcond=None)[0])
    return np.concatenate(parts)


def _pitch_px(coefficients: FloatArray, radius: float) -> FloatArray:
    """Distance between lines in px at the centre for each coordinate, of the plain map."""
    shape = coefficients.reshape(-1, AFFINE)
    return np.asarray(radius / np.hypot(shape[:, 1], shape[:, 2]))


def lattice_map(
    theta: FloatArray, q: FloatArray, axis: IntArray, *, terms: tuple[str, ...]
) -> tuple[FloatArray, FloatArray]:
    """Lattice coordinate of places and its derivatives after the parameters.

    Parameters
    ----------
    theta : ndarray of shape (P,)
        Coefficients of each coordinate, then k if "radial" is in `terms`, then g if "tilt" is.
    q : ndarray of shape (N, 2)
        Places from the centre in units of the radius.
    axis : ndarray of int of shape (N,)
        The coordinate asked for at each place.
    terms : tuple of str
        Of "radial" and "tilt".

    Returns
    -------
    value : ndarray of shape (N,)
        Lattice coordinate.
    jacobian : ndarray of shape (N, P)
        Its derivatives.
    """
    tilt = theta[-2:] if "tilt" in terms else np.zeros(2)
    split = len(theta) - 2 * ("tilt" in terms) - ("radial" in terms)
    radial = theta[split] if "radial" in terms else 0.0
    rho2 = (q**2).sum(axis=1)
    bent = q * (1 + radial * rho2)[:, None]
    depth = 1 + bent @ tilt
    shape = theta[:split].reshape(-1, AFFINE)[axis]
    value = (shape[:, 0] + (shape[:, 1:] * bent).sum(axis=1)) / depth
    jacobian = np.zeros((len(q), len(theta)))
    for column, factor in enumerate((np.ones(len(q)), bent[:, 0], bent[:, 1])):
        jacobian[np.arange(len(q)), AFFINE * axis + column] = factor / depth
    slope = (shape[:, 1:] - value[:, None] * tilt) / depth[:, None]
    if "radial" in terms:
        jacobian[:, split] = (slope * q).sum(axis=1) * rho2
    if "tilt" in terms:
        jacobian[:, -2:] = -value[:, None] * bent / depth[:, None]
    return value, jacobian


def _variances(
    residual: FloatArray, marks: Marks, parameters: int, line_var: float | None
) -> tuple[float, float]:
    """Variance of single marks, and the one that the marks of a line share, by the method of moments.

    The means of lines scatter as their marks do over the square root of their number; what exceeds this is shared.
    """
    weight = marks.weight
    _, cluster = np.unique(marks.cluster, return_inverse=True)
    count = int(cluster.max()) + 1
    power = np.bincount(cluster, weight**2, count)
    mean = np.bincount(cluster, residual * weight**2, count) / power
    within = (residual - mean[cluster]) * weight
    # Of the parameters, one direction of each coordinate rests on how lines run, the others on lines as wholes.
    axes = len(marks.axes)
    inner, outer = len(residual) - count - axes, max(1, count - (parameters - axes))
    if inner > 8:
        mark_var = float((within**2).sum() / inner)
    else:
        mark_var = float(((residual * weight) ** 2).sum() / max(1, len(residual) - parameters))
    mark_var = max(mark_var, 1e-12)
    if line_var is None:
        excess = float((power * mean**2).sum() / outer - mark_var)
        line_var = max(0.0, excess * count / float(power.sum())) * _student(outer) ** 2
    return mark_var, line_var


def decorrelate(rows: FloatArray, marks: Marks, mark_var: float, line_var: float) -> FloatArray:
    """Make the errors of marks independent and of equal variance `mark_var`, by taking a part of each line's mean off.

    Parameters
    ----------
    rows : ndarray of shape (N, P)
        Residuals or derivatives in px, one row a mark.
    marks : Marks
        Their weights and the lines that they belong to.
    mark_var, line_var : float
        Variance of one mark of weight 1, and of what the marks of one line share, px^2.

    Returns
    -------
    white : ndarray of shape (N, P)
        Rows for ordinary least squares.

    Notes
    -----
    Of a covariance s^2 1 + b^2 w w' the inverse root is (1 - t w w' / w'w) / s with
    t = 1 - s / sqrt(s^2 + b^2 w'w), for rows already multiplied by the weights w.
    """
    scaled = rows * marks.weight[:, None]
    if line_var <= 0:
        return scaled
    _, cluster = np.unique(marks.cluster, return_inverse=True)
    power = np.bincount(cluster, marks.weight**2)
    part = 1 - np.sqrt(mark_var / (mark_var + line_var * power))
    sums = np.zeros((len(power), rows.shape[1]))
    np.add.at(sums, cluster, scaled * marks.weight[:, None])
    return np.asarray(scaled - (part / power)[cluster, None] * sums[cluster] * marks.weight[:, None])


def _student(dof: int) -> float:
    """Student's factor that gives a standard deviation from few values the coverage of one from many (68.27 %).

    JCGM 100:2008, G.3; the closed form is within 0.3 % of table G.2 from 2 degrees of freedom on.
    """
    return float(1 + 0.5 / dof + 0.3 / dof**2) if dof > 1 else 1.84


def local_gradient(fit: LatticeFit, x: FloatArray, y: FloatArray) -> FloatArray:
    """Gradient of the lattice coordinates, per px of the picture after the lens is corrected.

    Parameters
    ----------
    fit : LatticeFit
        The map.
    x, y : ndarray of shape (N,)
        Places in px, after correction.

    Returns
    -------
    gradient : ndarray of shape (N, axes, 2)
        Per px along x and y.
    """
    q = np.stack([(x - fit.centre[0]) / fit.radius, (y - fit.centre[1]) / fit.radius], axis=1)
    depth = 1 + q @ fit.tilt
    value = (fit.coefficients[:, 0][None, :] + q @ fit.coefficients[:, 1:].T) / depth[:, None]
    slope = fit.coefficients[None, :, 1:] - value[:, :, None] * fit.tilt[None, None, :]
    return np.asarray(slope / depth[:, None, None] / fit.radius)


def without_outliers(marks: Marks, fit: LatticeFit) -> tuple[Marks, LatticeFit]:
    """Give marks and fit with the outliers taken out of both.

    Parameters
    ----------
    marks : Marks
        As fitted.
    fit : LatticeFit
        Of these marks.

    Returns
    -------
    marks : Marks
        Those used.
    fit : LatticeFit
        With residuals of those alone.
    """
    keep = fit.used
    return marks.take(keep), replace(
        fit, residual=fit.residual[keep], used=np.ones(int(keep.sum()), dtype=bool)
    )
