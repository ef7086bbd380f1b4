"""What came out of a job, counted block by block."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from terrasol.files.layers import Layer
from terrasol.kernels.rounding import tally

if TYPE_CHECKING:
    from terrasol.engine.job import Plan

UNCOUNTED = ("aspect", "horizon", "status")
"""Layers of which a mean says nothing."""


class Totals:
    """Running count, sum and range of each band."""

    def __init__(self) -> None:
        self.bands: dict[tuple[str, int], list[float]] = {}

    def add(self, arrays: dict[str, NDArray[Any]]) -> None:
        """Take in a block."""
        for name, values in arrays.items():
            if name in UNCOUNTED:
                continue
            for band, plane in enumerate(values):
                found = np.empty(4)
                tally(np.ascontiguousarray(plane, np.float32).reshape(-1), found)
                count, total, low, high = found.tolist()
                if count:
                    old = self.bands.setdefault((name, band), [0.0, 0.0, np.inf, -np.inf])
                    self.bands[name, band] = [
                        old[0] + count,
                        old[1] + total,
                        min(old[2], low),
                        max(old[3], high),
                    ]

    def means(self, plan: Plan) -> dict[str, Any]:
        """Mean, least and greatest of every band, by layer."""
        found: dict[str, Any] = {}
        for layer in plan.layers:
            rows = {
                label: {
                    "mean": _rounded(total / count),
                    "least": _rounded(low),
                    "greatest": _rounded(high),
                }
                for band, label in enumerate(layer.bands)
                if (layer.name, band) in self.bands
                for count, total, low, high in [self.bands[layer.name, band]]
            }
            if rows:
                found[layer.name] = {"unit": layer.unit, **rows}
            if rows and layer.band_units:
                found |= _one_unit_each(layer, rows)
        return found


def _rounded(value: float) -> float:
    """A number as told, without a minus before a zero."""
    return round(value, 4) + 0.0


def _one_unit_each(layer: Layer, rows: dict[str, Any]) -> dict[str, Any]:
    """Figures of a layer whose bands have units of their own: one entry a band."""
    names = [layer.name, *(f"{layer.name}: {band}" for band in layer.bands[1:])]
    return {
        name: {"unit": unit, band: rows[band]}
        for name, unit, band in zip(names, layer.units, layer.bands, strict=True)
        if band in rows
    }
