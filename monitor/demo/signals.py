"""Shapes over time that weather and load are made of: lags, wandering, ramps, pulses."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.signal import lfilter

if TYPE_CHECKING:
    from monitor.demo.plan import FloatArray

__all__ = ["lag", "plateau", "ramp", "wander"]


def lag(signal: FloatArray, time_constant: float, interval: float) -> FloatArray:
    """First-order lag of a signal, settled at its first value.

    Args:
        signal: any unit, shape (n,).
        time_constant: [s].
        interval: time between samples [s].
    """
    keep = float(np.exp(-interval / time_constant))
    out, _ = lfilter([1.0 - keep], [1.0, -keep], signal, zi=[keep * signal[0]])
    return np.asarray(out, dtype=np.float64)


def wander(
    rng: np.random.Generator, count: int, *, spread: float, time_constant: float, interval: float
) -> FloatArray:
    """A smooth random walk that returns to zero: white noise through two equal lags.

    Args:
        rng: where the noise comes from.
        count: samples.
        spread: standard deviation of the result.
        time_constant: of each lag [s].
        interval: time between samples [s].
    """
    keep = float(np.exp(-interval / time_constant))
    # Variance of white noise after two equal lags (1 - keep)^2 / (1 - keep z)^2.
    variance = (1 - keep) ** 4 * (1 + keep**2) / (1 - keep**2) ** 3
    settle = min(int(6 * time_constant / interval), 20_000)
    noise = rng.standard_normal(count + settle)
    once = lfilter([1.0 - keep], [1.0, -keep], noise)
    twice = lfilter([1.0 - keep], [1.0, -keep], once)[settle:]
    return np.asarray(spread * twice / np.sqrt(variance), dtype=np.float64)


def ramp(days: FloatArray, start: float, length: float) -> FloatArray:
    """Rise from 0 to 1 over ``length`` days from ``start``, smooth at both ends."""
    share = np.clip((days - start) / length, 0.0, 1.0)
    return share * share * (3.0 - 2.0 * share)


def plateau(days: FloatArray, start: float, length: float, edge: float) -> FloatArray:
    """Rise to 1 at ``start`` and fall to 0 after ``length`` days, each edge ``edge`` days long."""
    return ramp(days, start, edge) - ramp(days, start + length, edge)
