"""Pooling of results: the unit over benches, what it says of each, and what is written."""

from __future__ import annotations

import json
import os
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from made_results import BENCH, made_bench, made_result

from physics.quanta import ELEMENTARY_CHARGE
from tracker.bench import load_bench
from tracker.cli import main
from tracker.errors import UsageError
from tracker.keeping.store import read_result, write_result
from tracker.showing.units import HIGHEST_NUMBER, ChargeGroup, draw_charges
from tracker.term.pool import find_results, pool_results
from tracker.term.poolcharges import charge_pairs, charge_steps, kept_droplets, own_radius_stds, shared_inputs
from tracker.term.poolfiles import charge_groups, pool_text, write_pool

E = ELEMENTARY_CHARGE


def make_term(root, factors, *, results=3, seed=1, **options):
    """One bench for each factor, with a few results each."""
    rng = np.random.default_rng(seed)
    for name, factor in factors.items():
        bench = made_bench(root / name)
        for i in range(results):
            made_result(root / name / f"clip{i}.fallrise", bench, rng, factor=factor, **options)
    return root


def test_bench_with_a_wrong_scale_is_named_with_the_size_of_its_error(tmp_path):
    """A scale stated 1.5 % too large moves charges by 2.4 %; the pool names the bench, and the error within its std.

    d ln q / d ln scale is 1.6 for droplets of 0.6 um (closed form, continuum limit 1.5).
    """
    pool = pool_results([make_term(tmp_path, {"bench A": 1.001, "bench B": 1.015**1.6, "bench C": 0.998})])
    assert pool.unit.resolved
    by_label = {bench.label: bench for bench in pool.benches}
    wrong = by_label["bench B"]
    error, std = wrong.errors["scale"]
    # The shared uncertainty, 0.7 %, is of all inputs and the same for all benches here; the own one is 0.2 %.
    assert error == pytest.approx(0.015, abs=3 * wrong.ratio_own_std / 1.6)
    assert 0.001 < std < 0.01
    assert "a scale stated 1." in wrong.sentence
    assert "too large" in wrong.sentence
    assert "a voltage stated" in wrong.sentence
    for label in ("bench A", "bench C"):
        assert by_label[label].ratio == pytest.approx(1.0, abs=0.01)
        assert not by_label[label].left_out


@pytest.mark.parametrize(("factor", "side"), [(1.03, "large"), (0.97, "small")])
def test_errors_have_the_sign_of_the_stated_value(tmp_path, factor, side):
    """Charges that come out too large mean a gap or viscosity stated too large, or a voltage stated too small."""
    bench = pool_results([make_term(tmp_path, {"bench A": factor}, results=4)]).benches[0]
    other = "small" if side == "large" else "large"
    for name in ("scale", "plate_gap", "viscosity_model"):
        assert (bench.errors[name][0] > 0) == (side == "large")
    assert (bench.errors["voltage"][0] > 0) == (other == "large")
    assert bench.errors["plate_gap"][0] == pytest.approx(bench.ratio - 1, rel=1e-6)
    assert bench.errors["voltage"][0] == pytest.approx(1 / bench.ratio - 1, rel=1e-6)


def test_bench_that_cannot_stand_alone_is_measured_by_the_unit_of_all(tmp_path):
    """Nine droplets resolve nothing, but with the other benches' unit they tell their own bench's ratio."""
    make_term(tmp_path, {"bench A": 1.0, "bench B": 1.0})
    small = made_bench(tmp_path / "small")
    made_result(
        tmp_path / "small" / "clip.fallrise", small, np.random.default_rng(5), droplets=9, factor=1.008
    )
    last = pool_results([tmp_path]).benches[-1]
    assert not last.unit.resolved
    assert last.from_pool
    assert "given the unit of all benches" in last.sentence
    assert last.ratio == pytest.approx(1.008, abs=4 * last.ratio_own_std)
    assert last.ratio_own_std < 0.01


