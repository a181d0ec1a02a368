"""What a site file may say: one pydantic model a table, every key with its unit and default.

The models check each table by itself; `monitor.site.load` checks them against each other (tags that
exist, streams with one producer and one consumer) and gives the errors of both at once.
"""

from __future__ import annotations

import datetime as dt
import zoneinfo
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    field_validator,
    model_validator,
)

from monitor.site.units import Quantity, Unit, UnitError, parse_unit, quantity, split_number

__all__ = [
    "Alarms",
    "DeadState",
    "Drift",
    "DriftFigure",
    "Economics",
    "Equipment",
    "Pages",
    "Reference",
    "Shifts",
    "SiteFile",
    "SiteTable",
    "Source",
    "Store",
    "Stream",
    "Tag",
    "Uncertainty",
]


class _Table(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True)


def _si(expected: Quantity) -> Any:  # noqa: ANN401 - a validator for an Annotated alias
    def read(value: object) -> float:
        if isinstance(value, bool) or not isinstance(value, (str, int, float)):
            raise UnitError(f"{value!r} is not a number with a unit")
        if isinstance(value, str):
            return quantity(value, expected)
        if expected is Quantity.FRACTION:
            return float(value)
        raise UnitError(
            f"{value!r} has no unit; write it as text, for example '{value} {expected}'"
        )

    return BeforeValidator(read)


Duration = Annotated[float, _si(Quantity.TIME)]
"""A duration, read from text such as '5 min' into seconds."""
Pressure = Annotated[float, _si(Quantity.PRESSURE)]
Temperature = Annotated[float, _si(Quantity.TEMPERATURE)]


def _identifier(value: str) -> str:
    if not value or not all(c.isalnum() or c in "_-" for c in value) or len(value) > 64:  # noqa: PLR2004
        raise ValueError("use letters, digits, '_' and '-' (64 at most): it names files and rows")
    return value


Identifier = Annotated[str, AfterValidator(_identifier)]


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


class Uncertainty(BaseModel):
    """A tag's standard uncertainty, as an instrument sheet gives it.

    Attributes:
        amount: the number; a share (0.0025) of range or reading, or SI for an absolute one.
        basis: what the number is a share of.
    """

    model_config = ConfigDict(frozen=True)

    amount: float = Field(ge=0)
    basis: Literal["range", "reading", "absolute"]


class SiteTable(_Table):
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
    steady_limit: float = Field(default=0.08, gt=0, description="spread of load / mean load")

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


class Store(_Table):
    """[store]: where figures go; a relative SQLite path is taken from the site file's folder."""

    url: str = "sqlite:///lostwork.sqlite"


class DeadState(_Table):
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


class Tag(_Table):
    """[[tag]]: one instrument in the historian."""

    name: str = Field(min_length=1)
    source: Identifier
    unit: Annotated[Unit, BeforeValidator(lambda v: parse_unit(v) if isinstance(v, str) else v)]
    source_name: str = ""
    description: str = ""
    range: tuple[float, float] | None = None
    uncertainty: str = ""
    hold: Duration = 600.0

    @model_validator(mode="after")
    def _range_is_ordered(self) -> Tag:
        if self.range is not None and self.range[0] >= self.range[1]:
            raise ValueError(f"range {list(self.range)}: the low end comes first")
        return self

    @property
    def historian_name(self) -> str:
        """The name the source knows the tag by."""
        return self.source_name or self.name

    @property
    def stated_uncertainty(self) -> Uncertainty | None:
        """The standard uncertainty that the site file states, None when it states none."""
        return parse_uncertainty(self.uncertainty, self.unit) if self.uncertainty else None

    @model_validator(mode="after")
    def _uncertainty_reads(self) -> Tag:
        stated = self.stated_uncertainty
        if stated is not None and stated.basis == "range" and self.range is None:
            raise ValueError(f"uncertainty '{self.uncertainty}' needs a range = [low, high]")
        return self


def parse_uncertainty(text: str, unit: Unit) -> Uncertainty:
    """Read '0.25 % range', '1 % reading' or '1.0 K' into a standard uncertainty.

    Raises:
        UnitError: it cannot be read, or is in a unit unlike the tag's.
    """
    words = text.split()
    share_of = words[-1] if words else ""
    number = " ".join(words[:-1]) if share_of in {"range", "reading"} else text
    try:
        split = split_number(number)
        own = None if split is None else parse_unit(split[1])
    except UnitError:
        split = own = None
    if split is None or own is None:
        raise UnitError(
            f"'{text}' is not an uncertainty; write '0.25 % range', '1 % reading' or '1.0 K'"
        )
    expected = Quantity.FRACTION if number != text else unit.quantity
    if own.quantity is not expected:
        raise UnitError(f"uncertainty '{text}' is not in a unit like the tag's '{unit.text}'")
    amount = split[0] * own.scale
    if share_of == "range":
        return Uncertainty(amount=amount, basis="range")
    return Uncertainty(amount=amount, basis="reading" if share_of == "reading" else "absolute")


class Stream(_Table):
    """[[stream]]: a flow between two pieces of equipment, or across the site's boundary.

    Water and steam need enough to fix the state (pressure and temperature; or one of them with a
    dryness or a phase; or pressure with ``enthalpy = "balance"``) and a flow. Power, heat and fuel
    need their rate alone.
    """

    id: Identifier
    name: str = ""
    medium: Literal["water", "fuel", "power", "heat"] = "water"
    flow: Literal["balance"] | Reference | None = None
    pressure: Reference | None = None
    temperature: Reference | None = None
    dryness: float | None = Field(default=None, ge=0, le=1)
    phase: Literal["vapour", "liquid"] | None = None
    enthalpy: Literal["balance"] | None = None
    power: Literal["balance"] | Reference | None = None
    heat: Literal["balance"] | Reference | None = None
    boundary_temperature: Literal["dead_state"] | Reference = "dead_state"
    fuel: str = ""
    lower_heating_value: Annotated[float, _si(Quantity.SPECIFIC_ENERGY)] | None = None
    exergy_ratio: float | None = Field(default=None, gt=0)
    counts_as: Literal["supplied", "used", "lost", ""] = ""


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


class Shifts(_Table):
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


class Economics(_Table):
    """[economics]: what lost work costs, per MWh of exergy destroyed or lost."""

    currency: str = "EUR"
    exergy_price: float = Field(default=40.0, ge=0, description="currency per MWh of exergy")
    co2: float = Field(default=200.0, ge=0, description="kg per MWh of exergy")


class DriftFigure(_Table):
    """[[drift.figure]]: how one condition figure is judged, where it differs from the default."""

    equipment: Identifier
    figure: str
    smallest_change: float | None = Field(default=None, ge=0)
    judged: bool = True


class Drift(_Table):
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


class Alarms(_Table):
    """[alarms]: how long a limit must be passed, or respected, before an alarm moves."""

    on_delay: Duration = 3 * 3600.0
    off_delay: Duration = 12 * 3600.0


class Pages(_Table):
    """[pages]: where the static pages go (from the site file's folder) and what they span."""

    folder: str = "pages"
    days: float = Field(default=60.0, gt=0)


class SiteFile(_Table):
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
