"""The committed sample valley: a sound file, and ground that water has shaped."""

import heapq
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import rasterio

FOLDER = Path(__file__).resolve().parents[1] / "sample_dem"
VALLEY = FOLDER / "valley.tif"
CELL = 20.0


@pytest.fixture(scope="module")
def ground():
    with rasterio.open(VALLEY) as file:
        return file.read(1).astype(float)


@pytest.fixture(scope="module")
def gradient(ground):
    """Rise towards east and towards north."""
    south, east = np.gradient(ground, CELL)
    return east, -south


@pytest.fixture(scope="module")
def slope(gradient):
    return np.degrees(np.arctan(np.hypot(*gradient)))


@pytest.fixture(scope="module")
def water(ground):
    """Water level once every hollow is full, the cell each drains to, and the flooding order.

    The priority flood of Barnes, Lehman and Mulla 2014 (Computers & Geosciences 62, 117-127).
    """
    rows, columns = ground.shape
    level = np.pad(ground, 1, constant_values=-np.inf).ravel().tolist()
    width = columns + 2
    receiver = [-1] * len(level)
    done = [height == -np.inf for height in level]
    index = np.arange(len(level)).reshape(rows + 2, width)[1:-1, 1:-1]
    rim = np.concatenate([index[0], index[-1], index[1:-1, 0], index[1:-1, -1]]).tolist()
    queue = [(level[cell], cell) for cell in rim]
    for cell in rim:
        done[cell] = True
    heapq.heapify(queue)
    order = []
    around = (-width, -1, 1, width, -width - 1, -width + 1, width - 1, width + 1)
    while queue:
        height, cell = heapq.heappop(queue)
        order.append(cell)
        for step in around:
            other = cell + step
            if not done[other]:
                done[other] = True
                receiver[other] = cell
                level[other] = max(level[other], height)
                heapq.heappush(queue, (level[other], other))
    return np.array(level).reshape(rows + 2, width)[1:-1, 1:-1], receiver, order


@pytest.fixture(scope="module")
def gathered(ground, water):
    """Area that drains through each cell [m2]."""
    _, receiver, order = water
    area = [CELL * CELL] * len(receiver)
    for cell in reversed(order):
        if receiver[cell] >= 0:
            area[receiver[cell]] += area[cell]
    rows, columns = ground.shape
    return np.array(area).reshape(rows + 2, columns + 2)[1:-1, 1:-1]


def test_file_states_what_it_is():
    with rasterio.open(VALLEY) as file:
        assert (file.height, file.width, file.count) == (500, 600, 1)
        assert file.crs.to_epsg() == 32632
        assert file.transform.almost_equals(
            rasterio.Affine(CELL, 0.0, 620_000.0, 0.0, -CELL, 5_160_000.0)
        )
        assert file.dtypes == ("float32",)
        assert file.nodata == -9999.0
        assert file.units == ("metre",)
        assert file.descriptions == ("invented valley: height of the ground",)
        assert file.profile["tiled"]
    assert VALLEY.stat().st_size < 1_500_000


def test_no_voids(ground):
    assert np.isfinite(ground).all()
    assert ground.min() > 0.0


def test_rises_from_foothills_to_an_alpine_crest(ground):
    assert 500.0 <= ground[:, 0].min() <= 700.0
    assert 2800.0 <= ground.max() <= 3200.0
    assert ground[:, 400:].mean() - ground[:, :200].mean() > 800.0


def test_slopes_are_those_of_mountains(slope):
    """Common practice, no source: alpine ground is 20 to 32 degrees steep on average."""
    assert 20.0 < slope.mean() < 32.0
    assert np.percentile(slope, 99.9) < 60.0


def test_water_leaves_every_cell(ground, water):
    """Noise is full of hollows; ground that streams have cut and filled has none."""
    np.testing.assert_array_equal(water[0], ground)


def test_streams_flatten_as_they_grow(ground, gathered, water):
    """Flint's law (Flint 1974): channel gradient falls as a power of the area it drains.

    Common practice, no source: the power lies between 0.2 and 0.7.
    """
    rows, columns = ground.shape
    receiver = np.array(water[1]).reshape(rows + 2, columns + 2)[1:-1, 1:-1]
    area = np.where(receiver >= 0, gathered, 0.0)
    channel = (area > 2e5) & (area < 1e7) & (ground > 700.0)
    row, column = np.nonzero(channel)
    to_row, to_column = np.divmod(receiver[channel], columns + 2)
    length = CELL * np.hypot(to_row - 1 - row, to_column - 1 - column)
    fall = (ground[channel] - ground[to_row - 1, to_column - 1]) / length
    size = np.log10(area[channel])
    bins = np.digitize(size, np.linspace(np.log10(2e5), 7.0, 9))
    middle = [(size[bins == b].mean(), np.log10(fall[bins == b].mean())) for b in range(1, 9)]
    power = -np.polyfit(*np.transpose(middle), 1)[0]
    assert 0.2 < power < 0.7


def test_one_main_river_gathers_the_side_valleys(ground, gathered):
    """The river on the western rim drains over a quarter of the map; side valleys feed it."""
    assert gathered[:, 0].max() > 0.25 * ground.size * CELL**2
    assert (gathered > 1e6).mean() < 0.02


def test_no_grid_in_the_slopes(gradient, slope):
    """The eight directions of a grid are no more frequent among the aspects than others."""
    east, north = gradient
    aspect = np.degrees(np.arctan2(-east, -north))[slope > 10.0] % 45.0
    count, _ = np.histogram(aspect, bins=9, range=(0.0, 45.0))
    assert count.min() > 0.85 * count.mean()
    assert count.max() < 1.15 * count.mean()


def test_flat_floor_along_the_main_river(ground, slope, gathered):
    """Level ground lies together, low, at the river: at least 2 km2 under 2 degrees."""
    mouth = int(np.argmax(gathered[:, 0]))
    flat = (slope < 2.0) & (ground < 700.0)
    assert flat.sum() * CELL**2 > 2e6
    assert flat[mouth - 10 : mouth + 11, :100].mean() > 0.7


def test_terraces_on_the_sunny_side(ground, gradient, slope):
    """Treads and risers of 10 m crowd the heights of the gentle southern slopes.

    On an untouched slope a height's place within its 10 m step is evenly spread; on terraces
    the treads, in the lower part of each step, hold most of the ground.
    """
    east, north = gradient
    gentle = (slope > 2.0) & (slope < 20.0) & (ground < 900.0)
    south_facing = gentle & (north > 2.0 * np.abs(east))
    north_facing = gentle & (-north > 2.0 * np.abs(east))
    part = ground / 10.0 % 1.0

    def on_treads(where):
        rows, columns = np.nonzero(where)
        kept = (columns > 75) & (columns < 270) & (rows > 150) & (rows < 320)
        return (part[where][kept] < 0.5).mean()

    assert on_treads(south_facing) > on_treads(north_facing) + 0.08


@pytest.mark.heavy
def test_remaking_gives_the_same_heights(ground, tmp_path):
    made = tmp_path / "valley.tif"
    subprocess.run([sys.executable, str(FOLDER / "make_valley.py"), str(made)], check=True)
    with rasterio.open(made) as file:
        np.testing.assert_array_equal(file.read(1), ground)
