"""Quantities of likely grounds whose slopes are trued by what extrapolation to no error finds."""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.ndimage import gaussian_filter

from terrasol.engine.plan import Block, blocks_of
from terrasol.engine.spread import Spread
from terrasol.engine.uncertainty import propagate_all
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame, make_frame
from terrasol.ground.likely import likely_heights
from terrasol.ground.surface import block_normals
from terrasol.ground.uncertainty import DemError, error_fields

NEAR: Final = 4.0
"""Standard deviation, in cells, of the bell over which slopes have their mean trued: one of some
10 x 10 cells. Narrower ones follow the error, wider ones miss the spots (measured on real ground
when it was chosen, as are the next three)."""

AROUND: Final = 8.0
"""The same of the bell over which their scatter is trued, which is known less well than a mean."""

RATIOS: Final = (0.2, 2.0)
"""Least and most that the scatter of slopes about their local mean is multiplied by."""

MEAN_DOUBT: Final = 0.6
"""Share of what truing does to a quantity that counts as its standard error: two ways of telling
it differ by so much, and neither is known to be right (docs/validation.md, own)."""

AREA_DOUBT: Final = 1.0
"""The same of an area past a bound, which hangs on more than mean and scatter of the slopes."""

MORE: Final = (0.5, 1.0)
"""Error variances put on top of the model's own, as shares of it: Cook and Stefanski (1994)
extrapolate from such to none at all, -1."""

TRUING_PART: Final = 0.2
"""Share of the time that goes by before the first likely ground is looked at, for progress only."""

SECONDS_A_CELL: Final = 0.9e-6
"""What one core takes to true a cell's slope on one ground, for the estimate only."""

BYTES_A_CELL: Final = 70.0
"""Bytes a cell of the raster while slopes are compared, for the estimate only."""

Slopes = NDArray[np.float32]

Ask = Callable[[Slopes | None], Mapping[str, ArrayLike]]
"""Asked for quantities of a ground, given other slopes of the raster [percent] or its own, None."""

_UNTRUED: Final = "as drawn: "


def propagate_trued(
    elevation: Elevation,
    error: DemError,
    look: Callable[[Elevation], Ask],
    *,
    windows: Sequence[Block] = (),
    areas: Collection[str] = (),
    classes: Sequence[str] = (),
    angles: Collection[str] = (),
    told: Callable[[float], None] = lambda share: None,
) -> dict[str, Spread]:
    """Find what the error of the heights leaves open about quantities that hang on slopes.

    Parameters
    ----------
    elevation : Elevation
        The ground as it is known.
    error : DemError
        Its error and the draw.
    look : callable
        Given a ground, returns what can be asked for numbers or arrays by name, always the same:
        with None of the ground as it is, else with other slopes, shape of the raster, in percent.
    windows : sequence of Block
        Where slopes are asked for; elsewhere those given may be NaN. By default everywhere.
    areas : collection of str
        Which of them are areas or shares of cells past a bound.
    classes : sequence of str
        Which of them are areas of classes of slope, one after the other, the ground all told.
    angles : collection of str
        Which of them are directions in degrees.
    told : callable
        Told the share done.

    Returns
    -------
    dict of Spread
        By name. Mean and deviation are those with trued slopes; the deviation holds
        MEAN_DOUBT or AREA_DOUBT of what truing does to the mean, and of a class what it does to
        the areas past both its bounds.

    Raises
    ------
    SettingError
        A range too long for the raster, or a quantity that changes its shape.

    Notes
    -----
    Likely grounds are alike within a tile, and real ground is rough in spots and smooth between,
    so that their slopes are too steep where it is smooth. Extrapolation supposes nothing of the
    ground, but finds means alone, not what a cell may be. So means and scatter over some cells
    come from it, and the rest from likely grounds.
    """
    truing = Truing.of(elevation, error, windows, lambda share: told(TRUING_PART * share))
    draw = (1.0 - TRUING_PART) / error.realisations

    def both(ground: Elevation) -> dict[str, ArrayLike]:
        ask = look(ground)
        plain = ask(None)
        trued = plain if ground is elevation else ask(truing(ground))
        drawn = {_UNTRUED + name: values for name, values in plain.items()}
        return {**trued, **drawn}

    every = [*angles, *(_UNTRUED + name for name in angles)]
    spreads = propagate_all(
        elevation, error, both, angles=every, progress=lambda done: told(TRUING_PART + done * draw)
    )
    trued = {name: each for name, each in spreads.items() if not name.startswith(_UNTRUED)}
    moved = {name: each.mean - spreads[_UNTRUED + name].mean for name, each in trued.items()}
    return {
        name: _with_doubt(each, _truing_doubt(name, moved, areas, classes))
        for name, each in trued.items()
    }


