"""Measured series from tables of text and from NetCDF."""

from __future__ import annotations

import csv
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from os import PathLike
from typing import Any, Final

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from terrasol.errors import InputError
from terrasol.files.station_cf import is_netcdf, read_netcdf
from terrasol.files.station_settings import (
    SEPARATORS,
    TIME_PARTS,
    Settings,
    listed,
    read_settings,
)
from terrasol.files.station_times import Grid, Rows, even_grid, join_parts, parse_times
from terrasol.files.station_units import converter, radiation_factors, unit_of
from terrasol.sky.quality import LIGHT, OTHER_LIMITS, refuse_wrong_unit
from terrasol.sky.station import Station
from terrasol.sky.warmth import too_warm

NO_VALUE: Final = ("", "nan", "na", "n/a", "null")
"""Texts, in any case, that stand for a missing number in every file."""

_SNIFFED: Final = ("\t", ";", ",", "|", None)
_SNIFFED_ROWS: Final = 50


def read_station(
    path: str | PathLike[str],
    settings: str | PathLike[str] | Mapping[str, Any] | None = None,
    **overrides: Any,
) -> Station:
    """Read a measured series from a text table or a NetCDF file.

    Parameters
    ----------
    path : path
        Text with a row a time and columns parted by commas, semicolons, tabs, bars or blanks;
        or NetCDF with a time coordinate.
    settings : path or mapping, optional
        What the columns are: a TOML file, or the same as a mapping. By default
        ``<path>.toml``, if there is one. The keys are in docs/station.md.
    **overrides
        Single keys that win over the TOML file: ``latitude=45.3``, ``zone="UTC"``,
        ``label="end"``, ``columns={"global": {"column": 5, "unit": "W/m2"}}``.

    Returns
    -------
    Station
        In UTC, by the beginning of each interval, in terrasol's units; NaN where a value or
        a row is missing. `Station.notes` say what a careful reader should know.

    Raises
    ------
    SettingError
        An override that is unknown or out of range.
    InputError
        A file or settings file that will not do: the message names the file, the line, and
        what to do. So are zone, label, latitude, longitude, height or a unit not stated,
        and values that can only be in another unit than stated.

    Notes
    -----
    Zone and label are never guessed: a mistaken half hour shifts east and west slopes by 13
    to 15 % against each other. Zones with daylight saving in the series' span are refused.
    """
    said = read_settings(path, settings, overrides)
    with _naming(path):
        try:
            with open(path, "rb") as file:
                head = file.read(8)
        except OSError as error:
            raise InputError(f"cannot be read ({error.strerror})") from error
        if is_netcdf(head):
            raw = read_netcdf(path, said)
            columns, units, grid, place = raw.columns, raw.units, raw.grid, raw.place
        else:
            columns, grid = _read_text(path, said)
            units = _units(said)
            place = said.place
        return _station(path, said, columns, units, grid, place)


def _station(
    path: str | PathLike[str],
    said: Settings,
    columns: dict[str, NDArray[np.float64]],
    units: dict[str, str],
    grid: Grid,
    place: Mapping[str, Any],
) -> Station:
    """Put everything together, and refuse units that cannot be."""
    values = {}
    for quantity, read in columns.items():
        if not np.isfinite(read).any():
            raise InputError(f"{quantity} has no value at all; leave the column out, or mend it")
        full = np.full(grid.start.size, np.nan)
        full[grid.place] = converter(quantity, units[quantity], grid.seconds)(read)
        values[quantity] = full
    latitude, longitude, height = (
        float(place[key] if key in place else said.needed("place", key, example))
        for key, example in (("latitude", "45.3"), ("longitude", "5.77"), ("height", "1325.0"))
    )
    name = str(place.get("name", _stem(path)))
    station = Station(
        name=name,
        latitude=latitude,
        longitude=longitude,
        height=height,
        start=grid.start,
        seconds=grid.seconds,
        values=values,
        notes=tuple(f"{name}: {note}" for note in grid.notes),
    )
    if said.file.get("check_units", True):
        for quantity in values:
            _refuse_wrong(station, quantity, units[quantity])
    return station


def _refuse_wrong(station: Station, quantity: str, unit: str) -> None:
    """Refuse values that can only be in another unit."""
    if quantity in LIGHT:
        refuse_wrong_unit(station, quantity, unit, radiation_factors(station.seconds))
        return
    low, high = OTHER_LIMITS[quantity]
    typical = float(np.nanmedian(station.values[quantity]))
    if not low <= typical <= high:
        raise InputError(
            f"{quantity} cannot be in {unit}: half of it lies beyond {typical:.4g}, and {low:g} to"
            f" {high:g} is believable. Mend the unit; if the values are right, say check_units ="
            " false"
        )
    if quantity == "temperature":
        _refuse_too_warm(station, unit)


