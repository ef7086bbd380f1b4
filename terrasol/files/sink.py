"""Finished blocks into cloud-optimised GeoTIFFs."""

from __future__ import annotations

import errno
import os
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor, as_completed
from contextlib import contextmanager, suppress
from functools import reduce
from pathlib import Path
from typing import Any, Final, Self

import numpy as np
import rasterio
import rasterio.shutil
from numpy.typing import NDArray
from pyproj import CRS
from rasterio._err import CPLE_BaseError
from rasterio.enums import Resampling
from rasterio.errors import RasterioError
from rasterio.windows import Window

from terrasol.constants import VOID
from terrasol.errors import OutputError
from terrasol.files.delivery import Delivery
from terrasol.files.layers import Layer
from terrasol.ground.elevation import Affine6
from terrasol.kernels.rounding import round_off

TILE: Final = 256
"""Cells along the side of a file's tile: as large as a block, so none is written twice."""

STATUS_VOID: Final = 255
"""No-data value of the status raster."""

FIRST_OVERVIEW: Final = 4
"""Factor of the finest overview. Full resolution serves down to a quarter well enough, and
an overview of every second cell would make a file a quarter larger and slower to write."""

CACHE_BYTES: Final = 256 * 2**20
"""What GDAL may keep in memory."""

COMPRESSIONS: Final = {
    "zstd": {"COMPRESS": "ZSTD", "LEVEL": "1"},
    "deflate": {"COMPRESS": "DEFLATE", "LEVEL": "1"},
}
"""Zstandard writes twice as fast as DEFLATE at the same size (docs/performance.md); DEFLATE is
for software that does not know Zstandard. Higher levels take longer and win a few per cent."""

REFUSALS: Final = (RasterioError, CPLE_BaseError, OSError, UnicodeError)
"""What a failure to write may come as; rasterio lets some of GDAL's own errors through, and
takes no name that is not valid Unicode."""


class RasterSink:
    """Write layers as cloud-optimised GeoTIFFs on one grid.

    Blocks go to uncompressed working copies; `finish` turns each into its final form. Both
    lie in the delivery's hidden folder, so that an unfinished file never has a final name.

    Parameters
    ----------
    delivery : Delivery
        Where the files go, under the layers' names with the ending ``.tif``.
    transform : tuple of six floats
        See `Elevation`.
    crs : pyproj.CRS
        Of the grid.
    shape : tuple of int
        Rows and columns.
    tags : mapping
        Tags for every file.
    compression : {'zstd', 'deflate'}
        How the files are packed.
    threads : int
        For packing.

    Raises
    ------
    OutputError
        From every method, when the disk refuses.
    """

    def __init__(
        self,
        delivery: Delivery,
        transform: Affine6,
        crs: CRS,
        shape: tuple[int, int],
        *,
        tags: Mapping[str, str] | None = None,
        compression: str = "zstd",
        threads: int = 2,
    ) -> None:
        self.delivery = delivery
        self.shape = shape
        self.transform = rasterio.Affine(*transform)
        self.crs = rasterio.CRS.from_wkt(crs.to_wkt())
        self.tags = dict(tags or {})
        self.compression = compression
        self.threads = threads
        self._copies: dict[str, _WorkingCopy] = {}
        _check_codec(compression)

    def __enter__(self) -> Self:
        """Enter a context that closes what is open at its end."""
        return self

    def __exit__(self, *_: object) -> None:
        """Close the working copies of a run that did not finish; the delivery removes them."""
        for copy in self._copies.values():
            with suppress(*REFUSALS):
                copy.close()
        self._copies.clear()

    def open(self, layer: Layer) -> None:
        """Make a working copy for a layer."""
        with self._refusals(f"{layer.name}.tif"):
            path = self.delivery.staged(f"working-{layer.name}.tif")
            copy = _WorkingCopy(path, layer, self.shape, self.transform, self.crs)
            self._copies[layer.name] = copy
            copy.label(self.tags)

    def write(self, name: str, row: int, column: int, values: NDArray[np.generic]) -> None:
        """Round a block and write it.

        Parameters
        ----------
        name : str
            Of a layer opened before.
        row, column : int
            Of the block's upper left cell; multiples of `TILE`.
        values : ndarray, shape (bands, rows, columns)
            Void is NaN.
        """
        with self._refusals(f"{name}.tif"):
            self._copies[name].write(row, column, values)

    def finish(self, progress: Callable[[float], None] = lambda share: None) -> None:
        """Pack every layer into its final file, and check that it says what it should.

        Parameters
        ----------
        progress : callable, optional
            Told the share done.
        """
        copies = sorted(self._copies.values(), key=lambda copy: -len(copy.layer.bands))
        whole = sum(len(copy.layer.bands) for copy in copies)
        done = 0
        with ThreadPoolExecutor(self.threads) as pool:
            tasks = {pool.submit(self._pack, copy): copy for copy in copies}
            for task in as_completed(tasks):
                task.result()
                done += len(tasks[task].layer.bands)
                progress(done / whole)
        self._copies.clear()

    def _pack(self, copy: _WorkingCopy) -> None:
        """One working copy into its final file."""
        name = f"{copy.layer.name}.tif"
        with self._refusals(name):
            copy.close()
            copy.check_whole()
            final = self.delivery.staged(name)
            copy.pack(final, COMPRESSIONS[self.compression], self.threads)
            copy.remove()
            _check_labels(final, copy.layer)

    @contextmanager
    def _refusals(self, name: str) -> Iterator[None]:
        """Limit GDAL's memory, and turn every failure to write into an OutputError."""
        try:
            with rasterio.Env(GDAL_CACHEMAX=CACHE_BYTES):
                yield
        except REFUSALS as error:
            raise self.delivery.refusal(name, error) from error


