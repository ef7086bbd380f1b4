"""Reading: what a raster may hide is applied once, and what is no ground is refused."""

import warnings

import numpy as np
import pytest
import rasterio
from rasterio import Affine

from files.made import GRID, hills, write_raster
from terrasol import read_elevation
from terrasol.errors import InputError, SettingError
from terrasol.files import rasters

FOOT = 0.3048
US_FOOT = 1200 / 3937


@pytest.fixture
def dem(tmp_path):
    """Write a raster and read it."""

    def read(values=None, *, fill_voids=0, vertical_unit=None, **profile):
        profile = {"unit": "m"} | profile
        path = write_raster(tmp_path / "dem.tif", values, **profile)
        return read_elevation(path, vertical_unit=vertical_unit, fill_voids=fill_voids)

    return read


def test_plain_metres(dem):
    ground = dem()
    assert ground.heights.dtype == np.float32
    np.testing.assert_array_equal(ground.heights, hills().astype(np.float32))
    assert ground.transform == tuple(GRID)[:6]
    assert ground.crs.to_epsg() == 32632
    assert ground.warnings == ()
    assert ground.filled is None


@pytest.mark.parametrize(
    ("given", "factor"),
    [
        ({"unit": "ft"}, FOOT),
        ({"unit": "US survey foot"}, US_FOOT),
        ({"crs": "EPSG:2226+6360", "unit": None}, US_FOOT),
        ({"crs": "EPSG:32632+8228", "unit": None}, FOOT),
        ({"vertical_unit": "us-foot", "unit": None}, US_FOOT),
    ],
)
def test_feet_become_metres(dem, given, factor):
    ground = dem(hills() / factor, **given)
    np.testing.assert_allclose(ground.heights, hills(), rtol=2e-7)
    assert len(ground.crs.axis_info) == 2


def test_half_a_mile_apart(dem):
    """US survey and international feet part by 2 ppm: 1.8 mm in 900 m, not lost on the way."""
    foot, survey = (
        dem(np.full((4, 5), 2900.5), unit="ft"),
        dem(np.full((4, 5), 2900.5), unit="ftUS"),
    )
    assert float(survey.heights[0, 0]) - float(foot.heights[0, 0]) == pytest.approx(
        2900.5 * (US_FOOT - FOOT), abs=1.3e-4
    )


@pytest.mark.parametrize(
    "transform",
    [
        Affine(50, 0, 4e5, 0, 50, 5.15e6),
        Affine(-50, 0, 4e5, 0, -50, 5.15e6),
        Affine(25, 0, 4e5, 0, -50, 5.15e6),
        Affine(40, 30, 4e5, 30, -40, 5.15e6),
    ],
    ids=["south-up", "mirrored", "non-square", "rotated"],
)
def test_grids_are_kept_as_they_are(dem, transform):
    ground = dem(transform=transform)
    assert ground.transform == tuple(transform)[:6]
    np.testing.assert_array_equal(ground.heights, hills().astype(np.float32))


def test_integers_with_nodata(dem):
    values = np.rint(hills()).astype(np.int16)
    values[3, 4] = -32768
    ground = dem(values, nodata=-32768)
    assert np.argwhere(np.isnan(ground.heights)).tolist() == [[3, 4]]
    assert ground.heights[3, 5] == values[3, 5]


@pytest.mark.parametrize("nodata", [-9999.0, 0.0, np.nan, -3.4028234663852886e38])
def test_nodata_of_floats(dem, nodata):
    values = hills()
    values[0, 0] = values[7, 8] = nodata
    ground = dem(values, nodata=nodata)
    assert np.argwhere(np.isnan(ground.heights)).tolist() == [[0, 0], [7, 8]]


def test_nan_without_nodata(dem):
    values = hills()
    values[5, 5] = np.nan
    assert np.isnan(dem(values).heights[5, 5])


def test_scale_and_offset(dem):
    def scaled(target):
        target.scales, target.offsets = (0.1,), (500.0,)

    values = np.rint((hills() - 500) * 10).astype(np.uint16)
    values[2, 2] = 65535
    ground = dem(values, nodata=65535, after=scaled)
    np.testing.assert_allclose(ground.heights[3:], hills()[3:], atol=0.0501)
    assert np.isnan(ground.heights[2, 2])


