from __future__ import annotations

from dataclasses import replace

import pytest

from monitor.drift.verdict import Evidence, verdict

QUIET = Evidence(
    judged=True,
    drifts=False,
    figure="isentropic efficiency",
    destroyed_live_change=0.0,
    destroyed_reference_change=0.0,
    load_change=0.0,
    imbalance_change=0.0,
)
DRIFT = replace(QUIET, drifts=True)


def test_a_figure_that_drifts_on_good_readings_is_the_machine():
    found = verdict(replace(DRIFT, destroyed_reference_change=0.12))
    assert found.cause == "machine"
    assert found.reasons[0].startswith("isentropic efficiency has left its limits")
    assert found.reasons[-1].endswith("changed by +12% too")


@pytest.mark.parametrize(
    ("doubt", "words"),
    [
        ({"doubtful_share": 0.4, "doubtful_tags": ("TI 12",)}, "40% of the time (TI 12)"),
        ({"second_law_share": 0.3}, "contradict the second law 30%"),
        ({"imbalance_change": -0.04}, "balance moved by -4.0% of the throughput"),
    ],
)
def test_a_drift_on_doubtful_readings_is_the_instrument(doubt, words):
    found = verdict(replace(DRIFT, **doubt))
    assert found.cause == "instrument"
    assert words in found.reasons[0]


def test_a_little_doubt_does_not_excuse_a_machine():
    assert verdict(replace(DRIFT, doubtful_share=0.05, imbalance_change=0.01)).cause == "machine"


def test_doubtful_readings_are_an_instrument_even_when_nothing_can_be_judged():
    assert verdict(replace(QUIET, judged=False, doubtful_share=0.9)).cause == "instrument"


def test_a_change_at_the_live_dead_state_alone_is_the_weather():
    found = verdict(replace(QUIET, destroyed_live_change=-0.08, destroyed_reference_change=0.01))
    assert found.cause == "weather"
    what, condition = found.reasons
    assert "changed by -8% at the live dead state, but only by +1% at the fixed reference" in what
    assert condition == "isentropic efficiency is within its limits"


@pytest.mark.parametrize("sign", [1, -1])
def test_a_change_that_goes_with_the_load_is_the_load(sign):
    change = {"destroyed_live_change": sign * 0.22, "destroyed_reference_change": sign * 0.2}
    assert verdict(replace(QUIET, load_change=sign * 0.25, **change)).cause == "load"


def test_more_destroyed_at_less_load_is_not_explained_by_the_load():
    found = verdict(replace(QUIET, destroyed_reference_change=0.2, load_change=-0.2))
    assert found.cause == "unknown"
    assert "no evidence says why" in found.reasons[0]


def test_doubtful_readings_without_a_drift_are_still_said():
    assert verdict(replace(QUIET, doubtful_share=0.5)).cause == "instrument"


def test_nothing_changed_needs_no_cause():
    found = verdict(QUIET)
    assert found.cause == "unknown"
    assert "nothing changed" in found.reasons[0]


def test_without_a_baseline_nothing_is_blamed():
    found = verdict(Evidence(judged=False, drifts=False))
    assert found.cause == "unknown"
    assert "no baseline" in found.reasons[0]


def test_what_is_not_known_is_not_taken_for_a_change():
    assert verdict(Evidence(judged=True, drifts=False, load_change=0.5)).cause == "unknown"
    assert (
        verdict(Evidence(judged=True, drifts=False, destroyed_live_change=0.5)).cause == "unknown"
    )
