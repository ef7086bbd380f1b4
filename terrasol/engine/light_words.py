"""What light was computed from, in sentences for people: sky, air, albedo, basis, shade."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from terrasol.constants import CLEAR_SKY_PAPERS
from terrasol.engine.outputs import basis_words, shade_words, sky_kind, sky_words
from terrasol.ground.beyond import Scene
from terrasol.light.settings import LightSettings
from terrasol.sky.cloud import MonthlySky
from terrasol.words import range_text

_SKY_NOTES: Final = {
    "clear": "Sky without clouds after {paper}; real skies give less.",
    "measured": "Sky as {station} measured it, interval by interval; clear air after {paper}.",
    "monthly index": "Clouds by one index a month, {index}; clear air after {paper}.",
}


def light_notes(settings: LightSettings, scene: Scene) -> tuple[str, str, str, str]:
    """What energy was computed from: sky, air and ground, basis, shade; a sentence each."""
    return (
        sky_note(settings),
        assumed_note(settings),
        f"Energy {basis_words(settings)}, with light from the ground around.",
        shade_words(scene),
    )


def sky_note(settings: LightSettings, station: str = "") -> str:
    """Say which sky the light is of, and after whom its clear air.

    Parameters
    ----------
    settings : LightSettings
    station : str
        Name of the station that measured it, where that is known.
    """
    return _SKY_NOTES[sky_kind(settings)].format(
        paper=CLEAR_SKY_PAPERS[settings.air.model],
        station=station or "a station",
        index=_index_words(settings),
    )


def _index_words(settings: LightSettings) -> str:
    """Clear-sky indices of the months that count, or the least and the greatest of a map."""
    months = [month - 1 for _, month in settings.period.months]
    if settings.index_map is not None:
        layers = settings.index_map
        return f"by a raster, {_ends(layers if len(layers) == 1 else layers[months])}"
    if isinstance(settings.sky, MonthlySky):
        return range_text([settings.sky.index[month] for month in months])
    return ""


def assumed_note(settings: LightSettings) -> str:
    """Say what air and ground were taken for: turbidity, if the air has one, and albedo."""
    if settings.albedo_map is None:
        assumed = f"albedo of the ground {range_text(settings.month_albedo)}."
    else:
        assumed = f"albedo of the ground by a raster, {_ends(settings.albedo_map)}."
    if settings.air.linke is not None:
        linke = [settings.air.linke[month - 1] for _, month in settings.period.months]
        assumed = f"Linke turbidity by month {range_text(linke)}, {assumed}"
    return assumed[0].upper() + assumed[1:]


def _ends(layers: NDArray[np.float32]) -> str:
    """The least and the greatest of a map."""
    known = layers[np.isfinite(layers)]
    return range_text([float(known.min()), float(known.max())]) if known.size else "void"


def sky_title(settings: LightSettings, part: str = "") -> str:
    """The sky's words as a title, for a part of the light or for irradiation as such."""
    text = " ".join(sky_words(settings).format(part).split())
    return text[0].upper() + text[1:]
