"""A surface model over bare ground: what trees and buildings hide."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.errors import InputError
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import LATTICE_CELLS, make_frame
from terrasol.ground.places import Locator, PlaceMap, coordinates, heights_at

MOST_SAMPLES: Final = 8
"""Most samples along a cell's side when a finer surface model is averaged over it."""

TOLERANCE: Final = 1.0
"""Metres by which a surface may lie below the ground before it is counted (judgement, no
source)."""

MOST_BELOW: Final = 0.05
"""Share of cells below the ground, by more than TOLERANCE, from which something is wrong."""

MOST_MISSING: Final = 0.01
"""Share of known ground that a surface model may leave out."""

ODDLY_HIGH: Final = 30.0
"""Median height of a surface over the ground [m] from which datum or unit is in doubt."""

STRIP_CELLS: Final = 2_000_000
"""Cells worked on at a time."""


def surface_heights(
    elevation: Elevation, surface: Elevation
) -> tuple[NDArray[np.float32], tuple[str, ...]]:
    """Heights of a surface model on the grid of the bare ground.

    On the same grid they are taken as they are. From another grid or CRS a cell gets the mean
    of n x n bilinear samples spread evenly over it, with n the number of surface cells along
    its side, 1 to MOST_SAMPLES.

    Parameters
    ----------
    elevation : Elevation
        The bare ground.
    surface : Elevation
        The surface model, in any CRS.

    Returns
    -------
    heights : ndarray of float32, shape (rows, columns)
        NaN where unknown [m].
    warnings : tuple of str
        What a careful reader should know.

    Raises
    ------
    InputError
        It leaves out part of the ground, or lies below it: probably the two are swapped.
    """
    heights = surface.heights if _same_grid(elevation, surface) else _resampled(elevation, surface)
    ground = elevation.heights
    known = np.isfinite(ground)
    over = (heights - ground)[known]
    missing = float(np.isnan(over).mean())
    if missing > MOST_MISSING:
        raise InputError(
            f"the surface model leaves out {100 * missing:.3g} % of the ground: give one that"
            " covers the whole raster, or check its CRS"
        )
    notes = [f"surface model: {text}" for text in surface.warnings]
    if missing > 0.0:
        notes.append(
            f"the surface model is void over {np.isnan(over).sum()} cells of known ground:"
            " there the bare ground stands in for it"
        )
    return heights, (*notes, *_doubts(over[np.isfinite(over)]))


def _doubts(over: NDArray[np.float32]) -> list[str]:
    """Notes on heights of a surface over the ground [m]; raises InputError if it lies below."""
    notes = []
    below, above = (float((sign * over > TOLERANCE).mean()) for sign in (-1.0, 1.0))
    median = float(np.median(over))
    if below > MOST_BELOW:
        told = (
            f"the surface model lies more than {TOLERANCE:g} m below the ground in"
            f" {100 * below:.0f} % of the cells"
        )
        if below >= above:
            raise InputError(
                f"{told}, {-median:.1f} m in the median: the surface model and the ground are"
                " probably swapped, or their vertical datums or units differ"
            )
        notes.append(f"{told}: there the ground stands in for it")
    if median > ODDLY_HIGH:
        notes.append(
            f"the surface model stands {median:.0f} m above the ground (median): check the vertical"
            " datum and unit of both"
        )
    return notes


def _same_grid(elevation: Elevation, surface: Elevation) -> bool:
    """Whether two models share their cells, to a thousandth of one."""
    if elevation.shape != surface.shape or elevation.crs != surface.crs:
        return False
    rows, columns = elevation.shape
    corner = np.array([0.0, rows - 1.0]), np.array([0.0, columns - 1.0])
    row, column = Locator(elevation.crs, surface)(*coordinates(elevation, *corner))
    return bool(max(np.abs(row - corner[0]).max(), np.abs(column - corner[1]).max()) < 1e-3)


def _resampled(elevation: Elevation, surface: Elevation) -> NDArray[np.float32]:
    """Bilinear heights of another grid, averaged over each cell if that grid is finer."""
    rows, columns = elevation.shape
    locate = Locator(elevation.crs, surface)
    places = PlaceMap.of(
        lambda row, column: locate(*coordinates(elevation, row, column)),
        ((-0.5, rows - 0.5), (-0.5, columns - 0.5)),
        LATTICE_CELLS,
    )
    own = make_frame(elevation.shape, elevation.transform, elevation.crs).cell_size
    other = make_frame(surface.shape, surface.transform, surface.crs).cell_size
    count = int(np.clip(np.ceil(min(own) / min(other) - 0.01), 1, MOST_SAMPLES))
    offsets = (np.arange(count) + 0.5) / count - 0.5
    out = np.empty(elevation.shape, np.float32)
    strip = max(1, STRIP_CELLS // columns)
    for top in range(0, rows, strip):
        grid = np.meshgrid(
            np.arange(top, min(top + strip, rows)), np.arange(columns), indexing="ij"
        )
        total, found = np.zeros(grid[0].shape), np.zeros(grid[0].shape)
        for down in offsets:
            for right in offsets:
                sample = heights_at(surface, *places(grid[0] + down, grid[1] + right))
                total += np.nan_to_num(sample)
                found += np.isfinite(sample)
        with np.errstate(invalid="ignore"):
            out[top : top + strip] = total / found
    return out
