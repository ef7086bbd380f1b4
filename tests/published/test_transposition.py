"""Light on a tilted plane against print: Duffie and Beckman, and the table of Perez et al."""

import numpy as np
import pytest
from pvlib import irradiance
from reference.plain_plane import plane_diffuse, plane_ground

from terrasol.sky.diffuse import (
    PEREZ_CLEARNESS_EDGES,
    PEREZ_COEFFICIENTS,
    DiffuseSplit,
    split_diffuse,
)
from terrasol.sky.irradiance import Irradiance
from terrasol.sky.period import parse_period
from terrasol.sky.sun import SunSeries, horizontal_position, incidence_cosine, sun_path

MJ_PER_HOUR = 1e6 / 3600.0  # W/m2 of 1 MJ/m2 in an hour


def test_perez_table():
    """Perez et al. (1990), Solar Energy 44, 271-289, Tables 1 and 6: first and last row
    as printed, all of it as pvlib has it.
    """
    assert PEREZ_COEFFICIENTS[0] == (-0.008, 0.588, -0.062, -0.060, 0.072, -0.022)
    assert PEREZ_COEFFICIENTS[-1] == (0.678, -0.327, -0.250, 0.156, -1.377, 0.251)
    assert PEREZ_CLEARNESS_EDGES == (1.065, 1.23, 1.5, 1.95, 2.8, 4.5, 6.2)
    f1, f2 = irradiance._get_perez_coefficients("allsitescomposite1990")
    np.testing.assert_array_equal(np.array(PEREZ_COEFFICIENTS), np.hstack([f1, f2]))


class Example2151:
    """Duffie and Beckman (2013), Ex. 2.15.1: 40 N, 20 February, 9 to 10 h solar, 60 degrees
    south, I 1.04 MJ/m2, Id 0.796, ground 0.60; declination -11.58.
    """

    elevation, azimuth = horizontal_position(-11.58, -37.5, 40.0)
    sine = np.sin(np.radians(elevation))
    cosine = incidence_cosine(elevation, azimuth, 60.0, 180.0)
    diffuse = 0.796
    beam = 1.04 - 0.796

    @classmethod
    def sun(cls):
        return SunSeries(
            latitude=40.0,
            longitude=0.0,
            step_seconds=3600.0,
            time=np.array(["2025-02-20T09:30"], "M8[ns]"),
            month=np.zeros(1, np.int16),
            elevation=np.atleast_1d(cls.elevation),
            azimuth=np.atleast_1d(cls.azimuth),
            distance=np.array([(1.0 + 0.033 * np.cos(2.0 * np.pi * 51 / 365)) ** -0.5]),
        )

    @classmethod
    def sky(cls):
        return Irradiance(
            beam_normal=np.atleast_1d(cls.beam / cls.sine) * MJ_PER_HOUR,
            diffuse_horizontal=np.array([cls.diffuse]) * MJ_PER_HOUR,
            extraterrestrial_normal=1367.0 / cls.sun().distance ** 2,
        )

    @classmethod
    def total(cls, model):
        split = split_diffuse(model, cls.sun(), cls.sky())
        sky = plane_diffuse(split, cls.cosine, 60.0)[0] / MJ_PER_HOUR
        ground = plane_ground(1.04, 60.0, 0.60)
        return cls.beam * cls.cosine / cls.sine + sky + ground


def test_example_2_15_1_geometry():
    """Zenith 62.20, incidence 36.97, Rb 1.714; hourly I0 2.335 (recomputed)."""
    example = Example2151
    assert 90.0 - example.elevation == pytest.approx(62.20, abs=0.01)
    assert np.degrees(np.arccos(example.cosine)) == pytest.approx(36.97, abs=0.01)
    assert example.cosine / example.sine == pytest.approx(1.714, abs=0.001)
    hour, _ = horizontal_position(-11.58, np.linspace(-45.0, -30.0, 2001), 40.0)
    above = np.mean(np.sin(np.radians(hour))) * example.sky().extraterrestrial_normal[0]
    assert above / MJ_PER_HOUR == pytest.approx(2.335, abs=0.003)


def test_example_2_15_1_isotropic():
    """IT 1.171 MJ/m2: beam 0.418, diffuse 0.597, ground 0.156."""
    example = Example2151
    assert example.beam * example.cosine / example.sine == pytest.approx(0.418, abs=0.0005)
    split = split_diffuse("isotropic", example.sun(), example.sky())
    sky = plane_diffuse(split, example.cosine, 60.0)[0] / MJ_PER_HOUR
    assert sky == pytest.approx(0.597, abs=0.0005)
    assert plane_ground(1.04, 60.0, 0.60) == pytest.approx(0.156, abs=0.0005)
    assert example.total("isotropic") == pytest.approx(1.171, abs=0.001)


