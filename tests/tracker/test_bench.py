"""Bench files: values in SI with uncertainties, and one clear line for each mistake."""

from __future__ import annotations

import json
import os
import pickle

import pytest
from bench_files import write_bench

from calibration.scale import Scale, write_scale
from physics.site import NORMAL_GRAVITY_STD
from tracker.bench import load_bench
from tracker.errors import BenchError


def test_values_are_si_with_their_uncertainty_and_origin(tmp_path):
    """Every quantity arrives in SI with the uncertainty of its brackets and the key it came from."""
    bench = load_bench(write_bench(tmp_path))
    assert (bench.plate_gap.value, bench.plate_gap.std) == pytest.approx((6e-3, 2e-5))
    assert (bench.temperature.value, bench.temperature.std) == pytest.approx((295.15, 0.3))
    assert bench.plate_gap.origin == "bench.toml: cell.plate_gap"
    assert bench.relative_humidity.origin == "default"
    assert bench.name == "Halden Quay Aerosol Laboratory, bench A"
    # ISO 15900 reference 1.83245e-5 Pa s at 296.15 K, S = 110.4 K, Sutherland; 67.3 nm at 101325 Pa.
    assert bench.viscosity.value == pytest.approx(1.827672e-5, rel=1e-6)
    assert bench.mean_free_path.value == pytest.approx(6.73601e-8, rel=1e-5)


def test_a_recording_overrides_single_keys(tmp_path):
    """The recording's own file changes the keys it names and no other, and is named as their origin."""
    write_bench(tmp_path)
    clip = tmp_path / "clip.mp4"
    clip.touch()
    (tmp_path / "clip.toml").write_text('[air]\ntemperature = "25.0(1) degC"\n')
    bench = load_bench(recording=clip)
    assert bench.temperature.value == pytest.approx(298.15)
    assert bench.temperature.origin == "clip.toml: air.temperature"
    assert bench.plate_gap.origin == "bench.toml: cell.plate_gap"


def test_the_nearest_bench_above_is_taken(tmp_path):
    """A bench file in a nearer folder wins over one further up."""
    write_bench(tmp_path)
    week = tmp_path / "week 1" / "bench B"
    week.mkdir(parents=True)
    write_bench(week.parent, ('"6.00(2) mm"', '"5.00(2) mm"'))
    bench = load_bench(recording=week / "clip.mp4")
    assert bench.plate_gap.value == pytest.approx(5e-3)


def test_a_field_on_voltage_carries_one_relative_uncertainty(tmp_path):
    """The list's own bracket wins over that of cell.voltage, which otherwise holds for every voltage."""
    assert load_bench(write_bench(tmp_path)).voltage_rel_std == pytest.approx(0.5 / 260)
    own = write_bench(tmp_path, ('"2 s", "260 V"', '"2 s", "260(1) V"'))
    assert load_bench(own).voltage_rel_std == pytest.approx(1 / 260)


def test_a_list_that_is_only_compared_does_not_say_how_well_the_voltage_is_known(tmp_path):
    """With the lamp as source the voltage is cell.voltage, and so is its uncertainty."""
    both = write_bench(
        tmp_path, ('"2 s", "260 V"', '"2 s", "260(10) V"'),
        ('source = "list"', 'source = "lamp"\nlamp = [8, 8, 16, 16]'),
    )  # fmt: skip
    assert load_bench(both).voltage_rel_std == pytest.approx(0.5 / 260)


def test_oil_is_brought_to_the_temperature_of_the_air(tmp_path):
    """Density falls by the stated expansion between its own temperature and the air's."""
    extra = 'density = "886(1) kg/m^3"\ndensity_temperature = "20 degC"\nexpansion = "7e-4 1/K"'
    bench = load_bench(write_bench(tmp_path, ('density = "886(1) kg/m^3"', extra)))
    # 2 K at 7e-4 /K is 0.14 %; the two usual forms of the law, rho (1 - a dT) and rho / (1 + a dT), differ by 2e-6.
    assert bench.oil_density.value == pytest.approx(886 * (1 - 7e-4 * 2), rel=3e-6)


def test_the_expansion_is_kept_where_it_was_used(tmp_path):
    """A density stated at the air's temperature does not follow it; one that was brought there does."""
    assert load_bench(write_bench(tmp_path)).oil_expansion == 0.0
    extra = 'density = "886(1) kg/m^3"\ndensity_temperature = "20 degC"\nexpansion = "7e-4 1/K"'
    bench = load_bench(write_bench(tmp_path, ('density = "886(1) kg/m^3"', extra)))
    assert bench.oil_expansion == pytest.approx(7e-4)


def test_gravity_from_latitude_and_altitude(tmp_path):
    """Gravity follows from the place.

    Source: WGS 84 normal gravity at 51.5 degrees is 9.81203358 m/s^2; free air -3.086e-6 /s^2 per m.
    """
    place = 'latitude = "51.5 deg"\naltitude = "80 m"'
    bench = load_bench(write_bench(tmp_path, ('gravity = "9.8100(2) m/s^2"', place)))
    assert bench.gravity.value == pytest.approx(9.81203358 - 80 * 3.086e-6, abs=2e-6)
    assert bench.gravity.std == NORMAL_GRAVITY_STD


