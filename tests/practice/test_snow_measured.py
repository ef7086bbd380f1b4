"""Snow water of Col de Porte, winter 2005-06, at one cell: before fitting and after.

Morin et al. (2012), doi:10.1594/PANGAEA.774249, CC-BY-3.0, read in place and never kept. Used to
9 June 2006: from 10 June on the weather is an analysis. `pytest -s` prints the table that
docs/validation.md holds.
"""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import terrasol
from terrasol.files.tables import read_station
from terrasol.practice.snow import SnowModel
from terrasol.practice.snow_point import agreement, fit_snow, point_snow
from terrasol.practice.snow_weather import hourly_weather, level_light, measured_light
from terrasol.sky.potential import PotentialBeam
from terrasol.sky.warmth import too_warm

SHARED = Path(terrasol.__file__).resolve().parents[2] / "shared"
FOLDER = SHARED / "data/coldeporte"
FIRST, LAST = np.datetime64("2005-10-01"), np.datetime64("2006-06-09")

pytestmark = [
    pytest.mark.heavy,
    pytest.mark.skipif(not FOLDER.is_dir(), reason="no measured data beside"),
]


def station_of(column):
    """The weather, with one of the two kinds of precipitation."""
    return read_station(
        FOLDER / "met_CdP_0506.txt", name="Col de Porte", latitude=45.30, longitude=5.77,
        height=1325.0, zone="UTC", label="end", year=1, month=2, day=3, hour=4,
        columns={
            "global": {"column": 5, "unit": "W/m2"},
            "temperature": {"column": 9, "unit": "K"},
            "precipitation": {"column": column, "unit": "kg/m2/s"},
        },
    )  # fmt: skip


@pytest.fixture(scope="module")
def winter():
    """Weather, global light, potential beam, observed snow water and albedo, by day."""
    snow, rain = station_of(7), station_of(8)
    both = snow.values["precipitation"] + rain.values["precipitation"]
    station = replace(snow, values={**snow.values, "precipitation": both})
    dates = np.arange(FIRST, LAST + 1)
    edges = np.arange(FIRST, LAST + 2).astype("M8[s]")
    months = dates.astype("M8[M]").astype(np.int64) % 12
    weather = hourly_weather(station, edges, months).weather
    rows = np.loadtxt(FOLDER / "obs_CdP_0506.txt")
    day = [np.datetime64(f"{int(y)}-{int(m):02d}-{int(d):02d}") for y, m, d in rows[:, :3]]
    seen = dict(zip(day, rows[:, [3, 6]], strict=True))
    found = np.array([seen.get(date, (-99.0, -99.0)) for date in dates])
    albedo, water = np.where(found > -90.0, found, np.nan).T
    known = np.flatnonzero(np.isfinite(albedo))
    measured = np.interp(np.arange(dates.size), known, albedo[known])
    light = measured_light(station, edges), level_light(station, PotentialBeam(), edges)
    return replace(weather, albedo=measured), *light, water, albedo


def runs(winter):
    weather, measured, potential, observed, albedo = winter
    for melt in ("enhanced", "hock", "degree-days"):
        for snow_albedo in ("brock", "usace", "station"):
            if melt != "enhanced" and snow_albedo != "brock":
                continue
            light = potential if melt == "hock" else measured
            yield SnowModel(melt, snow_albedo), weather, light, observed, albedo


def told(words, found):
    r = found.record()
    print(
        f"| {words} | {r['peak_mm']:.0f} | {r['peak_day']} | {r['melt_out']} |"
        f" {r['efficiency']:.3f} | {r['rmse_mm']:.0f} | {r['bias_mm']:+.0f} |"
    )


def test_before_and_after_fitting(winter):
    after = {}
    for model, weather, light, observed, albedo in runs(winter):
        point = point_snow(model, weather, light)
        before = agreement(point.water, observed, weather.edges)
        told(f"{model.melt}, {model.albedo}, as it is", before)
        deep = (observed > 50.0) & (point.water > 50.0) & np.isfinite(albedo)
        if model.albedo != "station":
            off = (point.albedo - albedo)[deep]
            print(f"albedo: bias {off.mean():+.3f}, rms {np.sqrt((off**2).mean()):.3f}")
        fit = fit_snow(model, weather, light, observed)
        after[model.melt, model.albedo] = fit.after.efficiency
        told(f"{model.melt}, {model.albedo}, fitted {fit.record()['fitted']}", fit.after)
        print(f"at bound: {fit.at_bound}")
        for part in fit.split:
            print(f"fitted on {part['fitted_on']}: {part['fitted']}, {part['judged']}")
        assert fit.after.observed_peak == 440.0
        assert fit.after.observed_melt_out == "2006-04-28"
        assert fit.after.rmse <= before.rmse
    assert after["enhanced", "brock"] > 0.95
    assert after["degree-days", "brock"] > 0.95


@pytest.mark.parametrize("melt", ["enhanced", "hock", "degree-days"])
def test_with_and_without_a_heat_deficit(winter, melt):
    weather, measured, potential, observed, _ = winter
    light = potential if melt == "hock" else measured
    found = {}
    for cold in (0.0, 0.6):
        model = SnowModel(melt, changed={"deficit_factor": cold})
        point = point_snow(model, weather, light)
        found[cold] = agreement(point.water, observed, weather.edges)
        told(f"{melt}, deficit_factor {cold}, refrozen {point.moved[:, 4].sum():.0f}", found[cold])
        if cold:
            fit = fit_snow(model, weather, light, observed)
            told(f"fitted {fit.record()['fitted']} {fit.at_bound}", fit.after)
            assert fit.after.efficiency > 0.95
    assert found[0.6].efficiency > found[0.0].efficiency + 0.1
    assert found[0.0].melt_out < found[0.6].melt_out < "2006-04-28"  # later, and still early


def test_its_air_is_believed_and_not_in_fahrenheit():
    station = station_of(7)
    assert too_warm(station) is None
    warm = {"temperature": station.values["temperature"] * 1.8 + 32.0}
    assert too_warm(replace(station, values=warm)).in_fahrenheit


def test_two_numbers_at_a_time(winter):
    weather, measured, _, observed, _ = winter
    for names in (("temperature_factor", "radiation_factor", "snow_factor"),
                  ("temperature_factor", "snow_factor"), ("temperature_factor", "radiation_factor"),
                  ("temperature_factor", "rain_snow_middle")):  # fmt: skip
        fit = fit_snow(SnowModel(), weather, measured, observed, names)
        told(f"enhanced, brock, fitted {fit.record()['fitted']} {fit.at_bound}", fit.after)
        assert fit.after.efficiency > fit.before.efficiency
