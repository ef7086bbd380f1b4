"""Hours of direct sun and of bright sunshine, for a period and its months, by look-up."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import date
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import REFRACTION_COEFFICIENT, SOLAR_RADIUS_DEG
from terrasol.ground.horizon import azimuth_directions
from terrasol.kernels.sunshine import LANES, fill_time, sum_time
from terrasol.light.days import UPPER_LIMB, Clock, tilt
from terrasol.light.irradiation import Strip
from terrasol.light.latitudes import LatitudeTables
from terrasol.light.settings import check_azimuths, check_refraction
from terrasol.sky.irradiance import Sky
from terrasol.sky.period import Period
from terrasol.sky.sun import (
    SunPath,
    steps_per_day,
    sun_series,
)
from terrasol.sky.suntable import HORIZON_KNOTS

BRIGHT_BEAM: Final = 120.0
"""Beam facing the sun, W/m2, above which sunshine is counted: WMO-No. 8, Guide to Instruments
and Methods of Observation, chapter 8, measurement of sunshine duration."""

AZIMUTHS: Final = 256
"""Horizon azimuths by default, four times as many as for energy: the sun takes 5.6 minutes from
one to the next, and a ridge's corner between two is cut off (docs/method.md, hours of sun)."""


@dataclass(frozen=True)
class HoursSettings:
    """Which hours to count.

    Parameters
    ----------
    period : Period
        What is summed.
    sky : Sky
        Whose beam says when sunshine is bright: the clear air, or a measured sky.
    days : tuple of date
        Whose first and last sun is wanted.
    clock : Clock
        Time of day of the first and last sun.
    azimuths : int
        Number of horizon azimuths: a multiple of 4 from 8 to 720.
    step_seconds : float
        Time step of the sun for the sums; divides a day.
    refraction : float
        Terrestrial refraction coefficient k of lines of sight.

    Raises
    ------
    SettingError
        A value out of its range.
    """

    period: Period
    sky: Sky
    days: tuple[date, ...] = ()
    clock: Clock = field(default_factory=lambda: Clock("solar"))
    azimuths: int = AZIMUTHS
    step_seconds: float = 60.0
    refraction: float = REFRACTION_COEFFICIENT

    def __post_init__(self) -> None:
        """Refuse what makes no sense."""
        check_azimuths(self.azimuths)
        check_refraction(self.refraction)
        steps_per_day(self.step_seconds)

    @property
    def lanes(self) -> int:
        """Sums in a table: the months' hours of sun, then those of bright sun."""
        return -(-2 * len(self.period.months) // LANES) * LANES

    def table_bytes(self, heights: int) -> float:
        """Size of the table of one latitude with that many height knots [bytes]."""
        return 4.0 * heights * self.azimuths * HORIZON_KNOTS * self.lanes


def limb_above_edge(beam: NDArray[np.float64]) -> NDArray[np.float64]:
    """How far the disc's centre must stand above a straight edge for bright sunshine.

    The edge lets through the share of the beam that the disc's visible segment is of the disc.

    Parameters
    ----------
    beam : ndarray
        Beam of the whole disc, facing the sun [W/m2].

    Returns
    -------
    ndarray
        In radii of the disc, -1 to 1; inf where the whole disc does not suffice.

    Examples
    --------
    >>> limb_above_edge(np.array([100.0, 240.0])).round(3).tolist()
    [inf, 0.0]
    """
    height = np.sin(np.linspace(-np.pi / 2, np.pi / 2, 2001))
    share = 0.5 + (height * np.sqrt(1.0 - height**2) + np.arcsin(height)) / np.pi
    need = BRIGHT_BEAM / np.maximum(beam, 1e-9)
    return np.where(need < 1.0, np.interp(need, share, height), np.inf)


def time_table(
    path: SunPath, latitude: float, heights: NDArray[np.float64], settings: HoursSettings
) -> NDArray[np.float32]:
    """Tabulate the hours of a period over one latitude.

    Parameters
    ----------
    path : SunPath
        The period's sun.
    latitude : float
        Degrees north.
    heights : ndarray, shape (heights,)
        See `terrasol.sky.suntable.height_knots` [m].
    settings : HoursSettings
        Which hours.

    Returns
    -------
    ndarray of float32, shape (heights, azimuths, knots, lanes)
        Hours with the sun above each horizon: the months' hours of sun, then the months'
        hours of bright sun.
    """
    months = len(path.period.months)
    table = np.zeros((heights.size, settings.azimuths, HORIZON_KNOTS, settings.lanes))
    hours = path.step_seconds / 3600.0
    for height, layer in zip(heights, table, strict=True):
        sun = sun_series(path, latitude, float(height))
        azimuth, lane = np.radians(sun.azimuth), sun.month.astype(np.int64)
        limb = np.minimum(sun.elevation + UPPER_LIMB, 90.0)
        fill_time(np.sin(np.radians(limb)), azimuth, lane, hours, layer)
        need = limb_above_edge(settings.sky.over(sun, float(height)).beam_normal)
        edge = np.maximum(sun.elevation - need * SOLAR_RADIUS_DEG, -90.0)
        edge = np.minimum(edge, 90.0)
        fill_time(np.sin(np.radians(edge)), azimuth, months + lane, hours, layer)
    return table.astype(np.float32)


@dataclass(frozen=True)
class Mixed:
    """A table of hours for one latitude.

    Parameters
    ----------
    table : ndarray of float32
        See `time_table`.
    dark : ndarray of int64, shape (azimuths,)
        First horizon knot of each azimuth with no sun above it.
    latitude : float
        Whose table it is [degrees].
    northward : ndarray, shape (lanes,)
        Relative change of level ground's hours a radian north that tilting the ground does not
        bring: the height at which the beam passes 120 W m-2 stays where it is.
    """

    table: NDArray[np.float32]
    dark: NDArray[np.int64]
    latitude: float
    northward: NDArray[np.float32]


class TimeTables(LatitudeTables[Mixed, Mixed]):
    """Tables of hours at the latitude and height knots that a raster needs."""

    settings: HoursSettings

    def fill(self, index: int) -> None:
        """Compute the table of one latitude knot."""
        latitude = float(self.latitudes[index])
        table = time_table(self.path, latitude, self.heights, self.settings)
        lit = np.count_nonzero(table.any(axis=(0, 3)), axis=1)
        level = np.zeros(self.settings.lanes, np.float32)
        self.tables[index] = Mixed(table, np.minimum(lit, HORIZON_KNOTS - 1), latitude, level)

    def between(self, south: int, latitude: float) -> tuple[Mixed, int]:
        """Mix the tables of two knots."""
        below, above = self.tables[south], self.tables[south + 1]
        share = (latitude - below.latitude) / (above.latitude - below.latitude)
        table = above.table - below.table
        table *= np.float32(share)
        table += below.table
        northward = _northward(table, below, above)
        dark = np.maximum(below.dark, above.dark)
        return Mixed(table, dark, latitude, northward), table.nbytes

    def level(self, latitude: float, height: float) -> NDArray[np.float64]:
        """Hours on open level ground, shape (2, months): of sun, of bright sun."""
        sums = self.exactly(latitude).table[:, :, 0].sum(axis=1, dtype=np.float64)
        months = len(self.settings.period.months)
        lanes = [np.interp(height, self.heights, lane) for lane in sums.T[: 2 * months]]
        return np.array(lanes).reshape(2, months)


def _northward(table: NDArray[np.float32], south: Mixed, north: Mixed) -> NDArray[np.float32]:
    """See `Mixed.northward`; 0 where there is no light. The mean of all heights."""
    here, lower, upper = (
        each[:, :, 0].sum(axis=(0, 1), dtype=np.float64)
        for each in (table, south.table, north.table)
    )
    cosine = azimuth_directions(table.shape[1])[:, 1]
    by_knot = (table[:, :, 0] - table[:, :, 1]).astype(np.float64)
    tilted = (HORIZON_KNOTS - 1) * np.einsum("hal,a->l", by_knot, cosine)
    change = (upper - lower) / np.radians(north.latitude - south.latitude) - tilted
    lit = here > 1e-4 * here.max()
    return np.where(lit, change / np.where(lit, here, 1.0), 0.0).astype(np.float32)


def strip_hours(strip: Strip, tables: TimeTables) -> NDArray[np.float32]:
    """Hours of sun and of bright sun of a strip of ground.

    Parameters
    ----------
    strip : Strip
        The ground.
    tables : TimeTables
        Filled.

    Returns
    -------
    ndarray of float32, shape (2, months, rows, columns)
        Hours; NaN where void.
    """
    mixed, settings = tables.at(strip.middle), tables.settings
    sums = np.empty((*strip.heights.shape, settings.lanes), np.float32)
    sum_time(
        strip.horizon,
        strip.normal,
        strip.heights,
        strip.datum,
        azimuth_directions(settings.azimuths),
        tilt(strip, mixed.latitude),
        tables.heights,
        mixed.table.reshape(-1, settings.lanes),
        mixed.dark,
        sums,
    )
    months = len(settings.period.months)
    first, by_row, by_column = tilt(strip, mixed.latitude)
    rows, columns = np.ogrid[: sums.shape[0], : sums.shape[1]]
    north = (first + by_row * rows + by_column * columns).astype(np.float32)
    sums[..., months:] *= 1.0 + north[..., None] * mixed.northward[months:]
    hours = np.moveaxis(sums[..., : 2 * months], -1, 0).reshape(2, months, *strip.heights.shape)
    return np.where(np.isnan(strip.normal[2]), np.float32(np.nan), hours)
