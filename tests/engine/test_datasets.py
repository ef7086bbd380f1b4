"""Terrain and irradiation from Python: labels, periods, units, places on the globe."""

import numpy as np
import pytest

import terrasol

AIR = terrasol.Air.ineichen(3.0)
QUICK = {"air": AIR, "azimuths": 16, "step_seconds": 600.0}


def valley(shape=(40, 44)):
    """A bowed valley that falls to the south, sides of up to 35 degrees [m]."""
    row, column = np.mgrid[: shape[0], : shape[1]]
    side = np.abs(column - shape[1] / 2 - 4.0 * np.sin(row / 9.0))
    return 600.0 + 9.0 * side - 2.0 * row + 5.0 * np.cos(row / 5.0)


def whole(light):
    """Irradiation of all the period, whether it is a year or not; (part, y, x)."""
    return light["irradiation_year" if "irradiation_year" in light else "irradiation_period"]


def close(one, two, rel):
    """Whether two fields agree to a part of the second's mean."""
    np.testing.assert_allclose(one, two, atol=rel * float(np.nanmean(two)))


@pytest.fixture(scope="module")
def ground(metric_ground):
    return metric_ground(valley(), 20.0)


@pytest.fixture(scope="module")
def april(ground):
    return terrasol.irradiation(ground, "2025-04", monthly_parts=True, **QUICK)


def test_terrain_names_units_and_coordinates(ground):
    found = terrasol.terrain(ground, azimuths=8, horizon=True)
    assert set(found.data_vars) == {"slope", "aspect", "sky_view", "horizon"}
    assert found["slope"].attrs["units"] == "degree"
    assert found["slope"].attrs["standard_name"] == "ground_slope_angle"
    assert found["aspect"].attrs["standard_name"] == "ground_slope_direction"
    assert found["sky_view"].attrs["units"] == "1"
    assert "standard_name" not in found["sky_view"].attrs
    assert found["horizon"].dims == ("azimuth", "y", "x")
    np.testing.assert_array_equal(found["azimuth"], np.arange(8) * 45.0)
    np.testing.assert_allclose(found["x"][:2], (-430.0, -410.0))
    np.testing.assert_allclose(found["y"][:2], (390.0, 370.0))
    assert "tmerc" in found.attrs["crs_wkt"] or "Mercator" in found.attrs["crs_wkt"]
    assert found.attrs["warnings"] == []
    assert set(terrasol.terrain(ground, azimuths=8).data_vars) == {"slope", "aspect", "sky_view"}


def test_horizon_is_void_where_the_ground_is_and_never_negative(metric_ground):
    z = valley()
    z[10:12, 5:9] = np.nan
    horizon = terrasol.terrain(metric_ground(z, 20.0), azimuths=8, horizon=True)["horizon"].values
    assert (np.isnan(horizon) == np.isnan(z)).all()
    assert np.nanmin(horizon) >= 0.0
    assert 10.0 < np.nanmax(horizon) < 60.0


def test_turned_rasters_have_no_axes_of_their_own():
    turned = terrasol.Elevation.from_array(
        valley(), (16.0, 12.0, 5e5, 12.0, -16.0, 5.1e6), "EPSG:32632"
    )
    found = terrasol.terrain(turned, azimuths=8)
    assert "x" not in found.coords
    assert found["slope"].dims == ("y", "x")


def test_irradiation_names_units_and_coordinates(april, ground):
    assert set(april.data_vars) == {
        "slope", "aspect", "sky_view", "irradiation_period", "irradiation_months",
        "beam_months", "diffuse_months", "reflected_months",
    }  # fmt: skip
    assert list(april["part"].values) == ["global", "beam", "diffuse", "reflected"]
    assert list(april["month"].values) == ["2025-04"]
    assert april["irradiation_period"].attrs["units"] == "MJ m-2"
    words = april["irradiation_period"].attrs["long_name"]
    assert "global" not in words  # it holds the parts too
    assert "global" in april["irradiation_months"].attrs["long_name"]
    assert "potential (clear-sky)" in words
    assert "per area of slope" in words
    assert "standard_name" not in april["irradiation_period"].attrs
    typical = terrasol.irradiation(ground, **{**QUICK, "step_seconds": 3600.0})
    assert "irradiation_year" in typical
    assert list(typical["month"].values[[0, 11]]) == ["January", "December"]


def test_a_period_object_serves_as_well_as_its_text(april, ground):
    period = terrasol.parse_period("2025-04")
    again = terrasol.irradiation(ground, period, **QUICK)
    np.testing.assert_array_equal(whole(again).values[0], whole(april).values[0])
    assert "beam_months" not in again


def test_map_area_is_slope_area_over_the_cosine(april, ground):
    by_map = terrasol.irradiation(ground, "2025-04", basis="map", monthly_parts=True, **QUICK)
    stretch = 1.0 / np.cos(np.radians(april["slope"].values.astype(np.float64)))
    assert stretch.max() > 1.05
    for name in ("irradiation_period", "irradiation_months", "beam_months", "reflected_months"):
        np.testing.assert_allclose(by_map[name], april[name] * stretch, rtol=3e-6, atol=1e-4)
        assert "per area of map" in by_map[name].attrs["long_name"]
    np.testing.assert_array_equal(by_map["sky_view"], april["sky_view"])


