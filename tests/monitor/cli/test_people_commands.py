"""alarms, event, baseline, report, pages: what people read and record."""

from __future__ import annotations

import re

import pytest


@pytest.fixture
def alarm(computed, lostwork):
    """The number of the turbine's open alarm."""
    (found,) = lostwork("alarms", "list", computed.path, "--json").json()
    return found["alarm_id"]


def state_of(lostwork, plant, number):
    listed = lostwork("alarms", "list", plant.path, "--all", "--json").json()
    return next(a for a in listed if a["alarm_id"] == number)


def test_the_turbine_that_lost_three_points_has_the_only_alarm(computed, lostwork):
    (found,) = lostwork("alarms", "list", computed.path, "--json").json()
    assert (found["subject"], found["figure"], found["state"]) == (
        "TG1",
        "eta_s_1",
        "unacknowledged",
    )
    # Worse from the fifth day on, and the alarm waits three hours at least.
    assert "2026-01-14T03" <= found["raised"] < "2026-01-15"
    printed = lostwork("alarms", "list", computed.path)
    assert "Turbine TG1: isentropic efficiency" in printed.out


def test_an_acknowledged_alarm_stays_open_and_remembers_who(computed, lostwork, alarm):
    ran = lostwork(
        "alarms", "acknowledge", computed.path, alarm, "--by", "M. Reyes", "--note", "wash planned"
    )
    assert ran.code == 0, ran.err
    assert f"alarm {alarm} of TG1 eta_s_1 is acknowledged" in ran.out
    assert state_of(lostwork, computed, alarm)["acknowledged"] is not None
    again = lostwork("alarms", "acknowledge", computed.path, alarm, "--by", "M. Reyes")
    assert again.code == 2
    assert "cannot acknowledge an alarm that is acknowledged" in again.err


def test_a_shelved_alarm_comes_back_when_it_is_unshelved(computed, lostwork, alarm):
    ran = lostwork("alarms", "shelve", computed.path, alarm, "--for", "8h", "--by", "shift B",
                   "--note", "known")  # fmt: skip
    assert re.search(r"is shelved until 20\d\d-\d\d-\d\d \d\d:\d\d[+-]", ran.out)
    found = state_of(lostwork, computed, alarm)
    assert found["state"] == "shelved"
    assert found["shelved_until"] is not None
    back = lostwork("alarms", "unshelve", computed.path, alarm, "--by", "shift C", "--note", "")
    assert "is unacknowledged" in back.out


def test_what_people_did_outlives_judging_again(computed, lostwork, alarm):
    lostwork("alarms", "acknowledge", computed.path, alarm, "--by", "shift B")
    lostwork("backfill", computed.path, "--from", "2026-01-14", "--to", "2026-01-16T00:00Z")
    assert state_of(lostwork, computed, alarm)["state"] == "acknowledged"


@pytest.mark.parametrize("duration", ["eight", "0h", "8 bar(a)", ""])
def test_a_duration_that_is_none_is_refused(computed, lostwork, alarm, duration):
    ran = lostwork("alarms", "shelve", computed.path, alarm, "--for", duration)
    assert ran.code == 2
    assert "is not a duration" in ran.err
    assert state_of(lostwork, computed, alarm)["state"] == "unacknowledged"


def test_an_alarm_that_is_not_there_is_named(computed, lostwork):
    ran = lostwork("alarms", "acknowledge", computed.path, 999)
    assert ran.code == 2
    assert "no alarm 999" in ran.err
    assert "'lostwork alarms list " in ran.err


def test_a_wash_ends_the_alarm_and_starts_the_baseline_anew(computed, lostwork, alarm):
    ran = lostwork("event", "add", computed.path, "TG1", "wash", "--at", "2026-01-15 18:00",
                   "--note", "blades", "--by", "M. Reyes")  # fmt: skip
    assert ran.code == 0, ran.err
    assert "baselines start anew" in ran.out
    assert lostwork("alarms", "list", computed.path).out == "no open alarms\n" or (
        state_of(lostwork, computed, alarm)["cleared"] is not None
    )
    (event,) = lostwork("event", "list", computed.path, "--json").json()
    assert event["time"] == "2026-01-15T17:00:00Z"
    assert (event["subject"], event["kind"], event["who"]) == ("TG1", "wash", "M. Reyes")
    assert "blades" in lostwork("event", "list", computed.path).out
    baselines = lostwork("baseline", "list", computed.path)
    turbine = next(x for x in baselines.out.splitlines() if x.startswith("TG1"))
    assert "no baseline yet" in turbine


