"""--far, --surface and --horizon-gap from the command line: files in, bands and record out."""

import json
import re

import numpy as np
import pytest
import rasterio
from files.made import hills, write_raster
from rasterio import Affine

from terrasol.cli.main import main

USAGE, INPUT, OUTPUT = 2, 3, 4
WIDE = Affine(200, 0, 3.9e5, 0, -200, 5.16e6)


@pytest.fixture
def rasters(tmp_path):
    """A small raster, a larger one in feet around it, and a surface."""
    z = hills()
    far = np.full((120, 120), 840.0)
    far[:, 70:80] = 2500.0
    surface = z.copy()
    surface[:, 30] += 25.0
    write_raster(tmp_path / "dem.tif", z, unit="m")
    write_raster(tmp_path / "far.tif", far / 0.3048, transform=WIDE, unit="ft")
    write_raster(tmp_path / "bare.tif", far / 0.3048, transform=WIDE)
    write_raster(tmp_path / "surface.tif", surface, unit="m")
    return tmp_path


def run(folder, *words):
    code = main([*words[:1], str(folder / "dem.tif"), str(folder / "out"), *words[1:]])
    return code or 0


def read(folder, name):
    with rasterio.open(folder / "out" / f"{name}.tif") as source:
        return source.read(masked=True).filled(np.nan), source.descriptions, source.units


def record(folder):
    return json.loads((folder / "out" / "run.json").read_text())


def test_far_and_surface_raise_the_horizon(rasters):
    common = ("terrain", "--azimuths", "8", "--horizon", "--quiet")
    assert run(rasters, *common) == 0
    alone = read(rasters, "horizon")[0]
    more = ("--far", str(rasters / "far.tif"), "--surface", str(rasters / "surface.tif"))
    assert run(rasters, *common, "--overwrite", *more) == 0
    got = read(rasters, "horizon")[0]
    # a ridge of 2500 m that begins at 404 km east, 1.6 km beyond the raster's edge
    assert alone[2].max() < 17.0
    assert (got[2] > 20.0).all()
    z = hills()
    wall = (z[20, 30] + 25.0 - z[20, 31]) / 50.0  # 3 degrees of true north beside the grid's
    assert got[6, 20, 31] == pytest.approx(np.degrees(np.arctan(wall)), abs=1.0)
    told = record(rasters)
    assert told["settings"]["far"]["file"].endswith("far.tif")
    assert len(told["settings"]["far"]["sha256"]) == 64
    assert told["settings"]["surface"]["file"].endswith("surface.tif")
    assert told["results"]["far_reach_km"][0] == pytest.approx(10.0, abs=0.1)
    assert "km beyond the raster's edge" in told["results"]["remarks"][0]


@pytest.mark.heavy
def test_the_gap_has_two_bands_with_units_of_their_own(rasters, capsys):
    words = ("irradiation", "--azimuths", "8", "--period", "2025-03", "--step-seconds", "600")
    assert run(rasters, *words, "--horizon-gap", "--highest", "3000", "--unit", "kWh") == 0
    values, names, units = read(rasters, "horizon_gap")
    assert units == ("degree", "kW h m-2")
    assert names == ("horizon gap", "direct light within it")
    assert (values[0] > 0.0).all()
    assert (values[1] > 0.0).any()
    told = record(rasters)
    assert told["settings"]["horizon_gap"] is True
    assert told["results"]["horizon_gap_highest_ground_m"] == 3000.0
    assert "ground outside all data, up to 3000 m high" in told["warnings"][0]
    assert "3000 m high" in capsys.readouterr().err
    assert run(rasters, "terrain", "--azimuths", "8", "--horizon-gap", "--overwrite") == 0
    assert read(rasters, "horizon_gap")[2] == ("degree",)


def test_units_of_the_larger_model(rasters):
    words = ("terrain", "--azimuths", "8", "--quiet", "--far")
    assert run(rasters, *words, str(rasters / "far.tif")) == 0
    assert record(rasters)["warnings"] == []
    want = read(rasters, "sky_view")[0]
    again = (*words, str(rasters / "bare.tif"), "--far-unit", "foot", "--overwrite")
    assert run(rasters, *again) == 0
    np.testing.assert_array_equal(read(rasters, "sky_view")[0], want)


BAD = {
    "no such far": (("--far", "{}/none.tif"), INPUT, "none.tif: there is no such file"),
    "no such surface": (("--surface", "{}/none.tif"), INPUT, "none.tif: there is no such file"),
    "far is the raster": (("--far", "{}/dem.tif"), INPUT, "dem.tif: the far model shows nothing"),
    "far in feet called metres": (("--far", "{}/bare.tif"), 0, "far.* vertical datum and unit"),
    "surface elsewhere": (("--surface", "{}/south.tif"), INPUT, "leaves out 100 %"),
    "surface below": (("--surface", "{}/low.tif"), INPUT, "probably swapped"),
    "surface in no unit": (("--surface", "{}/high.tif"), INPUT, "--surface-unit"),
    "highest alone": (("--highest", "900"), USAGE, "--horizon-gap"),
    "unit of nothing": (("--far-unit", "foot"), USAGE, "--far-unit belongs to --far"),
    "highest too low": (("--horizon-gap", "--highest", "3"), USAGE, "as low as 3 m"),
    "highest in words": (("--horizon-gap", "--highest", "nan"), USAGE, "number of metres"),
}


@pytest.mark.parametrize("case", BAD)
def test_bad_companions_are_named(rasters, capfd, case):
    words, code, said = BAD[case]
    write_raster(rasters / "south.tif", hills(), transform=Affine(50, 0, 4e5, 0, -50, 5e6))
    write_raster(rasters / "low.tif", hills() - 20.0, unit="m")
    write_raster(rasters / "high.tif", hills() * 15.0, unit="m")
    filled = [word.format(rasters) for word in words]
    assert run(rasters, "terrain", "--azimuths", "8", *filled) == code
    error = capfd.readouterr().err
    assert re.search(said, error), error
    assert (rasters / "out").exists() == (code == 0)


def test_no_input_is_written_over(rasters, capfd):
    out = rasters / "out"
    out.mkdir()
    far = out / "slope.tif"
    (rasters / "far.tif").rename(far)
    before = far.read_bytes()
    assert run(rasters, "terrain", "--azimuths", "8", "--far", str(far), "--overwrite") == OUTPUT
    assert "is the input itself" in capfd.readouterr().err
    assert far.read_bytes() == before
