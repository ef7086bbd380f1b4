"""What a parcel comes to in numbers, each with its unit, meaning and area basis."""

from __future__ import annotations

from calendar import monthrange
from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import HECTARE
from terrasol.engine.outputs import MONTH_NAMES
from terrasol.engine.parcel_cells import Piece
from terrasol.errors import SettingError
from terrasol.practice.classes import (
    FLAT_BELOW_PERCENT,
    SECTOR_NAMES,
    SLOPE_EDGES_PERCENT,
    area_by_class,
    area_by_sector,
    class_names,
    mean_direction,
    slope_percent,
    weighted_mean,
    weighted_percentiles,
)
from terrasol.practice.degree_days import (
    HUGLIN,
    LAPSE,
    MOST_LAPSE,
    WINKLER,
    huglin,
    monthly_shortfall,
    winkler,
)
from terrasol.practice.rules import Patches, Rule, keep_patches, meet
from terrasol.practice.temperatures import Temperatures
from terrasol.sky.period import Period

PERCENTS: Final = (10, 50, 90)
"""Percentiles of slope."""

QUANTITIES: Final = {
    "height_m": "height of the cell, m",
    "slope_percent": "slope, percent",
    "slope_deg": "slope, degrees",
    "aspect_deg": "aspect, degrees clockwise from true north; unknown on flat ground",
    "sky_view": "sky-view factor, 0 to 1",
    "irradiation_season": "irradiation of the growing season, MJ m-2 of slope",
    "share_of_level": "the same, as a share of open level ground at the parcel's height",
    "sun_hours_season": "hours of direct sun of the growing season",
}
"""What a rule can speak of, in every cell."""

WARM_QUANTITIES: Final = {
    "degree_days": "Winkler degree-days, degC day",
    "huglin": "Huglin index, degC day",
}
"""What it can speak of besides, if temperatures are given."""

WITH_HIGHEST: Final = "--temperatures with the highest of every day or month"
"""What Huglin's index needs, in words."""

LAPSE_EFFECT: Final = "winkler_lapse_effect_c_days"
"""The figure that says what the lapse rate does to the degree-days."""


@dataclass(frozen=True)
class Figure:
    """One number of a parcel.

    Parameters
    ----------
    name : str
        Column name, with the unit and the area basis in it.
    value : float or str
        NaN where unknown.
    unit : str
        As UDUNITS reads it; ``"1"`` for a ratio, empty for a text.
    meaning : str
        In words.
    basis : str
        The area that it is of, or per: ``"map"``, ``"slope"``, or empty.
    """

    name: str
    value: float | str
    unit: str
    meaning: str
    basis: str = ""


@dataclass(frozen=True, eq=False)
class Level:
    """Open level ground at a parcel's latitude and mean height.

    Parameters
    ----------
    months : ndarray, shape (months,)
        Irradiation of each month of the period [MJ m-2].
    sun_hours : ndarray, shape (months,)
        Hours of direct sun; empty if they are not asked for.
    """

    months: NDArray[np.float64]
    sun_hours: NDArray[np.float64]


@dataclass(frozen=True)
class Warmth:
    """Temperatures, and how they are carried to the cells.

    Parameters
    ----------
    station : Temperatures
        Of the station.
    lapse : float or twelve floats
        Fall with height [K km-1], for the year or by month.
    beyond : str
        Huglin's factor beyond 50 degrees; see `huglin_factor`.
    """

    station: Temperatures
    lapse: float | tuple[float, ...] = LAPSE
    beyond: str = "undefined"

    @property
    def has_highest(self) -> bool:
        """Whether the highest of any day or month is known, for Huglin's index."""
        return not bool(np.isnan(self.station.highest).all())

    def layers(self, heights: NDArray[np.float32], latitude: float) -> dict[str, NDArray[Any]]:
        """Degree-days of cells of these heights [m], one band each; Huglin's if it can be told."""
        place: dict[str, Any] = {"latitude": latitude, "lapse": self.lapse}
        found = {"degree_days": winkler(self.station, heights, **place)[None]}
        steeper = np.minimum(np.asarray(self.lapse) + 1.0, MOST_LAPSE).tolist()
        more = winkler(self.station, heights, latitude=latitude, lapse=steeper)
        found["lapse_effect"] = more[None] - found["degree_days"]
        if self.station.basis.startswith("monthly"):
            found["shortfall"] = monthly_shortfall(self.station, heights, **place)[None]
        if self.has_highest:
            index = huglin(self.station, heights, beyond=self.beyond, **place)
            found["huglin"] = np.asarray(index)[None]
        return found


