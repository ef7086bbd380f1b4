"""A snow season on made ground: balance, light, zones, restarts, threads."""

import tracemalloc
from dataclasses import replace

import numpy as np
import pytest
from reference.kept import series_of

from terrasol.engine.melt_cells import FACINGS, Zones, map_area
from terrasol.engine.melt_job import MeltSettings, prepare, season_numbers
from terrasol.engine.melt_stack import snow_melt
from terrasol.engine.melt_state import head_of, save_state, take_up
from terrasol.engine.melt_tables import DEPTHS, TABLES, SeasonTables, tables_csv
from terrasol.errors import InputError
from terrasol.ground.frame import make_frame
from terrasol.kernels.melt import SKIN
from terrasol.practice.snow import COVERED_FROM, Snow, SnowModel, snow_day
from terrasol.practice.snow_point import point_snow
from terrasol.practice.snow_weather import measured_light
from terrasol.sky.clear import Air
from terrasol.sky.period import parse_period
from terrasol.sky.station import Station

AIR = Air.ineichen(3.0)
PERIOD = "2025-03-20/2025-04-10"
FLOWS = ("snowfall", "rain_on_snow", "rain_on_ground", "melt", "refrozen", "outflow")


def ridges(rows=40, columns=48):
    """Steep made ground from some 1000 to 2200 m."""
    y, x = np.mgrid[0:rows, 0:columns].astype(float)
    return 1600.0 + 400.0 * (np.sin(x / 7.0 + 0.2 * y) * np.cos(y / 9.0)) + 8.0 * (x - 24.0)


def weather_station(days=40, height=1500.0, seed=3, warming=12.0):
    """Invented hours from 15 March 2025 on: a snowy first half, a warm second."""
    rng = np.random.default_rng(seed)
    hour = np.arange(days * 24)
    air = -4.0 + warming * hour / hour.size + 4.0 * np.sin((hour - 8) * np.pi / 12.0)
    wet = np.where(rng.random(hour.size) < 0.15, rng.exponential(1.5, hour.size), 0.0)
    wet[hour > 20 * 24] *= 0.3
    sun = np.maximum(np.sin((hour % 24 - 5.5) * np.pi / 13.0), 0.0) * (hour % 24 > 5)
    light = 700.0 * sun * np.where(hour % 24 < 19, rng.uniform(0.4, 1.0, hour.size), 0.0)
    start = np.datetime64("2025-03-15T00:00:00") + hour * np.timedelta64(3600, "s")
    values = {"global": light, "temperature": air, "precipitation": wet}
    return Station("invented", 46.0, 9.0, height, start, 3600, values)


@pytest.fixture(scope="module")
def ground(metric_ground):
    heights = ridges()
    heights[3:5, 7] = np.nan
    return metric_ground(heights, 60.0)


@pytest.fixture(scope="module")
def store(tmp_path_factory):
    return tmp_path_factory.mktemp("store")


def plan_of(ground, period=PERIOD, *, melt="enhanced", spread=False, state=None, **more):
    settings = MeltSettings(
        SnowModel(melt, **more), parse_period(period), spread=spread, azimuths=16,
        substep_seconds=1200.0,
    )  # fmt: skip
    return prepare(ground, weather_station(), AIR, settings, state=state).plan


@pytest.fixture(scope="module")
def season(ground, store):
    return plan_of(ground, spread=True).run(store, threads=2)


def totals(result):
    return np.concatenate([cells.season.total for cells in result.cells])


def waters(result, member=0):
    return np.concatenate([cells.season.snows[member].water for cells in result.cells])


def test_water_closes_in_every_cell_and_in_total(season):
    """Snowfall = melt + what lies, refreezing told apart: to 1e-6 asked for, to rounding met."""
    found = season.balance()
    assert all(value < 1e-10 for value in found.values())
    total = totals(season)
    assert (total[:, FLOWS.index("melt")] > 50.0).any()
    assert (total[:, FLOWS.index("refrozen")] > 0.1).any()
    lies = waters(season)
    assert (lies > 10.0).any()
    assert (lies < COVERED_FROM).any()
    frozen = np.concatenate([cells.season.snows[0].ice for cells in season.cells])
    gap = total[:, 0] + total[:, 4] - total[:, 3] - frozen
    known = total[:, 0] > 0.0
    assert np.abs(gap[known] / total[known, 0]).max() < 1e-10


