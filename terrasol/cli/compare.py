"""`terrasol compare`: a station's measurements against the model at its place."""

from __future__ import annotations

import json
import os
import time
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import click

from terrasol.cli.ground_options import Around, ground_options
from terrasol.cli.options import Common, Name, Numbers, common_options
from terrasol.cli.sky_options import AskedSky, air_record, sky_options
from terrasol.cli.streams import give, say

if TYPE_CHECKING:
    from terrasol.cli.run import Ground
    from terrasol.engine.comparison import StationReport
    from terrasol.ground.frame import Frame
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
@click.option(
    "--diffuse",
    type=click.Choice(["perez", "hay-davies", "isotropic"]),
    default="perez",
    show_default=True,
    help="Model that parts the diffuse light.",
)
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
    from terrasol.files.rasters import naming
    from terrasol.files.tables import read_station
    from terrasol.ground.frame import make_frame
    from terrasol.light.irradiation import check_azimuths, check_refraction

    _check(around, asked)
    check_azimuths(common.azimuths)
    check_refraction(common.refraction)
    air = asked.air(given["albedo"] or (0.2,))
    station = read_station(given["measured"], given["measured_settings"])
    other = None
    if asked.station is not None:
        other = read_station(asked.station, asked.station_settings)
    ground = read(common)
    with naming(common.dem):
        frame = make_frame(*_grid(ground))
    job = _Job(
        common, around, asked, given, ground, frame, asked.placed(air, frame), station, other
    )
    job.run()


def _check(around: Around, asked: AskedSky) -> None:
    """Refuse options that mean nothing here."""
    if around.horizon_gap or around.highest is not None:
        raise click.UsageError("--horizon-gap belongs to terrasol irradiation: it is a map")
    if asked.clear_sky_index is not None:
        raise click.UsageError("--clear-sky-index has no hours and no days: give a --station")


def _grid(ground: Ground) -> tuple[Any, ...]:
    elevation = ground.elevation
    return elevation.shape, elevation.transform, elevation.crs


