"""The horizon that a plot's cell sees."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from terrasol.constants import REFRACTION_COEFFICIENT
from terrasol.engine.job import NO_SCENE, plan_terrain
from terrasol.engine.plan import Progress
from terrasol.engine.plot_places import PLACED, Located
from terrasol.engine.windows import Window, collect
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation


def plot_horizons(
    elevation: Elevation,
    located: Located,
    azimuths: int,
    refraction: float = REFRACTION_COEFFICIENT,
    scene: Scene = NO_SCENE,
    threads: int | None = None,
    progress: Progress | None = None,
) -> NDArray[np.float64]:
    """Find the horizon of the cell of every plot.

    Parameters
    ----------
    elevation, located
        The ground, and the plots on it.
    azimuths, refraction, scene
        See `plan_terrain`.
    threads : int, optional
        Default: as many as there are cores to use.
    progress : callable, optional
        Told the share done and the stage.

    Returns
    -------
    ndarray, shape (plots, azimuths)
        Degrees above the level, not below 0; NaN without a place.
    """
    there = np.flatnonzero(located.flag == PLACED)
    windows = [
        Window(int(np.floor(row + 0.5)), int(np.floor(column + 0.5)), 1, 1)
        for row, column in zip(located.row[there], located.column[there], strict=True)
    ]
    plan = plan_terrain(elevation, azimuths, horizon=True, refraction=refraction, scene=scene)
    arrays, _ = collect(plan, windows, threads, progress, layers=["horizon"])
    found = np.full((located.flag.size, azimuths), np.nan)
    for plot, own in zip(there, arrays, strict=True):
        found[plot] = own["horizon"][:, 0, 0]
    return found


def horizon_table(names: tuple[str, ...], horizons: NDArray[np.float64]) -> pd.DataFrame:
    """Horizons as a table, one azimuth a row: `id`, `azimuth_deg`, `horizon_deg`."""
    plots, azimuths = horizons.shape
    return pd.DataFrame(
        {
            "id": np.repeat(np.array(names, dtype=object), azimuths),
            "azimuth_deg": np.tile(np.arange(azimuths) * 360.0 / azimuths, plots),
            "horizon_deg": horizons.round(3).ravel(),
        }
    )
