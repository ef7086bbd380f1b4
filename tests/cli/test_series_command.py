"""`terrasol series` from the command line."""

import json
from pathlib import Path

import numpy as np
import pytest
from files.made import hills, write_raster

import terrasol
from terrasol.cli import series as command
from terrasol.cli.main import main
from terrasol.files import delivery, horizons, stacks
from terrasol.files.horizons import VARIABLE
from terrasol.files.provenance import sha256
from terrasol.files.stacks import open_stack
from terrasol.light import series as light

QUICK = ["--azimuths", "8", "--substep-seconds", "1800", "--period", "2025-06-01/2025-06-02"]


@pytest.fixture(scope="module")
def dem(tmp_path_factory):
    values = hills()
    values[10, 12] = np.nan
    return write_raster(tmp_path_factory.mktemp("ground") / "hills.tif", values, unit="m")


@pytest.fixture
def store(tmp_path, monkeypatch):
    """The store, as the environment names it."""
    monkeypatch.setenv(VARIABLE, str(tmp_path / "store"))
    return tmp_path / "store"


def test_choices_are_those_of_the_library():
    assert tuple(light.STEPS) == command.STEPS
    assert light.QUANTITIES == command.QUANTITIES
    (spacing,) = (p for p in command.series.params if p.name == "substep_seconds")
    assert spacing.default == light.SUBSTEP_SECONDS


@pytest.mark.parametrize("ending", ["zarr", "nc"])
def test_a_run_and_its_second(dem, tmp_path, store, ending, capsys):
    out = tmp_path / f"out.{ending}"
    more = ["--quantities", "global,net", "--linke", "3", *QUICK]
    assert main(["series", str(dem), str(out), *more]) == 0
    said = capsys.readouterr()
    assert said.out == ""
    assert "48 steps from 2025-05-31T23:00:00Z to 2025-06-02T23:00:00Z" in said.err
    assert "horizons computed" in said.err
    assert len(list(store.iterdir())) == 1
    with open_stack(out) as data:
        assert list(data.data_vars) == ["global", "net"]
        record = json.loads(data.attrs["terrasol_record"])
        assert record["input"]["sha256"] == sha256(dem)
        assert record["settings"]["sky"]["linke"] == 3.0
        found = data["global"].values
    again = ["series", str(dem), str(out), *more, "--overwrite", "--json"]
    assert main(again) == 0
    said = capsys.readouterr()
    assert said.err == ""
    record = json.loads(said.out)
    assert record["results"]["horizons"] == "found in the store"
    assert record["results"]["void_cells"] == 1
    assert record["results"]["global"]["unit"] == "W m-2"
    with open_stack(out) as data:
        np.testing.assert_array_equal(data["global"].values, found)


def test_command_and_python_agree(dem, tmp_path):
    out = tmp_path / "out.nc"
    assert main(["series", str(dem), str(out), "--step", "1d", "--no-horizon-store", *QUICK]) == 0
    data = terrasol.irradiation_series(
        terrasol.read_elevation(dem), tmp_path / "same.nc", "2025-06-01/2025-06-02", step="1d",
        azimuths=8, substep_seconds=1800.0, horizon_store=False,
    )  # fmt: skip
    with data, open_stack(out) as own:
        np.testing.assert_array_equal(data["global"].values, own["global"].values)
        assert own["global"].attrs["units"] == "MJ m-2"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["out.nc", "same.nc"]


