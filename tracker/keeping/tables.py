"""Columns of every table, with unit and meaning, and records turned into tables.

One registry serves the CSV files, the Parquet metadata and the README that lies beside the tables.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class Column:
    """One column of a table."""

    name: str
    unit: str  # "" for none
    meaning: str
    kind: str = "float"  # float, int, bool or text
    decimals: int | None = None  # digits kept behind the point in text tables; None: all


TRACKS = (
    Column("droplet", "", "number of the droplet", "int"),
    Column("frame", "", "decoded frame, from 0", "int"),
    Column("time_s", "s", "presentation time of the frame, the start of its exposure", decimals=9),
    Column("x_px", "px", "place to the right; the centre of the first pixel is 0", decimals=4),
    Column("y_px", "px", "place downward in the picture; the centre of the first pixel is 0", decimals=4),
    Column("x_std_px", "px", "standard deviation of x_px by the noise of the picture", decimals=4),
    Column("y_std_px", "px", "standard deviation of y_px by the noise of the picture", decimals=4),
    Column("x_m", "m", "x_px by the scale, distortion corrected where the scale holds one", decimals=11),
    Column("y_m", "m", "y_px by the scale, distortion corrected where the scale holds one", decimals=11),
    Column("brightness", "grey", "sum of the grey values of the spot above the background", decimals=1),
    Column("segment", "", "number of the segment of constant voltage; -1 between two", "int"),
    Column("used", "", "1 if the sighting took part in the fits, else 0", "int"),
    Column("linked", "", "number that the linker gave, before a person's splits and joins", "int"),
    Column("width_px", "px", "standard deviation of the spot", decimals=3),
    Column(
        "flags",
        "",
        "sum of what was odd about the sighting: 1 saturated, 2 edge, 4 crowded, 8 streak, 16 soft, "
        "32 on a line, 64 merged",
        "int",
    ),
)

SEGMENTS = (
    Column("droplet", "", "number of the droplet", "int"),
    Column("segment", "", "number of the segment of constant voltage", "int"),
    Column("voltage_v", "V", "top plate against bottom plate, the mean over the segment"),
    Column("start_s", "s", "start of the segment"),
    Column("end_s", "s", "end of the segment"),
    Column("frames", "", "sightings of the droplet used in the segment", "int"),
    Column("down_speed_m_s", "m/s", "speed along gravity, downward positive"),
    Column(
        "down_speed_std_m_s",
        "m/s",
        "own standard uncertainty, of Brownian motion and places, not of the scale",
    ),
    Column("side_speed_m_s", "m/s", "speed across gravity, to the right of someone who faces the picture"),
    Column(
        "side_speed_std_m_s",
        "m/s",
        "own standard uncertainty, of Brownian motion and places, not of the scale",
    ),
)

DROPLETS = (
    Column("droplet", "", "number of the droplet", "int"),
    Column("verdict", "", "keep, doubt or reject", "text"),
    Column("reasons", "", "codes of the reasons, separated by blanks", "text"),
    Column("frames", "", "sightings used", "int"),
    Column("first_s", "s", "time of the first sighting"),
    Column("last_s", "s", "time of the last sighting"),
    Column("fall_speed_m_s", "m/s", "terminal speed with the field off, downward positive"),
    Column("fall_speed_std_m_s", "m/s", "standard uncertainty, own and shared (of the scale)"),
    Column("radius_m", "m", "radius, with slip and buoyancy, from fall speed and Brownian motion"),
    Column("radius_std_m", "m", "standard uncertainty, own and shared"),
    Column("mass_kg", "kg", "mass of the oil"),
    Column("charge_c", "C", "signed charge; no quantum is assumed"),
    Column("charge_std_c", "C", "standard uncertainty, own and shared"),
    Column("charge_own_std_c", "C", "part of this droplet alone and of the recording's air current"),
    Column(
        "charge_shared_std_c", "C", "part common to all droplets of the bench: scale, gap, voltage, models"
    ),
    Column("charge_number", "", "most probable whole number of elementary charges, signed", "int"),
    Column("charge_number_probability", "", "its probability"),
    Column("diffusion_ratio", "", "diffusion seen over diffusion at the radius of the fall speed"),
)

CHANGES = (
    Column("droplet", "", "number of the droplet", "int"),
    Column("kind", "", "what changed: charge_step, evaporation, switch or balance", "text"),
    Column("time_s", "s", "time of the change"),
    Column("time_std_s", "s", "standard uncertainty of the time"),
    Column("before_c", "C", "charge before"),
    Column("after_c", "C", "charge after"),
    Column("statistic", "", "value of the test statistic"),
    Column("threshold", "", "threshold that it passed"),
)

BATCH = (
    Column("recording", "", "path within the folder", "text"),
    Column("sha256", "", "hash of the recording's bytes", "text"),
    Column("status", "", "done or failed", "text"),
    Column("droplets", "", "droplets found", "int"),
    Column("kept", "", "droplets with verdict keep", "int"),
    Column("seconds", "s", "time that the measurement took", decimals=2),
    Column("reason", "", "why it failed, or warnings", "text"),
)

BUDGET = (
    Column(
        "droplet", "", "number of the droplet; empty for the factor that the bench puts on all charges", "int"
    ),
    Column("input", "", "what is uncertain; own: the droplet's own motion", "text"),
    Column("value", "", "best estimate, in the unit of the row"),
    Column("unit", "", "unit of value and standard uncertainty", "text"),
    Column("std", "", "standard uncertainty"),
    Column("sensitivity", "", "change of the charge in C (bench: of its logarithm) per unit of the input"),
    Column("share", "", "share of the variance of the charge"),
)

TABLES = {"tracks": TRACKS, "segments": SEGMENTS, "droplets": DROPLETS, "changes": CHANGES}
_DTYPES = {"float": "float64", "int": "Int64", "bool": "boolean", "text": "string"}


def table(rows: Iterable[object], columns: Sequence[Column]) -> pd.DataFrame:
    """Turn records into a table with exactly the given columns.

    Parameters
    ----------
    rows : iterable of records
        Each has an attribute for each column; None or NaN is an empty cell.
    columns : sequence of Column
        Order and type of the columns.

    Returns
    -------
    table : DataFrame
        Whole numbers as nullable ``Int64``, text as ``string``, all else ``float64``.
    """
    import pandas as pd

    records = list(rows)
    data = {}
    for column in columns:
        values = [_cell(getattr(record, column.name), column.kind) for record in records]
        data[column.name] = pd.array(values, dtype=_DTYPES[column.kind])
    return pd.DataFrame(data)


def _cell(value: Any, kind: str) -> Any:
    """Empty cells become the missing value of the column's type."""
    if value is None or (isinstance(value, float) and np.isnan(value)):
        return np.nan if kind == "float" else None
    if kind == "text" and not isinstance(value, str):
        return " ".join(str(part) for part in value)
    return value


