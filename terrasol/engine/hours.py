"""Hours of sun over a whole raster, as a plan that can be run, and from Python."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy.interpolate import RegularGridInterpolator

from terrasol.constants import REFRACTION_COEFFICIENT
from terrasol.engine import outputs
from terrasol.engine.blocks import Arrays, status_of
from terrasol.engine.datasets import attributes, clear_air, run_in_memory, scene_of
from terrasol.engine.ground_work import BlockGround, Ground
from terrasol.engine.horizon_gap import horizon_gap
from terrasol.engine.job import (
    NO_SCENE,
    Plan,
    Run,
    Summary,
    check_blocks,
)
from terrasol.engine.plan import Block, Progress, check_threads, default_threads
from terrasol.files.layers import Layer, Sink
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame, make_frame
from terrasol.ground.sightline import Sightlines
from terrasol.light.days import Days, parse_clock, parse_days, strip_days
from terrasol.light.hours import (
    AZIMUTHS,
    BRIGHT_BEAM,
    HoursSettings,
    TimeTables,
    strip_hours,
)
from terrasol.light.irradiation import Strip
from terrasol.light.latitudes import MIXED_BYTES
from terrasol.sky.clear import Air
from terrasol.sky.cloud import MonthlySky
from terrasol.sky.irradiance import Sky
from terrasol.sky.period import Period, parse_period
from terrasol.sky.suntable import height_knots, latitude_knots

SECONDS_A_CELL_AND_DAY = 12e-6
"""What a core needs to walk along one day's sun, for the estimate only."""

SECONDS_A_TABLE_AND_HEIGHT = 0.15
"""What a core needs for a year's table in steps of a minute, for the estimate only."""

SUN = "hours of direct sun, terrain shade and own slope counted, sky without clouds"
BRIGHT = (
    f"hours with the beam over {BRIGHT_BEAM:g} W m-2 facing the sun, terrain shade and own slope"
    " counted"
)


def day_labels(settings: HoursSettings) -> tuple[str, ...]:
    """One label a day: day and month in a typical year, else the date."""
    if settings.period.typical:
        return tuple(f"{d.day} {outputs.MONTH_NAMES[d.month - 1]}" for d in settings.days)
    return tuple(str(day) for day in settings.days)


def hours_layers(settings: HoursSettings) -> tuple[Layer, ...]:
    """Layers of hours: of the whole period and its months, and of the chosen days."""
    whole = "year" if settings.period.whole_year else "period"
    months = outputs.month_labels(settings)
    cloudy = "monthly index" if isinstance(settings.sky, MonthlySky) else "measured"
    sky = "clear" if isinstance(settings.sky, Air) else cloudy
    tags = {"period": settings.period.label}
    fine = float(2.0 ** np.ceil(np.log2(max(settings.period.days, 1) * 24.0 / 2.0**18)))
    month_fine = min(fine, 2.0**-8)
    sun, bright = "duration of direct sun", "duration of bright sunshine"
    layers = [
        Layer(f"sun_hours_{whole}", (sun,), "h", SUN, resolution=fine, tags=tags),
        Layer("sun_hours_months", months, "h", SUN, resolution=month_fine, tags=tags),
    ]
    standard, tags = "duration_of_sunshine", {**tags, "sky": sky}
    layers += [
        Layer(f"bright_hours_{whole}", (bright,), "h", BRIGHT, standard, "float32", fine, tags),
        Layer("bright_hours_months", months, "h", BRIGHT, standard, "float32", month_fine, tags),
    ]
    return (*layers, *_day_layers(settings))


def _day_layers(settings: HoursSettings) -> tuple[Layer, ...]:
    """Layers with a band a day."""
    if not settings.days:
        return ()
    labels = day_labels(settings)
    on_clock = f"hours since 0:00, {settings.clock.words}; void without sun that day"
    tags = {"clock": settings.clock.name}
    return (
        Layer("first_sun", labels, "h", f"first direct sun of the day, {on_clock}", tags=tags),
        Layer("last_sun", labels, "h", f"last direct sun of the day, {on_clock}", tags=tags),
        Layer("sun_hours_days", labels, "h", "hours of direct sun of the day", tags=tags),
        Layer(
            "sun_interruptions",
            labels,
            "1",
            "times the direct sun is lost for a minute or longer between first and last sun",
            resolution=1.0,
            tags=tags,
        ),
    )


