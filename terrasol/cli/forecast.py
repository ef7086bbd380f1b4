"""What a command tells of its input and its cost before it works, and how it tells it."""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from terrasol.cli.options import Common
from terrasol.cli.streams import give
from terrasol.words import counted, listed

if TYPE_CHECKING:
    from terrasol.cli.run import Ground

Record = dict[str, Any]

MOST_FILES: Final = 16
"""Files that a forecast for people lists; --json has all."""


def ground_forecast(common: Common, ground: Ground) -> Record:
    """The raster in numbers."""
    elevation = ground.elevation
    heights = elevation.heights
    return {
        "input": common.dem,
        "crs": elevation.crs.name,
        "rows": elevation.shape[0],
        "columns": elevation.shape[1],
        "void_cells": int(np.isnan(heights).sum()),
        "filled_cells": 0 if elevation.filled is None else int(elevation.filled.sum()),
        "heights_m": [round(float(np.nanmin(heights)), 2), round(float(np.nanmax(heights)), 2)],
        "heights_read_as": ground.unit,
    }


def grid_line(forecast: Record) -> tuple[str, str]:
    """Size of the raster, for `lines`."""
    size = ((forecast["rows"], "row"), (forecast["columns"], "column"))
    cells = (*size, (forecast["void_cells"], "void cell"))
    return "grid", ", ".join(counted(*each) for each in cells)


def heights_line(forecast: Record) -> tuple[str, str]:
    """Range and unit of the heights, for `lines`."""
    low, high = forecast["heights_m"]
    return "heights", f"{low:g} to {high:g} m, read as {forecast['heights_read_as']}"


def free_disk_mb(out: str) -> int:
    """Free space where a file or folder is to be."""
    folder = Path(out).absolute()
    while not os.path.exists(folder):
        folder = folder.parent
    return round(shutil.disk_usage(folder).free / 1e6)


def lines(rows: Iterable[tuple[str, str]]) -> str:
    """Names and what they stand for, one a line."""
    return "\n".join(f"{name:<11} {text}" for name, text in rows)


def forecast_text(
    forecast: Record,
    own: Iterable[tuple[str, str]],
    *,
    about: str = "about",
    no_files: str = "none",
) -> str:
    """A forecast for people: the raster, the command's own lines, files, cost and warnings.

    Parameters
    ----------
    forecast : dict
        With what `ground_forecast` gives, ``files``, ``removed`` and ``warnings``; also
        ``memory_mb``, ``seconds`` and ``threads`` together, and ``remarks``, where they are known.
    own : iterable of (str, str)
        Names and what they stand for.
    about : str
        What stands before the time.
    no_files : str
        What stands for no file.
    """
    f = forecast
    rows = [
        ("input", f["input"]),
        ("CRS", f["crs"]),
        grid_line(f),
        heights_line(f),
        *own,
        ("files", listed(f["files"], MOST_FILES) or no_files),
    ]
    if f["removed"]:
        rows.append(("removed", ", ".join(f["removed"])))
    if "seconds" in f:
        time = f"{about} {duration(f['seconds'])} on {counted(f['threads'], 'thread')}"
        rows += [("memory", f"{f['memory_mb']:,} MB"), ("time", time)]
    rows += [("note", text) for text in f.get("remarks", ())]
    rows += [("warning", text) for text in f["warnings"]]
    return lines(rows)


def duration(seconds: float) -> str:
    """A time that a person reads at a glance.

    Examples
    --------
    >>> duration(90), duration(600), duration(9000)
    ('90 s', '10 min', '2.5 h')
    """
    if seconds < 120:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 7200 else f"{seconds / 3600:.1f} h"


def give_forecast(common: Common, forecast: Record, words: Callable[[Record], str]) -> None:
    """Print a forecast on stdout, as JSON or in words."""
    give(json.dumps(forecast, indent=2) if common.as_json else words(forecast))
