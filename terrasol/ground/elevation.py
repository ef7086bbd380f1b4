"""An elevation model in memory: heights in metres, voids as NaN, and where it lies."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pyproj import CRS
from pyproj.exceptions import CRSError

from terrasol.errors import InputError, SettingError

METRES_PER_UNIT = {
    "metre": 1.0,
    "foot": 0.3048,
    "US survey foot": 1200.0 / 3937.0,
}
"""Vertical units that heights may come in; the names are those of the EPSG registry."""

Affine6 = tuple[float, float, float, float, float, float]
"""x = a col + b row + c, y = d col + e row + f, from (a, b, c, d, e, f); (0, 0) is the corner."""


@dataclass(frozen=True)
class Elevation:
    """Heights of the ground on a regular grid of any CRS.

    Parameters
    ----------
    heights : ndarray of float32, shape (rows, columns)
        Heights of the cell centres [m]; NaN where unknown.
    transform : tuple of six floats
        The affine map (a, b, c, d, e, f) from (column, row) to the CRS's x and y:
        x = a col + b row + c, y = d col + e row + f, with (0, 0) the outer corner.
    crs : pyproj.CRS
        The horizontal CRS, projected or geographic.
    filled : ndarray of bool, optional
        True where a void was filled by interpolation.
    warnings : tuple of str
        What the reader had to assume.

    Raises
    ------
    InputError
        Fewer than two rows or columns, no finite height, a degenerate transform, or a
        CRS that is neither projected nor geographic.
    """

    heights: NDArray[np.float32]
    transform: Affine6
    crs: CRS
    filled: NDArray[np.bool_] | None = None
    warnings: tuple[str, ...] = field(default=())

    def __post_init__(self) -> None:
        """Refuse what cannot be a piece of ground."""
        if self.heights.ndim != 2 or min(self.heights.shape) < 2:
            raise InputError(
                f"an elevation model needs at least 2 rows and 2 columns, got {self.heights.shape}"
            )
        if len(self.transform) != 6:
            raise InputError(
                f"the transform must be six numbers (a, b, c, d, e, f); got {self.transform!r}"
            )
        if not isinstance(self.crs, CRS):
            raise InputError(
                f"the CRS must be a pyproj.CRS, not {self.crs!r}: Elevation.from_array takes others"
            )
        a, b, c, d, e, f = self.transform
        if not np.all(np.isfinite([a, b, c, d, e, f])) or a * e - b * d == 0.0:
            raise InputError("the raster's transform is degenerate: its cells have no area")
        if not np.isfinite(self.heights).any():
            raise InputError("every cell is void: there is no height to work with")
        if not (self.crs.is_projected or self.crs.is_geographic):
            raise InputError(
                f"the CRS '{self.crs.name}' is neither projected nor geographic, so true north"
                " is unknown: assign the raster's real CRS"
            )

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns."""
        rows, columns = self.heights.shape
        return rows, columns

    @classmethod
    def from_array(
        cls,
        heights: NDArray[Any],
        transform: Affine6,
        crs: Any,
        *,
        vertical_unit: str = "metre",
    ) -> Elevation:
        """Build an elevation model from an array in memory.

        Parameters
        ----------
        heights : array_like, shape (rows, columns)
            Heights in `vertical_unit`; NaN (or a masked entry) where unknown.
        transform : tuple of six floats, or an object with that many items
            See `Elevation`; the first six items of an ``affine.Affine`` fit.
        crs : anything that ``pyproj.CRS.from_user_input`` takes
            The CRS of x and y.
        vertical_unit : {'metre', 'foot', 'US survey foot'}
            Unit of the heights given.

        Returns
        -------
        Elevation

        Raises
        ------
        SettingError
            An unknown vertical unit.
        InputError
            See `Elevation`; also a CRS that pyproj does not understand.

        Examples
        --------
        >>> import numpy as np
        >>> slab = np.add.outer(np.arange(3.0), np.zeros(4))
        >>> Elevation.from_array(slab, (30, 0, 5e5, 0, -30, 5.2e6), "EPSG:32632").shape
        (3, 4)
        """
        if vertical_unit not in METRES_PER_UNIT:
            known = ", ".join(METRES_PER_UNIT)
            raise SettingError(f"vertical unit '{vertical_unit}' is not one of: {known}")
        try:
            known_crs = CRS.from_user_input(crs)
        except CRSError as error:
            raise InputError(f"the CRS cannot be understood: {error}") from error
        try:
            metres = np.ma.filled(np.ma.asarray(heights, dtype=np.float64), np.nan)
        except (TypeError, ValueError) as error:
            raise InputError(f"the heights are not an array of numbers ({error})") from None
        metres = metres * METRES_PER_UNIT[vertical_unit]
        metres[~np.isfinite(metres)] = np.nan
        try:
            a, b, c, d, e, f = (float(v) for v in tuple(transform)[:6])
        except (TypeError, ValueError):
            raise InputError(
                f"the transform must be six numbers (a, b, c, d, e, f); got {transform!r}"
            ) from None
        return cls(np.ascontiguousarray(metres, np.float32), (a, b, c, d, e, f), known_crs)

    @classmethod
    def from_xarray(cls, data: Any, crs: Any, *, vertical_unit: str = "metre") -> Elevation:
        """Build an elevation model from a labelled array with coordinates.

        Parameters
        ----------
        data : xarray.DataArray, two dimensions, rows first
            Heights; its two dimensions carry evenly spaced coordinates of cell centres: the
            CRS's y along the first, its x along the second, rising or falling.
        crs : anything that ``pyproj.CRS.from_user_input`` takes
            The CRS of the coordinates.
        vertical_unit : {'metre', 'foot', 'US survey foot'}
            Unit of the heights given.

        Returns
        -------
        Elevation

        Raises
        ------
        InputError
            Not two dimensions, or coordinates missing or not evenly spaced; else as
            `from_array`.
        SettingError
            An unknown vertical unit.

        Examples
        --------
        >>> import numpy as np, xarray as xr
        >>> axes = {"y": 5.2e6 - 30.0 * np.arange(3), "x": 5e5 + 30.0 * np.arange(4)}
        >>> heights = xr.DataArray(np.zeros((3, 4)), axes, ("y", "x"))
        >>> Elevation.from_xarray(heights, "EPSG:32632").transform
        (30.0, 0.0, 499985.0, 0.0, -30.0, 5200015.0)
        """
        if len(data.dims) != 2:
            raise InputError(f"an elevation model has two dimensions, not {len(data.dims)}")
        spacing = []
        for name in data.dims:
            places = np.asarray(data.coords[name].values if name in data.coords else [], float)
            steps = np.diff(places)
            if steps.size == 0 or not np.ptp(steps) < 1e-3 * abs(steps[0]):
                raise InputError(f"dimension '{name}' has no evenly spaced coordinates")
            step = (places[-1] - places[0]) / steps.size
            spacing.append((float(step), float(places[0] - step / 2.0)))
        (down, top), (across, left) = spacing
        transform = (across, 0.0, left, 0.0, down, top)
        return cls.from_array(data.values, transform, crs, vertical_unit=vertical_unit)
