import numpy as np
import pvlib
import pytest
from reference.plain_plane import plane_diffuse, plane_ground

from terrasol.errors import SettingError
from terrasol.sky.clear import Air, clear_sky, relative_airmass
from terrasol.sky.diffuse import (
    MODELS,
    perez_brightening,
    split_diffuse,
)
from terrasol.sky.irradiance import Irradiance
from terrasol.sky.period import parse_period
from terrasol.sky.sun import SunSeries, incidence_cosine, sun_path, sun_series

PLANES = [(0.0, 0.0), (20.0, 45.0), (35.0, 180.0), (60.0, 270.0), (90.0, 100.0)]


def year(latitude=46.0):
    sun = sun_series(sun_path(parse_period("2025"), 8.0, 600.0), latitude)
    return sun, clear_sky(sun, Air.ineichen(3.0), 0.0)


def any_weather(count=5000):
    """Random suns 6 to 89 degrees high under random clouds, on a made-up sky."""
    random = np.random.default_rng(11)
    sun = SunSeries(
        latitude=0.0,
        longitude=0.0,
        step_seconds=60.0,
        time=np.full(count, np.datetime64("2025-06-01", "ns")),
        month=np.zeros(count, np.int16),
        elevation=random.uniform(6.0, 89.0, count),
        azimuth=random.uniform(0.0, 360.0, count),
        distance=np.ones(count),
    )
    beam = random.uniform(0.0, 900.0, count) * (random.random(count) > 0.3)
    return sun, Irradiance(beam, random.uniform(1.0, 450.0, count), np.full(count, 1361.0))


@pytest.mark.parametrize("model", MODELS)
@pytest.mark.parametrize("latitude", [0.0, 46.0, -72.0])
def test_level_ground_gets_exactly_the_diffuse(model, latitude):
    """However low the sun, nothing is lost or made."""
    sun, sky = year(latitude)
    split = split_diffuse(model, sun, sky)
    sine = np.maximum(np.sin(np.radians(sun.elevation)), 0.0)
    level = plane_diffuse(split, sine, 0.0)
    np.testing.assert_allclose(level, sky.diffuse_horizontal, rtol=0, atol=1e-10)
    assert split.isotropic.min() >= 0.0
    assert split.circumsolar_normal.min() >= 0.0
    assert np.isfinite(split.horizon_band).all()


@pytest.mark.parametrize("model", MODELS)
def test_no_light_no_split(model):
    """A black sky splits into nothing, without a warning."""
    sun, sky = year()
    dark = Irradiance(sky.beam_normal, np.zeros_like(sky.beam_normal), sky.extraterrestrial_normal)
    split = split_diffuse(model, sun, dark)
    assert not split.isotropic.any()
    assert not split.circumsolar_normal.any()
    assert not split.horizon_band.any()


@pytest.mark.parametrize(("slope", "aspect"), PLANES)
def test_perez_against_pvlib(slope, aspect):
    """The whole of pvlib's Perez on planes, in all weathers, sun above its floor of 5 degrees.

    Where pvlib's F1 leaves 0 to 1 ours is cut to it; such cases are left out, and few.
    """
    sun, sky = any_weather()
    cosine = incidence_cosine(sun.elevation, sun.azimuth, slope, aspect)
    split = split_diffuse("perez", sun, sky)
    f1, _ = perez_brightening(
        sun.elevation, sky.beam_normal, sky.diffuse_horizontal, sky.extraterrestrial_normal
    )
    theirs = pvlib.irradiance.perez(
        slope,
        aspect,
        sky.diffuse_horizontal,
        sky.beam_normal,
        sky.extraterrestrial_normal,
        90.0 - sun.elevation,
        sun.azimuth,
        relative_airmass(sun.elevation),
    )
    fair = f1 < 1.0
    assert fair.mean() > 0.95
    ours = plane_diffuse(split, cosine, slope)
    np.testing.assert_allclose(ours[fair], theirs[fair], rtol=0, atol=1e-9)


@pytest.mark.parametrize(("slope", "aspect"), PLANES)
def test_hay_davies_against_pvlib(slope, aspect):
    sun, sky = any_weather()
    cosine = incidence_cosine(sun.elevation, sun.azimuth, slope, aspect)
    theirs = pvlib.irradiance.haydavies(
        slope,
        aspect,
        sky.diffuse_horizontal,
        sky.beam_normal,
        sky.extraterrestrial_normal,
        90.0 - sun.elevation,
        sun.azimuth,
    )
    ours = plane_diffuse(split_diffuse("hay-davies", sun, sky), cosine, slope)
    np.testing.assert_allclose(ours, theirs, rtol=0, atol=1e-9)


def test_isotropic_plane_and_ground_make_a_whole():
    """Sky and plain of the same brightness light every plane alike."""
    sun, sky = any_weather(50)
    split = split_diffuse("isotropic", sun, sky)
    for slope in (0.0, 30.0, 90.0):
        both = plane_diffuse(split, 0.0, slope) + plane_ground(sky.diffuse_horizontal, slope, 1.0)
        np.testing.assert_allclose(both, sky.diffuse_horizontal, rtol=1e-12)


def test_low_sun_keeps_the_circumsolar_floor():
    """Below 5 degrees the ring is D F1 / 0.087, and the dome takes what is left."""
    sun, sky = year()
    split = split_diffuse("perez", sun, sky)
    f1, _ = perez_brightening(
        sun.elevation, sky.beam_normal, sky.diffuse_horizontal, sky.extraterrestrial_normal
    )
    low = (sun.elevation > 0.0) & (sun.elevation < 4.9)
    np.testing.assert_allclose(
        split.circumsolar_normal[low], (sky.diffuse_horizontal * f1)[low] / 0.087, rtol=1e-12
    )
    assert (split.isotropic[low] >= (sky.diffuse_horizontal * (1.0 - f1))[low]).all()


def test_low_sun_keeps_the_floor_of_hay_and_davies():
    sun, sky = year()
    split = split_diffuse("hay-davies", sun, sky)
    low = (sun.elevation > 0.0) & (sun.elevation < 0.9)
    assert low.any()
    share = (sky.diffuse_horizontal * sky.beam_normal / sky.extraterrestrial_normal)[low]
    np.testing.assert_allclose(split.circumsolar_normal[low], share / 0.01745, rtol=1e-12)


def test_brightening_never_takes_more_than_the_sky_has():
    """Bin 6 with little diffuse light: the formula gives F1 1.105, and 1 is kept."""
    f1, _ = perez_brightening(90.0, 90.0, 30.0, 1361.0)
    assert f1 == 1.0
    f1, _ = perez_brightening(10.0, 0.0, 10.0, 1361.0)
    assert f1 == 0.0


def test_clear_sky_is_brighter_around_the_sun():
    sun, sky = year()
    noon = sun.elevation > 30.0
    f1, f2 = perez_brightening(
        sun.elevation, sky.beam_normal, sky.diffuse_horizontal, sky.extraterrestrial_normal
    )
    assert 0.2 < np.median(f1[noon]) < 0.7
    assert (np.abs(f2[noon]) < 0.3).all()


def test_overcast_sky_has_no_ring():
    sun, sky = any_weather()
    no_beam = Irradiance(
        np.zeros_like(sky.beam_normal), sky.diffuse_horizontal, sky.extraterrestrial_normal
    )
    ring = split_diffuse("hay-davies", sun, no_beam).circumsolar_normal
    assert not ring.any()


def test_unknown_model():
    sun, sky = any_weather(3)
    with pytest.raises(SettingError, match="perez, hay-davies, isotropic"):
        split_diffuse("klucher", sun, sky)