@dataclass
class HoursPlan(Plan):
    """A job that counts hours of sun.

    Parameters
    ----------
    hours : HoursSettings
        Which hours; the plan's `settings` of light are None.
    """

    hours: HoursSettings = None  # type: ignore[assignment]

    @property
    def memory_bytes(self) -> int:
        """Peak memory to expect, the interpreter included."""
        latitudes, heights = self.ranges
        table = self.hours.table_bytes(height_knots(*heights).size)
        work = 8.0 * 65536 * len(self.hours.days) * 16
        knots = latitude_knots(*latitudes).size
        return int(super().memory_bytes + knots * table + max(MIXED_BYTES, 3.0 * table) + work)

    def seconds(self, threads: int) -> float:
        """Time to expect."""
        latitudes, heights = self.ranges
        share = self.hours.period.days / 365.0 * 60.0 / self.hours.step_seconds
        tables = share * latitude_knots(*latitudes).size * height_knots(*heights).size
        work = SECONDS_A_TABLE_AND_HEIGHT * tables
        work += SECONDS_A_CELL_AND_DAY * self.cells * len(self.hours.days)
        return super().seconds(threads) + work / max(threads, 1)

    def run(
        self, sink: Sink, threads: int | None = None, progress: Progress | None = None
    ) -> Summary:
        """Do the work; see `Plan.run`."""
        threads = default_threads() if threads is None else threads
        check_threads(threads)
        return _HoursRun(self, threads, progress or (lambda share, stage: None)).do(sink)


def plan_hours(elevation: Elevation, settings: HoursSettings, scene: Scene = NO_SCENE) -> HoursPlan:
    """Plan the hours of sun of every cell.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    settings : HoursSettings
        Which hours.
    scene : Scene
        What stands beyond and above the ground, from `make_scene`.

    Returns
    -------
    HoursPlan

    Raises
    ------
    InputError
        A raster that cannot be placed on the Earth, or with cells too coarse for its blocks.
    """
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    check_blocks(frame)
    layers = [*hours_layers(settings)]
    if scene.highest is not None:
        layers.append(outputs.horizon_gap_layer(scene.highest, None))
    if elevation.filled is not None:
        layers.append(outputs.STATUS)
    azimuths, refraction = settings.azimuths, settings.refraction
    return HoursPlan(
        elevation, frame, azimuths, refraction, None, tuple(layers), scene, hours=settings
    )


class _HoursRun(Run):
    """One run of a plan of hours: its stages in order."""

    plan: HoursPlan

    def do(self, sink: Sink) -> Summary:
        """All stages."""
        plan = self.plan
        for layer in plan.layers:
            sink.open(layer)
        tables = TimeTables.over(plan.hours, plan.frame.centre[1], *plan.ranges)
        tasks = [partial(tables.fill, i) for i in range(tables.latitudes.size)]
        for _ in self._stage("tables of time", tasks, 0.15):
            pass
        ground = self._ground()
        days = self._days()
        sights = None
        if days is not None:
            sights = Sightlines.over(plan.elevation, plan.frame, plan.refraction, ground.obstacles)
        names = [layer.name for layer in plan.layers]
        work = partial(_block_hours, ground, names, tables, days, sights, plan.blocks)
        totals, gaps = self._write_blocks(sink, work)
        self._conclude(ground, totals, None)
        self._tell_of_scene(gaps)
        level = tables.level(plan.frame.centre[0], ground.far.datum).sum(axis=1)
        for name, value in zip(("sun", "bright"), level, strict=True):
            self.summary.numbers[f"level_ground_{name}_hours"] = round(float(value), 2)
        return self.summary

    def _days(self) -> Days | None:
        """The sun of the chosen days, if there are any."""
        hours = self.plan.hours
        if not hours.days:
            return None
        return Days.over(hours.days, self.plan.frame.centre[1], hours.clock, hours.azimuths)


