"""A season's snow into a file, and back into the cells of a plan."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from os import PathLike
from typing import Any

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.melt import MELT_METHOD, MeltPlan, MeltResult, spread_record
from terrasol.engine.melt_cells import Cells
from terrasol.errors import InputError
from terrasol.files.snow_state import StateHead, StateReader, StateWriter
from terrasol.kernels.melt import FLOWS, SKIN

SKIN_UNITS = ("day", "K day", "mm", "mm", "degC", "1")
"""Of `terrasol.kernels.melt.SKIN`."""


def head_of(plan: MeltPlan, day: np.datetime64) -> StateHead:
    """What a state of a plan at the beginning of a day is of."""
    settings = plan.light.settings
    record = {
        "method": MELT_METHOD,
        "model": plan.model.record(),
        "spread": spread_record(plan),
        "station_height_m": plan.weather.height,
        "diffuse": settings.diffuse,
        "substep_seconds": settings.substep_seconds,
        **plan.sky,
    }
    return StateHead(str(day), str(plan.season_start), plan.light.key, record, len(plan.models))


def save_state(result: MeltResult, path: str | PathLike[str]) -> None:
    """Keep the snow as it stands at the end of a run."""
    plan = result.plan
    shape = plan.light.elevation.shape
    with StateWriter(path, head_of(plan, plan.dates[-1] + 1), shape) as target:
        for name, unit, dtype, part in _maps(len(plan.models)):
            values: NDArray[Any] = np.zeros(shape, dtype)
            for cells in result.cells:
                values[cells.place] = part(cells).reshape(len(cells.rows), len(cells.columns))
            target.write(name, values, unit)


def read_head(path: str | PathLike[str]) -> StateHead:
    """What a state file is of.

    Raises
    ------
    InputError
        No state.
    """
    with StateReader(path) as source:
        return source.head


def take_up(plan: MeltPlan, path: str | PathLike[str]) -> Callable[[Sequence[Cells]], None]:
    """Check a state against a plan; what comes back puts it into the plan's cells.

    Raises
    ------
    InputError
        No state, or of another ground, other numbers, or another day.
    """
    head = read_head(path)
    want = head_of(plan, plan.dates[0])
    different = head.differs(want)
    if different:
        raise InputError(
            f"{path} was made with other settings ({different}): begin the season anew, or ask for"
            " the same again"
        )
    if head.day != want.day:
        raise InputError(
            f"{path} holds the snow at the beginning of {head.day}, but the period begins on"
            f" {want.day}: let the period begin on that day"
        )

    def fill(all_cells: Sequence[Cells]) -> None:
        with StateReader(path) as source:
            if source.shape != plan.light.elevation.shape:
                raise InputError(f"{path} is of a raster of another size")
            for name, _, _, part in _maps(len(plan.models)):
                values = source.read(name)
                for cells in all_cells:
                    part(cells)[...] = values[cells.place].reshape(-1)

    return fill


Part = Callable[[Cells], NDArray[Any]]


def _maps(members: int) -> Iterator[tuple[str, str, type, Part]]:
    """Name, unit, type and place in the cells of everything that is kept."""

    def snow(member: int, name: str) -> Part:
        return lambda cells: getattr(cells.season.snows[member], name)

    def skin(member: int, column: int) -> Part:
        return lambda cells: cells.season.snows[member].skin[:, column]

    def total(column: int) -> Part:
        return lambda cells: cells.season.total[:, column]

    for member in range(members):
        end = f"_{member}" if member else ""
        yield f"ice{end}", "mm", np.float64, snow(member, "ice")
        yield f"liquid{end}", "mm", np.float64, snow(member, "liquid")
        for column, (name, unit) in enumerate(zip(SKIN, SKIN_UNITS, strict=True)):
            yield f"{name}{end}", unit, np.float32, skin(member, column)
    for column, name in enumerate(FLOWS):
        yield f"total_{name}", "mm", np.float64, total(column)
    yield "peak", "mm", np.float32, lambda cells: cells.season.peak
    yield "peak_day", "day", np.int32, lambda cells: cells.season.peak_day
    yield "bare_day", "day", np.int32, lambda cells: cells.season.bare_day
