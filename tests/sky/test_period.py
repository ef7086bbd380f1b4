import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from terrasol.errors import SettingError
from terrasol.sky.period import parse_period
from terrasol.sky.sun import sun_path


def days_of(text):
    period = parse_period(text)
    return str(period.start), str(period.end), period.days


@pytest.mark.parametrize("text", [None, "typical", " Typical "])
def test_typical_year(text):
    period = parse_period(text)
    assert period.label == "typical year"
    assert period.typical
    assert period.whole_year
    assert period.days == 365
    assert [month for _, month in period.months] == list(range(1, 13))


def test_typical_sun_is_near_the_middle_of_the_leap_cycle():
    """The claim of TYPICAL_SUN_YEAR: both equinoxes within 3 h of the mean of 2024 to 2027."""
    for month in (3, 9):
        hours = {}
        for year in range(2024, 2028):
            path = sun_path(parse_period(f"{year}-{month:02d}"), 0.0, 60.0)
            hours[year] = np.flatnonzero(np.diff(np.sign(path.declination)))[0] / 60.0
        assert abs(hours[2025] - np.mean(list(hours.values()))) < 3.0


def test_year_month_day():
    assert days_of("2025") == ("2025-01-01T00:00:00", "2026-01-01T00:00:00", 365)
    assert days_of("2024") == ("2024-01-01T00:00:00", "2025-01-01T00:00:00", 366)
    assert days_of("2025-12") == ("2025-12-01T00:00:00", "2026-01-01T00:00:00", 31)
    assert days_of("2024-02-29") == ("2024-02-29T00:00:00", "2024-03-01T00:00:00", 1)


def test_range_includes_both_days():
    period = parse_period("2025-04-01/2025-10-31")
    assert (str(period.start), str(period.end)) == ("2025-04-01T00:00:00", "2025-11-01T00:00:00")
    assert period.days == 214
    assert period.months == tuple((2025, m) for m in range(4, 11))
    assert period.label == "2025-04-01/2025-10-31"
    assert not period.whole_year
    assert not period.typical


def test_range_of_months_and_across_new_year():
    period = parse_period("2024-11/2025-02")
    assert period.label == "2024-11-01/2025-02-28"
    assert period.months == ((2024, 11), (2024, 12), (2025, 1), (2025, 2))


def test_whole_year_is_exactly_one_calendar_year():
    assert parse_period("2024").whole_year
    assert parse_period("2025-01-01/2025-12-31").whole_year
    assert not parse_period("2025-01-01/2025-12-30").whole_year
    assert not parse_period("2025-07-01/2026-06-30").whole_year
    assert not parse_period("2024/2025").whole_year


def test_first_and_last_year_and_longest():
    assert parse_period("1900").days == 365  # 1900 had no 29 February
    assert parse_period("2100").days == 365
    assert parse_period("2020/2029").days == 3653


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "not understood"),
        ("   ", "not understood"),
        ("summer", "not understood"),
        ("25", "not understood"),
        ("2025-4", "not understood"),
        ("2025-04-01T12", "not understood"),
        ("04/2025", "not understood"),
        ("2025-04-01/", "not understood"),
        ("/", "not understood"),
        ("٢٠٢٥", "not understood"),
        ("2025/2026/2027", "more than two ends"),
        ("2025-13", "no calendar"),
        ("2025-00", "no calendar"),
        ("2025-02-29", "no calendar"),
        ("2025-04-00", "no calendar"),
        ("2025-10-31/2025-04-01", "ends before it starts"),
        ("2026/2025", "ends before it starts"),
        ("1899", "1900 to 2100"),
        ("2101-01", "1900 to 2100"),
        ("2020/2030", "longer than 10 years"),
        ("2020-01-01/2030-01-01", "longer than 10 years"),
    ],
)
def test_refused_with_a_sentence(text, words):
    with pytest.raises(SettingError, match=words) as error:
        parse_period(text)
    assert "\n" not in str(error.value)


@settings(deadline=None)
@given(
    st.dates(np.datetime64("1900-01-01").item(), np.datetime64("2100-12-31").item()),
    st.integers(0, 3650),
)
def test_any_range_tiles_its_months(first, length):
    last = np.datetime64(first) + length
    if last > np.datetime64("2100-12-31"):
        return
    period = parse_period(f"{first}/{last}")
    assert period.days == length + 1
    assert period.months[0] == (first.year, first.month)
    numbers = [12 * year + month for year, month in period.months]
    assert numbers == list(range(numbers[0], numbers[0] + len(numbers)))
    assert period.months[-1] == (last.item().year, last.item().month)
