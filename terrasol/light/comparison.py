"""A modelled station held against what it measured."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.sky.diffuse import split_diffuse
from terrasol.sky.interval import behind_horizon, cosine, interval_means, lit
from terrasol.sky.irradiance import Sky
from terrasol.sky.station import Station
from terrasol.sky.sun import SunSeries

SHADE_MATTERS: Final = 20.0
"""Loss by terrain shade, W/m2, from which an interval tells whether the horizon is right."""

LEAST_SHADED: Final = 10
"""Intervals in terrain shade below which no verdict on the horizon is given."""

Values = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Modelled:
    """Global irradiance of a level sensor, means of the station's intervals, each (n,) [W/m2].

    Attributes
    ----------
    shaded
        With the terrain's horizon, sky view and reflection; as all light, NaN where the sky is
        not known throughout the interval.
    open
        As on an open plain.
    dull
        The shaded one's light without the sun's disc and ring.
    lit
        Share of each interval with the sun's centre above the level, 0 to 1.
    """

    shaded: Values
    open: Values
    dull: Values
    lit: Values


def model_station(
    station: Station,
    sky: Sky,
    horizon: Values,
    sky_view: float,
    albedo: float = 0.2,
    diffuse: str = "perez",
) -> Modelled:
    """Model what a level sensor among terrain measures under a sky.

    Parameters
    ----------
    station : Station
        Its place and intervals.
    sky : Sky
        Clear, or of another station.
    horizon : ndarray, shape (azimuths,)
        Height of the terrain by azimuth, the first due north [degree].
    sky_view : float
        Sky-view factor of level ground there.
    albedo : float
        Of the terrain around; it counts as lit like the open plain.
    diffuse : {'perez', 'hay-davies', 'isotropic'}
        Model that parts the diffuse light.

    Returns
    -------
    Modelled
    """

    def fluxes(sun: SunSeries) -> dict[str, Values]:
        light = sky.over(sun, station.height)
        split = split_diffuse(diffuse, sun, light)
        direct = (light.beam_normal + split.circumsolar_normal) * cosine(sun)
        whole = direct + split.isotropic
        dull = sky_view * split.isotropic + albedo * (1.0 - sky_view) * whole
        return {
            "open": whole,
            "dull": dull,
            "shaded": np.where(behind_horizon(sun, horizon), 0.0, direct) + dull,
            "lit": lit(sun),
        }

    means = interval_means(station, fluxes)
    return Modelled(means["shaded"], means["open"], means["dull"], means["lit"])


@dataclass(frozen=True)
class Agreement:
    """How well some intervals agree.

    Attributes
    ----------
    count : int
        Intervals.
    measured, modelled : float
        Means [W/m2].
    bias, rms : float
        Of modelled less measured [W/m2].
    """

    count: int
    measured: float
    modelled: float
    bias: float
    rms: float

    @classmethod
    def of(cls, measured: Values, modelled: Values) -> Agreement:
        """Compare two series of the same intervals, at least one."""
        error = modelled - measured
        return cls(
            int(error.size),
            float(measured.mean()),
            float(modelled.mean()),
            float(error.mean()),
            float(np.sqrt((error**2).mean())),
        )

    def record(self) -> dict[str, Any]:
        """As plain numbers, with bias and rms by the measured mean."""
        scale = 100.0 / self.measured if self.measured > 0.0 else float("nan")
        return {
            "intervals": self.count,
            "measured_w_m2": round(self.measured, 2),
            "modelled_w_m2": round(self.modelled, 2),
            "bias_w_m2": round(self.bias, 2),
            "rms_w_m2": round(self.rms, 2),
            "bias_percent": round(self.bias * scale, 2),
            "rms_percent": round(self.rms * scale, 2),
        }


@dataclass(frozen=True)
class Shade:
    """Whether the modelled horizon explains when the measured sun comes and goes.

    Attributes
    ----------
    count : int
        Intervals in which the modelled terrain takes SHADE_MATTERS or more.
    with_horizon, without_horizon : float
        Rms of modelled less measured in these [W/m2].
    explained : float
        Share of the squared misfit that the horizon takes away; negative if it adds some, and
        minus infinity if there was none without it.
    first_minutes, last_minutes : float
        Median over the days of when the measured sun comes, and goes, less when the modelled
        one does [minutes]; as fine as the intervals are. NaN without a day.
    words : str
        The verdict.
    """

    count: int
    with_horizon: float
    without_horizon: float
    explained: float
    first_minutes: float
    last_minutes: float
    words: str


@dataclass(frozen=True, eq=False)
class Comparison:
    """Measured and modelled, overall and by month and hour.

    Attributes
    ----------
    kept : (n,) bool
        Intervals that count: measured, with the sun up.
    overall : Agreement
    months, hours : dict of Agreement
        By calendar month (1 to 12), and by hour of local mean solar time (0 to 23).
    shade : Shade
    """

    kept: NDArray[np.bool_]
    overall: Agreement
    months: dict[int, Agreement]
    hours: dict[int, Agreement]
    shade: Shade


def compare(
    station: Station, modelled: Modelled, clear_days: NDArray[np.datetime64] | None = None
) -> Comparison | None:
    """Hold measured global against the modelled one.

    Parameters
    ----------
    station : Station
        With global; NaN where not to be used.
    modelled : Modelled
        Of the same intervals.
    clear_days : ndarray of datetime64[D], optional
        Days of local mean solar time that count; a clear sky can only explain these. All by
        default.

    Returns
    -------
    Comparison or None
        None where no interval counts.
    """
    measured = station.values["global"]
    local = local_time(station)
    kept = np.isfinite(measured) & np.isfinite(modelled.shaded) & (modelled.lit > 0.0)
    if clear_days is not None:
        kept &= np.isin(local.astype("M8[D]"), clear_days)
    if not kept.any():
        return None

    def grouped(key: NDArray[np.int64]) -> dict[int, Agreement]:
        return {
            int(k): Agreement.of(measured[kept & (key == k)], modelled.shaded[kept & (key == k)])
            for k in np.unique(key[kept])
        }

    month = local.astype("M8[M]").astype(np.int64) % 12 + 1
    hour = local.astype("M8[h]").astype(np.int64) % 24
    return Comparison(
        kept,
        Agreement.of(measured[kept], modelled.shaded[kept]),
        grouped(month),
        grouped(hour),
        _shade(station, modelled, kept),
    )


def local_time(station: Station) -> NDArray[np.datetime64]:
    """Middle of each interval in local mean solar time."""
    return np.asarray(station.middle + station.solar_offset, "M8[ns]")


def _shade(station: Station, modelled: Modelled, kept: NDArray[np.bool_]) -> Shade:
    """Judge the horizon by the intervals in which it matters."""
    measured = station.values["global"]
    matters = kept & (modelled.open - modelled.shaded >= SHADE_MATTERS)
    count = int(matters.sum())
    if count < LEAST_SHADED:
        words = f"terrain shade matters in {count} intervals, too few to judge the horizon"
        unknown = float("nan")
        return Shade(count, unknown, unknown, unknown, unknown, unknown, words)
    with_it = Agreement.of(measured[matters], modelled.shaded[matters]).rms
    without = Agreement.of(measured[matters], modelled.open[matters]).rms
    explained = 1.0 - (with_it / without) ** 2 if without > 0.0 else -np.inf
    first, last = _comings_and_goings(station, modelled, kept)
    verdict = "explains" if explained > 0.8 else "partly explains" if explained > 0.4 else "misses"
    words = (
        f"the modelled horizon {verdict} when the sun comes and goes: in {count} intervals it"
        f" takes {SHADE_MATTERS:g} W/m2 or more, and with it the rms {_change(without, with_it)}"
        " W/m2"
    )
    return Shade(count, with_it, without, explained, first, last, words)


def _change(before: float, after: float) -> str:
    """How a number changes, in words."""
    before, after = round(before), round(after)
    if before == after:
        return f"stays at {after}"
    return f"{'falls' if after < before else 'rises'} from {before} to {after}"


def _comings_and_goings(
    station: Station, modelled: Modelled, kept: NDArray[np.bool_]
) -> tuple[float, float]:
    """Median minutes by which the measured sun comes and goes after the modelled one.

    The sun counts as out where a series has more than half of the open plain's direct light
    above the modelled light of the sky alone.
    """
    threshold = modelled.dull + (modelled.open - modelled.dull) / 2.0
    out = [
        kept & (values > threshold) & (modelled.open > SHADE_MATTERS)
        for values in (station.values["global"], modelled.shaded)
    ]
    day = local_time(station).astype("M8[D]")
    firsts, lasts = [], []
    for one in np.unique(day[kept]):
        places = [np.flatnonzero(which & (day == one)) for which in out]
        if all(p.size for p in places):
            firsts.append(places[0][0] - places[1][0])
            lasts.append(places[0][-1] - places[1][-1])
    if not firsts:
        return float("nan"), float("nan")
    minutes = station.seconds / 60.0
    return float(np.median(firsts)) * minutes, float(np.median(lasts)) * minutes
