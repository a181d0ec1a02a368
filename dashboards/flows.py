"""The overview's pictures of the ledger: the exergy flow diagram and the ranking of losses."""

from __future__ import annotations

import math
import textwrap
from typing import TYPE_CHECKING, Any

from dashboards.embed import Chart
from dashboards.flow_graph import SMALL, columns, flow_graph, through
from dashboards.flow_layout import flow_layout
from dashboards.formats import MISSING, Column, money_column, plotly_text, power_column, shorten
from dashboards.ranking import end_words, print_height, ranking_layout
from dashboards.theme import (
    COLOURS,
    FLOW_COLOURS,
    FLOW_WORDS,
    SIZES,
    base_layout,
    tinted,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from dashboards.flow_graph import FlowGraph
    from dashboards.views import EquipmentRow, FlowLink

__all__ = ["flow_diagram", "flow_kinds", "ranked_destruction"]

_MARGIN = 24  # px above and below the flow diagram
_HOVER = 120
_MOST_BARS = 15
_LABEL = 40
_LETTER = 6.6  # px, the mean in the widest of the usual fonts
_PAGE = 1140  # px between the first and the last column


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
    drawable = [flow for flow in flows if _drawable(flow)]
    if not drawable:
        return None
    graph = flow_graph(drawable, node_names)
    scale = power_column(flow.kw for flow in graph.links)
    trace, height = _sankey(graph, scale)
    layout = base_layout(height, showlegend=False)
    layout["margin"] = {"l": 4, "r": 16, "t": _MARGIN, "b": _MARGIN}
    layout["hovermode"] = "closest"
    largest = sorted(drawable, key=lambda flow: -flow.kw)[:5]
    listed = "; ".join(
        f"{node_names.get(flow.source, flow.source)} to "
        f"{node_names.get(flow.target, flow.target)} {scale.with_unit(flow.kw)}"
        for flow in largest
    )
    return Chart(
        "flows",
        {"data": [trace], "layout": layout},
        f"Exergy flow diagram of {len(drawable)} flows. Largest: {listed}.",
        note=_flow_note(graph, scale, len(flows), len(drawable)),
        print_height=height,
    )


def _flow_note(graph: FlowGraph, scale: Column, known: int, drawn: int) -> str:
    notes = [f"Widths are mean exergy rates in {scale.unit} at the live dead state."]
    if graph.returns:
        notes.append(
            "What returns upstream, such as feed water, leaves on the right and comes back on the "
            "left."
        )
    if graph.joined:
        listed = ", ".join(f"{small} with {host}" for small, host in graph.joined)
        notes.append(
            f"Equipment that passes less than {SMALL:.0%} of what is supplied is drawn with its "
            f"neighbour: {listed}."
        )
    if known > drawn:
        notes.append(
            f"{known - drawn} of {known} flows are not drawn: no positive mean rate in this span."
        )
    return " ".join(notes)


def _sankey(graph: FlowGraph, scale: Column) -> tuple[dict[str, Any], int]:
    """Return the trace and the figure's height, px."""
    passing, places = through(graph.links), columns(graph.links)
    keys = list(passing)
    place = {key: position for position, key in enumerate(keys)}
    names = [graph.names.get(key, key) for key in keys]
    width = int(_PAGE / (max(places.values()) + 1) / _LETTER - 1.5)
    labels = {
        key: f"{_wrapped(name, min(max(width, 12), 32))}<br>{scale.with_unit(passing[key])}"
        for key, name in zip(keys, names, strict=True)
    }
    at = flow_layout(graph.links, {key: label.count("<br>") + 1 for key, label in labels.items()})
    # One order for both ends: at each node flows lie in the order of where they come from or go to.
    links = sorted(graph.links, key=lambda flow: at.y[flow.source] + at.y[flow.target])
    trace = {
        "type": "sankey",
        "arrangement": "fixed",
        "valueformat": ",.4~r",
        "valuesuffix": f" {scale.unit}",
        "node": {
            "label": list(labels.values()),
            "color": [COLOURS["soft"]] * len(keys),
            "line": {"width": 0},
            "pad": at.pad,
            "thickness": 10,
            "x": [at.x[key] for key in keys],
            "y": [at.y[key] for key in keys],
            "customdata": [plotly_text(name) for name in names],
            "hovertemplate": "%{customdata}<br>%{value}<extra></extra>",
        },
        "link": {
            "sort": "input",
            "source": [place[flow.source] for flow in links],
            "target": [place[flow.target] for flow in links],
            "value": [flow.kw * scale.factor for flow in links],
            "color": [tinted(FLOW_COLOURS[flow.kind], 0.55) for flow in links],
            "customdata": [plotly_text(shorten(flow.label, _HOVER)) for flow in links],
            "hovertemplate": "%{customdata}<br>%{value}<extra></extra>",
        },
        "textfont": {"size": SIZES["small"], "color": COLOURS["ink"]},
    }
    return trace, math.ceil(at.height) + 2 * _MARGIN


def _wrapped(name: str, width: int) -> str:
    """Break a node's name to fit between two columns, into lines of much the same length."""
    short = shorten(name, _LABEL)
    lines = textwrap.wrap(short, width)
    longest_word = max((len(word) for word in short.split()), default=0)
    for narrower in range(width - 1, longest_word - 1, -1):
        even = textwrap.wrap(short, narrower)
        if len(even) > len(lines):
            break
        lines = even
    return "<br>".join(plotly_text(line) for line in lines)


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
    words = [
        _bar_words(scale.with_unit(row.destroyed_kw), money.with_unit(row.cost_per_day))
        for row in ranked
    ]
    bars: dict[str, Any] = {
        "type": "bar",
        "orientation": "h",
        "x": [row.destroyed_kw * scale.factor for row in ranked],
        "y": positions,
        "name": "live dead state",
        "marker": {"color": COLOURS["vermilion"]},
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
    both = list(zip(bars["x"], reference["x"], strict=True))
    ends = [max(0.0, *(x for x in pair if math.isfinite(x))) for pair in both]
    lowest = min(x for pair in both for x in (0.0, *pair) if math.isfinite(x))
    highest = max(*ends, 0.0)
    # A third of the width belongs to the words at the bars' ends.
    span = (lowest * 1.1, (highest or 1.0) * 1.5)
    layout = ranking_layout([row.name for row in ranked], span, scale.unit)
    listed = "; ".join(f"{row.name} {word}" for row, word in zip(ranked[:5], words, strict=False))
    rest = len(rows) - len(ranked)
    return Chart(
        "ranking",
        {"data": [bars, reference, end_words(ends, words)], "layout": layout},
        f"Destroyed exergy by equipment, most first: {listed}.",
        note=f"{rest} more in the table below." if rest else "",
        print_height=print_height(len(ranked)),
    )


def _bar_words(rate: str, cost: str) -> str:
    return rate if cost == MISSING else f"{rate}, {cost}/day"
