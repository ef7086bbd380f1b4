"""A station's measurements against the model on one sheet: days, errors, horizon."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from datetime import date

import numpy as np
from matplotlib import style
from numpy.typing import NDArray

from terrasol import __version__
from terrasol.engine.comparison import StationReport, amount_words, place_words
from terrasol.engine.outputs import MONTH_NAMES
from terrasol.light.comparison import Agreement, local_time
from terrasol.light.days import Clock
from terrasol.light.minutes import track
from terrasol.show.key import BAR_COLOUR, NOTE_LEADING, SMALL, TEXT
from terrasol.show.page import INK, POINTS_PER_PIXEL, SOFT, Page, clip, text_width, wrap
from terrasol.show.panel import TICK, Panel, steps
from terrasol.show.skyline import HOUR_LINES, draw_skyline, tracks_of, view_limits
from terrasol.sky.period import TYPICAL_SUN_YEAR

WIDTH, MARGIN = 1480, 72
LEFT = MARGIN + 40
HEAD, BETWEEN, FOOT = 150, 128, 64
DAYS_HEIGHT, BARS_HEIGHT, HORIZON_HEIGHT = 270, 210, 270
GAP, GUTTER = 28, 100
"""Measures of the sheet [pixels]: between days, and between months and hours."""

TITLE, SUBTITLE = 38.0, 21.0
"""Sizes of letters [pixels]."""

MEASURED, MEASURED_EDGE, MODELLED = "#f0d9ac", "#b08a4a", "#7c2760"
"""Measured light as an area, its edge, and the model as a line."""

WIDEST_BAR = 56.0
"""Of a month or an hour [pixels]."""

MOST_DAYS = 4


def comparison_png(report: StationReport, *, title: str, notes: Sequence[str] = ()) -> bytes:
    """Draw a comparison.

    Up to four days, clear ones if there are any, spread over the series; bias and rms by month
    and by hour of day; the horizon with the sun's paths.

    Parameters
    ----------
    report : StationReport
    title : str
        Head of the sheet.
    notes : sequence of str
        Statements at the foot, without full stops.

    Returns
    -------
    bytes
        A PNG file: the same bytes for the same content and the same matplotlib.
    """
    right = WIDTH - MARGIN
    name = report.station.name
    sentences = (
        f"{note if note.startswith(name) else note[0].upper() + note[1:]}." for note in notes
    )
    lines = [line for each in sentences for line in wrap(each, SMALL, right - LEFT)]
    tops = np.cumsum([HEAD + 70, DAYS_HEIGHT + BETWEEN, BARS_HEIGHT + BETWEEN])
    bottom = tops[2] + HORIZON_HEIGHT + 90 + len(lines) * NOTE_LEADING
    page = Page(WIDTH, round(bottom + FOOT))
    with style.context("default"):
        page.text(LEFT, 72, clip(title, TITLE, right - LEFT, bold=True), TITLE, bold=True)
        under = clip(subtitle(report), SUBTITLE, right - LEFT)
        page.text(LEFT, 108, under, SUBTITLE, colour=SOFT)
        _draw_days(page, report, float(tops[0]))
        _draw_errors(page, report, float(tops[1]))
        _draw_horizon(page, report, float(tops[2]))
        for k, line in enumerate(lines):
            y = tops[2] + HORIZON_HEIGHT + 96 + k * NOTE_LEADING
            page.text(LEFT, float(y), line, SMALL, colour=SOFT)
        page.text(LEFT, page.height - 28, _foot(report), SMALL, colour=SOFT)
        return page.png(Title=title, Software=f"terrasol {__version__}")


def subtitle(report: StationReport) -> str:
    """What is compared, of which days, under which sky.

    Days are those of local mean solar time, from the first interval with sun to the last: an
    hour of night more is no day more.
    """
    lit = report.modelled.lit > 0.0
    times = local_time(report.station)
    start, end = (times[lit] if lit.any() else times)[[0, -1]].astype("M8[D]")
    sky = "clear sky" if report.other is None else f"sky of {report.other.station.name}"
    return f"Global irradiance, measured against modelled, {start} to {end}; {sky}"


def _foot(report: StationReport) -> str:
    station, spot = report.station, report.spot
    place = f"{place_words(station.latitude, station.longitude)}, {station.height:.0f} m"
    cell = "" if spot.row is None else f"  ·  cell in row {spot.row}, column {spot.column}"
    height = "" if spot.height is None else f" at {spot.height:.0f} m"
    return f"terrasol {__version__}  ·  {place}{cell}{height}"


# Days


def chosen_days(report: StationReport) -> list[np.datetime64]:
    """Up to four days spread over the series: clear ones, else the brightest ones.

    The days are cut into four runs of time, and the middle one of each is taken, so that
    none is chosen because it agrees.
    """
    day = local_time(report.station).astype("M8[D]")
    counted = np.isfinite(report.station.values["global"]) & (report.modelled.lit > 0.0)
    days, place = np.unique(day[counted], return_inverse=True)
    if not days.size:
        return []
    clear = days[np.isin(days, report.clear_days)]
    if clear.size:
        runs = np.array_split(clear, min(MOST_DAYS, clear.size))
        return [run[run.size // 2] for run in runs]
    light = np.bincount(place, weights=report.station.values["global"][counted])
    runs = np.array_split(np.arange(days.size), min(MOST_DAYS, days.size))
    return [days[run[np.argmax(light[run])]] for run in runs]


def _draw_days(page: Page, report: StationReport, top: float) -> None:
    """The overlay: measured as an area, modelled as lines."""
    days = chosen_days(report)
    kind = "Clear days" if report.clear_days.size else "Brightest days"
    page.text(LEFT, top - 56, kind, TEXT, bold=True)
    x = LEFT + text_width(kind, TEXT, bold=True) + 10
    page.text(x, top - 56, "W m⁻², by hour of local mean solar time", SMALL, colour=SOFT)
    _draw_legend(page, top - 56)
    if not days:
        return
    day = local_time(report.station).astype("M8[D]")
    shown = np.isin(day, days)
    most = np.nanmax([np.nanmax(values[shown], initial=100.0) for values in _series(report)])
    lit = shown & (report.modelled.lit > 0.0)
    since = (local_time(report.station) - day).astype("m8[s]").astype(float) / 3600.0
    half = report.station.seconds / 7200.0
    low, high = np.floor(since[lit].min() - half), np.ceil(since[lit].max() + half)
    width = (WIDTH - MARGIN - LEFT - (MOST_DAYS - 1) * GAP) / MOST_DAYS
    for k, one in enumerate(days):
        panel = Panel(page, LEFT + k * (width + GAP), top, width, DAYS_HEIGHT)
        panel.limits(low, high, 0.0, 1.05 * most)
        panel.y_ticks(steps(0.0, 1.05 * most, 5), words=k == 0)
        hours = [hour for hour in range(0, 25, 3) if low <= hour <= high]
        panel.x_ticks(hours, [str(hour) for hour in hours])
        _draw_day(panel, report, day == one, since)
        date = one.astype("M8[D]").item()
        name = f"{date.day} {MONTH_NAMES[date.month - 1]} {date.year}"
        panel.heading(name, size=SMALL, rise=14.0)


def _series(report: StationReport) -> tuple[NDArray[np.float64], ...]:
    return report.station.values["global"], report.modelled.shaded, report.modelled.open


def _draw_day(
    panel: Panel, report: StationReport, which: NDArray[np.bool_], since: NDArray[np.float64]
) -> None:
    """One day's intervals, each as wide as it is long."""
    hours = report.station.seconds / 3600.0
    middle = since[which]
    edges = np.append(middle - hours / 2.0, middle[-1] + hours / 2.0)
    measured, shaded, level = (values[which] for values in _series(report))
    axes, thin = panel.axes, POINTS_PER_PIXEL
    axes.stairs(measured, edges, fill=True, facecolor=MEASURED, edgecolor="none", zorder=1)
    axes.stairs(measured, edges, baseline=None, color=MEASURED_EDGE, linewidth=1.4 * thin, zorder=2)
    axes.stairs(level, edges, baseline=None, color=SOFT, linewidth=1.6 * thin,
                linestyle=(0, (4, 2.5)), zorder=3)  # fmt: skip
    axes.stairs(shaded, edges, baseline=None, color=MODELLED, linewidth=2.6 * thin, zorder=4)


