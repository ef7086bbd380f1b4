"""The clock of invented series, right and wrong, under clouds; and of a measured one."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from reference.made_station import made_station

import terrasol
from terrasol.errors import SettingError
from terrasol.sky.clear import Air, linke_climatology
from terrasol.sky.interval import behind_horizon
from terrasol.sky.station import Station
from terrasol.sky.timing import check_times

SHARED = Path(terrasol.__file__).resolve().parents[2] / "shared"
SKY = Air.ineichen(3.0)  # the invented air has 3.5: it need not be known


def late(station, minutes):
    """The station with its times stated so much too late."""
    return replace(station, start=station.start + np.timedelta64(round(minutes * 60), "s"))


@pytest.fixture(scope="module")
def hourly():
    return made_station("2024-03-01", 100)


@pytest.mark.parametrize(
    ("minutes", "verdict", "says"),
    [
        (0, "consistent", "consistent within 8 min"),
        (30, "label", "half an interval earlier"),
        (-30, "label", "half an interval later"),
        (
            60,
            "label or zone",
            "one interval earlier than stated, or the stated zone is 1 h too far west",
        ),
        (-60, "label or zone", "the stated zone is 1 h too far east"),
        (-120, "zone", "2 h too far east"),
        (600, "zone", "10 h too far west"),
        (-660, "zone", "11 h too far east"),
        (90, "zone", "1.5 h too far west"),
        (17, "unexplained", "longitude may be wrong"),
    ],
)
def test_hourly_mistakes_are_found(hourly, minutes, verdict, says):
    timing = check_times(late(hourly, minutes), SKY)
    assert timing.verdict == verdict
    assert says in timing.words
    assert timing.shift == pytest.approx(-minutes, abs=2.0)
    assert timing.low <= timing.shift <= timing.high
    assert timing.high - timing.low < 3.0
    assert timing.days.size >= 10


@pytest.mark.parametrize(
    ("seconds", "place"), [(600, (47.0, 11.0)), (1800, (-33.9, 151.2)), (60, (5.0, -74.0))]
)
@pytest.mark.parametrize("minutes", [0, 60])
def test_other_intervals_and_places(seconds, place, minutes):
    station = made_station(
        "2024-08-15", 40, seconds=seconds, latitude=place[0], longitude=place[1], clear_share=0.4
    )
    timing = check_times(late(station, minutes), SKY)
    assert timing.verdict == ("zone" if minutes else "consistent")
    assert timing.shift == pytest.approx(-minutes, abs=2.0)


def test_half_hour_labels_of_half_hours():
    station = made_station("2024-03-01", 60, seconds=1800)
    assert check_times(late(station, 30), SKY).verdict == "label"
    assert "half an interval" in check_times(late(station, -15), SKY).words


def test_daylight_saving_left_in_is_a_jump():
    """The clock was put forward on 31 March 2024, and no one took it out again."""
    station = made_station("2024-02-01", 120, clear_share=0.35)
    summer = made_station(
        "2024-02-01", 120, clear_share=0.35,
        clock=lambda time: np.where(time >= np.datetime64("2024-03-31T01:00"), -60.0, 0.0),
    )  # fmt: skip
    assert check_times(station, SKY).verdict == "consistent"
    timing = check_times(summer, SKY)
    assert timing.verdict == "jump"
    assert "daylight saving" in timing.words
    assert "2024-02" in timing.words or "2024-03" in timing.words


@pytest.mark.heavy
def test_drift():
    station = made_station(
        "2023-03-01", 200, clear_share=0.4,
        clock=lambda time: (time - time[0]).astype(float) / 86400.0 / 365.25 * 40.0,
    )  # fmt: skip
    timing = check_times(station, SKY)
    assert timing.verdict == "drift"
    assert timing.drift == pytest.approx(40.0, abs=5.0)


def hill_in_the_east(height=30.0):
    """A skyline every 5 degrees: a mountain between north-east and south-south-east."""
    azimuth = np.arange(0, 360, 5)
    return np.where((azimuth > 40) & (azimuth < 155), height, 8.0)


@pytest.mark.heavy
def test_a_hill_on_one_side_is_no_shift():
    """Half of each morning is behind a mountain; with its skyline the clock is right, and half an
    hour is still found."""
    skyline = hill_in_the_east()
    station = made_station(
        "2024-03-01", 120, clear_share=0.4, behind=lambda sun: behind_horizon(sun, skyline)
    )
    timing = check_times(station, SKY, skyline)
    assert timing.verdict == "consistent"
    assert abs(timing.shift) < 3.0
    moved = check_times(late(station, 30), SKY, skyline)
    assert moved.verdict == "label"
    blind = check_times(station, SKY)
    assert blind.days.size < timing.days.size


def test_steady_cloud_says_nothing():
    station = made_station("2024-03-01", 60, clear_share=0.0, seed=9)
    few = replace(station, values={"global": 0.3 * station.values["global"]})
    timing = check_times(few, SKY)
    assert timing.verdict == "unknown"
    assert "too few" in timing.words
    assert np.isnan(timing.shift)


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ({"seconds": 86400}, "too long to tell"),
        ({"seconds": 420}, "no part of a day"),
        ({"values": {}}, "no global light"),
        ({"values": {"global": np.zeros(40)}}, "0 clear days"),
        ({"values": {"global": np.full(40, np.nan)}}, "0 clear days"),
    ],
)
def test_what_cannot_be_told(changes, says):
    seconds = changes.get("seconds", 3600)
    start = np.datetime64("2024-03-01T00:00:00") + np.arange(40) * np.timedelta64(seconds, "s")
    values = changes.get("values", {"global": np.zeros(40)})
    timing = check_times(Station("x", 47.0, 11.0, 0.0, start, seconds, values), SKY)
    assert timing.verdict == "unknown"
    assert says in timing.words


def test_a_horizon_must_be_one(hourly):
    with pytest.raises(SettingError, match="horizon must be"):
        check_times(hourly, SKY, [1.0, 95.0])


def test_nothing_is_changed(hourly):
    before = hourly.start.copy(), hourly.values["global"].copy()
    check_times(hourly, SKY)
    np.testing.assert_array_equal(hourly.start, before[0])
    np.testing.assert_array_equal(hourly.values["global"], before[1])


@pytest.fixture(scope="module")
def col_de_porte():
    """Morin et al. (2012), doi:10.1594/PANGAEA.774249, as hour-ending UTC, and its skyline."""
    folder = SHARED / "data/coldeporte"
    if not folder.is_dir():
        pytest.skip("no measured data beside")
    table = np.loadtxt(folder / "met_CdP_0506.txt")
    start = np.datetime64("2005-09-30T23:00:00") + np.arange(len(table)) * np.timedelta64(3600, "s")
    station = Station("Col de Porte", 45.30, 5.77, 1325.0, start, 3600, {"global": table[:, 4]})
    rows = (folder / "solar_mask_1998_2018.csv").read_text().splitlines()
    upper = np.array(rows[4].split() if rows[4][0].isdigit() else rows[5].split(), float)[:72]
    return station, upper


def test_col_de_porte(col_de_porte):
    """Until 9 June the station's own values. As hour-ending UTC the shift is about 4 min; the
    middle (30 min) and the beginning of the hour (60 min) lie outside the bounds. But these are
    wide: few days are clear and free on both sides of noon, so there is no verdict. From 10 June
    the file has an analysis in place of measurements (Morin et al. 2012, abstract of the data
    set): its shape is some 40 minutes late.
    """
    station, skyline = col_de_porte
    sky = Air.ineichen(linke_climatology(45.30, 5.77))
    own = station.start < np.datetime64("2006-06-10")
    measured = replace(station, start=station.start[own],
                       values={"global": station.values["global"][own]})  # fmt: skip
    timing = check_times(measured, sky, skyline)
    assert timing.verdict == "unknown"
    assert "differ too much" in timing.words
    assert abs(timing.shift) < 8.0
    assert timing.low > -30.0
    assert timing.high < 15.0
    whole = check_times(station, sky, skyline)
    analysed = whole.shifts[whole.days >= np.datetime64("2006-06-10")]
    assert analysed.size >= 5
    assert np.median(analysed) > 30.0


def test_a_logger_that_stood_still_gives_no_verdict():
    station = made_station(days=30)
    stuck = replace(station, values={"global": np.full(station.start.size, 40.0)})
    assert check_times(stuck, Air.ineichen(3.0)).verdict == "unknown"
