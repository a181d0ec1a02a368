"""Chebyshev terms, and their products with coefficients, for arrays of any length."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial import chebyshev

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.thermo.arrays import FloatArray

__all__ = ["chunks", "combine", "fit", "terms"]

_CHUNK = 4096  # rows of terms that stay in the processor's cache
_BLOCK = 64


def chunks(size: int) -> Iterator[slice]:
    """Slices that cover ``size`` rows, each small enough for its terms to stay in the cache."""
    return (slice(start, start + _CHUNK) for start in range(0, size, _CHUNK))


def terms(x: FloatArray, degree: int) -> FloatArray:
    """Chebyshev polynomials T_0 to T_degree at x, shape (n, degree + 1)."""
    return np.asarray(chebyshev.chebvander(x, degree), dtype=np.float64)


def fit(x: FloatArray, values: FloatArray) -> FloatArray:
    """Coefficients of the polynomial through values (rows) at as many nodes x."""
    return np.asarray(np.linalg.solve(terms(x, x.size - 1), values), dtype=np.float64)


def combine(rows: FloatArray, coefficients: FloatArray) -> FloatArray:
    """The matrix product of terms (n, k) and coefficients (k, m).

    It is taken in blocks that are too small for the linear algebra library to start threads.
    Measured beside other work on two cores, its threads made the product ten times slower.
    """
    whole = rows.shape[0] - rows.shape[0] % _BLOCK
    k, m = coefficients.shape
    out = np.empty((rows.shape[0], m))
    blocks = rows[:whole].reshape(-1, _BLOCK, k)
    np.matmul(blocks, coefficients, out=out[:whole].reshape(-1, _BLOCK, m))
    np.matmul(rows[whole:], coefficients, out=out[whole:])
    return out
