"""Light on a tilted plane with nothing in its view but sky and an endless level plain."""

import numpy as np


def plane_diffuse(split, incidence_cosine, slope):
    """Diffuse irradiance from the sky on a plane [W/m2 of the plane].

    isotropic (1 + cos s) / 2 + ring max(cos i, 0) + horizon band sin s, never below 0, for a
    split of diffuse light, the cosine of the sun's incidence and a slope in degrees.
    """
    slope = np.radians(slope)
    dome = split.isotropic * (1.0 + np.cos(slope)) / 2.0
    ring = split.circumsolar_normal * np.maximum(incidence_cosine, 0.0)
    return np.maximum(dome + ring + split.horizon_band * np.sin(slope), 0.0)


def plane_ground(global_horizontal, slope, albedo):
    """Irradiance that the plain reflects onto a plane [W/m2]: albedo G (1 - cos s) / 2."""
    return np.multiply(global_horizontal, albedo) * (1.0 - np.cos(np.radians(slope))) / 2.0
