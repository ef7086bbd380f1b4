"""Mapped clear-sky indices against skies of one index."""

from dataclasses import replace

import numpy as np
import pytest

from terrasol.errors import InputError
from terrasol.light.indexed import MappedTables
from terrasol.light.irradiation import Strip, sky_light, strip_light
from terrasol.light.settings import LightSettings
from terrasol.light.surroundings import Surroundings
from terrasol.light.tables import SkyTables
from terrasol.sky.clear import Air
from terrasol.sky.cloud import MonthlySky
from terrasol.sky.period import parse_period

SETTINGS = LightSettings(
    parse_period("2025-05/2025-06"),
    Air.ineichen(3.0),
    azimuths=16,
    step_seconds=600.0,
    monthly_parts=True,
)
PLACE = (9.0, (46.0, 46.1), (700.0, 900.0))
SHAPE = (6, 9)


def strip():
    """Slopes of all kinds among ridges."""
    dice = np.random.default_rng(1)
    slope, aspect = dice.uniform(0.0, 0.8, SHAPE), dice.uniform(0.0, 6.28, SHAPE)
    normal = np.array(
        [np.sin(slope) * np.sin(aspect), np.sin(slope) * np.cos(aspect), np.cos(slope)]
    )
    horizon = np.tan(dice.uniform(0.0, 0.3, (16, *SHAPE)))
    heights = dice.uniform(-80.0, 80.0, SHAPE)
    f = np.float32
    return Strip(
        horizon.astype(f), normal.astype(f), heights.astype(f), 800.0, (46.05, 0.0, 0.0), 46.05
    )


def mapped(index, settings=SETTINGS):
    tables = MappedTables.over(settings, index.astype(np.float32), *PLACE)
    for task in tables.tasks:
        task()
    return tables


def plain(index):
    tables = SkyTables.over(replace(SETTINGS, sky=MonthlySky(SETTINGS.air, (index,) * 12)), *PLACE)
    for i in range(tables.latitudes.size):
        tables.fill(i)
    return tables


def light_of(tables):
    around, ground = Surroundings.none(2), strip()
    if isinstance(tables, MappedTables):
        return tables.strip_light(ground, ground.sky(), around, (0, 0))
    return strip_light(ground, ground.sky(), tables, around, (0, 0))


@pytest.mark.parametrize("index", [0.6, 0.55, 0.93])
def test_an_even_map_is_a_sky_of_that_index(index):
    found = light_of(mapped(np.full((1, *SHAPE), index)))
    want = light_of(plain(index))
    exact = index == 0.6  # a knot
    for part in range(3):
        atol = (1e-5 if exact else 8e-3) * want.year[0].mean()
        np.testing.assert_allclose(found.year[part], want.year[part], atol=atol)
    np.testing.assert_allclose(found.months.sum(axis=0), found.year[0], rtol=1e-5)
    np.testing.assert_allclose(found.year[0], found.year[1:].sum(axis=0), rtol=1e-5)


def test_each_cell_and_month_has_its_own_index():
    index = np.full((12, *SHAPE), 0.5)
    index[4, :, 5:] = 0.8  # May, in the east
    found = light_of(mapped(index))
    bright, dull = light_of(plain(0.8)), light_of(plain(0.5))
    np.testing.assert_allclose(found.months[0][:, 5:], bright.months[0][:, 5:], rtol=1e-5)
    np.testing.assert_allclose(found.months[0][:, :5], dull.months[0][:, :5], rtol=1e-5)
    np.testing.assert_allclose(found.months[1], dull.months[1], rtol=1e-5)


def test_void_index_is_void_light_and_only_there():
    index = np.full((1, *SHAPE), 0.5)
    index[0, 2, 3] = np.nan
    found = light_of(mapped(index))
    for values in (found.year, found.months, found.month_parts):
        assert np.isnan(values[..., 2, 3]).all()
        assert np.isfinite(np.delete(values.reshape(-1, 54), 21, axis=1)).all()


def test_samples_for_the_surroundings_are_what_cells_get():
    index = np.linspace(0.4, 0.9, 54).reshape(1, *SHAPE)
    tables = mapped(index)
    got = tables.sky_light(strip(), np.arange(SHAPE[0]), np.arange(SHAPE[1]))
    np.testing.assert_allclose(got[:-1], light_of(tables).months, rtol=1e-5)
    np.testing.assert_array_equal(got[-1], sky_light(strip(), plain(0.5))[-1])


def test_level_ground_has_the_mean_index():
    level = mapped(np.full((1, *SHAPE), 0.6)).level(46.05, 800.0)
    table = plain(0.6).exactly(46.05).table
    want = sum(np.interp(800.0, table.heights, column) for column in table.level.T)
    assert level == pytest.approx(want, rel=1e-6)


@pytest.mark.parametrize("wrong", [0.0, 60.0, -1.0])
def test_what_is_no_index_is_refused(wrong):
    index = np.full((1, *SHAPE), 0.5)
    index[0, 0, 0] = wrong
    with pytest.raises(InputError, match=r"index is 0\.05 to 1\.2"):
        MappedTables.over(SETTINGS, index.astype(np.float32), *PLACE)


def test_a_hole_in_the_map_does_not_spread_through_the_surroundings():
    samples = np.full((3, 6, 7), 100.0, np.float32)
    samples[-1] = 0.2
    samples[:2, 2, 3] = np.nan  # light unknown, ground known
    around = Surroundings.of(samples, 4, (50.0, 50.0), np.array([0.3, 0.3]))
    assert np.isfinite(around.received).all()
