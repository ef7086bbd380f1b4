"""Polygons that share ground: which, and how much."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Final

import numpy as np
import shapely
from numpy.typing import NDArray
from pyproj import CRS, Transformer

from terrasol.constants import HECTARE
from terrasol.files.vectors import Polygons
from terrasol.words import area_words, listed

SLIVER_SHARE: Final = 0.01
"""Share of the smaller of two polygons up to which what they share may come from drawing their
common border twice (judgement, no source)."""

SLIVER_AREA: Final = 1000.0
"""The most, m2, that may: a kilometre of border drawn a metre off (judgement, no source)."""

MOST_NAMED: Final = 5
"""Pairs that the warning names."""


def overlap_doubts(polygons: Polygons) -> list[str]:
    """Warn of polygons that share more ground than a border drawn twice does.

    Parameters
    ----------
    polygons : Polygons
        In any CRS.

    Returns
    -------
    list of str
        One warning with the pairs that share most, or none. A pair counts if it shares over
        `SLIVER_SHARE` of the smaller of the two, or over `SLIVER_AREA`.
    """
    pairs = sorted(_shared(polygons), key=lambda pair: -pair[2])
    if not pairs:
        return []
    named = [f"'{one}' with '{other}' ({area_words(area / HECTARE)})" for one, other, area in pairs]
    return [
        "outlines overlap, and ground that they share counts in each, areas of map:"
        f" {listed(named, MOST_NAMED)}"
    ]


def _shared(polygons: Polygons) -> Iterator[tuple[str, str, float]]:
    """Pairs of polygons that overlap, by name, and the ground they share [m2]."""
    shapes = np.asarray(polygons.geometries, dtype=object)
    one, other = shapely.STRtree(shapes).query(shapes, predicate="intersects")
    one, other = one[one < other], other[one < other]
    common = shapely.intersection(shapes[one], shapes[other])
    smaller = np.minimum(shapely.area(shapes[one]), shapely.area(shapes[other]))
    parts = shapely.area(common) / smaller
    for k in np.flatnonzero(parts > 0.0):
        area = true_area(common[k], polygons.crs)
        if parts[k] > SLIVER_SHARE or area > SLIVER_AREA:
            yield polygons.names[one[k]], polygons.names[other[k]], area


def true_area(shape: shapely.Geometry, crs: CRS) -> float:
    """Area on the ellipsoid [m2] of a shape whose edges are geodesics between its vertices."""
    to_degrees = Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True)

    def there(places: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.column_stack(to_degrees.transform(places[:, 0], places[:, 1]))

    geod = crs.get_geod()
    assert geod is not None  # only a CRS that is not of the Earth has none
    flat = [part for part in shapely.get_parts(shape) if part.geom_type.endswith("Polygon")]
    turned = shapely.normalize(shapely.MultiPolygon(flat))  # rings of all parts in one sense
    area, _ = geod.geometry_area_perimeter(shapely.transform(turned, there))
    return abs(float(area))
