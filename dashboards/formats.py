"""Numbers, times and words as pages show them: three or four significant digits, always a unit."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterable

    import pandas as pd

__all__ = [
    "MISSING",
    "Column",
    "column",
    "day",
    "duration",
    "energy_column",
    "fitting",
    "fixed",
    "moment",
    "money_column",
    "number",
    "percent",
    "plotly_text",
    "power_column",
    "quantity",
    "shorten",
    "signed",
    "span",
    "unit_of_change",
    "unit_text",
    "wetness",
]

MISSING = "–"
"""What stands where there is no figure."""

_GAP = "\u202f"  # narrow no-break space, between thousands (ISO 80000-1, 7.3.1)
_UNIT_GAP = "\u00a0"  # no-break space, between number and unit (ISO 80000-1, 7.1.4)
_MINUS = "\u2212"
_MOST_DECIMALS = 5
_LONGEST_UNIT = 16
_TOO_LARGE = 1e9
_RESIDUE = 1e-9
_MEGA = 20_000.0  # from here on a column in kW or MWh reads better in MW or GWh
_MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")
_DAYS = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")
_UNITS = {
    "1": "",
    "-": "",
    "dimensionless": "",
    "degC": "°C",
    "degF": "°F",
    "C": "°C",
    "F": "°F",
    "m3": "m³",
}
_POWER = re.compile(r"\^(-?\d+)")
_SUPERSCRIPTS = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def _decimals(size: float, digits: int) -> int:
    if size == 0.0 or not math.isfinite(size):
        return 0
    return min(max(digits - 1 - math.floor(math.log10(size)), 0), _MOST_DECIMALS)


def _fixed(value: float, decimals: int) -> str:
    text = f"{abs(value):,.{decimals}f}".replace(",", _GAP)
    is_zero = not any(digit in text for digit in "123456789")
    return text if value >= 0 or is_zero else _MINUS + text


def _power_of_ten(value: float, digits: int) -> str:
    mantissa, exponent = f"{abs(value):.{digits - 1}e}".split("e")
    sign = _MINUS if value < 0 else ""
    return f"{sign}{mantissa}×10{str(int(exponent)).translate(_SUPERSCRIPTS)}"


def number(value: float | None, digits: int = 4) -> str:
    """Write a number with so many significant digits, thousands set apart.

    Args:
        value: any number; None, NaN and infinities give a dash.
        digits: significant digits; whole digits are rounded to these too (123 456 is 123 500).
    """
    if value is None or not math.isfinite(value):
        return MISSING
    if value == 0.0:
        return "0"
    rounded = float(f"{value:.{digits - 1}e}")
    tiny = 10.0 ** (digits - 2 - _MOST_DECIMALS)
    if abs(rounded) >= _TOO_LARGE or abs(rounded) < tiny:
        return _power_of_ten(value, digits)
    return _fixed(rounded, _decimals(abs(rounded), digits))


def quantity(value: float | None, unit: str, digits: int = 4) -> str:
    """Write a number with its unit behind a no-break space."""
    text, shown = number(value, digits), unit_text(unit)
    return text if text == MISSING or not shown else f"{text}{_UNIT_GAP}{shown}"


def fixed(value: float | None, unit: str, decimals: int) -> str:
    """Write a quantity with so many decimals; what rounds to zero is 0, without a sign."""
    if value is None or not math.isfinite(value):
        return MISSING
    text, shown = _fixed(value, decimals), unit_text(unit)
    if not any(digit in text for digit in "123456789"):
        text = "0"
    return f"{text}{_UNIT_GAP}{shown}" if shown else text


def unit_of_change(unit: str) -> str:
    """The unit of a difference: two percentages differ by points."""
    return "points" if unit == "%" else unit


def fitting(value: float | None, unit: str, smallest: float, *, sign: bool = False) -> str:
    """Write a quantity with the decimals that show the smallest change that matters.

    Args:
        value: any number; None, NaN and infinities give a dash.
        unit: behind it.
        smallest: the smallest change that matters, in the same unit; without one, three
            significant digits.
        sign: put a plus before what is above zero.
    """
    if smallest > 0.0 and math.isfinite(smallest):
        decimals = min(max(math.ceil(0.5 - math.log10(smallest)), 0), _MOST_DECIMALS)
        text = fixed(value, unit, decimals)
    else:
        # What sums of doubles leave is no figure.
        is_residue = value is not None and abs(value) < _RESIDUE
        text = quantity(0.0 if is_residue else value, unit, 3)
    some = any(digit in text.split(_UNIT_GAP)[0] for digit in "123456789")
    return f"+{text}" if sign and some and value is not None and value > 0 else text


def signed(value: float | None, digits: int = 3, unit: str = "") -> str:
    """Write a difference: a plus or a minus always stands before it, zero has neither."""
    text = quantity(value, unit, digits)
    return f"+{text}" if value is not None and text != MISSING and value > 0 else text


def wetness(dryness: float | None) -> str:
    """Write a dryness fraction where steam is wet; beside saturation it says nothing."""
    if dryness is None or not 0.0 < dryness < 1.0:
        return MISSING
    return _fixed(dryness, 3)


def percent(share: float | None, decimals: int = 1) -> str:
    """Write a share (0 to 1) in percent with fixed decimals."""
    if share is None or not math.isfinite(share):
        return MISSING
    return f"{_fixed(share * 100.0, decimals)}{_UNIT_GAP}%"


@dataclass(frozen=True)
class Column:
    """How one column of a table writes its numbers: all with the same unit and decimals.

    Attributes:
        unit: the unit as shown in the column's head.
        factor: what a value is multiplied with first.
        decimals: digits behind the point.
        whole: significant digits that stay where there are none behind the point.
    """

    unit: str
    factor: float = 1.0
    decimals: int = 0
    whole: int = 4

    def text(self, value: float | None) -> str:
        """Write one value of the column, without the unit."""
        if value is None or not math.isfinite(value):
            return MISSING
        scaled = value * self.factor
        if self.decimals:
            return _fixed(scaled, self.decimals)
        return _fixed(float(f"{scaled:.{self.whole - 1}e}"), 0)

    def change(self, value: float | None) -> str:
        """Write a difference with its sign."""
        text = self.text(value)
        some = any(digit in text for digit in "123456789")
        return f"+{text}" if value is not None and some and value > 0 else text

    def with_unit(self, value: float | None) -> str:
        """Write one value with the unit."""
        text = self.text(value)
        return text if text == MISSING or not self.unit else f"{text}{_UNIT_GAP}{self.unit}"


def _largest(values: Iterable[float | None]) -> float:
    return max((abs(v) for v in values if v is not None and math.isfinite(v)), default=0.0)


def column(values: Iterable[float | None], unit: str, digits: int = 4) -> Column:
    """Choose decimals so that the largest value has ``digits`` significant digits."""
    decimals = min(_decimals(_largest(values), digits), 3)
    return Column(unit_text(unit), 1.0, decimals, digits)


def _scaled(values: Iterable[float | None], units: tuple[str, str]) -> Column:
    largest = _largest(values)
    factor, unit = (1e-3, units[1]) if largest >= _MEGA else (1.0, units[0])
    # Below one unit the last digits of a rate are noise: two decimals do.
    return Column(unit, factor, min(_decimals(largest * factor, 4), 2))


def power_column(values: Iterable[float | None]) -> Column:
    """Choose kW or MW for rates given in kW."""
    return _scaled(values, ("kW", "MW"))


def energy_column(values: Iterable[float | None]) -> Column:
    """Choose MWh or GWh for totals given in MWh."""
    return _scaled(values, ("MWh", "GWh"))


def money_column(values: Iterable[float | None], currency: str) -> Column:
    """Write money in whole units of the currency, with four significant digits at most."""
    del values  # money needs no look at the others: it never has decimals on these pages
    return Column(unit_text(currency), 1.0, 0)


def unit_text(unit: str) -> str:
    """Write a unit as a page shows it (``degC`` as °C, ``m^3/h`` as m³/h, a number as nothing)."""
    known = _UNITS.get(unit.strip(), unit.strip())
    raised = _POWER.sub(lambda power: power[1].translate(_SUPERSCRIPTS), known)
    return shorten(raised, _LONGEST_UNIT)


def day(time: pd.Timestamp) -> str:
    """Write a date such as ``Mon 2 Mar 2026``."""
    return f"{_DAYS[time.weekday()]} {time.day} {_MONTHS[time.month - 1]} {time.year}"


def moment(time: pd.Timestamp | None) -> str:
    """Write a local time such as ``2 Mar 2026 06:00``; the page's foot names the time zone."""
    if time is None or time != time:  # noqa: PLR0124 - NaT is the one time unequal to itself
        return MISSING
    month = _MONTHS[time.month - 1]
    return f"{time.day} {month} {time.year} {time.hour:02d}:{time.minute:02d}"


