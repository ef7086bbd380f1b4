"""The moment kernel against the same sums written out plainly."""

import numpy as np
import pytest

from terrasol.kernels.moment import (
    FULL,
    RUN,
    decode_horizon,
    direct_light,
    encode_horizon,
    parts_of_steps,
)
from terrasol.light.series import bends

CELLS = RUN + 77  # a whole run and a broken one
AZIMUTHS = 16


@pytest.fixture(scope="module")
def random():
    return np.random.default_rng(7)


def test_code_holds_the_sine_to_half_a_step():
    tangent = np.tan(np.radians(np.linspace(0.0, 89.0, 5000, dtype=np.float32)))[None, None]
    code = np.empty(tangent.shape, np.uint16)
    encode_horizon(tangent, code)
    sine = np.sin(np.arctan(tangent.astype(np.float64)))
    assert np.abs(code / FULL - sine).max() < 0.51 / FULL
    back = np.empty(tangent[0].shape, np.float32)
    decode_horizon(code[0], back)
    low = tangent[0] < np.tan(np.radians(73.0))
    gap = np.degrees(np.arctan(back) - np.arctan(tangent[0]))
    assert np.abs(gap[low]).max() < 0.0016
    assert np.isfinite(back).all()


def test_code_of_a_void_and_of_the_zenith():
    code = np.empty((1, 1, 3), np.uint16)
    encode_horizon(np.array([[[np.nan, 1e9, -0.2]]], np.float32), code)
    assert code.tolist() == [[[0, 65535, 0]]]


def made(random, cells=CELLS, moments=9, knots=4):
    """Arguments of `direct_light` in an order of its own."""
    slope = random.uniform(0.0, 1.2, cells)
    aspect = random.uniform(0.0, 2 * np.pi, cells)
    normal = np.stack(
        [np.sin(slope) * np.sin(aspect), np.sin(slope) * np.cos(aspect), np.cos(slope)]
    ).astype(np.float32)
    normal[:, 5] = np.nan
    elevation = random.uniform(0.02, 1.0, moments)
    azimuth = random.uniform(0.0, 2 * np.pi, moments)
    turn = azimuth / (2 * np.pi) * AZIMUTHS
    left = turn.astype(np.int64)
    sun = np.stack(
        [
            np.cos(elevation) * np.sin(azimuth), np.cos(elevation) * np.cos(azimuth),
            np.sin(elevation), (1 - turn + left) / FULL, (turn - left) / FULL,
            np.full(moments, 120.0), random.uniform(-5, 5, moments),
        ], -1,
    ).astype(np.float32)  # fmt: skip
    heights = np.linspace(200.0, 2000.0, knots)
    return {
        "code": random.integers(0, 40000, (AZIMUTHS, cells)).astype(np.uint16),
        "normal": normal,
        "offset": random.uniform(-1e-2, 1e-2, (2, cells)).astype(np.float32),
        "z": random.uniform(200.0, 2000.0, cells).astype(np.float32),
        "heights": heights,
        "first": np.array([0, 4, 4, 9]),
        "left": left,
        "sun": sun,
        "strength": random.uniform(0.0, 900.0, (moments, 2, knots)),
    }


def plain_direct(a):
    out = np.zeros((2, a["first"].size - 1, a["z"].size))
    for t in range(out.shape[1]):
        for m in range(a["first"][t], a["first"][t + 1]):
            s = a["sun"][m].astype(float)
            rise = a["offset"][0] * s[1] + a["offset"][1] * s[0]
            rim = a["code"][a["left"][m]] * s[3] + a["code"][(a["left"][m] + 1) % AZIMUTHS] * s[4]
            part = np.clip(0.5 + (s[2] + rise - rim) * s[5], 0.0, 1.0)
            facing = np.maximum(s[:3] @ a["normal"].astype(float), 0.0)
            lit = np.nan_to_num(part * facing * (1.0 + s[6] * rise))
            for i in range(2):
                out[i, t] += lit * np.interp(a["z"], a["heights"], a["strength"][m, i])
    return out


@pytest.mark.parametrize("knots", [2, 3, 7])
def test_direct_light_is_the_plain_sum(random, knots):
    a = made(random, knots=knots)
    out = np.empty((2, 3, CELLS), np.float32)
    direct_light(
        a["code"], a["normal"], a["offset"], a["z"], a["heights"].astype(np.float32), a["first"],
        a["left"], a["sun"], bends(a["strength"], a["heights"]), out,
    )  # fmt: skip
    want = plain_direct(a)
    assert want.max() > 500.0
    np.testing.assert_allclose(out, want, atol=0.02)
    assert (out[:, 1] == 0.0).all()  # a step without moments
    assert (out[:, :, 5] == 0.0).all()  # a void


@pytest.mark.parametrize("nodes", [(1, 1), (5, 4)])
def test_parts_are_the_plain_sum(random, nodes):
    rows, columns, steps = 6, 37, 3
    cells = rows * columns
    direct = random.uniform(0.0, 800.0, (2, steps, cells)).astype(np.float32)
    even = random.uniform(-50.0, 300.0, (steps, 2, 3))
    heights = np.array([0.0, 400.0, 1000.0])
    z = random.uniform(0.0, 1000.0, cells).astype(np.float32)
    sky = random.uniform(0.0, 1.0, (2, cells)).astype(np.float32)
    offset = random.uniform(-1e-2, 1e-2, (2, cells)).astype(np.float32)
    change = random.uniform(-5.0, 5.0, (steps, 2)).astype(np.float32)
    around = random.uniform(0.0, 500.0, (steps, *nodes)).astype(np.float32)
    down = np.linspace(0.0, nodes[0] - 1.0, rows).astype(np.float32)
    across = np.linspace(0.0, nodes[1] - 1.0, columns).astype(np.float32)
    albedo = np.array([0.0, 0.3, 0.8], np.float32)
    factor = random.uniform(1.0, 1.5, cells).astype(np.float32)
    factor[3] = np.nan
    out = np.empty((4, steps, cells), np.float32)
    parts_of_steps(
        direct, bends(even, heights), change, offset, sky, z, heights.astype(np.float32), around,
        down, across, albedo, factor, out,
    )  # fmt: skip
    for t in range(steps):
        dome, low = (np.interp(z, heights, even[t, i]) for i in range(2))
        light = (sky[0] * dome + sky[1] * low) * (1.0 + offset.T @ change[t])
        lit = np.array(
            [
                [
                    np.interp(c, np.arange(nodes[1]), [np.interp(r, np.arange(nodes[0]), column)
                                                       for column in around[t].T])
                    for c in across
                ]
                for r in down
            ]
        ).ravel()  # fmt: skip
        beam = factor * direct[0, t]
        diffuse = factor * (np.maximum(light, 0.0) + direct[1, t])
        back = factor * albedo[t] * (1.0 - sky[0]) * lit
        for found, want in zip(
            out[:, t], (beam + diffuse + back, beam, diffuse, back), strict=True
        ):
            np.testing.assert_allclose(found, want, atol=2e-3)
