"""What the answers do not know, in the words that go with every one of them."""

from typing import Final

VINEYARD: Final = (
    "Frost pooling, soil and water are not in this: sun, slope and summed warmth alone do not make "
    "a site. Walk it, dig, and ask those who know its cold nights; for permits, local codes and "
    "licensed surveyors decide."
)
"""Of everything said about parcels."""
