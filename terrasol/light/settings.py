"""What light is asked for, and how it is stated."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from numbers import Integral, Real
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import REFRACTION_COEFFICIENT
from terrasol.errors import SettingError
from terrasol.ground.grain import coarsened_map
from terrasol.sky.clear import Air
from terrasol.sky.diffuse import MODELS
from terrasol.sky.irradiance import Sky
from terrasol.sky.period import Period
from terrasol.sky.sun import steps_per_day

UNITS: Final = {"MJ m-2": 1.0, "kW h m-2": 1.0 / 3.6}
"""Units of irradiation, and what one MJ m-2 is in each."""

BASES: Final = ("slope", "map")


@dataclass(frozen=True)
class LightSettings:
    """What light to compute, and how to state it.

    Parameters
    ----------
    period : Period
        What is summed.
    air : Air
        The clear air.
    albedo : tuple of 12 floats
        Of the ground, January to December.
    diffuse : {'perez', 'hay-davies', 'isotropic'}
        Model that parts the diffuse light.
    azimuths : int
        Number of horizon azimuths: a multiple of 4 from 8 to 720.
    step_seconds : float
        Time step of the sun; divides a day.
    unit : {'MJ m-2', 'kW h m-2'}
        Unit of irradiation.
    basis : {'slope', 'map'}
        Per area of the slope's own surface, or per area of the map.
    monthly_parts : bool
        Keep beam, diffuse and reflected of each month, not only of the whole period.
    refraction : float
        Terrestrial refraction coefficient k of lines of sight.
    sky : Sky, optional
        What shines: a measured sky, say; by default the clear air's.
    albedo_map : ndarray of float32, shape (1 or 12, rows, columns), optional
        Albedo of each cell, for the year or January to December; where it is NaN, `albedo`
        counts.
    index_map : ndarray of float32, shape (1 or 12, rows, columns), optional
        Clear-sky index of each cell, for the year or January to December, in place of `sky`.
    photons_per_joule : float, optional
        Photosynthetic photons in a joule of global light [umol J-1]; None for no such sums.

    Raises
    ------
    SettingError
        A value out of its range.
    """

    period: Period
    air: Air
    albedo: tuple[float, ...] = (0.2,) * 12
    diffuse: str = "perez"
    azimuths: int = 64
    step_seconds: float = 60.0
    unit: str = "MJ m-2"
    basis: str = "slope"
    monthly_parts: bool = False
    refraction: float = REFRACTION_COEFFICIENT
    sky: Sky | None = None
    albedo_map: NDArray[np.float32] | None = None
    index_map: NDArray[np.float32] | None = None
    photons_per_joule: float | None = None

    def __post_init__(self) -> None:
        """Refuse what makes no sense."""
        if len(self.albedo) != 12:
            raise SettingError(f"albedo must be twelve numbers; got {len(self.albedo)}")
        for share in self.albedo:
            if not 0.0 <= share <= 1.0:
                raise SettingError(f"albedo must be from 0 to 1; got {share}")
        for name, value, known in (
            ("diffuse model", self.diffuse, MODELS),
            ("unit", self.unit, tuple(UNITS)),
            ("basis", self.basis, BASES),
        ):
            if value not in known:
                raise SettingError(f"{name} '{value}' is not one of: {', '.join(known)}")
        if self.photons_per_joule is not None and not 0.5 <= self.photons_per_joule <= 5.0:
            raise SettingError(
                "photosynthetic photons must be 0.5 to 5 umol a joule of global light; got"
                f" {self.photons_per_joule:g}"
            )
        check_azimuths(self.azimuths)
        check_refraction(self.refraction)
        steps_per_day(self.step_seconds)

    @property
    def month_albedo(self) -> NDArray[np.float64]:
        """Albedo of each month of the period."""
        return np.array([self.albedo[month - 1] for _, month in self.period.months])

    def ground_albedo(self, rows: slice, columns: slice) -> NDArray[np.float64]:
        """Albedo of each month of the period, at some cells if it is mapped.

        Shape (months,), or (months, rows, columns).
        """
        if self.albedo_map is None:
            return self.month_albedo
        months = np.array([month - 1 for _, month in self.period.months])
        return mapped_albedo(self.albedo_map, months, self.month_albedo, rows, columns)

    def sampled_albedo(self, stride: int, shape: tuple[int, int]) -> NDArray[np.float64]:
        """The same at every `stride`-th cell, for a lattice of samples of that shape."""
        if self.albedo_map is None:
            return self.month_albedo
        every = slice(stride // 2, None, stride)
        return filled_up(self.ground_albedo(every, every), shape)

    def coarsened(self, factor: int) -> LightSettings:
        """The same for cells joined as `terrasol.ground.grain.coarsened` joins them."""
        maps: dict[str, Any] = {
            name: coarsened_map(layers, factor)
            for name in ("albedo_map", "index_map")
            if (layers := getattr(self, name)) is not None
        }
        return replace(self, **maps)

    @property
    def photons(self) -> NDArray[np.float64] | None:
        """What turns each month's global sum into mol m-2 d-1, shape (months,)."""
        if self.photons_per_joule is None:
            return None
        return self.photons_per_joule / UNITS[self.unit] / np.array(self.period.month_days)


