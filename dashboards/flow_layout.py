"""Where the nodes of the flow diagram stand, so that no label meets another."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from dashboards.flow_graph import columns, through

if TYPE_CHECKING:
    from collections.abc import Sequence

    from dashboards.views import FlowLink

__all__ = ["LINE", "FlowLayout", "flow_layout"]

LINE = 16.0
"""px that a line of a label takes."""

_GAP = 7.0  # px between one node, or its label, and the next below
_FLOWS = 380.0  # px that the widest column's flows take at least
_ROUNDS = 60
_TALLEST = 1400.0
_WASTE = {"lost": 1, "destroyed": 2}
"""The sinks that stand below all others, in this order."""
_EDGE = 0.005  # of the width: half a node


@dataclass(frozen=True)
class FlowLayout:
    """Places of nodes.

    Attributes:
        height: of the drawing, px.
        pad: that makes plotly draw the flows at the scale the places were found for, px.
        x, y: centre of each node, as parts of width and height.
    """

    height: float
    pad: float
    x: dict[str, float]
    y: dict[str, float]


def flow_layout(links: Sequence[FlowLink], lines: dict[str, int]) -> FlowLayout:
    """Place nodes in columns near what they are joined to, none nearer than their labels allow.

    Args:
        links: flows without loops.
        lines: of each node's label.
    """
    place, passing = columns(links), through(links)
    last = max(place.values())
    members: list[list[str]] = [[] for _ in range(last + 1)]
    for key in sorted(place, key=lambda key: -passing[key]):
        members[place[key]].append(key)
    labels = {key: lines[key] * LINE for key in place}
    widest = max(sum(passing[key] for key in column) for column in members)
    scale = _FLOWS / widest

    def size(key: str) -> float:
        return max(passing[key] * scale, labels[key]) + _GAP

    tallest = max(sum(size(key) for key in column) for column in members)
    # A little air, or the fullest column would leave its neighbours no choice.
    height = min(max(1.04 * tallest, _FLOWS + 80.0), _TALLEST)
    centres = _relaxed(links, members, {key: size(key) for key in place}, height)
    pad = _pad([[passing[key] for key in column] for column in members], height, scale)
    # The last column's labels stand on its left: a column's width stays free before it.
    steps = last + 1
    x = {
        key: _EDGE + (1.0 - 2.0 * _EDGE) * (steps if column == last else column) / steps
        for key, column in place.items()
    }
    return FlowLayout(height, pad, x, {key: y / height for key, y in centres.items()})


def _pad(passing: Sequence[Sequence[float]], height: float, scale: float) -> float:
    """Find the padding at which plotly's own scale is the wanted one.

    It draws at the smallest, over the columns, of (height - gaps) / (sum of flows).
    """
    most = max(len(column) for column in passing) - 1
    low, high = 0.0, height / most if most else 0.0
    for _ in range(40):
        middle = 0.5 * (low + high)
        drawn = min((height - (len(c) - 1) * middle) / sum(c) for c in passing)
        low, high = (middle, high) if drawn > scale else (low, middle)
    return low


def _relaxed(
    links: Sequence[FlowLink],
    members: list[list[str]],
    sizes: dict[str, float],
    height: float,
) -> dict[str, float]:
    """Move every node towards the flow-weighted mean of its neighbours, column by column."""
    before: dict[str, list[tuple[str, float]]] = {key: [] for key in sizes}
    after: dict[str, list[tuple[str, float]]] = {key: [] for key in sizes}
    supply = {key for column in members[:2] for key in column}
    for flow in links:
        # Machines lie along the way of what is used, above the broad bands of what boilers
        # destroy: neither these nor the boilers pull them down.
        if flow.source not in supply or flow.target in supply or flow.target in _WASTE:
            before[flow.target].append((flow.source, flow.kw))
        if flow.source in supply or flow.target not in _WASTE:
            after[flow.source].append((flow.target, flow.kw))
    centres: dict[str, float] = {}
    for column in members:
        centres |= _apart(column, dict.fromkeys(column, height / 2), sizes, height)
    for turn in range(_ROUNDS):
        forward = turn % 2 == 0
        neighbours = before if forward else after
        for column in members if forward else reversed(members):
            wanted = {
                key: sum(centres[other] * kw for other, kw in neighbours[key])
                / sum(kw for _, kw in neighbours[key])
                if neighbours[key]
                else centres[key]
                for key in column
            }
            centres |= _apart(column, wanted, sizes, height)
    return centres


def _apart(
    column: Sequence[str], wanted: dict[str, float], sizes: dict[str, float], height: float
) -> dict[str, float]:
    """Return the places nearest to the wanted ones at which none stands on another.

    Isotonic regression by pooling (Ayer et al. 1955) on the places less the room above each.
    """
    order = sorted(column, key=lambda key: (_WASTE.get(key, 0), wanted[key]))
    above: list[float] = []
    room = 0.0
    for key in order:
        above.append(room + sizes[key] / 2)
        room += sizes[key]
    blocks: list[list[float]] = []  # [mean, count]
    for key, offset in zip(order, above, strict=True):
        blocks.append([wanted[key] - offset, 1.0])
        while len(blocks) > 1 and blocks[-2][0] > blocks[-1][0]:
            mean, count = blocks.pop()
            other = blocks[-1]
            other[0] = (other[0] * other[1] + mean * count) / (other[1] + count)
            other[1] += count
    shifts = [mean for mean, count in blocks for _ in range(int(count))]
    most = max(height - room, 0.0)
    return {
        key: offset + min(max(shift, 0.0), most)
        for key, offset, shift in zip(order, above, shifts, strict=True)
    }
