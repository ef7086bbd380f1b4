"""Standard errors of parcels' figures from a stated error of the heights."""

from __future__ import annotations

import numpy as np
import pytest
from engine.made_parcels import asked_for, box, parcels, plane

from terrasol.engine.parcel_tables import column_rows, doubt_rows, table_rows
from terrasol.engine.parcels import survey
from terrasol.ground.elevation import Elevation
from terrasol.ground.uncertainty import DemError


def doubted(ground, shape, error, **more):
    return survey(ground, parcels(shape), asked_for(coarser=(), error=error, **more)).parcels[0]


def noisy(ground, rmse):
    noise = np.random.default_rng(1).normal(0.0, rmse, ground.shape)
    return Elevation((ground.heights + noise).astype(np.float32), ground.transform, ground.crs)


@pytest.mark.heavy
def test_more_error_leaves_more_open():
    """Of two models that look as rough as their error, the rougher one leaves more open."""
    ground, shape = plane(14.0, 180.0), box(-100, -100, 100, 100)
    rule = "slope_percent < 15"
    small, large = (
        doubted(noisy(ground, rmse), shape, DemError(rmse, 0.0, 8), rule=rule).doubts
        for rmse in (0.02, 0.3)
    )
    for name in ("rule_ha_map", "slope_mean_percent", "irradiation_season_mj_m2_slope"):
        assert 0.0 <= small[name].standard_error < large[name].standard_error
    assert large["rule_ha_map"].standard_error > 0.05  # of 4 ha
    assert large["slope_p90_percent"].count == 8
    assert "sun_hours_season_h" not in large  # not found anew, so nothing is claimed


def test_bounds_stay_within_what_can_be():
    parcel = doubted(plane(15.0, 180.0), box(-60, -60, 60, 60), DemError(0.5, 20.0, 6),
                     rule="slope_percent < 15", score="rule_ha_map")  # fmt: skip
    area = parcel.numbers["map_area_ha"]
    for name, doubt in parcel.doubts.items():
        assert doubt.value == pytest.approx(
            parcel.numbers.get(name, doubt.value), rel=2e-5, abs=1e-6
        )
        if name.endswith("_ha_map"):
            assert 0.0 <= doubt.low <= doubt.high <= area
    assert parcel.doubts["score"].standard_error == pytest.approx(
        parcel.doubts["rule_ha_map"].standard_error
    )
    assert np.isnan(parcel.doubts["rank"].low)


def test_hours_are_found_anew_where_the_rule_speaks_of_them():
    parcel = doubted(plane(15.0, 180.0), box(-60, -60, 60, 60), DemError(0.5, 20.0, 2),
                     rule="sun_hours_season > 2600")  # fmt: skip
    assert parcel.doubts["sun_hours_season_h"].standard_error > 0.0


def test_a_parcel_without_a_rank_has_none_among_its_errors():
    """Its score is unknown, here 0 / 0: it must not come before the first."""
    found = survey(
        plane(15.0, 180.0),
        parcels(box(-60, -60, 60, 60), box(-60, 80, 60, 140)),
        asked_for(coarser=(), error=DemError(0.1, 20.0, 2), score="rule_ha_map / rule_ha_map",
                  rule="slope_percent > 90"),
    ).parcels  # fmt: skip
    for parcel in found:
        assert np.isnan(parcel.doubts["rank"].value)
        assert parcel.doubts["rank"].count == 0


@pytest.mark.heavy
def test_slope_of_a_plane_seen_with_error_is_held():
    """The bounds from an erroneous model hold the true mean slope in most parcels."""
    truth = plane(20.0, 180.0, size=120)
    noise = np.random.default_rng(3).normal(0.0, 0.3, truth.shape).astype(np.float32)
    seen = Elevation(truth.heights + noise, truth.transform, truth.crs)
    shapes = [
        box(x, y, x + 40, y + 40) for x in range(-200, 400, 100) for y in range(-600, 200, 100)
    ]
    found = survey(
        seen, parcels(*shapes), asked_for(coarser=(), error=DemError(0.3, 0.0, 12))
    ).parcels
    held = [
        p.doubts["slope_mean_percent"].low <= 20.0 * 0.9996 <= p.doubts["slope_mean_percent"].high
        for p in found
    ]
    # 90 % of 48: 43, and 36 or fewer with a probability of 0.3 % (binomial).
    assert sum(held) > 36


def test_tables_carry_the_errors_and_explain_them():
    settings = asked_for(coarser=(), error=DemError(0.2, 20.0, 2), rule="slope_percent < 15",
                         score="rule_ha_map")  # fmt: skip
    found = survey(plane(14.0, 180.0), parcels(box(-60, -60, 60, 60)), settings)
    row = table_rows(found)[0]
    assert row["rule_ha_map_se"] == found.parcels[0].doubts["rule_ha_map"].standard_error
    names = list(row)
    assert names.index("rule_ha_map_se") == names.index("rule_ha_map") + 1
    explained = {line["column"] for line in column_rows(found)}
    assert set(row) <= explained
    assert set(doubt_rows(found)[0]) <= explained
