"""Parcels, plots, basin and station of the invented valley: sound, and remade alike."""

import json
import subprocess
import sys
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pytest
import rasterio
from rasterio import features
from shapely.geometry import box

from terrasol.files.tables import read_station
from terrasol.sky.quality import Flag, check_quality

FOLDER = Path(__file__).resolve().parents[1] / "sample_dem"
UTM = "EPSG:32632"


@pytest.fixture(scope="module")
def remade(tmp_path_factory):
    folder = tmp_path_factory.mktemp("places")
    script = str(FOLDER / "make_places.py")
    subprocess.run([sys.executable, script, str(folder)], check=True)
    return folder


@pytest.fixture(scope="module")
def valley():
    with rasterio.open(FOLDER / "valley.tif") as file:
        return file.read(1).astype(float), file.transform, box(*file.bounds)


@pytest.fixture(scope="module")
def parcels():
    return geopandas.read_file(FOLDER / "parcels.geojson")


@pytest.fixture(scope="module")
def weather():
    table = pd.read_csv(FOLDER / "station.csv", parse_dates=["time"])
    return table.set_index("time")


@pytest.mark.parametrize("name", ["parcels.geojson", "basin.geojson"])
def test_polygons_are_remade(remade, name):
    """Corners agree to 2e-7 degrees, two units of the last decimal: 2 cm."""
    old, new = (json.loads((folder / name).read_text())["features"] for folder in (FOLDER, remade))
    assert [one["properties"] for one in old] == [one["properties"] for one in new]
    for before, after in zip(old, new, strict=True):
        assert before["geometry"]["type"] == after["geometry"]["type"]
        np.testing.assert_allclose(numbers(before), numbers(after), rtol=0, atol=2e-7)


def numbers(feature):
    """All coordinates of a feature, one after the other."""
    row = []

    def walk(part):
        for piece in part:
            row.append(piece) if isinstance(piece, float) else walk(piece)

    walk(feature["geometry"]["coordinates"])
    return row


def test_plots_are_remade(remade):
    old, new = (pd.read_csv(folder / "plots.csv") for folder in (FOLDER, remade))
    pd.testing.assert_frame_equal(old, new, rtol=0, atol=2e-6)


def test_station_is_remade(remade):
    """One unit of the last digit, where rounding falls the other way."""
    old, new = (pd.read_csv(folder / "station.csv") for folder in (FOLDER, remade))
    assert old["time"].tolist() == new["time"].tolist()
    for column, unit in (("global", 1), ("temperature", 0.1), ("precipitation", 0.1)):
        np.testing.assert_allclose(old[column], new[column], rtol=0, atol=1.001 * unit)
    np.testing.assert_allclose(old["snow_water"], new["snow_water"], rtol=0, atol=1.001)
    assert (FOLDER / "station.csv.toml").read_text() == (remade / "station.csv.toml").read_text()


def test_parcels_lie_on_the_ground_of_vines(parcels, valley):
    assert 8 <= len(parcels) <= 12
    assert parcels["name"].is_unique
    assert parcels.crs.to_epsg() == 4326
    assert parcels.is_valid.all()
    drawn = parcels.to_crs(UTM)
    hectares = drawn.area / 1e4
    assert hectares.between(0.5, 8.0).all()
    assert drawn.within(valley[2]).all()
    assert (drawn.geom_type == "MultiPolygon").sum() == 1
    pieces = drawn.union_all()
    assert pieces.area == pytest.approx(drawn.area.sum())  # none lies on another


def test_rings_turn_as_rfc_7946_wants(parcels):
    for polygon in parcels.explode().geometry:
        assert polygon.exterior.is_ccw


def test_parcels_face_many_ways(parcels, valley):
    """Terraces, a floor, shade and one parcel too steep for machines."""
    heights, transform, _ = valley
    south, east = np.gradient(heights, transform.a)
    slope, northward = 100.0 * np.hypot(south, east), south
    means = {}
    for name, polygon in zip(parcels["name"], parcels.to_crs(UTM).geometry, strict=True):
        inside = features.geometry_mask([polygon], heights.shape, transform, invert=True)
        means[name] = slope[inside].mean(), northward[inside].mean()
        assert heights[inside].min() > 540.0
        assert heights[inside].max() < 900.0
    assert means["High steep"][0] > 40.0
    assert means["Floor north"][0] < 2.0
    assert means["North side"][1] > 0.1
    assert means["Terrace 1"][1] < -0.1


