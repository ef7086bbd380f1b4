"""`terrasol series`: the sun on every cell hour by hour, or day by day."""

from __future__ import annotations

import os
import time
from copy import copy
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from terrasol.cli.ground_options import Around, ground_options
from terrasol.cli.irradiation import irradiation
from terrasol.cli.options import (
    Common,
    common_options,
    horizon_store_option,
    no_store_option,
    substep_option,
)
from terrasol.cli.sky_options import (
    ALBEDO_FOR_NOW,
    AskedSky,
    Settled,
    albedo_doubts,
    file_record,
    sky_options,
)
from terrasol.words import counted

if TYPE_CHECKING:
    from terrasol.cli.run import Ground
    from terrasol.engine.series import SeriesPlan
    from terrasol.ground.elevation import Elevation
    from terrasol.light.series import SeriesSettings

STEPS = ("1h", "1d")
QUANTITIES = ("global", "beam", "diffuse", "reflected", "net")

AS_IRRADIATION = ("albedo", "diffuse", "basis")
"""Options that are those of `terrasol irradiation`."""

NOT_HERE = ("horizon_gap", "highest", "clear_sky_index")
"""Shared options that make no sense for a series: kept out of the help, and refused."""


STATION_SECONDS = 60.0
"""Time step of the sun by which a station's sky is told from its series."""


class Words(click.ParamType):
    """Some of a list of words, joined by commas."""

    name = "words"

    def __init__(self, known: tuple[str, ...]) -> None:
        self.known = known

    def get_metavar(self, param: click.Parameter, ctx: click.Context) -> str:
        """Name in the help."""
        return "WORDS"

    def convert(self, value: Any, param: Any, ctx: Any) -> Any:
        """Read the text."""
        if not isinstance(value, str):
            return value
        words = tuple(word.strip() for word in value.split(","))
        twice = [word for word in self.known if words.count(word) > 1]
        if twice:
            self.fail(f"'{value}' names {twice[0]} more than once: name it once", param, ctx)
        if not set(words) <= set(self.known):
            known = ", ".join(self.known)
            self.fail(f"'{value}' is not some of these, joined by commas: {known}", param, ctx)
        return words


@click.command(short_help="The sun hour by hour or day by day, as a stack of maps.")
@click.option(
    "--period",
    metavar="TEXT",
    help="A year (2025), month (2025-04), day (2025-04-01), a first and a last one"
    " (2025-04-01/2025-10-31), or 'typical'. [default: all days of --station, if given]",
)
@click.option(
    "--step",
    type=click.Choice(STEPS),
    default="1h",
    show_default=True,
    help="Full hours of UTC (mean, W m-2), or days (sum, MJ m-2).",
)
@click.option(
    "--quantities",
    type=Words(QUANTITIES),
    default="global",
    show_default=True,
    help=f"Some of {', '.join(QUANTITIES)}, joined by commas; net is what the ground absorbs.",
)
@substep_option
@horizon_store_option
@no_store_option
@sky_options
@ground_options
@common_options
def series(common: Common, around: Around, asked: AskedSky, **given: Any) -> None:
    """Irradiance of every cell of the elevation raster DEM, step by step.

    Terrain shade and reflection count. Writes one stack of maps, with dimensions time, y and
    x: a Zarr store if OUT ends in .zarr, a NetCDF file if it ends in .nc.
    """
    from terrasol.cli.run import read
    from terrasol.engine.series import plan_series
    from terrasol.engine.series_stack import series_record
    from terrasol.files.rasters import naming

    _check(common, around, asked, given)
    settings = _settings(common, asked, given)
    ground = read(common)
    elevation = ground.elevation
    air = asked.placed(asked.air(_plain(given["albedo"])), ground.frame)
    settled = asked.settle(air, given["period"], STATION_SECONDS, elevation)
    albedo = _albedo(given["albedo"], settled, elevation)
    settings = replace(settings, sky=settled.sky or air, period=settled.period, **albedo)
    scene = around.scene(elevation, ground.frame)
    with naming(common.dem):
        plan = plan_series(elevation, settings, scene)
    record = series_record(settings) | settled.record | around.record()
    notes = settled.warnings
    if settings.albedo_map is not None:
        record["albedo"] = file_record(given["albedo"])
        notes = (*notes, *albedo_doubts(settings.albedo_map, elevation))
    _run(common, ground, plan, _store(given), record, notes)


