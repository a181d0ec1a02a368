"""The avoidable part of what is destroyed: measured against the best that was demonstrated.

What the same equipment has reached, at like load, in the reference period of its baseline can be
reached again; the rest is unavoidable with the plant as it stands:

    I_unavoidable = E_P (I / E_P)_best,    I_avoidable = I - I_unavoidable

Source: G. Tsatsaronis, M.-H. Park, On avoidable and unavoidable exergy destructions and investment
costs in thermal systems, Energy Conversion and Management 43, 1259 (2002). There the best is what a
better machine could reach; here it is what this one did.

Single hours hold noise, and the best of many hours would be the luckiest one. So hours of like load
are joined, in order of time, into blocks of half a day, and the best tenth of these stands for the
best demonstrated. A vessel that stores works by the day: what it takes in the morning it gives in
the evening, so its blocks are days, whatever the load.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Avoidable", "Best", "avoidable", "best_demonstrated"]

FloatArray = npt.NDArray[np.float64]

_BLOCK = 12  # h
_STORING_BLOCK = 24  # h
_BEST_SHARE = 0.10
_LEAST_BLOCKS = 2
_BLOCKS_A_BAND = 4
_MOST_BANDS = 5
_LOAD_MARGIN = 0.10
"""As a baseline's: how far beyond the reference loads hours compare, as a share of their span."""
_LITTLE_PRODUCT = 0.01
"""A product under this share of the fuel is none: destruction is compared by fuel instead."""


@dataclass(frozen=True)
class Best:
    """Least destruction that was demonstrated, over load.

    Attributes:
        basis: what it is a share of, the equipment's product or its fuel.
        loads: middles of the load bands, rising [kg/s].
        ratios: destroyed per basis in each band, both at the reference dead state.
        load_low, load_high: between these loads hours are compared [kg/s].
    """

    basis: Literal["product", "fuel"]
    loads: FloatArray
    ratios: FloatArray
    load_low: float
    load_high: float

    def at(self, load: FloatArray) -> FloatArray:
        """The ratio at each load; NaN beyond the loads of the reference period."""
        within = (load >= self.load_low) & (load <= self.load_high)
        return np.where(within, np.interp(load, self.loads, self.ratios), np.nan)


@dataclass(frozen=True)
class Avoidable:
    """What could have been avoided over a span.

    Attributes:
        share: of what was destroyed, 0 to 1; NaN where nothing could be compared.
        compared: share of the span's hours in service at loads that the reference period knows.
    """

    share: float
    compared: float


def best_demonstrated(hours: pd.DataFrame, *, stores: bool = False) -> Best | None:
    """Find the least destruction that a piece of equipment has shown in its reference period.

    Args:
        hours: one row an hour in order of time: ``destroyed``, ``product``, ``fuel`` [kW] at the
            reference dead state, and ``load`` [kg/s]. Hours without a value are left out.
        stores: whether it is a vessel whose content moves.

    Returns:
        The best over load, or None when there are too few hours to tell.
    """
    known = hours[["destroyed", "product", "fuel", "load"]].dropna()
    block = _STORING_BLOCK if stores else _BLOCK
    if len(known) < block * _LEAST_BLOCKS:
        return None
    total = known.sum()
    basis: Literal["product", "fuel"] = (
        "product" if total["product"] > _LITTLE_PRODUCT * total["fuel"] else "fuel"
    )
    if not total[basis] > 0:
        return None
    load = known["load"].to_numpy(dtype=np.float64)
    most = 1 if stores else _MOST_BANDS
    bands = max(1, min(most, len(known) // (block * _BLOCKS_A_BAND)))
    # Ranks, not values, so that a band never lacks hours; equal loads stay in order of time.
    band = np.empty(len(load), dtype=np.int64)
    band[np.argsort(load, kind="stable")] = np.arange(len(load)) * bands // len(load)
    found = [_best_of(known[band == k], basis, block) for k in range(bands)]
    margin = np.inf if stores else _LOAD_MARGIN * float(np.ptp(load))
    return Best(
        basis,
        np.array([middle for middle, _ in found]),
        np.array([ratio for _, ratio in found]),
        float(load.min()) - margin,
        float(load.max()) + margin,
    )


def _best_of(hours: pd.DataFrame, basis: str, block: int) -> tuple[float, float]:
    """The median load of a band's hours, and the best tenth of its blocks' ratios."""
    whole = max(len(hours) // block, 1)
    starts = np.arange(whole) * block  # what is over joins the last block
    destroyed = np.add.reduceat(hours["destroyed"].to_numpy(dtype=np.float64), starts)
    based = np.add.reduceat(hours[basis].to_numpy(dtype=np.float64), starts)
    ratios = destroyed[based > 0] / based[based > 0]
    best = np.quantile(ratios, _BEST_SHARE) if ratios.size else np.nan
    # Less than nothing is destroyed by no machine: that is the instruments' error.
    return float(hours["load"].median()), float(np.maximum(best, 0.0))


def avoidable(best: Best, hours: pd.DataFrame) -> Avoidable:
    """Compare a span with the best demonstrated.

    Args:
        best: from `best_demonstrated`.
        hours: as there, of the span in question.

    Returns:
        The avoidable share of what was destroyed in the hours that can be compared. Hours better
        than the best count against those that are worse; less than nothing is nothing.
    """
    known = hours[["destroyed", best.basis, "load"]].dropna()
    ratio = best.at(known["load"].to_numpy(dtype=np.float64))
    compared = np.isfinite(ratio)
    destroyed = known["destroyed"].to_numpy(dtype=np.float64)[compared]
    based = known[best.basis].to_numpy(dtype=np.float64)[compared]
    total = float(destroyed.sum())
    if not total > 0:
        return Avoidable(np.nan, 0.0)
    unavoidable = float((ratio[compared] * based).sum())
    return Avoidable(
        min(max(1.0 - unavoidable / total, 0.0), 1.0), float(compared.sum()) / len(known)
    )
