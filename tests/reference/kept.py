"""A series kept whole in memory, unrounded, for tests."""

import tempfile
from pathlib import Path

import numpy as np

from terrasol.engine.series import plan_series
from terrasol.light.series import SeriesSettings
from terrasol.sky.clear import Air
from terrasol.sky.period import parse_period


class KeptSeries:
    """Takes what a stack would take."""

    def __init__(self, plan):
        self.values = {
            name: np.full((plan.steps, *plan.elevation.shape), np.nan, np.float32)
            for name in plan.settings.quantities
        }

    def write(self, name, time, row, column, values):
        """Keep a piece."""
        times, rows, columns = values.shape
        self.values[name][time : time + times, row : row + rows, column : column + columns] = values


def series_of(elevation, period, sky=None, *, threads=2, store=None, **settings):
    """Run a series into arrays; return them by name, and the plan."""
    given = SeriesSettings(parse_period(period), sky or Air.ineichen(3.0), **settings)
    plan = plan_series(elevation, given)
    kept = KeptSeries(plan)
    with tempfile.TemporaryDirectory() as scratch:
        plan.run(kept, Path(store or scratch), threads)
    return kept.values, plan
