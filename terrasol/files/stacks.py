"""Maps of many times in one store: CF-conformant Zarr or NetCDF, written chunk by chunk."""

from __future__ import annotations

import os
import threading
import zlib
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from os import PathLike
from pathlib import Path
from typing import Any, Final, Protocol, Self

import h5netcdf
import h5py
import numcodecs
import numpy as np
import xarray as xr
import zarr
from numpy.typing import NDArray
from pyproj import CRS, Transformer

from terrasol.errors import OutputError, SettingError
from terrasol.files.delivery import Delivery
from terrasol.ground.elevation import Affine6
from terrasol.kernels.rounding import round_off

ENDINGS: Final = {".zarr": "Zarr", ".nc": "NetCDF"}
"""Kinds of stack by the ending of their name."""

CHUNK_CELLS: Final = 128
"""Cells along the side of a chunk: four chunks a block, and one cell through time is read at
the price of so many squared."""

CONVENTIONS: Final = "CF-1.11"

GRID_MAPPING: Final = "crs"

WORD_BYTES: Final = 4

CODECS: Final = {"zstd": "zstd", "deflate": "zlib"}
"""Compressions of a Zarr stack, as Blosc calls them. NetCDF knows deflate only: others need a
plug-in wherever the file is read."""

REFUSALS: Final = (OSError, RuntimeError, ValueError)
"""What a failure to write may come as."""


@dataclass(frozen=True)
class StackVariable:
    """One quantity of a stack.

    Parameters
    ----------
    name : str
        Of the variable.
    unit : str
        As UDUNITS reads it.
    long_name : str
        What the numbers are, in words.
    cell_methods : str
        How a value stands for its interval of time.
    resolution : float
        Values are rounded to multiples of this, a power of two.
    standard_name : str, optional
        The CF standard name, only where one truly fits.
    """

    name: str
    unit: str
    long_name: str
    cell_methods: str
    resolution: float
    standard_name: str | None = None


@dataclass(frozen=True)
class Stack:
    """What a stack holds, of which times and where.

    Parameters
    ----------
    variables : tuple of StackVariable
        Each (time, y, x).
    edges : ndarray of datetime64, shape (times + 1,)
        Of the intervals, UTC, one behind the other.
    shape : tuple of int
        Rows and columns.
    transform : tuple of six floats
        See `Elevation`.
    crs : pyproj.CRS
        Of the grid.
    chunk_times : int
        Times in a chunk.
    attributes : mapping
        Of the whole: title, source, history and the like.
    """

    variables: tuple[StackVariable, ...]
    edges: NDArray[np.datetime64]
    shape: tuple[int, int]
    transform: Affine6
    crs: CRS
    chunk_times: int
    attributes: Mapping[str, str]

    @property
    def times(self) -> int:
        """Number of intervals."""
        return int(self.edges.size) - 1

    @property
    def chunk(self) -> tuple[int, int, int]:
        """Times, rows and columns of a chunk."""
        return (
            min(self.chunk_times, self.times),
            min(CHUNK_CELLS, self.shape[0]),
            min(CHUNK_CELLS, self.shape[1]),
        )


class StackSink(Protocol):
    """Where finished pieces of a stack go; may be called from several threads."""

    def write(
        self, name: str, time: int, row: int, column: int, values: NDArray[np.float32]
    ) -> None:
        """Take some times of a block, shape (times, rows, columns), with its first place."""


def kind_of(path: str | PathLike[str]) -> str:
    """Kind of stack that a name's ending asks for.

    Raises
    ------
    SettingError
        Another ending.
    """
    ending = Path(path).suffix.lower()
    if ending not in ENDINGS:
        raise SettingError(f"{path}: a stack's name ends in {' or '.join(ENDINGS)}")
    return ENDINGS[ending]


def check_stack_free(path: str | PathLike[str], overwrite: bool) -> None:
    """Refuse a name that is taken.

    Raises
    ------
    OutputError
        Something is there and may not be replaced, or is no stack.
    """
    path, kind = Path(path), kind_of(path)
    if not os.path.lexists(path):
        return
    if not overwrite:
        raise OutputError(f"{path} exists: pass --overwrite to replace it, or take another name")
    if path.is_dir() != (kind == "Zarr") or (path.is_dir() and not _is_zarr(path)):
        raise OutputError(f"{path} is no {kind} stack and in the way: remove it")


def _is_zarr(folder: Path) -> bool:
    known = (".zgroup", ".zattrs", ".zmetadata", "zarr.json")
    return any((folder / name).is_file() for name in known) or not any(folder.iterdir())


def open_stack(path: str | PathLike[str]) -> xr.Dataset:
    """A written stack as a dataset whose values are read when they are looked at.

    Raises
    ------
    OutputError
        No such stack, or one that cannot be read.
    """
    engine = "zarr" if kind_of(path) == "Zarr" else "h5netcdf"
    try:
        return xr.open_dataset(path, engine=engine, decode_coords="all", cache=False)
    except REFUSALS as error:
        raise OutputError(f"{path} cannot be read as a stack ({error})") from error


