"""The kernel of snow: balances, limits, and a plain second way."""

import math

import numpy as np
import pytest

from terrasol.kernels import melt as kernel
from terrasol.practice.snow import ALBEDO_MODELS, MELT_MODELS, Snow, SnowModel, Weather, snow_day

FALL, ON_SNOW, ON_GROUND, MELT, REFROZEN, OUTFLOW = range(6)


def winter(days, seed=1):
    """Invented hours: a cold and wet half, then a warm one, with thaws and frosts between."""
    rng = np.random.default_rng(seed)
    hours = np.arange(days * 24)
    air = -6.0 + 18.0 * hours / hours.size + 5.0 * np.sin(hours * 2 * np.pi / 24.0)
    air += np.repeat(rng.normal(0.0, 3.0, days), 24)
    wet = np.where(rng.random(hours.size) < 0.12, rng.exponential(1.5, hours.size), 0.0)
    edges = np.datetime64("2024-11-01T00:00:00") + np.arange(days + 1) * np.timedelta64(86400, "s")
    months = edges[:-1].astype("M8[M]").astype(int) % 12
    return Weather(edges, months, air.reshape(-1, 24), wet.reshape(-1, 24), 1500.0)


def sunshine(days, cells):
    """Light of invented hours, another on each cell."""
    shape = np.maximum(np.sin((np.arange(24) - 6) * np.pi / 12.0), 0.0)
    return np.tile((700.0 * shape)[None, :, None], (days, 1, cells)).astype(
        np.float32
    ) * np.linspace(0.3, 1.3, cells, dtype=np.float32)


COLD = [{}, {"deficit_factor": 0.6}]
"""Without and with a heat deficit."""


@pytest.mark.parametrize("melt", list(MELT_MODELS))
@pytest.mark.parametrize("albedo", ["brock", "usace"])
@pytest.mark.parametrize("changed", COLD)
def test_water_is_neither_lost_nor_made(melt, albedo, changed):
    """Snowfall + refrozen = melt + frozen; snowfall + rain on snow = outflow + what lies."""
    days, cells = 240, 40
    model = SnowModel(melt, albedo, changed=changed)
    weather, light = winter(days), sunshine(days, cells)
    above = np.linspace(-900.0, 2500.0, cells, dtype=np.float32)
    steep = np.linspace(1.0, 2.0, cells, dtype=np.float32)
    snow = Snow.none(cells, model)
    total = np.zeros((cells, 6))
    for day in range(days):
        total += snow_day(model, weather, day, light[day], above, steep, snow)
        assert (snow.ice >= 0.0).all()
        assert (snow.liquid >= 0.0).all()
        assert ((snow.albedo >= 0.2 - 1e-6) & (snow.albedo <= 0.85 + 1e-6)).all()
    total = total.T
    scale = total[FALL] + total[ON_SNOW]
    assert scale.min() > 1.0
    frozen = total[FALL] + total[REFROZEN] - total[MELT] - snow.ice
    water = total[FALL] + total[ON_SNOW] - total[OUTFLOW] - snow.ice - snow.liquid
    assert np.abs(frozen / scale).max() < 1e-11
    assert np.abs(water / scale).max() < 1e-11
    assert (snow.ice == 0.0).any()  # some melted away,
    assert (snow.ice > 0.0).any()  # and some did not
    assert (total[REFROZEN] > 0.0).any()
    fallen = weather.precipitation.sum() * np.maximum(1.0 + 5e-4 * above.astype(float), 0.0)
    np.testing.assert_allclose(total[[FALL, ON_SNOW, ON_GROUND]].sum(0), fallen, rtol=1e-10)