def test_kilowatt_hours_are_megajoules_over_three_point_six(april, ground):
    other = terrasol.irradiation(ground, "2025-04", unit="kW h m-2", monthly_parts=True, **QUICK)
    for name in ("irradiation_period", "irradiation_months", "diffuse_months"):
        np.testing.assert_allclose(other[name], april[name] / 3.6, rtol=3e-6, atol=1e-5)
        assert other[name].attrs["units"] == "kW h m-2"


def test_fourteen_months_are_a_year_and_two_more(ground):
    coarse = {**QUICK, "step_seconds": 1800.0, "monthly_parts": True}
    both = terrasol.irradiation(ground, "2025-01/2026-02", **coarse)
    year = terrasol.irradiation(ground, "2025", **coarse)
    rest = terrasol.irradiation(ground, "2026-01/2026-02", **coarse)
    assert both["irradiation_months"].shape[0] == 14
    assert list(both["month"].values[[0, 11, 12, 13]]) == [
        "2025-01", "2025-12", "2026-01", "2026-02",
    ]  # fmt: skip
    assert "irradiation_period" in both
    assert "irradiation_year" in year
    for name in ("irradiation_months", "beam_months", "diffuse_months", "reflected_months"):
        close(both[name][:12], year[name], 1e-5)
        close(both[name][12:], rest[name], 1e-5)
    close(whole(both), whole(year) + whole(rest), 1e-5)
    np.testing.assert_allclose(whole(year)[0], year["irradiation_months"].sum("month"), rtol=2e-6)
    for part in ("beam", "diffuse", "reflected"):
        close(whole(both).sel(part=part), both[f"{part}_months"].sum("month"), 1e-4)


def test_parts_of_a_month_add_up_to_it(april, ground):
    early = terrasol.irradiation(ground, "2025-04-01/2025-04-12", **QUICK)
    late = terrasol.irradiation(ground, "2025-04-13/2025-04-30", **QUICK)
    assert list(early["month"].values) == ["2025-04"]
    close(whole(early) + whole(late), whole(april), 1e-5)
    across = terrasol.irradiation(ground, "2025-04-25/2025-05-05", **QUICK)
    assert list(across["month"].values) == ["2025-04", "2025-05"]
    close(across["irradiation_months"].sum("month"), whole(across)[0], 1e-6)


def test_black_ground_reflects_nothing(april, ground):
    black = terrasol.irradiation(ground, "2025-04", albedo=0.0, **QUICK)
    assert (whole(black).sel(part="reflected").values == 0.0).all()
    close(whole(black)[1:3], whole(april)[1:3], 1e-6)
    assert whole(april).sel(part="reflected").values.min() > 0.0


def test_albedo_of_each_month_is_its_own(ground):
    albedo = [0.4, 0.8] + [0.1] * 8 + [0.0, 0.2]
    parts = {"monthly_parts": True, **QUICK}
    mixed = terrasol.irradiation(ground, "2025-11/2026-02", albedo=albedo, **parts)
    plain = terrasol.irradiation(ground, "2025-11/2026-02", albedo=0.2, **parts)
    got, want = mixed["reflected_months"].values, plain["reflected_months"].values
    assert (got[0] == 0.0).all()  # November
    np.testing.assert_allclose(got[1], want[1], rtol=1e-6)  # December
    # twice and four times the albedo: a little more than so much, for light that bounces again
    for month, times in ((2, 2.0), (3, 4.0)):
        ratio = got[month] / want[month]
        assert (ratio > times).all()
        assert (ratio < 1.25 * times).all()


def test_polar_night_brings_nothing_and_no_warning(metric_ground):
    arctic = metric_ground(valley(), 20.0, latitude=80.0, longitude=16.0)
    night = terrasol.irradiation(arctic, "2025-12", monthly_parts=True, **QUICK)
    assert (whole(night).values == 0.0).all()
    assert (night["beam_months"].values == 0.0).all()
    assert night.attrs["warnings"] == []
    june = terrasol.irradiation(arctic, "2025-06", **QUICK)
    # common practice, no source: the polar day's sum rivals that of the middle latitudes
    assert whole(june)[0].values.min() > 400.0


def cone(shape=(41, 41)):
    """A cone of 30 degrees on cells of 20 m."""
    row, column = np.mgrid[: shape[0], : shape[1]]
    return 900.0 - 20.0 * np.tan(np.radians(30.0)) * np.hypot(row - 20, column - 20)


def sides(light):
    """Global irradiation of the cone's north and south side."""
    year = whole(light)[0].values
    return year[8:13, 18:23].mean(), year[28:33, 18:23].mean()


