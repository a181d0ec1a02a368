"""[[tag]]: one instrument, what its readings are checked for, and its meter if it is a flow."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, model_validator

from monitor.site.fields import Duration, Identifier, Pressure, Table, Temperature, si
from monitor.site.units import (
    Quantity,
    Unit,
    UnitError,
    difference,
    parse_unit,
    rate,
    split_number,
)

__all__ = ["FLOWS", "Meter", "Tag", "Uncertainty", "parse_uncertainty"]

FLOWS = frozenset({Quantity.MASS_FLOW, Quantity.VOLUME_FLOW, Quantity.NORM_VOLUME_FLOW})
"""What a flow may be measured in."""

_CONTINUOUS = FLOWS | {Quantity.PRESSURE, Quantity.TEMPERATURE, Quantity.POWER}
# What a vessel holds belongs to a moment; everything else is a mean over the cell.
_HELD_CONTENT = frozenset({Quantity.LENGTH, Quantity.VOLUME, Quantity.MASS})
# Pressures and temperatures have capacity behind them; a flow or a power may really step.
_NEVER_STEPS = frozenset({Quantity.PRESSURE, Quantity.TEMPERATURE})
_SPIKE_WINDOW = 1800.0
_STUCK_AFTER = 14400.0
# What a spike is at least. A sound plant moves by several percent of range from one minute to the
# next when a machine trips, and by a few standard uncertainties at any time.
_SPIKE_SHARE_OF_RANGE = 0.10
_SPIKE_UNCERTAINTIES = 20.0


class Uncertainty(BaseModel):
    """A tag's standard uncertainty, as an instrument sheet gives it.

    Attributes:
        amount: the number; a share (0.0025) of range or reading, or SI for an absolute one.
        basis: what the number is a share of.
    """

    model_config = ConfigDict(frozen=True)

    amount: float = Field(ge=0)
    basis: Literal["range", "reading", "absolute"]


class Meter(Table):
    """[tag.meter]: how a flow tag comes to its number.

    A differential-pressure meter takes the root of the density, a velocity meter (vortex, turbine,
    ultrasonic) the density itself. One that is not compensated was scaled for a design density,
    and reads wrong at any other (ISO 5167-1:2022, eq. 1: mass flow goes as the root of dp times
    density).

    Attributes:
        kind: what the meter measures by; ``mass`` needs no density.
        compensated: whether the transmitter already knows the density.
        design_density: that it is scaled for [kg/m^3]; or the state that gives it:
        design_pressure: absolute [Pa].
        design_temperature: [K]; or, for saturated or wet steam,
        design_dryness: mass share of vapour.
        density: of the metered gas or liquid fuel [kg per m^3 or norm m^3 as the meter counts].
        cut_off: readings below this are exactly no flow, in a unit like the tag's.
    """

    kind: Literal["mass", "dp", "velocity"] = "mass"
    compensated: bool = True
    design_density: Annotated[float, si(Quantity.DENSITY)] | None = None
    design_pressure: Pressure | None = None
    design_temperature: Temperature | None = None
    design_dryness: float | None = Field(default=None, ge=0, le=1)
    density: str = ""
    cut_off: str = ""

    @model_validator(mode="after")
    def _design_is_complete(self) -> Meter:
        states = (self.design_temperature, self.design_dryness)
        stated = self.design_density is not None or self.design_pressure is not None
        if not self.needs_density:
            if stated or any(s is not None for s in states):
                raise ValueError(
                    "design values belong to a meter of kind = 'dp' or 'velocity' with "
                    "compensated = false; add these, or leave the design values out"
                )
            return self
        if self.design_density is not None:
            if self.design_pressure is not None or any(s is not None for s in states):
                raise ValueError("give either design_density or the design state, not both")
            return self
        if self.design_pressure is None or sum(s is not None for s in states) != 1:
            raise ValueError(
                "a meter that is not compensated needs the density it was scaled for: "
                "design_density = '5.69 kg/m^3', or design_pressure with design_temperature "
                "(design_dryness for saturated steam)"
            )
        return self

    @property
    def needs_density(self) -> bool:
        """Whether its readings must be corrected for the density of what flows."""
        return self.kind != "mass" and not self.compensated


class Tag(Table):
    """[[tag]]: one instrument in the historian."""

    name: str = Field(min_length=1)
    source: Identifier
    unit: Annotated[Unit, BeforeValidator(lambda v: parse_unit(v) if isinstance(v, str) else v)]
    source_name: str = ""
    description: str = ""
    range: tuple[float, float] | None = None
    uncertainty: str = ""
    hold: Duration = 600.0
    method: Literal["mean", "last"] | None = None
    deadband: str = ""
    rate_limit: str = ""
    spike_window: Duration | None = None
    spike_threshold: float = Field(default=3.0, gt=0)
    spike_least: str = ""
    stuck_after: Duration | None = None
    meter: Meter | None = None

    @model_validator(mode="after")
    def _range_is_ordered(self) -> Tag:
        if self.range is not None and self.range[0] >= self.range[1]:
            raise ValueError(f"range {list(self.range)}: the low end comes first")
        return self

    @model_validator(mode="after")
    def _uncertainty_reads(self) -> Tag:
        stated = self.stated_uncertainty
        if stated is not None and stated.basis == "range" and self.range is None:
            raise ValueError(f"uncertainty '{self.uncertainty}' needs a range = [low, high]")
        return self

    @model_validator(mode="after")
    def _checks_read(self) -> Tag:
        _ = self.least_movement, self.fastest, self.cut_off
        if self.spike_window and self.smallest_spike == (0.0, 0.0):
            raise ValueError(
                "spike_window needs to know what a spike is at least: give spike_least, a range or "
                "an uncertainty"
            )
        if self.meter is not None and self.unit.quantity not in FLOWS:
            raise ValueError(f"a meter belongs to a flow, but '{self.unit.text}' is none")
        _ = self.metered_density
        return self

    @property
    def historian_name(self) -> str:
        """The name the source knows the tag by."""
        return self.source_name or self.name

    @property
    def stated_uncertainty(self) -> Uncertainty | None:
        """The standard uncertainty that the site file states, None when it states none."""
        return parse_uncertainty(self.uncertainty, self.unit) if self.uncertainty else None

    @property
    def takes_last(self) -> bool:
        """Whether a cell gets the last value in it instead of the time-weighted mean."""
        if self.method is None:
            return self.unit.quantity in _HELD_CONTENT
        return self.method == "last"

    @property
    def least_movement(self) -> float:
        """The deadband, in the tag's unit: a value that moves less has not moved."""
        return difference(self.deadband, self.unit) if self.deadband else 0.0

    @property
    def fastest(self) -> float | None:
        """The rate limit, in the tag's unit per second; None for no limit."""
        return rate(self.rate_limit, self.unit) if self.rate_limit else None

    @property
    def smallest_spike(self) -> tuple[float, float]:
        """How far off a spike is at least, in the tag's unit, and as a share of the reading."""
        if self.spike_least:
            return difference(self.spike_least, self.unit), 0.0
        if self.range is not None:
            return _SPIKE_SHARE_OF_RANGE * (self.range[1] - self.range[0]), 0.0
        stated = self.stated_uncertainty
        if stated is None:
            return 0.0, 0.0
        if stated.basis == "reading":
            return 0.0, _SPIKE_UNCERTAINTIES * stated.amount
        return _SPIKE_UNCERTAINTIES * stated.amount / self.unit.scale, 0.0

    @property
    def spike_seconds(self) -> float:
        """Length of the spike filter's window [s]; 0 where readings are not checked for spikes."""
        if self.smallest_spike == (0.0, 0.0):
            return 0.0
        if self.spike_window is None:
            return _SPIKE_WINDOW if self.unit.quantity in _NEVER_STEPS else 0.0
        return self.spike_window

    @property
    def stuck_seconds(self) -> float:
        """How long a value must stand still to be called stuck [s]; 0 for never."""
        if self.stuck_after is None:
            return _STUCK_AFTER if self.unit.quantity in _CONTINUOUS else 0.0
        return self.stuck_after

    @property
    def cut_off(self) -> float | None:
        """Flow below which there is none, in the tag's unit; None for no cut-off."""
        if self.meter is None or not self.meter.cut_off:
            return None
        return difference(self.meter.cut_off, self.unit)

    @property
    def metered_density(self) -> float | None:
        """Mass of a unit of metered volume [kg/m^3 or kg per norm m^3]; None where not stated."""
        if self.meter is None or not self.meter.density:
            return None
        if self.unit.quantity is Quantity.MASS_FLOW:
            raise UnitError("density turns a volume into a mass; this tag is a mass flow already")
        norm = self.unit.quantity is Quantity.NORM_VOLUME_FLOW
        wanted = Quantity.NORM_DENSITY if norm else Quantity.DENSITY
        split = split_number(self.meter.density)
        unit = None if split is None else parse_unit(split[1])
        if split is None or unit is None or unit.quantity is not wanted or split[0] <= 0:
            raise UnitError(
                f"density '{self.meter.density}' does not fit '{self.unit.text}'; "
                f"write for example '0.8 kg/{'Nm3' if norm else 'm^3'}'"
            )
        return split[0] * unit.scale

    @property
    def look_back(self) -> float:
        """How far back the conditioning of a cell reaches for this tag's readings [s].

        The value in force may be as old as the hold time, and whether that reading was a spike is
        told by the readings of a window before it, and of one before the reading before it.
        """
        return self.hold + max(2.0 * self.spike_seconds, self.hold if self.rate_limit else 0.0)


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
