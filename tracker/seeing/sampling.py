"""Sample pictures of one illumination, for the background and all else that is learned before looking."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tracker.records import FloatArray, Settings
from tracker.seeing.frames import sample_recording
from tracker.seeing.light import Light, coarse, compare, first_change, strange
from tracker.seeing.sources import Form

IntArray = NDArray[np.int64]

_SAMPLES = 56  # pictures behind the background
_SAMPLE_BYTES = 300_000_000  # of them at most: 36 of 3840 x 2160 px
_HEAD_SECONDS = 8.0  # that are looked at before any droplet is sought
_HEAD_BYTES = 160_000_000  # of pictures kept for that
_KEY_FRAMES = 16  # more samples from further on, where not every picture can be reached


@dataclass(frozen=True, slots=True)
class Frames:
    """Consecutive frames that are looked at, cut to the region."""

    numbers: IntArray  # (n,) decoded frames from 0
    times: FloatArray  # (n,) s
    pictures: list[NDArray[Any]]  # n of shape (height, width)

    def part(self, rows: slice) -> Frames:
        """Give some of the frames."""
        return Frames(self.numbers[rows], self.times[rows], self.pictures[rows])


@dataclass(slots=True)
class Source:
    """Frames to come; those already decoded wait in `head`."""

    path: Path
    frames: Iterator[Frames]
    form: Form
    box: tuple[int, int, int, int]  # x, y, width, height of the region in px
    frame_rate: float | None
    head: list[Frames] = field(default_factory=list)

    def __iter__(self) -> Iterator[Frames]:
        while frames := self.head.pop(0) if self.head else next(self.frames, None):
            yield frames  # not `yield from`, which would close the frames with this generator

    def put_back(self, frames: Frames) -> None:
        """Have frames come first again."""
        if len(frames.numbers):
            self.head.insert(0, frames)

    def fill(self, settings: Settings, *, seconds: float | None = None) -> bool:
        """Decode what is needed to learn from; tell whether there is any frame left."""
        wanted = (0.0 if self.form.seekable else _HEAD_SECONDS) if seconds is None else seconds
        while not self._enough(wanted):
            frames = next(self.frames, None)
            if frames is None:
                break
            self.head.append(frames)
        return bool(self.head)

    def _enough(self, seconds: float) -> bool:
        count = sum(len(f.numbers) for f in self.head)
        if count == 0:
            return False
        long = self.head[-1].times[-1] - self.head[0].times[0] >= seconds
        return bool(
            (long and (seconds == 0 or count >= _SAMPLES)) or count * self.form.picture_bytes > _HEAD_BYTES
        )


def gather_samples(source: Source, settings: Settings) -> NDArray[Any]:
    """Pictures that show one illumination, spread over the recording as far as it can be reached cheaply.

    Parameters
    ----------
    source : Source
        Filled; its head is the beginning of the illumination. More is decoded into it if samples lack.
    settings : Settings
        Time window.

    Returns
    -------
    samples : ndarray of shape (n, height, width)
    """
    black = source.form.black
    near = _steady_part(source, black)
    far = _far_samples(source, settings)
    if far:
        grids = np.stack([coarse(p, black) for p in near])
        light = Light(np.asarray(np.median(grids, axis=0), np.float32), black, np.inf, False)
        usual = float(np.median(compare(light, near)[1]))
        light = Light(light.grid, black, usual, False)
        odd = strange(light, *compare(light, far))
        far = [p for p, o in zip(far, odd, strict=True) if not o]
    most = _most_samples(source.form)
    if source.form.seekable and len(far) >= min(most // 2, source.form.frames or most):
        return _stacked(far)
    if source.form.seekable and source.fill(settings, seconds=_HEAD_SECONDS):
        near = _steady_part(source, black)
    rows = np.unique(np.linspace(0, len(near) - 1, max(most - len(far), 1)).astype(int))
    return _stacked([near[i] for i in rows] + far)


def _most_samples(form: Form) -> int:
    return max(min(_SAMPLES, _SAMPLE_BYTES // form.picture_bytes), 1)


def _stacked(pictures: list[NDArray[Any]]) -> NDArray[Any]:
    """Pictures as one array; the list is emptied on the way, so that large ones are not held twice."""
    stack = np.empty((len(pictures), *pictures[0].shape), pictures[0].dtype)
    while pictures:
        picture = pictures.pop()
        stack[len(pictures)] = picture
    return stack


def _steady_part(source: Source, black: float) -> list[NDArray[Any]]:
    """Pictures of the head up to the first change of illumination."""
    pictures = [p for f in source.head for p in f.pictures]
    change = first_change(pictures, black)
    return pictures if change is None else pictures[: max(change, 1)]


def _far_samples(source: Source, settings: Settings) -> list[NDArray[Any]]:
    """Pictures beyond the head: anywhere if every picture is coded by itself, else key frames."""
    form = source.form
    first = float(source.head[0].times[0])
    last = form.duration - form.interval
    if settings.end is not None:
        last = min(last, settings.end)
    if last <= first:
        return []
    many = _most_samples(form) if form.seekable else _KEY_FRAMES
    wanted = first + (last - first) * (np.arange(many) + 0.5) / many
    if not form.seekable:
        wanted = wanted[wanted > source.head[-1].times[-1]]
    if len(wanted) == 0:
        return []
    x, y, width, height = source.box
    found = sample_recording(source.path, wanted, frame_rate=source.frame_rate)
    return [p[y : y + height, x : x + width] for _, p in found]
