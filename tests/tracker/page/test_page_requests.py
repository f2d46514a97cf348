"""Requests of the page: what comes back, and that wrong ones get a clear status below 500."""

from __future__ import annotations

import errno
import io
import json
import os
import shutil
import zipfile
from http.client import HTTPConnection
from pathlib import Path

import cv2
import numpy as np
import pandas as pd
import pytest
from httpx import Client
from page_server import TOKEN, Page, wait_for

from tracker.evaluate import decide_and_evaluate
from tracker.keeping.store import read_result
from tracker.page.site import Site


def ready_pack(page: Client, key: str) -> dict[str, object]:
    """Have the pictures prepared."""
    state: dict[str, object] = wait_for(
        lambda: (said := page.post(f"/api/results/{key}/pack", json={}).json())["state"] != "working" and said
    )
    return state


def decide(page: Client, key: str, **decision: object) -> dict[str, object]:
    """Post a decision on the state that the page shows now."""
    revision = page.get(f"/api/results/{key}/revision").json()["revision"]
    answer = page.post(f"/api/results/{key}/decide", json={"revision": revision, **decision})
    assert answer.status_code == 200, answer.text
    return answer.json()


def test_shelf_lists_the_result_with_its_counts(page: Client, place: Path) -> None:
    """Counts on the shelf are those of droplets.csv."""
    table = pd.read_csv(place / "clip.fallrise" / "droplets.csv")
    item = page.get("/api/shelf").json()["items"][0]
    assert item["name"] == "clip"
    assert item["status"] == "done"
    assert item["droplets"] == len(table)
    assert [item[v] for v in ("keep", "doubt", "reject")] == [
        int((table["verdict"] == v).sum()) for v in ("keep", "doubt", "reject")
    ]


def test_result_gives_the_tables_as_they_are(page: Client, place: Path, key: str) -> None:
    """Radius, charge, number and its probability on the page are those of droplets.csv."""
    table = pd.read_csv(place / "clip.fallrise" / "droplets.csv")
    shown = page.get(f"/api/results/{key}").json()
    assert len(shown["droplets"]) == len(table) >= 4
    for row, (_, kept) in zip(shown["droplets"], table.iterrows(), strict=True):
        for name in ("radius_m", "charge_c", "charge_std_c", "charge_number", "charge_number_probability"):
            assert row[name] == (None if pd.isna(kept[name]) else pytest.approx(kept[name], rel=1e-15))
        assert row["verdict"] == kept["verdict"]
    assert len(shown["times"]) == 180
    assert [s["voltage"] for s in shown["segments"]] == [0, 260, 0, 260]


def test_positions_are_those_of_the_tracks(page: Client, place: Path, key: str) -> None:
    """The block of positions holds every row of tracks.csv, within the rounding of 32-bit floats."""
    block = page.get(f"/api/results/{key}/tracks").content
    table = pd.read_csv(place / "clip.fallrise" / "tracks.csv")
    count = int(np.frombuffer(block, "<u4", 1)[0])
    assert count == len(table)
    assert np.array_equal(np.frombuffer(block, "<i4", count, 4), table["droplet"])
    x = np.frombuffer(block, "<f4", count, 4 + 8 * count)
    # float32 has 24 bits: places below 512 px are exact to 2^-16 px.
    assert np.max(np.abs(x - table["x_px"])) < 2**-15
    assert np.array_equal(np.frombuffer(block, "u1", count, 4 + 16 * count), table["used"])


def test_detail_agrees_with_tables_and_its_own_model(page: Client, place: Path, key: str) -> None:
    """Fitted lines have the speeds of segments.csv; residuals are spread as standard normal values are."""
    rows = page.get(f"/api/results/{key}").json()["droplets"]
    kept = [row["droplet"] for row in rows if row["verdict"] == "keep"]
    segments = pd.read_csv(place / "clip.fallrise" / "segments.csv")
    residuals = []
    for number in kept:
        detail = page.get(f"/api/results/{key}/droplets/{number}").json()
        for fit in detail["fits"]:
            slope = (
                -(fit["to"] - fit["from"]) / (fit["end"] - fit["start"])
                if fit["end"] > fit["start"]
                else None
            )
            mine = segments[
                (segments["droplet"] == number) & (segments["start_s"] <= fit["start"] + 1e-9)
            ].iloc[-1]
            assert slope is None or slope == pytest.approx(mine["down_speed_m_s"] * 1e6, rel=1e-6)
        residuals += page.get(f"/api/results/{key}/droplets/{number}/fits").json()["residual"]
    # Standard deviation of n standard normal values: 1 within 4 of its own deviations, 1 / sqrt(2 n); the fit
    # takes a few degrees of freedom of each droplet, which stays inside.
    assert np.std(residuals) == pytest.approx(1, abs=4 / np.sqrt(2 * len(residuals)))


