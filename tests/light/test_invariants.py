"""What must hold whatever the ground: symmetry, level ground, voids, rims, the two ways."""

import numpy as np
import pytest
from hypothesis import Phase, example, given, settings
from hypothesis import strategies as st
from reference.plain_sun import Place, beam_months

import terrasol

AIR = terrasol.Air.ineichen(3.0)
MARCH = "2025-03"


def rough(seed, shape=(41, 41), height=30.0):
    """Heights of a made-up rough ground [m], a few waves of random direction.

    With 30 m on cells of 10 m slopes reach 40 degrees.
    """
    dice = np.random.default_rng(seed)
    north, east = np.indices(shape) * 1.0
    z = np.zeros(shape)
    for wave in (37.0, 23.0, 11.0, 7.0):
        turn, phase = dice.uniform(0.0, 2.0 * np.pi, 2)
        z += wave * np.sin(
            2.0 * np.pi * (east * np.cos(turn) + north * np.sin(turn)) / wave + phase
        )
    return 400.0 + z * height / np.abs(z).max()


def whole(light):
    """Irradiation of all the period, whether it is a year or not; (part, y, x)."""
    name = "irradiation_year" if "irradiation_year" in light else "irradiation_period"
    return light[name]


def on_equator(metric_ground, heights, cell=10.0):
    """At latitude 0 north is north all over the raster, so that symmetry can be exact."""
    return metric_ground(heights, cell, latitude=0.0)


def turned(angles, degrees):
    """Distance of two directions on the circle [degrees]."""
    return np.abs((angles - degrees + 180.0) % 360.0 - 180.0)


MOVES = {
    # what is done to the array, to an azimuth, and its inverse on azimuths
    "mirror east-west": (np.fliplr, lambda a: -a),
    "mirror north-south": (np.flipud, lambda a: 180.0 - a),
    "half turn": (lambda z: np.rot90(z, 2), lambda a: a + 180.0),
    "quarter turn": (np.rot90, lambda a: a - 90.0),
    "transpose": (np.transpose, lambda a: 270.0 - a),
}


def moved_terrain(metric_ground, move, shape):
    """Terrain of a ground that is moved first, and terrain that is moved afterwards.

    Returns slope, aspect, sky view and horizon of both, the horizon in the azimuths of the
    moved ground.
    """
    of_array, of_azimuth = MOVES[move]
    z = rough(1, shape)
    before = terrasol.terrain(on_equator(metric_ground, z), azimuths=16, horizon=True)
    after = terrasol.terrain(on_equator(metric_ground, of_array(z)), azimuths=16, horizon=True)
    azimuths = before["azimuth"].values
    horizon = np.empty_like(after["horizon"].values)
    for azimuth, layer in zip(azimuths, before["horizon"].values, strict=True):
        gap = turned(azimuths, of_azimuth(azimuth))
        assert gap.min() < 1e-6
        horizon[gap.argmin()] = of_array(layer)
    names = ("slope", "aspect", "sky_view")
    want = [of_array(before[name].values) for name in names]
    want[1] = of_azimuth(want[1])
    return [*(after[name].values for name in names), after["horizon"].values], [*want, horizon]


@pytest.mark.parametrize("move", MOVES)
def test_terrain_follows_the_ground(metric_ground, move):
    # So small a ground is all near field. 0.003 degrees: rounding of float32 heights of 400 m
    # over one cell of 10 m.
    got, want = moved_terrain(metric_ground, move, (17, 17))
    np.testing.assert_allclose(got[0], want[0], atol=3e-3)
    assert turned(got[1], want[1])[want[0] > 2.0].max() < 0.1
    np.testing.assert_allclose(got[2], want[2], atol=1e-4)
    np.testing.assert_allclose(got[3], want[3], atol=3e-3)


@pytest.mark.parametrize("move", MOVES)
def test_wide_terrain_follows_the_ground(metric_ground, move):
    # Far ridges are found along lines and seen from a lattice that start at the raster's first
    # cell, so a moved raster meets them elsewhere; the two answers may differ as each differs
    # from the truth (test_against_reference.py), not more.
    got, want = moved_terrain(metric_ground, move, (90, 74))
    np.testing.assert_allclose(got[0], want[0], atol=3e-3)
    assert np.sqrt(np.mean((got[2] - want[2]) ** 2)) < 3e-4
    gap = got[3] - want[3]
    assert np.sqrt((gap**2).mean()) < 0.12
    assert abs(gap.mean()) < 0.005


def test_year_is_the_same_for_mornings_and_evenings(metric_ground):
    # The clear sun of a whole year is symmetric about noon: each declination is passed once
    # upward and once downward. What is left is the declination's drift within single days. The
    # reflected light's mean over the surroundings is sampled from some cells, on a raster as
    # small as this from nine: 1 % of itself.
    z = rough(2, (23, 23))
    before = whole(terrasol.irradiation(metric_ground(z, 10.0), "2025", AIR))
    after = whole(terrasol.irradiation(metric_ground(np.fliplr(z), 10.0), "2025", AIR))
    year = before.sel(part="global").values.mean()
    np.testing.assert_allclose(after.values[..., ::-1], before.values, atol=1e-3 * year)
    for part, share in (("beam", 5e-5), ("diffuse", 5e-5), ("reflected", 1e-2)):
        mean = before.sel(part=part).values.mean()
        assert after.sel(part=part).values.mean() == pytest.approx(mean, rel=share)


