"""Pictures of a snow season: the area's hydrograph, bands of height, melt-out."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Final

import matplotlib
import numpy as np
from numpy.typing import NDArray

from terrasol import __version__
from terrasol.engine.melt_tables import DEPTHS, SeasonTables
from terrasol.engine.outputs import MONTH_NAMES
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame
from terrasol.practice.snow_point import StationCheck
from terrasol.show.key import SMALL, date_text, draw_notes, number
from terrasol.show.maps import SUBTITLE, TITLE, overview_png
from terrasol.show.page import PAPER, POINTS_PER_PIXEL, SOFT, Page, clip, text_width, wrap
from terrasol.show.panel import Panel, steps

WIDTH, MARGIN, LEFT = 1360, 62, 116
HEAD, GAP = 214, 118
"""Measures of the sheets [pixels]."""

SNOW, RAIN = "#8fb3d1", "#2d5f8b"
MELT, RUNOFF, WATER = "#c4633f", "#24262b", "#41769f"
COVER = "#9a9d93"
"""Colours: cold for what falls and lies, warm for what melts."""

MOST_NAMED: Final = 22
"""Bands that the key has room for."""

NAME: Final = 13.0
"""Letters of names at curves [pixels]."""

CROWD: Final = 0.08
"""Share of a diagram's height under which curves are too close for names (judgement)."""

LATE_IS_BRIGHT: Final = "viridis"
"""Colours of melt-out, dark where the ground is bare early: perceptually even, read by colour-blind
eyes and in grey, and full at both ends, so that late dates stand out from the paper."""


def hydrograph_png(
    tables: SeasonTables, *, title: str, subtitle: str, notes: Sequence[str], spread: str
) -> bytes:
    """Draw what falls, melts and lies on the area, day by day.

    Parameters
    ----------
    tables : SeasonTables
    title, subtitle : str
    notes : sequence of str
        What the sheet is and is not.
    spread : str
        What the pale bands are, in words; empty if there are none.
    """
    heights = (130, 320, 240)
    lines = _broken([f"Pale bands: {spread}.", *notes] if spread else notes)
    page = Page(WIDTH, HEAD + sum(heights) + 2 * GAP + 70 + 24 * len(lines) + 40)
    _head(page, title, subtitle)
    top = HEAD
    _draw_fall(page, tables, top, heights[0])
    top += heights[0] + GAP
    _draw_flow(page, tables, top, heights[1], spread)
    top += heights[1] + GAP
    _draw_store(page, tables, top, heights[2])
    _foot(page, lines, top + heights[2] + 62)
    return page.png(Title=title, Software=f"terrasol {__version__}")


def station_png(check: StationCheck, *, title: str, notes: Sequence[str]) -> bytes:
    """Draw the snow water at the station, modelled beside observed, day by day.

    Parameters
    ----------
    check : StationCheck
    title : str
    notes : sequence of str
        How well they agree, and what the sheet is not.
    """
    lines = _broken(notes)
    height = 420
    page = Page(WIDTH, HEAD + height + 70 + 24 * len(lines) + 40)
    _head(page, title, f"Snow water at the station, {check.dates[0]} to {check.dates[-1]}")
    panel = Panel(page, LEFT, HEAD, WIDTH - MARGIN - LEFT, height)
    curves = [check.observed, check.modelled]
    curves += [check.unfitted] if check.unfitted is not None else []
    high = 1.08 * max(float(np.nanmax(np.stack(curves))), 1.0)
    _axes(panel, check.dates, high, "Snow water", "mm, end of day")
    thin, day = POINTS_PER_PIXEL, np.arange(check.dates.size) + 0.5
    entries = [("observed", RUNOFF, "dots"), ("modelled", WATER, "line")]
    if check.unfitted is not None:
        panel.axes.plot(day, check.unfitted, color=MELT, linewidth=1.6 * thin,
                        linestyle=(0, (4, 2.5)))  # fmt: skip
        entries.append(("modelled before the fit", MELT, "dashed"))
    panel.axes.plot(day, check.modelled, color=WATER, linewidth=2.6 * thin)
    panel.axes.plot(day, check.observed, linestyle="none", marker="o", color=RUNOFF,
                    markersize=3.4 * thin, markeredgewidth=0.0)  # fmt: skip
    _key(page, HEAD - 18, entries)
    _foot(page, lines, HEAD + height + 62)
    return page.png(Title=title, Software=f"terrasol {__version__}")


