"""The overview's pictures of the ledger: the exergy flow diagram and the ranking of losses."""

from __future__ import annotations

import math
import textwrap
from collections import Counter
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

_LINE = 15  # px that a line of a label takes
_TALLEST = 1400
_UNSEEN = "rgba(0,0,0,0)"
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
    links, node_names = _unrolled(drawable, node_names)
    scale = power_column(flow.kw for flow in links)
    keys = list(dict.fromkeys(key for flow in links for key in (flow.source, flow.target)))
    trace = _sankey(links, keys, node_names, scale)
    height = _height(links, trace["node"]["pad"])
    layout = base_layout(height, showlegend=False)
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
        print_height=max(height - 130, 300),
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
    width = min(max(int(_PAGE / (len(ghosts) - 1) / _LETTER - 1.5), 12), 32)
    labels = [
        f"{_wrapped(name, width)}<br>{scale.with_unit(through[key])}"
        for key, name in zip(keys, names, strict=True)
    ]
    lines = max(label.count("<br>") + 1 for label in labels)
    breath = max(through.values()) * scale.factor * 1e-6
    return {
        "type": "sankey",
        "arrangement": "fixed",
        "valueformat": ",.4~r",
        "valuesuffix": f" {scale.unit}",
        "node": {
            "label": labels + [""] * len(ghosts),
            "color": [COLOURS["soft"]] * len(keys) + [_UNSEEN] * len(ghosts),
            "line": {"width": 0},
            "pad": _LINE * min(lines, 3),
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


def _height(links: Sequence[FlowLink], pad: int) -> int:
    """Return the height at which the fullest column's labels stand clear of each other, px."""
    fullest = Counter(_columns(links).values()).most_common(1)[0][1]
    # What the labels leave is for the flows' widths.
    return min(fullest * pad + max(fullest * 14, 280) + 48, _TALLEST)


def _longest(links: Sequence[FlowLink]) -> int:
    """Count the nodes on the longest way through flows without loops."""
    return max(_columns(links).values()) + 1


def _columns(links: Sequence[FlowLink]) -> dict[str, int]:
    """Place nodes in columns: one after the last that feeds it, all that feed none in the last."""
    feeds: dict[str, list[str]] = {}
    for flow in links:
        feeds.setdefault(flow.target, []).append(flow.source)
    places: dict[str, int] = {}

    def place(key: str) -> int:
        if key not in places:
            places[key] = max((place(source) + 1 for source in feeds.get(key, ())), default=0)
        return places[key]

    last = max(place(flow.target) for flow in links)
    ends = set(places) - {flow.source for flow in links}
    return {key: last if key in ends else column for key, column in places.items()}


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