MISTAKES = {
    "misspelt key": (("plate_gap", "plate_gab"), "cell.plate_gab", "plate_gap"),
    "missing key": (('plate_gap = "6.00(2) mm"\n', ""), "cell.plate_gap", "6.00(2) mm"),
    "missing unit": (('"6.00(2) mm"', '"6.00(2)"'), "cell.plate_gap", "6.00(2)"),
    "number without quotes": (('"6.00(2) mm"', "6.0"), "cell.plate_gap", "6.0"),
    "wrong dimension": (('"6.00(2) mm"', '"6 V"'), "cell.plate_gap", "6 V"),
    "zero gap": (('"6.00(2) mm"', '"0 mm"'), "cell.plate_gap", "0 mm"),
    "negative gap": (('"6.00(2) mm"', '"-6 mm"'), "cell.plate_gap", "-6 mm"),
    "absolute zero": (('"22.0(3) degC"', '"-273.15 degC"'), "air.temperature", "-273.15 degC"),
    "kelvin typed as celsius": (('"22.0(3) degC"', '"295 degC"'), "air.temperature", "295 degC"),
    "density too far from the air's temperature": (
        ('"886(1) kg/m^3"', '"886(1) kg/m^3"\ndensity_temperature = "90 degC"\nexpansion = "7e-4 1/K"'),
        "oil.density_temperature", "within 60 K",
    ),
    "density below air": (('"886(1) kg/m^3"', '"0.9 kg/m^3"'), "oil.density", "0.9 kg/m^3"),
    "humidity above one": (
        ('pressure = "1008(1) hPa"', 'pressure = "1008(1) hPa"\nrelative_humidity = "120 percent"'),
        "air.relative_humidity", "120 percent",
    ),
    "unknown slip": (('[site]', 'slip = "kim2050"\n[site]'), "air.slip", "kim2050"),
    "unknown source": (('source = "list"', 'source = "lists"'), "field.source", "lists"),
    "list going back": (('"4.4 s", "0 V"', '"1 s", "0 V"'), "field.list", "increas"),
    "missing log": (('source = "list"', 'source = "log"'), "field.log", "log"),
    "lamp without rectangle": (('source = "list"', 'source = "lamp"'), "field.lamp", "lamp"),
    "motion without voltage": (
        ('voltage = "260.0(5) V"\n[oil]', '[oil]'), "cell.voltage", "motion",
    ),
    "no scale": (('metres_per_pixel = "3.000(3) um"\n', ""), "camera.scale", "metres_per_pixel"),
    "scale file missing": (('metres_per_pixel = "3.000(3) um"', 'scale = "scale.json"'), "camera.scale", "scale.json"),
    "unknown section": (("[cell]", "[cells]"), "cells", "cell"),
}  # fmt: skip


@pytest.mark.parametrize("case", MISTAKES)
def test_a_mistake_is_one_line_with_file_key_and_what_is_allowed(tmp_path, case):
    """The error names the file, the key, what was read or is wanted, in one line, and stands for exit status 2."""
    change, key, words = MISTAKES[case]
    changes = (
        [change, ('source = "list"', 'source = "motion"')] if case == "motion without voltage" else [change]
    )
    path = write_bench(tmp_path, *changes)
    with pytest.raises(BenchError) as caught:
        load_bench(path)
    text = str(caught.value)
    assert str(path) in text
    assert key in text
    assert words in text
    assert "\n" not in text
    assert caught.value.exit_status == 2
    assert str(pickle.loads(pickle.dumps(caught.value))) == text


def test_no_bench_file_is_told_with_what_to_do(tmp_path):
    """Without a bench file the message names the recording and the option."""
    with pytest.raises(BenchError, match="--bench"):
        load_bench(recording=tmp_path / "clip.mp4")


def test_an_own_file_without_a_bench_file_is_told(tmp_path):
    """A recording's own file is no bench file: the message names it and says where a bench file belongs."""
    (tmp_path / "clip.toml").write_text('[air]\ntemperature = "25.0(1) degC"\n')
    with pytest.raises(
        BenchError, match=r"clip\.mp4: read no bench file \(clip\.toml .* a bench\.toml beside"
    ):
        load_bench(recording=tmp_path / "clip.mp4")


def test_a_damaged_bench_file_is_told(tmp_path):
    """What is no TOML, or no text, is one line with the place of the mistake."""
    path = tmp_path / "bench.toml"
    path.write_text("[cell\n")
    with pytest.raises(BenchError, match=r"line 1"):
        load_bench(path)
    path.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(BenchError, match="UTF-8"):
        load_bench(path)


def test_of_several_scales_the_one_before_the_recording_is_taken(tmp_path):
    """A scale holds from the date of its picture until the next one."""
    write_bench(tmp_path, ('metres_per_pixel = "3.000(3) um"\n', ""))
    for name, date, size in (("scale_a.json", "2026-01-10", 3.0e-6), ("scale_b.json", "2026-03-10", 3.1e-6)):
        scale = Scale.from_metres_per_pixel(size, 1e-9)
        write_scale(scale, tmp_path / name)
        content = json.loads((tmp_path / name).read_text())
        (tmp_path / name).write_text(json.dumps({**content, "date": f"{date}T12:00:00+00:00"}))
    clip = tmp_path / "clip.mp4"
    clip.touch()
    for day, size in ((1_769_000_000, 3.0e-6), (1_774_000_000, 3.1e-6), (1_700_000_000, 3.0e-6)):
        os.utime(clip, (day, day))
        assert load_bench(recording=clip).scale.metres_per_pixel_x == size


def test_the_digest_follows_values_and_not_places(tmp_path):
    """Two copies of one bench agree; a changed value does not."""
    (tmp_path / "other").mkdir()
    a, b = load_bench(write_bench(tmp_path)), load_bench(write_bench(tmp_path / "other"))
    changed = load_bench(write_bench(tmp_path, ('"886(1) kg/m^3"', '"887(1) kg/m^3"')))
    assert a.digest == b.digest != changed.digest
