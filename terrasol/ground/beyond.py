"""Ground beyond the raster's edge: what a larger model shows there, and where knowledge ends.

A larger model, coarser as a rule and in any CRS, shows the ridges that the raster was cut off
from. Inside the raster its own heights rule; the larger model counts beyond it and in its voids.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from itertools import pairwise
from typing import Final

import numpy as np
from numpy.typing import NDArray
from pyproj import CRS, Transformer
from scipy.ndimage import binary_dilation, distance_transform_edt, label, minimum_filter
from scipy.spatial import KDTree

from terrasol.constants import EARTH_RADIUS
from terrasol.errors import InputError, SettingError
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import LATTICE_CELLS, Frame
from terrasol.ground.horizon import NODE_STEP, PAD, FarHorizon, Obstacles, half_curve, zone_edges
from terrasol.ground.places import (
    WGS84,
    Locator,
    PlaceMap,
    coordinates,
    edge,
    heights_at,
    opened_opposite,
)
from terrasol.kernels.beyond import known_distance, view_beyond

FEATHER: Final = 2.0
"""Cells of the larger model over which its heights are drawn to the raster's at their joint."""

MARGIN_MOST: Final = 256
"""Most cells around the raster that are filled, at its own cell size, from the larger model."""

PLANE_LATTICE: Final = 8000.0
"""Spacing of the lattice that says where a plane's places lie in a grid [m]. Linear between, a
place is off by up to 8000^2 / 8 tan(latitude) / R: 2 m at 60 degrees."""

STRAIGHT: Final = 2000.0
"""Part of a line that is straight in the other grid too [m]."""

WIDEST_PLANE: Final = 5e6
"""Distance up to which an outline on a plane is trusted to bound what it encloses [m]."""

OFFSET_ODD: Final = 20.0
"""Median difference between two models of one ground [m] from which datum or unit is in doubt:
half the distance of geoid and ellipsoid in the Alps (judgement, no source)."""

HEADROOM: Final = (100.0, 0.25)
"""What the highest plausible ground outside the data stands above the highest inside: metres,
and a share of the relief (judgement, no source)."""

HIGHEST_ON_EARTH: Final = 9000.0
"""No ground stands higher [m]: the highest is 8849 m (survey of 2020, from memory)."""

SAMPLE: Final = 0.5
"""Steps along a line in the larger model, in its cells: a crest lies a quarter of a cell from
the nearest one at most."""

EDGE_SLACK: Final = 1.0
"""Cells by which the edge of the data is taken nearer, for what lattices on planes err by."""

STRIP_CELLS: Final = 2_000_000
"""Cells filled at a time."""


@dataclass(frozen=True)
class FarGround:
    """A larger model that was found to reach beyond a raster.

    Parameters
    ----------
    elevation : Elevation
        Its heights.
    cell : float
        Its shorter cell side at the raster [m].
    reach : tuple of float
        Least and greatest distance of its outer edge from the raster's [m].
    warnings : tuple of str
        What a careful reader should know.
    """

    elevation: Elevation
    cell: float
    reach: tuple[float, float]
    warnings: tuple[str, ...] = ()


