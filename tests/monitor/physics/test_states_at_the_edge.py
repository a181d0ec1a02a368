"""States at saturation, outside the formulation, or without a reading; and both dead states."""

from __future__ import annotations

import numpy as np
import pytest
from iapws import IAPWS97
from physics_site import build, exergy, last, left_over, rows, run, water

from monitor.flags import Flag

AMBIENT = {"TA": 15.0, "PA": 1.0}
BOILING = IAPWS97(P=1.0, x=0).T - 273.15  # 179.89 degC at 10 bar


def _flag(batch, stream):
    return Flag(int(rows(batch.streams, stream)["flag"].iloc[-1]))


def _pipe(folder, *, unit="bar(a)", **inlet):
    return build(
        folder,
        {
            "in": {"pressure": "P", "temperature": "T", "flow": "5 kg/s"} | inlet,
            "out": {"pressure": "4 bar(a)", "phase": "vapour", "flow": "5 kg/s"},
        },
        {"valve": {"kind": "control_volume", "ports": {"inlet": "in", "outlet": "out"}}},
        {"P": {"unit": unit}, "T": {"unit": "degC"}},
    )


@pytest.mark.parametrize(
    ("phase", "off", "temperature", "flag"),
    [
        ("vapour", +5.0, BOILING + 5.0, Flag(0)),
        ("vapour", +1.0, BOILING + 1.0, Flag(0)),
        ("vapour", -1.0, None, Flag.SIDE_ASSUMED),
        ("vapour", -3.0, None, Flag.SIDE_ASSUMED | Flag.UNCERTAIN),
        ("liquid", -5.0, BOILING - 5.0, Flag(0)),
        ("liquid", +1.0, None, Flag.SIDE_ASSUMED),
        ("liquid", +3.0, None, Flag.SIDE_ASSUMED | Flag.UNCERTAIN),
    ],
)
def test_a_stated_phase_decides_where_the_thermometer_is_on_the_wrong_side(
    tmp_path, phase, off, temperature, flag
):
    batch = run(_pipe(tmp_path, phase=phase), AMBIENT | {"P": 10.0, "T": BOILING + off})
    expected = (
        water(10, x=1.0 if phase == "vapour" else 0.0)
        if temperature is None
        else water(10, temperature)
    )
    assert last(batch.streams, "in", "enthalpy_kj_kg") == pytest.approx(expected.h, rel=1e-8)
    assert last(batch.streams, "in", "entropy_kj_kgk") == pytest.approx(expected.s, rel=1e-8)
    assert _flag(batch, "in") == flag


@pytest.mark.parametrize("off", [-1.5, -0.1, 0.1, 1.5])
def test_without_a_phase_the_readings_decide_and_say_that_they_are_near(tmp_path, off):
    batch = run(_pipe(tmp_path), AMBIENT | {"P": 10.0, "T": BOILING + off})
    expected = water(10, BOILING + off)
    assert last(batch.streams, "in", "enthalpy_kj_kg") == pytest.approx(expected.h, rel=1e-8)
    assert _flag(batch, "in") == Flag.NEAR_SATURATION


def test_exactly_on_saturation_nothing_is_guessed(tmp_path):
    batch = run(_pipe(tmp_path), AMBIENT | {"P": 10.0, "T": BOILING})
    assert np.isnan(last(batch.streams, "in", "exergy_live_kw"))
    assert _flag(batch, "in") == Flag.NEAR_SATURATION | Flag.OUT_OF_REGION
    assert batch.ledger["destroyed_live_kw"].isna().all()