def test_tables_hold_the_water_of_the_cells(season, ground):
    tables = SeasonTables.of(season)
    total = totals(season)
    known = np.concatenate([cells.zone >= 0 for cells in season.cells])
    weight = np.concatenate([cells.weight for cells in season.cells])[known]
    assert known.sum() == np.isfinite(ground.heights).sum()
    melt = (weight @ total[known, FLOWS.index("melt")]) / weight.sum()
    assert tables.column("melt_mm").sum() == pytest.approx(melt, rel=1e-9)
    runoff = weight @ total[known][:, [FLOWS.index("outflow"), FLOWS.index("rain_on_ground")]]
    assert tables.column("runoff_input_mm").sum() == pytest.approx(runoff.sum() / weight.sum())
    assert tables.area.sum() == pytest.approx(3600.0 * known.sum(), rel=1e-4)
    lies = weight @ waters(season)[known] / weight.sum()
    assert tables.column("snow_water_mm")[-1] == pytest.approx(lies)
    bands = tables.bands[..., DEPTHS.index("melt_mm")]
    area = tables.area.sum(1)
    np.testing.assert_allclose(
        np.nan_to_num(bands) @ area / area.sum(), tables.column("melt_mm"), rtol=1e-9, atol=1e-12
    )
    months = season_numbers(season, tables)["months"]
    assert [m["month"] for m in months] == ["2025-03", "2025-04"]
    for m in months:
        low, high = m["melt_m3_range"]
        assert low < m["melt_m3"] < high
    assert sum(m["melt_m3"] for m in months) == pytest.approx(melt * weight.sum() / 1e3, abs=0.2)


def test_tables_as_text(season):
    tables = SeasonTables.of(season)
    found = tables_csv(tables)
    assert tuple(found) == TABLES
    rows = found["basin.csv"].decode().splitlines()
    header = rows[0].split(",")
    assert len(rows) == 1 + season.plan.days
    assert header[:8] == ["date", *DEPTHS]
    first = dict(zip(header, rows[10].split(","), strict=True))
    assert first["date"] == "2025-03-29"
    assert float(first["melt_mm_low"]) <= float(first["melt_mm"]) <= float(first["melt_mm_high"])
    sectors = {row.split(",")[1] for row in found["by_sector.csv"].decode().splitlines()[1:]}
    assert sectors <= set(FACINGS)
    assert {"N", "S"} <= sectors


def test_spread_opens_once_snow_melts(season):
    tables = SeasonTables.of(season)
    low, high = tables.range_of("snow_water_mm")
    assert tables.members.shape[1] == 6
    assert (low <= high).all()
    assert high[-1] - low[-1] > 0.05 * tables.column("snow_water_mm")[-1]


def one_day_with_snow(plan, store, cell, everywhere=False):
    """A dry day with 500 mm of snow on one cell, or on all: the cell's melt, and its place."""
    dry = replace(plan.weather, precipitation=np.zeros_like(plan.weather.precipitation))
    plan.weather = dry
    kept = []

    def lay(all_cells):
        for cells in all_cells:
            snow = cells.season.snows[0]
            if everywhere:
                snow.ice[:], snow.skin[:, -1] = 500.0, 0.8
            if cell[0] in cells.rows and cell[1] in cells.columns:
                across = len(cells.columns)
                flat = (cell[0] - cells.rows.start) * across + cell[1] - cells.columns.start
                snow.ice[flat], snow.skin[flat, -1] = 500.0, 0.2
                kept.append((cells, flat))

    result = plan.run(store, begin=lay)
    ((cells, flat),) = kept
    return cells.season.total[flat, FLOWS.index("melt")], cells, flat, result


