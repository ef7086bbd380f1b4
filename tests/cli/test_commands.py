"""Good runs: what is written, and what is said where."""

import io
import json
import os
import re
import zipfile

import numpy as np
import pytest
import rasterio
from files.made import GRID, UTM, hills, write_raster

import terrasol
from terrasol.cli.main import main
from terrasol.files.provenance import sha256
from terrasol.sky.clear import Air

QUICK = ["--azimuths", "8", "--step-seconds", "3600"]


def names(folder):
    return sorted(path.name for path in folder.iterdir())


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    values = hills()
    values[10, 12] = np.nan
    return write_raster(tmp_path_factory.mktemp("ground") / "hills.tif", values, unit="m")


@pytest.fixture(scope="module")
def year(dem, tmp_path_factory):
    """The folder of one run with all parts."""
    out = tmp_path_factory.mktemp("year") / "new" / "out"
    assert main(["irradiation", str(dem), str(out), "--parts", "--quiet", *QUICK]) == 0
    return out


def test_files_of_a_year(year):
    assert names(year) == [
        "aspect.tif", "beam_months.tif", "diffuse_months.tif", "irradiation_months.tif",
        "irradiation_year.tif", "overview.png", "reflected_months.tif", "run.json", "sky_view.tif",
        "slope.tif",
    ]  # fmt: skip
    assert (year / "overview.png").read_bytes().startswith(b"\x89PNG")


def test_files_say_what_they_are(year, dem):
    with rasterio.open(year / "irradiation_year.tif") as source:
        assert source.descriptions == ("global", "beam", "diffuse", "reflected")
        assert set(source.units) == {"MJ m-2"}
        assert source.crs == rasterio.CRS.from_user_input(UTM)
        assert tuple(source.transform) == tuple(GRID)
        tags = source.tags()
    assert json.loads(tags["TERRASOL_SETTINGS"])["azimuths"] == 8
    assert tags["TERRASOL_INPUT_SHA256"] == sha256(dem)
    assert tags["TERRASOL_VERSION"] == terrasol.__version__
    assert (tags["basis"], tags["sky"]) == ("per area of slope", "clear")
    with rasterio.open(year / "slope.tif") as source:
        assert source.tags(1)["standard_name"] == "ground_slope_angle"
    with rasterio.open(year / "irradiation_months.tif") as source:
        assert source.descriptions[:2] == ("January", "February")
        assert "standard_name" not in source.tags(1)


def test_files_hold_what_python_gives(year, dem):
    result = terrasol.irradiation(
        terrasol.read_elevation(dem), azimuths=8, step_seconds=3600, monthly_parts=True
    )
    for name in ("slope", "aspect", "sky_view", "irradiation_year", "beam_months"):
        with rasterio.open(year / f"{name}.tif") as source:
            found = source.read(masked=True).filled(np.nan)
        expected = np.atleast_3d(result[name].values.reshape(-1, *hills().shape))
        np.testing.assert_array_equal(np.isnan(found), np.isnan(expected))
        np.testing.assert_allclose(found, expected, atol=2.0**-5)


def test_record_of_a_run(year, dem):
    record = json.loads((year / "run.json").read_text("utf-8"))
    assert record["input"] == {"file": str(dem), "sha256": sha256(dem)}
    assert record["settings"]["period"]["label"] == "typical year"
    assert record["settings"]["vertical_unit"] == "metre"
    linke = terrasol.linke_climatology(46.5, 7.7)
    assert record["settings"]["air"] == {
        "model": "ineichen", "solar_constant": 1361.0, "linke": list(linke),
    }  # fmt: skip
    assert record["versions"]["terrasol"] == terrasol.__version__
    assert {"reading", "packing and drawing", "whole run"} <= set(record["seconds"])
    assert sorted(path.rpartition("/")[2] for path in record["files"]) == names(year)
    assert record["results"]["void_cells"] == 1


def test_quiet_says_nothing(dem, tmp_path, capfd):
    assert main(["terrain", str(dem), str(tmp_path), "--quiet", "--azimuths", "8"]) == 0
    assert capfd.readouterr() == ("", "")
    assert names(tmp_path) == ["aspect.tif", "run.json", "sky_view.tif", "slope.tif"]


def test_summary_goes_to_stderr(dem, tmp_path, capfd):
    assert main(["terrain", str(dem), str(tmp_path), "--azimuths", "8"]) == 0
    out, err = capfd.readouterr()
    assert out == ""
    assert "slope: mean" in err
    assert "void: 1 of 1920 cells" in err
    assert "\r" not in err


