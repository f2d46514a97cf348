"""Where pictures come from: video files by PyAV, multi-page TIFF files and folders of pictures."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from tracker.errors import RecordingError

Picture = NDArray[Any]  # (height, width) of uint8 or uint16

PICTURE_SUFFIXES = frozenset({".png", ".tif", ".tiff", ".jpg", ".jpeg"})
_LOSSY_SUFFIXES = frozenset({".jpg", ".jpeg"})
_UNTIMED_FORMATS = frozenset({"h264", "hevc", "mjpeg", "m4v", "rawvideo", "obu", "vc1", "cavsvideo"})
_INTRA_CODECS = frozenset(  # every frame a key frame
    {
        "mjpeg", "rawvideo", "huffyuv", "ffvhuff", "prores", "dnxhd", "png", "utvideo", "v210", "jpeg2000",
        "ljpeg", "tiff", "bmp",
    }
)  # fmt: skip
_LOSSLESS_CODECS = frozenset(
    {"rawvideo", "huffyuv", "ffvhuff", "ffv1", "png", "utvideo", "v210", "ljpeg", "tiff", "bmp"}
)
_KINDS = {1: "I", 2: "P", 3: "B", 4: "P", 5: "I", 6: "P", 7: "I"}  # AVPictureType
_THREADS = 2  # decoder threads for codecs with motion compensation; intra codecs gain nothing
_LIMITED_BLACK, _LIMITED_WHITE = 16, 235  # of 8 bit, ITU-R BT.601: luma of studio range


@dataclass(frozen=True, slots=True)
class RawFrame:
    """One decoded picture with what the file says about it."""

    time: float | None  # s, None where the file gives none
    picture: Picture
    corrupt: bool = False  # the decoder concealed damage in it
    kind: str = ""  # I: coded by itself, P: predicted from pictures before, B: from both sides; none: no loss


@dataclass(frozen=True, slots=True)
class Form:
    """Shape and grey scale of a recording's pictures."""

    width: int
    height: int
    bit_depth: int
    black: float  # grey value of no light: 16 of 8 bit in limited range, else 0
    full_scale: float
    codec: str
    time_step: float  # s, the container's resolution of time; 0 if it has none
    interval: float  # s, nominal time between frames; 0 if unknown
    duration: float  # s, 0 if unknown
    frames: int  # as the container states, 0 if it does not
    seekable: bool  # whether every frame can be had without decoding others

    @property
    def picture_bytes(self) -> int:
        """Memory of one picture."""
        return self.width * self.height * (1 if self.bit_depth <= 8 else 2)


class Source(Protocol):
    """Anything that yields pictures in order."""

    form: Form
    warnings: list[str]

    def frames(self) -> Iterator[RawFrame]:
        """Pictures in order of presentation."""

    def sample(self, times: NDArray[np.float64]) -> Iterator[RawFrame]:
        """Pictures at or near the given times, increasing; cheap where the file allows it."""

    def close(self) -> None:
        """Give the file back."""


def open_source(path: Path, *, frame_rate: float | None) -> Source:
    """Open whatever `path` is.

    Parameters
    ----------
    path : Path
        Video file, multi-page TIFF, single picture, or folder of pictures.
    frame_rate : float or None
        In 1/s, for pictures without times.

    Returns
    -------
    source : Source
        Open; the caller closes it.

    Raises
    ------
    RecordingError
        If there is no such file, or nothing in it that can be shown.
    """
    if not path.exists():
        raise RecordingError(str(path), "no such file or folder")
    if path.is_dir():
        return StillSource(path, natural_order(path), frame_rate)
    try:
        size = path.stat().st_size
        with path.open("rb"):
            pass
    except OSError as error:
        raise RecordingError(str(path), f"cannot be read: {error.strerror}") from error
    if size == 0:
        raise RecordingError(str(path), "the file is empty")
    if path.suffix.lower() in {".tif", ".tiff"}:
        return TiffSource(path, frame_rate)
    if path.suffix.lower() in PICTURE_SUFFIXES:
        return StillSource(path, [path], frame_rate)
    return VideoSource(path, frame_rate)