def _block_hours(
    ground: Ground,
    names: list[str],
    tables: TimeTables,
    days: Days | None,
    sights: Sightlines | None,
    windows: Mapping[Block, Sequence[Block]],
    block: Block,
) -> Arrays:
    """Everything that is written of one block, by layer name."""
    piece = BlockGround(ground, block)
    hours, walked, gap = [], [], []
    for rows in piece.pieces():
        strip = piece.strip(rows)
        hours.append(strip_hours(strip, tables))
        if "horizon_gap" in names:
            gap.append(horizon_gap(piece, strip, rows, None))
        if days is not None and sights is not None:
            walked.append(_walk(piece, strip, rows, days, sights, windows[block]))
    sun, bright = np.concatenate(hours, axis=2)
    arrays: Arrays = {"sun_hours_months": sun, "bright_hours_months": bright}
    for name, months in (("sun_hours", sun), ("bright_hours", bright)):
        whole = next(n for n in names if n in (f"{name}_year", f"{name}_period"))
        arrays[whole] = months.sum(axis=0, keepdims=True)
    if days is not None:
        first, last, shone, gaps = np.concatenate(walked, axis=2)
        east = _longitude_from_centre(ground.frame, block)
        arrays["first_sun"] = days.on_clock(first, east)
        arrays["last_sun"] = days.on_clock(last, east)
        arrays["sun_hours_days"] = shone / np.float32(60.0)
        arrays["sun_interruptions"] = gaps
    if gap:
        arrays["horizon_gap"] = np.concatenate(gap, axis=1)
    if "status" in names:
        arrays["status"] = status_of(ground.elevation, block)[None]
    return arrays


def _walk(
    piece: BlockGround,
    strip: Strip,
    rows: range,
    days: Days,
    sights: Sightlines,
    windows: Sequence[Block],
) -> NDArray[np.float32]:
    """First and last sun and what is between, see `strip_days`; NaN where it is not wanted."""
    block = piece.block
    here = Block(block.row + rows.start, block.column, len(rows), block.columns)
    spans = _spans(here, windows)
    out = np.full((4, days.declination.shape[0], *strip.heights.shape), np.nan, np.float32)
    beyond = piece.beyond(rows) if spans else None
    for span in spans:
        window = (
            slice(here.row, here.row + here.rows),
            slice(here.column + span.start, here.column + span.stop),
        )
        part = None if beyond is None else np.ascontiguousarray(beyond[:, :, span])
        views = sights.outlooks(window, piece.middle, part)
        out[..., span] = strip_days(strip, days, views, span)
    return out


def _spans(here: Block, windows: Sequence[Block]) -> list[slice]:
    """Columns, counted from the first, of some rows that meet windows, without overlaps.

    Examples
    --------
    >>> some = [Block(0, 8, 9, 4), Block(2, 3, 2, 2), Block(4, 4, 2, 4), Block(5, 14, 1, 1)]
    >>> _spans(Block(2, 2, 3, 16), some)
    [slice(1, 10, None)]
    """
    shared = (here.shared(window) for window in windows)
    edges = sorted((s[1].start - here.column, s[1].stop - here.column) for s in shared if s)
    joined: list[slice] = []
    for start, stop in edges:
        if joined and start <= joined[-1].stop:
            joined[-1] = slice(joined[-1].start, max(joined[-1].stop, stop))
        else:
            joined.append(slice(start, stop))
    return joined


def _longitude_from_centre(frame: Frame, block: Block) -> NDArray[np.float64]:
    """Longitude of a block's cells less that of the raster's centre, the short way [degrees]."""
    turn = np.radians(frame.longitude - frame.centre[1])
    lattice = np.degrees(np.angle(np.exp(1j * turn)))
    rows = np.arange(block.row, block.row + block.rows)
    columns = np.arange(block.column, block.column + block.columns)
    places = np.stack(np.meshgrid(rows, columns, indexing="ij"), axis=-1)
    return RegularGridInterpolator((frame.rows, frame.columns), lattice)(places)


