"""A stored content's rate of change is noisy: what its gauges cannot tell is no contradiction.

The tolerance is the standard uncertainty of the rate by first-order propagation (JCGM 100:2008,
eq. 10), worked out here on paper with the iapws package's steam tables.
"""

from __future__ import annotations

import numpy as np
import pytest
from physics_site import build, exergy, rows, run, water

from monitor.flags import Flag

AMBIENT = {"TA": 15.0, "PA": 1.0}
T0, VOLUME, CELL = 288.15, 60.0, 300.0
LEVEL_ERROR, PRESSURE_ERROR = 0.001, 1600.0  # 0.1 % of 0 to 100 %, and of 0 to 16 bar


def _site(folder, *, stated=True, charge="0 kg/s", discharge="0 kg/s", **options):
    level, pressure = {"unit": "%", "range": [0, 100]}, {"unit": "bar(a)", "range": [0, 16]}
    if stated:
        level |= {"uncertainty": "0.1 % range"}
        pressure |= {"uncertainty": "0.016 bar(a)"}
    return build(
        folder,
        {
            "charge": {"pressure": "12 bar(a)", "temperature": "230 degC", "flow": charge},
            "discharge": {"pressure": "9 bar(a)", "phase": "vapour", "flow": discharge},
        },
        {
            "vessel": {
                "kind": "accumulator",
                "volume": "60 m^3",
                "level": "LV",
                "pressure": "PV",
                "ports": {"charge": "charge", "discharge": "discharge"},
            }
            | options
        },
        {"LV": level, "PV": pressure},
    )


def _flagged(batch):
    return (rows(batch.equipment, "vessel")["flag"].to_numpy() & int(Flag.SECOND_LAW)) != 0


def _content(share, bar):
    wet, dry = water(bar, x=0), water(bar, x=1)
    mass = VOLUME * share / wet.v, VOLUME * (1 - share) / dry.v
    energy = (wet.h - 100 * bar * wet.v), (dry.h - 100 * bar * dry.v)
    return tuple(
        mass[0] * a + mass[1] * b for a, b in ((1, 1), energy, (wet.s, dry.s))
    )  # kg, kJ, kJ/K


def _uncertainty(share, bar, h_gap, s_gap, boundary=None):
    """Of the destruction [kW], from level and pressure at both ends of a cell."""
    middle, squares = _content(share, bar), 0.0
    for moved in (
        _content(share + LEVEL_ERROR, bar),
        _content(share, bar + PRESSURE_ERROR / 1e5),
    ):
        dm, du, ds = (b - a for a, b in zip(middle, moved, strict=True))
        generated = ds - s_gap * dm
        if boundary is not None:
            generated -= (du - h_gap * dm) / boundary
        squares += 2 * (T0 * generated / CELL) ** 2
    return float(np.sqrt(squares))


@pytest.mark.parametrize("boundary", [None, 333.15])
@pytest.mark.parametrize(("sigmas", "expected"), [(2.8, False), (3.2, True)])
def test_only_what_three_standard_uncertainties_leave_is_flagged(
    tmp_path, boundary, sigmas, expected
):
    """Level falls without an outflow: at the gap's own state it is entropy gone for nothing."""
    charge, dry = water(12, 230), water(9, x=1)
    h_gap, s_gap = (charge.h + dry.h) / 2, (charge.s + dry.s) / 2
    lost = {"heat_loss": "balance", "boundary_temperature": "60 degC"}
    options = {} if boundary is None else lost
    site = _site(tmp_path, **options)
    u = _uncertainty(0.7, 9.0, h_gap, s_gap, boundary)
    # Destruction per share of level and second [kW].
    dm, du, ds = (b - a for a, b in zip(_content(0.7, 9.0), _content(0.71, 9.0), strict=True))
    per_share = T0 * (ds - s_gap * dm)
    if boundary is not None:
        per_share -= T0 * (du - h_gap * dm) / boundary
    per_share /= 0.01
    slope = -sigmas * u / per_share

    batch = run(site, AMBIENT | {"LV": lambda t: 100 * (0.7 + slope * (t - 1800)), "PV": 9.0})
    found = rows(batch.equipment, "vessel")["destroyed_live_kw"]
    np.testing.assert_allclose(found, -sigmas * u, rtol=1e-3)
    assert (_flagged(batch) == expected).all()


def test_noise_on_the_level_is_no_contradiction_once_it_is_stated(tmp_path):
    """A resting vessel for a day: half of its cells 'destroy' less than nothing."""
    rng = np.random.default_rng(20260216)

    def level(t):
        return 70 + 0.1 * rng.standard_normal(len(t))

    values = AMBIENT | {"LV": level, "PV": 9.0}
    folder = tmp_path / "stated"
    folder.mkdir()
    batch = run(_site(folder), values, hours=24, step=300)
    destroyed = rows(batch.equipment, "vessel")["destroyed_live_kw"]
    assert (destroyed < 0).mean() == pytest.approx(0.5, abs=0.1)
    assert _flagged(batch).mean() < 0.01
    folder = tmp_path / "silent"
    folder.mkdir()
    batch = run(_site(folder, stated=False), values, hours=24, step=300)
    assert _flagged(batch).mean() > 0.4


@pytest.mark.parametrize(("share", "expected"), [(0.01, False), (0.03, True)])
def test_a_vessel_that_only_discharges_has_the_common_tolerance_too(tmp_path, share, expected):
    """Nothing comes in: two percent of nothing would flag every rounding.

    At constant pressure a volume a of vapour that becomes liquid in a second, with nothing to
    account for it, destroys -T0 a (s'' - s') / v'.
    """
    site = _site(tmp_path, stated=False, discharge="2 kg/s")
    wet, dry = water(9, x=0), water(9, x=1)
    rise = share * 2 * exergy(dry) / (T0 * (dry.s - wet.s) / wet.v) / VOLUME
    batch = run(site, AMBIENT | {"LV": lambda t: 100 * (0.7 + rise * t), "PV": 9.0})
    found = rows(batch.equipment, "vessel")
    assert (found["exergy_in_live_kw"] == 0).all()
    np.testing.assert_allclose(
        found["destroyed_live_kw"], -share * found["exergy_out_live_kw"], rtol=1e-6
    )
    assert (_flagged(batch) == expected).all()
