"""What each job leaves behind: layers with their names and units."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final, Protocol

import numpy as np

from terrasol.files.layers import Layer
from terrasol.ground.beyond import Scene
from terrasol.light.settings import UNITS, LightSettings
from terrasol.sky.cloud import MonthlySky
from terrasol.sky.period import Period

MONTH_NAMES = (
    "January", "February", "March", "April", "May", "June", "July", "August", "September",
    "October", "November", "December",
)  # fmt: skip

PARTS = ("global", "beam", "diffuse", "reflected")

WITH_ERROR_OF_GROUND = ("slope", "aspect")
"""Layers of the ground alone that error of the heights is told for."""

WHOLE_PERIOD = ("irradiation_year", "irradiation_period")
"""Layers of irradiation that it is told for, of global light."""

SUNNY_DAY = 20.0
"""Order of a clear day's energy, MJ m-2; only for the rounding of stored values."""

SLOPE = Layer(
    "slope", ("slope",), "degree", "slope of the ground from the level", "ground_slope_angle"
)
ASPECT = Layer(
    "aspect",
    ("aspect",),
    "degree",
    "direction the slope faces, downslope, clockwise from true north; void on flat ground",
    "ground_slope_direction",
    resolution=2.0**-7,
)
SKY_VIEW = Layer(
    "sky_view",
    ("sky-view factor",),
    "1",
    "share of an even sky's light that reaches the slope, terrain shade and own slope counted",
    resolution=2.0**-14,
)
STATUS = Layer(
    "status",
    ("status",),
    "1",
    "0 height as read, 1 height filled by interpolation, 2 void",
    dtype="uint8",
)


def horizon_layer(azimuths: int) -> Layer:
    """The horizon, one band an azimuth."""
    bands = tuple(f"horizon towards {360.0 * a / azimuths:g} degrees" for a in range(azimuths))
    return Layer(
        "horizon",
        bands,
        "degree",
        "height of the terrain horizon above the level, not below 0, by azimuth from true north",
        resolution=2.0**-8,
    )


def horizon_gap_layer(highest: float, settings: LightSettings | None) -> Layer:
    """What ground outside all data could hide: in degrees, and in light if there is any."""
    tags = {"highest_ground": f"{highest:.1f} m"}
    words = (
        "upper bound of what ground outside all given data could hide: greatest rise of the"
        " horizon in any azimuth"
    )
    if settings is None:
        return Layer(
            "horizon_gap", ("horizon gap",), "degree", words, resolution=2.0**-8, tags=tags
        )
    return Layer(
        "horizon_gap",
        ("horizon gap", "direct light within it"),
        "degree",
        f"{words}, and direct irradiation in the plane of the slope, {basis_words(settings)},"
        " that it could take",
        resolution=2.0**-8,
        tags={**tags, "period": settings.period.label, "basis": basis_words(settings)},
        band_units=("degree", settings.unit),
    )


class Summed(Protocol):
    """Settings of anything that is summed over a period."""

    @property
    def period(self) -> Period:
        """What is summed."""


def month_labels(settings: Summed) -> tuple[str, ...]:
    """One label a month: its name in a typical year, else year and month."""
    if settings.period.typical:
        return tuple(MONTH_NAMES[month - 1] for _, month in settings.period.months)
    return tuple(f"{year}-{month:02d}" for year, month in settings.period.months)


def basis_words(settings: LightSettings) -> str:
    """The area that the energy is stated for."""
    return "per area of slope" if settings.basis == "slope" else "per area of map"


def sky_kind(settings: LightSettings) -> str:
    """What sky the light comes from: clear, measured or monthly index."""
    if settings.index_map is not None:
        return "monthly index"
    if settings.sky is None:
        return "clear"
    return "monthly index" if isinstance(settings.sky, MonthlySky) else "measured"


SKIES: Final = {
    "clear": "potential (clear-sky)",
    "measured": "under the measured sky",
    "monthly index": "under a sky of monthly clear-sky indices",
}
"""How energy under each kind of sky is called."""


