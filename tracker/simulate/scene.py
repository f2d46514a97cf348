"""What a simulated recording shows: droplets, cell, voltages, time, camera, in one frozen record."""

from __future__ import annotations

import itertools
import math
import tomllib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

from tracker.errors import FileError, UsageError

Knots = tuple[tuple[float, float], ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Scene:
    """A simulated bench and recording; SI units where a name has no suffix.

    Grey levels (`peak`, `background`, `gradient`, `gain`, `read_noise`) are those of an 8-bit camera; deeper
    pictures scale them by ``2**(bits - 8)``. Every droplet is inside the picture at one moment at least.
    """

    # droplets
    droplets: int = 14
    radius: tuple[float, float] = (0.5e-6, 1.1e-6)  # m, drawn evenly between the two
    charge_number: tuple[int, int] = (1, 8)  # size of the charge over e, drawn evenly, both ends included
    positive: float = 0.5  # share of positive droplets among the drawn ones
    radii: tuple[float, ...] = ()  # m, one a droplet, instead of drawn ones
    charge_numbers: tuple[int, ...] = ()  # signed, one a droplet, instead of drawn ones
    charge_steps: int = 0  # droplets that gain or lose one e in the middle half of the recording
    evaporation: float = 0.0  # 1/s, relative loss of radius
    returning: bool = False  # those that leave come in again elsewhere; else they may drift back
    # cell, oil, air, site
    plate_gap: float = 6.0e-3  # m
    oil_density: float = 886.0  # kg/m^3 at the air's temperature
    temperature: float = 295.15  # K
    pressure: float = 100800.0  # Pa
    relative_humidity: float = 0.45  # 0 to 1
    slip: str = "kim2005"
    gravity: float = 9.81  # m/s^2
    air_current: tuple[tuple[float, float, float], ...] = (
        (0.0, 0.0, 0.0),
    )  # s, m/s aside, m/s down; straight between
    # voltage of the top plate against the bottom plate
    schedule: Knots = ()  # (s, V) in force from then on; empty: `voltages` in turn
    voltages: tuple[float, ...] = (0.0, 260.0)  # V
    first: float = 2.0  # s, length of the first plateau
    plateau: float = 2.4  # s, length of the others
    ramp: float = 0.0  # s that a change of voltage takes; 0: a jump
    droop: float = 0.0  # 1/s, relative loss of voltage within a plateau
    # time
    seconds: float = 30.0
    frame_rate: float = 25.0  # Hz
    exposure: float = 0.5  # share of the frame interval
    uneven: float = 0.0  # frame times wander evenly by up to this share of the interval
    lost: float = 0.0  # share of frames that are not written
    repeated: float = 0.0  # share of written frames that show the picture of the one before
    # camera
    width: int = 512  # px
    height: int = 384  # px
    metres_per_pixel: float = 3.0e-6  # m
    down_deg: float = 0.0  # gravity in the picture: degrees from straight down toward +x
    spot: float = 1.7  # px, standard deviation of a droplet's image in focus
    peak: float = 110.0  # grey; negative for dark droplets before a bright field
    peak_spread: float = 0.35  # standard deviation of the logarithm of a droplet's peak
    defocus: float = 0.0  # px, standard deviation of what being out of focus adds to the spot's width
    background: float = 18.0  # grey
    gradient: float = 10.0  # grey, from the left edge to the right one
    flicker: float = 0.0  # relative standard deviation of the light from frame to frame
    stuck: int = 0  # bright specks on a window, which do not move
    lines: int = 0  # level reticle lines
    columns: int = 0  # upright reticle lines
    line_depth: float = 0.7  # share of the light that dark lines take; negative: bright, share of `peak`
    lamp: tuple[int, int, int, int] | None = None  # x, y, width, height in px; lit while the voltage is not 0
    gain: float = 0.25  # grey, variance of the shot noise over the mean
    read_noise: float = 1.6  # grey
    bits: int = 8
    # file
    codec: str = ""  # mjpeg, h264, hevc, mpeg4, vp9, ffv1, rawvideo; empty: the usual one of the container
    quality: int = 0  # the codec's own scale (mjpeg 2 to 31, h264 0 to 51; less is better); 0: 4 or 20

    def __post_init__(self) -> None:
        for name in fields(self):  # lists, as TOML gives them, become tuples
            object.__setattr__(self, name.name, _tuples(getattr(self, name.name)))
        for name_, low, high in _RANGES:
            value = getattr(self, name_)
            for one in value if isinstance(value, tuple) else (value,):
                if not (isinstance(one, (int, float)) and low <= one <= high):
                    raise UsageError(f"scene: {name_} = {value}: must be within {low:g} to {high:g}")
        _check_shapes(self)
        _check_joint(self)

    @property
    def interval(self) -> float:
        """Nominal frame interval in s."""
        return 1.0 / self.frame_rate

    @property
    def exposure_time(self) -> float:
        """Length of an exposure in s."""
        return self.exposure / self.frame_rate

    @property
    def plan(self) -> Knots:
        """Voltages in force: (s, V), the first at 0 s, as the bench file's list."""
        if self.schedule:
            return self.schedule if self.schedule[0][0] <= 0 else ((0.0, 0.0), *self.schedule)
        times = [0.0]
        while times[-1] < self.seconds:
            times.append(round(self.first + self.plateau * (len(times) - 1), 9))
        return tuple((t, self.voltages[i % len(self.voltages)]) for i, t in enumerate(times[:-1]))


_RANGES: tuple[tuple[str, float, float], ...] = (
    ("droplets", 0, 5000), ("radius", 5e-8, 2e-5), ("radii", 5e-8, 2e-5), ("charge_number", 0, 10000),
    ("positive", 0, 1), ("charge_steps", 0, 5000), ("evaporation", -0.05, 0.05), ("plate_gap", 1e-4, 1.0),
    ("oil_density", 100, 2e4), ("gravity", 0, 30), ("voltages", -1e5, 1e5), ("first", 1e-3, 1e6),
    ("plateau", 1e-3, 1e6), ("ramp", 0, 1e3), ("droop", -0.1, 0.1), ("seconds", 1e-3, 1e5),
    ("frame_rate", 0.01, 1e5),
    ("exposure", 1e-4, 1), ("uneven", 0, 0.5), ("lost", 0, 0.95), ("repeated", 0, 0.95), ("width", 16, 8192),
    ("height", 16, 8192), ("metres_per_pixel", 1e-8, 1e-3), ("down_deg", -180, 180), ("spot", 0.3, 50),
    ("peak", -255, 1e4), ("peak_spread", 0, 3), ("defocus", 0, 50), ("background", 0, 255),
    ("gradient", -255, 255),
    ("flicker", 0, 1), ("stuck", 0, 5000), ("lines", 0, 1000), ("columns", 0, 1000), ("line_depth", -1, 1),
    ("gain", 0, 100), ("read_noise", 0, 100), ("bits", 8, 16), ("quality", 0, 63),
)  # fmt: skip


def _tuples(value: Any) -> Any:
    """Turn lists into tuples, however deep."""
    return tuple(_tuples(v) for v in value) if isinstance(value, (list, tuple)) else value


def _check_shapes(scene: Scene) -> None:
    """Refuse lists of the wrong length or with something else than numbers in them."""
    rows: dict[str, tuple[tuple[Any, ...], int]] = {
        "radius": ((scene.radius,), 2), "charge_number": ((scene.charge_number,), 2),
        "schedule": (scene.schedule, 2), "air_current": (scene.air_current, 3), "lamp": ((scene.lamp,), 4),
    }  # fmt: skip
    for name, (values, length) in rows.items():
        for row in values if getattr(scene, name) is not None else ():
            if not (isinstance(row, tuple) and len(row) == length and all(_is_number(v) for v in row)):
                raise UsageError(f"scene: {name} = {getattr(scene, name)}: needs {length} numbers each")
    if not scene.voltages or not scene.air_current:
        raise UsageError("scene: voltages and air_current need one entry at least")
    if scene.lamp is not None and min(scene.lamp) < 0:
        raise UsageError(f"scene: lamp = {scene.lamp}: needs x, y, width, height in px")


def _is_number(value: object) -> bool:
    return isinstance(value, (int, float)) and math.isfinite(value)


def _check_joint(scene: Scene) -> None:
    """Refuse what only two fields together make impossible."""
    if scene.radius[0] > scene.radius[1] or scene.charge_number[0] > scene.charge_number[1]:
        raise UsageError("scene: radius and charge_number are (least, largest)")
    if scene.exposure + 2 * scene.uneven > 1:
        raise UsageError("scene: exposure + 2 uneven must not exceed 1, else exposures overlap")
    for name in ("radii", "charge_numbers"):
        if getattr(scene, name) and len(getattr(scene, name)) != scene.droplets:
            raise UsageError(f"scene: {name} needs one value for each of the {scene.droplets} droplets")
    times = [t for t, _ in scene.plan]
    if any(b <= a for a, b in itertools.pairwise(times)):
        raise UsageError("scene: the times of the schedule must increase")
    if scene.ramp and any(b - a <= scene.ramp for a, b in itertools.pairwise(times)):
        raise UsageError("scene: ramp must be shorter than each plateau")
    if scene.charge_steps > scene.droplets:
        raise UsageError("scene: charge_steps must not exceed droplets")
    if any(b[0] < a[0] for a, b in itertools.pairwise(scene.air_current)):
        raise UsageError("scene: the times of the air_current must not decrease")


def scene_from_mapping(values: Mapping[str, Any]) -> Scene:
    """Make a scene from plain values, as from a TOML table.

    Parameters
    ----------
    values : mapping
        Fields of `Scene` by name; the others keep their defaults.

    Returns
    -------
    scene : Scene
        The checked scene.

    Raises
    ------
    UsageError
        For a name that is no field or a value out of range.
    """
    known = {f.name for f in fields(Scene)}
    for name in values:
        if name not in known:
            raise UsageError(f"scene: unknown key {name!r}; known are {', '.join(sorted(known))}")
    return Scene(**values)


def read_assignments(lines: Iterable[str]) -> dict[str, Any]:
    """Read fields that a person typed as ``KEY=VALUE``.

    Parameters
    ----------
    lines : iterable of str
        Each a key and a TOML value, such as ``voltages=[0, 260, -260]``.

    Returns
    -------
    values : dict
        To be handed to `scene_from_mapping`.

    Raises
    ------
    UsageError
        If a line is none.
    """
    values: dict[str, Any] = {}
    for line in lines:
        try:
            values.update(tomllib.loads(line))
        except ValueError:
            raise UsageError(f"--set {line}: must be KEY=VALUE with a TOML value, such as lines=4") from None
    return values


def read_scene(path: str | Path) -> dict[str, Any]:
    """Read the fields of a scene from a TOML file.

    Parameters
    ----------
    path : path-like
        A TOML file whose top-level keys are fields of `Scene`.

    Returns
    -------
    values : dict
        What was read, to be handed to `scene_from_mapping`.

    Raises
    ------
    FileError
        If the file cannot be read or is no TOML.
    """
    try:
        return tomllib.loads(Path(path).read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise FileError(str(path), f"no scene could be read: {error}") from error
