"""From a plan to files in a folder: what both commands share once the libraries are loaded."""

from __future__ import annotations

import itertools
import json
import os
import time
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from terrasol import __version__
from terrasol.cli.forecast import (
    Record,
    duration,
    free_disk_mb,
    give_forecast,
    grid_line,
    ground_forecast,
    heights_line,
    lines,
)
from terrasol.cli.options import Common
from terrasol.cli.progress import progress_bar
from terrasol.cli.streams import give, say
from terrasol.engine.job import Plan, Summary
from terrasol.engine.outputs import SKIES
from terrasol.engine.plan import default_threads
from terrasol.errors import OutputError
from terrasol.files.delivery import RECORD, Delivery, check_free, superseded_files
from terrasol.files.layers import Layer
from terrasol.files.provenance import run_record
from terrasol.files.rasters import naming, read_with_unit
from terrasol.files.sink import RasterSink
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame, make_frame
from terrasol.kernels import horizon
from terrasol.words import counted

WORK = 0.85
"""Part of the progress bar that the computation fills; packing the files fills the rest."""

MAPPED = ("irradiation_year", "irradiation_period", "sun_hours_year", "sun_hours_period")
"""Layers whose first band the overview map shows."""

OVERVIEW = "overview.png"

Draw = Callable[[Plan, NDArray[np.float32], Summary, str], bytes]


@dataclass(frozen=True)
class Ground:
    """The elevation raster as read.

    Parameters
    ----------
    name : str
        Its name as given.
    elevation : Elevation
        Heights in metres.
    unit : str
        What the heights were in.
    seconds : float
        Time it took.
    """

    name: str
    elevation: Elevation
    unit: str
    seconds: float

    @cached_property
    def frame(self) -> Frame:
        """Its place on the Earth.

        Raises
        ------
        InputError
            Naming the file, for a raster that cannot be placed.
        """
        elevation = self.elevation
        with naming(self.name):
            return make_frame(elevation.shape, elevation.transform, elevation.crs)


def read(common: Common) -> Ground:
    """Read the elevation raster that a command was given."""
    start = time.perf_counter()
    elevation, unit = read_with_unit(common.dem, common.vertical_unit, common.fill_voids)
    return Ground(common.dem, elevation, unit, time.perf_counter() - start)


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
        return superseded(self.common, self.names)

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
    check_places(common, job.names, (common.dem, *job.inputs))
    if common.dry_run:
        give_forecast(common, _forecast(job), _in_lines)
        return
    tell(common, _carry_out(job, job.record()), _summary_text)


def superseded(common: Common, names: list[str]) -> tuple[list[str], list[str]]:
    """Files of an earlier run that a run of these names removes, and warnings."""
    return superseded_files(common.out_dir, names) if common.overwrite else ([], [])


def check_places(common: Common, names: list[str], sources: Iterable[str]) -> None:
    """Refuse names that are taken, and to replace or remove a file that is read.

    Raises
    ------
    OutputError
        Naming the file.
    """
    check_free(common.out_dir, names, common.overwrite)
    going = [*names, *superseded(common, names)[0]]
    for source, name in itertools.product(sources, going):
        place = Path(common.out_dir) / name
        if os.path.exists(place) and os.path.isfile(source) and place.samefile(source):
            raise OutputError(f"{place} is the input itself: name another output folder")


def tell(common: Common, record: Record, words: Callable[[Record], str]) -> None:
    """Tell of a finished run: JSON on stdout, or words on stderr."""
    if common.as_json:
        give(json.dumps(record, indent=2))
    elif not common.quiet:
        say(words(record))


def _carry_out(job: Job, record: Record) -> Record:
    """Compute and write everything, or leave nothing behind; return the finished record."""
    start = time.perf_counter()
    common, plan = job.common, job.plan
    delivery = Delivery(common.out_dir, job.names, overwrite=common.overwrite, need=plan.disk_bytes)
    with delivery, progress_bar(common.quiet) as move:
        summary, picture, packing = _compute(job, delivery, tags_of(record, plan.elevation), move)
        if picture:
            delivery.write_bytes(OVERVIEW, picture)
        record = record | {
            "threads": job.threads,
            "results": summary.numbers,
            "warnings": [*summary.warnings, *job.notes],
            "seconds": seconds_of(
                job.ground, start, summary.seconds | {"packing and drawing": packing}
            ),
        }
        return deliver(delivery, common, job.names, record)


def seconds_of(ground: Ground, start: float, parts: dict[str, float]) -> dict[str, float]:
    """How long a run that began at `start` took so far, and its parts, rounded."""
    whole = ground.seconds + time.perf_counter() - start
    seconds = {"reading": ground.seconds, **parts, "whole run": whole}
    return {name: round(value, 2) for name, value in seconds.items()}


