"""Rows gathered from a real store: ledger, equipment, condition, alarms, data, flows."""

from __future__ import annotations

import shutil
from collections import defaultdict
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from typer.testing import CliRunner

from monitor.cli import app
from monitor.commands.opening import opened_to_read
from monitor.drift.message import cost_sentence
from monitor.reports.costs import costs_view
from monitor.reports.dead_state import dead_state_view
from monitor.reports.equipment import equipment_view
from monitor.reports.expansion import expansion_view
from monitor.reports.overview import flow_links, node_names, overview_view
from monitor.site.load import load_site
from monitor.site.models import DriftFigure

SECONDS = 6 * 86400
DAY = pd.Timedelta(days=1)


@pytest.fixture(scope="session")
def overview(reported):
    return overview_view(reported.gathered)


@pytest.fixture(scope="session")
def costs(reported):
    return costs_view(reported.gathered)


def test_the_ledger_adds_up_and_its_totals_are_rates_times_time(overview):
    lines = {line.key: line for line in overview.ledger}
    for state in ("live_kw", "reference_kw"):
        rate = {key: getattr(line, state) for key, line in lines.items()}
        ends = sum(rate[key] for key in ("used", "lost", "destroyed", "stored", "imbalance"))
        assert rate["supplied"] == pytest.approx(ends, rel=1e-9)
    for line in lines.values():
        assert line.live_mwh == pytest.approx(line.live_kw * SECONDS / 3.6e6)
    # The site file asks 50 EUR for a megawatt-hour.
    assert lines["destroyed"].cost == pytest.approx(lines["destroyed"].live_mwh * 50.0)
    assert lines["stored"].cost is None
    assert lines["imbalance"].co2_t is None


def test_rows_carry_the_expanded_uncertainty_of_their_instruments(reported, overview):
    """Twice the mean of the cells' own, which is what fully correlated errors leave of a mean."""
    gathered = reported.gathered
    cells = gathered.store.ledger(gathered.start, gathered.end)
    lines = {line.key: line for line in overview.ledger}
    for key in ("supplied", "used", "lost", "destroyed", "imbalance"):
        own = 2 * cells[f"u_{key}_live_kw"].mean()
        assert lines[key].expanded_kw == pytest.approx(own, rel=1e-9)
    assert np.isnan(lines["stored"].expanded_kw)
    for row in overview.equipment:
        cells = gathered.store.equipment(row.id, gathered.start, gathered.end)
        own = 2 * cells["u_destroyed_live_kw"].mean()
        assert row.destroyed_expanded_kw == pytest.approx(own, rel=1e-9)
        assert own > 0
    rows = [row for row in overview.conditions if np.isfinite(row.current)]
    assert rows
    assert all(row.expanded > 0 for row in rows)


def test_the_trend_of_the_ledger_has_the_ledgers_mean(overview):
    trend = overview.ledger_trend
    assert len(trend) == 6 * 24
    assert str(trend.index.tz) == "Europe/Berlin"
    for line in overview.ledger:
        assert trend[line.key].mean() == pytest.approx(line.live_kw, rel=1e-9, abs=1e-6)


def test_equipment_is_ranked_and_its_shares_follow_from_the_rates(overview):
    rates = [row.destroyed_kw for row in overview.equipment]
    assert [row.id for row in overview.equipment] == ["TG1", "LD62", "HDR62"]
    assert rates == sorted(rates, reverse=True)
    assert sum(row.share for row in overview.equipment) == pytest.approx(1.0)


def test_what_is_destroyed_costs_what_the_chain_before_it_was_paid(reported, overview, costs):
    """Steam is bought at 50 EUR/MWh; what the header destroys is paid for by what leaves it."""
    rates = reported.store.means("stream", reported.gathered.start, reported.gathered.end)["mean"]
    kw = {s: rates[(s, "exergy_live_kw")] for s in ("live_steam", "to_turbine", "to_letdown")}
    behind = 50.0 * kw["live_steam"] / (kw["to_turbine"] + kw["to_letdown"])
    unit_cost = {"HDR62": 50.0, "TG1": behind, "LD62": behind}
    for row in costs.equipment:
        assert row.unit_cost == pytest.approx(unit_cost[row.id], rel=1e-9)
        assert row.cost_per_day == pytest.approx(row.destroyed_kw * 0.024 * row.unit_cost)
        assert row.mean_per_day == pytest.approx(row.destroyed_kw * 0.024 * 50.0)
        assert row.fuel_kw == 0.0  # the site burns none
    by_machine = {row.id: row.cost_per_day for row in costs.equipment}
    assert {row.id: row.cost_per_day for row in overview.equipment} == by_machine
    assert costs.supplied_per_day == pytest.approx(kw["live_steam"] * 0.024 * 50.0)


