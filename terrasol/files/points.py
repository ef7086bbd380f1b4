"""Places of plots, from tables of text and from vector files."""

from __future__ import annotations

import csv
import os
import re
import warnings
from collections.abc import Sequence
from dataclasses import dataclass, field
from os import PathLike
from typing import Any, Final

import numpy as np
import pandas as pd
import shapely
from numpy.typing import NDArray
from pyproj import CRS
from pyproj.exceptions import CRSError

from terrasol.errors import InputError, SettingError
from terrasol.files.rasters import naming
from terrasol.files.vectors import read_features, source_crs, text_of, word_list
from terrasol.ground.places import WGS84

TEXT_ENDINGS: Final = (".csv", ".tsv", ".txt", ".tab")
"""Names of files that are read as tables of text; all others as vector files."""

DEGREE_NAMES: Final = (("longitude", "latitude"), ("lon", "lat"), ("long", "lat"), ("lng", "lat"))
"""Columns, in any case, that are taken as longitude and latitude of WGS 84, and said so."""

GRID_NAMES: Final = (("x", "y"), ("easting", "northing"), ("east", "north"))
"""Columns, in any case, that are taken as coordinates once their CRS is named."""

ID_NAMES: Final = ("id", "plot", "plot_id", "plotid", "name", "site", "site_id", "code")
"""Columns, in any case, that name a plot: the first that has a name of its own for each, else the
first (judgement)."""

ERROR_NAMES: Final = ("gps_error_m", "gps_accuracy_m", "position_error_m")
"""Columns, in any case, that hold the error of a position; the unit must stand in the name."""

DECIMAL_COMMA: Final = re.compile(r"[+-]?\d+,\d+")
"""A number with a comma for its point."""

NO_VALUE: Final = ("", "na", "nan", "n/a", "null", "none", "-")
"""Texts, in any case, that stand for a missing number."""

SHOWN: Final = 5
"""Most plots that a message names."""


@dataclass(frozen=True)
class Points:
    """Named places in one CRS.

    Parameters
    ----------
    names : tuple of str
        As given; not always unique, which a warning says.
    x, y : ndarray of float64, shape (n,)
        Coordinates in `crs`, x (or longitude) first; NaN where the file has no number.
    crs : pyproj.CRS
        Of the coordinates.
    error : ndarray of float64, shape (n,)
        Root mean square of the distance from the true place [m]; NaN where unknown.
    attributes : pandas.DataFrame
        What else the file says of each, in the same order.
    remarks : tuple of str
        What was taken for granted.
    warnings : tuple of str
        What could not be read.
    """

    names: tuple[str, ...]
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    crs: CRS
    error: NDArray[np.float64]
    attributes: pd.DataFrame = field(default_factory=pd.DataFrame)
    remarks: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()

    def __len__(self) -> int:
        """How many there are."""
        return len(self.names)


def read_points(
    path: str | PathLike[str],
    *,
    layer: str | None = None,
    crs: Any = None,
    id_column: str | None = None,
    x_column: str | None = None,
    y_column: str | None = None,
    error_column: str | None = None,
) -> Points:
    """Read places from a table of text (CSV) or from a vector file of points.

    Parameters
    ----------
    path : path
        A name that ends in .csv, .tsv, .tab or .txt is a table with one row a place; any other
        is a vector file (GeoPackage, GeoJSON, shapefile, GeoParquet and others).
    layer : str, optional
        Needed where a vector file has several layers of points.
    crs : anything that ``pyproj.CRS.from_user_input`` takes, optional
        CRS of a table's coordinates, or of a vector file that names none. Without it a table
        must have columns named longitude and latitude (or lon and lat), which are then WGS 84.
    id_column, x_column, y_column, error_column : str, optional
        Columns of the name, the coordinates and the position's error [m]. By default those
        with a usual name; a warning says which.

    Returns
    -------
    Points

    Raises
    ------
    SettingError
        A column, layer or CRS that there is not.
    InputError
        No place can be read, or their CRS is not known: the message names the file and says
        what to do.
    """
    with naming(path):
        if str(path).lower().endswith(TEXT_ENDINGS):
            if layer is not None:
                raise SettingError("a table of text has no layers: leave the layer out")
            found = _from_text(path, crs, x_column, y_column)
        else:
            if x_column is not None or y_column is not None:
                raise SettingError("a vector file has its points as geometry: name no x and y")
            found = _from_vectors(path, layer, crs)
        return _complete(found, id_column, error_column)


