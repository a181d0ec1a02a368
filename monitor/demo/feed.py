"""From a plant to a folder of exports: all at once, or minute by minute like a live historian."""

from __future__ import annotations

import datetime as dt
from typing import TYPE_CHECKING

import numpy as np

from monitor.demo.exports import open_writers
from monitor.demo.plan import DemoError
from monitor.demo.readings import take_readings

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from monitor.demo.plan import DemoPlan
    from monitor.demo.plant import Plant

__all__ = ["LiveFeed", "live_feed", "write_exports"]


class LiveFeed:
    """Appends readings to the exports as time goes on. Calling it moves it to a time."""

    def __init__(self, plant: Plant, plan: DemoPlan, folder: Path, start: dt.datetime) -> None:
        self._readings = take_readings(plant, plan)
        self._writers = open_writers(self._readings, folder / "exports")
        self._next = self._row(start)

    @property
    def done(self) -> bool:
        """Whether the plan has no readings left."""
        return self._next >= self._readings.times.size

    def __call__(self, time: dt.datetime) -> int:
        """Append every reading before a time that has not been written yet.

        Args:
            time: with a time zone. An earlier time than the last one writes nothing.

        Returns:
            Readings written.
        """
        row = self._row(time)
        if row <= self._next:
            return 0
        written = sum(writer.append(self._next, row) for writer in self._writers)
        self._next = row
        return written

    def _row(self, time: dt.datetime) -> int:
        if time.tzinfo is None:
            raise DemoError(f"{time} has no time zone; give it in UTC")
        return int(np.searchsorted(self._readings.times, time.timestamp(), side="left"))


def live_feed(
    plant: Plant, plan: DemoPlan, folder: Path, start: dt.datetime | None = None
) -> LiveFeed:
    """Open a feed that appends the plan's readings to ``folder / "exports"`` when it is called.

    Args:
        plant: from `simulate`.
        plan: the same plan.
        folder: the site's folder.
        start: readings before this time are there already (`write_exports` with ``until``); the
            plan's start when left out.
    """
    return LiveFeed(plant, plan, folder, start or plan.start)


def write_exports(
    plant: Plant,
    plan: DemoPlan,
    folder: Path,
    progress: Callable[[float], None] | None = None,
    until: dt.datetime | None = None,
) -> int:
    """Write the exports of a whole plan into ``folder / "exports"``.

    Args:
        plant: from `simulate`.
        plan: the same plan.
        folder: the site's folder.
        progress: told the share that is done, 0 to 1, after each day.
        until: readings from this time on are left for a live feed; the plan's end when left out.

    Returns:
        Readings written.

    Raises:
        DemoError: there are exports in the folder already.
    """
    exports = folder / "exports"
    if exports.exists() and any(exports.iterdir()):
        raise DemoError(f"{exports} is not empty; remove it, or name another folder for the demo")
    feed = live_feed(plant, plan, folder)
    end = plan.start + dt.timedelta(days=plan.days)
    end = end if until is None else min(until, end)
    time, written = plan.start, 0
    while time < end:
        time = min(time + dt.timedelta(days=1), end)
        written += feed(time)
        if progress is not None:
            progress((time - plan.start) / (end - plan.start))
    return written
