"""Chebyshev terms, and their products with coefficients, for arrays of any length."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial import chebyshev

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.thermo.arrays import FloatArray

__all__ = ["chunks", "combine", "dot", "fit", "terms"]

_CHUNK = 4096  # rows of terms that stay in the processor's cache
_BLOCK = 64


def chunks(size: int) -> Iterator[slice]:
    """Slices that cover ``size`` rows, each small enough for its terms to stay in the cache."""
    return (slice(start, start + _CHUNK) for start in range(0, size, _CHUNK))


def terms(x: FloatArray, degree: int) -> FloatArray:
    """Chebyshev polynomials T_0 to T_degree at x, shape (n, degree + 1), row by row in memory.

    The order in memory decides in which order sums over them are taken.
    """
    return np.ascontiguousarray(chebyshev.chebvander(x, degree), dtype=np.float64)


def fit(x: FloatArray, values: FloatArray) -> FloatArray:
    """Coefficients of the polynomial through values (rows) at as many nodes x."""
    return np.asarray(np.linalg.solve(terms(x, x.size - 1), values), dtype=np.float64)


def combine(rows: FloatArray, coefficients: FloatArray) -> FloatArray:
    """The matrix product of terms (n, k) and coefficients (k, m).

    It is taken in blocks that are too small for the linear algebra library to start threads.
    Measured beside other work on two cores, its threads made the product ten times slower. The
    last block is filled up: the library sums in another order where there are fewer rows, and a
    state must not depend on how many stand beside it. For the same reason the rows must lie one
    after the other in memory.
    """
    count, k = rows.shape
    whole = count - count % _BLOCK
    out = np.empty((count, coefficients.shape[1]))
    blocks = rows[:whole].reshape(-1, _BLOCK, k)
    np.matmul(blocks, coefficients, out=out[:whole].reshape(-1, _BLOCK, out.shape[1]))
    if whole < count:
        last = np.zeros((_BLOCK, k))
        last[: count - whole] = rows[whole:]
        out[whole:] = np.matmul(last, coefficients)[: count - whole]
    return out


def dot(first: FloatArray, second: FloatArray) -> FloatArray:
    """The sum over columns of the product of two arrays (n, k), row by row: shape (n,).

    A lone row would be summed in another order than a row among others; it gets company.
    """
    if first.shape[0] == 1:
        return dot(np.repeat(first, 2, axis=0), np.repeat(second, 2, axis=0))[:1]
    return np.asarray(np.einsum("ij,ij->i", first, second))
