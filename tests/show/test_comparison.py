"""The sheet of a comparison: whole, always the same, for any place and any outcome."""

import dataclasses
import io

import matplotlib
import numpy as np
import pytest
from matplotlib.image import imread
from reference.made_valley import AIR, made_series, wall_spot

from terrasol.engine.comparison import Spot, compare_station
from terrasol.show.comparison import MODELLED, WIDTH, chosen_days, comparison_png, subtitle
from terrasol.show.page import Page


@pytest.fixture(scope="module")
def report():
    spot = wall_spot()
    return compare_station(made_series(spot, days=40, cloudy=(3, 4, 9)), AIR, spot)


def pixels(png):
    return imread(io.BytesIO(png), format="png")[..., :3]


def has_colour(image, colour):
    wanted = np.array(matplotlib.colors.to_rgb(colour))
    return bool((np.abs(image - wanted).max(axis=-1) < 0.02).any())


def test_a_png_of_the_right_width(report):
    png = comparison_png(report, title="Valley", notes=["one", "two"])
    assert png[:8] == b"\x89PNG\r\n\x1a\n"  # ISO/IEC 15948, 5.2
    image = pixels(png)
    assert image.shape[1] == WIDTH
    assert has_colour(image, MODELLED)


def test_same_content_same_bytes_whatever_the_user_s_style(report):
    first = comparison_png(report, title="Valley")
    with matplotlib.rc_context({"axes.facecolor": "black", "font.size": 30, "lines.linewidth": 9}):
        assert comparison_png(report, title="Valley") == first


def test_notes_make_the_sheet_longer(report):
    short, long = (
        pixels(comparison_png(report, title="Valley", notes=["some words " * n])).shape[0]
        for n in (2, 100)
    )
    assert long > short + 100


def test_four_clear_days_spread_over_the_series(report):
    days = chosen_days(report)
    assert len(days) == 4
    assert np.isin(days, report.clear_days).all()
    assert (np.diff(days) > np.timedelta64(5, "D")).all()


def test_without_a_clear_day_the_brightest_are_shown():
    spot = wall_spot()
    report = compare_station(made_series(spot, days=8, cloudy=range(8)), AIR, spot)
    assert report.comparison is None
    days = chosen_days(report)
    assert len(days) == 4
    # in March each day of a run is brighter than the one before: the last of each run of two
    np.testing.assert_array_equal(days, np.datetime64("2025-03-06") + 2 * np.arange(4))
    assert comparison_png(report, title="Dull")[:4] == b"\x89PNG"


@pytest.mark.parametrize(
    "latitude",
    [*(pytest.param(each, marks=pytest.mark.heavy) for each in (-33.0, 0.0, 78.0)), -89.0],
)
def test_any_latitude(latitude):
    spot = Spot.under([5.0] * 16)
    station = made_series(spot, days=10, start="2025-03-20", place=(latitude, -179.9))
    report = compare_station(station, AIR, spot)
    assert comparison_png(report, title="Elsewhere")[:4] == b"\x89PNG"


def test_polar_night():
    spot = Spot.under([5.0] * 16)
    station = made_series(spot, days=10, start="2025-12-10", place=(85.0, 10.0))
    report = compare_station(station, AIR, spot)
    assert report.comparison is None
    assert chosen_days(report) == []
    assert comparison_png(report, title="Night")[:4] == b"\x89PNG"


@pytest.fixture
def written(monkeypatch):
    """Every text of the sheets that are drawn, and its box [pixels]."""
    found = {}
    png = Page.png

    def measured(page, **metadata):
        out = png(page, **metadata)
        renderer = page.canvas.get_renderer()
        for text in page.axes.texts:
            found[text] = text.get_window_extent(renderer)
        return out

    monkeypatch.setattr(Page, "png", measured)
    return found


@pytest.mark.parametrize("seconds", [3600, 60])
def test_words_are_whole_and_beside_each_other(written, seconds):
    spot = wall_spot()
    station = made_series(spot, days=12, seconds=seconds, start="2025-06-24")
    report = compare_station(station, AIR, spot)
    comparison_png(report, title="Valley", notes=report.lines()[1:])
    boxes = list(written.values())
    assert len(boxes) > 60
    assert all(box.x0 > 20 and box.x1 < WIDTH - 20 and box.y0 > 10 for box in boxes)
    assert not any(a.overlaps(b) for k, a in enumerate(boxes) for b in boxes[k + 1 :])


@pytest.mark.parametrize(("times", "shown"), [(1, True), (10**30, False)])
def test_counts_have_a_legend_only_where_they_stand(report, written, times, shown):
    found = report.comparison
    months, hours = (
        {key: dataclasses.replace(one, count=times * one.count) for key, one in groups.items()}
        for groups in (found.months, found.hours)
    )
    many = dataclasses.replace(found, months=months, hours=hours)
    comparison_png(dataclasses.replace(report, comparison=many), title="Valley")
    texts = [text.get_text() for text in written]
    assert (str(months[3].count) in texts) == shown
    assert ("below: intervals" in texts) == shown


@pytest.mark.parametrize(
    ("longitude", "days"),
    [
        (-120.0, "2025-03-19 to 2025-03-22"),  # from 16 h of the 19th on, local mean solar time
        (-15.0, "2025-03-20 to 2025-03-22"),  # from 23 h of the 19th on
    ],
)
def test_the_days_are_those_of_the_place_with_sun(longitude, days):
    spot = Spot.under([5.0] * 16)
    station = made_series(spot, days=3, start="2025-03-20", place=(40.0, longitude))
    assert days in subtitle(compare_station(station, AIR, spot))
