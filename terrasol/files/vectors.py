"""Polygons from vector files, and the cells of a raster that they cover."""

from __future__ import annotations

import os
import warnings
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace
from os import PathLike
from typing import Any, Final

import numpy as np
import pandas as pd
import shapely
from numpy.typing import NDArray
from pyproj import CRS, Transformer
from pyproj.exceptions import CRSError, ProjError
from rasterio import Affine
from rasterio.features import shapes as traced

from terrasol.errors import InputError, SettingError
from terrasol.files.rasters import naming
from terrasol.ground.elevation import Affine6
from terrasol.words import counted, listed

LONGEST_EDGE: Final = 1000.0
"""Longest piece, m, of a straight edge that is carried into another CRS by its ends alone. The
true line bends away from it by 2 cm at mid latitudes, and by a quarter of that for half the
length."""

METRES_A_DEGREE: Final = 111_195.0
"""Of latitude, on the mean sphere; for the length of edges only."""

NAME_FIELDS: Final = ("name", "id", "label", "parcel", "block")
"""Fields that name a polygon, in this order, in any case, where none is asked for (judgement)."""

PARQUET_BEGINS: Final = b"PAR1"
"""First bytes of a Parquet file."""

POLYGONS: Final = ("Polygon", "MultiPolygon")
"""Kinds of geometry that have an area."""

NO_AREA: Final = "no feature of the file has an area: give one with polygons"
"""What is said where nothing is left."""

ROUNDING: Final = 1e-6
"""Share of a polygon that may lie outside by rounding: shares of cells are single precision."""

SLIVER: Final = 1e-9
"""Share of a cell below which it does not count as covered: rounding of the overlay."""


@dataclass(frozen=True)
class Polygons:
    """Named areas in one CRS.

    Parameters
    ----------
    names : tuple of str
        Unique.
    geometries : tuple of shapely geometries
        Valid, two-dimensional polygons and multipolygons that are not empty.
    crs : pyproj.CRS
        Of the coordinates, x (or longitude) first.
    attributes : pandas.DataFrame
        What else the file says of each, in the same order.
    warnings : tuple of str
        What had to be mended, dropped or assumed.
    """

    names: tuple[str, ...]
    geometries: tuple[Any, ...]
    crs: CRS
    attributes: pd.DataFrame = field(default_factory=pd.DataFrame)
    warnings: tuple[str, ...] = ()

    def __len__(self) -> int:
        """How many there are."""
        return len(self.names)

    def given(self, place: int) -> dict[str, Any]:
        """What the file says of one of them, by field: numbers, text, None where nothing."""
        if self.attributes.empty:
            return {}
        row = self.attributes.iloc[place]
        return {str(name): _plain(value) for name, value in row.items()}


@dataclass(frozen=True)
class Cells:
    """The cells of a raster that one polygon touches.

    Parameters
    ----------
    rows, columns : ndarray of int, shape (n,)
        Where they are, row by row.
    fraction : ndarray of float64, shape (n,)
        Share of each cell's area that is covered, over 0 to 1.
    inside : float
        Share of the polygon's area that lies on the raster.
    """

    rows: NDArray[np.intp]
    columns: NDArray[np.intp]
    fraction: NDArray[np.float64]
    inside: float


def read_polygons(
    path: str | PathLike[str],
    crs: CRS,
    *,
    layer: str | None = None,
    name_field: str | None = None,
) -> Polygons:
    """Read polygons from GeoPackage, GeoJSON, shapefile, GeoParquet or another vector file.

    Rings that cross themselves are repaired, heights of vertices dropped, and features without
    an area left out; the warnings say where.

    Parameters
    ----------
    path : path
        The file.
    crs : pyproj.CRS
        The CRS wanted, that of a raster.
    layer : str, optional
        Needed where the file has several layers of polygons.
    name_field : str, optional
        Field that names the polygons; by default the first of `NAME_FIELDS` that there is.

    Returns
    -------
    Polygons

    Raises
    ------
    SettingError
        A layer or field that the file has not.
    InputError
        No vector file, several layers, no CRS, no polygon, or coordinates that cannot be: the
        message names the file and says what to do.

    Notes
    -----
    Edges are straight lines in the file's own CRS, as its formats have it; long ones get
    vertices on the way into the other CRS, so that they stay where they are.
    """
    with naming(path):
        with warnings.catch_warnings(record=True) as heard:
            warnings.simplefilter("always")
            frame = read_features(path, layer, "Polygon")
        told = dict.fromkeys(" ".join(str(w.message).split()) for w in heard)
        found = as_polygons(frame, crs, name_field=name_field, path=path)
        return replace(found, warnings=(*told, *found.warnings))