def write_csv(frame: pd.DataFrame, path: Path, columns: Sequence[Column]) -> None:
    """Write a table as CSV: UTF-8, comma, one header row, empty cells where a value could not be had.

    Parameters
    ----------
    frame : DataFrame
        With at least the given columns.
    path : Path
        Of the file; it is replaced.
    columns : sequence of Column
        What is written, in this order.
    """
    import pyarrow as pa
    import pyarrow.csv as pc

    arrays = []
    for column in columns:
        values = frame[column.name]
        if column.kind == "text":
            texts = [safe_cell(str(text)) for text in values.fillna("")]
            arrays.append(pa.array([text or None for text in texts], pa.string()))
        elif column.decimals is not None:
            arrays.append(pa.array(np.round(values.to_numpy(np.float64), column.decimals), from_pandas=True))
        else:
            arrays.append(pa.array(values, from_pandas=True))
    made = pa.table(arrays, names=[column.name for column in columns])
    pc.write_csv(made, path, pc.WriteOptions(quoting_style="needed"))


def write_parquet(frame: pd.DataFrame, path: Path, columns: Sequence[Column]) -> None:
    """Write a table as Parquet; unit and meaning of each column are its field metadata.

    Parameters
    ----------
    frame : DataFrame
        With at least the given columns.
    path : Path
        Of the file; it is replaced.
    columns : sequence of Column
        What is written, in this order.
    """
    import pyarrow as pa
    import pyarrow.parquet as pq

    fields, arrays = [], []
    for column in columns:
        array = pa.array(frame[column.name], from_pandas=True)
        arrays.append(array)
        fields.append(
            pa.field(column.name, array.type, metadata={"unit": column.unit, "meaning": column.meaning})
        )
    pq.write_table(pa.table(arrays, schema=pa.schema(fields)), path, compression="zstd")


def read_table(path: Path, columns: Sequence[Column]) -> pd.DataFrame:
    """Read a table written by `write_csv` or `write_parquet`.

    Parameters
    ----------
    path : Path
        A ``.csv`` or ``.parquet`` file.
    columns : sequence of Column
        Columns and types that are expected.

    Returns
    -------
    table : DataFrame
        As `table` gives it.

    Raises
    ------
    ValueError
        If a column is missing.
    """
    import pandas as pd

    if path.suffix == ".parquet":
        frame = pd.read_parquet(path)
    else:
        # Only an empty cell is missing: a droplet or file may well be called "NA".
        kinds = {column.name: _DTYPES[column.kind] for column in columns}
        frame = pd.read_csv(path, keep_default_na=False, na_values=[""], dtype=kinds)
    missing = [column.name for column in columns if column.name not in frame]
    if missing:
        raise ValueError(f"{path.name} lacks the columns {', '.join(missing)}")
    kept = {column.name: frame[column.name].astype(_DTYPES[column.kind]) for column in columns}
    return pd.DataFrame(kept)


def safe_cell(text: str) -> str:
    """Make a text harmless in a spreadsheet: a cell never begins a formula.

    Parameters
    ----------
    text : str
        Anything that came from outside.

    Returns
    -------
    cell : str
        The text, behind an apostrophe if it begins with ``=``, ``+``, ``-``, ``@``, tab or return.
    """
    return f"'{text}" if text[:1] in ("=", "+", "-", "@", "\t", "\r") else text


def describe(columns: Sequence[Column], *, name: str) -> str:
    """Describe a table in Markdown: column, unit, meaning.

    Parameters
    ----------
    columns : sequence of Column
        Of the table.
    name : str
        File name, used as the heading.

    Returns
    -------
    text : str
        A heading and a table.
    """
    lines = [f"## {name}", "", "| column | unit | meaning |", "|---|---|---|"]
    lines += [f"| `{c.name}` | {c.unit or '-'} | {c.meaning} |" for c in columns]
    return "\n".join([*lines, ""])
