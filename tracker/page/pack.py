"""The frame pack: every frame of a recording as a JPEG of its own, so that any frame is at hand at once.

Recordings with long groups of pictures take half a second for a jump. The pack is written once, on first
opening, into a cache folder of the user (not into the result), under the recording's own hash, and is thrown
away when the cache is full. Beside each full picture it holds one of half the size for moving fast.

Layout: the JPEGs, one after the other, full then half; then an ``npz`` with `offsets` (frames, 2), `sizes`
(frames, 2), `times` in s, `background` (the standing picture, 8 bit) and `white` (the grey value shown as
white); then the length of the ``npz`` as 8 bytes, little-endian, and the 8 bytes of `MAGIC`.
"""

from __future__ import annotations

import contextlib
import io
import os
import shutil
import threading
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from tracker.errors import RecordingError
from tracker.page.errors import RefusedError

MAGIC = b"fallpak1"
FULL_QUALITY, HALF_QUALITY = 90, 82
SAMPLES = 48  # pictures that the standing picture is made of
STANDING = 0.3  # quantile over time: droplets that pass are brighter than this (dark-field)
PEDESTAL = 24  # grey that stands for "nothing" in a picture with the background removed
MAX_FRAMES = 200_000
MAX_CACHE = 8 * 1024**3  # bytes of all packs together
SPARE = 256 * 1024**2  # bytes that stay free on the disk

Picture = NDArray[Any]


def cache_folder() -> Path:
    """Folder of this user's frame packs."""
    own = os.environ.get("FALLRISE_CACHE")
    base = os.environ.get("LOCALAPPDATA") or os.environ.get("XDG_CACHE_HOME")
    return Path(own) if own else (Path(base) if base else Path.home() / ".cache") / "fallrise"


