"""Cells of a snow season: where they lie, what they count for, and their snow through a day."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.ground_work import BlockGround, Ground
from terrasol.engine.plan import Block
from terrasol.engine.series_work import BlockWork, Part, SeriesBlock
from terrasol.errors import InputError, SettingError
from terrasol.ground.frame import Frame
from terrasol.ground.surface import slope_and_aspect
from terrasol.kernels.melt import FLOWS, zone_sums
from terrasol.light.series import PARTS, Around, StepSky, patch_light
from terrasol.light.surroundings import Surroundings
from terrasol.practice.classes import SECTORS, sector_numbers
from terrasol.practice.snow import COVERED_FROM, Snow, SnowModel, Weather, snow_day

QUANTITIES: Final = (*FLOWS, "snow_water", "snow_covered")
"""What is summed by zone and day: what moved, what lies at the end, and the covered share."""

LIGHT_OF: Final = {"enhanced": "global", "hock": "beam"}
"""The light that each melt model wants; degree-days want none."""

MOST_BANDS: Final = 100
"""Bands of height that tables and pictures hold (judgement)."""

FACINGS: Final = (*SECTORS, "flat")
"""Sectors of aspect of the zones, level ground last."""


@dataclass(frozen=True, eq=False)
class Zones:
    """How cells are put together: bands of height times sectors of aspect, within an area.

    Parameters
    ----------
    edges : ndarray, shape (bands + 1,)
        Of the bands [m above the sea].
    share : ndarray of float32, shape (rows, columns), optional
        Part of each cell within the area; None for all of the raster.
    name : str
        Of the area.
    """

    edges: NDArray[np.float64]
    share: NDArray[np.float32] | None
    name: str

    @property
    def bands(self) -> int:
        """How many bands."""
        return int(self.edges.size) - 1

    @property
    def count(self) -> int:
        """How many zones: band by band, each with all its sectors."""
        return self.bands * len(FACINGS)

    @classmethod
    def of(
        cls,
        heights: NDArray[np.float32],
        step: float,
        share: NDArray[np.float32] | None,
        name: str,
    ) -> Zones:
        """Bands of a width [m] that hold all the area's known ground.

        Raises
        ------
        InputError
            There is none.
        SettingError
            More than 100 bands.
        """
        known = known_ground(heights, share)
        low, high = float(heights[known].min()), float(heights[known].max())
        first, last = np.floor(low / step), np.floor(high / step) + 1.0
        if not last - first <= MOST_BANDS:
            raise SettingError(
                f"bands of {step:g} m from {low:.0f} to {high:.0f} m are {last - first:.0f}, and"
                f" {MOST_BANDS} are the most: make them wider"
            )
        return cls(step * np.arange(first, last + 1.0), share, name)

    def place(
        self, heights: NDArray[np.floating], normal: NDArray[np.float32]
    ) -> NDArray[np.int32]:
        """Zone of each cell; -1 where void or in no band."""
        band = np.searchsorted(self.edges, np.nan_to_num(heights), "right") - 1
        slope, aspect = slope_and_aspect(np.ascontiguousarray(normal))
        sector = sector_numbers(aspect, slope)
        inside = np.isfinite(heights) & (band >= 0) & (band < self.bands) & (sector >= 0)
        return np.where(inside, band * len(FACINGS) + sector, -1).astype(np.int32)


def known_ground(
    heights: NDArray[np.float32], share: NDArray[np.float32] | None
) -> NDArray[np.bool_]:
    """Cells of an area with a height.

    Raises
    ------
    InputError
        There are none.
    """
    known = np.isfinite(heights) if share is None else np.isfinite(heights) & (share > 0.0)
    if not known.any():
        raise InputError("the area holds no known ground of the elevation model")
    return known


def map_area(frame: Frame, rows: range, columns: range) -> NDArray[np.float64]:
    """Map area of a rectangle of cells [m2], bilinear between its corners."""
    corners = [
        [abs(float(np.linalg.det(frame.jacobian_at(r, c)))) for c in (columns[0], columns[-1])]
        for r in (rows[0], rows[-1])
    ]
    down, across = np.linspace(0.0, 1.0, len(rows))[:, None], np.linspace(0.0, 1.0, len(columns))
    left, right = (corners[0][i] + down * (corners[1][i] - corners[0][i]) for i in (0, 1))
    return left + across * (right - left)


@dataclass(eq=False)
class Season:
    """The snow of some cells and what it went through since it first fell.

    Parameters
    ----------
    snows : list of Snow
        That of the model, then those of its spread.
    total : ndarray of float64, shape (cells, 6)
        What moved since bare ground [mm]; see `terrasol.kernels.melt.FLOWS`.
    peak : ndarray of float32, shape (cells,)
        Greatest snow water at the end of a day [mm].
    peak_day, bare_day : ndarray of int32, shape (cells,)
        Days since the season's first: of the peak, and the first one that ended bare after it; -1
        for none.
    """

    snows: list[Snow]
    total: NDArray[np.float64]
    peak: NDArray[np.float32]
    peak_day: NDArray[np.int32]
    bare_day: NDArray[np.int32]

    @classmethod
    def none(cls, cells: int, models: Sequence[SnowModel]) -> Season:
        """Before the first snow."""
        return cls(
            [Snow.none(cells, model) for model in models],
            np.zeros((cells, len(FLOWS))),
            np.zeros(cells, np.float32),
            np.full(cells, -1, np.int32),
            np.full(cells, -1, np.int32),
        )

    def note(self, day: int) -> None:
        """Look for a new peak, and for bare ground after it, at the end of a day."""
        water = self.snows[0].water.astype(np.float32)
        higher = water > self.peak
        self.peak[higher] = water[higher]
        self.peak_day[higher] = day
        self.bare_day[higher] = -1
        bare = (water < COVERED_FROM) & (self.peak >= COVERED_FROM) & (self.bare_day < 0)
        self.bare_day[bare] = day


@dataclass(eq=False)
class Found:
    """What a day brought to some cells.

    Parameters
    ----------
    zones : ndarray, shape (zones, 8)
        Sums of `QUANTITIES`, each times map area within the area [mm m2].
    members : ndarray, shape (members, 3)
        Melt, runoff input and snow water of the spread's members, likewise, over all zones.
    """

    zones: NDArray[np.float64]
    members: NDArray[np.float64]


@dataclass(eq=False)
class Cells:
    """Cells of a block that share a sun, with their snow.

    Parameters
    ----------
    rows, columns : range
        In the raster.
    above, steep : ndarray of float32, shape (cells,)
        Height above the station [m], area of slope by area of map.
    zone : ndarray of int32
    weight : ndarray of float64
        Map area within the area [m2].
    season : Season
    ground : SeriesBlock, optional
        With horizons, where light counts.
    part : tuple of slices
        Its place in the block.
    view : ndarray of float32, shape (2, rows, columns), optional
        Sky view and open band; see `Patch.sky`.
    """

    rows: range
    columns: range
    above: NDArray[np.float32]
    steep: NDArray[np.float32]
    zone: NDArray[np.int32]
    weight: NDArray[np.float64]
    season: Season
    part: Part
    ground: SeriesBlock | None = None
    view: NDArray[np.float32] | None = None
    nothing: NDArray[np.float32] = field(default_factory=lambda: np.zeros((24, 1), np.float32))

    @property
    def place(self) -> tuple[slice, slice]:
        """Where they lie in the raster."""
        return (
            slice(self.rows.start, self.rows.stop),
            slice(self.columns.start, self.columns.stop),
        )

    def on_map(self, values: NDArray[Any]) -> NDArray[np.floating]:
        """Values of the cells as rows and columns, NaN where void."""
        shown = np.where(np.isnan(self.steep), np.nan, values)
        return shown.reshape(len(self.rows), len(self.columns))

    def look(self) -> None:
        """Find out how much sky each cell sees, once for all days."""
        assert self.ground is not None
        self.view = np.empty((2, len(self.rows), len(self.columns)), np.float32)
        for patch, rows, _ in self.ground.patches(self.part):
            self.view[:, self._slice(rows)] = patch.sky()

    def _slice(self, rows: range) -> slice:
        first = self.part[0].start
        return slice(rows.start - first, rows.stop - first)

    def day(
        self,
        models: Sequence[SnowModel],
        weather: Weather,
        day: int,
        lit: tuple[StepSky, Surroundings] | None,
        zones: int,
    ) -> Found:
        """Carry the snow through a day of the weather."""
        found = Found(np.zeros((zones, len(QUANTITIES))), np.zeros((len(models) - 1, 3)))
        for cells, light in self._light(models[0], lit, bool(weather.precipitation[day].any())):
            above, steep, weight = self.above[cells], self.steep[cells], self.weight[cells]
            snows = [snow.part(cells) for snow in self.season.snows]
            for k, (model, snow) in enumerate(zip(models, snows, strict=True)):
                moved = snow_day(model, weather, day, light, above, steep, snow)
                water = snow.water
                if k == 0:
                    self.season.total[cells] += moved
                    covered = water >= COVERED_FROM
                    values = np.column_stack([moved, water, covered])
                    zone_sums(self.zone[cells], weight, values, found.zones)
                else:
                    runoff = moved[:, FLOWS.index("outflow")]
                    runoff = runoff + moved[:, FLOWS.index("rain_on_ground")]
                    melt = moved[:, FLOWS.index("melt")]
                    found.members[k - 1] += weight @ np.column_stack([melt, runoff, water])
        return found

    def _light(
        self, model: SnowModel, lit: tuple[StepSky, Surroundings] | None, wet: bool
    ) -> Iterator[tuple[slice, NDArray[np.float32]]]:
        """Runs of cells, and the day's light on them; dark where no snow can be, or none counts."""
        if lit is None or self.ground is None or self.view is None:
            yield slice(0, self.steep.size), self.nothing
            return
        sky, around = lit
        index = PARTS.index(LIGHT_OF[model.melt])
        for patch, rows, columns in self.ground.patches(self.part):
            here = self._slice(rows)
            run = slice(here.start * len(columns), here.stop * len(columns))
            if not wet and not any(snow.ice[run].any() for snow in self.season.snows):
                yield run, np.zeros((24, patch.cells), np.float32)
                continue
            place = Around.of(
                around,
                self.rows[here],
                range(self.columns.start, self.columns.start + len(columns)),
                around.albedo,
            )
            view = np.ascontiguousarray(self.view[:, here])
            light = patch_light(patch, view, sky, place, "slope")[index]
            yield run, light.reshape(light.shape[0], -1)


