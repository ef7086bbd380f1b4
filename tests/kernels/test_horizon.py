"""Near field, far field and their merger, each against the plain definition of the horizon.

tan h = max over D of (z(D) - z0) / D - D / (2 R'), R' = R / (1 - k): geometry of a sphere
(Dozier, Bruno and Downey 1981 give the flat case).
"""

import numpy as np
import pytest

from terrasol.kernels.horizon import (
    _hull_candidates,
    far_field,
    merge_far,
    near_field,
)

HALF_CURVE = (1.0 - 0.13) / (2.0 * 6_371_000.0)
SKIP = 20


def rough_line(seed, length=500, step=30.0):
    """A made-up profile [m]: a random walk, smoothed so that ridges are some cells wide."""
    dice = np.random.default_rng(seed)
    walk = np.cumsum(dice.normal(0.0, 0.3 * step, length + 8))
    return np.convolve(walk, np.full(9, 1.0 / 9.0), "valid").astype(np.float32)


def sights(line, step, half_curve, skip=SKIP):
    """Tangent from every cell (row) to every cell before it (column), by the definition.

    Those of cells less than `skip` steps away, of cells further away, and the distances [m].
    """
    x = np.arange(line.size) * step
    distance = x[:, None] - x[None, :]
    height = line.astype(np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):
        tangent = (height[None, :] - height[:, None]) / distance - distance * half_curve
    steps = np.round(distance / step)
    tangent = np.where(np.isnan(tangent), -np.inf, tangent)
    near = np.where((steps > 0) & (steps < skip), tangent, -np.inf)
    far = np.where(steps >= skip, tangent, -np.inf)
    return near, far, distance


def sweep_line(line, step, half_curve, skip=SKIP, datum=0.0):
    """One line through `far_field`, a query a cell: tangent, distance and void flag."""
    raster = np.ascontiguousarray(np.tile(line, (3, 1)))
    height = np.zeros((line.size, 3), np.float32)
    away = np.zeros_like(height)
    void = np.zeros(height.shape, np.uint8)
    far_field(
        raster.reshape(-1), raster[:0].reshape(-1), 0, 1, line.size, line.size, 3, 0.0, step,
        half_curve, skip, 1, 0, 0, 1, datum, height, away, void,
    )  # fmt: skip
    own = line.astype(np.float64) - datum
    tangent = (height[:, 1].astype(np.float64) - own) / away[:, 1] - away[:, 1] * half_curve
    assert (height[:, 0] == height[:, 1]).all()
    assert (height[:, 2] == height[:, 1]).all()
    return tangent, away[:, 1], void[:, 1]


@pytest.mark.parametrize("step", [1.0, 30.0, 1000.0])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_far_field_finds_the_point_that_bounds_the_view(seed, step):
    line = rough_line(seed, step=step)
    near, far, distance = sights(line, step, HALF_CURVE)
    got, away, void = sweep_line(line, step, HALF_CURVE)
    want = np.maximum(far.max(axis=1), near.max(axis=1))
    shown = far.max(axis=1) > np.maximum(near.max(axis=1), 0.0)
    assert shown.sum() > 50
    # heights and distances pass through float32
    np.testing.assert_allclose(np.maximum(got, near.max(axis=1))[SKIP:], want[SKIP:], atol=1e-6)
    best = np.take_along_axis(distance, far.argmax(axis=1)[:, None], axis=1)[:, 0]
    np.testing.assert_allclose(away[shown], best[shown], rtol=1e-6)
    assert (void == 0).all()


def test_curvature_lowers_a_far_ridge_below_a_nearer_one():
    # 300 m at 60 km or 150 m at 32 km: the far one is higher on a flat Earth only
    line = np.zeros(2001, np.float32)
    line[0], line[934] = 300.0, 150.0
    flat, flat_away, _ = sweep_line(line, 30.0, 0.0)
    round_, round_away, _ = sweep_line(line, 30.0, HALF_CURVE)
    assert flat_away[-1] == pytest.approx(60_000.0)
    assert flat[-1] == pytest.approx(300.0 / 60_000.0)
    assert round_away[-1] == pytest.approx(31_980.0)
    # drop over the distance = D / (2 R'), with k = 0.13 (Gauss 1826)
    assert round_[-1] == pytest.approx(150.0 / 31_980.0 - 31_980.0 * 0.87 / 12_742_000.0, rel=1e-6)


def test_heights_far_above_their_datum_lose_nothing():
    line = rough_line(4) + np.float32(4000.0)
    near, far, _ = sights(line, 30.0, HALF_CURVE)
    got, _, _ = sweep_line(line, 30.0, HALF_CURVE, datum=4000.0)
    want = np.maximum(far.max(axis=1), near.max(axis=1))
    np.testing.assert_allclose(np.maximum(got, near.max(axis=1))[SKIP:], want[SKIP:], atol=1e-6)


