"""Parcels on ground whose slope, light and areas are known."""

from __future__ import annotations

from dataclasses import replace

import geopandas
import numpy as np
import pytest
import shapely
from engine.made_parcels import AIR, CELL, LEFT, SCALE, TOP, UTM, asked_for, box, parcels, plane
from pyproj import CRS, Transformer

from terrasol.engine.datasets import scene_of
from terrasol.engine.parcel_cells import pieces_of
from terrasol.engine.parcel_figures import Warmth, season_places
from terrasol.engine.parcel_frame import survey_parcels
from terrasol.engine.parcel_rows import RowSettings, rows_of
from terrasol.engine.parcel_words import figure_names
from terrasol.engine.parcels import survey
from terrasol.errors import InputError, SettingError
from terrasol.ground.elevation import Elevation
from terrasol.practice.season import NORTHERN_SEASON, SOUTHERN_SEASON
from terrasol.practice.temperatures import from_daily, from_monthly
from terrasol.sky.period import parse_period


def test_a_plane_of_twelve_percent_is_all_in_its_class():
    found = survey(plane(12.0, 180.0), parcels(box(-100, -50, 105, 50)), asked_for(coarser=(2,)))
    parcel = found.parcels[0]
    numbers = parcel.numbers
    area = 205 * 100 / 1e4 * SCALE
    # The grid's metre is 0.04 % short there, so 12 % of the grid is 11.995 % of the ground.
    steep = 12.0 * 0.9996
    assert numbers["map_area_ha"] == pytest.approx(area, rel=1e-5)
    assert numbers["slope_10_to_15_percent_ha_map"] == pytest.approx(area, rel=1e-5)
    for name in ("under_5", "5_to_10", "15_to_20", "20_to_30", "from_30"):
        assert numbers[f"slope_{name}_percent_ha_map"] == 0.0
    for name in ("mean", "p10", "p50", "p90"):
        assert numbers[f"slope_{name}_percent"] == pytest.approx(steep, abs=2e-3)
    wider = np.hypot(1.0, steep / 100.0)
    assert numbers["surface_area_ha"] == pytest.approx(area * wider, rel=1e-5)
    assert numbers["aspect_mean_deg"] == pytest.approx(180.0, abs=0.1)
    assert numbers["aspect_resultant"] == pytest.approx(1.0, abs=1e-6)
    assert numbers["aspect_south_ha_map"] == pytest.approx(area, rel=1e-5)
    # Rows 35 to 44; the plane has 500 m in row 40 and rises northwards by 1.2 m a row.
    assert numbers["height_mean_m"] == pytest.approx(500.0 + 1.2 * 0.5, abs=1e-3)
    size, coarse = parcel.coarser[0]
    assert size == pytest.approx(20.0, rel=1e-3)
    by_name = {f.name: f.value for f in coarse}
    assert by_name["map_area_ha"] == pytest.approx(area, rel=1e-5)
    assert by_name["slope_10_to_15_percent_ha_map"] == pytest.approx(area, rel=1e-5)


def test_half_covered_cells_count_half():
    """A strip half a cell wide on the border of two slopes has half of each cell's area."""
    found = survey(plane(12.0, 90.0), parcels(box(0, 0, 5, 40)), asked_for(coarser=()))
    numbers = found.parcels[0].numbers
    assert numbers["map_area_ha"] == pytest.approx(0.02 * SCALE, rel=1e-5)
    assert numbers["slope_10_to_15_percent_ha_map"] == pytest.approx(0.02 * SCALE, rel=1e-5)


