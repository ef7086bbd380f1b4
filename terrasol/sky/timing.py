"""Do the times of a measured series agree with the sun? An estimate; nothing is changed."""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.stats import theilslopes

from terrasol.sky.interval import SunMinutes, behind_horizon, cosine
from terrasol.sky.irradiance import Sky
from terrasol.sky.quality import LONGEST_INTERVAL, LOWEST
from terrasol.sky.station import Station

Verdict = Literal[
    "consistent", "label", "zone", "label or zone", "jump", "drift", "unexplained", "unknown"
]

GREATEST: Final = 2200.0
"""W/m2 that no global light exceeds: 1.5 E0 + 100 at the zenith (Long and Dutton 2002)."""

COARSE_STEP: Final = 15.0
COARSE_REACH: Final = 12.0 * 60.0
"""Minutes: the first search, over a whole day; a zone 13 h too far looks like one 11 h short."""

FINE_STEP: Final = 2.5
FINE_REACH: Final = 100.0
"""Minutes: the search day by day, about what the first one found. It holds an hour on either
side, so a clock that keeps daylight saving is seen on both."""

LOWEST_SUN: Final = float(np.sin(np.radians(7.0)))
"""Intervals with a lower mean sun are left out: refraction, haze and hills rule there."""

CLEAR_MISFIT: Final = 0.04
"""A day is clear if the scaled clear sky fits it with this rms, as a share of its mean."""

CLEAR_SCALE: Final = (0.75, 1.25)
"""Scales of the clear sky that a clear day may need: turbidity, calibration (judgement)."""

LEAST_INTERVALS: Final = 5
LEAST_SHARE: Final = 0.9
"""Intervals with light that a clear day must have, and share of what the sun could give."""

TRIMMED: Final = 0.15
"""Share of a clear day's intervals that may fit worst and be left out (judgement)."""

MINUTES_PER_DEGREE: Final = 4.0

LEAST_SIDE: Final = 0.25
"""Share of the intervals that must lie on either side of noon."""

LEAST_DAYS: Final = 5
"""Clear days without which nothing is said (judgement)."""

TOLERANCE: Final = 8.0
"""Minutes within which a shift agrees with an explanation: a clear day's haze or an unseen
hill on one side shifts it by some minutes (judgement; `docs/validation.md` has measurements)."""

LEAST_TOLERANCE: Final = 3.0
"""The same where intervals are short, of which a quarter counts."""

SHORT_INTERVAL: Final = 600
"""Seconds; shorter intervals are joined up to this."""

WIDEST: Final = 20.0
"""Minutes between the bounds of the shift beyond which no verdict is given: half an hour is the
smallest common mistake of hourly series, and must stand out (judgement)."""

JUMP: Final = 40.0
"""Minutes between the shifts of two months that are a clock set anew."""

RESAMPLES: Final = 1000


@dataclass(frozen=True, eq=False)
class Timing:
    """What the clear days say of the clock.

    Attributes
    ----------
    verdict : str
        ``consistent``; ``label`` (the intervals lie half or a whole interval beside their
        labels); ``zone``; ``label or zone`` (both would explain it); ``jump`` (parts of the
        series differ by about an hour); ``drift``; ``unexplained``; ``unknown`` (too few
        clear days, or days that differ too much).
    words : str
        The verdict as a sentence for people.
    shift : float
        Minutes to add to the stated times to agree with the sun; NaN if unknown.
    low, high : float
        Bounds of the shift: 95 % of bootstrap samples of the clear days. They hold the
        scatter between days, not what is common to all, such as an unseen hill.
    drift : float
        Minutes a year by which the shift grows; NaN if unknown.
    days : (d,) datetime64[D]
        The clear days, local mean solar time.
    shifts : (d,) float64
        Shift of each [minutes].
    """

    verdict: Verdict
    words: str
    shift: float
    low: float
    high: float
    drift: float
    days: NDArray[np.datetime64]
    shifts: NDArray[np.float64]


