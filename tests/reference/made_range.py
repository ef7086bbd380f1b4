"""A mountain range given by a formula, on any grid, and its horizons by walking geodesics.

The heights are a sum of Gaussian ridges over UTM zone 32. A horizon is found by following the
geodesic from a place step by step (Karney 2013, through pyproj) and asking the formula itself:

    tan h = max over D of (z(D) - z0) / D - D / (2 R'),     R' = R / (1 - k), k = 0.13
"""

import numpy as np
from pyproj import CRS, Geod, Transformer

from terrasol import Elevation

UTM = "EPSG:32632"
MIDDLE = 6e5, 5.1e6
HALF_CURVE = (1.0 - 0.13) / (2.0 * 6_371_000.0)
RIDGES = (
    # east and north of the middle [km], turn [degrees], half length, half width [km], height [m]
    (14.0, 3.0, 20.0, 9.0, 2.0, 1800.0),
    (-12.0, -9.0, 70.0, 12.0, 1.8, 1500.0),
    (2.0, 16.0, 110.0, 8.0, 2.5, 1900.0),
    (5.0, -20.0, -30.0, 10.0, 3.0, 2200.0),
    (-25.0, 12.0, 45.0, 10.0, 2.5, 2600.0),
    (3.0, 2.0, 100.0, 3.0, 1.2, 500.0),
)


def heights(x, y):
    """Height at UTM coordinates [m]."""
    u, v = (np.asarray(x) - MIDDLE[0]) / 1e3, (np.asarray(y) - MIDDLE[1]) / 1e3
    z = 600.0 + 80.0 * np.sin(u / 1.7) * np.cos(v / 2.3)
    for east, north, turn, length, width, height in RIDGES:
        turn = np.radians(turn)
        along = (u - east) * np.cos(turn) + (v - north) * np.sin(turn)
        across = (v - north) * np.cos(turn) - (u - east) * np.sin(turn)
        z = z + height * np.exp(-((along / length) ** 2) - (across / width) ** 2)
    return z


def on_grid(crs, transform, shape):
    """The range on a grid of any CRS."""
    a, b, c, d, e, f = transform
    column, row = np.meshgrid(np.arange(shape[1]) + 0.5, np.arange(shape[0]) + 0.5)
    x, y = a * column + b * row + c, d * column + e * row + f
    place = Transformer.from_crs(CRS.from_user_input(crs), UTM, always_xy=True).transform(x, y)
    return Elevation.from_array(heights(*place), transform, crs)


def square(half, cell):
    """A square in UTM about the middle: half its side and the cell [m]."""
    count = round(2 * half / cell)
    corner = MIDDLE[0] - half, MIDDLE[1] + half
    return on_grid(UTM, (cell, 0, corner[0], 0, -cell, corner[1]), (count, count))


def places(elevation, rows, columns):
    """UTM coordinates of some cells' centres."""
    a, b, c, d, e, f = elevation.transform
    u, v = np.asarray(columns) + 0.5, np.asarray(rows) + 0.5
    to_utm = Transformer.from_crs(elevation.crs, UTM, always_xy=True)
    return to_utm.transform(a * u + b * v + c, d * u + e * v + f)


def horizons(x, y, azimuths, half, step=60.0):
    """Horizon of some places [degrees], shape (azimuths, places).

    Ground counts within a square about the middle of half a side `half` [m]. The first point
    lies one step away.
    """
    geod = Geod(ellps="WGS84")
    to_degrees = Transformer.from_crs(UTM, "EPSG:4326", always_xy=True)
    own = heights(x, y)
    distance = np.arange(1, int(3.0 * half / step)) * step
    longitude, latitude = (np.repeat(v, distance.size) for v in to_degrees.transform(x, y))
    out = np.empty((len(azimuths), own.size))
    for i, azimuth in enumerate(azimuths):
        ahead = np.full(longitude.size, azimuth)
        far = geod.fwd(longitude, latitude, ahead, np.tile(distance, own.size))
        east, north = to_degrees.transform(far[0], far[1], direction="INVERSE")
        inside = (abs(east - MIDDLE[0]) < half) & (abs(north - MIDDLE[1]) < half)
        z = np.where(inside, heights(east, north), -1e9).reshape(own.size, -1)
        tangent = (z - own[:, None]) / distance - distance * HALF_CURVE
        out[i] = np.degrees(np.arctan(np.maximum(tangent.max(axis=1), 0.0)))
    return out
