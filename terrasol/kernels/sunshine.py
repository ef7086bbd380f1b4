"""Time in the sun: by look-up for a whole period, and along the sun's path for one day."""

from __future__ import annotations

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.extending import intrinsic

FAST = {"contract", "reassoc", "nsz", "arcp"}

LANES = 8
"""Sums are kept in multiples of this, a whole vector register."""


@intrinsic
def _add_lanes(typingctx, out, place, table, first, second, third, fourth, w0, w1, w2, w3):
    """out[place:] += the weighted sum of four places of the table, LANES numbers each.

    Written as vectors, since the loop that says the same in Python spends more time proving
    that `out` and `table` do not overlap than adding. Both arrays are flat.
    """
    given = (out, place, table, first, second, third, fourth, w0, w1, w2, w3)

    def lower_to_llvm(context, builder, sig, args):
        lanes = ir.VectorType(ir.FloatType(), LANES)
        undefined = ir.Constant(lanes, ir.Undefined)
        spread = ir.Constant(ir.VectorType(ir.IntType(32), LANES), None)

        def at(position, index):
            array = context.make_array(sig.args[position])(context, builder, args[position])
            return builder.bitcast(builder.gep(array.data, [index]), lanes.as_pointer())

        target = at(0, args[1])
        total = builder.load(target, align=4)
        for start, weight in zip(args[3:7], args[7:], strict=True):
            value = builder.load(at(2, start), align=4)
            one = builder.insert_element(undefined, weight, ir.Constant(ir.IntType(32), 0))
            factor = builder.shuffle_vector(one, undefined, spread)
            product = builder.fmul(factor, value, flags=("contract",))
            total = builder.fadd(total, product, flags=("contract",))
        builder.store(total, target, align=4)
        return context.get_dummy_value()

    return types.void(*given), lower_to_llvm


@njit(cache=True, nogil=True, error_model="numpy")
def fill_time(top, azimuth, lane, hours, table):
    """Add sun positions to a table of time over azimuth and horizon.

    A sun between two azimuths is shared between them linearly.

    top : (steps,) float64, sine of the height of the highest horizon that leaves the sun up
    azimuth : (steps,) float64, radians
    lane : (steps,) int64, column of the sum
    hours : length of a step
    table : (azimuths, knots, lanes) float64, added to: time with the sun above each horizon;
        knots are equal steps of the sine from 0 to 1
    """
    azimuths, knots, lanes = table.shape
    whole = np.zeros_like(table)
    for i in range(top.size):
        if not top[i] > 0.0:
            continue
        highest = min(int(np.ceil(top[i] * (knots - 1))) - 1, knots - 1)
        turn = azimuth[i] / (2.0 * np.pi) * azimuths
        left = int(np.floor(turn))
        share = turn - left
        whole[left % azimuths, highest, lane[i]] += hours * (1.0 - share)
        whole[(left + 1) % azimuths, highest, lane[i]] += hours * share
    for a in range(azimuths):
        for p in range(lanes):
            above = 0.0
            for j in range(knots - 1, -1, -1):
                above += whole[a, j, p]
                table[a, j, p] += above


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _horizon_knots(rim, east, north, up, shift, sine, cosine, scale, at):
    """Where the horizon of each cell of a row lies among the knots.

    The level lies at 0 but for the shift of latitude; there the table is continued straight.
    """
    one = np.float32(1.0)
    for c in range(rim.size):
        plane = -(east[c] * sine + north[c] * cosine) / up[c]
        t = rim[c] - shift[c] * cosine * (one + rim[c] * rim[c])
        t = t if t > plane else plane
        at[c] = t / np.sqrt(one + t * t) * scale


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _add_azimuth(at, up, layer, mix, first, stride, dark, lanes, table, first_out, out):
    """Add one azimuth's time to the cells of a row; the arrays are flat."""
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
        lower = (layer[c] + first + k) * lanes
        upper = lower + stride * lanes
        place = (first_out + c) * lanes
        for p in range(0, lanes, LANES):
            i, j = lower + p, upper + p
            _add_lanes(  # type: ignore[call-arg]
                out, place + p, table, i, i + lanes, j, j + lanes, w0, w1, w2, w3
            )


@njit(cache=True, nogil=True, error_model="numpy")
def sum_time(horizon, normal, heights, datum, directions, tilt, knot_height, table, dark, out):
    """Time in the sun of each cell, summed over the azimuths.

    The horizon used is the highest of the terrain, the slope's own plane and the level.
    Between horizon knots and between height knots the table is linear. The table holds for
    one latitude; a cell north of it is tilted instead, as in the look-up of beam.

    horizon : (azimuths, rows, columns) float32, tangents >= 0
    normal : (3, rows, columns) float32
    heights : (rows, columns) float32, less `datum`
    directions : (azimuths, 2) float32, sine and cosine of the azimuths
    tilt : (3,) float64, latitude offset [radians] = tilt[0] + tilt[1] row + tilt[2] column
    knot_height : (k,) float64, rising
    table : (k * azimuths * knots, lanes) float32
    dark : (azimuths,) int64, the first horizon knot with nothing above it, < knots
    out : (rows, columns, lanes) float32; 0 where void
    """
    azimuths, rows, columns = horizon.shape
    lanes = table.shape[1]
    knots = table.shape[0] // (knot_height.size * azimuths)
    flat_table = table.reshape(-1)
    flat_out = out.reshape(-1)
    up = np.empty(columns, np.float32)
    north = np.empty(columns, np.float32)
    shift = np.empty(columns, np.float32)
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
            layer[c] = k * azimuths * knots
            part = (z - knot_height[k]) / (knot_height[k + 1] - knot_height[k])
            mix[c] = min(max(part, 0.0), 1.0)
            turn = tilt[0] + tilt[1] * r + tilt[2] * c
            shift[c] = turn
            north[c] = normal[1, r, c] + turn * normal[2, r, c]
            up[c] = normal[2, r, c] - turn * normal[1, r, c]
        for a in range(azimuths):
            if dark[a] > 0:
                _horizon_knots(
                    horizon[a, r], normal[0, r], north, up, shift,
                    directions[a, 0], directions[a, 1], np.float32(knots - 1), at,
                )  # fmt: skip
                _add_azimuth(
                    at, up, layer, mix, a * knots, azimuths * knots, dark[a], lanes, flat_table,
                    r * columns, flat_out,
                )  # fmt: skip
