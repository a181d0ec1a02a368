"""Sources that stand still as a whole: they answer, and repeat their last values.

A single tag that stands still is told by its neighbours (`monitor.readings.condition`). When all
tags of a source stop at once no neighbour moves; what tells then is that no set of instruments
repeats its values to the last digit for hours, all from one moment on.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from connectors.base import Quality
from monitor.readings.condition import at_rest

if TYPE_CHECKING:
    from collections.abc import Mapping

    import pandas as pd

    from monitor.site.load import Site
    from monitor.site.models import Tag

__all__ = ["frozen_for"]

_LEAST_TAGS = 4
_LEAST_REPEATS = 5
"""Readings after the last movement; a source that reports changes alone gives none."""


def frozen_for(site: Site, parts: Mapping[str, pd.DataFrame], source: str) -> float | None:
    """Say how long no tag of a source has moved, None where one has within its stuck time.

    At least four tags that do not rest and have a stuck time have to repeat their values exactly
    for longer than the longest of these times, and no other tag of the source may move meanwhile.

    Args:
        site: the site.
        parts: the readings of a day by tag: ``time``, ``value``, ``quality``.
        source: which.

    Returns:
        From the last movement of any tag to the newest reading [s].
    """
    moved, newest, limits = -np.inf, -np.inf, []
    for name, tag in site.used_tags().items():
        if tag.source != source or name not in parts:
            continue
        part = parts[name]
        usable = (part["quality"] != Quality.BAD) & np.isfinite(part["value"])
        values = part["value"].to_numpy(np.float64)[usable]
        if not len(values):
            continue
        seconds = part["time"].dt.as_unit("us").astype("int64").to_numpy()[usable] / 1e6
        begin = _last_change(values)
        moved, newest = max(moved, float(seconds[begin])), max(newest, float(seconds[-1]))
        if len(values) - begin > _LEAST_REPEATS and _moves(tag, values[begin]):
            limits.append(tag.stuck_seconds)
    if len(limits) < _LEAST_TAGS or newest - moved <= max(limits):
        return None
    return newest - moved


def _last_change(values: np.ndarray[tuple[int], np.dtype[np.float64]]) -> int:
    """Return the position of the first of the equal values at the end."""
    changes = np.flatnonzero(values[1:] != values[:-1])
    return int(changes[-1]) + 1 if len(changes) else 0


def _moves(tag: Tag, value: float) -> bool:
    one = np.array([value])
    return tag.stuck_seconds > 0 and not at_rest(one, one, tag)[0]
