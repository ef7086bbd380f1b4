"""Light of the sky on vine rows: an integral over sky and surface, every ray asked one by one.

Rows are boxes without ends on a plane slope. Looking along them x runs to the right, z is plumb.
"""

import numpy as np

ROWS_ASKED = 2
"""Neighbours on either side. Their heads lie in one plane along the slope: a ray that comes over
one of them comes over all."""


def row_drawing(slope, aspect, spacing, row_azimuth):
    """Rise along and across the row [m per level metre] and level distance of rows [m]."""
    down = np.radians(aspect)
    steep = np.tan(np.radians(slope))
    gradient = -steep * np.array([np.sin(down), np.cos(down)])  # east, north
    turn = np.radians(row_azimuth)
    along = gradient @ [np.sin(turn), np.cos(turn)]
    across = gradient @ [np.cos(turn), -np.sin(turn)]
    # A square metre of slope, spacing wide and a metre of row on the ground long, seen from above.
    return along, across, spacing * np.cos(np.radians(slope)) * np.hypot(1.0, along)


def comes_in(x, z, right, climb, across, period, height, width):
    """Whether light from (right, climb a level metre of the ray) reaches the points (x, z)."""
    free = climb - across * right > 0.0  # else the slope itself stands before it
    for k in range(-ROWS_ASKED, ROWS_ASKED + 1):
        for edge in (k * period + 1e-9, k * period + width - 1e-9):
            with np.errstate(divide="ignore", invalid="ignore"):
                far = (edge - x) / right
                above = z + far * climb - across * edge
            free = free & ~((far > 1e-7) & (above > 0.0) & (above < height))
    return free


def plain_rows(sky_top, level_only, slope, aspect, spacing, height, width, row_azimuth):
    """Energy on a square metre of right side, left side, top and ground.

    From a sky of radiance 1 between the horizon and `sky_top` [degree], dark above. `level_only`
    leaves out the vertical part of its light on top and ground, as models of a horizon band do;
    plumb sides do not take that part anyhow.
    """
    along, across, period = row_drawing(slope, aspect, spacing, row_azimuth)
    bearings, heights, points = 180, 36, 120
    turn = np.radians((np.arange(bearings) + 0.5) * 360.0 / bearings - row_azimuth)
    elevation = np.radians((np.arange(heights)[:, None] + 0.5) * sky_top / heights)
    solid = np.cos(elevation) * np.radians(360.0 / bearings) * np.radians(sky_top / heights)
    right = (np.cos(elevation) * np.sin(turn)).ravel()[:, None]
    forward = (np.cos(elevation) * np.cos(turn)).ravel()[:, None]
    up = (np.sin(elevation) + 0.0 * turn).ravel()[:, None]
    sent = (solid + 0.0 * turn).ravel()
    part = (np.arange(points) + 0.5) / points
    normal = np.array([-across, -along, 1.0])
    normal /= np.linalg.norm(normal)
    facing = right * normal[0] + forward * normal[1]
    facing = np.maximum(facing + (0.0 if level_only else up * normal[2]), 0.0)[:, 0]

    def reached(x, z):
        """Share of the points that each direction reaches."""
        return comes_in(x, z, right, up - along * forward, across, period, height, width).mean(1)

    floor = width + part * (period - width)
    return np.array(
        [
            sent @ (np.maximum(right[:, 0], 0.0)
                    * reached(width + 2e-9, across * width + part * height)),
            sent @ (np.maximum(-right[:, 0], 0.0) * reached(-2e-9, part * height)),
            sent @ (facing * (up - along * forward > across * right)[:, 0]),
            sent @ (facing * reached(floor, across * floor)),
        ]
    )  # fmt: skip
