"""Lines of sight from single cells over the real grid: what they need to be followed fast."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import RegularGridInterpolator

from terrasol.constants import EARTH_RADIUS
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import LATTICE_CELLS, Frame
from terrasol.ground.horizon import Obstacles, half_curve
from terrasol.kernels.daywalk import TILE, WIDE

Squares = tuple[NDArray[np.float32], NDArray[np.float32], NDArray[np.float32]]


def highest_in_squares(heights: NDArray[np.float32], size: int) -> NDArray[np.float32]:
    """Highest point of each square of cells, the first ones of the next squares included.

    The bilinear surface between these centres stands nowhere higher. Voids do not count; where
    nothing is known it is -inf.

    Examples
    --------
    >>> highest_in_squares(np.arange(10, dtype=np.float32).reshape(2, 5), 2).tolist()
    [[7.0, 9.0, 9.0]]
    """
    for axis in (0, 1):
        starts = np.arange(0, heights.shape[axis], size)
        behind = np.minimum(starts + size, heights.shape[axis] - 1)
        heights = np.fmax(
            np.fmax.reduceat(heights, starts, axis=axis), np.take(heights, behind, axis=axis)
        )
    return np.where(np.isnan(heights), np.float32(-np.inf), heights)


def bow_at(frame: Frame, row: float, column: float) -> NDArray[np.float64]:
    """How a geodesic bends in the grid: second change of row and column a metre along it.

    With x the place in the grid, J the Jacobian and u = (sin A, cos A) the direction, x' = J^-1 u
    and A' = tan(latitude) sin A / R; so x'' = J^-1 (u' - J' x').

    Parameters
    ----------
    frame : Frame
        The grid on the Earth.
    row, column : float
        A place [cells].

    Returns
    -------
    ndarray, shape (2, 3)
        Of row and of column, by the direction's east^2, 2 east north and north^2 [cells / m^2].
    """
    inverse = np.linalg.inv(frame.jacobian_at(row, column))
    by_column, by_row = (
        (frame.jacobian_at(row + r, column + c) - frame.jacobian_at(row - r, column - c))
        / (2.0 * LATTICE_CELLS)
        for r, c in ((0, LATTICE_CELLS), (LATTICE_CELLS, 0))
    )
    turn = np.tan(np.radians(frame.latitude_at(row, column))) / EARTH_RADIUS

    def second(east: float, north: float) -> NDArray[np.float64]:
        way = inverse @ (east, north)
        change = (by_column * way[0] + by_row * way[1]) @ way
        return (inverse @ (turn * east * np.array([north, -east]) - change))[::-1]

    one, other = second(1.0, 0.0), second(0.0, 1.0)
    both = second(np.sqrt(0.5), np.sqrt(0.5)) - (one + other) / 2.0
    return np.stack([one, both, other], axis=1)


@dataclass(frozen=True)
class Outlooks:
    """Some cells from which lines of sight may be followed; see `kernels.daywalk.sight`.

    Parameters
    ----------
    ground : tuple of ndarray of float32
        What hides [m], and its highest points in squares of two sizes.
    origin : ndarray of float64, shape (2,)
        Row and column of the first cell on that ground.
    eyes : ndarray of float32, shape (rows, columns)
        Heights from which one looks [m].
    grid : ndarray of float64, shape (rows, columns, 4)
        Rows by metres east and north, columns by metres east and north.
    bow : ndarray of float64, shape (2, 3)
        From `bow_at`.
    bend : float
        1 / (2 R') [1/m].
    beyond : ndarray of float32, shape (azimuths, rows, columns)
        Horizon of what stands beyond that ground, tangents; of size 0 for nothing.
    """

    ground: Squares
    origin: NDArray[np.float64]
    eyes: NDArray[np.float32]
    grid: NDArray[np.float64]
    bow: NDArray[np.float64]
    bend: float
    beyond: NDArray[np.float32]

    @classmethod
    def none(cls, shape: tuple[int, int]) -> Outlooks:
        """Cells of which no ground is known around them."""
        nothing = np.zeros((0, 0), np.float32)
        return cls(
            (nothing, nothing, nothing), np.zeros(2), np.zeros(shape, np.float32),
            np.zeros((*shape, 4)), np.zeros((2, 3)), 0.0, np.zeros((0, 0, 0), np.float32),
        )  # fmt: skip


@dataclass(frozen=True)
class Sightlines:
    """A raster over which lines of sight may be followed.

    Parameters
    ----------
    frame : Frame
        The raster's place on the Earth.
    ground : tuple of ndarray of float32
        What hides, and its highest points in squares of two sizes.
    eyes : ndarray of float32
        Ground from which one looks [m].
    margin : int
        Cells of both beyond the raster, on every side.
    bend : float
        1 / (2 R') [1/m].
    """

    frame: Frame
    ground: Squares
    eyes: NDArray[np.float32]
    margin: int
    bend: float

    @classmethod
    def over(
        cls,
        elevation: Elevation,
        frame: Frame,
        refraction: float,
        obstacles: Obstacles | None = None,
    ) -> Sightlines:
        """Make ready for lines of sight.

        Parameters
        ----------
        elevation, frame
            The raster and its place.
        refraction : float
            Coefficient k.
        obstacles : Obstacles, optional
            What hides the sun; by default the ground itself.
        """
        obstacles = obstacles or Obstacles.of(elevation)
        heights = np.ascontiguousarray(obstacles.heights)
        tiles = highest_in_squares(heights, 1 << TILE)
        wides = highest_in_squares(tiles, 1 << (WIDE - TILE))
        ground = heights, tiles, wides
        return cls(frame, ground, obstacles.eyes, obstacles.margin, half_curve(refraction))

    def outlooks(
        self,
        window: tuple[slice, slice],
        middle: tuple[float, float],
        beyond: NDArray[np.float32] | None = None,
    ) -> Outlooks:
        """Cells of a window of the raster.

        Parameters
        ----------
        window : tuple of slice
            Rows and columns of the raster.
        middle : tuple of float
            Row and column whose bow serves: of the block, so that the work's order does not matter.
        beyond : ndarray of float32, shape (azimuths, rows, columns), optional
            Horizon of what stands beyond the ground.
        """
        frame = self.frame
        rows, columns = (np.arange(span.start, span.stop) for span in window)
        at = np.stack(np.meshgrid(rows, columns, indexing="ij"), axis=-1)
        lattice = RegularGridInterpolator((frame.rows, frame.columns), frame.jacobian)
        (by_column, by_row), (up_column, up_row) = np.moveaxis(lattice(at), (2, 3), (0, 1))
        grid = np.stack([-up_column, by_column, up_row, -by_row], axis=-1)
        grid /= (by_column * up_row - by_row * up_column)[..., None]
        origin = np.array([rows[0] + self.margin, columns[0] + self.margin], np.float64)
        inside = tuple(slice(s.start + self.margin, s.stop + self.margin) for s in window)
        none = Outlooks.none((0, 0))
        return Outlooks(
            self.ground, origin, np.ascontiguousarray(self.eyes[inside]), grid,
            bow_at(frame, *middle), self.bend, none.beyond if beyond is None else beyond,
        )  # fmt: skip
