"""The command `terrasol plots`: files, record, words, refusals."""

import json
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pytest
from files.made import GRID, hills, write_raster
from pyproj import Transformer

from terrasol.cli.main import main
from terrasol.cli.plots import GROUPS
from terrasol.engine.predictors import GROUPS as KNOWN_GROUPS

QUICK = ["--azimuths", "8", "--step-seconds", "3600", "--linke", "3"]
FILES = [
    "columns.csv", "correlations.csv", "methods.md", "plots.csv", "plots.parquet",
    "predictors.png", "run.json",
]  # fmt: skip


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    values = hills()
    values[5, 5] = np.nan
    return write_raster(tmp_path_factory.mktemp("ground") / "hills.tif", values, unit="m")


@pytest.fixture(scope="module")
def places():
    """Names, longitudes and latitudes of twelve plots on the hills."""
    rng = np.random.default_rng(2)
    x, y = GRID @ (rng.uniform(4, 44, 12), rng.uniform(8, 36, 12))
    return Transformer.from_crs(32632, 4326, always_xy=True).transform(x, y)


@pytest.fixture(scope="module")
def plots(places, tmp_path_factory):
    longitude, latitude = places
    path = tmp_path_factory.mktemp("plots") / "relevés.csv"
    cover = np.random.default_rng(3).uniform(0, 1, 12).round(2)
    pd.DataFrame(
        {
            "id": [f"P{k}" for k in range(12)],
            "lon": longitude,
            "lat": latitude,
            "cover": cover,
            "note": "wet",
        }
    ).to_csv(path, index=False)
    return path


@pytest.fixture(scope="module")
def done(dem, plots, tmp_path_factory):
    out = tmp_path_factory.mktemp("done") / "out"
    asked = [
        "--grains",
        "2x",
        "--radii",
        "60",
        "--gps-error",
        "10",
        "--response",
        "cover",
        "--long",
    ]
    assert main(["plots", str(dem), str(plots), str(out), *asked, "--quiet", *QUICK]) == 0
    return out


def test_files(done):
    assert sorted(path.name for path in done.iterdir()) == sorted([*FILES, "plots_long.csv"])
    assert (done / "predictors.png").read_bytes().startswith(b"\x89PNG")


def test_tables_hold_the_same(done):
    text = pd.read_csv(done / "plots.csv")
    packed = geopandas.read_parquet(done / "plots.parquet")
    assert list(packed.columns) == [*text.columns, "geometry"]
    assert packed.crs.to_epsg() in (4326, None) or packed.crs.to_string() == "OGC:CRS84"
    np.testing.assert_allclose(packed.geometry.x, text["longitude"], atol=1e-8)
    for name in text.columns:
        if text[name].dtype == float:
            np.testing.assert_allclose(text[name], packed[name].astype(float), rtol=1e-6, atol=1e-8)
    long = pd.read_csv(done / "plots_long.csv")
    own = long[(long["predictor"] == "slope_deg") & (long["statistic"] == "cell")]
    cells = sorted(own["cell_m"].unique())
    assert cells[0] == pytest.approx(50.0, rel=1e-3)
    assert cells[1] == pytest.approx(2 * cells[0], rel=1e-4)
    same = own[own["cell_m"] == cells[0]].set_index("id")["value"]
    np.testing.assert_allclose(same[text["id"]], text["slope_deg"], rtol=1e-6)


def test_dictionary_names_every_column(done):
    told = pd.read_csv(done / "columns.csv")
    assert told["column"].tolist() == pd.read_csv(done / "plots.csv", nrows=0).columns.tolist()
    assert told["meaning"].notna().all()
    assert told[told["statistic"].notna()]["unit"].notna().all()


