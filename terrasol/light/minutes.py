"""Every minute of chosen days at one place: direct sun, or what keeps it away."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from terrasol.light.days import UPPER_LIMB, Clock, Days
from terrasol.light.irradiation import Strip


class State(IntEnum):
    """What a minute is.

    The shade of the own slope counts before that of other ground: while the sun is behind the
    plane of the slope, it is no matter whether a ridge stands there too.
    """

    NIGHT = 0
    SUN = 1
    TERRAIN = 2
    SLOPE = 3


def plane_tangent(
    normal: NDArray[np.floating], east: NDArray[np.floating], north: NDArray[np.floating]
) -> NDArray[np.float64]:
    """Tangent of the height at which the own slope hides the sun, towards (east, north).

    ``-(n_e east + n_n north) / n_up``, `normal` towards true east, north and up; negative where
    the slope falls away.

    Examples
    --------
    >>> south_slope = np.array([0.0, -0.5, np.sqrt(0.75)])
    >>> round(float(plane_tangent(south_slope, np.array(0.0), np.array(1.0))), 4)
    0.5774
    """
    n = np.asarray(normal, np.float64)
    return -(n[0] * np.asarray(east, np.float64) + n[1] * np.asarray(north, np.float64)) / n[2]


def minute_states(strip: Strip, days: Days) -> NDArray[np.uint8]:
    """What each minute of some days is at one place.

    By the rules of `strip_days`: the sun counts while its upper limb stands above terrain, own
    slope and level.

    Parameters
    ----------
    strip : Strip
        One cell.
    days : Days
        Which days.

    Returns
    -------
    ndarray of uint8, shape (days, MOMENTS)
        `State` of each minute from one true solar midnight to the next, both included.
    """
    path = days.exactly(strip.latitude[0], strip.datum + float(strip.heights[0, 0]))
    limb, share, east, north, _ = np.moveaxis(path.suns.astype(np.float64), -1, 0)
    horizon = strip.horizon[:, 0, 0].astype(np.float64)
    following = np.roll(horizon, -1)
    terrain = horizon[path.sectors] * (1.0 - share) + following[path.sectors] * share
    plane = plane_tangent(strip.normal[:, 0, 0], east, north)
    states = np.full(limb.shape, State.SUN, np.uint8)
    states[limb <= terrain] = State.TERRAIN
    states[limb <= plane] = State.SLOPE
    states[limb <= 0.0] = State.NIGHT
    return states


@dataclass(frozen=True, eq=False)
class Track:
    """The sun's way over the sky of a place on one day, minute by minute while it is up.

    Parameters
    ----------
    day : date
        Which day.
    azimuth, elevation : ndarray, shape (minutes,)
        Of the disc's centre, refracted [degrees].
    solar : ndarray, shape (minutes,)
        True solar time [h].
    clock : ndarray, shape (minutes,)
        Hours since 0:00 of the day on the clock.
    """

    day: date
    azimuth: NDArray[np.float64]
    elevation: NDArray[np.float64]
    solar: NDArray[np.float64]
    clock: NDArray[np.float64]


def track(day: date, latitude: float, longitude: float, height: float, clock: Clock) -> Track:
    """Follow the sun of a day over an open plain.

    Parameters
    ----------
    day : date
        Which day.
    latitude, longitude : float
        Degrees north, degrees east.
    height : float
        Of the place [m]; for refraction.
    clock : Clock
        What the time of day is told in.

    Returns
    -------
    Track
        Empty in polar night.

    Examples
    --------
    >>> noon = track(date(2025, 3, 20), 46.5, 10.6, 600.0, Clock("solar"))
    >>> round(float(noon.elevation.max()), 1), round(float(noon.azimuth[noon.elevation.argmax()]))
    (43.6, 180)
    """
    sectors = 8
    days = Days.over([day], longitude, clock, sectors)
    path = days.exactly(latitude, height)
    limb, share = path.suns[0, :, 0].astype(np.float64), path.suns[0, :, 1].astype(np.float64)
    up = limb > 0.0
    minutes = np.arange(limb.size, dtype=np.float32)
    on_clock = days.on_clock(minutes[None, :, None])[0, :, 0].astype(np.float64)
    return Track(
        day=day,
        azimuth=((path.sectors[0] + share) * 360.0 / sectors)[up],
        elevation=np.degrees(np.arctan(limb))[up] - UPPER_LIMB,
        solar=(minutes.astype(np.float64) / 60.0)[up],
        clock=on_clock[up],
    )
