"""A snow season from Python: the daily stack on disk, and the maps of the season."""

from __future__ import annotations

from os import PathLike
from pathlib import Path

import xarray as xr

from terrasol.engine.datasets import clear_air, scene_of
from terrasol.engine.melt import MeltResult, record_of
from terrasol.engine.melt_job import MeltSettings, prepare, season_layers, stack_attributes
from terrasol.engine.melt_state import read_head, save_state, take_up
from terrasol.files.delivery import Delivery
from terrasol.files.horizons import default_folder
from terrasol.files.stacks import StackWriter, open_stack
from terrasol.ground.elevation import Elevation
from terrasol.practice.snow import SnowModel
from terrasol.sky.clear import Air
from terrasol.sky.period import Period, parse_period
from terrasol.sky.station import Station


def snow_melt(
    elevation: Elevation,
    station: Station,
    path: str | PathLike[str],
    period: str | Period | None = None,
    model: SnowModel | None = None,
    *,
    air: Air | None = None,
    fit: tuple[str, ...] | None = None,
    azimuths: int = 64,
    far: Elevation | None = None,
    surface: Elevation | None = None,
    from_state: str | PathLike[str] | None = None,
    to_state: str | PathLike[str] | None = None,
    horizon_store: str | PathLike[str] | bool = True,
    overwrite: bool = False,
    threads: int | None = None,
) -> xr.Dataset:
    """Melt, snow water, albedo and cover of every cell and day, driven by a station's hours.

    Melt and snow water of an open, undisturbed snow cover: no avalanche tool. docs/melt.md says
    what is in it and what is not.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    station : Station
        With temperature and precipitation, and for the enhanced model global irradiance.
    path : path
        The stack to write: ends in ``.zarr`` or ``.nc``.
    period : str or Period, optional
        Whole days, from bare ground on; by default all that the station covers.
    model : SnowModel, optional
        By default Pellicciotti et al. (2005) with the albedo of Brock et al. (2000).
    air : Air, optional
        The clear air behind the clouds; by default Ineichen and Perez with the climatology.
    fit : tuple of str, optional
        Numbers to fit to the station's snow water; empty for the usual ones.
    azimuths : int
        Number of horizon azimuths.
    far, surface : Elevation, optional
        See `irradiation_series`.
    from_state, to_state : path, optional
        Go on from a saved state; keep the snow of the end in one.
    horizon_store : path or bool
        See `irradiation_series`.
    overwrite : bool
        Replace a stack of that name.
    threads : int, optional
        Default: all cores that may be used.

    Returns
    -------
    xarray.Dataset
        The stack, opened, with the maps ``peak_snow_water`` [kg m-2] and ``melt_out`` [days since
        the season's first] beside it; water is per area of map.

    Raises
    ------
    SettingError, InputError, OutputError
        A setting out of range; a station that does not cover the period; a disk that refuses.
    """
    state = None if from_state is None else read_head(from_state)
    if isinstance(period, str):
        period = parse_period(period)
    settings = MeltSettings(
        model or SnowModel(), period, fit, spread=state is not None and state.members > 1,
        azimuths=azimuths,
    )  # fmt: skip
    scene = scene_of(elevation, far, surface)
    air = air or clear_air(elevation)
    made = prepare(elevation, station, air, settings, scene=scene, state=state)
    plan = made.plan
    begin = None if from_state is None else take_up(plan, from_state)
    attributes = stack_attributes(plan, record_of(plan) | {"station": made.record})
    with StackWriter(path, plan.stack(attributes), overwrite=overwrite) as writer:
        if isinstance(horizon_store, bool):
            store = default_folder() if horizon_store else writer.scratch
        else:
            store = Path(horizon_store)
        result = plan.run(store, writer, begin, threads)
        writer.commit()
    if to_state is not None:
        _keep(result, Path(to_state), overwrite)
    data = open_stack(path)
    for name, layer in season_layers(plan).items():
        told = {"long_name": layer.long_name, "units": layer.unit}
        data[layer.name] = (("y", "x"), result.map_of(name), told)
    return data


def _keep(result: MeltResult, path: Path, overwrite: bool) -> None:
    """Put the snow of the end into a file, whole or not at all."""
    with Delivery(path.absolute().parent, [path.name], overwrite=overwrite) as delivery:
        save_state(result, delivery.staged(path.name))
        delivery.commit()
