"""Hours of sun over made-up horizons, against looking every few seconds and against print."""

from datetime import date

import numpy as np
import pandas as pd
import pvlib
import pytest
from reference.plain_hours import plain_day

from terrasol.errors import SettingError
from terrasol.light.days import Days, parse_clock, parse_days, strip_days
from terrasol.light.hours import HoursSettings, TimeTables, limb_above_edge, strip_hours
from terrasol.light.irradiation import Strip
from terrasol.sky.clear import Air
from terrasol.sky.period import parse_period

AIR = Air.ineichen(3.0)
MINUTE = 1.0 / 60.0


def settings(days=(), period="2025", azimuths=64):
    period = parse_period(period)
    return HoursSettings(period, AIR, parse_days(days, period), azimuths=azimuths)


def one_cell(horizon, latitude, slope=0.0, aspect=0.0, azimuths=64, height=0.0, away=0.0):
    """A cell under a horizon given as a function of azimuth, both in degrees."""
    rim = np.maximum(horizon(360.0 * np.arange(azimuths) / azimuths), 0.0)
    s, a = np.radians([slope, aspect])
    normal = np.array([np.sin(s) * np.sin(a), np.sin(s) * np.cos(a), np.cos(s)])
    return Strip(
        np.tan(np.radians(rim)).astype(np.float32).reshape(-1, 1, 1),
        normal.astype(np.float32).reshape(3, 1, 1),
        np.full((1, 1), height, np.float32),
        0.0,
        (latitude + away, 0.0, 0.0),
        latitude,
    )


def level(azimuth):
    return np.zeros_like(azimuth)


def wall(distance=1.0, height=0.5, towards=150.0):
    """An endless straight wall: tan h = height / distance cos(azimuth - towards)."""

    def horizon(azimuth):
        facing = np.cos(np.radians(azimuth - towards))
        return np.degrees(np.arctan(np.maximum(height / distance * facing, 0.0)))

    return horizon


def pit(offset=0.5, depth=0.4):
    """A round pit of radius 1 seen from its floor, `offset` east of the middle."""

    def horizon(azimuth):
        turn = np.radians(azimuth)
        reach = np.sqrt(1.0 - (offset * np.cos(turn)) ** 2) - offset * np.sin(turn)
        return np.degrees(np.arctan(depth / reach))

    return horizon


def cone(distance=2.0, height=1.2, towards=190.0):
    """A cone of base radius 1: on a ray that leaves the apex `b` aside, the greatest
    (height (1 - r)) / s with r = sqrt(b^2 + (s - a)^2), looked for over many s."""

    def horizon(azimuth):
        turn = np.radians(np.atleast_1d(azimuth) - towards)
        along, aside = distance * np.cos(turn), distance * np.sin(turn)
        s = np.linspace(distance - 1.0, distance + 1.0, 801)
        r = np.hypot(aside[:, None], s - along[:, None])
        return np.degrees(np.arctan(np.maximum(height * (1.0 - r) / s, 0.0).max(axis=1)))

    return horizon


def poles(azimuth):
    """Four thin ridges that the sun goes behind, one after the other."""
    return np.maximum(0.0, 60.0 - 8.0 * np.min(
        [np.abs(azimuth - towards) for towards in (120.0, 150.0, 210.0, 240.0)], axis=0
    ))  # fmt: skip


def walked(strip, when, azimuths, clock="solar", longitude=9.0):
    chosen = parse_days(when, parse_period("2025"))
    days = Days.over(chosen, longitude, parse_clock(clock), azimuths)
    first, last, hours, gaps = strip_days(strip, days)[:, 0]
    told = [float(days.on_clock(t[None])[0, 0, 0]) for t in (first, last)]
    return *told, float(hours[0, 0]) / 60.0, float(gaps[0, 0])


PLACES = [(46.5, "2025-03-21"), (46.5, "2025-12-21"), (-33.0, "2025-06-21"), (0.1, "2025-09-10")]


