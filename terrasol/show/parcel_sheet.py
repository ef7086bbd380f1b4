"""The sheet of one parcel: A4, for a grower, a banker and a planner."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from datetime import date
from functools import partial
from itertools import pairwise
from typing import Final, Literal

import numpy as np
from matplotlib import style
from matplotlib.patches import Wedge
from numpy.typing import NDArray

from terrasol import __version__
from terrasol.engine.light_words import sky_title
from terrasol.engine.outputs import MONTH_NAMES
from terrasol.engine.parcel_figures import LAPSE_EFFECT, month_keys, sector_keys, slope_class_keys
from terrasol.engine.parcels import Parcel, Survey, numbers_of
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame
from terrasol.light.minutes import track
from terrasol.practice.classes import SECTORS, class_names
from terrasol.practice.degree_days import HUGLIN, WINKLER, Scale
from terrasol.practice.limits import VINEYARD
from terrasol.show.contours import Box
from terrasol.show.page import INK, PAPER, POINTS_PER_PIXEL, SOFT, Page, clip, text_width, wrap
from terrasol.show.panel import GRID, Panel, steps
from terrasol.show.parcel_map import (
    GroundMap,
    draw_contours_around,
    draw_parcel,
    frame_around,
    outline_path,
    scale_length,
    slope_colours,
)
from terrasol.show.plus_minus import area_plus_minus, plus_minus
from terrasol.show.skyline import HOUR_LINES, draw_skyline, tracks_of, view_limits
from terrasol.words import area_unit

WIDTH, HEIGHT, MARGIN = 827, 1169, 44
"""A4 upright, a hundred pixels an inch."""

TITLE, HEAD, TEXT, SMALL, TICK = 25.0, 12.5, 11.0, 9.5, 9.5
"""Sizes of letters [pixels]."""

INNER: Final = WIDTH - 2 * MARGIN

SLACK: Final = 0.94
"""Share of a width that lines of small letters may fill: printed, they run up to 5 % longer than
measured on the screen's pixels."""

SUNNY, LEVEL, SEASON_OFF = "#c4633f", "#24262b", "#dcb6a3"
"""Colours of the parcel's light in and out of the season, and of level ground."""

RIGHT_SIDE, LEFT_SIDE, BOTH = "#b2551f", "#2f6690", "#24262b"
"""Colours of the two sides of a row and of their mean."""

UNKNOWN: Final = "nothing of the ground is known"
"""What stands in place of a diagram of void ground."""

MOST_TIMED, MOST_LETTERED = 13, 36
"""Months whose first and last sun are written out, and months that are named."""

BELOW_ROWS: Final = 132.0
"""From the top of the diagram of rows to the notes below it [pixels]."""

TIMES: Final = 13.0
"""Height that a written time takes above or below a bar [pixels]."""

SUN_YEAR: Final = 2025
"""Whose sun the paths show where the period is a typical year."""


def parcel_page(
    survey: Survey, parcel: Parcel, elevation: Elevation, frame: Frame, *, title: str
) -> Page:
    """Draw the sheet of one parcel.

    Parameters
    ----------
    survey : Survey
        That the parcel is of.
    parcel : Parcel
    elevation : Elevation
        The ground.
    frame : Frame
        Its place on the Earth.
    title : str
        Of the whole survey.

    Returns
    -------
    Page
    """
    page = Page(WIDTH, HEIGHT)
    page.axes.set_zorder(10)  # what is written stands above what is drawn
    with style.context("default"):
        _head(page, survey, parcel, title)
        _map(page, survey, parcel, elevation, frame, (MARGIN, 108, 378, 270))
        _facts(page, survey, parcel, 452, 108)
        _classes(page, survey, parcel, MARGIN, 430)
        _rose(page, survey, parcel, (376, 430, 136, 136))
        _sizes(page, survey, parcel, 552, 430)
        _light(page, survey, parcel)
        _foot(page, survey)
    return page


