"""On the simulated plant, load and weather leave condition figures still; the machine moves them.

Instruments are exact, so what is left of a figure after its baseline is its definition's own.
"""

from __future__ import annotations

import numpy as np
import pytest
from simulated_points import CELLS, DESIGN, Worn, demo_site, figures_at, swings

from monitor.drift.baseline import fit_baseline

HOUR = 3600
# What stays of a figure's own value, as the demand is stated: a tenth of a per cent.
STILL = 1e-3
# A figure that is zero while its machine is sound is held against what an alarm would need.
OF_SMALLEST_CHANGE = {("HDR62", "unaccounted_flow"), ("HDR12", "unaccounted_flow"),
                      ("LD62", "passing_flow"), ("DA", "steam_excess")}  # fmt: skip


@pytest.fixture(scope="module")
def site():
    return demo_site()


@pytest.fixture(scope="module")
def sound(site):
    """The reference period: weather and loads both move, the machines do not."""
    return figures_at(site, swings())


def _judged(site):
    return [
        (item.id, figure)
        for item in site.items.values()
        for figure in item.kind.figures(item)
        if figure.judged
    ]


def _expected(sound, item, figure, loads):
    """What the baseline of the reference period makes of other loads."""
    values = sound[0][item, figure.name].to_numpy()
    reference = sound[1][item, figure.name].to_numpy() if figure.follows_load else None
    if reference is not None:
        # A curve without noise leaves an MM-estimator no scale: the parabola itself.
        curve = np.polynomial.Polynomial.fit(reference, values, 2)
        if np.abs(curve(reference) - values).max() < 1e-6 * np.abs(values).max():
            return curve(loads)
    fit = fit_baseline(
        values, reference, np.arange(values.size) * HOUR, smallest_change=figure.smallest_change
    )
    at = loads if reference is not None else np.full(loads.shape, fit.load_centre)
    return fit.expected(at)


def _moved(sound, other, item, figure):
    """Residual of a figure after its baseline, and what it is held against."""
    values = other[0][item, figure.name].to_numpy()
    expected = _expected(sound, item, figure, other[1][item, figure.name].to_numpy())
    inside = np.isfinite(values) & np.isfinite(expected)
    assert inside.mean() > 0.9, "the run is not within the baseline's envelope"
    own = (item, figure.name) in OF_SMALLEST_CHANGE
    scale = figure.smallest_change if own else np.abs(expected[inside])
    return (values - expected)[inside] / scale


RUNS = {
    "warmer": {"air": 8.0, "cooling_water": 5.0, "barometer": -15.0},
    "colder": {"air": -8.0, "barometer": 10.0},
    "other loads": {"shift": 2.0},
}


SHOWN = {("HDR62", "pressure_loss_coefficient"), ("COND", "ttd"), ("B1", "exergetic_efficiency"),
         ("B2", "exergetic_efficiency"), ("LD12", "flow_coefficient")}  # fmt: skip
# What a figure that is only shown may keep of load and weather, in a single cell.
NEARLY_STILL = 3e-3


@pytest.mark.parametrize("run", RUNS)
def test_weather_and_load_leave_every_judged_figure_still(site, sound, run):
    other = figures_at(site, swings(**RUNS[run]))
    for item, figure in _judged(site):
        if not np.isfinite(sound[0][item, figure.name]).any():
            continue  # a valve that never closes has no passing flow
        residual = _moved(sound, other, item, figure)
        assert abs(residual.mean()) < STILL, (item, figure.name)
        assert np.abs(residual).max() < STILL, (item, figure.name)
    for item, name in SHOWN:
        (figure,) = (f for f in site.items[item].kind.figures(site.items[item]) if f.name == name)
        assert np.abs(_moved(sound, other, item, figure)).max() < NEARLY_STILL, (item, name)


