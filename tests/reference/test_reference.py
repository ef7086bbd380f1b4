"""The references themselves, held to closed forms before anything is held to them."""

import numpy as np
import pandas as pd
import pytest

from reference.plain_rows import plain_rows
from reference.plain_speed import hourly_suns, plain_beam
from reference.plain_sun import (
    SOLAR_CONSTANT,
    Place,
    beam_months,
    clear_beam,
    disc_share,
    horizon_at,
    minutes_of,
    sun_place,
    upward_normals,
)
from reference.ray_march import EARTH_RADIUS, march_horizon

ALP = Place(46.01, 45.99, 8.99, 9.01, 500.0)


def test_plane_hides_itself_by_its_apparent_dip():
    # tan h = tan(slope) cos(azimuth - uphill azimuth): geometry of a plane
    rise = np.tan(np.radians(30.0))
    z = -np.arange(41.0)[:, None] * 10.0 * rise + np.zeros(41)
    azimuths = np.arange(0.0, 360.0, 7.5)
    got = march_horizon(z, 10.0, 10.0, azimuths, radius=np.inf)[:, 20, 20]
    want = np.degrees(np.arctan(np.maximum(rise * np.cos(np.radians(azimuths)), 0.0)))
    np.testing.assert_allclose(got, want, atol=1e-10)


@pytest.mark.parametrize(("distance", "drop"), [(10_000.0, 7.848), (50_000.0, 196.2)])
def test_far_wall_sinks_with_the_earth(distance, drop):
    # d^2 / 2R with R = 6371 km: 7.848 m at 10 km (geometry)
    z = np.zeros((3, 501))
    z[:, 500] = 1000.0
    h = march_horizon(z, distance / 500, 50.0, [90.0], radius=EARTH_RADIUS)[0, 1, 0]
    assert 1000.0 - distance * np.tan(np.radians(h)) == pytest.approx(drop, abs=0.01)


def test_void_hides_nothing_and_has_no_horizon():
    z = np.zeros((9, 9))
    z[4, 6] = np.nan
    z[4, 8] = 5.0
    h = march_horizon(z, 10.0, 10.0, [90.0], radius=np.inf)[0]
    assert np.isnan(h[4, 6])
    assert h[4, 4] == pytest.approx(np.degrees(np.arctan(5.0 / 40.0)))


def test_disc_is_whole_half_and_gone():
    assert disc_share(1.0) == pytest.approx(1.0)
    assert disc_share(0.0) == pytest.approx(0.5)
    assert disc_share(-1.0) == pytest.approx(0.0)
    # a segment of half a radius: area (pi/3 - sqrt(3)/4) r^2
    assert disc_share(-0.5) == pytest.approx((np.pi / 3 - np.sqrt(3) / 4) / np.pi)


def test_horizon_between_azimuths_is_linear_and_wraps():
    horizon = np.array([10.0, 20.0, 30.0, 40.0])
    assert horizon_at(horizon, 45.0) == pytest.approx(15.0)
    assert horizon_at(horizon, 315.0) == pytest.approx(25.0)


def test_level_ground_gets_the_beam_times_the_sine_of_elevation():
    times = minutes_of("2025-06-20", "2025-06-23", 9.0)
    elevation, _ = sun_place(times, 46.0, 9.0, 500.0)
    beam = clear_beam(times, elevation, 3.0, [500.0])[:, 0]
    whole = elevation > 0.3  # the whole disc; what the rest adds is under 2e-5 of the sum
    want = (beam * np.sin(np.radians(elevation)))[whole].sum() * 60e-6
    z = np.full((5, 5), 500.0)
    got = beam_months(z, 10.0, 10.0, ALP, start="2025-06-20", end="2025-06-23", azimuths=8)
    assert got.sum(axis=0)[2, 2] == pytest.approx(want, rel=2e-5)
    # a hundredth of a degree further south the same day is brighter, by a few parts in 100,000
    assert 1e-5 < got.sum(axis=0)[4, 2] / want - 1.0 < 1e-4
    assert beam.max() < SOLAR_CONSTANT


