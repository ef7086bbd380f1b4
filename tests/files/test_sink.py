"""GeoTIFFs: whole, labelled, cloud-optimised, and on the input's grid."""

import json
import struct

import numpy as np
import pytest
import rasterio
from pyproj import CRS

from terrasol.constants import VOID
from terrasol.errors import OutputError
from terrasol.files import sink as sink_module
from terrasol.files.delivery import Delivery
from terrasol.files.layers import Layer
from terrasol.files.sink import COMPRESSIONS, TILE, RasterSink

UTM = CRS(32632)
NORTH_UP = (50.0, 0.0, 4e5, 0.0, -50.0, 5.15e6)
ENERGY = Layer(
    "energy", ("global", "beam"), "MJ m-2", "energy of the sun", resolution=2.0**-4,
    tags={"period": "typical year"},
)  # fmt: skip
ASPECT = Layer("aspect", ("aspect",), "degree", "direction", "ground_slope_direction")
STATUS = Layer("status", ("status",), "1", "code", dtype="uint8")


def values_of(layer, shape):
    y, x = np.mgrid[0 : shape[0], 0 : shape[1]].astype(np.float32)
    planes = [1000 + 300 * np.sin(x / 40) + y / 3 + 10 * k for k in range(len(layer.bands))]
    if layer.dtype == "uint8":
        return (np.stack(planes) > 1100).astype(np.uint8)
    values = np.stack(planes)
    values[:, 5, 7] = np.nan
    return values


def write(folder, layers, shape, *, transform=NORTH_UP, crs=UTM, change=lambda d, s: None, **given):
    names = [f"{layer.name}.tif" for layer in layers]
    with (
        Delivery(folder, names) as delivery,
        RasterSink(delivery, transform, crs, shape, **given) as sink,
    ):
        for layer in layers:
            sink.open(layer)
        for row in range(0, shape[0], TILE):
            for column in range(0, shape[1], TILE):
                for layer in layers:
                    block = values_of(layer, shape)[:, row : row + TILE, column : column + TILE]
                    sink.write(layer.name, row, column, block)
        change(delivery, sink)
        sink.finish()
        delivery.commit()


def test_no_zero_has_a_minus(tmp_path):
    with (
        Delivery(tmp_path, ["energy.tif"]) as delivery,
        RasterSink(delivery, NORTH_UP, UTM, (2, 2)) as sink,
    ):
        sink.open(ENERGY)
        sink.write("energy", 0, 0, np.array([[[-0.0, -1e-6], [1e-6, np.nan]]] * 2, np.float32))
        sink.finish()
        delivery.commit()
    with rasterio.open(tmp_path / "energy.tif") as source:
        found = source.read(1)
    assert found.tolist() == [[0.0, 0.0], [0.0, VOID]]
    assert not np.signbit(found[found != VOID]).any()


def test_values_come_back_to_half_their_resolution(tmp_path):
    write(tmp_path, [ENERGY], (300, 520))
    with rasterio.open(tmp_path / "energy.tif") as source:
        found = source.read(masked=True)
    expected = values_of(ENERGY, (300, 520))
    np.testing.assert_array_equal(found.mask, np.isnan(expected))
    assert np.nanmax(np.abs(found.filled(np.nan) - expected)) <= ENERGY.resolution / 2
    assert np.all(found.compressed() * 16 == np.rint(found.compressed() * 16))


def test_labels(tmp_path):
    settings = {"albedo": [0.2] * 12, "ü": "<&>"}
    write(tmp_path, [ENERGY, ASPECT], (40, 50), tags={"TERRASOL_SETTINGS": json.dumps(settings)})
    with rasterio.open(tmp_path / "energy.tif") as source:
        assert source.descriptions == ("global", "beam")
        assert source.units == ("MJ m-2", "MJ m-2")
        assert source.nodatavals == (VOID, VOID)
        assert source.dtypes == ("float32", "float32")
        assert json.loads(source.tags()["TERRASOL_SETTINGS"]) == settings
        assert source.tags()["period"] == "typical year"
        for band in source.indexes:
            names = source.tags(band)
            assert (names["long_name"], names["units"]) == ("energy of the sun", "MJ m-2")
            assert "standard_name" not in names
    with rasterio.open(tmp_path / "aspect.tif") as source:
        assert source.tags(1)["standard_name"] == "ground_slope_direction"


