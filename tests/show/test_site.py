"""The sheet and the text of one place: sizes, what is drawn, what is said."""

import io
import re
from dataclasses import replace
from datetime import date
from types import SimpleNamespace

import matplotlib.image
import numpy as np
import pytest
from matplotlib.colors import to_rgb

from terrasol.engine.site import Spot, survey
from terrasol.engine.spread import Spread
from terrasol.light.days import parse_clock
from terrasol.light.minutes import State
from terrasol.light.settings import LightSettings
from terrasol.practice.limits import PLACE
from terrasol.show.page import text_width
from terrasol.show.site import (
    DOTS,
    RIGHT,
    SMALL,
    STATE_COLOURS,
    by_clock,
    page_pdf,
    page_png,
    site_page,
)  # fmt: skip
from terrasol.show.site_text import (
    clock_time,
    dark_text,
    day_rows,
    direction,
    facts,
    month_rows,
    site_text,
)
from terrasol.sky.clear import Air
from terrasol.sky.period import parse_period

LATITUDE, LONGITUDE = 46.0, 9.0


@pytest.fixture(scope="module")
def ground(metric_ground):
    y, x = np.mgrid[0:61, 0:61] - 30.0
    return metric_ground(900.0 + 70.0 * np.sin(x / 6.0) * np.cos(y / 7.0) + 9.0 * y, 30.0)


def surveyed(ground, clock="Europe/Zurich", period=None, count=1):
    settings = LightSettings(parse_period(period), Air.ineichen(3.0), step_seconds=1800.0)
    spots = [Spot(LATITUDE, LONGITUDE, "One place"), Spot(LATITUDE + 0.003, LONGITUDE, "Other")]
    return survey(ground, spots[:count], settings, parse_clock(clock), azimuths=64)


@pytest.fixture(scope="module")
def sites(ground):
    return surveyed(ground, count=2)


@pytest.fixture(scope="module")
def site(sites):
    return sites[0]


def pixels_of(png):
    return matplotlib.image.imread(io.BytesIO(png))[..., :3]


def test_one_place_fills_an_a4_sheet(ground, site):
    """210 by 297 mm: 595 by 842 points, and 200 dots an inch."""
    page = site_page(ground, [site], days=[date(2025, 8, 15)], notes=["A note."], source="x.tif")
    pdf = page_pdf(page, "One place")
    assert pdf.startswith(b"%PDF")
    box = re.search(rb"/MediaBox \[ ?0 0 ([\d.]+) ([\d.]+) ?\]", pdf)
    assert [float(side) for side in box.groups()] == pytest.approx([595.3, 841.9], abs=0.6)
    picture = pixels_of(page_png(page, "One place"))
    assert picture.shape == (1169 * DOTS, 827 * DOTS, 3)


@pytest.mark.heavy
def test_two_places_fill_an_a3_sheet(ground, sites):
    page = site_page(ground, sites)
    assert (page.width, page.height) == (2 * 827, 1169)
    both = pixels_of(page_png(page, "both"))
    left, right = both[:, : 827 * DOTS], both[:, 827 * DOTS :]
    assert (left != right).any()
    for half in (left, right):
        assert half.std() > 0.1


@pytest.mark.heavy
def test_same_content_same_bytes(ground, site):
    first, second = (
        (page_png(page, "t"), page_pdf(page, "t"))
        for page in (site_page(ground, [site]) for _ in range(2))
    )
    assert first == second


def test_the_year_is_drawn_as_it_is(ground, site):
    """Pixels of each colour in the chart against the states: a thin grid lies over it."""
    png = page_png(site_page(ground, [site]), "t")
    found = pixels_of(png)[862 * DOTS : 1022 * DOTS, 80 * DOTS : 781 * DOTS]
    hours = (
        np.ceil(-0.2 + np.nanmin(site.sun.level[0])) - 1.0,
        np.ceil(0.2 + np.nanmax(site.sun.level[1])),
    )
    states = by_clock(site, *hours)
    shares = {}
    for state, colour in STATE_COLOURS.items():
        near = np.abs(found - np.array(to_rgb(colour))).max(axis=-1) < 0.02
        shares[state] = near.mean()
        assert shares[state] == pytest.approx((states == state).mean(), abs=0.05), state
    assert shares[State.SUN] > 0.2
    assert shares[State.TERRAIN] + shares[State.SLOPE] > 0.01


