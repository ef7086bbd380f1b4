"""Beam irradiation by plain time stepping: minute by minute, cell by cell.

For every minute of the period the sun's apparent place comes from pvlib's SPA, at the four
corners of the ground and linearly between them, so that each cell has its own sun. The clear
sky's beam (Ineichen and Perez 2002 as pvlib codes it) is worked out at the same four corners
and at height levels close together. For each cell the sun is compared with the horizon in the
sun's own azimuth, linear between two of many marched azimuths (720 by default); the share of
the sun's disc above it, cut by a straight edge, times the beam, times the cosine of incidence,
times 60 seconds is added up by calendar month. Nothing is tabulated or binned. Days and months
are of local mean solar time, UTC + longitude / 15 h, as everywhere in terrasol.
"""

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from os import cpu_count

import numpy as np
import pandas as pd
import pvlib
from numba import njit

from .ray_march import EARTH_RADIUS_LIFTED, march_horizon

SOLAR_CONSTANT = 1361.0  # Kopp and Lean (2011): 1360.8 +/- 0.5 W/m2
SUN_RADIUS = 0.26667  # degrees, Reda and Andreas (2008)
LEVEL_SPACING = 50.0  # m; the beam grows by about 1 % in 100 m, smoothly
CHUNK = 720  # minutes handled at once, to stay within the processor's cache


def horn_slope(z, cell_x, cell_y):
    """Rise per metre towards east and towards north, after Horn (1981).

    At the raster's rim the missing row or column is continued in a straight line from the two
    nearest ones, which makes the stencil one-sided and keeps a plane a plane. No voids.

    Returns
    -------
    east, north : ndarray, shape (rows, columns)
        dz/dx and dz/dy [1].
    """
    padded = np.pad(np.asarray(z, float), 1, mode="reflect", reflect_type="odd")
    across = (padded[:, 2:] - padded[:, :-2]) / (2.0 * cell_x)
    down = (padded[2:, :] - padded[:-2, :]) / (2.0 * cell_y)
    east = (across[:-2] + 2.0 * across[1:-1] + across[2:]) / 4.0
    south = (down[:, :-2] + 2.0 * down[:, 1:-1] + down[:, 2:]) / 4.0
    return east, -south


def upward_normals(z, cell_x, cell_y):
    """Unit normal of every cell (east, north, up), shape (rows, columns, 3)."""
    east, north = horn_slope(z, cell_x, cell_y)
    normal = np.stack([-east, -north, np.ones_like(east)], axis=-1)
    return normal / np.linalg.norm(normal, axis=-1, keepdims=True)


@dataclass(frozen=True)
class Place:
    """Where the ground lies: its bounds and how high it stands on average.

    Latitudes and longitudes are of the grid's first and last row and column [degrees].
    """

    north: float
    south: float
    west: float
    east: float
    height: float

    @property
    def corners(self):
        """Latitude and longitude of the four corners: NW, NE, SW, SE."""
        return [(lat, lon) for lat in (self.north, self.south) for lon in (self.west, self.east)]

    @property
    def middle(self):
        """Latitude and longitude of the middle."""
        return (self.north + self.south) / 2, (self.west + self.east) / 2


def sun_place(times, latitude, longitude, height):
    """Apparent elevation and azimuth of the sun [degrees] by pvlib's SPA."""
    sun = pvlib.solarposition.get_solarposition(
        times,
        latitude,
        longitude,
        altitude=height,
        pressure=pvlib.atmosphere.alt2pres(height),
        temperature=12.0,
        method="nrel_numpy",
    )
    return sun["apparent_elevation"].to_numpy(), sun["azimuth"].to_numpy()


def unit_vectors(elevation, azimuth):
    """East, north and up of a direction, shape (..., 3)."""
    h, a = np.radians(elevation), np.radians(azimuth)
    return np.stack([np.cos(h) * np.sin(a), np.cos(h) * np.cos(a), np.sin(h)], axis=-1)


def clear_beam(times, elevation, linke, heights):
    """Beam irradiance normal to the rays [W/m2], shape (times, heights).

    Ineichen and Perez (2002), air mass after Kasten and Young (1989).

    Parameters
    ----------
    linke : float
        Linke turbidity, the same all year.
    """
    distance = pvlib.solarposition.nrel_earthsun_distance(times).to_numpy()
    zenith = 90.0 - elevation
    thickness = pvlib.atmosphere.get_relative_airmass(zenith, "kastenyoung1989")
    beam = []
    for height in heights:
        air = pvlib.atmosphere.get_absolute_airmass(thickness, pvlib.atmosphere.alt2pres(height))
        with np.errstate(divide="ignore"):  # pvlib divides by the cosine of a sunken sun
            sky = pvlib.clearsky.ineichen(
                zenith, air, linke, altitude=height, dni_extra=SOLAR_CONSTANT / distance**2
            )
        beam.append(np.nan_to_num(sky["dni"]))
    return np.stack(beam, axis=-1)


@njit(nogil=True, error_model="numpy")
def disc_share(height):
    """Share of the disc above a straight edge; the centre stands `height` radii above it."""
    x = min(max(height, -1.0), 1.0)
    return 0.5 + (x * np.sqrt(1.0 - x * x) + np.arcsin(x)) / np.pi


