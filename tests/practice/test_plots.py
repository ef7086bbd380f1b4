"""Which cells count for a plot, and what they say, against plain counting and closed forms."""

import math

import numpy as np
import pytest
from scipy import stats

from terrasol.practice.plots import (
    CUTS,
    Gathered,
    around_point,
    by_error,
    chance_level,
    chance_of_best,
    correlation,
    in_circle,
    own_cell,
)

SQUARE = np.array([[10.0, 0.0], [0.0, -10.0]])
TURNED = np.array([[8.0, 3.0], [-3.0, 14.0]])  # rotated, sheared, south-up, cells not square
SHAPE = (60, 70)


def spread_out(share, shape=SHAPE):
    plane = np.zeros(shape)
    np.add.at(plane, (share.rows, share.columns), share.weight)
    return plane


@pytest.mark.parametrize(
    ("row", "column", "cell"),
    [(3.0, 4.0, (3, 4)), (3.49, 3.51, (3, 4)), (-0.5, 69.49, (0, 69)), (59.4, 0.5, (59, 1))],
)
def test_own_cell(row, column, cell):
    share = own_cell(row, column, SHAPE)
    assert (share.rows[0], share.columns[0]) == cell
    assert share.weight.tolist() == [1.0]


def test_bilinear_weights_give_a_bilinear_map_exactly():
    rows, columns = np.indices(SHAPE)
    plane = 2.0 + 3.0 * rows - 0.7 * columns + 0.2 * rows * columns
    for row, column in [(3.25, 4.5), (0.0, 0.0), (58.99, 68.01), (20.0, 30.3)]:
        found = (spread_out(around_point(row, column, SHAPE)) * plane).sum()
        assert found == pytest.approx(2.0 + 3.0 * row - 0.7 * column + 0.2 * row * column)


def test_in_the_outer_half_of_rim_cells_the_nearest_centre_counts():
    plane = spread_out(around_point(-0.4, 69.3, SHAPE))
    assert plane[0, 69] == 1.0
    assert plane.sum() == 1.0


def plain_circle(row, column, radius, jacobian, parts=80):
    """Share of every cell that lies in a circle, by counting places on a fine lattice."""
    fine = (np.arange(parts) + 0.5) / parts - 0.5
    out = np.zeros(SHAPE)
    for i in range(SHAPE[0]):
        for j in range(SHAPE[1]):
            down, right = i - row, j - column
            if np.hypot(*(jacobian @ (right, down))) > radius + 25.0:
                continue
            r, c = np.meshgrid(down + fine, right + fine, indexing="ij")
            east = jacobian[0, 0] * c + jacobian[0, 1] * r
            north = jacobian[1, 0] * c + jacobian[1, 1] * r
            out[i, j] = (east**2 + north**2 <= radius**2).mean()
    return out


@pytest.mark.parametrize("jacobian", [SQUARE, TURNED])
@pytest.mark.parametrize("radius", [3.0, 12.0, 55.0, 100.0])
def test_circle_against_plain_counting(jacobian, radius):
    row, column = 30.3, 34.8
    expected = plain_circle(row, column, radius, jacobian)
    share = in_circle(row, column, radius, jacobian, SHAPE)
    assert share.weight.sum() == pytest.approx(1.0)
    # The weights' sum is the area: a circle's, of which cells hold |det J| square metres.
    area = np.pi * radius**2 / abs(np.linalg.det(jacobian))
    found = spread_out(share) * area
    # One place of 256 along the edge of a cell, and the total off by as much of few cells.
    assert np.abs(found - expected).max() < 3.0 / CUTS**2 + 0.02 * expected.max()
    missed = (expected > 0) & (found == 0)
    assert expected[missed].max(initial=0.0) < 1.0 / CUTS


def test_a_circle_smaller_than_the_places_counted_is_the_own_cell():
    share = in_circle(5.2, 6.1, 0.01, SQUARE, SHAPE)
    assert (share.rows.tolist(), share.columns.tolist()) == ([5], [6])


