"""Quantities of likely grounds whose slopes are trued by what extrapolation to no error finds."""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.ndimage import gaussian_filter

from terrasol.engine.plan import blocks_of
from terrasol.engine.spread import Spread
from terrasol.engine.uncertainty import Told, propagate_all
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

MEAN_DOUBT: Final = 0.65
"""Share of what truing does to a quantity that counts as its standard error: two ways of telling
it differ by so much, and neither is known to be right (docs/validation.md, own)."""

AREA_DOUBT: Final = 1.0
"""The same of an area past a bound, which hangs on more than mean and scatter of the slopes."""

MORE: Final = (0.5, 1.0)
"""Error variances put on top of the model's own, as shares of it: Cook and Stefanski (1994)
extrapolate from such to none at all, -1."""

Slopes = NDArray[np.float32]

Ask = Callable[[Slopes | None], Mapping[str, ArrayLike]]
"""Asked for quantities of a ground, given slopes of all its cells [percent] in place of its own."""

_UNTRUED: Final = "as drawn: "


def propagate_trued(
    elevation: Elevation,
    error: DemError,
    look: Callable[[Elevation], Ask],
    *,
    areas: Collection[str] = (),
    angles: Collection[str] = (),
    progress: Told | None = None,
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
        with None of the ground as it is, else with other slopes of all its cells, shape of the
        raster, in percent.
    areas : collection of str
        Which of them are areas or shares of cells past a bound.
    angles : collection of str
        Which of them are directions in degrees.
    progress : callable, optional
        Told how many realisations are done.

    Returns
    -------
    dict of Spread
        By name. Mean and deviation are those with trued slopes; the deviation holds
        MEAN_DOUBT or AREA_DOUBT of what truing does to the mean.

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
    truing = Truing.of(elevation, error)

    def both(ground: Elevation) -> dict[str, ArrayLike]:
        ask = look(ground)
        plain = ask(None)
        trued = plain if ground is elevation else ask(truing(ground))
        drawn = {_UNTRUED + name: values for name, values in plain.items()}
        return {**trued, **drawn}

    every = [*angles, *(_UNTRUED + name for name in angles)]
    spreads = propagate_all(elevation, error, both, angles=every, progress=progress)
    return {
        name: _with_doubt(
            spread, spreads[_UNTRUED + name], AREA_DOUBT if name in areas else MEAN_DOUBT
        )
        for name, spread in spreads.items()
        if not name.startswith(_UNTRUED)
    }


def _with_doubt(trued: Spread, drawn: Spread, share: float) -> Spread:
    """Count what truing does to the mean as doubt; to a direction it does next to nothing."""
    if trued.angle:
        return trued
    doubt = share * (trued.mean - drawn.mean)
    return replace(trued, deviation=np.hypot(trued.deviation, doubt))


@dataclass(frozen=True, eq=False)
class Truing:
    """How slopes of likely grounds are trued.

    Parameters
    ----------
    frame : Frame
        The raster's place on the Earth.
    near : _Bell
        Means over some cells.
    shift : ndarray of float32, shape (rows, columns)
        Added to the mean of the slopes nearby [percent].
    ratio : ndarray of float32, shape (rows, columns)
        Multiplies what a slope is off that mean.
    """

    frame: Frame
    near: _Bell
    shift: Slopes
    ratio: Slopes

    @classmethod
    def of(cls, elevation: Elevation, error: DemError) -> Truing:
        """Compare slopes extrapolated to no error with those of likely grounds."""
        frame = make_frame(elevation.shape, elevation.transform, elevation.crs)
        known = np.isfinite(slopes(elevation.heights, frame))
        near, around = _Bell.over(known, NEAR), _Bell.over(known, AROUND)
        mean, square = _without_error(elevation.heights, error, frame)
        wanted = around(square) - around(mean) ** 2
        drawn, spread = np.zeros_like(mean), np.zeros_like(mean)
        for heights in likely_heights(elevation.heights, error, frame.cell_size):
            slope = slopes(heights, frame)
            drawn += slope / error.realisations
            spread += (around(slope * slope) - around(slope) ** 2) / error.realisations
        least, most = (ratio**2 for ratio in RATIOS)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.sqrt(np.clip(wanted / spread, least, most))
        return cls(frame, near, near(mean - drawn), np.nan_to_num(ratio, nan=1.0))

    def __call__(self, ground: Elevation) -> Slopes:
        """Slopes of a likely ground [percent], trued; NaN where it has none."""
        slope = slopes(ground.heights, self.frame)
        middle = self.near(slope)
        return np.maximum(middle + self.shift + (slope - middle) * self.ratio, 0.0)


def slopes(heights: NDArray[np.float32], frame: Frame) -> Slopes:
    """Slopes of all cells of a raster [percent]; NaN where there is none."""
    padded = np.pad(heights, 1, constant_values=np.nan)
    found = np.empty(heights.shape, np.float32)
    rows_and_columns = heights.shape[0], heights.shape[1]
    for block in blocks_of(rows_and_columns):
        rows = slice(block.row, block.row + block.rows + 2)
        columns = slice(block.column, block.column + block.columns + 2)
        piece = np.ascontiguousarray(padded[rows, columns])
        east, north, up = block_normals(piece, 1, frame, block.row, block.column)
        inside = found[block.row : rows.stop - 2, block.column : columns.stop - 2]
        inside[:] = 100.0 * np.hypot(east, north) / up
    return found


def _without_error(
    heights: NDArray[np.float32], error: DemError, frame: Frame
) -> tuple[Slopes, Slopes]:
    """Slopes of cells and their squares, on average those of a model without its error.

    More errors are put on the model, with both signs, and the means extrapolated to an error
    variance of none (Cook and Stefanski 1994, doi:10.1080/01621459.1994.10476871): the slope along
    the parabola through the three, the square, which grows in a straight line, along a line.
    """
    seen = slopes(heights, frame)
    means = [np.zeros_like(seen) for _ in MORE]
    squares = [np.zeros_like(seen) for _ in MORE]
    for field in error_fields(error, heights.shape, frame.cell_size):
        for more, mean, square in zip(MORE, means, squares, strict=True):
            for steeper in _on_top(heights, np.sqrt(more) * field, frame):
                mean += steeper / (2 * error.realisations)
                square += steeper * steeper / (2 * error.realisations)
    half, whole = means
    growth = squares[0] + squares[1] / np.float32(2.0) - np.float32(1.5) * seen * seen
    mean = np.float32(6.0) * seen - np.float32(8.0) * half + np.float32(3.0) * whole
    return mean, seen * seen - growth


def _on_top(heights: NDArray[np.float32], field: Any, frame: Frame) -> Iterator[Slopes]:
    """Slopes with an error on top, and with its opposite."""
    for sign in (1.0, -1.0):
        yield slopes((heights + sign * field).astype(np.float32), frame)


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
