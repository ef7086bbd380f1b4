"""A sheet to draw on in pixels, from its upper left corner, by matplotlib's Agg canvas.

No pyplot: the sheet takes its letters from the font that comes with matplotlib, so that the
same content gives the same bytes anywhere with that version. Only a line with letters which
that font lacks is set in a font of the machine, if one has them.
"""

from __future__ import annotations

import io
import unicodedata
from bisect import bisect_right
from collections.abc import Iterable
from contextlib import suppress
from functools import cache, lru_cache
from os import PathLike
from pathlib import Path
from typing import Any, Literal

import matplotlib
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_pdf import PdfPages
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties, fontManager, get_font
from matplotlib.patches import Polygon, Rectangle
from matplotlib.patheffects import withStroke
from matplotlib.text import Text
from numpy.typing import NDArray

PAPER = "#fcfbf8"
INK = "#24262b"
SOFT = "#6c7077"
"""Colours of the sheet, of what is read first, and of what is read after."""

DPI = 100
PRINT_DPI = 3 * DPI
"""Dots of maps and other pictures within a PDF."""

POINTS_PER_PIXEL = 72 / DPI

LAST_RESORT = "Last Resort"
"""A font of the Unicode Consortium that has a box for every letter, and no letter."""


@cache
def _own_font(bold: bool) -> str:
    name = "DejaVuSans-Bold.ttf" if bold else "DejaVuSans.ttf"
    return str(Path(matplotlib.get_data_path()) / "fonts" / "ttf" / name)


@lru_cache(maxsize=8)
def _letters_of(file: str) -> frozenset[int]:
    """All letters of a font; none if it has no outlines or cannot be read."""
    with suppress(OSError, RuntimeError):
        font = get_font(file)
        if font.scalable:
            return frozenset(font.get_charmap())
    return frozenset()


def _font_file(text: str, bold: bool) -> str:
    """The font for a text: our own, or one of the machine for letters that ours lacks."""
    letters = frozenset(map(ord, text))
    return _own_font(bold) if letters <= _letters_of(_own_font(bold)) else _other(letters, bold)


@cache
def _other(letters: frozenset[int], bold: bool) -> str:
    """The machine's upright font of the nearest weight that has all letters, or our own."""
    fonts = sorted(
        (font.style != "normal", abs(int(font.weight) - (700 if bold else 400)), font.fname)
        for font in fontManager.ttflist
        if isinstance(font.weight, int) and not font.name.startswith(LAST_RESORT)
    )
    files = (file for _, _, file in fonts if letters <= _letters_of(file))
    return next(files, _own_font(bold))


def printable(text: str, bold: bool = False) -> str:
    """Replace letters that no font has: by plain ones, else by a box that shows the lack."""
    known = _letters_of(_font_file(text, bold))

    def shown(letter: str) -> str:
        if ord(letter) in known:
            return letter
        plain = unicodedata.normalize("NFKD", letter)
        return plain if known.issuperset(map(ord, plain)) else "\N{WHITE SQUARE}"

    return "".join(map(shown, text))


