"""Flash vessel, vent, steam trap group, and the orifice that two of them share."""

from __future__ import annotations

import numpy as np
import pytest
from equipment_builders import dead, drawn, figures_of, signal, stated, water
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.equipment.account import account, balances
from monitor.equipment.nozzle import Orifice, zeuner_exponent
from monitor.thermo.water import saturated, state_ph

dead_temperatures = st.floats(-25.0, 38.0)


def _flash(flow, from_bar, to_bar, recovered=1.0, **options):
    hot = water("in", flow, p_bar=from_bar, x=0.0)
    liquid, vapour = saturated(to_bar * 1e5)
    ideal = float((hot.enthalpy[0] - liquid.enthalpy) / (vapour.enthalpy - liquid.enthalpy))
    steam = recovered * ideal * flow
    ports = {
        "inlet": hot,
        "steam": water("fs", steam, p_bar=to_bar, x=1.0),
        "condensate": water("co", flow - steam, p_bar=to_bar, x=0.0),
    }
    return drawn("flash_vessel", ports, **options), ideal


@settings(max_examples=40, deadline=None)
@given(st.floats(0.5, 50.0), st.floats(6.0, 60.0), st.floats(0.05, 0.9), dead_temperatures)
def test_flashing_destroys_and_its_two_counts_agree(flow, from_bar, ratio, t0):
    box, ideal = _flash(flow, from_bar, from_bar * ratio)
    counted = balances(box)
    got = account(box, counted, dead(t0))
    scale = float(got.exergy_in[0])
    assert got.destroyed[0] >= -1e-9 * scale
    assert abs(got.closure[0]) <= 1e-9 * scale
    assert got.fuel[0] - got.product[0] == pytest.approx(got.destroyed[0], abs=1e-9 * scale)
    figures = figures_of(box)
    assert figures["flash_share"].value[0] == pytest.approx(100 * ideal, rel=1e-9)
    assert figures["flash_recovery"].value[0] == pytest.approx(100.0, rel=1e-6)


def test_share_that_flashes_is_that_of_the_steam_tables():
    """10 bar to 1 bar: x = (762.7 - 417.4) / 2257.5 (IF97 saturation table, h in kJ/kg)."""
    _, ideal = _flash(1.0, 10.0, 1.0)
    assert ideal == pytest.approx((762.7 - 417.4) / 2257.5, abs=2e-4)


def test_flash_steam_that_goes_elsewhere_lowers_the_recovery():
    box, _ = _flash(10.0, 10.0, 1.2, recovered=0.8)
    assert figures_of(box)["flash_recovery"].value[0] == pytest.approx(80.0, rel=1e-9)


def test_a_recovery_solved_from_the_energy_balance_is_not_listed():
    box, _ = _flash(10.0, 10.0, 1.2)
    assert set(figures_of(drawn("flash_vessel", box.states, spare=set()))) == {"flash_share"}


@pytest.mark.parametrize("p_bar", [5.0, 10.0, 20.0, 40.0])
def test_choked_saturated_steam_follows_napiers_rule(p_bar):
    """W = 51.5 A p (lb/h, in2, psi absolute): API 520 part 1, steam, all factors 1 (from memory).

    In SI 1.459e-3 kg/(s m2 Pa); the isentropic formula comes within 3 % of the empirical rule.
    """
    napier = 51.5 * 0.45359237 / 3600 / 0.0254**2 / 6894.757 * p_bar * 1e5
    vapour = saturated(np.atleast_1d(p_bar * 1e5))[1]
    one = np.ones(1)
    hole = Orifice(diameter=np.sqrt(4 / np.pi), discharge_coefficient=1.0)
    exponent = zeuner_exponent(one, superheated=0 * one)
    flow = hole.flow(vapour.pressure, vapour.volume, exponent, one * 1e5)
    assert flow[0] == pytest.approx(napier, rel=0.03)


@given(st.floats(2e5, 60e5), st.floats(0.0, 1.5), st.floats(0.0, 1.5))
def test_a_lower_pressure_behind_never_passes_less_and_none_flows_back(p, one, other):
    hole = Orifice(0.01, 0.7)
    p, volume, k = np.atleast_1d(p), np.atleast_1d(0.2), np.atleast_1d(1.3)
    low, high = sorted((one, other))
    easy, hard = (hole.flow(p, volume, k, p * r)[0] for r in (low, high))
    assert easy >= hard * (1 - 1e-12)
    assert hard >= 0
    assert hole.flow(p, volume, k, p * 1.2)[0] == 0
    # Choked: nothing that happens far downstream is felt.
    assert hole.flow(p, volume, k, p * 0.1)[0] == hole.flow(p, volume, k, p * 0.4)[0]


