"""Speed of terrasol, measured in one run: ``python -m tests.benchmarks [--side 4000]``.

Prints a Markdown table; the figures in docs/performance.md come from here. Nothing in the
test suite is timed.
"""

import argparse
import json
import os
import resource
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import rasterio
from rasterio.transform import from_origin

ROOT = Path(__file__).resolve().parents[2]
VALLEY = ROOT / "sample_dem" / "valley.tif"
CELL = 30.0
AZIMUTHS = 64


def large_ground(side):
    """The sample valley, mirrored again and again to `side` cells a side."""
    with rasterio.open(VALLEY) as source:
        heights = source.read(1)
    rows, columns = (np.arange(side) for _ in range(2))
    fold = [
        np.abs((n % (2 * size)) - size + 0.5) - 0.5
        for n, size in zip((rows, columns), heights.shape, strict=True)
    ]
    return heights[np.ix_(*(f.astype(int) for f in fold))]


def write(path, heights):
    """Write the ground as a plain tiled GeoTIFF."""
    profile = {
        "driver": "GTiff", "height": heights.shape[0], "width": heights.shape[1], "count": 1,
        "dtype": "float32", "crs": "EPSG:32632", "tiled": True, "compress": "deflate",
        "predictor": 3, "transform": from_origin(440_000.0, 5_200_000.0, CELL, CELL),
    }  # fmt: skip
    with rasterio.open(path, "w", **profile) as sink:
        sink.write(heights.astype("float32"), 1)
        sink.set_band_unit(1, "metre")


def terrasol(*words, cache=None):
    """Run the command; return wall seconds, its peak memory [GiB] and its JSON."""
    environment = dict(os.environ, **({"NUMBA_CACHE_DIR": str(cache)} if cache else {}))
    start = time.perf_counter()
    done = subprocess.run(
        [sys.executable, "-m", "terrasol.cli.main", *map(str, words)],
        env=environment, capture_output=True, text=True, check=True,
    )  # fmt: skip
    seconds = time.perf_counter() - start
    peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 2**20
    return seconds, peak, json.loads(done.stdout) if done.stdout.startswith("{") else {}


def sweep_nanoseconds(heights, repeats=3):
    """One core's best time for all horizons [ns a cell and azimuth], far field and near field."""
    from terrasol import Elevation
    from terrasol.constants import REFRACTION_COEFFICIENT
    from terrasol.engine.ground_work import BlockGround, Ground
    from terrasol.engine.plan import blocks_of
    from terrasol.ground.frame import make_frame
    from terrasol.ground.horizon import FarHorizon, sweep

    def once(heights):
        elevation = Elevation.from_array(
            heights, (CELL, 0, 440_000.0, 0, -CELL, 5_200_000.0), "EPSG:32632"
        )
        frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
        far = FarHorizon.empty(elevation, AZIMUTHS)
        start = time.perf_counter()
        for azimuth in range(AZIMUTHS):
            sweep(elevation, frame, azimuth, REFRACTION_COEFFICIENT, far)
        swept = time.perf_counter() - start
        ground = Ground(elevation, frame, far, REFRACTION_COEFFICIENT)
        near = 0.0
        for block in blocks_of(elevation.shape):
            piece = BlockGround(ground, block)  # its normals are no part of the horizon
            start = time.perf_counter()
            for rows in piece.pieces():
                piece.strip(rows)
            near += time.perf_counter() - start
        work = heights.size * AZIMUTHS * 1e-9
        return swept / work, near / work

    once(heights[:64, :64])  # compiled kernels are loaded here
    return min((once(heights) for _ in range(repeats)), key=sum)


def plain_seconds(heights, cells):
    """Time of the plain method for a year of hours [s a cell], on one core."""
    sys.path.insert(0, str(ROOT / "tests"))
    import pandas as pd
    from reference.plain_speed import hourly_suns, plain_beam
    from reference.plain_sun import Place, upward_normals

    place = Place(47.0, 45.9, 7.4, 9.0, float(heights.mean()))
    times = pd.date_range("2025-01-01 00:30", "2025-12-31 23:30", freq="h", tz="UTC")
    suns, beam = hourly_suns(times, place)
    normals = upward_normals(heights, CELL, CELL)
    z = heights.astype(np.float64)
    plain_beam(z, CELL, CELL, suns[:2], beam[:2], cells=cells, normals=normals)
    start = time.perf_counter()
    plain_beam(z, CELL, CELL, suns, beam, cells=cells, normals=normals)
    return (time.perf_counter() - start) / cells[0].size


def main():
    """Measure and print."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--side", type=int, default=4000)
    side = parser.parse_args().side
    heights = large_ground(side)
    folder = Path(tempfile.mkdtemp(prefix="terrasol-benchmark-"))
    rows = []
    try:
        dem = folder / "ground.tif"
        write(dem, heights)
        small = folder / "small.tif"
        write(small, heights[:200, :200])
        rows.append(("terrasol --help", f"{terrasol('--help')[0]:.2f} s"))
        cache = folder / "cache"
        first = terrasol("irradiation", small, folder / "a", "--json", "--quiet", cache=cache)
        again = terrasol("irradiation", small, folder / "b", "--json", "--quiet", cache=cache)
        rows.append(("200 x 200, first run, compiling", f"{first[0]:.1f} s"))
        rows.append(("200 x 200, second run", f"{again[0]:.1f} s"))
        terrasol("irradiation", small, folder / "c", "--json", "--quiet")
        seconds, peak, record = terrasol("irradiation", dem, folder / "out", "--json", "--quiet")
        rate = heights.size / seconds
        rows.append((f"{side} x {side}, whole job", f"{seconds:.1f} s"))
        rows.append(("cells a second", f"{rate / 1e6:.2f} million"))
        rows.append(("peak memory", f"{peak:.2f} GiB"))
        rows += [(f"  of which {name}", f"{s:.1f} s") for name, s in record["seconds"].items()]
        far, near = sweep_nanoseconds(heights[: min(side, 2000), : min(side, 2000)])
        rows.append(("horizon, one core, a cell and azimuth, best of 3", f"{far + near:.1f} ns"))
        rows.append(("  far field", f"{far:.1f} ns"))
        rows.append(("  near field and merging", f"{near:.1f} ns"))
        spread = np.linspace(40, side - 41, 50).astype(int)
        plain = plain_seconds(heights, np.meshgrid(spread, spread, indexing="ij"))
        rows.append(("plain method, one core, a cell", f"{plain * 1e3:.2f} ms"))
        threads = record["threads"]
        rows.append(
            ("terrasol, one core, a cell", f"{threads * seconds / heights.size * 1e6:.2f} us")
        )
        rows.append(("ratio", f"{plain / (threads * seconds / heights.size):.0f}"))
    finally:
        shutil.rmtree(folder)
        print("| what | measured |\n| --- | --- |")
        for what, figure in rows:
            print(f"| {what} | {figure} |")


if __name__ == "__main__":
    main()
