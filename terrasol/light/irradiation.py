"""Irradiation of real ground: sun tables met with horizons and normals."""

from __future__ import annotations

import threading
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import partial
from numbers import Integral, Real
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

from terrasol.constants import REFRACTION_COEFFICIENT, SURROUNDINGS_SCALE
from terrasol.errors import SettingError
from terrasol.ground.horizon import azimuth_directions
from terrasol.kernels.beam import LANES, look_up
from terrasol.kernels.energy import parts_of_light
from terrasol.kernels.skyview import sky_view
from terrasol.sky.clear import Air
from terrasol.sky.diffuse import MODELS
from terrasol.sky.irradiance import Sky
from terrasol.sky.period import Period
from terrasol.sky.sun import SunPath, steps_per_day, sun_path
from terrasol.sky.suntable import (
    HORIZON_KNOTS,
    SunTable,
    height_knots,
    latitude_knots,
    sun_table,
)

UNITS: Final = {"MJ m-2": 1.0, "kW h m-2": 1.0 / 3.6}
"""Units of irradiation, and what one MJ m-2 is in each."""

BASES: Final = ("slope", "map")

BAND_TOP: Final = float(np.tan(np.radians(6.5)))
"""Tangent of the height at which the horizon band counts as wholly hidden: 6.5 degrees, the
width of the band in Perez et al. (1987), doi:10.1016/S0038-092X(87)80031-2."""

LATITUDE_GRAIN: Final = 0.01
"""Sun tables are mixed for latitudes rounded to this [degrees]; the rest is a tilt."""

