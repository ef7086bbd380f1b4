"""`terrasol compare`: a station's measurements against the model at its place."""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import click

from terrasol.cli.ground_options import Around, ground_options
from terrasol.cli.options import (
    Common,
    Name,
    Numbers,
    arguments_in_order,
    common_options,
    diffuse_option,
)
from terrasol.cli.sky_options import AskedSky, file_record, sky_options

if TYPE_CHECKING:
    from terrasol.cli.run import Ground
    from terrasol.engine.comparison import StationReport
    from terrasol.sky.clear import Air
    from terrasol.sky.station import Station

TABLE, PICTURE = "comparison.csv", "comparison.png"

COLUMNS = ("time_utc_start", "measured_w_m2", "modelled_w_m2", "modelled_open_w_m2", "counted")
"""Of the table: beginning of the interval, three irradiances, and whether the interval counts."""

NOT_HERE = ("compression", "clear_sky_index", "horizon_gap", "highest")
"""Shared options that mean nothing for one place."""

HELP = {
    "station": "A second station, CSV or NetCDF, with SERIES.toml beside it: its sky is modelled in"
    " place of a clear one, and all days count.",
    "decomposition": "Model that parts the beam off where the second station measured global only."
    " [default: dirint]",
    "fill_hours": "Longest gap of SERIES to fill, in hours of sun. [default: 3]",
}
"""Shared options that mean something of their own here."""


@click.command(short_help="A station's measurements against the model at its place.")
@click.argument("measured", type=Name())
@click.option(
    "--measured-settings",
    metavar="TOML",
    help="What the columns of MEASURED are, and where it stands. [default: MEASURED.toml]",
)
@click.option(
    "--albedo",
    type=Numbers(),
    help="Albedo of the ground around. [default: as MEASURED has it, else 0.2]",
)
@diffuse_option
@sky_options
@ground_options
@common_options
def compare(common: Common, around: Around, asked: AskedSky, **given: Any) -> None:
    """Global irradiance of the series MEASURED against the model at its place in DEM.

    The model takes a clear sky, and is then compared on clear days only, or with --station the
    sky of a second station. Tells bias and rms by month and by hour of day, whether the horizon
    explains when the sun comes and goes, and whether the clock of MEASURED is right; nothing is
    corrected. Writes comparison.csv, comparison.png and run.json into OUT_DIR.
    """
    from terrasol.cli.run import read
    from terrasol.files.tables import read_station
    from terrasol.light.settings import check_azimuths, check_refraction

    _check(around, asked)
    check_azimuths(common.azimuths)
    check_refraction(common.refraction)
    air = asked.air(given["albedo"] or (0.2,))
    station = read_station(given["measured"], given["measured_settings"])
    other = None
    if asked.station is not None:
        other = read_station(asked.station, asked.station_settings)
    ground = read(common)
    air = asked.placed(air, ground.frame)
    _Job(common, around, asked, given, ground, air, station, other).run()


def _check(around: Around, asked: AskedSky) -> None:
    """Refuse options that mean nothing here."""
    around.refuse_map()
    if asked.clear_sky_index is not None:
        raise click.UsageError("--clear-sky-index has no hours and no days: give a --station")


def _rearrange(command: click.Command) -> None:
    """Put the arguments in order, and say of shared options what is different here."""
    arguments_in_order(command, "dem", "measured", "out_dir")
    for option in command.params:
        if option.name == "azimuths":
            option.default = 256  # as in the library, four times as many as for energy
        if isinstance(option, click.Option):
            option.help = HELP.get(str(option.name), option.help)
            option.hidden = option.hidden or option.name in NOT_HERE


_rearrange(compare)


