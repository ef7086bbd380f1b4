"""Irradiation of real ground: sun tables met with horizons and normals."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.ground.horizon import azimuth_directions
from terrasol.kernels.beam import LANES, look_up
from terrasol.kernels.energy import parts_of_light
from terrasol.kernels.skyview import sky_view
from terrasol.light.settings import UNITS
from terrasol.light.surroundings import Surroundings
from terrasol.light.tables import Mixed, SkyTables

BAND_TOP: Final = float(np.tan(np.radians(6.5)))
"""Tangent of the height at which the horizon band counts as wholly hidden: 6.5 degrees, the
width of the band in Perez et al. (1987), doi:10.1016/S0038-092X(87)80031-2."""


@dataclass(frozen=True)
class Strip:
    """Some rows of ground as light sees them.

    Parameters
    ----------
    horizon : ndarray of float32, shape (azimuths, rows, columns)
        Tangent of the terrain's horizon, not below 0.
    normal : ndarray of float32, shape (3, rows, columns)
        Towards true east, north and up.
    heights : ndarray of float32, shape (rows, columns)
        Less `datum` [m].
    datum : float
        Metres above the sea.
    latitude : tuple of float
        At the first cell, and its change a row and a column [degrees].
    middle : float
        Latitude whose sun table serves [degrees].
    """

    horizon: NDArray[np.float32]
    normal: NDArray[np.float32]
    heights: NDArray[np.float32]
    datum: float
    latitude: tuple[float, float, float]
    middle: float

    def tilt(self, mixed: Mixed) -> NDArray[np.float64]:
        """Latitude less that of a table, at the first cell and a row and a column [radians]."""
        return np.radians(np.array(self.latitude) - (mixed.latitude, 0.0, 0.0))

    def thin(self, first: int, stride: int, stop: int | None = None) -> Strip:
        """Every `stride`-th column, from the first wanted on."""
        columns = np.s_[..., first:stop:stride]
        latitude, by_row, by_column = self.latitude
        return Strip(
            np.ascontiguousarray(self.horizon[columns]),
            np.ascontiguousarray(self.normal[columns]),
            np.ascontiguousarray(self.heights[columns]),
            self.datum,
            (latitude + first * by_column, by_row, stride * by_column),
            self.middle,
        )

    def part(self, rows: slice, middle: float) -> Strip:
        """Some of the rows, with the sun table of another latitude."""
        latitude, by_row, by_column = self.latitude
        return Strip(
            np.ascontiguousarray(self.horizon[:, rows]),
            np.ascontiguousarray(self.normal[:, rows]),
            self.heights[rows],
            self.datum,
            (latitude + rows.start * by_row, by_row, by_column),
            middle,
        )

    def sky(self) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Sky-view factor and the open part of the horizon band, shape (rows, columns)."""
        view = np.empty(self.horizon.shape[1:], np.float32)
        band = np.empty_like(view)
        directions = azimuth_directions(self.horizon.shape[0])
        sky_view(self.horizon, self.normal, 0, directions, BAND_TOP, view, band)
        return view, band

    def direct(self, mixed: Mixed) -> NDArray[np.float32]:
        """Sums of direct light, shape (groups, rows * columns, lanes)."""
        table = mixed.table
        sums = np.empty((table.direct.shape[0], self.heights.size, LANES), np.float32)
        directions = azimuth_directions(self.horizon.shape[0])
        for group, direct in enumerate(table.direct):
            look_up(
                self.horizon,
                self.normal,
                self.heights,
                self.datum,
                directions,
                self.tilt(mixed),
                table.heights,
                direct.reshape(-1, 2 * LANES),
                mixed.dark,
                mixed.northward[group],
                sums[group],
            )
        return sums


@dataclass(frozen=True)
class Light:
    """Irradiation of some rows of cells.

    Parameters
    ----------
    year : ndarray of float32, shape (4, rows, columns)
        Global, beam, diffuse and reflected, over the whole period.
    months : ndarray of float32, shape (months, rows, columns)
        Global.
    month_parts : ndarray of float32, shape (3, months or 0, rows, columns)
        Beam, diffuse and reflected.
    """

    year: NDArray[np.float32]
    months: NDArray[np.float32]
    month_parts: NDArray[np.float32]


def strip_light(
    strip: Strip,
    sky: tuple[NDArray[np.float32], NDArray[np.float32]],
    tables: SkyTables,
    surroundings: Surroundings,
    place: tuple[int, int],
) -> Light:
    """Irradiation of a strip of ground.

    Parameters
    ----------
    strip : Strip
        The ground.
    sky : tuple of ndarray
        From `Strip.sky`.
    tables : SkyTables
        Filled.
    surroundings : Surroundings
        For the reflected light.
    place : tuple of int
        The strip's first row and column in the raster.

    Returns
    -------
    Light
        In the settings' unit and on their basis; NaN where void.
    """
    settings = tables.settings
    factor = np.where(np.isnan(sky[0]), np.nan, UNITS[settings.unit]).astype(np.float32)
    if settings.basis == "map":
        factor /= strip.normal[2]
    return _light(strip, sky, tables, surroundings, place, factor)


def sky_light(strip: Strip, tables: SkyTables) -> NDArray[np.float32]:
    """What a strip receives from the sky itself, for `Surroundings.of`.

    Parameters
    ----------
    strip : Strip
        The ground.
    tables : SkyTables
        Filled.

    Returns
    -------
    ndarray of float32, shape (months + 1, rows, columns)
        Irradiation of each month [MJ m-2], and last the terrain view; NaN where void.
    """
    view, band = strip.sky()
    factor = np.where(np.isnan(view), np.nan, 1.0).astype(np.float32)
    dark = Surroundings.none(len(tables.settings.period.months))
    light = _light(strip, (view, band), tables, dark, (0, 0), factor)
    return np.concatenate([light.months, 1.0 - view[None]])


def _light(
    strip: Strip,
    sky: tuple[NDArray[np.float32], NDArray[np.float32]],
    tables: SkyTables,
    surroundings: Surroundings,
    place: tuple[int, int],
    factor: NDArray[np.float32],
) -> Light:
    """Irradiation of a strip, times a factor."""
    settings = tables.settings
    mixed = tables.at(strip.middle)
    count = len(settings.period.months)
    shape = strip.heights.shape
    light = Light(
        np.empty((4, *shape), np.float32),
        np.empty((count, *shape), np.float32),
        np.empty((3, count if settings.monthly_parts else 0, *shape), np.float32),
    )
    parts_of_light(
        strip.direct(mixed), count, strip.heights, strip.datum, mixed.table.heights,
        mixed.table.even, mixed.even_change, strip.tilt(mixed), *sky,
        surroundings.received, surroundings.node(*place), surroundings.stride,
        surroundings.albedo, factor,
        light.year, light.months, light.month_parts,
    )  # fmt: skip
    return light
