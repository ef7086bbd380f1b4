"""Options that several commands share. Nothing here is slow to import."""

from __future__ import annotations

import os
from collections.abc import Callable
from dataclasses import dataclass, fields
from functools import wraps
from typing import Any

import click

from terrasol.constants import REFRACTION_COEFFICIENT

MOST_THREADS = 1024
"""More would cost memory and no machine of today has as many cores (judgement, no source)."""


@dataclass(frozen=True)
class Common:
    """What every command is told.

    Parameters
    ----------
    dem, out_dir : str
        The elevation raster and the output folder.
    vertical_unit, fill_voids
        See `terrasol.read_elevation`.
    azimuths : int
        Number of horizon azimuths.
    refraction : float
        Coefficient of terrestrial refraction.
    threads : int or None
        None for all cores.
    compression : str
        How files are packed.
    overwrite, quiet, dry_run, as_json : bool
        Replace files; say nothing; write nothing; one JSON object on stdout.
    """

    dem: str
    out_dir: str
    vertical_unit: str | None
    fill_voids: int
    azimuths: int
    refraction: float
    threads: int | None
    compression: str
    overwrite: bool
    quiet: bool
    dry_run: bool
    as_json: bool


class Numbers(click.ParamType):
    """One number, or twelve joined by commas, January first; a word may be allowed too."""

    name = "numbers"

    def __init__(self, word: str | None = None, *, raster: bool = False) -> None:
        self.word = word
        self.raster = raster

    def get_metavar(self, param: click.Parameter, ctx: click.Context) -> str:
        """Name in the help."""
        word = [self.word] if self.word else []
        return "|".join([*word, "NUMBER", "12 NUMBERS", *(["RASTER"] if self.raster else [])])

    def convert(self, value: Any, param: Any, ctx: Any) -> Any:
        """Read the text."""
        if not isinstance(value, str) or value == self.word:
            return value
        try:
            numbers = tuple(float(part) for part in value.split(","))
        except ValueError:
            numbers = ()
        if not numbers and self.raster and ("." in value or os.path.exists(value)):
            return value
        if len(numbers) not in (1, 12):
            either = f"'{self.word}', " if self.word else ""
            self.fail(f"'{value}' is not {either}one number or twelve joined by commas", param, ctx)
        return numbers


class Name(click.ParamType):
    """A name of a file or folder, which may not be empty: that would mean the current folder."""

    name = "name"

    def convert(self, value: Any, param: Any, ctx: Any) -> Any:
        """Refuse nothing."""
        return value or self.fail("the name is empty (an unset variable, perhaps)", param, ctx)


period_option = click.option(
    "--period",
    metavar="TEXT",
    help="A year (2025), month (2025-04), day (2025-04-01), or a first and a last one:"
    " 2025-04-01/2025-10-31. [default: a typical year]",
)
"""What a sum is of."""

diffuse_option = click.option(
    "--diffuse",
    type=click.Choice(["perez", "hay-davies", "isotropic"]),
    default="perez",
    show_default=True,
    help="Model that parts the diffuse light.",
)
"""How the sky's diffuse light is spread over its dome."""

clock_option = click.option(
    "--clock",
    metavar="solar|+HH:MM|ZONE",
    default="solar",
    show_default=True,
    help="Time of day of first and last sun: true solar time, an offset from UTC, or a time zone"
    " such as Europe/Zurich.",
)
"""What the time of day is told in."""

step_option = click.option(
    "--step-seconds",
    metavar="S",
    type=float,
    default=60.0,
    show_default=True,
    help="Time step of the sun; divides a day.",
)
"""How finely a period is summed."""

substep_option = click.option(
    "--substep-seconds",
    metavar="S",
    type=float,
    default=300.0,
    show_default=True,
    help="Spacing of the moments that make a step; divides an hour.",
)
"""How finely a step of a series is summed."""

horizon_store_option = click.option(
    "--horizon-store",
    metavar="DIR",
    type=Name(),
    help="Folder in which horizons are kept, and found again for the same ground."
    " [default: TERRASOL_HORIZON_STORE, else the user's cache folder]",
)
"""Where horizons are kept from run to run."""

no_store_option = click.option(
    "--no-horizon-store", is_flag=True, help="Keep no horizons after the run."
)
"""Or not."""

_ARGUMENTS = (
    click.argument("dem", type=Name()),
    click.argument("out_dir", type=Name()),
)
_OPTIONS = (
    click.option(
        "--vertical-unit",
        type=click.Choice(["metre", "foot", "us-foot"]),
        help="Unit of the heights. [default: as the file says, else metre; needed where the file"
        " says none and x and y are in feet]",
    ),
    click.option(
        "--fill-voids",
        metavar="CELLS",
        type=click.IntRange(min=0),
        default=0,
        show_default=True,
        help="Interpolate voids of up to this many connected cells.",
    ),
    click.option(
        "--azimuths",
        metavar="N",
        type=int,
        default=64,
        show_default=True,
        help="Number of horizon azimuths: a multiple of 4 from 8 to 720.",
    ),
    click.option(
        "--refraction",
        metavar="K",
        type=float,
        default=REFRACTION_COEFFICIENT,
        show_default=True,
        help="Coefficient of terrestrial refraction of lines of sight.",
    ),
    click.option(
        "--threads",
        metavar="N",
        type=click.IntRange(1, MOST_THREADS),
        help="Cores to use. [default: all]",
    ),
    click.option(
        "--compression",
        type=click.Choice(["zstd", "deflate"]),
        default="zstd",
        show_default=True,
        help="How the GeoTIFFs are packed; deflate is slower and read by more software.",
    ),
    click.option(
        "--overwrite",
        is_flag=True,
        help="Replace files that are there, and remove those of an earlier run in OUT_DIR that this"
        " one does not write.",
    ),
    click.option(
        "--quiet", is_flag=True, help="Say nothing but errors and what --json or --dry-run ask for."
    ),
    click.option(
        "--dry-run",
        is_flag=True,
        help="Check the input, print what would be done and what it costs, write nothing.",
    ),
    click.option(
        "--json",
        "as_json",
        is_flag=True,
        help="Print one JSON object on stdout in place of the summary on stderr.",
    ),
)


def arguments_in_order(command: click.Command, *names: str) -> None:
    """Put a command's arguments first, in the order of these names; options stay in theirs."""
    command.params.sort(
        key=lambda each: names.index(each.name) if each.name in names else len(names)
    )


def common_options(command: Callable[..., None]) -> Callable[..., None]:
    """Give a command the shared arguments and options, as one `Common` before its own."""

    @wraps(command)
    def gathered(**given: Any) -> None:
        common = Common(**{field.name: given.pop(field.name) for field in fields(Common)})
        command(common, **given)

    for decorate in reversed((*_ARGUMENTS, *_OPTIONS)):
        gathered = decorate(gathered)
    return gathered