def plain_day(model, air, water, light, above, steep, state):
    """The same day of one cell, written out as the docs tell it; shares no code."""
    n = model.numbers
    solid, wet, age, warmth, fresh, deficit, felt, albedo = state
    cold = n["deficit_factor"]
    warmest, snowed = 0.0, False

    def snow_albedo():
        if model.albedo == "usace":
            base, power = ("thaw_base", "thaw_power") if warmth > 0 else ("cold_base", "cold_power")
            return max(n["albedo_most"] * n[base] ** (age ** n[power]), n["ground_albedo"])
        deep = n["albedo_most"]
        if warmth > 0:
            deep = min(deep, n["albedo_start"] - n["albedo_fall"] * math.log10(warmth))
        thin = math.exp(-(solid + wet) / n["shallow_depth"])
        shallow = n["ground_albedo"] + n["shallow_albedo"] * math.exp(-n["shallow_decay"] * warmth)
        found = deep + thin * (shallow - deep)
        return min(max(found, n["ground_albedo"]), n["albedo_most"])

    melt_sum = 0.0
    for hour in range(24):
        t = air[hour] - 6.5e-3 * above
        p = water[hour] * max(0.0, 1.0 + n["precipitation_gradient"] / 100.0 * above / 100.0)
        share = min(1.0, max(0.0, 0.5 + (n["rain_snow_middle"] - t) / n["rain_snow_width"]))
        bare = solid == 0.0
        if cold and p * share > 0.0:
            deficit += max(0.0, -t) * p * share / 160.0
            felt = min(t, 0.0) if p * share > 1.5 else felt
        if p * share > 0.0:
            solid, fresh, snowed = solid + p * share, fresh + p * share, True
            if bare or fresh >= n["fresh_snow"]:
                fresh = 0.0 if fresh >= n["fresh_snow"] else fresh
                age = warmth = warmest = 0.0
                if solid > 0.0:
                    wet += p * (1.0 - share)
                albedo = snow_albedo()
            else:
                wet += p * (1.0 - share)
        elif solid > 0.0:
            wet += p
        if solid == 0.0:
            continue
        m = 0.0
        if t > n["melt_above"]:
            if model.melt == "enhanced":
                m = n["temperature_factor"] * t + n["radiation_factor"] * (1 - albedo) * light[hour]
            elif model.melt == "hock":
                m = (n["hock_melt_factor"] / 24 + n["hock_radiation_factor"] * light[hour]) * t
            else:
                m = n["degree_day_factor"] / 24 * t
        m = min(max(m, 0.0) * steep, solid)
        solid, wet, melt_sum = solid - m, wet + m, melt_sum + m
        if cold:
            deficit += 0.0 if m else cold / 24 * (felt - min(t, 0.0)) * steep
            deficit = min(max(deficit, 0.0), 0.33 * solid)
            felt = min(0.0, t + (felt - t) * (1.0 - n["deficit_memory"]) ** (1 / 6))
            r = min(wet, deficit)
            solid, wet, deficit = solid + r, wet - r, deficit - r
            felt = 0.0 if r and not deficit else felt
        elif t < 0 and solid > 0:
            r = min(wet, n["refreeze_factor"] / 24 * -t * steep)
            solid, wet = solid + r, wet - r
        wet -= max(wet - n["holding_share"] * solid, 0.0)
        warmest = max(warmest, t)
        age += 1 / 24
    if solid == 0.0:
        return (0.0, wet, 0.0, 0.0, 0.0, 0.0, 0.0, n["ground_albedo"]), melt_sum
    warmth += warmest
    fresh = fresh if snowed else 0.0
    return (solid, wet, age, warmth, fresh, deficit, felt, snow_albedo()), melt_sum


@pytest.mark.parametrize("melt", list(MELT_MODELS))
@pytest.mark.parametrize("albedo", ["brock", "usace"])
@pytest.mark.parametrize("changed", COLD)
def test_against_a_plain_second_way(melt, albedo, changed):
    """Day by day; the surface is carried in single precision, hence 1e-4 mm a season."""
    days, above, steep = 200, 350.0, 1.3
    model = SnowModel(melt, albedo, changed=changed)
    weather, light = winter(days, 5), sunshine(days, 3)
    snow = Snow.none(3, model)
    state, ours, theirs = (0.0,) * 7 + (0.2,), 0.0, 0.0
    high, wide = np.full(3, above, np.float32), np.full(3, steep, np.float32)
    for day in range(days):
        ours += snow_day(model, weather, day, light[day], high, wide, snow)[2, MELT]
        state, melted = plain_day(
            model, weather.temperature[day], weather.precipitation[day], light[day, :, 2], above,
            float(np.float32(steep)), state,
        )  # fmt: skip
        theirs += melted
        assert snow.ice[2] == pytest.approx(state[0], abs=1e-3)
        assert snow.albedo[2] == pytest.approx(state[7], abs=1e-4)
    assert ours == pytest.approx(theirs, abs=1e-3)
    assert theirs > 100.0


