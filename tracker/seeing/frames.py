"""Recording in, pictures and frame times out, with what is odd about either."""

from __future__ import annotations

import hashlib
import queue
import threading
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType

import numpy as np
from numpy.typing import NDArray

from tracker.errors import RecordingError
from tracker.records import FloatArray, Recording
from tracker.seeing.sources import Form, Picture, RawFrame, Source, natural_order, open_source

_BATCH_BYTES = 32_000_000  # of pictures handed over at once: fewer switches between decoding and work
_LEAST_BATCH, _MOST_BATCH = 4, 64  # pictures
_WAITING_BYTES = 96_000_000  # of pictures that may wait: decoding goes on while the recording is learned
_LEAST_WAITING = 3  # batches
_GRID = 8  # every eighth pixel of every eighth row tells a repeated picture
_REPEAT_SHARE = 0.25  # of the usual difference between frames; copies through a lossy codec reach about 0.15
_HISTORY = 64  # differences that make up the usual one


@dataclass(frozen=True, slots=True)
class FrameBatch:
    """Consecutive frames; the pictures may lie in the decoder's memory and must not be written to."""

    first_index: int  # number of the first frame, decoded frames from 0
    times: FloatArray  # (n,) s
    pictures: list[Picture]  # n of shape (height, width)
    usable: NDArray[np.bool_]  # (n,) False for repeated and damaged pictures