class Page:
    """One sheet, `width` by `height` pixels; x runs right and y runs down."""

    def __init__(self, width: int, height: int):
        self.width, self.height = width, height
        self.figure = Figure(figsize=(width / DPI, height / DPI), dpi=DPI, facecolor=PAPER)
        self.canvas = FigureCanvasAgg(self.figure)
        self.axes = self.figure.add_axes((0.0, 0.0, 1.0, 1.0), frameon=False)
        self.axes.set_axis_off()
        self.axes.set_autoscale_on(False)
        self.axes.set_xlim(0, width)
        self.axes.set_ylim(height, 0)

    def text(
        self,
        x: float,
        y: float,
        text: str,
        size: float,
        *,
        colour: str = INK,
        bold: bool = False,
        across: Literal["left", "center", "right"] = "left",
        down: Literal["baseline", "center", "center_baseline"] = "baseline",
        turn: float = 0.0,
        halo: str | None = None,
    ) -> None:
        """Write at a place; `size` in pixels, `turn` counter-clockwise in degrees."""
        text = printable(text, bold)
        effects = [withStroke(linewidth=2.4, foreground=halo, alpha=0.75)] if halo else None
        self.axes.add_artist(
            Text(
                x,
                y,
                text,
                color=colour,
                fontproperties=_font(text, size, bold),
                horizontalalignment=across,
                verticalalignment=down,
                rotation=turn,
                rotation_mode="anchor",
                parse_math=False,
                path_effects=effects,
            )
        )

    def image(self, x: float, y: float, pixels: NDArray[Any], dots: int = 1) -> None:
        """Lay an array of shape (height, width, 3) down, `dots` of its pixels on one."""
        height, width = (size / dots for size in pixels.shape[:2])
        self.axes.imshow(
            (np.asarray(pixels) * 255 + 0.5).astype(np.uint8),
            extent=(x, x + width, y + height, y),
            interpolation="nearest",
            aspect="auto",
            origin="upper",
        )

    def box(self, x, y, width, height, *, fill="none", edge="none", line=1.0) -> None:
        """Draw a rectangle from its upper left corner."""
        self.axes.add_patch(
            Rectangle(
                (x, y),
                width,
                height,
                facecolor=fill,
                edgecolor=edge,
                linewidth=line * POINTS_PER_PIXEL if edge != "none" else 0.0,
                joinstyle="miter",
            )
        )

    def shape(self, corners, *, fill="none", edge="none", line=1.0) -> None:
        """Draw a polygon."""
        self.axes.add_patch(
            Polygon(
                np.asarray(corners, float),
                closed=True,
                facecolor=fill,
                edgecolor=edge,
                linewidth=line * POINTS_PER_PIXEL if edge != "none" else 0.0,
                joinstyle="miter",
            )
        )

    def lines(self, paths, *, colour=INK, line=1.0, strength=1.0) -> None:
        """Draw open lines, each an array of shape (n, 2)."""
        self.axes.add_collection(
            LineCollection(
                [np.asarray(path, float) for path in paths],
                colors=colour,
                linewidths=line * POINTS_PER_PIXEL,
                alpha=strength,
                linestyles="solid",
                antialiaseds=True,
            ),
            autolim=False,
        )

    def png(self, scale: float = 1.0, **metadata: str) -> bytes:
        """The sheet as a PNG file with these text entries, `scale` dots a pixel."""
        out = io.BytesIO()
        self.figure.set_dpi(DPI * scale)
        self.canvas.print_png(out, metadata=metadata, pil_kwargs={"compress_level": 4})
        self.figure.set_dpi(DPI)
        return out.getvalue()

    def pdf(self, **metadata: str) -> bytes:
        """The sheet as a PDF file of one page, DPI pixels an inch, its letters embedded.

        Without a date, so that the same content gives the same bytes.
        """
        out = io.BytesIO()
        metadata = {**metadata, "CreationDate": None}  # type: ignore[dict-item]
        self.figure.savefig(out, format="pdf", dpi=PRINT_DPI, metadata=metadata)
        return out.getvalue()


def book(place: str | PathLike[str], pages: Iterable[Page], **metadata: str) -> None:
    """Bind sheets to one PDF file, one page each; without a date, as `Page.pdf`.

    Each sheet is written as it comes, so that pages may be drawn one at a time and forgotten;
    only their images are kept until the last one.
    """
    with open(place, "wb") as out:
        bound = PdfPages(out, metadata={**metadata, "CreationDate": None})
        for page in pages:
            bound.savefig(page.figure, dpi=PRINT_DPI)
        bound.close()  # not after a failure: fonts take seconds


def _font(text: str, size: float, bold: bool) -> FontProperties:
    return FontProperties(fname=_font_file(text, bold), size=size * POINTS_PER_PIXEL)


def text_width(text: str, size: float, bold: bool = False) -> float:
    """Width of a line of text [pixels]; `size` in pixels."""
    text = printable(text, bold)
    font = get_font(_font_file(text, bold))
    font.set_size(size * POINTS_PER_PIXEL, DPI)
    font.set_text(text, 0.0)
    return font.get_width_height()[0] / 64.0


def wrap(text: str, size: float, width: float, bold: bool = False) -> list[str]:
    """Break text into lines no wider than `width` pixels; a longer word is cut."""
    lines: list[str] = []
    for word in text.split():
        longer = f"{lines[-1]} {word}" if lines else word
        if lines and text_width(longer, size, bold) <= width:
            lines[-1] = longer
        else:
            lines.append(clip(word, size, width, bold))
    return lines


def clip(text: str, size: float, width: float, bold: bool = False) -> str:
    """Shorten text to a width [pixels], with an ellipsis for what is lost."""
    text = printable(" ".join(text.split()), bold)
    if text_width(text, size, bold) <= width:
        return text
    kept = bisect_right(
        range(len(text)), width, key=lambda count: text_width(text[:count] + "…", size, bold)
    )
    return text[: max(kept - 1, 0)].rstrip() + "…"
