"""A site's readings conditioned: its tags, and whose movement tells that a tag is stuck."""

from __future__ import annotations

from typing import TYPE_CHECKING

from monitor.readings.condition import Conditioned, condition
from monitor.site.models import Reference, Stream

if TYPE_CHECKING:
    from collections.abc import Iterator

    import pandas as pd

    from monitor.readings.grid import Grid
    from monitor.site.load import Site

__all__ = ["condition_site", "neighbours"]


def condition_site(site: Site, readings: pd.DataFrame, grid: Grid) -> Conditioned:
    """Bring the readings of every tag that the site uses to the grid.

    Args:
        site: the site.
        readings: of all its tags, from ``monitor.figures.lead_in`` before the window.
        grid: the window and its lead-in.
    """
    return condition(
        readings, site.used_tags(), grid, site.file.site.least_coverage, neighbours(site)
    )


def neighbours(site: Site) -> dict[str, frozenset[str]]:
    """The other tags of the equipment that each tag belongs to.

    The ambient's tags belong to no equipment: a still evening is no broken thermometer.
    """
    dead = site.file.dead_state
    ambient = {reference.tag for reference in (dead.temperature, dead.pressure)}
    beside: dict[str, set[str]] = {}
    for item in site.items.values():
        tags = {
            reference.tag
            for stream in (*item.ids("in"), *item.ids("out"))
            for reference in _references(site.streams[stream])
        } | {reference.tag for reference, _ in item.options.signals().values()}
        for tag in tags - {None} - ambient:
            beside.setdefault(str(tag), set()).update(t for t in tags if t and t != tag)
    return {tag: frozenset(others) for tag, others in beside.items()}


def _references(stream: Stream) -> Iterator[Reference]:
    for key in Stream.model_fields:
        value = getattr(stream, key)
        if isinstance(value, Reference):
            yield value
