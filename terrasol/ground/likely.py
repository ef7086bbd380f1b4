"""What the ground may be like, given a model of it and the model's error."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.fft import fft2, fftfreq, ifft2
from scipy.ndimage import distance_transform_edt

from terrasol.ground.uncertainty import DemError, error_fields

TILE: Final = 32
"""Cells along a tile, over which ground and error are told apart. Tiles overlap by half. With 64,
parcels where a plain meets slopes came out worse and others alike; with 16, cells came out worse
(measured on made relief and the sample valley when it was chosen)."""

LEAST_SHARE: Final = 0.1
"""Least share of ground in the roughness of any wavelength. Where a model is smoother than its
stated error, nothing of it would be believed and no doubt be left; with this, at least a third
(the root) of the error's own roughness stays in doubt (judgement, no source)."""

FINE: Final = TILE // 4
"""Waves in a tile from which they are fine: a quarter of them, of 4 cells and less."""

TOO_SMOOTH: Final = 0.6
"""A model whose fine roughness is less than this share of its stated error's contradicts it. Ground
adds to the error's roughness, so that the share is 1 or more; what a tile shows of it scatters by
8 % (judgement, no source)."""


@dataclass(frozen=True)
class Sieve:
    """Tells ground from error, by place and wavelength.

    Parameters
    ----------
    shape : tuple of int
        Rows and columns of the model.
    shares : ndarray of float32, shape (tile rows, tile columns, rings)
        Share of ground in the model's variance, tile by tile and by number of waves in a tile.
    roughness : float
        Fine roughness of the model over that of its stated error, in the middle tile of all.
    """

    shape: tuple[int, int]
    shares: NDArray[np.float32]
    roughness: float

    @classmethod
    def of(
        cls, heights: NDArray[np.float32], error: DemError, cell_size: tuple[float, float]
    ) -> Sieve:
        """Compare the model's spectrum, tile by tile, with that of its error.

        Parameters
        ----------
        heights : ndarray of float32, shape (rows, columns)
            The model [m]; NaN where void.
        error : DemError
            Its error.
        cell_size : tuple of float
            Ground length of a column step and a row step [m].

        Returns
        -------
        Sieve

        Notes
        -----
        By Wiener (1949): of what a model shows at a wavelength, power P with the error's power E
        in it, the share 1 - E / P is ground. P is the mean over all directions. Tiles that reach
        beyond the raster take the shares of the nearest one that does not: what is mirrored at
        the rim is rougher than the ground.
        """
        expected = _error_power(error, cell_size)
        members = np.bincount(_RINGS.ravel())
        shares, fine = [], []
        padded = _padded(_without_voids(heights), odd=True)
        for tiles in _rows_of_tiles(padded):
            power = np.abs(fft2(_WINDOW * (tiles - _planes(tiles)))) ** 2 / expected
            by_ring = np.stack([np.bincount(_RINGS.ravel(), p.ravel()) for p in power]) / members
            shares.append(np.maximum(1.0 - 1.0 / np.maximum(by_ring, 1e-9), LEAST_SHARE))
            fine.append(power[:, _RINGS >= FINE].mean(axis=1))
        rows, columns = heights.shape
        whole = np.ix_(_whole_tiles(rows, len(fine)), _whole_tiles(columns, len(fine[0])))
        found = np.array(shares, np.float32)[whole]
        found[..., 0] = 1.0
        return cls((rows, columns), found, float(np.median(np.array(fine)[whole])))

    def ground(self, heights: NDArray[np.float32]) -> NDArray[np.float64]:
        """The most likely ground: each tile's waves by their share [m]; voids filled."""
        padded = _padded(_without_voids(heights), odd=True)
        return self._sieved(padded, self.shares, keep_plane=True)

    def doubt(self, field: NDArray[np.float32]) -> NDArray[np.float64]:
        """What of an error field is left in doubt: its waves by the root of their share [m]."""
        return self._sieved(_padded(field, odd=False), np.sqrt(self.shares), keep_plane=False)

    def _sieved(
        self, padded: NDArray[np.float64], gains: NDArray[np.float32], keep_plane: bool
    ) -> NDArray[np.float64]:
        """Multiply the waves of overlapping tiles, and put the tiles together again."""
        out = np.zeros(padded.shape)
        half = TILE // 2
        for row, (tiles, gain) in enumerate(zip(_rows_of_tiles(padded), gains, strict=True)):
            plane = _planes(tiles) if keep_plane else 0.0
            waves = ifft2(fft2(_WINDOW * (tiles - plane)) * gain[:, _RINGS]).real
            for column, tile in enumerate(_WINDOW * (waves + _WINDOW * plane)):
                out[row * half : row * half + TILE, column * half : column * half + TILE] += tile
        return out[half : half + self.shape[0], half : half + self.shape[1]]


