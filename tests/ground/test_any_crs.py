"""One hill, given on many grids, must have one slope, aspect, horizon and year of sun.

A hill and a ridge are smooth functions of the true distance east and north of a place
(azimuthal equidistant about it). They are sampled on grids of several CRSs; the truth is
worked out apart from any grid, by walking geodesics over the functions. What a grid of cells
of u by v metres may add is its own resampling, and the tolerances are its bounds:

- Horn's stencil: |u|^2 / 6 + |v|^2 / 4 times the largest third derivative, along each axis;
- the bilinear surface: (|u|^2 + |v|^2) / 8 times the largest second derivative, in height,
  seen from the distance of the ridge; as much again for meeting the ridge between samples.
  Beyond twenty cells terrasol looks from every fourth cell only; so what is near must not be
  missed by more than this bound, and all together is held to the 0.05 degrees (rms) that the
  method promises, on every grid alike.
"""

from functools import cache
from typing import NamedTuple

import numpy as np
import pytest
from pyproj import CRS, Geod, Transformer
from scipy.ndimage import map_coordinates

import terrasol

GLOBE = Geod(ellps="WGS84")
LIFTED_RADIUS = 6_371_000.0 / (1.0 - 0.13)
REACH = 3600.0  # m from the middle that every grid covers
CELL = 20.0  # m, about, on every grid
PLACES = {"46N": (46.0, 9.0), "60N": (60.0, 9.0), "33S": (-33.0, 21.0)}
FOOT = 1200.0 / 3937.0

# name: (CRS by EPSG code or words, true east-west and north-south cell in m, turn, vertical unit)
GRIDS = {
    "utm": ("utm", (CELL, -CELL), 0.0, "metre"),
    "next utm zone": ("next utm", (CELL, -CELL), 0.0, "metre"),
    "degrees": ("EPSG:4326", None, 0.0, "metre"),
    "web mercator": ("EPSG:3857", (CELL, -CELL), 0.0, "metre"),
    "feet": ("feet", (CELL, -CELL), 0.0, "US survey foot"),
    "rotated": ("utm", (CELL, -CELL), 30.0, "metre"),
    "south-up": ("utm", (CELL, CELL), 0.0, "metre"),
    "one to two": ("utm", (0.75 * CELL, -1.5 * CELL), 0.0, "metre"),
}


class Grid(NamedTuple):
    """An elevation model and the truth of where its cells lie."""

    ground: terrasol.Elevation
    inverse: np.ndarray  # from x, y to column, row
    to_crs: Transformer
    steps: tuple[float, float]  # length of a column and a row step [m]


def hill(east, north):
    """Height of the ground [m]; smooth, level far off."""
    along = (east - 2.0 * north) / np.sqrt(5.0)
    across = (2.0 * east + north) / np.sqrt(5.0) - 1500.0
    top = 800.0 * np.exp(-(east**2 + north**2) / (2.0 * 600.0**2))
    ridge = 500.0 * np.exp(-(across**2) / (2.0 * 600.0**2) - along**2 / (2.0 * 1100.0**2))
    return 600.0 + top + ridge


def steepest_derivative(order):
    """Largest derivative of the hill in any direction, by differences of 10 m."""
    place = np.arange(-3000.0, 3001.0, 50.0)
    east, north = np.meshgrid(place, place)
    weights = {2: {-1: 1, 0: -2, 1: 1}, 3: {-1.5: -1, -0.5: 3, 0.5: -3, 1.5: 1}}[order]
    most = 0.0
    for turn in np.radians(np.arange(0.0, 180.0, 7.5)):
        step = 10.0 * np.array([np.cos(turn), np.sin(turn)])
        total = sum(w * hill(east + k * step[0], north + k * step[1]) for k, w in weights.items())
        most = max(most, np.abs(total).max() / 10.0**order)
    return most


SECOND, THIRD = steepest_derivative(2), steepest_derivative(3)


@cache
def to_plane(place):
    """From longitude and latitude to metres east and north of a place."""
    latitude, longitude = PLACES[place]
    crs = f"+proj=aeqd +lat_0={latitude} +lon_0={longitude} +datum=WGS84"
    return Transformer.from_crs("EPSG:4326", crs, always_xy=True)


