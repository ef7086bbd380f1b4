"""What light may be asked for, and what is refused with which words."""

import numpy as np
import pytest

from terrasol.constants import REFRACTION_COEFFICIENT
from terrasol.errors import SettingError, TerrasolError
from terrasol.light.irradiation import (
    LightSettings,
    SkyTables,
    Surroundings,
    check_azimuths,
    check_refraction,
    twelve,
)
from terrasol.sky.clear import Air
from terrasol.sky.period import parse_period

AIR = Air.ineichen(3.0)


def settings(period="2025", **more):
    return LightSettings(parse_period(period), AIR, **more)


def test_defaults_are_sensible():
    s = settings()
    assert s.azimuths == 64
    assert s.unit == "MJ m-2"
    assert s.basis == "slope"
    assert s.diffuse == "perez"
    assert s.refraction == REFRACTION_COEFFICIENT
    assert s.albedo == (0.2,) * 12


@pytest.mark.parametrize(
    ("wrong", "words"),
    [
        ({"albedo": (0.2,)}, "albedo"),
        ({"albedo": (0.2,) * 11}, "albedo"),
        ({"albedo": (0.2,) * 11 + (1.2,)}, "1.2"),
        ({"albedo": (-0.1,) + (0.2,) * 11}, "-0.1"),
        ({"albedo": (float("nan"),) * 12}, "albedo"),
        ({"diffuse": "overcast"}, "overcast.*perez, hay-davies, isotropic"),
        ({"unit": "kWh m-2"}, "kWh m-2.*MJ m-2, kW h m-2"),
        ({"basis": "roof"}, "roof.*slope, map"),
        ({"azimuths": 0}, "azimuths.*0"),
        ({"azimuths": 4}, "8 to 720"),
        ({"azimuths": 62}, "multiple of 4"),
        ({"azimuths": 724}, "724"),
        ({"azimuths": -64}, "-64"),
        ({"refraction": -0.1}, "refraction"),
        ({"refraction": 1.0}, "refraction"),
        ({"refraction": float("nan")}, "refraction"),
    ],
)
def test_what_makes_no_sense_is_refused(wrong, words):
    with pytest.raises(SettingError, match=words):
        settings(**wrong)


@pytest.mark.parametrize("right", [{"albedo": (0.0,) * 11 + (1.0,)}, {"refraction": 0.0},
                                   {"azimuths": 8}, {"azimuths": 720},
                                   {"unit": "kW h m-2", "basis": "map"},
                                   {"diffuse": "isotropic"}])  # fmt: skip
def test_the_ends_of_each_range_are_allowed(right):
    s = settings(**right)
    for name, value in right.items():
        assert getattr(s, name) == value


def test_setting_errors_are_value_errors_of_terrasol():
    with pytest.raises(ValueError, match="azimuths"):
        check_azimuths(10)
    with pytest.raises(TerrasolError, match="refraction"):
        check_refraction(1.5)


def test_albedo_follows_the_calendar_not_the_order():
    year = tuple(m / 100.0 for m in range(1, 13))
    s = settings("2025-11/2026-02", albedo=year)
    np.testing.assert_allclose(s.month_albedo, [0.11, 0.12, 0.01, 0.02])


def test_one_number_or_twelve():
    assert twelve(0.3, "albedo") == (0.3,) * 12
    assert twelve([0.3], "albedo") == (0.3,) * 12
    assert twelve(np.arange(12) / 20, "albedo")[3] == pytest.approx(0.15)
    for wrong in ([0.1, 0.2], [], [0.1] * 13):
        with pytest.raises(SettingError, match=f"albedo.*{len(wrong)}"):
            twelve(wrong, "albedo")


@pytest.mark.parametrize(
    ("latitudes", "want"),
    [
        ((46.2, 46.7), (46.0, 47.0)),
        ((46.0, 46.0), (46.0, 47.0)),
        ((45.9, 46.1), (45.0, 46.0, 47.0)),
        ((-0.1, 0.1), (-1.0, 0.0, 1.0)),
        ((-33.5, -33.2), (-34.0, -33.0)),
        ((89.2, 89.8), (89.0, 90.0)),
        ((-89.8, -89.2), (-90.0, -89.0)),
    ],
)
def test_latitude_knots_are_fixed_to_the_globe(latitudes, want):
    tables = SkyTables.over(settings("2025-06-21"), 9.0, latitudes, (100.0, 120.0))
    assert tuple(tables.latitudes) == want
    assert len(tables.tables) == len(want)


def filled(latitudes):
    tables = SkyTables.over(
        settings("2025-06-21", azimuths=8, step_seconds=1800.0), 9.0, latitudes, (100.0, 120.0)
    )
    for i in range(tables.latitudes.size):
        tables.fill(i)
    return tables


def test_tables_are_mixed_for_the_nearest_twentieth_of_a_degree():
    tables = filled((45.5, 46.5))
    table, dark, latitude = tables.at(46.262)
    assert latitude == pytest.approx(46.25)
    want = 0.75 * tables.tables[1].level + 0.25 * tables.tables[2].level
    np.testing.assert_allclose(table.level, want, rtol=1e-12)
    np.testing.assert_array_equal(dark, table.dark())
    assert tables.at(46.238)[0] is table  # kept, not mixed again
    at_knot, _, latitude = tables.at(46.01)
    assert latitude == pytest.approx(46.0)
    np.testing.assert_allclose(at_knot.level, tables.tables[1].level, rtol=1e-12)
    # many other latitudes push it out; asked again, the answer is the same
    for latitude in np.arange(45.0, 46.2, 0.05):
        tables.at(latitude)
    again = tables.at(46.25)[0]
    assert again is not table
    np.testing.assert_array_equal(again.direct, table.direct)


@pytest.mark.parametrize("step", [0.5, 7200.0, 7.0, float("nan")])
def test_steps_that_do_not_tile_a_day_are_refused(step):
    with pytest.raises(SettingError, match="step"):
        SkyTables.over(settings(step_seconds=step), 9.0, (46.0, 46.5), (0.0, 100.0))


def test_place_among_the_nodes_of_the_surroundings():
    around = Surroundings(np.zeros((12, 5, 5), np.float32), 8)
    np.testing.assert_allclose(around.node(4, 12), (0.0, 1.0))
    np.testing.assert_allclose(around.node(0, 256), (-0.5, 31.5))
    none = Surroundings.none(3)
    assert none.received.shape == (3, 1, 1)
    assert (none.received == 0.0).all()