def cells_of(
    block: Block,
    bare: Ground,
    work: BlockWork | None,
    zones: Zones,
    station_height: float,
    models: Sequence[SnowModel],
) -> list[Cells]:
    """Cells of a block, before the first snow; nothing where all is void.

    Parameters
    ----------
    block : Block
    bare : Ground
        For heights and normals.
    work : BlockWork, optional
        With horizons, where light counts.
    zones : Zones
    station_height : float
        [m].
    models : sequence of SnowModel
        The model, then its spread.
    """
    piece = BlockGround(bare, block)
    if piece.empty:
        return []
    ground = None if work is None else work.ground(block)
    whole: Part = slice(0, block.rows), slice(0, block.columns)
    parts = [whole] if ground is None else list(ground.parts())
    heights = bare.elevation.heights[block.slices].astype(np.float64)
    found = []
    for part in parts:
        rows = range(block.row + part[0].start, block.row + part[0].stop)
        columns = range(block.column + part[1].start, block.column + part[1].stop)
        normal, height = piece.normal[:, *part], heights[part]
        weight = map_area(bare.frame, rows, columns)
        if zones.share is not None:
            weight = weight * zones.share[np.ix_(rows, columns)]
        up = normal[2].reshape(-1)
        cells = Cells(
            rows, columns,
            np.nan_to_num(height - station_height).reshape(-1).astype(np.float32),
            (1.0 / np.where(np.isfinite(height.reshape(-1)), up, np.nan)).astype(np.float32),
            zones.place(height, normal).reshape(-1),
            weight.reshape(-1),
            Season.none(up.size, models),
            part, ground,
        )  # fmt: skip
        if ground is not None:
            cells.look()
        found.append(cells)
    return found
