"""A station on its place in the elevation model: what the model says it measured, and what it did.

A clear sky can only explain clear days, so only these count; the sky of a second station
counts on all.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from pyproj import Geod

from terrasol.constants import REFRACTION_COEFFICIENT
from terrasol.engine.ground_work import cell_strip, lay_out
from terrasol.engine.outputs import MONTH_NAMES
from terrasol.engine.plan import Progress, carry_out, check_threads, default_threads
from terrasol.errors import InputError, SettingError
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame, make_frame
from terrasol.ground.places import WGS84, Locator
from terrasol.light.comparison import (
    Agreement,
    Comparison,
    Modelled,
    compare,
    local_time,
    model_station,
)
from terrasol.light.settings import check_azimuths, check_refraction, twelve
from terrasol.sky.clear import Air
from terrasol.sky.cloud import CloudedSky, clouded_sky
from terrasol.sky.gaps import LONGEST_HOURS, fill_gaps
from terrasol.sky.irradiance import Sky
from terrasol.sky.measured import TRUSTED, series_doubts
from terrasol.sky.period import parse_period
from terrasol.sky.quality import check_quality, usable
from terrasol.sky.station import Station
from terrasol.sky.timing import CLEAR_SCALE, TRIMMED, Timing, check_times
from terrasol.words import counted

AZIMUTHS: Final = 256
"""Number of horizon azimuths: for one cell's hours of sun, four times as many as for maps."""

LEAST_CLEAR_DAYS: Final = 5
"""Clear days below which a clear-sky comparison says little; as for the clock (judgement)."""

HEIGHT_TOLERANCE: Final = 50.0
"""Metres between the stated height and that of the cell beyond which one of them is doubted."""

ALBEDO: Final = 0.2

CLEAR_MISFIT: Final = 0.06
"""A day is clear if the model, scaled to the day, fits the intervals of free sun with this rms
as a share of their mean (judgement: trees at the rim cost some per cent that are no clouds)."""

LEAST_HOURS: Final = 3.0
LEAST_INTERVALS: Final = 4
"""Free sun that such a day must have."""

FREE_LOSS: Final = 0.25
"""Share of the open plain's light that terrain may take in an interval of free sun: what it
takes of the dome, and no more."""

LEAST_LIGHT: Final = 50.0
"""W/m2 on the open plain under which an interval does not tell whether the day is clear."""

NOTICEABLE: Final = 0.04
"""Share of the intervals that a month or an hour must have to be named as the worst."""

Values = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Spot:
    """A place on the ground as a level sensor there sees it.

    Attributes
    ----------
    horizon : (azimuths,) float64
        Height of the skyline, equally spaced azimuths, the first due north, clockwise
        [degree].
    sky_view : float
        Sky-view factor of level ground.
    height : float, optional
        Of the elevation model's cell [m].
    row, column : int, optional
        The cell.
    """

    horizon: Values
    sky_view: float
    height: float | None = None
    row: int | None = None
    column: int | None = None

    @classmethod
    def under(cls, horizon: Sequence[float] | Values, **cell: Any) -> Spot:
        """Make one from its horizon [degree]; its sky view is that of Dozier and Frew (1990).

        With level ground, their mean over the azimuths becomes that of cos^2 of the horizon.

        Examples
        --------
        >>> round(Spot.under([30.0] * 8).sky_view, 3)
        0.75
        """
        heights = np.asarray(horizon, np.float64)
        view = float((np.cos(np.radians(np.maximum(heights, 0.0))) ** 2).mean())
        return cls(heights, view, **cell)


def spot_at(
    elevation: Elevation,
    latitude: float,
    longitude: float,
    azimuths: int = AZIMUTHS,
    refraction: float = REFRACTION_COEFFICIENT,
    scene: Scene | None = None,
    threads: int | None = None,
    progress: Progress | None = None,
) -> Spot:
    """Find the cell that holds a place, and its horizon.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    latitude, longitude : float
        Degrees north, degrees east, WGS 84.
    azimuths : int
        Number of horizon azimuths, a multiple of 4 from 8 to 720.
    refraction : float
        Coefficient k of terrestrial refraction.
    scene : Scene, optional
        What stands beyond and above, from `terrasol.ground.beyond.make_scene`.
    threads : int, optional
        Default: all cores that may be used.
    progress : callable, optional
        Told the share done and the stage.

    Returns
    -------
    Spot
        Seen from the cell's centre, at the ground.

    Raises
    ------
    SettingError
        A value out of its range.
    InputError
        The place lies outside the elevation model, or on a void; a raster that cannot be placed
        on the Earth.
    """
    check_azimuths(azimuths)
    check_refraction(refraction)
    threads = default_threads() if threads is None else threads
    check_threads(threads)
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    row, column = cell_of(elevation, frame, latitude, longitude)
    ground, tasks = lay_out(elevation, frame, azimuths, refraction, scene or Scene())
    for count, _ in enumerate(carry_out(tasks, threads), 1):
        if progress is not None:
            progress(count / len(tasks), "horizon")
    tangent = cell_strip(ground, row, column).horizon[:, 0, 0].astype(np.float64)
    height = float(elevation.heights[row, column])
    horizon = np.degrees(np.arctan(tangent))
    return Spot.under(horizon, height=height, row=row, column=column)