def test_the_ledgers_costs_add_up_to_what_the_supply_costs(reported, tmp_path):
    """With a price of its own the steam is no longer costed at the site's 50 EUR/MWh."""
    text = reported.site.path.read_text(encoding="utf-8")
    priced = text.replace('id = "live_steam"', 'id = "live_steam"\nprice = 30.0\nco2 = 90.0')
    path = tmp_path / "site.toml"
    path.write_text(priced, encoding="utf-8")
    gathered = replace(reported.gathered, site=load_site(path))
    lines = {line.key: line for line in gathered.ledger(gathered.start, gathered.end)}
    assert lines["supplied"].cost == pytest.approx(lines["supplied"].live_mwh * 30.0)
    assert lines["supplied"].co2_t == pytest.approx(lines["supplied"].live_mwh * 0.090)
    view = costs_view(gathered)
    assert lines["supplied"].cost == pytest.approx(
        view.supplied_per_day * SECONDS / 86400, rel=1e-6
    )
    assert view.mean_price == pytest.approx(30.0)


def test_heat_lost_at_a_stated_temperature_costs_what_its_equipment_is_fed_with(reported, tmp_path):
    """It is no part of what is destroyed; steam is bought at 50 EUR and 200 kg of CO2 per MWh."""
    text = reported.site.path.read_text(encoding="utf-8")
    path = tmp_path / "site.toml"
    stated = 'id = "HDR62"\nboundary_temperature = "70 degC"\n'
    path.write_text(text.replace('id = "HDR62"\n', stated), encoding="utf-8")
    gathered = replace(reported.gathered, site=load_site(path))
    means = reported.gathered.equipment_means.copy()
    means.loc[("HDR62", "heat_loss_exergy_live_kw"), "mean"] = 250.0
    gathered.__dict__["equipment_means"] = means
    header = gathered.site.items["HDR62"].name
    (row,) = [row for row in costs_view(gathered).losses if row.name == f"Heat lost by {header}"]
    assert row.exergy_kw == 250.0
    assert row.cost_per_day == pytest.approx(0.250 * 24 * 50.0)
    assert row.co2_t_per_day == pytest.approx(0.250 * 24 * 0.200)
    names = [row.name for row in costs_view(reported.gathered).losses]
    assert not any(name.startswith("Heat lost") for name in names)


def test_a_tonne_of_steam_costs_what_its_exergy_does(reported, costs):
    means = reported.store.means("stream", reported.gathered.start, reported.gathered.end)["mean"]
    flow = means[("live_steam", "mass_flow_kg_s")] * 3.6
    row = costs.streams[0]
    assert row.per_tonne * flow == pytest.approx(row.exergy_kw / 1000 * 50.0)
    power = next(row for row in costs.streams if row.name == "power")
    assert np.isnan(power.per_tonne)


def test_what_wear_destroys_is_avoidable_and_nothing_else_is(reported, costs):
    """The turbine falls from 0.82 to 0.79 of the isentropic drop for two days of six."""
    rows = {row.id: row for row in costs.equipment}
    start = reported.gathered.start
    worn = start + 4 * DAY
    before, after = (
        reported.store.means("equipment", *span, subject="TG1")["mean"].droplevel("subject")
        for span in ((start, worn), (worn, start + 6 * DAY))
    )
    # At one load and one inlet state, each product as made and the rest destroyed.
    unavoidable = before["destroyed_reference_kw"] / before["product_reference_kw"]
    extra = after["destroyed_reference_kw"] - unavoidable * after["product_reference_kw"]
    assert rows["TG1"].avoidable_kw == pytest.approx(extra * 2 / 6, rel=0.05)
    assert rows["TG1"].compared > 0.9
    assert rows["LD62"].avoidable_kw < 0.01 * rows["LD62"].destroyed_kw


def test_a_row_says_what_it_rests_on_and_for_how_long(overview):
    grounds = {row.id: dict(row.flags) for row in overview.equipment}
    # The let-down's flow and the exhaust's come from balances, at all times.
    assert grounds["LD62"]["from a balance"] == 1.0
    assert "ambient below freezing" not in grounds["TG1"]


