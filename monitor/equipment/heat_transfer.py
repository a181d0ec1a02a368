"""Figures that heat exchangers of every kind share: mean temperature difference, UA, limits.

LMTD = (d1 - d2) / ln(d1 / d2) with d1, d2 the differences at the two ends; UA = Q / LMTD.
Source: Incropera and DeWitt, Fundamentals of Heat and Mass Transfer, chapter 11.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from monitor.flags import Flag

if TYPE_CHECKING:
    from monitor.equipment.base import FloatArray
    from monitor.flags import FlagArray

__all__ = ["conductance", "flag_where", "log_mean_difference", "share"]

_NEARLY_EQUAL = 1e-6


def log_mean_difference(one_end: FloatArray, other_end: FloatArray) -> FloatArray:
    """Logarithmic mean of two temperature differences [K]; NaN where either is not positive.

    Where the two are the same it is their common value, the limit of the formula.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        rise = one_end / other_end - 1.0
        near = np.abs(rise) < _NEARLY_EQUAL
        mean = other_end * np.where(near, 1.0 + rise / 2.0, rise / np.log1p(rise))
    return np.where((one_end > 0) & (other_end > 0), mean, np.nan)


def conductance(duty: FloatArray, one_end: FloatArray, other_end: FloatArray) -> FloatArray:
    """UA = Q / LMTD [W/K] of a duty [W]; NaN where the differences allow no heat to flow."""
    return np.asarray(duty / log_mean_difference(one_end, other_end))


def share(part: FloatArray, whole: FloatArray) -> FloatArray:
    """Part / whole in per cent; NaN where the whole is not positive."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(whole > 0, 100.0 * part / whole, np.nan)


def flag_where(contradiction: np.ndarray[tuple[int, ...], np.dtype[np.bool_]]) -> FlagArray:
    """`Flag.SECOND_LAW` where readings say that heat flows uphill or a share is impossible."""
    return np.where(contradiction, np.int32(Flag.SECOND_LAW), np.int32(0))
