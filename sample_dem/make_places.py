"""Make what stands in the invented valley: parcels, plots, a basin and a weather station.

All of it is invented, as the valley of `valley.tif` is: no person, place, firm or measurement is
meant. The files that come out are

- parcels.geojson: vineyard parcels, drawn from the list PARCELS below with shaken corners.
- plots.csv: ecological plots, one for each of five bands of height and eight sectors of aspect.
- basin.geojson: all ground that drains through OUTLET. Each cell drains to the neighbour from
  which rising water would reach it first (Barnes, Lehman and Mulla 2014, Computers & Geosciences
  62, 117-127).
- station.csv, with station.csv.toml beside it: thirteen months of hourly weather on a shoulder of
  the northern ridge. Dry and wet days follow each other as a Markov chain (Gabriel and Neumann
  1962, from memory); wet days are dull, clear days warm with wide swings of temperature. Global
  irradiance is the clear sky of Ineichen and Perez 2002 (pvlib), without its beam while the sun is
  behind the ground, times a cloud index. The snow pillow follows a rule of its own, degree-hours
  with a factor that grows through the season, and reads with an error that wanders: it is no
  output of terrasol.

The random numbers are seeded and use nothing but uniform numbers, so that the files come out the
same on every run; the last digit may differ between machines.

Run it as `python sample_dem/make_places.py [FOLDER]`; it needs numpy, scipy, pandas, geopandas,
rasterio, pyproj and pvlib.
"""

from __future__ import annotations

import heapq
import json
import sys
from dataclasses import dataclass
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pvlib
import pyproj
import rasterio
from numpy.typing import NDArray
from rasterio import features
from scipy import ndimage
from shapely.geometry import MultiPolygon, Polygon, mapping, shape
from shapely.geometry.polygon import orient

Floats = NDArray[np.float64]

HERE = Path(__file__).resolve().parent
SEED = 37

PARCELS: dict[str, list[tuple[int, int, float, float, float]]] = {
    "Terrace 1": [(252, 184, 420.0, 160.0, 90.0)],
    "Terrace 2": [(264, 185, 320.0, 130.0, 90.0)],
    "Terrace 3": [(266, 240, 330.0, 200.0, 70.0)],
    "Terrace 4": [(234, 107, 340.0, 130.0, 90.0)],
    "Terrace 5 and 6": [(257, 219, 150.0, 110.0, 0.0), (247, 246, 210.0, 100.0, 90.0)],
    "West corner": [(207, 61, 240.0, 90.0, 85.0)],
    "Southwest side": [(253, 148, 260.0, 120.0, 145.0)],
    "South spur": [(286, 161, 100.0, 60.0, 0.0)],
    "High steep": [(226, 186, 170.0, 110.0, 90.0)],
    "Floor north": [(263, 95, 320.0, 240.0, 20.0)],
    "Floor south": [(315, 160, 220.0, 120.0, 75.0)],
    "North side": [(308, 38, 260.0, 150.0, 80.0)],
}
"""Blocks of each parcel: row and column of the middle, length and width [m], azimuth of the
length [degrees clockwise from grid north]."""

OUTLET = (264, 265)
"""Row and column where the northern side stream comes out onto the floor."""

STATION = (142, 228)
"""Row and column of the station, on a shoulder of the northern ridge, with an open horizon."""
FIRST, LAST = "2024-10-01 00:00", "2025-10-31 23:00"
ZONE = "+01:00"

LAPSE = 6.5e-3
"""Fall of temperature with height [K/m]."""
YEAR_MEAN, YEAR_SWING, FLOOR_HEIGHT = 10.7, 9.2, 560.0
"""Mean and half the swing of the year's temperature [degC] at the height of the floor [m]."""
COLD_SNAPS = {"2024-11-20": -8.0, "2025-01-12": -9.0, "2025-02-17": -7.0, "2025-04-07": -6.0}
"""First day of five cold days, and how cold [K]."""
WET_AFTER_DRY, WET_AFTER_WET = 0.21, 0.62
WET_DAY = 8.5
"""Mean precipitation of a wet day at the station [mm]."""


