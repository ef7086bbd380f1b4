"""The whole job on made-up ground: what must hold whatever the ground."""

import dataclasses

import numpy as np
import pytest
from pyproj import CRS

import terrasol
from terrasol.engine import job, plan
from terrasol.engine.datasets import ArraySink
from terrasol.engine.job import Plan, plan_irradiation, plan_terrain
from terrasol.engine.totals import Totals
from terrasol.errors import InputError, SettingError
from terrasol.files.layers import Layer
from terrasol.light.settings import LightSettings
from terrasol.light.surroundings import Surroundings
from terrasol.sky.period import parse_period

AIR = terrasol.Air.ineichen(3.0)
QUICK = {"air": AIR, "azimuths": 16, "step_seconds": 600.0}


def waves(shape):
    """Smooth mountains [m]."""
    row, column = np.mgrid[: shape[0], : shape[1]]
    first = 250.0 * np.sin(row / 37.0 + 0.3) * np.cos(column / 51.0)
    return 800.0 + first + 120.0 * np.sin((row + 2 * column) / 60.0)


def utm(heights, cell=40.0):
    """Ground in UTM zone 32, three degrees east of its meridian: north is turned by 2.4."""
    return terrasol.Elevation.from_array(
        heights, (cell, 0, 7.5e5, 0, -cell, 5.1e6), CRS("EPSG:32632")
    )


def settings(period="2025-04", **more):
    return LightSettings(parse_period(period), **{**QUICK, **more})


def whole(light):
    """Irradiation of all the period, whether it is a year or not; (part, y, x)."""
    return light["irradiation_year" if "irradiation_year" in light else "irradiation_period"]


def run(the_plan: Plan, threads=2, progress=None):
    """Arrays by layer, and the summary."""
    sink = ArraySink(the_plan.elevation.shape)
    summary = the_plan.run(sink, threads, progress)
    return sink.arrays, summary


@pytest.fixture(scope="module")
def wide():
    """Two by three blocks, with a void across a border of blocks."""
    z = waves((300, 520))
    z[40:50, 250:262] = np.nan
    return utm(z)


@pytest.fixture(scope="module")
def wide_run(wide):
    return run(plan_irradiation(wide, settings(monthly_parts=True)), threads=1)


def test_result_does_not_depend_on_the_number_of_threads(wide, wide_run):
    arrays, summary = run(plan_irradiation(wide, settings(monthly_parts=True)), threads=3)
    assert set(arrays) == set(wide_run[0]) >= {"slope", "irradiation_months", "beam_months"}
    for name, values in arrays.items():
        np.testing.assert_array_equal(values, wide_run[0][name])
    assert summary.numbers == wide_run[1].numbers
    assert summary.warnings == wide_run[1].warnings


def test_result_does_not_depend_on_the_order_of_blocks(wide, wide_run, monkeypatch):
    order = np.random.default_rng(2).permutation(6)
    blocks = plan.blocks_of(wide.shape)
    assert len(blocks) == 6
    monkeypatch.setattr(job, "blocks_of", lambda shape: [blocks[i] for i in order])
    arrays, _ = run(plan_irradiation(wide, settings(monthly_parts=True)))
    for name, values in arrays.items():
        np.testing.assert_array_equal(values, wide_run[0][name])


def test_smaller_blocks_change_next_to_nothing(wide, wide_run, monkeypatch):
    # Blocks of 128 cells take their directions from other middles (0.04 degrees of turn) and
    # their sun from other latitudes (0.025 degrees); nothing else may hang on them.
    monkeypatch.setattr(plan, "BLOCK", 128)
    assert len(plan.blocks_of(wide.shape)) == 15
    arrays, _ = run(plan_irradiation(wide, settings(monthly_parts=True)))
    old = wide_run[0]
    np.testing.assert_allclose(arrays["slope"], old["slope"], atol=1e-4)
    np.testing.assert_allclose(arrays["sky_view"], old["sky_view"], atol=1e-4)
    year = np.nanmean(old["irradiation_period"][0])
    np.testing.assert_allclose(
        arrays["irradiation_period"], old["irradiation_period"], atol=3e-4 * year
    )


