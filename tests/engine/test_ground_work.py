"""One block of ground: padding, latitudes, steps along rays, strips and horizons."""

import numpy as np
import pytest
from pyproj import CRS

import terrasol
from terrasol.engine.ground_work import BlockGround, Ground
from terrasol.engine.plan import Block, blocks_of
from terrasol.ground.frame import Frame, make_frame
from terrasol.ground.horizon import (
    BLOCK,
    FAR_FROM,
    NEAR_STEPS,
    NODE_STEP,
    PAD,
    FarHorizon,
    azimuth_directions,
    half_curve,
    near_steps,
    sweep,
    zone_edges,
)


def utm(heights, cell=40.0):
    """Ground in UTM zone 32, three degrees east of its meridian: north is turned by 2.4."""
    return terrasol.Elevation.from_array(
        heights, (cell, 0, 7.5e5, 0, -cell, 5.1e6), CRS("EPSG:32632")
    )


def waves(shape):
    """Smooth mountains [m]."""
    row, column = np.mgrid[: shape[0], : shape[1]]
    first = 250.0 * np.sin(row / 37.0 + 0.3) * np.cos(column / 51.0)
    return 800.0 + first + 120.0 * np.sin((row + 2 * column) / 60.0)


def swept(elevation, azimuths=8, refraction=0.13):
    """Ground with its far horizon."""
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    far = FarHorizon.empty(elevation, azimuths)
    for a in range(azimuths):
        sweep(elevation, frame, a, refraction, far)
    return Ground(elevation, frame, far, refraction)


@pytest.fixture(scope="module")
def ground():
    """Two by three blocks."""
    z = waves((300, 520))
    z[40:50, 250:262] = np.nan
    return swept(utm(z))


def test_block_holds_its_cells_and_their_surroundings(ground):
    z = ground.elevation.heights
    for b in blocks_of(z.shape):
        piece = BlockGround(ground, b)
        inner = piece.padded[PAD:-PAD, PAD:-PAD] + piece.datum
        np.testing.assert_allclose(
            inner, z[b.row : b.row + b.rows, b.column : b.column + b.columns], atol=1e-3
        )
        beyond = np.pad(z, PAD, constant_values=np.nan)
        window = np.s_[b.row : b.row + b.rows + 2 * PAD, b.column : b.column + b.columns + 2 * PAD]
        known = np.isfinite(beyond[window])
        np.testing.assert_allclose(
            (piece.padded + piece.datum)[known], beyond[window][known], atol=1e-3
        )
        # the raster's rim may be continued by a cell, not more
        assert np.isnan(piece.padded[0]).all() == (b.row == 0)
        assert np.isnan(piece.padded[:, -1]).all() == (b.column + b.columns + PAD > z.shape[1])
        assert np.isfinite(piece.normal[0]).sum() == np.isfinite(inner).sum()


def test_an_empty_block_stays_empty():
    z = waves((40, 300))
    z[:, BLOCK:] = np.nan
    ground = swept(utm(z))
    piece = BlockGround(ground, Block(0, BLOCK, 40, 44))
    assert piece.empty
    assert np.isnan(piece.normal).all()
    assert not BlockGround(ground, Block(0, 0, 40, BLOCK)).empty


def test_latitude_of_a_block_is_that_of_its_cells(ground):
    frame = ground.frame
    b = Block(BLOCK, BLOCK, 44, BLOCK)
    piece = BlockGround(ground, b)
    for rows in (range(0, 44), range(20, 30), range(3, 44, 5)):
        first, by_row, by_column = piece.latitude(rows)
        for i, row in enumerate(rows):
            for column in (0, 255):
                want = frame.latitude_at(b.row + row, b.column + column)
                assert first + i * by_row + column * by_column == pytest.approx(want, abs=5e-5)
    # 40 m south of here is 0.00036 degrees
    assert piece.latitude(range(0, 44))[1] == pytest.approx(-40.0 / 111_100.0, rel=0.01)
    middle = frame.latitude_at(*piece.middle)
    first, by_row, by_column = piece.latitude(range(0, 44))
    assert first + 21.5 * by_row + 127.5 * by_column == pytest.approx(middle, abs=5e-5)


def test_strips_cover_a_block_and_single_rows_are_the_same(ground):
    piece = BlockGround(ground, Block(BLOCK, 0, 44, BLOCK))
    horizon, rows = [], []
    for piece_rows in piece.pieces():
        strip = piece.strip(piece_rows)
        rows += list(piece_rows)
        horizon.append(strip.horizon.copy())
        place = np.s_[piece_rows[0] : piece_rows[-1] + 1]
        np.testing.assert_array_equal(strip.normal, piece.normal[:, place])
        np.testing.assert_array_equal(strip.heights, piece.padded[PAD:-PAD, PAD:-PAD][place])
    assert rows == list(range(44))
    whole = np.concatenate(horizon, axis=1)
    assert whole.max() > 0.1
    for some in (range(3, 44, 8), range(0, 44, 5), range(17, 18)):
        strip = piece.strip(some)
        np.testing.assert_array_equal(strip.horizon, whole[:, some])
        np.testing.assert_array_equal(strip.normal, piece.normal[:, some])
        assert strip.latitude == piece.latitude(some)