def test_numbers_agree_with_the_table(page: Client, key: str) -> None:
    """The most probable number and its probability in the plot are those of the table."""
    compared = 0
    for row in page.get(f"/api/results/{key}").json()["droplets"]:
        found = page.get(f"/api/results/{key}/droplets/{row['droplet']}/fits").json()["numbers"]
        if row["charge_number"] is None:
            assert found is None
            continue
        best = int(np.argmax(found["p"]))
        assert found["n"][best] == row["charge_number"]
        # The same analysis; the page rounds to 6 digits.
        assert found["p"][best] == pytest.approx(row["charge_number_probability"], abs=1e-6)
        assert sum(found["p"]) == pytest.approx(1, abs=5e-3)
        compared += 1
    assert compared >= 3


def test_pictures_are_those_of_the_recording(page: Client, place: Path, key: str) -> None:
    """A full picture differs from the decoded frame by no more than JPEG at quality 90 does; half ones by size."""
    from tracker.seeing.frames import open_recording

    assert ready_pack(page, key) == {"state": "ready", "frames": 180, "message": ""}
    pictures = f"/api/results/{key}/frames/{page.get(f'/api/results/{key}').json()['recording_hash']}"
    with open_recording(place / "clip.avi") as reader:
        decoded = {b.first_index + i: np.array(p) for b in reader for i, p in enumerate(b.pictures)}
    for frame in (0, 77, 179):
        answer = page.get(f"{pictures}/full/{frame}.jpg")
        shown = cv2.imdecode(np.frombuffer(answer.content, np.uint8), cv2.IMREAD_GRAYSCALE)
        # A quantiser of step q leaves q / sqrt(12); the coarsest of quality 90 is about 24 in luminance.
        assert np.sqrt(np.mean((shown.astype(float) - decoded[frame]) ** 2)) < 24 / np.sqrt(12) / 2
        assert "immutable" in answer.headers["cache-control"]
        half = cv2.imdecode(
            np.frombuffer(page.get(f"{pictures}/half/{frame}.jpg").content, np.uint8), cv2.IMREAD_GRAYSCALE
        )
        assert half.shape == (120, 160)
    clear = cv2.imdecode(
        np.frombuffer(page.get(f"{pictures}/full-clear/77.jpg").content, np.uint8), cv2.IMREAD_GRAYSCALE
    )
    # What stands still is gone: the gradient of 10 grey values across the picture with it.
    left, right = np.median(clear[:, :40]), np.median(clear[:, -40:])
    assert abs(float(right) - float(left)) <= 2
    assert page.get(f"{pictures}/full/180.jpg").status_code == 404
    assert page.get(f"{pictures}/full/-1.jpg").status_code == 400
    assert page.get(f"{pictures}/full/1e9.jpg").status_code == 400
    assert page.get(f"{pictures}/huge/1.jpg").status_code == 404


def test_rejecting_changes_table_file_and_charges(page: Client, place: Path, key: str) -> None:
    """A rejection with a reason is in decisions.jsonl, in the table and no longer in the charge unit."""
    before = page.get(f"/api/results/{key}").json()
    number = next(row["droplet"] for row in before["droplets"] if row["verdict"] == "keep")
    answer = decide(page, key, droplet=number, verdict="reject", reason="two droplets <b>cross</b>")
    row = next(row for row in answer["result"]["droplets"] if row["droplet"] == number)
    assert row["verdict"] == "reject"
    assert row["by_hand"]
    assert "two droplets <b>cross</b>" in row["decision"]
    line = json.loads((place / "clip.fallrise" / "decisions.jsonl").read_text().splitlines()[-1])
    assert (line["droplet"], line["verdict"], line["reason"]) == (
        number,
        "reject",
        "two droplets <b>cross</b>",
    )
    used = read_result(place / "clip.fallrise").recording["charge_unit"]["droplets_used"]
    kept = sum(row["verdict"] == "keep" and row["charge_c"] is not None for row in before["droplets"])
    assert used == kept - 1


def test_undo_gives_back_what_was_there(page: Client, place: Path, key: str) -> None:
    """After any decision and its undo the droplet table is the one from before."""
    folder = place / "clip.fallrise"
    rows = page.get(f"/api/results/{key}").json()["droplets"]
    number = max((row for row in rows if row["verdict"] == "keep"), key=lambda row: row["frames"])["droplet"]
    decide(page, key, droplet=number, verdict="keep", reason="a first evaluation, to compare with")
    before = (folder / "droplets.csv").read_bytes()
    for change in (
        {"verdict": "reject", "reason": "x"},
        {"verdict": "split", "at": 4.4, "reason": "x"},
        {"verdict": "trim", "start": 3.0, "reason": "x"},
    ):
        decide(page, key, droplet=number, **change)
        assert (folder / "droplets.csv").read_bytes() != before
        revision = page.get(f"/api/results/{key}/revision").json()["revision"]
        answer = page.post(f"/api/results/{key}/undo", json={"revision": revision})
        assert answer.status_code == 200
        assert answer.json()["droplet"] == number
        assert (folder / "droplets.csv").read_bytes() == before
    assert [entry["undone"] for entry in answer.json()["result"]["decisions"]] == [False, *[True, False] * 3]


