"""The overview map: true in metres and to north on any grid, whole, and always the same."""

import io
import subprocess
import sys
import warnings

import matplotlib
import numpy as np
import pytest
from matplotlib.font_manager import FontEntry
from matplotlib.image import imread
from pyproj import Geod, Proj, Transformer
from scipy.ndimage import map_coordinates

from terrasol.cli import irradiation
from terrasol.engine.job import Summary, plan_irradiation
from terrasol.errors import SettingError
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import make_frame
from terrasol.light.settings import LightSettings
from terrasol.show import key, maps, page
from terrasol.show.contours import contour_step, draw_contours, nice_step
from terrasol.show.graticule import degrees_text
from terrasol.show.maps import HEADER, LATITUDES, MARGIN, overview_png
from terrasol.show.page import Page, clip, printable, text_width, wrap
from terrasol.show.picture import make_picture
from terrasol.show.relief import hatch, shade
from terrasol.sky.clear import Air
from terrasol.sky.period import parse_period

FULL_BOX = maps.MAP_BOX
SMALL_BOX = 480, 420
CORNER = MARGIN + LATITUDES, HEADER
MONTHS = {(2025, month): 100.0 * month for month in range(1, 13)}
UTM32 = "EPSG:32632"


@pytest.fixture(autouse=True)
def small_maps(monkeypatch):
    """Maps of a fifth of the pixels are drawn as full ones are, in less time."""
    monkeypatch.setattr(maps, "MAP_BOX", SMALL_BOX)


def hills(rows=90, columns=120):
    y, x = np.mgrid[0:rows, 0:columns].astype(float)
    return 800 + 150 * np.sin(x / 9 + y / 31) * np.cos(y / 11) + 2 * x


def ground(heights=None, transform=(50, 0, 4e5, 0, -50, 5.15e6), crs=UTM32):
    return Elevation.from_array(hills() if heights is None else heights, transform, crs)


def sun_on(elevation):
    """A stand-in for the sun's energy: more where the ground falls away to the front."""
    return (6000 + 20 * np.gradient(elevation.heights, axis=0)).astype(np.float32)


def window(elevation):
    return make_picture(
        elevation, make_frame(elevation.shape, elevation.transform, elevation.crs), maps.MAP_BOX
    )


def draw(elevation, energy=None, **words):
    words = {"title": "Hills", "notes": ["Clear sky."], "monthly_means": MONTHS} | words
    return overview_png(elevation, sun_on(elevation) if energy is None else energy, **words)


def decoded(png):
    return imread(io.BytesIO(png), format="png")[..., :3]


def map_of(png, picture):
    height, width = picture.shape
    return decoded(png)[CORNER[1] : CORNER[1] + height, CORNER[0] : CORNER[0] + width]


# The file


def test_png_signature_and_size(monkeypatch):
    monkeypatch.setattr(maps, "MAP_BOX", FULL_BOX)
    png = draw(ground())
    # PNG specification (ISO/IEC 15948), 5.2 signature and 11.2.2 image header.
    assert png[:8] == b"\x89PNG\r\n\x1a\n"
    width, height = (int.from_bytes(png[k : k + 4], "big") for k in (16, 20))
    assert decoded(png).shape == (height, width, 3)
    assert FULL_BOX[0] < width <= 1800
    assert FULL_BOX[0] * 90 / 120 < height <= 1400
    assert b"terrasol" in png


def test_same_content_gives_same_bytes():
    assert draw(ground()) == draw(ground())


def test_settings_of_the_caller_change_nothing_and_stay():
    plain = draw(ground())
    theirs = {
        "font.size": 30, "text.color": "white", "axes.facecolor": "black", "lines.linewidth": 9,
        "savefig.facecolor": "black", "figure.facecolor": "black", "font.family": "monospace",
        "image.cmap": "gray", "axes.unicode_minus": False, "figure.dpi": 40, "savefig.dpi": 40,
    }  # fmt: skip
    with matplotlib.rc_context(theirs):
        before = dict(matplotlib.rcParams)
        assert draw(ground()) == plain
        assert dict(matplotlib.rcParams) == before


