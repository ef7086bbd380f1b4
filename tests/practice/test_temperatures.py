"""A station's temperatures from hours, days and months."""

import numpy as np
import pytest

from terrasol.errors import InputError
from terrasol.practice.temperatures import MEAN_MONTH, from_daily, from_hourly, from_monthly


def days(first, last):
    return np.arange(np.datetime64(first), np.datetime64(last) + 1)


def test_mean_is_half_of_the_extremes_where_both_are_given():
    got = from_daily(days("2021-04-01", "2021-04-30"), height=10, mean=np.full(30, 99.0),
                     least=np.full(30, 2.0), highest=np.full(30, 20.0))  # fmt: skip
    assert set(got.mean) == {11.0}
    assert set(got.highest) == {20.0}
    assert got.basis == "the middle of daily extremes"
    assert (
        from_daily(days("2021-04-01", "2021-04-30"), height=10, mean=np.full(30, 9.0)).mean[0] == 9
    )


def test_months_known_too_little_are_dropped_and_their_length_with_them():
    dates = days("2023-02-01", "2024-04-10")
    got = from_daily(dates, height=0.0, mean=np.ones(dates.size))
    assert np.unique(got.month).size == 12
    assert got.month_days[1] == 28.5
    assert (got.month == 4).sum() == 30
    values = np.ones(30)
    values[:7] = np.nan
    with pytest.raises(InputError, match="April"):
        from_daily(days("2021-04-01", "2021-04-30"), height=0.0, mean=values).of_month(4)
    values[:1] = 1.0
    known = from_daily(days("2021-04-01", "2021-04-30"), height=0.0, mean=values)
    assert known.of_month(4).sum() == 24


def test_hours_give_the_extremes_of_solar_days():
    # At 90 degrees east the day begins six hours before that of UTC: a cold hour at 19:00 UTC on
    # the 1st belongs to the 2nd.
    time = np.arange(
        np.datetime64("2021-06-30T18:30:00"), np.datetime64("2021-07-31T18:30:00"), 3600
    )
    value = np.full(time.size, 20.0)
    value[time == np.datetime64("2021-07-01T19:30:00")] = 4.0
    value[time == np.datetime64("2021-07-04T09:30:00")] = 30.0
    got = from_hourly(time, value, height=300.0, longitude=90.0)
    assert got.mean.size == 31
    assert np.flatnonzero(got.mean == 12.0).tolist() == [1]
    assert np.flatnonzero(got.highest == 30.0).tolist() == [3]
    assert got.mean[3] == 25.0
    shuffled = np.random.default_rng(3).permutation(time.size)
    again = from_hourly(time[shuffled], value[shuffled], height=300.0, longitude=90.0)
    assert again.mean.tolist() == got.mean.tolist()


def test_days_with_too_few_hours_are_missing():
    time = np.arange(np.datetime64("2021-07-01T00:30:00"), np.datetime64("2021-08-01"), 3600)
    value = np.full(time.size, 20.0)
    value[24:30] = np.nan
    assert from_hourly(time, value, height=0.0, longitude=0.0).mean.size == 30
    value[24:26] = 20.0
    assert from_hourly(time, value, height=0.0, longitude=0.0).mean.size == 31


def test_months_keep_what_is_known():
    mean = np.full(12, np.nan)
    mean[3:10] = 12.0
    got = from_monthly(mean, height=5.0)
    assert got.month.tolist() == list(range(4, 11))
    assert got.month_days.tolist() == list(MEAN_MONTH)
    with pytest.raises(InputError, match="March"):
        got.of_month(3)


JULY = days("2021-07-01", "2021-07-31")


@pytest.mark.parametrize(
    ("make", "match"),
    [
        (lambda: from_daily(JULY, height=0.0), "mean, or both"),
        (lambda: from_daily(JULY, height=0.0, least=np.ones(31)), "mean, or both"),
        (lambda: from_daily(JULY, height=0.0, mean=np.ones(30)), "differ in number"),
        (lambda: from_daily([JULY[0]] * 2, height=0.0, mean=[1, 2]), "repeat"),
        (lambda: from_daily(JULY, height=0.0, least=np.ones(31), highest=np.zeros(31)),
         "2021-07-01 the least"),
        (lambda: from_monthly(np.ones(11), height=0.0), "twelve"),
        (lambda: from_hourly(JULY, np.ones(31), height=0.0, longitude=0.0), "24 h is no hourly"),
        (lambda: from_hourly(JULY[:1], [1.0], height=0.0, longitude=0.0), "two values"),
    ],
)  # fmt: skip
def test_what_cannot_be_used_is_refused(make, match):
    with pytest.raises(InputError, match=match):
        make()
