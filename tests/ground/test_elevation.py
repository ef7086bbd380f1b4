"""The elevation model in memory."""

import numpy as np
import pytest
import xarray as xr

from terrasol import Elevation, InputError, SettingError

UTM = "EPSG:32632"


def labelled(y, x):
    return xr.DataArray(np.add.outer(np.asarray(y), np.asarray(x)), {"y": y, "x": x}, ("y", "x"))


def test_labelled_arrays_are_the_same_ground_whichever_way_they_run():
    north_up = labelled(60.0 - 20.0 * np.arange(4), 10.0 + 5.0 * np.arange(3))
    ground = Elevation.from_xarray(north_up, UTM)
    assert ground.transform == (5.0, 0.0, 7.5, 0.0, -20.0, 70.0)
    south_up = Elevation.from_xarray(north_up[::-1], UTM)
    assert south_up.transform == (5.0, 0.0, 7.5, 0.0, 20.0, -10.0)
    assert np.array_equal(south_up.heights, ground.heights[::-1])


@pytest.mark.parametrize("y", [[0.0, 1.0, 3.0], [0.0, 0.0, 0.0]])
def test_uneven_coordinates_are_refused(y):
    with pytest.raises(InputError, match="evenly spaced"):
        Elevation.from_xarray(labelled(y, [0.0, 1.0, 2.0]), UTM)


def test_missing_coordinates_and_dimensions_are_refused():
    with pytest.raises(InputError, match="evenly spaced"):
        Elevation.from_xarray(xr.DataArray(np.zeros((3, 3)), dims=("y", "x")), UTM)
    with pytest.raises(InputError, match="two dimensions"):
        Elevation.from_xarray(xr.DataArray(np.zeros((3, 3, 3)), dims=("t", "y", "x")), UTM)


@pytest.mark.parametrize(("unit", "metres"), [("foot", 0.3048), ("US survey foot", 1200 / 3937)])
def test_feet_are_those_of_their_definition(unit, metres):
    # international foot 0.3048 m exactly; US survey foot 1200/3937 m (EPSG 9002, 9003)
    heights = np.full((2, 2), 10_000.0)
    ground = Elevation.from_array(heights, (1, 0, 0, 0, -1, 0), UTM, vertical_unit=unit)
    assert ground.heights[0, 0] == np.float32(10_000.0 * metres)


def test_masked_and_infinite_cells_are_void():
    heights = np.ma.masked_equal(np.array([[1.0, -99.0], [np.inf, 2.0]]), -99.0)
    ground = Elevation.from_array(heights, (1, 0, 0, 0, -1, 0), UTM)
    assert np.isnan(ground.heights).tolist() == [[False, True], [True, False]]


@pytest.mark.parametrize(
    ("change", "error", "words"),
    [
        ({"vertical_unit": "fathom"}, SettingError, "fathom"),
        ({"crs": "nonsense"}, InputError, "CRS"),
        ({"crs": "EPSG:4978"}, InputError, "neither projected nor geographic"),
        ({"transform": (0, 0, 0, 0, -1, 0)}, InputError, "no area"),
        ({"heights": np.full((3, 3), np.nan)}, InputError, "void"),
        ({"heights": np.zeros((1, 9))}, InputError, "at least 2"),
    ],
)
def test_what_is_no_ground_is_refused(change, error, words):
    given = {"heights": np.zeros((3, 3)), "transform": (1, 0, 0, 0, -1, 0), "crs": UTM} | change
    unit = given.pop("vertical_unit", "metre")
    with pytest.raises(error, match=words):
        Elevation.from_array(**given, vertical_unit=unit)