def test_states_by_the_clock(site):
    """Clock less true solar time at 9 E in mid June: 2 h of summer time less 36 min of longitude.

    The equation of time is half a minute then.
    """
    states = by_clock(site, 0.0, 24.0)
    assert states.shape == (1440, 365)
    june = site.sun.on(6, 15)
    row = site.sun.states[june]
    sunny = np.flatnonzero(states[:, june] == State.SUN)
    solar = np.flatnonzero(row == State.SUN)
    assert sunny[0] - solar[0] == pytest.approx(120 - 36, abs=2)
    assert (states == State.SUN).sum() == pytest.approx((site.sun.states == 1).sum(), rel=2e-3)


def test_first_and_last_sun_agree_with_the_chart(site):
    states = by_clock(site, 0.0, 24.0)
    for month in (1, 4, 8, 11):
        day = site.sun.on(month, 21)
        sunny = np.flatnonzero(states[:, day] == State.SUN) / 60.0
        assert sunny[0] == pytest.approx(site.sun.first[day], abs=0.04)
        assert sunny[-1] == pytest.approx(site.sun.last[day], abs=0.04)


def test_text_says_what_the_place_is(site):
    text = site_text([site], ["warning: so it is"])
    assert text.splitlines()[0] == "One place: 46.00000 N 9.00000 E"
    assert f"{site.height:.0f} m, of a cell of 30 x 30 m" in text
    assert f"{site.slope:.1f} degrees = {site.slope_percent:.0f} %" in text
    assert f"{site.energy.total:.0f} MJ m-2" in text
    assert "potential (clear sky), per area of slope, typical year" in text
    assert "April to October" in text
    assert "time of Europe/Zurich" in text
    assert "warning: so it is" in text
    assert text.endswith(PLACE)
    table = [line for line in text.splitlines() if line.startswith(("June", "July"))]
    assert len(table) == 2
    assert clock_time(site.sun.first[site.sun.on(6, 21)]) in table[0]


def test_text_tells_the_sun_of_days_asked_for(site, sites):
    days = date(2025, 8, 15), date(2024, 2, 29)
    sun = site.sun
    k = sun.on(8, 15)
    text = site_text([site], [], days)
    lines = {line[:11].strip(): line for line in text.splitlines()}
    here = f"sun from {clock_time(sun.first[k])} to {clock_time(sun.last[k])}, {sun.hours[k]:.1f} h"
    level = f"level ground from {clock_time(sun.level[0, k])} to {clock_time(sun.level[1, k])}, "
    assert lines["15 August"].startswith(f"15 August   {here}; {level}")
    february = sun.on(2, 28)  # a typical year has no 29th
    assert f"sun from {clock_time(sun.first[february])} to " in lines["29 February"]
    assert "15 August" not in site_text([site], [])
    both = next(line for line in site_text(sites, [], days).splitlines() if "15 August" in line)
    assert both.count("level ground") == 2


def test_days_without_sun_and_without_night_are_told_in_words():
    sun = SimpleNamespace(
        day_of=lambda day: 0, first=np.array([np.nan]), last=np.array([np.nan]),
        hours=np.array([0.0]), level=np.array([[0.0], [24.0], [24.0]]),
    )  # fmt: skip
    rows = day_rows(SimpleNamespace(sun=sun), [date(2025, 6, 21)])
    assert rows == [("21 June", "sun at no time; level ground all day")]


def test_text_of_two_places_tells_the_difference(sites):
    text = site_text(sites, [])
    june = next(line for line in text.splitlines() if line.startswith("June")).split()
    one, other = (site.energy.place[:, 5].sum() for site in sites)
    assert june[1:3] == [f"{one:.0f}", f"{other:.0f}"]
    assert float(june[3]) == pytest.approx(other - one, abs=1.0)