def test_the_turbine_stands_where_its_readings_put_it(overview):
    """The export was made with an efficiency of 0.82, and 0.79 after four days."""
    row = next(row for row in overview.conditions if row.figure == "eta_s_1")
    assert (row.equipment, row.state, row.worse) == ("TG1", "drifting", "low")
    assert row.expected == pytest.approx(82.0, abs=0.2)
    assert row.current == pytest.approx(79.0, abs=0.3)
    assert row.residual == pytest.approx(-3.0, abs=0.3)
    assert row.smallest_change > 0
    assert overview.conditions[0] == row
    (alarm,) = overview.alarms
    assert row.since == alarm.raised


def test_figures_that_nobody_judges_have_a_value_and_no_limit(overview):
    row = next(row for row in overview.conditions if row.figure == "steam_rate")
    assert row.state == "not judged"
    # 3.6e6 J/kWh over a drop of 0.79 x 663 kJ/kg from 62 bar, 470 degC to 4 bar.
    assert row.current == pytest.approx(6.87, rel=0.01)
    assert np.isnan([row.expected, row.residual, row.limit]).all()


def test_an_alarm_row_says_neither_the_name_nor_the_cost_that_stand_beside_it(reported, overview):
    (alarm,) = overview.alarms
    (record,) = reported.store.open_alarms()
    assert alarm.message.startswith("isentropic efficiency is 79.")
    said = cost_sentence(record.cost_per_day, "EUR")
    assert record.message == f"{alarm.equipment_name}: {alarm.message} {said}"
    assert alarm.cost_per_day == pytest.approx(record.cost_per_day)
    # The step was put in after four days: 14 January, 01:00 local time.
    late = alarm.raised - pd.Timestamp("2026-01-14 01:00", tz="Europe/Berlin")
    assert pd.Timedelta(0) < late < DAY


@pytest.mark.parametrize(
    ("state", "words", "aside"),
    [
        ("unacknowledged", "unacknowledged alarm", False),
        ("acknowledged", "acknowledged alarm", False),
        ("returned", "returned to normal, unacknowledged", False),
        ("shelved", "shelved", True),
        ("suppressed by design", "suppressed by design", True),
        ("out of service", "out of service", True),
    ],
)
def test_alarm_states_are_named_as_in_isa_18_2(reported, state, words, aside):
    # State names of ISA-18.2-2016, clause 5 (from memory).
    (record,) = reported.store.open_alarms()
    row = reported.gathered.alarm_row(replace(record, state=state))
    assert (row.state, row.set_aside) == (words, aside)


def test_an_alarm_of_equipment_that_left_the_site_file_keeps_its_words(reported):
    (record,) = reported.store.open_alarms()
    row = reported.gathered.alarm_row(replace(record, subject="GONE", cost_per_day=None))
    assert (row.equipment_name, row.figure_label) == ("GONE", "eta_s_1")
    assert row.message == record.message


def test_every_reading_is_counted(reported, overview):
    counts = {row.tag: row for row in overview.quality}
    expected = reported.readings.groupby("tag").size()
    assert {tag: row.readings for tag, row in counts.items()} == expected.to_dict()
    assert all(row.good == 1.0 and row.missing == 0.0 for row in overview.quality)
    assert counts["TT-0001"].description == "ambient temperature"
    assert counts["FT-6201"].unit == "t/h"


def test_flows_balance_at_every_piece_of_equipment(reported):
    into, out = defaultdict(float), defaultdict(float)
    links = flow_links(reported.gathered)
    for link in links:
        into[link.target] += link.kw
        out[link.source] += link.kw
    rows = {row.id: row for row in reported.gathered.equipment_rows()}
    for key, row in rows.items():
        assert into[key] - out[key] == pytest.approx(row.closure_kw, abs=0.05)
    names = node_names(reported.gathered)
    assert {link.source for link in links} | {link.target for link in links} <= set(names)
    assert names["from:live_steam"] == "live_steam"


def test_a_turbines_page_has_its_chart_trends_and_streams(reported, overview):
    item = reported.site.items["TG1"]
    row = next(row for row in overview.equipment if row.id == "TG1")
    view = equipment_view(reported.gathered, item, row, overview.conditions)
    (chart,) = view.residuals
    assert chart.alarms == ((overview.alarms[0].raised, overview.alarms[0].message),)
    # The limits hold between judged hours too, so that their band has no gaps.
    band = chart.data[["low", "high"]].loc[chart.data["high"].first_valid_index() :]
    assert band.notna().all().all()
    assert (band["low"] == -band["high"]).all()
    efficiency = next(trend for trend in view.trends if trend.unit == "%")
    assert efficiency.title == "Isentropic efficiency"
    assert efficiency.data["value"].iloc[:24].mean() == pytest.approx(82.0, abs=0.3)
    last = reported.readings[
        (reported.readings["tag"] == "FT-4101")
        & (reported.readings["time"] >= reported.gathered.end - DAY)
    ]
    inlet = view.streams[view.streams["port"] == "inlet"].iloc[0]
    assert inlet["flow"] == pytest.approx(last["value"].mean(), rel=2e-3)
    power = view.streams[view.streams["port"] == "power"].iloc[0]
    assert np.isnan(power["flow"])
    assert power["exergy"] > 5000.0
    assert inlet["pressure"] == pytest.approx(62.0, abs=0.05)
    assert inlet["temperature"] == pytest.approx(470.0, abs=0.2)


