"""A surface model hides the sun; the bare ground has the slope, and the eye stands on it."""

import dataclasses

import numpy as np
import pytest
from reference import made_range

import terrasol
from terrasol.ground.above import MOST_SAMPLES, surface_heights

CELL = 10.0
WALL = 60  # column of the wall


@pytest.fixture
def plane(metric_ground):
    """A plane that falls to the south by 1 in 10."""
    row = np.arange(120.0)[:, None]
    return metric_ground(400.0 - 1.0 * row + np.zeros((120, 120)), CELL)


@pytest.fixture
def walled(plane):
    """The same with a wall 20 m high that runs north and south."""
    z = plane.heights.copy()
    z[:, WALL] += 20.0
    return dataclasses.replace(plane, heights=z)


def test_a_wall_on_a_plane_shades_and_has_no_slope(plane, walled):
    bare = terrasol.terrain(plane, 16, horizon=True)
    got = terrasol.terrain(plane, 16, horizon=True, surface=walled)
    np.testing.assert_array_equal(got.slope.values, bare.slope.values)
    np.testing.assert_array_equal(got.aspect.values, bare.aspect.values)
    for distance in (1, 5, 15, 24, 30, 55):
        want = np.degrees(np.arctan(20.0 / (distance * CELL)))
        row = np.s_[20:100]
        # eastward from the west of it, westward from the east; the plane is level that way
        assert got.horizon.values[4, row, WALL - distance] == pytest.approx(want, abs=0.02)
        assert got.horizon.values[12, row, WALL + distance] == pytest.approx(want, abs=0.02)
    # north-east, down and up the plane: the wall is further, the ground below it higher
    rise = 20.0 + 10.0 * CELL * 0.1
    want = np.degrees(np.arctan(rise / (10.0 * CELL * np.sqrt(2.0))))
    assert got.horizon.values[2, 60, WALL - 10] == pytest.approx(want, abs=0.1)
    assert (got.sky_view.values[:, WALL - 2] < bare.sky_view.values[:, WALL - 2] - 0.1).all()


def test_the_own_object_hides_nothing_but_its_neighbours_do(plane):
    z = plane.heights.copy()
    z[50, 50] += 30.0  # one tree
    z[80:85, 80:85] += 30.0  # a grove
    got = terrasol.terrain(plane, 8, horizon=True, surface=dataclasses.replace(plane, heights=z))
    bare = terrasol.terrain(plane, 8, horizon=True)
    np.testing.assert_array_equal(got.horizon.values[:, 50, 50], bare.horizon.values[:, 50, 50])
    east = got.horizon.values[2]
    assert east[50, 49] == pytest.approx(np.degrees(np.arctan(3.0)), abs=0.02)
    # on the ground within the grove one stands between trunks
    assert east[82, 82] == pytest.approx(np.degrees(np.arctan(3.0)), abs=0.02)
    assert east[82, 84] == pytest.approx(bare.horizon.values[2, 82, 84], abs=1e-4)


def test_the_far_sweep_looks_from_the_ground_and_not_from_the_canopy(metric_ground):
    """A forest 25 m high, a ridge behind a nearer one: from the canopy both would be seen."""
    z = np.full((60, 200), 100.0)
    ground = metric_ground(z, CELL)
    surface = z.copy()
    surface[:, 100] = 140.0  # seen from the ground
    surface[:, 180] = 168.0  # higher only from 25 m above it
    for columns in (slice(20, 24), slice(20, 21)):
        high = surface.copy()
        high[:, columns] += 25.0
        got = terrasol.terrain(
            ground, 8, horizon=True, surface=dataclasses.replace(ground, heights=np.float32(high))
        )
        for column in (23, 20):
            want = max(40.0 / ((100 - column) * CELL), 68.0 / ((180 - column) * CELL))
            if column == 20 and columns.stop == 24:
                want = 25.0 / CELL
            assert got.horizon.values[2, 30, column] == pytest.approx(
                np.degrees(np.arctan(want)), abs=0.02
            )


def test_a_surface_equal_to_the_ground_changes_nothing(plane):
    bare = terrasol.terrain(plane, 16, horizon=True)
    same = terrasol.terrain(
        plane, 16, horizon=True, surface=dataclasses.replace(plane, heights=plane.heights.copy())
    )
    for name in bare:
        np.testing.assert_array_equal(bare[name].values, same[name].values)


