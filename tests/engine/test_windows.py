"""Parts of a raster come out as they would with all of it."""

import numpy as np
import pytest

from terrasol import Air, Elevation, SettingError, parse_period
from terrasol.engine.job import plan_irradiation
from terrasol.engine.plan import Block
from terrasol.engine.windows import collect
from terrasol.light.settings import LightSettings


@pytest.fixture(scope="module")
def plan():
    rng = np.random.default_rng(5)
    rough = rng.normal(size=(300, 520)).cumsum(axis=0).cumsum(axis=1)
    heights = 800.0 + 300.0 * rough / np.abs(rough).max()
    elevation = Elevation.from_array(heights, (30, 0, 5e5, 0, -30, 5.2e6), "EPSG:32632")
    settings = LightSettings(parse_period("2025-03"), Air.ineichen(3.0), azimuths=16)
    return plan_irradiation(elevation, settings)


WINDOWS = [Block(250, 250, 12, 12), Block(2, 3, 5, 4), Block(3, 3, 5, 40), Block(299, 519, 1, 1)]


def test_windows_come_out_as_with_the_whole_raster(plan):
    whole, _ = collect(plan, [Block(0, 0, *plan.elevation.shape)])
    parts, summary = collect(plan, WINDOWS)
    for window, arrays in zip(WINDOWS, parts, strict=True):
        assert set(arrays) == {layer.name for layer in plan.layers}
        rows = slice(window.row, window.row + window.rows)
        columns = slice(window.column, window.column + window.columns)
        for name, values in arrays.items():
            np.testing.assert_array_equal(values, whole[0][name][:, rows, columns])
    assert summary.numbers["cells"] == 300 * 520


def test_only_blocks_that_meet_a_window_are_done(plan):
    seen = []
    collect(plan, WINDOWS[1:3], progress=lambda share, stage: seen.append(stage))
    assert seen.count("blocks") == 1  # of the raster's six


def test_layers_are_chosen(plan):
    arrays, _ = collect(plan, WINDOWS[:1], layers=["slope"])
    assert list(arrays[0]) == ["slope"]
    assert np.isfinite(arrays[0]["slope"]).all()


@pytest.mark.parametrize(
    ("windows", "layers", "words"),
    [
        ([], None, "no window"),
        ([Block(290, 0, 20, 5)], None, "does not lie inside"),
        ([Block(0, -1, 2, 2)], None, "does not lie inside"),
        ([Block(0, 0, 0, 2)], None, "does not lie inside"),
        (WINDOWS, ["melt"], "no layer melt"),
    ],
)
def test_what_cannot_be_collected_is_refused(plan, windows, layers, words):
    with pytest.raises(SettingError, match=words):
        collect(plan, windows, layers=layers)
