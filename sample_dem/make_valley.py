"""Make valley.tif, the ground of an invented valley from the foothills to an alpine crest.

The valley does not exist: no measured height went into it and no place is meant. It is grown
the way valleys grow, by rock rising and water cutting:

1. Points scattered at random are joined into an irregular mesh of triangles, so that no row,
   column or diagonal of a grid can leave its mark on the streams.
2. Rock rises, little in the west and most under a crest in the east. Streams cut down by the
   stream-power law, dz/dt = U - K sqrt(A) S (Howard 1994), solved implicitly from the outlets
   upward (Braun and Willett 2013); water leaves closed hollows over their lowest pass
   (Barnes, Lehman and Mulla 2014; Cordonnier, Bovy and Braun 2019). Slopes steeper than their
   rock bears slide, and soil creep rounds the ridges. A coarse mesh grows the valley from a
   faint trough; a fine mesh then adds the small side valleys.
3. The base of the rivers rises, and gravel fills the lower valleys to a flat floor with fans
   below the side valleys.
4. On the sunny, gentle side of the main valley the slope is cut into broad terraces, and the
   last small hollows are filled.

The same numbers come out on every run: the random numbers are seeded, and the arithmetic keeps
to sums, products, quotients and square roots, whose rounding IEEE 754 fixes.

Papers: Howard 1994, Water Resources Research 30, 2261-2285; Braun and Willett 2013,
Geomorphology 180-181, 170-179; Barnes, Lehman and Mulla 2014, Computers & Geosciences 62,
117-127; Cordonnier, Bovy and Braun 2019, Earth Surface Dynamics 7, 549-562.

Run it as `python sample_dem/make_valley.py [FILE]`; it needs numpy, scipy and rasterio.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.transform import from_origin
from scipy import ndimage
from scipy.sparse import coo_array
from scipy.sparse.csgraph import breadth_first_order, minimum_spanning_tree
from scipy.spatial import Delaunay

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

COLUMNS, ROWS, CELL = 600, 500, 20.0
WIDTH, HEIGHT = COLUMNS * CELL, ROWS * CELL
WEST, NORTH, CRS = 620_000.0, 5_160_000.0, "EPSG:32632"
"""The window in metres; inside this file x runs east and y north from its south-west corner."""

MARGIN = 4000.0
"""Ground is grown this far beyond the window, so that the window's rim is no border [m]."""
BUFFER = 800.0
"""The fine mesh reaches this far beyond the window [m]."""

FOOTHILL_BASE, FAR_BASE = 400.0, 950.0
"""Heights that rivers leave at, in the west and behind the crest in the east [m]."""
BASE_RISE = 72.0
"""How far the western base rises before gravel fills the valleys [m]."""

UPLIFT_LOW, UPLIFT_GAIN = 0.08e-3, 1.05e-3
"""Uplift at the western rim, and what the crest has on top of it [m/a]."""
ERODIBILITY = 2.7e-6
"""K of the stream-power law, with the exponents 1/2 of area and 1 of slope [1/a]."""
CREEP = 0.03
"""Diffusivity of soil creep [m2/a]."""

CHANNEL_AREA = 1e5
"""A stream gathers at least this area [m2]."""
FLOOR_GRADE = 0.004
"""Gradient of the gravel floor along the main river."""
TERRACE_STEP = 10.0
"""Height from one terrace to the next [m]."""

SEED = 20


@dataclass(frozen=True)
class Mesh:
    """Irregular points joined by Delaunay triangles.

    The directed edges source -> target are sorted by source; those of point i begin at start[i].
    """

    x: Floats
    y: Floats
    triangles: Ints
    source: Ints
    target: Ints
    start: Ints
    length: Floats
    area: Floats
    outlet: NDArray[np.bool_]


@dataclass(frozen=True)
class Rock:
    """What the ground is made of, and how fast it rises, at each point."""

    uplift: Floats
    erodibility: Floats
    steepest: Floats


@dataclass(frozen=True)
class Drainage:
    """Where each point's water goes: the receiver and the way to it, and the area gathered.

    generations lists the points by their number of steps from an outlet, outlets first.
    """

    receiver: Ints
    generations: list[Ints]
    distance: Floats
    area: Floats


def ease(t: Floats) -> Floats:
    """Smooth step from 0 at t <= 0 to 1 at t >= 1."""
    t = np.clip(t, 0.0, 1.0)
    return t * t * (3.0 - 2.0 * t)


