"""`terrasol melt`: snow that falls, lies and melts on every cell, from a station's hours."""

from __future__ import annotations

import os
import time
from contextlib import AbstractContextManager, nullcontext
from copy import copy
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from terrasol.cli.ground_options import Around, ground_options
from terrasol.cli.irradiation import irradiation
from terrasol.cli.options import Common, Name, Numbers, common_options
from terrasol.cli.series import series
from terrasol.cli.sky_options import AskedSky, file_record, sky_options, station_doubts
from terrasol.errors import InputError
from terrasol.words import counted

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from terrasol.cli.run import Ground
    from terrasol.engine.melt import MeltResult
    from terrasol.engine.melt_job import MeltSettings, Prepared
    from terrasol.engine.melt_tables import SeasonTables
    from terrasol.engine.plan import Progress
    from terrasol.files.delivery import Delivery
    from terrasol.files.snow_state import StateHead
    from terrasol.files.stacks import StackWriter
    from terrasol.ground.elevation import Elevation
    from terrasol.practice.snow import SnowModel

MELTS = ("enhanced", "hock", "degree-days")
ALBEDOS = ("brock", "usace", "station")
STACKS = {"netcdf": "days.nc", "zarr": "days.zarr", "none": ""}
STATE = "state.nc"
PICTURES = ("hydrograph.png", "bands.png", "melt_out.png")
CHECK = ("at_station.csv", "at_station.png")

NOT_HERE = ("clear_sky_index", "horizon_gap", "highest")
"""Shared options that make no sense here: kept out of the help, and refused."""


class Setting(click.ParamType):
    """A number by its name: NAME=VALUE."""

    name = "setting"

    def get_metavar(self, param: click.Parameter, ctx: click.Context) -> str:
        """Name in the help."""
        return "NAME=VALUE"

    def convert(self, value: Any, param: Any, ctx: Any) -> Any:
        """Read the text."""
        if not isinstance(value, str):
            return value
        name, _, text = value.partition("=")
        try:
            return name.strip().replace("-", "_"), float(text)
        except ValueError:
            return self.fail(f"'{value}' is not a name, '=' and a number", param, ctx)


@click.command(short_help="Snow: what falls, lies and melts, where and when.")
@click.argument("station", metavar="STATION", type=Name())
@click.option(
    "--period",
    metavar="TEXT",
    help="A season (2024-10-01/2025-06-30), year, month or day, from bare ground on. [default:"
    " all days of STATION, or from --from-state on]",
)
@click.option(
    "--basin",
    metavar="POLYGONS",
    type=Name(),
    help="The area that tables and curves are of: GeoPackage, GeoJSON, shapefile or GeoParquet."
    " [default: all of DEM]",
)
@click.option(
    "--bands",
    metavar="M",
    type=click.FloatRange(min=0.0, min_open=True),
    help="Width of the bands of height. [default: some ten bands]",
)
@click.option(
    "--melt",
    "melt_model",
    type=click.Choice(MELTS),
    default="enhanced",
    show_default=True,
    help="Melt by temperature and absorbed shortwave (Pellicciotti et al. 2005), by temperature"
    " and potential beam (Hock 1999), or by degree-days.",
)
@click.option(
    "--snow-albedo",
    type=click.Choice(ALBEDOS),
    default="brock",
    show_default=True,
    help="By warmth since the last snowfall (Brock et al. 2000), by days since (US Army Corps of"
    " Engineers), or as STATION measured it.",
)
@click.option(
    "--lapse",
    type=Numbers(),
    default="6.5",
    show_default=True,
    help="Fall of air temperature with height, K/km.",
)
@click.option(
    "--number",
    "numbers",
    type=Setting(),
    multiple=True,
    help="Another number of the snow model, such as temperature_factor=0.06; may be repeated."
    " docs/melt.md lists them.",
)
@click.option(
    "--fit",
    is_flag=True,
    help="Fit the melt by light (for degree-days by warmth) and the snow factor to the snow water"
    " that STATION observed, and use them.",
)
@click.option(
    "--fit-numbers",
    metavar="NAMES",
    help="Fit these two or three in their place, joined by commas.",
)
@click.option(
    "--from-state",
    metavar="NC",
    type=Name(),
    help="Go on from the state.nc of an earlier run, with its numbers: a new day costs a day's"
    " work.",
)
@click.option("--no-spread", is_flag=True, help="Do not carry the runs that make the spread.")
@click.option(
    "--stack",
    type=click.Choice(list(STACKS)),
    default="netcdf",
    show_default=True,
    help="Kind of the daily maps of melt, snow water, albedo and cover.",
)
@click.option(
    "--fill-weather",
    metavar="H",
    type=float,
    default=6.0,
    show_default=True,
    help="Longest gap of temperature (interpolated) or precipitation (taken for dry) to mend.",
)
@sky_options
@ground_options
@common_options
def melt(common: Common, around: Around, asked: AskedSky, **given: Any) -> None:
    """Snow on every cell of the elevation raster DEM, driven by the hours of STATION.

    STATION holds temperature, precipitation and, for the enhanced model, global irradiance.
    Writes daily maps, peak snow water, melt-out, tables of the basin by band and aspect, pictures
    and the state to go on from into OUT_DIR. No avalanche tool: decisions on danger belong to
    licensed practice and the local services.
    """
    _check(around, asked, given)
    _Job.resolve(common, around, asked, given).run()


