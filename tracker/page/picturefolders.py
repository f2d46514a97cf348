"""A folder of pictures that the page sends in one piece: a line that lists them, then their bytes one after another."""

from __future__ import annotations

import json
import re
import shutil
from pathlib import Path
from typing import IO

from tracker.page.errors import RefusedError

ENDINGS = (".png", ".tif", ".tiff", ".jpg", ".jpeg")
FEWEST = 10  # pictures; a folder with fewer holds references or notes, as for a batch
MAX_PICTURES = 200_000
MAX_INDEX = 16 * 1024**2  # bytes of the line that lists the pictures
_PLAIN = re.compile(r"[A-Za-z0-9_][A-Za-z0-9_ ()+,.-]{0,99}")
_BLOCK = 1 << 20


def read_index(stream: IO[bytes], size: int) -> list[tuple[str, int]]:
    """Read the list of pictures at the start of a file, and leave the file at the first picture.

    Parameters
    ----------
    stream : binary file
        Read from its beginning.
    size : int
        Of the whole file in bytes.

    Returns
    -------
    pictures : list of (str, int)
        Name and size in bytes of each, in the order of the file; the names are safe to be written.

    Raises
    ------
    RefusedError
        400 if the list is no JSON array of (name, size), or does not add up to the file; 415 for other files than
        pictures.
    """
    stream.seek(0)
    line = stream.readline(MAX_INDEX)
    try:
        listed = [(str(name), int(length)) for name, length in json.loads(line)]
    except (ValueError, TypeError, RecursionError) as error:
        raise RefusedError(400, "the list of the folder's pictures cannot be read") from error
    if any(length < 1 for _, length in listed) or len(line) + sum(length for _, length in listed) != size:
        raise RefusedError(
            400, "the folder's pictures are not all here, or one is empty; drop the folder again"
        )
    if not FEWEST <= len(listed) <= MAX_PICTURES:
        raise RefusedError(415, f"a recording is a folder of {FEWEST} to {MAX_PICTURES} pictures")
    if any(not name.lower().endswith(ENDINGS) for name, _ in listed):
        raise RefusedError(415, f"pictures must end in {', '.join(ENDINGS)}")
    return [
        (name, length) for name, (_, length) in zip(_safe([name for name, _ in listed]), listed, strict=True)
    ]


def _safe(names: list[str]) -> list[str]:
    """The names themselves if every system can write them side by side; numbers in their order otherwise."""
    if all(map(_PLAIN.fullmatch, names)) and len({name.lower() for name in names}) == len(names):
        return names
    return [f"{number:06d}{Path(name).suffix.lower()}" for number, name in enumerate(names)]


def unpack(stream: IO[bytes], size: int, folder: Path) -> None:
    """Write the pictures into a folder of their own, whole or not at all.

    Parameters
    ----------
    stream : binary file
        As `read_index` reads it.
    size : int
        Of the whole file in bytes.
    folder : Path
        Made here.
    """
    pictures = read_index(stream, size)
    folder.mkdir()
    try:
        for name, length in pictures:
            with (folder / name).open("xb") as out:
                for done in range(0, length, _BLOCK):
                    out.write(stream.read(min(_BLOCK, length - done)))
    except BaseException:
        shutil.rmtree(folder, ignore_errors=True)
        raise
