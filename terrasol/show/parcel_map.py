"""Parcels on the map: true north up, cells coloured by class, contours around."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import shapely
from matplotlib.axes import Axes
from matplotlib.colors import LinearSegmentedColormap, to_hex
from matplotlib.patches import PathPatch
from matplotlib.path import Path
from matplotlib.transforms import Affine2D
from numpy.typing import NDArray

from terrasol.engine.parcels import Parcel
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame
from terrasol.practice.classes import slope_percent
from terrasol.show.contours import Box, Lettering, name_line, nice_step
from terrasol.show.page import INK, PAPER, POINTS_PER_PIXEL, SOFT
from terrasol.show.panel import Panel

RAMP: Final = LinearSegmentedColormap.from_list(
    "slope", ["#e8efd9", "#eed98f", "#e0a052", "#bb5a33", "#832f2a", "#4a1a26"]
)
"""Slope from gentle to steep: lightness falls evenly, for grey and colour-blind eyes."""

CONTOUR: Final = "#8d8678"
HATCH: Final = "#5b8fd0"
"""Colours of contour lines, and of what does not meet the rule."""

MOST_CONTOURS: Final = 14
MOST_CELLS: Final = 400
"""Contours on a map, and cells along its side beyond which contours are traced on fewer, and the
colours of cells go into PDF files as dots."""

FINEST_CONTOURS: Final = 1.0
"""Least height between contours [m] where no error of the heights is stated (judgement, no source);
else it is twice their standard error, so that what a line bends around is there."""

FEW_NAMES: Final = 3
"""Names of contours below which more than every second is named."""

LETTERS: Final = Lettering(size=9.0, run=14.0, margin=22.0, apart=46.0)
"""Names of contours."""

Points = NDArray[np.float64]


def slope_colours(classes: int) -> list[str]:
    """One colour a class of slope."""
    return [to_hex(RAMP(x)) for x in np.linspace(0.0, 1.0, max(classes, 2))][:classes]


@dataclass(frozen=True, eq=False)
class GroundMap:
    """From the grid to metres east and north of a place in it.

    Parameters
    ----------
    row, column : float
        The place [cells].
    jacobian : ndarray, shape (2, 2)
        See `Frame.jacobian_at`, at that place.
    """

    row: float
    column: float
    jacobian: Points

    @classmethod
    def at(cls, frame: Frame, row: float, column: float) -> GroundMap:
        """The map around a place."""
        return cls(row, column, frame.jacobian_at(row, column))

    def metres(self, rows: Any, columns: Any) -> tuple[Points, Points]:
        """East and north of places of the grid [m]."""
        dc, dr = np.asarray(columns, float) - self.column, np.asarray(rows, float) - self.row
        j = self.jacobian
        return j[0, 0] * dc + j[0, 1] * dr, j[1, 0] * dc + j[1, 1] * dr

    def image_transform(self, row: float, column: float) -> Affine2D:
        """From column and row edges, counted from a window's corner, to metres."""
        j = self.jacobian
        east, north = self.metres(row - 0.5, column - 0.5)
        return Affine2D(np.array([[j[0, 0], j[0, 1], east], [j[1, 0], j[1, 1], north], [0, 0, 1]]))


def outline_path(outline: Any, elevation: Elevation, ground: GroundMap) -> Path:
    """An outline of the raster's CRS as a path in metres."""
    a, b, c, d, e, f = elevation.transform
    det = a * e - b * d
    vertices, codes = [], []
    for part in shapely.get_parts(outline):
        for ring in (part.exterior, *part.interiors):
            x, y = shapely.get_coordinates(ring).T
            column = (e * (x - c) - b * (y - f)) / det - 0.5
            row = (a * (y - f) - d * (x - c)) / det - 0.5
            vertices.append(np.column_stack(ground.metres(row, column)))
            codes += [Path.MOVETO, *[Path.LINETO] * (x.size - 2), Path.CLOSEPOLY]
    return Path(np.concatenate(vertices), codes)


def frame_around(
    paths: Sequence[Path], width: float, height: float, margin: float = 0.12
) -> Points:
    """Limits (west, east, south, north) of a panel that shows paths, true in both directions."""
    boxes = [path.get_extents() for path in paths]
    west, east = min(b.x0 for b in boxes), max(b.x1 for b in boxes)
    south, north = min(b.y0 for b in boxes), max(b.y1 for b in boxes)
    scale = max((east - west) / width, (north - south) / height) * (1.0 + 2.0 * margin)
    x, y = (west + east) / 2.0, (south + north) / 2.0
    half_x, half_y = scale * width / 2.0, scale * height / 2.0
    return np.array([x - half_x, x + half_x, y - half_y, y + half_y])


def draw_parcel(
    axes: Axes, parcel: Parcel, path: Path, ground: GroundMap, edges: Sequence[float]
) -> None:
    """Colour a parcel's cells by class of slope, within its outline."""
    piece, colours = parcel.piece, slope_colours(len(edges) + 1)
    percent = slope_percent(piece.slope)
    place = np.searchsorted(edges, np.nan_to_num(percent), side="right")
    table = np.array([_rgb(colour) for colour in colours])
    pixels = np.concatenate([table[place], np.ones((*place.shape, 1))], axis=-1)
    pixels[~piece.known] = 0.0
    rows, columns = place.shape
    patch = PathPatch(path, facecolor="none", edgecolor=INK, linewidth=1.5 * POINTS_PER_PIXEL)
    axes.add_patch(patch)
    patch.set_zorder(5)
    axes.imshow(
        pixels,
        extent=(0.0, columns, rows, 0.0),
        transform=ground.image_transform(piece.window.row, piece.window.column) + axes.transData,
        # A PDF file then holds the cells themselves, no larger than what is seen of them.
        interpolation="none" if max(rows, columns) <= MOST_CELLS else "nearest",
        origin="upper",
        aspect="auto",
        clip_path=patch,
        zorder=2,
    )
    if parcel.patches is not None:
        _hatch(axes, parcel, ground, patch)


