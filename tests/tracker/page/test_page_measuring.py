"""What is dropped on the page: uploads, bench form, measurements as jobs, and that nothing half made is left."""

from __future__ import annotations

import contextlib
import io
import json
import os
import signal
import socket
import tomllib
from pathlib import Path

import psutil
import pytest
from httpx import Client, RemoteProtocolError
from page_server import TOKEN, Page, Server, simulated_recording, wait_for

from tracker.bench import load_bench
from tracker.keeping.store import read_result
from tracker.page.benchform import check_pitch, companions, read_form
from tracker.page.errors import RefusedError
from tracker.page.picturefolders import read_index
from tracker.page.site import Site
from tracker.page.uploads import SPARE, clean_leaf

SAMPLES = Path(__file__).resolve().parents[3] / "sample_videos"
FORM = {
    "cell.plate_gap": "6.00(2) mm", "cell.voltage": "260.0(5) V", "oil.density": "886(1) kg/m^3",
    "air.temperature": "22.0(3) degC", "air.pressure": "1008(1) hPa", "air.relative_humidity": "45(5) percent",
    "camera.metres_per_pixel": "3.000(6) um", "camera.exposure": "25 ms", "site.gravity": "9.8100(2) m/s^2",
    "field.list": "0 s 0 V, 2 s 260 V, 4.4 s 0 V, 6.8 s 260 V",
}  # fmt: skip


def send(page: Client, path: Path, *, kind: str = "recording", name: str | None = None) -> str:
    """Upload a file as the page does; gives its number."""
    headers = {"x-kind": kind, "x-name": name or path.name}
    answer = page.post("/api/uploads", content=path.read_bytes(), headers=headers)
    assert answer.status_code == 200, answer.text
    return str(answer.json()["number"])


def ended(page: Client, number: int) -> dict[str, object]:
    """Wait for the end of a job."""
    over = ("done", "failed", "cancelled")
    job: dict[str, object] = wait_for(
        lambda: (said := page.get(f"/api/jobs/{number}").json())["state"] in over and said, seconds=90
    )
    return job


def test_form_becomes_the_bench_that_was_typed(tmp_path: Path) -> None:
    """Every quantity typed into the form is that of the bench read from the file made of it."""
    text, faults = read_form(FORM, has_scale=False, has_log=False)
    assert faults == []
    (tmp_path / "bench.toml").write_text(text)
    bench = load_bench(tmp_path / "bench.toml")
    assert (bench.plate_gap.value, bench.plate_gap.std) == pytest.approx((6e-3, 2e-5), rel=1e-12)
    assert bench.temperature.value == pytest.approx(295.15, rel=1e-12)
    assert bench.scale.metres_per_pixel_y == pytest.approx(3e-6, rel=1e-12)
    assert bench.field.entries == ((0, 0), (2, 260), (4.4, 0), (6.8, 260))


def test_form_names_every_fault_at_its_field() -> None:
    """All faults come at once, each under the key of its field."""
    wrong = {
        **FORM,
        "cell.plate_gap": "6 V",
        "air.temperature": "300 degC",
        "oil.density": "",
        "field.list": "soon",
    }
    wrong |= {"air.pressure": "1008", "hack.key": "1", "camera.metres_per_pixel": ""}
    _, faults = read_form(wrong, has_scale=False, has_log=False)
    named = {fault["key"] for fault in faults}
    assert named == {
        "cell.plate_gap", "air.temperature", "oil.density", "field.list", "air.pressure", "hack.key",
        "camera.metres_per_pixel",
    }  # fmt: skip
    _, faults = read_form({**FORM, "field.source": "log"}, has_scale=True, has_log=False)
    assert {fault["key"] for fault in faults} == {"field.source"}
    assert [fault["key"] for fault in check_pitch("0.1 s") + check_pitch("") + check_pitch("-1 mm")] == [
        "scale.pitch"
    ] * 3


