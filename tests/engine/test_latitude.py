"""Sun tables serve strips of rows; each cell must still get the sun of its own latitude.

The measure is the same job with a sun table of its very own for each row. At 62 degrees north
December is the hardest test: at noon the sun stands 4 degrees high, and a tenth of a degree
north takes 4 % of the month's energy.
"""

import numpy as np
import pytest

import terrasol
from terrasol.engine import ground_work
from terrasol.engine.datasets import ArraySink
from terrasol.engine.job import plan_irradiation
from terrasol.light import latitudes
from terrasol.light.settings import LightSettings

QUICK = {"azimuths": 16, "step_seconds": 600.0, "monthly_parts": True}


def rough_ground(metric_ground, cell, latitude):
    """Slopes of all facings, more than a block of them."""
    row, column = np.mgrid[:280, :24]
    z = np.sin(row / 7.0 + 0.3) * np.cos(column / 5.0) + 0.5 * np.sin((row + 2 * column) / 6.0)
    return metric_ground(500.0 + 2.0 * cell * z, cell, latitude)


def months(elevation):
    """Global irradiation, shape (months, y, x)."""
    settings = LightSettings(terrasol.parse_period("2025"), terrasol.Air.ineichen(3.0), **QUICK)
    sink = ArraySink(elevation.shape)
    plan_irradiation(elevation, settings).run(sink, 2)
    return sink.arrays["irradiation_months"].astype(np.float64)


@pytest.mark.parametrize(
    ("latitude", "cell", "worst", "rms"),
    [
        (62.0, 30.0, 6e-3, 4e-4),
        pytest.param(62.0, 250.0, 0.02, 1.5e-3, marks=pytest.mark.heavy),
        pytest.param(62.0, 1000.0, 0.06, 4e-3, marks=pytest.mark.heavy),
        (46.0, 30.0, 3e-4, 3e-5),
        pytest.param(-46.0, 1000.0, 3e-3, 4e-4, marks=pytest.mark.heavy),
    ],
)
def test_months_as_with_a_table_for_each_row(
    metric_ground, monkeypatch, latitude, cell, worst, rms
):
    elevation = rough_ground(metric_ground, cell, latitude)
    found = months(elevation)
    monkeypatch.setattr(ground_work, "STRIP_ROWS", 1)
    monkeypatch.setattr(latitudes, "LATITUDE_GRAIN", 1e-7)
    monkeypatch.setattr(latitudes, "MIXED_BYTES", 1e6)
    want = months(elevation)
    mean = want.mean(axis=(1, 2))
    error = np.abs(found - want)
    assert (error.max(axis=(1, 2)) < worst * mean).all()
    assert (np.sqrt((error**2).mean(axis=(1, 2))) < rms * mean).all()
    # and no strip or block as a whole is lighter than its neighbour
    by_row = (found - want).mean(axis=2) / mean[:, None]
    assert np.abs(by_row).max() < worst / 4.0
