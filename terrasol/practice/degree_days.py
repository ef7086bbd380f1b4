"""Degree-days of the growing season: Winkler's sum and Huglin's index, carried to every cell.

Both sum how far the days rise above 10 degC. A cell's days are those of the station, shifted by a
lapse rate times the difference in height; a shift is no factor, so the sum is made anew for each
cell, day by day.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr

from terrasol.errors import InputError, SettingError
from terrasol.practice.season import growing_season
from terrasol.practice.temperatures import Temperatures

BASE: Final = 10.0
"""Temperature above which a vine grows [degC], 50 degF: Amerine and Winkler (1944)."""

LAPSE: Final = 6.5
"""Fall of temperature with height [K km-1] of the standard atmosphere (ISO 2533:1975). Nights in
valleys, and winters, fall less or rise: a measured or monthly rate is better."""

MOST_LAPSE: Final = 15.0
"""Lapse rates beyond this either way [K km-1] are refused: no month of real air has them
(judgement, no source)."""

DAILY_SPREAD: Final = 3.5
"""Standard deviation of daily means within a month of the growing season [K], for what monthly
means miss (judgement, no source)."""

HUGLIN_BANDS: Final = (
    (40.0, 1.00),
    (42.0, 1.02),
    (44.0, 1.03),
    (46.0, 1.04),
    (48.0, 1.05),
    (50.0, 1.06),
)
"""Upper latitude [degree] and factor for the longer days: Huglin (1978), C. R. Acad. Agric.
France 64:1117, in the form of Tonietto and Carbonneau (2004),
doi:10.1016/j.agrformet.2003.06.001 (reference from memory)."""

BEYOND: Final = ("undefined", "one", "held")
"""What Huglin's factor is beyond 50 degrees, where his table ends: none, 1 (some climate
services), or 1.06 as in the last band."""


@dataclass(frozen=True)
class Scale:
    """Classes of a sum of degree-days.

    Attributes
    ----------
    edges
        Between the classes, ascending [degC day]; a value on an edge belongs above.
    names
        One more than edges.
    """

    edges: tuple[float, ...]
    names: tuple[str, ...]

    def of(self, values: ArrayLike) -> NDArray[np.int64]:
        """Index into `names` of each value, -1 where it is NaN."""
        number = np.asarray(values, np.float64)
        place = np.searchsorted(np.asarray(self.edges), number, side="right")
        return np.where(np.isnan(number), -1, place)


WINKLER: Final = Scale(
    (850.0, 1111.0, 1389.0, 1667.0, 1944.0, 2222.0, 2700.0),
    ("below Ia", "Ia", "Ib", "II", "III", "IV", "V", "above V"),
)
"""Amerine and Winkler (1944) have I below 2500 degF day (1389), II to 3000, III to 3500, IV to
4000 and V beyond; Ia, Ib and the two ends are from Jones et al. (2010), as quoted in the Oxford
Companion to Wine."""

HUGLIN: Final = Scale(
    (1500.0, 1800.0, 2100.0, 2400.0, 3000.0),
    ("very cool", "cool", "temperate", "temperate warm", "warm", "very warm"),
)
"""Tonietto and Carbonneau (2004); from memory."""


def winkler(
    station: Temperatures,
    height: ArrayLike,
    *,
    latitude: float,
    lapse: float | Sequence[float] = LAPSE,
    season: Sequence[int] | None = None,
    base: float = BASE,
) -> NDArray[np.float64]:
    """Degree-days of the growing season: sum over its days of max(0, mean - base).

    Parameters
    ----------
    station : Temperatures
        Daily means, half of daily extremes for Winkler's own sum, or monthly means, which fall
        short; see `monthly_shortfall`.
    height : array_like
        Of the cells [m]; NaN where void.
    latitude : float
        Degrees north: the hemisphere decides the season.
    lapse : float or twelve floats
        How much cooler it gets with height [K km-1], for the year or by month, January first.
    season : sequence of int, optional
        Months, January is 1; else April to October, or October to April in the south.
    base : float
        [degC].

    Returns
    -------
    ndarray
        degC day, for the cells; NaN where void.

    Raises
    ------
    InputError
        A month of the season of which the station knows too little.
    SettingError
        A lapse rate or season out of range.

    Notes
    -----
    No cap above, as in Amerine and Winkler (1944). 1 degC day is 1.8 degF day.
    """
    months = growing_season(latitude) if season is None else season
    return _summed(station, station.mean, height, lapse, months, base)


def huglin(
    station: Temperatures,
    height: ArrayLike,
    *,
    latitude: ArrayLike,
    lapse: float | Sequence[float] = LAPSE,
    smooth: bool = False,
    beyond: str = "undefined",
) -> NDArray[np.float64]:
    """Huglin's heliothermal index: K times the sum of max(0, ((mean - 10) + (highest - 10)) / 2).

    Over 1 April to 30 September, in the south 1 October to 31 March.

    Parameters
    ----------
    station : Temperatures
        With the daily highest, or monthly means of it.
    height, latitude : array_like
        Of the cells [m, degree], broadcast together; all on one side of the equator.
    lapse : float or twelve floats
        As `winkler`; for mean and highest alike.
    smooth, beyond
        See `huglin_factor`.

    Returns
    -------
    ndarray
        degC day; NaN where void, and beyond 50 degrees of latitude unless `beyond` says otherwise.

    Raises
    ------
    InputError
        A station without the daily highest, or one that does not cover the season.
    SettingError
        Cells on both sides of the equator, or a lapse rate or word out of range.
    """
    if np.isnan(station.highest).all():
        raise InputError("Huglin's index needs the highest temperature of the day; none is given")
    place = np.asarray(latitude, np.float64)
    if np.nanmin(place) < 0.0 <= np.nanmax(place):
        raise SettingError("Huglin's season differs between hemispheres; ask for each by itself")
    months = growing_season(float(np.nanmax(place)))[:-1]
    warmth = 0.5 * (station.mean + station.highest)
    factor = huglin_factor(place, smooth=smooth, beyond=beyond)
    return factor * _summed(station, warmth, height, lapse, months, BASE)


def huglin_factor(
    latitude: ArrayLike, *, smooth: bool = False, beyond: str = "undefined"
) -> NDArray[np.float64]:
    """Huglin's factor K for the length of the days.

    Parameters
    ----------
    latitude : array_like
        Degrees, either hemisphere.
    smooth : bool
        In place of the steps of `HUGLIN_BANDS` (an edge belongs to the band below), straight
        from 1 at 40 to 1.06 at 50 degrees, so that no border runs through a region.
    beyond : {'undefined', 'one', 'held'}
        Beyond 50 degrees: NaN, 1 or 1.06. Sources disagree.

    Raises
    ------
    SettingError
        Another word.

    Examples
    --------
    >>> huglin_factor([38.0, 45.0, -47.0]).tolist()
    [1.0, 1.04, 1.05]
    """
    if beyond not in BEYOND:
        raise SettingError(f"beyond is {beyond!r}; it must be one of {', '.join(BEYOND)}")
    away = np.abs(np.asarray(latitude, np.float64))
    limits, factors = np.array(HUGLIN_BANDS).T
    last = {"undefined": np.nan, "one": 1.0, "held": factors[-1]}[beyond]
    if smooth:
        inside = np.interp(away, (limits[0], limits[-1]), (factors[0], factors[-1]))
    else:
        place = np.searchsorted(limits, away, side="left")
        inside = factors[np.minimum(place, limits.size - 1)]
    return np.where(away > limits[-1], last, np.where(np.isnan(away), np.nan, inside))


def monthly_shortfall(
    station: Temperatures,
    height: ArrayLike,
    *,
    latitude: float,
    lapse: float | Sequence[float] = LAPSE,
    season: Sequence[int] | None = None,
    base: float = BASE,
    spread: float = DAILY_SPREAD,
) -> NDArray[np.float64]:
    """What a sum of degree-days from monthly means falls short of that from days, estimated.

    A month whose mean is below the base has warm days too, and one just above it has cold ones,
    which count 0 and not less. With days spread normally about the month's mean m by s,

        expected max(0, T - base) = s pdf(z) + (m - base) cdf(z),    z = (m - base) / s

    (Thom 1954, Monthly Weather Review 82:111, from memory). Parameters as `winkler`.

    Returns
    -------
    ndarray
        degC day to add; 0 or more.

    Raises
    ------
    SettingError
        A spread of 0 or less; and as `winkler`.
    """
    if not spread > 0.0:
        raise SettingError(f"spread of daily means, {spread:g} K, must be above 0")
    months = growing_season(latitude) if season is None else season
    cells = np.asarray(height, np.float64)
    total = np.zeros(cells.shape)
    for month, shift in _shifts(station, cells, lapse, months):
        above = station.mean[station.of_month(month)].mean() + shift - base
        z = above / spread
        expected = spread * np.exp(-0.5 * z * z) / np.sqrt(2.0 * np.pi) + above * ndtr(z)
        total += station.month_days[month - 1] * (expected - np.maximum(above, 0.0))
    return total


def _summed(
    station: Temperatures,
    warmth: NDArray[np.float64],
    height: ArrayLike,
    lapse: float | Sequence[float],
    season: Sequence[int],
    base: float,
) -> NDArray[np.float64]:
    """Sum of max(0, warmth + shift - base) over the season's days, for each cell's shift.

    Days in order, the sum over those above the base is a cumulative one: a cell costs one search
    a month, and the sum is exact.
    """
    cells = np.asarray(height, np.float64)
    total = np.zeros(cells.shape)
    for month, shift in _shifts(station, cells, lapse, season):
        days = np.sort(warmth[station.of_month(month)]) - base
        days = days[~np.isnan(days)]
        if days.size == 0:
            raise InputError("the station's highest temperatures do not cover the season")
        from_above = np.concatenate([np.cumsum(days[::-1])[::-1], [0.0]])
        cold = np.searchsorted(days, -shift)
        mean = (from_above[cold] + (days.size - cold) * shift) / days.size
        total += station.month_days[month - 1] * mean
    return total


def _shifts(
    station: Temperatures,
    height: NDArray[np.float64],
    lapse: float | Sequence[float],
    season: Sequence[int],
) -> list[tuple[int, NDArray[np.float64]]]:
    """Months of a season with how much warmer each cell is than the station [K]."""
    rates = np.asarray(lapse, np.float64)
    if rates.shape not in ((), (12,)) or not np.all(np.abs(rates) <= MOST_LAPSE):
        raise SettingError(
            f"lapse rates must be one or twelve, within {MOST_LAPSE:g} K/km either way"
        )
    if not season or len(set(season)) != len(season) or not set(season) <= set(range(1, 13)):
        raise SettingError(f"a season is made of months from 1 to 12, each once, not {season}")
    monthly = np.broadcast_to(rates, 12)
    up = (height - station.height) / 1000.0
    return [(month, -monthly[month - 1] * up) for month in season]
