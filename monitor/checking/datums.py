"""Pressures whose datum is the odd one out: absolute among gauges, or the other way round.

A bar of datum in sixty moves no balance enough to be seen, so what the physics cannot tell is told
by practice: nearly every transmitter above the barometer shows gauge pressure, and a site's tag
list has them alike. A tag that differs may be right, but is worth a look at its data sheet.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from monitor.site.units import PressureDatum, Quantity

if TYPE_CHECKING:
    from monitor.checking.typical import Typical
    from monitor.site.load import Site

__all__ = ["odd_datums"]

_ABOVE = 1.3
"""Multiples of the barometer from which absolute and gauge are both usual ways to show it."""
_LEAST_OTHERS = 4
_MOST_ODD = 0.2


def odd_datums(site: Site, day: Typical) -> dict[str, str]:
    """Return the tags whose datum few others have, with the reason."""
    above: dict[str, PressureDatum] = {}
    for name, tag in site.used_tags().items():
        datum = tag.unit.datum
        if tag.unit.quantity is not Quantity.PRESSURE or name not in day.raw or datum is None:
            continue
        pressure = day.raw[name] * tag.unit.scale
        pressure += day.barometer if datum is PressureDatum.GAUGE else 0.0
        if pressure > _ABOVE * day.barometer and datum is not PressureDatum.VACUUM:
            above[name] = datum
    odd: dict[str, str] = {}
    words = {PressureDatum.ABSOLUTE: "absolute", PressureDatum.GAUGE: "gauge"}
    for name, datum in above.items():
        others = [d for n, d in above.items() if n != name]
        alike = sum(d is datum for d in others)
        usual = next((d for d in others if d is not datum), datum)
        if len(others) >= _LEAST_OTHERS and alike < _MOST_ODD * len(others) and datum in words:
            odd[name] = (
                f"looks like {words.get(usual, usual.value)} pressure taken as {words[datum]}: "
                f"{len(others) - alike} of the site's {len(others)} other pressures above the "
                f"barometer are {words.get(usual, usual.value)}; see its data sheet"
            )
    return odd
