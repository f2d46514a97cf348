"""`bench.toml` -> `Bench`: all that is known of cell, oil, air, site, camera and field, in SI, with uncertainties.

The bench file lies beside the recording, in the nearest folder above it, or is named; `RECORDING_STEM.toml`
beside the recording overrides single keys. A wrong key is one line: file, key, what was read, what is allowed.
"""

from __future__ import annotations

import dataclasses
import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path

from calibration.errors import CalibrationError, QuantityError
from calibration.quantity import parse_quantity
from calibration.scale import Scale, fit_recording, read_scale
from physics.air import Air, moist_air
from physics.drag import slip_model
from physics.droplet import Conditions
from physics.errors import PhysicsError
from physics.oil import oil_density
from physics.site import NORMAL_GRAVITY_STD, local_gravity
from tracker.benchfile import QUANTITIES, Keys, bench_text
from tracker.records import Measured


@dataclass(frozen=True, slots=True)
class FieldSpec:
    """Where the voltage over time comes from, as the bench file says."""

    source: str  # list, log, lamp or motion
    entries: tuple[tuple[float, float], ...] = ()  # (time in s, voltage in V)
    log: Path | None = None
    time_column: str = "time_s"
    voltage_column: str = "voltage_v"
    time_unit: str = "s"  # or "iso" for time stamps
    voltage_unit: str = "V"
    clock_offset: Measured | None = None  # s; None: to be fitted
    lamp: tuple[int, int, int, int] | None = None  # x, y, width, height in px


@dataclass(frozen=True, slots=True)
class Bench:
    """One bench at the time of one recording."""

    name: str
    files: tuple[str, ...]  # that were read, the bench file first
    plate_gap: Measured  # m
    voltage: Measured | None  # V, of the field-on state
    oil_density: Measured  # kg/m^3, at the air's temperature
    oil_expansion: float  # 1/K, with which it was brought there; 0: it was not
    temperature: Measured  # K
    pressure: Measured  # Pa
    relative_humidity: Measured  # 0..1
    viscosity: Measured  # Pa s; std: of the model or of the stated value
    mean_free_path: Measured  # m
    air_density: Measured  # kg/m^3
    gravity: Measured  # m/s^2
    slip: str
    scale: Scale
    exposure: Measured | None  # s; None: half the frame interval for the field, the blur is fitted
    down_deg: float | None  # gravity in the picture, from straight down toward +x; None: from the motion
    frame_rate: float | None  # Hz, only for recordings without times
    binning: int | None  # of the recording against the scale's picture; None: not stated
    voltage_rel_std: float  # of every field-on voltage, whatever its source
    field: FieldSpec
    # where the values came from that are not `Measured`, by name; no part of the digest
    origins: Mapping[str, str] = dataclasses.field(default_factory=dict, repr=False)

    @property
    def conditions(self) -> Conditions:
        """The bench as the laws want it."""
        return Conditions(
            temperature=self.temperature.value, viscosity=self.viscosity.value,
            mean_free_path=self.mean_free_path.value, air_density=self.air_density.value,
            oil_density=self.oil_density.value, gravity=self.gravity.value,
            plate_gap=self.plate_gap.value, slip=self.slip,
        )  # fmt: skip

    @property
    def shared_inputs(self) -> dict[str, Measured]:
        """Inputs common to all droplets, under the names of `physics.budget.SHARED_INPUTS`.

        Values in SI; the models of viscosity and slip count as factors of value 1.
        """
        model = slip_model(self.slip)
        per_pixel = self.scale.metres_per_pixel_y
        listed = max((abs(v) for _, v in self.field.entries), default=0.0)
        voltage = (
            self.voltage.value if self.voltage is not None else listed or 1.0
        )  # never on: any value will do
        return {
            "scale": Measured(per_pixel, per_pixel * self.scale.relative_std, self.scale.picture or "stated"),
            "plate_gap": self.plate_gap,
            "voltage": Measured(abs(voltage), abs(voltage) * self.voltage_rel_std, "cell.voltage or field.list"),
            "temperature": self.temperature,
            "pressure": self.pressure,
            "relative_humidity": self.relative_humidity,
            "viscosity_model": Measured(1.0, self.viscosity.std / self.viscosity.value, self.viscosity.origin),
            "slip_model": Measured(1.0, model.std_rel, model.source),
            "oil_density": self.oil_density,
            "gravity": self.gravity,
        }  # fmt: skip

    def fitted_to(self, width: int, height: int) -> Bench:
        """Give the bench for a recording of a size, after comparing it with the scale's picture.

        Parameters
        ----------
        width, height : int
            Of the recording in px.

        Returns
        -------
        bench : Bench
            Its scale is that of the recording's own pixels.

        Raises
        ------
        ScaleError
            If the recording is binned or cropped and ``camera.binning`` does not say so.
        """
        return replace(
            self, scale=fit_recording(self.scale, width=width, height=height, binning=self.binning)
        )

    @property
    def digest(self) -> str:
        """Hash of every value that a result depends on; paths and names do not count."""
        plain = repr(replace(self, name="", files=(), field=replace(self.field, log=None)))
        log = self.field.log.read_bytes() if self.field.log is not None and self.field.log.is_file() else b""
        return hashlib.sha256(plain.encode() + log).hexdigest()


