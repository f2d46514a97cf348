"""The inspection page's server: on this machine only, one secret for each run, ended together with its work."""

from __future__ import annotations

import contextlib
import logging
import secrets
import socket
import threading
import webbrowser
from collections.abc import AsyncIterator, Callable
from importlib import resources
from pathlib import Path
from typing import TYPE_CHECKING

import uvicorn
from starlette.applications import Starlette
from starlette.exceptions import HTTPException
from starlette.requests import Request
from starlette.responses import JSONResponse, Response
from starlette.routing import Route

from physics.errors import FallriseError
from tracker.errors import DecisionError, ResultError, UsageError
from tracker.page.errors import RefusedError, status_of
from tracker.page.guard import BodyTooLargeError, Guard
from tracker.page.library import is_result, key_of
from tracker.page.routes import ROUTES, UPLOAD_PATH
from tracker.page.site import Site

if TYPE_CHECKING:
    from starlette.types import ASGIApp

HOST = "127.0.0.1"
RESULTS_NAME = "fallrise_results"
_KINDS = {".html": "text/html", ".css": "text/css", ".js": "text/javascript", ".svg": "image/svg+xml"}


def make_app(site: Site, *, token: str, port: int) -> ASGIApp:
    """Put the page together.

    Parameters
    ----------
    site : Site
        State of the server.
    token : str
        Secret that the browser must show.
    port : int
        The server's port.

    Returns
    -------
    app : ASGI application
        Behind the guard.
    """

    @contextlib.asynccontextmanager
    async def life(_: Starlette) -> AsyncIterator[None]:
        yield
        await site.close()

    app = Starlette(
        routes=[Route("/", _static("index.html")), *_static_routes(), *ROUTES],
        lifespan=life,
        exception_handlers={
            FallriseError: _refuse, OSError: _refuse, BodyTooLargeError: _too_large, HTTPException: _plain,
        },
    )  # fmt: skip
    app.state.site = site
    return Guard(app, token=token, port=port, upload_path=UPLOAD_PATH)


def _static_routes() -> list[Route]:
    """One address for each file of the page, known when the server starts: no path is made from a request."""
    files = resources.files("tracker.page") / "static"
    names = sorted(file.name for file in files.iterdir() if Path(file.name).suffix in _KINDS)
    return [Route(f"/static/{name}", _static(name)) for name in names]


def _static(name: str) -> Callable[[Request], Response]:
    content = (resources.files("tracker.page") / "static" / name).read_bytes()
    kind = _KINDS[Path(name).suffix]

    def give(_: Request) -> Response:
        return Response(content, media_type=f"{kind}; charset=utf-8" if kind != "image/svg+xml" else kind)

    return give


def _refuse(_: Request, error: Exception) -> Response:
    """What a person can do something about: a message and a status in the 400s, or 507 for a full disk."""
    facts = error.facts if isinstance(error, RefusedError) else {}
    # The page shows one result: a refused decision need not name its folder.
    text = error.problem if isinstance(error, DecisionError) else str(error)
    message = " ".join(text.split()) or type(error).__name__
    return JSONResponse({"message": message, **facts}, status_of(error))


def _too_large(_: Request, _error: Exception) -> Response:
    return JSONResponse({"message": "the request is too large"}, 413, {"connection": "close"})


def _plain(_: Request, error: Exception) -> Response:
    status = error.status_code if isinstance(error, HTTPException) else 404
    text = {404: "there is nothing at this address", 405: "this cannot be done at this address"}
    return JSONResponse({"message": text.get(status, "this request cannot be served")}, status)


def serve(
    target: Path | str | None,
    *,
    port: int = 0,
    open_browser: bool = True,
    results: Path | str | None = None,
    say: Callable[[str], object] = print,
) -> None:
    """Serve the inspection page until it is stopped.

    Parameters
    ----------
    target : Path, str or None
        A result folder, a folder above results (such as that of a batch), or nothing.
    port : int, optional
        0 for any free one.
    open_browser : bool, optional
        Whether the address is opened; it is printed in any case.
    results : Path or str, optional
        Folder for new results; the batch folder, or ``fallrise_results`` in the current folder, if not given.
    say : callable, optional
        Gets the lines for the terminal.

    Raises
    ------
    ResultError
        If the target is not there, or the folder for results cannot be written.
    UsageError
        If the port is taken.
    """
    site = _site(target, results)
    with contextlib.closing(listen(port)) as listener:
        number = int(listener.getsockname()[1])
        token = secrets.token_urlsafe(24)
        address = f"http://{HOST}:{number}/?token={token}{_view(site.library.target)}"
        say(f"fallrise inspect: {address}")
        say(f"new results go to {site.library.results}; stop with Ctrl+C")
        if open_browser:
            threading.Thread(target=webbrowser.open, args=(address,), daemon=True).start()
        threading.Thread(target=_warm_up, daemon=True).start()
        uvicorn.Server(server_config(make_app(site, token=token, port=number))).run([listener])


def _view(target: Path | None) -> str:
    """The part of the address that opens the target at once, if it is a single result."""
    return f"#/{key_of(target)}" if target is not None and is_result(target) else ""


def server_config(app: ASGIApp) -> uvicorn.Config:
    """Give uvicorn's settings: quiet, no websockets, limits on what one request may hold.

    Parameters
    ----------
    app : ASGI application
        As `make_app` gives it.

    Returns
    -------
    config : uvicorn.Config
    """
    return uvicorn.Config(
        app,
        log_level=logging.CRITICAL,
        access_log=False,
        server_header=False,
        ws="none",
        lifespan="on",
        timeout_graceful_shutdown=2,
        limit_concurrency=200,
        h11_max_incomplete_event_size=64 * 1024,
    )


def _warm_up() -> None:
    """Import in the background what the first decision needs, so that it does not wait for it."""
    with contextlib.suppress(ImportError):
        import tracker.evaluate
        import tracker.page.detail  # noqa: F401


def _site(target: Path | str | None, results: Path | str | None) -> Site:
    place = None if target is None else Path(target).absolute()
    if place is not None and not place.is_dir():
        raise ResultError(str(place), "no such folder; give a result, a batch folder, or nothing")
    whole_batch = place is not None and not is_result(place)
    default = place if whole_batch and place is not None else Path.cwd() / RESULTS_NAME
    chosen = default if results is None else Path(results).absolute()
    if chosen.exists() and not chosen.is_dir():
        raise ResultError(str(chosen), "is a file; name a folder with --results")
    return Site.make(place, chosen)


def listen(port: int) -> socket.socket:
    """Open the listening socket, on the loopback address only.

    Parameters
    ----------
    port : int
        0 for any free one.

    Returns
    -------
    listener : socket

    Raises
    ------
    UsageError
        If the port is taken.
    """
    listener = socket.socket(socket.AF_INET, socket.SOCK_STREAM)
    try:
        listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        listener.bind((HOST, port))
        listener.listen(128)
    except (OSError, OverflowError) as error:
        listener.close()
        raise UsageError(f"--port {port}: cannot be used ({error}); leave it out for any free one") from error
    return listener
