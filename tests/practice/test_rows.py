"""Light on vine rows: conservation, limits, symmetries and closed forms."""

import numpy as np
import pytest
from reference.plain_rows import plain_rows

from terrasol.errors import SettingError
from terrasol.light.irradiation import BAND_TOP
from terrasol.practice import rows
from terrasol.practice.rows import Vineyard, mean_plane, row_light, row_slopes, strip_views
from terrasol.sky.sun import incidence_cosine, unit_vector

RANDOM = np.random.default_rng(17)
PLACES = [
    (0.0, np.nan), (0.0, 123.0), (12.0, 180.0), (25.0, 75.0), (40.0, 310.0),
]  # fmt: skip
SIZES = {"spacing": 2.1, "height": 1.3, "width": 0.45}
BLACK = {"ground_albedo": 0.0, "canopy_albedo": 0.0}
RIGHT, LEFT, TOP, GROUND = range(4)


def lit(elevation, azimuth, **options):
    """Row light of suns of 1 W/m2 a million seconds each, without diffuse light: energy is 1."""
    elevation, azimuth = np.atleast_1d(elevation), np.atleast_1d(azimuth)
    light = np.ones(elevation.size), np.zeros(elevation.size)
    with pytest.MonkeyPatch.context() as patch:  # few directions will do for a sky that is dark
        patch.setattr(rows, "SKY_AZIMUTHS", 4)
        patch.setattr(rows, "SKY_RINGS", 2)
        return row_light(elevation, azimuth, *light, 1e6, **{**SIZES, **BLACK, **options})


def under_even_sky(**options):
    """Row light of an even sky alone, 1 MJ/m2 on open level ground."""
    return row_light([10.0], [0.0], [0.0], [1.0], 1e6, **{**SIZES, **BLACK, **options})


def under_a_band(**options):
    """Row light of a horizon band alone, 1 MJ/m2 on an open plumb wall."""
    dark = [10.0], [0.0], [0.0], [0.0]
    return row_light(*dark, 1e6, horizon_band=[1.0], **{**SIZES, **BLACK, **options})


@pytest.mark.parametrize(("slope", "aspect"), PLACES)
def test_nothing_of_the_beam_is_lost_or_counted_twice(slope, aspect):
    # At any instant sides, top and ground of a metre of row take what its strip of slope would.
    facing = 0.0 if np.isnan(aspect) else aspect
    for elevation, azimuth in zip(RANDOM.uniform(0, 90, 20), RANDOM.uniform(0, 360, 20),
                                  strict=True):  # fmt: skip
        got = lit(elevation, azimuth, slope=slope, aspect=aspect)
        plane = max(float(incidence_cosine(elevation, azimuth, slope, facing)), 0.0)
        np.testing.assert_allclose(got.per_metre.sum(axis=1), 2.1 * plane, atol=1e-12)
        np.testing.assert_allclose(got.total[:, TOP], plane, atol=1e-12)


@pytest.mark.parametrize(("slope", "aspect"), PLACES)
def test_nothing_of_the_sky_is_lost_or_counted_twice(slope, aspect):
    got = under_even_sky(slope=slope, aspect=aspect)
    # Open sky as a slope sees it, (1 + cos S) / 2; the sum over directions errs below 1e-4.
    view = 0.5 * (1.0 + np.cos(np.radians(slope)))
    np.testing.assert_allclose(got.per_metre.sum(axis=1), 2.1 * view, atol=1e-4)
    np.testing.assert_allclose(got.per_metre.sum(axis=1), 2.1 * got.total[:, TOP], rtol=1e-12)


@pytest.mark.parametrize(("slope", "aspect"), PLACES)
def test_far_apart_each_side_is_a_plumb_plane_by_itself(slope, aspect):
    elevation, azimuth = RANDOM.uniform(45, 90, 30), RANDOM.uniform(0, 360, 30)
    got = lit(elevation, azimuth, slope=slope, aspect=aspect, spacing=1e4)
    for side in (RIGHT, LEFT):
        wall = [
            np.maximum(incidence_cosine(elevation, azimuth, 90.0, face), 0.0).sum()
            for face in got.faces[:, side]
        ]
        np.testing.assert_allclose(got.total[:, side], wall, rtol=1e-12)