def far_ground(elevation: Elevation, far: Elevation) -> FarGround:
    """Check a larger model against the raster that it is to surround.

    Parameters
    ----------
    elevation : Elevation
        The raster.
    far : Elevation
        The larger model, in any CRS.

    Returns
    -------
    FarGround

    Raises
    ------
    InputError
        It does not overlap the raster, or reaches nowhere beyond it.
    """
    rows, columns = elevation.shape
    middle = coordinates(elevation, np.array((rows - 1) / 2), np.array((columns - 1) / 2))
    longitude, _ = Transformer.from_crs(elevation.crs, WGS84, always_xy=True).transform(*middle)
    far = opened_opposite(far, float(longitude))
    locate = Locator(elevation.crs, far)
    mesh = np.meshgrid(np.linspace(0, rows - 1, 65), np.linspace(0, columns - 1, 65), indexing="ij")
    row, column = locate(*coordinates(elevation, *mesh))
    inside = (np.abs(row + 0.5 - far.shape[0] / 2) <= far.shape[0] / 2) & (
        np.abs(column + 0.5 - far.shape[1] / 2) <= far.shape[1] / 2
    )
    if not inside.any():
        raise InputError(
            "the far model does not overlap the raster: give one that contains it and reaches"
            " beyond, or check its CRS"
        )
    around = heights_at(far, *locate(*coordinates(elevation, *edge(elevation, 1.0))))
    covered = float(np.isfinite(around).mean())
    if covered == 0.0:
        raise InputError(
            "the far model shows nothing beyond the raster's edge: give one that is larger than"
            " the raster"
        )
    notes = [f"far model: {text}" for text in far.warnings]
    if covered < 1.0:
        notes.append(
            f"the far model goes on beyond {100 * covered:.0f} % of the raster's edge only:"
            " behind the rest nothing hides the sun"
        )
    at = np.rint(mesh[0]).astype(int), np.rint(mesh[1]).astype(int)
    offset = heights_at(far, *locate(*coordinates(elevation, *at))) - elevation.heights[at]
    offset = offset[np.isfinite(offset)]
    if offset.size and abs(np.median(offset)) > OFFSET_ODD:
        notes.append(
            f"where both are known the far model stands {np.median(offset):+.0f} m from the raster"
            " (median): check the vertical datum and unit of both"
        )
    cell = _cell_side(far, elevation, middle)
    return FarGround(far, cell, _reach(elevation, far), tuple(notes))


def _cell_side(far: Elevation, elevation: Elevation, middle) -> float:
    """Shorter side of a far cell where the raster lies [m]."""
    plane = _plane(elevation.crs, middle)
    metre = 1000.0
    row, column = Locator(plane, far)(np.array([0.0, metre, 0.0]), np.array([0.0, 0.0, metre]))
    cells = np.array([column[1:] - column[0], row[1:] - row[0]]) / metre
    sides = np.linalg.norm(np.linalg.inv(cells), axis=0)
    if not np.all(np.isfinite(sides)):
        raise InputError("the raster lies outside the domain of the far model's CRS: check it")
    return float(sides.min())


def _reach(elevation: Elevation, far: Elevation) -> tuple[float, float]:
    """Least and greatest distance from the far model's outer edge to the raster's edge [m]."""
    around = [_on_sphere(model, *edge(model, 0.5, 256)) for model in (elevation, far)]
    chord = KDTree(around[0]).query(around[1])[0]
    distance = 2.0 * EARTH_RADIUS * np.arcsin(np.minimum(chord / 2.0, 1.0))
    row, column = Locator(far.crs, elevation)(*coordinates(far, *edge(far, 0.5, 256)))
    rows, columns = elevation.shape
    within = (row > -0.5) & (row < rows - 0.5) & (column > -0.5) & (column < columns - 0.5)
    return 0.0 if within.any() else float(distance.min()), float(distance.max())


def _on_sphere(elevation: Elevation, row, column) -> NDArray[np.float64]:
    """Places of a grid as unit vectors, shape (places, 3); those outside its CRS left out."""
    to_degrees = Transformer.from_crs(elevation.crs, WGS84, always_xy=True)
    place = to_degrees.transform(*coordinates(elevation, row, column))
    place = np.radians(np.stack(place)[:, np.isfinite(place[0]) & np.isfinite(place[1])])
    level = np.cos(place[1])
    return np.stack([level * np.cos(place[0]), level * np.sin(place[0]), np.sin(place[1])], axis=1)


def _plane(crs: CRS, middle) -> CRS:
    """The azimuthal equidistant plane about a place in a CRS.

    Straight lines through its middle are geodesics, true in length and in azimuth.
    """
    longitude, latitude = Transformer.from_crs(crs, WGS84, always_xy=True).transform(*middle)
    return CRS.from_dict(
        {
            "proj": "aeqd",
            "lat_0": float(latitude),
            "lon_0": float(longitude),
            "datum": "WGS84",
            "units": "m",
        }
    )