def bands_png(tables: SeasonTables, *, title: str, subtitle: str, notes: Sequence[str]) -> bytes:
    """Draw snow water, runoff input and covered share of each band of height, day by day."""
    heights = (300, 300, 220)
    lines = _broken(notes)
    page = Page(WIDTH, HEAD + sum(heights) + 2 * GAP + 70 + 24 * len(lines) + 40)
    _head(page, title, subtitle)
    kept = [b for b in range(tables.edges.size - 1) if tables.area[b].sum() > 0.0]
    colours = matplotlib.colormaps["viridis"](np.linspace(0.0, 0.88, max(len(kept), 2)))
    top = HEAD
    for name, words, unit, height, days in (
        ("snow_water_mm", "Snow water", "mm, end of day", heights[0], 1),
        ("runoff_input_mm", "Runoff input", "mm a day, mean of 7 days", heights[1], 7),
        ("snow_covered_share", "Covered by snow", "share, mean of 7 days", heights[2], 7),
    ):
        panel = Panel(page, LEFT, top, WIDTH - MARGIN - LEFT - 150, height)
        values = [_running(tables.bands[:, b, DEPTHS.index(name)], days) for b in kept]
        most = max(float(np.nanmax(v)) for v in values) if kept else 1.0
        _axes(panel, tables.dates, 1.08 * most if most > 0.0 else 1.0, words, unit)
        for b, colour, curve in zip(kept, colours, values, strict=False):
            panel.axes.plot(_days(tables), curve, color=colour, linestyle=_stroke(b)[1],
                            linewidth=2.0 * POINTS_PER_PIXEL)  # fmt: skip
        if name != "runoff_input_mm":  # there the curves cross too often
            _name_curves(panel, tables, kept, values, at_peak=name == "snow_water_mm")
        top += height + GAP
    _draw_band_key(page, tables, kept, colours)
    _foot(page, lines, top - GAP + 62)
    return page.png(Title=title, Software=f"terrasol {__version__}")


def melt_out_png(
    elevation: Elevation,
    frame: Frame,
    days: NDArray[np.float32],
    first_day: np.datetime64,
    *,
    lies: NDArray[np.bool_] | None = None,
    title: str,
    subtitle: str,
    notes: Sequence[str],
) -> bytes:
    """Draw the first day that ended without snow after the greatest, as a map of dates.

    `lies` tells where snow still lies, of the ground without a day.
    """
    unknown = bool(np.isnan(elevation.heights).any())
    return overview_png(
        elevation,
        days,
        title=title,
        subtitle=subtitle,
        quantity="First day that ended bare",
        unit=f"date; season from {first_day}",
        notes=notes,
        frame=frame,
        colour_map=LATE_IS_BRIGHT,
        first_day=first_day,
        void_words="no snow came" + (", or no data" if unknown else ""),
        marked=lies,
        marked_words="snow still lies",
    )


def _head(page: Page, title: str, subtitle: str) -> None:
    room = page.width - MARGIN - LEFT
    page.text(LEFT, 70, clip(title, TITLE, room, bold=True), TITLE, bold=True)
    page.text(LEFT, 106, clip(subtitle, SUBTITLE, room), SUBTITLE, colour=SOFT)


def _broken(notes: Sequence[str]) -> list[str]:
    return [line for note in notes for line in wrap(note, SMALL, WIDTH - MARGIN - LEFT)]


def _foot(page: Page, lines: Sequence[str], top: float) -> None:
    draw_notes(page, LEFT, top, lines)
    page.text(LEFT, page.height - 24, f"terrasol {__version__}", SMALL, colour=SOFT)


def _days(tables: SeasonTables) -> NDArray[np.floating]:
    """Middle of each day on the time axis."""
    return np.arange(tables.dates.size) + 0.5


def _running(values: NDArray[np.floating], days: int) -> NDArray[np.floating]:
    """Mean of the days around, fewer at the ends."""
    ones = np.ones(min(days, values.size))
    whole = np.convolve(np.ones_like(values), ones, "same")
    return np.convolve(values, ones, "same") / whole


