"""Predictors of plots: planes in closed form, maps cell by cell, any CRS, both hemispheres."""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from pyproj import CRS, Transformer

import terrasol
from terrasol import Air, Elevation, InputError, SettingError, parse_period
from terrasol.engine.plot_correlations import response_values
from terrasol.engine.plot_horizons import horizon_table, plot_horizons
from terrasol.engine.plot_places import locate
from terrasol.engine.plot_settings import PlotSettings
from terrasol.engine.plot_table import grain_tags, long_form
from terrasol.engine.plots import column_count, plot_table
from terrasol.files.points import Points
from terrasol.ground.grain import coarsened
from terrasol.ground.places import coordinates
from terrasol.light.days import parse_clock, parse_days
from terrasol.light.hours import HoursSettings
from terrasol.light.settings import LightSettings
from terrasol.practice import heat_load

WHOLE = ("height", "slope", "aspect", "transforms", "heat_load", "sky_view", "irradiation")


def settings(period=None, **more):
    chosen = parse_period(period)
    air = Air.ineichen(3.0)
    light = LightSettings(
        chosen, air, azimuths=16, step_seconds=1800.0, monthly_parts=True, photons_per_joule=2.3
    )
    days = parse_days(None, chosen)
    hours = HoursSettings(chosen, air, days, parse_clock("solar"), azimuths=16, step_seconds=1800.0)
    return PlotSettings(light, hours, **more)


def at_cells(elevation, rows, columns, error=np.nan, crs=None):
    """Plots at places of the grid, in its CRS or in another."""
    rows, columns = np.asarray(rows, float), np.asarray(columns, float)
    x, y = coordinates(elevation, rows, columns)
    if crs is not None:
        x, y = Transformer.from_crs(elevation.crs, crs, always_xy=True).transform(x, y)
    names = tuple(f"P{k}" for k in range(rows.size))
    errors = np.broadcast_to(error, rows.shape).astype(float)
    return Points(names, x, y, CRS.from_user_input(crs or elevation.crs), errors)


def plane(metric_ground, slope, aspect, latitude, size=40):
    """Ground of one slope and aspect, without a horizon."""
    row, column = np.indices((size, size), dtype=float)
    east, north = 20.0 * (column - size / 2), -20.0 * (row - size / 2)
    toward = np.radians(aspect)
    rise = -np.tan(np.radians(slope)) * (east * np.sin(toward) + north * np.cos(toward))
    return metric_ground(500.0 + rise, 20.0, latitude)


@pytest.fixture(scope="module")
def hills(metric_ground):
    """Broken ground over three blocks, with a void."""
    y, x = np.mgrid[0:70, 0:300].astype(float)
    heights = 900.0 + 60.0 * np.sin(x / 5.0 + y / 11.0) * np.cos(y / 6.0) + 1.5 * x
    heights[30:33, 200:204] = np.nan
    return metric_ground(heights, (20.0, 25.0), 46.0)


PLACES = [20.3, 33.0, 44.6, 28.9], [254.7, 256.2, 120.0, 197.8]
"""Rows and columns of plots: beside the edge of a block, in it, far from it, near the void."""


@pytest.fixture(scope="module")
def table(hills):
    points = at_cells(hills, *PLACES, error=[0.0, 12.0, 30.0, np.nan])
    return plot_table(hills, points, settings(radii=(30.0, 90.0), factors=(1, 3)))


