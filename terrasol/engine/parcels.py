"""Parcels surveyed: their ground, light and warmth, ranked, and told at coarser cell sizes."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from functools import partial
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import HECTARE
from terrasol.engine.job import NO_SCENE, plan_terrain
from terrasol.engine.light_words import assumed_note, sky_note
from terrasol.engine.outputs import shade_doubts, shade_words
from terrasol.engine.parcel_cells import Piece, SceneOf, pieces_of
from terrasol.engine.parcel_errors import Doubt, doubts_of
from terrasol.engine.parcel_figures import (
    LAPSE_EFFECT,
    Asked,
    Figure,
    Level,
    Warmth,
    figures_of,
    patches_of,
)
from terrasol.engine.parcel_light import levels_of, own_light
from terrasol.engine.parcel_rows import Rows, RowSettings, row_figures, rows_of
from terrasol.engine.parcel_words import read_score
from terrasol.engine.plan import Block, Progress
from terrasol.engine.uncertainty import doubts_of_error
from terrasol.engine.windows import collect
from terrasol.errors import SettingError
from terrasol.files.overlaps import overlap_doubts
from terrasol.files.vectors import Polygons
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame, make_frame
from terrasol.ground.grain import coarsened
from terrasol.ground.uncertainty import DemError
from terrasol.light.hours import HoursSettings
from terrasol.light.settings import LightSettings
from terrasol.practice.ranking import Ranking, Score, parse_score, rank
from terrasol.practice.rules import Patches
from terrasol.words import area_words, listed

COARSER: Final = (2, 4)
"""Cells joined along a side for the two coarser looks at the same ground (judgement)."""

FEW_CELLS: Final = 10.0
"""Cells below which a parcel's figures are doubted: a slope takes in the eight cells around, so
that most of what it says is of the ground outside (judgement, no source)."""

MOST_NAMED: Final = 8
"""Parcels that a warning names."""

LEAST_UNKNOWN: Final = 0.01
"""Share of a parcel's area on which slope or rule may be unknown without a warning (judgement, no
source)."""

LARGE_EFFECT: Final = 100.0
"""Degree-days that 1 K km-1 of lapse rate may move without a warning: a third of a class of
Winkler's (judgement, no source)."""

Look = tuple[float, list[Piece | None]]
"""A cell size [m], and the parcels' cells of that size."""

HORIZON_AZIMUTHS: Final = 256
"""Azimuths of the horizon that a sheet shows."""


@dataclass(frozen=True)
class ParcelSettings:
    """What is to be found out of parcels.

    Parameters
    ----------
    light : LightSettings
        What light: per area of slope, in MJ m-2.
    hours : HoursSettings
        Which hours of sun.
    asked : Asked
        How to tell of it.
    score : str, optional
        A weighted sum of figures that ranks the parcels; see `parse_score`.
    coarser : tuple of int
        How many cells are joined along a side for each coarser look.
    rows : RowSettings, optional
        Vine rows, for the direction in which to plant them.
    error : DemError, optional
        Of the heights, for standard errors.
    station : str
        Name of the station whose sky it is, if any.

    Raises
    ------
    SettingError
        Another unit or basis, a factor under 2, a score that speaks of what no parcel has.
    """

    light: LightSettings
    hours: HoursSettings
    asked: Asked
    score: str | None = None
    coarser: tuple[int, ...] = COARSER
    rows: RowSettings | None = None
    error: DemError | None = None
    station: str = ""

    @property
    def sky_words(self) -> str:
        """Which sky the light is of, and what air and ground were taken for."""
        return f"{sky_note(self.light, self.station)} {assumed_note(self.light)}"

    def __post_init__(self) -> None:
        """Refuse what makes no sense."""
        if self.light.unit != "MJ m-2" or self.light.basis != "slope":
            raise SettingError("parcels are told in MJ m-2 per area of slope")
        for factor in self.coarser:
            if factor < 2:
                raise SettingError(f"cells are joined 2 by 2 at least; got {factor}")
        if self.score is not None:
            days, rows = len(self.hours.days), self.rows is not None
            read_score(self.score, self.asked, days=days, rows=rows)


