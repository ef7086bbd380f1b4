"""Running mean and spread against all values at once, and what intervals hold."""

import numpy as np
import pytest
from scipy import stats

from terrasol.engine.spread import (
    SHIFT_DOUBT,
    UNKNOWN_DIRECTION,
    Running,
    RunningAngle,
    Spread,
    SpreadTally,
)
from terrasol.errors import SettingError


@pytest.mark.parametrize(("dtype", "rounding"), [(np.float64, 1e-10), (np.float32, 6.1e-5)])
def test_running_is_mean_and_deviation_of_all(dtype, rounding):
    """In float32 a number near 1000 is known to 6.1e-5, so 24 means and deviations to that."""
    values = np.random.default_rng(1).normal(1000.0, 2.0, (24, 5, 7)).astype(dtype)
    running = Running((5, 7), dtype)
    for each in values:
        running.add(each)
    values = values.astype(np.float64)
    assert running.mean() == pytest.approx(values.mean(axis=0), abs=5 * rounding)
    assert running.deviation() == pytest.approx(values.std(axis=0, ddof=1), abs=5 * rounding)


def test_running_leaves_out_what_is_not_known():
    running = Running((3,))
    for each in ([1.0, np.nan, np.nan], [3.0, 5.0, np.nan], [5.0, np.nan, np.nan]):
        running.add(np.array(each))
    assert running.mean() == pytest.approx([3.0, 5.0, np.nan], nan_ok=True)
    assert running.deviation() == pytest.approx([2.0, np.nan, np.nan], nan_ok=True)
    assert running.count.tolist() == [3, 1, 0]


def test_running_takes_windows():
    running = Running((4, 4))
    for value in (1.0, 2.0):
        running.add(np.full((2, 3), value), (slice(1, 3), slice(0, 3)))
    assert running.count.sum() == 12
    assert running.mean()[1, 0] == 1.5
    assert np.isnan(running.mean()[0, 0])


def test_deviation_of_a_direction_is_the_plain_one_while_small():
    turned = np.random.default_rng(2).normal(359.0, 4.0, (2000, 3))
    running = RunningAngle((3,))
    for each in turned:
        running.add(each % 360.0)
    assert running.deviation() == pytest.approx(turned.std(axis=0, ddof=1), rel=0.01)
    assert (running.mean() - 359.0 + 180.0) % 360.0 - 180.0 == pytest.approx(0.0, abs=0.4)


def test_deviation_of_a_direction_does_not_depend_on_how_many_came():
    """The square is freed of n: the mean over many small draws is that of a large one."""
    turned = np.random.default_rng(3).normal(0.0, 10.0, (5, 20_000))
    running = RunningAngle((20_000,))
    for each in turned:
        running.add(each)
    assert np.mean(running.deviation() ** 2) == pytest.approx(100.0, rel=0.02)


def test_no_direction_at_all():
    running = RunningAngle((1,))
    for each in np.arange(0.0, 360.0, 15.0):
        running.add(np.array([each]))
    assert running.deviation() == pytest.approx(UNKNOWN_DIRECTION)
    single = RunningAngle((1,))
    single.add(np.array([20.0]))
    assert np.isnan(single.deviation()).all()


def test_error_of_a_value_holds_scatter_and_what_is_one_way():
    values = np.random.default_rng(6).normal([1000.0, 3.0], [2.0, 0.1], (24, 2))
    running = Running((2,))
    for each in values:
        running.add(each)
    expected = np.sqrt(np.mean((values - [1001.0, 3.0]) ** 2, axis=0))
    assert running.error_of(np.array([1001.0, 3.0])) == pytest.approx(expected, rel=1e-9)
    assert np.isnan(Running((1,)).error_of(np.zeros(1))).all()


@pytest.mark.parametrize("count", [4, 24])
@pytest.mark.parametrize("level", [0.5, 0.9])
def test_interval_about_draws_holds_the_truth_as_stated(count, level):
    """Truth 0; the draws have a mean with an error of its own, as large as their spread."""
    rng = np.random.default_rng(4)
    tally = SpreadTally(rng.normal(0.0, 1.0, 40_000))
    for _ in range(count):
        tally.add(tally.estimate + rng.normal(0.0, 1.0, 40_000))
    low, high = tally.spread().interval(level)
    held = np.mean((low <= 0.0) & (high >= 0.0))
    assert held == pytest.approx(level, abs=4.0 * stats.binom.std(40_000, level) / 40_000)


def spread(estimate, mean, deviation=0.5, angle=False):
    return Spread(
        np.array(estimate), np.array(mean), np.array(deviation), np.array(24, np.uint16), angle
    )


def test_estimate_errs_by_spread_and_shift():
    found = spread(12.0, 11.0, 0.75)
    assert found.shift == 1.0
    assert found.standard_error == 1.25
    low, high = found.interval(0.9)
    assert (low + high) / 2.0 == pytest.approx(11.0)
    half = stats.t.ppf(0.95, 23) * np.sqrt(1 + 1 / 24) * np.hypot(0.75, SHIFT_DOUBT * 1.0)
    assert high - low == pytest.approx(2 * half)
    assert found.interval(0.9, (10.9, 11.1)) == (10.9, 11.1)


def test_direction_is_taken_the_shorter_way_round():
    found = spread(1.0, 358.0, 4.0, angle=True)
    assert found.shift == 3.0
    assert found.standard_error == 5.0
    low, high = found.interval()
    assert low < 358.0 < 360.0 < high
    assert spread(0.0, 170.0, 100.0, angle=True).standard_error == UNKNOWN_DIRECTION


@pytest.mark.parametrize("level", [0.0, 1.0, 90.0, np.nan])
def test_refuses_a_level_that_is_none(level):
    with pytest.raises(SettingError):
        spread(1.0, 1.0).interval(level)
