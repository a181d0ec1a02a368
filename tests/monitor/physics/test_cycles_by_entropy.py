"""Whole cycles against a second computation that knows entropy alone (iapws package's IF97).

Every state, flow and destruction here is worked out on paper from the same readings; the cycles are
of the tests' own invention.
"""

from __future__ import annotations

import numpy as np
import pytest
from physics_site import build, exergy, last, left_over, rows, run, surroundings, water

from monitor.flags import Flag

AMBIENT = {"TA": 15.0, "PA": 1.0}
T0 = 288.15
CLOSE = {"rel": 1e-8, "abs": 1e-6}


def _has(flags, bit):
    return (flags.to_numpy() & int(bit)) != 0


def _fuel(flow, lhv="40 MJ/kg", ratio=1.05):
    return {"medium": "fuel", "flow": flow, "lower_heating_value": lhv, "exergy_ratio": ratio}


def test_a_simple_rankine_cycle_destroys_what_entropy_says(tmp_path):
    """Boiler, turbine with a wet exhaust taken from its power, condenser, pump.

    eta = net work / fuel's heat; destruction of all four = fuel's exergy - net work - cooling
    water's exergy.
    """
    m, power, pump_power = 30.0, 28_000.0, 400.0
    live, condensate, feed = water(80, 480), water(0.1, 44), water(90, 45)
    exhaust = water(0.1, h=live.h - power / m)
    # The cooling water's flow is chosen so that the condenser closes: 12 degC in, 22 degC out.
    cold, warm = water(2, 12), water(2, 22)
    cooling = m * (exhaust.h - condensate.h) / (warm.h - cold.h)
    fuel = 3.0 * 40_000
    site = build(
        tmp_path,
        {
            "oil": _fuel("3 kg/s"),
            "feed": {"pressure": "90 bar(a)", "temperature": "45 degC", "flow": f"{m} kg/s"},
            "live": {"pressure": "80 bar(a)", "temperature": "480 degC", "flow": "balance"},
            "wet": {"pressure": "0.1 bar(a)", "enthalpy": "balance", "flow": "balance"},
            "shaft": {"medium": "power", "power": f"{power} kW"},
            "drip": {"pressure": "0.1 bar(a)", "temperature": "44 degC", "flow": "balance"},
            "drive": {"medium": "power", "power": f"{pump_power} kW"},
            "cw_in": {"pressure": "2 bar(a)", "temperature": "12 degC", "flow": "CW"},
            "cw_out": {"pressure": "2 bar(a)", "temperature": "22 degC", "flow": "balance"},
        },
        {
            "boiler": {
                "kind": "boiler",
                "ports": {"fuel": "oil", "feedwater": "feed", "steam": "live"},
            },
            "turbine": {
                "kind": "turbine",
                "ports": {"inlet": "live", "exhaust": "wet", "power": "shaft"},
            },
            "condenser": {
                "kind": "condenser",
                "ports": {
                    "steam": "wet",
                    "cooling_in": "cw_in",
                    "condensate": "drip",
                    "cooling_out": "cw_out",
                },
            },
            "pump": {
                "kind": "pump",
                "ports": {"inlet": "drip", "power": "drive", "outlet": "feed"},
            },
        },
        {"CW": {"unit": "kg/s"}},
    )
    batch = run(site, AMBIENT | {"CW": cooling})
    eq = batch.equipment

    heat_lost = fuel - m * (live.h - feed.h)
    destroyed = {
        "boiler": T0 * m * (live.s - feed.s) + heat_lost + 0.05 * fuel,
        "turbine": T0 * m * (exhaust.s - live.s),
        "condenser": T0 * (m * (condensate.s - exhaust.s) + cooling * (warm.s - cold.s)),
        "pump": T0 * m * (feed.s - condensate.s),
    }
    for item, expected in destroyed.items():
        assert last(eq, item, "destroyed_live_kw") == pytest.approx(expected, **CLOSE)
    assert last(eq, "boiler", "heat_loss_kw") == pytest.approx(heat_lost, **CLOSE)
    assert last(eq, "condenser", "energy_imbalance_kw") == pytest.approx(0, abs=1e-3)
    pump_left = pump_power - m * (feed.h - condensate.h)
    assert last(eq, "pump", "energy_imbalance_kw") == pytest.approx(pump_left, **CLOSE)
    assert last(eq, "pump", "closure_live_kw") == pytest.approx(pump_left, **CLOSE)

    ledger = batch.ledger.iloc[-1]
    gained = cooling * (exergy(warm) - exergy(cold))
    # The pump's residual is in the imbalance; all else must be destroyed.
    assert ledger["destroyed_live_kw"] + pump_left == pytest.approx(
        1.05 * fuel - (power - pump_power) - gained, rel=1e-8
    )
    assert ledger["used_live_kw"] == pytest.approx(power)
    efficiency = rows(batch.conditions, "boiler").query("figure == 'fuel_efficiency'")["value"]
    assert efficiency.iloc[-1] == pytest.approx(100 * m * (live.h - feed.h) / fuel, **CLOSE)
    assert not _has(eq["flag"], Flag.SECOND_LAW).any()