def test_pyplot_stays_out():
    code = "import sys, terrasol.show.maps; sys.exit('matplotlib.pyplot' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


@pytest.mark.parametrize(
    "case", ["plain", "tiny", "constant", "void", "rotated", "names", "strip", "two years"]
)
def test_no_warnings(case):
    elevation, energy, words = ground(), None, {}
    if case == "tiny":
        elevation = ground(np.array([[1.0, 2.0], [3.0, 5.0]]))
    if case == "constant":
        elevation = ground(np.full((40, 50), 300.0))
        energy = np.full((40, 50), 5000, np.float32)
    if case == "void":
        energy = np.full(elevation.shape, np.nan, np.float32)
    if case == "rotated":
        elevation = turned(30.0)
    if case == "names":
        words = {"title": "山 $x_1^ valley\n" + "long " * 99, "notes": ["w" * 200, ""], "unit": "1"}
    if case == "strip":
        elevation = ground(hills()[:2])
    if case == "two years":
        words = {"monthly_means": MONTHS | {(2026, month): 0.0 for month in range(1, 13)}}
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        png = draw(elevation, energy, **words)
    assert [str(warning.message) for warning in caught] == []
    # Every map has the dark rim of its full width.
    image = map_of(png, window(elevation))
    assert image[0].mean() < 0.6


def test_values_on_another_grid_are_refused():
    with pytest.raises(SettingError, match="one grid"):
        draw(ground(), np.zeros((3, 3), np.float32))


# True north


def turned(degrees, east=7e5, north=5.15e6):
    """Hills on a grid whose up direction stands `degrees` clockwise from grid north."""
    c, s = 50 * np.cos(np.radians(degrees)), 50 * np.sin(np.radians(degrees))
    return ground(transform=(c, -s, east, -s, -c, north))


@pytest.mark.parametrize("degrees", [-44.0, -30.0, -2.0, 0.0, 10.0, 30.0, 41.0])
def test_north_of_a_rotated_raster(degrees):
    elevation = turned(degrees)
    a, b, c, d, e, f = elevation.transform
    column, row = elevation.shape[1] / 2, elevation.shape[0] / 2
    projection = Proj(elevation.crs)
    place = projection(a * column + b * row + c, d * column + e * row + f, inverse=True)
    # Grid north stands clockwise from true north by the meridian convergence, which PROJ
    # derives from the projection's own equations (Snyder 1987, USGS Professional Paper 1395).
    convergence = projection.get_factors(*place).meridian_convergence
    assert abs(convergence) > 1.5
    assert window(elevation).up == pytest.approx(degrees + convergence, abs=1e-3)


def test_up_runs_along_the_geodesic_of_its_azimuth():
    picture = window(turned(30.0))
    middle = picture.longitude.shape[0] // 2, picture.longitude.shape[1] // 2
    foot = picture.longitude[middle], picture.latitude[middle]
    head = picture.longitude[0, middle[1]], picture.latitude[0, middle[1]]
    azimuth, _, distance = Geod(ellps="WGS84").inv(*foot, *head)
    assert azimuth == pytest.approx(picture.up, abs=0.02)
    assert distance == pytest.approx(picture.shape[0] / 2 * picture.metres_per_pixel, rel=0.03)


@pytest.mark.parametrize("azimuth", [-40.0, 0.0, 25.0, 90.0])
def test_arrow_points_to_its_azimuth(azimuth):
    page = Page(200, 200)
    key.draw_north(page, 100, 100, azimuth)
    image = decoded(page.png())
    # The arrow ends in a narrow tip, and is filled on its left.
    dark = np.argwhere(image[..., 0] < 0.5)
    dark = dark[np.hypot(*(dark - 100).T) < key.ARROW + 1]
    ahead = np.array([-np.cos(np.radians(azimuth)), np.sin(np.radians(azimuth))])
    aside = np.array([np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))])
    along, across = (dark - 99.5) @ ahead, (dark - 99.5) @ aside
    assert along.max() == pytest.approx(key.ARROW, abs=2.5)
    assert np.abs(across[along > key.ARROW - 5]).max() < 4
    assert across.mean() < -1


