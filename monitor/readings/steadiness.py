"""Whether a value was steady enough, up to now, for figures made of it to be judged.

The sense is that of a steady test period in the performance test codes (ASME PTC 6 and its
kin): before and during a test the readings may neither scatter nor drift beyond stated limits. The
limits here are the site file's; their defaults are common practice for monitoring, wider than an
acceptance test's. The window is trailing, so that a verdict stands when later readings come.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from monitor.equipment.base import FloatArray

__all__ = ["drift", "just_started", "spread", "unsteady"]

BoolArray = npt.NDArray[np.bool_]

# Two points always lie on a line.
_LEAST_FOR_A_LINE = 3


def unsteady(values: FloatArray, cells: int, spread_limit: float, drift_limit: float) -> BoolArray:
    """Find cells at whose end the trailing window scatters or drifts too much.

    Args:
        values: means over the cells, NaN where missing, shape (..., n).
        cells: length of the trailing window, the cell itself included.
        spread_limit: largest less smallest value, relative to the newest.
        drift_limit: rise or fall of the least-squares line over the window, relative likewise.
    """
    size = np.abs(values)
    scattered = spread(values, cells) > spread_limit * size
    return np.asarray(scattered | (np.abs(drift(values, cells)) > drift_limit * size))


def spread(values: FloatArray, cells: int) -> FloatArray:
    """Largest less smallest value of each trailing window; missing cells are passed over."""
    low, high = values.copy(), values.copy()
    for back in range(1, min(cells, values.shape[-1])):
        np.fmin(low[..., back:], values[..., :-back], out=low[..., back:])
        np.fmax(high[..., back:], values[..., :-back], out=high[..., back:])
    return high - low


def drift(values: FloatArray, cells: int) -> FloatArray:
    """Rise of the least-squares line over each trailing window, from its first known cell.

    Returns:
        The values' shape and unit; NaN where fewer than three cells have a value, or the newest
        has none.
    """
    count = values.shape[-1]
    before = np.full((*values.shape[:-1], cells - 1), np.nan)
    padded = np.concatenate([before, values], axis=-1)
    n, sx, sy, sxx, sxy = (np.zeros(values.shape) for _ in range(5))
    first = np.full(values.shape, float(cells - 1))
    # Offset by offset, so that a cell's sums do not depend on the window that computed them.
    for place in range(cells):
        y = padded[..., place : place + count] - values
        known = np.isfinite(y)
        y[~known] = 0.0
        x = known * float(place)
        np.minimum(first, float(place), out=first, where=known)
        n += known
        sx += x
        sy += y
        sxx += x * x
        sxy += x * y
    enough = n >= _LEAST_FOR_A_LINE
    across = np.where(enough, n * sxx - sx * sx, np.nan)
    return np.asarray((n * sxy - sx * sy) / across * (cells - 1 - first))


def just_started(off: BoolArray, cells: int) -> BoolArray:
    """Find cells in service that have one out of service in their trailing window."""
    recent = np.convolve(off, np.ones(cells), mode="full")[: len(off)]
    return np.asarray(~off & (recent > 0))