MIXED_BYTES: Final = 256e6
"""Memory for mixed tables: those of the strips of one row of blocks are kept."""


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
        plain = self.month_albedo
        if self.albedo_map is None:
            return plain
        layers = self.albedo_map[:, rows, columns].astype(np.float64)
        which = [(month - 1) % layers.shape[0] for _, month in self.period.months]
        return np.where(np.isnan(layers[which]), plain[:, None, None], layers[which])

    def sampled_albedo(self, stride: int, shape: tuple[int, int]) -> NDArray[np.float64]:
        """The same at every `stride`-th cell, for a lattice of samples of that shape."""
        if self.albedo_map is None:
            return self.month_albedo
        every = slice(stride // 2, None, stride)
        found = self.ground_albedo(every, every)
        short = [(0, 0)] + [(0, n - m) for n, m in zip(shape, found.shape[1:], strict=True)]
        return np.pad(found, short, constant_values=np.nan)

    @property
    def photons(self) -> NDArray[np.float64] | None:
        """What turns each month's global sum into mol m-2 d-1, shape (months,)."""
        if self.photons_per_joule is None:
            return None
        return self.photons_per_joule / UNITS[self.unit] / np.array(self.period.month_days)


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


def table_bytes(settings: LightSettings, heights: int) -> float:
    """Size of the sun table of one latitude with that many height knots [bytes]."""
    months = len(settings.period.months)
    groups = -(-(2 * months if settings.monthly_parts else months + 1) // LANES)
    return 4.0 * groups * heights * settings.azimuths * HORIZON_KNOTS * 2 * LANES


@dataclass(frozen=True)
class Mixed:
    """A sun table for one latitude.

    Parameters
    ----------
    table : SunTable
        Mixed between two latitude knots.
    dark : ndarray of int64, shape (azimuths,)
        See `SunTable.dark`.
    latitude : float
        Whose table it is [degrees].
    northward : ndarray of float32, shape (groups, lanes)
        See `SunTable.northward`.
    even_change : ndarray of float32, shape (2, months, heights)
        Change of `SunTable.even` a radian north.
    """

    table: SunTable
    dark: NDArray[np.int64]
    latitude: float
    northward: NDArray[np.float32]
    even_change: NDArray[np.float32]

    @classmethod
    def between(
        cls,
        latitude: float,
        knots: tuple[float, float],
        tables: tuple[SunTable, SunTable],
        dark: tuple[NDArray[np.int64], NDArray[np.int64]],
    ) -> Mixed:
        """Mix the tables of the two knots around a latitude [degrees]."""
        gap = knots[1] - knots[0]
        table = tables[0].mixed(tables[1], (latitude - knots[0]) / gap)
        return cls(
            table,
            np.maximum(*dark),
            latitude,
            table.northward(*tables, gap).astype(np.float32),
            (tables[1].even - tables[0].even) / np.float32(np.radians(gap)),
        )


@dataclass
class SkyTables:
    """Sun tables at the latitude and height knots that a raster needs.

    Parameters
    ----------
    settings : LightSettings
        What light.
    path : SunPath
        The period's sun.
    latitudes : ndarray
        Knots fixed to the globe [degrees].
    heights : ndarray
        Knots fixed above the sea [m].
    tables : dict of SunTable
        By index of the latitude; filled by `fill`.
    """

    settings: LightSettings
    path: SunPath
    latitudes: NDArray[np.float64]
    heights: NDArray[np.float64]
    tables: dict[int, SunTable] = field(default_factory=dict)
    _dark: dict[int, NDArray[np.int64]] = field(default_factory=dict)
    _mixed: dict[int, Mixed] = field(default_factory=dict)
    _lock: threading.Lock = field(default_factory=threading.Lock)

    @classmethod
    def over(
        cls,
        settings: LightSettings,
        longitude: float,
        latitudes: tuple[float, float],
        heights: tuple[float, float],
    ) -> SkyTables:
        """Choose the knots for a range of latitudes [degrees] and heights [m]."""
        path = sun_path(settings.period, longitude, settings.step_seconds)
        return cls(settings, path, latitude_knots(*latitudes), height_knots(*heights))

    def fill(self, index: int) -> None:
        """Compute the table of one latitude knot."""
        s = self.settings
        table = sun_table(
            self.path,
            float(self.latitudes[index]),
            self.heights,
            s.sky or s.air,
            s.diffuse,
            s.azimuths,
            s.monthly_parts,
        )
        self.tables[index], self._dark[index] = table, table.dark()

    @property
    def tasks(self) -> list[Callable[[], None]]:
        """Calls that fill all tables, in any order."""
        return [partial(self.fill, i) for i in range(self.latitudes.size)]

    def level(self, latitude: float, height: float) -> float:
        """Global irradiation of open level ground [MJ m-2]."""
        level = self.exactly(latitude).table.level
        return float(np.interp(height, self.heights, level.sum(axis=1)))

    def at(self, latitude: float) -> Mixed:
        """The table for a latitude rounded to LATITUDE_GRAIN."""
        grain = round(latitude / LATITUDE_GRAIN)
        with self._lock:
            found = self._mixed.pop(grain, None)
            if found is None:
                found = self.exactly(grain * LATITUDE_GRAIN)
                while len(self._mixed) > MIXED_BYTES / found.table.direct.nbytes:
                    self._mixed.pop(next(iter(self._mixed)))
            self._mixed[grain] = found  # last, so that the one unused longest goes first
            return found

    def exactly(self, latitude: float) -> Mixed:
        """The table for a latitude [degrees]."""
        south = int(np.searchsorted(self.latitudes, latitude)) - 1
        south = min(max(south, 0), self.latitudes.size - 2)
        pair = south, south + 1
        return Mixed.between(
            latitude,
            (float(self.latitudes[south]), float(self.latitudes[south + 1])),
            (self.tables[pair[0]], self.tables[pair[1]]),
            (self._dark[pair[0]], self._dark[pair[1]]),
        )


@dataclass(frozen=True)
class Surroundings:
    """What the terrain around receives, on a coarse lattice, for the light it throws back.

    Parameters
    ----------
    received : ndarray of float32, shape (months, node rows, node columns)
        Mean irradiation of the terrain around, bounces included [MJ m-2]; where the albedo is
        mapped, what it sends back.
    stride : int
        Cells between nodes; the first node lies at cell `stride // 2`.
    albedo : ndarray of float32, shape (months,)
        Share of `received` that is sent back: the albedo, or 1 where that is mapped.
    """

    received: NDArray[np.float32]
    stride: int
    albedo: NDArray[np.float32]

    @classmethod
    def of(
        cls,
        samples: NDArray[np.float32],
        stride: int,
        cell_size: tuple[float, float],
        albedo: NDArray[np.float64],
    ) -> Surroundings:
        """Spread samples over the surroundings, and count the bounces between slopes.

        The terrain around sends back albedo times all that it gets, part of which is again
        reflected light: received = from the sky / (1 - albedo x mean terrain view), or, with an
        albedo a for each cell, sent back = <a x from the sky> / (1 - <a x terrain view>).

        Parameters
        ----------
        samples : ndarray of float32, shape (months + 1, node rows, node columns)
            What single cells receive from the sky itself, month by month [MJ m-2], and last
            their terrain view; NaN where void.
        stride : int
            Cells between samples.
        cell_size : tuple of float
            Of a column step and a row step [m].
        albedo : ndarray, shape (months,) or (months, node rows, node columns)
            Of the ground, where the samples are.
        """
        sigma = [SURROUNDINGS_SCALE / (stride * size) for size in cell_size[::-1]]
        known = np.isfinite(samples[-1])
        weight = gaussian_filter(known.astype(np.float64), sigma, mode="constant")
        weight = np.where(weight > 1e-12, weight, np.inf)

        def spread(layer: NDArray[Any]) -> NDArray[np.float64]:
            filled = np.where(known, layer, 0.0).astype(np.float64)
            return gaussian_filter(filled, sigma, mode="constant") / weight

        if albedo.ndim == 1:
            view = spread(samples[-1])
            received = np.stack(
                [spread(s) / (1.0 - a * view) for s, a in zip(samples[:-1], albedo, strict=True)]
            )
            shares = albedo
        else:
            received = np.stack(
                [
                    spread(a * s) / (1.0 - spread(a * samples[-1]))
                    for s, a in zip(samples[:-1], albedo, strict=True)
                ]
            )
            shares = np.ones(len(albedo))
        return cls(np.ascontiguousarray(received, np.float32), stride, shares.astype(np.float32))

    @classmethod
    def none(cls, months: int) -> Surroundings:
        """No light from the terrain."""
        return cls(np.zeros((months, 1, 1), np.float32), 1, np.zeros(months, np.float32))

    def node(self, row: int, column: int) -> NDArray[np.float64]:
        """Where a cell lies, in node units."""
        offset = self.stride // 2
        return np.array([(row - offset) / self.stride, (column - offset) / self.stride])


@dataclass(frozen=True)
class Strip:
    """Some rows of ground as light sees them.

    Parameters
    ----------
    horizon : ndarray of float32, shape (azimuths, rows, columns)
        Tangent of the terrain's horizon, not below 0.
    normal : ndarray of float32, shape (3, rows, columns)
        Towards true east, north and up.
    heights : ndarray of float32, shape (rows, columns)
        Less `datum` [m].
    datum : float
        Metres above the sea.
    latitude : tuple of float
        At the first cell, and its change a row and a column [degrees].
    middle : float
        Latitude whose sun table serves [degrees].
    """

    horizon: NDArray[np.float32]
    normal: NDArray[np.float32]
    heights: NDArray[np.float32]
    datum: float
    latitude: tuple[float, float, float]
    middle: float

    def tilt(self, mixed: Mixed) -> NDArray[np.float64]:
        """Latitude less that of a table, at the first cell and a row and a column [radians]."""
        return np.radians(np.array(self.latitude) - (mixed.latitude, 0.0, 0.0))

    def thin(self, first: int, stride: int) -> Strip:
        """Every `stride`-th column, from the first wanted on."""
        columns = np.s_[..., first::stride]
        latitude, by_row, by_column = self.latitude
        return Strip(
            np.ascontiguousarray(self.horizon[columns]),
            np.ascontiguousarray(self.normal[columns]),
            np.ascontiguousarray(self.heights[columns]),
            self.datum,
            (latitude + first * by_column, by_row, stride * by_column),
            self.middle,
        )

    def part(self, rows: slice, middle: float) -> Strip:
        """Some of the rows, with the sun table of another latitude."""
        latitude, by_row, by_column = self.latitude
        return Strip(
            np.ascontiguousarray(self.horizon[:, rows]),
            np.ascontiguousarray(self.normal[:, rows]),
            self.heights[rows],
            self.datum,
            (latitude + rows.start * by_row, by_row, by_column),
            middle,
        )

    def sky(self) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Sky-view factor and the open part of the horizon band, shape (rows, columns)."""
        view = np.empty(self.horizon.shape[1:], np.float32)
        band = np.empty_like(view)
        directions = azimuth_directions(self.horizon.shape[0])
        sky_view(self.horizon, self.normal, 0, directions, BAND_TOP, view, band)
        return view, band

    def direct(self, mixed: Mixed) -> NDArray[np.float32]:
        """Sums of direct light, shape (groups, rows * columns, lanes)."""
        table = mixed.table
        sums = np.empty((table.direct.shape[0], self.heights.size, LANES), np.float32)
        directions = azimuth_directions(self.horizon.shape[0])
        for group, direct in enumerate(table.direct):
            look_up(
                self.horizon,
                self.normal,
                self.heights,
                self.datum,
                directions,
                self.tilt(mixed),
                table.heights,
                direct.reshape(-1, 2 * LANES),
                mixed.dark,
                mixed.northward[group],
                sums[group],
            )
        return sums


@dataclass(frozen=True)
class Light:
    """Irradiation of some rows of cells.

    Parameters
    ----------
    year : ndarray of float32, shape (4, rows, columns)
        Global, beam, diffuse and reflected, over the whole period.
    months : ndarray of float32, shape (months, rows, columns)
        Global.
    month_parts : ndarray of float32, shape (3, months or 0, rows, columns)
        Beam, diffuse and reflected.
    """

    year: NDArray[np.float32]
    months: NDArray[np.float32]
    month_parts: NDArray[np.float32]


def strip_light(
    strip: Strip,
    sky: tuple[NDArray[np.float32], NDArray[np.float32]],
    tables: SkyTables,
    surroundings: Surroundings,
    place: tuple[int, int],
) -> Light:
    """Irradiation of a strip of ground.

    Parameters
    ----------
    strip : Strip
        The ground.
    sky : tuple of ndarray
        From `Strip.sky`.
    tables : SkyTables
        Filled.
    surroundings : Surroundings
        For the reflected light.
    place : tuple of int
        The strip's first row and column in the raster.

    Returns
    -------
    Light
        In the settings' unit and on their basis; NaN where void.
    """
    settings = tables.settings
    factor = np.where(np.isnan(sky[0]), np.nan, UNITS[settings.unit]).astype(np.float32)
    if settings.basis == "map":
        factor /= strip.normal[2]
    return _light(strip, sky, tables, surroundings, place, factor)


def sky_light(strip: Strip, tables: SkyTables) -> NDArray[np.float32]:
    """What a strip receives from the sky itself, for `Surroundings.of`.

    Parameters
    ----------
    strip : Strip
        The ground.
    tables : SkyTables
        Filled.

    Returns
    -------
    ndarray of float32, shape (months + 1, rows, columns)
        Irradiation of each month [MJ m-2], and last the terrain view; NaN where void.
    """
    view, band = strip.sky()
    factor = np.where(np.isnan(view), np.nan, 1.0).astype(np.float32)
    dark = Surroundings.none(len(tables.settings.period.months))
    light = _light(strip, (view, band), tables, dark, (0, 0), factor)
    return np.concatenate([light.months, 1.0 - view[None]])


def _light(
    strip: Strip,
    sky: tuple[NDArray[np.float32], NDArray[np.float32]],
    tables: SkyTables,
    surroundings: Surroundings,
    place: tuple[int, int],
    factor: NDArray[np.float32],
) -> Light:
    """Irradiation of a strip, times a factor."""
    settings = tables.settings
    mixed = tables.at(strip.middle)
    count = len(settings.period.months)
    shape = strip.heights.shape
    light = Light(
        np.empty((4, *shape), np.float32),
        np.empty((count, *shape), np.float32),
        np.empty((3, count if settings.monthly_parts else 0, *shape), np.float32),
    )
    parts_of_light(
        strip.direct(mixed), count, strip.heights, strip.datum, mixed.table.heights,
        mixed.table.even, mixed.even_change, strip.tilt(mixed), *sky,
        surroundings.received, surroundings.node(*place), surroundings.stride,
        surroundings.albedo, factor,
        light.year, light.months, light.month_parts,
    )  # fmt: skip
    return light
