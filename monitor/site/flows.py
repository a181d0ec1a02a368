"""Whether a stream's flow can become a mass flow: what its meter counts, what is known of it."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from monitor.readings.meters import design_density
from monitor.site.models import Reference
from monitor.site.units import Quantity

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from monitor.site.models import Stream, Tag

__all__ = ["flow_complaints", "meter_complaints"]


def flow_complaints(stream: Stream, tags: Mapping[str, Tag]) -> Iterator[str]:
    """Say what keeps a stream's measured flow from becoming a mass flow.

    Args:
        stream: of water or fuel.
        tags: the site's tags by name; a flow of a tag that is not among them is passed over.
    """
    if not isinstance(stream.flow, Reference):
        return
    tag = tags.get(stream.flow.tag or "")
    unit = stream.flow.unit if tag is None else tag.unit
    if unit is None:
        return
    what = f"the fixed flow '{unit.text}'" if tag is None else f"tag '{tag.name}'"
    stated = tag is not None and tag.metered_density is not None
    corrected = tag is not None and tag.meter is not None and tag.meter.needs_density
    if unit.quantity is Quantity.NORM_VOLUME_FLOW and not stated:
        yield (
            f"{what} counts norm volume; a mass flow needs the gas's density there: "
            "meter = { density = '0.8 kg/Nm3' } in its [[tag]]"
        )
    elif unit.quantity is Quantity.VOLUME_FLOW and stream.medium == "fuel" and not stated:
        yield (
            f"{what} counts volume; a mass flow needs the fuel's density: "
            "meter = { density = '860 kg/m^3' } in its [[tag]]"
        )
    if corrected and stream.medium == "fuel":
        yield (
            f"the meter of {what} is not compensated, but a fuel has no state to correct it with; "
            "leave the design values and 'compensated' out"
        )
    if corrected and unit.quantity is Quantity.NORM_VOLUME_FLOW and stream.medium == "water":
        yield f"{what} counts norm volume: such a meter is compensated already"
    by_state = unit.quantity is Quantity.VOLUME_FLOW and not stated
    if stream.enthalpy is not None and (by_state or corrected):
        yield (
            f"{what} needs the stream's density to give a mass flow, but the stream's enthalpy "
            "comes from a balance, which needs the mass flow; give a temperature or a dryness"
        )


def meter_complaints(tag: Tag) -> Iterator[str]:
    """Say why a meter's design state gives no density."""
    if tag.meter is None or not tag.meter.needs_density:
        return
    if not np.isfinite(design_density(tag.meter)):
        yield (
            "the design state lies outside the steam tables, or on the saturation line, where "
            "pressure and temperature do not fix it: give design_dryness, or design_density"
        )
