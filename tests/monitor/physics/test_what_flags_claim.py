"""Missing and contradictory are claims about figures: neither is made where it does not hold."""

from __future__ import annotations

import numpy as np
import pytest
from physics_site import build, last, rows, run, water

from monitor.flags import Flag

AMBIENT = {"TA": 15.0, "PA": 1.0}


def _has(flags, bit):
    return (flags.to_numpy() & int(bit)) != 0


def test_a_lost_thermometer_on_a_pipe_without_flow_takes_nothing_away(tmp_path):
    site = build(
        tmp_path,
        {
            "i": {"pressure": "12 bar(a)", "temperature": "240 degC", "flow": "5 kg/s"},
            "o": {"pressure": "12 bar(a)", "temperature": "235 degC", "flow": "5 kg/s"},
            "x": {"pressure": "12 bar(a)", "temperature": "TX", "flow": "0 kg/s"},
        },
        {"it": {"kind": "header", "ports": {"inlet": "i", "outlet": ["o", "x"]}}},
        {"TX": {"unit": "degC"}},
    )
    batch = run(site, AMBIENT | {"TX": np.nan})
    lost = 5 * (water(12, 240).h - water(12, 235).h)
    assert last(batch.equipment, "it", "heat_loss_kw") == pytest.approx(lost, rel=1e-8)
    assert not _has(batch.equipment["flag"], Flag.MISSING).any()
    assert not _has(batch.ledger["flag"], Flag.MISSING).any()
    # The pipe's own state is absent, and the pipe says so.
    assert _has(rows(batch.streams, "x")["flag"], Flag.MISSING).all()


def test_a_lost_valve_position_is_missing_for_its_own_figure_only(tmp_path):
    site = build(
        tmp_path,
        {
            "i": {"pressure": "20 bar(a)", "temperature": "300 degC", "flow": "4 kg/s"},
            "o": {"pressure": "8 bar(a)", "temperature": "280 degC", "flow": "balance"},
        },
        {"it": {"kind": "letdown", "position": "Z", "ports": {"inlet": "i", "outlet": "o"}}},
        {"Z": {"unit": "%"}},
    )
    batch = run(site, AMBIENT | {"Z": np.nan})
    assert not _has(batch.ledger["flag"], Flag.MISSING).any()
    figures = batch.conditions.groupby("figure", observed=True)["flag"].last()
    assert figures["passing_flow"] & Flag.MISSING
    assert not figures["work_bypassed"] & Flag.MISSING


def test_a_lost_power_meter_is_missing_although_entropy_is_known(tmp_path):
    site = build(
        tmp_path,
        {
            "i": {"pressure": "40 bar(a)", "temperature": "400 degC", "flow": "20 kg/s"},
            "o": {"pressure": "4 bar(a)", "temperature": "190 degC", "flow": "balance"},
            "w": {"medium": "power", "power": "W"},
        },
        {"it": {"kind": "turbine", "ports": {"inlet": "i", "exhaust": "o", "power": "w"}}},
        {"W": {"unit": "kW"}},
    )
    batch = run(site, AMBIENT | {"W": np.nan})
    assert last(batch.equipment, "it", "destroyed_live_kw") == pytest.approx(
        288.15 * 20 * (water(4, 190).s - water(40, 400).s), rel=1e-8
    )
    assert _has(batch.equipment["flag"], Flag.MISSING).all()
    assert _has(batch.ledger["flag"], Flag.MISSING).all()


@pytest.mark.parametrize(("flow", "contradicts"), [(0.02, False), (4.0, True)])
def test_meters_about_zero_contradict_nothing(tmp_path, flow, contradicts):
    """Out of service, half of all readings lie below zero; in service the same is a wrong meter."""
    rng = np.random.default_rng(7)
    site = build(
        tmp_path,
        {
            "i": {"pressure": "60 bar(a)", "temperature": "460 degC", "flow": "F"},
            "o": {"pressure": "11 bar(a)", "temperature": "TO", "flow": "balance"},
        },
        {"it": {"kind": "letdown", "ports": {"inlet": "i", "outlet": "o"}}},
        {"F": {"unit": "kg/s"}, "TO": {"unit": "degC"}},
    )

    def meter(t):
        return flow * rng.standard_normal(len(t)) if flow < 1 else np.full(len(t), flow)

    # In service: the outlet stands so low that entropy would have to vanish.
    outlet = 445.0 if flow < 1 else 188.0
    batch = run(site, AMBIENT | {"F": meter, "TO": outlet}, hours=6, step=300)
    found = rows(batch.equipment, "it")
    assert (found["destroyed_live_kw"] < 0).any()
    assert _has(found["flag"], Flag.SECOND_LAW).any() == contradicts
    assert _has(found["flag"], Flag.OFF).all() != contradicts
