"""A window on the ground, true in metres, whatever the raster's CRS and transform.

Pixels are squares on the azimuthal equidistant plane that touches the ellipsoid at the
raster's centre. The window lies along the raster's edges, so that the ground fills it: its
up direction is the raster's own axis that comes nearest to true north. Maps are drawn in it;
nothing is measured in it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from pyproj import CRS, Geod, Transformer

from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame

LATTICE_NODES = 129
"""Nodes a side at which places go through the projection; between them they are interpolated.
On a picture of 1200 pixels the nodes are 9 pixels apart and the error far below one."""

NARROWEST = 160
"""Fewest pixels a side: a strip of ground gets empty paper beside it."""

NEAREST_FROM = 4.0
"""Pixels a cell from which `Picture.cells` shows them as they are."""


@dataclass(frozen=True)
class Picture:
    """Where every pixel lies in the raster and on the Earth.

    Parameters
    ----------
    columns, rows : ndarray of float32, shape (height, width)
        Raster position of the pixel centres, in cells from the raster's outer corner; NaN
        where the pixel lies off the raster.
    longitude, latitude : ndarray of float64, shape (LATTICE_NODES, LATTICE_NODES)
        Geodetic position on a lattice from the picture's upper left to its lower right
        corner [degrees]. Longitude runs on past 180 rather than jump.
    metres_per_pixel : float
        Side of a pixel [m].
    up : float
        True azimuth of the picture's up direction at its centre [degrees].
    coarsening : tuple of int
        Rows and columns of the raster that are averaged before a pixel is taken.
    jacobian : ndarray of float64, shape (2, 2)
        [[d right/d column, d right/d row], [d up/d column, d up/d row]] at the centre, by
        averaged cell [m].
    """

    columns: NDArray[np.float32]
    rows: NDArray[np.float32]
    longitude: NDArray[np.float64]
    latitude: NDArray[np.float64]
    metres_per_pixel: float
    up: float
    coarsening: tuple[int, int]
    jacobian: NDArray[np.float64]

    @property
    def shape(self) -> tuple[int, int]:
        """Height and width [pixels]."""
        height, width = self.columns.shape
        return height, width

    @property
    def ground(self) -> NDArray[np.bool_]:
        """True where the raster lies under the pixel, void or not."""
        return np.isfinite(self.columns)

    def average(self, values: NDArray[np.floating]) -> NDArray[np.float32]:
        """Mean of the valid cells in blocks of `coarsening`; void if most of a block is void."""
        down, across = self.coarsening
        if self.coarsening == (1, 1):
            return np.asarray(values, np.float32)
        valid = np.isfinite(values)
        starts = np.arange(0, values.shape[0], down), np.arange(0, values.shape[1], across)

        def total(cells):
            rows = np.add.reduceat(cells, starts[0], axis=0, dtype=np.float32)
            return np.add.reduceat(rows, starts[1], axis=1)

        count = total(valid)
        mean = total(np.where(valid, values, np.float32(0.0))) / np.maximum(count, 1.0)
        size = np.multiply.outer(
            *(np.diff([*start, end]) for start, end in zip(starts, values.shape, strict=True))
        )
        return np.where(2.0 * count > size, mean, np.nan).astype(np.float32)

    def smooth(self, averaged: NDArray[np.float32]) -> NDArray[np.float32]:
        """Values at the pixels, NaN off the raster: bilinear, beside voids the nearest cell."""
        row, column = self._places()
        values = self._bilinear(averaged, 0.0)
        rest = ~np.isfinite(values)
        values[rest] = _nearest(averaged, row[rest], column[rest])
        values[~self.ground] = np.nan
        return values

    def surface(self, averaged: NDArray[np.float32]) -> NDArray[np.float32]:
        """Values without a bend: bilinear, straight on to the rim; NaN beside voids."""
        return np.where(self.ground, self._bilinear(averaged, 0.5), np.float32(np.nan))

    def _bilinear(self, averaged: NDArray[np.float32], beyond: float) -> NDArray[np.float32]:
        """Between four cells; `beyond` the centres of the outer ones, so many cells straight on."""
        row, column = self._places()
        last = averaged.shape[0] - 1, averaged.shape[1] - 1
        y, x = (
            np.clip(place - 0.5, -beyond, end + beyond)
            for place, end in zip((row, column), last, strict=True)
        )
        i, j = (
            np.clip(place.astype(np.intp), 0, max(end - 1, 0))
            for place, end in zip((y, x), last, strict=True)
        )
        first = i * averaged.shape[1] + j
        right, below = min(last[1], 1), averaged.shape[1] if last[0] else 0
        flat = np.ascontiguousarray(averaged).ravel()
        u, v = y - i, x - j
        upper = flat.take(first) * (1 - v) + flat.take(first + right) * v
        first += below
        lower = flat.take(first) * (1 - v) + flat.take(first + right) * v
        return (upper * (1 - u) + lower * u).astype(np.float32)

    def cells(self, averaged: NDArray[np.float32]) -> NDArray[np.float32]:
        """As `smooth`; but where a cell covers many pixels, each shows the cell it lies in."""
        cell = math.sqrt(abs(np.linalg.det(self.jacobian)))
        if cell <= NEAREST_FROM * self.metres_per_pixel:
            return self.smooth(averaged)
        return np.where(self.ground, _nearest(averaged, *self._places()), np.float32(np.nan))

    def _places(self) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Row and column of the pixels in the averaged raster; 0 off the raster."""
        down, across = (np.asarray(size, np.float32) for size in self.coarsening)
        return np.nan_to_num(self.rows) / down, np.nan_to_num(self.columns) / across


