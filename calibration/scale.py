"""The scale of a picture: the record, its JSON file, its use on points and its fit to a recording."""

from __future__ import annotations

import json
import math
import os
import tempfile
from collections.abc import Mapping
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from calibration.errors import ScaleError

FloatArray = NDArray[np.float64]

# The JSON key of each field whose name in Python says the unit by being SI.
_KEYS = {"pitch": "pitch_m", "pitch_std": "pitch_std_m"}
_KEYS |= {f"metres_per_pixel_{axis}_std": f"metres_per_pixel_{axis}_std" for axis in "xy"}


@dataclass(frozen=True, slots=True)
class Distortion:
    """What bends the picture of the pattern.

    A point at distance rho from the centre, in units of `radius_px`, is moved to 1 + `radial` rho^2 times
    that distance to undo the lens. The lens moves with the camera, so its correction holds for the droplets
    too; the tilt of the pattern need not be theirs, so it is never corrected and stands in the uncertainty.
    """

    radial: float = 0.0  # < 0 undoes pincushion, > 0 undoes barrel distortion
    centre_x_px: float = 0.0
    centre_y_px: float = 0.0
    radius_px: float = 1.0  # half the diagonal of the picture
    perspective_x: float = 0.0  # relative change of the scale per px along x
    perspective_y: float = 0.0
    scale_variation: float = 0.0  # rms over the picture of the relative local scale, before correction
    remaining_variation: float = 0.0  # the part of it that no correction takes out

    def __post_init__(self) -> None:
        if not all(math.isfinite(value) for value in asdict(self).values()) or self.radius_px <= 0:
            raise ValueError(f"a distortion has finite terms and a radius above 0 px: {self}")

    @property
    def corrected(self) -> bool:
        """True if points are moved by `to_metres`."""
        return self.radial != 0


@dataclass(frozen=True, slots=True)
class PictureScale:
    """What one of several pictures says; the uncertainty is its own, without the pattern's tolerance."""

    picture: str
    sha256: str
    date: str  # ISO 8601, or empty
    metres_per_pixel: float
    metres_per_pixel_std: float


@dataclass(frozen=True, slots=True)
class Scale:
    """Metres per pixel along x and y of a picture, from a picture of a reference pattern."""

    pattern: str  # lines, grid, dots, or stated: typed by a person
    pitch: float  # m between neighbouring lines or dots; 0 if stated
    pitch_std: float  # m, tolerance of the pattern
    metres_per_pixel_x: float
    metres_per_pixel_x_std: float  # fit, what no correction takes out, pattern's tolerance
    metres_per_pixel_y: float
    metres_per_pixel_y_std: float
    rotation_deg: float = 0.0  # of the pattern, from +x toward +y; for lines, of the direction across them
    residual_px: float = 0.0  # rms distance of lines or dots from the model
    distortion: Distortion | None = None  # None: none was seen
    picture: str = ""
    picture_sha256: str = ""
    width_px: int = 0  # of the picture; 0: not from a picture
    height_px: int = 0
    warnings: tuple[str, ...] = ()
    date: str = ""  # of the picture, ISO 8601
    pictures: tuple[PictureScale, ...] = ()  # filled where several pictures were pooled

    def __post_init__(self) -> None:
        positive = {
            "metres_per_pixel_x": self.metres_per_pixel_x,
            "metres_per_pixel_y": self.metres_per_pixel_y,
        }
        not_negative = {
            "metres_per_pixel_x_std": self.metres_per_pixel_x_std,
            "metres_per_pixel_y_std": self.metres_per_pixel_y_std,
            "pitch": self.pitch, "pitch_std": self.pitch_std, "residual_px": self.residual_px,
            "width_px": self.width_px, "height_px": self.height_px,
        }  # fmt: skip
        for name, value in (positive | not_negative).items():
            if not (math.isfinite(value) and (value > 0 or (value == 0 and name in not_negative))):
                raise ValueError(
                    f"{name} = {value}: must be finite and {'>=' if name in not_negative else '>'} 0"
                )

    @property
    def relative_std(self) -> float:
        """Relative standard uncertainty of the scale along the worse axis."""
        return max(
            self.metres_per_pixel_x_std / self.metres_per_pixel_x,
            self.metres_per_pixel_y_std / self.metres_per_pixel_y,
        )

    @classmethod
    def from_metres_per_pixel(cls, value: float, std: float = 0.0) -> Scale:
        """Take a scale that a person states, the same along x and y.

        Parameters
        ----------
        value : float
            m per pixel, > 0.
        std : float, optional
            Standard uncertainty in m per pixel.

        Returns
        -------
        scale : Scale
            With the pattern ``"stated"`` and no picture.
        """
        return cls("stated", 0.0, 0.0, value, std, value, std)


