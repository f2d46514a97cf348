"""One pass over a recording: background, detection, sub-pixel fits."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tracker.errors import UsageError
from tracker.records import FloatArray, IntArray, Seen, Settings, Sightings
from tracker.seeing.copies import mend_deviations
from tracker.seeing.cutouts import Album
from tracker.seeing.fixed import on_fixed_places
from tracker.seeing.frames import Reader, open_recording
from tracker.seeing.learn import Eyes, learn
from tracker.seeing.light import change_at, common_jumps, compare, even, shift_between, strange
from tracker.seeing.link import first_pieces
from tracker.seeing.look import COLUMNS, Columns, look
from tracker.seeing.sampling import Frames, Source, gather_samples
from tracker.seeing.strays import Alarms, count_alarms

Progress = Callable[[int, int], None]  # frames done, frames in all (0: unknown)
Rectangle = tuple[int, int, int, int]

_LEAST_SIDE = 24  # px, of the region that is looked at
_BLIND = 2.0  # times further off than a change of light needs: a single frame that is left out
_LOOSE = (
    3.0  # times the asked rate of false sightings at first; strays above it are left out once they are known
)
_MOST_LIGHTS = 12  # changes of illumination that are followed; a recording with more is not held up


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
    UsageError
        If the region leaves nothing of the picture, or the lamp does not lie in it.
    """
    path = Path(path)
    with open_recording(path, frame_rate=frame_rate) as reader:
        _require_lamp(lamp, reader)
        watch = _Watch(reader, settings, lamp, progress)
        source = Source(path, watch.frames(), reader.form, watch.box, frame_rate)
        rows: list[Columns] = []
        album = Album()
        while source.fill(settings):
            eyes = learn(
                gather_samples(source, settings), black=reader.black, full_scale=reader.full_scale,
                false_alarms=_LOOSE * settings.false_alarms,
            )  # fmt: skip
            watch.learned(eyes, source)
            rows += _follow(eyes, source, album, check=len(watch.eyes) < _MOST_LIGHTS)
        recording = reader.recording()
    sightings, strain, score, number = _gather(rows, watch.box, lamp)
    cutouts = album.cutouts(number, watch.box[:2])
    pieces = first_pieces(sightings, recording)
    sightings, copies = mend_deviations(sightings, strain=strain, piece=pieces, kinds=reader.kinds)
    fixed = on_fixed_places(sightings, pieces, recording)
    if fixed.any():
        watch.warnings.append(f"{int(fixed.sum())} sightings of bright places that never move were left out")
        sightings, score, pieces = sightings.take(~fixed), score[~fixed], pieces[~fixed]
        cutouts = cutouts.take(~fixed)
    accepted, room = settings.false_alarms * watch.looked, float(watch.looked * watch.box[2] * watch.box[3])
    alarms = count_alarms(
        sightings, score, pieces, accepted=accepted, room=room, firm=watch.firm_threshold
    )  # fmt: skip
    sightings, pieces = sightings.take(alarms.keep), pieces[alarms.keep]
    jumps = common_jumps(sightings, pieces, recording.frame_times)
    watch.warnings += [f"all droplets jump at frame {j}: tracks are cut there" for j in jumps]
    grey = np.concatenate(watch.grey) if lamp is not None else None
    report = watch.report(len(sightings) / len(recording.frame_times), copies, alarms)
    cuts = np.array(sorted({*watch.cuts, *jumps}), np.int64)
    return Seen(recording, sightings, report, grey, cuts, tuple(watch.warnings), cutouts.take(alarms.keep))