@dataclass(frozen=True, eq=False)
class Parcel:
    """All that is found out of one parcel.

    Parameters
    ----------
    name : str
        Unique.
    outline : shapely geometry
        In the ground's CRS.
    piece : Piece
        Its cells.
    level : Level
        Open level ground beside it.
    figures : list of Figure
        Its numbers.
    coarser : list of (float, list of Figure)
        Cell size [m] and numbers at each coarser look; no numbers where it has no cell.
    horizon : ndarray, shape (azimuths,)
        Of the cell nearest its middle [degrees], north first, clockwise.
    patches : Patches, optional
        Where it meets the rule.
    rows : Rows, optional
        What vine rows of every direction would get.
    doubts : dict of Doubt
        What the error of the heights leaves open, by figure; empty if none was stated.
    given : dict
        What the parcels' file says of it, by field.
    """

    name: str
    outline: Any
    piece: Piece
    level: Level
    figures: list[Figure]
    coarser: list[tuple[float, list[Figure]]]
    horizon: NDArray[np.float64]
    patches: Patches | None = None
    rows: Rows | None = None
    doubts: dict[str, Doubt] = field(default_factory=dict)
    given: dict[str, Any] = field(default_factory=dict)

    @property
    def numbers(self) -> dict[str, float]:
        """Its figures that are numbers, by name."""
        return numbers_of(self.figures)


@dataclass(frozen=True, eq=False)
class Survey:
    """All parcels.

    Parameters
    ----------
    parcels : list of Parcel
        In the order of the file, those outside the raster left out.
    settings : ParcelSettings
        What was asked.
    cell_size : float
        Of the raster [m].
    ranking : Ranking, optional
        By the score, of `parcels` in their order.
    score : Score, optional
        The score.
    warnings : list of str
        What a careful reader should know.
    shade : str
        What the horizon is made of, in a sentence.
    error_doubts : tuple of str
        Of the warnings those on the stated error of the heights.
    """

    parcels: list[Parcel]
    settings: ParcelSettings
    cell_size: float
    ranking: Ranking | None = None
    score: Score | None = None
    warnings: list[str] = field(default_factory=list)
    shade: str = ""
    error_doubts: tuple[str, ...] = ()

    @property
    def order(self) -> list[Parcel]:
        """From the best to the last, or as in the file."""
        if self.ranking is None:
            return self.parcels
        return [self.parcels[k] for k in self.ranking.order]


def numbers_of(figures: Sequence[Figure]) -> dict[str, float]:
    """Figures that are numbers, by name."""
    return {f.name: f.value for f in figures if not isinstance(f.value, str)}


def survey(
    elevation: Elevation,
    polygons: Polygons,
    settings: ParcelSettings,
    scene_of: SceneOf = lambda elevation, frame: NO_SCENE,
    threads: int | None = None,
    progress: Progress | None = None,
) -> Survey:
    """Find out all of some parcels.

    Parameters
    ----------
    elevation : Elevation
        The ground; all of it counts as horizon.
    polygons : Polygons
        The parcels, in its CRS.
    settings : ParcelSettings
    scene_of : callable
        What stands beyond and above a ground, given it and its frame.
    threads : int, optional
        Default: as many as there are cores to use.
    progress : callable, optional
        Told the share done and the stage.

    Returns
    -------
    Survey

    Raises
    ------
    SettingError
        Cells that cannot be joined, or a DEM error that the raster is too small for.
    InputError
        Parcels outside the raster or on void ground; a raster that cannot be placed.
    """
    told = progress or (lambda share, stage: None)
    scene_of = _once(scene_of)
    part = 1.0 if settings.error is None else 0.3
    looks, levels, notes = _looks(
        elevation, polygons, settings, scene_of, threads, partial(_told_part, told, 0.0, 0.9 * part)
    )
    parcels = _parcels(elevation, polygons, settings, looks, levels, scene_of, threads)
    told(part, "figures")
    scene = scene_of(elevation, make_frame(elevation.shape, elevation.transform, elevation.crs))
    doubts = doubts_of_error(elevation, settings.error)
    warnings = [
        *polygons.warnings, *overlap_doubts(polygons), *notes, *shade_doubts(scene),
        *doubts, *_doubts_of_voids(parcels),
        *_doubts_of_size(parcels), *_doubts_of_lapse(parcels), *_doubts_of_rule(parcels),
    ]  # fmt: skip
    found = _ranked(parcels, settings, looks[0][0], warnings)
    found = replace(found, shade=shade_words(scene), error_doubts=doubts)
    if settings.error is not None:
        found = _doubted(
            found, elevation, settings.error, scene_of, threads,
            lambda share: told(part + share * (1.0 - part), "error of the heights"),
        )  # fmt: skip
    told(1.0, "figures")
    return found


