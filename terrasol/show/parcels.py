"""The summary of a survey of parcels: one map, one table, the score in full."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Final

import numpy as np
import shapely
from matplotlib import style
from matplotlib.path import Path

from terrasol import __version__
from terrasol.engine.parcel_figures import slope_class_keys
from terrasol.engine.parcels import Parcel, Survey
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame
from terrasol.practice.classes import SECTORS, class_names
from terrasol.practice.limits import VINEYARD
from terrasol.show.contours import Box
from terrasol.show.page import INK, PAPER, POINTS_PER_PIXEL, SOFT, Page, clip, text_width, wrap
from terrasol.show.panel import GRID, Panel
from terrasol.show.parcel_map import (
    GroundMap,
    draw_contours_around,
    draw_parcel,
    frame_around,
    outline_path,
    slope_colours,
)
from terrasol.show.parcel_sheet import (
    HEIGHT,
    INNER,
    MARGIN,
    SLACK,
    SMALL,
    TEXT,
    TITLE,
    WIDTH,
    area_error,
    blank_note,
    heading,
    north_box,
    notes_of,
    rmse_of,
    scale_and_north,
)
from terrasol.show.plus_minus import area_figure
from terrasol.words import area_unit

MAP_HEIGHTS: Final = 300.0, 560.0
PITCH: Final = 19.0
"""Least and greatest height of the map, and height of a row of the table [pixels]."""

MOST_ROWS: Final = 24
"""Parcels in the table; the rest are in parcels.csv."""

BELOW_MAP: Final = 188.0
"""From the height of the map to the top of the table [pixels]."""

BETWEEN: Final = 9.0
"""Least room between the columns of the table [pixels]."""

CLASS_BAR: Final = 84.0
"""Length of the bar of slope classes in the table [pixels]."""

Cell = Callable[[Parcel], str]


def summary_page(survey: Survey, elevation: Elevation, frame: Frame, *, title: str) -> Page:
    """Draw the summary.

    Parameters
    ----------
    survey : Survey
    elevation : Elevation
        The ground.
    frame : Frame
        Its place on the Earth.
    title : str
        Head of the page.

    Returns
    -------
    Page
    """
    page = Page(WIDTH, HEIGHT)
    page.axes.set_zorder(10)
    with style.context("default"):
        _head(page, survey, title)
        height = _map_height(survey)
        _map(page, survey, elevation, frame, height)
        _legend(page, survey, height + 128)
        bottom = _table(page, survey, height + BELOW_MAP)
        _score(page, survey, bottom + 22)
        _foot(page, survey)
    return page


def _head(page: Page, survey: Survey, title: str) -> None:
    """What it is of."""
    page.text(MARGIN, 58, clip(title, TITLE, INNER, bold=True), TITLE, bold=True)
    count = len(survey.parcels)
    order = "ranked by the score below" if survey.score else "in the order of their file; no score"
    words = (
        f"{count} parcel{'s' * (count != 1)}, {order}; season {survey.settings.asked.season_words}"
    )
    page.text(MARGIN, 79, clip(words, TEXT, INNER), TEXT, colour=SOFT)


def _map_height(survey: Survey) -> float:
    """Height of the map: all that table and score leave."""
    count = len(survey.parcels)
    rows = min(count, MOST_ROWS) + (count > MOST_ROWS)
    left = _foot_top(*_foot_lines(survey)) - BELOW_MAP - 30.0 - PITCH * rows
    if survey.score is not None:
        left -= 46.0 + 14.0 * len(survey.score.terms)
    return float(np.clip(left, *MAP_HEIGHTS))


def _map(page: Page, survey: Survey, elevation: Elevation, frame: Frame, height: float) -> None:
    """All parcels among the contours of their ground."""
    panel = Panel(page, MARGIN, 94, INNER, height)
    for spine in panel.axes.spines.values():
        spine.set_visible(True)
        spine.set(color=SOFT, linewidth=0.8 * POINTS_PER_PIXEL)
    windows = [parcel.piece.window for parcel in survey.parcels]
    row = np.mean([[w.row, w.row + w.rows - 1] for w in windows])
    column = np.mean([[w.column, w.column + w.columns - 1] for w in windows])
    ground = GroundMap.at(frame, float(row), float(column))
    paths = [outline_path(parcel.outline, elevation, ground) for parcel in survey.order]
    limits = frame_around(paths, INNER, height, 0.08)
    panel.limits(*limits)
    for parcel, path in zip(survey.order, paths, strict=True):
        draw_parcel(panel.axes, parcel, path, ground, survey.settings.asked.slope_edges)
    panel.limits(*limits)
    parts = [
        [outline_path(part, elevation, ground) for part in shapely.get_parts(parcel.outline)]
        for parcel in survey.order
    ]
    taken = [north_box(panel), *_number_parcels(panel, parts)]
    step = draw_contours_around(panel, elevation, ground, rmse_of(survey), taken)
    panel.limits(*limits)
    scale_and_north(page, panel, limits, height + 108)
    blank_note(page, panel, survey.parcels)
    if step is not None:
        words = f"contours every {step:g} m; numbers as in the table"
        page.text(MARGIN, height + 108, words, SMALL, colour=SOFT)


def _number_parcels(panel: Panel, parts: Sequence[Sequence[Path]]) -> list[Box]:
    """Number each part of each parcel beside it; returns the boxes of parts and numbers."""
    boxes: list[Box] = []
    numbers: list[Box] = []
    for number, of_one in enumerate(parts, 1):
        words = f"{number}"
        wide = text_width(words, TEXT, bold=True)
        for part in of_one:
            box = part.get_extents()
            x, y = panel.place(box.x1, (box.y0 + box.y1) / 2.0)
            while any(
                abs(x - left) < wide and abs(y + 4 - low) < TEXT for left, _, _, low in numbers
            ):
                y += TEXT  # below the number of a parcel that ends at the same place
            panel.page.text(x + 4, y + 4, words, TEXT, bold=True, halo=PAPER)
            numbers.append((x, y - TEXT / 2.0, x + 4 + wide, y + 4))
            boxes.append((*panel.place(box.x0, box.y1), *panel.place(box.x1, box.y0)))
    return boxes + numbers


def _legend(page: Page, survey: Survey, y: float) -> None:
    """Colours of the classes of slope."""
    names = class_names(survey.settings.asked.slope_edges, "%")
    page.text(MARGIN, y, "Slope", SMALL, bold=True)
    x = MARGIN + 42.0
    for name, colour in zip(names, slope_colours(len(names)), strict=True):
        page.box(x, y - 9, 14, 11, fill=colour, edge=SOFT, line=0.5)
        page.text(x + 19, y, name, SMALL)
        x += 34 + text_width(name, SMALL)
    if survey.settings.asked.rule is not None:
        page.text(x + 4, y, "hatched: fails the rule", SMALL, colour=SOFT)


def _columns(survey: Survey) -> list[tuple[str, float, Cell]]:
    """Heads, right ends as shares of the width, and contents of the table's columns."""

    def number(key: str, form: str, factor: float = 1.0) -> Cell:
        def cell(parcel: Parcel) -> str:
            value = parcel.numbers.get(key, np.nan) * factor
            return form.format(value) if np.isfinite(value) else "–"

        return cell

    whole = all(p.numbers["known_ha_map"] == p.numbers["drawn_ha_map"] for p in survey.parcels)
    smallest = float(np.nanmin([p.numbers["drawn_ha_map"] for p in survey.parcels]))
    unit = area_unit(smallest)[0].replace("2", "²")
    columns = [
        (f"{unit} drawn", 58.0, _area("drawn_ha_map", smallest)),
        *([] if whole else [("known", 48.0, _area("known_ha_map", smallest))]),
        ("slope", 42.0, number("slope_mean_percent", "{:.0f} %")),
        ("faces", 38.0, _faces),
        ("MJ/m²", 48.0, number("irradiation_season_mj_m2_slope", "{:.0f}")),
        ("of level", 54.0, number("share_of_level_season", "{:.1f} %", 100.0)),
        ("sun h", 42.0, number("sun_hours_season_h", "{:.0f}")),
    ]
    if survey.settings.asked.rule is not None:
        width = 82.0 if survey.settings.error else 48.0
        columns.append((f"rule {unit}", width, _area("rule_ha_map", smallest)))
    if survey.settings.asked.warmth is not None:
        columns.append(("Winkler", 48.0, number("winkler_mean_c_days", "{:.0f}")))
    if survey.settings.rows is not None:
        columns.append(("rows", 40.0, number("rows_even_azimuth_deg", "{:.0f}°")))
    if survey.ranking is not None:
        columns.append(("score", 52.0, _score_cell(survey)))
    return [(head, max(width, _needed(survey, head, cell)), cell) for head, width, cell in columns]


