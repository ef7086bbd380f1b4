"""Where the sun stands, step by step, over one place and period.

The geocentric sun is that of the Solar Position Algorithm (Reda and Andreas 2004), as
pvlib computes it. Declination, equation of time and distance change so smoothly that one
evaluation a day, at local midnight, and a cubic through four of them give every step
within 1e-6 degree. Hour angle, parallax and refraction are then exact for each step.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray
from pvlib import atmosphere, spa

from terrasol.errors import SettingError
from terrasol.sky.period import Period

LOWEST_ELEVATION: Final = -0.3
"""Steps with the sun's centre lower than this, degrees apparent, are dropped: the whole disc
is below a level horizon."""

HORIZON_REFRACTION: Final = 0.5667
"""Refraction at sunrise and sunset, degrees; below it, and the disc's radius, the sun is not
refracted at all. Reda and Andreas (2008), NREL/TP-560-34302, section 3.11."""

_DAY_SECONDS: Final = 86400
_SECONDS_PER_DEGREE: Final = 240.0


@dataclass(frozen=True, eq=False)
class SunPath:
    """The geocentric sun over one meridian, for every step of a period.

    Attributes
    ----------
    period : Period
    longitude : float
        Degrees east.
    step_seconds : float
        Length of a step.
    time : (n,) numpy.datetime64[ns]
        Middle of each step, UTC.
    month : (n,) int16
        Index into ``period.months`` of each step's calendar month (local mean solar time).
    declination : (n,) float64
        Geocentric declination [degree].
    hour_angle : (n,) float64
        Geocentric hour angle [degree], 0 at true noon, positive in the afternoon.
    distance : (n,) float64
        Earth to sun [AU].
    """

    period: Period
    longitude: float
    step_seconds: float
    time: NDArray[np.datetime64]
    month: NDArray[np.int16]
    declination: NDArray[np.float64]
    hour_angle: NDArray[np.float64]
    distance: NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class SunSeries:
    """The sun above the horizon of one place, step by step.

    Attributes
    ----------
    latitude, longitude : float
        Degrees north, degrees east.
    step_seconds : float
        How long each entry stands for.
    time : (n,) numpy.datetime64[ns]
        Middle of each step, UTC.
    month : (n,) int16
        Index into the period's months.
    elevation : (n,) float64
        Apparent elevation of the sun's centre, refraction included [degree].
    azimuth : (n,) float64
        Clockwise from true north [degree].
    distance : (n,) float64
        Earth to sun [AU].
    """

    latitude: float
    longitude: float
    step_seconds: float
    time: NDArray[np.datetime64]
    month: NDArray[np.int16]
    elevation: NDArray[np.float64]
    azimuth: NDArray[np.float64]
    distance: NDArray[np.float64]


def sun_path(period: Period, longitude: float, step_seconds: float = 60.0) -> SunPath:
    """Follow the geocentric sun over a meridian; the answer serves every latitude.

    UTC stands for UT1, which it leaves by less than 0.9 s (0.004 degree of hour angle).
    The difference between terrestrial and universal time is pvlib's polynomial for the
    year and month (Espenak and Meeus 2006).

    Parameters
    ----------
    period : Period
    longitude : float
        Degrees east, -180 to 180.
    step_seconds : float
        Length of a step; it must divide a day, and be one second to one hour.

    Returns
    -------
    SunPath
        With the middles of steps that exactly tile the period.

    Raises
    ------
    SettingError
        If the longitude or the step is out of range, or the step does not divide a day.

    References
    ----------
    Reda, I. and Andreas, A. (2004), Solar Energy 76, 577-589,
    doi:10.1016/j.solener.2003.12.003.
    """
    if not -180.0 <= longitude <= 180.0:
        raise SettingError(f"longitude {longitude:g} is outside -180 to 180 degrees")
    steps = steps_per_day(step_seconds)
    fraction = (np.arange(steps) + 0.5) / steps
    within_day = np.round((fraction * _DAY_SECONDS - longitude * _SECONDS_PER_DEGREE) * 1e9)
    midnight = np.arange(period.start, period.end, np.timedelta64(1, "D"))
    time = midnight.astype("M8[ns]")[:, np.newaxis] + within_day.astype("m8[ns]")

    equation, declination, distance = (
        _between_midnights(nodes, fraction) for nodes in _geocentric_at_midnights(period, longitude)
    )
    years, months = zip(*period.months, strict=True)
    month_of_day = _month_number(midnight) - (years[0] * 12 + months[0])
    return SunPath(
        period=period,
        longitude=float(longitude),
        step_seconds=float(step_seconds),
        time=time.ravel(),
        month=np.repeat(month_of_day.astype(np.int16), steps),
        declination=declination.ravel(),
        hour_angle=(equation + 360.0 * (fraction - 0.5)).ravel(),
        distance=distance.ravel(),
    )


def sun_series(path: SunPath, latitude: float, height: float = 0.0) -> SunSeries:
    """Stand at one latitude of the path's meridian and keep the steps with the sun up.

    Adds the parallax of the observer's place on the ellipsoid, and refraction for the
    standard atmosphere at the observer's height (sections 3.10 to 3.12 of the SPA).

    Parameters
    ----------
    path : SunPath
    latitude : float
        Geodetic, degrees north.
    height : float
        Metres above sea level.

    Returns
    -------
    SunSeries
        Only steps with an apparent elevation above -0.3 degrees; empty in polar night.

    Raises
    ------
    SettingError
        If the latitude is outside -90 to 90 degrees.
    """
    if not -90.0 <= latitude <= 90.0:
        raise SettingError(f"latitude {latitude:g} is outside -90 to 90 degrees")
    near = np.flatnonzero(_sine_of_elevation(path, latitude) > np.sin(np.radians(-1.5)))
    declination, hour_angle = _topocentric(
        path.declination[near], path.hour_angle[near], path.distance[near], latitude, height
    )
    geometric, azimuth = horizontal_position(declination, hour_angle, latitude)
    elevation = geometric + refraction(geometric, height)
    up = elevation > LOWEST_ELEVATION
    kept = near[up]
    return SunSeries(
        latitude=float(latitude),
        longitude=path.longitude,
        step_seconds=path.step_seconds,
        time=path.time[kept],
        month=path.month[kept],
        elevation=elevation[up],
        azimuth=azimuth[up],
        distance=path.distance[kept],
    )


def horizontal_position(
    declination: ArrayLike, hour_angle: ArrayLike, latitude: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Turn declination and hour angle into elevation and azimuth, without an atmosphere.

    sin(elevation) = sin(lat) sin(dec) + cos(lat) cos(dec) cos(H); azimuth from
    the east and north components of the same unit vector, so it holds at the poles and
    the zenith too.

    Parameters
    ----------
    declination, hour_angle, latitude : array_like
        Degrees, broadcast together; hour angle 0 at noon, positive in the afternoon.

    Returns
    -------
    elevation, azimuth : ndarray
        Degrees; azimuth clockwise from true north, 0 <= azimuth < 360.

    Examples
    --------
    >>> elevation, azimuth = horizontal_position(23.44, 0.0, 55.0)
    >>> round(float(elevation), 2), float(azimuth)
    (58.44, 180.0)
    """
    dec, hour, lat = (np.radians(x) for x in (declination, hour_angle, latitude))
    cos_dec, sin_dec, cos_lat, sin_lat = np.cos(dec), np.sin(dec), np.cos(lat), np.sin(lat)
    towards_equator = cos_dec * np.cos(hour)
    east = -cos_dec * np.sin(hour)
    north = sin_dec * cos_lat - towards_equator * sin_lat
    up = sin_dec * sin_lat + towards_equator * cos_lat
    elevation = np.degrees(np.arctan2(up, np.hypot(east, north)))
    azimuth = np.degrees(np.arctan2(east, north))
    return elevation, np.where(azimuth < 0.0, azimuth + 360.0, azimuth) % 360.0