class StackWriter:
    """Write a stack in a hidden folder beside its place, and put it there once it is whole.

    Use it as a context; without `commit` nothing is left behind.

    Parameters
    ----------
    path : path
        Ends in ``.zarr`` or ``.nc``; the folder is made if missing.
    stack : Stack
        What comes.
    compression : {'zstd', 'deflate'}
        For Zarr.
    overwrite : bool
        Whether a stack of that name may be replaced.
    need : int
        Bytes that the work will take; refused at once if they are not free.

    Raises
    ------
    OutputError
        From every method, when the disk refuses or the name is taken.
    """

    def __init__(
        self,
        path: str | PathLike[str],
        stack: Stack,
        *,
        compression: str = "zstd",
        overwrite: bool = False,
        need: int = 0,
    ) -> None:
        self.path = Path(path)
        self.stack = stack
        self.overwrite = overwrite
        self.kind = kind_of(path)
        self._compression = compression
        self._delivery = Delivery(self.path.absolute().parent, (), need=need)
        self._resolution = {v.name: v.resolution for v in stack.variables}
        self._target: Any = None

    def __enter__(self) -> Self:
        """Make the hidden folder and an empty stack in it."""
        check_stack_free(self.path, self.overwrite)
        self._delivery.__enter__()
        try:
            with self._refusals():
                staged = self._delivery.staged(self.path.name)
                if self.kind == "Zarr":
                    self._target = _ZarrTarget(staged, self.stack, self._compression)
                else:
                    self._target = _NetcdfTarget(staged, self.stack)
        except BaseException:
            self._delivery.__exit__()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        """Remove what was not committed."""
        with suppress(*REFUSALS):
            self._target.close()
        self._delivery.__exit__()

    @property
    def scratch(self) -> Path:
        """A hidden folder for work in progress, gone at the end."""
        return self._delivery.staged("scratch")

    def write(
        self, name: str, time: int, row: int, column: int, values: NDArray[np.float32]
    ) -> None:
        """Round some times of a block and write them.

        Parameters
        ----------
        name : str
            Of a variable.
        time, row, column : int
            Of the first value; multiples of the chunk.
        values : ndarray of float32, shape (times, rows, columns)
            NaN where void; to the end of a chunk, or of the stack.
        """
        plain = np.ascontiguousarray(values, np.float32)
        rounded = np.empty_like(plain)
        round_off(plain.reshape(-1), self._resolution[name], np.nan, rounded.reshape(-1))
        with self._refusals():
            self._target.write(name, time, row, column, rounded)

    def commit(self) -> Path:
        """Close the stack and move it to its place."""
        staged = self._delivery.staged(self.path.name)
        with self._refusals():
            self._target.close()
            check_stack_free(self.path, self.overwrite)
            if self.path.is_dir():
                os.rename(self.path, self._delivery.staged("replaced"))
            os.replace(staged, self.path)
            self._delivery.commit()
        return self.path

    @contextmanager
    def _refusals(self) -> Iterator[None]:
        """Turn every failure to write into an OutputError."""
        try:
            yield
        except REFUSALS as error:
            if isinstance(error, OutputError):
                raise
            raise self._delivery.refusal(self.path.name, error) from error


class _ZarrTarget:
    """A Zarr store of format 2, which GDAL 3.10 reads where it does not read format 3."""

    def __init__(self, path: Path, stack: Stack, compression: str) -> None:
        shuffle = numcodecs.Blosc.BITSHUFFLE
        codec = numcodecs.Blosc(CODECS[compression], clevel=1, shuffle=shuffle)
        group = zarr.create_group(path, zarr_format=2, attributes=_global_attributes(stack))
        for name, dims, values, attributes in _coordinates(stack):
            array = group.create_array(
                name, shape=values.shape, dtype=values.dtype, chunks=values.shape or (),
                compressors=codec if values.ndim else None, fill_value=None,
            )  # fmt: skip
            array[...] = values
            array.attrs.update({**attributes, "_ARRAY_DIMENSIONS": list(dims)})
        self._arrays: dict[str, Any] = {}
        for variable in stack.variables:
            array = group.create_array(
                variable.name, shape=(stack.times, *stack.shape), dtype="float32",
                chunks=stack.chunk, compressors=codec, fill_value=np.nan,
            )  # fmt: skip
            attributes = _variable_attributes(variable, stack)
            array.attrs.update({**attributes, "_ARRAY_DIMENSIONS": ["time", "y", "x"]})
            self._arrays[variable.name] = array
        zarr.consolidate_metadata(path, zarr_format=2)

    def write(self, name: str, time: int, row: int, column: int, values: Any) -> None:
        """Write a piece."""
        times, rows, columns = values.shape
        self._arrays[name][time : time + times, row : row + rows, column : column + columns] = (
            values
        )

    def close(self) -> None:
        """Nothing is held open."""