def test_nothing_in_view_ends_well_below_the_eye():
    got, away, _ = sweep_line(rough_line(5), 30.0, HALF_CURVE)
    assert (got[:SKIP] < -0.2).all()
    np.testing.assert_allclose(away[:SKIP], SKIP * 30.0)


def test_voids_hide_nothing_and_are_told():
    line = rough_line(6)
    line[100:104] = line[230:300] = np.nan
    near, far, _ = sights(line, 30.0, HALF_CURVE)
    got, away, void = sweep_line(line, 30.0, HALF_CURVE)
    known = np.flatnonzero(np.isfinite(line))
    known = known[known >= SKIP]
    want = np.maximum(far.max(axis=1), near.max(axis=1))
    np.testing.assert_allclose(np.maximum(got, near.max(axis=1))[known], want[known], atol=1e-6)
    for i in known:
        between = np.isnan(line[i - round(away[i] / 30.0) : i]).any()
        assert void[i] == between


def candidates(line, reach, bend=0.0):
    """Indices of the points that are left after sifting over `reach` steps, and of voids."""
    low = np.empty(line.size, np.uint8)
    points, voids = np.empty(line.size, np.int64), np.empty(line.size, np.int64)
    kept, holes = _hull_candidates(line, reach, bend, low, points, voids)
    return points[:kept], voids[:holes]


@pytest.mark.parametrize("half_curve", [0.0, HALF_CURVE])
def test_sifting_drops_points_but_no_horizon(half_curve):
    for seed in range(20):
        line = rough_line(seed, 300)
        near, far, _ = sights(line, 30.0, half_curve)
        got, _, _ = sweep_line(line, 30.0, half_curve)
        want = np.maximum(near.max(axis=1), far.max(axis=1))[SKIP:]
        np.testing.assert_allclose(np.maximum(got, near.max(axis=1))[SKIP:], want, atol=1e-6)
        assert candidates(line, SKIP - 1, 900.0 * half_curve)[0].size < line.size / 2
        assert candidates(line, 0)[0].size == line.size


def test_sifting_keeps_a_slope_that_only_curvature_makes_a_ridge():
    # A fan of 57 km that steepens by 2e-8 a metre hollows out under its chords, but seven times
    # less than the Earth bulges. From the plain at its foot the sight touches its middle.
    along = np.arange(2000) * 30.0
    up = np.maximum(along[-1] - 3000.0 - along, 0.0)
    line = (0.05 * up + 1e-8 * up**2).astype(np.float32)
    near, far, _ = sights(line, 30.0, HALF_CURVE)
    got, _, _ = sweep_line(line, 30.0, HALF_CURVE)
    want = np.maximum(near.max(axis=1), far.max(axis=1))[SKIP:]
    np.testing.assert_allclose(np.maximum(got, near.max(axis=1))[SKIP:], want, atol=1e-5)


def test_voids_never_sift_their_neighbours():
    line = np.array([0.0, 9.0, np.nan, 8.0, 0.0, 7.0, 1.0, np.nan], np.float32)
    points, voids = candidates(line, 3)
    assert points.tolist() == [0, 1, 3, 5, 6]
    assert voids.tolist() == [2, 7]


def test_slanting_lines_mix_the_two_cells_they_pass():
    # a ridge of many heights across the lines, which cross it half-way between two cells
    dice = np.random.default_rng(7)
    z = np.zeros((80, 60), np.float32)
    z[11] = dice.uniform(100.0, 200.0, 60)
    z[11, 40] = np.nan
    height = np.zeros((20, 15), np.float32)
    away, void = np.zeros_like(height), np.zeros(height.shape, np.uint8)
    far_field(
        z.reshape(-1), z[:0].reshape(-1), 0, 60, 1, 80, 60, 0.5, 10.0, 0.0, SKIP, 1, 0, 0, 4, 0.0,
        height, away, void,
    )  # fmt: skip
    met = 0
    for q, n in np.ndindex(20, 15):
        place = 4 * n - 0.5 * (4 * q - 11)
        if 4 * q < 11 + SKIP or not 1.0 < place < 58.0:
            continue
        want = z[11, int(place) : int(place) + 2].mean()
        if np.isnan(want):
            assert height[q, n] == 0.0  # level ground; a void hides nothing
            assert void[q, n] == 1
        else:
            assert height[q, n] == pytest.approx(want, rel=1e-6)
            assert void[q, n] == 0
        met += 1
    assert met > 80


@pytest.mark.parametrize("gap", [1, 3])
def test_slanting_sweep_sees_along_its_own_direction(gap):
    # lines that drift by 0.6 cells a step towards the eye, and a ridge across them
    step, rows, columns = 12.0, 120, 90
    z = np.zeros((rows, columns), np.float32)
    z[10] = 80.0
    height = np.zeros((30, 23), np.float32)
    away, void = np.zeros_like(height), np.zeros(height.shape, np.uint8)
    far_field(
        z.reshape(-1), z[:0].reshape(-1), 0, columns, 1, rows, columns, 0.6, step, 0.0, SKIP, gap,
        0, 0, 4, 0.0, height, away, void,
    )  # fmt: skip
    query, node = np.mgrid[8:30, 0:22]
    height, away = height[8:, :22], away[8:, :22]
    passed = 4 * node - 0.6 * (4 * query - 10)  # where the line through the node met the ridge
    inside = (passed > gap) & (passed < columns - 1 - gap)
    assert inside.sum() > 150
    np.testing.assert_allclose(height[inside], 80.0, rtol=1e-6)
    np.testing.assert_allclose(away[inside], (4 * query - 10)[inside] * step, rtol=1e-6)
    beside = passed < -2 * gap
    assert beside.sum() > 20
    assert (height[beside] <= 0.0).all()  # level ground or nothing


