"""Polygons that share ground, and slivers that are none."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from pyproj import CRS, Transformer

from terrasol.files.overlaps import overlap_doubts, true_area
from terrasol.files.vectors import Polygons

UTM = CRS("EPSG:32632")
X, Y = 500000.0, 5100000.0  # on the central meridian, where a map is too small by 0.9996
TRUE = 0.9996**-2


def polygons(*shapes, crs=UTM):
    return Polygons(tuple("ABCDEFGHI"[: len(shapes)]), shapes, crs)


def box(x0, y0, x1, y1):
    return shapely.box(X + x0, Y + y0, X + x1, Y + y1)


def test_pairs_that_overlap_are_named_with_what_they_share():
    one, other, away = box(0, 0, 100, 100), box(60, 0, 200, 100), box(300, 0, 400, 100)
    (said,) = overlap_doubts(polygons(one, other, away))
    assert "counts in each, areas of map: 'A' with 'B' (0.40 ha)" in said
    assert "'C'" not in said


def test_a_border_drawn_twice_is_not_warned_of_and_a_common_one_neither():
    """100 m2 in 1 ha is the limit of share; neighbours share a line alone."""
    square = box(0, 0, 100, 100)
    assert overlap_doubts(polygons(square, box(100, 0, 200, 100))) == []
    assert overlap_doubts(polygons(square, box(99.1, 0, 300, 100))) == []
    assert "(0.01 ha)" in overlap_doubts(polygons(square, box(98.9, 0, 300, 100)))[0]


def test_a_small_overlap_is_told_in_square_metres():
    small = box(0, 0, 10, 10)
    assert overlap_doubts(polygons(small, box(5, 0, 20, 10)))[0].endswith("'A' with 'B' (50 m2)")


def test_of_large_polygons_a_tenth_of_a_hectare_counts():
    """900 m of a border 1 m off, then 1100 m: 0.09 and 0.11 % of either."""
    for length, count in ((900, 0), (1100, 1)):
        left, right = box(-1000, 0, 1, length), box(0, 0, 1000, length)
        assert len(overlap_doubts(polygons(left, right))) == count


def test_the_first_few_pairs_are_named_largest_first():
    nested = [box(0, 0, 100, 10 * k) for k in range(1, 5)]
    (said,) = overlap_doubts(polygons(*nested))
    assert "map: 'C' with 'D' (0.30 ha), 'B' with " in said
    assert said.endswith(" (0.10 ha) and 1 more")
    assert said.count(" ha)") == 5


def test_shared_ground_is_true_area_in_any_crs():
    """A ring with a hole and a square, in metres, in degrees, and in a web map."""
    ring = shapely.Point(X + 500, Y).buffer(100.0).difference(shapely.Point(X + 500, Y).buffer(50))
    both = shapely.MultiPolygon([box(0, 0, 100, 200), ring])
    assert true_area(both, UTM) == pytest.approx(both.area * TRUE, rel=1e-5)
    for code in ("EPSG:4326", "EPSG:3857"):
        move = Transformer.from_crs(UTM, code, always_xy=True)
        moved = shapely.transform(both, lambda p, m=move: np.column_stack(m.transform(*p.T)))
        assert true_area(moved, CRS(code)) == pytest.approx(both.area * TRUE, rel=1e-5)
