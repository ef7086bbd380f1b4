"""Sky view and horizon band against the same sums with numpy's own arc cosine."""

import numpy as np
import pytest

from terrasol.kernels.skyview import sky_view


def seen(horizon, normal, first_row=0, band_tangent=0.1):
    """Call the kernel with float32 copies."""
    azimuths, rows, columns = horizon.shape
    turn = 2.0 * np.pi * np.arange(azimuths) / azimuths
    directions = np.stack([np.sin(turn), np.cos(turn)], axis=1).astype(np.float32)
    view, band = np.full((2, rows, columns), -1.0, np.float32)
    sky_view(
        horizon.astype(np.float32), normal.astype(np.float32), first_row, directions,
        band_tangent, view, band,
    )  # fmt: skip
    return view, band


def plain(horizon, normal, first_row=0, band_tangent=0.1):
    """Dozier and Frew (1990), doi:10.1109/36.58986, eq. 7b, as a mean over the azimuths.

    cos S sin^2 H + sin S cos(A - aspect) (H - sin H cos H), H from the zenith, the horizon not
    below the level nor the slope's own plane. Beside it the band's open part, linear in the
    tangent of what hides it, on a wall with the slope's normal.
    """
    azimuths, rows, columns = horizon.shape
    normal = normal[:, first_row : first_row + rows]
    view, band = np.zeros((2, rows, columns))
    slope = np.arccos(normal[2])
    aspect = np.arctan2(normal[0], normal[1])
    for a in range(azimuths):
        turn = np.cos(2.0 * np.pi * a / azimuths - aspect)
        plane = np.arctan(-np.tan(slope) * turn)
        up = np.maximum(np.maximum(np.arctan(horizon[a]), plane), 0.0)
        h = np.arccos(np.sin(up))
        part = np.sin(slope) * turn * (h - np.sin(h) * np.cos(h))
        view += (np.cos(slope) * np.sin(h) ** 2 + part) / azimuths
        band += np.sin(slope) * np.maximum(turn, 0.0) * np.maximum(1 - horizon[a] / band_tangent, 0)
    return view, band * np.pi / azimuths


def random_ground(shape, seed):
    dice = np.random.default_rng(seed)
    _, rows, columns = shape
    normal = np.concatenate(
        [dice.normal(0.0, 0.7, (2, rows, columns)), np.ones((1, rows, columns))]
    )
    normal /= np.linalg.norm(normal, axis=0)
    horizon = np.maximum(dice.normal(0.0, 0.5, shape), 0.0)
    horizon[:, 0, 0] = 0.0
    return horizon, normal


@pytest.mark.parametrize("azimuths", [8, 36, 64])
def test_agrees_with_the_plain_formula(azimuths):
    horizon, normal = random_ground((azimuths, 7, 19), azimuths)
    view, band = seen(horizon, normal)
    want_view, want_band = plain(horizon, normal)
    # the arc cosine's own bound, 7e-5 (Abramowitz and Stegun 1964, 4.4.45), times sin S
    room = 7e-5 * np.sqrt(1.0 - normal[2] ** 2) + 1e-6
    assert (np.abs(view - want_view) < room).all()
    np.testing.assert_allclose(band, want_band, atol=2e-6)
    assert want_band.max() > 0.1


def test_rows_are_counted_from_the_first_asked():
    horizon, normal = random_ground((8, 6, 5), 1)
    whole, whole_band = seen(horizon, normal)
    view, band = seen(horizon[:, 2:4], normal, first_row=2)
    np.testing.assert_array_equal(view, whole[2:4])
    np.testing.assert_array_equal(band, whole_band[2:4])


def test_band_of_open_slope_wall_and_hidden_wall():
    # sin S of an open slope: the integral of cos(A - aspect) over the half circle is 2
    slope = np.radians(np.array([0.0, 30.0, 90.0 - 1e-4]))
    normal = np.stack([np.sin(slope), 0.0 * slope, np.cos(slope)])[:, None]
    _, band = seen(np.zeros((64, 1, 3)), normal)
    np.testing.assert_allclose(band[0], np.sin(slope), atol=1e-3)
    _, half = seen(np.full((64, 1, 3), 0.05), normal)
    np.testing.assert_allclose(half, band / 2.0, atol=1e-6)
    _, none = seen(np.full((64, 1, 3), 0.11), normal)
    assert (none == 0.0).all()


def test_voids_have_no_sky_view():
    horizon, normal = random_ground((16, 4, 6), 2)
    normal[:, 1, 2] = np.nan
    view, _ = seen(horizon, normal)
    want = np.zeros((4, 6), bool)
    want[1, 2] = True
    np.testing.assert_array_equal(np.isnan(view), want)