def _nearest(averaged, row, column):
    """The cell that a place lies in."""
    return averaged[
        np.minimum(row.astype(np.intp), averaged.shape[0] - 1),
        np.minimum(column.astype(np.intp), averaged.shape[1] - 1),
    ]


def make_picture(elevation: Elevation, frame: Frame, box: tuple[int, int]) -> Picture:
    """Lay a window over a raster.

    Parameters
    ----------
    elevation : Elevation
    frame : Frame
        The frame of that elevation model.
    box : tuple of int
        Largest width and height [pixels].

    Returns
    -------
    Picture

    Examples
    --------
    A grid of web-map metres at 60 degrees north: its 100 m cells measure 50 m.

    >>> from terrasol.ground.frame import make_frame
    >>> hill = np.zeros((300, 400), np.float32)
    >>> hill = Elevation.from_array(hill, (100, 0, 1e6, 0, -100, 8399737.9), "EPSG:3857")
    >>> picture = make_picture(hill, make_frame(hill.shape, hill.transform, hill.crs), (800, 800))
    >>> round(picture.metres_per_pixel)
    25
    """
    centre = ((elevation.shape[0] - 1) / 2, (elevation.shape[1] - 1) / 2)
    jacobian = frame.jacobian_at(*centre)
    up = _up_azimuth(jacobian)
    plane = _Plane(elevation, frame.centre, up)
    left, right, bottom, top = plane.outline()
    metres = max((right - left) / box[0], (top - bottom) / box[1])
    width = min(max(round((right - left) / metres), NARROWEST), box[0])
    height = min(max(round((top - bottom) / metres), NARROWEST), box[1])

    def nodes(low, high, size):
        return (low + high) / 2 + metres * size * np.linspace(-0.5, 0.5, LATTICE_NODES)

    x, y = np.meshgrid(nodes(left, right, width), -nodes(-top, -bottom, height))
    longitude, latitude = plane.geodetic(x, y)
    columns, rows = (_spread(grid, (height, width)) for grid in plane.cells(longitude, latitude))
    with np.errstate(invalid="ignore"):
        off = ~((rows >= 0) & (rows <= elevation.shape[0]))
        off |= ~((columns >= 0) & (columns <= elevation.shape[1]))
    columns[off] = rows[off] = np.nan
    across, down = (max(1, round(metres / size)) for size in frame.cell_size)
    return Picture(
        columns=columns,
        rows=rows,
        longitude=longitude,
        latitude=latitude,
        metres_per_pixel=metres,
        up=up,
        coarsening=(down, across),
        jacobian=_turn(up) @ jacobian * np.array([across, down]),
    )