def _check(common: Common, around: Around, asked: AskedSky, given: dict[str, Any]) -> None:
    """Refuse options that do not go together, and names that are taken."""
    from terrasol.files.stacks import check_stack_free, kind_of

    if given["albedo"] == "station" and not asked.station:
        raise click.UsageError("--albedo station needs --station, which is not given")
    if around.horizon_gap or around.highest is not None:
        raise click.UsageError("--horizon-gap belongs to terrasol irradiation: no series holds it")
    if asked.clear_sky_index is not None:
        raise click.UsageError("--clear-sky-index has no hours and no days: give a --station")
    if given["period"] is None and asked.station is None:
        raise click.UsageError("name a --period, or the --station whose days are wanted")
    if given["horizon_store"] and given["no_horizon_store"]:
        raise click.UsageError("--horizon-store and --no-horizon-store exclude each other")
    compression = click.get_current_context().get_parameter_source("compression")
    named = compression is click.core.ParameterSource.COMMANDLINE
    if kind_of(common.out_dir) == "NetCDF" and named and common.compression != "deflate":
        raise click.UsageError("a NetCDF stack is packed with deflate only")
    mapped = given["albedo"] if isinstance(given["albedo"], str) else None
    for name in (common.dem, *around.inputs, asked.station, mapped):
        both = name and os.path.exists(name) and os.path.exists(common.out_dir)
        if both and os.path.samefile(common.out_dir, str(name)):
            raise click.UsageError(f"{name} is an input itself: take another name for OUT")
    check_stack_free(common.out_dir, common.overwrite)


def _rearrange(command: click.Command) -> None:
    """Add the options shared with `terrasol irradiation`, and say what is different here."""
    shared = [copy(option) for option in irradiation.params if option.name in AS_IRRADIATION]
    names = [option.name for option in command.params]
    after = names.index("substep_seconds")
    command.params[after:after] = shared
    for option in command.params:
        if isinstance(option, click.Argument) and option.name == "out_dir":
            option.metavar = "OUT"
        elif isinstance(option, click.Option) and option.name == "compression":
            option.help = "How a Zarr stack is packed; NetCDF takes deflate."
        elif isinstance(option, click.Option) and option.name == "overwrite":
            option.help = "Replace a stack that is there."
        elif isinstance(option, click.Option) and option.name in NOT_HERE:
            option.hidden = True


_rearrange(series)


def _settings(common: Common, asked: AskedSky, given: dict[str, Any]) -> SeriesSettings:
    """Everything that can be settled before the raster is read."""
    from terrasol.light.series import SeriesSettings
    from terrasol.light.settings import twelve
    from terrasol.sky.period import parse_period

    return SeriesSettings(
        period=parse_period(given["period"]),
        sky=asked.air(_plain(given["albedo"])),
        step=given["step"],
        quantities=given["quantities"],
        albedo=twelve(_plain(given["albedo"]), "albedo"),
        diffuse=given["diffuse"],
        azimuths=common.azimuths,
        basis=given["basis"],
        substep_seconds=given["substep_seconds"],
        refraction=common.refraction,
    )


def _albedo(asked: Any, settled: Settled, elevation: Elevation) -> dict[str, Any]:
    """The settings of an albedo that is not in numbers."""
    from terrasol.files.maps import read_map

    if asked == "station":
        return {"albedo_station": settled.station}
    if isinstance(asked, str):
        return {"albedo_map": read_map(asked, elevation, "albedo", 0.0, 1.0)}
    return {}


def _plain(albedo: Any) -> tuple[float, ...]:
    """Albedo in numbers, where it was given so; for now, where it will be as measured."""
    return ALBEDO_FOR_NOW if isinstance(albedo, str) else albedo


def _store(given: dict[str, Any]) -> Path | None:
    """Where horizons are kept, if at all."""
    from terrasol.files.horizons import default_folder

    if given["no_horizon_store"]:
        return None
    return Path(given["horizon_store"]) if given["horizon_store"] else default_folder()