class Reader:
    """One pass over a recording; use it in a `with` block, iterate, then ask for `recording()`.

    Decoding runs in its own thread and is at most a few batches ahead. Attributes: `form` with the
    pictures' size and grey scale, and `width`, `height`, `bit_depth`, `full_scale`, `black` of it.
    """

    def __init__(self, path: Path, source: Source) -> None:
        self.path, self.form = path, source.form
        self._source = source
        self._size = min(max(_BATCH_BYTES // source.form.picture_bytes, _LEAST_BATCH), _MOST_BATCH)
        waiting = max(_WAITING_BYTES // (self._size * source.form.picture_bytes), _LEAST_WAITING)
        self._queue: queue.Queue[list[RawFrame] | Exception | None] = queue.Queue(waiting)
        self._stop = threading.Event()
        self._thread: threading.Thread | None = None
        self._hash = _Hash(path)
        self._times: list[float] = []
        self._repeated: list[int] = []
        self._kinds: list[str] = []
        self._untimed = self._unordered = self._damaged = 0
        self._differences: list[float] = []
        self._last: Picture | None = None

    @property
    def width(self) -> int:
        """Of a picture in px."""
        return self.form.width

    @property
    def height(self) -> int:
        """Of a picture in px."""
        return self.form.height

    @property
    def bit_depth(self) -> int:
        """Significant bits of a grey value."""
        return self.form.bit_depth

    @property
    def full_scale(self) -> float:
        """Grey value at saturation."""
        return self.form.full_scale

    @property
    def black(self) -> float:
        """Grey value of no light."""
        return self.form.black

    def __enter__(self) -> Reader:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._stop.set()
        if self._thread is not None:
            while self._thread.is_alive():
                try:
                    self._queue.get(timeout=0.05)
                except queue.Empty:
                    continue
            self._thread.join()
        self._hash.stop()
        self._source.close()

    def __iter__(self) -> Iterator[FrameBatch]:
        """Batches of frames from the first to the last; once only."""
        if self._thread is not None:
            raise RuntimeError("a reader gives its frames once")
        self._thread = threading.Thread(target=self._decode, name="decode", daemon=True)
        self._thread.start()
        while (item := self._queue.get()) is not None:
            if isinstance(item, Exception):
                raise item
            yield self._batch(item)

    def _decode(self) -> None:
        """Decode into the queue until the end or until the reader is closed."""
        try:
            batch: list[RawFrame] = []
            for frame in self._source.frames():
                batch.append(frame)
                if len(batch) == self._size:
                    if not self._put(batch):
                        return
                    batch = []
            if batch:
                self._put(batch)
            self._put(None)
        except Exception as error:  # handed to the thread that iterates, which raises it
            self._put(error)

    def _put(self, item: list[RawFrame] | Exception | None) -> bool:
        while not self._stop.is_set():
            try:
                self._queue.put(item, timeout=0.1)
            except queue.Full:
                continue
            return True
        return False

    def _batch(self, frames: list[RawFrame]) -> FrameBatch:
        first = len(self._times)
        repeated = self._find_repeats([f.picture for f in frames])
        for i, frame in enumerate(frames):
            time, sound = self._time(frame.time)
            self._times.append(time)
            self._damaged += frame.corrupt
            self._kinds.append(frame.kind)
            repeated[i] |= not sound
        self._repeated += [first + int(i) for i in np.flatnonzero(repeated)]
        usable = ~repeated & ~np.array([f.corrupt for f in frames])
        times = np.array(self._times[first:])
        return FrameBatch(first, times, [f.picture for f in frames], usable)

    def _time(self, time: float | None) -> tuple[float, bool]:
        """Time of the next frame, and whether the file's own time could be taken."""
        before = self._times[-1] if self._times else None
        step = self.form.interval or self.form.time_step or 1e-3
        if time is None:
            self._untimed += 1
            return (0.0 if before is None else before + step), True
        if before is not None and time <= before:
            self._unordered += 1
            return before + 1e-3 * step, False
        return time, True

    def _find_repeats(self, pictures: list[Picture]) -> NDArray[np.bool_]:
        """Which pictures are copies of the one before, by their differences on a coarse grid."""
        chain = pictures if self._last is None else [self._last, *pictures]
        grids = np.stack([p[::_GRID, ::_GRID] for p in chain]).astype(np.int32)
        changes = np.abs(np.diff(grids, axis=0)).mean((1, 2)).tolist()
        repeated = np.zeros(len(pictures), np.bool_)
        offset = len(pictures) - len(changes)
        usual = float(np.median(self._differences + changes)) if changes else 0.0
        for i, change in enumerate(changes):
            if change < _REPEAT_SHARE * usual:
                repeated[offset + i] = _same(chain[i], chain[i + 1], usual)
        self._differences = (self._differences + changes)[-_HISTORY:]
        self._last = pictures[-1]
        return repeated

    @property
    def kinds(self) -> NDArray[np.str_]:
        """Kind of each picture read so far: I, P, B, or empty where it is not known or all are alike."""
        return np.array(self._kinds, np.str_)

    def recording(self) -> Recording:
        """Facts of the recording after the whole pass.

        Returns
        -------
        recording : Recording
            Of the frames that were handed out.

        Raises
        ------
        RecordingError
            If no frame was read.
        """
        if not self._times:
            raise RecordingError(str(self.path), "gives no frame")
        times = np.array(self._times)
        lost, uneven = _gaps(times, self.form)
        return Recording(
            path=self.path, sha256=self._hash.result(), width=self.width, height=self.height,
            frame_times=times,
            repeated=np.array(self._repeated, np.int64), lost=lost, uneven=uneven, bit_depth=self.bit_depth,
            full_scale=self.full_scale, codec=self.form.codec, warnings=tuple(self._told()),
        )  # fmt: skip

    def _told(self) -> list[str]:
        told = list(self._source.warnings)
        stated, read = self.form.frames, len(self._times)
        few = 0.1 * stated if told else 0  # some are missing where damage was told already
        if stated - read > few:
            told.append(f"the file states {stated} frames and gives {read}: measured as far as it goes")
        ends = self._times[-1] - self._times[0] + self.form.interval if read else 0.0
        duration = self.form.duration
        if duration - ends > max(1.0, 0.05 * duration) and not told:
            told.append(
                f"the file states {duration:.2f} s and ends after {ends:.2f} s: measured as far as it goes"
            )
        if self._damaged:
            told.append(f"{self._damaged} damaged pictures were left out")
        if self._untimed:
            told.append(f"{self._untimed} frames without a time were placed by the nominal frame rate")
        if self._unordered:
            told.append(f"{self._unordered} frames whose time does not follow the one before were left out")
        return told


def open_recording(path: Path | str, *, frame_rate: float | None = None) -> Reader:
    """Open a recording for one pass.

    Parameters
    ----------
    path : path
        Video file (AVI, MP4, MOV, MKV, WebM and what else FFmpeg reads), multi-page TIFF, or a folder of
        PNG, TIFF or JPEG pictures, taken in natural order of their names.
    frame_rate : float, optional
        In 1/s, for recordings that carry no times; needed for pictures, without effect where times are given.

    Returns
    -------
    reader : Reader
        A context manager.

    Raises
    ------
    RecordingError
        If there is no such file, nothing to decode in it, or no frame rate where one is needed.
    """
    path = Path(path)
    return Reader(path, open_source(path, frame_rate=frame_rate))


def sample_recording(
    path: Path | str, times: FloatArray, *, frame_rate: float | None = None
) -> list[tuple[float, Picture]]:
    """Read single pictures spread over a recording, without decoding what lies between.

    Parameters
    ----------
    path : path
        As for `open_recording`.
    times : ndarray of shape (n,)
        Wanted times in s, increasing.
    frame_rate : float, optional
        As for `open_recording`.

    Returns
    -------
    samples : list of (time, picture)
        Those that can be read; at the wanted times where every picture is coded by itself, else the key
        frames before them, each once.
    """
    source = open_source(Path(path), frame_rate=frame_rate)
    try:
        return [(f.time or 0.0, f.picture) for f in source.sample(times)]
    finally:
        source.close()


def _same(a: Picture, b: Picture, usual: float) -> bool:
    """Whether two pictures are one: nowhere a change as a droplet makes that has moved on.

    A copy through a lossy codec differs by a few grey values at most, and less than frames usually do.
    """
    change = np.abs(a.astype(np.int32) - b)
    return bool(change.mean() < _REPEAT_SHARE * usual and change.max() <= max(3.0, 6 * usual))


def _gaps(times: FloatArray, form: Form) -> tuple[int, bool]:
    """Frames that the times say are missing, and whether intervals differ by more than a time step."""
    steps = np.diff(times)
    if len(steps) == 0:
        return 0, False
    usual = float(np.median(steps))
    missing = np.rint(steps / usual) - 1
    tolerance = 1.001 * form.time_step + 1e-6 * usual
    return int(missing[missing > 0].sum()), bool(np.abs(steps - usual).max() > tolerance)


class _Hash:
    """SHA-256 of a file, or of a folder's pictures, computed in a thread of its own."""

    def __init__(self, path: Path) -> None:
        self._path, self._digest, self._error = path, hashlib.sha256(), ""
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._run, name="sha256", daemon=True)
        self._thread.start()

    def _run(self) -> None:
        try:
            for file in natural_order(self._path) if self._path.is_dir() else [self._path]:
                if self._path.is_dir():
                    self._digest.update(file.name.encode())
                with file.open("rb") as stream:
                    while not self._stop.is_set() and (block := stream.read(1 << 20)):
                        self._digest.update(block)
        except OSError as error:
            self._error = error.strerror or str(error)

    def result(self) -> str:
        """Hexadecimal digest."""
        self._thread.join()
        if self._error:
            raise RecordingError(str(self._path), f"cannot be read: {self._error}")
        return self._digest.hexdigest()

    def stop(self) -> None:
        """End early."""
        self._stop.set()
        self._thread.join()