def test_trees_take_light_and_throw_it_off_no_slope(plane, walled):
    quick = {"azimuths": 16, "step_seconds": 600.0}
    bare = terrasol.irradiation(plane, "2025-06", **quick).irradiation_period.values
    got = terrasol.irradiation(plane, "2025-06", surface=walled, **quick).irradiation_period.values
    assert (got[1] <= bare[1] + 1e-3).all()
    assert got[1, 60, WALL - 2] < 0.9 * bare[1, 60, WALL - 2]
    # Away from the wall's own slope all is as if the wall were ground, reflected light apart, but
    # for roundings of float32 about another mean height.
    solid = terrasol.irradiation(walled, "2025-06", **quick).irradiation_period.values
    beside = np.delete(np.arange(120), [WALL - 1, WALL, WALL + 1])
    np.testing.assert_allclose(got[1:3, :, beside], solid[1:3, :, beside], rtol=3e-5)


def test_with_a_larger_model_both_count(walled, plane):
    far = terrasol.Elevation.from_array(
        np.full((80, 80), 300.0), (100.0, 0, -4000.0, 0, -100.0, 4000.0), plane.crs
    )
    far.heights[:, 70:] = 900.0
    got = terrasol.terrain(plane, 16, horizon=True, surface=walled, far=far)
    assert got.horizon.values[4, 60, WALL - 1] == pytest.approx(np.degrees(np.arctan(2.0)), abs=0.1)
    beyond = got.horizon.values[4, 60, WALL + 5]
    assert beyond == pytest.approx(np.degrees(np.arctan((900 - 340) / 2995.0)), abs=0.5)


def test_another_grid_is_averaged_over_each_cell(plane):
    crs, (a, _, c, _, e, f) = plane.crs, plane.transform
    finer = np.zeros((480, 480))
    finer[::2] = 8.0  # stripes of 2.5 m
    ground = np.repeat(np.repeat(plane.heights, 4, 0), 4, 1)
    fine = terrasol.Elevation.from_array(ground + finer, (a / 4, 0, c, 0, e / 4, f), crs)
    heights, notes = surface_heights(plane, fine)
    assert notes == ()
    np.testing.assert_allclose(heights, plane.heights + 4.0, atol=0.6)
    assert MOST_SAMPLES >= 4
    # a coarser one, and one in degrees, bilinear: the formula's range within its curvature
    for surface in (
        made_range.square(8e3, 90.0),
        made_range.on_grid("EPSG:4326", (1 / 900, 0, 10.1, 0, -1 / 900, 46.2), (220, 330)),
    ):
        ground = made_range.square(5e3, 50.0)
        higher = dataclasses.replace(surface, heights=surface.heights + np.float32(20.0))
        heights, _ = surface_heights(ground, higher)
        np.testing.assert_allclose(heights, ground.heights + 20.0, atol=2.5)


def test_swapped_models_are_refused(plane, walled):
    wood = dataclasses.replace(plane, heights=plane.heights + np.float32(15.0))
    with pytest.raises(terrasol.InputError, match=r"100 % of the cells.*probably swapped"):
        terrasol.terrain(wood, 8, surface=plane)
    z = plane.heights.copy()
    z[:, ::4] += 12.0
    with pytest.raises(terrasol.InputError, match="probably swapped"):
        surface_heights(dataclasses.replace(plane, heights=z), plane)
    # a wall on one column in 120 is under a twentieth of the cells: noise, and the ground rules
    heights, notes = surface_heights(walled, plane)
    assert notes == ()
    got = terrasol.terrain(walled, 8, horizon=True, surface=plane)
    want = terrasol.terrain(walled, 8, horizon=True)
    np.testing.assert_array_equal(got.horizon.values, want.horizon.values)
    np.testing.assert_array_equal(heights, plane.heights)


def test_surfaces_that_leave_ground_out_are_refused_and_holes_told(plane):
    part = terrasol.Elevation.from_array(plane.heights[:60] + 5.0, plane.transform, plane.crs)
    with pytest.raises(terrasol.InputError, match="leaves out 50"):
        surface_heights(plane, part)
    z = plane.heights + np.float32(5.0)
    z[10:14, 10:14] = np.nan
    holed = dataclasses.replace(plane, heights=z, warnings=("metres assumed",))
    _, notes = surface_heights(plane, holed)
    assert notes[0] == "surface model: metres assumed"
    assert "void over 16 cells" in notes[1]
    got = terrasol.terrain(plane, 8, surface=holed)
    assert np.isfinite(got.sky_view.values).all()
    assert got.attrs["warnings"] == list(notes)
    high = dataclasses.replace(plane, heights=plane.heights + np.float32(48.0))
    assert "vertical datum" in surface_heights(plane, high)[1][0]


def test_voids_of_the_ground_stay_void_under_a_known_surface(plane, walled):
    z = plane.heights.copy()
    z[40:50, 40:50] = np.nan
    got = terrasol.terrain(dataclasses.replace(plane, heights=z), 8, surface=walled)
    assert np.isnan(got.sky_view.values[40:50, 40:50]).all()
    assert np.isfinite(got.sky_view.values).sum() == 120 * 120 - 100