def _by(site, sound, worn, item, name):
    """Mean change of a figure against its baseline, in its own unit."""
    (figure,) = (f for f in site.items[item].kind.figures(site.items[item]) if f.name == name)
    loads = worn[1][item, name].to_numpy()
    return float((worn[0][item, name] - _expected(sound, item, figure, loads)).mean())


def test_a_section_that_lost_two_points_shows_two_points(site, sound):
    worn = figures_at(site, swings(), Worn(section_1=0.02))
    assert _by(site, sound, worn, "TG1", "eta_s_1") == pytest.approx(-2.0, abs=2e-3)
    # The section after it meets hotter steam and other flows, the machine beside it other flows.
    assert _by(site, sound, worn, "TG1", "eta_s_2") == pytest.approx(0.0, abs=2e-3)
    assert _by(site, sound, worn, "TG2", "eta_s_1") == pytest.approx(0.0, abs=2e-3)


def test_a_valve_that_passes_shows_what_passes(site, sound):
    worn = figures_at(site, swings(), Worn(passing=0.3))
    assert _by(site, sound, worn, "LD62", "passing_flow") == pytest.approx(0.3 * 3.6, rel=1e-9)
    assert abs(_by(site, sound, worn, "HDR62", "unaccounted_flow")) < 1e-9


def test_a_boiler_that_lost_a_point_shows_a_point(site, sound):
    worn = figures_at(site, swings(), Worn(boiler_1=0.01))
    assert _by(site, sound, worn, "B1", "fuel_efficiency") == pytest.approx(-1.0, abs=1e-6)
    assert abs(_by(site, sound, worn, "B2", "fuel_efficiency")) < 1e-9


def test_tubes_that_fouled_by_a_tenth_show_a_tenth(site, sound):
    fouled = {"condenser_conductance": 0.9 * DESIGN.condenser_conductance}
    worn = figures_at(site, swings(), Worn(design=fouled))
    share = worn[0]["COND", "ua"] / sound[0]["COND", "ua"]
    assert share.mean() == pytest.approx(0.9, abs=5e-4)
    assert worn[0]["COND", "ttd"].mean() > sound[0]["COND", "ttd"].mean() + 1.0


def test_pumps_that_wore_show_their_own_wear(site, sound):
    tired = {"pump_efficiency": (0.97 * DESIGN.pump_efficiency[0], 0.95 * 0.60)}
    worn = figures_at(site, swings(), Worn(design=tired))
    feed = worn[0]["FWP", "eta_s"] / sound[0]["FWP", "eta_s"]
    condensate = worn[0]["CEP", "eta_s"] / sound[0]["CEP", "eta_s"]
    assert feed.mean() == pytest.approx(0.97, abs=1e-4)
    assert condensate.mean() == pytest.approx(0.95, abs=1e-4)


def test_insulation_that_is_lost_doubles_the_heat_loss_coefficient(site, sound):
    bare = {"header_loss": tuple(2 * k for k in DESIGN.header_loss)}
    worn = figures_at(site, swings(), Worn(design=bare))
    for header in ("HDR62", "HDR12", "HDR4"):
        share = worn[0][header, "heat_loss_coefficient"] / sound[0][header, "heat_loss_coefficient"]
        assert share.mean() == pytest.approx(2.0, rel=1e-3)


def test_a_vessel_that_lost_its_lagging_loses_twice_the_heat(site):
    """Charge and discharge at their least, so that nearly all cells count as idle."""
    quiet = swings() | {"discharge": np.full(CELLS, 0.5)}
    lagged, bare = (
        figures_at(site, quiet, Worn(standing_loss=k))[0]["ACC", "heat_loss_coefficient"]
        for k in (45.0, 90.0)
    )
    assert lagged.notna().sum() > 100
    # The swing of the barometer between two cells' ends is most of what is left, 8 % in one cell.
    assert 1e3 * lagged.mean() == pytest.approx(45.0, rel=0.01)
    assert 1e3 * bare.mean() == pytest.approx(90.0, rel=0.01)
