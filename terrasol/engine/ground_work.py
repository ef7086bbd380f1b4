"""One block of ground: its heights, normals and horizons."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.plan import Block, blocks_of, leave_if_unwanted
from terrasol.ground.beyond import Beyond, DataEdge, Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame
from terrasol.ground.horizon import (
    BLOCK,
    PAD,
    FarHorizon,
    Obstacles,
    horizon_strip,
    near_steps,
    raise_horizon,
    sweep,
)
from terrasol.ground.sightline import Outlooks, Sightlines
from terrasol.ground.surface import block_normals
from terrasol.light.irradiation import Strip

STRIP_ROWS = 16
"""Rows worked on at once: the horizons of 64 azimuths then take 1 MB, within a core's cache."""


@dataclass(frozen=True)
class Ground:
    """A whole elevation model with its frame and the far horizon swept.

    Parameters
    ----------
    elevation : Elevation
        Heights.
    frame : Frame
        Where they lie.
    far : FarHorizon
        Swept for every azimuth.
    refraction : float
        Coefficient k.
    obstacles : Obstacles, optional
        What hides the sun where that is not the elevation model alone.
    beyond : FarHorizon, optional
        What bounds the view beyond the obstacles, from a larger model.
    edge : DataEdge, optional
        How far away the known ground ends.
    """

    elevation: Elevation
    frame: Frame
    far: FarHorizon
    refraction: float
    obstacles: Obstacles | None = None
    beyond: FarHorizon | None = None
    edge: DataEdge | None = None

    @property
    def azimuths(self) -> int:
        """Number of azimuths."""
        return int(self.far.height.shape[0])


def lay_out(
    elevation: Elevation, frame: Frame, azimuths: int, refraction: float, scene: Scene
) -> tuple[Ground, list[Callable[[], None]]]:
    """Make room for a raster's ground, and the tasks that fill it, one an azimuth.

    Parameters
    ----------
    elevation, frame
        The raster and its place.
    azimuths : int
        Number of azimuths.
    refraction : float
        Coefficient k.
    scene : Scene
        What stands beyond and above; ``Scene()`` for nothing.

    Returns
    -------
    ground : Ground
        Complete once every task was carried out, in any order.
    tasks : list of callable
        To be called once each, on any threads.
    """
    far = FarHorizon.empty(elevation, azimuths)
    beyond = None
    if scene.far is not None or scene.highest is not None:
        beyond = Beyond(elevation, frame, scene, far, refraction)
    ground = Ground(
        elevation,
        frame,
        far,
        refraction,
        scene.obstacles,
        beyond.horizon if beyond else None,
        beyond.edge if beyond else None,
    )

    def fill(azimuth_index: int) -> None:
        sweep(elevation, frame, azimuth_index, refraction, far, scene.obstacles)
        if beyond is not None:
            beyond.sweep(azimuth_index)

    return ground, [partial(fill, a) for a in range(azimuths)]


class BlockGround:
    """The ground of one block, ready to be taken strip by strip."""

    def __init__(self, ground: Ground, block: Block) -> None:
        self.ground = ground
        self.block = block
        heights = _padded(ground.elevation.heights, block)
        core = heights[PAD:-PAD, PAD:-PAD]
        self.empty = bool(np.isnan(core).all())
        self.datum = 0.0 if self.empty else float(np.nanmean(core, dtype=np.float64))
        self.padded = (heights - np.float32(self.datum)).astype(np.float32)
        self.datum = float(np.float32(self.datum))
        self.normal = block_normals(self.padded, PAD, ground.frame, block.row, block.column)
        _continue_rim(self.padded, block, ground.elevation.shape)
        self._hiding = self.padded if ground.obstacles is None else self._obstacles()
        self._steps = near_steps(ground.frame, *self.middle, ground.azimuths, ground.refraction)
        self._far = self._nodes(ground.far.height), self._nodes(ground.far.away)
        self._beyond = None
        if ground.beyond is not None:
            self._beyond = self._nodes(ground.beyond.height), self._nodes(ground.beyond.away)
        self._horizon = np.empty((ground.azimuths, 0, block.columns), np.float32)

    def _nodes(self, lattice: NDArray[np.float32]) -> NDArray[np.float32]:
        """The part of a lattice of nodes that this block needs."""
        b = self.block
        rows, columns = self.ground.far.block(b.row, b.column, (b.rows, b.columns))
        return np.ascontiguousarray(lattice[:, rows, columns])

    def _obstacles(self) -> NDArray[np.float32]:
        """What hides the sun in and around the block, less the datum."""
        obstacles = self.ground.obstacles
        assert obstacles is not None
        heights = _padded(obstacles.heights, self.block, obstacles.margin)
        heights -= np.float32(self.datum)
        if obstacles.margin == 0:
            _continue_rim(heights, self.block, self.ground.elevation.shape)
        return heights

    @property
    def middle(self) -> tuple[float, float]:
        """Row and column of the block's middle in the raster."""
        b = self.block
        return b.row + (b.rows - 1) / 2, b.column + (b.columns - 1) / 2

    def latitude(self, rows: range) -> tuple[float, float, float]:
        """Latitude of the first cell of some rows, and its change a row of them, a column."""
        b, frame = self.block, self.ground.frame
        first = frame.latitude_at(b.row, b.column)
        by_row = (frame.latitude_at(b.row + b.rows, b.column) - first) / b.rows
        by_column = (frame.latitude_at(b.row, b.column + b.columns) - first) / b.columns
        return first + rows.start * by_row, rows.step * by_row, by_column

    def pieces(self) -> Iterator[range]:
        """Rows of the block that are worked on together; none any more once the run has ended."""
        for first in range(0, self.block.rows, STRIP_ROWS):
            leave_if_unwanted()
            yield range(first, min(first + STRIP_ROWS, self.block.rows))

    def table_latitude(self, rows: range) -> float:
        """Latitude whose sun table serves some rows [degrees]: that of their middle."""
        row = self.block.row + (rows[0] + rows[-1]) / 2
        return self.ground.frame.latitude_at(row, self.middle[1])

    def strip(self, rows: range) -> Strip:
        """Rows of the block with their horizons; good until the next strip is taken."""
        ground, count = self.ground, len(rows)
        if count > self._horizon.shape[1]:
            self._horizon = np.empty((ground.azimuths, count, self.block.columns), np.float32)
        horizon = self._horizon
        if count < horizon.shape[1]:
            horizon = np.empty((ground.azimuths, count, self.block.columns), np.float32)
        lift = self.datum - ground.far.datum
        horizon_strip(
            self._hiding,
            self.padded,
            rows,
            self._steps,
            self._far,
            lift,
            ground.refraction,
            horizon,
        )
        if self._beyond is not None:
            raise_horizon(self.padded, rows, self._beyond, lift, ground.refraction, horizon)
        within = slice(rows.start, rows.stop, rows.step)
        heights = self.padded[PAD:-PAD, PAD:-PAD][within]
        return Strip(
            horizon,
            np.ascontiguousarray(self.normal[:, within]),
            np.ascontiguousarray(heights),
            self.datum,
            self.latitude(rows),
            self.table_latitude(rows),
        )

    def beyond(self, piece: range) -> NDArray[np.float32] | None:
        """Horizon of a larger model alone over a whole piece; None without one."""
        if self._beyond is None:
            return None
        ground = self.ground
        alone = np.zeros((ground.azimuths, len(piece), self.block.columns), np.float32)
        lift = self.datum - ground.far.datum
        raise_horizon(self.padded, piece, self._beyond, lift, ground.refraction, alone)
        return alone

    def possible(self, strip: Strip, piece: range) -> NDArray[np.float32]:
        """Horizon of a strip if the highest plausible ground stood where knowledge ends.

        Shape and unit as `Strip.horizon`, of a whole piece. Needs `Ground.edge`.
        """
        ground = self.ground
        assert ground.edge is not None
        away = self._nodes(ground.edge.away)
        above = np.full_like(away, ground.edge.highest - ground.far.datum)
        raised = strip.horizon.copy()
        lift = self.datum - ground.far.datum
        raise_horizon(self.padded, piece, (above, away), lift, ground.refraction, raised)
        return raised


