"""`terrasol site`: one place in full, or two side by side."""

from __future__ import annotations

import os
import time
from contextlib import AbstractContextManager, nullcontext
from copy import copy
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import click

from terrasol.cli.error_options import AskedError, error_options
from terrasol.cli.ground_options import Around, ground_options
from terrasol.cli.irradiation import irradiation, light_record
from terrasol.cli.options import Common, Name, Numbers, common_options, period_option
from terrasol.cli.sky_options import ALBEDO_FOR_NOW, AskedSky, sky_options
from terrasol.constants import ENERGY_UNITS
from terrasol.errors import SettingError
from terrasol.words import counted

if TYPE_CHECKING:
    from datetime import date

    from terrasol.cli.run import Ground
    from terrasol.cli.sky_options import Settled
    from terrasol.engine.site import Site, Spot
    from terrasol.files.delivery import Delivery
    from terrasol.ground.beyond import Scene
    from terrasol.ground.uncertainty import DemError
    from terrasol.light.days import Clock
    from terrasol.light.settings import LightSettings

SHEET_PDF, SHEET_PNG, TABLE = "sheet.pdf", "sheet.png", "days.csv"

COLUMNS = (
    "place", "day", "first_sun_h", "last_sun_h", "sun_hours", "interruptions",
    "level_first_sun_h", "level_last_sun_h", "level_sun_hours",
)  # fmt: skip
"""Of the table: the day as month and day; hours since 0:00 on the clock, hours of sun."""

AS_IRRADIATION = ("albedo", "diffuse", "step_seconds", "unit", "basis")
"""Options that are those of `terrasol irradiation`."""

NOT_HERE = ("compression", "horizon_gap", "highest")
"""Shared options that mean nothing for one place: kept out of the help, and refused."""

ENERGY_AZIMUTHS = 64
"""Horizon azimuths of the energy, as `terrasol irradiation` has by default: so its map has the
same figure. The horizon drawn and the hours of sun have those of --azimuths."""

OF_THE_RASTER = "dem"


class Place(click.ParamType):
    """Two numbers joined by a comma, x or longitude first."""

    name = "place"

    def get_metavar(self, param: click.Parameter, ctx: click.Context) -> str:
        """Name in the help."""
        return "LON,LAT"

    def convert(self, value: Any, param: Any, ctx: Any) -> Any:
        """Read the text."""
        if not isinstance(value, str):
            return value
        try:
            x, y = (float(part) for part in value.split(","))
        except ValueError:
            self.fail(f"'{value}' is not two numbers joined by a comma, as 10.61,46.54", param, ctx)
        return x, y


@click.command(short_help="One place in full: horizon, sun by month and minute, as a sheet.")
@click.option(
    "--at",
    type=Place(),
    required=True,
    help="The place, longitude first: degrees east and north of WGS 84, or x and y of --at-crs.",
)
@click.option("--compare", type=Place(), help="A second place, told and drawn beside the first.")
@click.option(
    "--at-crs",
    metavar=f"CRS|{OF_THE_RASTER}",
    help=f"CRS of the places, such as EPSG:32632, or '{OF_THE_RASTER}' for that of DEM."
    " [default: WGS 84]",
)
@click.option(
    "--name", "labels", metavar="TEXT", multiple=True, help="Name of the place; again: the second."
)
@click.option(
    "--day",
    "days",
    metavar="DATE",
    multiple=True,
    help="Tell first and last sun of this day, and draw the sun's path.",
)
@click.option(
    "--clock",
    metavar="solar|+HH:MM|ZONE",
    default="solar",
    show_default=True,
    help="Time of day: true solar time, an offset from UTC, or a time zone such as Europe/Zurich.",
)
@period_option
@sky_options
@ground_options
@error_options
@common_options
def site(
    common: Common, around: Around, asked: AskedSky, asked_error: AskedError, **given: Any
) -> None:
    """Everything about one place in the elevation raster DEM, or about two side by side.

    Height, slope and aspect; the horizon all round with the sun's paths; energy by month and part
    beside level ground; first and last sun; sun or shade in every minute of the year. Prints it
    as text on stdout; with --out also writes sheet.pdf, sheet.png, days.csv and run.json.
    """
    from terrasol.cli.run import read
    from terrasol.light.days import parse_clock

    _check(around, given)
    clock, days = parse_clock(given["clock"]), _days(given["days"])
    settings, error = _settings(common, asked, given), asked_error.read()
    ground = read(common)
    spots = _spots(given, ground)
    _Job(common, around, asked, given, ground, settings, spots, clock, days, error).run()