def deliver(delivery: Delivery, common: Common, names: list[str], record: Record) -> Record:
    """Stage the record of a run with what its files are, and move all into place; return it."""
    removed, notes = superseded(common, names)
    record = record | {
        "warnings": list(dict.fromkeys([*record["warnings"], *notes])),
        "files": [os.path.abspath(delivery.folder / name) for name in names],
        "removed": removed,
    }
    delivery.write_json(RECORD, record)
    delivery.commit(removed)
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
        announce_compilation(common.quiet)
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


def announce_compilation(quiet: bool) -> None:
    """Say so when the kernels must be compiled first."""
    cache = Path(horizon.near_field.stats.cache_path or "")
    if not quiet and not any(cache.glob("*.nbi")):
        say("first run: compiling, once, for up to half a minute")


def tags_of(record: Record, elevation: Elevation) -> dict[str, str]:
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
    plan, threads = job.plan, job.threads
    turn = plan.frame.convergence
    across, down = plan.frame.cell_size
    removed, notes = job.superseded()
    return ground_forecast(job.common, job.ground) | {
        "cell_m": [round(across, 4), round(down, 4)],
        "grid_up_from_true_north_deg": {
            "centre": _rounded(turn[turn.shape[0] // 2, turn.shape[1] // 2]),
            "least": _rounded(turn.min()),
            "greatest": _rounded(turn.max()),
        },
        "files": job.files,
        "removed": removed,
        "memory_mb": round(plan.memory_bytes / 1e6),
        "disk_mb": round(plan.disk_bytes / 1e6),
        "disk_free_mb": free_disk_mb(job.common.out_dir),
        "threads": job.threads,
        "seconds": round(plan.seconds(threads)),
        "warnings": [
            *job.ground.elevation.warnings,
            *plan.scene.warnings,
            *job.notes,
            *notes,
        ],
    }


def _rounded(degrees: float) -> float:
    return round(float(degrees), 3) + 0.0  # no minus before a zero


def _in_lines(forecast: Record) -> str:
    """The forecast for people."""
    f = forecast
    turn, (across, down) = f["grid_up_from_true_north_deg"], f["cell_m"]
    rows = [
        ("input", f["input"]),
        ("CRS", f["crs"]),
        grid_line(f),
        ("cell", f"{across:.6g} m x {down:.6g} m on the ground, at the centre"),
        heights_line(f),
        (
            "true north",
            f"the grid's up direction is turned from it by {_turn(turn['centre'])}"
            f" ({_turn(turn['least'])} to {_turn(turn['greatest'])}); corrected",
        ),
        ("files", ", ".join(f"{n} ({unit})" if unit else n for n, unit in f["files"].items())),
        *([("removed", ", ".join(f["removed"]))] if f["removed"] else []),
        ("memory", f"{f['memory_mb']:,} MB"),
        ("disk", f"{f['disk_mb']:,} MB at most, {f['disk_free_mb']:,} MB free"),
        ("time", f"about {duration(f['seconds'])} on {counted(f['threads'], 'thread')}"),
        *(("warning", text) for text in f["warnings"]),
    ]
    return lines(rows)


def _turn(degrees: float) -> str:
    """An angle with its sense in words."""
    if degrees == 0.0:
        return "0 degrees"
    return f"{abs(degrees):g} degrees {'counter-clockwise' if degrees < 0 else 'clockwise'}"


def _summary_text(record: Record) -> str:
    """What came out, for people."""
    results, told = record["results"], []
    for name, found in results.items():
        if isinstance(found, dict):
            unit = "" if found["unit"] == "1" else f" {found['unit']}"
            label, band = next((k, v) for k, v in found.items() if k != "unit")
            if name.endswith("_months"):
                continue
            kind = "" if label.replace("-", " ") in name.replace("_", " ") else f" ({label})"
            told.append(
                f"{name}{kind}: mean {band['mean']:g}{unit},"
                f" from {band['least']:g} to {band['greatest']:g}"
            )
    if "level_ground" in results:
        told.append(
            f"open level ground at the centre and mean height ({results['level_ground_height_m']:g}"
            f" m): {results['level_ground']:g} {results['unit']}"
        )
        told.append(f"energy is {SKIES[results['sky']]}, {results['basis']}")
    if "level_ground_sun_hours" in results:
        told.append(
            "open level ground at the centre and mean height:"
            f" {results['level_ground_sun_hours']:g} h of direct sun,"
            f" {results['level_ground_bright_hours']:g} h of bright sunshine"
        )
    if results.get("void_cells"):
        told.append(f"void: {results['void_cells']} of {results['cells']} cells")
    return "\n".join([*told, *results.get("remarks", []), *closing_lines(record)])


def closing_lines(record: Record) -> list[str]:
    """How every summary ends: warnings, what was removed, where the files are."""
    told = [f"warning: {text}" for text in record["warnings"]]
    if record["removed"]:
        told.append(f"removed, of an earlier run: {', '.join(record['removed'])}")
    files, took = record["files"], duration(record["seconds"]["whole run"])
    return [*told, f"{counted(len(files), 'file')} in {Path(files[0]).parent} after {took}"]