@pytest.mark.parametrize(("stated", "said"), [(None, "0.7"), (2.5, "2.5")])
def test_a_charts_page_tells_the_smallest_change_that_counts_at_this_site(reported, stated, said):
    own = DriftFigure(equipment="TG1", figure="eta_s_1", smallest_change=stated)
    file = reported.site.file
    drift = file.drift.model_copy(update={"figure": [own]})
    site = replace(reported.site, file=file.model_copy(update={"drift": drift}))
    gathered = replace(reported.gathered, site=site)
    rows = gathered.condition_rows("TG1")
    (row,) = [row for row in rows if row.figure == "eta_s_1"]
    assert row.smallest_change == float(said)
    (costs,) = [row for row in gathered.equipment_rows() if row.id == "TG1"]
    (chart,) = equipment_view(gathered, site.items["TG1"], costs, rows).residuals
    assert chart.design.endswith(f"and never narrower than {said} points.")


def test_after_a_wash_no_figure_is_shown_against_the_baseline_before_it(reported, tmp_path):
    """On a copy: an event is for good."""
    shutil.copytree(reported.site.path.parent, tmp_path / "washed")
    path = tmp_path / "washed" / reported.site.path.name
    at = ["--at", "2026-01-15T12:00Z"]
    ran = CliRunner().invoke(app, ["event", "add", str(path), "TG1", "wash", *at])
    assert ran.exit_code == 0, ran.stderr
    with opened_to_read(path) as washed:
        gathered = replace(reported.gathered, site=washed.site, store=washed.store)
        (row,) = [row for row in gathered.condition_rows("TG1") if row.figure == "eta_s_1"]
        assert gathered.drift_points("TG1", "eta_s_1")["judged"].any()
        assert all(alarm.cleared is not None for alarm in gathered.open_alarms())
    assert row.state == "no baseline"
    assert np.isnan(row.expected)
    assert np.isnan(row.residual)
    before = next(r for r in reported.gathered.condition_rows("TG1") if r.figure == "eta_s_1")
    assert row.current == pytest.approx(before.current, abs=0.5)


def test_only_what_expands_steam_to_power_has_an_expansion_line(reported):
    line = expansion_view(reported.gathered, reported.site.items["TG1"])
    assert expansion_view(reported.gathered, reported.site.items["LD62"]) is None
    assert expansion_view(reported.gathered, reported.site.items["HDR62"]) is None
    inlet, exhaust = (line.points.iloc[place] for place in (0, -1))
    assert (inlet["pressure"], exhaust["pressure"]) == pytest.approx((62.0, 4.0), rel=2e-3)
    drop = inlet["enthalpy"] - exhaust["enthalpy"]
    assert drop / (inlet["enthalpy"] - exhaust["ideal_enthalpy"]) == pytest.approx(0.79, abs=0.003)
    before = line.baseline_points.iloc[-1]
    assert before["enthalpy"] < exhaust["enthalpy"]
    # Saturated steam at 4 bar(a): 6.895 kJ/(kg K), 2738 kJ/kg (steam tables, from memory).
    near = (line.dome["enthalpy"] - 2738.1).abs() + 100 * (line.dome["entropy"] - 6.8955).abs()
    assert near.min() < 5.0


def test_the_weathers_weeks_add_up_to_the_ledger(reported, overview):
    view = dead_state_view(reported.gathered)
    destroyed = next(line for line in overview.ledger if line.key == "destroyed")
    assert view.weather_effect["destroyed_live_mwh"].sum() == pytest.approx(destroyed.live_mwh)
    assert list(view.weather_effect["period"]) == ["week of 05 Jan 2026", "week of 12 Jan 2026"]
    # The ambient swings by 5 K about 8 degC: no ice, nothing held.
    assert view.freezing_hours == 0.0
    assert view.held_hours == 0.0
    assert view.ambient["temperature"].mean() == pytest.approx(8.0, abs=0.1)
    assert view.reference_pressure == pytest.approx(1013.25)
