"""terrasol: how much sun a piece of ground gets.

The names below are the public face; they are loaded on first use, so that importing the
package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    __version__: str
    from terrasol.engine.comparison import Spot, compare_station, spot_at
    from terrasol.engine.datasets import irradiation, terrain
    from terrasol.engine.hours import sun_hours
    from terrasol.engine.melt_stack import snow_melt
    from terrasol.engine.parcel_frame import survey_parcels
    from terrasol.engine.plot_table import PlotTable
    from terrasol.engine.plots import plot_predictors
    from terrasol.engine.series_stack import irradiation_series
    from terrasol.engine.uncertainty import propagate
    from terrasol.errors import (
        InputError,
        OutputError,
        SettingError,
        TerrasolError,
        UnfinishedError,
    )
    from terrasol.files.points import Points, read_points
    from terrasol.files.rasters import read_elevation
    from terrasol.files.tables import read_station
    from terrasol.ground.elevation import Elevation
    from terrasol.ground.uncertainty import DemError
    from terrasol.practice.snow import SnowModel
    from terrasol.sky.clear import Air, clear_sky, linke_climatology
    from terrasol.sky.cloud import MonthlySky, clouded_sky
    from terrasol.sky.diffuse import split_diffuse
    from terrasol.sky.measured import measured_sky
    from terrasol.sky.period import Period, parse_period
    from terrasol.sky.station import Station
    from terrasol.sky.sun import sun_path, sun_series

_HOMES = {
    "Air": "terrasol.sky.clear",
    "DemError": "terrasol.ground.uncertainty",
    "Elevation": "terrasol.ground.elevation",
    "InputError": "terrasol.errors",
    "MonthlySky": "terrasol.sky.cloud",
    "OutputError": "terrasol.errors",
    "Period": "terrasol.sky.period",
    "PlotTable": "terrasol.engine.plot_table",
    "Points": "terrasol.files.points",
    "SettingError": "terrasol.errors",
    "SnowModel": "terrasol.practice.snow",
    "Spot": "terrasol.engine.comparison",
    "Station": "terrasol.sky.station",
    "TerrasolError": "terrasol.errors",
    "UnfinishedError": "terrasol.errors",
    "clear_sky": "terrasol.sky.clear",
    "clouded_sky": "terrasol.sky.cloud",
    "compare_station": "terrasol.engine.comparison",
    "irradiation": "terrasol.engine.datasets",
    "irradiation_series": "terrasol.engine.series_stack",
    "linke_climatology": "terrasol.sky.clear",
    "measured_sky": "terrasol.sky.measured",
    "parse_period": "terrasol.sky.period",
    "propagate": "terrasol.engine.uncertainty",
    "plot_predictors": "terrasol.engine.plots",
    "read_elevation": "terrasol.files.rasters",
    "read_points": "terrasol.files.points",
    "read_station": "terrasol.files.tables",
    "split_diffuse": "terrasol.sky.diffuse",
    "snow_melt": "terrasol.engine.melt_stack",
    "spot_at": "terrasol.engine.comparison",
    "sun_hours": "terrasol.engine.hours",
    "sun_path": "terrasol.sky.sun",
    "sun_series": "terrasol.sky.sun",
    "survey_parcels": "terrasol.engine.parcel_frame",
    "terrain": "terrasol.engine.datasets",
}

__all__ = [
    "Air",
    "DemError",
    "Elevation",
    "InputError",
    "MonthlySky",
    "OutputError",
    "Period",
    "PlotTable",
    "Points",
    "SettingError",
    "SnowModel",
    "Spot",
    "Station",
    "TerrasolError",
    "UnfinishedError",
    "clear_sky",
    "clouded_sky",
    "compare_station",
    "irradiation",
    "irradiation_series",
    "linke_climatology",
    "measured_sky",
    "parse_period",
    "plot_predictors",
    "propagate",
    "read_elevation",
    "read_points",
    "read_station",
    "snow_melt",
    "split_diffuse",
    "spot_at",
    "sun_hours",
    "sun_path",
    "sun_series",
    "survey_parcels",
    "terrain",
]


def _version() -> str:
    """Version of the package as installed."""
    from importlib.metadata import PackageNotFoundError, version

    try:
        return version("terrasol")
    except PackageNotFoundError:  # a bare checkout
        return "0+unknown"


def __getattr__(name: str) -> Any:
    """Load a public name from its home."""
    if name == "__version__":
        return globals().setdefault(name, _version())
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'terrasol' has no attribute '{name}'")


def __dir__() -> list[str]:
    """Public names."""
    return __all__
