"""Standard errors of slope, aspect and irradiation beside their maps, from error of the heights."""

from __future__ import annotations

import time
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine import outputs
from terrasol.engine.job import STARTUP_SECONDS, Plan, Summary
from terrasol.engine.plan import Progress
from terrasol.engine.spread import Running, RunningAngle
from terrasol.engine.totals import Totals
from terrasol.engine.uncertainty import doubts_of_error, moved, realisations, with_tables
from terrasol.files.layers import Layer, Sink
from terrasol.ground.uncertainty import DemError, field_bytes
from terrasol.words import counted

SUFFIX: Final = "_standard_error"

TALLY_BYTES: Final = 43.0
"""Bytes a cell of the running means and deviations, the maps they belong to and a field."""

SECONDS_A_NODE: Final = 0.1e-6
"""What a core needs to draw and filter a node of an error field, for the estimate only."""

ALWAYS: Final = ("slope", "aspect", "sky_view")
"""Layers that every plan of irradiation has."""


@dataclass
class ErrorPlan(Plan):
    """A job on one raster, and what the error of its heights does to it.

    Parameters
    ----------
    plain : Plan
        The job as it is without.
    error : DemError
        The error and its draw.
    """

    plain: Plan = None  # type: ignore[assignment]
    error: DemError = None  # type: ignore[assignment]

    @property
    def memory_bytes(self) -> int:
        """Peak memory to expect, the interpreter included."""
        field = field_bytes(self.error, self.elevation.shape, self.frame.cell_size)
        return int(self.plain.memory_bytes + TALLY_BYTES * self.cells + field)

    def seconds(self, threads: int) -> float:
        """Time to expect: the sun tables are made twice, all else is done for each realisation."""
        once = self.plain.seconds(threads)
        again = replace(self.plain, settings=None).seconds(threads) - STARTUP_SECONDS
        nodes = field_bytes(self.error, self.elevation.shape, self.frame.cell_size) / 20.0
        drawing = SECONDS_A_NODE * nodes
        return 2.0 * once - again - STARTUP_SECONDS + self.error.realisations * (again + drawing)

    def run(
        self, sink: Sink, threads: int | None = None, progress: Progress | None = None
    ) -> Summary:
        """Do the work; see `Plan.run`. The maps themselves are those of `plain`."""
        return _ErrorRun(self, threads, progress or (lambda share, stage: None)).do(sink)


def plan_errors(plan: Plan, error: DemError) -> ErrorPlan:
    """Plan the standard errors of an irradiation's maps beside them.

    Parameters
    ----------
    plan : Plan
        From `plan_irradiation` or `plan_terrain`.
    error : DemError
        The error of the heights, and how often it is drawn.

    Returns
    -------
    ErrorPlan
        Its further layers are those of slope, aspect and the global light of the whole period,
        by their names and ``_standard_error``.

    Raises
    ------
    SettingError
        A range too long for the raster.
    """
    cell_size = plan.frame.cell_size
    field_bytes(error, plan.elevation.shape, cell_size)
    tags = {
        "dem_error": error.words(cell_size),
        "realisations": str(error.realisations),
        "seed": str(error.seed),
    }
    beside = outputs.standard_error_layers(plan.layers, tags)
    named = {layer.name.removesuffix(SUFFIX): layer.name for layer in beside}
    layers = tuple(
        replace(layer, tags={**layer.tags, "ancillary_variables": named[layer.name]})
        if layer.name in named
        else layer
        for layer in plan.layers
    )
    given = {name: getattr(plan, name) for name in plan.__dataclass_fields__}
    plain = replace(plan, layers=layers)
    return ErrorPlan(**{**given, "layers": (*layers, *beside)}, plain=plain, error=error)


