"""What `recording.json` says of the values that a measurement rests on, and where they came from."""

from __future__ import annotations

import hashlib
import json

from bench_files import write_bench

from tracker.bench import load_bench
from tracker.provenance import bench_json


def test_every_stated_value_of_a_bench_has_its_origin(tmp_path):
    """Quantities say it themselves; slip, voltage, scale and field are told beside them; the digest holds no names."""
    clip = tmp_path / "clip.avi"
    clip.touch()
    bench = load_bench(write_bench(tmp_path), recording=clip)
    told = bench_json(bench, tmp_path)
    assert told["plate_gap"]["origin"] == "bench.toml: cell.plate_gap"
    assert told["origins"]["slip"] == "default"
    assert told["origins"]["voltage_rel_std"] == "bench.toml: cell.voltage"
    assert told["origins"]["field"] == "bench.toml: field.source"
    (tmp_path / "clip.toml").write_text('[air]\nslip = "kim2005"\n')
    again = load_bench(tmp_path / "bench.toml", recording=clip)
    assert bench_json(again, tmp_path)["origins"]["slip"] == "clip.toml: air.slip"
    assert again.digest == bench.digest
    uncertain = load_bench(write_bench(tmp_path, ('"2 s", "260 V"', '"2 s", "260(1) V"')))
    assert uncertain.origins["voltage_rel_std"] == "bench.toml: field.list"


def test_a_voltage_log_is_named_with_its_hash(tmp_path):
    """The log's place, sha256, columns and stated clock are told; a bench without a log has none."""
    log = tmp_path / "voltage.csv"
    log.write_text("t,u\n0,0\n1,260\n")
    keys = 'source = "log"\nlog = "voltage.csv"\ntime_column = "t"\nvoltage_column = "u"\nclock_offset = "0.35(1) s"'
    bench = load_bench(write_bench(tmp_path, ('source = "list"', keys)))
    folder = tmp_path / "results" / "clip.fallrise"
    told = json.loads(json.dumps(bench_json(bench, folder)))["log"]
    assert told["path"] == "../../voltage.csv"
    assert told["sha256"] == hashlib.sha256(log.read_bytes()).hexdigest()
    assert (told["time_column"], told["voltage_column"]) == ("t", "u")
    assert told["clock_offset"] == {
        "value": 0.35,
        "std": 0.01,
        "unit": "s",
        "origin": "bench.toml: field.clock_offset",
    }
    assert bench_json(load_bench(write_bench(tmp_path)), tmp_path)["log"] is None