@pytest.fixture(scope="module")
def maps(hills):
    """The same quantities as whole maps."""
    kept = {"azimuths": 16, "step_seconds": 1800.0, "threads": 1}
    light = terrasol.irradiation(
        hills, None, Air.ineichen(3.0), monthly_parts=True, photons_per_joule=2.3, **kept
    )
    days = "2025-03-21,2025-10-21"  # walking all twelve would take most of this file's time
    hours = terrasol.sun_hours(hills, None, Air.ineichen(3.0), days=days, **kept)
    aspect = np.radians(light.aspect.values)
    return {
        "height_m": hills.heights,
        "slope_deg": light.slope.values,
        "northness": np.cos(aspect),
        "sky_view": light.sky_view.values,
        "irradiation_year_global_mj_m2_slope": light.irradiation_year.values[0],
        "irradiation_year_reflected_mj_m2_slope": light.irradiation_year.values[3],
        "irradiation_season_beam_mj_m2_slope": light.beam_months.values[3:10].sum(axis=0),
        "irradiation_dec_diffuse_mj_m2_slope": light.diffuse_months.values[11],
        "photosynthetic_jun_mol_m2_d_slope": light.photosynthetic_months.values[5],
        "sun_season_h": hours.sun_hours_months.values[3:10].sum(axis=0),
        "sun_feb_h": hours.sun_hours_months.values[1],
        "first_sun_mar_h": hours.first_sun.values[0],
        "last_sun_oct_h": hours.last_sun.values[1],
    }


def test_the_cell_says_what_the_map_says(table, maps):
    rows, columns = (np.floor(np.array(v) + 0.5).astype(int) for v in PLACES)
    for name, plane in maps.items():
        np.testing.assert_allclose(table.frame[name], plane[rows, columns], rtol=2e-6, err_msg=name)


def test_at_the_point_it_is_bilinear(table, maps):
    for k, (row, column) in enumerate(zip(*PLACES, strict=True)):
        top, left = int(row), int(column)
        down, right = row - top, column - left
        for name, plane in maps.items():
            square = plane[top : top + 2, left : left + 2].astype(float)
            weight = np.outer([1 - down, down], [1 - right, right])
            known = np.isfinite(square) & (weight > 1e-12)
            expected = (weight[known] * square[known]).sum() / weight[known].sum()
            found = table.frame[f"{name}_point"][k]
            assert found == pytest.approx(expected, rel=2e-6), (name, k)


@pytest.mark.parametrize("radius", [30, 90])
def test_circles_against_counting_places(table, maps, radius):
    """Each cell is 20 m by 25 m and north is true: places every 0.5 m, counted one by one."""
    step = np.arange(-radius + 0.25, radius, 0.5)
    east, north = (v.ravel() for v in np.meshgrid(step, step))
    inside = east**2 + north**2 <= radius**2
    for k, (row, column) in enumerate(zip(*PLACES, strict=True)):
        r = np.floor(row - north[inside] / 25.0 + 0.5).astype(int)
        c = np.floor(column + east[inside] / 20.0 + 0.5).astype(int)
        for name, plane in maps.items():
            values = plane[r, c].astype(float)
            known = values[np.isfinite(values)]
            spread = np.ptp(known)
            ending = f"_r{radius}"
            found = [table.frame[f"{name}{ending}_{s}"][k] for s in ("mean", "min", "max")]
            # A cell's share is counted to a 256th: under 1 % of the range of values.
            assert found[0] == pytest.approx(known.mean(), abs=0.01 * spread + 1e-6), (name, k)
            # 20 of the places a cell are one part in a hundred: surely not overlooked.
            cells, places = np.unique(r * 300 + c, return_counts=True)
            sure = plane.ravel()[cells[places > 20]].astype(float)
            assert known.min() - 1e-3 <= found[1] <= np.nanmin(sure) + 1e-3, (name, k)
            assert np.nanmax(sure) - 1e-3 <= found[2] <= known.max() + 1e-3, (name, k)
        share = np.isfinite(hills_heights(maps)[r, c]).mean()
        assert table.frame[f"known_r{radius}"][k] == pytest.approx(share, abs=0.01)


def hills_heights(maps):
    return maps["height_m"]


def test_means_of_aspect_are_those_of_vectors(table):
    frame = table.frame
    east, north = frame["eastness_r90_mean"], frame["northness_r90_mean"]
    np.testing.assert_allclose(
        frame["aspect_deg_r90_mean"], np.degrees(np.arctan2(east, north)) % 360
    )
    np.testing.assert_allclose(frame["aspect_r90_resultant"], np.hypot(east, north))
    assert (frame["aspect_r90_resultant"] <= 1.0).all()
    assert not [c for c in frame if c.startswith("aspect_deg") and ("min" in c or "gps" in c)]


