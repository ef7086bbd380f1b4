"""Time in the sun: the look-up against plain sums, the walk against looking at every minute."""

from itertools import pairwise

import numpy as np
import pytest

from terrasol.kernels.sunshine import LANES, fill_time, sum_time, walk_days

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


# The walk


def a_day(seed, azimuths=AZIMUTHS, moments=721):
    """A made-up sun that rises, swings about and sets, moment by moment."""
    dice = np.random.default_rng(seed)
    x = np.linspace(0.0, 1.0, moments)
    low = dice.uniform(-0.6, 0.3)
    tangent = (
        low + dice.uniform(0.5, 1.5) * np.sin(np.pi * x) + 0.1 * np.sin(dice.uniform(9, 20) * x)
    )
    turn = dice.uniform(0.0, azimuths) + azimuths * dice.uniform(0.3, 1.0) * x
    turn += 0.3 * np.sin(17.0 * x)  # runs to and fro
    sector = np.floor(turn).astype(np.int64)
    angle = 2.0 * np.pi * turn / azimuths
    suns = np.stack([tangent, turn - sector, np.sin(angle), np.cos(angle)], axis=-1)
    return suns.astype(np.float32), sector % azimuths


def runs_of(suns, sectors):
    """All moments, in runs of one sector."""
    edges = np.r_[0, np.flatnonzero(np.diff(sectors)) + 1, sectors.size]
    runs = [(a, b, sectors[a]) for a, b in pairwise(edges)]
    ranges = [
        (suns[a:b, 0].min(), suns[a:b, 0].max(),
         *(1.0001 * np.abs(np.diff(suns[a:b, i])).max(initial=1e-6) for i in (0, 1)))
        for a, b, _ in runs
    ]  # fmt: skip
    return np.array([*runs, (0, 0, 0)]), np.array([*ranges, (0, 0, 0, 0)], np.float32)


def plainly(suns, sectors, rim, normal, least_gap):
    """Clearance at every moment; crossings straight between."""
    left, right = rim[sectors], rim[(sectors + 1) % rim.size]
    terrain = left + suns[:, 1] * (right - left)
    plane = -(normal[0] * suns[:, 2] + normal[1] * suns[:, 3]) / normal[2]
    clearance = suns[:, 0] - np.maximum(terrain, plane)
    up = clearance > 0.0
    if not up.any():
        return np.nan, np.nan, 0.0, np.nan
    change = np.flatnonzero(np.diff(up.astype(int)))
    when = change + clearance[change] / (clearance[change] - clearance[change + 1])
    starts = np.r_[[0.0] if up[0] else [], when[~up[change]]]
    ends = np.r_[when[up[change]], [suns.shape[0] - 1.0] if up[-1] else []]
    gaps = starts[1:] - ends[:-1]
    return starts[0], ends[-1], (ends - starts).sum(), (gaps >= least_gap).sum()


def test_nothing_is_missed_by_what_is_passed_over():
    rows, columns, count = 4, 33, 12
    horizon, normal = ground(rows, columns)
    days = [a_day(seed) for seed in range(count)]
    lists = [runs_of(*day) for day in days]
    longest = max(len(runs) for runs, _ in lists)
    runs = np.zeros((count, longest, 3), np.int64)
    ranges = np.zeros((count, longest, 4), np.float32)
    for i, (own, own_ranges) in enumerate(lists):
        runs[i, : len(own)], ranges[i, : len(own)] = own, own_ranges
    suns, sectors = (np.stack(parts) for parts in zip(*days, strict=True))
    out = np.empty((rows, count, columns, 4), np.float32)
    walk_days(horizon, normal, directions(), np.zeros(3), suns, sectors, runs, ranges, 5.0, out)
    assert np.isnan(out[0, :, 1]).all()
    seen = set()
    for r, d, c in np.ndindex(rows, count, columns):
        if (r, c) != (0, 1):
            want = plainly(suns[d], sectors[d], horizon[:, r, c], normal[:, r, c], 5.0)
            np.testing.assert_allclose(out[r, d, c], want, atol=2e-2)
            seen.add(want[3])
    assert {0, 1, 2} <= {n for n in seen if n == n}
    assert any(n != n for n in seen)


def test_latitude_tilts_the_horizon():
    """A cell to the north sees the south lower by the angle: the same as a higher horizon."""
    azimuths = 64
    flat = np.array([0.0, 0.0, 1.0], np.float32).reshape(3, 1, 1)
    x = np.linspace(-0.4, 0.4, 201)
    turn = azimuths * (0.5 + x / (2.0 * np.pi))
    sector = np.floor(turn).astype(np.int64)
    angle = np.pi + x
    suns = np.stack(
        [0.5 - x**2, turn - sector, np.sin(angle), np.cos(angle)], axis=-1
    ).astype(np.float32)  # fmt: skip
    runs, ranges = runs_of(suns, sector)

    def walked(rim, tilt):
        horizon = np.asarray(rim, np.float32).reshape(azimuths, 1, 1)
        out = np.empty((1, 1, 1, 4), np.float32)
        walk_days(horizon, flat, directions(azimuths), np.array([tilt, 0.0, 0.0]), suns[None],
                  sector[None], runs[None], ranges[None], 1.0, out)  # fmt: skip
        return out[0, 0, 0]

    rim = np.full(azimuths, 0.45)
    raised = rim + 0.01 * -directions(azimuths)[:, 1] * (1.0 + rim**2)
    np.testing.assert_allclose(walked(rim, 0.01), walked(raised, 0.0), atol=0.01)
    assert walked(rim, 0.01)[2] < walked(rim, 0.0)[2] - 5.0
