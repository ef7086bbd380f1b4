"""Sheets and summary of parcels: drawn for every kind of parcel, true to the ground."""

from __future__ import annotations

import re
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
import shapely
from engine.made_parcels import UTM, asked_for, box, parcels, plane
from matplotlib.backends.backend_pdf import RendererPdf

from terrasol.engine.parcel_figures import Warmth
from terrasol.engine.parcel_rows import RowSettings
from terrasol.engine.parcels import survey
from terrasol.ground.elevation import Elevation
from terrasol.ground.frame import make_frame
from terrasol.ground.uncertainty import DemError
from terrasol.practice.limits import VINEYARD
from terrasol.practice.season import SOUTHERN_SEASON
from terrasol.practice.temperatures import from_monthly
from terrasol.show.page import Page, book, text_width
from terrasol.show.panel import Panel
from terrasol.show.parcel_map import (
    GroundMap,
    draw_contours_around,
    frame_around,
    outline_path,
    scale_length,
    slope_colours,
)
from terrasol.show.parcel_sheet import TEXT, UNKNOWN, facts, parcel_page
from terrasol.show.parcels import MAP_HEIGHTS, MOST_ROWS, summary_page

WARMTH = Warmth(from_monthly(np.full(12, 15.0), height=500.0, highest=np.full(12, 20.0)))


def frame_of(ground):
    return make_frame(ground.shape, ground.transform, ground.crs)


def all_words(page):
    """All text of a page, lines joined."""
    found = [a.get_text() for a in page.axes.get_children() if hasattr(a, "get_text")]
    return " ".join(" ".join(found).split())


def test_a_sheet_says_what_was_found_and_what_is_not_in_it():
    ground = plane(12.0, 180.0)
    settings = asked_for(
        coarser=(2,), warmth=WARMTH, rule="slope_percent < 15", rows=RowSettings(2.0, 1.3, 0.4),
        score="rule_ha_map",
    )  # fmt: skip
    found = survey(ground, parcels(box(-100, -50, 105, 50)), settings)
    page = parcel_page(found, found.parcels[0], ground, frame_of(ground), title="Test")
    words = all_words(page)
    for part in ("P0", "2.05 ha", "12.0 %", "1 of 1", "Rule: slope_percent < 15", "Ia", "20 m"):
        assert part in words, part
    assert VINEYARD in words
    assert "Potential (clear-sky) irradiation per area of slope" in words
    assert "would move Winkler's sum by +0" in words  # no minus before a zero
    summary = all_words(summary_page(found, ground, frame_of(ground), title="Test"))
    for told in (words, summary):
        assert "Sky without clouds after Ineichen and Perez 2002" in told
        assert "Linke turbidity by month 3, albedo of the ground 0.2." in told
        assert "0.4 m wide, of albedo 0.2, endless" in told
    assert page.png().startswith(b"\x89PNG")


@pytest.mark.heavy
def test_every_kind_of_parcel_is_drawn(tmp_path):
    """Flat, void, half outside, in two parts, with a hole; and none of the options."""
    ground = plane(12.0, 180.0)
    ground.heights[:20] = 520.0
    ground.heights[60:, :20] = np.nan
    ring = box(100, 0, 200, 100).difference(box(130, 30, 170, 70))
    two = shapely.union_all([box(-100, -50, -50, 0), box(0, -50, 50, 0)])
    shapes = parcels(
        box(-100, 250, 100, 350), box(-390, -390, -250, -300), box(350, 0, 500, 50), two, ring
    )
    found = survey(ground, shapes, asked_for(coarser=(4,)))
    frame = frame_of(ground)
    pages = [parcel_page(found, each, ground, frame, title="Test") for each in found.parcels]
    assert "nowhere (flat)" in all_words(pages[0])
    assert "unknown" in all_words(pages[1])
    assert "of it known" in all_words(pages[1])
    assert "of it on the raster" in all_words(pages[2])
    assert "Direction of rows" not in all_words(pages[3])
    assert "Degree-days" not in all_words(pages[4])
    for page in pages:
        assert "nan" not in all_words(page).lower().replace("nanometre", "")
    pages.insert(0, summary_page(found, ground, frame, title="Test"))
    assert "no score" in all_words(pages[0])
    assert VINEYARD in all_words(pages[0])
    book(tmp_path / "book.pdf", pages, Title="Test")
    bound = (tmp_path / "book.pdf").read_bytes()
    assert bound.startswith(b"%PDF")
    assert bound.count(b"/Type /Page ") == 6


