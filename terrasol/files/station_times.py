"""Times of a station file: what is written becomes UTC, on an even grid."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Final
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from terrasol.errors import InputError
from terrasol.files.station_settings import interval_seconds

FIRST_YEAR: Final = 1900

WRITTEN: Final = "written"
"""The zone's name where every time carries its own offset."""

_OFFSET: Final = r"(Z|[+-]\d{2}:?\d{2})$"

Moments = NDArray[np.datetime64]


@dataclass(frozen=True, eq=False)
class Grid:
    """Where the rows of a file stand on an even grid of intervals.

    Attributes
    ----------
    start : (n,) datetime64[s]
        Beginning of every interval, UTC, those without a row included.
    seconds : int
    place : (rows,) int64
        Which interval each row fills.
    notes : tuple of str
        For people.
    """

    start: Moments
    seconds: int
    place: NDArray[np.int64]
    notes: tuple[str, ...]


class Rows:
    """Names a row of a file for messages."""

    def __init__(self, lines: Sequence[int] | None = None) -> None:
        self.lines = lines

    def __call__(self, row: int) -> str:
        """Line of a text file, or number of an entry, first 1."""
        return f"entry {row + 1}" if self.lines is None else f"line {self.lines[row]}"


def parse_times(texts: Sequence[str], form: str | None, zone: str, row: Rows) -> Moments:
    """Read written times and turn them into UTC.

    Parameters
    ----------
    texts : sequence of str
    form : str or None
        As of Python's strptime; ISO 8601 by default. An hour of 24 is the next day's 0.
    zone : str
        "UTC", an offset as "+01:00", an IANA name, or "written".
    row : Rows

    Returns
    -------
    ndarray of datetime64[s]

    Raises
    ------
    InputError
        Naming the line of a time that is none, or a zone that will not do.
    """
    series = pd.Series(list(texts), dtype=object).str.strip()
    late = series.str.contains(r"(?:^|[T ])24:00(?::00)?$", regex=True)
    if late.any():
        series = series.str.replace(r"24:00((?::00)?)$", r"00:00\1", regex=True)
    try:
        parsed = pd.to_datetime(series, format=form or "ISO8601", utc=True, errors="coerce")
    except ValueError as error:
        raise InputError(f"the time format {form!r} will not do ({error})") from error
    bad = np.flatnonzero(parsed.isna().to_numpy())
    if bad.size:
        raise InputError(
            f"{row(bad[0])}: {texts[bad[0]]!r} is no time as {form or 'ISO 8601'} writes it; give"
            ' the format under [time], as "%d.%m.%Y %H:%M"'
        )
    moments = parsed.dt.tz_localize(None).to_numpy().astype("M8[s]")
    moments = moments + np.where(late.to_numpy(bool), 86400, 0).astype("m8[s]")
    own = series.str.contains(_OFFSET.replace("(", "(?:"), regex=True).to_numpy(bool)
    if form is not None:
        own = own & ("%z" in form)
    else:
        own = own & series.str.contains(r"\d[T ]\d", regex=True).to_numpy(bool)
    return _own_offsets(moments, own, texts, zone, row)


