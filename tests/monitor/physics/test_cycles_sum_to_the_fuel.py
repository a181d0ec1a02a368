"""Whole cycles: what each component destroys, from entropy alone, sums to the exergy of the fuel.

The second way knows no exergy: states by the iapws package, entropy out less entropy in times T0,
heat that leaves at T0 in whole, heat to a process at Tb with Q / Tb. Fuel's exergy = net work +
what the process and the surroundings get + destroyed.
"""

from __future__ import annotations

import pytest
from physics_site import build, exergy, last, run, water

AMBIENT = {"TA": 15.0, "PA": 1.0}
T0 = 288.15
LHV, RATIO = 40_000.0, 1.05
CLOSE = {"rel": 1e-7, "abs": 1e-3}


def _by_entropy(flows, equipment, powers, burnt, heat=("", 0.0, T0)):
    """Destruction [kW] of each component from masses, enthalpies and entropies alone.

    ``heat``: who delivers how much heat [kW] at which temperature [K].
    """
    found = {}
    user, delivered, Tb = heat
    for name, (inlets, outlets, shafts) in equipment.items():
        s_in, s_out = (sum(flows[i][0] * flows[i][1].s for i in ids) for ids in (inlets, outlets))
        h_in, h_out = (sum(flows[i][0] * flows[i][1].h for i in ids) for ids in (inlets, outlets))
        work = sum(powers.get(shaft, 0.0) for shaft in shafts)
        given = delivered if name == user else 0.0
        lost = burnt + h_in - h_out if name == "boiler" else 0.0
        if name != "boiler":
            # Every other component loses no heat: the test's own states must close.
            assert h_in - h_out - work - given == pytest.approx(0.0, abs=1e-6 * abs(h_in))
        found[name] = T0 * (s_out - s_in + given / Tb) + lost
    found["boiler"] += (RATIO - 1) * burnt
    return found


def _site(folder, flows, equipment, powers, burnt, heat=None):
    streams = {"oil": {"medium": "fuel", "flow": f"{burnt / LHV:.12f} kg/s",
                       "lower_heating_value": "40 MJ/kg", "exergy_ratio": RATIO}}  # fmt: skip
    for name, (flow, _, keys) in flows.items():
        streams[name] = {"flow": f"{flow:.12f} kg/s", **keys}
    for name, work in powers.items():
        streams[name] = {"medium": "power", "power": f"{abs(work):.9f} kW"}
    if heat is not None:
        _, delivered, Tb = heat
        streams["heat"] = {"medium": "heat", "heat": f"{delivered:.9f} kW", "counts_as": "used",
                           "boundary_temperature": f"{Tb - 273.15:.9f} degC"}  # fmt: skip
    return build(folder, streams, equipment)


def _pt(p, t):
    return water(p, t), {"pressure": f"{p} bar(a)", "temperature": f"{t} degC"}


def _px(p, x):
    keys = {"phase": "liquid"} if x == 0 else {"dryness": x}
    return water(p, x=x), {"pressure": f"{p} bar(a)", **keys}


def _check(tmp_path, flows, ports, kinds, powers, burnt, heat=None):
    """Compare component by component, and the sum with the fuel."""
    by_entropy = _by_entropy(flows, ports, powers, burnt, *([] if heat is None else [heat]))
    site = _site(tmp_path, flows, kinds, powers, burnt, heat)
    batch = run(site, AMBIENT)
    for name, expected in by_entropy.items():
        got = last(batch.equipment, name, "destroyed_live_kw")
        assert got == pytest.approx(expected, **CLOSE), name
        closure = last(batch.equipment, name, "closure_live_kw")
        assert closure == pytest.approx(0.0, abs=1e-6 * burnt), name
        assert got > 0, name
    gained = sum(
        sign * flows[name][0] * exergy(flows[name][1])
        for sign, name in ((1, "cw_out"), (-1, "cw_in"))
        if name in flows
    )
    if heat is not None:
        gained += heat[1] * (1 - T0 / heat[2])
    net = sum(powers.values())
    total = sum(last(batch.equipment, name, "destroyed_live_kw") for name in by_entropy)
    assert total + net + gained == pytest.approx(RATIO * burnt, rel=1e-6)
    ledger = batch.ledger.iloc[-1]
    assert ledger["destroyed_live_kw"] == pytest.approx(total, rel=1e-9)
    assert ledger["imbalance_live_kw"] == pytest.approx(0.0, abs=1e-5 * burnt)
    return batch, net


