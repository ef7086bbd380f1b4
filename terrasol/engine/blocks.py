"""One block of a job: everything that is written of it."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.ground_work import BlockGround, Ground
from terrasol.engine.horizon_gap import horizon_gap
from terrasol.engine.plan import Block
from terrasol.ground.elevation import Elevation
from terrasol.ground.horizon import NODE_STEP
from terrasol.ground.surface import slope_and_aspect
from terrasol.light.indexed import MappedTables
from terrasol.light.irradiation import Light, Strip, sky_light, strip_light
from terrasol.light.settings import UNITS
from terrasol.light.surroundings import Surroundings
from terrasol.light.tables import SkyTables

Arrays = dict[str, NDArray[Any]]
Tables = SkyTables | MappedTables

SAMPLE_LATITUDES: Final = 0.05
"""Samples of the terrain around share a sun table over this [degrees], five times as far as the
cells themselves: what they receive is smoothed and dimmed by the albedo before it counts. That
moves what surrounds a place by 0.01 % at worst at 46 degrees north, by 0.1 % in December at 62."""


def with_block(work: Callable[[Block], Arrays], block: Block) -> tuple[Block, Arrays]:
    """What a block's work yields, with the block."""
    return block, work(block)


def block_arrays(
    ground: Ground,
    names: list[str],
    tables: Tables | None,
    surroundings: Surroundings | None,
    block: Block,
) -> Arrays:
    """Everything that is written of one block, by layer name."""
    piece = BlockGround(ground, block)
    slope, aspect = slope_and_aspect(piece.normal)
    arrays: Arrays = {"slope": slope[None], "aspect": aspect[None]}
    gathered: dict[str, list[NDArray[np.float32]]] = {
        name: [] for name in names if name not in ("slope", "aspect", "status")
    }
    for rows in piece.pieces():
        strip = piece.strip(rows)
        sky = strip.sky()
        gathered["sky_view"].append(sky[0][None])
        if "horizon" in gathered:
            degrees = np.degrees(np.arctan(strip.horizon))
            gathered["horizon"].append(np.where(np.isnan(strip.normal[2]), np.nan, degrees))
        if "horizon_gap" in gathered:
            most = tables.brightest if isinstance(tables, MappedTables) else tables
            gathered["horizon_gap"].append(horizon_gap(piece, strip, rows, most))
        if tables is not None and surroundings is not None:
            place = block.row + rows[0], block.column
            for name, values in _light_arrays(strip, sky, tables, surroundings, place).items():
                if name in gathered:
                    gathered[name].append(values)
    for name, parts in gathered.items():
        arrays[name] = np.concatenate(parts, axis=1)
    if "status" in names:
        arrays["status"] = status_of(ground.elevation, block)[None]
    return arrays


def _light_arrays(
    strip: Strip,
    sky: tuple[NDArray[np.float32], NDArray[np.float32]],
    tables: Tables,
    surroundings: Surroundings,
    place: tuple[int, int],
) -> dict[str, NDArray[np.float32]]:
    """All light of a strip, by the names of the layers it may be written to."""
    light: Light
    if isinstance(tables, MappedTables):
        light = tables.strip_light(strip, sky, surroundings, place)
    else:
        light = strip_light(strip, sky, tables, surroundings, place)
    arrays = {
        "irradiation_year": light.year,
        "irradiation_period": light.year,
        "irradiation_months": light.months,
    }
    for part, values in zip(("beam", "diffuse", "reflected"), light.month_parts, strict=True):
        arrays[f"{part}_months"] = values
    photons = tables.settings.photons
    if photons is not None:
        arrays["photosynthetic_months"] = light.months * photons[:, None, None].astype(np.float32)
    return arrays


def status_of(elevation: Elevation, block: Block) -> NDArray[np.uint8]:
    """Status codes of a block whose voids may have been filled."""
    assert elevation.filled is not None
    status = elevation.filled[block.slices].astype(np.uint8)
    status[np.isnan(elevation.heights[block.slices])] = 2
    return status


def sample_block(
    ground: Ground,
    tables: Tables,
    stride: int,
    block: Block,
    samples: NDArray[np.float32],
) -> None:
    """What every `stride`-th cell of every `stride`-th row receives from the sky itself."""
    piece = BlockGround(ground, block)
    offset = stride // 2
    rows = range((offset - block.row) % stride, block.rows, stride)
    first_column = (offset - block.column) % stride
    if not rows or first_column >= block.columns:
        return
    strip = piece.strip(rows).thin(first_column, stride)
    received = np.empty((samples.shape[0], *strip.heights.shape), np.float32)
    for inside, latitude in _by_table(piece, rows):
        part = slice(inside[0], inside[-1] + 1)
        alone = strip.part(part, latitude)
        if isinstance(tables, MappedTables):
            columns = block.column + np.arange(first_column, block.columns, stride)
            lines = block.row + np.array(inside) * stride + rows[0]
            received[:, part] = tables.sky_light(alone, lines, columns)
        else:
            received[:, part] = sky_light(alone, tables)
    row, column = (block.row + rows[0]) // stride, (block.column + first_column) // stride
    height, width = received.shape[1:]
    samples[:, row : row + height, column : column + width] = received


def _by_table(piece: BlockGround, rows: range) -> Iterable[tuple[list[int], float]]:
    """Which of some rows share a sun table, and its latitude."""
    found: dict[float, list[int]] = {}
    for i, row in enumerate(rows):
        latitude = piece.table_latitude(range(row, row + 1))
        shared = round(latitude / SAMPLE_LATITUDES) * SAMPLE_LATITUDES
        found.setdefault(shared, []).append(i)
    return ((inside, latitude) for latitude, inside in found.items())


def across_void(ground: Ground, known: NDArray[np.bool_]) -> int:
    """Cells with a line of sight that crosses a void, counted by the nearest node."""
    nodes = np.asarray(ground.far.across_void.any(axis=0))
    if not nodes.any():
        return 0
    rows = np.arange(known.shape[0]) // NODE_STEP
    columns = np.arange(known.shape[1]) // NODE_STEP
    return int(sum((nodes[row][columns] & known[i]).sum() for i, row in enumerate(rows)))


def level_ground(ground: Ground, tables: Tables) -> float:
    """Irradiation of open level ground at the raster's middle and mean height."""
    value = tables.level(ground.frame.centre[0], ground.far.datum)
    return round(value * UNITS[tables.settings.unit], 2)
