"""A measured plane of 30 degrees, facing south, foretold from what was measured on the level.

Data: Graz 2017, minute by minute, in the package sunpeek-exampledata 0.2.1 (CC-BY-SA), read in
place. The plane's sensor stands among collector rows, which shade it when the sun is low; hours
in which it got less than its direct light alone, by the measured beam, are left out: no sky can
explain them. docs/validation.md has the figures.
"""

import numpy as np
import pytest

from terrasol.sky.clear import Air, linke_climatology
from terrasol.sky.cloud import clouded_sky
from terrasol.sky.diffuse import split_diffuse
from terrasol.sky.period import parse_period
from terrasol.sky.station import Station
from terrasol.sky.sun import incidence_cosine, sun_path, sun_series

pytestmark = pytest.mark.heavy

LATITUDE, LONGITUDE, HEIGHT = 47.047201, 15.436428, 344.0  # the package's plant_config file
SLOPE = np.radians(30.0)
HOUR = 3600
ALBEDO = 0.2


@pytest.fixture(scope="module")
def hours():
    """Hourly means of global, beam and plane [W/m2], UTC; nan where a minute is missing or bad."""
    data = pytest.importorskip("sunpeek_exampledata.FHW")
    pandas = pytest.importorskip("pandas")
    minutes = pandas.read_csv(
        data.DEMO_DATA_PATH_1YEAR,
        sep=";",
        index_col=0,
        parse_dates=True,
        usecols=["timestamps_UTC", "rd_dni", "rd_ghi", "rd_gti"],
    )
    sun = sun_series(sun_path(parse_period("2017"), LONGITUDE), LATITUDE, HEIGHT)
    at = pandas.DatetimeIndex(sun.time).floor("min")
    cosine = pandas.Series(np.maximum(np.sin(np.radians(sun.elevation)), 0.0), at)
    cosine = cosine[~cosine.index.duplicated()].reindex(minutes.index).fillna(0.0)
    # BSRN's extremely rare limits (Long and Dutton 2002, BSRN Global Network recommended QC
    # tests V2.0) for global, and for the diffuse light that global and beam leave.
    above = 1361.0 * cosine**1.2
    diffuse = minutes.rd_ghi - minutes.rd_dni * cosine
    bad = (minutes.rd_ghi > 1.2 * above + 50.0) | (diffuse > 0.75 * above + 30.0)
    bad |= diffuse < -0.08 * minutes.rd_ghi - 20.0
    minutes[bad] = np.nan
    means, count = minutes.resample("h").mean(), minutes.rd_ghi.resample("h").count()
    means[count < 60] = np.nan
    assert means.rd_ghi.notna().sum() > 7500
    return means


def foretold(hours, names, decomposition, diffuse):
    """Mean, bias and rms of the plane's hours by the daytime mean, in percent; and how many."""
    values = {"global": hours.rd_ghi, "beam": hours.rd_dni}
    values = {name: np.nan_to_num(np.maximum(values[name].to_numpy(), 0.0)) for name in names}
    station = Station(
        "Graz", LATITUDE, LONGITUDE, HEIGHT, hours.index.to_numpy().astype("M8[s]"), HOUR, values
    )
    period = parse_period("2017-01-02/2017-12-30")
    air = Air.ineichen(linke_climatology(LATITUDE, LONGITUDE))
    sun = sun_series(sun_path(period, LONGITUDE), LATITUDE, HEIGHT)
    light = clouded_sky(station, air, period, decomposition).over(sun, HEIGHT)
    split = split_diffuse(diffuse, sun, light)
    facing = np.maximum(incidence_cosine(sun.elevation, sun.azimuth, 30.0, 180.0), 0.0)
    upright = np.maximum(np.sin(np.radians(sun.elevation)), 0.0)
    level = light.beam_normal * upright + light.diffuse_horizontal
    plane = (light.beam_normal + split.circumsolar_normal) * facing
    plane += split.isotropic * (1.0 + np.cos(SLOPE)) / 2.0 + split.horizon_band * np.sin(SLOPE)
    plane += ALBEDO * level * (1.0 - np.cos(SLOPE)) / 2.0
    start = station.start[0].astype("M8[ns]")
    hour = (sun.time - start).astype(np.int64) // (HOUR * 10**9)
    found = np.bincount(hour, weights=plane, minlength=len(hours)) / 60.0
    # what the beam alone sends to the plane, from the measured beam
    beam = np.bincount(hour, weights=facing, minlength=len(hours)) / 60.0 * hours.rd_dni.to_numpy()
    want = hours.rd_gti.to_numpy()
    day = np.isfinite(want) & (hours.rd_ghi.to_numpy() > 5.0) & (found > 0.0)
    open_hours = day & (want > 0.97 * beam - 10.0)
    result = {}
    for name, kept in (("all", day), ("unshaded", open_hours)):
        error, mean = found[kept] - want[kept], want[kept].mean()
        result[name] = (
            float(mean),
            float(100.0 * error.mean() / mean),
            float(100.0 * np.sqrt((error**2).mean()) / mean),
            int(kept.sum()),
        )
    return result


def test_south_plane_from_global_and_beam(hours):
    for diffuse in ("perez", "hay-davies", "isotropic"):
        result = foretold(hours, ("global", "beam"), "dirint", diffuse)
        print(diffuse, result)
        if diffuse == "perez":
            _, bias, rms, count = result["unshaded"]
            assert count > 3000
            assert abs(bias) < 2.0
            assert rms < 7.0


@pytest.mark.parametrize("decomposition", ["erbs", "disc", "dirint"])
def test_south_plane_from_global_alone(hours, decomposition):
    for diffuse in ("perez", "hay-davies", "isotropic"):
        result = foretold(hours, ("global",), decomposition, diffuse)
        print(decomposition, diffuse, result)
        _, bias, rms, _ = result["unshaded"]
        # No target is set for global alone; parting it must not bias the plane by 5 % or more.
        assert abs(bias) < 5.0
        assert rms < 20.0
