"""A diagram on a sheet: axes at a place in pixels, a heading, few ticks."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from matplotlib.axes import Axes

from terrasol.show.contours import nice_step
from terrasol.show.key import SMALL, TEXT
from terrasol.show.page import INK, POINTS_PER_PIXEL, SOFT, Page, text_width

TICK = 15.0
"""Size of the letters of ticks [pixels]."""

GRID = "#e4e1da"
"""Colour of lines behind the data."""


class Panel:
    """Axes at a place of the sheet, with a heading above and sparse ticks.

    `tick` is the size of the ticks' letters [pixels].
    """

    def __init__(
        self, page: Page, x: float, y: float, width: float, height: float, tick: float = TICK
    ) -> None:
        self.page, self.x, self.y, self.width, self.height = page, x, y, width, height
        self.tick = tick
        box = (x / page.width, 1 - (y + height) / page.height,
               width / page.width, height / page.height)  # fmt: skip
        self.axes: Axes = page.figure.add_axes(box, facecolor="none")
        self.axes.set_autoscale_on(False)
        self.axes.tick_params(length=0, labelbottom=False, labelleft=False)
        for name, spine in self.axes.spines.items():
            spine.set_visible(name == "bottom")
            spine.set(color=INK, linewidth=1.2 * POINTS_PER_PIXEL)

    def limits(self, low_x: float, high_x: float, low_y: float, high_y: float) -> None:
        """Set both ranges."""
        self.axes.set_xlim(low_x, high_x)
        self.axes.set_ylim(low_y, high_y)

    def place(self, x: float, y: float) -> tuple[float, float]:
        """Where a value of both axes lies on the page [pixels]."""
        left, right = self.axes.get_xlim()
        low, high = self.axes.get_ylim()
        return (
            self.x + (x - left) / (right - left) * self.width,
            self.y + (high - y) / (high - low) * self.height,
        )

    def heading(self, words: str, unit: str = "", size: float = TEXT, rise: float = 18.0) -> None:
        """Write above the panel."""
        self.page.text(self.x, self.y - rise, words, size, bold=True)
        if unit:
            x = self.x + text_width(words, size, bold=True) + 10
            self.page.text(x, self.y - rise, unit, SMALL, colour=SOFT)

    def x_ticks(self, at: Sequence[float], words: Sequence[str], down: float = 22.0) -> None:
        """Write below the panel."""
        low, high = self.axes.get_xlim()
        for value, word in zip(at, words, strict=True):
            x = self.x + (value - low) / (high - low) * self.width
            self.page.text(
                x, self.y + self.height + down, word, self.tick, colour=SOFT, across="center"
            )

    def y_ticks(
        self, at: Sequence[float], words: bool = True, form: Callable[[float], str] = "{:g}".format
    ) -> None:
        """Draw lines across, and write beside the panel if asked for."""
        low, high = self.axes.get_ylim()
        for value in at:
            self.axes.axhline(value, color=GRID, linewidth=POINTS_PER_PIXEL, zorder=0)
            if words:
                y = self.y + (high - value) / (high - low) * self.height
                word = form(value).replace("-", "\N{MINUS SIGN}")
                self.page.text(
                    self.x - 10, y, word, self.tick, colour=SOFT, across="right", down="center"
                )


def steps(low: float, high: float, count: int) -> list[float]:
    """Round values within a range, about `count` of them."""
    step = nice_step(high - low, count)
    return [float(k * step) for k in range(int(np.ceil(low / step)), int(high // step) + 1)]
