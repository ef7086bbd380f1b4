"""Skies with clouds: the clear sky's light, thinned as a series or a monthly index says."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from pvlib import atmosphere, irradiance

from terrasol.errors import InputError, SettingError
from terrasol.sky.clear import Air
from terrasol.sky.interval import cosine, lit, on_level
from terrasol.sky.irradiance import Irradiance
from terrasol.sky.period import Period
from terrasol.sky.station import Station
from terrasol.sky.sun import SunSeries, sun_path, sun_series

DECOMPOSITIONS: Final = ("erbs", "disc", "dirint")
"""Models that part measured global light into beam and diffuse."""

HIGHEST_INDEX: Final = 1.6
"""Most that clouds may add to the clear sky's light over an interval (broken clouds beside the
sun reach some 1.5 for minutes; common practice, no source). What was measured beyond, which
happens where the clear sky is next to nothing, counts as even light of the dome."""

LEAST_INDEX: Final = 0.05
MOST_INDEX: Final = 1.2
"""Monthly clear-sky indices that are taken; no climate leaves these (judgement)."""

MONTHLY_KT_RANGE: Final = (0.3, 0.8)
"""Clearness for which Erbs et al. (1982) fitted their monthly diffuse fraction."""


@dataclass(frozen=True, eq=False)
class CloudedSky:
    """The sky of a measured series, at any height and near-by place.

    Make one with `clouded_sky`.

    Attributes
    ----------
    air : Air
        The clear air behind the clouds.
    start : (n,) numpy.datetime64[s]
        Beginning of each interval, UTC.
    seconds : int
        Length of an interval.
    global_index, beam_index : (n,) float64
        Measured by clear global on level ground, and beam; NaN where nothing is known.
    rest : (n,) float64
        Even light of the dome besides, while the sun is up [W/m2].
    left_out : float
        Energy measured in intervals without sun, in no table [MJ m-2].
    strict : bool
        Refuse moments that the series does not cover; else their light is NaN.
    name : str, optional
        Of the series, for messages.
    """

    air: Air
    start: NDArray[np.datetime64]
    seconds: int
    global_index: NDArray[np.float64]
    beam_index: NDArray[np.float64]
    rest: NDArray[np.float64]
    left_out: float
    strict: bool = True
    name: str | None = None

    def over(self, sun: SunSeries, height: float) -> Irradiance:
        """Light at a height [m]: both indices times the clear sky's light there.

        Raises
        ------
        InputError
            Where the series does not cover a moment with the sun up.
        """
        clear = self.air.over(sun, height)
        place = _interval(sun.time, self.start, self.seconds)
        outside = (place < 0) | (place >= self.start.size)
        place = np.clip(place, 0, self.start.size - 1)
        index = np.where(outside, np.nan, self.global_index[place])
        unknown = (sun.elevation > 0.0) & np.isnan(index)
        if self.strict and unknown.any():
            raise InputError(_no_light(sun.time[unknown], sun.step_seconds), self.name)
        return _thinned(sun, clear, index, self.beam_index[place], self.rest[place])


@dataclass(frozen=True)
class MonthlySky:
    """A clear sky thinned by one index a month.

    Parameters
    ----------
    air : Air
        The clear air behind the clouds.
    index : tuple of 12 floats
        Mean global irradiation on level ground by that of the clear sky, January to December.

    Raises
    ------
    SettingError
        Not twelve, or one outside 0.05 to 1.2.

    Notes
    -----
    The beam's share follows from the monthly clearness after Erbs, Klein and Duffie (1982),
    Solar Energy 28, 293-302, doi:10.1016/0038-092X(82)90302-4, their monthly relation with
    two seasons parted by a sunset hour angle of 81.4 degrees. Mornings and afternoons are
    alike: an index has no hours.
    """

    air: Air
    index: tuple[float, ...]

    def __post_init__(self) -> None:
        """Refuse what is no index."""
        if len(self.index) != 12 or not all(LEAST_INDEX <= k <= MOST_INDEX for k in self.index):
            raise SettingError(
                f"the clear-sky index must be one number or twelve from {LEAST_INDEX:g} to"
                f" {MOST_INDEX:g}, January first"
            )

    def over(self, sun: SunSeries, height: float) -> Irradiance:
        """Light at a height [m]."""
        clear = self.air.over(sun, height)
        upright = cosine(sun)
        count = int(sun.month.max(initial=-1)) + 1
        beam, diffuse, above, steps = (
            np.bincount(sun.month, weights=flux, minlength=count)
            for flux in (
                clear.beam_normal * upright,
                clear.diffuse_horizontal,
                clear.extraterrestrial_normal * upright,
                lit(sun),
            )
        )
        local = sun.time + np.timedelta64(round(sun.longitude * 240.0), "s")
        calendar = local.astype("M8[M]").astype(np.int64) % 12
        index = np.array(self.index)[calendar]
        of_month = np.zeros(count)
        of_month[sun.month] = index
        whole = of_month * (beam + diffuse)
        days = np.zeros(count)
        for month in np.unique(sun.month):
            days[month] = np.unique(local[sun.month == month].astype("M8[D]")).size
        sunset = 180.0 * steps * sun.step_seconds / (86400.0 * np.maximum(days, 1.0))
        kt = whole / np.where(above > 0.0, above, np.inf)
        direct = whole * (1.0 - monthly_diffuse_fraction(kt, sunset))
        beam_index = np.minimum(direct / np.where(beam > 0.0, beam, np.inf), HIGHEST_INDEX)
        nothing = np.zeros_like(index)
        return _thinned(sun, clear, index, beam_index[sun.month], nothing)


def monthly_diffuse_fraction(
    kt: NDArray[np.float64], sunset: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Diffuse by global irradiation of a month.

    Erbs, Klein and Duffie (1982), as printed by Duffie and Beckman (2013), eq. 2.12.1.

    Parameters
    ----------
    kt : ndarray
        Monthly global by extraterrestrial irradiation; held within 0.3 to 0.8.
    sunset : ndarray
        Hour angle of sunset [degree].

    Examples
    --------
    >>> monthly_diffuse_fraction(np.array([0.5]), np.array([90.0])).round(3)
    array([0.429])
    """
    kt = np.clip(kt, *MONTHLY_KT_RANGE)
    winter = 1.391 - 3.560 * kt + 4.189 * kt**2 - 2.137 * kt**3
    rest = 1.311 - 3.022 * kt + 3.427 * kt**2 - 1.821 * kt**3
    return np.where(sunset <= 81.4, winter, rest)