def test_text_of_the_form_cannot_leave_its_place() -> None:
    """Quotes, line breaks and control characters stay inside the value that they were typed into."""
    evil = 'x"\n[cell]\nplate_gap = "1 mm\x7f\\'
    text, _ = read_form({**FORM, "air.pressure": evil}, has_scale=False, has_log=False)
    assert tomllib.loads(text)["air"]["pressure"] == evil
    assert tomllib.loads(text)["cell"]["plate_gap"] == "6.00(2) mm"


def test_bench_file_names_only_files_beside_it() -> None:
    """A bench file that points elsewhere is refused."""
    assert companions('[field]\nlog = "supply.csv"\n[camera]\nscale = "s.json"') == {
        "log": "supply.csv", "scale": "s.json",
    }  # fmt: skip
    for name in ("../supply.csv", "/etc/passwd", "a/b.csv", "..", "c:\\\\x.csv", ".hidden"):
        with pytest.raises(ValueError, match="beside the bench file"):
            companions(f'[field]\nlog = "{name}"')


def test_names_are_cleaned_and_endings_checked() -> None:
    """No path, markup or reserved name survives; what is no recording is refused."""
    assert clean_leaf("../../\u00e9tude 1.AVI", kind="recording") == "etude_1.avi"
    assert clean_leaf("<img src=x onerror=alert(1)>.avi", kind="recording") == "img_src_x_onerror_alert_1.avi"
    assert clean_leaf("C:\\temp\\con.mp4", kind="recording") == "con_.mp4"
    assert clean_leaf("\u98db.mkv", kind="recording") == "recording.mkv"
    assert len(clean_leaf("x" * 500 + ".avi", kind="recording")) < 80
    for name in ("clip.exe", "clip", ".avi/..", "clip.avi.sh"):
        with pytest.raises(RefusedError):
            clean_leaf(name, kind="recording")


def test_dropped_recording_becomes_a_result(page: Client, place: Path, tmp_path: Path) -> None:
    """Upload, form, measurement: the result lies in the chosen folder and its droplets are those of the command."""
    number = send(page, place / "clip.avi", name="../<b>night 3.avi")
    wrong = page.post("/api/measure", json={"recording": number, "values": {**FORM, "oil.density": "9 mm"}})
    assert wrong.status_code == 422
    assert [fault["key"] for fault in wrong.json()["faults"]] == ["oil.density"]
    assert list((tmp_path / "results").iterdir()) == []
    job = page.post("/api/measure", json={"recording": number, "values": FORM}).json()
    assert job["title"] == "../<b>night 3.avi"
    done = ended(page, job["number"])
    assert done["state"] == "done", done
    folder = tmp_path / "results" / "b_night_3"
    assert sorted(path.name for path in folder.iterdir()) == [
        "b_night_3.avi",
        "b_night_3.fallrise",
        "bench.toml",
    ]
    found = page.get(f"/api/results/{done['result']['id']}").json()
    assert len(found["droplets"]) == len(read_result(place / "clip.fallrise").droplets)
    assert "b_night_3" in [item["name"] for item in page.get("/api/shelf").json()["items"]]


def test_reference_picture_gives_the_scale(page: Client, tmp_path: Path) -> None:
    """A sample recording with bench file, own file and reference picture: its droplets have the measured scale."""
    recording = send(page, SAMPLES / "steady.avi")
    picture = send(page, SAMPLES / "reticle.png", kind="picture")
    order = {
        "recording": recording, "picture": picture, "bench": (SAMPLES / "bench.toml").read_text(),
        "own": (SAMPLES / "steady.toml").read_text(), "values": {"scale.pitch": "0.1 s"},
    }  # fmt: skip
    wrong = page.post("/api/measure", json=order)
    assert [fault["key"] for fault in wrong.json()["faults"]] == ["scale.pitch"]
    without = page.post("/api/measure", json={**order, "picture": None})
    assert [fault["message"] for fault in without.json()["faults"]] == [
        "the bench names the file scale.json, which is not here yet: drop it too"
    ]
    assert list((tmp_path / "results").iterdir()) == []
    order["values"] = {"scale.pitch": "0.1000(2) mm"}
    job = page.post("/api/measure", json=order).json()
    done = ended(page, job["number"])
    assert done["state"] == "done", done
    result = read_result(tmp_path / "results" / "steady" / "steady.fallrise")
    stored = result.recording["scale"]
    # The picture was simulated at 3 um a pixel.
    assert stored["metres_per_pixel_y"] == pytest.approx(3e-6, abs=4 * stored["metres_per_pixel_y_std"])
    assert result.recording["field"]["source"] == "list"
    names = {path.name for path in (tmp_path / "results" / "steady").iterdir()}
    assert names == {
        "steady.avi",
        "steady.toml",
        "bench.toml",
        "reticle.png",
        "scale.json",
        "steady.fallrise",
    }


