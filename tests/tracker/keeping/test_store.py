"""Result folders are written whole or not at all, and read back as they were."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from tracker.errors import ResultError
from tracker.keeping import store
from tracker.keeping.store import Result, read_result, replace_file, write_json, write_result
from tracker.keeping.tables import TABLES, describe, read_table, safe_cell, write_csv, write_parquet


def example(charge: float = -1.6e-19, droplets: int = 2) -> Result:
    """A small result with empty cells, blanks and an awkward text."""
    made = {}
    for name, columns in TABLES.items():
        data = {}
        for column in columns:
            if column.kind == "text":
                data[column.name] = pd.array(["NA", None][:droplets], dtype="string")
            elif column.kind == "int":
                data[column.name] = pd.array([3, None][:droplets], dtype="Int64")
            else:
                data[column.name] = np.array([charge if column.unit == "C" else 0.5, np.nan])[:droplets]
        made[name] = pd.DataFrame(data)
    return Result(None, **made, recording={"file": "clip.mp4", "frames": {"count": 3}})


@pytest.mark.parametrize("kind", ["csv", "parquet"])
def test_a_result_is_read_back_as_it_was_written(tmp_path, kind):
    """Numbers to the last digit, empty cells as empty, texts as texts, in both formats."""
    result = example()
    write_result(result, tmp_path / "clip.fallrise", tables=kind)
    again = read_result(tmp_path / "clip.fallrise")
    assert (tmp_path / "clip.fallrise" / f"tracks.{kind}").is_file()
    for name in TABLES:
        pd.testing.assert_frame_equal(getattr(again, name), getattr(result, name), check_exact=True)
    assert again.recording["file"] == "clip.mp4"


def test_a_second_write_keeps_decisions_and_leaves_nothing_over(tmp_path):
    """Tables are replaced, decisions stay byte for byte, drafts and the other format are gone."""
    folder = tmp_path / "clip.fallrise"
    write_result(example(), folder, tables="parquet")
    (folder / "decisions.jsonl").write_text('{"droplet": 3}\n')
    write_result(example(-3.2e-19), folder)
    assert (folder / "decisions.jsonl").read_text() == '{"droplet": 3}\n'
    assert sorted(p.name for p in folder.iterdir()) == [
        "changes.csv", "decisions.jsonl", "droplets.csv", "recording.json", "segments.csv", "tracks.csv",
    ]  # fmt: skip
    assert read_result(folder).droplets["charge_c"][0] == -3.2e-19


def test_a_failure_at_any_point_leaves_the_old_result_readable(tmp_path, monkeypatch):
    """Whichever table the disk fills up at, the old result is still whole."""
    folder = tmp_path / "clip.fallrise"
    write_result(example(), folder)
    before = {p.name: p.read_bytes() for p in folder.iterdir()}
    for failing in range(4):
        calls = iter(range(10))

        def full(frame, path, columns, failing=failing, calls=calls):
            if next(calls) == failing:
                Path("/dev/full").write_bytes(b"x")  # the kernel's own "no space left on device"
            write_csv(frame, path, columns)

        monkeypatch.setattr(store, "write_csv", full)
        with pytest.raises(ResultError, match="disk is full"):
            write_result(example(-9e-19), folder)
        assert {p.name: p.read_bytes() for p in folder.iterdir()} == before


def test_a_mixture_left_by_a_crash_is_seen(tmp_path):
    """Tables that do not belong to their provenance are refused, not read."""
    folder = tmp_path / "clip.fallrise"
    write_result(example(), folder)
    text = (folder / "droplets.csv").read_text()
    (folder / "droplets.csv").write_text(text.replace("-1.6e-19", "-3.2e-19"))
    with pytest.raises(ResultError, match="measure the recording again"):
        read_result(folder)


def test_folders_that_are_no_result_are_left_alone(tmp_path):
    """A folder with other files, or a file, is never written into."""
    (tmp_path / "photos").mkdir()
    (tmp_path / "photos" / "a.jpg").touch()
    with pytest.raises(ResultError, match="no result"):
        write_result(example(), tmp_path / "photos")
    (tmp_path / "file").touch()
    with pytest.raises(ResultError, match="is a file"):
        write_result(example(), tmp_path / "file")
    with pytest.raises(ResultError, match="no such result folder"):
        read_result(tmp_path / "nothing")
    with pytest.raises(ResultError, match="not a result folder"):
        read_result(tmp_path / "photos")


def test_json_is_plain(tmp_path):
    """Arrays, numpy scalars, paths and numbers that JSON does not know are written as JSON allows."""
    path = tmp_path / "a.json"
    write_json({"a": np.arange(2), "b": np.float64(0.5), "c": float("nan"), "d": Path("x")}, path)
    assert json.loads(path.read_text()) == {"a": [0, 1], "b": 0.5, "c": None, "d": "x"}


def test_a_file_is_replaced_whole_or_not_at_all(tmp_path):
    """A writer that fails leaves the old file and no draft."""
    path = tmp_path / "a.txt"
    path.write_text("old")

    def half(part: Path) -> None:
        part.write_text("ne")
        raise OSError(28, "No space left on device")

    with pytest.raises(ResultError, match="disk is full"):
        replace_file(path, half)
    assert path.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["a.txt"]


@pytest.mark.parametrize("text", ["=1+1", "+A1", "-2", "@x", "\tx"])
def test_a_cell_never_begins_a_formula(text):
    """What a spreadsheet would run is made a text."""
    assert safe_cell(text) == f"'{text}"
    assert safe_cell(f"a{text}") == f"a{text}"


def test_parquet_carries_units_and_meanings(tmp_path):
    """Each column of a Parquet file says its unit and meaning."""
    import pyarrow.parquet as pq

    write_parquet(example().tracks, tmp_path / "t.parquet", TABLES["tracks"])
    field = pq.read_schema(tmp_path / "t.parquet").field("x_std_px")
    assert field.metadata[b"unit"] == b"px"
    assert b"standard deviation" in field.metadata[b"meaning"]


def test_every_column_is_described():
    """The description names each column of a table with unit and meaning."""
    for name, columns in TABLES.items():
        text = describe(columns, name=f"{name}.csv")
        assert all(f"`{c.name}`" in text and c.meaning for c in columns)


def test_a_table_without_a_column_is_refused(tmp_path):
    """A missing column is named."""
    (tmp_path / "d.csv").write_text("droplet\n1\n")
    with pytest.raises(ValueError, match="verdict"):
        read_table(tmp_path / "d.csv", TABLES["droplets"])