def join_parts(parts: dict[str, NDArray[np.float64]], zone: str, row: Rows) -> Moments:
    """Put years, months, days or days of the year, hours and minutes together, in UTC.

    Raises
    ------
    InputError
        Naming the line of a part that no calendar or clock has.
    """
    limits = {"year": (FIRST_YEAR, 2200), "month": (1, 12), "day": (1, 31),
              "day_of_year": (1, 366), "hour": (0, 24), "minute": (0, 60)}  # fmt: skip
    for name, values in parts.items():
        low, high = limits[name]
        whole = (values == np.round(values)) | (name == "hour")
        bad = np.flatnonzero(~(whole & (values >= low) & (values <= high)))
        if bad.size:
            raise InputError(
                f"{row(bad[0])}: {values[bad[0]]:g} is no {name.replace('_', ' ')}; it must be"
                f" {low} to {high}"
            )
    year = (parts["year"].astype(np.int64) - 1970).astype("M8[Y]")
    if "day_of_year" in parts:
        day = year.astype("M8[D]") + (parts["day_of_year"].astype(np.int64) - 1).astype("m8[D]")
        kept = day.astype("M8[Y]") == year
    else:
        month = year.astype("M8[M]") + (parts["month"].astype(np.int64) - 1).astype("m8[M]")
        day = month.astype("M8[D]") + (parts["day"].astype(np.int64) - 1).astype("m8[D]")
        kept = day.astype("M8[M]") == month
    bad = np.flatnonzero(~kept)
    if bad.size:
        raise InputError(f"{row(bad[0])}: no calendar has this day; mend the row")
    seconds = np.zeros(day.size)
    for name, length in (("hour", 3600.0), ("minute", 60.0)):
        if name in parts:
            seconds += parts[name] * length
    return to_utc(day.astype("M8[s]") + np.round(seconds).astype("m8[s]"), zone)


def to_utc(moments: Moments, zone: str) -> Moments:
    """Take the zone's offset off; refuse one that changed its clock within the series.

    Raises
    ------
    InputError
        An unknown zone, or one with daylight saving in the series' span.
    """
    fixed = re.fullmatch(r"(?:UTC|GMT)?([+-])(\d{1,2})(?::?([0-5]\d))?", zone.strip())
    if fixed:
        sign, hours, minutes = fixed[1], int(fixed[2]), int(fixed[3] or 0)
        if hours > 14:
            raise InputError(f'zone {zone!r} is further from UTC than any; write it as "+01:00"')
        offset = (hours * 3600 + minutes * 60) * (1 if sign == "+" else -1)
        return moments - np.timedelta64(offset, "s")
    if zone.strip().upper() in ("UTC", "Z", "GMT"):
        return moments
    try:
        named = ZoneInfo(zone.strip())
    except (KeyError, ValueError, OSError):
        raise InputError(
            f'zone {zone!r} is not known; write "UTC", an offset as "+01:00", or a name as'
            ' "America/Bogota"'
        ) from None
    span = np.arange(moments.min() - 86400, moments.max() + 2 * 86400, np.timedelta64(1, "D"))
    offsets = {named.utcoffset(day.astype("M8[s]").item()) for day in span}
    seconds = sorted(offset.total_seconds() for offset in offsets if offset is not None)
    if len(seconds) > 1:
        first, last = (_offset_words(value) for value in (seconds[0], seconds[-1]))
        raise InputError(
            f"zone {zone!r} changes its clock within the series, between {first} and {last}: with"
            " daylight saving an hour of autumn comes twice and one of spring never, and no one can"
            f' tell which is which. If the clock was never changed, write zone = "{first}"; if it'
            " was, put the times into UTC first"
        )
    return moments - np.timedelta64(round(seconds[0]), "s")


