"""Every minute of a day over made-up horizons: closed forms, the walk along the day, print."""

from datetime import date

import numpy as np
import pandas as pd
import pvlib
import pytest

from terrasol.light.days import Clock, Days, parse_clock, strip_days
from terrasol.light.irradiation import Strip
from terrasol.light.minutes import State, minute_states, plane_tangent, track

SOLAR = Clock("solar")
DAYS = (date(2025, 3, 20), date(2025, 6, 21), date(2025, 12, 21))
LATITUDE, LONGITUDE = 46.5, 10.6


def place(horizon=None, slope=0.0, aspect=0.0, latitude=LATITUDE, azimuths=360):
    """A cell under a horizon by azimuth, both in degrees."""
    rim = np.zeros(azimuths) if horizon is None else np.asarray(horizon, float)
    s, a = np.radians([slope, aspect])
    normal = np.array([np.sin(s) * np.sin(a), np.sin(s) * np.cos(a), np.cos(s)])
    return Strip(
        np.tan(np.radians(rim)).astype(np.float32).reshape(-1, 1, 1),
        normal.astype(np.float32).reshape(3, 1, 1),
        np.full((1, 1), 600.0, np.float32),
        0.0,
        (latitude, 0.0, 0.0),
        latitude,
    )


def states_of(strip, days=DAYS):
    return minute_states(strip, Days.over(days, LONGITUDE, SOLAR, strip.horizon.shape[0]))


def test_open_plain_has_sun_or_night():
    """The sun's minutes of a plain are its day: pvlib's sunrise and sunset after the SPA."""
    states = states_of(place())
    assert set(np.unique(states)) == {State.NIGHT, State.SUN}
    noons = pd.DatetimeIndex([pd.Timestamp(day, tz="UTC") + pd.Timedelta("12h") for day in DAYS])
    times = pvlib.solarposition.sun_rise_set_transit_spa(noons, LATITUDE, LONGITUDE)
    length = (times["sunset"] - times["sunrise"]).dt.total_seconds().to_numpy() / 60.0
    np.testing.assert_allclose((states == State.SUN).sum(axis=1), length, atol=2.0)


def test_wall_to_the_south_hides_the_winter_sun():
    """30 degrees high from east over south to west: above it in June, below it in December.

    At noon the sun stands at 90 - 46.5 +- 23.44 degrees: 66.9 and 20.1.
    """
    azimuth = np.arange(360.0)
    states = states_of(place(np.where((azimuth >= 90) & (azimuth <= 270), 30.0, 0.0)))
    noon = 720
    assert states[:, noon].tolist() == [State.SUN, State.SUN, State.TERRAIN]
    assert not (states[2] == State.SUN).any()
    assert states[1, 6 * 60 - 90] == State.SUN  # north of east, where there is no wall
    assert not (states == State.SLOPE).any()


def test_own_slope_hides_the_summer_sun_of_the_morning():
    """A south slope of 45 degrees sees no sun that stands north of its plane.

    The sun crosses the plane where tan(elevation) = cos(azimuth) tan(45): on the celestial
    sphere that is as on a plain 45 degrees farther south, at latitude 1.5 N, where day and
    night are equal but for minutes; the rest of a day in June is the slope's own shade.
    """
    states = states_of(place(slope=45.0, aspect=180.0))
    sun = (states == State.SUN).sum(axis=1)
    shade = (states == State.SLOPE).sum(axis=1)
    assert 12 * 60 - 10 < sun[1] < 12 * 60 + 15
    assert shade[1] > 3 * 60
    assert shade[2] == 0
    assert not (states == State.TERRAIN).any()
    assert states[1, 5 * 60] == State.SLOPE
    assert states[1, 7 * 60] == State.SUN


def test_own_slope_counts_before_other_ground():
    azimuth = np.arange(360.0)
    north_wall = np.where((azimuth < 90) | (azimuth > 270), 20.0, 0.0)
    states = states_of(place(north_wall, slope=45.0, aspect=180.0))
    assert states[1, 5 * 60] == State.SLOPE
    assert states_of(place(north_wall))[1, 5 * 60] == State.TERRAIN


@pytest.mark.parametrize(("slope", "aspect"), [(0.0, 0.0), (25.0, 80.0), (50.0, 350.0)])
def test_agrees_with_the_walk_along_the_day(slope, aspect):
    """Minutes in the sun against the exact crossings: half a minute for each."""
    rng = np.random.default_rng(3)
    rough = 12.0 + 10.0 * np.sin(np.radians(3 * np.arange(360.0))) + rng.uniform(0, 2, 360)
    strip = place(rough, slope, aspect)
    days = Days.over(DAYS, LONGITUDE, SOLAR, 360)
    states = minute_states(strip, days)
    shone = strip_days(strip, days)[2, :, 0, 0]
    crossings = np.count_nonzero(np.diff((states == State.SUN).astype(int), axis=1), axis=1)
    assert (np.abs((states == State.SUN).sum(axis=1) - shone) <= 1.0 + 0.7 * crossings).all()
    assert shone.max() > 100.0


def test_plane_rises_as_the_slope_does():
    """Up the fall line of a slope of 30 degrees the plane stands 30 degrees high."""
    normal = place(slope=30.0, aspect=120.0).normal[:, 0, 0]
    turn = np.radians([300.0, 30.0, 120.0])
    rise = np.degrees(np.arctan(plane_tangent(normal, np.sin(turn), np.cos(turn))))
    np.testing.assert_allclose(rise, [30.0, 0.0, -30.0], atol=1e-5)


def test_track_is_that_of_the_spa():
    """Against pvlib's SPA, minute by minute on the clock of +01:00."""
    day = date(2025, 5, 10)
    found = track(day, LATITUDE, LONGITUDE, 600.0, parse_clock("+01:00"))
    times = pd.Timestamp(day, tz="UTC") + pd.to_timedelta(found.clock - 1.0, unit="h")
    sun = pvlib.solarposition.get_solarposition(times, LATITUDE, LONGITUDE, 600.0)
    np.testing.assert_allclose(found.azimuth, sun["azimuth"], atol=0.02)
    high = found.elevation > 3.0  # lower, refraction depends on air that each assumes
    np.testing.assert_allclose(found.elevation[high], sun["apparent_elevation"][high], atol=0.02)
    assert found.solar[0] < 12.0 < found.solar[-1]


def test_track_of_polar_night_is_empty():
    assert track(date(2025, 12, 21), 75.0, 15.0, 0.0, SOLAR).azimuth.size == 0
