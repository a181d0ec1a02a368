"""What a tag's class of uncertainty is worth, stated in the site file or by default.

A class is a standard uncertainty: of the instrument as it stands in the plant, its calibration and
its drift between two of them. It does not average out: an hour's mean is as uncertain as a cell.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

from monitor.site.tags import parse_uncertainty
from monitor.site.units import Quantity

if TYPE_CHECKING:
    from monitor.equipment.base import FloatArray
    from monitor.site.models import Tag
    from monitor.site.tags import Uncertainty
    from monitor.site.units import Unit

__all__ = ["DEFAULTS", "InstrumentClass", "class_of", "standard_uncertainty"]

DEFAULTS = {
    Quantity.PRESSURE: "1 % reading",
    Quantity.TEMPERATURE: "1.5 K",
    Quantity.MASS_FLOW: "2 % reading",
    Quantity.VOLUME_FLOW: "2 % reading",
    Quantity.NORM_VOLUME_FLOW: "2 % reading",
    Quantity.POWER: "1 % reading",
    Quantity.FRACTION: "1 %",
    Quantity.LENGTH: "1 % reading",
    Quantity.VOLUME: "1 % reading",
    Quantity.MASS: "1 % reading",
}
"""Classes of tags that state none: plant instruments in service, common practice."""


@dataclass(frozen=True)
class InstrumentClass:
    """A tag's class as a person reads it, and whether the site file states it."""

    text: str
    stated: bool


def class_of(tag: Tag) -> InstrumentClass | None:
    """The class of a tag; None where it states none and its quantity has no default."""
    if tag.uncertainty:
        return InstrumentClass(tag.uncertainty, stated=True)
    default = DEFAULTS.get(tag.unit.quantity)
    return None if default is None else InstrumentClass(default, stated=False)


@lru_cache(maxsize=1024)
def _parsed(text: str, unit: Unit) -> Uncertainty:
    return parse_uncertainty(text, unit)


def standard_uncertainty(tag: Tag, values: FloatArray) -> FloatArray:
    """Standard uncertainty of a tag's readings [SI]; NaN where the tag has no class.

    Args:
        tag: the tag.
        values: its readings in SI, pressures on the tag's own datum.
    """
    found = class_of(tag)
    if found is None:
        return np.full_like(values, np.nan)
    parsed = _parsed(found.text, tag.unit)
    if parsed.basis == "reading":
        # A share of what the instrument shows: of degrees Celsius, not of kelvins.
        return np.asarray(parsed.amount * np.abs(values - tag.unit.offset))
    if parsed.basis == "range" and tag.range is not None:
        span = (tag.range[1] - tag.range[0]) * tag.unit.scale
        return np.full_like(values, parsed.amount * span)
    return np.full_like(values, parsed.amount)
