"""A number with its standard error, as people read it."""

from __future__ import annotations

import math

from terrasol.words import area_unit


def plus_minus(
    value: float,
    error: float | None,
    form: str,
    *,
    sign: str = "±",
    whole: float = math.nan,
) -> str:
    """Word a number with its standard error behind it.

    Parameters
    ----------
    value, error : float
        In one unit; an error of None or NaN is not known, and not told.
    form : str
        How to format both, such as ``".2f"``.
    sign : str
        What stands between them.
    whole : float
        For a part of something: all of it. A part that is told as none or as all of it can be off
        to one side only, and has the range of one standard error in place of the sign.

    Examples
    --------
    >>> plus_minus(3.1, 0.4, ".1f"), plus_minus(3.1, 0.4, ".1f", whole=5.0)
    ('3.1 ± 0.4', '3.1 ± 0.4')
    >>> plus_minus(0.0, 0.32, ".2f", whole=5.0), plus_minus(5.0, 0.32, ".2f", whole=5.0)
    ('0.00 to 0.32', '4.68 to 5.00')
    """
    told = format(value + 0.0, form)
    if error is None or not math.isfinite(error):
        return told
    none, every, off = (format(each, form) for each in (0.0, whole, error))
    if math.isfinite(whole) and off != none:
        if told == none:
            return f"{none} to {format(min(error, whole), form)}"
        if told == every:
            return f"{format(max(whole - error, 0.0), form)} to {every}"
    return f"{told} {sign} {off}"


def area_plus_minus(
    hectares: float,
    error: float | None,
    whole: float = math.nan,
    *,
    sign: str = "±",
    like: float | None = None,
) -> str:
    """Word an area with its standard error and unit, small ones in square metres.

    Parameters
    ----------
    hectares, error, whole, sign
        As for `plus_minus`.
    like : float, optional
        Area [ha] that the unit suits, so that those of one table have one; by default its own.

    Examples
    --------
    >>> area_plus_minus(3.1, 0.4), area_plus_minus(0.004, None), area_plus_minus(0.004, 0.2)
    ('3.10 ± 0.40 ha', '40 m²', '0.00 ± 0.20 ha')
    >>> area_plus_minus(3.1, None, like=0.004), area_plus_minus(0.004, None, like=3.1)
    ('31000 m²', '0.00 ha')
    """
    like = max(hectares, error or 0.0) if like is None else like
    unit = area_unit(like)[0]
    told = area_figure(hectares, error, whole, sign=sign, like=like)
    return f"{told} {unit.replace('2', '²') if sign == '±' else unit}"


def area_figure(
    hectares: float,
    error: float | None,
    whole: float = math.nan,
    *,
    like: float,
    sign: str = "±",
) -> str:
    """Word an area as `area_plus_minus` does, for a table whose head has the unit.

    Examples
    --------
    >>> area_figure(3.1, 0.4, like=0.004), area_figure(0.0009, 0.0, like=3.1)
    ('31000 ± 4000', '0.00 ± 0.00')
    """
    _, factor, form = area_unit(like)
    off = None if error is None else error * factor
    return plus_minus(hectares * factor, off, form, sign=sign, whole=whole * factor)
