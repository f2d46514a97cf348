"""Names and types of a bench file's keys. Importing it loads pydantic, so `benchfile` does that only when it must."""

from __future__ import annotations

from typing import Literal

from pydantic import BaseModel, ConfigDict


class Section(BaseModel):
    """Names and types are strict: what is not listed is a mistake."""

    model_config = ConfigDict(extra="forbid", strict=True)


class Cell(Section):
    """The cell and its voltage."""

    plate_gap: str
    voltage: str | None = None


class Oil(Section):
    """The oil."""

    density: str
    density_temperature: str | None = None
    expansion: str | None = None


class AirSection(Section):
    """The air of the cell."""

    temperature: str
    pressure: str
    relative_humidity: str | None = None
    viscosity: str | None = None
    slip: Literal["kim2005", "davies1945", "allen_raabe1985", "hutchins1995", "millikan1923"] = "kim2005"


class Site(Section):
    """Where gravity is what it is."""

    gravity: str | None = None
    latitude: str | None = None
    altitude: str | None = None


class Camera(Section):
    """The camera; its scale is `scale` or `metres_per_pixel`."""

    scale: str | None = None
    metres_per_pixel: str | None = None
    exposure: str | None = None
    down: str | None = None
    frame_rate: str | None = None
    binning: int | None = None


class FieldSection(Section):
    """Where the voltage over time comes from."""

    source: Literal["list", "log", "lamp", "motion"]
    list: tuple[tuple[str, str], ...] | None = None
    log: str | None = None
    time_column: str | None = None
    voltage_column: str | None = None
    time_unit: str | None = None
    voltage_unit: str | None = None
    clock_offset: str | None = None
    lamp: tuple[int, int, int, int] | None = None


class BenchFile(Section):
    """A bench file and a recording's own keys, merged."""

    cell: Cell
    oil: Oil
    air: AirSection
    site: Site
    camera: Camera
    field: FieldSection
