"""Single days of sun, minute by minute: when it comes, when it goes, by what clock."""

from __future__ import annotations

import re
import threading
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from datetime import date, datetime, timedelta
from typing import Final
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import SOLAR_RADIUS_DEG
from terrasol.errors import SettingError
from terrasol.ground.horizon import azimuth_directions
from terrasol.ground.sightline import Outlooks
from terrasol.kernels.daywalk import walk_days
from terrasol.light.irradiation import Strip
from terrasol.light.latitudes import LATITUDE_GRAIN
from terrasol.sky.period import Period, parse_period
from terrasol.sky.sun import (
    HORIZON_REFRACTION,
    SunPath,
    horizontal_position,
    refraction,
    sun_path,
)

UPPER_LIMB: Final = SOLAR_RADIUS_DEG
"""How far above the sun's centre, degrees, the point lies that counts as the sun: the upper limb,
as for sunrise and sunset in almanacs and in Reda and Andreas (2008), NREL/TP-560-34302."""

PARALLAX: Final = 8.794 / 3600.0
"""Of a sun at one astronomical unit on the horizon, degrees (IAU 1976)."""

MOMENTS: Final = 24 * 60 + 1
"""Minutes of a day from one true solar midnight to the next, both included."""

LEAST_GAP: Final = 1.0
"""Shortest interruption that is counted, minutes."""

LOWEST_LIMB: Final = -2.0
"""Moments with the sun's limb lower than this, degrees, are night for every cell of a strip:
cells lie at most 1.25 degrees from the latitude that serves (BLOCK_LATITUDES)."""

HEIGHT_GRAIN: Final = 250.0
"""Days' paths are refracted for heights rounded to this, m: on a level horizon an error of
125 m moves sunrise by a second."""

MOST_DAYS: Final = 366

PATHS_KEPT: Final = 32


@dataclass(frozen=True)
class Clock:
    """What time of day is told in.

    Parameters
    ----------
    name : str
        "solar", "+01:00" or a name of the time-zone database.
    zone : ZoneInfo or timedelta, optional
        Offset from UTC, or where it is looked up; None for true solar time.
    """

    name: str
    zone: ZoneInfo | timedelta | None = None

    def offset(self, day: date) -> float:
        """Hours to add to UTC on a day, as in force at its noon."""
        if self.zone is None:
            return 0.0
        if isinstance(self.zone, timedelta):
            return self.zone.total_seconds() / 3600.0
        offset = datetime(day.year, day.month, day.day, 12, tzinfo=self.zone).utcoffset()
        return offset.total_seconds() / 3600.0 if offset else 0.0

    @property
    def words(self) -> str:
        """For labels."""
        if self.zone is None:
            return "true solar time"
        return f"UTC{self.name}" if isinstance(self.zone, timedelta) else f"time of {self.name}"


def parse_clock(text: str) -> Clock:
    """Read the name of a clock.

    Parameters
    ----------
    text : str
        "solar", "UTC", an offset from UTC such as "+01:00", or a name of the time-zone
        database such as "Europe/Zurich".

    Raises
    ------
    SettingError
        None of these.

    Examples
    --------
    >>> parse_clock("-03:30").offset(date(2025, 6, 21))
    -3.5
    >>> parse_clock("Europe/Zurich").offset(date(2025, 6, 21))
    2.0
    """
    text = text.strip()
    if text.lower() == "solar":
        return Clock("solar")
    offset = re.fullmatch(r"([+-])(\d{2}):([0-5]\d)", text, flags=re.ASCII)
    if offset and int(offset[2]) <= 14:
        away = timedelta(hours=int(offset[2]), minutes=int(offset[3]))
        return Clock(text, away if offset[1] == "+" else -away)
    try:
        return Clock(text, ZoneInfo(text))
    except (ZoneInfoNotFoundError, ValueError, OSError):
        raise SettingError(
            f"clock {text!r} is not known: write solar, an offset from UTC such as +01:00, or a"
            " time zone such as Europe/Zurich"
        ) from None


def parse_days(days: str | Sequence[str] | None, period: Period) -> tuple[date, ...]:
    """Read the days whose first and last sun is wanted.

    Parameters
    ----------
    days : str, sequence of str, or None
        Days, months or ranges as in `parse_period`, joined by commas if in one text; "none" or
        an empty sequence for no days; None for the 21st of each month in the period, or its
        first day if there is none.
    period : Period
        What is summed.

    Raises
    ------
    SettingError
        A text that is no day, a day given twice, or more than 366 of them.

    Examples
    --------
    >>> [str(day) for day in parse_days("2025-06-21,2025-12-21", parse_period("2025"))]
    ['2025-06-21', '2025-12-21']
    """
    if days is None:
        all_days = _days_of(period)
        return tuple(day for day in all_days if day.day == 21)[:MOST_DAYS] or all_days[:1]
    parts = days.split(",") if isinstance(days, str) else list(days)
    if parts == ["none"]:
        return ()
    found: list[date] = []
    for part in parts:
        found += _days_of(parse_period(str(part)))
    if len(found) > MOST_DAYS:
        raise SettingError(f"{len(found)} days are too many: give at most {MOST_DAYS}")
    twice = {day for day in found if found.count(day) > 1}
    if twice:
        raise SettingError(f"the day {min(twice)} is given twice: give each day once")
    return tuple(found)


