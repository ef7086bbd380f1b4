"""`terrasol melt` from the command line."""

import csv
import json

import numpy as np
import pytest
import rasterio
from files.made import hills, write_raster

from terrasol.cli import melt as command
from terrasol.cli.main import main
from terrasol.files import horizons
from terrasol.files.horizons import VARIABLE
from terrasol.files.stacks import open_stack
from terrasol.practice import snow
from terrasol.practice.snow_weather import FILL_HOURS

QUICK = ["--azimuths", "8", "--substep-seconds", "1800"]
TOML = """
[place]
name = "made"
latitude = 46.4
longitude = 7.7
height = 900

[time]
column = "time"
zone = "UTC"
label = "start"

[columns.global]
column = "global"
unit = "W/m2"

[columns.temperature]
column = "temperature"
unit = "degC"

[columns.precipitation]
column = "precipitation"
unit = "mm"

[columns.snow_water]
column = "snow_water"
unit = "mm"
"""


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    values = hills()
    values[10, 12] = np.nan
    return write_raster(tmp_path_factory.mktemp("ground") / "hills.tif", values, unit="m")


@pytest.fixture(scope="module")
def station(tmp_path_factory):
    """Forty invented days: snow at first, then warm; snow water by degree-days of another kind."""
    path = tmp_path_factory.mktemp("station") / "station.csv"
    rows, lies = ["time,global,temperature,precipitation,snow_water"], 0.0
    for hour in range(40 * 24):
        time = np.datetime64("2025-02-20T00:00") + np.timedelta64(hour, "h")
        of_day = hour % 24
        sun = max(np.sin((of_day - 6.5) * np.pi / 11.0), 0.0) if 6 < of_day < 18 else 0.0
        air = -5.0 + 14.0 * hour / 960.0 + 3.0 * np.sin((of_day - 9) * np.pi / 12.0)
        wet = 0.8 if hour % 31 < 5 and hour < 600 else 0.0
        lies = max(lies + (wet if air < 1.0 else 0.0) - max(air, 0.0) * 0.1, 0.0)
        rows.append(f"{time},{450 * sun:.1f},{air:.2f},{wet:.1f},{lies:.1f}")
    path.write_text("\n".join(rows) + "\n")
    path.with_name("station.csv.toml").write_text(TOML)
    return path


@pytest.fixture(autouse=True)
def store(tmp_path, monkeypatch):
    """The store, as the environment names it."""
    monkeypatch.setenv(VARIABLE, str(tmp_path / "store"))


def table(path):
    with open(path, newline="") as file:
        return list(csv.DictReader(file))


def test_choices_are_those_of_the_library():
    assert tuple(snow.MELT_MODELS) == command.MELTS
    assert tuple(snow.ALBEDO_MODELS) == command.ALBEDOS
    options = {option.name: option for option in command.melt.params}
    assert float(options["lapse"].default) == snow.LAPSE
    assert options["fill_weather"].default == FILL_HOURS
    names = [p.name for p in command.melt.params[:3]]
    assert names == ["dem", "station", "out_dir"]


def test_a_run_and_all_of_its_files(dem, station, tmp_path, capsys):
    out = tmp_path / "out"
    more = ["--melt", "hock", "--period", "2025-03-01/2025-03-20", *QUICK]
    assert main(["melt", str(dem), str(station), str(out), *more]) == 0
    said = capsys.readouterr()
    assert said.out == ""
    assert "no avalanche tool" in said.err
    assert "2025-03, million m3: melt" in said.err
    assert "water balance closes" in said.err
    record = json.loads((out / "run.json").read_text())
    names = {path.rsplit("/", 1)[-1] for path in record["files"]}
    assert names == {path.name for path in out.iterdir()}
    assert {"at_station.csv", "at_station.png"} <= names
    assert {"days.nc", "state.nc", "melt_out.tif", "hydrograph.png", "basin.csv"} <= names
    assert max(record["results"]["water_balance_error"].values()) < 1e-6
    assert record["settings"]["model"]["numbers"]["melt_above"] == 0.0
    days = table(out / "basin.csv")
    assert [days[0]["date"], days[-1]["date"]] == ["2025-03-01", "2025-03-20"]
    with open_stack(out / "days.nc") as stack:
        assert set(stack.data_vars) == {"melt", "snow_water", "albedo", "snow_covered"}
        assert stack["melt"].attrs["standard_name"] == "surface_snow_melt_amount"
        assert stack["snow_water"].attrs["standard_name"] == "surface_snow_amount"
        assert "standard_name" not in stack["snow_covered"].attrs
        assert "no avalanche tool" in stack.attrs["comment"]
        melt = stack["melt"].values
        assert np.isnan(melt[:, 10, 12]).all()
        mean = np.nanmean(melt.astype(float), axis=(1, 2))
    told = np.array([float(row["melt_mm"]) for row in days])
    np.testing.assert_allclose(mean, told, atol=0.02)  # stack rounds to 1/64; cells of one size
    with rasterio.open(out / "melt_out.tif") as source:
        assert source.units[0] == "days since 2025-03-01 00:00:00"


