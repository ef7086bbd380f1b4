"""The error of an elevation model, as random fields that are correlated in space."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.fft import irfft2, next_fast_len, rfft2

from terrasol.errors import SettingError

REALISATIONS: Final = 24
"""Error fields drawn unless told otherwise. A standard error from n fields is itself known to
1 / sqrt(2 (n - 1)), here 15 %, and a 90 % interval is 6 % wider than from endless fields; 96 fields
would halve the first at four times the cost (judgement; measured in docs/uncertainty.md)."""

MOST_REALISATIONS: Final = 10_000
"""More would know a standard error to better than 1 %, which no stated RMSE deserves (judgement,
no source)."""

RANGE_CELLS: Final = 5.0
"""Range of the error in cells where none is given (judgement, no source). Ranges of 2 to 5 cells
tilt cells the most: shorter ones are averaged away by Horn's window, longer ones move neighbours
together. So this one does not flatter the model."""

DECAY: Final = 3.0
"""Range over the length in the exponent: at the range, exp(-3), 5 % of the correlation is left,
the geostatisticians' practical range."""

MARGIN_RANGES: Final = 2.0
"""Ranges that are drawn beyond the raster, since the fields wrap around. Opposite edges are then
correlated by exp(-6), 0.25 %, more than they should be."""

MOST_NODES: Final = 2**30
"""Most nodes of a field with its margin, 4 GB of them (judgement, no source)."""

LONGEST: Final = 1e6
"""Longest range and largest RMSE taken, m: more is another unit (judgement, no source)."""


@dataclass(frozen=True)
class DemError:
    """The random error that an elevation model is stated to have, and how often it is drawn.

    Parameters
    ----------
    rmse : float
        Standard deviation of the error of a height [m], over 0.
    range : float, optional
        Distance at which 5 % of the error's correlation is left [m]; 0 for errors that do not
        know of each other, None for RANGE_CELLS cells.
    realisations : int
        Error fields drawn, 2 or more.
    seed : int
        Names the draw, 0 or more: the same seed, the same fields.

    Raises
    ------
    SettingError
        A value out of its range.
    """

    rmse: float
    range: float | None = None
    realisations: int = REALISATIONS
    seed: int = 1

    def __post_init__(self) -> None:
        """Refuse what makes no sense."""
        if not 0.0 < self.rmse <= LONGEST:
            raise SettingError(
                f"the RMSE of heights must be over 0 and at most {LONGEST:,.0f} m;"
                f" got {self.rmse:g}"
            )
        if self.range is not None and not 0.0 <= self.range <= LONGEST:
            raise SettingError(
                f"the range of the error must be 0 to {LONGEST:,.0f} m; got {self.range:g}"
            )
        if not 2 <= self.realisations <= MOST_REALISATIONS:
            raise SettingError(
                f"the realisations must be 2 to {MOST_REALISATIONS}; got {self.realisations}"
            )
        if self.seed < 0:
            raise SettingError(f"the seed must be 0 or more; got {self.seed}")

    def range_on(self, cell_size: tuple[float, float]) -> float:
        """Range on cells of that size [m]."""
        return RANGE_CELLS * max(cell_size) if self.range is None else self.range

    def correlation(
        self, distance: NDArray[np.float64], cell_size: tuple[float, float]
    ) -> NDArray[np.float64]:
        """Correlation of the errors of two heights that far apart [m]: exp(-3 d / range)."""
        reach = self.range_on(cell_size)
        if reach == 0.0:
            return np.where(distance == 0.0, 1.0, 0.0)
        return np.exp(-DECAY * distance / reach)

    def words(self, cell_size: tuple[float, float]) -> str:
        """The error in words, for tags and pages."""
        reach = self.range_on(cell_size)
        spread = f"correlated exponentially, 5 % at {reach:g} m" if reach else "not correlated"
        return f"random height error of {self.rmse:g} m rms, {spread}"


def parse_dem_error(text: str, realisations: int = REALISATIONS, seed: int = 1) -> DemError:
    """Read ``RMSE`` or ``RMSE,RANGE``, in metres.

    Parameters
    ----------
    text : str
        One number or two.
    realisations, seed : int
        See `DemError`.

    Returns
    -------
    DemError

    Raises
    ------
    SettingError
        No such numbers, or one out of its range.

    Examples
    --------
    >>> parse_dem_error("0.5,60")
    DemError(rmse=0.5, range=60.0, realisations=24, seed=1)
    >>> parse_dem_error("0.5").range_on((10.0, 10.0))
    50.0
    """
    try:
        numbers = [float(part) for part in text.split(",")]
    except ValueError:
        numbers = []
    if len(numbers) not in (1, 2):
        raise SettingError(
            f"the error of heights must be RMSE or RMSE,RANGE in metres, as 0.5 or 0.5,60;"
            f" got '{text}'"
        )
    return DemError(numbers[0], numbers[1] if len(numbers) == 2 else None, realisations, seed)


