"""A measured series at one place."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.errors import InputError

QUANTITIES: Final = {
    "global": "W m-2",
    "beam": "W m-2",
    "diffuse": "W m-2",
    "temperature": "degC",
    "precipitation": "mm",
    "albedo": "1",
    "snow_water": "mm",
}
"""What a station may measure, and its unit: global and diffuse on level ground, beam facing
the sun, each the mean of an interval; precipitation the sum of one; snow water what lies on the
ground, as on a pillow."""


@dataclass(frozen=True, eq=False)
class Station:
    """What was measured at one place, interval by interval, on an even grid of time.

    Parameters
    ----------
    name : str
        For messages and titles.
    latitude, longitude : float
        Degrees north, degrees east.
    height : float
        Metres above the sea.
    start : ndarray of datetime64[s], shape (n,)
        Beginning of each interval, UTC, one interval apart.
    seconds : int
        Length of an interval.
    values : dict of ndarray of float64, shape (n,)
        By name in QUANTITIES; NaN where missing.
    flags : dict of ndarray of uint16, shape (n,)
        Bits that the quality check set, by quantity (see `terrasol.sky.quality`).
    notes : tuple of str
        What a careful reader should know of how it was read, each with the station's name.

    Raises
    ------
    InputError
        Times that are not an even grid, or a series of another length.
    """

    name: str
    latitude: float
    longitude: float
    height: float
    start: NDArray[np.datetime64]
    seconds: int
    values: dict[str, NDArray[np.float64]]
    flags: dict[str, NDArray[np.uint16]] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        """Refuse series that are no even grid."""
        steps = np.diff(self.start.astype("M8[s]").astype(np.int64))
        if self.start.size == 0 or (steps != self.seconds).any():
            raise InputError("the times are not one interval apart throughout", self.name)
        for name, values in self.values.items():
            if name not in QUANTITIES:
                raise InputError(f"'{name}' is not one of: {', '.join(QUANTITIES)}", self.name)
            if values.shape != self.start.shape:
                raise InputError(
                    f"{values.size} values of {name} for {self.start.size} times", self.name
                )

    @property
    def end(self) -> np.datetime64:
        """End of the last interval, UTC."""
        return np.datetime64(self.start[-1].astype("M8[s]") + np.timedelta64(self.seconds, "s"))

    @property
    def solar_offset(self) -> np.timedelta64:
        """Local mean solar time less UTC, to the second."""
        return np.timedelta64(round(self.longitude * 240.0), "s")

    @property
    def middle(self) -> NDArray[np.datetime64]:
        """Middle of each interval, UTC."""
        half = np.timedelta64(self.seconds * 500_000_000, "ns")
        return np.asarray(self.start.astype("M8[ns]") + half, "M8[ns]")
