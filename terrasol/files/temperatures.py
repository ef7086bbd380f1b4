"""A station's temperatures for degree-days: a table of days or months, or a measured series."""

from __future__ import annotations

import os
import re
from os import PathLike
from typing import Final

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from terrasol.errors import InputError, SettingError
from terrasol.files.rasters import naming
from terrasol.files.tables import read_station
from terrasol.practice.temperatures import (
    Temperatures,
    from_daily,
    from_hourly,
    from_monthly,
)

COLUMN: Final = re.compile(r"(mean|least|highest)_(c|f)")
"""Columns of a table, with their unit: degrees Celsius or Fahrenheit."""

HINT: Final = (
    "the first column is date (2024-05-31, or 2024-05 for a month) or month (1 to 12), the others"
    " are mean_c, least_c and highest_c, or mean_f, least_f and highest_f"
)
"""What a table looks like."""

COLDEST: Final = -90.0
HOTTEST: Final = 60.0
"""Air temperatures [degC] of the Earth, with room; beyond, the unit is another (judgement)."""

HOURLY: Final = 3 * 3600
"""Longest interval, s, that gives a day's least and highest temperature."""

DAY: Final = 86_400


def read_temperatures(
    path: str | PathLike[str], height: float | None = None, settings: str | None = None
) -> tuple[Temperatures, tuple[str, ...]]:
    """Read temperatures by hour, day or month.

    Parameters
    ----------
    path : path
        A series that ``path.toml`` or `settings` explains, as for `read_station`; else a table
        of text with commas, of days or months, whose columns carry their unit.
    height : float, optional
        Of the station [m]; a table needs it, a series states its own.
    settings : path, optional
        What the columns of a series are.

    Returns
    -------
    temperatures : Temperatures
    notes : tuple of str
        What a careful reader should know.

    Raises
    ------
    SettingError
        A table without a height, or a series with one.
    InputError
        A file that will not do, named, with what to do.
    """
    if settings is not None or os.path.exists(f"{path}.toml"):
        if height is not None:
            raise SettingError(f"{path}: its settings state the station's height: leave it out")
        return _of_series(path, settings)
    if height is None:
        raise SettingError(
            f"{path}: a table does not say how high its station stands: give the height, in metres"
        )
    with naming(path):
        return _of_table(_read(path), height)


def _of_series(
    path: str | PathLike[str], settings: str | None
) -> tuple[Temperatures, tuple[str, ...]]:
    """Daily temperatures of a measured series."""
    station = read_station(path, settings)
    with naming(path):
        values = station.values.get("temperature")
        if values is None:
            raise InputError("the series has no temperature: name its column in the settings")
        if station.seconds <= HOURLY:
            found = from_hourly(
                station.middle, values, height=station.height, longitude=station.longitude
            )
        elif station.seconds == DAY:
            solar = (station.middle + station.solar_offset).astype("M8[D]")
            found = from_daily(solar, height=station.height, mean=values)
        else:
            raise InputError(
                f"an interval of {station.seconds / 3600.0:g} h gives no daily temperatures: give"
                " hours, days, or a table of months"
            )
    return found, station.notes


def _read(path: str | PathLike[str]) -> pd.DataFrame:
    """The table as text."""
    try:
        table = pd.read_csv(path, dtype=str, comment="#", skipinitialspace=True, encoding="utf-8")
    except OSError as error:
        raise InputError(f"the file cannot be read ({error.strerror})") from error
    except (ValueError, UnicodeError) as error:
        raise InputError(f"this is no table of temperatures: {HINT}") from error
    table.columns = pd.Index([str(name).strip().lower() for name in table.columns])
    return table


def _of_table(table: pd.DataFrame, height: float) -> tuple[Temperatures, tuple[str, ...]]:
    """Temperatures of a table of days or months."""
    named = {m[1]: m for m in map(COLUMN.fullmatch, table.columns) if m}
    if not named or table.columns[0] not in ("date", "month"):
        raise InputError(f"this is no table of temperatures: {HINT}")
    values = {name: _celsius(table[found[0]], found[2]) for name, found in named.items()}
    times = table.iloc[:, 0].str.strip()
    if table.columns[0] == "month" or times.str.fullmatch(r"\d{4}-\d{2}").all():
        return from_monthly(height=height, **_by_month(times, values)), ()
    try:
        days = np.array(times.tolist(), "M8[D]")
    except (TypeError, ValueError):
        raise InputError(f"'{_odd(times)}' is no date: {HINT}") from None
    return from_daily(days, height=height, **values), ()


def _odd(times: pd.Series) -> str:
    """The first time that is not a date."""
    return str(times[~times.str.fullmatch(r"\d{4}-\d{2}-\d{2}").fillna(False).astype(bool)].iloc[0])


def _celsius(column: pd.Series, unit: str) -> NDArray[np.float64]:
    """Numbers in degrees Celsius; NaN where there is none."""
    try:
        values = pd.to_numeric(column.str.strip().replace("", None)).to_numpy(np.float64)
    except ValueError as error:
        raise InputError(f"the column {column.name} holds what is no number ({error})") from None
    if unit == "f":
        values = (values - 32.0) / 1.8
    known = values[np.isfinite(values)]
    if not known.size:
        raise InputError(f"the column {column.name} has no value: leave it out, or mend it")
    for value in (known.min(), known.max()):
        if not COLDEST <= value <= HOTTEST:
            raise InputError(
                f"the column {column.name} holds a temperature of {value:.0f} degC, which no air"
                " has: mark missing values by nothing, and state the right unit"
            )
    return values


def _by_month(
    times: pd.Series, values: dict[str, NDArray[np.float64]]
) -> dict[str, NDArray[np.float64]]:
    """Means of each calendar month, January first; NaN where there is none."""
    try:
        month = times.str[-2:].str.replace("-", "").astype(int).to_numpy()
    except ValueError:
        raise InputError(f"the months are no numbers from 1 to 12: {HINT}") from None
    if not ((month >= 1) & (month <= 12)).all():
        raise InputError(f"the months are no numbers from 1 to 12: {HINT}")
    if "mean" not in values:
        if not {"least", "highest"} <= values.keys():
            raise InputError("monthly temperatures need mean, or both least and highest")
        values = {**values, "mean": 0.5 * (values["least"] + values["highest"])}
    found: dict[str, NDArray[np.float64]] = {}
    for name in ("mean", "highest"):
        if name in values:
            by_month = pd.Series(values[name]).groupby(month).mean()
            found[name] = by_month.reindex(range(1, 13)).to_numpy(np.float64)
    return found
