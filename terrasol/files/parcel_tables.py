"""Parcels as tables: a GeoPackage layer, text, and what the columns mean."""

from __future__ import annotations

import csv
import io
import math
import warnings
from collections.abc import Iterable, Mapping, Sequence
from os import PathLike
from typing import Any, Final

from pyproj import CRS

Value = float | str | None

DIGITS: Final = 7
"""Significant digits of a number in a table: more than any of them is worth."""

GEOMETRY: Final = ("geom", "geometry", "fid")
"""Names that a GeoPackage keeps for itself."""


def table_csv(columns: Sequence[str], rows: Iterable[Mapping[str, Value]]) -> bytes:
    r"""Rows as text with commas; nothing where a number is unknown.

    Examples
    --------
    >>> table_csv(["a", "b"], [{"a": "x, y", "b": 1 / 3}, {"a": "z", "b": float("nan")}]).decode()
    'a,b\n"x, y",0.3333333\nz,\n'
    """
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(columns)
    for row in rows:
        writer.writerow([_text(row.get(name)) for name in columns])
    return out.getvalue().encode()


def _text(value: Value) -> str:
    """A value as text."""
    if value is None or (isinstance(value, float) and math.isnan(value)):
        return ""
    if isinstance(value, str):
        return value
    if isinstance(value, float):
        return f"{value + 0.0:.{DIGITS}g}"
    return str(value)


def rounded(value: Any) -> Any:
    """A number with `DIGITS` significant digits, None where it is unknown; a text as it is."""
    if isinstance(value, str) or value is None:
        return value
    return None if math.isnan(value) else float(f"{value:.{DIGITS}g}")


def write_layer(
    path: str | PathLike[str],
    layer: str,
    crs: CRS,
    geometries: Sequence[Any],
    rows: Sequence[Mapping[str, Value]],
    description: str = "",
    *,
    append: bool = False,
) -> None:
    """Write polygons with their numbers as a layer of a GeoPackage.

    Parameters
    ----------
    path : path
        The file; with `append` it is there already.
    layer : str
        Its name.
    crs : pyproj.CRS
        Of the geometries.
    geometries : sequence of shapely geometries
        Polygons and multipolygons.
    rows : sequence of mapping
        One a geometry, all with the same names; unknown numbers become null. Without any, no
        layer is written.
    description : str
        What it holds, in words: the layer's own description.
    append : bool
        Add the layer to a file.

    Raises
    ------
    Exception
        Whatever GDAL has to say of a disk that will not take it.
    """
    import geopandas

    if not rows:
        return
    names = list(dict.fromkeys(name for row in rows for name in row))
    table = {
        (f"{name}_" if name.lower() in GEOMETRY else name): [rounded(row.get(name)) for row in rows]
        for name in names
    }
    frame = geopandas.GeoDataFrame(table, geometry=_multi(geometries), crs=crs.to_wkt())
    if "rank" in frame:
        frame["rank"] = frame["rank"].astype("Int64")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        frame.to_file(
            path,
            layer=layer,
            driver="GPKG",
            engine="pyogrio",
            mode="a" if append else "w",
            geometry_type="MultiPolygon",
            layer_options={"DESCRIPTION": description},
        )


def _multi(geometries: Sequence[Any]) -> list[Any]:
    """All as multipolygons, so that a layer holds one kind."""
    import shapely

    return [
        g if g.geom_type == "MultiPolygon" else shapely.MultiPolygon([g] if not g.is_empty else [])
        for g in geometries
    ]
