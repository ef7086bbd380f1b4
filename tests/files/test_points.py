"""Places of plots: tables and vector files, good and bad."""

import geopandas
import numpy as np
import pytest
from shapely.geometry import MultiPoint, Point

from terrasol import InputError, SettingError
from terrasol.files.points import listed, read_points


def table(tmp_path, text, name="plots.csv", encoding="utf-8"):
    path = tmp_path / name
    path.write_text(text, encoding=encoding)
    return path


def vectors(path, geometries, crs="EPSG:32632", layer=None, **columns):
    frame = geopandas.GeoDataFrame(columns, geometry=list(geometries), crs=crs)
    if path.suffix == ".parquet":
        frame.to_parquet(path)
    else:
        frame.to_file(path, engine="pyogrio", **({"layer": layer} if layer else {}))
    return path


def test_longitude_and_latitude_are_wgs84_and_said_so(tmp_path):
    points = read_points(table(tmp_path, "id,longitude,latitude,cover\nA,10.5,46.5,3\nB,11,47,\n"))
    assert points.names == ("A", "B")
    assert points.x.tolist() == [10.5, 11.0]
    assert points.crs.to_epsg() == 4326
    assert "taken as degrees of WGS 84" in points.remarks[0]
    assert points.attributes["cover"].tolist() == ["3", ""]
    assert points.warnings == ()
    assert np.isnan(points.error).all()


@pytest.mark.parametrize("header", ["Lon,Lat", "LONG,LAT", "lng,lat", "Longitude,Latitude"])
def test_names_in_any_case(tmp_path, header):
    assert read_points(table(tmp_path, f"plot,{header}\n1,10,46\n")).y.tolist() == [46.0]


def test_grid_coordinates_need_a_crs(tmp_path):
    path = table(tmp_path, "plot,x,y\n1,600000,5150000\n")
    with pytest.raises(InputError, match=r"plots\.csv.*'x' and 'y' is not known.*--plots-crs"):
        read_points(path)
    points = read_points(path, crs="EPSG:32632")
    assert points.crs.to_epsg() == 32632
    assert "read from the columns 'x' and 'y'" in points.remarks[0]


def test_both_kinds_of_coordinates(tmp_path):
    path = table(tmp_path, "id,x,y,lon,lat\n1,600000,5150000,10.3,46.5\n")
    assert read_points(path).x.tolist() == [10.3]
    assert read_points(path, crs="EPSG:32632").x.tolist() == [600000.0]
    assert read_points(path, crs="EPSG:4269").x.tolist() == [10.3]


def test_degrees_by_name_are_not_read_in_metres(tmp_path):
    path = table(tmp_path, "id,lon,lat\n1,10.3,46.5\n")
    with pytest.raises(InputError, match="degrees by name"):
        read_points(path, crs="EPSG:32632")


def test_named_columns(tmp_path):
    path = table(tmp_path, "Probe,Rechts,Hoch,Fehler\nA,600000,5150000,4\nB,600010,5150000,\n")
    points = read_points(
        path, crs="EPSG:32632", id_column="Probe", x_column="Rechts", y_column="Hoch",
        error_column="Fehler",
    )  # fmt: skip
    assert points.names == ("A", "B")
    assert points.error[0] == 4.0
    assert np.isnan(points.error[1])
    assert points.remarks == ()
    assert points.attributes.shape == (2, 0)


@pytest.mark.parametrize(
    ("text", "x"),
    [
        ("id;longitude;latitude\nA;10,5;46,25\n", 10.5),
        ("id\tlongitude\tlatitude\nA\t10.5\t46.25\n", 10.5),
        ("id|lon|lat\nA|10.5|46.25\n", 10.5),
        ('"id","lon","lat"\n"A, of the ridge","10.5","46.25"\n', 10.5),
        ("\ufeffid,lon,lat\r\nA,10.5,46.25\r\n\r\n", 10.5),
        ("lon,lat,id,\n10.5,46.25,A,\n", 10.5),
        ("lon,lat,note\n10.5,46.25\n", 10.5),
    ],
)
def test_how_tables_are_written(tmp_path, text, x):
    points = read_points(table(tmp_path, text))
    assert (points.x.tolist(), points.y.tolist()) == ([x], [46.25])


