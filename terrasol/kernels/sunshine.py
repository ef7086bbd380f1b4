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


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _own_horizon(normal, turn, low, east, north):
    """Horizon of each cell's own plane towards east and north; `low` inf where void."""
    for c in range(turn.size):
        up = normal[2, c] - turn[c] * normal[1, c]
        known = up > np.float32(0.0)
        east[c] = -normal[0, c] / up if known else np.float32(0.0)
        north[c] = -(normal[1, c] + turn[c] * normal[2, c]) / up if known else np.float32(0.0)
        low[c] = np.float32(0.0) if known else np.float32(np.inf)


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _turned_rim(line, turn, cosine, rim):
    """One azimuth of a row's horizon, turned to the latitude of the sun's path."""
    for c in range(turn.size):
        rim[c] = line[c] - turn[c] * cosine * (np.float32(1.0) + line[c] * line[c])


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _bounds(left, right, east, north, side, next_side, bulge, void, low, high):
    """Least and greatest horizon of a row's cells in one sector, terrain and own plane together.

    Between two azimuths the terrain is straight; the plane's horizon is a sine, which bulges
    above the higher of its ends by no more than the factor `bulge`. Both are inf where void.
    """
    for c in range(east.size):
        here = east[c] * side[0] + north[c] * side[1]
        there = east[c] * next_side[0] + north[c] * next_side[1]
        low[c] = void[c] + max(min(left[c], right[c]), min(here, there))
        most = max(max(here, there) * bulge, max(here, there))
        high[c] = void[c] + max(max(left[c], right[c]), most)


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"nsz"}, inline="always")
def _undecided(least, greatest, low, high, lit, todo):
    """Mark the cells whose state a run of moments may change; return how many."""
    count = 0
    for c in range(low.size):
        change = not (least > high[c] if lit[c] else greatest <= low[c])
        todo[c] = change
        count += change
    return count


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _clearance(suns, sectors, i, rim, c, east, north):
    """Tangent of the sun's limb less that of a cell's horizon at its azimuth."""
    k = sectors[i]
    terrain = rim[k, c] + suns[i, 1] * (rim[k + 1, c] - rim[k, c])
    plane = east * suns[i, 2] + north * suns[i, 3]
    return suns[i, 0] - (terrain if terrain > plane else plane)


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _crossing(suns, sectors, i, rim, c, east, north):
    """When, between moments i - 1 and i, the limb crosses the horizon; moment 0 at once."""
    if i == 0:
        return 0.0
    before = _clearance(suns, sectors, i - 1, rim, c, east, north)
    after = _clearance(suns, sectors, i, rim, c, east, north)
    if before == after:
        return float(i)
    return i - 1 + min(max(before / (before - after), 0.0), 1.0)


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _walk_run(
    suns, sectors, start, stop, fastest, shift, rim, c, east, north, lit, least_gap, days
):  # fmt: skip
    """Follow the sun over one cell through the moments of one sector; return the state after.

    From a moment with some clearance, as many are passed as it takes to use it up at the
    fastest rate at which it can change within the run.

    start, stop : the moments
    fastest, shift : greatest change a moment of the limb's tangent, and of its place in the sector
    days : (columns, 4) float32, changed: first and last moment, time in the sun (while lit less
        the moment it began), interruptions
    """
    k = sectors[start]
    rise = abs(rim[k + 1, c] - rim[k, c])
    lean = np.sqrt(east * east + north * north) * np.float32(2.0 * np.pi / (rim.shape[0] - 1))
    rate = fastest + shift * max(rise, lean)
    i = start
    while i < stop:
        clearance = _clearance(suns, sectors, i, rim, c, east, north)
        if (clearance > 0.0) != lit:
            when = _crossing(suns, sectors, i, rim, c, east, north)
            if not lit:
                if np.isnan(days[c, 0]):
                    days[c, 0] = when
                elif when - days[c, 1] >= least_gap:
                    days[c, 3] += 1
                days[c, 2] -= when
            else:
                days[c, 1] = when
                days[c, 2] += when
            lit = not lit
        i += max(1, min(int(abs(clearance) / rate), stop))
    return lit


