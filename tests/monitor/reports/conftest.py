"""A small real store to gather from: six days of a plant whose turbine gets worse after four."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pytest
from typer.testing import CliRunner

from monitor.cli import app
from monitor.commands.opening import opened_to_read
from monitor.reports.gather import Gathered
from monitor.reports.pages import page_span

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator
    from pathlib import Path

    import pandas as pd

    from monitor.site.load import Site
    from monitor.store.site import SiteStore

HOSTILE = "<b>bold</b><script>owned=1</script>"


@dataclass(frozen=True)
class Reported:
    """A computed plant, open for reading.

    Attributes:
        site, store: as the program opens them.
        gathered: over the span that the pages cover, made when the newest figure was.
        readings: what the exports hold.
    """

    site: Site
    store: SiteStore
    gathered: Gathered
    readings: pd.DataFrame


def compute(path: Path, days: int) -> None:
    """Compute and judge so many days."""
    span = ["--from", "2026-01-10T00:00Z", "--to", f"2026-01-{10 + days}T00:00Z"]
    ran = CliRunner().invoke(app, ["backfill", str(path), *span, "--workers", "1"])
    assert ran.exit_code == 0, ran.stderr


def _reported(plant, days: int = 6) -> Iterator[Reported]:
    # Real transmitters are never still: a hundredth of a per cent keeps these from looking stuck.
    noise = np.random.default_rng(3).normal(1.0, 1e-4, len(plant.readings))
    rows = plant.readings.assign(value=(plant.readings["value"] * noise).round(4))
    plant.write(rows)
    compute(plant.path, days)
    with opened_to_read(plant.path) as at:
        start, end = page_span(at.site, at.store)
        newest = at.store.newest()
        assert newest is not None
        gathered = Gathered(at.site, at.store, start, end, newest)
        yield Reported(at.site, at.store, gathered, rows)


@pytest.fixture(scope="session")
def reported(tmp_path_factory, make_plant: Callable[..., object]) -> Iterator[Reported]:
    """The plant as it is."""
    folder = tmp_path_factory.mktemp("reported")
    yield from _reported(make_plant(folder, days=6.0, worse_after_days=4.0))


@pytest.fixture(scope="session")
def hostile(tmp_path_factory, make_plant: Callable[..., object]) -> Iterator[Reported]:
    """The plant with markup wherever its site file takes free text."""
    plant = make_plant(tmp_path_factory.mktemp("hostile"), days=6.0, worse_after_days=4.0)
    plant.edit('name = "Mill Race Works"', f'name = "Works {HOSTILE}"')
    plant.edit('name = "Turbine TG1"', f'name = "Turbine {HOSTILE}"')
    plant.edit('description = "ambient temperature"', f'description = "ambient {HOSTILE}"')
    plant.edit('id = "exhaust"\n', f'id = "exhaust"\nname = "Exhaust {HOSTILE}"\n')
    plant.edit('currency = "EUR"', 'currency = "<i>"')
    yield from _reported(plant)


@pytest.fixture(scope="session")
def patchy(tmp_path_factory, make_plant: Callable[..., object]) -> Iterator[Reported]:
    """A day whose barometer is bad for three hours of the late shift."""
    plant = make_plant(tmp_path_factory.mktemp("patchy"), days=1.0)
    rows = plant.readings
    bad = (
        (rows["tag"] == "PT-0001")
        & (rows["time"] >= "2026-01-10T14:00Z")
        & (rows["time"] < "2026-01-10T17:00Z")
    )
    rows.loc[bad, "quality"] = "Bad"
    yield from _reported(plant, days=1)
