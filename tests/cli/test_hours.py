"""The command `terrasol hours`: files, labels, record, refusals."""

import json

import numpy as np
import pytest
import rasterio
from files.made import hills, write_raster

import terrasol
from terrasol.cli.hours import hours
from terrasol.cli.main import main
from terrasol.light.hours import HoursSettings

QUICK = ["--azimuths", "8", "--step-seconds", "3600"]


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    values = hills()
    values[10, 12] = np.nan
    return write_raster(tmp_path_factory.mktemp("ground") / "hills.tif", values, unit="m")


@pytest.fixture(scope="module")
def year(dem, tmp_path_factory):
    out = tmp_path_factory.mktemp("year") / "out"
    asked = ["--clock", "+01:00", "--quiet", *QUICK]
    assert main(["hours", str(dem), str(out), *asked]) == 0
    return out


def names(folder):
    return sorted(path.name for path in folder.iterdir())


def test_files_of_a_year(year):
    assert names(year) == [
        "bright_hours_months.tif", "bright_hours_year.tif", "first_sun.tif", "last_sun.tif",
        "overview.png", "run.json", "sun_hours_days.tif", "sun_hours_months.tif",
        "sun_hours_year.tif", "sun_interruptions.tif",
    ]  # fmt: skip
    assert (year / "overview.png").read_bytes().startswith(b"\x89PNG")


def test_files_say_what_they_are(year):
    with rasterio.open(year / "bright_hours_year.tif") as source:
        assert source.tags(1)["standard_name"] == "duration_of_sunshine"
        assert source.units == ("h",)
        assert source.tags()["sky"] == "clear"
    with rasterio.open(year / "sun_hours_year.tif") as source:
        assert "standard_name" not in source.tags(1)
    with rasterio.open(year / "first_sun.tif") as source:
        assert source.descriptions[5] == "21 June"
        assert source.tags()["clock"] == "+01:00"
        assert "UTC+01:00" in source.tags(6)["long_name"]


def test_files_hold_what_python_gives(year, dem):
    data = terrasol.sun_hours(
        terrasol.read_elevation(dem), clock="+01:00", azimuths=8, step_seconds=3600
    )
    assert {path.stem for path in year.glob("*.tif")} == set(data)
    for name in data:
        with rasterio.open(year / f"{name}.tif") as source:
            found = source.read(masked=True).filled(np.nan)
        expected = data[name].values.reshape(found.shape)
        np.testing.assert_array_equal(np.isnan(found), np.isnan(expected))
        np.testing.assert_allclose(found, expected, atol=2.0**-4)


def test_record_of_a_run(year):
    record = json.loads((year / "run.json").read_text("utf-8"))
    assert record["command"] == "hours"
    settings = record["settings"]
    assert settings["days"][0] == "2025-01-21"
    assert settings["clock"] == "+01:00"
    assert settings["bright_above_w_m2"] == 120.0
    assert settings["sun_counts_above_centre_deg"] == pytest.approx(0.267, abs=1e-3)
    results = record["results"]
    assert (
        4000.0 < results["level_ground_bright_hours"] < results["level_ground_sun_hours"] < 4500.0
    )
    assert results["sun_hours_year"]["unit"] == "h"


def test_part_of_a_year_and_chosen_days(dem, tmp_path, capfd):
    asked = ["--period", "2025-06", "--days", "2025-06-21,2025-12-21", "--linke", "2.5", "--json"]
    assert main(["hours", str(dem), str(tmp_path / "out"), *asked, *QUICK]) == 0
    told = json.loads(capfd.readouterr().out)
    assert told["settings"]["air"]["linke"] == 2.5
    with rasterio.open(tmp_path / "out" / "last_sun.tif") as source:
        assert source.descriptions == ("2025-06-21", "2025-12-21")
        june, december = source.read(masked=True)
    (stray,) = (words for words in told["warnings"] if "--days" in words)
    assert stray.startswith("--days 2025-12-21 is outside the period 2025-06: ")
    assert june.mean() > december.mean() + 2.0
    assert "sun_hours_period.tif" in names(tmp_path / "out")


def test_level_ground_is_told_and_days_in_the_period_are_not(dem, tmp_path, capfd):
    asked = ["--period", "2025-06", "--days", "2025-06-01,2025-06-30"]
    assert main(["hours", str(dem), str(tmp_path / "out"), *asked, *QUICK]) == 0
    told = capfd.readouterr().err
    results = json.loads((tmp_path / "out/run.json").read_text("utf-8"))["results"]
    sun, bright = (results[f"level_ground_{kind}_hours"] for kind in ("sun", "bright"))
    words = f"mean height: {sun:g} h of direct sun, {bright:g} h of bright sunshine\n"
    assert f"open level ground at the centre and {words}" in told
    assert "--days" not in told


def test_a_typical_year_has_every_day(dem, tmp_path, capfd):
    asked = ["--days", "2024-06-21", "--dry-run"]
    assert main(["hours", str(dem), str(tmp_path / "out"), *asked, *QUICK]) == 0
    assert "--days" not in capfd.readouterr().out


def test_no_days(dem, tmp_path):
    asked = ["--days", "none", "--period", "2025-06", "--quiet"]
    assert main(["hours", str(dem), str(tmp_path / "out"), *asked, *QUICK]) == 0
    assert "first_sun.tif" not in names(tmp_path / "out")


def test_dry_run_writes_nothing(dem, tmp_path, capfd):
    assert main(["hours", str(dem), str(tmp_path / "out"), "--dry-run"]) == 0
    assert names(tmp_path) == []
    out = capfd.readouterr().out
    assert "sun_interruptions.tif (1)" in out
    assert "first_sun.tif (h)" in out


def test_nothing_is_replaced_unasked(dem, year, capfd):
    assert main(["hours", str(dem), str(year), *QUICK]) == 4
    assert "--overwrite" in capfd.readouterr().err


@pytest.mark.parametrize(
    ("asked", "words"),
    [
        (["--clock", "Mars/Olympus"], "clock 'Mars/Olympus' is not known"),
        (["--days", "yesterday"], "not understood"),
        (["--days", "2025-06-21,2025-06-21"], "given twice"),
        (["--period", "2025-13"], "no calendar"),
        (["--step-seconds", "7"], "does not divide"),
        (["--azimuths", "10"], "multiple of 4"),
    ],
)
def test_wrong_settings_are_refused(dem, tmp_path, capfd, asked, words):
    assert main(["hours", str(dem), str(tmp_path / "out"), *asked]) == 2
    assert words in capfd.readouterr().err
    assert names(tmp_path) == []


def test_default_of_azimuths_is_the_library_s():
    default = next(p.default for p in hours.params if p.name == "azimuths")
    assert default == HoursSettings.azimuths
