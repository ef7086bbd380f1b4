"""The whole series: against the tables, hour against day, at the ends of the Earth, on disk."""

import tempfile
import tracemalloc
import warnings
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from reference.kept import KeptSeries, series_of
from reference.made_station import made_station
from reference.plain_sun import Place, beam_months

import terrasol
from terrasol.engine import ground_work, series
from terrasol.engine.series import plan_series, stack_variables
from terrasol.engine.series_work import BlockWork
from terrasol.ground.beyond import Scene
from terrasol.ground.horizon import Obstacles
from terrasol.light.series import SeriesSettings
from terrasol.sky.clear import Air
from terrasol.sky.irradiance import Irradiance
from terrasol.sky.measured import measured_sky

AIR = Air.ineichen(3.0)
PARTS = ("global", "beam", "diffuse", "reflected")


def ridges(rows=60, columns=70, height=400.0):
    """Steep made ground."""
    y, x = np.mgrid[0:rows, 0:columns].astype(float)
    return 1200.0 + height * (np.sin(x / 9.0 + 0.3 * y) * np.cos(y / 11.0) + 0.2 * np.sin(x / 3.1))


@pytest.fixture(scope="module")
def ground(metric_ground):
    return metric_ground(ridges(), 60.0)


@pytest.mark.heavy
def test_year_of_moments_is_the_year_of_tables(ground):
    # issue: "Tables and moments agree to 0.1 % over a year"; two ways that share no kernel
    year = terrasol.irradiation(ground, "2025", AIR)["irradiation_year"]
    found, _ = series_of(ground, "2025", step="1d", quantities=PARTS)
    for part in PARTS:
        want = year.sel(part=part).values.astype(float)
        got = found[part].sum(axis=0, dtype=float)
        assert abs(got.mean() / want.mean() - 1.0) < 1e-3, part
        assert np.sqrt(np.mean((got - want) ** 2)) < 1.5e-3 * want.mean(), part


def test_mapped_albedo_is_that_of_the_tables_by_cell_and_month(ground):
    rng = np.random.default_rng(3)
    coarse = rng.uniform(0.1, 0.9, (12, 6, 7))
    mapped = np.repeat(np.repeat(coarse, 10, axis=1), 10, axis=2).astype(np.float32)
    mapped[2, 20:30, 30:40] = np.nan  # there the plain one counts
    given = {"albedo": 0.2, "albedo_map": mapped}
    months = terrasol.irradiation(ground, "2025-03/2025-04", AIR, monthly_parts=True, **given)
    named = ("reflected", "net", "global")
    given["albedo"] = (0.2,) * 12
    found, plan = series_of(ground, "2025-03/2025-04", step="1d", quantities=named, **given)
    march = np.arange(plan.steps) < 31
    for month, mine in ((2, march), (3, ~march)):
        got = found["reflected"][mine].sum(axis=0)
        want = months["reflected_months"].values[month - 2]
        assert abs(got.mean() / want.mean() - 1.0) < 2e-3
        np.testing.assert_allclose(got, want, atol=0.01 * want.max())
        share = np.where(np.isnan(mapped[month]), 0.2, mapped[month])
        net = (1.0 - share) * found["global"][mine]
        np.testing.assert_allclose(found["net"][mine], net, rtol=1e-5)


def test_an_even_map_of_albedo_is_the_number(ground):
    named = ("reflected", "net")
    period = "2025-03-20"
    want, _ = series_of(ground, period, quantities=named, albedo=(0.6,) * 12)
    layer = np.full((1, *ground.shape), 0.6, np.float32)
    got, _ = series_of(ground, period, quantities=named, albedo_map=layer)
    for name in named:
        assert want[name].max() > 20.0
        np.testing.assert_allclose(got[name], want[name], rtol=1e-5, atol=1e-3)


def test_a_map_of_albedo_that_does_not_fit_is_refused(ground, tmp_path):
    given = {"albedo_map": np.zeros((3, 2, 2), np.float32), "horizon_store": False}
    with pytest.raises(terrasol.SettingError, match="albedo map must have the shape"):
        terrasol.irradiation_series(ground, tmp_path / "a.nc", "2025-06-01", AIR, **given)
    assert list(tmp_path.iterdir()) == []


