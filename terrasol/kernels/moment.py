"""Single moments of sun on cells whose horizons are at hand, and what a step makes of them.

Horizons are kept as the sine of their height in 1/65535, one plane of cells an azimuth: 16
bits a cell and azimuth, and a moment needs two of them. All loops run over short runs of
cells, so that what a run needs stays in the innermost cache while the sun moves on.
"""

from __future__ import annotations

import numpy as np
from numba import njit

FAST = {"contract", "reassoc", "nsz", "arcp"}
"""Fast-math flags that still know NaN (void) and infinity."""

FULL = 65535.0
"""The code of a sine of 1. One step of the code is 0.0009 degree at the level, 0.003 at 73
degrees; the sun's disc is 0.53 degree wide."""

RUN = 512
"""Cells worked on together."""


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST)
def encode_horizon(horizon, out):
    """Tangents of the horizon to 16-bit sines.

    horizon : (azimuths, rows, columns) float32, tangents >= 0; NaN is taken for 0
    out : (azimuths, rows, columns) uint16
    """
    one = np.float32(1.0)
    for a in range(horizon.shape[0]):
        for r in range(horizon.shape[1]):
            rim = horizon[a, r]
            code = out[a, r]
            for c in range(rim.size):
                t = rim[c] if rim[c] > np.float32(0.0) else np.float32(0.0)
                sine = t / np.sqrt(one + t * t)
                code[c] = np.uint16(sine * np.float32(FULL) + np.float32(0.5))


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST)
def decode_horizon(code, out):
    """16-bit sines back to tangents.

    code : (azimuths, cells) uint16
    out : (azimuths, cells) float32; the steepest is that of 65534
    """
    one = np.float32(1.0)
    top = np.float32((FULL - 1.0) / FULL)
    for a in range(code.shape[0]):
        for c in range(code.shape[1]):
            sine = np.float32(code[a, c]) * np.float32(1.0 / FULL)
            sine = sine if sine < top else top
            out[a, c] = sine / np.sqrt(one - sine * sine)


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _facing(left, right, n_east, n_north, n_up, to_north, to_east, sun, lit):
    """Cosine of incidence times the part of the disc in view, times the air's change.

    sun : (7,) towards east, north, up; weights of the horizon codes left and right of it;
        1 / width of the disc's edge; relative change of the light with the sine of elevation
    """
    zero = np.float32(0.0)
    one = np.float32(1.0)
    half = np.float32(0.5)
    east, north, up = sun[0], sun[1], sun[2]
    weight_left, weight_right, sharpness, air = sun[3], sun[4], sun[5], sun[6]
    for c in range(lit.size):
        rise = to_north[c] * north + to_east[c] * east
        rim = np.float32(left[c]) * weight_left + np.float32(right[c]) * weight_right
        part = half + (up + rise - rim) * sharpness
        part = part if part > zero else zero
        part = part if part < one else one
        cosine = n_east[c] * east + n_north[c] * north + n_up[c] * up
        cosine = cosine if cosine > zero else zero
        lit[c] = part * cosine * (one + air * rise)


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _two_by_height(heights, knot, first, second, one, other):
    """Two quantities, linear between height knots: a line and a bend at every inner knot.

    first, second : (knots,) value at the lowest knot, slope above it, change of slope at
        each further knot but the last
    """
    low = knot[0]
    for c in range(one.size):
        z = heights[c] - low
        one[c] = first[0] + first[1] * z
        other[c] = second[0] + second[1] * z
    for k in range(2, knot.size):
        low = knot[k - 1]
        bend_one = first[k]
        bend_other = second[k]
        for c in range(one.size):
            z = heights[c] - low
            z = z if z > np.float32(0.0) else np.float32(0.0)
            one[c] += bend_one * z
            other[c] += bend_other * z


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _add_product(lit, beam, ring, beam_sum, ring_sum):
    for c in range(lit.size):
        beam_sum[c] += lit[c] * beam[c]
        ring_sum[c] += lit[c] * ring[c]


