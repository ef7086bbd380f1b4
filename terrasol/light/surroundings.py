"""Light that the terrain around throws back."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

from terrasol.constants import SURROUNDINGS_SCALE


@dataclass(frozen=True)
class Surroundings:
    """What the terrain around receives, on a coarse lattice, for the light it throws back.

    Parameters
    ----------
    received : ndarray of float32, shape (months, node rows, node columns)
        Mean irradiation of the terrain around, bounces included [MJ m-2]; where the albedo is
        mapped, what it sends back.
    stride : int
        Cells between nodes; the first node lies at cell `stride // 2`.
    albedo : ndarray of float32, shape (months,)
        Share of `received` that is sent back: the albedo, or 1 where that is mapped.
    """

    received: NDArray[np.float32]
    stride: int
    albedo: NDArray[np.float32]

    @classmethod
    def of(
        cls,
        samples: NDArray[np.float32],
        stride: int,
        cell_size: tuple[float, float],
        albedo: NDArray[np.float64],
    ) -> Surroundings:
        """Spread samples over the surroundings, and count the bounces between slopes.

        The terrain around sends back albedo times all that it gets, part of which is again
        reflected light: received = from the sky / (1 - albedo x mean terrain view), or, with an
        albedo a for each cell, sent back = <a x from the sky> / (1 - <a x terrain view>).

        Parameters
        ----------
        samples : ndarray of float32, shape (months + 1, node rows, node columns)
            What single cells receive from the sky itself, month by month [MJ m-2], and last
            their terrain view; NaN where void.
        stride : int
            Cells between samples.
        cell_size : tuple of float
            Of a column step and a row step [m].
        albedo : ndarray, shape (months,) or (months, node rows, node columns)
            Of the ground, where the samples are.
        """
        sigma = [SURROUNDINGS_SCALE / (stride * size) for size in cell_size[::-1]]
        known = np.isfinite(samples).all(axis=0)
        weight = gaussian_filter(known.astype(np.float64), sigma, mode="constant")
        weight = np.where(weight > 1e-12, weight, np.inf)

        def spread(layer: NDArray[Any]) -> NDArray[np.float64]:
            filled = np.where(known, layer, 0.0).astype(np.float64)
            return gaussian_filter(filled, sigma, mode="constant") / weight

        if albedo.ndim == 1:
            view = spread(samples[-1])
            received = np.stack(
                [spread(s) / (1.0 - a * view) for s, a in zip(samples[:-1], albedo, strict=True)]
            )
            shares = albedo
        else:
            received = np.stack(
                [
                    spread(a * s) / (1.0 - spread(a * samples[-1]))
                    for s, a in zip(samples[:-1], albedo, strict=True)
                ]
            )
            shares = np.ones(len(albedo))
        return cls(np.ascontiguousarray(received, np.float32), stride, shares.astype(np.float32))

    @classmethod
    def none(cls, months: int) -> Surroundings:
        """No light from the terrain."""
        return cls(np.zeros((months, 1, 1), np.float32), 1, np.zeros(months, np.float32))

    def node(self, row: int, column: int) -> NDArray[np.float64]:
        """Where a cell lies, in node units."""
        offset = self.stride // 2
        return np.array([(row - offset) / self.stride, (column - offset) / self.stride])
