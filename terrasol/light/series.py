"""Light of real ground hour by hour: moments of sun met with horizons at hand."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import REFRACTION_COEFFICIENT, SOLAR_RADIUS_DEG
from terrasol.errors import InputError, SettingError
from terrasol.kernels.moment import FULL, decode_horizon, direct_light, parts_of_steps
from terrasol.light.irradiation import Strip
from terrasol.light.settings import BASES, check_azimuths, check_refraction
from terrasol.light.surroundings import Surroundings
from terrasol.sky.cloud import CloudedSky, MonthlySky
from terrasol.sky.diffuse import MODELS, DiffuseSplit, split_diffuse
from terrasol.sky.irradiance import Sky
from terrasol.sky.period import Period
from terrasol.sky.station import Station
from terrasol.sky.sun import SunPath, SunSeries, sun_path, sun_series, unit_vector

STEPS: Final = {"1h": 3600, "1d": 86400}
"""Lengths of a step [s]."""

UNIT_OF_STEP: Final = {"1h": "W m-2", "1d": "MJ m-2"}
"""An hour is told by its mean irradiance, a day by the energy it brought."""

PARTS: Final = ("global", "beam", "diffuse", "reflected")
"""What the kernel gives, in its order."""

QUANTITIES: Final = (*PARTS, "net")
"""What a series may hold; net is (1 - albedo) x global."""

SUBSTEP_SECONDS: Final = 300.0
"""Moments that a step is made of stand this far apart; each stands for the time around it.
Against moments of a minute a year's mean differs by 0.0001 %, single hours in which a ridge
cuts the sun off by some W/m2 (docs/method.md)."""

EDGE_RADIUS: Final = np.radians(SOLAR_RADIUS_DEG) * np.pi / 4.0
"""Half the width of the straight ramp that stands for the disc cut by an edge [radians]: its
slope is that of the disc cut through the middle."""

ELEVATION_SHIFT: Final = 0.05
"""Change of the sun's elevation by which the change of its light is found [degrees]."""

LARGEST_CHANGE: Final = 0.9
"""Most by which light may change, relatively, from a place to the cells around it."""


@dataclass(frozen=True)
class SeriesSettings:
    """What series to compute, and how to state it.

    Parameters
    ----------
    period : Period
        Whole days.
    sky : Sky
        The clear air, or a measured sky.
    step : {'1h', '1d'}
        Length of a step.
    quantities : tuple of str
        Some of `QUANTITIES`.
    albedo : tuple of 12 floats
        Of the ground, January to December.
    diffuse : {'perez', 'hay-davies', 'isotropic'}
        Model that parts the diffuse light.
    azimuths : int
        Number of horizon azimuths: a multiple of 4 from 8 to 720.
    basis : {'slope', 'map'}
        Per area of the slope's own surface, or per area of the map.
    substep_seconds : float
        Spacing of the moments in a step; divides an hour.
    refraction : float
        Terrestrial refraction coefficient k of lines of sight.
    albedo_station : Station, optional
        Whose measured albedo counts, step by step, in place of `albedo`.
    albedo_map : ndarray of float32, shape (1 or 12, rows, columns), optional
        Albedo of each cell, for the year or January to December; where it is NaN, `albedo`
        counts.

    Raises
    ------
    SettingError
        A value out of its range.
    """

    period: Period
    sky: Sky
    step: str = "1h"
    quantities: tuple[str, ...] = ("global",)
    albedo: tuple[float, ...] = (0.2,) * 12
    diffuse: str = "perez"
    azimuths: int = 64
    basis: str = "slope"
    substep_seconds: float = SUBSTEP_SECONDS
    refraction: float = REFRACTION_COEFFICIENT
    albedo_station: Station | None = None
    albedo_map: NDArray[np.float32] | None = None

    def __post_init__(self) -> None:
        """Refuse what makes no sense."""
        if self.albedo_station is not None and "albedo" not in self.albedo_station.values:
            raise InputError(
                "no albedo was measured, so it has none to give", self.albedo_station.name
            )
        if self.albedo_station is not None and self.albedo_map is not None:
            raise SettingError("albedo comes from a map or from a station, not from both")
        if len(self.albedo) != 12 or not all(0.0 <= value <= 1.0 for value in self.albedo):
            raise SettingError(f"albedo must be twelve numbers from 0 to 1; got {self.albedo}")
        if not self.quantities or len(set(self.quantities)) < len(self.quantities):
            raise SettingError("name at least one quantity, and each of them once")
        for name, value, known in (
            ("step", self.step, tuple(STEPS)),
            ("diffuse model", self.diffuse, MODELS),
            ("basis", self.basis, BASES),
            *(("quantity", quantity, QUANTITIES) for quantity in self.quantities),
        ):
            if value not in known:
                raise SettingError(f"{name} '{value}' is not one of: {', '.join(known)}")
        if isinstance(self.sky, MonthlySky):
            raise SettingError(
                "monthly clear-sky indices have no hours and no days: a series wants a measured"
                " station, or the clear sky"
            )
        if isinstance(self.sky, CloudedSky) and self.substep_seconds > self.sky.seconds:
            raise SettingError(
                f"moments {self.substep_seconds:g} s apart miss intervals of a series measured"
                f" every {self.sky.seconds} s: put them closer together"
            )
        parts = 3600.0 / self.substep_seconds if self.substep_seconds > 0.0 else 0.0
        if not 1.0 <= parts <= 3600.0 or abs(parts - round(parts)) > 1e-9:
            raise SettingError(
                f"moments {self.substep_seconds:g} s apart do not divide an hour; try 300 s"
            )
        check_azimuths(self.azimuths)
        check_refraction(self.refraction)

    @property
    def moments(self) -> int:
        """Moments in a step."""
        return round(STEPS[self.step] / self.substep_seconds)

    @property
    def scale(self) -> float:
        """What a moment's flux [W/m2] adds to its step, in the step's unit."""
        return self.substep_seconds * (1e-6 if self.step == "1d" else 1.0 / 3600.0)


