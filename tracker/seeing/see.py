"""One pass over a recording: background, detection, sub-pixel fits."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tracker.records import FloatArray, Seen, Settings, Sightings
from tracker.seeing.frames import FrameBatch, Reader, open_recording, sample_recording
from tracker.seeing.learn import learn
from tracker.seeing.look import COLUMNS, look

Progress = Callable[[int, int], None]  # frames done, frames in all (0: unknown)
Rectangle = tuple[int, int, int, int]

_SAMPLES = 56  # pictures behind the background
_HEAD_SECONDS = 8.0  # start of a recording that is looked at before any droplet is sought
_HEAD_BYTES = 160_000_000  # of pictures kept for that
_KEY_FRAMES = 16  # more samples from further on, where the codec lets them be reached


def see(
    path: Path | str, *, settings: Settings, frame_rate: float | None = None, lamp: Rectangle | None = None,
    progress: Progress | None = None,
) -> Seen:  # fmt: skip
    """Find all droplets of a recording in one pass.

    Parameters
    ----------
    path : path
        As for `open_recording`.
    settings : Settings
        Region, time window, false-alarm rate.
    frame_rate : float, optional
        In 1/s, for recordings without times.
    lamp : tuple of int, optional
        x, y, width, height in px of a lamp in the picture, whose grey value is recorded frame by frame.
    progress : callable, optional
        Called with frames done and frames in all (0 if unknown).

    Returns
    -------
    seen : Seen
        Sightings with standard deviations that contain the noise of the picture.

    Raises
    ------
    RecordingError
        If the recording cannot be read or gives no frame.
    """
    path = Path(path)
    with open_recording(path, frame_rate=frame_rate) as reader:
        batches = iter(reader)
        view = _View(reader, settings, lamp)
        head = _head(batches, view)
        eyes = learn(
            _samples(path, head, view, frame_rate), black=reader.black, full_scale=reader.full_scale,
            false_alarms=settings.false_alarms,
        )  # fmt: skip
        rows: list[dict[str, NDArray[Any]]] = []
        lamp_series: list[FloatArray] = []
        for batch in _all(head, batches):
            rows.append(look(eyes, view.crop(batch.pictures, view.used(batch)), view.numbers(batch)))
            lamp_series.append(view.lamp_grey(batch))
            if progress is not None:
                progress(batch.first_index + len(batch.times), reader.form.frames)
        recording = reader.recording()
    sightings = _gather(rows, view)
    report = {**eyes.report, "sightings_per_frame": len(sightings) / len(recording.frame_times)}
    grey = np.concatenate(lamp_series) if lamp is not None else None
    return Seen(recording, sightings, report, grey)


@dataclass(frozen=True, slots=True)
class _View:
    """Part of the recording that is looked at."""

    reader: Reader
    settings: Settings
    lamp: Rectangle | None

    def used(self, batch: FrameBatch) -> NDArray[np.bool_]:
        """Frames of a batch within the time window that are neither repeated nor damaged."""
        low, high = self.settings.start, self.settings.end
        inside = batch.usable.copy()
        if low is not None:
            inside &= batch.times >= low
        if high is not None:
            inside &= batch.times <= high
        return inside

    def numbers(self, batch: FrameBatch) -> NDArray[np.int64]:
        """Frame numbers of the used frames."""
        return batch.first_index + np.flatnonzero(self.used(batch))

    def crop(self, pictures: list[NDArray[Any]], used: NDArray[np.bool_]) -> list[NDArray[Any]]:
        """Used pictures, cut to the region."""
        x, y, width, height = self.box
        return [p[y : y + height, x : x + width] for p, u in zip(pictures, used, strict=True) if u]

    @property
    def box(self) -> Rectangle:
        """Region in px, within the picture."""
        x, y, width, height = self.settings.roi or (0, 0, self.reader.width, self.reader.height)
        left, top = max(0, x), max(0, y)
        return left, top, min(x + width, self.reader.width) - left, min(y + height, self.reader.height) - top

    def lamp_grey(self, batch: FrameBatch) -> FloatArray:
        """Mean grey of the lamp's rectangle in every frame of a batch."""
        if self.lamp is None:
            return np.empty(0)
        x, y, width, height = self.lamp
        return np.array([float(p[y : y + height, x : x + width].mean()) for p in batch.pictures])


def _head(batches: Iterator[FrameBatch], view: _View) -> list[FrameBatch]:
    """Batches to look at before any droplet is sought, as many as memory allows."""
    head: list[FrameBatch] = []
    form = view.reader.form
    begin, count = view.settings.start, 0
    for batch in batches:
        head.append(batch)
        count += len(batch.times)
        if begin is None:
            begin = float(batch.times[0])
        if form.seekable and view.used(batch).any():
            break
        enough = batch.times[-1] - begin > _HEAD_SECONDS and count >= _SAMPLES
        if enough or count * form.picture_bytes > _HEAD_BYTES:
            break
    return head


def _all(head: list[FrameBatch], rest: Iterator[FrameBatch]) -> Iterator[FrameBatch]:
    """All batches; those of the head are let go as they are given out."""
    while head:
        yield head.pop(0)
    yield from rest


def _samples(path: Path, head: list[FrameBatch], view: _View, frame_rate: float | None) -> NDArray[Any]:
    """Pictures for the background: spread over the head, and over the rest where it can be reached cheaply."""
    form = view.reader.form
    pictures = [p for b in head for p in view.crop(b.pictures, view.used(b))]
    if not pictures:
        pictures = [p for b in head for p in view.crop(b.pictures, b.usable)]
    first = float(head[0].times[0])
    last = first + form.duration - form.interval
    low, high = view.settings.start, view.settings.end
    first, last = max(first, first if low is None else low), min(last, last if high is None else high)
    many = _SAMPLES if form.seekable else _KEY_FRAMES
    wanted = first + (last - first) * (np.arange(many) + 0.5) / many
    if not form.seekable:
        wanted = wanted[wanted > head[-1].times[-1]]
    far = [p for _, p in sample_recording(path, wanted, frame_rate=frame_rate)] if len(wanted) else []
    far = view.crop(far, np.ones(len(far), np.bool_))
    if not form.seekable or len(far) < min(_SAMPLES // 2, form.frames or _SAMPLES):
        near = np.unique(np.linspace(0, len(pictures) - 1, _SAMPLES - len(far)).astype(int))
        far = [pictures[i] for i in near] + far
    return np.stack(far)


def _gather(rows: list[dict[str, NDArray[Any]]], view: _View) -> Sightings:
    """All columns joined, in px of the whole picture."""
    rows = [r for r in rows if r]
    joined: dict[str, Any] = {
        n: np.concatenate([r[n] for r in rows]) if rows else np.empty(0) for n in COLUMNS
    }
    x, y, _, _ = view.box
    joined["x"] = joined["x"] + x
    joined["y"] = joined["y"] + y
    return Sightings(**joined)
