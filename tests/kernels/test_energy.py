"""From sums of light to parts and months, against plain numpy."""

import numpy as np
import pytest

from terrasol.kernels.beam import LANES
from terrasol.kernels.energy import parts_of_light


def made_up(months, split, seed=1, shape=(5, 23), nodes=(4, 6)):
    """Everything that `parts_of_light` reads, at random."""
    dice = np.random.default_rng(seed)
    lanes = months * 2 if split else months + 1
    f = np.float32
    case = {
        "sums": dice.uniform(1.0, 2.0, (-(-lanes // LANES), shape[0] * shape[1], LANES)).astype(f),
        "months": months,
        "heights": dice.uniform(-900.0, 900.0, shape).astype(f),
        "datum": 700.0,
        "knot_height": np.array([300.0, 450.0, 800.0, 1000.0]),
        "even": dice.uniform([[[1.0]], [[-0.2]]], [[[2.0]], [[0.5]]], (2, months, 4)).astype(f),
        "even_change": dice.uniform(-9.0, 9.0, (2, months, 4)).astype(f),
        "tilt": np.array([-0.01, 0.004, -0.0003]),
        "view": dice.uniform(0.0, 1.0, shape).astype(f),
        "band": dice.uniform(0.0, 1.0, shape).astype(f),
        "around": dice.uniform(1.0, 3.0, (months, *nodes)).astype(f),
        "node": np.array([-0.7, 0.4]),
        "node_step": 3,
        "albedo": dice.uniform(0.0, 1.0, months).astype(f),
        "factor": dice.uniform(0.5, 2.0, shape).astype(f),
    }
    for p in range(months, lanes):  # circumsolar light alone is part of the direct light
        case["sums"][p // LANES, :, p % LANES] *= f(0.3)
    case["view"][2, 3] = case["factor"][2, 3] = np.nan
    return case


def worked_out(case, split):
    """Call the kernel: whole period, monthly total, monthly parts."""
    shape, months = case["view"].shape, case["months"]
    year = np.full((4, *shape), 7.0, np.float32)
    total = np.full((months, *shape), 7.0, np.float32)
    parts = np.full((3, months if split else 0, *shape), 7.0, np.float32)
    parts_of_light(*case.values(), year, total, parts)
    return year, total, parts


def node_values(around, node, node_step, shape):
    """Bilinear between nodes, constant beyond them; (months, rows, columns)."""
    rows = np.clip(node[0] + np.arange(shape[0]) / node_step, 0, around.shape[1] - 1)
    columns = np.clip(node[1] + np.arange(shape[1]) / node_step, 0, around.shape[2] - 1)
    out = np.empty((around.shape[0], *shape))
    for m, plane in enumerate(around.astype(np.float64)):
        by_row = np.stack(
            [np.interp(rows, np.arange(plane.shape[0]), plane[:, j]) for j in range(plane.shape[1])]
        )
        for i in range(shape[0]):
            out[m, i] = np.interp(columns, np.arange(plane.shape[1]), by_row[:, i])
    return out


def plainly(case):
    """Direct with glow, glow (one or a month), even sky light and reflected, in float64."""
    months, shape = case["months"], case["view"].shape
    sums = case["sums"].astype(np.float64)
    lanes = np.concatenate(list(sums), axis=1)  # cells, lanes one after the other
    lanes = lanes.T.reshape(-1, *shape)
    scale, view = case["factor"].astype(np.float64), case["view"].astype(np.float64)
    z = case["heights"].astype(np.float64) + case["datum"]
    even = np.empty((months, *shape))
    rows, columns = np.indices(shape)
    north = case["tilt"] @ np.array([np.ones(z.size), rows.ravel(), columns.ravel()])
    for m in range(months):
        dome, low = (
            np.interp(z, case["knot_height"], case["even"][i, m])
            + north.reshape(shape) * np.interp(z, case["knot_height"], case["even_change"][i, m])
            for i in range(2)
        )
        even[m] = scale * np.maximum(view * dome + case["band"] * low, 0.0)
    lit = node_values(case["around"], case["node"], case["node_step"], shape)
    back = scale * case["albedo"][:, None, None] * (1.0 - view) * lit
    return scale * lanes[:months], scale * lanes[months:], even, back


@pytest.mark.parametrize("months", [1, 12, 14, 16, 33])
def test_whole_period_and_months(months):
    case = made_up(months, split=False, seed=months)
    year, total, parts = worked_out(case, split=False)
    direct, glow, even, back = plainly(case)
    assert parts.shape[1] == 0
    np.testing.assert_allclose(total, direct + even + back, rtol=3e-6)
    np.testing.assert_allclose(year[0], (direct + even + back).sum(axis=0), rtol=1e-5)
    np.testing.assert_allclose(year[1], direct.sum(axis=0) - glow[0], rtol=1e-5, atol=1e-5)
    np.testing.assert_allclose(year[2], even.sum(axis=0) + glow[0], rtol=1e-5)
    np.testing.assert_allclose(year[3], back.sum(axis=0), rtol=1e-5)


@pytest.mark.parametrize("months", [1, 8, 12, 14])
def test_parts_of_each_month(months):
    case = made_up(months, split=True, seed=100 + months)
    year, total, parts = worked_out(case, split=True)
    direct, glow, even, back = plainly(case)
    glow = glow[:months]
    np.testing.assert_allclose(parts[0], direct - glow, rtol=1e-5, atol=1e-5)
    np.testing.assert_allclose(parts[1], even + glow, rtol=1e-5)
    np.testing.assert_allclose(parts[2], back, rtol=1e-5)
    np.testing.assert_allclose(total, direct + even + back, rtol=3e-6)
    np.testing.assert_allclose(year[1:], parts.sum(axis=1), rtol=1e-5, atol=1e-4)


@pytest.mark.parametrize("split", [False, True])
def test_voids_are_void_in_every_layer_and_nothing_else_is(split):
    case = made_up(3, split)
    for layer in worked_out(case, split):
        void = np.isnan(layer)
        assert void[..., 2, 3].all()
        void[..., 2, 3] = False
        assert not void.any()


@pytest.mark.parametrize("split", [False, True])
def test_parts_add_up_even_where_a_look_up_errs(split):
    # between two knots of its table a look-up may come out a little below 0, or with less
    # direct than circumsolar light; no part of the answer may
    case = made_up(5, split)
    for p in range(5):
        case["sums"][p // LANES, :, p % LANES] -= np.float32(1.4)
    case["even"][1], case["even_change"][:] = 0.1, 0.0
    year, total, parts = worked_out(case, split)
    known = np.isfinite(case["view"])
    for layer in (year, total, parts):
        assert (layer[..., known] >= 0.0).all()
    assert (year[1, known] == 0.0).any()
    np.testing.assert_allclose(year[0], year[1:].sum(axis=0), rtol=1e-5)
    np.testing.assert_allclose(year[0], total.sum(axis=0), rtol=1e-5)
    if split:
        np.testing.assert_allclose(parts.sum(axis=0), total, rtol=1e-5, atol=1e-5)


def test_one_node_serves_every_cell():
    case = made_up(2, split=False, nodes=(1, 1))
    year, _, _ = worked_out(case, split=False)
    scale = case["factor"] * (1.0 - case["view"])
    want = (case["albedo"] * case["around"][:, 0, 0]).sum() * scale
    np.testing.assert_allclose(year[3], want, rtol=1e-5)


def test_factor_scales_every_part():
    case = made_up(4, split=True)
    once = worked_out(case, split=True)
    case["factor"] = case["factor"] * np.float32(2.0)
    for one, two in zip(once, worked_out(case, split=True), strict=True):
        np.testing.assert_allclose(two, 2.0 * one, rtol=1e-6, atol=1e-6)