def test_json_is_alone_on_stdout(dem, tmp_path, capfd):
    assert main(["terrain", str(dem), str(tmp_path), "--json", "--azimuths", "8"]) == 0
    out, err = capfd.readouterr()
    assert json.loads(out) == json.loads((tmp_path / "run.json").read_text("utf-8"))
    assert err == ""


def test_progress_on_a_terminal(dem, tmp_path, monkeypatch):
    class Terminal(io.StringIO):
        def isatty(self):
            return True

    terminal = Terminal()
    monkeypatch.setattr("sys.stderr", terminal)
    assert main(["terrain", str(dem), str(tmp_path), "--azimuths", "8"]) == 0
    shown = terminal.getvalue()
    assert "100%" in shown
    assert "packing files" in shown


def test_horizon(dem, tmp_path):
    assert (
        main(["terrain", str(dem), str(tmp_path), "--horizon", "--azimuths", "8", "--quiet"]) == 0
    )
    with rasterio.open(tmp_path / "horizon.tif") as source:
        assert source.count == 8
        assert "90 degrees" in source.descriptions[2]
        assert source.read(masked=True).min() >= 0.0


def test_filled_voids_are_marked(dem, tmp_path):
    options = ["--fill-voids", "1", "--azimuths", "8", "--quiet"]
    assert main(["terrain", str(dem), str(tmp_path), *options]) == 0
    with rasterio.open(tmp_path / "status.tif") as source:
        assert np.argwhere(source.read(1) == 1).tolist() == [[10, 12]]
        assert source.dtypes == ("uint8",)


def test_part_of_a_year(dem, tmp_path):
    options = ["--period", "2025-04-01/2025-06-30", "--unit", "kWh", "--basis", "map", "--quiet"]
    assert main(["irradiation", str(dem), str(tmp_path), *options, *QUICK]) == 0
    assert "irradiation_year.tif" not in names(tmp_path)
    with rasterio.open(tmp_path / "irradiation_months.tif") as source:
        assert source.descriptions == ("2025-04", "2025-05", "2025-06")
        assert source.units[0] == "kW h m-2"
        months = source.read(masked=True)
    with rasterio.open(tmp_path / "irradiation_period.tif") as source:
        assert source.tags()["basis"] == "per area of map"
        np.testing.assert_allclose(source.read(1, masked=True), months.sum(axis=0), atol=0.1)


def settings_of(dem, folder, *options):
    assert main(["irradiation", str(dem), str(folder), "--quiet", *QUICK, *options]) == 0
    return json.loads((folder / "run.json").read_text("utf-8"))["settings"]


def test_air_of_bird(dem, tmp_path):
    asked = "--air bird --aerosol 0.2 --water 1.5 --albedo 0.3 --period 2025-06-21"
    expected = Air.bird(0.2, 1.5, ground_albedo=0.3)
    air = settings_of(dem, tmp_path, *asked.split())["air"]
    assert "linke" not in air
    for name, value in air.items():
        assert value == pytest.approx(getattr(expected, name))
    assert {"aerosol_380nm", "water_cm", "ozone_atm_cm"} <= set(air)


def test_twelve_numbers(dem, tmp_path):
    twelve = [2.0 + month / 10 for month in range(12)]
    asked = ["--linke", ",".join(map(str, twelve)), "--albedo", ",".join(["0.1"] * 12)]
    settings = settings_of(dem, tmp_path, *asked, "--period", "2025-06-21")
    assert settings["air"]["linke"] == pytest.approx(twelve)
    assert settings["albedo"] == 0.1  # one number for twelve that do not differ


def test_warnings_are_in_every_place(tmp_path, capfd):
    dem = write_raster(tmp_path / "unit.tif", unit=None)
    assert main(["terrain", str(dem), str(tmp_path / "out"), "--azimuths", "8"]) == 0
    said = "neither the band nor the CRS names the unit of the heights: metres are assumed"
    assert f"warning: {said}" in " ".join(capfd.readouterr().err.split())
    record = json.loads((tmp_path / "out" / "run.json").read_text("utf-8"))
    assert said in record["warnings"][0]
    with rasterio.open(tmp_path / "out" / "slope.tif") as source:
        assert said in source.tags()["TERRASOL_WARNINGS"]