def test_what_lies_outside_the_grid_lacks_in_the_weight():
    share = in_circle(-0.5, 30.0, 200.0, SQUARE, SHAPE)  # half of it beyond the first row
    assert share.weight.sum() == pytest.approx(0.5, abs=0.01)
    assert share.rows.min() == 0


def stepped_moments(place, spread):
    """Mean and deviation of a Gaussian number that is rounded, in closed form."""
    steps = np.arange(-400, 401)

    def below(x):
        return 0.5 * (1.0 + math.erf((x - place) / (spread * math.sqrt(2.0))))

    chance = np.array([below(k + 0.5) - below(k - 0.5) for k in steps])
    mean = (chance * steps).sum()
    return mean, math.sqrt((chance * (steps - mean) ** 2).sum())


@pytest.mark.parametrize("error", [2.0, 8.0, 20.0, 90.0])
@pytest.mark.parametrize("offset", [0.0, 0.3, 0.49])
def test_spread_of_a_ramp_by_error_is_that_of_a_rounded_gaussian(error, offset):
    """The cell's value on a ramp is the rounded place, and each axis has error / sqrt 2."""
    share = by_error(30.0, 35.0 + offset, error, SQUARE, SHAPE)
    assert share.weight.sum() == pytest.approx(1.0)
    mean = (share.weight * share.columns).sum() - 35.0
    spread = math.sqrt((share.weight * (share.columns - 35.0 - mean) ** 2).sum())
    expected_mean, expected_spread = stepped_moments(offset, error / math.sqrt(2.0) / 10.0)
    # Even places stand for all: the chance of one side of an edge is off by under 0.2 %.
    assert mean == pytest.approx(expected_mean, abs=0.01 + 0.005 * expected_spread)
    assert spread == pytest.approx(expected_spread, rel=0.01, abs=0.02)


def test_chance_of_a_cell_is_that_of_the_gaussian():
    """Along the axes of a square grid the chance is a product of two normal shares."""
    rng = np.random.default_rng(5)
    edges = np.arange(61) - 0.5
    ramp = np.add.outer(3.0 * np.arange(60), 7.0 * np.arange(60))
    for _ in range(40):
        row, column = 30.0 + rng.uniform(-0.5, 0.5, 2)
        error = rng.uniform(2.0, 6.0)
        sides = [
            np.diff([0.5 * math.erf((e - at) * 10.0 / error) for e in edges])
            for at in (row, column)
        ]
        chance = np.outer(*sides)
        share = by_error(row, column, error, SQUARE, (60, 60))
        values = ramp[share.rows, share.columns]
        expected = math.sqrt(np.cov(ramp.ravel(), aweights=chance.ravel(), ddof=0))
        found = math.sqrt(np.cov(values, aweights=share.weight, ddof=0))
        assert found == pytest.approx(expected, rel=0.02, abs=0.02)


def test_wide_errors_spread_as_the_gaussian_and_the_cells_side_do():
    """Sheppard: rounding adds a twelfth of the cell's square."""
    share = by_error(30.0, 35.2, 60.0, SQUARE, SHAPE)
    spread = 10.0 * math.sqrt(np.cov(share.columns, aweights=share.weight, ddof=0))
    assert spread == pytest.approx(math.sqrt(60.0**2 / 2.0 + 100.0 / 12.0), rel=5e-3)


def test_error_is_the_same_in_all_directions_whatever_the_grid():
    share = by_error(30.0, 35.0, 100.0, TURNED, (2000, 2000))
    east, north = TURNED @ np.stack([share.columns - 35.0, share.rows - 30.0])
    for angle in np.radians([0.0, 30.0, 75.0, 120.0]):
        along = east * np.cos(angle) + north * np.sin(angle)
        spread = math.sqrt(np.cov(along, aweights=share.weight, ddof=0))
        assert spread == pytest.approx(100.0 / math.sqrt(2.0), rel=0.02)