@njit(cache=True, nogil=True, error_model="numpy")
def walk_days(
    horizon, normal, directions, tilt, suns, sectors, runs, ranges, least_gap, out
):  # fmt: skip
    """First and last moment of direct sun, time between and interruptions, for some days.

    Each day's sun is looked at moment by moment against the horizon, straight between the
    azimuths, and the slope's own plane; a crossing is placed between two moments where the
    difference, straight between them, is 0. Runs of moments within one sector of azimuth that
    are all clear or all hidden for a cell are passed at one stroke.

    horizon : (azimuths, rows, columns) float32, tangents >= 0
    normal : (3, rows, columns) float32
    directions : (azimuths, 2) float32, sine and cosine of the azimuths
    tilt : (3,) float64, latitude offset [radians] = tilt[0] + tilt[1] row + tilt[2] column
    suns : (days, moments, 4) float32, tangent of the height of what counts as the sun, place
        within its sector (0 to 1), sine and cosine of its azimuth
    sectors : (days, moments) int64, the azimuth before it
    runs : (days, runs, 3) int64, first moment, the one after the last, sector; nothing to see
        is left out, and the list ends with an empty run
    ranges : (days, runs, 4) float32, least and greatest tangent of the run, and the greatest
        change from one of its moments to the next of the tangent and of the place
    least_gap : shortest interruption [moments]
    out : (rows, days, columns, 4) float32, out: first and last moment, time in the sun
        [moments], interruptions; NaN where void; NaN but 0 time where there is no sun
    """
    azimuths, rows, columns = horizon.shape
    rim = np.empty((azimuths + 1, columns), np.float32)
    low = np.empty((azimuths, columns), np.float32)
    high = np.empty_like(low)
    turn = np.empty(columns, np.float32)
    void = np.empty(columns, np.float32)
    east = np.empty(columns, np.float32)
    north = np.empty(columns, np.float32)
    lit = np.empty(columns, np.bool_)
    todo = np.empty(columns, np.bool_)
    bulge = np.float32(1.0001 / np.cos(np.pi / azimuths))
    for r in range(rows):
        for c in range(columns):
            turn[c] = tilt[0] + tilt[1] * r + tilt[2] * c
        _own_horizon(normal[:, r], turn, void, east, north)
        for a in range(azimuths + 1):
            _turned_rim(horizon[a % azimuths, r], turn, directions[a % azimuths, 1], rim[a])
        for a in range(azimuths):
            side, next_side = directions[a], directions[(a + 1) % azimuths]
            _bounds(rim[a], rim[a + 1], east, north, side, next_side, bulge, void, low[a], high[a])
        for d in range(suns.shape[0]):
            days, sun, sector = out[r, d], suns[d], sectors[d]
            days[:, :2] = np.nan
            days[:, 2:] = 0.0
            lit[:] = False
            for j in range(runs.shape[1]):
                start, stop, k = runs[d, j, 0], runs[d, j, 1], runs[d, j, 2]
                if start == stop:
                    break
                least, greatest = ranges[d, j, 0], ranges[d, j, 1]
                if _undecided(least, greatest, low[k], high[k], lit, todo) == 0:
                    continue
                for c in range(columns):
                    if todo[c]:
                        alike = least > high[k, c] or greatest <= low[k, c]
                        lit[c] = _walk_run(
                            sun, sector, start, start + 1 if alike else stop, ranges[d, j, 2],
                            ranges[d, j, 3], rim, c, east[c], north[c], lit[c], least_gap, days,
                        )  # fmt: skip
            _conclude(lit, void, suns.shape[1] - 1, days)


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _conclude(lit, void, last, days):
    """End the day of cells that are in the sun to its last moment, and void what has no day."""
    for c in range(lit.size):
        if lit[c]:
            days[c, 1] = last
            days[c, 2] += last
        if np.isnan(days[c, 0]):
            days[c, 3] = np.nan
        if void[c] > 0.0:
            days[c] = np.nan
