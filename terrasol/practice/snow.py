"""Snow by the hour: the named numbers of the melt models, and one day of any cells."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.errors import SettingError
from terrasol.kernels import melt as kernel

MELT_MODELS: Final = {
    "enhanced": (kernel.ENHANCED, "Pellicciotti et al. 2005"),
    "hock": (kernel.HOCK, "Hock 1999"),
    "degree-days": (kernel.DEGREE_DAYS, "degree-days"),
}
"""Melt models by name: the kernel's number, and what to call them in print."""

ALBEDO_MODELS: Final = {
    "brock": (kernel.BROCK, "Brock et al. 2000"),
    "usace": (kernel.USACE, "US Army Corps of Engineers 1956"),
    "station": (kernel.MEASURED, "as the station measured it"),
}
"""Ways in which the snow's albedo comes about: the kernel's number, and what to call them."""

NO_AVALANCHE: Final = (
    "Melt and snow water of an open, undisturbed snow cover; no avalanche tool. Wind, avalanches,"
    " forest and glacier ice are not in it. Decisions on danger belong to licensed practice and"
    " the local avalanche and flood services."
)
"""What goes with every result."""

LAPSE: Final = 6.5
"""Fall of air temperature with height [K/km]: that of the International Standard Atmosphere (ICAO
Doc 7488). Over mountains it is less in winter; give twelve numbers where they are known."""

LAPSE_RANGE: Final = (-15.0, 15.0)
"""Lapse rates that are taken [K/km] (judgement; a monthly mean inversion is below 0)."""

COVERED_FROM: Final = 1.0
"""Snow water from which a cell counts as covered at the end of a day [mm] (judgement)."""

_P05 = "Pellicciotti et al. 2005, doi:10.3189/172756505781829124"
_H99 = "Hock 1999, doi:10.3189/S0022143000003087, from memory"
_B00 = "Brock et al. 2000, doi:10.3189/172756500781832675"
_USACE = "US Army Corps of Engineers 1956, Snow Hydrology, as handed down"
_A06 = "Anderson 2006, Snow Accumulation and Ablation Model, NWS, from memory"
_PRACTICE = "common practice, no source"


@dataclass(frozen=True)
class Number:
    """One number of the snow model.

    Parameters
    ----------
    value : float
        Unless another is given.
    unit : str
    low, high : float
        Bounds of what is taken.
    meaning, source : str
    spread : float
        Coefficient of variation, for the spread of the hydrograph; 0 where none. Of the enhanced
        model's factors between sites (Carenzo et al. 2009, doi:10.3189/002214309788608804); of
        the others, and of the snow that a gauge catches, judgement.
    """

    value: float
    unit: str
    low: float
    high: float
    meaning: str
    source: str
    spread: float = 0.0


