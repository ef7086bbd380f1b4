"""Melt and albedo of snow against numbers from print."""

import numpy as np
import pytest

from terrasol.kernels import melt as kernel
from terrasol.practice.snow import NUMBERS, Snow, SnowModel, Weather, snow_day

DAY = np.array(["2025-05-01", "2025-05-02"], "M8[s]")
FOREVER = 1e6  # mm of snow: more than melts in a day, and deep for its albedo


def day_of(model, air, light=0.0, *, warmth=None, age=0.0, water=FOREVER, albedo=None):
    """One day of constant weather on level ground at the station: melt [mm], and the snow."""
    snow = Snow.none(1, model)
    snow.ice[:] = water
    snow.skin[:, 0], snow.skin[:, 1] = age, warmth if warmth is not None else 0.0
    if albedo is not None:
        snow.skin[:, -1] = albedo
    hours = np.full((1, 24), float(air))
    weather = Weather(DAY, np.array([4]), hours, np.zeros((1, 24)), 0.0)
    shine = np.full((24, 1), light, np.float32)
    moved = snow_day(
        model, weather, 0, shine, np.zeros(1, np.float32), np.ones(1, np.float32), snow
    )
    return float(moved[0, kernel.FLOWS.index("melt")]), snow


def test_enhanced_index_melts_as_its_authors_say():
    """Pellicciotti et al. (2005), TF 0.05, SRF 0.0094: at 5 degC, 800 W/m2 and an albedo of 0.6
    3.258 mm/h (their formula with their numbers, worked out by hand); none up to 1 degC."""
    melt, _ = day_of(SnowModel(), 5.0, 800.0, albedo=0.6)
    assert melt / 24.0 == pytest.approx(0.05 * 5.0 + 0.0094 * 0.4 * 800.0, abs=1e-6)
    assert melt / 24.0 == pytest.approx(3.258, abs=5e-4)
    assert day_of(SnowModel(), 1.0, 800.0, albedo=0.6)[0] == 0.0
    assert day_of(SnowModel(), 1.01, 800.0, albedo=0.6)[0] > 24.0


def test_radiation_factor_cannot_pass_all_of_the_energy():
    """A megajoule absorbed melts 3.0 mm (334 kJ/kg, from memory): 0.01078 mm m2 h-1 W-1."""
    limit = 3600.0 / 334_000.0
    assert limit == pytest.approx(0.01078, abs=1e-5)
    assert NUMBERS["radiation_factor"].high <= limit
    per_megajoule = NUMBERS["radiation_factor"].value * 1e6 / 3600.0
    assert per_megajoule == pytest.approx(2.61, abs=0.01)  # 87 % of 2.99


def test_hock_melts_by_its_formula():
    """Hock (1999), factors from memory: at 5 degC and 500 W/m2 of potential beam 1.875 mm/h."""
    melt, _ = day_of(SnowModel("hock"), 5.0, 500.0)
    assert melt / 24.0 == pytest.approx(1.875, abs=1e-6)
    assert day_of(SnowModel("hock"), 0.5, 500.0)[0] > 0.0  # its threshold is 0 degC


def test_degree_days():
    """Degree-day factor of snow of 4.4 mm d-1 K-1 (Hock 1999, from memory)."""
    assert day_of(SnowModel("degree-days"), 3.0)[0] == pytest.approx(13.2, abs=1e-9)


@pytest.mark.parametrize(
    ("warmth", "printed"),
    [(1, 0.713), (5, 0.6347), (10, 0.601), (50, 0.5227), (100, 0.489)],
)
def test_albedo_of_deep_snow(warmth, printed):
    """Brock et al. (2000), deep snow, worked out from their coefficients."""
    _, snow = day_of(SnowModel(), 0.0, warmth=warmth)
    assert float(snow.albedo[0]) == pytest.approx(printed, abs=6e-5)


@pytest.mark.parametrize(
    ("warmth", "printed"), [(1, 0.86), (5, 0.7517), (10, 0.705), (50, 0.5967), (100, 0.55)]
)
def test_refitted_albedo(warmth, printed):
    """Pellicciotti et al. (2005) refitted it: 0.86 - 0.155 log10 Ta; our cap of 0.85 is Brock's."""
    model = SnowModel(changed={"albedo_start": 0.86, "albedo_fall": 0.155, "albedo_most": 0.9})
    _, snow = day_of(model, 0.0, warmth=warmth)
    assert float(snow.albedo[0]) == pytest.approx(printed, abs=6e-5)


def test_albedo_of_thin_snow():
    """Brock et al. (2000): thin snow shows the ground, au + 0.442 exp(-0.058 Ta), by exp(-d/d*)."""
    _, snow = day_of(SnowModel(), 0.0, warmth=10.0, water=24.0)
    thin = np.exp(-1.0)
    shallow = 0.2 + 0.442 * np.exp(-0.58)
    assert float(snow.albedo[0]) == pytest.approx(0.601 * (1 - thin) + shallow * thin, abs=1e-5)


@pytest.mark.parametrize(
    ("days", "cold", "thawed"),
    [
        (1, 0.799, 0.697),
        (2, 0.775, 0.647),
        (5, 0.726, 0.561),
        (10, 0.672, 0.48),
        (20, 0.598, 0.387),
    ],
)
def test_albedo_by_age(days, cold, thawed):
    """The Corps of Engineers' curves as handed down: 0.85 x 0.94^(t^0.58), 0.85 x 0.82^(t^0.46)."""
    for warmth, printed in ((0.0, cold), (1.0, thawed)):
        _, snow = day_of(SnowModel(albedo="usace"), 0.0, age=days - 1.0, warmth=warmth)
        assert float(snow.albedo[0]) == pytest.approx(printed, abs=6e-4)


def test_half_of_the_water_is_snow_at_one_degree():
    """Jennings et al. (2018): rain and snow are even at 1.0 degC on the mean."""
    model = SnowModel(changed={"melt_above": 5.0})
    snow = Snow.none(1, model)
    weather = Weather(DAY, np.array([4]), np.full((1, 24), 1.0), np.full((1, 24), 1.0), 0.0)
    one = np.ones(1, np.float32)
    moved = snow_day(model, weather, 0, np.zeros((24, 1), np.float32), 0 * one, one, snow)
    assert moved[0, 0] == pytest.approx(12.0)
    assert moved[0, 1] + moved[0, 2] == pytest.approx(12.0)
