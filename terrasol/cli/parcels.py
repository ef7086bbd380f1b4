"""`terrasol parcels`: vineyard parcels, their ground, light and warmth, ranked."""

from __future__ import annotations

import time
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import click

from terrasol.cli.error_options import AskedError, error_options
from terrasol.cli.ground_options import Around, ground_options
from terrasol.cli.options import (
    Common,
    Name,
    Numbers,
    arguments_in_order,
    clock_option,
    common_options,
    diffuse_option,
    period_option,
    step_option,
)
from terrasol.cli.sky_options import (
    ALBEDO_FOR_NOW,
    AskedSky,
    Settled,
    albedo_record,
    file_record,
    raster_named,
    settle_albedo,
    shortest,
    sky_options,
)

if TYPE_CHECKING:
    from terrasol.cli.run import Ground
    from terrasol.engine.parcel_figures import Asked
    from terrasol.engine.parcels import ParcelSettings, Survey
    from terrasol.files.vectors import Polygons
    from terrasol.show.page import Page
    from terrasol.sky.clear import Air

LAYER, TABLE, SIZES, ROWS, DOUBTS, COLUMNS, BOOK, SUMMARY = (
    "parcels.gpkg", "parcels.csv", "cell_sizes.csv", "row_directions.csv", "standard_errors.csv",
    "columns.csv", "parcels.pdf", "summary.png",
)  # fmt: skip
"""Files: the GeoPackage, the tables, what their columns mean, the sheets."""

SECONDS_A_SHEET = 0.7
"""To draw one, for the estimate only."""

SHEETS_KEPT: Final = 4
"""Sheets after which their memory is given back (judgement, no source)."""

SHEET_BYTES: Final = 0.3e6
"""Memory that a sheet of the book holds until all are drawn, for the estimate only: between 0.02 MB
of small parcels, as measured, and 0.6 MB of 400 by 400 cells."""

MOST_LISTED: Final = 8
"""Names that the forecast lists for people; --json has all."""

NOT_HERE = ("compression", "horizon_gap", "highest")
"""Shared options that mean nothing for parcels."""


@dataclass(frozen=True)
class _Sizes(click.ParamType):
    """Several numbers joined by commas."""

    name: str = "numbers"
    count: int | None = None

    def convert(self, value: Any, param: Any, ctx: Any) -> Any:
        """Read the text."""
        if not isinstance(value, str):
            return value
        try:
            numbers = tuple(float(part) for part in value.split(","))
        except ValueError:
            self.fail(f"'{value}' is not made of numbers joined by commas", param, ctx)
        if self.count is not None and len(numbers) != self.count:
            self.fail(f"'{value}' must be {self.count} numbers joined by commas", param, ctx)
        return numbers