def _check(around: Around, asked: AskedSky, given: dict[str, Any]) -> None:
    """Refuse options that do not go together."""
    if around.horizon_gap or around.highest is not None:
        raise click.UsageError("--horizon-gap belongs to terrasol irradiation: no melt holds it")
    if asked.clear_sky_index is not None:
        raise click.UsageError("--clear-sky-index has no hours: melt takes the light of STATION")
    if given["horizon_store"] and given["no_horizon_store"]:
        raise click.UsageError("--horizon-store and --no-horizon-store exclude each other")
    if given["fit_numbers"] is not None and not given["fit_numbers"].strip(" ,"):
        raise click.UsageError("--fit-numbers names no number: name two or three, joined by commas")
    if (given["fit"] or given["fit_numbers"]) and given["from_state"]:
        raise click.UsageError(
            "--fit wants a season from bare ground on; a state goes on with the numbers it has"
        )
    if given["melt_model"] != "enhanced":
        for name in ("decomposition", "fill_hours"):
            if getattr(asked, name) is not None:
                option = name.replace("_", "-")
                raise click.UsageError(f"--{option} belongs to --melt enhanced")


def _rearrange(command: click.Command) -> None:
    """Put the arguments in order, and take over options of other commands."""
    order = ("dem", "station", "out_dir")
    kept = [
        each
        for each in command.params
        if not (isinstance(each, click.Option) and each.name == "station")
    ]
    shared = [copy(o) for o in irradiation.params if o.name == "diffuse"]
    shared += [
        copy(o)
        for o in series.params
        if o.name in ("substep_seconds", "horizon_store", "no_horizon_store")
    ]
    after = [each.name for each in kept].index("fill_weather") + 1
    kept[after:after] = shared
    kept.sort(key=lambda each: order.index(str(each.name)) if each.name in order else len(order))
    for option in kept:
        if not isinstance(option, click.Option):
            continue
        if option.name in NOT_HERE:
            option.hidden = True
        elif option.help:
            option.help = option.help.replace("SERIES", "STATION")
    command.params = kept


_rearrange(melt)


