"""Tables at latitude knots fixed to the globe; mixed ones are kept for the strips in need."""

from __future__ import annotations

import threading
from abc import ABC, abstractmethod
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import partial
from typing import Any, Final, Generic, Self, TypeVar

import numpy as np
from numpy.typing import NDArray

from terrasol.sky.sun import SunPath, sun_path
from terrasol.sky.suntable import height_knots, latitude_knots

LATITUDE_GRAIN: Final = 0.01
"""Sun tables are mixed for latitudes rounded to this [degrees]; the rest is a tilt."""

MIXED_BYTES: Final = 256e6
"""Memory for mixed tables: those of the strips of one row of blocks are kept."""


def grain_of(latitude: float) -> int:
    """Number of the grain that a latitude [degrees] is rounded to."""
    return round(latitude / LATITUDE_GRAIN)


Table = TypeVar("Table")
Mix = TypeVar("Mix")


@dataclass
class LatitudeTables(ABC, Generic[Table, Mix]):
    """Tables of a period at the latitude and height knots that a raster needs.

    Parameters
    ----------
    settings : object
        What is tabulated; has `period` and `step_seconds`.
    path : SunPath
        The period's sun.
    latitudes : ndarray
        Knots fixed to the globe [degrees].
    heights : ndarray
        Knots fixed above the sea [m].
    tables : dict
        By index of the latitude; filled by `fill`.
    """

    settings: Any
    path: SunPath
    latitudes: NDArray[np.float64]
    heights: NDArray[np.float64]
    tables: dict[int, Table] = field(default_factory=dict)
    _mixed: dict[int, Mix] = field(default_factory=dict)
    _lock: threading.Lock = field(default_factory=threading.Lock)

    @classmethod
    def over(
        cls,
        settings: Any,
        longitude: float,
        latitudes: tuple[float, float],
        heights: tuple[float, float],
    ) -> Self:
        """Choose the knots for a range of latitudes [degrees] and heights [m]."""
        path = sun_path(settings.period, longitude, settings.step_seconds)
        return cls(settings, path, latitude_knots(*latitudes), height_knots(*heights))

    @property
    def tasks(self) -> list[Callable[[], None]]:
        """Calls that fill all tables, in any order."""
        return [partial(self.fill, i) for i in range(self.latitudes.size)]

    @abstractmethod
    def fill(self, index: int) -> None:
        """Compute the table of one latitude knot."""

    @abstractmethod
    def between(self, south: int, latitude: float) -> tuple[Mix, int]:
        """Mix the tables of knot `south` and the next one; and say how many bytes that is."""

    def at(self, latitude: float) -> Mix:
        """The table for a latitude rounded to LATITUDE_GRAIN."""
        grain = grain_of(latitude)
        with self._lock:
            found = self._mixed.pop(grain, None)
            if found is None:
                found, size = self._mix(grain * LATITUDE_GRAIN)
                while len(self._mixed) > MIXED_BYTES / size:
                    self._mixed.pop(next(iter(self._mixed)))
            self._mixed[grain] = found  # last, so that the one unused longest goes first
            return found

    def exactly(self, latitude: float) -> Mix:
        """The table for a latitude [degrees], linear between two knots."""
        return self._mix(latitude)[0]

    def _mix(self, latitude: float) -> tuple[Mix, int]:
        south = int(np.searchsorted(self.latitudes, latitude)) - 1
        return self.between(min(max(south, 0), self.latitudes.size - 2), latitude)
