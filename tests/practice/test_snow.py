"""Named numbers, weather by the hour, agreement and fit, without terrain."""

from dataclasses import replace

import numpy as np
import pytest

from terrasol.errors import InputError, SettingError
from terrasol.practice.snow import (
    MELT_NUMBERS,
    NO_AVALANCHE,
    NUMBERS,
    Snow,
    SnowModel,
    Weather,
    snow_day,
)
from terrasol.practice.snow_point import (
    USUAL,
    agreement,
    fit_snow,
    numbers_to_fit,
    point_snow,
    split_days,
)
from terrasol.practice.snow_weather import (
    daily_snow_water,
    hourly_weather,
    level_light,
    measured_light,
    whole_days,
)
from terrasol.sky.potential import PotentialBeam
from terrasol.sky.station import Station

DAY = np.timedelta64(86400, "s")


def station_of(values, start="2025-01-01T00:00:00", seconds=3600, **more):
    size = len(next(iter(values.values())))
    times = np.datetime64(start) + np.arange(size) * np.timedelta64(seconds, "s")
    arrays = {name: np.array(v, float) for name, v in values.items()}
    place = {"latitude": 46.0, "longitude": 0.0, "height": 1000.0} | more
    return Station("made", start=times, seconds=seconds, values=arrays, **place)


def edges_of(days, start="2025-01-01T00:00:00"):
    return np.datetime64(start) + np.arange(days + 1) * DAY


# Numbers


def test_every_number_names_unit_range_and_source():
    for name, told in NUMBERS.items():
        assert told.unit, name
        assert told.source, name
        assert told.low <= told.value <= told.high, name
    for names in MELT_NUMBERS.values():
        assert all(NUMBERS[name].spread > 0.0 for name in names)


def test_threshold_is_that_of_the_model():
    assert SnowModel().numbers["melt_above"] == 1.0
    assert SnowModel("hock").numbers["melt_above"] == 0.0
    assert SnowModel("hock", changed={"melt_above": 0.5}).numbers["melt_above"] == 0.5


@pytest.mark.parametrize(
    ("asked", "words"),
    [
        ({"melt": "energy"}, "melt model 'energy' is not one of: enhanced, hock, degree-days"),
        ({"albedo": "mine"}, "albedo model 'mine'"),
        ({"lapse": (6.5,) * 11}, "one number or twelve"),
        ({"lapse": (65.0,) * 12}, "from -15 to 15 K/km"),
        ({"changed": {"factor": 1.0}}, "'factor' is no number of the snow model; there are: temp"),
        ({"changed": {"radiation_factor": 0.02}}, "radiation_factor must lie from 0 to 0.01077 mm"),
        ({"changed": {"snow_factor": float("nan")}}, "snow_factor must lie"),
    ],
)
def test_senseless_models_are_refused(asked, words):
    with pytest.raises(SettingError, match=words.replace("(", r"\(")):
        SnowModel(**asked)


def test_spread_is_one_number_at_a_time_within_bounds():
    members = SnowModel(changed={"radiation_factor": 0.0105}).spread()
    changed = [one.changed for one in members]
    factors = [one["temperature_factor"] for one in changed[:2]]
    assert factors == pytest.approx([0.05 * 0.44, 0.05 * 1.56])  # Carenzo et al. (2009): 56 %
    assert changed[2]["radiation_factor"] == pytest.approx(0.0105 * 0.94)
    assert changed[3]["radiation_factor"] == NUMBERS["radiation_factor"].high
    assert [one["snow_factor"] for one in changed[4:]] == pytest.approx([0.85, 1.15])
    assert len(SnowModel("degree-days").spread()) == 4


def test_slopes_melt_by_their_own_area():
    """At 60 degrees twice the map's area, so twice the melt on map area, and the same rain."""
    model = SnowModel("degree-days")
    snow = Snow.none(2, model)
    snow.ice[:] = 500.0
    weather = Weather(edges_of(1), np.array([0]), np.full((1, 24), 6.0), np.full((1, 24), 1.0), 0.0)
    steep = np.array([1.0, 2.0], np.float32)
    moved = snow_day(
        model, weather, 0, np.zeros((24, 1), np.float32), np.zeros(2, np.float32), steep, snow
    )
    assert moved[1, 3] == pytest.approx(2.0 * moved[0, 3])
    assert moved[1, 1] == moved[0, 1] == pytest.approx(24.0)