def test_split_and_join_are_inverse(page: Client, key: str) -> None:
    """A split gives a droplet more, the join of its parts takes it away again; a trim leaves sightings out."""
    rows = page.get(f"/api/results/{key}").json()["droplets"]
    number = max(rows, key=lambda row: row["frames"])["droplet"]
    answer = decide(page, key, droplet=number, verdict="split", at=4.4, reason="x")["result"]
    assert len(answer["droplets"]) == len(rows) + 1
    other = ({row["droplet"] for row in answer["droplets"]} - {row["droplet"] for row in rows}).pop()
    answer = decide(page, key, droplet=number, verdict="join", other=other, reason="x")["result"]
    assert len(answer["droplets"]) == len(rows)
    decide(page, key, droplet=number, verdict="trim", start=2.0, end=6.0, reason="x")
    detail = page.get(f"/api/results/{key}/droplets/{number}").json()
    used = np.array(detail["time"])[np.array(detail["used"]) == 1]
    assert used.min() >= 2.0
    assert used.max() <= 6.0
    answer = decide(page, key, droplet=number, verdict="reset", reason="")["result"]
    assert not answer["can_undo"]


def test_stale_page_is_told_and_nothing_is_written(page: Client, place: Path, key: str) -> None:
    """A decision on an older state gets 409; the file of decisions stays as it was."""
    old = page.get(f"/api/results/{key}").json()["revision"]
    decide(page, key, droplet=0, verdict="doubt", reason="first window")
    kept = (place / "clip.fallrise" / "decisions.jsonl").read_bytes()
    late = {"revision": old, "droplet": 1, "verdict": "reject", "reason": "second window"}
    for path, body in (("decide", late), ("undo", {"revision": old})):
        answer = page.post(f"/api/results/{key}/{path}", json=body)
        assert answer.status_code == 409
        assert "nothing was overwritten" in answer.json()["message"]
    assert (place / "clip.fallrise" / "decisions.jsonl").read_bytes() == kept


def test_decision_from_the_command_line_makes_the_page_stale(page: Client, place: Path, key: str) -> None:
    """The revision covers what others write, not only this server."""
    old = page.get(f"/api/results/{key}").json()["revision"]
    decide_and_evaluate(place / "clip.fallrise", droplet=0, verdict="doubt", reason="elsewhere")
    assert page.get(f"/api/results/{key}/revision").json()["revision"] != old


WRONG_DECISIONS: list[tuple[dict[str, object], int]] = [
    ({"verdict": "explode"}, 400),
    ({"verdict": ["reject"]}, 400),
    ({"droplet": 999}, 422),
    ({"droplet": "0; drop"}, 400),
    ({"droplet": None}, 400),
    ({"droplet": True}, 400),
    ({"reason": ""}, 422),
    ({"reason": "x" * 5000}, 400),
    ({"reason": 7}, 400),
    ({"verdict": "split", "at": "soon"}, 400),
    ({"verdict": "split", "at": 1e300}, 400),
    ({"verdict": "split", "at": 1e6}, 422),
    ({"verdict": "trim"}, 422),
    ({"verdict": "join", "other": 0}, 422),
]


def test_wrong_decisions_are_refused(page: Client, key: str) -> None:
    """Each wrong value gets a message and its status, and nothing is kept."""
    revision = page.get(f"/api/results/{key}").json()["revision"]
    for change, status in WRONG_DECISIONS:
        body = {"revision": revision, "droplet": 0, "verdict": "reject", "reason": "x", **change}
        answer = page.post(f"/api/results/{key}/decide", json=body)
        assert answer.status_code == status, change
        assert answer.json()["message"]
        assert "clip.fallrise" not in answer.json()["message"]
    assert page.get(f"/api/results/{key}/revision").json()["revision"] == revision


def test_bad_json_is_a_bad_request(page: Client, key: str) -> None:
    """What is no JSON object gets 400."""
    headers = {"content-type": "application/json"}
    for body in (b"", b"{", b"[1]", b'"text"', b"\xff\xfe", b"nul", b"[" * 100_000):
        for path in (f"/api/results/{key}/decide", "/api/measure"):
            assert page.post(path, content=body, headers=headers).status_code == 400, body[:9]


def test_forms_of_other_pages_cannot_post(page: Client, key: str) -> None:
    """A body that a plain form can send, without a JSON type, gets 415."""
    answer = page.post(f"/api/results/{key}/decide", content=b"{}", headers={"content-type": "text/plain"})
    assert answer.status_code == 415


