"""What a tag may say of its checks and its meter, in the site file and in a tag list."""

from __future__ import annotations

import pytest

from monitor.errors import SiteFileError
from monitor.site.load import load_site
from monitor.site.models import Tag
from monitor.site.units import UnitError, difference, parse_unit, rate

SITE = """
tag_lists = ["tags.csv"]
[site]
id = "one"
name = "One"
[dead_state]
temperature = "12 degC"
pressure = "1.013 bar(a)"
[[source]]
id = "s"
kind = "csv"
path = "*.csv"
[[stream]]
id = "a"
flow = "F"
pressure = "P"
temperature = "300 degC"
[[stream]]
id = "b"
flow = "balance"
pressure = "P"
temperature = "290 degC"
[[equipment]]
id = "h"
kind = "header"
ports = { inlet = "a", outlet = "b" }
"""


def _tag(**keys):
    return Tag.model_validate({"name": "T", "source": "s", "unit": "degC"} | keys)


@pytest.mark.parametrize(
    ("text", "unit", "per_second"),
    [
        ("5 bar/min", "bar(g)", 5 / 60),
        ("500 kPa/min", "bar(a)", 5 / 60),
        ("10 K/min", "degC", 10 / 60),
        ("10 degC/min", "degF", 18 / 60),
        ("18 degF/min", "degC", 10 / 60),
        ("2 t/h/min", "t/h", 2 / 60),
        ("2 t/h/min", "kg/s", 2 / 3.6 / 60),
        ("100 Nm3/h/s", "Nm3/h", 100.0),
        ("5 %/s", "%", 5.0),
        ("3 MW/h", "kW", 3000 / 3600),
        ("10 mm/min", "m", 0.01 / 60),
    ],
)
def test_a_rate_of_change_is_read_into_the_tags_own_unit(text, unit, per_second):
    assert rate(text, parse_unit(unit)) == pytest.approx(per_second)


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        ("5 bar", "bar(g)"), ("5", "bar(g)"), ("bar/min", "bar(g)"), ("5 K/min", "bar(g)"),
        ("5 bar/kg", "bar(g)"), ("-5 bar/min", "bar(g)"), ("0 bar/min", "bar(g)"), ("", "t/h"),
        ("2 t/h", "t/h"), ("5 bar/min/", "bar(g)"),
    ],
)  # fmt: skip
def test_what_is_no_rate_of_change_is_refused_with_an_example(text, unit):
    with pytest.raises(UnitError, match=r"is not a rate of change .* write for example '5 .*/min'"):
        rate(text, parse_unit(unit))


def test_a_difference_needs_no_datum_and_no_zero():
    assert difference("0.2 bar", parse_unit("kPa(g)")) == pytest.approx(20)
    assert difference("5 mbar(d)", parse_unit("bar(a)")) == pytest.approx(0.005)
    assert difference("9 degF", parse_unit("degC")) == pytest.approx(5)
    with pytest.raises(UnitError, match="not an amount in a unit like 'degC'"):
        difference("-1 K", parse_unit("degC"))


def test_defaults_follow_the_kind_of_quantity():
    pressure, flow = _tag(unit="bar(g)", range=(0, 100)), _tag(unit="t/h", range=(0, 100))
    valve, level = _tag(unit="%", range=(0, 100)), _tag(unit="m", range=(0, 5))
    assert [t.spike_seconds for t in (pressure, flow, valve, level)] == [1800, 0, 0, 0]
    assert [t.stuck_seconds for t in (pressure, flow, valve, level)] == [14400, 14400, 0, 0]
    assert [t.takes_last for t in (pressure, flow, valve, level)] == [False, False, False, True]


def test_what_a_spike_is_at_least_comes_from_what_is_known_of_the_instrument():
    assert _tag(range=(0, 300)).smallest_spike == (30.0, 0.0)
    assert _tag(uncertainty="0.5 K").smallest_spike == (10.0, 0.0)
    assert _tag(unit="degF", uncertainty="1 K").smallest_spike == (pytest.approx(36.0), 0.0)
    assert _tag(unit="bar(a)", uncertainty="1 % reading").smallest_spike == (0.0, 0.2)
    assert _tag(range=(0, 300), spike_least="4 K").smallest_spike == (4.0, 0.0)
    assert _tag().spike_seconds == 0


@pytest.mark.parametrize(
    ("keys", "says"),
    [
        ({"spike_window": "10 min"}, "give spike_least, a range or an uncertainty"),
        ({"deadband": "0.2 bar"}, "not an amount in a unit like 'degC'"),
        ({"rate_limit": "5 bar/min"}, "not a rate of change"),
        ({"spike_threshold": 0}, "greater than 0"),
        ({"method": "median"}, "'mean' or 'last'"),
        ({"stuck_after": 5}, "has no unit"),
    ],
)
def test_a_check_that_cannot_be_is_refused(keys, says):
    with pytest.raises(ValueError, match=says):
        _tag(**keys)


def test_a_tag_list_carries_checks_and_meters(tmp_path):
    (tmp_path / "site.toml").write_text(SITE, encoding="utf-8")
    (tmp_path / "tags.csv").write_text(
        "name;source;unit;range_low;range_high;rate_limit;method;meter_kind;meter_compensated;"
        "meter_design_pressure;meter_design_temperature;meter_cut_off;stuck_after\n"
        "F;s;t/h;0;40;20 t/h/min;;dp;no;12.5 bar(a);230 degC;0.5 t/h;\n"
        "P;s;bar(g);0;16;;last;;;;;;2 h\n",
        encoding="utf-8",
    )
    tags = load_site(tmp_path / "site.toml").tags
    assert tags["F"].meter.kind == "dp"
    assert tags["F"].meter.needs_density
    assert tags["F"].cut_off == pytest.approx(0.5)
    assert tags["F"].fastest == pytest.approx(20 / 60)
    assert tags["P"].meter is None
    assert tags["P"].takes_last
    assert tags["P"].stuck_seconds == 7200


def test_a_column_that_is_no_key_is_named_with_those_that_are(tmp_path):
    (tmp_path / "site.toml").write_text(SITE, encoding="utf-8")
    (tmp_path / "tags.csv").write_text("name,source,unit,meter_kinds\nF,s,t/h,dp\n")
    with pytest.raises(SiteFileError, match=r"meter_kinds.*made of .*meter_kind,"):
        load_site(tmp_path / "site.toml")