def refraction(geometric: ArrayLike, height: float = 0.0) -> NDArray[np.float64]:
    """Lift of the sun by the air, for the standard atmosphere at a height.

    Saemundsson's formula as the SPA uses it, with the pressure and temperature
    of the standard atmosphere (15 degC at sea level, 6.5 K/km).

    Parameters
    ----------
    geometric : array_like
        Elevation without an atmosphere [degree].
    height : float
        Metres above sea level.

    Returns
    -------
    ndarray
        Degrees to add; 0 while the whole refracted disc is below the horizon.
    """
    pressure_hpa = atmosphere.alt2pres(height) / 100.0
    celsius = 15.0 - 0.0065 * height
    return spa.atmospheric_refraction_correction(
        pressure_hpa, celsius, np.asarray(geometric, dtype=np.float64), HORIZON_REFRACTION
    )


def incidence_cosine(
    elevation: ArrayLike, azimuth: ArrayLike, slope: ArrayLike, aspect: ArrayLike
) -> NDArray[np.float64]:
    """Cosine of the angle between the sun and the normal of a plane.

    cos(i) = sin(elevation) cos(slope) + cos(elevation) sin(slope) cos(azimuth - aspect)
    (Duffie and Beckman 2013, eq. 1.6.3). Negative when the sun is behind the plane.

    Parameters
    ----------
    elevation, azimuth, slope, aspect : array_like
        Degrees, broadcast together; azimuth and aspect clockwise from true north.

    Examples
    --------
    >>> round(float(incidence_cosine(30.0, 180.0, 60.0, 180.0)), 12)
    1.0
    """
    elevation, slope = np.radians(elevation), np.radians(slope)
    turn = np.radians(np.subtract(azimuth, aspect))
    return np.sin(elevation) * np.cos(slope) + np.cos(elevation) * np.sin(slope) * np.cos(turn)


