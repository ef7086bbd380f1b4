"""Heat and radiation of a slope from latitude, slope and aspect alone, as ecologists write it.

None of these knows shade, cloud or height: they rank slopes of one region against each other.
Aspects are downslope, degrees clockwise from true north, NaN on flat ground.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrasol.constants import FLAT_SLOPE_DEG
from terrasol.errors import SettingError

UNIT: Final = "MJ cm-2 yr-1"
"""Of `potential_radiation`, with the fold of heat too. 1 MJ cm-2 is 10,000 MJ m-2."""

FOLDS: Final = ("radiation", "heat")
"""Axis on which aspect is folded: north to south, or north-east to south-west (south of the
equator south to north, and south-east to north-west)."""


@dataclass(frozen=True)
class HeatLoadEquation:
    """One regression of McCune and Keon (2002), Table 2.

    Attributes
    ----------
    coefficients
        Of 1, cos L cos S, cos A sin S sin L, cos A sin S, sin L sin S and sin A sin S; L latitude,
        S slope, A folded aspect.
    logarithmic
        The regression gives the natural logarithm.
    latitudes, steepest
        Where it was fitted: latitude either side of the equator, and slope [degree].
    """

    coefficients: tuple[float, float, float, float, float, float]
    logarithmic: bool
    latitudes: tuple[float, float]
    steepest: float


EQUATIONS: Final = {
    1: HeatLoadEquation((-1.467, 1.582, -1.500, 0.0, -0.262, 0.607), True, (0.0, 60.0), 90.0),
    2: HeatLoadEquation((-1.236, 1.350, -1.376, 0.0, -0.331, 0.375), True, (0.0, 60.0), 60.0),
    3: HeatLoadEquation((0.339, 0.808, 0.0, -0.482, -0.196, 0.0), False, (0.0, 60.0), 60.0),
}
"""McCune and Keon (2002), J. Veg. Sci. 13:603, doi:10.1111/j.1654-1103.2002.tb02087.x, Table 2.
The table was seen quoted, its limits were not: 0 to 60 degrees of latitude is what the paper is
cited for, the steepest slopes are from memory."""


def regression(
    latitude: ArrayLike,
    slope: ArrayLike,
    aspect: ArrayLike,
    *,
    equation: int = 1,
    fold: str = "radiation",
) -> NDArray[np.float64]:
    """The number that an equation of McCune and Keon (2002) gives, as the authors print it.

    Parameters
    ----------
    latitude, slope, aspect : array_like
        Degrees, broadcast together. Latitude is negative in the south.
    equation : {1, 2, 3}
        Equations 1 and 2 give the natural logarithm, 3 the value itself.
    fold : {'radiation', 'heat'}
        See `folded_aspect`.

    Returns
    -------
    ndarray
        Logarithm or value of MJ cm-2 yr-1. Where aspect is NaN on ground flatter than
        ``constants.FLAT_SLOPE_DEG``, the ground is taken as level; on steeper ground NaN remains.
        Outside `valid` the formula goes on unasked.

    Raises
    ------
    SettingError
        An unknown equation or fold.
    """
    c = _equation(equation).coefficients
    level = np.isnan(aspect) & (np.asarray(slope) < FLAT_SLOPE_DEG)
    steepness = np.radians(np.where(level, 0.0, slope))
    turn = np.radians(folded_aspect(np.where(level, 0.0, aspect), latitude, fold=fold))
    north = np.radians(np.abs(latitude))
    sin_slope = np.sin(steepness)
    return (
        c[0]
        + c[1] * np.cos(north) * np.cos(steepness)
        + c[2] * np.cos(turn) * sin_slope * np.sin(north)
        + c[3] * np.cos(turn) * sin_slope
        + c[4] * np.sin(north) * sin_slope
        + c[5] * np.sin(turn) * sin_slope
    )


def potential_radiation(
    latitude: ArrayLike,
    slope: ArrayLike,
    aspect: ArrayLike,
    *,
    equation: int = 1,
    fold: str = "radiation",
) -> NDArray[np.float64]:
    """Potential annual direct radiation, or heat load, after McCune and Keon (2002).

    As `regression`, but the logarithm of equations 1 and 2 undone: MJ cm-2 yr-1 on the slope. With
    fold 'heat' the number keeps its unit but is an index, highest on slopes that face the warm
    afternoon sun.

    Examples
    --------
    >>> float(np.round(potential_radiation(40.0, 30.0, 180.0), 4))
    0.9806
    >>> float(np.round(potential_radiation(-40.0, 30.0, 0.0), 4))
    0.9806
    """
    value = regression(latitude, slope, aspect, equation=equation, fold=fold)
    return np.exp(value) if _equation(equation).logarithmic else value


def valid(latitude: ArrayLike, slope: ArrayLike, *, equation: int = 1) -> NDArray[np.bool_]:
    """Whether an equation of McCune and Keon was fitted for a latitude and slope [degree].

    False where slope is NaN. Raises SettingError for an unknown equation.
    """
    known = _equation(equation)
    lowest, highest = known.latitudes
    away = np.abs(latitude)
    steep = np.asarray(slope)
    return (away >= lowest) & (away <= highest) & (steep >= 0.0) & (steep <= known.steepest)


def folded_aspect(
    aspect: ArrayLike, latitude: ArrayLike, *, fold: str = "radiation"
) -> NDArray[np.float64]:
    """Aspect folded so that slopes alike to the sun read alike, 0 (coolest) to 180 degrees.

    Radiation 180 - |A - 180|, heat |180 - |A - 225||; south of the equator |A - 180| and
    |180 - |A - 315||, which is the mirror image (McCune and Keon 2002). The equator counts north.

    Parameters
    ----------
    aspect, latitude : array_like
        Degrees, broadcast together.
    fold : {'radiation', 'heat'}
        Axis: facing the pole to facing the equator, or away from the afternoon sun to facing it.

    Raises
    ------
    SettingError
        An unknown fold.

    Examples
    --------
    >>> folded_aspect([0.0, 135.0, 225.0], 45.0, fold="heat").tolist()
    [45.0, 90.0, 180.0]
    """
    if fold not in FOLDS:
        raise SettingError(f"fold is {fold!r}; it must be one of {', '.join(FOLDS)}")
    facing = np.mod(aspect, 360.0)
    south = np.asarray(latitude) < 0.0
    if fold == "radiation":
        return np.where(south, np.abs(facing - 180.0), 180.0 - np.abs(facing - 180.0))
    return np.abs(180.0 - np.abs(facing - np.where(south, 315.0, 225.0)))


def northness(aspect: ArrayLike) -> NDArray[np.float64]:
    """Cosine of aspect: 1 facing north, -1 facing south, NaN on flat ground."""
    return np.cos(np.radians(aspect))


def eastness(aspect: ArrayLike) -> NDArray[np.float64]:
    """Sine of aspect: 1 facing east, -1 facing west, NaN on flat ground."""
    return np.sin(np.radians(aspect))


def slope_northness(slope: ArrayLike, aspect: ArrayLike) -> NDArray[np.float64]:
    """Northward part of the unit normal, sin(slope) cos(aspect); 0 on level ground.

    It fades with the slope, so flat ground needs no gap (common practice, no source).
    """
    return _weighted(np.sin(np.radians(slope)), northness(aspect), slope)


def slope_eastness(slope: ArrayLike, aspect: ArrayLike) -> NDArray[np.float64]:
    """Eastward part of the unit normal, sin(slope) sin(aspect); 0 on level ground."""
    return _weighted(np.sin(np.radians(slope)), eastness(aspect), slope)


def beers(aspect: ArrayLike) -> NDArray[np.float64]:
    """Aspect of Beers, Dress and Wensel (1966), J. Forestry 64:691: cos(45 deg - A) + 1.

    0 facing south-west, 2 facing north-east, NaN on flat ground. The authors mean the northern
    hemisphere, and so does this: south of the equator it has no warm and cool end.

    Examples
    --------
    >>> beers([45.0, 225.0]).round(12).tolist()
    [2.0, 0.0]
    """
    return np.cos(np.radians(np.subtract(45.0, aspect))) + 1.0


def stage(slope: ArrayLike, aspect: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Slope times cosine and sine of aspect, Stage (1976), Forest Science 22:457.

    Parameters
    ----------
    slope, aspect : array_like
        Degrees. Slope enters as rise over run: 45 degrees is 1.

    Returns
    -------
    toward_north, toward_east : ndarray
        0 on ground flatter than ``constants.FLAT_SLOPE_DEG`` whose aspect is NaN. In a regression
        they go in beside the slope itself.
    """
    rise = np.tan(np.radians(slope))
    return (
        _weighted(rise, northness(aspect), slope),
        _weighted(rise, eastness(aspect), slope),
    )


def _equation(number: int) -> HeatLoadEquation:
    if number not in EQUATIONS:
        raise SettingError(f"equation is {number!r}; McCune and Keon have 1, 2 and 3")
    return EQUATIONS[number]


def _weighted(
    weight: NDArray[np.float64], part: NDArray[np.float64], slope: ArrayLike
) -> NDArray[np.float64]:
    """Product that is 0, not NaN, where flat ground has no aspect."""
    level = np.isnan(part) & (np.asarray(slope) < FLAT_SLOPE_DEG)
    return np.where(level, 0.0, weight * part)