NUMBERS: Final[dict[str, Number]] = {
    "temperature_factor": Number(
        0.05, "mm h-1 K-1", 0.0, 0.5, "melt by air temperature (enhanced)", _P05, 0.56
    ),
    "radiation_factor": Number(
        0.0094, "mm m2 h-1 W-1", 0.0, 0.01077,
        "melt by absorbed shortwave (enhanced); 0.01078 would be all of it", _P05, 0.06,
    ),
    "hock_melt_factor": Number(
        1.8, "mm d-1 K-1", 0.0, 15.0, "melt by temperature alone (hock)", _H99, 0.25
    ),
    "hock_radiation_factor": Number(
        0.0006, "mm m2 h-1 W-1 K-1", 0.0, 0.005,
        "melt by temperature times potential beam (hock); snow", _H99, 0.25,
    ),
    "degree_day_factor": Number(
        4.4, "mm d-1 K-1", 0.0, 20.0, "melt by degree-days; snow", _H99, 0.25
    ),
    "melt_above": Number(
        1.0, "degC", -5.0, 5.0,
        "air temperature above which snow melts; 0 for hock and degree-days unless given", _P05,
    ),
    "rain_snow_middle": Number(
        1.0, "degC", -3.0, 5.0, "air temperature at which half of the water falls as snow",
        "Jennings et al. 2018, doi:10.1038/s41467-018-03629-7, mean of the northern hemisphere",
    ),
    "rain_snow_width": Number(
        2.0, "K", 0.0, 10.0, "from all snow to all rain, linear between", _PRACTICE
    ),
    "snow_factor": Number(
        1.0, "1", 0.2, 5.0, "snow on the ground by snow in the gauge", "no correction", 0.15
    ),
    "precipitation_gradient": Number(
        5.0, "% per 100 m", -20.0, 50.0,
        "more precipitation with height, of the station's; never below none", _PRACTICE,
    ),
    "holding_share": Number(
        0.05, "1", 0.0, 0.3, "liquid water that snow holds, by its frozen water", _PRACTICE
    ),
    "refreeze_factor": Number(
        0.2, "mm d-1 K-1", 0.0, 10.0,
        "liquid water that freezes again below 0 degC: some 5 % of a degree-day factor", _PRACTICE,
    ),
    "ground_albedo": Number(
        0.2, "1", 0.0, 1.0, "of the ground without snow, and least of snow", _PRACTICE
    ),
    "fresh_snow": Number(
        5.0, "mm", 0.1, 100.0, "snow of one spell that renews the surface", "judgement, no source"
    ),
    "albedo_most": Number(0.85, "1", 0.3, 1.0, "of fresh snow", f"{_B00}; {_USACE}"),
    "albedo_start": Number(0.713, "1", 0.2, 1.0, "of deep snow at 1 K day (brock)", _B00),
    "albedo_fall": Number(0.112, "1", 0.0, 0.5, "loss a tenfold of warmth (brock)", _B00),
    "shallow_albedo": Number(0.442, "1", 0.0, 0.8, "of thin snow above the ground's (brock)", _B00),
    "shallow_decay": Number(0.058, "K-1 d-1", 0.0, 1.0, "its loss with warmth (brock)", _B00),
    "shallow_depth": Number(24.0, "mm", 1.0, 200.0, "snow water that parts thin from deep", _B00),
    "cold_base": Number(0.94, "1", 0.5, 1.0, "cold snow: most x base ^ (days ^ power)", _USACE),
    "cold_power": Number(0.58, "1", 0.1, 2.0, "of cold snow (usace)", _USACE),
    "thaw_base": Number(0.82, "1", 0.5, 1.0, "snow that thawed since it fell (usace)", _USACE),
    "thaw_power": Number(0.46, "1", 0.1, 2.0, "of thawed snow (usace)", _USACE),
    "deficit_factor": Number(
        0.0, "mm d-1 K-1", 0.0, 2.0,
        "heat deficit of snow by air colder than it; 0 leaves it out, 0.6 is Anderson's", _A06,
    ),
    "deficit_memory": Number(
        0.1, "1", 0.01, 1.0, "weight of the air of 6 hours in the temperature that snow felt", _A06
    ),
}  # fmt: skip
"""Every number that can be changed, by name."""

MELT_NUMBERS: Final = {
    "enhanced": ("temperature_factor", "radiation_factor"),
    "hock": ("hock_melt_factor", "hock_radiation_factor"),
    "degree-days": ("degree_day_factor",),
}
"""The factors of each melt model: what a fit changes, beside the snow factor, and whose spread the
hydrograph shows."""


