"""What the answers do not know, in the words that go with every one of them."""

from typing import Final

VINEYARD: Final = (
    "Frost pooling, soil and water are not in this: sun, slope and summed warmth alone do not make "
    "a site. Walk it, dig, and ask those who know its cold nights; for permits, local codes and "
    "licensed surveyors decide."
)
"""Of everything said about parcels."""

PLACE: Final = (
    "Not in this: frost and cold air, wind, soil, water, and trees and buildings unless a surface"
    " model gave them. No tool for avalanche, slope-stability, structural or legal decisions: there"
    " local codes and licensed practice decide."
)
"""Of everything said about one place."""