def error_fields(
    error: DemError, shape: tuple[int, int], cell_size: tuple[float, float]
) -> Iterator[NDArray[np.float32]]:
    """Draw error fields, one a realisation.

    Gaussian, of mean 0, standard deviation `error.rmse` and the correlation exp(-3 d / range)
    at the distance d. Each depends on the seed and its own number alone, and is drawn for the
    whole raster at once.

    Parameters
    ----------
    error : DemError
        The error and its draw.
    shape : tuple of int
        Rows and columns.
    cell_size : tuple of float
        Ground length of a column step and a row step [m].

    Yields
    ------
    ndarray of float32, shape (rows, columns)
        To be added to the heights [m].

    Raises
    ------
    SettingError
        A range so long that the fields would not fit into memory.

    Notes
    -----
    White noise on a torus that is larger than the raster, filtered in the frequency domain by
    the root of the spectrum of the wrapped correlation: exact but for what wraps around, see
    MARGIN_RANGES (Dietrich and Newsam 1997, doi:10.1137/S1064827592240555). That errors of
    heights are correlated, and what that does to slopes: Fisher (1998), Photogrammetric
    Engineering and Remote Sensing 64; Holmes, Chadwick and Kyriakidis (2000),
    Journal of Hydrology 233; Wechsler and Kroll (2006), Photogrammetric Engineering and
    Remote Sensing 72. All four from memory.

    Examples
    --------
    >>> first, second = error_fields(DemError(0.5, 60.0, 2), (40, 50), (10.0, 10.0))
    >>> first.shape, bool((first != second).any())
    ((40, 50), True)
    """
    torus = _torus(error, shape, cell_size)
    filter_ = _filter(error, torus, cell_size)
    for number in range(error.realisations):
        noise = np.random.default_rng([error.seed, number]).standard_normal(torus, np.float32)
        if filter_ is not None:
            noise = irfft2(rfft2(noise) * filter_, torus, overwrite_x=True)
        yield np.ascontiguousarray(noise[: shape[0], : shape[1]] * np.float32(error.rmse))


def field_bytes(error: DemError, shape: tuple[int, int], cell_size: tuple[float, float]) -> float:
    """Peak memory of drawing a field [bytes]: noise, its transform twice, the filter, the field."""
    return 20.0 * math.prod(_torus(error, shape, cell_size))


def _torus(
    error: DemError, shape: tuple[int, int], cell_size: tuple[float, float]
) -> tuple[int, int]:
    """Rows and columns of the torus that a field is cut from."""
    across, down = cell_size
    margin = MARGIN_RANGES * error.range_on(cell_size)
    rows, columns = (
        next_fast_len(size + math.ceil(margin / step), real=True)
        for size, step in zip(shape, (down, across), strict=True)
    )
    if rows * columns > MOST_NODES:
        raise SettingError(
            f"an error range of {error.range_on(cell_size):g} m is too long for cells of"
            f" {across:.3g} m on this raster: its error fields would not fit into memory"
        )
    return rows, columns


def _filter(
    error: DemError, torus: tuple[int, int], cell_size: tuple[float, float]
) -> NDArray[np.float32] | None:
    """Root of the spectrum of the correlation wrapped around a torus; None for white noise."""
    if error.range_on(cell_size) == 0.0:
        return None
    across, down = cell_size
    wrapped = np.zeros(torus)
    for turn_down in (0, 1):  # the near images: farther ones are below exp(-12) of the whole
        for turn_across in (0, 1):
            rows = down * np.abs(_lags(torus[0]) - turn_down * torus[0])
            columns = across * np.abs(_lags(torus[1]) - turn_across * torus[1])
            distance = np.hypot(rows[:, None], columns)
            wrapped += error.correlation(distance, cell_size)
    spectrum = np.maximum(rfft2(wrapped / wrapped[0, 0]).real, 0.0)
    return np.sqrt(spectrum).astype(np.float32)


def _lags(size: int) -> NDArray[np.float64]:
    """Steps from the first node of a ring to each of its nodes, the shorter way round."""
    steps = np.arange(size, dtype=float)
    return np.minimum(steps, size - steps)
