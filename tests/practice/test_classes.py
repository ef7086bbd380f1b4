"""Areas by class, sectors, weighted percentiles and mean directions."""

import numpy as np
import pytest

from terrasol.errors import SettingError
from terrasol.practice import classes

PLAIN = np.random.default_rng(11)


def degrees(percent):
    return np.degrees(np.arctan(np.divide(percent, 100.0)))


def test_cells_fall_into_their_classes_and_edges_belong_above():
    got = classes.area_by_class([0.0, 4.9, 5.0, 14.0, 15.0, 99.0, np.nan], [5, 15], 2.0)
    assert got.areas.tolist() == [4.0, 4.0, 4.0]
    assert got.void == 2.0


def test_edge_cells_count_with_their_covered_part():
    values = np.array([[3.0, 3.0], [12.0, 12.0]])
    covered = np.array([[0.25, 1.0], [0.5, 0.0]]) * 100.0
    got = classes.area_by_class(values, classes.SLOPE_EDGES_PERCENT, covered)
    assert got.areas.tolist() == [125.0, 0.0, 50.0, 0.0, 0.0, 0.0]


def test_areas_of_all_classes_are_the_whole():
    values, area = PLAIN.exponential(12.0, 500), PLAIN.random(500)
    values[::7] = np.nan
    got = classes.area_by_class(values, classes.SLOPE_EDGES_PERCENT, area)
    assert got.areas.sum() + got.void == pytest.approx(area.sum(), rel=1e-12)
    inside = (values >= 10.0) & (values < 15.0)
    assert got.areas[2] == pytest.approx(area[inside].sum(), rel=1e-12)
    assert len(classes.class_names(classes.SLOPE_EDGES_PERCENT, "%")) == got.areas.size


@pytest.mark.parametrize("edges", [[], [5, 5], [10, 5], [np.nan]])
def test_edges_that_do_not_ascend_are_refused(edges):
    with pytest.raises(SettingError, match="edges"):
        classes.area_by_class([1.0], edges, 1.0)


def test_surface_and_map_area():
    slope = np.array([0.0, 45.0])
    np.testing.assert_allclose(classes.surface_area(10.0, slope), [10.0, 10.0 * 2**0.5])


@pytest.mark.parametrize(
    ("aspect", "sector"),
    [(0, "N"), (22.4, "N"), (22.5, "NE"), (337.5, "N"), (337.4, "NW"), (359.9, "N"), (180, "S"),
     (202.5, "SW"), (360.0, "N")],
)  # fmt: skip
def test_sectors_are_centred(aspect, sector):
    got = classes.area_by_sector([aspect], [10.0], [3.0])
    assert got.areas[classes.SECTORS.index(sector)] == 3.0
    assert got.areas.sum() == 3.0


def test_flat_and_void_ground_are_apart():
    slope = degrees([1.9, 2.1, np.nan, 0.0])
    aspect = [90.0, 90.0, np.nan, np.nan]
    area = [1.0, 10.0, 100.0, 1000.0]
    got = classes.area_by_sector(aspect, slope, area)
    assert (got.areas[2], got.areas.sum(), got.flat, got.void) == (10.0, 10.0, 1001.0, 100.0)
    mean = classes.mean_direction(aspect, slope, area)
    assert (mean.direction, mean.area, mean.flat, mean.void) == (90.0, 10.0, 1001.0, 100.0)
    steeper = classes.area_by_sector(aspect, slope, area, flat_below_percent=3.0)
    assert (steeper.areas.sum(), steeper.flat) == (0.0, 1011.0)


def test_mean_direction_is_that_of_vectors():
    # 350 and 30 degrees with weights 1 and 2: the sum of (cos, sin) by hand.
    east = np.sin(np.radians(350)) + 2 * np.sin(np.radians(30))
    north = np.cos(np.radians(350)) + 2 * np.cos(np.radians(30))
    mean = classes.mean_direction([350.0, 30.0], 20.0, [1.0, 2.0])
    assert mean.direction == pytest.approx(np.degrees(np.arctan2(east, north)), abs=1e-9)
    assert mean.resultant == pytest.approx(np.hypot(east, north) / 3.0, abs=1e-12)


def test_directions_that_cancel_have_no_mean():
    mean = classes.mean_direction([0.0, 90.0, 180.0, 270.0], 20.0, 1.0)
    assert np.isnan(mean.direction)
    assert mean.resultant < 1e-9
    none = classes.mean_direction([np.nan], 0.0, 1.0)
    assert np.isnan(none.direction)
    assert np.isnan(none.resultant)


def test_turning_all_turns_the_mean():
    aspect, area = PLAIN.random(50) * 120.0, PLAIN.random(50)
    mean = classes.mean_direction(aspect, 20.0, area)
    turned = classes.mean_direction((aspect + 300.0) % 360.0, 20.0, area)
    assert turned.direction == pytest.approx((mean.direction + 300.0) % 360.0, abs=1e-9)
    assert turned.resultant == pytest.approx(mean.resultant, abs=1e-12)


def test_percentiles_agree_with_cells_repeated():
    values, weights = PLAIN.normal(size=40), PLAIN.integers(1, 9, 40)
    percents = [0, 5, 10, 25, 33.3, 50, 75, 90, 95, 100]
    repeated = np.percentile(np.repeat(values, weights), percents, method="inverted_cdf")
    np.testing.assert_array_equal(
        classes.weighted_percentiles(values, weights * 0.1, percents), repeated
    )


def test_percentiles_do_not_mind_a_cell_in_pieces():
    values, weights = np.array([4.0, 1.0, 9.0]), np.array([0.2, 0.5, 0.3])
    split = classes.weighted_percentiles(
        np.repeat(values, 2), np.repeat(weights / 2, 2), range(0, 101, 10)
    )
    whole = classes.weighted_percentiles(values, weights, range(0, 101, 10))
    assert split.tolist() == whole.tolist()


def test_voids_and_empty_cells_are_left_out():
    got = classes.weighted_percentiles([np.nan, 7.0, 1.0], [5.0, 1.0, 0.0], [0, 100])
    assert got.tolist() == [7.0, 7.0]
    assert np.isnan(classes.weighted_percentiles([np.nan], [1.0], [50]))
    assert classes.weighted_mean([np.nan, 2.0, 4.0], [9.0, 1.0, 3.0]) == 3.5
    assert np.isnan(classes.weighted_mean([], []))


def test_wrong_percents_and_flatness_are_refused():
    with pytest.raises(SettingError, match="0 to 100"):
        classes.weighted_percentiles([1.0], [1.0], [101])
    with pytest.raises(SettingError, match="flat"):
        classes.mean_direction([1.0], [1.0], [1.0], flat_below_percent=-1.0)
