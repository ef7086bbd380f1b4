"""Shaded relief under colour: arrays in, a picture's red, green and blue out."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from terrasol.show.picture import Picture

LIGHTS = ((315.0, 0.55), (270.0, 0.15), (0.0, 0.15), (225.0, 0.15))
"""Where light comes from on the paper, clockwise from its upper edge [degrees], and how much.
From the upper left, as most readers see hills and not hollows, softened from both sides."""

LIGHT_HEIGHT = 45.0
"""Height of those lights [degrees]."""

CONTRAST = 2.0
"""Change of the picture's brightness by that of the lit ground, before it levels off."""

STEEP = 0.55
"""Tangent that the steeper tenth of the ground is drawn with: low hills are drawn higher and
high mountains lower, so that either has form."""

EXAGGERATION = (0.3, 8.0)
"""Least and greatest stretch of the heights."""

RELIEF = 0.03
"""The most that the light adds to, or takes from, red, green and blue alike. A colour must still
read off the colour bar: the brightest and the dullest slope of one value differ by less than a
tenth of the bar's lightness."""

VOID_GREY = (0.82, 0.82, 0.80)
VOID_LINE = (0.64, 0.64, 0.62)
OTHER_GREY = (0.90, 0.93, 0.96)
OTHER_LINE = (0.42, 0.58, 0.74)
VOID_SPACING = 9
"""Void ground: grey with diagonal lines this many pixels apart."""


def shade(heights: NDArray[np.float32], jacobian: NDArray[np.float64]) -> NDArray[np.float32]:
    """Brightness of the ground under light from the upper left.

    Parameters
    ----------
    heights : ndarray of float32, shape (rows, columns)
        Heights [m], void NaN.
    jacobian : ndarray of float64, shape (2, 2)
        See `terrasol.show.picture.Picture`.

    Returns
    -------
    ndarray of float32, shape (rows, columns)
        0 dullest, 0.5 flat or void, 1 brightest.
    """
    by_cell = np.stack([_difference(heights, 1), _difference(heights, 0)])
    right, up = np.tensordot(np.linalg.inv(jacobian).T.astype(np.float32), by_cell, axes=1)
    few = tuple(slice(None, None, max(1, size // 400)) for size in heights.shape)
    steepness = np.hypot(right[few], up[few])
    steep = float(np.percentile(steepness[steepness > 0], 90)) if steepness.any() else STEEP
    stretch = np.float32(np.clip(STEEP / steep, *EXAGGERATION))
    right, up = right * stretch, up * stretch
    rise = math.tan(math.radians(LIGHT_HEIGHT))
    length = np.sqrt(1 + right**2 + up**2)
    bright = np.zeros_like(length)
    for azimuth, share in LIGHTS:
        x, y = math.sin(math.radians(azimuth)), math.cos(math.radians(azimuth))
        bright += np.float32(share) * np.maximum(1 - (x * right + y * up) / rise, 0) / length
    return 0.5 + 0.5 * np.tanh(CONTRAST * (bright - 1))


def _difference(heights: NDArray[np.float32], axis: int) -> NDArray[np.float32]:
    """Rise by cell along an axis: of both sides, of one at a rim, none beside voids."""
    step = np.diff(heights, axis=axis)
    known = np.isfinite(step)
    step = np.where(known, step, np.float32(0.0))
    nil = np.zeros_like(np.take(step, [0], axis=axis))
    behind, ahead = (np.concatenate(pair, axis=axis) for pair in ((nil, step), (step, nil)))
    none = nil.astype(bool)
    sides = np.concatenate((none, known), axis=axis).astype(np.float32)
    sides += np.concatenate((known, none), axis=axis)
    return np.asarray((behind + ahead) / np.maximum(sides, 1), np.float32)


def paint(
    picture: Picture,
    colours: NDArray[np.float32],
    brightness: NDArray[np.float32],
    void: NDArray[np.bool_],
    paper: tuple[float, float, float],
) -> NDArray[np.float32]:
    """Shade the colours lightly; hatch the voids; leave paper beside the raster.

    Parameters
    ----------
    picture : Picture
    colours : ndarray of float32, shape (height, width, 3)
        Colour of the ground.
    brightness : ndarray of float32, shape (height, width)
        See `shade`; 0.5 leaves a colour as the colour bar has it.
    void : ndarray of bool, shape (height, width)
        Ground without a value.
    paper : tuple of float
        Colour of the page.

    Returns
    -------
    ndarray of float32, shape (height, width, 3)
    """
    light = np.where(np.isfinite(brightness), brightness, np.float32(0.5))[..., None]
    image = colours + (2 * light - 1) * np.float32(RELIEF)
    image[void] = hatch(picture.shape)[void]
    image[~picture.ground] = paper
    return np.clip(image, 0, 1)


def hatch(shape: tuple[int, int], other: bool = False) -> NDArray[np.float32]:
    """The void pattern, shape (height, width, 3), or the other: blue lines that fall."""
    y, x = np.ogrid[0 : shape[0], 0 : shape[1]]
    line = (((x - y if other else x + y) % VOID_SPACING) < 2)[..., None]
    pair = (OTHER_LINE, OTHER_GREY) if other else (VOID_LINE, VOID_GREY)
    return np.where(line, *pair).astype(np.float32)