def test_scale_before_feet(dem):
    def scaled(target):
        target.scales, target.offsets = (0.5,), (100.0,)

    ground = dem(np.full((4, 4), 1000, np.int32), unit="ft", after=scaled)
    np.testing.assert_allclose(ground.heights, 600 * FOOT, rtol=1e-7)


def test_mask_band(dem):
    def masked(target):
        mask = np.full(target.shape, 255, np.uint8)
        mask[1, 2] = 0
        target.write_mask(mask)

    with rasterio.Env(GDAL_TIFF_INTERNAL_MASK=True):
        ground = dem(after=masked)
    assert np.argwhere(np.isnan(ground.heights)).tolist() == [[1, 2]]


def test_alpha_band(dem):
    alpha = np.full(hills().shape, 65535)
    alpha[4, 6] = 0
    ground = dem(np.stack([np.rint(hills()), alpha]).astype(np.uint16), alpha="yes")
    assert np.argwhere(np.isnan(ground.heights)).tolist() == [[4, 6]]


def test_other_formats(tmp_path):
    path = tmp_path / "dem.asc"
    rows = "\n".join(" ".join(f"{v:.2f}" for v in row) for row in hills(6, 7))
    path.write_text(f"ncols 7\nnrows 6\nxllcorner 0\nyllcorner 0\ncellsize 30\n{rows}\n")
    with pytest.raises(InputError, match="no CRS"):
        read_elevation(path)
    (tmp_path / "dem.prj").write_text(rasterio.CRS.from_epsg(32632).to_wkt())
    assert read_elevation(str(path)).shape == (6, 7)


def test_read_strip_by_strip(dem, monkeypatch):
    monkeypatch.setattr(rasters, "STRIP_CELLS", 150)
    np.testing.assert_array_equal(dem().heights, hills().astype(np.float32))


def test_few_infinities_are_void_with_a_warning(dem):
    values = hills()
    values[2, 3], values[9, 9] = np.inf, -np.inf
    ground = dem(values)
    assert np.isnan(ground.heights).sum() == 2
    assert "2 cells with an infinite height" in ground.warnings[0]


@pytest.mark.parametrize(
    ("cell", "values", "stepped"),
    [
        (10, np.rint(hills()), True),
        (10, np.rint(hills()).astype(np.int16), True),
        (10, hills(), False),
        (50, np.rint(hills()), False),
    ],
)
def test_whole_metres(dem, cell, values, stepped):
    transform = Affine(cell, 0, 4e5, 0, -cell, 5.15e6)
    assert any("whole metres" in w for w in dem(values, transform=transform).warnings) == stepped


def test_whole_metres_in_degrees(dem):
    fine = Affine(1 / 3600, 0, 8, 0, -1 / 3600, 46.5)
    coarse = Affine(1 / 1200, 0, 8, 0, -1 / 1200, 46.5)
    values = np.rint(hills())
    assert any("whole" in w for w in dem(values, crs="EPSG:4326", transform=fine).warnings)
    assert dem(values, crs="EPSG:4326", transform=coarse).warnings == ()


# Voids


def plane():
    y, x = np.mgrid[0:30, 0:40].astype(float)
    return 500 + 3 * x - 2 * y


def test_small_voids_are_filled_and_marked(dem):
    values = plane()
    hole = np.zeros(values.shape, bool)
    hole[5:8, 5:8] = True
    big = np.zeros(values.shape, bool)
    big[15:25, 20:30] = True
    ground = dem(np.where(hole | big, np.nan, values), fill_voids=9)
    np.testing.assert_array_equal(ground.filled, hole)
    np.testing.assert_array_equal(np.isnan(ground.heights), big)
    # A plane's value is the mean of its neighbours', so the fill gives the plane.
    np.testing.assert_allclose(ground.heights[hole], values[hole], atol=1e-3)


