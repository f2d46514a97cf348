"""Pictures of the recordings on the shelf: frame packs, opened or being written, and the small picture in the list."""

from __future__ import annotations

import contextlib
import os
from collections import OrderedDict
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from physics.errors import FallriseError
from tracker.export import find_recording
from tracker.page.errors import RefusedError
from tracker.page.jobs import Job, Jobs
from tracker.page.pack import Pack, cache_folder, make_room
from tracker.page.results import Opened

OPEN_PACKS = 6
SMALL = (224, 168)  # px, width and height of the picture in the list
BYTES_PER_PIXEL = 0.15  # of JPEGs of dark pictures with droplets, both sizes together, generously


@dataclass(slots=True)
class _Held:
    """A pack of one recording and the job that writes it."""

    pack: Pack | None = None
    job: Job | None = None
    message: str = ""


@dataclass(slots=True)
class Pictures:
    """All frame packs of one server."""

    jobs: Jobs
    _held: OrderedDict[str, _Held] = field(default_factory=OrderedDict)

    def state(self, opened: Opened) -> dict[str, Any]:
        """Say how many frames can be shown; starts the writing of a pack that is not there."""
        held = self._held.setdefault(opened.hash, _Held())
        self._held.move_to_end(opened.hash)
        if held.pack is None and held.job is None:
            self._begin(opened, held)
            self._forget()
        frames = len(held.pack.offsets) if held.pack is not None else 0
        if held.message:
            message, held.message = held.message, ""
            return {"state": "failed", "frames": frames, "message": message}
        return {"state": "ready" if held.job is None else "working", "frames": frames, "message": ""}

    def pack(self, short_hash: str) -> Pack:
        """Give the pack of a recording; refuses (404) one that was not opened."""
        held = self._held.get(short_hash)
        if held is None or held.pack is None:
            raise RefusedError(404, "the pictures of this recording are not ready")
        return held.pack

    def _begin(self, opened: Opened, held: _Held) -> None:
        """Open the pack in the cache, or start the job that writes it."""
        path = cache_folder() / f"{opened.hash}.frames"
        with contextlib.suppress(OSError, ValueError):
            held.pack = Pack.open(path)
            return
        try:
            recording = find_recording(opened.result)
            frames = opened.recording["frames"]
            wanted = frames["count"] * frames["width_px"] * frames["height_px"] * BYTES_PER_PIXEL
            make_room(path.parent, int(wanted))
        except (FallriseError, OSError) as error:
            held.message = " ".join(str(error).split())
            return
        task = {
            "recording": str(recording), "path": str(path), "sha256": str(opened.recording.get("sha256") or ""),
            "frame_rate": (opened.recording.get("bench") or {}).get("frame_rate_hz"), "frames": frames["count"],
        }  # fmt: skip
        job = Job(0, "pack", f"pictures of {opened.name}", task, key=str(path))
        job.hear = lambda said: self._grow(held, path, said)
        job.finish = lambda ended: self._finish(held, path, ended)
        try:
            held.job = self.jobs.start(job)
        except RefusedError as error:
            held.message = str(error)

    @staticmethod
    def _grow(held: _Held, path: Path, said: dict[str, Any]) -> None:
        """Take in frames of a pack that is being written."""
        if "frames" not in said:
            return
        with contextlib.suppress(OSError):
            if held.pack is None:
                held.pack = Pack(path.with_name(path.name + ".part").open("rb"))
            held.pack.add(said["frames"])

    @staticmethod
    def _finish(held: _Held, path: Path, job: Job) -> None:
        """Change the growing pack for the complete one."""
        growing, held.job = held.pack, None
        try:
            if job.state != "done":
                raise ValueError(job.error["message"] if job.error else "the work was stopped")
            held.pack = Pack.open(path)
        except (OSError, ValueError) as error:
            held.pack, held.message = None, str(error)
        if growing is not None:
            growing.close()

    def _forget(self) -> None:
        """Close the packs that were not looked at for longest."""
        for key in list(self._held)[:-OPEN_PACKS]:
            held = self._held[key]
            if held.job is None:
                if held.pack is not None:
                    held.pack.close()
                del self._held[key]

    def close(self) -> None:
        """Close all files."""
        for held in self._held.values():
            if held.pack is not None:
                held.pack.close()
        self._held.clear()


def small_picture(recording: Path, short_hash: str, *, frame_rate: float | None) -> bytes:
    """Make the picture for the list: the brightest of the first frames, so that droplets are short streaks.

    Parameters
    ----------
    recording : Path
        The video.
    short_hash : str
        Name of the cached picture.
    frame_rate : float or None
        For recordings without times.

    Returns
    -------
    jpeg : bytes
    """
    import cv2

    from tracker.seeing.frames import open_recording
    from tracker.showing.overlay import grey8

    path = cache_folder() / f"{short_hash}.small.jpg"
    with contextlib.suppress(OSError):
        return path.read_bytes()
    with open_recording(recording, frame_rate=frame_rate) as reader:
        batch = next(iter(reader), None)
        if batch is None:
            raise RefusedError(404, "the recording gives no frame")
        brightest = np.maximum.reduce([np.asarray(picture) for picture in batch.pictures])
    low, high = np.quantile(brightest[::2, ::2], [0.02, 0.9995])
    grey = grey8(brightest, low=float(low), high=float(max(high, low + 8)))
    scale = max(SMALL[0] / grey.shape[1], SMALL[1] / grey.shape[0])
    small = cv2.resize(grey, None, fx=scale, fy=scale, interpolation=cv2.INTER_AREA)
    top, left = (small.shape[0] - SMALL[1]) // 2, (small.shape[1] - SMALL[0]) // 2
    crop = small[max(0, top) : max(0, top) + SMALL[1], max(0, left) : max(0, left) + SMALL[0]]
    jpeg = cv2.imencode(".jpg", crop, [cv2.IMWRITE_JPEG_QUALITY, 80])[1].tobytes()
    with contextlib.suppress(OSError):
        path.parent.mkdir(parents=True, exist_ok=True)
        part = path.with_name(f"{path.name}.{os.getpid()}.part")
        part.write_bytes(jpeg)
        part.replace(path)
    return jpeg
