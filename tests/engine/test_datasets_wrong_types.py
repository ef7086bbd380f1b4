"""What a Python user may hand over by mistake: an error that says what is wrong."""

import numpy as np
import pytest
from pyproj import CRS

import terrasol
from terrasol import Air, Elevation, InputError, SettingError

GRID = (30, 0, 5e5, 0, -30, 5.2e6)
FLAT = np.zeros((9, 9), np.float32)


@pytest.fixture(scope="module")
def ground():
    return Elevation.from_array(FLAT, GRID, "EPSG:32632")


def test_file_name_for_ground():
    for job in (terrasol.terrain, terrasol.irradiation):
        with pytest.raises(InputError, match=r"an Elevation, not str: read a file with read_el"):
            job("dem.tif")


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"period": 2025.5}, "2025.5 is no text"),
        ({"period": True}, "True is no text"),
        ({"period": 25}, "'25' is not understood"),
        ({"air": "bird"}, "an Air, not 'bird': make it with Air.ineichen"),
        ({"albedo": "x"}, "albedo must be one number or twelve; got 'x'"),
        ({"albedo": None}, "albedo must be"),
        ({"albedo": 1.5}, r"albedo must be from 0 to 1; got 1\.5$"),
        ({"azimuths": 64.0}, r"multiple of 4 from 8 to 720; got 64\.0"),
        ({"azimuths": "64"}, "got '64'"),
        ({"step_seconds": "60"}, "number of seconds; got '60'"),
        ({"refraction": "0.13"}, "less than 1; got '0.13'"),
        ({"diffuse": None}, "diffuse model 'None'"),
        ({"unit": "kJ"}, "unit 'kJ'"),
        ({"threads": 1.5}, "whole number; got 1.5"),
    ],
)
def test_setting_of_a_wrong_type(ground, given, words):
    with pytest.raises(SettingError, match=words):
        terrasol.irradiation(ground, **({"period": "2025-06-21"} | given))


def test_period_as_a_number():
    assert terrasol.parse_period(2025) == terrasol.parse_period("2025")
    assert terrasol.parse_period(np.int64(2025)).label == "2025"


def test_units_of_the_command_line(ground):
    quick = {"period": "2025-06-21", "azimuths": 8, "step_seconds": 3600.0, "air": Air.ineichen(3)}
    energy = {
        unit: terrasol.irradiation(ground, unit=unit, **quick)["irradiation_period"]
        for unit in ("kWh", "kW h m-2", "MJ")
    }
    assert energy["kWh"].attrs["units"] == "kW h m-2"
    np.testing.assert_array_equal(energy["kWh"], energy["kW h m-2"])
    np.testing.assert_allclose(3.6 * energy["kWh"], energy["MJ"], rtol=1e-6)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Air("ineichen", linke=3.0), r"3\.0 is no row of 12 numbers; Air\.ineichen takes"),
        (lambda: Air.ineichen("hazy"), "'hazy' is no number, nor twelve"),
        (lambda: Air.bird("x", 1.5), "'x' is no number"),
        (lambda: Air.bird(0.1, "x"), "water, cm: 'x' is no number"),
    ],
)
def test_air_of_a_wrong_type(make, words):
    with pytest.raises(SettingError, match=words):
        make()


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Elevation.from_array(FLAT, (1, 2, 3), 32632), r"six numbers .* got \(1, 2, 3\)"),
        (lambda: Elevation.from_array(FLAT, 30, 32632), "six numbers"),
        (lambda: Elevation.from_array(FLAT, "abcdef", 32632), "six numbers"),
        (lambda: Elevation.from_array("dem.tif", GRID, 32632), "not an array of numbers"),
        (lambda: Elevation(FLAT, (1, 2, 3), CRS(32632)), "six numbers"),
        (lambda: Elevation(FLAT, GRID, "EPSG:32632"), "must be a pyproj.CRS, not 'EPSG:32632'"),
    ],
)
def test_ground_of_a_wrong_type(make, words):
    with pytest.raises(InputError, match=words):
        make()
