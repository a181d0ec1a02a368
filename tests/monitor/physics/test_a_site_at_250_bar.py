"""A supercritical site: feed at 300 bar, live steam at 250 bar, a letdown through region 3."""

from __future__ import annotations

import numpy as np
import pytest
from iapws import IAPWS97
from physics_site import build, exergy, last, left_over, rows, run, water

from monitor.flags import Flag

AMBIENT = {"TA": 12.0, "PA": 0.995}
LIVE, COLD, FEED = water(250, 600), water(60, 370), water(300, 280)
# Supercritical at 390 degC, wet where the valve leaves it, at 200 bar.
DRAWN = water(250, 390)


@pytest.fixture(scope="module")
def batch(tmp_path_factory):
    site = build(
        tmp_path_factory.mktemp("supercritical"),
        {
            "feed": {"pressure": "300 bar(a)", "temperature": "280 degC", "flow": "100 kg/s"},
            "gas": {"medium": "fuel", "flow": "6 kg/s", "lower_heating_value": "48 MJ/kg",
                    "fuel": "natural gas"},
            "live": {"pressure": "P", "temperature": "T", "flow": "100 kg/s"},
            "cold": {"pressure": "60 bar(a)", "temperature": "370 degC", "flow": "100 kg/s"},
            "shaft": {"medium": "power", "power": "balance"},
            "drawn": {"pressure": "P", "temperature": "390 degC", "flow": "2 kg/s"},
            "flashed": {"pressure": "P2", "enthalpy": "balance", "flow": "2 kg/s"},
        },
        {
            "boiler": {"kind": "boiler",
                       "ports": {"fuel": "gas", "feedwater": "feed", "steam": "live"}},
            "hp": {"kind": "turbine",
                   "ports": {"inlet": "live", "exhaust": "cold", "power": "shaft"}},
            "valve": {"kind": "letdown", "ports": {"inlet": "drawn", "outlet": "flashed"}},
        },
        {"P": {"unit": "bar(a)", "range": [0, 400]}, "T": {"unit": "degC", "range": [0, 700]},
         "P2": {"unit": "bar(a)", "range": [0, 400]}},
    )  # fmt: skip
    return run(site, AMBIENT | {"P": 250.0, "T": 600.0, "P2": 200.0})


def _exergy(state):
    return exergy(state, AMBIENT["TA"], AMBIENT["PA"])


@pytest.mark.parametrize(
    ("stream", "flow", "state"),
    [("feed", 100.0, FEED), ("live", 100.0, LIVE), ("cold", 100.0, COLD), ("drawn", 2.0, DRAWN)],
)
def test_supercritical_streams_have_their_exergy(batch, stream, flow, state):
    found = last(batch.streams, stream, "exergy_live_kw")
    assert found == pytest.approx(flow * _exergy(state), rel=1e-8)
    assert (rows(batch.streams, stream)["flag"] == 0).all()


def test_the_turbines_efficiency_is_held_against_a_supercritical_isentrope(batch):
    isentropic = IAPWS97(P=6.0, s=LIVE.s)  # iapws solves p, s on its own
    table = batch.conditions[batch.conditions["subject"] == "hp"]
    eta = table[table["figure"] == "eta_s_1"]["value"].iloc[-1]
    # iapws's p,s comes from a backward equation that it refines to a few J/kg only.
    expected = (LIVE.h - COLD.h) / (LIVE.h - isentropic.h)
    assert eta == pytest.approx(100 * expected, rel=1e-4)
    destroyed = last(batch.equipment, "hp", "destroyed_live_kw")
    assert destroyed == pytest.approx((12.0 + 273.15) * 100 * (COLD.s - LIVE.s), rel=1e-7)


def test_a_letdown_into_the_wet_part_of_region_3_keeps_its_enthalpy(batch):
    boiling, dry = water(200, x=0), water(200, x=1)
    share = (DRAWN.h - boiling.h) / (dry.h - boiling.h)
    assert 0.9 < share < 1.0
    assert last(batch.streams, "flashed", "enthalpy_kj_kg") == pytest.approx(DRAWN.h, rel=1e-9)
    # iapws's saturation in region 3 rests on a backward equation, good to 1e-5 here.
    assert last(batch.streams, "flashed", "dryness") == pytest.approx(share, abs=1e-4)
    assert Flag(int(rows(batch.streams, "flashed")["flag"].iloc[-1])) & Flag.SOLVED


def test_the_ledger_closes(batch):
    for dead in ("live", "reference"):
        assert left_over(batch.ledger, dead).abs().max() < 1e-7
    assert np.isfinite(batch.ledger["destroyed_live_kw"]).all()