def test_folders_on_the_way_are_made_and_go_with_a_failed_run(dem, tmp_path, monkeypatch, capsys):
    words = ["--no-horizon-store", "--quiet", *QUICK]
    for name in ("a/b/out.nc", "c/d/out.zarr"):
        assert main(["series", str(dem), str(tmp_path / name), *words]) == 0
        assert (tmp_path / name).exists()

    def fail(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(stacks.os, "replace", fail)
    assert main(["series", str(dem), str(tmp_path / "e/f/out.nc"), *words]) == 4
    assert "out.nc could not be written" in capsys.readouterr().err
    assert not (tmp_path / "e").exists()


def test_albedo_as_a_raster(dem, tmp_path, capsys):
    layer = np.full(hills().shape, 0.5, np.float32)
    layer[:, :5] = 0.1
    layer[3, 7] = np.nan
    path = write_raster(tmp_path / "albedo.tif", layer, nodata=np.nan)
    out = tmp_path / "out.nc"
    words = ["--albedo", str(path), "--quantities", "global,net", "--no-horizon-store", *QUICK]
    assert main(["series", str(dem), str(out), "--json", *words]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["settings"]["albedo"] == {"file": str(path), "sha256": sha256(path)}
    assert any("albedo has no value for 1 cell of known" in told for told in record["warnings"])
    layer[3, 7] = 0.2
    with open_stack(out) as data:
        off = data["net"].values - (1.0 - layer) * data["global"].values
    assert np.nanmax(np.abs(off)) < 0.126  # rounded to 1/8 before and after
    assert np.isfinite(off).any()
    taken = path.rename(tmp_path / "albedo.nc")
    words[1] = str(taken)
    assert main(["series", str(dem), str(taken), "--overwrite", *words]) == 2
    assert "is an input itself" in capsys.readouterr().err


def without_store(dem, out, *words):
    """What a run that keeps nothing writes."""
    assert main(["series", str(dem), str(out), "--no-horizon-store", *words]) == 0
    with open_stack(out) as data:
        return data["global"].values


def test_a_store_that_takes_nothing_does_not_end_the_run(dem, tmp_path, store, monkeypatch, capsys):
    want = without_store(dem, tmp_path / "want.nc", "--quiet", *QUICK)
    making = horizons.HiddenFolder

    def refuse(parent):
        if parent == store:
            raise PermissionError(13, "Permission denied")
        return making(parent)

    monkeypatch.setattr(horizons, "HiddenFolder", refuse)
    assert main(["series", str(dem), str(tmp_path / "out.nc"), "--json", *QUICK]) == 0
    record = json.loads(capsys.readouterr().out)
    (told,) = (words for words in record["warnings"] if "horizons" in words)
    assert told.startswith(f"{store}: horizons could not be kept there (Permission denied)")
    assert "beside its results" in told
    assert record["horizon_store"] is None
    with open_stack(tmp_path / "out.nc") as data:
        np.testing.assert_array_equal(data["global"].values, want)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["out.nc", "store", "want.nc"]
    assert list(store.iterdir()) == []


def test_a_store_without_room_does_not_end_the_run(dem, tmp_path, store, monkeypatch, capsys):
    store.mkdir()
    free = delivery.shutil.disk_usage

    def full(folder):
        return free(folder)._replace(free=0) if Path(folder) == store else free(folder)

    monkeypatch.setattr(delivery.shutil, "disk_usage", full)
    assert main(["series", str(dem), str(tmp_path / "out.nc"), *QUICK]) == 0
    told = capsys.readouterr().err
    assert f"warning: {store}: the work may need" in told
    assert "another folder for the horizons" in told
    assert list(store.iterdir()) == []


def test_a_damaged_store_is_told_of_and_mended(dem, tmp_path, store, capsys):
    words = [str(dem), str(tmp_path / "out.nc"), "--overwrite", *QUICK]
    assert main(["series", *words]) == 0
    assert "warning: " + str(store) not in capsys.readouterr().err
    (kept,) = store.iterdir()
    (kept / "0-0.npy").write_bytes(b"")
    assert main(["series", *words, "--dry-run"]) == 0
    assert f"{kept}: the horizons kept there are damaged" in capsys.readouterr().out
    assert main(["series", *words]) == 0
    told = capsys.readouterr().err
    assert f"warning: {kept}: the horizons kept there are damaged" in told
    assert "horizons computed" in told
    assert main(["series", *words]) == 0
    assert "found in the store" in capsys.readouterr().err


def test_dry_run_writes_nothing(dem, tmp_path, store, capsys):
    words = ["series", str(dem), str(tmp_path / "out.zarr"), "--dry-run", *QUICK]
    assert main(words) == 0
    text = capsys.readouterr().out
    assert "to be kept in" in text
    assert main([*words, "--json"]) == 0
    forecast = json.loads(capsys.readouterr().out)
    assert forecast["steps"] == 48
    assert forecast["horizons_mb"] == round(2 * 8 * hills().size / 1e6, 1)
    assert forecast["horizons_found"] is False
    assert forecast["disk_mb"] > 0
    assert main([*words, "--no-horizon-store"]) == 0
    assert "removed at the end" in capsys.readouterr().out
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("given", "code", "words"),
    [
        (["out.tif", *QUICK], 2, "ends in .zarr or .nc"),
        (["out.nc"], 2, "name a --period"),
        (["out.nc", *QUICK, "--step", "3h"], 2, "'3h' is not one of"),
        (["out.nc", *QUICK, "--quantities", "global,heat"], 2, "joined by commas"),
        (["out.nc", *QUICK, "--quantities", "net,net"], 2, "names net more than once"),
        (["out.nc", *QUICK, "--compression", "zstd"], 2, "deflate only"),
        (["out.nc", *QUICK, "--substep-seconds", "7"], 2, "do not divide an hour"),
        (["out.nc", *QUICK, "--horizon-store", "x", "--no-horizon-store"], 2, "exclude"),
        (["out.nc", *QUICK, "--water", "1"], 2, "--water belongs to --air bird"),
        (["out.nc", *QUICK, "--horizon-gap"], 2, "belongs to terrasol irradiation"),
        (["out.nc", *QUICK, "--clear-sky-index", "0.6"], 2, "no hours"),
        (["taken.nc", *QUICK], 4, "exists: pass --overwrite"),
        (["out.nc", *QUICK, "--horizon-store", "taken.nc"], 4, "not a folder"),
    ],
)
def test_mistakes(dem, tmp_path, store, monkeypatch, capsys, given, code, words):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "taken.nc").write_text("mine")
    assert main(["series", str(dem), *given]) == code
    said = capsys.readouterr()
    assert words in said.err
    assert said.err.count("\n") == 1
    assert [path.name for path in tmp_path.iterdir()] == ["taken.nc"]
    assert (tmp_path / "taken.nc").read_text() == "mine"


def test_the_raster_is_not_replaced(tmp_path, store, capsys):
    dem = write_raster(tmp_path / "hills.nc", unit="m")  # whatever its name, a GeoTIFF
    assert main(["series", str(dem), str(dem), "--overwrite", *QUICK]) == 2
    assert "is an input itself" in capsys.readouterr().err
    assert main(["terrain", str(dem), str(tmp_path / "out"), "--azimuths", "8", "--quiet"]) == 0