def _looks(
    elevation: Elevation,
    polygons: Polygons,
    settings: ParcelSettings,
    scene_of: SceneOf,
    threads: int | None,
    told: Progress,
) -> tuple[list[Look], list[Level | None], tuple[str, ...]]:
    """The cells of the parcels at each cell size, level ground beside them, and warnings."""
    factors = (1, *settings.coarser)
    work = np.cumsum([0.0, *(1.0 / factor**2 for factor in factors)])
    work /= work[-1]
    looks: list[Look] = []
    warnings: tuple[str, ...] = ()
    levels: list[Level | None] = []
    for k, factor in enumerate(factors):
        ground = coarsened(elevation, factor)
        pieces, notes = pieces_of(
            ground, polygons, settings.light.coarsened(factor), settings.hours, scene_of, threads,
            partial(_told_part, told, work[k], work[k + 1]),
        )  # fmt: skip
        _warm(pieces, settings.asked.warmth)
        if factor == 1:
            warnings = notes
            levels = levels_of(pieces, settings.light, settings.hours, threads)
        frame = make_frame(ground.shape, ground.transform, ground.crs)
        looks.append((float(np.sqrt(np.prod(frame.cell_size))), pieces))
    return looks, levels, warnings


def _once(scene_of: SceneOf) -> SceneOf:
    """Make the scene of a grid once: its rasters may be large."""
    made: dict[Any, Scene] = {}

    def scene(elevation: Elevation, frame: Frame) -> Scene:
        grid = elevation.shape, elevation.transform
        if grid not in made:
            made[grid] = scene_of(elevation, frame)
        return made[grid]

    return scene


def _doubts_of_size(parcels: Sequence[Parcel]) -> list[str]:
    """Warn of parcels that hold few cells."""
    few = []
    for parcel in parcels:
        area, whole = parcel.piece.area, parcel.piece.area.max()
        if 0.0 < area.sum() < FEW_CELLS * whole:
            few.append(f"'{parcel.name}' ({area.sum() / whole:.1f})")
    if not few:
        return []
    return [
        f"few cells lie in {listed(few, MOST_NAMED)}: their slopes and classes are those of the"
        " ground around as much as their own; take a finer model"
    ]


def _doubts_of_voids(parcels: Sequence[Parcel]) -> list[str]:
    """Warn of parcels with ground whose slope is unknown."""
    void = []
    for parcel in parcels:
        area = float(parcel.piece.area.sum())
        share = 1.0 - float(parcel.piece.weights.sum()) / area if area else 0.0
        if share >= LEAST_UNKNOWN:
            void.append(f"{100.0 * share:.0f} % of '{parcel.name}'")
    if not void:
        return []
    return [
        f"{listed(void, MOST_NAMED)} is unknown (void ground), and in no figure: fill voids with"
        " --fill-voids, or give a complete model"
    ]


def _doubts_of_rule(parcels: Sequence[Parcel]) -> list[str]:
    """Warn of ground on which nobody knows whether it meets the rule."""
    unknown = [
        f"'{p.name}' ({area_words(area)})"
        for p in parcels
        if (area := p.numbers.get("rule_unknown_ha_map", 0.0))
        >= LEAST_UNKNOWN * p.piece.area.sum() / HECTARE
        and area > 0.0
    ]
    if not unknown:
        return []
    return [
        f"the rule is unknown on ground of {listed(unknown, MOST_NAMED)}, which is not counted:"
        " a word of the rule is unknown there, or it divides by zero"
    ]


def _doubts_of_lapse(parcels: Sequence[Parcel]) -> list[str]:
    """Warn of degree-days that hang on the lapse rate more than on the station."""
    effects = [abs(parcel.numbers.get(LAPSE_EFFECT, 0.0)) for parcel in parcels]
    most = float(np.nanmax(effects)) if np.isfinite(effects).any() else 0.0
    if most <= LARGE_EFFECT:
        return []
    return [
        f"the station stands so far above or below the parcels that 1 K/km of lapse rate moves"
        f" their degree-days by up to {most:.0f}: take a nearer station, or a measured lapse rate"
    ]


def _warm(pieces: Sequence[Piece | None], warmth: Warmth | None) -> None:
    """Add degree-days to the layers of pieces."""
    for piece in pieces if warmth is not None else ():
        if piece is not None:
            assert warmth is not None
            piece.layers.update(warmth.layers(piece.heights, piece.latitude))


def _told_part(told: Progress, first: float, last: float, share: float, stage: str) -> None:
    """Tell the progress of a part of the whole."""
    told(first + share * (last - first), stage)


