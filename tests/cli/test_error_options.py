"""--dem-error from the command line: files, record, forecast, and what is refused."""

import json

import numpy as np
import pytest
import rasterio
from files.made import hills, write_raster

from terrasol.cli.main import main
from terrasol.ground.uncertainty import DemError

USAGE = 2
QUICK = ["--azimuths", "8", "--step-seconds", "3600", "--period", "2025-04", "--quiet"]
BESIDE = [
    "aspect_standard_error.tif", "irradiation_period_standard_error.tif",
    "slope_standard_error.tif",
]  # fmt: skip


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    z = hills() + np.random.default_rng(1).normal(0.0, 1.0, hills().shape)
    z[10, 12] = np.nan
    return write_raster(tmp_path_factory.mktemp("ground") / "hills.tif", z, unit="m")


def irradiation(dem, out, *more):
    return main(["irradiation", str(dem), str(out), *QUICK, *more]) or 0


@pytest.fixture(scope="module")
def plain(dem, tmp_path_factory):
    out = tmp_path_factory.mktemp("plain")
    assert irradiation(dem, out) == 0
    return out


@pytest.fixture(scope="module")
def out(dem, tmp_path_factory):
    out = tmp_path_factory.mktemp("errors")
    assert irradiation(dem, out, "--dem-error", "1,100", "--realisations", "5", "--seed", "7") == 0
    return out


def band(path):
    with rasterio.open(path) as source:
        return source.read(masked=True).filled(np.nan)


def test_three_files_more_and_the_rest_as_without(plain, out):
    before, after = ({path.name for path in folder.iterdir()} for folder in (plain, out))
    assert sorted(after - before) == BESIDE
    for name in before - {"run.json", "overview.png"}:
        np.testing.assert_array_equal(band(plain / name), band(out / name))


def test_files_say_what_they_are(out):
    with rasterio.open(out / "slope_standard_error.tif") as source:
        assert source.units == ("degree",)
        assert source.tags(1)["standard_name"] == "ground_slope_angle standard_error"
        assert source.tags()["dem_error"].startswith("random height error of 1 m rms")
        assert source.tags()["seed"] == "7"
    with rasterio.open(out / "slope.tif") as source:
        assert source.tags()["ancillary_variables"] == "slope_standard_error"
    with rasterio.open(out / "irradiation_period_standard_error.tif") as source:
        assert source.descriptions == ("global",)
        assert source.units == ("MJ m-2",)
        assert source.tags()["period"] == "2025-04"
        assert source.tags()["basis"] == "per area of slope"
    error, slope = band(out / "slope_standard_error.tif"), band(out / "slope.tif")
    np.testing.assert_array_equal(np.isnan(error), np.isnan(slope))
    inner = np.s_[0, 2:-2, 2:-2]
    turned = np.degrees(horn_gradient_error(DemError(1.0, 100.0), 50.0))
    expected = turned * np.cos(np.radians(slope[inner])) ** 2
    found = np.sqrt(np.nanmean(error[inner] ** 2))
    assert found == pytest.approx(np.sqrt(np.nanmean(expected**2)), rel=0.1)


def horn_gradient_error(error, cell):
    """Standard deviation of a gradient by Horn's window, weight by weight."""
    weights = (np.array([1.0, 2.0, 1.0])[:, None] * [-1.0, 0.0, 1.0]).ravel() / (8.0 * cell)
    row, column = (cell * each.ravel() for each in np.mgrid[:3, :3])
    apart = np.hypot(row[:, None] - row, column[:, None] - column)
    covariance = error.rmse**2 * error.correlation(apart, (cell, cell))
    return np.sqrt(weights @ covariance @ weights)


def test_record_and_summary(out, dem, tmp_path, capfd):
    record = json.loads((out / "run.json").read_text("utf-8"))
    assert record["settings"]["dem_error"] == {
        "rmse_m": 1.0, "range_m": 100.0, "correlation": "exp(-3 distance / range)",
        "realisations": 5, "seed": 7,
    }  # fmt: skip
    results = record["results"]
    assert results["slope_standard_error"]["unit"] == "degree"
    assert {"mean_shift_of_slope", "mean_shift_of_irradiation_period"} <= set(results)
    words = [word for word in QUICK if word != "--quiet"]
    command = ["irradiation", str(dem), str(tmp_path), *words, "--dem-error", "1,100"]
    assert main([*command, "--realisations", "2"]) == 0
    said = capfd.readouterr().err
    assert "slope_standard_error: mean" in said
    assert "2 realisations of a random height error of 1 m rms" in said


@pytest.mark.heavy
def test_same_seed_same_errors(dem, out, tmp_path):
    more = ("--dem-error", "1,100", "--realisations", "5", "--threads", "1")
    for folder, seed in (("same", "7"), ("other", "8")):
        assert irradiation(dem, tmp_path / folder, *more, "--seed", seed) == 0
    for name in BESIDE:
        np.testing.assert_array_equal(band(tmp_path / "same" / name), band(out / name))
        assert not np.array_equal(band(tmp_path / "other" / name), band(out / name))


def test_dry_run_forecasts_the_realisations(dem, tmp_path, capfd):
    found = []
    for more in ((), ("--dem-error", "1"), ("--dem-error", "1", "--realisations", "2000")):
        assert irradiation(dem, tmp_path / "none", *more, "--dry-run", "--json") == 0
        found.append(json.loads(capfd.readouterr().out))
    assert not (tmp_path / "none").exists()
    assert set(BESIDE) == set(found[1]["files"]) - set(found[0]["files"])
    assert found[0]["seconds"] <= found[1]["seconds"] < found[2]["seconds"]
    assert found[0]["memory_mb"] <= found[1]["memory_mb"] == found[2]["memory_mb"]


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--dem-error", "much"], "RMSE"),
        (["--dem-error", "0,60"], "RMSE"),
        (["--dem-error", "1,60,3"], "RMSE,RANGE"),
        (["--dem-error", "1,-60"], "range"),
        (["--dem-error", "1", "--realisations", "1"], "realisations"),
        (["--dem-error", "1", "--seed", "-1"], "seed"),
        (["--dem-error", "1,999999"], "range"),
        (["--realisations", "9"], "--dem-error"),
        (["--seed", "9"], "--dem-error"),
    ],
)
def test_refuses(dem, tmp_path, capfd, words, said):
    assert irradiation(dem, tmp_path / "none", *words) == USAGE
    err = capfd.readouterr().err
    assert said in err
    assert "Traceback" not in err
    assert not (tmp_path / "none").exists()
