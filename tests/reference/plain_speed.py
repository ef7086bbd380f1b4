"""The naive way to a year of beam: a ray per cell and sun position, with nothing kept.

For each hourly position of the sun, each cell walks along the ray in the sun's exact azimuth
until the ground hides the sun, the ray has risen above the highest ground, or the raster ends.
Compiled by numba and run on one thread: it is the yardstick for speed, not for accuracy.
"""

import numpy as np
from numba import njit

from .plain_sun import clear_beam, daylight, sun_place, unit_vectors, upward_normals
from .ray_march import EARTH_RADIUS_LIFTED, bilinear


def hourly_suns(times, place, *, linke=3.0):
    """Sun and beam at the middle of the place for the times at which the sun is up.

    Returns
    -------
    vectors : ndarray, shape (times, 3)
        Towards the sun: east, north, up.
    beam : ndarray, shape (times,)
        Normal to the rays [W/m2].
    """
    times = daylight(times, place)
    elevation, azimuth = sun_place(times, *place.middle, place.height)
    up = elevation > 0.0
    beam = clear_beam(times[up], elevation[up], linke, [place.height])[:, 0]
    return unit_vectors(elevation[up], azimuth[up]), beam


@njit(nogil=True, error_model="numpy")
def sees_sun(z, row, col, sun, cell_x, cell_y, radius, top):
    """Whether the cell's centre sees the sun's centre; half-cell steps along the ray."""
    d_col = sun[0] / cell_x
    d_row = -sun[1] / cell_y
    across = max(abs(d_col), abs(d_row))
    if across == 0.0:
        return True
    metres = np.hypot(sun[0], sun[1]) / across
    d_col /= across
    d_row /= across
    rise = sun[2] / np.hypot(sun[0], sun[1])
    z0 = z[row, col]
    walked = 1.0
    while True:
        r = row + walked * d_row
        c = col + walked * d_col
        if r < 0.0 or c < 0.0 or r > z.shape[0] - 1.0 or c > z.shape[1] - 1.0:
            return True
        distance = walked * metres
        ray = z0 + distance * rise + distance * distance / (2.0 * radius)
        if ray > top:
            return True
        if bilinear(z, r, c) > ray:
            return False
        walked += 0.5


@njit(nogil=True, error_model="numpy")
def _add_up(z, rows, cols, normals, suns, beam, cell_x, cell_y, radius, seconds, out):
    top = np.nanmax(z)
    for t in range(suns.shape[0]):
        sun = suns[t]
        for i in range(rows.size):
            facing = normals[i, 0] * sun[0] + normals[i, 1] * sun[1] + normals[i, 2] * sun[2]
            if facing <= 0.0:
                continue
            if sees_sun(z, rows[i], cols[i], sun, cell_x, cell_y, radius, top):
                out[i] += beam[t] * facing * seconds * 1e-6


def plain_beam(
    z,
    cell_x,
    cell_y,
    suns,
    beam,
    *,
    seconds=3600.0,
    radius=EARTH_RADIUS_LIFTED,
    cells=None,
    normals=None,
):
    """Beam irradiation of each cell over the sun positions given.

    Parameters
    ----------
    z : ndarray of float64, shape (rows, columns)
        Heights [m].
    cell_x, cell_y : float
        Size of a cell [m].
    suns : ndarray, shape (times, 3)
        Unit vectors towards the sun, above the horizontal.
    beam : ndarray, shape (times,)
        Beam normal to the rays [W/m2].
    seconds : float
        What each position stands for.
    cells : pair of integer arrays of one shape, optional
        Rows and columns wanted; every cell if not given.
    normals : ndarray, shape (rows, columns, 3), optional
        Ready normals, to keep them out of a timing.

    Returns
    -------
    ndarray, shape (*cells)
        Per square metre of the slope [MJ/m2].
    """
    z = np.ascontiguousarray(z, np.float64)
    rows, cols = np.indices(z.shape) if cells is None else np.asarray(cells)
    flat_rows, flat_cols = rows.ravel(), cols.ravel()
    if normals is None:
        normals = upward_normals(z, cell_x, cell_y)
    mine = np.ascontiguousarray(normals[flat_rows, flat_cols])
    out = np.zeros(flat_rows.size)
    _add_up(z, flat_rows, flat_cols, mine, suns, beam, cell_x, cell_y, radius, seconds, out)
    return out.reshape(rows.shape)