def likely_heights(
    heights: NDArray[np.float32], error: DemError, cell_size: tuple[float, float]
) -> Iterator[NDArray[np.float32]]:
    """Draw grounds that a model may be the erroneous picture of.

    Parameters
    ----------
    heights : ndarray of float32, shape (rows, columns)
        The model [m]; NaN where void.
    error : DemError
        Its error and the draw.
    cell_size : tuple of float
        Ground length of a column step and a row step [m].

    Yields
    ------
    ndarray of float32, shape (rows, columns)
        Heights [m]; void where the model is.

    Raises
    ------
    SettingError
        See `error_fields`.

    Notes
    -----
    The model is ground and error. Adding another error makes it rougher, and steeper on average,
    than it is, and the ground is smoother than either. So the most likely ground is taken, by
    a Wiener filter fitted to each tile, and what the filter leaves in doubt is drawn: Gaussian
    waves of the power G E / (G + E), for a ground's power G and an error's E. For ground that is
    Gaussian and alike within a tile, these are draws from its distribution given the model
    (conditional simulation).
    """
    sieve = Sieve.of(heights, error, cell_size)
    ground = sieve.ground(heights)
    ground[np.isnan(heights)] = np.nan
    for field in error_fields(error, sieve.shape, cell_size):
        yield (ground + sieve.doubt(field)).astype(np.float32)


def too_smooth(
    heights: NDArray[np.float32], error: DemError, cell_size: tuple[float, float]
) -> str | None:
    """Say so where a model is smoother than its stated error could leave it.

    Parameters
    ----------
    heights, error, cell_size
        See `likely_heights`.

    Returns
    -------
    str or None
        A sentence for people.
    """
    roughness = Sieve.of(heights, error, cell_size).roughness
    if roughness >= TOO_SMOOTH:
        return None
    return (
        f"over a few cells the elevation model is smoother ({np.sqrt(roughness):.2g} times as"
        f" rough) than a {error.words(cell_size)} alone would make it, so that what is told of"
        " errors is not to be trusted: state a smaller RMSE or a longer range"
    )


def _window() -> NDArray[np.float64]:
    """Weights of a tile's cells; their squares sum to 1 where tiles overlap by half."""
    sine = np.sin(np.pi * (np.arange(TILE) + 0.5) / TILE)
    return np.outer(sine, sine)


def _rings() -> NDArray[np.int64]:
    """Whole waves in a tile, in any direction, of each of its transform's numbers."""
    waves = TILE * fftfreq(TILE)
    return np.rint(np.hypot(waves[:, None], waves)).astype(np.int64)


_WINDOW: Final = _window()
_RINGS: Final = _rings()


def _error_power(error: DemError, cell_size: tuple[float, float]) -> NDArray[np.float64]:
    """Expected power of a tile of error under the window."""
    across, down = cell_size
    lags = 2 * TILE * np.abs(fftfreq(2 * TILE))
    overlap = ifft2(np.abs(fft2(_WINDOW, (2 * TILE, 2 * TILE))) ** 2).real
    distance = np.hypot(down * lags[:, None], across * lags)
    covariance = error.rmse**2 * error.correlation(distance, cell_size)
    return np.maximum(fft2(covariance * overlap).real[::2, ::2], 1e-30)


def _without_voids(heights: NDArray[np.float32]) -> NDArray[np.float32]:
    """Voids take the nearest height."""
    void = np.isnan(heights)
    if not void.any():
        return heights
    nearest = distance_transform_edt(void, return_distances=False, return_indices=True)
    return heights[tuple(nearest)]


def _padded(field: NDArray[np.float32], *, odd: bool) -> NDArray[np.float64]:
    """Continue a field beyond its rims, mirrored, to whole tiles with half a tile around.

    `odd` mirrors through the rim's cells, so that slopes go on; else the field itself is mirrored.
    """
    half = TILE // 2
    sides = [(half, half + (-size) % half) for size in field.shape]
    plain = field.astype(np.float64)
    if odd:
        return np.pad(plain, sides, mode="reflect", reflect_type="odd")
    return np.pad(plain, sides, mode="reflect")


def _whole_tiles(size: int, count: int) -> NDArray[np.int64]:
    """For each of the tiles along a side of so many cells, the nearest that lies on the raster.

    Tiles start half a tile before the first cell. On a side shorter than a tile none does; the one
    that starts with it comes closest.
    """
    return np.clip(np.arange(count), 1, max(2 * size // TILE - 1, 1))


def _rows_of_tiles(padded: NDArray[np.float64]) -> Iterator[NDArray[np.float64]]:
    """Tiles, half a tile apart, shape (tile columns, TILE, TILE), row by row."""
    half = TILE // 2
    for row in range(0, padded.shape[0] - TILE + 1, half):
        strip = padded[row : row + TILE]
        views = np.lib.stride_tricks.sliding_window_view(strip, TILE, axis=1)[:, ::half]
        yield np.ascontiguousarray(np.moveaxis(views, 1, 0))


def _planes(tiles: NDArray[np.float64]) -> NDArray[np.float64]:
    """Plane of best fit of each tile."""
    along = np.arange(TILE) - (TILE - 1) / 2
    scale = TILE * np.sum(along**2)
    down = np.einsum("tij,i->t", tiles, along) / scale
    across = np.einsum("tij,j->t", tiles, along) / scale
    mean = tiles.mean(axis=(1, 2))
    return (
        mean[:, None, None] + down[:, None, None] * along[:, None] + across[:, None, None] * along
    )
