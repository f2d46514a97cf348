"""Find a reference pattern in a picture: ruled lines, a square grid or a dot grid, or a reason why there is none."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from calibration.dots import MOST_DOTS, Spots, find_corners, find_dots, lattice_vectors, refine_spots
from calibration.errors import PatternError
from calibration.lattice import (
    SAME,
    LatticeFit,
    Marks,
    fit_lattice,
    grow_numbers,
    local_gradient,
    without_outliers,
)
from calibration.lines import LinePoints, flatten, line_directions, line_points, without_debris
from calibration.trust import (
    LEAST_LINES,
    Refusal,
    inner_nodes,
    is_board,
    judge_lines,
    judge_nodes,
    largest_block,
    real_lines,
)

FloatArray = NDArray[np.float64]
PATTERNS = ("lines", "grid", "dots")

UNBROKEN = 0.4  # continuity below which "lines" are rows of dots or squares
WORST_MARK = (
    0.015  # of the pitch: scatter of marks along a line, above which it is not ruled; noise may do 0.3 px
)
WORST_LINE = (
    0.006  # of the pitch: scatter of lines, six times what a stage micrometer may have; debris may do 0.2 px
)


@dataclass(frozen=True, slots=True)
class Lattice:
    """A pattern that was found and can be trusted."""

    pattern: str  # lines, grid or dots
    features: str  # lines, dots, or corners (of a chessboard)
    marks: Marks
    fit: LatticeFit
    counts: tuple[int, ...]  # lines (rows and columns of dots) from first to last, for each coordinate
    width: int  # of the picture, px
    height: int


def find_pattern(
    picture: NDArray[np.generic], pattern: str | None = None, *, name: str = "picture"
) -> Lattice:
    """Find the reference pattern in a picture.

    Parameters
    ----------
    picture : ndarray of shape (rows, columns)
        Grey values of any depth.
    pattern : {"lines", "grid", "dots"} or None, optional
        What to look for; None tries all.
    name : str, optional
        The file, for messages.

    Returns
    -------
    lattice : Lattice
        The marks with their numbers and the fitted map.

    Raises
    ------
    PatternError
        If no pattern can be trusted; the message says why.
    """
    if pattern not in (None, *PATTERNS):
        raise ValueError(f"pattern = {pattern!r}: must be one of {', '.join(PATTERNS)}, or None")
    grey = np.asarray(picture, dtype=np.float32)
    if grey.ndim != 2 or min(grey.shape) < 48:
        raise PatternError(
            name, f"the picture has {' x '.join(map(str, grey.shape[::-1]))} px; at least 48 x 48 are needed"
        )
    if not np.isfinite(grey).all() or grey.max() <= grey.min():
        raise PatternError(name, "the picture is one flat grey; is the lamp on and the pattern in focus?")
    flat = flatten(grey)
    refusals = []
    # Diagonals of a board pass for lines, rows of fine dots for lines along diagonals: the order keeps them apart.
    for search in (_search_corners, _search_lines, _search_dots, _search_diagonals):
        found = search(flat, pattern)
        if isinstance(found, Lattice):
            return found
        if found is not None:
            refusals.append(found)
    best = max(refusals, key=lambda refusal: refusal.progress)
    raise PatternError(name, best.why)


def _search_lines(flat: NDArray[np.float32], pattern: str | None) -> Lattice | Refusal | None:
    """Look for one or two families of ruled lines."""
    return None if pattern == "dots" else _lines_along(flat, line_directions(flat), pattern)


def _search_diagonals(flat: NDArray[np.float32], pattern: str | None) -> Lattice | Refusal | None:
    """Look for lines at 45 degrees to the gradients.

    Cells of a grid that are as small as its blurred lines are wide look like dots, whose gradients peak along the
    diagonals.
    """
    angles = [(angle + np.pi / 4) % np.pi for angle in line_directions(flat)[:2]]
    return None if pattern == "dots" else _lines_along(flat, angles, pattern)


def _lines_along(flat: NDArray[np.float32], angles: list[float], pattern: str | None) -> Lattice | Refusal:
    """Look for families of lines in given directions."""
    refusal = Refusal("no lines, grid or dots stand out from the picture", 0)
    families: list[_Family] = []
    for angle in angles:
        found = _family(flat, angle)
        if isinstance(found, Refusal):
            refusal = found if found.progress > refusal.progress else refusal
        else:
            families.append(found)
    if not families:
        return refusal
    # A chance direction may collect marks of true lines, but it scatters.
    sharpest = min(family.scatter for family in families)
    families = [family for family in families if family.scatter <= max(3 * sharpest, 0.05)]
    first = max(families, key=lambda family: len(family.marks.x))
    second = next((family for family in families if _crosses(first.points, family.points)), None)
    if second is None or pattern == "lines":
        if pattern == "grid":
            return Refusal("lines run in one direction only; for a ruled scale use --pattern lines", 6)
        return _accept("lines", "lines", first.marks, flat)
    return _accept("grid", "lines", _join(first, second), flat)


@dataclass(frozen=True, slots=True)
class _Family:
    """Lines of one direction."""

    points: LinePoints
    marks: Marks
    scatter: float  # px, of marks along a line


def _family(flat: NDArray[np.float32], angle: float) -> _Family | Refusal:
    """Locate and number the lines of one direction."""
    points = line_points(flat, angle)
    if points is None:
        return Refusal("no lines, grid or dots stand out from the picture", 0)
    found = _number_lines(points)
    if isinstance(found, Refusal):
        return found
    points, marks = _second_look(flat, points, found)
    fit = fit_lattice(marks, width=flat.shape[1], height=flat.shape[0])
    return _uneven(fit) or _Family(points, marks, fit.mark_std)


def _second_look(flat: NDArray[np.float32], points: LinePoints, marks: Marks) -> tuple[LinePoints, Marks]:
    """Locate the lines again with their direction known to 0.01 degree and debris kept down.

    A line that leans within its strip is shifted where it ends or is covered in mid-strip.
    """
    basis = np.column_stack([np.ones(len(marks.x)), marks.x, marks.y])
    slope = np.linalg.lstsq(basis, marks.index.astype(float), rcond=None)[0][1:]
    angle = float(np.arctan2(slope[1], slope[0]) % np.pi)
    mark, ground = points.levels
    again = line_points(without_debris(flat, mark=mark, ground=ground), angle, careful=True)
    if again is None or not 0.8 < again.pitch / points.pitch < 1.25:
        return points, marks
    found = _number_lines(again)
    return (again, found) if isinstance(found, Marks) else (points, marks)


def _crosses(one: LinePoints, other: LinePoints) -> bool:
    """Tell whether two families make a square grid: crossing at about 90 degrees with about the same pitch."""
    crossing = abs((one.angle - other.angle) % np.pi - np.pi / 2)
    return crossing < np.deg2rad(15) and 0.7 < one.pitch / other.pitch < 1.43


def _join(first: _Family, second: _Family) -> Marks:
    """Give the marks of both families of a grid as one, the one whose lines are crossed along the rows first."""
    families = sorted((first, second), key=lambda family: abs(np.sin(family.points.angle)))
    one, two = (family.marks for family in families)
    shift = int(one.cluster.max()) + 1
    return Marks(
        np.concatenate([one.x, two.x]),
        np.concatenate([one.y, two.y]),
        np.concatenate([one.axis, np.ones_like(two.axis)]),
        np.concatenate([one.index, two.index]),
        np.concatenate([one.cluster, two.cluster + shift]),
        np.concatenate([one.weight, two.weight]),
    )


def _number_lines(points: LinePoints) -> Marks | Refusal:
    """Number the lines of one family, or say why they are none."""
    if points.continuity < UNBROKEN:
        return Refusal("what repeats in the picture is no unbroken line", 1)
    place = np.stack([points.x, points.y], axis=1)
    direction = np.array([np.cos(points.angle), np.sin(points.angle)])
    frame = np.stack([direction, [-direction[1], direction[0]]], axis=1)
    rows = np.unique(points.along)
    spacing = float(np.diff(rows).min()) if len(rows) > 1 else points.pitch
    unit = np.array([points.pitch, max(points.pitch, spacing)])
    best, coordinate = -1.0, np.zeros(len(place))
    for seed in _seeds(place):
        pitch = _local_pitch(points, seed)
        grown = grow_numbers(place, direction[None, :] / pitch, seed=seed, unit=unit, frame=frame)[:, 0]
        near = np.abs(grown - np.rint(grown)) < SAME
        score = float(points.contrast[near].sum() / points.contrast.sum())
        if score > best:
            best, coordinate = score, grown
        if score > 0.93:
            break
    problem = judge_lines(coordinate, points.contrast, strips=points.strips)
    if problem is not None:
        return problem
    near = real_lines(coordinate, points.contrast)
    index = np.rint(coordinate[near]).astype(np.int64)
    weight = np.clip(points.contrast[near] / np.median(points.contrast[near]), 0.3, 1.5)
    return Marks(place[near, 0], place[near, 1], np.zeros_like(index), index, index - index.min(), weight)


def _seeds(place: FloatArray) -> list[int]:
    """Marks to start numbering from: near the middle of all, then of each quarter of the picture."""
    middle = np.median(place, axis=0)
    low, high = (np.percentile(place, q, axis=0) for q in (25, 75))
    targets = [middle, low, high, np.array([low[0], high[1]]), np.array([high[0], low[1]])]
    return [int(np.argmin(((place - target) ** 2).sum(axis=1))) for target in targets]


def _local_pitch(points: LinePoints, seed: int) -> float:
    """Usual distance of neighbours in the strips about the seed; the first estimate where there are none."""
    rows = np.unique(points.along)
    near = np.argsort(np.abs(rows - points.along[seed]))[:3]
    gaps = np.concatenate([np.diff(np.sort(points.across[points.along == rows[n]])) for n in near])
    gaps = gaps[np.abs(gaps / points.pitch - 1) < 0.35]
    return float(np.median(gaps)) if len(gaps) else points.pitch


def _search_dots(flat: NDArray[np.float32], pattern: str | None) -> Lattice | Refusal | None:
    """Look for a dot grid, dark on bright and bright on dark."""
    if pattern in ("lines", "grid"):
        return None
    best = Refusal("no dots of like size stand out from the picture", 0)
    for sign in (-1, 1):
        spots = find_dots(flat, sign)
        # Dots that fill more than this are the squares of a board or the cells of a grid.
        if spots is None or spots.fill > 0.42:
            continue
        found = _number_nodes(flat, spots, kernel=max(0.8, 0.8 * spots.size))
        result = _accept("dots", "dots", found, flat) if isinstance(found, Marks) else found
        if isinstance(result, Lattice):
            return result
        best = result if result.progress > best.progress else best
    return best


def _search_corners(flat: NDArray[np.float32], pattern: str | None) -> Lattice | Refusal | None:
    """Look for the corners of a chessboard, which is a square grid without lines."""
    if pattern in ("lines", "dots"):
        return None
    best = Refusal("no grid stands out from the picture", 0)
    # Around a board a room may show corners too: at first only the strongest are taken.
    for sigma, least in ((2.0, 0.4), (2.0, 0.15), (4.0, 0.4), (4.0, 0.15)):
        spots = find_corners(flat, sigma, least=least)
        if spots is None:
            continue
        found = _number_nodes(flat, spots, kernel=spots.size)
        if isinstance(found, Marks) and not is_board(flat, found):
            found = Refusal("no grid stands out from the picture", 0)
        result = _accept("grid", "corners", found, flat) if isinstance(found, Marks) else found
        if isinstance(result, Lattice):
            return result
        best = result if result.progress > best.progress else best
    return best


def _number_nodes(flat: NDArray[np.float32], spots: Spots, *, kernel: float) -> Marks | Refusal:
    """Number dots or corners in two directions, or say why they are no lattice."""
    steps = lattice_vectors(spots.place)
    if steps is None:
        return Refusal("spots are there, but they stand in no square lattice", 1)
    size = np.hypot(steps[:, 0], steps[:, 1])
    if not 0.7 < size[0] / size[1] < 1.43 or abs(steps[0] @ steps[1]) > 0.3 * size.prod():
        return Refusal("spots stand in a lattice that is not square", 2)
    gradient = np.asarray(np.linalg.inv(steps).T, dtype=np.float64)
    best, coordinate, block = 0, np.zeros_like(spots.place), np.zeros(len(spots.place), dtype=bool)
    for seed in _seeds(spots.place):
        grown = grow_numbers(spots.place, gradient, seed=seed, unit=np.full(2, size.mean()))
        chosen = largest_block(grown)
        if chosen.sum() > best:
            best, coordinate, block = int(chosen.sum()), grown, chosen
        if best > 0.9 * len(spots.place):
            break
    problem = judge_nodes(coordinate, block)
    if problem is not None:
        return problem
    rows = np.flatnonzero(inner_nodes(coordinate, block))
    if len(rows) > MOST_DOTS:
        rows = np.sort(np.random.default_rng(0).choice(rows, MOST_DOTS, replace=False))
    place, fine = refine_spots(
        _clean(flat, spots, steps, spots.place[rows]), spots.place[rows], kernel, steps=steps
    )
    if fine.sum() < 9:
        return Refusal("dots are there, but too few of them can be located", 3)
    return _node_marks(place[fine], np.rint(coordinate[rows][fine]).astype(np.int64))


def _clean(
    flat: NDArray[np.float32], spots: Spots, steps: FloatArray, place: FloatArray
) -> NDArray[np.float32]:
    """Keep debris down: cut off what is brighter or darker than dots and the middles between four of them."""
    if spots.fill == 0:
        return flat
    limit = np.array(flat.shape[::-1]) - 1
    middle = np.clip(np.rint(place + steps.sum(axis=0) / 2), 0, limit).astype(int)
    centre = np.clip(np.rint(place), 0, limit).astype(int)
    mark, ground = (float(np.median(flat[at[:, 1], at[:, 0]])) for at in (centre, middle))
    return without_debris(flat, mark=mark, ground=ground)


def _node_marks(place: FloatArray, index: NDArray[np.int64]) -> Marks:
    """Give two marks for each node; blocks of up to 4 x 4 nodes may share an error."""
    span = np.ptp(index, axis=0) + 1
    block = int(np.clip(span.min() // 3, 1, 4))
    cells = (index - index.min(axis=0)) // block
    cluster = cells[:, 0] * (int(cells[:, 1].max()) + 1) + cells[:, 1]
    both, zero = np.tile(place, (2, 1)), np.zeros(len(place), dtype=np.int64)
    return Marks(
        both[:, 0],
        both[:, 1],
        np.concatenate([zero, zero + 1]),
        np.concatenate([index[:, 0], index[:, 1]]),
        np.concatenate([cluster, cluster + int(cluster.max(initial=0)) + 1]),
        np.ones(2 * len(place)),
    )


def _accept(pattern: str, features: str, marks: Marks, flat: NDArray[np.float32]) -> Lattice | Refusal:
    """Fit the map and take the pattern only if the marks obey it."""
    height, width = flat.shape
    if len(marks.x) < 12:
        return Refusal("fewer than 12 places on lines or dots could be measured", 3)
    all_marks = len(marks.x)
    fit = fit_lattice(marks, width=width, height=height)
    marks, fit = without_outliers(marks, fit)
    if len(marks.x) < 0.6 * all_marks:
        return Refusal("lines or dots do not obey one lattice: more than 40 % of them are outliers", 6)
    counts = []
    for axis in marks.axes:
        index = marks.index[marks.axis == axis]
        counts.append(int(index.max() - index.min()) + 1)
    if max(counts) < LEAST_LINES or min(counts) < LEAST_LINES - 1:
        return Refusal(f"only {max(counts)} lines are in the picture; at least {LEAST_LINES} are needed", 6)
    problem = _uneven(fit) if features != "corners" else None
    if problem is not None:
        return problem
    return Lattice(pattern, features, marks, fit, tuple(counts), width, height)


def _uneven(fit: LatticeFit) -> Refusal | None:
    """Say if marks scatter more about the best lattice than those of a reference pattern do."""
    centre = np.array([fit.centre[0]]), np.array([fit.centre[1]])
    pitch = float((1 / np.linalg.norm(local_gradient(fit, *centre)[0], axis=1)).min())
    if fit.mark_std > max(0.3, WORST_MARK * pitch) or fit.line_std > max(0.2, WORST_LINE * pitch):
        return Refusal("lines or dots stand too unevenly for a reference pattern", 6)
    return None
