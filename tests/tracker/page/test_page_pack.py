"""Frame packs: every frame as a picture of its own, read while it grows, whole or not there."""

from __future__ import annotations

from pathlib import Path

import cv2
import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.errors import RecordingError
from tracker.page import pack as packs
from tracker.page.errors import RefusedError
from tracker.page.pack import Pack, make_room, write_pack
from tracker.page.words import unit_words


def pictures(
    count: int, *, shape: tuple[int, int] = (61, 83), deep: bool = False
) -> list[NDArray[np.generic]]:
    """Smooth pictures, each of its own brightness, with a bright spot that moves."""
    rows, columns = np.mgrid[: shape[0], : shape[1]]
    made = []
    for k in range(count):
        spot = 100 * np.exp(-((columns - 5 - k) ** 2 + (rows - 30) ** 2) / 8)
        grey = 20 + 0.5 * columns + spot
        made.append((grey * 16).astype(np.uint16) if deep else grey.astype(np.uint8))
    return made


def batches(
    frames: list[NDArray[np.generic]], size: int = 16
) -> list[tuple[NDArray[np.float64], list[NDArray[np.generic]]]]:
    """The frames in batches with times 0.04 s apart."""
    times = np.arange(len(frames)) * 0.04
    return [(times[i : i + size], frames[i : i + size]) for i in range(0, len(frames), size)]


def decoded(jpeg: bytes) -> NDArray[np.float64]:
    """Grey values of a JPEG."""
    return cv2.imdecode(np.frombuffer(jpeg, np.uint8), cv2.IMREAD_GRAYSCALE).astype(float)


@pytest.mark.parametrize("deep", [False, True])
def test_frames_come_back_as_they_went_in(tmp_path: Path, deep: bool) -> None:
    """Full pictures are those given, to the noise of the JPEG; half ones average 2 x 2, odd edges repeated."""
    frames = pictures(40, deep=deep)
    assert write_pack(batches(frames), tmp_path / "a.frames") == 40
    pack = Pack.open(tmp_path / "a.frames")
    assert pack.times == pytest.approx(np.arange(40) * 0.04)
    white = 1.25 * max(float(f.max()) for f in frames[:16]) if deep else 255.0
    for k in (0, 17, 39):
        wanted = np.clip(frames[k].astype(float) * 255 / white, 0, 255)
        # Smooth pictures at quality 90: below 2 grey values.
        assert np.sqrt(np.mean((decoded(pack.jpeg(k)) - wanted) ** 2)) < 2
        half = decoded(pack.jpeg(k, half=True))
        even = np.pad(wanted, ((0, 1), (0, 1)), mode="edge")
        assert half.shape == (31, 42)
        means = even.reshape(31, 2, 42, 2).mean(axis=(1, 3))
        assert np.sqrt(np.mean((half - means) ** 2)) < 2
    pack.close()


def test_standing_picture_is_taken_away(tmp_path: Path) -> None:
    """With the background removed only what moves is left, on an even grey."""
    write_pack(batches(pictures(70)), tmp_path / "a.frames")
    pack = Pack.open(tmp_path / "a.frames")
    clear = decoded(pack.jpeg(35, clear=True))
    away = np.ones(clear.shape, bool)
    away[20:41, 30:51] = False
    assert abs(np.median(clear[away]) - packs.PEDESTAL) <= 1
    assert clear[30, 40] - packs.PEDESTAL > 80
    pack.close()


def test_growing_pack_is_read_while_it_is_written(tmp_path: Path) -> None:
    """After each batch its frames can be read; the background is refused until the end."""
    path = tmp_path / "a.frames"
    frames = pictures(32)
    seen: list[int] = []
    growing: list[Pack] = []

    def hear(said: list[tuple[int, int, float]]) -> None:
        if not growing:
            growing.append(Pack(path.with_name("a.frames.part").open("rb")))
        growing[0].add(said)
        seen.append(len(growing[0].offsets))
        newest = decoded(growing[0].jpeg(seen[-1] - 1))
        assert np.sqrt(np.mean((newest - frames[seen[-1] - 1]) ** 2)) < 2
        with pytest.raises(RefusedError, match="background"):
            growing[0].jpeg(0, clear=True)
        with pytest.raises(RefusedError, match="no frame"):
            growing[0].jpeg(seen[-1])

    write_pack(batches(frames), path, hear=hear)
    growing[0].close()
    assert seen == [16, 32]
    assert [p.name for p in tmp_path.iterdir()] == ["a.frames"]


def test_broken_off_pack_leaves_nothing(tmp_path: Path) -> None:
    """An error in the middle, an empty recording or too many frames: no file, no half file."""

    def breaking() -> object:
        yield batches(pictures(16))[0]
        raise RecordingError("clip.avi", "breaks off")

    with pytest.raises(RecordingError, match="breaks off"):
        write_pack(breaking(), tmp_path / "a.frames")  # type: ignore[arg-type]
    with pytest.raises(RecordingError, match="no frame"):
        write_pack([], tmp_path / "a.frames")
    assert list(tmp_path.iterdir()) == []
    (tmp_path / "b.frames").write_bytes(b"no pack at all, but long enough")
    with pytest.raises(ValueError, match="no frame pack"):
        Pack.open(tmp_path / "b.frames")


def test_cache_throws_the_longest_unused_away(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Room is made by removing packs in the order of their last use."""
    import os

    for age, name in enumerate(("new", "middle", "old")):
        path = tmp_path / f"{name}.frames"
        path.write_bytes(b"x" * 1000)
        os.utime(path, (1e9 - age, 1e9 - age))
    monkeypatch.setattr(packs, "MAX_CACHE", 3500)
    make_room(tmp_path, 1200)
    assert sorted(path.stem for path in tmp_path.iterdir()) == ["middle", "new"]
    monkeypatch.setattr(packs, "SPARE", 10**18)
    with pytest.raises(RefusedError) as refused:
        make_room(tmp_path, 1)
    assert refused.value.status == 507


def test_a_unit_that_is_not_resolved_gives_its_reason() -> None:
    """The page says why no unit is seen and over what charges are shown then."""
    assert unit_words({"resolved": False, "reason": "not resolved from 3 charges."}).startswith(
        "Charge unit not resolved from 3 charges. "
    )


def test_charge_unit_tells_own_from_shared_uncertainty() -> None:
    """The sentence holds value, both parts in the unit of the value, and the value over e = 1.602176634e-19 C (SI)."""
    unit = {
        "resolved": True, "charge_unit_c": 1.61e-19, "charge_unit_std_c": 2.5e-21, "droplets_used": 14,
        "charge_unit_own_std_c": 2.0e-21, "charge_unit_shared_std_c": 1.5e-21,
    }  # fmt: skip
    assert unit_words(unit) == (
        "Charge unit 1.610(25) \u00d7 10\u207b\u00b9\u2079 C (own 0.020, shared 0.015), 1.005(16) e, "
        "from 14 charges. No quantum was assumed."
    )
