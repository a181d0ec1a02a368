"""Ten thousand states beside two independent libraries, close enough to tell a wrong coefficient.

Largest differences found, regions 1 and 2: 2e-8 J/kg in h, 3e-11 J/(kg K) in s, 5e-14 of v. In
region 3 beside iapws: 2e-7 J/kg, 3e-10 J/(kg K), and 5e-13 of p. The limits below are some thirty
times wider; a coefficient that is wrong by a millionth of itself passes none of them.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from iapws._iapws import _Ice, _Melting_Pressure
from iapws.iapws97 import _P23_T, _PSat_T, _TSat_P
from independent_steam import by_iapws, by_seuif97, contributions, regions, sample

from monitor.thermo import ice, region3, saturation_line
from monitor.thermo.water import saturated, saturation_pressure, saturation_temperature, state_pt

LIMITS = {1: (5e-7, 1e-9, 2e-12), 2: (5e-7, 1e-9, 2e-12), 5: (5e-7, 1e-9, 2e-12),
          3: (5e-6, 1e-8, 2e-11)}  # fmt: skip
"""By region: h [J/kg], s [J/(kg K)], relative v (in region 3, relative p)."""

A_MILLIONTH = 1e-6


@cache
def _states(name):
    """Pressures, temperatures, iapws's regions and our h, s, v of a named sample."""
    pressure, temperature = {
        # A plant up to 300 bar, condenser to superheater.
        "plant": lambda: sample(
            10_000, lowest=3e3, highest=30e6, coldest=278.15, hottest=893.15, seed=20260801
        ),
        "whole formulation": lambda: sample(
            10_000, lowest=700.0, highest=100e6, coldest=273.2, hottest=1073.1, seed=20260802
        ),
        "region 5": lambda: sample(
            1000, lowest=700.0, highest=50e6, coldest=1073.2, hottest=2273.1, seed=20260803
        ),
        "around critical": lambda: sample(
            1000, lowest=17e6, highest=40e6, coldest=623.2, hottest=680.0, seed=20260804
        ),
    }[name]()
    state = state_pt(pressure, temperature)
    assert state.valid.all()
    ours = np.column_stack([state.enthalpy, state.entropy, state.volume])
    return pressure, temperature, regions(pressure, temperature), ours


def _exceeds(ours, theirs, region):
    """Whether some state differs by more than the region's limits."""
    difference = np.abs(theirs - ours)
    difference[:, 2] /= ours[:, 2]
    return bool(np.any(difference > LIMITS[region]))


@pytest.mark.parametrize("name", ["plant", "whole formulation"])
def test_seuif97_agrees_over_ten_thousand_states(name):
    pressure, temperature, region, ours = _states(name)
    assert len(pressure) == 10_000
    theirs = by_seuif97(pressure, temperature)
    for number in (1, 2):
        there = region == number
        assert there.sum() > 1500
        assert not _exceeds(ours[there], theirs[there], number)
    # Its region 3 stops at backward equations, 4 J/kg off, and far more beside the critical point.
    clear = (region == 3) & ((temperature > 655.0) | (pressure > 24e6))
    assert clear.any()
    assert np.max(np.abs(theirs - ours)[clear, 0]) < 5.0


@pytest.mark.parametrize("name", ["plant", "whole formulation", "region 5", "around critical"])
def test_iapws_agrees_over_ten_thousand_states(name):
    pressure, temperature, region, ours = _states(name)
    theirs, its_pressure = by_iapws(pressure, temperature, ours[:, 2])
    for number in np.unique(region):
        there = region == number
        assert not _exceeds(ours[there], theirs[there], number)
    # In region 3 the volume is ours: the pressure must come back from it.
    assert np.max(np.abs(its_pressure / pressure - 1.0)) < LIMITS[3][2]


@pytest.mark.parametrize("number", [1, 2, 3, 5])
def test_no_coefficient_of_a_region_can_be_wrong_by_a_millionth(number):
    """Each coefficient of an independent table in turn: the comparison must notice every one."""
    caught = None
    for name in ("plant", "whole formulation", "region 5", "around critical"):
        pressure, temperature, region, ours = _states(name)
        there = region == number
        if not there.any():
            continue
        state = (pressure[there], temperature[there], ours[there, 2])
        parts, fixed = contributions(number, *state)
        right = parts.sum(axis=1) + fixed
        own = ours[there].copy()
        if number == 3:
            own[:, 2] = pressure[there]
        assert not _exceeds(own, right, number)
        found = np.array(
            [_exceeds(own, right + A_MILLIONTH * parts[:, k], number) for k in range(len(parts[0]))]
        )
        caught = found if caught is None else caught | found
    assert len(caught) == {1: 34, 2: 9 + 43, 3: 40, 5: 6 + 6}[number]
    assert caught.all()


# ---- the coefficients that this package carries itself


def _region_3_agrees():
    density, temperature = np.meshgrid(np.linspace(115.0, 760.0, 30), np.linspace(624.0, 860.0, 30))
    density, temperature = density.ravel(), temperature.ravel()
    at = region3.helmholtz(density, temperature)
    ours = np.column_stack([at.enthalpy, at.entropy, at.pressure])
    theirs = contributions(3, density, temperature, 1.0 / density)[0].sum(axis=1)
    slope = (at.stiffness, at.tension, at.capacity)
    assert all(np.isfinite(part).all() for part in slope)
    return not _exceeds(ours, theirs, 3)