def test_plots_cover_heights_and_aspects(valley):
    heights, transform, frame = valley
    plots = pd.read_csv(FOLDER / "plots.csv")
    assert len(plots) == 40
    assert plots["id"].is_unique
    assert plots["gps_error_m"].between(1.0, 15.0).all()
    points = geopandas.GeoSeries.from_xy(plots["longitude"], plots["latitude"], crs="EPSG:4326")
    points = points.to_crs(UTM)
    assert points.within(frame.buffer(-400.0)).all()
    column, row = (np.floor(part).astype(int) for part in ~transform @ (points.x, points.y))
    assert np.ptp(heights[row, column]) > 1200.0
    south, east = np.gradient(heights, transform.a)
    facing = np.degrees(np.arctan2(-east, south))[row, column] % 360.0
    assert (np.histogram(facing, bins=4, range=(0.0, 360.0))[0] >= 8).all()


def test_basin_gathers_one_stream(valley):
    """Nowhere at the rim, where its water would be unknown; from the floor to the crest."""
    heights, transform, frame = valley
    basin = geopandas.read_file(FOLDER / "basin.geojson").to_crs(UTM).geometry
    assert len(basin) == 1
    assert basin.is_valid.all()
    assert basin.iloc[0].geom_type == "Polygon"
    assert basin.iloc[0].within(frame.buffer(-40.0))
    assert 10.0 < basin.area.iloc[0] / 1e6 < 40.0
    inside = features.geometry_mask(basin, heights.shape, transform, invert=True)
    assert heights[inside].min() < 600.0
    assert heights[inside].max() > 3000.0
    lowest = np.unravel_index(np.where(inside, heights, np.inf).argmin(), heights.shape)
    outer = features.geometry_mask([basin.iloc[0].buffer(30.0)], heights.shape, transform)
    around = heights[lowest[0] - 1 : lowest[0] + 2, lowest[1] - 1 : lowest[1] + 2]
    assert around.min() < heights[lowest]  # the outlet's water goes on
    assert not outer[lowest]


def test_station_is_complete():
    """Every hour of thirteen months, none twice: the clock was never changed."""
    station = read_station(FOLDER / "station.csv")
    assert station.seconds == 3600
    assert station.start.size == 396 * 24
    assert station.start[0] == np.datetime64("2024-09-30T23:00")  # midnight at +01:00
    assert set(np.diff(station.start).astype(int)) == {3600}
    assert not station.notes
    for values in station.values.values():
        assert np.isfinite(values).all()
    assert (FOLDER / "station.csv").stat().st_size < 600_000


def test_station_stands_where_it_says(valley):
    heights, transform, _ = valley
    station = read_station(FOLDER / "station.csv")
    point = geopandas.GeoSeries.from_xy([station.longitude], [station.latitude], crs="EPSG:4326")
    point = point.to_crs(UTM).iloc[0]
    column, row = (int(part) for part in ~transform @ (point.x, point.y))
    assert station.height == pytest.approx(heights[row, column], abs=0.1)
    south, east = np.gradient(heights, transform.a)
    assert np.hypot(south, east)[row, column] < 0.1


def test_station_passes_the_checks():
    """Nothing but the zeros of the night is flagged."""
    quality = check_quality(read_station(FOLDER / "station.csv"))
    for quantity, flags in quality.flags.items():
        odd = flags & ~np.uint16(Flag.NIGHT_OFFSET)
        assert not odd.any(), quantity


def test_vines_can_grow_low_down(weather):
    """Degree-days above 10 degC from April to October, carried down to the floor by 6.5 K/km."""
    down = 6.5e-3 * (1570.0 - 560.0)
    daily = weather["temperature"].loc["2025-04":"2025-10"].resample("D").agg(["min", "max"])
    assert len(daily) == 214
    middle = daily.mean(axis=1) + down
    assert 14.0 < middle.mean() < 17.0
    assert 900.0 < np.maximum(middle - 10.0, 0.0).sum() < 1500.0


def test_winter_lies_on_the_station(weather):
    snow = weather["snow_water"]
    assert (snow.loc["2024-12":"2025-04"] > 0).all()
    assert (snow.loc["2025-06":"2025-09"] == 0).all()
    assert 200 < snow.max() < 700
    fallen = weather["precipitation"].loc["2024-10-01":"2025-09-30"].sum()
    assert 800.0 < fallen < 1600.0


def test_wet_days_are_dull_and_even_in_temperature(weather):
    days = weather.loc["2025-05":"2025-08"].resample("D")
    wet = days["precipitation"].sum() > 1.0
    light = days["global"].sum()
    swing = days["temperature"].max() - days["temperature"].min()
    assert light[wet].mean() < 0.75 * light[~wet].mean()
    assert swing[wet].mean() < 0.8 * swing[~wet].mean()
