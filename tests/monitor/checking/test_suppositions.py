"""The parts of `check`: suppositions, misreadings, clocks, exports, and what a line shows."""

from __future__ import annotations

import dataclasses
import re

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from iapws import IAPWS97

from monitor.checking import check
from monitor.checking.contradictions import contradictions
from monitor.checking.equipment_lines import kilowatts
from monitor.checking.exports import doubts
from monitor.checking.readings_otherwise import guesses
from monitor.checking.suspects import suspects
from monitor.checking.typical import Supposition, Typical, relative, try_out, typical
from monitor.cycle import read_window
from monitor.site.load import Site, load_site
from monitor.site.models import Source
from monitor.site.units import parse_unit
from monitor.sources import open_sources

PRESSURES = ("bar(g)", "bar(a)", "kPa(g)", "psi(a)", "psi(g)", "mmHg(vac)", "mbar(a)", "MPa(g)")


@pytest.fixture(scope="session")
def site(sound_folder) -> Site:
    return load_site(sound_folder / "site.toml")


@pytest.fixture(scope="session")
def day(site) -> Typical:
    end = int(pd.Timestamp("2026-02-27T00:00Z").timestamp())
    start = end - 86400
    with open_sources(site) as sources:
        rows = read_window(site, sources, start, end).readings
    rows = rows[rows["time"] >= pd.Timestamp(start, unit="s", tz="UTC")]
    parts = {str(name): part for name, part in rows.groupby("tag", observed=True)}
    return typical(site, parts, start, end)


@settings(deadline=None)
@given(
    one=st.sampled_from(PRESSURES),
    other=st.sampled_from(PRESSURES),
    value=st.floats(-50.0, 500.0),
    barometer=st.floats(85e3, 105e3),
)
def test_a_pressure_taken_in_another_unit_and_back_is_the_same(one, other, value, barometer):
    a, b = parse_unit(one), parse_unit(other)
    there = relative(a, b, value, barometer)
    # A pressure of a few mmHg below many bar loses digits to the sum with the barometer.
    scale = max(abs(value), 1e6 / b.scale, 1.0)
    assert relative(b, a, there, barometer) == pytest.approx(value, abs=1e-9 * scale)


def test_gauge_pressure_counts_from_the_barometer_and_not_from_one_atmosphere():
    # 12 bar(g) on a mountain at 0.85 bar is 12.85 bar(a).
    assert relative(parse_unit("bar(a)"), parse_unit("bar(g)"), 12.0, 85e3) == pytest.approx(12.85)


@settings(max_examples=15, deadline=None)
@given(picked=st.lists(st.integers(0, 400), min_size=1, max_size=6))
def test_a_supposition_does_not_depend_on_those_tried_with_it(site, day, picked):
    every = guesses(site, day)
    chosen = [every[k % len(every)].supposition for k in picked]
    together = contradictions(site, try_out(site, day, chosen))
    for cell, one in enumerate(chosen):
        alone = contradictions(site, try_out(site, day, [one]))
        for a, b in zip(together, alone, strict=True):
            assert a.size[cell] == pytest.approx(b.size[0], rel=1e-9, abs=1e-12, nan_ok=True), a


def test_no_law_is_broken_by_much_more_than_its_tolerance_on_a_sound_site(site, day):
    told = contradictions(site, try_out(site, day, [Supposition({})]))
    assert len(told) > 100
    # Tolerances are two standard uncertainties: of forty balances one or two lie just beyond.
    assert [t for t in told if not t.size[0] < 1.5] == []
    assert sum(t.size[0] > 1.0 for t in told) <= 2


def _with(day: Typical, **raw: float) -> Typical:
    renamed = {name.replace("_", "-"): value for name, value in raw.items()}
    return dataclasses.replace(day, raw={**day.raw, **renamed})


def test_two_faults_at_once_are_both_named(site, day):
    # A feed meter that shows kg/s, and a thermometer that shows degF.
    wrong = _with(day, FT_2002=day.raw["FT-2002"] / 3.6, TT_4302=day.raw["TT-4302"] * 1.8 + 32.0)
    found, _ = suspects(site, wrong)
    assert {s.guess.tags[0] for s in found} == {"FT-2002", "TT-4302"}
    words = {s.guess.tags[0]: s.guess.words for s in found}
    assert words["FT-2002"].startswith("looks like kg/s")
    assert words["TT-4302"].startswith("looks like degF")


