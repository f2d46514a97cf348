"""Simulated pictures of reference patterns, drawn by analytic coverage, with the truth beside them.

The map from a pixel to lattice coordinates is exact (lens, then tilt, then rotation); a line's or a dot's coverage
is that of a sharp shape seen through a Gaussian blur, on a grid of sub-pixels that is averaged to pixels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr


@dataclass(frozen=True)
class Pattern:
    """Everything that makes one picture of a reference pattern."""

    kind: str = "lines"  # lines, grid, dots, board
    width: int = 640
    height: int = 480
    pitch: float = 40.0  # px, along x at rotation 0, at the picture's centre
    aspect: float = 1.0  # pixel height over pixel width: pitch along y is pitch / aspect
    rotation: float = 0.0  # degrees from +x toward +y
    phase: tuple[float, float] = (0.3, 0.6)  # lattice coordinates of the picture's centre
    duty: float = 0.15  # line width or dot diameter over pitch
    dark: bool = True  # dark on bright
    contrast: float = 0.5  # of full scale
    blur: float = 0.9  # px, standard deviation
    noise: float = 0.01  # of full scale, standard deviation
    uneven: float = 0.0  # relative fall of the light across the picture
    dust: int = 0  # opaque specks
    droplets: int = 0  # bright spots
    missing: float = 0.0  # fraction of lines or dots left out
    false_lines: int = 0
    jitter: float = 0.0  # rms error of single lines, over pitch
    long_every: int = 0  # every so many lines is long, the others are short
    part: float = 1.0  # the pattern covers this fraction of the picture along x and y
    radial: float = 0.0  # as `calibration.scale.Distortion.radial`
    tilt: tuple[float, float] = (0.0, 0.0)  # relative change of the lattice's spacing over half the diagonal
    bits: int = 8
    colour: bool = False
    supersample: int = 2


@dataclass(frozen=True)
class Reference:
    """One rendered picture and its truth."""

    picture: np.ndarray  # (rows, columns) or (rows, columns, 3 in the order blue, green, red)
    gradient: np.ndarray  # (2, 2) lattice coordinates per px at the centre: rows I, J; columns x, y
    lines: int  # lines across the picture along I that are drawn, first to last inclusive

    @property
    def pitch_x(self) -> float:
        """Pitch in px for a step along the picture's x axis; for lines, across the lines."""
        return 1 / float(np.hypot(*self.gradient[:, 0]))

    @property
    def pitch_y(self) -> float:
        """Pitch in px for a step along the picture's y axis."""
        return 1 / float(np.hypot(*self.gradient[:, 1]))

    @property
    def pitch_across(self) -> float:
        """Pitch in px across the lines of the first family."""
        return 1 / float(np.hypot(*self.gradient[0]))


def lattice_coordinates(
    pattern: Pattern, x: np.ndarray, y: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Exact lattice coordinates (I, J) of places in px, and their gradient at the picture's centre."""
    cx, cy = (pattern.width - 1) / 2, (pattern.height - 1) / 2
    half = np.hypot(pattern.width, pattern.height) / 2
    qx, qy = (x - cx) / half, (y - cy) / half
    factor = 1 + pattern.radial * (qx**2 + qy**2)
    qx, qy = qx * factor, qy * factor
    angle = np.deg2rad(pattern.rotation)
    turn = np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]])
    gradient = turn @ np.diag([1.0, pattern.aspect]) / pattern.pitch
    depth = 1 + pattern.tilt[0] * qx + pattern.tilt[1] * qy
    rows = gradient * half
    i = (rows[0, 0] * qx + rows[0, 1] * qy) / depth + pattern.phase[0]
    j = (rows[1, 0] * qx + rows[1, 1] * qy) / depth + pattern.phase[1]
    return i, j, gradient


def render(pattern: Pattern, rng: np.random.Generator) -> Reference:
    """Draw one picture."""
    s = pattern.supersample
    x = (np.arange(pattern.width * s) + 0.5) / s - 0.5
    y = (np.arange(pattern.height * s) + 0.5) / s - 0.5
    gx, gy = np.meshgrid(x, y)
    i, j, gradient = lattice_coordinates(pattern, gx, gy)
    marks = _coverage(pattern, i, j, s, rng)
    marks = marks.reshape(pattern.height, s, pattern.width, s).mean(axis=(1, 3))
    if pattern.part < 1 and pattern.kind not in ("dots", "board"):
        marks = marks * _window(pattern, rng)
    level = 0.2 + pattern.contrast * (1 - marks if pattern.dark else marks)
    level *= _light(pattern, rng)
    level = _debris(pattern, level, rng)
    level = level + rng.normal(0, pattern.noise, level.shape)
    full = 2**pattern.bits - 1
    picture = np.clip(np.rint(level * full), 0, full).astype(np.uint8 if pattern.bits == 8 else np.uint16)
    if pattern.colour:
        picture = np.stack([(picture * f).astype(picture.dtype) for f in (0.8, 0.95, 0.9)], axis=-1)
    edge = i[:, [0, -1]].ravel(), i[[0, -1], :].ravel()
    span = np.concatenate(edge)
    return Reference(picture, gradient, int(np.floor(span.max()) - np.ceil(span.min()) + 1))


