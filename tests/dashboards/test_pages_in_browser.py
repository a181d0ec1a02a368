"""Every page as a browser shows and prints it: drawn, quiet, whole, and without a network."""

from __future__ import annotations

import re

import mill_flows
import page_views
import pytest

import dashboards

pytestmark = pytest.mark.browser

PAGES = ("overview", "equipment", "costs", "dead state", "shift")
CHARTS = {"overview": 3, "equipment": 4, "costs": 1, "dead state": 5, "shift": 1}
PAPER_WIDTH = 700
SCREEN_HEIGHT = 900


@pytest.fixture(scope="module")
def full_looks(browser, full_pages):
    return {name: browser.look(page) for name, page in full_pages.items()}


@pytest.fixture(scope="module")
def empty_looks(browser, empty_pages):
    return {name: browser.look(page) for name, page in empty_pages.items()}


@pytest.fixture(scope="module")
def hostile_looks(browser, hostile_pages):
    return {name: browser.look(page) for name, page in hostile_pages.items()}


@pytest.mark.parametrize("name", PAGES)
def test_a_full_page_draws_every_figure_and_says_nothing_on_the_console(full_looks, name):
    look = full_looks[name]
    charts = look.probe["charts"]
    assert look.console == []
    assert len(charts) == CHARTS[name]
    assert all(chart["drawn"] and chart["shapes"] > 0 for chart in charts), charts
    assert all(chart["label"] for chart in charts)


@pytest.mark.parametrize("name", PAGES)
def test_a_page_asks_only_for_the_files_beside_it(full_looks, full_pages, name):
    folder = full_pages[name].parent.as_uri()
    look = full_looks[name]
    names = {"plotly.min.js", "pages.js", "style.css", "favicon.svg", "probe.js"}
    assert set(look.probe["files"]) == {f"{folder}/{file}" for file in names}
    assert look.network == []


def test_the_watch_on_the_network_sees_a_page_that_asks_for_more(browser, tmp_path):
    page = tmp_path / "asks.html"
    image = '<img src="http://elsewhere.invalid/a.png">'
    page.write_text(f"<!doctype html><head></head><body>{image}</body>", encoding="utf-8")
    assert "http://elsewhere.invalid/a.png" in browser.look(page).network


@pytest.mark.parametrize("name", PAGES)
def test_a_page_fits_a_wide_screen_without_scrolling_sideways(full_looks, name):
    probe = full_looks[name].probe
    assert (probe["client"], probe["width"]) == (1280, 1280)


@pytest.mark.parametrize("name", PAGES)
def test_a_page_fits_a_narrow_screen_without_scrolling_sideways(browser, full_pages, name):
    probe = browser.look(full_pages[name], 600).probe
    assert (probe["client"], probe["width"]) == (600, 600)


@pytest.mark.parametrize("name", PAGES)
def test_no_label_of_a_figure_is_cut_off(full_looks, name):
    assert [chart["cut"] for chart in full_looks[name].probe["charts"] if chart["cut"]] == []


def test_labels_of_the_flow_diagram_do_not_overlap(full_looks):
    flows = next(c for c in full_looks["overview"].probe["charts"] if c["id"] == "flows")
    assert any("Condenser" in text for text in flows["text"])
    assert flows["crossings"] == 0


def test_labels_of_a_whole_mills_flow_diagram_do_not_overlap(browser, tmp_path):
    dashboards.write_assets(tmp_path)
    view = page_views.overview(flows=mill_flows.mill_flows(), node_names=mill_flows.NODE_NAMES)
    look = browser.look(dashboards.write_overview(view, tmp_path))
    flows = next(c for c in look.probe["charts"] if c["id"] == "flows")
    shown = " ".join(flows["text"])
    # A line's break is a tspan's end, so words of two lines join.
    for words in ("Bark boiler", "Gas boiler", "turbine TG1", "turbine TG2", "Deaerator"):
        assert words in shown
    assert (flows["crossings"], flows["cut"]) == (0, [])
    assert look.console == []


