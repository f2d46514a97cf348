"""All that is needed to check or repeat a measurement, gathered into `recording.json` and its tables."""

from __future__ import annotations

import hashlib
import os
import platform
from collections.abc import Sequence
from dataclasses import replace
from functools import lru_cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import TYPE_CHECKING, Any

from calibration.scale import Scale, scale_to_json, to_metres
from tracker.bench import Bench
from tracker.keeping.store import Result
from tracker.keeping.tables import CHANGES, DROPLETS, SEGMENTS, TRACKS, table
from tracker.records import Field, Measured, Recording, Segment, Sightings, Tracks

if TYPE_CHECKING:
    import pandas as pd

    from tracker.motion.analysis import Given
    from tracker.motion.droplets import Evaluation

# Column of `Sightings` -> column of the table of tracks.
_SIGHTING_COLUMNS = {"frame": "frame", "x": "x_px", "y": "y_px", "x_std": "x_std_px", "y_std": "y_std_px",
                     "brightness": "brightness", "width": "width_px", "flags": "flags"}  # fmt: skip
_PACKAGES = ("fallrise", "numpy", "scipy", "av", "opencv-python-headless", "pandas")


def assemble(
    evaluation: Evaluation,
    given: Given,
    *,
    report: dict[str, Any],
    warnings: Sequence[str],
    folder: Path,
) -> Result:
    """Gather tables and provenance of one measurement.

    Parameters
    ----------
    evaluation : Evaluation
        What the motion wing found.
    given : Given
        What it was found with.
    report : dict
        What the seeing wing reports.
    warnings : sequence of str
        Of the seeing wing.
    folder : Path
        Result folder, to which the recording's path is written relative.

    Returns
    -------
    result : Result
        Not written yet.
    """
    recording, field, bench = given.recording, given.field, given.bench
    told = [*recording.warnings, *warnings, *field.warnings, *bench.scale.warnings, *evaluation.warnings]
    provenance = {
        "file": recording.path.name,
        "path": os.path.relpath(recording.path.absolute(), folder.absolute()),
        "sha256": recording.sha256,
        "frames": frames_json(recording),
        "bench": bench_json(bench, folder),
        "scale": scale_to_json(bench.scale),
        "air": {
            "viscosity_pa_s": bench.viscosity.value, "viscosity_std_pa_s": bench.viscosity.std,
            "mean_free_path_m": bench.mean_free_path.value, "density_kg_m3": bench.air_density.value,
            "temperature_k": bench.temperature.value, "pressure_pa": bench.pressure.value,
            "relative_humidity": bench.relative_humidity.value,
        },
        "field": field_json(field),
        "orientation": evaluation.orientation,
        "air_current": evaluation.air_current,
        "exposure": evaluation.exposure,
        "charge_unit": evaluation.charge_unit,
        "budget": evaluation.budget,
        "details": evaluation.details,
        "seeing": {**report, "cuts": given.cuts, "warnings": warnings},
        "settings": given.settings.as_dict(),
        "versions": versions(),
        "warnings": list(dict.fromkeys(told)),
        "frame_times_s": recording.frame_times,
    }  # fmt: skip
    return Result(
        None, tracks_table(evaluation, recording, field, bench.scale),
        table(evaluation.segments, SEGMENTS), table(evaluation.droplets, DROPLETS), table(evaluation.changes, CHANGES),
        provenance,
    )  # fmt: skip


def tracks_table(evaluation: Evaluation, recording: Recording, field: Field, scale: Scale) -> pd.DataFrame:
    """Turn tracks into their table.

    Parameters
    ----------
    evaluation : Evaluation
        Tracks, which rows the fits rest on, and the linker's own numbers.
    recording : Recording
        Gives the times.
    field : Field
        Gives the segments.
    scale : Scale
        Of the recording.

    Returns
    -------
    table : DataFrame
        Columns of `tracker.keeping.tables.TRACKS`, ordered by droplet, then frame.
    """
    import numpy as np
    import pandas as pd

    tracks = evaluation.tracks
    seen = tracks.sightings
    times = recording.frame_times[seen.frame]
    x_m, y_m = to_metres(scale, seen.x, seen.y)
    return pd.DataFrame({
        "droplet": tracks.droplet, "frame": seen.frame, "time_s": times, "x_px": seen.x, "y_px": seen.y,
        "x_std_px": seen.x_std, "y_std_px": seen.y_std, "x_m": x_m, "y_m": y_m, "brightness": seen.brightness,
        "segment": field.segment_of(times), "used": np.asarray(evaluation.used).astype(np.int64),
        "linked": evaluation.linked, "width_px": seen.width, "flags": seen.flags,
    })  # fmt: skip


def as_stored(tracks: Tracks) -> Tracks:
    """Round sightings to the digits that the table of tracks keeps.

    What is evaluated at once is then what `tracker.evaluate` finds in the files, to the last digit. The digits
    kept are hundreds of times finer than any sighting's own uncertainty.

    Parameters
    ----------
    tracks : Tracks
        As linked.

    Returns
    -------
    tracks : Tracks
        The same with rounded columns.
    """
    digits = {column.name: column.decimals for column in TRACKS if column.decimals is not None}
    rounded = {
        name: getattr(tracks.sightings, name).round(digits[column])
        for name, column in _SIGHTING_COLUMNS.items() if column in digits
    }  # fmt: skip
    return Tracks(tracks.droplet, replace(tracks.sightings, **rounded))


