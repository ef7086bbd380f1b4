"""Plots on a raster: where they lie, and which have no ground."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from pyproj import Transformer

from terrasol.errors import InputError
from terrasol.files.points import Points, listed
from terrasol.ground.elevation import Elevation
from terrasol.ground.places import WGS84, Locator

Array = NDArray[np.float64]

PLACED, OUTSIDE, VOID, UNPLACED = "ok", "outside", "void", "no place"
"""What the column `flag` says."""


@dataclass(frozen=True)
class Located:
    """Plots on the raster.

    Parameters
    ----------
    row, column : ndarray, shape (plots,)
        Cell centres at whole numbers; NaN without a place.
    longitude, latitude : ndarray, shape (plots,)
        WGS 84 [degrees].
    flag : ndarray of str, shape (plots,)
        "ok", "outside", "void" or "no place".
    warnings : tuple of str
        Which plots are not "ok", and which share a cell.
    """

    row: Array
    column: Array
    longitude: Array
    latitude: Array
    flag: NDArray[np.str_]
    warnings: tuple[str, ...] = ()


def locate(points: Points, elevation: Elevation) -> Located:
    """Find plots on a raster.

    Raises
    ------
    InputError
        None of them lies on known ground: the message says whether longitude and latitude are
        swapped.
    """
    find = Locator(points.crs, elevation)
    row, column = find(points.x, points.y)
    inside = _on(row, column, elevation.shape)
    placed = np.isfinite(points.x)
    swapped = ~inside & placed & _on(*find(points.y, points.x), elevation.shape)
    if not inside.any():
        _refuse_all(points, bool(swapped[placed].all()))
    known = np.zeros(len(points), bool)
    at = tuple(np.floor(v[inside] + 0.5).astype(int) for v in (row, column))
    known[inside] = np.isfinite(elevation.heights[at])
    if not known.any():
        raise InputError(
            "every plot lies on void cells of the raster: fill voids, or check the CRSs"
        )
    flag = np.where(known, PLACED, np.where(inside, VOID, np.where(placed, OUTSIDE, UNPLACED)))
    to_degrees = Transformer.from_crs(points.crs, WGS84, always_xy=True)
    longitude, latitude = to_degrees.transform(points.x, points.y)
    finite = np.isfinite(longitude) & np.isfinite(latitude)
    return Located(
        row, column, np.where(finite, longitude, np.nan), np.where(finite, latitude, np.nan), flag,
        (*_absent(points, flag, swapped), *_shared(points, row, column, flag == PLACED)),
    )  # fmt: skip


def _on(row: Array, column: Array, shape: tuple[int, int]) -> NDArray[np.bool_]:
    """Whether places lie on a grid."""
    with np.errstate(invalid="ignore"):
        rows = (row >= -0.5) & (row < shape[0] - 0.5)
        return rows & (column >= -0.5) & (column < shape[1] - 0.5)


def _refuse_all(points: Points, swapped: bool) -> None:
    """Raise InputError for plots that all lie outside."""
    if swapped:
        raise InputError(
            "all plots lie outside the raster, and inside it with x and y (longitude and latitude)"
            " swapped: name the columns with --x and --y"
        )
    first = int(np.flatnonzero(np.isfinite(points.x))[0])
    raise InputError(
        f"all plots lie outside the raster (the first, '{points.names[first]}', at"
        f" {points.x[first]:.8g}, {points.y[first]:.8g} in '{points.crs.name}'): check that both"
        " are of the same place, and the CRS of the plots"
    )


def _absent(points: Points, flag: NDArray[np.str_], swapped: NDArray[np.bool_]) -> list[str]:
    """Warnings on plots without a value."""
    said = []
    outside = flag == OUTSIDE
    if (outside & ~swapped).any():
        said.append(f"{listed(points.names, outside & ~swapped)}: outside the raster, left void")
    if swapped.any():
        said.append(
            f"{listed(points.names, swapped)}: outside the raster, and inside it with x and y"
            " (longitude and latitude) swapped: left void"
        )
    if (flag == VOID).any():
        said.append(f"{listed(points.names, flag == VOID)}: on a void of the raster, left void")
    return said


def _shared(points: Points, row: Array, column: Array, there: NDArray[np.bool_]) -> list[str]:
    """A warning on plots that lie in one cell."""
    cells = pd.Series(list(zip(np.floor(row + 0.5), np.floor(column + 0.5), strict=True)))
    again = cells.duplicated(keep=False).to_numpy() & there
    if not again.any():
        return []
    return [
        f"{listed(points.names, again)}: in one cell with another plot, so what the cell says does"
        " not tell them apart"
    ]
