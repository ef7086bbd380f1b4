"""Rounding of values for storage, and what is told of them."""

from __future__ import annotations

import numpy as np
from numba import njit

FAST = {"contract", "reassoc", "nsz", "arcp"}


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST)
def round_off(values, resolution, void, out):
    """Round to multiples of a resolution; NaN becomes the no-data value.

    values, out : (cells,) float32
    """
    steps = np.float32(1.0 / resolution)
    size = np.float32(resolution)
    empty = np.float32(void)
    for i in range(values.size):
        v = values[i]
        out[i] = np.rint(v * steps) * size if v == v else empty


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST)
def tally(values, found):
    """Count, sum, least and greatest of the values that are not NaN.

    values : (cells,) float32
    found : (4,) float64, out; the least and greatest are infinite where nothing is known
    """
    count = 0
    total = 0.0
    low = np.float32(np.inf)
    high = np.float32(-np.inf)
    for i in range(values.size):
        v = values[i]
        if v == v:
            count += 1
            total += v
            low = v if v < low else low
            high = v if v > high else high
    found[0] = count
    found[1] = total
    found[2] = low
    found[3] = high