@pytest.mark.parametrize("stored", ["transposed", "south-up", "from the east"])
def test_the_way_a_grid_is_stored_changes_nothing(stored):
    # The same cells on the same ground, only numbered in another order; as above, far ridges
    # are met at other places.
    z = rough(3, (62, 71))
    a, c, f = 20.0, 4.0e5, 5.1e6
    first = terrasol.Elevation.from_array(z, (a, 0, c, 0, -a, f), "EPSG:32632")
    other, transform = {
        "transposed": (z.T, (0, a, c, -a, 0, f)),
        "south-up": (z[::-1], (a, 0, c, 0, a, f - a * z.shape[0])),
        "from the east": (z[:, ::-1], (-a, 0, c + a * z.shape[1], 0, -a, f)),
    }[stored]
    back = {
        "transposed": lambda v: np.swapaxes(v, -1, -2),
        "south-up": lambda v: v[..., ::-1, :],
        "from the east": lambda v: v[..., :, ::-1],
    }[stored]
    one = terrasol.irradiation(first, MARCH, AIR, azimuths=32)
    two = terrasol.irradiation(
        terrasol.Elevation.from_array(other, transform, "EPSG:32632"), MARCH, AIR, azimuths=32
    )
    np.testing.assert_allclose(back(two["slope"].values), one["slope"].values, atol=3e-3)
    year = whole(one).values
    gap = (back(whole(two).values) - year) / year[0].mean()
    assert np.sqrt((gap**2).mean()) < 1e-3
    assert np.abs(gap.mean(axis=(1, 2))).max() < 1e-4


def test_level_ground_is_never_shaded(metric_ground):
    ground = metric_ground(np.full((30, 40), 650.0), 10.0)
    terrain = terrasol.terrain(ground, azimuths=16, horizon=True)
    assert (terrain["horizon"].values == 0.0).all()
    np.testing.assert_allclose(terrain["sky_view"].values, 1.0, atol=1e-6)
    light = terrasol.irradiation(ground, MARCH, AIR, monthly_parts=True)
    year = whole(light)
    assert (year.sel(part="reflected").values == 0.0).all()
    np.testing.assert_allclose(year.values[0], year.values[1:].sum(axis=0), rtol=1e-6)
    place = Place(46.0, 46.0, 9.0, 9.0, 650.0)
    want = beam_months(
        np.full((2, 2), 650.0), 10.0, 10.0, place, start="2025-03-01", end="2025-04-01", azimuths=8
    )[2, 0, 0]
    np.testing.assert_allclose(year.sel(part="beam").values, want, rtol=3e-4)


def test_sky_view_and_terrain_view_make_one(metric_ground):
    # Under an isotropic sky the diffuse part is the sky view times that of level ground; and
    # what a slope takes from snow (albedo 1 / 2) per unit of what its surroundings receive is
    # the rest: on an open plane those receive what the slope itself does.
    level = terrasol.irradiation(
        metric_ground(np.full((30, 30), 500.0), 10.0), MARCH, AIR, diffuse="isotropic"
    )
    down = np.arange(30.0)[:, None] * np.ones(30)
    slope = 500.0 + (14.5 - down) * 10.0 * np.tan(np.radians(30.0))
    light = terrasol.irradiation(
        metric_ground(slope, 10.0), MARCH, AIR, albedo=0.5, diffuse="isotropic"
    )
    middle = {"y": 15, "x": 15}
    parts = whole(light).isel(middle)
    sky = float(light["sky_view"].isel(middle))
    assert sky == pytest.approx((1.0 + np.cos(np.radians(30.0))) / 2.0, abs=1e-4)
    diffuse = float(parts.sel(part="diffuse"))
    open_sky = float(whole(level).sel(part="diffuse").isel(middle))
    assert diffuse / open_sky == pytest.approx(sky, rel=1e-3)
    seen = float(parts.sel(part="reflected")) / (0.5 * float(parts.sel(part="global")))
    assert sky + seen == pytest.approx(1.0, abs=0.01)


@example(seed=292, height=1.0)
@given(seed=st.integers(0, 10_000), height=st.floats(1.0, 300.0))
@settings(max_examples=10, deadline=None, phases=(Phase.explicit, Phase.generate))
def test_every_ground_stays_within_bounds(metric_ground, seed, height):
    ground = metric_ground(rough(seed, (24, 31), height), 10.0)
    light = terrasol.irradiation(ground, "2025-06-21", AIR)
    sky = light["sky_view"].values
    slope = np.radians(light["slope"].values)
    assert (sky >= 0.0).all()
    assert (sky <= (1.0 + np.cos(slope)) / 2.0 + 1e-4).all()  # no more than its plane leaves
    year = whole(light).values
    assert np.isfinite(year).all()
    assert (year >= 0.0).all()
    np.testing.assert_allclose(year[0], year[1:].sum(axis=0), rtol=1e-5)
    np.testing.assert_allclose(light["irradiation_months"].values[0], year[0], rtol=1e-5)