def cell_of(
    elevation: Elevation,
    frame: Frame,
    latitude: float,
    longitude: float,
    *,
    what: str = "the station",
    mend: str = "mend the place that its settings state",
) -> tuple[int, int]:
    """Row and column of the cell that holds a place.

    `what` stands there, and how to `mend` a wrong place: for messages.

    Raises
    ------
    InputError
        The place lies outside the elevation model, or on a void.
    """
    place = Locator(WGS84, elevation)(np.array([longitude]), np.array([latitude]))
    inside = all(
        np.isfinite(at[0]) and -0.5 <= at[0] < size - 0.5
        for at, size in zip(place, elevation.shape, strict=True)
    )
    where = f"{what} at {place_words(latitude, longitude)}"
    if not inside:
        away = _kilometres((latitude, longitude), frame.centre)
        raise InputError(
            f"{where} lies outside the elevation model, whose middle is {away:,.0f} km away at"
            f" {place_words(*frame.centre)}: {mend}, or take the model that holds it"
        )
    row, column = (int(np.floor(at[0] + 0.5)) for at in place)
    if np.isnan(elevation.heights[row, column]):
        raise InputError(
            f"{where} stands on a void of the elevation model, in row {row} and column {column}:"
            f" fill voids with --fill-voids, or {mend}"
        )
    return row, column


def place_words(latitude: float, longitude: float, digits: int = 4) -> str:
    """Latitude and longitude as people write them.

    Examples
    --------
    >>> place_words(-33.9, 18.4)
    '33.9000 S 18.4000 E'
    """
    longitude = (longitude + 180.0) % 360.0 - 180.0
    return (
        f"{abs(latitude):.{digits}f} {'N' if latitude >= 0 else 'S'}"
        f" {abs(longitude):.{digits}f} {'E' if longitude >= 0 else 'W'}"
    )


def _kilometres(one: tuple[float, float], other: tuple[float, float]) -> float:
    """Length of the geodesic between two places of latitude and longitude."""
    return float(Geod(ellps="WGS84").inv(one[1], one[0], other[1], other[0])[2]) / 1000.0