def tracks_from_table(frame: pd.DataFrame) -> Tracks:
    """Give the tracks as they were linked back from their table.

    Parameters
    ----------
    frame : DataFrame
        Columns of `tracker.keeping.tables.TRACKS`.

    Returns
    -------
    tracks : Tracks
        Ordered by the linker's number, then frame.
    """
    ordered = frame.sort_values(["linked", "frame"], kind="stable")
    columns = {name: ordered[column].to_numpy() for name, column in _SIGHTING_COLUMNS.items()}
    return Tracks(ordered["linked"].to_numpy("int64"), Sightings(**columns))


def frames_json(recording: Recording) -> dict[str, Any]:
    """Describe the frames of a recording.

    Parameters
    ----------
    recording : Recording
        As it was read.

    Returns
    -------
    frames : dict
        Plain values.
    """
    times = recording.frame_times
    return {
        "count": len(times), "first_s": float(times[0]), "last_s": float(times[-1]),
        "interval_s": recording.frame_interval, "uneven": recording.uneven,
        "repeated": recording.repeated.tolist(), "lost": recording.lost, "width_px": recording.width,
        "height_px": recording.height, "bit_depth": recording.bit_depth, "full_scale": recording.full_scale,
        "codec": recording.codec, "warnings": list(recording.warnings),
    }  # fmt: skip


def recording_from_json(provenance: dict[str, Any], path: Path) -> Recording:
    """Give the record of a recording back from its provenance; the video is not opened.

    Parameters
    ----------
    provenance : dict
        As in ``recording.json``.
    path : Path
        Of the recording.

    Returns
    -------
    recording : Recording
        As it was read.
    """
    frames = provenance["frames"]
    return Recording(
        path, provenance["sha256"], frames["width_px"], frames["height_px"], provenance["frame_times_s"],
        frames["repeated"], frames["lost"], frames["uneven"], frames["bit_depth"], frames["full_scale"],
        frames["codec"], tuple(frames["warnings"]),
    )  # fmt: skip


def field_json(field: Field) -> dict[str, Any]:
    """Describe a field, knots included, so that it can be had back.

    Parameters
    ----------
    field : Field
        Voltage over time.

    Returns
    -------
    values : dict
        Plain values.
    """
    return {
        "source": field.source,
        "segments": [{"start_s": s.start, "end_s": s.end, "voltage_v": s.voltage} for s in field.segments],
        "clock_offset_s": field.clock_offset, "clock_offset_std_s": field.clock_offset_std,
        "clock_rate": field.clock_rate, "sign_known": field.sign_known,
        "toggle_std_s": field.toggle_std.tolist(),
        "knots": [field.knot_times.tolist(), field.knot_volts.tolist()], "warnings": list(field.warnings),
    }  # fmt: skip


def field_from_json(values: dict[str, Any]) -> Field:
    """Give a field back; the inverse of `field_json`.

    Parameters
    ----------
    values : dict
        As `field_json` gives them.

    Returns
    -------
    field : Field
        Voltage over time.
    """
    segments = tuple(Segment(s["start_s"], s["end_s"], s["voltage_v"]) for s in values["segments"])
    return Field(
        values["source"], segments, values["knots"][0], values["knots"][1], values["toggle_std_s"],
        values["clock_offset_s"], values["clock_offset_std_s"], values["clock_rate"], values["sign_known"],
        tuple(values["warnings"]),
    )  # fmt: skip


def bench_json(bench: Bench, folder: Path) -> dict[str, Any]:
    """Describe a bench in SI, with uncertainties and where each value came from.

    Parameters
    ----------
    bench : Bench
        As it was used.
    folder : Path
        Result folder, to which the paths of the bench files are written relative.

    Returns
    -------
    values : dict
        Plain values.
    """
    units = {"plate_gap": "m", "voltage": "V", "oil_density": "kg/m^3", "temperature": "K", "pressure": "Pa",
             "relative_humidity": "1", "viscosity": "Pa s", "mean_free_path": "m", "air_density": "kg/m^3",
             "gravity": "m/s^2", "exposure": "s"}  # fmt: skip
    quantities = {}
    for name, unit in units.items():
        measured: Measured | None = getattr(bench, name)
        if measured is not None:
            quantities[name] = {
                "value": measured.value,
                "std": measured.std,
                "unit": unit,
                "origin": measured.origin,
            }
    files = [os.path.relpath(Path(file).absolute(), folder.absolute()) for file in bench.files]
    return {
        "name": bench.name, "files": files, "digest": bench.digest, "slip": bench.slip, "down_deg": bench.down_deg,
        "binning": bench.binning, "frame_rate_hz": bench.frame_rate, "voltage_rel_std": bench.voltage_rel_std,
        "oil_expansion_1_k": bench.oil_expansion, "origins": dict(bench.origins), "log": _log_json(bench, folder),
        **quantities,
    }  # fmt: skip


def _log_json(bench: Bench, folder: Path) -> dict[str, Any] | None:
    """Describe the voltage log that the bench file names; None if it names none."""
    spec = bench.field
    if spec.log is None:
        return None
    return {
        "path": os.path.relpath(spec.log.absolute(), folder.absolute()),
        "sha256": hashlib.sha256(spec.log.read_bytes()).hexdigest() if spec.log.is_file() else None,
        "time_column": spec.time_column, "voltage_column": spec.voltage_column, "time_unit": spec.time_unit,
        "voltage_unit": spec.voltage_unit, "clock_offset": None if spec.clock_offset is None else {
            "value": spec.clock_offset.value, "std": spec.clock_offset.std, "unit": "s",
            "origin": spec.clock_offset.origin,
        },
    }  # fmt: skip


@lru_cache(maxsize=1)
def versions() -> dict[str, str]:
    """Give the versions of what was at work.

    Returns
    -------
    versions : dict
        Of Python and the packages that a number depends on.
    """
    found = {"python": platform.python_version()}
    for name in _PACKAGES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            found[name] = "not installed"
    return found
