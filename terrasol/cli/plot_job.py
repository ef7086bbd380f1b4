"""The work of `terrasol plots` once its libraries are loaded: from plots to files in a folder."""

from __future__ import annotations

import os
import time
from dataclasses import dataclass, replace
from typing import Any

import pandas as pd

from terrasol.cli.forecast import forecast_text, give_forecast, ground_forecast
from terrasol.cli.ground_options import Around
from terrasol.cli.irradiation import light_record
from terrasol.cli.options import Common
from terrasol.cli.progress import progress_bar
from terrasol.cli.run import (
    Ground,
    announce_compilation,
    check_places,
    closing_lines,
    deliver,
    seconds_of,
    superseded,
    tell,
)
from terrasol.cli.sky_options import (
    CLIMATOLOGY,
    AskedSky,
    albedo_record,
    file_record,
    raster_named,
    settle_albedo,
)
from terrasol.engine.plan import default_threads
from terrasol.engine.plot_correlations import best_by_chance, pairs, strongest
from terrasol.engine.plot_horizons import horizon_table, plot_horizons
from terrasol.engine.plot_methods import Account, methods_text
from terrasol.engine.plot_places import Located, locate
from terrasol.engine.plot_settings import PlotSettings
from terrasol.engine.plot_table import PlotTable, long_form, predictor_columns
from terrasol.engine.plots import (
    column_count,
    forecast_bytes,
    forecast_seconds,
    grain_sizes,
    plot_table,
)
from terrasol.errors import SettingError
from terrasol.files.delivery import RECORD, Delivery
from terrasol.files.plot_tables import csv_bytes, geoparquet_bytes, write_parts
from terrasol.files.points import Points
from terrasol.files.provenance import run_record
from terrasol.files.rasters import naming
from terrasol.files.vectors import word_list
from terrasol.ground.beyond import Scene
from terrasol.ground.frame import make_frame
from terrasol.ground.grain import coarsened
from terrasol.light.days import parse_days
from terrasol.practice.season import growing_season
from terrasol.show.plot_horizons import horizons_png
from terrasol.show.plots import predictors_png
from terrasol.words import counted

TABLE, PARQUET, DICTIONARY = "plots.csv", "plots.parquet", "columns.csv"
LONG, CORRELATIONS = "plots_long.csv", "correlations.csv"
PICTURE, METHODS = "predictors.png", "methods.md"
HORIZONS, SKYLINES = "horizons.csv", "horizons.png"

LONG_PARTS = 200
"""Columns of the table that are turned into rows at a time."""


