"""The light that a parcel's own ground is under: open level ground beside it, and means of maps."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.parcel_cells import Piece
from terrasol.engine.parcel_figures import Level
from terrasol.engine.plan import carry_out, default_threads
from terrasol.light.hours import HoursSettings, TimeTables
from terrasol.light.indexed import MappedTables
from terrasol.light.settings import LightSettings, mapped_albedo
from terrasol.light.tables import SkyTables
from terrasol.sky.cloud import MonthlySky

Months = NDArray[np.float64]


def own_light(piece: Piece, light: LightSettings) -> LightSettings | None:
    """Settings with the means of mapped albedo and clear-sky index over a parcel.

    Returns
    -------
    LightSettings or None
        Without maps; None where no index is known.
    """
    if light.albedo_map is not None:
        whole = mapped_albedo(
            light.albedo_map, np.arange(12), np.array(light.albedo), *piece.window.slices
        )
        light = replace(light, albedo=tuple(_means(whole, piece).tolist()), albedo_map=None)
    if light.index_map is None:
        return light
    index = _index(piece, light.index_map)
    if not np.isfinite(index).all():
        return None
    return replace(light, sky=MonthlySky(light.air, tuple(index.tolist())), index_map=None)


def levels_of(
    pieces: Sequence[Piece | None],
    light: LightSettings,
    hours: HoursSettings,
    threads: int | None,
) -> list[Level | None]:
    """Open level ground at the latitude and mean height of each parcel, under its own sky."""
    there = [piece for piece in pieces if piece is not None and np.isfinite(piece.height)]
    latitudes = [piece.latitude for piece in there]
    heights = [piece.height for piece in there]
    ends = (min(latitudes), max(latitudes)), (min(heights), max(heights))
    longitude = float(there[0].longitude)
    tables = _tables(light, longitude, *ends)
    time = TimeTables.over(hours, longitude, *ends)
    for _ in carry_out([*tables.tasks, *time.tasks], threads or default_threads()):
        pass
    unknown = np.full(len(light.period.months), np.nan)

    def level(piece: Piece) -> Level:
        if not np.isfinite(piece.height):
            return Level(unknown, unknown)
        place = piece.latitude, piece.height
        if isinstance(tables, MappedTables):
            return Level(tables.level_months(*place, _index(piece, tables.index)), sun(*place))
        return Level(tables.level_months(*place), sun(*place))

    def sun(latitude: float, height: float) -> Months:
        return np.asarray(time.level(latitude, height)[0])

    return [None if piece is None else level(piece) for piece in pieces]


def _tables(
    light: LightSettings,
    longitude: float,
    latitudes: tuple[float, float],
    heights: tuple[float, float],
) -> SkyTables | MappedTables:
    """Sun tables of one sky, or of the even indices of a map."""
    if light.index_map is None:
        return SkyTables.over(light, longitude, latitudes, heights)
    return MappedTables.over(light, light.index_map, longitude, latitudes, heights)


def _index(piece: Piece, layers: NDArray[np.float32]) -> Months:
    """Mean clear-sky index of each calendar month over a parcel; NaN where none is known."""
    cut = layers[:, *piece.window.slices].astype(np.float64)
    return np.resize(_means(cut, piece), 12)


def _means(layers: NDArray[np.float64], piece: Piece) -> Months:
    """Mean of each layer over the parcel, by area, of what is known."""
    weights = np.where(np.isnan(layers), 0.0, piece.area)
    total = weights.sum(axis=(1, 2))
    sums = (np.nan_to_num(layers) * weights).sum(axis=(1, 2))
    return np.where(total > 0.0, sums / np.where(total > 0.0, total, 1.0), np.nan)