@pytest.mark.parametrize("name", PAGES)
def test_a_page_says_its_language_and_title_and_lets_the_keyboard_skip_the_links(full_pages, name):
    text = full_pages[name].read_text(encoding="utf-8")
    assert '<html lang="en">' in text
    title = re.search(r"<title>([^<]+)</title>", text)[1]
    assert title.endswith(" · Kivilahti board mill")
    assert len(title) > len(" · Kivilahti board mill")
    first_link = re.search(r"<a [^>]*>", text)[0]
    assert first_link == '<a class="skip" href="#content">'
    assert '<main id="content">' in text


def test_the_first_screenful_of_the_overview_holds_the_tiles_the_alarms_and_the_ledger(
    browser, tmp_path
):
    dashboards.write_assets(tmp_path)
    many = page_views.overview(alarms=page_views.alarms() * 4)
    page = dashboards.write_overview(many, tmp_path)
    probe = browser.look(page).probe
    assert 0 < probe["ledgerEnds"] <= SCREEN_HEIGHT
    assert "9 more below" in probe["text"]


@pytest.mark.parametrize("name", PAGES)
def test_figures_take_the_width_of_the_paper_and_come_back(full_looks, name):
    probe = full_looks[name].probe
    assert all(width == PAPER_WIDTH for width in probe["onPaper"])
    assert probe["again"] == probe["onScreen"]
    assert all(width > PAPER_WIDTH for width in probe["onScreen"])


@pytest.mark.parametrize("name", PAGES)
def test_an_empty_page_stands_without_an_error(empty_looks, name):
    look = empty_looks[name]
    assert look.console == []
    assert all(chart["drawn"] for chart in look.probe["charts"])
    assert "nan" not in look.probe["text"].lower().split()
    assert "None" not in look.probe["text"].split()


def test_one_single_value_is_drawn_as_a_dot(empty_looks):
    charts = empty_looks["equipment"].probe["charts"]
    assert [chart["id"] for chart in charts] == ["trend-0"]
    assert charts[0]["shapes"] >= 1


@pytest.mark.parametrize("name", PAGES)
def test_hostile_text_stays_text(hostile_looks, full_looks, name):
    look, plain = hostile_looks[name], full_looks[name]
    assert look.console == []
    assert look.probe["owned"] == "undefined"
    assert look.probe["images"] == 0
    assert look.probe["scripts"] == plain.probe["scripts"]
    assert len(look.probe["files"]) == len(plain.probe["files"])
    assert look.network == []
    assert "</script><script>owned=1</script>" in look.probe["text"]
    assert look.probe["width"] <= 1280


def test_hostile_text_is_shown_letter_by_letter_inside_figures(hostile_looks):
    shown = [
        text
        for name in ("overview", "equipment")
        for chart in hostile_looks[name].probe["charts"]
        for text in chart["text"]
    ]
    # Plotly would take <b> for bold type and show nothing of it.
    assert any(text.startswith("<b></script><script>owned=1") for text in shown)
    assert not any("&lt;" in text for text in shown)


def test_times_reach_the_figure_on_the_local_clock(full_looks):
    trend = next(c for c in full_looks["equipment"].probe["charts"] if c["id"] == "trend-1")
    index = page_views.power_trend().data.index.tz_localize(None).as_unit("ms")
    assert [trend["first"][-1], trend["last"][-1]] == index.asi8[[0, -1]].tolist()


@pytest.mark.parametrize(
    "view",
    [page_views.shift(), page_views.crowded_shift(), page_views.empty_shift()],
    ids=["usual", "crowded", "empty"],
)
def test_the_shift_reports_summary_fits_one_page_of_paper(browser, tmp_path, view):
    dashboards.write_assets(tmp_path)
    page = dashboards.write_shift(view, tmp_path)
    assert browser.paper_pages(page, only_first_page=True) == 1
    # The details start on a page of their own.
    assert browser.paper_pages(page) >= 2


@pytest.mark.parametrize("name", ["overview", "equipment", "dead state"])
def test_a_page_prints_on_a_handful_of_sheets(browser, full_pages, name):
    assert 1 <= browser.paper_pages(full_pages[name]) <= 6
