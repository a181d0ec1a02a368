"""Control charts on residuals: the EWMA that raises alarms, and the CUSUM that dates a shift.

An exponentially weighted moving average z_i = (1 - weight) z_(i-1) + weight r_i sees a small
lasting change that single hours hide (S. W. Roberts, Technometrics 1, 239, 1959). Its limits are
set by how often a false alarm may come, through the integral equation of the run length
(S. V. Crowder, Technometrics 29, 401, 1987), and are widened for hours that remember each other
(A. V. Vasilopoulos, A. P. Stamboulis, Journal of Quality Technology 10, 20, 1978; W. Schmid, 1997).

An hour that is not judged is NaN. The rule for gaps: the statistic holds its value over them, and
they do not count as hours. Everything works along the last axis.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq
from scipy.signal import lfilter
from scipy.stats import norm

__all__ = [
    "ChartError",
    "Worse",
    "alarm_condition",
    "average_run_length",
    "change_point",
    "cusum",
    "ewma",
    "ewma_limit_width",
    "ewma_sigma",
    "ewma_variance",
]

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]
Worse = Literal["low", "high", "both"]

_NOWHERE = 9.0
"""Standard deviations that an EWMA does not reach in any run length asked for."""
_SHORTEST_RUN = 4.0
_LONGEST_RUN = 1e9


class ChartError(ValueError):
    """A chart is asked for that cannot exist; the message says what to change."""


def ewma(residual: npt.ArrayLike, weight: float, start: float = 0.0) -> FloatArray:
    """Return the EWMA of residuals along the last axis, holding its value where they are NaN.

    Args:
        residual: measured minus expected, shape (..., n); NaN where not judged.
        weight: share of the newest hour, 0 < weight <= 1.
        start: value before the first hour.
    """
    _check_weight(weight)
    values = np.asarray(residual, dtype=np.float64)
    judged = np.isfinite(values)
    if judged.all():
        return _smooth(values, weight, start)
    if values.ndim > 1:
        flat = values.reshape(-1, values.shape[-1])
        return np.stack([ewma(row, weight, start) for row in flat]).reshape(values.shape)
    smoothed = np.concatenate([[start], _smooth(values[judged], weight, start)])
    return np.asarray(smoothed[np.cumsum(judged)], dtype=np.float64)


def _smooth(values: FloatArray, weight: float, start: float) -> FloatArray:
    if not values.size:
        return values
    memory = np.full((*values.shape[:-1], 1), (1 - weight) * start)
    smoothed, _ = lfilter([weight], [1.0, weight - 1.0], values, axis=-1, zi=memory)
    return np.asarray(smoothed, dtype=np.float64)


def ewma_variance(count: npt.ArrayLike, weight: float, phi: float = 0.0) -> FloatArray:
    """Return the variance of the EWMA after ``count`` hours, in units of the residuals' variance.

    The residuals are a first-order autoregression with lag-1 autocorrelation ``phi``. With
    q = 1 - weight, D_i = cov(z_i, r_i) and V_i = var(z_i) follow from the definition of z:
    D_i = q phi D_(i-1) + weight and V_i = q^2 V_(i-1) + weight^2 + 2 q weight phi D_(i-1), from
    zero. For phi = 0 this is weight / (2 - weight) (1 - q^(2 i)); for many hours it is
    `ewma_sigma` squared.
    """
    _check_weight(weight)
    counts = np.asarray(count, dtype=np.int64)
    most = int(counts.max(initial=0))
    q = 1 - weight
    with_last = lfilter([weight], [1.0, -q * phi], np.ones(most))
    before = np.concatenate([[0.0], with_last])[:most]
    steps = weight**2 + 2 * q * weight * phi * before
    variance = np.concatenate([[0.0], lfilter([1.0], [1.0, -(q**2)], steps)])
    return np.asarray(variance[counts], dtype=np.float64)


def ewma_sigma(sigma: float, weight: float, phi: float = 0.0) -> float:
    """Return the standard deviation of an EWMA that has run long.

    sigma^2 weight / (2 - weight) (1 + phi (1 - weight)) / (1 - phi (1 - weight)), Vasilopoulos and
    Stamboulis (1978).
    """
    _check_weight(weight)
    memory = phi * (1 - weight)
    return float(sigma * np.sqrt(weight / (2 - weight) * (1 + memory) / (1 - memory)))


def average_run_length(
    weight: float, width: float, shift: float = 0.0, worse: Worse = "both"
) -> float:
    """Return the average number of hours until an EWMA passes its limits.

    Solves Crowder's integral equation (1987) by Gauss-Legendre quadrature. The residuals are
    independent and normal; the statistic starts at zero, with the limits of a long run.

    Args:
        weight: of the EWMA.
        width: limits in standard deviations of the EWMA.
        shift: of the residuals' mean, in their standard deviations.
        worse: the side on which a limit stands. One limit alone is for shifts towards it: the other
            side ends where no chart gets to.
    """
    _check_weight(weight)
    sigma = np.sqrt(weight / (2 - weight))
    high = width * sigma
    low = -high if worse == "both" else -_NOWHERE * sigma
    towards = -shift if worse == "low" else shift
    # The kernel is a bell of width ``weight``.
    nodes, weights = _quadrature(32 + 4 * int(np.ceil((high - low) / weight)))
    half = (high - low) / 2
    y, dy = low + half * (nodes + 1), half * weights
    kernel = norm.pdf((y[None, :] - (1 - weight) * y[:, None]) / weight - towards) / weight
    run_length = np.linalg.solve(np.eye(y.size) - kernel * dy, np.ones(y.size))
    at_zero = norm.pdf(y / weight - towards) / weight
    return float(1 + (at_zero * dy) @ run_length)


@lru_cache(maxsize=64)
def _quadrature(nodes: int) -> tuple[FloatArray, FloatArray]:
    points, weights = np.polynomial.legendre.leggauss(nodes)
    return np.asarray(points), np.asarray(weights)


@lru_cache(maxsize=256)
def ewma_limit_width(weight: float, hours: float, worse: Worse = "both") -> float:
    """Return the limits, in standard deviations of the EWMA, for a false alarm every so often.

    Args:
        weight: of the EWMA.
        hours: average run length wanted while nothing is wrong.
        worse: on which side an alarm is raised; one side alone may have a closer limit.

    Raises:
        ChartError: a run length that makes no sense: fewer than 4 hours, or over 100 000 years.
    """
    _check_weight(weight)
    if not _SHORTEST_RUN <= hours <= _LONGEST_RUN:
        raise ChartError(
            f"a false alarm every {hours:g} hours: choose between {_SHORTEST_RUN:g} and "
            f"{_LONGEST_RUN:g} hours"
        )
    side: Worse = "both" if worse == "both" else "high"

    def excess(width: float) -> float:
        return float(np.log(average_run_length(weight, width, worse=side) / hours))

    high = 0.5
    while excess(high) < 0:
        high += 0.5
    return float(brentq(excess, 1e-3, high, xtol=1e-6))


def cusum(residual: npt.ArrayLike, allowance: float) -> tuple[FloatArray, FloatArray]:
    """Return the tabular CUSUM of residuals for shifts up and down, both positive.

    S_i = max(0, S_(i-1) +- r_i - allowance), from zero; held where the residual is NaN
    (NIST/SEMATECH e-Handbook, 6.3.2.3; J. M. Lucas, R. B. Crosier, Technometrics 24, 199, 1982).

    Args:
        residual: shape (..., n), in any unit.
        allowance: half the shift that is looked for, in the same unit.
    """
    values = np.asarray(residual, dtype=np.float64)
    judged = np.isfinite(values)

    def one_side(signed: FloatArray) -> FloatArray:
        total = np.cumsum(np.where(judged, signed - allowance, 0.0), axis=-1)
        # A sum that is reset at zero lies above its own running minimum by exactly itself.
        return np.asarray(total - np.minimum(np.minimum.accumulate(total, axis=-1), 0.0))

    return one_side(values), one_side(-values)


def change_point(residual: npt.ArrayLike, size: float) -> int:
    """Return the index of the first hour of a shift that is still there at the last hour.

    The CUSUM with an allowance of half the shift is zero for the last time just before the most
    likely start of a shift of that size (E. S. Page, Biometrika 41, 100, 1954).

    Args:
        residual: up to the hour the shift is seen in, shape (n,); NaN where not judged.
        size: of the shift in the same unit; its sign tells the direction.

    Raises:
        ChartError: no hour was judged, or the size is zero: nothing has changed.
    """
    values = np.asarray(residual, dtype=np.float64)
    judged = np.flatnonzero(np.isfinite(values))
    if not judged.size or size == 0 or not np.isfinite(size):
        raise ChartError(f"no shift to date: {judged.size} judged hours, a shift of {size:g}")
    up, down = cusum(values[judged], abs(size) / 2)
    at_zero = np.flatnonzero((up if size > 0 else down) <= 0)
    first = int(at_zero[-1]) + 1 if at_zero.size else 0
    return int(judged[min(first, judged.size - 1)])


def alarm_condition(
    statistic: npt.ArrayLike, limit: npt.ArrayLike, smallest_change: float, worse: Worse
) -> BoolArray:
    """Tell where a chart calls for an alarm: a change for the worse that is certain and matters.

    The statistic must pass both the limit (it is not chance) and the smallest change worth a
    person's time. NaN never calls.
    """
    z = np.asarray(statistic, dtype=np.float64)
    needed = np.maximum(np.asarray(limit, dtype=np.float64), smallest_change)
    signed = {"low": -z, "high": z, "both": np.abs(z)}[worse]
    return np.asarray(signed > needed)


def _check_weight(weight: float) -> None:
    if not 0 < weight <= 1:
        raise ChartError(f"an EWMA's weight is above 0 and at most 1, not {weight:g}")