def test_extraction_and_an_open_heater_between_two_pumps(tmp_path):
    """Live steam 80 bar, 480 degC; bled at 6 bar into an open heater; wet exhaust at 0.08 bar."""
    m = 40.0
    live, taken, cold = _pt(80, 480), _pt(6, 210), _pt(6, 42)
    hot, feed, drip = _px(6, 0), _pt(95, 160.5), _pt(0.08, 41)
    bled = m * (hot[0].h - cold[0].h) / (taken[0].h - cold[0].h)
    exhaust = _px(0.08, 0.91)
    cw_in, cw_out = _pt(2, 14), _pt(2, 24)
    cooling = (m - bled) * (exhaust[0].h - drip[0].h) / (cw_out[0].h - cw_in[0].h)
    powers = {
        "shaft": m * live[0].h - bled * taken[0].h - (m - bled) * exhaust[0].h,
        "p1": -(m - bled) * (cold[0].h - drip[0].h),
        "p2": -m * (feed[0].h - hot[0].h),
    }
    burnt = m * (live[0].h - feed[0].h) / 0.9
    flows = {
        "live": (m, *live), "taken": (bled, *taken), "wet": (m - bled, *exhaust),
        "drip": (m - bled, *drip), "cold": (m - bled, *cold), "hot": (m, *hot),
        "feed": (m, *feed), "cw_in": (cooling, *cw_in), "cw_out": (cooling, *cw_out),
    }  # fmt: skip
    ports = {
        "boiler": (["feed"], ["live"], []),
        "turbine": (["live"], ["taken", "wet"], ["shaft"]),
        "condenser": (["wet", "cw_in"], ["drip", "cw_out"], []),
        "pump_1": (["drip"], ["cold"], ["p1"]),
        "heater": (["taken", "cold"], ["hot"], []),
        "pump_2": (["hot"], ["feed"], ["p2"]),
    }
    kinds = {
        "boiler": {"kind": "boiler", "ports": {"fuel": "oil", "feedwater": "feed",
                   "steam": "live"}},
        "turbine": {"kind": "turbine", "ports": {"inlet": "live", "extraction": "taken",
                    "exhaust": "wet", "power": "shaft"}},
        "condenser": {"kind": "condenser", "ports": {"steam": "wet", "cooling_in": "cw_in",
                      "condensate": "drip", "cooling_out": "cw_out"}},
        "pump_1": {"kind": "pump", "ports": {"inlet": "drip", "power": "p1", "outlet": "cold"}},
        "heater": {"kind": "open_feedwater_heater", "ports": {"steam": "taken", "water": "cold",
                   "feedwater": "hot"}},
        "pump_2": {"kind": "pump", "ports": {"inlet": "hot", "power": "p2", "outlet": "feed"}},
    }  # fmt: skip
    _, net = _check(tmp_path, flows, ports, kinds, powers, burnt)
    # Heat in less heat out is work: the first law of the whole cycle, eta = W / Q.
    rejected = (m - bled) * (exhaust[0].h - drip[0].h)
    heat = m * (live[0].h - feed[0].h)
    assert net == pytest.approx(heat - rejected, rel=1e-9)
    assert 0.25 < net / burnt < 0.40


