"""Is a measured series believable? Flags for every value; nothing is deleted.

The tests are those of the Baseline Surface Radiation Network (Long and Dutton 2002, "BSRN
Global Network recommended QC tests, V2.0"), their limits averaged over each interval.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import IntFlag
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import SOLAR_CONSTANT
from terrasol.errors import InputError
from terrasol.sky.interval import cosine, interval_means, lit
from terrasol.sky.station import Station
from terrasol.sky.sun import SunSeries

Values = NDArray[np.float64]


class Flag(IntFlag):
    """What may be said of a value; several may hold at once."""

    MISSING = 1
    """No value."""
    TOO_LOW = 2
    """Below what is physically possible."""
    TOO_HIGH = 4
    """Above what is physically possible."""
    RARELY_LOW = 8
    """Possible, but extremely rarely as low."""
    RARELY_HIGH = 16
    """Possible, but extremely rarely as high."""
    NOT_CLOSED = 32
    """Global differs too much from diffuse plus beam on level ground."""
    DIFFUSE_ABOVE_GLOBAL = 64
    """More diffuse than global light."""
    NIGHT_OFFSET = 128
    """At night, and as near to zero as an instrument's offset: zero in use."""
    NIGHT_LIGHT = 256
    """At night, and more than any offset."""
    FILLED = 512
    """Not measured: filled from neighbours (`terrasol.sky.gaps`)."""


MEANINGS: Final = {
    Flag.MISSING: "missing",
    Flag.TOO_LOW: "below the physically possible",
    Flag.TOO_HIGH: "above the physically possible",
    Flag.RARELY_LOW: "extremely rarely so low",
    Flag.RARELY_HIGH: "extremely rarely so high",
    Flag.NOT_CLOSED: "global is not diffuse + beam",
    Flag.DIFFUSE_ABOVE_GLOBAL: "diffuse exceeds global",
    Flag.NIGHT_OFFSET: "offset at night",
    Flag.NIGHT_LIGHT: "light at night",
    Flag.FILLED: "filled",
}
"""Words for the flags in summaries."""

IMPOSSIBLE: Final = Flag.TOO_LOW | Flag.TOO_HIGH
LIGHT: Final = ("global", "diffuse", "beam")

LOWEST: Final = -4.0
RARELY_LOWEST: Final = -2.0
"""Lower limits of all three, W/m2 (Long and Dutton 2002)."""

UPPER_LIMITS: Final = {
    # quantity: ((factor of E0, power of the cosine, added W/m2) possible, the same rare)
    "global": ((1.5, 1.2, 100.0), (1.2, 1.2, 50.0)),
    "diffuse": ((0.95, 1.2, 50.0), (0.75, 1.2, 30.0)),
    "beam": ((1.0, 0.0, 0.0), (0.95, 0.2, 10.0)),
}
"""Upper limits: factor x E0 x cosine^power + a constant (Long and Dutton 2002)."""

COMPARED_ABOVE: Final = 50.0
"""W/m2 under which sums and ratios are not judged (Long and Dutton 2002)."""

LOW_SUN: Final = float(np.cos(np.radians(75.0)))
CLOSURE: Final = (0.08, 0.15)
DIFFUSE_RATIO: Final = (1.05, 1.10)
"""Allowances with zenith angles under 75 degrees and from there to 93 (Long and Dutton 2002)."""

OTHER_LIMITS: Final = {"temperature": (-90.0, 60.0), "precipitation": (0.0, np.inf),
                       "albedo": (0.0, 1.0), "snow_water": (-20.0, 1e4)}  # fmt: skip
"""Temperatures of air: the extremes on record are -89.2 and 56.7 degC (World Meteorological
Organization, archive of extremes; from memory). A snow pillow may drift some way below 0, and no
snow weighs more than ten metres of water (judgement)."""

LARGEST_OFFSET: Final = 10.0
"""W/m2 at night beyond which a mean is no instrument's offset (judgement)."""

WORST: Final = 3
"""Moments named for each flag in a summary."""


