"""Measured series from NetCDF, whose attributes tell what they can."""

from __future__ import annotations

from dataclasses import dataclass
from os import PathLike
from typing import Any, Final

import numpy as np
import xarray
from numpy.typing import NDArray

from terrasol.errors import InputError
from terrasol.files.station_settings import Column, Settings, listed
from terrasol.files.station_times import Grid, Rows, even_grid, to_utc
from terrasol.files.station_units import unit_of

MAGIC: Final = (b"CDF\x01", b"CDF\x02", b"CDF\x05", b"\x89HDF")

STANDARD_NAMES: Final = {
    "surface_downwelling_shortwave_flux_in_air": "global",
    "integral_wrt_time_of_surface_downwelling_shortwave_flux_in_air": "global",
    "surface_direct_along_beam_shortwave_flux_in_air": "beam",
    "surface_diffuse_downwelling_shortwave_flux_in_air": "diffuse",
    "air_temperature": "temperature",
    "precipitation_amount": "precipitation",
    "surface_snow_amount": "snow_water",
    "lwe_thickness_of_surface_snow_amount": "snow_water",
    "precipitation_flux": "precipitation",
    "lwe_thickness_of_precipitation_amount": "precipitation",
    "surface_albedo": "albedo",
}
"""CF standard names, and the quantity that each is."""

_PLACE_NAMES: Final = {
    "latitude": ("latitude",),
    "longitude": ("longitude",),
    "height": ("altitude", "surface_altitude", "height_above_mean_sea_level"),
}


@dataclass(frozen=True, eq=False)
class Raw:
    """What a NetCDF file holds, rows in the order of the file, units as named."""

    columns: dict[str, NDArray[np.float64]]
    units: dict[str, str]
    grid: Grid
    place: dict[str, Any]


def is_netcdf(head: bytes) -> bool:
    """Whether a file that begins so is NetCDF."""
    return head.startswith(MAGIC)


def read_netcdf(path: str | PathLike[str], said: Settings) -> Raw:
    """Read the series of one place from a NetCDF file.

    Raises
    ------
    InputError
        A file that does not hold what is needed; without its name.
    """
    try:
        dataset = xarray.open_dataset(path)
    except (OSError, ValueError, RuntimeError, KeyError) as error:
        reason = str(error).split("\n")[0]
        raise InputError(f"cannot be opened as NetCDF ({reason})") from error
    with dataset:
        zone = said.needed("time", "zone", '"UTC" (what CF times without an offset are in)')
        time = _time(dataset, said)
        moments = to_utc(time.values.astype("M8[s]"), zone)
        label, interval = _label(dataset, time, said)
        grid = even_grid(moments, label, interval, Rows())
        columns, units = {}, {}
        for quantity, told in _wanted(dataset, said).items():
            variable = dataset[told.column]
            missing = (*listed(said.file.get("missing")), *told.missing)
            columns[quantity] = _values(variable, time, missing)
            unit = told.unit if told.unit is not None else variable.attrs.get("units")
            if unit is None:
                raise InputError(
                    f"variable '{told.column}' has no units: state unit under [columns.{quantity}]"
                    f" in {said.said_in}"
                )
            units[quantity] = unit_of(quantity, str(unit), f"variable '{told.column}':")
        return Raw(columns, units, grid, _place(dataset) | said.place)


def _time(dataset: xarray.Dataset, said: Settings) -> xarray.DataArray:
    name = said.time.get("column", "time")
    if not isinstance(name, str) or name not in dataset.variables:
        known = ", ".join(map(str, dataset.variables))
        raise InputError(
            f"there is no time variable '{name}': write column = \"...\" under [time] in"
            f" {said.said_in}. The file has: {known}"
        )
    time = dataset[name]
    if time.ndim != 1 or time.dtype.kind != "M":
        raise InputError(
            f"variable '{name}' is no series of times of the standard calendar; give it CF units"
            ' as "hours since 2020-01-01 00:00:00"'
        )
    void = np.flatnonzero(np.isnat(time.values))
    if void.size:
        raise InputError(f"entry {void[0] + 1} of '{name}' is no time; leave it out")
    return time