def unit_vector(
    elevation: ArrayLike, azimuth: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Direction to the sun as (east, north, up) components of length one.

    Parameters
    ----------
    elevation, azimuth : array_like
        Degrees; azimuth clockwise from true north.

    Examples
    --------
    >>> [round(float(x), 6) for x in unit_vector(30.0, 90.0)]
    [0.866025, 0.0, 0.5]
    """
    elevation, azimuth = np.radians(elevation), np.radians(azimuth)
    level = np.cos(elevation)
    return level * np.sin(azimuth), level * np.cos(azimuth), np.sin(elevation)


def steps_per_day(step_seconds: float) -> int:
    """Number of steps in a day; SettingError unless they are whole, of 1 s to 1 h."""
    if not 1.0 <= step_seconds <= 3600.0:
        raise SettingError(f"step of {step_seconds:g} s is outside 1 to 3600 s")
    steps = round(_DAY_SECONDS / step_seconds)
    if abs(steps * step_seconds - _DAY_SECONDS) > 1e-6:
        raise SettingError(f"step of {step_seconds:g} s does not divide a day; try 60 s")
    return steps


def _month_number(day: NDArray[np.datetime64]) -> NDArray[np.int64]:
    """Months counted so that January of year y is 12 y + 1."""
    return day.astype("M8[M]").astype(np.int64) + 1970 * 12 + 1


def _geocentric_at_midnights(
    period: Period, longitude: float
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Equation of time [degree], declination [degree] and distance [AU] at local midnights.

    From the midnight before the period to the second one after it, so that a cubic
    has two nodes on either side of every step.
    """
    midnight = np.arange(
        period.start - np.timedelta64(1, "D"),
        period.end + np.timedelta64(2, "D"),
        np.timedelta64(1, "D"),
    )
    unix = midnight.astype(np.int64) - longitude * _SECONDS_PER_DEGREE
    year = midnight.astype("M8[Y]").astype(np.int64) + 1970
    delta_t = spa.calculate_deltat(year, _month_number(midnight) - year * 12)
    sidereal, ascension, declination = spa.solar_position(
        unix, 0.0, 0.0, 0.0, 0.0, 0.0, delta_t, 0.0, numthreads=1, sst=True
    )
    (distance,) = spa.solar_position(
        unix, 0.0, 0.0, 0.0, 0.0, 0.0, delta_t, 0.0, numthreads=1, esd=True
    )
    equation = (sidereal + longitude - ascension) % 360.0 - 180.0
    return equation, declination, distance


def _between_midnights(
    nodes: NDArray[np.float64], fraction: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Cubic Lagrange interpolation: (days + 3,) nodes to (days, steps) values."""
    x = fraction
    weights = np.stack(
        [
            -x * (x - 1.0) * (x - 2.0) / 6.0,
            (x + 1.0) * (x - 1.0) * (x - 2.0) / 2.0,
            -(x + 1.0) * x * (x - 2.0) / 2.0,
            (x + 1.0) * x * (x - 1.0) / 6.0,
        ]
    )
    return np.lib.stride_tricks.sliding_window_view(nodes, 4) @ weights


def _sine_of_elevation(path: SunPath, latitude: float) -> NDArray[np.float64]:
    """Geocentric, to sort out the nights cheaply."""
    dec, lat = np.radians(path.declination), np.radians(latitude)
    level = np.cos(lat) * np.cos(dec) * np.cos(np.radians(path.hour_angle))
    return np.sin(lat) * np.sin(dec) + level


def _topocentric(
    declination: NDArray[np.float64],
    hour_angle: NDArray[np.float64],
    distance: NDArray[np.float64],
    latitude: float,
    height: float,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Declination and hour angle [degree] as seen from the surface of the ellipsoid."""
    parallax = spa.equatorial_horizontal_parallax(distance)
    reduced = spa.uterm(latitude)
    x = spa.xterm(reduced, latitude, height)
    y = spa.yterm(reduced, latitude, height)
    shift = spa.parallax_sun_right_ascension(x, parallax, hour_angle, declination)
    seen = spa.topocentric_sun_declination(declination, x, y, parallax, shift, hour_angle)
    return seen, spa.topocentric_local_hour_angle(hour_angle, shift)