@dataclass(frozen=True)
class Ground:
    """The valley: heights [m], and how cells lie in its CRS."""

    heights: Floats
    transform: rasterio.Affine
    crs: rasterio.crs.CRS

    def at(self, rows: Floats, columns: Floats) -> tuple[Floats, Floats]:
        """Easting and northing of places in rows and columns, whole ones being cell centres."""
        return self.transform @ (np.asarray(columns) + 0.5, np.asarray(rows) + 0.5)


def read_ground() -> Ground:
    """The ground that make_valley.py made."""
    with rasterio.open(HERE / "valley.tif") as file:
        return Ground(file.read(1).astype(float), file.transform, file.crs)


def block(ground: Ground, spec: tuple[int, int, float, float, float], seed: list[int]) -> Polygon:
    """A four-sided block with bent sides and shaken corners, in the CRS of the ground."""
    row, column, length, width, azimuth = spec
    x, y = ground.at(row, column)
    corners = np.array([(-1, -1), (0, -1), (1, -1), (1, 0), (1, 1), (0, 1), (-1, 1), (-1, 0)])
    shaken = corners + np.random.default_rng(seed).uniform(-0.08, 0.08, corners.shape)
    along, across = shaken[:, 0] * length / 2, shaken[:, 1] * width / 2
    sin, cos = np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))
    return Polygon(
        np.column_stack([x + along * sin + across * cos, y + along * cos - across * sin])
    )


def parcels(ground: Ground) -> geopandas.GeoDataFrame:
    """The vineyard parcels with their names."""
    shapes = []
    for number, blocks in enumerate(PARCELS.values()):
        parts = [block(ground, spec, [SEED, 1, number, part]) for part, spec in enumerate(blocks)]
        shapes.append(parts[0] if len(parts) == 1 else MultiPolygon(parts))
    return geopandas.GeoDataFrame({"name": list(PARCELS)}, geometry=shapes, crs=ground.crs)


def plots(ground: Ground) -> pd.DataFrame:
    """Forty plots: a random cell of each of five bands of height and eight sectors of aspect."""
    rng = np.random.default_rng([SEED, 2])
    south, east = np.gradient(ground.heights, ground.transform.a)
    slope = np.degrees(np.arctan(np.hypot(south, east)))
    sector = np.round(np.degrees(np.arctan2(-east, south)) / 45.0).astype(int) % 8
    edges = np.quantile(ground.heights, [0.0, 0.2, 0.4, 0.6, 0.8, 1.0])
    band = np.clip(np.digitize(ground.heights, edges) - 1, 0, 4)
    fit = (slope > 5.0) & (slope < 40.0)
    fit[:25], fit[-25:], fit[:, :25], fit[:, -25:] = False, False, False, False
    where = []
    for high in range(5):
        for facing in range(8):
            cells = np.argwhere(fit & (band == high) & (sector == facing))
            where.append(cells[int(rng.random() * len(cells))] + rng.uniform(-0.4, 0.4, 2))
    x, y = ground.at(*np.transpose(where))
    points = geopandas.GeoSeries.from_xy(x, y, crs=ground.crs).to_crs("EPSG:4326")
    return pd.DataFrame(
        {
            "id": [f"P{number:02d}" for number in range(1, len(where) + 1)],
            "longitude": points.x.round(6),
            "latitude": points.y.round(6),
            "gps_error_m": (2.0 + 8.0 * rng.random(len(where)) ** 2).round(1),
        }
    )


def receivers(heights: Floats) -> tuple[NDArray[np.int64], list[int]]:
    """Flat number of the cell that each cell drains to, and all cells in the order of flooding.

    Cells of the rim drain off the map: -1.
    """
    rows, columns = heights.shape
    padded = columns + 2
    level = np.pad(heights, 1, constant_values=np.nan).ravel().tolist()
    inner = np.arange((rows + 2) * padded).reshape(rows + 2, padded)[1:-1, 1:-1]
    done = np.ones(len(level), dtype=bool)
    done[inner] = False
    rim = np.unique(np.concatenate([inner[0], inner[-1], inner[:, 0], inner[:, -1]])).tolist()
    done[rim] = True
    queue = [(level[cell], cell) for cell in rim]
    heapq.heapify(queue)
    receiver = np.full(len(level), -1)
    order = []
    while queue:
        height, cell = heapq.heappop(queue)
        order.append(cell)
        for step in (-padded, -1, 1, padded, -padded - 1, 1 - padded, padded - 1, padded + 1):
            other = cell + step
            if not done[other]:
                done[other] = True
                receiver[other] = cell
                heapq.heappush(queue, (max(level[other], height), other))
    return receiver, order


