"""Pages as files: names, whole or not at all, small enough, and nothing in them from outside."""

from __future__ import annotations

import ast
import errno
import os
import re
import subprocess
import sys
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import page_views
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import dashboards
from dashboards import ground, shift
from dashboards.files import equipment_file, shift_file

PACKAGE = Path(dashboards.__file__).parent


class Tags(HTMLParser):
    """The tags of a page in order, and the text of its headings."""

    def __init__(self) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.heading = ""
        self._inside = False

    def handle_starttag(self, tag, attrs):
        del attrs
        self.tags.append(tag)
        self._inside = tag == "h1"

    def handle_endtag(self, tag):
        self._inside = self._inside and tag != "h1"

    def handle_data(self, data):
        if self._inside:
            self.heading += data


def read(page: Path) -> Tags:
    parser = Tags()
    parser.feed(page.read_text(encoding="utf-8"))
    return parser


def test_every_page_has_its_name(full_pages):
    assert {name: page.name for name, page in full_pages.items()} == {
        "overview": "index.html",
        "equipment": "equipment-TG-1.html",
        "costs": "costs.html",
        "dead state": "dead-state.html",
        "shift": "shift-2026-03-02-night.html",
    }


@pytest.mark.parametrize("identifier", ["../x", "a/b", "", "a b", "é", "a.html", "x\n", "a" * 101])
def test_an_id_that_cannot_name_a_file_is_refused(tmp_path, identifier):
    view = page_views.equipment()
    with pytest.raises(dashboards.PageError, match="cannot name a page"):
        dashboards.write_equipment(replace(view, row=replace(view.row, id=identifier)), tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_an_id_in_the_navigation_is_checked_too(tmp_path):
    context = page_views.context(equipment=(("../../evil", "Evil"),))
    with pytest.raises(dashboards.PageError, match="evil"):
        dashboards.write_overview(page_views.overview(context=context), tmp_path)


@given(st.text(max_size=80))
def test_whatever_a_shift_is_called_its_file_stays_in_the_folder(name):
    try:
        file = shift_file(pd.Timestamp("2026-03-02 22:00", tz="Europe/Helsinki"), name)
    except dashboards.PageError as error:
        assert "cannot name a file" in str(error)  # noqa: PT017 - either outcome is right
    else:
        assert re.fullmatch(r"shift-2026-03-02-[a-z0-9]+(-[a-z0-9]+)*\.html", file)


def test_a_shift_is_filed_under_its_local_start_date():
    start = pd.Timestamp("2026-03-02 23:30", tz="UTC").tz_convert("Europe/Helsinki")
    assert shift_file(start, "Früh 1") == "shift-2026-03-03-fruh-1.html"


def test_the_latest_shift_is_a_copy_of_the_newest_report(tmp_path):
    newest = dashboards.write_shift(page_views.shift(), tmp_path)
    latest = tmp_path / "shift-latest.html"
    assert latest.read_bytes() == newest.read_bytes()

    day = pd.Timedelta(days=1)
    old = page_views.shift(
        context=page_views.context(
            start=page_views.END - pd.Timedelta(hours=8) - day, end=page_views.END - day
        )
    )
    older = dashboards.write_shift(old, tmp_path)
    assert older.read_bytes() != newest.read_bytes()
    assert latest.read_bytes() == newest.read_bytes()

    again = dashboards.write_shift(page_views.shift(summary=("Corrected.",)), tmp_path)
    assert latest.read_bytes() == again.read_bytes()


@pytest.mark.parametrize(
    "junk", [b"", b"\xff\xfe", b'<meta name="shift-start" content="not a time at all">']
)
def test_a_latest_report_that_cannot_be_read_as_ours_is_replaced(tmp_path, junk):
    (tmp_path / "shift-latest.html").write_bytes(junk)
    page = dashboards.write_shift(page_views.shift(), tmp_path)
    assert (tmp_path / "shift-latest.html").read_bytes() == page.read_bytes()


def _disk_full(*_args: object) -> None:
    raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))


def test_a_full_disk_leaves_the_old_page_and_no_part_of_the_new_one(tmp_path, monkeypatch):
    page = dashboards.write_overview(page_views.empty_overview(), tmp_path)
    before = page.read_bytes()
    monkeypatch.setattr(os, "fsync", _disk_full)
    with pytest.raises(dashboards.PageError, match=r"cannot write index\.html .*No space left"):
        dashboards.write_overview(page_views.overview(), tmp_path)
    assert page.read_bytes() == before
    assert [file.name for file in tmp_path.iterdir()] == ["index.html"]


def test_an_interrupted_write_leaves_the_old_page_and_no_part_of_the_new_one(tmp_path, monkeypatch):
    page = dashboards.write_overview(page_views.empty_overview(), tmp_path)
    before = page.read_bytes()

    def interrupted(_handle: int) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fsync", interrupted)
    with pytest.raises(KeyboardInterrupt):
        dashboards.write_overview(page_views.overview(), tmp_path)
    assert page.read_bytes() == before
    assert [file.name for file in tmp_path.iterdir()] == ["index.html"]


