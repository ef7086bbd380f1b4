"""Small rasters made for a test."""

import numpy as np
import rasterio
from rasterio import Affine

UTM = "EPSG:32632"
GRID = Affine(50, 0, 4e5, 0, -50, 5.15e6)


def hills(rows=40, columns=48):
    """Gentle hills with broken metres."""
    y, x = np.mgrid[0:rows, 0:columns].astype(float)
    return 800.3 + 90 * np.sin(x / 7 + y / 19) * np.cos(y / 8) + 1.7 * x


def write_raster(path, values=None, *, crs=UTM, transform=GRID, unit=None, after=None, **profile):
    """Write a GeoTIFF, by default of hills in UTM, and return its path.

    `after` is called with the dataset before it is closed, to set what has no own argument.
    """
    values = np.asarray(hills() if values is None else values)
    values = values if values.ndim == 3 else values[None]
    if values.dtype == np.float64:
        values = values.astype(np.float32)
    count, height, width = values.shape
    profile = {
        "driver": "GTiff", "count": count, "height": height, "width": width,
        "dtype": values.dtype, "transform": transform,
    } | profile  # fmt: skip
    if crs is not None:
        profile["crs"] = rasterio.CRS.from_user_input(crs)
    with rasterio.open(path, "w", **profile) as target:
        target.write(values)
        if unit is not None:
            target.units = [unit] * count
        if after is not None:
            after(target)
    return path