def made_frame(jacobian, shape=(100, 100)):
    """A frame of one Jacobian everywhere."""
    ends = np.array([0.0, 99.0])
    everywhere = np.broadcast_to(jacobian, (2, 2, 2, 2))
    return Frame(ends, ends, everywhere, np.full((2, 2), 46.0), np.full((2, 2), 9.0), shape)


JACOBIANS = {
    "north-up": [[20.0, 0.0], [0.0, -20.0]],
    "turned": [[20.0 * np.cos(0.5), 20.0 * np.sin(0.5)], [20.0 * np.sin(0.5), -20.0 * np.cos(0.5)]],
    "south-up, one to two": [[10.0, 0.0], [0.0, 20.0]],
    "sheared": [[30.0, 8.0], [4.0, -25.0]],
    "transposed": [[0.0, 15.0], [-15.0, 0.0]],
}


@pytest.mark.parametrize("grid", JACOBIANS)
def test_near_steps_follow_the_true_azimuth(grid):
    jacobian = np.array(JACOBIANS[grid])
    shift, weight = near_steps(made_frame(jacobian), 50.0, 50.0, 16, 0.13)
    assert shift.shape == (16, NEAR_STEPS, 4)
    assert NEAR_STEPS % 4 == 0
    assert NEAR_STEPS >= FAR_FROM + NODE_STEP
    assert np.abs(shift).max() < PAD
    one, other, inverse, drop = np.moveaxis(weight.astype(np.float64), -1, 0)
    distance = 1.0 / inverse
    np.testing.assert_allclose((one + other) * distance, 1.0, rtol=1e-6)
    np.testing.assert_allclose(drop, distance * half_curve(0.13), rtol=1e-6)
    # the mixed position of the two cells is the point on the ray at that distance
    row = (one * shift[..., 0] + other * shift[..., 2]) * distance
    column = (one * shift[..., 1] + other * shift[..., 3]) * distance
    east, north = jacobian @ np.stack([column, row]).reshape(2, -1)
    turn = np.radians(22.5 * np.arange(16))[:, None]
    np.testing.assert_allclose(east, (distance * np.sin(turn)).ravel(), atol=2e-3)
    np.testing.assert_allclose(north, (distance * np.cos(turn)).ravel(), atol=2e-3)
    # each step reaches the next row or column of cells
    reach = np.maximum(np.abs(row), np.abs(column))
    np.testing.assert_allclose(reach, np.broadcast_to(np.arange(1, NEAR_STEPS + 1), reach.shape),
                               rtol=1e-5)  # fmt: skip


def test_directions_run_clockwise_from_north():
    east, north = azimuth_directions(8).T
    np.testing.assert_allclose(east, [0, 0.5**0.5, 1, 0.5**0.5, 0, -(0.5**0.5), -1, -(0.5**0.5)],
                               atol=1e-7)  # fmt: skip
    np.testing.assert_allclose(north, [1, 0.5**0.5, 0, -(0.5**0.5), -1, -(0.5**0.5), 0, 0.5**0.5],
                               atol=1e-7)  # fmt: skip