@dataclass(frozen=True)
class _Job:
    """The command as resolved."""

    common: Common
    around: Around
    given: dict[str, Any]
    ground: Ground
    prepared: Prepared
    record: dict[str, Any]
    notes: tuple[str, ...]
    store: Path | None

    @classmethod
    def resolve(
        cls, common: Common, around: Around, asked: AskedSky, given: dict[str, Any]
    ) -> _Job:
        """Read everything, and plan."""
        from terrasol.cli.run import read
        from terrasol.engine.melt_job import prepare
        from terrasol.engine.melt_state import read_head
        from terrasol.files.horizons import default_folder
        from terrasol.files.tables import read_station
        from terrasol.practice.snow_weather import whole_days

        air = asked.air((0.2,))
        state = read_head(given["from_state"]) if given["from_state"] else None
        model = _model(given, state)
        assert asked.station is not None
        station = read_station(asked.station, asked.station_settings)
        ground = read(common)
        last = whole_days(station, ground.frame.centre[1]).end.astype("M8[D]") - 1
        settings = _settings(common, asked, given, model, state, last)
        elevation = ground.elevation
        air = asked.placed(air, ground.frame)
        scene = around.scene(elevation, ground.frame)
        area, said = _area(given["basin"], elevation)
        prepared = prepare(elevation, station, air, settings, scene=scene, area=area, state=state)
        store = None
        if not given["no_horizon_store"]:
            store = Path(given["horizon_store"]) if given["horizon_store"] else default_folder()
        doubts = station_doubts(prepared.station, elevation)
        record = {
            "station": file_record(asked.station) | prepared.record,
            "air": air.record(),
            "fill_weather": settings.fill_weather,
            "basin": file_record(given["basin"]) if given["basin"] else None,
            "from_state": file_record(given["from_state"]) if given["from_state"] else None,
            "vertical_unit": ground.unit,
            "fill_voids": common.fill_voids,
        }
        notes = (*prepared.warnings, *doubts, *said)
        given = given | {"files": [asked.station, asked.station_settings]}
        return cls(common, around, given, ground, prepared, record, notes, store)

    @property
    def stack(self) -> str:
        """Name of the daily stack, or nothing."""
        return STACKS[self.given["stack"]]

    @property
    def names(self) -> list[str]:
        """Files to write but for the stack, the record last."""
        from terrasol.engine.melt_job import season_layers
        from terrasol.engine.melt_tables import TABLES
        from terrasol.files.delivery import RECORD

        maps = [f"{layer.name}.tif" for layer in season_layers(self.prepared.plan).values()]
        check = CHECK if self.prepared.check is not None else ()
        return [*maps, *TABLES, *PICTURES, *check, STATE, RECORD]

    @property
    def all_names(self) -> list[str]:
        """What is written, the stack first."""
        return [*([self.stack] if self.stack else []), *self.names]

    def settings(self) -> dict[str, Any]:
        """Settings as plain text and numbers."""
        from terrasol.engine.melt import record_of

        return record_of(self.prepared.plan) | self.record | self.around.record()

    def run(self) -> None:
        """Carry it out, or only tell of it."""
        from terrasol.cli.forecast import give_forecast
        from terrasol.cli.run import check_places, tell
        from terrasol.files.stacks import check_stack_free

        common, given = self.common, self.given
        sources = (common.dem, *self.around.inputs, *given["files"], given["basin"])
        sources = (*sources, given["from_state"])
        check_places(common, self.names, [name for name in sources if name])
        if self.stack:
            check_stack_free(Path(common.out_dir) / self.stack, common.overwrite)
        if common.dry_run:
            give_forecast(common, self._forecast(), _in_lines)
            return
        tell(common, self._carry_out(), _summary_text)

    def _carry_out(self) -> dict[str, Any]:
        """Compute and write everything, or leave nothing behind; return the record."""
        from terrasol.cli.progress import progress_bar
        from terrasol.cli.run import announce_compilation, superseded
        from terrasol.engine.melt_tables import SeasonTables
        from terrasol.engine.plan import default_threads
        from terrasol.files.delivery import RECORD, Delivery
        from terrasol.files.provenance import run_record

        common, plan, start = self.common, self.prepared.plan, time.perf_counter()
        threads = common.threads or default_threads()
        record = run_record("melt", common.dem, self.settings())
        need = plan.stack_bytes() if self.stack else 0
        delivery = Delivery(common.out_dir, self.names, overwrite=common.overwrite, need=need)
        with delivery, progress_bar(common.quiet) as move, self._writer(record) as writer:
            announce_compilation(common.quiet)
            result = self._season(delivery, writer, threads, move)
            tables = SeasonTables.of(result)
            move(0.92, "writing")
            numbers = self._write(delivery, result, tables, record)
            removed, more = superseded(common, self.all_names)
            whole = self.ground.seconds + time.perf_counter() - start
            seconds = {"reading": self.ground.seconds, **result.summary.seconds, "whole run": whole}
            record |= {
                "threads": threads,
                "results": numbers,
                "warnings": [*result.summary.warnings, *self.notes, *more],
                "seconds": {name: round(value, 2) for name, value in seconds.items()},
                "files": [os.path.abspath(delivery.folder / name) for name in self.all_names],
                "removed": removed,
            }
            delivery.write_json(RECORD, record)
            if writer is not None:
                writer.commit()
            delivery.commit(removed)
            move(1.0, "done")
        return record

    def _doubts(self) -> list[str]:
        """Warnings from before a run; its summary holds those of ground and scene too."""
        plan = self.prepared.plan
        return [*self.ground.elevation.warnings, *plan.light.scene.warnings, *self.notes]

    def _writer(self, record: dict[str, Any]) -> AbstractContextManager[StackWriter | None]:
        """What takes the daily maps, if they are wanted."""
        from terrasol.engine.melt_job import stack_attributes
        from terrasol.files.stacks import StackWriter

        if not self.stack:
            return nullcontext()
        plan, common = self.prepared.plan, self.common
        return StackWriter(
            Path(common.out_dir) / self.stack,
            plan.stack(stack_attributes(plan, record)),
            compression=common.compression,
            overwrite=common.overwrite,
        )

    def _season(
        self, delivery: Delivery, writer: StackWriter | None, threads: int, move: Progress
    ) -> MeltResult:
        """Carry the snow through all days."""
        from terrasol.engine.melt_state import take_up
        from terrasol.files.rasters import naming

        plan, state = self.prepared.plan, self.given["from_state"]
        begin = take_up(plan, state) if state else None
        spare = delivery.staged("horizons")

        def progress(share: float, stage: str) -> None:
            move(0.9 * share, stage)

        with naming(self.common.dem):
            return plan.run(self.store or spare, writer, begin, threads, progress, spare)

    def _write(
        self,
        delivery: Delivery,
        result: MeltResult,
        tables: SeasonTables,
        record: dict[str, Any],
    ) -> dict[str, Any]:
        """Stage maps, tables, pictures and the state; return the numbers."""
        from terrasol.engine.melt_job import season_numbers
        from terrasol.engine.melt_state import save_state
        from terrasol.engine.melt_tables import tables_csv

        self._write_maps(delivery, result, record)
        for name, content in tables_csv(tables).items():
            delivery.write_bytes(name, content)
        for name, picture in zip(PICTURES, self._pictures(result, tables), strict=True):
            delivery.write_bytes(name, picture)
        for name, content in zip(CHECK, self._check_files(), strict=False):
            delivery.write_bytes(name, content)
        try:
            save_state(result, delivery.staged(STATE))
        except (OSError, RuntimeError) as error:
            raise delivery.refusal(STATE, error) from error
        return season_numbers(result, tables)

    def _write_maps(self, delivery: Delivery, result: MeltResult, record: dict[str, Any]) -> None:
        """Peak snow water and melt-out."""
        from terrasol.cli.run import tags_of
        from terrasol.engine.melt_job import season_layers
        from terrasol.engine.plan import blocks_of
        from terrasol.files.sink import RasterSink

        plan, common = result.plan, self.common
        elevation = plan.light.elevation
        tags = tags_of(record, elevation)
        sink = RasterSink(
            delivery, elevation.transform, elevation.crs, elevation.shape,
            tags=tags, compression=common.compression,
        )  # fmt: skip
        with sink:
            for name, layer in season_layers(plan).items():
                values = result.map_of(name)
                sink.open(layer)
                for b in blocks_of(elevation.shape):
                    part = values[b.row : b.row + b.rows, b.column : b.column + b.columns]
                    sink.write(layer.name, b.row, b.column, part[None])
            sink.finish()

    def _pictures(self, result: MeltResult, tables: SeasonTables) -> tuple[bytes, bytes, bytes]:
        """Hydrograph, bands and the map of melt-out."""
        import numpy as np

        from terrasol.engine.melt_job import spread_words
        from terrasol.practice.snow import COVERED_FROM, NO_AVALANCHE
        from terrasol.show.melt import bands_png, hydrograph_png, melt_out_png

        plan = result.plan
        name = Path(self.common.dem).stem
        period = f"{tables.dates[0]} to {tables.dates[-1]}"
        area = f"{tables.name}, {tables.area.sum() / 1e6:.2f} km²"
        station = self.prepared.station.name
        fitted = ", fitted to the station's snow water" if "fit" in self.prepared.record else ""
        how = f"Melt after {_melt_name(plan.model)}{fitted}; weather of {station}."
        notes = (how, NO_AVALANCHE)
        bare, known = result.map_of("bare_day"), np.isfinite(plan.light.elevation.heights)
        lies = np.isnan(bare) & (result.map_of("peak") >= COVERED_FROM)
        none = known & np.isnan(bare) & ~lies
        never = ("Hatched grey: no snow came.",) * bool(none.any())
        never += ("Hatched blue: snow still lies.",) * bool(lies.any())
        spread = spread_words(plan.model) if plan.spread else ""
        return (
            hydrograph_png(
                tables, title=f"{name}: snow and melt", subtitle=f"{area}; {period}",
                notes=notes, spread=spread,
            ),
            bands_png(
                tables, title=f"{name}: snow by height", subtitle=f"{area}; {period}", notes=notes
            ),
            melt_out_png(
                plan.light.elevation, plan.light.frame, bare,
                plan.season_start, lies=lies, title=f"{name}: melt-out", subtitle=period,
                notes=(*notes, *never),
            ),
        )  # fmt: skip

    def _check_files(self) -> tuple[bytes, ...]:
        """Table and picture of the station's own snow, where it was observed."""
        from terrasol.engine.melt_tables import check_csv
        from terrasol.practice.snow import NO_AVALANCHE
        from terrasol.show.melt import station_png

        prepared = self.prepared
        if prepared.check is None:
            return ()
        told = [
            f"{name[0].upper()}{name[1:]}: {words}."
            for name, words in _agreement_rows(prepared.record)
        ]
        how = f"Melt after {_melt_name(prepared.plan.model)}, on level ground."
        notes = (how, *told, NO_AVALANCHE)
        picture = station_png(prepared.check, title=prepared.station.name, notes=notes)
        return check_csv(prepared.check), picture

    def _forecast(self) -> dict[str, Any]:
        """What a run would work on, write and cost."""
        from terrasol.cli.forecast import free_disk_mb, ground_forecast
        from terrasol.cli.run import superseded
        from terrasol.engine.plan import default_threads
        from terrasol.files.horizons import find_horizons

        common, plan = self.common, self.prepared.plan
        threads = common.threads or default_threads()
        stored = self.store is not None and find_horizons(self.store, plan.light.key) is not None
        removed, more = superseded(common, self.all_names)
        return ground_forecast(common, self.ground) | {
            "station": self.record["station"],
            "model": plan.model.record(),
            "days": plan.days,
            "first_day": str(plan.dates[0]),
            "last_day": str(plan.dates[-1]),
            "area": plan.zones.name,
            "bands_m": [float(edge) for edge in plan.zones.edges],
            "files": self.all_names,
            "removed": removed,
            "horizon_store": None if self.store is None else str(self.store),
            "horizons_found": stored,
            "horizons_mb": round(plan.light.horizon_bytes / 1e6, 1) if plan.lit else 0.0,
            "memory_mb": round(plan.memory_bytes(threads) / 1e6),
            "disk_mb": round(plan.stack_bytes() / 1e6) if self.stack else 0,
            "disk_free_mb": free_disk_mb(common.out_dir),
            "threads": threads,
            "seconds": round(plan.seconds(threads, stored)),
            "warnings": [*self._doubts(), *more],
        }