def _light(page: Page, survey: Survey, parcel: Parcel) -> None:
    """Diagrams of light and warmth; what was not asked for leaves its room to the others."""
    rows, warm = survey.settings.rows is not None, survey.settings.asked.warmth is not None
    tall = 92.0 if rows or warm else 150.0
    top = _foot_top(*_foot_lines(survey))
    low = min(967.0, top - BELOW_ROWS)  # of rows and warmth; the horizon gives way
    sky = low - 857.0 if rows or warm else min(210.0, top - 885.0)
    half, right = 336.0, WIDTH - MARGIN
    _months(page, survey, parcel, (MARGIN + 22, 632, half - 10, tall))
    _days(page, survey, parcel, (right - half, 632, half, tall))
    _skyline(page, survey, parcel, (MARGIN + 22, 705 + tall, INNER - 22, sky))
    if rows:
        _rows(page, survey, parcel, (MARGIN + 34, low, (half - 22 if warm else INNER - 34), 72))
    if warm:
        left = right - half if rows else MARGIN
        _warmth(page, survey, parcel, (left, low, right - left))


def heading(page: Page, x: float, y: float, words: str, more: str = "") -> None:
    """What a diagram shows, and its unit or basis after it."""
    page.text(x, y, words, HEAD, bold=True)
    if more:
        page.text(x + text_width(words, HEAD, bold=True) + 8, y, more, SMALL, colour=SOFT)


def _head(page: Page, survey: Survey, parcel: Parcel, title: str) -> None:
    """Name, rank and place."""
    page.text(MARGIN, 58, clip(parcel.name, TITLE, INNER - 150, bold=True), TITLE, bold=True)
    piece = parcel.piece
    north, east = ("N" if piece.latitude >= 0 else "S"), ("E" if piece.longitude >= 0 else "W")
    n = parcel.numbers
    words = f"{title}  ·  {abs(piece.latitude):.4f}° {north}, {abs(piece.longitude):.4f}° {east}"
    if np.isfinite(n["height_least_m"]):
        words += f"  ·  {n['height_least_m']:.0f} to {n['height_greatest_m']:.0f} m"
    page.text(MARGIN, 79, clip(words, TEXT, INNER - 150), TEXT, colour=SOFT)
    if survey.ranking is not None:
        place = next(k for k, each in enumerate(survey.parcels) if each is parcel)
        rank = int(survey.ranking.rank[place])
        x = WIDTH - MARGIN
        text = f"{rank} of {len(survey.parcels)}" if rank else "no rank"
        page.text(x, 58, text, TITLE, bold=True, across="right")
        score = f"by score {survey.ranking.total[place]:.4g}" if rank else "its score is unknown"
        page.text(x, 79, score, TEXT, colour=SOFT, across="right")
    page.lines([[(MARGIN, 90), (WIDTH - MARGIN, 90)]], colour=SOFT, line=0.8)


def _map(page, survey, parcel, elevation, frame, box) -> None:
    """The slope map."""
    x, y, width, height = box
    heading(page, x, y, "Slope", "percent, by class; true north up")
    panel = Panel(page, x, y + 10, width, height, tick=TICK)
    for spine in panel.axes.spines.values():
        spine.set_visible(True)
        spine.set(color=SOFT, linewidth=0.8 * POINTS_PER_PIXEL)
    window = parcel.piece.window
    ground = GroundMap.at(
        frame, window.row + (window.rows - 1) / 2, window.column + (window.columns - 1) / 2
    )
    path = outline_path(parcel.outline, elevation, ground)
    limits = frame_around([path], width, height)
    panel.limits(*limits)
    step = draw_contours_around(panel, elevation, ground, rmse_of(survey), [north_box(panel)])
    draw_parcel(panel.axes, parcel, path, ground, survey.settings.asked.slope_edges)
    panel.limits(*limits)
    scale_and_north(page, panel, limits, y + height + 24)
    notes = [] if step is None else [f"contours every {step:g} m"]
    if parcel.patches is not None:
        notes.append("hatched: fails the rule")
    page.text(x, y + height + 24, "  ·  ".join(notes), SMALL, colour=SOFT)
    blank_note(page, panel, [parcel])


def blank_note(page: Page, panel: Panel, parcels: Sequence[Parcel]) -> None:
    """Say in the map's lower corner why parts of parcels have no colour, if any has none."""
    reasons = (
        ("unknown", any(not p.piece.known[p.piece.area > 0.0].all() for p in parcels)),
        ("outside the raster", any(p.piece.inside < 1.0 for p in parcels)),
    )
    words = " or ".join(reason for reason, holds in reasons if holds)
    if words:
        y = panel.y + panel.height - 8
        page.text(panel.x + 8, y, f"blank in an outline: {words}", SMALL, halo=PAPER)


