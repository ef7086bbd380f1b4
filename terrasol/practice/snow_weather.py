"""From a station's series to the hours that the snow model wants, gaps named or mended."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.errors import InputError, SettingError
from terrasol.practice.snow import Weather
from terrasol.sky.interval import cosine, interval_means
from terrasol.sky.irradiance import Sky
from terrasol.sky.period import Period, parse_period
from terrasol.sky.station import Station
from terrasol.sky.sun import SunSeries

FILL_HOURS: Final = 6.0
"""Longest gap of temperature or precipitation that is mended unless another length is asked for
(judgement, no source): a night's change of temperature is nearly straight over it."""

NAMED: Final = 3
"""Gaps named in a message."""

WARM_SNOW: Final = (10.0, 12.0)
"""Observed snow water [mm] of days whose air cannot have this mean temperature [degC]: at it
3 to 6 cm of snow water would melt in a day (judgement, no source)."""

HOUR: Final = 3600

WORDS: Final = {"temperature": "interpolated", "precipitation": "taken for dry"}
"""How a short gap of each is mended."""


@dataclass(frozen=True, eq=False)
class Mended:
    """A station's weather by the hour, and what was mended.

    Parameters
    ----------
    weather : Weather
    count : dict of int
        Intervals mended, by quantity.
    doubts : tuple of str
        What a careful reader should know.
    """

    weather: Weather
    count: dict[str, int]
    doubts: tuple[str, ...]


def hourly_weather(
    station: Station,
    edges: NDArray[np.datetime64],
    months: NDArray[np.int64],
    fill_hours: float = FILL_HOURS,
    measured_albedo: bool = False,
) -> Mended:
    """Temperature and precipitation of the hours of some days.

    Intervals of the station are shared between hours by the time they have in common, so that any
    label and zone will do. Within a gap no longer than `fill_hours` temperature is linear in time
    between its neighbours, and precipitation counts as none.

    Parameters
    ----------
    station : Station
        With temperature and precipitation, every hour or more often.
    edges : ndarray of datetime64, shape (days + 1,)
        Of the days, UTC.
    months : ndarray of int64, shape (days,)
        Calendar month of each, 0 to 11.
    fill_hours : float
        Longest gap that is mended.
    measured_albedo : bool
        Take the station's albedo too: the mean of a day, linear between the days that have one.

    Returns
    -------
    Mended

    Raises
    ------
    SettingError
        A length that is no number or negative.
    InputError
        A quantity that was not measured, intervals longer than an hour, days that the series does
        not cover, or a longer gap: named.
    """
    if not fill_hours >= 0.0:
        raise SettingError(f"the longest gap to fill must be 0 hours or more; got {fill_hours}")
    if station.seconds > HOUR:
        raise InputError(
            f"{station.name}: measured every {station.seconds / HOUR:g} h; melt wants an hourly"
            " series, or one more often"
        )
    edges = edges.astype("M8[s]")
    _refuse_beyond(station, edges)
    count: dict[str, int] = {}
    found: dict[str, NDArray[np.float64]] = {}
    for name in ("temperature", "precipitation"):
        values, count[name] = _without_gaps(station, name, edges, fill_hours)
        found[name] = _by_hour(station, values, edges, mean=name == "temperature")
    doubts = tuple(
        f"{station.name}: {count[name]} missing values of {name} {WORDS[name]}"
        for name in found
        if count[name]
    )
    doubts += _too_warm(station, edges, found["temperature"])
    albedo = _daily_albedo(station, edges) if measured_albedo else None
    weather = Weather(
        edges, months, found["temperature"], found["precipitation"], station.height, albedo
    )
    return Mended(weather, count, doubts)


def _too_warm(
    station: Station, edges: NDArray[np.datetime64], air: NDArray[np.float64]
) -> tuple[str, ...]:
    """Says so if the air is far too warm for the snow that was observed: another unit, likely."""
    if "snow_water" not in station.values:
        return ()
    lies = daily_snow_water(station, edges) >= WARM_SNOW[0]
    mean = float(air[lies].mean()) if lies.any() else -np.inf
    if mean < WARM_SNOW[1]:
        return ()
    return (
        f"{station.name}: while snow was observed the air had {mean:.0f} degC in the mean: are its"
        " temperature and snow water in the units that are stated (degF, inch)?",
    )


def whole_days(station: Station, longitude: float) -> Period:
    """All days at a longitude [degrees east] whose 24 hours a series covers, first to last.

    A day begins at the full hour of UTC nearest to midnight of local mean solar time.

    Raises
    ------
    InputError
        There is none.
    """
    late = np.timedelta64(round(-longitude / 15.0), "h")
    day = np.timedelta64(1, "D")
    first, last = (moment - late for moment in (station.start[0].astype("M8[s]"), station.end))
    begin = first.astype("M8[D]")
    begin = begin if begin == first else begin + day
    end = last.astype("M8[D]") - day
    if begin > end:
        raise InputError(f"{station.name}: the series covers no whole day")
    return parse_period(f"{begin}/{end}")


def level_light(station: Station, sky: Sky, edges: NDArray[np.datetime64]) -> NDArray[np.float64]:
    """Beam of a sky on level ground at the station, the mean of each hour, shape (days, 24)."""
    hours = np.arange(edges[0], edges[-1], np.timedelta64(HOUR, "s"))
    clock = replace(station, start=hours, seconds=HOUR, values={}, flags={})

    def light(sun: SunSeries) -> dict[str, NDArray[np.float64]]:
        return {"beam": sky.over(sun, station.height).beam_normal * cosine(sun)}

    return interval_means(clock, light)["beam"].reshape(-1, 24)


