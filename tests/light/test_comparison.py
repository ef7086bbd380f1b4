"""A station made of a known sky and horizon: the comparison must find just that."""

from dataclasses import replace

import numpy as np
import pytest

from terrasol.light.comparison import Agreement, compare, model_station
from terrasol.sky.clear import Air
from terrasol.sky.station import Station

AIR = Air.ineichen(3.0)
HORIZON = np.where(np.arange(72) < 36, 18.0, 4.0)  # a ridge all along the east
VIEW = 0.93


def station(seconds=600, days=12, start="2025-03-10"):
    count = days * 86400 // seconds
    starts = np.datetime64(start, "s") + np.arange(count) * np.timedelta64(seconds, "s")
    return Station("made up", 46.0, 9.3, 800.0, starts, seconds, {"global": np.zeros(count)})


def measured(horizon=HORIZON, scale=1.0, **how):
    bare = station(**how)
    light = model_station(bare, AIR, horizon, VIEW)
    return replace(bare, values={"global": scale * light.shaded})


def test_the_right_horizon_leaves_nothing():
    here = measured()
    found = compare(here, model_station(here, AIR, HORIZON, VIEW))
    assert found.overall.bias == pytest.approx(0.0, abs=1e-9)
    assert found.overall.rms == pytest.approx(0.0, abs=1e-9)
    assert found.shade.explained == pytest.approx(1.0)
    assert found.shade.without_horizon > 100.0
    assert found.shade.first_minutes == found.shade.last_minutes == 0.0
    assert "explains when the sun comes" in found.shade.words
    assert f"the rms falls from {found.shade.without_horizon:.0f} to 0 W/m2" in found.shade.words


def test_a_ridge_that_is_not_there_is_noticed():
    here = measured(horizon=np.zeros(72))
    found = compare(here, model_station(here, AIR, HORIZON, VIEW))
    assert found.shade.explained < 0.0
    assert found.shade.first_minutes < -60.0  # the measured sun comes before the modelled one
    assert "misses" in found.shade.words
    assert "the rms rises from 1 to " in found.shade.words
    # nothing was to be explained, since the measured light is the open plain's but for the dome
    flat = replace(here, values={"global": model_station(here, AIR, HORIZON, VIEW).open})
    exact = compare(flat, model_station(flat, AIR, HORIZON, VIEW)).shade
    assert exact.without_horizon == 0.0
    assert exact.explained == -np.inf


def test_an_open_place_gives_no_verdict():
    here = measured(horizon=np.zeros(72))
    found = compare(here, model_station(here, AIR, np.zeros(72), VIEW))
    assert found.shade.count == 0
    assert "too few" in found.shade.words


def test_bias_by_month_and_hour():
    here = measured(scale=0.9, days=40)
    model = model_station(here, AIR, HORIZON, VIEW)
    found = compare(here, model)
    assert found.overall.record()["bias_percent"] == pytest.approx(100.0 / 9.0, abs=0.01)
    assert sorted(found.months) == [3, 4]
    assert sum(a.count for a in found.months.values()) == found.overall.count == found.kept.sum()
    assert sum(a.count for a in found.hours.values()) == found.overall.count
    assert min(found.hours) >= 5
    assert max(found.hours) <= 19
    noon = found.hours[12]
    assert noon.modelled > 1.5 * found.hours[8].modelled
    assert noon.bias == pytest.approx(noon.measured / 9.0)


def test_only_given_days_and_measured_intervals_count():
    here = measured()
    here.values["global"][200:260] = np.nan
    model = model_station(here, AIR, HORIZON, VIEW)
    day = np.array(["2025-03-12"], "M8[D]")
    found = compare(here, model, day)
    assert 60 < found.kept.sum() < 80
    assert compare(here, model, np.array(["2024-03-12"], "M8[D]")) is None


def test_agreement_of_known_numbers():
    found = Agreement.of(np.array([10.0, 20.0]), np.array([13.0, 16.0]))
    assert (found.count, found.bias) == (2, -0.5)
    assert found.rms == pytest.approx(np.sqrt(12.5))
    assert found.record()["rms_percent"] == pytest.approx(23.57)