def test_months_of_moments_are_those_of_tables_with_albedo_by_month(ground):
    albedo = tuple(np.linspace(0.1, 0.8, 12))
    months = terrasol.irradiation(ground, "2025-03/2025-04", AIR, albedo=albedo, monthly_parts=True)
    named = ("reflected", "net", "global")
    found, plan = series_of(ground, "2025-03/2025-04", step="1d", quantities=named, albedo=albedo)
    march = np.arange(plan.steps) < 31
    for i, mine in enumerate((march, ~march)):
        got = found["reflected"][mine].sum(axis=0)
        want = months["reflected_months"].values[i]
        assert abs(got.mean() / want.mean() - 1.0) < 2e-3
        np.testing.assert_allclose(
            found["net"][mine], found["global"][mine] * (1 - albedo[2 + i]), rtol=1e-5
        )


def test_a_day_is_the_sum_of_its_hours(ground):
    given = {"quantities": (*PARTS, "net")}
    hours, plan = series_of(ground, "2025-02-27/2025-03-02", step="1h", **given)
    days, daily = series_of(ground, "2025-02-27/2025-03-02", step="1d", **given)
    np.testing.assert_array_equal(plan.edges[::24], daily.edges)
    for name, mean in hours.items():
        energy = mean.reshape(4, 24, *ground.shape).sum(axis=1, dtype=float) * 3600e-6
        # within a block the even light follows its change of the whole step, at one height: that
        # is a tenth of what a stored day is rounded to
        np.testing.assert_allclose(days[name], energy, atol=1e-4)
    np.testing.assert_allclose(
        hours["global"], hours["beam"] + hours["diffuse"] + hours["reflected"], rtol=1e-5
    )


def test_days_of_beam_against_plain_minutes(ground):
    z = ground.heights.astype(float)
    span = 60.0 * (np.array(z.shape) - 1) / 2 / 111_200.0
    wide = span[1] / np.cos(np.radians(46.0))
    place = Place(46.0 + span[0], 46.0 - span[0], 9.0 - wide, 9.0 + wide, float(z.mean()))
    cells = np.mgrid[3:60:6, 3:70:6]
    want = beam_months(z, 60.0, 60.0, place, start="2025-10-01", end="2025-10-04", cells=cells)[9]
    found, _ = series_of(ground, "2025-10-01/2025-10-03", step="1d", quantities=("beam",))
    got = found["beam"].sum(axis=0)[cells[0], cells[1]]
    assert abs(got.mean() / want.mean() - 1.0) < 2e-3
    # three days cross few of the ridges between 64 azimuths
    assert np.sqrt(np.mean((got - want) ** 2)) < 0.02 * want.mean()


def test_moments_of_five_minutes_are_enough(ground):
    given = {"quantities": ("beam",)}
    coarse, _ = series_of(ground, "2025-12-10", **given)
    fine, _ = series_of(ground, "2025-12-10", substep_seconds=60.0, **given)
    lit = fine["beam"] > 0.0
    gap = (coarse["beam"] - fine["beam"])[lit]
    assert np.sqrt(np.mean(gap**2)) < 2.5  # W m-2; the hours in which a ridge cuts the sun
    assert abs(gap.mean()) < 1e-3 * fine["beam"][lit].mean()


def test_results_do_not_depend_on_threads_or_spans(ground, monkeypatch):
    given = {"quantities": ("global",)}
    whole, _ = series_of(ground, "2025-06-01/2025-06-06", threads=1, **given)
    monkeypatch.setattr(series, "WORK_STEPS", {"1h": 10, "1d": 10})
    monkeypatch.setattr(series, "SPAN_STEPS", {"1h": 40, "1d": 10})
    parts, plan = series_of(ground, "2025-06-01/2025-06-06", threads=3, **given)
    assert plan.span == 40
    np.testing.assert_array_equal(parts["global"], whole["global"])


def test_no_seams_between_blocks(metric_ground):
    # a plane over two blocks, 40 km wide: noon passes from east to west without a jump that
    # the stored values, rounded to 1/8 W m-2, could show
    flat = metric_ground(np.zeros((8, 500)), (80.0, 80.0), 55.0, 9.0)
    found, _ = series_of(flat, "2025-12-01", quantities=("global",), azimuths=8, albedo=(0.0,) * 12)
    light = found["global"][:, 4].astype(float)
    steps = np.diff(light[:, 3:-3], axis=1)
    lit = light.max(axis=1) > 10.0
    assert lit.sum() >= 7
    across = steps[lit, 252 - 3]  # from column 252 to 253 and so on, blocks meet at 256
    seam = steps[lit, 255 - 3]
    np.testing.assert_allclose(seam, across, atol=2.0**-4)
    assert np.abs(steps[lit]).max() < 2.0**-3


