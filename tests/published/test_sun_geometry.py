"""Sun geometry against print: Reda and Andreas, Meeus, the almanac, Duffie and Beckman."""

import warnings

import numpy as np
import pytest
from pvlib import atmosphere, spa

from terrasol.sky import sun
from terrasol.sky.period import parse_period
from terrasol.sky.sun import horizontal_position, incidence_cosine, sun_path, sun_series

KLEIN_DAYS = (17, 47, 75, 105, 135, 162, 198, 228, 258, 288, 318, 344)


def delta_t_of(seconds, monkeypatch):
    """Let the code use the example's own TT - UT instead of the polynomial's."""
    monkeypatch.setattr(sun.spa, "calculate_deltat", lambda year, month: np.float64(seconds))


def at(instant, time, values):
    """Value at one UTC instant, linear between steps (take steps of seconds)."""
    since = (time - np.datetime64(instant, "ns")).astype(np.float64)
    return float(np.interp(0.0, since, values))


def cooper_declination(day_of_year):
    """Cooper (1969), the formula behind Duffie and Beckman's printed examples, eq. 1.6.1a."""
    return 23.45 * np.sin(2.0 * np.pi * (284 + np.asarray(day_of_year)) / 365.0)


# Reda and Andreas (2008), NREL/TP-560-34302, Table A5.1: 2003-10-17 12:30:30 local (UTC-7),
# latitude 39.742476, longitude -105.1786, 1830.14 m, 820 mbar, 11 degC, delta T 67 s.
SPA_INSTANT = "2003-10-17T19:30:30"
SPA_LATITUDE, SPA_LONGITUDE, SPA_HEIGHT = 39.742476, -105.1786, 1830.14


def test_spa_table_a5_1_by_pvlib():
    """The library under us: the printed results of Table A5.1."""
    unix = np.array([1066419030.0])
    zenith, true_zenith, elevation, _, azimuth, equation = spa.solar_position(
        unix, SPA_LATITUDE, SPA_LONGITUDE, SPA_HEIGHT, 820.0, 11.0, 67.0, 0.5667, numthreads=1
    )
    assert zenith[0] == pytest.approx(50.111622, abs=1e-5)
    assert true_zenith[0] == pytest.approx(50.127954, abs=1e-5)
    assert elevation[0] == pytest.approx(90.0 - 50.111622, abs=1e-5)
    assert azimuth[0] == pytest.approx(194.340241, abs=1e-5)
    assert equation[0] == pytest.approx(14.64, abs=0.005)
    assert spa.julian_day(unix)[0] == pytest.approx(2452930.312847, abs=1e-6)
    millennium = 0.003792781991685
    assert spa.heliocentric_longitude(millennium) == pytest.approx(24.0182616917, abs=1e-6)
    assert spa.heliocentric_latitude(millennium) == pytest.approx(-0.0001011219, abs=1e-9)


def test_spa_table_a5_1_through_our_path(monkeypatch):
    """Our interpolated path and horizon turn: delta, H, R, e0 and azimuth of Table A5.1."""
    delta_t_of(67.0, monkeypatch)
    path = sun_path(parse_period("2003-10-17"), SPA_LONGITUDE, 1.0)
    assert at(SPA_INSTANT, path.time, path.declination) == pytest.approx(-9.31434, abs=1e-5)
    assert at(SPA_INSTANT, path.time, path.hour_angle) == pytest.approx(11.105902, abs=1e-5)
    assert at(SPA_INSTANT, path.time, path.distance) == pytest.approx(0.9965422974, abs=1e-8)

    series = sun_series(path, SPA_LATITUDE, SPA_HEIGHT)
    azimuth = at(SPA_INSTANT, series.time, series.azimuth)
    apparent = at(SPA_INSTANT, series.time, series.elevation)
    assert azimuth == pytest.approx(194.340241, abs=1e-5)
    # e0, the elevation without air; ours has the standard atmosphere's lift at that height.
    e0 = 39.872046
    assert apparent - sun.refraction(e0, SPA_HEIGHT) == pytest.approx(e0, abs=1e-5)
    # The lift goes with pressure over temperature: put the example's 820 mbar and 11 degC there.
    pressure, celsius = atmosphere.alt2pres(SPA_HEIGHT) / 100.0, 15.0 - 0.0065 * SPA_HEIGHT
    lift = sun.refraction(e0, SPA_HEIGHT) * (820.0 / pressure) * (273.0 + celsius) / 284.0
    assert lift == pytest.approx(0.016332, abs=1e-6)


