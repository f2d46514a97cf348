"""Encoders for pictures: video through PyAV, TIFF stacks, folders of PNG pictures."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from fractions import Fraction
from pathlib import Path
from typing import Any

from numpy.typing import NDArray

from tracker.errors import FileError, UsageError
from tracker.simulate.scene import Scene

Writer = Callable[[NDArray[Any], float], None]  # picture and frame time in s

_USUAL = {".avi": "mjpeg", ".mp4": "h264", ".mov": "h264", ".mkv": "ffv1", ".webm": "vp9"}
_ENCODERS = {
    "mjpeg": "mjpeg", "h264": "libx264", "hevc": "libx265", "mpeg4": "mpeg4", "vp9": "libvpx-vp9",
    "ffv1": "ffv1", "rawvideo": "rawvideo",
}  # fmt: skip
_DEEP = ("ffv1", "rawvideo")


def is_video(path: Path) -> bool:
    """Tell whether the suffix names a video container."""
    return path.suffix.lower() in _USUAL


def tick(path: Path, scene: Scene) -> float:
    """Give the time step in s in which the container counts; 0 if times are kept exactly or not at all.

    Parameters
    ----------
    path : Path
        The file to be written; its suffix names the container.
    scene : Scene
        For unevenness, which some containers cannot hold.

    Returns
    -------
    tick : float
        In s.

    Raises
    ------
    UsageError
        If frame times are uneven and the container holds none, or an even grid only.
    """
    if path.suffix.lower() in (".mkv", ".webm"):
        return 1e-3
    if scene.uneven and path.suffix.lower() not in (".mp4", ".mov"):
        raise UsageError(f"{path}: uneven frame times need .mkv, .webm, .mp4 or .mov")
    if scene.lost and not is_video(path):
        raise UsageError(f"{path}: lost frames need a video file, which holds frame times")
    return 1e-5 if scene.uneven else 0.0


@contextmanager
def open_writer(path: Path, scene: Scene, *, shown: Path) -> Iterator[Writer]:
    """Open a recording for writing; the suffix chooses container and default codec.

    Parameters
    ----------
    path : Path
        ``.avi .mp4 .mov .mkv .webm`` video, ``.tif .tiff`` stack, no suffix: a folder of PNG pictures.
    scene : Scene
        Size, depth, codec, quality, frame rate.
    shown : Path
        The name that errors tell, where `path` is a temporary one.

    Yields
    ------
    write : callable
        To be called with each picture and its time in s.

    Raises
    ------
    UsageError
        For an unknown suffix or codec, or a depth that the codec cannot hold.
    FileError
        If nothing can be written there.
    """
    suffix = path.suffix.lower()
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        if suffix in _USUAL:
            with _video(path, scene, shown) as write:
                yield write
        elif suffix in (".tif", ".tiff"):
            import tifffile

            with tifffile.TiffWriter(path) as stack:
                yield _stack_writer(stack)
        elif not suffix:
            path.mkdir(exist_ok=True)
            yield _png_writer(path)
        else:
            raise UsageError(f"{shown}: known are {' '.join(_USUAL)} .tif .tiff, or no suffix")
    except OSError as error:
        raise FileError(str(shown), f"cannot be written: {error.strerror or error}") from error


def _stack_writer(stack: Any) -> Writer:
    """Append pages to a TIFF stack."""

    def write(picture: NDArray[Any], _: float) -> None:
        stack.write(picture, contiguous=True, photometric="minisblack")

    return write


def _png_writer(folder: Path) -> Writer:
    """Write numbered PNG pictures."""
    import cv2

    count = iter(range(10**9))

    def write(picture: NDArray[Any], _: float) -> None:
        path = folder / f"{next(count):06d}.png"
        if not cv2.imwrite(str(path), picture):
            raise FileError(str(path), "cannot be written")

    return write


def _pixel_format(path: Path, scene: Scene, codec: str) -> tuple[str, str]:
    """Pixel format of the pictures handed over and of the file."""
    if scene.bits == 8:
        lossless = "gray" if codec in _DEEP else "yuv420p"
        return "gray", {"mjpeg": "yuvj420p"}.get(codec, lossless)
    if codec not in _DEEP or scene.bits not in (10, 12, 16):
        raise UsageError(f"{path}: {scene.bits} bits need codec ffv1 or rawvideo with 10, 12 or 16 bits")
    deep = f"gray{scene.bits}le"
    return deep, deep


@contextmanager
def _video(path: Path, scene: Scene, shown: Path) -> Iterator[Writer]:
    """Encode pictures one by one, so that memory does not grow with the length."""
    import av

    codec = scene.codec or _USUAL[path.suffix.lower()]
    if codec not in _ENCODERS:
        raise UsageError(f"{shown}: unknown codec {codec!r}; known are {', '.join(_ENCODERS)}")
    given, stored = _pixel_format(shown, scene, codec)
    rate = Fraction(scene.frame_rate).limit_denominator(1001)
    step = (
        1 / rate
        if path.suffix.lower() == ".avi"
        else Fraction(1, 100000 if scene.uneven else rate.numerator * 100)
    )
    with av.open(str(path), "w") as container:
        try:
            stream: Any = container.add_stream(_ENCODERS[codec], rate=rate)
            stream.width, stream.height, stream.pix_fmt = scene.width, scene.height, stored
            stream.codec_context.time_base = stream.time_base = step
            _set_quality(stream.codec_context, codec, scene.quality)

            def write(picture: NDArray[Any], time: float) -> None:
                frame = av.VideoFrame.from_ndarray(picture, format=given)
                frame.pts, frame.time_base = round(Fraction(time) / step), step
                for packet in stream.encode(frame):
                    container.mux(packet)

            yield write
            for packet in stream.encode():
                container.mux(packet)
        except av.FFmpegError as error:
            raise FileError(str(shown), f"cannot be written as {codec}: {error.strerror}") from error


def _set_quality(context: Any, codec: str, quality: int) -> None:
    """Constant quality in the codec's own scale, one thread, so that equal input gives equal files."""
    context.thread_count = 1
    if codec in ("mjpeg", "mpeg4"):
        context.qmin = context.qmax = quality or 4
        context.bit_rate = 10**9
    elif codec in ("h264", "hevc"):
        quiet = {"x265-params": "log-level=error"} if codec == "hevc" else {}
        context.options = {"crf": str(quality or 20), "preset": "medium", **quiet}
    elif codec == "vp9":
        context.options = {"crf": str(quality or 20), "b": "0", "cpu-used": "5", "deadline": "realtime"}
    elif codec == "ffv1":
        context.options = {"level": "3", "g": "1"}