def joined(elevation: Elevation, far: FarGround, cell: float) -> tuple[NDArray[np.float32], int]:
    """The raster's heights with its voids, and a margin around it, filled from a larger model.

    The larger model is drawn to the raster where they meet: the difference at the nearest known
    cell is added, less and less over FEATHER cells of the larger model. So no wall stands at the
    joint where a coarse cell does not know a valley.

    Parameters
    ----------
    elevation : Elevation
        The raster.
    far : FarGround
        The larger model.
    cell : float
        The raster's cell size [m].

    Returns
    -------
    heights : ndarray of float32, shape (rows + 2 margin, columns + 2 margin)
        NaN where neither is known.
    margin : int
        Cells around the raster, PAD at least.
    """
    rows, columns = elevation.shape
    width = FEATHER * far.cell / cell
    margin = int(np.clip(np.ceil(width), PAD, MARGIN_MOST))
    out = np.pad(elevation.heights, margin, constant_values=np.nan)
    nearest = _nearest_known(out, margin)
    locate = Locator(elevation.crs, far.elevation)
    places = PlaceMap.of(
        lambda row, column: locate(*coordinates(elevation, row, column)),
        ((-margin, rows - 1.0 + margin), (-margin, columns - 1.0 + margin)),
        LATTICE_CELLS,
    )
    strip = max(1, STRIP_CELLS // out.shape[1])
    for top in range(0, out.shape[0], strip):
        row, column = np.nonzero(np.isnan(out[top : top + strip]))
        row += top
        known_row, known_column = nearest(row, column)
        distance = np.hypot(row - known_row, column - known_column)
        known = elevation.heights[known_row - margin, known_column - margin]
        seen = heights_at(far.elevation, *places(known_row - margin, known_column - margin))
        drawn = np.nan_to_num(known - seen) * np.clip(1.0 - distance / width, 0.0, 1.0)
        out[row, column] = drawn + heights_at(far.elevation, *places(row - margin, column - margin))
    return out, margin


def _obstacles_of(elevation: Elevation, far: FarGround, cell: float) -> Obstacles:
    """The raster and what a larger model adds in and around it.

    Where the larger model ends within the margin, lowest ground stands in for what hides: it
    rises above nobody's level, as nothing would, and is no void that ground lies behind.
    """
    heights, margin = joined(elevation, far, cell)
    unknown = np.isnan(heights)
    unknown[margin:-margin, margin:-margin] = False
    row, column = np.nonzero(unknown)
    enclosed = np.isnan(far.elevation.heights) & ~_outer_void(far.elevation.heights)
    whole = replace(far.elevation, heights=np.where(enclosed, np.float32(0), far.elevation.heights))
    locate = Locator(elevation.crs, far.elevation)
    seen = heights_at(whole, *locate(*coordinates(elevation, row - margin, column - margin)))
    ended = np.isnan(seen)
    if not ended.any():
        return Obstacles(heights, heights, margin)
    hiding = heights.copy()
    hiding[row[ended], column[ended]] = np.nanmin(heights)
    return Obstacles(hiding, heights, margin)


def _nearest_known(heights: NDArray[np.float32], margin: int):
    """A function from cells of a padded raster to the nearest known ones."""
    inner = [(margin, size - 1 - margin) for size in heights.shape]
    core = heights[margin:-margin, margin:-margin]
    if not np.isnan(core).any():
        return lambda row, column: (np.clip(row, *inner[0]), np.clip(column, *inner[1]))
    rows, columns = distance_transform_edt(
        np.isnan(heights), return_distances=False, return_indices=True
    )
    return lambda row, column: (rows[row, column], columns[row, column])


@dataclass(frozen=True)
class DataEdge:
    """How far away the known ground ends, on the nodes of a `FarHorizon`.

    Parameters
    ----------
    away : ndarray of float32, shape (azimuths, node rows, node columns)
        Distance, never more than true [m].
    highest : float
        Height that ground beyond could have [m].
    """

    away: NDArray[np.float32]
    highest: float


@dataclass(frozen=True)
class Scene:
    """What stands beyond and above a raster's own ground.

    Parameters
    ----------
    obstacles : Obstacles, optional
        What hides the sun on and around the raster; by default its own ground.
    far : FarGround, optional
        A larger model.
    highest : float, optional
        Height that unknown ground could have [m], where the horizon gap is wanted.
    warnings, remarks : tuple of str
        What a careful reader should know, and what any reader may like to.
    """

    obstacles: Obstacles | None = None
    far: FarGround | None = None
    highest: float | None = None
    warnings: tuple[str, ...] = field(default=())
    remarks: tuple[str, ...] = field(default=())


def make_scene(
    elevation: Elevation,
    frame: Frame,
    *,
    far: FarGround | None = None,
    surface: tuple[NDArray[np.float32], tuple[str, ...]] | None = None,
    horizon_gap: bool = False,
    highest: float | None = None,
) -> Scene:
    """Put together what stands beyond and above a raster.

    Parameters
    ----------
    elevation, frame
        The raster and its place.
    far : FarGround, optional
        From `far_ground`.
    surface : tuple, optional
        From `terrasol.ground.above.surface_heights`.
    horizon_gap : bool
        Find out what unknown ground could hide.
    highest : float, optional
        How high that could be [m]: at least what the known ground reaches where it ends. By
        default the highest ground of all given data and HEADROOM above it.

    Returns
    -------
    Scene

    Raises
    ------
    SettingError
        A height that is no number, that nobody asked for, or that no ground outside could have.
    """
    warnings: list[str] = []
    remarks: list[str] = []
    obstacles: Obstacles | None = None
    if far is not None:
        obstacles = _obstacles_of(elevation, far, min(frame.cell_size))
        warnings += far.warnings
        least, greatest = (distance / 1000.0 for distance in far.reach)
        remarks.append(
            f"the far model reaches {least:.1f} to {greatest:.1f} km beyond the raster's edge"
        )
    if surface is not None:
        obstacles = _under(obstacles or Obstacles.of(elevation), surface[0])
        warnings += surface[1]
    return Scene(
        obstacles,
        far,
        _highest(elevation, far, horizon_gap, highest),
        tuple(warnings),
        tuple(remarks),
    )


def _under(ground: Obstacles, surface: NDArray[np.float32]) -> Obstacles:
    """Put a surface on the ground of the raster: what is higher hides, one looks from below."""
    hiding = ground.heights.copy()
    rows, columns = surface.shape
    margin = ground.margin
    inner = hiding[margin : margin + rows, margin : margin + columns]
    np.fmax(inner, surface, out=inner)
    return Obstacles(hiding, ground.eyes, margin)


def _highest(elevation, far, horizon_gap, highest) -> float | None:
    """Height that unknown ground could have, or None if it is not asked for."""
    if not horizon_gap:
        if highest is not None:
            raise SettingError("a highest ground was given, but the horizon gap is not asked for")
        return None
    if highest is not None:
        if not np.isfinite(highest):
            raise SettingError(f"the highest ground must be a number of metres; got {highest!r}")
        _check_highest(elevation, far, highest)
        return float(highest)
    models = [elevation, *([far.elevation] if far else [])]
    lowest = min(float(np.nanmin(model.heights)) for model in models)
    top = max(float(np.nanmax(model.heights)) for model in models)
    return top + HEADROOM[0] + HEADROOM[1] * (top - lowest)


def _check_highest(elevation: Elevation, far: FarGround | None, highest: float) -> None:
    """Refuse a height that ground outside the data cannot have.

    Ground does not end where the data do: just outside it is about as high as just inside. A
    summit further in may well stand above all that is outside.
    """
    if highest > HIGHEST_ON_EARTH:
        raise SettingError(
            f"the highest ground outside the data cannot stand at {highest:g} m, above all ground"
            " on Earth: give it in metres"
        )
    ends = _rim_height(elevation.heights)
    if far is not None:
        outer = _rim_height(far.elevation.heights)
        ends = min(ends, outer) if far.reach[0] == 0.0 else outer
    if highest < ends:
        raise SettingError(
            f"the highest ground outside the data cannot stand as low as {highest:g} m, for the"
            f" known ground reaches {ends:.1f} m where it ends: give {np.ceil(ends):.0f} m or more"
        )


def _rim_height(heights: NDArray[np.float32]) -> float:
    """Greatest height of the outermost known cells [m]."""
    outside = np.pad(_outer_void(heights), 1, constant_values=True)
    beside = binary_dilation(outside, np.ones((3, 3)))[1:-1, 1:-1]
    return float(np.nanmax(heights[beside]))


class Outlook:
    """One zone's nodes on a plane about its middle, and where other grids lie on it.

    Parameters
    ----------
    elevation : Elevation
        The raster.
    zone : tuple of int
        Its rows and columns: first and last edge of each.
    nodes : tuple of slice
        The zone's nodes on the lattice of the whole raster.
    eyes : ndarray of float32
        Heights at those nodes [m].
    """

    def __init__(
        self,
        elevation: Elevation,
        zone: tuple[int, int, int, int],
        nodes: tuple[slice, slice],
        eyes: NDArray[np.float32],
    ) -> None:
        top, bottom, left, right = zone
        middle = coordinates(elevation, np.array((top + bottom) / 2), np.array((left + right) / 2))
        self._plane = _plane(elevation.crs, middle)
        self._elevation = elevation
        axes = [np.arange(span.start, span.stop) * NODE_STEP for span in nodes]
        rows, columns = ((float(axis[0]), float(axis[-1])) for axis in axes)
        grid = np.meshgrid(*axes, indexing="ij")
        places = PlaceMap.of(self._on_plane, (rows, columns), LATTICE_CELLS)(*grid)
        self.span = nodes
        self.places = np.stack([place.ravel() for place in places], axis=1)
        self.eyes = eyes.ravel().astype(np.float64)

    def _on_plane(self, row, column):
        to_plane = Transformer.from_crs(self._elevation.crs, self._plane, always_xy=True)
        return to_plane.transform(*coordinates(self._elevation, row, column))

    def outline(self, margin: float) -> NDArray[np.float64]:
        """The raster's outline, `margin` cells beyond the outer centres, shape (points, 2)."""
        return np.stack(self._on_plane(*edge(self._elevation, margin)), axis=1)

    def lattice(self, model: Elevation, reach: float) -> PlaceMap:
        """Rows and columns of a model around the nodes, by y and x on the plane."""
        low, high = self.places.min(axis=0) - reach, self.places.max(axis=0) + reach
        to_plane = Transformer.from_crs(model.crs, self._plane, always_xy=True)
        around = np.stack(to_plane.transform(*coordinates(model, *edge(model, 1.0))), axis=1)
        if np.all(np.abs(around) < WIDEST_PLANE):  # as nan and inf are not
            bounds = around.min(axis=0) - PLANE_LATTICE, around.max(axis=0) + PLANE_LATTICE
            low, high = np.clip(low, *bounds), np.clip(high, *bounds)
        locate = Locator(self._plane, model)
        ends = ((float(low[1]), float(high[1])), (float(low[0]), float(high[0])))
        return PlaceMap.of(lambda y, x: locate(x, y), ends, PLANE_LATTICE, square=True)


class Beyond:
    """The sweep of what lies beyond a raster: a larger model's ridges, and the data's edge.

    Parameters
    ----------
    elevation, frame
        The raster and its place.
    scene : Scene
        With a larger model, or a height of unknown ground, or both.
    far : FarHorizon
        The raster's own, for the lattice.
    refraction : float
        Coefficient k.
    """

    def __init__(
        self, elevation: Elevation, frame: Frame, scene: Scene, far: FarHorizon, refraction: float
    ) -> None:
        self.scene = scene
        self.bend = half_curve(refraction)
        self.cell = min(frame.cell_size)
        azimuths = far.height.shape[0]
        eyes = _eyes(elevation, scene, far.height.shape[1:])
        self.lowest = float(eyes.min())
        self.outlooks = [
            Outlook(elevation, (top, bottom, left, right), nodes, eyes[nodes])
            for top, bottom in pairwise(zone_edges(frame)[0])
            for left, right in pairwise(zone_edges(frame)[1])
            for nodes in [far.block(top, left, (bottom - top, right - left))]
        ]
        self.horizon = FarHorizon.empty(elevation, azimuths) if scene.far else None
        self.edge = None
        models = [] if scene.far is None else [scene.far.elevation]
        highest = max((float(np.nanmax(model.heights)) for model in models), default=-np.inf)
        if scene.highest is not None:
            self.edge = DataEdge(np.zeros_like(far.height), scene.highest)
            highest = max(highest, scene.highest)
            self._pooled = 1 if scene.far is None else int(np.ceil(self._gap / scene.far.cell))
            self._known = _known(elevation.heights, NODE_STEP)
            self._known_far = np.empty((0, 0), np.uint8)
            if scene.far is not None:
                self._known_far = _known(scene.far.elevation.heights, self._pooled)
        reach = self._reach(highest)
        self._rims = [outlook.outline(0.5) for outlook in self.outlooks]
        margin = scene.obstacles.margin if scene.obstacles else 0
        self._far_rims = [outlook.outline(margin) for outlook in self.outlooks]
        self._near_maps = [outlook.lattice(elevation, reach) for outlook in self.outlooks]
        self._far_maps = [
            outlook.lattice(models[0], reach) if models else near
            for outlook, near in zip(self.outlooks, self._near_maps, strict=True)
        ]

    @property
    def _gap(self) -> float:
        """Metres between lines: as far apart as nodes."""
        return NODE_STEP * self.cell

    def _reach(self, height: float) -> float:
        """Distance from which on nothing so high stands above the level of any node [m]."""
        return float(np.sqrt(max(height - self.lowest, 1.0) / self.bend))

    def sweep(self, azimuth_index: int) -> None:
        """Fill one azimuth of `horizon` and `edge`."""
        for zone in range(len(self.outlooks)):
            if self.horizon is not None:
                self._view(zone, azimuth_index)
            if self.edge is not None:
                self._edge(zone, azimuth_index)
        if self.edge is not None:
            away = self.edge.away[azimuth_index]
            nearest = minimum_filter(away, 3, mode="nearest") - EDGE_SLACK * self.cell
            np.maximum(nearest, 0.25 * self.cell, out=away)

    def _direction(self, azimuth_index: int, layer) -> tuple[float, float]:
        angle = 2.0 * np.pi * azimuth_index / layer.shape[0]
        return float(np.sin(angle)), float(np.cos(angle))

    def _view(self, zone: int, azimuth_index: int) -> None:
        """Find what bounds the view of one zone in the larger model."""
        far, horizon, outlook, places = (
            self.scene.far, self.horizon, self.outlooks[zone], self._far_maps[zone],
        )  # fmt: skip
        assert far is not None
        assert horizon is not None
        sine, cosine = self._direction(azimuth_index, horizon.height)
        reach = self._reach(float(np.nanmax(far.elevation.heights)))
        reach = _inside(places, outlook, sine, cosine, reach)
        step = SAMPLE * far.cell
        height, away = np.empty((2, outlook.eyes.size), np.float32)
        view_beyond(
            far.elevation.heights, places.values, np.array(places.first[::-1]), PLANE_LATTICE,
            self._far_rims[zone], outlook.places, outlook.eyes,
            sine, cosine, self._gap, step, _stride(step), reach, self.bend,
            horizon.datum, height, away,
        )  # fmt: skip
        for layer, values in ((horizon.height, height), (horizon.away, away)):
            part = layer[azimuth_index][outlook.span]
            part[...] = values.reshape(part.shape)

    def _edge(self, zone: int, azimuth_index: int) -> None:
        """Find how far away the known ground ends for one zone."""
        edge_, outlook, near, far = (
            self.edge, self.outlooks[zone], self._near_maps[zone], self._far_maps[zone],
        )  # fmt: skip
        assert edge_ is not None
        sine, cosine = self._direction(azimuth_index, edge_.away)
        inside = 0.5 * NODE_STEP * self.cell
        cell = self.scene.far.cell if self.scene.far else self.cell
        outside = max(0.5 * self._pooled * cell, inside)
        away = np.empty(outlook.eyes.size, np.float32)
        known_distance(
            self._known, NODE_STEP, near.values, np.array(near.first[::-1]),
            self._known_far, self._pooled, far.values, np.array(far.first[::-1]), PLANE_LATTICE,
            self._rims[zone], outlook.places, sine, cosine, self._gap,
            (inside, outside), (_stride(inside), _stride(outside)),
            self._reach(edge_.highest), away,
        )  # fmt: skip
        part = edge_.away[azimuth_index][outlook.span]
        part[...] = away.reshape(part.shape)


def _stride(step: float) -> int:
    """Steps of a line that may be taken as straight in any grid."""
    return max(int(STRAIGHT / step), 1)


def _inside(places: PlaceMap, outlook: Outlook, sine: float, cosine: float, reach: float) -> float:
    """Shorten a reach to what the lattice knows in one direction [m]."""
    span = [
        (first, first + step * (count - 1))
        for first, step, count in zip(
            places.first, places.step, places.values.shape[1:], strict=True
        )
    ]
    farthest = max(y * cosine + x * sine for y in span[0] for x in span[1])
    here = float((outlook.places @ np.array([sine, cosine])).max())
    return float(min(reach, max(farthest - here, 0.0)))


def _eyes(elevation: Elevation, scene: Scene, shape: tuple[int, ...]) -> NDArray[np.float32]:
    """Heights at the nodes; in a void, of the nearest node with a known one."""
    heights, margin = elevation.heights, 0
    if scene.obstacles is not None:
        heights, margin = scene.obstacles.eyes, scene.obstacles.margin
    at = [
        np.minimum(np.arange(count) * NODE_STEP + margin, size - 1)
        for count, size in zip(shape, heights.shape, strict=True)
    ]
    eyes = heights[np.ix_(*at)]
    void = np.isnan(eyes)
    if void.all():
        return np.full_like(eyes, np.nanmean(heights))
    if void.any():
        nearest = distance_transform_edt(void, return_distances=False, return_indices=True)
        eyes = eyes[tuple(nearest)]
    return eyes


def _outer_void(heights: NDArray[np.float32]) -> NDArray[np.bool_]:
    """Void cells that known ground does not enclose: those of voids that reach the rim."""
    void = np.isnan(heights)
    if not void.any():
        return void
    labels, _ = label(void, structure=np.ones((3, 3)))
    rim = np.concatenate([labels[0], labels[-1], labels[:, 0], labels[:, -1]])
    return np.asarray(np.isin(labels, np.setdiff1d(rim, 0)))


def _known(heights: NDArray[np.float32], pooled: int) -> NDArray[np.uint8]:
    """Squares of `pooled` cells whose ground is known, and that of the squares around.

    Voids that known ground encloses are not counted as unknown; those that reach the rim are.
    """
    void = _outer_void(heights)
    extra = [(0, -size % pooled) for size in void.shape]
    padded = np.pad(void, extra)
    rows, columns = (size // pooled for size in padded.shape)
    squares = padded.reshape(rows, pooled, columns, pooled).any(axis=(1, 3))
    return (~binary_dilation(squares, np.ones((3, 3)))).astype(np.uint8)
