"""The two whole-raster jobs, terrain and irradiation, as a plan that can be run."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from functools import cached_property, partial
from typing import Any

import numpy as np

from terrasol.constants import REFRACTION_COEFFICIENT, SURROUNDINGS_SCALE
from terrasol.engine import outputs
from terrasol.engine.blocks import (
    Arrays,
    Tables,
    across_void,
    block_arrays,
    level_ground,
    sample_block,
    with_block,
)
from terrasol.engine.ground_work import Ground, lay_out
from terrasol.engine.horizon_gap import GapTally
from terrasol.engine.plan import (
    Block,
    Progress,
    blocks_of,
    carry_out,
    check_threads,
    default_threads,
)
from terrasol.engine.totals import Totals
from terrasol.errors import InputError
from terrasol.files.layers import Layer, Sink
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame, make_frame
from terrasol.ground.horizon import BLOCK, NODE_STEP
from terrasol.light.indexed import MappedTables, even_indices
from terrasol.light.latitudes import MIXED_BYTES
from terrasol.light.settings import (
    LightSettings,
    check_azimuths,
    check_map,
    check_refraction,
)
from terrasol.light.surroundings import Surroundings
from terrasol.light.tables import SkyTables, table_bytes
from terrasol.sky.suntable import height_knots, latitude_knots
from terrasol.words import counted

SECONDS_A_CELL_AND_AZIMUTH = 40e-9
"""What a core needs, for the estimate only; measured in docs/performance.md."""

SECONDS_A_TABLE_AND_HEIGHT = 0.15
"""What a core needs for the sun table of a year in steps of a minute, for the estimate only."""

STARTUP_SECONDS = 3.0
"""To load and to begin, for the estimate only."""

SAMPLE_STRIDE = 8
"""Most cells between samples of what the terrain around receives."""

BLOCK_LATITUDES = 2.5
"""Most degrees of latitude in a block. Its near horizon is sought over the distances at its
middle; where cells are degrees of longitude, 1.25 degrees away they are off by 4 % at 60 north."""

METRES_A_DEGREE = 111_195.0
"""Of latitude, on the mean sphere."""

NO_SCENE = Scene()
"""The raster's own ground and nothing else."""


@dataclass
class Summary:
    """What came out, in numbers.

    Parameters
    ----------
    numbers : dict
        Means, counts and ranges, with the unit in the name's end or beside it.
    warnings : list of str
        What a careful reader should know.
    seconds : dict
        Wall-clock time by stage.
    """

    numbers: dict[str, Any] = field(default_factory=dict)
    warnings: list[str] = field(default_factory=list)
    seconds: dict[str, float] = field(default_factory=dict)


