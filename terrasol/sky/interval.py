"""The sun over the intervals of a measured series: means of minutes, not the sun at a label."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrasol.errors import SettingError
from terrasol.sky.irradiance import Irradiance
from terrasol.sky.period import parse_period
from terrasol.sky.station import Station
from terrasol.sky.sun import SunSeries, horizontal_position, sun_path, sun_series

STEP_SECONDS: Final = 60
"""Length of the steps that an interval's means are made of."""

NIGHT_ELEVATION: Final = -6.0
"""True elevation, degrees, below which it is night: the end of civil twilight."""

_CHUNK_DAYS: Final = 366
"""Days of minutes held in memory at a time."""

Fluxes = Callable[[SunSeries], dict[str, NDArray[np.float64]]]
"""Named values for each entry of a sun series; all are 0 while the sun is down."""


@dataclass(frozen=True, eq=False)
class SunMinutes:
    """The sun over one place, minute by minute, for whole UTC days.

    Attributes
    ----------
    start : numpy.datetime64[s]
        Beginning of the first minute, UTC.
    sun : SunSeries
        Minutes with the sun up, in the middle of each.
    place : (k,) int64
        Which minute each entry of `sun` is.
    elevation : (m,) float64
        True elevation, no refraction, of every minute [degree].
    hour_angle : (m,) float64
        Of every minute, -180 to 180, 0 at true noon [degree].
    """

    start: np.datetime64
    sun: SunSeries
    place: NDArray[np.int64]
    elevation: NDArray[np.float64]
    hour_angle: NDArray[np.float64]

    @classmethod
    def over(cls, station: Station, first: np.datetime64, last: np.datetime64) -> SunMinutes:
        """Make those of the days that hold the moments `first` and `last`, UTC."""
        days = [str(moment.astype("M8[D]")) for moment in (first, last)]
        # The geocentric sun on the meridian of Greenwich, whose days are those of UTC, is that
        # of every meridian: only the hour angle differs.
        path = sun_path(parse_period("/".join(days)), 0.0, STEP_SECONDS)
        path = replace(
            path, longitude=station.longitude, hour_angle=path.hour_angle + station.longitude
        )
        sun = sun_series(path, station.latitude, station.height)
        start = np.datetime64(days[0], "s")
        since = (sun.time - start.astype("M8[ns]")).astype(np.int64)
        elevation, _ = horizontal_position(path.declination, path.hour_angle, station.latitude)
        place = since // (STEP_SECONDS * 1_000_000_000)
        hour_angle = (path.hour_angle + 180.0) % 360.0 - 180.0
        return cls(start, sun, place, elevation, hour_angle)

    def spread(self, flux: NDArray[Any]) -> NDArray[np.float64]:
        """Values of the entries of `sun` on the grid of all minutes, 0 in between."""
        every = np.zeros(self.elevation.size)
        every[self.place] = flux
        return every

    def means(
        self,
        every: NDArray[np.float64],
        start: NDArray[np.datetime64],
        seconds: int,
        shift_minutes: float = 0.0,
    ) -> NDArray[np.float64]:
        """Mean of a quantity given for every minute over intervals, all moved by a shift.

        NaN where any part of a minute of the interval is unknown.
        """
        begin = (start.astype("M8[s]") - self.start).astype(np.float64) + 60.0 * shift_minutes
        edges = np.clip(np.stack([begin, begin + seconds]) / STEP_SECONDS, 0.0, every.size)
        unknown = np.isnan(every)
        mean = _between(np.where(unknown, 0.0, every), edges) * (STEP_SECONDS / seconds)
        if not unknown.any():
            return mean
        return np.where(_between(unknown.astype(np.float64), edges) > 0.0, np.nan, mean)


def interval_means(station: Station, fluxes: Fluxes) -> dict[str, NDArray[np.float64]]:
    """Average quantities of the sun and the sky over each interval of a station.

    Parameters
    ----------
    station : Station
    fluxes : callable
        Given a `SunSeries`, returns named arrays with a value for each entry. While the sun
        is down they count as 0.

    Returns
    -------
    dict of ndarray, shape (n,)
        The means over the whole intervals, night included, in the unit of the values, NaN
        where a value within the interval is; and ``day``, the share of each interval with
        the sun higher than 6 degrees below the level.

    Examples
    --------
    >>> noon = np.array(["2025-06-21T12:00"], "M8[s]")
    >>> station = Station("equator", 0.0, 0.0, 0.0, noon, 3600, {})
    >>> means = interval_means(station, sun_height)
    >>> round(float(means["cosine"][0]), 3)
    0.908
    """
    parts: dict[str, list[NDArray[np.float64]]] = {}
    for window in _chunks(station):
        start = station.start[window]
        end = start[-1] + np.timedelta64(station.seconds - 1, "s")
        minutes = SunMinutes.over(station, start[0], end)
        every = {name: minutes.spread(flux) for name, flux in fluxes(minutes.sun).items()}
        every["day"] = (minutes.elevation > NIGHT_ELEVATION).astype(np.float64)
        for name, values in every.items():
            parts.setdefault(name, []).append(minutes.means(values, start, station.seconds))
    return {name: np.concatenate(means) for name, means in parts.items()}


def sun_height(sun: SunSeries) -> dict[str, NDArray[np.float64]]:
    """`cosine` and `lit` of a series, for `interval_means`."""
    return {"cosine": cosine(sun), "lit": lit(sun)}


def cosine(sun: SunSeries) -> NDArray[np.float64]:
    """Cosine of the apparent zenith angle, 0 while the sun's centre is below the level."""
    return np.maximum(np.sin(np.radians(sun.elevation)), 0.0)


def lit(sun: SunSeries) -> NDArray[np.float64]:
    """1 while the sun's centre is above the level, else 0."""
    return (sun.elevation > 0.0).astype(np.float64)


def on_level(sun: SunSeries, light: Irradiance) -> NDArray[np.float64]:
    """Global irradiance on open level ground [W/m2]."""
    return light.beam_normal * cosine(sun) + light.diffuse_horizontal


def behind_horizon(sun: SunSeries, horizon: ArrayLike) -> NDArray[np.bool_]:
    """Which entries have the sun's centre below a skyline.

    Parameters
    ----------
    sun : SunSeries
    horizon : array_like, shape (azimuths,)
        Height of the skyline in equally spaced azimuths, the first due north, clockwise
        [degree]; linear in between.

    Raises
    ------
    SettingError
        No numbers, or one outside -90 to 90 degrees.
    """
    heights = np.asarray(horizon, np.float64)
    if heights.ndim != 1 or heights.size == 0 or not (np.abs(heights) <= 90.0).all():
        raise SettingError(
            "the horizon must be a list of heights in degrees, -90 to 90, equally spaced in"
            " azimuth, the first due north"
        )
    azimuths = np.arange(heights.size + 1) * (360.0 / heights.size)
    return sun.elevation < np.interp(sun.azimuth, azimuths, np.append(heights, heights[0]))


def _between(every: NDArray[np.float64], edges: NDArray[np.float64]) -> NDArray[np.float64]:
    """Sum of finite values, one a minute, between two rows of edges, in minutes."""
    running = np.concatenate([[0.0], np.cumsum(every)])
    whole = np.minimum(edges.astype(np.int64), every.size - 1)
    first, last = running[whole] + (edges - whole) * every[whole]
    return np.asarray(last - first, np.float64)


def _chunks(station: Station) -> Iterator[slice]:
    count = max(_CHUNK_DAYS * 86400 // station.seconds, 1)
    for first in range(0, station.start.size, count):
        yield slice(first, first + count)