def test_a_megajoule_melts_what_the_factor_says():
    """25 MJ/m2 in a day at an albedo of 0.6: 10 absorbed, 2.61 mm each by Pellicciotti's factor
    (3.0 mm would be all of it)."""
    model = SnowModel(changed={"temperature_factor": 0.0})
    snow = Snow.none(1, model)
    snow.ice[:], snow.skin[:, -1] = 500.0, 0.6
    warm = Weather(edges_of(1), np.array([0]), np.full((1, 24), 2.0), np.zeros((1, 24)), 0.0)
    light = np.full((24, 1), 25e6 / 86400.0, np.float32)
    one = np.ones(1, np.float32)
    moved = snow_day(model, warm, 0, light, 0 * one, one, snow)
    assert moved[0, 3] == pytest.approx(26.1, abs=0.1)


def test_precipitation_and_temperature_change_with_height():
    """5 % more water a hundred metres up, 0.65 K colder: rain below, snow above."""
    model = SnowModel()
    snow = Snow.none(2, model)
    weather = Weather(
        edges_of(1), np.array([0]), np.full((1, 24), 2.5), np.full((1, 24), 1.0), 1000.0
    )
    above = np.array([0.0, 400.0], np.float32)
    moved = snow_day(
        model, weather, 0, np.zeros((24, 2), np.float32), above, np.ones(2, np.float32), snow
    )
    assert moved[0].tolist() == pytest.approx([0.0, 0.0, 24.0, 0.0, 0.0, 0.0])
    assert moved[1, 0] == pytest.approx(24.0 * 1.2)  # -0.1 degC: all snow


def test_lapse_of_the_month_counts():
    months = tuple(float(m) for m in range(12))
    model = SnowModel(lapse=months)
    weather = Weather(edges_of(1), np.array([4]), np.zeros((1, 24)), np.zeros((1, 24)), 0.0)
    assert weather.hours(0, model)[0].tolist() == [0.0, 0.0, 0.004]


def test_it_says_what_it_is_not():
    assert "no avalanche tool" in NO_AVALANCHE
    assert "licensed practice" in NO_AVALANCHE


# Weather


def test_hours_are_means_and_sums_of_the_intervals():
    """Half hours whose times begin a quarter past."""
    values = np.arange(2.0 * 24 * 3)
    station = station_of(
        {"temperature": values, "precipitation": np.ones_like(values)}, "2024-12-31T23:45:00", 1800
    )
    found = hourly_weather(station, edges_of(2), np.array([0, 0])).weather
    assert found.precipitation[0] == pytest.approx(np.full(24, 2.0))
    # from 0:00 to 1:00: half of interval 0, all of 1, half of 2
    assert found.temperature[0, 0] == pytest.approx((0.5 * 0 + 1 + 0.5 * 2) / 2.0)


def test_hours_on_the_hour_are_taken_as_they_are():
    rng = np.random.default_rng(0)
    values = rng.normal(size=72)
    station = station_of({"temperature": values, "precipitation": np.abs(values)})
    found = hourly_weather(station, edges_of(2, "2025-01-02T00:00:00"), np.zeros(2, int)).weather
    np.testing.assert_array_equal(found.temperature.reshape(-1), values[24:])


def test_short_gaps_are_mended_and_told():
    values = np.arange(48.0)
    cold, wet = values.copy(), np.ones(48)
    cold[10:13] = wet[20:22] = np.nan
    station = station_of({"temperature": cold, "precipitation": wet})
    found = hourly_weather(station, edges_of(2), np.zeros(2, int), 3.0)
    np.testing.assert_allclose(found.weather.temperature.reshape(-1), values)
    assert found.weather.precipitation.sum() == 46.0
    assert found.count == {"temperature": 3, "precipitation": 2}
    assert found.doubts == (
        "made: 3 missing values of temperature interpolated",
        "made: 2 missing values of precipitation taken for dry",
    )


def test_long_gaps_are_named():
    wet = np.ones(48)
    wet[20:24] = np.nan
    station = station_of({"temperature": np.zeros(48), "precipitation": wet})
    with pytest.raises(
        InputError, match=r"precipitation is missing from 2025-01-01T20:00 to 2025-01-02T00:00 UTC"
    ):
        hourly_weather(station, edges_of(2), np.zeros(2, int), 3.0)
    hourly_weather(station, edges_of(1, "2025-01-02T00:00:00"), np.zeros(1, int), 0.0)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"values": {"temperature": np.zeros(48)}}, "no precipitation was measured, and melt"),
        ({"seconds": 10800}, "measured every 3 h; melt wants an hourly"),
    ],
)
def test_stations_that_will_not_do(change, words):
    start = np.datetime64("2025-01-01T00:00:00")
    seconds = change.get("seconds", 3600)
    values = change.get("values", {"temperature": np.zeros(48), "precipitation": np.zeros(48)})
    times = start + np.arange(48) * np.timedelta64(seconds, "s")
    station = Station("made", 46.0, 0.0, 1000.0, times, seconds, values)
    with pytest.raises(InputError, match=words):
        hourly_weather(station, edges_of(1), np.zeros(1, int))


