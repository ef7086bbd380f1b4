"""What explains a map: colour bar, months, scale bar, true north, the words."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial

import matplotlib
import numpy as np
from numpy.typing import NDArray

from terrasol.engine.outputs import MONTH_NAMES
from terrasol.show.contours import LINE, nice_step
from terrasol.show.page import INK, PAPER, SOFT, Page, text_width, wrap
from terrasol.show.relief import RELIEF, hatch

COLOUR_MAP, DARKEST, LIGHTEST = "magma", 0.14, 0.97
"""Perceptually uniform, and its lightness alone tells it, so that it is read by colour-blind
eyes and in grey; from dusk to daylight, as the quantity. The blackest part is left out."""

LEAST, MOST = 0.10, 0.95
"""What black and white become in red, green and blue: the relief has room on both sides."""

OUTSIDE = 0.5
"""Share of the ground beyond either end of the colours [%]: the colour bar's points."""

TEXT, SMALL = 18.0, 16.0
"""Sizes of letters [pixels]."""

LEADING = 27.0
"""From one line of text to the next [pixels]."""

BAR_WIDTH, BAR_HEIGHT, HISTOGRAM_WIDTH = 26, 300, 120
MONTHS_HEIGHT = 110
SCALE_LONGEST = 240
ARROW = 27
"""Sizes of the parts [pixels]; ARROW is half the arrow's length."""

TICK_ROOM = 24.0
"""What a date on the colour bar keeps free above and below [pixels]: the first and the last are
named, and others nearer to them are left out."""

FEW_MONTHS = 8
"""So many bars, or fewer, are named by three letters; more by one."""

FAINT = 2.0
"""Least height of the bar of a month with any sun [pixels]."""

BINS = 50

SMALLEST_SPAN = 1e-5
"""Values nearer to each other than this share of themselves are one value."""

NOTE_LEADING = 23.0

BAR_COLOUR, SCALE_DARK = "#c4633f", INK


@dataclass(frozen=True)
class Scale:
    """From a value to its colour.

    Parameters
    ----------
    low, high : float
        Ends of the colours.
    below, above : bool
        Whether ground lies outside them.
    colour_map : str
        Of matplotlib.
    first_day : numpy.datetime64[D], optional
        Where values are days since one: the bar then names dates.
    """

    low: float
    high: float
    below: bool = False
    above: bool = False
    colour_map: str = COLOUR_MAP
    first_day: np.datetime64 | None = None

    def colours(self, values: NDArray[np.floating]) -> NDArray[np.float32]:
        """Red, green and blue of values; NaN as `low`."""
        listed = matplotlib.colormaps[self.colour_map](np.arange(256))[:, :3]
        places = np.linspace(DARKEST * 255, LIGHTEST * 255, 256)
        table = np.stack([np.interp(places, np.arange(256), part) for part in listed.T], axis=-1)
        table = (LEAST + (MOST - LEAST) * table).astype(np.float32)
        share = (values - self.low) / (self.high - self.low)
        index = np.clip(np.nan_to_num(share) * 255 + 0.5, 0, 255).astype(np.uint8)
        return table[index]


def make_scale(values: NDArray[np.floating]) -> Scale:
    """Colours for values: their range, but for `OUTSIDE` per cent at either end."""
    known = values[np.isfinite(values)].astype(np.float64)
    if known.size == 0:
        return Scale(0.0, 1.0)
    least, most = float(known.min()), float(known.max())
    low, high = (float(v) for v in np.percentile(known, [OUTSIDE, 100 - OUTSIDE]))
    if high - low <= SMALLEST_SPAN * max(abs(low), abs(high), 1e-30):
        low, high = least, most
    if high - low <= SMALLEST_SPAN * max(abs(low), abs(high), 1e-30):
        margin = 0.05 * abs(low) or 1.0
        return Scale(low - margin, high + margin)
    return Scale(low, high, least < low, most > high)


def number(value: float, step: float) -> str:
    """A number with the decimals that its step has, and thin spaces by thousands."""
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    return f"{value + 0.0:,.{decimals}f}".replace(",", "\N{THIN SPACE}").replace("-", "−")