@pytest.mark.parametrize(("latitude", "day"), PLACES)
@pytest.mark.parametrize(
    ("horizon", "azimuths"),
    [(wall(), 64), (wall(towards=280.0), 64), (pit(), 64), (pit(-0.7, 0.9), 128), (cone(), 360),
     (cone(1.4, 2.0, 100.0), 360), (cone(1.4, 2.0, 350.0), 360)],
)  # fmt: skip
@pytest.mark.parametrize(("slope", "aspect"), [(0.0, 0.0), (35.0, 80.0), (50.0, 200.0)])
def test_first_and_last_sun_to_the_minute(latitude, day, horizon, azimuths, slope, aspect):
    first, last, hours, gaps = plain_day(day, latitude, 9.0, horizon, slope, aspect)
    cell = one_cell(horizon, latitude, slope, aspect, azimuths)
    found = walked(cell, day, azimuths)
    assert found[:2] == pytest.approx((first, last), abs=MINUTE, nan_ok=True)
    assert found[2] == pytest.approx(hours, abs=2 * MINUTE)
    if not np.isnan(first) and all(abs(gap - 1.0) > 1.0 for gap in gaps):
        assert found[3] == sum(gap > 1.0 for gap in gaps)


@pytest.mark.parametrize(("day", "count"), [("2025-03-21", 4), ("2025-12-21", 2)])
def test_interruptions_are_counted(day, count):
    first, last, hours, gaps = plain_day(day, 46.5, 9.0, poles)
    assert len(gaps) == count
    found = walked(one_cell(poles, 46.5, azimuths=720), day, 720)
    assert found[3] == count
    assert found[:2] == pytest.approx((first, last), abs=MINUTE)
    assert found[2] == pytest.approx(hours, abs=4 * MINUTE)


# Sunrise and sunset in universal time, Reda and Andreas (2008), NREL/TP-560-34302, table A2.1,
# and of the worked example, table A5.1 (17 October 2003, zone -7 h). That example works by the
# day of universal time, so its sunset, 00:20:19 UT, is that of 16 October in the zone.
SPA = [
    (-35.0, 0.0, "1996-07-05", "+00:00", "07:08:15", "17:01:04"),
    (35.0, 0.0, "1994-01-02", "+00:00", "07:08:12", "16:59:55"),
    (-35.0, 0.0, "2004-12-04", "+00:00", "04:38:57", "19:02:02"),
    (39.742476, -105.1786, "2003-10-17", "-07:00", "06:12:43", None),
    (39.742476, -105.1786, "2003-10-16", "-07:00", None, "17:20:19"),
]


@pytest.mark.parametrize(("latitude", "longitude", "day", "zone", "rise", "set_"), SPA)
def test_sunrise_and_sunset_in_print(latitude, longitude, day, zone, rise, set_):
    found = walked(one_cell(level, latitude), day, 64, zone, longitude)
    for told, want in zip(found, (rise, set_), strict=False):
        if want:
            assert 3600.0 * told == pytest.approx(pd.Timedelta(want).total_seconds(), abs=5.0)


@pytest.mark.parametrize("latitude", [0.0, 46.5, -46.5, 62.0, 80.0])
def test_a_year_on_level_ground_is_the_sum_of_its_days(latitude):
    """Day lengths of the SPA through pvlib, midnight sun as 24 h."""
    noons = pd.date_range("2025-01-01 12:00", periods=365, tz="UTC")
    spa = pvlib.solarposition.sun_rise_set_transit_spa(noons, latitude, 0.0)
    length = (spa["sunset"] - spa["sunrise"]).dt.total_seconds() / 3600.0
    height = pvlib.solarposition.get_solarposition(noons, latitude, 0.0)["elevation"].to_numpy()
    length = np.where(spa["sunrise"].isna(), np.where(height > 0.0, 24.0, 0.0), length)
    tables = TimeTables.over(settings(), 0.0, (latitude, latitude + 0.1), (0.0, 0.0))
    for i in range(tables.latitudes.size):
        tables.fill(i)
    for shift in (0.0, 0.003):
        sun, bright = strip_hours(one_cell(level, latitude, away=shift), tables)[:, :, 0, 0]
        assert sun.sum() == pytest.approx(length.sum(), abs=0.3)
        assert (bright <= sun + 0.02).all()
        assert 0.0 < bright.sum() < sun.sum()


