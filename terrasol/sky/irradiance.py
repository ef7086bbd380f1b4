"""What a sky sends down, and what can be asked for it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from terrasol.sky.sun import SunSeries


@dataclass(frozen=True, eq=False)
class Irradiance:
    """Irradiance for every entry of a `SunSeries`, each (n,) float64 [W/m2].

    Attributes
    ----------
    beam_normal
        Direct irradiance on a plane that faces the sun.
    diffuse_horizontal
        From the whole sky on level ground.
    extraterrestrial_normal
        Above the air, facing the sun.
    """

    beam_normal: NDArray[np.float64]
    diffuse_horizontal: NDArray[np.float64]
    extraterrestrial_normal: NDArray[np.float64]


class Sky(Protocol):
    """A sky, clear or clouded, that can be asked for its light at any place and height."""

    def over(self, sun: SunSeries, height: float) -> Irradiance:
        """Irradiance at a height above the sea [m] for every entry of the series."""
