"""What light was computed from, in sentences: each kind of sky, numbers and rasters."""

from dataclasses import replace

import numpy as np

from terrasol.engine.light_words import assumed_note, light_notes, sky_note, sky_title
from terrasol.ground.beyond import Scene
from terrasol.light.settings import LightSettings
from terrasol.sky.clear import Air
from terrasol.sky.cloud import MonthlySky
from terrasol.sky.period import parse_period

AIR = Air.ineichen((2.0,) * 6 + (4.0,) * 6)
CLEAR = LightSettings(parse_period("2025-06/2025-07"), AIR)


def test_a_clear_sky():
    told = light_notes(CLEAR, Scene())
    assert told[0] == "Sky without clouds after Ineichen and Perez 2002; real skies give less."
    assert told[1] == "Linke turbidity by month 2 to 4, albedo of the ground 0.2."
    assert told[2].startswith("Energy per area of slope")
    assert sky_title(CLEAR, "beam") == "Potential (clear-sky) beam irradiation"


def test_air_without_turbidity():
    bird = replace(CLEAR, air=Air.bird(0.1, 1.0))
    assert assumed_note(bird) == "Albedo of the ground 0.2."
    assert sky_note(bird).startswith("Sky without clouds after Bird and Hulstrom 1981;")


def test_monthly_indices_are_those_of_the_period():
    cloudy = replace(CLEAR, sky=MonthlySky(AIR, (0.3,) * 5 + (0.5, 0.7) + (0.9,) * 5))
    assert sky_note(cloudy).startswith("Clouds by one index a month, 0.5 to 0.7; clear air after")


def test_rasters_have_their_least_and_greatest():
    layers = np.full((12, 2, 2), 0.4, np.float32)
    layers[0], layers[6, 0, 0], layers[5, 1, 1] = 1.0, 0.8, np.nan
    mapped = replace(CLEAR, index_map=layers)
    assert sky_note(mapped).startswith("Clouds by one index a month, by a raster, 0.4 to 0.8; ")
    albedo = np.array([[[0.1, np.nan], [0.3, 0.2]]], np.float32)
    assert assumed_note(replace(CLEAR, albedo_map=albedo)).endswith(
        "albedo of the ground by a raster, 0.1 to 0.3."
    )


def test_a_station_is_named_where_it_is_known():
    class Measured:
        """Any other sky."""

    measured = replace(CLEAR, sky=Measured())
    assert sky_note(measured).startswith("Sky as a station measured it")
    assert sky_note(measured, "Ridge").startswith("Sky as Ridge measured it")
