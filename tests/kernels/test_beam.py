"""Sun tables: how they are filled, and how cells look them up."""

import numpy as np
import pytest
from scipy.integrate import quad

from terrasol.kernels.beam import LANES, RUN, fill_table, look_up

DISC = np.radians(0.26667)
KNOTS = np.arcsin(np.linspace(0.0, 1.0, 65))


def filled(elevation, azimuth, lane, weight, azimuths=16, lanes=2, disc=DISC):
    """A fresh table of suns; elevation and azimuth in radians."""
    weight = np.atleast_2d(np.asarray(weight, float).T).T
    table = np.zeros((azimuths, KNOTS.size, 2, lanes, weight.shape[1]))
    lane = np.asarray(lane, np.int64)
    fill_table(
        np.asarray(elevation, float), np.asarray(azimuth, float), lane, weight, KNOTS, disc, table
    )
    return table


def some_suns(count=200, seed=1):
    """Elevations over the whole disc up to the zenith, azimuths all around, lanes and weights."""
    dice = np.random.default_rng(seed)
    return (
        dice.uniform(np.radians(0.3), np.pi / 2, count),
        dice.uniform(0.0, 2.0 * np.pi, count),
        dice.integers(0, 2, count),
        dice.uniform(0.0, 5.0, (count, 3)),
    )


def share_above(d):
    """Share of a disc of radius 1 above a straight edge that lies d below its centre."""
    area, _ = quad(lambda y: 2.0 * np.sqrt(max(1.0 - y * y, 0.0)), -min(max(d, -1.0), 1.0), 1.0)
    return area / np.pi


def test_open_table_keeps_the_vector_sum():
    # n . s of any plane that sees the whole sky is the sum over azimuths of the open knot
    elevation, azimuth, lane, weight = some_suns()
    table = filled(elevation, azimuth, lane, weight)
    turn = 2.0 * np.pi * np.arange(16) / 16
    for p in range(2):
        mine = weight * (lane == p)[:, None]
        up = table[:, 0, 1, p].sum(axis=0)
        np.testing.assert_allclose(up, (mine * np.sin(elevation)[:, None]).sum(axis=0), rtol=1e-12)
        for flat in (np.sin, np.cos):
            got = (flat(turn)[:, None] * table[:, 0, 0, p]).sum(axis=0)
            want = (mine * (np.cos(elevation) * flat(azimuth))[:, None]).sum(axis=0)
            np.testing.assert_allclose(got, want, rtol=1e-11)


def test_every_knot_holds_the_suns_above_it():
    elevation, azimuth, lane, weight = some_suns(60, seed=2)
    table = filled(elevation, azimuth, lane, weight)
    for j, knot in enumerate(KNOTS):
        share = np.array([share_above((e - knot) / DISC) for e in elevation])
        for p in range(2):
            mine = weight * (share * np.sin(elevation) * (lane == p))[:, None]
            np.testing.assert_allclose(table[:, j, 1, p].sum(axis=0), mine.sum(axis=0), atol=1e-9)


@pytest.mark.parametrize("d", [-1.5, -0.999, -0.5, 0.0, 0.3, 0.999, 1.5])
def test_disc_is_cut_by_a_straight_edge(d):
    knot = 20
    elevation = KNOTS[knot] + d * DISC
    table = filled([elevation], [1.0], [0], [1.0], lanes=1)
    share = table[:, knot, 1].sum() / np.sin(elevation)
    assert share == pytest.approx(share_above(d), abs=1e-9)
    # a segment of half a radius has the area (pi / 3 - sqrt(3) / 4) r^2: plane geometry
    assert share_above(-0.5) == pytest.approx((np.pi / 3 - np.sqrt(3) / 4) / np.pi, abs=1e-9)


def test_a_half_risen_sun_counts_on_the_open_knot_alone():
    table = filled([0.0], [1.0], [0], [1.0], lanes=1)
    assert np.hypot(*np.tensordot(unit(16), table[:, 0, 0].sum(axis=(1, 2)), (0, 0))) == (
        pytest.approx(0.5)
    )
    assert (table[:, 1:] == 0.0).all()
    assert (filled([-1.01 * DISC], [1.0], [0], [1.0], lanes=1) == 0.0).all()


def unit(azimuths):
    """East and north of equally spaced azimuths, (azimuths, 2)."""
    turn = 2.0 * np.pi * np.arange(azimuths) / azimuths
    return np.stack([np.sin(turn), np.cos(turn)], axis=1)


