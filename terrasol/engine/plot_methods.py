"""A paragraph on methods, with references, that says what was done to make a table of plots."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import terrasol
from terrasol.constants import PHOTONS_PER_JOULE
from terrasol.engine.outputs import sky_kind
from terrasol.engine.plot_settings import PlotSettings
from terrasol.engine.plot_table import PlotTable
from terrasol.engine.predictors import season_words
from terrasol.light.settings import LightSettings
from terrasol.sky.clear import Air
from terrasol.words import counted

REFERENCES: Final = {
    "beers": "Beers, T. W., Dress, P. E. and Wensel, L. C. (1966). Aspect transformation in site"
    " productivity research. Journal of Forestry 64, 691-692.",
    "bird": "Bird, R. E. and Hulstrom, R. L. (1981). A simplified clear sky model for direct and"
    " diffuse insolation on horizontal surfaces. SERI/TR-642-761.",
    "dirint": "Perez, R., Ineichen, P., Maxwell, E., Seals, R. and Zelenka, A. (1992). Dynamic"
    " global-to-direct irradiance conversion models. ASHRAE Transactions 98, 354-369.",
    "disc": "Maxwell, E. L. (1987). A quasi-physical model for converting hourly global horizontal"
    " to direct normal insolation. SERI/TR-215-3087.",
    "dozier": "Dozier, J. and Frew, J. (1990). Rapid calculation of terrain parameters for"
    " radiation modeling from digital elevation data. IEEE Transactions on Geoscience and Remote"
    " Sensing 28, 963-969. doi:10.1109/36.58986",
    "erbs": "Erbs, D. G., Klein, S. A. and Duffie, J. A. (1982). Estimation of the diffuse"
    " radiation fraction for hourly, daily and monthly-average global radiation. Solar Energy 28,"
    " 293-302. doi:10.1016/0038-092X(82)90302-4",
    "hay-davies": "Hay, J. E. and Davies, J. A. (1980). Calculation of the solar radiation incident"
    " on an inclined surface. Proceedings of the First Canadian Solar Radiation Data Workshop,"
    " 59-72.",
    "horn": "Horn, B. K. P. (1981). Hill shading and the reflectance map. Proceedings of the IEEE"
    " 69, 14-47. doi:10.1109/PROC.1981.11918",
    "ineichen": "Ineichen, P. and Perez, R. (2002). A new airmass independent formulation for the"
    " Linke turbidity coefficient. Solar Energy 73, 151-157. doi:10.1016/S0038-092X(02)00045-2",
    "mccune": "McCune, B. and Keon, D. (2002). Equations for potential annual direct incident"
    " radiation and heat load. Journal of Vegetation Science 13, 603-606."
    " doi:10.1111/j.1654-1103.2002.tb02087.x",
    "mccree": "McCree, K. J. (1972). Test of current definitions of photosynthetically active"
    " radiation against leaf photosynthesis data. Agricultural Meteorology 10, 443-453.",
    "perez": "Perez, R., Ineichen, P., Seals, R., Michalsky, J. and Stewart, R. (1990). Modeling"
    " daylight availability and irradiance components from direct and global irradiance. Solar"
    " Energy 44, 271-289. doi:10.1016/0038-092X(90)90055-H",
    "reda": "Reda, I. and Andreas, A. (2004). Solar position algorithm for solar radiation"
    " applications. Solar Energy 76, 577-589. doi:10.1016/j.solener.2003.12.003",
    "remund": "Remund, J., Wald, L., Lefevre, M., Ranchin, T. and Page, J. (2003). Worldwide Linke"
    " turbidity information. Proceedings of the ISES Solar World Congress, Goteborg.",
    "stage": "Stage, A. R. (1976). An expression for the effect of aspect, slope, and habitat type"
    " on tree growth. Forest Science 22, 457-460.",
}
"""Works that a paragraph may cite; titles, volumes and pages are from
memory and want a look before they are printed."""


PARTING: Final = {
    "dirint": "the DIRINT model (Perez et al. 1992)",
    "disc": "the DISC model (Maxwell 1987)",
    "erbs": "the model of Erbs et al. (1982)",
}
"""Models that part the beam off."""


@dataclass(frozen=True)
class Account:
    """What a paragraph on methods tells besides the settings.

    Parameters
    ----------
    dem : str
        Name of the elevation raster, with its CRS.
    plots : int
        How many got values.
    climatology : bool
        Whether the turbidity is the climatology's.
    station : str
        Name of the station whose sky it is, if any.
    decomposition : str
        Name of the model that parts the beam off where the station measured global alone.
    far, surface : str
        Names of the larger model and of the surface model, if given.
    """

    dem: str
    plots: int
    climatology: bool = False
    station: str = ""
    decomposition: str = ""
    far: str = ""
    surface: str = ""


def methods_text(table: PlotTable, settings: PlotSettings, account: Account) -> str:
    """Write the paragraph and its references, as Markdown.

    Parameters
    ----------
    table : PlotTable
        What came out.
    settings : PlotSettings
        With the season that was used.
    account : Account
        The rest.
    """
    cited = {"horn"}
    sentences = [
        *_ground_words(table, account),
        *_light_words(settings, account, cited),
        *_time_words(settings, cited),
        *_heat_words(settings, cited),
        *_sample_words(table, settings),
        *_doubt_words(settings),
    ]
    listed = "\n".join(sorted(f"- {text}" for key, text in REFERENCES.items() if key in cited))
    return (
        "# Methods\n\nReady to paste; shorten what you do not use. Check titles and pages of the"
        " references against your library.\n\n"
        f"{' '.join(sentences)}\n\n## References\n\n{listed}\n"
    )


def _ground_words(table: PlotTable, account: Account) -> list[str]:
    """Model, cells, slope."""
    beyond = []
    if account.far:
        beyond.append(f"ridges beyond its edge from {account.far}")
    if account.surface:
        beyond.append(f"trees and buildings from the surface model {account.surface}")
    hidden = f", with {' and '.join(beyond)}" if beyond else ", and of nothing beyond it"
    return [
        f"Predictors for {counted(account.plots, 'plot')} were computed with terrasol"
        f" {terrasol.__version__} from the elevation raster {account.dem}, with cells of"
        f" {table.cells[0]:.4g} m (true length, mean of both sides).",
        "Slope and aspect follow the window of Horn (1981), turned to true north; aspect is"
        " undefined on slopes under 0.05 degree.",
        f"Shade is that of all terrain in the raster{hidden}.",
    ]


def _light_words(settings: PlotSettings, account: Account, cited: set[str]) -> list[str]:
    """Sky, energy, photosynthetic light."""
    light = settings.light
    groups = {group.removesuffix("_months") for group in settings.groups}
    said = []
    if "sky_view" in groups:
        cited.add("dozier")
        said.append("The sky-view factor is that of Dozier and Frew (1990).")
    if not groups & {"irradiation", "photosynthetic", "sun_hours"}:
        return said
    cited.add("reda")
    period = "a typical year" if light.period.typical else light.period.label
    air = _air_words(light.air, account.climatology, cited)
    kind = sky_kind(light)
    sky = {
        "clear": f"Irradiation is potential, under a clear sky ({air})",
        "measured": "Irradiation is that under the sky measured at"
        f" {account.station or 'a station'}{_parted(account.decomposition, cited)} (clear air:"
        f" {air})",
        "monthly index": f"Irradiation is that of a clear sky ({air}) times monthly clear-sky"
        f" indices {_indices(light)}",
    }[kind]
    basis = "per square metre of slope" if light.basis == "slope" else "per square metre of map"
    said.append(
        f"{sky}, summed over {period} in steps of {light.step_seconds:g} s with the sun's position"
        f" after Reda and Andreas (2004), and stated {basis} in"
        f" {'MJ' if light.unit == 'MJ m-2' else 'kWh'}; it is parted into beam, diffuse and light"
        " reflected by the terrain around."
    )
    if light.diffuse == "perez":
        cited.add("perez")
        model = "by the model of Perez et al. (1990)"
    elif light.diffuse == "hay-davies":
        cited.add("hay-davies")
        model = "by the model of Hay and Davies (1980)"
    else:
        model = "as even over the sky"
    said.append(
        f"Diffuse light is spread over the sky {model}; the horizon is known in {light.azimuths}"
        f" azimuths; the ground's albedo is {_albedo(light)}."
    )
    if "photosynthetic" in groups:
        usual = ""
        if light.photons_per_joule == PHOTONS_PER_JOULE:
            cited.add("mccree")
            usual = (
                ": by common practice half of its energy, at 4.6 umol a joule (4.57 for daylight in"
                " McCree 1972)"
            )
        said.append(
            f"Photosynthetic light counts {light.photons_per_joule:g} umol of photons (400 to 700"
            f" nm) in a joule of global light{usual}."
        )
    return said


def _parted(model: str, cited: set[str]) -> str:
    """How beam was parted off."""
    if model not in REFERENCES:
        return ""
    cited.add(model)
    return f", beam parted off by {PARTING[model]} where it was not measured itself"


def _air_words(air: Air, climatology: bool, cited: set[str]) -> str:
    """The clear air."""
    if air.linke is None:
        cited.add("bird")
        return (
            f"Bird and Hulstrom 1981; aerosol depth {air.aerosol_500nm:g} at 500 nm, water"
            f" {air.water_cm:g} cm, ozone {air.ozone_atm_cm:g} atm-cm"
        )
    cited.add("ineichen")
    source = ""
    if climatology:
        cited.add("remund")
        source = ", climatology of Remund et al. 2003"
    return f"Ineichen and Perez 2002; Linke turbidity {_numbers(air.linke)}{source}"


def _indices(light: LightSettings) -> str:
    """Clear-sky indices of the months, or whose they are."""
    if light.index_map is not None:
        return "that a map gives each cell"
    return f"of {_numbers(getattr(light.sky, 'index', ()))}"


def _albedo(light: LightSettings) -> str:
    """Albedo of the ground, in numbers or as mapped."""
    if light.albedo_map is None:
        return _numbers(light.albedo)
    return f"that of a map, and {_numbers(light.albedo)} where the map is void"


def _numbers(months: Sequence[float]) -> str:
    """Twelve numbers, or one for all."""
    if len(set(months)) == 1:
        return f"{months[0]:g}"
    return f"{', '.join(f'{value:.3g}' for value in months)} (January to December)"


def _time_words(settings: PlotSettings, cited: set[str]) -> list[str]:
    """Season, hours of sun."""
    said = []
    if any(g in settings.groups for g in ("irradiation", "photosynthetic", "sun_hours")):
        said.append(f"The growing season is {season_words(settings.season)}.")
    if settings.timed:
        cited.add("reda")
        clock = settings.hours.clock.words
        said.append(
            "Hours of direct sun count while the sun's upper limb stands above terrain, own slope"
            f" and level, clouds or not, with a horizon of {settings.hours.azimuths} azimuths;"
            f" first and last sun are those of the 21st of each month in {clock}."
        )
    return said


def _heat_words(settings: PlotSettings, cited: set[str]) -> list[str]:
    """Equations and transforms."""
    said = []
    if "heat_load" in settings.groups:
        cited.add("mccune")
        said.append(
            "Potential annual direct radiation and heat load (MJ cm-2 yr-1) are equations 1, 2 and"
            " 3 of McCune and Keon (2002), aspect folded about the north-south line for radiation"
            " and about the line from north-east to south-west for heat load, south of the equator"
            " about its mirror image; these know no shade and no clouds and are meant for ranking"
            " slopes, at latitudes up to 60 degrees."
        )
    if "transforms" in settings.groups:
        cited.update(("beers", "stage"))
        said.append(
            "Aspect was also transformed after Beers et al. (1966), cos(45 - A) + 1, which holds"
            " for the northern hemisphere, and after Stage (1976), tan(slope) cos(A) and tan(slope)"
            " sin(A)."
        )
    return said


def _sample_words(table: PlotTable, settings: PlotSettings) -> list[str]:
    """How maps became values of plots."""
    said = [
        "A plot has the value of the cell that holds it, and the bilinear value between the four"
        " nearest cell centres."
    ]
    if settings.radii:
        radii = _joined([f"{radius:g}" for radius in settings.radii])
        said.append(
            f"Within {radii} m around it the mean weights each cell by the share of its area in the"
            " circle; least and greatest are of all cells of which it covers a part; aspect"
            " is averaged as a vector."
        )
    if "gps_error_m" in table.frame:
        middle = float(table.frame["gps_error_m"].median())
        said.append(
            "The spread from errors of position is the standard deviation of the cell's value over"
            " a circular Gaussian error with the plot's own root mean square (median"
            f" {middle:.3g} m, both directions together)."
        )
    if len(table.cells) > 1:
        sizes = _joined([f"{size:.4g}" for size in table.cells[1:]])
        said.append(
            f"All was repeated on the same ground averaged to cells of {sizes} m, horizon and shade"
            " included."
        )
    return said


def _doubt_words(settings: PlotSettings) -> list[str]:
    """What the numbers are not."""
    if sky_kind(settings.light) != "clear":
        return []
    return ["Clouds, snow and the shade of plants are not in the potential values."]


def _joined(words: Sequence[str]) -> str:
    """Words joined for a sentence."""
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} and {words[-1]}"