def _rgb(colour: str) -> tuple[float, ...]:
    return tuple(int(colour[k : k + 2], 16) / 255.0 for k in (1, 3, 5))


def _hatch(axes: Axes, parcel: Parcel, ground: GroundMap, patch: PathPatch) -> None:
    """Hatch the cells that do not meet the rule."""
    assert parcel.patches is not None
    window = parcel.piece.window
    first, last = _runs(parcel.piece.known & ~parcel.patches.kept)
    if not len(first):
        return
    top, left = first.T + np.array([[window.row - 0.5], [window.column - 0.5]])
    right = last + window.column - 0.5
    rows = np.column_stack([top, top, top + 1.0, top + 1.0, top])
    columns = np.column_stack([left, right, right, left, left])
    places = np.stack(ground.metres(rows, columns), axis=-1).reshape(-1, 2)
    codes = [Path.MOVETO, Path.LINETO, Path.LINETO, Path.LINETO, Path.CLOSEPOLY] * len(first)
    hatched = PathPatch(
        Path(places, codes), facecolor="none", edgecolor=HATCH, linewidth=0.0, hatch="/////",
        zorder=4,
    )  # fmt: skip
    axes.add_patch(hatched)
    hatched.set_clip_path(patch)


def _runs(mask: NDArray[np.bool_]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Runs of true cells along the rows: (row, first column), and the column after the last.

    Examples
    --------
    >>> first, last = _runs(np.array([[True, True, False, True]]))
    >>> first.tolist(), last.tolist()
    ([[0, 0], [0, 3]], [2, 4])
    """
    edges = np.diff(np.pad(mask.astype(np.int8), ((0, 0), (1, 1))), axis=1)
    return np.argwhere(edges == 1), np.argwhere(edges == -1)[:, 1]


def draw_contours_around(
    panel: Panel,
    elevation: Elevation,
    ground: GroundMap,
    error: float | None = None,
    taken: Sequence[Box] = (),
) -> float | None:
    """Draw contours of the ground in view.

    Parameters
    ----------
    panel : Panel
        The map, its limits set.
    elevation : Elevation
    ground : GroundMap
        From its grid to the map.
    error : float, optional
        Standard error of the heights [m].
    taken : sequence of tuple of float
        Boxes of the page in which no line may be named.

    Returns
    -------
    float or None
        Height between contours [m]; None where the ground is too flat for any.
    """
    place, heights = _heights_in_view(panel.axes, elevation, ground)
    if min(heights.shape) < 2 or not np.isfinite(heights).any():
        return None
    low, high = float(np.nanmin(heights)), float(np.nanmax(heights))
    finest = FINEST_CONTOURS if error is None else 2.0 * error
    step = nice_step(max((high - low) / MOST_CONTOURS, finest), 1.0)
    levels = np.arange(np.floor(low / step) + 1.0, np.ceil(high / step)) * step
    if not levels.size:
        return None
    east, north = ground.metres(*place)
    found = panel.axes.contour(
        east, north, heights, levels=levels, colors=CONTOUR,
        linewidths=0.7 * POINTS_PER_PIXEL, zorder=3,
    )  # fmt: skip
    rim = (panel.x, panel.y, panel.x + panel.width, panel.y + panel.height)
    to_page = found.get_transform() - panel.page.axes.transData
    centres: list[Points] = []
    lines = list(zip(levels, found.get_paths(), strict=True))
    lines.sort(key=lambda each: round(each[0] / step) % 2)  # every second, then the others
    for level, path in lines:
        if round(level / step) % 2 == 0 or len(centres) < FEW_NAMES:
            name_line(
                panel.page, f"{level:.10g}", path.transformed(to_page), rim, centres, LETTERS,
                taken=taken, colour=SOFT, halo=PAPER,
            )  # fmt: skip
    return step


def _heights_in_view(
    axes: Axes, elevation: Elevation, ground: GroundMap
) -> tuple[list[NDArray[np.intp]], NDArray[np.float32]]:
    """Rows and columns, and heights, of the cells in view and two around; of many every so many."""
    corners = np.array([(x, y) for x in axes.get_xlim() for y in axes.get_ylim()])
    back = np.linalg.solve(ground.jacobian, corners.T)
    columns, rows = back[0] + ground.column, back[1] + ground.row
    shape = elevation.shape
    top, bottom = (int(np.clip(v, 0, shape[0])) for v in (rows.min() - 2, rows.max() + 3))
    left, right = (int(np.clip(v, 0, shape[1])) for v in (columns.min() - 2, columns.max() + 3))
    stride = max(1, max(bottom - top, right - left) // MOST_CELLS)
    place = np.meshgrid(
        np.arange(top, bottom, stride), np.arange(left, right, stride), indexing="ij"
    )
    return list(place), elevation.heights[top:bottom:stride, left:right:stride]


def scale_length(metres: float) -> float:
    """A round length for a scale bar that takes up to a third of a width [m]."""
    power = 10.0 ** np.floor(np.log10(metres / 3.0))
    return float(next(k * power for k in (5.0, 2.0, 1.0) if k * power <= metres / 3.0))
