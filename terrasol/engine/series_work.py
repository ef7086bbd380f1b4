"""One block of ground for a series: which parts share a sun, and patches of their cells."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.ground_work import BlockGround, Ground
from terrasol.engine.plan import Block
from terrasol.files.horizons import Horizons
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame
from terrasol.ground.horizon import PAD, FarHorizon
from terrasol.light.series import Patch, Place, SeriesSettings, StepSky
from terrasol.sky.sun import SunPath

PATCH_DEGREES: Final = 0.25
"""Largest extent of ground that one place's sun and air serve; within it they are linear."""

PATCH_CELLS: Final = 4096
"""Cells worked on at once: with 64 azimuths their horizons take half a megabyte."""

Part = tuple[slice, slice]
"""Rows and columns of a block."""


@dataclass(frozen=True)
class BlockWork:
    """What all blocks of a series share.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    frame : Frame
        Its place on the Earth.
    settings : SeriesSettings
        The light.
    heights : ndarray
        Height knots of the sky [m].
    horizons : Horizons
        Of every block.
    """

    elevation: Elevation
    frame: Frame
    settings: SeriesSettings
    heights: NDArray[np.float64]
    horizons: Horizons

    @cached_property
    def _bare(self) -> Ground:
        """The ground without its horizon: for heights and normals."""
        far = FarHorizon.empty(self.elevation, 0)
        return Ground(self.elevation, self.frame, far, self.settings.refraction)

    @cached_property
    def _relative(self) -> Frame:
        """The frame with longitudes, less that of the centre, in the latitudes' place."""
        turn = (self.frame.longitude - self.frame.centre[1] + 180.0) % 360.0 - 180.0
        return replace(self.frame, latitude=turn)

    def ground(self, block: Block) -> SeriesBlock:
        """One block."""
        piece = BlockGround(self._bare, block)
        code = None if piece.empty else self.horizons.block(block.row, block.column)
        latitude, longitude = (_across(f, block) for f in (self.frame, self._relative))
        return SeriesBlock(piece, code, latitude, longitude, self.frame.centre[1])

    def sky(self, ground: SeriesBlock, part: Part, path: SunPath) -> StepSky:
        """The sky of a part of a block."""
        return StepSky.over(self.settings, path, ground.place(part), self.heights)


@dataclass(frozen=True)
class _Across:
    """A quantity that is linear across a block [degrees]."""

    first: float
    by_row: float
    by_column: float

    def at(self, row: Any, column: Any) -> Any:
        """Its value at some rows and columns of the block."""
        return self.first + self.by_row * row + self.by_column * column


def _across(frame: Frame, block: Block) -> _Across:
    """The latitude of a frame, across a block."""
    first = frame.latitude_at(block.row, block.column)
    below = frame.latitude_at(block.row + block.rows, block.column)
    right = frame.latitude_at(block.row, block.column + block.columns)
    return _Across(first, (below - first) / block.rows, (right - first) / block.columns)


class SeriesBlock:
    """One block, ready to be taken patch by patch.

    Parameters
    ----------
    piece : BlockGround
        Heights and normals.
    code : ndarray of uint16, or None
        Horizons, shape (azimuths, rows, columns); None where all is void.
    latitude, longitude : _Across
        The longitude less that of the raster's centre.
    centre : float
        Longitude of the raster's centre [degrees].
    """

    def __init__(
        self,
        piece: BlockGround,
        code: NDArray[np.uint16] | None,
        latitude: _Across,
        longitude: _Across,
        centre: float,
    ) -> None:
        self.block = piece.block
        self.empty = piece.empty
        self._normal = piece.normal
        self._heights = piece.padded[PAD:-PAD, PAD:-PAD]
        self._datum = piece.datum
        self._code = code
        self._latitude, self._longitude = latitude, longitude
        self._centre = centre

    def parts(self) -> Iterator[Part]:
        """Pieces of the block small enough for the sun and air of one place."""
        rows, columns = self.block.rows, self.block.columns
        narrow = np.cos(np.radians(self._latitude.first))
        tall, wide = (
            max(1, int(np.ceil(np.hypot(lat * size, lon * size * narrow) / PATCH_DEGREES)))
            for lat, lon, size in (
                (self._latitude.by_row, self._longitude.by_row, rows),
                (self._latitude.by_column, self._longitude.by_column, columns),
            )
        )
        down, across = -(-rows // tall), -(-columns // wide)
        for row in range(0, rows, down):
            for column in range(0, columns, across):
                yield (
                    slice(row, min(row + down, rows)),
                    slice(column, min(column + across, columns)),
                )

    def place(self, part: Part) -> Place:
        """The middle of a part."""
        row, column = (np.float64(span.start + span.stop - 1) / 2.0 for span in part)
        longitude = self._centre + float(self._longitude.at(row, column))
        corners = self._offset(part, *(np.array([span.start, span.stop - 1]) for span in part))
        return Place(
            float(self._latitude.at(row, column)),
            (longitude + 180.0) % 360.0 - 180.0,
            float(np.hypot(*corners).max()),
        )

    def _offset(
        self, part: Part, rows: NDArray[np.int64], columns: NDArray[np.int64]
    ) -> NDArray[np.float32]:
        """How far north and east of the part's middle some cells lie [radians]."""
        row, column = (np.float64(span.start + span.stop - 1) / 2.0 for span in part)
        north, east = (
            np.radians(across.at(rows[:, None], columns) - across.at(row, column))
            for across in (self._latitude, self._longitude)
        )
        east = east * np.cos(np.radians(self._latitude.at(row, column)))
        return np.stack([north, east]).astype(np.float32)

    def patches(self, part: Part, stride: int = 1) -> Iterator[tuple[Patch, range, range]]:
        """A part's cells some rows at a time, with their rows and columns in the block.

        With a stride, every `stride`-th row and column of the raster, from cell
        `stride // 2` on.
        """
        rows, columns = (
            range(span.start + (stride // 2 - first - span.start) % stride, span.stop, stride)
            for span, first in zip(part, (self.block.row, self.block.column), strict=True)
        )
        if not rows or not columns:
            return
        count = max(1, PATCH_CELLS // len(columns))
        latitude = self.place(part).latitude
        for first in range(0, len(rows), count):
            some = rows[first : first + count]
            yield self._patch(part, latitude, some, columns), some, columns

    def _patch(self, part: Part, latitude: float, rows: range, columns: range) -> Patch:
        assert self._code is not None
        pick = (
            ...,
            slice(rows.start, rows.stop, rows.step),
            slice(columns.start, columns.stop, columns.step),
        )
        return Patch(
            np.ascontiguousarray(self._code[pick]),
            np.ascontiguousarray(self._normal[pick]),
            np.ascontiguousarray(self._heights[pick]),
            self._datum,
            self._offset(part, np.array(rows), np.array(columns)),
            latitude,
        )
