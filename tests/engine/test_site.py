"""One place in full: on ground whose answers are known, and against the maps."""

import json
from datetime import date

import numpy as np
import pytest

import terrasol
from terrasol.engine.site import Spot, survey
from terrasol.engine.uncertainty import likely_grounds
from terrasol.errors import InputError, SettingError
from terrasol.ground.uncertainty import DemError
from terrasol.light.days import parse_clock
from terrasol.light.minutes import State
from terrasol.light.settings import LightSettings
from terrasol.sky.clear import Air
from terrasol.sky.period import parse_period

AIR = Air.ineichen(3.0)
LATITUDE, LONGITUDE = 46.0, 9.0


def light(**more):
    more = {"period": parse_period(None), "step_seconds": 600.0} | more
    return LightSettings(air=AIR, **more)


def middle(elevation, **more):
    """The site at the middle of a made ground."""
    given = {"azimuths": 64} | more
    clock = parse_clock(given.pop("clock", "solar"))
    settings = given.pop("settings", light())
    return survey(elevation, [Spot(LATITUDE, LONGITUDE)], settings, clock, **given)[0]


@pytest.fixture(scope="module")
def hills(metric_ground):
    y, x = np.mgrid[0:41, 0:41] - 20.0
    return metric_ground(700.0 + 60.0 * np.sin(x / 6.0 + 0.4) * np.cos(y / 7.0) + 4.0 * x, 25.0)


@pytest.fixture(scope="module")
def place(hills):
    return middle(hills, clock="+01:00")


def test_plain_is_level_ground(metric_ground):
    site = middle(metric_ground(np.full((31, 31), 500.0), 30.0))
    assert site.slope == 0.0
    assert np.isnan(site.aspect)
    assert site.height == 500.0
    assert (site.row, site.column) == (15, 15)
    np.testing.assert_allclose(site.energy.place, site.energy.level, rtol=1e-5)
    np.testing.assert_allclose([site.sun.first, site.sun.last, site.sun.hours], site.sun.level)
    assert not site.horizon.any()
    assert set(np.unique(site.sun.states)) == {State.NIGHT, State.SUN}
    assert site.record()["aspect_deg"] is None


@pytest.mark.heavy
def test_wall_to_the_south(metric_ground):
    """A long ridge 300 m away and 100 m high: 18.4 degrees to the south, less aside."""
    heights = np.full((81, 81), 500.0)
    heights[55:] = 600.0  # its foot lies in row 54, 14.5 cells of 20 m from the middle
    site = middle(metric_ground(heights, 20.0), azimuths=256)
    south = site.horizon[128]
    assert south == pytest.approx(np.degrees(np.arctan(100.0 / 300.0)), abs=0.6)
    assert site.highest[1] == pytest.approx(180.0, abs=15.0)
    assert site.horizon[0] == 0.0
    noon = 720
    june, december = (site.sun.on(month, 21) for month in (6, 12))
    assert site.sun.states[june, noon] == State.SUN
    # At noon in December the sun stands at 90 - 46 - 23.44 = 20.6 degrees, above the ridge; two
    # hours later it is below it.
    assert site.sun.states[december, noon] == State.SUN
    low = metric_ground(np.where(heights > 550.0, 640.0, 500.0), 20.0)
    assert middle(low, azimuths=256).sun.states[december, noon] == State.TERRAIN


@pytest.mark.heavy
def test_days_without_sun_are_void(metric_ground):
    """A wall of 40 degrees hides every sun of December; the record says so."""
    heights = np.full((81, 81), 500.0)
    heights[45:] = 600.0
    site = middle(metric_ground(heights, 20.0))
    december = site.sun.record()["months"][11]
    assert december["first_sun"] is None
    assert december["mean_sun_hours_a_day"] == 0.0
    assert december["level_first_sun"] == pytest.approx(7.7, abs=0.3)
    assert 60 < site.sun.record()["days_without_sun"] < 200


def test_energy_is_that_of_the_map(hills, place):
    """The map's own cell; tables of neighbouring latitudes differ by less than 1e-4."""
    found = terrasol.irradiation(hills, air=AIR, step_seconds=600.0)
    cell = {"y": place.row, "x": place.column}
    year = found.irradiation_year.isel(cell).values
    np.testing.assert_allclose(place.energy.place.sum(), year[0], rtol=1e-4)
    np.testing.assert_allclose(place.energy.place.sum(axis=1), year[1:], rtol=1e-3)
    months = found.irradiation_months.isel(cell).values
    np.testing.assert_allclose(place.energy.place.sum(axis=0), months, rtol=1e-3)
    level = float(found.attrs.get("level_ground", np.nan))
    if np.isfinite(level):
        assert place.energy.level_total == pytest.approx(level, rel=0.01)