@dataclass(frozen=True, eq=False)
class Quality:
    """What the checks found.

    Attributes
    ----------
    name : str
        The station's.
    flags : dict of ndarray of uint16, shape (n,)
        Bits of `Flag` for every value, by quantity.
    night_offset : dict of float
        Mean of global, diffuse and beam at night [W/m2]; NaN where no night was measured.
    worst : dict of dict of list of (str, float)
        By quantity and meaning: the moments (UTC, beginning of the interval) and values
        furthest beyond the limit.
    """

    name: str
    flags: dict[str, NDArray[np.uint16]]
    night_offset: dict[str, float]
    worst: dict[str, dict[str, list[tuple[str, float]]]]

    def summary(self) -> dict[str, Any]:
        """Counts and shares of each flag, offsets and worst moments, as plain numbers and text.

        Keys are the quantities; for each there are ``values`` (the number of intervals),
        ``night_offset`` for light, and ``flags``: by meaning ``count``, ``share`` and, where
        it makes sense, ``worst``. Flags that no value has are left out.
        """
        told: dict[str, Any] = {}
        for quantity, bits in self.flags.items():
            found = {
                words: {"count": int(n), "share": float(n / bits.size)}
                | ({"worst": worst} if (worst := self.worst[quantity].get(words)) else {})
                for flag, words in MEANINGS.items()
                if (n := np.count_nonzero(bits & flag))
            }
            told[quantity] = {"values": int(bits.size), "flags": found}
            if quantity in self.night_offset:
                offset = self.night_offset[quantity]
                told[quantity]["night_offset"] = None if np.isnan(offset) else offset
        return told

    def lines(self) -> list[str]:
        """The summary as lines to read."""
        lines = []
        for quantity, told in self.summary().items():
            lines.append(f"{self.name}, {quantity}: {told['values']} intervals")
            offset = told.get("night_offset")
            if offset is not None:
                lines.append(f"  mean at night {offset:.1f} W/m2")
            for words, found in told["flags"].items():
                worst = found.get("worst")
                most = f"; worst {worst[0][1]:.4g} at {worst[0][0]} UTC" if worst else ""
                lines.append(f"  {words}: {found['count']} ({100.0 * found['share']:.2f} %){most}")
        return lines


def check_quality(station: Station) -> Quality:
    r"""Put every value of a series to the tests of the radiation networks.

    Parameters
    ----------
    station : Station

    Returns
    -------
    Quality
        Flags and a summary; the station's own values are left as they are.

    Notes
    -----
    With E0 the extraterrestrial irradiance facing the sun and mu the cosine of the zenith
    angle, 0 at night, the possible upper limits are 1.5 E0 mu^1.2 + 100 for global, 0.95 E0
    mu^1.2 + 50 for diffuse and E0 for beam, the extremely rare ones 1.2 E0 mu^1.2 + 50,
    0.75 E0 mu^1.2 + 30 and 0.95 E0 mu^0.2 + 10 W/m2; lower ones are -4 and -2. Each is the
    mean over the minutes of the interval. Closure and the ratio of diffuse to global are
    judged where the sum exceeds 50 W/m2, with the mean cosine while the sun is up.

    Own rules: the possible beam counts only while the sun is up, and is 10 W/m2 at least,
    since E0 alone would let any beam pass at midnight. With the sun below -6 degrees, values
    from -4 to 4 W/m2 are an instrument's offset, what is above is light at night; where the
    mean at night is more than 4 W/m2, that is the border, up to 10.

    References
    ----------
    Long, C. N. and Dutton, E. G. (2002), BSRN Global Network recommended QC tests, V2.0.
    Long, C. N. and Shi, Y. (2008), The Open Atmospheric Science Journal 2, 23-37,
    doi:10.2174/1874282300802010023.

    Examples
    --------
    >>> hours = np.datetime64("2025-06-21T00:00:00") + np.arange(24) * np.timedelta64(3600, "s")
    >>> measured = np.where(np.arange(24) == 12, 1900.0, 0.0)
    >>> station = Station("equator", 0.0, 0.0, 0.0, hours, 3600, {"global": measured})
    >>> print(*check_quality(station).lines(), sep="\n")
    equator, global: 24 intervals
      mean at night 0.0 W/m2
      above the physically possible: 1 (4.17 %); worst 1900 at 2025-06-21T12:00 UTC
      extremely rarely so high: 1 (4.17 %); worst 1900 at 2025-06-21T12:00 UTC
      offset at night: 10 (41.67 %)
    """
    means = _limits(station)
    night = means["day"] == 0.0
    judged = _Judged(station)
    offsets = {}
    for quantity, values in station.values.items():
        judged.mark(quantity, Flag.MISSING, np.isnan(values))
        if quantity in OTHER_LIMITS:
            judged.within(quantity, *OTHER_LIMITS[quantity], Flag.TOO_LOW, Flag.TOO_HIGH)
            continue
        judged.within(quantity, LOWEST, means[quantity], Flag.TOO_LOW, Flag.TOO_HIGH)
        rare = means["rare " + quantity]
        judged.within(quantity, RARELY_LOWEST, rare, Flag.RARELY_LOW, Flag.RARELY_HIGH)
        measured = values[night & np.isfinite(values)]
        offset = offsets[quantity] = float(measured.mean()) if measured.size else np.nan
        ceiling = np.fmax(-LOWEST, np.fmin(offset, LARGEST_OFFSET))
        judged.mark(quantity, Flag.NIGHT_OFFSET, night & (values >= LOWEST) & (values <= ceiling))
        judged.mark(quantity, Flag.NIGHT_LIGHT, night & (values > ceiling), values)
    _compare(judged, means)
    return Quality(station.name, judged.flags, offsets, judged.worst)


