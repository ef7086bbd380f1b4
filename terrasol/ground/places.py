"""Where the places of one grid or plane lie in the grid of an elevation model."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray
from pyproj import CRS, Transformer
from scipy.ndimage import map_coordinates

from terrasol.ground.elevation import Elevation

Points = tuple[NDArray[np.float64], NDArray[np.float64]]

WGS84: Final = CRS.from_epsg(4326)


def coordinates(elevation: Elevation, row: NDArray | float, column: NDArray | float) -> Points:
    """The CRS's x and y at places of a grid; cell centres lie at whole numbers."""
    a, b, c, d, e, f = elevation.transform
    u, v = np.asarray(column) + 0.5, np.asarray(row) + 0.5
    return a * u + b * v + c, d * u + e * v + f


def edge(elevation: Elevation, margin: float = 0.5, count: int = 64) -> Points:
    """Rows and columns along a closed line `margin` cells beyond the outer cell centres."""
    rows, columns = elevation.shape
    part = np.linspace(0.0, 1.0, count, endpoint=False)
    low, down, across = -margin, rows - 1 + 2 * margin, columns - 1 + 2 * margin
    row = np.concatenate([0 * part, part, 0 * part + 1, 1 - part])
    column = np.concatenate([part, 0 * part + 1, 1 - part, 0 * part])
    return low + down * row, low + across * column


class Locator:
    """From a CRS's coordinates to the rows and columns of an elevation model.

    Where longitudes are counted, the turn is chosen that lies nearest the model's middle.
    Places outside the domain of the model's CRS are NaN.
    """

    def __init__(self, source: CRS, elevation: Elevation) -> None:
        self._transformer = Transformer.from_crs(source, elevation.crs, always_xy=True)
        self._transform = elevation.transform
        self._turn = _full_turn(elevation.crs)
        rows, columns = elevation.shape
        self._middle = float(coordinates(elevation, (rows - 1) / 2, (columns - 1) / 2)[0])

    def __call__(self, x: NDArray, y: NDArray) -> Points:
        """Rows and columns of some places."""
        x, y = (np.asarray(v, float) for v in self._transformer.transform(x, y))
        if self._turn:
            x = x - self._turn * np.round((x - self._middle) / self._turn)
        a, b, c, d, e, f = self._transform
        with np.errstate(invalid="ignore"):
            column = (e * (x - c) - b * (y - f)) / (a * e - b * d) - 0.5
            row = (a * (y - f) - d * (x - c)) / (a * e - b * d) - 0.5
        bad = ~(np.isfinite(row) & np.isfinite(column))
        return np.where(bad, np.nan, row), np.where(bad, np.nan, column)


def _full_turn(crs: CRS) -> float | None:
    """360 degrees in the unit of a geographic CRS; None for a projected one."""
    return 2.0 * np.pi / crs.axis_info[0].unit_conversion_factor if crs.is_geographic else None


def opened_opposite(elevation: Elevation, longitude: float) -> Elevation:
    """Return a model that goes round the Earth cut open opposite a longitude [degrees].

    Other models are returned as they are.
    """
    turn = _full_turn(elevation.crs)
    a, b, c, d, e, f = elevation.transform
    columns = elevation.shape[1]
    if turn is None or b != 0.0 or d != 0.0 or abs(a) * columns < turn * (1.0 - 1e-6):
        return elevation
    shift = round((longitude * turn / 360.0 - c) / a - columns / 2)
    heights = np.ascontiguousarray(np.roll(elevation.heights, -shift, axis=1))
    return replace(elevation, heights=heights, transform=(a, b, c + a * shift, d, e, f))


@dataclass(frozen=True)
class PlaceMap:
    """Two numbers at the nodes of a regular lattice, linear between.

    Parameters
    ----------
    first, step : tuple of float
        First node and spacing along the two axes.
    values : ndarray of float64, shape (2, m, n)
        NaN where there is no such place.
    """

    first: tuple[float, float]
    step: tuple[float, float]
    values: NDArray[np.float64]

    @classmethod
    def of(
        cls,
        function: Callable[[NDArray, NDArray], Points],
        ends: tuple[tuple[float, float], tuple[float, float]],
        spacing: float,
        square: bool = False,
    ) -> PlaceMap:
        """Tabulate a function of two numbers between their ends, at most `spacing` apart.

        With `square` exactly `spacing` apart, and reaching as far beyond the second ends.
        """
        counts = [max(int(np.ceil((high - low) / spacing - 1e-9)), 1) + 1 for low, high in ends]
        steps = [
            spacing if square else (high - low) / (count - 1)
            for (low, high), count in zip(ends, counts, strict=True)
        ]
        axes = [
            low + step * np.arange(count)
            for (low, _), step, count in zip(ends, steps, counts, strict=True)
        ]
        values = np.stack(function(*np.meshgrid(*axes, indexing="ij")))
        return cls((ends[0][0], ends[1][0]), (steps[0], steps[1]), _without_seam(values))

    def __call__(self, u: NDArray, v: NDArray) -> Points:
        """The two numbers at some places inside the lattice."""
        at = [
            (np.asarray(w) - first) / step
            for w, first, step in zip((u, v), self.first, self.step, strict=True)
        ]
        one, other = (map_coordinates(f, at, order=1, mode="nearest") for f in self.values)
        return one, other


def _without_seam(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Take out nodes beside a jump of longitude, where nothing between them would be true."""
    for axis in (1, 2):
        step = np.abs(np.diff(values, axis=axis)).max(axis=0)
        usual = np.nanmedian(step) if np.isfinite(step).any() else np.nan
        jump = step > 100.0 * usual + 1.0
        lower = np.pad(jump, [(0, int(a == axis)) for a in (1, 2)])
        upper = np.pad(jump, [(int(a == axis), 0) for a in (1, 2)])
        values[:, lower | upper] = np.nan
    return values


def heights_at(elevation: Elevation, row: NDArray, column: NDArray) -> NDArray[np.float32]:
    """Bilinear heights at rows and columns of a model [m]; NaN outside it or beside a void."""
    rows, columns = elevation.shape
    with np.errstate(invalid="ignore"):
        inside = (np.abs(row - (rows - 1) / 2) <= rows / 2) & (
            np.abs(column - (columns - 1) / 2) <= columns / 2
        )
    at = [np.where(inside, row, 0.0), np.where(inside, column, 0.0)]
    found = map_coordinates(elevation.heights, at, order=1, mode="nearest")
    return np.where(inside, found, np.float32(np.nan)).astype(np.float32)
