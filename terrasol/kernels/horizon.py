"""The terrain horizon: the near field straight, the far field by a convex hull.

All horizons here are tangents of the angle above the level, not below 0.
"""

from __future__ import annotations

import numpy as np
from numba import njit

FAST = {"contract", "reassoc", "nsz", "arcp"}
"""Fast-math flags that still know NaN (void) and infinity."""

NOTHING = 0.25
"""Tangent below the eye at which a line with nothing in view ends; cells between it and a
line with a view get something between."""

UNSEEN = -1e5
"""Height of what a node sees that has no ground near it, m: nothing."""

GROUP = 16
"""Lines of the far field that are read side by side."""

SPARE = 40
"""Numbers left free between two lines, so that they do not fall on the same places of a
cache."""


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST)
def near_field(heights, eyes, pad, first_row, row_step, shift, weight, out):
    """Horizon from the first steps along each ray, exact from the cell's own centre.

    For one azimuth the shift and the two weights of a step are the same for every cell, so
    the inner loop is two loads, three multiplications and a maximum.

    heights : (rows + 2 pad, columns + 2 pad) float32, NaN void; a void hides nothing
    eyes : the same shape, the ground from which one looks
    shift : (azimuths, steps, 4) int64, row and column shifts of the two cells a step mixes
    weight : (azimuths, steps, 4) float32: of the one cell, of the other, 1 / distance,
        and the drop of the Earth over the distance; the number of steps is a multiple of 4
    out : (azimuths, rows, columns) float32, the tangent, for every `row_step`-th row
        from `first_row`
    """
    azimuths, rows, columns = out.shape
    steps = shift.shape[1]
    for a in range(azimuths):
        for r in range(rows):
            i = first_row + r * row_step + pad
            own = eyes[i, pad : pad + columns]
            best = out[a, r]
            for c in range(columns):
                best[c] = 0.0
            for k in range(0, steps, 4):
                s = shift[a, k : k + 4]
                w = weight[a, k : k + 4]
                p0 = heights[i + s[0, 0], pad + s[0, 1] : pad + s[0, 1] + columns]
                q0 = heights[i + s[0, 2], pad + s[0, 3] : pad + s[0, 3] + columns]
                p1 = heights[i + s[1, 0], pad + s[1, 1] : pad + s[1, 1] + columns]
                q1 = heights[i + s[1, 2], pad + s[1, 3] : pad + s[1, 3] + columns]
                p2 = heights[i + s[2, 0], pad + s[2, 1] : pad + s[2, 1] + columns]
                q2 = heights[i + s[2, 2], pad + s[2, 3] : pad + s[2, 3] + columns]
                p3 = heights[i + s[3, 0], pad + s[3, 1] : pad + s[3, 1] + columns]
                q3 = heights[i + s[3, 2], pad + s[3, 3] : pad + s[3, 3] + columns]
                w00, w01, w02, w03 = w[0, 0], w[0, 1], w[0, 2], w[0, 3]
                w10, w11, w12, w13 = w[1, 0], w[1, 1], w[1, 2], w[1, 3]
                w20, w21, w22, w23 = w[2, 0], w[2, 1], w[2, 2], w[2, 3]
                w30, w31, w32, w33 = w[3, 0], w[3, 1], w[3, 2], w[3, 3]
                for c in range(columns):
                    z = own[c]
                    m = best[c]
                    t = w00 * p0[c] + w01 * q0[c] - w02 * z - w03
                    m = t if t > m else m
                    t = w10 * p1[c] + w11 * q1[c] - w12 * z - w13
                    m = t if t > m else m
                    t = w20 * p2[c] + w21 * q2[c] - w22 * z - w23
                    m = t if t > m else m
                    t = w30 * p3[c] + w31 * q3[c] - w32 * z - w33
                    m = t if t > m else m
                    best[c] = m


