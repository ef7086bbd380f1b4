"""Irradiation under measured and indexed skies, over mapped ground, and in photons."""

import json

import numpy as np
import pytest
import rasterio
from files.made import GRID, UTM, hills, write_raster

from terrasol.cli.main import main
from terrasol.sky.clear import Air
from terrasol.sky.interval import interval_means, on_level
from terrasol.sky.station import Station

QUICK = ["--azimuths", "8", "--step-seconds", "600", "--quiet", "--linke", "3"]
LATITUDE, LONGITUDE = 46.5, 7.7


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    return write_raster(tmp_path_factory.mktemp("ground") / "hills.tif", hills(), unit="m")


def map_of(path, values, crs=UTM, transform=GRID):
    """A raster of some bands."""
    values = np.asarray(values, np.float32)
    with rasterio.open(
        path, "w", driver="GTiff", count=len(values), height=values.shape[1],
        width=values.shape[2], dtype="float32", crs=crs, transform=transform, nodata=np.nan,
    ) as sink:  # fmt: skip
        sink.write(values)
    return path


def series(path, factor=0.6, albedo=None, days=31):
    """Hourly global of a sky that lets a constant share of the clear light through."""
    start = np.datetime64("2025-05-01", "s") + np.arange(days * 24) * np.timedelta64(3600, "s")
    bare = Station("made", LATITUDE, LONGITUDE, 700.0, start, 3600, {})
    air = Air.ineichen(3.0)

    def light(sun):
        sky = air.over(sun, 700.0)
        return {"global": on_level(sun, sky), "beam": sky.beam_normal}

    means = interval_means(bare, light)
    rows = ["time,g,b,a"]
    rows += [
        f"{t},{factor * g:.4f},{factor * b:.4f},{'' if albedo is None else albedo}"
        for t, g, b in zip(start, means["global"], means["beam"], strict=True)
    ]
    path.write_text("\n".join(rows) + "\n")
    columns = 'global = { column = "g", unit = "W/m2" }\nbeam = { column = "b", unit = "W/m2" }\n'
    if albedo is not None:
        columns += 'albedo = { column = "a", unit = "1" }\n'
    path.with_name(path.name + ".toml").write_text(
        f"[place]\nlatitude = {LATITUDE}\nlongitude = {LONGITUDE}\nheight = 700.0\n"
        f'[time]\ncolumn = "time"\nzone = "UTC"\nlabel = "start"\ninterval = "1h"\n'
        f"[columns]\n{columns}"
    )
    return path


def run(dem, out, *words):
    """One run of May; its record and the global sums of the period."""
    code = main(["irradiation", str(dem), str(out), "--period", "2025-05", *QUICK, *words])
    assert code == 0
    with rasterio.open(out / "irradiation_period.tif") as source:
        values = source.read(masked=True).filled(np.nan)
    return json.loads((out / "run.json").read_text()), values


@pytest.fixture(scope="module")
def clear(dem, tmp_path_factory):
    return run(dem, tmp_path_factory.mktemp("clear") / "out")


@pytest.mark.heavy
def test_a_station_that_saw_nine_tenths_of_the_clear_light(dem, clear, tmp_path):
    path = series(tmp_path / "made.csv", factor=0.9)
    record, values = run(dem, tmp_path / "out", "--station", str(path))
    np.testing.assert_allclose(values[0], 0.9 * clear[1][0], rtol=0.03)
    assert record["results"]["sky"] == "measured"
    assert record["settings"]["station"]["clock"]["verdict"] == "consistent"
    assert record["settings"]["station"]["file"] == str(path)
    with rasterio.open(tmp_path / "out" / "irradiation_period.tif") as source:
        assert source.tags()["sky"] == "measured"
        assert "potential" not in source.tags(1)["long_name"]


def test_without_a_period_the_series_days_count(dem, tmp_path):
    path = series(tmp_path / "made.csv", days=5)
    code = main(["irradiation", str(dem), str(tmp_path / "o"), "--station", str(path), *QUICK])
    assert code == 0
    record = json.loads((tmp_path / "o" / "run.json").read_text())
    assert record["settings"]["period"]["label"] == "2025-05-01/2025-05-05"