def _doubted(
    found: Survey,
    elevation: Elevation,
    error: DemError,
    scene_of: SceneOf,
    threads: int | None,
    told: Callable[[float], None],
) -> Survey:
    """Add standard errors to the parcels of a survey."""
    settings, parcels = found.settings, found.parcels
    doubts = doubts_of(
        elevation,
        [parcel.piece for parcel in parcels],
        [parcel.level for parcel in parcels],
        [parcel.numbers for parcel in parcels],
        settings.light,
        settings.hours,
        settings.asked,
        error,
        score=found.score,
        scene_of=scene_of,
        threads=threads,
        told=told,
    )
    parcels = [replace(p, doubts=own) for p, own in zip(parcels, doubts, strict=True)]
    return replace(found, parcels=parcels)


def _parcels(
    elevation: Elevation,
    polygons: Polygons,
    settings: ParcelSettings,
    looks: list[Look],
    levels: list[Level | None],
    scene_of: SceneOf,
    threads: int | None,
) -> list[Parcel]:
    """The parcels on the raster, with their horizons."""
    fine = [(k, piece) for k, piece in enumerate(looks[0][1]) if piece is not None]
    horizons = _horizons(elevation, [piece for _, piece in fine], settings, scene_of, threads)
    parcels = []
    for (k, piece), horizon in zip(fine, horizons, strict=True):
        level = levels[k]
        assert level is not None
        coarse = [(size, _figures(each[k], level, settings.asked)) for size, each in looks[1:]]
        parcel = _parcel(piece, polygons.geometries[k], level, coarse, horizon, settings)
        parcels.append(replace(parcel, given=polygons.given(k)))
    return parcels


def _parcel(
    piece: Piece,
    outline: Any,
    level: Level,
    coarser: list[tuple[float, list[Figure]]],
    horizon: NDArray[np.float64],
    settings: ParcelSettings,
) -> Parcel:
    """Put together what is known of a parcel."""
    asked = settings.asked
    figures, rows = figures_of(piece, level, asked), None
    if settings.rows is not None:
        light = own_light(piece, settings.light)
        if light is not None:
            rows = rows_of(piece, horizon, settings.rows, light, asked)
        figures += row_figures(rows, asked)
    patches = patches_of(piece, level, asked)[0] if asked.rule else None
    return Parcel(piece.name, outline, piece, level, figures, coarser, horizon, patches, rows)


def _figures(piece: Piece | None, level: Level, asked: Asked) -> list[Figure]:
    """Numbers of a coarser look."""
    return [] if piece is None else figures_of(piece, level, asked)


def _ranked(
    parcels: list[Parcel], settings: ParcelSettings, cell_size: float, warnings: list[str]
) -> Survey:
    """Order the parcels, if there is a score."""
    if settings.score is None:
        return Survey(parcels, settings, cell_size, warnings=warnings)
    columns = {name: np.array([p.numbers[name] for p in parcels]) for name in parcels[0].numbers}
    score = parse_score(settings.score, columns)
    ranking = rank(score, columns)
    unknown = [f"'{p.name}'" for p, s in zip(parcels, ranking.total, strict=True) if np.isnan(s)]
    if unknown:
        warnings.append(
            f"the score of {listed(unknown, MOST_NAMED)} is unknown, so it has no rank: a column"
            " of it is unknown there, or it divides by zero"
        )
    return Survey(parcels, settings, cell_size, ranking, score, warnings)


def middle_cell(piece: Piece) -> tuple[int, int]:
    """The cell of the window nearest the parcel's middle: whole, if it has a whole one."""
    weights = piece.weights if piece.known.any() else piece.area
    rows, columns = np.nonzero(weights >= 0.999 * weights.max())
    every = np.indices(weights.shape)
    middle = [float(np.average(axis, weights=weights)) for axis in every]
    nearest = int(np.argmin((rows - middle[0]) ** 2 + (columns - middle[1]) ** 2))
    return int(rows[nearest]), int(columns[nearest])


def _horizons(
    elevation: Elevation,
    pieces: Sequence[Piece],
    settings: ParcelSettings,
    scene_of: SceneOf,
    threads: int | None,
) -> list[NDArray[np.float64]]:
    """The horizon of the cell nearest the middle of each parcel."""
    plan = plan_terrain(
        elevation, HORIZON_AZIMUTHS, horizon=True, refraction=settings.light.refraction
    )
    plan.scene = scene_of(elevation, plan.frame)
    windows = []
    for piece in pieces:
        row, column = middle_cell(piece)
        windows.append(Block(piece.window.row + row, piece.window.column + column, 1, 1))
    found, _ = collect(plan, windows, threads, None, ("horizon",))
    return [each["horizon"][:, 0, 0].astype(np.float64) for each in found]
