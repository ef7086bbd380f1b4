"""The horizon by walking: for every cell and every azimuth, along the ray to the raster's edge.

The ground between cell centres is the bilinear surface. The ray starts at the cell's centre
and is sampled at equal intervals, `step` cells apart along the axis it crosses fastest; a
`step` of 1 / n therefore meets every grid line of that axis and n - 1 places between each two.
The first sample lies `first` cells away: closer than the neighbouring grid line the ground is
the cell's own surface, which is the business of its slope and not of its horizon.

For each sample at distance D, with R' = R / (1 - k),

    tan h = (z(D) - z0) / D - D / (2 R')

and the horizon is the highest of them, or 0 where the ground falls away on all the ray.
The drop D^2 / (2 R') is the geometric one of Dozier, Bruno and Downey (1981) with the Earth's
radius enlarged for terrestrial refraction (k = 0.13 after Gauss 1826).
"""

from concurrent.futures import ThreadPoolExecutor
from os import cpu_count

import numpy as np
from numba import njit

EARTH_RADIUS = 6_371_000.0
EARTH_RADIUS_LIFTED = EARTH_RADIUS / (1.0 - 0.13)


@njit(nogil=True, error_model="numpy")
def bilinear(z, row, col):
    """Height of the bilinear surface at a fractional row and column; NaN over a void."""
    r0 = min(int(row), z.shape[0] - 2)
    c0 = min(int(col), z.shape[1] - 2)
    down = row - r0
    right = col - c0
    height = 0.0
    for i in range(2):
        weight_row = down if i else 1.0 - down
        for j in range(2):
            weight = weight_row * (right if j else 1.0 - right)
            if weight != 0.0:
                height += weight * z[r0 + i, c0 + j]
    return height


@njit(nogil=True, error_model="numpy")
def march(z, row, col, d_row, d_col, metres, radius, step, first):
    """Tangent of the horizon in one direction; -inf where the ray meets no ground at all.

    One unit of the walk goes `d_row` rows and `d_col` columns and is `metres` long.
    """
    z0 = z[row, col]
    highest = -np.inf
    k = 0
    while True:
        walked = first + k * step
        r = row + walked * d_row
        c = col + walked * d_col
        if r < 0.0 or c < 0.0 or r > z.shape[0] - 1.0 or c > z.shape[1] - 1.0:
            return highest
        distance = walked * metres
        tangent = (bilinear(z, r, c) - z0) / distance - distance / (2.0 * radius)
        if tangent > highest:  # false for NaN, so a void hides nothing
            highest = tangent
        k += 1


def direction(azimuth, cell_x, cell_y):
    """Rows, columns and metres of one unit of the walk towards an azimuth (degrees)."""
    east = np.sin(np.radians(azimuth))
    north = np.cos(np.radians(azimuth))
    d_row = 0.0 if abs(north) < 1e-12 else -north / cell_y
    d_col = 0.0 if abs(east) < 1e-12 else east / cell_x
    metres = 1.0 / max(abs(d_row), abs(d_col))
    return d_row * metres, d_col * metres, metres


@njit(nogil=True, error_model="numpy")
def _march_cells(z, rows, cols, d_row, d_col, metres, radius, step, first, out):
    for i in range(rows.size):
        if np.isnan(z[rows[i], cols[i]]):
            out[i] = np.nan
            continue
        tangent = march(z, rows[i], cols[i], d_row, d_col, metres, radius, step, first)
        out[i] = np.degrees(np.arctan(max(tangent, 0.0)))


def march_horizon(
    z,
    cell_x,
    cell_y,
    azimuths_deg,
    step=0.5,
    *,
    first=1.0,
    radius=EARTH_RADIUS_LIFTED,
    cells=None,
):
    """Horizon of every cell in every azimuth, by marching.

    Parameters
    ----------
    z : ndarray, shape (rows, columns)
        Heights of the cell centres [m]; NaN is void, hides nothing and gets NaN.
    cell_x, cell_y : float
        Size of a cell [m].
    azimuths_deg : array_like, shape (azimuths,)
        Clockwise from north [degrees].
    step, first : float
        Interval of the samples and place of the first, in cells of the axis that the ray
        crosses fastest.
    radius : float
        Radius of the Earth, enlarged for refraction [m]; inf for a flat Earth.
    cells : pair of integer arrays of one shape, optional
        Rows and columns of the cells wanted; every cell if not given.

    Returns
    -------
    ndarray of float64, shape (azimuths, *cells) or (azimuths, rows, columns)
        Horizon height [degrees], at least 0.
    """
    z = np.ascontiguousarray(z, np.float64)
    rows, cols = np.indices(z.shape) if cells is None else np.asarray(cells)
    azimuths = np.asarray(azimuths_deg, float)
    out = np.empty((azimuths.size, rows.size))

    def one(i):
        ray = direction(azimuths[i], cell_x, cell_y)
        _march_cells(z, rows.ravel(), cols.ravel(), *ray, radius, step, first, out[i])

    with ThreadPoolExecutor(cpu_count()) as pool:
        list(pool.map(one, range(azimuths.size)))
    return out.reshape(azimuths.size, *rows.shape)
