"""Folds, hemispheres, flat ground and validity of the equations of heat load."""

import numpy as np
import pytest

from terrasol.errors import SettingError
from terrasol.practice import heat_load

ASPECTS = np.arange(0.0, 360.0, 7.5)


@pytest.mark.parametrize("equation", [1, 2, 3])
@pytest.mark.parametrize("fold", heat_load.FOLDS)
def test_hemispheres_mirror_each_other(equation, fold):
    # North and south change places, east and west do not: the sun still goes from east to west.
    options = {"equation": equation, "fold": fold}
    north = heat_load.potential_radiation(38.0, 25.0, ASPECTS, **options)
    south = heat_load.potential_radiation(-38.0, 25.0, 180.0 - ASPECTS, **options)
    np.testing.assert_allclose(south, north, rtol=1e-12)


def test_radiation_is_alike_east_and_west_and_heat_is_not():
    for equation in (1, 2, 3):
        east, west = heat_load.potential_radiation(45.0, 20.0, [90.0, 270.0], equation=equation)
        assert east == pytest.approx(west, rel=1e-12)
        cool, warm = heat_load.potential_radiation(
            45.0, 20.0, [90.0, 270.0], equation=equation, fold="heat"
        )
        assert warm > 1.05 * cool


@pytest.mark.parametrize(("latitude", "coolest"), [(45.0, 45.0), (-45.0, 135.0)])
def test_heat_folds_about_the_afternoon_sun(latitude, coolest):
    folded = heat_load.folded_aspect(ASPECTS, latitude, fold="heat")
    away = np.abs((ASPECTS - coolest + 180.0) % 360.0 - 180.0)
    np.testing.assert_allclose(folded, away, atol=1e-9)


def test_full_turns_change_nothing():
    np.testing.assert_allclose(
        heat_load.folded_aspect(ASPECTS + 360.0, 10.0, fold="heat"),
        heat_load.folded_aspect(ASPECTS, 10.0, fold="heat"),
        atol=1e-9,
    )


def test_flat_ground_without_aspect_is_level_and_a_slope_without_aspect_is_void():
    flat = heat_load.potential_radiation(40.0, [0.0, 0.04, 5.0], np.nan)
    level = heat_load.potential_radiation(40.0, 0.0, 123.0)
    assert flat[0] == flat[1] == level
    assert np.isnan(flat[2])
    assert np.array_equal(heat_load.slope_northness([0.01, 5.0], np.nan), [0.0, np.nan], True)
    assert np.array_equal(heat_load.stage([0.01, 5.0], np.nan)[1], [0.0, np.nan], True)
    assert np.isnan(heat_load.northness(np.nan))


def test_valid_where_the_equations_were_fitted():
    latitude = np.array([0.0, -60.0, 60.5, 40.0, 40.0, 40.0])
    slope = np.array([10.0, 10.0, 10.0, 61.0, 90.0, np.nan])
    assert heat_load.valid(latitude, slope).tolist() == [True, True, False, True, True, False]
    for equation in (2, 3):
        flags = heat_load.valid(latitude, slope, equation=equation)
        assert flags.tolist() == [True, True, False, False, False, False]


def test_transforms_have_their_ends_where_the_authors_put_them():
    aspects = np.array([0.0, 45.0, 90.0, 180.0, 225.0])
    np.testing.assert_allclose(
        heat_load.beers(aspects), [1 + 0.5**0.5, 2.0, 1 + 0.5**0.5, 1 - 0.5**0.5, 0.0], atol=1e-12
    )
    north, east = heat_load.stage(45.0, aspects)
    np.testing.assert_allclose(north, heat_load.northness(aspects), atol=1e-12)
    np.testing.assert_allclose(east, heat_load.eastness(aspects), atol=1e-12)
    np.testing.assert_allclose(heat_load.slope_eastness(30.0, aspects), 0.5 * east, atol=1e-12)


@pytest.mark.parametrize("change", [{"equation": 4}, {"fold": "south"}])
def test_unknown_names_are_refused(change):
    with pytest.raises(SettingError):
        heat_load.regression(40.0, 10.0, 90.0, **change)