def crs_of(name, place):
    latitude, longitude = PLACES[place]
    zone = int((longitude + 180.0) // 6.0) + 1 + (name == "next utm")
    if name in ("utm", "next utm"):
        return CRS.from_epsg((32600 if latitude > 0 else 32700) + zone)
    if name == "feet":
        return CRS(f"+proj=tmerc +lat_0={latitude} +lon_0=8 +datum=WGS84 +units=us-ft")
    return CRS(name)


@cache
def grid(place, name):
    """Sample the hill on one of the grids."""
    words, sizes, turn, unit = GRIDS[name]
    latitude, longitude = PLACES[place]
    crs = crs_of(words, place)
    if sizes is None:  # equal degrees both ways, so narrow cells
        x_step, y_step = CELL / 111_000.0, -CELL / 111_000.0
        steps = (CELL * np.cos(np.radians(latitude)), CELL)
    else:
        per_metre = 1.0 / np.cos(np.radians(latitude)) if words == "EPSG:3857" else 1.0
        per_metre /= FOOT if words == "feet" else 1.0
        x_step, y_step = sizes[0] * per_metre, sizes[1] * per_metre
        steps = (abs(sizes[0]), abs(sizes[1]))
    a = np.radians(turn)
    axes = np.array([[np.cos(a), -np.sin(a)], [np.sin(a), np.cos(a)]]) @ np.diag([x_step, y_step])
    columns, rows = (2 * int(np.ceil(REACH / step)) + 1 for step in steps)
    to_crs = Transformer.from_crs("EPSG:4326", crs, always_xy=True)
    corner = np.array(to_crs.transform(longitude, latitude)) - axes @ [columns / 2, rows / 2]
    column, row = np.meshgrid(np.arange(columns) + 0.5, np.arange(rows) + 0.5)
    x = axes[0, 0] * column + axes[0, 1] * row + corner[0]
    y = axes[1, 0] * column + axes[1, 1] * row + corner[1]
    degrees = to_crs.transform(x, y, direction="INVERSE")
    heights = hill(*to_plane(place).transform(*degrees)) / (FOOT if "foot" in unit else 1.0)
    transform = (*axes[0], corner[0], *axes[1], corner[1])
    ground = terrasol.Elevation.from_array(heights, transform, crs, vertical_unit=unit)
    return Grid(ground, np.linalg.inv(axes), to_crs, steps)


@cache
def terrain_of(place, name):
    return terrasol.terrain(grid(place, name).ground, azimuths=32, horizon=True)


@cache
def year_of(place, name):
    """A year of sun every ten minutes: the same suns on every grid, so their number matters not."""
    air, ground = terrasol.Air.ineichen(3.0), grid(place, name).ground
    return terrasol.irradiation(ground, period="2025", air=air, azimuths=32, step_seconds=600.0)


def common_points(place):
    """Longitudes and latitudes on and between hill and ridge."""
    east, north = np.meshgrid(np.linspace(-1500.0, 2200.0, 8), np.linspace(-1600.0, 1600.0, 7))
    return to_plane(place).transform(east.ravel(), north.ravel(), direction="INVERSE")


def fractional_cells(grid, longitude, latitude):
    """Row and column, as fractions, of places on the globe."""
    from_corner = np.array(grid.to_crs.transform(longitude, latitude))
    from_corner -= np.array(grid.ground.transform)[[2, 5], None]
    column, row = grid.inverse @ from_corner - 0.5
    return row, column


def nearest_cells(grid, place):
    """Row, column, longitude and latitude of the cells next to the common points."""
    row, column = (np.rint(v).astype(int) for v in fractional_cells(grid, *common_points(place)))
    a, b, c, d, e, f = grid.ground.transform
    x = a * (column + 0.5) + b * (row + 0.5) + c
    y = d * (column + 0.5) + e * (row + 0.5) + f
    return row, column, *grid.to_crs.transform(x, y, direction="INVERSE")


def height_towards(place, longitude, latitude, azimuth, distance):
    """Height of the ground a distance along geodesics; the arguments broadcast."""
    start = np.broadcast_arrays(longitude, latitude, azimuth, distance)
    far_longitude, far_latitude, _ = GLOBE.fwd(*(np.ascontiguousarray(v, float) for v in start))
    return hill(*to_plane(place).transform(far_longitude, far_latitude))


def true_gradient(place, longitude, latitude):
    """Rise per metre towards true east and true north, by differences over 2 m."""
    east, north = (
        (
            height_towards(place, longitude, latitude, azimuth, 1.0)
            - height_towards(place, longitude, latitude, azimuth + 180.0, 1.0)
        )
        / 2.0
        for azimuth in (90.0, 0.0)
    )
    return east, north


def stencil_bound(grid):
    """Most that Horn's stencil can add to the gradient on this grid."""
    u, v = grid.steps
    along = np.array([u**2 / 6.0 + v**2 / 4.0, v**2 / 6.0 + u**2 / 4.0])
    return np.hypot(*along) * THIRD + 2e-5  # the rounding of float32 heights over two cells


CASES = [
    *(("60N", name) for name in GRIDS),
    *(("46N", name) for name in ("utm", "next utm zone", "degrees", "rotated")),
    *(("33S", name) for name in ("utm", "degrees", "south-up")),
]
ANY_CASE = pytest.mark.parametrize(("place", "name"), CASES)
OTHER_THAN_UTM = pytest.mark.parametrize(
    ("place", "name"), [case for case in CASES if case[1] != "utm"]
)


@ANY_CASE
def test_slope_and_aspect(place, name):
    it = grid(place, name)
    row, column, longitude, latitude = nearest_cells(it, place)
    east, north = true_gradient(place, longitude, latitude)
    steep = np.hypot(east, north)
    found = terrain_of(place, name)
    slope, aspect = found["slope"].values[row, column], found["aspect"].values[row, column]
    bound = stencil_bound(it)
    assert bound < 2e-3  # 0.11 degrees
    np.testing.assert_array_less(np.abs(np.tan(np.radians(slope)) - steep), bound)
    sloping = steep > 0.05
    assert sloping.sum() > 40
    turn = np.radians(aspect) - np.arctan2(-east, -north)
    turn = np.abs(np.angle(np.exp(1j * turn)))
    np.testing.assert_array_less(turn[sloping], 1.01 * bound / steep[sloping])


@ANY_CASE
def test_horizon(place, name):
    # Next to the cell the horizon of a rounded slope is the slope's own plane, which neither
    # the truth nor the raster can sample; so both are taken no lower than the true plane.
    it = grid(place, name)
    row, column, longitude, latitude = nearest_cells(it, place)
    found = terrain_of(place, name)
    azimuth = found["azimuth"].values[::2]
    distance = np.arange(10.0, 5000.0, 10.0)
    far = height_towards(
        place, longitude[:, None, None], latitude[:, None, None], azimuth[:, None], distance
    )
    z0 = height_towards(place, longitude, latitude, 0.0, 0.0)[:, None, None]
    rise = (far - z0) / distance - distance / (2.0 * LIFTED_RADIUS)
    east, north = (g[:, None] for g in true_gradient(place, longitude, latitude))
    turn = np.radians(azimuth)
    floor = np.maximum(east * np.sin(turn) + north * np.cos(turn), 0.0)
    want = np.maximum(rise.max(axis=-1), floor)
    got = np.tan(np.radians(found["horizon"].values[::2, row, column].T))
    got = np.maximum(got, floor)
    lift = 2.0 * SECOND * (it.steps[0] ** 2 + it.steps[1] ** 2) / 8.0
    to_ridge = distance[rise.argmax(axis=-1)]
    near = to_ridge < 20.0 * min(it.steps)
    assert (want > floor + 0.01).sum() > 100
    np.testing.assert_array_less((want - got)[near], (lift / to_ridge + 1e-4)[near])
    gap = np.degrees(np.arctan(got) - np.arctan(want))
    assert np.sqrt((gap**2).mean()) < 0.05
    assert abs(gap.mean()) < 0.01


@OTHER_THAN_UTM
def test_year_of_sun(place, name):
    # Against the UTM grid, at the same places. The tilt of a slope changes its year by less
    # than its change in gradient, and each of the two stencils may add its bound.
    years = []
    for each in ("utm", name):
        whole = year_of(place, each)["irradiation_year"].sel(part="global").values
        at = fractional_cells(grid(place, each), *common_points(place))
        years.append(map_coordinates(whole, at, order=3))
    bound = stencil_bound(grid(place, "utm")) + stencil_bound(grid(place, name))
    relative = years[1] / years[0] - 1.0
    assert years[0].max() / years[0].min() > 1.2
    np.testing.assert_array_less(np.abs(relative), bound)
    assert abs(relative.mean()) < bound / 5.0
