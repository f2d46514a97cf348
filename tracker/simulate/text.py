"""A scene as text, for a person to read and change: every field with its value, unit and meaning."""

from __future__ import annotations

import json
from dataclasses import fields
from typing import Any

from tracker.simulate.scene import Scene

MEANINGS = {
    "droplets": "number of droplets",
    "radius": "m, least and largest; drawn evenly between the two",
    "charge_number": "least and largest size of the charge over e; drawn evenly, both ends included",
    "positive": "share of positive droplets among the drawn ones",
    "radii": "m, one a droplet, instead of drawn ones",
    "charge_numbers": "signed, one a droplet, instead of drawn ones",
    "charge_steps": "droplets that gain or lose one e in the middle half of the recording",
    "evaporation": "1/s, relative loss of radius",
    "returning": "those that leave the picture come in again elsewhere; else they may drift back",
    "plate_gap": "m",
    "oil_density": "kg/m^3, at the air's temperature",
    "temperature": "K",
    "pressure": "Pa",
    "relative_humidity": "0 to 1",
    "slip": "slip model, as air.slip in a bench file",
    "gravity": "m/s^2",
    "air_current": "rows of s, m/s aside, m/s down; straight between",
    "schedule": "rows of s, V in force from then on; empty: `voltages` in turn",
    "voltages": "V, of the top plate against the bottom plate, in turn",
    "first": "s, length of the first plateau",
    "plateau": "s, length of the others",
    "ramp": "s that a change of voltage takes; 0: a jump",
    "droop": "1/s, relative loss of voltage within a plateau",
    "seconds": "s, length of the recording",
    "frame_rate": "Hz",
    "exposure": "share of the frame interval",
    "uneven": "share of the interval by which frame times wander, at most",
    "lost": "share of frames that are not written",
    "repeated": "share of written frames that show the picture of the one before",
    "width": "px",
    "height": "px",
    "metres_per_pixel": "m",
    "down_deg": "degrees of gravity from straight down toward +x",
    "spot": "px, standard deviation of a droplet's image in focus",
    "peak": "grey of 255; negative: dark droplets before a bright field",
    "peak_spread": "standard deviation of the logarithm of a droplet's peak",
    "defocus": "px, standard deviation of what being out of focus adds to the spot's width",
    "background": "grey of 255",
    "gradient": "grey of 255, from the left edge to the right one",
    "flicker": "relative standard deviation of the light from frame to frame",
    "stuck": "bright specks on a window, which do not move",
    "lines": "level reticle lines",
    "columns": "upright reticle lines",
    "line_depth": "share of the light that dark lines take; negative: bright, share of `peak`",
    "lamp": "px, x, y, width, height of a lamp that is lit while the voltage is not 0",
    "gain": "grey, variance of the shot noise over the mean",
    "read_noise": "grey",
    "bits": "depth of the pictures, 8 to 16; grey values are scaled by 2^(bits - 8)",
    "codec": "mjpeg, h264, hevc, mpeg4, vp9, ffv1, rawvideo; empty: the usual one of the container",
    "quality": "the codec's own scale (mjpeg 2 to 31, h264 0 to 51; less is better); 0: 4 or 20",
}
_NO_LAMP = "# lamp = [8, 8, 16, 16]"


def scene_text(scene: Scene) -> str:
    """Write a scene as TOML, every field with its value and, as a comment, its unit and meaning.

    Parameters
    ----------
    scene : Scene
        The scene.

    Returns
    -------
    text : str
        One line a field, as `read_scene` reads it; a lamp that is not there is an example behind a comment sign.
    """
    lines = []
    for field in fields(Scene):
        value = getattr(scene, field.name)
        line = _NO_LAMP if value is None else f"{field.name} = {_toml(value)}"
        aside = "; none in this scene" if value is None else ""
        lines.append(f"{line}  # {MEANINGS[field.name]}{aside}\n")
    return "".join(lines)


def _toml(value: Any) -> str:
    """One value as TOML."""
    if isinstance(value, tuple):
        return f"[{', '.join(_toml(v) for v in value)}]"
    return json.dumps(value)  # numbers, booleans and plain texts look the same in both
