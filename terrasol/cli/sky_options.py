"""Options on what shines: the clear air, and what clouds leave. Nothing is slow to import."""

from __future__ import annotations

import os
from collections.abc import Callable
from dataclasses import dataclass, field, fields
from functools import wraps
from typing import TYPE_CHECKING, Any

import click

from terrasol.cli.options import Numbers
from terrasol.constants import CLEAR_SKY_PAPERS, SOLAR_CONSTANT

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from terrasol.ground.elevation import Elevation
    from terrasol.ground.frame import Frame
    from terrasol.light.settings import LightSettings
    from terrasol.sky.clear import Air
    from terrasol.sky.irradiance import Sky
    from terrasol.sky.period import Period
    from terrasol.sky.station import Station

STATION_AWAY_KM = 50.0
STATION_BESIDE_M = 500.0
"""How far from the ground's middle, and how far beyond its heights, a station may lie without a
warning (judgement, no source)."""

ALBEDO_FOR_NOW = (0.2,)
"""Stands for an albedo that is read later; where a map of it is void, it is what counts."""

CLIMATOLOGY = "climatology"
TURBIDITY_FOR_NOW = 3.0
"""Stands for the climatology's turbidity while the other settings are checked, before the
raster says where it lies."""


@dataclass(frozen=True)
class Settled:
    """A sky as asked for, ready for a job.

    Parameters
    ----------
    sky : Sky or None
        None for the clear air's own.
    period : Period
        What is summed.
    record : dict
        Settings and findings, ready for JSON.
    warnings : tuple of str
        What a careful reader should know.
    inputs : tuple of str
        Files that were read.
    station : Station, optional
        Whose sky it is.
    index_map : ndarray, optional
        Clear-sky index of each cell, in place of a sky.
    """

    sky: Sky | None
    period: Period
    record: dict[str, Any] = field(default_factory=dict)
    warnings: tuple[str, ...] = ()
    inputs: tuple[str, ...] = ()
    station: Station | None = None
    index_map: NDArray[np.float32] | None = None

    def albedo(self) -> tuple[float, ...]:
        """Measured albedo of each month, where --albedo asks for the station's."""
        from terrasol.sky.measured import monthly_albedo

        if self.station is None:
            raise click.UsageError("--albedo station needs --station, which is not given")
        return monthly_albedo(self.station, self.period)


def settle_albedo(
    asked: Any, settled: Settled, elevation: Elevation
) -> tuple[dict[str, Any], tuple[str, ...]]:
    """Settings of the ground's albedo: numbers, those of the station, or a raster; and warnings."""
    from terrasol.files.maps import read_map
    from terrasol.light.settings import twelve

    if asked == "station":
        return {"albedo": settled.albedo()}, ()
    if not isinstance(asked, str):
        return {"albedo": twelve(asked, "albedo")}, ()
    layers = read_map(asked, elevation, "albedo", 0.0, 1.0)
    return {"albedo_map": layers}, albedo_doubts(layers, elevation)


def albedo_record(asked: Any, light: LightSettings) -> Any:
    """The albedo as asked for, ready for JSON: null for months that the station did not measure."""
    if asked == "station":
        wanted = {month for _, month in light.period.months}
        return [value if m in wanted else None for m, value in enumerate(light.albedo, 1)]
    return file_record(asked) if isinstance(asked, str) else shortest(light.albedo)


def raster_named(*asked: Any) -> tuple[str, ...]:
    """Those of some options' values that name a raster, in place of numbers or the station."""
    return tuple(each for each in asked if isinstance(each, str) and each != "station")


def albedo_doubts(values: NDArray[np.float32], elevation: Elevation) -> tuple[str, ...]:
    """Warn of cells that a map of the albedo leaves out."""
    effect = f"the plain {ALBEDO_FOR_NOW[0]:g} counts there"
    return map_doubts(values, elevation, "albedo", effect)


