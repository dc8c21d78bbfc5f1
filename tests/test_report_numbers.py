"""Rounding by the common practice of two significant digits of the error; no outside source.

Every expected text below was written by hand.
"""

import math

import pytest

from fathomline.report import plain_number, value_with_error


@pytest.mark.parametrize(
    ("value", "error", "expected"),
    [
        (5.3207, 1.1473, "5.3 ± 1.1"),
        (123.456, 0.0234, "123.456 ± 0.023"),
        (0.827, 0.119, "0.83 ± 0.12"),
        (0.827, 0.367, "0.83 ± 0.37"),
        (-41.0, 0.0284, "−41.000 ± 0.028"),
        (12.7518, 0.00345, "12.7518 ± 0.0034"),  # a tie goes to the even digit
        (12.7518, 0.003451, "12.7518 ± 0.0035"),
        (5.0, 0.0996, "5.00 ± 0.10"),  # the error grows a digit when rounded
        (5.0, 0.9951, "5.0 ± 1.0"),
        (5.0, 9.96, "5 ± 10"),
        (5.0, 10.4, "5 ± 10"),
        (12345.0, 1234.0, "12300 ± 1200"),
        (8042.0, 155.0, "8040 ± 160"),
        (0.0, 0.25, "0.00 ± 0.25"),
        (-0.001, 0.25, "0.00 ± 0.25"),  # no minus before zero
        (1.5, 250.0, "0 ± 250"),
        (2.5e8, 3.1e6, "(2.500 ± 0.031) × 10⁸"),
        (-1.5e-9, 2.5e-10, "(−1.50 ± 0.25) × 10⁻⁹"),
        (0.0, 3.1e-9, "(0.0 ± 3.1) × 10⁻⁹"),
    ],
)
def test_two_digits_of_the_error(value, error, expected):
    assert value_with_error(value, error) == expected


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        (5.3207, "5.321"),
        (-5.3207, "−5.321"),
        (0.0, "0"),
        (-0.0, "0"),
        (8000.0, "8000"),
        (12345.0, "12340"),
        (0.00012345, "0.0001234"),
        (0.000012345, "1.234 × 10⁻⁵"),
        (9.9996, "10.00"),
        (999960.0, "1.000 × 10⁶"),
        (3.13e8, "3.130 × 10⁸"),
        (math.inf, "∞"),
        (None, "—"),
    ],
)
def test_a_number_alone_has_four_digits(value, expected):
    assert plain_number(value) == expected


@pytest.mark.parametrize("error", [None, 0.0])
def test_without_an_error_the_value_has_four_digits(error):
    assert value_with_error(5.3207, error) == "5.321"


@pytest.mark.parametrize(
    ("value", "error"), [(math.nan, 1.0), (math.inf, 1.0), (1.0, -1.0), (1.0, math.nan)]
)
def test_numbers_without_a_meaning_are_refused(value, error):
    with pytest.raises(ValueError, match="must be"):
        value_with_error(value, error)