def _boundary_agrees():
    temperature = np.linspace(623.15, 863.15, 50)
    pressure = region3.boundary_pressure(temperature)
    theirs = np.array([_P23_T(t) for t in temperature]) * 1e6
    again = region3.boundary_temperature(pressure)
    return bool(
        np.all(np.abs(pressure / theirs - 1.0) < 1e-12)
        and np.all(np.abs(again - temperature) < 1e-6)
    )


@cache
def _their_saturation():
    temperature = np.linspace(273.1501, 647.09, 300)
    pressure = np.array([_PSat_T(t) for t in temperature])
    return temperature, pressure * 1e6, np.array([_TSat_P(p) for p in pressure])


def _saturation_agrees():
    temperature, pressure, boiling = _their_saturation()
    return bool(
        np.all(np.abs(saturation_pressure(temperature) / pressure - 1.0) < 1e-10)
        and np.all(np.abs(saturation_temperature(pressure) - boiling) < 1e-8)
    )


@cache
def _their_ice():
    rng = np.random.default_rng(11)
    temperature, pressure = rng.uniform(100.0, 251.0, 150), rng.uniform(1e3, 209e6, 150)
    found = [_Ice(t, p / 1e6) for t, p in zip(temperature, pressure, strict=True)]
    return temperature, pressure, np.array([[i["h"] * 1e3, i["s"] * 1e3, i["v"]] for i in found])


def _ice_agrees():
    temperature, pressure, theirs = _their_ice()
    state = ice.ice_state(pressure, temperature)
    ours = np.column_stack([state.enthalpy, state.entropy, state.volume])
    difference = np.abs(theirs - ours)
    difference[:, 2] /= ours[:, 2]
    return bool(np.all(difference < (1e-6, 1e-8, 1e-11)))


def _melting_agrees():
    temperature = np.linspace(251.2, 273.15, 60)
    pressure = [_Melting_Pressure(t, "Ih") * 1e6 for t in temperature]
    return bool(np.all(np.abs(ice.melting_temperature(pressure) - temperature) < 1e-9))


def _wrong(value, place):
    """A constant, a tuple, or a tuple of tuples with one number off by a millionth of itself."""
    if not place:
        return value * (1.0 + A_MILLIONTH)
    first, *rest = place
    return (*value[:first], _wrong(value[first], rest), *value[first + 1 :])


def _places():
    """Every coefficient of the package: module, name, place, and the comparison to fail."""
    for name in ("_G0", "_R2"):
        yield from ((ice, name, (k,), _ice_agrees) for k in range(len(getattr(ice, name))))
    yield from ((ice, name, (), _ice_agrees) for name in ("_S0", "_T1", "_R1", "_T2"))
    for k in range(len(ice._MELTING)):
        yield from ((ice, "_MELTING", (k, j), _melting_agrees) for j in (0, 1))
    yield from ((saturation_line, "_N", (k,), _saturation_agrees) for k in range(10))
    yield from ((region3, "_B23", (k,), _boundary_agrees) for k in range(5))
    yield (region3, "_LOGARITHM", (), _region_3_agrees)
    yield from ((region3, "_TERMS", (k, 2), _region_3_agrees) for k in range(len(region3._TERMS)))


PLACES = list(_places())


@pytest.fixture
def _fresh_plan():
    region3._plan.cache_clear()
    yield
    region3._plan.cache_clear()


@pytest.mark.parametrize("agrees", dict.fromkeys(place[3] for place in PLACES))
def test_the_coefficients_as_they_stand_agree(agrees):
    assert agrees()


@pytest.mark.usefixtures("_fresh_plan")
@pytest.mark.parametrize(
    ("module", "name", "place", "agrees"),
    PLACES,
    ids=[f"{p[0].__name__.rsplit('.')[-1]}{p[1]}{list(p[2])}" for p in PLACES],
)
def test_a_coefficient_wrong_by_a_millionth_is_noticed(monkeypatch, module, name, place, agrees):
    monkeypatch.setattr(module, name, _wrong(getattr(module, name), place))
    assert not agrees()


# ---- saturation above 350 degC


def test_saturation_in_region_3_is_that_of_the_basic_equation():
    # IAPWS R7-97(2012): the basic equation of region 3 gives p_sat(T) at both densities. iapws's
    # table is the equation here.
    temperature = 647.096 - np.geomspace(2.1e-4, 23.9, 2000)
    pressure = saturation_pressure(temperature)
    for side in saturated(pressure):
        assert side.valid.all()
        at = contributions(3, pressure, side.temperature, side.volume)[0].sum(axis=1)
        assert at[:, 0] == pytest.approx(side.enthalpy, rel=1e-11)
        assert at[:, 1] == pytest.approx(side.entropy, rel=1e-11)
        assert at[:, 2] == pytest.approx(pressure, rel=1e-11)
    liquid, vapour = saturated(pressure)
    assert np.all(np.diff(vapour.enthalpy - liquid.enthalpy) > 0.0)
    assert np.all(liquid.volume < 1 / 322.0)
    assert np.all(vapour.volume > 1 / 322.0)