def usable(station: Station, quality: Quality) -> tuple[Station, dict[str, dict[str, int]]]:
    """Take out what cannot be true, and say how much that was.

    Parameters
    ----------
    station : Station
        Is left as it is.
    quality : Quality
        Of this station.

    Returns
    -------
    station : Station
        Physically impossible values are NaN, offsets at night are 0. It carries the flags.
    changed : dict of dict of int
        By quantity, how many values were ``impossible`` and how many were offsets set to
        ``zero``; only those that were no 0 before count.
    """
    values, changed = {}, {}
    for quantity, measured in station.values.items():
        bits = quality.flags[quantity]
        impossible = (bits & IMPOSSIBLE) != 0
        offset = ((bits & Flag.NIGHT_OFFSET) != 0) & ~impossible & (measured != 0.0)
        values[quantity] = np.where(impossible, np.nan, np.where(offset, 0.0, measured))
        changed[quantity] = {
            "impossible": int(np.count_nonzero(impossible)),
            "zero": int(np.count_nonzero(offset)),
        }
    return replace(station, values=values, flags=quality.flags), changed


def _limits(station: Station) -> dict[str, Values]:
    """Upper limits of each light, possible and rare, and the cosine; means of the intervals."""
    means = interval_means(station, _limits_by_day)
    for quantity, limits in UPPER_LIMITS.items():
        for words, (_, _, constant) in zip(("", "rare "), limits, strict=True):
            means[words + quantity] += constant
    means["beam"] = np.maximum(means["beam"], UPPER_LIMITS["beam"][1][2])
    return means


def _limits_by_day(sun: SunSeries) -> dict[str, Values]:
    """What the sun adds to the limits [W/m2]."""
    mu, above = cosine(sun), SOLAR_CONSTANT / sun.distance**2
    means = {"cosine": mu, "lit": lit(sun)}
    for quantity, limits in UPPER_LIMITS.items():
        for words, (factor, power, _) in zip(("", "rare "), limits, strict=True):
            means[words + quantity] = factor * above * mu**power * lit(sun)
    return means


class _Judged:
    """Flags of a station while they are being set."""

    def __init__(self, station: Station) -> None:
        self.station = station
        zero = np.zeros(station.start.size, np.uint16)
        self.flags = {
            name: station.flags.get(name, zero) & np.uint16(Flag.FILLED) for name in station.values
        }
        self.worst: dict[str, dict[str, list[tuple[str, float]]]] = {
            name: {} for name in station.values
        }

    def mark(
        self, quantity: str, flag: Flag, where: NDArray[np.bool_], badness: Values | None = None
    ) -> None:
        """Set a flag, and remember the moments of greatest badness."""
        self.flags[quantity][where] |= np.uint16(flag)
        found = np.flatnonzero(where)
        if badness is None or found.size == 0:
            return
        first = found[np.argsort(-badness[found], kind="stable")[:WORST]]
        values, start = self.station.values[quantity], self.station.start.astype("M8[m]")
        self.worst[quantity][MEANINGS[flag]] = [(str(start[i]), float(values[i])) for i in first]

    def within(
        self, quantity: str, low: float, high: float | Values, below: Flag, above: Flag
    ) -> None:
        """Flag what lies outside limits."""
        values = self.station.values[quantity]
        self.mark(quantity, below, values < low, low - values)
        self.mark(quantity, above, values > high, values - high)


