"""Air that is warmer than any can be, and none that is real among it."""

from dataclasses import replace

import numpy as np
import pytest

from terrasol.constants import SOLAR_CONSTANT
from terrasol.sky.station import Station
from terrasol.sky.warmth import WARMEST, sun_of_day, too_warm, warmest

NORMALS = {
    # latitude, height [m], January to December [degC]: monthly normals, from memory
    "Death Valley": (36.5, -59.0, (12, 15, 20, 25, 31, 36, 39, 38, 33, 25, 17, 11)),
    "Kuwait": (29.2, 60.0, (13, 15, 20, 27, 33, 37, 39, 38, 35, 29, 20, 15)),
    "Mecca": (21.4, 280.0, (24, 25, 28, 31, 34, 36, 36, 36, 35, 32, 28, 26)),
    "Dallol": (14.2, -130.0, (30, 31, 33, 34, 36, 38, 38, 37, 37, 35, 33, 31)),
    "Singapore": (1.3, 20.0, (26, 27, 28, 28, 28, 28, 28, 28, 28, 28, 27, 27)),
    "Alice Springs": (-23.8, 550.0, (29, 28, 25, 20, 15, 12, 12, 14, 19, 23, 26, 28)),
    "Lhasa": (29.7, 3650.0, (-1, 2, 6, 9, 13, 17, 16, 16, 14, 9, 4, 0)),
    "Quito": (-0.2, 2850.0, (14, 14, 14, 14, 14, 14, 14, 14, 14, 14, 14, 14)),
    "Scilly": (49.9, 20.0, (8, 8, 9, 10, 12, 14, 16, 17, 15, 13, 11, 9)),
    "Rost": (67.5, 5.0, (2, 1, 1, 3, 6, 9, 11, 11, 9, 6, 4, 2)),
    "Davos": (46.8, 1590.0, (-5, -5, -1, 3, 8, 11, 13, 13, 9, 5, 0, -4)),
    "Sonnblick": (47.1, 3106.0, (-12, -12, -10, -7, -3, 0, 2, 3, 0, -3, -8, -11)),
    "Verkhoyansk": (67.6, 130.0, (-46, -42, -29, -12, 4, 13, 16, 11, 2, -15, -36, -44)),
}
SNOWY = ("Scilly", "Rost", "Davos", "Sonnblick", "Lhasa")


def year(name, warmer=0.0):
    """Two invented years of hours of a place: its months, a day's course, and spells of weather."""
    latitude, height, normals = NORMALS[name]
    start = np.datetime64("2021-01-01T00", "s") + np.arange(730 * 24) * np.timedelta64(3600, "s")
    day = np.arange(start.size) / 24.0
    middles = np.array([15, 45, 74, 105, 135, 166, 196, 227, 258, 288, 319, 349], float)
    air = np.interp(day % 365.0, middles, np.array(normals, float), period=365.0)
    air = (
        air + 7.0 * np.cos((day % 1.0 - 0.6) * 2.0 * np.pi) + 4.0 * np.sin(day * 2.0 * np.pi / 9.0)
    )
    values = {"temperature": air + warmer}
    return Station(name, latitude, 0.0, height, start, 3600, values)


def in_fahrenheit(station):
    return replace(station, values={"temperature": station.values["temperature"] * 1.8 + 32.0})


def part(station, first, days):
    some = slice(24 * first, 24 * (first + days))
    return replace(
        station, start=station.start[some], values={k: v[some] for k, v in station.values.items()}
    )


def test_sun_above_the_air_as_in_print():
    """Allen et al. (1998), FAO 56, example 8: 20 S, 3 September, 32.2 MJ m-2 d-1, with a solar
    constant of 0.0820 MJ m-2 min-1 and so many digits."""
    found = sun_of_day("2023-09-03", -20.0) * 86400e-6 * (0.0820e6 / 60.0) / SOLAR_CONSTANT
    assert found == pytest.approx(32.2, abs=0.05)
    assert sun_of_day("2023-12-21", 75.0) == 0.0
    assert sun_of_day("2023-06-21", 75.0) > sun_of_day("2023-06-21", 45.0)


@pytest.mark.parametrize("name", NORMALS)
def test_no_place_on_earth_is_too_warm(name):
    assert too_warm(year(name)) is None
    assert too_warm(year(name, 2.0)) is None  # nor in a record year
    station = year(name, 2.0)
    for first in range(0, 360, 30):
        for days in (1, 5, 20):
            assert too_warm(part(station, first, days)) is None


@pytest.mark.parametrize("name", NORMALS)
def test_fahrenheit_read_as_celsius_is_too_warm(name):
    found = too_warm(in_fahrenheit(year(name)))
    assert found is not None
    assert found.in_fahrenheit
    assert found.mean > found.most
    assert (found.last - found.first).astype(int) == 29


@pytest.mark.parametrize("name", SNOWY)
def test_a_winter_alone_is_enough_where_snow_lies(name):
    winter = part(in_fahrenheit(year(name)), 304, 150)  # November to March
    assert too_warm(winter).in_fahrenheit
    assert too_warm(part(winter, 60, 12)).in_fahrenheit  # January, twelve days of it


def test_hours_of_the_extremes_are_no_matter():
    desert, cold = year("Death Valley"), year("Verkhoyansk")
    desert.values["temperature"][24 * 190 + 15] = 56.0
    cold.values["temperature"][24 * 15 : 24 * 20] = -67.0
    assert too_warm(desert) is None
    assert too_warm(cold) is None


def test_gaps_and_stretches_without_values():
    station = in_fahrenheit(year("Davos"))
    station.values["temperature"][::7] = np.nan
    assert too_warm(station).in_fahrenheit
    station.values["temperature"][:] = np.nan
    assert too_warm(station) is None


def test_the_bound_follows_sun_and_height():
    june, january = warmest(["2023-06-21", "2023-01-21"], 46.0, 0.0)
    assert june > january > WARMEST[0]
    assert warmest("2023-06-21", 46.0, 1000.0) == pytest.approx(june - 5.0)
    assert warmest("2023-01-21", -46.0, 0.0) > january
