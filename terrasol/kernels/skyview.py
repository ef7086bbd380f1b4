"""Sky-view factor and the open part of the horizon band."""

from __future__ import annotations

import numpy as np
from numba import njit

FAST = {"contract", "reassoc", "nsz", "arcp"}


@njit(cache=True, nogil=True, error_model="numpy", fastmath=FAST)
def sky_view(horizon, normal, first_row, directions, band_tangent, view, band):
    """Share of the sky seen by the slope (Dozier and Frew 1990), and of the horizon band.

    Per azimuth, with S the slope and H the horizon's angle from the zenith, not below the
    level and not below the slope's own plane:
    cos S sin^2 H + sin S cos(azimuth - aspect) (H - sin H cos H).

    horizon : (azimuths, rows, columns) float32, tangents >= 0
    normal : (3, block rows, columns) float32
    directions : (azimuths, 2) float32, sine and cosine of the azimuths
    band_tangent : tangent of the top of the horizon band
    view, band : (rows, columns) float32, out; band is the light of a horizon band of unit
        irradiance on a wall, sin S for an open slope
    """
    azimuths, rows, columns = horizon.shape
    share = np.float32(1.0 / azimuths)
    ring = np.float32(np.pi / azimuths)
    half_pi = np.float32(np.pi / 2)
    inverse_band = np.float32(1.0 / band_tangent)
    one = np.float32(1.0)
    zero = np.float32(0.0)
    for r in range(rows):
        east = normal[0, first_row + r]
        north = normal[1, first_row + r]
        up = normal[2, first_row + r]
        total = view[r]
        low = band[r]
        for c in range(columns):
            total[c] = zero
            low[c] = zero
        for a in range(azimuths):
            sine = directions[a, 0]
            cosine = directions[a, 1]
            rim = horizon[a, r]
            for c in range(columns):
                towards = east[c] * sine + north[c] * cosine
                plane = -towards / up[c]
                t = rim[c] if rim[c] > plane else plane
                square = one / (one + t * t)
                sine_h = np.sqrt(square)
                cosine_h = t * sine_h
                # arc cosine, Abramowitz and Stegun (1964) 4.4.45, |error| < 7e-5
                x = cosine_h
                angle = np.sqrt(one - x) * (
                    np.float32(1.5707288)
                    + x
                    * (
                        np.float32(-0.2121144)
                        + x * (np.float32(0.0742610) + x * np.float32(-0.0187293))
                    )
                )
                angle = angle if x > zero else half_pi
                total[c] += share * (up[c] * square + towards * (angle - sine_h * cosine_h))
                part = one - rim[c] * inverse_band
                part = part if part > zero else zero
                low[c] += ring * (towards if towards > zero else zero) * part
        for c in range(columns):  # rounding and the arc cosine must not open more than a dome
            total[c] = one if total[c] > one else total[c]
