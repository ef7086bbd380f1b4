"""The command `terrasol site`: text, files, record, refusals."""

import csv
import json

import numpy as np
import pytest
from files.made import hills, write_raster
from pyproj import Transformer

from terrasol.cli.main import main
from terrasol.cli.site import COLUMNS

QUICK = ["--azimuths", "16", "--step-seconds", "3600"]
X, Y = 401_025.0, 5_149_025.0  # the middle of row 19, column 20


def geodetic(x, y):
    return Transformer.from_crs("EPSG:32632", "EPSG:4326", always_xy=True).transform(x, y)


AT = "{:.7f},{:.7f}".format(*geodetic(X, Y))


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    values = hills()
    values[5, 30] = np.nan
    return str(write_raster(tmp_path_factory.mktemp("ground") / "hills.tif", values, unit="m"))


@pytest.fixture(scope="module")
def out(dem, tmp_path_factory):
    out = tmp_path_factory.mktemp("site") / "out"
    asked = ["--at", AT, "--name", "Here", "--clock", "+01:00", "--day", "2025-08-15", "--quiet"]
    assert main(["site", dem, *asked, "--out", str(out), *QUICK]) == 0
    return out


def test_files(out):
    names = sorted(path.name for path in out.iterdir())
    assert names == ["days.csv", "run.json", "sheet.pdf", "sheet.png"]
    assert (out / "sheet.png").read_bytes().startswith(b"\x89PNG")
    assert (out / "sheet.pdf").read_bytes().startswith(b"%PDF")


def test_record(out):
    record = json.loads((out / "run.json").read_text("utf-8"))
    assert record["command"] == "site"
    settings = record["settings"]
    assert settings["clock"] == "+01:00"
    assert settings["days"] == ["2025-08-15"]
    day = record["results"]["places"][0]["sun"]["days"][0]
    assert day["day"] == "2025-08-15"
    with open(out / "days.csv", newline="") as file:
        row = next(row for row in csv.DictReader(file) if row["day"] == "08-15")
    for name, column in (("first_sun", "first_sun_h"), ("level_sun_hours", "level_sun_hours")):
        assert day[name] == pytest.approx(float(row[column]), abs=1e-3)
    assert settings["azimuths"] == 16
    assert settings["azimuths_of_energy"] == 64
    place = record["results"]["places"][0]
    assert (place["name"], place["row"], place["column"]) == ("Here", 19, 20)
    assert place["height_m"] == pytest.approx(hills()[19, 20], abs=0.01)
    assert len(place["horizon_deg"]) == 16
    assert len(place["irradiation"]["months"]) == 12
    assert len(record["files"]) == 4


