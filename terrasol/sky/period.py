"""The stretch of time that is summed, in local mean solar time."""

import re
from dataclasses import dataclass
from datetime import date, timedelta
from numbers import Integral
from typing import Final

import numpy as np

from terrasol.errors import SettingError

TYPICAL_SUN_YEAR: Final = 2025
"""Whose sun a typical year has. The leap-day cycle moves the equinoxes by up to 18 hours
between years; those of 2025 lie within three hours of the mean of 2024 to 2027."""

FIRST_YEAR: Final = 1900
LAST_YEAR: Final = 2100
LONGEST_YEARS: Final = 10

_FORMS = "a year (2025), a month (2025-04), a day (2025-04-01) or two of these joined by a slash"


@dataclass(frozen=True)
class Period:
    """Whole days of one place, from midnight to midnight of local mean solar time.

    Local mean solar time is UTC + longitude / 15 h. It differs from civil time by the
    time zone's and summer time's offset, and makes each day hold one whole passage of
    the sun wherever on the globe the place lies.

    Attributes
    ----------
    label : str
        What was asked for, in its shortest form: "typical year", "2025", "2025-04",
        "2025-04-01" or "2025-04-01/2025-10-31".
    start, end : numpy.datetime64
        First instant and the instant after the last, unit s, local mean solar time.
    months : tuple of (int, int)
        (year, month) of every calendar month touched, in order.
    typical : bool
        True for the typical year of 365 days.
    whole_year : bool
        True when the period is exactly one calendar year.
    """

    label: str
    start: np.datetime64
    end: np.datetime64
    months: tuple[tuple[int, int], ...]
    typical: bool
    whole_year: bool

    @property
    def days(self) -> int:
        """Number of days in the period."""
        return int((self.end - self.start) // np.timedelta64(1, "D"))

    @property
    def month_days(self) -> tuple[int, ...]:
        """Days of each of its months that lie in the period.

        Examples
        --------
        >>> parse_period("2024-01-30/2024-03-02").month_days
        (2, 29, 2)
        """
        days = np.arange(self.start, self.end, np.timedelta64(1, "D")).astype("M8[M]")
        return tuple(int(count) for count in np.unique(days, return_counts=True)[1])

    def record(self) -> dict[str, str]:
        """As plain text, ready for JSON."""
        return {
            "label": self.label,
            "start": str(self.start),
            "end": str(self.end),
            "clock": "local mean solar time",
        }


def parse_period(text: str | int | None) -> Period:
    """Read a period as a person writes it.

    Parameters
    ----------
    text : str, int or None
        None or "typical" for a typical year; "2025" or 2025, "2025-04", "2025-04-01"; or a first
        and a last one of these, both included: "2025-04-01/2025-10-31".

    Returns
    -------
    Period

    Raises
    ------
    SettingError
        If the text is malformed, reversed, outside the years 1900 to 2100, or longer
        than ten years.

    Examples
    --------
    >>> parse_period("2024-02").days
    29
    >>> parse_period("2025-04-01/2025-10-31").months[-1]
    (2025, 10)
    >>> parse_period(None).label
    'typical year'
    """
    if isinstance(text, Integral) and not isinstance(text, bool):
        text = str(text)
    if not isinstance(text, str | None):
        raise SettingError(f"period {text!r} is no text; write {_FORMS}")
    if text is None or text.strip().lower() == "typical":
        first, after = _parse_one(str(TYPICAL_SUN_YEAR), "typical")
        return _period("typical year", first, after, typical=True)
    text = text.strip()
    parts = text.split("/")
    if len(parts) > 2:
        raise SettingError(f"period {text!r} has more than two ends; write {_FORMS}")
    first, _ = _parse_one(parts[0], text)
    _, after = _parse_one(parts[-1], text)
    if after <= first:
        raise SettingError(f"period {text!r} ends before it starts; put the earlier date first")
    if (after.year - LONGEST_YEARS, after.month, after.day) > (first.year, first.month, first.day):
        raise SettingError(
            f"period {text!r} is longer than {LONGEST_YEARS} years; ask for it in parts"
        )
    label = parts[0].strip() if len(parts) == 1 else f"{first}/{after - timedelta(days=1)}"
    return _period(label, first, after, typical=False)


def _parse_one(part: str, text: str) -> tuple[date, date]:
    """First day of a written year, month or day, and the day after its last."""
    match = re.fullmatch(r"(\d{4})(?:-(\d{2})(?:-(\d{2}))?)?", part.strip(), flags=re.ASCII)
    if not match:
        raise SettingError(f"period {text!r} is not understood; write {_FORMS}")
    year, month, day = (int(group or 0) for group in match.groups())
    if not FIRST_YEAR <= year <= LAST_YEAR:
        raise SettingError(
            f"period {text!r} leaves the years {FIRST_YEAR} to {LAST_YEAR}; choose a year within"
        )
    try:
        first = date(year, month if match[2] else 1, day if match[3] else 1)
    except ValueError:
        raise SettingError(
            f"period {text!r} holds a date that no calendar has; write {_FORMS}"
        ) from None
    if match[3]:
        return first, first + timedelta(days=1)
    if match[2]:
        return first, date(year + month // 12, month % 12 + 1, 1)
    return first, date(year + 1, 1, 1)


def _period(label: str, first: date, after: date, typical: bool) -> Period:
    last = after - timedelta(days=1)
    count = (last.year - first.year) * 12 + last.month - first.month + 1
    months = tuple(
        (first.year + (first.month - 1 + i) // 12, (first.month - 1 + i) % 12 + 1)
        for i in range(count)
    )
    return Period(
        label=label,
        start=np.datetime64(first, "s"),
        end=np.datetime64(after, "s"),
        months=months,
        typical=typical,
        whole_year=(first, after) == (date(first.year, 1, 1), date(first.year + 1, 1, 1)),
    )
