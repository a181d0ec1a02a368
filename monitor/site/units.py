"""Units as engineers write them, turned to SI at the edge and nowhere else.

A unit string is a pint expression, with the trade's marks for pressure: ``bar(g)`` and ``psi(g)``
are above the barometer, ``bar(a)`` absolute, ``mmHg(vac)`` below the barometer. A pressure without
a mark is refused: half of all mistakes with steam tables start there.
"""

from __future__ import annotations

import difflib
import re
from dataclasses import dataclass
from enum import StrEnum
from functools import cache
from typing import TYPE_CHECKING, Any, cast

from monitor.site.factors import FACTORS

if TYPE_CHECKING:
    import numpy as np
    import numpy.typing as npt

__all__ = [
    "PressureDatum",
    "Quantity",
    "Unit",
    "UnitError",
    "difference",
    "duration_s",
    "parse_unit",
    "quantity",
    "rate",
]


class UnitError(ValueError):
    """A unit or a quantity that cannot be understood."""


class Quantity(StrEnum):
    """The kinds of quantity a steam site measures; the value names the SI unit used inside."""

    PRESSURE = "Pa"
    TEMPERATURE = "K"
    MASS_FLOW = "kg/s"
    VOLUME_FLOW = "m^3/s"
    NORM_VOLUME_FLOW = "Nm3/s"
    DENSITY = "kg/m^3"
    NORM_DENSITY = "kg/Nm3"
    POWER = "W"
    FRACTION = "1"
    LENGTH = "m"
    VOLUME = "m^3"
    MASS = "kg"
    SPECIFIC_ENERGY = "J/kg"
    CONDUCTANCE = "W/K"
    TIME = "s"


class PressureDatum(StrEnum):
    """Where a pressure is counted from."""

    ABSOLUTE = "a"
    GAUGE = "g"
    VACUUM = "vac"
    DIFFERENCE = "d"


