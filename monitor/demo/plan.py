"""What the demo simulates: the span, the seed, and the days on which something happens."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["DemoError", "DemoPlan", "FloatArray"]

FloatArray = npt.NDArray[np.float64]


class DemoError(Exception):
    """The demo cannot be made; the message says what was found and what to do."""


@dataclass(frozen=True)
class DemoPlan:
    """A span of plant time to simulate, and what happens in it.

    The default span has frost nights at its start, a daylight-saving change on day 33 and a heat
    wave near its end. Days are counted from ``start``; an event past the end does not happen.

    Attributes:
        start: first minute, UTC.
        days: length.
        seed: everything random comes from this; the same plan gives the same bytes.
        noise: readings carry instrument error.
        dirt: exports carry outages, spikes, bad-quality words and frozen gauges.
        interval_s: time between readings [s].
        drift_day: the first section of TG1 starts to lose two points of isentropic efficiency.
        passing_day: the closed let-down valve LD62 starts to pass 2 t/h.
        heat_wave_day: five hot days begin.
        stop_day: the board machine stops for a wash of eight hours.
        outage_day: the utilities logger writes nothing for three hours.
        frozen_day: two gauges stand still for some hours.
    """

    start: dt.datetime = dt.datetime(2026, 2, 24, tzinfo=dt.UTC)
    days: float = 60
    seed: int = 62
    noise: bool = True
    dirt: bool = True
    interval_s: int = 60
    drift_day: float = 30.3
    passing_day: float = 40.2
    heat_wave_day: float = 48.0
    stop_day: float = 22.25
    outage_day: float = 11.4
    frozen_day: float = 17.6

    def __post_init__(self) -> None:
        if self.start.tzinfo is None:
            raise DemoError("the plan's start has no time zone; give it in UTC")
        if self.days <= 0 or self.interval_s <= 0:
            raise DemoError(f"a plan of {self.days} days at {self.interval_s} s is empty")
        if 3600 % self.interval_s:
            raise DemoError(f"interval_s = {self.interval_s} does not divide an hour; use 60")

    @property
    def first_second(self) -> int:
        """The start as integer seconds since 1970-01-01 UTC."""
        return int(self.start.timestamp())

    def times(self) -> npt.NDArray[np.int64]:
        """Every reading's time, integer seconds since 1970-01-01 UTC."""
        count = round(self.days * 86400 / self.interval_s)
        return self.first_second + self.interval_s * np.arange(count, dtype=np.int64)

    def elapsed_days(self) -> FloatArray:
        """Every reading's time in days since the start."""
        return (self.times() - self.first_second) / 86400.0

    def rng(self, topic: str) -> np.random.Generator:
        """A random stream of its own for each topic, so that one does not move another."""
        return np.random.default_rng([self.seed, *topic.encode()])