def as_polygons(
    frame: Any, crs: CRS, *, name_field: str | None = None, path: str | PathLike[str] = ""
) -> Polygons:
    """Take polygons from a geopandas frame; as `read_polygons`, `path` serves a hint alone."""
    source = source_crs(frame.crs, path)
    shapes, kept, left_out = _areas(np.asarray(frame.geometry.array, dtype=object))
    names, attributes, notes = _named(frame.drop(columns=frame.geometry.name), kept, name_field)
    moved = _moved(shapes, source, crs)
    repaired, said = _repaired(moved, names)
    there = [place for place, shape in enumerate(repaired) if shape is not None]
    if not there:
        raise InputError(NO_AREA)
    return Polygons(
        tuple(names[place] for place in there),
        tuple(repaired[place] for place in there),
        crs,
        attributes.iloc[there].reset_index(drop=True),
        (*left_out, *notes, *said),
    )


def read_features(path: str | PathLike[str], layer: str | None, kind: str) -> Any:
    """Read a layer of a vector file as a geopandas frame; `kind` is "Polygon" or "Point"."""
    import geopandas

    _check_file(path)
    try:
        if _is_parquet(path):
            if layer is not None:
                raise SettingError(f"{path}: a Parquet file has no layers: leave the layer out")
            return geopandas.read_parquet(path)
        chosen = _layer(path, layer, kind)
        return geopandas.read_file(path, layer=chosen, engine="pyogrio", on_invalid="ignore")
    except (SettingError, InputError):
        raise
    except Exception as error:  # many classes of GDAL, pyogrio, pyarrow and geopandas
        text = " ".join(str(error).split()).rstrip(".")
        raise InputError(
            f"the file cannot be read as vector data ({text}): give a GeoPackage, GeoJSON,"
            " shapefile or GeoParquet"
        ) from error


def _check_file(path: str | PathLike[str]) -> None:
    """Raise InputError for a name that stands for no file with something in it."""
    if os.path.isdir(path):
        if any(name.endswith((".gdbtable", ".shp")) for name in os.listdir(path)):
            return
        raise InputError("this is a folder, not a vector file: name the file in it")
    if not os.path.exists(path):
        raise InputError("there is no such file: check its name")
    if os.path.getsize(path) == 0:
        raise InputError("the file is empty: fetch it again")
    if not os.access(path, os.R_OK):
        raise InputError("the file may not be read: ask its owner for permission")


def _is_parquet(path: str | PathLike[str]) -> bool:
    """Whether the file begins as Parquet."""
    if os.path.isdir(path):
        return False
    with open(path, "rb") as file:
        return file.read(4) == PARQUET_BEGINS


def _layer(path: str | PathLike[str], wanted: str | None, geometry: str) -> str:
    """The one layer to read."""
    import pyogrio

    layers = [(str(name), kind) for name, kind in pyogrio.list_layers(path)]
    every = [name for name, _ in layers]
    if wanted is not None:
        if wanted not in every:
            raise SettingError(f"{path} has no layer '{wanted}': it has {word_list(every)}")
        return wanted
    spatial = [name for name, kind in layers if kind is not None]
    fitting = [n for n, kind in layers if kind and (geometry in kind or kind == "Unknown")]
    choice = fitting or spatial
    if not choice:
        raise InputError(f"the file has no layer with geometry: give one with {geometry.lower()}s")
    if len(choice) > 1:
        raise InputError(
            f"the file has several layers, {word_list(choice)}: choose one with --layer"
        )
    return choice[0]


def word_list(names: Sequence[str], most: int = 12) -> str:
    """Word some names, the first few in full."""
    return listed([f"'{name}'" for name in names], most)