def test_a_folder_that_is_a_file_is_said_so(tmp_path):
    (tmp_path / "pages").write_text("not a folder", encoding="utf-8")
    with pytest.raises(dashboards.PageError, match=r"cannot write index\.html in .*pages"):
        dashboards.write_overview(page_views.empty_overview(), tmp_path / "pages")
    with pytest.raises(dashboards.PageError, match=r"plotly\.min\.js"):
        dashboards.write_assets(tmp_path / "pages")


def test_a_page_that_cannot_replace_what_is_there_is_said_so(tmp_path):
    (tmp_path / "index.html" / "inside").mkdir(parents=True)
    with pytest.raises(dashboards.PageError, match=r"cannot write index\.html"):
        dashboards.write_overview(page_views.empty_overview(), tmp_path)
    assert [file.name for file in tmp_path.iterdir()] == ["index.html"]


def test_pages_may_be_read_by_others(full_pages):
    assert all(page.stat().st_mode & 0o777 == 0o644 for page in full_pages.values())


def test_assets_are_written_once_and_again_only_when_they_differ(tmp_path):
    names = {"plotly.min.js", "pages.js", "style.css", "favicon.svg"}
    assert {path.name for path in dashboards.write_assets(tmp_path)} == names
    assert dashboards.write_assets(tmp_path) == ()
    (tmp_path / "style.css").write_text("body {}", encoding="utf-8")
    assert [path.name for path in dashboards.write_assets(tmp_path)] == ["style.css"]


def test_pages_and_style_name_nothing_outside_their_folder(full_pages):
    for page in full_pages.values():
        text = page.read_text(encoding="utf-8")
        assert not re.search(r"https?:|(?:src|href)=\"(?:/|[a-z]+:)", text)
    style = (full_pages["overview"].parent / "style.css").read_text(encoding="utf-8")
    assert not re.search(r"url\(|@import|@font-face", style)


def test_every_link_between_pages_leads_to_a_page_that_is_made(full_pages):
    folder = full_pages["overview"].parent
    made = {name.name for name in folder.iterdir()}
    made |= {equipment_file(identifier) for identifier, _, _ in page_views.MACHINES}
    for page in full_pages.values():
        links = re.findall(r'href="([^"#]+)"', page.read_text(encoding="utf-8"))
        assert set(links) <= made


def test_every_page_carries_the_policy_the_caution_and_how_to_read_it(full_pages):
    for page in full_pages.values():
        text = page.read_text(encoding="utf-8")
        assert "default-src 'none'" in text
        assert "connect-src 'none'" in text
        assert (
            "A monitoring aid, not a protection system. Work on pressure equipment belongs to"
            in (text)
        )
        assert "How to read two dead states" in text
        assert "Times are local, Europe/Helsinki" in text
        assert "lostwork 0.1.0" in text


def test_every_table_has_a_caption_and_scoped_heads(full_pages):
    for page in full_pages.values():
        text = page.read_text(encoding="utf-8")
        tables = re.findall(r"<table.*?</table>", text, re.DOTALL)
        assert tables
        for table in tables:
            assert "<caption" in table
            assert len(re.findall(r"<th\b", table)) == len(re.findall(r"<th\b[^>]*scope=", table))


def test_sixty_days_of_five_minute_trends_stay_below_two_megabytes(tmp_path):
    long = page_views.trend(17_280, 5)
    view = page_views.equipment(trends=(long,) * 8, residuals=(page_views.residual(),) * 4)
    page = dashboards.write_equipment(view, tmp_path)
    assert page.stat().st_size < 2_000_000


def test_a_page_with_old_figures_says_so(tmp_path):
    made = page_views.END
    for hours, word in (
        (3, "Newest figure"),
        (4, "Stale: the newest figure"),
        (None, "No figures"),
    ):
        newest = None if hours is None else made - pd.Timedelta(hours=hours)
        context = page_views.context(made=made, newest=newest)
        page = dashboards.write_overview(page_views.overview(context=context), tmp_path)
        assert word in page.read_text(encoding="utf-8")


@pytest.mark.parametrize("ahead", [0, 5, 60 * 24 * 220])
def test_a_page_made_at_or_before_the_newest_figure_stands_and_is_not_stale(tmp_path, ahead):
    newest = page_views.END
    context = page_views.context(made=newest - pd.Timedelta(minutes=ahead), newest=newest)
    text = dashboards.write_overview(page_views.overview(context=context), tmp_path).read_text(
        encoding="utf-8"
    )
    assert "Newest figure 3 Mar 2026 06:00." in text
    assert "Stale" not in text
    assert "later" not in text.split("<footer>")[0]


