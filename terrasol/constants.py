"""Physical constants and tolerances, each with its reason and source."""

from typing import Final

SOLAR_CONSTANT: Final = 1361.0
"""Total solar irradiance at one astronomical unit, W/m2. Kopp and Lean (2011),
doi:10.1029/2010GL045777: 1360.8 +/- 0.5."""

EARTH_RADIUS: Final = 6_371_000.0
"""Mean radius of the Earth, m (IUGG: 6371.0 km). Used for the drop of far ridges only."""

REFRACTION_COEFFICIENT: Final = 0.13
"""Terrestrial refraction: a line of sight bends as if the Earth's radius were
R / (1 - k). Gauss (1826), quoted by Brunner; surveyors also use 1/7."""

SOLAR_RADIUS_DEG: Final = 0.26667
"""Angular radius of the sun's disc, degrees. Reda and Andreas (2008), NREL/TP-560-34302."""

FLAT_SLOPE_DEG: Final = 0.05
"""Below this slope, degrees, aspect is void. A plane this flat drops 9 cm in 100 m: less
than the noise of any elevation model in use (judgement, no source)."""

VOID: Final = -9999.0
"""No-data value of every float raster that terrasol writes."""

SURROUNDINGS_SCALE: Final = 1000.0
"""Standard deviation, m, of the Gaussian mean that says what the terrain around a cell
receives. The slopes that a valley cell looks at lie some hundred metres to a few
kilometres away (judgement, no source)."""

ENERGY_UNITS: Final = {"MJ": "MJ m-2", "kWh": "kW h m-2"}
"""Units of irradiation as typed in a command, and as written in files (UDUNITS)."""

CLEAR_SKY_PAPERS: Final = {
    "ineichen": "Ineichen and Perez 2002",
    "bird": "Bird and Hulstrom 1981",
}
"""Clear-sky models as typed in a command, and their papers."""

PHOTONS_PER_JOULE: Final = 2.3
"""Photons of 400 to 700 nm in a joule of global light [umol J-1]: half of its energy, at 4.6 umol
a joule (common practice, no source; McCree 1972 has 4.57 for daylight, from memory)."""

HECTARE: Final = 10_000.0
"""Square metres."""
