"""How the light of the sky is spread over it: dome, ring around the sun, horizon."""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrasol.errors import SettingError
from terrasol.sky.clear import relative_airmass
from terrasol.sky.irradiance import Irradiance
from terrasol.sky.sun import SunSeries

MODELS: Final = ("perez", "hay-davies", "isotropic")

PEREZ_CLEARNESS_EDGES: Final = (1.065, 1.230, 1.500, 1.950, 2.800, 4.500, 6.200)
"""Bounds between the eight bins of sky clearness. Perez et al. (1990), Table 1."""

PEREZ_COEFFICIENTS: Final = (
    (-0.008, 0.588, -0.062, -0.060, 0.072, -0.022),
    (0.130, 0.683, -0.151, -0.019, 0.066, -0.029),
    (0.330, 0.487, -0.221, 0.055, -0.064, -0.026),
    (0.568, 0.187, -0.295, 0.109, -0.152, -0.014),
    (0.873, -0.392, -0.362, 0.226, -0.462, 0.001),
    (1.132, -1.237, -0.412, 0.288, -0.823, 0.056),
    (1.060, -1.600, -0.359, 0.264, -1.127, 0.131),
    (0.678, -0.327, -0.250, 0.156, -1.377, 0.251),
)
"""F11 F12 F13 F21 F22 F23 for each clearness bin, overcast first. Perez, Ineichen, Seals,
Michalsky and Stewart (1990), Solar Energy 44, 271-289, Table 6 (all sites)."""

_KAPPA: Final = 1.041
"""Takes the zenith angle [radian] out of the clearness; Perez et al. (1990), eq. 1."""

_PEREZ_LOWEST_COSINE: Final = 0.087
"""cos(85 degrees), the floor of the circumsolar ratio; Perez et al. (1990), eq. 9."""

_HAY_LOWEST_COSINE: Final = 0.01745
"""cos(89 degrees), keeps the ratio of Hay and Davies finite at the horizon."""


@dataclass(frozen=True, eq=False)
class DiffuseSplit:
    """Diffuse irradiance by where in the sky it comes from, each (n,) float64 [W/m2].

    Attributes
    ----------
    isotropic
        From the uniform dome on open level ground; on other ground times the sky-view
        factor.
    circumsolar_normal
        From the ring around the sun on a plane that faces the sun: adds to the beam.
    horizon_band
        From the band along the horizon on an open vertical wall; on an open plane times
        sin(slope). Negative under thick cloud, when the horizon is darker than the dome.
    """

    isotropic: NDArray[np.float64]
    circumsolar_normal: NDArray[np.float64]
    horizon_band: NDArray[np.float64]


def split_diffuse(model: str, sun: SunSeries, sky: Irradiance) -> DiffuseSplit:
    """Split diffuse horizontal irradiance into dome, circumsolar ring and horizon band.

    Circumsolar light is put into the beam's direction as

    - perez: D F1 / max(0.087, sin e), with 0 <= F1 <= 1;
    - hay-davies: D (B / E0) / max(0.01745, sin e);
    - isotropic: 0;

    with D diffuse horizontal, B beam normal, E0 extraterrestrial normal irradiance and
    e the apparent elevation. The horizon band is D F2 (perez) or 0. Whatever the ring
    does not give to open level ground stays with the dome: isotropic = D - ring sin e.
    That is D (1 - F1) as published while the sun is above the floor, and unlike the
    published form it loses no energy below.

    Parameters
    ----------
    model : "perez", "hay-davies" or "isotropic"
    sun : SunSeries
    sky : Irradiance

    Returns
    -------
    DiffuseSplit

    Raises
    ------
    SettingError
        If the model is unknown.

    References
    ----------
    Perez, R. et al. (1990), Solar Energy 44, 271-289, doi:10.1016/0038-092X(90)90055-H.
    Hay, J. E. and Davies, J. A. (1980), Proc. First Canadian Solar Radiation Data
    Workshop, 59-72.
    """
    if model not in MODELS:
        raise SettingError(f"diffuse model {model!r} is unknown; use one of {', '.join(MODELS)}")
    diffuse = sky.diffuse_horizontal
    sine = np.maximum(np.sin(np.radians(sun.elevation)), 0.0)
    horizon = np.zeros_like(diffuse)
    if model == "perez":
        brightening, horizon_part = perez_brightening(
            sun.elevation, sky.beam_normal, diffuse, sky.extraterrestrial_normal
        )
        ring = diffuse * brightening / np.maximum(sine, _PEREZ_LOWEST_COSINE)
        horizon = diffuse * horizon_part
    elif model == "hay-davies":
        clarity = sky.beam_normal / sky.extraterrestrial_normal
        ring = diffuse * clarity / np.maximum(sine, _HAY_LOWEST_COSINE)
    else:
        ring = np.zeros_like(diffuse)
    return DiffuseSplit(diffuse - ring * sine, ring, horizon)


def perez_brightening(
    elevation: ArrayLike, beam_normal: ArrayLike, diffuse: ArrayLike, extraterrestrial: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Perez's coefficients of circumsolar (F1) and horizon (F2) brightening.

    With zenith angle z [radian], air mass m, clearness
    ((D + B) / D + 1.041 z^3) / (1 + 1.041 z^3) and brightness b = m D / E0:
    F1 = F11 + F12 b + F13 z and F2 = F21 + F22 b + F23 z, the six numbers taken from
    the row of the clearness. F1 is kept within 0 to 1; the paper names only the 0.

    Parameters
    ----------
    elevation : array_like
        Apparent elevation [degree].
    beam_normal, diffuse, extraterrestrial : array_like
        Irradiance [W/m2].

    Returns
    -------
    F1, F2 : ndarray
        Of no unit; both 0 where there is no diffuse light.
    """
    elevation, beam_normal, diffuse, extraterrestrial = (
        np.asarray(x, dtype=np.float64) for x in (elevation, beam_normal, diffuse, extraterrestrial)
    )
    lit = diffuse > 0.0
    zenith = np.radians(90.0 - elevation)
    cube = _KAPPA * zenith**3
    ratio = beam_normal / np.where(lit, diffuse, 1.0)
    clearness = (1.0 + ratio + cube) / (1.0 + cube)
    row = np.searchsorted(PEREZ_CLEARNESS_EDGES, clearness, side="right")
    f11, f12, f13, f21, f22, f23 = (column[row] for column in np.array(PEREZ_COEFFICIENTS).T)
    brightness = relative_airmass(elevation) * diffuse / extraterrestrial
    circumsolar = np.clip(f11 + f12 * brightness + f13 * zenith, 0.0, 1.0)
    horizon = f21 + f22 * brightness + f23 * zenith
    return circumsolar * lit, horizon * lit
