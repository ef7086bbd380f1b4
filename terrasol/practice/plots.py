"""From maps to plots: which cells count for a place, how much, and what they say together.

A place lies at a row and column of a grid, cell centres at whole numbers. Distances are true
metres by the grid's Jacobian at the place (`terrasol.ground.frame.Frame`), taken as constant
around it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.stats import rankdata
from scipy.stats import t as student

CUTS: Final = 16
"""Parts of a cell's side by which the share of it that lies in a circle is counted: 256 places,
so to within about one per cent of a cell."""

SCATTER: Final = 4096
"""Places that stand for all the places where a plot may lie: for errors under a cell, deviations
are then exact to 2 %, on the median to 0.1 % (1024 places: 8 % and 0.4 %)."""

ROUNDING: Final = 1e-14
"""Share of a mean square below which a variance is rounding."""

GOLDEN_ANGLE: Final = float(np.pi * (3.0 - np.sqrt(5.0)))

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Share:
    """Cells that count for one place, each once.

    Parameters
    ----------
    rows, columns : ndarray of int, shape (n,)
        Where they are; those outside the grid are left out.
    weight : ndarray of float64, shape (n,)
        How much each counts; with what lies outside the grid they add up to 1.
    """

    rows: NDArray[np.intp]
    columns: NDArray[np.intp]
    weight: Array


def own_cell(row: float, column: float, shape: tuple[int, int]) -> Share:
    """The cell that holds a place."""
    return _inside(np.floor([row + 0.5]), np.floor([column + 0.5]), np.ones(1), shape)


def around_point(row: float, column: float, shape: tuple[int, int]) -> Share:
    """The four cells whose centres surround a place, by bilinear weight.

    In the outer half of the cells at the rim, the nearest of them alone.
    """
    row, column = (float(np.clip(v, 0, n - 1)) for v, n in zip((row, column), shape, strict=True))
    top, left = int(np.floor(row)), int(np.floor(column))
    down, right = row - top, column - left
    weight = np.outer([1.0 - down, down], [1.0 - right, right]).ravel()
    rows, columns = np.array([top, top, top + 1, top + 1]), np.array([left, left + 1] * 2)
    used = weight > 0.0
    return _inside(rows[used], columns[used], weight[used], shape)


def in_circle(
    row: float, column: float, radius: float, jacobian: Array, shape: tuple[int, int]
) -> Share:
    """Cells within a distance of a place, by the share of each that lies within.

    Parameters
    ----------
    row, column : float
        The place.
    radius : float
        Of the circle [m].
    jacobian : ndarray, shape (2, 2)
        True metres east and north a column and a row.
    shape : tuple of int
        Rows and columns of the grid.
    """
    middle = np.floor(row + 0.5), np.floor(column + 0.5)
    down, right = _reach(jacobian, radius)
    rows, columns = np.meshgrid(
        middle[0] + np.arange(-down, down + 1.0),
        middle[1] + np.arange(-right, right + 1.0),
        indexing="ij",
    )
    rows, columns = rows.ravel(), columns.ravel()
    half = max(np.hypot(*(jacobian @ (0.5, 0.5))), np.hypot(*(jacobian @ (0.5, -0.5))))
    away = _distance(rows - row, columns - column, jacobian)
    covered = (away <= radius - half).astype(np.float64)
    cut = np.flatnonzero(np.abs(away - radius) < half)
    parts = (np.arange(CUTS) + 0.5) / CUTS - 0.5
    down_part, right_part = (v.ravel() for v in np.meshgrid(parts, parts, indexing="ij"))
    places = (
        np.add.outer(rows[cut] - row, down_part),
        np.add.outer(columns[cut] - column, right_part),
    )
    covered[cut] = (_distance(*places, jacobian) <= radius).mean(axis=1)
    if not covered.any():  # a circle that slips between the places counted
        return own_cell(row, column, shape)
    used = covered > 0.0
    return _inside(rows[used], columns[used], covered[used] / covered.sum(), shape)


def by_error(
    row: float, column: float, error: float, jacobian: Array, shape: tuple[int, int]
) -> Share:
    """Cells that may hold a place whose position is uncertain, by the chance that they do.

    The error is Gaussian and the same in all directions; its root mean square over both
    directions together is given, so along each it is `error` / sqrt(2).

    Parameters
    ----------
    row, column : float
        The place as measured.
    error : float
        Root mean square of the distance from the true place [m].
    jacobian, shape
        See `in_circle`.

    Notes
    -----
    The chances are counted over `SCATTER` places that lie evenly in probability: the k-th at
    the distance that a share (k + 1/2) / n of places does not pass, turned by the golden angle
    from the one before. Their mean square distance is exactly that of the error.
    """
    spread = -np.log1p(-(np.arange(SCATTER) + 0.5) / SCATTER)
    away = error * np.sqrt(spread / spread.mean())
    angle = GOLDEN_ANGLE * np.arange(SCATTER)
    steps = np.linalg.solve(jacobian, np.stack([away * np.sin(angle), away * np.cos(angle)]))
    cells = np.floor(np.stack([row + steps[1], column + steps[0]]) + 0.5)
    lowest = cells.min(axis=1, keepdims=True)
    wide = int(np.ptp(cells[1])) + 1
    key, count = np.unique((cells[0] - lowest[0]) * wide + cells[1] - lowest[1], return_counts=True)
    rows, columns = np.divmod(key, wide)
    return _inside(rows + lowest[0], columns + lowest[1], count / SCATTER, shape)


def _reach(jacobian: Array, radius: float) -> tuple[int, int]:
    """Most rows and columns by which a cell that a circle touches lies from its middle."""
    inverse = np.linalg.inv(jacobian)  # columns and rows a metre east and north
    right, down = radius * np.hypot(inverse[:, 0], inverse[:, 1]) + 1.0
    return int(np.ceil(down)), int(np.ceil(right))


def _distance(rows: Array, columns: Array, jacobian: Array) -> Array:
    """True length of steps in the grid [m]."""
    east = jacobian[0, 0] * columns + jacobian[0, 1] * rows
    north = jacobian[1, 0] * columns + jacobian[1, 1] * rows
    return np.hypot(east, north)


def _inside(rows: Array, columns: Array, weight: Array, shape: tuple[int, int]) -> Share:
    """What lies on the grid."""
    kept = (rows >= 0) & (rows < shape[0]) & (columns >= 0) & (columns < shape[1])
    return Share(rows[kept].astype(np.intp), columns[kept].astype(np.intp), weight[kept])


class Gathered:
    """What the cells of many shares say, taken in piece by piece.

    Parameters
    ----------
    shares : int
        How many there are.
    quantities : int
        How many maps are gathered.
    """

    def __init__(self, shares: int, quantities: int) -> None:
        shape = shares, quantities
        self.weight = np.zeros(shape)
        self.total = np.zeros(shape)
        self.square = np.zeros(shape)
        self.low = np.full(shape, np.inf)
        self.high = np.full(shape, -np.inf)

    def add(
        self, share: NDArray[np.intp], cell: NDArray[np.intp], weight: Array, values: Array
    ) -> None:
        """Take in some cells.

        Parameters
        ----------
        share, cell : ndarray of int, shape (n,)
            Which share counts which of these cells.
        weight : ndarray, shape (n,)
            How much.
        values : ndarray, shape (cells, quantities)
            NaN where unknown: such cells count for nothing.
        """
        which, place = np.unique(share, return_inverse=True)
        matrix = sparse.csr_array((weight, (place, cell)), shape=(which.size, len(values)))
        known = np.isfinite(values)
        plain = np.where(known, values, 0.0)
        self.weight[which] += matrix @ known.astype(np.float64)
        self.total[which] += matrix @ plain
        self.square[which] += matrix @ plain**2
        starts, cells = matrix.indptr[:-1], matrix.indices
        for quantity, (own, there) in enumerate(zip(values.T, known.T, strict=True)):
            low, high = np.where(there, own, np.inf), np.where(there, own, -np.inf)
            found = np.minimum.reduceat(low[cells], starts)
            self.low[which, quantity] = np.minimum(self.low[which, quantity], found)
            found = np.maximum.reduceat(high[cells], starts)
            self.high[which, quantity] = np.maximum(self.high[which, quantity], found)

    @property
    def mean(self) -> Array:
        """Weighted mean of the known cells; NaN where none is."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(self.weight > 0.0, self.total / self.weight, np.nan)

    @property
    def deviation(self) -> Array:
        """Weighted standard deviation of the known cells, of the whole, not of a sample."""
        with np.errstate(invalid="ignore", divide="ignore"):
            square = self.square / self.weight
            variance = square - self.mean**2
        return np.sqrt(np.where(variance > ROUNDING * square, variance, 0.0 * variance))

    @property
    def least(self) -> Array:
        """Least of the known cells; NaN where none is."""
        return np.where(np.isfinite(self.low), self.low, np.nan)

    @property
    def greatest(self) -> Array:
        """Greatest of the known cells; NaN where none is."""
        return np.where(np.isfinite(self.high), self.high, np.nan)


