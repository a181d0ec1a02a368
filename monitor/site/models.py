"""What a site file may say: one pydantic model a table, every key with its unit and default.

The models check each table by itself; `monitor.site.load` checks them against each other (tags that
exist, streams with one producer and one consumer) and gives the errors of both at once.
"""

from __future__ import annotations

import datetime as dt
import zoneinfo
from typing import TYPE_CHECKING, Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, field_validator, model_validator

from monitor.site.fields import (
    Duration,
    FileSize,
    Identifier,
    Pressure,
    Table,
    Temperature,
    si,
)
from monitor.site.notify import Notify
from monitor.site.tags import Meter, Tag, Uncertainty
from monitor.site.units import Quantity, Unit, parse_unit, split_number

if TYPE_CHECKING:
    from collections.abc import Iterator

__all__ = [
    "Alarms",
    "Daemon",
    "DeadState",
    "Drift",
    "DriftFigure",
    "Economics",
    "Equipment",
    "Meter",
    "Notify",
    "Pages",
    "Reference",
    "Shifts",
    "SiteFile",
    "SiteTable",
    "Source",
    "Store",
    "Stream",
    "Tag",
    "ThrottlingTest",
    "Uncertainty",
]


_LEAST_KEPT = 35 * 86400


class Reference(BaseModel):
    """A value that is either read from a tag or stated as a fixed number with a unit.

    Attributes:
        tag: the tag's name, or None when the value is fixed.
        fixed: the value in SI, or None when it is read.
        unit: the unit of a fixed value (tells an absolute from a gauge pressure).
    """

    model_config = ConfigDict(frozen=True, arbitrary_types_allowed=True)

    tag: str | None = None
    fixed: float | None = None
    unit: Unit | None = None

    @model_validator(mode="before")
    @classmethod
    def _read(cls, value: object) -> object:
        if isinstance(value, bool) or not isinstance(value, (str, int, float)):
            return value
        split = split_number(str(value))
        if split is None:
            return {"tag": value}
        unit = parse_unit(split[1])
        return {"fixed": split[0] * unit.scale + unit.offset, "unit": unit}


class SiteTable(Table):
    """[site]: who and when."""

    id: Identifier
    name: str
    time_zone: str = "UTC"
    interval: Duration = 300.0
    settle: Duration = 120.0
    look_back: Duration = 7200.0
    least_coverage: float = Field(default=0.5, gt=0, le=1)
    saturation_band: float = Field(default=2.0, ge=0, description="kelvin")
    steady_window: Duration = 1800.0
    steady_limit: float = Field(default=0.08, gt=0, description="spread of load / load")
    steady_drift: float = Field(default=0.05, gt=0, description="drift of load / load")

    @field_validator("time_zone")
    @classmethod
    def _zone(cls, value: str) -> str:
        try:
            zoneinfo.ZoneInfo(value)
        except (zoneinfo.ZoneInfoNotFoundError, ValueError) as error:
            raise ValueError(
                f"'{value}' is not a time zone; write one such as 'Europe/Vienna' or 'UTC'"
            ) from error
        return value

    @field_validator("interval")
    @classmethod
    def _divides_the_hour(cls, value: float) -> float:
        if value < 60 or 3600 % value:  # noqa: PLR2004
            raise ValueError(
                "the interval must divide an hour: 1, 2, 3, 5, 6, 10, 15 min and so on"
            )
        return value


class Store(Table):
    """[store]: where figures go; a relative SQLite path is taken from the site file's folder.

    What is not kept for a while is kept for ever. Roll-ups by shift, day and month always are.
    """

    url: str = "sqlite:///lostwork.sqlite"
    keep_cells: Duration | None = None
    keep_hours: Duration | None = None
    keep_drift: Duration | None = None

    @model_validator(mode="after")
    def _long_enough(self) -> Store:
        cells, hours, drift = self.keep_cells, self.keep_hours, self.keep_drift
        kept = [k for k in (cells, hours, drift) if k is not None]
        if kept and min(kept) < _LEAST_KEPT:
            raise ValueError("keep figures for 35 days at least: a month is made of its days")
        if hours is not None and (cells is None or hours < cells):
            raise ValueError("keep_hours must be as long as keep_cells at least")
        return self


