"""The truth is right: recomputed with the iapws library (IAPWS R7-97), and read back from disk."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from iapws import IAPWS97

from monitor.demo import DemoError, read_truth, write_truth

HOUR = 15 * 60  # the sixteenth hour of the plan: frost is over, TG1 is partly worn
MINUTES = (HOUR, HOUR + 20, HOUR + 40, HOUR + 59)


def _state(stream, i):
    """The stream's state by iapws, from pressure and temperature, or dryness where it is wet."""
    p, T, x = stream.pressure[i] / 1e6, stream.temperature[i], stream.dryness[i]
    saturated = abs(IAPWS97(P=p, x=0).T - T) < 0.01
    return IAPWS97(P=p, x=x) if saturated else IAPWS97(P=p, T=T)


@pytest.mark.parametrize("minute", MINUTES)
def test_every_state_agrees_with_an_independent_library(eventful_plant, minute):
    checked = 0
    for name, stream in eventful_plant.streams.items():
        if stream.medium != "water":
            continue
        other = _state(stream, minute)
        assert stream.enthalpy[minute] == pytest.approx(1e3 * other.h, rel=1e-4, abs=5.0), name
        assert stream.entropy[minute] == pytest.approx(1e3 * other.s, rel=1e-4, abs=0.05), name
        assert stream.energy[minute] == pytest.approx(
            stream.mass_flow[minute] * 1e3 * other.h, rel=1e-4, abs=1.0
        ), name
        checked += 1
    assert checked == 36


@pytest.mark.parametrize("minute", MINUTES)
def test_turbine_efficiencies_agree_with_an_independent_library(eventful_plant, minute):
    streams = eventful_plant.streams

    def efficiency(inlet, outlet):
        start, end = _state(streams[inlet], minute), _state(streams[outlet], minute)
        ideal = IAPWS97(P=streams[outlet].pressure[minute] / 1e6, s=start.s)
        return (start.h - end.h) / (start.h - ideal.h)

    expected = {
        ("TG1", "eta_s_1"): efficiency("tg1_inlet", "tg1_extraction"),
        ("TG1", "eta_s_2"): efficiency("tg1_extraction", "tg1_exhaust"),
        ("TG2", "eta_s_1"): efficiency("tg2_inlet", "tg2_exhaust"),
    }
    for key, value in expected.items():
        # iapws inverts p,s by IF97's backward equations: 0.1 kJ/kg in some 200 kJ/kg.
        assert eventful_plant.conditions[key][minute] == pytest.approx(value, abs=5e-4), key


@pytest.mark.parametrize("minute", MINUTES)
def test_power_is_what_the_steam_gives_up_less_the_drive(eventful_plant, minute):
    s = eventful_plant.streams

    def carried(name):
        return s[name].mass_flow[minute] * 1e3 * _state(s[name], minute).h

    internal = carried("tg1_inlet") - carried("tg1_extraction") - carried("tg1_exhaust")
    assert s["tg1_power"].energy[minute] == pytest.approx(0.97 * internal, rel=1e-4)
    internal = carried("tg2_inlet") - carried("tg2_exhaust")
    assert s["tg2_power"].energy[minute] == pytest.approx(0.97 * internal, rel=1e-4)


@pytest.mark.parametrize("minute", MINUTES)
def test_live_exergy_agrees_with_an_independent_library(eventful_plant, tmp_path, minute):
    live = eventful_plant.live
    T0, p0 = live.temperature[minute], live.pressure[minute]
    assert T0 > 273.16
    dead = IAPWS97(P=p0 / 1e6, T=T0)
    write_truth(eventful_plant, tmp_path)
    stored = read_truth(tmp_path).tables["exergy_live"].iloc[minute]
    for name in ("tg1_inlet", "tg1_exhaust", "tg2_exhaust", "b1_blowdown", "acc_discharge"):
        stream = eventful_plant.streams[name]
        steam = _state(stream, minute)
        flow_exergy = 1e3 * (steam.h - dead.h - T0 * (steam.s - dead.s))
        assert stored[name] == pytest.approx(stream.mass_flow[minute] * flow_exergy, rel=1e-4)


def test_what_is_written_is_what_is_read(eventful_plant, tmp_path):
    write_truth(eventful_plant, tmp_path)
    truth = read_truth(tmp_path)
    flow = truth.tables["mass_flow"]
    assert flow.index[0] == pd.Timestamp("2026-02-24", tz="UTC")
    assert len(flow) == 2 * 1440
    for name, stream in eventful_plant.streams.items():
        np.testing.assert_array_equal(flow[name], stream.mass_flow)
    assert set(truth.tables["destroyed_live"]) == set(eventful_plant.machines)
    pd.testing.assert_frame_equal(
        truth.events, eventful_plant.events, check_dtype=False, check_index_type=False
    )


def test_a_folder_without_truth_says_what_to_do(tmp_path):
    with pytest.raises(DemoError, match="write_truth"):
        read_truth(tmp_path)
