"""Direct light by look-up in sun tables, and how those tables are filled."""

from __future__ import annotations

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.core import cgutils
from numba.extending import intrinsic

FAST = {"contract", "reassoc", "nsz", "arcp"}

LANES = 16
"""Sums that ride in one pass; fixed so that the inner loop is a few vector registers."""

RUN = 256
"""Cells worked on together, so that their sums and one azimuth's table stay in the
innermost cache."""


@intrinsic
def _add_rows(typingctx, out, row, table, lower, upper, weights):
    """out[row] += four weighted half rows from each of two places of the table.

    Written as vectors of LANES numbers, since the loop that says the same in Python spends
    more time proving that `out` and `table` do not overlap than adding (docs/performance.md).
    """
    signature = types.void(out, row, table, lower, upper, weights)

    def lower_to_llvm(context, builder, sig, args):
        lanes = ir.VectorType(ir.FloatType(), LANES)
        undefined = ir.Constant(lanes, ir.Undefined)
        first = ir.Constant(ir.VectorType(ir.IntType(32), LANES), None)

        def at(position, index, width):
            array = context.make_array(sig.args[position])(context, builder, args[position])
            offset = builder.mul(index, ir.Constant(ir.IntType(64), width))
            return builder.bitcast(builder.gep(array.data, [offset]), lanes.as_pointer())

        target = at(0, args[1], LANES)
        total = builder.load(target, align=4)
        parts = cgutils.unpack_tuple(builder, args[5])
        for place, own in ((args[3], parts[:4]), (args[4], parts[4:])):
            start = at(2, place, 2 * LANES)
            for i, part in enumerate(own):
                value = builder.load(builder.gep(start, [ir.Constant(ir.IntType(64), i)]), align=4)
                one = builder.insert_element(undefined, part, ir.Constant(ir.IntType(32), 0))
                spread = builder.shuffle_vector(one, undefined, first)
                product = builder.fmul(spread, value, flags=("contract",))
                total = builder.fadd(total, product, flags=("contract",))
        builder.store(total, target, align=4)
        return context.get_dummy_value()

    return signature, lower_to_llvm


@njit(cache=True, nogil=True, error_model="numpy")
def fill_table(elevation, azimuth, lane, weight, knot_angle, disc, table):
    """Add sun positions to a table of vector sums over azimuth and horizon.

    A sun between two azimuths is split between them so that its horizontal direction is
    kept exactly, and its vertical part linearly. The sun's disc is cut by a straight edge.

    elevation, azimuth : (steps,) float64, radians
    lane : (steps,) int64, column of the sum
    weight : (steps, heights) float64, energy at normal incidence
    knot_angle : (knots,) float64, horizon heights [radians], equal steps of the sine, 0 to 1
    disc : float, radius of the sun's disc, radians
    table : (azimuths, knots, 2, lanes, heights) float64, added to: horizontal and vertical
        sums over all suns above the horizon
    """
    azimuths, knots, _, _, heights = table.shape
    sector = 2.0 * np.pi / azimuths
    whole = np.zeros_like(table)
    for i in range(elevation.size):
        turn = azimuth[i] / sector
        left = int(np.floor(turn))
        below = 0
        if elevation[i] > disc:
            below = min(int(np.sin(elevation[i] - disc) * (knots - 1)) + 1, knots)
        for side in range(2):
            a = (left + side) % azimuths
            y = turn - left if side == 1 else 1.0 - turn + left
            level = np.cos(elevation[i]) * np.sin(y * sector) / np.sin(sector)
            upright = np.sin(elevation[i]) * y
            j = below - 1
            while j < knots and (j < below or knot_angle[j] < elevation[i] + disc):
                if j >= below:
                    d = min(max((elevation[i] - knot_angle[j]) / disc, -1.0), 1.0)
                    part = 0.5 + (d * np.sqrt(1.0 - d * d) + np.arcsin(d)) / np.pi
                    target = table[a, j, :, lane[i]]
                else:
                    part = 1.0
                    target = whole[a, max(j, 0), :, lane[i]]
                if j >= 0:
                    for k in range(heights):
                        target[0, k] += level * part * weight[i, k]
                        target[1, k] += upright * part * weight[i, k]
                j += 1
    _add_from_above(whole, table)


