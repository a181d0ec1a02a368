"""Templates to pages: one environment, everything escaped, an unknown name an error."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import pandas as pd
from jinja2 import Environment, PackageLoader, StrictUndefined

from dashboards import formats, theme
from dashboards.files import (
    COSTS_FILE,
    DEAD_STATE_FILE,
    LATEST_SHIFT_FILE,
    OVERVIEW_FILE,
    equipment_file,
)
from dashboards.ground import ground, shared_ground, statements
from dashboards.marks import bullet, matters, quality_segments

if TYPE_CHECKING:
    from dashboards.views import PageContext

__all__ = ["STALE", "environment", "render_page"]

STALE = pd.Timedelta(hours=3)
"""A page whose newest figure is older than this when it is made says so."""

_CAUTION = (
    "A monitoring aid, not a protection system. Work on pressure equipment belongs to authorised "
    "people under local codes."
)
_EXPANDED = "±: expanded uncertainty (k = 2), from the classes of the instruments."
_LINKS = (
    (OVERVIEW_FILE, "Overview"),
    (LATEST_SHIFT_FILE, "Shift report"),
    (COSTS_FILE, "Costs"),
    (DEAD_STATE_FILE, "Dead state"),
)
_MANY_LINKS = 14


def environment() -> Environment:
    """Return the templates' environment: autoescape on, unknown names refused."""
    made = Environment(
        loader=PackageLoader("dashboards", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    made.filters.update(
        number=formats.number,
        quantity=formats.quantity,
        signed=formats.signed,
        fixed=formats.fixed,
        fitting=formats.fitting,
        unit_of_change=formats.unit_of_change,
        matters=matters,
        wetness=formats.wetness,
        percent=formats.percent,
        unit=formats.unit_text,
        moment=formats.moment,
        day=formats.day,
        shorten=formats.shorten,
        bullet=bullet,
        segments=quality_segments,
    )
    made.globals.update(
        MISSING=formats.MISSING,
        column=formats.column,
        power_column=formats.power_column,
        energy_column=formats.energy_column,
        money_column=formats.money_column,
        ground=ground,
        shared_ground=shared_ground,
        statements=statements,
        COLOURS=theme.COLOURS,
        LEDGER_COLOURS=theme.LEDGER_COLOURS,
        EXPANDED=_EXPANDED,
        FONT=theme.FONT,
        SIZES=theme.SIZES,
    )
    return made


_ENVIRONMENT = environment()


def render_page(template: str, context: PageContext, **values: Any) -> bytes:  # noqa: ANN401
    """Fill a page's template.

    Args:
        template: its name in ``templates/``.
        context: what the head and the foot say.
        values: what the template asks for besides.

    Returns:
        The page in UTF-8.

    Raises:
        PageError: an equipment in the navigation has an id that cannot name a page.
    """
    pages = {identifier: equipment_file(identifier) for identifier, _ in context.equipment}
    text = _ENVIRONMENT.get_template(template).render(
        context=context,
        pages=pages,
        links=_LINKS,
        many_links=len(context.equipment) > _MANY_LINKS,
        span=formats.span(context.start, context.end),
        freshness=_freshness(context),
        stale=_is_stale(context),
        caution=_CAUTION,
        **values,
    )
    # A lone surrogate, as a broken historian may hand out, has no UTF-8 form.
    return text.encode("utf-8", errors="replace")


def _is_stale(context: PageContext) -> bool:
    return context.newest is None or context.made - context.newest > STALE


def _freshness(context: PageContext) -> str:
    if context.newest is None:
        return "No figures yet: nothing has been computed for this site."
    age = context.made - context.newest
    if age > STALE:
        return (
            f"Stale: the newest figure is from {formats.moment(context.newest)}, "
            f"{formats.duration(age)} before this page was made. "
            "Look at the sources and the daemon."
        )
    newest = f"Newest figure {formats.moment(context.newest)}"
    if age < pd.Timedelta(minutes=1):
        # A demo lives in a time of its own, and a clock may be behind the historian's.
        return f"{newest}."
    return f"{newest}, page made {formats.duration(age)} later."
