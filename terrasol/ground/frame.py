"""Where a raster lies on the Earth, and which way true north runs through it.

One mechanism for every CRS and every affine transform: the 2 x 2 Jacobian of true east
and north, in metres, by column and row. It is taken from geodesic positions on a coarse
lattice and interpolated between.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from pyproj import CRS, Geod, Transformer
from pyproj.exceptions import ProjError

from terrasol.errors import InputError
from terrasol.ground.elevation import Affine6

LATTICE_CELLS = 64
"""Spacing of the lattice, cells, on rasters up to 4096 cells a side. Between its nodes the
Jacobian is linear; over 64 cells of 90 m its departure from linear is below 1e-6 at any
latitude under 80 degrees."""

POLE_MARGIN = 0.1
"""Degrees of latitude from a pole within which a raster may not reach: there true north turns
by whole degrees over a few cells, and what lies between it and the pole does not matter to
people (judgement, no source)."""

EARTH_RADII = (6.3e6, 6.45e6)
"""Semi-major axes of ellipsoids of the Earth, m: those in use lie between 6370 and 6379 km."""

LATTICE_NODES = 65
"""Most nodes along a side: larger rasters get a wider lattice, which is still far denser than
the Jacobian needs."""


@dataclass(frozen=True)
class Frame:
    """The raster's grid against true east and north.

    Parameters
    ----------
    rows, columns : ndarray of float64, shapes (m,) and (n,)
        Lattice node positions in cells; cell centres lie at whole numbers.
    jacobian : ndarray of float64, shape (m, n, 2, 2)
        [[d east/d column, d east/d row], [d north/d column, d north/d row]] [m].
    latitude, longitude : ndarray of float64, shape (m, n)
        Geodetic position of the nodes [degrees].
    shape : tuple of int
        Rows and columns of the raster.
    """

    rows: NDArray[np.float64]
    columns: NDArray[np.float64]
    jacobian: NDArray[np.float64]
    latitude: NDArray[np.float64]
    longitude: NDArray[np.float64]
    shape: tuple[int, int]

    def jacobian_at(self, row: float, column: float) -> NDArray[np.float64]:
        """Jacobian at one place of the raster, shape (2, 2) [m]."""
        return _bilinear(self.rows, self.columns, self.jacobian, row, column)

    def latitude_at(self, row: float, column: float) -> float:
        """Geodetic latitude at one place of the raster [degrees]."""
        return float(_bilinear(self.rows, self.columns, self.latitude, row, column))

    @property
    def centre(self) -> tuple[float, float]:
        """Latitude and longitude of the raster's centre [degrees]."""
        row, column = (self.shape[0] - 1) / 2, (self.shape[1] - 1) / 2
        turn = np.exp(1j * np.radians(self.longitude))
        longitude = np.degrees(np.angle(_bilinear(self.rows, self.columns, turn, row, column)))
        return self.latitude_at(row, column), float(longitude)

    @property
    def cell_size(self) -> tuple[float, float]:
        """True length of one column step and one row step at the centre [m]."""
        jac = self.jacobian_at((self.shape[0] - 1) / 2, (self.shape[1] - 1) / 2)
        return float(np.hypot(*jac[:, 0])), float(np.hypot(*jac[:, 1]))

    @property
    def convergence(self) -> NDArray[np.float64]:
        """Turn of the raster's up direction from true north at the nodes, clockwise [degrees]."""
        east, north = -self.jacobian[..., 0, 1], -self.jacobian[..., 1, 1]
        return np.degrees(np.arctan2(east, north))

    def index_direction(self, row: float, column: float, azimuth: float) -> NDArray[np.float64]:
        """Column and row steps that run one metre towards a true azimuth.

        Parameters
        ----------
        row, column : float
            Place in the raster [cells].
        azimuth : float
            Clockwise from true north [degrees].

        Returns
        -------
        ndarray, shape (2,)
            J^-1 (sin A, cos A): columns and rows a metre.
        """
        ray = np.array([np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))])
        return np.linalg.solve(self.jacobian_at(row, column), ray)


def _bilinear(rows, columns, field, row, column):
    """Interpolate a lattice field at one place, linear beyond its rim."""
    i = int(np.clip(np.searchsorted(rows, row) - 1, 0, rows.size - 2))
    j = int(np.clip(np.searchsorted(columns, column) - 1, 0, columns.size - 2))
    u = (row - rows[i]) / (rows[i + 1] - rows[i])
    v = (column - columns[j]) / (columns[j + 1] - columns[j])
    above = (1 - v) * field[i, j] + v * field[i, j + 1]
    below = (1 - v) * field[i + 1, j] + v * field[i + 1, j + 1]
    return (1 - u) * above + u * below