def _melt_name(model: SnowModel) -> str:
    from terrasol.practice.snow import MELT_MODELS

    return MELT_MODELS[model.melt][1]


def _model(given: dict[str, Any], state: StateHead | None) -> SnowModel:
    """The snow model asked for; with a state its own, but for what was said in so many words."""
    from terrasol.light.settings import twelve
    from terrasol.practice.snow import SnowModel

    changed = dict(given["numbers"])
    melt_model, albedo, lapse = given["melt_model"], given["snow_albedo"], given["lapse"]
    if state is not None:
        told = state.record["model"]
        source = click.get_current_context().get_parameter_source
        said = click.core.ParameterSource.COMMANDLINE
        melt_model = melt_model if source("melt_model") == said else told["melt"]
        albedo = albedo if source("snow_albedo") == said else told["albedo"]
        lapse = lapse if source("lapse") == said else tuple(told["lapse_k_per_km"])
        changed = {**told["numbers"], **changed}
    return SnowModel(melt_model, albedo, twelve(lapse, "the lapse rate"), changed)


def _settings(
    common: Common,
    asked: AskedSky,
    given: dict[str, Any],
    model: SnowModel,
    state: StateHead | None,
    last: np.datetime64,
) -> MeltSettings:
    """Everything but the raster."""
    import numpy as np

    from terrasol.engine.melt_job import MeltSettings
    from terrasol.practice.snow_point import numbers_to_fit
    from terrasol.sky.gaps import LONGEST_HOURS
    from terrasol.sky.period import parse_period

    period = given["period"]
    if period is None and state is not None:
        if np.datetime64(state.day) > last:
            raise InputError(
                f"{given['from_state']} goes on from {state.day}, and the last whole day that the"
                f" station covers is {last}: there is no new day yet"
            )
        period = f"{state.day}/{last}"
    fit = None
    if given["fit"] or given["fit_numbers"]:
        words = (given["fit_numbers"] or "").replace("-", "_").split(",")
        fit = numbers_to_fit(model, tuple(word.strip() for word in words if word.strip()))
    return MeltSettings(
        model=model,
        period=None if period is None else parse_period(period),
        fit=fit,
        spread=not given["no_spread"] if state is None else bool(state.members > 1),
        bands=given["bands"],
        decomposition=asked.decomposition or "dirint",
        fill_hours=LONGEST_HOURS if asked.fill_hours is None else asked.fill_hours,
        fill_weather=given["fill_weather"],
        diffuse=given["diffuse"],
        azimuths=common.azimuths,
        substep_seconds=given["substep_seconds"],
        refraction=common.refraction,
    )


