"""The overview map: a year of sun on shaded relief, on one sheet that a person can read."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace

import numpy as np
from matplotlib.colors import to_rgb
from numpy.typing import NDArray

from terrasol import __version__
from terrasol.errors import SettingError
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame, make_frame
from terrasol.show import key
from terrasol.show.contours import contour_step, draw_contours
from terrasol.show.graticule import draw_graticule
from terrasol.show.page import INK, PAPER, SOFT, Page, clip, wrap
from terrasol.show.picture import Picture, make_picture
from terrasol.show.relief import hatch, paint, shade

MAP_BOX = (1120, 980)
"""Largest width and height of the map [pixels]."""

WIDE = 1.45
"""A map wider than this many heights has its key below it, not beside it."""

MARGIN, COLUMN, ASIDE, BETWEEN, BELOW = 48, 352, 64, 32, 44
HEADER, STRIP, FOOTER = 136, 96, 62
LATITUDES, LONGITUDES = 104, 44
"""Measures of the sheet [pixels]; the last two are the room for the labels of the rim."""

_Block = tuple[Callable[[Page, float, float], None], float]
"""What draws a part of the key at a place, and its height [pixels]."""

TITLE, SUBTITLE = 38.0, 21.0
"""Sizes of letters [pixels]."""


def overview_png(
    elevation: Elevation,
    energy: NDArray[np.float32],
    *,
    title: str,
    subtitle: str = "",
    quantity: str = "Potential global irradiation, year",
    unit: str = "MJ m-2",
    notes: Sequence[str] = (),
    mean: float | None = None,
    monthly_means: Mapping[tuple[int, int], float] | None = None,
    frame: Frame | None = None,
    colour_map: str = key.COLOUR_MAP,
    first_day: np.datetime64 | None = None,
    void_words: str = "no data",
    marked: NDArray[np.bool_] | None = None,
    marked_words: str = "",
) -> bytes:
    """Draw the overview map of a run.

    The map is true in metres and lies along the raster's edges; arrow and scale bar are true
    at its centre. The colour bar's points hold the half per cent of ground with the least and with
    the most sun, which the notes then say.

    Parameters
    ----------
    elevation : Elevation
    energy : ndarray of float32, shape (rows, columns)
        What to colour the ground by [unit]; void NaN.
    title, subtitle : str
        Head of the sheet.
    quantity, unit : str
        What the colours and the monthly bars are, and their unit as UDUNITS reads it.
    notes : sequence of str
        Short statements of what the map is and is not: period, sky, basis of the area.
    mean : float, optional
        Mean over the ground [unit]; taken from the map's pixels if not given.
    monthly_means : mapping of (year, month) to float, optional
        Mean of each month over the ground [unit].
    frame : Frame, optional
        That of `elevation`, if it is at hand.
    colour_map : str
        Of matplotlib; one whose lightness rises evenly.
    first_day : numpy.datetime64[D], optional
        Where the values are days since one: the key then names dates.
    void_words : str
        What ground without a value is, in the legend.
    marked : ndarray of bool, optional
        Ground without a value of another kind, hatched the other way.
    marked_words : str
        What that is.

    Returns
    -------
    bytes
        A PNG file: the same bytes for the same content and the same matplotlib.

    Raises
    ------
    SettingError
        `energy` has another shape than the elevation model.
    """
    _demand_one_grid(elevation, energy)
    frame = frame or make_frame(elevation.shape, elevation.transform, elevation.crs)
    picture = make_picture(elevation, frame, MAP_BOX)
    values = picture.cells(picture.average(energy))
    scale = replace(key.make_scale(values), colour_map=colour_map, first_day=first_day)
    blocks = _blocks(values, scale, quantity, unit, mean, monthly_means, notes)
    page, places = _lay_out(picture, blocks)
    _write_head_and_foot(page, title, subtitle, elevation, frame)
    other = _other_void(picture, energy, values, marked)
    _draw_map(page, picture, elevation, values, scale, void_words, other, marked_words)
    for (draw, _), (x, y) in zip(blocks, places, strict=True):
        draw(page, x, y)
    return page.png(Title=title, Software=f"terrasol {__version__}")


def _demand_one_grid(elevation, energy) -> None:
    if energy.shape != elevation.shape:
        raise SettingError(
            f"the map's values have the shape {energy.shape}, the ground {elevation.shape}:"
            " give both on one grid"
        )


def _blocks(values, scale, quantity, unit, mean, months, notes) -> list[_Block]:
    """The parts of the key: functions that draw at a place, each with its height."""
    unit = key.printed_unit(unit)
    notes = [*notes, key.points_text(scale)]
    lines = [line for note in notes for line in wrap(note, key.SMALL, COLUMN)]

    def colours(page, x, y):
        y = key.heading(page, x, y, quantity, unit, COLUMN)
        key.draw_colour_bar(page, x, y + 30, scale, values, mean)

    def year(page, x, y):
        y = key.heading(page, x, y, "Mean by month", unit, COLUMN)
        key.draw_months(page, x, y + 12, COLUMN, months)

    def words(page, x, y):
        key.draw_notes(page, x, y, lines)

    head = key.LEADING * (1 + len(wrap(quantity, key.TEXT, COLUMN, bold=True)))
    blocks: list[_Block] = [(colours, head + 30 + key.BAR_HEIGHT + 30)]
    if months:
        blocks.append((year, 2 * key.LEADING + 12 + key.MONTHS_HEIGHT + 50))
    if lines:
        blocks.append((words, len(lines) * key.NOTE_LEADING))
    return blocks


def _lay_out(picture: Picture, blocks) -> tuple[Page, list[tuple[float, float]]]:
    """A sheet of the right size, and where the parts of the key go."""
    height, width = picture.shape
    left = float(MARGIN + LATITUDES)
    places: list[tuple[float, float]] = []
    if width > WIDE * height:
        top = HEADER + height + LONGITUDES + STRIP + 24
        places += [(left + k * (COLUMN + BETWEEN), top) for k in range(len(blocks))]
        bottom = top + max(tall for _, tall in blocks)
        right = max(left + width, places[-1][0] + COLUMN)
    else:
        x, y = left + width + ASIDE, float(HEADER)
        for _, tall in blocks:
            places.append((x, y))
            y += tall + BELOW
        bottom = max(y - BELOW, HEADER + height + LONGITUDES + STRIP)
        right = x + COLUMN
    right = max(right, left + 800)
    return Page(round(right + MARGIN), round(bottom + FOOTER)), places


def _write_head_and_foot(page, title, subtitle, elevation, frame) -> None:
    """Title, subtitle, and the line that says what made the sheet and on which grid."""
    room = page.width - 2 * MARGIN - LATITUDES
    left = MARGIN + LATITUDES
    page.text(left, 70, clip(title, TITLE, room, bold=True), TITLE, bold=True)
    page.text(left, 106, clip(subtitle, SUBTITLE, room), SUBTITLE, colour=SOFT)
    rows, columns = elevation.shape
    across, down = frame.cell_size
    foot = (
        f"terrasol {__version__}  ·  {columns} × {rows} cells of"
        f" {key.significant(across, 3)} × {key.significant(down, 3)} m  ·  {elevation.crs.name}"
    )
    page.text(left, page.height - 26, clip(foot, key.SMALL, room), key.SMALL, colour=SOFT)


def _other_void(picture, energy, values, marked) -> NDArray[np.bool_]:
    """Pixels without a value of which the marked part is the larger."""
    if marked is None:
        return np.zeros(picture.shape, bool)
    void = np.isnan(energy)
    other, plain = (
        np.nan_to_num(picture.smooth(picture.average(mask.astype(np.float32))))
        for mask in (void & marked, void & ~marked)
    )
    return picture.ground & ~np.isfinite(values) & (other > plain)


def _draw_map(page, picture, elevation, values, scale, void_words, marked, marked_words) -> None:
    """The map, its rim, and the strip below it."""
    left, top = corner = (MARGIN + LATITUDES, HEADER)
    height, width = picture.shape
    averaged = picture.average(elevation.heights)
    heights = picture.surface(averaged)
    void = picture.ground & ~np.isfinite(values)
    brightness = picture.smooth(shade(averaged, picture.jacobian))
    pixels = paint(picture, scale.colours(values), brightness, void, to_rgb(PAPER))
    pixels[marked] = hatch(picture.shape, other=True)[marked]
    page.image(left, top, pixels)
    step = contour_step(heights)
    if step is not None:
        draw_contours(page, heights, step, corner)
    draw_graticule(page, picture, corner)
    page.box(left, top, width, height, edge=INK, line=1.6)
    y = top + height + LONGITUDES + 50
    x = key.draw_scale_bar(page, left + 6, y, picture.metres_per_pixel)
    x = key.draw_north(page, x + 56, y - 2, -picture.up)
    relief = bool(np.any(np.abs(brightness[picture.ground] - 0.5) > 0.01))
    key.draw_legend(
        page, x + 36, y, relief=relief, step=step, void=bool((void & ~marked).any()),
        colour_map=scale.colour_map, void_words=void_words,
        marked_words=marked_words if marked.any() else "",
    )  # fmt: skip
