"""The cells of parcels at one cell size: their ground, light and hours of sun."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import RegularGridInterpolator

from terrasol.engine.hours import plan_hours
from terrasol.engine.job import Plan, plan_irradiation
from terrasol.engine.plan import Block, Progress
from terrasol.engine.windows import collect
from terrasol.errors import InputError
from terrasol.files.vectors import Cells, Polygons, coverage
from terrasol.ground.beyond import Scene
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import Frame
from terrasol.light.hours import HoursSettings
from terrasol.light.settings import LightSettings

Arrays = dict[str, NDArray[Any]]

SceneOf = Callable[[Elevation, Frame], Scene]
"""What stands beyond and above a ground."""

LIGHT_LAYERS = ("slope", "aspect", "sky_view", "irradiation_months")
HOURS_LAYERS = ("sun_hours_months", "first_sun", "last_sun")
"""Layers of the plans that parcels are told of."""


@dataclass(frozen=True, eq=False)
class Piece:
    """A parcel's cells at one cell size.

    Parameters
    ----------
    name : str
        The parcel's.
    window : Block
        The rectangle of cells around it; all arrays are of it.
    area : ndarray, shape (rows, columns)
        Map area of the part of each cell that lies in the parcel [m2]; 0 outside.
    heights : ndarray, shape (rows, columns)
        Of the cells [m].
    layers : dict of ndarray, shape (bands, rows, columns)
        What the plans found, by layer name.
    latitude, longitude : float
        Of the parcel's middle [degrees].
    inside : float
        Share of the parcel's area that lies on the raster.
    """

    name: str
    window: Block
    area: NDArray[np.float64]
    heights: NDArray[np.float32]
    layers: Arrays
    latitude: float
    longitude: float
    inside: float

    @property
    def known(self) -> NDArray[np.bool_]:
        """Cells of the parcel whose slope is known."""
        return (self.area > 0.0) & np.isfinite(self.slope)

    @property
    def slope(self) -> NDArray[np.float32]:
        """Slope [degrees]."""
        return self.layers["slope"][0]

    @property
    def aspect(self) -> NDArray[np.float32]:
        """Aspect [degrees clockwise from true north]; NaN on flat ground."""
        return self.layers["aspect"][0]

    @property
    def weights(self) -> NDArray[np.float64]:
        """Map area where the slope is known, else 0 [m2]."""
        return np.where(self.known, self.area, 0.0)

    @property
    def surface(self) -> NDArray[np.float64]:
        """Area of the slope's own surface where it is known, else 0 [m2]."""
        slope = np.radians(np.where(self.known, self.slope, 0.0), dtype=np.float64)
        return np.asarray(self.weights / np.cos(slope))

    @property
    def height(self) -> float:
        """Mean height of the parcel's known cells [m]."""
        weights = np.where(np.isfinite(self.heights), self.area, 0.0)
        total = float(weights.sum())
        return float((np.nan_to_num(self.heights) * weights).sum()) / total if total else np.nan


def true_areas(frame: Frame, window: Block) -> NDArray[np.float64]:
    """Level area on the ellipsoid of the cells of a window [m2], whatever the CRS.

    It is the determinant of the frame's Jacobian. At a height of 500 m the level area is 0.016 %
    more; that is left out, as in surveys of land.
    """
    jacobian = frame.jacobian
    det = np.abs(
        jacobian[..., 0, 0] * jacobian[..., 1, 1] - jacobian[..., 0, 1] * jacobian[..., 1, 0]
    )
    return _on_window(frame, det, window)


def _on_window(frame: Frame, lattice: NDArray[np.float64], window: Block) -> NDArray[np.float64]:
    """A field of the frame's lattice at the cells of a window."""
    rows = np.arange(window.row, window.row + window.rows)
    columns = np.arange(window.column, window.column + window.columns)
    places = np.stack(np.meshgrid(rows, columns, indexing="ij"), axis=-1)
    of = RegularGridInterpolator(
        (frame.rows, frame.columns), lattice, bounds_error=False, fill_value=None
    )
    return np.asarray(of(places))


