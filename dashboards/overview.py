"""The overview page: what needs attention, then the ledger, then what stands behind it."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import pandas as pd

from dashboards.figures import ledger_trend
from dashboards.files import OVERVIEW_FILE, write_atomically
from dashboards.flows import flow_diagram, flow_kinds, ranked_destruction
from dashboards.formats import MISSING, number, percent, power_column
from dashboards.render import render_page

if TYPE_CHECKING:
    from collections.abc import Sequence

    from dashboards.views import ConditionRow, LedgerLine, OverviewView

__all__ = ["ranked_conditions", "write_overview"]

_FIRST_ALARMS = 3
"""So many stand before the ledger, which then still stands in the first screenful."""
_FIRST_TAGS = 12
_WHOLE = 0.995
"""From this share of a span on, figures are taken to cover all of it."""
_ORDER = {"drifting": 0, "steady": 1, "not judged": 2, "no baseline": 3}


def write_overview(view: OverviewView, folder: Path) -> Path:
    """Write the overview page.

    Args:
        view: what to draw.
        folder: where the pages are; made if it is not there.

    Returns:
        The page's path.

    Raises:
        PageError: the folder cannot be written, or an equipment id cannot name a page.
    """
    content = render_page(
        "overview.html",
        view.context,
        view=view,
        first_alarms=_FIRST_ALARMS,
        first_tags=_FIRST_TAGS,
        conditions=ranked_conditions(view.conditions),
        key_figures=_key_figures(view.ledger),
        ledger_hours=_ledger_hours(view),
        flows=flow_diagram(view.flows, view.node_names),
        flow_kinds=flow_kinds(view.flows),
        ranking=ranked_destruction(view.equipment, view.currency),
        trend=ledger_trend(view.ledger_trend),
    )
    return write_atomically(Path(folder) / OVERVIEW_FILE, content)


def ranked_conditions(rows: Sequence[ConditionRow]) -> list[ConditionRow]:
    """Sort condition figures: drifting ones first, then by how near the limit they are."""
    return sorted(rows, key=lambda row: (_ORDER[row.state], -_nearness(row)))


def _nearness(row: ConditionRow) -> float:
    share = abs(row.residual / row.limit) if row.limit else 0.0
    return share if share == share else -1.0  # noqa: PLR0124 - NaN sorts last


def _ledger_hours(view: OverviewView) -> str:
    """Say how much of the span the ledger's means and totals rest on; nothing when on all of it."""
    supplied = next((line for line in view.ledger if line.key == "supplied"), None)
    if supplied is None or not supplied.live_kw > 0:
        return ""
    hours = supplied.live_mwh * 1e3 / supplied.live_kw
    span = (view.context.end - view.context.start) / pd.Timedelta(hours=1)
    if not hours < _WHOLE * span:
        return ""
    return f"; the readings gave figures for {number(hours, 3)} of {number(span, 3)} h"


def _key_figures(ledger: Sequence[LedgerLine]) -> list[tuple[str, str, str, str]]:
    """Return (key, label, rate, share of supplied) for the lines that tell the day."""
    lines = {line.key: line for line in ledger}
    scale = power_column(line.live_kw for line in ledger)
    supplied = lines["supplied"].live_kw if "supplied" in lines else float("nan")
    figures: list[tuple[str, str, str, str]] = []
    for key in ("supplied", "used", "destroyed", "lost"):
        if key not in lines:
            continue
        line = lines[key]
        share = percent(line.live_kw / supplied if supplied else None)
        of = "" if key == "supplied" or share == MISSING else f"{share} of supplied"
        figures.append((key, line.label, scale.with_unit(line.live_kw), of))
    return figures
