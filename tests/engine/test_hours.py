"""Hours of sun over whole rasters: what comes out, labels, the clock by cell, real relief."""

import numpy as np
import pytest

import terrasol
from terrasol.engine import ground_work
from terrasol.engine.datasets import ArraySink
from terrasol.engine.hours import plan_hours
from terrasol.light import days, latitudes
from terrasol.light.days import parse_clock
from terrasol.light.hours import HoursSettings

AIR = terrasol.Air.ineichen(3.0)
QUICK = {"azimuths": 16, "step_seconds": 600.0}


@pytest.fixture(scope="module")
def ridge(metric_ground):
    """A ridge from west to east, a void in it."""
    row, column = np.mgrid[:40, :48]
    heights = 900.0 - 20.0 * np.abs(row - 20.0) + 0.3 * column
    heights[10, 12] = np.nan
    return metric_ground(heights, 30.0, 46.5, 7.7)


def test_a_year_has_its_layers(ridge):
    data = terrasol.sun_hours(ridge, sky=AIR, **QUICK)
    assert data["sun_hours_months"].sizes == {"month": 12, "y": 40, "x": 48}
    assert list(data["month"].values[:2]) == ["January", "February"]
    assert list(data["day"].values[:2]) == ["21 January", "21 February"]
    np.testing.assert_allclose(
        data["sun_hours_year"], data["sun_hours_months"].sum("month", skipna=False), rtol=1e-5
    )
    np.testing.assert_allclose(
        data["bright_hours_year"], data["bright_hours_months"].sum("month", skipna=False), rtol=1e-5
    )
    assert (data["bright_hours_year"] < data["sun_hours_year"]).sum() == 40 * 48 - 1
    for name, values in data.items():
        assert np.isnan(values.values[..., 10, 12]).all(), name
        standard = "duration_of_sunshine" if name.startswith("bright") else None
        assert values.attrs.get("standard_name") == standard
        assert values.attrs["units"] == ("1" if name == "sun_interruptions" else "h")
    south, north = (data["sun_hours_year"].values[row, 20:30].mean() for row in (30, 5))
    assert south > north + 500.0


def test_first_and_last_enclose_the_hours(ridge):
    data = terrasol.sun_hours(ridge, "2025", AIR, **QUICK)
    span = data["last_sun"] - data["first_sun"]
    known = np.isfinite(span.values)
    assert known.any()
    assert (data["sun_hours_days"].values[known] <= span.values[known] + 1e-4).all()
    without = known & (data["sun_interruptions"].values == 0)
    gap = span.values[without] - data["sun_hours_days"].values[without]
    assert (gap < 1.0 / 60.0).mean() > 0.999
    sunless = data["sun_hours_days"].values == 0.0
    for name in ("first_sun", "last_sun", "sun_interruptions"):
        assert np.isnan(data[name].values[sunless]).all()


def test_no_days_no_layers_of_days(ridge):
    data = terrasol.sun_hours(ridge, "2025-06", AIR, days="none", **QUICK)
    assert set(data) == {
        "sun_hours_period", "sun_hours_months", "bright_hours_period", "bright_hours_months",
    }  # fmt: skip


@pytest.mark.heavy
def test_blocks_and_threads_change_nothing(metric_ground):
    row, column = np.mgrid[:270, :300]
    heights = 500.0 + 60.0 * np.sin(row / 9.0) * np.cos(column / 7.0)
    ground = metric_ground(heights, 30.0)
    asked = {"days": "2025-03-21", **QUICK}
    one = terrasol.sun_hours(ground, "2025-03", AIR, threads=1, **asked)
    two = terrasol.sun_hours(ground, "2025-03", AIR, threads=2, **asked)
    for name in one:
        np.testing.assert_array_equal(one[name], two[name])


def plain(latitude, longitude, clock, day, crs="EPSG:4326"):
    """First and last sun on a level strip of two degrees of longitude."""
    west = longitude - 1.0
    flat = terrasol.Elevation.from_array(
        np.zeros((4, 200)), (0.01, 0, west, 0, -0.01, latitude + 0.02), crs
    )
    data = terrasol.sun_hours(flat, day, AIR, clock=clock, days=day, **QUICK)
    return data["first_sun"].values[0, 1], data["last_sun"].values[0, 1]


@pytest.mark.parametrize("longitude", [9.0, 179.5, -179.6])
def test_zone_time_runs_with_longitude_and_over_the_date_line(longitude):
    """The sun is 4 minutes a degree later in the west, without a step at 180 degrees."""
    first, last = plain(-17.0, longitude, "+12:00", "2025-03-21")
    for times in (first, last):
        np.testing.assert_allclose(np.diff(times), -0.01 / 15.0, atol=2e-5)
    solar = plain(-17.0, longitude, "solar", "2025-03-21")
    assert np.ptp(solar[0]) < 1e-5
    # an hour of true solar time is up to 1.3 s longer or shorter than one of the clock, and a
    # date by this clock may be the neighbour of the date by the sun
    assert last[0] - first[0] == pytest.approx(solar[1][0] - solar[0][0], abs=0.02)