@click.command(short_help="Vineyard parcels: slope, light, warmth, rank; a sheet for each.")
@click.argument("parcels_file", metavar="PARCELS", type=Name())
@click.option("--layer", metavar="NAME", help="Layer of PARCELS. [default: its only one]")
@click.option(
    "--name-field",
    metavar="FIELD",
    help="Field of PARCELS that names them. [default: name, id, label, parcel or block]",
)
@click.option(
    "--rule",
    metavar="TEXT",
    help="What ground must meet, cell by cell, such as 'slope_percent < 15 and share_of_level >="
    " 0.95'; names are listed in docs/parcels.md.",
)
@click.option(
    "--least-patch",
    metavar="M2",
    type=float,
    default=0.0,
    show_default=True,
    help="Connected patches of such ground that are smaller do not count, square metres of map.",
)
@click.option(
    "--score",
    metavar="TEXT",
    help="Weighted sum of columns of parcels.csv that ranks the parcels, such as '100 *"
    " share_of_level_season - slope_mean_percent'.",
)
@click.option(
    "--slope-classes",
    metavar="PERCENTS",
    type=_Sizes(),
    help="Edges of slope classes, percent, joined by commas. [default: 5,10,15,20,30]",
)
@click.option(
    "--flat-below",
    metavar="PERCENT",
    type=float,
    help="Ground flatter than this faces nowhere. [default: 2]",
)
@click.option(
    "--season",
    metavar="MM-MM",
    help="Growing season. [default: 04-10, south of the equator 10-04]",
)
@click.option(
    "--temperatures",
    metavar="FILE",
    help="For degree-days: a series with FILE.toml beside it, or a table of days or months with"
    " columns date or month, mean_c, least_c, highest_c.",
)
@click.option(
    "--temperatures-height",
    metavar="METRES",
    type=float,
    help="How high the station of a table of temperatures stands.",
)
@click.option(
    "--lapse-rate",
    type=Numbers(),
    help="Fall of temperature with height, K/km. [default: 6.5]",
)
@click.option(
    "--huglin-beyond-50",
    type=click.Choice(["undefined", "one", "held"]),
    default="undefined",
    show_default=True,
    help="Huglin's factor beyond 50 degrees of latitude: none, 1, or 1.06.",
)
@click.option(
    "--rows",
    "vine_rows",
    metavar="SPACING,HEIGHT,WIDTH",
    type=_Sizes(count=3),
    help="Vine rows in metres: from row to row, height and width of the leaf wall. Tells the light"
    " on both sides for each direction of the rows.",
)
@click.option(
    "--canopy-albedo",
    type=float,
    help="Share of light that the sides of the rows send back. [default: 0.2]",
)
@click.option(
    "--coarser",
    metavar="FACTORS",
    default="2,4",
    show_default=True,
    help="Joins so many cells along a side and tells all again, joined by commas; 'none' for none.",
)
@click.option(
    "--sheets",
    type=click.Choice(["pdf", "png", "none"]),
    default="pdf",
    show_default=True,
    help="Sheets of the parcels: parcels.pdf, or summary.png and one picture a parcel.",
)
@clock_option
@period_option
@click.option(
    "--albedo",
    type=Numbers("station", raster=True),
    default="0.2",
    show_default=True,
    help="Albedo of the ground: numbers, a RASTER of one band or of twelve, or 'station' for what"
    " SERIES measured.",
)
@diffuse_option
@step_option
@sky_options
@ground_options
@error_options
@common_options
def parcels(
    common: Common, asked_error: AskedError, around: Around, asked: AskedSky, **given: Any
) -> None:
    """Vineyard parcels of the vector file PARCELS on the elevation raster DEM.

    For each parcel: map and surface area, height, slope and aspect by class, irradiation by month
    and growing season beside open level ground, hours of sun, first and last sun; if asked, ground
    that meets a rule, degree-days, the light on vine rows by direction, and a rank; all again at
    two coarser cell sizes. Writes parcels.gpkg, parcels.csv, cell_sizes.csv, columns.csv,
    parcels.pdf with a summary page and one sheet a parcel, and run.json into OUT_DIR; with --rows
    also row_directions.csv, with --dem-error standard_errors.csv. Frost pooling, soil and water are
    not in it.
    """
    from terrasol.cli.run import read

    _check(around, asked, given)
    plain = _plain(given)
    ground = read(common)
    air = asked.placed(asked.air(plain["albedo_for_now"]), ground.frame)
    given |= plain | {"error": asked_error.read()}
    _Job(common, around, asked, given, ground, air).run()


def _rearrange(command: click.Command) -> None:
    """Put the arguments in order, and hide what means nothing here."""
    arguments_in_order(command, "dem", "parcels_file", "out_dir")
    for option in command.params:
        if isinstance(option, click.Option):
            option.hidden = option.hidden or option.name in NOT_HERE


_rearrange(parcels)


