"""Stacks of maps: what xarray and GDAL find in them, and that they come whole or not at all."""

import numpy as np
import pytest
import rasterio
import xarray as xr
from pyproj import CRS

from files.made import GRID, UTM
from terrasol.errors import OutputError, SettingError
from terrasol.files import stacks
from terrasol.files.stacks import Stack, StackVariable, StackWriter, open_stack

SHAPE = (150, 140)  # chunks at the rims are broken
EDGES = np.datetime64("2025-05-31T23:00", "s") + np.arange(71) * np.timedelta64(1, "h")
RESOLUTION = 2.0**-3


def stack(crs=UTM, transform=GRID, shape=SHAPE):
    names = ("global", "net")
    variables = tuple(
        StackVariable(n, "W m-2", f"{n} irradiance", "time: mean", RESOLUTION) for n in names
    )
    return Stack(
        variables, EDGES, shape, tuple(transform)[:6], CRS(crs), 64,
        {"title": "made", "source": "a test", "history": "made", "references": "none"},
    )  # fmt: skip


def values(seed=0):
    random = np.random.default_rng(seed)
    made = random.uniform(0.0, 1000.0, (70, *SHAPE)).astype(np.float32)
    made[:5] = 0.0
    made[:, :3, 7] = np.nan
    return made


def fill(writer, name="global", made=None):
    made = values() if made is None else made
    for time in (0, 64):
        for row in (0, 128):
            writer.write(name, time, row, 0, made[time : time + 64, row : row + 128])


@pytest.fixture(scope="module", params=["zarr", "nc"])
def written(request, tmp_path_factory):
    path = tmp_path_factory.mktemp("stacks") / "new" / f"made.{request.param}"
    with StackWriter(path, stack()) as writer:
        fill(writer)
        writer.commit()
    return path


def rounded():
    return np.round(values() / RESOLUTION) * RESOLUTION


def test_xarray_finds_values_and_times(written):
    assert [p.name for p in written.parent.iterdir()] == [written.name]
    with open_stack(written) as data:
        assert data["global"].dims == ("time", "y", "x")
        assert data["global"].dtype == np.float32
        np.testing.assert_array_equal(data["global"].values, rounded())
        assert np.isnan(data["net"].values).all()  # never written
        np.testing.assert_array_equal(data["time_bounds"].values[:, 0], EDGES[:-1])
        np.testing.assert_array_equal(data["time_bounds"].values[:, 1], EDGES[1:])
        np.testing.assert_array_equal(data["time"].values, EDGES[:-1] + np.timedelta64(1800, "s"))
        assert data["time"].encoding["bounds"] == "time_bounds"
        assert data["x"].values[0] == GRID.c + 25
        assert data["y"].values[-1] == GRID.f - 149.5 * 50


def test_cf_attributes(written):
    # names and attributes as the CF conventions ask for, from the table in the project's notes
    # on outputs; a flux in the plane of a slope has no standard name
    engine = {"nc": "h5netcdf", "zarr": "zarr"}[written.suffix[1:]]
    with xr.open_dataset(written, engine=engine, decode_cf=False) as raw:
        assert raw.attrs["Conventions"].startswith("CF-1.")
        assert set(raw.attrs) >= {"title", "source", "history", "references"}
        flux = raw["global"].attrs
        assert (flux["units"], flux["cell_methods"]) == ("W m-2", "time: mean")
        assert "standard_name" not in flux
        mapping = raw[flux["grid_mapping"]].attrs
        assert CRS.from_cf(mapping) == CRS(UTM)
        assert mapping["grid_mapping_name"] == "transverse_mercator"
        assert [float(x) for x in mapping["GeoTransform"].split()] == list(GRID.to_gdal())
        assert raw["time"].attrs["units"] == "hours since 2025-05-31 00:00:00"
        assert raw["time"].attrs["calendar"] == "standard"
        assert raw["x"].attrs["standard_name"] == "projection_x_coordinate"
        assert raw["y"].attrs["axis"] == "Y"
        if written.suffix == ".zarr":
            assert raw["time"].values[0] == 23.5
            assert raw[flux["grid_mapping"]].values == 0


def test_gdal_finds_values_and_place(written):
    driver = {"nc": "netCDF", "zarr": "Zarr"}[written.suffix[1:]]
    with rasterio.Env() as env:
        if driver not in env.drivers():
            pytest.skip(f"this GDAL has no {driver} driver")
    name = f'ZARR:"{written}":/global' if driver == "Zarr" else f"netcdf:{written}:global"
    with rasterio.open(name) as source:
        assert source.count == 70
        assert source.crs == rasterio.CRS.from_user_input(UTM)
        assert source.transform.almost_equals(GRID)
        assert np.isnan(source.nodata)
        np.testing.assert_array_equal(source.read(), rounded())
        assert source.units[0] == "W m-2"