def load_bench(bench: Path | str | None = None, *, recording: Path | str | None = None) -> Bench:
    """Read the bench of a recording.

    Parameters
    ----------
    bench : Path or str, optional
        The bench file; if not given, found beside or above the recording.
    recording : Path or str, optional
        The recording; its own ``STEM.toml`` overrides single keys.

    Returns
    -------
    bench : Bench
        Every value in SI with one standard uncertainty and the place it came from.

    Raises
    ------
    BenchError
        File, key, what was read, what is allowed.
    """
    keys = Keys(bench_text(bench, recording=Path(recording) if recording is not None else None))
    label = keys.sections.pop("bench", {})
    keys.check_shape()
    air_values = _air(keys)
    temperature = air_values["temperature"]
    spec = _field(keys)
    voltage = _voltage(keys, spec)
    oil = _oil(keys, temperature, air_values["air_density"].value)
    return Bench(
        name=str(label.get("name", (keys.files[0].absolute().parent.name, None))[0]),
        files=tuple(str(file) for file in keys.files),
        plate_gap=keys.required("cell.plate_gap"),
        voltage=voltage,
        voltage_rel_std=_voltage_rel_std(keys, spec, voltage),
        oil_density=oil[0],
        oil_expansion=oil[1],
        gravity=_gravity(keys),
        slip=keys.raw("air.slip") or "kim2005",
        scale=_scale(keys, recording),
        exposure=keys.measured("camera.exposure"),
        down_deg=None if keys.raw("camera.down") in (None, "auto") else keys.required("camera.down").value,
        frame_rate=None
        if keys.raw("camera.frame_rate") is None
        else keys.required("camera.frame_rate").value,
        binning=_binning(keys),
        field=spec,
        origins=_origins(keys, spec),
        **air_values,
    )


def _origins(keys: Keys, spec: FieldSpec) -> dict[str, str]:
    """Where the values that are not quantities with an uncertainty came from."""
    by_list = spec.source == "list" and _entries(keys)[1] > 0
    return {
        "slip": keys.origin("air.slip", "default"),
        "voltage_rel_std": keys.origin("field.list" if by_list else "cell.voltage", "not stated"),
        "oil_expansion_1_k": keys.origin("oil.expansion", "not stated"),
        "down_deg": keys.origin("camera.down", "from the motion"),
        "frame_rate_hz": keys.origin("camera.frame_rate", "times of the recording"),
        "binning": keys.origin("camera.binning", "not stated"),
        "scale": keys.origin("camera.metres_per_pixel") or keys.origin("camera.scale", "found by place"),
        "field": keys.origin("field.source"),
    }