def _refuse_too_warm(station: Station, unit: str) -> None:
    """Refuse air that is warmer than any can be where it was measured: degF, as a rule."""
    found = too_warm(station)
    if found is None:
        return
    fits = "; degF would fit" if found.in_fahrenheit and unit == "degC" else ""
    raise InputError(
        f"temperature cannot be in {unit}: from {found.first} to {found.last} its mean is"
        f" {found.mean:.0f} degC, and with the sun of that season at {abs(station.latitude):.0f}"
        f" degrees {'north' if station.latitude >= 0.0 else 'south'} and {station.height:.0f} m no"
        f" more than {found.most:.0f} is believable{fits}. Mend the unit, or latitude or height if"
        " they are wrong; if the values are right, say check_units = false"
    )


def _units(said: Settings) -> dict[str, str]:
    """The stated unit of each column of a text file."""
    units = {}
    for quantity, column in said.columns.items():
        if column.unit is None:
            raise InputError(
                f'the unit of {quantity} is not known: write unit = "..." under'
                f" [columns.{quantity}] in {said.said_in}"
            )
        units[quantity] = unit_of(quantity, column.unit, said.said_in)
    return units


@contextmanager
def _naming(path: str | PathLike[str]) -> Iterator[None]:
    """Put the file's whole name before what is wrong with it."""
    try:
        yield
    except InputError as error:
        raise InputError(error.words, path) from error


def _stem(path: str | PathLike[str]) -> str:
    return str(path).replace("\\", "/").rsplit("/", 1)[-1]


@dataclass(frozen=True)
class _Table:
    """The columns of a text file that are asked for."""

    header: list[str]
    texts: dict[int, list[str]]
    row: Rows

    def column(self, wanted: str | int, what: str) -> list[str]:
        """Texts of one column, by header or number from 1."""
        return self.texts[_place(self.header, wanted, what)]


def _place(header: list[str], wanted: str | int, what: str) -> int:
    """Which column is meant, the first is 0."""
    if isinstance(wanted, int):
        if wanted < 1:
            raise InputError(f"{what}: column {wanted} does not exist, the first is 1")
        return wanted - 1
    places = [i for i, name in enumerate(header) if name == wanted.strip()]
    if len(places) == 1:
        return places[0]
    found = "comes more than once" if places else "does not exist"
    raise InputError(
        f"{what}: column {wanted!r} {found}; there are: {', '.join(map(repr, header))}."
        " A number, the first is 1, names a column too"
    )


def _read_text(
    path: str | PathLike[str], said: Settings
) -> tuple[dict[str, NDArray[np.float64]], Grid]:
    """Read the columns of a text file, and where its rows stand in time."""
    if not said.columns:
        raise InputError(
            f"no column is known: write [columns.global] with column and unit in {said.said_in}"
        )
    zone = said.needed("time", "zone", '"UTC"')
    label = said.needed("time", "label", '"end" (or "start", "middle")')
    table = _cut(path, said)
    moments = _moments(table, said, zone)
    grid = even_grid(moments, label, said.time.get("interval"), table.row)
    everywhere = listed(said.file.get("missing"))
    columns = {}
    for quantity, told in said.columns.items():
        if told.column is None:
            raise InputError(
                f"[columns.{quantity}] in {said.said_in} has no column: give its header or number"
            )
        texts = table.column(told.column, quantity)
        missing = (*everywhere, *told.missing)
        columns[quantity] = _numbers(texts, missing, said, f"column {told.column}", table.row)
    return columns, grid


def _moments(table: _Table, said: Settings, zone: str) -> NDArray[np.datetime64]:
    """Times of the rows, UTC, as labelled."""
    column = said.time.get("column")
    if column is not None and column != []:
        several = column if isinstance(column, list) else [column]
        parts = [table.column(one, "time") for one in several]
        texts = [" ".join(fields) for fields in zip(*parts, strict=True)]
        return parse_times(texts, said.time.get("format"), zone, table.row)
    told = {name: said.time[name] for name in TIME_PARTS if name in said.time}
    day = "day_of_year" in told or {"month", "day"} <= told.keys()
    if "year" not in told or not day:
        raise InputError(
            f"the times are not known: under [time] in {said.said_in} write column = ..., or year,"
            " month, day (or day_of_year) and hour"
        )
    numbers: dict[str, NDArray[np.float64]] = {
        str(name): _numbers(table.column(at, name), (), said, f"column {at}", table.row)
        for name, at in told.items()
    }
    return join_parts(numbers, zone, table.row)


