"""Heaters, flash vessel and traps: what fuel and product leave is what entropy says is destroyed.

For equipment that closes, fuel - product - what leaves for nothing = T0 S_gen; S_gen is counted
here by the iapws package on flows solved on paper.
"""

from __future__ import annotations

import pytest
from physics_site import build, exergy, last, rows, run, water

AMBIENT = {"TA": 15.0, "PA": 1.0}
T0 = 288.15
CLOSE = {"rel": 1e-7, "abs": 1e-5}


def _pt(bar, degc, flow="balance"):
    flow = flow if isinstance(flow, str) else f"{float(flow)!r} kg/s"
    return {"pressure": f"{bar} bar(a)", "temperature": f"{degc} degC", "flow": flow}


def _check(batch, destroyed, for_nothing=0.0):
    eq = batch.equipment
    assert last(eq, "it", "destroyed_live_kw") == pytest.approx(destroyed, **CLOSE)
    assert last(eq, "it", "closure_live_kw") == pytest.approx(0, abs=1e-4)
    spent = last(eq, "it", "fuel_live_kw") - last(eq, "it", "product_live_kw")
    assert spent - for_nothing == pytest.approx(destroyed, rel=1e-6, abs=1e-3)


def test_an_exchanger_with_pressure_drops_on_both_sides(tmp_path):
    hot, cooled = water(12, 250), water(11.5, 60)
    cold, warm = water(6, 20), water(5, 80)
    flow = 3 * (hot.h - cooled.h) / (warm.h - cold.h)
    site = build(
        tmp_path,
        {
            "a": _pt(12, 250, 3.0),
            "b": _pt(11.5, 60, 3.0),
            "c": _pt(6, 20, flow),
            "d": _pt(5, 80, flow),
        },
        {
            "it": {
                "kind": "exchanger",
                "ports": {"hot_in": "a", "hot_out": "b", "cold_in": "c", "cold_out": "d"},
            }
        },
    )
    batch = run(site, AMBIENT)
    destroyed = T0 * (3 * (cooled.s - hot.s) + flow * (warm.s - cold.s))
    _check(batch, destroyed)
    parts = rows(batch.conditions, "it").groupby("figure", observed=True)["value"].last()
    assert parts["destroyed_by_temperature"] + parts["destroyed_by_pressure"] == pytest.approx(
        destroyed, **CLOSE
    )
    assert parts["destroyed_by_pressure"] > 0


def test_a_closed_heater_with_a_drain_cascaded_into_it(tmp_path):
    steam, drip, drain = water(5, 180), water(12, 150), water(5, 100)
    cold, warm = water(90, 90), water(89, 140)
    m = 40.0
    need = m * (warm.h - cold.h) - 2 * (drip.h - drain.h)
    taken = need / (steam.h - drain.h)
    site = build(
        tmp_path,
        {
            "s": _pt(5, 180),
            "i": _pt(12, 150, 2.0),
            "o": _pt(5, 100),
            "c": _pt(90, 90, m),
            "w": _pt(89, 140, m),
        },
        {
            "it": {
                "kind": "closed_feedwater_heater",
                "ports": {
                    "steam": "s",
                    "drain_in": "i",
                    "drain": "o",
                    "feedwater_in": "c",
                    "feedwater_out": "w",
                },
            }
        },
    )
    batch = run(site, AMBIENT)
    assert last(batch.streams, "s", "mass_flow_kg_s") == pytest.approx(taken, **CLOSE)
    _check(
        batch,
        T0 * ((taken + 2) * drain.s - taken * steam.s - 2 * drip.s + m * (warm.s - cold.s)),
    )


def test_a_deaerator_with_a_metered_vent(tmp_path):
    steam, cold, out, vent = water(3, 200), water(8, 80), water(2, x=0), water(2, x=1)
    vented, m = 0.05, 30.0
    # m_s + m_c = m + v and m_s h_s + m_c h_c = m h_f + v h_g.
    taken = (m * (out.h - cold.h) + vented * (vent.h - cold.h)) / (steam.h - cold.h)
    water_in = m + vented - taken
    site = build(
        tmp_path,
        {
            "s": _pt(3, 200),
            "c": _pt(8, 80),
            "f": {"pressure": "2 bar(a)", "phase": "liquid", "flow": f"{m} kg/s"},
            "v": {"pressure": "2 bar(a)", "phase": "vapour", "flow": f"{vented} kg/s"},
        },
        {
            "it": {
                "kind": "deaerator",
                "ports": {"steam": "s", "water": "c", "feedwater": "f", "vent": "v"},
            }
        },
    )
    batch = run(site, AMBIENT)
    assert last(batch.streams, "s", "mass_flow_kg_s") == pytest.approx(taken, **CLOSE)
    destroyed = T0 * (m * out.s + vented * vent.s - taken * steam.s - water_in * cold.s)
    _check(batch, destroyed, for_nothing=vented * exergy(vent))


