"""Degree-days carried to cells, against sums day by day."""

import numpy as np
import pytest

from terrasol.errors import InputError, SettingError
from terrasol.practice import degree_days as dd
from terrasol.practice.temperatures import from_daily, from_monthly

RANDOM = np.random.default_rng(5)
DATES = np.arange(np.datetime64("2021-01-01"), np.datetime64("2022-01-01"))
MONTH = DATES.astype("M8[M]").astype(int) % 12 + 1
YEAR = 12.0 - 9.0 * np.cos(2 * np.pi * (np.arange(365) - 15) / 365) + RANDOM.normal(0, 3, 365)
SWING = RANDOM.uniform(4.0, 16.0, 365)
STATION = from_daily(DATES, height=400.0, least=YEAR - SWING / 2, highest=YEAR + SWING / 2)
HEIGHTS = np.array([[0.0, 400.0, 850.5], [1500.0, 4000.0, np.nan]])
NORTH, SOUTH = (4, 5, 6, 7, 8, 9, 10), (10, 11, 12, 1, 2, 3, 4)


def plain(values, height, months, lapse, base=10.0):
    """The definition: shift every day of the season, cut at the base, add up."""
    rates = np.broadcast_to(lapse, 12)
    total = 0.0
    for month, value in zip(MONTH, values, strict=True):
        if month in months:
            shifted = value - rates[month - 1] * (height - 400.0) / 1000.0
            total += max(0.0, shifted - base)
    return total


MONTHLY_LAPSE = [3.0, 4.0, 5.0, 6.0, 6.5, 7.0, 7.0, 7.0, 6.5, 5.0, 4.0, -2.0]


@pytest.mark.parametrize("lapse", [6.5, 0.0, -3.0, MONTHLY_LAPSE])
@pytest.mark.parametrize(("latitude", "months"), [(46.0, NORTH), (-46.0, SOUTH)])
def test_winkler_is_the_sum_day_by_day(lapse, latitude, months):
    got = dd.winkler(STATION, HEIGHTS, latitude=latitude, lapse=lapse)
    want = [[plain(YEAR, z, months, lapse) for z in row] for row in HEIGHTS[:, :2]]
    np.testing.assert_allclose(got[:, :2], want, rtol=1e-12, atol=1e-9)
    assert np.isnan(got[1, 2])
    assert got[0, 2] == pytest.approx(plain(YEAR, 850.5, months, lapse), rel=1e-12)


def test_season_and_base_are_the_users():
    got = dd.winkler(STATION, 400.0, latitude=46.0, season=[6, 7], base=14.5)
    assert got == pytest.approx(plain(YEAR, 400.0, (6, 7), 0.0, 14.5), rel=1e-12)


@pytest.mark.parametrize(
    ("latitude", "months", "factor"), [(46.0, NORTH[:-1], 1.04), (-47.0, SOUTH[:-1], 1.05)]
)
def test_huglin_is_the_sum_day_by_day(latitude, months, factor):
    got = dd.huglin(STATION, 700.0, latitude=latitude, lapse=6.0)
    terms = 0.5 * (YEAR + YEAR + SWING / 2)
    assert got == pytest.approx(factor * plain(terms, 700.0, months, 6.0), rel=1e-12)


def test_two_years_make_one_mean_season():
    dates = np.arange(np.datetime64("2021-01-01"), np.datetime64("2023-01-01"))
    both = from_daily(dates, height=400.0, mean=np.concatenate([YEAR, YEAR + 2.0]))
    warmer = from_daily(DATES, height=400.0, mean=YEAR + 2.0)
    one, two = (dd.winkler(s, 500.0, latitude=46.0) for s in (STATION, warmer))
    assert dd.winkler(both, 500.0, latitude=46.0) == pytest.approx(0.5 * (one + two), rel=1e-12)


def test_missing_days_count_as_the_mean_of_the_known():
    values = np.full(365, 15.0)
    values[np.isin(DATES, [np.datetime64("2021-07-03"), np.datetime64("2021-09-30")])] = np.nan
    got = dd.winkler(from_daily(DATES, height=0.0, mean=values), 0.0, latitude=46.0)
    assert got == pytest.approx(5.0 * 214, rel=1e-12)


