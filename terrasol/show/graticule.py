"""Lines of whole longitude and latitude across a map, named at its left and lower rim."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from terrasol.show.contours import nice_step
from terrasol.show.page import POINTS_PER_PIXEL, Page
from terrasol.show.picture import Picture

APART = 130.0
"""Least distance from line to line [pixels]."""

SIZE = 16.0


def draw_graticule(page: Page, picture: Picture, corner: tuple[float, float]) -> None:
    """Draw longitudes and latitudes over a map whose upper left corner is given [pixels]."""
    left, top = corner
    height, width = picture.shape
    x = left + np.linspace(0.0, width, picture.longitude.shape[1])
    y = top + np.linspace(0.0, height, picture.latitude.shape[0])
    lowest, leftmost = picture.longitude[-1], picture.latitude[::-1, 0]
    east_step = _step(picture.longitude, width)
    north_step = _step(picture.latitude, height)
    for field, step in ((picture.longitude, east_step), (picture.latitude, north_step)):
        known = np.ma.masked_invalid(field)
        levels = _multiples(float(known.min()), float(known.max()), step)
        if levels.size and levels.size < 200 and np.ptp(known) > 0:
            page.axes.contour(
                x,
                y,
                known,
                levels=levels,
                colors="#ffffff",
                linewidths=0.9 * POINTS_PER_PIXEL,
                linestyles="solid",
                alpha=0.35,
            )
    for degrees, place in _crossings(lowest, x, east_step):
        page.lines([[(place, top + height), (place, top + height + 8)]], line=1.2)
        text = degrees_text((degrees + 180.0) % 360.0 - 180.0, east_step, "EW")
        page.text(place, top + height + 28, text, SIZE, across="center")
    for degrees, place in _crossings(leftmost, y[::-1], north_step):
        page.lines([[(left - 8, place), (left, place)]], line=1.2)
        text = degrees_text(degrees, north_step, "NS")
        page.text(left - 14, place, text, SIZE, across="right", down="center_baseline")


def degrees_text(degrees: float, step: float, letters: str) -> str:
    """Degrees with the decimals of their step and a letter for the side, if they have one."""
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    size = f"{abs(degrees):.{decimals}f}"
    if float(size) in (0.0, 180.0):
        return f"{float(size):.0f}°"
    return f"{size}°{letters[0] if degrees > 0 else letters[1]}"


def _step(field: NDArray[np.float64], pixels: int) -> float:
    """Degrees from line to line that suit a side of the map."""
    span = float(np.nanmax(field) - np.nanmin(field))
    return nice_step(max(span, 1e-9), max(pixels / APART, 1.0))


def _multiples(low: float, high: float, step: float) -> NDArray[np.float64]:
    return np.arange(math.ceil(low / step), math.floor(high / step) + 1) * np.float64(step)


def _crossings(rim, places, step):
    """Whole degrees on a rim along which they grow, and the pixel of each."""
    known = np.isfinite(rim)
    rim, places = rim[known], places[known]
    if rim.size < 2 or np.any(np.diff(rim) <= 0):
        return []
    levels = _multiples(float(rim[0]), float(rim[-1]), step)
    return list(zip(levels, np.interp(levels, rim, places), strict=True))
