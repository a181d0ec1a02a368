"""Ten faults that are planted in a copy of the demo site; each is named, with its reason.

Every kind is planted in more than one place: other instruments, other media, other sources. No
expectation is tuned to one tag: the tags were chosen so that physics can tell (a balance or a
neighbour closes on them), and the list of what it cannot tell is a test too.
"""

from __future__ import annotations

import json

import pandas as pd
import pytest
from faulty_site import FaultySite, times
from typer.testing import CliRunner

from monitor.checking import Cause, Checked, check
from monitor.cli import app
from monitor.site.load import load_site

DAY_BEFORE_LAST = pd.Timestamp("2026-02-26T00:00Z")


def look_at(site: FaultySite) -> Checked:
    return check(load_site(site.path))


def first(checked: Checked, *subjects: str) -> Cause:
    """The first cause, which must be about one of these."""
    assert checked.causes, [line for line in checked.lines if line.verdict != "ok"]
    assert checked.causes[0].subject in subjects, checked.causes
    return checked.causes[0]


def verdict_of(checked: Checked, kind: str, subject: str) -> str:
    (line,) = (x for x in checked.lines if (x.kind, x.subject) == (kind, subject))
    return line.verdict


def test_nothing_is_said_against_a_sound_site(sound):
    assert sound.causes == ()
    assert [line for line in sound.lines if line.verdict != "ok"] == []


# 1. a unit that is not the instrument's


@pytest.mark.parametrize(
    ("tag", "stated", "true"),
    [
        ("TT-6201", "degF", "degC"),  # steam would be wet or water
        ("PT-0401", "psi(g)", "bar(g)"),
        ("JT-4201", "kW", "MW"),  # the turbine would make nothing
        ("TT-4302", "degF", "degC"),  # cooling water would leave colder than it came
    ],
)
def test_a_wrong_unit_is_named_with_the_right_one(faulty, tag, stated, true):
    faulty.list_tag(tag, unit=stated)
    cause = first(look_at(faulty), tag)
    assert f"looks like {true}, where the site file says {stated}" in cause.reason
    assert (cause.verdict, cause.guess) == ("wrong", True)


# 2. the tags of a stream's pressure and temperature crossed


@pytest.mark.parametrize(
    ("pressure", "temperature"),
    [("PT-1201", "TT-1201"), ("PT-4103", "TT-4103"), ("PT-3004", "TT-3004")],
)
def test_crossed_pressure_and_temperature_are_named_together(faulty, pressure, temperature):
    faulty.cross(pressure, temperature)
    cause = first(look_at(faulty), pressure, temperature)
    assert f"{pressure} and {temperature} were crossed" in cause.reason


# 3. a tag that died


@pytest.mark.parametrize("tag", ["FT-4101", "TT-4301", "PT-3003"])
def test_a_tag_that_fell_silent_is_dead(faulty, tag):
    faulty.write(tag, lambda values: values[times(values) < pd.Timestamp("2026-02-26T15:00Z")])
    checked = look_at(faulty)
    cause = first(checked, tag)
    assert "dead: no usable reading in the last 9.1 h" in cause.reason
    assert cause.explains  # the balances that it has a part in
    assert len(checked.causes) == 1


# 4. a tag that stands still


@pytest.mark.parametrize("tag", ["TT-1001", "FT-4303", "PT-6001"])
def test_a_tag_that_stands_still_is_stuck(faulty, tag):
    faulty.write(tag, lambda values: values * 0 + values.iloc[-1])
    checked = look_at(faulty)
    assert "stuck: it stood still" in first(checked, tag).reason
    assert verdict_of(checked, "tag", tag) == "wrong"


@pytest.mark.parametrize("hours", [3, 6])
def test_a_source_that_repeats_its_last_values_is_frozen_after_the_stuck_time(faulty, hours):
    tags = faulty.tags()
    own = tags.loc[tags["source"] == "utilities", "name"]
    since = pd.Timestamp("2026-02-27T00:00Z") - pd.Timedelta(hours=hours)

    def freeze(values):
        held = values.copy()
        held[times(values) >= since] = values[times(values) < since].iloc[-1]
        return held

    for tag in own:
        faulty.write(tag, freeze)
    checked = look_at(faulty)
    reasons = {cause.subject: cause.reason for cause in checked.causes}
    if hours == 3:
        assert "utilities" not in reasons
    else:
        assert reasons["utilities"].startswith("frozen: all its tags repeat their last values")
        assert "since 6" in reasons["utilities"]
        assert verdict_of(checked, "source", "utilities") == "wrong"
        assert not any(reason.startswith("stuck") for reason in reasons.values())


# 5. a source whose times are read in another zone


