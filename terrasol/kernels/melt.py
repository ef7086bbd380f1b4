"""Snow of single cells through the hours of a day: what falls, melts, freezes again and runs off.

All water is in mm on map area (1 mm = 1 kg m-2), in double precision, so that a season's balance
closes to rounding. Cells know nothing of each other.
"""

from __future__ import annotations

import numpy as np
from numba import njit

ENHANCED, HOCK, DEGREE_DAYS = 0, 1, 2
"""Melt models: Pellicciotti et al. (2005), Hock (1999), degree-days alone."""

BROCK, USACE, MEASURED = 0, 1, 2
"""How the snow's albedo comes about."""

NUMBERS = (
    "temperature_factor",
    "radiation_factor",
    "hock_melt_factor",
    "hock_radiation_factor",
    "degree_day_factor",
    "melt_above",
    "rain_snow_middle",
    "rain_snow_width",
    "snow_factor",
    "precipitation_gradient",
    "holding_share",
    "refreeze_factor",
    "ground_albedo",
    "fresh_snow",
    "albedo_most",
    "albedo_start",
    "albedo_fall",
    "shallow_albedo",
    "shallow_decay",
    "shallow_depth",
    "cold_base",
    "cold_power",
    "thaw_base",
    "thaw_power",
    "deficit_factor",
    "deficit_memory",
)
"""Order of the parameters in `numbers`; `terrasol.practice.snow` says what they are."""

FLOWS = ("snowfall", "rain_on_snow", "rain_on_ground", "melt", "refrozen", "outflow")
"""What a day moves, in the order of `moved` [mm]."""

SKIN = ("age", "warmth", "fresh", "deficit", "felt", "albedo")
"""What is carried of the snow beside its water, in the order of `skin`: days since the last
snowfall, sum of daily greatest temperatures above 0 degC since then, snow of the spell at hand
[mm], heat deficit [mm of water whose freezing would warm the snow to 0 degC], the temperature that
the snow has felt [degC], and the albedo of snow, or of the ground where none lies."""

WATER_FOR_COLD = 160.0
"""Kelvin by which 1 mm of frozen water is warmed by 1 mm that freezes: latent heat by heat of ice
(Anderson 2006, from memory; 334 / 2.09 kJ)."""

DEEPEST_DEFICIT = 0.33
"""Greatest heat deficit by the frozen water of the snow (Anderson 2006, from memory)."""