def test_seasons_and_sunny_sides_turn_about_in_the_south(metric_ground):
    north = metric_ground(cone(), 20.0, latitude=34.0, longitude=20.0)
    south = metric_ground(cone(), 20.0, latitude=-34.0, longitude=20.0)
    winter = {"north": "2025-12", "south": "2025-06"}
    shady, sunny = sides(terrasol.irradiation(north, winter["north"], **QUICK))
    south_sunny, south_shady = sides(terrasol.irradiation(south, winter["south"], **QUICK))
    assert sunny > 2.0 * shady
    # Same sun, mirrored. It stands 3.4 % nearer in December, which is 6.9 % in energy
    # (Astronomical Almanac 2010: 0.98329 and 1.01671 AU), and 31 days against 30.
    nearer = (1.01671 / 0.98329) ** 2 * 31.0 / 30.0
    assert sunny / south_sunny == pytest.approx(nearer, rel=0.02)
    assert shady / south_shady == pytest.approx(nearer, rel=0.05)


def test_the_date_line_is_no_border():
    def at(longitude):
        cell = 0.00025
        transform = (cell, 0, longitude - 20.5 * cell, 0, -cell, -17.0 + 20.5 * cell)
        # cells of 27 m, a little higher than wide
        return terrasol.irradiation(
            terrasol.Elevation.from_array(cone() * 1.33, transform, "EPSG:4326"), "2025-06", **QUICK
        )

    across, west, east = at(180.0), at(179.0), at(-179.0)
    for other in (west, east):
        close(across["slope"].values, other["slope"].values, 1e-4)
        close(across["sky_view"].values, other["sky_view"].values, 1e-4)
        # near the solstice a day more or less moves the sun by 0.1 degree at most
        close(whole(across).values, whole(other).values, 3e-3)


def test_default_air_is_the_climatology_of_the_place(ground):
    quick = {"azimuths": 8, "step_seconds": 1800.0}
    turbidity = terrasol.linke_climatology(46.0, 9.0)
    default = terrasol.irradiation(ground, "2025-07", **quick)
    named = terrasol.irradiation(ground, "2025-07", terrasol.Air.ineichen(turbidity), **quick)
    np.testing.assert_allclose(whole(default), whole(named), rtol=1e-5)
    clearer = terrasol.irradiation(ground, "2025-07", terrasol.Air.ineichen(2.0), **quick)
    assert whole(clearer)[1].values.mean() > 1.02 * whole(default)[1].values.mean()


@pytest.mark.parametrize("diffuse", ["perez", "hay-davies", "isotropic"])
def test_diffuse_models_agree_on_open_level_ground(metric_ground, diffuse):
    flat = metric_ground(np.full((12, 12), 400.0), 20.0)
    got = terrasol.irradiation(flat, "2025-04", diffuse=diffuse, **QUICK)
    plain = terrasol.irradiation(flat, "2025-04", diffuse="isotropic", **QUICK)
    np.testing.assert_allclose(whole(got)[:3], whole(plain)[:3], rtol=1e-3)


@pytest.mark.parametrize(
    ("wrong", "words"),
    [
        ({"azimuths": 10}, "azimuths"),
        ({"albedo": [0.1, 0.2]}, "albedo"),
        ({"threads": 0}, "threads"),
        ({"unit": "J"}, "unit"),
        ({"diffuse": "none"}, "diffuse"),
        ({"step_seconds": 7.0}, "step"),
        ({"refraction": 1.0}, "refraction"),
        ({"period": "2025-13"}, "2025-13"),
    ],
)
def test_wrong_settings_are_refused(ground, wrong, words):
    with pytest.raises(terrasol.SettingError, match=words):
        terrasol.irradiation(ground, **{"period": "2025-04", **QUICK, **wrong})


@pytest.mark.parametrize("wrong", [{"azimuths": 7}, {"refraction": -1.0}, {"threads": -1}])
def test_wrong_terrain_settings_are_refused(ground, wrong):
    with pytest.raises(terrasol.SettingError, match=next(iter(wrong))):
        terrasol.terrain(ground, **wrong)


def test_maps_of_albedo_and_index_and_photons(ground):
    shape = ground.shape
    even = terrasol.irradiation(ground, "2025-06", albedo=0.4, **QUICK)
    mapped = terrasol.irradiation(
        ground, "2025-06", albedo_map=np.full((1, *shape), 0.4, np.float32),
        photons_per_joule=2.0, **QUICK,
    )  # fmt: skip
    got, want = (whole(light).values for light in (mapped, even))
    np.testing.assert_allclose(got, want, rtol=1e-4, atol=1e-3)
    months = mapped["irradiation_months"].values
    np.testing.assert_allclose(mapped["photosynthetic_months"], months * 2.0 / 30.0, rtol=1e-5)
    assert mapped["photosynthetic_months"].attrs["units"] == "mol m-2 d-1"
    dull = terrasol.irradiation(
        ground, "2025-06", index_map=np.full((12, *shape), 0.5, np.float32), **QUICK
    )
    assert whole(dull).values[0].mean() == pytest.approx(
        0.5 * whole(terrasol.irradiation(ground, "2025-06", **QUICK)).values[0].mean(), rel=0.03
    )
    with pytest.raises(terrasol.SettingError, match="albedo map must have the shape"):
        terrasol.irradiation(ground, "2025-06", albedo_map=np.zeros((3, 2, 2)), **QUICK)