def _air(keys: Keys) -> dict[str, Measured]:
    """Air of the cell: what was stated and what follows from it."""
    temperature, pressure = keys.required("air.temperature"), keys.required("air.pressure")
    humidity = keys.measured("air.relative_humidity") or Measured(0.0)
    stated = keys.measured("air.viscosity")
    try:
        air: Air = moist_air(temperature.value, pressure.value, relative_humidity=humidity.value,
                             viscosity=None if stated is None else stated.value)  # fmt: skip
    except PhysicsError as error:
        raise keys.error("air.temperature", error, "air of a laboratory") from error
    viscosity = stated or Measured(
        air.viscosity, air.viscosity * air.viscosity_rel_std, "ISO 15900 and moist-air mixture"
    )
    return {
        "temperature": temperature, "pressure": pressure, "relative_humidity": humidity, "viscosity": viscosity,
        "mean_free_path": Measured(air.mean_free_path, 0.0, "ISO 15900"),
        "air_density": Measured(air.density, 0.0, "CIPM-2007"),
    }  # fmt: skip


def _oil(keys: Keys, temperature: Measured, air_density: float) -> tuple[Measured, float]:
    """Density at the air's temperature, and the expansion that brought it there."""
    stated = keys.required("oil.density")
    at, expansion = keys.measured("oil.density_temperature"), keys.measured("oil.expansion")
    if stated.value <= air_density:
        raise keys.error("oil.density", repr(keys.raw("oil.density")), QUANTITIES["oil.density"][3])
    if at is None or expansion is None:
        return stated, 0.0
    try:
        warm = oil_density(stated.value, density_temperature=at.value, temperature=temperature.value,
                           expansion=expansion.value)  # fmt: skip
    except PhysicsError as error:
        raise keys.error("oil.density_temperature", error, "near the air's, for an expansion") from error
    by_expansion = stated.value * abs(temperature.value - at.value) * expansion.std
    by_temperature = stated.value * expansion.value * at.std
    std = (stated.std**2 + by_expansion**2 + by_temperature**2) ** 0.5
    return Measured(warm, std, stated.origin), expansion.value


def _gravity(keys: Keys) -> Measured:
    stated = keys.measured("site.gravity")
    if stated is not None:
        return stated
    latitude, altitude = keys.measured("site.latitude"), keys.measured("site.altitude")
    if latitude is None or altitude is None:
        raise keys.error("site.gravity", "nothing", 'gravity = "9.8100(2) m/s^2", or latitude and altitude')
    gravity = local_gravity(latitude.value, altitude.value)
    return Measured(gravity, NORMAL_GRAVITY_STD, "latitude and altitude")


def _scale(keys: Keys, recording: Path | str | None) -> Scale:
    stated, name = keys.measured("camera.metres_per_pixel"), keys.raw("camera.scale")
    if stated is not None and name is not None:
        raise keys.error("camera.scale", "scale and metres_per_pixel", "one of the two")
    if stated is not None:
        return Scale.from_metres_per_pixel(stated.value, stated.std)
    path = keys.file("camera.scale").parent / name if name is not None else find_scale(keys, recording)
    if path is None:
        raise keys.error(
            "camera.scale", "nothing", 'scale = "scale.json" or metres_per_pixel = "2.980(5) um"'
        )
    try:
        return read_scale(path)
    except CalibrationError as error:
        raise keys.error("camera.scale", error, "a file made by `fallrise scale`") from error


def find_scale(keys: Keys, recording: Path | str | None) -> Path | None:
    """Find the scale by place: the nearest folder above with ``scale*.json``, the last one before the recording.

    Parameters
    ----------
    keys : Keys
        For the bench file's folder where no recording is given.
    recording : Path, str or None
        The recording; its file date decides between several scales.

    Returns
    -------
    scale : Path or None
        The file whose picture is the newest that is not newer than the recording, or else the oldest.
    """
    start = Path(recording).absolute() if recording is not None else keys.files[0].absolute()
    for folder in start.parents:
        scales = sorted(folder.glob("scale*.json"))
        if scales:
            return _valid_scale(scales, start.stat().st_mtime if start.exists() else float("inf"))
    return None