@dataclass(slots=True)
class _Watch:
    """What goes by while a recording is read."""

    reader: Reader
    settings: Settings
    lamp: Rectangle | None
    progress: Progress | None
    grey: list[FloatArray] = field(default_factory=list)  # of the lamp
    eyes: list[Eyes] = field(default_factory=list)
    cuts: list[int] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)
    looked: int = 0  # frames that were looked at

    @property
    def box(self) -> Rectangle:
        """Region in px, within the picture."""
        x, y, width, height = self.settings.roi or (0, 0, self.reader.width, self.reader.height)
        left, top = max(0, x), max(0, y)
        right, bottom = min(x + width, self.reader.width), min(y + height, self.reader.height)
        if right - left < _LEAST_SIDE or bottom - top < _LEAST_SIDE:
            raise UsageError(
                f"the region {x},{y},{width},{height} leaves less than {_LEAST_SIDE} x {_LEAST_SIDE} px "
                f"of a picture of {self.reader.width} x {self.reader.height} px"
            )
        return left, top, right - left, bottom - top

    def frames(self) -> Iterator[Frames]:
        """Frames within the time window that are neither repeated nor damaged, cut to the region."""
        low, high = self.settings.start, self.settings.end
        x, y, width, height = self.box
        for batch in self.reader:
            if self.lamp is not None:
                u, v, w, h = self.lamp
                self.grey.append(np.array([float(p[v : v + h, u : u + w].mean()) for p in batch.pictures]))
            used = batch.usable & (batch.times >= (-np.inf if low is None else low))
            used &= batch.times <= (np.inf if high is None else high)
            if self.progress is not None:
                self.progress(batch.first_index + len(batch.times), self.reader.form.frames)
            rows = np.flatnonzero(used)
            self.looked += len(rows)
            if len(rows):
                cut = [batch.pictures[i][y : y + height, x : x + width] for i in rows]
                yield Frames(batch.first_index + rows, batch.times[rows], cut)

    def learned(self, eyes: Eyes, source: Source) -> None:
        """Take note of a new illumination, and of a camera that was moved."""
        if self.eyes:
            at, time = source.head[0].numbers[0], source.head[0].times[0]
            shift = shift_between(self.eyes[-1].background.level, eyes.background.level)
            if shift is None:
                self.warnings.append(f"the light changes at {time:.2f} s")
            else:
                self.cuts.append(int(at))
                moved = f"({shift[0]:.1f}, {shift[1]:.1f}) px"
                self.warnings.append(f"the camera was moved by {moved} at {time:.2f} s: tracks are cut there")
        self.eyes.append(eyes)

    @property
    def firm_threshold(self) -> float:
        """Threshold at which noise would have the asked rate: h with exp(-h^2 / 2) smaller by the loose factor."""
        loose = self.eyes[0].report["threshold"] if self.eyes else 0.0
        return math.sqrt(loose**2 + 2 * math.log(_LOOSE))

    def report(self, per_frame: float, copies: dict[str, Any], alarms: Alarms) -> dict[str, Any]:
        """What was found, for provenance; of the first illumination."""
        first = self.eyes[0].report if self.eyes else {}
        return {
            **first,
            "illuminations": len(self.eyes),
            "sightings_per_frame": per_frame,
            "picture_kinds": copies,
            "false_alarms_asked": self.settings.false_alarms,
            "false_alarms_found": None if alarms.false is None else alarms.false / max(self.looked, 1),
            "threshold_of_strays": alarms.threshold,
            "strays_left_out": int(np.count_nonzero(~alarms.keep)),
        }


def _follow(eyes: Eyes, source: Source, album: Album, *, check: bool) -> list[Columns]:
    """Look at frames until the recording ends or shows another illumination; what is left goes back."""
    rows: list[Columns] = []
    for count, frames in enumerate(source):
        ratio, mismatch = compare(eyes.light, frames.pictures)
        odd = strange(eyes.light, ratio, mismatch)
        if not check or (count == 0 and odd.all()):
            odd[:] = False
        change = change_at(odd) if count or not odd[0] else None
        blind = odd & strange(eyes.light, ratio, mismatch, times=_BLIND)
        keep = np.flatnonzero(~blind[:change])
        pictures = [frames.pictures[i] for i in keep]
        if eyes.light.flickers:
            pictures = even(eyes.light, pictures, ratio[keep])
        seen = look(eyes, pictures, frames.numbers[keep])
        if seen:
            seen["cutout"] = album.keep(eyes, pictures, frames.numbers[keep], seen)
        rows.append(seen)
        if change is not None:
            source.put_back(frames.part(slice(change, None)))
            break
    return rows


def _require_lamp(lamp: Rectangle | None, reader: Reader) -> None:
    """Refuse a lamp outside the picture: its grey value would be none."""
    if lamp is None:
        return
    x, y, width, height = lamp
    if min(x, y) < 0 or min(width, height) < 1 or x + width > reader.width or y + height > reader.height:
        raise UsageError(
            f"field.lamp: the rectangle {list(lamp)} (x, y, width, height in px) lies outside the picture of "
            f"{reader.width} x {reader.height} px; correct it in the bench file"
        )


def _within(sightings: Sightings, lamp: Rectangle) -> NDArray[np.bool_]:
    """Which sightings lie in a rectangle or within 3 px of it."""
    x, y, width, height = lamp
    across = np.abs(sightings.x - (x + 0.5 * (width - 1))) < 0.5 * width + 3
    return np.asarray(across & (np.abs(sightings.y - (y + 0.5 * (height - 1))) < 0.5 * height + 3))


def _gather(
    rows: list[Columns], box: Rectangle, lamp: Rectangle | None
) -> tuple[Sightings, FloatArray, FloatArray, IntArray]:
    """All columns joined, in px of the whole picture, without the lamp; strain, score and number of the cut-out."""
    rows = [r for r in rows if r]
    joined: dict[str, Any] = {
        n: np.concatenate([r[n] for r in rows]) if rows else np.empty(0) for n in (*COLUMNS, "cutout")
    }
    joined["x"] = joined["x"] + box[0]
    joined["y"] = joined["y"] + box[1]
    strain, score = joined.pop("strain").reshape(-1, 3), joined.pop("score")
    number = joined.pop("cutout").astype(np.int64)
    sightings = Sightings(**joined)
    if lamp is None:
        return sightings, strain, score, number
    outside = ~_within(sightings, lamp)
    return sightings.take(outside), strain[outside], score[outside], number[outside]
