"""Speed of the hour-by-hour job: ``python -m tests.benchmarks.series [--side 1500] [--days 7]``.

Prints a Markdown table; the figures in docs/performance.md on series come from here.
"""

import argparse
import shutil
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from terrasol import Air, Elevation, irradiation_series, parse_period
from terrasol.engine.plan import blocks_of
from terrasol.engine.series import plan_series
from terrasol.engine.series_work import BlockWork
from terrasol.files.horizons import find_horizons
from terrasol.files.stacks import open_stack
from terrasol.kernels.moment import direct_light, parts_of_steps
from terrasol.light import series as light
from terrasol.light.series import Around, SeriesSettings, patch_light, suns_at_greenwich

from .__main__ import CELL, ROOT, large_ground

AIR = Air.ineichen(3.0)


def ground(side):
    """The sample valley, as large as wanted."""
    grid = (CELL, 0, 440_000.0, 0, -CELL, 5_200_000.0)
    return Elevation.from_array(large_ground(side), grid, "EPSG:32632")


def seconds(call, repeats):
    """Least time of some calls."""
    best = np.inf
    for _ in range(repeats):
        start = time.perf_counter()
        call()
        best = min(best, time.perf_counter() - start)
    return best


def kernel_nanoseconds(elevation, store, repeats=15):
    """One core's least time: a cell and moment of direct light, a cell and step of its parts."""
    sys.path.insert(0, str(ROOT / "tests"))
    from reference.kept import KeptSeries

    settings = SeriesSettings(parse_period("2025-04-01/2025-04-03"), AIR)
    plan = plan_series(elevation, settings)
    plan.run(KeptSeries(plan), store, 2)
    work = BlockWork(elevation, plan.frame, settings, plan.heights, find_horizons(store, plan.key))
    block = work.ground(blocks_of(elevation.shape)[0])
    part = next(block.parts())
    sky = work.sky(block, part, suns_at_greenwich(plan.edges, settings.substep_seconds))
    moments, values, spent = 0, 0, {"direct_light": 0.0, "parts_of_steps": 0.0}
    kernels = {"direct_light": direct_light, "parts_of_steps": parts_of_steps}

    def timed(name):
        def call(*given):
            spent[name] += seconds(lambda: kernels[name](*given), repeats)

        return call

    light.direct_light, light.parts_of_steps = timed("direct_light"), timed("parts_of_steps")
    knots = []
    for patch, _, _ in list(block.patches(part))[::4]:
        around = Around.nothing(plan.steps, patch.heights.shape)
        patch_light(patch, patch.sky(), sky, around, "slope")
        moments += patch.cells * sky.left.size
        values += patch.cells * plan.steps
        span = light._knots_of(patch, sky.heights)
        knots.append(span.stop - span.start)
    light.direct_light, light.parts_of_steps = direct_light, parts_of_steps
    print(f"height knots of the patches timed: {min(knots)} to {max(knots)}")
    return spent["direct_light"] / moments * 1e9, spent["parts_of_steps"] / values * 1e9


def main():
    """Measure and print."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--side", type=int, default=1500)
    parser.add_argument("--days", type=int, default=7)
    given = parser.parse_args()
    folder = Path(tempfile.mkdtemp(prefix="terrasol-benchmark-"))
    rows = []
    try:
        direct, parts = kernel_nanoseconds(ground(256), folder / "store")
        rows.append(("direct light, one core, a cell and moment", f"{direct:.2f} ns"))
        rows.append(("putting a step together, one core, a cell and step", f"{parts:.2f} ns"))
        elevation = ground(given.side)
        period = f"2025-06-01/2025-06-{given.days:02d}"
        for name in ("first.zarr", "again.zarr", "again.nc"):
            path = folder / name
            start = time.perf_counter()
            irradiation_series(elevation, path, period, AIR, horizon_store=folder / "store").close()
            took = time.perf_counter() - start
            files = [path] if path.is_file() else [p for p in path.rglob("*") if p.is_file()]
            values = elevation.heights.size * 24 * given.days
            size = sum(p.stat().st_size for p in files) / values
            rows.append((f"{given.side} x {given.side}, {given.days} d of hours, {name}",
                         f"{took:.1f} s, {values / took / 1e6:.0f} million values/s,"
                         f" {size:.2f} bytes a value"))  # fmt: skip
        for name in ("again.zarr", "again.nc"):
            with open_stack(folder / name) as data:
                cell = seconds(lambda: data["global"][:, 700 % given.side, 300].values, 3)
                one = seconds(lambda: data["global"][12].values, 3)
                rows.append((f"{name}: one cell through time, one map",
                             f"{cell * 1e3:.0f} ms, {one * 1e3:.0f} ms"))  # fmt: skip
    finally:
        shutil.rmtree(folder)
        print("| what | measured |\n| --- | --- |")
        for what, figure in rows:
            print(f"| {what} | {figure} |")


if __name__ == "__main__":
    main()