def _compare(judged: _Judged, means: dict[str, Values]) -> None:
    """Closure, and diffuse against global, where they were measured."""
    have = judged.station.values
    if not {"global", "diffuse"} <= have.keys():
        return
    whole, diffuse = have["global"], have["diffuse"]
    share = means["lit"]
    mu = np.where(share > 0.0, means["cosine"] / np.where(share > 0.0, share, 1.0), 0.0)
    low_sun = (mu < LOW_SUN).astype(np.int64)
    ratio = diffuse / np.where(whole > COMPARED_ABOVE, whole, np.inf)
    bad = ratio > np.array(DIFFUSE_RATIO)[low_sun]
    for quantity in ("diffuse", "global"):
        judged.mark(quantity, Flag.DIFFUSE_ABOVE_GLOBAL, bad, ratio)
    if "beam" in have:
        summed = diffuse + have["beam"] * mu
        off = np.abs(whole / np.where(summed > COMPARED_ABOVE, summed, np.nan) - 1.0)
        bad = off > np.array(CLOSURE)[low_sun]
        for quantity in LIGHT:
            judged.mark(quantity, Flag.NOT_CLOSED, bad, off)


UNIT_PERCENTILE: Final = 99.0
"""Of the lit intervals' share of the extraterrestrial light, this percentile is the series'
clear peak: a few spikes do not make a unit."""

CLEAR_PEAK: Final = {"global": 0.75, "beam": 0.65}
"""Share of the extraterrestrial light that a clear sky sends: global on level ground, beam
(common practice, no source)."""

POSSIBLE_PEAK: Final = {"global": (0.30, 1.5), "beam": (0.26, 1.1), "diffuse": (0.0, 0.95)}
"""Clear peaks outside this are in another unit: 0.30 is 0.75 by 2.5, 0.26 is 0.65 by 2.5, 1.5
and 0.95 are the factors of the possible limits, 1.1 is E0 and a tenth for noise."""

NEEDED_DAYS: Final = 20.0
"""Days, of 12 hours of sun, under which a dull spell may look like a wrong unit: there only a
peak of less than a tenth of the clear one counts (judgement)."""

CLOCK_HOURS: Final = (0.6, 2.0)
"""How far from noon the middle of the light may lie before the clock is doubted ahead of the
unit: the first where the unit would do with a mended clock, the second in any case. Under it lie
the equation of time, 0.27 h, and clouds or hills on one side (judgement, no source)."""

FLAT_DAY: Final = 0.2
"""Length of the light's mean on the circle of the day under which it has no middle; a day of 18
hours of sun has over 0.5, the polar day at 80 degrees 0.2 (judgement)."""

LONGEST_INTERVAL: Final = 7200
"""Seconds; longer intervals say too little of morning and afternoon (judgement)."""


def unit_peak(station: Station, quantity: str) -> tuple[float, bool] | None:
    """Find the clear peak of a light as a share of the extraterrestrial, and if it can be so.

    Parameters
    ----------
    station : Station
    quantity : {'global', 'beam', 'diffuse'}

    Returns
    -------
    (float, bool) or None
        The 99th percentile of the measured by the extraterrestrial light where the sun
        stands higher than 12 degrees throughout, and whether that is believable; None where
        there are too few such values to tell.
    """
    means = interval_means(station, _above)
    values = station.values[quantity]
    whole = means["beam" if quantity == "beam" else "global"]
    high = (means["lit"] > 0.999) & (means["cosine"] > 0.2)
    daily = station.seconds > 43200
    use = np.isfinite(values) & (means["cosine"] > 0.05 if daily else high)
    if np.count_nonzero(use) < 4:
        return None
    peak = float(np.percentile(values[use] / whole[use], UNIT_PERCENTILE))
    low, most = POSSIBLE_PEAK[quantity]
    if np.count_nonzero(use) * station.seconds < NEEDED_DAYS * 43200.0:
        low /= 4.0
    return peak, low <= peak <= most