def _check(around: Around, asked: AskedSky, given: dict[str, Any]) -> None:
    """Refuse options that mean nothing here, or nothing without another."""
    around.refuse_map()
    if given["temperatures"] is None:
        for name in ("temperatures_height", "lapse_rate"):
            if given[name] is not None:
                option = name.replace("_", "-")
                raise click.UsageError(f"--{option} belongs to --temperatures, which is not given")
    if given["least_patch"] and given["rule"] is None:
        raise click.UsageError("--least-patch belongs to --rule, which is not given")
    if given["canopy_albedo"] is not None and given["vine_rows"] is None:
        raise click.UsageError("--canopy-albedo belongs to --rows, which is not given")


def _plain(given: dict[str, Any]) -> dict[str, Any]:
    """Settle all that needs no file, so that mistakes are told at once."""
    from terrasol.engine.parcel_rows import RowSettings
    from terrasol.engine.parcel_words import read_rule
    from terrasol.light.days import parse_clock
    from terrasol.practice.season import parse_season
    from terrasol.sky.period import parse_period

    parse_period(given["period"])
    warm = given["temperatures"] is not None
    canopy = () if given["canopy_albedo"] is None else (given["canopy_albedo"],)
    factors = given["coarser"]
    try:
        coarser = () if factors == "none" else tuple(int(part) for part in factors.split(","))
    except ValueError:
        raise click.UsageError(f"--coarser {factors!r} is not whole numbers, or 'none'") from None
    return {
        "clock": parse_clock(given["clock"]),
        "season": None if given["season"] is None else parse_season(given["season"]),
        "rule_read": None if given["rule"] is None else read_rule(given["rule"], warm=warm),
        "rows_read": RowSettings(*given["vine_rows"], *canopy) if given["vine_rows"] else None,
        "coarser": coarser,
        "albedo_for_now": ALBEDO_FOR_NOW if isinstance(given["albedo"], str) else given["albedo"],
    }


