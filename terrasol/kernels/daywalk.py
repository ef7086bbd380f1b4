"""The sun of single days over each cell, its rise and set settled along lines of sight.

A line of sight runs over the bilinear surface through the cell centres, level over the outer half
cell. It begins where it leaves the patch between four centres at the eye's corner: nearer, the
ground is the cell's own plane.
"""

from __future__ import annotations

import numpy as np
from numba import njit

FAST = {"contract", "reassoc", "nsz", "arcp"}
"""Fast-math flags that still know NaN (void) and infinity."""

TILE, WIDE = 3, 5
"""Powers of two: cells along the sides of the squares whose highest points are known."""

SAGITTA = 0.05
"""Cells that a line's chord may lie beside the curved line."""

DOUBT = 0.005
"""Tangent by which the stored horizon may be wrong where it hardly curves; 0.3 degree. With 0.01
and 2, nearly half more time would mend one first sun in 40,000 (docs/validation.md)."""

DOUBT_BY_CURVE = 1.0
"""What is added to that, in second differences of the stored horizon between azimuths."""

STEEP = 1.5
"""Tangent a radian of azimuth at which the stored horizon counts as an edge: what makes it is a
wall or a cliff that rises by more than this over the cells between two nodes, which the far field
smears over the sectors around. With 0.7 the sample valley takes twice as long
(docs/performance.md)."""

SMEAR = 0.2
"""Radians to either side over which the far field may smear an edge: as far apart as it is asked,
NODE_STEP, by the nearest that is in it, FAR_FROM (ground/horizon.py)."""

DEPTH = 0.006
"""Tangent up to which the clearance around a crossing is asked for."""

SETTLED, MOST_CUTS = 0.05, 12
"""A crossing is settled once a look moves it by fewer minutes, or after so many looks."""


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _enter(line, inverse, s, bits):
    """Square of 2^bits cells that a line is in at s, and where it next crosses rows and columns."""
    i = int(np.floor(line[0] + s * line[2])) >> bits
    j = int(np.floor(line[1] + s * line[3])) >> bits
    row_end = np.inf
    if line[2] != 0.0:
        row_end = (((i + (line[2] > 0.0)) << bits) - line[0]) * inverse[0]
    column_end = np.inf
    if line[3] != 0.0:
        column_end = (((j + (line[3] > 0.0)) << bits) - line[1]) * inverse[1]
    return i, j, row_end, column_end


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _top(squares, i, j):
    """Highest point of a square; those at the rim go on beyond it."""
    return squares[min(max(i, 0), squares.shape[0] - 1), min(max(j, 0), squares.shape[1] - 1)]


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _over_patch(heights, line, i, j, start, end, by_row, own, bend, best):
    """Raise a horizon to what a line meets between four centres, its start left out.

    line : row and column of the line at 0, and their change a metre
    i, j : row and column of the first centre; start, end : metres at which the line enters, leaves
    by_row : whether it leaves across a row
    """
    last_row, last_column = heights.shape[0] - 1, heights.shape[1] - 1
    i0, i1 = min(max(i, 0), last_row), min(max(i + 1, 0), last_row)
    j0, j1 = min(max(j, 0), last_column), min(max(j + 1, 0), last_column)
    z00, z01 = heights[i0, j0], heights[i0, j1]
    z10, z11 = heights[i1, j0], heights[i1, j1]
    bar = own + start * (best + bend * start)
    if z00 <= bar and z01 <= bar and z10 <= bar and z11 <= bar:
        return best
    return _over_surface(z00, z01, z10, z11, line, i, j, start, end, by_row, own, bend, best)


@njit(cache=True, nogil=True, error_model="numpy")
def _over_surface(z00, z01, z10, z11, line, i, j, start, end, by_row, own, bend, best):
    """Raise a horizon to the bilinear surface between four heights, where a line runs over it."""
    z00, z01, z10, z11 = np.float64(z00), np.float64(z01), np.float64(z10), np.float64(z11)
    p = min(max(line[0] + end * line[2] - i, 0.0), 1.0)
    q = min(max(line[1] + end * line[3] - j, 0.0), 1.0)
    twist = z00 - z01 - z10 + z11
    if twist != twist:
        return _over_edge(z00, z01, z10, z11, p, q, by_row, end, own, bend, best)
    z = z00 + p * (z10 - z00) + q * (z01 - z00) + p * q * twist
    best = max(best, (z - own) / end - bend * end)
    curve = twist * line[2] * line[3]
    if curve < bend:
        rate = line[2] * (z10 - z00 + q * twist) + line[3] * (z01 - z00 + p * twist)
        rest = z - own - rate * end + curve * end * end
        if rest < 0.0:
            where = np.sqrt(rest / (curve - bend))
            if start < where < end:
                inside = rate - 2.0 * curve * end - 2.0 * np.sqrt(rest * (curve - bend))
                best = max(best, inside)
    return best


