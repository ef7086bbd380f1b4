"""A period of sun over one latitude, tabulated so that terrain needs only look-ups.

Energy on a plane is linear in the sun's unit vector. So for each azimuth and each height
of the horizon the table holds the vector sum of (irradiance x unit vector x time) over all
sun positions above that horizon; what a cell gets is the scalar product of its normal with
the sums found at its own horizon. One-minute steps cost no more than hourly ones.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import SOLAR_RADIUS_DEG
from terrasol.kernels.beam import LANES, fill_table
from terrasol.sky.diffuse import split_diffuse
from terrasol.sky.irradiance import Sky
from terrasol.sky.sun import SunPath, sun_series

HORIZON_KNOTS: Final = 129
"""Horizon heights tabulated, equal steps of the sine: 0.45 degrees apart at the level, linear
between. With twice as many, annual beam moves by 0.001 % in the mean (docs/validation.md)."""

HEIGHT_KNOTS: Final = (
    -500.0, -350.0, -200.0, -100.0, 0.0, 150.0, 300.0, 450.0, 625.0, 800.0, 1000.0, 1225.0,
    1475.0, 1750.0, 2075.0, 2450.0, 2900.0, 3450.0, 4000.0, 4500.0, 5000.0, 5500.0, 6000.0,
    6500.0, 7000.0, 7500.0, 8000.0, 8500.0, 9000.0,
)  # fmt: skip
"""Heights above the sea at which the air is computed [m]. The clear sky of Ineichen and Perez
(2002) bends most near the sea (its turbidity term falls with a scale of 1250 m); these steps
keep the error of linear interpolation of the beam near 0.03 % up to 4000 m."""

LATITUDE_KNOTS: Final = tuple(
    float(k)
    for k in (*np.arange(-90.0, -50.0, 0.25), *np.arange(-50.0, 50.0), *np.arange(50.0, 90.1, 0.25))
)
"""Latitudes tabulated, fixed to the globe, linear between [degrees]. Whole degrees suffice where
the sun stands high; beyond 50 degrees a winter month would be wrong by percents, so quarter
degrees are taken there (docs/validation.md)."""


@dataclass(frozen=True)
class SunTable:
    """Sums of one period over one latitude, for some heights.

    Parameters
    ----------
    heights : ndarray, shape (heights,)
        Height knots [m].
    direct : ndarray of float32, shape (groups, heights, azimuths, knots, 2, lanes)
        Horizontal and vertical vector sums of the direct light [MJ m-2] by azimuth and
        horizon. The first lanes are the months' beam and circumsolar together; then comes
        the circumsolar alone, for the whole period or month by month.
    isotropic, band, level : ndarray, shape (heights, months)
        Sums of the even sky light on level ground, of the horizon band on a wall, and of
        global irradiation on level open ground [MJ m-2].
    """

    heights: NDArray[np.float64]
    direct: NDArray[np.float32]
    isotropic: NDArray[np.float64]
    band: NDArray[np.float64]
    level: NDArray[np.float64]

    def dark(self) -> NDArray[np.int64]:
        """First horizon knot of each azimuth with no sun above it, shape (azimuths,)."""
        any_light = np.any(self.direct != 0.0, axis=(0, 1, 4, 5))
        knots = np.arange(1, any_light.shape[1] + 1)
        return np.minimum(np.max(any_light * knots, axis=1), any_light.shape[1] - 1)

    def northward(self, south: SunTable, north: SunTable, apart: float) -> NDArray[np.float64]:
        """Relative change of level ground's direct light a radian north, geometry apart.

        What is left, once the ground has been tilted instead of moved, is that the sun shines
        through more or less air. `south` and `north` are tables `apart` degrees apart around
        this one. Shape (groups, lanes), the mean of all heights; 0 where there is no light.
        """
        level, lower, upper = (
            table.direct[:, :, :, 0, 1].sum(axis=(1, 2), dtype=np.float64)
            for table in (self, south, north)
        )
        azimuths = self.direct.shape[2]
        cosine = np.cos(2.0 * np.pi * np.arange(azimuths) / azimuths)
        tilted = np.einsum("ghal,a->gl", self.direct[:, :, :, 0, 0].astype(np.float64), cosine)
        change = (upper - lower) / np.radians(apart) - tilted
        lit = level > 1e-4 * level.max()
        return np.where(lit, change / np.where(lit, level, 1.0), 0.0)

    @property
    def even(self) -> NDArray[np.float32]:
        """Isotropic and horizon band, shape (2, months, heights)."""
        return np.array([self.isotropic.T, self.band.T], np.float32)

    def mixed(self, other: SunTable, share: float) -> SunTable:
        """Linear mix with the table of another latitude: `share` of the other."""
        direct = other.direct - self.direct
        direct *= np.float32(share)
        direct += self.direct
        return SunTable(
            self.heights,
            direct,
            *(
                (1.0 - share) * own + share * others
                for own, others in (
                    (self.isotropic, other.isotropic),
                    (self.band, other.band),
                    (self.level, other.level),
                )
            ),
        )


def latitude_knots(south: float, north: float) -> NDArray[np.float64]:
    """The latitude knots that a range of latitudes needs, two at least [degrees]."""
    knots = np.array(LATITUDE_KNOTS)
    first = min(max(int(np.searchsorted(knots, south, side="right")) - 1, 0), knots.size - 2)
    last = max(int(np.searchsorted(knots, north, side="left")), first + 1)
    return knots[first : last + 1]


def horizon_knots(count: int = HORIZON_KNOTS) -> NDArray[np.float64]:
    """Horizon heights of the table [radians]: equal steps of the sine from 0 to 1."""
    return np.arcsin(np.linspace(0.0, 1.0, count))


def height_knots(lowest: float, highest: float) -> NDArray[np.float64]:
    """The height knots that a range of heights needs [m]."""
    knots = np.array(HEIGHT_KNOTS)
    first = max(int(np.searchsorted(knots, lowest, side="right")) - 1, 0)
    last = min(int(np.searchsorted(knots, highest, side="left")), knots.size - 1)
    first = min(first, knots.size - 2)
    return knots[first : max(last, first + 1) + 1]


def sun_table(
    path: SunPath,
    latitude: float,
    heights: NDArray[np.float64],
    sky: Sky,
    diffuse: str,
    azimuths: int,
    monthly_parts: bool = False,
) -> SunTable:
    """Tabulate the sky of a period over one latitude.

    Parameters
    ----------
    path : SunPath
        The geocentric sun of the period, step by step.
    latitude : float
        Degrees north.
    heights : ndarray, shape (heights,)
        See `height_knots` [m].
    sky : Sky
        The clear air, or a measured sky.
    diffuse : {'perez', 'hay-davies', 'isotropic'}
        Model that parts the diffuse light.
    azimuths : int
        Number of azimuths, the first due north.
    monthly_parts : bool
        Keep the circumsolar light of each month apart, not only that of the period.

    Returns
    -------
    SunTable

    Raises
    ------
    SettingError
        An unknown diffuse model.

    Notes
    -----
    Each sun position is shared between its two neighbouring azimuths: its horizontal
    direction exactly (as a vector sum), its vertical part linearly. The disc, 0.267 degrees
    in radius, is cut by each knot's horizon as by a straight edge.
    """
    sun = sun_series(path, latitude, float(np.mean(heights)))
    months = len(path.period.months)
    circumsolar_lanes = months if monthly_parts else 1
    groups = -(-(months + circumsolar_lanes) // LANES)
    knots = horizon_knots()
    direct = np.zeros((azimuths, knots.size, 2, groups * LANES, heights.size))
    sums = np.zeros((3, heights.size, months))
    glow = np.empty((sun.elevation.size, heights.size))
    both = np.empty_like(glow)
    elevation, azimuth = np.radians(sun.elevation), np.radians(sun.azimuth)
    upright = np.maximum(np.sin(elevation), 0.0)
    lane = sun.month.astype(np.int64)
    mega = sun.step_seconds * 1e-6
    for k, height in enumerate(heights):
        light = sky.over(sun, float(height))
        split = split_diffuse(diffuse, sun, light)
        glow[:, k] = mega * split.circumsolar_normal
        both[:, k] = mega * light.beam_normal + glow[:, k]
        on_level = light.beam_normal * upright + light.diffuse_horizontal
        for i, flux in enumerate((split.isotropic, split.horizon_band, on_level)):
            sums[i, k] = np.bincount(lane, weights=mega * flux, minlength=months)
    disc = np.radians(SOLAR_RADIUS_DEG)
    fill_table(elevation, azimuth, lane, both, knots, disc, direct)
    alone = months + (lane if monthly_parts else np.zeros_like(lane))
    fill_table(elevation, azimuth, alone, glow, knots, disc, direct)
    grouped = direct.reshape(azimuths, knots.size, 2, groups, LANES, heights.size)
    ordered = np.transpose(grouped, (3, 5, 0, 1, 2, 4))
    return SunTable(heights, np.ascontiguousarray(ordered, np.float32), *sums)
