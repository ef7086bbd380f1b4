"""The first run compiles, the second does not."""

import os
import subprocess
import sys

import pytest

SCRIPT = """
import numpy as np, terrasol
from terrasol.kernels import beam, energy, horizon, skyview, surface
z = 100.0 * np.sin(np.arange(40.0))[:, None] * np.ones(40)
ground = terrasol.Elevation.from_array(z, (30, 0, 5e5, 0, -30, 5.2e6), "EPSG:32632")
terrasol.irradiation(ground, "2025-06-21", terrasol.Air.ineichen(3.0), azimuths=8)
kernels = [surface.normals, surface.slope_aspect, horizon.near_field, horizon.far_field,
           horizon.merge_far, skyview.sky_view, beam.fill_table, beam.look_up,
           energy.parts_of_light]
print(sum(sum(k.stats.cache_misses.values()) for k in kernels),
      sum(sum(k.stats.cache_hits.values()) for k in kernels))
"""


def compiled(cache):
    """Kernels compiled and kernels loaded by a fresh process."""
    done = subprocess.run(
        [sys.executable, "-c", SCRIPT],
        env={**os.environ, "NUMBA_CACHE_DIR": str(cache)},
        capture_output=True,
        text=True,
        check=True,
    )
    return tuple(map(int, done.stdout.split()))


@pytest.mark.heavy
def test_second_process_compiles_nothing(tmp_path):
    assert compiled(tmp_path) == (9, 0)
    assert compiled(tmp_path) == (0, 9)