def _coverage(pattern, i, j, s, rng):
    """Fraction 0 to 1 of each sub-pixel that is covered, blurred."""
    # The sub-pixel's own box is averaged later; the blur left for the analytic edge is the optical one.
    grad_i = np.hypot(*np.gradient(i, 1 / s)), np.hypot(*np.gradient(j, 1 / s))
    first = _family(pattern, i, j, 1 / grad_i[0], rng) if pattern.kind in ("lines", "grid") else None
    if pattern.kind == "lines":
        return first
    if pattern.kind == "grid":
        second = _family(pattern, j, i, 1 / grad_i[1], rng)
        return 1 - (1 - first) * (1 - second)
    if pattern.kind == "board":
        squares = 0.5 + 0.5 * _square_wave(pattern, i, 1 / grad_i[0]) * _square_wave(
            pattern, j, 1 / grad_i[1]
        )
        if pattern.part == 1:
            return squares
        # Eight by six squares in a white room.
        return (
            squares
            * ndtr((4 - np.abs(i)) / grad_i[0] / pattern.blur)
            * ndtr((3 - np.abs(j)) / grad_i[1] / pattern.blur)
        )
    ni, nj = np.rint(i), np.rint(j)
    dx, dy = (i - ni) / grad_i[0], (j - nj) / grad_i[1]
    if pattern.jitter:
        table = rng.normal(0, pattern.jitter * pattern.pitch, (2, 4096))
        slot = ((ni * 61 + nj * 17).astype(int)) % 4096
        dx, dy = dx - table[0][slot], dy - table[1][slot]
    radius = pattern.duty * pattern.pitch / 2
    disc = ndtr((radius - np.hypot(dx, dy)) / pattern.blur)
    if pattern.part < 1:  # a dot grid ends with whole dots
        half = pattern.part * np.array([pattern.width, pattern.height]) / (2.2 * pattern.pitch)
        spare = (1 - pattern.part) * min(pattern.width, pattern.height) / (2.2 * pattern.pitch)
        ci, cj = rng.uniform(-spare, spare, 2) / 1.5 + np.array(pattern.phase)
        disc = disc * ((np.abs(ni - ci) <= half.min()) & (np.abs(nj - cj) <= half.max()))
    if pattern.missing:
        keep = rng.random((997,)) >= pattern.missing
        disc = disc * keep[((ni * 61 + nj * 17).astype(int)) % 997]
    return disc


def _family(pattern, i, j, pitch, rng):
    """Coverage of one family of lines at whole values of i."""
    n = np.rint(i).astype(int)
    first, count = n.min(), n.max() - n.min() + 1
    shift = rng.normal(0, pattern.jitter, count) if pattern.jitter else np.zeros(count)
    shown = (rng.random(count) >= pattern.missing) if pattern.missing else np.ones(count, bool)
    distance = (i - n - shift[n - first]) * pitch
    half = pattern.duty * pattern.pitch / 2
    line = (ndtr((distance + half) / pattern.blur) - ndtr((distance - half) / pattern.blur)) * shown[
        n - first
    ]
    if pattern.long_every and pattern.kind == "lines":
        reach = np.where(n % pattern.long_every == 0, 0.9, 0.45) * (np.abs(j - pattern.phase[1]).max())
        line = line * ndtr((reach - np.abs(j - pattern.phase[1])) * pitch / pattern.blur)
    for place in rng.uniform(i.min(), i.max(), pattern.false_lines):
        slant = (i - place + rng.normal(0, 0.02) * j) * pitch
        line = np.maximum(
            line, 0.8 * (ndtr((slant + half) / pattern.blur) - ndtr((slant - half) / pattern.blur))
        )
    return line


def _square_wave(pattern, i, pitch):
    """+1 and -1 in turn, changing sign at whole values of i, blurred."""
    n = np.rint(i)
    return (2 * ndtr((i - n) * pitch / pattern.blur) - 1) * np.where(n % 2 == 0, 1, -1)


def _window(pattern, rng):
    """Part of the picture that the pattern covers."""
    w, h = int(pattern.width * pattern.part), int(pattern.height * pattern.part)
    x, y = int(rng.integers(0, pattern.width - w + 1)), int(rng.integers(0, pattern.height - h + 1))
    window = np.zeros((pattern.height, pattern.width))
    window[y : y + h, x : x + w] = 1
    return window