@dataclass(frozen=True)
class _Job:
    """The command as resolved."""

    common: Common
    around: Around
    asked: AskedSky
    given: dict[str, Any]
    ground: Ground
    air: Air

    def run(self) -> None:
        """Carry it out, or only tell of it."""
        from terrasol.cli.forecast import give_forecast
        from terrasol.cli.run import check_places, tell
        from terrasol.files.vectors import coverage, read_polygons

        common, given, elevation = self.common, self.given, self.ground.elevation
        polygons = read_polygons(
            given["parcels_file"],
            elevation.crs,
            layer=given["layer"],
            name_field=given["name_field"],
        )
        from terrasol.files.rasters import naming

        with naming(given["parcels_file"]):
            cells, _ = coverage(polygons, elevation.transform, elevation.shape)
        there = [n for n, each in zip(polygons.names, cells, strict=True) if each.rows.size]
        files = self._files(there)
        settled = self.asked.settle(
            self.air, given["period"], given["step_seconds"], self.ground.elevation
        )
        settings, notes = self._settings(settled)
        check_places(common, files, self._inputs(settled))
        if common.dry_run:
            give_forecast(common, self._forecast(polygons, settings, files), _in_lines)
            return
        record = self._carry_out(polygons, settings, settled, files, notes)
        tell(common, record, _summary_text)

    def _files(self, names: list[str]) -> list[str]:
        """Files to write, the record last."""
        from terrasol.files.delivery import RECORD

        sheets = {"pdf": [BOOK], "png": [SUMMARY, *sheet_names(names)], "none": []}
        return [
            LAYER,
            TABLE,
            *([SIZES] if self.given["coarser"] else []),
            *([ROWS] if self.given["rows_read"] else []),
            *([DOUBTS] if self.given["error"] else []),
            COLUMNS,
            *sheets[self.given["sheets"]],
            RECORD,
        ]

    def _inputs(self, settled: Settled) -> list[str]:
        """All files that are read."""
        given = self.given
        files = (
            self.common.dem, given["parcels_file"], given["temperatures"],
            *raster_named(given["albedo"]),
        )  # fmt: skip
        return [name for name in (*files, *self.around.inputs, *settled.inputs) if name]

    def _settings(self, settled: Settled) -> tuple[ParcelSettings, tuple[str, ...]]:
        """What is asked for, and warnings."""
        from terrasol.engine.parcels import ParcelSettings
        from terrasol.light.days import parse_days
        from terrasol.light.hours import HoursSettings
        from terrasol.light.settings import LightSettings

        given, common = self.given, self.common
        albedo, doubts = settle_albedo(given["albedo"], settled, self.ground.elevation)
        light = LightSettings(
            period=settled.period,
            air=self.air,
            diffuse=given["diffuse"],
            azimuths=common.azimuths,
            step_seconds=given["step_seconds"],
            refraction=common.refraction,
            sky=settled.sky,
            index_map=settled.index_map,
            **albedo,
        )
        hours = HoursSettings(
            period=settled.period,
            sky=settled.sky or self.air,
            days=parse_days(None, settled.period),
            clock=given["clock"],
            step_seconds=given["step_seconds"],
            refraction=common.refraction,
        )
        asked, notes = self._asked(settled)
        settings = ParcelSettings(
            light,
            hours,
            asked,
            given["score"],
            given["coarser"],
            given["rows_read"],
            given["error"],
            "" if settled.station is None else settled.station.name,
        )
        notes = (*settled.warnings, *doubts, *notes)
        return settings, (*self.asked.doubts(self.ground.frame), *notes)

    def _asked(self, settled: Settled) -> tuple[Asked, tuple[str, ...]]:
        """How parcels are told of, and warnings on the temperatures."""
        from terrasol.engine.parcel_figures import Asked, Warmth
        from terrasol.files.temperatures import read_temperatures
        from terrasol.practice.degree_days import LAPSE
        from terrasol.practice.season import growing_season

        given = self.given
        plain = {
            name: given[key]
            for name, key in (("slope_edges", "slope_classes"), ("flat_below", "flat_below"))
            if given[key] is not None
        }
        warmth: Warmth | None = None
        notes: tuple[str, ...] = ()
        if given["temperatures"] is not None:
            found, notes = read_temperatures(given["temperatures"], given["temperatures_height"])
            lapse = LAPSE if given["lapse_rate"] is None else shortest(given["lapse_rate"])
            warmth = Warmth(found, lapse, given["huglin_beyond_50"])
        asked = Asked(
            period=settled.period,
            season=given["season"] or growing_season(self.ground.frame.centre[0]),
            rule=given["rule_read"],
            least_patch=given["least_patch"],
            warmth=warmth,
            **plain,
        )
        return asked, notes

    def _record_settings(self, settings: ParcelSettings, settled: Settled) -> dict[str, Any]:
        """Settings as plain text and numbers."""
        given, light, asked = self.given, settings.light, settings.asked
        record: dict[str, Any] = {
            "parcels": file_record(given["parcels_file"])
            | {"layer": given["layer"], "name_field": given["name_field"]},
            "period": light.period.record(),
            "season": asked.season_words,
            "slope_classes_percent": list(asked.slope_edges),
            "flat_below_percent": asked.flat_below,
            "rule": None if asked.rule is None else asked.rule.text,
            "least_patch_m2": asked.least_patch,
            "score": settings.score,
            "coarser": list(settings.coarser),
            "rows_m": None if settings.rows is None else given["vine_rows"],
            "canopy_albedo": None if settings.rows is None else settings.rows.canopy_albedo,
            "clock": settings.hours.clock.name,
            "days": [str(day) for day in settings.hours.days],
            "air": light.air.record(),
            "albedo": albedo_record(given["albedo"], light),
            "diffuse": light.diffuse,
            "basis": "per area of slope",
            "azimuths": light.azimuths,
            "azimuths_hours": settings.hours.azimuths,
            "step_seconds": light.step_seconds,
            "refraction": light.refraction,
            "vertical_unit": self.ground.unit,
            "fill_voids": self.common.fill_voids,
        }
        if asked.warmth is not None:
            record["temperatures"] = file_record(given["temperatures"]) | {
                "height_m": asked.warmth.station.height,
                "kind": asked.warmth.station.basis,
                "lapse_k_per_km": asked.warmth.lapse,
                "huglin_beyond_50": asked.warmth.beyond,
            }
        told = AskedError.record(given["error"], self.ground.frame.cell_size)
        return record | settled.record | self.around.record() | told

    def _forecast(
        self, polygons: Polygons, settings: ParcelSettings, files: list[str]
    ) -> dict[str, Any]:
        """What would be done, and what it costs."""
        from terrasol.cli.forecast import free_disk_mb, ground_forecast
        from terrasol.cli.run import superseded
        from terrasol.engine.hours import plan_hours
        from terrasol.engine.job import plan_irradiation
        from terrasol.engine.plan import default_threads
        from terrasol.engine.trued import BYTES_A_CELL, SECONDS_A_CELL
        from terrasol.files.overlaps import overlap_doubts
        from terrasol.files.rasters import naming

        common, elevation = self.common, self.ground.elevation
        threads = common.threads or default_threads()
        with naming(common.dem):
            plans = (
                plan_irradiation(elevation, settings.light),
                plan_hours(elevation, settings.hours),
            )
        shares = sum(1.0 / factor**2 for factor in (1, *settings.coarser))
        seconds = shares * sum(plan.seconds(threads) for plan in plans)
        drawing = truing = 0.0
        if settings.error is not None:
            cells = elevation.heights.size
            once = plans[0].seconds(threads) + SECONDS_A_CELL * cells
            seconds += settings.error.realisations * once
            truing = BYTES_A_CELL * cells
        if self.given["sheets"] != "none":
            seconds += SECONDS_A_SHEET * len(polygons)
            drawing = SHEET_BYTES * len(polygons)
        memory = max(plan.memory_bytes for plan in plans)
        removed, notes = superseded(common, files)
        return ground_forecast(common, self.ground) | {
            "parcels": list(polygons.names),
            "season": settings.asked.season_words,
            "files": files,
            "removed": removed,
            "memory_mb": round((memory + drawing + truing) / 1e6),
            "disk_free_mb": free_disk_mb(common.out_dir),
            "threads": threads,
            "seconds": round(seconds),
            "warnings": [
                *elevation.warnings, *polygons.warnings, *overlap_doubts(polygons), *notes,
            ],
        }  # fmt: skip

    def _carry_out(
        self,
        polygons: Polygons,
        settings: ParcelSettings,
        settled: Settled,
        files: list[str],
        notes: tuple[str, ...],
    ) -> dict[str, Any]:
        """Compute and write everything, or leave nothing behind; return the record."""
        from terrasol.cli.progress import progress_bar
        from terrasol.cli.run import announce_compilation, deliver, seconds_of
        from terrasol.engine.parcels import survey
        from terrasol.engine.plan import default_threads
        from terrasol.files.delivery import Delivery
        from terrasol.files.provenance import run_record
        from terrasol.files.rasters import naming

        common, start = self.common, time.perf_counter()
        record = run_record("parcels", common.dem, self._record_settings(settings, settled))
        threads = common.threads or default_threads()
        delivery = Delivery(common.out_dir, files, overwrite=common.overwrite)
        with delivery, progress_bar(common.quiet) as move:
            announce_compilation(common.quiet)
            with naming(common.dem):
                found = survey(
                    self.ground.elevation, polygons, settings, self.around.scene, threads,
                    lambda share, stage: move(0.9 * share, stage),
                )  # fmt: skip
            computed = time.perf_counter()
            self._write(delivery, found, files, lambda share: move(0.9 + 0.1 * share, "drawing"))
            drawing = time.perf_counter() - computed
            parts = {"survey": computed - start, "writing and drawing": drawing}
            record |= {
                "threads": threads,
                "results": _results(found),
                "warnings": [*found.warnings, *notes],
                "seconds": seconds_of(self.ground, start, parts),
            }
            return deliver(delivery, common, files, record)

    def _write(self, delivery: Any, found: Survey, files: list[str], move: Any) -> None:
        """Stage all files but the record."""
        from terrasol.engine.parcel_tables import (
            column_rows,
            doubt_rows,
            layer_words,
            patch_rows,
            row_rows,
            size_rows,
            table_rows,
        )
        from terrasol.files.parcel_tables import table_csv, write_layer

        rows = table_rows(found)
        elevation, place = self.ground.elevation, delivery.staged(LAYER)
        try:
            outlines = [parcel.outline for parcel in found.order]
            words = layer_words(found)
            write_layer(place, "parcels", elevation.crs, outlines, rows, words["parcels"])
            if found.settings.asked.rule is not None:
                patches = patch_rows(found, elevation.transform)
                write_layer(place, "rule", elevation.crs, *patches, words["rule"], append=True)
        except Exception as error:  # of GDAL, pyogrio and the disk
            raise delivery.refusal(LAYER, error) from error
        tables = {TABLE: rows, COLUMNS: column_rows(found)}
        if SIZES in files:
            tables[SIZES] = size_rows(found)
        if ROWS in files:
            tables[ROWS] = row_rows(found)
        if DOUBTS in files:
            tables[DOUBTS] = doubt_rows(found)
        for name, lines in tables.items():
            columns = list(dict.fromkeys(column for line in lines for column in line))
            delivery.write_bytes(name, table_csv(columns, lines))
        self._draw(delivery, found, files, move)

    def _draw(self, delivery: Any, found: Survey, files: list[str], move: Any) -> None:
        """Stage the sheets."""
        if self.given["sheets"] == "none":
            return
        import gc
        from pathlib import Path

        from terrasol.show.page import book
        from terrasol.show.parcel_sheet import parcel_page
        from terrasol.show.parcels import summary_page

        title = Path(self.given["parcels_file"]).stem
        elevation, frame = self.ground.elevation, self.ground.frame

        def pages() -> Iterator[Page]:
            """One after the other, so that no more than a few are in memory."""
            yield summary_page(found, elevation, frame, title=title)
            for k, parcel in enumerate(found.order):
                yield parcel_page(found, parcel, elevation, frame, title=title)
                move((k + 1) / len(found.parcels))
                if k % SHEETS_KEPT == 0:
                    gc.collect()  # what a sheet is made of holds itself in rings

        if BOOK in files:
            try:
                book(delivery.staged(BOOK), pages(), Title=title)
            except OSError as error:
                raise delivery.refusal(BOOK, error) from error
            return
        names = dict(zip((p.name for p in found.parcels), _sheets(files), strict=True))
        drawn = [SUMMARY, *(names[parcel.name] for parcel in found.order)]
        for name, page in zip(drawn, pages(), strict=True):
            delivery.write_bytes(name, page.png(2.0, Title=title))