@dataclass(frozen=True)
class Unit:
    """A unit reduced to ``si = value * scale + offset``.

    Attributes:
        text: the unit as written in the site file.
        quantity: what it measures.
        scale: SI units per unit.
        offset: SI value at zero; only temperatures have one.
        datum: for pressures, what zero means; gauge and vacuum still need the barometer.
    """

    text: str
    quantity: Quantity
    scale: float
    offset: float = 0.0
    datum: PressureDatum | None = None

    def to_si(self, value: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
        """Turn values into SI. Gauge and vacuum pressures stay relative to the barometer."""
        return value * self.scale + self.offset

    def absolute(
        self, si: npt.NDArray[np.float64], barometer: npt.NDArray[np.float64] | float
    ) -> npt.NDArray[np.float64]:
        """Turn a pressure in Pa on this unit's datum into Pa absolute, with the barometer [Pa]."""
        if self.datum is PressureDatum.GAUGE:
            return si + barometer
        if self.datum is PressureDatum.VACUUM:
            return barometer - si
        return si


_DATUM = re.compile(r"^(?P<base>.*?)\s*\((?P<datum>a|abs|g|gauge|vac|d|diff)\)$")
_DATUM_WORDS = {"abs": "a", "gauge": "g", "diff": "d"}
_JOINED = {
    "barg": "bar(g)",
    "bara": "bar(a)",
    "psig": "psi(g)",
    "psia": "psi(a)",
    "kPag": "kPa(g)",
    "kPaa": "kPa(a)",
}
# Spellings that pint does not have, or reads as something else.
_SPELLINGS = {
    "%": "percent",
    "C": "degC",
    "°C": "degC",
    "F": "degF",
    "°F": "degF",
    "t/h": "metric_ton/hour",
    "t/d": "metric_ton/day",
    "klb/h": "kilopound/hour",
    "lb/h": "pound/hour",
    "kg/h": "kilogram/hour",
    "mmHg": "mmHg",
    "inHg": "inHg",
    "cmHg": "cmHg",
    "m3": "m^3",
    "m³": "m^3",
    "-": "dimensionless",
    "1": "dimensionless",
}
_DIMENSIONS = {
    Quantity.PRESSURE: "[mass] / [length] / [time] ** 2",
    Quantity.TEMPERATURE: "[temperature]",
    Quantity.MASS_FLOW: "[mass] / [time]",
    Quantity.VOLUME_FLOW: "[length] ** 3 / [time]",
    Quantity.NORM_VOLUME_FLOW: "[norm_volume] / [time]",
    Quantity.DENSITY: "[mass] / [length] ** 3",
    Quantity.NORM_DENSITY: "[mass] / [norm_volume]",
    Quantity.POWER: "[mass] * [length] ** 2 / [time] ** 3",
    Quantity.FRACTION: "[]",
    Quantity.LENGTH: "[length]",
    Quantity.VOLUME: "[length] ** 3",
    Quantity.MASS: "[mass]",
    Quantity.SPECIFIC_ENERGY: "[length] ** 2 / [time] ** 2",
    Quantity.CONDUCTANCE: "[mass] * [length] ** 2 / [time] ** 3 / [temperature]",
    Quantity.TIME: "[time]",
}
# "Nm^3" would be a newton metre cubed.
_NORM = re.compile(r"\b(?P<prefix>k?)(?P<kind>[NS])m(?:\^3|\*\*3|³)")
# Where M is a thousand in the trade of the US and a million in SI, and MM a million in the trade.
_THOUSAND_OR_MILLION = re.compile(r"\bM(?P<of>Btu|BTU|scf|lbs?|pounds?)\b")
_MILLION = re.compile(r"\bMM(?P<of>Btu|BTU|scf|lbs?)\b")
_TON = re.compile(r"\btons?\b")
_COMMON = (
    "bar(g)", "bar(a)", "kPa(g)", "kPa(a)", "MPa(a)", "psi(g)", "psi(a)", "mbar(a)", "hPa(a)",
    "mmHg(a)", "mmHg(vac)", "inHg(vac)", "degC", "degF", "K", "t/h", "kg/h", "kg/s", "klb/h",
    "lb/h", "m^3/h", "Nm3/h", "kg/m^3", "kg/Nm3", "kW", "MW", "W", "%", "1", "m", "mm",
    "m^3", "kg", "t", "kJ/kg", "MJ/kg", "kW/K",
)  # fmt: skip
# The unit stands behind a space, so that a tag called '62-PT-001' is not read as a number.
_NUMBER = re.compile(
    r"^\s*(?P<value>[-+]?\d+(?:\.\d+)?(?:[eE][-+]?\d+)?)(?:\s+(?P<unit>\S.*?))?\s*$"
)


@cache
def _registry() -> Any:  # noqa: ANN401 - pint ships no annotations that mypy accepts here
    # Imported late: building the registry takes a second that `--help` should not pay.
    import pint  # noqa: PLC0415

    registry: Any = pint.UnitRegistry()
    registry.define("kilopound = 1000 * pound")
    registry.define("cubic_meter = meter ** 3 = m3")
    registry.define("gallon_per_minute = gallon / minute = gpm")
    # A norm volume is an amount of gas, not a volume: it needs a density of its own. ISO 13443 and
    # DIN 1343: 0 degC for the norm, 15 degC for the standard cubic metre, both at 101.325 kPa; a
    # standard cubic foot is taken at 60 degF and 101.325 kPa (common practice in US gas).
    registry.define("norm_cubic_meter = [norm_volume] = Nm3")
    registry.define("standard_cubic_meter = 273.15 / 288.15 * norm_cubic_meter = Sm3")
    registry.define(
        "standard_cubic_foot = 0.028316846592 * 273.15 / 288.7055555555556 * norm_cubic_meter = scf"
    )
    return registry


@cache
def parse_unit(text: str) -> Unit:
    """Read a unit as an engineer writes it.

    Args:
        text: for example ``bar(g)``, ``psi(a)``, ``mmHg(vac)``, ``degF``, ``klb/h``, ``MW``, ``%``.

    Raises:
        UnitError: the unit is unknown, measures nothing that the tool knows, or is a pressure that
            does not say whether it is absolute or gauge.
    """
    stripped = _JOINED.get(text.strip(), text.strip())
    match = _DATUM.match(stripped)
    base, datum = (match["base"], match["datum"]) if match else (stripped, None)
    _refuse_two_meanings(text, base)
    known = FACTORS.get(base)
    measured, scale, offset = (
        (Quantity(known[0]), *known[1:]) if known else _by_pint(base, stripped, text)
    )
    if (measured is Quantity.PRESSURE) != (datum is not None):
        if datum is None:
            raise UnitError(
                f"'{text}' is a pressure without a datum; write '{base}(a)' for absolute, "
                f"'{base}(g)' for gauge, '{base}(vac)' for vacuum or '{base}(d)' for a difference"
            )
        raise UnitError(f"'{text}': only a pressure can be absolute or gauge")
    return Unit(
        text=text,
        quantity=measured,
        scale=scale,
        offset=offset,
        datum=PressureDatum(_DATUM_WORDS.get(datum, datum)) if datum else None,
    )


def _by_pint(base: str, stripped: str, text: str) -> tuple[Quantity, float, float]:
    """Reduce any unit to SI: what it measures, its scale and its offset."""
    spelt = _MILLION.sub(r"M\g<of>", _NORM.sub(r"\g<prefix>\g<kind>m3", base))
    try:
        unit = _registry().Unit(_SPELLINGS.get(base, spelt))
    except Exception as error:
        near = difflib.get_close_matches(stripped, _COMMON, n=1)
        hint = f"; did you mean '{near[0]}'?" if near else ""
        raise UnitError(f"'{text}' is not a unit{hint}") from error
    measured = _quantity_of(unit, text)
    zero = cast("float", _registry().Quantity(0.0, unit).to(measured.value).magnitude)
    one = cast("float", _registry().Quantity(1.0, unit).to(measured.value).magnitude)
    return measured, one - zero, zero if measured is Quantity.TEMPERATURE else 0.0


def _refuse_two_meanings(text: str, base: str) -> None:
    two = _THOUSAND_OR_MILLION.search(base)
    if two:
        of = two["of"]
        raise UnitError(
            f"'{text}': M{of} is a thousand {of} to some and a million to others; write 'k{of}' "
            f"or 'MM{of}'"
        )
    if _TON.search(base):
        raise UnitError(
            f"'{text}': a ton is 2000 lb to some and 1000 kg to others; write 'short_ton' or 't'"
        )


def _quantity_of(unit: Any, text: str) -> Quantity:  # noqa: ANN401
    for measured, dimension in _DIMENSIONS.items():
        if unit.is_compatible_with(measured.value) and _registry().get_dimensionality(
            unit
        ) == _registry().get_dimensionality(dimension):
            return measured
    raise UnitError(f"'{text}' measures nothing this tool knows; known are {', '.join(_COMMON)}")


def split_number(text: str) -> tuple[float, str] | None:
    """Split ``'12.5 bar(g)'`` into its number and unit; None when it does not start as one."""
    match = _NUMBER.match(text)
    if match is None:
        return None
    return float(match["value"]), match["unit"] or "1"


def quantity(text: str, expected: Quantity, *, barometer: float | None = None) -> float:
    """Read a number with its unit into SI.

    Args:
        text: for example ``12.5 bar(a)`` or ``180 degC``.
        expected: what the place asks for.
        barometer: [Pa] used for a gauge or vacuum pressure; without it these are refused.

    Raises:
        UnitError: no number, an unknown unit, the wrong kind of quantity, or a gauge pressure
            where only an absolute one makes sense.
    """
    split = split_number(text)
    if split is None:
        raise UnitError(f"'{text}' is not a number with a unit, for example '{_EXAMPLE[expected]}'")
    value, unit_text = split
    unit = parse_unit(unit_text)
    if unit.quantity is not expected:
        raise UnitError(
            f"'{text}' is a {unit.quantity.name.lower().replace('_', ' ')}, but a "
            f"{expected.name.lower().replace('_', ' ')} is wanted, "
            f"for example '{_EXAMPLE[expected]}'"
        )
    si = value * unit.scale + unit.offset
    if unit.datum in {PressureDatum.GAUGE, PressureDatum.VACUUM}:
        if barometer is None:
            raise UnitError(f"'{text}': give this pressure as absolute, for example '1.013 bar(a)'")
        return barometer + si if unit.datum is PressureDatum.GAUGE else barometer - si
    return si


def difference(text: str, like: Unit) -> float:
    """Read a difference such as ``0.2 bar`` or ``0.5 K`` into a unit like the one given.

    Raises:
        UnitError: no number with a unit, a negative one, or a unit of another quantity.
    """
    split = split_number(text)
    own = None if split is None else _undated(split[1])
    if split is None or own is None or own.quantity is not like.quantity or split[0] < 0:
        raise UnitError(f"'{text}' is not an amount in a unit like '{like.text}'")
    return split[0] * own.scale / like.scale


def rate(text: str, like: Unit) -> float:
    """Read a rate of change such as ``5 bar/min`` or ``2 t/h/min`` into units per second.

    The last ``/`` stands before the time; what stands before it is a unit like the one given.

    Raises:
        UnitError: it cannot be read, is not positive, or is of another quantity.
    """
    amount, slash, time = text.rpartition("/")
    try:
        change, per = difference(amount, like), parse_unit(time)
    except UnitError as error:
        raise UnitError(_not_a_rate(text, like)) from error
    if not slash or per.quantity is not Quantity.TIME or change <= 0:
        raise UnitError(_not_a_rate(text, like))
    return change / per.scale


def _not_a_rate(text: str, like: Unit) -> str:
    base = _DATUM.match(like.text)
    return (
        f"'{text}' is not a rate of change of '{like.text}'; "
        f"write for example '5 {base['base'] if base else like.text}/min'"
    )


def _undated(text: str) -> Unit:
    """Read a unit of differences: a pressure may leave its datum out."""
    try:
        return parse_unit(text)
    except UnitError:
        return parse_unit(f"{text}(d)")


def duration_s(text: str) -> float:
    """Read a duration such as ``5 min``, ``2 h`` or ``30 s`` into seconds."""
    return quantity(text, Quantity.TIME)


_EXAMPLE = {
    Quantity.PRESSURE: "12 bar(a)",
    Quantity.TEMPERATURE: "180 degC",
    Quantity.MASS_FLOW: "40 t/h",
    Quantity.VOLUME_FLOW: "40 m^3/h",
    Quantity.NORM_VOLUME_FLOW: "900 Nm3/h",
    Quantity.DENSITY: "5.69 kg/m^3",
    Quantity.NORM_DENSITY: "0.8 kg/Nm3",
    Quantity.POWER: "5 MW",
    Quantity.FRACTION: "0.97",
    Quantity.LENGTH: "2.5 m",
    Quantity.VOLUME: "60 m^3",
    Quantity.MASS: "30 t",
    Quantity.SPECIFIC_ENERGY: "50 MJ/kg",
    Quantity.CONDUCTANCE: "3 kW/K",
    Quantity.TIME: "5 min",
}
