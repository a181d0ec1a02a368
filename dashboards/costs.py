"""The page of costs: what destroyed exergy costs where it happens, and what could be avoided."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

from dashboards.embed import Chart
from dashboards.files import COSTS_FILE, write_atomically
from dashboards.formats import money_column, plotly_text, quantity
from dashboards.ranking import end_words, print_height, ranking_layout
from dashboards.render import render_page
from dashboards.theme import COLOURS

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    from dashboards.views import CostRow, CostsView

__all__ = ["write_costs"]

_MOST_BARS = 15


def write_costs(view: CostsView, folder: Path) -> Path:
    """Write the page of costs.

    Args:
        view: what to draw.
        folder: where the pages are; made if it is not there.

    Returns:
        The page's path.

    Raises:
        PageError: the folder cannot be written, or an equipment id cannot name a page.
    """
    content = render_page(
        "costs.html",
        view.context,
        view=view,
        ranking=_ranking(view.equipment, view.currency),
        avoidable_kw=_sum(row.avoidable_kw for row in view.equipment),
        avoidable_per_day=_sum(row.avoidable_per_day for row in view.equipment),
        chances=[row for row in _by_avoidable(view.equipment) if row.avoidable_kw > _RESIDUE],
        notes=[row for row in view.streams if row.note],
    )
    return write_atomically(Path(folder) / COSTS_FILE, content)


_RESIDUE = 1e-6
"""[kW] What sums of doubles leave is no chance, though it may be all that a main destroys."""


def _by_avoidable(rows: Sequence[CostRow]) -> list[CostRow]:
    known = [row for row in rows if math.isfinite(row.avoidable_per_day)]
    return sorted(known, key=lambda row: -row.avoidable_per_day)


def _sum(values: Iterable[float]) -> float:
    """The sum of what is known; NaN where nothing is."""
    known = [value for value in values if math.isfinite(value)]
    return math.fsum(known) if known else math.nan


def _ranking(rows: Sequence[CostRow], currency: str) -> Chart | None:
    """Draw cost a day by equipment, the dearest first; the avoidable part stands out.

    Returns:
        The chart, or None when no row holds a cost above nothing.
    """
    ranked = [row for row in rows if math.isfinite(row.cost_per_day) and row.cost_per_day > 0]
    if not ranked:
        return None
    ranked = ranked[:_MOST_BARS]
    money = money_column((row.cost_per_day for row in ranked), currency)
    # Above nothing and known, or nothing: NaN is not above it.
    avoidable = [row.avoidable_per_day if row.avoidable_per_day > 0 else 0.0 for row in ranked]
    rest = [row.cost_per_day - part for row, part in zip(ranked, avoidable, strict=True)]
    costs = [row.cost_per_day for row in ranked]
    data = [
        _bars(rest, ranked, "unavoidable, or not compared", COLOURS["soft"], money.unit),
        _bars(avoidable, ranked, "avoidable", COLOURS["vermilion"], money.unit),
        end_words(costs, [money.with_unit(cost) for cost in costs]),
    ]
    names, span = [row.name for row in ranked], (0.0, costs[0] * 1.25)
    layout = ranking_layout(names, span, f"{money.unit} per day", barmode="stack")
    listed = "; ".join(
        f"{row.name} {quantity(row.cost_per_day, currency, 3)} a day" for row in ranked[:5]
    )
    more = len(rows) - len(ranked)
    return Chart(
        "cost-ranking",
        {"data": data, "layout": layout},
        f"Cost of destroyed exergy by equipment, the dearest first: {listed}.",
        note=f"{more} more in the table below." if more else "",
        print_height=print_height(len(ranked)),
    )


def _bars(
    values: Sequence[float], rows: Sequence[CostRow], name: str, colour: str, unit: str
) -> dict[str, Any]:
    return {
        "type": "bar",
        "orientation": "h",
        "x": list(values),
        "y": list(range(len(rows))),
        "name": name,
        "marker": {"color": colour},
        "customdata": [plotly_text(row.name) for row in rows],
        "hovertemplate": f"%{{customdata}}, {name}: %{{x:,.4~r}} {plotly_text(unit)} per day"
        "<extra></extra>",
    }
