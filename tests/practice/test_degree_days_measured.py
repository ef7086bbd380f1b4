"""Degree-days from a measured station: daily extremes, daily means and monthly means.

Daily table of Sedgwick Reserve, Santa Ynez valley, California, January 2016 to September 2018
(CC0, repository sedgwickenv). TERRASOL_SEDGWICK_DATA names the folder; nothing of it is kept.
"""

import os
from pathlib import Path

import numpy as np
import pytest

from terrasol.errors import InputError
from terrasol.practice.degree_days import WINKLER, monthly_shortfall, winkler
from terrasol.practice.temperatures import from_daily, from_monthly

pytestmark = pytest.mark.heavy

HEIGHTS = np.array([380.0, 880.0, 1380.0])  # the station's, about, and cooler ground above
PLACE = {"latitude": 34.7}


@pytest.fixture(scope="module")
def days():
    """Dates with mean, highest and least temperature [degC], NaN where the station failed."""
    path = Path(os.environ.get("TERRASOL_SEDGWICK_DATA", "")) / "daily_weather_2016_to_2018.txt"
    if not path.is_file():
        pytest.skip("TERRASOL_SEDGWICK_DATA does not name the folder of Sedgwick's data")
    words = [line.split() for line in path.read_text().splitlines()]
    words = [row for row in words if len(row) == 21 and row[0].count("/") == 2]
    dates = [f"{row[0][6:]}-{row[0][:2]}-{row[0][3:5]}" for row in words]
    values = np.array([[float(row[k]) for k in (8, 9, 10)] for row in words])
    values[(values < -50.0).any(axis=1)] = np.nan
    return np.array(dates, "M8[D]"), *values.T


def monthly(station):
    """Twelve means of a station's days."""
    means = [station.mean[station.month == month].mean() for month in range(1, 13)]
    return from_monthly(means, height=station.height)


def test_a_month_with_a_week_missing_is_not_made_up(days):
    dates, _, high, low = days
    assert (np.isnan(high) & (dates.astype("M8[M]") == np.datetime64("2016-08"))).sum() == 8
    year = dates < np.datetime64("2017-01-01")
    station = from_daily(dates[year], height=380.0, least=low[year], highest=high[year])
    with pytest.raises(InputError, match="August"):
        winkler(station, 380.0, **PLACE)


@pytest.mark.parametrize("first", ["2017-01-01", "2016-01-01"])
def test_what_monthly_means_miss_is_estimated_to_a_few_percent(days, first):
    dates, _, high, low = days
    part = (dates >= np.datetime64(first)) & (
        (first[:4] == "2016") | (dates < np.datetime64("2018"))
    )
    station = from_daily(dates[part], height=380.0, least=low[part], highest=high[part])
    full = winkler(station, HEIGHTS, **PLACE)
    short = winkler(monthly(station), HEIGHTS, **PLACE)
    better = short + monthly_shortfall(monthly(station), HEIGHTS, **PLACE)
    assert WINKLER.names[int(WINKLER.of(full[0]))] == "IV"
    assert (short / full - 1.0)[2] < -0.09
    np.testing.assert_allclose(better, full, rtol=0.04)


def test_daily_means_come_out_a_region_cooler_than_half_of_the_extremes(days):
    # At this station the mean of all hours lies below the middle between the extremes.
    dates, mean, high, low = days
    extremes = winkler(from_daily(dates, height=380.0, least=low, highest=high), 380.0, **PLACE)
    means = winkler(from_daily(dates, height=380.0, mean=mean), 380.0, **PLACE)
    assert means / extremes == pytest.approx(0.915, abs=0.01)
    regions = [WINKLER.names[int(WINKLER.of(value))] for value in (extremes, means)]
    assert regions == ["IV", "III"]