def test_table_has_every_day(out):
    record = json.loads((out / "run.json").read_text("utf-8"))
    june = record["results"]["places"][0]["sun"]["months"][5]
    with open(out / "days.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert tuple(rows[0]) == COLUMNS
    assert len(rows) == 365
    day = next(row for row in rows if row["day"] == "06-21")
    assert float(day["first_sun_h"]) == pytest.approx(june["first_sun"], abs=1e-3)
    assert float(day["level_last_sun_h"]) == pytest.approx(june["level_last_sun"], abs=1e-3)
    assert day["interruptions"].isdigit()


def test_text_without_a_folder(dem, capsys):
    assert main(["site", dem, "--at", AT, "--day", "2025-08-15", *QUICK]) == 0
    caught = capsys.readouterr()
    assert "MJ m-2" in caught.out
    assert "15 August   sun from " in caught.out
    assert "January" in caught.out
    assert "licensed practice" in caught.out
    assert "file" not in caught.err


@pytest.mark.heavy
def test_quiet_silences_what_is_said_and_keeps_the_result(dem, tmp_path, capsys):
    told = []
    for more in ([], ["--quiet"], ["--quiet", "--out", str(tmp_path / "o")]):
        assert main(["site", dem, "--at", AT, *more, *QUICK]) == 0
        told.append(capsys.readouterr())
    assert told[0].out == told[1].out == told[2].out
    assert "% of level" in told[0].out
    assert told[1].err == told[2].err == ""


@pytest.mark.heavy
def test_place_in_the_raster_s_crs_is_the_same_place(dem, capsys):
    told = []
    for asked in (["--at", AT], ["--at", f"{X},{Y}", "--at-crs", "dem"],
                  ["--at", f"{X},{Y}", "--at-crs", "EPSG:32632"]):  # fmt: skip
        assert main(["site", dem, *asked, "--json", *QUICK]) == 0
        record = json.loads(capsys.readouterr().out)
        told.append(record["results"]["places"][0])
    assert told[0]["row"] == told[1]["row"] == 19
    assert told[1] == told[2]
    for name in ("irradiation", "slope_deg", "horizon_deg"):
        assert told[0][name] == told[1][name]


@pytest.mark.heavy
def test_two_places(dem, tmp_path, capsys):
    asked = ["--at", f"{X},{Y}", "--compare", f"{X + 300},{Y + 300}", "--at-crs", "dem"]
    asked += ["--name", "One", "--name", "Other", "--out", str(tmp_path / "both")]
    assert main(["site", dem, *asked, *QUICK]) == 0
    caught = capsys.readouterr()
    assert "One: " in caught.out
    assert "Other: " in caught.out
    assert "4 files in" in caught.err
    record = json.loads((tmp_path / "both" / "run.json").read_text("utf-8"))
    cells = [(p["row"], p["column"]) for p in record["results"]["places"]]
    assert cells == [(19, 20), (13, 26)]
    assert len((tmp_path / "both" / "days.csv").read_text().splitlines()) == 1 + 2 * 365


def test_error_of_the_heights(dem, capsys):
    asked = ["--at", AT, "--dem-error", "0.5,100", "--realisations", "3", "--seed", "7", "--json"]
    assert main(["site", dem, *asked, *QUICK]) == 0
    record = json.loads(capsys.readouterr().out)
    told = record["results"]["places"][0]["standard_error"]
    assert set(told) == {"slope", "aspect", "global"}
    assert told["slope"]["standard_error"] > 0.0
    assert record["settings"]["dem_error"]["seed"] == 7


@pytest.mark.heavy
def test_an_error_that_cannot_be_is_doubted(dem, tmp_path, capsys):
    """Errors of 30 m would have left these gentle hills far rougher."""
    asked = [
        "--at",
        AT,
        "--dem-error",
        "30,50",
        "--realisations",
        "2",
        "--out",
        str(tmp_path / "o"),
    ]
    assert main(["site", dem, *asked, *QUICK]) == 0
    assert "smoother" in capsys.readouterr().out
    record = json.loads((tmp_path / "o" / "run.json").read_text("utf-8"))
    assert any("smoother" in text for text in record["warnings"])


@pytest.mark.heavy
def test_clouds_by_indices(dem, capsys):
    found = []
    for more in ([], ["--clear-sky-index", "0.5"]):
        assert main(["site", dem, "--at", AT, "--json", *more, *QUICK]) == 0
        found.append(json.loads(capsys.readouterr().out)["results"]["places"][0]["irradiation"])
    assert found[1]["sky"] == "monthly index"
    assert 0.4 < found[1]["level"] / found[0]["level"] < 0.6


def test_dry_run(dem, tmp_path, capsys):
    asked = ["--at", AT, "--out", str(tmp_path / "none"), "--dry-run"]
    assert main(["site", dem, *asked, *QUICK]) == 0
    caught = capsys.readouterr().out
    assert "row 19, column 20" in caught
    assert "sheet.pdf" in caught
    assert not (tmp_path / "none").exists()
    assert main(["site", dem, "--at", AT, "--dry-run", "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["files"] == []
    assert 100 < told["memory_mb"] < 2000
    assert 1 <= told["seconds"] < 60
    assert told["places"][0]["row"] == 19


def test_nothing_is_overwritten(dem, out, capsys):
    before = (out / "run.json").read_bytes()
    assert main(["site", dem, "--at", AT, "--out", str(out), *QUICK]) == 4
    assert "--overwrite" in capsys.readouterr().err
    assert (out / "run.json").read_bytes() == before


VOID = "{:.7f},{:.7f}".format(*geodetic(401_525.0, 5_149_725.0))


@pytest.mark.parametrize(
    ("asked", "code", "words"),
    [
        ([], 2, "--at"),
        (["--at", "10.6"], 2, "two numbers"),
        (["--at", "ten,46"], 2, "two numbers"),
        (["--at", "401025,5149025"], 2, "--at-crs"),
        (["--at", "46.5,7.7"], 3, "outside"),
        (["--at", "-71.5,-33.2"], 3, "outside"),
        (["--at", VOID], 3, "void"),
        (["--at", AT, "--at-crs", "no such"], 2, "--at-crs"),
        (["--at", AT, "--clock", "Mars"], 2, "clock"),
        (["--at", AT, "--at-crs", ""], 2, "--at-crs '' is not a CRS"),
        (["--at", AT, "--day", "2025-08"], 2, "--day '2025-08' is not one day"),
        (["--at", AT, "--day", "2025-02-30"], 2, "--day '2025-02-30' is not one day"),
        (["--at", AT, "--day", "tomorrow"], 2, "--day 'tomorrow' is not one day"),
        (["--at", AT, "--name", "a", "--name", "b"], 2, "--name"),
        (["--at", AT, "--azimuths", "7"], 2, "azimuths"),
        (["--at", AT, "--horizon-gap"], 2, "--horizon-gap"),
        (["--at", AT, "--seed", "1"], 2, "--dem-error"),
        (["--at", AT, "--dem-error", "much"], 2, "RMSE"),
    ],
)
def test_refusals(dem, capsys, asked, code, words):
    assert main(["site", dem, *asked]) == code
    caught = capsys.readouterr()
    assert words in caught.err
    assert "Traceback" not in caught.err
    assert caught.out == ""
