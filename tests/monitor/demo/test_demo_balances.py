"""The simulated plant obeys the laws it is made to demonstrate, at every reading."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from iapws import IAPWS97

from monitor.demo import DemoError, DemoPlan, simulate
from monitor.demo.layout import MACHINES
from monitor.demo.plant import (
    destroyed,
    energy_residual,
    entropy_generation,
    exergy,
    mass_residual,
)
from monitor.demo.weather import weather

IDS = [machine.id for machine in MACHINES]


def _through(plant, machine, name):
    """How much of something passes a machine: the scale that a residual is held against."""
    streams = [plant.streams[s] for s in (*machine.inlets, *machine.outlets)]
    return np.sum([np.abs(getattr(s, name)) for s in streams], axis=0) / 2


@pytest.mark.parametrize("machine_id", IDS)
def test_mass_closes_at_every_reading(eventful_plant, machine_id):
    machine = eventful_plant.machines[machine_id]
    scale = np.maximum(_through(eventful_plant, machine, "mass_flow"), 1e-3)
    assert np.all(np.abs(mass_residual(eventful_plant, machine)) <= 1e-9 * scale)


@pytest.mark.parametrize("machine_id", IDS)
def test_energy_closes_at_every_reading(eventful_plant, machine_id):
    machine = eventful_plant.machines[machine_id]
    scale = np.maximum(_through(eventful_plant, machine, "energy"), 1.0)
    assert np.all(np.abs(energy_residual(eventful_plant, machine)) <= 1e-9 * scale)


@pytest.mark.parametrize("machine_id", IDS)
def test_no_machine_ever_destroys_entropy(eventful_plant, machine_id):
    machine = eventful_plant.machines[machine_id]
    made = entropy_generation(eventful_plant, machine, eventful_plant.live.temperature)
    # The feed-water manifold is a mere fork: nothing but rounding.
    rounding = 1e-12 * _through(eventful_plant, machine, "entropy_rate")
    assert np.all(made >= -rounding)


@pytest.mark.parametrize("machine_id", [m for m in IDS if m != "ACC"])
def test_destroyed_exergy_is_what_the_exergy_balance_leaves(eventful_plant, machine_id):
    # Gouy-Stodola against the balance of stream exergies: heat lost at T0 carries none.
    machine, dead = eventful_plant.machines[machine_id], eventful_plant.live
    left = sum(exergy(eventful_plant.streams[s], dead) for s in machine.inlets) - sum(
        exergy(eventful_plant.streams[s], dead) for s in machine.outlets
    )
    np.testing.assert_allclose(destroyed(eventful_plant, machine, dead), left, rtol=1e-9, atol=1e-2)


def test_the_accumulator_holds_what_its_level_and_pressure_say(eventful_plant):
    # iapws computes the vessel's content from level and pressure alone.
    content = eventful_plant.machines["ACC"].content
    for i in (0, 700, 2000, 2879):
        p = eventful_plant.signals["acc_pressure"][i]
        level = eventful_plant.signals["acc_level"][i]
        liquid, vapour = (IAPWS97(P=p / 1e6, x=x) for x in (0, 1))
        masses = 60.0 * level / liquid.v, 60.0 * (1 - level) / vapour.v
        assert content.mass[i] == pytest.approx(sum(masses), rel=1e-5)
        energy = 1e3 * (masses[0] * liquid.u + masses[1] * vapour.u)
        assert content.internal_energy[i] == pytest.approx(energy, rel=1e-5)
        entropy = 1e3 * (masses[0] * liquid.s + masses[1] * vapour.s)
        assert content.entropy[i] == pytest.approx(entropy, rel=1e-5)


def test_the_accumulator_works(eventful_plant):
    pressure = eventful_plant.signals["acc_pressure"]
    assert pressure.max() - pressure.min() > 0.3e5
    assert pressure.min() > 5e5
    assert pressure.max() < 12e5


def test_every_flow_goes_the_way_the_arrows_point(eventful_plant):
    for name, stream in eventful_plant.streams.items():
        assert np.all(stream.mass_flow >= 0), name
        assert np.all(stream.energy >= 0), name


def test_the_section_loses_two_points_whatever_the_load(eventful_plan):
    # The same plant without the event differs by the event alone, but for the boilers' answer.
    plan = dataclasses.replace(eventful_plan, days=1.0)
    worn = simulate(plan).conditions["TG1", "eta_s_1"]
    sound = simulate(dataclasses.replace(plan, drift_day=99.0)).conditions["TG1", "eta_s_1"]
    lost = sound - worn
    assert np.all(lost[:430] == 0)
    assert lost[-1] == pytest.approx(0.02, abs=2e-4)
    assert np.all(np.diff(lost) > -2e-4)


def test_the_closed_valve_passes_two_tonnes_an_hour(eventful_plant):
    after = slice(int(1.16 * 1440), int(1.4 * 1440))
    assert np.all(eventful_plant.signals["ld62_position"][after] == 0)
    flow = eventful_plant.streams["ld62_inlet"].mass_flow * 3.6
    np.testing.assert_allclose(flow[after], 2.0, rtol=0.02)
    assert np.all(flow[: int(0.9 * 1440)] == 0)


def test_a_heat_wave_moves_the_condenser_and_no_machine(eventful_plan):
    plan = dataclasses.replace(eventful_plan, days=1.5, stop_day=99.0)
    hot = simulate(plan)
    mild = simulate(dataclasses.replace(plan, heat_wave_day=99.0))
    assert hot.live.temperature[-1] > mild.live.temperature[-1] + 10
    assert (
        hot.streams["cooling_in"].temperature[-1] > mild.streams["cooling_in"].temperature[-1] + 5
    )
    assert hot.streams["tg2_exhaust"].pressure[-1] > 1.25 * mild.streams["tg2_exhaust"].pressure[-1]
    # At the same flow a section is as good as before: TG1's curve is the same, at its own flow.
    for plant in (hot, mild):
        flow = plant.streams["tg1_exhaust"].mass_flow
        curve = 0.80 * (1 - 0.16 * (flow / 21.0 - 1) ** 2)
        np.testing.assert_allclose(plant.conditions["TG1", "eta_s_2"], curve, atol=5e-4)


def test_events_inside_the_plan_are_in_the_truth(eventful_plant, eventful_plan):
    events = eventful_plant.events.set_index("what")
    assert set(events[events["is_fault"]]["equipment"]) == {"TG1", "LD62"}
    assert "heat wave" in events.index
    assert events.loc["planned stop", "start"] == eventful_plan.start + np.timedelta64(
        int(1.2 * 86400), "s"
    )
    assert simulate(DemoPlan(days=0.05)).events.empty


def test_the_default_span_has_frost_a_heat_wave_and_moving_weather():
    plan = DemoPlan()
    air = weather(plan)
    celsius, days = air.temperature - 273.15, plan.elapsed_days()
    assert np.count_nonzero(celsius < 0) > 60 * 60
    assert celsius.min() < -3
    hottest = [celsius[(days >= d) & (days < d + 1)].max() for d in (48, 49, 50, 51, 52)]
    assert min(hottest) > 24
    assert max(hottest) > 27
    assert air.barometer.min() > 980e2
    assert air.barometer.max() < 1035e2
    assert np.ptp(air.barometer) > 30e2


def test_the_default_plan_happens_on_the_promised_days():
    plan = DemoPlan()
    assert (plan.days, plan.interval_s) == (60, 60)
    assert plan.drift_day == pytest.approx(30, abs=1)
    assert plan.passing_day == pytest.approx(40, abs=1)
    assert plan.heat_wave_day == pytest.approx(48, abs=1)


@pytest.mark.parametrize(
    ("change", "words"),
    [({"days": 0}, "empty"), ({"interval_s": 7}, "divide an hour")],
)
def test_a_plan_that_makes_no_sense_is_refused(change, words):
    with pytest.raises(DemoError, match=words):
        DemoPlan(**change)