class _NetcdfTarget:
    """A NetCDF-4 file. Chunks are packed here, outside the library's one lock."""

    def __init__(self, path: Path, stack: Stack) -> None:
        self._chunk = stack.chunk
        with h5netcdf.File(path, "w") as target:
            target.attrs.update(_global_attributes(stack))
            rows, columns = stack.shape
            target.dimensions = {"time": stack.times, "y": rows, "x": columns, "bounds": 2}
            for name, dims, values, attributes in _coordinates(stack):
                variable = target.create_variable(name, dims, values.dtype, data=values)
                variable.attrs.update(attributes)
            for wanted in stack.variables:
                variable = target.create_variable(
                    wanted.name, ("time", "y", "x"), "float32", fillvalue=np.float32(np.nan),
                    chunks=stack.chunk, compression="gzip", compression_opts=1, shuffle=True,
                )  # fmt: skip
                variable.attrs.update(_variable_attributes(wanted, stack))
        self._file = h5py.File(path, "r+")
        self._lock = threading.Lock()

    def write(self, name: str, time: int, row: int, column: int, values: Any) -> None:
        """Write a piece, chunk by chunk."""
        times, rows, columns = self._chunk
        for t in range(0, values.shape[0], times):
            for r in range(0, values.shape[1], rows):
                for c in range(0, values.shape[2], columns):
                    part = values[t : t + times, r : r + rows, c : c + columns]
                    if np.isnan(part).all():
                        continue
                    packed = self._packed(part)
                    place = time + t, row + r, column + c
                    with self._lock:
                        self._file[name].id.write_direct_chunk(place, packed)

    def _packed(self, part: Any) -> bytes:
        """A chunk as the file's two filters, shuffle and deflate, would leave it."""
        whole = part
        if part.shape != self._chunk:
            whole = np.full(self._chunk, np.nan, np.float32)
            whole[tuple(slice(size) for size in part.shape)] = part
        plain = np.ascontiguousarray(whole, "<f4").view(np.uint8).reshape(-1, WORD_BYTES)
        return zlib.compress(np.ascontiguousarray(plain.T).data, 1)

    def close(self) -> None:
        """Bring everything to disk."""
        self._file.close()


def _global_attributes(stack: Stack) -> dict[str, str]:
    return {"Conventions": CONVENTIONS, **stack.attributes}


def _variable_attributes(variable: StackVariable, stack: Stack) -> dict[str, Any]:
    attributes = {
        "long_name": variable.long_name,
        "units": variable.unit,
        "cell_methods": variable.cell_methods,
        "grid_mapping": GRID_MAPPING,
    }
    if variable.standard_name:
        attributes["standard_name"] = variable.standard_name
    if not _upright(stack.transform):
        attributes["coordinates"] = "latitude longitude"
    return attributes


def _upright(transform: Affine6) -> bool:
    return transform[1] == 0.0 and transform[3] == 0.0


Coordinate = tuple[str, tuple[str, ...], NDArray[Any], dict[str, Any]]


def _coordinates(stack: Stack) -> list[Coordinate]:
    """Name, dimensions, values and attributes of all that is no quantity."""
    origin = stack.edges[0].astype("M8[D]")
    hours = (stack.edges - origin).astype("m8[s]").astype(np.float64) / 3600.0
    time = {
        "standard_name": "time",
        "long_name": "middle of the interval, UTC",
        "axis": "T",
        "units": f"hours since {origin} 00:00:00",
        "calendar": "standard",
        "bounds": "time_bounds",
    }
    bounds = np.stack([hours[:-1], hours[1:]], axis=1)
    a, b, c, d, e, f = stack.transform
    mapping = {**stack.crs.to_cf(), "GeoTransform": f"{c!r} {a!r} {b!r} {f!r} {d!r} {e!r}"}
    return [
        ("time", ("time",), bounds.mean(axis=1), time),
        ("time_bounds", ("time", "bounds"), bounds, {}),
        (GRID_MAPPING, (), np.array(0, np.int32), mapping),
        *(_axes(stack) if _upright(stack.transform) else _positions(stack)),
    ]


def _axes(stack: Stack) -> Iterator[Coordinate]:
    """Cell centres along x and y."""
    a, _, c, _, e, f = stack.transform
    rows, columns = stack.shape
    known = {axis["axis"]: axis for axis in stack.crs.cs_to_cf() if "axis" in axis}
    for name, first, step, size in (("x", c, a, columns), ("y", f, e, rows)):
        attributes = {"axis": name.upper(), **known.get(name.upper(), {})}
        yield name, (name,), first + step * (np.arange(size) + 0.5), attributes


def _positions(stack: Stack) -> Iterator[Coordinate]:
    """Latitude and longitude of every cell, for a grid whose rows run along no axis."""
    a, b, c, d, e, f = stack.transform
    row, column = np.indices(stack.shape) + 0.5
    assert stack.crs.geodetic_crs is not None
    turn = Transformer.from_crs(stack.crs, stack.crs.geodetic_crs.to_2d(), always_xy=True)
    places = turn.transform(a * column + b * row + c, d * column + e * row + f)
    for name, unit, values in zip(
        ("longitude", "latitude"), ("degrees_east", "degrees_north"), places, strict=True
    ):
        yield name, ("y", "x"), np.asarray(values), {"standard_name": name, "units": unit}