def test_cells_that_touch_at_corners_are_one_void(dem):
    values = plane()
    values[[10, 11, 12], [10, 11, 12]] = np.nan
    assert dem(values, fill_voids=2).filled is None
    assert dem(values, fill_voids=3).filled.sum() == 3


def test_void_in_the_corner(dem):
    values = plane()
    values[0, 0] = np.nan
    ground = dem(values, fill_voids=1)
    assert ground.heights[0, 0] == pytest.approx((values[0, 1] + values[1, 0]) / 2)


def test_nothing_to_fill(dem):
    assert dem(fill_voids=100).filled is None


def test_negative_void_size(dem):
    for wrong in (-1, 2**31, 10**20, 1.5, "many"):
        with pytest.raises(SettingError, match="whole number of cells from 0"):
            dem(fill_voids=wrong)


# Refusals


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"crs": None}, "no CRS"),
        ({"crs": 'LOCAL_CS["site",UNIT["metre",1]]'}, "neither projected nor geographic"),
        ({"crs": "EPSG:4978"}, "neither projected nor geographic"),
        ({"values": np.stack([hills(), hills()])}, "2 bands"),
        ({"values": hills().astype(np.complex64)}, "complex"),
        ({"values": hills()[:1]}, "1 row and"),
        ({"values": hills()[:, :1]}, "1 column:"),
        ({"values": np.full((9, 9), -9999.0), "nodata": -9999.0}, "every cell is void"),
        ({"values": np.full((9, 9), np.nan)}, "every cell is void"),
        ({"values": np.full((9, 9), np.inf)}, "every cell is infinite or void"),
        ({"values": hills() - 32767}, "no data"),
        ({"values": hills() * 20}, "--vertical-unit"),
        ({"values": hills() * 1e30}, "beyond any ground"),
        ({"values": hills() * 100, "unit": "ft"}, r"foot \(\d+\.\d m\)"),
        ({"unit": "furlong"}, "--vertical-unit"),
        ({"transform": Affine(0, 0, 4e5, 0, 0, 5e6)}, "no area"),
        ({"transform": Affine(50, 50, 4e5, 50, 50, 5e6)}, "no area"),
        ({"transform": Affine(np.nan, 0, 4e5, 0, -50, 5e6)}, "no area"),
        ({"transform": Affine(1e-4, 0, 8.1, 0, -1e-4, 46.2)}, "assign the real CRS"),
    ],
)
def test_refusals_name_the_file(dem, tmp_path, given, words):
    with pytest.raises(InputError, match=words) as caught:
        dem(**given)
    assert str(caught.value).startswith(str(tmp_path / "dem.tif"))
    assert "\n" not in str(caught.value)


def test_picture_with_a_colour_table(dem):
    def coloured(target):
        target.write_colormap(1, {0: (0, 0, 0, 255), 1: (255, 0, 0, 255)})

    with pytest.raises(InputError, match="colour table"):
        dem(np.ones((9, 9), np.uint8), after=coloured)


def test_no_georeference(tmp_path):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        path = write_raster(tmp_path / "dem.tif", transform=Affine.identity())
    with pytest.raises(InputError, match="where its cells lie"):
        read_elevation(path)


def test_truncated(tmp_path):
    path = write_raster(tmp_path / "dem.tif", hills(300, 300), compress="deflate")
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    with pytest.raises(InputError, match=r"dem.tif: .*(cut short|cannot be opened)"):
        read_elevation(path)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda path: None, "no such file"),
        (lambda path: path.mkdir(), "is a folder"),
        (lambda path: path.touch(), "empty"),
        (lambda path: path.write_text("x,y,z\n1,2,3\n"), "cannot be opened as a raster"),
    ],
)
def test_no_raster_at_all(tmp_path, make, words):
    path = tmp_path / "dem.tif"
    make(path)
    with pytest.raises(InputError, match=words):
        read_elevation(path)


def test_no_permission(tmp_path, monkeypatch):
    (tmp_path / "dem.tif").write_text("secret")
    monkeypatch.setattr("os.access", lambda path, mode: False)
    with pytest.raises(InputError, match="may not be read"):
        read_elevation(tmp_path / "dem.tif")