def test_spa_incidence():
    """Table A5.1: incidence 25.187 degrees, slope 30, surface azimuth 170 (rotation -10)."""
    elevation, azimuth = 90.0 - 50.111622, 194.340241
    cosine = incidence_cosine(elevation, azimuth, 30.0, 170.0)
    assert np.degrees(np.arccos(cosine)) == pytest.approx(25.187000, abs=1e-4)
    # The turn the other way, a mistake of sign, gives 20.294 (recomputed, not print).
    wrong = incidence_cosine(elevation, azimuth, 30.0, 190.0)
    assert np.degrees(np.arccos(wrong)) == pytest.approx(20.294, abs=1e-3)


def sunrise_and_sunset(day, latitude, longitude):
    """UTC instants at which the geocentric sun passes -0.8333 degree (SPA, appendix 2)."""
    path = sun_path(parse_period(day), longitude, 10.0)
    elevation, _ = horizontal_position(path.declination, path.hour_angle, latitude)
    above = elevation + 0.8333
    crossings = []
    for i in np.flatnonzero(np.diff(np.sign(above))):
        share = above[i] / (above[i] - above[i + 1])
        crossings.append(path.time[i] + np.timedelta64(round(share * 10e9), "ns"))
    rise, fall = crossings
    return rise, fall


def seconds_apart(instant, text):
    return abs((instant - np.datetime64(text, "ns")) / np.timedelta64(1, "s"))


@pytest.mark.parametrize(
    ("day", "latitude", "longitude", "delta_t", "rise", "fall"),
    [
        # Reda and Andreas (2008), Table A2.1, UT, longitude 0.
        ("1996-07-05", -35.0, 0.0, 64.0, "1996-07-05T07:08:15", "1996-07-05T17:01:04"),
        ("1994-01-02", 35.0, 0.0, 64.0, "1994-01-02T07:08:12", "1994-01-02T16:59:55"),
        ("2004-12-04", -35.0, 0.0, 64.0, "2004-12-04T04:38:57", "2004-12-04T19:02:02"),
    ],
)
def test_spa_sunrise_sunset(day, latitude, longitude, delta_t, rise, fall, monkeypatch):
    """To the printed second."""
    delta_t_of(delta_t, monkeypatch)
    ours = sunrise_and_sunset(day, latitude, longitude)
    assert seconds_apart(ours[0], rise) <= 1.0
    assert seconds_apart(ours[1], fall) <= 1.0


def test_spa_table_a5_1_sunrise_sunset(monkeypatch):
    """Table A5.1, UTC-7: sunrise 06:12:43, sunset 17:20:19.

    A finding: the print's sunset is that of the UTC day 17 October, which is the evening
    of the 16th at the place; the evening of the 17th has 17:18:52.
    """
    delta_t_of(67.0, monkeypatch)
    rise, fall = sunrise_and_sunset("2003-10-17", SPA_LATITUDE, SPA_LONGITUDE)
    _, fall_before = sunrise_and_sunset("2003-10-16", SPA_LATITUDE, SPA_LONGITUDE)
    assert seconds_apart(rise, "2003-10-17T13:12:43") <= 1.0
    assert seconds_apart(fall_before, "2003-10-17T00:20:19") <= 1.0
    assert seconds_apart(fall, "2003-10-18T00:18:52") <= 1.0


@pytest.mark.parametrize(
    ("day", "latitude", "longitude", "zone_hours", "rise", "fall"),
    [
        # US Naval Observatory, 2015, 39 N 105 W, MST (UTC-7).
        ("2015-01-02", 39.0, -105.0, -7, "07:19", "16:49"),
        ("2015-04-02", 39.0, -105.0, -7, "05:43", "18:24"),
        ("2015-08-02", 39.0, -105.0, -7, "05:01", "19:10"),
        ("2015-12-02", 39.0, -105.0, -7, "07:01", "16:38"),
        # US Naval Observatory, 2015, Beijing 39.917 N 116.383 E, UTC+8.
        ("2015-01-02", 39.917, 116.383, 8, "07:36", "17:00"),
        ("2015-04-02", 39.917, 116.383, 8, "05:58", "18:39"),
        ("2015-08-02", 39.917, 116.383, 8, "05:13", "19:28"),
        ("2015-12-02", 39.917, 116.383, 8, "07:17", "16:50"),
    ],
)
def test_usno_sunrise_sunset(day, latitude, longitude, zone_hours, rise, fall):
    """To the printed minute: half a minute of rounding and no more than 5 s beside it."""
    ours = sunrise_and_sunset(day, latitude, longitude)
    zone = np.timedelta64(zone_hours, "h")
    assert seconds_apart(ours[0] + zone, f"{day}T{rise}") <= 35.0
    assert seconds_apart(ours[1] + zone, f"{day}T{fall}") <= 35.0


