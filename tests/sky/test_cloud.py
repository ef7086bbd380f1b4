"""Clouded skies: what was measured comes back, and is carried to other heights and slopes."""

import numpy as np
import pytest

from terrasol.errors import InputError, SettingError
from terrasol.files.rasters import naming
from terrasol.sky.clear import Air
from terrasol.sky.cloud import MonthlySky, clouded_sky, monthly_diffuse_fraction
from terrasol.sky.period import parse_period
from terrasol.sky.station import Station
from terrasol.sky.sun import sun_path, sun_series
from terrasol.sky.suntable import sun_table

AIR = Air.ineichen(3.0)
PLACE = (46.0, 9.3, 800.0)


def days(period, step=60.0, place=PLACE):
    """Period, and the sun over the place."""
    period = parse_period(period)
    return period, sun_series(sun_path(period, place[1], step), place[0], place[2])


def means(sun, flux, start, seconds=3600):
    """Mean of a flux over intervals."""
    since = (sun.time - start[0].astype("M8[ns]")).astype(np.int64) // (seconds * 10**9)
    return np.bincount(since, weights=flux, minlength=start.size) * sun.step_seconds / seconds


def sine(sun):
    return np.maximum(np.sin(np.radians(sun.elevation)), 0.0)


def measured(period="2025-04-08/2025-04-12", seed=3, seconds=3600, names=("global", "beam")):
    """A series under made-up clouds: each interval its own share of the clear beam and dome."""
    which, sun = days(period)
    first = which.start - np.timedelta64(1, "D")
    last = which.end + np.timedelta64(1, "D")
    start = np.arange(first, last, np.timedelta64(seconds, "s"))
    light = AIR.over(sun, PLACE[2])
    dice = np.random.default_rng(seed)
    thin, dim = dice.uniform(0.0, 1.05, start.size), dice.uniform(0.3, 1.6, start.size)
    beam = thin * means(sun, light.beam_normal, start, seconds)
    direct = thin * means(sun, light.beam_normal * sine(sun), start, seconds)
    diffuse = dim * means(sun, light.diffuse_horizontal, start, seconds)
    values = {"global": direct + diffuse, "beam": beam, "diffuse": diffuse}
    values = {name: values[name] for name in names}
    return Station("made up", *PLACE, start.astype("M8[s]"), seconds, values), which, sun, direct


@pytest.mark.parametrize("names", [("global", "beam"), ("global", "diffuse"), ("beam", "diffuse")])
@pytest.mark.parametrize("seconds", [600, 3600])
def test_what_was_measured_comes_back_interval_by_interval(names, seconds):
    station, period, sun, direct = measured(names=names, seconds=seconds)
    whole = measured(seconds=seconds)[0].values["global"]
    sky = clouded_sky(station, AIR, period).over(sun, PLACE[2])
    level = sky.beam_normal * sine(sun) + sky.diffuse_horizontal
    np.testing.assert_allclose(means(sun, level, station.start, seconds), whole, atol=1e-9)
    back = means(sun, sky.beam_normal * sine(sun), station.start, seconds)
    np.testing.assert_allclose(back, direct, atol=1e-9)
    assert (sky.beam_normal >= 0.0).all()
    assert (sky.diffuse_horizontal >= -1e-12).all()


@pytest.mark.parametrize("model", ["erbs", "disc", "dirint"])
def test_global_alone_comes_back_and_is_parted(model):
    station, period, sun, direct = measured(names=("global",))
    sky = clouded_sky(station, AIR, period, model).over(sun, PLACE[2])
    level = sky.beam_normal * sine(sun) + sky.diffuse_horizontal
    back = means(sun, level, station.start)
    np.testing.assert_allclose(back, station.values["global"], atol=1e-9)
    found = means(sun, sky.beam_normal * sine(sun), station.start)
    assert (found <= back + 1e-9).all()
    # Parting global light leaves a scatter of tens of W/m2, but must know bright from dull.
    day = back > 50.0
    assert np.corrcoef(found[day], direct[day])[0, 1] > 0.8


def test_light_beyond_any_clear_sky_is_kept_as_light_of_the_dome():
    station, period, sun, _ = measured()
    dawn = int(np.flatnonzero(station.values["global"] > 0.0)[0])
    station.values["global"][dawn] = 40.0  # where the clear sky sends next to nothing
    sky = clouded_sky(station, AIR, period).over(sun, PLACE[2])
    level = sky.beam_normal * sine(sun) + sky.diffuse_horizontal
    assert means(sun, level, station.start)[dawn] == pytest.approx(40.0, abs=1e-9)


def test_light_measured_at_night_is_left_out_and_told():
    station, period, *_ = measured()
    dark = int(np.flatnonzero(station.values["global"] == 0.0)[2])
    station.values["global"][dark] = 2.0
    assert clouded_sky(station, AIR, period).left_out == pytest.approx(2.0 * 3600e-6)
    station.values["global"][dark] = -3.0  # a cooled radiometer
    assert clouded_sky(station, AIR, period).left_out == 0.0