def basin(ground: Ground) -> geopandas.GeoDataFrame:
    """The ground that drains through the outlet, along the edges of its cells."""
    receiver, order = receivers(ground.heights)
    rows, columns = ground.heights.shape
    drains = np.zeros(receiver.size, dtype=bool)
    drains[(OUTLET[0] + 1) * (columns + 2) + OUTLET[1] + 1] = True
    for cell in order:
        drains[cell] |= receiver[cell] >= 0 and drains[receiver[cell]]
    inside = drains.reshape(rows + 2, columns + 2)[1:-1, 1:-1].astype(np.uint8)
    pieces = [
        shape(piece)
        for piece, value in features.shapes(inside, connectivity=4, transform=ground.transform)
        if value == 1
    ]
    whole = max(pieces, key=lambda piece: piece.area)  # cells that touch at a corner stay out
    return geopandas.GeoDataFrame({"name": ["North stream"]}, geometry=[whole], crs=ground.crs)


def normal(rng: np.random.Generator, count: int) -> Floats:
    """Random numbers close to a normal distribution: twelve uniform ones added, less six."""
    return rng.random((count, 12)).sum(axis=1) - 6.0


def persistent(noise: Floats, share: float) -> Floats:
    """Noise of which a `share` stays from each step to the next, its spread unchanged."""
    fresh = np.sqrt(1.0 - share**2)
    kept = noise.copy()
    for step in range(1, noise.size):
        kept[step] = share * kept[step - 1] + fresh * noise[step]
    return kept


def wet_days(rng: np.random.Generator, days: int) -> NDArray[np.bool_]:
    """Whether each day is wet; the chance depends on the day before."""
    draws, wet = rng.random(days), np.zeros(days, dtype=bool)
    for day in range(1, days):
        wet[day] = draws[day] < (WET_AFTER_WET if wet[day - 1] else WET_AFTER_DRY)
    return wet


def precipitation(rng: np.random.Generator, wet: NDArray[np.bool_]) -> Floats:
    """Hourly precipitation [mm], shape (days, 24): one spell on each wet day."""
    hours = np.zeros((wet.size, 24))
    for day in np.flatnonzero(wet):
        total = 0.6 - (WET_DAY - 0.6) * np.log(1.0 - rng.random())
        length = 3 + int(rng.random() * 18)
        start = int(rng.random() * (25 - length))
        weight = -np.log(1.0 - rng.random(length))
        hours[day, start : start + length] = total * weight / weight.sum()
    return hours


def cloud_index(rng: np.random.Generator, wet: NDArray[np.bool_], rain: Floats) -> Floats:
    """Share of the clear sky's light that arrives, shape (days, 24)."""
    mood = persistent(normal(rng, wet.size), 0.5)
    dry = np.clip(1.06 + 0.30 * np.minimum(mood, 0.0), 0.35, 1.0)
    day = np.where(wet, np.clip(0.52 + 0.17 * mood, 0.2, 0.9), dry)
    unsettled = np.sqrt(np.clip(1.0 - day, 0.0, 0.5)) * 0.33  # clear days stay clear
    flicker = persistent(normal(rng, wet.size * 24), 0.6).reshape(rain.shape)
    index = day[:, None] + unsettled[:, None] * flicker - 0.25 * (rain > 0.05)
    return np.clip(index, 0.08, 1.0)


def skyline(ground: Ground) -> Floats:
    """Height angle of the ground all round the station [degrees], by degree from grid north."""
    azimuth = np.radians(np.arange(360.0))[:, None]
    away = np.arange(1.0, 700.0)[None, :]  # cells
    row, column = STATION[0] - away * np.cos(azimuth), STATION[1] + away * np.sin(azimuth)
    seen = ndimage.map_coordinates(ground.heights, [row, column], order=1, cval=-1e4)
    rise = (seen - ground.heights[STATION]) / (away * ground.transform.a)
    return np.degrees(np.arctan(np.maximum(rise.max(axis=1), 0.0)))