def _sheets(files: list[str]) -> list[str]:
    """The names of single sheets among files."""
    return [name for name in files if name.startswith("sheet_")]


def sheet_names(names: list[str]) -> list[str]:
    """File names for parcels: their place in the file, and their name in plain letters.

    Examples
    --------
    >>> sheet_names(["Côte 1", "/"])
    ['sheet_1_cote-1.png', 'sheet_2.png']
    """
    import re
    import unicodedata

    width = len(str(len(names)))
    found = []
    for place, name in enumerate(names, 1):
        plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode().lower()
        words = "-".join(re.findall(r"[a-z0-9]+", plain))[:40]
        found.append("_".join(part for part in ("sheet", f"{place:0{width}}", words) if part))
    return [f"{name}.png" for name in found]


def _results(found: Survey) -> dict[str, Any]:
    """What came out, ready for JSON."""
    from terrasol.engine.outputs import sky_kind
    from terrasol.engine.parcel_tables import table_rows
    from terrasol.files.parcel_tables import rounded
    from terrasol.practice.limits import VINEYARD

    rows = [{name: rounded(value) for name, value in row.items()} for row in table_rows(found)]
    return {
        "parcels": rows,
        "cell_m": round(found.cell_size, 3),
        "score_terms": list(found.score.terms) if found.score else None,
        "sky": sky_kind(found.settings.light),
        "light": found.settings.sky_words,
        "shade": found.shade,
        "not_in_it": VINEYARD,
    }