def after_cold(air, model):
    """200 mm of dry snow after a day of the same air; what moved, and the snow."""
    snow = Snow.none(1, model)
    snow.ice[:] = 200.0
    weather = Weather(
        winter(1).edges, winter(1).months, np.full((1, 24), air), np.zeros((1, 24)), 0.0
    )
    one = np.ones(1, np.float32)
    moved = snow_day(model, weather, 0, np.zeros((24, 1), np.float32), 0.0 * one, one, snow)
    return moved[0], snow


def test_cold_snow_freezes_its_first_melt():
    """A day of steady frost makes the deficit of the formula; as much melt is then kept back."""
    model = SnowModel("degree-days", changed={"deficit_factor": 0.6})
    keep = 0.9 ** (1.0 / 6.0)
    felt = -10.0 * (1.0 - keep ** np.arange(24))
    deficit = float((0.6 / 24.0 * (felt + 10.0)).sum())
    _, snow = after_cold(-10.0, model)
    assert snow.skin[0, kernel.SKIN.index("deficit")] == pytest.approx(deficit, rel=1e-5)
    assert snow.skin[0, kernel.SKIN.index("felt")] == pytest.approx(
        -10.0 * (1.0 - keep**24), rel=1e-5
    )
    for steep in (1.0, 2.0):
        thaw = Snow(snow.ice.copy(), snow.liquid.copy(), snow.skin.copy())
        weather = Weather(
            winter(1).edges, winter(1).months, np.full((1, 24), 4.0), np.zeros((1, 24)), 0.0
        )
        area = np.full(1, steep, np.float32)
        moved = snow_day(model, weather, 0, np.zeros((24, 1), np.float32), 0.0 * area, area, thaw)
        assert moved[0, MELT] == pytest.approx(4.4 * 4.0 * steep)
        assert moved[0, REFROZEN] == pytest.approx(deficit, rel=1e-5)
        assert thaw.skin[0, kernel.SKIN.index("deficit")] == 0.0


def test_the_deficit_stays_a_share_of_the_snow_and_away_unless_asked_for():
    moved, snow = after_cold(-300.0, SnowModel(changed={"deficit_factor": 2.0}))
    assert snow.skin[0, kernel.SKIN.index("deficit")] == pytest.approx(66.0)
    assert moved.sum() == 0.0
    _, snow = after_cold(-30.0, SnowModel())
    assert (snow.skin[0, 3:5] == 0.0).all()


def test_voids_stay_untouched():
    """A cell without ground moves nothing."""
    model, weather = SnowModel(), winter(1)
    snow = Snow.none(2, model)
    steep = np.array([np.nan, 1.0], np.float32)
    light = np.zeros((24, 2), np.float32)
    wet = Weather(
        weather.edges, weather.months, np.full((1, 24), -5.0), np.ones((1, 24)), weather.height
    )
    moved = snow_day(model, wet, 0, light, np.zeros(2, np.float32), steep, snow)
    assert (moved[0] == 0.0).all()
    assert snow.water[0] == 0.0
    assert snow.water[1] == pytest.approx(24.0)


def test_measured_albedo_counts_for_snow_alone():
    """The day's measured value on snow; the ground keeps its own."""
    model = SnowModel(albedo="station")
    snow = Snow.none(2, model)
    snow.ice[0] = 300.0
    day = winter(1)
    weather = Weather(
        day.edges, day.months, np.full((1, 24), 4.0), np.zeros((1, 24)), 0.0, np.array([0.55])
    )
    light = np.full((24, 2), 500.0, np.float32)
    flat = np.zeros(2, np.float32)
    moved = snow_day(model, weather, 0, light, flat, np.ones(2, np.float32), snow)
    assert moved[0, MELT] == pytest.approx(24 * (0.05 * 4 + 0.0094 * 0.45 * 500.0), rel=1e-6)
    np.testing.assert_allclose(snow.albedo, [0.55, 0.2], rtol=1e-6)


def test_sums_by_zone():
    zone = np.array([1, 0, -1, 1], np.int32)
    out = np.zeros((2, 2))
    values = np.arange(8.0).reshape(2, 4).T.copy()
    kernel.zone_sums(zone, np.array([1.0, 2.0, 5.0, 0.5]), values, out)
    np.testing.assert_array_equal(out, [[2.0, 10.0], [1.5, 7.5]])


def test_numbers_of_the_kernel_are_those_of_the_model():
    assert list(SnowModel().numbers) == list(kernel.NUMBERS)
    assert {kind for kind, _ in ALBEDO_MODELS.values()} == {0, 1, 2}