def test_a_meter_that_is_off_by_no_unit_is_said_to_be_off(site, day):
    found, _ = suspects(site, _with(day, FT_4301=day.raw["FT-4301"] * 1.5))
    assert found[0].guess.tags == ("FT-4301",)
    assert found[0].guess.words == "seems to read about 1.5 times what flows"


def test_a_flow_meter_that_shows_nothing_is_told_by_the_balances(site, day):
    found, _ = suspects(site, _with(day, FT_1002=0.0))
    assert found[0].guess.tags == ("FT-1002",)
    assert found[0].guess.words == "shows no flow where the balances have one"


def test_two_generators_crossed_are_named_together(site, day):
    crossed = {"JT_4101": day.raw["JT-4201"], "JT_4201": day.raw["JT-4101"]}
    found, _ = suspects(site, _with(day, **crossed))
    assert found[0].guess.tags == ("JT-4101", "JT-4201")


def test_a_balance_that_cannot_tell_two_meters_apart_names_both(site, day):
    # Nothing but the condenser's balance rests on its cooling water, on both sides alike.
    warmer = _with(day, TT_4302=day.raw["TT-4302"] + 4.6)
    found, _ = suspects(site, warmer)
    named = {t for g in (found[0].guess, *found[0].rivals) for t in g.tags}
    assert "TT-4302" in named
    assert len(named) > 1


def test_what_physics_cannot_tell_is_not_made_up(site, day):
    # One bar at the feed pump's 82, and the valve of a line that is shut: nothing depends on them.
    for raw in ({"PT_3004": day.raw["PT-3004"] - 1.0}, {"TT_5101": day.raw["TT-5101"] - 60.0}):
        assert suspects(site, _with(day, **raw))[0] == []


def test_the_compressibility_is_that_of_the_steam_tables(sound):
    (line,) = (x for x in sound.lines if (x.kind, x.subject) == ("stream", "tg1_inlet"))
    steam = IAPWS97(
        P=float(line.figures["pressure_bar"]) / 10,
        T=float(line.figures["temperature_degc"]) + 273.15,
    )
    # iapws' own volume; R of water as in IAPWS R7-97(2012), table 1.
    expected = steam.P * 1e6 * steam.v / (461.526 * steam.T)
    assert line.figures["compressibility"] == pytest.approx(expected, abs=1e-4)
    assert f"Z = {expected:.3f}" in line.found
    water = next(x for x in sound.lines if x.subject == "b1_feed")
    assert water.figures["compressibility"] is None


@pytest.mark.parametrize(
    ("stated", "first", "told"),
    [
        ("month_first", "24.02.2026 00:05:00", "day first"),
        ("day_first", "02/24/2026 00:05:00", "month first"),
        ("%m/%d/%Y %H:%M:%S", "24/02/2026 00:05:00", "day first"),
    ],
)
def test_day_and_month_the_wrong_way_round_are_doubted(tmp_path, stated, first, told):
    rows = [f"{first[:-5]}{minute:02d}:00,PT-1,{minute}" for minute in range(60)]
    (tmp_path / "day.csv").write_text("\n".join(["time,tag,value", *rows]))
    source = Source(id="one", kind="csv", path="day.csv", time_format=stated)
    (doubt,) = doubts(source, tmp_path)
    assert f"seems to be written {told}" in doubt


def test_days_read_as_months_stand_alone_and_are_doubted(make_plant, tmp_path):
    # 9, 10 and 11 February, written day first, read as 2 September, October and November.
    plant = make_plant(tmp_path / "site", start="2025-02-09T00:00Z", days=3.0)
    export = plant.folder / "exports" / "day.csv"
    table = pd.read_csv(export, dtype=str, keep_default_na=False)
    table["time"] = pd.to_datetime(table["time"], utc=True).dt.strftime("%d/%m/%Y %H:%M:%S")
    table.to_csv(export, index=False)
    plant.edit('kind = "csv"', 'kind = "csv"\ntime_format = "month_first"')
    checked = check(load_site(plant.path))
    (line,) = (x for x in checked.lines if x.kind == "source")
    assert line.verdict == "look"
    assert "day and month the wrong way round" in line.reason
    assert checked.causes[0].subject == line.subject


def test_a_file_that_is_as_stated_is_not_doubted(site):
    assert [d for s in site.file.source for d in doubts(s, site.folder)] == []