@njit(cache=True, nogil=True, error_model="numpy")
def _over_edge(z00, z01, z10, z11, p, q, by_row, end, own, bend, best):
    """Raise a horizon to the edge where a line leaves a patch beside a void, if that is known."""
    if by_row:
        one, other, part = (z10, z11, q) if p > 0.5 else (z00, z01, q)
    else:
        one, other, part = (z01, z11, p) if q > 0.5 else (z00, z10, p)
    z = one
    if part > 1e-6:
        z = other if part > 1.0 - 1e-6 else one + part * (other - one)
    tangent = (z - own) / end - bend * end
    return tangent if tangent > best else best


@njit(cache=True, nogil=True, error_model="numpy")
def _along_chord(ground, line, start, end, own, bend, best, enough, where):
    """Raise a horizon to what a straight line meets from start to end, and say where that stands.

    The search is done once the horizon is higher than enough. Squares whose highest point lies
    below the line of sight where it enters them are passed.
    """
    heights, tiles, wides = ground
    slip = 1e-6 / max(abs(line[2]), abs(line[3]))
    inverse = 1.0 / line[2], 1.0 / line[3]
    down, right = 1 if line[2] > 0.0 else -1, 1 if line[3] > 0.0 else -1
    s = start
    while s < end and best <= enough:
        i, j, row_end, column_end = _enter(line, inverse, s + slip, WIDE)
        wide_end = min(max(min(row_end, column_end), s + slip), end)
        if _top(wides, i, j) - own <= s * (best + bend * s):
            s = wide_end
            continue
        while s < wide_end and best <= enough:
            i, j, row_end, column_end = _enter(line, inverse, s + slip, TILE)
            tile_end = min(max(min(row_end, column_end), s + slip), wide_end)
            if _top(tiles, i, j) - own <= s * (best + bend * s):
                s = tile_end
                continue
            i, j, row_end, column_end = _enter(line, inverse, s + slip, 0)
            while s < tile_end and best <= enough:
                by_row = row_end < column_end
                leave = min(min(row_end, column_end), end)
                higher = _over_patch(heights, line, i, j, s, leave, by_row, own, bend, best)
                if higher > best:
                    best, where = higher, leave
                if by_row:
                    i += down
                    row_end += abs(inverse[0])
                else:
                    j += right
                    column_end += abs(inverse[1])
                s = leave
    return best, where


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _leaves(start, slope, size):
    """Where a line leaves the grid, half a cell beyond the last centre."""
    if slope > 0.0:
        return (size - 0.5 - start) / slope
    if slope < 0.0:
        return (-0.5 - start) / slope
    return np.inf


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _chord(place, way, start, stop):
    """Row and column at 0 and their change a metre, of the chord of a curved line."""
    down = way[0] + way[2] * (start + stop)
    right = way[1] + way[3] * (start + stop)
    return place[0] - way[2] * start * stop, place[1] - way[3] * start * stop, down, right


