"""The result folder: written whole or not at all, read back with a check.

A new folder appears by one rename. In a folder that exists every file is replaced by a rename, `recording.json`
last; it holds the hash of each table, so that a mixture left by a crash is seen. `decisions.jsonl` is never touched.
"""

from __future__ import annotations

import errno
import hashlib
import json
import math
import os
import shutil
import tempfile
import time
from collections.abc import Callable
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from tracker.errors import ResultError
from tracker.keeping.tables import TABLES, read_table, write_csv, write_parquet

if TYPE_CHECKING:
    from collections.abc import Iterator

    import pandas as pd

PROVENANCE = "recording.json"
DECISIONS = "decisions.jsonl"
SUFFIX = ".fallrise"


@dataclass(frozen=True, slots=True)
class Result:
    """One measured recording: four tables and where they came from."""

    folder: Path | None  # None: not written yet
    tracks: pd.DataFrame
    segments: pd.DataFrame
    droplets: pd.DataFrame
    changes: pd.DataFrame
    recording: dict[str, Any] = field(default_factory=dict)  # what recording.json holds


def result_folder(recording: Path) -> Path:
    """Give the folder beside a recording that holds its result.

    Parameters
    ----------
    recording : Path
        File or folder of pictures.

    Returns
    -------
    folder : Path
        ``clip.fallrise`` for ``clip.mp4``; ``clip.mp4.fallrise`` where the former holds the result of another
        recording of the same stem.
    """
    folder = recording.parent / f"{recording.stem if recording.suffix else recording.name}{SUFFIX}"
    if (folder / PROVENANCE).is_file() and read_provenance(folder).get("file") != recording.name:
        return recording.parent / f"{recording.name}{SUFFIX}"
    return folder


def write_result(result: Result, folder: Path, *, tables: str = "csv") -> Result:
    """Write a result, whole or not at all; decisions in the folder stay.

    Parameters
    ----------
    result : Result
        Its ``folder`` is ignored.
    folder : Path
        Where to; made if missing, together with the folders above.
    tables : {"csv", "parquet"}, optional
        Format of the tracks; the other tables are always CSV.

    Returns
    -------
    result : Result
        The same with the folder and the provenance as written.

    Raises
    ------
    ResultError
        If the folder cannot be written or the disk is full; what was there before is untouched.
    """
    with _one_line(folder):
        folder.parent.mkdir(parents=True, exist_ok=True)
        if folder.exists() and not folder.is_dir():
            raise ResultError(str(folder), "is a file; name another folder with --out")
        if folder.is_dir() and any(folder.iterdir()) and not _is_result(folder):
            raise ResultError(str(folder), "holds other files and no result; name another folder with --out")
        home = folder if folder.is_dir() else folder.parent
        draft = Path(tempfile.mkdtemp(prefix=f".{folder.name}.", suffix=".part", dir=home))
        try:
            provenance = _write_draft(result, draft, tables=tables)
            _publish(draft, folder)
        finally:
            shutil.rmtree(draft, ignore_errors=True)
    return Result(folder, result.tracks, result.segments, result.droplets, result.changes, provenance)


def _is_result(folder: Path) -> bool:
    """Tell if a folder holds a result or only decisions and drafts of one."""
    names = {path.name for path in folder.iterdir()}
    return PROVENANCE in names or all(n == DECISIONS or n.endswith(".part") for n in names)


def _write_draft(result: Result, draft: Path, *, tables: str) -> dict[str, Any]:
    """Write all files into the draft folder and force them to the disk."""
    hashes = {}
    for name, columns in TABLES.items():
        kind = tables if name == "tracks" else "csv"
        path = draft / f"{name}.{kind}"
        (write_parquet if kind == "parquet" else write_csv)(getattr(result, name), path, columns)
        hashes[path.name] = file_hash(path)
        _sync(path)
    provenance = {**result.recording, "tables": hashes}
    write_json(provenance, draft / PROVENANCE)
    return provenance


def _publish(draft: Path, folder: Path) -> None:
    """Move the draft into place by renames, provenance last."""
    if not folder.exists():
        draft.chmod(0o755)
        draft.rename(folder)
        _sync(folder.parent)
        return
    old = {path.name for path in folder.glob("tracks.*")}
    new = {path.name for path in draft.iterdir()}
    for name in sorted(new, key=lambda n: n == PROVENANCE):
        (draft / name).replace(folder / name)
    for name in old - new:
        (folder / name).unlink()
    _sync(folder)


def read_result(folder: Path | str, *, tracks: bool = True) -> Result:
    """Read a result folder.

    Parameters
    ----------
    folder : Path or str
        As written by `write_result`.
    tracks : bool, optional
        False leaves the large table of tracks out; it is then empty.

    Returns
    -------
    result : Result
        The tables and the provenance.

    Raises
    ------
    ResultError
        If the folder is no result, or its tables are not those that were written together.
    """
    folder = Path(folder)
    for attempt in range(3):
        try:
            return _read_once(folder, tracks=tracks)
        except _MixedTablesError:
            # Someone may be replacing the files just now; the renames take milliseconds.
            if attempt == 2:
                raise
            time.sleep(0.1)
    raise AssertionError("unreachable")