def to_metres(scale: Scale, x_px: ArrayLike, y_px: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Turn places in the picture into metres, with the lens correction where the scale has one.

    Parameters
    ----------
    scale : Scale
        Of the recording, see `fit_recording`.
    x_px, y_px : array_like
        Places in px, the centre of the first pixel at (0, 0), x right and y down.

    Returns
    -------
    x_m, y_m : ndarray of float
        In m, x right and y down, zero where the first pixel's centre would be without a lens.
    """
    x, y = np.asarray(x_px, dtype=float), np.asarray(y_px, dtype=float)
    bend = scale.distortion
    if bend is not None and bend.corrected:
        x, y = undistort(
            x, y, radial=bend.radial, centre=(bend.centre_x_px, bend.centre_y_px), radius=bend.radius_px
        )
    return x * scale.metres_per_pixel_x, y * scale.metres_per_pixel_y


def undistort(
    x: FloatArray, y: FloatArray, *, radial: float, centre: tuple[float, float], radius: float
) -> tuple[FloatArray, FloatArray]:
    """Undo a lens's radial distortion of third order.

    Parameters
    ----------
    x, y : ndarray
        Places in px.
    radial : float
        Relative displacement at the distance `radius` from the centre, positive outward.
    centre : tuple of float
        Centre of the distortion in px.
    radius : float
        In px, > 0.

    Returns
    -------
    x, y : ndarray
        Places in px as a lens without distortion would show them; near the centre nothing changes.

    Notes
    -----
    First term of the polynomial model of D. C. Brown, Photogrammetric Engineering 32 (1966), 444-462.
    """
    dx, dy = x - centre[0], y - centre[1]
    factor = 1 + radial * (dx**2 + dy**2) / radius**2
    return centre[0] + dx * factor, centre[1] + dy * factor


def binned(scale: Scale, binning: int) -> Scale:
    """Give the scale of pictures whose pixels are `binning` x `binning` pixels of the reference picture.

    Parameters
    ----------
    scale : Scale
        Of the unbinned picture.
    binning : int
        >= 1.

    Returns
    -------
    scale : Scale
        Pixels are `binning` times larger, and the centre of the lens moves with the pixel grid.
    """
    if binning < 1 or binning != int(binning):
        raise ValueError(f"binning = {binning}: must be a whole number >= 1")
    if binning == 1:
        return scale
    bend = scale.distortion
    if bend is not None:
        bend = replace(
            bend,
            centre_x_px=(bend.centre_x_px - (binning - 1) / 2) / binning,
            centre_y_px=(bend.centre_y_px - (binning - 1) / 2) / binning,
            radius_px=bend.radius_px / binning,
            perspective_x=bend.perspective_x * binning,
            perspective_y=bend.perspective_y * binning,
        )
    return replace(
        scale,
        distortion=bend,
        width_px=scale.width_px // binning,
        height_px=scale.height_px // binning,
        residual_px=scale.residual_px / binning,
        metres_per_pixel_x=scale.metres_per_pixel_x * binning,
        metres_per_pixel_x_std=scale.metres_per_pixel_x_std * binning,
        metres_per_pixel_y=scale.metres_per_pixel_y * binning,
        metres_per_pixel_y_std=scale.metres_per_pixel_y_std * binning,
    )


def fit_recording(scale: Scale, *, width: int, height: int, binning: int | None = None) -> Scale:
    """Give the scale for a recording after comparing its size with that of the reference picture.

    Parameters
    ----------
    scale : Scale
        As read from its file.
    width, height : int
        Of the recording's frames in px.
    binning : int or None, optional
        ``camera.binning`` of the bench file; None if it is not there, and then the sizes must be equal.

    Returns
    -------
    scale : Scale
        For the recording's own pixels.

    Raises
    ------
    ScaleError
        If the recording may be binned or cropped and the bench file does not say so, if it is larger than the
        picture allows, or if it is cropped and the scale has a lens correction, whose centre is then unknown.
    """
    name = scale.picture or "camera.scale"
    if scale.width_px == 0:
        if binning not in (None, 1):
            raise ScaleError(
                name, "metres_per_pixel is that of the recording's own pixels; leave out camera.binning"
            )
        return scale
    size, picture = f"{width} x {height}", f"{scale.width_px} x {scale.height_px}"
    if binning is None:
        if (width, height) == (scale.width_px, scale.height_px):
            return scale
        ratio = scale.width_px / width
        whole = ratio > 1.5 and abs(ratio - round(ratio)) < 0.02
        hint = (
            f"camera.binning = {ratio:.0f} if it is binned"
            if whole
            else "camera.binning = 1 if it is cropped"
        )
        raise ScaleError(name, f"the recording has {size} px, the reference picture {picture} px; set {hint}")
    spare_x, spare_y = scale.width_px - width * binning, scale.height_px - height * binning
    told = f"the recording's {size} px with camera.binning = {binning}"
    if min(spare_x, spare_y) < 0:
        raise ScaleError(
            name, f"{told} exceed the picture's {picture} px; correct camera.binning or take a new picture"
        )
    if max(spare_x, spare_y) >= binning and scale.distortion is not None and scale.distortion.corrected:
        raise ScaleError(
            name,
            f"{told} are a part of the picture's {picture} px, and the lens correction must know which part; "
            f"correct camera.binning or take a picture with the recording's crop",
        )
    return binned(scale, binning)


def scale_to_json(scale: Scale) -> dict[str, Any]:
    """Give the scale as plain values under the keys of its file.

    Parameters
    ----------
    scale : Scale
        Any scale.

    Returns
    -------
    values : dict
        Ready for `json`.
    """
    plain = asdict(scale)
    return {
        _KEYS.get(name, name): list(value) if isinstance(value, tuple) else value
        for name, value in plain.items()
    }


def scale_from_json(values: dict[str, Any]) -> Scale:
    """Make the record from the values of a scale file; keys that it does not know are passed over.

    Parameters
    ----------
    values : dict
        As `scale_to_json` gives.

    Returns
    -------
    scale : Scale
        The record.

    Raises
    ------
    KeyError, TypeError, ValueError
        If a key is missing or a value impossible.
    """
    names = {key: name for name, key in _KEYS.items()}
    known = {names.get(k, k): v for k, v in values.items() if names.get(k, k) in Scale.__dataclass_fields__}
    required = [name for name in list(Scale.__dataclass_fields__)[:7] if name not in known]
    if required:
        raise KeyError(_KEYS.get(required[0], required[0]))
    for name in ("pitch", "pitch_std", *(f"metres_per_pixel_{a}{e}" for a in "xy" for e in ("", "_std"))):
        if isinstance(known[name], bool) or not isinstance(known[name], int | float):
            raise TypeError(f"{_KEYS.get(name, name)} = {known[name]!r} is no number")
        known[name] = float(known[name])
    if known.get("distortion") is not None:
        terms = {k: float(v) for k, v in known["distortion"].items() if k in Distortion.__dataclass_fields__}
        known["distortion"] = Distortion(**terms)
    known["warnings"] = tuple(known.get("warnings") or ())
    known["pictures"] = tuple(PictureScale(**entry) for entry in known.get("pictures") or ())
    return Scale(**known)


def read_scale(path: Path | str) -> Scale:
    """Read a scale file.

    Parameters
    ----------
    path : Path or str
        A file that `write_scale` made.

    Returns
    -------
    scale : Scale
        Checked.

    Raises
    ------
    ScaleError
        If the file is missing, is no scale file, or holds impossible values; the message names the key.
    """
    try:
        values = json.loads(Path(path).read_text(encoding="utf-8"))
        if not isinstance(values, dict):
            raise TypeError("the file holds no keys")
        return scale_from_json(values)
    except FileNotFoundError:
        raise ScaleError(str(path), "is not there; make it with `fallrise scale`") from None
    except KeyError as error:
        raise ScaleError(
            str(path), f"key {error.args[0]} is missing; make it again with `fallrise scale`"
        ) from None
    except (OSError, ValueError, TypeError, AttributeError) as error:
        raise ScaleError(str(path), f"is no scale file: {error}; make it with `fallrise scale`") from None


def write_scale(scale: Scale, path: Path | str) -> None:
    """Write a scale file, whole or not at all.

    Parameters
    ----------
    scale : Scale
        What to write.
    path : Path or str
        Where to; an older file is replaced by a rename.

    Raises
    ------
    ScaleError
        If it cannot be written; an older file is then as it was.
    """
    write_whole({Path(path): scale_text(scale).encode("utf-8")})


def scale_text(scale: Scale) -> str:
    """Give the text of a scale file.

    Parameters
    ----------
    scale : Scale
        Any scale.

    Returns
    -------
    text : str
        JSON with a line break at its end.
    """
    return json.dumps(scale_to_json(scale), indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def write_whole(files: Mapping[Path, bytes]) -> None:
    """Write files that belong together: each to a temporary name beside its own, then all renamed.

    Parameters
    ----------
    files : mapping of Path to bytes
        What to write where; the last is renamed last.

    Raises
    ------
    ScaleError
        If one cannot be written; older files of these names are then as they were.
    """
    drafts: list[tuple[Path, Path]] = []
    target = Path()
    try:
        for target, content in files.items():
            handle, draft = tempfile.mkstemp(prefix=f".{target.name}.", suffix=".part", dir=target.parent)
            drafts.append((Path(draft), target))
            with os.fdopen(handle, "wb") as file:
                file.write(content)
                file.flush()
                os.fsync(file.fileno())
            Path(draft).chmod(0o644)
        for draft_path, target in drafts:
            draft_path.replace(target)
    except OSError as error:
        for draft_path, _ in drafts:
            draft_path.unlink(missing_ok=True)
        raise ScaleError(str(target), f"cannot be written: {error.strerror or error}") from error