def test_spread_by_error(table, maps):
    """The first plot has no error, the last none known."""
    spread = table.frame["height_m_gps_sd"]
    assert spread[0] == 0.0
    assert np.isnan(spread[3])
    rng = np.random.default_rng(1)
    row, column = (v[2] for v in PLACES)
    east, north = rng.normal(0.0, 30.0 / np.sqrt(2.0), (2, 200_000))
    r = np.floor(row - north / 25.0 + 0.5).astype(int)
    c = np.floor(column + east / 20.0 + 0.5).astype(int)
    for name in ("height_m", "slope_deg", "irradiation_year_global_mj_m2_slope"):
        found = table.frame[f"{name}_gps_sd"][2]
        # 200,000 draws know a deviation to 0.2 %; 1024 even places to about 1 %.
        assert found == pytest.approx(maps[name][r, c].std(), rel=0.02), name


def test_coarser_cells_are_the_coarser_ground(table, hills):
    coarse = coarsened(hills, 3)
    points = at_cells(hills, *PLACES)
    again = plot_table(coarse, points, settings(radii=(90.0,)))
    tag = grain_tags(table.cells)[1]
    assert tag == "_g67"  # three times the root of 20 m by 25 m
    for name in again.predictors():
        np.testing.assert_array_equal(table.frame[f"{name}{tag}"], again.frame[name], err_msg=name)
    np.testing.assert_array_equal(
        table.frame[f"slope_deg_r90_mean{tag}"], again.frame["slope_deg_r90_mean"]
    )


def test_plots_in_any_crs_are_the_same(table, hills):
    for crs in ("EPSG:4326", "EPSG:32632", "EPSG:3857"):
        points = at_cells(hills, *PLACES, error=[0.0, 12.0, 30.0, np.nan], crs=crs)
        other = plot_table(hills, points, settings(radii=(30.0, 90.0), groups=WHOLE))
        for column in other.columns:
            if column.statistic:
                one, same = other.frame[column.name], table.frame[column.name]
                np.testing.assert_allclose(one, same, rtol=1e-5, atol=1e-5, err_msg=column.name)


def test_radii_are_true_metres_in_web_mercator(metric_ground):
    """At 60 north a metre of that CRS is half a metre: a ramp's mean and extremes tell."""
    x0, y0 = Transformer.from_crs(4326, 3857, always_xy=True).transform(9.0, 60.0)
    column = np.indices((60, 80))[1].astype(float)
    ground = Elevation.from_array(
        100.0 + column, (20.0, 0, x0 - 800.0, 0, -20.0, y0 + 600.0), "EPSG:3857"
    )
    points = at_cells(ground, [30.0], [40.0])
    found = plot_table(ground, points, settings(radii=(100.0,), groups=("height",))).frame
    # 100 m are 10 cells of 10.03 m true: from the 30th to the 50th column.
    assert found["height_m_r100_mean"][0] == pytest.approx(140.0, abs=1e-3)
    assert found["height_m_r100_min"][0] == 130.0
    assert found["height_m_r100_max"][0] == 150.0


