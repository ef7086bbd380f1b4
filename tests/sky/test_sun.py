import numpy as np
import pandas as pd
import pvlib
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from terrasol.errors import SettingError
from terrasol.sky.period import parse_period
from terrasol.sky.sun import (
    horizontal_position,
    incidence_cosine,
    refraction,
    sun_path,
    sun_series,
    unit_vector,
)

PLACES = [
    # latitude, longitude, height, period
    (46.5, 8.0, 1500.0, "2025"),
    (-33.9, 151.2, 0.0, "2024"),
    (89.99, 0.0, 0.0, "2025"),
    (90.0, 30.0, 0.0, "2030"),
    (-90.0, 0.0, 2800.0, "2023"),
    (0.0, 180.0, 0.0, "1950"),
    (65.0, -180.0, 0.0, "2099"),
    (69.6, 18.9, 0.0, "1901-06"),
    (23.4, -100.0, 4000.0, None),
    (-16.5, -68.2, 3800.0, "2025-12-31"),
]


@pytest.mark.parametrize(("latitude", "longitude", "height", "period"), PLACES)
def test_agrees_with_the_full_algorithm(latitude, longitude, height, period):
    """Against pvlib's whole SPA at 1,000 of our steps: 1e-4 degree, in truth 1e-6.

    The azimuth is compared along the arc, and on its own unless the sun is at the zenith.
    """
    series = sun_series(sun_path(parse_period(period), longitude), latitude, height)
    some = np.random.default_rng(5).integers(0, series.time.size, 1000)
    time = pd.DatetimeIndex(series.time[some]).tz_localize("UTC")
    full = pvlib.solarposition.spa_python(
        time,
        latitude,
        longitude,
        altitude=height,
        pressure=pvlib.atmosphere.alt2pres(height),
        temperature=15.0 - 0.0065 * height,
        delta_t=None,
    )
    distance = pvlib.solarposition.nrel_earthsun_distance(time, delta_t=None)
    turn = (series.azimuth[some] - full["azimuth"].to_numpy() + 180.0) % 360.0 - 180.0
    lift = series.elevation[some] - full["apparent_elevation"].to_numpy()
    assert np.abs(lift).max() < 3e-6
    assert np.abs(turn).max() < 1e-4
    assert np.abs(turn * np.cos(np.radians(series.elevation[some]))).max() < 3e-6
    np.testing.assert_allclose(series.distance[some], distance, rtol=0, atol=1e-8)


@pytest.mark.parametrize("longitude", [0.0, -105.1786, 180.0, 7.123456789])
@pytest.mark.parametrize("step", [1.0, 7.5, 60.0, 3600.0])
def test_steps_tile_the_period(longitude, step):
    """Midpoints half a step inside each end, and one step apart."""
    period = parse_period("2024-02-28/2024-03-01")
    path = sun_path(period, longitude, step)
    shift = longitude * 240.0
    to_seconds = np.timedelta64(1, "ns") / np.timedelta64(1, "s")
    local = (path.time - period.start.astype("M8[ns]")).astype(np.float64) * to_seconds + shift
    assert path.time.size * step == period.days * 86400
    expected = (np.arange(path.time.size) + 0.5) * step
    np.testing.assert_allclose(local, expected, rtol=0, atol=2e-9)


@pytest.mark.parametrize("step", [0.0, -60.0, 0.5, 7.0, 59.0, 7200.0, float("nan"), float("inf")])
def test_step_must_divide_a_day(step):
    with pytest.raises(SettingError, match="step"):
        sun_path(parse_period("2025-04-01"), 0.0, step)


@pytest.mark.parametrize("longitude", [180.1, -200.0, float("nan")])
def test_longitude_must_be_on_the_globe(longitude):
    with pytest.raises(SettingError, match="longitude"):
        sun_path(parse_period("2025-04-01"), longitude)


@pytest.mark.parametrize("latitude", [90.1, -91.0, float("nan")])
def test_latitude_must_be_on_the_globe(latitude):
    with pytest.raises(SettingError, match="latitude"):
        sun_series(sun_path(parse_period("2025-04-01"), 0.0), latitude)


def test_months_follow_the_local_calendar_in_a_leap_year():
    path = sun_path(parse_period("2023-12/2024-03"), 150.0, 3600.0)
    assert np.bincount(path.month).tolist() == [31 * 24, 31 * 24, 29 * 24, 31 * 24]
    assert path.month.dtype == np.int16
    assert path.time[0] == np.datetime64("2023-11-30T14:30")


def test_noon_is_in_the_middle_of_the_day():
    """Hour angle and mean time differ by the equation of time: -14.3 to +16.5 min in a year."""
    path = sun_path(parse_period("2025"), -70.0, 60.0)
    mean_time = (np.arange(path.time.size) % 1440 + 0.5) / 60.0
    minutes = 60.0 * (12.0 + path.hour_angle / 15.0 - mean_time)
    assert -14.4 < minutes.min() < -14.1
    assert 16.3 < minutes.max() < 16.6