class DeadState(Table):
    """[dead_state]: the live ambient, and the fixed reference beside it."""

    temperature: Reference
    pressure: Reference
    mean: Duration = 0.0
    hold: Duration = 10800.0
    reference_temperature: Temperature = 288.15
    reference_pressure: Pressure = 101325.0


class Source(BaseModel):
    """[[source]]: a historian export; the keys beside these two belong to its kind."""

    model_config = ConfigDict(extra="allow", frozen=True)

    id: Identifier
    kind: str


class ThrottlingTest(Table):
    """stream.throttling_test: a sample of wet steam, expanded until it is superheated.

    Attributes:
        temperature: of the expanded sample.
        pressure: of the expanded sample; without one that of the surroundings.
        least_superheat: of the expanded sample, below which the test says nothing sure.
    """

    temperature: Reference
    pressure: Reference | None = None
    least_superheat: float = Field(default=5.0, ge=0, description="kelvin")


class Stream(Table):
    """[[stream]]: a flow between two pieces of equipment, or across the site's boundary.

    Water and steam need enough to fix the state (pressure and temperature; or one of them with a
    dryness or a phase; or pressure with a degree of superheat or subcooling, with a throttling
    test, or with ``enthalpy = "balance"``) and a flow. Power, heat and fuel need their rate alone.
    """

    id: Identifier
    name: str = ""
    medium: Literal["water", "fuel", "power", "heat"] = "water"
    flow: Literal["balance"] | Reference | None = None
    pressure: Reference | None = None
    temperature: Reference | None = None
    dryness: float | None = Field(default=None, ge=0, le=1)
    phase: Literal["vapour", "liquid"] | None = None
    superheat: Reference | None = None
    subcooling: Reference | None = None
    throttling_test: ThrottlingTest | None = None
    enthalpy: Literal["balance"] | None = None
    power: Literal["balance"] | Reference | None = None
    heat: Literal["balance"] | Reference | None = None
    boundary_temperature: Literal["dead_state"] | Reference = "dead_state"
    fuel: str = ""
    lower_heating_value: Annotated[float, si(Quantity.SPECIFIC_ENERGY)] | None = None
    exergy_ratio: float | None = Field(default=None, gt=0)
    counts_as: Literal["supplied", "used", "lost", ""] = ""
    price: float | None = Field(
        default=None, ge=0, description="currency per MWh of exergy, for a fuel of heating value"
    )
    co2: float | None = Field(
        default=None, ge=0, description="kg per MWh of exergy, for a fuel of heating value"
    )

    def references(self) -> Iterator[tuple[str, Reference, Quantity]]:
        """Every key of the table that reads a tag or states a number, and what it must measure."""
        for key, quantity in _MEASURED.items():
            value = getattr(self, key)
            if isinstance(value, Reference):
                yield key, value, quantity
        test = self.throttling_test
        if test is not None:
            yield "throttling_test.temperature", test.temperature, Quantity.TEMPERATURE
            if test.pressure is not None:
                yield "throttling_test.pressure", test.pressure, Quantity.PRESSURE


_MEASURED = {
    "flow": Quantity.MASS_FLOW,
    "pressure": Quantity.PRESSURE,
    "temperature": Quantity.TEMPERATURE,
    "superheat": Quantity.TEMPERATURE,
    "subcooling": Quantity.TEMPERATURE,
    "power": Quantity.POWER,
    "heat": Quantity.POWER,
    "boundary_temperature": Quantity.TEMPERATURE,
}