def sun_hours(
    elevation: Elevation,
    period: str | Period | None = None,
    sky: Sky | None = None,
    *,
    days: str | Sequence[str] | None = None,
    clock: str = "solar",
    azimuths: int = AZIMUTHS,
    step_seconds: float = 60.0,
    refraction: float = REFRACTION_COEFFICIENT,
    far: Elevation | None = None,
    surface: Elevation | None = None,
    threads: int | None = None,
) -> xr.Dataset:
    """Hours of direct sun of every cell, and the first and last sun of chosen days.

    The sun counts while its upper limb stands above the horizon: the highest of the terrain,
    the cell's own slope, and the level.

    Parameters
    ----------
    elevation : Elevation
        The ground.
    period : str or Period, optional
        See `parse_period`; a typical year by default.
    sky : Sky, optional
        Whose beam says when sunshine is bright: an `Air`, or a measured sky; by default the
        clear air of Ineichen and Perez with the turbidity climatology at the raster's centre.
    days : str or sequence of str, optional
        Days such as ``"2025-06-21,2025-12-21"``, or ``"none"``; by default the 21st of each
        month in the period.
    clock : str
        What the time of day is told in: ``"solar"`` for true solar time at the cell, an offset
        from UTC such as ``"+01:00"``, or a time zone such as ``"Europe/Zurich"``.
    azimuths : int
        Number of horizon azimuths, a multiple of 4 from 8 to 720.
    step_seconds : float
        Time step of the sun for the sums.
    refraction : float
        Coefficient k of terrestrial refraction.
    far : Elevation, optional
        A larger, coarser model in any CRS: its ridges beyond the edge and in voids count too.
    surface : Elevation, optional
        A surface model: trees and buildings hide the sun, slope stays that of the ground.
    threads : int, optional
        Default: all cores that may be used.

    Returns
    -------
    xarray.Dataset
        ``sun_hours_year`` and ``bright_hours_year`` (or ``_period``) (y, x),
        ``sun_hours_months`` and ``bright_hours_months`` (month, y, x) [h]; with days also
        ``first_sun``, ``last_sun``, ``sun_hours_days`` [h] and ``sun_interruptions`` [1], each
        (day, y, x). NaN where void, and for first, last and interruptions where a day has no
        sun.

    Raises
    ------
    SettingError
        A value out of its range.
    InputError
        A raster that cannot be placed on the Earth.

    References
    ----------
    WMO-No. 8, Guide to Instruments and Methods of Observation, chapter 8 (120 W m-2). Reda and
    Andreas (2008), NREL/TP-560-34302 (upper limb, refraction at the horizon).

    Examples
    --------
    >>> import numpy as np
    >>> plain = Elevation.from_array(
    ...     np.zeros((40, 40)), (30, 0, 5e5, 0, -30, 5.2e6), "EPSG:32632"
    ... )
    >>> day = sun_hours(plain, "2025-06-21", Air.ineichen(3.0), azimuths=16)
    >>> [round(float(day[name][0, 20, 20]), 1) for name in ("first_sun", "last_sun")]
    [4.1, 19.9]
    """
    scene = scene_of(elevation, far, surface)
    if not isinstance(period, Period):
        period = parse_period(period)
    if sky is None:
        sky = clear_air(elevation)
    settings = HoursSettings(
        period,
        sky,
        parse_days(days, period),
        parse_clock(clock),
        azimuths,
        step_seconds,
        refraction,
    )
    return run_in_memory(plan_hours(elevation, settings, scene), threads, _labelled)


def _labelled(plan: Plan, layer: Layer, values: NDArray[Any]) -> xr.DataArray:
    """One layer as a DataArray with names, unit and coordinates."""
    attrs = attributes(layer)
    if layer.name.endswith("_months"):
        return xr.DataArray(values, {"month": list(layer.bands)}, ("month", "y", "x"), attrs=attrs)
    if "clock" in layer.tags:
        attrs["clock"] = layer.tags["clock"]
        return xr.DataArray(values, {"day": list(layer.bands)}, ("day", "y", "x"), attrs=attrs)
    return xr.DataArray(values[0], dims=("y", "x"), attrs=attrs)
