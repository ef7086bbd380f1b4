"""Steps and their settings, and single hours against plain minutes."""

import numpy as np
import pandas as pd
import pytest
from reference.kept import series_of
from reference.plain_sun import clear_beam, sun_place, unit_vectors

from terrasol.errors import InputError, SettingError
from terrasol.light.series import (
    SeriesSettings,
    quantity,
    step_albedo,
    step_edges,
    step_months,
    suns_at_greenwich,
)
from terrasol.sky.clear import Air
from terrasol.sky.cloud import CloudedSky, MonthlySky
from terrasol.sky.period import parse_period
from terrasol.sky.station import Station

AIR = Air.ineichen(3.0)


def settings(period="2025-06", **given):
    return SeriesSettings(parse_period(period), AIR, **given)


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"step": "2h"}, "step '2h' is not one of: 1h, 1d"),
        ({"quantities": ("global", "heat")}, "quantity 'heat' is not one of"),
        ({"quantities": ()}, "at least one quantity"),
        ({"quantities": ("net", "net")}, "each of them once"),
        ({"albedo": (0.2,) * 11}, "albedo must be twelve"),
        ({"albedo": (1.2,) * 12}, "albedo must be twelve"),
        ({"basis": "roof"}, "basis 'roof'"),
        ({"diffuse": "even"}, "diffuse model 'even'"),
        ({"azimuths": 30}, "azimuths must be a multiple of 4"),
        ({"refraction": 1.0}, "refraction coefficient"),
        ({"substep_seconds": 700.0}, "do not divide an hour"),
        ({"substep_seconds": 0.0}, "do not divide an hour"),
        ({"substep_seconds": 7200.0}, "do not divide an hour"),
        ({"substep_seconds": float("nan")}, "do not divide an hour"),
    ],
)
def test_wrong_settings_are_refused(given, words):
    with pytest.raises(SettingError, match=words):
        settings(**given)


def test_monthly_indices_make_no_series():
    with pytest.raises(SettingError, match="no hours"):
        SeriesSettings(parse_period("2025-06"), MonthlySky(AIR, (0.6,) * 12))


def test_moments_must_not_miss_measured_intervals():
    start = np.datetime64("2025-06-01", "s") + np.arange(3) * np.timedelta64(60, "s")
    sky = CloudedSky(AIR, start, 60, np.ones(3), np.ones(3), np.zeros(3), 0.0)
    with pytest.raises(SettingError, match="miss intervals of a series measured every 60 s"):
        SeriesSettings(parse_period("2025-06-01"), sky)
    assert SeriesSettings(parse_period("2025-06-01"), sky, substep_seconds=60.0).moments == 60


@pytest.mark.parametrize("longitude", [-179.9, -120.0, -7.6, 0.0, 7.4, 9.0, 100.0, 179.9])
@pytest.mark.parametrize("step", ["1h", "1d"])
def test_steps_tile_local_days_in_hours_of_utc(longitude, step):
    given = settings(step=step)
    edges = step_edges(given, longitude)
    assert edges.size - 1 == (720 if step == "1h" else 30)
    assert (np.diff(edges) == np.timedelta64(3600 if step == "1h" else 86400, "s")).all()
    midnight = given.period.start - np.timedelta64(round(longitude * 240), "s")
    assert abs(edges[0] - midnight) <= np.timedelta64(1800, "s")
    assert (edges.astype(np.int64) % 3600 == 0).all()


@pytest.mark.parametrize("longitude", [-179.0, 0.0, 179.0])
def test_months_are_those_of_local_days(longitude):
    given = settings("2025-01-31/2025-02-01")
    months = step_months(given, step_edges(given, longitude))
    assert months.tolist() == [0] * 24 + [1] * 24


def test_moments_tile_the_steps():
    given = settings("2025-12-31/2026-01-01")
    edges = step_edges(given, 30.0)
    path = suns_at_greenwich(edges, 300.0)
    assert path.time.size == 48 * 12
    assert path.time[0] == edges[0] + np.timedelta64(150, "s")
    assert path.time[-1] == edges[-1] - np.timedelta64(150, "s")
    assert (np.diff(path.time) == np.timedelta64(300, "s")).all()


def test_greenwich_sun_is_the_sun_of_any_meridian():
    # hour angle by the equation of time: noon at Greenwich on 11 February is near 12:14 UTC
    edges = step_edges(settings("2025-02-11"), 0.0)
    path = suns_at_greenwich(edges, 60.0)
    noon = path.time[np.abs(path.hour_angle).argmin()]
    assert abs(noon - np.datetime64("2025-02-11T12:14:12")) < np.timedelta64(60, "s")


