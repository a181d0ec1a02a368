"""From a site file through a real store to pages: spans, freshness, the shift, and inert text."""

from __future__ import annotations

import html
import json
import re
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pandas as pd
import pytest

from monitor.commands.opening import opened
from monitor.errors import LostworkError
from monitor.reports.dead_state import dead_state_view
from monitor.reports.pages import page_span, pages_folder, write_pages
from monitor.reports.shift import shift_text, shift_view, write_shift_report

HOSTILE = "<b>bold</b><script>owned=1</script>"


def seconds(local: str) -> int:
    return int(pd.Timestamp(local, tz="Europe/Berlin").timestamp())


def span_of(site, local: str):
    (found,) = site.calendar.spans(seconds(local), seconds(local) + 3600)
    return found


@pytest.fixture(scope="session")
def late(reported):
    """The last late shift that the figures cover."""
    span = span_of(reported.site, "2026-01-15 15:00")
    return shift_view(reported.site, reported.store, span, reported.store.newest())


def everything(at, now):
    span = span_of(at.site, "2026-01-15 15:00")
    folder = pages_folder(at.site)
    report = write_shift_report(at.site, at.store, span, now, folder)
    return [*write_pages(at.site, at.store, now), report]


def test_a_page_for_the_site_each_machine_the_weather_and_the_shift(reported):
    written = everything(reported, reported.store.newest())
    assert [path.name for path in written] == [
        "index.html",
        "equipment-HDR62.html",
        "equipment-TG1.html",
        "equipment-LD62.html",
        "costs.html",
        "dead-state.html",
        "shift-2026-01-15-late.html",
    ]
    assert (pages_folder(reported.site) / "shift-latest.html").exists()


@pytest.mark.parametrize("behind", ["0 min", "220 D"])
def test_pages_made_at_or_before_the_newest_figure_are_not_stale(reported, behind):
    now = reported.store.newest() - pd.Timedelta(behind)
    for page in everything(reported, now):
        text = page.read_text(encoding="utf-8")
        assert "Newest figure 16 Jan 2026 00:45." in text
        assert "Stale" not in text


def test_pages_made_long_after_the_newest_figure_say_so(reported):
    now = reported.store.newest() + pd.Timedelta(hours=5)
    text = next(iter(write_pages(reported.site, reported.store, now))).read_text(encoding="utf-8")
    assert "Stale: the newest figure is from 16 Jan 2026 00:45, 5 h before" in text


def test_the_span_ends_with_the_newest_hour_and_starts_no_earlier_than_the_figures(reported):
    assert page_span(reported.site, reported.store) == (
        pd.Timestamp("2026-01-10T00:00Z"),
        pd.Timestamp("2026-01-16T00:00Z"),
    )


def test_a_site_without_figures_has_no_pages_and_says_what_to_do(make_plant, tmp_path):
    plant = make_plant(tmp_path / "young")
    with opened(plant.path) as at, pytest.raises(LostworkError, match="lostwork once"):
        page_span(at.site, at.store)


def test_a_shift_is_compared_with_the_same_shifts_of_the_days_before(reported, late):
    destroyed = next(line for line in late.ledger if line.key == "destroyed")
    before = next(line for line in late.previous_ledger if line.key == "destroyed")
    hourly = reported.gathered.ledger_trend(reported.gathered.start, reported.gathered.end)
    hours = hourly.index.hour
    shifts = hourly["destroyed"][(hours >= 14) & (hours < 22)]
    by_day = shifts.groupby(shifts.index.date).mean()
    assert destroyed.live_kw == pytest.approx(by_day.iloc[-1], rel=1e-9)
    assert before.live_kw == pytest.approx(by_day.iloc[:-1].mean(), rel=1e-9)
    assert destroyed.live_mwh == pytest.approx(destroyed.live_kw * 8 / 1000)


def test_the_summary_says_what_changed_what_it_costs_and_what_stands(late):
    plain = [sentence.replace("\u202f", " ").replace("\u00a0", " ") for sentence in late.summary]
    assert re.match(
        r"The site destroyed [\d.]+ MWh of exergy \([\d ]+ kW\), worth \d+ EUR: "
        r"\d+ % more than the 5 same shifts of the week before; "
        r"\d+ % more with the weather taken out\.$",
        plain[0],
    )
    assert re.match(r"Most of it in Turbine TG1: [\d.]+ kW, \d+ % of the site's\.$", plain[1])
    assert plain[2] == (
        "1 alarm is open, about 180 EUR a day when raised: Turbine TG1, isentropic efficiency."
    )