def undulation(x: Floats, y: Floats, scale: float) -> Floats:
    """Smooth random field of about -1 to 1 that changes over `scale` metres."""
    knots = int((max(WIDTH, HEIGHT) + 2 * MARGIN) / scale) + 6
    field = np.random.default_rng([SEED, int(scale)]).uniform(-1.0, 1.0, (knots, knots))
    where = [(y + MARGIN) / scale + 2.0, (x + MARGIN) / scale + 2.0]
    return ndimage.map_coordinates(field, where, order=3)


def main_valley(x: Floats) -> Floats:
    """Northing of the faint trough that the main river starts from."""
    return 5000.0 - 1400.0 * ease((x + 1300.0) / 6600.0) + 1400.0 * ease((x - 5300.0) / 6700.0)


def soft_belt(x: Floats, y: Floats) -> Floats:
    """Share, 0 to 1, of the soft rock below the sunny side of the main valley."""
    north = y - main_valley(x)
    upper = 1750.0 + 300.0 * undulation(x, y, 3000.0)
    across = ease((north - 50.0) / 350.0) * ease((upper - north) / 500.0)
    return across * ease((x - 300.0) / 900.0) * ease((6000.0 - x) / 900.0)


def rock(x: Floats, y: Floats) -> Rock:
    """Uplift [m/a], erodibility [1/a] and steepest stable gradient at each point."""
    crest = 10_100.0 + 0.10 * (y - 5000.0) + 500.0 * undulation(x, y, 3000.0)
    rim = 1000.0 - MARGIN
    before = ease((x - rim) / (crest - rim))
    before = before * np.sqrt(np.sqrt(before))
    share = np.where(x < crest, before, ease(1.0 - (x - crest) / 7500.0))
    hard = 0.6 * undulation(x, y, 1500.0) + 0.4 * undulation(x, y, 500.0)
    crushed = ease(1.0 - np.abs(y - main_valley(x)) / 700.0) * (x < 9000.0)
    steepest = (0.34 + 0.44 * ease(x / 8500.0)) * (1.0 + 0.22 * hard)
    soft = soft_belt(x, y)
    return Rock(
        uplift=UPLIFT_LOW + UPLIFT_GAIN * share,
        erodibility=ERODIBILITY * (1.0 - 0.3 * hard) * (1.0 + 2.2 * crushed),
        steepest=steepest * (1.0 - soft) + 0.17 * soft,
    )


def scatter(spacing: float, beyond: float, rng: np.random.Generator) -> Floats:
    """Points about `spacing` apart, shaken off a hexagonal lattice, `beyond` the window."""
    x, y = np.meshgrid(
        np.arange(-beyond, WIDTH + beyond + spacing / 2, spacing),
        np.arange(-beyond, HEIGHT + beyond + spacing / 2, spacing * np.sqrt(0.75)),
    )
    x[1::2] += spacing / 2
    points = np.column_stack([x.ravel(), y.ravel()])
    return points + rng.uniform(-0.6, 0.6, points.shape) * spacing


def mesh(inner: float, outer: float) -> Mesh:
    """Mesh with points `inner` metres apart in and near the window and `outer` beyond."""
    rng = np.random.default_rng([SEED, int(inner)])
    fine, coarse = scatter(inner, BUFFER, rng), scatter(outer, MARGIN, rng)
    reach = BUFFER + inner
    away = np.maximum(
        np.maximum(-coarse[:, 0], coarse[:, 0] - WIDTH),
        np.maximum(-coarse[:, 1], coarse[:, 1] - HEIGHT),
    )
    points = np.vstack([fine, coarse[away > reach]])
    delaunay = Delaunay(points)
    start, target = (part.astype(np.int64) for part in delaunay.vertex_neighbor_vertices)
    source = np.repeat(np.arange(len(points)), np.diff(start))
    step = points[target] - points[source]
    triangles = delaunay.simplices.astype(np.int64)
    slivers = np.ptp(points[triangles], axis=1).max(axis=1) > 2.5 * outer  # on the hull alone
    triangles = triangles[~slivers]
    a, b, c = (points[corner] for corner in triangles.T)
    third = np.abs((b - a)[:, 0] * (c - a)[:, 1] - (b - a)[:, 1] * (c - a)[:, 0]) / 6.0
    x, y = np.ascontiguousarray(points.T)
    return Mesh(
        x=x,
        y=y,
        triangles=triangles,
        source=source,
        target=target,
        start=start[:-1],
        length=np.sqrt(step[:, 0] ** 2 + step[:, 1] ** 2),
        area=np.bincount(triangles.ravel(), np.repeat(third, 3), len(points)).astype(np.float64),
        outlet=(x < outer - MARGIN) | (x > WIDTH + MARGIN - outer),
    )