def test_an_open_heater_gives_the_extraction_flow_by_two_balances(tmp_path):
    """Extraction y at 6 bar: y h_x + (1 - y) h_c = h_f, so y = (h_f - h_c) / (h_x - h_c)."""
    m, power = 50.0, 40_000.0
    live, taken, cold, hot = water(100, 500), water(6, 200), water(8, 40), water(6, x=0)
    y = m * (hot.h - cold.h) / (taken.h - cold.h)
    # Work of both sections, with a drive of 96 %.
    wet_h = (m * live.h - y * taken.h - power / 0.96) / (m - y)
    wet = water(0.05, h=wet_h)
    site = build(
        tmp_path,
        {
            "live": {"pressure": "100 bar(a)", "temperature": "500 degC", "flow": f"{m} kg/s"},
            "taken": {"pressure": "6 bar(a)", "temperature": "200 degC", "flow": "balance"},
            "wet": {"pressure": "0.05 bar(a)", "enthalpy": "balance", "flow": "balance"},
            "shaft": {"medium": "power", "power": f"{power} kW"},
            "cold": {"pressure": "8 bar(a)", "temperature": "40 degC", "flow": "balance"},
            "hot": {"pressure": "6 bar(a)", "phase": "liquid", "flow": f"{m} kg/s"},
        },
        {
            "turbine": {
                "kind": "turbine",
                "drive_efficiency": 0.96,
                "ports": {
                    "inlet": "live",
                    "extraction": "taken",
                    "exhaust": "wet",
                    "power": "shaft",
                },
            },
            "heater": {
                "kind": "control_volume",
                "ports": {"inlet": ["taken", "cold"], "outlet": "hot"},
            },
        },
    )
    batch = run(site, AMBIENT)
    assert last(batch.streams, "taken", "mass_flow_kg_s") == pytest.approx(y, **CLOSE)
    assert last(batch.streams, "cold", "mass_flow_kg_s") == pytest.approx(m - y, **CLOSE)
    assert last(batch.streams, "wet", "enthalpy_kj_kg") == pytest.approx(wet_h, **CLOSE)
    drive_loss = power / 0.96 - power
    turbine = T0 * (y * taken.s + (m - y) * wet.s - m * live.s) + drive_loss
    heater = T0 * (m * hot.s - y * taken.s - (m - y) * cold.s)
    assert last(batch.equipment, "turbine", "destroyed_live_kw") == pytest.approx(turbine, **CLOSE)
    assert last(batch.equipment, "heater", "destroyed_live_kw") == pytest.approx(heater, **CLOSE)
    assert last(batch.equipment, "turbine", "heat_loss_kw") == pytest.approx(drive_loss, **CLOSE)
    psi = last(batch.equipment, "turbine", "product_live_kw") / last(
        batch.equipment, "turbine", "fuel_live_kw"
    )
    given_up = m * exergy(live) - y * exergy(taken) - (m - y) * exergy(wet)
    assert psi == pytest.approx(power / given_up, rel=1e-8)
    assert psi == pytest.approx(1 - turbine / given_up, rel=1e-8)


