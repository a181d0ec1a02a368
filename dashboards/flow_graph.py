"""Exergy flows made into a picture's graph: loops cut, small ones joined, nothing lost."""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Callable, Collection, Sequence

    from dashboards.views import FlowLink

__all__ = ["SMALL", "FlowGraph", "columns", "flow_graph", "through"]

SMALL = 0.01
"""What passes less than this part of what is supplied gets no node of its own."""

_SINKS = frozenset({"used", "lost", "destroyed"})
# A space cannot stand in an identifier, so these meet no node of the site.
_RETURNS_OUT, _RETURNS_IN = "returns out", "returns in"
_SUPPLIES, _USES = "other supplies", "other uses"


@dataclass(frozen=True)
class FlowGraph:
    """A graph without loops.

    Attributes:
        links: what is drawn; between two nodes at most one of a kind.
        names: of the nodes.
        joined: (small equipment, the neighbour that it is drawn with).
    """

    links: tuple[FlowLink, ...]
    names: dict[str, str]
    joined: tuple[tuple[str, str], ...]

    @property
    def returns(self) -> bool:
        """Tell whether a loop was cut."""
        return any(flow.target == _RETURNS_OUT for flow in self.links)


def flow_graph(flows: Sequence[FlowLink], names: dict[str, str]) -> FlowGraph:
    """Make a graph that reads from left to right out of a site's flows.

    Equipment that passes less than `SMALL` of what is supplied is drawn with the neighbour that
    feeds it most; loops are cut at their smallest flow, and all that is cut leaves at one node and
    comes back at another; small supplies share a node, and so do small uses.

    Args:
        flows: with positive rates.
        names: of nodes, by key.
    """
    fed = {flow.target for flow in flows}
    least = SMALL * sum(flow.kw for flow in flows if flow.source not in fed)
    links, hosts = _contracted(list(flows), least)
    links = _summed(links)
    links = _unrolled(links)
    links = _gathered(links, least, _SUPPLIES, lambda flow: (flow.source, flow.target))
    links = _gathered(links, least, _USES, lambda flow: (flow.target, flow.source))
    named = names | {
        _RETURNS_OUT: "Returned upstream",
        _RETURNS_IN: "Returned from downstream",
        _SUPPLIES: "Other supplies",
        _USES: "Other uses",
    }
    joined = tuple((names.get(small, small), names.get(to, to)) for small, to in hosts.items())
    return FlowGraph(tuple(sorted(_summed(links), key=lambda flow: -flow.kw)), named, joined)


def through(links: Sequence[FlowLink]) -> dict[str, float]:
    """Return what passes each node, kW: the greater of what enters and what leaves."""
    into: dict[str, float] = defaultdict(float)
    out: dict[str, float] = defaultdict(float)
    for flow in links:
        into[flow.target] += flow.kw
        out[flow.source] += flow.kw
    keys = dict.fromkeys(key for flow in links for key in (flow.source, flow.target))
    return {key: max(into[key], out[key]) for key in keys}


def columns(links: Sequence[FlowLink]) -> dict[str, int]:
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


def _contracted(links: list[FlowLink], least: float) -> tuple[list[FlowLink], dict[str, str]]:
    """Draw small equipment as a part of the neighbour that it has most to do with."""
    hosts: dict[str, str] = {}
    alone: set[str] = set()
    while True:
        passing = through(links)
        between = {flow.source for flow in links} & {flow.target for flow in links}
        small = [key for key in between if passing[key] < least and key not in alone]
        if not small:
            return links, hosts
        one = min(small, key=lambda key: (passing[key], key))
        host = _host(links, one, between)
        if host is None:
            # Nothing but supplies and sinks about it: it stays, or its flows would go astray.
            alone.add(one)
            continue
        hosts = {key: host if to == one else to for key, to in hosts.items()} | {one: host}
        moved = (
            replace(
                flow,
                source=host if flow.source == one else flow.source,
                target=host if flow.target == one else flow.target,
            )
            for flow in links
        )
        links = [flow for flow in moved if flow.source != flow.target]


def _host(links: Sequence[FlowLink], one: str, between: Collection[str]) -> str | None:
    before = [(flow.kw, flow.source) for flow in links if flow.target == one]
    after = [(flow.kw, flow.target) for flow in links if flow.source == one]
    for neighbours in (before, after):
        inner = [(kw, key) for kw, key in neighbours if key in between and key not in _SINKS]
        if inner:
            return max(inner)[1]
    return None


def _unrolled(flows: Sequence[FlowLink]) -> list[FlowLink]:
    """Cut every loop at its smallest flow: it goes out at one end and comes in at the other.

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
    for flow in cut:
        kept += [replace(flow, target=_RETURNS_OUT), replace(flow, source=_RETURNS_IN)]
    return kept


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


def _gathered(
    links: list[FlowLink],
    least: float,
    common: str,
    ends: Callable[[FlowLink], tuple[str, str]],
) -> list[FlowLink]:
    """Let small nodes at one end of the graph share one; ``ends`` gives the outer end first."""
    inner = {ends(flow)[1] for flow in links}
    kept_apart = _SINKS | {_RETURNS_IN, _RETURNS_OUT}
    passing = through(links)
    small = {
        key
        for key in (ends(flow)[0] for flow in links)
        if key not in inner and key not in kept_apart and passing[key] < least
    }
    if len(small) < 2:  # noqa: PLR2004 - one alone keeps its name
        return links
    is_source = common == _SUPPLIES
    return [
        flow
        if ends(flow)[0] not in small
        else replace(flow, source=common)
        if is_source
        else replace(flow, target=common)
        for flow in links
    ]


def _summed(links: Sequence[FlowLink]) -> list[FlowLink]:
    """Make one flow of those of a kind between the same two nodes."""
    groups: dict[tuple[str, str, str], list[FlowLink]] = {}
    for flow in links:
        groups.setdefault((flow.source, flow.target, flow.kind), []).append(flow)
    return [
        flows[0]
        if len(flows) == 1
        else replace(
            flows[0],
            kw=sum(flow.kw for flow in flows),
            label="; ".join(flow.label for flow in sorted(flows, key=lambda flow: -flow.kw)),
        )
        for flows in groups.values()
    ]