def test_voids_stay_void(metric_ground):
    z = ridges()
    z[10:14, 20:25] = np.nan
    found, _ = series_of(metric_ground(z, 60.0), "2025-06-01", quantities=("global", "net"))
    for values in found.values():
        np.testing.assert_array_equal(np.isnan(values), np.broadcast_to(np.isnan(z), values.shape))
    assert (found["global"][:, ~np.isnan(z)] >= 0.0).all()


def test_map_basis_is_slope_basis_over_the_cosine(ground):
    slope, _ = series_of(ground, "2025-06-01", quantities=("global",))
    plan_area, _ = series_of(ground, "2025-06-01", quantities=("global",), basis="map")
    cosine = np.cos(np.radians(terrasol.terrain(ground, 8)["slope"].values))
    np.testing.assert_allclose(plan_area["global"] * cosine, slope["global"], rtol=1e-4, atol=1e-3)


def test_polar_night_is_dark_and_silent(metric_ground):
    ground = metric_ground(ridges(24, 24), 60.0, latitude=75.0, longitude=20.0)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for step in ("1h", "1d"):
            found, _ = series_of(
                ground, "2025-12-10/2025-12-12", step=step, quantities=(*PARTS, "net")
            )
            assert all((values == 0.0).all() for values in found.values())


def test_midnight_sun_shines_all_day(metric_ground):
    ground = metric_ground(np.zeros((12, 12)), 60.0, latitude=75.0, longitude=20.0)
    found, _ = series_of(ground, "2025-06-21", quantities=("beam",))
    assert (found["beam"][:, 6, 6] > 10.0).all()


def test_equator_sees_the_same_from_both_sides(metric_ground):
    # at the equinox the sun passes the zenith: a north slope and a south slope get the same
    fall = np.outer(np.arange(13.0) - 6.0, np.ones(13)) * 20.0
    light = []
    for z in (fall, fall[::-1]):
        ground = metric_ground(z, 60.0, latitude=0.0, longitude=0.0)
        found, _ = series_of(ground, "2025-03-20", step="1d", quantities=("beam",))
        light.append(float(found["beam"][0, 6, 6]))
    assert light[0] == pytest.approx(light[1], rel=2e-3)
    assert light[0] > 20.0


def test_date_line_is_like_any_meridian(metric_ground):
    z = ridges(40, 300)
    totals = []
    for longitude in (179.95, -0.05):
        ground = metric_ground(z, 60.0, latitude=-17.0, longitude=longitude)
        assert np.ptp(ground.heights) > 100.0
        found, _ = series_of(
            ground, "2025-11-05", quantities=("global",), albedo=(0.0,) * 12, azimuths=16
        )
        totals.append(found["global"])
    # twelve hours of declination apart, and a quarter of an hour angle's sliver in the edges
    day = [t.sum(axis=0, dtype=float) for t in totals]
    assert day[0].mean() == pytest.approx(day[1].mean(), rel=3e-3)
    np.testing.assert_allclose(day[0], day[1], rtol=0.03)


def test_coarse_blocks_are_cut_into_places(metric_ground):
    # cells of 400 m: a block is 0.9 degrees high, and no place may serve more than 0.25
    ground = metric_ground(np.zeros((256, 40)), 400.0, latitude=62.0)
    given = SeriesSettings(terrasol.parse_period("2025-01-10"), AIR, azimuths=8)
    plan = plan_series(ground, given)

    class NoHorizons:
        def block(self, row, column):
            return np.zeros((8, 256, 40), np.uint16)

    work = BlockWork(ground, plan.frame, given, plan.heights, NoHorizons())
    block = work.ground(series.blocks_of(ground.shape)[0])
    parts = list(block.parts())
    assert len(parts) == 4
    covered = np.zeros((256, 40), int)
    for part in parts:
        covered[part] += 1
        assert block.place(part).reach < np.radians(0.25)
    assert (covered == 1).all()
    found, _ = series_of(ground, "2025-01-10", step="1d", quantities=("global",), azimuths=8)
    column = found["global"][0, :, 20].astype(float)  # from north to south it gets lighter
    assert column[-1] > 1.2 * column[0]
    steps = np.diff(column[2:-2])
    seams = np.abs(steps - np.median(steps)) > 0.2 * np.median(steps)
    assert seams.sum() <= 3
    # the noon sun stands at 6 degrees; finer grids have smaller places
    assert np.abs(steps[seams]).max(initial=0.0) < 3e-3 * column.mean()