def refuse_wrong_unit(
    station: Station, quantity: str, unit: str, factors: dict[str, float]
) -> None:
    """Refuse a light whose clear peak shows that it is in another unit.

    Parameters
    ----------
    station : Station
        With values in W/m2, made from `unit`.
    quantity : str
        One of global, beam, diffuse.
    unit : str
        Unit that was stated.
    factors : dict of float
        W/m2 in one of each unit that could be stated, `unit` among them.

    Raises
    ------
    InputError
        Saying how far off the values are, and which unit would fit; or, where the light's
        course through the day says so, that its clock is wrong, since no unit can be told then.
    """
    if quantity not in station.values:
        return
    found = unit_peak(station, quantity)
    if found is None or found[1]:
        return
    _refuse_wrong_clock(station, quantity)
    peak = found[0]
    clear = CLEAR_PEAK.get(quantity)
    fitting = []
    for other, factor in factors.items():
        would = peak * factor / factors[unit]
        if clear is not None and clear / 1.8 <= would <= clear * 1.5:
            fitting.append(other)
    fits = f"; {' or '.join(fitting)} would fit" if fitting else ""
    raise InputError(
        f"{quantity} cannot be in {unit}: its clearest hours bring {peak:.3g} times"
        f" the light above the air, and {_believable(quantity)} is believable{fits}. Mend the"
        " unit, or zone and label if the times are wrong; if the values are right, say"
        " check_units = false",
        station.name,
    )


def hours_off_noon(station: Station, quantity: str) -> float | None:
    """Find how much later than noon the middle of a light's day lies, by the stated times.

    Parameters
    ----------
    station : Station
    quantity : {'global', 'beam', 'diffuse'}

    Returns
    -------
    float or None
        Hours of local mean solar time, -12 to 12: the angle of the light's mean over the circle
        of the day. The equation of time is a quarter of an hour of it, clouds and hills on one
        side some more. None for intervals over two hours, less than a day of values, or light
        that knows no time of day.
    """
    values = station.values[quantity]
    known = np.isfinite(values)
    if station.seconds > LONGEST_INTERVAL or np.count_nonzero(known) * station.seconds < 86400:
        return None
    local = (station.middle[known] + station.solar_offset).astype("M8[s]")
    second, place = np.unique((local - local.astype("M8[D]")).astype(np.int64), return_inverse=True)
    light = np.clip(values[known], 0.0, np.percentile(values[known], 99.9))
    light = np.bincount(place, light) / np.bincount(place)  # days in part weigh no more
    mean = np.sum(light * np.exp(2j * np.pi * (second / 86400.0 - 0.5)))
    if not abs(mean) > FLAT_DAY * light.sum():
        return None
    return float(np.angle(mean) * 12.0 / np.pi)


def _refuse_wrong_clock(station: Station, quantity: str) -> None:
    """Refuse a light whose middle lies so far from noon that its clock, not its unit, is wrong."""
    off = hours_off_noon(station, "global" if "global" in station.values else quantity)
    if off is None or abs(off) < CLOCK_HOURS[0]:
        return
    mended = replace(station, start=station.start - np.timedelta64(round(off * 3600.0), "s"))
    found = unit_peak(mended, quantity)
    alone = found is not None and found[1]
    if not alone and abs(off) < CLOCK_HOURS[1]:
        return
    side = "later" if off > 0.0 else "earlier"
    unit = "the unit seems right" if alone else "the unit can only be judged then"
    raise InputError(
        f"the times of {quantity} disagree with the sun: the middle of its days lies"
        f" {abs(off):.1f} h {side} than noon at the stated longitude. Mend the zone, the label or"
        f" the longitude ({unit}); if all are right, say check_units = false",
        station.name,
    )


def _believable(quantity: str) -> str:
    low, most = POSSIBLE_PEAK[quantity]
    return f"{low:g} to {most:g}"


def _above(sun: SunSeries) -> dict[str, Values]:
    """Light above the air, facing the sun and on level ground [W/m2]."""
    mu, above = cosine(sun), SOLAR_CONSTANT / sun.distance**2
    return {"cosine": mu, "lit": lit(sun), "global": above * mu, "beam": above * lit(sun)}