@njit(cache=True, nogil=True, error_model="numpy")
def _line_heights(
    heights, far_end, along, across, breadth, start, gap, drift, first, length, apart, lines
):
    """Heights where straight lines cross each row (or column), -infinite off the raster.

    The raster reaches half a cell beyond the outer centres. Lines are taken side by side, row
    after row, so that neighbours share what a cache and a page of memory hold, and the
    weights of a row. Line g begins at `apart` * g of `lines`.
    """
    tiny = np.float32(1e-6)
    for i in range(length):
        y = start + drift * (first + i)
        left = int(np.floor(y))
        f = np.float32(y - left)
        row = far_end + (first + i) * along
        inside = left >= 0 and left + (GROUP - 1) * gap < breadth - 1
        for g in range(GROUP):
            j = left + g * gap
            at = row + j * across
            if inside or 0 <= j < breadth - 1:
                z = heights[at]
                if f > tiny:
                    z += f * (heights[at + across] - z)
                lines[g * apart + i] = z
            elif (j == -1 and f > np.float32(0.5)) or (j == breadth - 1 and f < np.float32(0.5)):
                lines[g * apart + i] = heights[row + max(j, 0) * across]
            else:
                lines[g * apart + i] = -np.inf


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST)
def _hull_candidates(line, reach, bend, low, points, voids):
    """Points of a line that may lie on its upper hull, and its voids; return both counts.

    A point below the middle of the two points k steps on either side of it bounds no view
    from beyond them. That is exact for every k short of the near field, and it drops most
    points before the hull's unpredictable stack sees them. `bend` is the drop of the Earth
    over one step: the heights compared are those of the hull, curvature included.
    """
    length = line.size
    low[:] = 0
    k = 1
    while k <= reach:
        before = line[: length - 2 * k]
        behind = line[2 * k :]
        middle = line[k : length - k]
        flag = low[k : length - k]
        sink = np.float32(2.0 * bend * k * k)
        for i in range(length - 2 * k):
            under = middle[i] + middle[i] + sink < before[i] + behind[i]
            flag[i] |= np.uint8(under)
        k *= 2
    count = 0
    holes = 0
    for i in range(length):
        if low[i] == 0 and line[i] > -np.inf:
            points[count] = i
            count += 1
        elif line[i] != line[i]:
            voids[holes] = i
            holes += 1
    return count, holes


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _tangent(place, bulge, top, hint, eye, own):
    """Index of the hull point that bounds the view from `eye` at bulged height `own`.

    Slopes are compared crosswise, which spares the divisions.
    """
    k = min(hint, top)
    rise = bulge[k] - own
    away = eye - place[k]
    moved = False
    while k > 0:
        other = bulge[k - 1] - own
        further = eye - place[k - 1]
        if other * away < rise * further:
            break
        rise = other
        away = further
        k -= 1
        moved = True
    while not moved and k < top:
        other = bulge[k + 1] - own
        nearer = eye - place[k + 1]
        if other * away <= rise * nearer:
            break
        rise = other
        away = nearer
        k += 1
    return k


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _push(place, bulge, top, x, g):
    """Put a point on the upper hull's stack; return the stack's new top."""
    while top > 0 and (bulge[top] - bulge[top - 1]) * (x - place[top]) <= (g - bulge[top]) * (
        place[top] - place[top - 1]
    ):
        top -= 1
    top += 1
    place[top] = x
    bulge[top] = g
    return top