def test_record(done, dem, plots):
    record = json.loads((done / "run.json").read_text("utf-8"))
    assert record["command"] == "plots"
    settings, results = record["settings"], record["results"]
    assert settings["plots"]["file"] == str(plots)
    assert len(settings["plots"]["sha256"]) == 64
    assert settings["season_months"] == [4, 5, 6, 7, 8, 9, 10]
    assert settings["radii_m"] == [60.0]
    assert settings["cells_joined"] == [1, 2]
    assert settings["hours"]["azimuths"] == 32
    assert settings["light"]["air"]["linke"] == 3
    assert results["flags"] == {"ok": 12}
    assert len(results["strongest_with_response"]) == 5
    assert 0.3 < results["strongest_by_chance"] < 1.0
    assert any("WGS 84" in text for text in results["remarks"])


def test_methods_say_what_was_done(done):
    text = (done / "methods.md").read_text("utf-8")
    for words in (
        "12 plots", "hills.tif", "Linke turbidity 3)", "3600 s", "8 azimuths", "32 azimuths",
        "albedo is 0.2", "April to October", "Within 60 m", "Perez et al. (1990)", "typical year",
        "median 10 m", "doi:10.1111/j.1654-1103.2002.tb02087.x", "Remund",
    ):  # fmt: skip
        assert (words in text) is (words != "Remund"), words


def test_methods_of_other_settings(dem, plots, tmp_path):
    asked = [
        "--air", "bird", "--aerosol", "0.1", "--water", "1.5", "--diffuse", "isotropic",
        "--albedo", "0.3", "--basis", "map", "--unit", "kWh", "--season", "05-09",
        "--radii", "none", "--predictors", "irradiation,photosynthetic", "--photons-per-joule", "2",
        "--clear-sky-index", "0.7", "--far", str(tmp_path / "far.tif"), "--period", "2023",
    ]  # fmt: skip
    far = np.pad(hills(), 12, mode="edge")
    write_raster(tmp_path / "far.tif", far, unit="m", transform=GRID @ GRID.translation(-12, -12))
    out = tmp_path / "out"
    assert main(["plots", str(dem), str(plots), str(out), *asked, "--quiet", *QUICK[:4]]) == 0
    text = (out / "methods.md").read_text("utf-8")
    for words in (
        "Bird and Hulstrom 1981; aerosol depth 0.1", "as even over the sky", "albedo is 0.3",
        "per square metre of map", "kWh", "May to September", "indices of 0.7", "far.tif", "2023",
        "counts 2 umol",
    ):  # fmt: skip
        assert words in text, words
    for words in ("Perez", "McCune", "Stage", "Within", "McCree", "errors of position"):
        assert words not in text, words
    columns = pd.read_csv(out / "plots.csv", nrows=0).columns
    assert "irradiation_season_global_kwh_m2_map" in columns
    assert not [c for c in columns if "sun" in c or "heat" in c or "_jan_" in c]


def test_json_and_words(dem, plots, tmp_path, capfd):
    short = ["--predictors", "height,slope", "--radii", "none", *QUICK]
    assert main(["plots", str(dem), str(plots), str(tmp_path / "a"), "--json", *short]) == 0
    told = capfd.readouterr()
    assert json.loads(told.out)["results"]["predictors"] == 2
    assert main(["plots", str(dem), str(plots), str(tmp_path / "b"), *short]) == 0
    told = capfd.readouterr()
    assert told.out == ""
    assert "12 plots (12 ok): 2 predictors" in told.err
    assert "taken as degrees of WGS 84" in told.err


def test_horizons(dem, plots, tmp_path):
    out = tmp_path / "out"
    asked = ["--horizons", "--predictors", "height", "--radii", "none", "--quiet", *QUICK]
    assert main(["plots", str(dem), str(plots), str(out), *asked]) == 0
    table = pd.read_csv(out / "horizons.csv")
    assert list(table.columns) == ["id", "azimuth_deg", "horizon_deg"]
    assert len(table) == 12 * 32
    assert table["horizon_deg"].between(0.0, 40.0).all()
    assert (out / "horizons.png").read_bytes().startswith(b"\x89PNG")


def test_dry_run(dem, plots, tmp_path, capfd):
    out = tmp_path / "out"
    assert (
        main(["plots", str(dem), str(plots), str(out), "--dry-run", "--grains", "90", *QUICK]) == 0
    )
    told = capfd.readouterr().out
    assert "12 in WGS 84, 12 on known ground" in told
    assert "90 m are no whole multiple" in told
    assert not out.exists()
    assert main(["plots", str(dem), str(plots), str(out), "--dry-run", "--json", *QUICK]) == 0
    assert json.loads(capfd.readouterr().out)["plots"] == 12