def span(start: pd.Timestamp, end: pd.Timestamp) -> str:
    """Write a span of time, naming a day once when both ends lie in it."""
    head = f"{day(start)} {start.hour:02d}:{start.minute:02d}"
    tail = f"{end.hour:02d}:{end.minute:02d}"
    return f"{head} to {tail}" if start.date() == end.date() else f"{head} to {day(end)} {tail}"


def duration(length: pd.Timedelta) -> str:
    """Write a length of time in its two largest units (``3 h 20 min``)."""
    minutes = max(int(length.total_seconds() // 60), 0)
    days, hours, left = minutes // 1440, minutes // 60 % 24, minutes % 60
    if days:
        return f"{days} d {hours} h" if hours else f"{days} d"
    if hours:
        return f"{hours} h {left} min" if left else f"{hours} h"
    return f"{left} min"


def shorten(text: str, most: int) -> str:
    """Cut a text to ``most`` characters, the last an ellipsis where something was cut."""
    joined = " ".join(text.split())
    return joined if len(joined) <= most else joined[: most - 1].rstrip() + "…"


def plotly_text(text: str) -> str:
    """Make a text inert inside a figure.

    Plotly reads a small set of HTML tags, character entities and ``%{...}`` placeholders in titles,
    labels and hover texts; entities are what it turns back to the plain characters.
    """
    escaped = text.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")
    return escaped.replace("%{", "%&#8203;{").replace("$", "&#36;")