def test_monthly_means_fall_short_by_about_what_is_estimated():
    mean = [YEAR[month == MONTH].mean() for month in range(1, 13)]
    monthly = from_monthly(mean, height=400.0)
    heights = np.array([400.0, 900.0, 1400.0])
    full = dd.winkler(STATION, heights, latitude=46.0)
    short = dd.winkler(monthly, heights, latitude=46.0)
    missing = dd.monthly_shortfall(monthly, heights, latitude=46.0, spread=3.0)
    # Days are spread by 3 K by the year made above, and by the season's course within a month.
    # Above: one random year leaves some tens of degree-days of scatter.
    assert (full >= short).all()
    assert (missing > 0.0).all()
    np.testing.assert_allclose(short + missing, full, atol=25.0)
    assert (np.abs(short + missing - full) < np.abs(short - full)).all()


def test_shortfall_has_the_limits_of_a_normal_spread():
    # At the base itself the mean of max(0, x) is s / sqrt(2 pi); far above it nothing is missed.
    at_base = from_monthly(np.full(12, 10.0), height=0.0)
    got = dd.monthly_shortfall(at_base, 0.0, latitude=46.0, season=[4], spread=2.0)
    assert got == pytest.approx(30.0 * 2.0 / np.sqrt(2.0 * np.pi), rel=1e-12)
    warm = from_monthly(np.full(12, 40.0), height=0.0)
    assert dd.monthly_shortfall(warm, 0.0, latitude=46.0) == pytest.approx(0.0, abs=1e-9)


def test_factor_of_huglin_by_band():
    # Edges belong below: 40 degrees exactly is 1.00, just beyond it 1.02.
    bands = [0.0, 40.0, 40.1, 42.0, 43.0, 45.0, 47.0, 48.1, 50.0]
    got = dd.huglin_factor(bands)
    assert got.tolist() == [1.0, 1.0, 1.02, 1.02, 1.03, 1.04, 1.05, 1.06, 1.06]
    assert dd.huglin_factor(np.negative(bands)).tolist() == got.tolist()


def test_factor_of_huglin_beyond_its_table_and_smooth():
    assert np.isnan(dd.huglin_factor([50.1, np.nan])).all()
    assert dd.huglin_factor(51.0, beyond="one") == 1.0
    assert dd.huglin_factor(51.0, beyond="held") == 1.06
    np.testing.assert_allclose(
        dd.huglin_factor([30.0, 40.0, 45.0, 50.0], smooth=True), [1.0, 1.0, 1.03, 1.06]
    )


def test_classes_have_their_names():
    values = [0.0, 850.0, 1110.9, 1111.0, 1388.9, 1389.0, 1700.0, 2000.0, 2699.0, 2700.0, np.nan]
    names = [*dd.WINKLER.names, "void"]
    got = [names[k] for k in dd.WINKLER.of(values)]
    assert got == [
        "below Ia", "Ia", "Ia", "Ib", "Ib", "II", "III", "IV", "V", "above V", "void",
    ]  # fmt: skip
    assert len(dd.HUGLIN.names) == len(dd.HUGLIN.edges) + 1
    assert dd.HUGLIN.names[int(dd.HUGLIN.of(2250.0))] == "temperate warm"


@pytest.mark.parametrize(
    "options",
    [{"lapse": 16.0}, {"lapse": [6.0] * 11}, {"lapse": np.nan}, {"season": []},
     {"season": [4, 4]}, {"season": [13]}],
)  # fmt: skip
def test_settings_out_of_range_are_refused(options):
    with pytest.raises(SettingError):
        dd.winkler(STATION, 400.0, latitude=46.0, **options)


def test_what_the_station_lacks_is_said():
    spring = from_daily(DATES[:150], height=0.0, mean=YEAR[:150])
    with pytest.raises(InputError, match="June"):
        dd.winkler(spring, 0.0, latitude=46.0)
    with pytest.raises(InputError, match="highest"):
        dd.huglin(from_daily(DATES, height=0.0, mean=YEAR), 0.0, latitude=46.0)
    with pytest.raises(SettingError, match="hemispheres"):
        dd.huglin(STATION, 0.0, latitude=[-1.0, 1.0])
    with pytest.raises(SettingError, match="beyond"):
        dd.huglin_factor(51.0, beyond="two")
    with pytest.raises(SettingError, match="spread"):
        dd.monthly_shortfall(STATION, 0.0, latitude=46.0, spread=0.0)