@pytest.mark.parametrize("phase", [{}, {"phase": "vapour"}, {"phase": "liquid"}])
@pytest.mark.parametrize("degc", [340.0, 380.0, 420.0, 560.0])
def test_above_the_critical_pressure_a_phase_means_nothing(tmp_path, phase, degc):
    """250 bar, through region 3 and beyond."""
    batch = run(_pipe(tmp_path, **phase), AMBIENT | {"P": 250.0, "T": degc})
    expected = water(250, degc)
    assert last(batch.streams, "in", "enthalpy_kj_kg") == pytest.approx(expected.h, abs=1e-4)
    assert last(batch.streams, "in", "exergy_live_kw") == pytest.approx(
        5 * exergy(expected), abs=1e-3
    )
    assert _flag(batch, "in") == Flag(0)


def test_a_vacuum_deeper_than_the_barometer_is_outside_and_not_a_state(tmp_path):
    site = _pipe(tmp_path, unit="mbar(vac)", temperature="40 degC")
    good = run(site, AMBIENT | {"P": 950.0, "T": 0.0})
    assert last(good.streams, "in", "pressure_bar") == pytest.approx(0.05)
    deep = run(site, AMBIENT | {"P": 1005.0, "T": 0.0})
    assert _flag(deep, "in") & Flag.OUT_OF_REGION
    assert np.isnan(last(deep.streams, "in", "exergy_live_kw"))


def test_a_lost_thermometer_takes_its_own_equipment_and_the_ledger_only(tmp_path):
    site = build(
        tmp_path,
        {
            "a": {"pressure": "20 bar(a)", "temperature": "TX", "flow": "3 kg/s"},
            "b": {"pressure": "8 bar(a)", "temperature": "220 degC", "flow": "3 kg/s"},
            "c": {"pressure": "20 bar(a)", "temperature": "300 degC", "flow": "4 kg/s"},
            "d": {"pressure": "8 bar(a)", "temperature": "280 degC", "flow": "4 kg/s"},
        },
        {
            "one": {"kind": "letdown", "ports": {"inlet": "a", "outlet": "b"}},
            "two": {"kind": "letdown", "ports": {"inlet": "c", "outlet": "d"}},
        },
        {"TX": {"unit": "degC"}},
    )
    batch = run(site, AMBIENT | {"TX": np.nan})
    one, two = (rows(batch.equipment, name) for name in ("one", "two"))
    assert one["destroyed_live_kw"].isna().all()
    assert ((one["flag"] & int(Flag.MISSING)) != 0).all()
    expected = 288.15 * 4 * (water(8, 280).s - water(20, 300).s)
    np.testing.assert_allclose(two["destroyed_live_kw"], expected, rtol=1e-8)
    assert (two["flag"] == 0).all()
    assert batch.ledger["destroyed_live_kw"].isna().all()


def test_the_ledger_closes_at_both_dead_states_with_a_frozen_reference(tmp_path):
    """An adiabatic valve: destruction at two dead states is as their temperatures, ice or not."""
    site = build(
        tmp_path,
        {
            "in": {"pressure": "20 bar(a)", "temperature": "300 degC", "flow": "4.2 kg/s"},
            "out": {"pressure": "8 bar(a)", "temperature": "280 degC", "flow": "4 kg/s"},
        },
        {"valve": {"kind": "letdown", "ports": {"inlet": "in", "outlet": "out"}}},
        dead={"reference_temperature": "-10 degC", "reference_pressure": "0.95 bar(a)"},
    )
    batch = run(site, {"TA": 28.0, "PA": 1.02})
    valve = rows(batch.equipment, "valve")
    ratio = valve["destroyed_reference_kw"] / valve["destroyed_live_kw"]
    np.testing.assert_allclose(ratio, 263.15 / 301.15, rtol=1e-12)
    assert valve["unaccounted_live_kw"].iloc[-1] == pytest.approx(
        0.2 * exergy(water(20, 300), 28.0, 1.02), rel=1e-7
    )
    assert valve["closure_live_kw"].iloc[-1] == pytest.approx(
        4 * (water(20, 300).h - water(8, 280).h), rel=1e-7
    )
    for name in ("live", "reference"):
        assert left_over(batch.ledger, name).abs().max() < 1e-8