@pytest.mark.heavy
def test_the_whole_is_its_parts_and_overwrites_them(dem, station, tmp_path, capsys):
    """A daily update: the state goes on with its own numbers, fitted or given."""
    common = [*QUICK, "--stack", "none", "--quiet"]
    first, rest, whole = (tmp_path / name for name in ("first", "rest", "whole"))
    number = ["--number", "temperature_factor=0.07", "--lapse", "5.5"]
    run = ["melt", str(dem), str(station)]
    assert main([*run, str(first), "--period", "2025-02-21/2025-03-10", *number, *common]) == 0
    going_on = ["--from-state", str(first / "state.nc")]
    assert main([*run, str(rest), *going_on, "--period", "2025-03-11/2025-03-12", *common]) == 0
    assert main([*run, str(whole), "--period", "2025-02-21/2025-03-12", *number, *common]) == 0
    parts = table(first / "basin.csv") + table(rest / "basin.csv")
    assert parts == table(whole / "basin.csv")
    both = [rasterio.open(folder / "melt_out.tif") for folder in (rest, whole)]
    np.testing.assert_array_equal(both[0].read(), both[1].read())
    assert both[0].units == both[1].units
    for source in both:
        source.close()
    capsys.readouterr()
    other = ["--number", "temperature_factor=0.06"]
    assert main([*run, str(tmp_path / "no"), *going_on, *other, *common]) == 3
    assert "temperature_factor 0.07, now 0.06" in capsys.readouterr().err
    gone = ["--period", "2025-03-13/2025-03-14"]
    assert main([*run, str(tmp_path / "no"), *going_on, *gone, *common]) == 3
    assert "let the period begin on that day" in capsys.readouterr().err
    assert not (tmp_path / "no").exists()


@pytest.mark.heavy
def test_an_overwritten_run_keeps_its_stack(dem, station, tmp_path, capsys):
    out = tmp_path / "out"
    run = ["melt", str(dem), str(station), str(out), "--melt", "degree-days", "--no-spread"]
    run += ["--period", "2025-03-01/2025-03-02", "--quiet"]
    assert main(run) == 0
    assert main(run) == 4
    assert "exists" in capsys.readouterr().err
    assert main([*run, "--overwrite"]) == 0
    assert (out / "days.nc").is_file()
    assert main([*run, "--overwrite", "--stack", "none"]) == 0
    assert not (out / "days.nc").exists()  # of an earlier run, and no longer told of
    assert "melt_mm_low" not in (out / "basin.csv").read_text()
    assert main([*run, "--overwrite", "--stack", "zarr"]) == 0
    assert (out / "days.zarr").is_dir()
    (out / "days.zarr" / "mine.txt").write_text("kept with the stack, goes with it")
    assert main([*run, "--overwrite", "--stack", "none"]) == 0
    assert not (out / "days.zarr").exists()
    assert json.loads((out / "run.json").read_text())["removed"] == ["days.zarr"]


@pytest.mark.heavy
def test_a_folder_of_that_name_that_is_no_stack_stays(dem, station, tmp_path):
    out = tmp_path / "out"
    run = ["melt", str(dem), str(station), str(out), "--melt", "degree-days", "--no-spread"]
    run += ["--period", "2025-03-01/2025-03-02", "--quiet", "--stack"]
    assert main([*run, "zarr"]) == 0
    (out / "days.zarr").rename(out / "other")
    (out / "days.zarr").mkdir()
    (out / "days.zarr" / "mine.txt").write_text("mine")
    assert main([*run, "none", "--overwrite"]) == 0
    assert (out / "days.zarr" / "mine.txt").read_text() == "mine"