def test_a_gap_under_the_sun_is_refused_with_its_hours_and_first_moment():
    station, period, sun, _ = measured()
    noon = int(np.argmax(station.values["global"]))
    station.values["beam"][noon : noon + 2] = np.nan
    sky = clouded_sky(station, AIR, period)
    first = str(station.start[noon].astype("M8[m]"))
    words = f"^{station.name}: .*2.0 hours of sun.*{first}"
    with pytest.raises(InputError, match=words) as told, naming("dem.tif"):
        sky.over(sun, PLACE[2])
    assert told.value.file == station.name  # and the ground is not to blame
    _, later = days("2025-04-12/2025-04-14")
    with pytest.raises(InputError, match="hours of sun"):
        clouded_sky(measured()[0], AIR, period).over(later, PLACE[2])
    with pytest.raises(InputError, match="nothing in the period"):
        clouded_sky(station, AIR, parse_period("2024-04"))


def test_indices_are_carried_to_other_heights():
    station, period, sun, _ = measured()
    sky = clouded_sky(station, AIR, period)
    high, clear = sky.over(sun, 3000.0), AIR.over(sun, 3000.0)
    low, clear_low = sky.over(sun, PLACE[2]), AIR.over(sun, PLACE[2])
    lit = (sun.elevation > 15.0) & (low.beam_normal > 1.0) & (high.diffuse_horizontal > 1.0)
    thin = low.beam_normal[lit] / clear_low.beam_normal[lit]
    np.testing.assert_allclose(high.beam_normal[lit] / clear.beam_normal[lit], thin, rtol=1e-9)
    assert high.beam_normal[lit].sum() > 1.05 * low.beam_normal[lit].sum()


def test_a_morning_of_fog_stays_in_the_east():
    """Slopes facing east and west part when mornings are dull; the noon sum cannot tell."""
    station, period, *_ = measured()
    light = clouded_sky(station, AIR, period)
    path = sun_path(period, PLACE[1], 60.0)
    light.beam_index[:] = 1.0
    local = (light.start.astype("M8[h]").astype(np.int64) + 0.62) % 24
    light.beam_index[local < 12] = 0.2
    light.global_index[:] = 1.0
    table = sun_table(path, PLACE[0], np.array([700.0, 900.0]), light, "isotropic", 16)
    walls = table.direct[0, 0, :, 0, 0, :1].sum(axis=1)
    east, west = walls[1:8].sum(), walls[9:16].sum()
    assert east < 0.35 * west


@pytest.mark.parametrize("diffuse", ["perez", "hay-davies", "isotropic"])
def test_the_table_of_a_measured_sky_returns_the_stations_energy(diffuse):
    station, period, *_ = measured()
    sky = clouded_sky(station, AIR, period)
    path = sun_path(period, PLACE[1], 60.0)
    table = sun_table(path, PLACE[0], np.array([PLACE[2], 1000.0]), sky, diffuse, 16)
    inside = (station.start >= period.start) & (station.start < period.end)
    want = station.values["global"][inside].sum() * 3600e-6
    assert table.level[0].sum() == pytest.approx(want, rel=2e-3)  # days begin at local midnight
    direct = table.direct[0, 0, :, 0, 1, :1].sum(dtype=np.float64)
    assert direct + table.isotropic[0].sum() == pytest.approx(table.level[0].sum(), rel=1e-4)


@pytest.mark.parametrize("index", [0.4, 0.7, 1.0])
def test_monthly_index_scales_each_month(index):
    period, sun = days("2025", step=600.0)
    indices = tuple(index + 0.01 * np.arange(12))
    sky, clear = MonthlySky(AIR, indices).over(sun, 500.0), AIR.over(sun, 500.0)
    got = np.bincount(sun.month, weights=sky.beam_normal * sine(sun) + sky.diffuse_horizontal)
    bare = np.bincount(sun.month, weights=clear.beam_normal * sine(sun) + clear.diffuse_horizontal)
    np.testing.assert_allclose(got / bare, indices, rtol=1e-9)
    assert len(period.months) == got.size


def test_monthly_beam_follows_the_published_diffuse_fraction():
    """Erbs et al. (1982), as printed in Duffie and Beckman (2013), eq. 2.12.1."""
    period, sun = days("2025-06", step=600.0)
    sky = MonthlySky(AIR, (0.6,) * 12).over(sun, 500.0)
    level = (sky.beam_normal * sine(sun)).sum() + sky.diffuse_horizontal.sum()
    kt = level / (sky.extraterrestrial_normal * sine(sun)).sum()
    fraction = sky.diffuse_horizontal.sum() / level
    want = 1.311 - 3.022 * kt + 3.427 * kt**2 - 1.821 * kt**3
    assert fraction == pytest.approx(want, rel=1e-9)
    winter = 1.391 - 3.560 * kt + 4.189 * kt**2 - 2.137 * kt**3
    assert monthly_diffuse_fraction(np.array([kt]), np.array([70.0]))[0] == pytest.approx(winter)
    assert period.days == 30


def test_what_is_no_index_is_refused():
    for wrong in ((0.5,) * 11, (0.5,) * 11 + (60.0,), (0.0,) * 12, (float("nan"),) * 12):
        with pytest.raises(SettingError, match="index"):
            MonthlySky(AIR, wrong)


def test_settings_that_cannot_be_met_are_refused():
    station, period, *_ = measured(names=("beam",))
    with pytest.raises(InputError, match="measured beam; needed is global"):
        clouded_sky(station, AIR, period)
    with pytest.raises(SettingError, match="decomposition 'reindl' is not one of"):
        clouded_sky(station, AIR, period, "reindl")
    with pytest.raises(SettingError, match="step"):
        clouded_sky(measured(seconds=600)[0], AIR, period, step_seconds=1800.0)