def _run(
    common: Common,
    ground: Ground,
    plan: SeriesPlan,
    store: Path | None,
    settings: dict[str, Any],
    notes: tuple[str, ...],
) -> None:
    """Carry the plan out, or only tell of it."""
    from terrasol.cli.forecast import give_forecast
    from terrasol.cli.progress import progress_bar
    from terrasol.cli.run import announce_compilation, tell
    from terrasol.engine.plan import default_threads
    from terrasol.engine.series_stack import write_series
    from terrasol.files.provenance import run_record
    from terrasol.files.rasters import naming

    threads = common.threads or default_threads()
    if common.dry_run:
        forecast = _forecast(common, ground, plan, store, threads)
        forecast["warnings"] += notes
        give_forecast(common, forecast, _in_lines)
        return
    own = {"vertical_unit": ground.unit, "fill_voids": common.fill_voids}
    record = run_record("series", common.dem, settings | own)
    start = time.perf_counter()
    announce_compilation(common.quiet)
    with progress_bar(common.quiet) as move, naming(common.dem):
        summary = write_series(
            plan,
            common.out_dir,
            record,
            store=store,
            compression=common.compression,
            overwrite=common.overwrite,
            threads=threads,
            progress=move,
        )
    seconds = {
        "reading": ground.seconds,
        **summary.seconds,
        "whole run": ground.seconds + time.perf_counter() - start,
    }
    record |= {
        "threads": threads,
        "results": summary.numbers,
        "warnings": [*summary.warnings, *notes],
        "seconds": {name: round(value, 2) for name, value in seconds.items()},
        "files": [str(common.out_dir)],
        "horizon_store": str(store) if store and os.path.isdir(store / plan.key) else None,
    }
    tell(common, record, _summary_text)


def _forecast(
    common: Common, ground: Ground, plan: SeriesPlan, store: Path | None, threads: int
) -> dict[str, Any]:
    """What a run would work on, write and cost."""
    from terrasol.cli.forecast import free_disk_mb, ground_forecast
    from terrasol.engine.series import stack_variables
    from terrasol.files.horizons import damage_of, find_horizons

    stored = store is not None and find_horizons(store, plan.key) is not None
    damage = None if store is None or stored else damage_of(store, plan.key)
    return ground_forecast(common, ground) | {
        "stack": str(common.out_dir),
        "quantities": {v.name: v.unit for v in stack_variables(plan.settings)},
        "steps": plan.steps,
        "first_step_begins": f"{plan.edges[0]}Z",
        "last_step_ends": f"{plan.edges[-1]}Z",
        "horizon_store": None if store is None else str(store),
        "horizon_key": plan.key,
        "horizons_found": stored,
        "horizons_mb": round(plan.horizon_bytes / 1e6, 1),
        "memory_mb": round(plan.memory_bytes(threads) / 1e6),
        "disk_mb": round(plan.stack_bytes / 1e6, 1),
        "disk_free_mb": free_disk_mb(common.out_dir),
        "threads": threads,
        "seconds": round(plan.seconds(threads, stored)),
        "warnings": [
            *plan.elevation.warnings,
            *plan.scene.warnings,
            *([damage] if damage else []),
        ],
    }


def _in_lines(f: dict[str, Any]) -> str:
    """The forecast for people."""
    from terrasol.cli.forecast import duration, grid_line, heights_line, lines

    quantities = ", ".join(f"{name} ({unit})" for name, unit in f["quantities"].items())
    if f["horizons_found"]:
        horizons = f"found in {f['horizon_store']}"
    elif f["horizon_store"]:
        horizons = f"{f['horizons_mb']:,} MB, to be kept in {f['horizon_store']}"
    else:
        horizons = f"{f['horizons_mb']:,} MB beside the stack, removed at the end"
    rows = [
        ("input", f["input"]),
        ("CRS", f["crs"]),
        grid_line(f),
        heights_line(f),
        ("stack", f"{f['stack']}: {quantities}"),
        ("steps", f"{f['steps']}, from {f['first_step_begins']} to {f['last_step_ends']}"),
        ("horizons", horizons),
        ("memory", f"{f['memory_mb']:,} MB"),
        ("disk", f"about {f['disk_mb']:,} MB, {f['disk_free_mb']:,} MB free"),
        ("time", f"about {duration(f['seconds'])} on {counted(f['threads'], 'thread')}"),
        *(("warning", text) for text in f["warnings"]),
    ]
    return lines(rows)


def _summary_text(record: dict[str, Any]) -> str:
    """What came out, for people."""
    from terrasol.cli.forecast import duration

    results = record["results"]
    lines = [
        f"{name}: mean {found['mean']:g} {found['unit']}, from {found['least']:g}"
        f" to {found['greatest']:g}"
        for name, found in results.items()
        if isinstance(found, dict)
    ]
    lines.append(
        f"{results['steps']} steps from {results['first_step_begins']} to"
        f" {results['last_step_ends']}, {record['settings']['basis']} area, horizons"
        f" {results['horizons']}"
    )
    if results["void_cells"]:
        lines.append(f"void: {results['void_cells']} of {results['cells']} cells")
    lines += [f"warning: {text}" for text in record["warnings"]]
    lines.append(f"{record['files'][0]} after {duration(record['seconds']['whole run'])}")
    return "\n".join(lines)
