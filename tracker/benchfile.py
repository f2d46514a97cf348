"""The text of a bench file: found, read, merged with a recording's own keys, and checked key by key."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from calibration.errors import QuantityError
from calibration.quantity import parse_quantity
from tracker.errors import BenchError
from tracker.records import Measured

BENCH_NAME = "bench.toml"

# Key -> (unit inside, lowest, highest, words). Bounds are those of a droplet bench, wide enough for any that exists.
QUANTITIES: Mapping[str, tuple[str, float, float, str]] = {
    "cell.plate_gap": ("m", 1e-5, 1.0, 'a length such as "6.00(2) mm", 10 um to 1 m'),
    "cell.voltage": ("V", -1e5, 1e5, 'a voltage such as "260.0(5) V", not 0'),
    "oil.density": ("kg/m^3", 300.0, 3e4, 'a density far above air, such as "886(1) kg/m^3", 300 to 30000'),
    "oil.density_temperature": ("K", 200.0, 400.0, 'a temperature such as "20 degC"'),
    "oil.expansion": ("1/K", 0.0, 5e-3, 'an expansion such as "7e-4 1/K"'),
    "air.temperature": ("K", 273.15, 323.15, 'a temperature such as "22.0(3) degC", 0 to 50 degC'),
    "air.pressure": ("Pa", 1e4, 1.1e5, 'a pressure such as "1008(1) hPa", 100 to 1100 hPa'),
    "air.relative_humidity": ("", 0.0, 1.0, 'a share such as "45(5) percent", 0 to 100 percent'),
    "air.viscosity": ("Pa s", 1e-6, 1e-4, 'a viscosity such as "1.83e-5 Pa s"'),
    "site.gravity": ("m/s^2", 9.5, 10.0, 'an acceleration such as "9.8100(2) m/s^2", 9.5 to 10 m/s^2'),
    "site.latitude": ("deg", -90.0, 90.0, 'a latitude such as "51.5 deg"'),
    "site.altitude": ("m", -500.0, 9000.0, 'an altitude such as "80 m"'),
    "camera.metres_per_pixel": ("m", 1e-9, 1e-3, 'a length such as "2.980(5) um"'),
    "camera.exposure": ("s", 1e-6, 10.0, 'a time such as "20 ms"'),
    "camera.frame_rate": ("Hz", 1e-3, 1e5, 'a rate such as "25 Hz"'),
    "camera.down": ("deg", -180.0, 180.0, '"auto" or an angle such as "1.5 deg"'),
    "field.clock_offset": ("s", -1e9, 1e9, '"auto" or a time such as "0.35 s"'),
}


def find_bench(recording: Path) -> Path | None:
    """Find the bench file of a recording: beside it or in the nearest folder above.

    Parameters
    ----------
    recording : Path
        File or folder of pictures.

    Returns
    -------
    bench : Path or None
        None if no folder up to the root holds a ``bench.toml``.
    """
    for folder in recording.absolute().parents:
        candidate = folder / BENCH_NAME
        if candidate.is_file():
            return candidate
    return None


def own_file(recording: Path) -> Path:
    """Name the file that overrides single keys of the bench for one recording.

    Parameters
    ----------
    recording : Path
        File or folder of pictures.

    Returns
    -------
    own : Path
        ``STEM.toml`` beside it, whether it exists or not.
    """
    return recording.parent / f"{recording.stem if recording.suffix else recording.name}.toml"


def bench_text(bench: Path | str | None, *, recording: Path | None = None) -> dict[str, Any]:
    """Read bench file and override as plain merged keys, without checking values.

    Parameters
    ----------
    bench : Path, str or None
        The bench file; None: found from the recording's place.
    recording : Path, optional
        Its ``STEM.toml`` overrides single keys.

    Returns
    -------
    keys : dict
        Sections of keys; each leaf is a tuple (value, file it came from); ``""`` holds the files read.

    Raises
    ------
    BenchError
        If there is no bench file, or one is no TOML.
    """
    own = None if recording is None else own_file(recording)
    main = Path(bench) if bench is not None else (find_bench(recording) if recording else None)
    if main is None:
        beside = (
            f" ({own.name} beside it only changes keys of one)" if own is not None and own.is_file() else ""
        )
        raise BenchError(str(recording or BENCH_NAME), "", f"no bench file{beside}",
                         f"a {BENCH_NAME} beside the recording or in a folder above, with what all recordings there "
                         "share, or --bench FILE")  # fmt: skip
    files = [main]
    if own is not None and own.is_file() and own.absolute() != main.absolute():
        files.append(own)
    merged: dict[str, Any] = {"": files}
    for file in files:
        for section, keys in _read_toml(file).items():
            if not isinstance(keys, dict):
                raise BenchError(str(file), section, repr(keys), f"a section: [{section}]")
            merged.setdefault(section, {}).update({key: (value, file) for key, value in keys.items()})
    return merged


def _read_toml(file: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(file.read_text(encoding="utf-8"))
    except FileNotFoundError as error:
        raise BenchError(str(file), "", "no such file", "an existing bench file") from error
    except (OSError, UnicodeDecodeError) as error:
        raise BenchError(str(file), "", f"{error}", "a readable text file in UTF-8") from error
    except tomllib.TOMLDecodeError as error:
        raise BenchError(
            str(file), "", f"no TOML: {error}", 'lines such as plate_gap = "6.00(2) mm"'
        ) from error


class Keys:
    """Read access to merged keys: values as `Measured`, errors with the file that the key came from."""

    def __init__(self, merged: dict[str, Any]) -> None:
        self.files: list[Path] = merged[""]
        self.sections = {name: keys for name, keys in merged.items() if name}

    def raw(self, dotted: str) -> Any:
        """Value as TOML has it; None if the key is absent."""
        section, key = dotted.split(".")
        return self.sections.get(section, {}).get(key, (None, None))[0]

    def file(self, dotted: str) -> Path:
        """File that the key came from, or the bench file."""
        section, _, key = dotted.partition(".")
        found = self.sections.get(section, {}).get(key, (None, None))[1]
        return Path(found) if found is not None else self.files[0]

    def origin(self, dotted: str, default: str = "") -> str:
        """Words for where the key came from; `default` if it is absent."""
        return f"{self.file(dotted).name}: {dotted}" if self.raw(dotted) is not None else default

    def error(self, dotted: str, found: object, allowed: str) -> BenchError:
        """Error that names the key's own file."""
        return BenchError(str(self.file(dotted)), dotted, str(found), allowed)

    def check_shape(self) -> None:
        """Let pydantic look at names and types; its first complaint becomes a `BenchError`."""
        from pydantic import ValidationError

        from tracker.benchshape import BenchFile

        plain = {s: {k: _tuples(v[0]) for k, v in keys.items()} for s, keys in self.sections.items()}
        try:
            BenchFile.model_validate(plain)
        except ValidationError as error:
            first = min(error.errors(), key=lambda e: e["type"] != "extra_forbidden")
            dotted = ".".join(str(part) for part in first["loc"][:2])
            raise self._explain(dotted, first) from None

    def _explain(self, dotted: str, complaint: Mapping[str, Any]) -> BenchError:
        if complaint["type"] == "extra_forbidden":
            section = dotted.split(".", maxsplit=1)[0]
            names = ", ".join(_names(section if "." in dotted else ""))
            return self.error(dotted, "an unknown key", f"one of {names}")
        if complaint["type"] == "missing":
            words = QUANTITIES[dotted][3] if dotted in QUANTITIES else f"a section [{dotted}] with its keys"
            return self.error(dotted, "nothing", words)
        allowed = str(complaint.get("ctx", {}).get("expected", complaint["msg"]))
        words = QUANTITIES[dotted][3] if dotted in QUANTITIES else allowed
        return self.error(dotted, repr(complaint["input"]), words)

    def measured(self, dotted: str) -> Measured | None:
        """One quantity, or None if the key is absent."""
        text = self.raw(dotted)
        if text is None:
            return None
        unit, low, high, words = QUANTITIES[dotted]
        try:
            value, std = parse_quantity(text, unit)
        except QuantityError as error:
            raise self.error(dotted, f"{text!r} ({error.problem})", words) from error
        if not low <= value <= high or (dotted == "cell.voltage" and value == 0):
            raise self.error(dotted, repr(text), words)
        return Measured(value, std, self.origin(dotted))

    def required(self, dotted: str) -> Measured:
        """One quantity that must be there."""
        value = self.measured(dotted)
        if value is None:
            raise self.error(dotted, "nothing", QUANTITIES[dotted][3])
        return value


def _tuples(value: Any) -> Any:
    return tuple(_tuples(item) for item in value) if isinstance(value, list) else value


def _names(section: str) -> list[str]:
    """Names that a section, or the whole file, allows."""
    from tracker.benchshape import BenchFile

    fields = BenchFile.model_fields
    if section not in fields:
        return sorted((*fields, "bench"))
    model = fields[section].annotation
    return sorted(model.model_fields) if model is not None and hasattr(model, "model_fields") else []
