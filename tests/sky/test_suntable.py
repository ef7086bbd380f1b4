"""The table of a period's sun, held against direct sums over the same sun."""

import numpy as np
import pytest

from terrasol.constants import SOLAR_RADIUS_DEG
from terrasol.errors import SettingError
from terrasol.kernels.beam import LANES
from terrasol.sky.clear import Air, clear_sky
from terrasol.sky.diffuse import split_diffuse
from terrasol.sky.period import parse_period
from terrasol.sky.sun import sun_path, sun_series
from terrasol.sky.suntable import (
    HEIGHT_KNOTS,
    HORIZON_KNOTS,
    height_knots,
    horizon_knots,
    latitude_knots,
    sun_table,
)

AIR = Air.ineichen(3.0)
HEIGHTS = np.array([0.0, 1000.0])
MODELS = ("perez", "hay-davies", "isotropic")


def spring(latitude=46.0, diffuse="perez", period="2025-03/2025-05", step=600.0, **more):
    """A table of three months in ten-minute steps, 16 azimuths, and the path it comes from."""
    path = sun_path(parse_period(period), 9.0, step)
    return sun_table(path, latitude, HEIGHTS, AIR, diffuse, 16, **more), path


def plain_sums(path, latitude, diffuse, height):
    """Direct and circumsolar light facing the sun, dome, band, global [MJ m-2] by step.

    Also the sun's elevation [radians] and month.
    """
    sun = sun_series(path, latitude, float(HEIGHTS.mean()))
    sky = clear_sky(sun, AIR, height)
    split = split_diffuse(diffuse, sun, sky)
    mega = sun.step_seconds * 1e-6
    sine = np.maximum(np.sin(np.radians(sun.elevation)), 0.0)
    return (
        mega * (sky.beam_normal + split.circumsolar_normal),
        mega * split.circumsolar_normal,
        mega * split.isotropic,
        mega * split.horizon_band,
        mega * (sky.beam_normal * sine + sky.diffuse_horizontal),
        np.radians(sun.elevation),
        sun.month,
    )


def by_month(values, month, months):
    return np.array([values[month == m].sum() for m in range(months)])


@pytest.mark.parametrize("diffuse", MODELS)
def test_open_level_ground_gets_all_of_it(diffuse):
    table, path = spring(diffuse=diffuse)
    assert table.direct.shape == (1, 2, 16, HORIZON_KNOTS, 2, LANES)
    for k, height in enumerate(HEIGHTS):
        both, glow, dome, band, level, elevation, month = plain_sums(path, 46.0, diffuse, height)
        upright = table.direct[0, k, :, 0, 1].sum(axis=0)
        # the disc is not whole below a level horizon for the sun's first minutes: 1e-5
        want = by_month(both * np.sin(elevation), month, 3)
        np.testing.assert_allclose(upright[:3], want, rtol=3e-5)
        alone = (glow * np.sin(elevation)).sum()
        assert upright[3] == pytest.approx(alone, rel=3e-5)
        assert (upright[4:] == 0.0).all()
        np.testing.assert_allclose(table.isotropic[k], by_month(dome, month, 3), rtol=1e-12)
        np.testing.assert_allclose(table.band[k], by_month(band, month, 3), rtol=1e-12)
        np.testing.assert_allclose(table.level[k], by_month(level, month, 3), rtol=1e-12)
        # beam and diffuse of level ground again: direct + dome
        np.testing.assert_allclose(upright[:3] + table.isotropic[k], table.level[k], rtol=3e-5)


def test_horizontal_sums_are_the_suns_own_direction():
    table, path = spring()
    sun = sun_series(path, 46.0, float(HEIGHTS.mean()))
    both, *_, elevation, month = plain_sums(path, 46.0, "perez", 0.0)
    turn = 2.0 * np.pi * np.arange(16) / 16
    flat = both * np.cos(elevation)
    for part in (np.sin, np.cos):
        got = (part(turn)[:, None] * table.direct[0, 0, :, 0, 0]).sum(axis=0)[:3]
        want = by_month(flat * part(np.radians(sun.azimuth)), month, 3)
        np.testing.assert_allclose(got, want, atol=3e-4 * flat.sum())