@dataclass(frozen=True)
class AskedSky:
    """What a command is told of the sky."""

    model: str
    linke: Any
    aerosol: float | None
    aerosol_380: float | None
    water: float | None
    ozone: float | None
    solar_constant: float
    station: str | None
    station_settings: str | None
    decomposition: str | None
    fill_hours: float | None
    clear_sky_index: Any

    def air(self, albedo: tuple[float, ...]) -> Air:
        """The air that was asked for; see `placed` for the climatology's."""
        from terrasol.sky.clear import Air

        self._check()
        if self.model == "ineichen":
            linke = TURBIDITY_FOR_NOW if self.linke == CLIMATOLOGY else self.linke
            return Air.ineichen(linke, self.solar_constant)
        assert self.aerosol is not None
        assert self.water is not None
        ozone = {} if self.ozone is None else {"ozone_atm_cm": self.ozone}
        return Air.bird(
            self.aerosol,
            self.water,
            aerosol_380nm=self.aerosol_380,
            ground_albedo=sum(albedo) / len(albedo),
            solar_constant=self.solar_constant,
            **ozone,
        )

    def placed(self, air: Air, frame: Frame) -> Air:
        """The same, with the raster's own turbidity where the climatology is asked for."""
        from terrasol.sky.clear import Air, linke_climatology

        if self.model != "ineichen" or self.linke != CLIMATOLOGY:
            return air
        return Air.ineichen(linke_climatology(*frame.centre), self.solar_constant)

    def doubts(self, frame: Frame) -> tuple[str, ...]:
        """Warnings on the climatology, where that is used."""
        import numpy as np

        from terrasol.sky.clear import turbidity_doubts

        if self.model != "ineichen" or self.linke != CLIMATOLOGY:
            return ()
        spread = np.linspace(0, 1, 3)
        rows, columns = (np.round(spread * (size - 1)).astype(int) for size in frame.latitude.shape)
        nodes = np.ix_(rows, columns)
        return turbidity_doubts(frame.centre, frame.latitude[nodes], frame.longitude[nodes])

    def settle(
        self, air: Air, period: str | None, step_seconds: float, elevation: Elevation
    ) -> Settled:
        """Read the station, or take the indices; the sky is clear if neither was given."""
        from terrasol.light.settings import twelve
        from terrasol.sky.cloud import MonthlySky
        from terrasol.sky.period import parse_period

        if isinstance(self.clear_sky_index, str):
            return self._mapped(self.clear_sky_index, parse_period(period), elevation)
        if self.clear_sky_index is not None:
            sky = MonthlySky(air, twelve(self.clear_sky_index, "the clear-sky index"))
            return Settled(sky, parse_period(period), {"clear_sky_index": list(sky.index)})
        if self.station is None:
            return Settled(None, parse_period(period))
        from terrasol.files.tables import read_station
        from terrasol.sky.gaps import LONGEST_HOURS
        from terrasol.sky.measured import measured_sky

        found = measured_sky(
            read_station(self.station, self.station_settings),
            air,
            None if period is None else parse_period(period),
            decomposition=self.decomposition or "dirint",
            fill_hours=LONGEST_HOURS if self.fill_hours is None else self.fill_hours,
            step_seconds=step_seconds,
        )
        told = file_record(self.station)
        doubts = station_doubts(found.station, elevation)
        inputs = [self.station, *([self.station_settings] if self.station_settings else [])]
        record = {"station": told | found.report}
        return Settled(
            found.sky,
            found.period,
            record,
            (*found.warnings, *doubts),
            tuple(inputs),
            found.station,
        )

    def _mapped(self, path: str, period: Period, elevation: Elevation) -> Settled:
        """Read a raster of clear-sky indices."""
        from terrasol.files.maps import read_map
        from terrasol.sky.cloud import LEAST_INDEX, MOST_INDEX

        index = read_map(path, elevation, "clear-sky index", LEAST_INDEX, MOST_INDEX)
        record = {"clear_sky_index": file_record(path)}
        doubts = map_doubts(index, elevation, "clear-sky index", "void in all light")
        return Settled(None, period, record, doubts, inputs=(path,), index_map=index)

    def _check(self) -> None:
        """Refuse options that do not go together."""
        if self.model == "ineichen":
            for name in ("aerosol", "aerosol_380", "water", "ozone"):
                if getattr(self, name) is not None:
                    option = name.replace("_", "-")
                    raise click.UsageError(
                        f"--{option} belongs to --air bird, which is not asked for"
                    )
        elif self.linke != CLIMATOLOGY:
            raise click.UsageError("--linke belongs to --air ineichen, but --air bird is asked for")
        else:
            for name in ("aerosol", "water"):
                if getattr(self, name) is None:
                    raise click.UsageError(f"--air bird needs --{name}")
        if self.station is not None and self.clear_sky_index is not None:
            raise click.UsageError("--station and --clear-sky-index exclude each other")
        if self.station is None:
            for name in ("station_settings", "decomposition", "fill_hours"):
                if getattr(self, name) is not None:
                    option = name.replace("_", "-")
                    raise click.UsageError(f"--{option} belongs to --station, which is not given")


