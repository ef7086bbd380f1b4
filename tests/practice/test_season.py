"""Growing seasons."""

import pytest

from terrasol import SettingError
from terrasol.practice.season import growing_season, parse_season


def test_hemispheres_are_half_a_year_apart():
    north, south = growing_season(45.0), growing_season(-45.0)
    assert tuple((month + 5) % 12 + 1 for month in north) == south
    assert growing_season(0.0) == north


@pytest.mark.parametrize(
    ("text", "months"),
    [
        ("04-10", tuple(range(4, 11))),
        ("11-2", (11, 12, 1, 2)),
        ("7", (7,)),
        ("03-02", (*range(3, 13), 1, 2)),
    ],
)
def test_read(text, months):
    assert parse_season(text) == months


@pytest.mark.parametrize("text", ["", "0-3", "4-13", "april", "4/10", "4-10-2"])
def test_refused(text):
    with pytest.raises(SettingError, match="04-10"):
        parse_season(text)