def correlation(
    one: Sequence[float] | Array, other: Sequence[float] | Array
) -> tuple[float, float, int]:
    """Correlation of two predictors over the plots that have both.

    Returns
    -------
    pearson, spearman : float
        Of the values, and of their ranks (ties share their mean rank); NaN with fewer than
        three plots, or where one of the two does not vary.
    plots : int
        How many there are.

    Examples
    --------
    >>> correlation([1.0, 2.0, 3.0, float("nan")], [1.0, 8.0, 27.0, 5.0])
    (0.966..., 1.0, 3)
    """
    a, b = np.asarray(one, np.float64), np.asarray(other, np.float64)
    known = np.isfinite(a) & np.isfinite(b)
    a, b = a[known], b[known]
    pearson, spearman = _pearson(a, b), _pearson(rankdata(a), rankdata(b))
    return pearson, spearman, int(known.sum())


def _pearson(a: Array, b: Array) -> float:
    """Correlation of values that are all known."""
    if a.size < 3:
        return float("nan")
    scales = np.abs(a).max(), np.abs(b).max()
    a, b = a - a.mean(), b - b.mean()
    if any(np.ptp(v) <= 1e-9 * scale for v, scale in zip((a, b), scales, strict=True)):
        return float("nan")
    return round(float(a @ b) / float(np.sqrt((a @ a) * (b @ b))), 12)


