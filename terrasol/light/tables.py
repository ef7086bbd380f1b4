"""Sun tables over a raster's latitudes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from terrasol.kernels.beam import LANES
from terrasol.light.latitudes import LatitudeTables
from terrasol.light.settings import LightSettings
from terrasol.sky.suntable import HORIZON_KNOTS, SunTable, sun_table


def table_bytes(settings: LightSettings, heights: int) -> float:
    """Size of the sun table of one latitude with that many height knots [bytes]."""
    months = len(settings.period.months)
    groups = -(-(2 * months if settings.monthly_parts else months + 1) // LANES)
    return 4.0 * groups * heights * settings.azimuths * HORIZON_KNOTS * 2 * LANES


@dataclass(frozen=True)
class Knot:
    """A sun table of a latitude knot [degrees], and its `SunTable.dark`."""

    latitude: float
    table: SunTable
    dark: NDArray[np.int64]


@dataclass(frozen=True)
class Mixed:
    """A sun table for one latitude.

    Parameters
    ----------
    table : SunTable
        Mixed between two latitude knots.
    dark : ndarray of int64, shape (azimuths,)
        See `SunTable.dark`.
    latitude : float
        Whose table it is [degrees].
    northward : ndarray of float32, shape (groups, lanes)
        See `SunTable.northward`.
    even_change : ndarray of float32, shape (2, months, heights)
        Change of `SunTable.even` a radian north.
    """

    table: SunTable
    dark: NDArray[np.int64]
    latitude: float
    northward: NDArray[np.float32]
    even_change: NDArray[np.float32]


class SkyTables(LatitudeTables[Knot, Mixed]):
    """Sun tables at the latitude and height knots that a raster needs."""

    settings: LightSettings

    def fill(self, index: int) -> None:
        """Compute the table of one latitude knot."""
        s = self.settings
        table = sun_table(
            self.path,
            float(self.latitudes[index]),
            self.heights,
            s.sky or s.air,
            s.diffuse,
            s.azimuths,
            s.monthly_parts,
        )
        self.tables[index] = Knot(float(self.latitudes[index]), table, table.dark())

    def between(self, south: int, latitude: float) -> tuple[Mixed, int]:
        """Mix the tables of two knots."""
        below, above = self.tables[south], self.tables[south + 1]
        gap = above.latitude - below.latitude
        table = below.table.mixed(above.table, (latitude - below.latitude) / gap)
        mixed = Mixed(
            table,
            np.maximum(below.dark, above.dark),
            latitude,
            table.northward(below.table, above.table, gap).astype(np.float32),
            (above.table.even - below.table.even) / np.float32(np.radians(gap)),
        )
        return mixed, table.direct.nbytes

    def level(self, latitude: float, height: float) -> float:
        """Global irradiation of open level ground [MJ m-2]."""
        return float(self.level_months(latitude, height).sum())

    def level_months(self, latitude: float, height: float) -> NDArray[np.float64]:
        """The same by month of the period."""
        by_month = self.exactly(latitude).table.level.T
        return np.array([np.interp(height, self.heights, month) for month in by_month])
