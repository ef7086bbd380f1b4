"""Polygons from files of many kinds, and the cells that they cover."""

from __future__ import annotations

import json

import geopandas
import numpy as np
import pytest
import shapely
from pyproj import CRS, Transformer

from terrasol.errors import InputError, SettingError
from terrasol.files.vectors import Polygons, coverage, patch_outlines, read_polygons

UTM = CRS("EPSG:32632")
SQUARE = shapely.box(620000.0, 5150000.0, 620100.0, 5150200.0)
SHED = shapely.Polygon([(620200, 5150000), (620300, 5150000), (620250, 5150080)])
BOW_TIE = shapely.Polygon([(0, 0), (100, 100), (100, 0), (0, 100)])
TO_DEGREES = Transformer.from_crs(UTM, "EPSG:4326", always_xy=True)


def frame(*shapes, crs=UTM, **fields):
    return geopandas.GeoDataFrame(fields, geometry=list(shapes), crs=crs)


def test_every_format_gives_the_same(tmp_path):
    table = frame(SQUARE, SHED, name=["square", "shed"], rows=[3, 4])
    table.to_file(tmp_path / "a.gpkg")
    table.to_file(tmp_path / "a.shp")
    table.to_parquet(tmp_path / "a.parquet")
    table.to_crs(4326).to_file(tmp_path / "a.geojson", COORDINATE_PRECISION=12)
    for ending in ("gpkg", "shp", "parquet", "geojson"):
        found = read_polygons(tmp_path / f"a.{ending}", UTM)
        assert found.names == ("square", "shed")
        assert found.attributes["rows"].tolist() == [3, 4]
        assert found.warnings == ()
        for shape, truth in zip(found.geometries, (SQUARE, SHED), strict=True):
            assert shape.symmetric_difference(truth).area < 1e-3 * truth.area
            assert shape.area == pytest.approx(truth.area, rel=1e-6)


def test_bow_tie_is_repaired_and_said_so(tmp_path):
    frame(BOW_TIE, name=["tie"]).to_file(tmp_path / "tie.gpkg")
    found = read_polygons(tmp_path / "tie.gpkg", UTM)
    assert found.geometries[0].is_valid
    assert found.geometries[0].area == pytest.approx(5000.0)  # both triangles
    assert any("'tie'" in text and "repaired" in text for text in found.warnings)


def test_an_outline_without_area_is_left_out_beside_one_that_is_repaired(tmp_path):
    """A line there and back is a valid feature of a file, and no parcel."""
    spike = shapely.Polygon([(620000, 5150000), (620050, 5150000), (620000, 5150000)])
    frame(BOW_TIE, spike, SQUARE, name=["tie", "spike", "in"], row=[1, 2, 3]).to_file(
        tmp_path / "three.gpkg"
    )
    found = read_polygons(tmp_path / "three.gpkg", UTM)
    assert found.names == ("tie", "in")
    assert [shape.area for shape in found.geometries] == pytest.approx([5000.0, SQUARE.area])
    assert [found.given(k)["row"] for k in (0, 1)] == [1, 3]
    tie, left_out = found.warnings
    assert "'tie' was not valid" in tie
    assert left_out == "the outline of 'spike' has no area and is left out: draw it anew"
    frame(spike, name=["spike"]).to_file(tmp_path / "none.gpkg")
    with pytest.raises(InputError, match=r"none\.gpkg: no feature of the file has an area"):
        read_polygons(tmp_path / "none.gpkg", UTM)


def test_overlapping_parts_count_once(tmp_path):
    both = shapely.MultiPolygon([shapely.box(0, 0, 20, 20), shapely.box(10, 10, 30, 30)])
    frame(both, name=["both"]).to_file(tmp_path / "both.gpkg")
    assert read_polygons(tmp_path / "both.gpkg", UTM).geometries[0].area == pytest.approx(700.0)


def test_heights_of_vertices_are_dropped_and_empties_told(tmp_path):
    deep = shapely.force_3d(SQUARE, 400.0)
    frame(deep, None, shapely.Polygon(), name=["a", "b", "c"]).to_file(tmp_path / "z.gpkg")
    found = read_polygons(tmp_path / "z.gpkg", UTM)
    assert found.names == ("a",)
    assert not found.geometries[0].has_z
    assert any(text.startswith("2 features without an area") for text in found.warnings)


def test_points_beside_polygons_are_left_out_with_a_warning(tmp_path):
    frame(SQUARE, shapely.Point(0, 0), name=["a", "p"]).to_file(tmp_path / "mixed.geojson")
    found = read_polygons(tmp_path / "mixed.geojson", UTM)
    assert found.names == ("a",)
    assert any("1 feature of points or lines" in text for text in found.warnings)