def test_map_has_the_arrow_of_its_raster(monkeypatch):
    """Up on paper stands 30 degrees and more right of north: the arrow leans left as much."""
    azimuths = []
    arrow = key.draw_north

    def record(page, x, y, azimuth):
        azimuths.append(azimuth)
        return arrow(page, x, y, azimuth)

    monkeypatch.setattr(key, "draw_north", record)
    elevation = turned(30.0)
    draw(elevation)
    picture = window(elevation)
    # North on paper, from the map itself: where latitude grows fastest.
    down, right = (part.mean() for part in np.gradient(picture.latitude))
    height, width = picture.shape
    north = np.degrees(np.arctan2(right / width, -down / height))
    assert azimuths == [pytest.approx(north, abs=0.1)]
    assert north < -29.0


@pytest.mark.parametrize("flip", ["south-up", "mirrored", "columns north"])
def test_same_ground_on_another_grid_gives_the_same_map(flip):
    plain = ground()
    energy = sun_on(plain)
    rows, columns = plain.shape
    size, _, west, _, _, north = plain.transform
    heights, south, east = plain.heights, north - size * rows, west + size * columns
    if flip == "south-up":
        other = ground(heights[::-1], (size, 0, west, 0, size, south))
        turned_energy = energy[::-1]
    elif flip == "mirrored":
        other = ground(heights[:, ::-1], (-size, 0, east, 0, -size, north))
        turned_energy = energy[:, ::-1]
    else:
        other = ground(heights.T[:, ::-1], (0, size, west, size, 0, south))
        turned_energy = energy.T[:, ::-1]
    one = map_of(draw(plain, energy), window(plain))
    two = map_of(draw(other, np.ascontiguousarray(turned_energy)), window(other))
    assert one.shape == two.shape
    assert np.abs(one - two).max() < 0.08
    assert np.abs(one - two).mean() < 0.001


# True metres


def runs_of_dark(image):
    """Longest run of dark pixels in each row."""
    dark = image.max(axis=-1) < 0.5
    longest = np.zeros(len(dark), int)
    run = longest.copy()
    for column in dark.T:
        run = (run + 1) * column
        longest = np.maximum(longest, run)
    return longest


def far_north(crs):
    """A raster of 300 by 400 cells about 9 E, 60 N, and its longitudes by column."""
    if crs == "degrees":
        return ground(np.zeros((300, 400)), (0.0005, 0, 8.9, 0, -0.00025, 60.0375), "EPSG:4326")
    x, y = Transformer.from_crs("EPSG:4326", "EPSG:3857", always_xy=True).transform(9.0, 60.0)
    return ground(np.zeros((300, 400)), (60, 0, x - 12000, 0, -60, y + 9000), "EPSG:3857")


