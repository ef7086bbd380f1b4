"""Planes, parcels on them, and quick settings, for tests."""

from __future__ import annotations

import numpy as np
import shapely
from pyproj import CRS

from terrasol.engine.parcel_figures import Asked
from terrasol.engine.parcel_words import read_rule
from terrasol.engine.parcels import ParcelSettings
from terrasol.files.vectors import Polygons
from terrasol.ground.elevation import Elevation
from terrasol.light.days import parse_days
from terrasol.light.hours import HoursSettings
from terrasol.light.settings import LightSettings
from terrasol.practice.season import NORTHERN_SEASON
from terrasol.sky.clear import Air
from terrasol.sky.period import parse_period

CELL, LEFT, TOP = 10.0, 500000.0, 5100400.0
UTM = "EPSG:32632"  # its central meridian, 9 east, is the western edge of these grounds
AIR = Air.ineichen(3.0)
SCALE = 0.9996**-2
"""True area by map area on the central meridian of UTM."""


def plane(percent: float, toward: float, size: int = 80) -> Elevation:
    """Ground that falls evenly towards an azimuth, counted in the grid."""
    row, column = np.indices((size, size))
    east, north = CELL * (column - size / 2), -CELL * (row - size / 2)
    down = np.sin(np.radians(toward)) * east + np.cos(np.radians(toward)) * north
    heights = 500.0 - percent / 100.0 * down
    return Elevation.from_array(heights, (CELL, 0, LEFT, 0, -CELL, TOP), UTM)


def asked_for(period=None, season=NORTHERN_SEASON, **more) -> ParcelSettings:
    """Settings whose light is coarse but quick."""
    whole = parse_period(period)
    own = {k: more.pop(k) for k in ("score", "coarser", "rows", "error") if k in more}
    light = LightSettings(whole, AIR, azimuths=16, step_seconds=900.0)
    hours = HoursSettings(whole, AIR, parse_days(None, whole), azimuths=32, step_seconds=900.0)
    if "rule" in more:
        more["rule"] = read_rule(more["rule"], warm="warmth" in more)
    return ParcelSettings(light, hours, Asked(whole, season, **more), **own)


def parcels(*shapes, crs=UTM) -> Polygons:
    """Parcels P0, P1 and so on."""
    return Polygons(tuple(f"P{k}" for k in range(len(shapes))), tuple(shapes), CRS(crs))


def box(x0, y0, x1, y1):
    """A rectangle counted from the middle of the ground of 80 cells, in metres."""
    return shapely.box(LEFT + 400 + x0, TOP - 400 + y0, LEFT + 400 + x1, TOP - 400 + y1)
