"""Rounding and alignment against cases worked out by hand."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from maxent.text import combination, listing, number, plural, suggestion, table, with_error

# The first three are the examples of the rounding rule in Particle Data Group, Review of Particle Physics,
# Introduction, section 5.3 (from memory); the rest follow from the rule by hand.
ROUNDED = [
    (0.827, 0.119, "0.83(12)"),
    (0.827, 0.367, "0.8(4)"),
    (14.674, 0.964, "14.7(10)"),
    (1.2345678, 0.01234, "1.235(12)"),
    (1.2345678, 0.0949, "1.23(9)"),
    (1.2345678, 0.095, "1.23(10)"),
    (1.2345678, 0.0354, "1.235(35)"),
    (1.2345678, 0.0355, "1.23(4)"),
    (-0.0983, 0.01219, "-0.098(12)"),
    (0.0004, 0.01219, "0.000(12)"),
    (-0.0004, 0.01219, "0.000(12)"),
    (12.0, 1.0, "12.0(10)"),
    (123.0, 12.0, "123(12)"),
    (15678.0, 1234.0, "1.57(12)e+04"),
    (1.5e-7, 2.5e-9, "1.500(25)e-07"),
    (1.0, 0.0, "1"),
    (1.0, None, "1"),
    (1.0, math.nan, "1"),
    (1.0, math.inf, "1"),
    (0.1234567890123, 1e-15, "0.123456789012"),
    (None, 1.0, "–"),
    (math.nan, 1.0, "–"),
]


@pytest.mark.parametrize(("value", "error", "text"), ROUNDED)
def test_value_with_error(value, error, text):
    assert with_error(value, error) == text


@given(
    st.floats(-1e6, 1e6).filter(lambda x: x == 0 or abs(x) > 1e-12),
    st.floats(1e-8, 1e5),
)
def test_reading_back_loses_less_than_a_fraction_of_the_error(value, error):
    text = with_error(value, error, most=30)
    head, _, rest = text.partition("(")
    units, _, power = rest.partition(")")
    scale = float(f"1{power}") if power else 1.0
    place = 10.0 ** -(len(head.partition(".")[2])) * scale
    assert abs(float(head) * scale - value) <= 0.5001 * place + 1e-12 * abs(value)
    assert abs(int(units) * place - error) <= 0.51 * place
    assert 3 <= int(units) <= 35


@pytest.mark.parametrize(
    ("x", "text"),
    [(0.0, "0"), (-0.0, "0"), (1e22, "1e+22"), (math.inf, "inf"), (-math.inf, "-inf"), (0.1 + 0.2, "0.3")],
)
def test_number(x, text):
    assert number(x) == text


def test_combination_signs_and_zeros():
    assert combination({"a": -1.0, "b": 1.0, "c": 0.0, "d": -0.25}) == "-a + b - 0.25 d"
    assert combination({"a": 0.0}) == "0"
    assert combination({}) == "0"
    assert combination({"a": 1.0, "b": 3e-17}) == "a"


def test_table_aligns_and_leaves_no_blanks_at_line_ends():
    text = table([("a", "1", ""), ("bbb", "22", "")], ("name", "n", "note"), right=[1])
    assert text.splitlines() == ["name   n  note", "a      1", "bbb   22"]
    assert table([]) == ""


def test_words():
    assert listing(["a", "b"]) == "a or b"
    assert listing([]) == ""
    assert plural(1234567, "state") == "1 234 567 states"
    assert suggestion("gemoetry", ["geometry", "size"]) == "; did you mean 'geometry'?"