@njit(cache=True, nogil=True, error_model="numpy")
def sight(ground, place, grid, bow, bend, east, north, hint, best, enough):
    """Highest tangent that stands along a line of sight, and how far away what stands there.

    That is `best`, and the distance the hint, if nothing stands above it. The line bends in the
    grid as its bow says, and is followed along chords.

    ground : (heights, tiles, wides), each (rows, columns) float32: what hides, and its highest
        points in squares of 2^TILE and 2^WIDE cells, the centres on all their edges included
    place : row, column and height [m] of the eye
    grid : (4,) float64, rows by east and north, columns by east and north [cells a metre]
    bow : (2, 3) float64, second change a metre of row and of column, by the direction's east^2,
        2 east north and north^2
    bend : 1 / (2 R') [1/m]
    east, north : direction, a unit vector
    hint : metres at which is looked first; 0 for nowhere
    enough : the search ends once the horizon is higher
    """
    rows, columns = ground[0].shape
    way = (
        grid[0] * east + grid[1] * north, grid[2] * east + grid[3] * north,
        0.5 * (bow[0, 0] * east * east + (2.0 * bow[0, 1] * east + bow[0, 2] * north) * north),
        0.5 * (bow[1, 0] * east * east + (2.0 * bow[1, 1] * east + bow[1, 2] * north) * north),
    )  # fmt: skip
    step = 1.0 / max(abs(way[0]), abs(way[1]))
    reach = np.sqrt(4.0 * SAGITTA / max(max(abs(way[2]), abs(way[3])), 1e-30))
    first = (1.0 - 2e-6) * step
    for look in range(2):
        start = first
        if look == 0:
            if hint <= first:
                continue
            start += np.floor((hint - first) / reach) * reach
        while best <= enough:
            line = _chord(place, way, start, start + reach)
            end = min(_leaves(line[0], line[2], rows), _leaves(line[1], line[3], columns))
            stop = min(end, start + reach)
            if look == 0:
                start, stop = max(start, hint - 3.0 * step), min(stop, hint + 3.0 * step)
            if start < stop:
                best, hint = _along_chord(
                    ground, line, start, stop, place[2], bend, best, enough, hint
                )
            if look == 0 or end <= start + reach:
                break
            start += reach
        if best > enough:
            break
    return best, hint


@njit(cache=True, nogil=True, error_model="numpy")
def _look(sun, when, eye, ground, grid, bow, bend, beyond, cell, hints, whole):
    """Tangent of the sun's limb less that of what stands highest under it, in the cell's own frame.

    The clearance of a sun in view is true up to DEPTH, which it does not pass. Of a hidden sun it
    is true if the whole line is asked for; else the first thing found that hides the sun will do.

    eye : row, column, height, horizon of the own plane towards east and north, and latitude
        less that of the sun's path [radians]
    cell : row and column in `beyond`
    hints : (2,) float64, changed: where something was found last, west and east
    """
    i = min(int(when), sun.shape[0] - 2)
    part = when - i
    tangent = sun[i, 0] + part * (np.float64(sun[i + 1, 0]) - sun[i, 0])
    east = sun[i, 2] + part * (np.float64(sun[i + 1, 2]) - sun[i, 2])
    north = sun[i, 3] + part * (np.float64(sun[i + 1, 3]) - sun[i, 3])
    up = tangent + eye[5] * north * sun[i, 4]
    north -= eye[5] * tangent
    level = np.sqrt(east * east + north * north)
    east, north, tangent = east / level, north / level, up / level
    best = max(eye[3] * east + eye[4] * north, 0.0)
    if beyond.size > 0:
        best = max(best, _between(beyond, cell[0], cell[1], east, north))
    if tangent <= best and not whole:
        return tangent - best
    side = 1 if east > 0.0 else 0
    best = max(best, tangent - DEPTH)
    enough = np.inf if whole else tangent
    best, hints[side] = sight(
        ground, (eye[0], eye[1], eye[2]), grid, bow, bend, east, north, hints[side], best, enough
    )
    return tangent - best


@njit(cache=True, nogil=True, error_model="numpy")
def _between(beyond, r, c, east, north):
    """Horizon of a larger model, straight between two azimuths."""
    azimuths = beyond.shape[0]
    turn = (np.arctan2(east, north) / (2.0 * np.pi) % 1.0) * azimuths
    k = int(turn)
    here, there = beyond[k % azimuths, r, c], beyond[(k + 1) % azimuths, r, c]
    return here + (turn - k) * (there - here)