def pieces_of(
    elevation: Elevation,
    polygons: Polygons,
    light: LightSettings,
    hours: HoursSettings | None,
    scene_of: SceneOf,
    threads: int | None = None,
    progress: Progress | None = None,
) -> tuple[list[Piece | None], tuple[str, ...]]:
    """Find the cells of parcels, and what the sun does there.

    Parameters
    ----------
    elevation : Elevation
        The ground, of which all counts as horizon.
    polygons : Polygons
        The parcels, in the ground's CRS.
    light : LightSettings
        What light.
    hours : HoursSettings, optional
        Which hours of sun; None for none.
    scene_of : callable
        What stands beyond and above the ground.
    threads, progress
        See `Plan.run`.

    Returns
    -------
    pieces : list of Piece or None
        One a parcel, in order; None where it lies outside the raster.
    warnings : tuple of str

    Raises
    ------
    InputError
        No parcel lies on the raster, or none on known ground.
    """
    plan: Plan = plan_irradiation(elevation, light)
    scene = scene_of(elevation, plan.frame)
    plan.scene = scene
    cells, warnings = coverage(polygons, elevation.transform, elevation.shape)
    windows = [_window(each) for each in cells if each.rows.size]
    told = progress or (lambda share, stage: None)
    share = 0.5 if hours else 1.0
    found, summary = collect(
        plan, windows, threads, lambda part, stage: told(share * part, stage), LIGHT_LAYERS
    )
    notes = dict.fromkeys((*warnings, *summary.warnings))
    if hours is not None:
        of_hours = plan_hours(elevation, hours, scene)
        names = [layer.name for layer in of_hours.layers if layer.name in HOURS_LAYERS]
        more, _ = collect(
            of_hours, windows, threads, lambda part, stage: told(0.5 + 0.5 * part, stage), names
        )
        found = [light_of | hours_of for light_of, hours_of in zip(found, more, strict=True)]
    layers, places = iter(found), iter(windows)
    pieces = [
        _piece(elevation, plan.frame, name, each, next(places), next(layers))
        if each.rows.size
        else None
        for name, each in zip(polygons.names, cells, strict=True)
    ]
    if not any(piece is not None and piece.known.any() for piece in pieces):
        raise InputError("all parcels lie on void ground: fill voids, or give a complete model")
    return pieces, tuple(notes)


def _window(cells: Cells) -> Block:
    """The rectangle around some cells."""
    row, column = int(cells.rows.min()), int(cells.columns.min())
    rows, columns = int(np.ptp(cells.rows)) + 1, int(np.ptp(cells.columns)) + 1
    return Block(row, column, rows, columns)


def _piece(
    elevation: Elevation, frame: Frame, name: str, cells: Cells, window: Block, layers: Arrays
) -> Piece:
    """One parcel's cells."""
    fraction = np.zeros((window.rows, window.columns))
    fraction[cells.rows - window.row, cells.columns - window.column] = cells.fraction
    area = fraction * true_areas(frame, window)
    heights = elevation.heights[window.slices]
    row = float(np.average(cells.rows, weights=cells.fraction))
    column = float(np.average(cells.columns, weights=cells.fraction))
    latitude = frame.latitude_at(row, column)
    longitude = frame.centre[1] + _east_of_centre(frame, row, column)
    return Piece(name, window, area, heights, layers, latitude, longitude, cells.inside)


def _east_of_centre(frame: Frame, row: float, column: float) -> float:
    """Longitude of a place less that of the raster's centre, the short way [degrees]."""
    turn = np.radians(frame.longitude - frame.centre[1])
    lattice = np.degrees(np.angle(np.exp(1j * turn)))
    return float(RegularGridInterpolator((frame.rows, frame.columns), lattice)((row, column)))
