"""Slopes of likely grounds, brought by place to what extrapolation to no error finds."""

from dataclasses import replace

import numpy as np
import pytest
from pyproj import CRS
from reference.made_relief import ground_of, made_relief, with_foreign_error

from terrasol.engine.datasets import ArraySink
from terrasol.engine.job import plan_terrain
from terrasol.engine.plan import Block
from terrasol.engine.trued import AREA_DOUBT, MEAN_DOUBT, RATIOS, Truing, propagate_trued, slopes
from terrasol.engine.trued import _without_error as without_error
from terrasol.engine.uncertainty import likely_grounds, propagate_all
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import make_frame
from terrasol.ground.uncertainty import DemError, error_fields


def frame_of(ground):
    return make_frame(ground.shape, ground.transform, ground.crs)


def slope_layer(ground):
    """By the plan of blocks [percent]."""
    sink = ArraySink(ground.shape)
    plan_terrain(ground, 8).run(sink)
    return 100.0 * np.tan(np.radians(sink.arrays["slope"][0].astype(float)))


@pytest.mark.parametrize("degrees", [False, True])
def test_slopes_are_those_of_the_map(degrees):
    """In metres and in degrees, where cells are no squares; beside a void and at the rims."""
    heights = made_relief((70, 300), 1)
    heights[20:23, 40:44] = np.nan
    if degrees:
        step = 1e-4
        ground = Elevation.from_array(heights, (step, 0, 7.0, 0, -step, 62.0), CRS("EPSG:4326"))
    else:
        ground = ground_of(heights)
    np.testing.assert_allclose(
        slopes(heights, frame_of(ground)), slope_layer(ground), rtol=1e-4, atol=1e-4
    )


def test_the_square_of_slopes_is_freed_of_what_error_adds():
    """A plane of 20 %: error adds a known amount to the mean square, extrapolation takes it off.

    With Horn's window the gradient's variance along one axis is, for errors that do not know of
    each other, rmse^2 * 2 * (1 + 4 + 1) / (8 cell)^2 = 3 / 16 rmse^2 / cell^2.
    """
    error = DemError(0.5, 0.0, 48)
    plane = np.broadcast_to(20.0 * np.arange(150.0)[:, None] / 10.0, (150, 150)).astype(np.float32)
    seen = with_foreign_error(plane, error)
    ground = ground_of(seen)
    mean, square = without_error(ground.heights, error, frame_of(ground), Block(0, 0, 150, 150))
    inside = np.s_[5:-5, 5:-5]
    variance = 1e4 * 3 / 16 * 0.5**2 / 10.0**2
    found = slopes(ground.heights, frame_of(ground))[inside].astype(float)
    freed = np.mean(square[inside], dtype=float)
    assert freed == pytest.approx(400.0, rel=0.01)
    assert np.mean(found**2) - freed == pytest.approx(2.0 * variance, rel=0.05)
    # To the mean slope it adds half its crosswise variance over the slope, 0.12 %.
    freed = np.mean(mean[inside], dtype=float)
    assert freed == pytest.approx(20.0, abs=0.06)
    assert np.mean(found) - freed == pytest.approx(variance / 2.0 / 20.0, rel=0.1)


@pytest.fixture(scope="module")
def half_rough():
    """Relief with a level floor in its western half; what is seen of it, and the error."""
    error = DemError(0.5, 50.0, 12)
    truth = made_relief((120, 120), 3, steepness=0.25)
    truth[:, :60] = truth[:, 60:61].mean()
    return truth, ground_of(with_foreign_error(truth, error)), error


def test_a_level_floor_beside_slopes_is_told_as_flatter(half_rough):
    """In the tiles that both share, likely grounds are a third too steep on the floor or more."""
    truth, seen, error = half_rough
    floor, rough = np.s_[10:-10, 40:52], np.s_[10:-10, 75:110]
    truing, frame = Truing.of(seen, error), frame_of(seen)
    drawn, trued = np.zeros(seen.shape), np.zeros(seen.shape)
    for ground in likely_grounds(seen, error):
        drawn += slopes(ground.heights, frame) / error.realisations
        trued += truing(ground) / error.realisations
    actual = slopes(truth, frame)
    assert actual[floor].mean() < 0.01
    assert drawn[floor].mean() > 1.5
    assert trued[floor].mean() < 0.75 * drawn[floor].mean()
    assert trued[rough].mean() == pytest.approx(actual[rough].mean(), rel=0.03)
    assert drawn[rough].mean() == pytest.approx(trued[rough].mean(), rel=0.03)


def test_ground_alike_everywhere_is_left_as_it_is():
    """Gaussian relief is what likely grounds suppose: there is little to be trued."""
    error = DemError(0.5, 50.0, 24)
    truing = Truing.of(ground_of(with_foreign_error(made_relief((120, 120), 1), error)), error)
    assert abs(truing.shift.mean()) < 0.15  # of 12 % slope
    assert 0.98 < np.median(truing.ratio) < 1.02
    assert truing.ratio.min() >= RATIOS[0]
    assert truing.ratio.max() <= RATIOS[1]


