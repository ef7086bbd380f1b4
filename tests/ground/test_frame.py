"""Grids that lie where true north cannot be told, or where it is easily told wrong."""

import numpy as np
import pytest
from pyproj import CRS

from terrasol.errors import InputError
from terrasol.ground.frame import POLE_MARGIN, make_frame

ARCTIC = CRS(3995)
"""Polar stereographic; the pole is its origin."""


@pytest.mark.parametrize("crs", ["ESRI:103881", "ESRI:104903"])
def test_moon(crs):
    crs = CRS(crs)
    cell = 0.01 if crs.is_geographic else 300.0
    with pytest.raises(InputError, match="1737 km, which is not the Earth"):
        make_frame((50, 50), (cell, 0, 0, 0, -cell, 0), crs)


@pytest.mark.parametrize("crs", ["EPSG:4326", "EPSG:4807", "EPSG:32632", "ESRI:53004", "EPSG:4047"])
def test_every_figure_of_the_earth(crs):
    """Ellipsoids and spheres of 6370 to 6379 km, and degrees as well as grads."""
    crs = CRS(crs)
    cell, x, y = (0.001, 0.0, 46.0) if crs.is_geographic else (50.0, 5e5, 5.15e6)
    assert min(make_frame((50, 50), (cell, 0, x, 0, -cell, y), crs).cell_size) > 10.0


@pytest.mark.parametrize("cell", [1 / 3600, 0.1, 0.25, 0.5])
@pytest.mark.parametrize("sign", [1, -1])
@pytest.mark.parametrize("beyond", [0.0, 0.5])
def test_degrees_up_to_a_pole(cell, sign, beyond):
    """By their edges, or with the first centres on the pole, as global grids are often made."""
    transform = (cell, 0, 8.0, 0, -sign * cell, sign * (90.0 + beyond * cell))
    with pytest.raises(InputError, match="reaches a pole"):
        make_frame((20, 20), transform, CRS(4326))


def test_degrees_near_a_pole():
    cell, top = 0.001, 90.0 - POLE_MARGIN
    frame = make_frame((20, 20), (cell, 0, 8.0, 0, -cell, top - 1e-9), CRS(4326))
    assert frame.latitude.max() == pytest.approx(top - cell / 2)
    with pytest.raises(InputError, match="reaches a pole"):
        make_frame((20, 20), (cell, 0, 8.0, 0, -cell, top + cell), CRS(4326))


def test_latitudes_that_are_none():
    with pytest.raises(InputError, match="outside the domain"):
        make_frame((20, 20), (0.5, 0, 8.0, 0, -0.5, 91.0), CRS(4326))


@pytest.mark.parametrize("turned", [False, True])
def test_pole_between_the_nodes_of_a_wide_lattice(turned):
    """Nodes lie 62 km apart, the pole 31 km from four of them."""
    size, cell = 40_001, 100.0
    half = size * cell / 2
    transform = (0, cell, -half, cell, 0, -half) if turned else (cell, 0, -half, 0, -cell, half)
    shift = np.array([0, 0, 31e3, 0, 0, 31e3])
    with pytest.raises(InputError, match="reaches a pole"):
        make_frame((size, size), tuple(np.add(transform, shift)), ARCTIC)
    far = tuple(np.add(transform, (0, 0, 2 * half, 0, 0, 0)))
    assert make_frame((size, size), far, ARCTIC).latitude.max() < 90.0 - POLE_MARGIN


def test_rotated_pole():
    """The equator of a rotated pole at 39.25 N, 162 W crosses 18 E at 90 - 39.25 N.

    By spherical trigonometry: the origin of the rotated grid lies 90 degrees from its pole, on
    the pole's own meridian. On that meridian both norths agree.
    """
    crs = CRS.from_cf(
        {
            "grid_mapping_name": "rotated_latitude_longitude",
            "grid_north_pole_latitude": 39.25,
            "grid_north_pole_longitude": -162.0,
        }
    )
    frame = make_frame((101, 101), (0.001, 0, -0.0505, 0, -0.001, 0.0505), crs)
    assert frame.centre == pytest.approx((50.75, 18.0), abs=1e-6)
    middle = frame.jacobian_at(50, 50)
    assert np.degrees(np.arctan2(-middle[0, 1], -middle[1, 1])) == pytest.approx(0.0, abs=1e-3)
