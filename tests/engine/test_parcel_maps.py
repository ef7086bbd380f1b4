"""Parcels under mapped albedo and clear-sky index."""

from __future__ import annotations

from dataclasses import replace

import geopandas
import numpy as np
import pytest
from engine.made_parcels import AIR, UTM, asked_for, box, parcels, plane

from terrasol.engine.parcel_frame import survey_parcels
from terrasol.engine.parcel_rows import RowSettings
from terrasol.engine.parcels import survey
from terrasol.errors import SettingError
from terrasol.ground.uncertainty import DemError
from terrasol.sky.cloud import MonthlySky

GROUND = plane(30.0, 180.0)
ROWS = RowSettings(2.0, 1.3, 0.4)
LEFT, RIGHT = box(-300, -60, -100, 60), box(100, -60, 300, 60)


def settings_with(rows=ROWS, coarser=(2,), error=None, **light):
    settings = asked_for(coarser=coarser, rows=rows, error=error)
    return replace(settings, light=replace(settings.light, **light))


def even(value, layers=1):
    return np.full((layers, 80, 80), value, np.float32)


@pytest.mark.parametrize(
    ("mapped", "plain"),
    [
        ({"albedo_map": even(0.4)}, {"albedo": (0.4,) * 12}),
        ({"index_map": even(0.6, 12)}, {"sky": MonthlySky(AIR, (0.6,) * 12)}),
    ],
)
def test_an_even_map_is_the_number(mapped, plain):
    """Also in coarser cells, on vine rows, and of level ground; maps are single precision."""
    one = survey(GROUND, parcels(RIGHT), settings_with(**mapped)).parcels[0]
    other = survey(GROUND, parcels(RIGHT), settings_with(**plain)).parcels[0]
    assert one.numbers == pytest.approx(other.numbers, rel=2e-4, nan_ok=True)
    for (_, coarse), (_, same) in zip(one.coarser, other.coarser, strict=True):
        told = [{f.name: f.value for f in fs if f.unit == "MJ m-2"} for fs in (coarse, same)]
        assert told[0] == pytest.approx(told[1], rel=2e-4)


def test_each_parcel_has_the_level_ground_of_its_own_clouds():
    """Global light of level ground is linear in the index: 0.5 in the west, 0.9 in the east."""
    index = even(0.5)
    index[:, :, 40:] = 0.9
    found = survey(GROUND, parcels(LEFT, RIGHT), settings_with(None, (), index_map=index)).parcels
    clear = survey(GROUND, parcels(LEFT, RIGHT), settings_with(None, ())).parcels
    name = "irradiation_season_level_mj_m2"
    for cloudy, bare, value in zip(found, clear, (0.5, 0.9), strict=True):
        assert cloudy.numbers[name] == pytest.approx(value * bare.numbers[name], rel=2e-3)
        assert 1.0 < cloudy.numbers["share_of_level_season"] < bare.numbers["share_of_level_season"]


def test_where_the_index_is_void_nothing_is_told_of_light():
    index = even(0.7)
    index[:, :, :40] = np.nan
    west, east = survey(GROUND, parcels(LEFT, RIGHT), settings_with(index_map=index)).parcels
    assert np.isnan(west.numbers["share_of_level_season"])
    assert west.rows is None
    assert west.numbers["slope_mean_percent"] == pytest.approx(30.0, abs=0.1)
    assert np.isfinite(east.numbers["share_of_level_season"])
    assert east.rows is not None


def test_the_rows_ground_is_as_bright_as_the_parcel_s():
    """Half of the parcel snow-white, half dark: as with the mean of both, and unlike either."""
    albedo = even(0.1)
    albedo[:, :, 60:] = 0.5
    mean = 0.3
    name = "rows_even_mj_m2_side"
    told = [
        survey(GROUND, parcels(RIGHT), settings_with(coarser=(), **light)).parcels[0].numbers[name]
        for light in ({"albedo_map": albedo}, {"albedo": (mean,) * 12}, {"albedo": (0.1,) * 12})
    ]
    assert told[0] == pytest.approx(told[1], rel=1e-4)
    assert told[2] < 0.99 * told[0]


@pytest.mark.heavy
def test_maps_are_taken_from_python_too():
    """As the command has them: the same figures as with the settings themselves."""
    table = geopandas.GeoDataFrame({"name": ["P0"]}, geometry=[RIGHT], crs=UTM)
    maps = {"albedo_map": even(0.4), "index_map": even(0.6)}
    quick = {"azimuths": 16, "step_seconds": 900.0}
    mapped = survey_parcels(GROUND, table, air=AIR, **maps, **quick)
    plain = survey_parcels(
        GROUND, table, air=AIR, albedo=0.4, sky=MonthlySky(AIR, (0.6,) * 12), **quick
    )
    bare = survey_parcels(GROUND, table, air=AIR, **quick)
    name = "irradiation_season_mj_m2_slope"
    assert mapped[name][0] == pytest.approx(plain[name][0], rel=2e-4)
    assert mapped[name][0] < 0.75 * bare[name][0]
    with pytest.raises(SettingError, match="the albedo map must have the shape"):
        survey_parcels(GROUND, table, air=AIR, albedo_map=np.full((1, 3, 3), 0.4), **quick)


def test_standard_errors_come_under_maps_too():
    settings = settings_with(
        None, (), DemError(0.2, 0.0, 2), albedo_map=even(0.3), index_map=even(0.7)
    )
    doubts = survey(GROUND, parcels(RIGHT), settings).parcels[0].doubts
    assert doubts["share_of_level_season"].standard_error > 0.0