class _MixedTablesError(ResultError):
    """Tables and provenance do not belong together."""


def _read_once(folder: Path, *, tracks: bool) -> Result:
    provenance = read_provenance(folder)
    frames = {}
    for name, columns in TABLES.items():
        file = next((f for f in provenance.get("tables", {}) if f.startswith(f"{name}.")), f"{name}.csv")
        path = folder / file
        if name == "tracks" and not tracks:
            import pandas as pd

            frames[name] = pd.DataFrame({column.name: [] for column in columns})
            continue
        if not path.is_file():
            raise ResultError(str(path), "is missing; measure the recording again")
        expected = provenance.get("tables", {}).get(file)
        if expected is not None and file_hash(path) != expected:
            raise _MixedTablesError(
                str(path), f"does not belong to its {PROVENANCE}; measure the recording again"
            )
        try:
            frames[name] = read_table(path, columns)
        except (ValueError, OSError) as error:
            raise ResultError(str(path), f"cannot be read ({error}); measure the recording again") from error
    return Result(folder, **frames, recording=provenance)


def read_provenance(folder: Path | str) -> dict[str, Any]:
    """Read `recording.json` of a result folder.

    Parameters
    ----------
    folder : Path or str
        The result folder.

    Returns
    -------
    provenance : dict
        As written.

    Raises
    ------
    ResultError
        If the folder is missing or holds no readable provenance.
    """
    path = Path(folder) / PROVENANCE
    if not Path(folder).is_dir():
        raise ResultError(str(folder), "no such result folder; `fallrise measure RECORDING` makes one")
    try:
        loaded = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError as error:
        raise ResultError(str(folder), f"holds no {PROVENANCE}: not a result folder") from error
    except (OSError, ValueError) as error:
        raise ResultError(str(path), f"cannot be read ({error}); measure the recording again") from error
    if not isinstance(loaded, dict):
        raise ResultError(str(path), "is damaged; measure the recording again")
    return loaded


def write_json(content: Any, path: Path) -> None:
    """Write JSON to a temporary name beside `path`, force it to the disk, rename it.

    Parameters
    ----------
    content : object
        Plain values; NaN becomes null.
    path : Path
        Of the file; it is replaced.
    """
    text = json_text(content) + "\n"
    replace_file(path, lambda part: part.write_text(text, encoding="utf-8"))


def json_text(content: Any) -> str:
    """Give plain values as JSON.

    Parameters
    ----------
    content : object
        Plain values, numpy's and paths among them; NaN and infinite values become null.

    Returns
    -------
    text : str
        Indented, without a newline at the end.
    """
    return json.dumps(_plain(content), indent=1, ensure_ascii=False, allow_nan=False)


def replace_file(path: Path, write: Callable[[Path], object]) -> None:
    """Make a file whole or not at all.

    Parameters
    ----------
    path : Path
        Of the file; it is replaced.
    write : callable
        Gets a temporary path with the same ending and writes there.

    Raises
    ------
    ResultError
        If the folder cannot be written or the disk is full.
    """
    with _one_line(path):
        path.parent.mkdir(parents=True, exist_ok=True)
        part = path.parent / f".{path.stem}.{os.getpid()}.part{path.suffix}"
        try:
            write(part)
            _sync(part)
            part.replace(path)
        finally:
            part.unlink(missing_ok=True)
        _sync(path.parent)


def file_hash(path: Path) -> str:
    """Hash a file's bytes.

    Parameters
    ----------
    path : Path
        A file.

    Returns
    -------
    digest : str
        SHA-256 in hexadecimal digits.
    """
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def _sync(path: Path) -> None:
    """Force a file or folder to the disk."""
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    except OSError as error:
        if error.errno not in (errno.EINVAL, errno.ENOTSUP, errno.EACCES):  # folders on some file systems
            raise
    finally:
        os.close(descriptor)


def _plain(value: Any) -> Any:
    """Numpy scalars and arrays, paths and NaN as JSON knows them."""
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if hasattr(value, "tolist"):
        return _plain(value.tolist())
    if isinstance(value, Path):
        return str(value)
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


@contextmanager
def _one_line(target: Path) -> Iterator[None]:
    """Turn what the file system says into one line for the user."""
    try:
        yield
    except OSError as error:
        if error.errno in (errno.ENOSPC, errno.EDQUOT):
            raise ResultError(
                str(target), "the disk is full; nothing was changed, free some space and repeat"
            ) from error
        raise ResultError(str(target), f"cannot be written ({error.strerror or error})") from error