def test_paths_of_requests_reach_no_files(running: Page) -> None:
    """Addresses that try to leave the page get 404; the path goes out as it stands here."""
    paths = (
        "/api/results/..%2f..%2fetc", "/api/results/none", "/static/../server.py", "/static/%2e%2e/server.py",
        "/static/..%5cserver.py", "/../etc/passwd", "/api/jobs/99", "/static/", "/api/results/%00",
    )  # fmt: skip
    for path in paths:
        connection = HTTPConnection("127.0.0.1", running.port, timeout=30)
        connection.request("GET", path, headers={"cookie": f"fallrise-{running.port}={TOKEN}"})
        assert connection.getresponse().status == 404, path
        connection.close()


def test_vanished_files_are_told(page: Client, place: Path, key: str) -> None:
    """A recording, a table or a whole result that is gone gives a message below 500."""
    (place / "clip.avi").unlink()
    state = ready_pack(page, key)
    assert state["state"] == "failed"
    assert "not there" in str(state["message"])
    assert page.get(f"/api/results/{key}/small.jpg").status_code == 422
    assert page.get(f"/api/results/{key}/export/frame/3.png").status_code == 422
    assert page.get(f"/api/results/{key}").status_code == 200
    (place / "clip.fallrise" / "segments.csv").unlink()
    (place / "clip.fallrise" / "recording.json").write_text("{")
    assert page.get(f"/api/results/{key}").status_code == 422
    shutil.rmtree(place / "clip.fallrise")
    assert page.get(f"/api/results/{key}").status_code == 404
    assert page.get("/api/shelf").status_code == 200


def test_full_disk_is_told_and_keeps_what_was_there(
    page: Client, place: Path, key: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Without room for a decision the answer is 507 and the result is untouched."""
    revision = page.get(f"/api/results/{key}").json()["revision"]
    before = {path.name: path.read_bytes() for path in (place / "clip.fallrise").iterdir()}

    def full(_: int) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "fsync", full)
    body = {"revision": revision, "droplet": 0, "verdict": "reject", "reason": "x"}
    answer = page.post(f"/api/results/{key}/decide", json=body)
    assert answer.status_code == 507
    after = {
        p.name: p.read_bytes() for p in (place / "clip.fallrise").iterdir() if p.name != "decisions.jsonl"
    }
    assert after == {name: data for name, data in before.items() if name != "decisions.jsonl"}


def test_export_draws_with_the_command_s_function(page: Client, place: Path, key: str) -> None:
    """The exported frame equals what the overlay function draws over the recording's frame."""
    from tracker.export import drawn_frames

    png = page.get(f"/api/results/{key}/export/frame/30.png")
    shown = cv2.imdecode(np.frombuffer(png.content, np.uint8), cv2.IMREAD_COLOR)
    drawn = next(picture for _, picture in drawn_frames(read_result(place / "clip.fallrise"), 30, 31))
    assert np.array_equal(shown, drawn)
    assert page.get(f"/api/results/{key}/export/frame/180.png").status_code == 404


def test_export_gives_tables_report_and_video(page: Client, place: Path, key: str) -> None:
    """Tables come byte for byte, the report names the recording, the video has the asked number of frames."""
    import av

    archive = zipfile.ZipFile(io.BytesIO(page.get(f"/api/results/{key}/export/tables.zip").content))
    for name in ("droplets.csv", "tracks.csv", "segments.csv", "changes.csv", "recording.json"):
        assert archive.read(name) == (place / "clip.fallrise" / name).read_bytes()
    report = page.get(f"/api/results/{key}/export/report.html")
    assert report.headers["content-disposition"].startswith("attachment")
    assert "clip.avi" in report.text
    job = page.post(f"/api/results/{key}/export/video", json={"first": 10, "last": 29}).json()
    done = wait_for(
        lambda: (said := page.get(f"/api/jobs/{job['number']}").json())["state"] != "running" and said
    )
    assert done["state"] == "done", done
    film = page.get(f"/api/jobs/{job['number']}/file")
    with av.open(io.BytesIO(film.content)) as container:
        assert sum(1 for _ in container.decode(video=0)) == 20
    for wrong in (
        {"first": 5, "last": 4},
        {"first": 0, "last": 180},
        {"first": -1, "last": 4},
        {"first": "a"},
    ):
        assert 400 <= page.post(f"/api/results/{key}/export/video", json=wrong).status_code < 500


def test_site_removes_its_scratch_files(site: Site) -> None:
    """Videos that wait for being saved go with the server."""
    import asyncio

    folder = site.scratch()
    (folder / "film.mp4").write_bytes(b"x")
    asyncio.run(site.close())
    assert not folder.exists()