def test_an_alarm_says_its_name_and_its_cost_once(tmp_path):
    alarm = page_views.alarms()[0]
    page = dashboards.write_overview(page_views.overview(alarms=(alarm,)), tmp_path)
    item = re.search(r'<ul class="alarms">(.*?)</ul>', page.read_text(encoding="utf-8"), re.DOTALL)
    assert item[1].count(alarm.equipment_name) == 1
    assert len(re.findall(r"EUR", item[1])) == 1


def test_what_holds_for_all_equipment_is_said_once_and_the_rest_where_it_differs():
    row = page_views.equipment().row
    rows = (
        replace(row, flags=(("ambient below freezing", 0.24), ("from a balance", 1.0))),
        replace(row, flags=(("ambient below freezing", 0.24), ("uncertain reading", 0.031))),
        replace(row, flags=(("ambient below freezing", 0.24),)),
    )
    shared = ground.shared_ground(rows)
    assert shared == {"ambient below freezing": "ambient below freezing 24\u00a0%"}
    assert [ground.ground(row, shared) for row in rows] == [
        "from a balance",
        "uncertain reading 3\u00a0%",
        "nothing else",
    ]
    assert ground.ground(replace(row, flags=())) == "good readings"
    assert ground.shared_ground(rows[:1]) == {}


def test_fuel_and_product_are_defined_once_for_a_kind(tmp_path):
    text = dashboards.write_overview(page_views.overview(), tmp_path).read_text(encoding="utf-8")
    assert text.count("fuel: exergy of the fuel burnt") == 1


def test_no_sentence_of_the_first_page_is_cut(tmp_path):
    sentence = "The section runs below its baseline since a week, " * 5 + "which costs 1 234 EUR."
    view = page_views.shift(
        summary=(sentence, "Short.", sentence, sentence, sentence),
        alarms=tuple(replace(a, message=sentence) for a in page_views.alarms()),
    )
    first = shift.first_page(view)
    assert first.summary == (sentence, "Short.", sentence, sentence)
    assert [alarm.message for alarm in first.alarms] == [sentence] * 2
    text = dashboards.write_shift(view, tmp_path).read_text(encoding="utf-8")
    assert "…" not in text.split('<div class="details">')[0]


def test_what_sums_of_doubles_leave_is_no_chance_to_save(tmp_path):
    view = page_views.costs()
    one, two = view.equipment[0], view.equipment[2]
    rows = (one, replace(two, destroyed_kw=1e-14, avoidable_kw=1e-14, avoidable_per_day=1e-14))
    page = dashboards.write_costs(replace(view, equipment=rows), tmp_path)
    chances = (
        page.read_text(encoding="utf-8").split("What could be avoided")[1].split("</table>")[0]
    )
    assert one.name in chances
    assert two.name not in chances


def test_no_alarm_is_said_in_words(tmp_path):
    page = dashboards.write_overview(page_views.overview(alarms=()), tmp_path)
    assert "Nothing open: no alarm stands." in page.read_text(encoding="utf-8")


@settings(max_examples=40, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.text(min_size=1, max_size=30).map(lambda text: f"{text}<'\">&</h1></script>"))
def test_no_text_adds_or_ends_an_element(tmp_path, text):
    view = page_views.equipment(trends=(page_views.power_trend(),), residuals=(), expansion=None)
    plain = read(dashboards.write_equipment(page_views.poisoned(view, "plain"), tmp_path))
    hostile = read(dashboards.write_equipment(page_views.poisoned(view, text), tmp_path))
    assert hostile.tags == plain.tags
    assert "</h1></script>" in hostile.heading


def test_the_package_imports_neither_of_the_others():
    for file in PACKAGE.rglob("*.py"):
        for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
            names = [alias.name for alias in node.names] if isinstance(node, ast.Import) else []
            names += [node.module or ""] if isinstance(node, ast.ImportFrom) else []
            assert not any(name.split(".")[0] in {"monitor", "connectors"} for name in names), file


def test_writing_a_page_does_not_load_plotly():
    code = "import sys, dashboards; sys.exit(any(m.split('.')[0] == 'plotly' for m in sys.modules))"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_half_a_character_from_a_broken_export_does_not_stop_a_page(tmp_path):
    row = replace(page_views.equipment().row, name="half \ud83d left")
    page = dashboards.write_equipment(page_views.equipment(row=row), tmp_path)
    # The lone surrogate has no UTF-8 form; a question mark stands for it.
    assert "half ? left" in page.read_text(encoding="utf-8")


def test_a_ledger_with_holes_says_how_much_of_the_span_it_rests_on(tmp_path):
    whole = dashboards.write_overview(page_views.overview(), tmp_path).read_text("utf-8")
    assert "gave figures for" not in whole
    lines = tuple(replace(x, live_mwh=x.live_kw * 0.36) for x in page_views.ledger())
    half = dashboards.write_overview(page_views.overview(ledger=lines), tmp_path)
    assert "the readings gave figures for 360 of 720 h" in half.read_text("utf-8").replace(
        "\u202f", ""
    )