def test_level_ground_gets_what_level_ground_gets():
    found = survey(plane(0.0, 0.0), parcels(box(-50, -50, 50, 50)), asked_for(coarser=()))
    numbers = found.parcels[0].numbers
    assert numbers["share_of_level_season"] == pytest.approx(1.0, abs=2e-3)
    assert numbers["share_of_level_m12"] == pytest.approx(1.0, abs=2e-3)
    season = sum(numbers[f"irradiation_m{m:02d}_mj_m2_slope"] for m in range(4, 11))
    assert numbers["irradiation_season_mj_m2_slope"] == pytest.approx(season)
    assert numbers["irradiation_season_mj_m2_d_slope"] == pytest.approx(season / 214)
    assert numbers["sun_hours_season_h"] == pytest.approx(
        numbers["sun_hours_season_level_h"], rel=1e-3
    )
    assert np.isnan(numbers["aspect_mean_deg"])
    assert numbers["aspect_flat_ha_map"] == pytest.approx(numbers["map_area_ha"])
    noon = (numbers["first_sun_m03_h"] + numbers["last_sun_m03_h"]) / 2.0
    assert noon == pytest.approx(12.0, abs=0.02)
    assert numbers["no_sun_share_m12"] == 0.0


@pytest.mark.heavy
def test_south_beats_north_in_the_north_and_loses_in_the_south():
    shape = box(-50, -50, 50, 50)
    south = survey(plane(30.0, 180.0), parcels(shape), asked_for(coarser=())).parcels[0].numbers
    north = survey(plane(30.0, 0.0), parcels(shape), asked_for(coarser=())).parcels[0].numbers
    assert south["share_of_level_season"] > 1.0 > north["share_of_level_season"]
    below = Elevation(
        plane(30.0, 180.0).heights, (CELL, 0, LEFT, 0, -CELL, 4900400.0), CRS("EPSG:32732")
    )
    there = parcels(shapely.affinity.translate(shape, 0.0, 4900400.0 - TOP), crs="EPSG:32732")
    other = survey(below, there, asked_for(season=SOUTHERN_SEASON, coarser=())).parcels[0].numbers
    assert other["share_of_level_season"] < 1.0


def test_the_rule_counts_what_meets_it_and_leaves_out_small_patches():
    """Ground of 10 % with a step of 40 %: two parts of known size, the smaller ignored."""
    base = plane(10.0, 180.0)
    heights = base.heights.copy()
    east = np.arange(80)
    heights[:, east >= 42] += 4.0 * (np.minimum(east[east >= 42], 50) - 41)  # steep from 42 to 50
    ground = Elevation(heights, base.transform, base.crs)
    shape = box(-100, -100, 140, 100)
    whole = asked_for(coarser=(), rule="slope_percent < 15")
    least = asked_for(coarser=(), rule="slope_percent < 15", least_patch=8000.0)
    both, one = (survey(ground, parcels(shape), s).parcels[0].numbers for s in (whole, least))
    assert both["rule_patches"] == 2
    west = 11 * 20 * 100 / 1e4 * SCALE  # columns 30 to 40
    east_part = 3 * 20 * 100 / 1e4 * SCALE  # columns 51 to 53
    assert both["rule_ha_map"] == pytest.approx(west + east_part, rel=1e-4)
    assert one["rule_ha_map"] == pytest.approx(west, rel=1e-4)
    assert one["rule_ignored_ha_map"] == pytest.approx(east_part, rel=1e-4)
    assert one["rule_share"] == pytest.approx(west / (24 * 20 * 100 / 1e4 * SCALE), rel=1e-4)


def hill(crs: str, cell: float, size: int, centre: tuple[float, float]) -> Elevation:
    """One hill of the Earth, seen on the grid of any CRS."""
    x0, y0 = Transformer.from_crs(4326, crs, always_xy=True).transform(*centre)
    row, column = np.indices((size, size))
    x, y = x0 + cell * (column - (size - 1) / 2), y0 - cell * (row - (size - 1) / 2)
    here = f"+proj=aeqd +lon_0={centre[0]} +lat_0={centre[1]} +datum=WGS84"
    east, north = Transformer.from_crs(crs, here, always_xy=True).transform(x, y)
    heights = 400.0 + 150.0 * np.exp(-(east**2 + north**2) / 500.0**2)
    corner = x0 - cell * size / 2, y0 + cell * size / 2
    return Elevation.from_array(heights, (cell, 0, corner[0], 0, -cell, corner[1]), crs)


