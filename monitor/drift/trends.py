"""How fast a figure gets worse: a trend that a few odd days cannot fake.

Mann-Kendall tells whether there is a trend (H. B. Mann, Econometrica 13, 245, 1945; M. G. Kendall,
Rank Correlation Methods), Theil-Sen how steep it is (P. K. Sen, JASA 63, 1379, 1968). Both are
applied to daily medians, which hardly remember each other where hours do.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy.stats import norm, theilslopes

__all__ = ["MannKendall", "Trend", "degradation_rate", "mann_kendall"]

_DAY = 86400
_MONTH = 365.25 / 12
_LEAST_DAYS = 7
_LEAST_HOURS_A_DAY = 6
_CONFIDENCE = 0.95


@dataclass(frozen=True)
class MannKendall:
    """The test for a monotonic trend: score, its variance under no trend, z and two-sided p."""

    score: int
    variance: float
    z: float
    p: float


@dataclass(frozen=True)
class Trend:
    """Rate of change of a figure, in its unit a month (365.25 / 12 days).

    Attributes:
        per_month: median slope.
        low, high: its 95 % interval.
        p: two-sided probability of such a trend by chance (Mann-Kendall).
        days: days with enough hours.
    """

    per_month: float
    low: float
    high: float
    p: float
    days: int


def mann_kendall(value: npt.ArrayLike) -> MannKendall:
    """Test values in order of time, shape (n,) and all finite, for a monotonic trend.

    S counts rising minus falling pairs; ties reduce its variance:
    (n (n - 1) (2 n + 5) - sum t (t - 1) (2 t + 5)) / 18, and z is corrected for continuity.
    """
    values = np.asarray(value, dtype=np.float64)
    n = values.size
    later = np.triu_indices(n, k=1)
    score = int(np.sign(values[later[1]] - values[later[0]]).sum())
    ties = np.unique(values, return_counts=True)[1].astype(np.float64)
    variance = (n * (n - 1) * (2 * n + 5) - (ties * (ties - 1) * (2 * ties + 5)).sum()) / 18
    z = (score - np.sign(score)) / np.sqrt(variance) if variance > 0 else 0.0
    return MannKendall(score, float(variance), float(z), float(2 * norm.sf(abs(z))))


def degradation_rate(hour: npt.ArrayLike, residual: npt.ArrayLike) -> Trend | None:
    """Return how fast hourly residuals move, from their daily medians.

    Args:
        hour: integer UTC seconds, shape (n,).
        residual: measured minus expected, shape (n,); NaN where not judged.

    Returns:
        The trend, or None with fewer than 7 days of at least 6 judged hours.
    """
    values = np.asarray(residual, dtype=np.float64)
    day = np.asarray(hour, dtype=np.int64) // _DAY
    judged = np.isfinite(values)
    days = pd.Series(values[judged]).groupby(day[judged]).agg(["median", "size"])
    days = days[days["size"] >= _LEAST_HOURS_A_DAY]
    if len(days) < _LEAST_DAYS:
        return None
    medians = days["median"].to_numpy()
    slope, _, low, high = theilslopes(medians, days.index.to_numpy(), alpha=_CONFIDENCE)
    return Trend(
        per_month=float(slope) * _MONTH,
        low=float(low) * _MONTH,
        high=float(high) * _MONTH,
        p=mann_kendall(medians).p,
        days=len(days),
    )
