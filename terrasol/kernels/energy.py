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
def _spread(nodes, lower, part, out):
    """Interpolate a row of nodes to cells."""
    last = nodes.size - 1
    for c in range(out.size):
        k = lower[c]
        out[c] = nodes[k] + part[c] * (nodes[min(k + 1, last)] - nodes[k])


@njit(cache=True, nogil=True, error_model="numpy")
def _spread_north(nodes, change, lower, part, north, out):
    """The same with each node's change a radian north, for cells `north` radians north."""
    last = nodes.size - 1
    for c in range(out.size):
        k = lower[c]
        above = min(k + 1, last)
        here = nodes[k] + north[c] * change[k]
        out[c] = here + part[c] * (nodes[above] + north[c] * change[above] - here)


@njit(cache=True, nogil=True, error_model="numpy")
def _sum_up(rows_of, sums, view, band, albedo, factor, total, year):
    """Add one month of a row: dome, band and terrain by cell are in `rows_of`."""
    dome, low, lit, direct = rows_of[0], rows_of[1], rows_of[2], rows_of[3]
    zero = np.float32(0.0)
    for c in range(total.size):
        direct[c] = factor[c] * max(sums[c], zero)
    for c in range(total.size):
        even = factor[c] * max(view[c] * dome[c] + band[c] * low[c], zero)
        back = factor[c] * albedo * (np.float32(1.0) - view[c]) * lit[c]
        total[c] = direct[c] + even + back
        year[0, c] += direct[c] + even + back
        year[1, c] += direct[c]
        year[2, c] += even
        year[3, c] += back


@njit(cache=True, nogil=True, error_model="numpy")
def _move_glow(glow, factor, year):
    """Count the circumsolar light as diffuse."""
    for c in range(glow.size):
        moved = min(factor[c] * glow[c], year[1, c])
        year[1, c] -= moved
        year[2, c] += moved


@njit(cache=True, nogil=True, error_model="numpy")
def parts_of_light(
    sums, months, heights, datum, knot_height, even, even_change, tilt, view, band,
    around, node, node_step, albedo, factor, year, month_total, month_parts,
):  # fmt: skip
    """Beam, diffuse and reflected light of each cell.

    sums : (groups, rows * columns, lanes) float32, look-ups: the months' beam and
        circumsolar, then circumsolar alone (one sum, or one a month)
    even : (2, months, knot heights) float32, isotropic light and horizon band
    even_change : the same, their change a radian north
    tilt : (3,) float64, latitude offset [radians] = tilt[0] + tilt[1] row + tilt[2] column
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
    north = np.empty(columns, np.float32)
    j = np.empty(columns, np.int64)
    u = np.empty(columns, np.float32)
    place = np.empty(columns, np.float64)
    rows_of = np.empty((4, columns), np.float32)
    terrain = np.empty(around.shape[2], np.float32)
    last = around.shape[2] - 1
    year[:] = 0.0
    for r in range(rows):
        _height_places(heights[r], datum, knot_height, place)
        _mix(place, knot_height.size - 1, level, w)
        for c in range(columns):
            place[c] = node[1] + c / node_step
            north[c] = tilt[0] + tilt[1] * r + tilt[2] * c
        _mix(place, last, j, u)
        v = min(max(node[0] + r / node_step, 0.0), around.shape[1] - 1.0)
        cells = sums[:, r * columns : (r + 1) * columns]
        for m in range(months):
            _row_of_nodes(around[m], v, terrain)
            for i in range(2):
                _spread_north(even[i, m], even_change[i, m], level, w, north, rows_of[i])
            _spread(terrain, j, u, rows_of[2])
            _sum_up(
                rows_of, cells[m // lanes, :, m % lanes], view[r], band[r], albedo[m],
                factor[r], month_total[m, r], year[:, r],
            )  # fmt: skip
            if split:
                p = months + m
                glow = cells[p // lanes, :, p % lanes]
                _move_glow(glow, factor[r], year[:, r])
                for c in range(columns):
                    direct = factor[r, c] * max(cells[m // lanes, c, m % lanes], np.float32(0.0))
                    back = factor[r, c] * albedo[m] * (1 - view[r, c]) * rows_of[2, c]
                    beam = direct - factor[r, c] * glow[c]
                    if beam < 0:
                        beam = np.float32(0.0)
                    month_parts[0, m, r, c] = beam
                    month_parts[1, m, r, c] = month_total[m, r, c] - beam - back
                    month_parts[2, m, r, c] = back
        if not split:
            _move_glow(cells[months // lanes, :, months % lanes], factor[r], year[:, r])