@pytest.mark.parametrize(
    ("crs", "cell"), [("EPSG:3857", 20.0), ("EPSG:4326", 0.0001), ("EPSG:32633", 10.0)]
)
def test_hectares_are_true_in_any_crs(crs, cell):
    """A square of 200 m at 60 north has 4 ha, though the web map makes it 16."""
    centre = (10.0, 60.0)
    here = f"+proj=aeqd +lon_0={centre[0]} +lat_0={centre[1]} +datum=WGS84"
    back = Transformer.from_crs(here, crs, always_xy=True)
    square = shapely.segmentize(shapely.box(-100, -50, 100, 150), 20.0)
    shape = shapely.transform(square, lambda p: np.column_stack(back.transform(p[:, 0], p[:, 1])))
    ground = hill(crs, cell, 60, centre)
    numbers = survey(ground, parcels(shape, crs=crs), asked_for(coarser=())).parcels[0].numbers
    assert numbers["map_area_ha"] == pytest.approx(4.0, rel=2e-4)
    # The hill's own slope and aspect over the square, by brute force.
    east, north = np.meshgrid(np.arange(-99.5, 100), np.arange(-49.5, 150))
    rise = 150.0 * np.exp(-(east**2 + north**2) / 500.0**2) * 2.0 / 500.0**2
    steep = 100.0 * rise * np.hypot(east, north)
    assert numbers["slope_mean_percent"] == pytest.approx(steep.mean(), rel=0.01)
    within = (steep >= 5.0) & (steep < 10.0)
    assert numbers["slope_5_to_10_percent_ha_map"] == pytest.approx(4.0 * within.mean(), abs=0.06)


def test_outside_void_and_order():
    ground = plane(12.0, 180.0)
    ground.heights[:, :20] = np.nan
    shapes = parcels(box(-50, -50, 50, 50), box(5000, 0, 5100, 50), box(-390, 0, -300, 50))
    found = survey(ground, shapes, asked_for(coarser=(2,), score="-unknown_ha_map"))
    assert [p.name for p in found.parcels] == ["P0", "P2"]
    assert any("'P1' lies outside" in text for text in found.warnings)
    void = found.parcels[1].numbers
    assert void["unknown_ha_map"] == pytest.approx(void["map_area_ha"])
    assert void["known_ha_map"] == 0.0
    assert np.isnan(void["slope_mean_percent"])
    assert np.isnan(void["slope_10_to_15_percent_ha_map"])
    assert [p.name for p in found.order] == ["P0", "P2"]
    with pytest.raises(InputError, match="void ground"):
        survey(ground, parcels(box(-390, 0, -300, 50)), asked_for(coarser=()))


def test_area_is_told_as_drawn_on_the_raster_and_known():
    """6 ha, of which 4 lie on the raster, of which 1 is void: two columns of cells."""
    ground = plane(12.0, 180.0)
    ground.heights[:, 78:] = np.nan
    shapes = parcels(box(320, -250, 440, 250), box(-100, -50, -90, -41))
    found = survey(ground, shapes, asked_for(coarser=()))
    edge, small = (parcel.numbers for parcel in found.parcels)
    told = {"drawn_ha_map": 6.0, "map_area_ha": 4.0, "known_ha_map": 3.0, "unknown_ha_map": 1.0}
    assert {name: edge[name] for name in told} == pytest.approx(
        {name: area * SCALE for name, area in told.items()}, rel=1e-4
    )
    assert small["drawn_ha_map"] == small["map_area_ha"] == small["known_ha_map"]
    (void,) = (text for text in found.warnings if "void ground" in text)
    assert void.startswith("25 % of 'P0' is unknown (void ground)")
    assert "P1" not in void