@pytest.mark.parametrize("latitude", [40.0, -40.0])
@pytest.mark.parametrize(("slope", "aspect"), [(30.0, 180.0), (30.0, 0.0), (12.0, 245.0)])
def test_a_plane_in_closed_form(metric_ground, latitude, slope, aspect):
    ground = plane(metric_ground, slope, aspect, latitude)
    points = at_cells(ground, [20.0, 17.4], [20.0, 22.9], error=15.0)
    found = plot_table(ground, points, settings(radii=(60.0,), groups=WHOLE)).frame
    turn = np.radians(aspect)
    toward = np.tan(np.radians(slope)) * np.cos(turn), np.tan(np.radians(slope)) * np.sin(turn)
    expected = {
        "slope_deg": slope,
        "aspect_deg": aspect,
        "northness": np.cos(turn),
        "eastness": np.sin(turn),
        "slope_northness": np.sin(np.radians(slope)) * np.cos(turn),
        "beers": np.cos(np.radians(45.0 - aspect)) + 1.0,
        "stage_north": toward[0],
        "stage_east": toward[1],
    }
    for number in (1, 2, 3):
        for fold in ("radiation", "heat"):
            expected[f"mccune_{fold}_{number}_mj_cm2_yr"] = float(
                heat_load.potential_radiation(latitude, slope, aspect, equation=number, fold=fold)
            )
        expected[f"mccune_valid_{number}"] = 1.0
    for name, value in expected.items():
        # Heights in float32 know the slope to 1e-5; the projection's scale differs by 1e-8; the
        # plots lie up to 60 m, 0.0006 degree, from the latitude named.
        for ending in ("", "_point", "_r60_mean"):
            if name.startswith("mccune_valid") and ending:
                continue
            away = (found[f"{name}{ending}"] - value).abs()
            near = 2e-4 * max(1.0, abs(value))
            if name == "aspect_deg":  # 58 m east of the middle meridian north turns by 0.0005
                away, near = np.minimum(away, 360.0 - away), 1e-3
            assert away.max() < near, (name, ending)
        if name not in ("aspect_deg",) and "valid" not in name:
            assert found[f"{name}_gps_sd"].max() < 1e-4 * max(1.0, abs(value)), name
    assert found["height_m_gps_sd"].min() > 1.0


def test_the_authors_table_through_a_raster(metric_ground):
    """McCune and Keon 2002, testrad.xls: latitude 40, 30 degrees facing south and north.

    To 1e-6 on the formula itself (tests/published); a raster's slope adds 1e-5.
    """
    for aspect, radiation, heat in (
        (0.0, (-0.983775, -0.889010, 0.571045), (-0.627967, -0.626899, 0.641633)),
        (180.0, (-0.019594, -0.004535, 1.053045), (0.053812, -0.001481, 0.982458)),
    ):
        ground = plane(metric_ground, 30.0, aspect, 40.0)
        found = plot_table(ground, at_cells(ground, [20.0], [20.0]), settings(groups=WHOLE)).frame
        for number, (one, other) in enumerate(zip(radiation, heat, strict=True), 1):
            for fold, value in (("radiation", one), ("heat", other)):
                value = np.exp(value) if number < 3 else value
                name = f"mccune_{fold}_{number}_mj_cm2_yr"
                assert found[name][0] == pytest.approx(value, abs=2e-5), name


def test_the_south_is_the_mirror_of_the_north(metric_ground):
    rng = np.random.default_rng(4)
    smooth = np.cumsum(np.cumsum(rng.normal(0.0, 0.4, (40, 50)), axis=0), axis=1) * 0.2
    north = metric_ground(500.0 + smooth, 20.0, 45.0)
    south = metric_ground(500.0 + smooth[::-1], 20.0, -45.0)
    rows, columns = np.array([12.0, 20.0, 28.0]), np.array([11.0, 30.0, 22.0])
    tables = [
        plot_table(ground, at_cells(ground, r, columns), settings(groups=WHOLE)).frame
        for ground, r in ((north, rows), (south, 39.0 - rows))
    ]
    one, other = tables
    for name in one:
        if name.startswith("mccune") or name in ("slope_deg", "eastness", "sky_view", "height_m"):
            np.testing.assert_allclose(one[name], other[name], rtol=1e-4, atol=1e-5, err_msg=name)
    np.testing.assert_allclose(one["northness"], -other["northness"], atol=1e-5)
    # The Earth is nearest the sun in January, by 6.9 % of light against July.
    ratio = (
        other["irradiation_season_beam_mj_m2_slope"] / one["irradiation_season_beam_mj_m2_slope"]
    )
    assert ((ratio > 1.0) & (ratio < 1.07)).all()


def test_season_and_months_of_a_shifted_year(hills):
    """From July to June the calendar's months are the same sums, within the years' difference."""
    points = at_cells(hills, *PLACES)
    shifted = settings("2024-07/2025-06", groups=("irradiation", "irradiation_months"))
    table = plot_table(hills, points, shifted).frame
    year = plot_table(hills, points, settings(groups=("irradiation", "irradiation_months"))).frame
    for month in ("jan", "jul", "dec"):
        name = f"irradiation_{month}_global_mj_m2_slope"
        np.testing.assert_allclose(table[name], year[name], rtol=0.01)
    names = [
        f"irradiation_{m}_global_mj_m2_slope"
        for m in ("apr", "may", "jun", "jul", "aug", "sep", "oct")
    ]
    season = table["irradiation_season_global_mj_m2_slope"]
    np.testing.assert_allclose(season, table[names].sum(axis=1), rtol=1e-9)