def _truing_doubt(
    name: str,
    moved: Mapping[str, NDArray[np.float64]],
    areas: Collection[str],
    classes: Sequence[str],
) -> NDArray[np.float64]:
    """Standard error of a quantity from what truing has moved it, or a class's bounds, by."""
    if name in classes:
        place = classes.index(name)
        below = np.sum([moved[each] for each in classes[:place]], axis=0)
        above = np.sum([moved[each] for each in classes[place + 1 :]], axis=0)
        return np.asarray(AREA_DOUBT * np.hypot(below, above))
    return (AREA_DOUBT if name in areas else MEAN_DOUBT) * moved[name]


def _with_doubt(trued: Spread, doubt: NDArray[np.float64]) -> Spread:
    """Put truing's doubt into the deviation; of a direction there is next to none."""
    if trued.angle:
        return trued
    return replace(trued, deviation=np.hypot(trued.deviation, doubt))


@dataclass(frozen=True, eq=False)
class Truing:
    """How slopes of likely grounds are trued.

    Parameters
    ----------
    frame : Frame
        The raster's place on the Earth.
    part : Block
        The part of it where slopes are trued.
    near : _Bell
        Means over some cells.
    shift : ndarray of float32, shape of the part
        Added to the mean of the slopes nearby [percent].
    ratio : ndarray of float32, shape of the part
        Multiplies what a slope is off that mean.
    """

    frame: Frame
    part: Block
    near: _Bell
    shift: Slopes
    ratio: Slopes

    @classmethod
    def of(
        cls,
        elevation: Elevation,
        error: DemError,
        windows: Sequence[Block] = (),
        told: Callable[[float], None] = lambda share: None,
    ) -> Truing:
        """Compare slopes extrapolated to no error with those of likely grounds.

        Parameters
        ----------
        elevation : Elevation
            The ground as it is known.
        error : DemError
            Its error and the draw.
        windows : sequence of Block
            Where slopes are wanted; by default everywhere.
        told : callable
            Told the share done.

        Returns
        -------
        Truing

        Raises
        ------
        SettingError
            A range too long for the raster.
        """
        frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
        part = _around(windows, elevation.shape)
        known = np.isfinite(slopes(elevation.heights, frame, part))
        near, around = _Bell.over(known, NEAR), _Bell.over(known, AROUND)
        mean, square = _without_error(
            elevation.heights, error, frame, part, lambda share: told(0.6 * share)
        )
        wanted = around(square) - around(mean) ** 2
        drawn, spread = np.zeros_like(mean), np.zeros_like(mean)
        for done, heights in enumerate(
            likely_heights(elevation.heights, error, frame.cell_size), 1
        ):
            slope = slopes(heights, frame, part)
            drawn += slope / error.realisations
            spread += (around(slope * slope) - around(slope) ** 2) / error.realisations
            told(0.6 + 0.4 * done / error.realisations)
        least, most = (ratio**2 for ratio in RATIOS)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.sqrt(np.clip(wanted / spread, least, most))
        return cls(frame, part, near, near(mean - drawn), np.nan_to_num(ratio, nan=1.0))

    def __call__(self, ground: Elevation) -> Slopes:
        """Slopes of a likely ground [percent], trued; NaN where it has none and off the part."""
        slope = slopes(ground.heights, self.frame, self.part)
        middle = self.near(slope)
        found = np.full(ground.shape, np.nan, np.float32)
        trued = np.maximum(middle + self.shift + (slope - middle) * self.ratio, 0.0)
        found[self.part.slices] = trued
        return found