@pytest.mark.parametrize("crs", ["degrees", "web mercator"])
def test_scale_bar_at_60_degrees_north(crs, monkeypatch):
    monkeypatch.setattr(maps, "MAP_BOX", FULL_BOX)
    elevation = far_north(crs)
    energy = np.zeros(elevation.shape, np.float32)
    posts = np.array([60, 340])
    for post in posts:
        energy[:, post - 3 : post + 4] = 1.0
    png = draw(elevation, energy)
    image, picture = decoded(png), window(elevation)
    # The posts on the paper, along the middle row, by their lightest pixels.
    line = map_of(png, picture)[picture.shape[0] // 2, :, 2]
    light = np.flatnonzero(line > 0.7)
    halves = light[light < line.size / 2], light[light > line.size / 2]
    apart = np.median(halves[1]) - np.median(halves[0])
    # And on the Earth.
    a, _, c, _, e, f = elevation.transform
    inverse = Transformer.from_crs(elevation.crs, "EPSG:4326", always_xy=True)
    longitude, latitude = inverse.transform(a * (posts + 0.5) + c, np.full(2, e * 150.0 + f))
    _, _, metres = Geod(ellps="WGS84").inv(longitude[0], latitude[0], longitude[1], latitude[1])
    # The scale bar is the longest dark line below the map.
    below = CORNER[1] + picture.shape[0] + 20
    bar = runs_of_dark(image[below : below + 110]).max()
    length, _ = key.scale_bar(picture.metres_per_pixel)
    assert length in (1000, 2000, 5000)
    # Bar and posts end on whole pixels: at most half a pixel off at each end.
    assert bar == pytest.approx(length * apart / metres, abs=1.5)


@pytest.mark.parametrize("metres_per_pixel", [0.00013, 0.4, 0.99, 1.0, 7.3, 25.1, 4000.0])
def test_scale_bar_is_round_and_fits(metres_per_pixel):
    length, pixels = key.scale_bar(metres_per_pixel)
    assert f"{length:.6e}"[:8] in ("1.000000", "2.000000", "5.000000")
    assert pixels * metres_per_pixel == pytest.approx(length)
    assert 0.4 * key.SCALE_LONGEST < pixels <= key.SCALE_LONGEST


@pytest.mark.parametrize(
    ("transform", "crs"),
    [
        ((0.002, 0, 179.9, 0, -0.001, -17), "EPSG:4326"),
        ((0.001, 0, 239.92, 0, -0.001, 37), "EPSG:4326"),
        ((43.3, 25.0, 4e5, 25.0, -43.3, 5.15e6), UTM32),
        ((60, 0, -2e6, 0, -60, -1e5), "EPSG:3413"),
        ((100, 0, 6e6, 0, 100, 2e6), "EPSG:2226"),
        ((60, 30, 4e5, 0, -90, 5.15e6), UTM32),
    ],
    ids=["across 180", "0 to 360", "rotated", "polar", "feet, south-up", "sheared"],
)
def test_pixels_lie_where_they_say(transform, crs):
    """A pixel's longitude and latitude, projected anew, fall on its column and row."""
    elevation = ground(transform=transform, crs=crs)
    picture = window(elevation)
    height, width = picture.shape
    nodes = picture.longitude.shape[0] - 1
    forward = Transformer.from_crs("EPSG:4326", elevation.crs, always_xy=True)
    a, b, c, d, e, f = elevation.transform
    worst, count = 0.0, 0
    for i, j in np.ndindex(9, 9):
        row, column = 5 + 14 * i, 5 + 14 * j  # a lattice node, hence a place on the paper
        x, y = forward.transform(picture.longitude[row, column], picture.latitude[row, column])
        if crs == "EPSG:4326":
            x = x % 360.0 if c > 180 or x < 0 else x
        cell = np.linalg.solve([[a, b], [d, e]], [x - c, y - f])
        place = np.array([row * height, column * width]) / nodes - 0.5
        k, m = np.floor(place).astype(int)
        corner = picture.columns[k : k + 2, m : m + 2], picture.rows[k : k + 2, m : m + 2]
        u, v = place - (k, m)
        got = [
            (1 - u) * ((1 - v) * g[0, 0] + v * g[0, 1]) + u * ((1 - v) * g[1, 0] + v * g[1, 1])
            for g in corner
        ]
        if np.all(np.isfinite(got)):
            worst = max(worst, float(np.abs(np.array(got) - cell).max()))
            count += 1
    assert count > 30
    assert worst < 0.05


def test_cells_are_square_metres_on_paper():
    """Cells of 30 by 90 m: the map is as wide as it is high on a raster of 3:1 cells."""
    elevation = ground(np.zeros((50, 150)), (30, 0, 5e5, 0, -90, 5.15e6))
    height, width = window(elevation).shape
    assert width / height == pytest.approx(1.0, abs=0.01)


# Voids, averages, colours


def test_voids_are_hatched_and_named():
    elevation = ground()
    energy = sun_on(elevation)
    whole = draw(elevation, energy)
    energy[30:60, 40:80] = np.nan
    png = draw(elevation, energy)
    picture = window(elevation)
    height, width = picture.shape
    image, pattern = map_of(png, picture), hatch(picture.shape)
    patch = np.s_[int(0.45 * height) : int(0.48 * height), int(0.45 * width) : int(0.48 * width)]
    # Graticule and contour lines may cross: most of the patch is the pattern.
    assert np.median(np.abs(image[patch] - pattern[patch])) < 0.01
    assert np.abs(image[:100, :100] - pattern[:100, :100]).max() > 0.2
    # The legend below the map has an entry more.
    strip = np.s_[CORNER[1] + height + 60 : CORNER[1] + height + 130]
    assert (decoded(png)[strip] < 0.9).sum() > (decoded(whole)[strip] < 0.9).sum() + 500


def test_average_of_blocks_by_hand():
    elevation = ground(np.zeros((4000, 5)), (50, 0, 4e5, 0, -2, 5.15e6))
    picture = window(elevation)
    down, across = picture.coarsening
    assert down > 1
    assert across == 1
    values = np.ones(elevation.shape, np.float32)
    values[:down, 0] = np.arange(down)
    values[0, 0] = np.nan
    values[:down, 1] = np.nan
    averaged = picture.average(values)
    assert averaged.shape == (-(-4000 // down), 5)
    assert averaged[0, 0] == pytest.approx(down / 2)  # mean of 1 .. down - 1
    assert np.isnan(averaged[0, 1])
    assert np.all(averaged[1:] == 1.0)


def test_paper_beside_the_raster_is_no_ground():
    """The corners beside a sheared raster: no value, no void."""
    elevation = ground(transform=(60, 60, 4e5, 0, -60, 5.15e6))
    picture = window(elevation)
    values = picture.cells(picture.average(np.ones(elevation.shape, np.float32)))
    assert 0.2 < picture.ground.mean() < 0.9
    assert np.array_equal(np.isfinite(values), picture.ground)


def test_light_comes_from_the_upper_left():
    y, x = np.mgrid[-20:21, -20:21].astype(np.float32)
    cone = 400 - 10 * np.hypot(x, y)
    light = shade(cone.astype(np.float32), np.array([[20.0, 0.0], [0.0, -20.0]]))
    assert light[10, 10] > 0.55
    assert light[30, 30] < 0.4
    assert light[10, 10] > light[30, 10] > light[30, 30]
    assert np.all(shade(np.full((5, 5), 7, np.float32), np.eye(2)) == 0.5)


def test_colours_grow_lighter_without_a_turn():
    """What makes the map readable in grey and to colour-blind eyes: lightness alone orders it."""
    bright = luminance(key.Scale(0.0, 1.0).colours(np.linspace(0, 1, 256)))
    assert np.all(np.diff(bright) > 0)
    assert bright[-1] > 8 * bright[0]


def luminance(colours):
    """Relative luminance of sRGB, IEC 61966-2-1."""
    c = np.asarray(colours, float)
    linear = np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)
    return linear @ [0.2126, 0.7152, 0.0722]


def lightness(colours):
    """CIE 1976 lightness L* from 0 to 100, ISO/CIE 11664-4; for luminance above 0.0089."""
    return 116 * np.cbrt(luminance(colours)) - 16


@pytest.fixture
def no_lines(monkeypatch):
    """Maps without contours and graticule."""
    monkeypatch.setattr(maps, "contour_step", lambda heights: None)
    monkeypatch.setattr(maps, "draw_graticule", lambda *all: None)


def at_cells(image, picture):
    """Colours in the middle of each cell, shape (rows, columns, 3)."""
    rows, columns = int(np.nanmax(picture.rows)) + 1, int(np.nanmax(picture.columns)) + 1
    colours = np.zeros((rows, columns, 3))
    for cell in np.ndindex(rows, columns):
        away = np.hypot(picture.rows - cell[0] - 0.5, picture.columns - cell[1] - 0.5)
        colours[cell] = image[np.unravel_index(np.nanargmin(away), away.shape)]
    return colours


@pytest.mark.usefixtures("no_lines")
def test_colours_read_off_the_bar():
    """Nearest on the bar to a drawn cell is its value, to 3 per cent of the bar's range."""
    y, x = np.mgrid[0:18, 0:24]
    elevation = ground(400 + 60 * np.sin(x * 1.3) * np.cos(y * 1.1))  # steep in all directions
    energy = np.random.default_rng(4).uniform(2000, 9000, elevation.shape).astype(np.float32)
    picture = window(elevation)
    drawn = at_cells(map_of(draw(elevation, energy), picture), picture)
    scale = key.make_scale(picture.cells(energy))
    bar = scale.colours(np.linspace(scale.low, scale.high, 256)).astype(float)
    read = np.argmin(((drawn[..., None, :] - bar) ** 2).sum(axis=-1), axis=-1) / 255
    true = np.clip((energy - scale.low) / (scale.high - scale.low), 0, 1)
    assert np.abs(read - true).max() < 0.03


@pytest.mark.usefixtures("no_lines")
def test_flanks_of_one_value_look_alike_yet_not_the_same():
    """Opposite flanks of equal energy: less than a tenth of the bar's lightness apart."""
    y, x = np.mgrid[-10:11, -10:11]
    elevation = ground(1000 - 40 * np.hypot(x, y))
    energy = np.full(elevation.shape, 6000, np.float32) + 3000 * np.sign(y) * (abs(y) > 8)
    picture = window(elevation)
    drawn = lightness(at_cells(map_of(draw(elevation, energy), picture), picture))
    bar = lightness(key.Scale(0.0, 1.0).colours(np.array([0.0, 1.0])))
    apart = drawn[2:-2, 2:10] - drawn[2:-2, 18:10:-1]
    assert np.abs(apart).max() < 0.1 * (bar[1] - bar[0])
    across = np.diagonal(drawn)[3:9] - np.diagonal(drawn)[17:11:-1]
    assert across.min() > 0.03 * (bar[1] - bar[0])


@pytest.mark.parametrize("shape", [(2, 3), (2, 40), (9, 12)])
def test_contours_of_a_plane_are_straight_to_the_rim(shape):
    y, x = np.mgrid[0 : shape[0], 0 : shape[1]]
    elevation = ground(300 + 30.0 * y + 20.0 * x)
    picture = window(elevation)
    page = Page(*picture.shape[::-1])
    heights = picture.surface(picture.average(elevation.heights))
    draw_contours(page, heights, 10.0, (0.0, 0.0))
    known = np.argwhere(picture.ground)
    (top, left), (bottom, right) = known.min(axis=0), known.max(axis=0)
    reached = []
    for lines in page.axes.collections:
        for level, path in zip(lines.levels, lines.get_paths(), strict=True):
            across, down = path.vertices.T
            row, column = (
                map_coordinates(cells, [down - 0.5, across - 0.5], order=1, mode="nearest")
                for cells in (picture.rows, picture.columns)
            )
            plane = 300 + 30 * (row - 0.5) + 20 * (column - 0.5)
            pixel = 36 * np.nanmedian(np.abs(np.diff(picture.columns, axis=1)))
            assert np.nanmax(np.abs(plane - level)) < 0.2 * pixel
            reached += [down.min() - top, bottom - down.max(), across.min() - left]
            reached += [right - across.max()]
    assert min(reached) <= 4


def test_scale_of_the_colours():
    values = np.arange(1001, dtype=np.float32)
    scale = key.make_scale(values)
    assert (scale.low, scale.high) == (pytest.approx(5.0), pytest.approx(995.0))
    assert scale.below
    assert scale.above
    constant = key.make_scale(np.full(9, 50, np.float32))
    assert constant.low < 50 < constant.high
    assert not constant.below
    assert key.make_scale(np.full(9, np.nan)) == key.Scale(0.0, 1.0)


# Words and numbers


def test_units_and_numbers_in_print():
    assert key.printed_unit("MJ m-2") == "MJ m⁻²"
    assert key.printed_unit("kW h m-2") == "kW h m⁻²"
    assert key.printed_unit("1") == "1"
    assert key.number(12345.678, 0.05) == "12\N{THIN SPACE}345.68"
    assert key.number(-5.0, 1.0) == "−5"
    assert key.significant(5794.93, 4) == "5\N{THIN SPACE}795"
    assert key.significant(74.83, 3) == "74.8"
    assert key.significant(20.0, 3) == "20"
    assert key.significant(250467.0, 3) == "250\N{THIN SPACE}467"
    assert key.significant(0.0, 3) == "0"


def test_degrees_in_print():
    assert degrees_text(-120.04, 0.02, "EW") == "120.04°W"
    assert degrees_text(46.5, 0.5, "NS") == "46.5°N"
    assert degrees_text(0.0, 0.5, "EW") == "0°"
    assert degrees_text(-180.0, 0.5, "EW") == degrees_text(180.0, 0.01, "EW") == "180°"
    assert degrees_text(-179.5, 0.5, "EW") == "179.5°W"


def test_mean_in_print_is_finer_than_the_axis():
    assert key.mean_text(843.8321, 0.01) == "mean 843.832"
    assert key.mean_text(4729.236, 0.5) == "mean 4 729.24"
    assert key.mean_text(7709.3, 1000.0) == "mean 7 709"
    assert key.mean_text(0.0, 0.2) == "mean 0.000"


@pytest.fixture
def written(monkeypatch):
    """All texts that sheets get."""
    texts = []
    text = Page.text

    def record(page, x, y, words, size, **more):
        texts.append(words)
        text(page, x, y, words, size, **more)

    monkeypatch.setattr(Page, "text", record)
    return texts


@pytest.mark.parametrize("count", [1, 8])
def test_few_months_have_their_names(written, count):
    means = {(2025, month): 100.0 + month for month in range(5, 5 + count)}
    key.draw_months(Page(400, 200), 20, 20, maps.COLUMN, means)
    assert written[0] == "May"
    assert sum(len(text) == 3 and text.isalpha() for text in written) == count
    assert max(text_width(text, key.SMALL) for text in written) < maps.COLUMN / key.FEW_MONTHS


def test_months_without_sun_say_so(written, monkeypatch):
    boxes = []
    monkeypatch.setattr(Page, "box", lambda page, x, y, w, h, **more: boxes.append(h))
    polar = dict(zip(MONTHS, [0.0, 0.4, 90, 400, 700, 820, 760, 500, 200, 40, 0.0, 0.0],
                     strict=True))  # fmt: skip
    key.draw_months(Page(400, 200), 20, 20, maps.COLUMN, polar)
    assert written.count("0") == 3
    assert "820" in written
    assert [tall == 0 for tall in boxes] == [value == 0 for value in polar.values()]
    assert min(tall for tall in boxes if tall > 0) >= 2


def test_points_of_the_colour_bar_are_explained(written):
    elevation = ground()
    draw(elevation)
    assert "The points of the colour bar hold the lowest" in " ".join(written)
    scale = key.make_scale(np.arange(100_001.0))
    assert pytest.approx(100 * scale.low / 100_000) == key.OUTSIDE
    assert f" {key.OUTSIDE:g} % " in key.points_text(scale)
    assert "lower" in key.points_text(key.Scale(0, 1, below=True))
    assert "upper" in key.points_text(key.Scale(0, 1, above=True))
    assert key.points_text(key.Scale(0, 1)) == ""


def test_legend_tells_of_relief_where_there_is_any(written):
    draw(ground())
    assert "relief lightly shaded" in written
    written.clear()
    draw(ground(np.full((40, 50), 300.0)))
    assert "relief lightly shaded" not in written


@pytest.mark.parametrize(
    ("air", "note"),
    [
        (Air.ineichen([2.0, 2.2, 2.5, 2.8, *[3.1] * 8]),
         "Linke turbidity by month 2.2 to 2.8, albedo of the ground 0.15 to 0.6."),
        (Air.bird(0.1, 1.5), "Albedo of the ground 0.15 to 0.6."),
    ],
    ids=["ineichen", "bird"],
)  # fmt: skip
def test_notes_name_turbidity_and_albedo_of_the_period(air, note, monkeypatch):
    told = {}
    monkeypatch.setattr(maps, "overview_png", lambda *all, **words: told.update(words))
    period = parse_period("2025-02-01/2025-04-30")
    albedo = (0.7, 0.6, 0.4, 0.15, *[0.1] * 8)
    elevation = ground()
    plan = plan_irradiation(elevation, LightSettings(period=period, air=air, albedo=albedo))
    irradiation._draw(plan, sun_on(elevation), Summary({}, []), "Hills")
    assert note in told["notes"]


@pytest.mark.parametrize("span", [0.003, 1.0, 4.9, 620.0, 4000.0])
def test_steps_are_one_two_or_five(span):
    step = nice_step(span, 7)
    assert f"{step:e}"[0] in "125"
    assert 2.7 <= span / step <= 7.01


def test_contour_step_leaves_flat_ground_bare():
    assert contour_step(np.full((60, 60), 5.0, np.float32)) is None
    assert contour_step(np.full((60, 60), np.nan, np.float32)) is None
    ramp = np.add.outer(np.zeros(600), np.linspace(0, 900, 600)).astype(np.float32)
    assert contour_step(ramp) == 100.0


def test_text_fits_its_room():
    lines = wrap("a plain sentence of some words, " * 5 + "w" * 200, 16, 150)
    assert len(lines) > 5
    assert max(text_width(line, 16) for line in lines) <= 150
    assert clip("w" * 200, 16, 150).endswith("…")
    assert clip("short", 16, 150) == "short"


@pytest.fixture
def fonts(monkeypatch):
    """Let the machine have the fonts whose names and letters are told, and no others."""

    def have(**letters):
        entries = [FontEntry(fname=name, name=name, style="normal", weight=400) for name in letters]
        own = page._letters_of
        monkeypatch.setattr(page.fontManager, "ttflist", entries)
        monkeypatch.setattr(page, "_letters_of", lambda file: letters.get(file) or own(file))
        page._other.cache_clear()

    yield have
    page._other.cache_clear()


def test_letters_that_no_font_has_are_seen_to_be_missing(fonts):
    fonts()
    assert printable("a山b") == "a□b"
    assert printable("Ａ山") == "A□"  # a wide letter has a plain one


def test_a_font_of_the_machine_serves_letters_that_ours_lacks(fonts):
    fonts(some=frozenset(map(ord, "山 ab")), more=frozenset(map(ord, "山高 abc")))
    assert page._font_file("高山 abc", bold=True) == "more"
    assert printable("高山 abc", bold=True) == "高山 abc"
    assert page._font_file("Größe", bold=False).endswith("DejaVuSans.ttf")


def test_a_font_of_boxes_is_no_font_for_letters(fonts):
    fonts(**{"Last Resort": frozenset(range(0x30000))})
    assert printable("a山b") == "a□b"


def test_given_mean_is_the_one_in_print():
    assert draw(ground()) != draw(ground(), mean=6010.0)
