"""Mean and standard error of a quantity over realisations, without keeping them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import ArrayLike, DTypeLike, NDArray
from scipy.special import stdtrit

from terrasol.errors import SettingError

UNKNOWN_DIRECTION: Final = 180.0 / math.sqrt(3.0)
"""Standard error of a direction about which nothing is known [degrees]: that of an even spread
over the whole circle. No direction's standard error is told as more."""

SHIFT_DOUBT: Final = 0.2
"""Share of the shift that is itself in doubt: how much of a model's roughness is its error is read
off the model, in tiles of few waves. Chosen as the share that keeps mean slopes of parcels within
88 to 92 % on all made reliefs, of which the smoothest needs it (docs/validation.md, own)."""

WHOLE: Final = (slice(None),)
"""All of an array."""


class Running:
    """Count, mean and standard deviation of arrays that come one after the other.

    Values that are not finite are left out, element by element. Updated as by Welford (1962),
    doi:10.1080/00401706.1962.10490022.

    Parameters
    ----------
    shape : tuple of int
        Of the arrays.
    dtype : dtype
        What mean and spread are kept in.
    """

    def __init__(self, shape: tuple[int, ...], dtype: DTypeLike = np.float64) -> None:
        self.count = np.zeros(shape, np.uint16)
        self._mean = np.zeros(shape, dtype)
        self._squares = np.zeros(shape, dtype)

    def add(self, values: NDArray[Any], window: tuple[slice, ...] = WHOLE) -> None:
        """Take the next array, or the next of a window."""
        count, mean, squares = self.count[window], self._mean[window], self._squares[window]
        known = np.isfinite(values)
        count += known
        away = np.where(known, values - mean, 0.0).astype(mean.dtype)
        mean += away / np.maximum(count, 1)
        squares += away * np.where(known, values - mean, 0.0).astype(mean.dtype)

    def mean(self, window: tuple[slice, ...] = WHOLE) -> NDArray[Any]:
        """Mean of what came; NaN where nothing did."""
        return np.where(self.count[window] > 0, self._mean[window], np.nan)

    def deviation(self, window: tuple[slice, ...] = WHOLE) -> NDArray[Any]:
        """Standard deviation with n - 1; NaN where fewer than two came."""
        count = self.count[window]
        variance = self._squares[window] / np.maximum(count.astype(np.float32) - 1.0, 1.0)
        return np.where(count > 1, np.sqrt(variance), np.nan)

    def error_of(self, value: NDArray[Any], window: tuple[slice, ...] = WHOLE) -> NDArray[Any]:
        """Root mean square of what came less a value; NaN where fewer than two came."""
        count = self.count[window]
        about_mean = self._squares[window] / np.maximum(count.astype(np.float32), 1.0)
        error = np.sqrt(about_mean + (self._mean[window] - value) ** 2)
        return np.where(count > 1, error, np.nan)


class RunningAngle:
    """Count, mean and circular standard deviation of arrays of directions [degrees].

    The standard deviation is sqrt(-2 ln R) of the resultant length R (Mardia and Jupp 2000,
    Directional Statistics, section 2.3.3, from memory), whose square is freed of what the number
    of realisations adds to it: (n R^2 - 1) / (n - 1). Never more than UNKNOWN_DIRECTION.

    Parameters
    ----------
    shape : tuple of int
        Of the arrays.
    dtype : dtype
        What the sums are kept in.
    """

    def __init__(self, shape: tuple[int, ...], dtype: DTypeLike = np.float64) -> None:
        self.count = np.zeros(shape, np.uint16)
        self._north = np.zeros(shape, dtype)
        self._east = np.zeros(shape, dtype)

    def add(self, values: NDArray[Any], window: tuple[slice, ...] = WHOLE) -> None:
        """Take the next array, or the next of a window."""
        known = np.isfinite(values)
        angle = np.radians(np.where(known, values, 0.0))
        self.count[window] += known
        self._north[window] += np.where(known, np.cos(angle), 0.0).astype(self._north.dtype)
        self._east[window] += np.where(known, np.sin(angle), 0.0).astype(self._east.dtype)

    def mean(self, window: tuple[slice, ...] = WHOLE) -> NDArray[Any]:
        """Mean direction, 0 to below 360; NaN where nothing came."""
        turn = np.degrees(np.arctan2(self._east[window], self._north[window])) % 360.0
        return np.where(self.count[window] > 0, turn, np.nan)

    def deviation(self, window: tuple[slice, ...] = WHOLE) -> NDArray[Any]:
        """Circular standard deviation [degrees]; NaN where fewer than two came."""
        count = self.count[window].astype(np.float64)
        north = self._north[window].astype(np.float64)
        east = self._east[window].astype(np.float64)
        with np.errstate(divide="ignore", invalid="ignore"):
            resultant = ((north**2 + east**2) / count - 1.0) / (count - 1.0)
            spread = np.degrees(np.sqrt(-np.log(np.clip(resultant, 0.0, 1.0))))
        return np.where(count > 1, np.minimum(spread, UNKNOWN_DIRECTION), np.nan)