def test_meeus_distance():
    """Meeus (1998), Astronomical Algorithms, example 25.b: R 0.99760775 at 1992-10-13 0 h TD."""
    path = sun_path(parse_period("1992-10-12/1992-10-13"), 0.0, 60.0)
    delta_t = np.timedelta64(round(spa.calculate_deltat(1992, 10) * 1e9), "ns")
    instant = np.datetime64("1992-10-13T00:00:00", "ns") - delta_t
    assert at(instant, path.time, path.distance) == pytest.approx(0.99760775, abs=1e-8)


def test_perihelion_aphelion_and_obliquity():
    """Astronomical Almanac 2010: 0.98329 and 1.01671 AU, ratio of sunlight 1.0691.

    Highest declination of 2020: 23.43668 degrees, to 1e-3.
    """
    distance = sun_path(parse_period("2010"), 0.0, 3600.0).distance
    assert distance.min() == pytest.approx(0.98329, abs=1e-3)
    assert distance.max() == pytest.approx(1.01671, abs=1e-3)
    assert (distance.max() / distance.min()) ** 2 == pytest.approx(1.0691, abs=1e-3)
    assert sun_path(parse_period("2020"), 0.0, 600.0).declination.max() == pytest.approx(
        23.43668, abs=1e-3
    )


def test_millions_of_kilometres():
    """Common practice, no source: 147 million km in January, 152 in July."""
    path = sun_path(parse_period("2024"), 0.0, 3600.0)
    million_km = path.distance * 149.597870700  # IAU 2012 resolution B2
    assert round(million_km.min()) == 147
    assert round(million_km.max()) == 152
    assert path.period.months[path.month[million_km.argmin()]] == (2024, 1)
    assert path.period.months[path.month[million_km.argmax()]] == (2024, 7)


def test_january_sunlight_is_7_percent_stronger():
    """Common practice, no source: January's sunlight is 7 % stronger than July's."""
    path = sun_path(parse_period(None), 0.0, 3600.0)
    january, july = (np.mean(path.distance[path.month == m] ** -2) for m in (0, 6))
    assert round(100.0 * (january / july - 1.0)) == 7


def test_noon_sun_at_55_degrees():
    """Common practice, no source: noon sun at 58.5 and 11.5 degrees at the solstices of 55 N.

    Level ground then gets 4.3 times more beam in summer (ratio of sines, no air).
    """
    noon = [
        horizontal_position(sun_path(parse_period(day), 0.0, 60.0).declination.flat[720], 0.0, 55.0)
        for day in ("2025-06-21", "2025-12-21")
    ]
    (summer, south), (winter, _) = noon
    assert summer == pytest.approx(58.5, abs=0.1)
    assert winter == pytest.approx(11.5, abs=0.1)
    assert south == 180.0
    ratio = np.sin(np.radians(summer)) / np.sin(np.radians(winter))
    assert ratio == pytest.approx(4.3, abs=0.05)


def test_klein_declinations_by_the_prints_own_formula():
    """Klein (1977); Duffie and Beckman (2013), Table 1.6.1: declination on the mean days.

    The print is Cooper's formula. The true sun of 2025 stands up to 0.9 degree higher
    (March): a finding about the print, held here so that it stays known.
    """
    printed = [-20.9, -13.0, -2.4, 9.4, 18.8, 23.1, 21.2, 13.5, 2.2, -9.6, -18.9, -23.0]
    np.testing.assert_allclose(cooper_declination(KLEIN_DAYS), printed, rtol=0, atol=0.0501)
    path = sun_path(parse_period(None), 0.0, 3600.0)
    noon = path.declination.reshape(365, 24)[np.array(KLEIN_DAYS) - 1].mean(axis=1)
    gap = noon - printed
    np.testing.assert_allclose(gap[[4, 5, 6, 7, 11]], 0.0, atol=0.25)
    assert gap.max() == pytest.approx(0.88, abs=0.05)


