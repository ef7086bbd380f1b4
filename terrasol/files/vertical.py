"""In which unit a raster's heights are, and which part of its CRS is horizontal."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Final

from pyproj import CRS
from pyproj.exceptions import CRSError

from terrasol.errors import InputError, SettingError

OPTION_NAMES: Final = ("metre", "foot", "us-foot")
"""What `--vertical-unit` takes."""

_SPELLINGS: Final = {
    "metre": "m metre metres meter meters mtr mtrs",
    "foot": "ft foot feet ftint intft internationalfoot internationalfeet footinternational",
    "US survey foot": (
        "ftus usft footus usfoot feetus usfeet ftussurvey ussurveyft ussurveyfoot ussurveyfeet"
        " surveyfoot surveyfeet footussurvey feetussurvey sft"
    ),
}
_UNIT_OF: Final = {word: unit for unit, words in _SPELLINGS.items() for word in words.split()}


def unit_named(text: str) -> str | None:
    """Return the unit of `METRES_PER_UNIT` that a text means, or None.

    Case, blanks and punctuation do not count.

    Examples
    --------
    >>> unit_named("U.S. Survey Feet"), unit_named("us-foot"), unit_named("Meters")
    ('US survey foot', 'US survey foot', 'metre')
    >>> unit_named("fathom") is None
    True
    """
    return _UNIT_OF.get(re.sub(r"[^a-z]", "", text.casefold()))


@dataclass(frozen=True)
class Reference:
    """A raster's CRS taken apart.

    Parameters
    ----------
    horizontal : pyproj.CRS
        Where x and y lie.
    vertical_unit : str or None
        Unit of the vertical axis as the CRS spells it; None without such an axis.
    """

    horizontal: CRS
    vertical_unit: str | None

    @classmethod
    def from_wkt(cls, wkt: str) -> Reference:
        """Take a CRS apart.

        Raises
        ------
        InputError
            The CRS is not understood, is neither projected nor geographic, or its
            vertical axis points down.
        """
        try:
            whole = CRS.from_wkt(wkt)
        except CRSError as error:
            raise InputError(
                "the CRS cannot be understood: assign the raster's real CRS"
            ) from error
        parts = whole.sub_crs_list if whole.is_compound else [whole]
        horizontal = _unbound(parts[0])
        if horizontal.is_geocentric or not (horizontal.is_projected or horizontal.is_geographic):
            raise InputError(
                f"the CRS '{horizontal.name}' ({horizontal.type_name}) is neither projected nor"
                " geographic, so true north is unknown: assign the raster's real CRS"
            )
        axes = parts[1].axis_info if len(parts) > 1 else horizontal.axis_info[2:]
        if axes and axes[0].direction == "down":
            raise InputError(
                f"the vertical axis of the CRS '{whole.name}' points down, so the cells hold"
                " depths: turn them into heights"
            )
        return cls(horizontal.to_2d(), axes[0].unit_name if axes else None)


def _unbound(crs: CRS) -> CRS:
    """Return the CRS without a datum shift tied to it."""
    return crs.source_crs if crs.is_bound and crs.source_crs is not None else crs


def resolve_vertical_unit(
    option: str | None, band: str | None, reference: Reference
) -> tuple[str, tuple[str, ...]]:
    """Decide the unit of the heights: the option, else the band's unit, else the CRS's axis.

    Parameters
    ----------
    option : str or None
        What the user says.
    band : str or None
        The band's unit text.
    reference : Reference
        The raster's CRS.

    Returns
    -------
    unit : str
        A key of `METRES_PER_UNIT`.
    warnings : tuple of str
        What was assumed, or what contradicts what.

    Raises
    ------
    SettingError
        The option is no unit known here.
    InputError
        The file names a unit that is not known here, or none though x and y are in feet, and no
        option settles it.
    """
    asked = unit_named(option) if option else None
    if option and asked is None:
        raise SettingError(f"vertical unit '{option}' is not one of: {', '.join(OPTION_NAMES)}")
    stated = [
        (source, text.strip(), unit_named(text))
        for source, text in (("band unit", band), ("CRS's vertical unit", reference.vertical_unit))
        if text and text.strip()
    ]
    if asked:
        against = [f"the {source} is '{text}'" for source, text, unit in stated if unit != asked]
        note = f"heights are read as {asked} as asked, although {' and '.join(against)}"
        return asked, (note,) if against else ()
    for source, text, unit in stated:
        if unit is None:
            raise InputError(
                f"the {source} '{text}' is not a unit of height known here: say what the heights"
                f" are with --vertical-unit ({', '.join(OPTION_NAMES)})"
            )
    if not stated:
        return "metre", (_metres_assumed(reference.horizontal),)
    source, text, unit = stated[0]
    assert unit is not None
    if len({other for *_, other in stated}) > 1:
        other = stated[1]
        note = f"heights are read as {unit} after the {source}, although the {other[0]} is"
        return unit, (f"{note} '{other[1]}'",)
    return unit, ()


def _metres_assumed(horizontal: CRS) -> str:
    """Word the assumption of metres; where x and y are in feet, refuse to make it."""
    unit = horizontal.axis_info[0].unit_name
    if horizontal.is_projected and unit_named(unit) != "metre":
        raise InputError(
            f"neither the band nor the CRS names the unit of the heights, and x and y are in"
            f" {unit}: say what the heights are with --vertical-unit ({', '.join(OPTION_NAMES)})"
        )
    return (
        "neither the band nor the CRS names the unit of the heights: metres are assumed"
        " (--vertical-unit says otherwise)"
    )
