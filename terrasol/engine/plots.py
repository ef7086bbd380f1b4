"""Predictors of light and heat for plots: at the point, within circles, at several cell sizes.

The work goes by blocks, as for maps, but only blocks with cells that a plot asks for are done,
and of these only such cells are kept, so memory goes with the plots and not with the raster.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import ENERGY_UNITS, PHOTONS_PER_JOULE, REFRACTION_COEFFICIENT
from terrasol.engine.datasets import clear_air, scene_of
from terrasol.engine.hours import plan_hours
from terrasol.engine.job import NO_SCENE, Plan, plan_irradiation, plan_terrain
from terrasol.engine.outputs import shade_doubts
from terrasol.engine.plan import Progress
from terrasol.engine.plot_doubts import plot_doubts
from terrasol.engine.plot_grain import Grain
from terrasol.engine.plot_places import PLACED, Located, locate
from terrasol.engine.plot_settings import RADII, PlotSettings, hours_azimuths
from terrasol.engine.plot_table import Assembly, PlotTable, grain_tags
from terrasol.engine.predictors import (
    GROUPS,
    ground_predictors,
    hours_predictors,
    light_predictors,
)
from terrasol.files.points import Points
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import make_frame
from terrasol.ground.grain import coarsened
from terrasol.ground.horizon import BLOCK
from terrasol.light.days import parse_clock, parse_days
from terrasol.light.hours import HoursSettings
from terrasol.light.settings import LightSettings, twelve
from terrasol.practice.season import growing_season
from terrasol.sky.clear import Air
from terrasol.sky.irradiance import Sky
from terrasol.sky.period import Period, parse_period

GATHERED_BYTES = 40.0
"""A plot and column of one cell size: five numbers are kept of what its cells say."""


def grain_sizes(elevation: Elevation, factors: Sequence[int]) -> tuple[float, ...]:
    """Mean true side of the cells [m], whole cells joined by each factor."""
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    side = float(np.sqrt(np.prod(frame.cell_size)))
    return tuple(side * factor for factor in factors)


def plot_table(
    elevation: Elevation,
    points: Points,
    settings: PlotSettings,
    scenes: Sequence[Scene] | None = None,
    threads: int | None = None,
    progress: Progress | None = None,
) -> PlotTable:
    """Tell the predictors of plots.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    points : Points
        The plots, in any CRS.
    settings : PlotSettings
        What to tell.
    scenes : sequence of Scene, optional
        What stands beyond and above the ground, one for each cell size (see `coarsened`).
    threads : int, optional
        Default: as many as there are cores to use.
    progress : callable, optional
        Told the share done and the stage.

    Returns
    -------
    PlotTable

    Raises
    ------
    InputError
        No plot lies on known ground, or a raster that cannot be placed on the Earth.
    SettingError
        Circles too wide for the cells, or cells joined to fewer than two rows.
    """
    located = locate(points, elevation)
    latitude = make_frame(elevation.shape, elevation.transform, elevation.crs).centre[0]
    if not settings.season:
        settings = replace(settings, season=growing_season(latitude))
    sizes = grain_sizes(elevation, settings.factors)
    tags = grain_tags(sizes)
    work = sum(factor**-2.0 for factor in settings.factors)
    tell, done = progress or (lambda share, stage: None), 0.0
    table = Assembly(points, located, settings.groups)
    scenes = scenes or [NO_SCENE] * len(sizes)
    for factor, size, tag, scene in zip(settings.factors, sizes, tags, scenes, strict=True):
        part = factor**-2.0 / work
        ground = coarsened(elevation, factor)
        own = replace(settings, light=settings.light.coarsened(factor))
        grain = Grain(ground, located, points.error, own, factor, size)

        def move(share: float, stage: str, done: float = done, part: float = part) -> None:
            tell(done + part * share, stage)

        table.add(grain.run(scene, threads, move), size, tag)
        done += part
    finished = table.finished(sizes)
    if settings.shaded:
        finished.warnings.extend(shade_doubts(scenes[0]))
    finished.warnings.extend(plot_doubts(finished, settings.radii))
    return finished


def column_count(points: Points, settings: PlotSettings) -> int:
    """Columns of predictors that the table will have."""
    season = settings.season or growing_season(0.0)
    every = [*ground_predictors(), *light_predictors(settings.light, season)]
    if settings.timed:
        every += hours_predictors(settings.hours, season)
    wanted = [p for p in every if p.group in settings.groups]
    plain = sum(p.plain for p in wanted)
    blocks = 2 + bool(np.isfinite(points.error).any()) + 3 * len(settings.radii)
    aspect = (2 + 2 * len(settings.radii)) * ("aspect" in settings.groups)
    one = blocks * (len(wanted) - plain) + plain + aspect + len(settings.radii)
    return one * len(settings.factors)


def _plans(ground: Elevation, settings: PlotSettings) -> list[Plan]:
    """The work on a ground, for what it costs."""
    light = settings.light
    lit = plan_irradiation(ground, light) if settings.lit else plan_terrain(ground, light.azimuths)
    return [lit, *([plan_hours(ground, settings.hours)] if settings.timed else [])]


def forecast_bytes(elevation: Elevation, points: Points, settings: PlotSettings) -> int:
    """Peak memory to expect: of the maps' blocks, of what is gathered, and of the table."""
    plans = _plans(elevation, settings)
    columns = column_count(points, settings)
    gathered = GATHERED_BYTES * len(points) * columns / len(settings.factors)
    return int(max(plan.memory_bytes for plan in plans) + gathered + 24.0 * len(points) * columns)


