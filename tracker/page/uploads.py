"""Files that come from the page: streamed to the disk, counted, checked for room, named by us.

An upload has no name in the folder until a measurement takes it (on Linux; elsewhere it has a name that
begins with a dot and goes when the server ends), so that a killed server leaves nothing behind.
"""

from __future__ import annotations

import contextlib
import os
import re
import secrets
import shutil
import tempfile
import unicodedata
from collections.abc import AsyncIterator
from dataclasses import dataclass
from pathlib import Path
from typing import IO

from starlette.concurrency import run_in_threadpool

from tracker.page.errors import RefusedError
from tracker.page.picturefolders import read_index, unpack

MAX_UPLOAD = 64 * 1024**3  # bytes
MAX_UPLOADS = 12  # held at a time
SPARE = 256 * 1024**2  # bytes that stay free on the disk
KINDS = {
    "recording": {".avi", ".mp4", ".mov", ".mkv", ".webm", ".m4v", ".tif", ".tiff", ".mpg", ".mpeg", ".ts"},
    "picture": {".png", ".jpg", ".jpeg", ".tif", ".tiff", ".bmp"},
    "log": {".csv", ".txt"},
    "pictures": {""},  # a folder of them, as `picturefolders` reads it
}
_SERVES = {"recording": ("recording", "pictures")}  # role in a measurement -> kinds of uploads
_RESERVED = {"con", "prn", "aux", "nul", *(f"{port}{i}" for port in ("com", "lpt") for i in range(10))}


@dataclass(slots=True)
class Upload:
    """A file that was sent and waits for its use."""

    number: str
    kind: str
    name: str  # as the person knows it; only ever shown as text
    leaf: str  # the cleaned name that it gets on the disk
    size: int
    stream: IO[bytes] | None  # the open file; None once it lies at `path`
    path: Path | None = None
    given_up: bool = False  # its measurement was cancelled; it goes when the server ends

    def place(self, folder: Path) -> Path:
        """Give the file its name in a folder, by a link or a rename; never over another file."""
        target = folder / self.leaf
        if self.path == target:
            return target
        if self.kind == "pictures":
            self._unpack(target)
        elif self.path is not None:
            self.drop_stream()  # some systems rename no file that is open
            self.path.rename(target)
        elif self.stream is not None:
            # Only with a folder descriptor does Python ask the system to follow the link to the open file.
            here = os.open("/proc/self/fd", os.O_RDONLY)
            try:
                os.link(str(self.stream.fileno()), target, src_dir_fd=here, follow_symlinks=True)
            finally:
                os.close(here)
        self.drop_stream()
        self.path = target
        return target

    def _unpack(self, target: Path) -> None:
        """Make a folder of pictures out of the file that holds them."""
        if shutil.disk_usage(target.parent).free < self.size + SPARE:
            raise RefusedError(507, f"too little space on the disk in {target.parent}")
        if self.stream is not None:
            unpack(self.stream, self.size, target)
            self.discard()

    def drop_stream(self) -> None:
        """Close the open file."""
        if self.stream is not None:
            self.stream.close()
            self.stream = None

    def discard(self) -> None:
        """Forget the file; it goes from the disk."""
        self.drop_stream()
        if self.path is not None and self.path.is_dir():
            shutil.rmtree(self.path, ignore_errors=True)
        elif self.path is not None:
            self.path.unlink(missing_ok=True)


def clean_leaf(name: str, *, kind: str) -> str:
    """Make a file name out of what the browser says, without any path.

    Parameters
    ----------
    name : str
        Anything.
    kind : str
        Key of `KINDS`; decides the endings that are allowed.

    Returns
    -------
    leaf : str
        Letters, digits, ``-``, ``_`` and ``.``, at most 80 characters, beginning with none of ``.-``.

    Raises
    ------
    RefusedError
        415 if the ending is not one of the kind.
    """
    plain = unicodedata.normalize("NFKD", re.split(r"[/\\]", name)[-1]).encode("ascii", "ignore").decode()
    stem, dot, ending = (plain, "", "") if kind == "pictures" else plain.rpartition(".")
    suffix = (dot + ending).lower()
    if suffix not in KINDS[kind]:
        raise RefusedError(415, f"a {kind} must end in {', '.join(sorted(KINDS[kind]))}")
    stem = re.sub(r"[^A-Za-z0-9_-]+", "_", stem).strip("_-.")[:72] or kind
    return (f"{stem}_" if stem.lower() in _RESERVED else stem) + suffix


