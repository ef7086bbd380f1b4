"""First and last sun against a ray cast towards the sun itself at every look."""

from pathlib import Path

import numpy as np
import pytest
from pyproj import Geod
from reference.plain_sight import PlainSight

import terrasol
from terrasol.ground.frame import make_frame
from terrasol.ground.sightline import bow_at

AIR = terrasol.Air.ineichen(3.0)
VALLEY = Path(__file__).parents[2] / "sample_dem" / "valley.tif"
CRS, WEST, NORTH, CELL = "EPSG:32632", 620_000.0, 5_160_000.0, 20.0
NAMES = ("first_sun", "last_sun", "sun_hours_days", "sun_interruptions")


def elevation(heights, west=WEST, north=NORTH, cell=CELL):
    return terrasol.Elevation.from_array(heights, (cell, 0, west, 0, -cell, north), CRS)


def off_by(found, sight, days, cells, seconds=20):
    """Errors of first and last sun and of the hours [minutes], and of the interruptions."""
    errors = []
    for k, day in enumerate(days):
        for row, column in cells:
            first, last, hours, gaps = sight.day(day, row, column, seconds)
            got = [float(found[name].values[k, row, column]) for name in NAMES]
            assert np.isnan(got[0]) == np.isnan(got[1]) == np.isnan(first)
            if not np.isnan(first):
                unclear = any(abs(gap - 1.0) < 2.0 * seconds / 60.0 for gap in gaps)
                count = got[3] if unclear else sum(gap >= 1.0 for gap in gaps)
                errors.append(
                    [60.0 * (got[0] - first), 60.0 * (got[1] - last), 60.0 * (got[2] - hours),
                     got[3] - count]
                )  # fmt: skip
    return np.abs(np.array(errors))


def some_cells(count, shape, seed=4):
    dice = np.random.default_rng(seed)
    return list(zip(*(dice.integers(0, size, count) for size in shape), strict=True))


def test_a_piece_of_the_valley_to_the_minute():
    """Sunrise over the level is off by up to 15 s: refraction at heights rounded to 250 m."""
    heights = terrasol.read_elevation(VALLEY).heights[180:300, 220:360]
    days = ["2025-12-21", "2025-04-10"]
    found = terrasol.sun_hours(
        elevation(heights), "2025-04", AIR, days=days, step_seconds=3600.0
    )  # fmt: skip
    sight = PlainSight(heights, WEST, NORTH, CELL, CRS)
    errors = off_by(found, sight, days, some_cells(24, heights.shape))
    assert len(errors) > 30
    assert errors[:, :2].max() < 0.5
    assert errors[:, 2].max() < 1.0
    assert errors[:, 3].max() == 0.0


def test_beside_the_end_of_a_wall_to_the_minute():
    """The far field's nodes smear such an edge over 0.2 radian: hours, if it were trusted."""
    heights = np.full((201, 201), 500.0)
    heights[140:, 60:] = 900.0
    days = ["2025-02-15"]
    found = terrasol.sun_hours(elevation(heights), "2025-02", AIR, days=days, step_seconds=3600.0)
    sight = PlainSight(heights, WEST, NORTH, CELL, CRS)
    cells = [(105, 90), (110, 58), (112, 30), (90, 75), (115, 150)]
    errors = off_by(found, sight, days, cells, seconds=30)
    assert len(errors) == len(cells)
    assert errors[:, :3].max() < 1.0
    assert errors[:, 3].max() == 0.0


@pytest.mark.heavy
def test_between_houses_to_the_minute():
    """Thirty boxes of an invented town; what is left are glimpses shorter than a minute."""
    dice = np.random.default_rng(2)
    heights = np.full((160, 160), 100.0)
    for _ in range(30):
        (row, column), (high, wide) = dice.integers(5, 140, 2), dice.integers(6, 16, 2)
        heights[row : row + high, column : column + wide] = 100.0 + dice.uniform(6.0, 20.0)
    days = ["2025-02-15", "2025-12-21"]
    found = terrasol.sun_hours(
        elevation(heights, cell=1.0), "2025", AIR, days=days, step_seconds=3600.0
    )
    sight = PlainSight(heights, WEST, NORTH, 1.0, CRS)
    errors = off_by(found, sight, days, some_cells(150, heights.shape))
    assert len(errors) > 250
    assert (errors[:, :2] < 1.0).mean(axis=0).min() >= 0.99
    assert (errors[:, 2] < 1.0).mean() >= 0.98


@pytest.mark.heavy
def test_the_sample_valley_to_the_minute():
    """420 cells on four days."""
    heights = terrasol.read_elevation(VALLEY).heights
    days = ["2025-12-21", "2025-02-15", "2025-04-10", "2025-06-21"]
    found = terrasol.sun_hours(elevation(heights), "2025", AIR, days=days, step_seconds=3600.0)
    sight = PlainSight(heights, WEST, NORTH, CELL, CRS)
    errors = off_by(found, sight, days, some_cells(420, heights.shape))
    assert len(errors) > 1400
    assert (errors[:, :2] < 1.0).mean(axis=0).min() >= 0.999
    assert (errors[:, 2] < 2.0).mean() >= 0.998
    assert (errors[:, 3] == 0.0).mean() >= 0.995


