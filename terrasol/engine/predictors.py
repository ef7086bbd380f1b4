"""What is told of a plot: predictors by name, unit, meaning and source; their values by cell."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.outputs import MONTH_NAMES, PARTS, basis_words, sky_words
from terrasol.light.hours import HoursSettings
from terrasol.light.settings import LightSettings
from terrasol.practice import heat_load
from terrasol.sky.period import Period

MONTHS: Final = tuple(name[:3].lower() for name in MONTH_NAMES)
"""Months in the names of columns: jan to dec."""

GROUPS: Final = {
    "height": "height above the sea",
    "slope": "slope",
    "aspect": "aspect, northness, eastness, and both by slope",
    "transforms": "aspect after Beers and after Stage",
    "heat_load": "radiation and heat load after McCune and Keon",
    "sky_view": "sky-view factor",
    "irradiation": "irradiation of year and growing season, by part",
    "irradiation_months": "irradiation of each month, by part",
    "photosynthetic": "photosynthetic light of year and growing season",
    "photosynthetic_months": "photosynthetic light of each month",
    "sun_hours": "hours of direct sun of year and growing season",
    "sun_hours_months": "hours of direct sun of each month",
    "first_last_sun": "first and last sun on the 21st of each month",
}
"""Groups of predictors, as `--predictors` takes them."""

OF_LIGHT: Final = (
    "irradiation", "irradiation_months", "photosynthetic", "photosynthetic_months",
)  # fmt: skip
"""Groups that need energy to be summed."""

OF_TIME: Final = ("sun_hours", "sun_hours_months", "first_last_sun")
"""Groups that need hours of sun to be counted."""

HORN: Final = "Horn 1981"
MCCUNE: Final = "McCune and Keon 2002"
OWN_SUM: Final = "docs/method.md"

Array = NDArray[np.float64]
Bands = dict[str, NDArray[np.float32]]


@dataclass(frozen=True)
class Predictor:
    """One quantity of which every cell has a value.

    Parameters
    ----------
    name : str
        The column's name, with its unit.
    unit : str
        As UDUNITS reads it; "1" for a number without unit.
    words : str
        What it is.
    group : str
        One of `GROUPS`.
    source : str
        Paper, or page of the documentation.
    basis : str
        Area that an energy is stated for: "per area of slope", "per area of map" or nothing.
    plain : bool
        A flag, told of the cell alone, not of circles and errors.
    """

    name: str
    unit: str
    words: str
    group: str
    source: str
    basis: str = ""
    plain: bool = False


def ground_predictors() -> list[Predictor]:
    """What the shape of the ground says, in the order of `ground_values`."""
    flat = "void on flat ground"
    return [
        Predictor("height_m", "m", "height of the ground", "height", "the elevation raster"),
        Predictor("slope_deg", "degree", "slope from the level", "slope", HORN),
        Predictor(
            "northness", "1", f"cosine of aspect: 1 facing north; {flat}", "aspect", HORN
        ),
        Predictor(
            "eastness", "1", f"sine of aspect: 1 facing east; {flat}", "aspect", HORN
        ),
        Predictor("slope_northness", "1", "sine of slope times northness", "aspect", HORN),
        Predictor("slope_eastness", "1", "sine of slope times eastness", "aspect", HORN),
        Predictor(
            "beers", "1", "cos(45 degrees - aspect) + 1: 0 facing south-west, 2 north-east; made"
            " for the northern hemisphere; void on flat ground", "transforms", "Beers et al. 1966",
        ),
        Predictor(
            "stage_north", "1", "tangent of slope times cosine of aspect", "transforms",
            "Stage 1976",
        ),
        Predictor(
            "stage_east", "1", "tangent of slope times sine of aspect", "transforms", "Stage 1976"
        ),
        *_heat_predictors(),
        Predictor(
            "sky_view", "1", "sky-view factor, terrain and own slope counted", "sky_view",
            "Dozier and Frew 1990",
        ),
    ]  # fmt: skip


def _heat_predictors() -> list[Predictor]:
    """Radiation, heat load and validity of each equation of McCune and Keon."""
    found = []
    for number in heat_load.EQUATIONS:
        equation = f"equation {number}; no shade, no cloud, for ranking slopes"
        found += [
            Predictor(
                f"mccune_radiation_{number}_mj_cm2_yr", heat_load.UNIT,
                f"potential annual direct radiation from latitude, slope and aspect, {equation}",
                "heat_load", MCCUNE, "per area of slope",
            ),
            Predictor(
                f"mccune_heat_{number}_mj_cm2_yr", heat_load.UNIT,
                f"heat load from latitude, slope and folded aspect, {equation}",
                "heat_load", MCCUNE, "per area of slope",
            ),
            Predictor(
                f"mccune_valid_{number}", "1",
                f"1 where latitude and slope lie in the range of equation {number}, else 0",
                "heat_load", MCCUNE, plain=True,
            ),
        ]  # fmt: skip
    return found


def ground_values(bands: Bands, height: Array, latitude: Array) -> Array:
    """Values of `ground_predictors`, shape (cells, predictors), NaN where void.

    Parameters
    ----------
    bands : dict of ndarray, shape (1, cells)
        ``slope`` and ``aspect`` [degree] and ``sky_view``.
    height, latitude : ndarray, shape (cells,)
        Metres and degrees.
    """
    slope = bands["slope"][0].astype(np.float64)
    aspect = bands["aspect"][0].astype(np.float64)
    toward_north, toward_east = heat_load.stage(slope, aspect)
    columns = [
        height,
        slope,
        heat_load.northness(aspect),
        heat_load.eastness(aspect),
        heat_load.slope_northness(slope, aspect),
        heat_load.slope_eastness(slope, aspect),
        heat_load.beers(aspect),
        toward_north,
        toward_east,
    ]
    for number in heat_load.EQUATIONS:
        for fold in heat_load.FOLDS:
            columns.append(
                heat_load.potential_radiation(latitude, slope, aspect, equation=number, fold=fold)
            )
        valid = heat_load.valid(latitude, slope, equation=number)
        columns.append(np.where(np.isnan(slope), np.nan, valid))
    columns.append(bands["sky_view"][0].astype(np.float64))
    return np.stack(columns, axis=1)


def calendar(period: Period) -> list[int]:
    """Places of January to December among the months of a period of twelve."""
    months = [month for _, month in period.months]
    return [months.index(month) for month in range(1, 13)]


def season_words(season: Sequence[int]) -> str:
    """First and last month of a season in words."""
    return f"{MONTH_NAMES[season[0] - 1]} to {MONTH_NAMES[season[-1] - 1]}"


def _spans(season: Sequence[int], period: Period) -> list[tuple[str, str, str]]:
    """Name, words and ending of the group of the year, the season and the months."""
    year = "typical year" if period.typical else period.label
    whole = [("year", year, ""), ("season", f"growing season, {season_words(season)}", "")]
    return [*whole, *((name, MONTH_NAMES[k], "_months") for k, name in enumerate(MONTHS))]


def light_predictors(settings: LightSettings, season: Sequence[int]) -> list[Predictor]:
    """What the light says, in the order of `light_values`."""
    words = sky_words(settings)
    basis, ending = basis_words(settings), settings.basis
    unit = "mj_m2" if settings.unit == "MJ m-2" else "kwh_m2"
    spans = _spans(season, settings.period)
    found = [
        Predictor(
            f"irradiation_{span}_{part}_{unit}_{ending}", settings.unit,
            f"{words.format(part)} in the plane of the slope, {said}",
            f"irradiation{months}", OWN_SUM, basis,
        )
        for span, said, months in spans
        for part in PARTS
    ]  # fmt: skip
    return found + [
        Predictor(
            f"photosynthetic_{span}_mol_m2_d_{ending}", "mol m-2 d-1",
            f"photosynthetic photons (400 to 700 nm) of a mean day, {said}:"
            f" {settings.photons_per_joule:g} umol a joule of {words.format('global')}",
            f"photosynthetic{months}", OWN_SUM, basis,
        )
        for span, said, months in spans
    ]  # fmt: skip


def light_values(bands: Bands, settings: LightSettings, season: Sequence[int]) -> Array:
    """Values of `light_predictors`, shape (cells, predictors), NaN where void."""
    order = calendar(settings.period)
    days = np.array(settings.period.month_days, np.float64)[order]
    names = ("irradiation_months", "beam_months", "diffuse_months", "reflected_months")
    parts = [_spanned(bands[name][order].astype(np.float64), season) for name in names]
    photons = bands["photosynthetic_months"][order].astype(np.float64) * days[:, None]
    spanned_days = _spanned(days[:, None], season)
    energy = np.stack(parts, axis=1).reshape(-1, photons.shape[1])
    return np.concatenate([energy, _spanned(photons, season) / spanned_days]).T


def _spanned(months: Array, season: Sequence[int]) -> Array:
    """Sums of the year and of a season before the months, shape (14, cells)."""
    of_season = months[[month - 1 for month in season]].sum(axis=0)
    return np.concatenate([months.sum(axis=0)[None], of_season[None], months])


def hours_predictors(settings: HoursSettings, season: Sequence[int]) -> list[Predictor]:
    """What the hours of sun say, in the order of `hours_values`."""
    source = "docs/hours.md"
    found = [
        Predictor(
            f"sun_{span}_h", "h",
            f"hours of direct sun, terrain shade and own slope counted, no clouds, {said}",
            f"sun_hours{months}", source,
        )
        for span, said, months in _spans(season, settings.period)
    ]  # fmt: skip
    for which in ("first", "last"):
        for day in sorted(settings.days, key=lambda day: day.month):
            found.append(
                Predictor(
                    f"{which}_sun_{MONTHS[day.month - 1]}_h", "h",
                    f"{which} direct sun on {day.day} {MONTH_NAMES[day.month - 1]}, hours since"
                    f" 0:00, {settings.clock.words}; void without sun that day",
                    "first_last_sun", source,
                )
            )  # fmt: skip
    return found


def hours_values(bands: Bands, settings: HoursSettings, season: Sequence[int]) -> Array:
    """Values of `hours_predictors`, shape (cells, predictors), NaN where void."""
    months = bands["sun_hours_months"][calendar(settings.period)].astype(np.float64)
    days = np.argsort([day.month for day in settings.days], kind="stable")
    walked = [bands[f"{which}_sun"][days].astype(np.float64) for which in ("first", "last")]
    return np.concatenate([_spanned(months, season), *walked]).T