def test_the_peak_of_a_part_of_a_season_is_told_as_such(dem, station, tmp_path, capsys):
    run = ["melt", str(dem), str(station)]
    plain = [*QUICK, "--melt", "degree-days", "--no-spread", "--stack", "none"]
    first = tmp_path / "first"
    assert main([*run, str(first), "--period", "2025-02-21/2025-03-10", *plain]) == 0
    assert "\npeak snow water " in (said := capsys.readouterr().err)
    assert "of this part" not in said
    assert "warning: made lies outside the raster" in said  # and the run went on
    going_on = ["--from-state", str(first / "state.nc"), "--period", "2025-03-11/2025-03-12"]
    assert main([*run, str(tmp_path / "rest"), *going_on, *plain]) == 0
    said = capsys.readouterr().err
    assert "\npeak snow water of this part (the season began on 2025-02-21) " in said


def test_what_is_asked_for_and_cannot_be(dem, station, tmp_path, capsys):
    out = tmp_path / "out"
    run = ["melt", str(dem), str(station), str(out), "--melt", "degree-days", "--dry-run"]
    assert main([*run, "--fit-numbers", ""]) == 2
    assert "names no number" in capsys.readouterr().err
    assert main([*run, "--bands", "0.001"]) == 2
    assert "make them wider" in capsys.readouterr().err
    assert main([*run, "--from-state", str(tmp_path / "gone.nc")]) == 3
    assert "gone.nc: there is no such file" in capsys.readouterr().err


def test_a_run_that_begins_amid_observed_snow_says_so(dem, station, tmp_path, capsys):
    out = tmp_path / "out"
    run = ["melt", str(dem), str(station), str(out), "--melt", "degree-days", "--dry-run"]
    assert main([*run, "--period", "2025-03-01/2025-03-10"]) == 0
    assert "the run begins on bare ground" in capsys.readouterr().out
    assert main(run) == 0
    assert "bare ground" not in capsys.readouterr().out


def test_fahrenheit_taken_for_celsius_is_refused_or_doubted(dem, station, tmp_path, capsys):
    rows = [line.split(",") for line in station.read_text().splitlines()]
    for row in rows[1:]:
        row[2] = f"{float(row[2]) * 1.8 + 32.0:.2f}"
    path = tmp_path / "american.csv"
    path.write_text("\n".join(",".join(row) for row in rows) + "\n")
    run = ["melt", str(dem), str(path), str(tmp_path / "out"), "--melt", "degree-days", "--dry-run"]
    toml = path.with_name("american.csv.toml")
    toml.write_text(TOML)
    assert main(run) == 3
    said = capsys.readouterr().err
    assert "american.csv: temperature cannot be in degC" in said
    assert "degF would fit" in said
    toml.write_text("[file]\ncheck_units = false\n" + TOML)
    assert main(run) == 0
    assert "while snow was observed" in capsys.readouterr().out
    toml.write_text(TOML.replace("degC", "degF"))
    assert main(run) == 0
    assert "degF" not in capsys.readouterr().out


@pytest.mark.heavy
def test_a_state_of_another_clear_air_is_refused(dem, station, tmp_path, capsys):
    first = tmp_path / "first"
    run = ["melt", str(dem), str(station)]
    more = [*QUICK, "--stack", "none", "--no-spread", "--quiet"]
    assert main([*run, str(first), "--period", "2025-02-21/2025-02-22", *more]) == 0
    going_on = ["--from-state", str(first / "state.nc"), "--period", "2025-02-23", *more]
    assert main([*run, str(tmp_path / "no"), *going_on, "--linke", "6"]) == 3
    assert "linke" in capsys.readouterr().err
    assert main([*run, str(tmp_path / "yes"), *going_on]) == 0