class Cloudy:
    """Half the beam in the forenoon of UTC, all of it in the afternoon; asked moment by moment."""

    def over(self, sun, height):
        """As `Sky` wants it."""
        clear = AIR.over(sun, height)
        early = (sun.time - sun.time.astype("M8[D]")) < np.timedelta64(12, "h")
        share = np.where(early, 0.5, 1.0)
        return Irradiance(
            clear.beam_normal * share, clear.diffuse_horizontal, clear.extraterrestrial_normal
        )


def test_any_sky_can_be_asked(ground):
    given = {"quantities": ("beam",), "diffuse": "isotropic"}
    clear, plan = series_of(ground, "2025-06-01", **given)
    cloudy, _ = series_of(ground, "2025-06-01", Cloudy(), **given)
    early = plan.edges[:-1] < np.datetime64("2025-06-01T12:00")
    want = clear["beam"] * np.where(early, 0.5, 1.0)[:, None, None]
    np.testing.assert_allclose(cloudy["beam"], want, rtol=1e-4, atol=0.02)
    for sky, potential in ((Cloudy(), False), (AIR, True)):
        words = stack_variables(SeriesSettings(terrasol.parse_period("2025"), sky))[0].long_name
        assert ("potential" in words) is potential


def test_measured_hours_come_back_at_the_station(metric_ground):
    # issue: "at the station's own cell, unshaded and horizontal, the energy comes back exactly"
    station = made_station("2025-05-01", 6, latitude=46.0, longitude=9.0, height=600.0)
    sky = measured_sky(station, AIR).sky
    level = metric_ground(np.full((24, 24), 600.0), 60.0, latitude=46.0, longitude=9.0)
    found, plan = series_of(
        level, "2025-05-02/2025-05-05", sky, quantities=("global",), albedo=(0.0,) * 12
    )
    first = np.flatnonzero(station.start == plan.edges[0])[0]
    want = station.values["global"][first : first + plan.steps]
    got = found["global"][:, 11:13, 11:13].mean(axis=(1, 2))
    assert want.max() > 500.0
    assert got.sum() == pytest.approx(want.sum(), rel=1e-3)
    # hours that the sun rises or sets in are as good as moments of five minutes
    np.testing.assert_allclose(got, want, atol=3.0)


def test_what_stands_above_the_ground_hides_the_sun_and_has_its_own_key(ground):
    trees = ground.heights + np.where(np.indices(ground.shape)[1] % 7 == 3, 60.0, 0.0)
    obstacles = Obstacles(trees.astype(np.float32), ground.heights, 0)
    given = SeriesSettings(terrasol.parse_period("2025-10-01"), AIR, quantities=("beam",))
    bare, wooded = (plan_series(ground, given, scene) for scene in (None, Scene(obstacles)))
    assert bare.key != wooded.key
    light = []
    with tempfile.TemporaryDirectory() as store:
        for plan in (bare, wooded, bare):
            kept = KeptSeries(plan)
            plan.run(kept, Path(store), 2)
            light.append(kept.values["beam"])
    np.testing.assert_array_equal(light[0], light[2])
    assert light[1].mean() < 0.98 * light[0].mean()


@pytest.fixture
def sweeps(monkeypatch):
    """Azimuths swept since the test began."""
    counted = []
    real = ground_work.sweep

    def counting(*given):
        counted.append(given[2])
        return real(*given)

    monkeypatch.setattr(ground_work, "sweep", counting)
    return counted


def test_second_run_skips_the_sweep(ground, tmp_path, sweeps):
    given = {"quantities": ("global",), "azimuths": 16, "store": tmp_path}
    first, plan = series_of(ground, "2025-06-01", **given)
    assert len(sweeps) == 16
    second, _ = series_of(ground, "2025-06-01", **given)
    series_of(ground, "2025-07-01", basis="map", albedo=(0.5,) * 12, **given)
    assert len(sweeps) == 16
    np.testing.assert_array_equal(first["global"], second["global"])
    series_of(ground, "2025-06-01", refraction=0.0, **given)
    assert len(sweeps) == 32
    block = next((tmp_path / plan.key).glob("*.npy"))
    block.write_bytes(block.read_bytes()[:-2])
    again, _ = series_of(ground, "2025-06-01", **given)
    assert len(sweeps) == 48
    np.testing.assert_array_equal(first["global"], again["global"])


