"""Plots on the ground in cells of one size: which cells they ask for, and what these say."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import RegularGridInterpolator

from terrasol.engine.hours import plan_hours
from terrasol.engine.job import Plan, plan_irradiation, plan_terrain
from terrasol.engine.plan import Block, Progress
from terrasol.engine.plot_places import PLACED, Located
from terrasol.engine.plot_settings import PlotSettings
from terrasol.engine.plot_table import CELL, ERROR, GREATEST, KNOWN, LEAST, MEAN, POINT, Told
from terrasol.engine.predictors import (
    Bands,
    Predictor,
    ground_predictors,
    ground_values,
    hours_predictors,
    hours_values,
    light_predictors,
    light_values,
)
from terrasol.errors import SettingError
from terrasol.files.layers import Layer
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame, make_frame
from terrasol.ground.horizon import BLOCK
from terrasol.practice.plots import Gathered, Share, around_point, by_error, in_circle, own_cell

Array = NDArray[np.float64]

MOST_CELLS: Final = 4_000_000
"""Most cells in a circle: what a plot may ask for before it is a map (judgement)."""


Values = Callable[[Bands, Array, Array], Array]
"""Given layers, height and latitude of some cells: values of predictors, (cells, predictors)."""

Work = tuple[Plan, list[Predictor], Values]


@dataclass(frozen=True)
class Grain:
    """The plots on the ground in cells of one size."""

    ground: Elevation
    located: Located
    error: Array
    settings: PlotSettings
    factor: int
    size: float

    def run(self, scene: Scene, threads: int | None, progress: Progress) -> Told:
        """Gather what light and, if asked for, hours of sun say."""
        s, ground = self.settings, self.ground
        frame = make_frame(ground.shape, ground.transform, ground.crs)
        shares = self._shares(frame)
        told = Told([], {}, {}, [], {})
        gathered = []
        jobs = [self._light(scene), *([self._time(scene)] if s.timed else [])]
        for number, (plan, predictors, values) in enumerate(jobs):
            sink = CellSink(plan, shares, values, len(predictors))
            begin, part = number / len(jobs), 1.0 / len(jobs)

            def move(share: float, stage: str, begin: float = begin, part: float = part) -> None:
                progress(begin + part * share, stage)

            summary = sink.carry_out(threads, move)
            gathered.append(sink.gathered)
            told.predictors.extend(predictors)
            told.level.update(_level(summary.numbers))
            told.warnings.extend(summary.warnings)
            for stage, value in summary.seconds.items():
                told.seconds[stage] = told.seconds.get(stage, 0.0) + value
        told.values.update(self._statistics(gathered))
        return told

    def _light(self, scene: Scene) -> Work:
        """The plan of ground and, if asked for, light; its predictors, and their values."""
        s = self.settings
        if not s.lit:
            light = s.light
            plan = plan_terrain(
                self.ground, light.azimuths, refraction=light.refraction, scene=scene
            )
            return plan, ground_predictors(), ground_values
        predictors = [*ground_predictors(), *light_predictors(s.light, s.season)]

        def values(bands: Bands, height: Array, latitude: Array) -> Array:
            own = ground_values(bands, height, latitude)
            return np.concatenate([own, light_values(bands, s.light, s.season)], axis=1)

        return plan_irradiation(self.ground, s.light, scene), predictors, values

    def _time(self, scene: Scene) -> Work:
        """The plan of hours of sun, its predictors, and their values."""
        s = self.settings

        def values(bands: Bands, height: Array, latitude: Array) -> Array:
            return hours_values(bands, s.hours, s.season)

        plan = plan_hours(self.ground, s.hours, scene)
        return plan, hours_predictors(s.hours, s.season), values

    @property
    def _kinds(self) -> list[tuple[str, float | None]]:
        """What is gathered of each plot."""
        error = [(ERROR, None)] if np.isfinite(self.error).any() else []
        return [(CELL, None), (POINT, None), *error, *((MEAN, r) for r in self.settings.radii)]

    def _shares(self, frame: Frame) -> Shares:
        """The cells that every plot asks for, one share a kind."""
        shape, found = self.ground.shape, []
        size = frame.cell_size
        widest = max(self.settings.radii, default=0.0)
        if np.pi * widest**2 > MOST_CELLS * size[0] * size[1]:
            raise SettingError(
                f"a circle of {widest:g} m has more than {MOST_CELLS:,} cells of"
                f" {size[0]:.3g} m: give a coarser raster, or smaller circles"
            )
        rows = (self.located.row + 0.5) / self.factor - 0.5
        columns = (self.located.column + 0.5) / self.factor - 0.5
        for plot, (row, column, error, flag) in enumerate(
            zip(rows, columns, self.error, self.located.flag, strict=True)
        ):
            if flag != PLACED:
                continue
            jacobian = frame.jacobian_at(row, column)
            for kind, (statistic, radius) in enumerate(self._kinds):
                place = plot * len(self._kinds) + kind
                if statistic == CELL:
                    share = own_cell(row, column, shape)
                elif statistic == POINT:
                    share = around_point(row, column, shape)
                elif statistic == ERROR:
                    if not np.isfinite(error):
                        continue
                    share = by_error(row, column, error, jacobian, shape)
                else:
                    assert radius is not None
                    share = in_circle(row, column, radius, jacobian, shape)
                found.append((place, share))
        return Shares.of(found, self.error.size * len(self._kinds), shape)

    def _statistics(self, gathered: list[Gathered]) -> dict[tuple[str, float | None], Array]:
        """Statistics by kind and radius, each of shape (plots, predictors)."""
        kinds = self._kinds

        def all_of(values: Callable[[Gathered], Array]) -> Array:
            return np.concatenate([values(g) for g in gathered], axis=1)

        mean, deviation = all_of(lambda g: g.mean), all_of(lambda g: g.deviation)
        low, high = all_of(lambda g: g.least), all_of(lambda g: g.greatest)
        known = np.where(self.located.flag == PLACED, 1.0, np.nan)[:, None]
        own = mean[:: len(kinds)]
        told: dict[tuple[str, float | None], Array] = {}
        for place, (statistic, radius) in enumerate(kinds):
            rows = slice(place, None, len(kinds))
            if statistic == POINT:
                told[POINT, None] = np.where(np.isnan(own), np.nan, mean[rows])
            elif statistic == ERROR:
                told[ERROR, None] = deviation[rows]
            else:
                told[statistic, radius] = mean[rows]
            if statistic == MEAN:
                told[LEAST, radius], told[GREATEST, radius] = low[rows], high[rows]
                told[KNOWN, radius] = known * gathered[0].weight[rows, :1]
        return told


def _level(numbers: dict[str, Any]) -> dict[str, Any]:
    """What open level ground gets, out of a summary."""
    names = {
        "level_ground": "irradiation",
        "unit": "unit",
        "level_ground_sun_hours": "sun_hours",
    }
    return {told: numbers[name] for name, told in names.items() if name in numbers}


@dataclass(frozen=True)
class Shares:
    """Cells by block: which share counts which of them, and how much."""

    count: int
    blocks: dict[tuple[int, int], tuple[NDArray[Any], ...]]

    @classmethod
    def of(cls, found: list[tuple[int, Share]], count: int, shape: tuple[int, int]) -> Shares:
        """Sort the cells of some shares into blocks."""
        which = np.concatenate([np.full(s.weight.size, place) for place, s in found])
        rows = np.concatenate([s.rows for _, s in found])
        columns = np.concatenate([s.columns for _, s in found])
        weight = np.concatenate([s.weight for _, s in found])
        across = -(-shape[1] // BLOCK)
        block = rows // BLOCK * across + columns // BLOCK
        order = np.argsort(block, kind="stable")
        ends = np.flatnonzero(np.diff(block[order])) + 1
        pieces = np.split(order, ends)
        blocks: dict[tuple[int, int], tuple[NDArray[Any], ...]] = {}
        for piece in pieces:
            row, column = rows[piece], columns[piece]
            corner = row[0] // BLOCK * BLOCK, column[0] // BLOCK * BLOCK
            cells, cell = np.unique(row * shape[1] + column, return_inverse=True)
            place = cells // shape[1], cells % shape[1]
            blocks[int(corner[0]), int(corner[1])] = (*place, which[piece], cell, weight[piece])
        return cls(count, blocks)


class CellSink:
    """Takes the cells that plots ask for out of each block, and gathers what they say."""

    def __init__(
        self,
        plan: Plan,
        shares: Shares,
        values: Values,
        quantities: int,
    ) -> None:
        self.plan = plan
        self.shares = shares
        self.values = values
        self.gathered = Gathered(shares.count, quantities)
        self._block: tuple[int, int] | None = None
        self._bands: Bands = {}
        frame = plan.frame
        self._latitude = RegularGridInterpolator((frame.rows, frame.columns), frame.latitude)

    def carry_out(self, threads: int | None, progress: Progress) -> Any:
        """Run the plan where it is asked for; its summary."""
        windows = [
            window
            for rows, columns, *_ in self.shares.blocks.values()
            for window in _runs(rows, columns)
        ]
        summary = replace(self.plan, windows=tuple(windows)).run(self, threads, progress)
        self._flush()
        return summary

    def open(self, layer: Layer) -> None:
        """Nothing needs room."""

    def write(self, name: str, row: int, column: int, values: NDArray[Any]) -> None:
        """Take one layer of a block."""
        if (row, column) != self._block:
            self._flush()
            self._block = row, column
        rows, columns = self.shares.blocks[row, column][:2]
        self._bands[name] = values[:, rows - row, columns - column]

    def _flush(self) -> None:
        """Gather a block that is complete."""
        if self._block is None:
            return
        rows, columns, which, cell, weight = self.shares.blocks[self._block]
        height = self.plan.elevation.heights[rows, columns].astype(np.float64)
        latitude = self._latitude(np.stack([rows, columns], axis=-1))
        self.gathered.add(which, cell, weight, self.values(self._bands, height, latitude))
        self._block, self._bands = None, {}


def _runs(rows: NDArray[np.int64], columns: NDArray[np.int64]) -> list[Block]:
    """Cells in reading order, as windows of one row.

    Examples
    --------
    >>> _runs(np.array([4, 4, 4, 5]), np.array([2, 3, 7, 8]))[:2]
    [Block(row=4, column=2, rows=1, columns=2), Block(row=4, column=7, rows=1, columns=1)]
    """
    ends = np.flatnonzero((np.diff(rows) != 0) | (np.diff(columns) != 1)) + 1
    return [
        Block(int(row[0]), int(column[0]), 1, row.size)
        for row, column in zip(np.split(rows, ends), np.split(columns, ends), strict=True)
    ]
