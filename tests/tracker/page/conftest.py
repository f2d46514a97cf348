"""One small measured recording for all tests of a worker; each test that changes it gets a copy."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path

import pytest
from httpx import Client
from page_server import Page, measured_recording

from tracker.page.site import Site


@pytest.fixture(scope="session")
def measured(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Folder of a recording that was measured once, with its result beside it."""
    return measured_recording(tmp_path_factory.mktemp("measured") / "bench A").parent


@pytest.fixture
def place(measured: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Copy of that folder for one test, with a cache of its own."""
    monkeypatch.setenv("FALLRISE_CACHE", str(tmp_path / "cache"))
    return Path(shutil.copytree(measured, tmp_path / "term" / "bench A"))


@pytest.fixture
def site(place: Path, tmp_path: Path) -> Site:
    """State of a server that shows that folder."""
    return Site.make(place, tmp_path / "results", upload_limit=5_000_000)


@pytest.fixture
def running(site: Site) -> Iterator[Page]:
    """The app on a port of its own."""
    with Page(site) as made:
        yield made


@pytest.fixture
def page(running: Page) -> Iterator[Client]:
    """Signed-in client of the running app."""
    with running.client() as made:
        yield made


@pytest.fixture
def stranger(running: Page) -> Iterator[Client]:
    """Client without the cookie."""
    with running.client(signed_in=False) as made:
        yield made


@pytest.fixture
def key(page: Client) -> str:
    """Key of the only result on the shelf."""
    return str(page.get("/api/shelf").json()["items"][0]["id"])