def clouded_sky(
    station: Station,
    air: Air,
    period: Period,
    decomposition: str = "dirint",
    step_seconds: float = 60.0,
) -> CloudedSky:
    """Read the sky of a period from a station's series.

    The station counts as level and open. What it measured is divided by what a clear sky
    would have sent there in the same interval, so that the same energy comes back at its
    place, interval by interval, and a morning of fog stays a morning of fog.

    Parameters
    ----------
    station : Station
        With global; or beam and diffuse. Negative values count as 0.
    air : Air
        The clear air behind the clouds.
    period : Period
        What will be summed.
    decomposition : {'erbs', 'disc', 'dirint'}
        Where only global was measured: Erbs et al. (1982), Maxwell (1987) or Perez et al.
        (1992), as pvlib computes them.
    step_seconds : float
        Time step of the sun; no longer than the station's interval.

    Returns
    -------
    CloudedSky

    Raises
    ------
    SettingError
        An unknown decomposition, or a step longer than the interval.
    InputError
        A station that measured no light that can be parted.
    """
    if decomposition not in DECOMPOSITIONS:
        raise SettingError(
            f"decomposition '{decomposition}' is not one of: {', '.join(DECOMPOSITIONS)}"
        )
    if step_seconds > station.seconds:
        raise SettingError(
            f"a sun step of {step_seconds:g} s is longer than the interval of {station.name},"
            f" {station.seconds} s: choose a shorter step"
        )
    clear = _Clear.of(station, air, period, step_seconds)
    whole, direct = _measured(station, clear, decomposition)
    dark = clear.lit_seconds == 0.0
    left_out = float(np.nansum(np.where(dark, whole, 0.0)) * station.seconds * 1e-6)
    ratio = _ratio(whole, clear.whole)
    index = np.minimum(ratio, HIGHEST_INDEX)
    spread = (whole - index * clear.whole) * station.seconds
    rest = np.where(dark, 0.0, spread / np.where(dark, 1.0, clear.lit_seconds))
    beam_index = np.clip(_ratio(direct, clear.direct), 0.0, HIGHEST_INDEX)
    known = np.isfinite(whole) & np.isfinite(direct)
    index[~known & ~dark] = np.nan
    start = station.start[clear.window]
    return CloudedSky(
        air,
        start,
        station.seconds,
        index,
        beam_index,
        np.nan_to_num(rest),
        left_out,
        name=station.name,
    )


@dataclass(frozen=True, eq=False)
class _Clear:
    """The clear sky over a station, as means over its intervals within a window [W/m2]."""

    window: slice
    whole: NDArray[np.float64]
    direct: NDArray[np.float64]
    normal: NDArray[np.float64]
    cosine: NDArray[np.float64]
    lit_seconds: NDArray[np.float64]

    @classmethod
    def of(cls, station: Station, air: Air, period: Period, step_seconds: float) -> _Clear:
        day = np.timedelta64(1, "D")
        path = sun_path(period, station.longitude, step_seconds)
        sun = sun_series(path, station.latitude, station.height)
        first, last = period.start - day, period.end + day
        inside = np.flatnonzero((station.start >= first) & (station.start < last))
        if inside.size == 0:
            raise InputError(
                f"{station.name}: measured from {station.start[0]} to {station.start[-1]}, nothing"
                f" in the period {period.label}"
            )
        window = slice(int(inside[0]), int(inside[-1]) + 1)
        start = station.start[window]
        place = _interval(sun.time, start, station.seconds)
        fits = (place >= 0) & (place < start.size)
        light = air.over(sun, station.height)
        upright = cosine(sun)
        share = step_seconds / station.seconds

        def means(flux: NDArray[np.float64]) -> NDArray[np.float64]:
            sums = np.bincount(place[fits], weights=flux[fits], minlength=start.size)
            return np.asarray(share * sums, np.float64)

        direct = means(light.beam_normal * upright)
        return cls(
            window,
            direct + means(light.diffuse_horizontal),
            direct,
            means(light.beam_normal),
            means(upright),
            means(lit(sun)) * station.seconds,
        )


