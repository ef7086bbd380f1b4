"""The same ground in coarser cells: how much a result depends on the cell size."""

from __future__ import annotations

from numbers import Integral

import numpy as np
from numpy.typing import NDArray

from terrasol.errors import SettingError
from terrasol.ground.elevation import Elevation


def coarsened(elevation: Elevation, factor: int) -> Elevation:
    """Join cells of an elevation model, square by square.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    factor : int
        Cells along the side of a new cell; 1 gives the model itself.

    Returns
    -------
    Elevation
        The mean height of each square of cells of which at least half are known, else void.
        Counted from the raster's first cell. At the far rims squares stay of which at least half
        of the side lies on the raster; what is left beyond them is cut off.

    Raises
    ------
    SettingError
        A factor under 1, or one that leaves fewer than two rows or columns.

    Examples
    --------
    >>> import numpy as np
    >>> fine = Elevation.from_array(
    ...     np.arange(16.0).reshape(4, 4), (10, 0, 5e5, 0, -10, 5.2e6), "EPSG:32632"
    ... )
    >>> coarsened(fine, 2).heights.tolist()
    [[2.5, 4.5], [10.5, 12.5]]
    """
    if not isinstance(factor, Integral) or factor < 1:
        raise SettingError(f"cells are joined by a whole number from 1 on; got {factor!r}")
    if factor == 1:
        return elevation
    if min(_squares(size, factor) for size in elevation.shape) < 2:
        raise SettingError(
            f"{factor} x {factor} cells joined leave fewer than two rows or columns of the"
            f" raster's {elevation.shape[0]} x {elevation.shape[1]} cells: choose smaller cells"
        )
    a, b, c, d, e, f = elevation.transform
    transform = (a * factor, b * factor, c, d * factor, e * factor, f)
    heights = _square_means(elevation.heights, factor)
    return Elevation(heights, transform, elevation.crs, None, elevation.warnings)


def coarsened_map(layers: NDArray[np.float32], factor: int) -> NDArray[np.float32]:
    """Join the cells of a map, shape (layers, rows, columns), as `coarsened` does the ground's."""
    return layers if factor == 1 else np.stack([_square_means(each, factor) for each in layers])


def _squares(size: int, factor: int) -> int:
    """Squares along a side, with one at the rim of which half lies on the raster."""
    return (size + factor // 2) // factor


def _square_means(heights: NDArray[np.float32], factor: int) -> NDArray[np.float32]:
    """Means of squares of cells, NaN where fewer than half of one's cells are known."""
    rows, columns = (_squares(size, factor) for size in heights.shape)
    out = np.empty((rows, columns), np.float32)
    width = min(columns * factor, heights.shape[1])
    for row in range(rows):
        strip = heights[row * factor : (row + 1) * factor, :width]
        padded = np.full((strip.shape[0], columns * factor), np.nan)
        padded[:, :width] = strip
        squares = padded.reshape(strip.shape[0], columns, factor)
        known = np.isfinite(squares).sum(axis=(0, 2))
        there = strip.shape[0] * np.minimum(factor, width - factor * np.arange(columns))
        total = np.nansum(squares, axis=(0, 2))
        out[row] = np.where(2 * known >= there, total / np.maximum(known, 1), np.nan)
    return out