def chance_level(plots: int, share: float = 0.05) -> float:
    """Size of a correlation that chance alone passes in a share of cases, both signs together.

    For one pair named beforehand, values normal and plots independent: Student's t with n - 2
    degrees of freedom; close to true of ranks from ten plots on.

    Examples
    --------
    >>> round(chance_level(10), 3)
    0.632
    """
    if plots < 3:
        return 1.0
    quantile = float(student.ppf(1.0 - share / 2.0, plots - 2))
    return quantile / float(np.sqrt(plots - 2 + quantile**2))


def chance_of_best(
    columns: Array, measured: Array, share: float = 0.05, shuffles: int = 999, seed: int = 1
) -> float:
    """Size of the best rank correlation among many that chance alone passes in a share of cases.

    The measured values are dealt to the plots anew, many times, and the best of all columns is
    kept each time; so columns that say the same do not count twice.

    Parameters
    ----------
    columns : ndarray, shape (plots, columns)
        Predictors, all known.
    measured : ndarray, shape (plots,)
        What they are to explain.
    share : float
        Of cases.
    shuffles, seed : int
        How often, and where the random numbers begin.
    """
    ranks = rankdata(columns, axis=0)
    ranks = ranks - ranks.mean(axis=0)
    size = np.sqrt((ranks**2).sum(axis=0))
    ranks = ranks[:, size > 0.0] / size[size > 0.0]
    own = rankdata(measured)
    own = (own - own.mean()) / np.sqrt(((own - own.mean()) ** 2).sum())
    dealt = np.random.default_rng(seed)
    best = [np.abs(dealt.permutation(own) @ ranks).max() for _ in range(shuffles)]
    return float(np.quantile(best, 1.0 - share))
