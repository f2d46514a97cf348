"""Pictures of a reference pattern -> scale, with an uncertainty that holds what pictures and pattern leave open."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from calibration.errors import PatternError, QuantityError
from calibration.lattice import LatticeFit, local_gradient
from calibration.pattern import Lattice, find_pattern
from calibration.pictures import Picture, read_picture
from calibration.quantity import parse_quantity, states_uncertainty
from calibration.scale import Distortion, PictureScale, Scale, undistort

FloatArray = NDArray[np.float64]

# What marks at opposite ends of a pattern may share for reasons that no fit sees: the light's slope under a line,
# the bend of a line within its strip, the camera's own grid. Simulated pictures without noise show up to this.
FLOOR_PX = 0.01
WORST_STD = 0.5  # relative: beyond this nothing is measured
LEAST_AGREEMENT = 1e-3  # probability below which several pictures do not agree
CLEAR = 1e-3  # probability of chance below which a difference or drift is told


@dataclass(frozen=True, slots=True)
class Found:
    """One picture and the pattern found in it, for drawing."""

    picture: Picture
    lattice: Lattice
    pitch_px: tuple[float, float]  # along x and y; equal for lines
    scale: Scale


def measure_scale(
    pictures: Sequence[Path | str], *, pitch_text: str, pattern: str | None = None
) -> tuple[Scale, tuple[Found, ...]]:
    """Measure the scale from one or several pictures or recordings of a reference pattern.

    Parameters
    ----------
    pictures : sequence of Path or str
        Picture or video files, all taken with the same bench.
    pitch_text : str
        Distance between neighbouring lines or dots with its tolerance, such as ``"0.1000(2) mm"``.
    pattern : {"lines", "grid", "dots"} or None, optional
        What to look for; None finds out.

    Returns
    -------
    scale : Scale
        Of the picture, or of all pictures together.
    found : tuple of Found
        What was found in each, for `calibration.drawing`.

    Raises
    ------
    QuantityError
        If the pitch cannot be read or is not positive.
    PatternError
        If a picture shows no pattern that can be trusted, or pictures differ in size.
    """
    pitch, pitch_std = parse_quantity(pitch_text, "m")
    if pitch <= 0:
        raise QuantityError(pitch_text, "the pitch must be above 0 m")
    if not pictures:
        raise ValueError("pictures is empty: at least one is needed")
    notes = (
        ()
        if states_uncertainty(pitch_text)
        else ("the pitch has no uncertainty, so none of it is in the scale's",)
    )
    found = []
    for path in pictures:
        picture = read_picture(path)
        lattice = find_pattern(picture.grey, pattern, name=str(path))
        found.append(scale_of(picture, lattice, pitch=pitch, notes=notes))
    scale = found[0].scale if len(found) == 1 else pool_scales([one.scale for one in found])
    tolerance = pitch_std / pitch
    return with_tolerance(scale, pitch_std=pitch_std, relative=tolerance), tuple(found)


def with_tolerance(scale: Scale, *, pitch_std: float, relative: float) -> Scale:
    """Join the tolerance of the pattern to the uncertainty of a scale; it is common to both axes and all pictures.

    Parameters
    ----------
    scale : Scale
        Without it.
    pitch_std : float
        In m.
    relative : float
        The same over the pitch.

    Returns
    -------
    scale : Scale
        With both uncertainties enlarged in quadrature.
    """
    return replace(
        scale,
        pitch_std=pitch_std,
        metres_per_pixel_x_std=float(
            np.hypot(scale.metres_per_pixel_x_std, relative * scale.metres_per_pixel_x)
        ),
        metres_per_pixel_y_std=float(
            np.hypot(scale.metres_per_pixel_y_std, relative * scale.metres_per_pixel_y)
        ),
    )


def scale_of(picture: Picture, lattice: Lattice, *, pitch: float, notes: tuple[str, ...] = ()) -> Found:
    """Turn a fitted lattice into a scale, without the pattern's tolerance.

    Parameters
    ----------
    picture : Picture
        Where it was found.
    lattice : Lattice
        The pattern.
    pitch : float
        In m.
    notes : tuple of str, optional
        Warnings to go first.

    Returns
    -------
    found : Found
        Scale and pitch in px at the centre of the picture.
    """
    fit = lattice.fit
    gradient = local_gradient(fit, np.array([fit.centre[0]]), np.array([fit.centre[1]]))[0]
    directions = _directions(lattice, gradient)
    steps = [float(np.linalg.norm(gradient @ direction)) for direction in directions]
    relative = [_relative_std(lattice, gradient, direction) for direction in directions]
    bend = _distortion(lattice)
    spread = bend.remaining_variation if bend is not None else 0.0
    stds = [float(np.hypot(std, spread)) for std in relative]
    if max(stds) > WORST_STD:
        raise PatternError(str(picture.path), f"the pattern is tilted or bent so far that its scale is uncertain by "
                           f"{100 * max(stds):.0f} %; lay it flat and square to the camera")  # fmt: skip
    warnings = [*notes, *_warnings(lattice, gradient, relative, bend)]
    if bend is not None and not bend.corrected and bend.remaining_variation == 0:
        bend = None
    angle = np.rad2deg(np.arctan2(gradient[0, 1], gradient[0, 0]))
    turn = (angle + 90) % 180 - 90 if lattice.pattern == "lines" else (angle + 45) % 90 - 45
    scale = Scale(
        lattice.pattern, pitch, 0.0,
        pitch * steps[0], pitch * steps[0] * stds[0], pitch * steps[-1], pitch * steps[-1] * stds[-1],
        rotation_deg=float(turn), residual_px=float(np.sqrt(np.mean(fit.residual**2))), distortion=bend,
        picture=picture.path.name, picture_sha256=picture.sha256, width_px=lattice.width, height_px=lattice.height,
        warnings=tuple(warnings), date=picture.date,
    )  # fmt: skip
    return Found(picture, lattice, (1 / steps[0], 1 / steps[-1]), scale)


def _directions(lattice: Lattice, gradient: FloatArray) -> list[FloatArray]:
    """Directions in the picture along which the scale is measured: x and y, or across the lines."""
    if lattice.pattern == "lines":
        return [gradient[0] / np.hypot(*gradient[0])]
    return [np.array([1.0, 0.0]), np.array([0.0, 1.0])]


def _relative_std(lattice: Lattice, gradient: FloatArray, direction: FloatArray) -> float:
    """Relative standard uncertainty of the scale along a direction: the fit's, and the floor over the pattern."""
    fit = lattice.fit
    step = gradient @ direction
    share = step / (step @ step)  # derivative of ln|step| after step
    derivative = np.zeros(len(fit.covariance))
    for axis, part in enumerate(share):
        derivative[3 * axis + 1 : 3 * axis + 3] = part * direction / fit.radius
    if "tilt" in fit.terms:
        derivative[-2:] = -(share @ fit.coefficients[:, 0]) * direction / fit.radius
    along = lattice.marks.x * direction[0] + lattice.marks.y * direction[1]
    return float(np.hypot(np.sqrt(derivative @ fit.covariance @ derivative), FLOOR_PX / np.ptp(along)))


