"""`terrasol plots`: predictors of light and heat for ecological plots."""

from __future__ import annotations

import re
from copy import copy
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import click

from terrasol.cli.ground_options import Around, ground_options
from terrasol.cli.irradiation import irradiation
from terrasol.cli.options import (
    Common,
    Name,
    arguments_in_order,
    clock_option,
    common_options,
    period_option,
)
from terrasol.cli.series import Words
from terrasol.cli.sky_options import ALBEDO_FOR_NOW, AskedSky, sky_options
from terrasol.constants import ENERGY_UNITS, PHOTONS_PER_JOULE

if TYPE_CHECKING:
    from terrasol.engine.plot_settings import PlotSettings
    from terrasol.files.points import Points


GROUPS = (
    "height", "slope", "aspect", "transforms", "heat_load", "sky_view", "irradiation",
    "irradiation_months", "photosynthetic", "photosynthetic_months", "sun_hours",
    "sun_hours_months", "first_last_sun",
)  # fmt: skip
"""As in the library, which is not loaded to tell them."""

AS_IRRADIATION = ("albedo", "diffuse", "step_seconds", "unit", "basis", "photons_per_joule")
"""Options that are those of `terrasol irradiation`."""

NOT_HERE = ("compression", "horizon_gap", "highest")
"""Shared options that mean nothing for plots: kept out of the help, and refused."""


class Lengths(click.ParamType):
    """Lengths in metres joined by commas, or none; with `times`, also multiples such as 4x."""

    name = "lengths"

    def __init__(self, times: bool = False) -> None:
        self.times = times

    def get_metavar(self, param: click.Parameter, ctx: click.Context) -> str:
        """Name in the help."""
        return "METRES|4x,...|none" if self.times else "METRES,...|none"

    def convert(self, value: Any, param: Any, ctx: Any) -> Any:
        """Read the text: a tuple of texts such as 40 and 4x."""
        if not isinstance(value, str):
            return value
        if value.strip() == "none":
            return ()
        parts = tuple(part.strip() for part in value.split(","))
        form = r"\d+(\.\d+)?x?" if self.times else r"\d+(\.\d+)?"
        for part in parts:
            if not re.fullmatch(form, part, flags=re.ASCII) or not float(part.rstrip("x")) > 0.0:
                what = "lengths in metres or multiples such as 4x" if self.times else "lengths"
                self.fail(f"'{value}' is not {what}, joined by commas, nor none", param, ctx)
        return parts


@click.command(short_help="Predictors of light and heat for ecological plots.")
@click.argument("plots_file", metavar="PLOTS", type=Name())
@click.option("--layer", metavar="NAME", help="Layer of a vector file that has several.")
@click.option("--id", "id_column", metavar="COLUMN", help="Column that names the plots.")
@click.option("--x", "x_column", metavar="COLUMN", help="Column of x or longitude.")
@click.option("--y", "y_column", metavar="COLUMN", help="Column of y or latitude.")
@click.option(
    "--plots-crs",
    metavar="CRS",
    help="CRS of the coordinates, such as EPSG:32632. [default: as a vector file says; of columns"
    " named longitude and latitude, or lon and lat, WGS 84]",
)
@click.option(
    "--gps-error",
    metavar="METRES",
    type=float,
    help="Root mean square error of the positions, both directions together, where the file has"
    " none.",
)
@click.option(
    "--gps-error-column",
    metavar="COLUMN",
    help="Column of that error, in metres. [default: gps_error_m, if there is one]",
)
@click.option(
    "--radii",
    type=Lengths(),
    default="50,100",
    show_default=True,
    help="Circles around the plots, for mean, least and greatest.",
)
@click.option(
    "--grains",
    type=Lengths(times=True),
    default="none",
    show_default=True,
    help="Coarser cell sizes at which all is repeated: metres, or multiples of the raster's cell.",
)
@click.option(
    "--season",
    metavar="MM-MM",
    help="Months of the growing season. [default: 04-10, south of the equator 10-04]",
)
@click.option(
    "--predictors",
    "groups",
    type=Words(GROUPS),
    default=",".join(GROUPS),
    help=f"Some of {', '.join(GROUPS)}, joined by commas. [default: all]",
)
@click.option(
    "--response",
    metavar="COLUMN",
    help="Measured column of PLOTS with which the predictors are correlated, scale by scale.",
)
@click.option("--long", "as_long", is_flag=True, help="Write also plots_long.csv, one value a row.")
@click.option(
    "--horizons",
    is_flag=True,
    help="Write also horizons.csv and horizons.png, the horizon of each plot's cell.",
)
@period_option
@clock_option
@sky_options
@ground_options
@common_options
def plots(common: Common, around: Around, asked: AskedSky, **given: Any) -> None:
    """Predictors of light and heat for the plots in PLOTS, from the elevation raster DEM.

    PLOTS is a table (.csv, .tsv, .txt) or a vector file of points. Each plot gets the value of
    its cell and at the point, the spread from its position's error, and mean, least and greatest
    within circles, at the raster's cells and at coarser ones. Writes plots.csv, plots.parquet
    (GeoParquet), columns.csv (what each column is), correlations.csv, predictors.png, methods.md
    (a paragraph with references) and run.json into OUT_DIR.
    """
    from terrasol.cli.plot_job import PlotJob
    from terrasol.cli.run import read

    _check(around, given)
    settings = _settings(common, asked, given)
    points = _points(given)
    ground = read(common)
    PlotJob(common, around, asked, given, ground, points, settings).run()


