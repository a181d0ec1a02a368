"""Turbines with inductions, gland steam, a drive in two parts and a wet exhaust."""

from __future__ import annotations

import pytest
from equipment_builders import dead, drawn, figures_of, power, stated, water
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.equipment.account import account, balances
from monitor.flags import Flag
from monitor.thermo.water import state_ps

dead_temperatures = st.floats(-25.0, 38.0)
flows = st.floats(1.0, 60.0)


def _expanded(name, source, p_bar, efficiency, flow):
    ideal = state_ps(p_bar * 1e5, source.entropy).enthalpy
    h = source.enthalpy - efficiency * (source.enthalpy - ideal)
    return water(name, flow, p_bar=p_bar, h=h)


def _admission(main, admitted, efficiency, leak=0.0, drive=1.0, **options):
    """Live steam and low-pressure steam expand side by side to 0.1 bar, at one efficiency."""
    inlet = water("in", main, p_bar=42.0, T_C=420.0)
    low = water("lp", admitted, p_bar=4.0, T_C=170.0)
    gland = water("gl", leak, p_bar=42.0, h=inlet.enthalpy)
    parts = (
        _expanded("a", inlet, 0.1, efficiency, main - leak),
        _expanded("b", low, 0.1, efficiency, admitted),
    )
    flow = main - leak + admitted
    exhaust = water("out", flow, p_bar=0.1, h=sum(p.energy for p in parts) / flow)
    shaft = inlet.energy + low.energy - gland.energy - exhaust.energy
    ports = {
        "inlet": inlet,
        "induction": low,
        "leak_off": [gland] if leak else [],
        "exhaust": exhaust,
        "power": power("w", shaft * drive),
    }
    return drawn("turbine", ports, order=["lp"], **options)


@settings(max_examples=40, deadline=None)
@given(flows, flows, st.floats(0.3, 1.0), st.floats(0.0, 0.1), dead_temperatures)
def test_steam_admitted_on_the_way_expands_at_the_turbines_efficiency(main, lp, eta, leak, t0):
    box = _admission(main, lp, eta, leak * main)
    figures = figures_of(box)
    assert set(figures) == {"eta_s_1", "steam_rate"}
    assert figures["eta_s_1"].value[0] == pytest.approx(100 * eta, rel=1e-6)
    counted = balances(box)
    got = account(box, counted, dead(t0))
    scale = float(got.exergy_in[0])
    assert got.destroyed[0] >= -1e-9 * scale
    assert abs(got.closure[0]) <= 1e-9 * scale
    assert got.fuel[0] - got.product[0] == pytest.approx(got.destroyed[0], abs=1e-9 * scale)


def test_an_induction_below_an_extraction_belongs_to_the_section_after_it():
    inlet = water("in", 30.0, p_bar=62.0, T_C=470.0)
    extraction = _expanded("ex", inlet, 4.0, 0.8, 10.0)
    low = water("lp", 5.0, p_bar=4.0, T_C=190.0)
    main, side = (
        _expanded("a", extraction, 0.1, 0.75, 20.0),
        _expanded("b", low, 0.1, 0.75, 5.0),
    )
    exhaust = water("out", 25.0, p_bar=0.1, h=(main.energy + side.energy) / 25.0)
    ports = {
        "inlet": inlet,
        "induction": low,
        "extraction": extraction,
        "exhaust": exhaust,
        "power": power("w", 1e7),
    }
    figures = figures_of(drawn("turbine", ports, order=["ex", "lp"]))
    assert figures["eta_s_1"].value[0] == pytest.approx(80.0, rel=1e-6)
    assert figures["eta_s_2"].value[0] == pytest.approx(75.0, rel=1e-6)
    before = figures_of(drawn("turbine", ports, order=["lp", "ex"]))
    assert before["eta_s_1"].value[0] != pytest.approx(80.0, abs=0.1)


