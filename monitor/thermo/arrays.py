"""The one array type of the thermodynamic functions, and how their arguments come to one shape."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["BoolArray", "FloatArray", "broadcast"]

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]


def broadcast(*values: npt.ArrayLike) -> tuple[FloatArray, ...]:
    """Bring numbers and arrays to one common shape of float64.

    Raises:
        ValueError: the shapes do not broadcast (numpy's own message).
    """
    return np.broadcast_arrays(*(np.asarray(value, dtype=np.float64) for value in values))
