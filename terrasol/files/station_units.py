"""Units that station files come in, and how each becomes terrasol's own."""

from __future__ import annotations

from collections.abc import Callable
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.errors import InputError

Values = NDArray[np.float64]

POWER: Final = {"W/m2": 1.0, "kW/m2": 1e3}
ENERGY: Final = {
    "J/m2": 1.0, "kJ/m2": 1e3, "MJ/m2": 1e6, "J/cm2": 1e4, "Wh/m2": 3600.0, "kWh/m2": 3.6e6,
}  # fmt: skip
"""Energy of an interval, in J/m2."""

DEPTH: Final = {"mm": 1.0, "cm": 10.0, "m": 1e3, "inch": 25.4, "kg/m2": 1.0}
RATE: Final = {"kg/m2/s": 1.0, "mm/s": 1.0, "mm/h": 1.0 / 3600.0, "m/s": 1e3}
"""Precipitation of an interval [mm], and its rate [mm/s]."""

TEMPERATURE: Final[dict[str, tuple[float, float]]] = {
    "degC": (1.0, 0.0), "K": (1.0, -273.15), "degF": (5.0 / 9.0, -160.0 / 9.0),
}  # fmt: skip
SHARE: Final = {"1": 1.0, "%": 0.01}

_ALIASES: Final = {
    "°c": "degC", "c": "degC", "celsius": "degC", "degree_celsius": "degC",
    "degrees_celsius": "degC", "deg_c": "degC", "°f": "degF", "f": "degF", "fahrenheit": "degF",
    "kelvin": "K", "in": "inch", "inches": "inch", "percent": "%",
    "": "1", "mm/hour": "mm/h", "mm/hr": "mm/h",
}  # fmt: skip


def _plain(unit: str) -> str:
    """A unit without blanks, powers and case: "W m-2", "W/m^2" and "w/m²" are the same."""
    text = unit.strip().lower().replace("²", "2").replace("⁻", "-").replace("**", "")
    text = text.replace("^", "").replace("·", " ").replace(".", "").replace("*", " ")
    text = text.replace("m-2", "/m2").replace("cm-2", "/cm2").replace("s-1", "/s")
    text = text.replace("h-1", "/h").replace("c/m2", "/cm2").replace(" ", "")
    return text.replace("//", "/")


def radiation_factors(seconds: int) -> dict[str, float]:
    """W/m2 in one of each unit of light, for intervals of a length."""
    return POWER | {unit: joules / seconds for unit, joules in ENERGY.items()}


def unit_of(quantity: str, written: str, where: str) -> str:
    """The unit that a person or a file means.

    Raises
    ------
    InputError
        A unit that is not known for the quantity.

    Examples
    --------
    >>> unit_of("global", "MJ m-2", ""), unit_of("temperature", "°F", "")
    ('MJ/m2', 'degF')
    """
    known = _units(quantity)
    plain = _plain(written)
    for unit in known:
        if plain == _plain(unit):
            return unit
    alias = _ALIASES.get(plain)
    if alias in known:
        return alias
    raise InputError(
        f"{where} unit {written!r} is not known for {quantity}; write one of: {', '.join(known)}"
    )


def converter(quantity: str, unit: str, seconds: int) -> Callable[[Values], Values]:
    """How values of a quantity in a known unit become terrasol's own."""
    if quantity == "temperature":
        factor, offset = TEMPERATURE[unit]
        return lambda values: values * factor + offset
    if quantity == "precipitation":
        factor = DEPTH[unit] if unit in DEPTH else RATE[unit] * seconds
    elif quantity == "snow_water":
        factor = DEPTH[unit]
    elif quantity == "albedo":
        factor = SHARE[unit]
    else:
        factor = radiation_factors(seconds)[unit]
    return lambda values: values * factor


def _units(quantity: str) -> tuple[str, ...]:
    if quantity == "temperature":
        return tuple(TEMPERATURE)
    if quantity == "precipitation":
        return (*DEPTH, *RATE)
    if quantity == "snow_water":
        return tuple(DEPTH)
    if quantity == "albedo":
        return tuple(SHARE)
    return (*POWER, *ENERGY)