def test_voids_never_become_cliffs(metric_ground):
    # a plane with holes: next to them the plane goes on, and nothing else changes
    north, east = np.mgrid[200.0:-201.0:-10.0, -200.0:201.0:10.0]
    intact = 800.0 + 0.5 * north + 0.25 * east
    holes = np.zeros(intact.shape, bool)
    holes[5, 5] = holes[20:24, 10:30] = holes[0, 17] = holes[30, 40] = True
    holed = np.where(holes, np.nan, intact)
    with_holes = terrasol.irradiation(on_equator(metric_ground, holed), MARCH, AIR, azimuths=16)
    without = terrasol.irradiation(on_equator(metric_ground, intact), MARCH, AIR, azimuths=16)
    for name, atol in (("slope", 3e-3), ("sky_view", 1e-4)):
        got, want = with_holes[name].values, without[name].values
        assert (np.isnan(got) == holes).all()
        np.testing.assert_allclose(got[~holes], want[~holes], atol=atol)
    got, want = (whole(v).values for v in (with_holes, without))
    assert (np.isnan(got) == holes).all()
    np.testing.assert_allclose(got[1][~holes], want[1][~holes], rtol=1e-4)


def test_a_ridge_behind_a_void_is_still_seen(metric_ground):
    z = np.zeros((21, 61))
    z[:, 50:] = 100.0
    z[:, 20:40] = np.nan
    terrain = terrasol.terrain(metric_ground(z, 10.0), azimuths=8, horizon=True)
    seen = terrain["horizon"].sel(azimuth=90.0).values[10, 5]
    # the far field is linear between every fourth cell, in 1 / D: (2 / 45)^2 off at most
    assert np.tan(np.radians(seen)) == pytest.approx(100.0 / 450.0, rel=2e-3)
    assert terrain["horizon"].sel(azimuth=270.0).values[10, 45] == 0.0


def test_the_rim_is_not_lost(metric_ground):
    # a piece cut from a plane has the plane's answer up to its last row and column
    north, east = np.mgrid[200.0:-201.0:-10.0, -200.0:201.0:10.0]
    intact = 800.0 - 0.3 * north + 0.4 * east
    light = terrasol.irradiation(on_equator(metric_ground, intact), MARCH, AIR, azimuths=16)
    for name in ("slope", "aspect", "sky_view"):
        field = light[name].values
        np.testing.assert_allclose(field, field[20, 20], atol=5e-3)
    beam = whole(light).sel(part="beam").values
    # 300 m of height change the beam by a few percent, in proportion: a plane of its own
    np.testing.assert_allclose(beam[0], 2.0 * beam[20] - beam[40], rtol=2e-4)
    np.testing.assert_allclose(beam[:, 0], 2.0 * beam[:, 20] - beam[:, 40], rtol=2e-4)


SITES = {
    "alps": (46.0, 9.0),
    "andes": (-33.0, -70.0),
    "arctic": (69.0, 19.0),
    "tropic": (5.0, 38.0),
}


@pytest.mark.parametrize("site", SITES)
@pytest.mark.parametrize("month", ["2025-03", "2025-12"])
def test_table_agrees_with_plain_time_stepping(metric_ground, site, month):
    # The table at 64 azimuths against minute steps and 720 marched azimuths. The year on real
    # ground (test_against_reference.py) is held to 0.1 % of the mean; a single month crosses
    # the edges of few azimuths, so its errors average out less.
    latitude, longitude = SITES[site]
    z = rough(4, (60, 60), 80.0)
    light = terrasol.irradiation(
        metric_ground(z, 30.0, latitude, longitude), month, AIR, monthly_parts=True
    )
    number = int(month[-2:])
    end = "2026-01-01" if number == 12 else f"2025-{number + 1:02d}-01"
    half = 900.0 / 111_000.0
    east = half / np.cos(np.radians(latitude))
    place = Place(latitude + half, latitude - half, longitude - east, longitude + east, z.mean())
    cells = np.mgrid[1:60:4, 1:60:4]
    want = beam_months(z, 30.0, 30.0, place, start=f"{month}-01", end=end, cells=cells)
    want = want[number - 1]
    got = whole(light).sel(part="beam").values[tuple(cells)]
    if site == "arctic" and number == 12:
        assert (want == 0.0).all()
        assert (got == 0.0).all()
        return
    assert np.sqrt(np.mean((got - want) ** 2)) < 3e-3 * want.mean()
    assert abs(got.mean() / want.mean() - 1.0) < 1e-3