def test_given_season_across_the_new_year(hills):
    points = at_cells(hills, *PLACES)
    wanted = settings(season=(12, 1), groups=("irradiation", "irradiation_months"))
    frame = plot_table(hills, points, wanted).frame
    both = sum(frame[f"irradiation_{m}_beam_mj_m2_slope"] for m in ("dec", "jan"))
    np.testing.assert_allclose(frame["irradiation_season_beam_mj_m2_slope"], both, rtol=1e-12)


def test_photosynthetic_light_of_a_season_is_that_of_its_mean_day(hills):
    groups = ("irradiation", "photosynthetic")
    frame = plot_table(hills, at_cells(hills, *PLACES), settings(groups=groups)).frame
    for span, days in (("year", 365), ("season", 214)):
        energy = frame[f"irradiation_{span}_global_mj_m2_slope"]
        light = frame[f"photosynthetic_{span}_mol_m2_d_slope"]
        np.testing.assert_allclose(light, 2.3 * energy / days, rtol=1e-6)


def test_plots_without_ground_stay_as_rows(hills):
    points = at_cells(hills, [31.0, 20.0, -40.0, 20.0], [201.0, 40.0, 10.0, 41.0], error=5.0)
    x = points.x.copy()
    x[3] = np.nan
    points = replace(points, x=x, y=np.where(np.isnan(x), np.nan, points.y))
    table = plot_table(hills, points, settings(groups=WHOLE))
    frame = table.frame
    assert frame["flag"].tolist() == ["void", "ok", "outside", "no place"]
    predictors = [c.name for c in table.columns if c.statistic and c.statistic != "known"]
    assert frame.loc[[0, 2, 3], predictors].isna().all(axis=None)
    assert frame.loc[[0, 2, 3], "known_r50"].isna().all()
    assert frame.loc[1, predictors].notna().all()
    assert np.isfinite(frame["longitude"][:3]).all()
    words = " ".join(table.warnings)
    assert "'P0': on a void" in words
    assert "'P2': outside" in words


def test_plots_of_one_cell_are_told(hills):
    located = locate(at_cells(hills, [20.0, 20.3, 40.0], [30.0, 30.2, 50.0]), hills)
    assert "plots 'P0', 'P1': in one cell" in located.warnings[0]


def swap(points):
    return replace(points, x=points.y, y=points.x)


def test_swapped_coordinates_are_named(hills):
    points = at_cells(hills, *PLACES, crs="EPSG:4326")
    with pytest.raises(InputError, match="inside it with x and y"):
        locate(swap(points), hills)
    one = replace(points, x=points.x.copy(), y=points.y.copy())
    one.x[2], one.y[2] = points.y[2], points.x[2]
    located = locate(one, hills)
    assert located.flag.tolist() == ["ok", "ok", "outside", "ok"]
    assert "'P2': outside the raster, and inside it" in located.warnings[0]


def test_plots_that_are_all_elsewhere_are_refused(hills):
    with pytest.raises(InputError, match=r"all plots lie outside.*'P0'"):
        locate(at_cells(hills, [500.0, 600.0], [0.0, 0.0]), hills)
    with pytest.raises(InputError, match="void"):
        locate(at_cells(hills, [31.0], [201.0]), hills)


@pytest.mark.parametrize(
    ("asked", "words"),
    [
        ({"period": "2025-04"}, "twelve whole months"),
        ({"period": "2024-01-15/2025-01-14"}, "twelve whole months"),
        ({"period": "2024/2025"}, "twelve whole months"),
        ({"radii": (0.0,)}, "radius"),
        ({"radii": (50.0, 20.0)}, "rise"),
        ({"radii": (50.1, 50.4)}, "further apart"),
        ({"factors": (2, 4)}, "begin"),
        ({"factors": (1, 1)}, "rise"),
        ({"groups": ("colour",)}, "predictors must be"),
        ({"groups": ()}, "predictors must be"),
    ],
)
def test_settings_that_make_no_sense(asked, words):
    with pytest.raises(SettingError, match=words):
        settings(**asked)


