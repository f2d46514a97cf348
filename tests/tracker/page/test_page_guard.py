"""The gate: who gets an answer, and what every answer carries."""

from __future__ import annotations

from httpx import Client
from page_server import TOKEN, Page

from tracker.page.guard import MAX_BODY


def test_missing_or_wrong_token_is_refused(running: Page, stranger: Client) -> None:
    """Without the token nothing is served, not even the page itself."""
    for path in ("/", "/static/main.js", "/api/shelf"):
        assert stranger.get(path).status_code == 401
    assert stranger.get("/?token=guess").status_code == 401
    stranger.cookies.set(f"fallrise-{running.port}", "guess")
    assert stranger.get("/api/shelf").status_code == 401


def test_token_outside_ascii_is_refused_and_not_an_error(running: Page, stranger: Client) -> None:
    """A cookie with bytes that no token has gives 401."""
    answer = stranger.get("/api/shelf", headers=[(b"cookie", b"fallrise-%d=\xe9\xff" % running.port)])
    assert answer.status_code == 401


def test_token_in_the_address_becomes_a_cookie(running: Page, stranger: Client) -> None:
    """The printed address signs in by a cookie that scripts cannot read and other sites do not send."""
    answer = stranger.get(f"/?token={TOKEN}")
    assert answer.status_code == 303
    assert answer.headers["location"] == "/"
    cookie = answer.headers["set-cookie"]
    assert "HttpOnly" in cookie
    assert "SameSite=strict" in cookie
    assert cookie.startswith(f"fallrise-{running.port}=")


def test_other_host_names_are_misdirected(running: Page, page: Client) -> None:
    """A name that someone let point to 127.0.0.1 is answered with 421."""
    for host in ("evil.example", f"evil.example:{running.port}", "127.0.0.1", "127.0.0.1:1"):
        assert page.get("/api/shelf", headers={"host": host}).status_code == 421, host


def test_pages_of_other_origins_are_refused(page: Client) -> None:
    """Reading and writing from another origin, also from another port of this machine, gives 403."""
    origins = ("http://evil.example", "null", "http://localhost:1", "http://127.0.0.1:1")
    sites = ("cross-site", "same-site")
    for headers in [{"origin": o} for o in origins] + [{"sec-fetch-site": s} for s in sites]:
        assert page.get("/api/shelf", headers=headers).status_code == 403, headers
        assert page.post("/api/measure", json={}, headers=headers).status_code == 403, headers


def test_own_origin_is_served(running: Page, page: Client) -> None:
    """The page's own requests pass."""
    headers = {"origin": f"http://127.0.0.1:{running.port}", "sec-fetch-site": "same-origin"}
    assert page.get("/api/shelf", headers=headers).status_code == 200


def test_every_answer_carries_the_policy(page: Client) -> None:
    """Strict content policy, no sniffing, no framing, and no permission for other origins."""
    for path in ("/", "/static/main.js", "/api/shelf", "/nothing", "/api/results/none"):
        headers = page.get(path, follow_redirects=False).headers
        policy = headers["content-security-policy"]
        assert "default-src 'none'" in policy
        assert "frame-ancestors 'none'" in policy
        assert "unsafe" not in policy
        assert headers["x-content-type-options"] == "nosniff"
        assert headers["cross-origin-resource-policy"] == "same-origin"
        assert not [name for name in headers if name.startswith("access-control-")]


def test_refusals_carry_the_policy_too(stranger: Client) -> None:
    """An answer to a stranger cannot be framed or read either."""
    assert "default-src 'none'" in stranger.get("/").headers["content-security-policy"]


def test_long_bodies_are_stopped_with_and_without_a_length(page: Client) -> None:
    """A body past the limit gives 413, announced or streamed in pieces."""
    json = {"content-type": "application/json"}
    body = b"[" + b" " * MAX_BODY + b"]"
    assert page.post("/api/measure", content=body, headers=json).status_code == 413
    pieces = (b" " * 65536 for _ in range(MAX_BODY // 65536 + 2))
    assert page.post("/api/measure", content=pieces, headers=json).status_code == 413


def test_websockets_are_not_offered(page: Client) -> None:
    """A request for a websocket is not taken up."""
    headers = {
        "connection": "Upgrade", "upgrade": "websocket", "sec-websocket-version": "13",
        "sec-websocket-key": "dGhlIHNhbXBsZSBub25jZQ==",
    }  # fmt: skip
    assert page.get("/api/shelf", headers=headers).status_code != 101


def test_page_asks_nobody_else(page: Client) -> None:
    """No file of the page names an address outside, apart from the name space of SVG."""
    names = [name for name in page.get("/").text.split('"') if name.startswith("/static/")]
    assert "/static/page.css" in names
    assert "/static/main.js" in names
    for name in (*names, "/static/dom.js", "/static/api.js", "/static/intake.js", "/static/stage.js"):
        text = page.get(name).text.replace("http://www.w3.org/2000/svg", "")
        assert "http:" not in text
        assert "https:" not in text
        assert "//cdn" not in text