def test_a_flash_vessel(tmp_path):
    hot, dry, wet = water(9, 170), water(2, x=1), water(2, x=0)
    share = (hot.h - wet.h) / (dry.h - wet.h)
    site = build(
        tmp_path,
        {
            "h": _pt(9, 170, 6.0),
            "g": {"pressure": "2 bar(a)", "phase": "vapour", "flow": "balance"},
            "l": {"pressure": "2 bar(a)", "phase": "liquid", "flow": "balance"},
        },
        {
            "it": {
                "kind": "flash_vessel",
                "ports": {"inlet": "h", "steam": "g", "condensate": "l"},
            }
        },
    )
    batch = run(site, AMBIENT)
    assert last(batch.streams, "g", "mass_flow_kg_s") == pytest.approx(6 * share, **CLOSE)
    _check(batch, T0 * 6 * (share * dry.s + (1 - share) * wet.s - hot.s))


def test_traps_throttle_into_the_condensate_line(tmp_path):
    hot = water(9, 165)
    flashed = water(1.5, h=hot.h)
    site = build(
        tmp_path,
        {
            "h": _pt(9, 165, 0.2),
            "l": {"pressure": "1.5 bar(a)", "enthalpy": "balance", "flow": "balance"},
        },
        {"it": {"kind": "trap_group", "ports": {"inlet": "h", "outlet": "l"}}},
    )
    batch = run(site, AMBIENT)
    assert last(batch.streams, "l", "mass_flow_kg_s") == pytest.approx(0.2)
    _check(batch, T0 * 0.2 * (flashed.s - hot.s))


def _condenser(folder, cooling, condensate="balance"):
    wet, drip = {"pressure": "0.06 bar(a)", "dryness": 0.9}, {"pressure": "0.06 bar(a)"}
    streams = {
        "wet": wet | {"flow": "20 kg/s"},
        "drip": drip | {"phase": "liquid", "flow": condensate},
        "cw_in": _pt(2, 15, cooling),
        "cw_out": _pt(1.8, 27),
    }
    ports = {"steam": "wet", "condensate": "drip", "cooling_in": "cw_in", "cooling_out": "cw_out"}
    return build(folder, streams, {"it": {"kind": "condenser", "ports": ports}})


# Steam gives up 20 (h_wet - h_drip); a kg of cooling water takes h_out - h_in.
GIVEN_UP = 20 * (water(0.06, x=0.9).h - water(0.06, x=0).h)
TAKEN = water(1.8, 27).h - water(2, 15).h


@pytest.mark.parametrize("error", [0.9, 1.0, 1.05])
def test_a_wrong_meter_turns_no_cooling_water_into_condensate(tmp_path, error):
    """A wall is between them: each fluid closes by itself, and the error is in the energy."""
    cooling = error * GIVEN_UP / TAKEN
    batch = run(_condenser(tmp_path, cooling), AMBIENT)
    assert last(batch.streams, "drip", "mass_flow_kg_s") == pytest.approx(20.0, rel=1e-12)
    assert last(batch.streams, "cw_out", "mass_flow_kg_s") == pytest.approx(cooling, rel=1e-12)
    residual = last(batch.equipment, "it", "energy_imbalance_kw")
    assert residual == pytest.approx((1 - error) * GIVEN_UP, rel=1e-6, abs=1e-2)


def test_cooling_water_without_a_meter_follows_from_the_duty(tmp_path):
    batch = run(_condenser(tmp_path, "balance"), AMBIENT)
    for stream in ("cw_in", "cw_out"):
        flow = last(batch.streams, stream, "mass_flow_kg_s")
        assert flow == pytest.approx(GIVEN_UP / TAKEN, rel=1e-7)
    assert last(batch.streams, "drip", "mass_flow_kg_s") == pytest.approx(20.0, rel=1e-9)