def _rearrange(command: click.Command) -> None:
    """Make the folder an option, and say of shared options what is different here."""
    shared = [copy(option) for option in irradiation.params if option.name in AS_IRRADIATION]
    out = click.Option(
        ["--out", "out_dir"],
        metavar="FOLDER",
        type=Name(),
        help="Write the sheet and its figures into this folder.",
    )
    kept = [option for option in command.params if option.name != "out_dir"]
    after = [option.name for option in kept].index("period") + 1
    kept[after:after] = [*shared, out]
    command.params = kept
    for option in kept:
        if not isinstance(option, click.Option):
            continue
        if option.name == "azimuths":
            option.default = 256  # as in the library, four times as many as for energy
            option.help = (
                "Azimuths of the horizon and the hours of sun: a multiple of 4 from 8 to 720;"
                f" energy has {ENERGY_AZIMUTHS}."
            )
        elif option.name == "albedo":
            option.type = Numbers("station")
            option.help = "Albedo of the ground: numbers, or 'station' for what SERIES measured."
        elif option.name == "clear_sky_index":
            option.type = Numbers()
            option.help = "Monthly mean of global light by that of a clear sky, for clouds."
        elif option.name == "as_json":
            option.help = "Print one JSON object on stdout in place of the text."
        elif option.name == "quiet":
            option.help = "Print the result alone: no progress, no word of files; errors stay."
        elif option.name == "overwrite":
            option.help = (
                "Replace files that are there, and remove those of an earlier run in FOLDER that"
                " this one does not write."
            )
        elif option.name in NOT_HERE:
            option.hidden = True


_rearrange(site)


def _check(around: Around, given: dict[str, Any]) -> None:
    """Refuse options that do not go together, or mean nothing here."""
    around.refuse_map()
    places = 1 if given["compare"] is None else 2
    if len(given["labels"]) > places:
        raise click.UsageError(
            f"--name is given {len(given['labels'])} times, for {counted(places, 'place')}"
        )


def _days(texts: tuple[str, ...]) -> tuple[date, ...]:
    """The days whose sun's path is wanted."""
    from terrasol.sky.period import FIRST_YEAR, LAST_YEAR, parse_period

    found = []
    for text in texts:
        try:
            period = parse_period(text)
        except SettingError:
            period = None
        if period is None or period.days != 1:
            raise SettingError(
                f"--day {text!r} is not one day of the years {FIRST_YEAR} to {LAST_YEAR}: write it"
                " as 2025-08-15"
            )
        found.append(period.start.astype("M8[D]").item())
    return tuple(found)


def _settings(common: Common, asked: AskedSky, given: dict[str, Any]) -> LightSettings:
    """Everything that can be settled before the raster is read."""
    from terrasol.light.settings import LightSettings, check_azimuths, twelve
    from terrasol.sky.period import parse_period

    check_azimuths(common.azimuths)
    albedo = ALBEDO_FOR_NOW if isinstance(given["albedo"], str) else given["albedo"]
    return LightSettings(
        period=parse_period(given["period"]),
        air=asked.air(albedo),
        albedo=twelve(albedo, "albedo"),
        diffuse=given["diffuse"],
        azimuths=ENERGY_AZIMUTHS,
        step_seconds=given["step_seconds"],
        unit=ENERGY_UNITS.get(given["unit"], given["unit"]),
        basis=given["basis"],
        monthly_parts=True,
        refraction=common.refraction,
    )


def _spots(given: dict[str, Any], ground: Ground) -> list[Spot]:
    """The places asked for, in longitude and latitude."""
    from terrasol.engine.site import Spot

    places = [place for place in (given["at"], given["compare"]) if place is not None]
    labels = [*given["labels"], "", ""]
    return [
        Spot(*_geodetic(place, given["at_crs"], ground), label)
        for place, label in zip(places, labels, strict=False)
    ]


def _geodetic(place: tuple[float, float], crs: str | None, ground: Ground) -> tuple[float, float]:
    """Latitude and longitude of a place.

    Raises
    ------
    SettingError
        A CRS that is not known, or a place that lies nowhere in it.
    """
    import math

    from pyproj import CRS, Transformer
    from pyproj.exceptions import CRSError

    from terrasol.ground.places import WGS84

    longitude, latitude = place
    if crs is not None:
        try:
            own = ground.elevation.crs if crs == OF_THE_RASTER else CRS.from_user_input(crs)
        except CRSError as error:
            raise SettingError(
                f"--at-crs {crs!r} is not a CRS that is known: write EPSG:32632, say, or dem"
            ) from error
        longitude, latitude = Transformer.from_crs(own, WGS84, always_xy=True).transform(*place)
    if not (abs(latitude) <= 90.0 and math.isfinite(longitude) and abs(longitude) <= 540.0):
        of = "WGS 84: write longitude, then latitude, or name their --at-crs"
        where = f"{crs}" if crs is not None else of
        raise SettingError(f"{place[0]:.9g},{place[1]:.9g} is no place of {where}")
    return latitude, longitude


