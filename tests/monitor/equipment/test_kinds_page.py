"""config/kinds.md: every kind is drawn, every figure is told, and every example computes."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from connectors.base import Quality, ReadResult
from dashboards.formats import unit_of_change
from monitor.economics import supplied_prices, unit_costs
from monitor.equipment import KINDS
from monitor.explain import explain
from monitor.figures import compute, lead_in
from monitor.site.load import load_site
from monitor.sources import open_sources

PAGE = (Path(__file__).parents[3] / "config" / "kinds.md").read_text(encoding="utf-8")
SECTIONS = {
    part.split("\n", 1)[0]: part for part in re.split(r"^## ", PAGE, flags=re.MULTILINE)[1:]
}
HEAD = """
[site]
id = "page"
name = "One piece of equipment"
[dead_state]
temperature = "TA"
pressure = "1.01325 bar(a)"
[[source]]
id = "dcs"
kind = "csv"
path = "*.csv"
"""
READ = {"TA": ("degC", 12.0), "PT-1": ("bar(a)", 12.3), "PT-2": ("bar(a)", 12.1),
        "PT-3": ("bar(a)", 11.9)}  # fmt: skip
START = 1_770_000_000 // 3600 * 3600
# What an example's valve, open or closed, leaves without a value.
ABSENT = {("letdown", "passing_flow")}
# Shown figures that have their steps too, but for a vessel's losses while it is at work.
STEPS = {
    ("accumulator", "stored_exergy"), ("boiler", "exergetic_efficiency"),
    ("header", "pressure_loss_coefficient"), ("letdown", "flow_coefficient"),
    ("letdown", "work_bypassed"), ("trap_group", "orifice_flow"), ("vent", "orifice_flow"),
}  # fmt: skip


def _example(kind, folder):
    (block,) = re.findall(r"```toml\n(.*?)```", SECTIONS[kind], flags=re.DOTALL)
    tags = "".join(
        f'[[tag]]\nname = "{name}"\nsource = "dcs"\nunit = "{unit}"\n'
        for name, (unit, _) in READ.items()
    )
    path = folder / "site.toml"
    path.write_text(HEAD + tags + block, encoding="utf-8")
    return load_site(path)


def _computed(site, ambient=12.0):
    return _window(site, {"TA": ambient}).batch


def _window(site, readings):
    times = np.arange(START - lead_in(site), START + 3601, 60)
    names = list(READ)
    values = [readings.get(n, READ[n][1]) for n in names]
    table = pd.DataFrame(
        {
            "tag": pd.Categorical.from_codes(
                np.repeat(np.arange(len(names)), len(times)), categories=names
            ),
            "time": pd.to_datetime(np.tile(times, len(names)), unit="s", utc=True).as_unit("us"),
            "value": np.repeat(np.asarray(values, float), len(times)),
            "quality": np.full(len(names) * len(times), np.uint8(Quality.GOOD)),
        }
    )
    return compute(site, ReadResult(table), START, START + 3600, with_budgets=True)


def test_the_page_has_every_kind_in_order():
    assert list(SECTIONS) == sorted(KINDS)


def _judged(figure):
    least = f"{figure.smallest_change:g} {unit_of_change(figure.unit)}"
    return f"yes, from {least}" if figure.judged else "shown only"


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_a_kinds_drawing_has_its_ports_and_its_table_its_figures(kind, tmp_path):
    (drawing,) = re.findall(r"```text\n(.*?)```", SECTIONS[kind], flags=re.DOTALL)
    for port in KINDS[kind].ports:
        arrow = rf"--> {port.name}\b" if port.direction == "out" else rf"\b{port.name}\b.* -->"
        assert re.search(arrow, drawing), port.name
    assert KINDS[kind].fuel_and_product[1:] in SECTIONS[kind]
    item = _example(kind, tmp_path).items["it"]
    told = re.findall(r"^\| `(\w+)` \| (\S+) \|.*\| (.+) \|$", SECTIONS[kind], flags=re.MULTILINE)
    listed = [(f.name, f.unit, _judged(f)) for f in item.kind.figures(item)]
    assert sorted(told) == sorted(listed)


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_a_kinds_example_computes_and_contradicts_nothing(kind, tmp_path):
    site = _example(kind, tmp_path)
    batch = _computed(site)
    account = batch.equipment
    assert np.isfinite(account["destroyed_live_kw"]).all()
    floor = -1e-9 * account["exergy_in_live_kw"].abs().max()
    assert account["destroyed_live_kw"].min() >= floor
    figures = batch.conditions
    for name, values in figures.groupby("figure", observed=True)["value"]:
        assert np.isfinite(values).all() or (kind, name) in ABSENT, name
    rates = batch.streams.groupby("subject", observed=True)["exergy_live_kw"].mean().to_dict()
    costs = unit_costs(site, rates, supplied_prices(site)).streams
    assert all(np.isfinite(c) and c >= 0 for c in costs.values())


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_each_figure_of_an_example_explains_itself(kind, tmp_path):
    site = _example(kind, tmp_path)
    times = pd.to_datetime(np.arange(START - lead_in(site), START + 3601, 60), unit="s", utc=True)
    rows = [f"{time.isoformat()},{n},{v}" for time in times for n, (_, v) in READ.items()]
    (tmp_path / "readings.csv").write_text("time,tag,value\n" + "\n".join(rows), encoding="utf-8")
    with open_sources(site) as sources:
        for figure in site.items["it"].kind.figures(site.items["it"]):
            told = explain(site, None, sources, "it", figure.name, START + 1800)
            assert told.unit == figure.unit
            steps = [step.value for step in told.steps if step.is_figure]
            assert all(v == pytest.approx(told.computed, rel=1e-9) for v in steps), figure.name
            shown = figure.judged or (kind, figure.name) in STEPS
            assert steps or not shown or (kind, figure.name) in ABSENT, figure.name


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_a_kinds_judged_figures_know_no_weather(kind, tmp_path):
    site = _example(kind, tmp_path)
    warm, cold = (
        _computed(site, ambient).conditions.groupby("figure", observed=True)["value"].mean()
        for ambient in (30.0, -15.0)
    )
    item = site.items["it"]
    for figure in item.kind.figures(item):
        if figure.judged and (kind, figure.name) not in ABSENT:
            assert warm[figure.name] == pytest.approx(cold[figure.name], rel=1e-12), figure.name


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_another_ambient_moves_the_live_figures_and_leaves_the_reference(kind, tmp_path):
    site = _example(kind, tmp_path)
    warm, cold = (_computed(site, ambient).equipment for ambient in (30.0, -15.0))
    columns = [c for c in warm.columns if "_reference_" in c]
    pd.testing.assert_frame_equal(warm[columns], cold[columns], rtol=1e-12)
    if warm["exergy_in_live_kw"].abs().max() > 0:
        assert not np.allclose(warm["exergy_in_live_kw"], cold["exergy_in_live_kw"], rtol=1e-3)


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_a_tags_part_in_an_uncertainty_is_what_its_reading_does(kind, tmp_path):
    """Each tag higher by its class (by default 1 % of a pressure, 1.5 K), all computed again."""
    site = _example(kind, tmp_path)
    base = _window(site, {})
    found = base.uncertainties
    for tag in site.used_tags():
        unit, value = READ[tag]
        moved = _window(site, {tag: value + (1.5 if unit == "degC" else 0.01 * value)}).batch
        budgets = {("it", "destroyed_live_kw"): (found.destroyed["it"], 1e-3)}
        budgets |= {key: (one, 1.0) for key, one in found.conditions.items()}
        budgets |= {(s, "exergy_live_kw"): (one, 1e-3) for s, one in found.exergy.items()}
        for (subject, figure), (budget, scale) in budgets.items():
            before, after = (_first(batch, subject, figure) for batch in (base.batch, moved))
            told = dict(budget.ranked(0)).get(tag, 0.0) * scale
            if np.isfinite(before):
                size = 1e-9 * (1 + abs(before))
                assert told == pytest.approx(after - before, rel=1e-6, abs=size, nan_ok=True)


def _first(batch, subject, figure):
    for table in (batch.equipment, batch.streams):
        if figure in table.columns and subject in set(table["subject"]):
            return table.loc[table["subject"] == subject, figure].iloc[0]
    table = batch.conditions
    return table.loc[(table["subject"] == subject) & (table["figure"] == figure), "value"].iloc[0]