def _axes(panel: Panel, dates: NDArray[np.datetime64], high: float, words: str, unit: str) -> None:
    """Range, heading, months below and lines across."""
    panel.limits(0.0, float(dates.size), 0.0, high)
    panel.y_ticks([tick for tick in steps(0.0, high, 4) if tick >= 0.0])
    panel.heading(words, unit)
    width = panel.width / dates.size
    if dates.size <= 62:
        every = 7 if dates.size > 16 else 1
        at = list(range(0, dates.size, every))
        panel.x_ticks([k + 0.5 for k in at], [date_text(dates[k]) for k in at])
        return
    middles: list[float] = []
    names: list[str] = []
    of = dates.astype("M8[M]")
    months = list(dict.fromkeys(str(month) for month in of))
    for month in months:
        inside = np.flatnonzero(of == np.datetime64(month))
        if inside.size * width > 34:
            middles.append(float(inside.mean()) + 0.5)
            year, number_of = month.split("-")
            name = MONTH_NAMES[int(number_of) - 1][:3]
            names.append(f"{name} {year}" if number_of == "01" or month == months[0] else name)
        if inside[0] > 0:
            panel.axes.axvline(inside[0], color="#e4e1da", linewidth=POINTS_PER_PIXEL, zorder=0)
    panel.x_ticks(middles, names)


def _bars(panel: Panel, low: NDArray[np.float64], high: NDArray[np.float64], colour: str) -> None:
    edges = np.arange(high.size + 1)
    panel.axes.stairs(high, edges, baseline=low, fill=True, facecolor=colour, edgecolor="none")


def _draw_fall(page: Page, tables: SeasonTables, top: float, height: float) -> None:
    """Rain on top of snow."""
    panel = Panel(page, LEFT, top, WIDTH - MARGIN - LEFT, height)
    snow, rain = tables.column("snowfall_mm"), tables.column("rain_mm")
    high = max(1.08 * float((snow + rain).max()), 1.0)
    _axes(panel, tables.dates, high, "Precipitation", "mm a day on map area")
    _bars(panel, np.zeros_like(snow), snow, SNOW)
    _bars(panel, snow, snow + rain, RAIN)
    _key(page, top - 18, (("snow", SNOW, "box"), ("rain", RAIN, "box")))


def _draw_flow(page: Page, tables: SeasonTables, top: float, height: float, spread: str) -> None:
    """Melt with its spread, and runoff input."""
    panel = Panel(page, LEFT, top, WIDTH - MARGIN - LEFT, height)
    melt, runoff = tables.column("melt_mm"), tables.column("runoff_input_mm")
    high = max(float(melt.max()), float(runoff.max()), 1.0)
    entries = [
        ("melt", MELT, "line"),
        ("runoff input: outflow and rain on bare ground", RUNOFF, "thin"),
    ]
    if spread:
        low, most = tables.range_of("melt_mm")
        high = max(high, float(most.max()))
        panel.axes.fill_between(_days(tables), low, most, color=MELT, alpha=0.26, linewidth=0.0)
    _axes(panel, tables.dates, 1.08 * high, "Melt and runoff input", "mm a day on map area")
    thin = POINTS_PER_PIXEL
    panel.axes.plot(_days(tables), runoff, color=RUNOFF, linewidth=1.1 * thin)
    panel.axes.plot(_days(tables), melt, color=MELT, linewidth=2.4 * thin)
    _key(page, top - 18, entries)


def _draw_store(page: Page, tables: SeasonTables, top: float, height: float) -> None:
    """Snow water with its spread; the covered share on a scale of its own."""
    panel = Panel(page, LEFT, top, WIDTH - MARGIN - LEFT, height)
    water, cover = tables.column("snow_water_mm"), tables.column("snow_covered_share")
    low = most = water
    if tables.members.shape[1]:
        low, most = tables.range_of("snow_water_mm")
        panel.axes.fill_between(_days(tables), low, most, color=WATER, alpha=0.26, linewidth=0.0)
    full = max(float(most.max()), 1.0)
    high = 1.16 * full
    _axes(panel, tables.dates, high, "Snow water", "mm on map area, end of day")
    thin = POINTS_PER_PIXEL
    panel.axes.plot(_days(tables), water, color=WATER, linewidth=2.4 * thin)
    panel.axes.plot(_days(tables), cover * full, color=COVER, linewidth=1.4 * thin,
                    linestyle=(0, (4, 2.5)))  # fmt: skip
    x = LEFT + panel.width
    for share in (0.5, 1.0):
        y = top + height * (1.0 - share * full / high)
        page.text(x + 5, y, f"{100.0 * share:.0f} %", 14.0, colour=SOFT, down="center")
    k = int(water.argmax())
    words = f"{number(water[k], 1.0)} mm on {date_text(tables.dates[k])}"
    at = LEFT + (k + 0.5) / tables.dates.size * panel.width
    at = min(max(at, LEFT + 80.0), LEFT + panel.width - 80.0)
    level = top + height * (1.0 - most[k] / high) - 9
    page.text(at, level, words, SMALL, across="center", halo=PAPER)
    _key(
        page,
        top - 18,
        (("snow water", WATER, "line"), ("share covered, to 100 %", COVER, "dashed")),
    )