def natural_order(folder: Path) -> list[Path]:
    """Pictures of a folder so that 2 comes before 10; hidden files are left out."""
    found = [
        p for p in folder.iterdir()
        if p.suffix.lower() in PICTURE_SUFFIXES and p.is_file() and not p.name.startswith(".")
    ]  # fmt: skip
    if not found:
        raise RecordingError(str(folder), "the folder holds no pictures (PNG, TIFF or JPEG)")

    def key(path: Path) -> list[tuple[int, int, str]]:
        parts = re.split(r"(\d+)", path.name)
        return [(1, int(p), "") if p.isdigit() else (0, 0, p.lower()) for p in parts]

    return sorted(found, key=key)


def _need_rate(path: Path, frame_rate: float | None) -> float:
    if frame_rate is None:
        raise RecordingError(str(path), "pictures carry no times: state camera.frame_rate in the bench file")
    if not (np.isfinite(frame_rate) and frame_rate > 0):
        raise RecordingError(
            str(path), f"the frame rate must be finite and above 0 per second, not {frame_rate}"
        )
    return frame_rate


class VideoSource:
    """A video file read by PyAV; the luma plane is handed on without conversion wherever there is one."""

    def __init__(self, path: Path, frame_rate: float | None) -> None:
        import av

        self._path, self._av = path, av
        try:
            self._container = av.open(str(path), mode="r", metadata_errors="replace")
        except (av.error.FFmpegError, OSError, ValueError) as error:
            reason = getattr(error, "strerror", None) or str(error)
            raise RecordingError(
                str(path), f"no recording that can be decoded ({reason}); copy it again if it should be one"
            ) from error
        videos = [s for s in self._container.streams.video if not _is_cover(s)]
        if not videos or videos[0].codec_context is None:
            self._container.close()
            raise RecordingError(str(path), "holds no video that can be decoded")
        self.warnings: list[str] = []
        stream = self._stream = videos[0]
        untimed = not set(self._container.format.name.split(",")).isdisjoint(_UNTIMED_FORMATS)
        if untimed and frame_rate is None:
            self._container.close()
            raise RecordingError(
                str(path), "the file carries no times: give camera.frame_rate in the bench file"
            )
        self._rate = frame_rate if untimed else None
        name = stream.codec_context.name
        self._intra, self._lossless = name in _INTRA_CODECS, name in _LOSSLESS_CODECS
        if not self._intra:
            stream.thread_type = "AUTO"
            stream.codec_context.thread_count = _THREADS
        else:
            stream.codec_context.thread_count = 1
        self._first = self._peek()
        self.form = self._read_form(self._first)

    def _peek(self) -> Any:
        """First frame that decodes; it is handed out again by `frames`."""
        self._decoded = self._decode()
        frame = next(self._decoded, None)
        if frame is None:
            self._container.close()
            raise RecordingError(str(self._path), "not one frame of it can be decoded")
        return frame

    def _read_form(self, frame: Any) -> Form:
        stream = self._stream
        picture, bits, limited = _luma(frame)
        height, width = picture.shape
        scale = 2 ** (bits - 8)
        base = float(stream.time_base) if stream.time_base else 0.0
        rate = self._rate or (float(stream.average_rate) if stream.average_rate else 0.0)
        duration = float(stream.duration * stream.time_base) if stream.duration and stream.time_base else 0.0
        if not duration and self._container.duration:
            duration = self._container.duration / 1e6
        return Form(
            width=width, height=height, bit_depth=bits,
            black=float(_LIMITED_BLACK * scale) if limited else 0.0,
            full_scale=float(_LIMITED_WHITE * scale if limited else 2**bits - 1),
            codec=f"{stream.codec_context.name} {frame.format.name}", time_step=0.0 if self._rate else base,
            interval=1 / rate if rate else 0.0, duration=duration, frames=int(stream.frames or 0),
            seekable=self._intra and not self._rate and duration > 0,
        )  # fmt: skip

    def _decode(self) -> Iterator[Any]:
        """Yield decoded frames; damaged packets are stepped over and counted."""
        broken = 0
        errors = self._av.error.FFmpegError
        packets = self._container.demux(self._stream)
        while True:
            try:
                packet = next(packets)
            except StopIteration:
                break
            except errors:
                self.warnings.append("the file ends in the middle of its data: measured as far as it goes")
                break
            try:
                yield from packet.decode()
            except errors:
                broken += 1
        if broken:
            self.warnings.append(f"{broken} damaged packets could not be decoded and were left out")

    def frames(self) -> Iterator[RawFrame]:
        """Pictures in order of presentation, the one read at opening first."""
        strange = 0
        for index, frame in enumerate(self._chain()):
            picture, bits, _ = _luma(frame)
            if picture.shape != (self.form.height, self.form.width) or bits != self.form.bit_depth:
                strange += 1
                continue
            yield RawFrame(self._time(frame, index), picture, bool(frame.is_corrupt), self._kind(frame))
        if strange:
            self.warnings.append(f"{strange} pictures of another size were left out")

    def _kind(self, frame: Any) -> str:
        """Kind of a picture of a codec that loses something, empty for others; by FFmpeg's numbers."""
        return "" if self._lossless else _KINDS.get(int(frame.pict_type), "")

    def _chain(self) -> Iterator[Any]:
        first, self._first = self._first, None
        if first is not None:
            yield first
        yield from self._decoded

    def _time(self, frame: Any, index: int) -> float | None:
        if self._rate:
            return index / self._rate
        if frame.pts is None:
            return None
        return float(frame.pts) * float(frame.time_base)

    def sample(self, times: NDArray[np.float64]) -> Iterator[RawFrame]:
        """Pictures at the given times where every frame is a key frame, else the key frames before them."""
        errors = self._av.error.FFmpegError
        stream, base = self._stream, float(self._stream.time_base or 1)
        seen: set[int] = set()
        for time in times:
            try:
                self._container.seek(int(time / base), stream=stream, backward=True)
                frame = next(self._container.decode(stream), None)
            except errors:
                continue
            if frame is None or frame.pts is None or frame.pts in seen or frame.is_corrupt:
                continue
            seen.add(frame.pts)
            picture, bits, _ = _luma(frame)
            if picture.shape == (self.form.height, self.form.width) and bits == self.form.bit_depth:
                yield RawFrame(frame.pts * base, picture.copy())

    def close(self) -> None:
        """Give the file back."""
        self._container.close()


