"""Meters and pressure conventions through whole windows, with a barometer that moves."""

from __future__ import annotations

import numpy as np
import pytest
from small_site import readings, times_of, write_site

from monitor.errors import SiteFileError
from monitor.figures import compute
from monitor.site.load import load_site
from monitor.thermo.water import state_pt

START = 1_771_200_000  # 2026-02-16 00:00 UTC
HOUR = 3600


def _with(name, unit, more, instead=None):
    plain = f'name = "{name}"\nsource = "dcs"\nunit = "{unit}"\n'
    return plain, plain.replace(f'"{unit}"', f'"{instead or unit}"') + more


def _streams(site, values=None):
    times = times_of(site, START, START + HOUR)
    return compute(site, readings(times, values), START, START + HOUR).batch.streams


def _flow(streams, subject):
    return streams[streams["subject"] == subject]["mass_flow_kg_s"].to_numpy()


UNCOMPENSATED = (
    "[tag.meter]\n"
    'kind = "dp"\n'
    "compensated = false\n"
    'design_pressure = "63 bar(a)"\n'
    'design_temperature = "480 degC"\n'
)


def test_an_orifice_follows_the_root_of_its_streams_density_barometer_included(tmp_path):
    site = load_site(write_site(tmp_path, _with("FT", "t/h", UNCOMPENSATED)))
    times = times_of(site, START, START + HOUR)
    barometer = 960.0 + 80.0 * (times - times[0]) / (times[-1] - times[0])
    rows = compute(site, readings(times, {"PA": barometer}), START, START + HOUR).batch.streams
    rows = rows[rows["subject"] == "to_turbine"]
    pressure = rows["pressure_bar"].to_numpy()
    assert np.ptp(pressure) > 0.005
    actual = 1 / state_pt(pressure * 1e5, np.full(12, 470 + 273.15)).volume
    design = 1 / float(state_pt(63e5, 480 + 273.15).volume)
    expected = 100 / 3.6 * np.sqrt(actual / design)
    assert rows["mass_flow_kg_s"].to_numpy() == pytest.approx(expected, rel=1e-12)


def test_a_tag_that_serves_two_streams_is_corrected_for_each(tmp_path):
    """One meter's reading used for the live steam and, hotter and denser, for the turbine's."""
    meter = UNCOMPENSATED.replace('"dp"', '"velocity"')
    site = load_site(
        write_site(tmp_path, _with("FT", "t/h", meter), ('flow = "FL"', 'flow = "FT"'))
    )
    streams = _streams(site, {"TL": 520.0})
    design = 1 / float(state_pt(63e5, 480 + 273.15).volume)
    for stream, bar, degc in (("live", 62.505, 520.0), ("to_turbine", 62.005, 470.0)):
        density = 1 / float(state_pt(bar * 1e5, degc + 273.15).volume)
        expected = 100 / 3.6 * density / design
        assert _flow(streams, stream) == pytest.approx(np.full(12, expected), rel=1e-9)


def test_steam_by_volume_becomes_mass_with_its_own_density(tmp_path):
    site = load_site(write_site(tmp_path, _with("FT", "t/h", "", "m^3/h")))
    density = 1 / float(state_pt(62.005e5, 470 + 273.15).volume)
    expected = 4000 / 3600 * density
    streams = _streams(site, {"FT": 4000.0})
    assert _flow(streams, "to_turbine") == pytest.approx(np.full(12, expected), rel=1e-9)


def test_gas_by_norm_volume_becomes_mass_with_its_stated_density(tmp_path):
    meter = 'meter = { density = "0.79 kg/Nm3", cut_off = "20 Nm3/h" }\n'
    site = load_site(write_site(tmp_path, _with("FG", "t/h", meter, "Nm3/h")))
    streams = _streams(site, {"FG": 9000.0})
    assert _flow(streams, "gas") == pytest.approx(np.full(12, 9000 * 0.79 / 3600))
    assert np.all(_flow(_streams(site, {"FG": 19.0}), "gas") == 0)


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ([_with("FG", "t/h", "", "Nm3/h")], "density = '0.8 kg/Nm3'"),
        ([_with("FG", "t/h", "", "m^3/h")], "density = '860 kg/m\\^3'"),
        ([_with("FG", "t/h", UNCOMPENSATED)], "a fuel has no state"),
        ([_with("FT", "t/h", UNCOMPENSATED.replace("480", "4800"))], "outside the steam tables"),
        (
            [
                _with("FX", "t/h", "", "m^3/h"),
                ('enthalpy = "balance"\nflow = "balance"', 'enthalpy = "balance"\nflow = "FX"'),
                ('temperature = "TX"\nflow = "FX"', 'temperature = "TX"\nflow = "balance"'),
            ],
            "enthalpy comes from a balance",
        ),
    ],
)
def test_a_flow_that_can_be_no_mass_flow_is_refused(tmp_path, changes, says):
    with pytest.raises(SiteFileError, match=says):
        load_site(write_site(tmp_path, *changes))


@pytest.mark.parametrize(
    ("unit", "reading"),
    [
        # The same vacuum under a barometer of 1005 mbar: 80 mbar absolute, 925 mbar below it.
        # 1 mmHg = 133.322 Pa, 1 inHg = 3386.389 Pa (NIST SP 811 (2008), table B.8).
        ("bar(a)", 0.08),
        ("bar(g)", -0.925),
        ("mmHg(vac)", 92500 / 133.322),
        ("cmHg(vac)", 92500 / 1333.22),
        ("inHg(vac)", 92500 / 3386.389),
        ("kPa(vac)", 92.5),
        ("kPa(a)", 8.0),
        ("psi(g)", -92500 / 6894.757),
    ],
)
def test_a_vacuum_is_the_same_however_the_gauge_is_marked(tmp_path, unit, reading):
    site = load_site(write_site(tmp_path, _with("PE", "bar(a)", "", unit)))
    rows = _streams(site, {"PE": reading})
    exhaust = rows[rows["subject"] == "exhaust"]["pressure_bar"].to_numpy()
    assert exhaust == pytest.approx(np.full(12, 0.08), rel=1e-4)


@pytest.mark.parametrize(
    ("unit", "reading", "follows"),
    [
        ("bar(a)", 0.08, 0),
        ("bar(g)", -0.925, 1),
        ("mmHg(vac)", 92500 / 133.322, 1),
        ("inHg(vac)", 92500 / 3386.389, 1),
    ],
)
def test_gauge_and_vacuum_follow_the_live_barometer_cell_by_cell(tmp_path, unit, reading, follows):
    """A front of 30 mbar in an hour moves a condenser's pressure by as much, and its state too."""
    site = load_site(write_site(tmp_path, _with("PE", "bar(a)", "", unit)))
    times = times_of(site, START, START + HOUR)
    barometer = 1005.0 + 30.0 * np.clip((times - START) / HOUR, 0, 1)
    rows = compute(
        site, readings(times, {"PE": reading, "PA": barometer}), START, START + HOUR
    ).batch.streams
    exhaust = rows[rows["subject"] == "exhaust"]["pressure_bar"].to_numpy()
    # Mean of a cell of five one-minute readings that stand for a minute each: 2 min into it.
    expected = 0.08 + follows * 0.030 * (np.arange(12) * 5 + 2) / 60
    # 133.322 is printed with six figures: 3e-6 of 0.9 bar.
    assert exhaust == pytest.approx(expected, abs=3e-6)