def _nodes(size: int) -> NDArray[np.float64]:
    """Lattice positions along one side, both ends included."""
    count = min(max(2, -(-(size - 1) // LATTICE_CELLS) + 1), LATTICE_NODES)
    return np.linspace(0.0, size - 1.0, count)


def make_frame(shape: tuple[int, int], transform: Affine6, crs: CRS) -> Frame:
    """Find true east and north over a raster.

    Parameters
    ----------
    shape : tuple of int
        Rows and columns.
    transform : tuple of six floats
        See `terrasol.ground.elevation.Elevation`.
    crs : pyproj.CRS
        Projected or geographic.

    Returns
    -------
    Frame

    Raises
    ------
    InputError
        The CRS is not of the Earth, or the raster reaches outside its domain or to a pole.

    Notes
    -----
    East and north are geodesic: the distance and azimuth of Karney (2013,
    doi:10.1007/s00190-012-0578-z) from half a cell before to half a cell behind each node,
    on the ellipsoid of the CRS, through pyproj.

    Examples
    --------
    >>> from pyproj import CRS
    >>> frame = make_frame((100, 100), (0.001, 0, 9.0, 0, -0.001, 60.05), CRS("EPSG:4326"))
    >>> [round(size, 1) for size in frame.cell_size]
    [55.8, 111.4]
    """
    rows, columns = _nodes(shape[0]), _nodes(shape[1])
    column_grid, row_grid = np.meshgrid(columns + 0.5, rows + 0.5)
    geodetic = crs.geodetic_crs
    if geodetic is None:
        raise InputError(f"the CRS '{crs.name}' has no datum: assign the raster's real CRS")
    if geodetic.is_derived and geodetic.source_crs:  # a rotated pole is not the Earth's
        geodetic = geodetic.source_crs
    _demand_earth(crs, geodetic)
    to_degrees = _to_degrees(crs, geodetic)
    _refuse_pole(shape, transform, crs, to_degrees)
    geod = geodetic.get_geod() or Geod(ellps="WGS84")

    def position(column, row):
        a, b, c, d, e, f = transform
        try:
            place = to_degrees.transform(
                a * column + b * row + c, d * column + e * row + f, errcheck=True
            )
        except ProjError as error:
            raise InputError(_outside(crs)) from error
        if not np.all(np.isfinite(place)) or np.any(np.abs(place[1]) > 90.0):
            raise InputError(_outside(crs))
        return place

    longitude, latitude = position(column_grid, row_grid)
    jacobian = np.empty((*latitude.shape, 2, 2))
    for axis, (dc, dr) in enumerate([(0.5, 0.0), (0.0, 0.5)]):
        before, behind = (
            position(column_grid - dc, row_grid - dr),
            position(column_grid + dc, row_grid + dr),
        )
        if max(np.abs(before[1]).max(), np.abs(behind[1]).max()) > 90.0 - POLE_MARGIN:
            raise InputError(POLE)
        jacobian[..., axis] = _true_step(geod, before, behind)
    if np.any(np.abs(np.linalg.det(jacobian)) < 1e-9):
        raise InputError("the raster's cells have no area on the ground: check its transform")
    return Frame(rows, columns, jacobian, latitude, longitude, shape)


POLE = "the raster reaches a pole, where north has no direction: cut it off"


def _demand_earth(crs: CRS, geodetic: CRS) -> None:
    """Raise InputError for a CRS of another planet or of the moon."""
    ellipsoid = geodetic.ellipsoid
    radius = ellipsoid.semi_major_metre if ellipsoid else EARTH_RADII[0]
    if not EARTH_RADII[0] <= radius <= EARTH_RADII[1]:
        raise InputError(
            f"the CRS '{crs.name}' is of a body with a radius of {radius / 1000.0:.0f} km, which is"
            " not the Earth: assign the raster's real CRS"
        )


def _to_degrees(crs: CRS, geodetic: CRS) -> Transformer:
    """From the CRS to longitude and latitude on its own datum."""
    try:
        return Transformer.from_crs(crs, _plain_geographic(geodetic), always_xy=True)
    except ProjError as error:
        raise InputError(
            f"the CRS '{crs.name}' cannot be turned into latitude and longitude: assign the"
            " raster's real CRS"
        ) from error


def _refuse_pole(
    shape: tuple[int, int], transform: Affine6, crs: CRS, to_degrees: Transformer
) -> None:
    """Raise InputError if a pole lies on the raster, whose lattice might step over it.

    In a geographic CRS that is a whole edge, which a raster may pass by half a cell when
    its first cells are centred on the pole.
    """
    a, b, c, d, e, f = transform
    if crs.is_geographic and not crs.is_derived:
        degrees = np.degrees(crs.axis_info[0].unit_conversion_factor)
        corners = f + np.add.outer([0.0, e * shape[0]], [0.0, d * shape[1]])
        farthest = degrees * np.abs(corners).max()
        on_it = 90.0 - POLE_MARGIN < farthest <= 90.0 + degrees * max(abs(d), abs(e))
    else:
        x, y = to_degrees.transform([0.0, 0.0], [90.0, -90.0], direction="INVERSE")
        x, y = np.subtract(x, c), np.subtract(y, f)
        with np.errstate(invalid="ignore"):
            column, row = (e * x - b * y) / (a * e - b * d), (a * y - d * x) / (a * e - b * d)
        inside = (column >= 0) & (column <= shape[1]) & (row >= 0) & (row <= shape[0])
        on_it = bool(inside.any())
    if on_it:
        raise InputError(POLE)


def _outside(crs: CRS) -> str:
    return (
        f"the raster reaches outside the domain of its CRS '{crs.name}':"
        " check its CRS and transform"
    )


def _plain_geographic(geodetic: CRS) -> CRS:
    """The two-dimensional geographic CRS in degrees on the same datum."""
    plain = geodetic.to_2d()
    if plain.axis_info and plain.axis_info[0].unit_name not in ("degree", "degrees"):
        return CRS.from_dict({"proj": "longlat", "ellps": "WGS84"})
    return plain


def _true_step(geod: Geod, before, behind) -> NDArray[np.float64]:
    """East and north [m] of the geodesic from one set of places to another."""
    ahead, back, length = geod.inv(before[0], before[1], behind[0], behind[1])
    # The azimuth half-way: the mean of the direction at both ends.
    turn = np.angle(np.exp(1j * np.radians(ahead)) + np.exp(1j * np.radians(back + 180.0)))
    return np.stack([length * np.sin(turn), length * np.cos(turn)], axis=-1)
