"""Bench files for tests, in an invented laboratory."""

from __future__ import annotations

from pathlib import Path

BENCH = """\
[bench]
name = "Halden Quay Aerosol Laboratory, bench A"
[cell]
plate_gap = "6.00(2) mm"
voltage = "260.0(5) V"
[oil]
density = "886(1) kg/m^3"
[air]
temperature = "22.0(3) degC"
pressure = "1008(1) hPa"
[site]
gravity = "9.8100(2) m/s^2"
[camera]
metres_per_pixel = "3.000(3) um"
exposure = "20 ms"
[field]
source = "list"
list = [["0 s", "0 V"], ["2 s", "260 V"], ["4.4 s", "0 V"]]
"""


def write_bench(folder: Path, *changes: tuple[str, str], name: str = "bench.toml") -> Path:
    """Write the bench file with some texts replaced; each must be there."""
    text = BENCH
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path
