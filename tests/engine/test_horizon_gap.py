"""The bound on what ground outside all data could hide: never too low, and not idly high."""

import dataclasses

import numpy as np
import pytest
from pyproj import Geod, Transformer
from reference import made_range

import terrasol
from terrasol.engine.datasets import ArraySink
from terrasol.engine.ground_work import lay_out
from terrasol.engine.job import plan_irradiation, plan_terrain
from terrasol.ground.beyond import far_ground, make_scene
from terrasol.ground.frame import make_frame
from terrasol.ground.places import Locator
from terrasol.light.settings import LightSettings
from terrasol.sky.clear import Air
from terrasol.sky.period import parse_period

AZIMUTHS = 16
QUICK = {"azimuths": AZIMUTHS, "step_seconds": 600.0, "threads": 2}
CELL = 60.0


def frame_of(elevation):
    return make_frame(elevation.shape, elevation.transform, elevation.crs)


@pytest.fixture(scope="module")
def large():
    return made_range.square(21e3, CELL)


@pytest.fixture(scope="module")
def small(large):
    """The middle 12 km."""
    return made_range.square(6e3, CELL)


@pytest.fixture(scope="module")
def far():
    return made_range.square(21e3, 2.0 * CELL)


INNER = np.s_[..., 250:450, 250:450]


def bound_of(elevation, **more):
    return terrasol.irradiation(elevation, "2025", horizon_gap=True, **more, **QUICK)


def loss_within(elevation, whole, inner):
    """Rise of the horizon [degrees] and loss of direct light that cutting out hid."""
    horizons = [
        terrasol.terrain(e, AZIMUTHS, horizon=True, threads=2).horizon.values
        for e in (elevation, whole)
    ]
    light = [
        terrasol.irradiation(e, "2025", **QUICK).irradiation_year.values[1]
        for e in (elevation, whole)
    ]
    return (horizons[1][inner] - horizons[0]).max(axis=0), light[0] - light[1][inner]


def test_no_loss_exceeds_the_bound(small, large):
    highest = float(large.heights.max())
    rise, loss = loss_within(small, large, INNER)
    got = bound_of(small, highest=highest)
    assert rise.max() > 10.0
    assert loss.max() > 20.0
    assert (rise <= got.horizon_gap.values).all()
    assert (loss <= got.horizon_gap_light.values).all()
    assert got.horizon_gap.attrs["units"] == "degree"
    assert got.horizon_gap_light.attrs["units"] == "MJ m-2"


def test_ground_that_does_its_worst_comes_near_the_bound(small, large):
    """All around the cut-out a table of the highest plausible ground."""
    highest = 1500.0
    low = dataclasses.replace(small, heights=small.heights * np.float32(0.3))
    z = np.full(large.heights.shape, highest, np.float32)
    z[INNER] = low.heights
    rise, loss = loss_within(low, dataclasses.replace(large, heights=z), INNER)
    got = bound_of(low, highest=highest)
    gap, light = got.horizon_gap.values, got.horizon_gap_light.values
    assert (rise <= gap).all()
    assert (loss <= light + 0.01).all()
    middle = np.s_[70:130, 70:130]
    # the edge is taken 6 to 13 cells nearer than it is, of the 70 to 130 to it
    assert gap[middle].mean() < rise[middle].mean() / (1.0 - 13.0 / 70.0)
    assert light[middle].mean() < 2.0 * loss[middle].mean()


def edge_distances(elevation, frame, scene):
    """Where the data end, at the nodes; and what a geodesic needs to leave them."""
    ground, tasks = lay_out(elevation, frame, AZIMUTHS, 0.13, scene)
    for task in tasks:
        task()
    return ground.edge.away


def walk_out(elevation, models, row, column, azimuth, step=30.0, most=60e3):
    """Distance along a geodesic until the first place in none of the models [m]."""
    a, _, c, _, e, f = elevation.transform
    to_degrees = Transformer.from_crs(elevation.crs, "EPSG:4326", always_xy=True)
    place = to_degrees.transform(c + a * (column + 0.5), f + e * (row + 0.5))
    away = np.arange(1, int(most / step)) * step
    start = np.full((away.size, 3), (*place, azimuth)).T
    lon, lat, _ = Geod(ellps="WGS84").fwd(*start, away)
    known = np.zeros(away.size, bool)
    for model in models:
        at = Locator(Transformer.from_crs(4326, 4326).source_crs, model)(lon, lat)
        i, j = (np.rint(v).astype(int) for v in at)
        inside = (i >= 0) & (j >= 0) & (i < model.shape[0]) & (j < model.shape[1])
        known[inside] |= np.isfinite(model.heights[i[inside], j[inside]])
    return away[np.argmin(known)]