@njit(cache=True, nogil=True, error_model="numpy")
def _settle(
    sun, i, mark, lit, after, before, eye, ground, grid, bow, bend, beyond, cell, hints
):  # fmt: skip
    """When, at or before moment i, the state became what it is there; not before `mark`.

    From i the state is followed back, a look a minute, until it is the old one; within that minute
    the limb's crossing is closed in on by false position (Dowell and Jarratt 1971,
    doi:10.1007/BF01934364).

    after, before : clearance at moments i and i - 1, NaN where not looked at
    """
    b, f_b = float(i), after
    if after != after:
        f_b = _look(sun, b, eye, ground, grid, bow, bend, beyond, cell, hints, False)
    a, f_a = b, f_b
    while a > mark and (f_a > 0.0) == lit:
        b, f_b = a, f_a
        a = b - 1.0
        f_a = before
        if f_a != f_a or a < i - 1:
            f_a = _look(sun, a, eye, ground, grid, bow, bend, beyond, cell, hints, False)
    if a == b or (f_a > 0.0) == lit:
        return a
    kept = 0
    when = a + (b - a) * f_a / (f_a - f_b)
    for _ in range(MOST_CUTS):
        f = _look(sun, when, eye, ground, grid, bow, bend, beyond, cell, hints, True)
        if (f > 0.0) == lit:
            b, f_b = when, f
            f_a *= 0.5 if kept < 0 else 1.0
            kept = -1
        else:
            a, f_a = when, f
            f_b *= 0.5 if kept > 0 else 1.0
            kept = 1
        last, when = when, a + (b - a) * f_a / (f_a - f_b)
        if abs(when - last) < SETTLED:
            break
    return when


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
def _doubts(rim, doubt):
    """How far the horizon between each azimuth of a row and the next may be wrong.

    More where it curves: there a straight line between two azimuths says less.
    """
    azimuths = doubt.shape[0]
    for a in range(azimuths):
        before, here, there = rim[(a - 1) % azimuths], rim[a], rim[a + 1]
        behind = rim[(a + 2) % azimuths]
        for c in range(doubt.shape[1]):
            one = abs(before[c] - here[c] - here[c] + there[c])
            other = abs(here[c] - there[c] - there[c] + behind[c])
            most = one if one > other else other
            doubt[a, c] = np.float32(DOUBT) + np.float32(DOUBT_BY_CURVE) * most
    _doubt_edges(rim, doubt)


@njit(cache=True, nogil=True, error_model="numpy")
def _doubt_edges(rim, doubt):
    """Doubt all that the stored horizon rises around an edge, which may stand elsewhere."""
    azimuths = doubt.shape[0]
    sector = 2.0 * np.pi / azimuths
    reach = int(np.ceil(SMEAR / sector))
    steep = np.float32(STEEP * sector)
    for a in range(azimuths):
        for c in range(doubt.shape[1]):
            if abs(rim[a + 1, c] - rim[a, c]) <= steep:
                continue
            least, most = rim[a, c], rim[a, c]
            for k in range(a - reach, a + reach + 2):
                here = rim[k % azimuths, c]
                least, most = min(least, here), max(most, here)
            rise = most - least
            for k in range(a - reach, a + reach + 1):
                doubt[k % azimuths, c] = max(doubt[k % azimuths, c], rise)


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _bounds(left, right, doubt, east, north, turn, side, next_side, bulge, void, low, high):
    """Least and greatest horizon of a row's cells in one sector.

    That is of the terrain with its doubt, of the own plane and of the level together. Between two
    azimuths the terrain is straight; the plane's horizon is a sine, which bulges above the higher
    of its ends by no more than the factor `bulge`. Both are inf where void.
    """
    for c in range(east.size):
        here = east[c] * side[0] + north[c] * side[1]
        there = east[c] * next_side[0] + north[c] * next_side[1]
        level = -turn[c] * (side[1] if side[1] * turn[c] < next_side[1] * turn[c] else next_side[1])
        low[c] = void[c] + max(min(left[c], right[c]) - doubt[c], min(here, there))
        most = max(max(here, there) * bulge, max(here, there))
        high[c] = void[c] + max(max(max(left[c], right[c]) + doubt[c], most), level * bulge)


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
def _clearances(sun, sectors, i, rim, c, plane):
    """Tangent of the sun's limb less that of the stored horizon, and of plane and level."""
    k = sectors[i]
    terrain = rim[k, c] + sun[i, 1] * (rim[k + 1, c] - rim[k, c])
    own = plane[0] * sun[i, 2] + plane[1] * sun[i, 3]
    level = -plane[2] * sun[i, 3]
    return sun[i, 0] - terrain, sun[i, 0] - (own if own > level else level)


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _crossing(sun, sectors, i, rim, c, plane):
    """When, between moments i - 1 and i, the limb crosses the stored horizon; moment 0 at once."""
    if i == 0:
        return 0.0
    terrain, own = _clearances(sun, sectors, i - 1, rim, c, plane)
    before = min(terrain, own)
    terrain, own = _clearances(sun, sectors, i, rim, c, plane)
    after = min(terrain, own)
    if before == after:
        return float(i)
    return i - 1 + min(max(before / (before - after), 0.0), 1.0)


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _note(when, lit, least_gap, day):
    """Write down that the sun came (else went): see `out` of `walk_days`."""
    if lit:
        if np.isnan(day[0]):
            day[0] = when
        elif when - day[1] >= least_gap:
            day[3] += 1
        day[2] -= when
    else:
        day[1] = when
        day[2] += when


