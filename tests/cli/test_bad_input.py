"""Every bad input: the right exit code, one sentence that names the thing, nothing left behind."""

import errno
import json
import os
import shutil
import warnings
from collections import namedtuple

import numpy as np
import pytest
from files.made import GRID, hills, write_raster
from pyproj import CRS
from rasterio import Affine

from terrasol.cli.main import main

USAGE, INPUT, OUTPUT = 2, 3, 4


def raster(values=None, **profile):
    """Make a raster that is wrong as told."""

    def make(path):
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            write_raster(path, values, **({"unit": "m"} | profile))

    return make


def cut_short(**profile):
    """Make a raster of which the last third is lost."""

    def make(path):
        raster(hills(200, 200), **profile)(path)
        path.write_bytes(path.read_bytes()[: path.stat().st_size * 2 // 3])

    return make


def coloured(target):
    target.write_colormap(1, {0: (0, 0, 0, 255), 1: (255, 0, 0, 255)})


def text(path):
    path.write_text("easting,northing,height\n400000,5150000,812\n")


LOCAL = 'LOCAL_CS["site",UNIT["metre",1]]'
DEPTHS = CRS("EPSG:32632+5715").to_wkt()
TO_A_POINT = Affine(0, 0, 4e5, 0, 0, 5e6)
TO_A_LINE = Affine(50, 50, 4e5, 50, 50, 5e6)
IN_DEGREES = Affine(1e-4, 0, 8.1, 0, -1e-4, 46.2)
OVER_THE_POLE = Affine(0.1, 0, 8.0, 0, -0.1, 90.0)

BAD_RASTERS = {
    "missing file": (lambda path: None, "no such file"),
    "folder": (lambda path: path.mkdir(), "dem.tif: this is a folder, not a raster"),
    "link to nowhere": (lambda path: path.symlink_to("gone.tif"), "link to a file that is not"),
    "the moon": (raster(crs="ESRI:103881"), "not the Earth"),
    "empty file": (lambda path: path.touch(), "is empty"),
    "text named .tif": (text, "cannot be opened as a raster"),
    "truncated before its directory": (cut_short(compress="deflate"), "cut short"),
    "truncated within its data": (cut_short(), "cut short"),
    "no CRS": (raster(crs=None), "no CRS"),
    "local CRS": (raster(crs=LOCAL), "true north is unknown"),
    "geocentric CRS": (raster(crs="EPSG:4978"), "true north is unknown"),
    "depths": (raster(crs=DEPTHS, unit=None), "depths"),
    "no georeference": (raster(transform=Affine.identity()), "where its cells lie"),
    "cells of no size": (raster(transform=TO_A_POINT), "no area"),
    "cells along a line": (raster(transform=TO_A_LINE), "no area"),
    "cells that are NaN": (raster(transform=Affine(np.nan, 0, 4e5, 0, -50, 5e6)), "no area"),
    "degrees called UTM": (raster(transform=IN_DEGREES), "assign the real CRS"),
    "UTM called degrees": (raster(crs="EPSG:4326"), "outside the domain"),
    "beyond the CRS": (raster(transform=Affine(50, 0, 4e12, 0, -50, 5e12)), "outside the domain"),
    "a pole": (raster(crs="EPSG:4326", transform=OVER_THE_POLE), "pole"),
    "all void": (raster(np.full((9, 9), -9999.0), nodata=-9999.0), "every cell is void"),
    "NaN only": (raster(np.full((9, 9), np.nan)), "every cell is void"),
    "infinite": (raster(np.full((9, 9), np.inf)), "infinite"),
    "undeclared nodata": (raster(np.where(hills() > 900, -9999.0, hills())), "-9999"),
    "undeclared huge nodata": (raster(np.where(hills() > 900, 3.4e38, hills())), "3.4e+38"),
    "feet called metres": (raster(hills() * 12), "--vertical-unit"),
    "unknown vertical unit": (raster(unit="furlong"), "'furlong'"),
    "two bands": (raster(np.stack([hills(), hills()])), "2 bands"),
    "complex": (raster(hills().astype(np.complex64)), "complex"),
    "colour table": (raster(np.ones((9, 9), np.uint8), after=coloured), "colour table"),
    "single row": (raster(hills()[:1]), "1 row and 48 columns"),
    "single column": (raster(hills()[:, :1]), "40 rows and 1 column:"),
    "single cell": (raster(hills()[:1, :1]), "1 row and 1 column:"),
}

BAD_SETTINGS = {
    "period reversed": ("--period 2025-10/2025-04", "before it starts"),
    "period malformed": ("--period summer", "'summer' is not understood"),
    "period of three": ("--period 2025/2026/2027", "two ends"),
    "no such day": ("--period 2025-02-30", "no calendar"),
    "before the sun's theory": ("--period 1066", "1900"),
    "albedo 1.2": ("--albedo 1.2", "albedo must be from 0 to 1; got 1.2\n"),
    "albedo below zero": ("--albedo -0.1", "albedo"),
    "albedo of 11 months": ("--albedo " + ",".join(["0.2"] * 11), "twelve"),
    "albedo in words": ("--albedo snow", "'snow'"),
    "albedo not a number": ("--albedo nan", "albedo"),
    "linke 0": ("--linke 0", "outside 1 to 15"),
    "linke of 3 months": ("--linke 3,3,3", "climatology"),
    "linke for bird": ("--linke 3 --air bird --aerosol 0.1 --water 1", "--air ineichen"),
    "negative aerosol": ("--air bird --aerosol -0.1 --water 1", "aerosol"),
    "bird without water": ("--air bird --aerosol 0.1", "--water"),
    "aerosol for ineichen": ("--aerosol 0.1", "--air bird"),
    "ozone in Dobson units": ("--air bird --aerosol 0.1 --water 1 --ozone 300", "atm-cm"),
    "solar constant of 0": ("--solar-constant 0", "solar constant"),
    "unknown air": ("--air thick", "'thick'"),
    "azimuths 0": ("--azimuths 0", "azimuths"),
    "azimuths 10": ("--azimuths 10", "multiple of 4"),
    "azimuths 1000": ("--azimuths 1000", "720"),
    "azimuths in words": ("--azimuths many", "'many'"),
    "step that divides no day": ("--step-seconds 7", "does not divide a day"),
    "step of nothing": ("--step-seconds 0", "step"),
    "refraction 1": ("--refraction 1", "0 or more and less than 1; got 1.0"),
    "refraction not a number": ("--refraction nan", "refraction"),
    "unknown unit": ("--unit cal", "'cal'"),
    "unknown basis": ("--basis roof", "'roof'"),
    "unknown diffuse model": ("--diffuse even", "'even'"),
    "unknown height unit": ("--vertical-unit yard", "'yard'"),
    "voids of -1": ("--fill-voids -1", "--fill-voids"),
    "voids beyond all bounds": ("--fill-voids 99999999999999999999", "largest void"),
    "threads 0": ("--threads 0", "--threads"),
    "threads beyond all bounds": ("--threads 99999999999999999999", "--threads"),
    "unknown option": ("--fast", "--fast"),
    "word too many": ("there", "there"),
}


@pytest.fixture
def refused(tmp_path, capfd):
    """Run a command that must fail; check what every failure has in common."""

    def run(code, words, *arguments):
        before = {path: path.lstat().st_mtime_ns for path in tmp_path.rglob("*")}
        assert main([str(argument) for argument in arguments]) == code
        out, err = capfd.readouterr()
        assert out == ""
        assert err.startswith("terrasol: ")
        assert err.count("\n") == 1
        assert "Traceback" not in err
        assert words in err
        assert {path: path.lstat().st_mtime_ns for path in tmp_path.rglob("*")} == before
        return err

    return run


@pytest.mark.parametrize("name", BAD_RASTERS)
@pytest.mark.parametrize("command", ["irradiation", "terrain"])
def test_bad_raster(tmp_path, refused, command, name):
    make, words = BAD_RASTERS[name]
    dem = tmp_path / "dem.tif"
    make(dem)
    assert str(dem) in refused(INPUT, words, command, dem, tmp_path / "out")


@pytest.mark.parametrize("name", BAD_SETTINGS)
def test_bad_setting(tmp_path, refused, name):
    options, words = BAD_SETTINGS[name]
    dem = write_raster(tmp_path / "dem.tif", unit="m")
    refused(USAGE, words, "irradiation", dem, tmp_path / "out", *options.split())


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["terrain"], "'DEM'"),
        (["terrain", "dem.tif"], "'OUT_DIR'"),
        (["horizon"], "'horizon'"),
        (["--loud"], "--loud"),
        (["terrain", "dem.tif", ""], "'OUT_DIR': the name is empty"),
        (["terrain", "", "out"], "'DEM': the name is empty"),
        (["terrain", "dem.tif", "out", "--period", "2025"], "--period"),
    ],
)
def test_bad_command_line(refused, arguments, words):
    assert "--help)" in refused(USAGE, words, *arguments)


