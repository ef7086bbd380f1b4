"""A valley below a wall in the east, and a station in it whose series the model itself made."""

from dataclasses import replace

import numpy as np

from terrasol.engine.comparison import Spot
from terrasol.light.comparison import model_station
from terrasol.sky.clear import Air
from terrasol.sky.station import Station

AIR = Air.ineichen(3.0)
PLACE = 46.0, 9.0
WALL, DISTANCE = 420.0, 1000.0  # metres above the valley, and from the middle to its foot
CELL = 50.0


def valley(rows=61, columns=61):
    """Heights: level ground, and from DISTANCE east of the middle a level top."""
    east = (np.arange(columns) - (columns - 1) / 2) * CELL
    return np.tile(np.where(east >= DISTANCE, 800.0 + WALL, 800.0), (rows, 1))


def made_series(
    spot, *, days=24, seconds=3600, start="2025-03-05", cloudy=(), thinned=0.3, place=PLACE,
    height=800.0, air=AIR,
):  # fmt: skip
    """What a level sensor measures there under a clear sky, thinned on some days (numbered)."""
    begin = np.datetime64(start, "s")
    count = days * 86400 // seconds
    starts = begin + np.arange(count) * np.timedelta64(seconds, "s")
    bare = Station("valley", *place, height, starts, seconds, {"global": np.zeros(count)})
    light = model_station(bare, air, spot.horizon, spot.sky_view).shaded
    day = (starts - begin).astype("m8[D]").astype(int)
    return replace(bare, values={"global": np.where(np.isin(day, cloudy), thinned, 1.0) * light})


def wall_spot():
    """The horizon of the valley's middle as it ought to be, every degree."""
    azimuth = np.radians(np.arange(360.0))
    across = np.maximum(np.sin(azimuth), 1e-9)
    tangent = np.where(np.sin(azimuth) > 0.02, WALL / (DISTANCE / across), 0.0)
    return Spot.under(np.degrees(np.arctan(tangent)))
