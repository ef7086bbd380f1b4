"""The unit of heights: spellings, and who is believed."""

import pytest
from pyproj import CRS

from terrasol.errors import InputError, SettingError
from terrasol.files.vertical import Reference, resolve_vertical_unit, unit_named


def reference(crs):
    return Reference.from_wkt(CRS.from_user_input(crs).to_wkt())


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        ("m", "metre"), ("M", "metre"), ("metres", "metre"), ("Meter", "metre"), ("[m]", "metre"),
        ("ft", "foot"), ("Feet", "foot"), ("foot", "foot"), ("International foot", "foot"),
        ("ft (int)", "foot"), ("ftUS", "US survey foot"), ("US survey foot", "US survey foot"),
        ("U.S. Survey Feet", "US survey foot"), ("us-ft", "US survey foot"),
        ("Foot_US", "US survey foot"), ("us-foot", "US survey foot"), ("survey feet",
        "US survey foot"), ("cm", None), ("degrees", None), ("", None), ("dB", None),
    ],
)  # fmt: skip
def test_spellings(text, unit):
    assert unit_named(text) == unit


@pytest.mark.parametrize(
    ("option", "band", "crs", "unit", "words"),
    [
        (None, "m", "EPSG:32632", "metre", None),
        (None, "ft", "EPSG:32632", "foot", None),
        (None, None, "EPSG:32632+5773", "metre", None),
        (None, None, "EPSG:2226+6360", "US survey foot", None),
        (None, "  ", "EPSG:2226+8228", "foot", None),
        (None, "m", "EPSG:4979", "metre", None),
        # The band is nearer to the numbers than the CRS.
        (None, "ft", "EPSG:32632+5773", "foot", "although the CRS's vertical unit is 'metre'"),
        ("foot", "m", "EPSG:32632", "foot", "although the band unit is 'm'"),
        ("us-foot", "US survey foot", "EPSG:2226+6360", "US survey foot", None),
        ("metre", "fathoms", "EPSG:32632", "metre", "fathoms"),
        (None, None, "EPSG:32632", "metre", "metres are assumed"),
        (None, None, "EPSG:4326", "metre", "metres are assumed"),
        ("foot", None, "EPSG:2226", "foot", None),
    ],
)
def test_who_is_believed(option, band, crs, unit, words):
    found, notes = resolve_vertical_unit(option, band, reference(crs))
    assert found == unit
    if words is None:
        assert notes == ()
    else:
        assert len(notes) == 1
        assert words in notes[0]


def test_unknown_text_asks_for_the_option():
    with pytest.raises(InputError, match=r"'fathoms'.*--vertical-unit"):
        resolve_vertical_unit(None, "fathoms", reference("EPSG:32632"))


@pytest.mark.parametrize("crs", ["EPSG:2226", "EPSG:2222", "EPSG:2314"])
def test_a_plan_in_feet_does_not_make_the_heights_feet_but_they_may_be(crs):
    """US survey feet, international feet, Clarke's feet: refused, whatever the band leaves out."""
    for band in (None, " "):
        with pytest.raises(InputError, match=r"x and y are in .*foot.*--vertical-unit"):
            resolve_vertical_unit(None, band, reference(crs))
    assert resolve_vertical_unit(None, "m", reference(crs)) == ("metre", ())
    assert resolve_vertical_unit("metre", None, reference(crs)) == ("metre", ())


def test_unknown_option():
    with pytest.raises(SettingError, match="us-foot"):
        resolve_vertical_unit("yard", None, reference("EPSG:32632"))


@pytest.mark.parametrize(
    ("crs", "horizontal", "unit"),
    [
        ("EPSG:32632+5773", "EPSG:32632", "metre"),
        ("EPSG:2226+6360", "EPSG:2226", "US survey foot"),
        ("EPSG:4979", "EPSG:4326", "metre"),
        ("EPSG:2056", "EPSG:2056", None),
        ("+proj=utm +zone=32 +ellps=bessel +towgs84=598,73,418,0.2,0.04,-2.4,6.7", None, None),
    ],
)
def test_horizontal_part(crs, horizontal, unit):
    found = reference(crs)
    assert found.vertical_unit == unit
    assert len(found.horizontal.axis_info) == 2
    assert not found.horizontal.is_bound
    if horizontal is not None:
        assert found.horizontal == CRS(horizontal)


@pytest.mark.parametrize(
    ("wkt", "words"),
    [
        ('LOCAL_CS["site",UNIT["metre",1]]', "neither projected nor geographic"),
        (CRS("EPSG:4978").to_wkt(), "neither projected nor geographic"),
        (CRS("EPSG:32632+5715").to_wkt(), "depths"),
        ("no CRS at all", "cannot be understood"),
    ],
)
def test_unusable_crs(wkt, words):
    with pytest.raises(InputError, match=words):
        Reference.from_wkt(wkt)
