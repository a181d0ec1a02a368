"""One equipment's page: how it stands, how it came there, and what the figures rest on."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from dashboards.expansion import expansion_chart
from dashboards.figures import residual_chart, trend_chart
from dashboards.files import equipment_file, write_atomically
from dashboards.overview import ranked_conditions
from dashboards.render import render_page

if TYPE_CHECKING:
    from dashboards.views import EquipmentView

__all__ = ["write_equipment"]


def write_equipment(view: EquipmentView, folder: Path) -> Path:
    """Write one equipment's page.

    Args:
        view: what to draw.
        folder: where the pages are; made if it is not there.

    Returns:
        The page's path.

    Raises:
        PageError: the folder cannot be written, or the id cannot name a page.
    """
    name = equipment_file(view.row.id)
    residuals = [
        (residual.label, residual_chart(residual, f"residual-{place}"))
        for place, residual in enumerate(view.residuals)
    ]
    trends = [
        (trend.title, trend_chart(trend, f"trend-{place}"))
        for place, trend in enumerate(view.trends)
    ]
    content = render_page(
        "equipment.html",
        view.context,
        view=view,
        row=view.row,
        conditions=ranked_conditions(view.conditions),
        residuals=[chart for _, chart in residuals if chart is not None],
        silent_residuals=[label for label, chart in residuals if chart is None],
        trends=[chart for _, chart in trends if chart is not None],
        silent_trends=[title for title, chart in trends if chart is None],
        expansion=None if view.expansion is None else expansion_chart(view.expansion),
        streams=list(view.streams.itertuples(index=False)),
    )
    return write_atomically(Path(folder) / name, content)