def test_an_induction_without_its_place_is_told():
    box = _admission(30.0, 5.0, 0.8)
    complain = box.item.kind.complain
    assert complain(box.item, {}) == []
    unplaced = drawn("turbine", box.states)
    (text,) = complain(unplaced.item, {})
    assert "as met: lp" in text
    steam = water("in", 30.0, p_bar=62.0, T_C=470.0)
    ports = {
        "inlet": steam,
        "extraction": [water("x1", 5.0, p_bar=12.0, T_C=280.0), water("x2", 5, p_bar=4, T_C=180)],
        "exhaust": water("out", 20.0, p_bar=1.0, T_C=120.0),
        "power": power("w", 1e7),
    }
    assert complain(drawn("turbine", ports).item, {}) == []
    (text,) = complain(drawn("turbine", ports, order=["x2", "x1"]).item, {})
    assert "go downstream" in text


def test_gland_steam_passes_no_section():
    with_leak = figures_of(_admission(30.0, 5.0, 0.8, leak=2.0))["eta_s_1"]
    without = figures_of(_admission(28.0, 5.0, 0.8))["eta_s_1"]
    assert with_leak.weight[0] == pytest.approx(without.weight[0], rel=1e-12)


def test_mechanical_and_generator_losses_are_the_drives_in_two_parts():
    box = _admission(30.0, 5.0, 0.8, drive=0.99 * 0.975, mechanical_efficiency=0.99,
                     generator_efficiency=0.975)  # fmt: skip
    counted = balances(box)
    shaft = box.only("power").energy[0]
    assert abs(counted.energy_imbalance[0]) <= 1e-9 * shaft
    assert counted.unmeasured_heat[0] == pytest.approx(shaft * (1 / (0.99 * 0.975) - 1))
    with pytest.raises(ValueError, match="give it, or give the two"):
        _admission(30.0, 5.0, 0.8, drive_efficiency=0.96, generator_efficiency=0.97)


@pytest.mark.parametrize(("x", "flagged"), [(0.93, False), (0.86, True)])
def test_an_exhaust_wetter_than_its_limit_is_flagged(x, flagged):
    ports = {
        "inlet": water("in", 10.0, p_bar=40.0, T_C=400.0),
        "exhaust": water("out", 10.0, p_bar=0.08, x=x),
        "power": power("w", 8e6),
    }
    said = stated(out={"pressure": "P", "enthalpy": "balance", "flow": "balance"})
    figures = figures_of(drawn("turbine", ports, statements=said))
    moisture = figures["exhaust_moisture"]
    assert moisture.value[0] == pytest.approx(100 * (1 - x))
    assert bool(moisture.flag[0] & Flag.MOISTURE) is flagged
    dry = stated(out={"pressure": "P", "temperature": "T", "flow": "balance"})
    assert "exhaust_moisture" not in figures_of(drawn("turbine", ports, statements=dry))


def test_a_sections_efficiency_follows_its_own_flow():
    ports = {
        "inlet": water("in", 30.0, p_bar=62.0, T_C=470.0),
        "leak_off": water("gl", 0.5, p_bar=60.0, T_C=455.0),
        "extraction": [water("x1", 8.0, p_bar=12.0, T_C=280.0), water("x2", 4, p_bar=4, T_C=180)],
        "induction": water("lp", 3.0, p_bar=6.0, T_C=190.0),
        "exhaust": water("out", 20.5, p_bar=1.0, T_C=120.0),
        "power": power("w", 1e7),
    }
    item = drawn("turbine", ports, order=["x1", "lp", "x2"]).item
    loads = {f.name: f.load_streams for f in item.kind.figures(item)}
    first = ((1.0, "in"), (-1.0, "gl"))
    assert loads["eta_s_1"] == first
    assert loads["eta_s_2"] == (*first, (-1.0, "x1"))
    assert loads["eta_s_3"] == (*first, (-1.0, "x1"), (1.0, "lp"), (-1.0, "x2"))
    plain = drawn("turbine", {k: ports[k] for k in ("inlet", "exhaust", "power")}).item
    assert all(f.load_streams == () for f in plain.kind.figures(plain))
