"""`terrasol plots`: predictors of light and heat for ecological plots."""

from __future__ import annotations

import os
import re
import time
from copy import copy
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import click

from terrasol.cli.ground_options import Around, ground_options
from terrasol.cli.irradiation import ALBEDO_FOR_NOW, irradiation, light_record
from terrasol.cli.options import Common, Name, Numbers, common_options, period_option
from terrasol.cli.series import Words
from terrasol.cli.sky_options import CLIMATOLOGY, AskedSky, file_record, sky_options
from terrasol.constants import ENERGY_UNITS, PHOTONS_PER_JOULE
from terrasol.errors import SettingError, counted

if TYPE_CHECKING:
    from terrasol.cli.run import Ground
    from terrasol.engine.plot_places import Located
    from terrasol.engine.plot_settings import PlotSettings
    from terrasol.engine.plot_table import PlotTable
    from terrasol.files.points import Points
    from terrasol.ground.beyond import Scene

TABLE, PARQUET, DICTIONARY = "plots.csv", "plots.parquet", "columns.csv"
LONG, CORRELATIONS = "plots_long.csv", "correlations.csv"
PICTURE, METHODS = "predictors.png", "methods.md"
HORIZONS, SKYLINES = "horizons.csv", "horizons.png"

LONG_PARTS = 200
"""Columns of the table that are turned into rows at a time."""

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
@click.option("--long", "as_long", is_flag=True, help=f"Write also {LONG}, one value a row.")
@click.option(
    "--horizons",
    is_flag=True,
    help=f"Write also {HORIZONS} and {SKYLINES}, the horizon of each plot's cell.",
)
@period_option
@click.option(
    "--clock",
    metavar="solar|+HH:MM|ZONE",
    default="solar",
    show_default=True,
    help="Time of day of first and last sun: true solar time, an offset from UTC, or a time zone"
    " such as Europe/Zurich.",
)
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
    from terrasol.cli.run import read

    _check(around, given)
    settings = _settings(common, asked, given)
    points = _points(given)
    ground = read(common)
    _Job(common, around, asked, given, ground, points, settings).run()


def _check(around: Around, given: dict[str, Any]) -> None:
    """Refuse options that do not go together, or mean nothing here."""
    if around.horizon_gap or around.highest is not None:
        raise click.UsageError("--horizon-gap belongs to terrasol irradiation: it is a map")
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
    order = ("dem", "plots_file", "out_dir")
    command.params.sort(
        key=lambda each: order.index(each.name) if each.name in order else len(order)
    )
    for option in command.params:
        if not isinstance(option, click.Option):
            continue
        if option.name == "albedo":
            option.type = Numbers("station")
            option.help = "Albedo of the ground: numbers, or 'station' for what SERIES measured."
        elif option.name == "clear_sky_index":
            option.type = Numbers()
            option.help = "Monthly mean of global light by that of a clear sky, for clouds."
        elif option.name == "period":
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


