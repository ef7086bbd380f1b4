"""Options on what stands beyond and above the raster's ground. Nothing here is slow to import."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, fields, replace
from functools import wraps
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from terrasol.ground.beyond import Scene
    from terrasol.ground.elevation import Elevation
    from terrasol.ground.frame import Frame


@dataclass(frozen=True)
class Around:
    """What a command is told of the ground beyond and above.

    Parameters
    ----------
    far, surface : str or None
        Rasters of the larger model and of the surface model.
    far_unit, surface_unit : str or None
        Units of their heights.
    horizon_gap : bool
        Write the bound on what unknown ground could hide.
    highest : float or None
        How high unknown ground could be [m].
    """

    far: str | None
    far_unit: str | None
    surface: str | None
    surface_unit: str | None
    horizon_gap: bool
    highest: float | None

    @property
    def inputs(self) -> tuple[str, ...]:
        """Rasters that are read."""
        return tuple(name for name in (self.far, self.surface) if name)

    def refuse_map(self) -> None:
        """Refuse the map of the horizon's gap, for a command that draws none.

        Raises
        ------
        click.UsageError
            It is asked for.
        """
        if self.horizon_gap or self.highest is not None:
            raise click.UsageError("--horizon-gap belongs to terrasol irradiation: it is a map")

    def record(self) -> dict[str, Any]:
        """What was given, ready for JSON: files with their hashes; nothing if nothing was."""
        from terrasol.files.provenance import sha256

        told: dict[str, Any] = {}
        for name, path in (("far", self.far), ("surface", self.surface)):
            if path:
                whole = os.path.isfile(path)
                told[name] = {
                    "file": os.path.abspath(path) if whole else path,
                    "sha256": sha256(path) if whole else None,
                }
        if self.horizon_gap:
            told["horizon_gap"] = True
        return told

    def scene(self, elevation: Elevation, frame: Frame) -> Scene:
        """Read what was given and put it together."""
        from terrasol.ground.above import surface_heights
        from terrasol.ground.beyond import far_ground, make_scene

        if self.highest is not None and not self.horizon_gap:
            raise click.UsageError("--highest belongs to --horizon-gap, which is not asked for")
        far = surface = None
        for path, unit, option in (
            (self.far, self.far_unit, "far"),
            (self.surface, self.surface_unit, "surface"),
        ):
            if path is None:
                if unit:
                    raise click.UsageError(f"--{option}-unit belongs to --{option}")
                continue
            with _told_of(path, option):
                model = _read(path, unit, option)
                if option == "far":
                    far = far_ground(elevation, model)
                else:
                    surface = surface_heights(elevation, model)
        return make_scene(
            elevation,
            frame,
            far=far,
            surface=surface,
            horizon_gap=self.horizon_gap,
            highest=self.highest,
        )


def _read(path: str, unit: str | None, option: str) -> Elevation:
    """Read a raster; what the reader notes is told with the option's own name."""
    from terrasol.files.rasters import read_elevation

    model = read_elevation(path, vertical_unit=unit)
    notes = tuple(note.replace("--vertical-unit", f"--{option}-unit") for note in model.warnings)
    return replace(model, warnings=notes)


@contextmanager
def _told_of(path: str, option: str) -> Iterator[None]:
    """Put the file's name before what is wrong with it, and the option's for its unit."""
    from terrasol.errors import InputError

    try:
        yield
    except InputError as error:
        words = str(error).replace("--vertical-unit", f"--{option}-unit")
        raise InputError(words if words.startswith(path) else f"{path}: {words}") from error


_UNIT = click.Choice(["metre", "foot", "us-foot"])
_OPTIONS = (
    click.option(
        "--far",
        metavar="DEM",
        help="A larger, coarser elevation raster, in any CRS: ridges beyond the edge of DEM and in"
        " its voids hide the sun too.",
    ),
    click.option("--far-unit", type=_UNIT, help="Unit of its heights. [default: as for DEM]"),
    click.option(
        "--surface",
        metavar="DSM",
        help="A surface model over the bare ground DEM: trees and buildings hide the sun, slope and"
        " aspect stay those of DEM.",
    ),
    click.option("--surface-unit", type=_UNIT, help="Unit of its heights. [default: as for DEM]"),
    click.option(
        "--horizon-gap",
        is_flag=True,
        help="Write also horizon_gap.tif: what ground outside all data could hide at most.",
    ),
    click.option(
        "--highest",
        metavar="METRES",
        type=float,
        help="Highest ground there could be outside the data. [default: the highest in it, a"
        " quarter of its relief and 100 m]",
    ),
)


def ground_options(command: Callable[..., None]) -> Callable[..., None]:
    """Give a command these options, as one `Around` by the name `around`."""

    @wraps(command)
    def gathered(*arguments: Any, **given: Any) -> None:
        around = Around(**{field.name: given.pop(field.name) for field in fields(Around)})
        command(*arguments, around=around, **given)

    for decorate in reversed(_OPTIONS):
        gathered = decorate(gathered)
    return gathered