def scale_and_north(page: Page, panel: Panel, limits: NDArray[np.float64], y: float) -> None:
    """Scale bar below the map at a height, right-aligned, and an arrow in the map's corner."""
    metres = limits[1] - limits[0]
    length = scale_length(metres)
    pixels = length / metres * panel.width
    right = panel.x + panel.width
    page.lines([[(right - pixels, y - 3), (right, y - 3)]], colour=INK, line=2.4)
    page.text(right - pixels - 6, y, f"{length:g} m", SMALL, across="right")
    left, top, right, _ = north_box(panel)
    x = (left + right) / 2.0
    page.shape([(x, top), (x - 6, top + 20), (x, top + 15), (x + 6, top + 20)], fill=INK)
    page.text(x, top + 32, "N", SMALL, bold=True, across="center", halo=PAPER)


def north_box(panel: Panel) -> Box:
    """Where the arrow to the north stands on a map."""
    right = panel.x + panel.width
    return right - 22.0, panel.y + 12.0, right - 10.0, panel.y + 44.0


def rmse_of(survey: Survey) -> float | None:
    """Standard error of the heights [m], if one was stated."""
    return None if survey.settings.error is None else survey.settings.error.rmse


def _facts(page: Page, survey: Survey, parcel: Parcel, x: float, y: float) -> None:
    """The key figures, in words and numbers."""
    rows = facts(survey, parcel)
    heading(page, x, y, "At a glance")
    right = WIDTH - MARGIN
    for k, (name, value) in enumerate(rows):
        level = y + 20 + k * 18.5
        page.text(x, level, name, TEXT, colour=SOFT)
        page.text(right, level, value, TEXT, bold=True, across="right")
        page.lines([[(x, level + 5), (right, level + 5)]], colour=GRID, line=0.8)


def facts(survey: Survey, parcel: Parcel) -> list[tuple[str, str]]:
    """Names and values of the key figures."""
    n, asked = parcel.numbers, survey.settings.asked

    def told(name: str, form: str, factor: float = 1.0) -> str:
        return with_error(parcel, name, form, factor)

    rows = [
        *_areas(parcel),
        ("Height, mean", f"{n['height_mean_m']:.0f} m"),
        ("Slope, mean", f"{told('slope_mean_percent', '.1f')} %"),
        ("Slope of the middle 80 %",
         f"{n['slope_p10_percent']:.0f} to {n['slope_p90_percent']:.0f} %"),
        ("Faces, mean", _faces(n)),
        ("Energy of the season", f"{told('irradiation_season_mj_m2_slope', ',.0f')} MJ/m²"),
        ("  as share of level ground", f"{told('share_of_level_season', '.1f', 100.0)} %"),
        ("Hours of sun, season",
         f"{n['sun_hours_season_h']:,.0f} of {n['sun_hours_season_level_h']:,.0f} h"),
    ]  # fmt: skip
    if asked.rule is not None:
        share = f"{100 * n['rule_share']:.0f} %"
        rows.append(("Meets the rule", f"{area_with_error(parcel, 'rule_ha_map')}, {share}"))
    rows += _warm_facts(parcel)
    if parcel.rows is not None:
        rows.append(("Rows: fall line", _azimuth(n["rows_fall_line_deg"])))
        rows.append(("Rows: sides most alike", _azimuth(n["rows_even_azimuth_deg"])))
    return [(name, "unknown" if "nan" in value else value) for name, value in rows]


def _areas(parcel: Parcel) -> list[tuple[str, str]]:
    """Area as drawn, what of it is on the raster and known where that is less, and its surface."""
    numbers = parcel.numbers
    told = [("Area drawn, on the map", "drawn_ha_map")]
    if numbers["outside_share"] > 0.0:
        told.append(("  of it on the raster", "map_area_ha"))
    if numbers["unknown_ha_map"] > 0.0:
        told.append(("  of it known", "known_ha_map"))
    told.append(("Area of the slope's surface", "surface_area_ha"))
    return [(words, plain_area(parcel, name)) for words, name in told]


def plain_area(parcel: Parcel, name: str) -> str:
    """An area of a parcel, in the unit of all of it, without a standard error."""
    return area_plus_minus(parcel.numbers[name], None, like=parcel.numbers["drawn_ha_map"])


def area_with_error(parcel: Parcel, name: str) -> str:
    """An area of a parcel, in the unit of all of it, its standard error behind it if it has one."""
    n = parcel.numbers
    error = area_error(parcel, name)
    return area_plus_minus(n[name], error, n["known_ha_map"], like=n["drawn_ha_map"])


