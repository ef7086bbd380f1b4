"""Scores, their terms, and ranks."""

import numpy as np
import pytest

from terrasol.errors import SettingError
from terrasol.practice.ranking import parse_score, rank

KNOWN = ("area_ha", "share_of_level", "slope_percent_mean")
PARCELS = {
    "share_of_level": np.array([1.10, 0.90, np.nan, 1.0]),
    "slope_percent_mean": np.array([20.0, 0.0, 5.0, 10.0]),
    "area_ha": np.array([1.0, 2.0, 3.0, 4.0]),
}


def test_terms_add_up_to_the_score():
    text = "2*share_of_level - (0.02*slope_percent_mean - area_ha) + area_ha / 10 - 1"
    score = parse_score(text, KNOWN)
    got = rank(score, PARCELS)
    plain = (
        2 * PARCELS["share_of_level"]
        - (0.02 * PARCELS["slope_percent_mean"] - PARCELS["area_ha"])
        + PARCELS["area_ha"] / 10
        - 1
    )
    np.testing.assert_allclose(got.total, plain, rtol=1e-14)
    np.testing.assert_allclose(got.contributions.sum(axis=1), plain, rtol=1e-14)
    assert got.contributions.shape == (4, len(score.terms))
    assert score.text == text


def test_terms_are_written_with_their_signs():
    score = parse_score("2*share_of_level - 0.02*slope_percent_mean*area_ha - area_ha", KNOWN)
    assert score.terms == ("2 * share_of_level", "-0.02 * slope_percent_mean * area_ha", "-area_ha")
    got = rank(score, PARCELS).contributions[0]
    np.testing.assert_allclose(got, [2.2, -0.4, -1.0])


def test_highest_first_ties_share_and_unknown_ones_come_last():
    exact = {"share_of_level": [4.0, 2.0, np.nan, 4.0, 1.0], "slope_percent_mean": 0.0}
    got = rank(parse_score("share_of_level", KNOWN), exact)
    assert got.rank.tolist() == [1, 3, 0, 1, 4]
    assert got.order.tolist() == [0, 3, 1, 4, 2]


def test_a_number_alone_scores_all_alike():
    assert rank(parse_score("3", KNOWN), PARCELS).rank.tolist() == [1, 1, 1, 1]


@pytest.mark.parametrize("text", ["share_of_level > 1", "share_of_level +", "max(area_ha, 1)", ""])
def test_no_score_is_refused(text):
    with pytest.raises(SettingError, match="score"):
        parse_score(text, KNOWN)


def test_unknown_figure_is_named():
    with pytest.raises(SettingError, match=r"names area, which is unknown.*known are area_ha"):
        parse_score("3 * area", KNOWN)
