"""Settings from what a person types, checked before any work begins."""

from __future__ import annotations

from tracker.errors import UsageError
from tracker.records import Settings


def make_settings(
    *, roi: str | None = None, start: float | None = None, end: float | None = None, tables: str = "csv"
) -> Settings:
    """Check the options of `measure` and `batch`.

    Parameters
    ----------
    roi : str, optional
        ``"X,Y,W,H"`` in px.
    start, end : float, optional
        Times in s between which frames are used, start included.
    tables : {"csv", "parquet"}, optional
        Format of the tracks.

    Returns
    -------
    settings : Settings
        With defaults for all else.

    Raises
    ------
    UsageError
        One line that names the option, what was read and what is allowed.
    """
    if tables not in ("csv", "parquet"):
        raise UsageError(f"--tables {tables}: must be csv or parquet")
    if start is not None and end is not None and end <= start:
        raise UsageError(f"--from {start} --to {end}: the end must be after the start")
    return Settings(roi=None if roi is None else _rectangle(roi), start=start, end=end, tables=tables)


def _rectangle(text: str) -> tuple[int, int, int, int]:
    try:
        x, y, width, height = (int(part) for part in text.split(","))
    except ValueError:
        raise UsageError(f"--roi {text}: must be X,Y,W,H, four whole numbers in px") from None
    if min(x, y) < 0 or min(width, height) < 16:
        raise UsageError(f"--roi {text}: X and Y from 0, W and H at least 16 px")
    return x, y, width, height