@dataclass(frozen=True)
class Asked:
    """How parcels are to be told of.

    Parameters
    ----------
    period : Period
        What is summed.
    season : tuple of int
        Months of the growing season, in order.
    slope_edges : tuple of float
        Between the classes of slope [percent].
    flat_below : float
        Ground flatter than this faces nowhere [percent].
    rule : Rule, optional
        That cells have to meet.
    least_patch : float
        Connected patches smaller than this do not count [m2].
    warmth : Warmth, optional
        Temperatures for degree-days.

    Raises
    ------
    SettingError
        A season that the period does not hold, classes that do not ascend, a negative area.
    """

    period: Period
    season: tuple[int, ...]
    slope_edges: tuple[float, ...] = SLOPE_EDGES_PERCENT
    flat_below: float = FLAT_BELOW_PERCENT
    rule: Rule | None = None
    least_patch: float = 0.0
    warmth: Warmth | None = None
    season_places: tuple[int, ...] = field(init=False)

    def __post_init__(self) -> None:
        """Find the season in the period, and refuse classes that are none."""
        area_by_class([], self.slope_edges, [])
        if not 0.0 <= self.flat_below < 100.0:
            raise SettingError(f"flat below {self.flat_below:g} % is not 0 to under 100 %")
        if not self.least_patch >= 0.0:
            raise SettingError(f"the least patch must be 0 m2 or more; got {self.least_patch:g}")
        if self.rule is not None and self.warmth is not None:
            self._check_words(self.rule, self.warmth)
        object.__setattr__(self, "season_places", season_places(self.period, self.season))

    @staticmethod
    def _check_words(rule: Rule, warmth: Warmth) -> None:
        """Refuse a rule that asks the temperatures for what they cannot tell."""
        if "huglin" in rule.names and not warmth.has_highest:
            raise SettingError(f"the rule {rule.text!r} names huglin, which needs {WITH_HIGHEST}")

    @property
    def season_words(self) -> str:
        """The season for people: ``April to October``, with years if they are not typical."""
        first, last = (self.period.months[self.season_places[k]] for k in (0, -1))
        names = [MONTH_NAMES[month - 1] for _, month in (first, last)]
        if not self.period.typical:
            names = [f"{n} {year}" for n, (year, _) in zip(names, (first, last), strict=True)]
        return names[0] if first == last else " to ".join(names)

    @property
    def season_days(self) -> int:
        """Days of the season."""
        return sum(self.period.month_days[k] for k in self.season_places)


def season_places(period: Period, season: Sequence[int]) -> tuple[int, ...]:
    """Find the months of a growing season in a period.

    Parameters
    ----------
    period : Period
        A typical year goes round: its January follows its December.
    season : sequence of int
        Months in order, such as 10, 11, 12, 1, 2, 3, 4.

    Returns
    -------
    tuple of int
        Places in ``period.months`` of the last whole season.

    Raises
    ------
    SettingError
        The period holds no whole one.

    Examples
    --------
    >>> from terrasol.sky.period import parse_period
    >>> season_places(parse_period("2024-10-01/2025-10-31"), (9, 10))
    (11, 12)
    """
    whole = [
        days == monthrange(year, month)[1]
        for (year, month), days in zip(period.months, period.month_days, strict=True)
    ]
    numbers = [month for _, month in period.months]
    if period.typical:
        return tuple(numbers.index(month) for month in season)
    count = len(season)
    for first in range(len(numbers) - count, -1, -1):
        if numbers[first : first + count] == list(season) and all(whole[first : first + count]):
            return tuple(range(first, first + count))
    names = " to ".join(MONTH_NAMES[m - 1] for m in (season[0], season[-1]))
    raise SettingError(
        f"the period {period.label} holds no whole growing season, {names}: choose a longer period,"
        " or another --season"
    )


def month_keys(period: Period) -> tuple[str, ...]:
    """Names of the period's months in column names: ``m04``, or ``2025_04``."""
    if period.typical:
        return tuple(f"m{month:02d}" for _, month in period.months)
    return tuple(f"{year}_{month:02d}" for year, month in period.months)


