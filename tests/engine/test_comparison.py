"""A station on its place: horizon of the cell, clear days, clocks, a second station's sky."""

import json
from dataclasses import replace

import numpy as np
import pytest
from pyproj import Transformer
from reference.made_valley import AIR, DISTANCE, PLACE, WALL, made_series, valley, wall_spot

from terrasol.engine.comparison import Spot, clear_days, compare_station, place_words, spot_at
from terrasol.engine.datasets import terrain
from terrasol.errors import InputError, SettingError
from terrasol.ground.frame import make_frame
from terrasol.light.comparison import model_station

LEVEL = Spot.under([0.0] * 8)


def frame_of(elevation):
    return make_frame(elevation.shape, elevation.transform, elevation.crs)


def found_at(elevation, latitude, longitude, **how):
    return spot_at(elevation, latitude, longitude, **how)


# The place


def test_spot_below_a_wall(metric_ground):
    spot = found_at(metric_ground(valley(), 50.0), *PLACE, azimuths=64)
    assert (spot.row, spot.column, spot.height) == (30, 30, 800.0)
    # due east the wall's edge lies DISTANCE away, due west there is nothing
    assert spot.horizon[16] == pytest.approx(np.degrees(np.arctan(WALL / DISTANCE)), abs=0.3)
    assert spot.horizon[48] == 0.0
    assert spot.sky_view == pytest.approx(wall_spot().sky_view, abs=0.01)


@pytest.mark.parametrize("column", [3, 150, 256, 299])
def test_spot_is_that_of_the_maps(metric_ground, column):
    rng = np.random.default_rng(5)
    heights = 900.0 + np.cumsum(rng.normal(0.0, 12.0, (40, 300)), axis=1)
    elevation = metric_ground(heights, 90.0)
    maps = terrain(elevation, azimuths=16, horizon=True)
    rows, columns = elevation.shape
    north, east = ((rows - 1) / 2 - 12) * 90.0, (column - (columns - 1) / 2) * 90.0
    to_degrees = Transformer.from_crs(elevation.crs, 4326, always_xy=True)
    longitude, latitude = to_degrees.transform(east + 20.0, north - 30.0)
    spot = found_at(elevation, latitude, longitude, azimuths=16)
    assert (spot.row, spot.column) == (12, column)
    np.testing.assert_allclose(spot.horizon, maps.horizon[:, 12, column], atol=1e-4)


def test_place_across_the_date_line(metric_ground):
    elevation = metric_ground(valley(), 50.0, longitude=180.0)
    assert found_at(elevation, 46.0, -180.0, azimuths=8).column == 30
    assert found_at(elevation, 46.0, 180.0, azimuths=8).column == 30


def test_place_outside_is_refused(metric_ground):
    elevation = metric_ground(valley(), 50.0)
    words = r"station at 47\.0000 N 9\.0000 E lies outside .* 111 km away at 46\.0000 N 9\.0000 E"
    with pytest.raises(InputError, match=words):
        found_at(elevation, 47.0, 9.0)


def test_place_on_a_void_is_refused(metric_ground):
    heights = valley()
    heights[30, 30] = np.nan
    with pytest.raises(InputError, match=r"stands on a void .* in row 30 and column 30"):
        found_at(metric_ground(heights, 50.0), *PLACE)


def test_sky_view_of_an_even_horizon():
    """Dozier and Frew (1990), doi:10.1109/36.58986: cos^2 of an even horizon on level ground."""
    assert Spot.under([30.0] * 16).sky_view == pytest.approx(0.75)
    assert LEVEL.sky_view == 1.0


def test_places_in_words():
    assert place_words(-12.5, 190.0) == "12.5000 S 170.0000 W"


# Clear sky


@pytest.fixture(scope="module")
def report():
    spot = wall_spot()
    return compare_station(made_series(spot, cloudy=(3, 4, 9)), AIR, spot)


