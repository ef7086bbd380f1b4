"""One place in full: ground, horizon, light by month, and the sun minute by minute."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields, replace
from datetime import date
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.comparison import AZIMUTHS, cell_of
from terrasol.engine.ground_work import cell_outlooks, cell_strip, lay_out
from terrasol.engine.job import NO_SCENE, Plan, Run, plan_irradiation, plan_terrain
from terrasol.engine.outputs import MONTH_NAMES, basis_words, month_labels, sky_kind
from terrasol.engine.plan import Progress, carry_out, check_threads, default_threads
from terrasol.engine.spread import Spread
from terrasol.engine.uncertainty import moved, propagate_all
from terrasol.errors import InputError, SettingError
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame, make_frame
from terrasol.ground.horizon import NODE_STEP
from terrasol.ground.sightline import Outlooks, Sightlines
from terrasol.ground.surface import slope_and_aspect
from terrasol.ground.uncertainty import DemError, field_bytes
from terrasol.light.days import Clock, Days, parse_days, strip_days
from terrasol.light.irradiation import Light, Strip, strip_light
from terrasol.light.minutes import minute_states, plane_tangent
from terrasol.light.settings import LightSettings, check_azimuths
from terrasol.light.surroundings import Surroundings
from terrasol.light.tables import SkyTables
from terrasol.sky.period import parse_period

PARTS: Final = ("beam", "diffuse", "reflected")
"""Of the light, in the order of `Energy.place`."""

PREPARED: Final = 0.35
"""Share of a run that its preparations take, as `Run` counts it."""

SECONDS_AT_LEAST: Final = 4.0
SECONDS_A_CELL_AND_SWEEP: Final = 9e-9
"""What a core needs, for the estimate only: 15 s for 4.8 million cells and 320 azimuths, 9 s for
300,000 cells and 1856."""

MOST_MONTHS: Final = 18
"""Longest period; a sheet has no room for more rows."""

INTERVAL: Final = 0.9
"""Probability with which the intervals hold the true value."""

Values = NDArray[np.float64]
Cell = tuple[int, int]


@dataclass(frozen=True, eq=False)
class Energy:
    """Irradiation of a place and of level ground beside it.

    Parameters
    ----------
    settings : LightSettings
        Unit, basis, period and sky.
    place : ndarray, shape (3, months)
        Beam, diffuse and reflected.
    level : ndarray, shape (3, months)
        The same of level ground at the same place and height, under an open sky.
    """

    settings: LightSettings
    place: Values
    level: Values

    @property
    def total(self) -> float:
        """Global irradiation of the whole period."""
        return float(self.place.sum())

    @property
    def level_total(self) -> float:
        """The same of level ground."""
        return float(self.level.sum())

    def record(self) -> dict[str, Any]:
        """As plain numbers and text, ready for JSON."""
        settings = self.settings
        months = [
            {"month": label}
            | {part: _number(v) for part, v in zip(("global", *PARTS), here, strict=True)}
            | {"level": _number(level)}
            for label, here, level in zip(
                month_labels(settings),
                np.vstack([self.place.sum(axis=0), self.place]).T,
                self.level.sum(axis=0),
                strict=True,
            )
        ]
        return {
            "unit": settings.unit,
            "basis": basis_words(settings),
            "sky": sky_kind(settings),
            "period": settings.period.label,
            "global": _number(self.total),
            **dict(zip(PARTS, map(_number, self.place.sum(axis=1)), strict=True)),
            "level": _number(self.level_total),
            "months": months,
        }


@dataclass(frozen=True, eq=False)
class SunYear:
    """The sun of every day of a year at a place.

    Parameters
    ----------
    days : tuple of date
        Every day of the typical year.
    clock : Clock
        What the time of day is told in.
    first, last : ndarray, shape (days,)
        First and last direct sun, hours since 0:00 on the clock; NaN without sun.
    hours : ndarray, shape (days,)
        Hours of direct sun.
    interruptions : ndarray, shape (days,)
        Times the sun is lost for a minute or longer between first and last sun; NaN without sun.
    level : ndarray, shape (3, days)
        First and last sun and hours of sun on level ground with an open horizon.
    states : ndarray of uint8, shape (days, MOMENTS)
        `State` of each minute from one true solar midnight to the next.
    clock_less_solar : ndarray, shape (days, 2)
        See `Days`.
    """

    days: tuple[date, ...]
    clock: Clock
    first: Values
    last: Values
    hours: Values
    interruptions: Values
    level: Values
    states: NDArray[np.uint8]
    clock_less_solar: Values

    @property
    def month(self) -> NDArray[np.int64]:
        """Month of each day, 1 to 12."""
        return np.array([day.month for day in self.days])

    def on(self, month: int, day: int) -> int:
        """Number of a day of the year."""
        return next(k for k, d in enumerate(self.days) if (d.month, d.day) == (month, day))

    def day_of(self, day: date) -> int:
        """Number of the day of the year that stands for a date: 28 February for the 29th."""
        leap = (day.month, day.day) == (2, 29)
        return self.on(2, 28) if leap else self.on(day.month, day.day)

    def day_record(self, day: date) -> dict[str, Any]:
        """First and last sun and hours of sun of a date, ready for JSON."""
        k = self.day_of(day)
        names = ("first_sun", "last_sun", "sun_hours")
        here = (self.first[k], self.last[k], self.hours[k])
        told = dict(zip(names, map(_number, here), strict=True))
        level = (f"level_{name}" for name in names)
        return {
            "day": str(day),
            **told,
            **dict(zip(level, map(_number, self.level[:, k]), strict=True)),
        }

    def mean_hours(self, month: int) -> tuple[float, float]:
        """Hours of sun of a mean day of a month, here and on level ground."""
        these = self.month == month
        return float(self.hours[these].mean()), float(self.level[2, these].mean())

    def record(self) -> dict[str, Any]:
        """As plain numbers and text, ready for JSON."""
        months = []
        for number, name in enumerate(MONTH_NAMES, 1):
            k = self.on(number, CHOSEN_DAY)
            here, level = self.mean_hours(number)
            months.append(
                {
                    "month": name,
                    "day": f"{CHOSEN_DAY} {name}",
                    "first_sun": _number(self.first[k]),
                    "last_sun": _number(self.last[k]),
                    "level_first_sun": _number(self.level[0, k]),
                    "level_last_sun": _number(self.level[1, k]),
                    "mean_sun_hours_a_day": _number(here),
                    "mean_level_sun_hours_a_day": _number(level),
                }
            )
        return {
            "clock": self.clock.name,
            "sun_hours_year": _number(self.hours.sum()),
            "level_sun_hours_year": _number(self.level[2].sum()),
            "days_without_sun": int((self.hours == 0.0).sum()),
            "months": months,
        }


MEND: Final = "mend the place (longitude, then latitude)"
"""What to do about a place that does not lie on the ground."""

CHOSEN_DAY: Final = 21
"""Day of the month whose first and last sun is told, as `parse_days` has it."""


@dataclass(frozen=True, eq=False)
class Site:
    """One place in full.

    Parameters
    ----------
    name : str
        For titles; may be empty.
    latitude, longitude : float
        Of the place as asked for [degrees north, degrees east].
    row, column : int
        The cell that holds it.
    cell_size : tuple of float
        Ground length of a column step and a row step [m].
    height : float
        Of the cell [m].
    slope, aspect : float
        Degrees; aspect clockwise from true north, NaN on flat ground.
    normal : ndarray, shape (3,)
        Towards true east, north and up.
    sky_view : float
        Sky-view factor.
    horizon : ndarray, shape (azimuths,)
        Skyline of the terrain, equally spaced azimuths, the first due north, clockwise [degrees].
    energy : Energy
        By month.
    sun : SunYear
        Day by day.
    errors : dict of Spread, optional
        What the error of the heights does to ``slope``, ``aspect`` and ``global``.
    """

    name: str
    latitude: float
    longitude: float
    row: int
    column: int
    cell_size: tuple[float, float]
    height: float
    slope: float
    aspect: float
    normal: Values
    sky_view: float
    horizon: Values
    energy: Energy
    sun: SunYear
    errors: dict[str, Spread] | None = None

    @property
    def slope_percent(self) -> float:
        """Slope, rise over run."""
        return 100.0 * float(np.tan(np.radians(self.slope)))

    @property
    def highest(self) -> tuple[float, float]:
        """Height and azimuth of the horizon where it is highest [degrees]."""
        k = int(np.argmax(self.horizon))
        return float(self.horizon[k]), 360.0 * k / self.horizon.size

    def plane(self, azimuth: Values) -> Values:
        """Height at which the own slope hides the sun, by azimuth; 0 where it falls [degrees]."""
        turn = np.radians(azimuth)
        rise = plane_tangent(self.normal, np.sin(turn), np.cos(turn))
        return np.degrees(np.arctan(np.maximum(rise, 0.0)))

    def record(self) -> dict[str, Any]:
        """As plain numbers and text, ready for JSON."""
        highest, towards = self.highest
        record: dict[str, Any] = {
            "name": self.name,
            "latitude": round(self.latitude, 7),
            "longitude": round(self.longitude, 7),
            "row": self.row,
            "column": self.column,
            "cell_m": [round(size, 3) for size in self.cell_size],
            "height_m": _number(self.height),
            "slope_deg": _number(self.slope),
            "slope_percent": _number(self.slope_percent),
            "aspect_deg": _number(self.aspect),
            "sky_view_factor": round(self.sky_view, 4),
            "highest_horizon_deg": _number(highest),
            "highest_horizon_azimuth_deg": _number(towards),
            "horizon_deg": [_number(height) for height in self.horizon],
            "irradiation": self.energy.record(),
            "sun": self.sun.record(),
        }
        if self.errors is not None:
            record["standard_error"] = {
                name: spread_record(spread, BOUNDS[name]) for name, spread in self.errors.items()
            }
        return record


BOUNDS: Final = {
    "slope": (0.0, 90.0),
    "aspect": (-np.inf, np.inf),
    "global": (0.0, np.inf),
}
"""Least and greatest value that a quantity can have."""


def spread_record(spread: Spread, within: tuple[float, float]) -> dict[str, Any]:
    """What error does to a number, ready for JSON."""
    low, high = spread.interval(INTERVAL, within)
    return {
        "standard_error": _number(float(spread.standard_error)),
        "interval": [_number(float(low)), _number(float(high))],
        "interval_level": INTERVAL,
        "shift": _number(float(spread.shift)),
        "realisations": int(spread.count),
    }


def _number(value: float) -> float | None:
    """Rounded, and None for what is not known: JSON has no NaN."""
    return round(float(value), 3) + 0.0 if np.isfinite(value) else None


@dataclass(frozen=True)
class Spot:
    """A place that is asked for.

    Parameters
    ----------
    latitude, longitude : float
        WGS 84 [degrees].
    name : str
        For titles.
    """

    latitude: float
    longitude: float
    name: str = ""


def survey(
    elevation: Elevation,
    spots: Sequence[Spot],
    settings: LightSettings,
    clock: Clock,
    *,
    azimuths: int = AZIMUTHS,
    scene: Scene = NO_SCENE,
    error: DemError | None = None,
    threads: int | None = None,
    progress: Progress | None = None,
) -> list[Site]:
    """Find out everything about some places.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    spots : sequence of Spot
        The places.
    settings : LightSettings
        The light; months by part are kept in any case. Neither albedo nor index may be a map.
    clock : Clock
        What the time of day is told in.
    azimuths : int
        Of the horizon and the hours of sun; energy has those of the settings.
    scene : Scene
        What stands beyond and above the ground, from `make_scene`.
    error : DemError, optional
        Of the heights, to be carried to slope, aspect and energy.
    threads : int, optional
        Default: all cores that may be used.
    progress : callable, optional
        Told the share done and the stage.

    Returns
    -------
    list of Site
        In the order asked for.

    Raises
    ------
    SettingError
        A value out of its range.
    InputError
        A place outside the elevation model, on a void, or with neighbours too few for a slope.
    """
    check_azimuths(azimuths)
    threads = default_threads() if threads is None else threads
    check_threads(threads)
    _demand_short(settings)
    settings = replace(settings, monthly_parts=True)
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    cells = [find_cell(elevation, frame, spot) for spot in spots]
    told = _Shares(progress, [0.6, 0.4] if error is None else [0.1, 0.05, 0.85])
    ground, tasks = lay_out(elevation, frame, azimuths, settings.refraction, scene)
    for count, _ in enumerate(carry_out(tasks, threads), 1):
        told(count / len(tasks), "horizon")
    strips = [cell_strip(ground, *cell) for cell in cells]
    sights = Sightlines.over(elevation, frame, settings.refraction, ground.obstacles)
    views = [cell_outlooks(ground, sights, *cell) for cell in cells]
    del ground, tasks  # the largest thing there is
    _demand_slopes(strips, cells)
    told.next()
    light = _Light(plan_irradiation(elevation, settings, scene), cells, threads, told)
    energies = [light.energy(cell) for cell in cells]
    errors = None
    if error is not None:
        told.next()
        errors = propagate_all(
            elevation,
            error,
            light.quantities,
            angles=("aspect",),
            progress=lambda done: told(done / error.realisations, "error of the heights"),
        )
    return [
        _site(spot, cell, frame, strip, view, energy, clock, errors, number)
        for number, (spot, cell, strip, view, energy) in enumerate(
            zip(spots, cells, strips, views, energies, strict=True)
        )
    ]


def forecast(
    elevation: Elevation,
    settings: LightSettings,
    azimuths: int,
    scene: Scene,
    error: DemError | None,
    threads: int,
) -> tuple[float, int]:
    """Time [s] and peak memory [bytes] to expect of a survey."""
    light = plan_irradiation(elevation, settings, scene)
    draws = 0 if error is None else error.realisations
    sweeps = azimuths + settings.azimuths * (1 + draws)
    tables = light.seconds(1) - replace(light, settings=None).seconds(1)
    work = elevation.heights.size * sweeps * SECONDS_A_CELL_AND_SWEEP + tables
    memory = max(
        plan_terrain(elevation, azimuths, refraction=settings.refraction, scene=scene).memory_bytes,
        light.memory_bytes,
    )
    if error is not None:  # a second far horizon, and a field
        memory += int(9.0 * elevation.heights.size / NODE_STEP**2 * settings.azimuths)
        memory += int(field_bytes(error, elevation.shape, light.frame.cell_size))
    return SECONDS_AT_LEAST + work / max(threads, 1), memory


def find_cell(elevation: Elevation, frame: Frame, spot: Spot) -> tuple[int, int]:
    """Row and column of the cell that holds a place.

    Raises
    ------
    InputError
        It lies outside the elevation model, or on a void.
    """
    what = f"the place {spot.name}".rstrip()
    return cell_of(elevation, frame, spot.latitude, spot.longitude, what=what, mend=MEND)


class _Shares:
    """Progress of stages that take stated shares of the whole."""

    def __init__(self, progress: Progress | None, shares: Sequence[float]) -> None:
        self.progress, self.shares, self.stage = progress, shares, 0

    def __call__(self, share: float, words: str) -> None:
        if self.progress is not None:
            done = sum(self.shares[: self.stage]) + share * self.shares[self.stage]
            self.progress(min(done, 1.0), words)

    def next(self) -> None:
        """Go on to the next stage."""
        self.stage += 1


def _demand_short(settings: LightSettings) -> None:
    """Raise SettingError for a period with more months than a table of them can have."""
    months = len(settings.period.months)
    if months > MOST_MONTHS:
        raise SettingError(
            f"the period {settings.period.label} has {months} months, more than {MOST_MONTHS}: name"
            " a shorter --period"
        )


def _demand_slopes(strips: Sequence[Strip], cells: Sequence[tuple[int, int]]) -> None:
    """Raise InputError for a cell without a slope."""
    for strip, (row, column) in zip(strips, cells, strict=True):
        if np.isnan(strip.normal).any():
            raise InputError(
                f"the cell in row {row} and column {column} has too few known neighbours for a"
                " slope: fill voids with --fill-voids, or take a place farther inside"
            )


class _Light:
    """Energy at single cells: what it needs is prepared once."""

    def __init__(self, plan: Plan, cells: Sequence[Cell], threads: int, told: Progress) -> None:
        assert plan.settings is not None
        self.plan, self.cells, self.threads = plan, cells, threads
        run = Run(plan, threads, lambda share, words: told(share / PREPARED, words))
        self.ground, tables, surroundings = run.prepare()
        assert isinstance(tables, SkyTables)
        assert surroundings is not None
        self.tables, self.surroundings = tables, surroundings
        self.none = Surroundings.none(len(plan.settings.period.months))

    def here(self, strip: Strip, cell: Cell) -> Light:
        """Light of a cell of the raster."""
        return strip_light(strip, strip.sky(), self.tables, self.surroundings, cell)

    def energy(self, cell: Cell) -> Energy:
        """Months by part, of the ground as it is and of level ground."""
        strip = cell_strip(self.ground, *cell)
        flat = levelled(strip)
        level = strip_light(flat, flat.sky(), self.tables, self.none, (0, 0))
        months = [
            each.month_parts[:, :, 0, 0].astype(np.float64)
            for each in (self.here(strip, cell), level)
        ]
        return Energy(self.tables.settings, *months)

    def quantities(self, elevation: Elevation) -> dict[str, Values]:
        """Slope, aspect and energy of all cells on another ground of the same frame."""
        plan = moved(self.plan, elevation)
        ground, tasks = lay_out(elevation, plan.frame, plan.azimuths, plan.refraction, plan.scene)
        for _ in carry_out(tasks, self.threads):
            pass
        found = []
        for cell in self.cells:
            strip = cell_strip(ground, *cell)
            slope, aspect = slope_and_aspect(strip.normal)
            found.append((slope[0, 0], aspect[0, 0], self.here(strip, cell).year[0, 0, 0]))
        return dict(zip(BOUNDS, np.array(found, np.float64).T, strict=True))


def _site(
    spot: Spot,
    cell: tuple[int, int],
    frame: Frame,
    strip: Strip,
    view: Outlooks,
    energy: Energy,
    clock: Clock,
    errors: dict[str, Spread] | None,
    number: int,
) -> Site:
    """Put one place together."""
    slope, aspect = (float(each[0, 0]) for each in slope_and_aspect(strip.normal))
    longitude = spot.longitude
    own = None
    if errors is not None:
        own = {name: _one(spread, number) for name, spread in errors.items()}
    return Site(
        name=spot.name,
        latitude=spot.latitude,
        longitude=(longitude + 180.0) % 360.0 - 180.0,
        row=cell[0],
        column=cell[1],
        cell_size=frame.cell_size,
        height=strip.datum + float(strip.heights[0, 0]),
        slope=slope,
        aspect=aspect,
        normal=strip.normal[:, 0, 0].astype(np.float64),
        sky_view=float(strip.sky()[0][0, 0]),
        horizon=np.degrees(np.arctan(strip.horizon[:, 0, 0].astype(np.float64))),
        energy=energy,
        sun=sun_year(strip, view, longitude, clock),
        errors=own,
    )


def _one(spread: Spread, number: int) -> Spread:
    """The spread of one of several numbers."""
    arrays = {each.name: getattr(spread, each.name) for each in fields(spread)}
    return replace(spread, **{k: v[number] for k, v in arrays.items() if isinstance(v, np.ndarray)})


def sun_year(strip: Strip, view: Outlooks, longitude: float, clock: Clock) -> SunYear:
    """Follow the sun of every day of a typical year over one cell.

    Parameters
    ----------
    strip : Strip
        The cell.
    view : Outlooks
        The cell on the ground around it.
    longitude : float
        Degrees east.
    clock : Clock
        What the time of day is told in.

    Returns
    -------
    SunYear
    """
    year = parse_period(None)
    dates = parse_days([str(year.start.astype("M8[Y]"))], year)
    days = Days.over(dates, longitude, clock, strip.horizon.shape[0])
    here, level = _walk(strip, days, view), _walk(levelled(strip), days)
    return SunYear(
        days=dates,
        clock=clock,
        first=here[0],
        last=here[1],
        hours=here[2],
        interruptions=here[3],
        level=level[:3],
        states=minute_states(strip, days),
        clock_less_solar=days.clock_less_solar,
    )


def levelled(strip: Strip) -> Strip:
    """The same cell, level and with an open horizon."""
    upright = np.zeros_like(strip.normal)
    upright[2] = 1.0
    return replace(strip, horizon=np.zeros_like(strip.horizon), normal=upright)


def _walk(strip: Strip, days: Days, view: Outlooks | None = None) -> Values:
    """First and last sun on the clock [h], hours of sun, interruptions; shape (4, days)."""
    first, last, shone, gaps = strip_days(strip, days, view)
    on_clock = [days.on_clock(each)[:, 0, 0] for each in (first, last)]
    return np.array([*on_clock, shone[:, 0, 0] / 60.0, gaps[:, 0, 0]], np.float64)
