"""Rounding of values and uncertainties against the examples printed in JCGM 100:2008."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st
from layerlot.fitting.report.rounding import COVERAGE, decimals, expanded, format_number, format_u, format_value


@pytest.mark.parametrize(
    ("value", "u", "k", "text"),
    [
        # JCGM 100:2008, 7.2.6: y = 10.057 62 ohm with u = 27 mohm is rounded to 10.058 ohm
        (10.05762, 0.027, 1, "10.058 ± 0.027"),
        # 7.2.2: m = 100.021 47 g with u = 0.35 mg
        (100.02147, 0.00035, 1, "100.02147 ± 0.00035"),
        # 7.2.4: U = k u with k = 2.26 and u = 0.35 mg is 0.79 mg
        (100.02147, 0.00035, 2.26, "100.02147 ± 0.00079"),
    ],
)
def test_gum_examples_print_as_printed(value, u, k, text):
    """The worked examples of the GUM come out digit for digit."""
    assert format_value(value, u, k) == text


@pytest.mark.parametrize(("u", "text"), [(10.47, "11"), (28.05, "28")])
def test_uncertainty_is_rounded_up_where_it_matters(u, text):
    """10.47 becomes 11 and 28.05 becomes 28, as in JCGM 100:2008, 7.2.6."""
    assert format_u(u) == text


@pytest.mark.parametrize(
    ("u", "places"), [(0.00042, 5), (0.0996, 2), (0.0991, 3), (1.2, 1), (12.0, 0), (123.0, -1), (9.96, 0), (0.1, 2)]
)
def test_two_significant_digits(u, places):
    """The number of decimals shows two digits of u, and no third one where rounding carries."""
    assert decimals(u) == places


def test_large_uncertainty_rounds_the_value_to_tens():
    """A value is not shown to digits below its uncertainty even left of the decimal point."""
    assert format_value(12345.0, 1234.0) == "12300 ± 1300"
    assert format_number(12345.0, -2) == "12300"


def test_expanded_is_twice_u():
    """The answer carries U = 2 u."""
    assert COVERAGE == 2.0
    assert expanded(1.99213, 0.00042) == "1.99213 ± 0.00084"


def test_negative_zero_loses_its_sign():
    """A value that rounds to nothing has no minus sign."""
    assert format_value(-0.0001, 0.02) == "0.000 ± 0.020"


@pytest.mark.parametrize("u", [float("nan"), float("inf"), -1.0])
def test_no_number_without_uncertainty(u):
    """A value with no usable uncertainty is refused, not printed."""
    with pytest.raises(ValueError, match="uncertainty was"):
        format_value(1.0, u)


def test_value_must_be_finite():
    """A value that is no number is refused."""
    with pytest.raises(ValueError, match="value was nan"):
        format_value(float("nan"), 1.0)


def test_exact_value_says_so():
    """A value with u of 0 is marked exact."""
    assert format_value(1.5, 0.0) == "1.5 (exact)"


@given(
    st.floats(-1e6, 1e6, allow_nan=False),
    st.floats(1e-9, 1e5, allow_nan=False),
)
def test_print_keeps_value_and_uncertainty(value, u):
    """What is printed is within one unit of the last digit of u, and u never shrinks by more than 1 %."""
    value_text, u_text = format_value(value, u).split(" ± ")
    last = 10.0 ** -decimals(u)
    # half a unit by rounding, and the binary error of both numbers
    assert abs(float(value_text) - value) <= 0.5 * last + 1e-9 * abs(value)
    assert 0.99 * u * (1 - 1e-12) <= float(u_text) <= u + last * (1 + 1e-9)
    digits = u_text.replace(".", "").lstrip("0")
    assert len(digits.rstrip("0") or "0") <= 2