# Places to write


@pytest.fixture
def dem(tmp_path):
    return write_raster(tmp_path / "dem.tif", unit="m")


def test_out_is_a_file(tmp_path, dem, refused):
    (tmp_path / "out").touch()
    refused(OUTPUT, "out is not a folder", "terrain", dem, tmp_path / "out")


def test_out_lies_below_a_file(tmp_path, dem, refused):
    refused(OUTPUT, "could not be written", "terrain", dem, dem / "out" / "deeper")


def test_out_cannot_be_made(dem, refused):
    refused(OUTPUT, "/proc/no/such", "terrain", dem, "/proc/no/such")


@pytest.mark.parametrize("more", [[], ["--dry-run"]])
def test_results_are_there_already(tmp_path, dem, refused, more):
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "slope.tif").write_text("precious")
    refused(OUTPUT, "--overwrite", "terrain", dem, tmp_path / "out", *more)
    assert (tmp_path / "out" / "slope.tif").read_text() == "precious"


@pytest.mark.parametrize("more", [[], ["--dry-run"]])
def test_out_has_too_long_a_name(tmp_path, dem, refused, more):
    words = "could not be written (File name too long)"
    refused(OUTPUT, words, "terrain", dem, tmp_path / ("a" * 300), *more)


def test_out_is_a_link_to_nowhere(tmp_path, dem, refused):
    (tmp_path / "out").symlink_to("gone")
    refused(OUTPUT, "out is a link to a place", "terrain", dem, tmp_path / "out")


