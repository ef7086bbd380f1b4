"""Slope, aspect and normals of a block of ground."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import FLAT_SLOPE_DEG
from terrasol.ground.frame import Frame
from terrasol.kernels.surface import normals, slope_aspect


def block_normals(
    padded: NDArray[np.float32], pad: int, frame: Frame, row: int, column: int
) -> NDArray[np.float32]:
    """Unit normals of a block, towards true east, north and up.

    Parameters
    ----------
    padded : ndarray of float32, shape (rows + 2 pad, columns + 2 pad)
        Heights with their surroundings [m]; NaN where void or outside.
    pad : int
        Cells around the block.
    frame : Frame
        The raster's place on the Earth.
    row, column : int
        The block's first cell in the raster.

    Returns
    -------
    ndarray of float32, shape (3, rows, columns)
        NaN where the cell or all that surrounds it is void.

    Notes
    -----
    Gradient by the window of Horn (1981), doi:10.1109/PROC.1981.11918, one-sided at voids
    and rims; turned to true east and north by the Jacobian of each cell.
    """
    rows, columns = padded.shape[0] - 2 * pad, padded.shape[1] - 2 * pad
    corners = np.empty((2, 2, 2, 2))
    for i in range(2):
        for j in range(2):
            place = row + i * rows - 0.5, column + j * columns - 0.5
            corners[i, j] = frame.jacobian_at(*place)
    normal = np.empty((3, rows, columns), np.float32)
    normals(padded, pad, corners, normal)
    return normal


def slope_and_aspect(
    normal: NDArray[np.float32],
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Slope and aspect of normals.

    Parameters
    ----------
    normal : ndarray of float32, shape (3, rows, columns)
        East, north and up.

    Returns
    -------
    slope : ndarray of float32, shape (rows, columns)
        Degrees from the level.
    aspect : ndarray of float32, shape (rows, columns)
        Downslope direction, degrees clockwise from true north; NaN on ground flatter than
        ``constants.FLAT_SLOPE_DEG``.
    """
    slope = np.empty(normal.shape[1:], np.float32)
    aspect = np.empty_like(slope)
    slope_aspect(normal, FLAT_SLOPE_DEG, slope, aspect)
    return slope, aspect
