"""The horizon all round as a person on the spot sees it, with the sun's paths."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.outputs import MONTH_NAMES
from terrasol.light.days import Clock
from terrasol.light.minutes import Track, track
from terrasol.show.page import INK, PAPER, POINTS_PER_PIXEL, SOFT, text_width
from terrasol.show.panel import Panel, steps

GROUND: Final = "#d8d2c6"
SUN: Final = "#d98a1f"
CLOCK: Final = "#2f6690"
"""Colours of the terrain, of the sun's paths, and of the hours of a clock."""

COMPASS: Final = ("N", "NE", "E", "SE", "S", "SW", "W", "NW")

SOLSTICES: Final = ((6, 21), (3, 20), (12, 21))
"""Month and day of the solstices and an equinox, whose paths are drawn."""

HOUR_LINES: Final = ((12, 21), (1, 21), (2, 18), (3, 20), (4, 20), (5, 21), (6, 21))
"""Days through whose suns the lines of the hours are drawn: from one solstice to the other."""

Values = NDArray[np.float64]


def tracks_of(
    latitude: float,
    longitude: float,
    height: float,
    clock: Clock,
    year: int,
    days: Sequence[date] = (),
) -> list[Track]:
    """The sun's paths of the solstices, an equinox and other days, the highest first."""
    chosen = {date(year, month, day) for month, day in SOLSTICES} | set(days)
    found = [track(day, latitude, longitude, height, clock) for day in chosen]
    return sorted(found, key=lambda each: (-_top(each), each.day))


def _top(path: Track) -> float:
    return float(path.elevation.max(initial=-90.0))


def view_limits(latitude: float, horizons: Sequence[Values], paths: Sequence[Track]) -> Values:
    """Least and greatest azimuth and elevation that a panel needs, shape (4,) [degrees]."""
    middle = 180.0 if latitude >= 0.0 else 0.0
    top = max(*(float(each.max()) for each in horizons), *(_top(path) for path in paths))
    return np.array([middle - 180.0, middle + 180.0, 0.0, min(top + 9.0, 97.0)])


def draw_skyline(
    panel: Panel,
    horizon: Values,
    paths: Sequence[Track],
    hour_paths: Sequence[Track],
    *,
    plane: Values | None = None,
    clock: bool = False,
    named: bool = True,
) -> None:
    """Draw the horizon and the sun's paths into a panel whose limits are set.

    Parameters
    ----------
    panel : Panel
        Its x is azimuth and y elevation, both in degrees; see `view_limits`.
    horizon : ndarray, shape (azimuths,)
        Equally spaced azimuths, the first due north, clockwise [degrees].
    paths : sequence of Track
        What is drawn and named, the highest first.
    hour_paths : sequence of Track
        From one solstice to the other: hours of true solar time are joined along these.
    plane : ndarray, shape (azimuths,), optional
        Height at which the own slope hides the sun [degrees].
    clock : bool
        Mark the hours of the clock on the paths too.
    named : bool
        Name the paths, and write degrees beside the directions; without, for small panels.
    """
    axes, thin = panel.axes, POINTS_PER_PIXEL
    panel.page.axes.set_zorder(5)  # words lie over the diagram
    middle = sum(axes.get_xlim()) / 2.0
    panel.y_ticks(steps(*axes.get_ylim(), 5))
    around, skyline = _around(horizon)
    axes.fill_between(around, skyline, color=GROUND, zorder=3, linewidth=0.0)
    axes.plot(around, skyline, color=INK, linewidth=1.2 * thin, zorder=5)
    if plane is not None and float(plane.max()) > 0.5:
        line = _around(plane)[1]
        axes.plot(
            around, np.where(line > 0.0, line, np.nan), color=INK, linewidth=1.0 * thin,
            linestyle=(0, (4, 3)), zorder=5,
        )  # fmt: skip
    for path in paths:
        _draw_path(panel, path, middle)
    _draw_hours(panel, hour_paths, middle)
    before = None
    for path in paths:
        name = before = _name(panel, path, middle, before) if named else None
        if clock:
            _mark_clock(panel, path, middle, name)
    _compass(panel, degrees=named)


def _around(horizon: Values) -> tuple[Values, Values]:
    """Azimuths from -360 to 720 and a ring of values along them."""
    count = horizon.size
    azimuth = np.arange(-count, 2 * count + 1, dtype=np.float64) * (360.0 / count)
    return azimuth, np.append(np.tile(horizon, 3), horizon[0])


def _turned(azimuth: Values, middle: float) -> Values:
    """Azimuths within half a turn of the middle."""
    return (azimuth - middle + 180.0) % 360.0 + middle - 180.0


def _draw_path(panel: Panel, path: Track, middle: float) -> None:
    """A day's path: full where it is free, faint behind the ground."""
    azimuth, axes, thin = _turned(path.azimuth, middle), panel.axes, POINTS_PER_PIXEL
    cuts = np.flatnonzero(np.abs(np.diff(azimuth)) > 180.0) + 1
    for a, e in zip(np.split(azimuth, cuts), np.split(path.elevation, cuts), strict=True):
        axes.plot(a, e, color=SUN, linewidth=2.0 * thin, zorder=2)
        axes.plot(a, e, color=SUN, linewidth=0.9 * thin, alpha=0.5, zorder=4)