def test_status_is_bytes(tmp_path):
    write(tmp_path, [STATUS], (300, 300))
    with rasterio.open(tmp_path / "status.tif") as source:
        assert source.dtypes == ("uint8",)
        assert source.nodata == 255
        np.testing.assert_array_equal(source.read(), values_of(STATUS, (300, 300)))
        assert set(np.unique(source.read(1, out_shape=(75, 75)))) == {0, 1}


@pytest.mark.parametrize(
    ("transform", "crs"),
    [
        (NORTH_UP, UTM),
        ((50.0, 0.0, 4e5, 0.0, 50.0, 5.15e6), UTM),
        ((40.0, 30.0, 4e5, 30.0, -40.0, 5.15e6), UTM),
        ((0.001, 0.0, 8.0, 0.0, -0.002, 46.0), CRS(4326)),
        (NORTH_UP, CRS("+proj=tmerc +lat_0=46 +lon_0=9 +k=1 +datum=WGS84 +units=m")),
        (NORTH_UP, CRS(2226)),
    ],
    ids=["north-up", "south-up", "rotated", "degrees", "own CRS", "feet"],
)
def test_grid_is_the_inputs(tmp_path, transform, crs):
    write(tmp_path, [ENERGY], (40, 50), transform=transform, crs=crs)
    with rasterio.open(tmp_path / "energy.tif") as source:
        assert tuple(source.transform)[:6] == pytest.approx(transform, rel=1e-12)
        assert CRS.from_wkt(source.crs.to_wkt()).equals(crs, ignore_axis_order=True)
        np.testing.assert_allclose(
            source.read(1)[1:4], values_of(ENERGY, (40, 50))[0, 1:4], atol=0.04
        )


@pytest.mark.parametrize("compression", list(COMPRESSIONS))
def test_cloud_optimised(tmp_path, compression):
    """OGC 21-026 (Cloud Optimized GeoTIFF 1.0): tiles, overviews, directories before data."""
    write(tmp_path, [ENERGY], (1100, 600), compression=compression)
    path = tmp_path / "energy.tif"
    with rasterio.open(path) as source:
        assert source.tags(ns="IMAGE_STRUCTURE")["LAYOUT"] == "COG"
        assert source.profile["compress"] == compression
        assert source.block_shapes == [(TILE, TILE)] * 2
        assert source.overviews(1) == [4, 8]
    directories, tiles = tiff_layout(path.read_bytes())
    assert max(directories) < min(min(offsets) for offsets in tiles)
    # The coarser the image, the nearer to the beginning of the file.
    assert len(tiles) == 3
    assert max(tiles[2]) < min(tiles[1])
    assert max(tiles[1]) < min(tiles[0])


def tiff_layout(data):
    """Offsets of the directories, and of each one's tiles, of a little-endian classic TIFF."""
    assert data[:4] == b"II*\0"
    (place,) = struct.unpack_from("<I", data, 4)
    directories, tiles = [], []
    while place:
        directories.append(place)
        (count,) = struct.unpack_from("<H", data, place)
        for k in range(count):
            tag, kind, number, value = struct.unpack_from("<HHII", data, place + 2 + 12 * k)
            if tag == 324:  # TileOffsets, TIFF 6.0 section 15
                assert kind == 4
                first = value if number > 1 else place + 2 + 12 * k + 8
                tiles.append(struct.unpack_from(f"<{number}I", data, first))
        (place,) = struct.unpack_from("<I", data, place + 2 + 12 * count)
    return directories, tiles


def test_small_rasters_have_no_overviews(tmp_path):
    write(tmp_path, [ENERGY], (TILE, TILE))
    with rasterio.open(tmp_path / "energy.tif") as source:
        assert source.overviews(1) == []


def test_overviews_are_means_of_what_is_known(tmp_path):
    shape = (301, 522)
    write(tmp_path, [ENERGY], shape)
    with rasterio.open(tmp_path / "energy.tif", overview_level=0) as source:
        found = source.read(1, masked=True)
    assert found.shape == (76, 131)
    full = values_of(ENERGY, shape)[0]
    assert found[3, 3] == pytest.approx(full[12:16, 12:16].mean(), abs=0.04)
    assert found[1, 1] == pytest.approx(np.nanmean(full[4:8, 4:8]), abs=0.04)
    # At the rim the last cell counts for those that are missing.
    assert found[75, 130] == pytest.approx(full[300, [520, 521, 521, 521]].mean(), abs=0.04)
    assert not found.mask.any()


