"""The picture with what was found drawn on it: every line or dot, the residuals enlarged, the pitch."""

from __future__ import annotations

from collections.abc import Sequence
from io import BytesIO
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from calibration.errors import ScaleError
from calibration.lattice import Marks, local_gradient
from calibration.scale import Scale, scale_text, write_whole

if TYPE_CHECKING:
    from calibration.measure import Found

WIDTH = 11.0  # inches
MOST_ARROWS = 6000


def draw_scale(scale: Scale, found: Sequence[Found]) -> bytes:
    """Draw what a scale rests on.

    Parameters
    ----------
    scale : Scale
        The result.
    found : sequence of Found
        The pictures with their patterns; each becomes a panel.

    Returns
    -------
    png : bytes
        A PNG picture.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    ratio = found[0].lattice.height / found[0].lattice.width
    figure = Figure(figsize=(WIDTH, (WIDTH * ratio + 0.9) * len(found) + 0.9), dpi=120, layout="constrained")
    panels = figure.subplots(len(found), 1, squeeze=False)[:, 0]
    for axes, one in zip(panels, found, strict=True):
        _panel(axes, one)
    figure.suptitle(_title(scale), fontsize=11)
    buffer = BytesIO()
    canvas: Any = FigureCanvasAgg(figure)
    canvas.print_png(buffer)
    return buffer.getvalue()


def write_scale_files(scale: Scale, found: Sequence[Found], path: Path) -> tuple[Path, Path]:
    """Write a scale file and its drawing beside it, both or neither.

    Parameters
    ----------
    scale : Scale
        The result.
    found : sequence of Found
        The pictures with their patterns.
    path : Path
        Of the scale file, such as ``scale.json``; the drawing has the same name with ``.png``.

    Returns
    -------
    paths : tuple of Path
        The scale file and the drawing.

    Raises
    ------
    ScaleError
        If they cannot be written.
    """
    drawing = path.with_suffix(".png")
    if drawing == path:
        raise ScaleError(str(path), "is the name of the drawing; give --out a name that ends with .json")
    if any(drawing.resolve() == one.picture.path.resolve() for one in found):
        raise ScaleError(
            str(drawing), "is a reference picture and would be overwritten; choose another --out"
        )
    write_whole({drawing: draw_scale(scale, found), path: scale_text(scale).encode("utf-8")})
    return path, drawing


def _title(scale: Scale) -> str:
    """Say the scale in two lines."""
    x, y = (
        f"{axis}: {1e6 * getattr(scale, f'metres_per_pixel_{axis}'):#.7g} "
        f"± {1e6 * getattr(scale, f'metres_per_pixel_{axis}_std'):.2g} µm/px"
        for axis in "xy"
    )
    pitch = f"pitch {1e6 * scale.pitch:.6g} ± {1e6 * scale.pitch_std:.2g} µm"
    return f"{scale.pattern}, {pitch}, rotated by {scale.rotation_deg:.3f}°\n{x}    {y}"


def _panel(axes: Any, one: Found) -> None:
    """Draw one picture, its marks and its residuals."""
    lattice, fit, marks = one.lattice, one.lattice.fit, one.lattice.marks
    low, high = np.percentile(one.picture.grey[::4, ::4], [0.5, 99.5])
    axes.imshow(one.picture.grey, cmap="gray", vmin=low, vmax=max(high, low + 1), interpolation="nearest")
    if lattice.features == "lines":
        _lines(axes, marks)
    else:
        first = marks.axis == 0
        axes.plot(marks.x[first], marks.y[first], "o", mfc="none", mec="tab:cyan", ms=5, mew=0.6)
    rms = float(np.sqrt(np.mean(fit.residual**2)))
    factor = _round_down(0.25 * min(one.pitch_px) / max(rms, 1e-4))
    rows = np.linspace(0, len(marks.x) - 1, min(len(marks.x), MOST_ARROWS)).astype(int)
    gradient = local_gradient(fit, np.array([fit.centre[0]]), np.array([fit.centre[1]]))[0]
    across = (gradient / np.linalg.norm(gradient, axis=1, keepdims=True))[marks.axis[rows]]
    shift = across * (factor * fit.residual[rows])[:, None]
    axes.quiver(
        marks.x[rows], marks.y[rows], shift[:, 0], shift[:, 1], color="tab:orange",
        angles="xy", scale_units="xy", scale=1, width=0.0012,
    )  # fmt: skip
    counts = " x ".join(str(n) for n in lattice.counts)
    axes.set_title(
        f"{one.picture.path.name}: {counts} {lattice.features}, pitch {one.pitch_px[0]:.4f} px along x, "
        f"{one.pitch_px[1]:.4f} px along y; residuals x {factor:g} (rms {rms:.3f} px)",
        fontsize=9,
    )
    axes.set_xlim(-0.5, lattice.width - 0.5)
    axes.set_ylim(lattice.height - 0.5, -0.5)
    axes.set_xlabel("x / px")
    axes.set_ylabel("y / px")


def _lines(axes: Any, marks: Marks) -> None:
    """Draw every line from its first mark to its last, with its number."""
    from matplotlib.collections import LineCollection

    pieces = []
    for cluster in np.unique(marks.cluster):
        rows = np.flatnonzero(marks.cluster == cluster)
        along = marks.x[rows] if np.ptp(marks.x[rows]) > np.ptp(marks.y[rows]) else marks.y[rows]
        rows = rows[np.argsort(along)]
        pieces.append(np.column_stack([marks.x[rows], marks.y[rows]]))
    axes.add_collection(LineCollection(pieces, colors="tab:cyan", linewidths=0.8))
    axes.plot(marks.x, marks.y, ".", color="tab:cyan", ms=2)
    if len(pieces) > 120:
        return
    for cluster, piece in zip(np.unique(marks.cluster), pieces, strict=True):
        number = int(marks.index[marks.cluster == cluster][0])
        axes.annotate(str(number), piece[0], color="yellow", fontsize=6, ha="center", va="bottom")


def _round_down(value: float) -> float:
    """Give the largest of 1, 2, 5, 10, ... that is not above a value."""
    power = 10.0 ** np.floor(np.log10(max(value, 1.0)))
    return float(max(step * power for step in (1, 2, 5) if step * power <= max(value, 1.0)))