def test_wrong_bench_file_is_told_before_the_measurement(page: Client, place: Path, tmp_path: Path) -> None:
    """A key that the bench file lacks or misspells comes back under its name, and no folder is left."""
    number = send(page, place / "clip.avi")
    text = (place / "bench.toml").read_text().replace("plate_gap", "plate_gpa")
    answer = page.post("/api/measure", json={"recording": number, "bench": text})
    assert answer.status_code == 422
    assert answer.json()["faults"][0]["key"].startswith("cell.plate_g")
    answer = page.post("/api/measure", json={"recording": number, "bench": "[cell\n"})
    assert answer.status_code == 422
    for body in (
        {"recording": "none"},
        {},
        {"recording": number, "values": []},
        {"recording": number, "bench": 3},
    ):
        assert 400 <= page.post("/api/measure", json=body).status_code < 500
    assert page.delete(f"/api/uploads/{number}").status_code == 200
    assert [path for path in (tmp_path / "results").rglob("*") if path.is_file()] == []


def test_failed_measurement_can_be_tried_again(page: Client, tmp_path: Path) -> None:
    """A text renamed to .avi fails with its message; after Remove nothing is left."""
    fake = tmp_path / "fake.avi"
    fake.write_text("no video at all\n" * 50)
    number = send(page, fake)
    job = page.post("/api/measure", json={"recording": number, "values": FORM}).json()
    done = ended(page, job["number"])
    assert done["state"] == "failed"
    assert "fake.avi" in done["error"]["message"]
    again = page.post("/api/measure", json={"recording": number, "values": FORM})
    assert again.status_code == 200
    ended(page, again.json()["number"])
    page.delete(f"/api/uploads/{number}")
    assert list((tmp_path / "results").iterdir()) == []