@dataclass
class Plan:
    """A job on one raster: what it will write, what it will cost, and how to run it.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    frame : Frame
        Its place on the Earth.
    azimuths : int
        Horizon azimuths.
    refraction : float
        Coefficient k.
    settings : LightSettings, optional
        The light; None for terrain alone.
    layers : tuple of Layer
        What is written.
    scene : Scene
        What stands beyond and above the raster's ground.
    windows : tuple of Block, optional
        The parts of the raster that are wanted; by default all of it.
    tables : SkyTables or MappedTables, optional
        Filled, and for all the raster's latitudes and heights; by default they are made.
    """

    elevation: Elevation
    frame: Frame
    azimuths: int
    refraction: float
    settings: LightSettings | None
    layers: tuple[Layer, ...]
    scene: Scene = NO_SCENE
    windows: tuple[Block, ...] | None = None
    tables: Tables | None = None

    @cached_property
    def blocks(self) -> dict[Block, list[Block]]:
        """The blocks to do, each with the windows that meet it: itself, if all is wanted."""
        blocks, windows = blocks_of(self.elevation.shape), self.windows
        if windows is None:
            return {block: [block] for block in blocks}
        met: dict[tuple[int, int], list[Block]] = {}
        for window in windows:
            for row in range(window.row // BLOCK, (window.row + window.rows - 1) // BLOCK + 1):
                last = (window.column + window.columns - 1) // BLOCK
                for column in range(window.column // BLOCK, last + 1):
                    met.setdefault((row * BLOCK, column * BLOCK), []).append(window)
        return {b: met[b.row, b.column] for b in blocks if (b.row, b.column) in met}

    @property
    def cells(self) -> int:
        """Cells of the raster."""
        return int(self.elevation.heights.size)

    @cached_property
    def ranges(self) -> tuple[tuple[float, float], tuple[float, float]]:
        """Least and greatest latitude [degrees] and height [m]."""
        latitude, heights = self.frame.latitude, self.elevation.heights
        return (
            (float(latitude.min()), float(latitude.max())),
            (float(np.nanmin(heights)), float(np.nanmax(heights))),
        )

    @property
    def _knots(self) -> tuple[int, int]:
        """How many latitudes, over all skies, and heights the sun tables are made for."""
        latitudes, heights = self.ranges
        skies = 1
        if self.settings is not None and self.settings.index_map is not None:
            skies = even_indices(self.settings.index_map).size
        return skies * latitude_knots(*latitudes).size, height_knots(*heights).size

    @property
    def memory_bytes(self) -> int:
        """Peak memory to expect, the interpreter included."""
        nodes = self.cells / NODE_STEP**2
        far = (9.0 + self._beyond_bytes) * nodes * self.azimuths
        far += 12.0 * self.cells if self.scene.obstacles else 0.0
        light = 0.0
        if self.settings is not None:
            latitudes, heights = self._knots
            table = table_bytes(self.settings, heights)
            light = latitudes * table + max(MIXED_BYTES, 2.0 * table)
        block = 4.0 * 65536 * (12 + sum(len(layer.bands) for layer in self.layers))
        return int(450e6 + 5.0 * self.cells + far + light + 8 * block)

    @property
    def _beyond_bytes(self) -> float:
        """Bytes a node and azimuth of what lies beyond the raster."""
        return (9.0 if self.scene.far else 0.0) + (4.0 if self.scene.highest is not None else 0.0)

    @property
    def disk_bytes(self) -> int:
        """Disk to expect while running: working copies and finished files together."""
        size = sum(len(layer.bands) * np.dtype(layer.dtype).itemsize for layer in self.layers)
        return int(2.0 * size * self.cells)

    def seconds(self, threads: int) -> float:
        """Time to expect."""
        work = self.cells * self.azimuths * SECONDS_A_CELL_AND_AZIMUTH
        if self.settings is not None:
            latitudes, heights = self._knots
            share = self.settings.period.days / 365.0 * 60.0 / self.settings.step_seconds
            work += SECONDS_A_TABLE_AND_HEIGHT * share * latitudes * heights
        work /= max(threads, 1)
        return (
            STARTUP_SECONDS
            + work
            + 15e-9 * self.cells * sum(len(layer.bands) for layer in self.layers)
        )

    def run(
        self, sink: Sink, threads: int | None = None, progress: Progress | None = None
    ) -> Summary:
        """Do the work.

        Parameters
        ----------
        sink : Sink
            Takes finished blocks; called from this thread only.
        threads : int, optional
            Default: as many as there are cores to use.
        progress : callable, optional
            Told the share done and the stage.

        Returns
        -------
        Summary

        Raises
        ------
        SettingError
            Fewer than one thread.
        OutputError
            From the sink.
        """
        threads = default_threads() if threads is None else threads
        check_threads(threads)
        return Run(self, threads, progress or (lambda share, stage: None)).do(sink)


def plan_terrain(
    elevation: Elevation,
    azimuths: int = 64,
    *,
    horizon: bool = False,
    refraction: float = REFRACTION_COEFFICIENT,
    scene: Scene = NO_SCENE,
) -> Plan:
    """Plan slope, aspect and sky view, and the horizon if asked.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    azimuths : int
        Number of azimuths, a multiple of 4 from 8 to 720.
    horizon : bool
        Keep the horizon of every azimuth.
    refraction : float
        Coefficient k of terrestrial refraction.
    scene : Scene
        What stands beyond and above the ground, from `make_scene`.

    Returns
    -------
    Plan

    Raises
    ------
    SettingError
        A value out of its range.
    InputError
        A raster that cannot be placed on the Earth.
    """
    check_azimuths(azimuths)
    check_refraction(refraction)
    layers = [*_terrain_layers(elevation)]
    if horizon:
        layers.append(outputs.horizon_layer(azimuths))
    if scene.highest is not None:
        layers.append(outputs.horizon_gap_layer(scene.highest, None))
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    return Plan(elevation, frame, azimuths, refraction, None, tuple(layers), scene)


def plan_irradiation(
    elevation: Elevation, settings: LightSettings, scene: Scene = NO_SCENE
) -> Plan:
    """Plan slope, aspect, sky view and irradiation.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    settings : LightSettings
        The light.
    scene : Scene
        What stands beyond and above the ground, from `make_scene`.

    Returns
    -------
    Plan

    Raises
    ------
    InputError
        A raster that cannot be placed on the Earth, or with cells too coarse for its blocks.
    """
    check_map("albedo", settings.albedo_map, elevation.shape)
    check_map("index", settings.index_map, elevation.shape)
    layers = [*_terrain_layers(elevation), *outputs.light_layers(settings)]
    if scene.highest is not None:
        layers.append(outputs.horizon_gap_layer(scene.highest, settings))
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    check_blocks(frame)
    azimuths, refraction = settings.azimuths, settings.refraction
    return Plan(elevation, frame, azimuths, refraction, settings, tuple(layers), scene)


def check_blocks(frame: Frame) -> None:
    """Raise InputError where a block reaches too far north for one sun table."""
    cell = max(frame.cell_size)
    tallest = min(float(np.ptp(frame.latitude)), BLOCK * cell / METRES_A_DEGREE)
    if tallest > BLOCK_LATITUDES:
        raise InputError(
            f"the cells are about {cell / 1000.0:.1f} km, too coarse for shade and sun of terrain:"
            " give a model with cells under 1 km, or cut it into smaller pieces"
        )


def _terrain_layers(elevation: Elevation) -> tuple[Layer, ...]:
    status = () if elevation.filled is None else (outputs.STATUS,)
    return (outputs.SLOPE, outputs.ASPECT, outputs.SKY_VIEW, *status)


def empty_tables(plan: Plan, headroom: float = 0.0) -> Tables:
    """Sun tables that a plan of irradiation needs, still to be filled.

    `headroom` is what heights may lie beyond those of the plan's ground [m].
    """
    settings, middle = plan.settings, plan.frame.centre[1]
    assert settings is not None
    latitudes, (lowest, highest) = plan.ranges
    heights = lowest - headroom, highest + headroom
    if settings.index_map is None:
        return SkyTables.over(settings, middle, latitudes, heights)
    return MappedTables.over(settings, settings.index_map, middle, latitudes, heights)


class Run:
    """One run of a plan: its stages in order."""

    def __init__(self, plan: Plan, threads: int, progress: Progress) -> None:
        self.plan = plan
        self.threads = threads
        self.progress = progress
        self.summary = Summary(warnings=[*plan.elevation.warnings, *plan.scene.warnings])
        self.done = 0.0

    def do(self, sink: Sink) -> Summary:
        """All stages."""
        plan = self.plan
        for layer in plan.layers:
            sink.open(layer)
        ground, tables, surroundings = self.prepare()
        names = [layer.name for layer in plan.layers]
        work = partial(block_arrays, ground, names, tables, surroundings)
        totals, gaps = self._write_blocks(sink, work)
        self._conclude(ground, totals, tables)
        self._tell_of_scene(gaps)
        return self.summary

    def _write_blocks(self, sink: Sink, work: Callable[[Block], Arrays]) -> tuple[Totals, GapTally]:
        """Carry out every block's work into the sink; what all of them come to."""
        totals, gaps = Totals(), GapTally()
        tasks = [partial(with_block, work, block) for block in self.plan.blocks]
        for block, arrays in self._stage("blocks", tasks, 1.0 - self.done):
            totals.add(arrays)
            if "horizon_gap" in arrays:
                gaps.add(arrays)
            for name, values in arrays.items():
                sink.write(name, block.row, block.column, values)
        return totals, gaps

    def prepare(self) -> tuple[Ground, Tables | None, Surroundings | None]:
        """All that blocks need: the ground, and for light the sun tables and what is around."""
        tables = self._tables() if self.plan.settings else None
        ground = self._ground()
        return ground, tables, self._surroundings(ground, tables) if tables else None

    def _stage(self, name: str, tasks: Sequence[Callable[[], Any]], share: float) -> Iterator[Any]:
        """Carry out tasks, telling progress and keeping the time."""
        start = time.perf_counter()
        begin = self.done
        for count, result in enumerate(carry_out(tasks, self.threads), 1):
            self.done = begin + share * count / len(tasks)
            self.progress(self.done, name)
            yield result
        self.summary.seconds[name] = round(time.perf_counter() - start, 3)

    def _tables(self) -> Tables:
        """Sun tables at the knots that the raster needs."""
        if self.plan.tables is not None:
            return self.plan.tables
        tables = empty_tables(self.plan)
        for _ in self._stage("sun tables", tables.tasks, 0.08):
            pass
        return tables

    def _ground(self) -> Ground:
        """The far horizon, swept azimuth by azimuth."""
        plan = self.plan
        ground, tasks = lay_out(
            plan.elevation, plan.frame, plan.azimuths, plan.refraction, plan.scene
        )
        for _ in self._stage("far horizon", tasks, 0.2):
            pass
        return ground

    def _surroundings(self, ground: Ground, tables: Tables) -> Surroundings:
        """Mean of what the terrain around each place receives."""
        months = len(tables.settings.period.months)
        settings = tables.settings
        if settings.albedo_map is None and not any(settings.month_albedo):
            return Surroundings.none(months)
        cell = max(ground.frame.cell_size)
        most = max(min(ground.elevation.shape) // 4, 1)
        stride = int(np.clip(SURROUNDINGS_SCALE / (2.0 * cell), 1, min(most, SAMPLE_STRIDE)))
        rows, columns = ground.elevation.shape
        shape = -(-rows // stride), -(-columns // stride)
        samples = np.full((months + 1, *shape), np.nan, np.float32)
        tasks = [
            partial(sample_block, ground, tables, stride, block, samples)
            for block in blocks_of(ground.elevation.shape)
        ]
        for _ in self._stage("light of the terrain around", tasks, 0.07):
            pass
        albedo = settings.sampled_albedo(stride, shape)
        return Surroundings.of(samples, stride, ground.frame.cell_size, albedo)

    def _conclude(self, ground: Ground, totals: Totals, tables: Tables | None) -> None:
        """Put numbers and warnings into the summary."""
        if not totals.bands:
            raise InputError(
                "no cell has neighbours enough for a slope: fill voids with --fill-voids, or give"
                " a model with connected ground"
            )
        summary, heights = self.summary, ground.elevation.heights
        known = np.isfinite(heights)
        summary.numbers = {
            "cells": int(heights.size),
            "void_cells": int(heights.size - known.sum()),
            "cells_looking_across_void": across_void(ground, known),
            **totals.means(self.plan),
        }
        if tables is not None:
            summary.numbers["level_ground"] = level_ground(ground, tables)
            summary.numbers["level_ground_height_m"] = round(ground.far.datum)
            summary.numbers["unit"] = tables.settings.unit
            summary.numbers["basis"] = outputs.basis_words(tables.settings)
            summary.numbers["sky"] = outputs.sky_kind(tables.settings)
        across = summary.numbers["cells_looking_across_void"]
        if across:
            summary.warnings.append(
                f"the horizon of up to {counted(across, 'cell')} looks across a void, where unknown"
                " ground could hide the sun: fill small voids with --fill-voids, or give a complete"
                " model"
            )

    def _tell_of_scene(self, gaps: GapTally) -> None:
        """Put what stands beyond, or could, into the summary."""
        scene, summary = self.plan.scene, self.summary
        remarks = list(scene.remarks)
        if scene.far is not None:
            reach = [round(distance / 1000.0, 3) for distance in scene.far.reach]
            summary.numbers["far_reach_km"] = reach
        if scene.highest is not None:
            numbers, said = gaps.told(scene.highest, self.plan.settings is not None)
            summary.numbers |= numbers
            (summary.warnings if gaps.over else remarks).append(said)
        if remarks:
            summary.numbers["remarks"] = remarks