@dataclass(frozen=True)
class PlotJob:
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
        long = [LONG] if self.given["as_long"] else []
        seen = [HORIZONS, SKYLINES] if self.given["horizons"] else []
        return [TABLE, PARQUET, DICTIONARY, *long, CORRELATIONS, PICTURE, *seen, METHODS, RECORD]

    @property
    def inputs(self) -> list[str]:
        """All files that are read."""
        asked = self.asked
        files = (
            self.common.dem, self.given["plots_file"], *self.around.inputs, asked.station,
            asked.station_settings, *raster_named(asked.clear_sky_index, self.given["albedo"]),
        )  # fmt: skip
        return [name for name in files if name]

    def run(self) -> None:
        """Carry it out, or only tell of it."""
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
        """Refuse a measured column that the plots have not, or that holds no number."""
        response, table = self.given["response"], self.points.attributes
        if response is None:
            return
        if response not in table.columns:
            known = word_list(list(map(str, table.columns))) if len(table.columns) else "none"
            raise SettingError(f"--response {response}: PLOTS has no such column; it has {known}")
        if not pd.to_numeric(table[response], errors="coerce").notna().any():
            raise SettingError(f"--response {response}: the column has no number; name another")

    def _factors(self) -> tuple[tuple[int, ...], list[str]]:
        """Cells joined along a side for each cell size, and warnings."""
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
            "memory_mb": round(forecast_bytes(elevation, self.points, settings) / 1e6),
            "threads": threads,
            "seconds": round(forecast_seconds(elevation, located, settings, threads)),
            "warnings": [
                *elevation.warnings, *self.points.warnings, *located.warnings, *said, *notes,
            ],
        }  # fmt: skip

    def _carry_out(self) -> dict[str, Any]:
        """Compute and write everything, or leave nothing behind: the record."""
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
            record |= {
                "threads": threads,
                "results": _results(table, self.given["response"], self.points.remarks),
                "warnings": [*table.warnings, *notes],
                "seconds": seconds_of(self.ground, start, table.seconds),
            }
            record = deliver(delivery, common, self.names, record)
            move(1.0, "done")
        return record

    def _settled(self) -> tuple[PlotSettings, Any, list[str]]:
        """Settings with what the raster and the station had to say, and warnings."""
        asked, given, elevation = self.asked, self.given, self.ground.elevation
        frame, light = self.ground.frame, self.settings.light
        air = asked.placed(light.air, frame)
        settled = asked.settle(air, given["period"], light.step_seconds, elevation)
        albedo, doubts = settle_albedo(given["albedo"], settled, elevation)
        light = replace(
            light,
            air=air,
            period=settled.period,
            sky=settled.sky,
            index_map=settled.index_map,
            **albedo,
        )
        hours = replace(
            self.settings.hours,
            period=settled.period,
            sky=settled.sky or air,
            days=parse_days(None, settled.period),
        )
        factors, said = self._factors()
        season = self.settings.season or growing_season(frame.centre[0])
        settings = replace(self.settings, light=light, hours=hours, season=season, factors=factors)
        notes = [*asked.doubts(frame), *settled.warnings, *doubts, *said]
        return settings, settled, notes

    def _scenes(self, settings: PlotSettings) -> list[Scene]:
        """What stands beyond and above the ground, for each cell size."""
        grounds = [coarsened(self.ground.elevation, factor) for factor in settings.factors]
        frames = [make_frame(each.shape, each.transform, each.crs) for each in grounds]
        return [self.around.scene(*pair) for pair in zip(grounds, frames, strict=True)]

    def _table(
        self, settings: PlotSettings, scenes: list[Scene], threads: int, move: Any
    ) -> PlotTable:
        """The predictors."""
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
            "light": light_record(settings.light)
            | {"albedo": albedo_record(given["albedo"], settings.light)},
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
        elevation, azimuths = self.ground.elevation, settings.hours.azimuths
        located = locate(self.points, elevation)
        found = plot_horizons(elevation, located, azimuths, self.common.refraction, scene, threads)
        delivery.write_bytes(HORIZONS, csv_bytes(horizon_table(self.points.names, found)))
        title = f"Horizons of {_stem(self.given['plots_file'])}"
        delivery.write_bytes(SKYLINES, horizons_png(table, found, title=title))

    def _account(self, table: PlotTable, settled: Any) -> Any:
        """What the paragraph on methods tells besides the settings."""
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
    cells = ", ".join(f"{size:.4g} m" for size in f["cells_m"])
    radii = ", ".join(f"{radius:g} m" for radius in f["radii_m"]) or "none"
    own = [
        ("plots", f"{f['plots']} in {f['plots_crs']}, {f['plots_on_ground']} on known ground"),
        ("cells", cells),
        ("circles", radii),
        ("columns", f"{f['columns_of_predictors']} of predictors"),
    ]
    return forecast_text(f, own)


def _summary_text(record: dict[str, Any]) -> str:
    """What came out, for people."""
    results = record["results"]
    flags = ", ".join(f"{count} {flag}" for flag, count in results["flags"].items())
    cells = ", ".join(f"{size:.4g}" for size in results["cells_m"])
    told = [
        f"{counted(results['plots'], 'plot')} ({flags}): {results['predictors']} predictors in"
        f" {results['columns']} columns, at cells of {cells} m",
    ]
    level = results["level_ground"]
    lights = [f"{level['irradiation']:g} {level['unit']}"] if "irradiation" in level else []
    times = [f"{level['sun_hours']:g} h of sun"] if "sun_hours" in level else []
    if level:
        what = " and ".join([*lights, *times])
        told.append(f"open level ground at the centre and mean height gets {what} in the year")
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
    return "\n".join([*told, *results["remarks"], *closing_lines(record)])