def test_reheat_through_two_turbines_from_a_supercritical_boiler(tmp_path):
    """250 bar, 560 degC; reheated at 40 bar, in a control volume, by heat at 900 degC."""
    m, first_power, second_power = 100.0, 45_000.0, 110_000.0
    live, cold, hot = water(250, 560), water(40, 300), water(38, 560)
    wet = water(0.06, h=hot.h - second_power / m)
    heat, Tb = m * (hot.h - cold.h), 1173.15
    site = build(
        tmp_path,
        {
            "live": {"pressure": "250 bar(a)", "temperature": "560 degC", "flow": f"{m} kg/s"},
            "cold": {"pressure": "40 bar(a)", "temperature": "300 degC", "flow": "balance"},
            "w1": {"medium": "power", "power": f"{first_power} kW"},
            "heat": {"medium": "heat", "heat": "balance", "boundary_temperature": "900 degC"},
            "hot": {"pressure": "38 bar(a)", "temperature": "560 degC", "flow": "balance"},
            "wet": {"pressure": "0.06 bar(a)", "enthalpy": "balance", "flow": "balance"},
            "w2": {"medium": "power", "power": f"{second_power} kW"},
        },
        {
            "hp": {"kind": "turbine", "ports": {"inlet": "live", "exhaust": "cold", "power": "w1"}},
            "reheater": {
                "kind": "control_volume",
                "ports": {"inlet": ["cold", "heat"], "outlet": "hot"},
            },
            "lp": {"kind": "turbine", "ports": {"inlet": "hot", "exhaust": "wet", "power": "w2"}},
        },
    )
    batch = run(site, AMBIENT)
    eq = batch.equipment
    assert last(batch.streams, "heat", "energy_kw") == pytest.approx(heat, **CLOSE)
    assert last(batch.streams, "heat", "exergy_live_kw") == pytest.approx(
        heat * (1 - T0 / Tb), **CLOSE
    )
    assert last(eq, "hp", "destroyed_live_kw") == pytest.approx(T0 * m * (cold.s - live.s), **CLOSE)
    assert last(eq, "hp", "closure_live_kw") == pytest.approx(
        m * (live.h - cold.h) - first_power, rel=1e-7
    )
    assert last(eq, "reheater", "destroyed_live_kw") == pytest.approx(
        T0 * (m * (hot.s - cold.s) - heat / Tb), **CLOSE
    )
    assert last(eq, "lp", "destroyed_live_kw") == pytest.approx(T0 * m * (wet.s - hot.s), **CLOSE)