def _area(
    path: str | None, elevation: Elevation
) -> tuple[tuple[NDArray[np.float32], str] | None, tuple[str, ...]]:
    """Part of each cell within the polygons, and their name; and warnings."""
    if path is None:
        return None, ()
    import numpy as np

    from terrasol.files.rasters import naming
    from terrasol.files.vectors import coverage, read_polygons

    polygons = read_polygons(path, elevation.crs)
    share = np.zeros(elevation.shape, np.float32)
    with naming(path):
        found, said = coverage(polygons, elevation.transform, elevation.shape)
    for cells in found:
        np.add.at(share, (cells.rows, cells.columns), cells.fraction.astype(np.float32))
    name = polygons.names[0] if len(polygons) == 1 else Path(path).stem
    notes = (*polygons.warnings, *said)
    return (np.minimum(share, 1.0), name), tuple(f"{path}: {note}" for note in notes)


def _in_lines(f: dict[str, Any]) -> str:
    """The forecast for people."""
    from terrasol.cli.forecast import duration, grid_line, heights_line, lines

    edges = f["bands_m"]
    numbers = ", ".join(f"{name} {value:g}" for name, value in f["model"]["numbers"].items())
    rows = [
        ("input", f["input"]),
        grid_line(f),
        heights_line(f),
        ("station", f"{f['station']['name']}, {f['station']['height_m']:g} m"),
        ("days", f"{f['days']}, {f['first_day']} to {f['last_day']}"),
        ("model", f"{f['model']['melt']}, albedo {f['model']['albedo']}"),
        ("numbers", numbers),
        ("area", f"{f['area']}, {len(edges) - 1} bands, {edges[0]:g} to {edges[-1]:g} m"),
        *_agreement_rows(f["station"]),
        ("files", ", ".join(f["files"])),
        *([("removed", ", ".join(f["removed"]))] if f["removed"] else []),
        ("memory", f"{f['memory_mb']:,} MB"),
        ("disk", f"about {f['disk_mb']:,} MB, {f['disk_free_mb']:,} MB free"),
        ("time", f"about {duration(f['seconds'])} on {counted(f['threads'], 'thread')}"),
        *(("warning", text) for text in f["warnings"]),
    ]
    return lines(rows)