@njit(cache=True, nogil=True, error_model="numpy")
def direct_light(code, normal, offset, heights, knot, first, left, sun, strength, out):
    """Beam and circumsolar light of each cell, summed over the moments of each step.

    code : (azimuths, cells) uint16, horizons from `encode_horizon`, the first due north
    normal : (3, cells) float32, towards east, north and up of the place the suns are for;
        NaN where void
    offset : (2, cells) float32, how far north and east of that place a cell lies [radians]
    heights : (cells,) float32 [m]
    knot : (knots,) float32, rising, two or more, the cells' heights within
    first : (steps + 1,) int64, where each step's moments begin
    left : (moments,) int64, azimuth of the horizon on the sun's left
    sun : (moments, 7) float32, see `_facing`
    strength : (moments, 2, knots) float32, beam and circumsolar light facing the sun times the
        moment's weight, as `_two_by_height` wants them
    out : (2, steps, cells) float32; 0 where void
    """
    azimuths, cells = code.shape
    lit = np.empty(RUN, np.float32)
    beam = np.empty(RUN, np.float32)
    ring = np.empty(RUN, np.float32)
    for start in range(0, cells, RUN):
        run = slice(start, min(start + RUN, cells))
        size = run.stop - run.start
        for t in range(first.size - 1):
            out[:, t, run] = np.float32(0.0)
            for m in range(first[t], first[t + 1]):
                right = left[m] + 1 if left[m] + 1 < azimuths else 0
                _facing(
                    code[left[m], run], code[right, run], normal[0, run], normal[1, run],
                    normal[2, run], offset[0, run], offset[1, run], sun[m], lit[:size],
                )  # fmt: skip
                _two_by_height(
                    heights[run], knot, strength[m, 0], strength[m, 1], beam[:size], ring[:size]
                )
                _add_product(lit[:size], beam[:size], ring[:size], out[0, t, run], out[1, t, run])


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _between_nodes(upper, lower, part, j, u, row, out):
    """Between two rows of nodes, mixed in `row`, and between nodes `j` and `j + 1`."""
    for i in range(upper.size):
        row[i] = upper[i] + part * (lower[i] - upper[i])
    row[upper.size] = row[upper.size - 1]
    for c in range(out.size):
        left = row[j[c]]
        out[c] = left + u[c] * (row[j[c] + 1] - left)


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _even_light(dome, low, view, band, to_north, to_east, change, out):
    """Light of the dome and of the horizon band, never below 0."""
    zero = np.float32(0.0)
    one = np.float32(1.0)
    north, east = change[0], change[1]
    for c in range(out.size):
        light = view[c] * dome[c] + band[c] * low[c]
        light = light * (one + to_north[c] * north + to_east[c] * east)
        out[c] = light if light > zero else zero


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST, inline="always")
def _scaled(beam, ring, view, factor, albedo, total, own, even, back):
    """Each part times the factor, and their sum; `even` and `back` hold the light unscaled.

    Four short loops: one that writes four arrays is not vectorised, for too many of them
    would have to be proved apart.
    """
    one = np.float32(1.0)
    for c in range(own.size):
        own[c] = factor[c] * beam[c]
    for c in range(even.size):
        even[c] = factor[c] * (even[c] + ring[c])
    for c in range(back.size):
        back[c] = factor[c] * albedo * (one - view[c]) * back[c]
    for c in range(total.size):
        total[c] = own[c] + even[c] + back[c]


@njit(cache=True, nogil=True, error_model="numpy")
def parts_of_steps(
    direct, even, change, offset, sky, heights, knot, around, node_row, node_column, albedo, factor,
    out,
):  # fmt: skip
    """Global, beam, diffuse and reflected light of each cell and step.

    direct : (2, steps, rows * columns) float32, from `direct_light`
    even : (steps, 2, knots) float32, isotropic light on level ground and horizon band on a
        wall, as `_two_by_height` wants them
    change : (steps, 2) float32, relative change of `even` a radian north and east
    offset : (2, rows * columns) float32, see `direct_light`
    sky : (2, rows * columns) float32, sky-view factor and open part of the band
    heights : (rows * columns,) float32 [m]
    knot : (knots,) float32 [m]
    around : (steps, node rows, node columns) float32, what the terrain around receives
    node_row : (rows,) float32, place of the rows among the nodes, within them
    node_column : (columns,) float32, of the columns
    albedo : (steps,) float32
    factor : (rows * columns,) float32, for the basis; NaN where void
    out : (4, steps, rows * columns) float32: global, beam, diffuse, reflected
    """
    columns = node_column.size
    dome = np.empty(columns, np.float32)
    low = np.empty(columns, np.float32)
    mixed = np.empty(around.shape[2] + 1, np.float32)
    j = np.empty(columns, np.uint32)
    u = np.empty(columns, np.float32)
    for c in range(columns):
        j[c] = int(node_column[c])
        u[c] = node_column[c] - np.float32(j[c])
    last = around.shape[1] - 1
    for r in range(node_row.size):
        row = slice(r * columns, (r + 1) * columns)
        above = min(int(node_row[r]), max(last - 1, 0))
        below = min(above + 1, last)
        part = np.float32(node_row[r] - above)
        for t in range(albedo.size):
            _two_by_height(heights[row], knot, even[t, 0], even[t, 1], dome, low)
            _even_light(
                dome, low, sky[0, row], sky[1, row], offset[0, row], offset[1, row], change[t],
                out[2, t, row],
            )  # fmt: skip
            _between_nodes(around[t, above], around[t, below], part, j, u, mixed, out[3, t, row])
            _scaled(
                direct[0, t, row], direct[1, t, row], sky[0, row], factor[row], albedo[t],
                out[0, t, row], out[1, t, row], out[2, t, row], out[3, t, row],
            )  # fmt: skip
