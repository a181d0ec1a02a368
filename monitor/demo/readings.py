"""What the historian holds: the instruments' readings, and the dirt that real exports carry."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from monitor.demo.files import read_tags
from monitor.demo.instruments import shown

if TYPE_CHECKING:
    from collections.abc import Mapping

    import numpy.typing as npt

    from monitor.demo.files import DemoTag
    from monitor.demo.plan import DemoPlan, FloatArray
    from monitor.demo.plant import Plant

__all__ = ["BAD", "GOOD", "NO_VALUE", "UNCERTAIN", "Column", "Readings", "take_readings"]

GOOD, UNCERTAIN, BAD, NO_VALUE = 0, 1, 2, 3

OUTAGE_HOURS = 3.0
FROZEN_HOURS = {"TT-4302": 7.0, "FT-7102": 5.0}
# The chance that one reading is ...
MISSING, DOUBTFUL, DOUBLED, SPIKE = 1.5e-3, 8e-4, 2e-4, 6e-5
BAD_SPELL_EVERY_DAYS = 25.0


@dataclass(frozen=True)
class Column:
    """One tag's readings over the plan.

    Attributes:
        tag: the instrument.
        value: in the tag's unit, shape (n,).
        quality: GOOD, UNCERTAIN, BAD (the value is there), NO_VALUE (bad, and no number).
        present: False where the historian has no row.
        doubled: where the row comes twice; the first one carries the value before.
    """

    tag: DemoTag
    value: FloatArray
    quality: npt.NDArray[np.uint8]
    present: npt.NDArray[np.bool_]
    doubled: npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Readings:
    """All readings of a plan.

    Attributes:
        times: integer seconds since 1970-01-01 UTC.
        columns: by tag, in the order of the tag list.
        dirt: what was soiled: ``tag``, ``what``, ``count``.
    """

    times: npt.NDArray[np.int64]
    columns: Mapping[str, Column]
    dirt: pd.DataFrame

    def of(self, source: str) -> tuple[Column, ...]:
        """Columns of one source."""
        return tuple(c for c in self.columns.values() if c.tag.source == source)


def take_readings(plant: Plant, plan: DemoPlan) -> Readings:
    """Read every instrument over the whole plan."""
    columns: dict[str, Column] = {}
    log: list[tuple[str, str, int]] = []
    for tag in read_tags():
        value = shown(plant, plan, tag)
        column = _clean(tag, value)
        columns[tag.name] = _soiled(column, plan, log) if plan.dirt else column
    return Readings(
        times=plant.times,
        columns=columns,
        dirt=pd.DataFrame(log, columns=["tag", "what", "count"]),
    )


def _clean(tag: DemoTag, value: FloatArray) -> Column:
    return Column(
        tag=tag,
        value=value,
        quality=np.zeros(value.size, dtype=np.uint8),
        present=np.ones(value.size, dtype=np.bool_),
        doubled=np.zeros(value.size, dtype=np.bool_),
    )


def _soiled(clean: Column, plan: DemoPlan, log: list[tuple[str, str, int]]) -> Column:
    tag, days = clean.tag, plan.elapsed_days()
    rng = plan.rng(f"dirt {tag.name}")
    value, quality, present = clean.value.copy(), clean.quality.copy(), clean.present.copy()

    frozen = _frozen(tag, days, plan)
    if frozen.any():
        value[frozen] = value[np.flatnonzero(frozen)[0]]
    # The barometer and the outdoor thermometer are good instruments: nothing worse than gaps.
    spikes = (rng.random(value.size) < SPIKE) & (not tag.name.endswith("-0001"))
    above = rng.random(value.size) < 0.5 if tag.low < 0 else np.ones(value.size, dtype=np.bool_)  # noqa: PLR2004
    span = tag.high - tag.low
    value[spikes] = np.round(np.where(above, tag.high, tag.low - 0.4 * span) + 0.2 * span, 1)[
        spikes
    ]

    doubtful = rng.random(value.size) < DOUBTFUL
    quality[doubtful] = UNCERTAIN
    bad = _bad_spells(rng, days, plan) & (tag.name != "PT-0001")
    quality[bad] = BAD
    quality[bad & (rng.random(value.size) < 0.5)] = NO_VALUE  # noqa: PLR2004 - every other one
    if tag.source == "utilities":
        # A wide table has no room for a quality: a doubtful reading looks like any other.
        quality[doubtful] = GOOD
        quality[bad] = NO_VALUE

    missing = rng.random(value.size) < MISSING
    outage = _outage(tag, days, plan)
    present &= ~(missing | outage)
    doubled = (rng.random(value.size) < DOUBLED) & present & (tag.source == "dcs")
    doubled[0] = False
    parts = {
        "frozen": frozen & present,
        "spike": spikes & present & (quality <= UNCERTAIN),
        "uncertain": (quality == UNCERTAIN) & present,
        "bad": (quality >= BAD) & present,
        "missing": missing & ~outage,
        "outage": outage,
        "doubled": doubled,
    }
    log += [(tag.name, what, int(where.sum())) for what, where in parts.items() if where.any()]
    return Column(tag=tag, value=value, quality=quality, present=present, doubled=doubled)


def _frozen(tag: DemoTag, days: FloatArray, plan: DemoPlan) -> npt.NDArray[np.bool_]:
    hours = FROZEN_HOURS.get(tag.name, 0.0)
    return (days >= plan.frozen_day) & (days < plan.frozen_day + hours / 24)


def _outage(tag: DemoTag, days: FloatArray, plan: DemoPlan) -> npt.NDArray[np.bool_]:
    hours = OUTAGE_HOURS if tag.source == "utilities" else 0.0
    return (days >= plan.outage_day) & (days < plan.outage_day + hours / 24)


def _bad_spells(
    rng: np.random.Generator, days: FloatArray, plan: DemoPlan
) -> npt.NDArray[np.bool_]:
    """Spells of ten minutes to two hours in which a transmitter reports itself bad."""
    spells = np.zeros(days.size, dtype=np.bool_)
    gaps = rng.exponential(BAD_SPELL_EVERY_DAYS, size=16)
    for start, hours in zip(np.cumsum(gaps), rng.uniform(0.17, 2.0, size=16), strict=True):
        if start > plan.days:
            break
        spells |= (days >= start) & (days < start + hours / 24)
    return spells
