"""One short plant with every event in it, shared by the demo's tests."""

from __future__ import annotations

import pytest

from monitor.demo import DemoPlan, Plant, simulate

EVENTFUL = DemoPlan(
    days=2,
    drift_day=0.3,
    passing_day=0.9,
    stop_day=1.2,
    heat_wave_day=0.5,
    outage_day=0.25,
    frozen_day=0.6,
)


@pytest.fixture(scope="session")
def eventful_plan() -> DemoPlan:
    return EVENTFUL


@pytest.fixture(scope="session")
def eventful_plant() -> Plant:
    return simulate(EVENTFUL)