def clear_sky(ground: Ground, times: pd.DatetimeIndex) -> Floats:
    """Global irradiance of a clear sky at the station, mean of each hour from `times` [W m-2].

    Without the beam while the sun is behind the ground; the sky that is hidden is neglected.
    """
    latitude, longitude, height = station_place(ground)
    north = pyproj.Proj(ground.crs).get_factors(longitude, latitude).meridian_convergence
    horizon = skyline(ground)
    pressure = pvlib.atmosphere.alt2pres(height)
    minutes = np.arange(1.25, 60.0, 2.5)
    light = np.zeros(len(times))
    for minute in minutes:
        moment = times + pd.Timedelta(minutes=minute)
        sun = pvlib.solarposition.get_solarposition(moment, latitude, longitude, height)
        zenith, azimuth = sun["apparent_zenith"].to_numpy(), sun["azimuth"].to_numpy()
        up = zenith < 89.9
        day = moment[up].day_of_year.to_numpy()
        mass = pvlib.atmosphere.get_relative_airmass(zenith[up])
        mass = pvlib.atmosphere.get_absolute_airmass(mass, pressure)
        extra = pvlib.irradiance.get_extra_radiation(day)
        linke = 2.7 + 0.5 * np.cos(2.0 * np.pi * (day - 200.0) / 365.25)
        sky = pvlib.clearsky.ineichen(zenith[up], mass, linke, height, extra)
        edge = np.interp(azimuth[up] - north, np.arange(360.0), horizon, period=360.0)
        light[up] += np.where(90.0 - zenith[up] > edge, sky["ghi"], sky["dhi"])
    return light / minutes.size


def temperature(
    rng: np.random.Generator, times: pd.DatetimeIndex, height: float, light: Floats, wet: Floats
) -> Floats:
    """Hourly air temperature [degC]; `light` is the share of the clear sky's light by day."""
    days = light.size
    date = times[::24]
    season = np.cos(2.0 * np.pi * (np.asarray(date.day_of_year) - 203.0) / 365.25)
    mean = YEAR_MEAN + YEAR_SWING * season - LAPSE * (height - FLOOR_HEIGHT)
    mean = mean + 2.6 * persistent(normal(rng, days), 0.75) - np.where(wet, 1.2 + 1.2 * season, 0.0)
    for first, chill in COLD_SNAPS.items():
        begin = int(np.flatnonzero(date.strftime("%Y-%m-%d") == first)[0])
        mean[begin : begin + 5] += chill * np.array([0.5, 0.9, 1.0, 0.9, 0.5])
    swing = (1.2 + (2.4 + 0.8 * season) * np.clip(light, 0.0, 1.0))[:, None]
    hour = np.arange(24) + 0.5
    shape_of_day = np.cos(2.0 * np.pi * (hour - 14.5) / 24.0)
    shape_of_day = shape_of_day + 0.2 * np.cos(4.0 * np.pi * (hour - 13.0) / 24.0)
    wander = 0.4 * persistent(normal(rng, days * 24), 0.8)
    noons = np.arange(days) * 24 + 11.5
    smooth = np.interp(np.arange(days * 24), noons, mean)
    return smooth + (swing * shape_of_day).ravel() + wander


def snow_pillow(
    rng: np.random.Generator, times: pd.DatetimeIndex, air: Floats, fallen: Floats
) -> Floats:
    """Snow water as a pillow reads it [mm]: a rule of its own, and an error that wanders.

    Precipitation is snow below 0 degC and rain above 2 degC. Snow melts by 0.10 mm an hour and
    degree above 0 degC in midwinter, and by 0.20 mm at midsummer.
    """
    factor = 0.15 - 0.05 * np.cos(2.0 * np.pi * (np.asarray(times.day_of_year) - 10.0) / 365.25)
    snow = fallen * np.clip((2.0 - air) / 2.0, 0.0, 1.0)
    melt = factor * np.maximum(air, 0.0)
    lies = np.zeros(air.size)
    for hour in range(air.size):
        before = lies[hour - 1] if hour else 0.0
        lies[hour] = max(before + snow[hour] - melt[hour], 0.0)
    scale = 1.0 + 0.03 * persistent(normal(rng, air.size), 0.998)
    offset = 1.5 * persistent(normal(rng, air.size), 0.9)
    return np.where(lies > 2.0, np.maximum(lies * scale + offset, 1.0), np.where(lies > 0, lies, 0))


