import numpy as np
import pandas as pd
import pvlib
import pytest

from terrasol.errors import SettingError
from terrasol.sky.clear import (
    Air,
    clear_sky,
    linke_climatology,
    relative_airmass,
    turbidity_doubts,
)
from terrasol.sky.period import parse_period
from terrasol.sky.sun import sun_path, sun_series

AIRS = {
    "ineichen": Air.ineichen(3.0),
    "ineichen months": Air.ineichen((2.4, 2.4, 2.1, 2.6, 3.0, 3.5, 3.8, 3.7, 3.3, 3.1, 2.4, 1.9)),
    "purest ineichen": Air.ineichen(1.0),
    "foulest ineichen": Air.ineichen(15.0),
    "bird": Air.bird(0.1, 1.5),
    "purest bird": Air.bird(0.0, 0.0, 0.0),
    "foulest bird": Air.bird(3.0, 8.0),
}


def day(text="2025-04-10", latitude=46.0, height=500.0):
    return sun_series(sun_path(parse_period(text), 8.0), latitude, height)


def level_total(sun, sky):
    """MJ/m2 of beam and diffuse on level ground."""
    beam = sky.beam_normal * np.maximum(np.sin(np.radians(sun.elevation)), 0.0)
    return float((beam + sky.diffuse_horizontal).sum() * sun.step_seconds / 1e6)


@pytest.mark.parametrize("air", AIRS.values(), ids=AIRS)
@pytest.mark.parametrize("height", [-400.0, 0.0, 1500.0, 4000.0, 8800.0])
def test_never_void_nor_negative_nor_more_than_arrives(air, height):
    sun = sun_series(sun_path(parse_period("2025"), 8.0, 600.0), 46.0, height)
    sky = clear_sky(sun, air, height)
    sine = np.maximum(np.sin(np.radians(sun.elevation)), 0.0)
    level = sky.beam_normal * sine + sky.diffuse_horizontal
    assert np.isfinite(level).all()
    assert sky.beam_normal.min() >= 0.0
    assert sky.diffuse_horizontal.min() >= 0.0
    assert (sky.beam_normal <= sky.extraterrestrial_normal).all()
    assert (level <= sky.extraterrestrial_normal * sine + 1e-9).all()


@pytest.mark.parametrize("air", AIRS.values(), ids=AIRS)
def test_dark_while_the_centre_is_below_the_horizon(air):
    sun = day()
    sky = clear_sky(sun, air, 500.0)
    below = sun.elevation <= 0.0
    assert below.any()
    assert not sky.beam_normal[below].any()
    assert not sky.diffuse_horizontal[below].any()
    assert sky.extraterrestrial_normal[below].all()


@pytest.mark.parametrize("air", AIRS.values(), ids=AIRS)
def test_polar_night_is_empty(air):
    sun = day("2025-12", 85.0)
    sky = clear_sky(sun, air, 0.0)
    assert sky.beam_normal.shape == sky.diffuse_horizontal.shape == (0,)


def test_extraterrestrial_goes_with_the_square_of_distance():
    sun = day()
    sky = clear_sky(sun, Air.ineichen(3.0, solar_constant=1367.0), 0.0)
    np.testing.assert_allclose(sky.extraterrestrial_normal, 1367.0 / sun.distance**2, rtol=1e-14)


def test_twelve_equal_numbers_are_one():
    sun = day("2025")
    one, twelve = (clear_sky(sun, Air.ineichen(v), 500.0) for v in (3.0, (3.0,) * 12))
    np.testing.assert_array_equal(one.beam_normal, twelve.beam_normal)


@pytest.mark.filterwarnings("ignore:DatetimeIndex.dayofyear is deprecated")  # inside pvlib
@pytest.mark.parametrize("year", ["2024", "2025", "2024-12-20/2025-01-10"])
def test_turbidity_between_months_is_pvlibs(year):
    """Beam of the whole period against pvlib's own look-up, interpolation and formula."""
    latitude, longitude, height = 46.0, 8.0, 500.0
    sun = sun_series(sun_path(parse_period(year), longitude, 600.0), latitude, height)
    sky = clear_sky(sun, Air.ineichen(linke_climatology(latitude, longitude)), height)
    time = pd.DatetimeIndex(sun.time).tz_localize("UTC")
    zenith = 90.0 - np.maximum(sun.elevation, 1e-9)
    mass = pvlib.atmosphere.get_absolute_airmass(
        pvlib.atmosphere.get_relative_airmass(zenith), pvlib.atmosphere.alt2pres(height)
    )
    theirs = pvlib.clearsky.ineichen(
        zenith,
        mass,
        pvlib.clearsky.lookup_linke_turbidity(time, latitude, longitude).to_numpy(),
        height,
        sky.extraterrestrial_normal,
    )
    up = sun.elevation > 0.01
    np.testing.assert_allclose(sky.beam_normal[up], theirs["dni"][up], rtol=1e-9)
    np.testing.assert_allclose(sky.diffuse_horizontal[up], theirs["dhi"][up], rtol=1e-7)