def test_nothing_is_replaced_unasked(dem, plots, done, capfd):
    assert main(["plots", str(dem), str(plots), str(done), *QUICK]) == 4
    assert "--overwrite" in capfd.readouterr().err


def test_an_input_is_never_replaced(dem, plots, tmp_path, capfd):
    text = plots.read_text("utf-8")
    own = tmp_path / "plots.csv"
    own.write_text(text, "utf-8")
    assert main(["plots", str(dem), str(own), str(tmp_path), "--overwrite", *QUICK]) == 4
    assert "is the input itself" in capfd.readouterr().err
    assert own.read_text("utf-8") == text


@pytest.mark.parametrize(
    ("asked", "code", "words"),
    [
        (["--radii", "wide"], 2, "lengths"),
        (["--radii", "0"], 2, "lengths"),
        (["--radii", "50x"], 2, "lengths"),
        (["--grains", "2y"], 2, "multiples such as 4x"),
        (["--grains", "40x"], 2, "fewer than two rows"),
        (["--season", "spring"], 2, "04-10"),
        (["--predictors", "colour"], 2, "colour"),
        (["--period", "2025-04"], 2, "twelve whole months"),
        (["--gps-error", "-3"], 2, "--gps-error"),
        (["--response", "species"], 2, "no such column; it has 'cover', 'note'"),
        (["--response", "note"], 2, "has no number"),
        (["--x", "lon"], 2, "go together"),
        (["--plots-crs", "EPSG:32632"], 3, "degrees by name"),
        (["--plots-crs", "nowhere"], 2, "cannot be understood"),
        (["--layer", "a"], 2, "no layers"),
        (["--horizon-gap"], 2, "it is a map"),
        (["--clock", "noon"], 2, "clock"),
        (["--x", "lat", "--y", "lon", "--plots-crs", "EPSG:4326"], 3, "swapped"),
    ],
)
def test_refusals(dem, plots, tmp_path, capfd, asked, code, words):
    out = tmp_path / "out"
    assert main(["plots", str(dem), str(plots), str(out), *asked, *QUICK]) == code
    told = capfd.readouterr().err
    assert words in told
    assert len(told.strip().splitlines()) == 1
    assert not out.exists()


def test_plots_elsewhere(dem, tmp_path, capfd):
    path = tmp_path / "far.csv"
    path.write_text("id,lon,lat\nA,0,0\nB,1,1\n")
    assert main(["plots", str(dem), str(path), str(tmp_path / "out"), *QUICK]) == 3
    told = capfd.readouterr().err
    assert "far.csv: all plots lie outside the raster" in told


def test_groups_are_those_of_the_library():
    assert tuple(KNOWN_GROUPS) == GROUPS


def test_the_southern_season(tmp_path):
    path = write_raster(tmp_path / "south.tif", crs="EPSG:32732", unit="m")
    x, y = GRID @ (20.5, 20.5)
    table = tmp_path / "p.csv"
    table.write_text(f"id,x,y\nA,{x},{y}\n")
    asked = ["--plots-crs", "EPSG:32732", "--predictors", "irradiation,aspect", "--quiet"]
    out = tmp_path / "out"
    assert main(["plots", str(path), str(table), str(out), *asked, *QUICK]) == 0
    record = json.loads((out / "run.json").read_text("utf-8"))
    assert record["settings"]["season_months"] == [10, 11, 12, 1, 2, 3, 4]
    assert "October to April" in (out / "methods.md").read_text("utf-8")
    frame = pd.read_csv(out / "plots.csv")
    assert frame["latitude"][0] < 0.0