@pytest.mark.parametrize(
    ("melt", "shape", "size", "cell"),
    [
        ("enhanced", (40, 48), 60.0, (20, 30)),
        ("hock", (40, 48), 60.0, (20, 30)),
        ("enhanced", (40, 48), 900.0, (30, 44)),  # over 0.25 degree: parts with suns of their own
        ("enhanced", (24, 270), 60.0, (12, 262)),  # the second block
    ],
)
def test_a_cell_gets_the_light_of_the_series(metric_ground, tmp_path, melt, shape, size, cell):
    """The melt of a cell, worked out again from the hourly series of the same sky.

    Albedo of the terrain around is that of the ground: no snow falls, and all lies on one cell,
    dark as the ground for that day.
    """
    ground = metric_ground(ridges(*shape) - 8.0 * (np.arange(shape[1]) - 24.0), size)
    plan = plan_of(ground, "2025-04-05", melt=melt)
    melted, cells, flat, result = one_day_with_snow(plan, tmp_path, cell)
    name = "beam" if melt == "hock" else "global"
    found, _ = series_of(
        ground, "2025-04-05", plan.light.settings.sky, azimuths=16, substep_seconds=1200.0,
        albedo=(0.2,) * 12 if melt == "enhanced" else (0.0,) * 12, store=tmp_path,
        quantities=(name,),
    )  # fmt: skip
    light = found[name][:, cell[0], cell[1]]
    up = cells.steep[flat]
    snow = Snow.none(1, plan.model)
    snow.ice[:] = 500.0
    moved = snow_day(
        plan.model, plan.weather, 0, np.ascontiguousarray(light[:, None]),
        cells.above[flat : flat + 1], np.array([up]), snow,
    )  # fmt: skip
    assert melted > 3.0
    assert melted == pytest.approx(moved[0, FLOWS.index("melt")], rel=1e-5)
    assert totals(result)[:, FLOWS.index("melt")].sum() == melted  # nothing melts where none lies
    assert up == pytest.approx(1.0 / np.cos(np.arctan(slope_at(ground, cell, size))), rel=1e-3)


def test_snow_around_sends_more_light_back(ground, tmp_path):
    """In a hollow: terrain of albedo 0.8 in place of 0.2 adds some per cent of the light."""
    cell = (19, 21)
    bare, *_ = one_day_with_snow(plan_of(ground, "2025-04-05"), tmp_path, cell)
    white, *_ = one_day_with_snow(plan_of(ground, "2025-04-05"), tmp_path, cell, everywhere=True)
    assert 1.005 * bare < white < 1.3 * bare


def slope_at(ground, cell, size):
    """Tangent of the slope by the eight neighbours (Horn 1981), written out."""
    r, c = cell
    z = ground.heights[r - 1 : r + 2, c - 1 : c + 2].astype(float)
    across = (z[:, 2] - z[:, 0]) @ [1, 2, 1] / (8 * size)
    down = (z[2] - z[0]) @ [1, 2, 1] / (8 * size)
    return np.hypot(across, down)


def test_sunny_slopes_lose_their_snow_first(season):
    tables = SeasonTables.of(season)
    melt = tables.sectors[..., DEPTHS.index("melt_mm")].sum(0)
    assert melt[FACINGS.index("S")] > 1.1 * melt[FACINGS.index("N")]


@pytest.mark.parametrize(
    ("melt", "cold"),
    [("enhanced", 0.0), ("enhanced", 0.6), ("hock", 0.0), ("degree-days", 0.0)],
)
def test_going_on_from_a_state_is_one_run(ground, store, tmp_path, melt, cold):
    """Bit for bit, spread and season maps included, whatever day it was saved on."""
    same = {"melt": melt, "spread": True, "changed": {"deficit_factor": cold}}
    whole = plan_of(ground, **same).run(store)
    first = plan_of(ground, "2025-03-20/2025-03-31", **same).run(store)
    deficit = SKIN.index("deficit")
    assert any((c.season.snows[0].skin[:, deficit] > 0.0).any() for c in first.cells) == (cold > 0)
    path = tmp_path / "state.nc"
    save_state(first, path)
    head = head_of(first.plan, np.datetime64("2025-04-01"))
    later = plan_of(ground, "2025-04-01/2025-04-10", state=head, **same)
    rest = later.run(store, begin=take_up(later, path))
    np.testing.assert_array_equal(totals(rest), totals(whole))
    for member in range(len(whole.plan.models)):
        np.testing.assert_array_equal(waters(rest, member), waters(whole, member))
    for name in ("peak", "bare_day", "snow_water"):
        np.testing.assert_array_equal(rest.map_of(name), whole.map_of(name))
    np.testing.assert_array_equal(rest.zones, whole.zones[12:])
    np.testing.assert_array_equal(rest.members, whole.members[12:])