class Equipment(BaseModel):
    """[[equipment]]: a control volume; keys beside these belong to its kind.

    ``ports`` names the streams at each port: one id, or a list where the kind takes several.
    """

    model_config = ConfigDict(extra="allow", frozen=True)

    id: Identifier
    kind: str
    name: str = ""
    ports: dict[str, str | list[str]]

    def streams_at(self, port: str) -> tuple[str, ...]:
        """The ids of the streams at a port, empty when the port is not used."""
        at = self.ports.get(port, [])
        return (at,) if isinstance(at, str) else tuple(at)


class Shifts(Table):
    """[shifts]: local start times and the names they are known by."""

    starts: tuple[dt.time, ...] = (dt.time(6), dt.time(14), dt.time(22))
    names: tuple[str, ...] = ("early", "late", "night")

    @field_validator("starts", mode="before")
    @classmethod
    def _times(cls, value: object) -> object:
        if isinstance(value, (list, tuple)):
            return tuple(dt.time.fromisoformat(v) if isinstance(v, str) else v for v in value)
        return value

    @model_validator(mode="after")
    def _matched(self) -> Shifts:
        if len(self.starts) != len(self.names) or not self.starts:
            raise ValueError(f"{len(self.starts)} starts but {len(self.names)} names")
        if list(self.starts) != sorted(set(self.starts)):
            raise ValueError("starts must be in the order of the day, each once")
        return self


class Economics(Table):
    """[economics]: what lost work costs, per MWh of exergy destroyed or lost."""

    currency: str = "EUR"
    exergy_price: float = Field(default=40.0, ge=0, description="currency per MWh of exergy")
    co2: float = Field(default=200.0, ge=0, description="kg per MWh of exergy")


class DriftFigure(Table):
    """[[drift.figure]]: how one condition figure is judged, where it differs from the default."""

    equipment: Identifier
    figure: str
    smallest_change: float | None = Field(default=None, ge=0)
    judged: bool = True


class Drift(Table):
    """[drift]: baselines and control charts.

    ``false_alarm_every`` is the in-control average run length that the chart's limits are designed
    for, as a time of hourly points.
    """

    reference_from: dt.datetime | None = None
    reference_to: dt.datetime | None = None
    reference_length: Duration = 14 * 86400.0
    weight: float = Field(default=0.1, gt=0, le=1)
    false_alarm_every: Duration = 365.25 * 86400.0
    least_hours: int = Field(default=72, ge=24)
    least_cells: float = Field(default=0.5, gt=0, le=1)
    figure: tuple[DriftFigure, ...] = ()


class Alarms(Table):
    """[alarms]: how long a limit must be passed, or respected, before an alarm moves."""

    on_delay: Duration = 3 * 3600.0
    off_delay: Duration = 12 * 3600.0


class Pages(Table):
    """[pages]: where the static pages go (from the site file's folder) and what they span."""

    folder: str = "pages"
    days: float = Field(default=60.0, gt=0)


class Daemon(Table):
    """[daemon]: files that say how it is doing, from the site file's folder; "" for none."""

    heartbeat: str = "lostwork-heartbeat.json"
    metrics: str = ""
    log_file: str = ""
    log_size: FileSize = 10_000_000
    log_keep: int = Field(default=5, ge=0, le=1000)


class SiteFile(Table):
    """A whole site file, each table checked by itself."""

    site: SiteTable
    store: Store = Store()
    dead_state: DeadState
    tag_lists: tuple[str, ...] = ()
    source: tuple[Source, ...] = Field(min_length=1)
    tag: tuple[Tag, ...] = ()
    stream: tuple[Stream, ...] = Field(min_length=1)
    equipment: tuple[Equipment, ...] = Field(min_length=1)
    shifts: Shifts = Shifts()
    economics: Economics = Economics()
    drift: Drift = Drift()
    alarms: Alarms = Alarms()
    pages: Pages = Pages()
    daemon: Daemon = Daemon()
    notify: tuple[Notify, ...] = ()