def station_doubts(station: Station, elevation: Elevation) -> tuple[str, ...]:
    """Warn of a station that lies far from the ground it speaks for, or far above or below."""
    import numpy as np
    from pyproj import Geod

    from terrasol.ground.frame import make_frame

    latitude, longitude = make_frame(elevation.shape, elevation.transform, elevation.crs).centre
    place = station.longitude, station.latitude
    away = Geod(ellps="WGS84").inv(*place, longitude, latitude)[2] / 1000.0
    low, high = float(np.nanmin(elevation.heights)), float(np.nanmax(elevation.heights))
    doubts = []
    if away > STATION_AWAY_KM:
        doubts.append(
            f"{station.name} lies {away:.0f} km from the raster's middle: is its place right, and"
            " its sky that of this ground?"
        )
    if not low - STATION_BESIDE_M <= station.height <= high + STATION_BESIDE_M:
        doubts.append(
            f"{station.name} is stated to lie at {station.height:.0f} m, the ground at {low:.0f} to"
            f" {high:.0f} m: is its height right?"
        )
    return tuple(doubts)


def map_doubts(
    values: NDArray[np.float32], elevation: Elevation, quantity: str, effect: str
) -> tuple[str, ...]:
    """Warn of cells of known ground that a map leaves out."""
    import numpy as np

    from terrasol.words import counted

    lacking = np.isnan(values).any(axis=0) & np.isfinite(elevation.heights)
    if not lacking.any():
        return ()
    cells = counted(int(lacking.sum()), "cell")
    return (f"the map of the {quantity} has no value for {cells} of known ground: {effect}",)


def file_record(path: str) -> dict[str, str]:
    """A file and its hash, ready for JSON."""
    from terrasol.files.provenance import sha256

    return {"file": os.path.abspath(path), "sha256": sha256(path)}


def shortest(months: tuple[float, ...]) -> float | tuple[float, ...]:
    """One number for twelve months that do not differ."""
    return months[0] if len(set(months)) == 1 else months


_AIR = (
    click.option(
        "--air",
        "model",
        type=click.Choice(list(CLEAR_SKY_PAPERS)),
        default="ineichen",
        show_default=True,
        help=f"Clear-sky model: {', or '.join(CLEAR_SKY_PAPERS.values())}.",
    ),
    click.option(
        "--linke",
        type=Numbers(CLIMATOLOGY),
        default=CLIMATOLOGY,
        show_default=True,
        help="Linke turbidity (ineichen).",
    ),
    click.option("--aerosol", metavar="DEPTH", type=float, help="Aerosol depth at 500 nm (bird)."),
    click.option(
        "--aerosol-380",
        metavar="DEPTH",
        type=float,
        help="Aerosol depth at 380 nm (bird). [default: from 500 nm after Angstrom]",
    ),
    click.option("--water", metavar="CM", type=float, help="Precipitable water, cm (bird)."),
    click.option(
        "--ozone", metavar="ATM-CM", type=float, help="Ozone, atm-cm (bird). [default: 0.3]"
    ),
    click.option(
        "--solar-constant",
        metavar="W/M2",
        type=float,
        default=SOLAR_CONSTANT,
        show_default=True,
        help="Total solar irradiance at one astronomical unit.",
    ),
)
_CLOUDS = (
    click.option(
        "--station",
        metavar="SERIES",
        help="Measured light, CSV or NetCDF, with SERIES.toml beside it that says what the columns"
        " are: the sky is then the measured one, for all days of the series unless --period says"
        " otherwise.",
    ),
    click.option(
        "--station-settings",
        metavar="TOML",
        help="What the columns of SERIES are. [default: SERIES.toml]",
    ),
    click.option(
        "--decomposition",
        type=click.Choice(["erbs", "disc", "dirint"]),
        help="Model that parts the beam off where only global was measured. [default: dirint]",
    ),
    click.option(
        "--fill-hours",
        metavar="H",
        type=float,
        help="Longest gap of SERIES to fill, in hours of sun. [default: 3]",
    ),
    click.option(
        "--clear-sky-index",
        type=Numbers(raster=True),
        help="Monthly mean of global light by that of a clear sky: clouds without a station. A"
        " RASTER of one band, or of twelve, gives each cell its own.",
    ),
)


def sky_options(command: Callable[..., None]) -> Callable[..., None]:
    """Give a command these options, as one `AskedSky` by the name `asked`."""

    @wraps(command)
    def gathered(*arguments: Any, **given: Any) -> None:
        asked = AskedSky(**{each.name: given.pop(each.name) for each in fields(AskedSky)})
        command(*arguments, asked=asked, **given)

    for decorate in reversed((*_AIR, *_CLOUDS)):
        gathered = decorate(gathered)
    return gathered