def test_circles_too_wide_are_refused(hills):
    with pytest.raises(SettingError, match="smaller circles"):
        plot_table(hills, at_cells(hills, *PLACES), settings(radii=(1e6,)))


def test_every_column_is_in_the_dictionary(table):
    told = table.dictionary()
    assert told["column"].tolist() == list(table.frame)
    assert told["column"].is_unique
    assert told["meaning"].str.len().min() > 0
    energy = told[told["column"].str.startswith("irradiation")]
    assert set(energy["area_basis"]) == {"per area of slope"}
    assert set(energy["unit"]) == {"MJ m-2"}
    assert energy["meaning"].str.contains("potential \\(clear-sky\\)").all()
    circles = told[told["statistic"].isin(["mean", "min", "max", "known"])]
    assert circles["radius_m"].isin([30.0, 90.0]).all()
    assert told["column"].str.fullmatch(r"[a-z][a-z0-9_]*").all()


def test_columns_are_counted_beforehand(table, hills):
    wanted = settings(radii=(30.0, 90.0), factors=(1, 3))
    points = at_cells(hills, *PLACES, error=1.0)
    predictors = [c for c in table.columns if c.statistic]
    assert column_count(points, wanted) == len(predictors)


def test_long_form_holds_the_same(table):
    long = long_form(table)
    row = long[
        (long["id"] == "P1") & (long["predictor"] == "slope_deg") & (long["statistic"] == "max")
        & (long["radius_m"] == 90.0) & (long["cell_m"] < 30.0)
    ]  # fmt: skip
    assert row["value"].tolist() == [table.frame["slope_deg_r90_max"][1]]
    assert len(long) == 4 * sum(bool(c.statistic) for c in table.columns)


def test_attributes_are_kept_and_do_not_replace_ours(hills):
    points = at_cells(hills, *PLACES)
    given = pd.DataFrame(
        {"species": list("abcd"), "flag": [1, 2, 3, 4], "height_m": [9.0, 8.0, 7.0, 6.0]}
    )
    table = plot_table(hills, replace(points, attributes=given), settings(groups=("height",)))
    assert table.frame["species"].tolist() == list("abcd")
    assert table.frame["flag"].tolist() == ["ok"] * 4
    assert table.frame["flag_given"].tolist() == [1, 2, 3, 4]
    assert table.frame["height_m"].min() > 800.0
    assert response_values(table, "height_m").tolist() == [9.0, 8.0, 7.0, 6.0]
    assert [c.name for c in table.columns] == list(table.frame)
    assert list(table.frame)[4:7] == ["species", "flag_given", "height_m_given"]


@pytest.mark.heavy
def test_results_do_not_depend_on_threads(table, hills):
    points = at_cells(hills, *PLACES, error=[0.0, 12.0, 30.0, np.nan])
    again = plot_table(hills, points, settings(radii=(30.0, 90.0), factors=(1, 3)), threads=1)
    for name in again.frame:
        if again.frame[name].dtype == float:
            np.testing.assert_allclose(again.frame[name], table.frame[name], rtol=1e-9, atol=1e-6)


def test_from_python(hills):
    points = at_cells(hills, *PLACES)
    table = terrasol.plot_predictors(
        hills, points, None, Air.ineichen(3.0), radii=(90.0,), predictors=WHOLE, azimuths=16,
        step_seconds=1800.0, threads=1,
    )  # fmt: skip
    same = plot_table(hills, points, settings(radii=(90.0,), groups=WHOLE)).frame
    pd.testing.assert_frame_equal(table.frame, same)
    with pytest.raises(SettingError, match="twelve whole months"):
        terrasol.plot_predictors(hills, points, "2025-04")