class Uploads:
    """Files sent to one server.

    Parameters
    ----------
    folder : Path
        Where results go; uploads lie on the same file system.
    limit : int
        Largest size of one file in bytes.
    """

    def __init__(self, folder: Path, *, limit: int = MAX_UPLOAD) -> None:
        self.folder, self.limit = folder, limit
        self._held: dict[str, Upload] = {}

    @property
    def held(self) -> int:
        """How many files wait for a measurement."""
        return len(self._held)

    def get(self, number: str, *, kind: str) -> Upload:
        """Give an upload of a kind, or refuse."""
        found = self._held.get(number)
        if found is None or found.kind not in _SERVES.get(kind, (kind,)):
            raise RefusedError(404, f"the {kind} is no longer held; choose the file again")
        return found

    def path_of(self, number: str) -> Path | None:
        """Where an upload lies under its own name; None if it waits for a measurement or is not held."""
        held = self._held.get(number)
        return None if held is None or held.path is None else held.path

    def remove(self, number: str) -> None:
        """Drop a file that was sent; a recording's own folder goes with it unless it holds a result."""
        held = self._held.pop(number, None)
        if held is not None:
            self._remove(held)

    def _remove(self, held: Upload) -> None:
        folder = None if held.path is None else held.path.parent
        held.discard()
        own = folder is not None and folder.parent == self.folder and held.kind in _SERVES["recording"]
        if folder is not None and own and not any(folder.glob("*.fallrise")):
            shutil.rmtree(folder, ignore_errors=True)

    def release(self, number: str) -> None:
        """Take an upload off the list for good: its file has become part of a result."""
        self._held.pop(number, None)

    async def take(self, name: str, *, kind: str, announced: int, body: AsyncIterator[bytes]) -> Upload:
        """Stream a body to the disk.

        Parameters
        ----------
        name : str
            File name as the browser says it.
        kind : str
            Key of `KINDS`.
        announced : int
            Bytes by the Content-Length header; 0 if unknown.
        body : async iterator of bytes
            The request's body.

        Returns
        -------
        upload : Upload

        Raises
        ------
        RefusedError
            413 past the limit, 415 for a wrong ending, 429 for too many, 507 without room. Nothing is left.
        """
        if kind not in KINDS:
            raise RefusedError(400, f"kind must be one of {', '.join(KINDS)}")
        leaf = clean_leaf(name, kind=kind)
        if len(self._held) >= MAX_UPLOADS:
            raise RefusedError(429, f"{MAX_UPLOADS} files are held already; measure or remove one")
        self.folder.mkdir(parents=True, exist_ok=True)
        self._check_room(announced, written=0)
        stream, path = _open_unnamed(self.folder)
        held = Upload(secrets.token_hex(8), kind, name, leaf, 0, stream, path)
        try:
            async for chunk in body:
                held.size += len(chunk)
                self._check_room(max(announced, held.size), written=held.size)
                await run_in_threadpool(stream.write, chunk)
            if held.size == 0:
                raise RefusedError(400, f"{name} is empty")
            await run_in_threadpool(stream.flush)
            if kind == "pictures":
                await run_in_threadpool(read_index, stream, held.size)
        except BaseException:
            held.discard()
            raise
        self._held[held.number] = held
        return held

    def _check_room(self, size: int, *, written: int) -> None:
        """Refuse what is too large or does not fit."""
        if size > self.limit:
            raise RefusedError(413, f"the file is too large; the limit is {self.limit / 1e6:.0f} MB")
        if shutil.disk_usage(self.folder).free < max(0, size - written) + SPARE:
            raise RefusedError(507, f"too little space on the disk in {self.folder}")

    def close(self) -> None:
        """Drop everything that no measurement took, and what belongs to cancelled ones."""
        for held in self._held.values():
            if held.given_up or held.stream is not None:
                self._remove(held)
        self._held.clear()


def _open_unnamed(folder: Path) -> tuple[IO[bytes], Path | None]:
    """Open a file that has no name where the system can; else one with a hidden name."""
    with contextlib.suppress(AttributeError, OSError):
        if Path("/proc/self/fd").is_dir():
            return os.fdopen(os.open(folder, os.O_TMPFILE | os.O_RDWR, 0o644), "w+b"), None
    descriptor, name = tempfile.mkstemp(prefix=".incoming-", suffix=".part", dir=folder)
    return os.fdopen(descriptor, "w+b"), Path(name)