def significant(value: float, digits: int) -> str:
    """A number with so many significant digits, no whole digit lost, no nought behind."""
    power = math.floor(math.log10(abs(value))) if value else 0
    text = number(value, 10.0 ** min(power - digits + 1, 0))
    return text.rstrip("0").rstrip(".") if "." in text else text


def mean_text(mean: float, step: float) -> str:
    """A mean to a tenth of its axis's step, and to four digits at least."""
    power = math.floor(math.log10(abs(mean))) if mean else 0
    return "mean " + number(mean, min(step / 10, 10.0 ** (power - 3)))


def date_text(day: np.datetime64) -> str:
    """A date without its year: ``9 Apr``."""
    date = day.astype("M8[D]").item()
    return f"{date.day} {MONTH_NAMES[date.month - 1][:3]}"


def _ticks(scale: Scale) -> tuple[list[tuple[float, str]], Callable[[float], str]]:
    """Values to be named on the bar, with their names; and how to word the mean."""
    first = scale.first_day
    if first is None:
        step = nice_step(scale.high - scale.low, 6)
        at = np.arange(math.ceil(scale.low / step), math.floor(scale.high / step) + 1) * step
        return [(tick, number(tick, step)) for tick in at], lambda mean: mean_text(mean, step)
    return _date_ticks(scale, first), lambda mean: f"mean {date_text(first + round(mean))}"


def _date_ticks(scale: Scale, first: np.datetime64) -> list[tuple[float, str]]:
    """First and last day of the colours, and between them months or parts of months."""
    days = np.arange(math.ceil(scale.low), math.floor(scale.high) + 1)
    dates = first + days
    of_month = (dates - dates.astype("M8[M]")).astype(int) + 1
    wanted = (1,) if days.size > 200 else (1, 15) if days.size > 45 else (1, 8, 15, 22)
    near = TICK_ROOM / BAR_HEIGHT * (scale.high - scale.low)
    named = [int(day) for day in days[-1:]]
    for day in [*days[:1].tolist(), *days[np.isin(of_month, wanted)].tolist()]:
        if all(abs(day - other) >= near for other in named[:2]):
            named.append(day)
    return [(float(day), date_text(first + day)) for day in sorted(named)]


def points_text(scale: Scale) -> str:
    """What the points of the colour bar stand for; empty if it has none."""
    share = f"{OUTSIDE:g} % of the ground"
    if scale.below and scale.above:
        return f"The points of the colour bar hold the lowest and the highest {share}."
    if scale.below or scale.above:
        which, end = ("lower", "lowest") if scale.below else ("upper", "highest")
        return f"The {which} point of the colour bar holds the {end} {share}."
    return ""


def printed_unit(unit: str) -> str:
    """A unit with its exponents raised: ``MJ m-2`` as MJ m⁻²."""
    raised = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
    return re.sub(r"(?<=[A-Za-z])-?\d+", lambda found: found[0].translate(raised), unit)


def heading(page: Page, x: float, y: float, text: str, unit: str, width: float) -> float:
    """Write what a diagram shows and its unit; return the y below."""
    for line in wrap(text, TEXT, width, bold=True):
        page.text(x, y + TEXT, line, TEXT, bold=True)
        y += LEADING
    page.text(x, y + SMALL, unit, SMALL, colour=SOFT)
    return y + LEADING