def test_plots_of_a_vector_file(dem, plots, done, tmp_path):
    frame = pd.read_csv(plots)
    places = geopandas.points_from_xy(frame["lon"], frame["lat"], crs=4326).to_crs(32632)
    path = tmp_path / "p.gpkg"
    geopandas.GeoDataFrame(frame.drop(columns=["lon", "lat"]), geometry=places).to_file(path)
    asked = ["--radii", "60", "--gps-error", "10", "--predictors", "height,slope", "--quiet"]
    out = tmp_path / "out"
    assert main(["plots", str(dem), str(path), str(out), *asked, *QUICK]) == 0
    found, same = pd.read_csv(out / "plots.csv"), pd.read_csv(done / "plots.csv")
    for name in ("height_m", "slope_deg_r60_mean", "height_m_gps_sd"):
        np.testing.assert_allclose(found[name], same[name], rtol=1e-5)
    assert found["cover"].tolist() == same["cover"].tolist()


@pytest.mark.heavy
def test_under_a_measured_sky(dem, plots, done, tmp_path, capfd):
    station = str(Path(__file__).parents[2] / "sample_dem" / "station.csv")
    asked = ["--station", station, "--predictors", "irradiation,sun_hours", "--radii", "none"]
    command = ["plots", str(dem), str(plots), str(tmp_path / "out"), *asked, *QUICK]
    assert main(command) == 2
    assert "not twelve whole months" in capfd.readouterr().err
    assert main([*command, "--period", "2024-10/2025-09", "--albedo", "0.25", "--quiet"]) == 0
    text = (tmp_path / "out" / "methods.md").read_text("utf-8")
    for words in ("under the sky measured at", "DIRINT", "2024-10-01/2025-09-30", "is 0.25"):
        assert words in text, words
    told = pd.read_csv(tmp_path / "out" / "columns.csv")
    energy = told[told["column"].str.startswith("irradiation")]
    assert energy["meaning"].str.contains("under the measured sky").all()
    clouded = pd.read_csv(tmp_path / "out" / "plots.csv")["irradiation_year_beam_mj_m2_slope"]
    clear = pd.read_csv(done / "plots.csv")["irradiation_year_beam_mj_m2_slope"]
    assert (clouded < 0.9 * clear).all()


def test_cell_sizes_in_metres_and_multiples(dem, plots, tmp_path):
    asked = ["--grains", "100,2x,200", "--predictors", "height", "--radii", "none", "--quiet"]
    out = tmp_path / "out"
    assert main(["plots", str(dem), str(plots), str(out), *asked, *QUICK]) == 0
    record = json.loads((out / "run.json").read_text("utf-8"))
    assert record["settings"]["cells_joined"] == [1, 2, 4]


@pytest.mark.heavy
def test_albedo_and_clear_sky_index_come_as_rasters(dem, plots, tmp_path, capsys):
    """An index that rises eastward, in two cell sizes; the record names both files."""
    shape = hills().shape
    index = np.broadcast_to(np.linspace(0.5, 0.9, shape[1]), shape)
    albedo = np.full(shape, 0.4)
    albedo[:3, :3] = np.nan
    for name, values in (("index", index), ("albedo", albedo)):
        write_raster(tmp_path / f"{name}.tif", values.astype(float))
    maps = [str(tmp_path / "albedo.tif"), str(tmp_path / "index.tif")]
    out = tmp_path / "o"
    command = ["plots", str(dem), str(plots), str(out), *QUICK, "--grains", "2x", "--radii", "60"]
    assert main([*command, "--albedo", maps[0], "--clear-sky-index", maps[1]]) == 0
    assert "the map of the albedo has no value for 9 cells" in capsys.readouterr().err
    record = json.loads((out / "run.json").read_text("utf-8"))["settings"]
    assert record["light"]["albedo"]["file"] == maps[0]
    assert record["clear_sky_index"]["file"] == maps[1]
    words = (out / "methods.md").read_text("utf-8")
    assert "indices that a map gives each cell" in words
    assert "albedo is that of a map, and 0.2 where the map is void" in words
    table = pd.read_csv(out / "plots.csv")
    for column in [c for c in table if c.startswith("irradiation_year")][:2]:
        assert np.corrcoef(table["longitude"], table[column])[0, 1] > 0.8
