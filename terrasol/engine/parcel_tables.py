"""A survey of parcels as rows of tables."""

from __future__ import annotations

from dataclasses import replace
from typing import Any, Final

import numpy as np
import shapely

from terrasol.constants import HECTARE
from terrasol.engine.outputs import SKIES, sky_kind
from terrasol.engine.parcel_figures import Figure
from terrasol.engine.parcels import Parcel, Survey
from terrasol.files.vectors import patch_outlines
from terrasol.ground.elevation import Affine6
from terrasol.practice.rows import SURFACES

Row = dict[str, Any]

DOUBTED: Final = (
    "score", "rank", "slope_mean_percent", "aspect_mean_deg", "irradiation_season_mj_m2_slope",
    "share_of_level_season", "rule_ha_map", "rule_share", "winkler_mean_c_days",
)  # fmt: skip
"""Figures whose standard error stands beside them; classes of slope besides."""


def table_rows(survey: Survey) -> list[Row]:
    """One row a parcel, the best first: rank, score and its terms, then all figures."""
    return [{"parcel": parcel.name} | _told(survey, parcel) for parcel in survey.order]


def _told(survey: Survey, parcel: Parcel) -> Row:
    """Columns of a parcel: standard errors follow the figures that a reader looks at first."""
    row = {}
    for name, value in (
        *_ranks(survey, parcel).items(),
        *((figure.name, figure.value) for figure in parcel.figures),
    ):
        row[name] = value
        if has_error(name) and name in parcel.doubts:
            row[f"{name}_se"] = parcel.doubts[name].standard_error
    return row | {f"{GIVEN}{name}": value for name, value in parcel.given.items()}


def has_error(name: str) -> bool:
    """Whether a figure's standard error stands beside it in parcels.csv."""
    return name in DOUBTED or (name.startswith("slope_") and name.endswith("_ha_map"))


def doubt_rows(survey: Survey) -> list[Row]:
    """One row a parcel and figure that the error of the heights leaves open."""
    return [
        {
            "parcel": parcel.name,
            "figure": name,
            "value": doubt.value,
            "standard_error": doubt.standard_error,
            "shift": doubt.shift,
            "low_90": doubt.low,
            "high_90": doubt.high,
            "grounds": doubt.count,
        }
        for parcel in survey.order
        for name, doubt in parcel.doubts.items()
    ]


def _ranks(survey: Survey, parcel: Parcel) -> Row:
    """Rank and score of a parcel, and what each term of the score adds."""
    ranking, score = survey.ranking, survey.score
    if ranking is None or score is None:
        return {}
    place = next(k for k, each in enumerate(survey.parcels) if each is parcel)
    rank = int(ranking.rank[place])
    terms = {
        f"score_term_{k}": float(part) for k, part in enumerate(ranking.contributions[place], 1)
    }
    return {"rank": rank or None, "score": float(ranking.total[place]), **terms}


def patch_rows(survey: Survey, transform: Affine6) -> tuple[list[Any], list[Row]]:
    """Outlines of the patches that meet the rule, clipped to their parcel, and a row for each."""
    outlines, rows = [], []
    for parcel in survey.order:
        if parcel.patches is None:
            continue
        window = parcel.piece.window
        traced = patch_outlines(parcel.patches.label, transform, (window.row, window.column))
        for label, outline in sorted(traced.items()):
            clipped = shapely.intersection(outline, parcel.outline)
            parts = [p for p in shapely.get_parts(clipped) if p.geom_type == "Polygon"]
            area = float(parcel.patches.areas[label - 1]) / HECTARE
            outlines.append(shapely.MultiPolygon(parts))
            rows.append({"parcel": parcel.name, "patch": label, "area_ha_map": area})
    return outlines, rows


def size_rows(survey: Survey) -> list[Row]:
    """One row a parcel and cell size, the raster's own first."""
    rows = []
    for parcel in survey.order:
        for size, figures in [(survey.cell_size, parcel.figures), *parcel.coarser]:
            if figures:
                numbers = {f.name: f.value for f in figures if not f.name.startswith("rows_")}
                rows.append({"parcel": parcel.name, "cell_m": round(size, 3), **numbers})
    return rows


def row_rows(survey: Survey) -> list[Row]:
    """One row a parcel and direction of vine rows."""
    rows = []
    for parcel in survey.order:
        if parcel.rows is None:
            continue
        light = parcel.rows.light
        for k, azimuth in enumerate(light.azimuth.tolist()):
            faces = light.faces[k].tolist()
            energy = {
                f"{name.replace(' ', '_')}_mj_m2": float(value)
                for name, value in zip(SURFACES, light.total[k], strict=True)
            }
            rows.append(
                {
                    "parcel": parcel.name,
                    "row_azimuth_deg": azimuth,
                    "right_side_faces_deg": faces[0],
                    "left_side_faces_deg": faces[1],
                    **energy,
                    "both_sides_mj_m_row": float(light.per_metre[k, :2].sum()),
                    "row_slope_mean_plane_percent": float(light.along[k]),
                    "cross_slope_mean_plane_percent": float(light.across[k]),
                    "row_slope_p90_percent": float(parcel.rows.steep[k]),
                    "row_slope_steepest_percent": float(parcel.rows.steepest[k]),
                }
            )
    return rows