def draw_colour_bar(
    page: Page,
    x: float,
    y: float,
    scale: Scale,
    values: NDArray[np.floating],
    mean: float | None = None,
) -> None:
    """Draw the colour bar, with the share of ground at each colour beside it."""
    known = values[np.isfinite(values)]
    ticks, mean_words = _ticks(scale)
    left = x + max((text_width(label, TEXT) for _, label in ticks), default=0.0) + 14
    right, bottom = left + BAR_WIDTH, y + BAR_HEIGHT

    def height_of(value):
        return bottom - (value - scale.low) / (scale.high - scale.low) * BAR_HEIGHT

    ramp = scale.colours(np.linspace(scale.high, scale.low, BAR_HEIGHT))
    page.image(left, y, np.repeat(ramp[:, None], BAR_WIDTH, axis=1))
    for there, edge, tip, value in (
        (scale.above, y, y - 16, scale.high),
        (scale.below, bottom, bottom + 16, scale.low),
    ):
        if there:
            corners = [(left, edge), (right, edge), ((left + right) / 2, tip)]
            page.shape(corners, fill=scale.colours(np.array([value]))[0])
    for tick, label in ticks:
        level = height_of(tick)
        page.lines([[(left - 7, level), (left, level)]], line=1.2)
        page.text(left - 12, level, label, TEXT, across="right", down="center_baseline")
    if known.size == 0:
        return
    page.text(right + 6, y - 9, "share of ground", SMALL, colour=SOFT)
    counts, edges = np.histogram(known, BINS, (scale.low, scale.high))
    centres = (edges[1:] + edges[:-1]) / 2
    longest = HISTOGRAM_WIDTH / max(counts.max(), 1)
    for count, low, high, colour in zip(
        counts, edges[:-1], edges[1:], scale.colours(centres), strict=True
    ):
        top, base = height_of(high), height_of(low)
        page.box(right + 6, top, count * longest, base - top, fill=colour)
    if mean is None:
        mean = float(known.mean(dtype=np.float64))
    level = height_of(min(max(mean, scale.low), scale.high))
    page.lines([[(right + 6, level), (right + 6 + HISTOGRAM_WIDTH, level)]], line=1.0)
    text = mean_words(mean)
    page.text(right + 6 + HISTOGRAM_WIDTH + 6, level, text, SMALL, down="center_baseline")


def draw_months(
    page: Page, x: float, y: float, width: float, means: Mapping[tuple[int, int], float]
) -> None:
    """Draw a bar for each (year, month); the least, the greatest and noughts with their values."""
    values = np.nan_to_num(np.array(list(means.values()), float))
    bottom, few = y + MONTHS_HEIGHT, len(means) <= FEW_MONTHS
    slot = width / (FEW_MONTHS if few else max(12, len(means)))
    page.lines([[(x, bottom), (x + slot * len(means), bottom)]], line=1.2)
    top = max(float(values.max(initial=0.0)), 1e-30)
    ends = (int(values.argmin()), int(values.argmax()))
    for k, ((_, month), value) in enumerate(means.items()):
        middle = x + (k + 0.5) * slot
        if slot > SMALL:
            name = MONTH_NAMES[month - 1][: 3 if few else 1]
            page.text(middle, bottom + 20, name, SMALL, colour=SOFT, across="center")
        tall = max(values[k] / top * (MONTHS_HEIGHT - 22), FAINT) if value > 0 else 0.0
        page.box(middle - 0.36 * slot, bottom - tall, 0.72 * slot, tall, fill=BAR_COLOUR)
        if k in ends or (value == 0 and slot > SMALL):
            text = significant(float(values[k]), 3)
            page.text(middle, bottom - tall - 6, text, SMALL, across="center")
    if len({year for year, _ in means}) > 1:
        _name_years(page, x, bottom, slot, [year for year, _ in means])


def _name_years(page, x, bottom, slot, years) -> None:
    """Write each year below its first month."""
    for k, year in enumerate(years):
        if year not in years[:k]:
            left = x + k * slot
            text = f"’{year % 100:02d}" if slot * 12 < 50 else str(year)
            page.text(left + 5, bottom + 44, text, SMALL, colour=SOFT)
            page.lines([[(left, bottom), (left, bottom + 46)]], line=0.8)


def draw_notes(page: Page, x: float, y: float, lines: Sequence[str]) -> None:
    """Write lines already broken."""
    for k, line in enumerate(lines):
        page.text(x, y + SMALL + k * NOTE_LEADING, line, SMALL, colour=SOFT)


def scale_bar(metres_per_pixel: float) -> tuple[float, float]:
    """Length of a scale bar [m], a round one, and how long it is drawn [pixels]."""
    room = SCALE_LONGEST * metres_per_pixel
    power = 10.0 ** math.floor(math.log10(room))
    length = next(factor * power for factor in (5.0, 2.0, 1.0) if factor * power <= room)
    return length, length / metres_per_pixel


