"""Normals of planes in any grid, next to voids and rims, and slope and aspect from them."""

import numpy as np
import pytest

from terrasol.kernels.surface import normals, slope_aspect


def plane_normals(heights, jacobians, pad=1):
    """Call the kernel; `jacobians` at the four corners, (2, 2, 2, 2)."""
    rows, columns = (size - 2 * pad for size in heights.shape)
    normal = np.empty((3, rows, columns), np.float32)
    normals(np.ascontiguousarray(heights, np.float32), pad, jacobians, normal)
    return normal


def random_jacobian(dice):
    """A grid of any turn, either handedness, cells of 5 to 50 m, sheared up to 30 degrees."""
    turn, shear = dice.uniform(0.0, 2.0 * np.pi), np.radians(dice.uniform(-30.0, 30.0))
    first = dice.uniform(5.0, 50.0) * np.array([np.cos(turn), np.sin(turn)])
    side = turn + shear + np.pi / 2 * dice.choice([-1.0, 1.0])
    second = dice.uniform(5.0, 50.0) * np.array([np.cos(side), np.sin(side)])
    return np.stack([first, second], axis=1)


def normal_of(gradient):
    """Unit normal of a plane that rises by so much east and north."""
    east, north = gradient
    return np.array([-east, -north, 1.0]) / np.sqrt(east**2 + north**2 + 1.0)


@pytest.mark.parametrize("seed", range(12))
@pytest.mark.parametrize("voids", [0, 30])
def test_planes_are_exact_in_any_grid_and_beside_voids(seed, voids):
    # a plane's gradient is exact for any stencil: identity
    dice = np.random.default_rng(seed)
    jacobian = random_jacobian(dice)
    gradient = dice.uniform(-1.0, 1.0, 2)
    by_column, by_row = jacobian.T @ gradient
    row, column = np.mgrid[-1:10, -1:13]
    heights = by_column * column + by_row * row
    heights.flat[dice.permutation(heights.size)[:voids]] = np.nan
    heights[:, -1] = np.nan  # as at the raster's rim
    got = plane_normals(heights, np.broadcast_to(jacobian, (2, 2, 2, 2)).copy())
    core = heights[1:-1, 1:-1]
    found = np.isfinite(got).all(axis=0)
    assert not found[np.isnan(core)].any()
    known = np.isfinite(heights)
    beside = (known[1:-1, :-2] | known[1:-1, 2:]) & (known[:-2, 1:-1] | known[2:, 1:-1])
    assert found[beside & known[1:-1, 1:-1]].all()
    np.testing.assert_allclose(
        got[:, found], np.broadcast_to(normal_of(gradient)[:, None], (3, found.sum())), atol=2e-5
    )


def test_window_weighs_one_two_one():
    # Horn (1981): the middle difference counts twice
    heights = np.zeros((3, 3))
    heights[:, 2] = 3.0, 5.0, 11.0
    normal = plane_normals(heights, np.broadcast_to(np.eye(2), (2, 2, 2, 2)).copy())[:, 0, 0]
    east = (3.0 + 2.0 * 5.0 + 11.0) / 8.0
    north_down = (11.0 - 3.0) / 8.0
    np.testing.assert_allclose(normal, normal_of((east, north_down)), rtol=1e-6)


def test_jacobian_is_linear_between_the_corners():
    dice = np.random.default_rng(3)
    corners = np.array([[[10.0, 0.0], [0.0, -10.0]]] * 4).reshape(2, 2, 2, 2)
    corners = corners + dice.uniform(-1.0, 1.0, corners.shape)
    row, column = np.mgrid[-1:5, -1:7]
    got = plane_normals(3.0 * column - 2.0 * row, corners)
    for r, c in np.ndindex(4, 6):
        v, u = (r + 0.5) / 4, (c + 0.5) / 6
        above = (1 - u) * corners[0, 0] + u * corners[0, 1]
        below = (1 - u) * corners[1, 0] + u * corners[1, 1]
        gradient = np.linalg.solve(((1 - v) * above + v * below).T, [3.0, -2.0])
        np.testing.assert_allclose(got[:, r, c], normal_of(gradient), atol=1e-6)


def test_a_lone_cell_has_no_normal():
    heights = np.full((3, 3), np.nan)
    heights[1, 1] = 5.0
    got = plane_normals(heights, np.broadcast_to(np.eye(2), (2, 2, 2, 2)).copy())
    assert np.isnan(got).all()


def test_slope_and_aspect_of_normals():
    tilt, turn = np.meshgrid([0.01, 0.049, 0.06, 10.0, 60.0], np.arange(0.0, 360.0, 7.5))
    s, a = np.radians(tilt), np.radians(turn)
    normal = np.stack([np.sin(s) * np.sin(a), np.sin(s) * np.cos(a), np.cos(s)])
    slope, aspect = np.empty((2, *tilt.shape), np.float32)
    slope_aspect(normal.astype(np.float32), 0.05, slope, aspect)
    np.testing.assert_allclose(slope, tilt, rtol=1e-5)
    assert (np.isnan(aspect) == (tilt < 0.05)).all()
    steep = tilt > 0.05
    np.testing.assert_allclose((aspect[steep] - turn[steep] + 180.0) % 360.0, 180.0, atol=1e-3)
    assert (aspect[steep] >= 0.0).all()
    assert (aspect[steep] < 360.0).all()


def test_slope_and_aspect_of_voids_are_void():
    slope, aspect = np.zeros((2, 2, 2), np.float32)
    slope_aspect(np.full((3, 2, 2), np.nan, np.float32), 0.05, slope, aspect)
    assert np.isnan(slope).all()
    assert np.isnan(aspect).all()
