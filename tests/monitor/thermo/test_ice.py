"""Ice Ih against IAPWS R10-06(2009), its melting line against IAPWS R14-08(2011)."""

from __future__ import annotations

import numpy as np
import pytest
from iapws._iapws import _Melting_Pressure
from thermo_reference import rows

from monitor.thermo.ice import ice_state, melting_temperature

QUANTITIES = {
    "g": lambda ice, _p, _t: ice.gibbs,
    "dg_dp_T": lambda ice, _p, _t: ice.volume,
    "dg_dT_p": lambda ice, _p, _t: -ice.entropy,
    "h": lambda ice, _p, _t: ice.enthalpy,
    "s": lambda ice, _p, _t: ice.entropy,
    "f": lambda ice, p, _t: ice.gibbs - p * ice.volume,
    "u": lambda ice, p, _t: ice.enthalpy - p * ice.volume,
    "rho": lambda ice, _p, _t: 1.0 / ice.volume,
}
CHECKED = [
    r
    for kind in ("check value", "own dead-state value")
    for r in rows("ice.csv", kind=kind)
    if r["quantity"] in QUANTITIES
]


@pytest.mark.parametrize("row", CHECKED, ids=lambda r: f"{r['point']}, {r['quantity']}")
def test_a_check_value_of_ice_is_reproduced(row):
    # IAPWS R10-06(2009) Table 6, twelve digits; own values from iapws and gsw, nine digits. Near
    # zero (g and f at the triple point) the reference state's own digits end at 1e-8 J/kg.
    pressure, temperature = float(row["p_Pa"]), float(row["T_K"])
    found = QUANTITIES[row["quantity"]](ice_state(pressure, temperature), pressure, temperature)
    digits = 1e-11 if row["kind"] == "check value" else 5e-9
    near_zero = 2e-8 if row["unit"] == "J/kg" else 0.0
    assert found == pytest.approx(float(row["value"]), rel=digits, abs=near_zero)


def test_the_check_values_cover_three_points_and_seven_temperatures():
    points = {(r["T_K"], r["p_Pa"]) for r in CHECKED}
    assert len(points) == 3 + len({r["T_K"] for r in rows("ice.csv", kind="own dead-state value")})


def test_entropy_and_volume_are_the_slopes_of_the_gibbs_energy():
    pressure, temperature = np.meshgrid([3e4, 1e5, 2e5], [180.0, 230.0, 260.0, 272.0])
    by_t = (
        ice_state(pressure, temperature + 0.01).gibbs
        - ice_state(pressure, temperature - 0.01).gibbs
    )
    by_p = (
        ice_state(pressure + 1e4, temperature).gibbs - ice_state(pressure - 1e4, temperature).gibbs
    )
    ice = ice_state(pressure, temperature)
    assert -by_t / 0.02 == pytest.approx(ice.entropy, rel=1e-6)
    assert by_p / 2e4 == pytest.approx(ice.volume, rel=1e-6)


def test_outside_its_range_ice_is_absent():
    pressure = [0.0, -1.0, 211e6, np.nan, np.inf, 1e5, 1e5, 1e5]
    temperature = [260.0, 260.0, 260.0, 260.0, 260.0, 0.0, 273.17, np.nan]
    ice = ice_state(pressure, temperature)
    for values in (ice.enthalpy, ice.entropy, ice.volume, ice.gibbs):
        assert np.isnan(values).all()


def test_ice_melts_at_the_published_temperature_at_one_atmosphere():
    # IAPWS R10-06(2009) Table 6 names 273.152519 K the normal-pressure melting point.
    assert melting_temperature(101325.0) == pytest.approx(273.152519, abs=1e-6)
    # The triple point, IAPWS R14-08(2011).
    assert melting_temperature(611.657) == pytest.approx(273.16, abs=1e-9)
    # R14-08(2011) check value for ice Ih, from memory: 138.268 MPa at 260 K.
    assert melting_temperature(138.268e6) == pytest.approx(260.0, abs=1e-4)


@pytest.mark.parametrize("temperature", [252.0, 260.0, 270.0, 273.0, 273.14, 273.15, 273.155])
def test_the_melting_line_agrees_with_an_independent_library(temperature):
    # iapws, IAPWS R14-08(2011); its pressure is in MPa, or lacks the triple pressure's unit.
    pressure = _Melting_Pressure(temperature, "Ih") * 1e6
    assert melting_temperature(pressure) == pytest.approx(temperature, abs=1e-7)


def test_there_is_no_melting_of_ice_ih_below_the_triple_pressure_or_above_209_mpa():
    assert np.isnan(melting_temperature([611.0, 0.0, -1.0, 209e6, np.nan, np.inf])).all()