def test_letters_of_old_tables_are_kept_and_said(tmp_path):
    path = table(tmp_path, "id,lon,lat\nGrünsee,10,46\n", encoding="cp1252")
    points = read_points(path)
    assert points.names == ("Grünsee",)
    assert "Windows-1252" in points.remarks[0]
    with pytest.raises(InputError, match="UTF-8"):
        read_points(table(tmp_path, "id,lon,lat\nA,10,46\n", encoding="utf-16"))


def test_a_decimal_comma_is_said(tmp_path):
    points = read_points(table(tmp_path, "id;lon;lat\nA;10,5;46,2\n"))
    assert any("with a comma" in text for text in points.remarks)


def test_text_in_numbers_leaves_the_row_void(tmp_path):
    text = "id,lon,lat\nA,10.5,46\nB,unknown,46\nC,,\nD,10.6,NA\n"
    points = read_points(table(tmp_path, text))
    assert np.isnan(points.x).tolist() == [False, True, True, True]
    assert np.isnan(points.y).tolist() == [False, True, True, True]
    assert "plots 'B', 'C', 'D'" in points.warnings[0]


def test_names_given_twice_are_told_and_kept(tmp_path):
    points = read_points(table(tmp_path, "plot,lon,lat\nA,1,2\nA,3,4\nB,5,6\n"))
    assert points.names == ("A", "A", "B")
    assert "more than one plot is called 'A'" in points.warnings[0]


def test_the_column_that_tells_plots_apart_names_them(tmp_path):
    text = "name,site,lon,lat\nridge,740,1,2\n,741,3,4\nridge,742,5,6\n"
    assert read_points(table(tmp_path, text)).names == ("740", "741", "742")
    assert read_points(table(tmp_path, text), id_column="name").names == ("ridge", "2", "ridge")


def test_without_names_they_are_numbered(tmp_path):
    points = read_points(table(tmp_path, "lon,lat\n1,2\n3,4\n"))
    assert points.names == ("1", "2")
    assert "numbered" in points.remarks[1]


def test_errors_of_position(tmp_path):
    text = "id,lon,lat,gps_error_m\nA,1,2,5.5\nB,1,3,-2\nC,1,4,good\nD,1,5,\n"
    points = read_points(table(tmp_path, text))
    assert points.error[0] == 5.5
    assert np.isnan(points.error[1:]).all()
    assert "plots 'B', 'C' is no length" in points.warnings[0]
    assert any("in metres" in text for text in points.remarks)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "no row below its header"),
        ("id,lon,lat\n", "no row below its header"),
        ("id,a,b\n1,2,3\n", "no columns are named longitude"),
        ("lon,lat,lat\n1,2,3\n", "two columns are named 'lat'"),
        ("lon,lat\n1,2,3\n", "row 2 has 3 columns and the header 2"),
        ("lon,lat\nwest,north\n", "no row has coordinates"),
        ("lon\0,lat\n1,2\n", "not text"),
    ],
)
def test_tables_that_will_not_do(tmp_path, text, words):
    path = table(tmp_path, text)
    with pytest.raises(InputError, match=words) as caught:
        read_points(path)
    assert str(path) in str(caught.value)