def test_a_state_is_refused_by_other_ground_numbers_or_days(ground, store, tmp_path, metric_ground):
    first = plan_of(ground, "2025-03-20/2025-03-22", melt="degree-days").run(store)
    path = tmp_path / "state.nc"
    save_state(first, path)
    head = head_of(first.plan, np.datetime64("2025-03-23"))

    def later(where=ground, day="2025-03-23", **more):
        return plan_of(where, f"{day}/2025-03-25", melt="degree-days", state=head, **more)

    take_up(later(), path)
    with pytest.raises(
        InputError, match=r"holds the snow at the beginning of 2025-03-23, but .*24"
    ):
        take_up(later(day="2025-03-24"), path)
    with pytest.raises(InputError, match=r"degree_day_factor 4.4, now 5.0"):
        take_up(later(changed={"degree_day_factor": 5.0}), path)
    with pytest.raises(InputError, match="another elevation model"):
        take_up(later(metric_ground(ridges() + 1.0, 60.0)), path)
    (tmp_path / "no.nc").write_bytes(b"nothing")
    with pytest.raises(InputError, match="no snow state"):
        take_up(later(), tmp_path / "no.nc")


def test_threads_and_sinks_change_nothing(ground, store):
    kept = {}

    class Sink:
        def write(self, name, time, row, column, values):
            kept[name, time, row, column] = values.copy()

    one = plan_of(ground, melt="hock").run(store, threads=1)
    many = plan_of(ground, melt="hock").run(store, Sink(), threads=3)
    np.testing.assert_array_equal(one.zones, many.zones)
    np.testing.assert_array_equal(totals(one), totals(many))
    melt = sum(np.nansum(v, dtype=float) for k, v in kept.items() if k[0] == "melt")
    assert melt == pytest.approx(totals(many)[:, 3].sum(), rel=1e-6)
    last = kept["snow_water", 16, 0, 0][-1]
    known = np.isfinite(ground.heights)
    np.testing.assert_array_equal(np.isfinite(last), known)
    np.testing.assert_allclose(last[known], many.map_of("snow_water")[known], rtol=1e-6)
    covered = kept["snow_covered", 16, 0, 0][-1]
    np.testing.assert_array_equal(covered[known] == 1.0, last[known] >= COVERED_FROM)


def test_melt_out_is_the_first_bare_day_after_the_peak(ground, store):
    kept = {}

    class Sink:
        def write(self, name, time, row, column, values):
            kept[name, time] = values.copy()

    result = plan_of(ground, "2025-03-16/2025-04-10").run(store, Sink())
    water = np.concatenate([kept["snow_water", t] for t in range(0, result.plan.days, 8)])
    peak, bare = result.map_of("peak"), result.map_of("bare_day")
    assert np.isfinite(bare).any()
    assert np.isnan(bare[np.isfinite(ground.heights)]).any()
    for r, c in np.argwhere(np.isfinite(ground.heights))[::37]:
        course = water[:, r, c]
        top = int(course.argmax())
        assert peak[r, c] == pytest.approx(course[top], rel=1e-6)
        after = np.flatnonzero(course[top:] < COVERED_FROM)
        if after.size and course[top] >= COVERED_FROM:
            assert bare[r, c] == top + after[0]
        else:
            assert np.isnan(bare[r, c])


def test_zones_of_part_of_the_ground(ground, store):
    share = np.zeros(ground.shape, np.float32)
    share[10:20, 10:20] = 0.5
    share[10:20, 20:30] = 1.0
    settings = MeltSettings(
        SnowModel("degree-days"), parse_period("2025-03-20/2025-03-21"), spread=False, bands=100.0
    )
    plan = prepare(ground, weather_station(), AIR, settings, area=(share, "a part")).plan
    tables = SeasonTables.of(plan.run(store))
    assert tables.area.sum() == pytest.approx(3600.0 * 150.0, rel=1e-4)
    inside = ground.heights[10:20, 10:30]
    assert tables.edges[0] <= inside.min() < tables.edges[0] + 100.0
    assert tables.edges[-1] - 100.0 <= inside.max() < tables.edges[-1]


def test_bands_take_the_height_on_their_lower_edge():
    zones = Zones.of(np.array([[100.0, 200.0, 299.0]], np.float32), 100.0, None, "")
    assert zones.edges.tolist() == [100.0, 200.0, 300.0]
    up = np.zeros((3, 1, 3), np.float32)
    up[2] = 1.0
    place = zones.place(np.array([[100.0, 200.0, np.nan]]), up)
    flat = FACINGS.index("flat")
    assert place.tolist() == [[flat, len(FACINGS) + flat, -1]]


