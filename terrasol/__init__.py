"""terrasol: how much sun a piece of ground gets.

The names below are the public face; they are loaded on first use, so that importing the
package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    __version__: str
    from terrasol.engine.datasets import irradiation, terrain
    from terrasol.engine.hours import sun_hours
    from terrasol.engine.series_stack import irradiation_series
    from terrasol.errors import (
        InputError,
        OutputError,
        SettingError,
        TerrasolError,
        UnfinishedError,
    )
    from terrasol.files.rasters import read_elevation
    from terrasol.ground.elevation import Elevation
    from terrasol.sky.clear import Air, clear_sky, linke_climatology
    from terrasol.sky.diffuse import split_diffuse
    from terrasol.sky.period import Period, parse_period
    from terrasol.sky.sun import sun_path, sun_series

_HOMES = {
    "Air": "terrasol.sky.clear",
    "Elevation": "terrasol.ground.elevation",
    "InputError": "terrasol.errors",
    "OutputError": "terrasol.errors",
    "Period": "terrasol.sky.period",
    "SettingError": "terrasol.errors",
    "TerrasolError": "terrasol.errors",
    "UnfinishedError": "terrasol.errors",
    "clear_sky": "terrasol.sky.clear",
    "irradiation": "terrasol.engine.datasets",
    "irradiation_series": "terrasol.engine.series_stack",
    "linke_climatology": "terrasol.sky.clear",
    "parse_period": "terrasol.sky.period",
    "read_elevation": "terrasol.files.rasters",
    "split_diffuse": "terrasol.sky.diffuse",
    "sun_hours": "terrasol.engine.hours",
    "sun_path": "terrasol.sky.sun",
    "sun_series": "terrasol.sky.sun",
    "terrain": "terrasol.engine.datasets",
}

__all__ = [
    "Air",
    "Elevation",
    "InputError",
    "OutputError",
    "Period",
    "SettingError",
    "TerrasolError",
    "UnfinishedError",
    "clear_sky",
    "irradiation",
    "irradiation_series",
    "linke_climatology",
    "parse_period",
    "read_elevation",
    "split_diffuse",
    "sun_hours",
    "sun_path",
    "sun_series",
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