class _Plane:
    """Between the picture's plane, geodetic degrees and cells of the raster."""

    def __init__(self, elevation: Elevation, centre: tuple[float, float], up: float):
        crs, self.shape = elevation.crs, elevation.shape
        self.geod = crs.get_geod() or Geod(ellps="WGS84")
        self.latitude, self.longitude = centre
        self.turn = _turn(up)
        # The ellipsoid alone: no shift of datum, degrees, and Greenwich.
        degrees = CRS.from_dict({"proj": "longlat", "a": self.geod.a, "b": self.geod.b})
        self.forward = Transformer.from_crs(degrees, crs, always_xy=True)
        self.inverse = Transformer.from_crs(crs, degrees, always_xy=True)
        a, b, self.x0, d, e, self.y0 = elevation.transform
        self.affine = np.array([[a, b], [d, e]])
        # A geographic raster may count its longitudes from 0 to 360, or beyond 180.
        self.full_turn = 0.0
        if crs.is_geographic:
            self.full_turn = 2 * math.pi / crs.axis_info[0].unit_conversion_factor
            self.middle = a * self.shape[1] / 2 + b * self.shape[0] / 2 + self.x0

    def outline(self) -> tuple[float, float, float, float]:
        """Left, right, bottom and top of the raster [m]."""
        # The inside counts too: of a continent it may reach farther out than the rim.
        t = np.linspace(0.0, 1.0, 65)
        columns, rows = np.meshgrid(t * self.shape[1], t * self.shape[0])
        cells = np.stack([columns.ravel(), rows.ravel()])
        x, y = self.affine @ cells + np.array([[self.x0], [self.y0]])
        longitude, latitude = self.inverse.transform(x, y)
        good = np.isfinite(longitude) & np.isfinite(latitude)
        longitude, latitude = longitude[good], latitude[good]
        start = np.full(longitude.shape, self.longitude), np.full(longitude.shape, self.latitude)
        azimuth, _, distance = self.geod.inv(*start, longitude, latitude)
        azimuth = np.radians(azimuth)
        right, up = self.turn @ (distance * np.stack([np.sin(azimuth), np.cos(azimuth)]))
        return float(right.min()), float(right.max()), float(up.min()), float(up.max())

    def geodetic(self, x, y):
        """Longitude and latitude [degrees] of plane positions [m]; NaN past the antipode."""
        east, north = np.tensordot(self.turn.T, np.stack([x, y]), axes=1)
        distance = np.hypot(east, north)
        azimuth = np.degrees(np.arctan2(east, north))
        start = np.full(x.shape, self.longitude), np.full(x.shape, self.latitude)
        longitude, latitude, _ = self.geod.fwd(*start, azimuth, distance)
        longitude = self.longitude + (longitude - self.longitude + 180.0) % 360.0 - 180.0
        beyond = distance > math.pi * self.geod.b
        return np.where(beyond, np.nan, longitude), np.where(beyond, np.nan, latitude)

    def cells(self, longitude, latitude):
        """Columns and rows [cells] of geodetic positions; NaN where the CRS has no place."""
        x, y = (np.asarray(value) for value in self.forward.transform(longitude, latitude))
        x, y = (np.where(np.isfinite(value), value, np.nan) for value in (x, y))
        if self.full_turn:
            x = x + self.full_turn * np.round((self.middle - x) / self.full_turn)
        return np.tensordot(
            np.linalg.inv(self.affine), np.stack([x - self.x0, y - self.y0]), axes=1
        )


def _turn(up: float) -> NDArray[np.float64]:
    """Rotation from (east, north) to (right, up) of a picture whose up has this azimuth."""
    c, s = math.cos(math.radians(up)), math.sin(math.radians(up))
    return np.array([[c, -s], [s, c]])


def _up_azimuth(jacobian: NDArray[np.float64]) -> float:
    """Azimuth of the raster axis, of its four, that runs nearest to true north [degrees]."""
    axes = np.concatenate([jacobian, -jacobian], axis=1)
    azimuths = np.degrees(np.arctan2(axes[0], axes[1]))
    # A row axis wins over a column axis where both are 45 degrees away.
    order = [3, 1, 2, 0]
    return float(min((azimuths[k] for k in order), key=lambda azimuth: round(abs(azimuth), 6)))


def _spread(lattice: NDArray[np.float64], shape: tuple[int, int]) -> NDArray[np.float32]:
    """Interpolate a corner-to-corner lattice to pixel centres."""

    def weights(size, nodes):
        position = (np.arange(size) + 0.5) / size * (nodes - 1)
        index = np.minimum(position.astype(np.intp), nodes - 2)
        return index, position - index

    i, u = weights(shape[0], lattice.shape[0])
    j, v = weights(shape[1], lattice.shape[1])
    down = lattice[i] * (1 - u)[:, None] + lattice[i + 1] * u[:, None]
    return (down[:, j] * (1 - v) + down[:, j + 1] * v).astype(np.float32)