@pytest.mark.parametrize("command", ["terrain", "irradiation", "hours", "site", "--far"])
def test_heights_without_a_unit_on_a_plan_in_feet_are_refused(dem, tmp_path, capfd, command):
    feet, out = write_raster(tmp_path / "feet.tif", crs="EPSG:2226", unit=None), tmp_path / "out"
    asked = [command, str(feet), str(out)]
    if command == "site":
        asked = ["site", str(feet), "--at", "0,0"]
    elif command == "--far":
        asked = ["terrain", str(dem), str(out), "--far", str(feet)]
    assert main(asked) == 3
    option = "--far-unit" if command == "--far" else "--vertical-unit"
    assert f"x and y are in US survey foot: say what the heights are with {option}" in " ".join(
        capfd.readouterr().err.split()
    )
    assert not out.exists()


def test_raster_in_an_archive(dem, tmp_path):
    with zipfile.ZipFile(tmp_path / "ground.zip", "w") as archive:
        archive.write(dem, "dem.tif")
    source = f"/vsizip/{tmp_path}/ground.zip/dem.tif"
    assert main(["terrain", source, str(tmp_path / "out"), "--azimuths", "8", "--quiet"]) == 0
    with rasterio.open(tmp_path / "out" / "slope.tif") as target:
        assert target.tags()["TERRASOL_INPUT"] == "dem.tif"
        assert "TERRASOL_INPUT_SHA256" not in target.tags()


# Only tell


def test_dry_run_writes_nothing(tmp_path, capfd):
    dem = write_raster(tmp_path / "dem.tif", hills() / 0.3048, unit="ft")
    assert main(["irradiation", str(dem), str(tmp_path / "out"), "--dry-run"]) == 0
    assert names(tmp_path) == ["dem.tif"]
    out, err = capfd.readouterr()
    assert err == ""
    for words in ("WGS 84 / UTM zone 32N", "read as foot", "MB", "true north", "thread"):
        assert words in out
    assert "irradiation_months.tif (MJ m-2), overview.png, run.json\n" in out