def cell_strip(ground: Ground, row: int, column: int) -> Strip:
    """One cell with its horizon, as its block has it.

    Parameters
    ----------
    ground : Ground
        Swept.
    row, column : int
        The cell.

    Returns
    -------
    Strip
        Of one row and one column.
    """
    block = _block_around(ground, row, column)
    inside = row - block.row
    strip = BlockGround(ground, block).strip(range(inside, inside + 1))
    return strip.thin(column - block.column, block.columns)


def cell_outlooks(ground: Ground, sights: Sightlines, row: int, column: int) -> Outlooks:
    """One cell on the ground around it, as its block has it.

    Parameters
    ----------
    ground : Ground
        Swept.
    sights : Sightlines
        Over the same ground.
    row, column : int
        The cell.

    Returns
    -------
    Outlooks
        Of one row and one column.
    """
    block = _block_around(ground, row, column)
    piece = BlockGround(ground, block)
    beyond = piece.beyond(range(row - block.row, row - block.row + 1))
    if beyond is not None:
        own = column - block.column
        beyond = np.ascontiguousarray(beyond[:, :, own : own + 1])
    return sights.outlooks((slice(row, row + 1), slice(column, column + 1)), piece.middle, beyond)


def _block_around(ground: Ground, row: int, column: int) -> Block:
    """The block that holds a cell."""
    per_row = -(-ground.elevation.shape[1] // BLOCK)
    return blocks_of(ground.elevation.shape)[row // BLOCK * per_row + column // BLOCK]


def _continue_rim(padded: NDArray[np.float32], block: Block, shape: tuple[int, int]) -> None:
    """Continue the raster one cell outward, straight on but nowhere rising.

    Rays that run along the rim would else be lost to rounding. Since the new cells never
    stand above the rim, they hide nothing that the rim does not.
    """
    for lines, first, last in (
        (padded, block.row == 0, block.row + block.rows == shape[0]),
        (padded.T, block.column == 0, block.column + block.columns == shape[1]),
    ):
        if first:
            lines[PAD - 1] = np.minimum(2.0 * lines[PAD] - lines[PAD + 1], lines[PAD])
        if last:
            lines[-PAD] = np.minimum(2.0 * lines[-PAD - 1] - lines[-PAD - 2], lines[-PAD - 1])


def _padded(heights: NDArray[np.float32], block: Block, margin: int = 0) -> NDArray[np.float32]:
    """A block's heights with PAD cells around, NaN beyond what is given.

    `heights` may reach `margin` cells beyond the raster on every side.
    """
    out = np.full((block.rows + 2 * PAD, block.columns + 2 * PAD), np.nan, np.float32)
    top, left = block.row + margin - PAD, block.column + margin - PAD
    rows = slice(max(top, 0), min(top + out.shape[0], heights.shape[0]))
    columns = slice(max(left, 0), min(left + out.shape[1], heights.shape[1]))
    out[rows.start - top : rows.stop - top, columns.start - left : columns.stop - left] = heights[
        rows, columns
    ]
    return out