def quantities(piece: Piece, level: Level, asked: Asked) -> dict[str, NDArray[np.float64]]:
    """What a rule can speak of, in every cell of a piece's window."""
    places = list(asked.season_places)
    season = piece.layers["irradiation_months"][places].sum(axis=0, dtype=np.float64)
    found = {
        "height_m": piece.heights,
        "slope_percent": slope_percent(piece.slope),
        "slope_deg": piece.slope,
        "aspect_deg": piece.aspect,
        "sky_view": piece.layers["sky_view"][0],
        "irradiation_season": season,
        "share_of_level": season / level.months[places].sum(),
    }
    if "sun_hours_months" in piece.layers:
        found["sun_hours_season"] = piece.layers["sun_hours_months"][places].sum(axis=0)
    for name in WARM_QUANTITIES:
        if name in piece.layers:
            found[name] = piece.layers[name][0]
    return {name: np.asarray(values, np.float64) for name, values in found.items()}


def patches_of(piece: Piece, level: Level, asked: Asked) -> tuple[Patches, NDArray[np.bool_]]:
    """Where a piece meets the rule, small patches left out, and where that cannot be told."""
    assert asked.rule is not None
    verdict = meet(asked.rule, quantities(piece, level, asked))
    patches = keep_patches(verdict.met & piece.known, piece.weights, asked.least_patch)
    return patches, verdict.unknown & piece.known


def figures_of(piece: Piece, level: Level, asked: Asked) -> list[Figure]:
    """All numbers of a parcel at one cell size."""
    return [
        *_extent(piece),
        *_slope(piece, asked),
        *_aspect(piece, asked),
        *_light(piece, level, asked),
        *(_hours(piece, level, asked) if "sun_hours_months" in piece.layers else ()),
        *(_rule(piece, level, asked) if asked.rule is not None else ()),
        *(_warmth(piece) if "degree_days" in piece.layers else ()),
    ]


def _extent(piece: Piece) -> list[Figure]:
    """Areas and heights."""
    area, known = float(piece.area.sum()), float(piece.weights.sum())
    surface = float(piece.surface.sum()) if known else np.nan
    inside = piece.area > 0.0
    heights = piece.heights[inside & np.isfinite(piece.heights)]
    low, high = (heights.min(), heights.max()) if heights.size else (np.nan, np.nan)
    drawn = area / piece.inside if piece.inside > 0.0 else np.nan
    return [
        Figure("drawn_ha_map", drawn / HECTARE, "ha",
               "true level area of the whole outline, on the raster or not", "map"),
        Figure("map_area_ha", area / HECTARE, "ha",
               "what of the outline lies on the raster, voids counted", "map"),
        Figure("known_ha_map", known / HECTARE, "ha",
               "what of that has a known slope: all other figures are of it", "map"),
        Figure("surface_area_ha", surface / HECTARE, "ha",
               "area of the slope's own surface, where the slope is known", "slope"),
        Figure("unknown_ha_map", (area - known) / HECTARE, "ha",
               "area on the raster without a known slope: in no other figure", "map"),
        Figure("outside_share", 1.0 - piece.inside, "1",
               "share of the parcel that lies outside the raster: in no other figure", "map"),
        Figure("height_least_m", float(low), "m", "least height of its cells"),
        Figure("height_mean_m", piece.height, "m", "mean height", "map"),
        Figure("height_greatest_m", float(high), "m", "greatest height of its cells"),
    ]  # fmt: skip


def _slope(piece: Piece, asked: Asked) -> list[Figure]:
    """Slope and its classes."""
    steep = np.where(piece.known, slope_percent(piece.slope), np.nan)
    weights = piece.weights
    figures = [
        Figure("slope_mean_percent", weighted_mean(steep, weights), "percent", "mean slope", "map")
    ]
    percentiles = weighted_percentiles(steep, weights, PERCENTS)
    for percent, value in zip(PERCENTS, percentiles.tolist(), strict=True):
        words = f"slope that {percent} % of the area does not pass"
        figures.append(Figure(f"slope_p{percent}_percent", value, "percent", words, "map"))
    areas = area_by_class(steep, asked.slope_edges, weights).areas / HECTARE
    names = class_names(asked.slope_edges, "%")
    for key, words, value in zip(
        slope_class_keys(asked.slope_edges), names, _or_nan(areas, weights), strict=True
    ):
        figures.append(Figure(f"{key}_ha_map", value, "ha", f"area with a slope {words}", "map"))
    return figures


