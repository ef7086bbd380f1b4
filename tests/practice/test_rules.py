"""The language of rules, what it refuses, and patches."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from terrasol.errors import SettingError
from terrasol.practice.rules import keep_patches, meet, parse_rule

KNOWN = ("aspect", "share_of_level", "slope_percent")
CELLS = {
    "slope_percent": np.array([3.0, 14.9, 15.0, 40.0, np.nan]),
    "share_of_level": np.array([0.99, 0.95, 1.10, 0.80, 1.0]),
    "aspect": np.array([np.nan, 180.0, 170.0, 0.0, np.nan]),
}


@pytest.mark.parametrize(
    ("text", "met", "unknown"),
    [
        ("slope_percent < 15 and share_of_level >= 0.95", "11000", "00001"),
        ("slope_percent<15 or share_of_level>1.05", "11100", "00001"),
        ("not slope_percent < 15", "00110", "00001"),
        ("5 <= slope_percent < 15", "01000", "00001"),
        ("slope_percent < 5 or 135 < aspect < 225", "11100", "00001"),
        ("share_of_level - slope_percent / 100 > 0.85", "10100", "00001"),
        ("-slope_percent > -10", "10000", "00001"),
        ("share_of_level == 1 or slope_percent != 3", "01111", "00000"),
        ("slope_percent > 0 and share_of_level > 2", "00000", "00000"),
        ("(slope_percent < 5 or slope_percent > 30) and not (share_of_level < 0.9)", "10000",
         "00001"),
    ],
)  # fmt: skip
def test_rule_holds_where_it_should(text, met, unknown):
    verdict = meet(parse_rule(text, KNOWN), CELLS)
    assert "".join("01"[int(m)] for m in verdict.met) == met
    assert "".join("01"[int(u)] for u in verdict.unknown) == unknown


def test_what_is_lacking_counts_only_where_it_would_decide():
    rule = parse_rule("slope_percent < 5 or aspect > 90", KNOWN)
    verdict = meet(rule, {"slope_percent": [1.0, 9.0], "aspect": [np.nan, np.nan]})
    assert verdict.met.tolist() == [True, False]
    assert verdict.unknown.tolist() == [False, True]


def test_a_division_by_zero_is_unknown():
    rule = parse_rule("1 / slope_percent > 0.5", KNOWN)
    verdict = meet(rule, {"slope_percent": [0.0, 1.0]})
    assert verdict.unknown.tolist() == [True, False]
    assert verdict.met.tolist() == [False, True]


def test_rule_keeps_text_and_names_and_broadcasts():
    rule = parse_rule(" slope_percent < 15 and share_of_level > 1 ", KNOWN)
    assert rule.text == "slope_percent < 15 and share_of_level > 1"
    assert rule.names == ("share_of_level", "slope_percent")
    verdict = meet(rule, {"slope_percent": np.zeros((2, 3)), "share_of_level": 2.0})
    assert verdict.met.shape == (2, 3)


@pytest.mark.parametrize(
    "text",
    [
        "", "slope_percent", "slope_percent <", "slope_percent = 3", "slope_percent ** 2 > 3",
        "slope_percent & 1", "(slope_percent < 3) & (aspect > 2)", "slope_percent < 'a'",
        "slope_percent in (1, 2)", "slope_percent is None", "True", "slope_percent < True",
        "__import__('os').system('true') < 1", "slope_percent.real < 1", "aspect[0] < 1",
        "(lambda: 1)() < 2", "[1] < [2]", "slope_percent < 1j", "slope_percent < 1e999",
        "1 if aspect < 3 else 2", "aspect < 3; aspect", "(aspect < 3) + 1 > 0", "not aspect",
        "aspect and slope_percent < 3", "aspect < 3 < (slope_percent < 4)", "x := 3",
        "aspect % 90 < 3", "~aspect < 3", "f'{aspect}' < 3", "aspect < 3\x00",
        "(" * 300 + "1" + ")" * 300 + " < 2", "not " * 240 + "aspect < 3", "1 < 2 " * 400,
    ],
)  # fmt: skip
def test_anything_else_is_refused(text):
    with pytest.raises(SettingError, match="rule"):
        parse_rule(text, KNOWN)


def test_an_unknown_name_is_named_and_the_known_ones_listed():
    with pytest.raises(SettingError) as error:
        parse_rule("slope_procent < 15", KNOWN)
    message = str(error.value)
    assert "slope_procent" in message
    assert "did you mean slope_percent?" in message
    assert "known are aspect, share_of_level, slope_percent" in message


def picture(*rows):
    return np.array([[c == "#" for c in row] for row in rows])


def test_small_patches_are_left_out():
    mask = picture("##..#", "##...", "..#..", "..#.#")
    got = keep_patches(mask, 100.0, 200.0)
    assert got.areas.tolist() == [400.0, 200.0]
    assert (got.ignored, got.ignored_area) == (2, 200.0)
    np.testing.assert_array_equal(got.kept, picture("##...", "##...", "..#..", "..#.."))
    np.testing.assert_array_equal(got.label == 1, picture("##...", "##...", ".....", "....."))


def test_corners_join_only_if_asked():
    mask = picture("##..#", "##...", "..#..", "..#.#")
    got = keep_patches(mask, 100.0, 200.0, corners=True)
    assert got.areas.tolist() == [600.0]
    assert got.ignored == 2


def test_rim_cells_count_with_their_part_and_least_is_kept():
    mask = picture("##", "..")
    area = np.array([[30.0, 70.0], [500.0, 500.0]])
    assert keep_patches(mask, area, 100.0).areas.tolist() == [100.0]
    assert keep_patches(mask, area, 100.1).areas.size == 0
    assert keep_patches(mask, area, 0.0).ignored == 0


def test_cells_outside_the_parcel_join_nothing():
    got = keep_patches(picture("###"), np.array([[10.0, 0.0, 10.0]]), 0.0)
    assert got.areas.tolist() == [10.0, 10.0]
    assert got.kept.tolist() == [[True, False, True]]


def test_no_cell_and_a_negative_area():
    got = keep_patches(picture("..", ".."), 1.0, 5.0)
    assert (got.areas.size, got.ignored, got.kept.any()) == (0, 0, False)
    with pytest.raises(SettingError, match="least area"):
        keep_patches(picture("##"), 1.0, -1.0)


@given(st.recursive(st.sampled_from(("aspect", "slope_percent", "2", "0.5", "7")),
                    lambda part: st.builds("({} {} {})".format, part, st.sampled_from("+-*"), part),
                    max_leaves=6).flatmap(lambda left: st.builds(
                        f"{left} {{}} {{}}".format, st.sampled_from(("<", "<=", ">", ">=")),
                        st.sampled_from(("aspect", "-slope_percent", "3")))),
       st.sampled_from(("and", "or")), st.booleans())  # fmt: skip
def test_known_quantities_are_judged_as_python_judges_them(part, joint, reverse):
    text = f"{'not ' if reverse else ''}({part}) {joint} aspect > 5"
    rng = np.random.default_rng(1)
    cells = {name: rng.integers(0, 12, 30).astype(float) for name in ("aspect", "slope_percent")}
    verdict = meet(parse_rule(text, KNOWN), cells)
    plain = [
        bool(eval(text, {"__builtins__": {}}, {name: values[k] for name, values in cells.items()}))
        for k in range(30)
    ]
    assert verdict.met.tolist() == plain
    assert not verdict.unknown.any()