def _draw_legend(page: Page, y: float) -> None:
    """What area and lines are, at the right end."""
    entries = ("measured", "modelled", "modelled without horizon")
    x = WIDTH - MARGIN - sum(text_width(words, SMALL) + 76 for words in entries) + 28
    for words in entries:
        if words == "measured":
            page.box(x, y - 14, 38, 15, fill=MEASURED, edge=MEASURED_EDGE, line=1.4)
        elif words == "modelled":
            page.lines([[(x, y - 6), (x + 38, y - 6)]], colour=MODELLED, line=2.6)
        else:
            dashes = [[(x + k, y - 6), (x + k + 8, y - 6)] for k in (0, 15, 30)]
            page.lines(dashes, colour=SOFT, line=1.6)
        page.text(x + 48, y, words, SMALL)
        x += text_width(words, SMALL) + 76


# Errors


def _draw_errors(page: Page, report: StationReport, top: float) -> None:
    """Bias as bars and rms as marks, by month and by hour."""
    found = report.comparison
    page.text(LEFT, top - 56, "Modelled less measured", TEXT, bold=True)
    if found is None:
        words = "nothing to compare: no clear day, or no common interval"
        page.text(LEFT, top + BARS_HEIGHT / 2, words, TEXT, colour=SOFT)
        return
    overall = found.overall
    words = (
        f"W m⁻²; bias {amount_words(overall, 'bias')}, rms {amount_words(overall, 'rms')}"
        f" over {overall.count:,} intervals"
    ).replace(" W/m2", "")
    x = LEFT + text_width("Modelled less measured", TEXT, bold=True) + 10
    page.text(x, top - 56, words, SMALL, colour=SOFT)
    room = WIDTH - MARGIN - LEFT - GUTTER
    first = int(report.station.start[0].astype("M8[M]").astype(int)) % 12
    months = [(first + k) % 12 + 1 for k in range(12)] if len(found.months) < 12 else range(1, 13)
    shown = {MONTH_NAMES[m - 1][:3]: found.months[m] for m in months if m in found.months}
    hours = range(min(found.hours), max(found.hours) + 1)
    by_hour = {str(hour): found.hours[hour] for hour in hours if hour in found.hours}
    both = [*shown.values(), *by_hour.values()]
    high = max(1.0, *(max(a.rms, a.bias) for a in both)) * 1.06
    low = min(-0.2 * high, 1.1 * min(a.bias for a in both))
    counted = False
    for words, groups, x, width in (
        ("by month", shown, LEFT, 0.42 * room),
        ("by hour of local mean solar time", by_hour, LEFT + 0.42 * room + GUTTER, 0.58 * room),
    ):
        panel = Panel(page, x, top, width, BARS_HEIGHT)
        panel.limits(-0.6, len(groups) - 0.4, low, high)
        panel.heading(words, size=SMALL, rise=14.0)
        counted |= _draw_bars(panel, groups)
    _draw_error_legend(page, top - 56, counted)


