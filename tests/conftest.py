"""What several test folders share.

Puts tests/reference in reach as `reference`, whatever the import mode.
"""

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent))


@pytest.fixture(scope="session")
def metric_ground():
    """Make an elevation model of metric cells whose north is true north.

    Call it with heights (row 0 in the north), the cell's size or sizes (x, y) in metres and,
    if it matters, latitude and longitude of the middle. The CRS is a transverse Mercator
    projection of scale 1 about that very place: in its middle column north is exact.
    """
    from terrasol import Elevation

    def build(heights, cell, latitude=46.0, longitude=9.0):
        cell_x, cell_y = np.broadcast_to(cell, 2).astype(float)
        rows, columns = np.shape(heights)
        crs = f"+proj=tmerc +lat_0={latitude} +lon_0={longitude} +k=1 +datum=WGS84 +units=m"
        transform = (cell_x, 0, -cell_x * columns / 2, 0, -cell_y, cell_y * rows / 2)
        return Elevation.from_array(heights, transform, crs)

    return build