def test_cells_beside_the_latitude_of_the_path():
    """A cell a tenth of a degree away is tilted; it must get its own sunrise."""
    for away in (-0.1, 0.05, 0.1):
        near = walked(one_cell(wall(), 60.0, 20.0, 90.0, away=away), "2025-05-21", 64)
        own = walked(one_cell(wall(), 60.0 + away, 20.0, 90.0), "2025-05-21", 64)
        assert near == pytest.approx(own, abs=0.1 * MINUTE)
        flat = walked(one_cell(level, 60.0, away=away), "2025-12-21", 64)
        own = walked(one_cell(level, 60.0 + away), "2025-12-21", 64)
        assert flat == pytest.approx(own, abs=0.1 * MINUTE)
        assert abs(own[0] - walked(one_cell(level, 60.0), "2025-12-21", 64)[0]) > 0.3 * MINUTE


def test_polar_day_and_night():
    assert walked(one_cell(level, 75.0), "2025-06-21", 64) == (0.0, 24.0, 24.0, 0.0)
    assert walked(one_cell(level, -75.0), "2025-12-21", 64) == (0.0, 24.0, 24.0, 0.0)
    night = walked(one_cell(level, 75.0), "2025-12-21", 64)
    assert np.isnan(night[[0, 1, 3][0]])
    assert night[2] == 0.0
    assert np.isnan(night[1])
    assert np.isnan(night[3])


def test_midnight_sun_behind_a_northern_wall():
    """The wall hides the sun around midnight: first sun after it, last before, nothing between."""
    first, last, hours, gaps = walked(one_cell(wall(towards=0.0), 75.0), "2025-06-21", 64)
    assert 0.0 < first < last < 24.0
    assert first == pytest.approx(24.0 - last, abs=MINUTE)
    assert hours == pytest.approx(last - first)
    assert gaps == 0.0


def test_void_is_void():
    cell = one_cell(level, 46.0)
    cell.normal[:] = np.nan
    cell.heights[:] = np.nan
    assert np.isnan(walked(cell, "2025-06-21", 64)).all()
    tables = TimeTables.over(settings(period="2025-06-21"), 0.0, (46.0, 46.0), (0.0, 0.0))
    for i in range(tables.latitudes.size):
        tables.fill(i)
    assert np.isnan(strip_hours(cell, tables)).all()


def test_the_days_of_a_month_sum_to_the_month():
    """Table and walk are two ways to one number."""
    for horizon, slope, aspect in ((pit(0.2), 20.0, 330.0), (cone(1.4), 30.0, 60.0)):
        cell = one_cell(horizon, 46.5, slope, aspect, azimuths=360)
        chosen = settings("2025-04", period="2025-04", azimuths=360)
        days = Days.over(chosen.days, 9.0, chosen.clock, 360)
        daily = strip_days(cell, days)[2, :, 0, 0] / 60.0
        tables = TimeTables.over(chosen, 9.0, (46.5, 46.5), (0.0, 0.0))
        for i in range(tables.latitudes.size):
            tables.fill(i)
        assert strip_hours(cell, tables)[0, 0, 0, 0] == pytest.approx(daily.sum(), rel=3e-3)


# Clocks


