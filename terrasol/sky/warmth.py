"""Can the air have been as warm as a series says? A bound by the sun and the height."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrasol.constants import SOLAR_CONSTANT
from terrasol.sky.station import Station

Values = NDArray[np.float64]

WARMEST: Final = (10.0, 0.075, 0.005)
"""Bound of the mean air temperature of `MEAN_DAYS` days: degC without sun, K for each W/m2 of light
above the air `LAG_DAYS` before, less K for each metre of height (judgement, no source). By monthly
normals from memory (tests/sky/test_warmth.py) the hottest places known, such as Death Valley and
Mecca, stay 5 K and more under it in any season, mild coasts 7 K; read in degF where degC is stated,
the coldest mountains still lie 9 K above."""

MEAN_DAYS: Final = 30
LAG_DAYS: Final = 30
"""Days of the mean, and by which air follows the sun (judgement; over land it is some 25 days)."""

SPELL: Final = 10.0
"""K that the mean of a single day may lie above the bound; of several days less in proportion,
of `MEAN_DAYS` none (judgement)."""

LEAST_KNOWN: Final = 0.8
"""Share of a day's intervals, and of the days, that must be known (judgement)."""


@dataclass(frozen=True)
class TooWarm:
    """Days that are warmer than any can be.

    Parameters
    ----------
    first, last : datetime64[D]
        Of local solar time.
    mean, most : float
        Mean air temperature, and the greatest that is believable [degC].
    in_fahrenheit : bool
        Whether all would be believable if the values were degrees Fahrenheit.
    """

    first: np.datetime64
    last: np.datetime64
    mean: float
    most: float
    in_fahrenheit: bool


def sun_of_day(day: ArrayLike, latitude: float) -> Values:
    """Mean irradiance of a day above the air, on the level [W/m2].

    Parameters
    ----------
    day : array_like of datetime64[D]
    latitude : float
        Degrees north.

    Returns
    -------
    ndarray

    Notes
    -----
    S / pi d (w sin(lat) sin(dec) + cos(lat) cos(dec) sin(w)), S the solar constant, with
    d = 1 + 0.033 cos(2 pi J / 365), dec = 0.409 sin(2 pi J / 365 - 1.39) and the sunset hour angle
    w = arccos(-tan(lat) tan(dec)), J the day of the year; w is 0 in the polar night and pi in the
    polar day. Allen et al. (1998), FAO Irrigation and Drainage Paper 56, equations 21 to 25.
    """
    dates = np.asarray(day, "M8[D]")
    turn = 2.0 * np.pi * ((dates - dates.astype("M8[Y]")).astype(np.float64) + 1.0) / 365.0
    declination = 0.409 * np.sin(turn - 1.39)
    lat = np.radians(np.clip(latitude, -89.9, 89.9))
    sunset = np.arccos(np.clip(-np.tan(lat) * np.tan(declination), -1.0, 1.0))
    height = sunset * np.sin(lat) * np.sin(declination)
    height += np.cos(lat) * np.cos(declination) * np.sin(sunset)
    return np.asarray(SOLAR_CONSTANT / np.pi * (1.0 + 0.033 * np.cos(turn)) * height)


def warmest(day: ArrayLike, latitude: float, height: float) -> Values:
    """Greatest believable mean of the month around a day [degC]; see `WARMEST`."""
    base, by_sun, by_height = WARMEST
    earlier = np.asarray(day, "M8[D]") - np.timedelta64(LAG_DAYS, "D")
    return base + by_sun * sun_of_day(earlier, latitude) - by_height * height


def too_warm(station: Station) -> TooWarm | None:
    """Find the month of a series that is furthest above what air can be, if any is.

    Parameters
    ----------
    station : Station
        With temperature.

    Returns
    -------
    TooWarm or None
        None where all is believable, or where no day is known.
    """
    days, means = _daily(station)
    most = warmest(days, station.latitude, station.height)
    window = min(MEAN_DAYS, days.size)
    allowed = SPELL * (1.0 - window / MEAN_DAYS)
    over = _running(means - most, window)
    if not np.isfinite(over).any() or np.nanmax(over) <= allowed:
        return None
    first = int(np.nanargmax(over))
    some = slice(first, first + window)
    celsius = _running((means - 32.0) / 1.8 - most, window)
    return TooWarm(
        days[some][0],
        days[some][-1],
        float(np.nanmean(means[some])),
        float(np.mean(most[some])) + allowed,
        bool(np.nanmax(celsius) <= allowed),
    )


def _daily(station: Station) -> tuple[NDArray[np.datetime64], Values]:
    """Days of local mean solar time and their mean temperature; NaN where too little is known."""
    local = (station.middle + station.solar_offset).astype("M8[D]")
    days = np.arange(local[0], local[-1] + 1)
    place = (local - local[0]).astype(np.int64)
    values = station.values["temperature"]
    known = np.isfinite(values)
    count = np.bincount(place[known], minlength=days.size)
    sums = np.bincount(place[known], values[known], days.size)
    enough = count >= LEAST_KNOWN * 86400.0 / max(station.seconds, 1)
    return days, np.where(enough, sums / np.maximum(count, 1), np.nan)


def _running(values: Values, window: int) -> Values:
    """Means of all runs of some values, NaN where too few of them are known."""
    known = np.isfinite(values)
    count, sums = (
        np.convolve(part, np.ones(window), "valid")
        for part in (known.astype(np.float64), np.where(known, values, 0.0))
    )
    enough = count >= LEAST_KNOWN * window
    return np.where(enough, sums / np.maximum(count, 1.0), np.nan)