def test_equation_of_time_and_madison_solar_time():
    """Duffie and Beckman (2013), Example 1.5.1: 3 February, -13.5 min; Madison (89.4 W)
    at 10:30 CST is 10:19 solar time.

    The print is Spencer's (1971) series. A finding: the true sun of any year from 2021
    to 2028 says -13.7 to -13.9 min. The series' own worst error is given as 35 s (Iqbal
    1983, from memory).
    """
    b = 2.0 * np.pi * (34 - 1) / 365.0
    spencer = 229.2 * (
        7.5e-6
        + 0.001868 * np.cos(b)
        - 0.032077 * np.sin(b)
        - 0.014615 * np.cos(2.0 * b)
        - 0.04089 * np.sin(2.0 * b)
    )
    assert spencer == pytest.approx(-13.5, abs=0.1)
    for year in range(2021, 2029):
        path = sun_path(parse_period(f"{year}-02-03"), -89.4, 10.0)
        angle = at(f"{year}-02-03T16:30:00", path.time, path.hour_angle)
        mean_hours = 10.5 + (90.0 - 89.4) / 15.0
        solar_hours = 12.0 + angle / 15.0
        assert 60.0 * (solar_hours - mean_hours) == pytest.approx(spencer, abs=35.0 / 60.0)
        assert 60.0 * (solar_hours - 10.0) == pytest.approx(19.0, abs=1.0)


def test_duffie_beckman_incidence():
    """Examples 1.6.1 and 1.8.1: 43 N, 13 February, 10:30 solar, slope 45, facing S 15 W."""
    declination = cooper_declination(44)
    elevation, azimuth = horizontal_position(declination, -22.5, 43.0)
    cosine = incidence_cosine(elevation, azimuth, 45.0, 195.0)
    assert cosine == pytest.approx(0.817, abs=0.002)
    assert np.degrees(np.arccos(cosine)) == pytest.approx(35.0, abs=0.2)
    assert cosine / np.sin(np.radians(elevation)) == pytest.approx(1.66, abs=0.01)


@pytest.mark.parametrize(
    ("day_of_year", "solar_hour", "zenith", "azimuth_from_south"),
    [(44, 9.5, 66.5, -40.0), (182, 18.5, 79.6, 112.0), (75, 16.0, 70.3, 66.8)],
)
def test_duffie_beckman_zenith_and_azimuth(day_of_year, solar_hour, zenith, azimuth_from_south):
    """Examples 1.6.2 and 1.6.3, 43 N: 13 February, 1 July, 16 March; 0.15 degree."""
    elevation, azimuth = horizontal_position(
        cooper_declination(day_of_year), 15.0 * (solar_hour - 12.0), 43.0
    )
    assert 90.0 - elevation == pytest.approx(zenith, abs=0.15)
    assert azimuth - 180.0 == pytest.approx(azimuth_from_south, abs=0.15)


def test_duffie_beckman_sunset_hour_angle():
    """Example 1.6.3: 43 N, 16 March, sunset hour angle 87.8 degrees."""
    hour_angle = np.linspace(80.0, 95.0, 15001)
    elevation, _ = horizontal_position(cooper_declination(75), hour_angle, 43.0)
    assert hour_angle[np.flatnonzero(elevation < 0.0)[0]] == pytest.approx(87.8, abs=0.15)


def test_duffie_beckman_beam_ratio():
    """Examples 1.8.2 and 1.8.3: 40 N, 16 February, 9 to 10 h solar, south, slopes 30 and 50.

    Print 1.61 and 1.80. A finding: the second is read off a chart; the equation the
    chart draws (1.8.2) gives 1.788, beyond the print's last digit.
    """
    elevation, azimuth = horizontal_position(-13.0, -37.5, 40.0)
    on_slope = incidence_cosine(elevation, azimuth, np.array([30.0, 50.0]), 180.0)
    ratio = on_slope / np.sin(np.radians(elevation))
    assert ratio[0] == pytest.approx(1.61, abs=0.01)
    moved, _ = horizontal_position(-13.0, -37.5, 40.0 - 50.0)
    by_equation = np.sin(np.radians(moved)) / np.sin(np.radians(elevation))
    assert ratio[1] == pytest.approx(by_equation, abs=1e-12)
    assert by_equation == pytest.approx(1.788, abs=0.0005)