def test_monthly_circumsolar_light_fills_further_lanes():
    table, path = spring(monthly_parts=True)
    whole, _ = spring()
    _, glow, *_, elevation, month = plain_sums(path, 46.0, "perez", 1000.0)
    alone = table.direct[0, 1, :, 0, 1].sum(axis=0)[3:6]
    np.testing.assert_allclose(alone, by_month(glow * np.sin(elevation), month, 3), rtol=3e-5)
    np.testing.assert_allclose(
        table.direct[..., 3:6].sum(axis=-1), whole.direct[..., 3], rtol=1e-5, atol=1e-5
    )
    np.testing.assert_array_equal(table.direct[..., :3], whole.direct[..., :3])


@pytest.mark.parametrize(("months", "parts", "groups"), [(12, False, 1), (14, True, 2)])
def test_months_spread_over_groups_of_lanes(months, parts, groups):
    table, path = spring(period="2025-01/2025-12" if months == 12 else "2025-01/2026-02",
                         monthly_parts=parts)  # fmt: skip
    assert table.direct.shape[0] == groups
    both, glow, *_, elevation, month = plain_sums(path, 46.0, "perez", 0.0)
    lanes = np.concatenate(list(table.direct[:, 0, :, 0, 1]), axis=-1).sum(axis=0)
    np.testing.assert_allclose(
        lanes[:months], by_month(both * np.sin(elevation), month, months), rtol=5e-5
    )
    if parts:
        want = by_month(glow * np.sin(elevation), month, months)
        np.testing.assert_allclose(lanes[months : 2 * months], want, rtol=5e-5)
        assert (lanes[2 * months :] == 0.0).all()


def test_a_higher_horizon_never_gets_more_upright_light():
    table, _ = spring()
    assert (np.diff(table.direct[:, :, :, :, 1], axis=3) <= 1e-5).all()
    assert (table.direct[:, :, 4, 0, 1, 0] > 0.0).all()  # in the east the sun rises


def test_dark_is_the_first_knot_without_sun():
    table, path = spring()
    dark = table.dark()
    for a, knot in enumerate(dark):
        light = np.abs(table.direct[:, :, a]).sum(axis=(0, 1, 3, 4))
        assert (light[knot:] == 0.0).all() or knot == HORIZON_KNOTS - 1
        assert knot == 0 or light[knot - 1] > 0.0
    sun = sun_series(path, 46.0)
    upper_limb = np.sin(np.radians(sun.elevation.max() + SOLAR_RADIUS_DEG))
    assert dark.max() == int(upper_limb * (HORIZON_KNOTS - 1)) + 1
    assert dark[0] == 0  # no sun in the north at 46 degrees in spring
    assert dark[8] == dark.max()


def test_polar_night_is_an_empty_table():
    table, _ = spring(latitude=80.0, period="2025-12")
    assert (table.direct == 0.0).all()
    assert (table.level == 0.0).all()
    assert (table.dark() == 0).all()


def test_mixed_is_linear_and_latitudes_a_degree_apart_suffice():
    south, _ = spring(46.0)
    north, _ = spring(47.0)
    middle, _ = spring(46.5)
    half, quarter = south.mixed(north, 0.5), south.mixed(north, 0.25)
    assert half.direct.dtype == np.float32
    for name in ("isotropic", "band", "level"):
        a, b = getattr(south, name), getattr(north, name)
        np.testing.assert_allclose(getattr(quarter, name), 0.75 * a + 0.25 * b, rtol=1e-12)
    np.testing.assert_allclose(
        quarter.direct, 0.75 * south.direct + 0.25 * north.direct, rtol=1e-5, atol=1e-5
    )
    np.testing.assert_array_equal(south.mixed(north, 0.0).direct, south.direct)
    np.testing.assert_array_equal(half.heights, HEIGHTS)
    # a sine, linear over one degree, errs by (0.0175 rad)^2 / 8 = 3.8e-5: Taylor
    np.testing.assert_allclose(half.level, middle.level, rtol=5e-5)