def test_a_horizon_that_ends_with_the_raster_is_told():
    shapes = parcels(box(-50, -50, 50, 50))
    alone = survey(plane(12.0, 180.0), shapes, asked_for(coarser=()))
    (said,) = alone.warnings
    assert said.startswith("shade of all that stands in the raster, and of nothing beyond it:")
    assert "--far" in said
    assert alone.shade == "Shade of all that stands in the raster, and of nothing beyond it."
    wide = Elevation.from_array(
        np.full((60, 60), 480.0), (40, 0, LEFT - 800, 0, -40, TOP + 800), UTM
    )
    found = survey(
        plane(12.0, 180.0), shapes, asked_for(coarser=()),
        lambda ground, _: scene_of(ground, wide),
    )  # fmt: skip
    assert found.warnings == []
    assert found.shade.endswith("in the raster and in the far model around it.")


def test_score_ranks_and_refuses_what_no_parcel_has():
    ground = plane(12.0, 180.0)
    shapes = parcels(box(-50, -50, 0, 50), box(0, -50, 200, 50))
    found = survey(ground, shapes, asked_for(coarser=(), score="map_area_ha - 1"))
    assert [p.name for p in found.order] == ["P1", "P0"]
    assert found.ranking.rank.tolist() == [2, 1]
    with pytest.raises(SettingError, match="slope_meen_percent"):
        asked_for(score="-slope_meen_percent")


def test_a_rule_or_score_that_cannot_be_told_is_told():
    shapes = parcels(box(-50, -50, 0, 50), box(0, -50, 200, 50))
    asked = asked_for(
        coarser=(), rule="slope_percent / (height_m - height_m) < 3", score="map_area_ha / 0"
    )
    warnings = survey(plane(12.0, 180.0), shapes, asked).warnings
    assert any("the score of 'P0', 'P1' is unknown" in text for text in warnings)
    assert any(
        "the rule is unknown on ground of 'P0' (0.50 ha), 'P1' (2.00 ha)" in text
        for text in warnings
    )
    asked = asked_for(coarser=(), rule="slope_percent < 13", score="map_area_ha")
    assert not any("unknown" in text for text in survey(plane(12.0, 180.0), shapes, asked).warnings)


def test_names_for_a_score_are_those_of_the_figures():
    warmth = Warmth(from_monthly(np.full(12, 15.0), height=500.0, highest=np.full(12, 20.0)))
    settings = asked_for(
        coarser=(), warmth=warmth, rule="slope_deg < 9", rows=RowSettings(2.0, 1.3, 0.4)
    )
    found = survey(plane(12.0, 180.0), parcels(box(0, 0, 50, 50)), settings).parcels[0]
    assert figure_names(settings.asked, days=12, rows=True) == list(found.numbers)


WARM = Warmth(from_monthly(np.full(12, 15.0), height=500.0))
DAYS = np.arange("2023-01-01", "2024-01-01", dtype="M8[D]")


@pytest.mark.parametrize(
    ("asked", "words"),
    [
        ({"score": "rule_share"}, "names rule_share, which needs --rule$"),
        ({"score": "-rows_most_mj_m2_side"}, "which needs --rows$"),
        ({"score": "winkler_mean_c_days"}, "which needs --temperatures$"),
        ({"score": "huglin_mean_c_days"}, "which needs --temperatures$"),
        ({"score": "rule_share * huglin_mean_c_days"}, "names huglin_.* needs --temperatures$"),
        ({"score": "huglin_mean_c_days", "warmth": WARM}, "--temperatures with the highest of"),
        ({"score": "slope_under_15_percent_ha_map"}, "needs other edges of --slope-classes$"),
        ({"score": "rule_sharp"}, "names rule_sharp, which is unknown"),
        ({"rule": "degree_days > 9"}, "names degree_days, which needs --temperatures$"),
        ({"rule": "huglin > 9"}, "names huglin, which needs --temperatures$"),
        ({"rule": "huglin > 9", "warmth": WARM}, "names huglin, which needs .* the highest of"),
        ({"rule": "hugling > 9"}, "names hugling, which is unknown"),
    ],
)
def test_a_word_that_another_option_brings_is_told_apart_from_an_unknown_one(asked, words):
    with pytest.raises(SettingError, match=words):
        asked_for(coarser=(), **asked)


