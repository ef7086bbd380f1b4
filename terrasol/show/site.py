"""The sheet of one place, or of two side by side: where, horizon, months, the sun all year."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import date
from typing import Final

import numpy as np
from matplotlib import style
from matplotlib.colors import to_rgb
from numpy.typing import NDArray

from terrasol import __version__
from terrasol.engine.comparison import place_words
from terrasol.engine.outputs import MONTH_NAMES
from terrasol.engine.site import PARTS, Site
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame, make_frame
from terrasol.light.days import MOMENTS
from terrasol.light.minutes import State, Track, track
from terrasol.practice.limits import PLACE
from terrasol.show import key
from terrasol.show.contours import contour_step, draw_contours
from terrasol.show.page import (
    INK,
    PAPER,
    POINTS_PER_PIXEL,
    SOFT,
    Page,
    clip,
    text_width,
    wrap,
)
from terrasol.show.panel import GRID, Panel, steps
from terrasol.show.picture import Picture, make_picture
from terrasol.show.relief import paint, shade
from terrasol.show.site_text import (
    clock_time,
    energy_words,
    error_words,
    facts,
    lost_words,
    month_head,
    month_rows,
)
from terrasol.show.skyline import (
    CLOCK,
    HOUR_LINES,
    SUN,
    draw_skyline,
    tracks_of,
    view_limits,
)
from terrasol.sky.period import TYPICAL_SUN_YEAR

SLACK: Final = 0.94
"""Share of a width that small letters may fill: printed, they run a little longer than measured."""

A4: Final = (827, 1169)
"""Width and height of the sheet of one place [pixels of 1/100 inch]; two make an A3."""

DOTS: Final = 2
"""Dots of the PNG a pixel of the sheet: 200 an inch."""

MARGIN, LEFT, RIGHT = 46, 46, 781
TITLE, SUBTITLE, HEAD, TEXT, SMALL = 25.0, 13.0, 13.0, 11.5, 10.0
"""Sizes of letters [pixels]."""

MAP: Final = (240, 176)
"""Width and height of the small map [pixels]."""

AROUND: Final = 1500.0
"""Ground that the small map shows on each side of the place [m], and at least MAP_CELLS cells."""

MAP_CELLS: Final = 24

SCALE: Final = 76.0
"""Longest scale of the small map [pixels]."""

PART_COLOURS: Final = {"beam": "#d98a1f", "diffuse": "#6f9bc4", "reflected": "#7d8a4c"}
PALE: Final = 0.38
"""Strength of the colours of level ground."""

STATE_COLOURS: Final = {
    State.NIGHT: "#262c3f",
    State.SUN: "#f6cf65",
    State.TERRAIN: "#5b7f95",
    State.SLOPE: "#b3c3c9",
}
"""Of the year by hours: told apart by lightness alone, for colour-blind eyes and grey paper."""

STATE_WORDS: Final = {
    State.SUN: "direct sun, if no cloud comes",
    State.TERRAIN: "shade of other ground",
    State.SLOPE: "shade of the own slope",
    State.NIGHT: "sun below the level",
}

TOPS: Final = {"facts": 118, "horizon": 344, "months": 624, "year": 862, "notes": 1060}
HEIGHTS: Final = {"horizon": 178, "months": 150, "year": 160}
BARS: Final = 330
"""Measures of the sheet [pixels]."""

COLUMN_ENDS: Final = np.array([0.27, 0.38, 0.56, 0.74, 0.86, 1.0])
"""Right ends of the table's columns, as shares of its width."""

Values = NDArray[np.float64]


@dataclass(frozen=True)
class _Common:
    """What the places of one sheet share: scales, days, words."""

    limits: Values
    top: float
    hours: tuple[float, float]
    days: tuple[date, ...]
    notes: tuple[str, ...]
    source: str
    contours: float | None
    """Height between contour lines of the small maps [m]."""


@dataclass(frozen=True, eq=False)
class _Around:
    """The ground around a place, and how its small map lies."""

    ground: Elevation
    frame: Frame
    row: int
    column: int
    picture: Picture
    heights: NDArray[np.float32]