def test_slope_and_sun_are_those_of_the_maps(hills, place):
    ground = terrasol.terrain(hills, azimuths=64, horizon=True)
    cell = {"y": place.row, "x": place.column}
    assert place.slope == pytest.approx(float(ground.slope.isel(cell)), abs=1e-4)
    assert place.aspect == pytest.approx(float(ground.aspect.isel(cell)), abs=1e-3)
    assert place.sky_view == pytest.approx(float(ground.sky_view.isel(cell)), abs=1e-5)
    np.testing.assert_allclose(place.horizon, ground.horizon.isel(cell).values, atol=1e-3)
    sun = terrasol.sun_hours(hills, sky=AIR, clock="+01:00", azimuths=64, step_seconds=600.0)
    days = [place.sun.on(month, 21) for month in range(1, 13)]
    for name, values in (("first_sun", place.sun.first), ("last_sun", place.sun.last)):
        np.testing.assert_allclose(values[days], sun[name].isel(cell).values, atol=2e-3)
    np.testing.assert_allclose(
        place.sun.hours[days], sun.sun_hours_days.isel(cell).values, atol=2e-3
    )


def test_every_day_of_the_year_is_there(place):
    assert place.sun.states.shape == (365, 1441)
    assert place.sun.days[0] == date(2025, 1, 1)
    assert place.sun.days[-1] == date(2025, 12, 31)
    minutes = (place.sun.states == State.SUN).sum(axis=1)
    np.testing.assert_allclose(minutes / 60.0, place.sun.hours, atol=0.1)


@pytest.mark.heavy
def test_two_places_are_as_alone(hills):
    places = [Spot(LATITUDE, LONGITUDE, "one"), Spot(LATITUDE + 0.001, LONGITUDE, "other")]
    both = survey(hills, places, light(), parse_clock("solar"), azimuths=64)
    alone = survey(hills, places[1:], light(), parse_clock("solar"), azimuths=64)[0]
    assert [site.name for site in both] == ["one", "other"]
    assert both[1].record() == alone.record()
    assert both[0].record() != both[1].record()


@pytest.mark.heavy
def test_map_basis_and_unit(hills, place):
    site = middle(hills, settings=light(unit="kW h m-2", basis="map"))
    steeper = np.cos(np.radians(site.slope)) * 3.6
    np.testing.assert_allclose(site.energy.place * steeper, place.energy.place, rtol=1e-4)
    np.testing.assert_allclose(site.energy.level * 3.6, place.energy.level, rtol=1e-4)
    assert site.energy.record()["basis"] == "per area of map"


def test_record_is_json(place):
    record = json.loads(json.dumps(place.record(), allow_nan=False))
    assert record["irradiation"]["months"][5]["month"] == "June"
    assert "standard_error" not in record
    parts = sum(record["irradiation"][part] for part in ("beam", "diffuse", "reflected"))
    assert parts == pytest.approx(record["irradiation"]["global"], abs=0.01)


@pytest.mark.heavy
def test_errors_are_those_of_the_likely_grounds(hills):
    """Each ground computed in full by itself: slope, aspect and energy of the cell."""
    error = DemError(0.8, 75.0, 5, seed=4)
    site = middle(hills, error=error)
    cell = {"y": site.row, "x": site.column}
    found = []
    for ground in likely_grounds(hills, error):
        sun = terrasol.irradiation(ground, air=AIR, step_seconds=600.0)
        year = float(sun.irradiation_year.sel(part="global").isel(cell))
        found.append((float(sun.slope.isel(cell)), float(sun.aspect.isel(cell)), year))
    slope, aspect, energy = np.array(found).T
    spreads = site.errors
    assert spreads["slope"].mean == pytest.approx(slope.mean(), rel=1e-5)
    assert spreads["slope"].deviation == pytest.approx(slope.std(ddof=1), rel=1e-3)
    assert spreads["aspect"].mean == pytest.approx(aspect.mean(), abs=0.02)  # little spread
    assert spreads["global"].mean == pytest.approx(energy.mean(), rel=5e-4)
    assert spreads["global"].deviation == pytest.approx(energy.std(ddof=1), rel=0.05)
    assert spreads["global"].deviation > 10.0
    assert spreads["global"].estimate == pytest.approx(site.energy.total, rel=1e-5)
    told = site.record()["standard_error"]
    assert told["slope"]["standard_error"] > 0.0
    assert told["slope"]["realisations"] == 5
    assert told["global"]["interval"][0] < told["global"]["interval"][1]


def test_places_off_the_ground(hills, metric_ground):
    with pytest.raises(InputError, match=r"place top at .* lies outside.*longitude, then latitude"):
        survey(hills, [Spot(47.0, 9.0, "top")], light(), parse_clock("solar"), azimuths=8)
    heights = hills.heights.copy()
    heights[20, 20] = np.nan
    holed = metric_ground(heights, 25.0)
    with pytest.raises(InputError, match="void"):
        middle(holed)
    with pytest.raises(SettingError, match="20 months"):
        middle(hills, settings=light(period=parse_period("2024-01/2025-08")))
    with pytest.raises(SettingError, match="azimuths"):
        middle(hills, azimuths=7)


@pytest.mark.heavy
def test_threads_change_nothing(hills, place):
    assert middle(hills, clock="+01:00", threads=3).record() == place.record()


def test_progress_rises_to_the_end(hills):
    told = []
    middle(hills, error=DemError(0.3, 0.0, 2), progress=lambda share, words: told.append(share))
    assert np.all(np.diff(told) >= -1e-9)
    assert told[-1] == pytest.approx(1.0)
