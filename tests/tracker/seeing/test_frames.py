"""Frames of every container and codec come out with their pictures and times, and bad files are one clear error."""

from __future__ import annotations

import hashlib
import struct
import wave
from fractions import Fraction
from pathlib import Path

import av
import cv2
import numpy as np
import pytest
import tifffile

from tracker.errors import RecordingError
from tracker.seeing.frames import open_recording, sample_recording

WIDTH, HEIGHT, COUNT = 96, 64, 20


def pictures(count: int = COUNT, *, bits: int = 8) -> list[np.ndarray]:
    """Smooth blobs that move by 2 px a frame over a smooth ground: lossy codecs keep them within a few grey."""
    y, x = np.mgrid[:HEIGHT, :WIDTH]
    made = []
    for i in range(count):
        blob = 120 * np.exp(-((x - 10 - 2 * i) ** 2 + (y - 30) ** 2) / (2 * 5.0**2))
        made.append(
            np.rint((40 + 0.3 * x + blob) * 2 ** (bits - 8)).astype(np.uint8 if bits == 8 else np.uint16)
        )
    return made


def write_video(
    path: Path, frames: list[np.ndarray], *, codec: str, form: str, options: dict[str, str] | None = None,
    pts: list[int] | None = None, base: Fraction = Fraction(1, 1000),
) -> Path:  # fmt: skip
    """Write grey pictures; `form` is the stored pixel format, whose luma is filled without conversion."""
    with av.open(str(path), "w") as container:
        stream = container.add_stream(codec, rate=25, options=options or {})
        stream.width, stream.height, stream.pix_fmt = WIDTH, HEIGHT, form
        stream.time_base = stream.codec_context.time_base = base
        for i, picture in enumerate(frames):
            frame = av.VideoFrame(WIDTH, HEIGHT, form)
            for k, plane in enumerate(frame.planes):
                kind = np.uint8 if plane.line_size < 2 * plane.width else np.dtype("<u2")
                rows = np.frombuffer(plane, kind).reshape(plane.height, -1)
                depth = frame.format.components[0].bits
                rows[:] = 2 ** (depth - 1)
                if k == 0:
                    rows[:, :WIDTH] = picture
            frame.pts = pts[i] if pts else i * round(1 / (25 * base))
            frame.time_base = base
            container.mux(stream.encode(frame))
        container.mux(stream.encode())
    return path


def read_all(path: Path, **kwargs: float) -> tuple[list[np.ndarray], object]:
    """All pictures, copied, and the recording."""
    with open_recording(path, **kwargs) as reader:
        got = [p.copy() for batch in reader for p in batch.pictures]
        return got, reader.recording()


X264 = {"crf": "12", "preset": "veryfast"}
CASES = [
    ("a.avi", "mjpeg", "yuvj420p", {"qmin": "2", "qmax": "2"}, 8, 6),
    ("b.mp4", "libx264", "yuv420p", X264, 8, 8),
    ("c.mov", "libx264", "yuvj420p", X264, 8, 8),
    (
        "d.mkv",
        "libx265",
        "yuv420p",
        {"crf": "12", "preset": "ultrafast", "x265-params": "log-level=none"},
        8,
        8,
    ),
    ("e.mp4", "mpeg4", "yuv420p", {"qmin": "2", "qmax": "2"}, 8, 8),
    ("f.webm", "libvpx-vp9", "yuv420p", {"crf": "10", "cpu-used": "8", "deadline": "realtime"}, 8, 10),
    ("g.mkv", "ffv1", "gray", {}, 8, 0),
    ("h.mkv", "ffv1", "yuv420p", {}, 8, 0),
    ("i.mkv", "ffv1", "gray10le", {}, 10, 0),
    ("j.mkv", "ffv1", "gray12le", {}, 12, 0),
    ("k.mkv", "ffv1", "gray16le", {}, 16, 0),
    ("l.avi", "rawvideo", "gray", {}, 8, 0),
    ("m.mkv", "libx264", "yuv420p10le", X264, 10, 40),
]


