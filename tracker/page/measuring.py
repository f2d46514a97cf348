"""From what was dropped on the page to a measurement: a folder for it, the bench file, the job, and clearing up."""

from __future__ import annotations

import contextlib
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from physics.errors import FallriseError
from tracker.benchfile import BENCH_NAME, own_file
from tracker.errors import BenchError
from tracker.keeping.store import result_folder
from tracker.page.benchform import Fault, check_pitch, companions, read_form
from tracker.page.errors import RefusedError
from tracker.page.jobs import Job, Jobs
from tracker.page.library import key_of
from tracker.page.uploads import Upload, Uploads

MAX_BENCH = 100_000  # characters of a bench file
PATTERNS = ("", "lines", "grid", "dots")
PICTURES_RATE = 'a rate such as "25 Hz", since pictures hold no times'
LOG_NAME, SCALE_NAME = "voltage.csv", "scale.json"


@dataclass(frozen=True, slots=True)
class Order:
    """What the page asks to be measured."""

    recording: Upload
    picture: Upload | None
    log: Upload | None
    text: str  # of the bench file
    own: str | None  # text of the recording's own file, which overrides keys of the bench
    scale: str | None  # text of a scale file
    log_name: str
    scale_name: str
    pitch: str
    pattern: str


def read_order(body: Mapping[str, Any], uploads: Uploads) -> Order:
    """Check what the page asks for.

    Parameters
    ----------
    body : mapping
        ``recording``, ``picture``, ``log``: numbers of uploads or None; ``bench``, ``own``, ``scale``: texts of
        a bench file, of the recording's own file and of a scale file, or None; ``values``: fields of the form.
    uploads : Uploads
        Files that were sent.

    Returns
    -------
    order : Order

    Raises
    ------
    RefusedError
        422 with all `faults`, each beside its field.
    """
    held = {
        role: uploads.get(str(body[role]), kind=role)
        for role in ("recording", "picture", "log")
        if body.get(role)
    }
    if "recording" not in held:
        raise RefusedError(422, "there is no recording yet; drop one")
    values = body.get("values") or {}
    if not isinstance(values, dict):
        raise RefusedError(400, "values must be an object")
    pattern = str(values.get("scale.pattern", ""))
    if pattern not in PATTERNS:
        raise RefusedError(400, "scale.pattern must be lines, grid or dots")
    names: dict[str, str] = {}
    faults: list[Fault] = []
    texts = {role: _text(body, role) for role in ("bench", "own", "scale")}
    text = texts["bench"]
    if text is None:
        with_scale = "picture" in held or texts["scale"] is not None
        text, faults = read_form(values, has_scale=with_scale, has_log="log" in held)
    for given in (texts["bench"], texts["own"]):
        found, wrong = _names(given)
        names |= found
        faults += wrong
    if "picture" in held:
        faults += check_pitch(str(values.get("scale.pitch", "")))
    if faults:
        raise RefusedError(422, "; ".join(fault["message"] for fault in faults), {"faults": faults})
    return Order(
        held["recording"],
        held.get("picture"),
        held.get("log"),
        text,
        texts["own"],
        texts["scale"],
        names.get("log", LOG_NAME),
        names.get("scale", SCALE_NAME),
        str(values.get("scale.pitch", "")),
        pattern,
    )


def _text(body: Mapping[str, Any], role: str) -> str | None:
    """Text of a small file in a request."""
    text = body.get(role)
    if text is not None and (not isinstance(text, str) or len(text) > MAX_BENCH):
        raise RefusedError(422, f"the {role} file must be a text of at most {MAX_BENCH} characters")
    return text


def _names(text: str | None) -> tuple[dict[str, str], list[Fault]]:
    """Files that a bench file names beside itself."""
    try:
        return ({} if text is None else companions(text)), []
    except ValueError as error:
        return {}, [Fault("", f"bench file: {error}")]


def place_order(order: Order, results: Path) -> Job:
    """Put the files of an order into a folder of their own and give the job that measures them.

    Parameters
    ----------
    order : Order
        Checked.
    results : Path
        Folder that the user chose.

    Returns
    -------
    job : Job
        Not started.

    Raises
    ------
    RefusedError
        422 if the bench file is wrong; no folder is made then, and the uploads are still held.
    """
    _check_bench(order, results)
    folder = _folder(order.recording, results)
    recording = order.recording.place(folder)
    _write_texts(order, recording)
    if order.log is not None:
        order.log.leaf = order.log_name
        order.log.place(folder)
    picture = order.picture.place(folder) if order.picture is not None else None
    out = result_folder(recording)
    reference = None if picture is None else {
        "picture": str(picture), "scale": str(folder / order.scale_name), "pitch": order.pitch,
        "pattern": order.pattern or None,
    }  # fmt: skip
    task = {"recording": str(recording), "out": str(out), "reference": reference}
    return _job(order.recording.name, task)


def _job(title: str, task: dict[str, Any]) -> Job:
    """Job of a measurement, one at a time for each result."""
    return Job(0, "measure", title, task, key=str(task["out"]))