def _agreement_rows(station: dict[str, Any]) -> list[tuple[str, str]]:
    """What the station's own snow says of the model."""
    rows = []
    if "fit" in station:
        fit = station["fit"]
        fitted = ", ".join(_number_words(*each) for each in fit["fitted"].items())
        rows.append(("fitted", f"{fitted}; before: {_words(fit['before'])}"))
        rows += [
            (
                "split test",
                f"fitted on {part['fitted_on']}, on {part['judged_on']}: {_words(part['judged'])}",
            )
            for part in fit["split_sample"]
        ]
        if fit["at_bound"]:
            names = " and ".join(name.replace("_", " ") for name in fit["at_bound"])
            rows.append(("doubt", f"{names} came to lie on a bound: the data do not tell it"))
    if "at_station" in station:
        rows.append(("at station", _words(station["at_station"])))
    return rows


def _number_words(name: str, value: float) -> str:
    """A number of the model in words, three digits and its unit."""
    from terrasol.practice.snow import NUMBERS

    unit = NUMBERS[name].unit
    return f"{name.replace('_', ' ')} {value:#.3g}" + (f" {unit}" if unit != "1" else "")


def _words(found: dict[str, Any]) -> str:
    """An agreement in words."""
    efficiency = found["efficiency"]
    told = "" if efficiency is None else f", efficiency {efficiency:.3f}"
    return (
        f"peak {found['peak_mm']:.0f} mm (observed {found['observed_peak_mm']:.0f}), melt-out"
        f" {found['melt_out'] or 'none'} (observed {found['observed_melt_out'] or 'none'}),"
        f" rmse {found['rmse_mm']:.0f} mm{told}"
    )


