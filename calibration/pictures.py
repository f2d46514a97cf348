"""Read a reference picture, or the still part of a recording, as grey values."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from calibration.errors import PatternError

VIDEO_SUFFIXES = frozenset({".avi", ".mkv", ".mov", ".mp4", ".m4v", ".mpg", ".mpeg", ".webm", ".wmv"})
MOST_FRAMES = 32  # that are held and averaged
MOST_DECODED = 640  # that are looked at


@dataclass(frozen=True, slots=True)
class Picture:
    """A reference picture as it was read."""

    path: Path
    grey: NDArray[np.float32]  # (rows, columns)
    sha256: str
    date: str  # ISO 8601: when it was taken, or when the file was written
    frames: int = 1  # of a recording that were averaged


def read_picture(path: Path | str) -> Picture:
    """Read a picture file or average a recording.

    Parameters
    ----------
    path : Path or str
        Picture of 8 to 16 bits, grey or colour, or a video. Of a video up to 32 frames are taken and, at each pixel,
        the middle half of the values is averaged: what moves is not in it, a reticle is.

    Returns
    -------
    picture : Picture
        Grey values; colours are joined with the weights of their luminance.

    Raises
    ------
    PatternError
        If the file is missing or cannot be read as a picture or video.
    """
    path = Path(path)
    if not path.is_file():
        raise PatternError(str(path), "is not there" if not path.exists() else "is no file")
    content = path.read_bytes()
    if path.suffix.lower() in VIDEO_SUFFIXES:
        grey, frames, date = _average_video(path)
    else:
        grey, frames, date = _decode(path, content), 1, _taken(path)
    written = datetime.fromtimestamp(path.stat().st_mtime, tz=UTC).isoformat(timespec="seconds")
    return Picture(path, grey, hashlib.sha256(content).hexdigest(), date or written, frames)


def _decode(path: Path, content: bytes) -> NDArray[np.float32]:
    """Decode a picture and join its colours."""
    import cv2

    buffer = np.frombuffer(content, dtype=np.uint8)
    picture = cv2.imdecode(buffer, cv2.IMREAD_ANYDEPTH | cv2.IMREAD_ANYCOLOR) if len(buffer) else None
    if picture is None:
        raise PatternError(
            str(path), "cannot be read as a picture; allowed are PNG, TIFF, JPEG, BMP and videos"
        )
    if picture.ndim == 3:
        # Rec. ITU-R BT.601 luminance of blue, green, red.
        picture = picture[..., :3].astype(np.float32) @ np.array([0.114, 0.587, 0.299], dtype=np.float32)
    return np.asarray(picture, dtype=np.float32)


def _taken(path: Path) -> str:
    """When a picture was taken, as its file says, in ISO 8601; empty if it does not."""
    from PIL import Image

    try:
        with Image.open(path) as picture:
            tags = picture.getexif()
            text = tags.get_ifd(0x8769).get(0x9003) or tags.get(0x0132)
        return datetime.strptime(str(text), "%Y:%m:%d %H:%M:%S").isoformat() if text else ""
    except (OSError, ValueError, SyntaxError):
        return ""


def _average_video(path: Path) -> tuple[NDArray[np.float32], int, str]:
    """Average what stands still in a recording; also the number of frames used and the date."""
    import av

    try:
        with av.open(str(path)) as container:
            frames = _frames(container)
            date = str(container.metadata.get("creation_time", ""))
    except (av.FFmpegError, OSError, IndexError) as error:
        raise PatternError(str(path), f"cannot be read as a video: {error}") from error
    if not frames:
        raise PatternError(str(path), "holds no frame that can be decoded")
    stack = np.stack(frames)
    low, high = len(frames) // 4, len(frames) - 1 - len(frames) // 4
    still = np.empty(stack.shape[1:], dtype=np.float32)
    for first in range(0, stack.shape[1], 64):
        block = np.partition(stack[:, first : first + 64], (low, high), axis=0)
        still[first : first + 64] = block[low : high + 1].mean(axis=0)
    return still, len(frames), _iso(date)


def _frames(container: Any) -> list[NDArray[Any]]:
    """Take up to `MOST_FRAMES` grey frames, evenly over the start of a recording; the step doubles as it goes on."""
    stream = container.streams.video[0]
    stream.thread_type = "AUTO"
    kept: list[NDArray[Any]] = []
    step = 1
    for number, frame in enumerate(container.decode(stream)):
        if number >= MOST_DECODED:
            break
        if number % step:
            continue
        deep = max((component.bits for component in frame.format.components), default=8) > 8
        kept.append(frame.to_ndarray(format="gray16le" if deep else "gray"))
        if len(kept) > MOST_FRAMES:
            kept, step = kept[::2], 2 * step
    return kept


def _iso(text: str) -> str:
    """Give a container's date in the form that `datetime` reads back, or nothing."""
    try:
        return datetime.fromisoformat(text).isoformat(timespec="seconds") if text else ""
    except ValueError:
        return ""
