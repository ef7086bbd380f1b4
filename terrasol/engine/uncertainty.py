"""What the error of the heights does to whatever is computed of them, by Monte Carlo."""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterator, Mapping
from dataclasses import replace
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrasol.engine.job import Plan, empty_tables
from terrasol.engine.plan import carry_out, default_threads
from terrasol.engine.spread import Spread, SpreadTally
from terrasol.errors import SettingError
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import make_frame
from terrasol.ground.horizon import Obstacles
from terrasol.ground.likely import likely_heights, too_smooth
from terrasol.ground.uncertainty import DemError, error_fields

HEADROOM: Final = 6.0
"""RMSEs above and below the ground that sun tables are made for. Beyond, they go on straight."""

Told = Callable[[int], None]
"""Told how many realisations are done."""


def realisations(elevation: Elevation, error: DemError) -> Iterator[Elevation]:
    """Put one error field after the other on a ground.

    Parameters
    ----------
    elevation : Elevation
        The ground as it is known.
    error : DemError
        Its error and the draw.

    Yields
    ------
    Elevation
        The ground with another error on top of its own; voids stay void, without the warnings.

    Raises
    ------
    InputError
        A raster that cannot be placed on the Earth.
    SettingError
        A range too long for the raster.

    Examples
    --------
    >>> import numpy as np
    >>> flat = Elevation.from_array(np.zeros((50, 50)), (10, 0, 5e5, 0, -10, 5.2e6), "EPSG:32632")
    >>> drawn = list(realisations(flat, DemError(0.5, 30.0, 8)))
    >>> len(drawn), round(float(np.std([each.heights for each in drawn])), 1)
    (8, 0.5)
    """
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    for field in error_fields(error, elevation.shape, frame.cell_size):
        yield replace(elevation, heights=elevation.heights + field, warnings=())


def likely_grounds(elevation: Elevation, error: DemError) -> Iterator[Elevation]:
    """Draw grounds that a model may be the erroneous picture of.

    Where `realisations` put another error on top of the model's own, these take the likely error
    off: see `terrasol.ground.likely.likely_heights`.

    Parameters
    ----------
    elevation : Elevation
        The ground as it is known.
    error : DemError
        Its error and the draw.

    Yields
    ------
    Elevation
        Voids stay void, without the warnings.

    Raises
    ------
    InputError
        A raster that cannot be placed on the Earth.
    SettingError
        A range too long for the raster.
    """
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    for heights in likely_heights(elevation.heights, error, frame.cell_size):
        yield replace(elevation, heights=heights, warnings=())


def propagate(
    elevation: Elevation,
    error: DemError,
    quantity: Callable[[Elevation], ArrayLike],
    *,
    angle: bool = False,
    progress: Told | None = None,
) -> Spread:
    """Find what the error of the heights leaves open about a quantity.

    Parameters
    ----------
    elevation : Elevation
        The ground as it is known.
    error : DemError
        Its error and the draw.
    quantity : callable
        Given a ground, returns a number or an array, always of the same shape; NaN where it
        cannot be told.
    angle : bool
        It is a direction in degrees.
    progress : callable, optional
        Told how many realisations are done.

    Returns
    -------
    Spread

    Raises
    ------
    SettingError
        A range too long for the raster, or a quantity that changes its shape.

    Examples
    --------
    >>> import numpy as np
    >>> flat = Elevation.from_array(np.zeros((50, 50)), (10, 0, 5e5, 0, -10, 5.2e6), "EPSG:32632")
    >>> found = propagate(flat, DemError(0.5, 0.0), lambda ground: ground.heights.mean())
    >>> bool(0.005 < found.standard_error < 0.02)  # about 0.5 m / sqrt(2500)
    True
    """
    named, angles = (lambda ground: {"": quantity(ground)}), ([""] if angle else [])
    return propagate_all(elevation, error, named, angles=angles, progress=progress)[""]


def propagate_all(
    elevation: Elevation,
    error: DemError,
    quantities: Callable[[Elevation], Mapping[str, ArrayLike]],
    *,
    angles: Collection[str] = (),
    progress: Told | None = None,
) -> dict[str, Spread]:
    """Find what the error of the heights leaves open about several quantities at once.

    Parameters
    ----------
    elevation, error, progress
        See `propagate`.
    quantities : callable
        Given a ground, returns numbers or arrays by name, always the same.
    angles : collection of str
        Which of them are directions in degrees.

    Returns
    -------
    dict of Spread
        By name.

    Raises
    ------
    SettingError
        A range too long for the raster, or a quantity that changes its shape.
    """
    tallies = {
        name: SpreadTally(values, name in angles) for name, values in quantities(elevation).items()
    }
    for done, ground in enumerate(likely_grounds(elevation, error), 1):
        for name, values in quantities(ground).items():
            if np.shape(values) != tallies[name].estimate.shape:
                raise SettingError(
                    f"the quantity '{name}' changes its shape from one realisation to another"
                )
            tallies[name].add(values)
        if progress is not None:
            progress(done)
    return {name: tally.spread() for name, tally in tallies.items()}


def doubts_of_error(elevation: Elevation, error: DemError | None) -> tuple[str, ...]:
    """Say where a stated error contradicts the ground; nothing if no error is stated.

    Parameters
    ----------
    elevation : Elevation
        The ground as it is known.
    error : DemError or None
        Its error.

    Returns
    -------
    tuple of str
        What a careful reader should know.
    """
    if error is None:
        return ()
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    said = too_smooth(elevation.heights, error, frame.cell_size)
    return () if said is None else (said,)


def with_tables(plan: Plan, error: DemError, threads: int | None = None) -> Plan:
    """Make a plan's sun tables once, for all realisations of its ground.

    Parameters
    ----------
    plan : Plan
        Of the ground as it is known.
    error : DemError
        Its error.
    threads : int, optional
        Default: as many as there are cores to use.

    Returns
    -------
    Plan
        The same, with tables that reach HEADROOM above and below the ground; without light, the
        plan itself.
    """
    if plan.settings is None or plan.tables is not None:
        return plan
    tables = empty_tables(plan, HEADROOM * error.rmse)
    for _ in carry_out(tables.tasks, default_threads() if threads is None else threads):
        pass
    return replace(plan, tables=tables)


def moved(plan: Plan, elevation: Elevation) -> Plan:
    """Move a plan to another realisation of its ground.

    Parameters
    ----------
    plan : Plan
        Of the ground as it is known.
    elevation : Elevation
        Another realisation of it, from `realisations` or `likely_grounds`.

    Returns
    -------
    Plan
        The same work. What stands on the ground goes up and down with it, a larger model around
        it does not.
    """
    return replace(plan, elevation=elevation, scene=_moved_scene(plan, elevation))


def _moved_scene(plan: Plan, elevation: Elevation) -> Scene:
    """What stands on the ground, raised by the error below it."""
    scene = plan.scene
    if scene.obstacles is None:
        return scene
    field = elevation.heights - plan.elevation.heights
    field[np.isnan(field)] = 0.0
    old, margin = scene.obstacles, scene.obstacles.margin

    def raised(heights: NDArray[np.float32]) -> NDArray[np.float32]:
        heights = heights.copy()
        inner = slice(margin, -margin) if margin else slice(None)
        heights[inner, inner] += field
        return heights

    heights = raised(old.heights)
    eyes = heights if old.eyes is old.heights else raised(old.eyes)
    return replace(scene, obstacles=Obstacles(heights, eyes, margin))
