"""Error of the heights carried to quantities and maps."""

import dataclasses

import numpy as np
import pytest
from pyproj import CRS

import terrasol
from terrasol.engine.datasets import ArraySink
from terrasol.engine.error_maps import plan_errors
from terrasol.engine.job import plan_irradiation, plan_terrain
from terrasol.engine.spread import UNKNOWN_DIRECTION
from terrasol.engine.uncertainty import (
    likely_grounds,
    moved,
    propagate,
    propagate_all,
    realisations,
    with_tables,
)
from terrasol.errors import SettingError
from terrasol.ground.above import surface_heights
from terrasol.ground.beyond import make_scene
from terrasol.ground.frame import make_frame
from terrasol.ground.uncertainty import DemError
from terrasol.light.settings import LightSettings
from terrasol.sky.period import parse_period

CELL = 10.0


def utm(heights, cell=CELL):
    return terrasol.Elevation.from_array(
        heights, (cell, 0, 5e5, 0, -cell, 5.1e6), CRS("EPSG:32632")
    )


def ramp(shape=(40, 50), east=0.3, north=-0.4):
    """A plane; 26.57 degrees steep as it is here, facing 323 degrees."""
    row, column = np.mgrid[: shape[0], : shape[1]]
    return utm(800.0 + CELL * (east * column - north * row))


def settings(**more):
    quick = {"air": terrasol.Air.ineichen(3.0), "azimuths": 8, "step_seconds": 1800.0}
    return LightSettings(parse_period("2025-04-10/2025-04-12"), **{**quick, **more})


def run(plan, threads=2, progress=None):
    sink = ArraySink(plan.elevation.shape)
    summary = plan.run(sink, threads, progress)
    return sink.arrays, summary


ERROR = DemError(0.5, 40.0, 6, 3)


@pytest.fixture(scope="module")
def rough():
    """Random relief with a void."""
    rng = np.random.default_rng(8)
    z = 900.0 + np.cumsum(np.cumsum(rng.normal(0.0, 1.0, (60, 70)), axis=0), axis=1) / 10.0
    z[20:24, 30:36] = np.nan
    return utm(z)


@pytest.fixture(scope="module")
def with_errors(rough):
    return run(plan_errors(plan_irradiation(rough, settings()), ERROR))


def test_maps_are_those_without(rough, with_errors):
    arrays, summary = with_errors
    plain, told = run(plan_irradiation(rough, settings()))
    for name, values in plain.items():
        np.testing.assert_array_equal(arrays[name], values)
    for name, number in told.numbers.items():
        assert summary.numbers[name] == number
    assert set(arrays) - set(plain) == {
        "slope_standard_error", "aspect_standard_error", "irradiation_period_standard_error"
    }  # fmt: skip


def test_standard_errors_are_what_all_realisations_are_off_the_map(rough, with_errors):
    """Kept one after the other or all at once: the same."""
    plain = run(plan_irradiation(rough, settings()))[0]
    each = [run(plan_irradiation(ground, settings()))[0] for ground in realisations(rough, ERROR)]
    for name in ("slope", "irradiation_period"):
        off = np.array([arrays[name][0] - plain[name][0] for arrays in each], float)
        found = with_errors[0][f"{name}_standard_error"][0]
        all_at_once = np.sqrt(np.mean(off**2, axis=0))
        assert found == pytest.approx(all_at_once, rel=1e-3, abs=1e-3, nan_ok=True)
        shift = with_errors[1].numbers[f"mean_shift_of_{name}"]
        assert shift == pytest.approx(np.nanmean(off), abs=2e-3)
    assert np.isnan(with_errors[0]["slope_standard_error"][0, 20:24, 30:36]).all()


def test_threads_do_not_matter(rough, with_errors):
    arrays, summary = run(plan_errors(plan_irradiation(rough, settings()), ERROR), threads=1)
    for name, values in arrays.items():
        np.testing.assert_array_equal(values, with_errors[0][name])
    assert summary.numbers == with_errors[1].numbers