def test_models_of_all_benches_do_not_average_out(tmp_path):
    """Viscosity and slip err alike on every bench: two benches are hardly better than one; a stated viscosity is."""
    one = pool_results([make_term(tmp_path / "one", {"bench A": 1.0})])
    four = pool_results([make_term(tmp_path / "four", {f"bench {name}": 1.0 for name in "ABCD"})])
    stated = BENCH.replace("pressure = ", 'viscosity = "1.83(1)e-5 Pa s"\npressure = ')
    rng = np.random.default_rng(3)
    for name in "ABCD":
        bench = made_bench(tmp_path / "stated" / name, text=stated)
        made_result(tmp_path / "stated" / name / "clip.fallrise", bench, rng, droplets=60)
    own = pool_results([tmp_path / "stated"])
    relative = [pool.unit.unit_shared_std / pool.unit.unit for pool in (one, four, own)]
    assert relative[0] == pytest.approx(0.012, rel=1e-6)  # as the results state it
    # Models: 0.55 % slip and 0.42 % viscosity of 1.2 %; the rest, 0.98 %, halves with four benches.
    assert relative[1] == pytest.approx(np.hypot(0.0069, 0.0098 / 2), rel=0.03)
    assert relative[2] == pytest.approx(np.hypot(0.0055, 0.0107 / 2), rel=0.03)


def test_one_slide_used_on_all_benches_does_not_average_out(tmp_path):
    """The tolerance of one reference slide stays whole over four benches; four different slides halve it.

    d ln q / d ln scale is 1.6 at 0.6 um, so a tolerance of 1.0 % of the pitch is 1.6 % of each charge.
    """
    rng = np.random.default_rng(4)
    relative = {}
    for kind, pitches in (("one slide", [1e-4] * 4), ("four slides", [1e-4, 5e-5, 2e-4, 1e-3])):
        for name, pitch in zip("ABCD", pitches, strict=True):
            bench = made_bench(tmp_path / kind / name)
            made_result(tmp_path / kind / name / "clip.fallrise", bench, rng, droplets=60, shared=0.02)
            told = tmp_path / kind / name / "clip.fallrise" / "recording.json"
            recording = json.loads(told.read_text())
            recording["scale"] |= {
                "pitch_m": pitch,
                "pitch_std_m": 0.01 * pitch,
                "metres_per_pixel_y_std": 3e-8,
            }
            told.write_text(json.dumps(recording))
        unit = pool_results([tmp_path / kind]).unit
        relative[kind] = unit.unit_shared_std / unit.unit
    # Models of viscosity and slip, 0.69 %, are common either way; 0.02 is what the results state in all.
    rest = 0.02**2 - 0.0069**2
    assert relative["four slides"] == pytest.approx(np.sqrt(0.0069**2 + rest / 4), rel=0.04)
    assert relative["one slide"] == pytest.approx(
        np.sqrt(0.0069**2 + 0.016**2 + (rest - 0.016**2) / 4), rel=0.04
    )


def test_steps_help_and_only_kept_droplets_count(tmp_path):
    """Rejected droplets are left out, changes of charge count as charges of their own with the radius part on top."""
    bench = made_bench(tmp_path)
    result = made_result(
        tmp_path / "clip.fallrise", bench, np.random.default_rng(6), droplets=20, rejected=4, steps=6
    )
    kept = kept_droplets(result.droplets)
    assert len(kept) == 16
    change, std = charge_steps(result.changes, kept)
    assert len(change) == 6
    radius_part = 1.1 * 2e-9 / 6e-7 * np.abs(change)
    np.testing.assert_allclose(std, np.hypot(0.08 * E, radius_part), rtol=1e-9)
    # Where the result holds the own part of the radius, that counts: what all share moves no charge against another.
    own = own_radius_stds({"budget": {"log_radius_own_stds": {str(kept["droplet"].iloc[0]): 1e-3}}})
    told = kept_droplets(result.droplets, own)["rel_std"].to_numpy()
    np.testing.assert_allclose(told, [1.1e-3, *[1.1 * 2e-9 / 6e-7] * 15], rtol=1e-9)
    assert pool_results([tmp_path]).unit.droplets_used == 22


def test_stored_parts_of_a_changed_droplet_are_used_as_a_pair():
    """Where a result holds charges and covariance of all parts, the main one and its best known other are a pair."""
    kept = pd.DataFrame({"droplet": [3, 4], "charge_c": [5.0 * E, 2.0 * E]})
    cov = np.diag([0.2, 0.05, 0.04]) ** 2 * E**2
    recording = {
        "details": {"charge_parts": {"3": {"charge_c": [3 * E, 5 * E, None], "covariance_c2": cov.tolist()}}}
    }
    pairs = charge_pairs(recording, kept)
    assert list(pairs) == [3]
    np.testing.assert_allclose(pairs[3][0] / E, [5, 3])
    np.testing.assert_allclose(pairs[3][1] / E**2, np.diag([0.05, 0.2]) ** 2)


