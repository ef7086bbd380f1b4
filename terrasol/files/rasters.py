"""Elevation rasters: reading them into memory, with everything a file may hide made plain."""

from __future__ import annotations

import os
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from numbers import Integral
from os import PathLike
from typing import Any, Final

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.enums import ColorInterp
from rasterio.errors import NotGeoreferencedWarning, RasterioError
from rasterio.windows import Window
from scipy import ndimage, sparse
from scipy.sparse.linalg import spsolve

from terrasol.errors import InputError, SettingError
from terrasol.files.vertical import Reference, resolve_vertical_unit
from terrasol.ground.elevation import METRES_PER_UNIT, Affine6, Elevation
from terrasol.words import counted

LOWEST: Final = -500.0
HIGHEST: Final = 9000.0
"""Heights of ground, m: the Dead Sea's shore lies at about -440, Everest's top at 8849."""

STEPPED_BELOW: Final = 30.0
"""Cell size, m, under which whole metres of height show as steps: one metre over two cells of
30 m is one degree of slope."""

SMALLEST_CELL: Final = 0.001
"""Cell size, m, under which coordinates must be in another unit than their CRS says."""

LARGEST_VOID: Final = 2**31 - 1
"""Most cells of a void that may be filled: more than any raster in memory has."""

STRIP_CELLS: Final = 4_000_000
"""Cells read at a time."""

TIFF_BEGINS: Final = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")
"""First bytes of a TIFF and a BigTIFF, in either byte order."""

METRES_PER_DEGREE: Final = 111_195.0
"""Along a meridian of the mean sphere; serves the two checks of cell size only."""


def read_elevation(
    path: str | PathLike[str], *, vertical_unit: str | None = None, fill_voids: int = 0
) -> Elevation:
    """Read an elevation raster of any format that rasterio opens.

    Masks, alpha, no-data values, NaN, scale and offset are applied here, once. Rotated,
    south-up and non-square grids are kept as they are.

    Parameters
    ----------
    path : path
        A raster with one band.
    vertical_unit : {'metre', 'foot', 'us-foot'}, optional
        Unit of the heights. By default the band's unit, else the unit of the CRS's vertical
        axis, else metres with a warning, but refused where x and y are in feet.
    fill_voids : int
        Interpolate voids of up to this many connected cells; 0 fills none.

    Returns
    -------
    Elevation
        Heights in metres, NaN where void, with the horizontal part of the CRS.

    Raises
    ------
    SettingError
        An unknown vertical unit, or a negative `fill_voids`.
    InputError
        The file is missing, damaged, or no elevation model; the message says what to do.
    """
    return read_with_unit(path, vertical_unit, fill_voids)[0]


def read_with_unit(
    path: str | PathLike[str], vertical_unit: str | None = None, fill_voids: int = 0
) -> tuple[Elevation, str]:
    """Do what `read_elevation` does, and return also the unit that the heights were in."""
    if not isinstance(fill_voids, Integral) or not 0 <= fill_voids <= LARGEST_VOID:
        raise SettingError(
            f"the largest void to fill must be a whole number of cells from 0 to {LARGEST_VOID};"
            f" got {fill_voids}"
        )
    with naming(path), _opened(path) as source:
        _check_kind(source)
        reference = _reference(source)
        transform = _transform(source)
        unit, notes = resolve_vertical_unit(vertical_unit, source.units[0], reference)
        heights = _heights(source, METRES_PER_UNIT[unit])
        stepped = _cell_size(transform, source.shape, reference) < STEPPED_BELOW
        notes += _clean(heights, unit, stepped)
        filled = _fill(heights, fill_voids) if fill_voids else None
        return Elevation(heights, transform, reference.horizontal, filled, notes), unit


@contextmanager
def naming(path: str | PathLike[str]) -> Iterator[None]:
    """Put the file's name before what is wrong with it, unless another one is named."""
    try:
        yield
    except InputError as error:
        if error.file is not None:
            raise
        raise InputError(error.words, path) from error


