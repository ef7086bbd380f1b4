"""Gaps: short ones are filled by the clear sky's shape, long ones stay and have a name."""

from dataclasses import replace

import numpy as np
import pytest
from reference.made_station import AIR, made_station

from terrasol.errors import SettingError
from terrasol.sky.clear import Air
from terrasol.sky.gaps import fill_gaps
from terrasol.sky.interval import interval_means, on_level
from terrasol.sky.quality import LIGHT, Flag, check_quality


def holed(station, *slices, names=("global",)):
    values = {name: station.values[name].copy() for name in names}
    for name in names:
        for hole in slices:
            values[name][hole] = np.nan
    return replace(station, values=values)


@pytest.fixture(scope="module")
def station():
    """Ten cloudless days, hours from midnight UTC, at 15 E: noon is about 11 UTC."""
    return made_station("2024-06-01", 10, clear_share=0.0, longitude=15.0, seed=3)


@pytest.fixture(scope="module")
def clear():
    """The same without a cloud: what `AIR` gives times a constant."""
    made = made_station("2024-06-01", 10, longitude=15.0, clear_share=1.0)

    def fluxes(sun):
        light = AIR.over(sun, made.height)
        return {"global": on_level(sun, light), "beam": light.beam_normal,
                "diffuse": light.diffuse_horizontal}  # fmt: skip

    means = interval_means(made, fluxes)
    return replace(made, values={name: 0.7 * means[name] for name in LIGHT})


def test_a_constant_index_is_filled_exactly(clear):
    """Where measured is 0.7 of clear throughout, what is filled is what was taken away."""
    gap = holed(clear, slice(34, 37), slice(80, 82), names=LIGHT)
    filled = fill_gaps(gap, AIR)
    assert filled.gaps == ()
    for name in LIGHT:
        np.testing.assert_allclose(filled.station.values[name], clear.values[name], atol=1e-9)
        assert filled.count[name] == 5
        marked = np.flatnonzero(filled.station.flags[name] & Flag.FILLED)
        np.testing.assert_array_equal(marked, [34, 35, 36, 80, 81])


def test_the_index_is_linear_in_time(clear):
    """Index 0.4 before, 0.8 after three missing hours: 0.5, 0.6, 0.7 within."""
    values = clear.values["global"] / 0.7
    before = np.arange(values.size) < 34
    made = replace(clear, values={"global": values * np.where(before, 0.4, 0.8)})
    filled = fill_gaps(holed(made, slice(34, 37)), AIR).station.values["global"]
    np.testing.assert_allclose(filled[34:37], values[34:37] * [0.5, 0.6, 0.7], rtol=1e-9)


def test_longer_gaps_stay_and_are_named(clear):
    gap = holed(clear, slice(33, 37), slice(60, 63))
    filled = fill_gaps(gap, AIR)
    assert filled.count == {"global": 3}
    (left,) = filled.gaps
    assert np.isnan(filled.station.values["global"][33:37]).all()
    assert (left.quantity, left.hours, left.sun_hours) == ("global", 4.0, 4.0)
    assert (left.start, left.end) == (clear.start[33], clear.start[37])
    assert str(left) == (
        "global missing from 2024-06-02T09:00 to 2024-06-02T13:00 UTC, 4 h, of which 4 h with sun"
    )
    assert fill_gaps(gap, AIR, longest_hours=4.0).gaps == ()


def test_hours_count_while_the_sun_is_up(clear):
    """A night with an hour of evening and one of morning is a short gap, a whole day is long."""
    level = clear.values["global"]
    night = fill_gaps(holed(clear, slice(43, 53)), AIR)
    assert night.gaps == ()
    np.testing.assert_allclose(night.station.values["global"][43:53], level[43:53], atol=1e-9)
    assert level[43:53].max() > 30.0  # there was light to be filled
    (day,) = fill_gaps(holed(clear, slice(48, 72)), AIR).gaps
    assert day.hours == 24.0
    assert 15.0 < day.sun_hours < 17.0


def test_ends_hold_the_nearest_index(clear):
    filled = fill_gaps(holed(clear, slice(0, 6)), AIR)
    np.testing.assert_allclose(
        filled.station.values["global"][:6], clear.values["global"][:6], atol=1e-9
    )


def test_nothing_measured_by_day_is_a_gap(clear):
    empty = holed(clear, slice(None))
    filled = fill_gaps(empty, AIR, longest_hours=1e6)
    assert filled.count == {"global": 0}
    assert len(filled.gaps) == 1


def test_under_clouds_better_than_a_straight_line(station):
    """Two hours a day taken out under broken clouds: rms below that of linear interpolation."""
    holes = [slice(24 * d + h, 24 * d + h + 2) for d, h in enumerate([5, 7, 9, 11, 13, 15, 6, 14])]
    gap = holed(station, *holes)
    truth, found = station.values["global"], fill_gaps(gap, AIR).station.values["global"]
    out = np.isnan(gap.values["global"])
    line = np.interp(np.flatnonzero(out), np.flatnonzero(~out), truth[~out])
    assert not np.isnan(found).any()
    rms = [np.sqrt(np.mean((x - truth[out]) ** 2)) for x in (found[out], line)]
    assert rms[0] < rms[1]


def test_other_quantities_and_old_flags_are_left(clear):
    gap = holed(clear, slice(34, 36))
    cold = replace(gap, values=gap.values | {"temperature": np.full(240, np.nan)})
    flagged = replace(cold, flags=check_quality(cold).flags)
    filled = fill_gaps(flagged, AIR)
    assert np.isnan(filled.station.values["temperature"]).all()
    assert (filled.station.flags["global"][34:36] == Flag.FILLED).all()
    again = check_quality(filled.station).flags["global"]
    assert ((again[34:36] & Flag.FILLED) != 0).all()
    assert np.isnan(gap.values["global"][34:36]).all()


def test_length_must_be_a_length(clear):
    for length in (-1.0, float("nan")):
        with pytest.raises(SettingError, match="longest gap"):
            fill_gaps(clear, Air.ineichen(3.0), longest_hours=length)
