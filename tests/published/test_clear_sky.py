"""Air mass and clear-sky models against print and reference sheets."""

import numpy as np
import pytest
from pvlib import atmosphere, clearsky, spectrum
from reference.plain_plane import plane_diffuse, plane_ground

from terrasol.sky import clear
from terrasol.sky.clear import Air, clear_sky, relative_airmass
from terrasol.sky.diffuse import split_diffuse
from terrasol.sky.sun import SunSeries, incidence_cosine

SHEET_PRESSURE = 840.0 / 1013.0 * 101325.0  # the Bird sheet divides 840 mb by 1013, not 1013.25
SHEET_DEPTH = 0.2758 * 0.15 + 0.35 * 0.1


def one_sun(elevation, distance=1.0, day="2015-01-01"):
    """A series with the sun at one place in the sky, due south."""
    return SunSeries(
        latitude=40.0,
        longitude=-105.0,
        step_seconds=60.0,
        time=np.array([f"{day}T12:00"], "M8[ns]"),
        month=np.zeros(1, np.int16),
        elevation=np.array([elevation]),
        azimuth=np.array([180.0]),
        distance=np.array([distance]),
    )


@pytest.mark.parametrize(
    ("elevation", "table"), [(0.0, 38.0868), (1.0, 26.2595), (5.0, 10.3164), (10.0, 5.5841)]
)
def test_kasten_young_table(elevation, table):
    """Kasten and Young (1989), Applied Optics 28, 4735, Table II; their formula within 0.5 %."""
    assert relative_airmass(elevation) == pytest.approx(table, rel=0.005)


def test_kasten_young_formula():
    """The same paper's formula 0.50572, 6.07995, -1.6364, recomputed by hand calculator."""
    elevation = np.array([90.0, 60.0, 30.0, 20.0, 10.0, 5.0, 2.0, 1.0, 0.0])
    expected = [0.99971, 1.15399, 1.99429, 2.90315, 5.58604, 10.30579, 19.43325, 26.31056, 37.91961]
    np.testing.assert_allclose(relative_airmass(elevation), expected, rtol=0, atol=1e-5)


def test_ineichen_regression(monkeypatch):
    """Ineichen and Perez (2002) as coded in pvlib's test_clearsky.py: zenith 10, air mass 1,
    Linke 3, sea level: 1038.159, 942.208, 110.265 W/m2. A regression, not print.
    """
    monkeypatch.setattr(clear, "relative_airmass", np.ones_like)
    monkeypatch.setattr(clear.atmosphere, "alt2pres", lambda height: 101325.0)
    sky = clear_sky(one_sun(80.0), Air.ineichen(3.0, solar_constant=1364.0), 0.0)
    level = sky.beam_normal * np.sin(np.radians(80.0)) + sky.diffuse_horizontal
    assert sky.beam_normal[0] == pytest.approx(942.208, abs=1e-3)
    assert sky.diffuse_horizontal[0] == pytest.approx(110.265, abs=1e-3)
    assert level[0] == pytest.approx(1038.159, abs=1e-3)


def test_ineichen_by_hand():
    """Ineichen and Perez (2002), eq. for global and beam written out, at 1,500 m, Linke 3.5."""
    height, linke, elevation = 1500.0, 3.5, 35.0
    sky = clear_sky(one_sun(elevation), Air.ineichen(linke), height)
    pressure = 101325.0 * (1.0 - 2.25577e-5 * height) ** 5.25588  # US standard atmosphere 1976
    mass = relative_airmass(elevation) * pressure / 101325.0
    f1, f2 = np.exp(-height / 8000.0), np.exp(-height / 1250.0)
    a1, a2 = 5.09e-5 * height + 0.868, 3.92e-5 * height + 0.0387
    sine = np.sin(np.radians(elevation))
    level = a1 * 1361.0 * sine * np.exp(-a2 * mass * (f1 + f2 * (linke - 1.0)))
    beam = 1361.0 * (0.664 + 0.163 / f1) * np.exp(-0.09 * mass * (linke - 1.0))
    assert sky.beam_normal[0] == pytest.approx(beam, rel=1e-4)
    assert sky.diffuse_horizontal[0] == pytest.approx(level - beam * sine, rel=1e-3)