@dataclass(frozen=True)
class SnowModel:
    """What happens to snow, and by which numbers.

    Parameters
    ----------
    melt : {'enhanced', 'hock', 'degree-days'}
        Melt model.
    albedo : {'brock', 'usace', 'station'}
        How the snow's albedo comes about.
    lapse : tuple of 12 floats
        Fall of air temperature with height, January to December [K/km].
    changed : mapping
        Numbers in place of those of `NUMBERS`, by name.

    Raises
    ------
    SettingError
        An unknown model or name, or a number out of its range.
    """

    melt: str = "enhanced"
    albedo: str = "brock"
    lapse: tuple[float, ...] = (LAPSE,) * 12
    changed: Mapping[str, float] = field(default_factory=dict)

    def __post_init__(self) -> None:
        """Refuse what makes no sense."""
        for name, value, known in (
            ("melt model", self.melt, MELT_MODELS),
            ("albedo model", self.albedo, ALBEDO_MODELS),
        ):
            if value not in known:
                raise SettingError(f"{name} '{value}' is not one of: {', '.join(known)}")
        low, high = LAPSE_RANGE
        if len(self.lapse) != 12 or not all(low <= rate <= high for rate in self.lapse):
            raise SettingError(
                f"the lapse rate must be one number or twelve from {low:g} to {high:g} K/km, more"
                " than 0 where it is colder above"
            )
        for key, number in self.changed.items():
            check_number(key, number)

    @cached_property
    def numbers(self) -> dict[str, float]:
        """All numbers that count, by name."""
        found = {name: number.value for name, number in NUMBERS.items()}
        if self.melt != "enhanced":
            found["melt_above"] = 0.0
        return found | {name: float(value) for name, value in self.changed.items()}

    @cached_property
    def vector(self) -> NDArray[np.float64]:
        """The same in the kernel's order."""
        return np.array([self.numbers[name] for name in kernel.NUMBERS])

    def with_numbers(self, **changed: float) -> SnowModel:
        """The same model with some other numbers."""
        return SnowModel(self.melt, self.albedo, self.lapse, {**self.changed, **changed})

    def spread(self) -> list[SnowModel]:
        """The model with each melt factor and the snow factor lower and higher, one at a time.

        By one standard deviation, `Number.spread`, and held within what is taken: the radiation
        factor, for one, cannot exceed the physical limit.
        """
        found = []
        for name in (*MELT_NUMBERS[self.melt], "snow_factor"):
            told = NUMBERS[name]
            for sign in (-1.0, 1.0):
                value = self.numbers[name] * (1.0 + sign * told.spread)
                found.append(self.with_numbers(**{name: min(max(value, told.low), told.high)}))
        return found

    def record(self) -> dict[str, Any]:
        """As plain text and numbers: all that the result depends on."""
        return {
            "melt": self.melt,
            "albedo": self.albedo,
            "lapse_k_per_km": list(self.lapse),
            "numbers": self.numbers,
        }


def check_number(name: str, value: float) -> None:
    """Raise SettingError for a number that is unknown or out of its range."""
    if name not in NUMBERS:
        raise SettingError(
            f"'{name}' is no number of the snow model; there are: {', '.join(NUMBERS)}"
        )
    told = NUMBERS[name]
    if not (math.isfinite(value) and told.low <= value <= told.high):
        raise SettingError(
            f"{name} must lie from {told.low:g} to {told.high:g} {told.unit}; got {value:g}"
        )


@dataclass(frozen=True, eq=False)
class Snow:
    """Snow of some cells, as it stands; the arrays are changed in place.

    Parameters
    ----------
    ice, liquid : ndarray of float64, shape (cells,)
        Water of the snow, frozen and liquid [mm on map area].
    skin : ndarray of float32, shape (cells, 6)
        See `terrasol.kernels.melt.SKIN`.
    """

    ice: NDArray[np.float64]
    liquid: NDArray[np.float64]
    skin: NDArray[np.float32]

    @classmethod
    def none(cls, cells: int, model: SnowModel) -> Snow:
        """Bare ground."""
        skin = np.zeros((cells, len(kernel.SKIN)), np.float32)
        skin[:, -1] = model.numbers["ground_albedo"]
        return cls(np.zeros(cells), np.zeros(cells), skin)

    @property
    def water(self) -> NDArray[np.float64]:
        """Snow water, frozen and liquid [mm on map area]."""
        return self.ice + self.liquid

    @property
    def albedo(self) -> NDArray[np.float32]:
        """Of the snow, or of the ground where none lies."""
        return self.skin[:, -1]

    def part(self, cells: slice) -> Snow:
        """Some of the cells; a view."""
        return Snow(self.ice[cells], self.liquid[cells], self.skin[cells])


