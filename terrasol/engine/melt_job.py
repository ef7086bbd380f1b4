"""From a station and an elevation model to a plan of a snow season, fitted if asked for."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any

import numpy as np
from numpy.typing import NDArray

import terrasol
from terrasol.constants import REFRACTION_COEFFICIENT
from terrasol.engine.melt import MeltPlan, MeltResult, zones_for
from terrasol.engine.melt_tables import SeasonTables
from terrasol.engine.series import plan_series
from terrasol.errors import InputError
from terrasol.files.layers import Layer
from terrasol.files.snow_state import StateHead
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import make_frame
from terrasol.ground.places import WGS84, Locator
from terrasol.light.series import SUBSTEP_SECONDS, SeriesSettings
from terrasol.practice.snow import (
    ALBEDO_MODELS,
    COVERED_FROM,
    MELT_MODELS,
    MELT_NUMBERS,
    NO_AVALANCHE,
    NUMBERS,
    SnowModel,
)
from terrasol.practice.snow_point import StationCheck, agreement, fit_snow, point_snow
from terrasol.practice.snow_weather import (
    FILL_HOURS,
    Mended,
    daily_snow_water,
    hourly_weather,
    level_light,
    measured_light,
    whole_days,
)
from terrasol.sky.clear import Air
from terrasol.sky.gaps import LONGEST_HOURS
from terrasol.sky.irradiance import Sky
from terrasol.sky.measured import measured_sky
from terrasol.sky.period import Period
from terrasol.sky.potential import PotentialBeam
from terrasol.sky.quality import check_quality, usable
from terrasol.sky.station import Station

STATION_SECONDS = 60.0
"""Time step of the sun by which a station's sky is told from its series."""

LYING_MM = 10.0
"""Snow water observed [mm] from which the ground is not bare (judgement: a pillow drifts)."""

TERRAIN_ALBEDO = 0.2
"""Stands in the settings of the light; what the terrain sends back is worked out day by day from
its own snow."""

REFERENCES = (
    "melt: Pellicciotti et al. 2005, doi:10.3189/172756505781829124; Hock 1999,"
    " doi:10.3189/S0022143000003087; albedo: Brock et al. 2000, doi:10.3189/172756500781832675;"
    " rain and snow: Jennings et al. 2018, doi:10.1038/s41467-018-03629-7"
)


@dataclass(frozen=True)
class MeltSettings:
    """What season to compute.

    Parameters
    ----------
    model : SnowModel
    period : Period, optional
        Whole days; by default all that the station covers.
    fit : tuple of str, optional
        Numbers to fit to the station's snow water; empty for the usual ones, None for no fit.
    spread : bool
        Carry the members of the spread too.
    bands : float, optional
        Width of the bands of height [m].
    decomposition, fill_hours, fill_weather, diffuse, azimuths, substep_seconds, refraction
        See `measured_sky`, `hourly_weather` and `SeriesSettings`.
    """

    model: SnowModel = field(default_factory=SnowModel)
    period: Period | None = None
    fit: tuple[str, ...] | None = None
    spread: bool = True
    bands: float | None = None
    decomposition: str = "dirint"
    fill_hours: float = LONGEST_HOURS
    fill_weather: float = FILL_HOURS
    diffuse: str = "perez"
    azimuths: int = 64
    substep_seconds: float = SUBSTEP_SECONDS
    refraction: float = REFRACTION_COEFFICIENT


@dataclass(frozen=True, eq=False)
class Prepared:
    """A plan, and what was found on the way to it.

    Parameters
    ----------
    plan : MeltPlan
    station : Station
        As it was used.
    record : dict
        Findings on the station, its check and the fit, ready for JSON.
    warnings : tuple of str
    check : StationCheck, optional
        Where the station observed its snow and the season begins on bare ground.
    """

    plan: MeltPlan
    station: Station
    record: dict[str, Any]
    warnings: tuple[str, ...]
    check: StationCheck | None = None


