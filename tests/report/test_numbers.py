from __future__ import annotations

import math

import pytest

from bayes_sys.report.numbers import counted, cut, fixed, listed, number, percent


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.60712, "0.607"),
        (-0.0708, "−0.0708"),
        (1234.5, "1,234"),
        (12, "12.0"),
        (0, "0"),
        (3.2e-7, "3.20e−7".replace("e−7", "e−07")),
        (5e12, "5.00e+12"),
        (math.nan, "–"),
        (None, "–"),
        ("text", "–"),
        (math.inf, "unlimited"),
    ],
)
def test_numbers_are_written_with_the_figures_that_count(value, text):
    assert number(value) == text


def test_fixed_decimals_never_write_a_negative_nought():
    assert fixed(-0.001) == "0.00"
    assert fixed(-0.456, 1) == "−0.5"
    assert fixed(2577.4, 0) == "2,577"
    assert fixed(None) == "–"


def test_a_share_is_never_rounded_to_certainty():
    assert [percent(x) for x in (0.0, 0.001, 0.256, 0.9999, 1.0)] == ["0%", "<1%", "26%", ">99%", "100%"]


def test_lists_read_as_sentences():
    assert listed(["a"]) == "a"
    assert listed(["a", "b"]) == "a and b"
    assert listed(["a", "b", "c"]) == "a, b and c"
    assert listed(list("abcdefgh"), 3) == "a, b, c and 5 more"
    assert counted(1, "period") == "1 period" and counted(2, "period") == "2 periods"


@pytest.mark.parametrize("at_most", [5, 6, 14, 15])
def test_long_names_are_cut_in_the_middle_to_the_length_asked(at_most):
    found = cut("the beginning of a long name, and its end", at_most)
    assert len(found) == at_most and found.startswith("th") and found.endswith("nd")
    assert cut("short", 5) == "short"