def test_back_pressure_with_a_process_user_in_a_frost(tmp_path):
    """At -9 degC the dead-state water is ice: only g0 sees it, so destruction is T0 S_gen still."""
    t_c, cold_T0 = -9.0, 264.15
    m, power, back = 20.0, 5_000.0, 12.0
    live, exhaust, drip = water(40, 400), water(4, 190), water(4, 110)
    heat, Tb = m * exhaust.h - m * drip.h, 273.15 + 120
    site = build(
        tmp_path,
        {
            "live": {"pressure": "40 bar(a)", "temperature": "400 degC", "flow": f"{m} kg/s"},
            "steam": {"pressure": "4 bar(a)", "temperature": "190 degC", "flow": "balance"},
            "shaft": {"medium": "power", "power": f"{power} kW"},
            "back": {
                "pressure": "4 bar(a)",
                "temperature": "110 degC",
                "flow": f"{back} kg/s",
                "counts_as": "used",
            },
            "drain": {"pressure": "4 bar(a)", "temperature": "110 degC", "flow": "balance"},
            "heat": {
                "medium": "heat",
                "heat": "balance",
                "boundary_temperature": "120 degC",
                "counts_as": "used",
            },
        },
        {
            "turbine": {
                "kind": "turbine",
                "ports": {"inlet": "live", "exhaust": "steam", "power": "shaft"},
            },
            "dryer": {
                "kind": "user",
                "ports": {"steam": "steam", "condensate": "back", "lost": "drain", "heat": "heat"},
            },
        },
    )
    batch = run(site, {"TA": t_c, "PA": 1.0})
    eq, ledger = batch.equipment, batch.ledger.iloc[-1]
    assert last(eq, "dryer", "destroyed_live_kw") == pytest.approx(
        cold_T0 * (m * (drip.s - exhaust.s) + heat / Tb), rel=1e-7
    )
    assert last(eq, "dryer", "product_live_kw") == pytest.approx(heat * (1 - cold_T0 / Tb), **CLOSE)
    # Ice by IAPWS R10-06 and water by IF97 meet within 1e-3 kJ/kg at the triple point.
    assert ledger["supplied_live_kw"] == pytest.approx(m * exergy(live, t_c), abs=0.05 * m)
    assert ledger["lost_live_kw"] == pytest.approx(8 * exergy(drip, t_c), abs=0.05 * 8)
    assert ledger["used_live_kw"] == pytest.approx(
        power + back * exergy(drip, t_c) + heat * (1 - cold_T0 / Tb), rel=1e-4
    )
    assert ledger["imbalance_live_kw"] == pytest.approx(m * (live.h - exhaust.h) - power, rel=1e-7)
    assert _has(eq["flag"], Flag.FREEZING).all()
    assert surroundings(t_c, 1.0).h == pytest.approx(-352, abs=3)  # ice: latent heat, from memory


def test_a_let_down_with_spray_solves_both_flows(tmp_path):
    """m1 h1 + w h_w = (m1 + w) h2; destroyed = T0 (m2 s2 - m1 s1 - w s_w)."""
    m = 8.0
    steam, spray, out = water(60, 460), water(80, 130), water(11, 210)
    w = m * (steam.h - out.h) / (out.h - spray.h)
    site = build(
        tmp_path,
        {
            "in": {"pressure": "60 bar(a)", "temperature": "460 degC", "flow": f"{m} kg/s"},
            "spray": {"pressure": "80 bar(a)", "temperature": "130 degC", "flow": "balance"},
            "out": {"pressure": "11 bar(a)", "temperature": "210 degC", "flow": "balance"},
        },
        {
            "station": {
                "kind": "letdown",
                "ports": {"inlet": "in", "spray": "spray", "outlet": "out"},
            }
        },
    )
    batch = run(site, AMBIENT)
    assert last(batch.streams, "spray", "mass_flow_kg_s") == pytest.approx(w, **CLOSE)
    assert last(batch.equipment, "station", "destroyed_live_kw") == pytest.approx(
        T0 * ((m + w) * out.s - m * steam.s - w * spray.s), **CLOSE
    )
    assert last(batch.equipment, "station", "closure_live_kw") == pytest.approx(0, abs=1e-6)