def forecast_seconds(
    elevation: Elevation, located: Located, settings: PlotSettings, threads: int
) -> float:
    """Time to expect, for blocks that hold a plot."""
    found = 0.0
    placed = located.flag == PLACED
    for factor in settings.factors:
        ground = coarsened(elevation, factor)
        corners = {
            (int(r // factor) // BLOCK, int(c // factor) // BLOCK)
            for r, c in zip(located.row[placed], located.column[placed], strict=True)
        }
        share = min(len(corners) * BLOCK**2 / ground.heights.size, 1.0)
        plans = _plans(ground, settings)
        sweep = 0.3 * (1.0 - share)  # far horizons are swept over all of the raster
        found += sum(plan.seconds(threads) * (share + sweep) for plan in plans)
    return found


def plot_predictors(
    elevation: Elevation,
    points: Points,
    period: str | int | Period | None = None,
    air: Air | None = None,
    *,
    season: Sequence[int] | None = None,
    radii: Sequence[float] = RADII,
    factors: Sequence[int] = (1,),
    predictors: Sequence[str] = tuple(GROUPS),
    albedo: float | Sequence[float] = 0.2,
    diffuse: str = "perez",
    azimuths: int = 64,
    step_seconds: float = 60.0,
    unit: str = "MJ m-2",
    basis: str = "slope",
    photons_per_joule: float = PHOTONS_PER_JOULE,
    clock: str = "solar",
    refraction: float = REFRACTION_COEFFICIENT,
    sky: Sky | None = None,
    albedo_map: NDArray[np.float32] | None = None,
    index_map: NDArray[np.float32] | None = None,
    far: Elevation | None = None,
    surface: Elevation | None = None,
    threads: int | None = None,
) -> PlotTable:
    """Predictors of light and heat for plots: at the point, within circles, at several cell sizes.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    points : Points
        The plots, from `read_points`, in any CRS.
    period : str, int or Period, optional
        Twelve whole months, see `parse_period`; a typical year by default.
    air : Air, optional
        See `irradiation`.
    season : sequence of int, optional
        Months of the growing season; by default April to October, south of the equator October
        to April.
    radii : sequence of float
        Of circles around the plots [m].
    factors : sequence of int
        Cell sizes, in cells of the raster; 1 comes first.
    predictors : sequence of str
        Groups of predictors: height, slope, aspect, transforms, heat_load, sky_view, irradiation,
        irradiation_months, photosynthetic, photosynthetic_months, sun_hours, sun_hours_months,
        first_last_sun.
    albedo, diffuse, azimuths, step_seconds, unit, basis, photons_per_joule, refraction, sky
        See `irradiation`. Hours of sun take four times as many azimuths, at most 720.
    albedo_map, index_map : ndarray, optional
        See `irradiation`; of the cells as they are, joined as the ground is.
    clock : str
        See `sun_hours`.
    far, surface : Elevation, optional
        See `irradiation`.
    threads : int, optional
        Default: all cores that may be used.

    Returns
    -------
    PlotTable
        Its `frame` has a row a plot, its `dictionary()` says what each column is.

    Raises
    ------
    SettingError
        A value out of its range.
    InputError
        No plot lies on known ground, or a raster that cannot be placed on the Earth.

    References
    ----------
    McCune and Keon (2002), doi:10.1111/j.1654-1103.2002.tb02087.x. docs/plots.md has the rest.
    """
    if not isinstance(period, Period):
        period = parse_period(period)
    air = clear_air(elevation) if air is None else air
    light = LightSettings(
        period, air, twelve(albedo, "albedo"), diffuse, azimuths, step_seconds,
        ENERGY_UNITS.get(unit, unit), basis, True, refraction, sky, albedo_map, index_map,
        photons_per_joule,
    )  # fmt: skip
    hours = HoursSettings(
        period, sky or air, parse_days(None, period), parse_clock(clock), hours_azimuths(azimuths),
        step_seconds, refraction,
    )  # fmt: skip
    settings = PlotSettings(
        light, hours, tuple(season or ()), tuple(radii), tuple(factors), tuple(predictors)
    )
    grounds = [coarsened(elevation, factor) for factor in settings.factors]
    scenes = [scene_of(ground, far, surface) for ground in grounds]
    return plot_table(elevation, points, settings, scenes, threads)