def test_days_beyond_the_series_are_refused():
    station = station_of({"temperature": np.zeros(48), "precipitation": np.zeros(48)})
    with pytest.raises(InputError, match="does not hold all days"):
        hourly_weather(station, edges_of(3), np.zeros(3, int))
    with pytest.raises(SettingError, match="longest gap"):
        hourly_weather(station, edges_of(1), np.zeros(1, int), float("nan"))


def test_whole_days_begin_with_the_local_day():
    """At 15 E days begin at 23:00 UTC: the first and the last hour are of days cut off."""
    station = station_of({"temperature": np.zeros(72), "precipitation": np.zeros(72)})
    assert whole_days(station, 0.0).label == "2025-01-01/2025-01-03"
    assert whole_days(station, 15.0).label == "2025-01-02/2025-01-03"
    with pytest.raises(InputError, match="no whole day"):
        whole_days(station_of({"temperature": np.zeros(26)}, "2025-01-01T20:00:00"), 0.0)


def test_observed_snow_water_is_the_last_of_the_day():
    values = np.full(72, np.nan)
    values[[3, 20, 47]] = 5.0, 7.0, -2.0
    found = daily_snow_water(station_of({"snow_water": values}), edges_of(3))
    np.testing.assert_array_equal(found, [7.0, 0.0, np.nan])
    with pytest.raises(InputError, match="no snow water was measured"):
        daily_snow_water(station_of({"temperature": values}), edges_of(3))


def test_measured_albedo_is_a_mean_of_the_day():
    values = np.full(96, np.nan)
    values[10:12], values[82] = (0.6, 0.8), 0.4
    plain = {"temperature": np.zeros(96), "precipitation": np.zeros(96), "albedo": values}
    found = hourly_weather(
        station_of(plain), edges_of(4), np.zeros(4, int), measured_albedo=True
    ).weather
    assert found.albedo is not None
    np.testing.assert_allclose(found.albedo, [0.7, 0.6, 0.5, 0.4])
    part = hourly_weather(
        station_of(plain), edges_of(1, "2025-01-02T00:00:00"), np.zeros(1, int),
        measured_albedo=True,
    ).weather  # fmt: skip
    np.testing.assert_allclose(part.albedo, [0.6])
    del plain["albedo"]
    with pytest.raises(InputError, match="no albedo was measured"):
        hourly_weather(station_of(plain), edges_of(4), np.zeros(4, int), measured_albedo=True)


def test_potential_beam_at_noon():
    """Hock (1999): I0 / R^2 psi^(p / (p0 cos Z)) cos Z; on 3 April R is 1 to 0.1 %. At the equator
    the noon hours' mean cosine is sin(15)/(pi/12) cos(5.4), at 1000 m the pressure 0.887 of the
    sea's."""
    station = station_of({"temperature": np.zeros(24)}, "2025-04-03T00:00:00", latitude=0.0)
    found = level_light(station, PotentialBeam(), edges_of(1, "2025-04-03T00:00:00"))
    assert found.shape == (1, 24)
    cosine = np.sin(np.pi / 12) / (np.pi / 12) * np.cos(np.radians(5.4))
    expected = 1368.0 * 0.75 ** (0.887 / cosine) * cosine
    assert found[0, 11:13].max() == pytest.approx(expected, rel=0.004)
    assert found[0, 0] == 0.0
    with pytest.raises(SettingError, match="transmissivity"):
        PotentialBeam(1.0)


def test_measured_light_wants_no_gap():
    light = np.full(24, 100.0)
    assert measured_light(station_of({"global": light}), edges_of(1)).sum() == 2400.0
    light[5] = np.nan
    with pytest.raises(InputError, match="global is missing from"):
        measured_light(station_of({"global": light}), edges_of(1))


# Agreement and fit