def test_a_boiler_with_blowdown_loses_heat_at_its_boundary(tmp_path):
    """Heat lost at 160 degC takes Q (1 - T0/Tb) along; the flows' gap leaves as feed water."""
    fuel, feed_m, steam_m, blown_m = 2.0 * 40_000, 26.0, 25.0, 0.6
    feed, steam, blown, Tb = water(70, 120), water(60, 450), water(62, x=0), 433.15
    gap = feed_m - steam_m - blown_m
    lost = fuel + feed_m * feed.h - steam_m * steam.h - blown_m * blown.h - gap * feed.h
    site = build(
        tmp_path,
        {
            "oil": _fuel("2 kg/s"),
            "feed": {"pressure": "70 bar(a)", "temperature": "120 degC", "flow": f"{feed_m} kg/s"},
            "steam": {
                "pressure": "60 bar(a)",
                "temperature": "450 degC",
                "flow": f"{steam_m} kg/s",
            },
            "blown": {"pressure": "62 bar(a)", "phase": "liquid", "flow": f"{blown_m} kg/s"},
        },
        {
            "boiler": {
                "kind": "boiler",
                "boundary_temperature": "160 degC",
                "ports": {
                    "fuel": "oil",
                    "feedwater": "feed",
                    "steam": "steam",
                    "blowdown": "blown",
                },
            }
        },
    )
    batch = run(site, AMBIENT)
    eq = batch.equipment
    generated = steam_m * steam.s + blown_m * blown.s + gap * feed.s - feed_m * feed.s + lost / Tb
    assert last(eq, "boiler", "mass_imbalance_kg_s") == pytest.approx(gap, **CLOSE)
    assert last(eq, "boiler", "heat_loss_kw") == pytest.approx(lost, **CLOSE)
    assert last(eq, "boiler", "heat_loss_exergy_live_kw") == pytest.approx(
        lost * (1 - T0 / Tb), **CLOSE
    )
    assert last(eq, "boiler", "destroyed_live_kw") == pytest.approx(
        T0 * generated + 0.05 * fuel, **CLOSE
    )
    assert last(eq, "boiler", "unaccounted_live_kw") == pytest.approx(gap * exergy(feed), **CLOSE)
    for name in ("live", "reference"):
        assert left_over(batch.ledger, name).abs().max() < 1e-6


def test_an_accumulator_is_charged_and_discharged_under_a_moving_sky(tmp_path):
    """Stored exergy changes by dU - T0 dS - g0 dm with each cell's own T0, p0: never with dT0."""
    volume, interval = 80.0, 300.0

    def level(t):
        return 60 + 8 * np.sin(t / 900)

    def pressure(t):
        return 8.0 + 1.5 * np.cos(t / 900)

    def air(t):
        return 5 + 6 * np.sin(t / 1500)

    site = build(
        tmp_path,
        {
            "charge": {"pressure": "12 bar(a)", "temperature": "230 degC", "flow": "FC"},
            "discharge": {"pressure": "PV", "phase": "vapour", "flow": "FD", "counts_as": "used"},
        },
        {
            "vessel": {
                "kind": "accumulator",
                "volume": "80 m^3",
                "level": "LV",
                "pressure": "PV",
                "ports": {"charge": "charge", "discharge": "discharge"},
            }
        },
        {
            "FC": {"unit": "kg/s"},
            "FD": {"unit": "kg/s"},
            "LV": {"unit": "%"},
            "PV": {"unit": "bar(g)"},
        },
    )
    baro = 0.98
    batch = run(
        site,
        {
            "TA": air,
            "PA": baro,
            "FC": 3.0,
            "FD": 2.0,
            "LV": level,
            "PV": lambda t: pressure(t) - baro,
        },
        step=300,
    )
    found = rows(batch.equipment, "vessel")
    charge = water(12, 230)

    def content(t):
        y, p = level(t) / 100, pressure(t)
        wet, dry = water(float(p), x=0), water(float(p), x=1)
        m_f, m_g = volume * y / wet.v, volume * (1 - y) / dry.v
        return (
            m_f + m_g,
            m_f * (wet.h - 100 * p * wet.v) + m_g * (dry.h - 100 * p * dry.v),
            m_f * wet.s + m_g * dry.s,
        )

    for k in range(12):
        t = float(k * interval)
        before, after = content(t), content(t + interval)
        dm, du, ds = ((b - a) / interval for a, b in zip(before, after, strict=True))
        t0_c = float(air(t))
        k0, dead = t0_c + 273.15, surroundings(t0_c, baro)
        stored = du - k0 * ds - (dead.h - k0 * dead.s) * dm
        assert found["stored_rate_live_kw"][k] == pytest.approx(stored, rel=1e-6, abs=1e-2)
        out = water(float(pressure(t)), x=1)
        gap = 3.0 - 2.0 - dm
        residual = 3 * charge.h - 2 * out.h - du - gap * charge.h
        generated = 2 * out.s - 3 * charge.s + gap * charge.s + ds
        assert found["energy_imbalance_kw"][k] == pytest.approx(residual, rel=1e-6)
        assert found["destroyed_live_kw"][k] == pytest.approx(k0 * generated, rel=1e-6)
        assert found["closure_live_kw"][k] == pytest.approx(residual, rel=1e-6)
    assert left_over(batch.ledger, "live").abs().max() < 1e-6