def _is_cover(stream: Any) -> bool:
    """Whether a video stream is only the cover picture of a sound file."""
    disposition = getattr(stream, "disposition", None)
    return "attached_pic" in str(disposition)


def _luma(frame: Any) -> tuple[Picture, int, bool]:
    """Luma plane, its significant bits, and whether it is of limited range; rotation flags are obeyed."""
    form = frame.format
    parts = form.components
    plain = (
        not form.is_rgb and not form.has_palette and not form.is_bit_stream and not form.is_bayer
        and "f" not in form.name[4:] and all(c.plane != 0 for c in parts[1:])
    )  # fmt: skip
    if not plain:
        frame = frame.reformat(format="gray16le" if parts[0].bits > 8 else "gray")
        form, parts = frame.format, frame.format.components
    bits = int(parts[0].bits)
    plane = frame.planes[0]
    kind = np.dtype(np.uint8) if bits <= 8 else np.dtype(">u2" if form.is_big_endian else "<u2")
    rows = np.frombuffer(plane, kind).reshape(-1, plane.line_size // kind.itemsize)
    picture = rows[: frame.height, : frame.width]
    if kind.itemsize == 2:
        shift = 16 - bits if re.match(r"p[024]1", form.name) else 0  # P010 and kin: bits at the word's top
        picture = np.right_shift(picture, shift).astype(np.uint16, copy=False) if shift else picture
        picture = picture.astype(np.uint16, copy=False)
    turns = round(getattr(frame, "rotation", 0) / 90) % 4
    if turns:
        picture = np.ascontiguousarray(np.rot90(picture, turns))
    limited = (
        plain and form.name.startswith(("yuv", "nv", "p0", "p2", "p4", "y2")) and "yuvj" not in form.name
    )
    return picture, bits, limited and int(frame.color_range) != 2


class StillSource:
    """Picture files, one a frame."""

    def __init__(self, path: Path, files: list[Path], frame_rate: float | None) -> None:
        self._path, self._files = path, files
        self._rate = _need_rate(path, frame_rate)
        self.warnings: list[str] = []
        first = next((p for p in map(_read_still, files) if p is not None), None)
        if first is None:
            raise RecordingError(str(path), "not one picture of it can be read")
        self.form = _still_form(first, files[0].suffix.lower().lstrip("."), self._rate, len(files))

    def frames(self) -> Iterator[RawFrame]:
        """Pictures in natural order of their names."""
        for index, file in enumerate(self._files):
            picture = _read_still(file)
            if picture is None or picture.dtype.itemsize * 8 < self.form.bit_depth:
                self.warnings.append(f"{file.name} cannot be read and was left out")
                continue
            if picture.shape != (self.form.height, self.form.width):
                raise RecordingError(str(file), "has another size than the pictures before it")
            kind = "I" if file.suffix.lower() in _LOSSY_SUFFIXES else ""
            yield RawFrame(index / self._rate, picture, kind=kind)

    def sample(self, times: NDArray[np.float64]) -> Iterator[RawFrame]:
        """Pictures at the given times."""
        for index in np.unique(np.clip(np.rint(times * self._rate), 0, len(self._files) - 1).astype(int)):
            picture = _read_still(self._files[index])
            if picture is not None and picture.shape == (self.form.height, self.form.width):
                yield RawFrame(index / self._rate, picture)

    def close(self) -> None:
        """Nothing is held open."""


class TiffSource:
    """A multi-page TIFF file, one page a frame."""

    def __init__(self, path: Path, frame_rate: float | None) -> None:
        import tifffile

        self._path, self._rate = path, _need_rate(path, frame_rate)
        self.warnings: list[str] = []
        try:
            self._file = tifffile.TiffFile(path)
            first = self._page(0)
        except (tifffile.TiffFileError, OSError, ValueError, IndexError, KeyError) as error:
            raise RecordingError(str(path), f"no TIFF file that can be read ({error})") from error
        self._error = tifffile.TiffFileError
        self.form = _still_form(first, "tiff", self._rate, len(self._file.pages))

    def _page(self, index: int) -> Picture:
        return _to_grey(self._file.pages[index].asarray())

    def frames(self) -> Iterator[RawFrame]:
        """Pages in order."""
        for index in range(len(self._file.pages)):
            try:
                picture = self._page(index)
            except (self._error, OSError, ValueError, IndexError, KeyError):
                self.warnings.append(f"page {index} cannot be read: measured as far as it goes")
                return
            if picture.shape == (self.form.height, self.form.width):
                yield RawFrame(index / self._rate, picture)

    def sample(self, times: NDArray[np.float64]) -> Iterator[RawFrame]:
        """Pages at the given times."""
        last = len(self._file.pages) - 1
        for index in np.unique(np.clip(np.rint(times * self._rate), 0, last).astype(int)):
            try:
                picture = self._page(index)
            except (self._error, OSError, ValueError, IndexError, KeyError):
                continue
            if picture.shape == (self.form.height, self.form.width):
                yield RawFrame(index / self._rate, picture)

    def close(self) -> None:
        """Give the file back."""
        self._file.close()


def _read_still(file: Path) -> Picture | None:
    """One picture as grey values; None if it cannot be read."""
    if file.suffix.lower() in {".tif", ".tiff"}:
        import tifffile

        try:
            return _to_grey(tifffile.imread(file))
        except (tifffile.TiffFileError, OSError, ValueError):
            return None
    import cv2

    data = np.fromfile(file, np.uint8)
    picture = cv2.imdecode(data, cv2.IMREAD_ANYDEPTH | cv2.IMREAD_GRAYSCALE) if len(data) else None
    return None if picture is None else np.asarray(picture)


def _to_grey(values: NDArray[Any]) -> Picture:
    """Grey values of 8 or 16 bit; colours are weighted as in ITU-R BT.601."""
    if values.ndim == 3 and values.shape[-1] in (3, 4):
        grey = values[..., :3].astype(np.float64) @ np.array([0.299, 0.587, 0.114])
        values = np.rint(grey).astype(values.dtype)
    if values.ndim != 2 or values.dtype.kind != "u" or values.dtype.itemsize > 2:
        raise ValueError(f"grey values of 8 or 16 bit needed, not {values.dtype} of shape {values.shape}")
    return np.ascontiguousarray(values.astype(values.dtype.newbyteorder("="), copy=False))


def _still_form(first: Picture, codec: str, rate: float, count: int) -> Form:
    bits = first.dtype.itemsize * 8
    return Form(
        width=first.shape[1], height=first.shape[0], bit_depth=bits, black=0.0, full_scale=float(2**bits - 1),
        codec=codec, time_step=0.0, interval=1 / rate, duration=count / rate, frames=count, seekable=True,
    )  # fmt: skip
