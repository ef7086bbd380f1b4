"""Parcels from Python: elevation and outlines in, a table with geometry out."""

from __future__ import annotations

from collections.abc import Sequence
from os import PathLike
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import REFRACTION_COEFFICIENT
from terrasol.engine.datasets import clear_air, scene_of
from terrasol.engine.parcel_figures import Asked, Warmth
from terrasol.engine.parcel_rows import RowSettings
from terrasol.engine.parcel_tables import column_rows, table_rows
from terrasol.engine.parcel_words import read_rule
from terrasol.engine.parcels import ParcelSettings, Survey, survey
from terrasol.errors import InputError
from terrasol.files.vectors import Polygons, as_polygons, read_polygons
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import make_frame
from terrasol.ground.uncertainty import DemError
from terrasol.light.days import parse_clock, parse_days
from terrasol.light.hours import HoursSettings
from terrasol.light.settings import LightSettings, twelve
from terrasol.practice.classes import FLAT_BELOW_PERCENT, SLOPE_EDGES_PERCENT
from terrasol.practice.degree_days import LAPSE
from terrasol.practice.rows import CANOPY_ALBEDO
from terrasol.practice.season import growing_season, parse_season
from terrasol.practice.temperatures import Temperatures
from terrasol.sky.clear import Air
from terrasol.sky.irradiance import Sky
from terrasol.sky.period import Period, parse_period

if TYPE_CHECKING:
    import geopandas


