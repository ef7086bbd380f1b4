"""From a plan to files in a folder: what both commands share once the libraries are loaded."""

from __future__ import annotations

import json
import os
import shutil
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from terrasol import __version__
from terrasol.cli.options import Common
from terrasol.cli.progress import progress_bar
from terrasol.cli.streams import give, say
from terrasol.engine.job import Plan, Summary
from terrasol.engine.plan import default_threads
from terrasol.errors import OutputError, counted
from terrasol.files.delivery import RECORD, Delivery, check_free, superseded_files
from terrasol.files.layers import Layer
from terrasol.files.provenance import run_record
from terrasol.files.rasters import naming, read_with_unit
from terrasol.files.sink import RasterSink
from terrasol.ground.elevation import Elevation
from terrasol.kernels import horizon

WORK = 0.85
"""Part of the progress bar that the computation fills; packing the files fills the rest."""

MAPPED = ("irradiation_year", "irradiation_period", "sun_hours_year", "sun_hours_period")
"""Layers whose first band the overview map shows."""

OVERVIEW = "overview.png"

SKIES = {
    "clear": "potential (clear-sky)",
    "measured": "under the measured sky",
    "monthly index": "under a sky of monthly clear-sky indices",
}
"""How the summary calls energy under each kind of sky."""

Record = dict[str, Any]
Draw = Callable[[Plan, NDArray[np.float32], Summary, str], bytes]


@dataclass(frozen=True)
class Ground:
    """The elevation raster as read.

    Parameters
    ----------
    elevation : Elevation
        Heights in metres.
    unit : str
        What the heights were in.
    seconds : float
        Time it took.
    """

    elevation: Elevation
    unit: str
    seconds: float


def read(common: Common) -> Ground:
    """Read the elevation raster that a command was given."""
    start = time.perf_counter()
    elevation, unit = read_with_unit(common.dem, common.vertical_unit, common.fill_voids)
    return Ground(elevation, unit, time.perf_counter() - start)


@dataclass(frozen=True)
class Job:
    """A command as resolved.

    Parameters
    ----------
    command : str
        Its name.
    common : Common
        The shared options.
    ground : Ground
        The raster.
    plan : Plan
        The work.
    settings : dict
        The command's own settings, ready for JSON.
    draw : callable, optional
        Draws the overview map.
    inputs : tuple of str
        Further files that are read.
    notes : tuple of str
        Warnings from before the run.
    """

    command: str
    common: Common
    ground: Ground
    plan: Plan
    settings: Record
    draw: Draw | None = None
    inputs: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()

    @property
    def threads(self) -> int:
        """Cores to use."""
        return self.common.threads or default_threads()

    @property
    def files(self) -> dict[str, str | None]:
        """All files to write, by name, and the unit of those that have one; the record last."""
        rasters = {f"{layer.name}.tif": layer.unit for layer in self.plan.layers}
        return {**rasters, **({OVERVIEW: None} if self.draw else {}), RECORD: None}

    @property
    def names(self) -> list[str]:
        """Names of all files to write."""
        return list(self.files)

    def superseded(self) -> tuple[list[str], list[str]]:
        """Files of an earlier run to remove, and warnings."""
        if not self.common.overwrite:
            return [], []
        return superseded_files(self.common.out_dir, self.names)

    def record(self) -> Record:
        """What was asked, of which file, by which software."""
        own = {
            "vertical_unit": self.ground.unit,
            "fill_voids": self.common.fill_voids,
            "compression": self.common.compression,
        }
        return run_record(self.command, self.common.dem, self.settings | own)


def run(job: Job) -> None:
    """Carry out a job, or only tell of it, as its options say."""
    common = job.common
    check_free(common.out_dir, job.names, common.overwrite)
    for source in (common.dem, *job.inputs):
        _spare_input(common, source, [*job.names, *job.superseded()[0]])
    if common.dry_run:
        forecast = _forecast(job)
        give(json.dumps(forecast, indent=2) if common.as_json else _in_lines(forecast))
        return
    record = _carry_out(job, job.record())
    if common.as_json:
        give(json.dumps(record, indent=2))
    elif not common.quiet:
        say(_summary_text(record))


def _spare_input(common: Common, source: str, names: list[str]) -> None:
    """Refuse to replace or remove a raster that is read."""
    for name in names:
        place = Path(common.out_dir) / name
        if os.path.exists(place) and os.path.isfile(source) and place.samefile(source):
            raise OutputError(f"{place} is the input itself: name another output folder")


