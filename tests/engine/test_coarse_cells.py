"""Cells so coarse that one block spans a climate are refused, not summed wrongly."""

import numpy as np
import pytest

import terrasol


def degrees(cell, count):
    heights = np.full((count, count), 500.0)
    transform = (cell, 0, 0.0, 0, -cell, cell * count / 2)
    return terrasol.Elevation.from_array(heights, transform, "EPSG:4326")


@pytest.mark.parametrize("cell", [0.1, 1.0])
def test_coarse_cells_are_refused(cell):
    with pytest.raises(terrasol.InputError, match="too coarse"):
        terrasol.irradiation(degrees(cell, 120), "2025-06-21", terrasol.Air.ineichen(3.0))


def test_a_few_coarse_cells_are_no_harm():
    small = degrees(0.1, 20)  # two degrees in all
    air = terrasol.Air.ineichen(3.0)
    light = terrasol.irradiation(small, "2025-03-21", air, step_seconds=600.0, azimuths=16)
    assert np.isfinite(light["irradiation_period"].values).all()