@pytest.mark.heavy
def test_a_page_is_the_same_again(tmp_path):
    ground = plane(12.0, 180.0)
    found = survey(ground, parcels(box(0, 0, 60, 60)), asked_for(coarser=()))
    frame = frame_of(ground)
    places = tmp_path / "one.pdf", tmp_path / "two.pdf"
    for place in places:
        book(place, [summary_page(found, ground, frame, title="T")])
    assert places[0].read_bytes() == places[1].read_bytes()


def test_south_of_the_equator_with_a_period_and_a_measured_month():
    north = plane(12.0, 0.0)
    ground = Elevation(north.heights, (*north.transform[:5], 6200400.0), north.crs)
    ground = Elevation.from_array(ground.heights, ground.transform, "EPSG:32732")
    there = parcels(shapely.affinity.translate(box(0, 0, 60, 60), 0, 6200400.0 - 5100400.0),
                    crs="EPSG:32732")  # fmt: skip
    settings = asked_for("2023-07/2024-06", season=SOUTHERN_SEASON, coarser=())
    found = survey(ground, there, settings)
    words = all_words(parcel_page(found, found.parcels[0], ground, frame_of(ground), title="T"))
    assert "of albedo" not in words  # of the rows, that were not asked for
    assert "October 2023 to April 2024" in words
    assert "° S" in words


def test_long_lists_are_cut_and_said_so():
    ground = plane(12.0, 180.0)
    shapes = [box(-390 + 30 * k, 0, -370 + 30 * k, 20) for k in range(MOST_ROWS + 2)]
    found = survey(ground, parcels(*shapes), asked_for(coarser=(), score="map_area_ha"))
    page = summary_page(found, ground, frame_of(ground), title="Test")
    assert "and 2 more, in parcels.csv" in all_words(page)


def test_standard_errors_stand_behind_their_figures():
    ground = plane(14.5, 180.0)
    settings = asked_for(coarser=(), rule="slope_percent < 15", error=DemError(0.3, 0.0, 2))
    found = survey(ground, parcels(box(0, 0, 60, 60)), settings)
    told = dict(facts(found, found.parcels[0]))
    assert " ± " in told["Slope, mean"]
    assert told["Area of the slope's surface"] == "0.36 ha"  # has no bound on the map
    words = all_words(parcel_page(found, found.parcels[0], ground, frame_of(ground), title="T"))
    assert "± or a range: one standard error" in words


def test_an_area_of_none_or_all_is_off_to_one_side():
    ground = plane(14.5, 180.0)
    for limit, pattern in ((14, r"0\.00 to 0\.\d\d ha, 0 %"), (15, r"0\.\d\d to 0\.36 ha, 100 %")):
        error, rule = DemError(0.3, 0.0, 2), f"slope_percent < {limit}"
        settings = asked_for(coarser=(), rule=rule, error=error)
        found = survey(ground, parcels(box(0, 0, 60, 60)), settings)
        assert re.fullmatch(pattern, dict(facts(found, found.parcels[0]))["Meets the rule"])