def site_page(
    elevation: Elevation,
    sites: Sequence[Site],
    *,
    days: Sequence[date] = (),
    notes: Sequence[str] = (),
    source: str = "",
) -> Page:
    """Draw one place on an A4 sheet, or two side by side on an A3 sheet with the same scales.

    Parameters
    ----------
    elevation : Elevation
        The ground, for the small map.
    sites : sequence of Site
        One or two.
    days : sequence of date
        Further days whose sun's path is drawn.
    notes : sequence of str
        Sentences at the foot.
    source : str
        Name of the elevation raster.

    Returns
    -------
    Page
        For `page_png` and `Page.pdf`.
    """
    page = Page(A4[0] * len(sites), A4[1])
    frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
    maps = [_around(elevation, frame, site) for site in sites]
    common = _common(sites, tuple(days), tuple(notes), source, maps)
    with style.context("default"):
        for number, (site, ground) in enumerate(zip(sites, maps, strict=True)):
            _Sheet(page, A4[0] * number, site, common).draw(ground)
    return page


def page_png(page: Page, title: str) -> bytes:
    """The sheet as a PNG file of 200 dots an inch."""
    return page.png(DOTS, Title=title, Software=f"terrasol {__version__}")


def page_pdf(page: Page, title: str) -> bytes:
    """The sheet as a PDF file."""
    return page.pdf(Title=title, Creator=f"terrasol {__version__}")


def _common(
    sites: Sequence[Site],
    days: tuple[date, ...],
    notes: tuple[str, ...],
    source: str,
    maps: Sequence[_Around],
) -> _Common:
    """Scales that hold for all places of the sheet."""
    paths = [path for site in sites for path in _paths(site, days)]
    limits = view_limits(sites[0].latitude, [site.horizon for site in sites], paths)
    tallest = max(
        float(each.sum(axis=0).max()) for s in sites for each in (s.energy.place, s.energy.level)
    )
    first = min(_least(site.sun.level[0]) for site in sites)
    last = max(-_least(-site.sun.level[1]) for site in sites)
    hours = float(np.floor(first - 0.2)), float(np.ceil(last + 0.2))
    if hours[1] - hours[0] > 24.0:  # midnight sun
        hours = 0.0, 24.0
    steps = [step for each in maps if (step := contour_step(each.heights)) is not None]
    return _Common(limits, 1.16 * tallest, hours, days, notes, source, max(steps, default=None))


def _least(values: Values) -> float:
    """Least finite value; noon where there is none."""
    known = values[np.isfinite(values)]
    return float(known.min()) if known.size else 12.0


def _paths(site: Site, days: tuple[date, ...]) -> list[Track]:
    where = site.latitude, site.longitude, site.height, site.sun.clock
    return tracks_of(*where, TYPICAL_SUN_YEAR, days)


