"""Units as exports write them: told from other texts, and spelt as a site file spells them."""

from __future__ import annotations

import re
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["is_unit", "needs_datum", "unit_in_header", "unit_row", "usual_unit"]

_USUAL = {
    "°c": "degC", "c": "degC", "deg c": "degC", "degc": "degC", "grad c": "degC", "celsius": "degC",
    "°f": "degF", "f": "degF", "deg f": "degF", "degf": "degF", "fahrenheit": "degF", "k": "K",
    "bar g": "bar(g)", "barg": "bar(g)", "bar ü": "bar(g)", "barü": "bar(g)", "bar(ü)": "bar(g)",
    "bar(g)": "bar(g)", "bar a": "bar(a)", "bara": "bar(a)", "bar abs": "bar(a)",
    "bar(abs)": "bar(a)", "bar(a)": "bar(a)", "mbar a": "mbar(a)", "mbara": "mbar(a)",
    "mbar abs": "mbar(a)", "mbar(a)": "mbar(a)", "mbar(g)": "mbar(g)", "kpag": "kPa(g)",
    "kpa g": "kPa(g)", "kpa(g)": "kPa(g)", "kpaa": "kPa(a)", "kpa a": "kPa(a)", "kpa(a)": "kPa(a)",
    "kpa abs": "kPa(a)", "mpag": "MPa(g)", "mpa g": "MPa(g)", "mpa(g)": "MPa(g)",
    "mpa a": "MPa(a)", "mpa(a)": "MPa(a)", "psig": "psi(g)", "psi(g)": "psi(g)", "psia": "psi(a)",
    "psi(a)": "psi(a)", "mmhg(vac)": "mmHg(vac)", "mmhg vac": "mmHg(vac)",
    "inhg(vac)": "inHg(vac)", "inhg vac": "inHg(vac)", "mbar(vac)": "mbar(vac)",
    "mbar vac": "mbar(vac)", "kpa(vac)": "kPa(vac)", "kpa vac": "kPa(vac)", "bar": "bar",
    "mbar": "mbar", "kpa": "kPa", "mpa": "MPa", "pa": "Pa", "psi": "psi", "mmhg": "mmHg",
    "inhg": "inHg", "cmhg": "cmHg", "hpa": "hPa", "kg/s": "kg/s", "t/h": "t/h", "to/h": "t/h",
    "t/hr": "t/h", "kg/h": "kg/h", "kg/hr": "kg/h", "lb/h": "lb/h", "lb/hr": "lb/h",
    "klb/h": "klb/h", "klb/hr": "klb/h", "kpph": "klb/h", "pph": "lb/h", "scfh": "scf/h",
    "scf/h": "scf/h", "mmbtu/h": "MMBtu/h", "scf/hr": "scf/h", "gpm": "gpm", "kw": "kW",
    "mw": "MW", "w": "W", "%": "%", "m": "m", "mm": "mm", "cm": "cm", "m3": "m^3", "m³": "m^3",
    "m3/h": "m^3/h", "m³/h": "m^3/h",
    "nm3/h": "Nm3/h", "nm³/h": "Nm3/h", "l/s": "l/s", "l/min": "l/min", "kg": "kg", "t": "t",
    "kj/kg": "kJ/kg", "mj/kg": "MJ/kg", "hz": "Hz", "rpm": "rpm", "1/min": "1/min", "v": "V",
    "a": "A", "kv": "kV", "kwh": "kWh", "mwh": "MWh", "ppm": "ppm", "ph": "pH", "-": "", "[-]": "",
}  # fmt: skip

_PRESSURES = frozenset({"bar", "mbar", "kPa", "MPa", "Pa", "psi", "mmHg", "inHg", "cmHg", "hPa"})
_BRACKETS = re.compile(r"^[\[(](?P<unit>.*)[\])]$")
_IN_HEADER = re.compile(r"^.+?\s*(\[(?P<square>[^\]]+)\]|\((?P<round>[^()]*(\([^()]*\))?)\))$")


def usual_unit(text: str) -> str:
    """Return a unit as a site file spells it; one that is not known as it stands."""
    plain = text.strip()
    known = _USUAL.get(plain.casefold())
    if known is not None:
        return known
    inner = _BRACKETS.match(plain)
    return usual_unit(inner["unit"]) if inner else plain


def is_unit(text: str) -> bool:
    """Say whether a text is a known unit."""
    plain = text.strip()
    inner = _BRACKETS.match(plain)
    return plain.casefold() in _USUAL or bool(inner and inner["unit"].casefold() in _USUAL)


def needs_datum(unit: str) -> bool:
    """Say whether a unit is a pressure that does not tell absolute from gauge."""
    return unit in _PRESSURES


def unit_in_header(name: str) -> str:
    """Return the unit in brackets at the end of a header, empty for none."""
    match = _IN_HEADER.match(name)
    found = "" if match is None else match["square"] or match["round"]
    return usual_unit(found) if found and (is_unit(found) or name.endswith("]")) else ""


def unit_row(rows: Sequence[Sequence[str]]) -> int | None:
    """Return which of the rows below a header holds units: most of its cells are known ones."""
    for number, row in enumerate(rows):
        cells = [cell for cell in row if cell]
        if cells and sum(map(is_unit, cells)) * 2 > len(cells):
            return number
    return None