def test_far_apart_a_side_sees_its_half_of_the_sky():
    level = under_even_sky(slope=0.0, aspect=np.nan, spacing=1e6)
    np.testing.assert_allclose(level.total[:, :2], 0.5, atol=2e-4)
    # Rows along the contour of a slope S facing south: the lower side has its half of the sky, the
    # upper one that above the slope, (1 - sin S) / 2.
    got = under_even_sky(slope=30.0, aspect=180.0, spacing=1e6, row_azimuths=[90.0])
    np.testing.assert_allclose(got.total[0, :2], [0.5, 0.25], atol=2e-4)


@pytest.mark.parametrize(("spacing", "height", "width"), [(2.0, 1.2, 0.4), (1.2, 2.0, 0.6),
                                                          (6.0, 1.0, 0.0)])  # fmt: skip
def test_even_sky_between_level_rows_follows_crossed_strings(spacing, height, width):
    got = under_even_sky(
        slope=0.0, aspect=np.nan, spacing=spacing, height=height, width=width
    ).total
    views, opening = strip_views(Vineyard(0.0, np.nan, spacing, height, width), 30.0)
    # The sum over directions errs by some 1e-4 of the light of level ground.
    np.testing.assert_allclose(got[:, RIGHT], opening[0], atol=1e-4)
    np.testing.assert_allclose(got[:, LEFT], opening[1], atol=1e-4)
    np.testing.assert_allclose(got[:, GROUND], opening[2], atol=1e-4)
    # Closed forms: of a lane's floor, sqrt(1 + q^2) - q with q height over gap; wall to wall
    # sqrt(1 + 1/q^2) - 1/q.
    q = height / (spacing - width)
    assert opening[2] == pytest.approx(np.hypot(1.0, q) - q, abs=1e-12)
    assert views[0, 1] == pytest.approx(np.hypot(1.0, 1 / q) - 1 / q, abs=1e-12)


SKY_OVER_ROWS = [
    (0.0, 0.0, 2.0, 1.3, 0.4, 20.0),
    (12.0, 180.0, 2.1, 1.3, 0.45, 35.0),
    (25.0, 75.0, 2.0, 1.5, 0.3, 165.0),
    (20.0, 200.0, 9.0, 1.0, 0.0, 120.0),
]
"""Slope, aspect, spacing, height, width, row azimuth."""


@pytest.mark.parametrize("place", SKY_OVER_ROWS)
def test_horizon_band_agrees_with_an_integral_over_the_sky(place):
    # The reference has a band of even radiance, the rows one that is even in the tangent: over 6.5
    # degrees that moves light within the band by 1.3 %, and a surface by less than half of it.
    e = np.radians(6.5)
    want = plain_rows(6.5, True, *place) / (e + np.sin(e) * np.cos(e))
    names = ("slope", "aspect", "spacing", "height", "width", "row_azimuths")
    got = under_a_band(**dict(zip(names, place, strict=True))).diffuse[0]
    np.testing.assert_allclose(got, want, atol=1e-3, rtol=6e-3)
    assert want[:2].max() > 0.1


def test_even_sky_on_a_slope_agrees_with_an_integral_over_the_sky():
    place = SKY_OVER_ROWS[2]
    want = plain_rows(90.0, False, *place) / np.pi
    got = under_even_sky(
        slope=25.0, aspect=75.0, spacing=2.0, height=1.5, width=0.3, row_azimuths=[165.0]
    ).diffuse[0]
    np.testing.assert_allclose(got, want, atol=1e-3)


