"""A number for each reading that hangs on all that it is, to tell whether readings have changed."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd

if TYPE_CHECKING:
    from monitor.equipment.base import FloatArray

__all__ = ["Words", "digests", "words_of"]

Words = npt.NDArray[np.uint64]

# Odd constants that spread the bits (the last two and the shifts: S. Vigna's splitmix64).
_TIME, _VALUE, _REMARK = (
    np.uint64(c) for c in (0x9E3779B97F4A7C15, 0xD6E8FEB86659FD93, 0xA0761D6478BD642F)
)
_STIR = (np.uint64(0xBF58476D1CE4E5B9), np.uint64(0x94D049BB133111EB))


def words_of(readings: pd.DataFrame, micros: npt.NDArray[np.int64]) -> Words:
    """Return a word for each reading: of its tag, time, value, quality and marks.

    Args:
        readings: ``tag`` (categorical), ``value``, ``quality``, and ``marks`` where there are any.
        micros: their times [UTC us].
    """
    tag = readings["tag"].cat
    names = pd.util.hash_array(tag.categories.to_numpy(dtype=object))
    words: Words = names[tag.codes.to_numpy()] + micros.view(np.uint64) * _TIME
    words ^= readings["value"].to_numpy(np.float64).view(np.uint64) * _VALUE
    remark = readings["quality"].to_numpy(np.uint64) * np.uint64(256)
    if "marks" in readings:
        remark = remark + readings["marks"].fillna(0).to_numpy(np.uint64)
    words += remark * _REMARK
    for shift, factor in zip((30, 27), _STIR, strict=True):
        words ^= words >> np.uint64(shift)
        words *= factor
    return words ^ (words >> np.uint64(31))


def digests(seconds: FloatArray, words: Words, bounds: FloatArray) -> npt.NDArray[np.int64]:
    """Return the sum of the words between each two bounds, whatever order they are in.

    Args:
        seconds: times of the readings [UTC s], ascending, shape (k,).
        words: of the readings, shape (k,).
        bounds: ascending [UTC s], shape (n + 1,).

    Returns:
        Shape (n,), modulo 2**64 as a signed number; 0 where there is no reading.
    """
    summed = np.zeros(len(words) + 1, dtype=np.uint64)
    np.cumsum(words, out=summed[1:])
    at = np.searchsorted(seconds, bounds, side="left")
    return (summed[at[1:]] - summed[at[:-1]]).view(np.int64)