def _vent(flow, **options):
    inlet = water("in", flow, p_bar=12.0, T_C=230.0)
    outlet = water("out", flow, p_bar=1.01325, h=inlet.enthalpy)
    return drawn("vent", {"inlet": inlet, "outlet": outlet}, **options)


def test_everything_a_vent_takes_is_destroyed_or_lost():
    box, at = _vent(2.0), dead()
    got = account(box, balances(box), at)
    assert got.product[0] == 0
    assert got.destroyed[0] > 0
    lost = box.only("outlet").exergy(at)[0]
    assert got.fuel[0] == pytest.approx(got.destroyed[0] + lost, rel=1e-12)
    assert figures_of(box) == {}


def test_a_vent_shows_what_passes_when_closed_and_what_its_hole_would_pass():
    closed = {"position": signal([0.0, 0.0])}
    figures = figures_of(_vent(0.25, signals=closed, position="ZV", orifice="8 mm"))
    assert figures["passing_flow"].value[0] == pytest.approx(0.9)
    inlet = water("in", 1.0, p_bar=12.0, T_C=230.0)
    area, k = np.pi / 4 * 0.008**2, 1.3
    critical = (2 / (k + 1)) ** ((k + 1) / (2 * (k - 1)))
    choked = 0.7 * area * np.sqrt(k * 12e5 / inlet.volume[0]) * critical
    assert figures["orifice_flow"].value[0] == pytest.approx(3.6 * choked, rel=1e-9)
    opened = {"position": signal([0.4, 0.4])}
    figures = figures_of(_vent(0.25, signals=opened, position="ZV"))
    assert np.isnan(figures["passing_flow"].value[0])


def _traps(flow, blown, **options):
    liquid, vapour = saturated(10e5)
    h = liquid.enthalpy + blown * (vapour.enthalpy - liquid.enthalpy)
    inlet = water("in", flow, p_bar=10.0, h=h)
    outlet = water("out", flow, p_bar=2.0, h=inlet.enthalpy)
    return drawn("trap_group", {"inlet": inlet, "outlet": outlet}, **options)


@settings(max_examples=30, deadline=None)
@given(st.floats(0.1, 20.0), st.floats(0.0, 0.5), dead_temperatures)
def test_blow_through_is_the_live_steam_in_the_condensate(flow, blown, t0):
    box = _traps(flow, blown)
    figures = figures_of(box)
    assert figures["blow_through"].value[0] == pytest.approx(100 * blown, abs=1e-6)
    assert figures["blow_through_flow"].value[0] == pytest.approx(3.6 * flow * blown, abs=1e-6)
    got = account(box, balances(box), dead(t0))
    assert got.destroyed[0] > 0
    assert abs(got.closure[0]) <= 1e-9 * got.exergy_in[0]


def test_condensate_stated_as_saturated_says_nothing_of_its_traps():
    box = _traps(5.0, 0.0)
    said = stated(
        **{
            "in": {"pressure": "P", "phase": "liquid", "flow": "F"},
            "out": {"pressure": "2 bar(a)", "enthalpy": "balance", "flow": "balance"},
        }
    )
    assert figures_of(drawn("trap_group", box.states, statements=said)) == {}
    told = stated(**{"in": {"pressure": "P", "enthalpy": "balance", "flow": "F"}})
    assert "blow_through" in figures_of(drawn("trap_group", box.states, statements=told))


def test_failed_traps_are_counted_with_their_orifice_or_not_at_all():
    one = figures_of(_traps(5.0, 0.01, failed_traps=1, orifice="4 mm"))["orifice_flow"]
    five = figures_of(_traps(5.0, 0.01, failed_traps=5, orifice="4 mm"))["orifice_flow"]
    assert five.value[0] == pytest.approx(5 * one.value[0])
    with pytest.raises(ValueError, match="go together"):
        _traps(5.0, 0.01, failed_traps=3)


def test_condensate_below_saturation_blows_nothing():
    cold = water("in", 5.0, p_bar=10.0, T_C=150.0)
    outlet = water("out", 5.0, p_bar=2.0, h=cold.enthalpy)
    figures = figures_of(drawn("trap_group", {"inlet": cold, "outlet": outlet}))
    assert figures["blow_through"].value[0] < 0
    assert figures["blow_through_flow"].value[0] == 0
    assert state_ph(2e5, cold.enthalpy).dryness[0] > 0  # it flashes behind the trap all the same