def write_pack(
    batches: Iterable[tuple[NDArray[np.float64], list[Picture]]],
    path: Path,
    *,
    hear: Callable[[list[tuple[int, int, float]]], None] | None = None,
) -> int:
    """Write the pack of one recording; whole or not at all.

    Parameters
    ----------
    batches : iterable of (times, pictures)
        Frame times in s and grey pictures, 8 or 16 bit, in order.
    path : Path
        Of the pack; grows as ``path.part`` until it is complete.
    hear : callable, optional
        Gets (size of the full JPEG, size of the half one, frame time) for the frames of each batch once they
        can be read from the growing file.

    Returns
    -------
    frames : int

    Raises
    ------
    RefusedError
        If the recording has too many frames, or the disk is full (507).
    RecordingError
        If it has none.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    part = path.with_name(path.name + ".part")
    try:
        with part.open("wb") as out:
            frames = _write(batches, out, hear)
        part.replace(path)
    finally:
        part.unlink(missing_ok=True)
    return frames


def _write(
    batches: Iterable[tuple[NDArray[np.float64], list[Picture]]],
    out: BinaryIO,
    hear: Callable[[list[tuple[int, int, float]]], None] | None,
) -> int:
    """Write JPEGs and index to an open file."""
    sizes: list[tuple[int, int]] = []
    times: list[float] = []
    standing = _Standing()
    white = 0.0
    for batch_times, pictures in batches:
        white = white or _white(pictures)
        said = []
        for time, picture in zip(batch_times, pictures, strict=True):
            grey = _eight_bit(picture, white)
            full, half = _jpeg(grey, FULL_QUALITY), _jpeg(_halved(grey), HALF_QUALITY)
            out.write(full)
            out.write(half)
            sizes.append((len(full), len(half)))
            times.append(float(time))
            said.append((len(full), len(half), float(time)))
            standing.take(grey)
        if len(sizes) > MAX_FRAMES:
            raise RefusedError(413, f"the recording has more than {MAX_FRAMES} frames; cut it")
        out.flush()
        if hear is not None:
            hear(said)
    if not sizes:
        raise RecordingError("recording", "gives no frame")
    index = io.BytesIO()
    flat = np.asarray(sizes, np.int64)
    ends = np.cumsum(flat.ravel()).reshape(-1, 2)
    np.savez(
        index, sizes=flat, offsets=ends - flat, times=np.asarray(times), background=standing.picture(),
        white=np.float64(white),
    )  # fmt: skip
    out.write(index.getvalue() + len(index.getvalue()).to_bytes(8, "little") + MAGIC)
    out.flush()
    os.fsync(out.fileno())
    return len(sizes)


def _white(pictures: list[Picture]) -> float:
    """Grey value to be shown as white: full scale of 8 bit, or a little above the brightest seen at first."""
    if pictures[0].dtype == np.uint8:
        return 255.0
    return max(1.0, 1.25 * max(float(picture.max()) for picture in pictures))


def _eight_bit(picture: Picture, white: float) -> NDArray[np.uint8]:
    """Give the picture in 8 bit, `white` and above as 255."""
    if picture.dtype == np.uint8:
        return np.ascontiguousarray(picture)
    return np.clip(np.rint(picture * (255.0 / white)), 0, 255).astype(np.uint8)


def _halved(grey: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Halve by averaging 2 x 2 pixels; an odd edge is repeated, so that pixel i covers 2i and 2i + 1."""
    import cv2

    rows, columns = grey.shape
    even = np.pad(grey, ((0, rows % 2), (0, columns % 2)), mode="edge") if rows % 2 or columns % 2 else grey
    return cv2.resize(even, (even.shape[1] // 2, even.shape[0] // 2), interpolation=cv2.INTER_AREA)  # type: ignore[return-value]


def _jpeg(grey: NDArray[np.uint8], quality: int) -> bytes:
    import cv2

    return cv2.imencode(".jpg", grey, [cv2.IMWRITE_JPEG_QUALITY, quality])[1].tobytes()


class _Standing:
    """What stands still, from pictures spread over the whole recording in constant memory.

    Every `stride`-th picture is kept; when the room is used up every second one goes and the stride doubles.
    """

    def __init__(self) -> None:
        self._kept: list[NDArray[np.uint8]] = []
        self._stride, self._seen = 1, 0

    def take(self, grey: NDArray[np.uint8]) -> None:
        if self._seen % self._stride == 0:
            if len(self._kept) == SAMPLES:
                self._kept, self._stride = self._kept[::2], 2 * self._stride
            if self._seen % self._stride == 0:
                self._kept.append(grey.copy())
        self._seen += 1

    def picture(self) -> NDArray[np.uint8]:
        """Quantile over time of each pixel, a few rows at a time."""
        rank = int(STANDING * (len(self._kept) - 1))
        rows = range(self._kept[0].shape[0])
        return np.stack(
            [np.partition([kept[row] for kept in self._kept], rank, axis=0)[rank] for row in rows]
        )


@dataclass(slots=True)
class Pack:
    """A frame pack that is read while it grows, or complete."""

    file: BinaryIO
    offsets: list[tuple[int, int]] = field(default_factory=list)
    sizes: list[tuple[int, int]] = field(default_factory=list)
    times: list[float] = field(default_factory=list)
    background: NDArray[np.uint8] | None = None  # None while the pack grows
    lock: threading.Lock = field(default_factory=threading.Lock)  # requests share the one open file

    @classmethod
    def open(cls, path: Path) -> Pack:
        """Open a complete pack; OSError if there is none, ValueError if it is damaged."""
        file = path.open("rb")
        try:
            file.seek(-16, os.SEEK_END)
            tail = file.read(16)
            if tail[8:] != MAGIC:
                raise ValueError("no frame pack")
            file.seek(-16 - int.from_bytes(tail[:8], "little"), os.SEEK_END)
            with np.load(io.BytesIO(file.read()[:-16])) as index:
                os.utime(path)  # the cache throws the longest unused away first
                return cls(
                    file, [tuple(row) for row in index["offsets"].tolist()],
                    [tuple(row) for row in index["sizes"].tolist()], index["times"].tolist(), index["background"],
                )  # fmt: skip
        except BaseException:
            file.close()
            raise

    def add(self, said: Iterable[tuple[int, int, float]]) -> None:
        """Take in frames that a writer has just finished."""
        end = self.offsets[-1][1] + self.sizes[-1][1] if self.offsets else 0
        for full, half, time in said:
            self.offsets.append((end, end + full))
            self.sizes.append((full, half))
            self.times.append(time)
            end += full + half

    def jpeg(self, frame: int, *, half: bool = False, clear: bool = False) -> bytes:
        """One frame as JPEG; refuses (404) a frame that is not there.

        Parameters
        ----------
        frame : int
            From 0.
        half : bool
            Half the size along each side.
        clear : bool
            With what stands still taken away.
        """
        if not 0 <= frame < len(self.offsets):
            raise RefusedError(
                404, f"there is no frame {frame}; the recording has {len(self.offsets)} so far"
            )
        if clear and self.background is None:
            raise RefusedError(409, "the background is known once all frames have been read")
        at = int(half)
        with self.lock:
            self.file.seek(self.offsets[frame][at])
            data = self.file.read(self.sizes[frame][at])
        return _cleared(data, self.background, half=half) if clear and self.background is not None else data

    def close(self) -> None:
        """Close the file."""
        self.file.close()


def _cleared(jpeg: bytes, background: NDArray[np.uint8], *, half: bool) -> bytes:
    """Take the standing picture away from a JPEG; PEDESTAL stands for no difference."""
    import cv2

    grey = cv2.imdecode(np.frombuffer(jpeg, np.uint8), cv2.IMREAD_GRAYSCALE)
    standing = _halved(background) if half else background
    if grey is None or grey.shape != standing.shape:
        raise RefusedError(
            422, "the frame pack is damaged; delete the folder it lies in: " + str(cache_folder())
        )
    clear = grey.astype(np.int16) - standing + PEDESTAL
    return _jpeg(np.clip(clear, 0, 255).astype(np.uint8), HALF_QUALITY if half else FULL_QUALITY)


def make_room(folder: Path, wanted: int) -> None:
    """Throw the longest unused packs away until `wanted` bytes fit; refuse with 507 if the disk is too full."""
    folder.mkdir(parents=True, exist_ok=True)
    packs = sorted(_packs(folder), key=lambda pack: pack[1])
    total = sum(size for _, _, size in packs)
    for path, _, size in packs:
        if total + wanted <= MAX_CACHE and shutil.disk_usage(folder).free > wanted + SPARE:
            return
        with contextlib.suppress(OSError):
            path.unlink()
            total -= size
    if shutil.disk_usage(folder).free <= wanted + SPARE:
        raise RefusedError(
            507, f"too little space on the disk for the pictures: {wanted / 1e6:.0f} MB wanted"
        )


def _packs(folder: Path) -> Iterator[tuple[Path, float, int]]:
    """Each pack with the time of its last use and its size."""
    for path in folder.glob("*.frames"):
        with contextlib.suppress(OSError):
            state = path.stat()
            yield path, state.st_mtime, state.st_size
