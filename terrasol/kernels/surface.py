"""Slope and normals from the heights in a 3 x 3 window."""

from __future__ import annotations

import numpy as np
from numba import njit

DEGREE = np.float32(180.0 / np.pi)


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _difference(before, here, behind):
    """Height change a cell: central, else one-sided, else NaN."""
    if before == before and behind == behind:
        return (behind - before) * 0.5
    if here == here:
        if behind == behind:
            return behind - here
        if before == before:
            return here - before
    return np.nan


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _weighted(first, middle, last):
    """Horn's 1-2-1 mean of three differences; off centre none is trusted alone if need not be.

    With one outer difference missing, the middle one stands alone: that is what the full
    window gives when the missing row is continued in a straight line.
    """
    if middle == middle:
        if first == first and last == last:
            return 0.25 * (first + 2.0 * middle + last)
        return middle
    if first == first and last == last:
        return 0.5 * (first + last)
    return first if first == first else last


@njit(cache=True, nogil=True, error_model="numpy")
def normals(heights, pad, corners, normal):
    """Unit normals of the ground, east, north and up.

    The window is Horn's (1981); where a neighbour is void or outside, the difference of
    that row or column is one-sided, as if the ground went straight on.

    heights : (rows + 2 pad, columns + 2 pad) float32, NaN void
    corners : (2, 2, 2, 2) float64, the Jacobian at the block's four corners
    normal : (3, rows, columns) float32, out; NaN where void
    """
    _, rows, columns = normal.shape
    for r in range(rows):
        v = (r + 0.5) / rows
        for c in range(columns):
            u = (c + 0.5) / columns
            i = r + pad
            j = c + pad
            h = heights
            along_columns = _weighted(
                _difference(h[i - 1, j - 1], h[i - 1, j], h[i - 1, j + 1]),
                _difference(h[i, j - 1], h[i, j], h[i, j + 1]),
                _difference(h[i + 1, j - 1], h[i + 1, j], h[i + 1, j + 1]),
            )
            along_rows = _weighted(
                _difference(h[i - 1, j - 1], h[i, j - 1], h[i + 1, j - 1]),
                _difference(h[i - 1, j], h[i, j], h[i + 1, j]),
                _difference(h[i - 1, j + 1], h[i, j + 1], h[i + 1, j + 1]),
            )
            w00 = (1 - v) * (1 - u)
            w01 = (1 - v) * u
            w10 = v * (1 - u)
            w11 = v * u
            k = corners
            ec = (
                w00 * k[0, 0, 0, 0]
                + w01 * k[0, 1, 0, 0]
                + w10 * k[1, 0, 0, 0]
                + w11 * k[1, 1, 0, 0]
            )
            er = (
                w00 * k[0, 0, 0, 1]
                + w01 * k[0, 1, 0, 1]
                + w10 * k[1, 0, 0, 1]
                + w11 * k[1, 1, 0, 1]
            )
            nc = (
                w00 * k[0, 0, 1, 0]
                + w01 * k[0, 1, 1, 0]
                + w10 * k[1, 0, 1, 0]
                + w11 * k[1, 1, 1, 0]
            )
            nr = (
                w00 * k[0, 0, 1, 1]
                + w01 * k[0, 1, 1, 1]
                + w10 * k[1, 0, 1, 1]
                + w11 * k[1, 1, 1, 1]
            )
            # J^T p = (dz/dcolumn, dz/drow) gives dz/deast, dz/dnorth.
            det = ec * nr - nc * er
            east = (along_columns * nr - along_rows * nc) / det
            north = (along_rows * ec - along_columns * er) / det
            up = 1.0 / np.sqrt(1.0 + east * east + north * north)
            if h[i, j] != h[i, j]:
                up = np.nan
            normal[0, r, c] = -east * up
            normal[1, r, c] = -north * up
            normal[2, r, c] = up


@njit(cache=True, nogil=True, error_model="numpy")
def slope_aspect(normal, flat, slope, aspect):
    """Slope and aspect in degrees; aspect clockwise from north, NaN under `flat` degrees."""
    _, rows, columns = normal.shape
    for r in range(rows):
        for c in range(columns):
            east = normal[0, r, c]
            north = normal[1, r, c]
            flat_part = np.sqrt(east * east + north * north)
            steep = DEGREE * np.arctan2(flat_part, normal[2, r, c])
            slope[r, c] = steep
            if steep >= flat:
                turn = DEGREE * np.arctan2(east, north)
                turn = turn if turn >= np.float32(0.0) else turn + np.float32(360.0)
                aspect[r, c] = turn if turn < np.float32(359.996) else np.float32(0.0)
            else:
                aspect[r, c] = np.nan
