"""The jobs from Python: elevation in, labelled arrays out."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from numbers import Integral, Real
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from terrasol.constants import ENERGY_UNITS, REFRACTION_COEFFICIENT
from terrasol.engine.error_maps import plan_errors
from terrasol.engine.job import Plan, plan_irradiation, plan_terrain
from terrasol.engine.outputs import month_labels
from terrasol.errors import InputError, SettingError
from terrasol.files.layers import Layer
from terrasol.ground.above import surface_heights
from terrasol.ground.beyond import Scene, far_ground, make_scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import make_frame
from terrasol.ground.uncertainty import DemError
from terrasol.light.settings import LightSettings, twelve
from terrasol.sky.clear import Air, linke_climatology
from terrasol.sky.irradiance import Sky
from terrasol.sky.period import Period, parse_period


class ArraySink:
    """A sink that keeps whole arrays."""

    def __init__(self, shape: tuple[int, int]) -> None:
        self.shape = shape
        self.layers: dict[str, Layer] = {}
        self.arrays: dict[str, NDArray[Any]] = {}

    def open(self, layer: Layer) -> None:
        """Make room."""
        self.layers[layer.name] = layer
        self.arrays[layer.name] = np.zeros((len(layer.bands), *self.shape), layer.dtype)

    def write(self, name: str, row: int, column: int, values: NDArray[Any]) -> None:
        """Put a block in its place."""
        rows, columns = values.shape[1:]
        self.arrays[name][:, row : row + rows, column : column + columns] = values


def terrain(
    elevation: Elevation,
    azimuths: int = 64,
    *,
    horizon: bool = False,
    refraction: float = REFRACTION_COEFFICIENT,
    far: Elevation | None = None,
    surface: Elevation | None = None,
    horizon_gap: bool = False,
    highest: float | None = None,
    threads: int | None = None,
) -> xr.Dataset:
    """Slope, aspect, sky view and, if asked, the horizon.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    azimuths : int
        Number of horizon azimuths, a multiple of 4 from 8 to 720.
    horizon : bool
        Keep the horizon.
    refraction : float
        Coefficient k of terrestrial refraction.
    far : Elevation, optional
        A larger, coarser model in any CRS: its ridges beyond the edge and in voids count too.
    surface : Elevation, optional
        A surface model: trees and buildings hide the sun, slope stays that of the ground.
    horizon_gap : bool
        Also bound what ground outside all data could hide.
    highest : float, optional
        How high such ground could be [m]; see `make_scene`.
    threads : int, optional
        Default: all cores that may be used.

    Returns
    -------
    xarray.Dataset
        ``slope``, ``aspect`` [degree], ``sky_view`` [1], each (y, x); ``horizon`` [degree]
        (azimuth, y, x). NaN where void; aspect also where flat.

    Raises
    ------
    SettingError
        A value out of its range.
    InputError
        A raster that cannot be placed on the Earth.

    References
    ----------
    Horn (1981), doi:10.1109/PROC.1981.11918. Dozier and Frew (1990),
    doi:10.1109/36.58986. Dozier, Bruno and Downey (1981),
    doi:10.1016/0098-3004(81)90026-2.

    Examples
    --------
    >>> import numpy as np
    >>> ramp = np.outer(np.arange(40.0) * -30.0, np.ones(40))
    >>> hill = Elevation.from_array(ramp, (30, 0, 5e5, 0, -30, 5.2e6), "EPSG:32632")
    >>> result = terrain(hill, azimuths=16)
    >>> round(float(result.slope[20, 20]), 1), round(float(result.aspect[20, 20]), 1)
    (45.0, 180.0)
    """
    scene = scene_of(elevation, far, surface, horizon_gap, highest)
    plan = plan_terrain(elevation, azimuths, horizon=horizon, refraction=refraction, scene=scene)
    return run_in_memory(plan, threads)


def irradiation(
    elevation: Elevation,
    period: str | int | Period | None = None,
    air: Air | None = None,
    *,
    albedo: float | Sequence[float] = 0.2,
    diffuse: str = "perez",
    azimuths: int = 64,
    step_seconds: float = 60.0,
    unit: str = "MJ m-2",
    basis: str = "slope",
    monthly_parts: bool = False,
    refraction: float = REFRACTION_COEFFICIENT,
    sky: Sky | None = None,
    albedo_map: NDArray[np.float32] | None = None,
    index_map: NDArray[np.float32] | None = None,
    photons_per_joule: float | None = None,
    far: Elevation | None = None,
    surface: Elevation | None = None,
    horizon_gap: bool = False,
    highest: float | None = None,
    dem_error: DemError | None = None,
    threads: int | None = None,
) -> xr.Dataset:
    """Irradiation of every cell, with terrain shade and reflection: potential (clear-sky) or not.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    period : str, int or Period, optional
        See `parse_period`; a typical year by default.
    air : Air, optional
        The clear air; by default that of Ineichen and Perez with the turbidity climatology
        at the raster's centre.
    albedo : float or 12 floats
        Of the ground.
    diffuse : {'perez', 'hay-davies', 'isotropic'}
        Model that parts the diffuse light.
    azimuths : int
        Number of horizon azimuths, a multiple of 4 from 8 to 720.
    step_seconds : float
        Time step of the sun.
    unit : {'MJ m-2', 'kW h m-2', 'MJ', 'kWh'}
        Unit of irradiation, as in files or as on the command line.
    basis : {'slope', 'map'}
        Per area of slope, or per area of map.
    monthly_parts : bool
        Also beam, diffuse and reflected of each month.
    refraction : float
        Coefficient k of terrestrial refraction.
    far : Elevation, optional
        A larger, coarser model in any CRS: its ridges beyond the edge and in voids count too.
    surface : Elevation, optional
        A surface model: trees and buildings hide the sun, slope stays that of the ground.
    horizon_gap : bool
        Also bound what ground outside all data could hide.
    highest : float, optional
        How high such ground could be [m]; see `make_scene`.
    albedo_map : ndarray, shape (1 or 12, y, x), optional
        Albedo of each cell, for the year or January to December; `albedo` counts where NaN.
    index_map : ndarray, shape (1 or 12, y, x), optional
        Clear-sky index of each cell, in place of `sky`; NaN makes void light.
    photons_per_joule : float, optional
        Photosynthetic photons in a joule of global light [umol J-1], for
        ``photosynthetic_months`` (month, y, x) [mol m-2 d-1].
    sky : Sky, optional
        A measured sky (`clouded_sky`) or one of monthly indices (`MonthlySky`), in place of
        the clear one.
    dem_error : DemError, optional
        Error of the heights, for the standard errors of slope, aspect and the whole period's
        global irradiation.
    threads : int, optional
        Default: all cores that may be used.

    Returns
    -------
    xarray.Dataset
        What `terrain` gives, and ``irradiation_year`` (or ``irradiation_period``)
        (part, y, x), ``irradiation_months`` (month, y, x), with `monthly_parts` also
        ``beam_months``, ``diffuse_months`` and ``reflected_months``; with `dem_error`
        ``slope_standard_error``, ``aspect_standard_error`` and
        ``irradiation_year_standard_error`` (y, x).

    Raises
    ------
    SettingError
        A value out of its range.
    InputError
        A raster that cannot be placed on the Earth.

    References
    ----------
    Ineichen and Perez (2002), doi:10.1016/S0038-092X(02)00045-2. Perez et al. (1990),
    doi:10.1016/0038-092X(90)90055-H. docs/method.md has every formula.
    """
    scene = scene_of(elevation, far, surface, horizon_gap, highest)
    if not isinstance(period, Period):
        period = parse_period(period)
    if not isinstance(air, Air | None):
        raise SettingError(
            f"the air must be an Air, not {air!r}: make it with Air.ineichen or Air.bird"
        )
    if not isinstance(step_seconds, Real):
        raise SettingError(f"the time step must be a number of seconds; got {step_seconds!r}")
    if air is None:
        air = clear_air(elevation)
    settings = LightSettings(
        period,
        air,
        twelve(albedo, "albedo"),
        diffuse,
        azimuths,
        step_seconds,
        ENERGY_UNITS.get(unit, unit),
        basis,
        monthly_parts,
        refraction,
        sky,
        albedo_map,
        index_map,
        photons_per_joule,
    )
    plan = plan_irradiation(elevation, settings, scene)
    return run_in_memory(plan_errors(plan, dem_error) if dem_error else plan, threads)


def scene_of(
    elevation: Elevation,
    far: Elevation | None = None,
    surface: Elevation | None = None,
    horizon_gap: bool = False,
    highest: float | None = None,
) -> Scene:
    """Put together what stands beyond and above a ground.

    Parameters
    ----------
    elevation, far, surface, horizon_gap, highest
        See `irradiation`.

    Raises
    ------
    InputError
        What is no elevation model, or cannot be placed on the Earth.
    SettingError
        A height out of its range.
    """
    for model in (elevation, far, surface):
        if not isinstance(model, Elevation | None):
            raise InputError(
                f"the ground must be an Elevation, not {type(model).__name__}: read a file with"
                " read_elevation, or take an array with Elevation.from_array"
            )
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    return make_scene(
        elevation,
        frame,
        far=None if far is None else far_ground(elevation, far),
        surface=None if surface is None else surface_heights(elevation, surface),
        horizon_gap=horizon_gap,
        highest=highest,
    )


def run_in_memory(
    plan: Plan, threads: int | None, label: Callable[..., xr.DataArray] | None = None
) -> xr.Dataset:
    """Run a plan into memory and label what comes out.

    Parameters
    ----------
    plan : Plan
        The work.
    threads : int or None
        None for all cores that may be used.
    label : callable, optional
        Given plan, layer and values, makes the layer's DataArray; by default that of terrain
        and irradiation.

    Raises
    ------
    SettingError
        A number of threads that is none, or under 1.
    """
    if not isinstance(threads, Integral | None):
        raise SettingError(f"the number of threads must be a whole number; got {threads!r}")
    sink = ArraySink(plan.elevation.shape)
    summary = plan.run(sink, threads)
    data = xr.Dataset(attrs={"warnings": summary.warnings, "crs_wkt": plan.elevation.crs.to_wkt()})
    for name, layer in sink.layers.items():
        if name == "horizon_gap":
            data = data.assign(_gap_variables(layer, sink.arrays[name]))
        else:
            data[name] = (label or _labelled)(plan, layer, sink.arrays[name])
    a, b, c, d, e, f = plan.elevation.transform
    if b == 0.0 and d == 0.0:
        rows, columns = plan.elevation.shape
        data = data.assign_coords(
            x=c + a * (np.arange(columns) + 0.5), y=f + e * (np.arange(rows) + 0.5)
        )
    return data


def _gap_variables(layer: Layer, values: NDArray[Any]) -> dict[str, xr.DataArray]:
    """One variable a unit."""
    names = ("horizon_gap", "horizon_gap_light")
    return {
        name: xr.DataArray(
            plane, dims=("y", "x"), attrs={"units": unit, "long_name": layer.long_name}
        )
        for name, unit, plane in zip(names, layer.units, values, strict=False)
    }


def attributes(layer: Layer) -> dict[str, str]:
    """Unit and names of a layer, as CF writes them."""
    named = {"standard_name": layer.standard_name} if layer.standard_name else {}
    beside = layer.tags.get("ancillary_variables")
    found = {"units": layer.unit, "long_name": layer.long_name} | named
    return found | {"ancillary_variables": beside} if beside else found


def clear_air(elevation: Elevation) -> Air:
    """Make the clear air of Ineichen and Perez, with the turbidity climatology at the centre."""
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    return Air.ineichen(linke_climatology(*frame.centre))


def _labelled(plan: Plan, layer: Layer, values: NDArray[Any]) -> xr.DataArray:
    """One layer as a DataArray with names, unit and coordinates."""
    attrs = attributes(layer)
    if layer.name == "horizon":
        azimuth = 360.0 * np.arange(len(layer.bands)) / len(layer.bands)
        return xr.DataArray(values, {"azimuth": azimuth}, ("azimuth", "y", "x"), attrs=attrs)
    if layer.name.endswith("_months") and plan.settings is not None:
        months = list(month_labels(plan.settings))
        return xr.DataArray(values, {"month": months}, ("month", "y", "x"), attrs=attrs)
    if layer.name.startswith("irradiation") and len(layer.bands) > 1:
        return xr.DataArray(values, {"part": list(layer.bands)}, ("part", "y", "x"), attrs=attrs)
    return xr.DataArray(values[0], dims=("y", "x"), attrs=attrs)