def _carry_out(job: Job, record: Record) -> Record:
    """Compute and write everything, or leave nothing behind; return the finished record."""
    start = time.perf_counter()
    common, plan = job.common, job.plan
    delivery = Delivery(common.out_dir, job.names, overwrite=common.overwrite, need=plan.disk_bytes)
    with delivery, progress_bar(common.quiet) as move:
        summary, picture, packing = _compute(job, delivery, _tags(record, plan.elevation), move)
        if picture:
            delivery.write_bytes(OVERVIEW, picture)
        seconds = {
            "reading": job.ground.seconds,
            **summary.seconds,
            "packing and drawing": packing,
            "whole run": job.ground.seconds + time.perf_counter() - start,
        }
        superseded, notes = job.superseded()
        record = {
            **record,
            "threads": job.threads,
            "results": summary.numbers,
            "warnings": [*summary.warnings, *job.notes, *notes],
            "seconds": {name: round(value, 2) for name, value in seconds.items()},
            "files": [os.path.abspath(delivery.folder / name) for name in job.names],
            "removed": superseded,
        }
        delivery.write_json(RECORD, record)
        delivery.commit(superseded)
    return record


def _compute(
    job: Job, delivery: Delivery, tags: dict[str, str], move: Callable[[float, str], None]
) -> tuple[Summary, bytes, float]:
    """Run the plan into packed files; return its summary, the picture, the seconds of packing."""
    common, elevation = job.common, job.plan.elevation
    sink = RasterSink(
        delivery,
        elevation.transform,
        elevation.crs,
        elevation.shape,
        tags=tags,
        compression=common.compression,
        threads=job.threads,
    )
    with sink, naming(common.dem):
        kept = _KeptBand(sink, elevation.shape)
        _announce_compilation(common.quiet)
        summary = job.plan.run(kept, job.threads, lambda share, stage: move(WORK * share, stage))
        computed = time.perf_counter()
        with ThreadPoolExecutor(1) as beside:  # the picture is drawn while files are packed
            drawn = beside.submit(_picture, job, kept.values, summary)
            sink.finish(lambda share: move(WORK + (1.0 - WORK) * share, "packing files"))
            picture = drawn.result()
    return summary, picture, time.perf_counter() - computed


def _picture(job: Job, energy: NDArray[np.float32], summary: Summary) -> bytes:
    """The job's overview map, or nothing."""
    if job.draw is None:
        return b""
    return job.draw(job.plan, energy, summary, Path(job.common.dem).stem)


class _KeptBand:
    """A sink that passes everything on, and keeps the whole period's first band for the map."""

    def __init__(self, sink: RasterSink, shape: tuple[int, int]) -> None:
        self.sink = sink
        self.shape = shape
        self.name = ""
        self.values = np.empty((0, 0), np.float32)

    def open(self, layer: Layer) -> None:
        """Make room for a layer."""
        if layer.name in MAPPED:
            self.name = layer.name
            self.values = np.full(self.shape, np.nan, np.float32)
        self.sink.open(layer)

    def write(self, name: str, row: int, column: int, values: NDArray[Any]) -> None:
        """Take a block."""
        if name == self.name:
            rows, columns = values.shape[1:]
            self.values[row : row + rows, column : column + columns] = values[0]
        self.sink.write(name, row, column, values)


def _announce_compilation(quiet: bool) -> None:
    """Say so when the kernels must be compiled first."""
    cache = Path(horizon.near_field.stats.cache_path or "")
    if not quiet and not any(cache.glob("*.nbi")):
        say("first run: compiling, once, for up to half a minute")


def _tags(record: Record, elevation: Elevation) -> dict[str, str]:
    """What every file says of how it came about."""
    tags = {
        "TERRASOL_VERSION": __version__,
        "TERRASOL_COMMAND": record["command"],
        "TERRASOL_SETTINGS": json.dumps(record["settings"], ensure_ascii=False),
        "TERRASOL_INPUT": Path(record["input"]["file"]).name,
    }
    if record["input"]["sha256"]:
        tags["TERRASOL_INPUT_SHA256"] = record["input"]["sha256"]
    if elevation.warnings:
        tags["TERRASOL_WARNINGS"] = "; ".join(elevation.warnings)
    return tags


