"""Addresses of the page: what each takes, does and gives. Work with files runs in threads, long work in jobs."""

from __future__ import annotations

import functools
import json
import time
from collections.abc import AsyncIterator, Callable
from pathlib import Path
from typing import Any
from urllib.parse import unquote

from starlette.concurrency import run_in_threadpool
from starlette.requests import ClientDisconnect, Request
from starlette.responses import FileResponse, JSONResponse, Response
from starlette.routing import BaseRoute, Route

from tracker.page import exports
from tracker.page.detail import droplet_detail, droplet_fits
from tracker.page.editing import decide, undo
from tracker.page.errors import RefusedError
from tracker.page.jobs import Job, Jobs
from tracker.page.library import key_of
from tracker.page.measuring import Order, finish_order, measure_again, place_order, read_order
from tracker.page.pictures import small_picture
from tracker.page.results import Opened, positions, shown
from tracker.page.site import Site

FOREVER = {"cache-control": "private, max-age=31536000, immutable"}
UPLOAD_PATH = "/api/uploads"
MAX_VIDEO = 20_000  # frames


def site_of(request: Request) -> Site:
    """State of the server that answers."""
    site: Site = request.app.state.site
    return site


async def body_of(request: Request) -> dict[str, Any]:
    """Read a JSON object; anything else is refused with 400 or 415."""
    if request.headers.get("content-type", "").split(";")[0].strip() != "application/json":
        raise RefusedError(415, "the request must be JSON")
    try:
        read = json.loads(await request.body())
    except (ValueError, RecursionError) as error:
        raise RefusedError(400, "the request is not JSON") from error
    if not isinstance(read, dict):
        raise RefusedError(400, "the request must be a JSON object")
    return read


def whole_number(text: Any, name: str) -> int:
    """Read a whole number from 0; refuses with 400."""
    if isinstance(text, int) and not isinstance(text, bool) and text >= 0:
        return text
    if isinstance(text, str) and text.isascii() and text.isdigit() and len(text) < 12:
        return int(text)
    raise RefusedError(400, f"{name} must be a whole number from 0")


async def opened_of(request: Request) -> Opened:
    """Give the result that an address names, as its files are now."""
    return await run_in_threadpool(site_of(request).results.open, request.path_params["key"])


async def shelf(request: Request) -> Response:
    """List recordings, jobs, and what the page says in words."""
    from tracker.motion.verdict import REASONS
    from tracker.showing.report import CAUTIONS

    site = site_of(request)
    items = await run_in_threadpool(site.library.shown)
    jobs = _with_work(items, site.jobs)
    return JSONResponse({
        "place": str(site.library.target or site.library.results), "results": str(site.library.results),
        "items": items, "jobs": jobs, "limit": site.uploads.limit, "cautions": CAUTIONS,
        "reasons": {code: reason.sentence for code, reason in REASONS.items()},
    })  # fmt: skip


def _with_work(items: list[dict[str, Any]], jobs: Jobs) -> list[dict[str, Any]]:
    """Give the jobs; mark recordings that are being measured, and ended jobs whose recording has no result yet."""
    without = {item["id"]: item for item in items if item["status"] == "open"}
    told = []
    for job in reversed(jobs.all()):
        said = job.shown()
        key = key_of(Path(job.task["recording"])) if job.kind == "measure" else ""
        item = without.pop(key, None)  # the latest job of a recording counts
        if item is not None and job.over:
            said["again"] = key
        elif item is not None:
            item |= {"status": "measuring", "progress": round(job.progress, 4),
                             "why": "waits" if job.state == "waiting" else "being measured"}  # fmt: skip
        told.append(said)
    return told


async def result(request: Request) -> Response:
    """Give one result."""
    opened = await opened_of(request)
    return JSONResponse(await run_in_threadpool(shown, opened))


async def revision(request: Request) -> Response:
    """Say whether a result changed."""
    from tracker.page.library import revision_of

    folder = site_of(request).library.folder(request.path_params["key"])
    return JSONResponse({"revision": await run_in_threadpool(revision_of, folder)})


async def tracks(request: Request) -> Response:
    """Give all positions of a result."""
    opened = await opened_of(request)
    data = await run_in_threadpool(positions, opened.result)
    return Response(data, media_type="application/octet-stream")


async def droplet(request: Request) -> Response:
    """Give what is drawn of one droplet over time."""
    return await _of_droplet(request, droplet_detail)


async def fits(request: Request) -> Response:
    """Give residuals and charge numbers of one droplet."""
    return await _of_droplet(request, droplet_fits)