def test_a_note_about_the_whole_site_restarts_nothing(computed, lostwork):
    ran = lostwork("event", "add", computed.path, "site", "note", "--note", "audit", "--by", "me")
    assert ran.code == 0
    assert "anew" not in ran.out
    assert len(lostwork("alarms", "list", computed.path, "--json").json()) == 1


@pytest.mark.parametrize(
    ("subject", "kind", "said"),
    [
        ("TG9", "wash", "did you mean 'TG1'?"),
        ("TG1", "washing", "is not a kind of event; write wash, overhaul"),
    ],
)
def test_an_event_of_what_is_not_there_is_refused(computed, lostwork, subject, kind, said):
    ran = lostwork("event", "add", computed.path, subject, kind)
    assert ran.code == 2
    assert said in ran.err
    assert lostwork("event", "list", computed.path).out == "no events\n"


def test_baselines_are_listed_with_their_reference_period(computed, lostwork):
    listed = lostwork("baseline", "list", computed.path, "--json").json()
    turbine = next(b for b in listed if b["subject"] == "TG1")
    assert turbine["reference_start"].startswith("2026-01-10T")
    assert turbine["points"] >= 24
    assert turbine["retired"] is None


def test_fitting_a_baseline_again_retires_the_one_before(computed, lostwork):
    ran = lostwork("baseline", "fit", computed.path, "TG1", "eta_s_1", "--json")
    assert ran.code == 0, ran.err
    assert ran.json()[0]["state"] == "drifting"
    both = lostwork("baseline", "list", computed.path, "--all", "--json").json()
    turbine = [b for b in both if b["subject"] == "TG1"]
    assert [b["retired"] is None for b in turbine] == [False, True]
    assert turbine[0]["coefficients"] == turbine[1]["coefficients"]
    printed = lostwork("baseline", "fit", computed.path, "TG1")
    assert "eta_s_1" in printed.out


def test_fitting_what_is_not_judged_is_refused(computed, lostwork):
    ran = lostwork("baseline", "fit", computed.path, "LD62")
    assert ran.code == 2
    assert "no judged equipment 'LD62'" in ran.err


def test_a_figure_without_enough_hours_gets_no_baseline_and_says_why(plant, lostwork):
    lostwork("backfill", plant.path, "--from", "2026-01-10T00:00Z", "--to", "2026-01-10T20:00Z")
    ran = lostwork("baseline", "fit", plant.path, "TG1", "eta_s_1")
    assert ran.code == 1
    assert "judged hours of the 24 needed" in ran.out


def test_the_latest_shift_report_is_of_the_last_shift_that_is_over(computed, lostwork):
    ran = lostwork("report", computed.path, "--shift", "latest", "--json", "--no-write")
    assert ran.code == 0, ran.err
    # Figures end at 01:00 local time: the late shift ended at 22:00, the night shift goes on.
    assert (ran.json()["shift"], ran.json()["date"]) == ("late", "2026-01-15")
    assert not (computed.folder / "pages").exists()
    lines = {line["key"]: line["live_kw"] for line in ran.json()["ledger"]}
    spent = sum(lines[k] for k in ("used", "lost", "destroyed", "stored", "imbalance"))
    assert lines["supplied"] == pytest.approx(spent, rel=1e-9)


def test_a_shift_report_is_printed_and_written(computed, lostwork):
    ran = lostwork("report", computed.path, "--shift", "night", "--date", "2026-01-13", "--write")
    assert ran.code == 0, ran.err
    assert "night shift, 2026-01-13 22:00 to 06:00" in ran.out
    (page,) = (computed.folder / "pages").glob("shift-2026-01-13-night.html")
    assert "Mill Race Works" in page.read_text()
    assert str(page) in ran.err


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (("--shift", "noon"), "it has early, late, night, or write latest"),
        (("--date", "soon"), "is not a day; write 2026-03-01"),
    ],
)
def test_a_shift_that_is_none_is_refused(computed, lostwork, options, said):
    ran = lostwork("report", computed.path, *options)
    assert ran.code == 2
    assert said in ran.err


def test_pages_are_written_and_the_overview_named(computed, lostwork):
    ran = lostwork("pages", computed.path)
    assert ran.code == 0, ran.err
    assert ran.out.strip() == str(computed.folder / "pages" / "index.html")
    names = {p.name for p in (computed.folder / "pages").glob("*.html")}
    made = {"equipment-TG1.html", "equipment-LD62.html", "costs.html", "dead-state.html"}
    assert made | {"index.html"} <= names
    listed = lostwork("pages", computed.path, "--json").json()["pages"]
    assert len(listed) == 4 + 3