def test_recording_measured_twice_counts_once(tmp_path):
    """Two results of one recording are told by its hash."""
    make_term(tmp_path, {"bench A": 1.0}, results=1, droplets=30)
    import shutil

    shutil.copytree(tmp_path / "bench A" / "clip0.fallrise", tmp_path / "bench A" / "copy.fallrise")
    pool = pool_results([tmp_path])
    assert pool.unit.droplets_used == 30
    assert len(pool.skipped) == 1
    assert "same recording" in pool.skipped[0][1]


def test_better_result_of_a_recording_counts(tmp_path):
    """Of two results of one recording the one with more kept droplets counts, else the newer; the other is named."""
    rng = np.random.default_rng(8)
    bench = made_bench(tmp_path / "bench A")
    sets = (("a few", 20, 100), ("b most", 30, 50), ("c as many", 30, 40))
    for name, kept, written in sets:
        folder = tmp_path / "bench A" / f"{name}.fallrise"
        made = made_result(folder, bench, rng, droplets=30, rejected=30 - kept)
        write_result(replace(made, recording=made.recording | {"sha256": "ab" * 32}), folder)
        os.utime(folder / "recording.json", (written, written))
    pool = pool_results([tmp_path])
    assert pool.unit.droplets_used == 30
    assert pool.benches[0].results == (str(tmp_path / "bench A" / "b most.fallrise"),)
    left = dict(pool.skipped)
    assert set(left) == {str(tmp_path / "bench A" / f"{name}.fallrise") for name in ("a few", "c as many")}
    assert all("b most.fallrise, which counts" in why for why in left.values())
    assert f"left out {tmp_path / 'bench A' / 'a few.fallrise'}" in pool_text(pool)


def test_picture_shows_as_many_charges_as_are_counted(tmp_path):
    """A droplet that changed its charge is drawn as two, its first charge and the change, and the text says so."""
    rng = np.random.default_rng(3)
    bench = made_bench(tmp_path / "bench A")
    folder = tmp_path / "bench A" / "clip.fallrise"
    made = made_result(folder, bench, rng, droplets=30)
    main_charge = float(made.droplets["charge_c"][4])
    parts = {"charge_c": [main_charge, main_charge + E], "covariance_c2": np.diag([0.05 * E, 0.05 * E]) ** 2}
    parts["covariance_c2"] = parts["covariance_c2"].tolist()
    write_result(
        replace(made, recording=made.recording | {"details": {"charge_parts": {"4": parts}}}), folder
    )
    pool = pool_results([tmp_path])
    group = charge_groups(pool)[0]
    assert len(group.charge) == pool.unit.droplets_used == 31
    np.testing.assert_allclose(group.charge[-2:], [main_charge, E])
    np.testing.assert_allclose(group.own_std[-2:], [0.05 * E, np.sqrt(2) * 0.05 * E])
    assert "31 charges that can be told from 0; two from 1 droplet whose charge changed" in pool_text(pool)


def test_air_current_of_a_recording_is_shared_by_its_droplets(tmp_path):
    """An air current known to 2 % of the fall speed moves the charges of a recording by 1.2 %, of four by half."""
    made = []
    for count in (1, 4):
        bench = made_bench(tmp_path / str(count) / "bench A")
        rng = np.random.default_rng(9)
        for i in range(count):
            made_result(bench.parent / f"clip{i}.fallrise", bench, rng, droplets=60, air_std=0.02 * 4e-5)
        made.append(pool_results([tmp_path / str(count)]).unit)
    relative = [unit.unit_shared_std / unit.unit for unit in made]
    # The four recordings' weights differ by chance, a few per cent of the part.
    assert relative[0] == pytest.approx(np.hypot(0.012, 0.012), rel=1e-3)
    assert relative[1] == pytest.approx(np.hypot(0.012, 0.006), rel=0.02)


def test_damaged_result_is_left_out_and_told(tmp_path):
    """A folder whose table was cut does not stop the others."""
    make_term(tmp_path, {"bench A": 1.0}, results=2, droplets=30)
    table = tmp_path / "bench A" / "clip1.fallrise" / "droplets.csv"
    table.write_text(table.read_text()[:300])
    pool = pool_results([tmp_path])
    assert pool.unit.droplets_used == 30
    assert "clip1.fallrise" in pool.skipped[0][0]


def test_bench_without_a_kept_droplet_is_told(tmp_path):
    """A result in which everything was rejected gives an answer and no error."""
    bench = made_bench(tmp_path)
    made_result(tmp_path / "clip.fallrise", bench, np.random.default_rng(7), droplets=5, rejected=5)
    pool = pool_results([tmp_path])
    assert not pool.unit.resolved
    assert "no charge differs from 0" in pool_text(pool)
    write_pool(pool, tmp_path)