def _measured(
    station: Station, clear: _Clear, decomposition: str
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Global and direct irradiance on level ground, from whatever was measured [W/m2]."""
    have = {
        name: np.maximum(station.values[name][clear.window], 0.0)
        for name in ("global", "beam", "diffuse")
        if name in station.values
    }
    if "beam" in have:
        # A beam in the same shape as the clear one, thinned to what was measured.
        direct = clear.direct * _ratio(have["beam"], clear.normal)
        if "global" in have:
            return have["global"], np.minimum(direct, have["global"])
        if "diffuse" in have:
            return direct + have["diffuse"], direct
    elif "global" in have:
        whole = have["global"]
        if "diffuse" in have:
            return whole, np.maximum(whole - have["diffuse"], 0.0)
        return whole, _decomposed(station, clear, whole, decomposition)
    raise InputError(
        f"{station.name}: measured {' and '.join(have) or 'no light'}; needed is global, or beam"
        " and diffuse"
    )


def _decomposed(
    station: Station, clear: _Clear, whole: NDArray[np.float64], model: str
) -> NDArray[np.float64]:
    """Direct irradiance on level ground out of global, by a published model [W/m2].

    The zenith angle is that of the interval's mean cosine.
    """
    times = pd.DatetimeIndex(station.middle[clear.window], tz="UTC")
    zenith = np.degrees(np.arccos(np.clip(clear.cosine, 0.0, 1.0)))
    pressure = atmosphere.alt2pres(station.height)
    filled = pd.Series(np.nan_to_num(whole), times)
    day = np.asarray(times.day_of_year)
    if model == "erbs":
        direct = whole - irradiance.erbs(filled.to_numpy(), zenith, day)["dhi"]
    else:
        if model == "disc":
            beam = irradiance.disc(filled.to_numpy(), zenith, day, pressure=pressure)["dni"]
        else:
            with warnings.catch_warnings():
                warnings.filterwarnings("ignore", "DatetimeIndex.dayofyear")  # pvlib, pandas 3.1
                beam = irradiance.dirint(filled, pd.Series(zenith, times), times, pressure=pressure)
        direct = np.nan_to_num(np.asarray(beam, np.float64)) * clear.cosine
    return np.where(np.isnan(whole), np.nan, np.clip(direct, 0.0, whole))


def _thinned(
    sun: SunSeries,
    clear: Irradiance,
    index: NDArray[np.float64],
    beam_index: NDArray[np.float64],
    rest: NDArray[np.float64],
) -> Irradiance:
    """The clear sky's light times indices; global is kept where the beam would exceed it."""
    upright = cosine(sun)
    whole = index * on_level(sun, clear) + rest
    whole = np.where(sun.elevation > 0.0, whole, 0.0)
    beam = np.minimum(np.nan_to_num(beam_index) * clear.beam_normal, clear.extraterrestrial_normal)
    direct = np.minimum(beam * upright, whole)
    beam = np.where(upright > 0.0, direct / np.where(upright > 0.0, upright, 1.0), 0.0)
    return Irradiance(beam, whole - direct, clear.extraterrestrial_normal)


def _interval(
    time: NDArray[np.datetime64], start: NDArray[np.datetime64], seconds: int
) -> NDArray[np.int64]:
    """Index of the interval that holds each moment; outside 0 to n - 1 where none does."""
    since = time.astype("M8[ns]") - start[0].astype("M8[ns]")
    return np.floor_divide(since.astype(np.int64), seconds * 1_000_000_000)


def _ratio(part: NDArray[np.float64], whole: NDArray[np.float64]) -> NDArray[np.float64]:
    """Part by whole, 0 where the whole is nothing."""
    return np.where(whole > 0.0, part / np.where(whole > 0.0, whole, 1.0), 0.0)


def _no_light(times: NDArray[np.datetime64], step_seconds: float) -> str:
    """Say which moments with sun the series does not cover."""
    hours = times.size * step_seconds / 3600.0
    return (
        f"the series does not say what light there was in {hours:.1f} hours of sun of the period,"
        f" first at {times[0].astype('M8[m]')} UTC: fill its gaps, or choose a period it covers"
    )