def test_equator_polar_day_and_polar_night():
    first, last = plain(0.0, 20.0, "solar", "2025-12-21")
    assert 60.0 * (last - first) == pytest.approx(12 * 60 + 7.5, abs=0.5)
    for latitude, day in ((80.0, "2025-06-21"), (-80.0, "2025-12-21")):
        first, last = plain(latitude, 20.0, "solar", day)
        assert (first == 0.0).all()
        assert (last == 24.0).all()
        night = plain(-latitude, 20.0, "solar", day)
        assert np.isnan(night).all()


def test_polar_night_has_zero_hours(metric_ground):
    ground = metric_ground(np.zeros((8, 8)), 30.0, 80.0, 20.0)
    data = terrasol.sun_hours(ground, "2025-12", AIR, **QUICK)
    for name in ("sun_hours_period", "bright_hours_months", "sun_hours_days"):
        assert (data[name] == 0.0).all()
    assert data.attrs["warnings"] == []


def test_numbers_of_level_ground(ridge):
    settings = HoursSettings(terrasol.parse_period("2025"), AIR, (), parse_clock("solar"), 16, 60.0)
    summary = plan_hours(ridge, settings).run(ArraySink(ridge.shape), 1)
    # about 12 h 14 min a day at 46.5 degrees north, of which the air dims some at either end
    assert summary.numbers["level_ground_sun_hours"] == pytest.approx(4464.0, abs=4.0)
    assert summary.numbers["level_ground_bright_hours"] == pytest.approx(4130.0, abs=60.0)
    assert summary.numbers["sun_hours_year"]["unit"] == "h"


def test_memory_and_time_are_forecast(ridge):
    settings = HoursSettings(terrasol.parse_period("2025"), AIR, (), azimuths=64)
    few, many = (
        plan_hours(ridge, HoursSettings(settings.period, AIR, (), azimuths=n)) for n in (64, 256)
    )
    assert 4e8 < few.memory_bytes < many.memory_bytes < 3e9
    assert 0.0 < few.seconds(2) <= few.seconds(1)


def test_the_sum_of_all_days_is_the_period(metric_ground):
    """Look-up and walk, two ways, on rough ground through half a year."""
    row, column = np.mgrid[:24, :24]
    z = np.sin(row / 5.0 + 0.3) * np.cos(column / 4.0) + 0.5 * np.sin((row + 2 * column) / 6.0)
    ground = metric_ground(500.0 + 60.0 * z, 30.0)
    data = terrasol.sun_hours(
        ground, "2025-01/2025-06", AIR, days="2025-01/2025-06", azimuths=128, step_seconds=60.0
    )
    total, walked = data["sun_hours_period"], data["sun_hours_days"].sum("day")
    error = (total - walked).values / float(walked.mean())
    assert abs(error.mean()) < 1e-3
    assert np.sqrt((error**2).mean()) < 4e-3


@pytest.mark.parametrize(("latitude", "day"), [(62.0, "2025-12"), (-46.0, "2025-06")])
def test_strips_leave_no_steps(metric_ground, monkeypatch, latitude, day):
    """As with a table and a path for each row of its own, in the month of the lowest sun."""
    row, column = np.mgrid[:280, :24]
    z = np.sin(row / 7.0 + 0.3) * np.cos(column / 5.0) + 0.5 * np.sin((row + 2 * column) / 6.0)
    ground = metric_ground(500.0 + 60.0 * z, 30.0, latitude)
    asked = {"days": f"{day}-21", "azimuths": 16}
    found = terrasol.sun_hours(ground, day, AIR, **asked)
    monkeypatch.setattr(ground_work, "STRIP_ROWS", 1)
    monkeypatch.setattr(latitudes, "MIXED_BYTES", 1e6)
    for module in (latitudes, days):
        monkeypatch.setattr(module, "LATITUDE_GRAIN", 1e-7)
    want = terrasol.sun_hours(ground, day, AIR, **asked)
    for name in ("sun_hours_period", "bright_hours_period"):
        error = (found[name] - want[name]).values / float(want[name].mean())
        assert np.abs(error).max() < 5e-3
        assert np.abs(error.mean(axis=1)).max() < 1e-3
    for name in ("first_sun", "last_sun"):
        error = 60.0 * (found[name] - want[name]).values
        assert np.nanmax(np.abs(error)) < 0.1
