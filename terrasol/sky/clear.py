"""Beam and diffuse irradiance under a sky without clouds."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final, Literal

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray
from pvlib import atmosphere, clearsky

from terrasol.constants import SOLAR_CONSTANT
from terrasol.errors import SettingError
from terrasol.sky.irradiance import Irradiance
from terrasol.sky.sun import SunSeries

ANGSTROM_EXPONENT: Final = 1.3
"""How aerosol depth falls with wavelength, depth ~ wavelength^-1.3: Angstrom's mean for
natural aerosol (Iqbal 1983, section 6.6)."""

RAYLEIGH_AIRMASS: Final = 14.0
"""Pressure-corrected air mass at which Bird and Hulstrom's Rayleigh transmittance is least
(0.595). Beyond it their formula turns upward, and passes 1 at an air mass of 29.5."""

TURBIDITY_SPREAD: Final = 0.5
"""Departure of Linke turbidity from the centre's beyond which a warning is due: at 46 N some 5 %
of a clear midsummer noon's beam and 12 % of a midwinter one's (own)."""

_RANGES: Final = {
    "aerosol_500nm": (0.0, 5.0, "aerosol depth at 500 nm"),
    "aerosol_380nm": (0.0, 8.0, "aerosol depth at 380 nm"),
    "water_cm": (0.0, 10.0, "precipitable water, cm"),
    "ozone_atm_cm": (0.0, 1.0, "ozone, atm-cm"),
    "asymmetry": (0.0, 1.0, "aerosol asymmetry factor"),
    "ground_albedo": (0.0, 1.0, "ground albedo under the air"),
    "solar_constant": (1000.0, 2000.0, "solar constant, W/m2"),
}


@dataclass(frozen=True)
class Air:
    """What the cloudless air is made of, and which model reads it.

    Make one with `Air.ineichen` or `Air.bird`.

    Attributes
    ----------
    model : "ineichen" or "bird"
    linke : tuple of 12 float, or None
        Linke turbidity at air mass 2 for January to December (Ineichen and Perez).
    aerosol_500nm, aerosol_380nm : float
        Aerosol optical depths (Bird and Hulstrom).
    water_cm : float
        Precipitable water [cm].
    ozone_atm_cm : float
        Ozone column [atm-cm].
    asymmetry : float
        Ratio of forward scatter to total scatter by aerosol.
    ground_albedo : float
        Albedo of the ground for light that bounces between ground and sky (Bird only).
    solar_constant : float
        Total solar irradiance at 1 AU [W/m2].
    """

    model: Literal["ineichen", "bird"]
    linke: tuple[float, ...] | None = None
    aerosol_500nm: float = 0.1
    aerosol_380nm: float = 0.15
    water_cm: float = 1.5
    ozone_atm_cm: float = 0.3
    asymmetry: float = 0.85
    ground_albedo: float = 0.2
    solar_constant: float = SOLAR_CONSTANT

    def __post_init__(self) -> None:
        """Refuse values no air has."""
        if self.model not in ("ineichen", "bird"):
            raise SettingError(f"clear-sky model {self.model!r} is unknown; use ineichen or bird")
        if self.model == "ineichen":
            _check_linke(self.linke)
        for name, (low, high, words) in _RANGES.items():
            value = getattr(self, name)
            if not isinstance(value, int | float | np.number):
                raise SettingError(f"{words}: {value!r} is no number")
            if not low <= value <= high:
                raise SettingError(f"{words}: {value:g} is outside {low:g} to {high:g}")

    def over(self, sun: SunSeries, height: float) -> Irradiance:
        """Light of the cloudless sky at a height [m]; see `clear_sky`."""
        return clear_sky(sun, self, height)

    def record(self) -> dict[str, Any]:
        """The model and what it reads, as plain text and numbers, ready for JSON."""
        told: dict[str, Any] = {"model": self.model, "solar_constant": self.solar_constant}
        if self.linke is not None:
            return told | {"linke": self.linke[0] if len(set(self.linke)) == 1 else self.linke}
        return {name: value for name, value in vars(self).items() if name != "linke"} | told

    @classmethod
    def ineichen(
        cls, linke: float | Sequence[float], solar_constant: float = SOLAR_CONSTANT
    ) -> "Air":
        """Air described by its Linke turbidity, one number or twelve (January first).

        Raises
        ------
        SettingError
            If there are not 1 or 12 numbers, or one is outside 1 to 15.

        Examples
        --------
        >>> Air.ineichen(3.0).linke[:2]
        (3.0, 3.0)
        """
        try:
            values = tuple(float(v) for v in np.atleast_1d(linke))
        except (TypeError, ValueError):
            raise SettingError(f"Linke turbidity {linke!r} is no number, nor twelve") from None
        return cls(
            "ineichen",
            linke=values * 12 if len(values) == 1 else values,
            solar_constant=solar_constant,
        )

    @classmethod
    def bird(
        cls,
        aerosol_500nm: float,
        water_cm: float,
        ozone_atm_cm: float = 0.3,
        aerosol_380nm: float | None = None,
        asymmetry: float = 0.85,
        ground_albedo: float = 0.2,
        solar_constant: float = SOLAR_CONSTANT,
    ) -> "Air":
        """Air described by its aerosol, water and ozone.

        Without a depth at 380 nm, it follows from 500 nm by Angstrom's law.

        Raises
        ------
        SettingError
            If a value is outside what air can hold.
        """
        if not isinstance(aerosol_500nm, int | float | np.number):
            raise SettingError(f"aerosol depth at 500 nm: {aerosol_500nm!r} is no number")
        if aerosol_380nm is None:
            aerosol_380nm = aerosol_500nm * (500.0 / 380.0) ** ANGSTROM_EXPONENT
        return cls(
            "bird",
            aerosol_500nm=aerosol_500nm,
            aerosol_380nm=aerosol_380nm,
            water_cm=water_cm,
            ozone_atm_cm=ozone_atm_cm,
            asymmetry=asymmetry,
            ground_albedo=ground_albedo,
            solar_constant=solar_constant,
        )


def linke_climatology(latitude: float, longitude: float) -> tuple[float, ...]:
    """Look up the mean Linke turbidity of each month, January to December.

    The worldwide grid of 5 minutes of arc that pvlib carries: Remund, Wald, Lefevre,
    Ranchin and Page (2003), Worldwide Linke turbidity information, Proc. ISES Solar
    World Congress, Goteborg; made by Meteotest and Mines ParisTech for SoDa.

    Parameters
    ----------
    latitude, longitude : float
        Degrees north, degrees east.

    Returns
    -------
    tuple of 12 floats

    Raises
    ------
    SettingError
        If the place is not on the globe.
    """
    if not (-90.0 <= latitude <= 90.0 and -180.0 <= longitude <= 180.0):
        raise SettingError(f"latitude {latitude:g}, longitude {longitude:g} is not on the globe")
    months = pd.date_range("2025-01-15", periods=12, freq=pd.DateOffset(months=1), tz="UTC")
    values = clearsky.lookup_linke_turbidity(months, latitude, longitude, interp_turbidity=False)
    return tuple(float(v) for v in values)


def turbidity_doubts(
    centre: tuple[float, float], latitude: NDArray[np.float64], longitude: NDArray[np.float64]
) -> tuple[str, ...]:
    """Warn where the climatology differs much from that of the centre, which serves everywhere.

    Parameters
    ----------
    centre : tuple of float
        Latitude and longitude [degree].
    latitude, longitude : ndarray
        Places spread over the ground.

    Returns
    -------
    tuple of str
        Empty where no month differs by more than TURBIDITY_SPREAD.
    """
    here = np.array(linke_climatology(*centre))
    east = (np.ravel(longitude) + 180.0) % 360.0 - 180.0
    there = np.array(
        [linke_climatology(*place) for place in zip(np.ravel(latitude), east, strict=True)]
    )
    most = float(np.abs(there - here).max())
    if most <= TURBIDITY_SPREAD:
        return ()
    return (
        f"the turbidity climatology differs by up to {most:.1f} over this ground in some month, and"
        " that of its centre is used throughout: give --linke, or cut the raster into pieces",
    )


def clear_sky(sun: SunSeries, air: Air, height: float) -> Irradiance:
    """Compute beam and diffuse irradiance under a cloudless sky.

    Ineichen and Perez (2002), Solar Energy 73, 151-157, or Bird and Hulstrom (1981),
    SERI/TR-642-761; both as pvlib computes them, from the apparent elevation, with the
    air mass of Kasten and Young (1989) and the standard pressure at the height. Two
    departures keep the published formulas within reason outside what they were made
    for: no more reaches the ground than arrives above the air (Ineichen and Perez pass
    that above some 4,100 m), and Bird's Rayleigh transmittance is held at its least for
    a sun lower than about 3 degrees, where his formula turns upward.

    Parameters
    ----------
    sun : SunSeries
    air : Air
    height : float
        Metres above sea level.

    Returns
    -------
    Irradiance
        Zero, not void, while the sun's centre is below the horizon.
    """
    extraterrestrial = air.solar_constant / sun.distance**2
    zenith = 90.0 - np.maximum(sun.elevation, 0.0)
    if air.model == "ineichen":
        beam, diffuse = _ineichen(sun, air, height, zenith, extraterrestrial)
    else:
        beam, diffuse = _bird(sun, air, height, zenith, extraterrestrial)
    up = sun.elevation > 0.0
    beam = np.minimum(beam, extraterrestrial)
    most = (extraterrestrial - beam) * np.cos(np.radians(zenith))
    return Irradiance(beam * up, np.clip(diffuse, 0.0, most) * up, extraterrestrial)


def _ineichen(
    sun: SunSeries,
    air: Air,
    height: float,
    zenith: NDArray[np.float64],
    extraterrestrial: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    mass = atmosphere.get_absolute_airmass(
        relative_airmass(sun.elevation), atmosphere.alt2pres(height)
    )
    irradiance = clearsky.ineichen(
        zenith,
        mass,
        _daily_linke(air, sun.time),
        altitude=height,
        dni_extra=extraterrestrial,
        perez_enhancement=False,
    )
    return irradiance["dni"], irradiance["dhi"]


def _bird(
    sun: SunSeries,
    air: Air,
    height: float,
    zenith: NDArray[np.float64],
    extraterrestrial: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    relative = relative_airmass(sun.elevation)
    pressure = atmosphere.alt2pres(height)
    irradiance = clearsky.bird(
        zenith,
        relative,
        air.aerosol_380nm,
        air.aerosol_500nm,
        air.water_cm,
        ozone=air.ozone_atm_cm,
        pressure=pressure,
        dni_extra=extraterrestrial,
        asymmetry=air.asymmetry,
        albedo=air.ground_albedo,
    )
    beam = irradiance["dni"]
    mass = atmosphere.get_absolute_airmass(relative, pressure)
    low = mass > RAYLEIGH_AIRMASS
    beam[low] *= _bird_rayleigh(RAYLEIGH_AIRMASS) / _bird_rayleigh(mass[low])
    return beam, irradiance["dhi"]


def _bird_rayleigh(mass: ArrayLike) -> NDArray[np.float64]:
    """Rayleigh transmittance of Bird and Hulstrom (1981), for the air mass at pressure."""
    mass = np.asarray(mass, dtype=np.float64)
    return np.exp(-0.0903 * mass**0.84 * (1.0 + mass - mass**1.01))


def relative_airmass(elevation: ArrayLike) -> NDArray[np.float64]:
    """Air mass at sea level pressure for an apparent elevation, 1 at the zenith.

    1 / (sin e + 0.50572 (e + 6.07995)^-1.6364), Kasten and Young (1989), Applied
    Optics 28, 4735-4738. Below the horizon the horizon's value, 37.9.

    Examples
    --------
    >>> round(float(relative_airmass(30.0)), 4)
    1.9943
    """
    return atmosphere.get_relative_airmass(90.0 - np.maximum(elevation, 0.0), "kastenyoung1989")


def _check_linke(linke: tuple[float, ...] | None) -> None:
    if linke is not None and np.ndim(linke) != 1:
        raise SettingError(
            f"Linke turbidity {linke!r} is no row of 12 numbers; Air.ineichen takes one number"
        )
    if linke is None or len(linke) != 12:
        count = 0 if linke is None else len(linke)
        raise SettingError(f"Linke turbidity needs 1 number or 12 (January first), not {count}")
    for value in linke:
        if not 1.0 <= value <= 15.0:
            raise SettingError(f"Linke turbidity {value:g} is outside 1 to 15")


def _daily_linke(air: Air, time: NDArray[np.datetime64]) -> NDArray[np.float64] | float:
    """Turbidity of each instant's UTC day: monthly values stand at mid-month, linear between.

    As in pvlib's look-up, the n-th day of the year stands at n days from its beginning.
    """
    if air.linke is None:
        raise SettingError("this air has no Linke turbidity")
    if len(set(air.linke)) == 1:
        return air.linke[0]
    if time.size == 0:
        return np.empty(0)
    day = time.astype("M8[D]").astype(np.int64)
    first, last = int(day.min()), int(day.max())
    month = np.arange(
        np.datetime64(first, "D").astype("M8[M]") - 1, np.datetime64(last, "D").astype("M8[M]") + 3
    )
    start = month.astype("M8[D]").astype(np.int64)
    middle = (start[:-1] + start[1:]) / 2.0 - 1.0
    monthly = np.array(air.linke)[month[:-1].astype(np.int64) % 12]
    return np.interp(np.arange(first, last + 1), middle, monthly)[day - first]