@pytest.mark.parametrize(
    ("asked", "words"),
    [
        ({"id_column": "who"}, "no column 'who'.*'id', 'lon', 'lat'"),
        ({"x_column": "lon"}, "both columns"),
        ({"x_column": "lon", "y_column": "high"}, "no column 'high'"),
        ({"error_column": "e"}, "no column 'e'"),
        ({"crs": "EPSG:1"}, "cannot be understood"),
        ({"layer": "plots"}, "no layers"),
    ],
)
def test_settings_that_will_not_do(tmp_path, asked, words):
    path = table(tmp_path, "id,lon,lat\nA,1,2\n")
    with pytest.raises(SettingError, match=words):
        read_points(path, **asked)


def test_no_file_and_a_folder(tmp_path):
    with pytest.raises(InputError, match=r"none\.csv"):
        read_points(tmp_path / "none.csv")
    (tmp_path / "folder.csv").mkdir()
    with pytest.raises(InputError, match="folder"):
        read_points(tmp_path / "folder.csv")
    with pytest.raises(InputError, match="no such file"):
        read_points(tmp_path / "none.gpkg")


PLACES = [Point(600000, 5150000), Point(600100, 5150050)]


@pytest.mark.parametrize("name", ["p.gpkg", "p.shp", "p.parquet", "p.geojson"])
def test_vector_files(tmp_path, name):
    crs = "EPSG:4326" if name.endswith("json") else "EPSG:32632"
    places = [Point(10.3, 46.5), Point(10.31, 46.51)] if crs == "EPSG:4326" else PLACES
    path = vectors(tmp_path / name, places, crs, site=["A", "B"], cover=[0.5, 0.7])
    points = read_points(path)
    assert points.crs.to_epsg() == int(crs[5:])
    assert points.names == ("A", "B")
    np.testing.assert_allclose(points.x, [p.x for p in places])
    np.testing.assert_allclose(points.attributes["cover"].astype(float), [0.5, 0.7])


def test_a_vector_file_without_crs(tmp_path):
    path = vectors(tmp_path / "p.shp", PLACES, site=["A", "B"])
    (tmp_path / "p.prj").unlink()
    with pytest.raises(InputError, match="no CRS"):
        read_points(path)
    assert read_points(path, crs="EPSG:32632").crs.to_epsg() == 32632
    known = vectors(tmp_path / "q.gpkg", PLACES, site=["A", "B"])
    with pytest.raises(SettingError, match="its own CRS"):
        read_points(known, crs="EPSG:32632")


def test_vector_files_that_will_not_do(tmp_path):
    path = vectors(tmp_path / "areas.gpkg", [p.buffer(5.0) for p in PLACES], site=["A", "B"])
    with pytest.raises(InputError, match="'Polygon': give one single point"):
        read_points(path)
    path = vectors(tmp_path / "multi.gpkg", [MultiPoint(PLACES)], site=["A"])
    with pytest.raises(InputError, match="MultiPoint"):
        read_points(path)
    with pytest.raises(SettingError, match="as geometry"):
        read_points(path, x_column="x", y_column="y")


def test_points_of_several_layers(tmp_path):
    path = tmp_path / "p.gpkg"
    for layer in ("summer", "winter"):
        vectors(path, PLACES, layer=layer, site=["A", "B"])
    with pytest.raises(InputError, match=r"'summer', 'winter': choose one with --layer"):
        read_points(path)
    assert len(read_points(path, layer="winter")) == 2


def test_one_point_in_a_multipoint_is_a_point(tmp_path):
    path = vectors(tmp_path / "p.gpkg", [MultiPoint([p]) for p in PLACES], site=["A", "B"])
    assert read_points(path).x.tolist() == [600000.0, 600100.0]


def test_a_missing_point_stays_as_a_row(tmp_path):
    path = vectors(tmp_path / "p.gpkg", [PLACES[0], None], site=["A", "B"])
    points = read_points(path)
    assert np.isnan(points.x[1])
    assert "'B'" in points.warnings[0]


def test_only_some_are_named():
    names = [f"P{k}" for k in range(9)]
    assert listed(names, np.ones(9, bool)) == "plots 'P0', 'P1', 'P2', 'P3', 'P4' and 4 more"
