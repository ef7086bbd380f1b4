"""Contour lines in moderation: few, thin, every fifth bolder and named once."""

from __future__ import annotations

import math

import numpy as np
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

LABEL_SIZE = 15.0
LABEL_RUN, LABEL_MARGIN, LABEL_APART = 34.0, 50.0, 150.0
"""Half the length of line under a label, its distance to the rim and to the next [pixels]."""


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
            _label(page, f"{level:.10g}", path, rim, centres)


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


def _label(page, text, path, rim, centres) -> None:
    """Name a level once, where one of its lines is straight and has room."""
    best, where = 0.0, None
    for line in path.to_polygons(closed_only=False):
        reach = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(line, axis=0).T))])
        if reach[-1] < 8 * LABEL_RUN:
            continue
        middle = np.arange(LABEL_RUN, reach[-1] - LABEL_RUN, LABEL_RUN)
        ends = [
            np.stack([np.interp(middle + run, reach, line[:, k]) for k in (0, 1)], axis=-1)
            for run in (-LABEL_RUN, 0.0, LABEL_RUN)
        ]
        straight = np.hypot(*(ends[2] - ends[0]).T) / (2 * LABEL_RUN)
        x, y = ends[1].T
        room = (x > rim[0] + LABEL_MARGIN) & (x < rim[2] - LABEL_MARGIN)
        room &= (y > rim[1] + LABEL_MARGIN) & (y < rim[3] - LABEL_MARGIN)
        for other in centres:
            room &= np.hypot(*(ends[1] - other).T) > LABEL_APART
        level = 1 - 0.2 * np.abs(ends[2] - ends[0])[:, 1] / (2 * LABEL_RUN)
        score = np.where(room & (straight > 0.9), straight * level, 0.0)
        k = int(np.argmax(score))
        if score[k] > best:
            best, where = float(score[k]), (ends[1][k], ends[2][k] - ends[0][k])
    if where is None:
        return
    (x, y), (run, fall) = where
    turn = math.degrees(math.atan2(-fall, run))
    turn = (turn + 90.0) % 180.0 - 90.0
    centres.append(where[0])
    page.text(
        x,
        y,
        text,
        LABEL_SIZE,
        turn=turn,
        colour=LINE,
        across="center",
        down="center",
        halo=LABEL_HALO,
    )