def slope_class_keys(edges: Sequence[float]) -> list[str]:
    """Beginnings of the columns of slope classes.

    Examples
    --------
    >>> slope_class_keys([5, 12.5])
    ['slope_under_5_percent', 'slope_5_to_12.5_percent', 'slope_from_12.5_percent']
    """
    between = [f"slope_{a:g}_to_{b:g}_percent" for a, b in pairwise(edges)]
    return [f"slope_under_{edges[0]:g}_percent", *between, f"slope_from_{edges[-1]:g}_percent"]


def _or_nan(areas: NDArray[np.float64], weights: NDArray[np.float64]) -> list[float]:
    """Areas, or unknown where nothing of the parcel is known."""
    return areas.tolist() if weights.sum() > 0.0 else [np.nan] * len(areas)


def _aspect(piece: Piece, asked: Asked) -> list[Figure]:
    """Where the ground faces."""
    weights, flat = piece.weights, {"flat_below_percent": asked.flat_below}
    mean = mean_direction(piece.aspect, piece.slope, weights, **flat)
    sectors = area_by_sector(piece.aspect, piece.slope, weights, **flat)
    below = f"flatter than {asked.flat_below:g} %"
    figures = [
        Figure("aspect_mean_deg", mean.direction, "degree",
               f"circular mean of aspect, clockwise from true north, ground {below} left out",
               "map"),
        Figure("aspect_resultant", mean.resultant, "1",
               "length of the mean vector of aspect: 1 if all ground faces one way, 0 if it"
               " cancels", "map"),
    ]  # fmt: skip
    areas = np.append(sectors.flat, sectors.areas) / HECTARE
    flat_area, *facing = _or_nan(areas, weights)
    figures.append(Figure("aspect_flat_ha_map", flat_area, "ha", f"area {below}", "map"))
    for key, value in zip(sector_keys(), facing, strict=True):
        direction = key.removeprefix("aspect_").replace("_", "-")
        words = f"area that faces {direction}, within 22.5 degree"
        figures.append(Figure(f"{key}_ha_map", value, "ha", words, "map"))
    return figures


def sector_keys() -> list[str]:
    """Beginnings of the columns of sectors of aspect: ``aspect_north`` first, then clockwise."""
    return [f"aspect_{name}" for name in SECTOR_NAMES]


def _light(piece: Piece, level: Level, asked: Asked) -> list[Figure]:
    """Irradiation by month and season, beside open level ground."""
    months, surface = piece.layers["irradiation_months"], piece.surface
    means = np.array([weighted_mean(month, surface) for month in months])
    places = list(asked.season_places)
    season, flat = float(means[places].sum()), float(level.months[places].sum())
    words = asked.season_words
    figures = [
        Figure("sky_view_mean", weighted_mean(piece.layers["sky_view"][0], piece.weights), "1",
               "mean sky-view factor", "map"),
        Figure("irradiation_season_mj_m2_slope", season, "MJ m-2",
               f"irradiation of the growing season, {words}: mean over the surface", "slope"),
        Figure("irradiation_season_mj_m2_d_slope", season / asked.season_days, "MJ m-2 d-1",
               "the same for a mean day of the season", "slope"),
        Figure("irradiation_season_level_mj_m2", flat, "MJ m-2",
               "the same of open level ground at the parcel's latitude and mean height"),
        Figure("share_of_level_season", season / flat, "1",
               "irradiation of the season as a share of open level ground"),
    ]  # fmt: skip
    for key, label, mean in zip(month_keys(asked.period), _labels(asked), means, strict=True):
        figures.append(
            Figure(f"irradiation_{key}_mj_m2_slope", float(mean), "MJ m-2",
                   f"irradiation of {label}: mean over the surface", "slope")
        )  # fmt: skip
    for key, label, share in zip(
        month_keys(asked.period), _labels(asked), means / level.months, strict=True
    ):
        words = f"irradiation of {label} as a share of open level ground"
        figures.append(Figure(f"share_of_level_{key}", float(share), "1", words))
    return figures


def _labels(asked: Asked) -> list[str]:
    """Months for people."""
    typical = asked.period.typical
    return [MONTH_NAMES[m - 1] + ("" if typical else f" {y}") for y, m in asked.period.months]