@pytest.mark.parametrize("turn", [0.0, 40.0])
def test_the_map_is_true_and_north_up(turn):
    """The outline of a square on a turned grid is a square of its size, corners to true north."""
    angle = np.radians(turn)
    a, d = 10.0 * np.cos(angle), 10.0 * np.sin(angle)
    grid = (a, d, 500000.0, d, -a, 5100000.0)
    ground = Elevation.from_array(np.zeros((40, 40)), grid, UTM)
    frame = frame_of(ground)
    x = grid[0] * 20 + grid[1] * 20 + grid[2]
    y = grid[3] * 20 + grid[4] * 20 + grid[5]
    path = outline_path(
        shapely.box(x - 50, y - 50, x + 50, y + 50), ground, GroundMap.at(frame, 19.5, 19.5)
    )
    box_ = path.get_extents()
    # UTM's metre is 0.04 % short there, and its grid points north.
    assert box_.width == pytest.approx(100.0 / 0.9996, rel=1e-4)
    assert box_.height == pytest.approx(100.0 / 0.9996, rel=1e-4)
    limits = frame_around([path], 300.0, 200.0)
    assert (limits[1] - limits[0]) / (limits[3] - limits[2]) == pytest.approx(1.5)


def test_scale_bar_and_colours():
    assert scale_length(1000.0) == 200.0
    assert scale_length(160.0) == 50.0
    assert len(set(slope_colours(6))) == 6
    assert len(slope_colours(1)) == 1


@pytest.mark.heavy
def test_many_months_are_not_written_over_each_other():
    ground = plane(12.0, 180.0)
    found = survey(ground, parcels(box(0, 0, 60, 60)), asked_for("2020/2024", coarser=()))
    page = parcel_page(found, found.parcels[0], ground, frame_of(ground), title="T")
    assert len(found.parcels[0].level.months) == 60
    words = all_words(page)
    assert "h a day" not in words
    assert words.count("2022") == 2  # an axis of energy and one of first and last sun
    assert "April 2024 to October 2024" in words


def test_a_book_holds_no_more_of_a_map_than_its_cells(tmp_path, monkeypatch):
    """Else each sheet of a long book takes two megabytes until the last is drawn."""
    kept = []
    draw = RendererPdf.draw_image
    monkeypatch.setattr(
        RendererPdf, "draw_image", lambda self, gc, x, y, im, transform=None: (
            kept.append(im.nbytes), draw(self, gc, x, y, im, transform)
        ),
    )  # fmt: skip
    ground = plane(12.0, 180.0)
    found = survey(ground, parcels(box(-100, -50, 105, 50)), asked_for(coarser=()))
    page = parcel_page(found, found.parcels[0], ground, frame_of(ground), title="T")
    book(tmp_path / "book.pdf", [page])
    assert kept == [4 * found.parcels[0].piece.slope.size]


@pytest.mark.parametrize(("error", "step"), [(None, 1.0), (0.2, 0.5), (2.0, 5.0)])
def test_contours_are_no_finer_than_the_heights_are_known(error, step):
    ground = plane(1.0, 180.0)
    panel, place = _map_panel(ground)
    assert draw_contours_around(panel, ground, place, error) == step


def test_level_ground_has_no_contours():
    ground = plane(0.0, 180.0)
    panel, place = _map_panel(ground)
    assert draw_contours_around(panel, ground, place) is None


def _map_panel(ground):
    """A map of the middle of some ground, 200 m across."""
    panel = Panel(Page(400, 400), 50.0, 50.0, 300.0, 300.0)
    panel.limits(-100.0, 100.0, -100.0, 100.0)
    rows, columns = ground.heights.shape
    return panel, GroundMap.at(frame_of(ground), rows / 2, columns / 2)


def test_names_of_contours_keep_from_the_frame_and_from_what_is_there():
    ground = plane(25.0, 180.0)
    panel, place = _map_panel(ground)
    draw_contours_around(panel, ground, place)
    named = _places(panel.page)
    assert named
    for x, y in named:
        assert 70.0 < x < 330.0
        assert 70.0 < y < 330.0
    panel, place = _map_panel(ground)
    left_half = (50.0, 50.0, 200.0, 350.0)
    draw_contours_around(panel, ground, place, taken=[left_half])
    right = _places(panel.page)
    assert right
    assert all(x > 210.0 for x, _ in right)


