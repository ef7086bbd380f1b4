"""The terrain horizon of every cell: what to sweep, in which directions, how far.

Near, each cell's ray is followed step by step from its own centre. Far, whole lines are
swept once for all the cells on them (kernels.horizon.far_field), every few cells, and what
they find is re-seen from each cell's own height.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import EARTH_RADIUS
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame
from terrasol.kernels.horizon import far_field, merge_far, near_field

NODE_STEP: Final = 4
"""Cells between the lines and queries of the far field. Figures in docs/performance.md."""

FAR_FROM: Final = 20
"""Steps after which a point belongs to the far field."""

NEAR_STEPS: Final = FAR_FROM + NODE_STEP
"""Steps followed from the cell's centre: as far as the farthest query around it begins."""

PAD: Final = NEAR_STEPS + 2
"""Cells that a block needs around it."""

ZONE_TOLERANCE: Final = 0.0125
"""Largest departure of the grid from its own middle within a zone of the far field: 0.7
degrees of turn or 1.25 % of scale, an eighth of a sector at 64 azimuths."""

BLOCK: Final = 256
"""Cells along the side of a block. Blocks are counted from the raster's first cell, and all
directions are taken at block centres, so that no result depends on the order of the work."""


def azimuth_directions(azimuths: int) -> NDArray[np.float32]:
    """Sine and cosine of equally spaced azimuths, the first due north; shape (azimuths, 2)."""
    angle = 2.0 * np.pi * np.arange(azimuths) / azimuths
    return np.stack([np.sin(angle), np.cos(angle)], axis=1).astype(np.float32)


def half_curve(refraction: float) -> float:
    """1 / (2 R') [1/m]: the line of sight over D metres drops by D^2 times this.

    R' = R / (1 - k), with k the refraction coefficient.

    Examples
    --------
    >>> round(half_curve(0.13) * 10_000.0**2, 3)
    6.828
    """
    return (1.0 - refraction) / (2.0 * EARTH_RADIUS)


def near_steps(
    frame: Frame, row: float, column: float, azimuths: int, refraction: float
) -> tuple[NDArray[np.int64], NDArray[np.float32]]:
    """Cells and weights of the near field's steps around one place.

    A step runs to the next row (or column) that the ray crosses; there the height is linear
    between the two cells beside the crossing.

    Returns
    -------
    shift : ndarray of int64, shape (azimuths, steps, 4)
        Row and column shift of the one cell and of the other.
    weight : ndarray of float32, shape (azimuths, steps, 4)
        Weight of each cell [1/m], 1 / distance [1/m], drop by curvature over distance.
    """
    angle = 2.0 * np.pi * np.arange(azimuths) / azimuths
    rays = np.linalg.solve(
        frame.jacobian_at(row, column), np.stack([np.sin(angle), np.cos(angle)])
    ).T  # columns and rows a metre
    by_rows = np.abs(rays[:, 1]) >= np.abs(rays[:, 0])
    major = np.where(by_rows, rays[:, 1], rays[:, 0])
    minor = np.where(by_rows, rays[:, 0], rays[:, 1])
    count = np.arange(1, NEAR_STEPS + 1)
    along = np.sign(major)[:, None].astype(np.int64) * count
    side = (minor / np.abs(major))[:, None] * count
    first = np.floor(side + 1e-9).astype(np.int64)
    part = np.maximum(side - first, 0.0)
    part[part < 1e-9] = 0.0
    second = np.where(part > 0.0, first + 1, first)
    # (row, column) where the ray crosses rows, (column, row) where it crosses columns
    pair = np.stack([along, first, along, second], axis=-1)
    shift = np.where(by_rows[:, None, None], pair, pair[..., [1, 0, 3, 2]])
    distance = count / np.abs(major)[:, None]
    drop = distance * half_curve(refraction)
    weight = np.stack([(1.0 - part) / distance, part / distance, 1.0 / distance, drop], axis=-1)
    return np.ascontiguousarray(shift), weight.astype(np.float32)


