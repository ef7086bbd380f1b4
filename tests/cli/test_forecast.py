"""What all commands tell in the same words: forecasts before, and the end of summaries after."""

from __future__ import annotations

from terrasol.cli.forecast import forecast_text
from terrasol.cli.run import closing_lines

GROUND = {
    "input": "a.tif", "crs": "UTM", "rows": 2, "columns": 1, "void_cells": 0,
    "heights_m": [3.0, 4.5], "heights_read_as": "metre",
}  # fmt: skip


def test_a_forecast_tells_ground_own_lines_files_cost_and_warnings():
    forecast = GROUND | {
        "files": ["x.csv", "run.json"], "removed": ["old.csv"], "memory_mb": 1200, "seconds": 90,
        "threads": 1, "remarks": ["so"], "warnings": ["beware"],
    }  # fmt: skip
    told = forecast_text(forecast, [("plots", "7")], about="at most about").split("\n")
    assert [line.split()[0] for line in told] == [
        "input", "CRS", "grid", "heights", "plots", "files", "removed", "memory", "time", "note",
        "warning",
    ]  # fmt: skip
    assert told[2].endswith("2 rows, 1 column, 0 void cells")
    assert told[7].endswith("1,200 MB")
    assert told[8].endswith("at most about 90 s on 1 thread")


def test_a_forecast_without_files_or_cost_says_no_more():
    forecast = GROUND | {"files": [], "removed": [], "warnings": []}
    told = forecast_text(forecast, [], no_files="none: name a folder").split("\n")
    assert [line.split()[0] for line in told] == ["input", "CRS", "grid", "heights", "files"]
    assert told[-1].endswith("none: name a folder")


def test_summaries_end_with_warnings_what_was_removed_and_where_files_are():
    record = {
        "warnings": ["beware"],
        "removed": ["old.csv"],
        "files": ["/out/x.csv", "/out/run.json"],
        "seconds": {"whole run": 3.2},
    }
    assert closing_lines(record) == [
        "warning: beware",
        "removed, of an earlier run: old.csv",
        "2 files in /out after 3 s",
    ]