def station_place(ground: Ground) -> tuple[float, float, float]:
    """Latitude, longitude [degrees] and height [m] of the station."""
    x, y = ground.at(*STATION)
    point = geopandas.GeoSeries.from_xy([x], [y], crs=ground.crs).to_crs("EPSG:4326").iloc[0]
    return round(point.y, 6), round(point.x, 6), round(float(ground.heights[STATION]), 1)


def station(ground: Ground) -> pd.DataFrame:
    """Hourly weather of the station; times are the beginning of each hour, in zone +01:00."""
    times = pd.date_range(FIRST, LAST, freq="h", tz=ZONE)
    streams = [np.random.default_rng([SEED, 3, number]) for number in range(5)]
    wet = wet_days(streams[0], len(times) // 24)
    rain = precipitation(streams[1], wet)
    index = cloud_index(streams[2], wet, rain)
    clear = clear_sky(ground, times)
    light = clear * index.ravel()
    daily = light.reshape(rain.shape).sum(axis=1) / clear.reshape(rain.shape).sum(axis=1)
    air = temperature(streams[3], times, ground.heights[STATION], daily, wet)
    fallen = rain.ravel().round(1)
    lying = snow_pillow(streams[4], times, air, fallen)
    return pd.DataFrame(
        {
            "time": times.strftime("%Y-%m-%dT%H:%M"),
            "global": light.round().astype(int),
            "temperature": air.round(1) + 0.0,
            "precipitation": fallen,
            "snow_water": lying.round().astype(int),
        }
    )


SETTINGS = """\
# What the columns of station.csv are. The station and its weather are invented.
[place]
name = "North ridge (invented)"
latitude = {latitude}
longitude = {longitude}
height = {height}

[time]
column = "time"
zone = "{zone}"
label = "start"
interval = "1h"

[columns.global]
column = "global"
unit = "W/m2"

[columns.temperature]
column = "temperature"
unit = "degC"

[columns.precipitation]
column = "precipitation"
unit = "mm"

[columns.snow_water]
column = "snow_water"
unit = "mm"
"""


def write_geojson(path: Path, frame: geopandas.GeoDataFrame) -> None:
    """Write as RFC 7946 wants it: longitude and latitude, outer rings against the clock."""
    frame = frame.to_crs("EPSG:4326")
    listed = []
    for name, geometry in zip(frame["name"], frame.geometry, strict=True):
        parts = getattr(geometry, "geoms", [geometry])
        turned = [orient(part) for part in parts]
        whole = turned[0] if len(turned) == 1 else MultiPolygon(turned)
        about = {"type": "Feature", "properties": {"name": name}, "geometry": rounded(whole)}
        listed.append(json.dumps(about))
    text = ",\n".join(listed)
    path.write_text(f'{{"type": "FeatureCollection", "features": [\n{text}\n]}}\n', "utf-8")


def rounded(geometry: Polygon | MultiPolygon) -> dict[str, object]:
    """The geometry as JSON holds it, to seven decimals, a centimetre."""
    return json.loads(json.dumps(mapping(geometry)), parse_float=lambda text: round(float(text), 7))


def write(folder: Path) -> None:
    """Write all files into a folder."""
    ground = read_ground()
    write_geojson(folder / "parcels.geojson", parcels(ground))
    write_geojson(folder / "basin.geojson", basin(ground))
    plots(ground).to_csv(folder / "plots.csv", index=False, lineterminator="\n")
    station(ground).to_csv(folder / "station.csv", index=False, lineterminator="\n")
    latitude, longitude, height = station_place(ground)
    settings = SETTINGS.format(latitude=latitude, longitude=longitude, height=height, zone=ZONE)
    (folder / "station.csv.toml").write_text(settings, "utf-8")


if __name__ == "__main__":
    write(Path(sys.argv[1]) if len(sys.argv) > 1 else HERE)