def test_names(tmp_path):
    frame(
        SQUARE, SHED, SHED, SHED, Name=["hill", "hill", None, "hill"], other=[1, 2, 3, 4]
    ).to_file(tmp_path / "n.gpkg")
    found = read_polygons(tmp_path / "n.gpkg", UTM)
    assert len(set(found.names)) == 4
    assert found.names[:3] == ("hill", "hill (2)", "unnamed 3")
    assert len(found.warnings) == 2
    by_other = read_polygons(tmp_path / "n.gpkg", UTM, name_field="other")
    assert by_other.names == ("1", "2", "3", "4")
    assert by_other.warnings == ()
    with pytest.raises(InputError, match="no field 'nme': the file has 'Name', 'other'"):
        read_polygons(tmp_path / "n.gpkg", UTM, name_field="nme")
    frame(SQUARE, SHED).to_file(tmp_path / "bare.gpkg")
    bare = read_polygons(tmp_path / "bare.gpkg", UTM)
    assert bare.names == ("1", "2")
    assert any("numbered" in text for text in bare.warnings)


def test_layers(tmp_path):
    path = tmp_path / "many.gpkg"
    frame(SQUARE, name=["a"]).to_file(path, layer="low")
    frame(shapely.Point(0, 0), name=["p"]).to_file(path, layer="wells")
    assert read_polygons(path, UTM).names == ("a",)  # the only one with areas
    frame(SHED, name=["b"]).to_file(path, layer="high")
    with pytest.raises(InputError, match="several layers, 'low', 'high': choose one with --layer"):
        read_polygons(path, UTM)
    assert read_polygons(path, UTM, layer="high").names == ("b",)
    with pytest.raises(SettingError, match="no layer 'hihg'"):
        read_polygons(path, UTM, layer="hihg")
    with pytest.raises(InputError, match="not polygons"):
        read_polygons(path, UTM, layer="wells")


@pytest.mark.filterwarnings("ignore:'crs' was not provided")
def test_no_crs(tmp_path):
    frame(SQUARE, crs=None, name=["a"]).to_file(tmp_path / "bare.shp")
    with pytest.raises(InputError, match=r"bare\.shp: the file has no CRS.*\.prj"):
        read_polygons(tmp_path / "bare.shp", UTM)


def test_metres_in_geojson_are_refused(tmp_path):
    shape = shapely.geometry.mapping(SQUARE)
    feature = {"type": "Feature", "properties": {}, "geometry": shape}
    (tmp_path / "m.geojson").write_text(
        json.dumps({"type": "FeatureCollection", "features": [feature]})
    )
    with pytest.raises(InputError, match="no longitude and latitude"):
        read_polygons(tmp_path / "m.geojson", UTM)


@pytest.mark.parametrize(
    ("name", "content", "words"),
    [
        ("empty.gpkg", b"", "the file is empty"),
        ("text.geojson", b"just some words", "cannot be read as vector data"),
        ("cut.parquet", b"PAR1 and no more", "cannot be read as vector data"),
        ("none.geojson", b'{"type": "FeatureCollection", "features": []}', "no feature|no layer"),
    ],
)
def test_bad_files_are_refused(tmp_path, name, content, words):
    (tmp_path / name).write_bytes(content)
    with pytest.raises(InputError, match=rf"{name}: .*({words})"):
        read_polygons(tmp_path / name, UTM)


def test_no_file_and_no_vectors(tmp_path):
    with pytest.raises(InputError, match="no such file"):
        read_polygons(tmp_path / "gone.gpkg", UTM)
    with pytest.raises(InputError, match="a folder"):
        read_polygons(tmp_path, UTM)


def test_long_edges_stay_straight_in_their_own_crs(tmp_path):
    """The middle of a 20 km edge along a parallel lies on the parallel, in any CRS."""
    wide = shapely.box(10.0, 46.0, 10.26, 46.1)
    frame(wide, crs=4326, name=["wide"]).to_file(tmp_path / "wide.gpkg")
    found = read_polygons(tmp_path / "wide.gpkg", UTM).geometries[0]
    middle = shapely.Point(*Transformer.from_crs(4326, UTM, always_xy=True).transform(10.13, 46.0))
    assert found.boundary.distance(middle) < 0.05


GRID = (10.0, 0.0, 620000.0, 0.0, -10.0, 5150100.0)


def covered(shape, transform=GRID, size=(20, 30), crs=UTM):
    cells, warnings = coverage(Polygons(("it",), (shape,), crs), transform, size)
    whole = np.zeros(size)
    whole[cells[0].rows, cells[0].columns] = cells[0].fraction
    return whole, warnings