def _hours(piece: Piece, level: Level, asked: Asked) -> list[Figure]:
    """Hours of direct sun, and the first and last sun of a day of each month."""
    weights, places = piece.weights, list(asked.season_places)
    means = np.array([weighted_mean(m, weights) for m in piece.layers["sun_hours_months"]])
    season, flat = float(means[places].sum()), float(level.sun_hours[places].sum())
    figures = [
        Figure("sun_hours_season_h", season, "h",
               "hours of direct sun of the growing season, sky without clouds: mean", "map"),
        Figure("sun_hours_season_level_h", flat, "h", "the same of open level ground"),
    ]  # fmt: skip
    keys = month_keys(asked.period)
    for key, label, mean in zip(keys, _labels(asked), means.tolist(), strict=True):
        words = f"hours of direct sun in {label}, sky without clouds: mean"
        figures.append(Figure(f"sun_hours_{key}_h", mean, "h", words, "map"))
    if "first_sun" not in piece.layers or len(piece.layers["first_sun"]) != len(keys):
        return figures
    for layer, words in (("first_sun", "first"), ("last_sun", "last")):
        for key, label, hour in zip(keys, _labels(asked), piece.layers[layer], strict=True):
            median = weighted_percentiles(hour, weights, (50,))[0]
            text = (
                f"{words} direct sun on a day of {label}, hours since 0:00 by the clock in"
                " run.json: median of the area that has sun that day"
            )
            figures.append(Figure(f"{layer}_{key}_h", float(median), "h", text, "map"))
    for key, label, hour in zip(keys, _labels(asked), piece.layers["first_sun"], strict=True):
        total = weights.sum()
        none = float(weights[np.isnan(hour)].sum() / total) if total else np.nan
        text = f"share of the area without direct sun on that day of {label}"
        figures.append(Figure(f"no_sun_share_{key}", none, "1", text, "map"))
    return figures


def _rule(piece: Piece, level: Level, asked: Asked) -> list[Figure]:
    """What meets the rule."""
    assert asked.rule is not None
    patches, unknown = patches_of(piece, level, asked)
    total, rule = float(piece.weights.sum()), asked.rule.text
    area = float(patches.areas.sum()) if total else np.nan
    least = f", in patches of {asked.least_patch:g} m2 or more" if asked.least_patch else ""
    return [
        Figure("rule_ha_map", area / HECTARE, "ha", f"area where {rule}{least}", "map"),
        Figure("rule_share", area / total if total else np.nan, "1",
               "the same as a share of the parcel's known area", "map"),
        Figure("rule_patches", float(len(patches.areas)), "1", "connected patches it lies in"),
        Figure("rule_largest_patch_ha_map",
               float(patches.areas.max(initial=0.0)) / HECTARE, "ha", "the largest of them", "map"),
        Figure("rule_ignored_ha_map", patches.ignored_area / HECTARE, "ha",
               "area that meets the rule but lies in smaller patches", "map"),
        Figure("rule_unknown_ha_map", float(piece.weights[unknown].sum()) / HECTARE, "ha",
               "area where the rule cannot be told", "map"),
    ]  # fmt: skip


def _warmth(piece: Piece) -> list[Figure]:
    """Degree-days and their classes."""
    figures = []
    for layer, scale, words in (
        ("degree_days", WINKLER, "degree-days after Winkler, base 10 degC, of its seven months"),
        ("huglin", HUGLIN, "Huglin's heliothermal index, of its six months"),
    ):
        if layer not in piece.layers:
            continue
        name = "winkler" if layer == "degree_days" else layer
        sums = np.where(piece.weights > 0.0, piece.layers[layer][0], np.nan)
        mean = weighted_mean(sums, piece.weights)
        low, high = weighted_percentiles(sums, piece.weights, (0, 100)).tolist()
        place = int(scale.of(mean))
        figures += [
            Figure(f"{name}_mean_c_days", mean, "K day", f"{words}: mean", "map"),
            Figure(f"{name}_least_c_days", low, "K day", "the same, least of its cells"),
            Figure(f"{name}_greatest_c_days", high, "K day", "the same, greatest of its cells"),
            Figure(f"{name}_class", scale.names[place] if place >= 0 else "", "",
                   "class of the mean"),
        ]  # fmt: skip
    effect = weighted_mean(piece.layers["lapse_effect"][0], piece.weights)
    words = "what a lapse rate of 1 K km-1 more would add to the degree-days after Winkler"
    figures.append(Figure(LAPSE_EFFECT, effect, "K day", words, "map"))
    if "shortfall" in piece.layers:
        short = weighted_mean(piece.layers["shortfall"][0], piece.weights)
        words = "what sums of monthly means fall short of sums of days, estimated; not added"
        figures.append(Figure("winkler_shortfall_c_days", short, "K day", words, "map"))
    return figures
