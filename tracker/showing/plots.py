"""Plots of one result: a droplet's height and residuals against time, and the whole recording.

Colours are never needed: markers, line styles and text carry the meaning as well.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from physics.droplet import ELEMENTARY_CHARGE
from tracker.errors import ResultError

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from tracker.keeping.store import Result

MARKERS = {"keep": "o", "doubt": "s", "reject": "x"}


def new_figure(width: float, height: float) -> Figure:
    """Give an empty figure that belongs to no window.

    Parameters
    ----------
    width, height : float
        In inches.

    Returns
    -------
    figure : Figure
        With constrained layout.
    """
    from matplotlib.figure import Figure

    return Figure(figsize=(width, height), layout="constrained")


def plot_track(result: Result, droplet: int) -> Figure:
    """Plot one droplet: height against time with the fitted speeds, residuals below, segments shaded.

    Parameters
    ----------
    result : Result
        A measured recording.
    droplet : int
        Its number.

    Returns
    -------
    figure : Figure
        Two axes that share the time.

    Raises
    ------
    ResultError
        If there is no such droplet.
    """
    path = track_path(result, droplet)
    figure = new_figure(8, 6)
    upper, lower = figure.subplots(2, 1, sharex=True, height_ratios=(2, 1))
    used = path["used"]
    upper.plot(path["time"][used], path["height"][used] * 1e6, ".", ms=3, label="used")
    upper.plot(path["time"][~used], path["height"][~used] * 1e6, "x", ms=5, label="left out")
    upper.plot(path["time"], path["model"] * 1e6, "k-", lw=1, label="fitted speeds")
    upper.set(ylabel="height / um", title=f"{result.recording.get('file', '')}: droplet {droplet}")
    upper.legend()
    lower.plot(path["time"][used], path["residual"][used] * 1e6, ".", ms=3)
    lower.axhline(0, color="k", lw=0.8)
    lower.set(xlabel="time / s", ylabel="residual / um")
    for axes in (upper, lower):
        shade_segments(axes, result)
    return figure


def track_path(result: Result, droplet: int) -> dict[str, NDArray[Any]]:
    """Give a droplet's height over time and what the fitted speeds of its segments say.

    Parameters
    ----------
    result : Result
        A measured recording.
    droplet : int
        Its number.

    Returns
    -------
    path : dict of ndarray, each of shape (N,)
        ``time`` in s, ``frame``, ``height`` in m (upward, from the mean place), ``model`` in m, ``residual`` in m,
        ``used`` as booleans. The model runs at each segment's speed and starts anew at the mean height of every
        stretch, so that a residual shows what the speeds do not explain: mostly Brownian motion.

    Raises
    ------
    ResultError
        If there is no such droplet.
    """
    rows = result.tracks[result.tracks["droplet"] == droplet]
    if rows.empty:
        raise ResultError(str(result.folder), f"has no droplet {droplet}")
    time, frame = rows["time_s"].to_numpy(float), rows["frame"].to_numpy(np.int64)
    used = rows["used"].to_numpy(np.int64).astype(bool)
    segment = rows["segment"].to_numpy(np.int64)
    angle = np.deg2rad(float(result.recording.get("orientation", {}).get("down_deg") or 0.0))
    down = rows["x_m"].to_numpy(float) * np.sin(angle) + rows["y_m"].to_numpy(float) * np.cos(angle)
    height = -(down - down.mean())
    speeds = result.segments[result.segments["droplet"] == droplet].set_index("segment")["down_speed_m_s"]
    model = np.full(len(time), np.nan)
    for number in np.unique(segment[segment >= 0]):
        here = segment == number
        if number in speeds.index and np.isfinite(speeds[number]):
            model[here] = height[here].mean() - speeds[number] * (time[here] - time[here].mean())
    return {
        "time": time,
        "frame": frame,
        "height": height,
        "model": model,
        "residual": height - model,
        "used": used,
    }


def shade_segments(axes: Axes, result: Result) -> None:
    """Shade the field-on segments of a recording behind a plot over time.

    Parameters
    ----------
    axes : Axes
        With time in s along x.
    result : Result
        Its provenance names the segments.
    """
    for segment in result.recording.get("field", {}).get("segments", []):
        volts = segment["voltage_v"]
        if volts:
            hatch = None if volts > 0 else "//"
            axes.axvspan(segment["start_s"], segment["end_s"], alpha=0.15, color="0.4", hatch=hatch, lw=0)


def plot_recording(result: Result) -> Figure:
    """Plot the whole recording: tracks in the picture, height over time, charges over e.

    Parameters
    ----------
    result : Result
        A measured recording.

    Returns
    -------
    figure : Figure
        Three axes.
    """
    figure = new_figure(12, 8)
    grid = figure.add_gridspec(2, 2)
    picture, heights, charges = (figure.add_subplot(grid[0, 0]), figure.add_subplot(grid[0, 1]),
                                 figure.add_subplot(grid[1, :]))  # fmt: skip
    verdicts = result.droplets.set_index("droplet")["verdict"]
    for number, rows in result.tracks.groupby("droplet"):
        style = "-" if verdicts.get(number) == "keep" else ":"
        picture.plot(rows["x_px"], rows["y_px"], style, lw=0.8)
        heights.plot(rows["time_s"], -rows["y_m"].astype(float) * 1e6, style, lw=0.8)
    frames = result.recording.get("frames", {})
    picture.set(xlim=(0, frames.get("width_px")), ylim=(frames.get("height_px"), 0), aspect="equal",
                xlabel="x / px", ylabel="y / px", title="tracks (dotted: not kept)")  # fmt: skip
    shade_segments(heights, result)
    heights.set(xlabel="time / s", ylabel="height / um", title="field-on segments shaded")
    plot_charges(charges, result)
    return figure


def plot_charges(axes: Axes, result: Result) -> None:
    """Plot the charges of a recording in units of e with their uncertainties.

    Parameters
    ----------
    axes : Axes
        To draw on.
    result : Result
        A measured recording.
    """
    for verdict, rows in result.droplets.groupby("verdict"):
        shown = rows[rows["charge_c"].notna()]
        values = shown["charge_c"].to_numpy(float) / ELEMENTARY_CHARGE
        own = shown["charge_own_std_c"].to_numpy(float) / ELEMENTARY_CHARGE
        axes.errorbar(shown["droplet"].to_numpy(float), values, own, fmt=MARKERS.get(str(verdict), "x"), ms=5,
                      capsize=3, lw=1, label=str(verdict))  # fmt: skip
    axes.set(xlabel="droplet", ylabel="charge / e", title="charges, own standard uncertainty")
    axes.yaxis.grid(True, alpha=0.4)
    if len(result.droplets):
        axes.legend()