def test_dirtier_air_lets_less_through():
    sun = day()
    by_linke = [level_total(sun, clear_sky(sun, Air.ineichen(v), 500.0)) for v in (2, 3, 4, 6)]
    by_dust = [level_total(sun, clear_sky(sun, Air.bird(v, 1.5), 500.0)) for v in (0, 0.1, 0.3)]
    by_water = [level_total(sun, clear_sky(sun, Air.bird(0.1, v), 500.0)) for v in (0, 1.5, 4)]
    for totals in (by_linke, by_dust, by_water):
        assert (np.diff(totals) < 0.0).all()


@pytest.mark.parametrize("air", [AIRS["ineichen"], AIRS["bird"]], ids=["ineichen", "bird"])
def test_beam_grows_with_height(air):
    sun = day()
    totals = [clear_sky(sun, air, h).beam_normal.sum() for h in (0, 500, 1000, 2000, 3000, 4000)]
    assert (np.diff(totals) > 0.0).all()


@pytest.mark.parametrize("air", AIRS.values(), ids=AIRS)
@pytest.mark.parametrize("height", [0.0, 4000.0])
def test_beam_weakens_as_the_sun_sinks(air, height):
    """Within an afternoon, down to the horizon, for every air."""
    sun = day("2025-06-20", 5.0)
    sky = clear_sky(sun, air, height)
    afternoon = slice(sun.elevation.argmax(), (sun.elevation > 0.0).nonzero()[0][-1] + 1)
    steps = np.diff(sky.beam_normal[afternoon] / sky.extraterrestrial_normal[afternoon])
    assert steps.size > 300
    assert (steps <= 1e-12).all()


def test_two_models_agree_on_a_clear_day():
    """Two independent models of much the same air: within 5 % (judgement, no source)."""
    sun = day("2025-06-20", height=0.0)
    ineichen = level_total(sun, clear_sky(sun, Air.ineichen(3.0), 0.0))
    bird = level_total(sun, clear_sky(sun, Air.bird(0.1, 1.5), 0.0))
    assert ineichen == pytest.approx(bird, rel=0.05)


def test_air_mass_below_the_horizon_is_the_horizons():
    np.testing.assert_array_equal(relative_airmass([-5.0, -0.2]), relative_airmass([0.0, 0.0]))


@pytest.mark.parametrize(
    ("latitude", "longitude"),
    [(90.0, 0.0), (-90.0, 0.0), (0.0, 180.0), (0.0, -180.0), (46.5, 8.0), (-33.9, 151.2)],
)
def test_climatology_everywhere(latitude, longitude):
    linke = linke_climatology(latitude, longitude)
    assert len(linke) == 12
    assert all(1.0 <= value <= 10.0 for value in linke)
    assert Air.ineichen(linke).linke == linke


def test_climatology_off_the_globe():
    with pytest.raises(SettingError, match="not on the globe"):
        linke_climatology(91.0, 0.0)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Air.ineichen(0.9), "outside 1 to 15"),
        (lambda: Air.ineichen(float("nan")), "outside 1 to 15"),
        (lambda: Air.ineichen((3.0,) * 11), "1 number or 12"),
        (lambda: Air.ineichen(()), "1 number or 12"),
        (lambda: Air("ineichen"), "1 number or 12"),
        (lambda: Air("esra"), "unknown"),
        (lambda: Air.bird(-0.1, 1.5), "aerosol depth at 500 nm"),
        (lambda: Air.bird(0.1, 50.0), "precipitable water"),
        (lambda: Air.bird(0.1, 1.5, 300.0), "ozone"),
        (lambda: Air.bird(0.1, 1.5, ground_albedo=1.2), "albedo"),
        (lambda: Air.bird(0.1, 1.5, asymmetry=2.0), "asymmetry"),
        (lambda: Air.ineichen(3.0, solar_constant=0.0), "solar constant"),
    ],
)
def test_impossible_air_is_refused(make, words):
    with pytest.raises(SettingError, match=words):
        make()


def test_depth_at_380_follows_from_500():
    assert Air.bird(0.1, 1.5).aerosol_380nm == pytest.approx(0.1 * (500 / 380) ** 1.3)


def test_a_climatology_that_changes_over_the_ground_is_doubted():
    def doubts(half):
        latitude, longitude = np.meshgrid([62.0 - half, 62.0 + half], [15.0 - half, 15.0 + half])
        return turbidity_doubts((62.0, 15.0), latitude, longitude)

    assert doubts(0.01) == ()
    assert "differs by up to" in doubts(2.5)[0]
    assert "--linke" in doubts(2.5)[0]
    # places beyond the date line are places all the same
    assert turbidity_doubts((0.0, 179.9), np.array([0.0]), np.array([180.0])) == ()