class _Sheet:
    """One place on its part of the page."""

    def __init__(self, page: Page, x: float, site: Site, common: _Common) -> None:
        self.page, self.site, self.common = page, site, common
        self.left, self.right = x + LEFT, x + RIGHT

    def draw(self, ground: _Around) -> None:
        """All parts, from the top."""
        self._head()
        self._facts()
        self._map(ground)
        self._horizon()
        self._months()
        self._table()
        self._year()
        self._foot()

    def _text(self, x: float, y: float, words: str, size: float = TEXT, **more) -> None:
        self.page.text(x, y, words, size, **more)

    def _title(self, x: float, y: float, words: str, unit: str = "") -> None:
        """Head of a part, with its unit behind."""
        self._text(x, y, words, HEAD, bold=True)
        if unit:
            behind = x + text_width(words, HEAD, bold=True) + 8
            self._text(behind, y, unit, SMALL, colour=SOFT)

    def _panel(self, name: str, x: float, width: float) -> Panel:
        return Panel(self.page, x, TOPS[name], width, HEIGHTS[name], SMALL)

    def _head(self) -> None:
        site, room = self.site, self.right - self.left
        where = place_words(site.latitude, site.longitude, 5)
        title = site.name or where
        self._text(self.left, 66, clip(title, TITLE, room, bold=True), TITLE, bold=True)
        under = f"Sun and shade at {where}" if site.name else "Sun and shade"
        cell = f"cell in row {site.row}, column {site.column}"
        made = "  ·  ".join(p for p in (self.common.source, cell, f"terrasol {__version__}") if p)
        made = clip(made, SMALL, room - text_width(under, SUBTITLE) - 20)
        self._text(self.left, 90, clip(under, SUBTITLE, room), SUBTITLE, colour=SOFT)
        self._text(self.right, 90, made, SMALL, colour=SOFT, across="right")

    def _facts(self) -> None:
        """Names to the left, what they are beside."""
        y = float(TOPS["facts"] + 10)
        indent = 76
        room = self.right - MAP[0] - 30 - self.left - indent
        for name, words in facts(self.site):
            self._text(self.left, y, name, TEXT, colour=SOFT)
            for line in wrap(_printed(words), TEXT, room):
                self._text(self.left + indent, y, line, TEXT)
                y += 16.0
            y += 3.0

    def _map(self, ground: _Around) -> None:
        """The ground around, shaded, with contour lines; a ring marks the place."""
        around, coarse = ground.ground, ground.picture
        fine = make_picture(around, ground.frame, (MAP[0] * DOTS, MAP[1] * DOTS))
        height, width = coarse.shape
        x, y = self.right - width, float(TOPS["facts"])
        averaged = fine.average(around.heights)
        bright = fine.smooth(shade(averaged, fine.jacobian))
        void = fine.ground & ~np.isfinite(fine.smooth(averaged))
        grey = np.empty((*fine.shape, 3), np.float32)
        grey[:] = np.clip(0.52 + 0.46 * np.nan_to_num(bright, nan=0.5), 0.0, 1.0)[..., None]
        grey *= np.array([1.0, 0.985, 0.95], np.float32)
        pixels = paint(fine, grey, np.full(fine.shape, 0.5, np.float32), void, to_rgb(PAPER))
        self.page.image(x, y, pixels, dots=DOTS)
        step = self.common.contours
        if step is not None:
            draw_contours(self.page, ground.heights, step, (x, y), named=False)
        self.page.box(x, y, width, height, edge=INK, line=1.0)
        gap = (coarse.rows - ground.row - 0.5) ** 2 + (coarse.columns - ground.column - 0.5) ** 2
        at = np.unravel_index(np.nanargmin(gap), gap.shape)
        self._ring(x + float(at[1]) + 0.5, y + float(at[0]) + 0.5)
        self._map_key(x, y + height, coarse.metres_per_pixel, step)
        self._north(x + 17, y + 27, -coarse.up)

    def _ring(self, x: float, y: float) -> None:
        """A ring about a place."""
        turn = np.linspace(0.0, 2.0 * np.pi, 49)
        for radius, colour, line in ((6.5, PAPER, 4.0), (6.5, "#b5302a", 2.0)):
            ring = np.column_stack([x + radius * np.cos(turn), y + radius * np.sin(turn)])
            self.page.lines([ring], colour=colour, line=line)

    def _north(self, x: float, y: float, azimuth: float) -> None:
        """A small arrow to true north, `azimuth` clockwise from up on the paper [degrees]."""
        turn = np.radians(azimuth)
        ahead, aside = (
            np.array([np.sin(turn), -np.cos(turn)]),
            np.array([np.cos(turn), np.sin(turn)]),
        )
        middle = np.array([x, y])
        tip, tail = middle + 9 * ahead, middle - 9 * ahead
        barbs = [middle + 2 * ahead + side * 4.5 * aside for side in (-1, 1)]
        for colour, line in ((PAPER, 3.4), (INK, 1.4)):
            self.page.lines([[tail, tip], [barbs[0], tip, barbs[1]]], colour=colour, line=line)
        at = middle + 16 * ahead
        self._text(
            float(at[0]),
            float(at[1]),
            "N",
            SMALL,
            bold=True,
            across="center",
            down="center",
            halo=PAPER,
        )

    def _map_key(self, x: float, y: float, metres: float, step: float | None) -> None:
        """Scale and contour lines below the map, in two lines if it is narrow."""
        length, _ = key.scale_bar(metres * SCALE / key.SCALE_LONGEST)
        pixels = length / metres
        unit = f"{length / 1000:g} km" if length >= 1000 else f"{length:g} m"
        lines = [unit] if step is None else [f"{unit}, contours every {step:g} m"]
        if text_width(lines[0], SMALL) > SLACK * (self.right - x - pixels - 7):
            lines = [unit, f"contours every {step:g} m"]
        y += 16.0
        self.page.lines([[(x, y - 4), (x + pixels, y - 4)]], colour=INK, line=2.0)
        self._text(x + pixels + 7, y, lines[0], SMALL, colour=SOFT)
        for line in lines[1:]:
            self._text(x, y + 13.0, line, SMALL, colour=SOFT)

    def _horizon(self) -> None:
        site, common = self.site, self.common
        title = "Horizon and sun"
        self._title(self.left, TOPS["horizon"] - 12, title, "degrees above the level, by azimuth")
        panel = self._panel("horizon", self.left + 22, self.right - self.left - 22)
        panel.limits(*common.limits)
        where = site.latitude, site.longitude, site.height, site.sun.clock
        solar = site.sun.clock.zone is None
        plane = site.plane(np.arange(site.horizon.size) * 360.0 / site.horizon.size)
        draw_skyline(
            panel,
            site.horizon,
            _paths(site, common.days),
            [track(date(TYPICAL_SUN_YEAR, *day), *where) for day in HOUR_LINES],
            plane=plane,
            clock=not solar,
        )
        self._horizon_key(float(panel.y + panel.height + 38), solar, bool(plane.max() > 0.5))

    def _horizon_key(self, y: float, solar: bool, plane: bool) -> None:
        """What lines, dots and numbers are."""
        x = self.left + 22
        thin = [(x, y - 4), (x + 16, y - 4)]
        self.page.lines([thin], colour=SUN, line=1.4)
        words = "numbers above: hours of true solar time"
        self._text(x + 22, y, words, SMALL, colour=SOFT)
        x += 22 + text_width(words, SMALL) + 18
        if not solar:
            self._text(x, y, "○", SMALL, colour=CLOCK, bold=True)
            words = f"full hours, {self.site.sun.clock.words}"
            self._text(x + 14, y, words, SMALL, colour=SOFT)
            x += 14 + text_width(words, SMALL) + 18
        if plane:
            dashes = [[(x + k, y - 4), (x + min(k + 5, 18), y - 4)] for k in (0, 8, 16)]
            self.page.lines(dashes, colour=INK, line=1.2)
            words = "the own slope hides the sun below it"
            room = self.right - x - 24
            self._text(x + 24, y, clip(words, SMALL, room), SMALL, colour=SOFT)

    def _months(self) -> None:
        """Two bars a month: here in full colours, level ground pale."""
        energy, common = self.site.energy, self.common
        unit = key.printed_unit(energy.settings.unit)
        self._title(self.left, TOPS["months"] - 26, "Energy by month", unit)
        x = self.left + 34
        panel = self._panel("months", x, BARS - 34)
        count = energy.place.shape[1]
        panel.limits(-0.6, count - 0.4, 0.0, common.top)
        panel.y_ticks(steps(0.0, common.top, 4))
        half = 0.4
        for k, (values, strength) in enumerate(((energy.place, 1.0), (energy.level, PALE))):
            bottom = np.zeros(count)
            for part, colour in zip(PARTS, PART_COLOURS.values(), strict=True):
                height = values[PARTS.index(part)]
                at = np.arange(count) - half + k * half
                panel.axes.bar(
                    at, height, half * 0.94, bottom, color=colour, alpha=strength, align="edge",
                    zorder=2,
                )  # fmt: skip
                bottom += height
        labels = [MONTH_NAMES[month - 1] for _, month in energy.settings.period.months]
        letters = 3 if count <= 8 else 1
        panel.x_ticks(range(count), [name[:letters] for name in labels], down=15.0)
        self._months_key(x, TOPS["months"] - 9)

    def _months_key(self, x: float, y: float) -> None:
        for part in PARTS:
            self.page.box(x, y - 9, 10, 10, fill=PART_COLOURS[part])
            self._text(x + 15, y, part, SMALL, colour=SOFT)
            x += 15 + text_width(part, SMALL) + 10
        pale = PALE * np.array(to_rgb(PART_COLOURS["beam"])) + (1.0 - PALE) * np.array(
            to_rgb(PAPER)
        )
        self.page.box(x, y - 9, 10, 10, fill=tuple(pale))
        self._text(x + 15, y, "level", SMALL, colour=SOFT)

    def _table(self) -> None:
        """Energy, sun a day, first and last sun, month by month."""
        site = self.site
        x, y = self.left + BARS + 22, float(TOPS["months"] - 26)
        ends = x + (self.right - x) * COLUMN_ENDS
        self._title(x, y, "By month", f"first and last sun on the 21st, {site.sun.clock.words}")
        unit, *words = month_head(site)[1:]
        head = (key.printed_unit(unit), *words)
        y += 18.0
        for word, end in zip(head, ends, strict=True):
            self._text(end, y, word, SMALL, colour=SOFT, across="right")
        rows = month_rows(site)
        step = min(14.4, 176.0 / max(len(rows), 1))
        size = min(SMALL, step)
        for row in rows:
            y += step
            self._text(x, y, row[0], size)
            for cell, end in zip(row[1:], ends, strict=True):
                self._text(end, y, cell, size, across="right")
        self.page.lines([[(x, TOPS["months"] - 4), (self.right, TOPS["months"] - 4)]], colour=GRID)

    def _year(self) -> None:
        """Every minute of the year: sun, shade or night."""
        site, (first, last) = self.site, self.common.hours
        sun = site.sun
        title = "Sun and shade, every minute of the year"
        self._title(self.left, TOPS["year"] - 26, title, f"hours, {sun.clock.words}")
        panel = self._panel("year", self.left + 34, self.right - self.left - 34)
        count = len(sun.days)
        panel.limits(0.0, count, first, last)
        states = by_clock(site, first, last)
        colours = np.array([to_rgb(STATE_COLOURS[state]) for state in State])
        panel.axes.imshow(
            colours[states], extent=(0.0, count, first, last), origin="lower", aspect="auto",
            interpolation="none",
        )  # fmt: skip
        for value in np.arange(3.0 * np.ceil(first / 3.0), last + 0.1, 3.0):
            panel.axes.axhline(value, color=PAPER, linewidth=0.5 * POINTS_PER_PIXEL, alpha=0.5)
            at = panel.place(0.0, float(value))[1]
            word = clock_time(float(value)).split(" ")[0]
            self._text(panel.x - 6, at, word, SMALL, colour=SOFT, across="right", down="center")
        starts = [sun.on(month, 1) for month in range(1, 13)]
        panel.axes.vlines(
            starts[1:], first, last, color=PAPER, linewidth=0.5 * POINTS_PER_PIXEL, alpha=0.5
        )
        middles = [start + 15.0 for start in starts]
        panel.x_ticks(middles, [name[:3] for name in MONTH_NAMES], down=15.0)
        self._year_key(self.left + 34, TOPS["year"] - 9)

    def _year_key(self, x: float, y: float) -> None:
        for state, words in STATE_WORDS.items():
            self.page.box(x, y - 9, 10, 10, fill=STATE_COLOURS[state])
            self._text(x + 15, y, words, SMALL, colour=SOFT)
            x += 15 + text_width(words, SMALL) + 16

    def _foot(self) -> None:
        """What the figures are and are not."""
        site, common = self.site, self.common
        said = [
            f"Energy is {energy_words(site)}; level ground lies at the same place and height under"
            " an open sky.",
            *(f"{words}." for words in (*lost_words([site]), *error_words(site))),
            *common.notes,
            PLACE,
        ]
        lines = wrap(_printed(" ".join(said)), SMALL, self.right - self.left)
        step = min(13.0, (A4[1] - 20 - TOPS["notes"]) / len(lines))
        size = min(SMALL, 0.9 * step)
        for k, line in enumerate(lines):
            self._text(self.left, TOPS["notes"] + k * step, line, size, colour=SOFT)