def survey_parcels(
    elevation: Elevation,
    parcels: str | PathLike[str] | geopandas.GeoDataFrame,
    period: str | int | Period | None = None,
    air: Air | None = None,
    *,
    name_field: str | None = None,
    layer: str | None = None,
    rule: str | None = None,
    least_patch: float = 0.0,
    score: str | None = None,
    slope_classes: Sequence[float] = SLOPE_EDGES_PERCENT,
    flat_below: float = FLAT_BELOW_PERCENT,
    season: str | None = None,
    temperatures: Temperatures | None = None,
    lapse_rate: float | Sequence[float] = LAPSE,
    rows: tuple[float, float, float] | None = None,
    canopy_albedo: float = CANOPY_ALBEDO,
    clock: str = "solar",
    sky: Sky | None = None,
    albedo_map: NDArray[np.float32] | None = None,
    index_map: NDArray[np.float32] | None = None,
    albedo: float | Sequence[float] = 0.2,
    diffuse: str = "perez",
    azimuths: int = 64,
    step_seconds: float = 60.0,
    refraction: float = REFRACTION_COEFFICIENT,
    far: Elevation | None = None,
    surface: Elevation | None = None,
    dem_error: DemError | None = None,
    threads: int | None = None,
) -> geopandas.GeoDataFrame:
    """Slope, aspect, light, warmth and rank of vineyard parcels.

    Frost pooling, soil and water are not in it.

    Parameters
    ----------
    elevation : Elevation
        The ground; all of it counts as horizon.
    parcels : path or geopandas.GeoDataFrame
        Polygons in any CRS.
    period : str, int or Period, optional
        See `parse_period`; a typical year by default.
    air : Air, optional
        The clear air; by default that of Ineichen and Perez with the turbidity climatology
        at the raster's centre.
    name_field, layer : str, optional
        Field that names the parcels, and layer of the file.
    rule : str, optional
        What ground must meet, such as ``"slope_percent < 15 and share_of_level >= 0.95"``.
    least_patch : float
        Connected patches of such ground that are smaller do not count [m2].
    score : str, optional
        Sum over figures that ranks the parcels.
    slope_classes : sequence of float
        Edges of the classes [percent].
    flat_below : float
        Ground flatter than this faces nowhere [percent].
    season : str, optional
        Growing season, such as ``"04-10"``; by default that, south of the equator ``"10-04"``.
    temperatures : Temperatures, optional
        For degree-days; see `terrasol.files.temperatures.read_temperatures`.
    lapse_rate : float or 12 floats
        Fall of temperature with height [K km-1].
    rows : tuple of three floats, optional
        Spacing, height and width of vine rows [m].
    canopy_albedo : float
        Share of light that the sides of the rows send back, evenly.
    clock : str
        Time of day of first and last sun; see `sun_hours`.
    sky : Sky, optional
        A measured sky or one of monthly indices, in place of the clear one.
    albedo : float or 12 floats
        Of the ground.
    albedo_map, index_map, diffuse, azimuths, step_seconds, refraction, far, surface, threads
        See `irradiation`.
    dem_error : DemError, optional
        Error of the heights, for standard errors.

    Returns
    -------
    geopandas.GeoDataFrame
        One row a parcel, the best first, in the raster's CRS, with the columns of
        ``parcels.csv``. ``attrs`` holds ``columns`` (unit, area basis and meaning by name) and
        ``warnings``. Cells, horizons, rows and coarser looks are in what
        `terrasol.engine.parcels.survey` returns.

    Raises
    ------
    SettingError
        A value out of its range, or a rule or score that cannot be read.
    InputError
        Parcels that cannot be used, or lie outside the raster.

    Examples
    --------
    >>> import geopandas, numpy as np, shapely
    >>> ramp = np.outer(np.arange(60.0) * -1.2, np.ones(60))
    >>> ground = Elevation.from_array(ramp, (10, 0, 5e5, 0, -10, 5.2e6), "EPSG:32632")
    >>> plot = shapely.box(5.002e5, 5.1997e6, 5.004e5, 5.1998e6)
    >>> given = geopandas.GeoDataFrame({"name": ["A"]}, geometry=[plot], crs=32632)
    >>> found = survey_parcels(ground, given, rule="slope_percent < 15", azimuths=16)
    >>> [round(float(found[name].iloc[0]), 2) for name in ("rule_ha_map", "slope_mean_percent")]
    [2.0, 12.0]
    """
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    whole = period if isinstance(period, Period) else parse_period(period)
    warmth = None if temperatures is None else Warmth(temperatures, _lapse(lapse_rate))
    asked = Asked(
        whole,
        growing_season(frame.centre[0]) if season is None else parse_season(season),
        tuple(float(edge) for edge in slope_classes),
        flat_below,
        None if rule is None else read_rule(rule, warm=warmth is not None),
        least_patch,
        warmth,
    )
    air = air or clear_air(elevation)
    light = LightSettings(
        whole, air, twelve(albedo, "albedo"), diffuse, azimuths, step_seconds,
        refraction=refraction, sky=sky, albedo_map=albedo_map, index_map=index_map,
    )  # fmt: skip
    hours = HoursSettings(
        whole, sky or air, parse_days(None, whole), parse_clock(clock),
        step_seconds=step_seconds, refraction=refraction,
    )  # fmt: skip
    settings = ParcelSettings(
        light, hours, asked, score, (), None if rows is None else RowSettings(*rows, canopy_albedo),
        dem_error,
    )  # fmt: skip
    found = survey(
        elevation,
        _polygons(parcels, elevation, layer, name_field),
        settings,
        lambda ground, _: scene_of(ground, far, surface),
        threads,
    )
    return as_frame(found, elevation)


def _lapse(rate: float | Sequence[float]) -> float | tuple[float, ...]:
    """One lapse rate, or twelve."""
    rates = tuple(float(each) for each in np.ravel(rate))
    return rates[0] if len(rates) == 1 else rates


def _polygons(
    parcels: Any, elevation: Elevation, layer: str | None, name_field: str | None
) -> Polygons:
    """The parcels of a file or a table."""
    if isinstance(parcels, str | PathLike):
        return read_polygons(parcels, elevation.crs, layer=layer, name_field=name_field)
    if not hasattr(parcels, "geometry"):
        raise InputError(f"parcels must be a file or a GeoDataFrame, not {type(parcels).__name__}")
    return as_polygons(parcels, elevation.crs, name_field=name_field)


def as_frame(found: Survey, elevation: Elevation) -> geopandas.GeoDataFrame:
    """A survey as a table with the outlines."""
    import geopandas

    frame = geopandas.GeoDataFrame(
        table_rows(found),
        geometry=[parcel.outline for parcel in found.order],
        crs=elevation.crs.to_wkt(),
    )
    columns = {row.pop("column"): row for row in column_rows(found)}
    frame.attrs = {"columns": columns, "warnings": list(found.warnings)}
    return frame