class _WorkingCopy:
    """One layer on disk, uncompressed, with its first overview in a file beside it."""

    def __init__(
        self,
        path: Path,
        layer: Layer,
        shape: tuple[int, int],
        transform: rasterio.Affine,
        crs: rasterio.CRS,
    ) -> None:
        self.path = path
        self.layer = layer
        self.shape = shape
        self.coarse_path = Path(f"{path}.ovr")  # where GDAL looks for overviews
        grid = {"transform": transform, "crs": crs}
        self._fine = self._create(path, shape, grid)
        self._coarse: Any = None
        if max(shape) > TILE:
            coarse_shape = -(-shape[0] // FIRST_OVERVIEW), -(-shape[1] // FIRST_OVERVIEW)
            self._coarse = self._create(self.coarse_path, coarse_shape, grid)

    def _create(self, path: Path, shape: tuple[int, int], grid: dict[str, Any]) -> Any:
        return rasterio.open(
            path,
            "w",
            driver="GTiff",
            height=shape[0],
            width=shape[1],
            count=len(self.layer.bands),
            dtype=self.layer.dtype,
            nodata=_nodata(self.layer),
            tiled=True,
            blockxsize=TILE,
            blockysize=TILE,
            interleave="band",
            BIGTIFF="IF_SAFER",
            **grid,
        )

    def label(self, tags: Mapping[str, str]) -> None:
        """Write names, unit and tags."""
        layer, target = self.layer, self._fine
        names = {"standard_name": layer.standard_name} if layer.standard_name else {}
        target.update_tags(**tags, **layer.tags)
        target.descriptions = layer.bands
        target.units = layer.units
        for i, unit in enumerate(layer.units):
            words = layer.band_names[i] if layer.band_names else layer.long_name
            target.update_tags(i + 1, long_name=words, units=unit, **names)

    def write(self, row: int, column: int, values: NDArray[Any]) -> None:
        """Write a block, and its part of the first overview."""
        _put(self._fine, row, column, _rounded(values, self.layer))
        if self._coarse is not None:
            coarse = _rounded(_coarser(values, self.layer), self.layer)
            _put(self._coarse, row // FIRST_OVERVIEW, column // FIRST_OVERVIEW, coarse)

    def close(self) -> None:
        """Bring everything to disk."""
        self._fine.close()
        if self._coarse is not None:
            self._coarse.close()

    def check_whole(self) -> None:
        """Raise OSError if the disk did not take the whole copy."""
        size = self.shape[0] * self.shape[1] * len(self.layer.bands)
        if self.path.stat().st_size < size * np.dtype(self.layer.dtype).itemsize:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    def pack(self, final: Path, compression: Mapping[str, str], threads: int) -> None:
        """Write the final file, with all overviews."""
        factors = _further_factors(self.shape)
        if self._coarse is not None and factors:
            with rasterio.open(self.coarse_path, "r+") as target:
                target.build_overviews(factors, _overview_method(self.layer))
        rasterio.shutil.copy(
            self.path,
            final,
            driver="COG",
            BLOCKSIZE=str(TILE),
            PREDICTOR="YES",
            OVERVIEWS="NONE" if self._coarse is None else "FORCE_USE_EXISTING",
            BIGTIFF="IF_SAFER",
            NUM_THREADS=str(threads),
            **compression,
        )

    def remove(self) -> None:
        """Free the disk."""
        self.path.unlink()
        self.coarse_path.unlink(missing_ok=True)


def _put(target: Any, row: int, column: int, values: NDArray[Any]) -> None:
    target.write(values, window=Window(column, row, values.shape[2], values.shape[1]))


def _nodata(layer: Layer) -> float:
    return VOID if layer.dtype.startswith("float") else STATUS_VOID


def _rounded(values: NDArray[Any], layer: Layer) -> NDArray[Any]:
    """Values at the layer's resolution, void as the no-data value."""
    if not layer.dtype.startswith("float"):
        return np.asarray(values, layer.dtype)
    plain = np.ascontiguousarray(values, np.float32)
    out = np.empty_like(plain)
    round_off(plain.reshape(-1), layer.resolution, VOID, out.reshape(-1))
    out += np.float32(0.0)  # no minus before a zero
    return out


def _overview_method(layer: Layer) -> Resampling:
    """How cells merge: codes and directions have no mean."""
    if layer.dtype.startswith("float") and layer.standard_name != "ground_slope_direction":
        return Resampling.average
    return Resampling.nearest


def _coarser(values: NDArray[Any], layer: Layer) -> NDArray[Any]:
    """Merge squares of `FIRST_OVERVIEW` cells; at the rim the last cells count again."""
    step = FIRST_OVERVIEW
    spare = [(0, 0), *((0, -size % step) for size in values.shape[1:])]
    if any(behind for _, behind in spare):
        values = np.pad(values, spare, mode="edge")
    bands, rows, columns = values.shape
    if _overview_method(layer) is Resampling.nearest:
        return values[:, step // 2 :: step, step // 2 :: step]
    # Sums of slices take a quarter of the time of sums over reshaped axes.
    lines = reduce(np.add, (values[:, k::step] for k in range(step)))
    mean = reduce(np.add, (lines[:, :, k::step] for k in range(step))) / step**2
    void = np.isnan(mean)
    if void.any():
        squares = values.reshape(bands, rows // step, step, columns // step, step)
        cells = squares.transpose(0, 1, 3, 2, 4)[void].reshape(-1, step**2)
        known = np.isfinite(cells).sum(axis=1)
        mean[void] = np.nansum(cells, axis=1) / np.where(known, known, np.nan)
    return mean


def _further_factors(shape: tuple[int, int]) -> list[int]:
    """Factors from the first overview to the next ones, until the last fits into a tile.

    Examples
    --------
    >>> _further_factors((500, 600)), _further_factors((4000, 90))
    ([], [2, 4])
    """
    coarse, factors = max(shape) / FIRST_OVERVIEW, [1]
    while coarse / factors[-1] > TILE:
        factors.append(2 * factors[-1])
    return factors[1:]


def _check_codec(compression: str) -> None:
    """Raise OutputError if this build of GDAL lacks a compression, which it would drop silently."""
    codec = COMPRESSIONS[compression]["COMPRESS"]
    grid = rasterio.Affine.translation(1, 1)
    profile = {"driver": "GTiff", "width": 1, "height": 1, "count": 1, "dtype": "uint8"}
    with rasterio.MemoryFile() as memory:
        with memory.open(**profile, transform=grid, compress=codec):
            pass
        with memory.open() as source:
            if source.profile.get("compress", "").upper() != codec:
                raise OutputError(f"this GDAL cannot write {codec}: choose another --compression")


def _check_labels(final: Path, layer: Layer) -> None:
    """Raise OSError if the final file lost its band descriptions, unit or no-data value."""
    with rasterio.open(final) as source:
        stated = source.descriptions, source.units, source.nodata
    if stated != (layer.bands, layer.units, _nodata(layer)):
        raise OSError(f"labels were lost: {stated}")