def test_chunks_serve_cells_and_maps(written):
    with open_stack(written) as data:
        assert data["global"].encoding["preferred_chunks"] == {"time": 64, "y": 128, "x": 128}


@pytest.mark.parametrize("ending", ["zarr", "nc"])
def test_degrees_and_turned_grids(tmp_path, ending):
    degrees = rasterio.Affine(0.001, 0, 9.0, 0, -0.001, 46.0)
    for name, crs, grid in (
        ("degrees", "EPSG:4326", degrees),
        ("turned", UTM, rasterio.Affine(47, 17, 4e5, 17, -47, 5.15e6)),
    ):
        path = tmp_path / f"{name}.{ending}"
        with StackWriter(path, stack(crs, grid)) as writer:
            fill(writer)
            writer.commit()
        with open_stack(path) as data:
            np.testing.assert_array_equal(data["global"].values, rounded())
            if name == "degrees":
                assert data["x"].attrs["standard_name"] == "longitude"
                assert data["y"].attrs["units"] == "degrees_north"
            else:
                assert "x" not in data.coords
                assert data["latitude"].shape == SHAPE
                assert 46.0 < float(data["latitude"].mean()) < 47.0
                assert set(data["global"].coords) >= {"latitude", "longitude"}


@pytest.mark.parametrize("ending", ["zarr", "nc"])
def test_unfinished_leaves_nothing(tmp_path, ending):
    path = tmp_path / "new" / f"made.{ending}"
    with StackWriter(path, stack()) as writer:
        fill(writer)
        assert not path.exists()
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("ending", ["zarr", "nc"])
def test_nothing_is_replaced_unasked(tmp_path, ending):
    path = tmp_path / f"made.{ending}"

    def write(made, **options):
        with StackWriter(path, stack(), **options) as writer:
            fill(writer, made=made)
            writer.commit()

    write(values(0))
    with pytest.raises(OutputError, match="exists: pass --overwrite"):
        write(values(1))
    with open_stack(path) as data:
        np.testing.assert_array_equal(data["global"].values, rounded())
    write(values(1), overwrite=True)
    with open_stack(path) as data:
        assert not np.array_equal(data["global"].values, rounded(), equal_nan=True)
    assert [p.name for p in tmp_path.iterdir()] == [path.name]


def test_what_is_no_stack_is_not_replaced(tmp_path):
    (tmp_path / "photos.zarr").mkdir()
    (tmp_path / "photos.zarr" / "one.jpg").write_text("dear")
    (tmp_path / "folder.nc").mkdir()
    (tmp_path / "file.zarr").write_text("")
    for name in ("photos.zarr", "folder.nc", "file.zarr"):
        with (
            pytest.raises(OutputError, match=r"no .* stack and in the way"),
            StackWriter(tmp_path / name, stack(), overwrite=True),
        ):
            pass
    assert (tmp_path / "photos.zarr" / "one.jpg").read_text() == "dear"


def test_other_endings_are_refused():
    with pytest.raises(SettingError, match=r"ends in \.zarr or \.nc"):
        StackWriter("made.tif", stack())


def test_too_small_a_disk_is_told_before(tmp_path):
    with (
        pytest.raises(OutputError, match="MB are free"),
        StackWriter(tmp_path / "made.nc", stack(), need=10**18),
    ):
        pass
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("ending", ["zarr", "nc"])
def test_failing_disk_is_told(tmp_path, ending, monkeypatch):
    def fail(*_):
        raise OSError(28, "No space left on device")

    target = {"zarr": stacks._ZarrTarget, "nc": stacks._NetcdfTarget}[ending]
    monkeypatch.setattr(target, "write", fail)
    with (
        pytest.raises(OutputError, match=rf"made\.{ending} could not be written"),
        StackWriter(tmp_path / f"made.{ending}", stack()) as writer,
    ):
        fill(writer)
    assert list(tmp_path.iterdir()) == []


def test_what_cannot_be_opened_is_told(tmp_path):
    (tmp_path / "broken.nc").write_text("no data")
    with pytest.raises(OutputError, match=r"broken\.nc cannot be read"):
        open_stack(tmp_path / "broken.nc")