def step_edges(settings: SeriesSettings, longitude: float) -> NDArray[np.datetime64]:
    """Edges of all steps, UTC: one more than there are steps.

    A day of the period begins at the full hour of UTC that is nearest to midnight of local
    mean solar time at the longitude [degrees east]. So hours are those of UTC, a day holds
    one whole passage of the sun, and the day's sum is that of its 24 hours.

    Examples
    --------
    >>> from terrasol.sky.clear import Air
    >>> from terrasol.sky.period import parse_period
    >>> settings = SeriesSettings(parse_period("2025-06-01"), Air.ineichen(3.0))
    >>> str(step_edges(settings, 100.0)[0])
    '2025-05-31T17:00:00'
    """
    late = round(-longitude / 15.0)
    first, last = (
        edge.astype("M8[s]") + np.timedelta64(late, "h")
        for edge in (settings.period.start, settings.period.end)
    )
    step = np.timedelta64(STEPS[settings.step], "s")
    return np.arange(first, last + step, step)


def step_months(settings: SeriesSettings, edges: NDArray[np.datetime64]) -> NDArray[np.int64]:
    """Calendar month, 0 to 11, of the day that each step belongs to."""
    since = (edges[:-1] - edges[0]).astype("m8[s]")
    day = settings.period.start.astype("M8[s]") + since
    return day.astype("M8[M]").astype(np.int64) % 12


def step_albedo(
    settings: SeriesSettings, edges: NDArray[np.datetime64], months: NDArray[np.int64]
) -> NDArray[np.float32]:
    """Albedo of the ground in each step, shape (steps,).

    A measured one is linear in time between the intervals that have it, and held before the
    first and after the last.
    """
    station = settings.albedo_station
    if station is None:
        return np.array(settings.albedo, np.float32)[months]
    known = np.isfinite(station.values["albedo"])
    if not known.any():
        raise InputError("all values of the albedo are missing", station.name)
    seconds = edges.astype("M8[s]").astype(np.float64)
    at = (seconds[:-1] + seconds[1:]) / 2.0
    measured = station.middle[known].astype("M8[s]").astype(np.float64)
    return np.interp(at, measured, station.values["albedo"][known]).astype(np.float32)


