"""The text and the document of a message, whatever the names in it hold."""

from __future__ import annotations

import json
import math
import unicodedata

import pytest
from hypothesis import given
from hypothesis import strategies as st
from notify_samples import NOW, alarm_of

from monitor.notify.message import Message, alarm_message, identity, job_message, plain
from monitor.site.load import load_site


@given(st.text())
def test_plain_text_is_one_line_without_anything_that_acts(text):
    line = plain(text)
    assert len(line) <= 500
    assert len(line.splitlines()) <= 1
    assert all(unicodedata.category(c)[0] != "C" for c in line)
    assert plain(line) == line
    # What is written is kept.
    if text.isascii() and text.isprintable() and len(text) <= 500:
        assert line == " ".join(text.split())


@pytest.fixture(scope="module")
def site(make_plant, tmp_path_factory):
    plant = make_plant(tmp_path_factory.mktemp("messages") / "site", days=0.05)
    table = (
        '\n[[notify]]\nid = "p"\nkind = "command"\ncommand = ["page"]\npages_url = "https://p/"\n'
    )
    plant.path.write_text(plant.path.read_text() + table)
    return load_site(plant.path)


@given(text=st.text(max_size=40), number=st.floats() | st.none())
def test_any_alarm_gives_a_document_that_reads_back(site, text, number):
    (notify,) = site.file.notify
    alarm = alarm_of(NOW, subject=text, figure=text, message=text, cost_per_day=number,
                     value=number, priority=text)  # fmt: skip
    message = alarm_message(site, notify, alarm, "raised", NOW, "key")
    content = message.as_json()
    assert content.isascii()
    assert Message.read(content) == message
    assert json.loads(content) == message.document
    finite = number is not None and math.isfinite(number)
    assert message.document["value"] == (number if finite else None)
    assert len(message.title.splitlines()) == 1
    assert message.document["page"] == "https://p/index.html"


def test_a_message_says_what_where_since_when_what_it_costs_and_what_it_rests_on(site):
    (notify,) = site.file.notify
    text = alarm_message(site, notify, alarm_of(NOW), "returned", NOW + 7200, "key").text
    assert text == (
        "Alarm returned to normal at Mill Race Works\n"
        "\n"
        "What: Turbine TG1: isentropic efficiency 79.0 %, expected 82.0 % at this load: down 3.0"
        " points since about 14 Jan 03:00.\n"
        "Where: Turbine TG1 (TG1), eta_s_1\n"
        "Raised: 2026-05-28 22:26+02:00\n"
        "Returned: 2026-05-29 00:26+02:00\n"
        "Priority: medium\n"
        "Cost: about 1 234 EUR a day\n"
        "Rests on: FT-4101, JT-4101, PT-4103, PT-6201, TT-4103, TT-6201\n"
        "Page: https://p/equipment-TG1.html\n"
        "\n"
        "A monitoring aid, not a protection system."
    )


def test_a_failed_job_says_why_and_what_the_daemon_does(site):
    (notify,) = site.file.notify
    lines = job_message(site, notify, "cycle", "failed", NOW, "no file", "key").text.splitlines()
    assert lines[2:5] == ["What: cycle failed", "Cause: no file", "Since: 2026-05-28 22:26+02:00"]
    assert "catches up" in lines[5]


def test_the_id_follows_from_site_target_and_event_alone():
    assert identity("mill", "office", "k") == identity("mill", "office", "k")
    others = {identity(*names) for names in (("mill", "office", "l"), ("mill", "hook", "k"))}
    assert identity("mill", "office", "k") not in others