@pytest.mark.parametrize(
    ("name", "codec", "form", "options", "bits", "tolerance"), CASES, ids=[c[0] for c in CASES]
)
def test_every_codec_gives_its_luma(tmp_path, name, codec, form, options, bits, tolerance):
    """Luma comes out as it went in: exactly where the codec is lossless, within a few grey where it is not."""
    sent = pictures(bits=bits)
    path = write_video(tmp_path / name, sent, codec=codec, form=form, options=options, base=Fraction(1, 25))
    got, recording = read_all(path)
    assert len(got) == COUNT
    assert recording.bit_depth == bits
    # lossy codecs at this quality stay well below one tenth of the blob's 120 grey
    assert max(np.abs(a.astype(int) - b).max() for a, b in zip(sent, got, strict=True)) <= tolerance
    # AVI and MP4 keep the frame rate exactly; Matroska and WebM round times to 1 ms
    np.testing.assert_allclose(recording.frame_times, np.arange(COUNT) / 25, atol=5.1e-4)
    assert recording.lost == 0
    assert recording.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert recording.warnings == ()


def test_limited_range_is_known(tmp_path):
    """Studio range has its black at 16 and its white at 235 (ITU-R BT.601), full range at 0 and 255."""
    limited = write_video(tmp_path / "l.mp4", pictures(4), codec="libx264", form="yuv420p", options=X264)
    full = write_video(tmp_path / "f.mp4", pictures(4), codec="libx264", form="yuvj420p", options=X264)
    with open_recording(limited) as reader:
        assert (reader.black, reader.full_scale) == (16, 235)
    with open_recording(full) as reader:
        assert (reader.black, reader.full_scale) == (0, 255)


def test_uneven_times_and_lost_frames_are_told(tmp_path):
    """Presentation times are taken as the file has them, and a gap of three intervals is two lost frames."""
    pts = [0, 40, 80, 125, 160, 200, 320, 360]
    path = write_video(tmp_path / "v.mkv", pictures(8), codec="ffv1", form="gray", pts=pts)
    _, recording = read_all(path)
    np.testing.assert_allclose(recording.frame_times, np.array(pts) / 1000, atol=1e-9)
    assert recording.uneven
    assert recording.lost == 2


def test_repeated_pictures_are_found_and_not_used(tmp_path):
    """A copy of the picture before is told from a new picture of a still scene with noise and a moving droplet."""
    rng = np.random.default_rng(1)
    frames = [np.clip(p + rng.normal(0, 2, p.shape), 0, 255).astype(np.uint8) for p in pictures(40)]
    for i in (7, 21, 33):
        frames[i] = frames[i - 1]
    path = write_video(tmp_path / "r.avi", frames, codec="mjpeg", form="yuvj420p", options={"qmin": "3", "qmax": "3"},
                       base=Fraction(1, 25))  # fmt: skip
    with open_recording(path) as reader:
        usable = np.concatenate([b.usable for b in reader])
        assert reader.recording().repeated.tolist() == [7, 21, 33]
    assert np.flatnonzero(~usable).tolist() == [7, 21, 33]


@pytest.mark.parametrize(("matrix", "turns"), [((0, 1, -1, 0), -1), ((-1, 0, 0, -1), 2), ((0, -1, 1, 0), 1)])
def test_rotation_flag_is_obeyed(tmp_path, matrix, turns):
    """A display matrix in the track header turns the pictures (ISO/IEC 14496-12, 8.3.2: x' = a x + c y)."""
    sent = pictures(4)
    path = write_video(tmp_path / "t.mp4", sent, codec="libx264", form="yuv420p", options={"crf": "1"})
    data = bytearray(path.read_bytes())
    at = data.index(struct.pack(">9i", 65536, 0, 0, 0, 65536, 0, 0, 0, 1 << 30), data.index(b"tkhd"))
    a, b, c, d = (65536 * m for m in matrix)
    data[at : at + 36] = struct.pack(">9i", a, b, 0, c, d, 0, 0, 0, 1 << 30)
    path.write_bytes(data)
    got, recording = read_all(path)
    expected = np.rot90(sent[2], turns)  # counted anticlockwise
    assert (recording.height, recording.width) == expected.shape
    assert np.abs(got[2].astype(int) - expected).max() <= 6  # crf 1 is nearly lossless


def test_tiff_pages_keep_sixteen_bits(tmp_path):
    """Pages of a 16-bit stack come out bit for bit, at the given rate."""
    sent = pictures(5, bits=16)
    path = tmp_path / "s.tif"
    tifffile.imwrite(path, np.stack(sent))
    got, recording = read_all(path, frame_rate=10.0)
    np.testing.assert_array_equal(np.stack(got), np.stack(sent))
    np.testing.assert_allclose(recording.frame_times, np.arange(5) / 10)
    assert recording.bit_depth == 16
    with pytest.raises(RecordingError, match=r"camera\.frame_rate"):
        open_recording(path)