def _valid_scale(scales: list[Path], moment: float) -> Path:
    dated = sorted((_scale_time(path), path) for path in scales)
    before = [path for time, path in dated if time <= moment]
    return before[-1] if before else dated[0][1]


def _scale_time(path: Path) -> float:
    """POSIX time at which a scale was made: its own date if it has one, else that of the file."""
    from datetime import datetime

    try:
        text = json.loads(path.read_text(encoding="utf-8")).get("date")
        return datetime.fromisoformat(text).timestamp() if text else path.stat().st_mtime
    except (OSError, ValueError, AttributeError):
        return path.stat().st_mtime


def _binning(keys: Keys) -> int | None:
    binning: int | None = keys.raw("camera.binning")
    if binning is not None and not 1 <= binning <= 16:
        raise keys.error(
            "camera.binning", binning, "a whole number of pixels joined along each side, 1 to 16"
        )
    return binning


def _voltage(keys: Keys, spec: FieldSpec) -> Measured | None:
    voltage = keys.measured("cell.voltage")
    if voltage is None and spec.source in ("lamp", "motion"):
        raise keys.error(
            "cell.voltage", "nothing", f"{QUANTITIES['cell.voltage'][3]}; {spec.source} needs it"
        )
    return voltage


def _voltage_rel_std(keys: Keys, spec: FieldSpec, voltage: Measured | None) -> float:
    """Relative uncertainty of the voltage that the field's source gives; a list that is only compared has no say."""
    stated = abs(voltage.std / voltage.value) if voltage else 0.0
    return _entries(keys)[1] or stated if spec.source == "list" else stated


def _field(keys: Keys) -> FieldSpec:
    """Voltage source; what the chosen source needs must be there."""
    source = keys.raw("field.source")
    needed = {"list": "list", "log": "log", "lamp": "lamp"}.get(source)
    if needed and keys.raw(f"field.{needed}") is None:
        raise keys.error(f"field.{needed}", "nothing", f'this key, since source = "{source}"')
    offset = keys.raw("field.clock_offset")
    log = keys.raw("field.log")
    lamp = keys.raw("field.lamp")
    if lamp is not None and (min(lamp) < 0 or min(lamp[2:]) < 1):
        raise keys.error("field.lamp", lamp, "x, y, width, height in px, such as [8, 8, 16, 16]")
    log_path = keys.file("field.log").parent / log if log is not None else None
    if source == "log" and log_path is not None and not log_path.is_file():
        raise keys.error("field.log", f"{log!r}: no such file", "an existing CSV file")
    return FieldSpec(
        source=source,
        entries=_entries(keys)[0],
        log=log_path,
        time_column=keys.raw("field.time_column") or "time_s",
        voltage_column=keys.raw("field.voltage_column") or "voltage_v",
        time_unit=keys.raw("field.time_unit") or "s",
        voltage_unit=keys.raw("field.voltage_unit") or "V",
        clock_offset=None if offset in (None, "auto") else keys.required("field.clock_offset"),
        lamp=None if lamp is None else tuple(lamp),
    )


def _entries(keys: Keys) -> tuple[tuple[tuple[float, float], ...], float]:
    """Times and voltages of the list, and the largest relative uncertainty among its voltages."""
    words = 'pairs such as [["0 s", "0 V"], ["2 s", "260 V"]], times increasing'
    entries, rel_std = [], 0.0
    for time_text, volt_text in keys.raw("field.list") or ():
        try:
            time, (volts, std) = parse_quantity(time_text, "s")[0], parse_quantity(volt_text, "V")
        except QuantityError as error:
            raise keys.error("field.list", error, words) from error
        entries.append((time, volts))
        rel_std = max(rel_std, std / abs(volts) if volts else 0.0)
    if any(b[0] <= a[0] for a, b in pairwise(entries)):
        raise keys.error("field.list", "times that do not increase", words)
    return tuple(entries), rel_std
