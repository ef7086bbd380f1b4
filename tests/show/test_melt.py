"""Pictures of a snow season: they render, and say what they must."""

import io

import numpy as np
import pytest
from matplotlib.image import imread

from terrasol.engine.melt_tables import DEPTHS, SeasonTables, check_csv
from terrasol.ground.frame import make_frame
from terrasol.practice.snow_point import StationCheck
from terrasol.show import melt as show
from terrasol.show.key import Scale
from terrasol.show.page import Page
from terrasol.show.relief import OTHER_LINE, VOID_LINE


def season(days=120, bands=4, members=2):
    """Tables of an invented season."""
    rng = np.random.default_rng(4)
    shape = days, bands, 9
    course = np.sin(np.linspace(0.0, np.pi, days))[:, None, None]
    sums = np.empty((*shape, len(DEPTHS)))
    area = np.full((bands, 9), 1e5)
    area[-1] = 0.0
    for k in range(len(DEPTHS)):
        sums[..., k] = rng.uniform(0.0, 8.0, shape) * course * area
    sums[..., DEPTHS.index("snow_covered_share")] = course * area
    dates = np.datetime64("2024-11-01") + np.arange(days)
    spread = rng.uniform(0.0, 8.0, (days, members, 3))
    return SeasonTables(dates, area, sums, spread, np.arange(bands + 1) * 500.0, "made")


@pytest.fixture
def said(monkeypatch):
    """All words written on a sheet."""
    words = []
    write = Page.text

    def keep(self, x, y, text, *more, **given):
        words.append(text)
        assert 0 <= y <= self.height
        assert 0 <= x <= self.width
        return write(self, x, y, text, *more, **given)

    monkeypatch.setattr(Page, "text", keep)
    return words


NOTES = ("Melt after a paper.", "No avalanche tool.")


@pytest.mark.parametrize(("days", "members"), [(1, 0), (3, 2), (20, 0), (120, 2), (400, 2)])
def test_hydrograph(said, days, members):
    tables = season(days, members=members)
    words = "least to greatest of runs" if members else ""
    png = show.hydrograph_png(tables, title="t", subtitle="s", notes=NOTES, spread=words)
    assert imread(io.BytesIO(png)).shape[1] == show.WIDTH
    text = " ".join(said)
    assert "mm a day on map area" in text
    assert "No avalanche tool." in text
    assert ("Pale bands: least to greatest of runs." in text) == bool(members)
    peak = tables.column("snow_water_mm").max()
    assert any(word.startswith(f"{peak:.0f} mm on ") for word in said)


@pytest.mark.parametrize("days", [1, 5, 120])
def test_bands_without_ground_are_not_drawn(said, days):
    png = show.bands_png(season(days), title="t", subtitle="s", notes=NOTES)
    assert png.startswith(b"\x89PNG")
    assert "1000–1500" in said
    assert "1500–2000" not in said
    assert said.count("0.90 km²") == 3


def test_many_bands_are_named_here_and_there_within_the_page(said):
    png = show.bands_png(season(20, bands=91), title="t", subtitle="s", notes=NOTES)
    assert png.startswith(b"\x89PNG")
    named = [word for word in said if "–" in word]
    assert 11 <= len(set(named)) <= show.MOST_NAMED
    assert "44500–45000" in named


def test_map_of_melt_out_names_dates(said, metric_ground):
    y, x = np.mgrid[0:40, 0:50].astype(float)
    ground = metric_ground(1000.0 + 5.0 * x, 50.0)
    days = (100.0 + 2.0 * x).astype(np.float32)
    days[y > 35] = np.nan
    frame = make_frame(ground.shape, ground.transform, ground.crs)
    first = np.datetime64("2024-10-01")
    lies = np.isnan(days) & (x > 25)
    png = show.melt_out_png(
        ground, frame, days, first, lies=lies, title="t", subtitle="s", notes=NOTES
    )
    assert png.startswith(b"\x89PNG")
    assert "1 Feb" in said
    assert "15 Mar" in said
    assert {"9 Jan", "17 Apr"} <= set(said)  # the ends: days 100 and 198 of the season
    assert "15 Apr" not in said  # too near to the last one
    assert "no snow came" in said
    assert "snow still lies" in said
    assert "no data" not in said
    assert any(word.startswith("mean ") for word in said)