def sky_words(settings: LightSettings) -> str:
    """How irradiation is called under that sky, with a place for the part's name."""
    return {
        "clear": "potential (clear-sky) {} irradiation",
        "measured": "{} irradiation under the measured sky",
        "monthly index": "{} irradiation under a sky of monthly clear-sky indices",
    }[sky_kind(settings)]


def shade_words(scene: Scene) -> str:
    """Say what the horizon is made of, in a sentence."""
    if scene.far is None:
        return "Shade of all that stands in the raster, and of nothing beyond it."
    return "Shade of all that stands in the raster and in the far model around it."


def shade_doubts(scene: Scene) -> list[str]:
    """Warn of a horizon that ends with the raster."""
    if scene.far is not None:
        return []
    words = shade_words(scene).replace("Shade", "shade").rstrip(".")
    return [
        f"{words}: where higher ground stands around, give a larger model with --far, or ask"
        " terrasol irradiation --horizon-gap how much could be missing"
    ]


def _fineness(days: float, unit: str) -> float:
    """A power of two near 1 / 65,000 of what so many sunny days bring."""
    return float(2.0 ** np.floor(np.log2(days * SUNNY_DAY * UNITS[unit] / 2.0**16)))


def light_layers(settings: LightSettings) -> tuple[Layer, ...]:
    """Layers of irradiation: the whole period by part, the months, and the months' parts."""
    words = f"{sky_words(settings)} in the plane of the slope, {basis_words(settings)}"
    months = month_labels(settings)
    period = settings.period
    fine = _fineness(period.days, settings.unit)
    month_fine = _fineness(max(period.days / len(period.months), 1.0), settings.unit)
    whole = "year" if settings.period.whole_year else "period"
    tags = {
        "period": settings.period.label,
        "basis": basis_words(settings),
        "sky": sky_kind(settings),
    }
    layers = [
        Layer(
            f"irradiation_{whole}",
            PARTS,
            settings.unit,
            " ".join(words.format("").split()),  # of all parts
            band_names=tuple(words.format(part) for part in PARTS),
            resolution=fine,
            tags=tags,
        ),
        Layer(
            "irradiation_months",
            months,
            settings.unit,
            words.format("global"),
            resolution=month_fine,
            tags=tags,
        ),
    ]
    if settings.photons_per_joule is not None:
        layers.append(_photosynthetic_layer(settings, tags))
    for part in ("beam", "diffuse", "reflected") if settings.monthly_parts else ():
        layers.append(
            Layer(
                f"{part}_months",
                months,
                settings.unit,
                words.format(part),
                resolution=month_fine,
                tags=tags,
            )
        )
    return tuple(layers)


def standard_error_layers(layers: Sequence[Layer], tags: dict[str, str]) -> tuple[Layer, ...]:
    """Standard errors of slope, aspect and the whole period's irradiation, of a job's layers.

    `tags` tell of the error of the heights.
    """
    from_heights = "from random error of the heights"
    found = []
    for layer in layers:
        if layer.name not in (*WITH_ERROR_OF_GROUND, *WHOLE_PERIOD):
            continue
        words = (layer.band_names or (layer.long_name,))[0].split(";")[0]
        named = f"{layer.standard_name} standard_error" if layer.standard_name else None
        found.append(
            Layer(
                f"{layer.name}_standard_error",
                layer.bands[:1],
                layer.unit,
                f"standard error of the {words}, {from_heights}",
                named,
                resolution=layer.resolution,
                tags={**layer.tags, **tags},
            )
        )
    return tuple(found)


def _photosynthetic_layer(settings: LightSettings, tags: dict[str, str]) -> Layer:
    """Photosynthetic light of a mean day of each month."""
    return Layer(
        "photosynthetic_months",
        month_labels(settings),
        "mol m-2 d-1",
        "photosynthetic photons of a mean day of the month in the plane of the slope,"
        f" {basis_words(settings)}: {settings.photons_per_joule:g} umol a joule of global light",
        resolution=2.0**-10,
        tags=tags,
    )
