"""A raw series becomes a sky, and nothing is done in silence."""

import numpy as np
import pytest

from terrasol.errors import InputError
from terrasol.sky.clear import Air
from terrasol.sky.interval import interval_means, on_level
from terrasol.sky.measured import covered_days, measured_sky
from terrasol.sky.period import parse_period
from terrasol.sky.station import Station

AIR = Air.ineichen(3.0)


def station(first="2025-04-01", days=20, longitude=15.4):
    start = np.datetime64(first, "s") + np.arange(days * 24) * np.timedelta64(3600, "s")
    bare = Station("hill", 47.0, longitude, 400.0, start, 3600, {})

    def light(sun):
        sky = AIR.over(sun, 400.0)
        return {"global": on_level(sun, sky), "beam": sky.beam_normal}

    means = interval_means(bare, light)
    values = {name: means[name] for name in ("global", "beam")}
    return Station("hill", 47.0, longitude, 400.0, start, 3600, values)


def test_whole_days_of_a_utc_series_lose_no_day_for_a_night():
    # midnight UTC is an hour past local midnight here: the missing hour is night
    assert covered_days(station()).label == "2025-04-01/2025-04-20"
    # at 150 east the first local day has lost its morning, and the last one runs on
    assert covered_days(station(longitude=150.0)).label == "2025-04-02/2025-04-20"


def test_what_cannot_be_true_is_named_counted_and_filled():
    here = station()
    noon = int(np.argmax(here.values["global"]))
    here.values["global"][noon] = 9000.0
    found = measured_sky(here, AIR)
    assert found.warnings == (
        "hill: cannot be true and count as missing: 1 of global",
        "hill: filled by clear-sky index: 1 of global",
    )
    assert found.station.values["global"][noon] == pytest.approx(
        station().values["global"][noon], rel=0.02
    )
    assert here.values["global"][noon] == 9000.0  # the series itself is left alone
    assert found.report["quality"]["global"]["flags"]
    assert found.sky.global_index[noon] == pytest.approx(1.0, abs=0.02)


def test_a_long_gap_is_refused_by_name_unless_the_period_avoids_it():
    here = station()
    here.values["beam"][24 * 10 + 6 : 24 * 10 + 16] = np.nan
    with pytest.raises(InputError, match="beam missing from 2025-04-11T06:00"):
        measured_sky(here, AIR)
    found = measured_sky(here, AIR, parse_period("2025-04-01/2025-04-09"))
    assert len(found.report["gaps"]) == 1
    assert measured_sky(here, AIR, fill_hours=12.0).report["filled"]["beam"] == 10


def test_a_wrong_zone_is_reported_and_not_applied():
    right = station(days=40)
    late = Station(
        "hill", 47.0, 15.4, 400.0, right.start + np.timedelta64(3600, "s"), 3600, right.values
    )
    found = measured_sky(late, AIR)
    assert found.report["clock"]["verdict"] in ("zone", "label or zone")
    told = [text for text in found.warnings if text.endswith("; nothing was changed")]
    assert len(told) == 1
    assert told[0].count("hill") == 1
    assert (found.station.start == late.start).all()
    assert measured_sky(right, AIR).report["clock"]["verdict"] == "consistent"


def test_the_clock_is_told_before_what_follows_from_it():
    right = station(days=40)
    late = Station(
        "hill", 47.0, 15.4, 400.0, right.start + np.timedelta64(3 * 3600, "s"), 3600, right.values
    )
    told = measured_sky(late, AIR).warnings
    assert len(told) > 1  # light without sun counts as missing, too
    assert "the stated zone is 3 h too far west" in told[0]


def test_an_offset_at_night_is_named_and_not_taken_off():
    here = station()
    low = {name: values - 30.0 for name, values in here.values.items()}
    off = Station("hill", 47.0, 15.4, 400.0, here.start, 3600, low)
    found = measured_sky(off, AIR)
    assert any("global reads -30 W/m2 at night" in text for text in found.warnings)
    noon = int(np.argmax(here.values["global"]))
    assert found.station.values["global"][noon] == pytest.approx(here.values["global"][noon] - 30.0)