def _summary_text(record: dict[str, Any]) -> str:
    """What came out, for people."""
    from terrasol.cli.forecast import duration
    from terrasol.practice.snow import NO_AVALANCHE

    r = record["results"]
    totals = ", ".join(f"{name.replace('_', ' ')} {v:.0f}" for name, v in r["totals"].items())
    since, of_part = record["settings"]["season_start"], ""
    if since != r["first_day"]:
        of_part = f" of this part (the season began on {since})"
    told = [
        f"{r['area']}, {r['area_km2']:g} km2, {r['first_day']} to {r['last_day']}",
        f"mm on map area: {totals}",
        f"peak snow water{of_part} {r['peak_snow_water']:.0f} mm on {r['peak_day']};"
        f" {r['snow_water_at_end']:.0f} mm at the end",
        *(_month_words(month) for month in r["months"]),
        *_bracket_words(r["months"]),
        *(f"{name}: {words}" for name, words in _agreement_rows(record["settings"]["station"])),
        f"water balance closes to {max(r['water_balance_error'].values()):.1g} of what came",
    ]
    if r["void_cells"]:
        told.append(f"void: {r['void_cells']} of {r['cells']} cells")
    told += [f"warning: {text}" for text in record["warnings"]]
    told.append(NO_AVALANCHE)
    files = record["files"]
    took = duration(record["seconds"]["whole run"])
    told.append(f"{counted(len(files), 'file')} in {os.path.dirname(files[0])} after {took}")
    return "\n".join(told)


def _bracket_words(months: list[dict[str, Any]]) -> list[str]:
    """What the brackets of the months are, where there are any."""
    if all(len(set(month["melt_m3_range"])) == 1 for month in months):
        return []
    return [
        "in brackets: least to greatest of runs with one number of the melt moved at a time; not"
        " the uncertainty of temperature and light"
    ]


def _month_words(month: dict[str, Any]) -> str:
    """Water of a month, with the range of the spread, and where the melt comes from."""
    told = []
    for name in ("melt", "runoff input"):
        key = f"{name.replace(' ', '_')}_m3"
        low, high = (f"{value / 1e6:.3f}" for value in month[f"{key}_range"])
        spread = f" ({low} to {high})" if low != high else ""
        told.append(f"{name} {month[key] / 1e6:.3f}{spread}")
    places = f"; melt from {', '.join(month['from'])}" if month["from"] else ""
    return f"{month['month']}, million m3: {', '.join(told)}{places}"