def source_crs(crs: Any, path: str | PathLike[str]) -> CRS:
    """Find the horizontal CRS of the file's coordinates."""
    if crs is None:
        hint = ", or bring its .prj file" if str(path).lower().endswith(".shp") else ""
        raise InputError(f"the file has no CRS: assign the one its coordinates are in{hint}")
    try:
        return CRS.from_user_input(crs).to_2d()
    except CRSError as error:
        raise InputError(f"the file's CRS cannot be understood ({error})") from error


def _areas(geometries: NDArray[Any]) -> tuple[list[Any], list[int], list[str]]:
    """Flat polygons, which features they are, and what was left out."""
    if not geometries.size:
        raise InputError("the file holds no feature: give one with polygons")
    kinds = [None if g is None or g.is_empty else g.geom_type for g in geometries]
    found = {kind for kind in kinds if kind is not None}
    if not found:
        raise InputError("every geometry of the file is empty: give one with polygons")
    good = {*POLYGONS, "GeometryCollection"}
    if not found & good:
        raise InputError(
            f"the file holds {word_list(sorted(found))}, not polygons: give the outlines as"
            " polygons"
        )
    shapes, kept, empty, other = [], [], 0, 0
    for place, (geometry, kind) in enumerate(zip(geometries, kinds, strict=True)):
        shape = None if kind is None else _only_area(shapely.force_2d(geometry))
        if shape is not None:
            shapes.append(shape)
            kept.append(place)
        elif kind is None or kind in good:
            empty += 1
        else:
            other += 1
    left_out = []
    if empty:
        left_out.append(f"{counted(empty, 'feature')} without an area left out")
    if other:
        left_out.append(f"{counted(other, 'feature')} of points or lines left out")
    if not shapes:
        raise InputError(NO_AREA)
    return shapes, kept, left_out


def _only_area(geometry: Any) -> Any | None:
    """The polygons of a geometry, as one; None if it has none."""
    if geometry.geom_type not in POLYGONS:
        parts = [p for p in shapely.get_parts(geometry) if p.geom_type in POLYGONS]
        if not parts:
            return None
        geometry = shapely.union_all(parts) if len(parts) > 1 else parts[0]
    return None if geometry.is_empty else geometry


def _named(
    table: pd.DataFrame, kept: list[int], name_field: str | None
) -> tuple[tuple[str, ...], pd.DataFrame, list[str]]:
    """Unique names, the attributes of what is kept, and what had to be made up."""
    column = _name_column([str(c) for c in table.columns], name_field)
    attributes = table.iloc[kept].reset_index(drop=True)
    if column is None:
        names = tuple(f"{place + 1}" for place in kept)
        fields = f"none of the fields {', '.join(NAME_FIELDS)}"
        return names, attributes, [f"the polygons have {fields}, so they are numbered in order"]
    told: list[str] = []
    missing, again = 0, 0
    taken: set[str] = set()
    for place, value in zip(kept, attributes[column].tolist(), strict=True):
        name = text_of(value)
        missing += not name
        name = name or f"unnamed {place + 1}"
        if name in taken:
            again += 1
            name = next(n for k in range(2, len(kept) + 2) if (n := f"{name} ({k})") not in taken)
        taken.add(name)
        told.append(name)
    notes = []
    if missing:
        notes.append(f"{counted(missing, 'polygon')} without a {column} numbered by place in file")
    if again:
        notes.append(f"{counted(again, 'polygon')} with the {column} of another told apart by (2)")
    return tuple(told), attributes, notes


def _name_column(columns: list[str], wanted: str | None) -> str | None:
    """The field that names the polygons."""
    if wanted is not None:
        if wanted not in columns:
            raise InputError(f"there is no field '{wanted}': the file has {word_list(columns)}")
        return wanted
    lower = {column.lower(): column for column in reversed(columns)}
    return next((lower[name] for name in NAME_FIELDS if name in lower), None)


def text_of(value: Any) -> str:
    """Word a name as text, nothing for no value; whole numbers without a point."""
    if value is None or (not isinstance(value, str) and pd.isna(value)):
        return ""
    if isinstance(value, float) and value.is_integer():
        value = int(value)
    return " ".join(str(value).split())