def prepare(
    elevation: Elevation,
    station: Station,
    air: Air,
    settings: MeltSettings,
    *,
    scene: Scene | None = None,
    area: tuple[NDArray[np.float32], str] | None = None,
    state: StateHead | None = None,
) -> Prepared:
    """Read weather and sky from a station, check or fit the model there, and plan the season.

    Parameters
    ----------
    elevation : Elevation
    station : Station
        As read.
    air : Air
        The clear air behind the clouds.
    settings : MeltSettings
    scene : Scene, optional
        What stands beyond and above the ground.
    area : (ndarray, str), optional
        Part of each cell within the area that the tables are of, and its name.
    state : StateHead, optional
        Of the saved snow that the season goes on from.

    Raises
    ------
    SettingError, InputError
        Settings out of range; a station that does not cover the period.
    """
    model = settings.model
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    period = settings.period or whole_days(station, frame.centre[1])
    sky, station, record, warnings = _sky(station, air, settings, period)
    own = SeriesSettings(
        period, sky, "1h", ("global",),
        (TERRAIN_ALBEDO if model.melt == "enhanced" else 0.0,) * 12,
        settings.diffuse, settings.azimuths, "slope", settings.substep_seconds,
        settings.refraction,
    )  # fmt: skip
    light = plan_series(elevation, own, scene)
    edges = light.edges[::24]
    first = period.start.astype("M8[D]")
    dates = first + np.arange(edges.size - 1)
    months = dates.astype("M8[M]").astype(np.int64) % 12
    mended = hourly_weather(
        station, edges, months, settings.fill_weather, model.albedo == "station"
    )
    model, found, check = _check_or_fit(station, mended, edges, model, settings, state)
    record |= {"weather_mended": mended.count} | found
    share, name = area if area is not None else (None, "the raster")
    plan = MeltPlan(
        light,
        model,
        mended.weather,
        zones_for(elevation.heights, settings.bands, share, name),
        tuple(model.spread()) if settings.spread else (),
        np.datetime64(state.season_start) if state is not None else dates[0],
        {"air": air.record(), "decomposition": settings.decomposition}
        if model.melt == "enhanced" else {},
    )  # fmt: skip
    doubts = (
        *mended.doubts,
        *start_doubts(station.name, check),
        *place_doubts(station, elevation),
    )
    return Prepared(plan, station, record, (*warnings, *doubts), check)


def start_doubts(name: str, check: StationCheck | None) -> tuple[str, ...]:
    """Says so if a season that begins on bare ground begins where snow was observed."""
    if check is None or not check.observed[0] >= LYING_MM:
        return ()
    return (
        f"{name}: {check.observed[0]:.0f} mm of snow water were observed on the first day,"
        f" {check.dates[0]}, and the run begins on bare ground: begin before the first snow, or go"
        " on from a state (--from-state)",
    )


def place_doubts(station: Station, elevation: Elevation) -> tuple[str, ...]:
    """Says so if the station lies outside the raster."""
    place = np.array([station.longitude]), np.array([station.latitude])
    row, column = (float(v[0]) for v in Locator(WGS84, elevation)(*place))
    rows, columns = elevation.shape
    if -0.5 <= row < rows - 0.5 and -0.5 <= column < columns - 0.5:
        return ()
    return (
        f"{station.name} lies outside the raster: its weather is carried to the cells by its height"
        f" alone, {station.height:.0f} m, as that of one that lies inside; are place and height"
        " right?",
    )


def _sky(
    station: Station, air: Air, settings: MeltSettings, period: Period
) -> tuple[Sky, Station, dict[str, Any], tuple[str, ...]]:
    """The sky that the melt model wants, the mended station, and what was found."""
    if settings.model.melt == "enhanced":
        found = measured_sky(
            station, air, period,
            decomposition=settings.decomposition,
            fill_hours=settings.fill_hours,
            step_seconds=STATION_SECONDS,
        )  # fmt: skip
        return found.sky, found.station, found.report, found.warnings
    quality = check_quality(station)
    sound, _ = usable(station, quality)
    report = {"name": station.name, "height_m": station.height, "quality": quality.summary()}
    return PotentialBeam(), sound, report, station.notes


def _check_or_fit(
    station: Station,
    mended: Mended,
    edges: NDArray[np.datetime64],
    model: SnowModel,
    settings: MeltSettings,
    state: StateHead | None,
) -> tuple[SnowModel, dict[str, Any], StationCheck | None]:
    """Hold the model against the station's own snow water, after fitting it if asked for."""
    fit, weather = settings.fit, mended.weather
    dates = (edges[:-1] + np.timedelta64(12, "h")).astype("M8[D]")
    if ("snow_water" not in station.values and fit is None) or state is not None:
        return model, {}, None  # from a state on nothing is known of the snow at the station
    observed = daily_snow_water(station, edges)
    light = station_light(station, model, edges)
    water = point_snow(model, weather, light).water
    if fit is not None:
        try:
            fitted = fit_snow(model, weather, light, observed, fit)
        except InputError as error:
            raise InputError(f"{station.name}: {error}") from error
        after = point_snow(fitted.model, weather, light).water
        told = {"fit": fitted.record(), "at_station": fitted.after.record()}
        return fitted.model, told, StationCheck(dates, observed, after, water)
    if not np.isfinite(observed).any():
        return model, {}, None
    told = {"at_station": agreement(water, observed, edges).record()}
    return model, told, StationCheck(dates, observed, water)


