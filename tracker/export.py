"""Overlay of a result as pictures and video: reads the recording again and draws the stored tracks over it."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tracker.errors import RecordingError, ResultError, UsageError
from tracker.keeping.store import Result, file_hash, read_result, replace_file
from tracker.seeing.frames import open_recording
from tracker.showing.overlay import TrackIndex, draw_overlay, frame_caption, grey8

_TIME_BASE = Fraction(1, 90_000)  # s; the tick that MP4 and MPEG streams use


def write_overlay(
    folder: Path | str,
    *,
    frames: str | None = None,
    out: Path | None = None,
    recording: Path | None = None,
    progress: Callable[[float, float], None] | None = None,
) -> Path:
    """Draw the tracks of a result over its recording.

    Parameters
    ----------
    folder : Path or str
        Result folder.
    frames : str, optional
        ``"A:B"``, first and one past the last frame, or one frame; all if not given.
    out : Path, optional
        ``.png`` for one frame, ``.mp4``, ``.mkv`` or ``.avi`` for a video, else a folder for a PNG of each frame;
        ``overlay.mp4`` in the result folder if not given.
    recording : Path, optional
        The video, if it was moved.
    progress : callable, optional
        Takes (done, total) in frames.

    Returns
    -------
    out : Path
        What was written.

    Raises
    ------
    ResultError, RecordingError, UsageError
        If the result or the recording cannot be read, or the frames are none of it.
    """
    result = read_result(folder)
    count = int(result.recording["frames"]["count"])
    first, last = _frame_range(frames, count)
    out = Path(folder) / "overlay.mp4" if out is None else Path(out)
    if out.suffix == ".png" and last - first > 1 and frames is not None:
        raise UsageError(f"--frames {frames}: a .png holds one frame; give one frame, a folder or .mp4")
    if out.suffix == ".png":
        last = first + 1
    drawn = drawn_frames(result, first, last, recording=recording, progress=progress)
    if out.suffix == ".png":
        replace_file(out, lambda part: _write_png(part, next(drawn)[1]))
    elif out.suffix.lower() in (".mp4", ".mkv", ".avi", ".mov"):
        replace_file(out, lambda part: _write_video(part, drawn))
    elif out.suffix == "":
        out.mkdir(parents=True, exist_ok=True)
        for number, (_, picture) in enumerate(drawn, start=first):
            _write_png(out / f"frame_{number:06d}.png", picture)
    else:
        raise UsageError(f"--out {out}: must end in .png, .mp4, .mkv, .mov or .avi, or name a folder")
    return out


def find_recording(result: Result, recording: Path | None = None) -> Path:
    """Give the path of the recording that a result was measured from.

    Parameters
    ----------
    result : Result
        Read from its folder.
    recording : Path, optional
        Where it is now, if it was moved.

    Returns
    -------
    path : Path
        An existing file or folder.

    Raises
    ------
    RecordingError
        If it is not there, or is another one.
    """
    if recording is None:
        folder = result.folder or Path()
        stored = str(result.recording.get("path", ""))
        candidates = [folder / stored, folder.parent / str(result.recording.get("file", ""))]
        recording = next((path for path in candidates if path.exists()), candidates[0])
    if not recording.exists():
        raise RecordingError(
            str(recording), "the recording of this result is not there; name it with --recording"
        )
    if recording.is_file() and file_hash(recording) != result.recording.get("sha256"):
        raise RecordingError(str(recording), "is not the recording that this result was measured from")
    return recording


def drawn_frames(
    result: Result,
    first: int,
    last: int,
    *,
    recording: Path | None = None,
    progress: Callable[[float, float], None] | None = None,
) -> Iterator[tuple[float, NDArray[np.uint8]]]:
    """Draw frames of a recording, one after the other.

    Parameters
    ----------
    result : Result
        Tracks and verdicts.
    first, last : int
        First and one past the last frame.
    recording : Path, optional
        Where the video is now, if it was moved.
    progress : callable, optional
        Takes (done, total) in frames.

    Yields
    ------
    time, picture : float, ndarray of shape (rows, columns, 3)
        Presentation time in s and the drawn picture, BGR.
    """
    index = TrackIndex(result.tracks, result.droplets)
    camera = result.recording.get("bench", {}).get("frame_rate_hz")
    low, high = result.recording.get("seeing", {}).get("grey_range") or (None, None)
    with open_recording(find_recording(result, recording), frame_rate=camera) as reader:
        for batch in reader:
            for number, (time, picture) in enumerate(
                zip(batch.times, batch.pictures, strict=True), batch.first_index
            ):
                if number >= last:
                    return
                if number >= first:
                    grey = grey8(picture) if picture.dtype == np.uint8 else grey8(picture, low=low, high=high)
                    caption = frame_caption(result.recording, number)
                    yield float(time), draw_overlay(grey, index.marks(number), caption=caption)
                    if progress is not None:
                        progress(number + 1 - first, last - first)


def _frame_range(text: str | None, count: int) -> tuple[int, int]:
    if text is None:
        return 0, count
    try:
        parts = [int(part) if part else None for part in text.split(":")]
    except ValueError:
        raise UsageError(f"--frames {text}: must be A:B or one frame number") from None
    if len(parts) > 2 or parts[0] is None:
        raise UsageError(f"--frames {text}: must be A:B or one frame number")
    first = parts[0]
    last = first + 1 if len(parts) == 1 else count if parts[1] is None else parts[1]
    if not 0 <= first < last <= count:
        problem = "B must be above A" if first >= last else f"the recording has frames 0 to {count - 1}"
        raise UsageError(f"--frames {text}: {problem}")
    return first, last


def _write_png(path: Path, picture: NDArray[np.uint8]) -> None:
    import cv2

    coded, data = cv2.imencode(".png", picture)
    if not coded:
        raise ResultError(str(path), "the picture cannot be coded as PNG")
    path.write_bytes(data.tobytes())


def _write_video(path: Path, drawn: Iterator[tuple[float, NDArray[np.uint8]]]) -> None:
    """Code drawn frames at their own presentation times."""
    import av

    with av.open(str(path), "w") as container:
        stream: Any = None
        start = 0.0
        for time, picture in drawn:
            rows, columns = (n - n % 2 for n in picture.shape[:2])  # 4:2:0 needs even sides
            if stream is None:
                stream = container.add_stream("libx264", rate=25, options={"crf": "18", "preset": "veryfast"})
                stream.width, stream.height, stream.pix_fmt = columns, rows, "yuv420p"
                stream.codec_context.time_base = _TIME_BASE
                start = time
            frame = av.VideoFrame.from_ndarray(np.ascontiguousarray(picture[:rows, :columns]), format="bgr24")
            frame.pts, frame.time_base = round((time - start) / _TIME_BASE), _TIME_BASE
            container.mux(stream.encode(frame))
        if stream is not None:
            container.mux(stream.encode())