@dataclass(frozen=True, eq=False)
class OtherStation:
    """The second station, whose sky the model takes.

    Attributes
    ----------
    station : Station
        Without what cannot be true, short gaps filled.
    kilometres : float
        From the first one.
    timing : Timing
        What its clear days say of its clock.
    filled : dict of int
        Intervals filled, by quantity.
    warnings : tuple of str
        On its series.
    """

    station: Station
    kilometres: float
    timing: Timing
    filled: dict[str, int]
    warnings: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class StationReport:
    """Measured against modelled, and all that was found on the way.

    Attributes
    ----------
    station : Station
        Without what cannot be true.
    spot : Spot
        Its place on the ground.
    modelled : Modelled
        Global irradiance of its intervals.
    comparison : Comparison or None
        None where no interval counts.
    timing : Timing
        What the clear days say of the clock; nothing was changed.
    clear_days : (d,) datetime64[D]
        Days of local mean solar time without clouds.
    quality : dict
        Summary of the quality check.
    other : OtherStation or None
        None where the modelled sky is clear: then only clear days count.
    warnings : tuple of str
        What a careful reader should know.
    """

    station: Station
    spot: Spot
    modelled: Modelled
    comparison: Comparison | None
    timing: Timing
    clear_days: NDArray[np.datetime64]
    quality: dict[str, Any]
    other: OtherStation | None
    warnings: tuple[str, ...]

    @property
    def counted(self) -> NDArray[np.bool_]:
        """Intervals that count, shape (n,)."""
        if self.comparison is None:
            return np.zeros(self.station.start.size, np.bool_)
        return self.comparison.kept

    def record(self) -> dict[str, Any]:
        """Everything but the series as plain numbers and text, ready for JSON."""
        station, spot, found = self.station, self.spot, self.comparison
        record: dict[str, Any] = {
            "station": station_record(station) | {"quality": self.quality},
            "cell": {
                "row": spot.row,
                "column": spot.column,
                "height_m": _rounded(spot.height),
                "sky_view_factor": round(spot.sky_view, 4),
                "horizon_deg": [round(float(height), 2) for height in spot.horizon],
            },
            "clock": _clock_record(self.timing),
            "sky": "clear" if self.other is None else "measured",
            "clear_days": [str(day) for day in self.clear_days],
        }
        if self.other is not None:
            record["second_station"] = station_record(self.other.station) | {
                "distance_km": round(self.other.kilometres, 3),
                "clock": _clock_record(self.other.timing),
                "filled": self.other.filled,
            }
        if found is not None:
            record["overall"] = _plain(found.overall.record())
            record["months"] = {str(k): _plain(v.record()) for k, v in found.months.items()}
            record["hours_local_mean_solar_time"] = {
                str(k): _plain(v.record()) for k, v in found.hours.items()
            }
            record["shade"] = _plain({k: _rounded(v) for k, v in asdict(found.shade).items()})
        return record

    def lines(self) -> list[str]:
        """What was found, for people."""
        left = "; nothing was changed" if np.isfinite(self.timing.shift) else ""
        return [*_where(self), *_how_well(self), self.timing.words + left]


def station_record(station: Station) -> dict[str, Any]:
    """Place and span of a station as plain numbers and text."""
    return {
        "name": station.name,
        "latitude": station.latitude,
        "longitude": station.longitude,
        "height_m": station.height,
        "interval_seconds": station.seconds,
        "start": f"{station.start[0]}Z",
        "end": f"{station.end}Z",
    }


def _clock_record(timing: Timing) -> dict[str, Any]:
    return _plain(
        {
            "verdict": timing.verdict,
            "words": timing.words,
            "shift_minutes": _rounded(timing.shift),
            "low_minutes": _rounded(timing.low),
            "high_minutes": _rounded(timing.high),
        }
    )


def _rounded(value: Any) -> Any:
    return round(value, 2) if isinstance(value, float) else value


def _plain(record: dict[str, Any]) -> dict[str, Any]:
    """JSON has no NaN and no infinity: None."""
    unknown = {k for k, v in record.items() if isinstance(v, float) and not np.isfinite(v)}
    return {k: None if k in unknown else v for k, v in record.items()}


def _where(report: StationReport) -> list[str]:
    """Place and sky in words."""
    station, spot, other = report.station, report.spot, report.other
    where = f"{station.name}: {place_words(station.latitude, station.longitude)}"
    if spot.row is not None:
        where += f", in row {spot.row} and column {spot.column} of the elevation model"
    if spot.height is not None:
        where += f" at {spot.height:.0f} m (stated: {station.height:.0f} m)"
    where += f", sky view {spot.sky_view:.2f}, horizon up to {spot.horizon.max():.0f} degrees"
    if other is None:
        days = counted(report.clear_days.size, "clear day")
        sky = f"a clear-sky model is compared on clear days only: {days}"
    else:
        rise = other.station.height - station.height
        sky = (
            f"the sky is that of {other.station.name}, {other.kilometres:.1f} km away and"
            f" {abs(rise):.0f} m {'higher' if rise >= 0.0 else 'lower'}; all days count"
        )
    return [where, sky]


def _how_well(report: StationReport) -> list[str]:
    """Bias, rms and the horizon in words."""
    found = report.comparison
    if found is None:
        return ["there is nothing to compare: see the warnings"]
    overall, shade = found.overall, found.shade
    lines = [
        f"modelled less measured over {overall.count} intervals: bias"
        f" {amount_words(overall, 'bias')}, rms {amount_words(overall, 'rms')}"
    ]
    for words, groups, label in (
        ("month", found.months, lambda month: MONTH_NAMES[month - 1]),
        ("hour of local mean solar time", found.hours, lambda hour: f"{hour} to {hour + 1}"),
    ):
        judged = {k: v for k, v in groups.items() if v.count >= NOTICEABLE * overall.count}
        if len(judged) > 1:
            key, worst = max(judged.items(), key=lambda pair: pair[1].rms)
            lines.append(
                f"worst {words}: {label(key)}, bias {amount_words(worst, 'bias')},"
                f" rms {amount_words(worst, 'rms')}"
            )
    doubted = report.timing.verdict not in TRUSTED
    lines.append(shade.words + (", or its clock is wrong, see below" if doubted else ""))
    if np.isfinite(shade.first_minutes):
        lines.append(
            f"against the modelled sun the measured one comes {_late(shade.first_minutes)} and goes"
            f" {_late(shade.last_minutes)} (median of the days)"
        )
    return lines