@pytest.mark.parametrize("gap", [0.8, 1.6, 8.0])
def test_horizon_band_between_level_rows_has_a_closed_form(gap):
    # The neighbour hides the horizon; what comes over its top lights min(cos t, k w) of a side, for
    # a direction t from square at tangent w, with k gap over height. Mean over w, sum over t. Steps
    # of w err where the min has its corner: by k / (8 BAND_RINGS^2) at most, 3.4e-4 for k of 0.7.
    k = gap / 1.3 * BAND_TOP
    assert k < 1.0
    edge = np.arccos(k)
    squares = 0.5 * (0.5 * np.pi - edge) - 0.25 * np.sin(2.0 * edge)
    want = 0.5 * edge * k + 1.0 - np.sin(edge) - squares / (2.0 * k)
    got = under_a_band(slope=0.0, aspect=np.nan, spacing=gap + 0.4, width=0.4).diffuse
    np.testing.assert_allclose(got[:, :2], want, atol=3.5e-4)
    np.testing.assert_array_equal(got[:, 2:], 0.0)


@pytest.mark.parametrize(("slope", "aspect"), PLACES)
def test_top_and_ground_take_the_horizon_band_as_the_slope_does(slope, aspect):
    got = under_a_band(slope=slope, aspect=aspect).diffuse
    np.testing.assert_allclose(got[:, TOP], np.sin(np.radians(slope)), atol=1e-4)
    assert (got[:, GROUND] <= got[:, TOP]).all()
    # Rows so far apart that they hide nothing: ground as the slope.
    far = under_a_band(slope=slope, aspect=aspect, spacing=1e5).diffuse
    np.testing.assert_allclose(far[:, GROUND], far[:, TOP], atol=1e-3)


def test_far_apart_a_side_has_the_whole_band_and_a_low_horizon_hides_a_part():
    far = {"slope": 0.0, "aspect": np.nan, "spacing": 1e6}
    np.testing.assert_allclose(under_a_band(**far).diffuse[:, :2], 1.0, atol=1e-4)
    half = under_a_band(**far, horizon=np.full(64, 0.25 * BAND_TOP))
    np.testing.assert_allclose(half.diffuse[:, :2], 0.75, atol=1e-4)
    none = under_a_band(slope=20.0, aspect=180.0, horizon=np.full(64, 1.01 * BAND_TOP))
    assert (none.diffuse == 0.0).all()


def test_what_the_band_adds_to_a_strip_of_slope_is_bounded():
    # Level light falls on sides at the height w of its place in the band without falling on the
    # slope: at most gap times pi times the mean of w, shared by both sides.
    for slope, aspect in PLACES:
        got = under_a_band(slope=slope, aspect=aspect)
        more = got.per_metre.sum(axis=1) - 2.1 * got.total[:, TOP]
        assert (more > 0.0).all()
        assert (more <= 2.1 * 0.5 * np.pi * BAND_TOP).all()


@pytest.mark.parametrize("row", [0.0, 35.0, 90.0, 160.0])
def test_views_are_reciprocal_and_complete_on_a_slope(row):
    place = Vineyard(35.0, 200.0, 2.0, 1.5, 0.4)
    views, opening = strip_views(place, row)
    area = rows._areas(place, row)[[RIGHT, LEFT, GROUND]]
    np.testing.assert_allclose(area[:, None] * views, (area[:, None] * views).T, atol=1e-12)
    assert ((views >= 0.0) & (views <= 1.0)).all()
    assert ((opening > 0.0) & (opening < 1.0)).all()


