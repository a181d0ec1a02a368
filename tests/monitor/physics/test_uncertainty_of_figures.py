"""Standard uncertainties against derivatives worked out on paper, and against Monte Carlo draws.

First-order propagation is JCGM 100:2008 (GUM), eq. 10; the draws are JCGM 101:2008, 5.9: 10^4 of
them leave the standard deviation uncertain by 0.7 %. Derivatives are those of the iapws package.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from iapws import IAPWS97
from physics_site import START, build, rows, run

from connectors.base import ReadResult
from monitor.checking.equipment_lines import equipment_lines
from monitor.figures import compute, lead_in
from monitor.flags import Flag
from monitor.uncertainty.classes import DEFAULTS

DRAWS = 10_000
AMBIENT = {"TA": 15.0, "PA": 1.013}
AMBIENT_TAGS = {
    "TA": {"unit": "degC", "uncertainty": "0.3 K"},
    "PA": {"unit": "bar(a)", "uncertainty": "0.0005 bar(a)"},
}
TURBINE = AMBIENT | {"P1": 60.0, "T1": 470.0, "P2": 5.0, "T2": 190.0, "F": 50.0, "W": 6.9}
TURBINE_CLASSES = {
    "P1": 0.1, "T1": 1.0, "P2": 0.01, "T2": 0.8, "F": 0.5, "W": 0.02,
}  # fmt: skip


def _turbine(folder, scale=1.0, **further):
    c = {name: scale * u for name, u in TURBINE_CLASSES.items()}
    tags = {
        "P1": {"unit": "bar(a)", "uncertainty": f"{c['P1']!r} bar(a)"},
        "T1": {"unit": "degC", "uncertainty": f"{c['T1']!r} K"},
        "P2": {"unit": "bar(a)", "uncertainty": f"{c['P2']!r} bar(a)"},
        "T2": {"unit": "degC", "uncertainty": f"{c['T2']!r} K"},
        "F": {"unit": "t/h", "uncertainty": f"{c['F']!r} t/h"},
        "W": {"unit": "MW", "uncertainty": f"{c['W']!r} MW"},
        "TA": {"unit": "degC", "uncertainty": f"{0.3 * scale!r} K"},
        "PA": {"unit": "bar(a)", "uncertainty": f"{0.0005 * scale!r} bar(a)"},
    } | further
    return build(
        folder,
        {
            "inlet": {"flow": "F", "pressure": "P1", "temperature": "T1"},
            "exhaust": {"flow": "balance", "pressure": "P2", "temperature": "T2"},
            "power": {"medium": "power", "power": "W"},
        },
        {
            "tg": {
                "kind": "turbine",
                "ports": {"inlet": "inlet", "exhaust": "exhaust", "power": "power"},
            }
        },
        tags,
    )


LETDOWN = AMBIENT | {"P1": 60.0, "T1": 460.0, "P2": 11.0, "T2": 205.0, "PW": 80.0, "TW": 120.0}
LETDOWN |= {"F": 20.0}
LETDOWN_CLASSES = {
    "P1": 0.1, "T1": 1.0, "P2": 0.02, "T2": 1.0, "PW": 0.2, "TW": 0.5, "F": 0.3,
}  # fmt: skip


def _letdown(folder):
    units = {"P": ("bar(a)", "bar(a)"), "T": ("degC", "K"), "F": ("t/h", "t/h")}
    tags = {
        name: {"unit": units[name[0]][0], "uncertainty": f"{u} {units[name[0]][1]}"}
        for name, u in LETDOWN_CLASSES.items()
    }
    return build(
        folder,
        {
            "steam": {"flow": "F", "pressure": "P1", "temperature": "T1"},
            "spray": {"flow": "balance", "pressure": "PW", "temperature": "TW"},
            "reduced": {"flow": "balance", "pressure": "P2", "temperature": "T2"},
        },
        {
            "ld": {
                "kind": "letdown",
                "ports": {"inlet": "steam", "spray": "spray", "outlet": "reduced"},
            }
        },
        AMBIENT_TAGS | tags,
    )


def _value(batch, subject, figure, column="value"):
    table = batch.conditions
    own = table[(table["subject"] == subject) & (table["figure"] == figure)]
    return own[column].to_numpy()


def _drawn(values, classes):
    """Each reading drawn anew from its distribution: a cell is a draw."""
    rng = np.random.default_rng(20260301)

    def draw(name):
        u = (classes | {"TA": 0.3, "PA": 0.0005})[name]
        return lambda t: values[name] + u * rng.standard_normal(len(t))

    return {name: draw(name) for name in values}


def test_the_efficiency_of_a_turbine_is_as_uncertain_as_its_derivatives_say(tmp_path):
    """eta = (h1 - h2) / (h1 - h2s); dh2s = T2s ds + v2s dp (Gibbs), by hand."""
    one, two = IAPWS97(P=6.0, T=743.15), IAPWS97(P=0.5, T=463.15)
    ideal = IAPWS97(P=0.5, s=one.s)
    assert ideal.x < 1, "the isentropic end is wet, at the boiling temperature"
    given_up, available = one.h - two.h, one.h - ideal.h
    eta = given_up / available

    def slopes(state):  # of h [kJ/kg] and s [kJ/(kg K)] by T [K] and p [MPa]
        dv = state.alfav * state.v
        return state.cp, state.cp / state.T, 1e3 * (state.v - state.T * dv), -1e3 * dv

    h1_t, s1_t, h1_p, s1_p = slopes(one)
    h2_t, _, h2_p, _ = slopes(two)
    by = {
        "T1": (h1_t * (1 - eta) + eta * ideal.T * s1_t) / available * 1.0,
        "P1": (h1_p * (1 - eta) + eta * ideal.T * s1_p) / available * 0.01,
        "T2": -h2_t / available * 0.8,
        "P2": (-h2_p + eta * 1e3 * ideal.v) / available * 0.001,
    }
    expected = 100 * np.sqrt(sum(part**2 for part in by.values()))

    batch = run(_turbine(tmp_path), TURBINE)
    np.testing.assert_allclose(_value(batch, "tg", "eta_s_1"), 100 * eta, rtol=1e-4)
    # One-sided differences leave the second order: half a percent of the largest part here.
    np.testing.assert_allclose(_value(batch, "tg", "eta_s_1", "u_value"), expected, rtol=0.01)


def test_three_meters_of_a_header_add_up_as_squares(tmp_path):
    gauges = {"pressure": "12 bar(a)", "temperature": "TH"}
    site = build(
        tmp_path,
        {name: gauges | {"flow": f"F{name}"} for name in ("in", "one", "two")},
        {"h": {"kind": "header", "ports": {"inlet": "in", "outlet": ["one", "two"]}}},
        AMBIENT_TAGS
        | {"TH": {"unit": "degC", "uncertainty": "0.7 K"}}
        | {
            "Fin": {"unit": "t/h", "range": [0, 60], "uncertainty": "1 % range"},
            "Fone": {"unit": "t/h", "uncertainty": "2 % reading"},
            "Ftwo": {"unit": "t/h", "uncertainty": "0.1 t/h"},
        },
    )
    batch = run(site, AMBIENT | {"TH": 250.0, "Fin": 40.0, "Fone": 25.0, "Ftwo": 14.0})
    expected = np.sqrt(0.6**2 + 0.5**2 + 0.1**2)
    np.testing.assert_allclose(_value(batch, "h", "unaccounted_flow", "u_value"), expected)
    # The header's one thermometer stands at both ends: whatever it is off by, no heat is lost.
    heat = IAPWS97(P=1.2, T=523.15)
    u = rows(batch.equipment, "h")["u_destroyed_live_kw"].to_numpy()
    assert (u < 1e-3 * (40 / 3.6) * heat.cp * 0.7).all()


@pytest.mark.parametrize(
    ("make", "values", "classes", "subject", "figures"),
    [
        (_turbine, TURBINE, TURBINE_CLASSES, "tg", ("eta_s_1", "steam_rate")),
        (_letdown, LETDOWN, LETDOWN_CLASSES, "ld", ("work_bypassed",)),
    ],
)
def test_ten_thousand_draws_scatter_as_the_uncertainty_says(
    tmp_path, make, values, classes, subject, figures
):
    site = make(tmp_path)
    steady = run(site, values)
    scattered = run(site, _drawn(values, classes), hours=DRAWS // 12, step=300)

    def agree(stated, drawn):
        spread = np.std(drawn[np.isfinite(drawn)], ddof=1)
        assert np.isfinite(drawn).mean() > 0.99
        # 0.7 % from the number of draws (three of these), 1 % of second order.
        assert float(stated[0]) == pytest.approx(spread, rel=0.035, abs=1e-6)

    for figure in figures:
        agree(_value(steady, subject, figure, "u_value"), _value(scattered, subject, figure))
    for table, name, column in (
        ("equipment", subject, "destroyed_live_kw"),
        *(("streams", s, c) for s in site.items[subject].ids("in") for c in ("exergy_live_kw",)),
        *(("streams", s, "mass_flow_kg_s") for s in site.items[subject].ids("out")[:1]),
    ):
        one, many = (rows(getattr(b, table), name) for b in (steady, scattered))
        agree(one[f"u_{column}"].to_numpy(), many[column].to_numpy())
    for line in ("lost", "destroyed", "imbalance"):
        drawn = scattered.ledger[f"{line}_live_kw"].to_numpy()
        agree(steady.ledger[f"u_{line}_live_kw"].to_numpy(), drawn)


@settings(max_examples=5, deadline=None)
@given(scale=st.floats(0.01, 0.3))
def test_classes_half_as_wide_halve_every_uncertainty(tmp_path_factory, scale):
    folder = tmp_path_factory.mktemp("scaled")
    whole, part = (run(_turbine(folder, s), TURBINE) for s in (1.0, scale))
    for figure in ("eta_s_1", "steam_rate"):
        wide, narrow = (_value(b, "tg", figure, "u_value") for b in (whole, part))
        np.testing.assert_allclose(narrow, scale * wide, rtol=0.02)


def test_instruments_without_error_leave_no_uncertainty(tmp_path):
    batch = run(_turbine(tmp_path, 0.0), TURBINE)
    assert (_value(batch, "tg", "eta_s_1", "u_value") == 0).all()
    assert (batch.equipment["u_destroyed_live_kw"] == 0).all()
    assert (batch.ledger["u_destroyed_live_kw"] == 0).all()


def test_a_site_of_fixed_values_alone_has_figures_and_no_uncertainty(tmp_path):
    """Throttled from 12 bar, 250 degC to 3 bar: I = m T0 (s2 - s1), h2 = h1, by iapws."""
    site = build(
        tmp_path,
        {
            "in": {"pressure": "12 bar(a)", "temperature": "250 degC", "flow": "5 kg/s"},
            "out": {"pressure": "3 bar(a)", "flow": "balance", "enthalpy": "balance"},
        },
        {"valve": {"kind": "letdown", "ports": {"inlet": "in", "outlet": "out"}}},
        dead={"temperature": "15 degC", "pressure": "1 bar(a)"},
    )
    assert site.used_tags() == {}
    batch = run(site, AMBIENT)
    before = IAPWS97(P=1.2, T=523.15)
    after = IAPWS97(P=0.3, h=before.h)
    expected = 5 * 288.15 * (after.s - before.s)
    # The reference's p,h state is a backward equation's: 0.03 K, IAPWS R7-97, table 1.
    assert batch.equipment["destroyed_live_kw"].to_numpy() == pytest.approx(expected, rel=1e-4)
    assert (batch.equipment["u_destroyed_live_kw"] == 0).all()
    assert (batch.ledger["u_destroyed_live_kw"] == 0).all()


def test_a_tag_that_does_not_touch_the_equipment_changes_nothing(tmp_path):
    def both(folder, u):
        folder.mkdir()
        site = _turbine(folder, ZZ={"unit": "degC", "uncertainty": f"{u} K"})
        return run(site, TURBINE | {"ZZ": 50.0})

    one, other = both(tmp_path / "a", 0.1), both(tmp_path / "b", 40)
    assert one.conditions.equals(other.conditions)
    assert one.equipment.equals(other.equipment)


def test_uncertainties_do_not_depend_on_the_window(tmp_path):
    """Six hours at once, and an hour or a part of one by itself, to the last bit."""
    site = _letdown(tmp_path)
    rng = np.random.default_rng(7)
    swing = {
        n: (lambda t, n=n: LETDOWN[n] * (1 + 0.02 * np.sin(t / 2000 + len(n)) * rng.random()))
        for n in LETDOWN
    }
    times = np.arange(START - 4 * lead_in(site), START + 6 * 3600 + 1, 60)
    fixed = {n: f(times - START) for n, f in swing.items()}

    def values(name):
        return lambda t: np.interp(t + START, times, fixed[name])

    read = _readings(times, {n: values(n) for n in fixed})
    whole = compute(site, read, START, START + 6 * 3600).batch
    for first, last in ((2, 3), (3, 3.5), (4, 6)):
        start, end = START + first * 3600, int(START + last * 3600)
        part = compute(site, read, start, end).batch
        for table, columns in (
            ("streams", ["u_mass_flow_kg_s", "u_exergy_live_kw"]),
            ("equipment", ["u_destroyed_live_kw"]),
            ("conditions", ["u_value"]),
            ("ledger", ["u_used_live_kw", "u_lost_live_kw", "u_imbalance_live_kw"]),
        ):
            own, all_of_it = getattr(part, table), getattr(whole, table)
            inside = all_of_it[(all_of_it["time"] >= start) & (all_of_it["time"] < end)]
            assert len(inside) == len(own) > 0
            for column in columns:
                assert own[column].tolist() == inside[column].tolist()


def _readings(times, values):
    names = list(values)
    table = pd.DataFrame(
        {
            "tag": pd.Categorical.from_codes(
                np.repeat(np.arange(len(names)), len(times)), categories=names
            ),
            "time": pd.to_datetime(np.tile(times, len(names)), unit="s", utc=True).as_unit("us"),
            "value": np.concatenate([values[n](times - START) for n in names]),
            "quality": np.zeros(len(names) * len(times), dtype=np.uint8),
        }
    )
    return ReadResult(table)


def test_beside_saturation_the_phase_itself_is_uncertain(tmp_path):
    """A rectangular distribution between the two saturated states: its width / sqrt(12)."""
    site = build(
        tmp_path,
        {
            "in": {"flow": "F", "pressure": "P", "temperature": "T"},
            "out": {"flow": "balance", "pressure": "P", "temperature": "T"},
        },
        {"h": {"kind": "header", "ports": {"inlet": "in", "outlet": "out"}}},
        AMBIENT_TAGS
        | {
            "F": {"unit": "t/h", "uncertainty": "0.1 t/h"},
            "P": {"unit": "bar(a)", "uncertainty": "0.05 bar(a)"},
            "T": {"unit": "degC", "uncertainty": "0.5 K"},
        },
    )
    wet, dry = IAPWS97(P=1.0, x=0), IAPWS97(P=1.0, x=1)
    values = AMBIENT | {"F": 36.0, "P": 10.0, "T": dry.T - 273.15 + 0.5}
    found = rows(run(site, values).streams, "in")
    assert (found["flag"] & int(Flag.NEAR_SATURATION) != 0).all()
    width = 10 * (dry.h - wet.h - 288.15 * (dry.s - wet.s))
    np.testing.assert_allclose(found["u_exergy_live_kw"], width / np.sqrt(12), rtol=0.02)


def test_the_defaults_of_classes_are_told_to_whoever_writes_a_site_file():
    text = (Path(__file__).parents[3] / "config" / "README.md").read_text(encoding="utf-8")
    section = text.split("### Uncertainties")[1].split("###")[0]
    assert all(f"`{words}`" in section for words in DEFAULTS.values())


def test_figures_say_which_instruments_state_no_class(tmp_path):
    site = _turbine(tmp_path, T2={"unit": "degC"})
    times = np.arange(START - lead_in(site), START + 3601, 60)
    read = _readings(times, {n: (lambda t, v=v: np.full(len(t), v)) for n, v in TURBINE.items()})
    found = compute(site, read, START, START + 3600, with_budgets=True).uncertainties
    assert found is not None
    assert found.by_default == {"tg": ("T2",)}
    # 1.5 K, the documented default, instead of 0.8 K.
    budget = found.conditions["tg", "eta_s_1"]
    assert budget.ranked(0)[0][0] == "T2"


@pytest.mark.parametrize(("kelvin", "flagged"), [(-1.0, False), (-8.0, True)])
def test_an_impossible_efficiency_within_its_uncertainty_contradicts_nothing(
    tmp_path, kelvin, flagged
):
    """Superheated to superheated: 18 to 12 bar; the isentropic end is where eta_s is 100 %."""
    ideal = IAPWS97(P=1.2, s=IAPWS97(P=1.8, T=573.15).s)
    site = _turbine(tmp_path)
    values = TURBINE | {
        "P1": 18.0,
        "T1": 300.0,
        "P2": 12.0,
        "T2": ideal.T - 273.15 + kelvin,
        "W": 1.3,
    }
    batch = run(site, values)
    eta, u = _value(batch, "tg", "eta_s_1"), _value(batch, "tg", "eta_s_1", "u_value")
    assert (eta > 100).all()
    assert ((eta - 100 > 2 * u) == flagged).all()
    flags = _value(batch, "tg", "eta_s_1", "flag").astype(int)
    assert ((flags & int(Flag.SECOND_LAW) != 0) == flagged).all()


@pytest.mark.parametrize(("above", "flagged"), [(0.6, False), (3.0, True)])
def test_cooling_water_hotter_than_steam_within_its_thermometer_contradicts_nothing(
    tmp_path, above, flagged
):
    """Steam at 0.08 bar boils at 41.51 degC (iapws); the outlet's thermometer is good to 0.5 K."""
    boiling = IAPWS97(P=0.008, x=0).T - 273.15
    ports = {"steam": "wet", "condensate": "drip", "cooling_in": "ci", "cooling_out": "co"}
    site = build(
        tmp_path,
        {
            "wet": {"pressure": "0.08 bar(a)", "dryness": 0.9, "flow": "10 kg/s"},
            "drip": {"pressure": "0.08 bar(a)", "phase": "liquid", "flow": "10 kg/s"},
            "ci": {"pressure": "2 bar(a)", "temperature": "30 degC", "flow": "400 kg/s"},
            "co": {"pressure": "2 bar(a)", "temperature": "T", "flow": "400 kg/s"},
        },
        {"c": {"kind": "condenser", "ports": ports}},
        AMBIENT_TAGS | {"T": {"unit": "degC", "uncertainty": "0.5 K"}},
    )
    batch = run(site, AMBIENT | {"T": boiling + above})
    assert _value(batch, "c", "ttd") == pytest.approx(-above, abs=1e-4)
    assert _value(batch, "c", "ttd", "u_value") == pytest.approx(0.5, rel=1e-9)
    flags = _value(batch, "c", "ttd", "flag").astype(int)
    assert ((flags & int(Flag.SECOND_LAW) != 0) == flagged).all()