def test_what_only_months_tell_is_not_asked_of_days():
    daily = Warmth(from_daily(DAYS, height=500.0, mean=np.full(DAYS.size, 15.0)))
    with pytest.raises(SettingError, match=r"needs --temperatures by month$"):
        asked_for(warmth=daily, score="winkler_shortfall_c_days")
    asked_for(warmth=WARM, score="winkler_shortfall_c_days")  # and is known with months


def test_results_do_not_depend_on_other_parcels_or_threads():
    ground = plane(20.0, 140.0)
    one = survey(ground, parcels(box(-50, -50, 20, 50)), asked_for(coarser=()), threads=1)
    two = survey(
        ground,
        parcels(box(-50, -50, 20, 50), box(100, 100, 200, 200)),
        asked_for(coarser=()),
        threads=2,
    )
    alone, beside = one.parcels[0].numbers, two.parcels[0].numbers
    assert alone.keys() == beside.keys()
    for name, value in alone.items():
        assert beside[name] == pytest.approx(value, rel=1e-5, nan_ok=True), name


def test_season_of_a_period():
    assert season_places(parse_period(None), SOUTHERN_SEASON) == (9, 10, 11, 0, 1, 2, 3)
    two = parse_period("2023-10/2025-10")
    assert season_places(two, NORTHERN_SEASON) == tuple(range(18, 25))  # the last whole one
    assert season_places(two, SOUTHERN_SEASON) == tuple(range(12, 19))
    with pytest.raises(SettingError, match="no whole growing season, April to October"):
        season_places(parse_period("2025-04-02/2025-10-31"), NORTHERN_SEASON)


def test_first_sun_behind_a_wall_comes_late():
    """East of the parcel stands a wall of 45 degrees: the equinox sun passes it about 10:50."""
    heights = np.zeros((80, 80))
    heights[:, 60:] = 300.0
    ground = Elevation.from_array(heights, (CELL, 0, LEFT, 0, -CELL, TOP), UTM)
    shape = box(-105, -5, -95, 5)  # 300 m before the wall's foot
    numbers = survey(ground, parcels(shape), asked_for(coarser=())).parcels[0].numbers
    open_ground = survey(plane(0.0, 0.0), parcels(shape), asked_for(coarser=())).parcels[0].numbers
    assert numbers["first_sun_m06_h"] > open_ground["first_sun_m06_h"] + 3.0
    assert numbers["last_sun_m06_h"] == pytest.approx(open_ground["last_sun_m06_h"], abs=0.02)
    assert numbers["sun_hours_m06_h"] < open_ground["sun_hours_m06_h"] - 30 * 3.0


def test_pieces_hold_true_areas():
    pieces, _ = pieces_of(
        plane(5.0, 0.0), parcels(box(0, 0, 10, 10)), asked_for().light, None, lambda e, f: _none()
    )
    assert pieces[0].area.sum() == pytest.approx(100.0 * SCALE, rel=1e-5)


def _none():
    from terrasol.engine.job import NO_SCENE

    return NO_SCENE