@pytest.mark.parametrize("row", [0.0, 35.0, 90.0, 160.0])
def test_views_agree_with_rays_thrown(row):
    # Rays from the ground of the lane and from its sides, evenly spread (Lambert), by chance.
    place = Vineyard(35.0, 200.0, 2.0, 1.5, 0.4)
    views, _ = strip_views(place, row)
    along, across = place.rises(row)
    forward = np.array([0.0, 1.0, along]) / np.hypot(1.0, along)  # right, forward, up
    gap = rows._gap(place, along)
    corner = {"foot": np.array([0, 0.0, 0]), "over": np.array([gap, 0, across * gap])}
    wall = np.array([0, 0, place.height])
    ends = [
        (corner["foot"], wall, 1),
        (corner["over"], wall, -1),
        (corner["foot"], corner["over"], 0),
    ]
    count = 200_000
    for k, (start, edge, side) in enumerate(ends):
        normal = np.cross(edge, forward)
        normal /= np.linalg.norm(normal)
        toward = corner["over"] + wall if side >= 0 else wall
        normal *= np.sign(normal @ (toward - start))
        first = forward
        second = np.cross(normal, first)
        radius, turn = np.sqrt(RANDOM.random(count)), RANDOM.random(count) * 2 * np.pi
        ray = (
            np.outer(radius * np.cos(turn), first)
            + np.outer(radius * np.sin(turn), second)
            + np.outer(np.sqrt(1 - radius**2), normal)
        )
        origin = start + np.outer(RANDOM.random(count), edge)
        for other, (base, span, _) in enumerate(ends):
            if other == k:
                continue
            # origin + s ray = base + t span + l forward
            system = np.stack([ray, np.broadcast_to(-span, ray.shape),
                               np.broadcast_to(-forward, ray.shape)], axis=-1)  # fmt: skip
            s, t, _ = np.linalg.solve(system, (base - origin)[..., None])[..., 0].T
            share = np.mean((s > 1e-9) & (t >= 0) & (t <= 1))
            assert share == pytest.approx(views[k, other], abs=5e-3)  # four standard errors


def test_reflected_light_keeps_the_energy():
    # What the lane's surfaces absorb, and what leaves it upwards, is what first reached them.
    got = row_light([50.0], [200.0], [800.0], [100.0], 1e6, slope=20.0, aspect=150.0, **SIZES,
                    ground_albedo=0.6, canopy_albedo=0.3)  # fmt: skip
    albedo = np.array([0.3, 0.3, 0.6])
    lane = [RIGHT, LEFT, GROUND]
    for k, row in enumerate(got.azimuth):
        _, opening = strip_views(Vineyard(20.0, 150.0, **SIZES), row)
        first = (got.beam + got.diffuse)[k, lane] * got.area[k, lane]
        held = got.total[k, lane] * got.area[k, lane]
        assert ((1 - albedo) * held + albedo * held * opening).sum() == pytest.approx(first.sum())
        assert (got.reflected[k, lane] > 0.0).all()
    assert (got.reflected[:, TOP] == 0.0).all()
    dark = row_light([50.0], [200.0], [800.0], [100.0], 1e6, slope=20.0, aspect=150.0, **SIZES,
                     **BLACK)  # fmt: skip
    assert (dark.reflected == 0.0).all()
    np.testing.assert_array_equal(dark.beam, got.beam)


def test_sides_of_north_south_rows_are_equal_on_symmetric_days():
    hours = np.radians(np.linspace(-90, 90, 181))
    elevation = np.degrees(np.arcsin(np.cos(hours) * np.cos(np.radians(45.0))))
    azimuth = (
        np.degrees(np.arctan2(-np.sin(hours), -np.cos(hours) * np.sin(np.radians(45.0)))) % 360
    )
    for slope, aspect in ((0.0, np.nan), (20.0, 180.0), (20.0, 0.0)):
        got = lit(elevation, azimuth, slope=slope, aspect=aspect, row_azimuths=[0.0, 30.0])
        assert got.total[0, RIGHT] == pytest.approx(got.total[0, LEFT], rel=1e-9)
        assert abs(got.total[1, RIGHT] - got.total[1, LEFT]) > 0.01 * got.total[1, RIGHT]


