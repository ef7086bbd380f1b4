"""Numbers, lists and areas in words for people: a sentence has one way to count and to measure."""

from collections.abc import Collection, Sequence
from typing import Final


def counted(number: int, noun: str) -> str:
    """Word a number of things.

    Examples
    --------
    >>> counted(1, "row"), counted(2, "row")
    ('1 row', '2 rows')
    """
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"


def listed(words: Sequence[str], most: int) -> str:
    """Word the first of many things, and how many more there are.

    Examples
    --------
    >>> listed(["a", "b", "c"], 3), listed(["a", "b", "c"], 2)
    ('a, b, c', 'a, b and 1 more')
    """
    more = f" and {len(words) - most} more" if len(words) > most else ""
    return ", ".join(words[:most]) + more


def range_text(values: Collection[float]) -> str:
    """Word the least and the greatest of values.

    Examples
    --------
    >>> range_text([3.4, 2.1, 3.0]), range_text([0.2, 0.2])
    ('2.1 to 3.4', '0.2')
    """
    ends = [f"{end:.3g}" for end in (min(values), max(values))]
    return ends[0] if ends[0] == ends[1] else " to ".join(ends)


SMALL_AREA: Final = 0.01
"""Hectares under which people are told square metres (judgement, no source)."""


def area_unit(hectares: float) -> tuple[str, float, str]:
    """Find how an area is told to people: its unit, how many make a hectare, and the format.

    Examples
    --------
    >>> area_unit(1.5), area_unit(0.0), area_unit(0.004)
    (('ha', 1.0, '.2f'), ('ha', 1.0, '.2f'), ('m2', 10000.0, '.0f'))
    """
    if not 0.0 < hectares < SMALL_AREA:
        return "ha", 1.0, ".2f"
    return "m2", 1e4, ".0f" if hectares >= SMALL_AREA / 10.0 else ".1f"


def area_words(hectares: float) -> str:
    """Word an area.

    Examples
    --------
    >>> area_words(1.5), area_words(0.0085), area_words(0.00091)
    ('1.50 ha', '85 m2', '9.1 m2')
    """
    unit, factor, form = area_unit(hectares)
    return f"{format(hectares * factor, form)} {unit}"