def test_clocks_tell_one_moment():
    """Bern: 7.44 east, so clock less true solar time is 1 h - 29.8 min - equation of time."""
    cell = one_cell(level, 46.95)
    solar = walked(cell, "2025-11-03", 64, "solar", 7.44)
    winter = walked(cell, "2025-11-03", 64, "+01:00", 7.44)
    zone = walked(cell, "2025-11-03", 64, "Europe/Zurich", 7.44)
    assert winter == zone
    # the equation of time on 3 November is +16.4 min (Meeus 1998, chapter 28; memory)
    assert 60.0 * (winter[0] - solar[0]) == pytest.approx(60.0 - 29.76 - 16.4, abs=0.1)
    summer = walked(cell, "2025-06-21", 64, "Europe/Zurich", 7.44)
    fixed = walked(cell, "2025-06-21", 64, "+01:00", 7.44)
    assert summer[0] - fixed[0] == pytest.approx(1.0, abs=1e-5)


def test_noon_of_the_day_falls_on_its_date_whatever_the_clock():
    for longitude, clock in (
        (179.9, "+12:00"), (-179.9, "+12:00"), (179.9, "-11:00"), (175.0, "UTC"), (-175.0, "UTC"),
    ):  # fmt: skip
        first, last, *_ = walked(one_cell(level, -17.0), "2025-03-21", 64, clock, longitude)
        assert 0.0 <= (first + last) / 2.0 < 24.0
        assert last - first == pytest.approx(12.1, abs=0.1)


def test_the_date_line_is_no_edge():
    """With one zone, a step of 0.2 degrees over the line moves the sun by 0.8 min."""
    west = walked(one_cell(level, -17.0), "2025-03-21", 64, "+12:00", 179.9)
    east = walked(one_cell(level, -17.0), "2025-03-21", 64, "+12:00", -179.9)
    assert 60.0 * (west[0] - east[0]) == pytest.approx(0.8, abs=0.05)


@pytest.mark.parametrize("text", ["Mars/Olympus", "+1", "25:00", "+15:00", "", "Europe", "../x"])
def test_unknown_clocks_are_refused(text):
    with pytest.raises(SettingError, match="clock"):
        parse_clock(text)


def test_days_by_default_are_the_21st():
    year = parse_period(None)
    assert parse_days(None, year) == tuple(date(2025, m, 21) for m in range(1, 13))
    assert parse_days(None, parse_period("2025-04-02/2025-04-20")) == (date(2025, 4, 2),)
    assert parse_days("none", year) == parse_days((), year) == ()
    assert parse_days("2024-02,2025-06-21", year)[-2:] == (date(2024, 2, 29), date(2025, 6, 21))


@pytest.mark.parametrize(
    ("text", "words"),
    [("2025-06-31", "no calendar"), ("21 June", "not understood"), ("2025,2026", "at most 366"),
     ("2025-06-21,2025-06", "2025-06-21 is given twice"), ("2025-06-21,", "not understood")],
)  # fmt: skip
def test_wrong_days_are_refused(text, words):
    with pytest.raises(SettingError, match=words):
        parse_days(text, parse_period("2025"))


# Bright sunshine


def test_edge_of_bright_sunshine():
    """Half the disc carries half the beam; 120 W m-2 itself is not over 120."""
    need = limb_above_edge(np.array([0.0, 120.0, 120.001, 240.0, 1e5]))
    assert np.isinf(need[:2]).all()
    assert need[2:] == pytest.approx([1.0, 0.0, -1.0], abs=0.05)


def test_bright_hours_are_those_of_the_beam():
    """On level ground: the minutes whose beam passes 120 W m-2, half a disc at the least."""
    from terrasol.sky.clear import clear_sky
    from terrasol.sky.sun import sun_path, sun_series

    chosen = settings(period="2025-09")
    tables = TimeTables.over(chosen, 9.0, (46.0, 47.0), (0.0, 0.0))
    for i in range(tables.latitudes.size):
        tables.fill(i)
    sun = sun_series(sun_path(chosen.period, 9.0), 46.0, 0.0)
    beam = clear_sky(sun, AIR, 0.0).beam_normal
    bright = strip_hours(one_cell(level, 46.0), tables)[1].sum()
    assert bright == pytest.approx((beam > 120.0).sum() / 60.0, abs=0.1)