def test_polar_day_and_night():
    summer = sun_series(sun_path(parse_period("2025-06"), 20.0), 80.0)
    winter = sun_series(sun_path(parse_period("2025-12"), 20.0), 80.0)
    assert summer.time.size == 30 * 1440
    assert summer.elevation.min() > 10.0
    assert winter.time.size == 0
    assert winter.elevation.shape == winter.month.shape == winter.distance.shape == (0,)


def test_equator_has_half_a_day_of_sun():
    """12 h and the few minutes that refraction and the disc's lower half add."""
    series = sun_series(sun_path(parse_period("2025"), 0.0), 0.0)
    hours = series.time.size / 60.0 / 365.0
    assert 12.0 < hours < 12.15


def test_only_the_sun_above_the_horizon_is_kept():
    """Down to -0.3 degree: thin air at 4,000 m lifts the sun so little that it gets there."""
    series = sun_series(sun_path(parse_period("2025-03"), 10.0), 50.0, 4000.0)
    assert -0.3 < series.elevation.min() < -0.28


def test_date_line_is_no_seam():
    """2 June at 180 E and 1 June at 180 W are the same day of the same place."""
    east = sun_series(sun_path(parse_period("2025-06-02"), 180.0), -17.0)
    west = sun_series(sun_path(parse_period("2025-06-01"), -180.0), -17.0)
    np.testing.assert_array_equal(east.time, west.time)
    np.testing.assert_allclose(east.elevation, west.elevation, rtol=0, atol=1e-6)
    np.testing.assert_allclose(east.azimuth, west.azimuth, rtol=0, atol=1e-6)


def test_seasons_turn_over_the_equator():
    path = sun_path(parse_period("2025-12-21"), 0.0)
    south, north = sun_series(path, -45.0), sun_series(path, 45.0)
    assert south.time.size > 1.7 * north.time.size
    high = south.elevation.argmax()
    assert south.elevation[high] == pytest.approx(45.0 + 23.44, abs=0.02)
    assert min(south.azimuth[high], 360.0 - south.azimuth[high]) < 1.0
    assert north.azimuth[north.elevation.argmax()] == pytest.approx(180.0, abs=1.0)


def test_refraction_thins_with_height_and_ends_below_the_horizon():
    """At sea level about 29 minutes of arc at a true elevation of 0 (Saemundsson: 28.98')."""
    assert 60.0 * refraction(0.0) == pytest.approx(28.98, abs=0.5)
    assert 0.55 < refraction(0.0, 4000.0) / refraction(0.0) < 0.75
    assert refraction(-0.9) == 0.0
    assert refraction(90.0) == pytest.approx(0.0, abs=1e-4)


degrees = st.floats(-180.0, 180.0)
tilt = st.floats(-90.0, 90.0)


@settings(deadline=None)
@given(tilt, degrees, tilt)
def test_position_mirrors_over_the_equator_and_the_meridian(declination, hour_angle, latitude):
    elevation, azimuth = horizontal_position(declination, hour_angle, latitude)
    flipped, turned = horizontal_position(-declination, hour_angle, -latitude)
    mirrored, swung = horizontal_position(declination, -hour_angle, latitude)
    assert flipped == pytest.approx(elevation, abs=1e-6)
    assert mirrored == pytest.approx(elevation, abs=1e-6)
    assert 0.0 <= azimuth < 360.0
    if abs(elevation) < 89.9 and abs(declination) < 89.9:
        assert np.cos(np.radians(turned)) == pytest.approx(-np.cos(np.radians(azimuth)), abs=1e-6)
        assert np.sin(np.radians(swung)) == pytest.approx(-np.sin(np.radians(azimuth)), abs=1e-6)


@settings(deadline=None)
@given(tilt, degrees, st.floats(0.0, 90.0), degrees)
def test_incidence_is_the_product_of_two_unit_vectors(elevation, azimuth, slope, aspect):
    sun = np.array(unit_vector(elevation, azimuth))
    normal = np.array(unit_vector(90.0 - slope, aspect))
    assert np.linalg.norm(sun) == pytest.approx(1.0, abs=1e-12)
    assert incidence_cosine(elevation, azimuth, slope, aspect) == pytest.approx(
        sun @ normal, abs=1e-12
    )


def test_unit_vector_axes():
    np.testing.assert_allclose(unit_vector(0.0, 0.0), (0.0, 1.0, 0.0), atol=1e-15)
    np.testing.assert_allclose(unit_vector(0.0, 90.0), (1.0, 0.0, 0.0), atol=1e-15)
    np.testing.assert_allclose(unit_vector(90.0, 270.0), (0.0, 0.0, 1.0), atol=1e-15)