def _printed(words: str) -> str:
    """Text of the terminal as it is set in print."""
    return words.replace(" x ", " × ").replace("m-2", "m⁻²")


def by_clock(site: Site, first: float, last: float) -> NDArray[np.uint8]:
    """States of a site's year by minutes of the clock.

    Parameters
    ----------
    site : Site
        The place.
    first, last : float
        Hours since 0:00 on the clock.

    Returns
    -------
    ndarray of uint8, shape (minutes, days)
        From `first` on. A minute that belongs to the true solar day before or after is taken
        from that day; the year is a ring.
    """
    sun = site.sun
    minutes = np.arange(round((last - first) * 60.0)) + 0.5 + first * 60.0
    add = sun.clock_less_solar.mean(axis=1) * 60.0
    solar = minutes[:, None] - add[None, :]
    shift, within = np.divmod(solar, 1440.0)
    day = (np.arange(len(sun.days))[None, :] + shift.astype(np.int64)) % len(sun.days)
    return sun.states[day, np.minimum(np.round(within).astype(np.int64), MOMENTS - 1)]


def _around(elevation: Elevation, frame: Frame, site: Site) -> _Around:
    """The ground around a place as its small map shows it."""
    ground, row, column = _crop(elevation, frame, site)
    own = make_frame(ground.shape, ground.transform, ground.crs)
    picture = make_picture(ground, own, MAP)
    heights = picture.surface(picture.average(ground.heights))
    return _Around(ground, own, row, column, picture, heights)


def _crop(elevation: Elevation, frame: Frame, site: Site) -> tuple[Elevation, int, int]:
    """The ground around a place, and the place's row and column in it."""
    cell = frame.cell_size
    shape = MAP[1] / MAP[0]
    reach = max(AROUND, MAP_CELLS * max(cell) / shape)
    across, down = round(reach / cell[0]), round(reach * shape / cell[1])
    rows, columns = elevation.shape
    top, left = max(site.row - down, 0), max(site.column - across, 0)
    bottom, right = min(site.row + down + 1, rows), min(site.column + across + 1, columns)
    a, b, c, d, e, f = elevation.transform
    moved = (a, b, c + a * left + b * top, d, e, f + d * left + e * top)
    part = replace(
        elevation,
        heights=np.ascontiguousarray(elevation.heights[top:bottom, left:right]),
        transform=moved,
        filled=None,
        warnings=(),
    )
    return part, site.row - top, site.column - left
