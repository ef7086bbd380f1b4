"""What light may be asked for, and what is refused with which words."""

import numpy as np
import pytest

from terrasol.constants import REFRACTION_COEFFICIENT
from terrasol.errors import SettingError, TerrasolError
from terrasol.light import latitudes
from terrasol.light.latitudes import LATITUDE_GRAIN
from terrasol.light.settings import LightSettings, check_azimuths, check_refraction, twelve
from terrasol.light.surroundings import Surroundings
from terrasol.light.tables import SkyTables
from terrasol.sky.clear import Air
from terrasol.sky.period import parse_period
from terrasol.sky.suntable import LATITUDE_KNOTS

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
    ("south", "north"),
    [(46.2, 46.7), (46.0, 46.0), (45.9, 46.1), (-0.1, 0.1), (-33.5, -33.2), (-2.0, 3.0),
     (89.2, 89.8), (-89.8, -89.2)],
)  # fmt: skip
def test_latitude_knots_are_fixed_to_the_globe(south, north):
    tables = SkyTables.over(settings("2025-06-21"), 9.0, (south, north), (100.0, 120.0))
    knots = tables.latitudes
    assert knots.size >= 2
    first = LATITUDE_KNOTS.index(knots[0])
    assert tuple(knots) == LATITUDE_KNOTS[first : first + knots.size]
    assert knots[0] <= south <= knots[1]
    assert knots[-2] <= north <= knots[-1]


def filled(latitudes):
    tables = SkyTables.over(
        settings("2025-06-21", azimuths=8, step_seconds=1800.0), 9.0, latitudes, (100.0, 120.0)
    )
    for i in range(tables.latitudes.size):
        tables.fill(i)
    return tables


def test_tables_are_mixed_for_the_nearest_grain_of_latitude(monkeypatch):
    tables = filled((45.5, 46.5))
    grain = LATITUDE_GRAIN
    asked = 46.0 + 4.3 * grain
    mixed = tables.at(asked)
    assert mixed.latitude == pytest.approx(46.0 + 4.0 * grain)
    low = int(np.searchsorted(tables.latitudes, mixed.latitude)) - 1
    share = mixed.latitude - tables.latitudes[low]  # knots are a degree apart here
    south, north = tables.tables[low].table, tables.tables[low + 1].table
    want = (1.0 - share) * south.level + share * north.level
    np.testing.assert_allclose(mixed.table.level, want, rtol=1e-9)
    np.testing.assert_array_equal(mixed.dark, mixed.table.dark())
    assert tables.at(asked - 0.6 * grain).table is mixed.table  # kept, not mixed again
    at_knot = tables.at(46.0 + 0.2 * grain)
    assert at_knot.latitude == pytest.approx(46.0)
    knot = int(np.flatnonzero(tables.latitudes == 46.0)[0])
    np.testing.assert_allclose(at_knot.table.level, tables.tables[knot].table.level, rtol=1e-9)
    # many other latitudes push it out; asked again, the answer is the same
    monkeypatch.setattr(latitudes, "MIXED_BYTES", 3.0 * mixed.table.direct.nbytes)
    for latitude in np.arange(45.5, 45.9, grain):
        tables.at(latitude)
    assert len(tables._mixed) <= 4
    again = tables.at(asked).table
    assert again is not mixed.table
    np.testing.assert_array_equal(again.direct, mixed.table.direct)


@pytest.mark.parametrize("step", [0.5, 7200.0, 7.0, float("nan")])
def test_steps_that_do_not_tile_a_day_are_refused(step):
    with pytest.raises(SettingError, match="step"):
        SkyTables.over(settings(step_seconds=step), 9.0, (46.0, 46.5), (0.0, 100.0))


def test_place_among_the_nodes_of_the_surroundings():
    around = Surroundings(np.zeros((12, 5, 5), np.float32), 8, np.full(12, 0.2, np.float32))
    np.testing.assert_allclose(around.node(4, 12), (0.0, 1.0))
    np.testing.assert_allclose(around.node(0, 256), (-0.5, 31.5))
    none = Surroundings.none(3)
    assert none.received.shape == (3, 1, 1)
    assert (none.received == 0.0).all()


def samples_of(received, view, shape=(40, 50)):
    """Uniform samples: one month's light, and the share of the view that is terrain."""
    samples = np.empty((2, *shape), np.float32)
    samples[0], samples[1] = received, view
    return samples