HEAVY_SNOW = 1.5
"""Snowfall of an hour [mm] above which the snow feels the new snow's temperature alone (Anderson
2006, from memory)."""


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _snow_albedo(kind, numbers, age, warmth, water, measured):
    """Albedo of snow of an age, with what it went through, and its water [mm]."""
    ground, most = numbers[12], numbers[14]
    found = most
    if kind == MEASURED:
        found = measured
    elif kind == USACE:
        if warmth > 0.0:
            found = most * numbers[22] ** (age ** numbers[23])
        else:
            found = most * numbers[20] ** (age ** numbers[21])
    else:
        deep = most
        if warmth > 0.0:
            deep = min(numbers[15] - numbers[16] * np.log10(warmth), most)
        shallow = ground + numbers[17] * np.exp(-numbers[18] * warmth)
        thin = np.exp(-water / numbers[19])
        found = min((1.0 - thin) * deep + thin * shallow, most)
    return max(found, ground)


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _melt_of_hour(model, numbers, air, light, albedo):
    """Melt [mm on slope area] of an hour at an air temperature [degC]; light in W/m2."""
    if air <= numbers[5]:
        return 0.0
    if model == ENHANCED:
        found = numbers[0] * air + numbers[1] * (1.0 - albedo) * light
    elif model == HOCK:
        found = (numbers[2] / 24.0 + numbers[3] * light) * air
    else:
        found = numbers[4] / 24.0 * air
    return max(found, 0.0)


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _fallen(numbers, water, air, more):
    """Snow and rain [mm] out of a gauge's water, at an air temperature [degC]."""
    share = 0.5 + (numbers[6] - air) / max(numbers[7], 1e-9)
    share = min(max(share, 0.0), 1.0)
    return water * more * share * numbers[8], water * more * (1.0 - share)


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _chilled(numbers, snow, air, deficit, felt):
    """Heat deficit and felt temperature after an hour's snowfall [mm]."""
    if numbers[24] > 0.0 and snow > 0.0:
        deficit += max(-air, 0.0) * snow / WATER_FOR_COLD
        if snow > HEAVY_SNOW:
            felt = min(air, 0.0)
    return deficit, felt


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _deficit_of_hour(numbers, solid, air, melt, slope, deficit, felt):
    """Heat deficit and felt temperature after an hour's air; see `_pack_hour`."""
    if melt == 0.0:
        deficit += numbers[24] / 24.0 * (felt - min(air, 0.0)) * slope
    felt = min(felt + (1.0 - (1.0 - numbers[25]) ** (1.0 / 6.0)) * (air - felt), 0.0)
    return min(max(deficit, 0.0), DEEPEST_DEFICIT * solid), felt


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _pack_hour(numbers, solid, wet, air, wanted, slope, deficit, felt):
    """Melt, refreezing and outflow of an hour [mm].

    Returns solid, wet, melt, refrozen, outflow, deficit, felt.
    """
    melt = min(wanted, solid)
    solid -= melt
    wet += melt
    refrozen = 0.0
    if numbers[24] > 0.0:
        deficit, felt = _deficit_of_hour(numbers, solid, air, melt, slope, deficit, felt)
        refrozen = min(wet, deficit)
        deficit -= refrozen
        if refrozen > 0.0 and deficit == 0.0:
            felt = 0.0
    elif air < 0.0 and solid > 0.0:
        refrozen = min(-air * numbers[11] / 24.0 * slope, wet)
    solid += refrozen
    wet -= refrozen
    outflow = max(wet - numbers[10] * solid, 0.0)
    return solid, wet - outflow, melt, refrozen, outflow, deficit, felt


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _cell_day(
    model, kind, numbers, weather, measured, light, c, above, slope, ice, liquid, skin, moved
):
    """One day of cell `c`; see `melt_day`."""
    solid, wet = ice[c], liquid[c]
    age, warmth, fresh = skin[c, 0], skin[c, 1], skin[c, 2]
    deficit, felt, albedo = float(skin[c, 3]), float(skin[c, 4]), float(skin[c, 5])
    if kind == MEASURED and solid > 0.0:
        albedo = _snow_albedo(kind, numbers, age, warmth, solid + wet, measured)
    more = max(1.0 + numbers[9] * 1e-4 * above, 0.0)
    warmest, snowed = 0.0, False
    for h in range(weather.shape[0]):
        air = weather[h, 0] - weather[h, 2] * above
        if weather[h, 1] > 0.0:
            snow, rain = _fallen(numbers, weather[h, 1], air, more)
            renewed = snow > 0.0 and solid == 0.0
            solid += snow
            fresh += snow
            deficit, felt = _chilled(numbers, snow, air, deficit, felt)
            snowed = snowed or snow > 0.0
            moved[c, 0] += snow
            if solid > 0.0:
                wet += rain
                moved[c, 1] += rain
            else:
                moved[c, 2] += rain
            if fresh >= numbers[13]:
                fresh, renewed = 0.0, True
            if renewed:
                age, warmth, warmest = 0.0, 0.0, 0.0
                albedo = _snow_albedo(kind, numbers, age, warmth, solid + wet, measured)
        if solid > 0.0:
            shine = float(light[h, c]) if model != DEGREE_DAYS else 0.0
            wanted = slope * _melt_of_hour(model, numbers, air, shine, albedo)
            solid, wet, melt, refrozen, outflow, deficit, felt = _pack_hour(
                numbers, solid, wet, air, wanted, slope, deficit, felt
            )
            moved[c, 3] += melt
            moved[c, 4] += refrozen
            moved[c, 5] += outflow
            warmest = max(warmest, air)
            age += 1.0 / 24.0
    if solid > 0.0:
        warmth += warmest
        fresh = fresh if snowed else 0.0
        albedo = _snow_albedo(kind, numbers, age, warmth, solid + wet, measured)
    else:
        age, warmth, fresh, albedo = 0.0, 0.0, 0.0, numbers[12]
        deficit, felt = 0.0, 0.0
    ice[c], liquid[c] = solid, wet
    skin[c, 0], skin[c, 1], skin[c, 2] = age, warmth, fresh
    skin[c, 3], skin[c, 4], skin[c, 5] = deficit, felt, albedo


@njit(cache=True, nogil=True, error_model="numpy")
def melt_day(
    model, kind, numbers, weather, measured, light, above, steep, ice, liquid, skin, moved
):
    """One day of some cells.

    model, kind : int, see the top of the file
    numbers : (26,) float64, parameters in the order of `NUMBERS`
    weather : (hours, 3) float64, at the station: air temperature [degC], precipitation [mm], and
        fall of temperature with height [K/m]
    measured : float, the day's measured albedo, for `MEASURED` alone; else 0
    light : (hours, cells) float32, what the model wants in the plane of the slope, per area of
        slope: global irradiance, or potential beam [W/m2]; anything for `DEGREE_DAYS`
    above : (cells,) float32, height above the station [m]
    steep : (cells,) float32, area of slope by area of map; NaN where void
    ice, liquid : (cells,) float64, in and out: water of the snow, frozen and liquid [mm]
    skin : (cells, 6) float32, in and out, see `SKIN`
    moved : (cells, 6) float64, out, see `FLOWS`; 0 where void
    """
    moved[:] = 0.0
    for c in range(steep.size):
        if steep[c] == steep[c]:
            _cell_day(
                model, kind, numbers, weather, measured, light, c, float(above[c]),
                float(steep[c]), ice, liquid, skin, moved,
            )  # fmt: skip


@njit(cache=True, nogil=True, error_model="numpy")
def zone_sums(zone, weight, values, out):
    """Add up some quantities by zone, weighted.

    zone : (cells,) int32, below 0 for none
    weight : (cells,) float64
    values : (cells, quantities) float64
    out : (zones, quantities) float64, added to
    """
    for c in range(zone.size):
        z = zone[c]
        if z >= 0:
            for q in range(values.shape[1]):
                out[z, q] += weight[c] * values[c, q]