@dataclass(frozen=True)
class _Job:
    """The command as resolved."""

    common: Common
    around: Around
    asked: AskedSky
    given: dict[str, Any]
    ground: Ground
    points: Points
    settings: PlotSettings

    @property
    def names(self) -> list[str]:
        """Files to write, the record last."""
        from terrasol.files.delivery import RECORD

        long = [LONG] if self.given["as_long"] else []
        seen = [HORIZONS, SKYLINES] if self.given["horizons"] else []
        return [TABLE, PARQUET, DICTIONARY, *long, CORRELATIONS, PICTURE, *seen, METHODS, RECORD]

    @property
    def inputs(self) -> list[str]:
        """All files that are read."""
        asked = self.asked
        files = (
            self.common.dem, self.given["plots_file"], *self.around.inputs, asked.station,
            asked.station_settings,
        )  # fmt: skip
        return [name for name in files if name]

    def run(self) -> None:
        """Carry it out, or only tell of it."""
        from terrasol.cli.forecast import give_forecast
        from terrasol.cli.run import check_places, tell
        from terrasol.engine.plot_places import locate
        from terrasol.files.rasters import naming

        common, elevation = self.common, self.ground.elevation
        check_places(common, self.names, self.inputs)
        with naming(self.given["plots_file"]):
            located = locate(self.points, elevation)
        self._check_response()
        if common.dry_run:
            give_forecast(common, self._forecast(located), _in_lines)
            return
        tell(common, self._carry_out(), _summary_text)

    def _check_response(self) -> None:
        """Refuse a measured column that the plots have not."""
        response, columns = self.given["response"], list(map(str, self.points.attributes.columns))
        if response is not None and response not in columns:
            from terrasol.files.vectors import word_list

            known = word_list(columns) if columns else "none"
            raise SettingError(f"--response {response}: PLOTS has no such column; it has {known}")

    def _factors(self) -> tuple[tuple[int, ...], list[str]]:
        """Cells joined along a side for each cell size, and warnings."""
        from terrasol.engine.plots import grain_sizes

        own = grain_sizes(self.ground.elevation, (1,))[0]
        factors, said = {1}, []
        for text in self.given["grains"]:
            wanted = float(text.rstrip("x")) * (own if text.endswith("x") else 1.0)
            factor = max(round(wanted / own), 1)
            if abs(factor * own / wanted - 1.0) > 0.05:
                said.append(
                    f"cells of {wanted:.4g} m are no whole multiple of the raster's {own:.4g} m:"
                    f" {factor * own:.4g} m is taken"
                )
            factors.add(factor)
        return tuple(sorted(factors)), said

    def _forecast(self, located: Located) -> dict[str, Any]:
        """What would be told, of which plots, and at what cost."""
        from terrasol.cli.forecast import ground_forecast
        from terrasol.cli.run import superseded
        from terrasol.engine.plan import default_threads
        from terrasol.engine.plots import column_count, forecast_seconds, grain_sizes

        common, elevation = self.common, self.ground.elevation
        settings, _, said = self._settled()
        removed, notes = superseded(common, self.names)
        threads = common.threads or default_threads()
        return ground_forecast(common, self.ground) | {
            "plots": len(self.points),
            "plots_crs": self.points.crs.name,
            "plots_on_ground": int((located.flag == "ok").sum()),
            "cells_m": [round(size, 3) for size in grain_sizes(elevation, settings.factors)],
            "radii_m": list(settings.radii),
            "columns_of_predictors": column_count(self.points, settings),
            "files": self.names,
            "remarks": list(self.points.remarks),
            "removed": removed,
            "threads": threads,
            "seconds": round(forecast_seconds(elevation, located, settings, threads)),
            "warnings": [
                *elevation.warnings, *self.points.warnings, *located.warnings, *said, *notes,
            ],
        }  # fmt: skip

    def _carry_out(self) -> dict[str, Any]:
        """Compute and write everything, or leave nothing behind: the record."""
        from terrasol.cli.progress import progress_bar
        from terrasol.cli.run import announce_compilation, superseded
        from terrasol.engine.plan import default_threads
        from terrasol.files.delivery import RECORD, Delivery
        from terrasol.files.provenance import run_record

        common, start = self.common, time.perf_counter()
        settings, settled, notes = self._settled()
        threads = common.threads or default_threads()
        record = run_record("plots", common.dem, self._record(settings) | settled.record)
        delivery = Delivery(common.out_dir, self.names, overwrite=common.overwrite)
        with delivery, progress_bar(common.quiet) as move:
            announce_compilation(common.quiet)
            scenes = self._scenes(settings)
            table = self._table(settings, scenes, threads, move)
            move(0.88, "horizons and files")
            self._write(delivery, table, settings, settled)
            if self.given["horizons"]:
                self._write_horizons(delivery, table, settings, scenes[0], threads)
            removed, more = superseded(common, self.names)
            record |= {
                "threads": threads,
                "results": _results(table, self.given["response"], self.points.remarks),
                "warnings": [*table.warnings, *notes, *more],
                "seconds": {
                    "reading": round(self.ground.seconds, 2),
                    **table.seconds,
                    "whole run": round(self.ground.seconds + time.perf_counter() - start, 2),
                },
                "files": [os.path.abspath(delivery.folder / name) for name in self.names],
                "removed": removed,
            }
            delivery.write_json(RECORD, record)
            delivery.commit(removed)
            move(1.0, "done")
        return record

    def _settled(self) -> tuple[PlotSettings, Any, list[str]]:
        """Settings with what the raster and the station had to say, and warnings."""
        from terrasol.practice.season import growing_season

        asked, given, elevation = self.asked, self.given, self.ground.elevation
        frame, light = self.ground.frame, self.settings.light
        air = asked.placed(light.air, frame)
        settled = asked.settle(air, given["period"], light.step_seconds, elevation)
        light = replace(light, air=air, period=settled.period, sky=settled.sky)
        if given["albedo"] == "station":
            light = replace(light, albedo=settled.albedo())
        from terrasol.light.days import parse_days

        hours = replace(
            self.settings.hours,
            period=settled.period,
            sky=settled.sky or air,
            days=parse_days(None, settled.period),
        )
        factors, said = self._factors()
        season = self.settings.season or growing_season(frame.centre[0])
        settings = replace(self.settings, light=light, hours=hours, season=season, factors=factors)
        return settings, settled, [*asked.doubts(frame), *settled.warnings, *said]

    def _scenes(self, settings: PlotSettings) -> list[Scene]:
        """What stands beyond and above the ground, for each cell size."""
        from terrasol.ground.frame import make_frame
        from terrasol.ground.grain import coarsened

        grounds = [coarsened(self.ground.elevation, factor) for factor in settings.factors]
        frames = [make_frame(each.shape, each.transform, each.crs) for each in grounds]
        return [self.around.scene(*pair) for pair in zip(grounds, frames, strict=True)]

    def _table(
        self, settings: PlotSettings, scenes: list[Scene], threads: int, move: Any
    ) -> PlotTable:
        """The predictors."""
        from terrasol.engine.plots import plot_table
        from terrasol.files.rasters import naming

        with naming(self.common.dem):
            return plot_table(
                self.ground.elevation, self.points, settings, scenes, threads,
                lambda share, stage: move(0.88 * share, stage),
            )  # fmt: skip

    def _record(self, settings: PlotSettings) -> dict[str, Any]:
        """Settings as plain text and numbers."""
        given = self.given
        return {
            "plots": file_record(given["plots_file"]),
            "plots_crs": self.points.crs.to_string(),
            "season_months": list(settings.season),
            "radii_m": list(settings.radii),
            "cells_joined": list(settings.factors),
            "predictors": list(settings.groups),
            "response": given["response"],
            "gps_error_m": given["gps_error"],
            "light": light_record(settings.light),
            "hours": {
                "azimuths": settings.hours.azimuths,
                "clock": settings.hours.clock.name,
                "days": [str(day) for day in settings.hours.days],
            },
            "vertical_unit": self.ground.unit,
            "fill_voids": self.common.fill_voids,
        } | self.around.record()

    def _write(self, delivery: Any, table: PlotTable, settings: PlotSettings, settled: Any) -> None:
        """Stage all files but the record."""
        from terrasol.engine.plot_correlations import pairs
        from terrasol.engine.plot_methods import methods_text
        from terrasol.files.plot_tables import csv_bytes, geoparquet_bytes
        from terrasol.show.plots import predictors_png

        response = self.given["response"]
        delivery.write_bytes(TABLE, csv_bytes(table.frame))
        delivery.write_bytes(PARQUET, geoparquet_bytes(table.frame))
        delivery.write_bytes(DICTIONARY, csv_bytes(table.dictionary()))
        if self.given["as_long"]:
            _write_long(delivery, table)
        delivery.write_bytes(CORRELATIONS, csv_bytes(pairs(table, response)))
        title = f"Predictors for {_stem(self.given['plots_file'])}"
        delivery.write_bytes(PICTURE, predictors_png(table, title=title, response=response))
        text = methods_text(table, settings, self._account(table, settled))
        delivery.write_bytes(METHODS, text.encode())

    def _write_horizons(
        self, delivery: Any, table: PlotTable, settings: PlotSettings, scene: Scene, threads: int
    ) -> None:
        """Stage the horizons, as a table and as a picture."""
        from terrasol.engine.plot_horizons import horizon_table, plot_horizons
        from terrasol.engine.plot_places import locate
        from terrasol.files.plot_tables import csv_bytes
        from terrasol.show.plot_horizons import horizons_png

        elevation, azimuths = self.ground.elevation, settings.hours.azimuths
        located = locate(self.points, elevation)
        found = plot_horizons(elevation, located, azimuths, self.common.refraction, scene, threads)
        delivery.write_bytes(HORIZONS, csv_bytes(horizon_table(self.points.names, found)))
        title = f"Horizons of {_stem(self.given['plots_file'])}"
        delivery.write_bytes(SKYLINES, horizons_png(table, found, title=title))

    def _account(self, table: PlotTable, settled: Any) -> Any:
        """What the paragraph on methods tells besides the settings."""
        from terrasol.engine.plot_methods import Account

        around, station = self.around, settled.station
        return Account(
            dem=f"{os.path.basename(self.common.dem)} ({self.ground.elevation.crs.name})",
            plots=int((table.frame["flag"] == "ok").sum()),
            climatology=self.asked.model == "ineichen" and self.asked.linke == CLIMATOLOGY,
            station=station.name if station else "",
            decomposition=(self.asked.decomposition or "dirint") if station else "",
            far=os.path.basename(around.far) if around.far else "",
            surface=os.path.basename(around.surface) if around.surface else "",
        )


