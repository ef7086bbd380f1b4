"""From a station's raw series to a sky that can be summed, and what was found on the way."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.errors import InputError
from terrasol.sky.clear import Air
from terrasol.sky.cloud import CloudedSky, clouded_sky
from terrasol.sky.gaps import LONGEST_HOURS, Gap, fill_gaps
from terrasol.sky.period import Period, parse_period
from terrasol.sky.quality import LARGEST_OFFSET, LIGHT, check_quality, usable
from terrasol.sky.station import Station
from terrasol.sky.sun import sun_path, sun_series
from terrasol.sky.timing import Timing, check_times

TRUSTED: Final = ("consistent", "unknown")
"""Verdicts on the clock that call for no warning."""

NAMED: Final = 3
"""Gaps named in a message."""


@dataclass(frozen=True, eq=False)
class MeasuredSky:
    """The sky of a station, ready to be summed.

    Attributes
    ----------
    sky : CloudedSky
    station : Station
        Without what cannot be true, short gaps filled.
    period : Period
        What was asked for, or all whole days of the series.
    report : dict
        Quality, gaps and clock, as plain numbers and text.
    warnings : tuple of str
        What a careful reader should know.
    """

    sky: CloudedSky
    station: Station
    period: Period
    report: dict[str, Any]
    warnings: tuple[str, ...]


def measured_sky(
    station: Station,
    air: Air,
    period: Period | None = None,
    *,
    decomposition: str = "dirint",
    fill_hours: float = LONGEST_HOURS,
    step_seconds: float = 60.0,
    horizon: NDArray[np.float64] | None = None,
) -> MeasuredSky:
    """Check a station's series, fill its short gaps, and read the sky from it.

    Parameters
    ----------
    station : Station
        As read.
    air : Air
        The clear air behind the clouds.
    period : Period, optional
        What will be summed; by default all days whose sun the series covers.
    decomposition : {'erbs', 'disc', 'dirint'}
        See `clouded_sky`.
    fill_hours : float
        Hours of sun that a gap may have and be filled.
    step_seconds : float
        Time step of the sun.
    horizon : ndarray, shape (azimuths,), optional
        Terrain around the station, for the check of its clock only [degree].

    Returns
    -------
    MeasuredSky

    Raises
    ------
    SettingError
        A setting out of its range.
    InputError
        A period that the series does not cover, named gap by gap.
    """
    quality = check_quality(station)
    sound, changed = usable(station, quality)
    filled = fill_gaps(sound, air, fill_hours)
    period = period or covered_days(filled.station, step_seconds)
    ends = _beyond_ends(filled.station, period, step_seconds)
    _refuse_gaps(filled.station, (*filled.gaps, *ends), period)
    sky = clouded_sky(filled.station, air, period, decomposition, step_seconds)
    timing = check_times(station, air, horizon)
    report = {
        "name": station.name,
        "latitude": station.latitude,
        "longitude": station.longitude,
        "height_m": station.height,
        "interval_seconds": station.seconds,
        "decomposition": decomposition if set(LIGHT) & set(station.values) == {"global"} else None,
        "quality": quality.summary(),
        "filled": filled.count,
        "gaps": [str(gap) for gap in filled.gaps],
        "clock": {"verdict": timing.verdict, "words": timing.words},
        "light_without_sun_mj_m2": round(sky.left_out, 3),
    }
    doubts = series_doubts(station, changed, filled.count, timing, quality.night_offset)
    return MeasuredSky(sky, filled.station, period, report, doubts)


def series_doubts(
    station: Station,
    changed: dict[str, dict[str, int]],
    filled: dict[str, int],
    timing: Timing,
    night_offset: dict[str, float],
) -> tuple[str, ...]:
    """Warnings on a series, each with the station's name.

    Parameters
    ----------
    station : Station
        As read.
    changed : dict of dict of int
        What `usable` changed, by quantity; light alone is told of.
    filled : dict of int
        Intervals filled, by quantity.
    timing : Timing
        What its clear days say of its clock.
    night_offset : dict of float
        Mean at night, by quantity [W/m2]; see `Quality`.
    """
    doubts = [*station.notes]
    if timing.verdict not in TRUSTED:  # first, since night and gaps follow from the clock
        doubts.append(f"{timing.words}; nothing was changed")
    doubts += [
        f"{station.name}: {name} reads {offset:+.0f} W/m2 at night, on the mean; its days may be"
        " out by as much, and are left as they are"
        for name, offset in night_offset.items()
        if abs(offset) > LARGEST_OFFSET
    ]
    impossible = {name: changed[name]["impossible"] for name in LIGHT if name in changed}
    for counts, words in (
        (impossible, "cannot be true and count as missing"),
        (filled, "filled by clear-sky index"),
    ):
        if any(counts.values()):
            told = ", ".join(f"{count} of {name}" for name, count in counts.items() if count)
            doubts.append(f"{station.name}: {words}: {told}")
    return tuple(doubts)


def monthly_albedo(station: Station, period: Period) -> tuple[float, ...]:
    """Measured albedo of each calendar month, weighted by measured global light.

    Parameters
    ----------
    station : Station
        With albedo and global.
    period : Period
        What will be summed.

    Returns
    -------
    tuple of 12 floats
        January to December; 0 for months outside the period.

    Raises
    ------
    InputError
        Albedo or global was not measured, in general or in a month of the period.
    """
    for name in ("albedo", "global"):
        if name not in station.values:
            raise InputError(f"{station.name}: no {name} was measured, so it has no albedo to give")
    local = station.start + station.solar_offset
    inside = (local >= period.start) & (local < period.end)
    albedo, weight = station.values["albedo"], station.values["global"]
    inside &= np.isfinite(albedo) & (weight > 0.0)
    month = local.astype("M8[M]").astype(np.int64) % 12
    sums = np.bincount(month[inside], weights=weight[inside], minlength=12)
    returned = np.bincount(month[inside], weights=(albedo * weight)[inside], minlength=12)
    wanted = sorted({m for _, m in period.months})
    empty = [m for m in wanted if sums[m - 1] == 0.0]
    if empty:
        raise InputError(
            f"{station.name}: no albedo was measured under light in month"
            f" {', '.join(map(str, empty))} of the period {period.label}: give --albedo as numbers"
        )
    found = np.where(sums > 0.0, returned / np.where(sums > 0.0, sums, 1.0), 0.0)
    return tuple(float(min(max(value, 0.0), 1.0)) for value in found)


def covered_days(station: Station, step_seconds: float = 60.0) -> Period:
    """All days of local mean solar time whose sun a series covers, first to last.

    Raises
    ------
    InputError
        There is none.
    """
    ends = station.start[0], station.end
    days = [(moment + station.solar_offset).astype("M8[D]") for moment in ends]
    one = np.timedelta64(1, "D")
    for place, step in ((0, one), (1, -one)):
        if days[0] <= days[1] and not _covered(station, days[place], step_seconds):
            days[place] = days[place] + step
    if days[0] > days[1]:
        raise InputError(f"{station.name}: the series covers no whole day")
    return parse_period(f"{days[0]}/{days[1]}")


def _covered(station: Station, day: np.datetime64, step_seconds: float) -> bool:
    """Whether all of a day's sun lies within the series."""
    path = sun_path(parse_period(str(day)), station.longitude, step_seconds)
    sun = sun_series(path, station.latitude, station.height)
    lit = sun.time[sun.elevation > 0.0]
    return bool(((lit >= station.start[0]) & (lit < station.end)).all())


