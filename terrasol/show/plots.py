"""How the predictors of plots go together, on one sheet."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib import style
from matplotlib.colors import LinearSegmentedColormap, to_hex
from numpy.typing import NDArray

from terrasol import __version__
from terrasol.engine.plot_correlations import (
    Scale,
    by_scale,
    matrix,
    response_values,
    short_name,
    shown_predictors,
)
from terrasol.engine.plot_table import PlotTable
from terrasol.practice.plots import chance_level
from terrasol.show.key import NOTE_LEADING, SMALL
from terrasol.show.page import INK, PAPER, SOFT, Page, clip, text_width, wrap

MARGIN, HEAD, FOOT = 56, 150, 60
SIDE, GAP = 48, 70
"""Measures of the sheet [pixels]: a box of the matrix, and what parts the two matrices."""

TITLE, SUBTITLE, NAME, NUMBER = 34.0, 20.0, 16.0, 15.0
"""Sizes of letters [pixels]."""

TURN = 52.0
"""Slant of the names above the columns [degrees]."""

AGAINST, ALONG = "#2f6db3", "#cf6a1a"
"""Ends of the colours: correlations of -1 and 1; told apart by colour-blind eyes."""

COLOURS = LinearSegmentedColormap.from_list("correlation", [AGAINST, PAPER, ALONG])
DARK = 0.72
"""Size of a correlation from which its number is written in white."""


def predictors_png(table: PlotTable, *, title: str, response: str | None = None) -> bytes:
    """Draw correlations of predictors: with each other, and across scales.

    Parameters
    ----------
    table : PlotTable
    title : str
        Head of the sheet.
    response : str, optional
        A measured column: the right matrix is then of its rank correlation with each predictor
        at each scale, else of the predictors' with themselves at the raster's own cells.

    Returns
    -------
    bytes
        A PNG file.
    """
    names = shown_predictors(table)
    scales, across = by_scale(table, names, response)
    labels = [short_name(name) for name in names]
    left = MARGIN + max(text_width(label, NAME) for label in labels) + 12
    slanted = np.sin(np.radians(TURN)) * max(
        text_width(label, NAME) for label in [*labels, *map(_scale_words, scales)]
    )
    top = HEAD + slanted + 76
    right = left + len(names) * SIDE + GAP
    overhang = np.cos(np.radians(TURN)) * text_width(labels[-1], NAME)
    right = max(right, left + len(names) * SIDE + overhang - SIDE / 2 + 24)
    edge = right + len(scales) * SIDE
    width = max(edge + 110, 900) + MARGIN
    lines = wrap(_note(table, response), SMALL, width - 2 * MARGIN)
    bottom = top + len(names) * SIDE
    page = Page(round(width), round(bottom + 44 + len(lines) * NOTE_LEADING + FOOT))
    with style.context("default"):
        page.text(MARGIN, 66, clip(title, TITLE, width - 2 * MARGIN, bold=True), TITLE, bold=True)
        page.text(MARGIN, 100, _subtitle(table, response), SUBTITLE, colour=SOFT)
        _heading(page, left, HEAD + 14, "Among predictors", "Pearson below, Spearman above")
        _heading(page, right, HEAD + 14, *_scale_heading(response))
        _boxes(page, left, top, matrix(table, names), skip_diagonal=True)
        _boxes(page, right, top, across)
        _names(page, left, top, labels)
        _names_above(page, left, top, labels)
        _names_above(page, right, top, [_scale_words(scale) for scale in scales])
        for k, line in enumerate(lines):
            page.text(MARGIN, bottom + 40 + k * NOTE_LEADING, line, SMALL, colour=SOFT)
        page.text(MARGIN, page.height - 26, f"terrasol {__version__}", SMALL, colour=SOFT)
        return page.png(Title=title, Software=f"terrasol {__version__}")


def _subtitle(table: PlotTable, response: str | None) -> str:
    """What is drawn."""
    plots = int(_placed(table).sum())
    about = f"  ·  measured: {response}" if response else ""
    return (
        f"Correlation of predictors over {plots} plots, values of the cell,"
        f" {table.cells[0]:.3g} m{about}"
    )


def _note(table: PlotTable, response: str | None) -> str:
    """How large a correlation chance alone makes."""
    plots = int(_placed(table).sum())
    if response is not None:
        plots = int((np.isfinite(response_values(table, response)) & _placed(table)).sum())
    more = (
        " The best of many predictors and scales must be judged more strictly: see"
        " strongest_by_chance in run.json."
        if response
        else ""
    )
    return (
        f"With {plots} independent plots, chance alone gives one predictor named beforehand a"
        f" correlation over {chance_level(plots):.2f} or under \N{MINUS SIGN}"
        f"{chance_level(plots):.2f} in one case of twenty; plots near each other are not"
        f" independent.{more} Full table: correlations.csv."
    )


def _placed(table: PlotTable) -> NDArray[np.bool_]:
    return (table.frame["flag"] == "ok").to_numpy()


def _heading(page: Page, x: float, y: float, words: str, more: str) -> None:
    """Name a matrix, in two lines."""
    page.text(x, y, words, SUBTITLE, bold=True)
    page.text(x, y + 24, more, SMALL, colour=SOFT)


def _scale_heading(response: str | None) -> tuple[str, str]:
    if response:
        return f"With {response}", "Spearman, by scale"
    return "Across scales", "Spearman with own cell"


def _scale_words(scale: Scale) -> str:
    """A scale as the name of a column."""
    cell = f"{scale.cell:.3g} m cell"
    return cell if scale.radius is None else f"{cell}, within {scale.radius:g} m"


def _boxes(
    page: Page, x: float, y: float, values: NDArray[np.float64], skip_diagonal: bool = False
) -> None:
    """A matrix of coloured boxes with their numbers."""
    for i, row in enumerate(values):
        for j, value in enumerate(row):
            place = x + j * SIDE, y + i * SIDE
            if skip_diagonal and i == j:
                page.box(*place, SIDE - 2, SIDE - 2, fill="#ebe8e1")
                continue
            if np.isnan(value):
                continue
            fill = to_hex(COLOURS(0.5 + 0.5 * float(value)))
            page.box(*place, SIDE - 2, SIDE - 2, fill=fill)
            colour = "#ffffff" if abs(value) > DARK else INK
            page.text(
                place[0] + SIDE / 2 - 1, place[1] + SIDE / 2 - 1, _number(value), NUMBER,
                colour=colour, across="center", down="center_baseline",
            )  # fmt: skip


def _number(value: float) -> str:
    """A correlation in two digits without its zero.

    Examples
    --------
    >>> _number(0.874), _number(-0.05), _number(0.999)
    ('.87', '−.05', '1')
    """
    if abs(value) >= 0.995:
        return "1" if value > 0 else "\N{MINUS SIGN}1"
    text = f"{abs(value):.2f}"[1:]
    return f"\N{MINUS SIGN}{text}" if value < -0.005 else text


def _names(page: Page, x: float, y: float, labels: Sequence[str]) -> None:
    """Names beside the rows."""
    for i, label in enumerate(labels):
        at = y + i * SIDE + SIDE / 2 - 1
        page.text(x - 10, at, label, NAME, across="right", down="center")


def _names_above(page: Page, x: float, y: float, labels: Sequence[str]) -> None:
    """Names above the columns, slanted."""
    for j, label in enumerate(labels):
        page.text(x + j * SIDE + SIDE / 2 + 4, y - 10, label, NAME, turn=TURN)