def check_times(station: Station, sky: Sky, horizon: ArrayLike | None = None) -> Timing:
    """Estimate by how much the stated intervals miss the sun, from clear days.

    Parameters
    ----------
    station : Station
        With global. Values that no time of day could bring are left out.
    sky : Sky
        A clear sky of about the right turbidity; its scale is free on each day.
    horizon : array_like, shape (azimuths,), optional
        Height of the skyline around the station, equally spaced azimuths, the first due
        north, clockwise [degree]. Intervals in which the sun is behind it, at any moment,
        are left out. Without it hills to one side look like a shift.

    Returns
    -------
    Timing

    Raises
    ------
    SettingError
        A horizon that is none.

    Notes
    -----
    Own method, in two steps. First the shift, of up to 12 hours either way in steps of 15
    minutes, at which the whole series correlates best with the clear sky: it finds the zone
    whatever the weather. Then, for each day, the shift within 100 minutes of that one at which
    the scaled clear sky fits the day best; scale and shift are both free, and the 15 % of the
    intervals that fit worst are left out. Days that it fits within 4 % rms are clear, as in
    the test for clear moments of Reno and Hansen (2016), which also frees the scale but takes
    the times for right. The shift is the median of the clear days.

    Only hours whose mirror image about true noon is free of hills too are used: what is left
    of a half-hidden day would take an error of the clear sky's shape for a shift.

    The clear sky's means over the shifted intervals are made of minutes, so half an interval
    counts as what it is.

    References
    ----------
    Reno, M. J. and Hansen, C. W. (2016), Renewable Energy 90, 520-531,
    doi:10.1016/j.renene.2015.12.031.
    """
    if station.seconds > LONGEST_INTERVAL or 86400 % station.seconds:
        length = f"{station.seconds / 3600:.3g} h"
        return _unknown(station, f"intervals of {length} are too long to tell, or no part of a day")
    if "global" not in station.values:
        return _unknown(station, "no global light was measured")
    found = [_clear_days(part, sky, horizon) for part in _parts(_coarser(_sane(station)))]
    days, shifts = (np.concatenate(pieces) for pieces in zip(*found, strict=True))
    if days.size < LEAST_DAYS:
        short = f"{days.size} clear days are too few to tell, {LEAST_DAYS} are needed"
        return _unknown(station, short, days, shifts)
    return _judge(station, days, shifts)


def _sane(station: Station) -> Station:
    """Leave out what no time of day could bring: the clock is in doubt here."""
    values = station.values["global"]
    sane = (values >= LOWEST) & (values <= GREATEST)
    return replace(station, values={"global": np.where(sane, values, np.nan)}, flags={})


def _coarser(station: Station) -> Station:
    """Join short intervals to some of ten minutes: their noise goes, the shift stays."""
    count = SHORT_INTERVAL // station.seconds
    if count < 2:
        return station
    whole = station.start.size // count * count
    joined = station.values["global"][:whole].reshape(-1, count).mean(axis=1)
    start = station.start[:whole:count]
    return replace(
        station, start=start, seconds=station.seconds * count, values={"global": joined}, flags={}
    )