@contextmanager
def _opened(path: str | PathLike[str]) -> Iterator[Any]:
    """Open a raster for reading, with every failure of GDAL as an InputError."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", NotGeoreferencedWarning)  # _transform says it as an error
        try:
            source = rasterio.open(path)
        except (RasterioError, OSError) as error:
            raise InputError(_why_not_opened(path)) from error
        except TypeError as error:
            raise InputError("this is no name of a file: give one as text or path") from error
        except UnicodeError as error:
            raise InputError("the file's name is not valid Unicode: rename it") from error
    with source:
        yield source


def _why_not_opened(path: str | PathLike[str]) -> str:
    """Say what a name that GDAL cannot open stands for."""
    if os.path.isdir(path):
        return "this is a folder, not a raster file: name a GeoTIFF or another raster"
    if os.path.islink(path) and not os.path.exists(path):
        return "this is a link to a file that is not there: mend the link or name the file itself"
    if not os.path.exists(path):
        return "there is no such file: check its name"
    if os.path.getsize(path) == 0:
        return "the file is empty: fetch it again"
    if not os.access(path, os.R_OK):
        return "the file may not be read: ask its owner for permission"
    with open(path, "rb") as file:
        if file.read(4) in TIFF_BEGINS:
            return "the file begins as a TIFF but is damaged or cut short: fetch it again"
    return "the file cannot be opened as a raster: give a GeoTIFF or another format of GDAL's"


def _check_kind(source: Any) -> None:
    """Refuse rasters that hold anything but one band of real numbers."""
    if source.count == 0:
        raise InputError("the file holds no raster band of its own: name one of its subdatasets")
    kinds = source.colorinterp
    bands = sum(kind != ColorInterp.alpha for kind in kinds)
    if bands != 1 or kinds[0] == ColorInterp.alpha:
        raise InputError(f"the raster has {bands} bands: give one with heights in its only band")
    if kinds[0] == ColorInterp.palette:
        raise InputError("the raster is a picture with a colour table: give one with heights")
    if source.dtypes[0].startswith("complex"):
        raise InputError("the raster holds complex numbers: give one with heights")
    if min(source.shape) < 2:
        raise InputError(
            f"the raster has {counted(source.height, 'row')} and"
            f" {counted(source.width, 'column')}: slope needs at least 2 of each"
        )


def _reference(source: Any) -> Reference:
    """The CRS taken apart."""
    if source.crs is None:
        raise InputError("the raster has no CRS: assign the one its coordinates are in")
    return Reference.from_wkt(source.crs.to_wkt(version="WKT2_2019"))


def _transform(source: Any) -> Affine6:
    """The map from cells to coordinates."""
    if source.transform.is_identity:
        hint = "warp it by its control points first" if source.gcps[0] else "georeference it first"
        raise InputError(f"the raster does not say where its cells lie: {hint}")
    a, b, c, d, e, f = (float(v) for v in tuple(source.transform)[:6])
    if not np.all(np.isfinite([a, b, c, d, e, f])) or a * e - b * d == 0.0:
        raise InputError("the raster's cells have no area: mend its transform")
    return a, b, c, d, e, f


def _cell_size(transform: Affine6, shape: tuple[int, int], reference: Reference) -> float:
    """Side of a square as large as a cell [m], to a few per cent."""
    a, b, _, d, e, f = transform
    if reference.horizontal.is_projected:
        unit = reference.horizontal.axis_info[0].unit_conversion_factor
        size = unit * abs(a * e - b * d) ** 0.5
    else:
        middle = f + d * shape[1] / 2 + e * shape[0] / 2
        shrink = max(float(np.cos(np.radians(middle))), 0.0)
        size = METRES_PER_DEGREE * (abs(a * e - b * d) * shrink) ** 0.5
    if reference.horizontal.is_projected and size < SMALLEST_CELL:
        raise InputError(
            f"cells of {size:.2g} m cannot be: the coordinates are not those of the CRS"
            f" '{reference.horizontal.name}', degrees perhaps; assign the real CRS"
        )
    return size


def _heights(source: Any, metres: float) -> NDArray[np.float32]:
    """All heights in metres; NaN where masked; infinities still in place."""
    scale, offset = source.scales[0], source.offsets[0]
    heights = np.empty(source.shape, np.float32)
    rows = max(1, STRIP_CELLS // source.width)
    for row in range(0, source.height, rows):
        window = Window(0, row, source.width, min(rows, source.height - row))
        try:
            raw = source.read(1, window=window)
            known = source.read_masks(1, window=window)
        except (RasterioError, OSError) as error:
            raise InputError(
                f"the raster cannot be read beyond row {row}: the file is damaged or cut short,"
                " fetch it again"
            ) from error
        strip = heights[row : row + rows]
        with np.errstate(over="ignore", invalid="ignore"):
            np.multiply(raw, scale * metres, out=strip, casting="unsafe", dtype=np.float64)
            strip += np.float32(offset * metres)
        strip[known == 0] = np.nan
    return heights


def _clean(heights: NDArray[np.float32], unit: str, stepped: bool) -> tuple[str, ...]:
    """Make infinities void, refuse what no ground has, and note what a reader should know."""
    notes = []
    infinite = int(np.isinf(heights).sum())
    if infinite:
        heights[np.isinf(heights)] = np.nan
        notes.append(f"{counted(infinite, 'cell')} with an infinite height, taken as void")
    lowest, highest = float(np.fmin.reduce(heights, None)), float(np.fmax.reduce(heights, None))
    if np.isnan(lowest):
        cause = "is infinite or void" if infinite else "is void"
        raise InputError(f"every cell {cause}: there is no height to work with")
    for value in (lowest, highest):
        if not LOWEST <= value <= HIGHEST:
            raise InputError(_absurd(value, unit))
    if stepped and unit == "metre" and all(_whole(row) for row in heights):
        notes.append("the heights are whole metres: the slope of gentle ground comes in steps")
    return tuple(notes)


def _whole(heights: NDArray[np.float32]) -> bool:
    """Whether all known heights are whole numbers."""
    return bool(np.all((heights == np.rint(heights)) | np.isnan(heights)))


def _absurd(value: float, unit: str) -> str:
    """Word what is wrong with a height beyond all ground."""
    stated = value / METRES_PER_UNIT[unit]
    shown = f"{stated:.6g} {unit}" if unit == "metre" else f"{stated:.6g} {unit} ({value:.6g} m)"
    if HIGHEST < value < HIGHEST / METRES_PER_UNIT["foot"] and unit == "metre":
        return (
            f"a height of {shown} is higher than any ground: if the heights are feet say so with"
            " --vertical-unit, if the value means 'no data' declare it in the file"
        )
    return (
        f"a height of {shown} is beyond any ground ({LOWEST:g} to {HIGHEST:g} m): declare the"
        " value as 'no data' in the file if that is what it means, or mend the heights"
    )


def _fill(heights: NDArray[np.float32], largest: int) -> NDArray[np.bool_] | None:
    """Interpolate voids of up to `largest` cells in place and return where, or None.

    Cells that touch at a corner belong to one void. Each filled height is the mean of its
    four neighbours (Laplace's equation), so a void in a plane is filled with the plane.
    """
    labels, _ = ndimage.label(np.isnan(heights), structure=np.ones((3, 3)))
    sizes = np.bincount(labels.ravel())
    sizes[0] = largest + 1
    small = (sizes <= largest)[labels]
    if not small.any():
        return None
    rows, columns = np.nonzero(small)
    unknown = np.full(heights.shape, -1, np.int32)
    unknown[rows, columns] = np.arange(rows.size)
    count, known, links = np.zeros(rows.size), np.zeros(rows.size), []
    for down, right in ((1, 0), (-1, 0), (0, 1), (0, -1)):
        row, column = rows + down, columns + right
        inside = np.flatnonzero(
            (row >= 0) & (row < heights.shape[0]) & (column >= 0) & (column < heights.shape[1])
        )
        row, column = row[inside], column[inside]
        count[inside] += 1
        known[inside] += np.where(small[row, column], 0.0, heights[row, column])
        linked = small[row, column]
        links.append((inside[linked], unknown[row[linked], column[linked]]))
    ends = np.concatenate(links, axis=1)
    matrix = sparse.coo_array((-np.ones(ends.shape[1]), ends), shape=(rows.size, rows.size))
    matrix += sparse.diags_array(count)
    heights[rows, columns] = spsolve(matrix.tocsc(), known)
    return small