def test_a_series_of_the_model_itself_agrees(report):
    assert report.comparison.overall.bias == pytest.approx(0.0, abs=1e-9)
    assert report.comparison.overall.rms == pytest.approx(0.0, abs=1e-9)
    assert report.comparison.shade.explained == pytest.approx(1.0)
    assert "explains when the sun comes" in report.comparison.shade.words
    assert report.timing.verdict == "consistent"
    assert report.warnings == ()


def test_only_clear_days_count(report):
    days = np.datetime64("2025-03-05") + np.arange(24)
    np.testing.assert_array_equal(report.clear_days, np.delete(days, (3, 4, 9)))
    day = report.station.start.astype("M8[D]")
    assert not report.counted[np.isin(day, days[[3, 4, 9]])].any()
    assert any("on clear days only: 21 clear days" in line for line in report.lines())


def test_a_wrong_horizon_is_noticed():
    there = made_series(LEVEL, air=AIR.ineichen(3.3))  # measured on open ground, in more haze
    report = compare_station(there, AIR, wall_spot())
    assert report.clear_days.size == 24  # the free hours say that the days are clear
    assert report.comparison.shade.explained < 0.0
    assert any("the measured one comes 120 min earlier" in line for line in report.lines())


def test_another_turbidity_is_a_bias():
    spot = wall_spot()
    report = compare_station(made_series(spot), AIR.ineichen(4.5), spot)
    assert report.clear_days.size == 24
    assert report.comparison.overall.bias < -20.0


def test_shifted_labels_are_told_and_left():
    spot = wall_spot()
    right = made_series(spot)
    wrong = replace(right, start=right.start - np.timedelta64(1800, "s"))
    report = compare_station(wrong, AIR, spot)
    assert report.timing.verdict == "label"
    assert report.timing.shift == pytest.approx(30.0, abs=2.0)
    np.testing.assert_array_equal(report.station.start, wrong.start)
    assert any("another edge" in text and "nothing was" in text for text in report.warnings)
    assert report.comparison is not None
    assert report.comparison.overall.rms > 20.0


def test_no_clear_day():
    spot = wall_spot()
    report = compare_station(made_series(spot, cloudy=range(24)), AIR, spot)
    assert report.comparison is None
    assert not report.counted.any()
    assert any("no day is clear" in text for text in report.warnings)
    assert any("nothing to compare" in line for line in report.lines())
    json.dumps(report.record(), allow_nan=False)


def test_record_is_json(report):
    told = json.loads(json.dumps(report.record(), allow_nan=False))
    assert told["sky"] == "clear"
    assert told["overall"]["bias_w_m2"] == 0.0
    assert list(told["months"]) == ["3"]
    assert len(told["clear_days"]) == 21
    assert len(told["cell"]["horizon_deg"]) == 360
    assert told["station"]["end"] == "2025-03-29T00:00:00Z"


def test_heights_that_differ_are_doubted(report):
    spot = replace(report.spot, height=870.0)
    found = compare_station(report.station, AIR, spot)
    assert any("at 870 m: is its place right?" in text for text in found.warnings)
    assert "at 870 m (stated: 800 m)" in found.lines()[0]


def test_impossible_values_do_not_count(report):
    station = replace(report.station, values={"global": report.station.values["global"].copy()})
    station.values["global"][60] = 5000.0
    found = compare_station(station, AIR, report.spot)
    assert not found.counted[60]
    name = station.name
    assert f"{name}: cannot be true and count as missing: 1 of global" in found.warnings
    assert station.values["global"][60] == 5000.0


# Albedo


def test_albedo_is_that_of_the_model():
    spot = wall_spot()
    station = made_series(spot)
    months = [0.2, 0.2, 0.7] + [0.2] * 9
    direct = model_station(station, AIR, spot.horizon, spot.sky_view, 0.7)
    for asked in (0.7, months):
        modelled = compare_station(station, AIR, spot, albedo=asked).modelled
        np.testing.assert_allclose(modelled.shaded, direct.shaded, atol=1e-9)
        np.testing.assert_allclose(modelled.dull, direct.dull, atol=1e-9)


