"""Areas by class of slope and by direction, percentiles and mean directions of weighted cells.

Every function takes cells as arrays of one shape, and the area [m2] that each cell counts with: a
cell at the rim of a parcel counts with the part that lies inside. Which area that is, of the map
or of the slope, is the caller's choice and belongs into the name of what comes out.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrasol.errors import SettingError

SLOPE_EDGES_PERCENT: Final = (5.0, 10.0, 15.0, 20.0, 30.0)
"""Edges of slope classes for vineyards [percent]. Common practice, no source for the whole: 5 to
10 % drains cold air, beyond 15 % machines are in danger (trade pages), from about 20 % terraces
are considered, from 30 % a vineyard counts as steep (CERVIM; Swiss aid for slopes). Laws have
edges of their own."""

FLAT_BELOW_PERCENT: Final = 2.0
"""Ground flatter than this [percent] faces nowhere: a noise of 0.1 m in cells of 5 m tilts level
ground by about 1 % (judgement, no source)."""

SECTORS: Final = ("N", "NE", "E", "SE", "S", "SW", "W", "NW")
"""Sectors of aspect, 45 degrees each, the first centred on true north."""

SECTOR_NAMES: Final = (
    "north", "north_east", "east", "south_east", "south", "south_west", "west", "north_west",
)  # fmt: skip
"""The same as parts of names of columns: in letters, "se" would read as a standard error."""

LEAST_RESULTANT: Final = 1e-9
"""Below this resultant length directions cancel but for rounding, and have no mean."""


@dataclass(frozen=True, eq=False)
class ClassAreas:
    """Area by class [m2].

    Attributes
    ----------
    edges
        Between the classes, ascending; (n,).
    areas
        Below the first edge, from each edge to below the next, from the last on; (n + 1,).
    void
        Of cells without a value; in no class.
    """

    edges: NDArray[np.float64]
    areas: NDArray[np.float64]
    void: float


@dataclass(frozen=True, eq=False)
class SectorAreas:
    """Area by direction [m2].

    Attributes
    ----------
    areas
        In the order of `SECTORS`; (8,).
    flat, void
        Of cells too flat to face anywhere, and of cells without a slope; in no sector.
    """

    areas: NDArray[np.float64]
    flat: float
    void: float


@dataclass(frozen=True)
class MeanDirection:
    """Mean of directions as vectors.

    Attributes
    ----------
    direction
        Degrees clockwise from true north; NaN where nothing faces anywhere or all cancels.
    resultant
        Length of the mean unit vector: 1 if all face one way, 0 if they cancel; NaN if none face
        anywhere.
    area, flat, void
        That went into the mean, that is too flat, that is without a slope [m2].
    """

    direction: float
    resultant: float
    area: float
    flat: float
    void: float


def slope_percent(slope: ArrayLike) -> NDArray[np.float64]:
    """Slope in percent, rise over run times 100, of a slope in degrees.

    Examples
    --------
    >>> slope_percent([0.0, 45.0]).round(9).tolist()
    [0.0, 100.0]
    """
    return 100.0 * np.tan(np.radians(slope))


def surface_area(map_area: ArrayLike, slope: ArrayLike) -> NDArray[np.float64]:
    """Area of the ground's own surface: map area over the cosine of the slope [degree].

    Examples
    --------
    >>> surface_area(100.0, 60.0).round(9).tolist()
    200.0
    """
    return np.asarray(map_area) / np.cos(np.radians(slope))


def area_by_class(values: ArrayLike, edges: Sequence[float], area: ArrayLike) -> ClassAreas:
    """Sum the area of cells by class of their value.

    Parameters
    ----------
    values : array_like
        NaN where void.
    edges : sequence of float
        Ascending, in the values' unit. A value on an edge belongs to the class above.
    area : array_like
        Of each cell [m2], broadcast against `values`.

    Returns
    -------
    ClassAreas

    Raises
    ------
    SettingError
        Edges that do not ascend, are not numbers, or are none.
    """
    limits = np.asarray(edges, np.float64)
    if limits.ndim != 1 or limits.size == 0 or not np.isfinite(limits).all():
        raise SettingError("edges of classes must be numbers, one at least")
    if np.any(np.diff(limits) <= 0.0):
        raise SettingError(f"edges of classes must ascend, not {_listed(limits)}")
    value, weight = _cells(values, area)
    known = ~np.isnan(value)
    place = np.searchsorted(limits, value[known], side="right")
    areas = np.bincount(place, weights=weight[known], minlength=limits.size + 1)
    return ClassAreas(limits, areas.astype(np.float64), float(weight[~known].sum()))


def class_names(edges: Sequence[float], unit: str) -> tuple[str, ...]:
    """Names of the classes between edges, for tables.

    Examples
    --------
    >>> class_names([5, 12.5], "%")
    ('below 5 %', '5 to 12.5 %', '12.5 % and more')
    """
    between = (f"{low:g} to {high:g} {unit}" for low, high in pairwise(edges))
    return (f"below {edges[0]:g} {unit}", *between, f"{edges[-1]:g} {unit} and more")


def area_by_sector(
    aspect: ArrayLike,
    slope: ArrayLike,
    area: ArrayLike,
    *,
    flat_below_percent: float = FLAT_BELOW_PERCENT,
) -> SectorAreas:
    """Sum the area of cells by the sector they face, flat ground apart.

    Parameters
    ----------
    aspect, slope : array_like
        Degrees; slope NaN where void. A slope without an aspect is flat.
    area : array_like
        Of each cell [m2], broadcast against the others.
    flat_below_percent : float
        Slope below which ground faces nowhere [percent].

    Notes
    -----
    Sectors are centred on their directions: north is 337.5 to below 22.5 degrees.
    """
    facing, weight, flat, void = _parted(aspect, slope, area, flat_below_percent)
    sector = _sector(facing)
    areas = np.bincount(sector, weights=weight, minlength=len(SECTORS))
    return SectorAreas(areas.astype(np.float64), flat, void)


def sector_numbers(
    aspect: ArrayLike, slope: ArrayLike, *, flat_below_percent: float = FLAT_BELOW_PERCENT
) -> NDArray[np.int64]:
    """Place in `SECTORS` of each cell's aspect; 8 where flat, -1 where void. See `area_by_sector`.

    Examples
    --------
    >>> sector_numbers([350.0, 181.0, 90.0, 90.0], [20.0, 20.0, 0.5, np.nan]).tolist()
    [0, 4, 8, -1]
    """
    facing, steep = np.asarray(aspect, np.float64), slope_percent(slope)
    flat = np.isnan(facing) | (steep < flat_below_percent)
    found = np.where(flat, len(SECTORS), _sector(np.nan_to_num(facing)))
    return np.where(np.isnan(steep), -1, found)


def _sector(facing: NDArray[np.float64]) -> NDArray[np.int64]:
    """Place of directions in `SECTORS`."""
    return np.floor(np.mod(facing + 22.5, 360.0) / 45.0).astype(np.int64) % len(SECTORS)


def mean_direction(
    aspect: ArrayLike,
    slope: ArrayLike,
    area: ArrayLike,
    *,
    flat_below_percent: float = FLAT_BELOW_PERCENT,
) -> MeanDirection:
    """Circular mean of aspect, weighted by area, flat ground left out and counted.

    Each cell's direction is a unit vector, whatever its slope; the mean's direction is that of
    their weighted sum, the resultant length the sum's length over the sum of weights (Mardia and
    Jupp 2000, Directional Statistics, section 2.2, from memory). Parameters as `area_by_sector`.

    Examples
    --------
    >>> mean = mean_direction([359.0, 1.0], [9.0, 9.0], [1.0, 1.0])
    >>> round(mean.direction, 6) % 360.0, round(mean.resultant, 4)
    (0.0, 0.9998)
    """
    facing, weight, flat, void = _parted(aspect, slope, area, flat_below_percent)
    total = float(weight.sum())
    if total <= 0.0:
        return MeanDirection(np.nan, np.nan, 0.0, flat, void)
    turn = np.radians(facing)
    east = float((weight * np.sin(turn)).sum()) / total
    north = float((weight * np.cos(turn)).sum()) / total
    length = float(np.hypot(east, north))
    direction = np.nan if length < LEAST_RESULTANT else np.degrees(np.arctan2(east, north)) % 360.0
    return MeanDirection(float(direction), length, total, flat, void)


def weighted_mean(values: ArrayLike, weights: ArrayLike) -> float:
    """Mean of the known values, weighted; NaN where nothing is known."""
    value, weight = _cells(values, weights)
    known = ~np.isnan(value)
    total = weight[known].sum()
    return float((value[known] * weight[known]).sum() / total) if total > 0.0 else np.nan


def weighted_percentiles(
    values: ArrayLike, weights: ArrayLike, percents: Sequence[float]
) -> NDArray[np.float64]:
    """Percentiles of the known values, by weight.

    The p-th is the least value v such that cells of value v or less hold p percent of the weight
    or more: a value that occurs, and the same whether a cell is counted whole or in pieces. The
    0th is the least value.

    Parameters
    ----------
    values, weights : array_like
        NaN values are left out; weights are 0 or more.
    percents : sequence of float
        0 to 100.

    Returns
    -------
    ndarray, shape (percents,)
        NaN where nothing is known.

    Raises
    ------
    SettingError
        A percent outside 0 to 100.

    Examples
    --------
    >>> weighted_percentiles([1.0, 2.0, 3.0], [1.0, 1.0, 8.0], [10, 50]).tolist()
    [1.0, 3.0]
    """
    wanted = np.asarray(percents, np.float64)
    if not np.all((wanted >= 0.0) & (wanted <= 100.0)):
        raise SettingError(f"percentiles must lie within 0 to 100, not {_listed(wanted)}")
    value, weight = _cells(values, weights)
    known = ~np.isnan(value) & (weight > 0.0)
    if not known.any():
        return np.full(wanted.shape, np.nan)
    order = np.argsort(value[known], kind="stable")
    reached = np.cumsum(weight[known][order])
    rounding = 1.0 - 1e-12
    place = np.searchsorted(reached, wanted / 100.0 * reached[-1] * rounding, side="left")
    return value[known][order][np.minimum(place, reached.size - 1)]


def _listed(numbers: NDArray[np.float64]) -> str:
    return ", ".join(f"{number:g}" for number in numbers)


def _cells(
    values: ArrayLike, weights: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Values and weights as flat arrays of one length."""
    value, weight = np.broadcast_arrays(
        np.asarray(values, np.float64), np.asarray(weights, np.float64)
    )
    return value.ravel(), weight.ravel()


def _parted(
    aspect: ArrayLike, slope: ArrayLike, area: ArrayLike, flat_below_percent: float
) -> tuple[NDArray[np.float64], NDArray[np.float64], float, float]:
    """Aspect and area of cells that face somewhere, and the areas of flat and void ones."""
    if not flat_below_percent >= 0.0:
        raise SettingError(f"flat below {flat_below_percent:g} % is not a slope of 0 or more")
    facing, steep, weight = (
        array.ravel()
        for array in np.broadcast_arrays(
            np.asarray(aspect, np.float64), slope_percent(slope), np.asarray(area, np.float64)
        )
    )
    void = np.isnan(steep)
    flat = ~void & (np.isnan(facing) | (steep < flat_below_percent))
    faces = ~void & ~flat
    return facing[faces], weight[faces], float(weight[flat].sum()), float(weight[void].sum())
