"""Digits follow the uncertainty; nothing is rounded across what it says."""

import math
from decimal import Decimal

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from pipeline.report import numbers

HALF = st.floats(1e-9, 1e9)
VALUE = st.floats(-1e9, 1e9)


# Worked by hand from the rule in the module's docstring.
@pytest.mark.parametrize(
    ("value", "half", "text"),
    [
        (19.6123, 0.735, "19.6"),
        (19.6123, 1.4, "19.6"),
        (19.6123, 0.14, "19.61"),
        (19.6123, 0.0996, "19.61"),
        (12345.0, 350.0, "12300"),
        (12346.0, 120.0, "12350"),
        (0.00012, 0.1, "0.00"),
        (-0.004, 0.3, "0.0"),
        (2.0, 0.05, "2.00"),
        (1.6e-7, 4e-8, "1.6e-7"),
    ],
)
def test_rounding_by_hand(value, half, text):
    assert numbers.rounded(value, half) == text


@given(VALUE, HALF)
def test_what_is_dropped_is_small_against_the_uncertainty(value, half):
    shown = Decimal(numbers.rounded(value, half))
    # one digit of a half-width of 2.95 or more: at most 0.5/2.95; two digits of 1 to 3: at most 0.05
    assert abs(shown - Decimal(value)) <= Decimal(half) * Decimal("0.1695") + Decimal(abs(value)) * Decimal(
        "1e-12"
    )


@given(st.floats(0.1, 1e5), st.floats(1e-3, 1e3))
def test_no_digit_beyond_the_uncertainty(value, half):
    text = numbers.rounded(value, half)
    assume("e" not in text and "." in text)
    assert 10.0 ** -len(text.split(".")[1]) >= half / 100.0


@given(VALUE, st.integers(1, 8))
def test_plain_keeps_its_significant_digits(value, digits):
    shown = float(numbers.plain(value, digits=digits))
    assert shown == pytest.approx(value, rel=0.5000001 * 10.0 ** (1 - digits), abs=0.0)


def test_infinity_and_absence_are_words():
    assert numbers.plain(math.inf, unit="s") == "no limit"
    assert numbers.plain(None, unit="s") == "not given"
    assert numbers.duration(math.inf, never="never") == "never"
    assert numbers.bounds(0.5, math.inf, 0.3, "s") == "0.5 to no limit s"
    assert numbers.interval(4.21, 3.1, math.inf, "s") == "4.2 (3.1 to no limit) s"
    assert "not determined" in numbers.interval(4.21, -math.inf, math.inf, "s")


def test_a_share_above_nothing_is_never_nothing():
    assert numbers.share(0.0) == "0 %"
    assert numbers.share(0.0004) == "under 0.1 %"
    assert numbers.share(0.034) == "3.4 %"


@pytest.mark.parametrize(
    ("seconds", "text"),
    [(0.25, "0.25 s"), (119.0, "119 s"), (150.0, "2.5 min"), (7199.0, "120 min"), (9000.0, "2.5 h")],
)
def test_times_read_in_their_own_unit(seconds, text):
    assert numbers.duration(seconds) == text