def _places(page):
    """Where the texts of a page stand."""
    return [text.get_position() for text in page.axes.texts]


def test_hours_run_up_and_no_time_touches_a_month():
    ground = plane(12.0, 180.0)
    found = survey(ground, parcels(box(-100, -50, 105, 50)), asked_for(coarser=()))
    page = parcel_page(found, found.parcels[0], ground, frame_of(ground), title="T")
    texts = {}
    for text in page.axes.texts:
        texts.setdefault(text.get_text(), []).append(text.get_position())
    assert {"6:00", "9:00", "12:00", "15:00", "18:00"} <= set(texts)
    assert texts["18:00"][0][1] < texts["6:00"][0][1]
    lowest = max(
        y for words, places in texts.items() if re.fullmatch(r"\d+:\d\d", words) for _, y in places
    )
    months = min(y for _, y in texts["Jun"] if y > 632)
    assert lowest < months - 9.5


@pytest.mark.heavy
def test_what_was_not_asked_for_leaves_no_empty_heading():
    ground = plane(12.0, 180.0)
    shapes = parcels(box(-100, -50, 105, 50))
    frame = frame_of(ground)
    for settings, there, missing in (
        (asked_for(coarser=()), (), ("Direction of rows", "Degree-days")),
        (asked_for(coarser=(), warmth=WARMTH), ("Degree-days",), ("Direction of rows",)),
        (asked_for(coarser=(), rows=RowSettings(2.0, 1.3, 0.4)), ("Direction of rows",),
         ("Degree-days",)),
    ):  # fmt: skip
        found = survey(ground, shapes, settings)
        words = all_words(parcel_page(found, found.parcels[0], ground, frame, title="T"))
        assert all(part in words for part in there)
        assert not any(part in words for part in missing)


@pytest.fixture(scope="module")
def odd():
    """Half outside, all void, of 9 m2, and in two parts; the ground, too."""
    ground = plane(12.0, 180.0)
    ground.heights[60:, :20] = np.nan
    two = shapely.union_all([box(-100, -50, -50, 0), box(0, -50, 50, 0)])
    shapes = parcels(box(350, 0, 450, 50), box(-390, -390, -250, -300), box(1, 1, 4, 4), two)
    return survey(ground, shapes, asked_for(coarser=())), ground


def page_of(odd, place):
    found, ground = odd
    return parcel_page(found, found.parcels[place], ground, frame_of(ground), title="Test")


def test_area_is_told_as_drawn_and_what_of_it_is_on_the_raster_and_known(odd):
    half, void, small, two = (dict(facts(odd[0], parcel)) for parcel in odd[0].parcels)
    assert half["Area drawn, on the map"] == "0.50 ha"
    assert half["  of it on the raster"] == "0.25 ha"
    assert "  of it known" not in half
    assert void["  of it known"] == "0.00 ha"
    assert small["Area drawn, on the map"] == "9.0 m²"
    assert set(two) & {"  of it on the raster", "  of it known"} == set()


def test_blank_parts_of_an_outline_are_explained(odd):
    assert "blank in an outline: outside the raster" in all_words(page_of(odd, 0))
    assert "blank in an outline: unknown" in all_words(page_of(odd, 1))
    assert "blank" not in all_words(page_of(odd, 2))
    found, ground = odd
    summary = all_words(summary_page(found, ground, frame_of(ground), title="Test"))
    assert "blank in an outline: unknown or outside the raster" in summary


def test_of_void_ground_no_empty_diagram_is_drawn(odd):
    page = page_of(odd, 1)
    assert len(page.figure.axes) == 2  # the page and the map
    assert all_words(page).count(UNKNOWN) == 5
    assert len(page_of(odd, 0).figure.axes) > 4


