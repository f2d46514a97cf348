"""Which recordings a folder holds, where their results go, and which files each result depends on."""

from __future__ import annotations

import hashlib
import os
import re
from collections import Counter
from dataclasses import dataclass
from datetime import date
from pathlib import Path

from tracker.bench import find_scale
from tracker.benchfile import Keys, bench_text
from tracker.errors import BenchError, RecordingError
from tracker.keeping.store import SUFFIX

VIDEO_SUFFIXES = frozenset(
    {
        ".avi", ".mp4", ".m4v", ".mov", ".mkv", ".webm", ".mpg", ".mpeg", ".mts", ".m2ts", ".ts", ".wmv", ".flv",
        ".ogv", ".y4m",
    }
)  # fmt: skip
_STACK_SUFFIXES = frozenset({".tif", ".tiff"})
_FRAME_SUFFIXES = frozenset({".png", ".jpg", ".jpeg", ".tif", ".tiff"})
_FEWEST_PICTURES = 10  # a folder with fewer pictures holds references or notes, not a recording
_DATE = re.compile(r"(?<!\d)(20\d\d)[-_.]?(0[1-9]|1[0-2])[-_.]?(0[1-9]|[12]\d|3[01])(?!\d)")

Stamp = tuple[str, int, int]  # path, size in bytes, time of last change in ns


@dataclass(frozen=True, slots=True)
class Task:
    """One recording to be measured."""

    name: str  # path within the folder, with forward slashes
    recording: Path
    folder: str  # its result folder within the output folder
    out: Path  # the same, as a path
    bench: Path | None  # named by the user; None: found by the recording's place


def find_tasks(folder: Path, out: Path, *, bench: Path | None = None) -> list[Task]:
    """Walk a folder and list its recordings.

    Parameters
    ----------
    folder : Path
        Where to look; hidden folders, result folders and `out` are left out.
    out : Path
        Under it every recording gets the result folder ``PATH.fallrise``, without the recording's suffix where
        that is unambiguous.
    bench : Path, optional
        One bench file for all.

    Returns
    -------
    tasks : list of Task
        Ordered by name. Video files, TIFF files with several pages, and folders with ten pictures or more.

    Raises
    ------
    RecordingError
        If there is no such folder.
    """
    if not folder.is_dir():
        raise RecordingError(str(folder), "no such folder; name the folder with the term's recordings")
    names = sorted(_walk(folder, out.resolve()))
    stems = Counter(_without_suffix(name) for name in names)
    tasks = []
    for name in names:
        stem = _without_suffix(name)
        result = f"{stem if stems[stem] == 1 else name}{SUFFIX}"
        tasks.append(Task(name, folder / name, result, out / result, bench))
    return tasks


def _without_suffix(name: str) -> str:
    suffix = Path(name).suffix
    return name[: -len(suffix)] if suffix.lower() in VIDEO_SUFFIXES | _STACK_SUFFIXES else name


def _walk(folder: Path, out: Path) -> list[str]:
    """Names of the recordings below a folder."""
    found = []
    for root, folders, files in os.walk(folder):
        here = Path(root)
        folders[:] = sorted(
            d for d in folders
            if not d.startswith(".") and not d.endswith(SUFFIX) and (here / d).resolve() != out
        )  # fmt: skip
        shown = [f for f in files if not f.startswith(".")]
        kinds = Counter(Path(f).suffix.lower() for f in shown)
        videos = [f for f in shown if Path(f).suffix.lower() in VIDEO_SUFFIXES]
        stills = max((kinds[s] for s in _FRAME_SUFFIXES), default=0)
        if here != folder and not videos and stills >= _FEWEST_PICTURES:
            found.append(here.relative_to(folder).as_posix())
            folders.clear()
            continue
        stacks = [f for f in shown if Path(f).suffix.lower() in _STACK_SUFFIXES and _has_pages(here / f)]
        found += [(here / f).relative_to(folder).as_posix() for f in videos + stacks]
    return found


def _has_pages(path: Path) -> bool:
    """Tell whether a TIFF file has several pages; one page is a picture of a reference or a note."""
    import tifffile

    try:
        with tifffile.TiffFile(path) as stack:
            return len(stack.pages) > 1
    except (OSError, ValueError, tifffile.TiffFileError):
        return False


def recording_date(task: Task) -> date:
    """Give the day of a recording: a date in its path within the folder (the last one), else its file's.

    Parameters
    ----------
    task : Task
        A recording; ``2026-11-03`` and ``20261103`` are dates.

    Returns
    -------
    day : date
        For grouping by week.
    """
    for year, month, day in reversed(_DATE.findall(task.name)):
        try:
            return date(int(year), int(month), int(day))
        except ValueError:  # 31 November
            continue
    return date.fromtimestamp(task.recording.stat().st_mtime)


def input_files(task: Task) -> list[Path]:
    """List the files besides the recording on which its result depends: bench, own keys, scale, voltage log.

    Parameters
    ----------
    task : Task
        The recording.

    Returns
    -------
    files : list of Path
        Those that exist; as far as the bench file can be read.
    """
    try:
        keys = Keys(bench_text(task.bench, recording=task.recording))
        files = [path.absolute() for path in keys.files]
        scale, log = keys.raw("camera.scale"), keys.raw("field.log")
        if isinstance(scale, str):
            files.append(keys.file("camera.scale").absolute().parent / scale)
        elif keys.raw("camera.metres_per_pixel") is None:
            found = find_scale(keys, task.recording)
            files += [found] if found is not None else []
        if isinstance(log, str):
            files.append(keys.file("field.log").absolute().parent / log)
    except BenchError:
        return [task.bench] if task.bench is not None and task.bench.is_file() else []
    return [path for path in files if path.is_file()]


def stamp(path: Path) -> Stamp:
    """Size and time of a file, or of a folder's pictures together.

    Parameters
    ----------
    path : Path
        An existing file or folder.

    Returns
    -------
    stamp : (str, int, int)
        Absolute path, size in bytes, time of last change in ns; -1 where it is gone.
    """
    path = path.absolute()
    try:
        if path.is_dir():
            parts = [entry.stat() for entry in os.scandir(path) if entry.is_file()]
            newest = max([path.stat().st_mtime_ns, *(p.st_mtime_ns for p in parts)])
            return str(path), sum(p.st_size for p in parts), newest
        found = path.stat()
    except OSError:
        return str(path), -1, -1
    return str(path), found.st_size, found.st_mtime_ns


def content_hash(path: Path) -> str:
    """SHA-256 of a file, or of a folder's pictures with their names, as a result's provenance has it.

    Parameters
    ----------
    path : Path
        File or folder.

    Returns
    -------
    digest : str
        Hexadecimal; empty if it cannot be read.
    """
    from tracker.seeing.sources import natural_order

    digest = hashlib.sha256()
    try:
        for file in natural_order(path) if path.is_dir() else [path]:
            if path.is_dir():
                digest.update(file.name.encode())
            with file.open("rb") as stream:
                while block := stream.read(1 << 20):
                    digest.update(block)
    except (OSError, RecordingError):
        return ""
    return digest.hexdigest()