@pytest.mark.parametrize("case", ["alone", "with a larger model", "a basin"])
def test_the_edge_is_never_taken_too_far_away(small, far, case):
    frame, models, larger = frame_of(small), [small], None
    if case == "with a larger model":
        larger = far_ground(small, far)
        models.append(far)
    if case == "a basin":
        z = small.heights.copy()
        row, column = np.mgrid[: z.shape[0], : z.shape[1]]
        z[np.hypot(row - 100, column - 100) > 85] = np.nan
        z[90:94, 70:73] = np.nan  # a small void within is no edge
        small = dataclasses.replace(small, heights=z)
        models = [small]
    scene = make_scene(small, frame, far=larger, horizon_gap=True)
    away = edge_distances(small, frame, scene)
    dice = np.random.default_rng(5)
    for i, j, a in zip(*(dice.integers(0, n, 60) for n in (50, 50, AZIMUTHS)), strict=True):
        if np.isnan(small.heights[4 * i, 4 * j]):
            continue
        true = walk_out(small, models, 4 * i, 4 * j, a * 360.0 / AZIMUTHS)
        assert away[a, i, j] <= max(true, 0.25 * CELL)
        # A node answers for cells up to 4 sqrt 2 to its side and looks along lines 4 from it: at
        # 22.5 degrees to the edge that is 9.7 / tan 22.5, and as many cells ahead and 2 a step.
        if np.hypot(i - 25, j - 25) < 17:
            assert away[a, i, j] > true - (23.4 + 5.7 + 3.0) * CELL


@pytest.mark.heavy
def test_a_larger_model_shrinks_the_bound(small, large, far):
    highest = float(large.heights.max())
    alone = bound_of(small, highest=highest)
    got = bound_of(small, highest=highest, far=far)
    assert (got.horizon_gap.values < alone.horizon_gap.values).all()
    assert (got.horizon_gap_light.values <= alone.horizon_gap_light.values).all()
    assert got.horizon_gap_light.values.mean() < 0.1 * alone.horizon_gap_light.values.mean()
    # and it is still a bound: here is the range 36 km wide
    whole = made_range.square(36e3, CELL)
    inner = np.s_[..., 500:700, 500:700]
    horizons = [
        terrasol.terrain(small, AZIMUTHS, horizon=True, far=far, threads=2).horizon.values,
        terrasol.terrain(whole, AZIMUTHS, horizon=True, threads=2).horizon.values[inner],
    ]
    highest = float(whole.heights.max())
    got = terrasol.terrain(small, AZIMUTHS, far=far, horizon_gap=True, highest=highest)
    rise = (horizons[1] - horizons[0]).max(axis=0)
    assert rise.max() > 0.5
    # 0.3 degrees is what the lattice of nodes errs by on single cells, larger model or not
    assert (rise <= got.horizon_gap.values + 0.3).all()
    assert (rise <= got.horizon_gap.values).mean() > 0.999


def told(plan):
    sink = ArraySink(plan.elevation.shape)
    return plan.run(sink, 2), sink