def _numbers(
    texts: Sequence[str], missing: tuple[str | float, ...], said: Settings, what: str, row: Rows
) -> NDArray[np.float64]:
    """Numbers of a column, NaN where missing; InputError with the line of what is neither."""
    series = pd.Series(texts, dtype=object).str.strip()
    if said.file.get("decimal", ".") == ",":
        series = series.str.replace(",", ".", regex=False)
    stated = [text for text in missing if isinstance(text, str)]
    void = (series.str.lower().isin(NO_VALUE) | series.isin(stated)).to_numpy(bool)
    numbers = pd.to_numeric(series.where(~void), errors="coerce").to_numpy(np.float64).copy()
    bad = np.flatnonzero(~np.isfinite(numbers) & ~void)
    if bad.size:
        comma = ' or decimal = ","' if "," in texts[bad[0]] else ""
        raise InputError(
            f"{row(bad[0])}: {texts[bad[0]]!r} in {what} is no number; mend it, or list it as"
            f" missing{comma}"
        )
    for value in missing:
        if not isinstance(value, str):
            numbers[numbers == float(value)] = np.nan
    return numbers


def _cut(path: str | PathLike[str], said: Settings) -> _Table:
    """Cut the lines that are no comment and not blank, and keep the columns asked for."""
    comment = said.file.get("comment", "#")
    skip = said.file.get("skip", 0)
    with open(path, encoding="utf-8-sig", errors="replace", newline=None) as file:
        kept = [
            (number, line.rstrip("\r\n"))
            for number, line in enumerate(file, 1)
            if number > skip and line.strip()
        ]
    if comment:
        kept = [(number, line) for number, line in kept if not line.lstrip().startswith(comment)]
    if not kept:
        raise InputError("the file holds no rows")
    numbers, lines = map(list, zip(*kept, strict=True))
    separator = _separator(lines, said)
    header = _header(next(_fields(lines, separator)), said)
    if header:
        numbers, lines = numbers[1:], lines[1:]
    if not lines:
        raise InputError("the file holds a header, but no rows")
    row = Rows(numbers)
    asked = {_place(header, column, what): what for column, what in _asked(said)}
    texts: dict[int, list[str]] = {place: [] for place in asked}
    count = 0
    for fields in _fields(lines, separator):
        for place, text in texts.items():
            if place >= len(fields):
                raise InputError(
                    f"{row(count)}: {len(fields)} columns, but {asked[place]} is column"
                    f" {place + 1}; mend the row, or the separator under [file]"
                )
            text.append(fields[place])
        count += 1
    if count != len(lines):
        raise InputError("a quoted text runs over several lines; a row must be one line")
    return _Table(header, texts, row)


def _asked(said: Settings) -> list[tuple[str | int, str]]:
    """Every column that is needed, and what for."""
    time = said.time.get("column")
    asked = [(column, "time") for column in (time if isinstance(time, list) else [time])]
    asked += [(said.time.get(name), name) for name in TIME_PARTS]
    asked += [(told.column, quantity) for quantity, told in said.columns.items()]
    return [(column, what) for column, what in asked if column is not None]


def _fields(lines: list[str], separator: str | None) -> Iterator[list[str]]:
    if separator is None:
        return (line.split() for line in lines)
    return csv.reader(lines, delimiter=separator, skipinitialspace=True)


def _separator(lines: list[str], said: Settings) -> str | None:
    """The stated separator, else the first that cuts all of the first rows alike."""
    stated = said.file.get("separator")
    if stated is not None:
        separator = SEPARATORS.get(stated, stated)
        if separator is not None and len(separator) != 1:
            raise InputError(f'separator {stated!r} must be one character, "tab" or "whitespace"')
        return separator
    head = lines[:_SNIFFED_ROWS]
    for separator in _SNIFFED:
        counts = {len(fields) for fields in _fields(head, separator)}
        if len(counts) == 1 and counts.pop() > 1:
            return separator
    if all(len(line.split()) == 1 for line in head):
        return ","
    raise InputError(
        "the separator is not clear: the first rows have different numbers of columns. State"
        ' separator = "," (or ";", "tab", "whitespace") under [file], or skip = 1 to leave out a'
        " line before the header"
    )


def _header(fields: list[str], said: Settings) -> list[str]:
    """The first row, if it is a header, as stated or because columns go by name; else empty."""
    stated = said.file.get("header")
    if stated is None:
        stated = any(isinstance(column, str) for column, _ in _asked(said)) or _wordy(fields, said)
    return [name.strip() for name in fields] if stated else []


def _wordy(fields: list[str], said: Settings) -> bool:
    """Whether no measured column of a row is a number or void: then it is a header."""
    decimal = said.file.get("decimal", ".")
    measured = False
    for told in said.columns.values():
        if isinstance(told.column, int) and told.column <= len(fields):
            measured = True
            text = fields[told.column - 1].strip().replace(decimal, ".")
            void = (*NO_VALUE, *(str(value).lower() for value in told.missing))
            if text.lower() in void or pd.notna(pd.to_numeric(text, errors="coerce")):
                return False
    return measured