def _days_of(period: Period) -> tuple[date, ...]:
    """Every day of a period."""
    first = date.fromisoformat(str(period.start.astype("M8[D]")))
    return tuple(first + timedelta(days=k) for k in range(period.days))


def tilt(strip: Strip, latitude: float) -> NDArray[np.float64]:
    """Latitude of the cells less that of a table or path, by row and column [radians]."""
    return np.radians(np.array(strip.latitude) - (latitude, 0.0, 0.0))


@dataclass(frozen=True)
class DayPath:
    """The sun of some days over one latitude, minute by minute; see `walk_days`."""

    latitude: float
    suns: NDArray[np.float32]
    sectors: NDArray[np.int64]
    runs: NDArray[np.int64]
    ranges: NDArray[np.float32]


@dataclass
class Days:
    """The sun of chosen days, from one true solar midnight to the next, over one meridian.

    Parameters
    ----------
    azimuths : int
        Number of horizon azimuths.
    declination : ndarray, shape (days, MOMENTS)
        Degrees.
    parallax : ndarray, shape (days,)
        Degrees.
    clock_less_solar : ndarray, shape (days, 2)
        What to add to true solar time on the meridian to get the hours since 0:00 of the day
        on the chosen clock, at the day's beginning and end.
    solar : bool
        Whether the clock is true solar time, the same on all meridians.
    """

    azimuths: int
    declination: NDArray[np.float64]
    parallax: NDArray[np.float64]
    clock_less_solar: NDArray[np.float64]
    solar: bool
    _paths: dict[tuple[int, int], DayPath] = field(default_factory=dict)
    _lock: threading.Lock = field(default_factory=threading.Lock)

    @classmethod
    def over(cls, days: Sequence[date], longitude: float, clock: Clock, azimuths: int) -> Days:
        """Follow the sun of some days over a meridian [degrees east]."""
        suns = [_one_day(day, clock, longitude) for day in days]
        declination, parallax, add = (np.array(part) for part in zip(*suns, strict=True))
        return cls(azimuths, declination, parallax, add, clock.zone is None)

    def at(self, latitude: float, height: float) -> DayPath:
        """The paths for a latitude [degrees] and a height [m], both rounded."""
        key = round(latitude / LATITUDE_GRAIN), round(height / HEIGHT_GRAIN)
        with self._lock:
            if key not in self._paths:
                while len(self._paths) >= PATHS_KEPT:
                    self._paths.pop(next(iter(self._paths)))
                self._paths[key] = self.exactly(key[0] * LATITUDE_GRAIN, key[1] * HEIGHT_GRAIN)
            return self._paths[key]

    def exactly(self, latitude: float, height: float) -> DayPath:
        """The paths for a latitude [degrees] and a height [m]."""
        hour_angle = np.linspace(-180.0, 180.0, MOMENTS)
        geometric, azimuth = horizontal_position(self.declination, hour_angle, latitude)
        geometric -= self.parallax[:, None] * np.cos(np.radians(geometric))
        limb = np.minimum(geometric + lift(geometric, height) + UPPER_LIMB, 89.9)
        turn = azimuth / 360.0 * self.azimuths
        sectors = np.floor(turn).astype(np.int64)
        angle = np.radians(azimuth)
        tangent = np.tan(np.radians(limb))
        squeeze = 1.0 + (lift(geometric + 0.01, height) - lift(geometric - 0.01, height)) / 0.02
        suns = np.stack([tangent, turn - sectors, np.sin(angle), np.cos(angle), squeeze], axis=-1)
        sectors %= self.azimuths
        found = [_runs(*day) for day in zip(limb > LOWEST_LIMB, sectors, suns, strict=True)]
        longest = 1 + max(len(runs) for runs, _ in found)
        runs = np.zeros((len(found), longest, 3), np.int64)
        ranges = np.zeros((len(found), longest, 4), np.float32)
        for i, (own, own_ranges) in enumerate(found):
            runs[i, : len(own)] = own
            ranges[i, : len(own)] = own_ranges
        return DayPath(latitude, suns.astype(np.float32), sectors, runs, ranges)

    def on_clock(
        self, minutes: NDArray[np.float32], east: NDArray[np.float64] | float = 0.0
    ) -> NDArray[np.float32]:
        """Time of day on the chosen clock.

        Parameters
        ----------
        minutes : ndarray, shape (days, rows, columns)
            Since true solar midnight at the cell.
        east : ndarray, shape (rows, columns)
            Longitude of the cells less that of the meridian [degrees].

        Returns
        -------
        ndarray of float32
            Hours since 0:00 of the day; below 0 on the day before, above 24 on the day after.
        """
        add = self.clock_less_solar[:, :, None, None]
        hours = minutes / 60.0 + add[:, 0] + (add[:, 1] - add[:, 0]) * (minutes / 1440.0)
        return (hours if self.solar else hours - east / 15.0).astype(np.float32)