def area_error(parcel: Parcel, name: str) -> float | None:
    """Standard error of an area [ha], if there is one."""
    doubt = parcel.doubts.get(name)
    return None if doubt is None else doubt.standard_error


def with_error(parcel: Parcel, name: str, form: str, factor: float = 1.0) -> str:
    """A figure with its standard error behind it, if there is one."""
    doubt = parcel.doubts.get(name)
    error = None if doubt is None else doubt.standard_error * factor
    return plus_minus(parcel.numbers[name] * factor, error, form)


def _warm_facts(parcel: Parcel) -> list[tuple[str, str]]:
    """Degree-days with their classes."""
    n, texts = parcel.numbers, {f.name: f.value for f in parcel.figures}
    rows = []
    for name, words in (("winkler", "Degree-days (Winkler)"), ("huglin", "Huglin's index")):
        if f"{name}_mean_c_days" in n:
            value = n[f"{name}_mean_c_days"]
            known = f"{value:.0f}, {texts[f'{name}_class']}" if np.isfinite(value) else "undefined"
            rows.append((words, known))
    return rows


def _azimuth(value: float) -> str:
    """A direction of rows, both ways."""
    if not np.isfinite(value):
        return "level"
    return f"{value:.0f}° / {value + 180.0:.0f}°"