@dataclass(frozen=True)
class _Found:
    """A table, the places of its rows, and what was said on the way."""

    table: pd.DataFrame
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    crs: CRS
    used: tuple[str, ...]
    remarks: tuple[str, ...]


def _complete(found: _Found, id_column: str | None, error_column: str | None) -> Points:
    """Add names and errors, and say what lacks."""
    table = found.table
    id_used, taken = _id_column(table, id_column)
    names = tuple(f"{k + 1}" for k in range(len(table)))
    if id_used is not None:
        names = tuple(text_of(v) or n for v, n in zip(table[id_used], names, strict=True))
    twice = np.array([names.count(name) > 1 for name in names])
    told = []
    if twice.any():
        several = sorted({name for name, again in zip(names, twice, strict=True) if again})
        told.append(f"more than one plot is called {word_list(several, SHOWN)}")
    error, error_used, heard, wrong = _error(table, names, error_column)
    told += wrong
    unplaced = ~(np.isfinite(found.x) & np.isfinite(found.y))
    if unplaced.all():
        raise InputError(
            "no row has coordinates in numbers: check the columns, and the decimal sign"
        )
    if unplaced.any():
        told.append(f"no coordinates in numbers for {listed(names, unplaced)}: left void")
    used = (*found.used, id_used, error_used)
    kept = table[[column for column in table.columns if column not in used]]
    return Points(
        names,
        np.where(unplaced, np.nan, found.x),
        np.where(unplaced, np.nan, found.y),
        found.crs,
        error,
        kept.reset_index(drop=True),
        (*found.remarks, *taken, *heard),
        tuple(told),
    )


def _id_column(table: pd.DataFrame, wanted: str | None) -> tuple[str | None, list[str]]:
    """The column that names the plots, if there is one, and what was taken for granted."""
    if wanted is not None:
        return _column(table, wanted), []
    lower = {str(column).lower(): str(column) for column in reversed(table.columns)}
    there = [lower[name] for name in ID_NAMES if name in lower]
    if not there:
        return None, ["no column names the plots, so they are numbered in order"]
    column = next((c for c in there if _tells_apart(table[c])), there[0])
    return column, [f"the plots are named by the column '{column}'"]


def _tells_apart(values: pd.Series) -> bool:
    """Whether a column has a name of its own for every plot."""
    names = [text_of(value) for value in values]
    return all(names) and len(set(names)) == len(names)


def _error(
    table: pd.DataFrame, names: Sequence[str], wanted: str | None
) -> tuple[NDArray[np.float64], str | None, list[str], list[str]]:
    """Errors of the positions, their column, what was taken for granted, and what is wrong."""
    lower = {str(column).lower(): str(column) for column in reversed(table.columns)}
    column = next((lower[name] for name in ERROR_NAMES if name in lower), None)
    if wanted is not None:
        column = _column(table, wanted)
    if column is None:
        return np.full(len(table), np.nan), None, [], []
    said = []
    if wanted is None:
        said.append(f"errors of position are read from the column '{column}', in metres")
    error = _numbers(table[column])
    bad, doubts = error < 0.0, []
    given = np.array([text_of(v).lower() not in NO_VALUE for v in table[column]])
    wrong = bad | (given & ~np.isfinite(error))
    if wrong.any():
        doubts.append(f"the error of position of {listed(names, wrong)} is no length: left out")
    return np.where(np.isfinite(error) & ~bad, error, np.nan), column, said, doubts