def _key(page: Page, y: float, entries: Sequence[tuple[str, str, str]]) -> None:
    """What lines and areas are, at the right end."""
    x = WIDTH - MARGIN - sum(text_width(words, SMALL) + 70 for words, _, _ in entries) + 26
    for words, colour, kind in entries:
        if kind == "box":
            page.box(x, y - 13, 30, 14, fill=colour)
        elif kind == "dots":
            for k in (4, 15, 26):
                page.box(x + k - 2, y - 8, 4, 4, fill=colour)
        elif kind == "dashed":
            dashes = [[(x + k, y - 6), (x + k + 7, y - 6)] for k in (0, 12, 24)]
            page.lines(dashes, colour=colour, line=1.6)
        else:
            line = 2.4 if kind == "line" else 1.2
            page.lines([[(x, y - 6), (x + 30, y - 6)]], colour=colour, line=line)
        page.text(x + 38, y, words, SMALL)
        x += text_width(words, SMALL) + 70


def _stroke(band: int) -> tuple[list[tuple[int, int]], Any]:
    """Strokes of a band's line in the key, and its style: neighbours are told apart."""
    if band % 2:
        return [(0, 10), (14, 24)], (0, (6, 2))
    return [(0, 24)], "solid"


def _band_name(tables: SeasonTables, band: int) -> str:
    return f"{tables.edges[band]:g}–{tables.edges[band + 1]:g}"


def _every(kept: Sequence[int]) -> int:
    """How many bands share one name, where they are many."""
    return max(-(-len(kept) // MOST_NAMED), 1)


def _name_curves(
    panel: Panel,
    tables: SeasonTables,
    kept: Sequence[int],
    values: Sequence[NDArray[np.floating]],
    at_peak: bool,
) -> None:
    """Name each band above the peak of its curve, or where that last falls to half of it.

    A name that would cover another, pass the diagram's end or stand in the crowd of curves at its
    foot is left out.
    """
    crowd = CROWD * panel.axes.get_ylim()[1]
    taken: list[tuple[float, float]] = []
    for b, curve in list(zip(kept, values, strict=True))[:: -_every(kept)]:
        most = float(np.nanmax(curve))
        if not most > crowd:
            continue
        k = int(np.nanargmax(curve)) if at_peak else int(np.flatnonzero(curve >= 0.5 * most)[-1])
        words = _band_name(tables, b)
        wide = text_width(words, NAME)
        x, y = panel.place(k + 0.5, float(curve[k]))
        x, y = (x - wide / 2.0, y - 0.8 * NAME) if at_peak else (x + 5.0, y)
        if at_peak:
            x = min(max(x, panel.x), panel.x + panel.width - wide)
        clear = all(abs(x - left) > wide or abs(y - level) > NAME for left, level in taken)
        if clear and x + wide <= panel.x + panel.width:
            taken.append((x, y))
            panel.page.text(x, y, words, NAME, halo=PAPER, down="center")


def _draw_band_key(page, tables, kept, colours) -> None:
    """Bands from the highest down, with their area; every so many of them where they are many."""
    x, y = WIDTH - MARGIN - 128, float(HEAD)
    page.text(x, y - 18, "Height, m", SMALL, bold=True)
    step = _every(kept)
    for b, colour in list(zip(kept, colours, strict=False))[::-step]:
        strokes = [[(x + k, y + 8), (x + end, y + 8)] for k, end in _stroke(b)[0]]
        page.lines(strokes, colour=colour, line=3.0)
        page.text(x + 32, y + 14, _band_name(tables, b), SMALL)
        page.text(x + 32, y + 34, f"{tables.area[b].sum() / 1e6:.2f} km²", 14.0, colour=SOFT)
        y += 46