@dataclass(frozen=True)
class FarHorizon:
    """What bounds the view beyond the near field, on a lattice of nodes.

    Parameters
    ----------
    height, away : ndarray of float32, shape (azimuths, node rows, node columns)
        Height above `datum` and distance of the point that bounds the view [m].
        Node (i, j) lies on cell (i NODE_STEP, j NODE_STEP).
    across_void : ndarray of uint8, shape (azimuths, node rows, node columns)
        1 where the line of sight crosses a void before it ends.
    datum : float
        Height [m].
    """

    height: NDArray[np.float32]
    away: NDArray[np.float32]
    across_void: NDArray[np.uint8]
    datum: float

    @classmethod
    def empty(cls, elevation: Elevation, azimuths: int) -> FarHorizon:
        """Room for a raster's far horizon; filled by `sweep`."""
        nodes = tuple((size - 1) // NODE_STEP + 2 for size in elevation.shape)
        return cls(
            np.zeros((azimuths, *nodes), np.float32),
            np.zeros((azimuths, *nodes), np.float32),
            np.zeros((azimuths, *nodes), np.uint8),
            float(np.nanmean(elevation.heights)),
        )

    def block(self, row: int, column: int, shape: tuple[int, int]) -> tuple[slice, slice]:
        """Nodes that a block of cells needs, as slices of the node axes."""
        spans = []
        for first, size in zip((row, column), shape, strict=True):
            spans.append(slice(first // NODE_STEP, (first + size - 1) // NODE_STEP + 2))
        return spans[0], spans[1]


def zone_edges(frame: Frame) -> tuple[list[int], list[int]]:
    """Row and column edges of the zones within which the grid hardly turns.

    Returns
    -------
    rows, columns : list of int
        Edges [cells], multiples of BLOCK but for the last.
    """
    parts = 1
    while True:
        rows, columns = (_edges(size, parts) for size in frame.shape)
        if parts >= 64 or _zones_hold(frame, rows, columns):
            return rows, columns
        parts *= 2


def _edges(size: int, parts: int) -> list[int]:
    blocks = -(-size // BLOCK)
    inner = {blocks * k // parts * BLOCK for k in range(parts)}
    return [*sorted(inner), size]


def _zones_hold(frame: Frame, rows: list[int], columns: list[int]) -> bool:
    """Whether the Jacobian stays within tolerance of each zone's middle."""
    for top, bottom in pairwise(rows):
        for left, right in pairwise(columns):
            middle = frame.jacobian_at((top + bottom) / 2, (left + right) / 2)
            for row in (top, bottom):
                for column in (left, right):
                    change = frame.jacobian_at(row, column) @ np.linalg.inv(middle)
                    if np.abs(change - np.eye(2)).max() > ZONE_TOLERANCE:
                        return False
    return True


@dataclass(frozen=True)
class Obstacles:
    """What hides the sun where that is not, or not only, the ground of the raster itself.

    Parameters
    ----------
    heights : ndarray of float32, shape (rows + 2 margin, columns + 2 margin)
        Heights of what hides, on the raster's grid and some cells around it [m].
    eyes : ndarray of float32, the same shape
        Ground from which one looks [m]; the same array where there is no surface model.
    margin : int
        Cells around the raster: 0, or PAD at least.
    """

    heights: NDArray[np.float32]
    eyes: NDArray[np.float32]
    margin: int

    @classmethod
    def of(cls, elevation: Elevation) -> Obstacles:
        """The raster's own ground alone."""
        return cls(elevation.heights, elevation.heights, 0)


def sweep(
    elevation: Elevation,
    frame: Frame,
    azimuth_index: int,
    refraction: float,
    far: FarHorizon,
    obstacles: Obstacles | None = None,
) -> None:
    """Fill one azimuth of the far horizon.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    frame : Frame
        Its place on the Earth.
    azimuth_index : int
        Which of the azimuths of `far`.
    refraction : float
        Coefficient k; 0 for none.
    far : FarHorizon
        Changed in place.
    obstacles : Obstacles, optional
        What hides the sun; by default the ground itself.

    Notes
    -----
    After Dozier, Bruno and Downey (1981), doi:10.1016/0098-3004(81)90026-2; the terms of
    curvature and the lattice are terrasol's own (docs/method.md).
    """
    azimuth = 360.0 * azimuth_index / far.height.shape[0]
    obstacles = obstacles or Obstacles.of(elevation)
    rows, columns = zone_edges(frame)
    for top, bottom in pairwise(rows):
        for left, right in pairwise(columns):
            ray = frame.index_direction((top + bottom) / 2, (left + right) / 2, azimuth)
            jacobian = frame.jacobian_at((top + bottom) / 2, (left + right) / 2)
            spans = far.block(top, left, (bottom - top, right - left))
            layers = [part[azimuth_index] for part in (far.height, far.away, far.across_void)]
            _sweep_zone(obstacles, ray, jacobian, refraction, far.datum, spans, layers)


def _sweep_zone(obstacles, ray, jacobian, refraction, datum, spans, layers) -> None:
    """Sweep one azimuth over one zone, its nodes given by `spans`."""
    heights, margin = obstacles.heights, obstacles.margin
    eyes = heights[:0] if obstacles.eyes is heights else obstacles.eyes
    width = heights.shape[1]
    major = 0 if abs(ray[0]) > abs(ray[1]) else 1
    length, breadth = heights.shape if major == 1 else heights.shape[::-1]
    stride, across = (width, 1) if major == 1 else (1, width)
    nodes, side = spans if major == 1 else spans[::-1]
    step = 1.0 / abs(ray[major])
    side_length = float(np.hypot(*jacobian[:, 1 - major]))
    gap = int(np.clip(NODE_STEP * step / side_length + 1e-3, 1, NODE_STEP))
    # The line starts at its far end, where the ray points, and comes towards the eye.
    if ray[major] > 0:
        far_end, along = (length - 1) * stride, -stride
        first_query = length - 1 - (nodes.stop - 1) * NODE_STEP - margin
    else:
        far_end, along = 0, stride
        first_query = nodes.start * NODE_STEP + margin
    found = [np.ascontiguousarray(_turned(layer[spans], major, ray)) for layer in layers]
    far_field(
        heights.reshape(-1), eyes.reshape(-1), far_end, along, across, length, breadth,
        -ray[1 - major] * step, step, half_curve(refraction), FAR_FROM, gap, first_query,
        side.start * NODE_STEP + margin, NODE_STEP, datum, *found,
    )  # fmt: skip
    for layer, values in zip(layers, found, strict=True):
        _turned(layer[spans], major, ray)[...] = values


def _turned(layer, major, ray):
    """View a node layer with queries as rows, in the order the line meets them."""
    view = layer if major == 1 else layer.T
    return view[::-1] if ray[major] > 0 else view


def horizon_strip(
    hiding: NDArray[np.float32],
    padded: NDArray[np.float32],
    rows: range,
    steps: tuple[NDArray[np.int64], NDArray[np.float32]],
    far: tuple[NDArray[np.float32], NDArray[np.float32]],
    lift: float,
    refraction: float,
    out: NDArray[np.float32],
) -> None:
    """Tangent of the horizon, not below 0, for some rows of a block.

    Parameters
    ----------
    hiding : ndarray of float32
        Heights of what hides the sun in and around the block, with PAD cells around [m].
    padded : ndarray of float32
        The block's ground, from which one looks, with PAD cells around [m].
    rows : range
        Rows of the block.
    steps : tuple of ndarray
        From `near_steps`.
    far : tuple of ndarray of float32
        Height and distance on the block's nodes.
    lift : float
        What to add to `padded` to get heights above the datum of `far` [m].
    refraction : float
        Coefficient k.
    out : ndarray of float32, shape (azimuths, rows, columns)
        Filled.
    """
    near_field(hiding, padded, PAD, rows.start, rows.step, *steps, out)
    raise_horizon(padded, rows, far, lift, refraction, out)


def raise_horizon(
    padded: NDArray[np.float32],
    rows: range,
    far: tuple[NDArray[np.float32], NDArray[np.float32]],
    lift: float,
    refraction: float,
    out: NDArray[np.float32],
) -> None:
    """Raise some rows' horizon to what stands at a lattice of nodes' bounding points.

    Parameters as those of `horizon_strip`; `out` holds a horizon and is changed.
    """
    bend = half_curve(refraction)
    merge_far(padded, PAD, rows.start, rows.step, NODE_STEP, *far, lift, bend, out)
