"""Contour lines in moderation: few, thin, every fifth bolder and named once."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.path import Path
from numpy.typing import NDArray

from terrasol.show.page import POINTS_PER_PIXEL, Page

LEVELS = 16
"""At most so many lines between the lowest and the highest ground."""

APART = 8.0
"""Least mean distance between lines [pixels]."""

FINEST_STEP = 0.1
"""Below this step [m] a contour line shows the noise of the elevation model: none is drawn."""

SMOOTHING = 3
"""Lines are traced on pixels of this size, after one more pass of a 1-2-1 mean."""

LINE, LABEL_HALO = "#20242c", "#ffffff"


@dataclass(frozen=True)
class Lettering:
    """How lines are named, all in pixels.

    Parameters
    ----------
    size : float
        Of the letters.
    run : float
        Half the length of line under a name.
    margin, apart : float
        Distance of a name's middle to the map's rim and to the next name.
    """

    size: float = 15.0
    run: float = 34.0
    margin: float = 50.0
    apart: float = 150.0


MAP_LETTERS = Lettering()
"""Names of lines on a map that fills a page."""

Box = tuple[float, float, float, float]
"""Left, top, right and bottom on a page [pixels]."""


def nice_step(span: float, count: float) -> float:
    """The 1, 2 or 5 times a power of ten that comes next above span / count."""
    raw = span / count
    power = 10.0 ** math.floor(math.log10(raw))
    return next(factor * power for factor in (1.0, 2.0, 5.0, 10.0) if factor * power >= raw * 0.999)


def contour_step(heights: NDArray[np.floating]) -> float | None:
    """Height between contour lines that suits a map's pixels [m]; None for flat ground."""
    known = heights[np.isfinite(heights)]
    if known.size == 0 or (span := float(np.ptp(known))) <= FINEST_STEP:
        return None
    grid = _smooth(heights)
    fall = np.hypot(np.diff(grid, axis=0)[:, :-1], np.diff(grid, axis=1)[:-1]) / SMOOTHING
    fall = fall[np.isfinite(fall)]
    steepness = float(fall.mean()) if fall.size else 0.0
    step = nice_step(max(span / LEVELS, APART * steepness), 1.0)
    return step if FINEST_STEP <= step < span else None


def draw_contours(
    page: Page,
    heights: NDArray[np.float32],
    step: float,
    corner: tuple[float, float],
    named: bool = True,
) -> None:
    """Draw contour lines over a map.

    Parameters
    ----------
    page : Page
    heights : ndarray of float32, shape (height, width)
        Heights at the map's pixels [m]; void NaN.
    step : float
        Distance between lines [m].
    corner : tuple of float
        Upper left corner of the map on the page [pixels].
    named : bool
        Write the heights of the bolder lines.
    """
    grid = _smooth(heights)
    if min(grid.shape) < 2 or not np.isfinite(grid).any():
        return
    first, last = np.ceil(np.nanmin(grid) / step), np.floor(np.nanmax(grid) / step)
    numbers = np.arange(first, last + 1)
    x = corner[0] + (np.arange(grid.shape[1]) + 0.5) * SMOOTHING
    y = corner[1] + (np.arange(grid.shape[0]) + 0.5) * SMOOTHING
    centres: list[NDArray[np.float64]] = []
    for bold in (False, True):
        chosen = numbers[(numbers % 5 == 0) == bold]
        if chosen.size == 0:
            continue
        lines = page.axes.contour(
            x,
            y,
            np.ma.masked_invalid(grid),
            levels=chosen * step,
            colors=LINE,
            linewidths=(1.3 if bold else 0.8) * POINTS_PER_PIXEL,
            linestyles="solid",
            alpha=0.55 if bold else 0.38,
        )
        if not (bold and named):
            continue
        rim = (*corner, corner[0] + heights.shape[1], corner[1] + heights.shape[0])
        for level, path in zip(chosen * step, lines.get_paths(), strict=True):
            name_line(page, f"{level:.10g}", path, rim, centres)


def _smooth(heights: NDArray[np.float32]) -> NDArray[np.float32]:
    """Mean of blocks of pixels, then a 1-2-1 mean both ways; void where any part is.

    Past the rim the ground is taken to run on straight, so that lines meet it without a bend.
    """
    rows, columns = (size // SMOOTHING for size in heights.shape)
    blocks = heights[: rows * SMOOTHING, : columns * SMOOTHING]
    grid = blocks.reshape(rows, SMOOTHING, columns, SMOOTHING).mean(axis=(1, 3))
    for _ in range(2):
        padded = np.pad(grid, ((1, 1), (0, 0)), mode="reflect", reflect_type="odd")
        grid = ((padded[:-2] + padded[2:]) / 4 + padded[1:-1] / 2).T
    return np.ascontiguousarray(grid)


def name_line(
    page: Page,
    text: str,
    path: Path,
    rim: Box,
    centres: list[NDArray[np.float64]],
    lettering: Lettering = MAP_LETTERS,
    *,
    taken: Sequence[Box] = (),
    colour: str = LINE,
    halo: str = LABEL_HALO,
) -> bool:
    """Name a level once, where one of its lines is straight and has room.

    Parameters
    ----------
    page : Page
    text : str
        The name.
    path : Path
        Its lines on the page [pixels].
    rim : tuple of float
        Of the map.
    centres : list of ndarray
        Middles of the names so far; the new one is added.
    lettering : Lettering
    taken : sequence of tuple of float
        Boxes in which no name may stand.
    colour, halo : str
        Of the letters, and around them.

    Returns
    -------
    bool
        Whether there was room.
    """
    where = _straight_place(path, rim, centres, lettering, taken)
    if where is None:
        return False
    (x, y), (run, fall) = where
    turn = math.degrees(math.atan2(-fall, run))
    turn = (turn + 90.0) % 180.0 - 90.0
    centres.append(where[0])
    page.text(
        x, y, text, lettering.size,
        turn=turn, colour=colour, across="center", down="center", halo=halo,
    )  # fmt: skip
    return True


def _straight_place(
    path: Path,
    rim: Box,
    centres: Sequence[NDArray[np.float64]],
    lettering: Lettering,
    taken: Sequence[Box],
) -> tuple[NDArray[np.float64], NDArray[np.float64]] | None:
    """Middle and direction of the straightest run of a line that has room."""
    best, where = 0.0, None
    run, margin = lettering.run, lettering.margin
    for each in path.to_polygons(closed_only=False):
        line = np.asarray(each, np.float64)
        reach = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(line, axis=0).T))])
        if reach[-1] < 8 * run:
            continue
        middle = np.arange(run, reach[-1] - run, run)
        ends = [
            np.stack([np.interp(middle + step, reach, line[:, k]) for k in (0, 1)], axis=-1)
            for step in (-run, 0.0, run)
        ]
        straight = np.hypot(*(ends[2] - ends[0]).T) / (2 * run)
        x, y = ends[1].T
        room = (x > rim[0] + margin) & (x < rim[2] - margin)
        room &= (y > rim[1] + margin) & (y < rim[3] - margin)
        for left, top, right, bottom in taken:
            room &= (x < left - run) | (x > right + run) | (y < top - run) | (y > bottom + run)
        for other in centres:
            room &= np.hypot(*(ends[1] - other).T) > lettering.apart
        level = 1 - 0.2 * np.abs(ends[2] - ends[0])[:, 1] / (2 * run)
        score = np.where(room & (straight > 0.9), straight * level, 0.0)
        k = int(np.argmax(score))
        if score[k] > best:
            best, where = float(score[k]), (ends[1][k], ends[2][k] - ends[0][k])
    return where