def ends(receiver: Ints) -> Ints:
    """Last point on each point's way down."""
    while True:
        further = receiver[receiver]
        if np.array_equal(further, receiver):
            return receiver
        receiver = further


def downhill(land: Mesh, heights: Floats) -> Ints:
    """Steepest lower neighbour of each point; a pit or an outlet is its own."""
    gradient = (heights[land.source] - heights[land.target]) / land.length
    best = np.maximum.reduceat(gradient, land.start)
    chosen = (gradient == best[land.source]) & (gradient > 0.0) & ~land.outlet[land.source]
    receiver = np.arange(heights.size)
    receiver[land.source[chosen]] = land.target[chosen]
    return receiver


def over_passes(land: Mesh, heights: Floats, receiver: Ints) -> Ints:
    """Send the water of each pit over the pass through which a rising lake would leave."""
    pits = np.flatnonzero((receiver == np.arange(receiver.size)) & ~land.outlet)
    if pits.size == 0:
        return receiver
    basins = pits.size + 1  # basin 0 is all that reaches an outlet
    number = np.zeros(receiver.size, dtype=np.int64)
    number[pits] = np.arange(1, basins)
    basin = number[ends(receiver)]
    crossing = np.flatnonzero(basin[land.source] != basin[land.target])
    sill = np.maximum(heights[land.source[crossing]], heights[land.target[crossing]])
    crossing = crossing[np.argsort(sill, kind="stable")]
    pair, lowest = np.unique(
        basin[land.source[crossing]] * basins + basin[land.target[crossing]], return_index=True
    )
    of, beside = (part.astype(np.int32) for part in np.divmod(pair, basins))
    graph = coo_array((lowest + 1.0, (of, beside)), shape=(basins, basins))
    tree = minimum_spanning_tree(graph.tocsr())
    _, towards = breadth_first_order(tree, 0, directed=False)
    way_out = np.searchsorted(pair, np.arange(1, basins) * basins + towards[1:])
    joined = receiver.copy()
    joined[pits] = land.target[crossing[lowest[way_out]]]
    return joined


def drainage(land: Mesh, heights: Floats) -> Drainage:
    """Route the water of every point to an outlet."""
    receiver = over_passes(land, heights, downhill(land, heights))
    steps, further = (receiver != np.arange(receiver.size)).astype(np.int64), receiver
    while steps[further].any():
        steps, further = steps + steps[further], further[further]
    order = np.argsort(steps, kind="stable")
    generations = np.split(order, np.cumsum(np.bincount(steps))[:-1])
    area = land.area.copy()
    for points in generations[:0:-1]:
        np.add.at(area, receiver[points], area[points])
    distance = np.sqrt((land.x - land.x[receiver]) ** 2 + (land.y - land.y[receiver]) ** 2)
    return Drainage(receiver, generations, distance, area)


def creep(land: Mesh, heights: Floats, reach: float, moving: NDArray[np.bool_]) -> Floats:
    """Diffuse the heights of the `moving` points; `reach` is diffusivity times time [m2]."""
    rate = reach / (np.sqrt(3.0) * land.area)
    rounds = min(int(np.ceil(rate.max() * 10.0)), 12)
    share = np.where(moving, np.minimum(rate / rounds, 0.1), 0.0)
    for _ in range(rounds):
        heights = heights + share * np.add.reduceat(
            heights[land.target] - heights[land.source], land.start
        )
    return heights


def erode(land: Mesh, heights: Floats, years: float, rounds: int) -> Floats:
    """Raise the rock and let streams, slides and creep wear it down, `rounds` times `years`."""
    stuff = rock(land.x, land.y)
    for _ in range(rounds):
        water = drainage(land, heights)
        down = water.receiver
        distance = np.where(down == np.arange(down.size), 1.0, water.distance)
        cutting = stuff.erodibility * years * np.sqrt(water.area) / distance
        drop = stuff.steepest * distance
        heights = heights + np.where(land.outlet, 0.0, stuff.uplift * years)
        for points in water.generations[1:]:
            below = heights[down[points]]
            cut = (heights[points] + cutting[points] * below) / (1.0 + cutting[points])
            heights[points] = np.minimum(cut, below + drop[points])
        heights = creep(land, heights, CREEP * years, ~land.outlet)
    return heights


