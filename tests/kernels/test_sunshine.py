"""Time in the sun: the look-up against plain sums."""

import numpy as np
import pytest

from terrasol.kernels.sunshine import LANES, fill_time, sum_time

AZIMUTHS, KNOTS = 16, 33


def directions(azimuths=AZIMUTHS):
    angle = 2.0 * np.pi * np.arange(azimuths) / azimuths
    return np.stack([np.sin(angle), np.cos(angle)], axis=1).astype(np.float32)


def some_suns(count=300, seed=1):
    dice = np.random.default_rng(seed)
    top = np.sin(dice.uniform(-0.02, 1.2, count))
    return top, dice.uniform(0.0, 2.0 * np.pi, count), dice.integers(0, 3, count)


def filled(top, azimuth, lane, hours=0.5):
    table = np.zeros((AZIMUTHS, KNOTS, LANES))
    fill_time(top, azimuth, lane, hours, table)
    return table


def test_a_table_holds_the_time_above_each_knot():
    top, azimuth, lane = some_suns()
    table = filled(top, azimuth, lane)
    for j, knot in enumerate(np.linspace(0.0, 1.0, KNOTS)):
        for p in range(3):
            assert table[:, j, p].sum() == pytest.approx(0.5 * ((top > knot) & (lane == p)).sum())
    assert (table[:, :, 3:] == 0.0).all()


def test_a_sun_is_shared_between_its_two_azimuths():
    turn = 2.0 * np.pi / AZIMUTHS
    table = filled(np.array([0.5]), np.array([15.25 * turn]), np.array([2]))
    assert table[[15, 0], 0, 2] == pytest.approx([0.375, 0.125])
    assert table[:, :, :].sum() == pytest.approx(0.5 * 16)  # knots below a sine of 0.5
    assert filled(np.array([0.0]), np.zeros(1), np.zeros(1, int)).sum() == 0.0


def ground(rows, columns, seed=2):
    """Random horizons and normals, and a void cell."""
    dice = np.random.default_rng(seed)
    horizon = np.maximum(dice.uniform(-0.3, 0.7, (AZIMUTHS, rows, columns)), 0.0)
    normal = dice.normal(0.0, 0.4, (3, rows, columns))
    normal[2] = 1.0
    normal /= np.linalg.norm(normal, axis=0)
    normal[:, 0, 1] = np.nan
    return horizon.astype(np.float32), normal.astype(np.float32)


def test_sums_are_those_of_plain_interpolation():
    rows, columns = 3, 21
    horizon, normal = ground(rows, columns)
    dice = np.random.default_rng(3)
    heights = dice.uniform(-200.0, 1500.0, (rows, columns)).astype(np.float32)
    heights[0, 1] = np.nan
    knots = np.array([0.0, 500.0, 2000.0])
    tables = np.stack([filled(*some_suns(seed=s)) for s in (1, 5, 9)]).astype(np.float32)
    tables = np.concatenate([tables, 2.0 * tables], axis=-1)
    lit = np.count_nonzero(tables.any(axis=(0, 3)), axis=1)
    out = np.empty((rows, columns, 2 * LANES), np.float32)
    sum_time(
        horizon, normal, heights, 300.0, directions(), np.zeros(3), knots,
        tables.reshape(-1, 2 * LANES), np.minimum(lit, KNOTS - 1), out,
    )  # fmt: skip
    assert (out[0, 1] == 0.0).all()
    for r, c in np.argwhere(np.isfinite(heights)):
        place = np.clip(np.interp(heights[r, c] + 300.0, knots, np.arange(3.0)), 0.0, 2.0)
        k = min(int(place), 1)
        mixed = tables[k] + (place - k) * (tables[k + 1] - tables[k])
        want = np.zeros(2 * LANES)
        for a, (sine, cosine) in enumerate(directions()):
            plane = -(normal[0, r, c] * sine + normal[1, r, c] * cosine) / normal[2, r, c]
            at = np.sin(np.arctan(max(horizon[a, r, c], plane)))
            want += [np.interp(at, np.linspace(0.0, 1.0, KNOTS), lane) for lane in mixed[a].T]
        np.testing.assert_allclose(out[r, c], want, rtol=2e-4, atol=2e-3)
