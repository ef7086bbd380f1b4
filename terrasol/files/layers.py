"""What a map that terrasol writes is: its bands, unit and names."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Layer:
    """One output file, or one variable of a dataset.

    Parameters
    ----------
    name : str
        File name without ending, and variable name.
    bands : tuple of str
        One description a band.
    unit : str
        As UDUNITS reads it; ``"1"`` for a ratio.
    long_name : str
        What the numbers are, in words.
    standard_name : str, optional
        The CF standard name, only where one truly fits.
    dtype : str
        ``"float32"`` (void is NaN in memory) or ``"uint8"``.
    resolution : float
        Values are rounded to multiples of this when written: a power of two far below the
        accuracy of any model, so that files stay small.
    tags : dict
        Further tags of the file.
    band_units : tuple of str
        One unit a band, where they differ from `unit`.
    band_names : tuple of str
        What the numbers of each band are, where that differs; else `long_name` says it.
    """

    name: str
    bands: tuple[str, ...]
    unit: str
    long_name: str
    standard_name: str | None = None
    dtype: str = "float32"
    resolution: float = 2.0**-10
    tags: dict[str, str] = field(default_factory=dict)
    band_units: tuple[str, ...] = ()
    band_names: tuple[str, ...] = ()

    @property
    def units(self) -> tuple[str, ...]:
        """Unit of each band."""
        return self.band_units or (self.unit,) * len(self.bands)


class Sink(Protocol):
    """Where finished blocks go: rasters on disk, or arrays in memory."""

    def open(self, layer: Layer) -> None:
        """Make room for a layer."""

    def write(self, name: str, row: int, column: int, values: NDArray[np.generic]) -> None:
        """Take one block, shape (bands, rows, columns), with its upper left cell."""