def test_half_covered_cells():
    whole, warnings = covered(shapely.box(620005.0, 5150080.0, 620020.0, 5150100.0))
    assert whole[:2, :3].tolist() == [[0.5, 1.0, 0.0], [0.5, 1.0, 0.0]]
    assert whole.sum() == 3.0
    assert warnings == ()


@pytest.mark.parametrize("turn", [0.0, 17.0, 90.0, 200.0])
@pytest.mark.parametrize("flip", [1.0, -1.0])
@pytest.mark.parametrize("shear", [0.0, 0.3])
def test_any_affine_covers_the_same_ground(turn, flip, shear):
    """Covered share times the cell's area is the polygon's area, wherever it lies."""
    angle = np.radians(turn)
    across = np.array([np.cos(angle), np.sin(angle)]) * 7.0
    down = flip * np.array([np.sin(angle), -np.cos(angle)]) * 11.0 + shear * across
    centre = np.array([620050.0, 5150060.0]) - 20 * across - 20 * down
    grid = (across[0], down[0], centre[0], across[1], down[1], centre[1])
    blob = shapely.Point(620050, 5150060).buffer(43.0)
    whole, warnings = covered(blob, grid, (40, 40))
    assert warnings == ()
    area = abs(across[0] * down[1] - across[1] * down[0])
    assert whole.sum() * area == pytest.approx(blob.area, rel=1e-5)
    rows, columns = np.indices(whole.shape)
    x = grid[0] * (columns + 0.5) + grid[1] * (rows + 0.5) + grid[2]
    y = grid[3] * (columns + 0.5) + grid[4] * (rows + 0.5) + grid[5]
    assert np.average(x, weights=whole) == pytest.approx(620050.0, abs=0.5)
    assert np.average(y, weights=whole) == pytest.approx(5150060.0, abs=0.5)


def test_partly_and_wholly_outside():
    half = shapely.box(619990.0, 5150050.0, 620010.0, 5150060.0)
    whole, warnings = covered(half)
    assert whole.sum() == pytest.approx(1.0)
    assert "50.0 % of its area" in warnings[0]
    with pytest.raises(InputError, match="no polygon lies on the raster"):
        covered(shapely.box(0, 0, 10, 10))
    two = Polygons(("in", "out"), (SHED, shapely.box(0, 0, 10, 10)), UTM)
    cells, warnings = coverage(two, GRID, (20, 60))
    assert cells[1].rows.size == 0
    assert warnings == ("'out' lies outside the raster and is left out",)


def test_beside_the_raster_but_within_its_frame_of_one_cell():
    whole_out = shapely.box(619985.0, 5150050.0, 620000.0, 5150060.0)  # shares an edge only
    with pytest.raises(InputError, match="no polygon"):
        covered(whole_out)


def test_longitudes_counted_from_elsewhere():
    grid = (0.1, 0.0, 350.0, 0.0, -0.1, 50.0)  # 350 to 353 east
    whole, _ = covered(shapely.box(-9.5, 48.5, -9.0, 49.0), grid, (20, 30), CRS("EPSG:4326"))
    assert whole.sum() == pytest.approx(25.0)


def test_holes_are_not_covered():
    ring = shapely.box(620000, 5150000, 620060, 5150060).difference(
        shapely.box(620020, 5150020, 620040, 5150040)
    )
    whole, _ = covered(ring)
    assert whole.sum() == pytest.approx(36.0 - 4.0)


@pytest.mark.parametrize("turn", [0.0, 30.0])
def test_outlines_of_patches_are_those_of_their_cells(turn):
    labels = np.array([[1, 1, 0, 2], [0, 1, 0, 2], [2, 0, 0, 0]])
    angle = np.radians(turn)
    a, d = 10 * np.cos(angle), 10 * np.sin(angle)
    grid = (a, d, 620000.0, d, -a, 5150100.0)
    found = patch_outlines(labels, grid, (3, 5))
    assert sorted(found) == [1, 2]
    assert found[1].area == pytest.approx(300.0)
    assert len(shapely.get_parts(found[2])) == 2
    for label, outline in found.items():
        moved = Polygons(("it",), (outline,), UTM)
        cells, _ = coverage(moved, grid, (20, 20))
        whole = np.zeros((20, 20))
        whole[cells[0].rows, cells[0].columns] = cells[0].fraction
        assert np.allclose(whole[3:6, 5:9], labels == label, atol=1e-5)
        assert whole.sum() == pytest.approx((labels == label).sum(), abs=1e-4)