def test_example_2_16_hay_davies():
    """The same hour by Hay and Davies: 1.251 MJ/m2 (recomputed, no print seen)."""
    assert Example2151.total("hay-davies") == pytest.approx(1.251, abs=0.001)


def test_example_2_16_2_perez():
    """The same hour by Perez: 1.370 MJ/m2; dome 0.4445, ring 0.3485, horizon 0.0035
    (recomputed, no print seen).
    """
    example = Example2151
    split = split_diffuse("perez", example.sun(), example.sky())
    dome = split.isotropic[0] * 0.75 / MJ_PER_HOUR
    ring = split.circumsolar_normal[0] * example.cosine / MJ_PER_HOUR
    band = split.horizon_band[0] * np.sin(np.radians(60.0)) / MJ_PER_HOUR
    assert dome == pytest.approx(0.4445, abs=0.001)
    assert ring == pytest.approx(0.3485, abs=0.001)
    assert band == pytest.approx(0.0035, abs=0.001)
    assert example.total("perez") == pytest.approx(1.370, abs=0.001)


# Duffie and Beckman (2013), Ex. 2.19.1: Madison, 43 N, 60 degrees south, isotropic, MJ/m2 a day.
MADISON_LEVEL = (6.44, 9.89, 12.86, 16.05, 21.36, 23.04, 22.58, 20.33, 14.59, 10.48, 6.37, 5.74)
MADISON_ABOVE = (
    *(13.37, 18.81, 26.03, 33.78, 39.42, 41.78),
    *(40.56, 35.92, 28.80, 20.90, 14.62, 11.91),
)
MADISON_GROUND = (0.7, 0.7, 0.4, *(0.2,) * 8, 0.4)
MADISON_PLANE = (13.7, 17.2, 15.8, 14.7, 16.6, 16.5, 16.8, 17.5, 15.6, 15.2, 11.4, 12.7)
KLEIN_DAYS = (17, 47, 75, 105, 135, 162, 198, 228, 258, 288, 318, 344)


def erbs_monthly(clearness, sunset_hour_angle):
    """Erbs, Klein and Duffie (1982): monthly diffuse share of the level total."""
    k = clearness
    if sunset_hour_angle <= 81.4:
        return 1.391 - 3.560 * k + 4.189 * k**2 - 2.137 * k**3
    return 1.311 - 3.022 * k + 3.427 * k**2 - 1.821 * k**3


def madison_month(month, declination, hour_angle, normal):
    """H0 and HT of a month from one day's sun, MJ/m2 a day (D&B eq. 2.19.1)."""
    elevation, azimuth = horizontal_position(declination, hour_angle, 43.0)
    up = elevation > 0.0
    level = (normal * np.sin(np.radians(elevation)))[up]
    cosine = incidence_cosine(elevation, azimuth, 60.0, 180.0)
    tilted = (normal * np.maximum(cosine, 0.0))[up]
    above = level.sum() * 60.0 / 1e6
    total = MADISON_LEVEL[month]
    sunset = np.abs(hour_angle[up]).max()
    diffuse = total * erbs_monthly(total / above, sunset)
    beam = (total - diffuse) * tilted.sum() / level.sum()
    sky = plane_diffuse(DiffuseSplit(np.array(diffuse), np.zeros(()), np.zeros(())), 0.0, 60.0)
    return above, beam + sky + plane_ground(total, 60.0, MADISON_GROUND[month])


@pytest.mark.parametrize("month", range(12))
def test_example_2_19_1_by_the_prints_sun(month):
    """H0 to 0.02 and HT to the tolerance of 0.1 (all within 0.05) with Cooper's declination."""
    day = KLEIN_DAYS[month]
    declination = np.full(1440, 23.45 * np.sin(2.0 * np.pi * (284 + day) / 365.0))
    normal = np.full(1440, 1367.0 * (1.0 + 0.033 * np.cos(2.0 * np.pi * day / 365.0)))
    hour_angle = (np.arange(1440) + 0.5) / 4.0 - 180.0
    above, plane = madison_month(month, declination, hour_angle, normal)
    assert above == pytest.approx(MADISON_ABOVE[month], abs=0.02)
    assert plane == pytest.approx(MADISON_PLANE[month], abs=0.1)


@pytest.mark.parametrize("month", [4, 5, 6, 7, 11])
def test_example_2_19_1_by_the_exact_sun(month):
    """HT within 0.1 in the months when Cooper's declination is near the truth.

    A finding: in the others the exact sun of the mean day, up to 0.9 degree higher, brings
    HT 0.2 to 0.9 MJ/m2 below the print (October most).
    """
    day = np.datetime64("2025-01-01") + (KLEIN_DAYS[month] - 1)
    path = sun_path(parse_period(str(day)), -89.4)
    _, plane = madison_month(month, path.declination, path.hour_angle, 1367.0 / path.distance**2)
    assert plane == pytest.approx(MADISON_PLANE[month], abs=0.1)