def _in_lines(f: dict[str, Any]) -> str:
    """The forecast for people."""
    from terrasol.cli.forecast import forecast_text
    from terrasol.words import listed

    parcels = f"{len(f['parcels'])}: {listed(f['parcels'], MOST_LISTED)}"
    own = [("parcels", parcels), ("season", f["season"])]
    return forecast_text(f, own, about="at most about")


LONGEST_CELL: Final = 40
"""Characters of a name in the printed table (judgement, no source)."""


def _cell(row: dict[str, Any], name: str, form: str, smallest: float = 1.0) -> str:
    """A figure for the table; an area in the unit that suits the smallest parcel [ha]."""
    from terrasol.show.plus_minus import area_figure

    if row.get(name) is None:
        return "-"
    if name.endswith("_ha_map"):
        error, whole = row.get(f"{name}_se"), row["known_ha_map"]
        return area_figure(row[name], error, whole, sign="+/-", like=smallest)
    told = form.format(row[name])
    return told if len(told) <= LONGEST_CELL else f"{told[: LONGEST_CELL - 3]}..."


def _summary_text(record: dict[str, Any]) -> str:
    """What came out, for people: a table, best first."""
    from terrasol.cli.run import closing_lines
    from terrasol.engine.outputs import SKIES
    from terrasol.words import area_unit

    results, settings = record["results"], record["settings"]
    rows = results["parcels"]
    whole = all(row["known_ha_map"] == row["drawn_ha_map"] for row in rows)
    smallest = min((row["drawn_ha_map"] for row in rows if row["drawn_ha_map"]), default=1.0)
    unit = area_unit(smallest)[0]
    wanted = [
        ("rank", "rank", "{:.0f}"),
        ("parcel", "parcel", "{}"),
        (f"{unit} drawn", "drawn_ha_map", ""),
        *([] if whole else [(f"{unit} known", "known_ha_map", "")]),
        ("slope %", "slope_mean_percent", "{:.1f}"),
        ("faces", "aspect_mean_deg", "{:.0f}°"),
        ("MJ/m2 season", "irradiation_season_mj_m2_slope", "{:.0f}"),
        ("of level", "share_of_level_season", "{:.3f}"),
        ("sun h", "sun_hours_season_h", "{:.0f}"),
        (f"rule {unit}", "rule_ha_map", ""),
        ("degree-days", "winkler_mean_c_days", "{:.0f}"),
        ("score", "score", "{:.4g}"),
    ]
    table = [
        [head, *(_cell(row, name, form, smallest) for row in rows)]
        for head, name, form in wanted
        if any(name in row for row in rows)
    ]
    told = []
    for line in zip(*table, strict=True):
        cells = [
            text.ljust(max(map(len, column))) if column[0] == "parcel" else
            text.rjust(max(map(len, column)))
            for text, column in zip(line, table, strict=True)
        ]  # fmt: skip
        told.append("  ".join(cells))
    told.append(
        f"season: {settings['season']}; energy {SKIES[results['sky']]}, per area of slope; areas of"
        " map"
    )
    told.append(results["light"])
    if settings["rule"]:
        least = f", in patches from {settings['least_patch_m2']:g} m2" * bool(
            settings["least_patch_m2"]
        )
        told.append(f"rule: {settings['rule']}{least}")
        if any(row.get("rule_ha_map_se") is not None for row in rows):
            told.append(
                f"rule {unit}: +/- one standard error from the error of the heights; a range where"
                " none or all of a parcel meets the rule"
            )
    if settings["score"]:
        told.append(f"score: {settings['score']}")
    if "far" in settings:
        told.append(results["shade"])  # else a warning says it
    told.append(results["not_in_it"])
    return "\n".join([*told, *closing_lines(record)])