def _light(pattern, rng):
    """Uneven light: a slope and a bowl."""
    if not pattern.uneven:
        return 1.0
    x, y = np.linspace(-1, 1, pattern.width)[None, :], np.linspace(-1, 1, pattern.height)[:, None]
    angle = rng.uniform(0, 2 * np.pi)
    return 1 - pattern.uneven * (
        0.5 + 0.25 * (x * np.cos(angle) + y * np.sin(angle)) + 0.125 * (x**2 + y**2) - 0.25
    )


def _debris(pattern, level, rng):
    """Dark opaque specks and bright round droplets over the pattern."""
    level = level.copy()
    for n in range(pattern.dust + pattern.droplets):
        r = rng.uniform(1.5, 8.0)
        x, y = rng.uniform(0, pattern.width), rng.uniform(0, pattern.height)
        x0, x1 = int(max(0, x - 3 * r)), int(min(pattern.width, x + 3 * r + 1))
        y0, y1 = int(max(0, y - 3 * r)), int(min(pattern.height, y + 3 * r + 1))
        px, py = np.meshgrid(np.arange(x0, x1) - x, np.arange(y0, y1) - y)
        if n < pattern.dust:
            stretch, turn = rng.uniform(0.4, 1.0), rng.uniform(0, np.pi)
            along, across = px * np.cos(turn) + py * np.sin(turn), py * np.cos(turn) - px * np.sin(turn)
            cover = ndtr(r - np.hypot(along, across / stretch))
            level[y0:y1, x0:x1] = level[y0:y1, x0:x1] * (1 - cover) + 0.1 * cover
        else:
            level[y0:y1, x0:x1] += 0.5 * np.exp(-(px**2 + py**2) / (2 * (r / 2) ** 2))
    return level


def random_pattern(rng: np.random.Generator, *, width: int = 640, height: int = 480) -> Pattern:
    """Draw a pattern from the whole range that a scale must be had from."""
    kind = str(rng.choice(["lines", "grid", "dots"]))
    part = float(rng.choice([1.0, 1.0, rng.uniform(0.45, 0.9)]))
    least = min(width, height) * part
    pitch = float(np.exp(rng.uniform(np.log(6.0), np.log(least / 3.0))))
    if least / pitch < 5:  # few lines: upright, so that at least four are in the picture
        rotation = float(rng.uniform(-3, 3)) if kind == "lines" else float(rng.uniform(-180, 180))
        pitch = min(pitch, width * part / 4.3) if kind == "lines" else min(pitch, least / 4.6)
    else:
        rotation = float(rng.uniform(-180, 180))
    duty = float(rng.uniform(0.3, 0.5)) if pitch < 10 else float(rng.uniform(max(0.08, 2 / pitch), 0.4))
    duty = max(duty, 0.3, 3 / pitch) if kind == "dots" else duty
    bent = rng.random() < 0.3
    return Pattern(
        kind=kind, width=width, height=height, pitch=pitch, rotation=rotation, part=part, duty=duty,
        aspect=float(rng.choice([1.0, rng.uniform(0.92, 1.08)])),
        # Few lines lie evenly about the middle, so that four are in the picture as wholes.
        phase=(float(rng.uniform(0, 1)) if least / pitch >= 5 else 0.5, float(rng.uniform(0, 1))),
        dark=bool(rng.random() < 0.5), contrast=float(rng.uniform(0.15, 0.6)),
        blur=min(float(rng.uniform(0.6, 1.6)), pitch / 7), noise=float(rng.uniform(0.003, 0.03)),
        uneven=float(rng.uniform(0, 0.6)), dust=int(rng.integers(0, 40)), droplets=int(rng.integers(0, 30)),
        missing=float(rng.choice([0, rng.uniform(0, 0.12)])) if least / pitch > 8 else 0.0,
        false_lines=int(rng.integers(0, 3)) if kind == "lines" and least / pitch > 8 else 0,
        jitter=float(rng.choice([0, rng.uniform(0, 0.001)])),
        long_every=int(rng.choice([0, 5, 10])) if kind == "lines" else 0,
        radial=float(rng.uniform(-0.02, 0.02)) if bent else 0.0,
        bits=int(rng.choice([8, 8, 12, 16])), colour=bool(rng.random() < 0.3),
    )  # fmt: skip


def sample_reticle() -> np.ndarray:
    """The reference picture among the sample recordings: 0.1 mm pitch at 3.000 um a pixel, turned by 0.4 degrees."""
    pattern = Pattern(
        kind="lines", width=512, height=384, pitch=100 / 3.0, rotation=0.4, phase=(0.35, 0.5), duty=0.12, dark=True,
        contrast=0.5, blur=1.1, noise=0.012, uneven=0.25, dust=14, long_every=5,
    )  # fmt: skip
    return render(pattern, np.random.default_rng(20)).picture