def test_the_summary_says_whether_it_matters(metric_ground):
    level = metric_ground(np.full((90, 90), 500.0), 200.0)
    frame = frame_of(level)
    settings = LightSettings(parse_period("2025-06"), Air.ineichen(3.0), azimuths=8)
    low = make_scene(level, frame, horizon_gap=True, highest=500.0)
    summary, sink = told(plan_irradiation(level, settings, low))
    assert sink.arrays["horizon_gap"].max() == 0.0
    assert summary.numbers["horizon_gap_share_of_cells_where_it_matters"] == 0.0
    assert "does not matter" in summary.numbers["remarks"][0]
    assert summary.warnings == []
    high = make_scene(level, frame, horizon_gap=True, highest=2500.0)
    summary, sink = told(plan_irradiation(level, settings, high))
    gap, light = sink.arrays["horizon_gap"]
    whole = sink.arrays["irradiation_period"][0]
    share = (light > 0.01 * whole).mean()
    assert summary.numbers["horizon_gap_share_of_cells_where_it_matters"] == round(share, 4)
    assert summary.numbers["horizon_gap_highest_ground_m"] == 2500.0
    assert "2500 m high" in summary.warnings[0]
    assert summary.numbers["horizon_gap"]["unit"] == "degree"
    assert summary.numbers["horizon_gap"]["horizon gap"]["greatest"] == pytest.approx(
        gap.max(), abs=1e-3
    )
    bound = summary.numbers["horizon_gap: direct light within it"]
    assert bound["unit"] == "MJ m-2"
    summary, sink = told(plan_terrain(level, 8, scene=high))
    assert sink.arrays["horizon_gap"].shape == (1, 90, 90)
    np.testing.assert_array_equal(sink.arrays["horizon_gap"][0], gap)
    assert "degree" in summary.warnings[0]


def test_unit_and_basis_are_those_of_the_run(small):
    plain = bound_of(small).horizon_gap_light
    other = bound_of(small, unit="kW h m-2", basis="map").horizon_gap_light
    slope = np.radians(terrasol.terrain(small, 8).slope.values)
    np.testing.assert_allclose(
        other.values, plain.values / 3.6 / np.cos(slope), rtol=1e-4, atol=1e-3
    )
    assert other.attrs["units"] == "kW h m-2"


def test_the_highest_ground_is_that_of_all_data_and_some_headroom(small, far):
    frame = frame_of(small)
    z = np.concatenate([small.heights.ravel(), far.heights.ravel()])
    both = make_scene(small, frame, far=far_ground(small, far), horizon_gap=True)
    assert both.highest == pytest.approx(z.max() + 100.0 + 0.25 * np.ptp(z), abs=0.1)
    assert make_scene(small, frame, horizon_gap=True, highest=1500.0).highest == 1500.0
    with pytest.raises(terrasol.SettingError, match="not asked for"):
        make_scene(small, frame, highest=900.0)
    with pytest.raises(terrasol.SettingError, match="number of metres"):
        make_scene(small, frame, horizon_gap=True, highest=float("nan"))


def test_ground_outside_is_no_lower_than_where_the_data_end(metric_ground):
    z = np.full((60, 60), 300.0)
    z[0, 30] = 420.0  # a crest that leaves the data
    z[30, 30] = 900.0  # a summit within them says nothing of what is outside
    ground = metric_ground(z, 100.0)
    frame = frame_of(ground)
    assert make_scene(ground, frame, horizon_gap=True, highest=420.0).highest == 420.0
    with pytest.raises(terrasol.SettingError, match=r"as low as 419 m.* reaches 420.0 m.*420 m or"):
        make_scene(ground, frame, horizon_gap=True, highest=419.0)
    with pytest.raises(terrasol.SettingError, match="9900 m, above all ground on Earth"):
        make_scene(ground, frame, horizon_gap=True, highest=9900.0)
    z[:20] = np.nan  # the crest is gone, and the data end further in
    z[20, 5] = 350.0
    z[40, 40] = np.nan  # enclosed: no end of the data
    z[40, 41] = 800.0
    ragged = metric_ground(z, 100.0)
    assert make_scene(ragged, frame_of(ragged), horizon_gap=True, highest=350.0).highest == 350.0
    with pytest.raises(terrasol.SettingError, match="349 m"):
        make_scene(ragged, frame_of(ragged), horizon_gap=True, highest=349.0)


def test_with_a_larger_model_its_own_end_counts(small, far):
    known = far_ground(small, far)
    z = far.heights
    ends = max(float(side.max()) for side in (z[0], z[-1], z[:, 0], z[:, -1]))
    given = {"far": known, "horizon_gap": True}
    assert make_scene(small, frame_of(small), highest=ends, **given).highest == ends
    with pytest.raises(terrasol.SettingError, match="where it ends"):
        make_scene(small, frame_of(small), highest=ends - 1.0, **given)
