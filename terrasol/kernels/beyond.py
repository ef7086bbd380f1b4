"""What a larger, coarser model shows beyond the raster, and where knowledge ends.

Everything here runs along straight lines of one direction on a plane about the middle of the
raster. A place on the plane is s metres along the direction and t metres to its right.
"""

from __future__ import annotations

import numpy as np
from numba import njit

NOTHING = 0.25
"""Tangent below the eye at which a line with nothing in view ends."""


GROUP = 16
"""Lines that are read side by side."""


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _place(places, corner, spacing, x, y):
    """Row and column at a place of the plane, linear between the nodes; NaN outside them."""
    u = (y - corner[1]) / spacing
    v = (x - corner[0]) / spacing
    if not (0.0 <= u <= places.shape[1] - 1.0 and 0.0 <= v <= places.shape[2] - 1.0):
        return np.nan, np.nan
    i = min(int(u), places.shape[1] - 2)
    j = min(int(v), places.shape[2] - 2)
    p = u - i
    q = v - j
    w = ((1.0 - p) * (1.0 - q), (1.0 - p) * q, p * (1.0 - q), p * q)
    row = w[0] * places[0, i, j] + w[1] * places[0, i, j + 1]
    row += w[2] * places[0, i + 1, j] + w[3] * places[0, i + 1, j + 1]
    column = w[0] * places[1, i, j] + w[1] * places[1, i, j + 1]
    column += w[2] * places[1, i + 1, j] + w[3] * places[1, i + 1, j + 1]
    return row, column


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _height(heights, row, column):
    """Height of the bilinear surface, level over the outer half cell; NaN outside or void."""
    rows, columns = heights.shape
    if not (-0.5 <= row <= rows - 0.5 and -0.5 <= column <= columns - 0.5):
        return np.nan
    row = min(max(row, 0.0), rows - 1.0)
    column = min(max(column, 0.0), columns - 1.0)
    i = min(int(row), rows - 2)
    j = min(int(column), columns - 2)
    p = row - i
    q = column - j
    upper = heights[i, j] + q * (heights[i, j + 1] - heights[i, j])
    lower = heights[i + 1, j] + q * (heights[i + 1, j + 1] - heights[i + 1, j])
    return upper + p * (lower - upper)


@njit(cache=True, nogil=True, error_model="numpy")
def _read_heights(
    heights, places, corner, spacing, t, gap, sine, cosine, first, step, stride, lines
):
    """Heights at s = (first + i) step along lines `gap` metres apart, the first at t.

    Lines are read side by side, so that neighbours share what a cache holds. Over `stride`
    steps the way is straight.
    """
    count, samples = lines.shape
    way = np.empty((count, 6))  # row and column here, a step, and at the next look-up
    for k in range(0, samples, stride):
        for g in range(count):
            x = (t + g * gap) * cosine
            y = -(t + g * gap) * sine
            if k == 0:
                s = first * step
                way[g, 4], way[g, 5] = _place(places, corner, spacing, s * sine + x, s * cosine + y)
            way[g, 0], way[g, 1] = way[g, 4], way[g, 5]
            s = (first + k + stride) * step
            way[g, 4], way[g, 5] = _place(places, corner, spacing, s * sine + x, s * cosine + y)
            way[g, 2] = (way[g, 4] - way[g, 0]) / stride
            way[g, 3] = (way[g, 5] - way[g, 1]) / stride
        for i in range(min(stride, samples - k)):
            for g in range(count):
                lines[g, k + i] = _height(
                    heights, way[g, 0] + i * way[g, 2], way[g, 1] + i * way[g, 3]
                )


@njit(cache=True, nogil=True, error_model="numpy")
def _read_known(known, pooled, places, corner, spacing, t, sine, cosine, first, step, stride, line):
    """Mark places along a line that lie on known ground; `pooled` cells are one of `known`."""
    s = first * step
    r, c = _place(places, corner, spacing, s * sine + t * cosine, s * cosine - t * sine)
    for k in range(0, line.size, stride):
        s = (first + k + stride) * step
        r1, c1 = _place(places, corner, spacing, s * sine + t * cosine, s * cosine - t * sine)
        down = (r1 - r) / stride
        right = (c1 - c) / stride
        for i in range(min(stride, line.size - k)):
            row = (r + i * down + 0.5) / pooled
            column = (c + i * right + 0.5) / pooled
            if 0.0 <= row < known.shape[0] and 0.0 <= column < known.shape[1]:
                line[k + i] |= known[int(row), int(column)]
        r = r1
        c = c1