def mapped_albedo(
    layers: NDArray[np.float32],
    months: NDArray[np.int64],
    plain: NDArray[Any],
    rows: slice,
    columns: slice,
) -> NDArray[np.float64]:
    """Albedo of some cells at some times, shape (times, rows, columns).

    Parameters
    ----------
    layers : ndarray of float32, shape (1 or 12, rows, columns)
        The map, for the year or January to December.
    months : ndarray of int64, shape (times,)
        Calendar month of each time, 0 to 11.
    plain : ndarray, shape (times,)
        What counts where the map is NaN.
    rows, columns : slice
        Which cells.
    """
    cut = layers[:, rows, columns].astype(np.float64)[months % layers.shape[0]]
    return np.where(np.isnan(cut), plain[:, None, None], cut)


def filled_up(values: NDArray[np.float64], shape: tuple[int, ...]) -> NDArray[np.float64]:
    """Values (times, rows, columns) with NaN up to a lattice's rows and columns."""
    short = [(0, 0)] + [(0, n - m) for n, m in zip(shape, values.shape[1:], strict=True)]
    return np.pad(values, short, constant_values=np.nan)


def check_map(name: str, values: NDArray[Any] | None, shape: tuple[int, int]) -> None:
    """Raise SettingError unless a map, if there is one, has one or twelve layers of that shape."""
    if values is not None and values.shape not in ((n, *shape) for n in (1, 12)):
        raise SettingError(
            f"the {name} map must have the shape (1 or 12, {shape[0]}, {shape[1]}); got"
            f" {values.shape}"
        )


def check_azimuths(azimuths: int) -> None:
    """Raise SettingError unless the number of azimuths is a multiple of 4 from 8 to 720."""
    if not isinstance(azimuths, Integral) or azimuths % 4 or not 8 <= azimuths <= 720:
        raise SettingError(
            f"the number of azimuths must be a multiple of 4 from 8 to 720; got {azimuths!r}"
        )


def check_refraction(refraction: float) -> None:
    """Raise SettingError unless the coefficient is from 0 to below 1."""
    if not isinstance(refraction, Real) or not 0.0 <= refraction < 1.0:
        raise SettingError(
            f"the refraction coefficient must be 0 or more and less than 1; got {refraction!r}"
        )


def twelve(values: float | Sequence[float], name: str) -> tuple[float, ...]:
    """One number for all months, or twelve.

    Raises
    ------
    SettingError
        Another count, or no numbers.

    Examples
    --------
    >>> twelve(0.2, "albedo")[:2]
    (0.2, 0.2)
    """
    try:
        numbers = tuple(float(v) for v in np.atleast_1d(np.asarray(values, dtype=float)))
    except (TypeError, ValueError):
        raise SettingError(f"{name} must be one number or twelve; got {values!r}") from None
    if len(numbers) == 1:
        return numbers * 12
    if len(numbers) != 12:
        raise SettingError(f"{name} must be one number or twelve; got {len(numbers)}")
    return numbers
