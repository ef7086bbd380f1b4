"""The sun of single days over single cells of a raster, a ray cast at every look.

At each look the ray runs from the cell's centre towards the sun's own azimuth over the bilinear
surface through the cell centres, level over the outer half cell, and is sampled every `STEP` of a
cell from the first grid line on (see `ray_march`). Where the cell lies on the Earth, and by how
much true north is turned from the grid's, says PROJ, for each cell.
"""

import numpy as np
from numba import njit
from pyproj import Proj, Transformer

from reference.plain_hours import own_plane, sun_of_day, sunshine
from reference.plain_sun import horn_slope
from reference.ray_march import EARTH_RADIUS_LIFTED, bilinear, direction

STEP = 0.1


@njit(nogil=True, error_model="numpy")
def hidden(z, own, row, col, d_row, d_col, metres, tangent, highest):
    """Whether anything on a ray stands above a tangent; z has one more cell on every side."""
    k = 0
    while True:
        walked = 1.0 + k * STEP
        r = row + walked * d_row
        c = col + walked * d_col
        distance = walked * metres
        sight = own + distance * tangent + distance * distance / (2.0 * EARTH_RADIUS_LIFTED)
        if r < -0.5 or c < -0.5 or r > z.shape[0] - 2.5 or c > z.shape[1] - 2.5 or sight > highest:
            return False
        if bilinear(z, r + 1.0, c + 1.0) > sight:
            return True
        k += 1


class PlainSight:
    """A north-up raster of a projected CRS from whose cells one looks for the sun.

    heights : (rows, columns), without voids; west, north : its corner; cell : its size [m]
    hiding : the same shape, heights of what hides where that is not the ground itself
    """

    def __init__(self, heights, west, north, cell, crs, hiding=None):
        self.heights = np.asarray(heights, float)
        hiding = self.heights if hiding is None else np.asarray(hiding, float)
        self.padded = np.pad(hiding, 1, mode="edge")
        self.corner, self.cell = (west, north), cell
        self.to_degrees = Transformer.from_crs(crs, "EPSG:4326", always_xy=True)
        self.projection = Proj(crs)
        self.slopes = horn_slope(self.heights, cell, cell)

    def day(self, date, row, col, seconds=20):
        """First and last sun, hours of sun and gaps of one cell; see `sunshine`."""
        x = self.corner[0] + (col + 0.5) * self.cell
        y = self.corner[1] - (row + 0.5) * self.cell
        longitude, latitude = self.to_degrees.transform(x, y)
        factors = self.projection.get_factors(longitude, latitude)
        turn, scale = factors.meridian_convergence, factors.meridional_scale
        height = self.heights[row, col]
        solar, limb, azimuth = sun_of_day(date, latitude, longitude, height=height, seconds=seconds)
        east, north = (float(part[row, col]) * scale for part in self.slopes)
        slope = np.degrees(np.arctan(np.hypot(east, north)))
        aspect = np.degrees(np.arctan2(-east, -north)) + turn
        up = limb > np.maximum(own_plane(azimuth, slope, aspect), 0.0)
        highest = self.padded.max()
        for i in np.flatnonzero(up):
            ray = direction(azimuth[i] - turn, self.cell / scale, self.cell / scale)
            tangent = np.tan(np.radians(min(limb[i], 89.9)))
            up[i] = not hidden(self.padded, height, row, col, *ray, tangent, highest)
        return sunshine(solar, up)
