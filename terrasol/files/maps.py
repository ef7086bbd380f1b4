"""Maps of a property of the ground or the sky, brought onto an elevation model's grid."""

from __future__ import annotations

import warnings
from os import PathLike

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.errors import NotGeoreferencedWarning, RasterioError
from rasterio.transform import Affine
from rasterio.warp import Resampling, reproject, transform

from terrasol.errors import InputError
from terrasol.files.rasters import naming
from terrasol.ground.elevation import Elevation


def read_map(
    path: str | PathLike[str], elevation: Elevation, quantity: str, low: float, high: float
) -> NDArray[np.float32]:
    """Read a raster of one band, or of one a month, onto the grid of an elevation model.

    Finer maps are averaged, coarser ones interpolated bilinearly.

    Parameters
    ----------
    path : path
        A raster in any CRS.
    elevation : Elevation
        Whose grid counts.
    quantity : str
        What it is, for messages.
    low, high : float
        Bounds of what it can be.

    Returns
    -------
    ndarray of float32, shape (1 or 12, rows, columns)
        NaN where the map is void or does not reach.

    Raises
    ------
    InputError
        No raster, another number of bands, values out of bounds, or nothing over this ground.
    """
    with naming(path):
        found = _warped(path, elevation)
        known = found[np.isfinite(found)]
        if not known.size:
            raise InputError(f"the map of the {quantity} has no value over this ground")
        least, most = float(known.min()), float(known.max())
        if least < low or most > high:
            hint = "; is it in percent?" if high < most <= 100.0 * high else ""
            raise InputError(
                f"the map of the {quantity} holds values from {least:g} to {most:g}, but it can"
                f" only be {low:g} to {high:g}{hint}"
            )
        return found


def _warped(path: str | PathLike[str], elevation: Elevation) -> NDArray[np.float32]:
    """All bands on the elevation model's grid, read part by part."""
    target = Affine(*elevation.transform)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", NotGeoreferencedWarning)
        try:
            with rasterio.open(path) as source:
                if source.crs is None:
                    raise InputError("the raster has no CRS: assign the one it was made in")
                if source.count not in (1, 12):
                    raise InputError(
                        f"the raster has {source.count} bands: give one, or twelve from January on"
                    )
                found = np.full((source.count, *elevation.shape), np.nan, np.float32)
                finer = _finer(source, elevation)
                for band in range(source.count):
                    reproject(
                        rasterio.band(source, band + 1),
                        found[band],
                        dst_transform=target,
                        dst_crs=elevation.crs.to_wkt(),
                        dst_nodata=np.nan,
                        resampling=Resampling.average if finer else Resampling.bilinear,
                    )
        except (RasterioError, OSError) as error:
            raise InputError("this is not a raster that can be read: check the file") from error
    return found


def _finer(source: rasterio.DatasetReader, elevation: Elevation) -> bool:
    """Whether the map's cells cover less ground than the model's, at the model's middle."""
    rows, columns = elevation.shape
    target = Affine(*elevation.transform)
    corners = [target @ (columns / 2 + i, rows / 2 + j) for i, j in ((0, 0), (1, 0), (0, 1))]
    x, y = transform(elevation.crs.to_wkt(), source.crs, *zip(*corners, strict=True))
    inverse = ~source.transform
    (c0, r0), (c1, r1), (c2, r2) = (inverse @ place for place in zip(x, y, strict=True))
    covered = abs((c1 - c0) * (r2 - r0) - (c2 - c0) * (r1 - r0))  # in the map's cells
    return covered > 1.0