def test_agreement_by_hand():
    edges = edges_of(5)
    water = np.array([0.0, 10.0, 20.0, 5.0, 0.0])
    seen = np.array([0.0, 12.0, np.nan, 6.0, 0.0])
    found = agreement(water, seen, edges)
    assert found.days == 4
    assert found.bias == pytest.approx((-2 - 1) / 4)
    assert found.rmse == pytest.approx(np.sqrt(5 / 4))
    spread = ((np.array([0, 12, 6, 0]) - 4.5) ** 2).sum()
    assert found.efficiency == pytest.approx(1 - 5 / spread)
    assert (found.peak, found.peak_day) == (10.0, "2025-01-02")
    assert found.observed_melt_out == found.melt_out == "2025-01-05"
    with pytest.raises(InputError, match="no snow water was observed"):
        agreement(water, np.full(5, np.nan), edges)


def winter_of(days=150, seed=2):
    rng = np.random.default_rng(seed)
    hour = np.arange(days * 24)
    air = -7.0 + 16.0 * hour / hour.size + 4.0 * np.sin((hour - 9) * np.pi / 12)
    air += np.repeat(rng.normal(0.0, 2.0, days), 24)
    wet = np.where(rng.random(hour.size) < 0.1, rng.exponential(1.2, hour.size), 0.0)
    sun = 600.0 * np.maximum(np.sin((hour % 24 - 6) * np.pi / 12), 0.0)
    edges = edges_of(days, "2024-12-01T00:00:00")
    months = edges[:-1].astype("M8[M]").astype(int) % 12
    weather = Weather(edges, months, air.reshape(-1, 24), wet.reshape(-1, 24), 1000.0)
    return weather, sun.reshape(-1, 24)


@pytest.mark.parametrize(
    ("melt", "true"),
    [
        ("enhanced", {"radiation_factor": 0.006, "snow_factor": 1.15}),
        pytest.param(
            "degree-days", {"degree_day_factor": 3.1, "snow_factor": 0.9}, marks=pytest.mark.heavy
        ),
    ],
)
def test_a_fit_finds_the_numbers_that_made_the_snow(melt, true):
    weather, light = winter_of()
    seen = point_snow(SnowModel(melt, changed=true), weather, light).water
    seen[::9] = np.nan
    fit = fit_snow(SnowModel(melt), weather, light, seen)
    assert tuple(fit.fitted) == USUAL[melt]
    for name, value in true.items():
        assert fit.fitted[name] == pytest.approx(value, rel=0.01), name
    assert fit.after.efficiency > 0.9999 > fit.before.efficiency
    assert not fit.at_bound
    record = fit.record()
    assert [part["judged"]["days"] for part in record["split_sample"]] == [
        int(np.isfinite(seen).sum()) - part["judged"]["days"]
        for part in record["split_sample"][::-1]
    ]
    for part in record["split_sample"]:
        assert part["judged"]["efficiency"] > 0.95  # the snow is the model's own


def test_a_bound_is_told():
    weather, light = winter_of()
    true = SnowModel("degree-days", changed={"degree_day_factor": 3.0, "snow_factor": 3.0})
    seen = point_snow(true, weather, light).water
    fit = fit_snow(SnowModel("degree-days"), weather, light, seen)
    assert "snow_factor" in fit.at_bound


def test_winters_are_parted_where_there_are_several():
    """By the summers between them, in either hemisphere."""
    edges = edges_of(800, "2022-11-01T00:00:00")
    seen = np.full(800, np.nan)
    seen[[30, 60, 90, 380, 400, 430, 780]] = 50.0
    seen[200:220] = 0.0
    (_, first, last), (_, other, _) = split_days(edges, seen)
    assert np.flatnonzero(first).tolist() == [30, 60, 90, *range(200, 220)]
    assert np.flatnonzero(last).tolist() == [380, 400, 430, 780]
    np.testing.assert_array_equal(other, last)


@pytest.mark.parametrize(
    "names",
    [("radiation_factor",), ("degree_day_factor", "snow_factor"), ("snow_factor", "snow_factor"),
     ("temperature_factor", "radiation_factor", "snow_factor", "rain_snow_middle")],
)  # fmt: skip
def test_what_cannot_be_fitted(names):
    with pytest.raises(SettingError, match="changes two or three of"):
        numbers_to_fit(SnowModel(), names)


def test_too_little_snow_is_not_fitted():
    weather, light = winter_of(30)
    with pytest.raises(InputError, match="20 days with observed snow; there are 0"):
        fit_snow(SnowModel(), weather, light, np.zeros(30))


def test_weather_can_be_parted():
    weather, _ = winter_of(10)
    part = replace(weather, albedo=np.arange(10.0)).part(3, 7)
    assert part.days == 4
    np.testing.assert_array_equal(part.albedo, [3, 4, 5, 6])
    np.testing.assert_array_equal(part.temperature, weather.temperature[3:7])