def _rearrange(command: click.Command) -> None:
    """Put the arguments in order, and say of shared options what is different here."""
    order = ("dem", "measured", "out_dir")
    command.params.sort(
        key=lambda each: order.index(each.name) if each.name in order else len(order)
    )
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
    frame: Frame
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

    def superseded(self) -> tuple[list[str], list[str]]:
        """Files of an earlier run to remove, and warnings."""
        from terrasol.files.delivery import superseded_files

        return (
            superseded_files(self.common.out_dir, self.names) if self.common.overwrite else ([], [])
        )

    def settings(self) -> dict[str, Any]:
        """Settings as plain text and numbers."""
        from terrasol.files.provenance import sha256

        given, asked, common = self.given, self.asked, self.common
        record: dict[str, Any] = {"air": air_record(self.air)}
        for name, path in (("measured", given["measured"]), ("second_station", asked.station)):
            if path:
                record[name] = {"file": os.path.abspath(path), "sha256": sha256(path)}
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
        from terrasol.cli.run import _spare_input
        from terrasol.files.delivery import check_free

        common = self.common
        check_free(common.out_dir, self.names, common.overwrite)
        for source in self.inputs:
            _spare_input(common, source, [*self.names, *self.superseded()[0]])
        if common.dry_run:
            forecast = self._forecast()
            give(json.dumps(forecast, indent=2) if common.as_json else _in_lines(forecast))
            return
        record, lines = self._carry_out()
        if common.as_json:
            give(json.dumps(record, indent=2))
        elif not common.quiet:
            lines += [f"warning: {text}" for text in record["warnings"]]
            took = f"{record['seconds']['whole run']:.0f} s"
            say("\n".join([*lines, f"3 files in {os.path.abspath(common.out_dir)} after {took}"]))

    def _forecast(self) -> dict[str, Any]:
        """What would be compared, and where."""
        from terrasol.engine.comparison import cell_of, station_record
        from terrasol.files.rasters import naming

        with naming(self.common.dem):
            row, column = cell_of(
                self.ground.elevation, self.frame, self.station.latitude, self.station.longitude
            )
        superseded, notes = self.superseded()
        return {
            "input": self.common.dem,
            "rows": self.ground.elevation.shape[0],
            "columns": self.ground.elevation.shape[1],
            "heights_read_as": self.ground.unit,
            "station": station_record(self.station),
            "cell": {
                "row": row,
                "column": column,
                "height_m": round(float(self.ground.elevation.heights[row, column]), 2),
            },
            "second_station": None if self.other is None else station_record(self.other),
            "files": self.names,
            "removed": superseded,
            "warnings": [*self.ground.elevation.warnings, *self.station.notes, *notes],
        }

    def _carry_out(self) -> tuple[dict[str, Any], list[str]]:
        """Compute and write everything, or leave nothing behind: the record, and the summary."""
        from terrasol.cli.progress import progress_bar
        from terrasol.cli.run import _announce_compilation
        from terrasol.engine.plan import default_threads
        from terrasol.files.delivery import RECORD, Delivery
        from terrasol.files.provenance import run_record
        from terrasol.show.comparison import comparison_png

        common, start = self.common, time.perf_counter()
        record = run_record("compare", common.dem, self.settings())
        threads = common.threads or default_threads()
        delivery = Delivery(common.out_dir, self.names, overwrite=common.overwrite)
        with delivery, progress_bar(common.quiet) as move:
            _announce_compilation(common.quiet)
            report, notes = self._report(threads, lambda share, stage: move(0.6 * share, stage))
            lines = report.lines()
            delivery.write_bytes(TABLE, _table(report))
            move(0.9, "drawing")
            picture = comparison_png(report, title=report.station.name, notes=lines[1:])
            delivery.write_bytes(PICTURE, picture)
            superseded, more = self.superseded()
            record |= {
                "threads": threads,
                "results": report.record(),
                "warnings": [*notes, *report.warnings, *more],
                "seconds": {
                    "reading": round(self.ground.seconds, 2),
                    "whole run": round(self.ground.seconds + time.perf_counter() - start, 2),
                },
                "files": [os.path.abspath(delivery.folder / name) for name in self.names],
            }
            delivery.write_json(RECORD, record)
            delivery.commit(superseded)
            move(1.0, "done")
        return record, lines

    def _report(self, threads: int, progress: Any) -> tuple[StationReport, list[str]]:
        """The comparison, and warnings of the ground."""
        from terrasol.engine.comparison import compare_station, spot_at
        from terrasol.files.rasters import naming

        common, elevation, station = self.common, self.ground.elevation, self.station
        scene = self.around.scene(elevation, self.frame)
        with naming(common.dem):
            spot = spot_at(
                elevation, self.frame, station.latitude, station.longitude, common.azimuths,
                common.refraction, scene, threads, progress,
            )  # fmt: skip
        report = compare_station(
            station, self.air, spot, self.other,
            albedo=self.given["albedo"],
            diffuse=self.given["diffuse"],
            decomposition=self.asked.decomposition or "dirint",
            fill_hours=self._fill_hours,
        )  # fmt: skip
        notes = [*elevation.warnings, *scene.warnings, *self.asked.doubts(self.frame)]
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


def _in_lines(forecast: dict[str, Any]) -> str:
    """The forecast for people."""
    f, station, cell, other = (
        forecast, forecast["station"], forecast["cell"], forecast["second_station"],
    )  # fmt: skip
    rows = [
        ("input", f["input"]),
        (
            "grid",
            f"{f['rows']} rows, {f['columns']} columns, heights read as {f['heights_read_as']}",
        ),
        ("measured", _span(station)),
        (
            "cell",
            f"row {cell['row']}, column {cell['column']}, at {cell['height_m']:.0f} m"
            f" (stated: {station['height_m']:.0f} m)",
        ),
        ("sky", "clear; clear days count" if other is None else f"that of {_span(other)}"),
        ("files", ", ".join(f["files"])),
        *([("removed", ", ".join(f["removed"]))] if f["removed"] else []),
        *(("warning", text) for text in f["warnings"]),
    ]
    return "\n".join(f"{name:<11} {text}" for name, text in rows)


def _span(station: dict[str, Any]) -> str:
    return (
        f"{station['name']}, {station['start']} to {station['end']},"
        f" every {station['interval_seconds']} s"
    )