def slopes(heights: NDArray[np.float32], frame: Frame, part: Block | None = None) -> Slopes:
    """Slopes of the cells of a raster, or of a part of it [percent]; NaN where there is none."""
    if part is None:
        part = Block(0, 0, heights.shape[0], heights.shape[1])
    found = np.empty((part.rows, part.columns), np.float32)
    for block in blocks_of((part.rows, part.columns)):
        place = replace(block, row=part.row + block.row, column=part.column + block.column)
        rim = _with_rim(heights, place)
        east, north, up = block_normals(rim, 1, frame, place.row, place.column)
        found[block.slices] = 100.0 * np.hypot(east, north) / up
    return found


def _with_rim(heights: NDArray[np.float32], block: Block) -> NDArray[np.float32]:
    """Heights of a block and one cell around it; NaN beyond the raster."""
    padded = np.full((block.rows + 2, block.columns + 2), np.nan, np.float32)
    top, left = max(block.row - 1, 0), max(block.column - 1, 0)
    piece = heights[top : block.row + block.rows + 1, left : block.column + block.columns + 1]
    row, column = top - block.row + 1, left - block.column + 1
    padded[row : row + piece.shape[0], column : column + piece.shape[1]] = piece
    return padded


def _around(windows: Sequence[Block], shape: tuple[int, int]) -> Block:
    """The rectangle that holds all windows, and as much around them as the wider bell reaches."""
    if not windows:
        return Block(0, 0, *shape)
    margin = int(4.0 * AROUND)
    row = max(min(w.row for w in windows) - margin, 0)
    column = max(min(w.column for w in windows) - margin, 0)
    last_row = min(max(w.row + w.rows for w in windows) + margin, shape[0])
    last_column = min(max(w.column + w.columns for w in windows) + margin, shape[1])
    return Block(row, column, last_row - row, last_column - column)


def _without_error(
    heights: NDArray[np.float32],
    error: DemError,
    frame: Frame,
    part: Block,
    told: Callable[[float], None] = lambda share: None,
) -> tuple[Slopes, Slopes]:
    """Slopes of cells and their squares, on average those of a model without its error.

    More errors are put on the model, with both signs, and the means extrapolated to an error
    variance of none (Cook and Stefanski 1994, doi:10.1080/01621459.1994.10476871, from memory): the
    slope along the parabola through the three, the square, which grows in a straight line, along a
    line.
    """
    seen = slopes(heights, frame, part)
    means = [np.zeros_like(seen) for _ in MORE]
    squares = [np.zeros_like(seen) for _ in MORE]
    for done, field in enumerate(error_fields(error, heights.shape, frame.cell_size)):
        told(done / error.realisations)
        for more, mean, square in zip(MORE, means, squares, strict=True):
            for sign in (1.0, -1.0):
                moved = heights + np.float32(sign * np.sqrt(more)) * field
                steeper = slopes(moved, frame, part)
                mean += steeper / (2 * error.realisations)
                square += steeper * steeper / (2 * error.realisations)
    half, whole = means
    growth = squares[0] + squares[1] / np.float32(2.0) - np.float32(1.5) * seen * seen
    mean = np.float32(6.0) * seen - np.float32(8.0) * half + np.float32(3.0) * whole
    return mean, seen * seen - growth


@dataclass(frozen=True, eq=False)
class _Bell:
    """Means of what is known nearby, weighted by a Gaussian bell."""

    known: NDArray[np.bool_]
    width: float
    weight: NDArray[np.float32]

    @classmethod
    def over(cls, known: NDArray[np.bool_], width: float) -> _Bell:
        """A bell with that standard deviation, in cells."""
        return cls(known, width, gaussian_filter(known.astype(np.float32), width, mode="constant"))

    def __call__(self, values: NDArray[np.float32]) -> NDArray[np.float32]:
        """The means; NaN where the cell itself is not known."""
        filled = np.where(self.known & np.isfinite(values), values, np.float32(0.0))
        sums = gaussian_filter(filled, self.width, mode="constant")
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(self.known, sums / self.weight, np.float32(np.nan))
