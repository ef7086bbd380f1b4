"""Coarser cells: the same mean, the same plane, the same place."""

import numpy as np
import pytest

from terrasol import Elevation, SettingError
from terrasol.ground.grain import coarsened
from terrasol.ground.places import coordinates


def model(heights, transform=(10.0, 1.0, 5e5, 2.0, -10.0, 5.2e6)):
    return Elevation.from_array(heights, transform, "EPSG:32632")


def test_a_plane_stays_the_plane():
    row, column = np.indices((12, 18), dtype=float)
    fine = model(3.0 * row - 0.5 * column)
    coarse = coarsened(fine, 3)
    assert coarse.shape == (4, 6)
    r, c = np.indices(coarse.shape)
    expected = 3.0 * (3 * r + 1) - 0.5 * (3 * c + 1)
    np.testing.assert_allclose(coarse.heights, expected, atol=1e-5)
    for here, there in zip(
        coordinates(coarse, r, c), coordinates(fine, 3 * r + 1, 3 * c + 1), strict=True
    ):
        np.testing.assert_allclose(here, there)


def test_half_of_a_cell_must_be_known():
    heights = np.ones((4, 4))
    heights[0, :2] = np.nan
    heights[2:, 2:] = np.nan
    heights[2, 2] = 5.0
    coarse = coarsened(model(heights), 2).heights
    assert coarse[0, 0] == 1.0
    assert np.isnan(coarse[1, 1])


@pytest.mark.parametrize(
    ("shape", "factor", "expected"),
    [((6, 6), 3, (2, 2)), ((7, 8), 3, (2, 3)), ((5, 7), 2, (3, 4)), ((9, 10), 4, (2, 3))],
)
def test_rims_that_do_not_fill_a_cell(shape, factor, expected):
    """Squares with half their side on the raster stay, the rest is cut off; none becomes void."""
    coarse = coarsened(model(np.ones(shape)), factor)
    assert coarse.shape == expected
    assert (coarse.heights == 1.0).all()


def test_one_is_the_model_itself():
    fine = model(np.ones((4, 4)))
    assert coarsened(fine, 1) is fine


@pytest.mark.parametrize("factor", [0, -1, 1.5, 4])
def test_bad_factors(factor):
    with pytest.raises(SettingError):
        coarsened(model(np.ones((4, 4))), factor)
