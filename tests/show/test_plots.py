"""The sheet of predictors: right numbers in their places, and none that break it."""

import io
from dataclasses import replace

import matplotlib.image
import numpy as np
import pandas as pd
import pytest

from terrasol import SettingError
from terrasol.engine.plot_correlations import (
    Scale,
    best_by_chance,
    by_scale,
    matrix,
    pairs,
    shown_predictors,
    strongest,
)
from terrasol.engine.plot_table import CELL, MEAN, Column, PlotTable
from terrasol.practice.plots import correlation
from terrasol.show.plots import ALONG, predictors_png

NAMES = ("height_m", "slope_deg", "northness", "sky_view", "sun_season_h")


def made(plots=20, response=True):
    """A table of invented numbers; sky view goes against slope, and the response with height."""
    rng = np.random.default_rng(7)
    data, columns = {"id": [f"P{k}" for k in range(plots)]}, [Column("id", "id", "name")]
    data["flag"], more = ["ok"] * plots, Column("flag", "flag", "flag")
    columns.append(more)
    height = rng.normal(500.0, 50.0, plots)
    if response:
        data["cover"] = height + rng.normal(0.0, 20.0, plots)
        columns.append(Column("cover", "cover", "given"))
    for name in NAMES:
        values = height if name == "height_m" else rng.normal(size=plots)
        data[name] = -data["slope_deg"] if name == "sky_view" else values
        columns.append(Column(name, name, name, "1", "", CELL, None, 20.0))
        data[f"{name}_r50_mean"] = data[name] + 0.1 * rng.normal(size=plots)
        columns.append(Column(f"{name}_r50_mean", name, name, "1", "", MEAN, 50.0, 20.0))
    frame = pd.DataFrame(data)
    nowhere = np.full(plots, np.nan)
    return PlotTable(frame, columns, nowhere, nowhere, (20.0,), {}, [], {})


def test_matrix_has_pearson_below_and_spearman_above():
    table = made()
    names = shown_predictors(table)
    assert names == ["height_m", "slope_deg", "northness", "sky_view", "sun_season_h"]
    found = matrix(table, names)
    pearson, spearman, _ = correlation(table.frame["northness"], table.frame["height_m"])
    assert (found[2, 0], found[0, 2]) == (pearson, spearman)
    assert found[3, 1] == pytest.approx(-1.0)


def test_scales_against_the_own_cell_or_the_response():
    table = made()
    scales, found = by_scale(table, list(NAMES))
    assert scales == [Scale(20.0, None), Scale(20.0, 50.0)]
    assert (found[:, 0] == 1.0).all()
    assert (found[1:, 1] > 0.9).all()
    _, measured = by_scale(table, list(NAMES), "cover")
    expected = correlation(table.frame["cover"], table.frame["slope_deg_r50_mean"])[1]
    assert measured[1, 1] == expected


def test_the_strongest_is_named_and_chance_beside_it():
    table = made()
    best = strongest(table, "cover")
    assert best[0]["column"] in ("height_m", "height_m_r50_mean")
    assert [row["column"].startswith("height") for row in best].count(True) == 1
    level = best_by_chance(table, "cover")
    assert level is not None
    assert 0.3 < level < abs(best[0]["spearman"])
    rows = pairs(table, "cover")
    assert (rows["one"] == "cover").sum() == 2 * len(NAMES)


def test_a_response_that_is_not_there():
    with pytest.raises(SettingError, match="no column 'rain'"):
        pairs(made(), "rain")
    with pytest.raises(SettingError, match="no number"):
        pairs(made(), "id")


def pixels(png):
    return matplotlib.image.imread(io.BytesIO(png))


def test_sheet():
    png = predictors_png(made(), title="Plots", response="cover")
    assert png == predictors_png(made(), title="Plots", response="cover")
    picture = pixels(predictors_png(made(), title="Plots"))[..., :3]
    wanted = np.array([int(ALONG[k : k + 2], 16) / 255 for k in (1, 3, 5)])
    assert (np.abs(picture - wanted).max(axis=-1) < 0.06).sum() > 300


@pytest.mark.parametrize("plots", [1, 2, 4])
def test_sheet_of_few_plots(plots):
    assert pixels(predictors_png(made(plots, response=False), title="few")).shape[0] > 300


def test_predictors_that_are_not_on_the_list_are_drawn_if_no_others_are_there():
    table = made()
    columns = [
        replace(c, name=f"wood_{c.name}", predictor=f"wood_{c.predictor}") for c in table.columns
    ]
    frame = table.frame.rename(columns=lambda name: f"wood_{name}")
    frame["flag"] = "ok"
    other = replace(table, columns=columns, frame=frame)
    assert shown_predictors(other) == [f"wood_{name}" for name in NAMES]
    assert predictors_png(other, title="wood").startswith(b"\x89PNG")