def test_errors_stand_behind_the_figures(ground, site):
    def spread(value, deviation, angle=False):
        arrays = [np.float64(value), np.float64(value), np.float64(deviation)]
        return Spread(*arrays, np.uint16(24), angle)

    errors = {
        "slope": spread(site.slope, 1.2),
        "aspect": spread(site.aspect, 7.0, angle=True),
        "global": spread(site.energy.total, 95.0),
    }
    doubted = replace(site, errors=errors)
    said = dict(facts(doubted))
    assert "± 1.2 degrees" in said["slope"]
    # 1.2 degrees in radians over cos^2, in percent
    percent = 100.0 * np.radians(1.2) / np.cos(np.radians(site.slope)) ** 2
    assert said["slope"].endswith(f"± {percent:.0f} %")
    assert "± 7 degrees" in said["aspect"]
    assert "± 95 MJ m-2" in said["energy"]
    assert "90 % intervals from 24 likely grounds" in site_text([doubted], [])
    site_page(ground, [doubted])
    known = replace(site, slope=0.2, errors=errors | {"slope": spread(0.2, 0.2)})
    assert dict(facts(known))["slope"] == "0.2 ± 0.2 degrees = 0.3 ± 0.3 %"


def test_a_sun_lost_in_between_is_marked(site):
    day = site.sun.on(6, 21)
    interruptions = np.zeros(365)
    clear = replace(site, sun=replace(site.sun, interruptions=interruptions))
    assert "*" not in site_text([clear], [])
    interruptions = interruptions.copy()
    interruptions[day] = 1.0
    lost = replace(site, sun=replace(site.sun, interruptions=interruptions))
    assert month_rows(lost)[5][-1].endswith("*")
    assert "* lost in between for a minute or longer" in site_text([lost], [])


@pytest.mark.heavy
def test_period_without_a_whole_year_has_no_season(ground):
    site = surveyed(ground, period="2025-05/2025-06")[0]
    rows = month_rows(site)
    assert [row[0] for row in rows] == ["2025-05", "2025-06"]
    assert "April" not in " ".join(words for _, words in facts(site))
    assert page_png(site_page(ground, [site]), "t").startswith(b"\x89PNG")


def test_days_without_sun_are_named_across_the_new_year(site):
    hours = site.sun.hours.copy()
    hours[[0, 1, 363, 364]] = 0.0
    dark = replace(site, sun=replace(site.sun, hours=hours))
    assert dark_text(dark) == "4 days without direct sun: 30 December to 2 January"
    assert ("no sun", dark_text(dark)) in facts(dark)
    never = replace(site, sun=replace(site.sun, hours=np.zeros(365)))
    assert dark_text(never) == "all year"


@pytest.mark.parametrize(
    ("hours", "words"),
    [(9.7233, "9:43"), (0.0, "0:00"), (24.0, "24:00"), (25.25, "1:15 +1 d"), (-0.5, "23:30 -1 d"),
     (11.9999, "12:00"), (np.nan, "-")],
)  # fmt: skip
def test_clock_times(hours, words):
    assert clock_time(hours) == words


@pytest.mark.parametrize(
    ("azimuth", "words"),
    [(0.0, "north"), (359.0, "north"), (44.0, "north-east"), (191.0, "south"), (192.0,
     "south-south-west"), (270.0, "west")],
)  # fmt: skip
def test_directions(azimuth, words):
    assert direction(azimuth) == words


@pytest.mark.heavy
def test_two_places_have_one_height_between_contours_and_captions_end_with_their_maps(
    metric_ground,
):
    """Steep in the south, gentle in the north, and a narrow raster."""
    y, _ = np.mgrid[0:161, 0:23].astype(float)
    ground = metric_ground(1500.0 - 5.0 * np.minimum(y, 60) - 40.0 * np.maximum(y - 60, 0), 30.0)
    settings = LightSettings(parse_period(None), Air.ineichen(3.0), step_seconds=3600.0)
    spots = [Spot(LATITUDE + way * 0.014, LONGITUDE, "Place") for way in (1, -1)]
    sites = survey(ground, spots, settings, parse_clock("solar"), azimuths=32)
    own = [captions(site_page(ground, [site]))[0] for site in sites]
    both = captions(site_page(ground, sites))
    assert len(both) == 2
    steps = [float(words.split()[-2]) for _, words in (*own, *both)]
    assert steps[2:] == [max(steps[:2])] * 2
    assert steps[0] != steps[1]
    for k, (x0, words) in enumerate(both):
        assert x0 + text_width(words, SMALL) <= 827 * k + RIGHT


def captions(page):
    """Where the words below the small maps start, and what they are."""
    return sorted(
        (text.get_position()[0], text.get_text())
        for text in page.axes.texts
        if "contours every" in text.get_text()
    )