def measure_again(recording: Path, jobs: Jobs) -> Job:
    """Give the job that measures a recording of the shelf that has no result.

    Parameters
    ----------
    recording : Path
        File or folder of pictures, with its bench file beside or above it.
    jobs : Jobs
        Of this server; what an earlier job of the same recording was told, such as its reference picture, holds.

    Returns
    -------
    job : Job
        Not started.
    """
    out = str(result_folder(recording))
    before = jobs.last(out)
    if before is None:
        return _job(recording.name, {"recording": str(recording), "out": out, "reference": None})
    job = _job(before.title, before.task)
    job.finish = before.finish
    return job


def _write_texts(order: Order, recording: Path) -> None:
    """Write the small files of an order beside its recording."""
    (recording.parent / BENCH_NAME).write_text(order.text, encoding="utf-8")
    if order.own is not None:
        own_file(recording).write_text(order.own, encoding="utf-8")
    if order.scale is not None:
        (recording.parent / order.scale_name).write_text(order.scale, encoding="utf-8")


def _folder(recording: Upload, results: Path) -> Path:
    """Folder of a recording: its own from a try before, or a new one with its name."""
    if recording.path is not None and recording.path.parent.parent == results:
        return recording.path.parent
    stem = Path(recording.leaf).stem
    for number in range(1, 10_000):
        folder = results / (stem if number == 1 else f"{stem}_{number}")
        with contextlib.suppress(FileExistsError):
            folder.mkdir(parents=True)
            return folder
    raise RefusedError(409, f"there are too many recordings called {stem} in {results}")


def _check_bench(order: Order, results: Path) -> None:
    """Read the bench as the measurement will; a scale that is still to be measured stands in as any scale."""
    from tracker.bench import load_bench

    results.mkdir(parents=True, exist_ok=True)
    try:
        with tempfile.TemporaryDirectory(prefix=".check_", dir=results) as scratch:
            recording, bench = Path(scratch) / order.recording.leaf, Path(scratch) / BENCH_NAME
            recording.touch()
            _write_texts(order, recording)
            if order.log is not None:
                (recording.parent / order.log_name).touch()
            if order.picture is not None:
                bench.write_text(_with_any_scale(order.text), encoding="utf-8")
            read = load_bench(bench, recording=recording)
            if order.recording.kind == "pictures" and read.frame_rate is None:
                raise BenchError(str(bench), "camera.frame_rate", "nothing", PICTURES_RATE)
    except BenchError as error:
        fault = Fault(error.key, f"read {error.found}; allowed: {error.allowed}")
        named = {"camera.scale": (order.scale, order.scale_name), "field.log": (order.log, order.log_name)}
        given, name = named.get(error.key, ("", ""))
        if given is None and name in error.found:
            fault = Fault("", f"the bench names the file {name}, which is not here yet: drop it too")
        raise RefusedError(422, fault["message"], {"faults": [fault]}) from error


def _with_any_scale(text: str) -> str:
    """The bench with a stated scale in the place of one that the reference picture will give."""
    lines = [line for line in text.splitlines() if not line.replace(" ", "").startswith("scale=")]
    for number, line in enumerate(lines):
        if line.strip() == "[camera]":
            return "\n".join([*lines[: number + 1], 'metres_per_pixel = "1 um"', *lines[number + 1 :]])
    return "\n".join([*lines, "[camera]", 'metres_per_pixel = "1 um"'])


def finish_order(order: Order | None, uploads: Uploads, job: Job) -> None:
    """Clear up when a measurement ended: done keeps all; failed and cancelled wait for another try.

    Parameters
    ----------
    order : Order or None
        That was measured; None for a recording that was not sent by the page.
    uploads : Uploads
        Where its files are held.
    job : Job
        That ended.
    """
    if job.state == "done":
        job.result = {"id": key_of(Path(job.task["out"]))}
    for held in () if order is None else (order.recording, order.picture, order.log):
        if held is not None and job.state == "done":
            uploads.release(held.number)
        elif held is not None:
            held.given_up = job.state == "cancelled"


def measure(*, recording: str, out: str, reference: dict[str, Any] | None, progress: Any) -> None:
    """Measure the scale, if there is a picture of a pattern, then the recording.

    Parameters
    ----------
    recording, out : str
        Paths of the recording and the result folder.
    reference : dict or None
        ``picture`` and ``scale``: paths of the reference picture and of the file that is made from it; ``pitch``
        and ``pattern`` of the reference pattern.
    progress : callable
        Makes a (done, total) callable for a text.
    """
    from tracker.measure import measure as measure_recording

    if reference is not None:
        progress("looking at the reference picture")(0, 1)
        _measure_scale(**reference)
    measure_recording(Path(recording), out=Path(out), progress=progress("measuring"))


def _measure_scale(*, picture: str, scale: str, pitch: str, pattern: str | None) -> None:
    from calibration.measure import measure_scale
    from calibration.scale import write_scale

    try:
        found, _ = measure_scale([picture], pitch_text=pitch, pattern=pattern)
    except FallriseError as error:
        raise BenchError(
            picture, "scale.pitch", str(error), "a sharp picture of the reference pattern"
        ) from error
    write_scale(found, scale)
