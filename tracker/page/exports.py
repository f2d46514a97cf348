"""What can be taken away from a result: a frame with its tracks, all tables, the short report."""

from __future__ import annotations

import io
import zipfile
from pathlib import Path

import numpy as np

from tracker.errors import RecordingError
from tracker.export import drawn_frames
from tracker.page.errors import RefusedError
from tracker.page.pack import Pack, cache_folder
from tracker.page.results import Opened
from tracker.showing.overlay import TrackIndex, draw_overlay, frame_caption

TAKEN = (".csv", ".parquet", ".json", ".jsonl")


def frame_png(opened: Opened, frame: int) -> bytes:
    """Draw one frame with its tracks, by the function that `fallrise overlay` draws with.

    Parameters
    ----------
    opened : Opened
        The result.
    frame : int
        From 0.

    Returns
    -------
    png : bytes

    Raises
    ------
    RefusedError
        404 if there is no such frame.
    """
    import cv2

    count = len(opened.recording.get("frame_times_s", ()))
    if frame >= count:
        raise RefusedError(404, f"there is no frame {frame}; the recording has frames 0 to {count - 1}")
    try:
        # The pack gives any frame at once; without it the recording is read up to the frame.
        pack = Pack.open(cache_folder() / f"{opened.hash}.frames")
    except (OSError, ValueError):
        drawn = next((picture for _, picture in drawn_frames(opened.result, frame, frame + 1)), None)
        if drawn is None:
            raise RecordingError(str(opened.recording.get("file")), f"gives no frame {frame}") from None
    else:
        grey = cv2.imdecode(np.frombuffer(pack.jpeg(frame), np.uint8), cv2.IMREAD_GRAYSCALE)
        pack.close()
        marks = TrackIndex(opened.result.tracks, opened.result.droplets).marks(frame)
        drawn = draw_overlay(
            np.asarray(grey, np.uint8), marks, caption=frame_caption(opened.recording, frame)
        )
    return cv2.imencode(".png", drawn)[1].tobytes()


def tables_zip(folder: Path) -> bytes:
    """Pack all tables, the provenance and the decisions of a result.

    Parameters
    ----------
    folder : Path
        Of the result.

    Returns
    -------
    archive : bytes
        A zip file.
    """
    held = io.BytesIO()
    with zipfile.ZipFile(held, "w", zipfile.ZIP_DEFLATED) as archive:
        for path in sorted(folder.iterdir()):
            if path.suffix in TAKEN and path.is_file() and not path.name.startswith("."):
                archive.write(path, path.name)
    return held.getvalue()


def report_html(opened: Opened) -> str:
    """Give the short report of one result.

    Parameters
    ----------
    opened : Opened
        The result.

    Returns
    -------
    html : str
        One file that needs nothing from elsewhere.
    """
    from tracker.showing.report import recording_page

    return recording_page(opened.result)