def test_shade_between_level_rows_is_that_of_the_drawing():
    # Sun square to the rows at 30 degrees: a row 1.3 m high throws 1.3 / tan 30 = 2.25 m over a
    # lane of 1.65 m, so the ground is dark and the upper 1.65 tan 30 = 0.953 m of the side lit.
    got = lit(30.0, 90.0, slope=0.0, aspect=np.nan, row_azimuths=[0.0]).total[0]
    share = 1.65 * np.tan(np.radians(30.0)) / 1.3
    assert got[RIGHT] == pytest.approx(np.cos(np.radians(30.0)) * share, rel=1e-12)
    assert got[LEFT] == got[GROUND] == 0.0
    assert got[TOP] == pytest.approx(0.5, rel=1e-12)


def test_light_on_a_sloping_lane_agrees_with_rays_marched():
    # Points on both sides and on the ground, each asked whether a neighbouring row, as a box of
    # endless length on the slope, stands between it and the sun.
    place = Vineyard(28.0, 160.0, 1.8, 1.4, 0.5)
    row = 40.0
    along, across = place.rises(row)
    turn = np.radians(row)
    gap = rows._gap(place, along)
    period = gap + place.width
    points = (np.arange(4000) + 0.5) / 4000
    for elevation, azimuth in ((35.0, 110.0), (15.0, 250.0), (60.0, 200.0), (20.0, 150.0)):
        east, north, up = (float(part) for part in unit_vector(elevation, azimuth))
        right = east * np.cos(turn) - north * np.sin(turn)
        forward = east * np.sin(turn) + north * np.cos(turn)
        climb = up - along * forward
        got = lit(elevation, azimuth, slope=28.0, aspect=160.0, spacing=1.8, height=1.4, width=0.5,
                  row_azimuths=[row]).total[0]  # fmt: skip

        def free(x, z, right=right, climb=climb):
            """Whether a ray in the drawing meets no row: rows stand on [k period, + width]."""
            clear = np.ones(points.size, bool)
            for k in range(-12, 13):
                for edge in (k * period + 1e-9, k * period + place.width - 1e-9):
                    s = (edge - x) / right
                    height = z + s * climb - across * edge
                    clear &= ~((s > 1e-7) & (height > 0.0) & (height < place.height))
            return clear

        sides = {RIGHT: (place.width, 1.0), LEFT: (0.0, -1.0)}
        for side, (x, sign) in sides.items():
            z = across * x + points * place.height
            share = np.mean(free(np.full(points.size, x + sign * 2e-9), z))
            assert got[side] == pytest.approx(max(sign * right, 0.0) * share, abs=1e-3)
        x = place.width + points * gap
        plane = float(incidence_cosine(elevation, azimuth, 28.0, 160.0))
        assert got[GROUND] == pytest.approx(plane * np.mean(free(x, across * x)), abs=1e-3)


def test_horizon_takes_the_sun_and_the_sky_below_it():
    wall = np.zeros(64)
    wall[8:25] = np.tan(np.radians(40.0))  # 45 to 135 degrees, the east
    options = {"slope": 0.0, "aspect": np.nan, "horizon": wall}
    dark, above, west = (
        lit(*sun, **options).total.sum() for sun in ((30, 90), (50, 90), (30, 270))
    )
    assert dark == 0.0
    assert above > 0.0
    assert west > 0.0
    crater = under_even_sky(slope=0.0, aspect=np.nan, horizon=np.full(64, np.tan(np.radians(30.0))))
    # Even horizon h: cos^2 h of the sky's light.
    np.testing.assert_allclose(crater.total[:, TOP], 0.75, atol=2e-4)


def test_sky_directions_are_enough(monkeypatch):
    options = {"slope": 15.0, "aspect": 200.0, "spacing": 1.4}
    few = under_even_sky(**options).total
    monkeypatch.setattr(rows, "SKY_AZIMUTHS", 2 * rows.SKY_AZIMUTHS)
    monkeypatch.setattr(rows, "SKY_RINGS", 2 * rows.SKY_RINGS)
    np.testing.assert_allclose(under_even_sky(**options).total, few, atol=1e-4)


