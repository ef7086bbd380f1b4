"""Vine rows on a parcel: the light on both sides as their direction turns."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.parcel_cells import Piece
from terrasol.engine.parcel_figures import Asked, Figure
from terrasol.errors import SettingError
from terrasol.light.settings import LightSettings
from terrasol.practice.rows import (
    AZIMUTHS,
    CANOPY_ALBEDO,
    RowLight,
    Vineyard,
    fall_line,
    mean_plane,
    row_light,
    row_slopes,
)
from terrasol.sky.diffuse import split_diffuse
from terrasol.sky.sun import sun_path, sun_series

STEP_SECONDS: Final = 600.0
"""Time step of the sun for rows, at most: over a season, half of it moves no side by 0.1 %
(tested)."""


@dataclass(frozen=True)
class RowSettings:
    """The rows that a grower would plant.

    Parameters
    ----------
    spacing : float
        From row to row, on the ground [m].
    height, width : float
        Of the leaf wall [m].
    canopy_albedo : float
        Share of light that the sides send back, evenly.

    Raises
    ------
    SettingError
        Sizes that leave no gap between rows on level ground; an albedo outside 0 to below 1.
    """

    spacing: float
    height: float
    width: float
    canopy_albedo: float = CANOPY_ALBEDO

    def __post_init__(self) -> None:
        """Refuse what makes no rows."""
        if max(self.spacing, self.height, self.width) > 100.0:
            raise SettingError("rows are stated in metres; none is 100 m wide or high")
        if not 0.0 <= self.canopy_albedo < 1.0:
            raise SettingError(f"canopy albedo {self.canopy_albedo:g} is outside 0 to below 1")
        Vineyard(0.0, np.nan, self.spacing, self.height, self.width)


@dataclass(frozen=True, eq=False)
class Rows:
    """What rows of each direction would get.

    Parameters
    ----------
    light : RowLight
        Of the growing season.
    steepest, steep : ndarray, shape (azimuths,)
        Slope that rows climb in the steepest cell, and that a tenth of the area passes [percent].
    fall_line : float
        Row azimuth straight down the mean plane, 0 to below 180; NaN on level ground.
    """

    light: RowLight
    steepest: NDArray[np.float64]
    steep: NDArray[np.float64]
    fall_line: float

    @property
    def sides(self) -> NDArray[np.float64]:
        """Energy on a square metre of the right and the left side [MJ m-2]; (azimuths, 2)."""
        return self.light.total[:, :2]

    @property
    def most(self) -> int:
        """Place of the direction in which both sides together get most."""
        return int(np.argmax(self.sides.sum(axis=1)))

    @property
    def even(self) -> int:
        """Place of the direction in which the sides differ least."""
        return int(np.argmin(np.abs(self.sides[:, 0] - self.sides[:, 1])))


def rows_of(
    piece: Piece,
    horizon: NDArray[np.float64],
    rows: RowSettings,
    light: LightSettings,
    asked: Asked,
) -> Rows | None:
    """Light on rows of every direction, on the parcel's mean plane behind its middle's horizon.

    Parameters
    ----------
    piece : Piece
    horizon : ndarray, shape (azimuths,)
        Degrees, north first.
    rows : RowSettings
    light : LightSettings
        Its sky, model of diffuse light and albedo count.
    asked : Asked
        Its growing season counts.

    Returns
    -------
    Rows or None
        None where nothing of the parcel is known.
    """
    if not piece.known.any():
        return None
    slope, aspect = mean_plane(piece.slope, piece.aspect, piece.weights)
    step = max(STEP_SECONDS, light.step_seconds)
    longitude = (piece.longitude + 180.0) % 360.0 - 180.0
    sun = sun_series(sun_path(light.period, longitude, step), piece.latitude, piece.height)
    sky = (light.sky or light.air).over(sun, piece.height)
    split = split_diffuse(light.diffuse, sun, sky)
    wanted = np.isin(sun.month, asked.season_places)
    albedo = float(np.mean(light.month_albedo[list(asked.season_places)]))
    found = row_light(
        sun.elevation[wanted],
        sun.azimuth[wanted],
        (sky.beam_normal + split.circumsolar_normal)[wanted],
        split.isotropic[wanted],
        step,
        slope=slope,
        aspect=aspect,
        spacing=rows.spacing,
        height=rows.height,
        width=rows.width,
        horizon_band=split.horizon_band[wanted],
        horizon=np.tan(np.radians(horizon)),
        ground_albedo=min(albedo, 0.99),
        canopy_albedo=rows.canopy_albedo,
    )
    climbed = [
        row_slopes(piece.slope, piece.aspect, piece.weights, row_azimuths=AZIMUTHS, percent=p)
        for p in (100.0, 90.0)
    ]
    return Rows(found, climbed[0], climbed[1], fall_line(aspect))


def row_figures(rows: Rows | None, asked: Asked) -> list[Figure]:
    """What rows come to in numbers."""
    words = f"in {asked.season_words}"
    names = (
        ("rows_fall_line_deg", "degree", "row azimuth straight down the parcel's mean plane"),
        ("rows_most_azimuth_deg", "degree",
         f"row azimuth in which both sides together get most energy {words}"),
        ("rows_most_mj_m2_side", "MJ m-2", "energy on a square metre of side there, mean of both"),
        ("rows_most_steepest_percent", "percent", "steepest climb of rows of that azimuth"),
        ("rows_even_azimuth_deg", "degree", "row azimuth in which the two sides differ least"),
        ("rows_even_mj_m2_side", "MJ m-2", "energy on a square metre of side there, mean of both"),
        ("rows_even_steepest_percent", "percent", "steepest climb of rows of that azimuth"),
        ("rows_least_mj_m2_side", "MJ m-2", "the same for the row azimuth with least energy"),
        ("rows_down_steepest_percent", "percent", "steepest climb of rows down the fall line"),
    )  # fmt: skip
    values = [np.nan] * len(names) if rows is None else _values(rows)
    return [
        Figure(name, value, unit, meaning)
        for (name, unit, meaning), value in zip(names, values, strict=True)
    ]


def _values(rows: Rows) -> list[float]:
    """The numbers of `row_figures`."""
    both = rows.sides.mean(axis=1)
    azimuth, most, even = rows.light.azimuth, rows.most, rows.even
    down = np.nan
    if np.isfinite(rows.fall_line):
        turn = np.abs((azimuth - rows.fall_line + 90.0) % 180.0 - 90.0)
        down = float(rows.steepest[np.argmin(turn)])
    return [
        float(v)
        for v in (
            rows.fall_line,
            azimuth[most], both[most], rows.steepest[most],
            azimuth[even], both[even], rows.steepest[even],
            both.min(), down,
        )
    ]  # fmt: skip
