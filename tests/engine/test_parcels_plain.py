"""A parcel's figures against the maps themselves, counted point by point."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from engine.made_parcels import AIR, asked_for, parcels

import terrasol
from terrasol.engine.parcels import survey

POINTS = 24
"""Points along the side of a cell."""


@pytest.fixture(scope="module")
def ground(metric_ground):
    """Hills with a ridge to the south, cells of 10 m by 14 m."""
    row, column = np.mgrid[0:70, 0:60].astype(float)
    heights = 500.0 + 18.0 * np.sin(row / 6.0) * np.cos(column / 7.0) + 0.8 * column
    heights[62:] += 60.0
    return metric_ground(heights, (10.0, 14.0))


@pytest.fixture(scope="module")
def shape(ground):
    """An outline with many edges, and a hole."""
    angle = np.linspace(0.0, 2.0 * np.pi, 40)
    reach = 120.0 + 35.0 * np.sin(3.0 * angle)
    outer = shapely.Polygon(np.column_stack([reach * np.cos(angle), reach * np.sin(angle)]))
    return outer.difference(shapely.Point(20.0, 10.0).buffer(30.0))


def covered(ground, shape):
    """Share of each cell that is covered, by points."""
    a, _, c, _, e, f = ground.transform
    step = (np.arange(POINTS) + 0.5) / POINTS
    rows, columns = ground.shape
    y = f + e * np.add.outer(np.arange(rows), step)
    x = c + a * np.add.outer(np.arange(columns), step)
    inside = shapely.contains_xy(shape, x[None, None], y[:, :, None, None])
    return inside.mean(axis=(1, 3))


def test_figures_are_those_of_the_maps(ground, shape):
    settings = asked_for(
        coarser=(), rule="slope_percent < 15 and irradiation_season >= 5000", least_patch=300.0
    )
    light, hours = settings.light, settings.hours
    numbers = survey(ground, parcels(shape, crs=ground.crs), settings).parcels[0].numbers
    maps = terrasol.irradiation(
        ground, None, AIR, azimuths=light.azimuths, step_seconds=light.step_seconds
    )
    sun = terrasol.sun_hours(
        ground, None, AIR, azimuths=hours.azimuths, step_seconds=hours.step_seconds
    )
    area = covered(ground, shape) * 140.0
    slope = np.radians(maps.slope.values.astype(float))
    percent, surface = 100.0 * np.tan(slope), area / np.cos(slope)
    season = maps.irradiation_months.values[3:10].sum(axis=0)
    # Points stand for areas to about one in the number of points along an edge.
    assert numbers["map_area_ha"] == pytest.approx(area.sum() / 1e4, rel=2e-3)
    assert numbers["surface_area_ha"] == pytest.approx(surface.sum() / 1e4, rel=2e-3)
    assert numbers["slope_mean_percent"] == pytest.approx(
        np.average(percent, weights=area), rel=2e-3
    )
    energy = np.average(season, weights=surface)
    assert numbers["irradiation_season_mj_m2_slope"] == pytest.approx(energy, rel=1e-3)
    for low, high, name in ((5, 10, "5_to_10"), (15, 20, "15_to_20"), (20, 30, "20_to_30")):
        expected = area[(percent >= low) & (percent < high)].sum() / 1e4
        assert numbers[f"slope_{name}_percent_ha_map"] == pytest.approx(expected, abs=0.01)
    facing = maps.aspect.values
    south = area[(np.abs(facing - 180.0) < 22.5) & (percent >= 2.0)].sum() / 1e4
    assert numbers["aspect_south_ha_map"] == pytest.approx(south, abs=0.01)
    shone = np.average(sun.sun_hours_months.values[3:10].sum(axis=0), weights=area)
    assert numbers["sun_hours_season_h"] == pytest.approx(shone, rel=1e-3)
    met = area[(percent < 15.0) & (season >= 5000.0)].sum() / 1e4
    told = numbers["rule_ha_map"] + numbers["rule_ignored_ha_map"]
    assert 0.0 < met < area.sum() / 1e4
    assert told == pytest.approx(met, abs=0.01)


@pytest.mark.heavy
def test_median_of_first_sun_is_that_of_the_area(ground, shape):
    settings = asked_for(coarser=())
    numbers = survey(ground, parcels(shape, crs=ground.crs), settings).parcels[0].numbers
    sun = terrasol.sun_hours(
        ground,
        None,
        AIR,
        azimuths=settings.hours.azimuths,
        step_seconds=settings.hours.step_seconds,
    )
    area = covered(ground, shape)
    for month in (1, 6, 12):
        first = sun.first_sun.values[month - 1]
        known = np.isfinite(first) & (area > 0.0)
        median = numbers[f"first_sun_m{month:02d}_h"]
        before = area[known & (first < median - 0.02)].sum() / area[known].sum()
        after = area[known & (first > median + 0.02)].sum() / area[known].sum()
        assert before <= 0.505
        assert after <= 0.505
        none = area[~np.isfinite(first)].sum() / area.sum()
        assert numbers[f"no_sun_share_m{month:02d}"] == pytest.approx(none, abs=3e-3)