def test_directions_of_the_horizon_band_are_enough(monkeypatch):
    options = {"slope": 15.0, "aspect": 200.0, "spacing": 1.4}
    few = under_a_band(**options).total
    monkeypatch.setattr(rows, "SKY_AZIMUTHS", 2 * rows.SKY_AZIMUTHS)
    monkeypatch.setattr(rows, "BAND_RINGS", 2 * rows.BAND_RINGS)
    np.testing.assert_allclose(under_a_band(**options).total, few, atol=1e-3)


def test_rows_turned_half_round_change_sides():
    got = lit([40.0, 20.0], [130.0, 260.0], slope=18.0, aspect=140.0, row_azimuths=[25.0, 205.0])
    np.testing.assert_allclose(got.total[1, [LEFT, RIGHT]], got.total[0, :2], atol=1e-12)
    np.testing.assert_allclose(got.total[1, 2:], got.total[0, 2:], atol=1e-12)
    np.testing.assert_allclose(got.faces, [[115.0, 295.0], [295.0, 115.0]])


def test_turning_all_turns_the_answer():
    one = lit([40.0, 20.0], [130.0, 260.0], slope=18.0, aspect=140.0, row_azimuths=[25.0])
    two = lit([40.0, 20.0], [230.0, 0.0], slope=18.0, aspect=240.0, row_azimuths=[125.0])
    np.testing.assert_allclose(one.total, two.total, atol=1e-12)


def test_slopes_of_rows_and_the_fall_line():
    got = lit(40.0, 130.0, slope=np.degrees(np.arctan(0.3)), aspect=200.0)
    fall = rows.fall_line(200.0)
    assert fall == 20.0
    assert got.azimuth[np.argmax(got.along)] == fall
    assert got.along.max() == pytest.approx(30.0, rel=1e-12)
    np.testing.assert_allclose(np.hypot(got.along, got.across), 30.0, rtol=1e-12)
    contour = got.azimuth == 110.0
    assert got.along[contour] == pytest.approx(0.0, abs=1e-9)


def test_steepest_row_of_many_cells():
    slope = np.degrees(np.arctan([0.10, 0.20, 0.40, np.nan, 0.0]))
    aspect = np.array([0.0, 90.0, 0.0, np.nan, np.nan])
    area = np.array([89.0, 2.0, 1.0, 5.0, 8.0])
    got = row_slopes(slope, aspect, area, row_azimuths=[0.0, 90.0, 60.0])
    np.testing.assert_allclose(got, [40.0, 20.0, 20.0], rtol=1e-12)
    most = row_slopes(slope, aspect, area, row_azimuths=[0.0, 90.0], percent=98.0)
    np.testing.assert_allclose(most, [10.0, 0.0], atol=1e-9)


def test_mean_plane_of_cells():
    slope, aspect = mean_plane([15.0, 15.0], [33.0, np.nan], [1.0, 0.0])
    assert (slope, aspect) == (pytest.approx(15.0), pytest.approx(33.0))
    half, facing = mean_plane([45.0, 0.0], [270.0, np.nan], 1.0)
    assert (half, facing) == (pytest.approx(np.degrees(np.arctan(0.5))), pytest.approx(270.0))
    assert mean_plane([0.0], [np.nan], 1.0)[0] == 0.0
    assert np.isnan(mean_plane([0.0], [np.nan], 1.0)[1])
    assert np.isnan(mean_plane([np.nan], [np.nan], 1.0)).all()


@pytest.mark.parametrize(
    "change",
    [{"spacing": 0.4}, {"spacing": 0.0}, {"height": 0.0}, {"width": -0.1}, {"slope": 90.0},
     {"slope": 80.0}, {"aspect": np.nan}, {"ground_albedo": 1.0}, {"canopy_albedo": -0.1},
     {"horizon": [0.0, 0.0]}, {"horizon": [0.0, np.nan, 0.0, 0.0]}],
)  # fmt: skip
def test_what_makes_no_vineyard_is_refused(change):
    with pytest.raises(SettingError):
        lit(40.0, 130.0, **{"slope": 10.0, "aspect": 180.0, **change})
