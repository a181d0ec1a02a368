"""Unit facts: tests/reference has no row that this file does not name beside the number."""

from __future__ import annotations

import numpy as np
import pytest

from monitor.site import units
from monitor.site.factors import FACTORS
from monitor.site.units import Quantity, UnitError, duration_s, parse_unit, quantity


@pytest.mark.parametrize(
    ("text", "value", "si", "source"),
    [
        ("psi(a)", 14.5037737730, 1e5, "NIST SP 811 (2008) B.8: 1 bar"),
        ("degF", 212.0, 373.15, "NIST SP 811 (2008) B.8"),
        ("degF", 14.0, 263.15, "NIST SP 811 (2008) B.8"),
        ("degC", 0.0, 273.15, "SI Brochure, 9th edition (2019)"),
        ("t/h", 1.0, 0.2777777777777778, "1000/3600"),
        ("lb/h", 1.0, 1.259978805556e-4, "NIST SP 811 (2008) B.8"),
        ("klb/h", 1.0, 0.125997880556, "453.59237/3600"),
        ("mmHg(a)", 1.0, 133.322387415, "NIST SP 811 (2008) B.8, conventional mercury"),
        ("inHg(a)", 1.0, 3386.3886403, "NIST SP 811 (2008) B.8, conventional mercury"),
        ("cmHg(a)", 1.0, 1333.22387415, "NIST SP 811 (2008) B.8, conventional mercury"),
        ("mbar(a)", 1.0, 100.0, "NIST SP 811 (2008) B.8"),
        ("short_ton/h", 1.0, 0.25199576111, "NIST SP 811 (2008) B.8: ton, short (2000 lb)"),
        ("MW", 1.0, 1e6, "SI"),
        ("%", 1.0, 0.01, "SI"),
    ],
)
def test_units_meet_their_published_factors(text, value, si, source):
    assert parse_unit(text).to_si(np.array(value)) == pytest.approx(si, rel=1e-9), source


@pytest.mark.parametrize("base", FACTORS)
def test_a_unit_that_is_known_beforehand_is_what_pint_gives(base):
    measured, scale, offset = units._by_pint(base, base, base)
    assert FACTORS[base] == (measured.value, scale, offset)


@pytest.mark.parametrize(
    ("unit", "reading", "barometer_Pa", "absolute_Pa", "source"),
    [
        ("psi(g)", 150.0, 14.6 * 6894.7572931684, 1134877.050, "trade fact: 150 psig at 14.6 psia"),
        ("bar(g)", 8.8, 101325.0, 981325.0, "trade fact: 8.8 bar gauge at 1.01325 bar"),
        ("cmHg(vac)", 71.5, 75.2 * 1333.22387415, 4932.928, "trade fact: vacuum to absolute"),
        ("inHg(vac)", 27.4, 29.6 * 3386.3886403, 7450.055, "trade fact: vacuum to absolute"),
        ("mmHg(vac)", 705.0, 101325.0, 7332.717, "trade fact: vacuum to absolute"),
        ("bar(a)", 8.8, 99000.0, 880000.0, "absolute needs no barometer"),
    ],
)
def test_gauge_and_vacuum_become_absolute_with_the_barometer(
    unit, reading, barometer_Pa, absolute_Pa, source
):
    parsed = parse_unit(unit)
    got = parsed.absolute(parsed.to_si(np.array(reading)), barometer_Pa)
    assert got == pytest.approx(absolute_Pa, rel=1e-6), source


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("bar", "pressure without a datum; write 'bar(a)' for absolute, 'bar(g)' for gauge"),
        ("degX", "is not a unit; did you mean 'degF'?"),
        ("t/h(g)", "only a pressure can be absolute or gauge"),
        ("MBtu/h", "is a thousand Btu to some and a million to others; write 'kBtu' or 'MMBtu'"),
        ("Mscf/h", "write 'kscf' or 'MMscf'"),
        ("Mlb/h", "write 'klb' or 'MMlb'"),
        ("ton/h", "a ton is 2000 lb to some and 1000 kg to others; write 'short_ton' or 't'"),
        ("m/s", "measures nothing this tool knows"),
        ("'; DROP TABLE", "is not a unit"),
    ],
)
def test_a_wrong_unit_is_answered_with_what_would_be_right(text, says):
    with pytest.raises(UnitError) as caught:
        parse_unit(text)
    assert says in str(caught.value)


@pytest.mark.parametrize(
    ("text", "si", "source"),
    [
        ("MMBtu/h", 2.930711e5, "NIST SP 811 (2008) B.8: 1 Btu_IT/h is 2.930711E-01 W"),
        ("kBtu/h", 2.930711e2, "NIST SP 811 (2008) B.8"),
        ("MMscf/h", 1e6 * 0.028316846592 * 273.15 / 288.7055556 / 3600, "ft^3: NIST SP 811 B.8"),
        ("MMlb/h", 125.9978805556, "NIST SP 811 (2008) B.8"),
    ],
)
def test_a_million_of_the_trade_is_a_million(text, si, source):
    assert parse_unit(text).scale == pytest.approx(si, rel=1e-6), source


def test_a_quantity_of_the_wrong_kind_says_what_is_wanted():
    with pytest.raises(UnitError, match="is a temperature, but a pressure is wanted"):
        quantity("180 degC", Quantity.PRESSURE)


def test_a_gauge_pressure_without_a_barometer_is_refused():
    with pytest.raises(UnitError, match="give this pressure as absolute"):
        quantity("12 bar(g)", Quantity.PRESSURE)


def test_durations_read_as_engineers_write_them():
    assert (duration_s("5 min"), duration_s("2 h"), duration_s("30 s")) == (300, 7200, 30)
