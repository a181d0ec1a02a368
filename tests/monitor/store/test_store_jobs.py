"""The state of a site's daemon and jobs, as the store keeps it for other machines."""

from __future__ import annotations

from dataclasses import replace

import pytest
import store_samples as samples

from monitor.store.jobs import DaemonState, JobHealth

NOW = samples.at("2025-06-01")
STATE = DaemonState(
    4711,
    "north",
    "1.0",
    NOW - 60,
    NOW,
    jobs={
        "cycle": JobHealth(NOW - 5, NOW + 295, NOW - 900, 'it\'s "away"; drop table jobs; --', 3),
        "pages": JobHealth(next=NOW + 600),
    },
)


@pytest.mark.usefixtures("site")
def test_a_site_without_a_daemon_has_none(site):
    assert site.daemon() is None


def test_what_is_kept_is_read_again(site):
    site.keep_daemon(STATE)
    assert site.daemon() == STATE
    later = replace(STATE, seen=NOW + 60, ended=NOW + 60, jobs={"pages": JobHealth(last=NOW)})
    site.keep_daemon(later)
    # A job that is no more is not kept either.
    assert site.daemon() == later


def test_sites_in_one_store_keep_theirs_apart(store):
    one, two = samples.register(store, "one"), samples.register(store, "two")
    one.keep_daemon(STATE)
    two.keep_daemon(replace(STATE, host="south", jobs={}))
    assert one.daemon() == STATE
    assert two.daemon().host == "south"
    assert two.daemon().jobs == {}


def test_parts_of_a_second_are_dropped(site):
    site.keep_daemon(replace(STATE, seen=NOW + 0.75, jobs={"cycle": JobHealth(last=NOW + 0.5)}))
    assert site.daemon().seen == NOW
    assert site.daemon().jobs["cycle"].last == NOW