async def _of_droplet(request: Request, give: Callable[[Opened, int], dict[str, Any]]) -> Response:
    opened = await opened_of(request)
    asked = request.query_params.get("revision")
    if asked is not None and asked != opened.revision:
        raise RefusedError(409, "this result was changed elsewhere since this page read it")
    number = whole_number(request.path_params["droplet"], "droplet")
    return JSONResponse(await run_in_threadpool(give, opened, number))


async def pack(request: Request) -> Response:
    """Prepare the pictures of a recording, and say how far they are."""
    return JSONResponse(site_of(request).pictures.state(await opened_of(request)))


async def frame(request: Request) -> Response:
    """Give one picture; its address holds the recording's hash, so a browser may keep it."""
    number = whole_number(request.path_params["frame"], "frame")
    variant = request.path_params["variant"]
    if variant not in ("half", "full", "half-clear", "full-clear"):
        raise RefusedError(404, "there is no such kind of picture")
    held = site_of(request).pictures.pack(request.path_params["hash"])
    half, clear = variant.startswith("half"), variant.endswith("clear")
    read = functools.partial(held.jpeg, number, half=half, clear=clear)
    # A plain read takes some 20 us; only the removal of the background is worth a thread.
    data = await run_in_threadpool(read) if clear else read()
    return Response(data, media_type="image/jpeg", headers=FOREVER)


async def small(request: Request) -> Response:
    """Give the picture for the list."""
    from tracker.export import find_recording

    site = site_of(request)
    opened = await opened_of(request)
    async with site.small_pictures:
        rate = (opened.recording.get("bench") or {}).get("frame_rate_hz")
        path = find_recording(opened.result)
        data = await run_in_threadpool(small_picture, path, opened.hash, frame_rate=rate)
    return Response(data, media_type="image/jpeg", headers={"cache-control": "private, max-age=3600"})


async def decision(request: Request) -> Response:
    """Keep a person's decision and evaluate again."""
    return await _edit(request, decide)


async def undoing(request: Request) -> Response:
    """Take the last decision back and evaluate again."""
    return await _edit(request, undo)


async def _edit(request: Request, change: Callable[..., tuple[Opened, int | None]]) -> Response:
    body = await body_of(request)
    began = time.perf_counter()
    results = site_of(request).results
    opened, chosen = await run_in_threadpool(change, results, request.path_params["key"], body)
    values = await run_in_threadpool(shown, opened)
    return JSONResponse({"result": values, "droplet": chosen, "seconds": time.perf_counter() - began})


async def take_upload(request: Request) -> Response:
    """Stream a file to the disk."""
    site = site_of(request)
    name = unquote(request.headers.get("x-name", ""))[:300]
    announced = request.headers.get("content-length", "0")
    length = int(announced) if announced.isascii() and announced.isdigit() else 0
    try:
        held = await site.uploads.take(name, kind=request.headers.get("x-kind", ""), announced=length,
                                       body=_chunks(request))  # fmt: skip
    except ClientDisconnect:
        return JSONResponse({"message": "the upload broke off"}, 400)
    return JSONResponse({"number": held.number, "name": held.name, "size": held.size})


async def _chunks(request: Request) -> AsyncIterator[bytes]:
    async for chunk in request.stream():
        yield chunk


async def drop_upload(request: Request) -> Response:
    """Forget a file that was sent."""
    site = site_of(request)
    number = request.path_params["number"]
    placed = site.uploads.path_of(number)
    if placed is not None and any(job.task["recording"] == str(placed) and not job.over
                                  for job in site.jobs.all() if job.kind == "measure"):  # fmt: skip
        raise RefusedError(409, "this recording is being measured; cancel the measurement first")
    await run_in_threadpool(site.uploads.remove, number)
    return JSONResponse({})


async def measure(request: Request) -> Response:
    """Start a measurement of files that were sent."""
    site = site_of(request)
    body = await body_of(request)
    order = await run_in_threadpool(read_order, body, site.uploads)
    job = await run_in_threadpool(place_order, order, site.library.results)
    return await _start_measuring(site, job, order)


async def measure_open(request: Request) -> Response:
    """Start the measurement of a recording of the shelf that has no result, such as one that was cancelled."""
    site = site_of(request)
    recording = await run_in_threadpool(site.library.recording, request.path_params["key"])
    return await _start_measuring(site, measure_again(recording, site.jobs), None)


async def _start_measuring(site: Site, job: Job, order: Order | None) -> Response:
    """Start a job and keep the shelf up to date; one that measures again ends as the one before would have."""

    def finish(ended: Job) -> None:
        finish_order(order, site.uploads, ended)
        site.library.entries(fresh=True)

    job.finish = job.finish or finish
    started = site.jobs.start(job)
    await run_in_threadpool(functools.partial(site.library.entries, fresh=True))
    return JSONResponse(started.shown())


