"""Checks on readings, in whole windows: the same verdicts in any window, and what they do there."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from small_site import STEADY, readings, times_of, write_site

from monitor.figures import compute
from monitor.flags import Flag
from monitor.readings.site import neighbours
from monitor.site.load import load_site

START = 1_771_200_000  # 2026-02-16 00:00 UTC
HOUR = 3600
TABLES = ("streams", "equipment", "conditions", "ledger", "tag_quality")


def _tag(name, unit, more):
    plain = f'name = "{name}"\nsource = "dcs"\nunit = "{unit}"\n'
    return plain, plain + more


@pytest.fixture(scope="module")
def site(tmp_path_factory):
    """Pressures with every check, a flow with a rate limit, a thermometer with a short patience."""
    return load_site(
        write_site(
            tmp_path_factory.mktemp("checked"),
            _tag("PH", "bar(g)", 'uncertainty = "0.1 bar(d)"\nrate_limit = "3 bar/min"\n'),
            _tag("TH", "degC", 'uncertainty = "0.5 K"\nstuck_after = "45 min"\n'),
            _tag("FT", "t/h", 'rate_limit = "5 t/h/min"\nhold = "3 min"\n'),
            _tag(
                "FX",
                "t/h",
                'deadband = "0.01 t/h"\nspike_window = "20 min"\nspike_least = "1 t/h"\n',
            ),
        )
    )


def _has(flags, bits):
    return (flags.to_numpy() & int(bits)) != 0


def _one(batch, subject, table="equipment"):
    rows = getattr(batch, table)
    return rows[rows["subject"] == subject].reset_index(drop=True)


def _dirty(times, seed):
    """Noise, spikes, steps, frozen stretches and gaps."""
    rng = np.random.default_rng(seed)
    values = {}
    for name, level in STEADY.items():
        noisy = level * (1 + 0.001 * rng.standard_normal(len(times)))
        noisy *= np.where(rng.random(len(times)) < 0.02, rng.choice([0.7, 1.3], len(times)), 1.0)
        first = rng.integers(0, len(times))
        noisy[first : first + 150] = noisy[first]
        values[name] = noisy
    return values, rng.random(len(times)) > 0.2


@settings(max_examples=12, deadline=None)
@given(st.permutations(range(4)), st.integers(0, 2**31 - 1))
def test_verdicts_and_counts_do_not_depend_on_the_window(site, order, seed):
    end = START + 4 * HOUR
    times = times_of(site, START - 4 * HOUR, end)
    values, kept = _dirty(times, seed)
    read = readings(times[kept], {name: v[kept] for name, v in values.items()})
    whole = compute(site, read, START, end).batch
    parts = {}
    for k in order:
        first = START + k * HOUR
        # Each part gets what would be read for it, and no reading more.
        own = (times >= times_of(site, first, first)[0]) & (times <= first + HOUR) & kept
        part = readings(times[own], {name: v[own] for name, v in values.items()})
        parts[k] = compute(site, part, first, first + HOUR).batch
    for table in TABLES:
        keys = [
            c for c in ("subject", "figure", "tag", "time", "hour") if c in getattr(whole, table)
        ]
        joined = pd.concat([getattr(parts[k], table) for k in order], ignore_index=True)
        pd.testing.assert_frame_equal(
            joined.astype(dict.fromkeys(keys, "object")).sort_values(keys, ignore_index=True),
            getattr(whole, table)
            .astype(dict.fromkeys(keys, "object"))
            .sort_values(keys, ignore_index=True),
            check_exact=True,
        )
    assert whole.tag_quality[["spike", "too_fast"]].to_numpy().sum() > 0


def test_a_spike_leaves_the_figures_as_they_were_and_its_flag_on_them(site):
    times = times_of(site, START, START + HOUR)
    clean = compute(site, readings(times), START, START + HOUR)
    pressure = np.where(times == START + 1860, 75.0, 61.0)
    hit = compute(site, readings(times, {"PH": pressure}), START, START + HOUR)
    before, after = _one(clean.batch, "turbine"), _one(hit.batch, "turbine")
    assert after["destroyed_live_kw"].tolist() == before["destroyed_live_kw"].tolist()
    marked = _has(after["flag"], Flag.TOO_FAST | Flag.SPIKE)
    assert after["time"][marked].tolist() == [START + 1800]
    assert (clean.bad, hit.bad) == (0, 1)


def test_what_rests_on_a_stuck_thermometer_is_shown_and_not_judged(site):
    end = START + 3 * HOUR
    times = times_of(site, START, end)
    rng = np.random.default_rng(1)
    noise = {k: v * (1 + 1e-4 * rng.standard_normal(len(times))) for k, v in STEADY.items()}
    stuck = np.where(times >= START + HOUR, noise["TH"][times == START + HOUR], noise["TH"])
    batch = compute(site, readings(times, noise | {"TH": stuck}), START, end).batch
    turbine = _one(batch, "turbine")
    late = turbine["time"] >= START + HOUR + 40 * 60
    assert (_has(turbine["flag"], Flag.STUCK) == late).all()
    assert np.isfinite(turbine["destroyed_live_kw"]).all()
    eta = batch.conditions[batch.conditions["figure"] == "eta_s_1"]
    assert (_has(eta["flag"], Flag.STUCK) == (eta["time"] >= START + HOUR + 40 * 60)).all()
    assert batch.tag_quality.set_index("tag").loc["TH", "cells_stuck"].tolist() == [0, 4, 12]


def test_neighbours_share_equipment_and_the_ambient_has_none(site):
    beside = neighbours(site)
    assert {"PH", "TH", "FT", "FL", "TL"} <= beside["PH"] | {"PH"}
    assert "FG" not in beside["PX"]
    assert "TA" not in beside
    assert not any("TA" in others for others in beside.values())


def test_an_outage_is_a_state_and_its_end_a_start_and_neither_is_bad_data(tmp_path):
    """Off from 01:00 to 02:00: out of service, then just started for the steadiness window."""
    site = load_site(write_site(tmp_path))
    end = START + 4 * HOUR
    times = times_of(site, START, end)
    rng = np.random.default_rng(2)
    noise = {k: v * (1 + 1e-4 * rng.standard_normal(len(times))) for k, v in STEADY.items()}
    off = (times >= START + HOUR) & (times < START + 2 * HOUR)
    stopped = {k: np.where(off, 0.0, noise[k]) for k in ("FT", "FX", "WG")}
    batch = compute(site, readings(times, noise | stopped), START, end).batch
    turbine = _one(batch, "turbine")
    since = (turbine["time"] - START).to_numpy()
    assert (_has(turbine["flag"], Flag.OFF) == ((since >= HOUR) & (since < 2 * HOUR))).all()
    starting = (since >= 2 * HOUR) & (since < 2.5 * HOUR)
    assert (_has(turbine["flag"], Flag.STARTING) == starting).all()
    assert not _has(turbine["flag"], Flag.UNSTEADY)[since < 2 * HOUR].any()
    counts = batch.tag_quality[batch.tag_quality["tag"] == "WG"]
    assert (counts["good"] == counts["readings"]).all()


def test_a_drain_that_moves_is_unsteady_itself_and_leaves_its_machine_steady(site):
    """The extraction swings by half; the turbine's load, its inlet, stands still."""
    times = times_of(site, START, START + 2 * HOUR)
    swing = 40.0 + 10.0 * np.sin((times - START) / 600)
    batch = compute(site, readings(times, {"FX": swing}), START, START + 2 * HOUR).batch
    assert _has(_one(batch, "extraction", "streams")["flag"], Flag.UNSTEADY).all()
    assert not _has(_one(batch, "to_turbine", "streams")["flag"], Flag.UNSTEADY).any()
    assert not _has(_one(batch, "turbine")["flag"], Flag.UNSTEADY).any()
