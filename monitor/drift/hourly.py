"""Condition figures by the hour: weighted means over the grid cells that may be judged."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd

from monitor.flags import NOT_JUDGED

if TYPE_CHECKING:
    from monitor.flags import FlagArray

__all__ = ["HOURLY_COLUMNS", "hourly_means"]

HOUR = 3600
HOURLY_COLUMNS = ("hour", "value", "load", "cells")


def hourly_means(
    time: npt.NDArray[np.int64],
    value: npt.NDArray[np.float64],
    weight: npt.NDArray[np.float64],
    load: npt.NDArray[np.float64],
    flag: FlagArray,
    *,
    cells_per_hour: int,
    least_cells: float,
) -> pd.DataFrame:
    """Average a condition figure over each hour.

    A cell counts if its value is finite, its weight above zero and its flag has none of
    `NOT_JUDGED`. The value's mean is weighted with the figure's own denominator, so that the hour's
    figure is the one that the hour's totals give; the load's mean is over the same cells.

    Args:
        time: start of each grid cell, integer UTC seconds, shape (n,), in any order.
        value: in the figure's unit.
        weight: its denominator.
        load: kg/s; NaN where the equipment has none.
        flag: what each value rests on.
        cells_per_hour: grid cells in an hour.
        least_cells: share of these that an hour needs.

    Returns:
        One row for each hour that has a cell, in order: ``hour`` (integer UTC seconds), ``value``
        and ``load`` (NaN when fewer than ``least_cells`` count), ``cells`` (how many count).
    """
    counts = np.isfinite(value) & (weight > 0) & ((flag & int(NOT_JUDGED)) == 0)
    share = np.where(counts, weight, 0.0)
    loaded = counts & np.isfinite(load)
    cells = pd.DataFrame(
        {
            "hour": time // HOUR * HOUR,
            "weighted": np.where(counts, value, 0.0) * share,
            "weight": share,
            "load": np.where(loaded, load, 0.0),
            "loaded": loaded.astype(np.int64),
            "cells": counts.astype(np.int64),
        }
    )
    sums = cells.groupby("hour", sort=True, as_index=False).sum()
    enough = sums["cells"] >= max(least_cells * cells_per_hour, 1)
    return pd.DataFrame(
        {
            "hour": sums["hour"].astype("int64"),
            "value": (sums["weighted"] / sums["weight"].where(sums["weight"] > 0)).where(enough),
            "load": (sums["load"] / sums["loaded"].where(sums["loaded"] > 0)).where(enough),
            "cells": sums["cells"],
        }
    )
