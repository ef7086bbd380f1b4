"""Sunshine of a single day by looking at the sun every few seconds.

The sun's place comes from pvlib's SPA at each moment; the horizon is a function of azimuth,
asked at the sun's own azimuth. Nothing is interpolated, tabulated or skipped. The sun is up
while its upper limb stands above the horizon, above the slope's plane and above the level.
"""

from functools import cache

import numpy as np
import pandas as pd
import pvlib

SUN_RADIUS = 0.26667  # degrees, Reda and Andreas (2008)


@cache
def sun_of_day(date, latitude, longitude, *, height=0.0, seconds=5):
    """True solar time [h], height of the upper limb and azimuth [degrees] from midnight on.

    date : local mean solar date
    """
    midnight = pd.Timestamp(date, tz="UTC") - pd.Timedelta(hours=longitude / 15.0)
    times = midnight + pd.to_timedelta(np.arange(-3600, 90000, seconds), unit="s")
    sun = pvlib.solarposition.get_solarposition(
        times, latitude, longitude, altitude=height, method="nrel_numpy",
        pressure=pvlib.atmosphere.alt2pres(height), temperature=15.0 - 0.0065 * height,
    )  # fmt: skip
    mean_time = (times - midnight).total_seconds().to_numpy() / 3600.0
    solar = mean_time + sun["equation_of_time"].to_numpy() / 60.0
    day = (solar >= 0.0) & (solar <= 24.0)
    limb = sun["apparent_elevation"].to_numpy() + SUN_RADIUS
    kept = solar[day], limb[day], sun["azimuth"].to_numpy()[day]
    for values in kept:
        values.flags.writeable = False  # the same arrays serve every test of that day
    return kept


def own_plane(azimuth, slope, aspect):
    """Horizon of a slope's own plane [degrees]."""
    away = np.cos(np.radians(azimuth - aspect))
    return np.degrees(np.arctan(-np.tan(np.radians(slope)) * away))


def sunshine(solar, up):
    """First and last sun and hours of sun [h], and gaps [minutes], from what is seen when."""
    if not up.any():
        return np.nan, np.nan, 0.0, []
    change = np.flatnonzero(np.diff(up.astype(int)))
    edges = (solar[change] + solar[change + 1]) / 2.0
    starts = np.r_[[0.0] if up[0] else [], edges[~up[change]]]
    ends = np.r_[edges[up[change]], [24.0] if up[-1] else []]
    gaps = 60.0 * (starts[1:] - ends[:-1])
    return starts[0], ends[-1], float((ends - starts).sum()), gaps.tolist()


def plain_day(date, latitude, longitude, horizon, slope=0.0, aspect=0.0, *, height=0.0, seconds=5):
    """First and last sun, hours of sun, and gaps of one day at one place.

    Parameters
    ----------
    date : str
        Local mean solar date.
    horizon : callable
        Horizon [degrees] at azimuths [degrees].

    Returns
    -------
    first, last : float
        True solar time [h]; NaN without sun.
    hours : float
        Time in the sun.
    gaps : list of float
        Lengths of the interruptions [minutes].
    """
    solar, limb, azimuth = sun_of_day(date, latitude, longitude, height=height, seconds=seconds)
    plane = own_plane(azimuth, slope, aspect)
    up = limb > np.maximum(plane, 0.0)
    up[up] = limb[up] > horizon(azimuth[up])
    return sunshine(solar, up)