def test_bird_sheet_row():
    """NREL BIRD_08_16_2012.xls, 1 January 2015 12 h, 40 N 105 W, 840 mb, ozone 0.3, water 1.5 cm,
    aerosol 0.1 and 0.15, asymmetry 0.85, albedo 0.2, ETR 1414.913, zenith 63.52422:
    805.171 beam, 450.216 global, 91.254 diffuse; 1e-3 relative.

    The sheet's air mass is Kasten's of 1966 (2.2325), ours Kasten and Young's (2.2346).
    """
    elevation = 90.0 - 63.52422
    air = Air.bird(0.1, 1.5, 0.3, aerosol_380nm=0.15, ground_albedo=0.2, solar_constant=1367.0)
    sun = one_sun(elevation, distance=np.sqrt(1367.0 / 1414.913))
    sky = clear_sky(sun, air, float(atmosphere.pres2alt(84000.0)))
    level = sky.beam_normal * np.sin(np.radians(elevation)) + sky.diffuse_horizontal
    assert sky.extraterrestrial_normal[0] == pytest.approx(1414.913, rel=1e-9)
    assert sky.beam_normal[0] == pytest.approx(805.171, rel=1e-3)
    assert level[0] == pytest.approx(450.216, rel=1e-3)
    assert sky.diffuse_horizontal[0] == pytest.approx(91.254, rel=1e-3)


def test_bird_sheet_row_with_its_own_air_mass(monkeypatch):
    """The same row with the sheet's air mass 2.232516, its 840 / 1013 for the pressure and its
    0.2758 for the weight of the depth at 380 nm (pvlib has 0.27583): to the printed digit.
    """
    monkeypatch.setattr(clear, "relative_airmass", lambda elevation: np.array([2.232516]))
    monkeypatch.setattr(clear.atmosphere, "alt2pres", lambda height: SHEET_PRESSURE)
    monkeypatch.setattr(clear.atmosphere, "bird_hulstrom80_aod_bb", lambda *depths: SHEET_DEPTH)
    air = Air.bird(0.1, 1.5, 0.3, aerosol_380nm=0.15, ground_albedo=0.2, solar_constant=1414.913)
    sky = clear_sky(one_sun(90.0 - 63.52422), air, 0.0)
    assert sky.beam_normal[0] == pytest.approx(805.171, abs=1e-3)
    assert sky.diffuse_horizontal[0] == pytest.approx(91.254, abs=1e-3)


def test_bird_transmittances_of_the_sheet(monkeypatch):
    """The row's printed transmittances: rayleigh, ozone, gases, water, aerosol; their product
    and the paper's 0.9662 are the beam (Bird and Hulstrom 1981).
    """
    printed = (0.860924449, 0.971083226, 0.985205107, 0.874506452, 0.817674024)
    product = 1414.913 * 0.9662 * np.prod(printed)
    assert product == pytest.approx(805.171, abs=0.001)
    monkeypatch.setattr(clear.atmosphere, "bird_hulstrom80_aod_bb", lambda *depths: SHEET_DEPTH)
    by_pvlib = clearsky.bird(
        63.52422, 2.232516, 0.15, 0.1, 1.5, 0.3, pressure=SHEET_PRESSURE, dni_extra=1414.913
    )
    assert by_pvlib["dni"] == pytest.approx(product, rel=1e-7)


def test_g173_spectra_add_up():
    """ASTM G173-03: direct 900.14, 37 degrees hemispherical 1000.37, above the air 1347.93."""
    spectra = spectrum.get_reference_spectra()
    wavelength = spectra.index.to_numpy()
    totals = [
        np.sum((s[1:] + s[:-1]) / 2.0 * np.diff(wavelength))
        for s in (spectra[name].to_numpy() for name in ("direct", "global", "extraterrestrial"))
    ]
    np.testing.assert_allclose(totals, [900.14, 1000.37, 1347.93], rtol=0, atol=0.1)


def test_bird_and_perez_against_g173():
    """ASTM G173-03 conditions, end to end: air mass 1.5, 37 degrees towards the sun, aerosol
    0.084 at 500 nm, water 1.42 cm, ozone 0.34 atm-cm, 1366.1 W/m2; ground 0.2 (judgement,
    the standard has a spectral light soil).

    Our Bird beam is 2.0 % below the standard's 900.14, the plane 0.5 % above its 1000.37.
    Bird and Hulstrom claim 5 % against the rigorous codes (from memory).
    """
    elevation = 90.0 - 48.19
    sun = one_sun(elevation)
    sky = clear_sky(sun, Air.bird(0.084, 1.42, 0.34, solar_constant=1366.1), 0.0)
    cosine = incidence_cosine(elevation, 180.0, 37.0, 180.0)
    level = sky.beam_normal * np.sin(np.radians(elevation)) + sky.diffuse_horizontal
    plane = (
        sky.beam_normal * cosine
        + plane_diffuse(split_diffuse("perez", sun, sky), cosine, 37.0)
        + plane_ground(level, 37.0, 0.2)
    )
    assert relative_airmass(elevation) == pytest.approx(1.5, abs=0.003)
    assert sky.beam_normal[0] == pytest.approx(900.14, rel=0.025)
    assert plane[0] == pytest.approx(1000.37, rel=0.01)