@pytest.mark.parametrize("turn", [0.0, 3.0, 3.4, 7.6, 7.999999])
def test_a_sun_lights_its_two_neighbouring_azimuths(turn):
    table = filled([0.7], [turn * np.pi / 4.0], [0], [1.0], azimuths=8, lanes=1)
    lit = np.flatnonzero(table[:, 0, 1, 0, 0] > 1e-9)
    want = {int(turn), int(np.ceil(turn)) % 8}
    assert set(lit) <= want
    part = turn - int(turn)
    left, right = table[int(turn), 0, 1, 0, 0], table[(int(turn) + 1) % 8, 0, 1, 0, 0]
    assert left == pytest.approx((1.0 - part) * np.sin(0.7), abs=1e-12)
    assert right == pytest.approx(part * np.sin(0.7), abs=1e-12)


def test_suns_are_added_to_what_the_table_holds():
    once = filled([0.5], [1.0], [0], [2.0], lanes=1)
    table = once.copy()
    fill_table(
        np.array([0.5]), np.array([1.0]), np.array([0]), np.array([[2.0]]), KNOTS, DISC, table
    )
    np.testing.assert_allclose(table, 2.0 * once, rtol=1e-14)


SMALL = 9
"""Horizon knots of the made-up tables."""


def made_up(columns, seed=3, voids=0, steep=0.6):
    """Everything that `look_up` reads, at random: ground, horizons and a table."""
    dice = np.random.default_rng(seed)
    azimuths, rows = 8, 3
    normal = dice.normal(0.0, steep, (3, rows, columns))
    normal[2] = 1.0
    normal /= np.linalg.norm(normal, axis=0)
    horizon = np.maximum(dice.normal(0.0, 0.4, (azimuths, rows, columns)), 0.0)
    horizon[:, 0, :2] = 50.0  # a shaft: hardly any sky
    heights = dice.uniform(-300.0, 300.0, (rows, columns))
    void = dice.integers(0, rows, voids), dice.integers(0, columns, voids)
    normal[:, *void] = heights[void] = np.nan
    knot_height = np.array([300.0, 450.0, 800.0, 1000.0])
    table = dice.uniform(0.0, 1.0, (knot_height.size, azimuths, SMALL, 2, LANES))
    dark = dice.integers(1, SMALL, azimuths)
    dark[0], dark[1] = 0, SMALL - 1
    ground = [np.ascontiguousarray(a, np.float32) for a in (horizon, normal, heights)]
    return *ground, 700.0, unit(azimuths).astype(np.float32), knot_height, table, dark


def looked_up(horizon, normal, heights, datum, directions, knot_height, table, dark, tilt, air=0):
    """Call the kernel."""
    out = np.full((heights.size, LANES), -1.0, np.float32)
    flat = np.ascontiguousarray(table.reshape(-1, 2 * LANES), np.float32)
    look_up(
        horizon, normal, heights, datum, directions, np.array(tilt, float), knot_height, flat,
        dark, np.full(LANES, air, np.float32), out,
    )  # fmt: skip
    return out.reshape(*heights.shape, LANES)


def plainly(horizon, normal, heights, datum, directions, knot_height, table, dark, tilt, air=0):
    """The same in float64, cell by cell and azimuth by azimuth."""
    rows, columns = heights.shape
    out = np.zeros((rows, columns, LANES))
    horizon, normal, directions, table = (
        np.asarray(a, np.float64) for a in (horizon, normal, directions, table.astype(np.float32))
    )
    for r, c in np.ndindex(rows, columns):
        east, north, up = normal[:, r, c]
        if np.isnan(up):
            continue
        z = float(heights[r, c]) + datum
        place = np.interp(z, knot_height, np.arange(knot_height.size))
        low = min(int(place), knot_height.size - 2)
        m = place - low
        turn = tilt[0] + tilt[1] * r + tilt[2] * c
        north, up = north + turn * up, up - turn * north
        for a, (sine, cosine) in enumerate(directions):
            toward = east * sine + north * cosine
            rim = horizon[a, r, c]
            rim -= turn * cosine * (1.0 + rim**2)
            tangent = max(rim, -toward / up, 0.0)
            at = np.sin(np.arctan(tangent)) * (SMALL - 1)
            k = int(at)
            if k >= dark[a]:
                continue
            w = at - k
            rows_of_knot = (1.0 - m) * table[low, a] + m * table[low + 1, a]
            level, upright = (1.0 - w) * rows_of_knot[k] + w * rows_of_knot[k + 1]
            out[r, c] += toward * level + up * upright
        out[r, c] *= 1.0 + turn * air
    return out