def test_rows_on_a_plane():
    """Down a south slope both sides are alike by symmetry; across it the right one faces south."""
    settings = asked_for(coarser=(), rows=RowSettings(2.0, 1.3, 0.4))
    parcel = survey(plane(20.0, 180.0), parcels(box(-50, -50, 50, 50)), settings).parcels[0]
    assert parcel.rows.fall_line == pytest.approx(0.0, abs=0.05) or parcel.rows.fall_line > 179.9
    sides = dict(zip(parcel.rows.light.azimuth, parcel.rows.sides, strict=True))
    assert sides[0.0][0] == pytest.approx(sides[0.0][1], rel=0.01)
    assert sides[90.0][0] > 2.0 * sides[90.0][1]
    numbers = parcel.numbers
    assert numbers["rows_even_azimuth_deg"] in (0.0, 175.0, 5.0)
    assert numbers["rows_down_steepest_percent"] == pytest.approx(20.0 * 0.9996, abs=0.01)
    climbed = dict(zip(parcel.rows.light.azimuth, parcel.rows.steepest, strict=True))
    assert climbed[90.0] == pytest.approx(0.0, abs=0.05)
    assert climbed[60.0] == pytest.approx(20.0 * 0.9996 * 0.5, abs=0.05)


@pytest.mark.parametrize("model", ["perez", "hay-davies", "isotropic"])
def test_the_top_of_rows_gets_what_the_slope_gets(model):
    """By another way: cells by tables of the sun, rows by its path."""
    settings = asked_for(coarser=(), rows=RowSettings(2.0, 1.3, 0.4))
    light = replace(settings.light, diffuse=model, albedo=(0.0,) * 12, step_seconds=300.0)
    parcel = survey(
        plane(30.0, 180.0), parcels(box(-50, -50, 50, 50)), replace(settings, light=light)
    ).parcels[0]
    top = parcel.rows.light.total[:, 2]
    assert top == pytest.approx(parcel.numbers["irradiation_season_mj_m2_slope"], rel=5e-3)


def test_half_the_step_moves_no_side_of_a_row():
    from terrasol.engine import parcel_rows

    settings = asked_for(coarser=(), rows=RowSettings(2.0, 1.3, 0.4))
    settings = replace(settings, light=replace(settings.light, step_seconds=300.0))
    parcel = survey(plane(20.0, 140.0), parcels(box(-50, -50, 50, 50)), settings).parcels[0]
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(parcel_rows, "STEP_SECONDS", 300.0)
        finer = parcel_rows.rows_of(
            parcel.piece, parcel.horizon, settings.rows, settings.light, settings.asked
        )
    assert np.allclose(finer.sides, parcel.rows.sides, rtol=1e-3)
    assert not np.array_equal(finer.sides, parcel.rows.sides)  # another step it was


def test_a_dark_canopy_sends_no_light_to_the_other_side():
    settings = asked_for(coarser=(), rows=RowSettings(2.0, 1.3, 0.4))
    parcel = survey(plane(20.0, 140.0), parcels(box(-50, -50, 50, 50)), settings).parcels[0]
    dark = rows_of(
        parcel.piece, parcel.horizon, RowSettings(2.0, 1.3, 0.4, 0.0), settings.light,
        settings.asked,
    )  # fmt: skip
    assert (dark.sides < parcel.rows.sides).all()
    assert np.array_equal(dark.light.diffuse, parcel.rows.light.diffuse)
    with pytest.raises(SettingError, match="canopy albedo 1 is outside"):
        RowSettings(2.0, 1.3, 0.4, 1.0)