def test_reheat_from_one_boiler_through_two_turbines(tmp_path):
    """The boiler reheats at 28 bar what the first turbine leaves."""
    m = 60.0
    live, cold_reheat, hot_reheat = _pt(140, 530), _pt(30, 330), _pt(28, 530)
    exhaust, drip, feed = _px(0.07, 0.96), _pt(0.07, 38), _pt(165, 40)
    cw_in, cw_out = _pt(2, 14), _pt(2, 24)
    cooling = m * (exhaust[0].h - drip[0].h) / (cw_out[0].h - cw_in[0].h)
    powers = {
        "hp": m * (live[0].h - cold_reheat[0].h),
        "lp": m * (hot_reheat[0].h - exhaust[0].h),
        "p": -m * (feed[0].h - drip[0].h),
    }
    heat = m * (live[0].h - feed[0].h + hot_reheat[0].h - cold_reheat[0].h)
    burnt = heat / 0.92
    flows = {
        "live": (m, *live), "crh": (m, *cold_reheat), "hrh": (m, *hot_reheat),
        "wet": (m, *exhaust), "drip": (m, *drip), "feed": (m, *feed),
        "cw_in": (cooling, *cw_in), "cw_out": (cooling, *cw_out),
    }  # fmt: skip
    ports = {
        "boiler": (["feed", "crh"], ["live", "hrh"], []),
        "first": (["live"], ["crh"], ["hp"]),
        "second": (["hrh"], ["wet"], ["lp"]),
        "condenser": (["wet", "cw_in"], ["drip", "cw_out"], []),
        "pump": (["drip"], ["feed"], ["p"]),
    }
    kinds = {
        "boiler": {"kind": "boiler", "ports": {"fuel": "oil", "feedwater": ["feed", "crh"],
                   "steam": ["live", "hrh"]}},
        "first": {"kind": "turbine", "ports": {"inlet": "live", "exhaust": "crh", "power": "hp"}},
        "second": {"kind": "turbine", "ports": {"inlet": "hrh", "exhaust": "wet", "power": "lp"}},
        "condenser": {"kind": "condenser", "ports": {"steam": "wet", "cooling_in": "cw_in",
                      "condensate": "drip", "cooling_out": "cw_out"}},
        "pump": {"kind": "pump", "ports": {"inlet": "drip", "power": "p", "outlet": "feed"}},
    }  # fmt: skip
    _, net = _check(tmp_path, flows, ports, kinds, powers, burnt)
    assert net == pytest.approx(heat - m * (exhaust[0].h - drip[0].h), rel=1e-9)


def test_back_pressure_with_a_process_user(tmp_path):
    """Live steam 60 bar, 470 degC; exhaust at 4 bar into a dryer at 120 degC, whose condensate
    comes back all."""
    m = 25.0
    live, exhaust, drip, feed = _pt(60, 470), _pt(4, 175), _pt(3.8, 105), _pt(75, 106)
    powers = {
        "shaft": m * (live[0].h - exhaust[0].h),
        "p": -m * (feed[0].h - drip[0].h),
    }
    heat = ("dryer", m * (exhaust[0].h - drip[0].h), 393.15)
    burnt = m * (live[0].h - feed[0].h) / 0.91
    flows = {"live": (m, *live), "back": (m, *exhaust), "drip": (m, *drip), "feed": (m, *feed)}
    ports = {
        "boiler": (["feed"], ["live"], []),
        "turbine": (["live"], ["back"], ["shaft"]),
        "dryer": (["back"], ["drip"], []),
        "pump": (["drip"], ["feed"], ["p"]),
    }
    kinds = {
        "boiler": {"kind": "boiler", "ports": {"fuel": "oil", "feedwater": "feed",
                   "steam": "live"}},
        "turbine": {"kind": "turbine", "ports": {"inlet": "live", "exhaust": "back",
                    "power": "shaft"}},
        "dryer": {"kind": "user", "ports": {"steam": "back", "condensate": "drip",
                  "heat": "heat"}},
        "pump": {"kind": "pump", "ports": {"inlet": "drip", "power": "p", "outlet": "feed"}},
    }  # fmt: skip
    batch, net = _check(tmp_path, flows, ports, kinds, powers, burnt, heat)
    # First law: all that the boiler puts in is work or process heat.
    assert net + heat[1] == pytest.approx(0.91 * burnt, rel=1e-9)
    # Second law for the whole: what is used of the fuel's exergy.
    used = (net + heat[1] * (1 - T0 / heat[2])) / (RATIO * burnt)
    ledger = batch.ledger.iloc[-1]
    # The ledger supplies the pump's power too, and uses the turbine's.
    pumped = -powers["p"]
    told = (ledger["used_live_kw"] - pumped) / (ledger["supplied_live_kw"] - pumped)
    assert told == pytest.approx(used, rel=1e-9)
    assert 0.25 < used < 0.45