def test_surroundings_add_every_bounce_once():
    # all slopes get 100 and see 0.3 of each other: 100 (1 + a v + (a v)^2 + ...)
    around = Surroundings.of(samples_of(100.0, 0.3), 8, (20.0, 20.0), np.array([0.8]))
    assert around.received.shape == (1, 40, 50)
    want = 100.0 * sum(0.24**n for n in range(40))
    np.testing.assert_allclose(around.received, want, rtol=1e-5)


def test_surroundings_are_a_mean_of_what_is_known():
    samples = samples_of(100.0, 0.0)
    samples[0, :, 25:] = 200.0
    samples[:, 10:20, 10:40] = np.nan
    got = Surroundings.of(samples, 5, (100.0, 100.0), np.array([0.5])).received[0]
    assert np.isfinite(got).all()
    assert got.min() >= 100.0 - 1e-3
    assert got.max() <= 200.0 + 1e-3
    # the mean's standard deviation is 1 km, two nodes here
    np.testing.assert_allclose(got[:, :15], 100.0, rtol=1e-4)
    np.testing.assert_allclose(got[:, 35:], 200.0, rtol=1e-4)
    np.testing.assert_allclose(got[35, 24:26].mean(), 150.0, rtol=1e-5)
    # half a node beyond the border of light, a quarter of a deviation: 100 + 100 F(0.25)
    assert got[35, 25] == pytest.approx(100.0 + 100.0 * 0.5987, abs=1.0)


def test_surroundings_reach_as_far_along_rows_as_along_columns():
    # cells twice as wide as high: the mean takes in half as many columns as rows
    samples = samples_of(0.0, 0.0, (41, 41))
    samples[0, 20, 20] = 1.0
    got = Surroundings.of(samples, 5, (100.0, 50.0), np.array([0.0])).received[0]
    assert got[24, 20] == pytest.approx(got[20, 22], rel=0.05)
    assert got[24, 20] == pytest.approx(got[20, 20] * np.exp(-0.5), rel=0.05)


def test_surroundings_send_back_by_each_cells_own_albedo():
    dice = np.random.default_rng(4)
    samples = dice.uniform(100.0, 200.0, (3, 6, 7)).astype(np.float32)
    samples[-1] = 0.2  # terrain view
    even = Surroundings.of(samples, 4, (50.0, 50.0), np.array([0.3, 0.6]))
    same = Surroundings.of(
        samples, 4, (50.0, 50.0), np.array([0.3, 0.6])[:, None, None] * np.ones((2, 6, 7))
    )
    # one albedo everywhere: what is sent back does not depend on how it was said
    np.testing.assert_allclose(
        even.albedo[:, None, None] * even.received, same.albedo[:, None, None] * same.received,
        rtol=1e-6,
    )  # fmt: skip
    snow = np.full((2, 6, 7), 0.2)
    snow[:, :, 4:] = 0.8
    patchy = Surroundings.of(samples, 4, (50.0, 50.0), snow)
    sent = patchy.received[0]
    assert sent[:, -1].min() > sent[:, 0].max()  # nearer to the snow is brighter


def test_a_map_of_albedo_gives_way_to_the_plain_one_where_void():
    albedo = np.full((1, 4, 5), 0.5, np.float32)
    albedo[0, 0, 0] = np.nan
    mapped = settings("2025-03/2025-04", albedo=(0.1,) * 12, albedo_map=albedo)
    found = mapped.ground_albedo(slice(0, 2), slice(0, 3))
    assert found.shape == (2, 2, 3)
    assert found[0, 0, 0] == pytest.approx(0.1)
    assert found[1, 1, 2] == pytest.approx(0.5)
    monthly = np.arange(12, dtype=np.float32)[:, None, None] / 20 * np.ones((12, 4, 5), np.float32)
    found = settings("2025-11/2026-01", albedo_map=monthly).ground_albedo(slice(0, 4), slice(0, 5))
    np.testing.assert_allclose(found[:, 0, 0], [0.5, 0.55, 0.0])


def test_photosynthetic_light_is_a_mean_day_of_each_month():
    s = settings("2025-04/2025-05", photons_per_joule=2.3)
    # 600 MJ m-2 in 30 days are 20 MJ m-2 a day; 2.3 umol a joule make 46 mol of them
    assert 600.0 * s.photons[0] == pytest.approx(46.0)
    in_kwh = settings("2025-04", photons_per_joule=2.3, unit="kW h m-2")
    assert 600.0 / 3.6 * in_kwh.photons[0] == pytest.approx(46.0)
    assert settings("2025-04").photons is None
    with pytest.raises(SettingError, match="photons"):
        settings("2025-04", photons_per_joule=23.0)
