"""Every page of a site, written."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pandas as pd

import dashboards
from monitor.errors import LostworkError
from monitor.reports.costs import costs_view
from monitor.reports.dead_state import dead_state_view
from monitor.reports.equipment import equipment_view
from monitor.reports.gather import Gathered
from monitor.reports.overview import overview_view

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from monitor.site.load import Site
    from monitor.store.site import SiteStore

__all__ = ["page_span", "pages_folder", "write_pages"]


def pages_folder(site: Site) -> Path:
    """The folder that the site's pages go to."""
    return site.folder / site.file.pages.folder


def page_span(site: Site, store: SiteStore) -> tuple[pd.Timestamp, pd.Timestamp]:
    """The span that the pages cover: the last so many days of figures, in whole hours.

    Raises:
        LostworkError: the store has no figures yet.
    """
    newest, oldest = store.newest(), store.oldest()
    if newest is None or oldest is None:
        raise LostworkError(
            f"the store of site '{site.id}' has no figures yet; run `lostwork once` or "
            "`lostwork backfill` first"
        )
    end = (newest + pd.Timedelta(seconds=site.file.site.interval)).ceil("h")
    start = max(oldest.floor("h"), end - pd.Timedelta(days=site.file.pages.days))
    return start, end


def write_pages(site: Site, store: SiteStore, now: pd.Timestamp) -> Iterator[Path]:
    """Write the overview, a page a piece of equipment, costs and the dead state.

    Yields:
        Each page's path once it stands in the folder, the overview first.

    Raises:
        PageError: the folder cannot be written.
        LostworkError: the store has no figures yet.
    """
    start, end = page_span(site, store)
    gathered = Gathered(site, store, start, end, now)
    folder = pages_folder(site)
    dashboards.write_assets(folder)
    overview = overview_view(gathered)
    yield dashboards.write_overview(overview, folder)
    rows = {row.id: row for row in overview.equipment}
    for item in gathered.items:
        own = tuple(c for c in overview.conditions if c.equipment == item.id)
        yield dashboards.write_equipment(equipment_view(gathered, item, rows[item.id], own), folder)
    yield dashboards.write_costs(costs_view(gathered), folder)
    yield dashboards.write_dead_state(dead_state_view(gathered), folder)
