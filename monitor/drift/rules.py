"""What the site file asks for, as the judging needs it."""

from __future__ import annotations

import zoneinfo
from typing import TYPE_CHECKING

from monitor.drift.judgement import FigureRule, Settings

if TYPE_CHECKING:
    import datetime as dt
    from collections.abc import Iterable

    from monitor.equipment.base import Item
    from monitor.site.models import Alarms, Drift

__all__ = ["figure_rules", "settings_of"]


def figure_rules(items: Iterable[Item], drift: Drift) -> tuple[FigureRule, ...]:
    """List the condition figures that are judged, with the site's own smallest changes."""
    stated = {(own.equipment, own.figure): own for own in drift.figure}
    rules = []
    for item in items:
        for figure in item.kind.figures(item):
            own = stated.get((item.id, figure.name))
            if not figure.judged or (own is not None and not own.judged):
                continue
            smallest = None if own is None else own.smallest_change
            rules.append(
                FigureRule(
                    subject=item.id,
                    subject_name=item.name or item.id,
                    figure=figure.name,
                    label=figure.label,
                    unit=figure.unit,
                    worse=figure.worse,
                    smallest_change=figure.smallest_change if smallest is None else smallest,
                    follows_load=figure.follows_load,
                    load_streams=figure.load_streams,
                    advice=figure.advice,
                )
            )
    return tuple(rules)


def settings_of(drift: Drift, alarms: Alarms, time_zone: str) -> Settings:
    """Turn [drift] and [alarms] into seconds; a stated time without an offset is local.

    Of a reference period with one end stated, ``reference_length`` gives the other.
    """
    reference = None
    begins, ends = drift.reference_from, drift.reference_to
    length = int(drift.reference_length)
    if begins is not None:
        first = _seconds(begins, time_zone)
        reference = first, first + length if ends is None else _seconds(ends, time_zone)
    elif ends is not None:
        last = _seconds(ends, time_zone)
        reference = last - length, last
    return Settings(
        weight=drift.weight,
        false_alarm_every=drift.false_alarm_every,
        reference=reference,
        reference_length=drift.reference_length,
        least_hours=drift.least_hours,
        least_cells=drift.least_cells,
        on_delay=alarms.on_delay,
        off_delay=alarms.off_delay,
    )


def _seconds(time: dt.datetime, time_zone: str) -> int:
    aware = time if time.tzinfo is not None else time.replace(tzinfo=zoneinfo.ZoneInfo(time_zone))
    return int(aware.timestamp())