def test_standard_error_of_a_plane_is_known():
    """White noise s on a plane: of each gradient s sqrt(3) / (4 cell), by Horn's window.

    Its weights are 1, 2, 1 on two columns two cells apart, over 8 cells: s sqrt(12) / (8 cell).
    Slope turns by cos^2 of itself, aspect by the gradient across over its length.
    """
    ground = ramp()
    arrays, _ = run(plan_errors(plan_terrain(ground, 8), DemError(0.2, 0.0, 60)))
    gradient = 0.2 * np.sqrt(12.0) / (8.0 * CELL)
    inner = np.s_[0, 2:-2, 2:-2]
    steepness = np.hypot(0.3, 0.4)
    slope = np.degrees(gradient / (1.0 + steepness**2))
    assert np.sqrt(np.mean(arrays["slope_standard_error"][inner] ** 2)) == pytest.approx(
        slope, rel=0.02
    )
    aspect = np.degrees(gradient / steepness)
    assert np.sqrt(np.mean(arrays["aspect_standard_error"][inner] ** 2)) == pytest.approx(
        aspect, rel=0.02
    )


def test_flat_ground_has_no_aspect_to_err():
    arrays, summary = run(plan_errors(plan_terrain(utm(np.zeros((30, 30))), 8), ERROR))
    assert np.isnan(arrays["aspect_standard_error"]).all()
    assert arrays["slope_standard_error"].min() > 0.0
    assert summary.numbers["mean_shift_of_slope"] > 0.5  # level ground can only get steeper
    nearly = np.mgrid[:30, :30][0] * CELL * np.tan(np.radians(0.06))
    arrays, _ = run(plan_errors(plan_terrain(utm(nearly), 8), DemError(0.5, 40.0, 24)))
    assert np.median(arrays["aspect_standard_error"]) > 70.0
    assert arrays["aspect_standard_error"].max() <= np.float32(UNKNOWN_DIRECTION)


def test_a_model_smoother_than_its_error_is_warned_of():
    _, summary = run(plan_errors(plan_terrain(ramp(), 8), ERROR))
    assert any("smaller RMSE" in warning for warning in summary.warnings)


def test_progress_covers_all_realisations(rough):
    told = []
    plan = plan_errors(plan_irradiation(rough, settings()), ERROR)
    run(plan, progress=lambda share, stage: told.append((share, stage)))
    shares = [share for share, _ in told]
    assert shares == sorted(shares)
    assert shares[-1] == pytest.approx(1.0)
    assert {stage.split(":")[0] for _, stage in told} >= {
        "realisation 1 of 6",
        "realisation 6 of 6",
    }


def test_costs_grow_with_realisations(rough):
    plain = plan_irradiation(rough, settings())
    few, many = (plan_errors(plain, dataclasses.replace(ERROR, realisations=n)) for n in (6, 60))
    assert plain.seconds(1) < few.seconds(1) < many.seconds(1)
    assert plain.memory_bytes < few.memory_bytes == many.memory_bytes
    assert plain.disk_bytes < few.disk_bytes


def test_layers_say_what_they_are(rough):
    plan = plan_errors(plan_irradiation(rough, settings()), ERROR)
    layers = {layer.name: layer for layer in plan.layers}
    slope = layers["slope_standard_error"]
    assert slope.standard_name == "ground_slope_angle standard_error"
    assert slope.unit == "degree"
    assert layers["slope"].tags["ancillary_variables"] == "slope_standard_error"
    energy = layers["irradiation_period_standard_error"]
    assert energy.bands == ("global",)
    assert energy.unit == "MJ m-2"
    assert energy.tags["basis"] == "per area of slope"
    assert "0.5 m rms" in energy.tags["dem_error"]
    assert (energy.tags["realisations"], energy.tags["seed"]) == ("6", "3")