def _draw_hours(panel: Panel, paths: Sequence[Track], middle: float) -> None:
    """Lines of equal true solar time from solstice to solstice, named at the highest end."""
    axes, thin = panel.axes, POINTS_PER_PIXEL
    for hour in range(25):
        seen = [(p.azimuth[k], p.elevation[k]) for p in paths for k in _at(p.solar, hour)]
        if not seen:
            continue
        azimuth, elevation = np.array(seen).T
        azimuth = _turned(azimuth, middle)
        if np.ptp(azimuth) < 180.0:
            axes.plot(azimuth, elevation, color=SUN, linewidth=0.7 * thin, alpha=0.7, zorder=2)
        top = int(np.argmax(elevation))
        x, y = panel.place(float(azimuth[top]), float(elevation[top]))
        if elevation[top] > 10.0 and panel.x + 8 < x < panel.x + panel.width - 8:
            word = f"{hour} h" if hour == 12 else f"{hour}"
            aside = _aside(float(azimuth[top]), middle)
            at = x + 0.9 * panel.tick * aside, y - (0.5 - 0.45 * abs(aside)) * panel.tick
            panel.page.text(*at, word, panel.tick, colour=SUN, across="center", halo=PAPER)


def _aside(azimuth: float, middle: float) -> float:
    """How far from the middle, -1 to 1: labels lie beside steep parts of a path, not on them."""
    return float(np.clip((azimuth - middle) / 80.0, -1.0, 1.0))


def _at(hours: Values, hour: float) -> list[int]:
    """Which minute of a path lies at an hour: one or none."""
    if not hours.size:
        return []
    k = int(np.argmin(np.abs(hours - hour)))
    return [k] if abs(hours[k] - hour) <= 0.5 / 60.0 + 1e-6 else []


def _mark_clock(
    panel: Panel, path: Track, middle: float, named: tuple[float, float, float] | None
) -> None:
    """Open dots at the full hours of the clock, named where there is room.

    `named` is what `_name` gave of the path's own name: its middle and half its width [pixels].
    """
    last, tick = -np.inf, panel.tick * 0.9
    for hour in range(-24, 49):
        for k in _at(path.clock, hour):
            azimuth = float(_turned(path.azimuth[k], middle))
            panel.axes.plot(
                azimuth, path.elevation[k], "o", color=CLOCK, markerfacecolor=PAPER,
                markersize=3.6 * POINTS_PER_PIXEL, markeredgewidth=1.1 * POINTS_PER_PIXEL,
                zorder=6,
            )  # fmt: skip
            x, y = panel.place(azimuth, float(path.elevation[k]))
            aside = _aside(azimuth, middle)
            x -= 1.2 * tick * aside
            y += (1.3 - 0.9 * abs(aside)) * tick
            taken = named is not None and abs(x - named[0]) < named[1]
            if x - last > 1.6 * tick and panel.y + panel.height - y > tick and not taken:
                word = f"{hour % 24}"
                panel.page.text(x, y, word, tick, colour=CLOCK, across="center", halo=PAPER)
                last = x


def _name(
    panel: Panel, path: Track, middle: float, before: tuple[float, float, float] | None
) -> tuple[float, float, float] | None:
    """Write the day below its path's highest point; return its middle, half its width and its y.

    It goes to the right of the name before, if that would lie under it.
    """
    if not path.elevation.size:
        return None
    top = int(np.argmax(path.elevation))
    x, y = panel.place(float(_turned(path.azimuth[top], middle)), float(path.elevation[top]))
    name = f"{path.day.day} {MONTH_NAMES[path.day.month - 1]}"
    half = text_width(name, panel.tick, bold=True) / 2.0
    if before is not None and abs(y - before[2]) < 1.2 * panel.tick:
        x, y = before[0] + before[1] + half, before[2]
    x = float(np.clip(x, panel.x + half, panel.x + panel.width - half))
    panel.page.text(
        x, y + 1.4 * panel.tick, name, panel.tick, bold=True, across="center", halo=PAPER
    )
    return x, half + panel.tick, y


def _compass(panel: Panel, degrees: bool) -> None:
    """Names of eight directions below, and their degrees if asked for."""
    low, high = panel.axes.get_xlim()
    azimuths = np.arange(low, high + 1.0, 45.0)
    names = [COMPASS[int(a // 45) % 8] + (f" {a % 360:.0f}°" if degrees else "") for a in azimuths]
    panel.x_ticks(list(azimuths), names, down=panel.tick + 6)
    panel.axes.vlines(azimuths[1:-1], 0.0, panel.axes.get_ylim()[1], color=SOFT, alpha=0.25,
                      linewidth=0.6 * POINTS_PER_PIXEL, zorder=0)  # fmt: skip
