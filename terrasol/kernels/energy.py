"""From sums of light to what each cell gets, part by part and month by month."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True, error_model="numpy")
def _mix(value, last, lower, part):
    """Whole and broken part of places between nodes, kept inside them."""
    for c in range(value.size):
        x = min(max(value[c], 0.0), float(last))
        lower[c] = min(int(x), max(last - 1, 0))
        part[c] = x - lower[c]


@njit(cache=True, nogil=True, error_model="numpy")
def _row_of_nodes(around, v, out):
    """One row between two rows of nodes."""
    last = around.shape[0] - 1
    i = min(int(v), max(last - 1, 0))
    below = min(i + 1, last)
    for j in range(out.size):
        out[j] = around[i, j] + np.float32(v - i) * (around[below, j] - around[i, j])


@njit(cache=True, nogil=True, error_model="numpy")
def _height_places(heights, datum, knot_height, place):
    """Place of each height among the knots."""
    for c in range(heights.size):
        z = heights[c] + datum
        k = 0
        while k + 2 < knot_height.size and z >= knot_height[k + 1]:
            k += 1
        place[c] = k + (z - knot_height[k]) / (knot_height[k + 1] - knot_height[k])


@njit(cache=True, nogil=True, error_model="numpy")
def parts_of_light(
    sums, months, heights, datum, knot_height, isotropic, band_sum, view, band,
    around, node, node_step, albedo, factor, year, month_total, month_parts,
):  # fmt: skip
    """Beam, diffuse and reflected light of each cell.

    sums : (groups, rows * columns, lanes) float32, look-ups: the months' beam and
        circumsolar, then circumsolar alone (one sum, or one a month)
    isotropic, band_sum : (months, knot heights) float32
    view, band : (rows, columns) float32, sky-view factor and open part of the band
    around : (months, node rows, node columns) float32, what the terrain around receives
    node : (2,) float64, the strip's first cell on the nodes, in node units
    node_step : cells a node
    albedo : (months,) float32
    factor : (rows, columns) float32, unit and basis; NaN where void
    year : (4, rows, columns) float32, out: global, beam, diffuse, reflected
    month_total : (months, rows, columns) float32, out, global
    month_parts : (3, months or 0, rows, columns) float32, out: beam, diffuse, reflected
    """
    rows, columns = view.shape
    lanes = sums.shape[2]
    split = month_parts.shape[1] > 0
    level = np.empty(columns, np.int64)
    w = np.empty(columns, np.float32)
    j = np.empty(columns, np.int64)
    u = np.empty(columns, np.float32)
    place = np.empty(columns, np.float64)
    terrain = np.empty(around.shape[2], np.float32)
    last = around.shape[2] - 1
    year[:] = 0.0
    for r in range(rows):
        _height_places(heights[r], datum, knot_height, place)
        _mix(place, knot_height.size - 1, level, w)
        for c in range(columns):
            place[c] = node[1] + c / node_step
        _mix(place, last, j, u)
        v = min(max(node[0] + r / node_step, 0.0), around.shape[1] - 1.0)
        for m in range(months):
            _row_of_nodes(around[m], v, terrain)
            even_sky = isotropic[m]
            even_band = band_sum[m]
            for c in range(columns):
                cell = r * columns + c
                scale = factor[r, c]
                k = level[c]
                dome = even_sky[k] + w[c] * (even_sky[k + 1] - even_sky[k])
                low = even_band[k] + w[c] * (even_band[k + 1] - even_band[k])
                even = scale * (view[r, c] * dome + band[r, c] * low)
                lit = terrain[j[c]] + u[c] * (terrain[min(j[c] + 1, last)] - terrain[j[c]])
                back = scale * albedo[m] * (np.float32(1.0) - view[r, c]) * lit
                direct = scale * sums[m // lanes, cell, m % lanes]
                month_total[m, r, c] = direct + even + back
                year[0, r, c] += direct + even + back
                year[1, r, c] += direct
                year[2, r, c] += even
                year[3, r, c] += back
                if split:
                    p = months + m
                    glow = scale * sums[p // lanes, cell, p % lanes]
                    month_parts[0, m, r, c] = direct - glow
                    month_parts[1, m, r, c] = even + glow
                    month_parts[2, m, r, c] = back
                    year[1, r, c] -= glow
                    year[2, r, c] += glow
        if not split:
            for c in range(columns):
                glow = factor[r, c] * sums[months // lanes, r * columns + c, months % lanes]
                year[1, r, c] -= glow
                year[2, r, c] += glow