def _refuse_gaps(station: Station, gaps: tuple[Gap, ...], period: Period) -> None:
    """Raise InputError for gaps with sun within a period."""
    first, last = (moment - station.solar_offset for moment in (period.start, period.end))
    missing = [g for g in gaps if g.sun_hours > 0.0 and g.end > first and g.start < last]
    if missing:
        named = "; ".join(str(gap) for gap in missing[:NAMED])
        more = f"; and {len(missing) - NAMED} more" if len(missing) > NAMED else ""
        raise InputError(
            f"the series has gaps in the period {period.label}: {named}{more}."
            " Choose a period without them, or fill longer ones within the series (--fill-hours)",
            station.name,
        )


def _beyond_ends(station: Station, period: Period, step_seconds: float) -> list[Gap]:
    """Parts of a period before a series begins and after it ends, if it has any part of it."""
    first, last = (
        (moment - station.solar_offset).astype("M8[s]") for moment in (period.start, period.end)
    )
    begin, end = station.start[0].astype("M8[s]"), station.end
    if end <= first or begin >= last or (begin <= first and end >= last):
        return []
    path = sun_path(period, station.longitude, step_seconds)
    sun = sun_series(path, station.latitude, station.height)
    lit = sun.time[sun.elevation > 0.0]
    return [
        Gap(
            "everything",
            start,
            stop,
            float((stop - start) / np.timedelta64(1, "h")),
            float(((lit >= start) & (lit < stop)).sum() * step_seconds / 3600.0),
        )
        for start, stop in ((first, begin), (end, last))
        if start < stop
    ]