def test_typical_readings_take_means_of_flows_while_they_run(day):
    assert np.isfinite(list(day.raw.values())).all()
    assert len(day.raw) == 64


NEAR_BOILING = """
[site]
id = "one"
name = "One pump behind a deaerator"
[dead_state]
temperature = "15 degC"
pressure = "1.01325 bar(a)"
[[source]]
id = "one"
kind = "csv"
path = "readings.csv"
"""


def _behind_a_deaerator(tmp_path):
    tags = {"F": "t/h", "P1": "bar(a)", "T1": "degC", "P2": "bar(a)", "T2": "degC", "J": "kW"}
    text = NEAR_BOILING + "".join(
        f'[[tag]]\nname = "{name}"\nsource = "one"\nunit = "{unit}"\n'
        for name, unit in tags.items()
    )
    text += """
[[stream]]
id = "water"
flow = "F"
pressure = "P1"
temperature = "T1"
[[stream]]
id = "power"
medium = "power"
power = "J"
[[stream]]
id = "fed"
flow = "balance"
pressure = "P2"
temperature = "T2"
[[equipment]]
id = "pump"
kind = "pump"
ports = { inlet = "water", power = "power", outlet = "fed" }
"""
    (tmp_path / "site.toml").write_text(text, encoding="utf-8")
    return load_site(tmp_path / "site.toml")


def _just_below_boiling() -> dict[str, float]:
    boiling = IAPWS97(P=0.125, x=0).T - 273.15
    return {"F": 17.0, "P1": 1.25, "T1": boiling - 0.5, "P2": 40.0, "T2": boiling, "J": 33.0}


def test_a_vessel_that_is_truly_near_boiling_gets_no_gauge_blamed(tmp_path):
    """Half a kelvin below saturation at 1.25 bar: right for a deaerator, whatever follows it."""
    site = _behind_a_deaerator(tmp_path)
    found, told = suspects(site, Typical(_just_below_boiling(), 101325.0, {}))
    assert found == []
    doubted = {one.subject for one in told if one.what == "state" and one.size[0] > 0}
    assert doubted == {"water"}


def test_what_a_stream_near_boiling_feeds_is_not_called_near_boiling_itself(tmp_path):
    site = _behind_a_deaerator(tmp_path)
    times = pd.date_range("2026-01-10", periods=288, freq="5min")
    rows = [
        f"{t:%Y-%m-%dT%H:%M:%SZ},{n},{v}" for t in times for n, v in _just_below_boiling().items()
    ]
    (tmp_path / "readings.csv").write_text("\n".join(["time,tag,value", *rows]), encoding="utf-8")
    reasons = {line.subject: line.reason for line in check(site).lines if line.kind == "stream"}
    assert reasons["water"].startswith("within 2 K of saturation p and T do not fix the state")
    assert reasons["fed"].startswith("its flow or state is found from a stream that is near")


@pytest.mark.parametrize(
    ("value", "digits", "said"),
    [
        (1.3e-14, 4, "0"),
        (10444.4, 4, "10440"),
        (236.1, 2, "240"),
        (5.3, 2, "5.3"),
        (-2.5, 4, "-2.5"),
    ],
)
def test_a_rate_is_told_without_powers_of_ten_and_rounding_as_none(value, digits, said):
    assert kilowatts(value, 326.0, digits) == said


def test_a_day_that_begins_late_is_not_laid_to_the_holds_of_its_tags(tmp_path):
    """A historian that was away for four days until five hours ago: no longer hold would help."""
    site = _behind_a_deaerator(tmp_path)
    before = pd.date_range("2026-01-06T00:00Z", periods=60, freq="5min")
    times = before.append(pd.date_range("2026-01-10T19:00Z", "2026-01-11T00:00Z", freq="5min"))
    readings = _just_below_boiling()
    # Moving a little all the time, as transmitters do.
    rows = [
        f"{t:%Y-%m-%dT%H:%M:%SZ},{n},{v * (1 + 1e-4 * (k % 7)):.5f}"
        for k, t in enumerate(times)
        for n, v in readings.items()
    ]
    (tmp_path / "readings.csv").write_text("\n".join(["time,tag,value", *rows]), encoding="utf-8")
    (line,) = [x for x in check(site).lines if (x.kind, x.subject) == ("tag", "F")]
    assert line.verdict == "look"
    assert re.fullmatch(r"its readings begin 19\.\d h after the day looked at does", line.reason)