def test_an_alarm_of_this_shift_is_called_new(reported):
    (alarm,) = reported.store.open_alarms()
    raised = pd.Timestamp(alarm.raised, unit="s", tz="UTC").tz_convert("Europe/Berlin")
    span = span_of(reported.site, f"{raised:%Y-%m-%d %H}:00")
    view = shift_view(reported.site, reported.store, span, reported.store.newest())
    assert any(sentence.endswith("; new in this shift.") for sentence in view.summary)


def test_the_terminal_gets_plain_spaces_alarms_and_no_minus_nought(late):
    text = shift_text(late)
    assert text.startswith("Mill Race Works, late shift, 2026-01-15 14:00 to 22:00 Europe/Berlin\n")
    assert "- Turbine TG1: isentropic efficiency is 79." in text
    assert "180 EUR a day when raised." in text
    assert not set(text) & {"\u202f", "\u00a0"}
    assert not re.search(r"-0(\.0)?\s", text)


def test_an_open_alarm_tells_beside_its_message_how_the_figure_stands_now(reported, late):
    (alarm,) = late.alarms
    points = reported.store.drift_points("TG1", "eta_s_1", 0, 1 << 40)
    last = points[points["judged"].astype(bool)].iloc[-1]
    assert alarm.newest.replace("\u00a0", " ") == (
        f"in the newest judged hour {last['measured']:.1f} %, expected {last['expected']:.1f} %"
    )
    assert "In the newest judged hour" in shift_text(late)


def test_a_table_for_a_terminal_sets_thousands_apart_as_its_sentences_do(late):
    grown = [replace(line, live_kw=12345.6) for line in late.ledger]
    text = shift_text(replace(late, ledger=tuple(grown)))
    assert "12 346" in text
    assert "12,346" not in text


def test_a_shift_without_figures_says_where_to_look(reported):
    span = span_of(reported.site, "2026-02-01 15:00")
    view = shift_view(reported.site, reported.store, span, reported.store.newest())
    assert view.summary == (
        "There are no figures for this shift: look at the sources with `lostwork check`.",
    )
    assert all(np.isnan(line.live_kw) for line in view.ledger)
    assert "nan" not in shift_text(view)


def test_only_tags_with_poor_readings_are_worth_a_look(late, patchy):
    assert late.quality == ()
    span = span_of(patchy.site, "2026-01-10 15:00")
    view = shift_view(patchy.site, patchy.store, span, patchy.store.newest())
    (row,) = view.quality
    assert row.tag == "PT-0001"
    # Three hours of eight.
    assert row.bad == pytest.approx(3 / 8)
    assert "Look at the readings of PT-0001: many are bad or missing." in view.summary


def test_a_dead_state_without_its_barometer_is_told_on_its_page(patchy):
    view = dead_state_view(patchy.gathered)
    # Bad for three hours; what is averaged into a cell before and after may add one each.
    assert 2.5 <= view.held_hours <= 3.5
    held = view.ambient.index[view.ambient["held"]]
    assert {time.hour for time in held} <= {14, 15, 16, 17, 18}
    assert dict(patchy.gathered.equipment_rows()[0].flags)["ambient held or at reference"] > 0.1


class Elements(HTMLParser):
    """Names of the elements of a page, and the text of its scripts."""

    def __init__(self) -> None:
        super().__init__()
        self.names: list[str] = []
        self.scripts: list[str] = []
        self._inside = ""

    def handle_starttag(self, tag, attrs):
        self.names.append(tag)
        self._inside = tag if dict(attrs).get("type") == "application/json" else ""

    def handle_data(self, data):
        if self._inside == "script":
            self.scripts.append(data)
            self._inside = ""


def parsed(page):
    parser = Elements()
    parser.feed(page.read_text(encoding="utf-8"))
    return parser


def test_markup_in_a_site_file_reaches_no_page_as_markup(hostile, reported):
    """Site file, store, gatherers, page: the same elements as with plain names."""
    newest = hostile.store.newest()
    for bad, good in zip(everything(hostile, newest), everything(reported, newest), strict=True):
        text, shown = bad.read_text(encoding="utf-8"), parsed(bad)
        assert HOSTILE not in text
        assert "<script>owned" not in text
        assert html.escape(HOSTILE, quote=False) in text
        # A name is bold beside an alarm in both; what the hostile name adds would show here.
        assert shown.names == parsed(good).names, bad.name
        assert all(json.loads(script) for script in shown.scripts)


def test_hostile_names_are_whole_in_the_figures_of_a_page(hostile):
    page = next(iter(write_pages(hostile.site, hostile.store, hostile.store.newest())))
    flows = next(json.loads(s) for s in parsed(page).scripts if "sankey" in s)["figure"]
    labels = " ".join(flows["data"][0]["node"]["label"]).replace("<br>", "")
    # Plotly shows entities as the characters they stand for, and never as markup.
    assert "&lt;b&gt;bold" in labels
    assert "<b>" not in labels