def test_diagonal_sweep_is_exact_on_the_cells_it_meets():
    dice = np.random.default_rng(8)
    z = np.cumsum(dice.normal(0.0, 8.0, (70, 70)), axis=1).astype(np.float32)
    step = 30.0 * np.sqrt(2.0)
    height = np.zeros((70, 70), np.float32)
    away, void = np.zeros_like(height), np.zeros(height.shape, np.uint8)
    far_field(
        z.reshape(-1), z[:0].reshape(-1), 0, 70, 1, 70, 70, 1.0, step, HALF_CURVE, SKIP, 1,
        0, 0, 1, 0.0, height, away, void,
    )  # fmt: skip
    for row, column in [(69, 69), (60, 45), (50, 50), (69, 40), (45, 69)]:
        line = np.array([z[row - i, column - i] for i in range(min(row, column) + 1)][::-1])
        near, far, _ = sights(line, step, HALF_CURVE)
        got = (height[row, column] - z[row, column]) / away[row, column]
        got -= away[row, column] * HALF_CURVE
        want = max(near[-1].max(), far[-1].max())
        assert max(got, near[-1].max()) == pytest.approx(want, abs=1e-5)


@pytest.mark.parametrize("voids", [0, 60])
def test_near_field_is_the_highest_of_its_steps(voids):
    dice = np.random.default_rng(9)
    pad, rows, columns, azimuths, steps = 5, 6, 11, 3, 8
    heights = dice.normal(0.0, 10.0, (2 * rows + 2 * pad + 1, columns + 2 * pad)).astype(np.float32)
    heights.flat[dice.permutation(heights.size)[:voids]] = np.nan
    shift = dice.integers(-pad, pad + 1, (azimuths, steps, 4))
    weight = dice.uniform(0.0, 0.1, (azimuths, steps, 4)).astype(np.float32)
    out = np.empty((azimuths, rows, columns), np.float32)
    first, row_step = 2, 2
    near_field(heights, heights, pad, first, row_step, shift, weight, out)
    z = heights.astype(np.float64)
    for a, r, c in np.ndindex(out.shape):
        i, j = first + r * row_step + pad, c + pad
        best = 0.0
        for (row1, column1, row2, column2), (w1, w2, w3, drop) in zip(
            shift[a], weight[a].astype(np.float64), strict=True
        ):
            one, other = z[i + row1, j + column1], z[i + row2, j + column2]
            tangent = w1 * one + w2 * other - w3 * z[i, j] - drop
            best = max(best, -np.inf if np.isnan(tangent) else tangent)
        assert out[a, r, c] == pytest.approx(best, abs=1e-5)
    assert (out > 0.0).any()


@pytest.mark.parametrize("row_step", [1, 3])
def test_merger_sees_the_far_point_from_the_cells_own_height(row_step):
    dice = np.random.default_rng(10)
    pad, rows, columns, every, first, lift = 3, 5, 14, 4, 6, -70.0
    heights = dice.normal(0.0, 20.0, (20 + 2 * pad, columns + 2 * pad)).astype(np.float32)
    heights[first + pad + 3, pad + 4] = np.nan
    height = dice.uniform(0.0, 200.0, (2, 7, 6)).astype(np.float32)
    away = dice.uniform(500.0, 50_000.0, (2, 7, 6)).astype(np.float32)
    near = dice.uniform(0.0, 0.02, (2, rows, columns)).astype(np.float32)
    out = near.copy()
    merge_far(heights, pad, first, row_step, every, height, away, lift, HALF_CURVE, out)
    for a, r, c in np.ndindex(out.shape):
        row = first + r * row_step
        (n, v), (m, u) = divmod(row, every), divmod(c, every)
        v, u = v / every, u / every
        top, distance = (
            (1 - v) * ((1 - u) * f[a, n, m] + u * f[a, n, m + 1])
            + v * ((1 - u) * f[a, n + 1, m] + u * f[a, n + 1, m + 1])
            for f in (height.astype(np.float64), away.astype(np.float64))
        )
        own = float(heights[row + pad, c + pad])
        far = (top - lift - own) / distance - distance * HALF_CURVE
        want = near[a, r, c] if np.isnan(far) else max(near[a, r, c], far)
        assert out[a, r, c] == pytest.approx(want, abs=2e-6)
    assert (out > near).any()
    assert (out == near).any()
