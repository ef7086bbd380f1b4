"""One place, or two side by side, as text that a grower can read."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date
from typing import Final

import numpy as np

from terrasol.engine.comparison import place_words
from terrasol.engine.outputs import MONTH_NAMES, basis_words, month_labels
from terrasol.engine.site import BOUNDS, CHOSEN_DAY, INTERVAL, Site
from terrasol.practice.limits import PLACE
from terrasol.practice.season import growing_season

DIRECTIONS: Final = (
    "north", "north-north-east", "north-east", "east-north-east",
    "east", "east-south-east", "south-east", "south-south-east",
    "south", "south-south-west", "south-west", "west-south-west",
    "west", "west-north-west", "north-west", "north-north-west",
)  # fmt: skip

SKIES: Final = {
    "clear": "potential (clear sky)",
    "measured": "under the measured sky",
    "monthly index": "under a sky of monthly clear-sky indices",
}
"""How energy under each kind of sky is called."""

ALL_DAY: Final = 24.0 - 1.0 / 60.0
"""Hours of sun above which it does not set."""

LOST: Final = "*"
"""Mark of a last sun before which the sun is lost and comes again."""

Row = tuple[str, str]


def direction(azimuth: float) -> str:
    """One of sixteen directions in words.

    Examples
    --------
    >>> direction(181.0), direction(349.0)
    ('south', 'north')
    """
    return DIRECTIONS[round(azimuth / 22.5) % 16]


def clock_time(hours: float) -> str:
    """Hours and minutes; past midnight with the day told; ``-`` for none.

    Examples
    --------
    >>> clock_time(9.7233), clock_time(24.5), clock_time(float("nan"))
    ('9:43', '0:30 +1 d', '-')
    """
    if not np.isfinite(hours):
        return "-"
    minutes = round(hours * 60.0)
    day, rest = divmod(minutes, 1440)
    if (day, rest) == (1, 0):
        return "24:00"
    return f"{rest // 60}:{rest % 60:02d}" + (f" {day:+d} d" if day else "")


def plus_minus(site: Site, name: str, digits: int) -> str:
    """The standard error of a quantity behind its value, or nothing."""
    if site.errors is None or not np.isfinite(site.errors[name].standard_error):
        return ""
    return f" ± {float(site.errors[name].standard_error):.{digits}f}"


def place_text(site: Site) -> str:
    """Name, latitude and longitude."""
    where = place_words(site.latitude, site.longitude, 5)
    return f"{site.name}: {where}" if site.name else where


def facts(site: Site) -> list[Row]:
    """What the place is and gets, in words and numbers."""
    energy, sun = site.energy, site.sun
    unit = energy.settings.unit
    across, down = site.cell_size
    high, towards = site.highest
    share = 100.0 * energy.total / energy.level_total if energy.level_total else np.nan
    rows = [
        ("height", f"{site.height:.0f} m, of a cell of {across:.3g} x {down:.3g} m"),
        ("slope", slope_text(site)),
        ("aspect", aspect_text(site)),
        ("sky view", f"{site.sky_view:.2f} of an even sky's light"),
        ("horizon", f"at most {high:.0f} degrees, towards {direction(towards)}"),
        (
            "energy",
            f"{energy.total:.0f}{plus_minus(site, 'global', 0)} {unit}, {share:.0f} % of level"
            f" ground ({energy.level_total:.0f})",
        ),
        *_season(site),
        (
            "direct sun",
            f"{sun.hours.sum():.0f} h a year if no cloud came; level ground"
            f" {sun.level[2].sum():.0f} h",
        ),
    ]
    dark = int((sun.hours == 0.0).sum())
    if dark:
        rows.append(("no sun", dark_text(site)))
    return rows


def slope_text(site: Site) -> str:
    """Slope in degrees and percent, with its standard error."""
    words = f"{site.slope:.1f}{plus_minus(site, 'slope', 1)} degrees"
    if site.errors is None:
        return f"{words} = {site.slope_percent:.0f} %"
    # d tan(s) = ds / cos(s)^2
    error = float(site.errors["slope"].standard_error)
    percent = 100.0 * np.radians(error) / np.cos(np.radians(site.slope)) ** 2
    digits = 0 if percent >= 0.5 else 1  # an error that rounds to none says too much
    return f"{words} = {site.slope_percent:.{digits}f} ± {percent:.{digits}f} %"


def aspect_text(site: Site) -> str:
    """Where the ground faces."""
    if not np.isfinite(site.aspect):
        return "flat"
    return f"{direction(site.aspect)}, {site.aspect:.0f}{plus_minus(site, 'aspect', 0)} degrees"


def dark_text(site: Site) -> str:
    """Days without direct sun, and when."""
    none = site.sun.hours == 0.0
    days = site.sun.days
    count = int(none.sum())
    if count == len(days):
        return "all year"
    # The runs of the ring that a year is: each begins where the day before has sun.
    begins = np.flatnonzero(none & ~np.roll(none, 1))
    ends = np.flatnonzero(none & ~np.roll(none, -1))
    ends = ends if ends[0] >= begins[0] else np.roll(ends, -1)
    spans = [f"{_day(days[a])} to {_day(days[b])}" for a, b in zip(begins, ends, strict=True)]
    return f"{count} days without direct sun" + (f": {spans[0]}" if len(spans) == 1 else "")


def _day(day: date) -> str:
    return f"{day.day} {MONTH_NAMES[day.month - 1]}"


def _season(site: Site) -> list[Row]:
    """Energy of the growing season, if its months are all there."""
    energy, months = site.energy, growing_season(site.latitude)
    period = energy.settings.period
    if not period.whole_year:
        return []
    these = np.array([month in months for _, month in period.months])
    here, level = (float(each[:, these].sum()) for each in (energy.place, energy.level))
    first, last = (MONTH_NAMES[months[k] - 1] for k in (0, -1))
    share = 100.0 * here / level if level else np.nan
    words = f"{first} to {last} {here:.0f} {energy.settings.unit}, {share:.0f} % of level ground"
    return [("", f"{words} ({level:.0f})")]


def energy_words(site: Site) -> str:
    """What the energy is: sky, basis, period."""
    settings = site.energy.settings
    record = site.energy.record()
    return f"{SKIES[record['sky']]}, {basis_words(settings)}, {settings.period.label}"


def error_words(site: Site) -> list[str]:
    """Intervals of what the error of the heights leaves open."""
    if site.errors is None:
        return []
    told = []
    for name, unit in (("slope", "degrees"), ("global", site.energy.settings.unit)):
        low, high = site.errors[name].interval(INTERVAL, BOUNDS[name])
        digits = 1 if name == "slope" else 0
        words = "energy" if name == "global" else name
        told.append(f"{words} {float(low):.{digits}f} to {float(high):.{digits}f} {unit}")
    count = int(site.errors["slope"].count)
    return [f"{100 * INTERVAL:.0f} % intervals from {count} likely grounds: {', '.join(told)}"]


def month_rows(site: Site) -> list[tuple[str, ...]]:
    """One row a month: name, energy, level ground, percent of it, sun a day, first sun, last sun.

    Sun is that of the calendar month in a typical year.
    """
    energy, sun = site.energy, site.sun
    here, level = energy.place.sum(axis=0), energy.level.sum(axis=0)
    rows: list[tuple[str, ...]] = []
    for k, (label, (_, month)) in enumerate(
        zip(month_labels(energy.settings), energy.settings.period.months, strict=True)
    ):
        day = sun.on(month, CHOSEN_DAY)
        share = f"{100.0 * here[k] / level[k]:.0f}" if level[k] >= 0.5 else "-"
        ends = clock_time(sun.first[day]), clock_time(sun.last[day])
        if sun.hours[day] > ALL_DAY:
            ends = "-", "all day"
        elif sun.interruptions[day] > 0:
            ends = ends[0], ends[1] + LOST
        rows.append(
            (
                label,
                f"{here[k]:.0f}",
                f"{level[k]:.0f}",
                share,
                f"{sun.mean_hours(month)[0]:.1f}",
                *ends,
            )
        )
    return rows


def lost_words(sites: Sequence[Site]) -> list[str]:
    """What the mark of a lost sun means, where there is one."""
    marked = any(LOST in row[-1] for site in sites for row in month_rows(site))
    return [f"{LOST} lost in between for a minute or longer"] if marked else []


def month_head(site: Site) -> tuple[str, ...]:
    """Heads of `month_rows`."""
    return (
        "", site.energy.settings.unit, "level", "% of level", "sun h/day", "first", "last",
    )  # fmt: skip


def day_rows(site: Site, days: Sequence[date]) -> list[Row]:
    """First and last sun and hours of sun on each of some dates."""
    sun = site.sun
    rows = []
    for day in days:
        k = sun.day_of(day)
        here = _sun_words(sun.first[k], sun.last[k], sun.hours[k])
        rows.append((_day(day), f"sun {here}; level ground {_sun_words(*sun.level[:, k])}"))
    return rows


def _sun_words(first: float, last: float, hours: float) -> str:
    """First and last sun of a day, and how long it shines in all."""
    if not hours > 0.0:
        return "at no time"
    if hours > ALL_DAY:
        return "all day"
    return f"from {clock_time(first)} to {clock_time(last)}, {hours:.1f} h"


def site_text(sites: Sequence[Site], notes: Sequence[str], days: Sequence[date] = ()) -> str:
    """One place as a block of text; two as one table with a column each.

    Parameters
    ----------
    sites : sequence of Site
        One or two.
    notes : sequence of str
        What a careful reader should know, at the end.
    days : sequence of date
        Dates whose sun is told too.

    Returns
    -------
    str
    """
    clock = sites[0].sun.clock
    lines = [_one(sites[0], days)] if len(sites) == 1 else [_two(sites, days)]
    lines += [
        f"energy is {energy_words(sites[0])}; level ground is at the same place and height, under"
        " an open sky",
        f"first and last sun on the {CHOSEN_DAY}st by {clock.words}; sun h/day is the mean of the"
        " month, clouds or not",
        *lost_words(sites),
        *(
            f"{site.name + ': ' if site.name else ''}{words}"
            for site in sites
            for words in error_words(site)
        ),
        *notes,
        PLACE,
    ]
    return "\n".join(lines)


def _one(site: Site, days: Sequence[date]) -> str:
    rows = [*facts(site), *day_rows(site, days)]
    width = max(11, *(len(name) for name, _ in rows))
    rows = [(f"{name:<{width}}", text) for name, text in rows]
    lines = [place_text(site), *(f"{name} {text}" for name, text in rows), ""]
    return "\n".join([*lines, *_table([month_head(site), *month_rows(site)]), ""])


def _table(rows: Sequence[Sequence[str]]) -> list[str]:
    """Columns as wide as they need, the first to the left."""
    widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
    return [
        "  ".join(
            f"{cell:<{width}}" if k == 0 else f"{cell:>{width}}"
            for k, (cell, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in rows
    ]


def _two(sites: Sequence[Site], days: Sequence[date]) -> str:
    """Two places beside each other, with the difference of their energy."""
    one, other = sites
    names = [place_text(site) for site in sites]
    both = [dict(enumerate(facts(site))) for site in sites]
    rows = [("", *names)]
    count = max(len(each) for each in both)
    for k in range(count):
        pair = [each.get(k, ("", "-")) for each in both]
        rows.append((pair[0][0] or pair[1][0], pair[0][1], pair[1][1]))
    of_days = zip(day_rows(one, days), day_rows(other, days), strict=True)
    rows += [(name, here, there) for (name, here), (_, there) in of_days]
    head = [
        ("", "here", "there", "there", "sun", "sun", "first", "first", "last", "last"),
        ("", one.energy.settings.unit, "", "- here", "here", "there", *(("here", "there") * 2)),
    ]
    table = []
    for a, b in zip(month_rows(one), month_rows(other), strict=True):
        difference = float(b[1]) - float(a[1])
        table.append((a[0], a[1], b[1], f"{difference:+.0f}", a[4], b[4], a[5], b[5], a[6], b[6]))
    return "\n".join([*_left_table(rows), "", *_table([*head, *table]), ""])


def _left_table(rows: Sequence[Sequence[str]]) -> list[str]:
    """All columns to the left."""
    widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
    return [
        "  ".join(f"{cell:<{width}}" for cell, width in zip(row, widths, strict=True)).rstrip()
        for row in rows
    ]