def test_basin_fit_and_words(dem, station, tmp_path, capsys):
    """A basin of half of the raster; what the fit found stands in the record and the summary."""
    basin = tmp_path / "basin.geojson"
    from pyproj import Transformer

    turn = Transformer.from_crs("EPSG:32632", "EPSG:4326", always_xy=True)
    ring = [(4e5, 5.15e6), (4e5, 5.15e6 - 2000), (4e5 + 1200, 5.15e6 - 2000), (4e5 + 1200, 5.15e6)]
    corners = [turn.transform(*place) for place in (*ring, ring[0])]
    feature = {
        "type": "Feature", "properties": {"name": "half"},
        "geometry": {"type": "Polygon", "coordinates": [corners]},
    }  # fmt: skip
    basin.write_text(json.dumps({"type": "FeatureCollection", "features": [feature]}))
    out = tmp_path / "out"
    more = [
        "--basin",
        str(basin),
        "--melt",
        "degree-days",
        "--fit-numbers",
        "degree-day-factor, snow-factor",
        "--bands",
        "50",
        "--json",
    ]
    assert main(["melt", str(dem), str(station), str(out), *more, "--stack", "none"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["results"]["area"] == "half"
    assert record["results"]["area_km2"] == pytest.approx(2.4 - 0.0025, rel=2e-3)
    fit = record["settings"]["station"]["fit"]
    assert fit["after"]["rmse_mm"] < fit["before"]["rmse_mm"]
    assert record["settings"]["model"]["numbers"]["degree_day_factor"] == pytest.approx(
        fit["fitted"]["degree_day_factor"], rel=1e-5
    )
    bands = table(out / "by_band.csv")
    assert {float(row["to_m"]) - float(row["from_m"]) for row in bands} == {50.0}


def test_dry_run_writes_nothing(dem, station, tmp_path, capsys):
    out = tmp_path / "out"
    run = ["melt", str(dem), str(station), str(out), "--dry-run", *QUICK]
    assert main(run) == 0
    said = capsys.readouterr().out
    assert "model       enhanced, albedo brock" in said
    assert "at station  peak" in said
    assert "days        39, 2025-02-21 to 2025-03-31" in said
    assert main([*run, "--json"]) == 0
    forecast = json.loads(capsys.readouterr().out)
    assert forecast["memory_mb"] > 100
    assert forecast["days"] == 39
    assert not out.exists()


@pytest.mark.parametrize(
    ("more", "code", "words"),
    [
        (["--number", "melt_factor=3"], 2, "'melt_factor' is no number of the snow model"),
        (["--number", "melt_factor"], 2, "is not a name, '=' and a number"),
        (["--number", "snow_factor=9"], 2, "snow_factor must lie from 0.2 to 5"),
        (["--fit-numbers", "degree_day_factor,snow_factor"], 2, "changes two or three of"),
        (["--fit", "--from-state", "x.nc"], 2, "--fit wants a season from bare ground on"),
        (["--from-state", "x.nc"], 3, "x.nc: there is no such file"),
        (["--snow-albedo", "station"], 3, "no albedo was measured"),
        (["--period", "2025-01-01/2025-03-01"], 3, "made"),
        (["--clear-sky-index", "0.7"], 2, "--clear-sky-index has no hours"),
        (["--melt", "hock", "--fill-hours", "5"], 2, "--fill-hours belongs to --melt enhanced"),
        (["--basin", "nowhere.gpkg"], 3, "nowhere.gpkg"),
        (["--lapse", "65"], 2, "from -15 to 15 K/km"),
    ],
)
def test_what_is_refused(dem, station, tmp_path, capsys, more, code, words):
    out = tmp_path / "out"
    assert main(["melt", str(dem), str(station), str(out), *QUICK, *more]) == code
    said = capsys.readouterr().err
    assert words in said
    assert "Traceback" not in said
    assert not out.exists()


@pytest.mark.heavy
def test_a_store_that_takes_nothing_does_not_end_the_run(
    dem, station, tmp_path, monkeypatch, capsys
):
    store, making = tmp_path / "store", horizons.HiddenFolder

    def refuse(parent):
        if parent == store:
            raise PermissionError(13, "Permission denied")
        return making(parent)

    monkeypatch.setattr(horizons, "HiddenFolder", refuse)
    words = ["--period", "2025-02-21/2025-02-22", "--no-spread", "--stack", "none", "--json"]
    assert main(["melt", str(dem), str(station), str(tmp_path / "out"), *words, *QUICK]) == 0
    warnings = json.loads(capsys.readouterr().out)["warnings"]
    assert any(w.startswith(f"{store}: horizons could not be kept there") for w in warnings)
    assert not list(store.iterdir())
    assert not [p for p in (tmp_path / "out").iterdir() if p.name.startswith("horizons")]


@pytest.mark.heavy
def test_a_doubt_of_the_ground_is_told_once(station, tmp_path, capsys):
    raster = write_raster(tmp_path / "unnamed.tif", hills())
    words = ["--melt", "degree-days", "--period", "2025-02-21", "--stack", "none", "--json"]
    for more in (["--dry-run"], []):
        assert main(["melt", str(raster), str(station), str(tmp_path / "out"), *words, *more]) == 0
        warnings = json.loads(capsys.readouterr().out)["warnings"]
        assert sum("metres are assumed" in warning for warning in warnings) == 1