def test_small_areas_have_square_metres(odd):
    words = all_words(page_of(odd, 2))
    assert "m² by sector" in words
    assert "9.0 m² 100 %" in words
    assert "ha by sector" in all_words(page_of(odd, 3))


def test_sheets_say_what_the_horizon_is_made_of(odd):
    said = "Shade of all that stands in the raster, and of nothing beyond it."
    assert said in all_words(page_of(odd, 3))
    found, ground = odd
    assert said in all_words(summary_page(found, ground, frame_of(ground), title="Test"))


def test_each_part_of_a_parcel_has_its_number(odd):
    found, ground = odd
    page = summary_page(found, ground, frame_of(ground), title="Test")
    map_ = [
        a.get_text()
        for a in page.axes.get_children()
        if hasattr(a, "get_text") and a.get_position()[1] < 600 and a.get_text() in "1234"
    ]
    assert sorted(filter(None, map_)) == ["1", "2", "3", "4", "4"]
    words = all_words(page)
    assert "m² drawn" in words  # one unit a table: that of the smallest parcel
    assert "known" in words
    assert words.count("flat") == 0  # what is void faces nowhere that is known


@pytest.mark.parametrize("count", [1, MOST_ROWS])
def test_notes_of_any_length_stay_clear_of_what_stands_above_them(count):
    ground = plane(12.0, 180.0)
    shapes = [box(-390 + 30 * k, 0, -370 + 30 * k, 20) for k in range(count)]
    settings = asked_for(
        coarser=(), warmth=WARMTH, rows=RowSettings(2.0, 1.3, 0.4),
        score="map_area_ha + slope_mean_percent", rule="slope_percent < 15",
    )  # fmt: skip
    found = survey(ground, parcels(*shapes), settings)
    doubts = ("a doubt of a whole line, which is as long as a line of a hundred letters is" * 2,)
    for more in ((), doubts, doubts * 3):
        noted = replace(found, error_doubts=more)
        frame = frame_of(ground)
        sheet = parcel_page(noted, noted.parcels[0], ground, frame, title="T")
        places = words_at(sheet)
        top = min(y for words, y in places if words.startswith("Season April"))
        assert top - max(y for words, y in places if words == "right side") >= 8.0
        places = words_at(summary_page(noted, ground, frame, title="T"))
        top = min(y for words, y in places if words.startswith("Season April"))
        above = [y for words, y in places if words in ("Score", *found.score.terms)]
        assert top - max(above) >= 8.0


def words_at(page):
    """Texts of a page, and how far down they stand."""
    texts = [a for a in page.axes.get_children() if hasattr(a, "get_text")]
    return [(text.get_text(), text.get_position()[1]) for text in texts]


def test_columns_of_tiny_and_large_parcels_stay_apart():
    ground = plane(14.5, 180.0)
    shapes = parcels(box(1, 1, 4, 4), box(-300, -300, 300, 300))
    error = DemError(0.3, 0.0, 2)
    settings = asked_for(coarser=(), rule="slope_percent < 15", error=error, warmth=WARMTH)
    found = survey(ground, shapes, settings)
    page = summary_page(found, ground, frame_of(ground), title="T")
    texts = [a for a in page.axes.get_children() if hasattr(a, "get_text")]
    texts = [t for t in texts if t.get_ha() == "right" and t.get_position()[1] > MAP_HEIGHTS[1]]
    lines = {}
    for text in texts:
        lines.setdefault(text.get_position()[1], []).append(text)
    rows = [line for line in lines.values() if len(line) > 6]
    assert len(rows) == 3  # the head and both parcels
    for line in rows:
        line.sort(key=lambda text: text.get_position()[0])
        for one, other in pairwise(line):
            left = other.get_position()[0] - text_width(other.get_text(), TEXT)
            assert left - one.get_position()[0] >= 4.0, (one.get_text(), other.get_text())
    words = all_words(page)
    assert "9.0 ± 0.0" in words or "to 9.0" in words
    assert "9.0 m²" not in words
    assert "ha drawn" not in words