def measured_light(station: Station, edges: NDArray[np.datetime64]) -> NDArray[np.float64]:
    """Global irradiance as measured, the mean of each hour, shape (days, 24) [W m-2].

    Raises
    ------
    InputError
        It was not measured, or has gaps in the days.
    """
    if "global" not in station.values:
        raise InputError(f"{station.name}: no global irradiance was measured at the station")
    values, _ = _without_gaps(station, "global", edges.astype("M8[s]"), 0.0)
    return np.maximum(_by_hour(station, values, edges.astype("M8[s]"), mean=True), 0.0)


def daily_snow_water(station: Station, edges: NDArray[np.datetime64]) -> NDArray[np.float64]:
    """Observed snow water at the end of each day: the last value of the day [mm], NaN where none.

    Values below 0, the drift of a pillow, count as 0.

    Raises
    ------
    InputError
        None was measured.
    """
    if "snow_water" not in station.values:
        raise InputError(
            f"{station.name}: no snow water was measured: name its column under"
            " [columns.snow_water]"
        )
    values = station.values["snow_water"]
    found = np.full(edges.size - 1, np.nan)
    known = np.flatnonzero(np.isfinite(values))
    day = np.searchsorted(edges.astype("M8[s]"), station.start[known].astype("M8[s]"), "right") - 1
    inside = (day >= 0) & (day < found.size)
    found[day[inside]] = np.maximum(values[known[inside]], 0.0)
    return found


def _refuse_beyond(station: Station, edges: NDArray[np.datetime64]) -> None:
    """Raise InputError for days outside the series."""
    if edges[0] < station.start[0] or edges[-1] > station.end:
        raise InputError(
            f"{station.name}: measured from {station.start[0]} to {station.end} UTC, which does not"
            f" hold all days from {edges[0]} to {edges[-1]} UTC: choose a period within it"
        )


def _without_gaps(
    station: Station, name: str, edges: NDArray[np.datetime64], fill_hours: float
) -> tuple[NDArray[np.float64], int]:
    """A quantity with its short gaps mended, and how many values that were within the days."""
    if name not in station.values:
        raise InputError(
            f"{station.name}: no {name} was measured, and melt needs it: name its column under"
            f" [columns.{name}]"
        )
    values = station.values[name].copy()
    ends = station.start + np.timedelta64(station.seconds, "s")
    missing = np.isnan(values) & (ends > edges[0]) & (station.start < edges[-1])
    steps = np.flatnonzero(np.diff(np.concatenate([[False], missing, [False]])))
    gaps = list(zip(steps[::2], steps[1::2], strict=True))
    long = [g for g in gaps if (g[1] - g[0]) * station.seconds > fill_hours * HOUR + 1e-6]
    if long or not np.isfinite(values).any():
        told = "; ".join(
            f"from {station.start[a].astype('M8[m]')} to {ends[b - 1].astype('M8[m]')} UTC"
            for a, b in long[:NAMED]
        )
        more = f"; and {len(long) - NAMED} more" if len(long) > NAMED else ""
        raise InputError(
            f"{station.name}: {name} is missing {told}{more}. Choose a period without such gaps, or"
            " fill longer ones with --fill-weather"
        )
    index = np.arange(values.size)
    known = np.isfinite(values)
    if name == "temperature":
        values[missing] = np.interp(index[missing], index[known], values[known])
    else:
        values[missing] = 0.0
    return values, int(missing.sum())


def _by_hour(
    station: Station, values: NDArray[np.float64], edges: NDArray[np.datetime64], *, mean: bool
) -> NDArray[np.float64]:
    """Sums or means over the hours, shape (days, 24), by the running sum of the intervals."""
    start = station.start.astype("M8[s]").astype(np.int64)
    hours = np.arange(edges[0], edges[-1] + np.timedelta64(1, "s"), np.timedelta64(HOUR, "s"))
    at = hours.astype(np.int64)
    if station.seconds == HOUR and start[0] % HOUR == 0:
        first = (at[0] - start[0]) // HOUR
        return values[first : first + at.size - 1].reshape(-1, 24)
    first = int(np.searchsorted(start, at[0], "right")) - 1
    last = int(np.searchsorted(start, at[-1], "left"))
    some = values[first:last]
    bounds = np.append(start[first:last], start[last - 1] + station.seconds)
    running = np.concatenate([[0.0], np.cumsum(some)])
    sums = np.diff(np.interp(at, bounds, running))
    return (sums * station.seconds / HOUR if mean else sums).reshape(-1, 24)


def _daily_albedo(station: Station, edges: NDArray[np.datetime64]) -> NDArray[np.float64]:
    """Mean measured albedo of each day, linear between days, held at the ends of the series.

    Days of the whole series count, so that a period in parts has the values of the whole.
    """
    values = station.values.get("albedo")
    if values is None or not np.isfinite(values).any():
        raise InputError(f"{station.name}: no albedo was measured, so it has none to give")
    since = station.start.astype("M8[s]").astype(np.int64) - edges[0].astype(np.int64)
    known = np.isfinite(values)
    day = since[known] // 86400
    have, place = np.unique(day, return_inverse=True)
    means = np.bincount(place, weights=values[known]) / np.bincount(place)
    return np.interp(np.arange(edges.size - 1), have, means)