def test_quiet_dry_run_still_tells(dem, tmp_path, capfd):
    command = ["terrain", str(dem), str(tmp_path / "out"), "--dry-run"]
    assert main(command) == main([*command, "--quiet"]) == 0
    out, err = capfd.readouterr()
    assert err == ""
    out = re.sub(r"[\d,]+ MB free", "", out)  # others may use the disk meanwhile
    assert out[: len(out) // 2] == out[len(out) // 2 :]
    assert "1 void cell\n" in out


@pytest.mark.parametrize(("easting", "sense"), [(4e5, "counter-clockwise"), (6e5, "clockwise")])
def test_turn_of_the_grid_in_words(tmp_path, capfd, easting, sense):
    """West of its central meridian a transverse Mercator grid is turned counter-clockwise."""
    transform = rasterio.Affine(50, 0, easting, 0, -50, 5.15e6)
    dem = write_raster(tmp_path / "dem.tif", transform=transform, unit="m")
    assert main(["terrain", str(dem), str(tmp_path / "out"), "--dry-run"]) == 0
    line = next(x for x in capfd.readouterr().out.splitlines() if x.startswith("true north"))
    assert f" degrees {sense} (" in line
    assert " -" not in line


def test_overwrite_leaves_nothing_of_an_earlier_run(dem, tmp_path, capfd):
    """And everything else where it is."""
    command = [str(dem), str(tmp_path), "--overwrite", *QUICK]
    assert main(["irradiation", *command, "--parts", "--period", "2025-06-21", "--quiet"]) == 0
    (tmp_path / "irradiation_year.tif.txt").write_text("of a user")
    (tmp_path / "horizon.tif").write_text("of a user")
    assert main(["terrain", *command[:3], "--azimuths", "8", "--dry-run"]) == 0
    told = capfd.readouterr().out
    assert "beam_months.tif, diffuse_months.tif, irradiation_months.tif, irradiation_p" in told
    assert main(["terrain", *command[:3], "--azimuths", "8", "--json"]) == 0
    assert "record" not in str(json.loads(capfd.readouterr().out)["warnings"])
    assert names(tmp_path) == [
        "aspect.tif", "horizon.tif", "irradiation_year.tif.txt", "run.json", "sky_view.tif",
        "slope.tif",
    ]  # fmt: skip


def test_overwrite_without_a_readable_record_removes_nothing(dem, tmp_path, capfd):
    options = [str(tmp_path), "--overwrite", "--azimuths", "8"]
    (tmp_path / "run.json").write_text("{")
    (tmp_path / "beam_months.tif").write_text("whose?")
    assert main(["terrain", str(dem), *options]) == 0
    assert "run.json was no readable record" in capfd.readouterr().err
    assert (tmp_path / "beam_months.tif").read_text() == "whose?"
    assert "no readable record" in json.loads((tmp_path / "run.json").read_text())["warnings"][-1]


def test_paths_in_the_record_are_absolute(dem, tmp_path, monkeypatch):
    monkeypatch.chdir(dem.parent)
    out = os.path.relpath(tmp_path / "out")
    assert main(["terrain", dem.name, out, "--azimuths", "8", "--quiet"]) == 0
    record = json.loads((tmp_path / "out" / "run.json").read_text("utf-8"))
    assert record["input"]["file"] == str(dem)
    assert record["files"][0] == str(tmp_path / "out" / "slope.tif")


@pytest.mark.heavy
def test_both_spellings_of_a_unit(dem, tmp_path):
    for folder, unit in (("typed", "kWh"), ("written", "kW h m-2")):
        options = ["--unit", unit, "--period", "2025-06-21"]
        assert settings_of(dem, tmp_path / folder, *options)["unit"] == "kW h m-2"


def test_title_without_a_font_is_told(dem, tmp_path, capfd, monkeypatch):
    monkeypatch.setattr("terrasol.show.page.fontManager.ttflist", [])
    odd = tmp_path / "高山.tif"
    odd.symlink_to(dem)
    options = ["--period", "2025-06-21", *QUICK]
    assert main(["irradiation", str(odd), str(tmp_path / "out"), *options]) == 0
    assert "no font here has all letters of '高山'" in capfd.readouterr().err


def test_dry_run_in_json(tmp_path, capfd):
    transform = rasterio.Affine(0.001, 0, 10, 0, -0.001, 60)
    dem = write_raster(tmp_path / "dem.tif", crs="EPSG:4326", transform=transform, unit="m")
    assert main(["terrain", str(dem), str(tmp_path / "out"), "--dry-run", "--json"]) == 0
    told = json.loads(capfd.readouterr().out)
    # GRS 80 / WGS 84: one degree of longitude and of latitude at 60 degrees are 55.80 and
    # 111.41 km (from the ellipsoid's radii of curvature).
    assert told["cell_m"] == pytest.approx([55.80, 111.41], rel=1e-3)
    assert told["grid_up_from_true_north_deg"]["centre"] == 0.0
    assert told["heights_m"] == [round(float(hills().min()), 2), round(float(hills().max()), 2)]
    assert told["files"] == {
        "slope.tif": "degree", "aspect.tif": "degree", "sky_view.tif": "1", "run.json": None,
    }  # fmt: skip
    assert min(told["memory_mb"], told["disk_free_mb"]) > 0


def test_true_north_of_a_neighbouring_zone(tmp_path, capfd):
    """Convergence of a transverse Mercator, tan c = tan(l - l0) sin(latitude) on the sphere."""
    from pyproj import Transformer

    x, y = Transformer.from_crs(4326, 32632, always_xy=True).transform(15.0, 46.0)
    transform = rasterio.Affine(50, 0, x, 0, -50, y)
    dem = write_raster(tmp_path / "dem.tif", transform=transform, unit="m")
    assert main(["terrain", str(dem), str(tmp_path / "out"), "--dry-run", "--json"]) == 0
    told = json.loads(capfd.readouterr().out)["grid_up_from_true_north_deg"]
    expected = np.degrees(np.arctan(np.tan(np.radians(6.0)) * np.sin(np.radians(46.0))))
    assert told["centre"] == pytest.approx(expected, abs=0.03)


def test_first_run_is_announced(dem, tmp_path, monkeypatch, capfd):
    from terrasol.cli import run

    class Kernel:
        class stats:
            cache_path = str(tmp_path)

    monkeypatch.setattr(run.horizon, "near_field", Kernel)
    run.announce_compilation(quiet=True)
    assert capfd.readouterr().err == ""
    run.announce_compilation(quiet=False)
    assert "compiling" in capfd.readouterr().err
    (tmp_path / "kernel.nbi").touch()
    run.announce_compilation(quiet=False)
    assert capfd.readouterr().err == ""