def _distortion(lattice: Lattice) -> Distortion | None:
    """Lens and tilt that were fitted or hinted at, and how much the scale varies over the picture by them."""
    fit = lattice.fit
    if not fit.terms and fit.hint_radial == 0 and not fit.hint_tilt.any():
        return None
    hint = replace(
        fit, radial=fit.radial or fit.hint_radial, tilt=fit.tilt if fit.tilt.any() else fit.hint_tilt
    )
    total = _variation(lattice, hint)
    without_lens = replace(hint, radial=0.0 if fit.radial else fit.hint_radial)
    remaining = _variation(lattice, without_lens)
    slope_x, slope_y = (float(-2 * g / fit.radius) for g in fit.tilt)
    return Distortion(fit.radial, *fit.centre, fit.radius, slope_x, slope_y, total, remaining)


def _variation(lattice: Lattice, fit: LatticeFit) -> float:
    """Rms over the picture of the local scale's relative difference from that at the centre."""
    x, y = (
        v.ravel()
        for v in np.meshgrid(np.linspace(0, lattice.width - 1, 13), np.linspace(0, lattice.height - 1, 13))
    )
    ratios = []
    for direction in _directions(
        lattice, local_gradient(fit, np.array([fit.centre[0]]), np.array([fit.centre[1]]))[0]
    ):
        ends = []
        for side in (-0.5, 0.5):
            at = undistort(x + side * direction[0], y + side * direction[1],
                           radial=fit.radial, centre=fit.centre, radius=fit.radius)  # fmt: skip
            q = np.stack([(at[0] - fit.centre[0]) / fit.radius, (at[1] - fit.centre[1]) / fit.radius], axis=1)
            ends.append(
                (fit.coefficients[:, 0] + q @ fit.coefficients[:, 1:].T) / (1 + q @ fit.tilt)[:, None]
            )
        local = np.hypot.reduce(np.atleast_2d((ends[1] - ends[0]).T), axis=0)
        middle = local[len(local) // 2]
        ratios.append(local / middle - 1)
    return float(np.sqrt(np.mean(np.square(ratios))))


def _warnings(
    lattice: Lattice, gradient: FloatArray, relative: list[float], bend: Distortion | None
) -> list[str]:
    """Tell what a user must know of this scale."""
    told = []
    if lattice.pattern == "lines":
        angle = np.rad2deg(np.arctan2(gradient[0, 1], gradient[0, 0]))
        turn = abs((angle + 90) % 180 - 90)
        told.append(f"ruled lines measure the scale across them only, {turn:.1f} degrees from the rows; the other "
                    f"direction is taken to be the same")  # fmt: skip
    else:
        told += _square_warnings(gradient, relative)
    if bend is None:
        return told
    stated = max(relative)
    if bend.corrected:
        told.append(f"the lens bends the picture: the scale varies by {100 * bend.scale_variation:.2g} % rms over it; "
                    f"the correction is stored and used on the tracks")  # fmt: skip
    if bend.perspective_x or bend.perspective_y:
        told.append(f"the pattern is tilted against the camera (perspective): the scale varies by "
                    f"{100 * bend.remaining_variation:.2g} % rms over the picture, which is in its uncertainty; lay "
                    f"the pattern square to the camera and take a new picture")  # fmt: skip
    elif bend.remaining_variation > stated:
        told.append(f"the lens or a tilt may vary the scale by {100 * bend.remaining_variation:.2g} % rms over the "
                    f"picture; this is in its uncertainty")  # fmt: skip
    return told


def _square_warnings(gradient: FloatArray, relative: list[float]) -> list[str]:
    """Tell of pixels that are not square, and of a lattice that is askew."""
    told = []
    steps = np.hypot(gradient[0], gradient[1])
    if abs(np.log(steps[0] / steps[1])) > 4 * np.hypot(relative[0], relative[1]):
        told.append(f"the scales along x and y differ by {100 * (steps[0] / steps[1] - 1):+.3f} %: the pixels are not "
                    f"square, or the pattern is tilted")  # fmt: skip
    skew = np.rad2deg(np.arcsin(np.clip(gradient[:, 0] @ gradient[:, 1] / steps.prod(), -1, 1)))
    if abs(np.deg2rad(skew)) > 6 * np.hypot(relative[0], relative[1]):
        told.append(f"the pattern's rows and columns are {90 - abs(skew):.3f} degrees apart, not 90: it is tilted "
                    f"against the camera about a slanting axis")  # fmt: skip
    return told


def pool_scales(scales: Sequence[Scale]) -> Scale:
    """Join scales of several pictures of one bench, testing whether they agree and whether they drift.

    Parameters
    ----------
    scales : sequence of Scale
        Each with its own uncertainty only, without the pattern's tolerance, which is common to all.

    Returns
    -------
    scale : Scale
        Weighted mean. Where the pictures scatter more than their uncertainties allow, its uncertainty grows by the
        root of chi-squared over its degrees of freedom, and a warning says so; a drift with the pictures' dates
        that chance does not explain is told with its rate.

    Raises
    ------
    PatternError
        If the pictures differ in size or pattern.

    Notes
    -----
    Weighted mean and the ratio of R. T. Birge, Phys. Rev. 40 (1932), 207-227.
    """
    from scipy.stats import chi2

    _require_alike(scales)
    means, stds, warnings = {}, {}, list(dict.fromkeys(w for scale in scales for w in scale.warnings))
    for axis in "xy":
        value = np.array([getattr(s, f"metres_per_pixel_{axis}") for s in scales])
        std = np.array([getattr(s, f"metres_per_pixel_{axis}_std") for s in scales])
        weight = 1 / std**2
        means[axis] = float((weight * value).sum() / weight.sum())
        chi = float((weight * (value - means[axis]) ** 2).sum())
        dof = len(scales) - 1
        stds[axis] = float(1 / np.sqrt(weight.sum()))
        if chi2.sf(chi, dof) < LEAST_AGREEMENT:
            stds[axis] *= float(np.sqrt(chi / dof))
            spread = 100 * np.std(value, ddof=1) / means[axis]
            warnings.append(
                f"the pictures' scales along {axis} differ by {spread:.2g} % rms, more than their uncertainties allow "
                f"(chi-squared {chi:.0f} for {dof} degrees of freedom); the uncertainty holds the difference"
            )
        drift = _drift(scales, value / means[axis], std / means[axis])
        if drift:
            warnings.append(f"along {axis} {drift}")
    entries = tuple(PictureScale(s.picture, s.picture_sha256, s.date, s.metres_per_pixel_x, s.metres_per_pixel_x_std)
                    for s in scales)  # fmt: skip
    return replace(
        scales[0],
        metres_per_pixel_x=means["x"], metres_per_pixel_x_std=stds["x"],
        metres_per_pixel_y=means["y"], metres_per_pixel_y_std=stds["y"],
        residual_px=float(np.sqrt(np.mean([s.residual_px**2 for s in scales]))),
        distortion=_mean_distortion(scales), picture=", ".join(s.picture for s in scales),
        date=max(s.date for s in scales), warnings=tuple(dict.fromkeys(warnings)), pictures=entries,
    )  # fmt: skip


def _require_alike(scales: Sequence[Scale]) -> None:
    """Refuse pictures of different sizes, and ruled lines beside a lattice."""
    first = scales[0]
    for other in scales[1:]:
        if (other.width_px, other.height_px) != (first.width_px, first.height_px):
            raise PatternError(
                other.picture,
                f"has {other.width_px} x {other.height_px} px, {first.picture} {first.width_px} x {first.height_px} px;"
                f" pictures for one scale must be of one size",
            )
        if (other.pattern == "lines") != (first.pattern == "lines"):
            text = f"shows {other.pattern}, {first.picture} {first.pattern}; measure them apart"
            raise PatternError(other.picture, text)


def _mean_distortion(scales: Sequence[Scale]) -> Distortion | None:
    """Mean of the lenses that the pictures show; a picture that shows none counts as none."""
    bends = [s.distortion for s in scales if s.distortion is not None]
    if not bends:
        return None
    names = ("radial", "perspective_x", "perspective_y", "scale_variation", "remaining_variation")
    mean = {name: float(sum(getattr(b, name) for b in bends) / len(scales)) for name in names}
    return replace(bends[0], **mean)


def _drift(scales: Sequence[Scale], value: FloatArray, std: FloatArray) -> str:
    """Tell a drift of the relative scale with the date, if chance does not explain it."""
    from datetime import datetime

    from scipy.stats import norm

    days = np.array(
        [datetime.fromisoformat(s.date).timestamp() / 86400 if s.date else np.nan for s in scales]
    )
    if not np.isfinite(days).all() or np.ptp(days) < 0.5:
        return ""
    weight = 1 / std**2
    centred = days - (weight * days).sum() / weight.sum()
    power = float((weight * centred**2).sum())
    rate, rate_std = float((weight * centred * value).sum() / power), 1 / np.sqrt(power)
    # Where pictures scatter by more than they state, that scatter, not the stated one, makes chance slopes.
    rest = value - (weight * value).sum() / weight.sum() - rate * centred
    if len(value) > 2:
        rate_std *= max(1.0, float(np.sqrt((weight * rest**2).sum() / (len(value) - 2))))
    if 2 * norm.sf(abs(rate) / rate_std) > CLEAR:
        return ""
    return (f"the scale drifts with the pictures' dates by {100 * rate:+.2g}({100 * rate_std:.1g}) % a day; use the "
            f"scale taken nearest to the recording")  # fmt: skip


def describe(scale: Scale) -> str:
    """Say a scale and what to know about it in a few lines.

    Parameters
    ----------
    scale : Scale
        As measured.

    Returns
    -------
    text : str
        Without a line break at its end.
    """
    lines = [f"{scale.picture}: {scale.pattern}, rotated by {scale.rotation_deg:.3f} degrees"]
    for axis in "xy":
        value, std = (getattr(scale, f"metres_per_pixel_{axis}{end}") for end in ("", "_std"))
        lines.append(
            f"  {axis}: {1e6 * value:.7g} +/- {1e6 * std:.2g} um a pixel ({100 * std / value:.2g} %)"
        )
    return "\n".join([*lines, *(f"  note: {warning}" for warning in scale.warnings)])