def test_northward_is_the_air_that_a_tilt_cannot_give():
    # Level ground a twentieth of a degree further north, from the tables a degree apart: its
    # tilt, and what `northward` adds; against the table made for that very latitude.
    tables = [spring(latitude, step=60.0)[0] for latitude in (46.0, 46.5, 46.55, 47.0)]
    south, middle, moved, north = tables
    shift = np.radians(0.05)
    air = middle.northward(south, north, 1.0)
    assert air.shape == (1, LANES)
    assert (air[0, 4:] == 0.0).all()  # lanes without light
    level, want = (t.direct[0, 0, :, 0, 1].sum(axis=0)[:3] for t in (middle, moved))
    cosine = np.cos(2.0 * np.pi * np.arange(16) / 16)
    tilt = (middle.direct[0, 0, :, 0, 0] * cosine[:, None]).sum(axis=0)[:3]
    tilted = level + shift * tilt
    np.testing.assert_allclose(tilted + shift * air[0, :3] * level, want, rtol=1e-5)
    assert (np.abs(tilted / want - 1.0) > 2e-5).all()


def test_northward_of_the_polar_night_is_nothing():
    tables = [spring(latitude, period="2025-12")[0] for latitude in (79.0, 79.5, 80.0)]
    assert (tables[1].northward(tables[0], tables[2], 1.0) == 0.0).all()


def test_horizon_knots_are_equal_steps_of_the_sine():
    knots = horizon_knots(9)
    assert knots[0] == 0.0
    assert knots[-1] == pytest.approx(np.pi / 2)
    np.testing.assert_allclose(np.diff(np.sin(knots)), 0.125, rtol=1e-12)
    assert horizon_knots().size == HORIZON_KNOTS


@pytest.mark.parametrize(
    ("lowest", "highest"),
    [
        (120.0, 130.0),
        (0.0, 0.0),
        (HEIGHT_KNOTS[3], HEIGHT_KNOTS[3]),
        (HEIGHT_KNOTS[2], HEIGHT_KNOTS[5]),
        (-430.0, 20.0),
        (HEIGHT_KNOTS[0] - 400.0, HEIGHT_KNOTS[0] - 300.0),
        (8000.0, 8848.0),
        (HEIGHT_KNOTS[-1], HEIGHT_KNOTS[-1]),
        (HEIGHT_KNOTS[-1] + 10.0, HEIGHT_KNOTS[-1] + 20.0),
        (-1000.0, 10_000.0),
    ],
)
def test_height_knots_bracket_the_ground_and_no_more(lowest, highest):
    knots = list(height_knots(lowest, highest))
    first = HEIGHT_KNOTS.index(knots[0])
    assert knots == list(HEIGHT_KNOTS[first : first + len(knots)])
    assert len(knots) >= 2
    inside = np.clip([lowest, highest], HEIGHT_KNOTS[0], HEIGHT_KNOTS[-1])
    assert knots[0] <= inside[0]
    assert knots[-1] >= inside[1]
    assert len(knots) == 2 or (knots[1] > inside[0] and knots[-2] < inside[1])
    if len(knots) == 2 and lowest == highest:
        assert knots[0] <= inside[0] <= knots[1]


def test_height_knots_rise_and_the_whole_range_takes_all():
    assert (np.diff(HEIGHT_KNOTS) > 0.0).all()
    assert tuple(height_knots(-500.0, 9000.0)) == HEIGHT_KNOTS


def test_unknown_diffuse_model_is_refused():
    with pytest.raises(SettingError, match="brightest"):
        spring(diffuse="brightest")


@pytest.mark.parametrize("south", [-46.0, 30.0, 50.0, 58.0, 61.75, 67.0, 81.0])
def test_months_are_straight_enough_between_latitude_knots(south):
    """Level ground and walls halfway between knots, within 0.15 % or 0.04 MJ m-2 of a month."""
    knots = latitude_knots(south, south + 1e-6)
    assert knots[0] == south
    path = sun_path(parse_period("2025"), 10.0, 300.0)
    heights = np.array([400.0, 600.0])

    def sums(latitude):
        table = sun_table(path, latitude, heights, Air.ineichen(3.0), "isotropic", 8)
        level = table.direct[0, 0, :, 0, 1, :12].sum(axis=0)
        wall = table.direct[0, 0, 2:7, 0, 0, :12].sum(axis=0)
        return np.array([level, wall, table.isotropic[0]], np.float64)

    between = (sums(knots[0]) + sums(knots[1])) / 2.0
    want = sums(float(knots.mean()))
    assert (np.abs(between - want) < np.maximum(1.5e-3 * want, 0.04)).all()