def step_across(values, border):
    """Mean step between the columns before and behind a border, beyond the slope around it."""
    a, b, c, d = (values[:, border + i] for i in (-2, -1, 0, 1))
    return np.nanmean((c - b) - ((b - a) + (d - c)) / 2.0)


def test_there_are_no_seams_between_blocks(wide_run):
    arrays = wide_run[0]
    year = arrays["irradiation_period"].astype(np.float64)
    mean = np.nanmean(year[0])
    for part in year:
        # Taking the sun of the wrong latitude by a grain of 0.05 degrees would be a step of
        # 4e-4; what is left after turning the ground is the air the sun passes.
        assert abs(step_across(part, 256)) < 2e-4 * mean
        assert abs(step_across(part, 512)) < 2e-4 * mean
        assert abs(step_across(part.T, 256)) < 2e-4 * mean
    for name, bound in (("slope", 2e-3), ("sky_view", 2e-5)):
        layer = arrays[name][0].astype(np.float64)
        for values, border in ((layer, 256), (layer, 512), (layer.T, 256)):
            assert abs(step_across(values, border)) < bound


def test_parts_sum_to_global_and_months_to_the_period(wide_run):
    arrays = wide_run[0]
    year, months = arrays["irradiation_period"], arrays["irradiation_months"]
    np.testing.assert_allclose(year[0], year[1:].sum(axis=0), rtol=2e-6)
    np.testing.assert_allclose(year[0], months.sum(axis=0), rtol=2e-6)
    parts = [arrays[f"{name}_months"] for name in ("beam", "diffuse", "reflected")]
    np.testing.assert_allclose(sum(parts), months, rtol=2e-6)
    for part, of_months in zip(year[1:], parts, strict=True):
        np.testing.assert_allclose(of_months.sum(axis=0), part, rtol=2e-6, atol=2e-3)


def test_summary_tells_of_voids(wide, wide_run):
    _, summary = wide_run
    assert summary.numbers["cells"] == 300 * 520
    assert summary.numbers["void_cells"] == 120
    across = summary.numbers["cells_looking_across_void"]
    assert 120 < across <= 300 * 520 - 120
    assert any(str(across) in words and "void" in words for words in summary.warnings)


def test_whole_ground_looks_across_nothing():
    told = dataclasses.replace(utm(waves((40, 50))), warnings=("metres assumed",))
    _, summary = run(plan_terrain(told, 8))
    assert summary.numbers["cells_looking_across_void"] == 0
    assert summary.numbers["void_cells"] == 0
    assert summary.warnings == ["metres assumed"]


def test_summary_holds_means_and_ranges(wide_run):
    arrays, summary = wide_run
    told = summary.numbers["irradiation_period"]
    assert told["unit"] == "MJ m-2"
    for band, part in enumerate(("global", "beam", "diffuse", "reflected")):
        values = arrays["irradiation_period"][band].astype(np.float64)
        assert told[part]["mean"] == pytest.approx(np.nanmean(values), abs=1e-3)
        assert told[part]["least"] == pytest.approx(np.nanmin(values), abs=1e-3)
        assert told[part]["greatest"] == pytest.approx(np.nanmax(values), abs=1e-3)
    assert summary.numbers["slope"]["slope"]["mean"] == pytest.approx(
        np.nanmean(arrays["slope"].astype(np.float64)), abs=1e-3
    )
    assert "aspect" not in summary.numbers  # directions have no mean of this kind
    assert set(summary.seconds) >= {"sun tables", "far horizon", "blocks"}
    assert all(seconds >= 0.0 for seconds in summary.seconds.values())


def test_no_minus_stands_before_a_zero_of_the_totals():
    """A direction that is the same in every realisation has a deviation of -0.0."""
    totals = Totals()
    totals.add({"slope": np.array([[[-0.0, -1e-6]]], np.float32)})
    layers = (Layer("slope", ("slope",), "degree", ""),)
    the_plan = dataclasses.replace(plan_terrain(utm(waves((4, 4))), 8), layers=layers)
    found = totals.means(the_plan)["slope"]["slope"]
    assert [f"{value:g}" for value in found.values()] == ["0", "0", "0"]