def lift(geometric: NDArray[np.float64], height: float) -> NDArray[np.float64]:
    """Refraction of a low sun that goes on below the level [degrees].

    As `terrasol.sky.sun.refraction`, but never more than the 34 minutes of arc that stand for
    the horizon, and below sunrise as much as at sunrise instead of none.
    """
    sunrise = -(HORIZON_REFRACTION + SOLAR_RADIUS_DEG) + 1e-9
    return np.minimum(refraction(np.maximum(geometric, sunrise), height), HORIZON_REFRACTION)


def _one_day(
    day: date, clock: Clock, longitude: float
) -> tuple[NDArray[np.float64], float, tuple[float, float]]:
    """Declination, parallax and what to add to true solar time.

    Of the day that has its noon on the date by the clock.
    """
    shift = 0
    if clock.zone is not None:
        noon = 12.0 - longitude / 15.0 + clock.offset(day)
        shift = -int(np.floor(noon / 24.0))
    start = np.datetime64(day, "D") + np.timedelta64(shift - 1, "D")
    around = replace(
        parse_period(str(day)),
        start=start.astype("M8[s]"),
        end=(start + np.timedelta64(3, "D")).astype("M8[s]"),
    )
    path = sun_path(around, longitude, 600.0)
    angle = np.unwrap(path.hour_angle, period=360.0) - 360.0
    wanted = np.linspace(-180.0, 180.0, MOMENTS)
    declination = np.interp(wanted, angle, path.declination)
    if clock.zone is None:
        return declination, _parallax(path), (0.0, 0.0)
    mean_time = (np.arange(angle.size) + 0.5) / 6.0 - 24.0
    add = np.interp(wanted[[0, -1]], angle, mean_time) - (0.0, 24.0)
    add += 24.0 * shift - longitude / 15.0 + clock.offset(day)
    return declination, _parallax(path), (float(add[0]), float(add[1]))


def _parallax(path: SunPath) -> float:
    return PARALLAX / float(path.distance.mean())


def _runs(
    kept: NDArray[np.bool_], sectors: NDArray[np.int64], suns: NDArray[np.float64]
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Stretches of moments within one sector, and what their tangents and places do in each."""
    state = np.where(kept, sectors, -1)
    edges = np.flatnonzero(np.diff(state)) + 1
    starts, stops = np.r_[0, edges], np.r_[edges, state.size]
    up = state[starts] >= 0
    runs = np.stack([starts, stops, state[starts]], axis=-1)[up]
    ranges = np.zeros((len(runs), 4))
    for own, (start, stop, _) in zip(ranges, runs, strict=True):
        tangent, place = suns[start:stop, 0], suns[start:stop, 1]
        own[:2] = tangent.min(), tangent.max()
        own[2:] = [1.0001 * np.abs(np.diff(x)).max(initial=1e-6) for x in (tangent, place)]
    return runs, ranges


def strip_days(
    strip: Strip, days: Days, outlooks: Outlooks | None = None, columns: slice | None = None
) -> NDArray[np.float32]:
    """First and last sun, time in the sun and interruptions of each day.

    Parameters
    ----------
    strip : Strip
        The ground.
    days : Days
        Which days.
    outlooks : Outlooks, optional
        The strip's cells on the ground around them, over which crossings are settled; without,
        the strip's horizon is taken at its word.
    columns : slice, optional
        Of the strip, all that is wanted; those of `outlooks`. What comes out of a cell does not
        depend on it.

    Returns
    -------
    ndarray of float32, shape (4, days, rows, columns)
        First and last moment of direct sun, time in the sun [minutes, from true solar
        midnight], count of interruptions; NaN where void; without sun that day 0 time and NaN.
    """
    known = strip.heights[np.isfinite(strip.heights)]
    height = strip.datum + (float(known.mean()) if known.size else 0.0)
    path = days.at(strip.middle, height)
    if columns is not None:
        strip = strip.thin(columns.start, 1, columns.stop)
    shape = strip.heights.shape
    views = outlooks or Outlooks.none(shape)
    out = np.empty((shape[0], path.suns.shape[0], shape[1], 4), np.float32)
    walk_days(
        strip.horizon,
        strip.normal,
        azimuth_directions(days.azimuths),
        tilt(strip, path.latitude),
        path.suns,
        path.sectors,
        path.runs,
        path.ranges,
        LEAST_GAP,
        views.ground,
        views.origin,
        views.eyes,
        views.grid,
        views.bow,
        views.bend,
        views.beyond,
        out,
    )
    return np.ascontiguousarray(out.transpose(3, 1, 0, 2))