@njit(nogil=True, error_model="numpy")
def horizon_at(horizon, azimuth):
    """Horizon at any azimuth [degrees], linear between equally spaced ones; (azimuths,)."""
    place = azimuth / 360.0 * horizon.size
    low = int(np.floor(place))
    share = place - low
    return (1.0 - share) * horizon[low % horizon.size] + share * horizon[(low + 1) % horizon.size]


@njit(nogil=True, error_model="numpy")
def _step(suns, beams, normals, horizons, highest, levels, corner_weights, months, out):
    """Add the minutes given to every cell; see `beam_months` for the shapes."""
    sun = np.empty(3)
    for cell in range(normals.shape[0]):
        level = int(levels[cell])
        share = levels[cell] - level
        clear_above = np.sin(np.radians(min(highest[cell] + SUN_RADIUS, 90.0)))
        for t in range(suns.shape[0]):
            sun[:] = 0.0
            beam = 0.0
            for k in range(4):
                weight = corner_weights[cell, k]
                for axis in range(3):
                    sun[axis] += weight * suns[t, k, axis]
                low, high = beams[t, k, level], beams[t, k, level + 1]
                beam += weight * ((1.0 - share) * low + share * high)
            facing = (
                normals[cell, 0] * sun[0] + normals[cell, 1] * sun[1] + normals[cell, 2] * sun[2]
            )
            if facing <= 0.0:
                continue
            lit = 1.0
            if sun[2] < clear_above:  # otherwise it stands above every ridge of this cell
                azimuth = np.degrees(np.arctan2(sun[0], sun[1])) % 360.0
                ridge = horizon_at(horizons[cell], azimuth)
                lit = disc_share((np.degrees(np.arcsin(sun[2])) - ridge) / SUN_RADIUS)
            out[months[t], cell] += lit * beam * facing * 60e-6


def minutes_of(start, end, longitude):
    """The middle of every minute between two dates of local mean solar time, in UTC."""
    shift = pd.Timedelta(seconds=30.0 - longitude * 240.0)
    return pd.date_range(start, end, freq="min", inclusive="left", tz="UTC") + shift


def local_month(times, longitude):
    """Month of each UTC instant in local mean solar time, 0 for January."""
    return (times + pd.Timedelta(seconds=longitude * 240.0)).month.to_numpy() - 1


def daylight(times, place):
    """The minutes in which some part of the sun may stand over some corner's level horizon."""
    elevation, _ = sun_place(times, *place.middle, place.height)
    reach = 1.0 + max(place.north - place.south, place.east - place.west)
    return times[elevation > -reach]


def beam_months(
    z,
    cell_x,
    cell_y,
    place,
    *,
    start="2025-01-01",
    end="2026-01-01",
    linke=3.0,
    azimuths=720,
    radius=EARTH_RADIUS_LIFTED,
    cells=None,
):
    """Potential beam irradiation of each cell and calendar month, by minute stepping.

    Parameters
    ----------
    z : ndarray, shape (rows, columns)
        Heights [m], without voids.
    cell_x, cell_y : float
        Size of a cell [m].
    place : Place
    start, end : str
        First day, and the day after the last one.
    cells : pair of integer arrays of one shape, optional
        Rows and columns wanted; every cell if not given.

    Returns
    -------
    ndarray, shape (12, *cells)
        Per square metre of the slope itself [MJ/m2].
    """
    z = np.asarray(z, float)
    rows, cols = np.indices(z.shape) if cells is None else np.asarray(cells)
    shape, rows, cols = rows.shape, rows.ravel(), cols.ravel()
    bearings = np.arange(azimuths) * 360.0 / azimuths
    horizons = march_horizon(z, cell_x, cell_y, bearings, radius=radius, cells=(rows, cols))
    horizons = np.ascontiguousarray(horizons.T)
    normals = upward_normals(z, cell_x, cell_y)[rows, cols]

    base = np.floor(z.min() / LEVEL_SPACING) * LEVEL_SPACING
    heights = np.arange(base, z.max() + LEVEL_SPACING + 1.0, LEVEL_SPACING)
    levels = (z[rows, cols] - base) / LEVEL_SPACING
    down, right = rows / (z.shape[0] - 1.0), cols / (z.shape[1] - 1.0)
    weights = np.stack(
        [(1 - down) * (1 - right), (1 - down) * right, down * (1 - right), down * right], axis=-1
    )

    longitude = place.middle[1]
    times = daylight(minutes_of(start, end, longitude), place)
    months = local_month(times, longitude)
    suns = np.empty((times.size, 4, 3))
    beams = np.empty((times.size, 4, heights.size))
    for k, corner in enumerate(place.corners):
        elevation, azimuth = sun_place(times, *corner, place.height)
        suns[:, k] = unit_vectors(elevation, azimuth)
        beams[:, k] = clear_beam(times, elevation, linke, heights)

    out = np.zeros((12, rows.size))
    shares = np.array_split(np.arange(rows.size), cpu_count() or 1)

    def work(mine):
        sums = np.zeros((12, mine.size))
        for at in range(0, times.size, CHUNK):
            now = slice(at, at + CHUNK)
            _step(
                suns[now],
                beams[now],
                normals[mine],
                horizons[mine],
                horizons[mine].max(axis=1),
                levels[mine],
                weights[mine],
                months[now],
                sums,
            )
        out[:, mine] = sums

    with ThreadPoolExecutor(cpu_count()) as pool:
        list(pool.map(work, shares))
    return out.reshape(12, *shape)