@dataclass(frozen=True)
class Spread:
    """What the error of the heights leaves open about a quantity.

    Parameters
    ----------
    estimate : ndarray
        The quantity of the model as it is.
    mean : ndarray
        Its mean over the grounds that may be: the better value, free of what error adds.
    deviation : ndarray
        Its standard deviation over them.
    count : ndarray of int
        Grounds of which it could be told.
    angle : bool
        It is a direction [degrees].
    """

    estimate: NDArray[np.float64]
    mean: NDArray[np.float64]
    deviation: NDArray[np.float64]
    count: NDArray[np.uint16]
    angle: bool = False

    @property
    def shift(self) -> NDArray[np.float64]:
        """What error has done to the estimate, as far as is known: estimate less mean."""
        return _turn(self.estimate - self.mean, self.angle)

    @property
    def standard_error(self) -> NDArray[np.float64]:
        """Root mean square of what the estimate may be off, its shift included."""
        error = np.hypot(self.deviation, self.shift)
        return np.minimum(error, UNKNOWN_DIRECTION) if self.angle else error

    def interval(
        self, level: float = 0.9, within: tuple[float, float] = (-np.inf, np.inf)
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Bounds that hold the true value with a probability.

        Parameters
        ----------
        level : float
            The probability, over 0 and under 1.
        within : tuple of float
            Least and greatest value that the quantity can have.

        Returns
        -------
        low, high : ndarray
            About the mean; of a direction not brought back to 0 to 360, so that low < high.

        Raises
        ------
        SettingError
            A level that is no probability.

        Notes
        -----
        mean -+ t s sqrt(1 + 1/n), with n the grounds, t Student's quantile for n - 1 degrees of
        freedom, and s the root of the sum of two squares: the deviation, and SHIFT_DOUBT of the
        shift. docs/uncertainty.md says how often they hold the truth.
        """
        if not 0.0 < level < 1.0:
            raise SettingError(f"the level of an interval must be over 0 and under 1; got {level}")
        count = np.maximum(self.count.astype(np.float64), 2.0)
        half = stdtrit(count - 1.0, 0.5 + level / 2.0) * np.sqrt(1.0 + 1.0 / count)
        half *= np.hypot(self.deviation, SHIFT_DOUBT * self.shift)
        low, high = self.mean - half, self.mean + half
        return np.clip(low, *within), np.clip(high, *within)


def _turn(difference: NDArray[np.float64], angle: bool) -> NDArray[np.float64]:
    """A difference, of directions the shorter way round."""
    return (difference + 180.0) % 360.0 - 180.0 if angle else difference


class SpreadTally:
    """Takes a quantity's realisations one after the other.

    Parameters
    ----------
    estimate : array_like
        The quantity of the model as it is.
    angle : bool
        It is a direction [degrees].
    """

    def __init__(self, estimate: ArrayLike, angle: bool = False) -> None:
        self.estimate = np.asarray(estimate, np.float64)
        self.angle = angle
        kind = RunningAngle if angle else Running
        self._running: Running | RunningAngle = kind(np.atleast_1d(self.estimate).shape)

    def add(self, values: ArrayLike) -> None:
        """Take the next realisation."""
        self._running.add(np.atleast_1d(np.asarray(values, np.float64)))

    def spread(self) -> Spread:
        """What came out."""
        running, shape = self._running, self.estimate.shape
        return Spread(
            self.estimate,
            running.mean().reshape(shape),
            running.deviation().reshape(shape),
            running.count.reshape(shape),
            self.angle,
        )