def _faces(numbers: dict[str, float]) -> str:
    """The mean aspect, and how much of one mind the ground is."""
    if not np.isfinite(numbers["slope_mean_percent"]):
        return "unknown"
    if not np.isfinite(numbers["aspect_mean_deg"]):
        return "nowhere (flat)"
    degrees = numbers["aspect_mean_deg"]
    name = SECTORS[int((degrees + 22.5) // 45) % 8]
    return f"{name}, {degrees:.0f}° (R {numbers['aspect_resultant']:.2f})"


def _classes(page: Page, survey: Survey, parcel: Parcel, x: float, y: float) -> None:
    """Area per class of slope, as bars with numbers."""
    edges = survey.settings.asked.slope_edges
    heading(page, x, y, "Slope classes", "areas of map")
    if not parcel.piece.known.any():
        page.text(x, y + 22, UNKNOWN, TEXT, colour=SOFT)
        return
    names, keys = class_names(edges, "%"), slope_class_keys(edges)
    values = [parcel.numbers[f"{key}_ha_map"] for key in keys]
    total = max(sum(values), 1e-9)
    pitch = min(23.0, 136.0 / len(names))
    longest = max(*values, 1e-9)
    for k, (name, value, colour) in enumerate(
        zip(names, values, slope_colours(len(names)), strict=True)
    ):
        level = y + 12 + k * pitch
        page.text(
            x + 88, level + 0.68 * pitch, name.replace(" and more", " up"), TEXT, across="right"
        )
        long = (130.0 - 46.0 * bool(parcel.doubts)) * value / longest
        page.box(x + 96, level + 3, max(long, 0.6), pitch - 5, fill=colour, edge=SOFT, line=0.5)
        told = area_with_error(parcel, f"{keys[k]}_ha_map")
        words = f"{told}  {100 * value / total:.0f} %"
        page.text(x + 102 + long, level + 0.68 * pitch, words, TEXT)


def _rose(page: Page, survey: Survey, parcel: Parcel, box) -> None:
    """Area per sector of aspect: petals whose area is the ground's."""
    x, y, width, height = box
    areas = np.nan_to_num([parcel.numbers[f"{key}_ha_map"] for key in sector_keys()])
    most = max(areas.max(), 1e-9)
    unit, factor, _ = area_unit(parcel.numbers["drawn_ha_map"])
    heading(page, x - 4, y, "Aspect", f"{unit.replace('2', '²')} by sector")
    if not parcel.piece.known.any():
        page.text(x - 4, y + 22, UNKNOWN, TEXT, colour=SOFT)
        return
    panel = Panel(page, x, y + 8, width, height, tick=TICK)
    panel.limits(-1.3, 1.3, -1.3, 1.3)
    axes = panel.axes
    axes.spines["bottom"].set_visible(False)
    for radius in (0.5, 1.0):
        axes.add_patch(_ring(radius))
    for k, (name, area) in enumerate(zip(SECTORS, areas, strict=True)):
        middle = 90.0 - 45.0 * k
        radius = np.sqrt(area / most)
        axes.add_patch(Wedge((0, 0), radius, middle - 20.5, middle + 20.5, facecolor=SUNNY,
                             edgecolor=PAPER, linewidth=0.6, alpha=0.9, zorder=3))  # fmt: skip
        turn = np.radians(middle)
        px, py = panel.place(1.16 * np.cos(turn), 1.16 * np.sin(turn))
        page.text(px, py + 4, name, TICK, across="center", bold=name in ("N", "E", "S", "W"))
        if area > 0.06 * most:
            px, py = panel.place(
                max(radius * 0.62, 0.3) * np.cos(turn), max(radius * 0.62, 0.3) * np.sin(turn)
            )
            told = area * factor
            page.text(px, py + 4, f"{told:.2g}" if told < 1 else f"{told:.1f}", TICK,
                      across="center", halo=PAPER)  # fmt: skip
    flat = plain_area(parcel, "aspect_flat_ha_map")
    words = f"flat (under {survey.settings.asked.flat_below:g} %): {flat}"
    page.text(x + width / 2, y + height + 20, words, SMALL, colour=SOFT, across="center")


def _ring(radius: float) -> Wedge:
    """A thin circle."""
    return Wedge((0, 0), radius, 0, 360, width=0.006, facecolor=GRID, edgecolor="none", zorder=1)


def _sizes(page: Page, survey: Survey, parcel: Parcel, x: float, y: float) -> None:
    """The same at coarser cells: how much of it hangs on the cell size."""
    heading(page, x, y, "At other cell sizes" if parcel.coarser else "At its cell size")
    right = WIDTH - MARGIN
    looks = [(survey.cell_size, parcel.numbers)]
    looks += [(size, numbers_of(figures)) for size, figures in parcel.coarser]
    columns = np.linspace(right - 58.0 * (len(looks) - 1), right, len(looks))
    area = partial(area_plus_minus, error=None, like=parcel.numbers["drawn_ha_map"])
    rows: list[tuple[str, str, Callable[[float], str]]] = [
        ("mean slope", "slope_mean_percent", "{:.1f} %".format)
    ]
    steep = slope_class_keys(survey.settings.asked.slope_edges)[-1]
    edge = survey.settings.asked.slope_edges[-1]
    rows.append((f"over {edge:g} %", f"{steep}_ha_map", area))
    rows.append(("by level", "share_of_level_season", "{:.3f}".format))
    rows.append(("sun hours", "sun_hours_season_h", "{:.0f} h".format))
    if survey.settings.asked.rule is not None:
        rows.append(("rule", "rule_ha_map", area))
    if "winkler_mean_c_days" in parcel.numbers:
        rows.append(("Winkler", "winkler_mean_c_days", "{:.0f}".format))
    page.text(x, y + 20, "cells of", TEXT, colour=SOFT)
    for at, (size, _) in zip(columns, looks, strict=True):
        page.text(at, y + 20, f"{size:.3g} m", TEXT, across="right", bold=True)
    for k, (name, key, told) in enumerate(rows, 1):
        level = y + 20 + k * 17.5
        page.text(x, level, name, TEXT, colour=SOFT)
        for at, (_, numbers) in zip(columns, looks, strict=True):
            value = numbers.get(key, np.nan)
            words = told(value) if np.isfinite(value) else "–"
            page.text(at, level, words, TEXT, across="right")
    page.lines([[(x, y + 25), (right, y + 25)]], colour=SOFT, line=0.6)


def _months(page: Page, survey: Survey, parcel: Parcel, box) -> None:
    """Energy of a mean day of each month, level ground beside it."""
    x, y, width, height = box
    asked = survey.settings.asked
    heading(
        page, x - 22, y - 14, "Energy by month", "MJ/m² of slope a day; line: level; dark: season"
    )
    days = np.array(asked.period.month_days, float)
    means = _monthly(parcel, "irradiation_{}_mj_m2_slope", survey) / days
    level = parcel.level.months / days
    if not np.isfinite(means).any():
        words = "the light is unknown" if parcel.piece.known.any() else UNKNOWN
        page.text(x - 22, y + 20, words, TEXT, colour=SOFT)
        return
    panel = Panel(page, x, y, width, height, tick=TICK)
    top = np.nanmax([np.nanmax(np.nan_to_num(means)), np.nanmax(np.nan_to_num(level)), 1.0]) * 1.12
    panel.limits(-0.6, len(days) - 0.4, 0.0, top)
    panel.y_ticks(steps(0.0, top, 4))
    at = np.arange(len(days))
    colours = [SUNNY if k in asked.season_places else SEASON_OFF for k in at]
    panel.axes.bar(at, np.nan_to_num(means), 0.68, color=colours, zorder=2)
    panel.axes.hlines(level, at - 0.42, at + 0.42, color=LEVEL, linewidth=1.5 * POINTS_PER_PIXEL,
                      zorder=3)  # fmt: skip
    panel.x_ticks(list(at), _month_letters(survey), down=TICK + 5)


def _monthly(parcel: Parcel, pattern: str, survey: Survey) -> np.ndarray:
    """A figure of every month."""
    keys = month_keys(survey.settings.asked.period)
    return np.array([parcel.numbers.get(pattern.format(key), np.nan) for key in keys])


def _month_letters(survey: Survey) -> list[str]:
    """Short names of months: three letters, one, or the years alone, as there is room."""
    months = survey.settings.asked.period.months
    if len(months) > MOST_LETTERED:
        return [f"{year}" if month == 1 else "" for year, month in months]
    letters = 3 if len(months) <= MOST_TIMED else 1
    return [MONTH_NAMES[month - 1][:letters] for _, month in months]


def _days(page: Page, survey: Survey, parcel: Parcel, box) -> None:
    """First and last sun of a day of each month, with hours of sun a day."""
    x, y, width, height = box
    clock = survey.settings.hours.clock
    first = _monthly(parcel, "first_sun_{}_h", survey)
    last = _monthly(parcel, "last_sun_{}_h", survey)
    heading(page, x, y - 14, "First and last sun", f"{_days_words(survey)}, {clock.words}")
    if not np.isfinite(first).any():
        words = "no direct sun on these days" if parcel.piece.known.any() else UNKNOWN
        page.text(x, y + 20, words, TEXT, colour=SOFT)
        return
    panel = Panel(page, x, y, width, height, tick=TICK)
    start, end = float(np.nanmin(first)), float(np.nanmax(last))
    margin = TIMES * max(end - start, 1.0) / (height - 2.0 * TIMES)
    panel.limits(-0.6, len(first) - 0.4, start - margin, end + margin)
    hours = (
        steps(start - margin, end + margin, 4)
        if end - start < 6.0
        else ([float(h) for h in range(-24, 49, 3) if start - margin < h < end + margin])
    )
    panel.y_ticks(hours, form=_clock_text)
    at, few = np.arange(len(first)), len(first) <= MOST_TIMED
    wide = min(9.0, 0.5 * width / len(first)) * POINTS_PER_PIXEL
    for k in at:
        if np.isfinite(first[k]):
            panel.axes.vlines(k, first[k], last[k], color="#f0d9ac", linewidth=wide,
                              zorder=2)  # fmt: skip
            for hour, down in ((first[k], 10.0), (last[k], -4.0)) if few else ():
                px, py = panel.place(float(k), hour)
                page.text(px, py + down, _clock_text(hour), 8.2, across="center", halo=PAPER)
    panel.x_ticks(list(at), _month_letters(survey), down=TICK + 5)
    if not few:
        return
    sunny = _monthly(parcel, "sun_hours_{}_h", survey) / survey.settings.asked.period.month_days
    panel.x_ticks(list(at), [f"{h:.1f}" for h in sunny], down=TICK + 18)
    page.text(x - 4, y + height + TICK + 18, "h a day", TICK, colour=SOFT, across="right")


def _days_words(survey: Survey) -> str:
    """Which days the first and last sun is told of."""
    days = {day.day for day in survey.settings.hours.days}
    return f"on the {days.pop()}st" if days == {21} else "on a day of each month"


def _clock_text(hour: float) -> str:
    """Hours as a clock shows them.

    Examples
    --------
    >>> _clock_text(7.9999)
    '8:00'
    """
    minutes = round(hour * 60.0)
    return f"{minutes // 60}:{minutes % 60:02d}"


def _skyline(page: Page, survey: Survey, parcel: Parcel, box) -> None:
    """The horizon from the middle of the parcel, with the sun's paths."""
    x, y, width, height = box
    heading(page, x - 22, y - 14, "Horizon from its middle, and the sun",
            "degrees above the level; hours in true solar time")  # fmt: skip
    piece, clock = parcel.piece, survey.settings.hours.clock
    if not np.isfinite(parcel.horizon).all():
        page.text(x - 22, y + 20, UNKNOWN, TEXT, colour=SOFT)
        return
    period = survey.settings.asked.period
    year = SUN_YEAR if period.typical else period.months[-1][0]
    place = piece.latitude, (piece.longitude + 180.0) % 360.0 - 180.0, piece.height
    paths = tracks_of(*place, clock, year)
    panel = Panel(page, x, y, width, height, tick=TICK)
    panel.limits(*view_limits(piece.latitude, [parcel.horizon], paths))
    lines = [track(date(year, month, day), *place, clock) for month, day in HOUR_LINES]
    draw_skyline(panel, parcel.horizon, paths, lines)


def _rows(page: Page, survey: Survey, parcel: Parcel, box) -> None:
    """Energy on both sides of rows by their direction, and what they climb."""
    x, y, width, height = box
    if parcel.rows is None:
        heading(page, x - 34, y - 14, "Direction of rows")
        page.text(x - 34, y + 8, UNKNOWN, TEXT, colour=SOFT)
        return
    rows = parcel.rows
    heading(
        page, x - 34, y - 14, "Direction of rows", "MJ/m² of side in the season, by row azimuth"
    )
    azimuth = np.append(rows.light.azimuth, 180.0)
    right, left = (np.append(rows.sides[:, k], rows.sides[0, 1 - k]) for k in (0, 1))
    panel = Panel(page, x, y, width, height, tick=TICK)
    both = np.concatenate([right, left])
    margin = 0.08 * np.ptp(both) + 1.0
    low, high = both.min() - margin, both.max() + 3.0 * margin  # room above for words
    panel.limits(0.0, 180.0, low, high)
    panel.y_ticks(steps(low, high, 4))
    for values, colour, line in ((right, RIGHT_SIDE, 1.8), (left, LEFT_SIDE, 1.8)):
        panel.axes.plot(azimuth, values, color=colour, linewidth=line * POINTS_PER_PIXEL, zorder=3)
    panel.axes.plot(azimuth, (right + left) / 2.0, color=BOTH, linewidth=1.2 * POINTS_PER_PIXEL,
                    linestyle=(0, (4, 2)), zorder=3)  # fmt: skip
    at = np.arange(0, 181, 30)
    panel.x_ticks(list(at), [f"{a}°" for a in at], down=TICK + 5)
    climbed = np.append(rows.steepest, rows.steepest[0])
    panel.x_ticks(list(at), [f"{climbed[a // 5]:.0f} %" for a in at], down=TICK + 18)
    page.text(x - 18, y + height + TICK + 18, "climb", TICK, colour=SOFT, across="right")
    if np.isfinite(rows.fall_line):
        panel.axes.axvline(rows.fall_line, color=SOFT, linewidth=1.0 * POINTS_PER_PIXEL, zorder=1)
        px, _ = panel.place(rows.fall_line, high)
        across: Literal["left", "right"] = "left" if rows.fall_line < 140.0 else "right"
        px += 5.0 if across == "left" else -5.0
        page.text(px, y + 7, "fall line", 8.5, colour=SOFT, across=across, halo=PAPER)
    legend = (
        ("right side", RIGHT_SIDE),
        ("left side, looking along the row", LEFT_SIDE),
        ("mean", BOTH),
    )
    px = x
    for text, colour in legend:
        page.text(px, y + height + TICK + 32, text, SMALL, colour=colour, bold=True)
        px += text_width(text, SMALL, bold=True) + 14


def _warmth(page: Page, survey: Survey, parcel: Parcel, box) -> None:
    """Degree-days on the scales of their classes."""
    x, y, width = box
    heading(page, x, y - 14, "Degree-days", "°C day over 10 °C; least, mean and greatest cell")
    if not parcel.piece.known.any():
        page.text(x, y + 8, UNKNOWN, TEXT, colour=SOFT)
        return
    level = y + 8.0
    for name, words, scale in (
        ("winkler", "Winkler", WINKLER),
        ("huglin", "Huglin", HUGLIN),
    ):
        if f"{name}_mean_c_days" in parcel.numbers:
            _draw_scale(page, parcel, name, words, scale, (x, level, width))
            level += 46
    effect = parcel.numbers[LAPSE_EFFECT]
    if np.isfinite(effect):
        words = (
            f"a lapse rate of 1 K/km more would move Winkler's sum by {round(effect) + 0.0:+.0f}"
        )
        page.text(x, level + 8, words.replace("-", "−"), SMALL, colour=SOFT)


def _draw_scale(page: Page, parcel: Parcel, name: str, words: str, scale: Scale, box) -> None:
    """One sum on the scale of its classes: a bar from the least to the greatest cell."""
    x, y, width = box
    edges, n = np.array(scale.edges), parcel.numbers
    ends = [n[f"{name}_{k}_c_days"] for k in ("least", "mean", "greatest")]
    low = min(edges[0] - 250.0, np.nan_to_num(ends[0], nan=edges[0]) - 50.0)
    high = max(edges[-1] + 250.0, np.nan_to_num(ends[2], nan=edges[-1]) + 50.0)
    left, room = x + 50.0, width - 50.0

    def at(value: float) -> float:
        return left + (value - low) / (high - low) * room

    page.text(x, y + 15, words, TEXT, bold=True)
    bounds = [low, *edges, high]
    for k, (a, b) in enumerate(pairwise(bounds)):
        fill = "#efe6d4" if k % 2 else "#f6f1e6"
        page.box(at(a), y + 4, at(b) - at(a), 14, fill=fill)
        label = scale.names[k]
        size = 8.2
        if text_width(label, size) < at(b) - at(a) - 1:
            page.text((at(a) + at(b)) / 2, y, label, size, colour=SOFT, across="center")
    for edge in edges:
        page.text(at(edge), y + 31, f"{edge:.0f}", 8.0, colour=SOFT, across="center")
    if np.isfinite(ends[1]):
        page.box(at(ends[0]), y + 6, max(at(ends[2]) - at(ends[0]), 3.0), 10, fill=SUNNY)
        page.lines([[(at(ends[1]), y + 2), (at(ends[1]), y + 20)]], colour=INK, line=1.6)
    else:
        page.text(left, y + 15, "undefined beyond 50 degrees", SMALL, colour=SOFT)


def notes_of(survey: Survey) -> list[str]:
    """What every sheet says of its numbers."""
    asked = survey.settings.asked
    notes = [
        f"Season {asked.season_words}, {asked.period.label}. {sky_title(survey.settings.light)} per"
        f" area of slope, reflection counted, from cells of {survey.cell_size:.3g} m."
        f" {survey.settings.sky_words} {survey.shade} Areas are of the level map, true on the"
        " ellipsoid.",
    ]
    if survey.settings.rows is not None:
        rows = survey.settings.rows
        notes.append(
            f"Rows {rows.spacing:g} m apart, leaf wall {rows.height:g} m high, {rows.width:g} m"
            f" wide, of albedo {rows.canopy_albedo:g}, endless on the parcel's mean plane; climb:"
            " steepest cell along the rows."
        )
    if asked.warmth is not None:
        station, lapse = asked.warmth.station, asked.warmth.lapse
        told = f"{lapse:g}" if isinstance(lapse, float | int) else "monthly"
        notes.append(
            f"Degree-days from {station.basis}, station at {station.height:.0f} m, lapse rate"
            f" {told} K/km."
        )
    error = survey.settings.error
    if error is not None:
        notes.append(
            f"± or a range: one standard error from an error of heights of {error.rmse:g} m"
            f" ({error.realisations} grounds)."
        )
    notes += [f"{doubt[0].upper()}{doubt[1:]}." for doubt in survey.error_doubts]
    if asked.rule is not None:
        least = f", in patches from {asked.least_patch:g} m²" if asked.least_patch else ""
        notes.append(f"Rule: {asked.rule.text}{least}.")
    return notes


def _foot_lines(survey: Survey) -> tuple[list[str], list[str]]:
    """Lines of the notes, and of what is not in it."""
    notes = wrap(" ".join(notes_of(survey)), 8.2, SLACK * INNER)
    return notes, wrap(VINEYARD, 8.6, SLACK * INNER - 80, bold=True)


def _foot_top(notes: list[str], last: list[str]) -> float:
    """Where the first of those lines stands."""
    return HEIGHT - 18 - 10.0 * (len(notes) + len(last) - 1)


def _foot(page: Page, survey: Survey) -> None:
    """Basis, rule, and what is not in it."""
    notes, last = _foot_lines(survey)
    y = _foot_top(notes, last)
    for k, line in enumerate(notes):
        page.text(MARGIN, y + k * 10.0, line, 8.2, colour=SOFT)
    for k, line in enumerate(last, len(notes)):
        page.text(MARGIN, y + k * 10.0 + 1, line, 8.6, bold=True)
    page.text(
        WIDTH - MARGIN, HEIGHT - 16, f"terrasol {__version__}", 8.2, colour=SOFT, across="right"
    )
