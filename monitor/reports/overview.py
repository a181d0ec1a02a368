"""The overview's view: the ledger and its flows, destruction ranked, condition, alarms, data."""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

from dashboards.views import FlowLink, OverviewView
from monitor.store.read import means_of

if TYPE_CHECKING:
    from monitor.reports.gather import Gathered

__all__ = ["flow_links", "node_names", "overview_view"]


def overview_view(gathered: Gathered) -> OverviewView:
    """Gather the overview of a span."""
    start, end = gathered.start, gathered.end
    return OverviewView(
        context=gathered.context,
        ledger=gathered.ledger(start, end),
        ledger_trend=gathered.ledger_trend(start, end),
        flows=flow_links(gathered),
        node_names=node_names(gathered),
        equipment=gathered.equipment_rows(),
        conditions=gathered.condition_rows(),
        alarms=gathered.open_alarms(),
        quality=gathered.quality(start, end),
        currency=gathered.site.file.economics.currency,
    )


def node_names(gathered: Gathered) -> dict[str, str]:
    """Names of the flow diagram's nodes: equipment, boundary streams, and the sinks."""
    site = gathered.site
    named = {i.id: i.name for i in gathered.items}
    crossing = [s for s in site.streams.values() if s.id not in site.producer]
    return (
        named
        | {_boundary(s.id): s.name or s.id for s in crossing}
        | {"used": "Used", "lost": "Lost", "destroyed": "Destroyed"}
    )


def _boundary(stream: str) -> str:
    # Stream and equipment ids are separate name spaces; a node's key must not mix them.
    return f"from:{stream}"


def flow_links(gathered: Gathered) -> tuple[FlowLink, ...]:
    """Mean exergy rate of every stream, and of what each piece of equipment destroys and loses."""
    means = gathered.store.means("stream", gathered.start, gathered.end)
    rates = means_of(means, "exergy_live_kw")
    links = [_stream_link(gathered, s, rates[s]) for s in gathered.site.streams if s in rates]
    sinks: tuple[tuple[str, Literal["destroyed", "lost"], str], ...] = (
        ("destroyed_live_kw", "destroyed", "Destroyed"),
        ("heat_loss_exergy_live_kw", "lost", "Heat lost"),
    )
    for figure, kind, word in sinks:
        found = means_of(gathered.equipment_means, figure)
        links += [
            FlowLink(i.id, kind, f"{word} in {i.name}", found[i.id], kind)
            for i in gathered.items
            if i.id in found
        ]
    return tuple(links)


def _stream_link(gathered: Gathered, stream_id: str, kw: float) -> FlowLink:
    site = gathered.site
    stream = site.streams[stream_id]
    source = site.producer.get(stream_id, _boundary(stream_id))
    target = site.consumer.get(stream_id) or ("used" if site.counts_as_used(stream_id) else "lost")
    kind: Literal["water", "fuel", "power", "heat", "lost"] = stream.medium
    return FlowLink(
        source, target, stream.name or stream_id, kw, "lost" if target == "lost" else kind
    )
