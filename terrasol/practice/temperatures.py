"""Air temperature of a station, hour by hour, day by day or month by month, as months of days.

Degree-days ask how warm the days of each month are. Several years make one mean season: each
calendar month keeps all its days of all years.
"""

from __future__ import annotations

import calendar
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrasol.errors import InputError

LEAST_KNOWN: Final = 0.8
"""Share of the days of a month, or of the hours of a day, that must be known (judgement, no
source); the days that are missing count as the mean of those known."""

MEAN_MONTH: Final = (31.0, 28.2425, 31.0, 30.0, 31.0, 30.0, 31.0, 31.0, 30.0, 31.0, 30.0, 31.0)
"""Days in the months of the mean Gregorian year."""

_MONTH_NAMES: Final = tuple(calendar.month_name)[1:]


@dataclass(frozen=True, eq=False)
class Temperatures:
    """Temperatures at a station, each for a day or for a month.

    Attributes
    ----------
    height
        Of the station above the sea [m].
    month
        Calendar month of each value, January is 1; (n,).
    mean, highest
        Mean, and highest of the day or mean of the month's daily highest [degC]; (n,). NaN in
        `highest` where it is not known.
    month_days
        Days in each calendar month; (12,).
    basis
        What the values are: 'daily' or 'monthly', and how the mean was made.
    """

    height: float
    month: NDArray[np.int64]
    mean: NDArray[np.float64]
    highest: NDArray[np.float64]
    month_days: NDArray[np.float64]
    basis: str

    def of_month(self, month: int) -> NDArray[np.bool_]:
        """Which values belong to a calendar month; InputError if none does."""
        chosen = self.month == month
        if not chosen.any():
            raise InputError(
                f"the station's temperatures do not cover {_MONTH_NAMES[month - 1]} "
                f"({100 * LEAST_KNOWN:.0f} % of its days are needed); give a longer series"
            )
        return chosen


def from_daily(
    day: ArrayLike,
    *,
    height: float,
    mean: ArrayLike | None = None,
    least: ArrayLike | None = None,
    highest: ArrayLike | None = None,
) -> Temperatures:
    """Temperatures by day.

    Parameters
    ----------
    day : array_like of datetime64[D], shape (n,)
        Each date once, in any order.
    height : float
        Of the station [m].
    mean, least, highest : array_like, shape (n,)
        [degC], NaN where missing. With least and highest the day's mean is half their sum, which
        is what Winkler's classes were made with, even if another mean is given: the mean of all
        hours may lie most of a degree lower.

    Returns
    -------
    Temperatures
        Without the months of which less than `LEAST_KNOWN` is known.

    Raises
    ------
    InputError
        Neither means nor both extremes, dates that repeat, or lengths that differ.
    """
    dates = np.asarray(day, "M8[D]").ravel()
    if np.unique(dates).size != dates.size:
        raise InputError("dates of daily temperatures repeat; give each day once")
    blank = np.full(dates.size, np.nan)
    low, high, given = (
        blank if values is None else np.asarray(values, np.float64).ravel()
        for values in (least, highest, mean)
    )
    if {low.size, high.size, given.size} != {dates.size}:
        raise InputError("daily temperatures and their dates differ in number")
    extremes = least is not None and highest is not None
    if not extremes and mean is None:
        raise InputError("daily temperatures need a mean, or both the least and the highest")
    if np.any(low > high):
        raise InputError(f"on {dates[low > high][0]} the least temperature is above the highest")
    middle = 0.5 * (low + high) if extremes else given
    basis = "the middle of daily extremes" if extremes else "daily means"
    return _by_month(dates, middle, high, height, basis)


def from_hourly(
    time: ArrayLike, temperature: ArrayLike, *, height: float, longitude: float
) -> Temperatures:
    """Temperatures by day, from a series of an hour or finer.

    Parameters
    ----------
    time : array_like of datetime64, shape (n,)
        UTC, of a moment or of the middle of an interval.
    temperature : array_like, shape (n,)
        [degC], NaN where missing.
    height : float
        Of the station [m].
    longitude : float
        Degrees east: days are those of local mean solar time, UTC + longitude / 15 h.

    Returns
    -------
    Temperatures
        The day's mean is half the sum of its least and highest value. Hourly means smooth both:
        the highest, which Huglin's index takes, comes out a little low.

    Raises
    ------
    InputError
        Fewer than two values, or a step over 3 hours.
    """
    instant = np.asarray(time, "M8[s]").ravel()
    value = np.asarray(temperature, np.float64).ravel()
    if instant.size != value.size or instant.size < 2:
        raise InputError("an hourly series needs two values or more, and a time for each")
    order = np.argsort(instant, kind="stable")
    instant, value = instant[order], value[order]
    step = float(np.median(np.diff(instant).astype(np.int64)))
    if not 0.0 < step <= 3.0 * 3600.0:
        raise InputError(f"a step of {step / 3600.0:g} h is no hourly series; give daily extremes")
    solar = instant + np.timedelta64(round(longitude * 240.0), "s")
    day, first = np.unique(solar.astype("M8[D]"), return_index=True)
    known = ~np.isnan(value)
    enough = np.add.reduceat(known, first, dtype=np.int64) >= LEAST_KNOWN * 86400.0 / step
    low = np.minimum.reduceat(np.where(known, value, np.inf), first)
    high = np.maximum.reduceat(np.where(known, value, -np.inf), first)
    return from_daily(
        day,
        height=height,
        least=np.where(enough, low, np.nan),
        highest=np.where(enough, high, np.nan),
    )


def from_monthly(
    mean: ArrayLike, *, height: float, highest: ArrayLike | None = None
) -> Temperatures:
    """Temperatures by month: twelve means and, for Huglin, twelve means of the daily highest.

    Parameters
    ----------
    mean, highest : array_like, shape (12,)
        January first [degC]; NaN in months not needed.
    height : float
        Of the station [m].

    Raises
    ------
    InputError
        Not twelve values.
    """
    middle = np.asarray(mean, np.float64)
    high = np.full(12, np.nan) if highest is None else np.asarray(highest, np.float64)
    if middle.shape != (12,) or high.shape != (12,):
        raise InputError("monthly temperatures must be twelve, January first")
    known = ~np.isnan(middle)
    month = np.arange(1, 13)[known]
    return Temperatures(
        float(height), month, middle[known], high[known], np.array(MEAN_MONTH), "monthly mean"
    )


def _by_month(
    dates: NDArray[np.datetime64],
    mean: NDArray[np.float64],
    highest: NDArray[np.float64],
    height: float,
    basis: str,
) -> Temperatures:
    """Keep the known days of the months that are known well enough."""
    months = dates.astype("M8[M]")
    known = ~np.isnan(mean)
    kept = np.zeros(dates.size, np.bool_)
    lengths: list[list[int]] = [[] for _ in range(12)]
    for month in np.unique(months):
        days = int((month + 1).astype("M8[D]").astype(np.int64) - month.astype("M8[D]").astype(int))
        mine = (months == month) & known
        if mine.sum() >= LEAST_KNOWN * days:
            kept |= mine
            lengths[int(month.astype(np.int64)) % 12].append(days)
    month_days = np.array(
        [np.mean(days) if days else MEAN_MONTH[k] for k, days in enumerate(lengths)]
    )
    number = months.astype(np.int64) % 12 + 1
    return Temperatures(float(height), number[kept], mean[kept], highest[kept], month_days, basis)