@njit(cache=True, nogil=True, error_model="numpy")
def _leaves(rim, sine, cosine, t):
    """Where a line leaves a closed outline for good: the greatest s; -infinite if it misses."""
    out = -np.inf
    for i in range(rim.shape[0]):
        x0, y0 = rim[i - 1, 0], rim[i - 1, 1]
        x1, y1 = rim[i, 0], rim[i, 1]
        t0 = x0 * cosine - y0 * sine - t
        t1 = x1 * cosine - y1 * sine - t
        if (t0 <= 0.0) != (t1 <= 0.0):
            part = t0 / (t0 - t1)
            x = x0 + part * (x1 - x0)
            y = y0 + part * (y1 - y0)
            out = max(out, x * sine + y * cosine)
    return out


@njit(cache=True, nogil=True, error_model="numpy")
def _by_line(nodes, sine, cosine, gap):
    """Nodes by the line on their left: s, t, order, start of each line, and the first line's t."""
    count = nodes.shape[0]
    s = np.empty(count)
    t = np.empty(count)
    for n in range(count):
        s[n] = nodes[n, 0] * sine + nodes[n, 1] * cosine
        t[n] = nodes[n, 0] * cosine - nodes[n, 1] * sine
    origin = np.floor(t.min() / gap) * gap
    lines = int((t.max() - origin) / gap) + 2
    start = np.zeros(lines + 1, np.int64)
    left = np.empty(count, np.int64)
    for n in range(count):
        left[n] = min(max(int((t[n] - origin) / gap), 0), lines - 2)
        start[left[n] + 1] += 1
    for k in range(lines):
        start[k + 1] += start[k]
    fill = start.copy()
    order = np.empty(count, np.int64)
    for n in range(count):
        order[fill[left[n]]] = n
        fill[left[n]] += 1
    return s, t, order, start, origin


@njit(cache=True, nogil=True, error_model="numpy")
def _hull(line, first, step, half_curve, place, bulge):
    """Upper hull of z - s^2 / (2 R') along a line, by rising s; return its last index."""
    top = -1
    for i in range(line.size):
        z = np.float64(line[i])
        if z != z:
            continue
        x = (first + i) * step
        g = z - x * x * half_curve
        while top > 0 and (bulge[top] - bulge[top - 1]) * (x - place[top]) <= (g - bulge[top]) * (
            place[top] - place[top - 1]
        ):
            top -= 1
        top += 1
        place[top] = x
        bulge[top] = g
    return top


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _tangent(place, bulge, top, hint, eye, own):
    """Index of the hull point with the steepest chord from an eye before the whole hull."""
    k = hint
    while k < top and (bulge[k + 1] - own) * (place[k] - eye) > (bulge[k] - own) * (
        place[k + 1] - eye
    ):
        k += 1
    while k > 0 and (bulge[k - 1] - own) * (place[k] - eye) >= (bulge[k] - own) * (
        place[k - 1] - eye
    ):
        k -= 1
    return k


