"""Irradiation under clouds that are mapped: a clear-sky index for each cell and month.

Global light is linear in the index, its parting into beam and diffuse is not. So there are sun
tables for some even indices, and each cell lies between two of them, month by month.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.errors import InputError
from terrasol.light.irradiation import Light, Strip, sky_light, strip_light
from terrasol.light.settings import LightSettings
from terrasol.light.surroundings import Surroundings
from terrasol.light.tables import SkyTables
from terrasol.sky.cloud import LEAST_INDEX, MOST_INDEX, MonthlySky

INDEX_STEP: Final = 0.1
"""Spacing of the even indices. Halfway between, cells of all slopes are within 0.8 % of the mean
global; half the step changes nothing, since what is left are the jumps between the bins of
Perez et al. (1990), which a sky of one index a month enters all at once."""

MonthMap = NDArray[np.float32]
"""Clear-sky index, shape (1 or 12, rows, columns): for the year, or January to December."""


def even_indices(index: MonthMap) -> NDArray[np.float64]:
    """The even indices around all that a map holds, two at least.

    Raises
    ------
    InputError
        A map that is void throughout, or with values that are no index.
    """
    known = index[np.isfinite(index)]
    if not known.size:
        raise InputError("the map of the clear-sky index is void all over this ground")
    low, high = float(known.min()), float(known.max())
    if not (low >= LEAST_INDEX and high <= MOST_INDEX):
        raise InputError(
            f"the map of the clear-sky index holds values from {low:g} to {high:g}; an index is"
            f" {LEAST_INDEX:g} to {MOST_INDEX:g}"
        )
    first = np.floor(low / INDEX_STEP + 1e-6)
    last = max(np.ceil(high / INDEX_STEP - 1e-6), first + 1)
    return np.clip(INDEX_STEP * np.arange(first, last + 1), LEAST_INDEX, MOST_INDEX)


@dataclass
class MappedTables:
    """Sun tables for some even clear-sky indices, and the map that chooses between them.

    Make one with `MappedTables.over`, and carry out its `tasks`.

    Parameters
    ----------
    settings : LightSettings
        What is asked for.
    index : ndarray
        A `MonthMap` of the whole raster.
    knots : ndarray
        The even indices, rising.
    tables : list of SkyTables
        One a knot.
    """

    settings: LightSettings
    index: MonthMap
    knots: NDArray[np.float64]
    tables: list[SkyTables]

    @classmethod
    def over(
        cls,
        settings: LightSettings,
        index: MonthMap,
        longitude: float,
        latitudes: tuple[float, float],
        heights: tuple[float, float],
    ) -> MappedTables:
        """Choose the knots that a map needs; otherwise as `SkyTables.over`.

        Raises
        ------
        InputError
            A map that is void throughout, or with values that are no index.
        """
        knots = even_indices(index)
        each = [
            SkyTables.over(
                replace(
                    settings,
                    sky=MonthlySky(settings.air, (k,) * 12),
                    monthly_parts=True,
                    index_map=None,
                ),
                longitude,
                latitudes,
                heights,
            )
            for k in knots.tolist()
        ]
        return cls(settings, index, knots, each)

    @property
    def brightest(self) -> SkyTables:
        """Those of the highest index: no cell gets more."""
        return self.tables[-1]

    @property
    def tasks(self) -> list[Callable[[], None]]:
        """Calls that fill all tables, in any order."""
        return [task for tables in self.tables for task in tables.tasks]

    def strip_light(
        self,
        strip: Strip,
        sky: tuple[NDArray[np.float32], NDArray[np.float32]],
        surroundings: Surroundings,
        place: tuple[int, int],
    ) -> Light:
        """See `terrasol.light.irradiation.strip_light`; void where the map is."""
        rows, columns = strip.heights.shape
        where = np.s_[place[0] : place[0] + rows, place[1] : place[1] + columns]
        index = self._months(self.index[:, *where])
        months = np.zeros(index.shape, np.float32)
        parts = np.zeros((3, *index.shape), np.float32)
        for share, tables in self._shares(index):
            light = strip_light(strip, sky, tables, surroundings, place)
            months += share * light.months
            parts += share * light.month_parts
        year = np.concatenate([months.sum(axis=0)[None], parts.sum(axis=1)])
        return Light(year, months, parts if self.settings.monthly_parts else parts[:, :0])

    def sky_light(
        self, strip: Strip, rows: NDArray[np.int64], columns: NDArray[np.int64]
    ) -> NDArray[np.float32]:
        """See `terrasol.light.irradiation.sky_light`; for these rows and columns of the raster."""
        index = self._months(self.index[:, rows[:, None], columns[None, :]])
        total = np.zeros((len(index) + 1, *index.shape[1:]), np.float32)
        for share, tables in self._shares(index):
            light = sky_light(strip, tables)
            total[:-1] += share * light[:-1]
            total[-1] = light[-1]
        return total

    def level(self, latitude: float, height: float) -> float:
        """Global irradiation of open level ground under the map's mean index [MJ m-2]."""
        means = np.asarray(np.nanmean(self.index, axis=(1, 2), dtype=np.float64))
        return float(self.level_months(latitude, height, means).sum())

    def level_months(
        self, latitude: float, height: float, index: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """The same by month of the period, under one index or twelve; NaN where that is."""
        months = self._months(index[:, None, None]).astype(np.float32)
        total = np.zeros(len(months))
        for share, tables in self._shares(months):
            total += share[:, 0, 0] * tables.level_months(latitude, height)
        return total

    def _months(self, index: NDArray) -> NDArray:
        """The index of each month of the period."""
        which = [(month - 1) % len(index) for _, month in self.settings.period.months]
        return index[which]

    def _shares(self, index: NDArray[np.float32]) -> list[tuple[NDArray[np.float32], SkyTables]]:
        """The tables that some cells need, and the share of each in every cell and month."""
        inside = np.where(np.isnan(index), self.knots[0], index)
        lower = np.clip(np.searchsorted(self.knots, inside, side="right") - 1, 0, None)
        lower = np.minimum(lower, self.knots.size - 2)
        part = (inside - self.knots[lower]) / (self.knots[lower + 1] - self.knots[lower])
        found = []
        for k, tables in enumerate(self.tables):
            share = np.where(lower == k, 1.0 - part, 0.0) + np.where(lower + 1 == k, part, 0.0)
            if share.any():
                found.append((np.where(np.isnan(index), np.nan, share).astype(np.float32), tables))
        return found
