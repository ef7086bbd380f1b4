"""Horizon and sky-view factor of grounds that have a closed form.

The sky view is that of Dozier and Frew (1990, equation 7b, quoted from memory)

    Vd = 1 / (2 pi) int [cos S sin^2 H + sin S cos(phi - A) (H - sin H cos H)] dphi,

H the horizon's angle from the zenith, clipped at the horizontal and at the cell's own plane.
Integrated by hand it gives the values below; each was worked out again for these tests. On a
raster of planes they hold to the rounding of float32; where a wall's edge falls between
samples, the tolerance is the change of angle over one cell and is stated.
"""

import numpy as np
import pytest

import terrasol

EARTH_RADIUS = 6_371_000.0  # IUGG mean radius
LIFTED_RADIUS = EARTH_RADIUS / (1.0 - 0.13)


def offsets(rows, columns):
    """North and east of every cell's centre from the middle cell, in cells."""
    north, east = np.meshgrid(
        (rows - 1) / 2 - np.arange(rows), np.arange(columns) - (columns - 1) / 2, indexing="ij"
    )
    return north, east


def middle(field):
    """Value at the middle cell, whatever comes before rows and columns."""
    rows, columns = field.shape[-2:]
    return field.values[..., (rows - 1) // 2, (columns - 1) // 2]


@pytest.mark.parametrize(("steepness", "want"), [(30.0, 0.933013), (45.0, 0.853553)])
@pytest.mark.parametrize("facing", [180.0, 90.0, 215.0])
def test_plane_sees_half_of_one_plus_cosine(metric_ground, steepness, want, facing):
    # (1 + cos S) / 2, exactly and for every cell up to the rim, because of the two clips
    north, east = offsets(41, 41)
    away = east * np.sin(np.radians(facing)) + north * np.cos(np.radians(facing))
    heights = -10.0 * away * np.tan(np.radians(steepness))
    sky = terrasol.terrain(metric_ground(heights, 10.0))["sky_view"]
    np.testing.assert_allclose(sky, want, atol=1e-4)


@pytest.mark.parametrize("along", ["north", "east"])
def test_floor_of_a_v_valley(metric_ground, along):
    # floor line between sides of 30 degrees: cos 30 = 0.866025; Bendix (2004), p. 63, eq. 3.15
    north, east = offsets(81, 81)
    across = east if along == "north" else north
    heights = 10.0 * np.abs(across) * np.tan(np.radians(30.0))
    sky = terrasol.terrain(metric_ground(heights, 10.0))["sky_view"]
    assert middle(sky) == pytest.approx(0.866025, abs=2e-4)


def test_side_of_a_v_valley(metric_ground):
    # cos^2 30 = 0.75 on the side itself. One cell up the side and 500 cells of the other side
    # in view, the opposite horizon lacks 2 / 500 of its tangent: 0.001 of sky. A raster may miss
    # such a form by 0.005 to 0.01 (judgement, no source): here the lower end.
    _, east = offsets(401, 1001)
    heights = np.abs(east) * np.tan(np.radians(30.0))
    sky = terrasol.terrain(metric_ground(heights, 1.0))["sky_view"]
    for side in (499, 501):
        assert sky.values[200, side] == pytest.approx(0.75, abs=5e-3)


def test_foot_of_an_endless_wall(metric_ground):
    # tan psi = H / d: sky (1 + cos psi) / 2, horizon atan(H / d cos phi). H / d = 1: 0.853553.
    # Rays that run more along the wall than across meet it up to one row late: 1 / d at most.
    d = 50
    _, east = offsets(2401, 2 * d + 21)
    heights = np.where(east >= d, 10.0 * d, 0.0)
    ground = terrasol.terrain(metric_ground(heights, 10.0), horizon=True)
    assert middle(ground["sky_view"]) == pytest.approx(0.853553, abs=2e-3)
    across = np.sin(np.radians(ground["azimuth"].values))
    got = np.tan(np.radians(middle(ground["horizon"])))
    curved = 10.0 * d / np.maximum(across, 0.1) / (2.0 * LIFTED_RADIUS)
    front = across > 0.71
    np.testing.assert_allclose(got[front], (across - curved)[front], atol=2e-4)
    slant = (across > 0.1) & ~front
    assert (got[slant] < across[slant]).all()
    assert (got[slant] > across[slant] * (1.0 - 1.0 / d) - 4e-4).all()
    np.testing.assert_allclose(got[across <= 0.0], 0.0, atol=1e-6)


def test_bowl_of_even_horizon(metric_ground):
    # z / r = tan(30) u exp(1 - u), u = (r / r1)^2, is highest at r1: horizon 30 degrees all
    # round, sky view cos^2 30 = 0.75. The peak is smooth, so the raster costs second order.
    r1 = 100.0
    north, east = offsets(301, 301)
    r = np.hypot(north, east)
    u = (r / r1) ** 2
    heights = r * np.tan(np.radians(30.0)) * u * np.exp(1.0 - u)
    ground = terrasol.terrain(metric_ground(heights, 1.0), horizon=True)
    np.testing.assert_allclose(middle(ground["horizon"]), 30.0, atol=0.01)
    assert middle(ground["sky_view"]) == pytest.approx(0.75, abs=2e-4)


def test_middle_of_a_canyon(metric_ground):
    # endless canyon, walls of height H, W apart, from the middle of its floor:
    # 1 / sqrt(1 + 4 (H / W)^2) = 0.447214 for H = W. Cells: W / 2 = 50.
    half = 50
    _, east = offsets(2001, 2 * half + 21)
    heights = np.where(np.abs(east) >= half, 2.0 * half, 0.0)
    sky = terrasol.terrain(metric_ground(heights, 1.0))["sky_view"]
    assert middle(sky) == pytest.approx(0.447214, abs=5e-3)


def test_horizon_of_a_cone_from_outside(metric_ground):
    # The ray that touches the cone z = H - m r seen from d, phi off the summit:
    # tan h = (H cos phi - |sin phi| sqrt(m^2 d^2 - H^2)) / d (double root of the section, a
    # hyperbola), down to 0 where the ray touches the base circle. Bilinear ground lifts a cone
    # of slope 1 by up to 1 / (8 r) cells: 0.05 degrees from here one cell off the summit. Lines
    # of the far field pass up to two cells aside: 0.2 degrees for a ray beside the summit, and
    # 1.4 degrees of azimuth or of height for one that grazes the foot.
    height, base, d = 50.0, 50.0, 100.0
    north, east = offsets(241, 241)
    heights = np.maximum(height - height / base * np.hypot(north, east - d), 0.0)
    ground = terrasol.terrain(metric_ground(heights, 1.0), azimuths=360, horizon=True)
    phi = np.radians(ground["azimuth"].values - 90.0)
    fall = np.abs(np.sin(phi)) * np.sqrt((height / base * d) ** 2 - height**2)
    tangent = np.maximum((height * np.cos(phi) - fall) / d, 0.0)
    got = middle(ground["horizon"])
    gap = got - np.degrees(np.arctan(tangent))
    grazing = np.abs(np.abs(phi) - np.arcsin(base / d)) < np.radians(2.5)
    meets = ~grazing & (tangent > 0.0)
    assert meets.sum() > 50
    assert np.sqrt((gap[meets] ** 2).mean()) < 0.05
    assert np.abs(gap[~grazing]).max() < 0.2
    assert np.abs(gap[grazing]).max() < 1.4
    assert got[90] == pytest.approx(np.degrees(np.arctan(0.5)), abs=1e-3)


@pytest.mark.parametrize(
    ("distance", "refraction", "drop"),
    [
        (10_000.0, 0.0, 7.848),
        (10_000.0, 0.13, 6.828),
        (50_000.0, 0.0, 196.20),
        (50_000.0, 0.13, 170.70),
    ],
)
def test_far_wall_sinks_with_the_earth(metric_ground, distance, refraction, drop):
    # d^2 / 2R, R = 6371 km, refraction 0.13 after Gauss (1826); the last is 0.87 of the third
    cells = 500
    heights = np.zeros((cells + 1, 3))
    heights[0] = 1000.0
    ground = terrasol.terrain(
        metric_ground(heights, distance / cells), azimuths=8, horizon=True, refraction=refraction
    )
    tangent = np.tan(np.radians(float(ground["horizon"].values[0, cells, 1])))
    assert ground["azimuth"].values[0] == 0.0
    assert 1000.0 - distance * tangent == pytest.approx(drop, abs=0.05)
