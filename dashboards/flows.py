"""The overview's pictures of the ledger: the exergy flow diagram and the ranking of losses."""

from __future__ import annotations

import math
import textwrap
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from dashboards.embed import Chart
from dashboards.formats import MISSING, Column, money_column, plotly_text, power_column, shorten
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

_UNSEEN = "rgba(0,0,0,0)"
_MOST_BARS = 15
_LABEL = 36
_LABEL_WIDTH = 20


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
    links, node_names = _unrolled(drawable, node_names)
    scale = power_column(flow.kw for flow in links)
    keys = list(dict.fromkeys(key for flow in links for key in (flow.source, flow.target)))
    trace = _sankey(links, keys, node_names, scale)
    layout = base_layout(min(max(26 * len(keys) + 60, 300), 800), showlegend=False)
    layout["margin"] = {"l": 4, "r": 16, "t": 24, "b": 24}
    layout["hovermode"] = "closest"
    largest = sorted(drawable, key=lambda flow: -flow.kw)[:5]
    listed = "; ".join(
        f"{node_names.get(flow.source, flow.source)} to "
        f"{node_names.get(flow.target, flow.target)} {scale.with_unit(flow.kw)}"
        for flow in largest
    )
    left_out = len(flows) - len(drawable)
    note = f"Widths are mean exergy rates in {scale.unit} at the live dead state."
    if len(links) > len(drawable):
        note += (
            " A flow that returns upstream, such as feedwater, leaves on the right and comes back "
            "on the left."
        )
    if left_out:
        note += (
            f" {left_out} of {len(flows)} flows are not drawn: no positive mean rate in this span."
        )
    return Chart(
        "flows",
        {"data": [trace], "layout": layout},
        f"Exergy flow diagram of {len(drawable)} flows. Largest: {listed}.",
        note=note,
        print_height=min(max(26 * len(keys) + 60, 300), 580),
    )


def _sankey(
    links: Sequence[FlowLink], keys: Sequence[str], node_names: dict[str, str], scale: Column
) -> dict[str, Any]:
    place = {key: position for position, key in enumerate(keys)}
    names = [node_names.get(key, key) for key in keys]
    through = _through(links, keys)
    # The last column's labels stand on its left, where the column before has its own: a chain of
    # unseen nodes, one longer than the longest way, keeps a column free between the two.
    ghosts = list(range(len(keys), len(keys) + _longest(links) + 1))
    breath = max(through.values()) * scale.factor * 1e-6
    return {
        "type": "sankey",
        "arrangement": "fixed",
        "valueformat": ",.4~r",
        "valuesuffix": f" {scale.unit}",
        "node": {
            "label": [
                f"{_wrapped(name)}<br>{scale.with_unit(through[key])}"
                for key, name in zip(keys, names, strict=True)
            ]
            + [""] * len(ghosts),
            "color": [COLOURS["soft"]] * len(keys) + [_UNSEEN] * len(ghosts),
            "line": {"width": 0},
            "pad": 30,
            "thickness": 10,
            "customdata": [plotly_text(name) for name in names] + [""] * len(ghosts),
            "hovertemplate": "%{customdata}<br>%{value}<extra></extra>",
        },
        "link": {
            "source": [place[flow.source] for flow in links] + ghosts[:-1],
            "target": [place[flow.target] for flow in links] + ghosts[1:],
            "value": [flow.kw * scale.factor for flow in links] + [breath] * (len(ghosts) - 1),
            "color": [tinted(FLOW_COLOURS[flow.kind], 0.55) for flow in links]
            + [_UNSEEN] * (len(ghosts) - 1),
            "customdata": [plotly_text(flow.label) for flow in links] + [""] * (len(ghosts) - 1),
            "hovertemplate": "%{customdata}<br>%{value}<extra></extra>",
        },
        "textfont": {"size": SIZES["small"], "color": COLOURS["ink"]},
    }


def _longest(links: Sequence[FlowLink]) -> int:
    """Count the nodes on the longest way through flows without loops."""
    ahead: dict[str, list[str]] = {}
    for flow in links:
        ahead.setdefault(flow.source, []).append(flow.target)
    known: dict[str, int] = {}

    def length(key: str) -> int:
        if key not in known:
            known[key] = 1 + max((length(target) for target in ahead.get(key, ())), default=0)
        return known[key]

    return max(length(flow.source) for flow in links)


def _wrapped(name: str) -> str:
    """Break a node's name so that it fits between two columns of nodes."""
    lines = textwrap.wrap(shorten(name, _LABEL), _LABEL_WIDTH)
    return "<br>".join(plotly_text(line) for line in lines)


def _unrolled(
    flows: Sequence[FlowLink], node_names: dict[str, str]
) -> tuple[list[FlowLink], dict[str, str]]:
    """Cut every loop at its smallest flow: it goes out to a node of its own, and in from another.

    Water goes round in a steam site, and loops drawn as loops hide the rest.
    """
    after: dict[str, set[str]] = {}
    kept: list[FlowLink] = []
    cut: list[FlowLink] = []
    for flow in sorted(flows, key=lambda flow: -flow.kw):
        if _reaches(after, flow.target, flow.source):
            cut.append(flow)
        else:
            after.setdefault(flow.source, set()).add(flow.target)
            kept.append(flow)
    names = dict(node_names)
    for flow in cut:
        # A space cannot stand in an identifier, so these meet no node of the site.
        there, back = f"to {flow.target}", f"from {flow.source}"
        names[there] = f"to {node_names.get(flow.target, flow.target)}"
        names[back] = f"from {node_names.get(flow.source, flow.source)}"
        kept += [replace(flow, target=there), replace(flow, source=back)]
    return kept, names


def _reaches(after: dict[str, set[str]], start: str, goal: str) -> bool:
    seen, waiting = {start}, [start]
    while waiting:
        here = waiting.pop()
        if here == goal:
            return True
        ahead = after.get(here, set()) - seen
        seen |= ahead
        waiting += ahead
    return False


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
    labels: dict[str, Any] = {
        "type": "scatter",
        "mode": "text",
        "x": ends,
        "y": positions,
        "text": [f"\u2002{plotly_text(word)}" for word in words],
        "textposition": "middle right",
        "cliponaxis": False,
        "showlegend": False,
        "hoverinfo": "skip",
    }
    layout = base_layout(
        62 + 26 * len(ranked) + 20,
        hovermode="closest",
        margin={"l": 56, "r": 60, "t": 34, "b": 36, "pad": 4},
        bargap=0.35,
        # A third of the width belongs to the words at the bars' ends.
        xaxis=axis(
            range=[lowest * 1.1, (highest or 1.0) * 1.5],
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
        {"data": [bars, reference, labels], "layout": layout},
        f"Destroyed exergy by equipment, most first: {listed}.",
        note=f"{rest} more in the table below." if rest else "",
        print_height=62 + 22 * len(ranked) + 20,
    )


def _bar_words(rate: str, cost: str) -> str:
    return rate if cost == MISSING else f"{rate}, {cost}/day"