def test_nodes_of_blocks_reach_one_beyond():
    far = FarHorizon.empty(utm(waves((300, 520))), 8)
    assert far.height.shape == (8, 299 // NODE_STEP + 2, 519 // NODE_STEP + 2)
    rows, columns = far.block(BLOCK, 2 * BLOCK, (44, 8))
    assert rows == slice(BLOCK // NODE_STEP, 299 // NODE_STEP + 2)
    assert columns == slice(2 * BLOCK // NODE_STEP, 519 // NODE_STEP + 2)


def test_zones_are_cut_where_the_grid_turns():
    small = make_frame((300, 520), (40, 0, 7.5e5, 0, -40, 5.1e6), CRS("EPSG:32632"))
    assert zone_edges(small) == ([0, 300], [0, 520])
    # a degree grid from 40 to 65 degrees north: cells there are half as wide as in the south
    wide = make_frame((2500, 600), (0.01, 0, 5.0, 0, -0.01, 65.0), CRS("EPSG:4326"))
    rows, columns = zone_edges(wide)
    assert rows[0] == columns[0] == 0
    assert (rows[-1], columns[-1]) == (2500, 600)
    assert len(rows) > 5
    assert all(edge % BLOCK == 0 for edge in rows[:-1] + columns[:-1])
    assert rows == sorted(set(rows))


def test_a_grid_of_many_zones_has_its_own_distances_in_each():
    # In degrees, from 61 to 66 north, a cell's width shrinks by a sixth. A wall along the
    # western rim, 1500 m high, seen from 50 cells east of it; the raster is a narrow strip.
    z = np.zeros((1700, 60))
    z[:, 0] = 1500.0
    ground = terrasol.Elevation.from_array(z, (0.003, 0, 10.0, 0, -0.003, 66.0), "EPSG:4326")
    found = terrasol.terrain(ground, azimuths=8, horizon=True)
    rows = np.array([5, 250, 400, 800, 1300, 1690])
    seen = np.tan(np.radians(found["horizon"].sel(azimuth=270.0).values[rows, 50]))
    latitude = np.radians(66.0 - 0.003 * (rows + 0.5))
    # length of a degree of longitude on the ellipsoid: a cos f / sqrt(1 - e^2 sin^2 f)
    radius = 6_378_137.0 * np.cos(latitude) / np.sqrt(1.0 - 0.00669438 * np.sin(latitude) ** 2)
    distance = np.radians(50 * 0.003) * radius
    want = 1500.0 / distance - distance * half_curve(0.13)
    # a zone is a block at least: half of 256 rows is 0.38 degrees, there up to 1.5 % of width
    np.testing.assert_allclose(seen, want, rtol=0.017)


def test_azimuths_may_be_swept_in_any_order(ground):
    other = FarHorizon.empty(ground.elevation, 8)
    for a in (5, 2, 7, 0, 1, 6, 4, 3):
        sweep(ground.elevation, ground.frame, a, 0.13, other)
    for name in ("height", "away", "across_void"):
        np.testing.assert_array_equal(getattr(other, name), getattr(ground.far, name))


@pytest.mark.parametrize("size", [60, 61, 62, 63])
@pytest.mark.parametrize("facing", [0.0, 90.0, 180.0, 270.0])
def test_no_horizon_looking_down_and_out_of_the_raster(metric_ground, size, facing):
    # A slope of 30 degrees: down and level azimuths have nothing in view, up to the last cell,
    # however many cells there are. Latitude 0, where north is north all over.
    north, east = np.mgrid[size - 1 : -1 : -1, :size] * 10.0
    down = east * np.sin(np.radians(facing)) + north * np.cos(np.radians(facing))
    z = 2000.0 - np.tan(np.radians(30.0)) * down
    found = terrasol.terrain(metric_ground(z, 10.0, latitude=0.0), azimuths=16, horizon=True)
    away = np.cos(np.radians(found["azimuth"].values - facing)) > -0.01
    assert found["horizon"].values[away].max() < 0.01
    # (1 + cos S) / 2: geometry, the slope's own plane alone hides the sky
    np.testing.assert_allclose(found["sky_view"].values, (1.0 + 0.75**0.5) / 2.0, atol=1e-4)


@pytest.mark.parametrize("turns", [0, 1, 2, 3])
@pytest.mark.parametrize("east", [500.0, -900.0])
def test_a_ray_along_the_rim_sees_what_stands_on_it(turns, east):
    # Beside the meridian of its projection, true north is turned by some thousandths of a
    # degree: rays along the rim pass the outer cells' centres by some 10,000ths of a cell.
    z = np.zeros((41, 41))
    z[:, 40] = 100.0
    crs = "+proj=tmerc +lat_0=46 +lon_0=9 +k=1 +datum=WGS84 +units=m"
    ground = terrasol.Elevation.from_array(np.rot90(z, turns), (10, 0, east, 0, -10, 200.0), crs)
    found = terrasol.terrain(ground, azimuths=8, horizon=True)
    towards = found["horizon"].sel(azimuth=(90.0 - 90.0 * turns) % 360.0).values
    seen = np.tan(np.radians(np.rot90(towards, -turns)))
    want = 100.0 / (10.0 * (40.0 - np.arange(40)))
    np.testing.assert_allclose(seen[:, :40], np.broadcast_to(want, (41, 40)), rtol=3e-3)


@pytest.mark.parametrize("shape", [(67, 125), (79, 113), (113, 79), (125, 67), (83, 97)])
@pytest.mark.parametrize("facing", [45.0, 135.0, 178.0, 225.0, 315.0])
def test_no_horizon_looking_down_and_out_of_a_corner(metric_ground, shape, facing):
    # diagonal lines leave the raster at its corners, the last of them alone in their group
    north, east = np.mgrid[shape[0] - 1 : -1 : -1, : shape[1]] * 10.0
    down = east * np.sin(np.radians(facing)) + north * np.cos(np.radians(facing))
    z = 3000.0 - np.tan(np.radians(30.0)) * down
    found = terrasol.terrain(metric_ground(z, 10.0, latitude=0.0), azimuths=8, horizon=True)
    away = np.cos(np.radians(found["azimuth"].values - facing)) > 0.02
    assert found["horizon"].values[away].max() < 0.01


@pytest.mark.parametrize("coast", [100, 101, 102, 103])
@pytest.mark.parametrize("seaward", [90.0, 180.0, 270.0])
def test_a_void_sea_hides_no_sun(metric_ground, coast, seaward):
    # mountains of 1500 m, then low level land up to the coast, then void: the mean height lies
    # far above the beach, and must not be taken for the height of the sea
    column = np.arange(130)
    z = np.where(column < 60, 1500.0 - 25.0 * column, 5.0) + np.zeros((130, 1))
    z[:, coast:] = np.nan
    z = {90.0: z, 180.0: z.T, 270.0: z[:, ::-1]}[seaward]
    found = terrasol.terrain(metric_ground(z, 20.0, latitude=0.0), azimuths=16, horizon=True)
    away = np.cos(np.radians(found["azimuth"].values - seaward)) > -0.01
    assert away.sum() == 9  # over the sea and along the coast
    beach = np.zeros((130, 130), bool)
    beach[:, coast - 16 : coast] = True
    beach = {90.0: beach, 180.0: beach.T, 270.0: beach[:, ::-1]}[seaward]
    assert found["horizon"].values[away][:, beach].max() < 0.01


@pytest.mark.parametrize("shore", [60, 61, 62, 63])
@pytest.mark.parametrize("turns", [0, 1, 2, 3])
def test_a_ridge_across_a_void_is_seen_from_its_very_shore(metric_ground, shore, turns):
    z = np.full((130, 130), 5.0)
    z[:20] = 300.0
    z[30:shore] = np.nan
    found = terrasol.terrain(
        metric_ground(np.rot90(z, turns), 20.0, latitude=0.0), azimuths=16, horizon=True
    )
    towards = found["horizon"].sel(azimuth=(-90.0 * turns) % 360.0).values
    seen = np.rot90(towards, -turns)[shore : shore + 20]
    distance = 20.0 * (np.arange(shore, shore + 20) - 19.0)
    want = np.broadcast_to((295.0 / distance - distance * half_curve(0.13))[:, None], seen.shape)
    np.testing.assert_allclose(np.tan(np.radians(seen)), want, rtol=2e-3)


@pytest.mark.parametrize("coast", [100, 101, 102, 103])
@pytest.mark.parametrize("turns", [0, 1, 2, 3])
def test_a_void_beside_takes_no_ridge_away(metric_ground, coast, turns):
    # level land with a ridge across its end, and a void along its side: right beside the void
    # the ridge is seen as anywhere else
    z = np.full((130, 130), 5.0)
    z[:20] = 300.0
    z[:, coast:] = np.nan
    found = terrasol.terrain(
        metric_ground(np.rot90(z, turns), 20.0, latitude=0.0), azimuths=16, horizon=True
    )
    towards = found["horizon"].sel(azimuth=(-90.0 * turns) % 360.0).values
    seen = np.rot90(towards, -turns)[60:100, :coast]
    distance = 20.0 * (np.arange(60, 100) - 19.0)
    want = np.broadcast_to((295.0 / distance - distance * half_curve(0.13))[:, None], seen.shape)
    np.testing.assert_allclose(np.tan(np.radians(seen)), want, rtol=2e-3)


@pytest.mark.parametrize("refraction", [0.0, 0.13, 0.9])
def test_refraction_lifts_a_far_ridge(metric_ground, refraction):
    z = np.zeros((6, 402))
    z[:, 400:] = 300.0
    found = terrasol.terrain(
        metric_ground(z, 60.0, latitude=0.0), azimuths=8, horizon=True, refraction=refraction
    )
    seen = np.tan(np.radians(found["horizon"].sel(azimuth=90.0).values[3, 0]))
    # tan h = H / D - D (1 - k) / (2 R), R = 6371 km: geometry of a sphere
    want = 300.0 / 24_000.0 - 24_000.0 * (1.0 - refraction) / (2.0 * 6_371_000.0)
    assert seen == pytest.approx(want, rel=3e-4)


def test_half_curve_is_that_of_the_surveyors():
    # d^2 / 2R with R 6371 km: 7.848 m at 10 km; 6.828 m with k = 0.13; 170.70 m at 50 km
    assert half_curve(0.0) * 1e8 == pytest.approx(7.848, abs=5e-4)
    assert half_curve(0.13) * 1e8 == pytest.approx(6.828, abs=5e-4)
    assert half_curve(0.13) * 25e8 == pytest.approx(170.70, abs=5e-3)
