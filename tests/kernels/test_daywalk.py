"""The walk along a day's sun against looking at every minute, and lines of sight."""

from itertools import pairwise

import numpy as np
import pytest
from reference.ray_march import march

from terrasol.ground.sightline import Outlooks, highest_in_squares
from terrasol.kernels.daywalk import TILE, WIDE, sight, walk_days

AZIMUTHS = 16


def directions(azimuths=AZIMUTHS):
    angle = 2.0 * np.pi * np.arange(azimuths) / azimuths
    return np.stack([np.sin(angle), np.cos(angle)], axis=1).astype(np.float32)


def ground(rows, columns, seed=2):
    """Random horizons and normals, and a void cell."""
    dice = np.random.default_rng(seed)
    horizon = np.maximum(dice.uniform(-0.3, 0.7, (AZIMUTHS, rows, columns)), 0.0)
    normal = dice.normal(0.0, 0.4, (3, rows, columns))
    normal[2] = 1.0
    normal /= np.linalg.norm(normal, axis=0)
    normal[:, 0, 1] = np.nan
    return horizon.astype(np.float32), normal.astype(np.float32)


def no_ground(rows, columns):
    """What the walk takes where no ground is known."""
    none = Outlooks.none((rows, columns))
    return none.ground, none.origin, none.eyes, none.grid, none.bow, none.bend, none.beyond


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
    suns = np.stack(
        [tangent, turn - sector, np.sin(angle), np.cos(angle), np.ones_like(x)], axis=-1
    )
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
    walk_days(
        horizon, normal, directions(), np.zeros(3), suns, sectors, runs, ranges, 5.0,
        *no_ground(rows, columns), out,
    )  # fmt: skip
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
        [0.5 - x**2, turn - sector, np.sin(angle), np.cos(angle), np.ones_like(x)], axis=-1
    ).astype(np.float32)  # fmt: skip
    runs, ranges = runs_of(suns, sector)

    def walked(rim, tilt):
        horizon = np.asarray(rim, np.float32).reshape(azimuths, 1, 1)
        out = np.empty((1, 1, 1, 4), np.float32)
        walk_days(horizon, flat, directions(azimuths), np.array([tilt, 0.0, 0.0]), suns[None],
                  sector[None], runs[None], ranges[None], 1.0, *no_ground(1, 1), out)  # fmt: skip
        return out[0, 0, 0]

    rim = np.full(azimuths, 0.45)
    raised = rim + 0.01 * -directions(azimuths)[:, 1] * (1.0 + rim**2)
    np.testing.assert_allclose(walked(rim, 0.01), walked(raised, 0.0), atol=0.01)
    assert walked(rim, 0.01)[2] < walked(rim, 0.0)[2] - 5.0


# Lines of sight

BEND = 0.87 / (2.0 * 6_371_000.0)


def squares(heights):
    """The ground with its highest points."""
    heights = np.ascontiguousarray(heights, np.float32)
    tiles = highest_in_squares(heights, 1 << TILE)
    return heights, tiles, highest_in_squares(tiles, 1 << (WIDE - TILE))


def rough(rows=150, columns=170, seed=5):
    """Rough ground, its cells no smoother than real ones."""
    dice = np.random.default_rng(seed)
    row, column = np.mgrid[:rows, :columns]
    z = 90.0 * np.sin(row / 11.0) * np.cos(column / 13.0) + 40.0 * np.sin((row + column) / 5.0)
    return 800.0 + z + dice.normal(0.0, 4.0, z.shape)


def seen(ground, row, column, azimuth, cell=(20.0, 20.0), hint=0.0, best=0.0, enough=np.inf):
    """Tangent along a line over a grid of metric cells that lies to the north."""
    grid = np.array([0.0, -1.0 / cell[1], 1.0 / cell[0], 0.0])
    place = float(row), float(column), float(ground[0][row, column])
    east, north = np.sin(azimuth), np.cos(azimuth)
    return sight(
        ground, place, grid, np.zeros((2, 3)), BEND, east, north, hint, best, enough
    )  # fmt: skip


