"""Filling short gaps of a measured series by the clear sky's shape."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.errors import SettingError
from terrasol.sky.interval import interval_means, lit, on_level
from terrasol.sky.irradiance import Sky
from terrasol.sky.quality import LIGHT, Flag
from terrasol.sky.station import Station
from terrasol.sky.sun import SunSeries

LONGEST_HOURS: Final = 3.0
"""Hours of sun that are filled unless another length is asked for."""

LEAST_CLEAR: Final = 20.0
"""W/m2 of clear sky under which measured by clear light says nothing of the clouds, and is not
interpolated from (judgement)."""

HIGHEST_INDEX: Final = 1.2
"""Most of the clear sky's light that is carried into a gap (judgement)."""


@dataclass(frozen=True)
class Gap:
    """Missing values in a row that were not filled.

    Attributes
    ----------
    quantity : str
    start, end : numpy.datetime64[s]
        From the beginning of the first missing interval to the end of the last, UTC.
    hours : float
        From start to end.
    sun_hours : float
        Of these, with the sun above the level.
    """

    quantity: str
    start: np.datetime64
    end: np.datetime64
    hours: float
    sun_hours: float

    def __str__(self) -> str:
        """The gap in words."""
        start, end = (moment.astype("M8[m]") for moment in (self.start, self.end))
        return (
            f"{self.quantity} missing from {start} to {end} UTC, {self.hours:.4g} h, of which"
            f" {self.sun_hours:.4g} h with sun"
        )


@dataclass(frozen=True, eq=False)
class Filled:
    """A station without its short gaps.

    Attributes
    ----------
    station : Station
        Filled values carry the flag FILLED.
    count : dict of int
        Intervals filled, by quantity.
    gaps : tuple of Gap
        What was too long, in order of quantity and time.
    """

    station: Station
    count: dict[str, int]
    gaps: tuple[Gap, ...]


def fill_gaps(station: Station, sky: Sky, longest_hours: float = LONGEST_HOURS) -> Filled:
    """Fill gaps of global, beam and diffuse, up to a length, by the clear-sky index.

    The index, measured by clear light, is linear between the measured values on either side
    of the gap. Time runs while the sun is up only, so the evening before is next to the
    morning after. At the ends of the series the nearest index is held. Without sun the light
    is 0.

    Parameters
    ----------
    station : Station
        Run it through `terrasol.sky.quality.usable` first, if impossible values should count
        as missing. Other quantities than light are left as they are.
    sky : Sky
        The clear sky.
    longest_hours : float
        Hours of sun that a gap may have and be filled; a gap of night alone is always filled.

    Returns
    -------
    Filled

    Raises
    ------
    SettingError
        A length that is no number or negative.

    Notes
    -----
    An index counts where the clear sky brings at least 20 W/m2; no more than 1.2 is carried
    into a gap. The three lights are filled each by its own index, so global is not forced to
    be diffuse + beam.
    """
    if not longest_hours >= 0.0:
        raise SettingError(f"the longest gap to fill must be 0 hours or more; got {longest_hours}")
    names = [name for name in LIGHT if name in station.values]
    values, flags = dict(station.values), dict(station.flags)
    count: dict[str, int] = {}
    gaps: list[Gap] = []
    if not any(np.isnan(station.values[name]).any() for name in names):
        return Filled(station, dict.fromkeys(names, 0), ())

    def light(sun: SunSeries) -> dict[str, NDArray[np.float64]]:
        clear = sky.over(sun, station.height)
        return {
            "global": on_level(sun, clear),
            "beam": clear.beam_normal,
            "diffuse": clear.diffuse_horizontal,
            "lit": lit(sun),
        }

    clear = interval_means(station, light)
    sun_hours = clear["lit"] * station.seconds / 3600.0
    for name in names:
        missing = np.isnan(values[name])
        estimate = _from_index(values[name], clear[name], sun_hours)
        fill = np.zeros_like(missing)
        for first, last in _runs(missing):
            gap = _gap(station, name, first, last, sun_hours)
            if gap.sun_hours <= longest_hours + 1e-9 and np.isfinite(estimate[first:last]).all():
                fill[first:last] = True
            else:
                gaps.append(gap)
        values[name] = np.where(fill, estimate, values[name])
        bits = flags.get(name, np.zeros(missing.size, np.uint16))
        flags[name] = np.where(fill, (bits & ~Flag.MISSING) | Flag.FILLED, bits).astype(np.uint16)
        count[name] = int(np.count_nonzero(fill))
    return Filled(replace(station, values=values, flags=flags), count, tuple(gaps))


def _from_index(
    values: NDArray[np.float64], clear: NDArray[np.float64], sun_hours: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Clear light times the index, linear over hours of sun; NaN if there is no index at all."""
    told = np.isfinite(values) & (clear >= LEAST_CLEAR)
    dark = clear <= 0.0
    if not told.any():
        return np.where(dark, 0.0, np.nan)
    at = np.cumsum(sun_hours) - sun_hours / 2.0
    index = np.clip(values[told] / clear[told], 0.0, HIGHEST_INDEX)
    return np.where(dark, 0.0, clear * np.interp(at, at[told], index))


def _runs(missing: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """First and one past the last index of every run of missing values."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], missing, [False]])))
    return [(int(a), int(b)) for a, b in zip(edges[::2], edges[1::2], strict=True)]


def _gap(station: Station, name: str, first: int, last: int, sun_hours: NDArray[np.float64]) -> Gap:
    length = (last - first) * station.seconds
    start = station.start[first].astype("M8[s]")
    end = start + np.timedelta64(length, "s")
    return Gap(name, start, end, length / 3600.0, float(sun_hours[first:last].sum()))