@pytest.mark.parametrize(("warmer", "told"), [(1.0, ""), (6.0, "TO may read too high")])
def test_check_doubts_the_thermometer_that_warms_a_header(tmp_path, warmer, told):
    """Steam that leaves warmer than it came: 6 K are far beyond two thermometers, 1 K is not."""
    thermometers = {"TI": "0.5 K", "TO": "0.8 K"}
    site = build(
        tmp_path,
        {
            "in": {"flow": "F", "pressure": "12 bar(a)", "temperature": "TI"},
            "out": {"flow": "balance", "pressure": "12 bar(a)", "temperature": "TO"},
        },
        {"h": {"kind": "header", "ports": {"inlet": "in", "outlet": "out"}}},
        AMBIENT_TAGS
        | {n: {"unit": "degC", "uncertainty": u} for n, u in thermometers.items()}
        | {"F": {"unit": "t/h", "uncertainty": "0.5 t/h"}},
    )
    values = AMBIENT | {"F": 40.0, "TI": 250.0, "TO": 250.0 + warmer}
    times = np.arange(START - lead_in(site), START + 3601, 60)
    read = _readings(times, {n: (lambda t, v=v: np.full(len(t), v)) for n, v in values.items()})
    window = compute(site, read, START, START + 3600, with_budgets=True)
    (line,) = equipment_lines(site, window, ())
    assert " +/- " in line.found
    assert line.verdict == ("look" if told else "ok")
    assert told in line.reason
    # All of the excess, by the thermometer with the largest part: 6 K in steps of 0.8 K.
    assert not told or ": 7." in line.reason
