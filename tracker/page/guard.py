"""The gate before every answer: this machine, this address, this page, and whoever holds the token."""

from __future__ import annotations

import asyncio
import hmac
from collections.abc import Iterable
from urllib.parse import parse_qs

from starlette.responses import PlainTextResponse, RedirectResponse, Response
from starlette.types import ASGIApp, Message, Receive, Scope, Send

MAX_BODY = 256 * 1024  # bytes of a request that is no upload
PATIENCE = 1.0  # s that the rest of a refused body is read and dropped

POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' blob:; connect-src 'self'; "
    "base-uri 'none'; form-action 'none'; frame-ancestors 'none'"
)
HEADERS = (
    (b"content-security-policy", POLICY.encode()),
    (b"x-content-type-options", b"nosniff"),
    (b"referrer-policy", b"no-referrer"),
    (b"cross-origin-opener-policy", b"same-origin"),
    (b"cross-origin-resource-policy", b"same-origin"),
    (b"x-frame-options", b"DENY"),
)


class BodyTooLargeError(Exception):
    """A request body went past the limit while it was being read."""


class Guard:
    """ASGI middleware that answers only the page that this server opened itself.

    Parameters
    ----------
    app : ASGI application
        Sees only requests that passed.
    token : str
        Secret of this run; given once in the address, kept in a cookie.
    port : int
        The port that the server listens on; part of the cookie's name, as cookies ignore ports.
    upload_path : str
        The one path whose bodies may be large; the route there counts the bytes itself.

    Notes
    -----
    A name that resolves to 127.0.0.1 is refused by the Host check, a page of another program on this machine
    by Origin and Sec-Fetch-Site: a SameSite cookie alone does not stop it, as ports share a site.
    """

    def __init__(self, app: ASGIApp, *, token: str, port: int, upload_path: str) -> None:
        self._app, self._token, self._upload_path = app, token, upload_path
        self._hosts = (f"127.0.0.1:{port}", f"localhost:{port}")
        self._cookie = f"fallrise-{port}"

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Answer, or let the request through."""
        if scope["type"] == "lifespan":
            await self._app(scope, receive, send)
            return
        if scope["type"] != "http":  # no websocket is offered
            await send({"type": "websocket.close", "code": 1008})
            return
        refusal = self._refusal(scope)
        if refusal is not None:
            if refusal.status_code == 413:
                await _drop_rest(receive)
            await refusal(scope, receive, _with_headers(send))
            return
        limit = None if scope["path"] == self._upload_path else MAX_BODY
        await self._app(scope, _limited(receive, limit), _with_headers(send))

    def _refusal(self, scope: Scope) -> Response | None:
        """Give the answer for a request that must not pass, or None."""
        headers = _Headers(scope["headers"])
        host = headers.only("host")
        if host not in self._hosts:
            return PlainTextResponse("this server answers only on its own address", 421)
        if headers.get("sec-fetch-site") not in ("", "same-origin", "none"):
            return PlainTextResponse("requests from other pages are refused", 403)
        if headers.get("origin") not in ("", f"http://{host}"):
            return PlainTextResponse("requests from other pages are refused", 403)
        if scope["path"] == "/" and scope["query_string"]:
            return self._sign_in(scope, headers)
        if not self._same_token(headers.cookie(self._cookie)):
            return PlainTextResponse("open the address that fallrise printed in the terminal", 401)
        if scope["path"] != self._upload_path and headers.length() > MAX_BODY:
            return PlainTextResponse(f"the request is larger than {MAX_BODY} bytes", 413)
        return None

    def _sign_in(self, scope: Scope, headers: _Headers) -> Response:
        """Change the token in the address for a cookie."""
        given = parse_qs(scope["query_string"].decode("latin-1")).get("token", [""])[0]
        if not self._same_token(given or headers.cookie(self._cookie)):
            return PlainTextResponse("this address is not the one that fallrise printed", 401)
        response = RedirectResponse("/", 303)
        response.set_cookie(self._cookie, self._token, httponly=True, samesite="strict", path="/")
        return response

    def _same_token(self, given: str) -> bool:
        """Compare in constant time; as bytes, since text outside ASCII is refused by compare_digest."""
        return hmac.compare_digest(given.encode("utf-8", "surrogateescape"), self._token.encode())


class _Headers:
    """Request headers by lower-case name."""

    def __init__(self, raw: Iterable[tuple[bytes, bytes]]) -> None:
        self._raw = [(name.decode("latin-1").lower(), value.decode("latin-1")) for name, value in raw]

    def only(self, name: str) -> str:
        """Value of a header that must stand there once; empty otherwise."""
        values = [value for key, value in self._raw if key == name]
        return values[0] if len(values) == 1 else ""

    def get(self, name: str) -> str:
        """All values of a header, joined: two different ones never equal an allowed one."""
        return ", ".join(value for key, value in self._raw if key == name)

    def cookie(self, name: str) -> str:
        """Value of one cookie; empty if there is none."""
        for part in self.get("cookie").replace(",", ";").split(";"):
            key, _, value = part.strip().partition("=")
            if key == name:
                return value
        return ""

    def length(self) -> int:
        """Announced length of the body; 0 if there is none or it is no number."""
        text = self.only("content-length")
        return int(text) if text.isascii() and text.isdigit() else 0


def _limited(receive: Receive, limit: int | None) -> Receive:
    """Count the body while it is read and stop past the limit, whatever length was announced."""
    if limit is None:
        return receive
    seen = 0

    async def counted() -> Message:
        nonlocal seen
        message = await receive()
        seen += len(message.get("body", b""))
        if seen > limit:
            if message.get("more_body"):
                await _drop_rest(receive)
            raise BodyTooLargeError
        return message

    return counted


async def _drop_rest(receive: Receive) -> None:
    """Read on for a while: an answer that meets a sender still sending is lost with the connection."""
    dropped = 0
    try:
        async with asyncio.timeout(PATIENCE):
            while dropped < 4 * MAX_BODY:
                message = await receive()
                dropped += len(message.get("body", b""))
                if not message.get("more_body"):
                    return
    except TimeoutError:
        return


def _with_headers(send: Send) -> Send:
    """Put the policy on every answer."""

    async def sending(message: Message) -> None:
        if message["type"] == "http.response.start":
            own = [(b"cache-control", b"no-store")]
            if any(name.lower() == b"cache-control" for name, _ in message["headers"]):
                own = []
            message = {**message, "headers": [*message["headers"], *HEADERS, *own]}
        await send(message)

    return sending
