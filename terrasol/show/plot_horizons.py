"""Horizons of many plots side by side, with the sun's paths."""

from __future__ import annotations

import numpy as np
from matplotlib import style
from numpy.typing import NDArray

from terrasol import __version__
from terrasol.engine.plot_table import PlotTable
from terrasol.light.days import parse_clock
from terrasol.show.key import SMALL
from terrasol.show.page import SOFT, Page, clip
from terrasol.show.panel import Panel
from terrasol.show.skyline import draw_skyline, tracks_of, view_limits
from terrasol.sky.period import TYPICAL_SUN_YEAR

MARGIN, HEAD, FOOT = 60, 140, 66
WIDE, HIGH, GAP, ABOVE = 330, 120, 34, 46
"""Measures of the sheet [pixels]: a panel, the gap beside it, and what stands above it."""

ACROSS = 4
MOST = 60
"""Panels in a row, and at most; a sheet with more is read by nobody (judgement)."""

TITLE, SUBTITLE, NAME, TICK = 34.0, 20.0, 16.0, 12.0
"""Sizes of letters [pixels]."""


def horizons_png(table: PlotTable, horizons: NDArray[np.float64], *, title: str) -> bytes:
    """Draw the horizon of each plot, the height at which its own slope hides the sun, and paths.

    Parameters
    ----------
    table : PlotTable
    horizons : ndarray, shape (plots, azimuths)
        See `plot_horizons`.
    title : str
        Head of the sheet.

    Returns
    -------
    bytes
        A PNG file; of the first `MOST` plots that have a place.
    """
    there = np.flatnonzero(np.isfinite(horizons).all(axis=1))
    shown = there[:MOST]
    rows = -(-shown.size // ACROSS)
    width = 2 * MARGIN + ACROSS * WIDE + (ACROSS - 1) * GAP
    page = Page(width, HEAD + rows * (HIGH + ABOVE + 24) + FOOT)
    latitude, longitude = (float(np.nanmean(v)) for v in (table.latitude, table.longitude))
    height = float(table.frame["height_m"].mean()) if "height_m" in table.frame else 0.0
    paths = tracks_of(latitude, longitude, height, parse_clock("solar"), TYPICAL_SUN_YEAR)
    limits = view_limits(latitude, [horizons[k] for k in shown], paths)
    with style.context("default"):
        page.text(MARGIN, 66, clip(title, TITLE, width - 2 * MARGIN, bold=True), TITLE, bold=True)
        more = f"; the first {MOST} of {there.size} plots" if there.size > MOST else ""
        page.text(
            MARGIN, 100,
            f"Horizon of the plots' cells, degrees above the level by azimuth{more}", SUBTITLE,
            colour=SOFT,
        )  # fmt: skip
        for place, plot in enumerate(shown):
            down, across = divmod(place, ACROSS)
            x = MARGIN + across * (WIDE + GAP)
            y = HEAD + ABOVE + down * (HIGH + ABOVE + 24)
            panel = Panel(page, x, y, WIDE, HIGH, tick=TICK)
            panel.limits(*limits)
            page.text(x, y - 12, clip(_words(table, int(plot)), NAME, WIDE), NAME)
            plane = _own_slope(table, int(plot), horizons.shape[1])
            draw_skyline(panel, horizons[plot], paths, [], plane=plane, named=False)
        page.text(
            MARGIN, page.height - 26,
            "Sun's paths of 21 June, 20 March and 21 December, faint behind the ground; dashed:"
            " below this the plot's own slope hides the sun. To: aspect; sky: sky-view factor. "
            f" terrasol {__version__}", SMALL,
            colour=SOFT,
        )  # fmt: skip
        return page.png(Title=title, Software=f"terrasol {__version__}")


def _words(table: PlotTable, plot: int) -> str:
    """Name, slope and aspect of a plot, as far as the table has them."""
    frame = table.frame
    words = [str(frame["id"].iloc[plot])]
    if "slope_deg" in frame:
        slope = f"{frame['slope_deg'].iloc[plot]:.0f}° slope"
        turn = frame["aspect_deg"].iloc[plot] if "aspect_deg" in frame else np.nan
        words.append(slope if np.isnan(turn) else f"{slope} to {turn % 360:.0f}°")
    if "sky_view" in frame:
        words.append(f"sky {frame['sky_view'].iloc[plot]:.2f}")
    return "  ·  ".join(words)


def _own_slope(table: PlotTable, plot: int, azimuths: int) -> NDArray[np.float64] | None:
    """Height at which the own slope hides the sun, by azimuth [degrees]."""
    frame = table.frame
    if "slope_deg" not in frame or "aspect_deg" not in frame:
        return None
    slope, aspect = (float(frame[name].iloc[plot]) for name in ("slope_deg", "aspect_deg"))
    if np.isnan(aspect):
        return None
    turn = np.radians(np.arange(azimuths) * 360.0 / azimuths - aspect)
    return np.degrees(np.arctan(-np.tan(np.radians(slope)) * np.cos(turn)))