def test_measured_albedo_counts_unless_asked():
    spot = wall_spot()
    station = made_series(spot)
    snow = np.full(station.start.size, 0.8)
    snow[::2] = np.nan
    snowy = replace(station, values=station.values | {"albedo": snow})
    bright, dark = (model_station(station, AIR, spot.horizon, spot.sky_view, a) for a in (0.8, 0.2))
    modelled = compare_station(snowy, AIR, spot).modelled.shaded
    np.testing.assert_allclose(modelled[1::2], bright.shaded[1::2], atol=1e-9)
    np.testing.assert_allclose(modelled[::2], dark.shaded[::2], atol=1e-9)
    asked = compare_station(snowy, AIR, spot, albedo=0.2).modelled.shaded
    np.testing.assert_allclose(asked, dark.shaded, atol=1e-9)


@pytest.mark.parametrize("albedo", [1.5, [0.2] * 11, -0.1])
def test_albedo_out_of_range(report, albedo):
    with pytest.raises(SettingError, match="albedo"):
        compare_station(report.station, AIR, report.spot, albedo=albedo)


# A second station


def cloudy_pair(days=12):
    """Two open stations under the same clouds."""
    there = made_series(LEVEL, days=days, cloudy=(1, 5, 6), thinned=0.45)
    return there, replace(there, name="summit")


def test_a_second_station_brings_the_energy_back():
    there, other = cloudy_pair()
    report = compare_station(there, AIR, LEVEL, other)
    overall = report.comparison.overall
    assert overall.count > 12 * 11  # all days
    assert abs(overall.bias) < 0.001 * overall.measured
    assert overall.rms < 0.001 * overall.measured
    assert report.other.kilometres == 0.0
    assert any("the sky is that of summit, 0.0 km away" in line for line in report.lines())
    assert report.record()["second_station"]["distance_km"] == 0.0


def test_distance_of_the_second_station():
    there, other = cloudy_pair()
    away = replace(other, latitude=47.0)
    # A degree of latitude at 46.5 N on WGS 84 is 111.16 km (common knowledge, no source).
    found = compare_station(there, AIR, LEVEL, away).other
    assert found.kilometres == pytest.approx(111.16, abs=0.05)


def test_gaps_of_the_second_station_are_left_out_and_harm_nothing_else():
    there, other = cloudy_pair()
    whole = compare_station(there, AIR, LEVEL, other).modelled.shaded
    holed = replace(other, values={"global": other.values["global"].copy()})
    gap = slice(3 * 24, 4 * 24)
    holed.values["global"][gap] = np.nan
    report = compare_station(there, AIR, LEVEL, holed, fill_hours=0.0)
    noon = 3 * 24 + 11
    assert np.isnan(report.modelled.shaded[noon])
    assert not report.counted[noon]
    np.testing.assert_allclose(report.modelled.shaded[4 * 24 :], whole[4 * 24 :], atol=1e-9)
    np.testing.assert_allclose(report.modelled.shaded[: 3 * 24], whole[: 3 * 24], atol=1e-9)
    json.dumps(report.record(), allow_nan=False)


def test_stations_of_other_times_are_refused():
    there, other = cloudy_pair()
    later = replace(other, start=other.start + np.timedelta64(400, "D"))
    with pytest.raises(InputError, match="give two series of the same time"):
        compare_station(there, AIR, LEVEL, later)


def test_a_station_without_global_is_refused(report):
    beam = replace(report.station, values={"beam": report.station.values["global"]}, flags={})
    with pytest.raises(InputError, match="no global light was measured"):
        compare_station(beam, AIR, report.spot)


# Clear days


def test_clear_days_at_short_intervals():
    spot = wall_spot()
    station = made_series(spot, days=6, seconds=600, cloudy=(2,), thinned=0.6)
    modelled = model_station(station, AIR, spot.horizon, spot.sky_view)
    assert clear_days(station, modelled).size == 5
    broken = replace(station, values={"global": station.values["global"].copy()})
    noise = np.random.default_rng(1).uniform(0.3, 1.1, station.start.size)
    broken.values["global"][: 2 * 144] *= noise[: 2 * 144]
    assert clear_days(broken, modelled).size == 3
