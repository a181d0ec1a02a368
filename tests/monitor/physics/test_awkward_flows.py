"""Flows that are zero, tiny, negative or hard to tell: finite figures, or a flag that says why."""

from __future__ import annotations

import numpy as np
import pytest
from physics_site import build, exergy, last, left_over, rows, run, water

from monitor.flags import Flag

AMBIENT = {"TA": 15.0, "PA": 1.0}
T0 = 288.15


def _has(flags, bit):
    return (flags.to_numpy() & int(bit)) != 0


@pytest.fixture
def condensing(tmp_path):
    """A turbine whose wet exhaust is solved from its power, and the condenser behind it."""
    return build(
        tmp_path,
        {
            "live": {"pressure": "60 bar(a)", "temperature": "460 degC", "flow": "FI"},
            "taken": {"pressure": "11 bar(a)", "temperature": "250 degC", "flow": "FX"},
            "wet": {"pressure": "0.08 bar(a)", "enthalpy": "balance", "flow": "balance"},
            "shaft": {"medium": "power", "power": "W"},
            "drip": {"pressure": "0.08 bar(a)", "phase": "liquid", "flow": "balance"},
            "cw_in": {"pressure": "2 bar(a)", "temperature": "12 degC", "flow": "500 kg/s"},
            "cw_out": {"pressure": "2 bar(a)", "temperature": "22 degC", "flow": "500 kg/s"},
        },
        {
            "turbine": {
                "kind": "turbine",
                "ports": {
                    "inlet": "live",
                    "extraction": "taken",
                    "exhaust": "wet",
                    "power": "shaft",
                },
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
        },
        {"FI": {"unit": "kg/s"}, "FX": {"unit": "kg/s"}, "W": {"unit": "kW"}},
    )


@pytest.mark.parametrize(
    ("live", "taken", "power"),
    [(0.02, 0.03, 0.0), (0.03, 0.0299, 5.0), (0.03, 0.029, -20.0), (0.0, 0.0, -20.0)],
)
def test_meters_of_a_stopped_turbine_do_not_blank_the_plant(condensing, live, taken, power):
    """Noise about zero leaves no enthalpy to be found, and nothing worth finding."""
    batch = run(condensing, AMBIENT | {"FI": live, "FX": taken, "W": power})
    ledger = batch.ledger
    assert np.isfinite(ledger["destroyed_live_kw"]).all()
    assert not _has(ledger["flag"], Flag.MISSING).any()
    assert left_over(ledger, "live").abs().max() < 1e-6
    assert _has(rows(batch.equipment, "turbine")["flag"], Flag.OFF).all()
    assert rows(batch.equipment, "turbine")["destroyed_live_kw"].abs().max() < 100


def test_a_stopped_turbine_without_its_power_meter_is_still_missing(condensing):
    batch = run(condensing, AMBIENT | {"FI": 0.03, "FX": 0.029, "W": np.nan})
    assert _has(batch.ledger["flag"], Flag.MISSING).all()
    assert batch.ledger["destroyed_live_kw"].isna().all()


def test_a_running_turbine_without_exhaust_keeps_its_figures(condensing):
    """All steam extracted: the exhaust's flow is the meters' error, and no enthalpy comes of it."""
    live, taken = water(60, 460), water(11, 250)
    power = 50 * (live.h - taken.h) + 200
    batch = run(condensing, AMBIENT | {"FI": 50.0, "FX": 49.95, "W": power})
    assert last(batch.streams, "wet", "exergy_live_kw") == 0
    assert last(batch.equipment, "turbine", "destroyed_live_kw") == pytest.approx(
        T0 * 50 * (taken.s - live.s), rel=2e-3
    )
    assert left_over(batch.ledger, "live").abs().max() < 1e-6


def test_a_small_flow_with_a_possible_enthalpy_keeps_it(condensing):
    """0.2 kg/s is less than the turbine's own threshold, and yet a fair result of the balance."""
    live, taken, wet = water(60, 460), water(11, 250), water(0.08, x=0.9)
    power = 20 * live.h - 19.8 * taken.h - 0.2 * wet.h
    batch = run(condensing, AMBIENT | {"FI": 20.0, "FX": 19.8, "W": power})
    assert last(batch.streams, "wet", "mass_flow_kg_s") == pytest.approx(0.2, rel=1e-9)
    assert last(batch.streams, "wet", "dryness") == pytest.approx(0.9, abs=1e-6)


def test_an_exhaust_that_flows_backwards_is_absent_and_says_so(condensing):
    batch = run(condensing, AMBIENT | {"FI": 50.0, "FX": 53.0, "W": 15_000.0})
    wet = rows(batch.streams, "wet")
    assert wet["exergy_live_kw"].isna().all()
    assert _has(wet["flag"], Flag.MISSING).all()
    assert _has(batch.ledger["flag"], Flag.MISSING).all()


def _station(folder):
    return build(
        folder,
        {
            "in": {"pressure": "60 bar(a)", "temperature": "460 degC", "flow": "8 kg/s"},
            "spray": {"pressure": "11 bar(a)", "temperature": "130 degC", "flow": "balance"},
            "out": {"pressure": "11 bar(a)", "temperature": "TR", "flow": "balance"},
        },
        {
            "station": {
                "kind": "letdown",
                "ports": {"inlet": "in", "spray": "spray", "outlet": "out"},
            }
        },
        {"TR": {"unit": "degC"}},
    )


@pytest.mark.parametrize("outlet", [129.5, 130.0, 130.2, 130.9])
def test_two_flows_that_enthalpies_do_not_tell_apart_are_absent(tmp_path, outlet):
    """At 130.2 degC the spray would come to 26 079 kg/s for 8 kg/s of steam."""
    batch = run(_station(tmp_path), AMBIENT | {"TR": outlet})
    spray = rows(batch.streams, "spray")
    assert spray["mass_flow_kg_s"].isna().all()
    assert _has(spray["flag"], Flag.MISSING).all()
    assert _has(batch.ledger["flag"], Flag.MISSING).all()


def test_two_flows_that_enthalpies_hardly_tell_apart_are_uncertain(tmp_path):
    batch = run(_station(tmp_path), AMBIENT | {"TR": 133.0})
    assert _has(rows(batch.streams, "spray")["flag"], Flag.UNCERTAIN).all()
    assert _has(rows(batch.equipment, "station")["flag"], Flag.UNCERTAIN).all()
    good = run(_station(tmp_path), AMBIENT | {"TR": 210.0})
    assert not _has(rows(good.streams, "spray")["flag"], Flag.UNCERTAIN).any()


@pytest.mark.parametrize(("pipe", "trickle"), [(40.0, 0.0), (np.nan, 0.0), (40.0, 0.02)])
def test_a_stagnant_pipe_does_not_value_what_is_unaccounted(tmp_path, pipe, trickle):
    """A vessel discharges; its charging pipe stands cold. What is missing left as its steam did."""

    def level(t):
        return 0.70 - 0.02 * t / 60 / 100

    site = build(
        tmp_path,
        {
            "charge": {"pressure": "12 bar(a)", "temperature": "TC", "flow": "FC"},
            "discharge": {"pressure": "9 bar(a)", "phase": "vapour", "flow": "2 kg/s"},
        },
        {
            "vessel": {
                "kind": "accumulator",
                "volume": "60 m^3",
                "level": "LV",
                "pressure": "PV",
                "ports": {"charge": "charge", "discharge": "discharge"},
            }
        },
        {
            "LV": {"unit": "1"},
            "PV": {"unit": "bar(a)"},
            "TC": {"unit": "degC"},
            "FC": {"unit": "kg/s"},
        },
    )
    batch = run(site, AMBIENT | {"LV": level, "PV": 9.0, "TC": pipe, "FC": trickle})
    wet, dry = water(9, x=0), water(9, x=1)
    fall = 60 * (level(0) - level(300)) / 300
    dm = -fall * (1 / wet.v - 1 / dry.v)
    ds = -fall * (wet.s / wet.v - dry.s / dry.v)
    gap = trickle - 2 - dm
    charge = water(12, 40.0)
    generated = 2 * dry.s - trickle * charge.s + gap * dry.s + ds
    assert last(batch.equipment, "vessel", "mass_imbalance_kg_s") == pytest.approx(gap, rel=1e-6)
    assert last(batch.equipment, "vessel", "unaccounted_live_kw") == pytest.approx(
        gap * exergy(dry), rel=1e-6
    )
    assert last(batch.equipment, "vessel", "destroyed_live_kw") == pytest.approx(
        T0 * generated, rel=1e-6
    )


def test_an_idle_header_with_a_lost_thermometer_still_has_an_account(tmp_path):
    """Nothing comes in, a meter shows 0.05 kg/s going out: the pipe without a state is passed."""
    site = build(
        tmp_path,
        {
            "a": {"pressure": "12 bar(a)", "temperature": "TT", "flow": "0 kg/s"},
            "b": {"pressure": "12 bar(a)", "temperature": "230 degC", "flow": "0 kg/s"},
            "o": {"pressure": "12 bar(a)", "temperature": "230 degC", "flow": "0.05 kg/s"},
        },
        {"header": {"kind": "header", "ports": {"inlet": ["a", "b"], "outlet": "o"}}},
        {"TT": {"unit": "degC"}},
    )
    batch = run(site, AMBIENT | {"TT": np.nan})
    assert last(batch.equipment, "header", "unaccounted_live_kw") == pytest.approx(
        -0.05 * exergy(water(12, 230)), rel=1e-8
    )
    assert last(batch.equipment, "header", "destroyed_live_kw") == pytest.approx(0, abs=1e-9)


def test_fuel_out_power_in_and_cold_heat_in_are_counted_with_their_signs(tmp_path):
    """Heat that comes in at -20 degC brings Q (1 - T0/Tb) < 0: it costs exergy to take it up."""
    cold, hot, q, Tb = water(5, 20), water(5, 110), 300.0, 253.15
    site = build(
        tmp_path,
        {
            "oil": {
                "medium": "fuel",
                "flow": "2 kg/s",
                "lower_heating_value": "40 MJ/kg",
                "exergy_ratio": 1.05,
            },
            "rest": {
                "medium": "fuel",
                "flow": "1.5 kg/s",
                "lower_heating_value": "40 MJ/kg",
                "exergy_ratio": 1.05,
            },
            "drive": {"medium": "power", "power": "500 kW"},
            "cold_heat": {"medium": "heat", "heat": "300 kW", "boundary_temperature": "-20 degC"},
            "cold": {"pressure": "5 bar(a)", "temperature": "20 degC", "flow": "50 kg/s"},
            "hot": {"pressure": "5 bar(a)", "temperature": "110 degC", "flow": "50 kg/s"},
        },
        {
            "heater": {
                "kind": "control_volume",
                "heat_loss": "balance",
                "boundary_temperature": "80 degC",
                "ports": {
                    "inlet": ["oil", "drive", "cold_heat", "cold"],
                    "outlet": ["rest", "hot"],
                },
            }
        },
    )
    batch = run(site, AMBIENT)
    lost = 0.5 * 40_000 + 500 + q - 50 * (hot.h - cold.h)
    generated = 50 * (hot.s - cold.s) - q / Tb + lost / 353.15
    assert last(batch.streams, "cold_heat", "exergy_live_kw") == pytest.approx(q * (1 - T0 / Tb))
    assert last(batch.equipment, "heater", "heat_loss_kw") == pytest.approx(lost, rel=1e-8)
    assert last(batch.equipment, "heater", "destroyed_live_kw") == pytest.approx(
        T0 * generated + 0.05 * 0.5 * 40_000, rel=1e-8
    )
    assert last(batch.equipment, "heater", "mass_imbalance_kg_s") == pytest.approx(0, abs=1e-12)
    assert left_over(batch.ledger, "live").abs().max() < 1e-6
