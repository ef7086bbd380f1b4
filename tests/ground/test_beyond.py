"""Far ridges from a larger model: as if the raster had never been cut out."""

import dataclasses

import numpy as np
import pytest
from pyproj import Geod, Transformer
from reference import made_range

import terrasol
from terrasol.engine.datasets import ArraySink, run_in_memory
from terrasol.engine.job import plan_terrain
from terrasol.ground.beyond import MARGIN_MOST, Scene, far_ground, joined, make_scene
from terrasol.ground.frame import make_frame
from terrasol.ground.horizon import PAD, FarHorizon, Obstacles, sweep
from terrasol.ground.places import WGS84, Locator, PlaceMap, heights_at, opened_opposite

AZIMUTHS = 32
HALF = 36e3
DEGREES = 1.0 / 900.0
FARS = {
    "UTM, as fine": lambda: made_range.square(HALF, 60.0),
    "UTM, twice as coarse": lambda: made_range.square(HALF, 120.0),
    "degrees": lambda: made_range.on_grid(
        "EPSG:4326", (DEGREES, 0, 9.8, 0, -DEGREES, 46.42), (720, 1000)
    ),
    "another zone, south-up": lambda: made_range.on_grid(
        "EPSG:32633", (100, 0, 91e3, 0, 100, 5.055e6), (950, 950)
    ),
}


def frame_of(elevation):
    return make_frame(elevation.shape, elevation.transform, elevation.crs)


def horizon_of(elevation, scene=None, azimuths=AZIMUTHS):
    plan = plan_terrain(elevation, azimuths, horizon=True, scene=scene or Scene())
    return run_in_memory(plan, 2).horizon.values


def surrounded(elevation, far):
    return make_scene(elevation, frame_of(elevation), far=far_ground(elevation, far))


