"""The potential beam that a melt model asks for: clear air of one transmissivity."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from pvlib import atmosphere

from terrasol.errors import SettingError
from terrasol.sky.irradiance import Irradiance
from terrasol.sky.sun import SunSeries

TRANSMISSIVITY = 0.75
"""Of clear air, from the zenith at sea level (Hock 1999)."""

HOCK_CONSTANT = 1368.0
"""Solar constant of Hock (1999) [W/m2]."""

SEA_LEVEL_PASCAL = 101325.0

LEAST_SINE = 0.01
"""Of the sun's elevation, below which the path through the air counts as no longer (own: the beam
is then gone anyway, 0.75^100)."""


@dataclass(frozen=True)
class PotentialBeam:
    """Beam of a cloudless sky of one transmissivity.

    Facing the sun it is I0 / R^2 psi^(p / (p0 cos Z)): Hock (1999), J. Glaciol. 45, 101-111,
    doi:10.3189/S0022143000003087, with p the pressure of the standard atmosphere at the height.

    Parameters
    ----------
    transmissivity : float
        psi, over 0 and under 1.

    Raises
    ------
    SettingError
        Another one.
    """

    transmissivity: float = TRANSMISSIVITY

    def __post_init__(self) -> None:
        """Refuse what is no transmissivity."""
        if not 0.0 < self.transmissivity < 1.0:
            raise SettingError(
                f"the transmissivity must lie between 0 and 1; got {self.transmissivity}"
            )

    def over(self, sun: SunSeries, height: float) -> Irradiance:
        """Light at a height [m]."""
        sine = np.sin(np.radians(sun.elevation))
        above = HOCK_CONSTANT / sun.distance**2
        path = atmosphere.alt2pres(height) / SEA_LEVEL_PASCAL / np.maximum(sine, LEAST_SINE)
        beam = np.where(sine > 0.0, above * self.transmissivity**path, 0.0)
        return Irradiance(beam, np.zeros_like(beam), above)