def _draw_bars(panel: Panel, groups: Mapping[str, Agreement]) -> bool:
    """One bar and one mark a group; how many intervals, if there is room: whether there was."""
    panel.y_ticks(steps(*panel.axes.get_ylim(), 5))
    panel.axes.spines["bottom"].set_visible(False)
    panel.axes.axhline(0.0, color=INK, linewidth=1.2 * POINTS_PER_PIXEL, zorder=3)
    places = np.arange(len(groups))
    half = min(0.33, WIDEST_BAR * len(groups) / panel.width / 2.0)
    biases = [found.bias for found in groups.values()]
    panel.axes.bar(places, biases, 2.0 * half, color=BAR_COLOUR, zorder=2)
    rms = [found.rms for found in groups.values()]
    panel.axes.hlines(rms, places - half, places + half, color=INK, lw=2.0 * POINTS_PER_PIXEL)
    panel.x_ticks(list(places), list(groups))
    counts = [f"{found.count}" for found in groups.values()]
    fits = max(text_width(count, TICK) for count in counts) < 0.9 * panel.width / len(groups)
    if fits:
        panel.x_ticks(list(places), counts, down=42.0)
    return fits


def _draw_error_legend(page: Page, y: float, counted: bool) -> None:
    entries = ("bias", "rms", "below: intervals" if counted else "")
    x = WIDTH - MARGIN - sum(text_width(words, SMALL) + 52 for words in entries[:2]) + 24
    x -= text_width(entries[2], SMALL) + 24
    page.box(x, y - 14, 16, 15, fill=BAR_COLOUR)
    page.text(x + 24, y, "bias", SMALL)
    x += text_width("bias", SMALL) + 52
    page.lines([[(x, y - 6), (x + 16, y - 6)]], colour=INK, line=2.0)
    page.text(x + 24, y, "rms", SMALL)
    x += text_width("rms", SMALL) + 52
    page.text(x, y, entries[2], SMALL, colour=SOFT)


# Horizon


def _draw_horizon(page: Page, report: StationReport, top: float) -> None:
    """The skyline by azimuth, and the sun's paths behind it."""
    station, horizon, solar = report.station, report.spot.horizon, Clock("solar")
    where = station.latitude, station.longitude, station.height, solar
    paths = tracks_of(*where, TYPICAL_SUN_YEAR)
    lines = [track(date(TYPICAL_SUN_YEAR, *day), *where) for day in HOUR_LINES]
    panel = Panel(page, LEFT, top, WIDTH - MARGIN - LEFT, HORIZON_HEIGHT)
    panel.limits(*view_limits(station.latitude, [horizon], paths))
    panel.heading(
        "Horizon from the station, and the sun",
        "degrees above the level, by azimuth; hours of true solar time",
    )
    draw_skyline(panel, horizon, paths, lines)