def test_inputs_read_from_provenance_are_those_of_the_bench(tmp_path):
    """The shared inputs that the pool reads back are those that the bench gave the measurement."""
    file = made_bench(tmp_path)
    made_result(tmp_path / "clip.fallrise", file, np.random.default_rng(8))
    expected = load_bench(file).shared_inputs
    found = shared_inputs(read_result(tmp_path / "clip.fallrise", tracks=False).recording)
    assert found.keys() == expected.keys()
    for name, measured in expected.items():
        assert found[name].value == pytest.approx(measured.value, rel=1e-12), name
        assert found[name].std == pytest.approx(measured.std, rel=1e-12, abs=1e-30), name


def test_written_files_hold_the_contract(tmp_path):
    """charge_unit.json has its keys, for each bench the same, null where nothing is resolved; the picture is one."""
    make_term(tmp_path / "term", {"bench A": 1.0}, results=1, droplets=8)
    table, picture = write_pool(pool_results([tmp_path / "term"]), tmp_path / "out")
    values = json.loads(table.read_text())
    keys = (
        "charge_unit_c",
        "charge_unit_std_c",
        "charge_unit_shared_std_c",
        "resolved",
        "reason",
        "droplets_used",
        "over_e",
    )
    for place in (values, values["benches"]["bench A"]):
        assert all(key in place for key in keys)
        assert place["resolved"] is False
        assert place["charge_unit_c"] is None
        assert place["rivals"]
    assert values["to_resolve"]["droplets"] > 8
    assert "more droplets" in values["reason"]
    assert picture.read_bytes().startswith(b"\x89PNG")


def test_command_pools_and_prints(tmp_path, capsys):
    """The command writes both files, prints the unit, and the JSON for machines is that of the file."""
    make_term(tmp_path / "term", {"bench A": 1.0}, results=3)
    with pytest.raises(SystemExit) as ended:
        main(["pool", str(tmp_path / "term"), "--out", str(tmp_path / "out")])
    assert ended.value.code == 0
    assert "charge unit 1.59" in capsys.readouterr().out
    with pytest.raises(SystemExit):
        main(["pool", str(tmp_path / "term"), "--out", str(tmp_path / "out"), "--json"])
    printed = json.loads(capsys.readouterr().out)
    assert printed == json.loads((tmp_path / "out" / "charge_unit.json").read_text())
    assert printed["over_e"] == pytest.approx(1.0, abs=0.01)


def test_folder_without_results_is_a_usage_error(tmp_path, capsys):
    """Naming a folder that holds no result ends with status 2 and one line."""
    with pytest.raises(UsageError):
        find_results([tmp_path])
    with pytest.raises(SystemExit) as ended:
        main(["pool", str(tmp_path)])
    assert ended.value.code == 2
    assert len(capsys.readouterr().err.splitlines()) == 1


def test_results_are_found_below_a_folder_and_drafts_are_not(tmp_path):
    """Any folder with provenance and droplets is a result, whatever its name; a draft that a crash left is none."""
    bench = made_bench(tmp_path)
    rng = np.random.default_rng(10)
    for name in ("a/clip.fallrise", "b/named by hand", "b/.clip.fallrise.x1.part"):
        made_result(tmp_path / name, bench, rng)
    found = find_results([tmp_path, tmp_path / "a" / "clip.fallrise"])
    assert [folder.relative_to(tmp_path).as_posix() for folder in found] == [
        "a/clip.fallrise",
        "b/named by hand",
    ]


def test_picture_names_its_axes_and_counts_what_it_leaves_out(tmp_path):
    """Charges above 30 units are left out of the picture and told; bench names are no mathematics."""
    from matplotlib.figure import Figure

    pool = pool_results([make_term(tmp_path, {"bench A": 1.0})])
    axes = Figure().subplots()
    charge = np.array([1.0, 2.0, HIGHEST_NUMBER + 5.0]) * E
    groups = [ChargeGroup(name, charge, np.full(3, 0.1 * E)) for name in ("bench $x_1$", "_B")]
    draw_charges(axes, groups, pool.unit)
    assert "2 above 30 left out" in axes.get_title()
    assert axes.get_ylabel() == "charge / unit"
    assert axes.get_xlabel()
    assert [text.get_text() for text in axes.get_legend().get_texts()] == [r"bench \$x_1\$", "B"]