def _plain(value: Any) -> Any:
    """A value of a table as a number or text."""
    if value is None or (np.ndim(value) == 0 and pd.isna(value)):
        return None
    if isinstance(value, bool | np.bool_) or not isinstance(value, int | float | np.number):
        return str(value)
    return float(value)


def _moved(shapes: list[Any], source: CRS, target: CRS) -> list[Any]:
    """Carry shapes into another CRS."""
    _check_degrees(shapes, source)
    if source == target or source.is_exact_same(target):
        return shapes
    try:
        transformer = Transformer.from_crs(source, target, always_xy=True)
    except ProjError as error:
        raise InputError(
            f"coordinates of '{source.name}' cannot be turned into those of the raster's CRS"
            f" '{target.name}'"
        ) from error

    def there(places: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.column_stack(transformer.transform(places[:, 0], places[:, 1]))

    unit = source.axis_info[0].unit_conversion_factor
    metre = np.degrees(unit) * METRES_A_DEGREE if source.is_geographic else unit
    moved = [shapely.transform(shapely.segmentize(s, LONGEST_EDGE / metre), there) for s in shapes]
    if not all(np.isfinite(shapely.get_coordinates(shape)).all() for shape in moved):
        raise InputError(
            f"polygons lie outside the domain of the raster's CRS '{target.name}': check that both"
            " are of the same place, and the polygons' CRS"
        )
    return moved


def _check_degrees(shapes: Iterable[Any], source: CRS) -> None:
    """Refuse degrees that cannot be: coordinates of another CRS, as a rule."""
    if not source.is_geographic:
        return
    turn = 2.0 * np.pi / source.axis_info[0].unit_conversion_factor
    for shape in shapes:
        x, y = shapely.get_coordinates(shape).T
        if np.abs(x).max() > turn or np.abs(y).max() > turn / 4.0 * (1.0 + 1e-9):
            raise InputError(
                f"a place at {x[0]:.6g}, {y[0]:.6g} is no longitude and latitude, which the CRS"
                f" '{source.name}' has (GeoJSON has no other): write the file in its real CRS"
            )


def _repaired(shapes: list[Any], names: Sequence[str]) -> tuple[list[Any | None], list[str]]:
    """Mend rings that cross themselves or each other; None for those around no area."""
    mended: list[Any | None] = []
    said = []
    for shape, name in zip(shapes, names, strict=True):
        if not shapely.is_valid(shape):
            reason = shapely.is_valid_reason(shape).split("[")[0].strip().lower()
            shape = _only_area(shapely.make_valid(shape, method="structure", keep_collapsed=False))
            if shape is None:
                told = "has no area and is left out: draw it anew"
            else:
                parts = counted(len(shapely.get_parts(shape)), "part")
                told = f"was not valid ({reason}) and is repaired to {parts}: check it on a map"
            said.append(f"the outline of '{name}' {told}")
        mended.append(shape)
    return mended, said


def coverage(
    polygons: Polygons, transform: Affine6, shape: tuple[int, int]
) -> tuple[list[Cells], tuple[str, ...]]:
    """Find the cells of a raster that polygons touch, and how much of each they cover.

    Parameters
    ----------
    polygons : Polygons
        In the raster's CRS.
    transform : tuple of six floats
        Of the raster, rotated, sheared or south-up as it may be; see
        `terrasol.ground.elevation.Elevation`.
    shape : tuple of int
        Rows and columns.

    Returns
    -------
    cells : list of Cells
        One a polygon, in order; without any where the polygon lies outside the raster.
    warnings : tuple of str
        Which polygons lie outside, or in part.

    Raises
    ------
    InputError
        All of them lie outside the raster.

    Notes
    -----
    The overlay is exact: polygons are carried into the grid, where every cell is a unit
    square whatever the transform, and cut there by exactextract.
    """
    found = [
        _cells(_in_grid(g, transform, shape, polygons.crs), shape) for g in polygons.geometries
    ]
    if not any(cells.rows.size for cells in found):
        raise InputError(
            "no polygon lies on the raster: check that both are of the same place, and their CRSs"
        )
    said = []
    for name, cells in zip(polygons.names, found, strict=True):
        if not cells.rows.size:
            said.append(f"'{name}' lies outside the raster and is left out")
        elif cells.inside < 1.0:
            share = max(100.0 * (1.0 - cells.inside), 0.1)
            said.append(
                f"'{name}' lies outside the raster by {share:.1f} % of its area, of which nothing"
                " is known"
            )
    return found, tuple(said)


def _in_grid(geometry: Any, transform: Affine6, shape: tuple[int, int], crs: CRS) -> Any:
    """Carry a geometry into the raster's grid: columns rightward, minus rows upward."""
    a, b, c, d, e, f = transform
    turn = 2.0 * np.pi / crs.axis_info[0].unit_conversion_factor if crs.is_geographic else 0.0
    shift = 0.0
    if turn:
        middle = a * shape[1] / 2.0 + b * shape[0] / 2.0 + c
        centre = (geometry.bounds[0] + geometry.bounds[2]) / 2.0
        shift = turn * np.round((middle - centre) / turn)

    def there(places: NDArray[np.float64]) -> NDArray[np.float64]:
        x, y = places[:, 0] + shift - c, places[:, 1] - f
        det = a * e - b * d
        return np.column_stack([(e * x - b * y) / det, -(a * y - d * x) / det])

    return shapely.transform(geometry, there)


def _cells(geometry: Any, shape: tuple[int, int]) -> Cells:
    """Cut a geometry of the grid by its unit cells."""
    from exactextract import exact_extract
    from exactextract.raster import NumPyRasterSource

    left, bottom, right, top = geometry.bounds
    first = max(int(np.floor(-top)), 0), max(int(np.floor(left)), 0)
    last = min(int(np.ceil(-bottom)), shape[0]), min(int(np.ceil(right)), shape[1])
    if first[0] >= last[0] or first[1] >= last[1]:
        return _nothing()
    # One cell more all round, so that no outline runs along the edge of what is looked at.
    rows, columns = last[0] - first[0] + 2, last[1] - first[1] + 2
    grid = NumPyRasterSource(
        np.zeros((rows, columns), np.uint8),
        first[1] - 1.0,
        -first[0] + 1.0 - rows,
        first[1] - 1.0 + columns,
        -first[0] + 1.0,
    )
    feature = {"type": "Feature", "properties": {}, "geometry": shapely.geometry.mapping(geometry)}
    cut = exact_extract(grid, [feature], ["cell_id", "coverage"])[0]["properties"]
    places = np.asarray(cut["cell_id"], np.intp)
    fraction = np.asarray(cut["coverage"], np.float64)
    row, column = places // columns + first[0] - 1, places % columns + first[1] - 1
    on_it = (row >= 0) & (row < shape[0]) & (column >= 0) & (column < shape[1])
    on_it &= fraction > SLIVER
    if not on_it.any():
        return _nothing()
    fraction = np.minimum(fraction[on_it], 1.0)
    inside = float(fraction.sum() / geometry.area)
    inside = 1.0 if inside > 1.0 - ROUNDING else inside
    return Cells(row[on_it], column[on_it], fraction, inside)


def _nothing() -> Cells:
    """No cell at all."""
    none = np.empty(0, np.intp)
    return Cells(none, none, np.empty(0), 0.0)


def patch_outlines(
    labels: NDArray[np.integer], transform: Affine6, corner: tuple[int, int]
) -> dict[int, Any]:
    """Trace the outlines of cells with the same label.

    Parameters
    ----------
    labels : ndarray of int, shape (rows, columns)
        A window of a raster; 0 is no patch.
    transform : tuple of six floats
        Of the whole raster.
    corner : tuple of int
        Row and column of the window's first cell in it.

    Returns
    -------
    dict of shapely geometries
        By label, in the raster's CRS; cells that touch at a corner alone make two parts.
    """
    a, b, c, d, e, f = transform
    row, column = corner
    grid = Affine(a, b, c + a * column + b * row, d, e, f + d * column + e * row)
    values = np.ascontiguousarray(labels, np.int32)
    parts: dict[int, list[Any]] = {}
    for shape, label in traced(values, mask=values > 0, connectivity=4, transform=grid):
        parts.setdefault(int(label), []).append(shapely.geometry.shape(shape))
    return {label: shapely.union_all(found) for label, found in parts.items()}