def test_ground_without_snow_and_ground_still_covered_are_hatched_apart(metric_ground):
    y, x = np.mgrid[0:40, 0:50].astype(float)
    ground = metric_ground(1000.0 + 5.0 * x, 50.0)
    frame = make_frame(ground.shape, ground.transform, ground.crs)
    days = np.where(y > 20, np.nan, 100.0 + x).astype(np.float32)

    def drawn(lies):
        png = show.melt_out_png(
            ground, frame, days, np.datetime64("2024-10-01"),
            lies=lies, title="t", subtitle="s", notes=NOTES,
        )  # fmt: skip
        return imread(io.BytesIO(png))[..., :3]

    def share_of(picture, colour):
        return np.all(np.abs(picture - np.array(colour)) < 0.01, axis=-1).mean()

    none, half, every = (drawn(np.isnan(days) & (x > least)) for least in (99, 25, -1))
    assert share_of(none, OTHER_LINE) == 0.0
    assert share_of(none, VOID_LINE) > 0.02
    assert share_of(half, OTHER_LINE) > 0.01
    assert share_of(half, VOID_LINE) > 0.01
    assert share_of(every, OTHER_LINE) > 0.02
    assert share_of(every, VOID_LINE) < 0.001


def test_bands_are_named_at_their_curves_and_neighbours_are_stroked_apart(monkeypatch):
    places = []
    write = Page.text

    def keep(self, x, y, text, *more, **given):
        places.append((x, y, text))
        return write(self, x, y, text, *more, **given)

    monkeypatch.setattr(Page, "text", keep)
    show.bands_png(season(120, bands=8), title="t", subtitle="s", notes=NOTES)
    key = show.WIDTH - show.MARGIN - 128
    at_curves = [(x, y, text) for x, y, text in places if "–" in text and x < key]
    assert {text for *_, text in at_curves} <= {f"{500 * k}–{500 * k + 500}" for k in range(7)}
    assert len(at_curves) >= 3
    for k, (x, y, text) in enumerate(at_curves):
        for left, level, other in at_curves[:k]:
            apart = abs(x - left) >= 13.0 * len(other) * 0.5 or abs(y - level) >= 13.0
            assert apart, (text, other)
    assert show._stroke(3) != show._stroke(4)


def test_early_and_late_stand_out_from_the_paper_and_in_grey():
    ramp = Scale(0.0, 1.0, colour_map=show.LATE_IS_BRIGHT).colours(np.linspace(0.0, 1.0, 33))
    lightness = ramp @ np.array([0.2126, 0.7152, 0.0722])  # of linear light, near enough to order
    assert (np.diff(lightness) > 0.0).all()
    assert (np.ptp(ramp[[0, -1]], axis=1) > 0.2).all()  # neither end is grey or white


@pytest.mark.parametrize("fitted", [True, False])
def test_station(said, fitted):
    dates = np.datetime64("2024-11-01") + np.arange(90)
    water = 100.0 * np.sin(np.linspace(0.0, np.pi, 90))
    seen = np.where(np.arange(90) % 3 == 0, water + 5.0, np.nan)
    check = StationCheck(dates, seen, water, 0.8 * water if fitted else None)
    assert show.station_png(check, title="a station", notes=NOTES).startswith(b"\x89PNG")
    assert {"a station", "observed", "modelled", "No avalanche tool."} <= set(said)
    assert ("modelled before the fit" in said) == fitted
    rows = check_csv(check).decode().splitlines()
    assert rows[2].startswith(f"2024-11-02,,{water[1]:.2f}")
    assert ("before_fit" in rows[0]) == fitted


def test_running_mean_keeps_length_and_level():
    values = np.array([1.0, 2.0, 3.0, 4.0])
    np.testing.assert_allclose(show._running(np.full(10, 3.0), 7), 3.0)
    np.testing.assert_allclose(show._running(values, 1), values)
    assert show._running(values, 7).size == 4
    assert show._running(values[:1], 7).tolist() == [1.0]
