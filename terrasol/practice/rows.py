"""How much sun reaches both sides of vine rows, as the direction of the rows turns.

Rows are endless, straight, plumb hedges of one rectangular section, side by side on a plane slope.
Seen along the rows everything is a drawing in two dimensions, so the beam is shared out exactly;
the even sky and the band along the horizon are that same sharing, summed over the directions from
which they are seen.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrasol.errors import SettingError
from terrasol.light.irradiation import BAND_TOP
from terrasol.practice.classes import slope_percent, weighted_mean, weighted_percentiles
from terrasol.sky.sun import unit_vector

AZIMUTHS: Final = tuple(float(azimuth) for azimuth in range(0, 180, 5))
"""Directions of rows [degrees clockwise from true north]; beyond 180 they repeat."""

SURFACES: Final = ("right side", "left side", "top", "ground")
"""Looking along the row azimuth. The right side faces that azimuth + 90 degrees."""

GROUND_ALBEDO: Final = 0.2
"""Of the ground between the rows, grass or soil (common practice, no source)."""

CANOPY_ALBEDO: Final = 0.2
"""Of the sides of the rows (judgement, no source: no handbook value for vine rows was found; those
of crops in general are 0.15 to 0.25)."""

SKY_AZIMUTHS: Final = 360
"""Directions round the even sky. Between level rows the sums then agree with crossed strings to
1e-4 of the light of level ground (tests/practice/test_rows.py)."""

SKY_RINGS: Final = 90
"""Directions between horizon and zenith, equal steps of the angle."""

BAND_RINGS: Final = 16
"""Directions between the bottom and the top of the horizon band, equal steps of the tangent. Twice
as many, and as many azimuths, move no surface by 1e-3 of the band (tests/practice/test_rows.py)."""

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Vineyard:
    """A plane slope and the rows on it.

    Parameters
    ----------
    slope, aspect : float
        Of the ground [degree]; aspect clockwise from true north, NaN only if level.
    spacing : float
        From row to row, on the ground and square to the rows [m].
    height : float
        Of the leaf wall, plumb [m]. Whether it begins at the ground or on a trunk makes no
        difference to it, for the beam comes from above; what passes under it is the ground's.
    width : float
        Of the leaf wall, level across the row [m].

    Raises
    ------
    SettingError
        Ground of 90 degrees, a slope without an aspect, or sizes that leave no gap.
    """

    slope: float
    aspect: float
    spacing: float
    height: float
    width: float

    def __post_init__(self) -> None:
        if not 0.0 <= self.slope < 90.0:
            raise SettingError(f"slope of {self.slope:g} degrees is outside 0 to below 90")
        if np.isnan(self.aspect) and self.slope > 0.0:
            raise SettingError("ground that slopes needs an aspect")
        if not (self.spacing > 0.0 and self.height > 0.0 and self.width >= 0.0):
            raise SettingError("row spacing and height must be above 0 m, and width not below")
        if not self.width < self.spacing * np.cos(np.radians(self.slope)):
            raise SettingError(
                f"rows {self.width:g} m wide at {self.spacing:g} m spacing leave no gap; "
                "give the spacing from row to row and the width of the leaf wall"
            )

    def rises(self, row_azimuth: float) -> tuple[float, float]:
        """Rise of the ground along the row and across it, to its right [m per level metre]."""
        if np.isnan(self.aspect):
            return 0.0, 0.0
        turn = np.radians(self.aspect - row_azimuth)
        steep = np.tan(np.radians(self.slope))
        return float(-steep * np.cos(turn)), float(-steep * np.sin(turn))


@dataclass(frozen=True, eq=False)
class RowLight:
    """Irradiation of the surfaces of a vineyard for each direction of its rows.

    Attributes
    ----------
    azimuth
        Of the rows [degree]; (azimuths,).
    beam, diffuse, reflected
        On a square metre of each of `SURFACES` [MJ m-2]; (azimuths, 4). Diffuse light is that of
        the even sky and of the horizon band. Reflected light is that from the ground and rows in
        view, all bounces. None reaches the top, which gets what the slope would get without any
        rows.
    area
        Of each surface on one metre of row, laid on the ground [m2]; (azimuths, 4).
    along, across
        Slope of the ground along the row and square to it, without sign [percent]; (azimuths,).
    """

    azimuth: Floats
    beam: Floats
    diffuse: Floats
    reflected: Floats
    area: Floats
    along: Floats
    across: Floats

    @property
    def total(self) -> Floats:
        """Beam, diffuse and reflected light on a square metre of each surface [MJ m-2]."""
        return self.beam + self.diffuse + self.reflected

    @property
    def per_metre(self) -> Floats:
        """The same on all that belongs to one metre of row [MJ m-1]; (azimuths, 4)."""
        return self.total * self.area

    @property
    def faces(self) -> Floats:
        """Azimuths that the right and the left side face [degree]; (azimuths, 2)."""
        return (self.azimuth[:, np.newaxis] + [90.0, 270.0]) % 360.0


def row_light(
    elevation: ArrayLike,
    azimuth: ArrayLike,
    beam_normal: ArrayLike,
    diffuse_horizontal: ArrayLike,
    step_seconds: float,
    *,
    slope: float,
    aspect: float,
    spacing: float,
    height: float,
    width: float,
    horizon_band: ArrayLike = 0.0,
    horizon: ArrayLike | None = None,
    row_azimuths: ArrayLike = AZIMUTHS,
    ground_albedo: float = GROUND_ALBEDO,
    canopy_albedo: float = CANOPY_ALBEDO,
) -> RowLight:
    """Irradiation of both sides of vine rows, their tops and the ground, by row azimuth.

    Parameters
    ----------
    elevation, azimuth : array_like, shape (n,)
        Of the sun's centre [degree], clockwise from true north; one entry a step.
    beam_normal, diffuse_horizontal : array_like, shape (n,)
        Direct light facing the sun, and light of the whole sky on level ground [W m-2]. A part of
        the sky that shines from around the sun may be moved from the second to the first.
    step_seconds : float
        How long each entry stands for.
    slope, aspect, spacing, height, width : float
        See `Vineyard`.
    horizon_band : array_like, shape (n,), optional
        Light of the band along the horizon on an open plumb wall [W m-2], as
        `terrasol.sky.diffuse.split_diffuse` gives it; may be negative.
    horizon : array_like, shape (azimuths,), optional
        Tangents of the skyline at equally spaced azimuths, the first due north; else open.
    row_azimuths : array_like
        [degrees clockwise from true north]; a row has two, 180 degrees apart.
    ground_albedo, canopy_albedo : float
        Share of light sent back evenly; 0 leaves reflected light out.

    Returns
    -------
    RowLight

    Raises
    ------
    SettingError
        See `Vineyard`; an albedo outside 0 to below 1; a horizon of fewer than four azimuths.

    Notes
    -----
    With u the sun's part to the right of the row, v its height above the slope's plane measured
    plumb, H the height of the rows and G the level gap between them, a metre of row takes

        side  min(H u, G v)     top  width v     ground  max(G v - H u, 0)

    times a factor common to all (cos of the row's own slope). They add up to spacing v: nothing is
    lost or counted twice. Leaves let no light through; the ends of rows are not in it.

    The horizon band is level light, so top and ground take it by the slope alone, as open ground
    does, and level ground takes none; what of it comes over the neighbouring row is asked of its
    height above the horizon, 0 to `BAND_TOP`.
    """
    place = Vineyard(slope, aspect, spacing, height, width)
    for albedo in (ground_albedo, canopy_albedo):
        if not 0.0 <= albedo < 1.0:
            raise SettingError(f"albedo {albedo:g} is outside 0 to below 1")
    skyline = _skyline(horizon)
    sun = np.stack(unit_vector(elevation, azimuth))
    seen = sun[2] > _tangent(skyline, azimuth) * np.hypot(sun[0], sun[1])
    beam_energy = np.asarray(beam_normal, np.float64) * seen * step_seconds * 1e-6
    sky, share = _even_sky(place, skyline)
    sky_energy = share * float(np.sum(diffuse_horizontal)) * step_seconds * 1e-6
    low, portion = _horizon_band(skyline)
    low_energy = portion * float(np.sum(horizon_band)) * step_seconds * 1e-6

    rows = np.asarray(row_azimuths, np.float64).ravel()
    beam, diffuse, reflected, area = (np.empty((rows.size, len(SURFACES))) for _ in range(4))
    tilts = np.array([place.rises(row) for row in rows]).reshape(-1, 2)
    for k, row in enumerate(rows):
        beam[k] = _shared(place, row, sun, beam_energy)
        diffuse[k] = _shared(place, row, sky, sky_energy)
        diffuse[k] += _shared(place, row, low, low_energy, level=True)
        area[k] = _areas(place, row)
        first = beam[k] + diffuse[k]
        reflected[k] = _exchanged(place, row, first, ground_albedo, canopy_albedo)
    along, across = 100.0 * np.abs(tilts.T)
    return RowLight(rows, beam, diffuse, reflected, area, along, across)


def mean_plane(slope: ArrayLike, aspect: ArrayLike, area: ArrayLike) -> tuple[float, float]:
    """Slope and aspect [degree] of the plane whose gradient is the mean of the cells'.

    Weighted by map area. Ground without an aspect counts as level; the aspect is NaN if the
    plane is level, both are NaN if no cell is known.

    Examples
    --------
    >>> [round(x, 6) for x in mean_plane([10.0, 10.0], [170.0, 190.0], 1.0)]
    [9.851076, 180.0]
    """
    steep = np.tan(np.radians(slope))
    facing = np.radians(np.where(np.isnan(aspect), 0.0, aspect))
    level = np.isnan(aspect) & ~np.isnan(steep)
    rise = np.where(level, 0.0, steep)
    east = weighted_mean(rise * np.sin(facing), area)
    north = weighted_mean(rise * np.cos(facing), area)
    steepness = float(np.degrees(np.arctan(np.hypot(east, north))))
    if not steepness > 0.0:
        return steepness, np.nan
    return steepness, float(np.degrees(np.arctan2(east, north)) % 360.0)


def row_slopes(
    slope: ArrayLike,
    aspect: ArrayLike,
    area: ArrayLike,
    *,
    row_azimuths: ArrayLike = AZIMUTHS,
    percent: float = 100.0,
) -> Floats:
    """Slope that rows of each azimuth climb over a parcel's cells [percent].

    Parameters
    ----------
    slope, aspect, area : array_like
        Of the cells [degree, degree, m2]; ground without an aspect counts as level.
    row_azimuths : array_like, shape (azimuths,)
        Degrees clockwise from true north.
    percent : float
        Percentile by area: 100 is the steepest cell, 90 leaves the steepest tenth of it out.

    Returns
    -------
    ndarray, shape (azimuths,)
        tan(slope) |cos(aspect - row azimuth)| times 100; NaN where no cell is known.
    """
    steep = slope_percent(slope)
    rows = np.asarray(row_azimuths, np.float64).ravel()
    level = np.isnan(aspect) & ~np.isnan(steep)
    climbed = (
        np.where(level, 0.0, steep * np.abs(np.cos(np.radians(np.subtract(aspect, row)))))
        for row in rows
    )
    return np.array([weighted_percentiles(each, area, [percent])[0] for each in climbed])


def fall_line(aspect: float) -> float:
    """Row azimuth straight down the slope, 0 to below 180; rows across run 90 degrees from it."""
    return float(aspect % 180.0)


def strip_views(
    place: Vineyard, row_azimuth: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """View factors between both sides and the ground of the lane between two rows.

    Parameters
    ----------
    place : Vineyard
    row_azimuth : float
        [degree].

    Returns
    -------
    views : ndarray, shape (3, 3)
        Share of the even light that leaves right side, left side or ground (rows) and reaches
        right side, left side or ground (columns).
    opening : ndarray, shape (3,)
        Share that leaves the lane upward.

    Notes
    -----
    Crossed strings (Hottel 1954; Hottel and Sarofim 1967, Radiative Transfer, from memory), in
    the section square to the rows: crossed less uncrossed strings over twice the strip.
    """
    along, across = place.rises(row_azimuth)
    lean = 1.0 / np.hypot(1.0, along)
    gap, wall = _gap(place, along), place.height * lean
    lift = across * gap * lean
    floor = np.hypot(gap, lift)
    # From the foot of one row to the head of the next, upwards to the right, and to the left.
    rightward, leftward = np.hypot(gap, lift + wall), np.hypot(gap, lift - wall)
    wall_wall = (rightward + leftward - 2.0 * floor) / (2.0 * wall)
    # The side facing right stands left in the lane; its strings to the floor's other end close
    # with `leftward`, those of the other side with `rightward`.
    right_floor = (wall + floor - leftward) / (2.0 * wall)
    left_floor = (wall + floor - rightward) / (2.0 * wall)
    views = np.array(
        [
            [0.0, wall_wall, right_floor],
            [wall_wall, 0.0, left_floor],
            [right_floor * wall / floor, left_floor * wall / floor, 0.0],
        ]
    )
    return views, 1.0 - views.sum(axis=1)


def _gap(place: Vineyard, along: float) -> float:
    """Level width of the lane between two rows, square to their azimuth [m]."""
    period = place.spacing * np.cos(np.radians(place.slope)) * np.hypot(1.0, along)
    return float(period - place.width)


def _areas(place: Vineyard, row_azimuth: float) -> Floats:
    """Area of the surfaces on a metre of row laid on the ground [m2]."""
    along, _ = place.rises(row_azimuth)
    lean = 1.0 / np.hypot(1.0, along)
    flat = lean / np.cos(np.radians(place.slope))
    return np.array([place.height * lean] * 2 + [place.width * flat, _gap(place, along) * flat])


def _shared(
    place: Vineyard, row_azimuth: float, light: Floats, energy: Floats, *, level: bool = False
) -> Floats:
    """Energy on a square metre of each surface, from directions (3, n) with energies (n,).

    Light that is `level` has only its level part of energy; its rise counts in what hides it.
    """
    along, across = place.rises(row_azimuth)
    turn = np.radians(row_azimuth)
    forward = light[0] * np.sin(turn) + light[1] * np.cos(turn)
    right = light[0] * np.cos(turn) - light[1] * np.sin(turn)
    rise = light[2] - along * forward - across * right
    above = np.maximum(rise, 0.0)
    gap, flat = _gap(place, along), np.cos(np.radians(place.slope))
    reach = above * gap / place.height
    right_side = np.minimum(np.maximum(right, 0.0), reach)
    left_side = np.minimum(np.maximum(-right, 0.0), reach)
    top, ground = above, np.maximum(above - np.abs(right) * place.height / gap, 0.0)
    if level:
        top = np.maximum(rise - light[2], 0.0)
        ground = ground * np.divide(top, above, out=np.zeros_like(top), where=above > 0.0)
    return np.array(
        [(part * energy).sum() for part in (right_side, left_side, flat * top, flat * ground)]
    )


def _exchanged(
    place: Vineyard, row_azimuth: float, first: Floats, ground_albedo: float, canopy_albedo: float
) -> Floats:
    """Reflected light on a square metre of each surface, from what reaches it first, all bounces.

    E = E0 + V (albedo E), solved for E at sides and ground.
    """
    views, _ = strip_views(place, row_azimuth)
    albedo = np.array([canopy_albedo, canopy_albedo, ground_albedo])
    lit = first[[0, 1, 3]]
    received = np.linalg.solve(np.eye(3) - views * albedo, lit) - lit
    return np.array([received[0], received[1], 0.0, received[2]])


def _skyline(horizon: ArrayLike | None) -> Floats:
    """Tangents of the skyline, at least 0, with the first one again at the end."""
    if horizon is None:
        return np.zeros(2)
    tangents = np.maximum(np.asarray(horizon, np.float64).ravel(), 0.0)
    if tangents.size < 4 or np.isnan(tangents).any():
        raise SettingError("a horizon needs known tangents for four azimuths or more")
    return np.append(tangents, tangents[0])


def _tangent(skyline: Floats, azimuth: ArrayLike) -> Floats:
    """Skyline at any azimuth [degree], linear between the known ones."""
    known = np.linspace(0.0, 360.0, skyline.size)
    return np.interp(np.mod(azimuth, 360.0), known, skyline)


def _even_sky(place: Vineyard, skyline: Floats) -> tuple[Floats, Floats]:
    """Directions (3, n) of the sky above skyline and slope, and what each sends.

    The weight is solid angle over pi: energy facing it, of light that is 1 on open level ground.
    """
    bearing = (np.arange(SKY_AZIMUTHS) + 0.5) * 360.0 / SKY_AZIMUTHS
    northward, eastward = place.rises(0.0)
    east, north = np.sin(np.radians(bearing)), np.cos(np.radians(bearing))
    least = np.maximum(_tangent(skyline, bearing), eastward * east + northward * north)
    lowest = np.arctan(least)
    step = (0.5 * np.pi - lowest) / SKY_RINGS
    elevation = lowest + step * (np.arange(SKY_RINGS)[:, np.newaxis] + 0.5)
    level, up = np.cos(elevation), np.sin(elevation)
    weight = 2.0 / SKY_AZIMUTHS * (2.0 * np.sin(0.5 * step)) * level
    return np.stack([level * east, level * north, up]).reshape(3, -1), weight.ravel()


def _horizon_band(skyline: Floats) -> tuple[Floats, Floats]:
    """Directions (3, n) of the horizon band above the skyline, and what each sends.

    The level part of each direction is 1 and the weight is energy facing it, of a band that sends
    1 to an open plumb wall. Equal parts of the tangent send alike, as open ground has it
    (`terrasol.light.irradiation`).
    """
    bearing = (np.arange(SKY_AZIMUTHS) + 0.5) * 360.0 / SKY_AZIMUTHS
    east, north = np.sin(np.radians(bearing)), np.cos(np.radians(bearing))
    hidden = np.minimum(_tangent(skyline, bearing), BAND_TOP)
    part = (np.arange(BAND_RINGS)[:, np.newaxis] + 0.5) / BAND_RINGS
    rise = hidden + (BAND_TOP - hidden) * part
    weight = np.pi / SKY_AZIMUTHS * (1.0 - hidden / BAND_TOP) / BAND_RINGS
    directions = np.stack(np.broadcast_arrays(east, north, rise))
    return directions.reshape(3, -1), np.broadcast_to(weight, rise.shape).ravel()
