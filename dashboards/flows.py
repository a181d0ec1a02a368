"""The overview's pictures of the ledger: the exergy flow diagram and the ranking of losses."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from dashboards.embed import Chart
from dashboards.formats import money_column, plotly_text, power_column, shorten
from dashboards.theme import (
    COLOURS,
    FLOW_COLOURS,
    FLOW_WORDS,
    SIZES,
    axis,
    base_layout,
    tinted,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from dashboards.views import EquipmentRow, FlowLink

__all__ = ["flow_diagram", "flow_kinds", "ranked_destruction"]

_MOST_BARS = 15
_LABEL = 30


def flow_kinds(flows: Sequence[FlowLink]) -> list[tuple[str, str]]:
    """Return (colour, word) of each kind of flow that the diagram draws, for its key."""
    drawn = {flow.kind for flow in flows if _drawable(flow)}
    return [(FLOW_COLOURS[kind], word) for kind, word in FLOW_WORDS.items() if kind in drawn]


def _drawable(flow: FlowLink) -> bool:
    return math.isfinite(flow.kw) and flow.kw > 0.0 and flow.source != flow.target


def flow_diagram(flows: Sequence[FlowLink], node_names: dict[str, str]) -> Chart | None:
    """Draw exergy from where it enters to where it is used, lost or destroyed; widths are kW.

    Returns:
        The chart, or None when no link has a positive rate.
    """
    links = [flow for flow in flows if _drawable(flow)]
    if not links:
        return None
    scale = power_column(flow.kw for flow in links)
    keys = list(dict.fromkeys(key for flow in links for key in (flow.source, flow.target)))
    place = {key: position for position, key in enumerate(keys)}
    names = [node_names.get(key, key) for key in keys]
    through = _through(links, keys)
    trace: dict[str, Any] = {
        "type": "sankey",
        "arrangement": "snap",
        "valueformat": ",.4~r",
        "valuesuffix": f" {scale.unit}",
        "node": {
            "label": [
                f"{plotly_text(shorten(name, _LABEL))}  {scale.with_unit(through[key])}"
                for key, name in zip(keys, names, strict=True)
            ],
            "color": COLOURS["soft"],
            "line": {"width": 0},
            "pad": 22,
            "thickness": 10,
            "customdata": [plotly_text(name) for name in names],
            "hovertemplate": "%{customdata}<br>%{value}<extra></extra>",
        },
        "link": {
            "source": [place[flow.source] for flow in links],
            "target": [place[flow.target] for flow in links],
            "value": [flow.kw * scale.factor for flow in links],
            "color": [tinted(FLOW_COLOURS[flow.kind], 0.55) for flow in links],
            "customdata": [plotly_text(flow.label) for flow in links],
            "hovertemplate": "%{customdata}<br>%{value}<extra></extra>",
        },
        "textfont": {"size": SIZES["small"], "color": COLOURS["ink"]},
    }
    layout = base_layout(min(max(26 * len(keys) + 80, 320), 820), showlegend=False)
    layout["margin"] = {"l": 4, "r": 4, "t": 10, "b": 10}
    layout["hovermode"] = "closest"
    largest = sorted(links, key=lambda flow: -flow.kw)[:5]
    listed = "; ".join(
        f"{node_names.get(flow.source, flow.source)} to "
        f"{node_names.get(flow.target, flow.target)} {scale.with_unit(flow.kw)}"
        for flow in largest
    )
    left_out = len(flows) - len(links)
    note = f"Widths are mean exergy rates in {scale.unit} at the live dead state."
    if left_out:
        note += (
            f" {left_out} of {len(flows)} flows are not drawn: no positive mean rate in this span."
        )
    return Chart(
        "flows",
        {"data": [trace], "layout": layout},
        f"Exergy flow diagram of {len(links)} flows. Largest: {listed}.",
        note=note,
        print_height=min(max(22 * len(keys) + 60, 300), 700),
    )


def _through(links: Sequence[FlowLink], keys: Sequence[str]) -> dict[str, float]:
    into, out = dict.fromkeys(keys, 0.0), dict.fromkeys(keys, 0.0)
    for flow in links:
        into[flow.target] += flow.kw
        out[flow.source] += flow.kw
    return {key: max(into[key], out[key]) for key in keys}


def ranked_destruction(rows: Sequence[EquipmentRow], currency: str) -> Chart | None:
    """Draw destroyed exergy by equipment, most first, with the cost a day at each bar's end.

    Returns:
        The chart, or None when no row holds a number.
    """
    known = [row for row in rows if math.isfinite(row.destroyed_kw)]
    if not known:
        return None
    ranked = sorted(known, key=lambda row: -row.destroyed_kw)[:_MOST_BARS]
    scale = power_column(row.destroyed_kw for row in ranked)
    money = money_column((row.cost_per_day for row in ranked), currency)
    positions = list(range(len(ranked)))
    names = [plotly_text(shorten(row.name, _LABEL)) for row in ranked]
    words = [_bar_words(scale.with_unit(row.destroyed_kw), money.with_unit(row.cost_per_day))
             for row in ranked]
    bars: dict[str, Any] = {
        "type": "bar",
        "orientation": "h",
        "x": [row.destroyed_kw * scale.factor for row in ranked],
        "y": positions,
        "name": "live dead state",
        "marker": {"color": COLOURS["vermilion"]},
        "text": [plotly_text(word) for word in words],
        "textposition": "outside",
        "cliponaxis": False,
        "customdata": [plotly_text(row.name) for row in ranked],
        "hovertemplate": f"%{{customdata}}: %{{x:,.4~r}} {scale.unit}<extra></extra>",
    }
    reference: dict[str, Any] = {
        "type": "scatter",
        "mode": "markers",
        "x": [row.destroyed_reference_kw * scale.factor for row in ranked],
        "y": positions,
        "name": "reference dead state",
        "marker": {
            "symbol": "line-ns-open",
            "size": 14,
            "color": COLOURS["ink"],
            "line": {"width": 2, "color": COLOURS["ink"]},
        },
        "hovertemplate": f"at the reference dead state: %{{x:,.4~r}} {scale.unit}<extra></extra>",
    }
    highest = max(
        [abs(x) for x in (*bars["x"], *reference["x"]) if math.isfinite(x)], default=0.0
    )
    lowest = min([x for x in (*bars["x"], *reference["x"]) if math.isfinite(x)], default=0.0)
    layout = base_layout(
        62 + 26 * len(ranked) + 20,
        hovermode="closest",
        bargap=0.35,
        # A third of the width belongs to the words at the bars' ends.
        xaxis=axis(
            range=[min(lowest * 1.1, 0.0), (highest or 1.0) * 1.5],
            title={"text": scale.unit, "standoff": 6},
        ),
        yaxis=axis(
            autorange="reversed",
            tickmode="array",
            tickvals=positions,
            ticktext=names,
            showgrid=False,
            tickfont={"size": SIZES["small"], "color": COLOURS["ink"]},
        ),
    )
    listed = "; ".join(f"{row.name} {word}" for row, word in zip(ranked[:5], words, strict=False))
    rest = len(rows) - len(ranked)
    return Chart(
        "ranking",
        {"data": [bars, reference], "layout": layout},
        f"Destroyed exergy by equipment, most first: {listed}.",
        note=f"{rest} more in the table below." if rest else "",
        print_height=62 + 22 * len(ranked) + 20,
    )


def _bar_words(rate: str, cost: str) -> str:
    return f"{rate}   {cost}/day"