def test_degree_days_fall_with_height():
    """Twelve means of 15 degrees at 500 m: 214 days of 5 K, less 0.65 K a hundred metres."""
    warmth = Warmth(from_monthly(np.full(12, 15.0), height=500.0, highest=np.full(12, 20.0)))
    settings = asked_for(coarser=(), warmth=warmth, rule="degree_days >= 1070")
    parcel = survey(plane(12.0, 180.0), parcels(box(-100, -100, 100, 100)), settings).parcels[0]
    numbers, height = parcel.numbers, parcel.numbers["height_mean_m"]
    expected = 214 * (5.0 - 6.5e-3 * (height - 500.0))
    assert numbers["winkler_mean_c_days"] == pytest.approx(expected, rel=1e-4)
    low = 214 * (5.0 - 6.5e-3 * (numbers["height_greatest_m"] - 500.0))
    assert numbers["winkler_least_c_days"] == pytest.approx(low, rel=1e-4)
    effect = 214 * -1e-3 * (height - 500.0)
    assert numbers["winkler_lapse_effect_c_days"] == pytest.approx(effect, rel=1e-3, abs=0.1)
    classes = {f.name: f.value for f in parcel.figures}
    assert classes["winkler_class"] == "Ia"
    assert numbers["winkler_shortfall_c_days"] > 0.0
    # Half of the plane lies below 500 m, where it is warm enough: rows 41 to 49 of 30 to 49.
    assert numbers["rule_share"] == pytest.approx(10 / 20, abs=0.051)
    # Huglin at 46.05 north: 1.05 (183 days) ((15 - 10) + (20 - 10)) / 2 at the station's height.
    factor = numbers["huglin_mean_c_days"] / (183 * (7.5 - 6.5e-3 * (height - 500.0)))
    assert factor == pytest.approx(1.05, abs=1e-3)


def test_a_station_far_above_is_doubted():
    """900 m above: 1 K/km is 0.9 K, over 214 days 193 degree-days."""
    far = Warmth(from_monthly(np.full(12, 12.0), height=1400.0))
    found = survey(plane(1.0, 180.0), parcels(box(0, 0, 50, 50)), asked_for(coarser=(), warmth=far))
    assert any("degree-days by up to 19" in text for text in found.warnings)
    assert "huglin_mean_c_days" not in found.parcels[0].numbers  # no daily highest was given


def test_python_gives_a_table_with_outlines():
    ground, shape = plane(12.0, 180.0), box(-50, -50, 50, 50)
    given = geopandas.GeoDataFrame({"block": ["x"]}, geometry=[shape], crs=UTM)
    found = survey_parcels(
        ground, given.to_crs(4326), "2025", AIR,
        rule="slope_percent < 15", score="rule_ha_map", rows=(2.0, 1.3, 0.4),
        temperatures=from_monthly(np.full(12, 15.0), height=500.0), season="05-06",
        azimuths=16, step_seconds=300.0, threads=1,
    )  # fmt: skip
    row = found.iloc[0]
    assert row["parcel"] == "x"
    assert row["rank"] == 1
    assert row["rule_ha_map"] == pytest.approx(1.0 * SCALE, rel=1e-4)
    assert row["irradiation_season_mj_m2_slope"] == pytest.approx(
        row["irradiation_2025_05_mj_m2_slope"] + row["irradiation_2025_06_mj_m2_slope"]
    )
    assert found.crs == UTM
    assert set(found.columns) - {"geometry"} <= set(found.attrs["columns"])
    assert found.geometry.iloc[0].area == pytest.approx(1e4, rel=1e-4)
    with pytest.raises(InputError, match="GeoDataFrame, not list"):
        survey_parcels(ground, [shape])


def test_parcels_of_few_cells_are_doubted():
    shapes = parcels(box(0, 0, 25, 25), box(50, 0, 90, 40))  # 6 and 16 cells
    found = survey(plane(12.0, 180.0), shapes, asked_for(coarser=()))
    doubts = [text for text in found.warnings if "few cells" in text]
    assert len(doubts) == 1
    assert "'P0' (6.2)" in doubts[0]
    assert "P1" not in doubts[0]


def test_parcels_that_overlap_are_told_with_the_ground_they_share():
    shapes = parcels(box(-100, -50, 0, 50), box(-40, -50, 100, 50))
    found = survey(plane(12.0, 180.0), shapes, asked_for(coarser=()))
    assert any("'P0' with 'P1' (0.40 ha)" in text for text in found.warnings)
    areas = [parcel.numbers["map_area_ha"] for parcel in found.parcels]
    assert sum(areas) == pytest.approx(2.4 * SCALE, rel=1e-4)  # of 2 ha of ground
