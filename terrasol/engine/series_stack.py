"""A series from plan to finished stack, for the command line and for Python."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from os import PathLike
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

import terrasol
from terrasol.constants import REFRACTION_COEFFICIENT
from terrasol.engine.datasets import clear_air, scene_of
from terrasol.engine.job import Summary
from terrasol.engine.plan import Progress
from terrasol.engine.series import HELD, SeriesPlan, is_clear, plan_series
from terrasol.errors import OutputError
from terrasol.files.delivery import check_space
from terrasol.files.horizons import default_folder
from terrasol.files.stacks import StackWriter, check_stack_free, open_stack
from terrasol.ground.elevation import Elevation
from terrasol.light.series import SUBSTEP_SECONDS, SeriesSettings
from terrasol.light.settings import twelve
from terrasol.sky.clear import Air
from terrasol.sky.irradiance import Sky
from terrasol.sky.period import Period, parse_period

REFERENCES = (
    "sun: Reda and Andreas 2004, doi:10.1016/j.solener.2003.12.003;"
    " diffuse light: Perez et al. 1990, doi:10.1016/0038-092X(90)90055-H;"
    " sky view: Dozier and Frew 1990, doi:10.1109/36.58986;"
    " horizon: Dozier, Bruno and Downey 1981, doi:10.1016/0098-3004(81)90026-2"
)
"""Of every stack."""


def stack_attributes(plan: SeriesPlan, record: Mapping[str, Any]) -> dict[str, str]:
    """What a stack says of itself as a whole.

    Parameters
    ----------
    plan : SeriesPlan
        The work.
    record : mapping
        What was asked, ready for JSON; it is kept whole.
    """
    settings = plan.settings
    now = datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
    every = "Hourly" if settings.step == "1h" else "Daily"
    sky = "Clear-sky model, no clouds: potential values." if is_clear(settings) else "Measured sky."
    reach = "Nothing beyond the elevation model" if plan.scene.far is None else "Far ground too"
    comment = f"{sky} {reach} hides the sun."
    if settings.period.typical:
        comment += f" A typical year, with the sun of {settings.period.start.astype('M8[Y]')}."
    return {
        "title": f"{every} solar radiation of terrain, {settings.period.label}",
        "source": f"terrasol {terrasol.__version__}, model of solar radiation on terrain",
        "history": f"{now} terrasol {terrasol.__version__}: series computed",
        "references": REFERENCES,
        "comment": comment,
        "terrasol_record": json.dumps(record, ensure_ascii=False, default=str),
    }


def write_series(
    plan: SeriesPlan,
    path: str | PathLike[str],
    record: Mapping[str, Any],
    *,
    store: Path | None,
    compression: str = "zstd",
    overwrite: bool = False,
    threads: int | None = None,
    progress: Progress | None = None,
) -> Summary:
    """Compute a series into a stack, all of it or nothing.

    Parameters
    ----------
    plan : SeriesPlan
        The work.
    path : path
        Ends in ``.zarr`` or ``.nc``.
    record : mapping
        What was asked, ready for JSON.
    store : Path or None
        Folder where horizons are kept and found; None keeps none. Where it cannot take them
        they are held beside the stack, and the summary says so.
    compression : {'zstd', 'deflate'}
        For Zarr.
    overwrite : bool
        Replace a stack of that name.
    threads, progress
        See `SeriesPlan.run`.

    Raises
    ------
    OutputError
        The name is taken, or the disk is too small or refuses.
    """
    check_stack_free(path, overwrite)
    crowded = None
    if store is not None and not os.path.lexists(store / plan.key):
        crowded = _crowded(store, plan.horizon_bytes)
    keep = None if crowded else store
    need = plan.stack_bytes + (plan.horizon_bytes if keep is None else 0)
    writer = StackWriter(
        path,
        plan.stack(stack_attributes(plan, record)),
        compression=compression,
        overwrite=overwrite,
        need=need,
    )
    with writer:
        summary = plan.run(writer, keep or writer.scratch, threads, progress, writer.scratch)
        writer.commit()
    if crowded:
        summary.warnings.append(f"{crowded}; {HELD}")
    return summary


def _crowded(store: Path, need: int) -> OutputError | None:
    """What says that horizons will not fit, before any work; raises where no folder can be."""
    folder = store.absolute()
    while not os.path.exists(folder):  # or not to be looked at
        folder = folder.parent
    if not os.path.isdir(folder):
        raise OutputError(f"{folder} is not a folder: name another one for the horizons")
    try:
        check_space(folder, need, "folder for the horizons")
    except OutputError as error:
        return error
    return None


def irradiation_series(
    elevation: Elevation,
    path: str | PathLike[str],
    period: str | Period,
    sky: Sky | None = None,
    *,
    step: str = "1h",
    quantities: Sequence[str] = ("global",),
    albedo: float | Sequence[float] = 0.2,
    diffuse: str = "perez",
    azimuths: int = 64,
    basis: str = "slope",
    substep_seconds: float = SUBSTEP_SECONDS,
    refraction: float = REFRACTION_COEFFICIENT,
    albedo_map: NDArray[np.float32] | None = None,
    far: Elevation | None = None,
    surface: Elevation | None = None,
    horizon_store: str | PathLike[str] | bool = True,
    compression: str = "zstd",
    overwrite: bool = False,
    threads: int | None = None,
) -> xr.Dataset:
    """Irradiance hour by hour, or irradiation day by day, of every cell, as a stack on disk.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    path : path
        The stack to write: ends in ``.zarr`` or ``.nc``.
    period : str or Period
        Whole days; see `parse_period`.
    sky : Sky, optional
        Clear or measured; by default the clear sky of Ineichen and Perez with the turbidity
        climatology at the raster's centre.
    step : {'1h', '1d'}
        Full hours of UTC, told by their mean [W m-2], or days, told by their sum [MJ m-2].
        A day begins at the full hour of UTC nearest to local solar midnight.
    quantities : sequence of str
        Some of 'global', 'beam', 'diffuse', 'reflected' and 'net' ((1 - albedo) x global).
    albedo : float or 12 floats
        Of the ground.
    diffuse : {'perez', 'hay-davies', 'isotropic'}
        Model that parts the diffuse light.
    azimuths : int
        Number of horizon azimuths, a multiple of 4 from 8 to 720.
    basis : {'slope', 'map'}
        Per area of slope, or per area of map.
    substep_seconds : float
        Spacing of the moments that make a step; divides an hour.
    refraction : float
        Coefficient k of terrestrial refraction.
    albedo_map : ndarray, shape (1 or 12, y, x), optional
        Albedo of each cell, for the year or January to December; NaN where `albedo` counts.
    far : Elevation, optional
        A larger, coarser model in any CRS: its ridges beyond the edge and in voids count too.
    surface : Elevation, optional
        A surface model: trees and buildings hide the sun, slope stays that of the ground.
    horizon_store : path or bool
        Folder in which horizons are kept and found again by the ground they belong to; True
        for the user's cache folder, False to keep none.
    compression : {'zstd', 'deflate'}
        For Zarr.
    overwrite : bool
        Replace a stack of that name.
    threads : int, optional
        Default: all cores that may be used.

    Returns
    -------
    xarray.Dataset
        The stack, opened; each quantity (time, y, x), read from disk when it is looked at. The
        time is the middle of the interval in UTC, ``time_bounds`` its edges. The attribute
        ``warnings`` holds what a careful reader should know.

    Raises
    ------
    SettingError
        A value out of its range.
    InputError
        A raster that cannot be placed on the Earth.
    OutputError
        The stack cannot be written, or the horizons nowhere.

    References
    ----------
    docs/method.md has every formula.
    """
    scene = scene_of(elevation, far, surface)
    if not isinstance(period, Period):
        period = parse_period(period)
    if sky is None:
        sky = clear_air(elevation)
    settings = SeriesSettings(
        period,
        sky,
        step,
        tuple(quantities),
        twelve(albedo, "albedo"),
        diffuse,
        azimuths,
        basis,
        substep_seconds,
        refraction,
        albedo_map=albedo_map,
    )
    if isinstance(horizon_store, bool):
        store = default_folder() if horizon_store else None
    else:
        store = Path(horizon_store)
    summary = write_series(
        plan_series(elevation, settings, scene),
        path,
        series_record(settings),
        store=store,
        compression=compression,
        overwrite=overwrite,
        threads=threads,
    )
    data = open_stack(path)
    data.attrs["warnings"] = summary.warnings
    return data


def series_record(settings: SeriesSettings) -> dict[str, Any]:
    """Settings as plain text and numbers."""
    sky = settings.sky
    albedo: Any = list(settings.albedo)
    if settings.albedo_station is not None:
        albedo = "as measured"
    if settings.albedo_map is not None:
        albedo = "as mapped"
    return {
        "period": settings.period.record(),
        "sky": sky.record() if isinstance(sky, Air) else type(sky).__name__,
        "step": settings.step,
        "quantities": list(settings.quantities),
        "albedo": albedo,
        "diffuse": settings.diffuse,
        "azimuths": settings.azimuths,
        "basis": settings.basis,
        "substep_seconds": settings.substep_seconds,
        "refraction": settings.refraction,
    }