def _late(minutes: float) -> str:
    """A difference of time in words."""
    if round(minutes) == 0:
        return "at the same time"
    return f"{abs(minutes):.0f} min {'later' if minutes > 0.0 else 'earlier'}"


def amount_words(agreement: Agreement, name: str) -> str:
    """Put bias or rms into words, with its share of the measured mean."""
    value = getattr(agreement, name)
    sign = "+" if name == "bias" else ""
    share = f" ({100.0 * value / agreement.measured:{sign}.1f} %)" if agreement.measured > 0 else ""
    return f"{value:{sign}.1f} W/m2{share}"


def compare_station(
    station: Station,
    air: Air,
    spot: Spot,
    other: Station | None = None,
    *,
    albedo: float | Sequence[float] | None = None,
    diffuse: str = "perez",
    decomposition: str = "dirint",
    fill_hours: float = LONGEST_HOURS,
) -> StationReport:
    """Model what a station measured, from a clear sky or a second station's, and compare.

    Parameters
    ----------
    station : Station
        With global.
    air : Air
        The clear air.
    spot : Spot
        Where it stands, from `spot_at` or `Spot.under`.
    other : Station, optional
        Its sky is modelled in place of a clear one; it counts as level and open.
    albedo : float or 12 floats, optional
        Of the ground around; by default what the station measured, and 0.2 where it did not.
    diffuse : {'perez', 'hay-davies', 'isotropic'}
        Model that parts the diffuse light.
    decomposition : {'erbs', 'disc', 'dirint'}
        For a second station that measured global alone; see `clouded_sky`.
    fill_hours : float
        Hours of sun that a gap of the second station may have and be filled.

    Returns
    -------
    StationReport

    Raises
    ------
    SettingError
        A value out of its range.
    InputError
        A station without global, or two that did not measure at the same time.

    Notes
    -----
    Impossible values count as missing (`usable`). The clock is checked, and nothing applied.
    Clear days (own): the model with its horizon, scaled to the day, fits the intervals of free
    sun within 6 % rms, the 15 % that fit worst left out, at a scale of 0.75 to 1.25. Freeing
    the scale keeps the choice from favouring days that agree. Where no day is clear at the
    stated times, those that `check_times` found at another shift count.
    """
    if "global" not in station.values:
        raise InputError(
            f"{station.name}: no global light was measured, and that is what is compared: state"
            " its column"
        )
    quality = check_quality(station)
    sound, changed = usable(station, quality)
    timing = check_times(station, air, spot.horizon)
    shares = _albedo(sound, albedo)
    neighbour, clear = None, _modelled(sound, air, spot, shares, diffuse)
    modelled = clear
    if other is not None:
        neighbour, sky = _other_sky(station, other, air, decomposition, fill_hours)
        modelled = _modelled(sound, sky, spot, shares, diffuse)
    days = clear_days(sound, clear)
    if not days.size:
        days = timing.days
    found = compare(sound, modelled, days if other is None else None)
    compared = {"global": changed["global"]}
    warnings = [
        *_place_doubts(station, spot),
        *series_doubts(station, compared, {}, timing, quality.night_offset),
    ]
    if neighbour is not None:
        warnings += neighbour.warnings
    if found is None:
        warnings.append(_nothing(station, other))
    elif other is None and days.size < LEAST_CLEAR_DAYS:
        warnings.append(
            f"{station.name}: {counted(days.size, 'day')} that may be clear can be chance: with"
            f" fewer than {LEAST_CLEAR_DAYS}, take no bias from it"
        )
    summary = quality.summary()
    return StationReport(
        sound, spot, modelled, found, timing, days, summary, neighbour, tuple(warnings)
    )