@pytest.mark.parametrize("tilt", [(0.0, 0.0, 0.0), (2e-3, -4e-4, 3e-5)])
@pytest.mark.parametrize("columns", [5, RUN, RUN + 13])
def test_look_up_is_linear_between_knots(columns, tilt):
    case = made_up(columns, seed=columns)
    got, want = looked_up(*case, tilt, 30.0), plainly(*case, tilt, 30.0)
    # float32 at the edge of a knot decides which side of `dark` a cell falls on; the seeds
    # keep clear of it
    np.testing.assert_allclose(got, want, rtol=2e-5, atol=2e-5)
    assert np.ptp(want) > 1.0


def test_look_up_leaves_voids_dark():
    case = made_up(40, seed=4, voids=12)
    got, want = looked_up(*case, (0.0,) * 3), plainly(*case, (0.0,) * 3)
    void = np.isnan(case[1][2])
    assert void.sum() > 5
    assert (got[void] == 0.0).all()
    np.testing.assert_allclose(got, want, rtol=2e-5, atol=2e-5)


def test_dark_azimuths_and_high_horizons_give_nothing():
    horizon, *rest, dark = made_up(30, seed=5)
    all_dark = looked_up(horizon, *rest, np.zeros_like(dark), (0.0,) * 3)
    assert (all_dark == 0.0).all()
    dark[:] = 3
    high = np.full_like(horizon, np.tan(np.arcsin(3.01 / (SMALL - 1))))
    assert (looked_up(high, *rest, dark, (0.0,) * 3) == 0.0).all()
    just_under = np.full_like(horizon, np.tan(np.arcsin(2.99 / (SMALL - 1))))
    assert (looked_up(just_under, *rest, dark, (0.0,) * 3) != 0.0).any()


def test_heights_beyond_the_knots_take_the_last_table():
    horizon, normal, heights, _, *rest = made_up(20, seed=6)
    flat = np.zeros_like(heights)
    for datum, knot in ((-200.0, 300.0), (2000.0, 1000.0)):
        beyond = looked_up(horizon, normal, flat, datum, *rest, (0.0,) * 3)
        at_knot = looked_up(horizon, normal, flat, knot, *rest, (0.0,) * 3)
        np.testing.assert_array_equal(beyond, at_knot)


def test_moving_north_is_a_tilt_of_the_ground():
    # The table of one latitude, used for ground a quarter of a degree further north, against
    # the table of the sun as it stands there: the same unit vectors, turned about the east.
    shift = np.radians(0.25)
    dice = np.random.default_rng(7)
    elevation, azimuth = dice.uniform(0.1, 1.0, 400), dice.uniform(2.0, 4.3, 400)
    east, north = np.cos(elevation) * np.sin(azimuth), np.cos(elevation) * np.cos(azimuth)
    up = np.sin(elevation)
    there = np.arcsin(np.cos(shift) * up + np.sin(shift) * north)
    turned = np.arctan2(east, np.cos(shift) * north - np.sin(shift) * up)
    weight = np.ones((400, 2))
    cases = []
    for e, a, tilt in ((elevation, azimuth, shift), (there, turned % (2 * np.pi), 0.0)):
        table = filled(e, a, np.zeros(400), weight, azimuths=360, lanes=LANES)
        cases.append((np.ascontiguousarray(table.transpose(4, 0, 1, 2, 3)), tilt))
    normal = np.array([0.2, -0.3, 1.0], np.float32).reshape(3, 1, 1)
    normal /= np.linalg.norm(normal)
    rim = 0.1 + 0.15 * (1.0 - unit(360)[:, 1])  # higher towards the south
    horizon = rim.astype(np.float32).reshape(360, 1, 1)
    direct = [
        looked_up(
            horizon, normal, np.zeros((1, 1), np.float32), 100.0, unit(360).astype(np.float32),
            np.array([0.0, 1000.0]), table, np.full(360, 64), (tilt, 0.0, 0.0),
        )[0, 0, 0]
        for table, tilt in cases
    ]  # fmt: skip
    assert direct[0] == pytest.approx(direct[1], rel=2e-3)
    unturned = looked_up(
        horizon, normal, np.zeros((1, 1), np.float32), 100.0, unit(360).astype(np.float32),
        np.array([0.0, 1000.0]), cases[0][0], np.full(360, 64), (0.0,) * 3,
    )[0, 0, 0]  # fmt: skip
    assert abs(unturned / direct[1] - 1.0) > 4e-3
