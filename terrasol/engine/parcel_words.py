"""The words that a rule and a score may use, and what would bring those that are not there."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import replace
from typing import Final

import numpy as np

from terrasol.engine.parcel_cells import Piece
from terrasol.engine.parcel_figures import (
    QUANTITIES,
    WARM_QUANTITIES,
    WITH_HIGHEST,
    Asked,
    Figure,
    Level,
    Warmth,
    figures_of,
    sector_keys,
)
from terrasol.engine.parcel_rows import row_figures
from terrasol.engine.plan import Block
from terrasol.practice.classes import SECTORS
from terrasol.practice.ranking import Score, parse_score
from terrasol.practice.rules import Rule, parse_rule
from terrasol.practice.temperatures import from_monthly

SLOPE_CLASS: Final = re.compile(r"slope_(under|from|[\d.]+_to)_[\d.]+_percent_ha_map")
"""Columns of slope classes, whatever their edges."""

IN_LETTERS: Final = {
    f"aspect_{letters.lower()}_ha_map": f"{key}_ha_map"
    for letters, key in zip(SECTORS, sector_keys(), strict=True)
}
"""Columns of sectors of aspect as they are not called, and as they are."""


def read_rule(text: str, *, warm: bool = False) -> Rule:
    """Read a rule for the cells of parcels.

    Parameters
    ----------
    text : str
        See `parse_rule`.
    warm : bool
        Whether there are temperatures.

    Raises
    ------
    SettingError
        As `parse_rule`; a word that needs temperatures is told apart from an unknown one.
    """
    known = [*QUANTITIES, *(WARM_QUANTITIES if warm else ())]
    return parse_rule(text, known, lambda name: "--temperatures" * (name in WARM_QUANTITIES))


def read_score(text: str, asked: Asked, *, days: int, rows: bool) -> Score:
    """Read a score of parcels.

    Parameters
    ----------
    text : str
        See `parse_score`.
    asked : Asked
        How parcels are told of.
    days : int
        Days of first and last sun.
    rows : bool
        Whether there are vine rows.

    Raises
    ------
    SettingError
        As `parse_score`; a word that needs another option is told apart from an unknown one.
    """

    def needs(name: str) -> str:
        """The option that would bring a figure, or how it is written."""
        if name in IN_LETTERS:
            return f"its sector written out, {IN_LETTERS[name]}"
        for option, other, with_rows in _with_more(asked):
            if name in figure_names(other, days=days, rows=with_rows):
                return option
        return "other edges of --slope-classes" if SLOPE_CLASS.fullmatch(name) else ""

    return parse_score(text, figure_names(asked, days=days, rows=rows), needs)


def _with_more(asked: Asked) -> Iterator[tuple[str, Asked, bool]]:
    """Options, each with what would be asked, and whether of rows, if it were given."""
    yield "--rule", replace(asked, rule=read_rule("height_m > 0")), False
    yield "--rows", asked, True
    means = np.zeros(12)
    plain = Warmth(from_monthly(means, height=0.0))
    whole = Warmth(from_monthly(means, height=0.0, highest=means))
    if asked.warmth is None:
        yield "--temperatures", replace(asked, warmth=whole), False
    else:
        yield "--temperatures by month", replace(asked, rule=None, warmth=plain), False
        yield WITH_HIGHEST, replace(asked, rule=None, warmth=whole), False


def figure_names(asked: Asked, *, days: int, rows: bool) -> list[str]:
    """Names of the figures that are numbers, as a score may use them: those of one level cell."""
    months = len(asked.period.months)
    layers = {
        "slope": 1,
        "aspect": 1,
        "sky_view": 1,
        "irradiation_months": months,
        "sun_hours_months": months,
        "first_sun": days,
        "last_sun": days,
    }
    cell = Piece(
        "", Block(0, 0, 1, 1), np.ones((1, 1)), np.zeros((1, 1), np.float32),
        {name: np.ones((bands, 1, 1), np.float32) for name, bands in layers.items()},
        45.0, 0.0, 1.0,
    )  # fmt: skip
    if asked.warmth is not None:
        cell.layers.update(asked.warmth.layers(cell.heights, cell.latitude))
    figures = figures_of(cell, Level(np.ones(months), np.ones(months)), asked)
    more: list[Figure] = row_figures(None, asked) if rows else []
    return [f.name for f in (*figures, *more) if not isinstance(f.value, str)]