def listed(names: Sequence[str], which: NDArray[np.bool_]) -> str:
    """Word some of the plots, the first few by name.

    Examples
    --------
    >>> listed(["a", "b"], np.array([False, True]))
    "plot 'b'"
    """
    chosen = [f"'{name}'" for name, wanted in zip(names, which, strict=True) if wanted]
    shown = ", ".join(chosen[:SHOWN])
    more = f" and {len(chosen) - SHOWN} more" if len(chosen) > SHOWN else ""
    return f"{'plot' if len(chosen) == 1 else 'plots'} {shown}{more}"


def _from_text(
    path: str | PathLike[str], crs: Any, x_column: str | None, y_column: str | None
) -> _Found:
    """Places from a table of text."""
    table, notes = _read_text(path)
    x, y, source, said = _coordinates(table, crs, x_column, y_column)
    return _Found(table, _numbers(table[x]), _numbers(table[y]), source, (x, y), (*notes, *said))


def _from_vectors(path: str | PathLike[str], layer: str | None, crs: Any) -> _Found:
    """Places from a vector file."""
    with warnings.catch_warnings(record=True) as heard:
        warnings.simplefilter("always")
        frame = read_features(path, layer, "Point")
    told = dict.fromkeys(" ".join(str(w.message).split()) for w in heard)
    if not len(frame):
        raise InputError("the file holds no feature: give one with points")
    if frame.crs is not None and crs is not None:
        raise SettingError("the vector file has its own CRS: leave the CRS of the plots out")
    source = _known_crs(crs) if crs is not None else source_crs(frame.crs, path)
    shapes = [None if g is None or g.is_empty else _single(g) for g in frame.geometry.array]
    kinds = sorted({g.geom_type for g in shapes if g is not None} - {"Point"})
    if kinds:
        raise InputError(f"the file holds {word_list(kinds)}: give one single point a plot")
    x, y = np.array([(np.nan, np.nan) if g is None else (g.x, g.y) for g in shapes], float).T
    table = pd.DataFrame(frame.drop(columns=frame.geometry.name))
    return _Found(table, x, y, source, (), tuple(told))


def _single(geometry: Any) -> Any:
    """The point of a multipoint that has one; all else as it is."""
    parts = shapely.get_parts(geometry)
    return parts[0] if len(parts) == 1 else geometry


def _read_text(path: str | PathLike[str]) -> tuple[pd.DataFrame, list[str]]:
    """A table of text as it stands, and what was taken for granted."""
    lines, notes = _lines(path)
    separator = max(",;\t|", key=lambda sign: len(next(csv.reader(lines[:1], delimiter=sign))))
    rows = list(csv.reader(lines, delimiter=separator))
    header = [name.strip() for name in rows[0]]
    twice = {name for name in header if name and header.count(name) > 1}
    if twice:
        raise InputError(f"two columns are named '{min(twice)}': give each its own name")
    width = len(header)
    for number, row in enumerate(rows[1:], 2):
        if any(cell.strip() for cell in row[width:]):
            raise InputError(
                f"row {number} has {len(row)} columns and the header {width}: check the separator,"
                " or put text with it into quotes"
            )
    body = [[cell.strip() for cell in row[:width]] + [""] * (width - len(row)) for row in rows[1:]]
    if separator != "," and any(DECIMAL_COMMA.fullmatch(c) for row in body for c in row):
        body = [[c.replace(",", ".") if DECIMAL_COMMA.fullmatch(c) else c for c in r] for r in body]
        notes.append("numbers with a comma are read as decimal numbers")
    names = [name or f"column_{place + 1}" for place, name in enumerate(header)]
    return pd.DataFrame(body, columns=names, dtype=object), notes