def test_tilt_towards_the_equator_is_a_move_towards_it():
    """Identity, Duffie and Beckman eq. 1.6.7: slope b at latitude f sees level at f - b."""
    declination, hour_angle = (x.ravel() for x in np.mgrid[-23.0:24.0:5, -170.0:171.0:10])
    elevation, azimuth = horizontal_position(declination, hour_angle, 43.0)
    level, _ = horizontal_position(declination, hour_angle, 43.0 - 35.0)
    np.testing.assert_allclose(
        incidence_cosine(elevation, azimuth, 35.0, 180.0), np.sin(np.radians(level)), atol=1e-14
    )


def astropy_horizontal(time, latitude, longitude):
    """Elevation and azimuth without air, from astropy's sun and ERFA's turning Earth.

    The sun of astropy's built-in ephemeris in GCRS, turned by ERFA's IAU 2006/2000A
    precession, nutation and sidereal time, seen from the ellipsoid's surface.
    UTC taken as UT1, as terrasol does; TT - UT from the polynomial (a second of it moves
    the sun by 1e-5 degree).
    """
    import erfa
    from astropy import units
    from astropy.coordinates import EarthLocation, get_sun
    from astropy.time import Time
    from astropy.utils import iers

    iers.conf.auto_download = False
    day, part = np.divmod(time.astype(np.int64), 86400 * 10**9)
    jd, fraction = day + 2440587.5, part / 86400e9
    year = time.astype("M8[Y]").astype(int) + 1970
    month = time.astype("M8[M]").astype(int) % 12 + 1
    terrestrial = fraction + spa.calculate_deltat(year, month) / 86400.0
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", erfa.ErfaWarning)  # UTC before 1960 is "dubious"
        gcrs = get_sun(Time(jd, terrestrial, format="jd", scale="tt"))
    vector = gcrs.cartesian.xyz.to_value(units.m).T
    of_date = np.einsum("nij,nj->ni", erfa.pnm06a(jd, terrestrial), vector)
    meridian = erfa.gst06a(jd, fraction, jd, terrestrial) + np.radians(longitude)
    place = EarthLocation.from_geodetic(np.zeros_like(latitude), latitude)
    x, z = place.x.to_value(units.m), place.z.to_value(units.m)
    outward = of_date[:, 0] * np.cos(meridian) + of_date[:, 1] * np.sin(meridian) - x
    east = of_date[:, 1] * np.cos(meridian) - of_date[:, 0] * np.sin(meridian)
    polar = of_date[:, 2] - z
    lat = np.radians(latitude)
    north = polar * np.cos(lat) - outward * np.sin(lat)
    up = polar * np.sin(lat) + outward * np.cos(lat)
    elevation = np.degrees(np.arctan2(up, np.hypot(east, north)))
    return elevation, np.degrees(np.arctan2(east, north)) % 360.0


def test_against_astropy():
    """1,000 random times and places, 1950 to 2050, sun up: within SPA's claim of 0.0003 degree.

    Worst seen: 0.00015 degree in elevation, 0.00013 degree of arc along the horizon.
    """
    random = np.random.default_rng(20250321)
    rows = []
    while len(rows) < 1000:
        year, month = random.integers(1950, 2050), random.integers(1, 13)
        longitude = random.uniform(-180.0, 180.0)
        path = sun_path(parse_period(f"{year}-{month:02d}"), longitude, 3600.0)
        for latitude in np.degrees(np.arcsin(random.uniform(-1.0, 1.0, 10))):
            series = sun_series(path, latitude)
            i = random.integers(max(series.time.size, 1))
            if series.time.size:
                rows.append(
                    (series.time[i], latitude, longitude, series.elevation[i], series.azimuth[i])
                )
    time, latitude, longitude, elevation, azimuth = (np.array(c) for c in zip(*rows, strict=True))
    true_elevation, true_azimuth = astropy_horizontal(time, latitude, longitude)
    lifted = true_elevation + sun.refraction(true_elevation)
    turn = (azimuth - true_azimuth + 180.0) % 360.0 - 180.0
    assert np.abs(elevation - lifted).max() < 3e-4
    assert np.abs(turn * np.cos(np.radians(elevation))).max() < 3e-4