@njit(cache=True, nogil=True, error_model="numpy")
def _walk_run(
    sun, sectors, start, stop, alike, fastest, shift, rim, doubt, c, plane, lit, mark, least_gap,
    eye, ground, grid, bow, bend, beyond, cell, hints, day,
):  # fmt: skip
    """Follow the sun over one cell through the moments of one sector.

    From a moment with some clearance, as many are passed as it takes to use it up at the fastest
    rate at which it can change within the run. Moments in doubt, and each change of state, are
    looked at along a line of sight.

    start, stop : the moments; alike : whether the stored horizon finds all of them alike
    fastest, shift : greatest change a moment of the limb's tangent, and of its place in the sector
    lit, mark : state before, and the moment since which it has been known
    day : (4,) float32, changed: see `_note`

    Returns lit and mark after the run.
    """
    k = sectors[start]
    lean = np.sqrt(plane[0] * plane[0] + plane[1] * plane[1])
    lean = max(lean, abs(plane[2])) * np.float32(2.0 * np.pi / (rim.shape[0] - 1))
    rate = fastest + shift * max(abs(rim[k + 1, c] - rim[k, c]), lean)
    sighted = ground[0].size > 0
    seen, clear, before = -2, np.nan, np.nan
    i = start
    while i < stop:
        terrain, own = _clearances(sun, sectors, i, rim, c, plane)
        up = terrain > 0.0 and own > 0.0
        slack = max(-terrain - doubt, -own)
        if up:
            slack = min(terrain - doubt, own)
        if sighted and own > 0.0 and (slack <= 0.0 or up != lit):
            before = clear if seen == i - 1 else np.nan
            seen = i
            clear = _look(sun, i, eye, ground, grid, bow, bend, beyond, cell, hints, False)
            slack = slack if up == (clear > 0.0) else 0.0
            up = clear > 0.0
        if up != lit:
            if sighted:
                looked = seen == i
                when = _settle(
                    sun, i, mark, up, clear if looked else np.nan, before if looked else np.nan,
                    eye, ground, grid, bow, bend, beyond, cell, hints,
                )  # fmt: skip
            else:
                when = _crossing(sun, sectors, i, rim, c, plane)
            _note(when, up, least_gap, day)
            lit, mark = up, i
        if alike and slack > 0.0:
            break
        i += max(1, min(int(slack / rate), stop))
    return lit, mark


@njit(cache=True, nogil=True, error_model="numpy")
def _row_horizons(horizon, normal, directions, turn, doubting, void, rim, doubt, low, high, plane):
    """Stored horizon of a row's cells and its doubt, their own planes, and bounds on all of these.

    Turned to the latitude of the sun's path.
    """
    azimuths = horizon.shape[0]
    bulge = np.float32(1.0001 / np.cos(np.pi / azimuths))
    _own_horizon(normal, turn, void, plane[0], plane[1])
    for a in range(azimuths + 1):
        _turned_rim(horizon[a % azimuths], turn, directions[a % azimuths, 1], rim[a])
    if doubting:
        _doubts(rim, doubt)
    for a in range(azimuths):
        side, next_side = directions[a], directions[(a + 1) % azimuths]
        _bounds(
            rim[a], rim[a + 1], doubt[a], plane[0], plane[1], turn, side, next_side, bulge, void,
            low[a], high[a],
        )  # fmt: skip


