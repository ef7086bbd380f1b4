"""What the error of the heights leaves open about the figures of parcels."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import partial
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from terrasol.engine.hours import plan_hours
from terrasol.engine.job import plan_irradiation
from terrasol.engine.parcel_cells import LIGHT_LAYERS, Piece, SceneOf
from terrasol.engine.parcel_figures import Asked, Figure, Level, figures_of, slope_class_keys
from terrasol.engine.spread import Spread
from terrasol.engine.trued import Ask, Slopes, propagate_trued
from terrasol.engine.uncertainty import moved, with_tables
from terrasol.engine.windows import collect
from terrasol.ground.elevation import Elevation
from terrasol.ground.uncertainty import DemError
from terrasol.light.hours import HoursSettings
from terrasol.light.settings import LightSettings
from terrasol.practice.ranking import Score, rank

LEVEL: Final = 0.9
"""Probability with which the bounds hold the true value."""

ANGLES: Final = ("aspect_mean_deg",)
"""Figures that are directions."""

SETTLED: Final = (
    "drawn_ha_map", "map_area_ha", "known_ha_map", "unknown_ha_map", "outside_share",
)  # fmt: skip
"""Figures that hang on no height."""

Column = NDArray[np.float64]


@dataclass(frozen=True)
class Doubt:
    """What error leaves open about one figure of one parcel.

    Parameters
    ----------
    value : float
        Of the model as it is.
    standard_error : float
        Root mean square of what it may be off.
    shift : float
        What error has done to it, as far as is known: the value less the mean over the grounds
        that may be.
    low, high : float
        Bounds of the true value, with a probability of `LEVEL`; NaN for a rank.
    count : int
        Grounds of which it could be told.
    """

    value: float
    standard_error: float
    shift: float
    low: float
    high: float
    count: int


def doubts_of(
    elevation: Elevation,
    pieces: Sequence[Piece],
    levels: Sequence[Level],
    numbers: Sequence[Mapping[str, float]],
    light: LightSettings,
    hours: HoursSettings,
    asked: Asked,
    error: DemError,
    *,
    score: Score | None = None,
    scene_of: SceneOf,
    threads: int | None = None,
    told: Callable[[float], None] = lambda share: None,
) -> list[dict[str, Doubt]]:
    """Find the standard errors of parcels' figures, by grounds that may be the true one.

    Parameters
    ----------
    elevation : Elevation
        The ground as it is known.
    pieces, levels, numbers : sequences, one entry a parcel
        As found on it: cells, open level ground, and figures by name.
    light, hours, asked
        As for the survey. Hours of sun are found anew only where rule or score speak of them;
        first and last sun, and vine rows, never.
    error : DemError
        The error of the heights.
    score : Score, optional
        That ranks the parcels.
    scene_of : callable
        What stands beyond and above the ground.
    threads : int, optional
        Default: as many as there are cores to use.
    told : callable
        Told the share done.

    Returns
    -------
    list of dict of Doubt
        By figure, one dict a parcel; with a score also ``score`` and ``rank``.
    """
    windows = [piece.window for piece in pieces]
    plan = plan_irradiation(elevation, light)
    plan = with_tables(replace(plan, scene=scene_of(elevation, plan.frame)), error, threads)
    of_hours = None
    if _needs_hours(asked, score):
        of_hours = plan_hours(elevation, replace(hours, days=()), plan.scene)

    def look(ground: Elevation) -> Ask:
        found, _ = collect(moved(plan, ground), windows, threads, None, LIGHT_LAYERS)
        if of_hours is not None:
            names = [n.name for n in of_hours.layers if n.name == "sun_hours_months"]
            more, _ = collect(moved(of_hours, ground), windows, threads, None, names)
            found = [one | other for one, other in zip(found, more, strict=True)]
        on = [_on(*each, ground, asked) for each in zip(pieces, found, strict=True)]
        return partial(_columns, on, levels, numbers, asked, score)

    spreads = propagate_trued(
        elevation,
        error,
        look,
        windows=windows,
        areas=[name for name in (*numbers[0], "score") if _is_area(name)],
        classes=[f"{key}_ha_map" for key in slope_class_keys(asked.slope_edges)],
        angles=ANGLES,
        told=told,
    )
    return [
        {name: _doubt(spread, k, name, numbers[k]) for name, spread in spreads.items()}
        for k in range(len(pieces))
    ]


def _needs_hours(asked: Asked, score: Score | None) -> bool:
    """Whether rule or score speak of hours of sun."""
    names = [*(asked.rule.names if asked.rule else ()), *(score.names if score else ())]
    return any(name.startswith("sun_hours") for name in names)


def _on(piece: Piece, layers: dict[str, Any], ground: Elevation, asked: Asked) -> Piece:
    """A piece on another ground."""
    heights = ground.heights[piece.window.slices]
    if asked.warmth is not None:
        layers = layers | asked.warmth.layers(heights, piece.latitude)
    return replace(piece, heights=heights, layers=layers)


def _columns(
    pieces: Sequence[Piece],
    levels: Sequence[Level],
    numbers: Sequence[Mapping[str, float]],
    asked: Asked,
    score: Score | None,
    slopes: Slopes | None,
) -> dict[str, Column]:
    """Figures of all pieces by name, of their own slopes or of others."""
    if slopes is not None:
        pieces = [_with_slopes(piece, slopes) for piece in pieces]
    rows = [_numbers(piece, level, asked) for piece, level in zip(pieces, levels, strict=True)]
    columns = {name: np.array([row[name] for row in rows]) for name in rows[0]}
    if score is not None:
        plain = {name: np.array([n[name] for n in numbers]) for name in numbers[0]}
        ranking = rank(score, plain | columns)
        places = np.where(ranking.rank > 0, ranking.rank, np.nan)
        columns |= {"score": ranking.total, "rank": places}
    return columns


def _with_slopes(piece: Piece, slopes: Slopes) -> Piece:
    """A piece with its part of other slopes [percent]."""
    degrees = np.degrees(np.arctan(slopes[piece.window.slices] / np.float32(100.0)))
    return replace(piece, layers=piece.layers | {"slope": degrees[None]})


def _numbers(piece: Piece, level: Level, asked: Asked) -> dict[str, float]:
    """Figures of a piece that are numbers and hang on the heights."""
    figures: list[Figure] = figures_of(piece, level, asked)
    return {
        f.name: f.value
        for f in figures
        if not isinstance(f.value, str)
        and f.name not in SETTLED
        and not f.name.endswith(("_level_mj_m2", "_level_h"))
    }


def _doubt(spread: Spread, place: int, name: str, numbers: Mapping[str, float]) -> Doubt:
    """One parcel's part of a spread."""
    one = Spread(
        spread.estimate[place],
        spread.mean[place],
        spread.deviation[place],
        spread.count[place],
        spread.angle,
    )
    low, high = one.interval(LEVEL, _bounds(name, numbers))
    if name == "rank":
        low = high = np.asarray(np.nan)
    return Doubt(
        float(one.estimate),
        float(one.standard_error),
        float(one.shift),
        float(low),
        float(high),
        int(one.count),
    )


def _is_area(name: str) -> bool:
    """Whether a figure is an area past some bound, its share of the parcel, or may hang on one."""
    return name.endswith("_ha_map") or name in ("rule_share", "score")


def _bounds(name: str, numbers: Mapping[str, float]) -> tuple[float, float]:
    """Least and greatest value that a figure can have."""
    if name.endswith("_ha_map"):
        return 0.0, numbers["known_ha_map"]
    if name in ("rule_share", "sky_view_mean", "aspect_resultant") or name.startswith("no_sun"):
        return 0.0, 1.0
    anything = name in ("score", *ANGLES) or name.startswith("height")
    return (-np.inf if anything else 0.0), np.inf