def test_no_error_is_the_own_cell():
    share = by_error(30.2, 35.4, 0.0, SQUARE, SHAPE)
    assert (share.rows.tolist(), share.columns.tolist()) == ([30], [35])


def test_gathered_piece_by_piece_is_as_one_by_one():
    rng = np.random.default_rng(3)
    values = rng.normal(50.0, 20.0, (40, 3))
    values[rng.random((40, 3)) < 0.2] = np.nan
    share, cell = rng.integers(0, 6, 200), rng.integers(0, 40, 200)
    pairs = np.unique(np.stack([share, cell]), axis=1)
    share, cell = pairs[:, pairs[0] != 4]  # the fourth counts nothing
    weight = rng.random(share.size)
    gathered = Gathered(6, 3)
    for piece in np.array_split(rng.permutation(share.size), 5):
        gathered.add(share[piece], cell[piece], weight[piece], values)
    for k in range(6):
        for q in range(3):
            own = share == k
            v, w = values[cell[own], q], weight[own]
            v, w = v[np.isfinite(v)], w[np.isfinite(v)]
            if not v.size:
                assert np.isnan(gathered.mean[k, q])
                assert np.isnan(gathered.least[k, q])
                assert np.isnan(gathered.deviation[k, q])
                continue
            assert gathered.mean[k, q] == pytest.approx(np.average(v, weights=w))
            expected = math.sqrt(np.cov(v, aweights=w, ddof=0)) if v.size > 1 else 0.0
            assert gathered.deviation[k, q] == pytest.approx(expected, abs=1e-6)
            assert (gathered.least[k, q], gathered.greatest[k, q]) == (v.min(), v.max())
    assert np.isnan(gathered.mean[4]).all()


def test_a_single_high_value_has_no_spread():
    gathered = Gathered(1, 1)
    gathered.add(np.array([0, 0]), np.array([0, 1]), np.array([0.3, 0.7]), np.full((2, 1), 8123.4))
    assert gathered.deviation[0, 0] == 0.0


def test_correlations_are_those_of_scipy():
    rng = np.random.default_rng(5)
    a = rng.normal(size=30).round(1)
    b = a + rng.normal(size=30)
    a[3], b[7] = np.nan, np.nan
    known = np.isfinite(a) & np.isfinite(b)
    pearson, spearman, plots = correlation(a, b)
    assert plots == 28
    assert pearson == pytest.approx(stats.pearsonr(a[known], b[known])[0])
    assert spearman == pytest.approx(stats.spearmanr(a[known], b[known])[0])


@pytest.mark.parametrize("values", [[5.0] * 6, [1e6 + 1e-5 * k for k in range(6)], [np.nan] * 6])
def test_nothing_goes_with_what_does_not_vary(values):
    assert np.isnan(correlation(values, np.arange(6.0))[0])


def test_chance_level_is_the_critical_value_in_print():
    """Critical values of Pearson's r, 5 % both sides, n = 12 and 32: 0.576 and 0.349.

    From memory of the tables of Fisher and Yates (1963).
    """
    assert chance_level(12) == pytest.approx(0.576, abs=5e-4)
    assert chance_level(32) == pytest.approx(0.349, abs=5e-4)


def test_best_of_one_by_chance_is_the_chance_of_one():
    rng = np.random.default_rng(8)
    one, measured = rng.normal(size=(40, 1)), rng.normal(size=40)
    level = chance_of_best(one, measured, shuffles=4000)
    assert level == pytest.approx(chance_level(40), abs=0.02)


def test_best_of_many_by_chance_counts_repeats_once():
    rng = np.random.default_rng(9)
    measured, columns = rng.normal(size=30), rng.normal(size=(30, 50))
    many = chance_of_best(columns, measured)
    assert many > chance_of_best(columns[:, :1], measured) + 0.1
    assert chance_of_best(np.tile(columns, 3), measured) == pytest.approx(many)