def test_gauge_pressures_follow_a_moving_barometer(tmp_path):
    """5 bar(g) under 0.95 and 1.04 bar: the same gauge, other steam."""

    def barometer(t):
        return 0.95 + 0.09 * (t >= 1800)

    site = build(
        tmp_path,
        {
            "in": {"pressure": "PG", "temperature": "220 degC", "flow": "4 kg/s"},
            "out": {"pressure": "PVAC", "phase": "vapour", "flow": "balance"},
        },
        {"valve": {"kind": "control_volume", "ports": {"inlet": "in", "outlet": "out"}}},
        {"PG": {"unit": "bar(g)"}, "PVAC": {"unit": "bar(vac)"}},
    )
    batch = run(site, {"TA": 15.0, "PA": barometer, "PG": 5.0, "PVAC": 0.3})
    entering, leaving = rows(batch.streams, "in"), rows(batch.streams, "out")
    for k, baro in ((0, 0.95), (11, 1.04)):
        first, second = water(5 + baro, 220), water(baro - 0.3, x=1)
        assert entering["entropy_kj_kgk"][k] == pytest.approx(first.s, rel=1e-9)
        assert leaving["entropy_kj_kgk"][k] == pytest.approx(second.s, rel=1e-9)
        assert entering["exergy_live_kw"][k] == pytest.approx(
            4 * exergy(first, 15.0, baro), rel=1e-8
        )


@pytest.mark.parametrize("way", ["power", "exhaust"])
def test_a_drive_loses_the_same_whichever_is_solved(tmp_path, way):
    """Measured exhaust and solved power, or measured power and solved exhaust: one turbine."""
    m, exhaust_T, drive = 12.0, 180.0, 0.93
    live, exhaust = water(40, 420), water(3, exhaust_T)
    power = drive * m * (live.h - exhaust.h)
    wet = {"pressure": "3 bar(a)", "flow": "balance"}
    site = build(
        tmp_path,
        {
            "live": {"pressure": "40 bar(a)", "temperature": "420 degC", "flow": f"{m} kg/s"},
            "exhaust": wet
            | ({"temperature": "180 degC"} if way == "power" else {"enthalpy": "balance"}),
            "shaft": {
                "medium": "power",
                "power": "balance" if way == "power" else f"{power:.9f} kW",
            },
        },
        {
            "turbine": {
                "kind": "turbine",
                "drive_efficiency": drive,
                "ports": {"inlet": "live", "exhaust": "exhaust", "power": "shaft"},
            }
        },
    )
    batch = run(site, AMBIENT)
    assert last(batch.streams, "shaft", "energy_kw") == pytest.approx(power, rel=1e-9)
    assert last(batch.streams, "exhaust", "temperature_degc") == pytest.approx(exhaust_T, abs=1e-4)
    assert last(batch.equipment, "turbine", "closure_live_kw") == pytest.approx(0, abs=1e-5)
    assert last(batch.equipment, "turbine", "destroyed_live_kw") == pytest.approx(
        T0 * m * (exhaust.s - live.s) + power * (1 / drive - 1), rel=1e-7
    )