@dataclass(frozen=True)
class _Job:
    """The command as resolved."""

    common: Common
    around: Around
    asked: AskedSky
    given: dict[str, Any]
    ground: Ground
    air: Air
    station: Station
    other: Station | None

    @property
    def names(self) -> list[str]:
        """Files to write, the record last."""
        from terrasol.files.delivery import RECORD

        return [TABLE, PICTURE, RECORD]

    @property
    def inputs(self) -> list[str]:
        """All files that are read."""
        given, asked = self.given, self.asked
        files = (
            self.common.dem, *self.around.inputs, given["measured"], given["measured_settings"],
            asked.station, asked.station_settings,
        )  # fmt: skip
        return [name for name in files if name]

    def settings(self) -> dict[str, Any]:
        """Settings as plain text and numbers."""
        given, asked, common = self.given, self.asked, self.common
        record: dict[str, Any] = {"air": self.air.record()}
        for name, path in (("measured", given["measured"]), ("second_station", asked.station)):
            if path:
                record[name] = file_record(path)
        if asked.station:
            record["decomposition"] = asked.decomposition or "dirint"
            record["fill_hours"] = self._fill_hours
        return (
            record
            | self.around.record()
            | {
                "albedo": given["albedo"],
                "diffuse": given["diffuse"],
                "azimuths": common.azimuths,
                "refraction": common.refraction,
                "vertical_unit": self.ground.unit,
                "fill_voids": common.fill_voids,
            }
        )

    @property
    def _fill_hours(self) -> float:
        from terrasol.sky.gaps import LONGEST_HOURS

        return LONGEST_HOURS if self.asked.fill_hours is None else self.asked.fill_hours

    def run(self) -> None:
        """Carry it out, or only tell of it."""
        from terrasol.cli.forecast import give_forecast
        from terrasol.cli.run import check_places, tell

        common = self.common
        check_places(common, self.names, self.inputs)
        if common.dry_run:
            give_forecast(common, self._forecast(), _in_lines)
            return
        record, found = self._carry_out()
        tell(common, record, lambda record: _summary_text(record, found))

    def _forecast(self) -> dict[str, Any]:
        """What would be compared, and where."""
        from terrasol.cli.forecast import ground_forecast
        from terrasol.cli.run import superseded
        from terrasol.engine.comparison import cell_of, station_record
        from terrasol.files.rasters import naming

        common, ground, station, other = self.common, self.ground, self.station, self.other
        elevation = ground.elevation
        with naming(common.dem):
            row, column = cell_of(elevation, ground.frame, station.latitude, station.longitude)
        removed, notes = superseded(common, self.names)
        notes = [*station.notes, *(other.notes if other else ()), *notes]
        return ground_forecast(common, ground) | {
            "station": station_record(station),
            "cell": {
                "row": row,
                "column": column,
                "height_m": round(float(elevation.heights[row, column]), 2),
            },
            "second_station": None if other is None else station_record(other),
            "files": self.names,
            "removed": removed,
            "warnings": [*elevation.warnings, *notes],
        }

    def _carry_out(self) -> tuple[dict[str, Any], list[str]]:
        """Compute and write everything, or leave nothing behind: the record, and the summary."""
        from terrasol.cli.progress import progress_bar
        from terrasol.cli.run import announce_compilation, deliver, seconds_of
        from terrasol.engine.plan import default_threads
        from terrasol.files.delivery import Delivery
        from terrasol.files.provenance import run_record
        from terrasol.show.comparison import comparison_png

        common, start = self.common, time.perf_counter()
        record = run_record("compare", common.dem, self.settings())
        threads = common.threads or default_threads()
        delivery = Delivery(common.out_dir, self.names, overwrite=common.overwrite)
        with delivery, progress_bar(common.quiet) as move:
            announce_compilation(common.quiet)
            report, notes = self._report(threads, lambda share, stage: move(0.6 * share, stage))
            lines = report.lines()
            delivery.write_bytes(TABLE, _table(report))
            move(0.9, "drawing")
            picture = comparison_png(report, title=report.station.name, notes=lines[1:])
            delivery.write_bytes(PICTURE, picture)
            record |= {
                "threads": threads,
                "results": report.record(),
                "warnings": [*notes, *report.warnings],
                "seconds": seconds_of(self.ground, start, {}),
            }
            record = deliver(delivery, common, self.names, record)
            move(1.0, "done")
        return record, lines

    def _report(self, threads: int, progress: Any) -> tuple[StationReport, list[str]]:
        """The comparison, and warnings of the ground."""
        from terrasol.engine.comparison import compare_station, spot_at
        from terrasol.files.rasters import naming

        common, elevation, station = self.common, self.ground.elevation, self.station
        scene = self.around.scene(elevation, self.ground.frame)
        with naming(common.dem):
            spot = spot_at(
                elevation, station.latitude, station.longitude, common.azimuths,
                common.refraction, scene, threads, progress,
            )  # fmt: skip
        report = compare_station(
            station, self.air, spot, self.other,
            albedo=self.given["albedo"],
            diffuse=self.given["diffuse"],
            decomposition=self.asked.decomposition or "dirint",
            fill_hours=self._fill_hours,
        )  # fmt: skip
        notes = [*elevation.warnings, *scene.warnings, *self.asked.doubts(self.ground.frame)]
        return report, notes


def _table(report: StationReport) -> bytes:
    """The series as text; nothing where nothing is known."""
    import numpy as np

    station, modelled = report.station, report.modelled
    times = np.datetime_as_string(station.start.astype("M8[s]"), timezone="UTC")
    columns = [
        ["" if np.isnan(value) else f"{value:.2f}" for value in values]
        for values in (station.values["global"], modelled.shaded, modelled.open)
    ]
    counted = report.counted.astype(int)
    rows = (",".join(map(str, row)) for row in zip(times, *columns, counted, strict=True))
    return ("\n".join([",".join(COLUMNS), *rows]) + "\n").encode()


def _in_lines(f: dict[str, Any]) -> str:
    """The forecast for people."""
    from terrasol.cli.forecast import forecast_text

    station, cell, other = f["station"], f["cell"], f["second_station"]
    place = (
        f"row {cell['row']}, column {cell['column']}, at {cell['height_m']:.0f} m"
        f" (stated: {station['height_m']:.0f} m)"
    )
    sky = "clear; clear days count" if other is None else f"that of {_span(other)}"
    return forecast_text(f, [("measured", _span(station)), ("cell", place), ("sky", sky)])


def _summary_text(record: dict[str, Any], found: list[str]) -> str:
    """What came out, for people."""
    from terrasol.cli.run import closing_lines

    return "\n".join([*found, *closing_lines(record)])


def _span(station: dict[str, Any]) -> str:
    return (
        f"{station['name']}, {station['start']} to {station['end']},"
        f" every {station['interval_seconds']} s"
    )