def test_map_area_is_that_of_the_ground(metric_ground):
    """Cells of 60 x 40 m, near enough to the projection's middle."""
    ground = metric_ground(np.zeros((20, 30)), (60.0, 40.0))
    frame = make_frame(ground.shape, ground.transform, ground.crs)
    area = map_area(frame, range(20), range(30))
    np.testing.assert_allclose(area, 2400.0, rtol=1e-4)


def test_the_station_is_checked_and_fitted(ground):
    """Snow water made with a known factor comes back, on invented weather."""
    station = weather_station(60, warming=8.0)
    true = SnowModel(changed={"temperature_factor": 0.09, "snow_factor": 1.2})
    period = parse_period("2025-03-16/2025-05-10")
    settings = MeltSettings(true, period, spread=False, azimuths=16)
    made = prepare(ground, station, AIR, settings)
    plan = made.plan

    light = measured_light(made.station, plan.edges)  # impossible values mended
    water = point_snow(true, plan.weather, light).water
    seen = np.full(station.start.size, np.nan)
    first = int(np.searchsorted(station.start, plan.edges[0]))
    seen[first + 23 : first + 24 * plan.days : 24] = water
    observing = replace(station, values={**station.values, "snow_water": seen})
    ask = replace(settings, model=SnowModel(), fit=("temperature_factor", "snow_factor"))
    found = prepare(ground, observing, AIR, ask)
    fitted = found.record["fit"]["fitted"]
    assert fitted["temperature_factor"] == pytest.approx(0.09, rel=0.02)
    assert fitted["snow_factor"] == pytest.approx(1.2, rel=0.01)
    assert found.record["fit"]["before"]["efficiency"] < 0.9
    assert found.record["fit"]["after"]["efficiency"] > 0.999
    assert len(found.record["fit"]["split_sample"]) == 2
    assert found.plan.model.numbers["snow_factor"] == pytest.approx(fitted["snow_factor"], rel=1e-5)


def test_memory_does_not_grow_with_the_days(ground, store):
    """But for the tables, 8 numbers a zone and day: under a tenth of a megabyte here."""
    peaks = []
    for period in ("2025-03-16/2025-03-23", "2025-03-16/2025-04-16"):
        plan = plan_of(ground, period, melt="hock")
        plan.run(store, threads=1)
        tracemalloc.start()
        plan.run(store, threads=1)
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    tables = 24 * 8 * 8 * plan.zones.count
    assert peaks[1] < 1.1 * peaks[0] + tables


def test_the_same_from_python(ground, store, tmp_path):
    """Two stacks, the second from the first's state, are the one of both."""
    made = {"model": SnowModel("hock"), "horizon_store": store, "azimuths": 16, "air": AIR}
    station = weather_station()
    whole = snow_melt(ground, station, tmp_path / "a.nc", "2025-03-20/2025-03-29", **made)
    state = tmp_path / "state.nc"
    first = snow_melt(
        ground, station, tmp_path / "b.zarr", "2025-03-20/2025-03-25", to_state=state, **made
    )
    rest = snow_melt(
        ground, station, tmp_path / "c.zarr", "2025-03-26/2025-03-29", from_state=state, **made
    )
    joined = np.concatenate([first["snow_water"].values, rest["snow_water"].values])
    np.testing.assert_array_equal(joined, whole["snow_water"].values)
    np.testing.assert_array_equal(rest["melt_out"].values, whole["melt_out"].values)
    assert whole["melt_out"].attrs["units"] == "days since 2025-03-20 00:00:00"
    assert float(whole["peak_snow_water"].max()) > 20.0
    for data in (first, rest, whole):
        data.close()


def test_a_station_outside_the_raster_is_told(ground):
    settings = MeltSettings(SnowModel("hock"), parse_period(PERIOD), azimuths=8)
    inside = weather_station()
    frame = make_frame(ground.shape, ground.transform, ground.crs)
    at = {"latitude": float(frame.centre[0]), "longitude": float(frame.centre[1])}
    for moved, told in ((0.0, 0), (0.5, 1), (170.0, 1)):
        station = replace(inside, latitude=at["latitude"], longitude=at["longitude"] + moved)
        warnings = prepare(ground, station, AIR, settings).warnings
        found = [text for text in warnings if "invented lies outside the raster" in text]
        assert len(found) == told
        assert all("by its height alone, 1500 m" in text for text in found)