def _check(around: Around, given: dict[str, Any]) -> None:
    """Refuse options that do not go together, or mean nothing here."""
    around.refuse_map()
    error = given["gps_error"]
    if error is not None and not 0.0 <= error < 1e6:
        raise click.UsageError(f"--gps-error must be 0 m or more; got {error:g}")
    if (given["x_column"] is None) != (given["y_column"] is None):
        raise click.UsageError("--x and --y go together: name both columns or neither")


def _rearrange(command: click.Command) -> None:
    """Put arguments and options in order, and say of shared ones what is different here."""
    shared = [copy(option) for option in irradiation.params if option.name in AS_IRRADIATION]
    after = [option.name for option in command.params].index("clock")
    command.params[after:after] = shared
    arguments_in_order(command, "dem", "plots_file", "out_dir")
    for option in command.params:
        if not isinstance(option, click.Option):
            continue
        if option.name == "period":
            option.help = (
                "A year (2025), or twelve months in a row (2024-10/2025-09). [default: a typical"
                " year]"
            )
        elif option.name == "azimuths":
            option.help = (
                "Number of horizon azimuths for energy: a multiple of 4 from 8 to 720; hours of sun"
                " take four times as many."
            )
        elif option.name in NOT_HERE:
            option.hidden = True


_rearrange(plots)


def _settings(common: Common, asked: AskedSky, given: dict[str, Any]) -> PlotSettings:
    """Everything that can be settled before the raster is read."""
    from terrasol.engine.plot_settings import PlotSettings, hours_azimuths
    from terrasol.light.days import parse_clock, parse_days
    from terrasol.light.hours import HoursSettings
    from terrasol.light.settings import LightSettings, twelve
    from terrasol.practice.season import parse_season
    from terrasol.sky.period import parse_period

    period = parse_period(given["period"])
    albedo = ALBEDO_FOR_NOW if isinstance(given["albedo"], str) else given["albedo"]
    air = asked.air(albedo)
    light = LightSettings(
        period=period,
        air=air,
        albedo=twelve(albedo, "albedo"),
        diffuse=given["diffuse"],
        azimuths=common.azimuths,
        step_seconds=given["step_seconds"],
        unit=ENERGY_UNITS.get(given["unit"], given["unit"]),
        basis=given["basis"],
        monthly_parts=True,
        refraction=common.refraction,
        photons_per_joule=given["photons_per_joule"] or PHOTONS_PER_JOULE,
    )
    hours = HoursSettings(
        period=period,
        sky=air,
        days=parse_days(None, period),
        clock=parse_clock(given["clock"]),
        azimuths=hours_azimuths(common.azimuths),
        step_seconds=given["step_seconds"],
        refraction=common.refraction,
    )
    season = parse_season(given["season"]) if given["season"] else ()
    radii = tuple(sorted({float(radius) for radius in given["radii"]}))
    return PlotSettings(light, hours, season, radii, groups=given["groups"])


def _points(given: dict[str, Any]) -> Points:
    """The plots as read."""
    import numpy as np

    from terrasol.files.points import read_points

    points = read_points(
        given["plots_file"],
        layer=given["layer"],
        crs=given["plots_crs"],
        id_column=given["id_column"],
        x_column=given["x_column"],
        y_column=given["y_column"],
        error_column=given["gps_error_column"],
    )
    if given["gps_error"] is None:
        return points
    return replace(points, error=np.where(np.isnan(points.error), given["gps_error"], points.error))
