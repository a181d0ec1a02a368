"""Flow meters: density correction, volumes to masses, cut-off.

tests/reference/flow_metering.csv has meters off their design state, computed there with two
independent formulations of IAPWS-IF97 (iapws, seuif97).
"""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.readings.meters import design_density, mass_flow
from monitor.site.models import Meter, Tag
from monitor.site.units import Quantity
from monitor.thermo.water import state_pt, state_px

with (Path(__file__).parents[2] / "reference" / "flow_metering.csv").open(encoding="utf-8") as file:
    CASES = list(csv.DictReader(file))


def _state(text):
    given = {k: float(v) for k, v in (part.split("=") for part in text.split(";"))}
    pressure = given["p_bar_abs"] * 1e5
    if "x" in given:
        return state_px(pressure, given["x"])
    return state_pt(pressure, given["T_C"] + 273.15)


def _meter(case):
    """The meter as a site file states it: kind and design state, in the trade's units."""
    design = dict(part.split("=") for part in case["design"].split(";"))
    keys = {"design_pressure": f"{design['p_bar_abs']} bar(a)"}
    if "x" in design:
        keys["design_dryness"] = float(design["x"])
    else:
        keys["design_temperature"] = f"{design['T_C']} degC"
    kind = "dp" if case["meter"].startswith("differential") else "velocity"
    return Meter.model_validate({"kind": kind, "compensated": False, **keys})


@pytest.mark.parametrize("case", CASES, ids=lambda c: f"{c['case']}, {c['meter'].split(' ')[0]}")
def test_the_corrected_flow_is_the_published_one(case):
    meter = _meter(case)
    assert design_density(meter) == pytest.approx(float(case["rho_design"]), rel=1e-5)
    shown = float(case["m_indicated"]) / 3.6
    density = 1.0 / float(_state(case["actual"]).volume)
    got = mass_flow(np.array([shown]), Quantity.MASS_FLOW, meter, None, density)
    tolerance = float(case["tol_rel"])
    assert got[0] * 3.6 == pytest.approx(float(case["m_corrected"]), rel=tolerance)
    assert got[0] / shown == pytest.approx(float(case["factor"]), rel=tolerance)


positive = st.floats(0.1, 1000)


@given(positive, positive, positive)
def test_a_volume_at_the_flowing_density_is_the_mass_whatever_the_meter(volume, density, design):
    """A meter that shows the true volume: by velocity, or by dp with its design as it flows."""
    shown = np.array([volume])
    velocity = Meter(kind="velocity", compensated=False, design_density=f"{design} kg/m^3")
    orifice = Meter(kind="dp", compensated=False, design_density=f"{density} kg/m^3")
    for meter in (None, velocity, orifice):
        got = mass_flow(shown, Quantity.VOLUME_FLOW, meter, None, density)
        assert got[0] == pytest.approx(volume * density)


@given(positive, positive, positive)
def test_showing_mass_or_volume_is_the_same_meter(mass, density, design):
    """A dp transmitter scaled for a density shows mass, or that mass over its design density."""
    meter = Meter(kind="dp", compensated=False, design_density=f"{design} kg/m^3")
    by_mass = mass_flow(np.array([mass]), Quantity.MASS_FLOW, meter, None, density)
    by_volume = mass_flow(np.array([mass / design]), Quantity.VOLUME_FLOW, meter, None, density)
    assert by_volume[0] == pytest.approx(by_mass[0])


def test_no_flow_is_no_flow_even_where_the_pipe_has_no_state():
    meter = Meter(kind="dp", compensated=False, design_density="5 kg/m^3")
    density = np.array([np.nan, np.nan])
    got = mass_flow(np.array([0.0, 1.0]), Quantity.MASS_FLOW, meter, None, density)
    assert got[0] == 0
    assert np.isnan(got[1])


def _tag(unit, **meter):
    keys = {"name": "F", "source": "s", "unit": unit, "meter": meter}
    return Tag.model_validate(keys)


def test_a_norm_volume_of_gas_is_an_amount_and_needs_the_density_there():
    """A norm cubic metre is at 0 degC, a standard one at 15 (ISO 13443); 1 ft = 0.3048 m."""
    tag = _tag("Nm3/h", density="0.80 kg/Nm3")
    shown = tag.unit.to_si(np.array([3600.0]))
    got = mass_flow(shown, tag.unit.quantity, tag.meter, tag.metered_density, np.nan)
    assert got[0] == pytest.approx(0.80)
    standard = _tag("Sm3/h", density="0.80 kg/Nm3").unit.to_si(np.array([3600.0]))
    assert standard[0] == pytest.approx(273.15 / 288.15)
    feet = _tag("kscf/h", density="0.80 kg/Nm3").unit.to_si(np.array([3.6]))
    assert feet[0] == pytest.approx(0.3048**3 * 273.15 / (273.15 + 140 / 9))


@pytest.mark.parametrize("unit", ["Nm3/h", "Nm^3/h", "Nm³/h"])
def test_a_norm_cubic_metre_is_no_newton_metre(unit):
    assert _tag(unit, density="0.8 kg/Nm^3").unit.quantity is Quantity.NORM_VOLUME_FLOW


def test_oil_by_volume_takes_its_stated_density():
    tag = _tag("l/min", density="860 kg/m3")
    shown = tag.unit.to_si(np.array([60.0]))
    got = mass_flow(shown, tag.unit.quantity, tag.meter, tag.metered_density, np.nan)
    assert got[0] == pytest.approx(0.86)


@pytest.mark.parametrize(
    ("unit", "meter", "says"),
    [
        ("t/h", {"kind": "dp", "compensated": False}, "needs the density it was scaled for"),
        ("t/h", {"kind": "dp", "design_density": "5 kg/m^3"}, "compensated = false"),
        ("t/h", {"design_density": "5 kg/m^3", "compensated": False}, "'dp' or 'velocity'"),
        ("t/h", {"density": "5 kg/m^3"}, "a mass flow already"),
        ("m^3/h", {"density": "0.8 kg/Nm3"}, "does not fit 'm\\^3/h'"),
        ("Nm3/h", {"density": "0.8 kg/m^3"}, "write for example '0.8 kg/Nm3'"),
        ("Nm3/h", {"density": "-0.8 kg/Nm3"}, "does not fit"),
        ("t/h", {"cut_off": "0.5 bar"}, "not an amount in a unit like 't/h'"),
        ("t/h", {"cut_off": "0.5"}, "not an amount in a unit like"),
        ("degC", {"cut_off": "0.5 K"}, "'degC' is none"),
        (
            "t/h",
            {
                "kind": "dp",
                "compensated": False,
                "design_density": "5 kg/m^3",
                "design_pressure": "12 bar(a)",
            },
            "not both",
        ),
        (
            "t/h",
            {"kind": "dp", "compensated": False, "design_pressure": "12 bar(a)"},
            "needs the density it was scaled for",
        ),
        (
            "t/h",
            {
                "kind": "dp",
                "compensated": False,
                "design_pressure": "12 bar(g)",
                "design_temperature": "230 degC",
            },
            "give this pressure as absolute",
        ),
    ],
)
def test_a_meter_that_cannot_be_is_refused_with_what_is_wrong(unit, meter, says):
    with pytest.raises(ValueError, match=says):
        _tag(unit, **meter)
