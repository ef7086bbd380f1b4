"""The hour-by-hour job: horizons once, then span after span of steps, written as it goes."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property, partial
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

import terrasol
from terrasol.constants import SURROUNDINGS_SCALE
from terrasol.engine.blocks import across_void
from terrasol.engine.ground_work import BlockGround, Ground, lay_out
from terrasol.engine.job import (
    SAMPLE_STRIDE,
    SECONDS_A_CELL_AND_AZIMUTH,
    Summary,
    check_blocks,
)
from terrasol.engine.plan import (
    Block,
    Progress,
    blocks_of,
    carry_out,
    check_threads,
    default_threads,
)
from terrasol.engine.series_work import BlockWork
from terrasol.errors import OutputError
from terrasol.files.delivery import check_space
from terrasol.files.horizons import (
    HorizonDraft,
    Horizons,
    damage_of,
    find_horizons,
    horizon_key,
)
from terrasol.files.stacks import Stack, StackSink, StackVariable
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame, make_frame
from terrasol.ground.horizon import (
    FAR_FROM,
    NEAR_STEPS,
    NODE_STEP,
    ZONE_TOLERANCE,
)
from terrasol.kernels.moment import encode_horizon
from terrasol.kernels.rounding import tally
from terrasol.light.series import (
    UNIT_OF_STEP,
    Around,
    SeriesSettings,
    StepSky,
    patch_light,
    quantity,
    step_albedo,
    step_edges,
    step_months,
    suns_at_greenwich,
)
from terrasol.light.settings import check_map, filled_up, mapped_albedo
from terrasol.light.surroundings import Surroundings
from terrasol.sky.clear import Air
from terrasol.sky.sun import SunPath
from terrasol.sky.suntable import height_knots

HORIZON_METHOD: Final = 1
"""Raise it whenever the horizon of the same ground would come out otherwise: stored ones are
then worked out again."""

CHUNK_STEPS: Final = {"1h": 24, "1d": 16}
"""Steps in a chunk of the stack: one map is read at the price of so many."""

WORK_STEPS: Final = {"1h": 72, "1d": 32}
"""Steps that a thread works on at once: whole chunks."""

SPAN_STEPS: Final = {"1h": 288, "1d": 32}
"""Most steps whose suns and surroundings are worked out together: whole work pieces."""

AROUND_BYTES: Final = 256e6
"""Memory that the light of the terrain around may take."""

SLICE_STEPS: Final = 8
"""Steps whose surroundings one task spreads."""

SECONDS_A_MOMENT: Final = 2e-9
"""What a core needs a cell and moment, for the estimate only (docs/performance.md)."""

SECONDS_A_VALUE: Final = 25e-9
"""What a core needs to put a value together, pack and write it, for the estimate only."""

BYTES_A_VALUE: Final = 1.3
"""Of a stack, day and night together, for the estimate only."""

RESOLUTION: Final = {"1h": 2.0**-3, "1d": 2.0**-10}
"""Values are rounded to multiples of this: 0.125 W m-2, 0.001 MJ m-2."""

HORIZON_SHARE: Final = 0.2
"""Part of the progress that the horizons take, where they must be worked out."""

HELD: Final = "this run holds them beside its results, and the next will work them out anew"
"""Of horizons that the store could not take."""

WORDS: Final = {
    "global": "global {kind} from sky and terrain around",
    "beam": "{kind} of the sun's beam",
    "diffuse": "{kind} of the sky's diffuse light",
    "reflected": "{kind} of light reflected by the terrain around",
    "net": "net shortwave {kind}, what the ground absorbs",
}
"""Of each quantity, for its long name."""


def is_clear(settings: SeriesSettings) -> bool:
    """Whether the sky is that of a model without clouds."""
    return isinstance(settings.sky, Air)


def stack_variables(settings: SeriesSettings) -> tuple[StackVariable, ...]:
    """The quantities asked for as variables of a stack.

    None has a CF standard name: those of downwelling light are for a level receiver.
    """
    basis = "slope" if settings.basis == "slope" else "map"
    kind = "irradiance" if settings.step == "1h" else "irradiation"
    sky = "potential (clear-sky) " if is_clear(settings) else ""
    method = "time: mean" if settings.step == "1h" else "time: sum"
    return tuple(
        StackVariable(
            name,
            UNIT_OF_STEP[settings.step],
            f"{sky}{WORDS[name].format(kind=kind)}, in the plane of the slope, per area of {basis}",
            method,
            RESOLUTION[settings.step],
        )
        for name in settings.quantities
    )


@dataclass
class SeriesPlan:
    """A series on one raster: what it will write, what it will cost, and how to run it.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    frame : Frame
        Its place on the Earth.
    settings : SeriesSettings
        The light.
    edges : ndarray of datetime64[s], shape (steps + 1,)
        Of the steps, UTC.
    scene : Scene
        What stands beyond and above the raster's ground.
    """

    elevation: Elevation
    frame: Frame
    settings: SeriesSettings
    edges: NDArray[np.datetime64]
    scene: Scene = field(default_factory=Scene)

    @property
    def steps(self) -> int:
        """Number of steps."""
        return int(self.edges.size) - 1

    @property
    def cells(self) -> int:
        """Cells of the raster."""
        return int(self.elevation.heights.size)

    @cached_property
    def key(self) -> str:
        """What the ground's horizons are kept under."""
        settings = self.settings
        method = {
            "version": terrasol.__version__,
            "method": HORIZON_METHOD,
            "azimuths": settings.azimuths,
            "refraction": settings.refraction,
            "numbers": [FAR_FROM, NEAR_STEPS, NODE_STEP, ZONE_TOLERANCE],
        }
        return horizon_key(self.elevation, method, (self.scene.obstacles, self.scene.far))

    @cached_property
    def heights(self) -> NDArray[np.float64]:
        """Height knots of the sky [m]."""
        heights = self.elevation.heights
        return height_knots(float(np.nanmin(heights)), float(np.nanmax(heights)))

    @property
    def reflecting(self) -> bool:
        """Whether the terrain sends light back."""
        settings = self.settings
        measured = settings.albedo_station is not None
        mapped = settings.albedo_map is not None
        return measured or mapped or any(settings.albedo)

    @cached_property
    def stride(self) -> int:
        """Cells between samples of what the terrain around receives."""
        most = max(min(self.elevation.shape) // 4, 1)
        wide = SURROUNDINGS_SCALE / (2.0 * max(self.frame.cell_size))
        return int(np.clip(wide, 1, min(most, SAMPLE_STRIDE)))

    @property
    def span(self) -> int:
        """Steps whose suns and surroundings are worked out together."""
        work = WORK_STEPS[self.settings.step]
        nodes = self.cells / self.stride**2 if self.reflecting else 1.0
        fit = int(AROUND_BYTES / (8.0 * nodes * work))
        return min(work * max(fit, 1), SPAN_STEPS[self.settings.step])

    @property
    def horizon_bytes(self) -> int:
        """Disk that the horizons take."""
        return 2 * self.settings.azimuths * self.cells

    @property
    def stack_bytes(self) -> int:
        """Disk that the finished stack will take, about."""
        return int(BYTES_A_VALUE * len(self.settings.quantities) * self.cells * self.steps)

    def memory_bytes(self, threads: int) -> int:
        """Peak memory to expect, the interpreter included; the same for any number of steps."""
        nodes = self.cells / self.stride**2
        far = 9.0 * self.cells / NODE_STEP**2 * self.settings.azimuths
        around = 8.0 * nodes * self.span
        moments = 0.5 * self.span * self.settings.moments
        skies = moments * (48.0 + 16.0 * self.heights.size) * len(blocks_of(self.elevation.shape))
        values = WORK_STEPS[self.settings.step] * 65536 * 4.0
        block = (len(self.settings.quantities) + 2) * values + 4.0 * 65536 * self.settings.azimuths
        mapped = 0 if self.settings.albedo_map is None else self.settings.albedo_map.nbytes
        ground = 5.0 * self.cells + mapped
        return int(450e6 + ground + max(far, around + skies) + threads * block)

    def seconds(self, threads: int, stored: bool) -> float:
        """Time to expect."""
        work = 0.0 if stored else self.cells * self.settings.azimuths * SECONDS_A_CELL_AND_AZIMUTH
        values = float(self.cells) * self.steps
        samples = 1.0 + (1.0 / self.stride**2 if self.reflecting else 0.0)
        work += 0.5 * values * self.settings.moments * SECONDS_A_MOMENT * samples
        work += values * SECONDS_A_VALUE * len(self.settings.quantities)
        return 5.0 + work / max(threads, 1)

    def stack(self, attributes: Mapping[str, str]) -> Stack:
        """What is to be written."""
        return Stack(
            stack_variables(self.settings),
            self.edges,
            self.elevation.shape,
            self.elevation.transform,
            self.elevation.crs,
            CHUNK_STEPS[self.settings.step],
            attributes,
        )

    def run(
        self,
        sink: StackSink,
        store: Path,
        threads: int | None = None,
        progress: Progress | None = None,
        spare: Path | None = None,
    ) -> Summary:
        """Do the work.

        Parameters
        ----------
        sink : StackSink
            Takes finished pieces, from several threads.
        store : Path
            Folder where horizons are kept, or found.
        threads : int, optional
            Default: as many as there are cores to use.
        progress : callable, optional
            Told the share done and the stage.
        spare : Path, optional
            Folder that holds horizons for this run alone where the store cannot take them.

        Returns
        -------
        Summary

        Raises
        ------
        SettingError
            Fewer than one thread.
        OutputError
            From the sink, or from the store where there is no spare folder.
        """
        threads = default_threads() if threads is None else threads
        check_threads(threads)
        return SeriesRun(self, sink, threads, progress or (lambda share, stage: None)).do(
            store, spare
        )


def plan_series(
    elevation: Elevation, settings: SeriesSettings, scene: Scene | None = None
) -> SeriesPlan:
    """Plan a series of steps.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    settings : SeriesSettings
        The light.
    scene : Scene, optional
        What stands beyond and above the ground; nothing by default.

    Returns
    -------
    SeriesPlan

    Raises
    ------
    SettingError
        A map of the albedo that does not fit the raster.
    InputError
        A raster that cannot be placed on the Earth, or with cells too coarse for its blocks.
    """
    check_map("albedo", settings.albedo_map, elevation.shape)
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    check_blocks(frame)
    edges = step_edges(settings, frame.centre[1])
    return SeriesPlan(elevation, frame, settings, edges, scene or Scene())


@dataclass
class Span:
    """Some steps, and what is known of them by now."""

    start: int
    stop: int
    path: SunPath
    months: NDArray[np.int64]
    albedo: NDArray[np.float32]
    received: NDArray[np.float32]
    skies: dict[tuple[int, int], list[StepSky]] = field(default_factory=dict)

    @property
    def steps(self) -> int:
        """How many."""
        return self.stop - self.start

    def albedo_at(
        self, layers: NDArray[np.float32] | None, steps: slice, rows: slice, columns: slice
    ) -> NDArray[Any]:
        """Albedo of the ground in some steps; where it is mapped, of some cells."""
        plain = self.albedo[steps]
        if layers is None:
            return plain
        return mapped_albedo(layers, self.months[steps], plain, rows, columns)


class SeriesRun:
    """One run of a plan: horizons, then span after span; without a sink, the horizons alone."""

    def __init__(
        self, plan: SeriesPlan, sink: StackSink | None, threads: int, progress: Progress
    ) -> None:
        self.plan = plan
        self.sink = sink
        self.threads = threads
        self.progress = progress
        self.summary = Summary(warnings=[*plan.elevation.warnings, *plan.scene.warnings])
        self.blocks = blocks_of(plan.elevation.shape)
        self.totals = {name: [0.0, 0.0, np.inf, -np.inf] for name in plan.settings.quantities}

    def do(self, store: Path, spare: Path | None) -> Summary:
        """All stages."""
        plan = self.plan
        horizons, found = self.find_or_make_horizons(store, spare)
        begin = 0.0 if found else HORIZON_SHARE
        for start in range(0, plan.steps, plan.span):
            stop = min(start + plan.span, plan.steps)
            self._do_span(
                horizons,
                start,
                stop,
                begin + (1.0 - begin) * start / plan.steps,
                (1.0 - begin) * (stop - start) / plan.steps,
            )
        self._conclude(horizons, found)
        return self.summary

    def each(
        self, name: str, tasks: Sequence[Callable[[], Any]], begin: float, share: float
    ) -> Iterator[Any]:
        """Carry out tasks, telling progress and adding up the time by stage."""
        start = time.perf_counter()
        for count, result in enumerate(carry_out(tasks, self.threads), 1):
            self.progress(begin + share * count / len(tasks), name)
            yield result
        seconds = self.summary.seconds
        seconds[name] = round(seconds.get(name, 0.0) + time.perf_counter() - start, 3)

    def find_or_make_horizons(self, store: Path, spare: Path | None) -> tuple[Horizons, bool]:
        """The horizons of this ground, and whether the store had them."""
        found = find_horizons(store, self.plan.key)
        if found is not None:
            return found, True
        damage = damage_of(store, self.plan.key)
        self.summary.warnings += [damage] if damage else []
        return self._make_horizons(store, spare), False

    def _make_horizons(self, store: Path, spare: Path | None) -> Horizons:
        """Sweep, and keep every block's horizons, if need be in a spare folder."""
        plan = self.plan
        settings, elevation = plan.settings, plan.elevation
        ground, tasks = lay_out(
            elevation, plan.frame, settings.azimuths, settings.refraction, plan.scene
        )
        for _ in self.each("far horizon", tasks, 0.0, 0.6 * HORIZON_SHARE):
            pass
        try:
            return self._keep(ground, store)
        except OutputError as error:
            if spare is None or spare == store:
                raise
            self.summary.warnings.append(f"{error}; {HELD}")
        check_space(spare.parent, plan.horizon_bytes)
        return self._keep(ground, spare)

    def _keep(self, ground: Ground, store: Path) -> Horizons:
        """Work out every block's horizons into a store."""
        across = across_void(ground, np.isfinite(self.plan.elevation.heights))
        with HorizonDraft(store, self.plan.key) as draft:
            keep = [partial(_keep_horizons, ground, draft, block) for block in self.blocks]
            for _ in self.each("horizons", keep, 0.6 * HORIZON_SHARE, 0.4 * HORIZON_SHARE):
                pass
            return draft.finish({"cells_looking_across_void": across})

    def _do_span(
        self, horizons: Horizons, start: int, stop: int, begin: float, share: float
    ) -> None:
        """Suns and surroundings of some steps, then the steps themselves."""
        plan, settings = self.plan, self.plan.settings
        span, samples = span_of(plan, start, stop)
        work = BlockWork(plan.elevation, plan.frame, settings, plan.heights, horizons)
        tasks = [
            partial(look_up_sky, work, span, plan.stride if plan.reflecting else 0, samples, block)
            for block in self.blocks
        ]
        for _ in self.each("suns and light of the terrain around", tasks, begin, 0.2 * share):
            pass
        if plan.reflecting:
            spread = [
                partial(_spread, plan, span, samples, first)
                for first in range(0, span.steps, SLICE_STEPS)
            ]
            name = "suns and light of the terrain around"
            for _ in self.each(name, spread, begin + 0.2 * share, 0.1 * share):
                pass
        assert self.sink is not None
        blocks = [
            partial(_do_block, work, span, self.sink, plan.stride, WORK_STEPS[settings.step], b)
            for b in self.blocks
        ]
        for found in self.each("steps", blocks, begin + 0.3 * share, 0.7 * share):
            self._take(found)

    def _take(self, found: dict[str, list[NDArray[np.float64]]]) -> None:
        """Add a block's tallies."""
        for name, tallies in found.items():
            total = self.totals[name]
            for count, whole, low, high in tallies:
                total[:2] = total[0] + count, total[1] + whole
                total[2:] = min(total[2], low), max(total[3], high)

    def _conclude(self, horizons: Horizons, found: bool) -> None:
        """Put numbers and warnings into the summary."""
        plan, heights = self.plan, self.plan.elevation.heights
        across = int(horizons.notes.get("cells_looking_across_void", 0))
        self.summary.numbers = {
            "cells": int(heights.size),
            "void_cells": int(np.isnan(heights).sum()),
            "cells_looking_across_void": across,
            "steps": plan.steps,
            "first_step_begins": f"{plan.edges[0]}Z",
            "last_step_ends": f"{plan.edges[-1]}Z",
            "horizons": "found in the store" if found else "computed",
        }
        for name, (count, whole, low, high) in self.totals.items():
            if count:
                self.summary.numbers[name] = {
                    "unit": UNIT_OF_STEP[plan.settings.step],
                    "mean": round(float(whole / count), 4),
                    "least": round(float(low), 4),
                    "greatest": round(float(high), 4),
                }
        if across:
            self.summary.warnings.append(
                f"the horizon of up to {across} cells looks across a void, where unknown ground"
                " could hide the sun: fill small voids with --fill-voids, or give a complete model"
            )


def span_of(plan: SeriesPlan, start: int, stop: int) -> tuple[Span, NDArray[np.float32]]:
    """Some steps of a plan, and room for the samples of what the ground receives in them."""
    settings = plan.settings
    edges = plan.edges[start : stop + 1]
    months = step_months(settings, plan.edges)[start:stop]
    shape = tuple(-(-size // plan.stride) for size in plan.elevation.shape)
    samples = np.full((stop - start + 1, *shape), np.nan, np.float32)
    if not plan.reflecting:
        samples = np.zeros((stop - start + 1, 1, 1), np.float32)
    path = suns_at_greenwich(edges, settings.substep_seconds)
    albedo = step_albedo(settings, edges, months)
    return Span(start, stop, path, months, albedo, samples[:-1]), samples


def _keep_horizons(ground: Ground, draft: HorizonDraft, block: Block) -> None:
    """Work out a block's horizons and keep them."""
    piece = BlockGround(ground, block)
    code = np.zeros((ground.azimuths, block.rows, block.columns), np.uint16)
    for rows in piece.pieces():
        encode_horizon(piece.strip(rows).horizon, code[:, rows.start : rows.stop])
    draft.write(block.row, block.column, code)


def look_up_sky(
    work: BlockWork, span: Span, stride: int, samples: NDArray[np.float32], block: Block
) -> None:
    """A block's skies, and what its sampled cells receive from them."""
    ground = work.ground(block)
    if ground.empty:
        return
    skies = [work.sky(ground, part, span.path) for part in ground.parts()]
    span.skies[block.row, block.column] = skies
    if not stride:
        return
    for part, sky in zip(ground.parts(), skies, strict=True):
        for patch, rows, columns in ground.patches(part, stride):
            view = patch.sky()
            around = Around.nothing(span.steps, patch.heights.shape)
            light = patch_light(patch, view, sky, around, "slope")[0]
            row, column = (
                (block.row + rows.start) // stride,
                (block.column + columns.start) // stride,
            )
            place = np.s_[row : row + len(rows), column : column + len(columns)]
            samples[:-1, *place] = light
            samples[-1, *place] = 1.0 - view[0]


def _spread(plan: SeriesPlan, span: Span, samples: NDArray[np.float32], first: int) -> None:
    """Mean of what the terrain around receives, for a few steps; takes the samples' place."""
    steps = slice(first, min(first + SLICE_STEPS, span.steps))
    if not np.nanmax(samples[steps], initial=0.0) > 0.0:
        span.received[steps] = 0.0
        return
    every = slice(plan.stride // 2, None, plan.stride)
    albedo = span.albedo_at(plan.settings.albedo_map, steps, every, every).astype(np.float64)
    if albedo.ndim > 1:
        albedo = filled_up(albedo, samples.shape[1:])
    found = Surroundings.of(
        np.concatenate([samples[steps], samples[-1:]]), plan.stride, plan.frame.cell_size, albedo
    )
    span.received[steps] = found.received


def _do_block(
    work: BlockWork, span: Span, sink: StackSink, stride: int, count: int, block: Block
) -> dict[str, list[NDArray[np.float64]]]:
    """All steps of a block to the sink; returns count, sum, least and greatest of each piece."""
    ground, settings = work.ground(block), work.settings
    found: dict[str, list[NDArray[np.float64]]] = {name: [] for name in settings.quantities}
    if ground.empty:
        return found
    layers = settings.albedo_map if "net" in found else None
    strips = [
        (sky, patch, patch.sky(), rows, columns)
        for part, sky in zip(ground.parts(), span.skies[block.row, block.column], strict=True)
        for patch, rows, columns in ground.patches(part)
    ]
    for first in range(0, span.steps, count):
        steps = slice(first, min(first + count, span.steps))
        sent = span.albedo[steps]
        if settings.albedo_map is not None:
            sent = np.ones_like(sent)
        shape = steps.stop - steps.start, block.rows, block.columns
        values = {name: np.empty(shape, np.float32) for name in settings.quantities}
        surroundings = Surroundings(span.received[steps], stride, sent)
        for sky, patch, view, rows, columns in strips:
            down, across = _moved(rows, block.row), _moved(columns, block.column)
            around = Around.of(surroundings, down, across, sent)
            light = patch_light(
                patch, view, sky.part(steps.start, steps.stop), around, settings.basis
            )
            place = np.s_[:, rows.start : rows.stop, columns.start : columns.stop]
            cells = slice(down.start, down.stop), slice(across.start, across.stop)
            albedo = span.albedo_at(layers, steps, *cells)
            for name, target in values.items():
                target[place] = quantity(name, light, albedo)
        for name, target in values.items():
            sink.write(name, span.start + first, block.row, block.column, target)
            numbers = np.empty(4)
            tally(target.reshape(-1), numbers)
            found[name].append(numbers)
    return found


def _moved(span: range, by: int) -> range:
    return range(span.start + by, span.stop + by, span.step)