def _parts(station: Station) -> list[Station]:
    """Cut a series into equal parts of at most a year."""
    n = station.start.size
    count = -(-n * station.seconds // (366 * 86400))
    edges = np.linspace(0, n, count + 1).astype(int)
    return [
        replace(
            station,
            start=station.start[a:b],
            values={"global": station.values["global"][a:b]},
            flags={},
        )
        for a, b in itertools.pairwise(edges)
    ]


def _clear_days(
    station: Station, sky: Sky, horizon: ArrayLike | None
) -> tuple[NDArray[np.datetime64], NDArray[np.float64]]:
    """Clear days of a series of at most a year, and the shift of each [minutes]."""
    measured = station.values["global"]
    if np.count_nonzero(measured > 20.0) < LEAST_INTERVALS:
        return np.empty(0, "M8[D]"), np.empty(0)
    search = _Search(station, sky, horizon)
    return search.clear_days(measured, search.best_correlation(measured))


class _Search:
    """The clear sky over a station minute by minute, to be read at any shift."""

    def __init__(self, station: Station, sky: Sky, horizon: ArrayLike | None) -> None:
        self.station = station
        margin = np.timedelta64(int((COARSE_REACH + FINE_REACH) * 60.0), "s")
        self.minutes = SunMinutes.over(station, station.start[0] - margin, station.end + margin)
        sun = self.minutes.sun
        light = sky.over(sun, station.height)
        mu = cosine(sun)
        shaded = np.zeros(mu.size, np.bool_) if horizon is None else behind_horizon(sun, horizon)
        beam = np.where(shaded, 0.0, light.beam_normal)
        self.clear = self.minutes.spread(beam * mu + light.diffuse_horizontal)
        self.height = self.minutes.spread(mu)
        self.open = self._open_on_both_sides(self.minutes.spread(~shaded & (mu > 0.0)))

    def _open_on_both_sides(self, free: NDArray[np.float64]) -> NDArray[np.float64]:
        """Minutes with free sun whose mirror image about true noon has free sun too.

        So a hill on one side does not leave one half of the day, whose shape alone would then
        say how the clock stands.
        """
        minute = np.arange(free.size)
        mirror = minute - np.round(2.0 * self.minutes.hour_angle * MINUTES_PER_DEGREE).astype(int)
        inside = (mirror >= 0) & (mirror < free.size)
        return free * np.where(inside, free[np.clip(mirror, 0, free.size - 1)], 0.0)

    def at(self, every: NDArray[np.float64], shift: float) -> NDArray[np.float64]:
        """Means over the station's intervals, all later by a shift [minutes]."""
        return self.minutes.means(every, self.station.start, self.station.seconds, shift)

    def best_correlation(self, measured: NDArray[np.float64]) -> float:
        """Shift at which measured and clear light correlate best [minutes]."""
        known = np.isfinite(measured)
        shifts = np.arange(-COARSE_REACH, COARSE_REACH + 1.0, COARSE_STEP)
        if not np.ptp(measured[known]) > 0.0:  # a logger that stood still fits no shift
            return 0.0
        right = [
            np.corrcoef(measured[known], self.at(self.clear, shift)[known])[0, 1]
            for shift in shifts
        ]
        return float(shifts[int(np.nanargmax(right))])

    def clear_days(
        self, measured: NDArray[np.float64], coarse: float
    ) -> tuple[NDArray[np.datetime64], NDArray[np.float64]]:
        """Clear days and the shift of each, near a coarse one [minutes]."""
        days = _Days.of(self.station, coarse)
        shifts = coarse + np.arange(-FINE_REACH, FINE_REACH + 0.1, FINE_STEP)
        by_day = days.rows(measured)
        misfit = np.stack([self._misfit(by_day, days, float(shift)) for shift in shifts])
        best = np.argmin(misfit, axis=0)
        inside = (best > 0) & (best < shifts.size - 1)
        found = np.flatnonzero(inside & (misfit.min(axis=0) < CLEAR_MISFIT))
        best = best[found]
        before, here, after = (misfit[best + k, found] ** 2 for k in (-1, 0, 1))
        curved = np.isfinite(before) & np.isfinite(after)
        found, best = found[curved], best[curved]
        before, here, after = before[curved], here[curved], after[curved]
        bend = before - 2.0 * here + after
        offset = 0.5 * (before - after) / np.where(bend > 0.0, bend, np.inf)
        return days.date[found], shifts[best] + FINE_STEP * np.clip(offset, -0.5, 0.5)

    def _misfit(
        self, measured: NDArray[np.float64], days: _Days, shift: float
    ) -> NDArray[np.float64]:
        """Relative rms of each day to the scaled clear sky at a shift; inf where unfit."""
        clear, height, free = (
            days.rows(self.at(every, shift)) for every in (self.clear, self.height, self.open)
        )
        could = (height > LOWEST_SUN) & (free > 0.999)
        use = could & np.isfinite(measured)
        number = use.sum(axis=1)
        morning = (use & (np.gradient(height, axis=1) > 0.0)).sum(axis=1)
        fit = (number >= LEAST_INTERVALS) & (number >= LEAST_SHARE * could.sum(axis=1))
        fit &= np.minimum(morning, number - morning) >= LEAST_SIDE * number
        misfit = np.full(number.size, np.inf)
        if fit.any():
            use, clear, measured = use[fit], clear[fit], measured[fit]
            misfit[fit] = _scaled_misfit(np.where(use, measured, np.nan), clear)
        return misfit


@dataclass(frozen=True, eq=False)
class _Days:
    """A series cut into days of local mean solar time, as its clock would have it."""

    date: NDArray[np.datetime64]
    before: int
    slots: int

    @classmethod
    def of(cls, station: Station, shift: float) -> _Days:
        local = np.timedelta64(round(station.longitude * 240.0 + shift * 60.0), "s")
        middle = (station.middle + local).astype("M8[s]")
        slots = 86400 // station.seconds
        since = int((middle[0] - middle[0].astype("M8[D]")).astype(np.int64))
        before = since // station.seconds
        count = -(-(before + middle.size) // slots)
        return cls(middle[0].astype("M8[D]") + np.arange(count), before, slots)

    def rows(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Values as one row a day, NaN before the first and after the last."""
        every = np.full(self.date.size * self.slots, np.nan)
        every[self.before : self.before + values.size] = values
        return every.reshape(self.date.size, self.slots)


def _scaled_misfit(measured: NDArray[np.float64], clear: NDArray[np.float64]) -> Any:
    """Relative rms of each row to the scaled clear sky; inf where the scale is not credible.

    Intervals that are NaN do not count, nor those that fit worst: a mast's shadow, one cloud.
    """
    first = np.nanmedian(measured / np.maximum(clear, 1.0), axis=1, keepdims=True)
    order = np.argsort(np.abs(measured - first * clear), axis=1)
    number = np.isfinite(measured).sum(axis=1, keepdims=True)
    kept = np.ceil((1.0 - TRIMMED) * number)
    rank = np.argsort(order, axis=1)
    use = rank < kept
    own, cross, square, mean = (
        np.where(use, values, 0.0).sum(axis=1)
        for values in (clear**2, clear * measured, measured**2, measured)
    )
    scale = cross / np.where(own > 0.0, own, np.inf)
    rest = np.maximum(square - scale * cross, 0.0) / kept[:, 0]
    misfit = np.sqrt(rest) * kept[:, 0] / np.maximum(mean, 1.0)
    return np.where((scale > CLEAR_SCALE[0]) & (scale < CLEAR_SCALE[1]), misfit, np.inf)


def _judge(station: Station, days: NDArray[np.datetime64], shifts: NDArray[np.float64]) -> Timing:
    """Say what a shift of each clear day means."""
    shift = float(np.median(shifts))
    drawn = np.random.default_rng(0).integers(0, shifts.size, (RESAMPLES, shifts.size))
    low, high = np.percentile(np.median(shifts[drawn], axis=1), [2.5, 97.5])
    years = (days - days[0]).astype(np.float64) / 365.25
    slope = theilslopes(shifts, years, alpha=0.99) if years[-1] > 0.0 else (0.0, 0.0, 0.0, 0.0)
    drift = float(slope[0])
    drifts = slope[2] * slope[3] > 0.0 and abs(drift) * years[-1] > TOLERANCE
    jump = _jump(days, shifts)
    verdict: Verdict
    if high - low > WIDEST and not jump:
        verdict, meaning = "unknown", "the clear days differ too much to tell"
    elif jump:
        verdict, meaning = "jump", jump
    elif drifts:
        verdict, meaning = "drift", f"the clock drifts by {drift:+.1f} min a year"
    else:
        verdict, meaning = _explain(shift, station.seconds / 60.0)
    words = (
        f"{station.name}: {days.size} clear days agree with the sun if {shift:+.1f} min are added"
        f" to the stated times ({low:+.1f} to {high:+.1f} in 95 % of samples): {meaning}"
    )
    return Timing(verdict, words, shift, float(low), float(high), drift, days, shifts)


def _jump(days: NDArray[np.datetime64], shifts: NDArray[np.float64]) -> str:
    """Months whose shifts lie far apart, in words; nothing if there are none."""
    month = days.astype("M8[M]")
    named = [(m, float(np.median(shifts[month == m]))) for m in np.unique(month)
             if np.count_nonzero(month == m) >= 2]  # fmt: skip
    if not named:
        return ""
    first, last = (pick(named, key=lambda pair: pair[1]) for pick in (min, max))
    if last[1] - first[1] <= JUMP:
        return ""
    return (
        f"they differ within the series, {first[1]:+.0f} min in {first[0]} but {last[1]:+.0f} in"
        f" {last[0]}: another source of the values, a clock set anew, or daylight saving"
    )


def _explain(shift: float, interval: float) -> tuple[Verdict, str]:
    """Which mistake makes such a shift, both in minutes, and what to do."""
    tolerance = float(np.clip(interval / 4.0, LEAST_TOLERANCE, TOLERANCE))
    if abs(shift) <= tolerance:
        return "consistent", f"consistent within {tolerance:g} min"
    edges = {"half an interval": interval / 2.0, "one interval": interval}
    side = "later" if shift > 0.0 else "earlier"
    label = [
        f"the label marks another edge, the intervals lie {words} {side} than stated"
        for words, size in edges.items()
        if abs(abs(shift) - size) <= tolerance
    ]
    zone = _zone(shift, 60 if label else 30)
    both = []
    if not (label or zone):
        both = [
            f"{_zone(rest, 60)} and the label is wrong by {words}"
            for words, size in edges.items()
            for rest in (shift - size, shift + size)
            if _zone(rest, 60)
        ]
    if label and zone:
        return "label or zone", f"probably {label[0]}, or {zone}; here the two look alike"
    if label:
        return "label", f"probably {label[0]}"
    if zone or both:
        return "zone", f"probably {zone or ', or '.join(both)}"
    return "unexplained", (
        "no label or zone explains it; the clock or the longitude may be wrong (a degree is 4"
        " min), the sensor may lean east or west (a degree is some 5 min), or hills hide the sun"
    )


def _zone(shift: float, unit: int) -> str:
    """A zone wrong by a number of units [minutes], in words; nothing if that is not it."""
    size = unit * round(abs(shift) / unit)
    if size == 0 or abs(abs(shift) - size) > TOLERANCE:
        return ""
    return f"the stated zone is {size / 60:g} h too far {'east' if shift > 0.0 else 'west'}"


def _unknown(
    station: Station,
    why: str,
    days: NDArray[np.datetime64] | None = None,
    shifts: NDArray[np.float64] | None = None,
) -> Timing:
    days = np.empty(0, "M8[D]") if days is None else days
    shifts = np.empty(0) if shifts is None else shifts
    words, nan = f"{station.name}: {why}", float("nan")
    return Timing("unknown", words, nan, nan, nan, nan, days, shifts)