@njit(cache=True, nogil=True, error_model="numpy")
def view_beyond(
    far, places, corner, spacing, rim, nodes, eyes, sine, cosine, gap, step, stride, reach,
    half_curve, datum, height, away,
):  # fmt: skip
    """What bounds the view of each node beyond an outline, towards one azimuth.

    Along lines `gap` metres apart the upper convex hull of z - s^2 / (2 R') is built once; all
    of it lies before every node, and the tangent to it from a node's own height is the point
    that bounds its view (after Dozier, Bruno and Downey 1981). A node is linear between the
    two lines beside it, in the height and in the distance of that point.

    far : (rows, columns) float32, heights of the larger model; NaN void
    places : (2, m, n) float64, its row and column at the nodes of a lattice on the plane
    corner : (2,) float64, x and y of the lattice's first node; spacing : float, metres
    rim : (points, 2) float64, x and y of the closed outline within which `far` is not asked
    nodes : (count, 2) float64, x and y; all inside the outline
    eyes : (count,) float64, heights at the nodes
    sine, cosine : float, of the azimuth
    step, stride : metres between samples of a line; samples between two look-ups of `places`
    reach : float, metres from a node beyond which nothing can stand above the level
    half_curve : float, 1 / (2 R')
    height, away : (count,) float32, out: height less `datum`, and distance
    """
    s, t, order, start, origin = _by_line(nodes, sine, cosine, gap)
    lines = start.size - 1
    nearest = s.min()
    end = s.max() + reach
    longest = int(np.ceil((end - nearest) / step)) + 2
    together = np.empty((GROUP, longest), np.float32)
    leaves = np.empty(GROUP)
    place = np.empty(longest)
    bulge = np.empty(longest)
    height[:] = 0.0
    away[:] = 0.0
    for k in range(lines):
        g = k % GROUP
        side = origin + k * gap
        if g == 0:
            for other in range(GROUP):
                leaves[other] = _leaves(rim, sine, cosine, side + other * gap)
            begin = int(np.ceil(max(np.min(leaves), nearest) / step))
            samples = min(max(int(end / step) - begin, 0), longest)
            _read_heights(
                far, places, corner, spacing, side, gap, sine, cosine, begin, step, stride,
                together[: min(GROUP, lines - k), :samples],
            )  # fmt: skip
        one = start[k - 1] if k > 0 else 0
        other = start[min(k + 1, lines)]
        leave = leaves[g]
        top = -1
        if leave > -np.inf:
            first = max(int(np.ceil(leave / step)), begin)
            top = _hull(together[g, first - begin : samples], first, step, half_curve, place, bulge)
        hint = 0
        for m in range(one, other):
            n = order[m]
            share = max(1.0 - abs(t[n] - side) / gap, 0.0)
            if top >= 0:
                hint = _tangent(place, bulge, top, hint, s[n], eyes[n] - s[n] * s[n] * half_curve)
                z = bulge[hint] + place[hint] * place[hint] * half_curve
                distance = place[hint] - s[n]
            else:
                distance = max(leave - s[n], step)
                z = eyes[n] - NOTHING * distance
            height[n] += share * (z - datum)
            away[n] += share * distance


@njit(cache=True, nogil=True, error_model="numpy")
def known_distance(
    near, pooled_near, near_places, near_corner, far, pooled_far, far_places, far_corner,
    spacing, rim, nodes, sine, cosine, gap, steps, strides, reach, away,
):  # fmt: skip
    """How far from each node, towards one azimuth, the known ground ends.

    Lines are walked from their far ends; each place keeps the last known one before the nearest
    unknown one ahead. A node takes the nearer of the two lines beside it.

    near, far : (rows, columns) uint8, 1 where the raster and the larger model are known, in
        squares of `pooled_near` and `pooled_far` cells; `far` may be of size 0
    near_places, far_places : (2, m, n) float64, with their corners, as in `view_beyond`
    rim : (points, 2) float64, the raster's outline
    steps, strides : tuples, as in `view_beyond`, inside and outside the raster
    reach : float, metres beyond which nothing could stand above the level
    away : (count,) float32, out: metres
    """
    s, _, order, start, origin = _by_line(nodes, sine, cosine, gap)
    lines = start.size - 1
    step, beyond = steps
    last = s.max()
    end = last + reach
    nearest = int(np.floor(s.min() / step))
    ahead = np.empty(int(np.ceil((end - nearest * step) / step)) + 3)
    known = np.empty(ahead.size, np.uint8)
    outside = np.empty(int(np.ceil((end - nearest * step) / beyond)) + 3, np.uint8)
    away[:] = np.inf
    for k in range(lines):
        one = start[k - 1] if k > 0 else 0
        other = start[min(k + 1, lines)]
        if one == other:
            continue
        side = origin + k * gap
        leave = min(max(_leaves(rim, sine, cosine, side), last + step), end)
        ends = leave
        if far.size > 0:
            first = int(np.ceil(leave / beyond))
            samples = max(int(end / beyond) - first, 0)
            outside[:samples] = 0
            _read_known(
                far, pooled_far, far_places, far_corner, spacing, side, sine, cosine, first, beyond,
                strides[1], outside[:samples],
            )  # fmt: skip
            ends = end
            for i in range(samples - 1, -1, -1):
                if outside[i] == 0:
                    ends = (first + i - 1) * beyond
        inner = int(np.floor(leave / step)) - nearest + 1
        known[:inner] = 0
        _read_known(
            near, pooled_near, near_places, near_corner, spacing, side, sine, cosine, nearest, step,
            strides[0], known[:inner],
        )  # fmt: skip
        if far.size > 0:
            _read_known(
                far, pooled_far, far_places, far_corner, spacing, side, sine, cosine, nearest, step,
                strides[0], known[:inner],
            )  # fmt: skip
        for i in range(inner - 1, -1, -1):
            if known[i] == 0:
                ends = (nearest + i - 1) * step
            ahead[i] = ends
        for m in range(one, other):
            n = order[m]
            away[n] = min(away[n], ahead[int(s[n] / step - nearest)] - s[n])