def station_light(
    station: Station, model: SnowModel, edges: NDArray[np.datetime64]
) -> NDArray[np.float64]:
    """What a melt model wants, on level ground at the station, shape (days, 24) [W m-2]."""
    if model.melt == "hock":
        return level_light(station, PotentialBeam(), edges)
    if model.melt == "enhanced":
        return measured_light(station, edges)
    return np.zeros((edges.size - 1, 24))


def spread_words(model: SnowModel) -> str:
    """What the spread of the pictures and tables is, in words."""
    told = ", ".join(
        f"{name.replace('_', ' ')} {100.0 * NUMBERS[name].spread:g} %"
        for name in MELT_NUMBERS[model.melt]
    )
    enhanced = model.melt == "enhanced"
    source = "between sites, Carenzo et al. 2009" if enhanced else "judgement, no source"
    return (
        f"least to greatest of runs with {told} ({source}) and the snow that falls"
        f" {100.0 * NUMBERS['snow_factor'].spread:g} % (judgement, no source) lower and higher, one"
        " at a time; not the uncertainty of temperature and light"
    )


def season_layers(plan: MeltPlan) -> dict[str, Layer]:
    """Maps of the season, by their name in `MeltResult.map_of`."""
    since = f"days since {plan.season_start} 00:00:00"
    return {
        "peak": Layer(
            "peak_snow_water", ("peak",), "kg m-2",
            "greatest snow water at the end of a day since the season began, per area of map",
            None, resolution=2.0**-6,
        ),
        "bare_day": Layer(
            "melt_out", ("melt-out",), since,
            f"first day that ended with under {COVERED_FROM:g} mm of snow water after the greatest;"
            " void where no snow came or it still lies",
            None, resolution=1.0,
        ),
    }  # fmt: skip


def stack_attributes(plan: MeltPlan, record: Mapping[str, Any]) -> dict[str, str]:
    """What the daily stack says of itself as a whole."""
    now = datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
    melt, albedo = MELT_MODELS[plan.model.melt][1], ALBEDO_MODELS[plan.model.albedo][1]
    return {
        "title": f"Snow melt and snow water by day, {plan.light.settings.period.label}",
        "source": f"terrasol {terrasol.__version__}, melt after {melt}, albedo {albedo}",
        "history": f"{now} terrasol {terrasol.__version__}: melt computed",
        "references": REFERENCES,
        "comment": f"{NO_AVALANCHE} All water per area of map; a day is that of local solar time.",
        "terrasol_record": json.dumps(record, ensure_ascii=False, default=str),
    }


def season_numbers(result: MeltResult, tables: SeasonTables) -> dict[str, Any]:
    """What came out of a season, ready for JSON."""
    area = float(tables.area.sum())
    water = tables.column("snow_water_mm")
    top = int(water.argmax())
    totals = {
        name: round(float(tables.column(f"{name}_mm").sum()), 3)
        for name in ("snowfall", "rain", "melt", "refrozen", "runoff_input")
    }
    months = []
    for month in tables.months:
        days = tables.of_month(month)
        melt, runoff = (tables.volume(name, days) for name in ("melt_mm", "runoff_input_mm"))
        months.append(
            {
                "month": month,
                "melt_m3": round(float(melt.sum()), 1),
                "runoff_input_m3": round(float(runoff.sum()), 1),
                "melt_m3_range": tables.range_of_volume("melt_mm", days),
                "runoff_input_m3_range": tables.range_of_volume("runoff_input_mm", days),
                "from": top_zones(tables, month),
            }
        )
    balance = result.balance()
    return {
        "area": tables.name,
        "area_km2": float(f"{area / 1e6:.6g}"),
        "days": int(tables.dates.size),
        "first_day": str(tables.dates[0]),
        "last_day": str(tables.dates[-1]),
        "unit": "mm on map area",
        "totals": totals,
        "peak_snow_water": round(float(water[top]), 2),
        "peak_day": str(tables.dates[top]),
        "snow_water_at_end": round(float(water[-1]), 3),
        "covered_share_at_end": round(float(tables.column("snow_covered_share")[-1]), 4),
        "months": months,
        "water_balance_error": {name: float(f"{value:.3g}") for name, value in balance.items()},
        "void_cells": int(np.isnan(result.plan.light.elevation.heights).sum()),
        "cells": int(result.plan.light.elevation.heights.size),
    }


def top_zones(tables: SeasonTables, month: str, count: int = 3) -> list[str]:
    """Where most of a month's melt comes from: bands, in words, greatest first."""
    from_band = tables.volume("melt_mm", tables.of_month(month)).sum(1)
    whole = from_band.sum()
    if whole <= 0.0:
        return []
    order: Sequence[int] = np.argsort(-from_band)[:count].tolist()
    return [
        f"{tables.edges[b]:g} to {tables.edges[b + 1]:g} m {100.0 * from_band[b] / whole:.0f} %"
        for b in order
        if from_band[b] > 0.005 * whole
    ]