def level(land: Mesh, heights: Floats, bed: Floats, rounds: int) -> Floats:
    """Smooth the gravel where there is some, never below its bed."""
    gravel = heights > bed
    edges = np.flatnonzero(gravel[land.source])
    source, target = land.source[edges], land.target[edges]
    heights = heights.copy()
    for _ in range(rounds):
        lift = np.bincount(source, heights[target] - heights[source], heights.size)
        heights[gravel] = np.maximum(heights + 0.1 * lift, bed)[gravel]
    return heights


def raise_to(water: Drainage, heights: Floats, grade: Floats) -> Floats:
    """Raise each point until it stands `grade` above the point it drains to."""
    heights = heights.copy()
    for points in water.generations[1:]:
        needed = heights[water.receiver[points]] + (grade * water.distance)[points]
        heights[points] = np.maximum(heights[points], needed)
    return heights


def fill_valleys(land: Mesh, bed: Floats) -> Floats:
    """Let the western base rise and gravel fill the valleys: a floor, fans, no hollows."""
    heights = bed + np.where(land.outlet & (land.x < WIDTH / 2), BASE_RISE, 0.0)
    water = drainage(land, bed)
    for _ in range(3):
        fan = np.minimum(FLOOR_GRADE * np.sqrt(4e7 / water.area), 0.08)
        grade = np.where(water.area > CHANNEL_AREA, fan, FLOOR_GRADE)
        heights = level(land, raise_to(water, heights, grade), bed, 200)
        water = drainage(land, heights)
    heights = raise_to(water, heights, np.full(heights.size, FLOOR_GRADE / 2))
    return level(land, heights, bed, 5)


def sample(land: Mesh, heights: Floats, cell: float, beyond: float) -> Floats:
    """Heights at the cell centres of a grid that reaches `beyond` the window, row 0 in the north.

    Linear within each triangle; NaN outside the mesh.
    """
    columns, rows = (round((size + 2 * beyond) / cell) for size in (WIDTH, HEIGHT))
    u = ((land.x + beyond) / cell - 0.5)[land.triangles]
    v = ((HEIGHT + beyond - land.y) / cell - 0.5)[land.triangles]
    sees = (u.max(axis=1) >= 0) & (u.min(axis=1) < columns)
    sees &= (v.max(axis=1) >= 0) & (v.min(axis=1) < rows)
    u, v, z = u[sees], v[sees], heights[land.triangles[sees]]
    first_u, first_v = np.ceil(u.min(axis=1)), np.ceil(v.min(axis=1))
    last_u, last_v = u.max(axis=1), v.max(axis=1)
    grid = np.full((rows, columns), np.nan)
    for right in range(int((last_u - first_u).max()) + 1):
        for below in range(int((last_v - first_v).max()) + 1):
            at_u, at_v = first_u + right, first_v + below
            near = (at_u <= last_u) & (at_v <= last_v)
            near &= (at_u >= 0) & (at_u < columns) & (at_v >= 0) & (at_v < rows)
            row, column = at_v[near].astype(int), at_u[near].astype(int)
            value = in_triangle(u[near], v[near], z[near], at_u[near], at_v[near])
            inside = np.isfinite(value)
            grid[row[inside], column[inside]] = value[inside]
    return grid


def in_triangle(u: Floats, v: Floats, z: Floats, at_u: Floats, at_v: Floats) -> Floats:
    """Linear interpolation in triangles given by their corners; NaN outside the triangle."""
    du, dv = u[:, 1:] - u[:, :1], v[:, 1:] - v[:, :1]
    su, sv = at_u - u[:, 0], at_v - v[:, 0]
    twice = du[:, 0] * dv[:, 1] - du[:, 1] * dv[:, 0]
    b = (su * dv[:, 1] - sv * du[:, 1]) / twice
    c = (sv * du[:, 0] - su * dv[:, 0]) / twice
    inside = (b >= -1e-9) & (c >= -1e-9) & (b + c <= 1.0 + 1e-9)
    value = z[:, 0] + b * (z[:, 1] - z[:, 0]) + c * (z[:, 2] - z[:, 0])
    return np.where(inside, value, np.nan)