def some_rays(count, shape, seed=6):
    """Cells away from the rim, where the march ends half a cell sooner, and azimuths."""
    dice = np.random.default_rng(seed)
    cells = [dice.integers(4, size - 4, count) for size in shape]
    return zip(*cells, dice.uniform(0.0, 2.0 * np.pi, count), strict=True)


@pytest.mark.parametrize("cell", [(20.0, 20.0), (14.0, 30.0)])
def test_a_line_of_sight_is_that_of_a_dense_march(cell):
    """A march at 1/400 of a cell finds no more, and less by what it steps over."""
    heights = rough()
    ground = squares(heights)
    gain = []
    for row, column, azimuth in some_rays(400, heights.shape):
        down, right = -np.cos(azimuth) / cell[1], np.sin(azimuth) / cell[0]
        metres = 1.0 / max(abs(down), abs(right))
        want = march(
            ground[0].astype(float), row, column, down * metres, right * metres, metres,
            0.5 / BEND, 0.0025, 1.0,
        )  # fmt: skip
        best, away = seen(ground, row, column, azimuth, cell)
        found = np.array([row + away * down, column + away * right])
        # the march ends at the outer centres, the line half a cell beyond
        if ((found >= 0.0) & (found <= np.array(heights.shape) - 1.0)).all():
            gain.append(best - max(want, 0.0))
    assert len(gain) > 370
    assert min(gain) > -1e-9
    assert max(gain) < 2e-4


def test_hints_and_enough_change_nothing_but_the_work():
    heights = rough()
    heights[60:64, 70:90] = np.nan
    ground = squares(heights)
    for row, column, azimuth in some_rays(300, heights.shape, seed=7):
        if np.isnan(heights[row, column]):
            continue
        best, away = seen(ground, row, column, azimuth)
        for hint in (1.0, 300.0, away, 1e5):
            found, _ = seen(ground, row, column, azimuth, hint=hint)
            assert found == pytest.approx(best, abs=1e-12)  # rounding within a patch
        assert seen(ground, row, column, azimuth, best=best + 1e-6) == (best + 1e-6, 0.0)
        if best > 0.0:
            assert seen(ground, row, column, azimuth, best=best - 1e-6)[0] == pytest.approx(
                best, abs=1e-12
            )
            assert best >= seen(ground, row, column, azimuth, enough=0.5 * best)[0] > 0.5 * best


def test_a_void_hides_nothing_and_what_stands_behind_it_does():
    heights = np.zeros((9, 80))
    heights[:, 60] = 100.0
    heights[:, 20:59] = np.nan
    ground = squares(heights)
    assert seen(ground, 4, 4, np.pi / 2.0)[0] == pytest.approx(100 / 1120 - 1120 * BEND, abs=1e-6)
    heights[:, 60] = np.nan
    assert seen(squares(heights), 4, 4, np.pi / 2.0)[0] == 0.0


def test_a_dome_between_crossings_is_seen():
    """A saddle's crest lies inside a patch: the surface is x y there, greatest on the diagonal."""
    heights = np.full((40, 40), -50.0)
    heights[20, 20] = heights[21, 21] = 0.0
    heights[20, 21] = heights[21, 20] = 40.0
    tangent, _ = seen(squares(heights), 30, 11, np.pi / 4.0)
    # from (30, 11) the diagonal passes (21, 20) and (20, 21), and the middle between, 20 m high
    assert tangent == pytest.approx((40.0 + 50.0) / (9.0 * 20.0 * np.sqrt(2.0)), abs=1e-4)
    turned, _ = seen(squares(heights[:, ::-1]), 30, 28, -np.pi / 4.0 - 0.0)
    assert turned == pytest.approx(tangent, abs=1e-6)
