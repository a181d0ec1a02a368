"""A site's condition figures judged as its site file asks."""

from __future__ import annotations

import time
from functools import cache
from typing import TYPE_CHECKING

from monitor.costing import span_costs
from monitor.drift.judge import judge
from monitor.drift.raising import Money
from monitor.drift.rules import figure_rules, settings_of

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping

    from monitor.drift.judge import FigureStatus
    from monitor.drift.judgement import FigureRule
    from monitor.site.load import Site
    from monitor.store.site import SiteStore

__all__ = ["judge_site", "plant_now", "rules_of", "tags_behind", "tags_of_stream"]


def judge_site(
    site: Site,
    store: SiteStore,
    start: int,
    end: int,
    now: int,
    *,
    only: tuple[FigureRule, ...] | None = None,
) -> tuple[FigureStatus, ...]:
    """Judge what is new or changed in [start, end) (integer UTC seconds), and store the outcome.

    Args:
        site: the site.
        store: its part of the store.
        start: of the cells that are new, changed, or come after a recorded event.
        end: of these cells.
        now: when baselines are made, and up to when shelvings have run; see `plant_now`.
        only: these figures; all that the site judges when left out.
    """
    drift, alarms = site.file.drift, site.file.alarms
    return judge(
        store,
        rules_of(site) if only is None else only,
        settings_of(drift, alarms, site.file.site.time_zone),
        start,
        end,
        now,
        money=Money(_unit_costs(site, store), site.file.economics.currency),
        tags=tags_behind(site),
    )


def _unit_costs(site: Site, store: SiteStore) -> Callable[[str, tuple[int, int]], float]:
    """Unit costs along the chain, computed when an alarm first asks for a reference period."""

    @cache
    def over(reference: tuple[int, int]) -> Mapping[str, float]:
        return span_costs(site, store, *reference).money.equipment

    return lambda subject, reference: over(reference)[subject]


def rules_of(site: Site) -> tuple[FigureRule, ...]:
    """The condition figures that the site judges."""
    return figure_rules(site.items.values(), site.file.drift)


def tags_behind(site: Site) -> dict[str, frozenset[str]]:
    """The tags that each piece of equipment rests on: its streams' and its own."""
    return {
        item.id: frozenset(
            tag
            for stream in (*item.ids("in"), *item.ids("out"))
            for tag in tags_of_stream(site, stream)
        )
        | {reference.tag for reference, _ in item.options.signals().values() if reference.tag}
        for item in site.items.values()
    }


def plant_now(store: SiteStore, wall_clock: float | None = None) -> int:
    """The wall clock, or the newest figure's end where that is later, integer UTC seconds.

    An alarm must never be acknowledged before it was raised, whatever the clocks say.
    """
    clock = int(time.time() if wall_clock is None else wall_clock)
    newest = store.newest()
    return clock if newest is None else max(clock, int(newest.timestamp()) + store.interval_s)


def tags_of_stream(site: Site, stream: str) -> Iterator[str]:
    """The tags that a stream of the site reads."""
    for _, reference, _ in site.streams[stream].references():
        if reference.tag:
            yield reference.tag