def test_names_that_are_not_unicode(tmp_path, dem, refused):
    odd = os.fsdecode(bytes(tmp_path) + b"/\xff")
    refused(OUTPUT, "could not be written", "terrain", dem, odd, "--azimuths", 8, "--quiet")
    os.link(dem, odd)
    refused(INPUT, "not valid Unicode", "terrain", odd, tmp_path / "out")


def test_folder_in_the_way(tmp_path, dem, refused):
    (tmp_path / "out" / "slope.tif").mkdir(parents=True)
    refused(OUTPUT, "in the way", "terrain", dem, tmp_path / "out", "--overwrite")


def test_output_over_the_input(tmp_path, refused):
    dem = write_raster(tmp_path / "slope.tif", unit="m")
    refused(OUTPUT, "the input itself", "terrain", dem, tmp_path, "--overwrite")


def test_input_among_the_files_to_be_removed(tmp_path, refused):
    dem = write_raster(tmp_path / "horizon.tif", unit="m")
    record = {"versions": {"terrasol": "0"}, "files": ["horizon.tif"]}
    (tmp_path / "run.json").write_text(json.dumps(record))
    refused(OUTPUT, "horizon.tif is the input itself", "terrain", dem, tmp_path, "--overwrite")


def test_disk_too_small(tmp_path, dem, refused, monkeypatch):
    usage = namedtuple("usage", "total used free")(10**9, 10**9, 1000)
    monkeypatch.setattr(shutil, "disk_usage", lambda path: usage)
    refused(OUTPUT, "make room", "terrain", dem, tmp_path / "new" / "out")


@pytest.mark.parametrize(
    "place",
    [
        "terrasol.files.sink._put",
        "terrasol.files.sink.rasterio.shutil.copy",
        "pathlib.Path.write_bytes",
        "os.replace",
    ],
    ids=["writing", "packing", "recording", "moving"],
)
def test_disk_full_on_the_way(tmp_path, dem, refused, monkeypatch, place):
    def full(*_, **__):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    with monkeypatch.context() as patch:
        patch.setattr(place, full)
        patch.setattr("terrasol.cli.run.announce_compilation", lambda quiet: None)
        refused(OUTPUT, "No space left", "terrain", dem, tmp_path / "new" / "out", "--azimuths", 8)


def test_grid_used_here_is_a_good_one(tmp_path, dem, capfd):
    """None of the failures above comes from the raster that they share."""
    assert tuple(GRID)[:2] == (50.0, 0.0)
    assert main(["irradiation", str(dem), str(tmp_path / "out"), "--dry-run"]) == 0
    assert "WGS 84 / UTM zone 32N" in capfd.readouterr().out
