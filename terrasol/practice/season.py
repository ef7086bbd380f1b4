"""The growing season, as months of the year."""

from __future__ import annotations

import re
from typing import Final

from terrasol.errors import SettingError

NORTHERN_SEASON: Final = (4, 5, 6, 7, 8, 9, 10)
SOUTHERN_SEASON: Final = (10, 11, 12, 1, 2, 3, 4)
"""April to October, and October to April: the seven months of Amerine and Winkler (1944) in
either hemisphere."""


def growing_season(latitude: float) -> tuple[int, ...]:
    """Months of the growing season at a latitude [degrees]; the equator counts as north.

    Examples
    --------
    >>> growing_season(-33.0)
    (10, 11, 12, 1, 2, 3, 4)
    """
    return SOUTHERN_SEASON if latitude < 0.0 else NORTHERN_SEASON


def parse_season(text: str) -> tuple[int, ...]:
    """Read a season as a first and a last month, both included; it may pass the new year.

    Raises
    ------
    SettingError
        No such pair of months.

    Examples
    --------
    >>> parse_season("10-04")
    (10, 11, 12, 1, 2, 3, 4)
    >>> parse_season("06")
    (6,)
    """
    match = re.fullmatch(r"\s*(\d{1,2})(?:\s*-\s*(\d{1,2}))?\s*", text, flags=re.ASCII)
    first, last = (int(match[1]), int(match[2] or match[1])) if match else (0, 0)
    if not (1 <= first <= 12 and 1 <= last <= 12):
        raise SettingError(
            f"season {text!r} is not understood: write a first and a last month, such as 04-10, or"
            " 10-04 across the new year"
        )
    count = (last - first) % 12 + 1
    return tuple((first - 1 + i) % 12 + 1 for i in range(count))