def test_picture_folder_is_read_in_natural_order(tmp_path):
    """Picture 10 comes after picture 9, whatever the number of digits."""
    sent = pictures(12)
    for i, picture in enumerate(sent):
        cv2.imwrite(str(tmp_path / f"drop_{i}.png"), picture)
    (tmp_path / "notes.txt").write_text("not a picture")
    got, recording = read_all(tmp_path, frame_rate=25.0)
    np.testing.assert_array_equal(np.stack(got), np.stack(sent))
    assert recording.frame_interval == pytest.approx(0.04)


def test_truncated_file_is_read_as_far_as_it_goes(tmp_path):
    """Half of an AVI file gives about half of its frames, and a warning."""
    path = write_video(tmp_path / "w.avi", pictures(40), codec="mjpeg", form="yuvj420p", base=Fraction(1, 25))
    data = path.read_bytes()
    path.write_bytes(data[: len(data) // 2])
    got, recording = read_all(path)
    assert 10 <= len(got) < 30
    assert any("as far as it goes" in w for w in recording.warnings)


def test_damage_in_the_middle_is_survived(tmp_path):
    """Broken bytes inside cost a few frames and a warning, not the recording."""
    path = write_video(tmp_path / "d.avi", pictures(40), codec="mjpeg", form="yuvj420p", base=Fraction(1, 25))
    data = bytearray(path.read_bytes())
    middle = data.index(b"00dc", len(data) // 2)
    data[middle + 8 : middle + 1508] = bytes(1500)  # a picture and the header of the next
    path.write_bytes(data)
    got, recording = read_all(path)
    assert 36 <= len(got) < 40
    assert any("damaged" in w for w in recording.warnings)


def test_early_end_leaves_no_thread(tmp_path):
    """A reader that is closed after its first batch stops decoding."""
    path = write_video(tmp_path / "e.mkv", pictures(200), codec="ffv1", form="gray")
    with open_recording(path) as reader:
        next(iter(reader))
    assert reader._thread is not None
    assert not reader._thread.is_alive()


def test_samples_are_spread_over_the_recording(tmp_path):
    """Where every picture is coded by itself, samples lie at the wanted times."""
    path = write_video(tmp_path / "s.avi", pictures(40), codec="mjpeg", form="yuvj420p", base=Fraction(1, 25))
    samples = sample_recording(path, np.array([0.2, 0.8, 1.4]))
    np.testing.assert_allclose([t for t, _ in samples], [0.2, 0.8, 1.4], atol=0.041)  # one frame interval


def make_bad(folder: Path, kind: str) -> Path:
    """Files that are no recordings."""
    path = folder / f"{kind}.avi"
    if kind == "empty":
        path.write_bytes(b"")
    elif kind == "text":
        path.write_text("time, voltage\n" * 50)
    elif kind == "sound":
        path = folder / "sound.wav"
        with wave.open(str(path), "wb") as sound:
            sound.setparams((1, 2, 8000, 0, "NONE", ""))
            sound.writeframes(bytes(16000))
    elif kind == "header":
        data = write_video(folder / "x.mp4", pictures(5), codec="libx264", form="yuv420p").read_bytes()
        path = folder / "header.mp4"
        path.write_bytes(data[:60])
    elif kind == "folder":
        path = folder / "folder"
        path.mkdir()
    return path


@pytest.mark.parametrize("kind", ["missing", "empty", "text", "sound", "header", "folder"])
def test_bad_input_is_one_clear_line(tmp_path, kind):
    """What is no recording is refused with a line that names the file."""
    path = make_bad(tmp_path, kind)
    with pytest.raises(RecordingError) as caught:
        open_recording(path, frame_rate=None if kind != "folder" else 25.0)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_single_frame_is_a_recording(tmp_path):
    """One frame is read; it has no interval."""
    path = write_video(
        tmp_path / "one.avi", pictures(1), codec="mjpeg", form="yuvj420p", base=Fraction(1, 25)
    )
    got, recording = read_all(path)
    assert len(got) == 1
    assert recording.frame_interval == 0