def _write_long(delivery: Any, table: PlotTable) -> None:
    """Stage the table with one value a row, some columns at a time."""
    from terrasol.engine.plot_table import long_form, predictor_columns
    from terrasol.files.plot_tables import write_parts

    columns = predictor_columns(table)
    parts = (
        long_form(table, columns[first : first + LONG_PARTS])
        for first in range(0, len(columns), LONG_PARTS)
    )
    try:
        write_parts(delivery.staged(LONG), parts)
    except OSError as error:
        raise delivery.refusal(LONG, error) from error


def _stem(path: str) -> str:
    """A file's name without folder and ending."""
    return os.path.splitext(os.path.basename(path))[0]


def _results(table: PlotTable, response: str | None, remarks: tuple[str, ...]) -> dict[str, Any]:
    """What came out, in numbers."""
    from terrasol.engine.plot_correlations import best_by_chance, strongest

    flags = table.frame["flag"]
    found = {
        "plots": len(table.frame),
        "flags": {str(k): int(v) for k, v in flags.value_counts().items()},
        "predictors": len(table.predictors()),
        "columns": len(table.columns),
        "cells_m": [round(size, 3) for size in table.cells],
        "level_ground": table.level,
        "remarks": list(remarks),
    }
    if response is not None:
        found["strongest_with_response"] = strongest(table, response)
        found["strongest_by_chance"] = best_by_chance(table, response)
    return found