@dataclass(frozen=True, eq=False)
class Weather:
    """What a station's air brings in the hours of some days.

    Parameters
    ----------
    edges : ndarray of datetime64[s], shape (days + 1,)
        Of the days, UTC; each holds 24 hours.
    months : ndarray of int64, shape (days,)
        Calendar month of each day, 0 to 11.
    temperature, precipitation : ndarray of float64, shape (days, 24)
        Mean air temperature [degC] and sum of precipitation [mm] of each hour.
    height : float
        Of the station [m].
    albedo : ndarray of float64, shape (days,), optional
        Measured.
    """

    edges: NDArray[np.datetime64]
    months: NDArray[np.int64]
    temperature: NDArray[np.float64]
    precipitation: NDArray[np.float64]
    height: float
    albedo: NDArray[np.float64] | None = None

    @property
    def days(self) -> int:
        """How many."""
        return int(self.edges.size) - 1

    def part(self, first: int, stop: int) -> Weather:
        """Some of the days."""
        days = slice(first, stop)
        return Weather(
            self.edges[first : stop + 1], self.months[days], self.temperature[days],
            self.precipitation[days], self.height,
            None if self.albedo is None else self.albedo[days],
        )  # fmt: skip

    def hours(self, day: int, model: SnowModel) -> NDArray[np.float64]:
        """The day's table for the kernel, shape (24, 3)."""
        lapse = np.full(24, model.lapse[int(self.months[day])] * 1e-3)
        return np.stack([self.temperature[day], self.precipitation[day], lapse], -1)


def snow_day(
    model: SnowModel,
    weather: Weather,
    day: int,
    light: NDArray[np.float32],
    above: NDArray[np.float32],
    steep: NDArray[np.float32],
    snow: Snow,
) -> NDArray[np.float64]:
    """Carry the snow of some cells through a day.

    Parameters
    ----------
    model : SnowModel
    weather : Weather
        At the station.
    day : int
        Which of its days.
    light : ndarray of float32, shape (24, cells)
        In the plane of the slope, per area of slope [W m-2]: global irradiance, or for Hock's
        model the potential beam; not looked at for degree-days.
    above : ndarray of float32, shape (cells,)
        Height above the station [m].
    steep : ndarray of float32, shape (cells,)
        Area of slope by area of map, 1 / cos(slope); NaN where void.
    snow : Snow
        As it stands; changed.

    Returns
    -------
    ndarray of float64, shape (cells, 6)
        What moved [mm on map area], in the order of `terrasol.kernels.melt.FLOWS`.

    Notes
    -----
    An hour melts, per area of slope, above `melt_above`:

    - enhanced: temperature_factor T + radiation_factor (1 - albedo) G, Pellicciotti et al. (2005);
    - hock: (hock_melt_factor / 24 + hock_radiation_factor I) T, Hock (1999);
    - degree-days: degree_day_factor / 24 T;

    times `steep` on map area, since slopes have more surface than map. Precipitation falls on map
    area. Melt and rain stay in the snow up to `holding_share` of its frozen water; below 0 degC
    refreeze_factor / 24 (-T) of it freezes again an hour; the rest flows out at once.

    With a `deficit_factor` the snow keeps a heat deficit in place of that (Anderson 2006, from
    memory): it grows by deficit_factor / 24 (felt - min(T, 0)) in an hour without melt, `felt` a
    mean of past air by `deficit_memory`, 0 degC at the most, and by the cold of new snow; it is 0
    to 0.33 of the frozen water. Melt and rain freeze until it is used up. Frozen
    water closes as snowfall + refrozen = melt + what lies, all water as snowfall + rain on snow =
    outflow + what lies.
    """
    moved = np.empty((steep.size, len(kernel.FLOWS)))
    measured = 0.0 if weather.albedo is None else float(weather.albedo[day])
    kernel.melt_day(
        MELT_MODELS[model.melt][0], ALBEDO_MODELS[model.albedo][0], model.vector,
        weather.hours(day, model), measured, light, above, steep,
        snow.ice, snow.liquid, snow.skin, moved,
    )  # fmt: skip
    return moved
