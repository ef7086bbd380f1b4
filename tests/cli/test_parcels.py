"""The command `terrasol parcels`: files, units, sheets, refusals."""

from __future__ import annotations

import csv
import json
import re
import sqlite3
from contextlib import closing

import geopandas
import numpy as np
import pytest
import rasterio
import shapely
from engine.made_parcels import LEFT, TOP, UTM, plane
from files.made import write_raster
from rasterio import Affine

from terrasol.cli.main import main
from terrasol.cli.parcels import _cell, parcels, sheet_names
from terrasol.practice.limits import VINEYARD

QUICK = ["--azimuths", "8", "--step-seconds", "3600", "--quiet"]
RULE = ["--rule", "slope_percent < 15 and share_of_level >= 0.95", "--least-patch", "500"]


def outline(x0, y0, x1, y1):
    return shapely.box(LEFT + 400 + x0, TOP - 400 + y0, LEFT + 400 + x1, TOP - 400 + y1)


@pytest.fixture(scope="module")
def places(tmp_path_factory):
    """A slope of 12 %, steep in the east, and three parcels."""
    folder = tmp_path_factory.mktemp("places")
    heights = plane(12.0, 180.0).heights.astype(float)
    heights[:, 50:] += 3.0 * np.arange(30)
    ground = plane(0.0, 0.0)
    dem = write_raster(
        folder / "slope.tif", heights, transform=ground.transform, crs=UTM, unit="metre"
    )
    shapes = [outline(-150, -60, -40, 60), outline(120, -60, 200, 60), outline(-305, -60, -200, 5)]
    table = geopandas.GeoDataFrame(
        {"name": ["Lower", "Upper", "Côte/3"], "rows": [1, 2, 3]}, geometry=shapes, crs=UTM
    )
    table.to_crs(4326).to_file(folder / "parcels.geojson", COORDINATE_PRECISION=10)
    days = np.arange("2024-01-01", "2025-01-01", dtype="M8[D]")
    lines = ["date,least_c,highest_c", *(f"{day},9,21" for day in days)]
    (folder / "days.csv").write_text("\n".join(lines) + "\n")
    return dem, folder / "parcels.geojson", folder / "days.csv"


@pytest.fixture(scope="module")
def whole(places, tmp_path_factory):
    dem, shapes, days = places
    out = tmp_path_factory.mktemp("out") / "out"
    asked = [
        *RULE, "--score", "rule_ha_map - slope_mean_percent / 10", "--rows", "2,1.3,0.4",
        "--canopy-albedo", "0.15", "--temperatures", str(days), "--temperatures-height", "500",
        "--dem-error", "0.2,30", "--realisations", "2", "--coarser", "2",
    ]  # fmt: skip
    assert main(["parcels", str(dem), str(shapes), str(out), *QUICK, *asked]) == 0
    return out