def suns_at_greenwich(edges: NDArray[np.datetime64], substep_seconds: float) -> SunPath:
    """The geocentric sun at the moments of some steps, with hour angles of Greenwich."""
    day = np.timedelta64(1, "D")
    start = edges[0].astype("M8[D]")
    end = (edges[-1] - np.timedelta64(1, "s")).astype("M8[D]") + day
    months = np.arange(start.astype("M8[M]"), (end - day).astype("M8[M]") + 1).astype(int)
    period = Period(
        f"{start}/{end - day}",
        start.astype("M8[s]"),
        end.astype("M8[s]"),
        tuple((1970 + int(m) // 12, int(m) % 12 + 1) for m in months),
        False,
        False,
    )
    path = sun_path(period, 0.0, substep_seconds)
    kept = (path.time >= edges[0]) & (path.time < edges[-1])
    named = ("time", "month", "declination", "hour_angle", "distance")
    return replace(path, **{name: getattr(path, name)[kept] for name in named})


@dataclass(frozen=True)
class Place:
    """Where the sun is worked out, for the cells around.

    Parameters
    ----------
    latitude, longitude : float
        Degrees north, degrees east.
    reach : float
        Distance of the farthest cell around [radians].
    """

    latitude: float
    longitude: float
    reach: float


@dataclass(frozen=True)
class StepSky:
    """The sky of one place over some steps, moment by moment; nights have no moments.

    Parameters
    ----------
    heights : ndarray, shape (knots,)
        Above the sea [m].
    first : ndarray of int64, shape (steps + 1,)
        Where each step's moments begin.
    left : ndarray of int64, shape (moments,)
        Azimuth of the horizon on the sun's left.
    sun : ndarray of float32, shape (moments, 7)
        See `terrasol.kernels.moment.direct_light`.
    strength : ndarray, shape (moments, 2, knots)
        Beam and circumsolar light facing the sun, times the moment's weight.
    even : ndarray, shape (steps, 2, knots)
        Isotropic light on level ground and horizon band on a wall.
    change : ndarray of float32, shape (steps, 2)
        Relative change of `even` a radian north and east.
    """

    heights: NDArray[np.float64]
    first: NDArray[np.int64]
    left: NDArray[np.int64]
    sun: NDArray[np.float32]
    strength: NDArray[np.float64]
    even: NDArray[np.float64]
    change: NDArray[np.float32]

    @classmethod
    def over(
        cls,
        settings: SeriesSettings,
        path: SunPath,
        place: Place,
        heights: NDArray[np.float64],
    ) -> StepSky:
        """Ask the sky for its light at every moment.

        Parameters
        ----------
        settings : SeriesSettings
            What light.
        path : SunPath
            From `suns_at_greenwich`.
        place : Place
            Where.
        heights : ndarray
            Height knots [m].
        """
        here = replace(
            path, longitude=place.longitude, hour_angle=path.hour_angle + place.longitude
        )
        sun = sun_series(here, place.latitude, float(np.mean(heights)))
        since = (sun.time - path.time[0]).astype("m8[ns]").astype(np.int64)
        step = np.round(since / (settings.substep_seconds * 1e9)).astype(np.int64)
        step //= settings.moments
        steps = path.time.size // settings.moments
        splits = [_light_at(settings, sun, float(height)) for height in heights]
        direct = [np.stack([beam, split.circumsolar_normal], -1) for beam, split in splits]
        even = np.array(
            [
                [_by_step(step, flux, steps) for flux in (split.isotropic, split.horizon_band)]
                for _, split in splits
            ]
        )
        middle = float(heights[heights.size // 2])
        air, change = _changes(settings, sun, middle, place.reach, step, steps)
        return cls(
            heights,
            np.searchsorted(step, np.arange(steps + 1)).astype(np.int64),
            *_sun_numbers(sun, settings.azimuths, air),
            settings.scale * np.stack(direct, -1),
            settings.scale * np.transpose(even, (2, 1, 0)),
            change,
        )

    def part(self, start: int, stop: int) -> StepSky:
        """Some of the steps."""
        moments = slice(int(self.first[start]), int(self.first[stop]))
        return StepSky(
            self.heights,
            self.first[start : stop + 1] - self.first[start],
            self.left[moments],
            self.sun[moments],
            self.strength[moments],
            self.even[start:stop],
            self.change[start:stop],
        )


def _light_at(
    settings: SeriesSettings, sun: SunSeries, height: float
) -> tuple[NDArray[np.float64], DiffuseSplit]:
    """Beam facing the sun and the diffuse light's parts [W/m2]."""
    light = settings.sky.over(sun, height)
    return light.beam_normal, split_diffuse(settings.diffuse, sun, light)


def _by_step(step: NDArray[np.int64], flux: NDArray[np.float64], steps: int) -> NDArray[np.float64]:
    return np.asarray(np.bincount(step, weights=flux, minlength=steps), np.float64)


def _sun_numbers(
    sun: SunSeries, azimuths: int, air: NDArray[np.float64]
) -> tuple[NDArray[np.int64], NDArray[np.float32]]:
    """Left azimuth and the seven numbers of each moment; see `direct_light`."""
    east, north, up = unit_vector(sun.elevation, sun.azimuth)
    turn = sun.azimuth / (360.0 / azimuths)
    left = np.minimum(turn.astype(np.int64), azimuths - 1)
    right = turn - left
    level = np.maximum(np.hypot(east, north), 1e-3)
    sharpness = 1.0 / (2.0 * EDGE_RADIUS * level)
    numbers = np.stack([east, north, up, (1.0 - right) / FULL, right / FULL, sharpness, air], -1)
    return left, np.ascontiguousarray(numbers, np.float32)


def _changes(
    settings: SeriesSettings,
    sun: SunSeries,
    height: float,
    reach: float,
    step: NDArray[np.int64],
    steps: int,
) -> tuple[NDArray[np.float64], NDArray[np.float32]]:
    """How the light changes from the place to the cells around it.

    Returns the relative change of the beam with the sine of the sun's elevation, for each
    moment, and that of the even light a radian north and east, for each step. The latter is
    what makes the whole diffuse light of level ground change as the sky says: by itself the
    even light would jump where Perez's table goes to another row.
    """
    most = LARGEST_CHANGE / max(reach, 1e-9)
    lower, here, upper = (
        settings.sky.over(replace(sun, elevation=sun.elevation + shift), height)
        for shift in (-ELEVATION_SHIFT, 0.0, ELEVATION_SHIFT)
    )
    rise = 2.0 * np.radians(ELEVATION_SHIFT) * np.cos(np.radians(sun.elevation))
    rise = np.maximum(rise, 1e-9)
    slope = (upper.beam_normal - lower.beam_normal) / rise
    air = np.clip(_ratio(slope, here.beam_normal), -most, most)
    split = split_diffuse(settings.diffuse, sun, here)
    east, north, up = unit_vector(sun.elevation, sun.azimuth)
    slope = (upper.diffuse_horizontal - lower.diffuse_horizontal) / rise
    slope -= split.circumsolar_normal * (1.0 + air * up)
    whole = _by_step(step, split.isotropic, steps)
    change = [_ratio(_by_step(step, slope * way, steps), whole) for way in (north, east)]
    return air, np.clip(np.stack(change, -1), -most, most).astype(np.float32)


def _ratio(part: NDArray[np.float64], whole: NDArray[np.float64]) -> NDArray[np.float64]:
    """0 where the whole is next to nothing."""
    some = whole > 1e-3
    return np.where(some, part / np.where(some, whole, 1.0), 0.0)


def bends(values: NDArray[np.float64], knots: NDArray[np.float64]) -> NDArray[np.float32]:
    """Values at knots (last axis) as `terrasol.kernels.moment` takes them.

    First value, first slope and changes of slope.
    """
    slope = np.diff(values, axis=-1) / np.diff(knots)
    bent = np.concatenate([values[..., :1], slope[..., :1], np.diff(slope, axis=-1)], axis=-1)
    return np.ascontiguousarray(bent, np.float32)


@dataclass(frozen=True)
class Patch:
    """Some rows of ground with their horizons, as moments of sun see them.

    Parameters
    ----------
    code : ndarray of uint16, shape (azimuths, rows, columns)
        Horizons from `terrasol.kernels.moment.encode_horizon`.
    normal : ndarray of float32, shape (3, rows, columns)
        Towards true east, north and up.
    heights : ndarray of float32, shape (rows, columns)
        Less `datum` [m]; NaN where void.
    datum : float
        Metres above the sea.
    offset : ndarray of float32, shape (2, rows, columns)
        How far north, and east, of the place whose sky serves [radians].
    latitude : float
        Of that place [degrees].
    """

    code: NDArray[np.uint16]
    normal: NDArray[np.float32]
    heights: NDArray[np.float32]
    datum: float
    offset: NDArray[np.float32]
    latitude: float

    @property
    def cells(self) -> int:
        """Number of cells."""
        return int(self.heights.size)

    def sky(self) -> NDArray[np.float32]:
        """Sky-view factor and open part of the horizon band, shape (2, rows, columns)."""
        horizon = np.empty(self.code.shape, np.float32)
        flat = self.code.shape[0], self.cells
        decode_horizon(self.code.reshape(flat), horizon.reshape(flat))
        strip = Strip(horizon, self.normal, self.heights, self.datum, (0.0, 0.0, 0.0), 0.0)
        return np.stack(strip.sky())

    def turned(self) -> NDArray[np.float32]:
        """Normals towards east, north and up of the place whose sky serves.

        Going north turns the ground about the axis that points west, going east about that
        of the Earth.
        """
        east, north, up = self.normal
        to_north, to_east = self.offset
        turn = to_east * np.float32(np.tan(np.radians(self.latitude)))
        return np.stack(
            [
                east + to_east * up - turn * north,
                north + to_north * up + turn * east,
                up - to_north * north - to_east * east,
            ]
        )

    def factor(self, basis: str) -> NDArray[np.float32]:
        """What light per area of slope is multiplied by; NaN where void."""
        up = self.normal[2]
        one = np.where(np.isnan(up), np.nan, 1.0).astype(np.float32)
        return one / up if basis == "map" else one


@dataclass(frozen=True)
class Around:
    """What the terrain around receives, step by step, and a patch's place in it.

    Parameters
    ----------
    received : ndarray of float32, shape (steps, node rows, node columns)
        See `Surroundings.received`.
    rows, columns : ndarray of float32
        Place of the patch's rows and columns among the nodes.
    albedo : ndarray of float32, shape (steps,)
        Share of `received` that is sent back: the albedo, or 1 where that is mapped.
    """

    received: NDArray[np.float32]
    rows: NDArray[np.float32]
    columns: NDArray[np.float32]
    albedo: NDArray[np.float32]

    @classmethod
    def of(
        cls, surroundings: Surroundings, rows: range, columns: range, albedo: NDArray[np.float32]
    ) -> Around:
        """The place of some rows and columns of the raster."""
        received, stride = surroundings.received, surroundings.stride

        def places(span: range, nodes: int) -> NDArray[np.float32]:
            place = (np.array(span) - stride // 2) / stride
            return np.clip(place, 0.0, nodes - 1.0).astype(np.float32)

        _, down, across = received.shape
        return cls(received, places(rows, down), places(columns, across), albedo)

    @classmethod
    def nothing(cls, steps: int, shape: tuple[int, int]) -> Around:
        """No light from the terrain, for a patch of that shape."""
        rows, columns = (np.zeros(size, np.float32) for size in shape)
        return cls(np.zeros((steps, 1, 1), np.float32), rows, columns, np.zeros(steps, np.float32))


def patch_light(
    patch: Patch, view: NDArray[np.float32], sky: StepSky, around: Around, basis: str
) -> NDArray[np.float32]:
    """Light of a patch of ground, step by step.

    Parameters
    ----------
    patch : Patch
        The ground.
    view : ndarray
        From `Patch.sky`.
    sky : StepSky
        Of the patch's place.
    around : Around
        For the reflected light.
    basis : {'slope', 'map'}
        The area it is stated for.

    Returns
    -------
    ndarray of float32, shape (4, steps, rows, columns)
        See `PARTS`; in the unit of the step, NaN where void.
    """
    steps, cells = sky.first.size - 1, patch.cells
    knots = _knots_of(patch, sky.heights)
    heights = sky.heights[knots]
    knot = (heights - patch.datum).astype(np.float32)
    z = np.nan_to_num(patch.heights.reshape(cells), nan=float(knot[0]))
    z = np.clip(z, knot[0], knot[-1])
    offset = np.ascontiguousarray(patch.offset.reshape(2, cells))
    direct = np.empty((2, steps, cells), np.float32)
    normal = np.ascontiguousarray(patch.turned().reshape(3, cells))
    direct_light(
        patch.code.reshape(-1, cells), normal, offset, z, knot, sky.first, sky.left, sky.sun,
        bends(sky.strength[..., knots], heights), direct,
    )  # fmt: skip
    out = np.empty((4, steps, cells), np.float32)
    parts_of_steps(
        direct, bends(sky.even[..., knots], heights), sky.change, offset,
        view.reshape(2, cells), z, knot, around.received, around.rows, around.columns,
        around.albedo, patch.factor(basis).reshape(cells), out,
    )  # fmt: skip
    return out.reshape(4, steps, *patch.heights.shape)


def _knots_of(patch: Patch, heights: NDArray[np.float64]) -> slice:
    """The height knots around a patch's cells, two at least."""
    known = patch.heights[np.isfinite(patch.heights)]
    low, high = (known.min(), known.max()) if known.size else (0.0, 0.0)
    first = int(np.searchsorted(heights, low + patch.datum, side="right")) - 1
    first = min(max(first, 0), heights.size - 2)
    last = max(int(np.searchsorted(heights, high + patch.datum)), first + 1)
    return slice(first, min(last, heights.size - 1) + 1)


def quantity(
    name: str, light: NDArray[np.float32], albedo: NDArray[np.float32]
) -> NDArray[np.float32]:
    """One of `QUANTITIES` out of the parts (4, steps, ...); albedo by step, or by step and cell."""
    if name != "net":
        return light[PARTS.index(name)]
    absorbed = 1.0 - albedo.reshape(*albedo.shape, *(1,) * (light.ndim - 1 - albedo.ndim))
    return light[0] * absorbed.astype(np.float32)