def _label(
    dataset: xarray.Dataset, time: xarray.DataArray, said: Settings
) -> tuple[str, int | float | str | None]:
    """Label and interval, from bounds where the file has them, else as stated."""
    stated, interval = said.time.get("label"), said.time.get("interval")
    name = time.attrs.get("bounds", time.encoding.get("bounds"))
    if name not in dataset.variables:
        if stated is None:
            said.needed("time", "label", '"end" (or "start", "middle"), as there are no bounds')
        return str(stated), interval
    bounds = dataset[name].values.astype("M8[s]")
    first, last = bounds[:, 0], bounds[:, 1]
    moments = time.values.astype("M8[s]")
    found = next(
        (
            label
            for label, edge in (
                ("start", first),
                ("end", last),
                ("middle", first + (last - first) // 2),
            )
            if (moments == edge).all()
        ),
        None,
    )
    if found is None or stated not in (None, found):
        is_now = "at no fixed place within" if found is None else f"at the {found} of"
        raise InputError(
            f"the times stand {is_now} their bounds '{name}'"
            + (f', but label = "{stated}" was stated' if stated else "")
            + "; mend one of them"
        )
    lengths = np.unique((last - first).astype(np.int64))
    if lengths.size != 1:
        raise InputError(f"the intervals in '{name}' have different lengths; they must be alike")
    return found, interval if interval is not None else int(lengths[0])


def _wanted(dataset: xarray.Dataset, said: Settings) -> dict[str, Column]:
    """Which variable is which quantity: as stated, else by standard name."""
    found: dict[str, Column] = {}
    by_name: dict[str, list[str]] = {}
    for name, variable in dataset.data_vars.items():
        quantity = STANDARD_NAMES.get(variable.attrs.get("standard_name", ""))
        if quantity is not None:
            by_name.setdefault(quantity, []).append(str(name))
    wanted = said.columns or {quantity: Column(None, None) for quantity in by_name}
    for quantity, told in wanted.items():
        column = told.column
        if column is None:
            names = by_name.get(quantity, [])
            if len(names) != 1:
                raise InputError(
                    f"{len(names)} variables have a standard name of {quantity}: write column ="
                    f' "..." under [columns.{quantity}] in {said.said_in}'
                )
            column = names[0]
        if column not in dataset.variables:
            series = (
                str(v) for v, it in dataset.data_vars.items() if it.dtype.kind in "fiu" and it.ndim
            )
            known = ", ".join(series)
            raise InputError(f"{quantity}: there is no variable {column!r}; there are: {known}")
        found[quantity] = Column(column, told.unit, told.missing)
    if not found:
        raise InputError(
            f"no variable has a standard name that is known: write [columns.global] with column ="
            f' "..." in {said.said_in}'
        )
    return found


def _values(
    variable: xarray.DataArray, time: xarray.DataArray, missing: tuple[str | float, ...]
) -> NDArray[np.float64]:
    """One number a time."""
    (dimension,) = time.dims
    single = variable.squeeze([d for d, n in variable.sizes.items() if n == 1 and d != dimension])
    if single.dims != (dimension,):
        raise InputError(
            f"variable '{variable.name}' has the dimensions {', '.join(map(str, variable.dims))};"
            " cut out one place first"
        )
    if single.dtype.kind not in "fiu":
        raise InputError(f"variable '{variable.name}' holds no numbers")
    numbers = single.values.astype(np.float64)
    for value in missing:
        if not isinstance(value, str):
            numbers[numbers == float(value)] = np.nan
    return numbers


def _place(dataset: xarray.Dataset) -> dict[str, float]:
    """Latitude, longitude and height where the file has exactly one of each."""
    place = {}
    for key, names in _PLACE_NAMES.items():
        found = [v for v in dataset.variables.values() if v.attrs.get("standard_name") in names]
        if len(found) == 1 and found[0].size == 1:
            place[key] = float(np.ravel(found[0].values)[0])
    return place