class _ErrorRun:
    """One run: the job itself, its realisations, and the maps of their spread."""

    def __init__(self, plan: ErrorPlan, threads: int | None, progress: Progress) -> None:
        self.plan = plan
        self.threads = threads
        self.progress = progress
        shape = plan.elevation.shape
        self.tallies: dict[str, Running | RunningAngle] = {
            layer.name.removesuffix(SUFFIX): RunningAngle(shape, np.float32)
            if layer.name.startswith("aspect")
            else Running(shape, np.float32)
            for layer in self.beside
        }

    @property
    def beside(self) -> list[Layer]:
        """Layers of standard errors."""
        return [layer for layer in self.plan.layers if layer.name.endswith(SUFFIX)]

    def do(self, sink: Sink) -> Summary:
        """All stages."""
        plan = self.plan
        keeper = _MapKeeper(sink, plan.elevation.shape, self.tallies)
        summary = plan.plain.run(keeper, self.threads, self._part(0))
        start = time.perf_counter()
        self._realise()
        summary.numbers |= self._write(sink, keeper.maps).means(plan)
        summary.seconds["realisations"] = round(time.perf_counter() - start, 3)
        self._tell(summary)
        return summary

    def _part(self, number: int) -> Progress:
        """Progress of the job itself, 0, or of a realisation."""
        whole = self.plan.error.realisations

        def move(share: float, stage: str) -> None:
            words = f"realisation {number} of {whole}: {stage}" if number else stage
            self.progress((number + share) / (whole + 1), words)

        return move

    def _realise(self) -> None:
        """Run the job on every realisation of the ground."""
        plain, error = self.plan.plain, self.plan.error
        wanted = {*ALWAYS, *self.tallies}
        ready = replace(
            with_tables(plain, error, self.threads),
            layers=tuple(layer for layer in plain.layers if layer.name in wanted),
            scene=replace(plain.scene, highest=None),
        )
        sink = _TallySink(self.tallies)
        for number, ground in enumerate(realisations(plain.elevation, error), 1):
            moved(ready, ground).run(sink, self.threads, self._part(number))

    def _write(self, sink: Sink, maps: Mapping[str, NDArray[np.float32]]) -> Totals:
        """Write the standard errors of the maps block by block, and count them."""
        totals = Totals()
        for layer in self.beside:
            sink.open(layer)
        for block in self.plan.blocks:
            window = block.slices
            for layer in self.beside:
                name = layer.name.removesuffix(SUFFIX)
                values = _standard_error(self.tallies[name], maps[name][window], window)
                totals.add({layer.name: values[None]})
                sink.write(layer.name, block.row, block.column, values[None])
        return totals

    def _tell(self, summary: Summary) -> None:
        """Put the error, its mean shifts and its doubts into the summary."""
        plan, cell_size = self.plan, self.plan.frame.cell_size
        said = []
        for name, tally in self.tallies.items():
            if isinstance(tally, RunningAngle):
                continue
            layer = next(layer for layer in plan.layers if layer.name == name)
            before = summary.numbers[name][layer.bands[0]]["mean"]
            shift = float(np.nanmean(tally.mean(), dtype=np.float64)) - before
            shift = round(shift, 4) + 0.0  # no minus before a zero
            summary.numbers[f"mean_shift_of_{name}"] = shift
            said.append(f"{shift:+.3g} {layer.unit} to the mean of {name}")
        summary.numbers.setdefault("remarks", []).append(
            f"{counted(plan.error.realisations, 'realisation')} of a"
            f" {plan.error.words(cell_size)}; on average it adds {' and '.join(said)}, and about as"
            " much may be in the maps from the error that the heights have already"
        )
        summary.warnings += doubts_of_error(plan.elevation, plan.error)


def _standard_error(
    tally: Running | RunningAngle, value: NDArray[np.float32], window: tuple[slice, ...]
) -> NDArray[np.float32]:
    """Root mean square of what the realisations are off the map; of a direction, their scatter.

    What error does to a slope one way, near the level, is in it. It bends a direction no one way.
    """
    if isinstance(tally, Running):
        return tally.error_of(value, window).astype(np.float32)
    return np.where(np.isnan(value), np.nan, tally.deviation(window)).astype(np.float32)


class _MapKeeper:
    """A sink that passes everything on, and keeps the first band of some maps."""

    def __init__(self, sink: Sink, shape: tuple[int, int], names: Iterable[str]) -> None:
        self.sink = sink
        self.maps = {name: np.full(shape, np.nan, np.float32) for name in names}

    def open(self, layer: Layer) -> None:
        """Make room for a layer."""
        self.sink.open(layer)

    def write(self, name: str, row: int, column: int, values: NDArray[Any]) -> None:
        """Take a block."""
        if name in self.maps:
            rows, columns = values.shape[1:]
            self.maps[name][row : row + rows, column : column + columns] = values[0]
        self.sink.write(name, row, column, values)


class _TallySink:
    """Takes the blocks of one realisation after the other, and keeps their spread alone."""

    def __init__(self, tallies: dict[str, Running | RunningAngle]) -> None:
        self.tallies = tallies

    def open(self, layer: Layer) -> None:
        """Nothing is to be prepared."""

    def write(self, name: str, row: int, column: int, values: NDArray[Any]) -> None:
        """Take a block's first band."""
        if name in self.tallies:
            rows, columns = values.shape[1:]
            window = slice(row, row + rows), slice(column, column + columns)
            self.tallies[name].add(values[0], window)