def test_voids_stay_void_and_spoil_nothing_beside_them():
    error = DemError(0.5, 50.0, 4)
    heights = with_foreign_error(made_relief((80, 80), 2), error)
    heights[30:50, 30:50] = np.nan
    ground = ground_of(heights)
    truing = Truing.of(ground, error)
    trued = truing(next(likely_grounds(ground, error)))
    known = np.isfinite(heights)
    assert np.isfinite(trued[known]).all()
    assert np.isnan(trued[~known]).all()
    assert (trued[known] >= 0.0).all()


def test_what_truing_does_counts_as_doubt(half_rough):
    """Deviation and mean, put together anew from the draws; heights know nothing of it."""
    _, seen, error = half_rough
    floor = np.s_[20:100, 44:56]
    truing, frame = Truing.of(seen, error), frame_of(seen)

    def look(ground):
        own = slopes(ground.heights, frame)

        def ask(other):
            slope = own if other is None else other
            return {
                "mean": slope[floor].mean(),
                "area": (slope[floor] < 2.0).mean(),
                "flat": (slope[floor] < 1.0).mean(),
                "gentle": ((slope[floor] >= 1.0) & (slope[floor] < 3.0)).mean(),
                "steep": (slope[floor] >= 3.0).mean(),
                "height": ground.heights[floor].mean(),
                "turn": 350.0 + slope[floor].mean(),
            }

        return ask

    classes = ["flat", "gentle", "steep"]
    found = propagate_trued(seen, error, look, areas=["area"], classes=classes, angles=["turn"])
    plain = propagate_all(seen, error, lambda ground: look(ground)(None), angles=["turn"])
    grounds = list(likely_grounds(seen, error))
    told = [look(ground)(truing(ground)) for ground in grounds]
    trued = {name: np.array([each[name] for each in told]) for name in told[0]}
    moved = {name: each.mean() - float(plain[name].mean) for name, each in trued.items()}
    doubts = {
        "mean": MEAN_DOUBT * moved["mean"],
        "area": AREA_DOUBT * moved["area"],
        "flat": AREA_DOUBT * moved["flat"],  # its one bound: all above it moves as much
        "gentle": AREA_DOUBT * np.hypot(moved["flat"], moved["steep"]),
        "steep": AREA_DOUBT * moved["steep"],
    }
    for name, doubt in doubts.items():
        assert abs(doubt) > 0.01
        assert float(found[name].mean) == pytest.approx(trued[name].mean(), rel=1e-5)
        assert float(found[name].deviation) == pytest.approx(
            np.hypot(trued[name].std(ddof=1), doubt), rel=1e-5
        )
        assert float(found[name].estimate) == float(plain[name].estimate)
    assert found["height"].mean == plain["height"].mean
    assert found["height"].deviation == plain["height"].deviation
    assert float(found["turn"].mean) < float(plain["turn"].mean)


def test_the_same_seed_trues_alike_and_another_does_not():
    error = DemError(0.5, 50.0, 4)
    ground = ground_of(with_foreign_error(made_relief((60, 60), 2), error))
    first, again = (Truing.of(ground, error).shift for _ in range(2))
    other = Truing.of(ground, replace(error, seed=5)).shift
    np.testing.assert_array_equal(first, again)
    assert np.abs(first - other).max() > 1e-3
    assert len(list(error_fields(error, ground.shape, (10.0, 10.0)))) == 4


def test_in_windows_slopes_are_trued_as_they_are_with_all_the_raster():
    """Bells reach four standard deviations; beyond the windows and what they need all is void."""
    error = DemError(0.5, 50.0, 3)
    heights = with_foreign_error(made_relief((260, 260), 2), error)
    heights[118:120, 100:102] = np.nan
    ground = ground_of(heights)
    windows = [Block(110, 90, 20, 30), Block(140, 120, 5, 5)]
    drawn = next(likely_grounds(ground, error))
    part, whole = Truing.of(ground, error, windows)(drawn), Truing.of(ground, error)(drawn)
    for w in windows:
        inside = np.s_[w.row : w.row + w.rows, w.column : w.column + w.columns]
        np.testing.assert_allclose(part[inside], whole[inside], rtol=1e-3, atol=1e-2)
    assert np.isnan(part[:70]).all()
    assert np.isfinite(whole[:70]).all()


def test_progress_goes_up_to_the_end():
    error, shares = DemError(0.5, 50.0, 3), []
    ground = ground_of(with_foreign_error(made_relief((60, 60), 2), error))
    propagate_trued(ground, error, lambda _: lambda _: {"nothing": 1.0}, told=shares.append)
    assert shares == sorted(shares)
    assert len(set(shares)) > 8
    assert shares[0] == 0.0
    assert shares[-1] == pytest.approx(1.0)