@pytest.mark.heavy
def test_an_index_as_number_and_as_map(dem, clear, tmp_path):
    plain = run(dem, tmp_path / "plain", "--clear-sky-index", "0.6")
    np.testing.assert_allclose(plain[1][0].mean(), 0.6 * clear[1][0].mean(), rtol=0.02)
    shape = clear[1].shape[1:]
    even = map_of(tmp_path / "even.tif", np.full((1, *shape), 0.6))
    mapped = run(dem, tmp_path / "even", "--clear-sky-index", str(even))
    np.testing.assert_allclose(mapped[1], plain[1], atol=0.6)  # stored to half a MJ
    assert mapped[0]["results"]["sky"] == "monthly index"
    assert mapped[0]["results"]["level_ground"] == pytest.approx(
        plain[0]["results"]["level_ground"], rel=1e-4
    )
    halves = np.full((12, *shape), 0.6)
    halves[4, :, shape[1] // 2 :] = 0.9
    split = map_of(tmp_path / "halves.tif", halves)
    found = run(dem, tmp_path / "split", "--clear-sky-index", str(split))[1][0] / plain[1][0]
    assert found[:, -3:].mean() > 1.35
    assert found[:, :3].mean() < 1.03


@pytest.mark.heavy
def test_albedo_as_map_changes_what_ground_sends_back(dem, clear, tmp_path):
    shape = clear[1].shape[1:]
    same = map_of(tmp_path / "same.tif", np.full((1, *shape), 0.2))
    record, values = run(dem, tmp_path / "same", "--albedo", str(same))
    np.testing.assert_allclose(values, clear[1], atol=0.1)
    assert record["settings"]["albedo"]["file"] == str(same)
    # on a grid of its own, in degrees: snow in the west
    degrees = rasterio.Affine(0.02, 0.0, 7.2, 0.0, -0.02, 47.0)
    snow = map_of(tmp_path / "snow.tif", np.full((1, 50, 50), 0.8), "EPSG:4326", degrees)
    bright = run(dem, tmp_path / "snow", "--albedo", str(snow))[1]
    assert bright[3].mean() > 3.5 * clear[1][3].mean()


def test_albedo_as_measured(dem, clear, tmp_path):
    path = series(tmp_path / "made.csv", factor=1.0, albedo=0.4)
    words = ("--station", str(path), "--albedo", "station")
    record, values = run(dem, tmp_path / "out", *words)
    told = record["settings"]["albedo"]
    assert told[4] == pytest.approx(0.4, abs=1e-6)
    assert [m for m, value in enumerate(told, 1) if value is None] == [1, 2, 3, 4, *range(6, 13)]
    with rasterio.open(tmp_path / "out" / "irradiation_period.tif") as source:
        assert json.loads(source.tags()["TERRASOL_SETTINGS"])["albedo"] == told
    assert values[3].mean() == pytest.approx(2.0 * clear[1][3].mean(), rel=0.1)


def test_photosynthetic_light(dem, clear, tmp_path):
    run(dem, tmp_path / "out", "--photosynthetic")
    with rasterio.open(tmp_path / "out" / "photosynthetic_months.tif") as source:
        assert source.units == ("mol m-2 d-1",)
        assert "2.3 umol a joule" in source.tags(1)["long_name"]
        values = source.read(1, masked=True).filled(np.nan)
    np.testing.assert_allclose(values, clear[1][0] * 2.3 / 31.0, rtol=2e-3)


@pytest.mark.parametrize(
    ("words", "code", "said"),
    [
        (["--albedo", "station"], 2, "--albedo station needs --station"),
        (["--albedo", "no.tif"], 3, "no.tif"),
        (["--clear-sky-index", "no.tif"], 3, "no.tif"),
        (["--photons-per-joule", "2"], 2, "belongs to --photosynthetic"),
        (["--photosynthetic", "--photons-per-joule", "99"], 2, "photosynthetic photons"),
        (["--fill-hours", "2"], 2, "--fill-hours belongs to --station"),
        (["--station", "no.csv"], 3, "no.csv"),
        (["--clear-sky-index", "0.5", "--station", "no.csv"], 2, "exclude each other"),
    ],
)
def test_what_cannot_be_met(dem, tmp_path, capsys, words, code, said):
    out = tmp_path / "out"
    assert main(["irradiation", str(dem), str(out), *QUICK, *words]) == code
    err = capsys.readouterr().err
    assert said in err
    assert "\n" not in err.strip()
    assert not out.exists()


def test_maps_that_will_not_do(dem, clear, tmp_path, capsys):
    shape = clear[1].shape[1:]
    for name, values, said in (
        ("percent", np.full((1, *shape), 40.0), "is it in percent?"),
        ("three", np.full((3, *shape), 0.4), "3 bands: give one, or twelve"),
        ("void", np.full((1, *shape), np.nan), "no value over this ground"),
    ):
        path = map_of(tmp_path / f"{name}.tif", values)
        words = ["--albedo", str(path), *QUICK]
        assert main(["irradiation", str(dem), str(tmp_path / "out"), *words]) == 3
        assert said in capsys.readouterr().err


@pytest.mark.heavy
def test_a_station_elsewhere_is_doubted(dem, tmp_path, capsys):
    path = series(tmp_path / "made.csv")
    toml = path.with_name(path.name + ".toml")
    toml.write_text(toml.read_text().replace("height = 700.0", "height = 2900.0"))
    words = [w for w in QUICK if w != "--quiet"]
    out = tmp_path / "out"
    assert main(["irradiation", str(dem), str(out), "--station", str(path), *words]) == 0
    assert "is its height right?" in capsys.readouterr().err
    moved = toml.read_text().replace(f"longitude = {LONGITUDE}", f"longitude = {LONGITUDE + 1.5}")
    toml.write_text(moved)
    again = ["irradiation", str(dem), str(out), "--station", str(path), "--overwrite", *words]
    assert main(again) == 0
    assert "km from the raster's middle" in capsys.readouterr().err


@pytest.mark.heavy
def test_holes_of_maps_are_told(dem, clear, tmp_path, capsys):
    values = np.full((1, *clear[1].shape[1:]), 0.6)
    values[0, 10:14, 10:14] = np.nan
    path = map_of(tmp_path / "holes.tif", values)
    words = ["--period", "2025-05", *(w for w in QUICK if w != "--quiet")]
    out = tmp_path / "index"
    assert main(["irradiation", str(dem), str(out), "--clear-sky-index", str(path), *words]) == 0
    assert "clear-sky index has no value for 16 cells" in capsys.readouterr().err
    with rasterio.open(out / "irradiation_period.tif") as source:
        void = np.ma.getmaskarray(source.read(masked=True))
    assert (void.sum(axis=(1, 2)) == 16).all()
    out = tmp_path / "albedo"
    assert main(["irradiation", str(dem), str(out), "--albedo", str(path), *words]) == 0
    assert "albedo has no value for 16 cells" in capsys.readouterr().err


def cut_series(path, keep):
    """The same series without some of its rows."""
    header, *rows = path.read_text().splitlines()
    kept = [row for number, row in enumerate(rows) if keep(number)]
    path.write_text("\n".join([header, *kept]) + "\n")


@pytest.mark.parametrize("command", ["irradiation", "hours", "series"])
@pytest.mark.parametrize(
    ("keep", "gap"),
    [
        (lambda row: not 240 <= row < 300, "missing from 2025-05-11T00:00 to 2025-05-13T12:00 UTC"),
        (lambda row: row < 600, "missing from 2025-05-26T00:00 to 2025-05-31T23:29 UTC"),
        (lambda row: row >= 48, "missing from 2025-04-30T23:29 to 2025-05-03T00:00 UTC"),
    ],
)
def test_a_gap_is_the_series_own(dem, tmp_path, capsys, command, keep, gap):
    path = series(tmp_path / "made.csv")
    cut_series(path, keep)
    out = tmp_path / ("out.nc" if command == "series" else "out")
    words = ["--azimuths", "8", "--quiet", "--period", "2025-05", "--station", str(path)]
    assert main([command, str(dem), str(out), *words]) == 3
    said = capsys.readouterr().err
    assert said.startswith("terrasol: made.csv: the series has gaps in the period 2025-05: ")
    assert gap in said
    assert "Choose a period without them" in said
    assert str(dem) not in said
