"""Error fields: their spread, their correlation, and that a seed names them."""

import itertools

import numpy as np
import pytest

from terrasol.errors import SettingError
from terrasol.ground.uncertainty import (
    DemError,
    _filter,
    _torus,
    error_fields,
    parse_dem_error,
)

SHAPE, CELL = (60, 80), (10.0, 20.0)


def products(error, lags, shape=SHAPE, cell=CELL):
    """Mean product of a field with itself moved by some rows and columns, over the fields."""
    sums = np.zeros((error.realisations, len(lags)))
    for k, field in enumerate(error_fields(error, shape, cell)):
        for i, (down, right) in enumerate(lags):
            behind = field[down:, right:].astype(float)
            sums[k, i] = np.mean(field[: shape[0] - down, : shape[1] - right] * behind)
    return sums


@pytest.mark.parametrize("reach", [30.0, 120.0, 400.0])
def test_variance_and_correlation_are_as_stated(reach):
    error = DemError(0.7, reach, 400, 3)
    lags = [(0, 0), (0, 1), (1, 0), (2, 2), (3, 7), (0, 12), (25, 0)]
    found = products(error, lags) / 0.7**2
    stated = error.correlation(np.array([np.hypot(20.0 * a, 10.0 * b) for a, b in lags]), CELL)
    noise = found.std(axis=0) / np.sqrt(400)
    assert np.all(np.abs(found.mean(axis=0) - stated) < 4.0 * noise + 0.003)
    assert np.all(noise < 0.04)  # else the line above could not fail


@pytest.mark.parametrize("reach", [30.0, 120.0, 2000.0])
def test_filter_has_the_stated_correlation_exactly(reach):
    """Noise aside: the square of the filter transforms to the correlation, up to what wraps."""
    error = DemError(1.0, reach)
    torus = _torus(error, SHAPE, CELL)
    got = np.fft.irfft2(_filter(error, torus, CELL).astype(float) ** 2, torus)
    rows, columns = np.mgrid[: SHAPE[0], : SHAPE[1]]
    stated = error.correlation(np.hypot(20.0 * rows, 10.0 * columns), CELL)
    away = got[: SHAPE[0], : SHAPE[1]] - stated
    assert np.abs(away).max() < 0.006
    assert got[0, 0] == pytest.approx(1.0, abs=1e-6)
    near = stated > 0.3
    assert np.abs(away[near]).max() < 0.004


def test_correlation_at_the_range_is_a_twentieth():
    error = DemError(1.0, 60.0)
    assert error.correlation(np.array([0.0, 60.0]), CELL) == pytest.approx([1.0, 0.0498], abs=1e-4)


def test_range_of_nothing_is_white_noise():
    error = DemError(0.5, 0.0, 100, 9)
    found = products(error, [(0, 0), (0, 1), (1, 0), (3, 3)]) / 0.25
    assert found.mean(axis=0) == pytest.approx([1.0, 0.0, 0.0, 0.0], abs=0.01)


def test_fields_are_of_mean_nothing_and_do_not_know_of_each_other():
    error = DemError(1.0, 40.0, 200)
    fields = np.array(list(error_fields(error, SHAPE, CELL)), float)
    assert abs(fields.mean()) < 0.005
    pairs = [np.mean(a * b) for a, b in itertools.pairwise(fields)]
    assert abs(np.mean(pairs)) < 0.01


def test_same_seed_same_fields_whatever_their_number():
    few = list(error_fields(DemError(0.5, 50.0, 3, 11), SHAPE, CELL))
    many = list(error_fields(DemError(0.5, 50.0, 6, 11), SHAPE, CELL))
    other = next(error_fields(DemError(0.5, 50.0, 3, 12), SHAPE, CELL))
    for one, two in zip(few, many, strict=False):
        np.testing.assert_array_equal(one, two)
    assert not np.array_equal(few[0], few[1])
    assert not np.array_equal(few[0], other)
    assert few[0].dtype == np.float32
    assert few[0].flags.c_contiguous


def test_default_range_is_some_cells():
    assert DemError(1.0).range_on((10.0, 20.0)) == 100.0


@pytest.mark.parametrize(
    ("text", "rmse", "reach"), [("0.5", 0.5, None), ("2,90", 2.0, 90.0), (" 1 , 0 ", 1.0, 0.0)]
)
def test_reads(text, rmse, reach):
    assert parse_dem_error(text, 9, 4) == DemError(rmse, reach, 9, 4)


@pytest.mark.parametrize(
    "text", ["", "much", "0", "-1", "nan", "inf", "1,-5", "1,nan", "1,2,3", "1;60", "1,", "1m"]
)
def test_refuses_nonsense(text):
    with pytest.raises(SettingError) as said:
        parse_dem_error(text)
    assert "\n" not in str(said.value)


@pytest.mark.parametrize("more", [{"realisations": 1}, {"realisations": 10**6}, {"seed": -1}])
def test_refuses_a_draw_that_is_none(more):
    with pytest.raises(SettingError):
        DemError(1.0, 10.0, **more)


def test_refuses_a_range_that_would_not_fit():
    with pytest.raises(SettingError, match="range"):
        next(error_fields(DemError(1.0, 1e6), SHAPE, (1.0, 1.0)))


@pytest.mark.parametrize("text", ["1e9", "0.5,1e7"])
def test_too_much_is_told_what_is_most(text):
    with pytest.raises(SettingError, match="1,000,000 m; got 1e"):
        parse_dem_error(text)