@dataclass(frozen=True)
class _Job:
    """The command as resolved."""

    common: Common
    around: Around
    asked: AskedSky
    given: dict[str, Any]
    ground: Ground
    settings: LightSettings
    spots: list[Spot]
    clock: Clock
    days: tuple[date, ...]
    error: DemError | None

    @property
    def names(self) -> list[str]:
        """Files to write, the record last; none without a folder."""
        from terrasol.files.delivery import RECORD

        return [SHEET_PDF, SHEET_PNG, TABLE, RECORD] if self.common.out_dir else []

    def run(self) -> None:
        """Carry it out, or only tell of it."""
        from terrasol.cli.forecast import give_forecast
        from terrasol.cli.run import check_places
        from terrasol.engine.site import find_cell
        from terrasol.files.rasters import naming

        common, asked, elevation = self.common, self.asked, self.ground.elevation
        if self.names:
            files = (common.dem, *self.around.inputs, asked.station, asked.station_settings)
            check_places(common, self.names, [name for name in files if name])
        with naming(common.dem):
            cells = [find_cell(elevation, self.ground.frame, spot) for spot in self.spots]
        if common.dry_run:
            give_forecast(common, self._forecast(cells), _in_lines)
            return
        self._tell(*self._carry_out())

    def _forecast(self, cells: list[tuple[int, int]]) -> dict[str, Any]:
        """What would be told, and where."""
        from terrasol.cli.forecast import ground_forecast
        from terrasol.engine.plan import default_threads
        from terrasol.engine.site import forecast

        common, elevation = self.common, self.ground.elevation
        removed, notes = self._superseded()
        threads = common.threads or default_threads()
        scene = self.around.scene(elevation, self.ground.frame)
        seconds, memory = forecast(
            elevation, self.settings, common.azimuths, scene, self.error, threads
        )
        return ground_forecast(common, self.ground) | {
            "places": [
                {
                    "name": spot.name,
                    "latitude": round(spot.latitude, 7),
                    "longitude": round(spot.longitude, 7),
                    "row": row,
                    "column": column,
                    "height_m": round(float(elevation.heights[row, column]), 2),
                }
                for spot, (row, column) in zip(self.spots, cells, strict=True)
            ],
            "files": self.names,
            "removed": removed,
            "memory_mb": round(memory / 1e6),
            "threads": threads,
            "seconds": round(seconds),
            "warnings": [*elevation.warnings, *scene.warnings, *notes],
        }

    def _superseded(self) -> tuple[list[str], list[str]]:
        """Files of an earlier run to remove, and warnings."""
        from terrasol.cli.run import superseded

        return superseded(self.common, self.names) if self.names else ([], [])

    def _carry_out(self) -> tuple[dict[str, Any], list[Site]]:
        """Compute everything, and write it if a folder is named: the record, and the places."""
        from terrasol.cli.progress import progress_bar
        from terrasol.cli.run import announce_compilation, deliver, seconds_of
        from terrasol.engine.light_words import light_notes
        from terrasol.engine.outputs import shade_words
        from terrasol.engine.plan import default_threads
        from terrasol.files.provenance import run_record

        common, start = self.common, time.perf_counter()
        settings, settled = self._settled()
        threads = common.threads or default_threads()
        record = run_record("site", common.dem, self._record(settings) | settled.record)
        scene = self.around.scene(self.ground.elevation, self.ground.frame)
        with self._delivery() as delivery, progress_bar(common.quiet) as move:
            announce_compilation(common.quiet)
            sites = self._survey(settings, scene, threads, move)
            record |= {
                "threads": threads,
                "results": {
                    "places": [self._record_of(each) for each in sites],
                    "shade": shade_words(scene),
                },
                "warnings": [
                    *self.ground.elevation.warnings, *scene.warnings, *settled.warnings,
                    *self.asked.doubts(self.ground.frame), *self._error_doubts(),
                ],
            }  # fmt: skip
            if delivery is not None:
                self._draw(delivery, record, sites, light_notes(settings, scene))
            record["seconds"] = seconds_of(self.ground, start, {})
            if delivery is not None:
                record = deliver(delivery, common, self.names, record)
            move(1.0, "done")
        return record, sites

    def _record_of(self, found: Site) -> dict[str, Any]:
        """All of a place, with the days that were asked for."""
        record = found.record()
        if self.days:
            record["sun"]["days"] = [found.sun.day_record(day) for day in self.days]
        return record

    def _error_doubts(self) -> list[str]:
        """A warning where the stated error of the heights cannot be right."""
        from terrasol.ground.likely import too_smooth

        if self.error is None:
            return []
        doubt = too_smooth(self.ground.elevation.heights, self.error, self.ground.frame.cell_size)
        return [doubt] if doubt else []

    def _delivery(self) -> AbstractContextManager[Delivery | None]:
        """Where files go; nothing without a folder."""
        from terrasol.files.delivery import Delivery

        if not self.names:
            return nullcontext()
        return Delivery(self.common.out_dir, self.names, overwrite=self.common.overwrite)

    def _settled(self) -> tuple[LightSettings, Settled]:
        """Settings with what the raster and the station had to say."""
        asked, given, ground = self.asked, self.given, self.ground
        air = asked.placed(self.settings.air, ground.frame)
        step = self.settings.step_seconds
        settled = asked.settle(air, given["period"], step, ground.elevation)
        settings = replace(self.settings, air=air, period=settled.period, sky=settled.sky)
        if given["albedo"] == "station":
            settings = replace(settings, albedo=settled.albedo())
        return settings, settled

    def _record(self, settings: LightSettings) -> dict[str, Any]:
        """Settings as plain text and numbers."""
        record = light_record(settings)
        record["azimuths_of_energy"] = record.pop("azimuths")
        return (
            record
            | {
                "azimuths": self.common.azimuths,
                "clock": self.clock.name,
                "days": [str(day) for day in self.days],
                "vertical_unit": self.ground.unit,
                "fill_voids": self.common.fill_voids,
            }
            | self.around.record()
            | AskedError.record(self.error, self.ground.frame.cell_size)
        )

    def _survey(self, settings: LightSettings, scene: Scene, threads: int, move: Any) -> list[Site]:
        """All figures of the places."""
        from terrasol.engine.site import survey
        from terrasol.files.rasters import naming

        with naming(self.common.dem):
            return survey(
                self.ground.elevation, self.spots, settings, self.clock,
                azimuths=self.common.azimuths, scene=scene, error=self.error, threads=threads,
                progress=lambda share, stage: move(0.9 * share, stage),
            )  # fmt: skip

    def _draw(
        self,
        delivery: Delivery,
        record: dict[str, Any],
        sites: list[Site],
        notes: tuple[str, ...],
    ) -> None:
        """Stage the sheet and the table."""
        from terrasol.show.site import page_pdf, page_png, site_page

        elevation = self.ground.elevation
        said = [notes[0], notes[1], notes[3]]  # the basis is told with the energy
        if self.error is not None:
            words = self.error.words(self.ground.frame.cell_size)
            said.append(f"± is the standard error from a {words}.")
        said += [f"Warning: {text}." for text in record["warnings"]]
        source = os.path.basename(self.common.dem)
        page = site_page(elevation, sites, days=self.days, notes=said, source=source)
        title = " and ".join(spot.name or "a place" for spot in self.spots)
        delivery.write_bytes(SHEET_PDF, page_pdf(page, title))
        delivery.write_bytes(SHEET_PNG, page_png(page, title))
        delivery.write_bytes(TABLE, _table(sites))

    def _tell(self, record: dict[str, Any], sites: list[Site]) -> None:
        """The result on stdout, and of the files on stderr."""
        import json

        from terrasol.cli.forecast import duration
        from terrasol.cli.streams import give, say
        from terrasol.show.site_text import site_text

        common = self.common
        if common.as_json:
            give(json.dumps(record, indent=2))
        else:
            warnings = [f"warning: {text}" for text in record["warnings"]]
            give(site_text(sites, [record["results"]["shade"], *warnings], self.days))
        if self.names and not common.quiet and not common.as_json:
            took = duration(record["seconds"]["whole run"])
            say(f"{counted(len(self.names), 'file')} in {common.out_dir} after {took}")


def _table(sites: list[Site]) -> bytes:
    """Every day of the typical year at each place; nothing where there is no sun."""
    import numpy as np

    lines = [",".join(COLUMNS)]
    for number, each in enumerate(sites, 1):
        sun = each.sun
        columns = np.array([sun.first, sun.last, sun.hours, sun.interruptions, *sun.level])
        for day, values in zip(sun.days, columns.T, strict=True):
            cells = ["" if np.isnan(value) else f"{value:.4f}" for value in values]
            cells[3] = cells[3].split(".")[0]
            lines.append(",".join([str(number), f"{day:%m-%d}", *cells]))
    return ("\n".join(lines) + "\n").encode()


def _in_lines(f: dict[str, Any]) -> str:
    """The forecast for people."""
    from terrasol.cli.forecast import forecast_text
    from terrasol.engine.comparison import place_words

    own = [
        (
            "place",
            f"{p['name'] + ', ' if p['name'] else ''}"
            f"{place_words(p['latitude'], p['longitude'], 5)}: row {p['row']}, column"
            f" {p['column']}, at {p['height_m']:.0f} m",
        )
        for p in f["places"]
    ]
    return forecast_text(f, own, no_files="none: name a folder with --out")