class Nothing:
    """A sink that keeps nothing."""

    def write(self, name, time, row, column, values):
        """Let it go."""


def test_memory_does_not_grow_with_the_number_of_steps(ground, tmp_path):
    def peak(period):
        given = SeriesSettings(terrasol.parse_period(period), AIR, azimuths=8)
        plan = plan_series(ground, given)
        plan.run(Nothing(), tmp_path, 1)
        tracemalloc.start()
        plan.run(Nothing(), tmp_path, 1)
        most = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        return most, plan

    short, plan = peak("2025-06-01/2025-06-13")
    assert plan.steps > plan.span  # more than one span already
    long, plan = peak("2025-06-01/2025-07-13")
    assert plan.steps > 3 * plan.span
    assert long < 1.05 * short


@pytest.mark.parametrize("ending", ["zarr", "nc"])
def test_dataset_of_a_written_series(ground, tmp_path, ending):
    data = terrasol.irradiation_series(
        ground, tmp_path / f"out.{ending}", "2025-06-01/2025-06-03", AIR,
        quantities=("global", "beam"), horizon_store=False,
    )  # fmt: skip
    want, plan = series_of(ground, "2025-06-01/2025-06-03", quantities=("global", "beam"))
    with data:
        assert isinstance(data, xr.Dataset)
        assert not data["global"].variable._in_memory
        for name, values in want.items():
            assert np.abs(data[name].values - values).max() <= 2.0**-4
        np.testing.assert_array_equal(data["time_bounds"].values[:, 0], plan.edges[:-1])
        assert "standard_name" not in data["global"].attrs
        assert data.attrs["comment"].startswith("Clear-sky model")
    assert [path.name for path in tmp_path.iterdir()] == [f"out.{ending}"]


def test_kept_horizons_of_a_dataset(ground, tmp_path, sweeps):
    for name in ("a.nc", "b.nc"):
        terrasol.irradiation_series(
            ground, tmp_path / name, "2025-06-01", AIR, azimuths=8, step="1d",
            horizon_store=tmp_path / "store",
        ).close()  # fmt: skip
    assert len(sweeps) == 8


def test_surface_and_far_model_of_a_dataset(ground, tmp_path):
    trees = ground.heights + np.where(np.indices(ground.shape)[1] % 7 == 3, 60.0, 0.0)
    wooded = terrasol.Elevation.from_array(trees, ground.transform, ground.crs)
    a, _, c, _, e, f = ground.transform
    far = terrasol.Elevation.from_array(
        np.pad(ground.heights, 40, "minimum"), (a, 0, c - 40 * a, 0, e, f - 40 * e), ground.crs
    )
    means, comments = [], []
    for name, around in (("a.nc", {}), ("b.nc", {"surface": wooded}), ("c.nc", {"far": far})):
        data = terrasol.irradiation_series(
            ground, tmp_path / name, "2025-10-01", AIR, azimuths=8, step="1d", quantities=("beam",),
            horizon_store=False, **around,
        )  # fmt: skip
        with data:
            means.append(float(data["beam"].mean()))
            comments.append(data.attrs["comment"])
    assert means[1] < 0.98 * means[0]
    assert means[2] == pytest.approx(means[0], rel=1e-3)
    assert "Nothing beyond" in comments[0]
    assert "Far ground too" in comments[2]
    with pytest.raises(terrasol.InputError, match="read_elevation"):
        terrasol.irradiation_series("dem.tif", tmp_path / "d.nc", "2025-10-01")


def test_estimates_are_positive_and_grow(ground):
    small, large = (
        plan_series(ground, SeriesSettings(terrasol.parse_period(p), AIR))
        for p in ("2025-06", "2025")
    )
    assert small.memory_bytes(2) == large.memory_bytes(2)
    assert 0 < small.stack_bytes < large.stack_bytes
    assert small.seconds(2, True) < small.seconds(2, False) < large.seconds(2, False)
    assert KeptSeries(small).values["global"].shape == (720, *ground.shape)