def test_totals_run_over_blocks_and_skip_voids():
    totals = Totals()
    one = np.array([[[1.0, np.nan], [3.0, 8.0]]], np.float32)
    totals.add({"slope": one, "aspect": one, "status": one, "horizon": one})
    totals.add({"slope": np.full((1, 2, 2), np.nan, np.float32)})
    totals.add({"slope": np.array([[[-2.0]]], np.float32)})
    two_bands = np.stack([one[0], one[0] * 10.0])
    totals.add({"months": two_bands})
    layers = (
        Layer("slope", ("slope",), "degree", ""),
        Layer("aspect", ("aspect",), "degree", ""),
        Layer("months", ("May", "June"), "MJ m-2", ""),
    )
    the_plan = dataclasses.replace(plan_terrain(utm(waves((4, 4))), 8), layers=layers)
    assert totals.means(the_plan) == {
        "slope": {"unit": "degree", "slope": {"mean": 2.5, "least": -2.0, "greatest": 8.0}},
        "months": {
            "unit": "MJ m-2",
            "May": {"mean": 4.0, "least": 1.0, "greatest": 8.0},
            "June": {"mean": 40.0, "least": 10.0, "greatest": 80.0},
        },
    }


JOBS = {
    "terrain": lambda ground: plan_terrain(ground, 8),
    "irradiation": lambda ground: plan_irradiation(ground, settings(azimuths=8)),
    "irradiation, black ground": lambda ground: plan_irradiation(
        ground, settings(azimuths=8, albedo=(0.0,) * 12)
    ),
}


@pytest.mark.parametrize("which", JOBS)
def test_progress_rises_to_the_whole(which):
    told = []
    run(JOBS[which](utm(waves((60, 300)))), progress=lambda *now: told.append(now))
    shares = [share for share, _ in told]
    assert shares == sorted(shares)
    assert shares[0] > 0.0
    assert shares[-1] == pytest.approx(1.0)
    assert told[-1][1] == "blocks"


def test_threads_below_one_are_refused():
    the_plan = plan_terrain(utm(waves((20, 20))), 8)
    sink = ArraySink((20, 20))
    with pytest.raises(SettingError, match="threads"):
        the_plan.run(sink, 0)
    assert sink.arrays == {}


class FullDisk(ArraySink):
    """A sink that fails at its third block."""

    count = 0

    def write(self, name, row, column, values):
        self.count += 1
        if self.count == 3:
            raise terrasol.OutputError("no space left")
        super().write(name, row, column, values)


def test_a_failing_sink_ends_the_run(wide):
    sink = FullDisk(wide.shape)
    with pytest.raises(terrasol.OutputError, match="no space"):
        plan_terrain(wide, 8).run(sink, 2)
    assert sink.count == 3


def test_estimates_are_positive_and_grow():
    small, large = utm(waves((40, 50))), utm(waves((300, 520)))
    few = plan_irradiation(small, settings())
    assert few.cells == 2000
    for more in (
        plan_irradiation(large, settings()),
        plan_irradiation(small, settings(azimuths=64)),
        plan_irradiation(small, settings(monthly_parts=True)),
    ):
        for name in ("memory_bytes", "disk_bytes"):
            assert isinstance(getattr(more, name), int)
            assert getattr(more, name) >= getattr(few, name) > 0
        assert more.memory_bytes > few.memory_bytes
        assert more.seconds(2) > few.seconds(2) > 0.0
        assert more.seconds(4) <= more.seconds(1)
    with_horizon = plan_terrain(large, 16, horizon=True)
    assert with_horizon.disk_bytes > 5 * plan_terrain(large, 16).disk_bytes
    # working copies and finished files of float32: at least the arrays themselves
    assert with_horizon.disk_bytes >= 4 * 300 * 520 * (3 + 16)