def even_grid(moments: Moments, label: str, interval: int | float | str | None, row: Rows) -> Grid:
    """Order rows on an even grid; what is between them becomes a gap.

    Parameters
    ----------
    moments : ndarray of datetime64[s]
        As labelled, UTC.
    label : {'start', 'middle', 'end'}
    interval : int, float, str or None
        Length; the most common step by default.
    row : Rows

    Raises
    ------
    InputError
        Times that are unsorted, double, in the future, off the grid, or under a day in all.
    """
    _check_order(moments, row)
    if moments.size < 2:
        raise InputError("one time is no series; a day at least is needed")
    steps = np.diff(moments).astype(np.int64)
    notes = []
    if interval is None:
        lengths, counts = np.unique(steps, return_counts=True)
        seconds = int(lengths[np.argmax(counts)])
        if 2 * counts.max() <= steps.size:
            notes.append(
                f"the interval is taken as {seconds} s, the most common step, but only"
                f" {counts.max()} of {steps.size} are so long: state it"
            )
    else:
        seconds = interval_seconds(interval)
    if seconds > 86400:
        raise InputError(f"intervals of {seconds / 86400:g} days hold no sun's path; a day at most")
    off = np.flatnonzero(steps % seconds)
    if off.size:
        raise InputError(
            f"{row(off[0] + 1)}: {moments[off[0] + 1]} UTC comes {steps[off[0]]} s after the time"
            f" before it, which is no multiple of the interval of {seconds} s: the steps are"
            " irregular. State the true interval, or put the series on an even grid first"
        )
    place = (moments - moments[0]).astype(np.int64) // seconds
    count = int(place[-1]) + 1
    if count * seconds < 86400:
        raise InputError(
            f"the series is {count * seconds / 3600:g} h long; a day at least is needed"
        )
    if label == "middle" and seconds % 2:
        raise InputError(f"an interval of {seconds} s has no whole second in its middle")
    back = {"start": 0, "middle": seconds // 2, "end": seconds}[label]
    start = moments[0] - back + np.arange(count) * np.timedelta64(seconds, "s")
    if count > moments.size:
        notes.append(f"{count - moments.size} of {count} intervals have no row: missing")
    return Grid(start.astype("M8[s]"), seconds, place, tuple(notes))


def _check_order(moments: Moments, row: Rows) -> None:
    """Refuse times before 1900, in the future, unsorted or double."""
    now = np.datetime64(datetime.now(UTC).replace(tzinfo=None), "s")
    early = np.flatnonzero(moments < np.datetime64(str(FIRST_YEAR), "s"))
    late = np.flatnonzero(moments > now + np.timedelta64(1, "D"))
    for found, words in ((early, f"before {FIRST_YEAR}"), (late, "in the future")):
        if found.size:
            raise InputError(
                f"{row(found[0])}: {moments[found[0]]} UTC is {words}, so no one measured it; mend"
                " the times, or the time's format"
            )
    steps = np.diff(moments).astype(np.int64)
    bad = np.flatnonzero(steps <= 0)
    if bad.size == 0:
        return
    before, after = moments[bad[0]], moments[bad[0] + 1]
    if before == after:
        raise InputError(
            f"{row(bad[0] + 1)}: {after} UTC comes twice; keep one of the rows (an hour twice in"
            " autumn is daylight saving left in the times)"
        )
    raise InputError(
        f"{row(bad[0] + 1)}: {after} UTC comes after {before}; sort the rows by time, or see if the"
        " format mixes up day and month"
    )


def _own_offsets(
    moments: Moments, own: NDArray[np.bool_], texts: Sequence[str], zone: str, row: Rows
) -> Moments:
    """Use offsets that the times carry, if the stated zone agrees."""
    if zone == WRITTEN:
        bare = np.flatnonzero(~own)
        if bare.size:
            raise InputError(
                f"{row(bare[0])}: {texts[bare[0]]!r} carries no offset from UTC, and the zone is"
                f" said to be {WRITTEN!r}; state the zone"
            )
        return moments
    if not own.any():
        return to_utc(moments, zone)
    ends = pd.Series(list(texts), dtype=object).str.strip().str.extract(_OFFSET, expand=False)
    offset = ends.where(own, "Z").map(_offset_seconds).to_numpy("m8[s]")
    other = np.flatnonzero(~own | (to_utc(moments + offset, zone) != moments))
    if other.size:
        raise InputError(
            f"{row(other[0])}: {texts[other[0]]!r} does not carry the offset from UTC of the stated"
            f' zone {zone!r}; write zone = "{WRITTEN}" if every time carries its own'
        )
    return moments


def _offset_seconds(text: str) -> int:
    """Seconds east of UTC, from "Z", "+01:00" or "+0100"."""
    if text == "Z":
        return 0
    size = int(text[1:3]) * 3600 + int(text[-2:]) * 60
    return size if text[0] == "+" else -size


def _offset_words(seconds: float) -> str:
    minutes = round(abs(seconds) / 60.0)
    return f"{'+' if seconds >= 0 else '-'}{minutes // 60:02d}:{minutes % 60:02d}"