GIVEN: Final = "given_"
"""Before the names of fields of the parcels' file."""

_OWN = (
    Figure("parcel", "", "", "name, made unique"),
    Figure("rank", np.nan, "1", "1 for the highest score; equal scores share a rank"),
    Figure("score", np.nan, "1", ""),
)
_PATCHES = (
    Figure("patch", np.nan, "1", "1 for the largest, in the layer rule of parcels.gpkg"),
    Figure("area_ha_map", np.nan, "ha", "area of a patch that meets the rule", "map"),
)
_SIZES = (Figure("cell_m", np.nan, "m", "cell size on the ground, in cell_sizes.csv"),)
_ROWS = (
    Figure("row_azimuth_deg", np.nan, "degree",
           "direction of the rows, clockwise from true north, in row_directions.csv"),
    Figure("right_side_faces_deg", np.nan, "degree", "azimuth that the right side faces"),
    Figure("left_side_faces_deg", np.nan, "degree", "azimuth that the left side faces"),
    Figure("right_side_mj_m2", np.nan, "MJ m-2",
           "energy of the growing season on a square metre of the right side of a row"),
    Figure("left_side_mj_m2", np.nan, "MJ m-2", "the same of the left side"),
    Figure("top_mj_m2", np.nan, "MJ m-2", "the same of the top"),
    Figure("ground_mj_m2", np.nan, "MJ m-2", "the same of the ground between the rows", "slope"),
    Figure("both_sides_mj_m_row", np.nan, "MJ m-1",
           "the same of both sides on a metre of row, laid on the ground"),
    Figure("row_slope_mean_plane_percent", np.nan, "percent",
           "slope of rows along the parcel's mean plane"),
    Figure("cross_slope_mean_plane_percent", np.nan, "percent",
           "slope of that plane square to the rows"),
    Figure("row_slope_p90_percent", np.nan, "percent",
           "climb of rows that 90 % of the area does not pass", "map"),
    Figure("row_slope_steepest_percent", np.nan, "percent", "climb of rows in the steepest cell"),
)  # fmt: skip

_DOUBTS = (
    Figure("figure", np.nan, "", "column of parcels.csv, in standard_errors.csv"),
    Figure("value", np.nan, "", "of the elevation model as it is, in the unit of the figure"),
    Figure("standard_error", np.nan, "", "root mean square of what it may be off, same unit"),
    Figure("shift", np.nan, "",
           "what error has done to the value: it less the mean over the grounds that may be"),
    Figure("low_90", np.nan, "", "lower bound of the true value, 90 % between both"),
    Figure("high_90", np.nan, "", "upper bound"),
    Figure("grounds", np.nan, "1", "grounds drawn of which it could be told"),
)  # fmt: skip


def column_rows(survey: Survey) -> list[Row]:
    """The data dictionary: one row a column of all tables."""
    score, ranked = survey.score, []
    if score is not None:
        ranked = [_OWN[1], Figure("score", np.nan, "1", f"sum of {score.text}")]
        ranked += [
            Figure(f"score_term_{k}", np.nan, "1", f"its term {term}")
            for k, term in enumerate(score.terms, 1)
        ]
    figures = []
    for figure in (_OWN[0], *ranked, *survey.parcels[0].figures):
        figures.append(figure)
        if has_error(figure.name) and figure.name in survey.parcels[0].doubts:
            words = "its standard error, from the stated error of the heights"
            figures.append(replace(figure, name=f"{figure.name}_se", meaning=words))
    figures += [
        *(
            Figure(f"{GIVEN}{name}", "", "", f"field {name} of the parcels' file")
            for name in survey.parcels[0].given
        ),
        *(_PATCHES if survey.settings.asked.rule else ()),
        *(_SIZES if survey.settings.coarser else ()),
        *(_ROWS if survey.settings.rows else ()),
        *(_DOUBTS if survey.settings.error else ()),
    ]
    kind = SKIES[sky_kind(survey.settings.light)]
    return [
        {
            "column": f.name,
            "unit": f.unit,
            "area_basis": f.basis,
            "meaning": f"{f.meaning}; {kind}" if _is_light(f) else f.meaning,
        }
        for f in figures
    ]


def _is_light(figure: Figure) -> bool:
    """Whether a figure is energy of the sun, or a share of it, so that it has a sky."""
    name = figure.name
    return not name.endswith("_se") and ("_mj_m" in name or name.startswith("share_of_level"))


def layer_words(survey: Survey) -> dict[str, str]:
    """What the layers of parcels.gpkg hold, with the sky that their energies are of."""
    asked, sky = survey.settings.asked, survey.settings.sky_words
    season = f"growing season {asked.season_words}, {asked.period.label}"
    words = {"parcels": f"Parcels and their figures, {season}; energy per area of slope. {sky}"}
    if asked.rule is not None:
        words["rule"] = f"Ground that meets the rule {asked.rule.text}, {season}. {sky}"
    return words