@njit(cache=True, nogil=True, error_model="numpy")
def walk_days(
    horizon, normal, directions, tilt, suns, sectors, runs, ranges, least_gap,
    ground, origin, eyes, grid, bow, bend, beyond, out,
):  # fmt: skip
    """First and last moment of direct sun, time between and interruptions, for some days.

    Each day's sun is looked at moment by moment against the horizon, the slope's own plane and the
    level. The stored horizon, straight between its azimuths, says which moments are clear or hidden
    beyond doubt; runs of moments within one sector of azimuth that are all so are passed at one
    stroke. The others, and each crossing, are settled along lines of sight. Without ground the
    stored horizon is taken at its word, and a crossing placed between two moments where the
    difference, straight between them, is 0.

    horizon : (azimuths, rows, columns) float32, tangents >= 0
    normal : (3, rows, columns) float32
    directions : (azimuths, 2) float32, sine and cosine of the azimuths
    tilt : (3,) float64, latitude offset [radians] = tilt[0] + tilt[1] row + tilt[2] column
    suns : (days, moments, 5) float32, tangent of the height of what counts as the sun, place
        within its sector (0 to 1), sine and cosine of its azimuth, and how much that height
        changes with the height without air
    sectors : (days, moments) int64, the azimuth before it
    runs : (days, runs, 3) int64, first moment, the one after the last, sector; nothing to see
        is left out, and the list ends with an empty run
    ranges : (days, runs, 4) float32, least and greatest tangent of the run, and the greatest
        change from one of its moments to the next of the tangent and of the place
    least_gap : shortest interruption [moments]
    ground : as in `sight`; of size 0 for none
    origin : (2,) float64, row and column of the first cell on the ground
    eyes : (rows, columns) float32, height from which one looks [m]
    grid : (rows, columns, 4) float64; bow, bend : as in `sight`
    beyond : (azimuths, rows, columns) float32, what stands beyond the ground; of size 0 for nothing
    out : (rows, days, columns, 4) float32, out: first and last moment, time in the sun
        [moments], interruptions; NaN where void; NaN but 0 time where there is no sun
    """
    azimuths, rows, columns = horizon.shape
    rim = np.empty((azimuths + 1, columns), np.float32)
    low = np.empty((azimuths, columns), np.float32)
    high, doubt = np.empty_like(low), np.zeros_like(low)
    turn, void = np.empty(columns, np.float32), np.empty(columns, np.float32)
    plane = np.empty((2, columns), np.float32)
    lit, todo = np.empty(columns, np.bool_), np.empty(columns, np.bool_)
    mark = np.empty(columns, np.int64)
    hints = np.empty((columns, 2))
    for r in range(rows):
        for c in range(columns):
            turn[c] = tilt[0] + tilt[1] * r + tilt[2] * c
        _row_horizons(
            horizon[:, r], normal[:, r], directions, turn, ground[0].size > 0, void, rim, doubt,
            low, high, plane,
        )  # fmt: skip
        hints[:] = 0.0
        for d in range(suns.shape[0]):
            days, sun, sector = out[r, d], suns[d], sectors[d]
            days[:, :2] = np.nan
            days[:, 2:] = 0.0
            lit[:] = False
            mark[:] = 0
            for j in range(runs.shape[1]):
                start, stop, k = runs[d, j, 0], runs[d, j, 1], runs[d, j, 2]
                if start == stop:
                    break
                least, greatest = ranges[d, j, 0], ranges[d, j, 1]
                if _undecided(least, greatest, low[k], high[k], lit, todo) == 0:
                    continue
                for c in range(columns):
                    if not todo[c]:
                        continue
                    eye = (
                        origin[0] + r, origin[1] + c, np.float64(eyes[r, c]),
                        -normal[0, r, c] / np.float64(normal[2, r, c]),
                        -normal[1, r, c] / np.float64(normal[2, r, c]), np.float64(turn[c]),
                    )  # fmt: skip
                    lit[c], mark[c] = _walk_run(
                        sun, sector, start, stop, least > high[k, c] or greatest <= low[k, c],
                        ranges[d, j, 2], ranges[d, j, 3], rim, doubt[k, c], c,
                        (plane[0, c], plane[1, c], turn[c]), lit[c], mark[c], least_gap,
                        eye, ground, grid[r, c], bow, bend, beyond, (r, c), hints[c], days[c],
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