def rough(rows, columns, seed=3):
    dice = np.random.default_rng(seed)
    row, column = np.mgrid[:rows, :columns]
    z = 120.0 * np.sin(row / 9.0) * np.cos(column / 11.0) + 50.0 * np.sin((row + column) / 6.0)
    return 900.0 + z + dice.normal(0.0, 2.0, z.shape)


def test_the_number_of_azimuths_hardly_matters():
    """The stored horizon only says which moments need a line of sight."""
    ground = elevation(rough(90, 100))
    asked = {"days": "2025-03-01,2025-10-20,2025-12-21", "step_seconds": 3600.0}
    few, many = (terrasol.sun_hours(ground, "2025-03", AIR, azimuths=n, **asked) for n in (64, 720))
    for name in ("first_sun", "last_sun"):
        error = 60.0 * np.abs(few[name] - many[name]).values
        assert (error[np.isfinite(error)] < 0.1).mean() > 0.999


def test_time_in_the_sun_fits_first_last_and_interruptions():
    data = terrasol.sun_hours(
        elevation(rough(80, 80)), "2025-02", AIR, days="2025-02-10,2025-12-21", step_seconds=3600.0
    )  # fmt: skip
    first, last, hours, gaps = (data[name].values for name in NAMES)
    lit = np.isfinite(first)
    assert 0.5 < lit.mean() < 1.0
    assert (hours[lit] <= (last - first)[lit] + 1e-4).all()
    assert (hours[lit] + gaps[lit] / 60.0 <= (last - first)[lit] + 1e-4).all()
    assert (gaps[lit] > 0).any()
    assert (hours[~lit] == 0.0).all()


def test_what_stands_on_the_ground_hides_and_one_looks_from_below():
    """A wood of 25 m beside level ground: from under it too one sees what stands around."""
    ground = np.full((60, 60), 500.0)
    surface = ground.copy()
    surface[20:50, 30:45] += 25.0 + np.random.default_rng(1).normal(0.0, 3.0, (30, 15))
    days = ["2025-03-21", "2025-06-21"]
    found = terrasol.sun_hours(
        elevation(ground), "2025-03", AIR, days=days, surface=elevation(surface),
        step_seconds=3600.0,
    )  # fmt: skip
    sight = PlainSight(ground, WEST, NORTH, CELL, CRS, surface)
    cells = [(35, 28), (30, 36), (16, 40), (52, 33), (40, 46), (10, 10), (35, 33)]
    errors = off_by(found, sight, days, cells)
    assert len(errors) == 12  # in the wood the sun of March stays hidden in two places
    assert errors[:, :2].max() < 0.5


@pytest.mark.heavy
def test_a_larger_model_counts_beyond_the_edge():
    """Cut out of a larger raster that is then given as the larger model: the same sun."""
    row, column = np.mgrid[:240, :240]
    whole = 600.0 + 900.0 * np.exp(-(((row - 215.0) / 20.0) ** 2)) * (1.2 + np.sin(column / 25.0))
    whole += 40.0 * np.sin(row / 8.0) * np.cos(column / 9.0)
    inner = elevation(whole[60:140, 80:160], WEST + 80 * CELL, NORTH - 60 * CELL)
    asked = {"days": "2025-01-10", "step_seconds": 3600.0}
    want = terrasol.sun_hours(elevation(whole), "2025-01", AIR, **asked)
    found = terrasol.sun_hours(inner, "2025-01", AIR, far=elevation(whole), **asked)
    alone = terrasol.sun_hours(inner, "2025-01", AIR, **asked)
    for name in ("first_sun", "last_sun"):
        there = want[name].values[:, 60:140, 80:160]
        error = 60.0 * np.abs(found[name].values - there)[np.isfinite(there)]
        assert np.quantile(error, 0.9) < 1.0
        assert np.nanquantile(60.0 * np.abs(alone[name].values - there), 0.9) > 5.0


@pytest.mark.parametrize("latitude", [-62.0, 5.0, 62.0])
def test_lines_bend_in_degrees_as_geodesics_do(latitude):
    """Over 30 km at 62 degrees within 0.03 of a cell of 90 m; a straight line is 3 cells off."""
    cell = 1.0 / 1200.0
    shape = 900, 1200
    north, west = latitude + shape[0] / 2 * cell, 10.0
    ground = terrasol.Elevation.from_array(
        np.zeros(shape), (cell, 0, west, 0, -cell, north), "EPSG:4326"
    )
    frame = make_frame(ground.shape, ground.transform, ground.crs)
    row, column = 450, 600
    inverse = np.linalg.inv(frame.jacobian_at(row, column))[::-1]
    bow = bow_at(frame, row, column)
    away = 30_000.0
    straight, bent = [], []
    for azimuth in np.arange(5.0, 360.0, 20.0):
        lon, lat, _ = Geod(ellps="WGS84").fwd(
            west + (column + 0.5) * cell, north - (row + 0.5) * cell, azimuth, away
        )
        true = np.array([(north - lat) / cell - 0.5, (lon - west) / cell - 0.5])
        e, n = np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))
        line = np.array([row, column]) + away * inverse @ (e, n)
        straight.append(np.abs(line - true).max())
        line = line + 0.5 * away**2 * bow @ (e * e, 2.0 * e * n, n * n)
        bent.append(np.abs(line - true).max())
    assert max(bent) < 0.03
    if abs(latitude) > 60.0:
        assert max(straight) > 2.0