def test_datasets_have_them(rough, with_errors):
    quick = {"air": terrasol.Air.ineichen(3.0), "azimuths": 8, "step_seconds": 1800.0}
    found = terrasol.irradiation(rough, "2025-04-10/2025-04-12", dem_error=ERROR, **quick)
    for name in ("slope", "aspect", "irradiation_period"):
        error = found[f"{name}_standard_error"]
        assert error.dims == ("y", "x")
        np.testing.assert_array_equal(error, with_errors[0][error.name][0])
        assert found[name].attrs["ancillary_variables"] == error.name
    assert found["irradiation_period"].dims == ("part", "y", "x")


def test_a_realisation_moves_what_stands_on_the_ground_and_nothing_else(rough):
    """A wood 20 m high stays 20 m high."""
    frame = make_frame(rough.shape, rough.transform, rough.crs)
    woods = utm(rough.heights + np.where(np.arange(70) > 40, 20.0, 0.0))
    scene = make_scene(rough, frame, surface=surface_heights(rough, woods))
    plan = plan_terrain(rough, 8, scene=scene)
    ground = next(realisations(rough, ERROR))
    obstacles = moved(plan, ground).scene.obstacles
    known = np.isfinite(rough.heights)
    high = obstacles.heights[known] - ground.heights[known]
    assert high == pytest.approx((woods.heights - rough.heights)[known], abs=1e-3)
    assert obstacles.eyes[known] == pytest.approx(ground.heights[known], abs=1e-3)
    assert moved(plan_terrain(rough, 8), ground).scene.obstacles is None


def test_tables_made_once_serve_every_realisation(rough):
    plan = plan_irradiation(rough, settings())
    ready = with_tables(plan, ERROR)
    assert ready.tables.heights[0] <= np.nanmin(rough.heights) - 3.0
    for name, values in run(ready)[0].items():
        assert values == pytest.approx(run(plan)[0][name], rel=1e-4, nan_ok=True)
    assert with_tables(ready, ERROR) is ready
    terrain = plan_terrain(rough, 8)
    assert with_tables(terrain, ERROR) is terrain


def test_realisations_keep_voids_and_scatter_as_stated(rough):
    many = DemError(0.5, 40.0, 60, 3)
    drawn = np.array([ground.heights for ground in realisations(rough, many)], float)
    np.testing.assert_array_equal(np.isnan(drawn[0]), np.isnan(rough.heights))
    added = (drawn - rough.heights)[:, np.isfinite(rough.heights)]
    assert np.sqrt(np.mean(added**2)) == pytest.approx(0.5, rel=0.03)


def test_propagate_takes_numbers_arrays_and_directions(rough):
    found = propagate_all(
        rough,
        ERROR,
        lambda ground: {
            "top": np.nanmax(ground.heights),
            "heights": ground.heights,
            "turn": (350.0 + 2.0 * np.nanmean(ground.heights[:5, :5] - rough.heights[:5, :5]))
            % 360,
        },
        angles=["turn"],
    )
    each = np.array([ground.heights for ground in likely_grounds(rough, ERROR)])
    assert found["top"].estimate.shape == ()
    assert found["top"].mean == pytest.approx(np.nanmax(each, axis=(1, 2)).mean())
    assert found["heights"].deviation == pytest.approx(
        np.std(each, axis=0, ddof=1, dtype=float), rel=1e-6, nan_ok=True
    )
    assert found["heights"].count.max() == 6
    assert found["heights"].count.min() == 0
    assert found["turn"].angle
    one = propagate(rough, ERROR, lambda ground: np.nanmax(ground.heights))
    assert one == found["top"]


def test_propagate_tells_how_far_it_is_and_refuses_another_shape(rough):
    told = []
    propagate(rough, ERROR, lambda ground: 1.0, progress=told.append)
    assert told == [1, 2, 3, 4, 5, 6]
    shapes = iter([(2,), (2,), (3,)])
    with pytest.raises(SettingError, match="shape"):
        propagate(rough, ERROR, lambda ground: np.zeros(next(shapes)))