def _needed(survey: Survey, head: str, cell: Cell) -> float:
    """Width of a column [pixels] that keeps its longest text clear of the column before."""
    texts = (text_width(cell(parcel), TEXT) for parcel in survey.order[:MOST_ROWS])
    return max(text_width(head, SMALL), *texts) + BETWEEN


def _area(key: str, smallest: float) -> Cell:
    """An area with its standard error, in the unit that suits the smallest parcel."""

    def cell(parcel: Parcel) -> str:
        n, error = parcel.numbers, area_error(parcel, key)
        known = np.isfinite(n[key])
        return area_figure(n[key], error, n["known_ha_map"], like=smallest) if known else "–"

    return cell


def _faces(parcel: Parcel) -> str:
    """The sector of the mean aspect."""
    if not parcel.piece.known.any():
        return "–"
    degrees = parcel.numbers["aspect_mean_deg"]
    return SECTORS[int((degrees + 22.5) // 45) % 8] if np.isfinite(degrees) else "flat"


def _score_cell(survey: Survey) -> Cell:
    """The total of a parcel."""
    assert survey.ranking is not None
    totals = {p.name: t for p, t in zip(survey.parcels, survey.ranking.total, strict=True)}

    def cell(parcel: Parcel) -> str:
        return f"{totals[parcel.name]:.4g}" if np.isfinite(totals[parcel.name]) else "–"

    return cell


def _table(page: Page, survey: Survey, top: float) -> float:
    """One row a parcel; returns where it ends."""
    columns = _columns(survey)
    right = WIDTH - MARGIN
    ends = right - np.cumsum([0.0, *(width for _, width, _ in reversed(columns))])[:-1][::-1]
    bar = float(ends[0] - columns[0][1] - CLASS_BAR - 14.0)
    heading(page, MARGIN, top - 26, "Parcels", _table_words(survey))
    page.text(bar, top - 6, "slope classes", SMALL, colour=SOFT)
    for (name, _, _), end in zip(columns, ends, strict=True):
        page.text(float(end), top - 6, name, SMALL, colour=SOFT, across="right")
    page.lines([[(MARGIN, top), (right, top)]], colour=SOFT, line=0.8)
    for k, parcel in enumerate(survey.order[:MOST_ROWS]):
        level = top + 14 + k * PITCH
        page.text(MARGIN + 16, level, f"{k + 1}", TEXT, bold=True, across="right")
        room = bar - MARGIN - 32
        page.text(MARGIN + 24, level, clip(parcel.name, TEXT, room), TEXT)
        _class_bar(page, survey, parcel, bar, level - 10)
        for (_, _, cell), end in zip(columns, ends, strict=True):
            page.text(float(end), level, cell(parcel), TEXT, across="right")
        page.lines([[(MARGIN, level + 5), (right, level + 5)]], colour=GRID, line=0.8)
    shown = min(len(survey.parcels), MOST_ROWS)
    bottom = top + 14 + shown * PITCH
    if len(survey.parcels) > MOST_ROWS:
        words = f"and {len(survey.parcels) - MOST_ROWS} more, in parcels.csv"
        page.text(MARGIN + 24, bottom, words, TEXT, colour=SOFT)
        bottom += PITCH
    return bottom


def _table_words(survey: Survey) -> str:
    """What the columns are of."""
    words = "areas of map; energy of the season per area of slope, and by open level ground"
    if survey.settings.rows is not None:
        words += "; rows: azimuth with sides most alike"
    return words


def _class_bar(page: Page, survey: Survey, parcel: Parcel, x: float, y: float) -> None:
    """Shares of the classes of slope."""
    keys = slope_class_keys(survey.settings.asked.slope_edges)
    areas = np.nan_to_num([parcel.numbers[f"{key}_ha_map"] for key in keys])
    if not areas.sum() > 0.0:
        return
    for share, colour in zip(areas / areas.sum(), slope_colours(len(keys)), strict=True):
        page.box(x, y, CLASS_BAR * share, 12, fill=colour)
        x += CLASS_BAR * share
    page.box(x - CLASS_BAR, y, CLASS_BAR, 12, edge=SOFT, line=0.5)


def _score(page: Page, survey: Survey, y: float) -> None:
    """The score in full: its terms, and what each adds to each parcel."""
    if survey.score is None or survey.ranking is None:
        return
    heading(page, MARGIN, y, "Score", clip(survey.score.text, SMALL, INNER - 60))
    terms = survey.score.terms
    shown = survey.ranking.order[:MOST_ROWS]
    if y + 32.0 + 14.0 * len(terms) > _foot_top(*_foot_lines(survey)):
        return
    widths = (INNER - 250.0) / max(len(shown), 1)
    for k, term in enumerate(terms):
        level = y + 32 + k * 14.0
        page.text(MARGIN, level, clip(term, SMALL, 240), SMALL)
        for j, place in enumerate(shown):
            value = survey.ranking.contributions[place, k]
            text = f"{value:.3g}" if np.isfinite(value) else "–"
            page.text(MARGIN + 250 + (j + 1) * widths, level, text, 8.5, across="right")
    for j in range(len(shown)):
        page.text(MARGIN + 250 + (j + 1) * widths, y + 18, f"{j + 1}", 8.5, bold=True,
                  across="right", colour=INK)  # fmt: skip
    page.text(MARGIN, y + 18, "what each term adds, by number", SMALL, colour=SOFT)


def _foot_lines(survey: Survey) -> tuple[list[str], list[str]]:
    """Lines of the notes, and of what is not in it."""
    notes = wrap(" ".join(notes_of(survey)), 8.8, SLACK * INNER)
    return notes, wrap(VINEYARD, TEXT, SLACK * INNER, bold=True)


def _foot_top(notes: list[str], last: list[str]) -> float:
    """Where the first of those lines stands."""
    return HEIGHT - 34 - 14.0 * len(last) - 11.0 * len(notes)


def _foot(page: Page, survey: Survey) -> None:
    """Basis, rule, and what is not in it, in larger letters than on the sheets."""
    lines, last = _foot_lines(survey)
    y = _foot_top(lines, last)
    for k, line in enumerate(lines):
        page.text(MARGIN, y + k * 11.0, line, 8.8, colour=SOFT)
    for k, line in enumerate(last):
        page.text(MARGIN, y + 11.0 * len(lines) + 6 + k * 14.0, line, TEXT, bold=True)
    page.text(
        WIDTH - MARGIN, HEIGHT - 16, f"terrasol {__version__}", 8.2, colour=SOFT, across="right"
    )
