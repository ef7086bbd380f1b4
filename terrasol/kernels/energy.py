"""From sums of light to what each cell gets, part by part and month by month."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True, error_model="numpy")
def parts_of_light(
    sums, months, heights, datum, knot_height, isotropic, band_sum, view, band,
    around, node, node_step, albedo, factor, year, month_total, month_parts,
):  # fmt: skip
    """Beam, diffuse and reflected light of each cell.

    sums : (groups, rows * columns, lanes) float32, look-ups: the months' beam and
        circumsolar, then circumsolar alone (one sum, or one a month)
    isotropic, band_sum : (knot heights, months) float64
    view, band : (rows, columns) float32, sky-view factor and open part of the band
    around : (months, node rows, node columns) float32, what the terrain around receives
    node : (2,) float64, the strip's first cell on the nodes, in node units
    node_step : cells a node
    albedo : (months,) float64
    factor : (rows, columns) float32, unit and basis
    year : (4, rows, columns) float32, out: global, beam, diffuse, reflected
    month_total : (months, rows, columns) float32, out, global
    month_parts : (3, months or 0, rows, columns) float32, out: beam, diffuse, reflected
    """
    rows, columns = view.shape
    lanes = sums.shape[2]
    split_months = month_parts.shape[1] > 0
    last_row = around.shape[1] - 1
    last_column = around.shape[2] - 1
    for r in range(rows):
        v = min(max(node[0] + r / node_step, 0.0), float(last_row))
        i = min(int(v), max(last_row - 1, 0))
        v -= i
        i1 = min(i + 1, last_row)
        for c in range(columns):
            u = min(max(node[1] + c / node_step, 0.0), float(last_column))
            j = min(int(u), max(last_column - 1, 0))
            u -= j
            j1 = min(j + 1, last_column)
            cell = r * columns + c
            z = heights[r, c] + datum
            k = 0
            while k + 2 < knot_height.size and z >= knot_height[k + 1]:
                k += 1
            w = (z - knot_height[k]) / (knot_height[k + 1] - knot_height[k])
            w = min(max(w, 0.0), 1.0)
            scale = factor[r, c]
            if not view[r, c] >= 0.0:
                scale = np.nan
            direct_total = 0.0
            even_total = 0.0
            back_total = 0.0
            glow_total = 0.0
            for m in range(months):
                direct = sums[m // lanes, cell, m % lanes]
                even = view[r, c] * ((1 - w) * isotropic[k, m] + w * isotropic[k + 1, m])
                even += band[r, c] * ((1 - w) * band_sum[k, m] + w * band_sum[k + 1, m])
                terrain = (1 - v) * ((1 - u) * around[m, i, j] + u * around[m, i, j1]) + v * (
                    (1 - u) * around[m, i1, j] + u * around[m, i1, j1]
                )
                back = albedo[m] * (1.0 - view[r, c]) * terrain
                month_total[m, r, c] = scale * (direct + even + back)
                direct_total += direct
                even_total += even
                back_total += back
                if split_months:
                    p = months + m
                    glow = sums[p // lanes, cell, p % lanes]
                    glow_total += glow
                    month_parts[0, m, r, c] = scale * (direct - glow)
                    month_parts[1, m, r, c] = scale * (even + glow)
                    month_parts[2, m, r, c] = scale * back
            if not split_months:
                glow_total = sums[months // lanes, cell, months % lanes]
            year[0, r, c] = scale * (direct_total + even_total + back_total)
            year[1, r, c] = scale * (direct_total - glow_total)
            year[2, r, c] = scale * (even_total + glow_total)
            year[3, r, c] = scale * back_total
