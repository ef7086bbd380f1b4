"""The horizon with the sun's paths: where the names of days stand."""

from datetime import date

from terrasol.light.days import parse_clock
from terrasol.show import skyline
from terrasol.show.page import Page
from terrasol.show.skyline import tracks_of


class Place:
    """A panel of 600 by 200 pixels that is 360 degrees wide and 90 high."""

    x, y, width, height, tick = 0.0, 0.0, 600.0, 200.0, 12.0

    def __init__(self):
        self.page = Page(600, 200)

    def place(self, azimuth, elevation):
        return (azimuth + 180.0) * 600.0 / 360.0, 200.0 - elevation * 200.0 / 90.0


def test_names_of_days_with_near_paths_stand_side_by_side():
    paths = tracks_of(-36.0, 147.0, 500.0, parse_clock("solar"), 2025, [date(2025, 1, 10)])
    panel, before, found = Place(), None, []
    for path in paths:
        before = skyline._name(panel, path, 0.0, before)
        found.append(before)
    tick = panel.tick
    for k, (x, half, y) in enumerate(found):
        for other_x, other_half, other_y in found[:k]:
            apart = abs(x - other_x) > half + other_half - 2.0 * tick
            assert apart or abs(y - other_y) > 1.2 * tick