@pytest.fixture(scope="module")
def recording(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Recording whose measurement takes a while."""
    return simulated_recording(tmp_path_factory.mktemp("long"), seconds=60.0)


def test_cancelled_measurement_can_be_asked_for_again_or_removed(
    page: Client, site: Site, recording: Path, tmp_path: Path
) -> None:
    """A cancelled recording stays, is offered again, cannot be removed while it is measured, and goes when asked."""
    number = send(page, recording)
    job = page.post("/api/measure", json={"recording": number, "values": FORM}).json()
    assert wait_for(lambda: page.get(f"/api/jobs/{job['number']}").json()["text"] == "measuring")
    item = _item(page, "clip/clip.avi")
    assert item["status"] == "measuring"
    assert 0 <= item["progress"] <= 1
    assert page.delete(f"/api/uploads/{number}").status_code == 409
    page.post(f"/api/jobs/{job['number']}/cancel", json={})
    assert ended(page, job["number"])["state"] == "cancelled"
    assert _item(page, "clip/clip.avi")["status"] == "open"
    told = page.get("/api/shelf").json()["jobs"][0]
    assert told["again"] == item["id"]
    again = page.post(f"/api/recordings/{item['id']}/measure", json={}).json()
    assert again["title"] == "clip.avi"
    assert wait_for(lambda: page.get(f"/api/jobs/{again['number']}").json()["text"] == "measuring")
    page.post(f"/api/jobs/{again['number']}/cancel", json={})
    ended(page, again["number"])
    assert page.delete(f"/api/uploads/{number}").status_code == 200
    assert list((tmp_path / "results").iterdir()) == []
    assert site.uploads.held == 0
    assert page.post(f"/api/recordings/{item['id']}/measure", json={}).status_code == 404


def _item(page: Client, name: str) -> dict[str, object]:
    """One line of the shelf."""
    items = {item["name"]: item for item in page.get("/api/shelf").json()["items"]}
    assert name in items, items
    return dict(items[name])


def test_recording_without_a_result_is_measured_where_it_lies(tmp_path: Path) -> None:
    """A recording in a batch folder that has no result can be measured from the page, with the bench beside it."""
    term = tmp_path / "term"
    simulated_recording(term / "bench A")
    with Page(Site.make(term, term)) as running, running.client() as page:
        job = page.post(f"/api/recordings/{_item(page, 'bench A/clip.avi')['id']}/measure", json={}).json()
        done = ended(page, job["number"])
        assert done["state"] == "done", done
        assert page.get(f"/api/results/{done['result']['id']}").status_code == 200  # type: ignore[index]
    assert (term / "bench A" / "clip.fallrise" / "recording.json").is_file()
    assert (term / "bench A" / "clip.avi").is_file()


def pictures_body(names: list[str], content: bytes = b"picture") -> bytes:
    """A folder of pictures as the page sends it."""
    return json.dumps([[name, len(content)] for name in names]).encode() + b"\n" + content * len(names)


def test_folder_of_pictures_comes_out_as_it_was(page: Client, site: Site, tmp_path: Path) -> None:
    """Names and bytes of the pictures are kept; pictures without a frame rate are told before anything is made."""
    names = [f"frame {i}.png" for i in range(12)]
    body = json.dumps([[name, i + 1] for i, name in enumerate(names)]).encode() + b"\n"
    body += b"".join(bytes([i]) * (i + 1) for i in range(12))
    headers = {"x-kind": "pictures", "x-name": "../run 7"}
    number = page.post("/api/uploads", content=body, headers=headers).json()["number"]
    answer = page.post("/api/measure", json={"recording": number, "values": FORM})
    assert [fault["key"] for fault in answer.json()["faults"]] == ["camera.frame_rate"]
    assert list((tmp_path / "results").iterdir()) == []
    held = site.uploads.get(number, kind="recording")
    (tmp_path / "results" / "run_7").mkdir()
    folder = held.place(tmp_path / "results" / "run_7")
    assert folder.name == "run_7"
    assert {path.name: path.read_bytes() for path in folder.iterdir()} == {
        name: bytes([i]) * (i + 1) for i, name in enumerate(names)
    }
    assert page.delete(f"/api/uploads/{number}").status_code == 200
    assert list((tmp_path / "results").iterdir()) == []


@pytest.mark.parametrize(
    "body",
    [
        b"", b"not a list\n", b"[1, 2]\n", pictures_body(["a.png"] * 3), pictures_body([f"{i}.sh" for i in range(12)]),
        pictures_body([f"{i}.png" for i in range(12)])[:-1], pictures_body([f"{i}.png" for i in range(12)], b""),
    ],
)  # fmt: skip
def test_broken_folder_of_pictures_is_refused(page: Client, tmp_path: Path, body: bytes) -> None:
    """No list, a wrong one, too few or other files, a cut end: refused, and nothing is left."""
    headers = {"x-kind": "pictures", "x-name": "run"}
    assert 400 <= page.post("/api/uploads", content=body, headers=headers).status_code < 500
    assert list((tmp_path / "results").iterdir()) == []


def test_names_of_pictures_cannot_leave_their_folder(tmp_path: Path) -> None:
    """Names with paths, and names that differ only in case, become numbers in the order in which they came."""
    for names in (
        ["../../a.png", *(f"{i}.png" for i in range(11))],
        [f"{'aA'[i % 2]}{i // 2}.png" for i in range(12)],
    ):
        body = pictures_body(names)
        found = read_index(io.BytesIO(body), len(body))
        assert [name for name, _ in found] == [f"{i:06d}.png" for i in range(12)]


def test_uploads_stop_at_the_limit(page: Client, site: Site, tmp_path: Path) -> None:
    """Past the limit: 413, announced or not, and no byte is left; wrong kinds and empty files are refused."""
    headers = {"x-kind": "recording", "x-name": "big.avi"}
    big = b"\0" * (site.uploads.limit + 1)
    assert page.post("/api/uploads", content=big, headers=headers).status_code == 413
    pieces = (big[i : i + 65536] for i in range(0, len(big), 65536))
    with contextlib.suppress(RemoteProtocolError):  # the server may hang up on a sender that does not stop
        assert page.post("/api/uploads", content=pieces, headers=headers).status_code == 413
    assert page.post("/api/uploads", content=b"", headers=headers).status_code == 400
    for wrong in ({"x-kind": "secret"}, {"x-name": "x.sh"}, {"x-name": ""}):
        assert 400 <= page.post("/api/uploads", content=b"x", headers=headers | wrong).status_code < 500
    assert list((tmp_path / "results").iterdir()) == []


def test_upload_that_breaks_off_leaves_nothing(running: Page, site: Site, tmp_path: Path) -> None:
    """A page that is closed in the middle of an upload: no file, and no upload is held."""
    head = (
        f"POST /api/uploads HTTP/1.1\r\nHost: 127.0.0.1:{running.port}\r\nx-kind: recording\r\nx-name: a.avi\r\n"
        f"Cookie: fallrise-{running.port}={TOKEN}\r\nContent-Length: 1000000\r\n\r\n"
    )
    with socket.create_connection(("127.0.0.1", running.port)) as sender:
        sender.sendall(head.encode() + b"x" * 200_000)
        assert wait_for((tmp_path / "results").is_dir)
    assert wait_for(lambda: not [line for line in _open_files() if str(tmp_path / "results") in line])
    assert list((tmp_path / "results").iterdir()) == []
    assert site.uploads.held == 0


def _open_files() -> list[str]:
    """Files that this process holds open, those without a name too."""
    found = []
    for entry in Path("/proc/self/fd").iterdir():
        with contextlib.suppress(OSError):
            found.append(str(entry.readlink()))
    return found


def test_full_disk_refuses_uploads(page: Client, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without free space the answer is 507 before anything is written."""
    import shutil

    usage = shutil.disk_usage(tmp_path)
    monkeypatch.setattr(shutil, "disk_usage", lambda _: usage._replace(free=SPARE // 2))
    headers = {"x-kind": "recording", "x-name": "clip.avi"}
    assert page.post("/api/uploads", content=b"x" * 100, headers=headers).status_code == 507
    assert list((tmp_path / "results").iterdir()) == []


def test_killed_server_leaves_no_process_and_no_half_file(recording: Path, tmp_path: Path) -> None:
    """SIGKILL in the middle of an upload and a measurement: the children end, and only whole files are there."""
    results = tmp_path / "results"
    with Server(None, results, cache=tmp_path / "cache") as server, server.http() as page:
        number = send(page, recording)
        send(page, recording, name="waiting.avi")
        job = page.post("/api/measure", json={"recording": number, "values": FORM}).json()
        assert wait_for(lambda: page.get(f"/api/jobs/{job['number']}").json()["text"] == "measuring")
        children = server.children()
        assert children
        os.kill(server.process.pid, signal.SIGKILL)
        assert wait_for(lambda: not any(_alive(child) for child in children), seconds=15)
    left = {path.name: path for path in results.rglob("*") if path.is_file()}
    assert set(left) == {"clip.avi", "bench.toml"}
    assert left["clip.avi"].read_bytes() == recording.read_bytes()


def test_stopped_server_leaves_no_process(recording: Path, tmp_path: Path) -> None:
    """Ctrl+C ends jobs and server; uploads that were not measured are gone."""
    results = tmp_path / "results"
    with Server(None, results, cache=tmp_path / "cache") as server, server.http() as page:
        number = send(page, recording)
        page.post("/api/measure", json={"recording": number, "values": FORM})
        assert wait_for(server.children)
        children = server.children()
        os.kill(server.process.pid, signal.SIGINT)
        server.process.wait(20)
        assert not any(_alive(child) for child in children)
    assert [path for path in results.rglob("*") if path.is_file()] == []


def _alive(process: psutil.Process) -> bool:
    try:
        return process.is_running() and process.status() != psutil.STATUS_ZOMBIE
    except psutil.NoSuchProcess:
        return False