@njit(cache=True, nogil=True, error_model="numpy")
def _walk_line(
    line, eyes, points, voids, first_query, every, skip, step, half_curve, datum, seen, place,
    bulge,
):  # fmt: skip
    """Walk a line from its far end; at each query leave what bounds the view.

    `line` hides, from `eyes` one looks. What is left is a point's height and distance, and
    whether a void lies before it. Where nothing lies beyond the near field, it is a point where
    that ends, well below the eye.
    """
    top = -1
    hint = 0
    point = 0
    hole = 0
    first = max(-((first_query + every) // every), 0)
    beyond = min((line.size + every - first_query) // every + 1, seen.shape[0])
    for query in range(first, beyond):
        i = first_query + query * every
        while point < points.size and points[point] <= i - skip:
            x = points[point] * step
            z = np.float64(line[points[point]])
            top = _push(place, bulge, top, x, z - x * x * half_curve)
            point += 1
        while hole < voids.size and voids[hole] < i:
            hole += 1
        own = np.nan
        if 0 <= i < line.size and eyes[i] > -np.inf:
            own = np.float64(eyes[i])
        else:
            own = _height_near(eyes, i, every)
        seen[query, 0] = own - datum - NOTHING * skip * step
        seen[query, 1] = skip * step
        seen[query, 2] = 1.0 if hole > 0 else 0.0
        if top >= 0 and own == own:
            hint = max(min(hint, top), 0)
            eye = i * step
            sight = own - eye * eye * half_curve
            hint = _tangent(place, bulge, top, hint, eye, sight)
            height = bulge[hint] + place[hint] * place[hint] * half_curve
            seen[query, 0] = height - datum
            seen[query, 1] = eye - place[hint]
            before = hole > 0 and voids[hole - 1] * step > place[hint]
            seen[query, 2] = 1.0 if before else 0.0


@njit(cache=True, nogil=True, error_model="numpy")
def _height_near(line, i, reach):
    """Height of a line at a step, or the nearest within reach, towards the eye first."""
    last = line.size - 1
    for k in range(reach + 1):
        for side in range(2):
            at = i + k if side == 0 else i - k
            if 0 <= at <= last and -np.inf < line[at] < np.inf:
                return np.float64(line[at])
    return np.nan


@njit(cache=True, nogil=True, error_model="numpy")
def far_field(
    heights, eyes, far_end, along, across, length, breadth, drift, step, half_curve,
    skip, gap, first_query, first_node, every, datum, height, away, across_void,
):  # fmt: skip
    """Horizon beyond the near field along every line of one azimuth.

    Each line is walked once from its far end. The upper convex hull of
    g(x) = z(x) - x^2 / (2 R') is kept on a stack; the tangent from the eye to it is the
    horizon (after Dozier, Bruno and Downey 1981), curvature and refraction included.
    Lines stand `gap` whole cells apart; between them, and between queries, the reader interpolates.

    heights : (cells,) float32, the whole raster; NaN void
    eyes : (cells,) float32, the ground from which one looks; of size 0 where that is `heights`
    far_end : int, index of the cell at the far end of the line with across = 0
    along, across : int, index steps towards the eye and to the side
    length, breadth : int, cells along and across
    drift : float, sideways cells a step towards the eye
    step : float, metres a step; half_curve : 1 / (2 R')
    skip : int, a point counts once it is that many steps away
    first_query : int, steps from the far end; may be negative
    first_node : int, side position of the first node, cells
    every : int, spacing of queries and nodes
    height, away : (queries, nodes) float32, out: height less `datum` and distance of the
        point that bounds the view
    across_void : (queries, nodes) uint8, out: 1 where a void lies between the eye and the
        point that bounds its view
    """
    count, nodes = height.shape
    last_query = first_query + (count - 1) * every
    lowest = min(-drift * first_query, -drift * last_query)
    highest = max(-drift * first_query, -drift * last_query) + (nodes - 1) * every
    lines = int((highest - lowest) / gap) + 3
    origin = first_node + lowest
    used = min(length, last_query + 1)
    apart = used + SPARE
    together = np.empty(GROUP * apart, np.float32)
    aloft = eyes.size > 0
    below = np.empty(GROUP * apart if aloft else 0, np.float32)
    ground = eyes if aloft else heights
    low = np.empty(used, np.uint8)
    points = np.empty(used, np.int64)
    voids = np.empty(used, np.int64)
    place = np.empty(used + 1, np.float64)
    bulge = np.empty(used + 1, np.float64)
    seen = np.zeros((count, lines, 3), np.float32)
    seen[:, :, 0] = np.nan
    found = np.zeros((GROUP, count, 3), np.float32)
    for k in range(0, lines, GROUP):
        start = origin + k * gap
        first, last = _on_raster(start, start + (GROUP - 1) * gap, drift, breadth, used)
        if last <= first:
            continue
        _line_heights(
            heights, far_end, along, across, breadth, start, gap, drift, first, last - first,
            apart, together,
        )  # fmt: skip
        if aloft:
            _line_heights(
                eyes, far_end, along, across, breadth, start, gap, drift, first, last - first,
                apart, below,
            )  # fmt: skip
        for g in range(min(GROUP, lines - k)):
            line = together[g * apart : g * apart + last - first]
            sights = below[g * apart : g * apart + last - first] if aloft else line
            kept, holes = _hull_candidates(
                line, skip - 1, step * step * half_curve, low[: last - first], points, voids
            )
            _walk_line(
                line, sights, points[:kept], voids[:holes], first_query - first, every, skip, step,
                half_curve, datum, found[g], place, bulge,
            )  # fmt: skip
        for q in range(count):
            for g in range(min(GROUP, lines - k)):
                seen[q, k + g] = found[g, q]
    _to_nodes(
        seen, ground, far_end, along, across, length, breadth, drift, gap, origin,
        first_query, first_node, every, height, away, across_void,
    )  # fmt: skip


@njit(cache=True, nogil=True, error_model="numpy")
def _on_raster(left, right, drift, breadth, length):
    """First and last step at which some line between two sides may be on the raster."""
    if abs(drift) < 1e-9:
        return (0, length) if right > -1.0 and left < breadth else (0, 0)
    enter = (-1.0 - right) / drift if drift > 0 else (breadth - left) / drift
    leave = (breadth - left) / drift if drift > 0 else (-1.0 - right) / drift
    return max(int(np.floor(enter)), 0), min(int(np.ceil(leave)) + 1, length)


@njit(cache=True, nogil=True, error_model="numpy")
def _to_nodes(
    seen, heights, far_end, along, across, length, breadth, drift, gap, origin,
    first_query, first_node, every, height, away, across_void,
):  # fmt: skip
    """From lines, which slant across the raster, to the nodes between them."""
    lines = seen.shape[1]
    count, nodes = height.shape
    for q in range(count):
        i = first_query + q * every
        row = far_end + min(max(i, 0), length - 1) * along
        ahead = drift * i + origin
        first_line = min(max(int(np.ceil((-0.49 - ahead) / gap)), 0), lines - 1)
        last_line = min(max(int(np.floor((breadth - 0.51 - ahead) / gap)), 0), lines - 1)
        for n in range(nodes):
            y = (first_node + n * every - ahead) / gap
            k = min(int(max(y, float(first_line))), max(last_line - 1, first_line))
            f = min(max(y - k, 0.0), 1.0 if last_line > first_line else 0.0)
            k1 = min(k + 1, lines - 1)
            # A line in a void knows nothing of what is seen from here; the other one must do.
            if seen[q, k, 0] != seen[q, k, 0]:
                f = 1.0
            elif seen[q, k1, 0] != seen[q, k1, 0]:
                f = 0.0
            one = k1 if f == 1.0 else k
            other = k if f == 0.0 else k1
            height[q, n] = (1.0 - f) * seen[q, one, 0] + f * seen[q, other, 0]
            away[q, n] = (1.0 - f) * seen[q, one, 1] + f * seen[q, other, 1]
            across_void[q, n] = seen[q, k, 2] > 0.0 or seen[q, k1, 2] > 0.0
            if height[q, n] != height[q, n]:
                height[q, n] = UNSEEN
                away[q, n] = 1.0
            if y < first_line or y > last_line:
                # No line on the outer side: the next one's angle, seen from the node.
                near = ahead + gap * (first_line if y < first_line else last_line)
                lift = _rim_height(
                    heights, row, across, breadth, float(first_node + n * every)
                ) - _rim_height(heights, row, across, breadth, near)
                if lift == lift:
                    height[q, n] += lift
        _fill_unseen(height[q], away[q])


@njit(cache=True, nogil=True, error_model="numpy")
def _fill_unseen(height, away):
    """Let a node in a void see what the node beside it sees, for the cells between them."""
    for n in range(height.size):
        if height[n] == UNSEEN:
            if n + 1 < height.size and height[n + 1] > UNSEEN:
                height[n] = height[n + 1]
                away[n] = away[n + 1]
            elif n > 0 and height[n - 1] > UNSEEN:
                height[n] = height[n - 1]
                away[n] = away[n - 1]


@njit(cache=True, nogil=True, error_model="numpy")
def _rim_height(heights, row, across, breadth, y):
    """Height across a line of cells, straight on beyond the rim; NaN at a void."""
    last = breadth - 1.0
    inside = min(max(y, 0.0), last)
    mirrored = min(max(2.0 * inside - y, 0.0), last)
    total = 0.0
    for side in range(2):
        at = mirrored if side == 1 else inside
        j = min(int(at), max(breadth - 2, 0))
        z = heights[row + j * across]
        if breadth > 1:
            z += (at - j) * (heights[row + (j + 1) * across] - z)
        total += -z if side == 1 else 2.0 * z
    return total


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST)
def merge_far(heights, pad, first_row, row_step, every, height, away, lift, half_curve, out):
    """Raise the near horizon to the far one, seen from each cell's own height.

    Height and distance of the bounding point are linear between nodes: for one and the same
    point that is exact, wherever the cell lies between them.

    height, away : (azimuths, node rows, node columns) float32, this block's nodes; the
        first node lies on the block's first cell
    lift : what to add to `heights` to have them above the datum of `height`
    half_curve : 1 / (2 R')
    out : (azimuths, rows, columns) float32, near horizon in, horizon out
    """
    azimuths, rows, columns = out.shape
    curve = np.float32(half_curve)
    raised = np.float32(lift)
    nodes = height.shape[2]
    top = np.empty((2, nodes * every), np.float32)
    distance = np.empty((2, nodes * every), np.float32)
    for a in range(azimuths):
        spread = -1
        for r in range(rows):
            row = first_row + r * row_step
            n = row // every
            if n != spread:
                for side in range(2):
                    _expand(height[a, n + side], every, top[side])
                    _expand(away[a, n + side], every, distance[side])
                spread = n
            v = np.float32((row - n * every) / every)
            own = heights[row + pad, pad : pad + columns]
            best = out[a, r]
            z0, z1, d0, d1 = top[0], top[1], distance[0], distance[1]
            for c in range(columns):
                d = d0[c] + v * (d1[c] - d0[c])
                z = z0[c] + v * (z1[c] - z0[c])
                t = (z - raised - own[c]) / d - d * curve
                best[c] = t if t > best[c] else best[c]


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _expand(nodes, every, out):
    """A row of nodes, linear between, to cells."""
    for m in range(nodes.size - 1):
        step = (nodes[m + 1] - nodes[m]) / np.float32(every)
        for s in range(every):
            out[m * every + s] = nodes[m] + np.float32(s) * step
