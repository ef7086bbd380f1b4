"""A plan carried out for parts of its raster: the shade is that of all the ground."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.job import Plan, Summary
from terrasol.engine.plan import Block, Progress
from terrasol.errors import SettingError
from terrasol.files.layers import Layer

Window = Block
"""A rectangle of cells, of any size and place inside the raster."""

Arrays = dict[str, NDArray[Any]]


def collect(
    plan: Plan,
    windows: Sequence[Window],
    threads: int | None = None,
    progress: Progress | None = None,
    layers: Sequence[str] | None = None,
) -> tuple[list[Arrays], Summary]:
    """Carry out a plan where it is wanted, and return what came out.

    Parameters
    ----------
    plan : Plan
        Of terrain, irradiation or hours. Only its blocks that meet a window are done; every
        cell comes out as it would with all of them.
    windows : sequence of Window
        Where; they may overlap.
    threads : int, optional
        Default: as many as there are cores to use.
    progress : callable, optional
        Told the share done and the stage.
    layers : sequence of str, optional
        Names of the plan's layers to keep; by default all.

    Returns
    -------
    arrays : list of dict
        For each window the layers by name, shape (bands, rows, columns), void NaN.
    summary : Summary
        Of the blocks that were done.

    Raises
    ------
    SettingError
        No window, one that reaches beyond the raster, a layer that the plan has not, or fewer
        than one thread.
    """
    _check(plan, windows, layers)
    sink = _WindowSink(windows, layers)
    summary = replace(plan, windows=tuple(windows)).run(sink, threads, progress)
    return sink.arrays, summary


def _check(plan: Plan, windows: Sequence[Window], layers: Sequence[str] | None) -> None:
    """Raise SettingError for what cannot be collected."""
    if not windows:
        raise SettingError("no window of the raster is asked for: give one at least")
    rows, columns = plan.elevation.shape
    for w in windows:
        inside = 0 <= w.row <= w.row + w.rows <= rows and w.rows > 0
        if not (inside and 0 <= w.column <= w.column + w.columns <= columns and w.columns > 0):
            raise SettingError(
                f"the window of {w.rows} x {w.columns} cells from row {w.row}, column {w.column}"
                f" does not lie inside the raster of {rows} x {columns} cells"
            )
    unknown = set(layers or ()) - {layer.name for layer in plan.layers}
    if unknown:
        raise SettingError(f"the plan has no layer {sorted(unknown)[0]}")


def _inside(block: Block, shared: tuple[slice, slice]) -> tuple[slice, slice]:
    """Rows and columns of the raster, counted from a block's first cell."""
    rows, columns = shared
    return (
        slice(rows.start - block.row, rows.stop - block.row),
        slice(columns.start - block.column, columns.stop - block.column),
    )


class _WindowSink:
    """Keeps what falls into the windows."""

    def __init__(self, windows: Sequence[Window], layers: Sequence[str] | None) -> None:
        self.windows = windows
        self.names = layers
        self.arrays: list[Arrays] = [{} for _ in windows]

    def open(self, layer: Layer) -> None:
        """Make room for a layer, if it is wanted."""
        if self.names is not None and layer.name not in self.names:
            return
        empty = np.nan if layer.dtype.startswith("float") else 0
        for window, arrays in zip(self.windows, self.arrays, strict=True):
            shape = len(layer.bands), window.rows, window.columns
            arrays[layer.name] = np.full(shape, empty, layer.dtype)

    def write(self, name: str, row: int, column: int, values: NDArray[np.generic]) -> None:
        """Take one block."""
        block = Block(row, column, values.shape[1], values.shape[2])
        for window, arrays in zip(self.windows, self.arrays, strict=True):
            shared = block.shared(window)
            if name in arrays and shared is not None:
                target, source = _inside(window, shared), _inside(block, shared)
                arrays[name][:, *target] = values[:, *source]