def plane(slope, aspect, size=12):
    """An endless tilted plane, as far as 12 cells of 30 m go."""
    fall = np.tan(np.radians(slope)) * 30.0
    y, x = np.mgrid[0:size, 0:size] - (size - 1) / 2
    a = np.radians(aspect)
    return 500.0 + fall * (y * np.cos(a) - x * np.sin(a))


@pytest.mark.parametrize(
    ("slope", "aspect"), [(0.0, 0.0), (30.0, 90.0), (30.0, 270.0), (60.0, 180.0)]
)
def test_hours_of_beam_are_means_of_plain_minutes(metric_ground, slope, aspect):
    ground = metric_ground(plane(slope, aspect), 30.0, 46.0, 9.0)
    found, plan = series_of(ground, "2025-03-20", quantities=("beam",), diffuse="isotropic")
    times = pd.date_range(plan.edges[0], plan.edges[-1], freq="min", inclusive="left", tz="UTC")
    times += pd.Timedelta(seconds=30)
    elevation, azimuth = sun_place(times, 46.0, 9.0, 500.0)
    beam = np.where(elevation > 0.0, clear_beam(times, elevation, 3.0, [500.0])[:, 0], 0.0)
    s, a = np.radians(slope), np.radians(aspect)
    normal = np.array([np.sin(s) * np.sin(a), np.sin(s) * np.cos(a), np.cos(s)])
    facing = np.maximum(unit_vectors(elevation, azimuth) @ normal, 0.0)
    want = (beam * facing).reshape(24, 60).mean(axis=1)
    assert want.max() > 500.0
    got = found["beam"][:, 5:7, 5:7].mean(axis=(1, 2))
    np.testing.assert_allclose(got, want, atol=0.6)
    assert abs(got.sum() - want.sum()) < 1e-3 * want.sum()


def test_half_an_hour_of_labels_matters_on_east_and_west(metric_ground):
    # "Hour-ending vs beginning label: 30 min: 13-15 % on 30 degree E/W slopes, opposite signs,
    # below 1 % on S" (the project's notes on traps; computed, 45 north, spring, beam). The
    # hours here are set against those half an hour later, weighed by a sun of forenoons.
    half = []
    for aspect in (90.0, 270.0, 180.0):
        ground = metric_ground(plane(30.0, aspect), 30.0, 45.0, 0.0)
        found, _ = series_of(ground, "2025-04-15", quantities=("beam",))
        level, _ = series_of(
            metric_ground(plane(0.0, 0.0), 30.0, 45.0, 0.0), "2025-04-15", quantities=("beam",)
        )
        on_slope, on_level = (f["beam"][:, 5, 5].astype(float) for f in (found, level))
        # a measured level series mislabelled by half an hour, put onto the slope
        late = (on_level[:-1] + on_level[1:]) / 2
        lit = on_level[:-1] > 20.0
        ratio = np.divide(on_slope[:-1], on_level[:-1], where=lit, out=np.zeros(23))
        half.append((late * ratio)[lit].sum() / on_slope[:-1][lit].sum() - 1.0)
    east, west, south = half
    assert east * west < 0.0
    assert min(abs(east), abs(west)) > 0.08
    assert abs(south) < 0.03


def test_net_is_what_is_not_sent_back():
    light = np.full((4, 2, 3, 5), 100.0, np.float32)
    light[0, 1] = 200.0
    net = quantity("net", light, np.array([0.2, 0.8], np.float32))
    np.testing.assert_allclose(net[:, 0, 0], [80.0, 40.0], rtol=1e-6)
    assert quantity("global", light, np.zeros(2, np.float32))[1, 0, 0] == 200.0


def test_measured_albedo_is_linear_in_time_between_what_is_known():
    start = np.datetime64("2025-03-01", "s") + np.arange(96) * np.timedelta64(3600, "s")
    albedo = np.full(96, np.nan)
    albedo[12], albedo[36] = 0.8, 0.6  # at 12:30 of two days
    station = Station("snow", 46.0, 9.0, 600.0, start, 3600, {"albedo": albedo})
    settings = SeriesSettings(
        parse_period("2025-03-01/2025-03-04"), AIR, albedo_station=station, step="1h"
    )
    edges = step_edges(settings, 0.0)
    found = step_albedo(settings, edges, step_months(settings, edges))
    np.testing.assert_allclose(found[[12, 24, 36, 90]], [0.8, 0.7, 0.6, 0.6], atol=1e-6)
    assert found[0] == pytest.approx(0.8)
    without = Station("bare", 46.0, 9.0, 600.0, start, 3600, {})
    with pytest.raises(InputError, match="no albedo was measured"):
        SeriesSettings(parse_period("2025-03-01"), AIR, albedo_station=without)
