"""Slope and aspect of printed windows and of planes, after Horn (1981)."""

import numpy as np
import pytest

import terrasol


def surface(metric_ground, heights, cell):
    ground = terrasol.terrain(metric_ground(np.array(heights, float), cell), azimuths=8)
    return ground["slope"].values, ground["aspect"].values


def test_window_of_the_steep_cell(metric_ground):
    # Window, dz/dx 0.05, dz/dy -3.8 (down the rows) and slope 75.25762 degrees: worked example
    # of a GIS vendor's page "How Slope works", cell 5. The aspect follows from the same two.
    slope, aspect = surface(metric_ground, [[50, 45, 50], [30, 30, 30], [8, 10, 10]], 5.0)
    assert slope[1, 1] == pytest.approx(75.25762, abs=1e-4)
    assert aspect[1, 1] == pytest.approx(180.0 + np.degrees(np.arctan(0.05 / 3.8)), abs=1e-3)


def test_window_of_the_eastern_aspect(metric_ground):
    # Window and aspect 92.64 degrees: worked example of the same vendor's page on aspect.
    _, aspect = surface(metric_ground, [[101, 92, 85], [101, 92, 85], [101, 91, 84]], 10.0)
    assert aspect[1, 1] == pytest.approx(92.64, abs=0.005)


@pytest.mark.parametrize("steepness", [1.0, 30.0, 45.0, 75.0])
@pytest.mark.parametrize("facing", [0.0, 37.0, 90.0, 180.0, 200.0, 359.0])
@pytest.mark.parametrize("cell", [(10.0, 10.0), (10.0, 25.0)])
def test_plane_is_exact_up_to_the_rim(metric_ground, steepness, facing, cell):
    # Identity: a stencil that is exact for z = a x + b y is exact for every plane; at the
    # rim it is one-sided and loses nothing. 0.001 degrees is what float32 heights leave.
    east, north = np.meshgrid(np.arange(9) * cell[0], -np.arange(7) * cell[1])
    away = east * np.sin(np.radians(facing)) + north * np.cos(np.radians(facing))
    slope, aspect = surface(metric_ground, -away * np.tan(np.radians(steepness)), cell)
    np.testing.assert_allclose(slope, steepness, atol=1e-3)
    turn = (aspect - facing + 180.0) % 360.0 - 180.0
    np.testing.assert_allclose(turn, 0.0, atol=5e-3)


def test_level_ground_has_no_aspect(metric_ground):
    slope, aspect = surface(metric_ground, np.full((5, 6), 812.0), 10.0)
    assert (slope == 0.0).all()
    assert np.isnan(aspect).all()
