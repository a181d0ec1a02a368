"""The flow diagram's graph and places: nothing lost, no loop, no label upon another."""

from __future__ import annotations

import itertools
from collections import defaultdict

import mill_flows
import page_views
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dashboards import flows
from dashboards.flow_graph import columns, flow_graph, through
from dashboards.flow_layout import LINE, flow_layout
from dashboards.views import FlowLink

MACHINES = ("m1", "m2", "m3", "m4", "m5")


@st.composite
def networks(draw):
    """Flows between machines, with loops, supplied at two ends and ending in the sinks."""
    rate = st.floats(0.01, 1e5)
    rows = [("s1", "m1", draw(rate)), ("s2", draw(st.sampled_from(MACHINES)), draw(rate))]
    pairs = st.tuples(st.sampled_from(MACHINES), st.sampled_from(MACHINES), rate)
    rows += [row for row in draw(st.lists(pairs, max_size=12)) if row[0] != row[1]]
    ends = st.tuples(st.sampled_from(MACHINES), st.sampled_from(("used", "lost", "e1")), rate)
    rows += draw(st.lists(ends, min_size=1, max_size=5))
    return [FlowLink(a, b, f"{a} to {b}", kw, "water") for a, b, kw in rows]


def drawn(links, names=None):
    return flows.flow_diagram(links, names or {}).figure["data"][0]


def test_widths_of_the_flow_diagram_are_the_rates():
    links = (
        FlowLink("fuel", "boiler", "Fuel", 100.0, "fuel"),
        FlowLink("boiler", "machine", "Steam", 40.0, "water"),
        FlowLink("boiler", "destroyed", "Destroyed", 60.0, "destroyed"),
    )
    trace = drawn(links)
    link, labels = trace["link"], trace["node"]["label"]
    seen = {
        (labels[a].split("<br>")[0], labels[b].split("<br>")[0], kw)
        for a, b, kw in zip(link["source"], link["target"], link["value"], strict=True)
    }
    assert seen == {
        ("fuel", "boiler", 100.0),
        ("boiler", "machine", 40.0),
        ("boiler", "destroyed", 60.0),
    }


def test_a_loop_is_cut_at_its_smallest_flow_and_nothing_is_lost():
    links = (
        FlowLink("fuel", "boiler", "Fuel", 100.0, "fuel"),
        FlowLink("boiler", "machine", "Steam", 90.0, "water"),
        FlowLink("machine", "boiler", "Condensate", 5.0, "water"),
    )
    graph = flow_graph(links, {"boiler": "Boiler"})
    assert {(flow.source, flow.target, flow.kw) for flow in graph.links} == {
        ("fuel", "boiler", 100.0),
        ("boiler", "machine", 90.0),
        ("machine", "returns out", 5.0),
        ("returns in", "boiler", 5.0),
    }
    assert graph.returns
    assert graph.names["returns out"] == "Returned upstream"


def test_small_supplies_share_a_node_and_large_ones_keep_theirs():
    links = (
        FlowLink("gas", "boiler", "Gas", 1_000.0, "fuel"),
        FlowLink("motor", "boiler", "Fan", 4.0, "power"),
        FlowLink("makeup", "boiler", "Make-up", 3.0, "water"),
        FlowLink("boiler", "used", "Steam", 400.0, "water"),
    )
    sources = {flow.source: flow.kw for flow in flow_graph(links, {}).links}
    assert set(sources) == {"gas", "other supplies", "boiler"}
    alone = {flow.source for flow in flow_graph(links[:2] + links[3:], {}).links}
    assert alone == {"gas", "motor", "boiler"}


def test_small_equipment_is_drawn_with_what_feeds_it_and_named_below():
    chart = flows.flow_diagram(mill_flows.mill_flows(), mill_flows.NODE_NAMES)
    assert "Let-down 62 to 12 bar with Header 62 bar" in chart.note
    assert "Condensate pump with Condenser of TG2" in chart.note
    keys = {flow.source for flow in flow_graph(
        [flow for flow in mill_flows.mill_flows() if flow.kw > 0.0], mill_flows.NODE_NAMES
    ).links}  # fmt: skip
    assert {"B1", "B2", "TG1", "TG2", "BM", "DISP", "HEAT", "COND", "DA"} <= keys
    assert not keys & {"LD62", "LD12", "ACC", "CEP", "from:makeup", "from:cep_power"}


@given(networks())
def test_what_is_supplied_and_what_ends_stays_the_same_whatever_is_joined(links):
    """Ends keep their totals: joining small nodes and cutting loops moves no exergy."""
    graph = flow_graph(links, {})
    for sink in ("used", "lost"):
        before = sum(flow.kw for flow in links if flow.target == sink)
        after = sum(flow.kw for flow in graph.links if flow.target == sink)
        assert after == pytest.approx(before)
    fed = {flow.target for flow in links}
    supplies = sum(flow.kw for flow in links if flow.source not in fed)
    targets = {flow.target for flow in graph.links} | {"returns in"}
    assert sum(flow.kw for flow in graph.links if flow.source not in targets) >= supplies * (
        1 - 1e-9
    )


@given(networks())
def test_the_graph_has_no_loop(links):
    graph = flow_graph(links, {})
    place = columns(graph.links)
    assert all(place[flow.source] < place[flow.target] for flow in graph.links)


@given(networks(), st.integers(2, 5))
def test_no_two_labels_or_nodes_of_a_column_overlap(links, lines):
    graph = flow_graph(links, {})
    place, passing = columns(graph.links), through(graph.links)
    at = flow_layout(graph.links, dict.fromkeys(place, lines))
    by_column = defaultdict(list)
    for key, column in place.items():
        by_column[column].append(key)
    # plotly's own scale (d3-sankey): the smallest over the columns of free height by total flow.
    scale = min(
        (at.height - (len(keys) - 1) * at.pad) / sum(passing[key] for key in keys)
        for keys in by_column.values()
    )
    for keys in by_column.values():
        tall = {key: max(passing[key] * scale, lines * LINE) for key in keys}
        order = sorted(keys, key=lambda key: at.y[key])
        assert at.y[order[0]] * at.height - tall[order[0]] / 2 >= -1e-6
        assert at.y[order[-1]] * at.height + tall[order[-1]] / 2 <= at.height + 1e-6
        for above, below in itertools.pairwise(order):
            apart = (at.y[below] - at.y[above]) * at.height
            assert apart >= (tall[above] + tall[below]) / 2 - 1e-6


def test_what_is_lost_and_destroyed_stands_below_what_is_used():
    at = drawn(page_views.flows(), page_views.NODE_NAMES)["node"]
    place = {label.split("<br>")[0]: y for label, y in zip(at["label"], at["y"], strict=True)}
    assert place["Power out"] < place["Lost"] < place["Destroyed"]
    assert place["Used"] < place["Lost"]