def draw_scale_bar(page: Page, x: float, y: float, metres_per_pixel: float) -> float:
    """Draw a scale bar around the height y; return the x behind it."""
    length, pixels = scale_bar(metres_per_pixel)
    parts = 4 if f"{length:e}".startswith("2") else 5
    for k in range(0, parts, 2):
        page.box(x + k * pixels / parts, y - 5, pixels / parts, 10, fill=SCALE_DARK)
    page.box(x + 0.7, y - 4.3, pixels - 1.4, 8.6, edge=SCALE_DARK, line=1.4)
    unit, metres = ("km", 1000.0) if length >= 1000 else ("m", 1.0)
    end = f"{length / metres:.6g} {unit}"
    page.text(x, y - 12, "0", SMALL, across="center")
    page.text(x + pixels, y - 12, end, SMALL, across="center")
    return x + pixels + text_width(end, SMALL) / 2


def draw_north(page: Page, x: float, y: float, azimuth: float) -> float:
    """Draw an arrow to true north about (x, y); return the x behind it.

    Parameters
    ----------
    azimuth : float
        Direction of true north on the paper, clockwise from up [degrees].
    """
    turn = math.radians(azimuth)
    ahead = np.array([math.sin(turn), -math.cos(turn)])
    aside = np.array([math.cos(turn), math.sin(turn)])
    centre = np.array([x, y])
    tip, tail = centre + ARROW * ahead, centre - 0.55 * ARROW * ahead
    left, right = (centre - ARROW * ahead + s * 0.55 * ARROW * aside for s in (-1, 1))
    page.shape([tip, left, tail], fill=INK, edge=INK, line=1.2)
    page.shape([tip, tail, right], fill=PAPER, edge=INK, line=1.2)
    across, down = centre + (ARROW + 11) * ahead
    page.text(across, down, "N", SMALL, bold=True, across="center", down="center", turn=-azimuth)
    return x + ARROW


def draw_legend(
    page: Page,
    x: float,
    y: float,
    *,
    relief: bool,
    step: float | None,
    void: bool,
    colour_map: str = COLOUR_MAP,
    void_words: str = "no data",
    marked_words: str = "",
) -> None:
    """Name what the map shows beside colours, about the height y.

    Parameters
    ----------
    relief, void : bool
        Whether the map has any.
    step : float or None
        Distance between contour lines [m]; None without any.
    colour_map : str
        Of the map.
    void_words : str
        What ground without a value is.
    marked_words : str
        What the ground without a value is that is hatched the other way; empty if none is.
    """
    entries: list[tuple[Callable[..., None], str]] = []
    if relief:
        entries.append((partial(_relief_swatch, colour_map), "relief lightly shaded"))
    if step is not None:
        entries.append((_contour_swatch, f"contours every {step:.6g} m"))
    if void:
        entries.append((partial(_void_swatch, False), void_words))
    if marked_words:
        entries.append((partial(_void_swatch, True), marked_words))
    for k in range(0, len(entries), 2):
        column = entries[k : k + 2]
        for (draw, text), level in zip(column, (y - 13, y + 13), strict=False):
            draw(page, x, level)
            page.text(x + 44, level, text, SMALL, down="center_baseline")
        x += 44 + max(text_width(text, SMALL) for _, text in column) + 36


def _relief_swatch(colour_map, page, x, y) -> None:
    light = np.repeat(np.linspace(RELIEF, -RELIEF, 34)[None, :, None], 18, axis=0)
    page.image(x, y - 9, Scale(0.0, 1.0, colour_map=colour_map).colours(np.array([0.5])) + light)


def _contour_swatch(page, x, y) -> None:
    page.lines([[(x, y), (x + 34, y)]], colour=LINE, line=1.4, strength=0.7)


def _void_swatch(other, page, x, y) -> None:
    page.image(x, y - 9, hatch((18, 34), other=other))
    page.box(x, y - 9, 34, 18, edge=SOFT, line=0.8)