@pytest.mark.parametrize(("zone", "hours"), [("UTC", "1 h too late"), ("Asia/Kolkata", "4.5 h")])
def test_a_wrong_time_zone_is_told_by_what_moves_together(faulty, zone, hours):
    text = faulty.path.read_text()
    head, tail = text.split('id = "utilities"')
    tail = tail.replace('time_zone = "Europe/Berlin"', f'time_zone = "{zone}"', 1)
    faulty.path.write_text(f'{head}id = "utilities"{tail}')
    cause = first(look_at(faulty), "utilities")
    assert hours in cause.reason
    assert "time_zone = 'Europe/Berlin' would set it right" in cause.reason


def test_a_database_with_local_stamps_is_told_too(faulty):
    faulty.shift("historian", pd.Timedelta(hours=1))
    assert "1 h too late" in first(look_at(faulty), "historian").reason


# 6. gauge pressure taken as absolute


@pytest.mark.parametrize("tag", ["PT-4103", "PT-3003", "PT-1201", "PT-1002"])
def test_gauge_pressure_taken_as_absolute_is_named(faulty, tag):
    faulty.list_tag(tag, unit="bar(a)")
    cause = first(look_at(faulty), tag)
    assert "looks like gauge pressure taken as absolute" in cause.reason


def test_absolute_pressure_taken_as_gauge_is_named(faulty):
    faulty.list_tag("PT-4202", unit="kPa(g)")
    reason = first(look_at(faulty), "PT-4202").reason
    assert "looks like absolute pressure taken as gauge: its unit is kPa(a)" in reason


# 7. one instrument under two names


@pytest.mark.parametrize(
    ("tag", "other"), [("FT-2001", "FT-1001"), ("TT-4302", "TT-4301"), ("PT-6001", "PT-3003")]
)
def test_a_tag_that_reads_another_ones_column_is_duplicated(faulty, tag, other):
    faulty.list_tag(tag, source_name=faulty.asked(other))
    cause = first(look_at(faulty), tag)
    assert cause.reason.startswith("duplicated: it reads the historian's")
    assert other in cause.others


def test_a_column_copied_under_another_name_is_duplicated(faulty):
    series = faulty.values_of("FT-1002")
    faulty.write("FT-2002", lambda values: series.reindex(times(values)).set_axis(values.index))
    cause = first(look_at(faulty), "FT-2002", "FT-1002")
    assert "the same readings to the last digit" in cause.reason


# 8. a flow in another unit


@pytest.mark.parametrize(
    ("tag", "stated"),
    [("FT-1001", "kg/s"), ("FT-3001", "klb/h"), ("FT-4301", "kg/s"), ("FT-1003", "kg/h")],
)
def test_a_flow_in_the_wrong_unit_is_named_with_the_balance_that_it_would_close(
    faulty, tag, stated
):
    faulty.list_tag(tag, unit=stated)
    cause = first(look_at(faulty), tag)
    assert f"looks like t/h, where the site file says {stated}" in cause.reason
    assert any(kind == "equipment" for kind, _ in cause.explains)


# 9. a source that lags a day


@pytest.mark.parametrize("source", ["dcs", "utilities", "historian"])
def test_a_source_that_lags_a_day_is_one_line_and_spoils_no_other(faulty, source):
    faulty.cut(source, DAY_BEFORE_LAST)
    checked = look_at(faulty)
    cause = first(checked, source)
    assert "it lags 24 h behind the others" in cause.reason
    assert [line.subject for line in checked.lines if line.verdict != "ok"] == [source]


# 10. a column that cannot be read


@pytest.mark.parametrize(("tag", "text"), [("FT-4102", "#VALUE!"), ("TT-7201", "n/v")])
def test_a_column_that_cannot_be_read_is_named_with_what_it_holds(faulty, tag, text):
    faulty.write(tag, lambda values: values.map(lambda _: text))
    cause = first(look_at(faulty), tag)
    assert "unreadable: its cells hold no numbers" in cause.reason


def test_a_missing_decimal_comma_is_named_as_what_it_is(faulty):
    faulty.edit('decimal = ","\n', "")
    (cause,) = look_at(faulty).causes
    assert (cause.kind, cause.subject) == ("source", "utilities")
    assert "seems to be written with decimal = ',', not '.'" in cause.reason


# the command


def test_the_command_prints_causes_first_things_first_and_in_json(faulty):
    faulty.list_tag("FT-1001", unit="kg/s")
    told = CliRunner().invoke(app, ["check", str(faulty.path)])
    assert told.exit_code == 1
    after = told.stdout.split("look here first:\n")[1]
    assert after.startswith("1. tag FT-1001: looks like t/h, where the site file says kg/s")
    as_json = CliRunner().invoke(app, ["check", str(faulty.path), "--json"])
    assert as_json.exit_code == 1
    (cause,) = json.loads(as_json.stdout)["causes"]
    assert (cause["kind"], cause["subject"], cause["guess"]) == ("tag", "FT-1001", True)