def test_maps_of_albedo_and_index_are_taken_from_python(hills):
    """A plot in a cell has the light of that cell on the map, which has half the clear light."""
    maps = {
        "albedo_map": np.where(np.arange(300) < 220, 0.2, 0.6) * np.ones((12, 70, 1)),
        "index_map": np.where(np.arange(300) < 220, 1.0, 0.5) * np.ones((1, 70, 1)),
    }
    quick = {"air": Air.ineichen(3.0), "azimuths": 16, "step_seconds": 3600.0}
    points = at_cells(hills, *PLACES)
    told = [
        terrasol.plot_predictors(
            hills, points, predictors=("irradiation",), radii=(), **quick, **more
        ).frame["irradiation_year_global_mj_m2_slope"]
        for more in (maps, {})
    ]
    whole = terrasol.irradiation(hills, **quick, **maps).irradiation_year.sel(part="global").values
    at = [(20, 255), (33, 256), (45, 120), (29, 198)]
    assert told[0].tolist() == pytest.approx([whole[cell] for cell in at], rel=1e-3)
    assert (told[0] < 0.8 * told[1]).tolist() == [True, True, False, False]


def test_a_horizon_that_ends_with_the_raster_is_told_where_shade_matters(hills, table):
    said = "shade of all that stands in the raster, and of nothing beyond it"
    assert any(text.startswith(said) for text in table.warnings)
    points = at_cells(hills, *PLACES)
    bare = plot_table(hills, points, settings(radii=(), groups=("height", "slope")))
    assert not any(text.startswith(said) for text in bare.warnings)


def test_far_ridges_and_trees_count(hills, metric_ground):
    points = at_cells(hills, *PLACES)
    asked = {"predictors": ("sky_view",), "radii": (), "azimuths": 16, "step_seconds": 3600.0}
    plain = terrasol.plot_predictors(hills, points, air=Air.ineichen(3.0), **asked).frame
    trees = hills.heights + np.where(np.arange(300) % 12 < 4, 15.0, 0.0).astype(np.float32)
    surface = replace(hills, heights=trees.astype(np.float32))
    under = terrasol.plot_predictors(
        hills, points, air=Air.ineichen(3.0), surface=surface, factors=(1, 2), **asked
    ).frame
    assert (under["sky_view"] < plain["sky_view"] - 0.001).all()
    assert under.filter(like="_g").shape[1] == 2


def test_horizons_are_those_of_the_cells(hills):
    located = locate(at_cells(hills, [20.3, 33.0, -50.0], [254.7, 256.2, 10.0]), hills)
    found = plot_horizons(hills, located, 32, threads=1)
    whole = terrasol.terrain(hills, 32, horizon=True, threads=1).horizon.values
    np.testing.assert_array_equal(found[0].astype(np.float32), whole[:, 20, 255])
    np.testing.assert_array_equal(found[1].astype(np.float32), whole[:, 33, 256])
    assert np.isnan(found[2]).all()
    table = horizon_table(("a", "b", "c"), found)
    assert table["azimuth_deg"][table["id"] == "b"].tolist() == [11.25 * k for k in range(32)]


def test_doubts_are_told(hills, metric_ground):
    points = at_cells(hills, [1.0, 35.0, 35.0], [40.0, 60.0, 80.0], error=[3.0, 90.0, np.nan])
    table = plot_table(hills, points, settings(radii=(8.0, 90.0), groups=("height",)))
    words = "\n".join(table.warnings)
    assert "the circle of 90 m reaches beyond the raster or over voids around plot 'P0':" in words
    assert "a circle of 8 m is smaller than a cell of 22.36 m" in words
    assert "the error of position of plot 'P1' is larger than 2 cells" in words
    assert "McCune" not in words
    steep = plane(metric_ground, 70.0, 200.0, 62.0)
    far_north = plot_table(steep, at_cells(steep, [20.0], [20.0]), settings(groups=("heat_load",)))
    for number in (1, 2, 3):
        assert any(f"equation {number} of McCune" in text for text in far_north.warnings)
        assert far_north.frame[f"mccune_valid_{number}"].tolist() == [0.0]