def refine(coarse: Mesh, heights: Floats, fine: Mesh) -> Floats:
    """Heights of one mesh at the points of another."""
    cell = 40.0
    grid = sample(coarse, heights, cell, MARGIN)
    nearest = ndimage.distance_transform_edt(
        np.isnan(grid), return_distances=False, return_indices=True
    )
    where = [(HEIGHT + MARGIN - fine.y) / cell - 0.5, (fine.x + MARGIN) / cell - 0.5]
    new = ndimage.map_coordinates(grid[tuple(nearest)], where, order=1, mode="nearest")
    return np.where(fine.outlet, base(fine.x), new)


def base(x: Floats) -> Floats:
    """Height at which the rivers leave [m]."""
    return np.where(x < WIDTH / 2, FOOTHILL_BASE, FAR_BASE)


def first_ground(land: Mesh) -> Floats:
    """Gentle ramp with a faint trough and a little unevenness, before any erosion."""
    aside = np.minimum(np.abs(land.y - main_valley(land.x)) / 3000.0, 1.0)
    uneven = np.random.default_rng([SEED, 0]).uniform(0.0, 40.0, land.x.size)
    ramp = FOOTHILL_BASE + 0.006 * np.maximum(land.x + MARGIN, 0.0)
    return np.where(land.outlet, base(land.x), ramp + 200.0 * aside + uneven)


def terraced(ground: Floats) -> Floats:
    """Cut the sunny, gentle slope of the soft belt into terraces along the contours."""
    x, y = np.meshgrid((np.arange(COLUMNS) + 0.5) * CELL, HEIGHT - (np.arange(ROWS) + 0.5) * CELL)
    south, east = np.gradient(ndimage.uniform_filter(ground, 5), CELL)
    gradient = np.sqrt(south**2 + east**2)
    sunny = ease((-south / np.maximum(gradient, 1e-6) - 0.5) / 0.2)
    workable = ease((gradient - 0.07) / 0.04) * ease((0.27 - gradient) / 0.05)
    share = ndimage.uniform_filter(soft_belt(x, y) * sunny * workable, 5)
    share = ease((share - 0.35) / 0.25)
    step = np.floor(ground / TERRACE_STEP)
    part = ground / TERRACE_STEP - step
    stepped = TERRACE_STEP * (step + 0.15 * part + 0.85 * ease((part - 0.45) / 0.55))
    return ground + share * (stepped - ground)


def drained(ground: Floats) -> Floats:
    """Fill the hollows, a few metres deep, that the grid left where it bridged a narrow stream."""
    water = ground + 10.0
    water[[0, -1]], water[:, [0, -1]] = ground[[0, -1]], ground[:, [0, -1]]
    while True:
        lower = np.maximum(ground, ndimage.minimum_filter(water, 3, mode="nearest"))
        if np.array_equal(lower, water):
            return water
        water = lower


def valley() -> NDArray[np.float32]:
    """Heights of the invented valley [m], shape (ROWS, COLUMNS), in sixteenths of a metre."""
    coarse = mesh(80.0, 100.0)
    young = erode(coarse, first_ground(coarse), years=40_000.0, rounds=150)
    fine = mesh(24.0, 80.0)
    old = erode(fine, refine(coarse, young, fine), years=10_000.0, rounds=20)
    ground = sample(fine, fill_valleys(fine, old), CELL, 0.0)
    for axis in (0, 1):
        ground = ndimage.convolve1d(ground, [0.25, 0.5, 0.25], axis=axis, mode="nearest")
    return (np.round(drained(terraced(ground)) * 16.0) / 16.0).astype(np.float32)


def write(path: Path, heights: NDArray[np.float32]) -> None:
    """Write the heights as a tiled GeoTIFF with its CRS and unit."""
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        width=COLUMNS,
        height=ROWS,
        count=1,
        dtype="float32",
        crs=CRS,
        transform=from_origin(WEST, NORTH, CELL, CELL),
        nodata=-9999.0,
        tiled=True,
        blockxsize=256,
        blockysize=256,
        compress="deflate",
        predictor=3,
        zlevel=9,
    ) as file:
        file.write(heights, 1)
        file.set_band_description(1, "invented valley: height of the ground")
        file.set_band_unit(1, "metre")


if __name__ == "__main__":
    here = Path(__file__).resolve().parent
    write(Path(sys.argv[1]) if len(sys.argv) > 1 else here / "valley.tif", valley())