def _in_lines(f: dict[str, Any]) -> str:
    """The forecast for people."""
    from terrasol.cli.forecast import duration, grid_line, heights_line, lines

    cells = ", ".join(f"{size:.4g} m" for size in f["cells_m"])
    radii = ", ".join(f"{radius:g} m" for radius in f["radii_m"]) or "none"
    rows = [
        ("input", f["input"]),
        ("CRS", f["crs"]),
        grid_line(f),
        heights_line(f),
        ("plots", f"{f['plots']} in {f['plots_crs']}, {f['plots_on_ground']} on known ground"),
        ("cells", cells),
        ("circles", radii),
        ("columns", f"{f['columns_of_predictors']} of predictors"),
        ("files", ", ".join(f["files"])),
        *([("removed", ", ".join(f["removed"]))] if f["removed"] else []),
        ("time", f"about {duration(f['seconds'])} on {counted(f['threads'], 'thread')}"),
        *(("note", text) for text in f["remarks"]),
        *(("warning", text) for text in f["warnings"]),
    ]
    return lines(rows)


def _summary_text(record: dict[str, Any]) -> str:
    """What came out, for people."""
    from terrasol.cli.forecast import duration

    results = record["results"]
    flags = ", ".join(f"{count} {flag}" for flag, count in results["flags"].items())
    cells = ", ".join(f"{size:.4g}" for size in results["cells_m"])
    told = [
        f"{counted(results['plots'], 'plot')} ({flags}): {results['predictors']} predictors in"
        f" {results['columns']} columns, at cells of {cells} m",
    ]
    for each in results.get("strongest_with_response", []):
        told.append(
            f"{record['settings']['response']} goes with {each['column']}: Spearman"
            f" {each['spearman']:.2f}, Pearson {each['pearson']:.2f}, {each['plots']} plots"
        )
    chance = results.get("strongest_by_chance")
    if chance is not None:
        told.append(
            f"these are the best of many columns: by chance alone the best would reach {chance:.2f}"
            " in one case of twenty (measured values shuffled among the plots)"
        )
    told += results["remarks"]
    told += [f"warning: {text}" for text in record["warnings"]]
    if record["removed"]:
        told.append(f"removed, of an earlier run: {', '.join(record['removed'])}")
    files = record["files"]
    took = duration(record["seconds"]["whole run"])
    told.append(f"{counted(len(files), 'file')} in {os.path.dirname(files[0])} after {took}")
    return "\n".join(told)