def test_wall_takes_the_sun_until_it_rises_above_it():
    # endless wall in the east, seen from 100 m at 40 m: tan h = 0.4 sin(azimuth)
    z = np.full((401, 12), 500.0)
    z[:, 11] = 540.0
    one = (np.array([200]), np.array([1]))
    span = {"start": "2025-03-20", "end": "2025-03-21"}
    got = beam_months(z, 10.0, 10.0, ALP, radius=np.inf, cells=one, **span).sum()
    times = minutes_of(**span, longitude=9.0)
    elevation, azimuth = sun_place(times, 46.0, 9.0, 500.0)
    ridge = np.arctan(0.4 * np.maximum(np.sin(np.radians(azimuth)), 0.0))
    seen = elevation > np.maximum(np.degrees(ridge), 0.0)
    beam = clear_beam(times, elevation, 3.0, [500.0])[:, 0]
    want = (beam * np.sin(np.radians(elevation)))[seen].sum() * 60e-6
    assert got == pytest.approx(want, rel=3e-4)  # one minute is 3e-4 of that day's beam


@pytest.mark.heavy
def test_naive_way_and_minute_way_agree_on_a_hill():
    # hourly sampling of a month of days is good to a percent where shade matters little
    north, east = np.mgrid[300:-301:-20, -300:301:20].astype(float)
    z = 500.0 + 80.0 * np.exp(-(north**2 + east**2) / (2 * 120.0**2))
    hours = pd.date_range("2025-06-01 00:30", "2025-07-01", freq="h", inclusive="left", tz="UTC")
    suns, beam = hourly_suns(hours, ALP)
    naive = plain_beam(z, 20.0, 20.0, suns, beam)
    fine = beam_months(z, 20.0, 20.0, ALP, start="2025-06-01", end="2025-07-01", azimuths=180)
    np.testing.assert_allclose(naive, fine.sum(axis=0), rtol=0.01)


def test_normals_of_a_plane_reach_to_the_rim():
    north, east = np.mgrid[40:-41:-10, -40:41:10].astype(float)
    normal = upward_normals(0.3 * east - 0.2 * north, 10.0, 10.0)
    want = np.array([-0.3, 0.2, 1.0]) / np.sqrt(0.3**2 + 0.2**2 + 1.0)
    np.testing.assert_allclose(normal, np.broadcast_to(want, normal.shape), atol=1e-14)


def test_sky_between_plain_rows_follows_closed_forms():
    # An even sky of radiance 1 sends pi to open level ground. Of the floor of a lane with q height
    # over gap it reaches sqrt(1 + q^2) - q, of a side half of 1 + 1 / q - sqrt(1 + 1 / q^2).
    q = 1.5 / 1.6
    right, left, top, ground = plain_rows(90.0, False, 0.0, 0.0, 2.0, 1.5, 0.4, 20.0) / np.pi
    assert top == pytest.approx(1.0, abs=1e-3)
    assert ground == pytest.approx(np.hypot(1.0, q) - q, abs=1e-3)
    side = 0.5 * (1.0 + 1.0 / q - np.hypot(1.0, 1.0 / q))
    assert right == pytest.approx(side, abs=1e-3)
    assert left == pytest.approx(side, abs=1e-3)
    # A band of radiance 1 up to e sends e + sin e cos e to an open wall: 2 times the integral of
    # cos^2. Its level part sends nothing to level ground, and sin S of that to a slope S.
    e = np.radians(6.5)
    wall = e + np.sin(e) * np.cos(e)
    far = plain_rows(6.5, True, 0.0, 0.0, 1e4, 1.5, 0.4, 20.0) / wall
    np.testing.assert_allclose(far, [1.0, 1.0, 0.0, 0.0], atol=1e-3)
    sloping = plain_rows(6.5, True, 25.0, 75.0, 2.0, 1.5, 0.4, 20.0) / wall
    assert sloping[2] == pytest.approx(np.sin(np.radians(25.0)), abs=1e-3)