def test_status_tells_read_filled_and_void():
    z = waves((30, 40))
    z[3:6, 7] = np.nan
    filled = np.zeros(z.shape, bool)
    filled[20:22, 30] = True
    arrays, summary = run(plan_terrain(dataclasses.replace(utm(z), filled=filled), 8))
    want = np.where(np.isnan(z), 2, filled.astype(int))
    assert arrays["status"].dtype == np.uint8
    np.testing.assert_array_equal(arrays["status"][0], want)
    assert "status" not in summary.numbers
    plain, _ = run(plan_terrain(utm(z), 8))
    assert "status" not in plain


def test_every_layer_is_void_where_the_ground_is(wide, wide_run):
    void = np.isnan(wide.heights)
    for name, values in wide_run[0].items():
        assert np.isnan(values[:, void]).all(), name
        if name != "aspect":
            assert np.isfinite(values[:, ~void]).all(), name


def test_level_open_ground_is_what_the_summary_says(metric_ground):
    flat = metric_ground(np.full((30, 40), 650.0), 20.0)
    arrays, summary = run(plan_irradiation(flat, settings("2025")))
    level = summary.numbers["level_ground"]
    np.testing.assert_allclose(arrays["irradiation_year"][0], level, rtol=1e-3)
    # common practice, no source: a clear year at 46 degrees brings 6 to 9 GJ
    assert 6000.0 < level < 9000.0
    _, kilowatt_hours = run(plan_irradiation(flat, settings("2025", unit="kW h m-2")))
    assert kilowatt_hours.numbers["level_ground"] == pytest.approx(level / 3.6, abs=0.01)


def test_surroundings_are_sampled_from_what_cells_get(wide, monkeypatch):
    # Each sample is what that very cell gets over black ground, and the rest of its sky view. The
    # light of samples is allowed the 0.01 % that docs/method.md states for sharing a sun table
    # over 0.05 degrees; a neighbour's light would be off by 0.1 % and more.
    kept = {}
    spread = Surroundings.of.__func__

    def of(cls, samples, stride, *more):
        kept.update(samples=samples.copy(), stride=stride)
        return spread(cls, samples, stride, *more)

    monkeypatch.setattr(Surroundings, "of", classmethod(of))
    run(plan_irradiation(wide, settings("2025-04/2025-05")))
    black, _ = run(plan_irradiation(wide, settings("2025-04/2025-05", albedo=(0.0,) * 12)))
    samples, stride = kept["samples"], kept["stride"]
    assert stride > 2
    every = slice(stride // 2, None, stride)
    want = np.concatenate([black["irradiation_months"], 1.0 - black["sky_view"]])[:, every, every]
    got = samples[:, : want.shape[1], : want.shape[2]]
    np.testing.assert_allclose(got[-1], want[-1], rtol=2e-6, atol=1e-7)
    np.testing.assert_allclose(got[:-1], want[:-1], rtol=1e-4)
    beside = np.abs(got[:-1, :, 1:] / want[:-1, :, :-1] - 1.0)
    assert np.nanmedian(beside) > 1e-3
    assert np.isnan(samples[:, want.shape[1] :]).all()
    assert np.isnan(samples[:, :, want.shape[2] :]).all()


@pytest.mark.parametrize("shape", [(2, 40), (4, 4), (40, 3), (5, 40), (9, 9)])
def test_small_rasters_have_surroundings_too(metric_ground, shape):
    z = 500.0 + 5.0 * np.add.outer(np.arange(shape[0]), np.arange(shape[1]))
    light = terrasol.irradiation(metric_ground(z, 10.0), "2025-06", albedo=0.5, **QUICK)
    reflected = whole(light).sel(part="reflected").values / whole(light).sel(part="global").values
    # an open slope sees (1 - cos S) / 2 of ground that gets about as much as it does
    slope = np.radians(light["slope"].values)
    np.testing.assert_allclose(reflected, 0.5 * (1.0 - np.cos(slope)) / 2.0, rtol=0.25)


def test_ground_without_any_slope_is_refused():
    z = np.full((40, 50), np.nan)
    z[20, 20] = 300.0
    with pytest.raises(InputError, match="no cell has neighbours enough"):
        run(plan_terrain(utm(z)))
