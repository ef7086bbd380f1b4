"""What to tell of plots."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from terrasol.engine.plot_table import length_tag
from terrasol.engine.predictors import GROUPS, OF_LIGHT, OF_TIME
from terrasol.errors import SettingError
from terrasol.light.hours import HoursSettings
from terrasol.light.settings import LightSettings

FINER_HOURS: Final = 4
MOST_AZIMUTHS: Final = 720
"""How many more azimuths hours of sun take than energy does, and the most there may be."""

RADII: Final = (50.0, 100.0)
"""Circles by default [m] (judgement, no source)."""


@dataclass(frozen=True)
class PlotSettings:
    """What to tell of plots.

    Parameters
    ----------
    light : LightSettings
        Of twelve whole months, with monthly parts and photosynthetic light.
    hours : HoursSettings
        Of the same months, with one day of each.
    season : tuple of int, optional
        Months of the growing season; by default those of the raster's hemisphere.
    radii : tuple of float
        Of circles [m], rising.
    factors : tuple of int
        Cell sizes, in cells of the raster, rising; 1 comes first.
    groups : tuple of str
        Of `GROUPS`.

    Raises
    ------
    SettingError
        A value out of its range, or a period that is not twelve whole months.
    """

    light: LightSettings
    hours: HoursSettings
    season: tuple[int, ...] = ()
    radii: tuple[float, ...] = RADII
    factors: tuple[int, ...] = (1,)
    groups: tuple[str, ...] = tuple(GROUPS)

    def __post_init__(self) -> None:
        """Refuse what makes no sense."""
        period = self.light.period
        first, last = period.start.astype("M8[D]"), period.end.astype("M8[D]")
        whole = all(day == day.astype("M8[M]").astype("M8[D]") for day in (first, last))
        if len(period.months) != 12 or not whole:
            raise SettingError(
                f"the period {period.label} is not twelve whole months, which year and season need:"
                " write a year, or 2024-10/2025-09, say"
            )
        if any(not 0.0 < radius < np.inf for radius in self.radii):
            raise SettingError("the radius of a circle must be more than 0 m")
        for name, values in (("radii", self.radii), ("cell sizes", self.factors)):
            if list(values) != sorted(set(values)):
                raise SettingError(f"the {name} must rise, each given once; got {values}")
        tags = [length_tag(radius) for radius in self.radii]
        if len(set(tags)) < len(tags):
            raise SettingError(
                "two radii are the same in the names of columns, where they are rounded: choose"
                " radii further apart"
            )
        if self.factors[:1] != (1,):
            raise SettingError(f"the cell sizes begin with the raster's own, 1; got {self.factors}")
        unknown = set(self.groups) - set(GROUPS)
        if unknown or not self.groups:
            raise SettingError(f"predictors must be some of {', '.join(GROUPS)}")

    @property
    def lit(self) -> bool:
        """Whether energy is asked for."""
        return any(group in OF_LIGHT for group in self.groups)

    @property
    def timed(self) -> bool:
        """Whether hours of sun are asked for."""
        return any(group in OF_TIME for group in self.groups)

    @property
    def shaded(self) -> bool:
        """Whether anything is asked for that the horizon bounds."""
        return self.lit or self.timed or "sky_view" in self.groups


def hours_azimuths(azimuths: int) -> int:
    """Horizon azimuths for hours of sun beside so many for energy.

    Four times as many, as everywhere in terrasol, and at most 720.
    """
    return min(FINER_HOURS * azimuths, MOST_AZIMUTHS)