def some_cells(shape, count=120):
    """Cells anywhere, a third of them near the rim."""
    dice = np.random.default_rng(1)
    rows, columns = (dice.integers(0, size, count) for size in shape)
    columns[: count // 3] = dice.choice([0, 1, 3, shape[1] - 2, shape[1] - 1], count // 3)
    return rows, columns


@pytest.fixture(scope="module")
def small():
    return made_range.square(6e3, 60.0)


@pytest.fixture(scope="module")
def large():
    return made_range.square(HALF, 60.0)


@pytest.fixture(scope="module")
def truth(small):
    rows, columns = some_cells(small.shape)
    azimuths = np.arange(AZIMUTHS) * 360.0 / AZIMUTHS
    return made_range.horizons(*made_range.places(small, rows, columns), azimuths, HALF)


@pytest.fixture(scope="module")
def uncut(small, large):
    """Horizons of the cut-out's cells in the large raster, and in the cut-out alone."""
    return horizon_of(large)[:, 500:700, 500:700], horizon_of(small)


def rms(values):
    return float(np.sqrt(np.mean(np.square(values))))


@pytest.mark.heavy
@pytest.mark.parametrize("which", FARS)
def test_a_cut_out_sees_the_range_it_was_cut_from(small, uncut, truth, which):
    rows, columns = some_cells(small.shape)
    whole, alone = (horizon[:, rows, columns] for horizon in uncut)
    got = horizon_of(small, surrounded(small, FARS[which]()))[:, rows, columns]
    assert rms(alone - truth) > 3.0  # without the larger model whole ridges are missing
    # As near to the formula as one large fine raster is; its own error is that of the lattice
    # of nodes. The rest is what coarser cells cut off ridges: up to cell^2 / 8 of curvature.
    assert rms(whole - truth) == pytest.approx(0.0275, abs=0.005)
    assert rms(got - truth) < 1.05 * rms(whole - truth)
    assert abs(np.mean(got - truth)) < 0.01
    assert np.abs(got - truth).max() < 1.1 * np.abs(whole - truth).max()


@pytest.mark.heavy
def test_a_raster_in_degrees_sees_a_range_in_utm():
    fine = made_range.on_grid("EPSG:4326", (1 / 1500, 0, 10.22, 0, -1 / 2000, 46.1), (200, 200))
    rows, columns = some_cells(fine.shape)
    place = made_range.places(fine, rows, columns)
    want = made_range.horizons(*place, np.arange(AZIMUTHS) * 360.0 / AZIMUTHS, HALF)
    got = horizon_of(fine, surrounded(fine, FARS["UTM, twice as coarse"]()))[:, rows, columns]
    assert rms(got - want) < 0.03
    assert np.abs(got - want).max() < 0.35


@pytest.mark.heavy
def test_irradiation_of_a_cut_out_is_that_of_the_whole(small, large):
    settings = {"azimuths": AZIMUTHS, "step_seconds": 600.0, "threads": 2}
    whole = terrasol.irradiation(large, "2025", **settings).irradiation_year.values
    whole = whole[0, 500:700, 500:700]
    alone = terrasol.irradiation(small, "2025", **settings).irradiation_year.values[0]
    far = FARS["degrees"]()
    got = terrasol.irradiation(small, "2025", far=far, **settings).irradiation_year.values[0]
    assert rms(alone - whole) > 0.003 * whole.mean()
    assert rms(got - whole) < 2e-4 * whole.mean()
    assert abs(np.mean(got - whole)) < 1.5e-4 * whole.mean()


def test_an_outlook_on_oneself_changes_no_bit(small):
    frame = frame_of(small)
    runs = []
    for obstacles in (None, Obstacles(small.heights, small.heights.copy(), 0)):
        far = FarHorizon.empty(small, 8)
        for a in range(8):
            sweep(small, frame, a, 0.13, far, obstacles)
        runs.append(far)
    for name in ("height", "away", "across_void"):
        np.testing.assert_array_equal(getattr(runs[0], name), getattr(runs[1], name))
    assert make_scene(small, frame) == Scene()


def lone_peak(latitude, longitude, distance, azimuth, crs, cell, half=9e3):
    """Level ground with one round hill at a distance [m] and azimuth; and the hill's place."""
    geod = Geod(ellps="WGS84")
    peak = geod.fwd(longitude, latitude, azimuth, distance)[:2]
    transformer = Transformer.from_crs("EPSG:4326", crs, always_xy=True)
    corners = transformer.transform([peak[0], longitude], [peak[1], latitude])
    pad = half / (111e3 * np.cos(np.radians(latitude))) if crs == "EPSG:4326" else half
    low, high = np.min(corners, axis=1) - pad, np.max(corners, axis=1) + pad
    columns, rows = np.ceil((high - low) / cell).astype(int)
    x = low[0] + cell * (np.arange(columns) + 0.5)
    y = high[1] - cell * (np.arange(rows) + 0.5)
    lon, lat = transformer.transform(*np.meshgrid(x, y), direction="INVERSE")
    away = geod.inv(np.full(lon.shape, peak[0]), np.full(lon.shape, peak[1]), lon, lat)[2]
    z = 100.0 + 4400.0 * np.exp(-((away / 2500.0) ** 2))
    return terrasol.Elevation.from_array(z, (cell, 0, low[0], 0, -cell, high[1]), crs)


@pytest.mark.parametrize(
    ("crs", "cell"), [("EPSG:4326", 0.004), ("EPSG:32633", 300.0), ("EPSG:3857", 600.0)]
)
@pytest.mark.parametrize("azimuth", [75.0, 201.0])
def test_a_peak_160_km_away_stands_where_the_geodesic_says(crs, cell, azimuth, metric_ground):
    """At 62 degrees north, where a straight line in degrees would miss it by over a degree.

    Geodesics of Karney (2013), doi:10.1007/s00190-012-0578-z; tangent as in the method.
    """
    latitude, longitude, distance = 62.0, 11.0, 160e3
    fine = metric_ground(np.full((60, 60), 100.0), 50.0, latitude, longitude)
    far = lone_peak(latitude, longitude, distance, azimuth, crs, cell)
    azimuths = np.arange(720) * 0.5
    got = horizon_of(fine, surrounded(fine, far), 720)[:, 30, 30]
    tangent = 4400.0 / distance - distance * made_range.HALF_CURVE
    assert np.degrees(np.arctan(tangent)) == pytest.approx(0.95, abs=0.01)
    # what the coarse cells leave of the top, some 40 m, asked every 100 m along the geodesic
    way = np.arange(150e3, 170e3, 100.0)
    lon, lat, _ = Geod(ellps="WGS84").fwd(
        *np.full((way.size, 3), (longitude, latitude, azimuth)).T, way
    )
    seen = heights_at(far, *Locator(WGS84, far)(lon, lat)) - 100.0
    tangent = np.nanmax(seen / way - way * made_range.HALF_CURVE)
    assert got.max() == pytest.approx(np.degrees(np.arctan(tangent)), abs=0.01)
    part = np.abs(azimuths - azimuth) < 5.0
    centre = np.average(azimuths[part], weights=got[part] ** 4)
    assert centre == pytest.approx(azimuth, abs=0.05)
    assert got[~part].max() < 0.01


def test_a_model_round_the_globe_serves_across_the_date_line():
    """Its seam is cut open on the other side of the Earth."""
    z = np.zeros((360, 1440), np.float32)
    z[150:210, :8] = 3000.0  # a plateau that begins at 180 degrees
    far = terrasol.Elevation.from_array(z, (0.25, 0, -180.0, 0, -0.5, 90.0), "EPSG:4326")
    cut = opened_opposite(far, 179.0)
    locate = Locator(far.crs, cut)
    places = locate(np.array([178.125, -178.125]), np.array([0.25, 0.25]))
    assert places[1][1] - places[1][0] == pytest.approx(15.0)
    fine = terrasol.Elevation.from_array(
        np.full((60, 60), 100.0), (90.0, 0, 7.0e5, 0, -90.0, 4.0e4), "EPSG:32660"
    )
    scene = surrounded(fine, far)
    assert scene.far.reach[1] > 9e6
    # its edge is 1.3 degrees of longitude away; cells of 28 km leave the exact place open
    got = horizon_of(fine, scene, 8)[:, 30, 30]
    edge = 2900.0 / 148e3 - 148e3 * made_range.HALF_CURVE
    inside = 2900.0 / 162e3 - 162e3 * made_range.HALF_CURVE
    assert np.degrees(inside) < got[2] < np.degrees(edge) + 0.01
    assert (np.delete(got, [1, 2, 3]) == 0.0).all()


def test_voids_are_seen_through_the_larger_model(small):
    """A basin cut out with void around it sees what the rectangle would."""
    z = small.heights.copy()
    row, column = np.mgrid[: z.shape[0], : z.shape[1]]
    outside = np.hypot(row - 100, column - 100) > 80
    z[outside] = np.nan
    basin = dataclasses.replace(small, heights=z)
    far = FARS["UTM, as fine"]()
    want = horizon_of(small, surrounded(small, far))
    got = horizon_of(basin, surrounded(basin, far))
    assert np.isnan(got[:, outside]).all()
    difference = (got - want)[:, ~outside]
    assert rms(difference) < 0.01
    alone = horizon_of(basin)
    assert rms((alone - want)[:, ~outside]) > 1.0


def run_of(elevation, far):
    sink = ArraySink(elevation.shape)
    plan = plan_terrain(elevation, 8, horizon=True, scene=surrounded(elevation, far))
    return plan.run(sink, 2).numbers["cells_looking_across_void"], sink.arrays["horizon"]


@pytest.mark.parametrize("cells", [2, PAD - 3, PAD + 20])
def test_where_a_larger_model_ends_is_no_void(small, cells):
    """It ends within the margin, or a little beyond; all the ground there is, is known."""
    far = made_range.square(6e3 + cells * 60.0, 60.0)
    count, got = run_of(small, far)
    assert count == 0
    want = horizon_of(far, azimuths=8)[:, cells:-cells, cells:-cells]
    # 0.013 degrees is what two lattices of nodes, set off by those cells, differ by
    assert rms((got - want)[:, 4:-4, 4:-4]) < 0.02


def test_a_void_of_the_larger_model_is_one(small):
    far = FARS["UTM, twice as coarse"]()
    z = far.heights.copy()
    z[298:302, 352:356] = np.nan  # two to six cells beyond the raster's eastern edge
    assert np.isfinite(z[300, 349])
    assert run_of(small, dataclasses.replace(far, heights=z))[0] > 0


def level(height, half, cell, crs=made_range.UTM):
    count = round(2 * half / cell)
    x, y = made_range.MIDDLE
    return terrasol.Elevation.from_array(
        np.full((count, count), height), (cell, 0, x - half, 0, -cell, y + half), crs
    )


def test_a_larger_model_that_is_too_high_builds_no_wall_at_the_joint():
    fine, far = level(500.0, 1500.0, 30.0), level(512.0, 20e3, 90.0)
    scene = surrounded(fine, far)
    got = horizon_of(fine, scene, 8)
    # drawn up over two cells of 90 m: 12 m in 180 m, not 12 m in 30 m
    assert got.max() == pytest.approx(np.degrees(np.arctan(12.0 / 180.0)), abs=0.5)
    assert got[:, 50, 50].max() < np.degrees(np.arctan(12.0 / 1500.0))
    assert scene.warnings == ()


def test_the_joint_is_filled_at_the_raster_s_own_cells(small):
    far = far_ground(small, FARS["UTM, twice as coarse"]())
    heights, margin = joined(small, far, 60.0)
    assert margin == PAD
    assert heights.shape == tuple(size + 2 * margin for size in small.shape)
    np.testing.assert_array_equal(heights[margin:-margin, margin:-margin], small.heights)
    around = made_range.square(6e3 + 60.0 * margin, 60.0)
    np.testing.assert_allclose(heights, around.heights, atol=6.0)
    coarse = far_ground(small, made_range.square(60e3, 2000.0))
    assert joined(small, coarse, 60.0)[1] == min(np.ceil(2 * coarse.cell / 60.0), MARGIN_MOST)


def test_reach_and_doubts_are_told(small):
    x, y = made_range.MIDDLE
    # 30 km beyond in the west, 20 in the east and south, 40 in the north
    far = made_range.on_grid(made_range.UTM, (120, 0, x - 36e3, 0, -120, y + 46e3), (600, 520))
    got = far_ground(small, far)
    assert got.warnings == ()
    assert got.cell == pytest.approx(120.0, rel=1e-3)
    assert got.reach[0] == pytest.approx(20e3, rel=0.01)
    assert got.reach[1] == pytest.approx(np.hypot(30e3, 40e3), rel=0.01)
    half = made_range.on_grid(made_range.UTM, (120, 0, x, 0, -120, y + 40e3), (600, 300))
    told = far_ground(small, half)
    assert told.reach[0] == 0.0
    assert "50 % of the raster's edge" in told.warnings[0]
    feet = dataclasses.replace(far, heights=far.heights / np.float32(0.3048))
    assert "vertical datum and unit" in far_ground(small, feet).warnings[0]
    noted = dataclasses.replace(far, warnings=("metres assumed",))
    assert far_ground(small, noted).warnings == ("far model: metres assumed",)


def test_models_that_cannot_serve_are_refused(small):
    x, y = made_range.MIDDLE
    elsewhere = made_range.on_grid(made_range.UTM, (90, 0, x + 9e4, 0, -90, y), (60, 60))
    for far, words in (
        (elsewhere, "does not overlap"),
        (made_range.square(3e3, 60.0), "nothing beyond"),
        (small, "nothing beyond"),
    ):
        with pytest.raises(terrasol.InputError, match=words):
            far_ground(small, far)


def test_a_lattice_has_no_place_beside_a_seam():
    jumping = PlaceMap.of(
        lambda u, v: (u, np.where(v < 4.5, v, v - 5000.0)), ((0.0, 9.0), (0.0, 9.0)), 1.0
    )
    assert np.isnan(jumping.values[:, :, 4:6]).all()
    assert np.isfinite(np.delete(jumping.values, [4, 5], axis=2)).all()