def _lines(path: str | PathLike[str]) -> tuple[list[str], list[str]]:
    """The lines of a text file that are not empty, a header and more, and what was assumed."""
    if os.path.isdir(path):
        raise InputError("this is a folder, not a table: name the file in it")
    try:
        with open(path, "rb") as file:
            data = file.read()
    except OSError as error:
        raise InputError(f"the file cannot be read ({error.strerror}): check its name") from error
    if b"\0" in data:
        raise InputError("the file is not text in UTF-8: save the table as CSV in UTF-8")
    notes = []
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = data.decode("cp1252", "replace")
        notes.append("the table is not in UTF-8 and is read as Windows-1252: check the names")
    lines = [line for line in re.split(r"\r\n|\r|\n", text) if line.strip()]
    if len(lines) < 2:
        raise InputError("the table has no row below its header: give one row a plot")
    return lines, notes


def _coordinates(
    table: pd.DataFrame, crs: Any, x_column: str | None, y_column: str | None
) -> tuple[str, str, CRS, list[str]]:
    """The two columns of a table that say where, their CRS, and what was taken for granted."""
    if (x_column is None) != (y_column is None):
        raise SettingError("name both columns of the coordinates, x and y, or neither")
    known = None if crs is None else _known_crs(crs)
    if x_column is not None and y_column is not None:
        pair = _column(table, x_column), _column(table, y_column)
        degrees = (x_column.lower(), y_column.lower()) in DEGREE_NAMES
    else:
        degrees, pair = _guessed_pair(table, known)
    said = []
    if x_column is None:
        said.append(f"coordinates are read from the columns '{pair[0]}' and '{pair[1]}'")
    if known is None:
        if not degrees:
            raise InputError(
                f"the CRS of the columns '{pair[0]}' and '{pair[1]}' is not known: name it with"
                " --plots-crs"
            )
        known = WGS84
        said = [f"the columns '{pair[0]}' and '{pair[1]}' are taken as degrees of WGS 84"]
    return *pair, known, said


def _guessed_pair(table: pd.DataFrame, known: CRS | None) -> tuple[bool, tuple[str, str]]:
    """Columns with usual names for coordinates of a CRS, and whether they are degrees."""
    lower = {str(column).lower(): str(column) for column in reversed(table.columns)}
    degrees = [(lower[a], lower[b]) for a, b in DEGREE_NAMES if a in lower and b in lower]
    grid = [(lower[a], lower[b]) for a, b in GRID_NAMES if a in lower and b in lower]
    wanted = degrees if known is None or known.is_geographic else grid
    if wanted:
        return wanted is degrees, wanted[0]
    if grid:
        return False, grid[0]
    columns = word_list(list(table.columns))
    if degrees and known is not None:
        raise InputError(
            f"the columns '{degrees[0][0]}' and '{degrees[0][1]}' are degrees by name, and"
            f" '{known.name}' has none: name the columns with --x and --y, or another --plots-crs"
        )
    raise InputError(
        "no columns are named longitude and latitude, lon and lat, or x and y: name them with --x"
        f" and --y (the file has {columns})"
    )


def _known_crs(crs: Any) -> CRS:
    """A CRS as given, its horizontal part."""
    try:
        return CRS.from_user_input(crs).to_2d()
    except CRSError as error:
        raise SettingError(
            f"the CRS of the plots, {crs!r}, cannot be understood: write EPSG:32632, say"
        ) from error


def _column(table: pd.DataFrame, wanted: str) -> str:
    """A column that was asked for."""
    if wanted not in table.columns:
        columns = word_list(list(table.columns))
        raise SettingError(f"there is no column '{wanted}': the file has {columns}")
    return wanted


def _numbers(values: pd.Series) -> NDArray[np.float64]:
    """Texts as numbers, NaN where there is none."""
    return np.asarray(pd.to_numeric(values, errors="coerce"), np.float64)
