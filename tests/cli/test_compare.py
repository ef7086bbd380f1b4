"""The command `terrasol compare`: files, words, record, refusals."""

import csv
import json

import numpy as np
import pytest
from files.made import write_raster
from rasterio import Affine
from reference.made_station import write_table
from reference.made_valley import CELL, PLACE, made_series, valley

from terrasol.cli.compare import COLUMNS
from terrasol.cli.main import main
from terrasol.engine.comparison import spot_at
from terrasol.files.rasters import read_elevation

CRS = "+proj=tmerc +lat_0=46 +lon_0=9 +k=1 +datum=WGS84 +units=m"
QUICK = ["--azimuths", "64", "--linke", "3"]
FILES = ["comparison.csv", "comparison.png", "run.json"]
TOML = """
[place]
name = "{name}"
latitude = {latitude}
longitude = {longitude}
height = 800.0
[time]
column = "time"
format = "%Y-%m-%d %H:%M"
zone = "UTC"
label = "{label}"
interval = "1h"
[columns.global]
column = "global"
unit = "W/m2"
"""


def state(path, place=PLACE, label="start", name="valley"):
    latitude, longitude = place
    text = TOML.format(name=name, latitude=latitude, longitude=longitude, label=label)
    path.write_text(text, encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    heights = valley()
    half = CELL * heights.shape[0] / 2
    transform = Affine(CELL, 0, -half, 0, -CELL, half)
    path = tmp_path_factory.mktemp("ground") / "valley.tif"
    return write_raster(path, heights, crs=CRS, transform=transform, unit="m")


@pytest.fixture(scope="module")
def measured(dem, tmp_path_factory):
    """A series that the model itself made, with its settings beside it."""
    elevation = read_elevation(dem)
    spot = spot_at(elevation, *PLACE, azimuths=64)
    folder = tmp_path_factory.mktemp("measured")
    path = write_table(folder / "valley.csv", made_series(spot, cloudy=(3, 9)))
    state(folder / "valley.csv.toml")
    return path


@pytest.fixture(scope="module")
def done(dem, measured, tmp_path_factory):
    out = tmp_path_factory.mktemp("done") / "out"
    assert main(["compare", str(dem), str(measured), str(out), "--quiet", *QUICK]) == 0
    return out


def names(folder):
    return sorted(path.name for path in folder.iterdir())


def test_files(done):
    assert names(done) == FILES
    assert (done / "comparison.png").read_bytes().startswith(b"\x89PNG")


def test_table(done):
    with open(done / "comparison.csv", encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert tuple(rows[0]) == COLUMNS
    assert len(rows) == 24 * 24
    assert rows[0]["time_utc_start"] == "2025-03-05T00:00:00Z"
    noon = rows[11]
    assert float(noon["measured_w_m2"]) == pytest.approx(float(noon["modelled_w_m2"]), abs=0.02)
    assert noon["counted"] == "1"
    assert rows[3 * 24 + 11]["counted"] == "0"  # a dull day
    morning = rows[7]
    assert float(morning["modelled_open_w_m2"]) > float(morning["modelled_w_m2"]) + 50.0


def test_record(done, dem, measured):
    record = json.loads((done / "run.json").read_text("utf-8"))
    assert record["command"] == "compare"
    assert record["settings"]["measured"]["file"] == str(measured)
    assert len(record["settings"]["measured"]["sha256"]) == 64
    assert record["settings"]["azimuths"] == 64
    assert record["settings"]["air"]["linke"] == 3.0
    results = record["results"]
    assert results["sky"] == "clear"
    assert abs(results["overall"]["bias_w_m2"]) < 0.02
    assert results["shade"]["explained"] == pytest.approx(1.0, abs=0.001)
    assert (results["cell"]["row"], results["cell"]["column"]) == (30, 30)
    assert len(results["clear_days"]) == 22
    assert [path.rsplit("/", 1)[1] for path in record["files"]] == FILES


def test_summary_says_what_matters(dem, measured, tmp_path, capfd):
    assert main(["compare", str(dem), str(measured), str(tmp_path / "out"), *QUICK]) == 0
    out, err = capfd.readouterr()
    assert out == ""
    for words in (
        "in row 30 and column 30",
        "compared on clear days only: 22 clear days",
        "bias +0.0 W/m2",
        "worst hour of local mean solar time",
        "the modelled horizon explains when the sun comes and goes",
        "comes at the same time and goes at the same time",
        "consistent within 8 min; nothing was changed",
        "3 files in",
    ):
        assert words in err.replace("-0.0", "+0.0")


def test_json_and_dry_run(dem, measured, tmp_path, capfd):
    asked = ["compare", str(dem), str(measured), str(tmp_path / "out"), "--dry-run", *QUICK]
    assert main([*asked, "--json"]) == 0
    told = json.loads(capfd.readouterr().out)
    assert told["cell"] == {"row": 30, "column": 30, "height_m": 800.0}
    assert told["files"] == FILES
    assert main(asked) == 0
    assert "row 30, column 30, at 800 m (stated: 800 m)" in capfd.readouterr().out
    assert names(tmp_path) == []


def test_second_station(dem, measured, tmp_path, capfd):
    state(tmp_path / "summit.toml", name="summit")
    asked = ["--station", str(measured), "--station-settings", str(tmp_path / "summit.toml")]
    out = tmp_path / "out"
    assert main(["compare", str(dem), str(measured), str(out), *asked, "--json", *QUICK]) == 0
    told = json.loads(capfd.readouterr().out)
    assert told["results"]["sky"] == "measured"
    assert told["results"]["second_station"]["name"] == "summit"
    assert told["settings"]["decomposition"] == "dirint"
    # Its shaded mornings count as clouds, and the terrain takes its share once more.
    assert told["results"]["overall"]["bias_w_m2"] < 0.0


def test_wrong_label_is_told_and_left(dem, measured, tmp_path, capfd):
    settings = state(tmp_path / "late.toml", label="middle")
    asked = ["--measured-settings", str(settings), *QUICK]
    out = tmp_path / "out"
    assert main(["compare", str(dem), str(measured), str(out), *asked]) == 0
    assert "warning: valley: " in (err := capfd.readouterr().err)
    assert "the label marks another edge, the intervals lie half an interval later" in err
    record = json.loads((out / "run.json").read_text("utf-8"))
    assert record["results"]["clock"]["verdict"] == "label"
    assert record["results"]["station"]["start"] == "2025-03-04T23:30:00Z"


def test_unusable_input(dem, measured, tmp_path, capfd):
    out = str(tmp_path / "out")
    outside = state(tmp_path / "far.toml", place=(47.0, 9.0))
    asked = ["--measured-settings", str(outside)]
    assert main(["compare", str(dem), str(measured), out, *asked]) == 3
    err = capfd.readouterr().err
    assert str(dem) in err
    assert "47.0000 N 9.0000 E lies outside" in err
    asked = ["--measured-settings", str(tmp_path / "none.toml")]
    assert main(["compare", str(dem), str(measured), out, *asked]) == 3
    assert "none.toml" in capfd.readouterr().err
    bare = tmp_path / "bare.csv"
    bare.write_bytes(measured.read_bytes())
    assert main(["compare", str(dem), str(bare), out]) == 3
    assert str(bare) in capfd.readouterr().err
    assert main(["compare", str(dem), str(tmp_path / "none.csv"), out]) == 3
    assert not (tmp_path / "out").exists()


def test_nothing_is_replaced_unasked(dem, measured, done, capfd):
    before = (done / "run.json").read_bytes()
    assert main(["compare", str(dem), str(measured), str(done), *QUICK]) == 4
    assert "--overwrite" in capfd.readouterr().err
    assert (done / "run.json").read_bytes() == before


def test_inputs_are_spared(dem, measured, tmp_path, capfd):
    own = tmp_path / "comparison.csv"
    own.write_bytes(measured.read_bytes())
    state(tmp_path / "comparison.csv.toml")
    asked = ["compare", str(dem), str(own), str(tmp_path), "--overwrite", *QUICK]
    assert main(asked) == 4
    assert "is the input itself" in capfd.readouterr().err
    assert own.read_bytes() == measured.read_bytes()


@pytest.mark.heavy
def test_overwrite_replaces(dem, measured, tmp_path):
    out = tmp_path / "out"
    asked = ["compare", str(dem), str(measured), str(out), "--quiet", *QUICK]
    assert main(asked) == 0
    first = np.genfromtxt(out / "comparison.csv", delimiter=",", skip_header=1)[:, 2]
    assert main([*asked, "--overwrite", "--albedo", "0.8"]) == 0
    assert np.genfromtxt(out / "comparison.csv", delimiter=",", skip_header=1)[11, 2] > first[11]


@pytest.mark.parametrize(
    ("asked", "words"),
    [
        (["--clear-sky-index", "0.7"], "has no hours"),
        (["--horizon-gap"], "it is a map"),
        (["--azimuths", "10"], "multiple of 4"),
        (["--decomposition", "disc"], "belongs to --station"),
        (["--albedo", "2"], "albedo must be from 0 to 1"),
    ],
)
def test_wrong_settings_are_refused(dem, measured, tmp_path, capfd, asked, words):
    assert main(["compare", str(dem), str(measured), str(tmp_path / "out"), *asked]) == 2
    assert words in capfd.readouterr().err
    assert names(tmp_path) == []