async def jobs(request: Request) -> Response:
    """List all jobs."""
    return JSONResponse([job.shown() for job in reversed(site_of(request).jobs.all())])


def _job(request: Request) -> Job:
    return site_of(request).jobs.get(whole_number(request.path_params["number"], "job"))


async def job(request: Request) -> Response:
    """Give one job."""
    return JSONResponse(_job(request).shown())


async def cancel(request: Request) -> Response:
    """Cancel one job."""
    return JSONResponse(site_of(request).jobs.cancel(_job(request).number).shown())


async def export_frame(request: Request) -> Response:
    """Give a frame with its tracks as PNG."""
    opened = await opened_of(request)
    number = whole_number(request.path_params["frame"], "frame")
    png = await run_in_threadpool(exports.frame_png, opened, number)
    return _attachment(png, f"{_stem(opened)}_frame_{number}.png", "image/png")


async def export_tables(request: Request) -> Response:
    """Give all tables of a result."""
    opened = await opened_of(request)
    data = await run_in_threadpool(exports.tables_zip, opened.folder)
    return _attachment(data, f"{_stem(opened)}_tables.zip", "application/zip")


async def export_report(request: Request) -> Response:
    """Give the short report of a result."""
    opened = await opened_of(request)
    text = await run_in_threadpool(exports.report_html, opened)
    return _attachment(text.encode(), f"{_stem(opened)}_report.html", "text/html; charset=utf-8")


async def export_video(request: Request) -> Response:
    """Start the drawing of a video."""
    body = await body_of(request)
    opened = await opened_of(request)
    first = whole_number(body.get("first"), "the first frame")
    last = whole_number(body.get("last"), "the last frame")
    count = len(opened.recording.get("frame_times_s", ()))
    if not first <= last < count:
        raise RefusedError(422, f"the recording has frames 0 to {count - 1}; first must not be after last")
    if last - first >= MAX_VIDEO:
        raise RefusedError(422, f"a video holds at most {MAX_VIDEO} frames; ask for fewer")
    site = site_of(request)
    out = site.scratch() / f"{_stem(opened)}_{first}_{last}_{time.time_ns()}.mp4"
    task = {"result": str(opened.folder), "first": first, "last": last, "out": str(out)}
    return JSONResponse(site.jobs.start(Job(0, "video", f"video of {opened.name}", task)).shown())


async def job_file(request: Request) -> Response:
    """Give the video that a job made."""
    done = _job(request)
    path = Path(str(done.task.get("out", "")))
    if done.kind != "video" or done.state != "done" or not path.is_file():
        raise RefusedError(404, "this job has no file to give")
    name = path.name.rsplit("_", 1)[0] + ".mp4"
    return FileResponse(path, media_type="video/mp4", filename=name)


def _stem(opened: Opened) -> str:
    """Name for a file to be saved, harmless on any system."""
    return "".join(c if c.isascii() and (c.isalnum() or c in "-_") else "_" for c in opened.name)[-80:]


def _attachment(data: bytes, name: str, kind: str) -> Response:
    return Response(data, media_type=kind, headers={"content-disposition": f'attachment; filename="{name}"'})


_ONE = "/api/results/{key}"
ROUTES: list[BaseRoute] = [
    Route("/api/shelf", shelf),
    Route(_ONE, result),
    Route(_ONE + "/revision", revision),
    Route(_ONE + "/tracks", tracks),
    Route(_ONE + "/droplets/{droplet}", droplet),
    Route(_ONE + "/droplets/{droplet}/fits", fits),
    Route(_ONE + "/pack", pack, methods=["POST"]),
    Route(_ONE + "/frames/{hash}/{variant}/{frame}.jpg", frame),
    Route(_ONE + "/small.jpg", small),
    Route(_ONE + "/decide", decision, methods=["POST"]),
    Route(_ONE + "/undo", undoing, methods=["POST"]),
    Route(_ONE + "/export/frame/{frame}.png", export_frame),
    Route(_ONE + "/export/tables.zip", export_tables),
    Route(_ONE + "/export/report.html", export_report),
    Route(_ONE + "/export/video", export_video, methods=["POST"]),
    Route(UPLOAD_PATH, take_upload, methods=["POST"]),
    Route(UPLOAD_PATH + "/{number}", drop_upload, methods=["DELETE"]),
    Route("/api/measure", measure, methods=["POST"]),
    Route("/api/recordings/{key}/measure", measure_open, methods=["POST"]),
    Route("/api/jobs", jobs),
    Route("/api/jobs/{number}", job),
    Route("/api/jobs/{number}/cancel", cancel, methods=["POST"]),
    Route("/api/jobs/{number}/file", job_file),
]
