"""The bench from the page's small form: text with units in, `bench.toml` out, every error beside its field."""

from __future__ import annotations

import json
import re
import tomllib
from collections.abc import Mapping
from pathlib import PurePosixPath
from typing import Any

from calibration.errors import QuantityError
from calibration.quantity import parse_quantity
from tracker.benchfile import QUANTITIES

MAX_TEXT = 200  # characters of one value
REQUIRED = ("cell.plate_gap", "oil.density", "air.temperature", "air.pressure")
_ENTRY = re.compile(r"^\s*(\S+\s*[A-Za-z]+)\s+(\S+\s*[A-Za-z]+)\s*$")
_SOURCES = ("list", "log", "lamp", "motion")


class Fault(dict[str, str]):
    """One field of the form and what is wrong with it: `key` and `message`."""

    def __init__(self, key: str, message: str) -> None:
        super().__init__(key=key, message=message)


def read_form(values: Mapping[str, Any], *, has_scale: bool, has_log: bool) -> tuple[str, list[Fault]]:
    """Turn the fields of the form into a bench file.

    Parameters
    ----------
    values : mapping of str to str
        Dotted key of the bench file -> what was typed; empty fields are left out.
    has_scale : bool
        Whether a reference picture or a scale file gives the scale.
    has_log : bool
        Whether a voltage log was sent; it lies beside the bench file as ``voltage.csv``.

    Returns
    -------
    text : str
        TOML; of use only without faults.
    faults : list of Fault
        All that is wrong, not only the first.
    """
    faults: list[Fault] = []
    given: dict[str, str] = {}
    for key, value in values.items():
        if not isinstance(value, str) or len(value) > MAX_TEXT:
            faults.append(Fault(str(key)[:40], f"must be a text of at most {MAX_TEXT} characters"))
        elif value.strip():
            given[key] = value.strip()
    faults += [fault for key, text in given.items() if (fault := _check(key, text)) is not None]
    faults += [Fault(key, f"Missing: {QUANTITIES[key][3]}") for key in REQUIRED if key not in given]
    if not has_scale and "camera.metres_per_pixel" not in given:
        faults.append(Fault("camera.metres_per_pixel", "Missing: type it, or drop a reference picture"))
    if "site.gravity" not in given:
        faults.append(Fault("site.gravity", f"Missing: {QUANTITIES['site.gravity'][3]}"))
    field, wrong = _field(given, has_log=has_log)
    return _toml(given, field), faults + wrong


def check_pitch(text: str) -> list[Fault]:
    """Check the spacing of the reference pattern.

    Parameters
    ----------
    text : str
        As typed.

    Returns
    -------
    faults : list of Fault
        Empty if it is a length above 0.
    """
    words = 'a length such as "0.1(0) mm", up to 100 mm'
    if not text.strip():
        return [Fault("scale.pitch", f"Missing: {words}")]
    try:
        value, _ = parse_quantity(text, "m")
    except QuantityError as error:
        return [Fault("scale.pitch", f"{text!r} must be {words}{_why(error)}")]
    return [] if 0 < value < 0.1 else [Fault("scale.pitch", f"{text!r} must be {words}")]


def _check(key: str, text: str) -> Fault | None:
    """Check one quantity; keys of the field and the pattern are looked at elsewhere."""
    if key in ("scale.pitch", "scale.pattern", "field.source", "field.list", "field.lamp"):
        return None
    if key not in QUANTITIES:
        return Fault(key, "is not a field of this form")
    if text == "auto" and key in ("field.clock_offset", "camera.down"):
        return None
    unit, low, high, words = QUANTITIES[key]
    try:
        value, _ = parse_quantity(text, unit)
    except QuantityError as error:
        return Fault(key, f"{text!r} must be {words}" + _why(error))
    return None if low <= value <= high else Fault(key, f"{text!r} is out of range; it must be {words}")


def _why(error: QuantityError) -> str:
    """The part of the problem that the allowed form does not say by itself."""
    return "" if "dimension" in error.problem else f" ({error.problem})"


def _field(given: Mapping[str, str], *, has_log: bool) -> tuple[dict[str, Any], list[Fault]]:
    """The section on the field, by its source."""
    source = given.get("field.source", "list")
    section: dict[str, Any] = {"source": source}
    if source not in _SOURCES:
        return {}, [Fault("field.source", f"must be one of {', '.join(_SOURCES)}")]
    faults: list[Fault] = []
    if source == "list":
        section["list"], faults = _entries(given.get("field.list", ""))
    if source == "log":
        section |= {"log": "voltage.csv", "clock_offset": given.get("field.clock_offset", "auto")}
        faults = [] if has_log else [Fault("field.source", "the log is missing: drop its CSV file")]
    if source == "lamp":
        numbers = [int(part) for part in re.findall(r"\d+", given.get("field.lamp", ""))]
        section["lamp"] = numbers
        wrong = Fault("field.lamp", "must be x y width height in px: 8 8 16 16")
        faults = [] if len(numbers) == 4 else [wrong]
    if source in ("lamp", "motion") and "cell.voltage" not in given:
        faults = [*faults, Fault("cell.voltage", f"Missing: the {source} tells only on from off")]
    return section, faults


def _entries(text: str) -> tuple[list[list[str]], list[Fault]]:
    """Read ``0 s 0 V, 2 s 260 V``."""
    words = "times and voltages such as 0 s 0 V, 2 s 260 V"
    entries = []
    for part in filter(str.strip, re.split(r"[,;\n]", text)):
        match = _ENTRY.match(part)
        if match is None:
            return [], [Fault("field.list", f"{part.strip()!r} must be {words}")]
        for quantity, unit in zip(match.groups(), ("s", "V"), strict=True):
            try:
                parse_quantity(quantity, unit)
            except QuantityError as error:
                return [], [Fault("field.list", f"{part.strip()!r}: {error.problem}")]
        entries.append(list(match.groups()))
    return (entries, []) if entries else ([], [Fault("field.list", f"Missing: {words}")])


def _toml(given: Mapping[str, str], field: Mapping[str, Any]) -> str:
    """Write the sections; a JSON text in ASCII is a TOML text too."""
    sections: dict[str, dict[str, Any]] = {name: {} for name in ("cell", "oil", "air", "site", "camera")}
    for key, text in given.items():
        section, _, name = key.partition(".")
        if section in sections:
            sections[section][name] = text
    sections["field"] = dict(field)
    lines = []
    for name, keys in sections.items():
        lines.append(f"[{name}]")
        lines += [f"{key} = {json.dumps(value)}" for key, value in keys.items()]
    return "\n".join(lines) + "\n"


def companions(text: str) -> dict[str, str]:
    """Names that a bench file gives to the files beside it.

    Parameters
    ----------
    text : str
        A bench file.

    Returns
    -------
    names : dict
        ``log`` and ``scale``, where the file names them.

    Raises
    ------
    ValueError
        If it is no TOML, or a name is not that of a file in the same folder.
    """
    parsed = tomllib.loads(text)
    found = {}
    for role, section, key in (("log", "field", "log"), ("scale", "camera", "scale")):
        part = parsed.get(section)
        name = part.get(key) if isinstance(part, dict) else None
        if name is None:
            continue
        if not isinstance(name, str) or not _is_leaf(name):
            raise ValueError(f"{section}.{key} must be the name of a file beside the bench file")
        found[role] = name
    return found


def _is_leaf(name: str) -> bool:
    """Whether a name is a plain file name on any system."""
    safe = re.fullmatch(r"[A-Za-z0-9_][A-Za-z0-9_. -]{0,80}", name) is not None
    return safe and PurePosixPath(name).name == name and ".." not in name