def _forecast(job: Job) -> Record:
    """What a run would work on, write and cost."""
    common, ground, plan, threads = job.common, job.ground, job.plan, job.threads
    elevation, frame = ground.elevation, plan.frame
    turn = frame.convergence
    across, down = frame.cell_size
    folder = Path(common.out_dir).absolute()
    while not os.path.exists(folder):
        folder = folder.parent
    heights = elevation.heights
    superseded, notes = job.superseded()
    return {
        "input": common.dem,
        "crs": elevation.crs.name,
        "rows": elevation.shape[0],
        "columns": elevation.shape[1],
        "void_cells": int(np.isnan(heights).sum()),
        "filled_cells": 0 if elevation.filled is None else int(elevation.filled.sum()),
        "heights_m": [round(float(np.nanmin(heights)), 2), round(float(np.nanmax(heights)), 2)],
        "heights_read_as": ground.unit,
        "cell_m": [round(across, 4), round(down, 4)],
        "grid_up_from_true_north_deg": {
            "centre": _rounded(turn[turn.shape[0] // 2, turn.shape[1] // 2]),
            "least": _rounded(turn.min()),
            "greatest": _rounded(turn.max()),
        },
        "files": job.files,
        "removed": superseded,
        "memory_mb": round(plan.memory_bytes / 1e6),
        "disk_mb": round(plan.disk_bytes / 1e6),
        "disk_free_mb": round(shutil.disk_usage(folder).free / 1e6),
        "threads": job.threads,
        "seconds": round(plan.seconds(threads)),
        "warnings": [*elevation.warnings, *job.plan.scene.warnings, *job.notes, *notes],
    }


def _rounded(degrees: float) -> float:
    return round(float(degrees), 3) + 0.0  # no minus before a zero


def _in_lines(forecast: Record) -> str:
    """The forecast for people."""
    f = forecast
    turn, (low, high), (across, down) = (
        f["grid_up_from_true_north_deg"],
        f["heights_m"],
        f["cell_m"],
    )
    rows = [
        ("input", f["input"]),
        ("CRS", f["crs"]),
        (
            "grid",
            f"{counted(f['rows'], 'row')}, {counted(f['columns'], 'column')},"
            f" {counted(f['void_cells'], 'void cell')}",
        ),
        ("cell", f"{across:.6g} m x {down:.6g} m on the ground, at the centre"),
        ("heights", f"{low:g} to {high:g} m, read as {f['heights_read_as']}"),
        (
            "true north",
            f"the grid's up direction is turned from it by {_turn(turn['centre'])}"
            f" ({_turn(turn['least'])} to {_turn(turn['greatest'])}); corrected",
        ),
        ("files", ", ".join(f"{n} ({unit})" if unit else n for n, unit in f["files"].items())),
        *([("removed", ", ".join(f["removed"]))] if f["removed"] else []),
        ("memory", f"{f['memory_mb']:,} MB"),
        ("disk", f"{f['disk_mb']:,} MB at most, {f['disk_free_mb']:,} MB free"),
        ("time", f"about {_duration(f['seconds'])} on {counted(f['threads'], 'thread')}"),
        *(("warning", text) for text in f["warnings"]),
    ]
    return "\n".join(f"{name:<11} {text}" for name, text in rows)


def _turn(degrees: float) -> str:
    """An angle with its sense in words."""
    if degrees == 0.0:
        return "0 degrees"
    return f"{abs(degrees):g} degrees {'counter-clockwise' if degrees < 0 else 'clockwise'}"


def _duration(seconds: float) -> str:
    """A time that a person reads at a glance."""
    if seconds < 120:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 7200 else f"{seconds / 3600:.1f} h"


def _summary_text(record: Record) -> str:
    """What came out, for people."""
    results, lines = record["results"], []
    for name, found in results.items():
        if isinstance(found, dict):
            unit = "" if found["unit"] == "1" else f" {found['unit']}"
            label, band = next((k, v) for k, v in found.items() if k != "unit")
            if name.endswith("_months"):
                continue
            kind = "" if label.replace("-", " ") in name.replace("_", " ") else f" ({label})"
            lines.append(
                f"{name}{kind}: mean {band['mean']:g}{unit},"
                f" from {band['least']:g} to {band['greatest']:g}"
            )
    if "level_ground" in results:
        lines.append(
            f"open level ground at the centre: {results['level_ground']:g} {results['unit']}"
        )
        lines.append(f"energy is {SKIES[results['sky']]}, {results['basis']}")
    if results.get("void_cells"):
        lines.append(f"void: {results['void_cells']} of {results['cells']} cells")
    lines += results.get("remarks", [])
    lines += [f"warning: {text}" for text in record["warnings"]]
    if record["removed"]:
        lines.append(f"removed, of an earlier run: {', '.join(record['removed'])}")
    files = record["files"]
    took = _duration(record["seconds"]["whole run"])
    lines.append(f"{counted(len(files), 'file')} in {Path(files[0]).parent} after {took}")
    return "\n".join(lines)