def clear_days(station: Station, modelled: Modelled) -> NDArray[np.datetime64]:
    """Days of local mean solar time on which a scaled clear sky fits what was measured.

    Parameters
    ----------
    station : Station
        With global.
    modelled : Modelled
        Under a clear sky, of the same intervals. Only intervals of free sun are looked at, so a
        horizon that is wrong where it hides the sun does not matter; one that misses a hill
        makes the day look cloudy.

    Returns
    -------
    ndarray of datetime64[D]
    """
    measured, model = station.values["global"], modelled.shaded
    free = (modelled.lit > 0.999) & (modelled.open > LEAST_LIGHT)
    free &= modelled.open - model < FREE_LOSS * modelled.open
    free &= np.isfinite(measured)
    day = local_time(station).astype("M8[D]")
    least = max(LEAST_INTERVALS, LEAST_HOURS * 3600.0 / station.seconds)
    found = []
    for one in np.unique(day[free]):
        seen, modelled_then = (values[free & (day == one)] for values in (measured, model))
        scale = float(np.median(seen / modelled_then))
        if seen.size < least or not CLEAR_SCALE[0] < scale < CLEAR_SCALE[1]:
            continue
        error = np.sort(np.abs(seen - scale * modelled_then))
        kept = error[: int(np.ceil((1.0 - TRIMMED) * error.size))]
        if np.sqrt((kept**2).mean()) < CLEAR_MISFIT * seen.mean():
            found.append(one)
    return np.array(found, "M8[D]")


def _albedo(station: Station, asked: float | Sequence[float] | None) -> Values:
    """Albedo of each interval: as asked for, else as measured, else ALBEDO."""
    if asked is not None:
        months = twelve(asked, "albedo")
        if not all(0.0 <= share <= 1.0 for share in months):
            raise SettingError(f"albedo must be from 0 to 1; got {asked}")
        month = local_time(station).astype("M8[M]").astype(np.int64) % 12
        return np.asarray(months, np.float64)[month]
    measured = station.values.get("albedo", np.full(station.start.size, np.nan))
    return np.where(np.isfinite(measured), measured, ALBEDO)


def _modelled(station: Station, sky: Sky, spot: Spot, albedo: Values, diffuse: str) -> Modelled:
    """Model the station, with an albedo of each interval.

    The terrain's light is linear in its albedo, so that may change from interval to interval.
    """
    bare = model_station(station, sky, spot.horizon, spot.sky_view, 0.0, diffuse)
    sent_back = albedo * (1.0 - spot.sky_view) * bare.open
    return Modelled(bare.shaded + sent_back, bare.open, bare.dull + sent_back, bare.lit)


def _other_sky(
    station: Station, other: Station, air: Air, decomposition: str, fill_hours: float
) -> tuple[OtherStation, CloudedSky]:
    """Read the sky of a second station over the time that both measured."""
    first, last = max(station.start[0], other.start[0]), min(station.end, other.end)
    if first >= last:
        raise InputError(
            f"{other.name}: measured from {other.start[0]} to {other.end} UTC, {station.name} from"
            f" {station.start[0]} to {station.end}: give two series of the same time"
        )
    quality = check_quality(other)
    sound, changed = usable(other, quality)
    filled = fill_gaps(sound, air, fill_hours)
    days = [str((moment + other.solar_offset).astype("M8[D]")) for moment in (first, last)]
    sky = clouded_sky(filled.station, air, parse_period("/".join(days)), decomposition)
    away = _kilometres((station.latitude, station.longitude), (other.latitude, other.longitude))
    timing = check_times(other, air)
    doubts = series_doubts(other, changed, filled.count, timing, quality.night_offset)
    neighbour = OtherStation(filled.station, away, timing, filled.count, doubts)
    return neighbour, replace(sky, strict=False)


def _place_doubts(station: Station, spot: Spot) -> list[str]:
    """Warnings on the height."""
    if spot.height is None or abs(spot.height - station.height) <= HEIGHT_TOLERANCE:
        return []
    return [
        f"{station.name}: the stated height is {station.height:.0f} m, but the elevation model's"
        f" cell lies at {spot.height:.0f} m: is its place right?"
    ]


def _nothing(station: Station, other: Station | None) -> str:
    """Say why there was nothing to compare."""
    if other is None:
        return (
            f"{station.name}: no day is clear as the model with its horizon would have it; clouds,"
            " a wrong clock, or a hill that the model does not have: give a second station, a"
            " longer series, or a larger elevation model"
        )
    return f"{station.name}: no interval was measured at both stations while the sun was up"