def test_overviews_of_directions_are_no_means(tmp_path):
    """The mean of 350 and 10 degrees is not 180."""
    values = np.where(np.indices((300, 300)).sum(axis=0) % 2, 350.0, 10.0).astype(np.float32)
    with Delivery(tmp_path, ["aspect.tif"]) as delivery:
        with RasterSink(delivery, NORTH_UP, UTM, (300, 300)) as sink:
            sink.open(ASPECT)
            for row, column in np.ndindex(2, 2):
                place = np.s_[row * 256 : row * 256 + 256, column * 256 : column * 256 + 256]
                sink.write("aspect", row * 256, column * 256, values[place][None])
            sink.finish()
        delivery.commit()
    with rasterio.open(tmp_path / "aspect.tif", overview_level=0) as source:
        assert set(np.unique(source.read(1))) <= {10.0, 350.0}


def test_order_of_blocks_does_not_matter(tmp_path):
    shape = (520, 300)
    for folder, order in (("there", 1), ("back", -1)):
        with Delivery(tmp_path / folder, ["energy.tif"]) as delivery:
            with RasterSink(delivery, NORTH_UP, UTM, shape) as sink:
                sink.open(ENERGY)
                for row, column in list(np.ndindex(3, 2))[::order]:
                    place = np.s_[:, row * 256 : row * 256 + 256, column * 256 : column * 256 + 256]
                    sink.write("energy", row * 256, column * 256, values_of(ENERGY, shape)[place])
                sink.finish()
            delivery.commit()
    there, back = (tmp_path / folder / "energy.tif" for folder in ("there", "back"))
    assert there.read_bytes() == back.read_bytes()


def test_progress_reaches_the_end(tmp_path):
    told = []
    with (
        Delivery(tmp_path, ["energy.tif", "aspect.tif"]) as delivery,
        RasterSink(delivery, NORTH_UP, UTM, (9, 9)) as sink,
    ):
        for layer in (ENERGY, ASPECT):
            sink.open(layer)
            sink.write(layer.name, 0, 0, values_of(layer, (9, 9)))
        sink.finish(told.append)
    assert told[-1] == 1.0
    assert told == sorted(told)


# Failures


def test_unfinished_run_leaves_nothing(tmp_path):
    with (
        Delivery(tmp_path / "out", ["energy.tif"]) as delivery,
        RasterSink(delivery, NORTH_UP, UTM, (600, 600)) as sink,
    ):
        sink.open(ENERGY)
        sink.write("energy", 0, 0, values_of(ENERGY, (TILE, TILE)))
    assert list(tmp_path.iterdir()) == []


def cut_working_copy(delivery, sink):
    for copy in sink._copies.values():
        copy.close()
    path = delivery.staged("working-energy.tif")
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])


def lose_units(delivery, sink):
    sink._copies["energy"]._fine.units = ("", "")


@pytest.mark.parametrize("change", [cut_working_copy, lose_units])
def test_damage_on_the_way_is_found(tmp_path, change):
    with pytest.raises(OutputError, match=r"out/energy\.tif"):
        write(tmp_path / "out", [ENERGY], (300, 300), change=change)
    assert list(tmp_path.iterdir()) == []


def test_disk_that_fills_while_writing(tmp_path, monkeypatch):
    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(sink_module, "_put", full)
    with pytest.raises(OutputError, match=r"energy\.tif could not be written \(No space left"):
        write(tmp_path / "out", [ENERGY], (40, 50))
    assert list(tmp_path.iterdir()) == []


def test_gdal_without_the_compression(tmp_path, monkeypatch):
    monkeypatch.setitem(COMPRESSIONS, "zstd", {"COMPRESS": "NO_SUCH"})
    with pytest.raises(OutputError, match="--compression"):
        write(tmp_path / "out", [ENERGY], (40, 50))
    assert list(tmp_path.iterdir()) == []


def test_bands_with_names_of_their_own_keep_them(tmp_path):
    parts = Layer("parts", ("global", "beam"), "MJ m-2", "all", band_names=("all of it", "beam"))
    write(tmp_path, [parts], (40, 50))
    with rasterio.open(tmp_path / "parts.tif") as found:
        assert [found.tags(i)["long_name"] for i in (1, 2)] == ["all of it", "beam"]