@njit(cache=True, nogil=True, error_model="numpy")
def _add_from_above(whole, table):
    """Add to each horizon knot what stands there and at all higher ones."""
    azimuths, knots, parts, lanes, heights = table.shape
    for a in range(azimuths):
        for s in range(parts):
            for p in range(lanes):
                for k in range(heights):
                    total = 0.0
                    for j in range(knots - 1, -1, -1):
                        total += whole[a, j, s, p, k]
                        table[a, j, s, p, k] += total


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _horizon_knots(rim, east, north, up, shift, sine, cosine, scale, toward, at):
    """Where the horizon of each cell of a row lies among the knots, and n . azimuth."""
    one = np.float32(1.0)
    zero = np.float32(0.0)
    for c in range(rim.size):
        toward[c] = east[c] * sine + north[c] * cosine
        plane = -toward[c] / up[c]
        t = rim[c] - shift[c] * cosine * (one + rim[c] * rim[c])
        t = t if t > plane else plane
        t = t if t > zero else zero
        at[c] = t / np.sqrt(one + t * t) * scale


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _add_azimuth(at, toward, up, layer, mix, first, stride, dark, table, out, first_out):
    """Add one azimuth's light to a run of cells."""
    one = np.float32(1.0)
    for c in range(at.size):
        k = min(int(at[c]), dark)
        if k >= dark or not up[c] > 0:
            continue
        w = at[c] - np.float32(k)
        m = mix[c]
        w3 = w * m
        w2 = m - w3
        w1 = w - w3
        w0 = one - m - w1
        h = toward[c]
        v = up[c]
        parts = (h * w0, v * w0, h * w1, v * w1, h * w2, v * w2, h * w3, v * w3)
        lower = layer[c] + first + k
        _add_rows(out, first_out + c, table, lower, lower + stride, parts)  # type: ignore[call-arg]


@njit(cache=True, nogil=True, error_model="numpy")
def look_up(
    horizon, normal, heights, datum, directions, tilt, knot_height, table, dark, northward, out
):
    """Direct light on each cell: n . T(horizon), summed over the azimuths.

    The horizon used is the highest of the terrain, the slope's own plane and the level.
    Between horizon knots and between height knots the table is linear. The tables hold for
    one latitude; a cell north of it is turned instead: moving north by an angle tilts the
    ground by that angle.

    horizon : (azimuths, rows, columns) float32, tangents >= 0
    normal : (3, rows, columns) float32
    heights : (rows, columns) float32, less `datum`
    directions : (azimuths, 2) float32, sine and cosine of the azimuths
    tilt : (3,) float64, latitude offset [radians] = tilt[0] + tilt[1] row + tilt[2] column
    knot_height : (k,) float64, rising
    table : (k * azimuths * knots, 2 * LANES) float32
    dark : (azimuths,) int64, the first horizon knot with nothing above it, < knots
    northward : (LANES,) float32, relative change of each sum a radian north, by the air alone
    out : (rows * columns, LANES) float32; 0 where void
    """
    azimuths, rows, columns = horizon.shape
    knots = table.shape[0] // (knot_height.size * azimuths)
    stride = azimuths * knots
    up = np.empty(columns, np.float32)
    north = np.empty(columns, np.float32)
    shift = np.empty(columns, np.float32)
    toward = np.empty(columns, np.float32)
    at = np.empty(columns, np.float32)
    layer = np.empty(columns, np.int64)
    mix = np.empty(columns, np.float32)
    out[:] = 0.0
    for r in range(rows):
        for c in range(columns):
            z = heights[r, c] + datum
            k = 0
            while k + 2 < knot_height.size and z >= knot_height[k + 1]:
                k += 1
            layer[c] = k * stride
            part = (z - knot_height[k]) / (knot_height[k + 1] - knot_height[k])
            mix[c] = min(max(part, 0.0), 1.0)
            turn = tilt[0] + tilt[1] * r + tilt[2] * c
            shift[c] = turn
            north[c] = normal[1, r, c] + turn * normal[2, r, c]
            up[c] = normal[2, r, c] - turn * normal[1, r, c]
        for left in range(0, columns, RUN):
            run = slice(left, min(left + RUN, columns))
            for a in range(azimuths):
                if dark[a] == 0:
                    continue
                _horizon_knots(
                    horizon[a, r, run], normal[0, r, run], north[run], up[run], shift[run],
                    directions[a, 0], directions[a, 1], np.float32(knots - 1), toward[run], at[run],
                )  # fmt: skip
                _add_azimuth(
                    at[run], toward[run], up[run], layer[run], mix[run], a * knots, stride,
                    dark[a], table, out, r * columns + left,
                )  # fmt: skip
        for c in range(columns):
            sums = out[r * columns + c]
            for p in range(LANES):
                sums[p] += sums[p] * shift[c] * northward[p]