def rows_of(path):
    with open(path, newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def test_files(whole):
    assert sorted(path.name for path in whole.iterdir()) == [
        "cell_sizes.csv", "columns.csv", "parcels.csv", "parcels.gpkg", "parcels.pdf",
        "row_directions.csv", "run.json", "standard_errors.csv",
    ]  # fmt: skip
    assert (whole / "parcels.pdf").read_bytes().startswith(b"%PDF")
    assert (whole / "parcels.pdf").read_bytes().count(b"/Type /Page ") == 4  # and a summary


def test_every_column_is_explained_and_names_its_unit(whole):
    explained = {row["column"]: row for row in rows_of(whole / "columns.csv")}
    for name in ("parcels", "cell_sizes", "row_directions", "standard_errors"):
        assert set(rows_of(whole / f"{name}.csv")[0]) <= set(explained)
    for column, row in explained.items():
        if row["unit"] == "ha":
            assert row["area_basis"] in ("map", "slope"), column
            assert "_ha" in column
        assert row["meaning"], column


def test_no_sector_of_aspect_reads_as_a_standard_error(whole):
    explained = {row["column"]: row["meaning"] for row in rows_of(whole / "columns.csv")}
    sectors = [name for name in explained if re.fullmatch(r"aspect_[a-z_]+_ha_map", name)]
    assert sectors == [
        f"aspect_{name}_ha_map" for name in
        ("flat", "north", "north_east", "east", "south_east", "south", "south_west", "west",
         "north_west")
    ]  # fmt: skip
    assert explained["aspect_south_east_ha_map"].startswith("area that faces south-east, within")
    layer = geopandas.read_file(whole / "parcels.gpkg", layer="parcels")
    assert set(sectors) <= set(layer.columns)
    for name in (*explained, *layer.columns):
        if "se" in name.split("_"):
            assert name.endswith("_se")
            assert "standard error" in explained[name]


def test_dictionary_layers_and_record_name_the_sky(whole):
    explained = {row["column"]: row["meaning"] for row in rows_of(whole / "columns.csv")}
    for name in ("irradiation_season_mj_m2_slope", "share_of_level_m04", "top_mj_m2"):
        assert explained[name].endswith("; potential (clear-sky)"), name
    for name in ("sun_hours_season_h", "share_of_level_season_se", "map_area_ha"):
        assert "potential" not in explained[name], name
    results = json.loads((whole / "run.json").read_text("utf-8"))["results"]
    assert results["sky"] == "clear"
    with closing(sqlite3.connect(whole / "parcels.gpkg")) as package:
        told = dict(package.execute("SELECT table_name, description FROM gpkg_contents"))
    assert set(told) == {"parcels", "rule"}
    for words in told.values():
        assert "growing season April to October, typical year" in words
        assert words.endswith(results["light"])
    assert RULE[1] in told["rule"]


def test_tables_agree_with_each_other(whole):
    table = rows_of(whole / "parcels.csv")
    assert [row["rank"] for row in table] == ["1", "2", "3"]
    totals = [float(row["score"]) for row in table]
    assert totals == sorted(totals, reverse=True)
    for row in table:
        terms = float(row["score_term_1"]) + float(row["score_term_2"])
        assert terms == pytest.approx(float(row["score"]), rel=1e-5)
    layer = geopandas.read_file(whole / "parcels.gpkg", layer="parcels")
    assert layer["parcel"].tolist() == [row["parcel"] for row in table]
    assert layer.crs == UTM
    assert dict(zip(layer["parcel"], layer["given_rows"], strict=True)) == {
        "Lower": 1.0, "Upper": 2.0, "Côte/3": 3.0,
    }  # fmt: skip
    patches = geopandas.read_file(whole / "parcels.gpkg", layer="rule")
    for row in table:
        mine = patches[patches["parcel"] == row["parcel"]]
        assert mine["area_ha_map"].sum() == pytest.approx(float(row["rule_ha_map"]), rel=1e-5)
        drawn = mine.geometry.area.sum() * 0.9996**-2 / 1e4
        assert drawn == pytest.approx(float(row["rule_ha_map"]), rel=1e-4)
    for column in ("map_area_ha", "rule_ha_map", "winkler_mean_c_days", "rule_ha_map_se"):
        found = [float(row[column]) for row in table]
        assert layer[column].tolist() == pytest.approx(found, rel=1e-6)
    sizes = rows_of(whole / "cell_sizes.csv")
    assert [float(row["cell_m"]) for row in sizes[:2]] == pytest.approx([10.0, 20.0], rel=1e-3)
    directions = rows_of(whole / "row_directions.csv")
    assert len(directions) == 3 * 36


def test_area_in_the_layer_is_that_of_the_outline(whole):
    layer = geopandas.read_file(whole / "parcels.gpkg", layer="parcels")
    scale = 0.9996**-2
    expected = (layer.geometry.area * scale / 1e4).tolist()
    assert layer["map_area_ha"].tolist() == pytest.approx(expected, rel=1e-4)


def test_record_says_how_and_what_not(whole):
    record = json.loads((whole / "run.json").read_text("utf-8"))
    assert record["command"] == "parcels"
    settings = record["settings"]
    assert settings["canopy_albedo"] == 0.15
    assert settings["rule"] == RULE[1]
    assert settings["season"] == "April to October"
    assert settings["dem_error"]["rmse_m"] == 0.2
    assert settings["temperatures"]["lapse_k_per_km"] == 6.5
    assert record["results"]["not_in_it"] == VINEYARD
    assert "Frost" in VINEYARD
    assert "soil" in VINEYARD
    assert "water" in VINEYARD
    assert len(record["results"]["parcels"]) == 3
    assert len(settings["parcels"]["sha256"]) == 64


def test_summary_is_for_people(places, tmp_path, capsys):
    dem, shapes, _ = places
    asked = [*QUICK[:-1], *RULE, "--coarser", "none", "--sheets", "none"]
    assert main(["parcels", str(dem), str(shapes), str(tmp_path / "o"), *asked]) == 0
    said = capsys.readouterr().err
    assert "Côte/3" in said
    assert "rule: slope_percent < 15" in said
    assert "ha drawn" in said
    assert "season: April to October; energy potential (clear-sky), per area of slope" in said
    assert "Sky without clouds after Ineichen and Perez 2002; real skies give less. Linke" in said
    assert "ha known" not in said  # all of what is drawn
    assert "warning: shade of all that stands in the raster, and of nothing beyond it" in said
    assert VINEYARD in said
    assert sorted(p.name for p in (tmp_path / "o").iterdir()) == [
        "columns.csv", "parcels.csv", "parcels.gpkg", "run.json",
    ]  # fmt: skip


@pytest.mark.heavy
def test_pictures_one_a_parcel(places, tmp_path):
    dem, shapes, _ = places
    out = tmp_path / "o"
    asked = [*QUICK, "--coarser", "none", "--sheets", "png", "--clock", "+01:00"]
    assert main(["parcels", str(dem), str(shapes), str(out), *asked]) == 0
    pictures = sorted(path.name for path in out.glob("*.png"))
    assert pictures == [
        "sheet_1_lower.png", "sheet_2_upper.png", "sheet_3_cote-3.png", "summary.png",
    ]  # fmt: skip
    for name in pictures:
        assert (out / name).read_bytes().startswith(b"\x89PNG")


def test_json_on_stdout_and_dry_run(places, tmp_path, capsys):
    dem, shapes, _ = places
    out = tmp_path / "o"
    command = ["parcels", str(dem), str(shapes), str(out), *QUICK, "--json"]
    assert main([*command, "--dry-run"]) == 0
    forecast = json.loads(capsys.readouterr().out)
    assert forecast["parcels"] == ["Lower", "Upper", "Côte/3"]
    assert "parcels.pdf" in forecast["files"]
    assert not out.exists()
    assert main([*command, "--coarser", "none", "--sheets", "none"]) == 0
    record = json.loads(capsys.readouterr().out)
    found = record["results"]["parcels"][0]
    assert found["parcel"] == "Lower"
    assert found["slope_10_to_15_percent_ha_map"] == pytest.approx(1.1 * 1.2 * 0.9996**-2, rel=1e-4)


@pytest.mark.heavy
def test_a_measured_sky_and_a_season_of_its_own(places, tmp_path):
    dem, shapes, _ = places
    out = tmp_path / "o"
    asked = [
        "--period",
        "2024",
        "--season",
        "05-06",
        "--clear-sky-index",
        "0.7",
        "--sheets",
        "none",
    ]
    assert main(["parcels", str(dem), str(shapes), str(out), *QUICK, *asked]) == 0
    row = rows_of(out / "parcels.csv")[0]
    two = float(row["irradiation_2024_05_mj_m2_slope"]) + float(
        row["irradiation_2024_06_mj_m2_slope"]
    )
    assert float(row["irradiation_season_mj_m2_slope"]) == pytest.approx(two, rel=1e-5)
    clear = tmp_path / "clear"
    asked = [*asked[:4], "--sheets", "none"]
    assert main(["parcels", str(dem), str(shapes), str(clear), *QUICK, *asked]) == 0
    bright = rows_of(clear / "parcels.csv")[0]
    assert float(row["irradiation_2024_05_mj_m2_slope"]) < 0.75 * float(
        bright["irradiation_2024_05_mj_m2_slope"]
    )


@pytest.mark.heavy
def test_ground_beyond_and_trees_above_take_sun(places, tmp_path):
    """A ridge of 400 m south of the raster, and trees of 30 m south of the first parcel."""
    dem, shapes, _ = places
    heights = np.full((60, 60), 480.0)
    heights[44:] = 900.0  # 400 m and more south of the raster's middle
    wide = Affine(40, 0, LEFT - 800, 0, -40, TOP + 800)
    far = write_raster(tmp_path / "far.tif", heights, transform=wide, crs=UTM, unit="metre")
    with rasterio.open(dem) as source:
        trees, grid = source.read(1), source.transform
    trees[47:52, 20:40] += 30.0
    dsm = write_raster(tmp_path / "dsm.tif", trees, transform=grid, crs=UTM, unit="metre")
    seasons = []
    for name, asked in (
        ("open", []),
        ("far", ["--far", str(far)]),
        ("trees", ["--surface", str(dsm)]),
    ):
        plain = [*QUICK, "--sheets", "none", "--coarser", "2", *asked]
        assert main(["parcels", str(dem), str(shapes), str(tmp_path / name), *plain]) == 0
        sizes = rows_of(tmp_path / name / "cell_sizes.csv")
        mine = [row for row in sizes if row["parcel"] == "Lower"]
        seasons.append([float(row["sun_hours_m12_h"]) for row in mine])
    for shaded in seasons[1:]:
        assert shaded[0] < 0.9 * seasons[0][0]
        assert shaded[1] < 0.9 * seasons[0][1]


@pytest.mark.parametrize(
    ("asked", "code", "words"),
    [
        (["--rule", "slop < 15"], 2, "slop"),
        (["--rule", "__import__('os')"], 2, "rule"),
        (["--score", "no_such_figure"], 2, "no_such_figure"),
        (["--score", "aspect_se_ha_map"], 2, "needs its sector written out, aspect_south_east_ha"),
        (["--score", "rule_share"], 2, "names rule_share, which needs --rule"),
        (["--rule", "degree_days > 9"], 2, "names degree_days, which needs --temperatures"),
        (["--least-patch", "500"], 2, "--least-patch belongs to --rule"),
        (["--rows", "2,1.3"], 2, "3 numbers"),
        (["--rows", "1,1.3,1.2"], 2, "no gap"),
        (["--rows", "2,1.3,0.4", "--canopy-albedo", "1"], 2, "canopy albedo 1 is outside 0 to"),
        (["--canopy-albedo", "0.2"], 2, "--canopy-albedo belongs to --rows"),
        (["--slope-classes", "10,5"], 2, "ascend"),
        (["--season", "13-14"], 2, "season"),
        (["--period", "2025-05/2025-06"], 2, "no whole growing season"),
        (["--coarser", "1"], 2, "2 by 2"),
        (["--coarser", "some"], 2, "whole numbers"),
        (["--temperatures", "gone.csv", "--temperatures-height", "5"], 3, "gone.csv"),
        (["--temperatures-height", "5"], 2, "belongs to --temperatures"),
        (["--lapse-rate", "6"], 2, "belongs to --temperatures"),
        (["--layer", "nine"], 2, "no layer 'nine'"),
        (["--name-field", "nine"], 3, "no field 'nine'"),
        (["--horizon-gap"], 2, "it is a map"),
        (["--clock", "noon"], 2, "noon"),
    ],
)
def test_mistakes_are_told(places, tmp_path, capsys, asked, code, words):
    dem, shapes, _ = places
    out = tmp_path / "o"
    assert main(["parcels", str(dem), str(shapes), str(out), *QUICK, *asked]) == code
    error = capsys.readouterr().err
    assert words in error
    assert "Traceback" not in error
    assert not out.exists()


def test_parcels_elsewhere_and_no_parcels(places, tmp_path, capsys):
    dem, shapes, _ = places
    away = geopandas.GeoDataFrame({"name": ["x"]}, geometry=[shapely.box(0, 0, 1, 1)], crs=4326)
    away.to_file(tmp_path / "away.geojson")
    out = tmp_path / "o"
    assert main(["parcels", str(dem), str(tmp_path / "away.geojson"), str(out), *QUICK]) == 3
    assert "away.geojson" in capsys.readouterr().err
    assert main(["parcels", str(dem), str(tmp_path / "none.gpkg"), str(out), *QUICK]) == 3
    assert "no such file" in capsys.readouterr().err
    assert main(["parcels", str(tmp_path / "none.tif"), str(shapes), str(out), *QUICK]) == 3
    assert not out.exists()


def test_nothing_is_overwritten_unasked_and_no_input_ever(places, tmp_path, capsys):
    dem, shapes, _ = places
    out = tmp_path / "o"
    out.mkdir()
    (out / "parcels.csv").write_text("mine")
    plain = [*QUICK, "--coarser", "none", "--sheets", "none"]
    assert main(["parcels", str(dem), str(shapes), str(out), *plain]) == 4
    assert (out / "parcels.csv").read_text() == "mine"
    assert main(["parcels", str(dem), str(shapes), str(out), *plain, "--overwrite"]) == 0
    assert (out / "parcels.csv").read_text().startswith("parcel,")
    capsys.readouterr()
    again = [
        "parcels",
        str(dem),
        str(out / "parcels.gpkg"),
        str(out),
        "--layer",
        "parcels",
        *plain,
        "--overwrite",
    ]
    assert main(again) == 4
    assert "is the input itself" in capsys.readouterr().err


def test_a_bow_tie_is_mended_and_said_so(places, tmp_path, capsys):
    dem, _, _ = places
    x, y = LEFT + 300, TOP - 450
    tie = shapely.Polygon([(x, y), (x + 100, y + 100), (x + 100, y), (x, y + 100)])
    geopandas.GeoDataFrame({"name": ["tie"]}, geometry=[tie], crs=UTM).to_file(tmp_path / "t.gpkg")
    out = tmp_path / "o"
    plain = [*QUICK[:-1], "--coarser", "none", "--sheets", "none"]
    assert main(["parcels", str(dem), str(tmp_path / "t.gpkg"), str(out), *plain]) == 0
    assert "warning: the outline of 'tie' was not valid" in capsys.readouterr().err
    area = float(rows_of(out / "parcels.csv")[0]["map_area_ha"])
    assert area == pytest.approx(0.5 * 0.9996**-2, rel=1e-4)


@pytest.mark.heavy
def test_albedo_and_clear_sky_index_come_as_rasters(places, tmp_path, capsys):
    dem, shapes, _ = places
    ground = plane(0.0, 0.0)
    index, albedo = np.full((80, 80), 0.6), np.full((80, 80), 0.4)
    index[:, 50:], albedo[0, 0] = 0.9, np.nan
    for name, values in (("index", index), ("albedo", albedo)):
        write_raster(tmp_path / f"{name}.tif", values, transform=ground.transform, crs=UTM)
    maps = ["--albedo", tmp_path / "albedo.tif", "--clear-sky-index", tmp_path / "index.tif"]
    out = tmp_path / "o"
    command = ["parcels", dem, shapes, out, *QUICK[:-1], "--coarser", "2", *maps]
    assert main([str(word) for word in command]) == 0
    assert "the map of the albedo has no value for 1 cell of known" in capsys.readouterr().err
    settings = json.loads((out / "run.json").read_text("utf-8"))["settings"]
    assert settings["albedo"]["file"] == str(tmp_path / "albedo.tif")
    assert settings["clear_sky_index"]["file"] == str(tmp_path / "index.tif")
    level = {
        row["parcel"]: float(row["irradiation_season_level_mj_m2"])
        for row in rows_of(out / "parcels.csv")
    }
    assert level["Lower"] / level["Upper"] == pytest.approx(0.6 / 0.9, rel=0.01)


def test_overlaps_are_told_before_the_work_too(places, tmp_path, capsys):
    shapes = [outline(0, 0, 100, 100), outline(50, 0, 150, 100)]
    table = geopandas.GeoDataFrame({"name": ["a", "b"]}, geometry=shapes, crs=UTM)
    table.to_file(tmp_path / "two.gpkg")
    asked = ["parcels", str(places[0]), str(tmp_path / "two.gpkg"), str(tmp_path / "o")]
    assert main([*asked, "--dry-run", "--json"]) == 0
    (said,) = json.loads(capsys.readouterr().out)["warnings"]
    assert said.startswith("outlines overlap")
    assert said.endswith("'a' with 'b' (0.50 ha)")


def test_long_names_do_not_widen_the_table():
    assert _cell({"parcel": "x" * 300}, "parcel", "{}") == "x" * 37 + "..."


def test_small_areas_are_told_in_square_metres(places, tmp_path, capsys):
    """One unit a table, named in its head: that which suits the smallest parcel."""
    shapes = [outline(-100, -50, 0, 50), outline(0, 0, 3, 3)]
    table = geopandas.GeoDataFrame({"name": ["large", "tiny"]}, geometry=shapes, crs=UTM)
    table.to_file(tmp_path / "two.gpkg")
    plain = [*QUICK[:-1], "--coarser", "none", "--sheets", "none", "--rule", "slope_percent < 15"]
    asked = ["parcels", str(places[0]), str(tmp_path / "two.gpkg"), str(tmp_path / "o")]
    assert main([*asked, *plain]) == 0
    head, large, tiny = capsys.readouterr().err.splitlines()[:3]
    assert head.split()[1:3] == ["m2", "drawn"]
    assert "rule m2" in head
    assert (large.split()[1], large.split()[-1]) == ("10008.0", "10008.0")  # 100 m on UTM's grid
    assert (tiny.split()[1], tiny.split()[-1]) == ("9.0", "9.0")
    assert " m2" not in large + tiny
    assert len(head) == len(large) == len(tiny)


def test_areas_of_a_table_have_the_unit_of_its_smallest_parcel():
    row = {"known_ha_map": 1.0, "rule_ha_map": 0.003, "rule_ha_map_se": 0.001}
    for smallest, told in ((1.0, "0.00 +/- 0.00"), (0.003, "30 +/- 10"), (0.0009, "30.0 +/- 10.0")):
        assert _cell(row, "rule_ha_map", "", smallest) == told


def test_an_area_of_none_or_all_has_a_range_in_place_of_a_standard_error_both_ways():
    row = {"known_ha_map": 2.5, "rule_ha_map_se": 0.32}
    for area, told in ((0.0, "0.00 to 0.32"), (1.0, "1.00 +/- 0.32"), (2.5, "2.18 to 2.50")):
        assert _cell(row | {"rule_ha_map": area}, "rule_ha_map", "") == told
    row |= {"rule_ha_map": 0.0, "rule_ha_map_se": None}
    assert _cell(row, "rule_ha_map", "") == "0.00"


def test_names_of_sheets_are_plain_and_differ():
    names = sheet_names(["Ä b", "../x", "", "日本"])
    assert names == ["sheet_1_a-b.png", "sheet_2_x.png", "sheet_3.png", "sheet_4.png"]


def test_hidden_options_are_those_that_mean_nothing():
    hidden = {p.name for p in parcels.params if getattr(p, "hidden", False)}
    assert hidden == {"compression", "horizon_gap", "highest"}


def test_the_forecast_names_a_few_of_many_parcels():
    from terrasol.cli.parcels import _in_lines

    names = [f"p{k}" for k in range(300)]
    forecast = {
        "parcels": names, "season": "April to October", "input": "dem.tif", "crs": "UTM", "rows": 1,
        "columns": 1, "void_cells": 0, "filled_cells": 0, "heights_m": [0, 1],
        "heights_read_as": "metre", "files": [f"sheet_{k}.png" for k in range(300)], "removed": [],
        "warnings": [],
    }  # fmt: skip
    told = _in_lines(forecast)
    assert "300: p0, p1" in told
    assert "and 292 more" in told
    assert "sheet_0.png" in told
    assert "and 284 more" in told
    assert max(map(len, told.splitlines())) < 300
