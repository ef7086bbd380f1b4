"""How the predictors of plots go together, and with something measured there."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from terrasol.engine.plot_table import CELL, GIVEN, MEAN, Column, PlotTable
from terrasol.errors import SettingError
from terrasol.files.vectors import word_list
from terrasol.practice.plots import chance_of_best, correlation

SHOWN: Final = (
    "height", "slope", "northness", "eastness", "slope_northness", "slope_eastness", "beers",
    "mccune_radiation_1", "mccune_heat_1", "sky_view", "irradiation_year_global",
    "irradiation_season_global", "irradiation_season_beam", "irradiation_season_diffuse",
    "irradiation_season_reflected", "irradiation_jun_global", "irradiation_dec_global",
    "sun_season", "sun_jun", "sun_dec", "first_sun_jun", "last_sun_jun",
)  # fmt: skip
"""Predictors that the picture has room for, where they are in the table: one of each kind, and the
months of the solstices for what goes by month (judgement)."""

TURNING: Final = ("aspect_deg",)
"""Predictors that go round, of which no correlation is a measure."""

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Scale:
    """A cell size, and the cell itself or the mean within a circle.

    Parameters
    ----------
    cell : float
        Mean side of the cells [m].
    radius : float or None
        Of the circle [m]; None for the cell.
    """

    cell: float
    radius: float | None


def short_name(predictor: str) -> str:
    """Name of a predictor without its unit.

    Examples
    --------
    >>> short_name("irradiation_jun_beam_mj_m2_slope"), short_name("height_m")
    ('irradiation_jun_beam', 'height')
    """
    for ending in ("_slope", "_map"):
        if predictor.startswith(("irradiation", "photosynthetic")):
            predictor = predictor.removesuffix(ending)
    for ending in ("_mj_m2", "_kwh_m2", "_mol_m2_d", "_mj_cm2_yr", "_deg", "_m", "_h"):
        if predictor.endswith(ending):
            return predictor.removesuffix(ending)
    return predictor


def shown_predictors(table: PlotTable) -> list[str]:
    """Columns of the predictors to draw: the cell's values at the raster's own cells.

    Those of `SHOWN`, or if the table has none of them, as many of its first.
    """
    found = [name for name in table.predictors() if name not in TURNING]
    by_name = {short_name(name): name for name in found}
    shown = [by_name[name] for name in SHOWN if name in by_name]
    return shown or found[: len(SHOWN)]


def response_values(table: PlotTable, name: str) -> Array:
    """Read a measured column of the plots' file as numbers.

    Raises
    ------
    SettingError
        There is no such column, or no number in it.
    """
    given = [c.name for c in table.columns if not c.statistic]
    name = f"{name}{GIVEN}" if f"{name}{GIVEN}" in given else name
    if name not in given:
        raise SettingError(f"the plots have no column '{name}' of their own: {word_list(given)}")
    values = np.asarray(pd.to_numeric(table.frame[name], errors="coerce"), np.float64)
    if not np.isfinite(values).any():
        raise SettingError(f"the column '{name}' of the plots has no number: name another")
    return values


def pairs(table: PlotTable, response: str | None = None) -> pd.DataFrame:
    """Correlations as a table: of all predictors with the response, then among those drawn.

    Returns
    -------
    pandas.DataFrame
        ``one``, ``other``, ``pearson``, ``spearman``, ``plots``; NaN where nothing varies.
    """
    rows = []
    if response is not None:
        measured = response_values(table, response)
        for column in table.columns:
            if column.statistic and column.predictor not in TURNING:
                found = correlation(measured, table.frame[column.name].to_numpy(np.float64))
                rows.append((response, column.name, *found))
    names = shown_predictors(table)
    for k, one in enumerate(names):
        for other in names[k + 1 :]:
            values = (table.frame[name].to_numpy(np.float64) for name in (one, other))
            rows.append((one, other, *correlation(*values)))
    return pd.DataFrame(rows, columns=["one", "other", "pearson", "spearman", "plots"])


def matrix(table: PlotTable, names: list[str]) -> Array:
    """Correlations among columns: Pearson below the diagonal, Spearman above, 1 on it."""
    found = np.ones((len(names), len(names)))
    for i, one in enumerate(names):
        for j, other in enumerate(names[:i]):
            values = (table.frame[name].to_numpy(np.float64) for name in (one, other))
            found[i, j], found[j, i], _ = correlation(*values)
    return found


def by_scale(
    table: PlotTable, names: list[str], response: str | None = None
) -> tuple[list[Scale], Array]:
    """Rank correlations of predictors at each scale, shape (predictors, scales).

    With the response if there is one, else with the predictor's own value in the raster's cell:
    how far the scale changes the order of the plots.
    """
    columns: dict[tuple[str, Scale], Column] = {}
    for column in table.columns:
        if column.statistic in (CELL, MEAN) and column.cell is not None:
            columns[column.predictor, Scale(column.cell, column.radius)] = column
    scales = list(dict.fromkeys(scale for _, scale in columns))
    measured = None if response is None else response_values(table, response)
    found = np.full((len(names), len(scales)), np.nan)
    for i, name in enumerate(names):
        for j, scale in enumerate(scales):
            if (name, scale) in columns:
                values = table.frame[columns[name, scale].name].to_numpy(np.float64)
                against = table.frame[name].to_numpy(np.float64) if measured is None else measured
                found[i, j] = correlation(against, values)[1]
    return scales, found


def _candidates(table: PlotTable) -> dict[str, str]:
    """Columns among which the strongest is sought, and their predictors."""
    return {
        c.name: c.predictor
        for c in table.columns
        if c.statistic in (CELL, MEAN) and c.predictor not in TURNING
    }


def best_by_chance(table: PlotTable, response: str) -> float | None:
    """Size that the strongest of `strongest` passes once in twenty times by chance alone.

    Over the columns known in all plots that were measured; None with fewer than four of these.
    """
    measured = response_values(table, response)
    columns = table.frame[list(_candidates(table))].to_numpy(np.float64)
    rows = np.isfinite(measured) & np.isfinite(columns).any(axis=1)
    columns = columns[rows]
    columns = columns[:, np.isfinite(columns).all(axis=0)]
    if rows.sum() < 4 or not columns.size:
        return None
    return round(chance_of_best(columns, measured[rows]), 3)


def strongest(table: PlotTable, response: str, count: int = 5) -> list[dict[str, float | str]]:
    """Cells' values and means of circles whose ranks go with the response most closely.

    One column a predictor, that of its best scale; a choice made after the fact, so not a test.
    """
    kinds = _candidates(table)
    found = pairs(table, response)
    found = found[(found["one"] == response) & found["other"].isin(kinds)].dropna()
    order = found.iloc[np.argsort(-found["spearman"].abs().to_numpy(), kind="stable")]
    best = order[~order["other"].map(kinds).duplicated()].head(count)
    return [
        {
            "column": str(row.other),
            "pearson": round(float(row.pearson), 3),
            "spearman": round(float(row.spearman), 3),
            "plots": int(row.plots),
        }
        for row in best.itertuples()
    ]
