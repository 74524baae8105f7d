"""Writing numbers: what a reader takes from the page must be what was measured."""

from __future__ import annotations

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reports.numbers import (
    angle_text,
    bounds_text,
    expanded_text,
    interval_text,
    json_quantity,
    kept_number,
    paper_text,
    percent_text,
    plain_number,
    probability_text,
    quantity_text,
    rounded_pair,
    unit_text,
    value_text,
)
from rig.quantities import Quantity, undetermined


@pytest.mark.parametrize(
    ("value", "u", "unit", "text"),
    [
        (25.1, 0.00123, "Hz", "25.1000 ± 0.0012 Hz"),
        (25.1, 0.000996, "Hz", "25.1000 ± 0.0010 Hz"),
        (0.3, 0.0996, "Hz", "0.30 ± 0.10 Hz"),
        (12345.0, 1234.0, "Hz", "12300 ± 1200 Hz"),
        (12.0, 5.0, "Hz", "12.0 ± 5.0 Hz"),
        (0.0, 0.004, "Hz", "0.0000 ± 0.0040 Hz"),
        (-0.00001, 0.4, "Hz", "0.00 ± 0.40 Hz"),
        (1.5, 0.2, "1", "1.50 ± 0.20"),
        (12.25, 1.2, "deg", "(12.2 ± 1.2)°"),
        (0.5, 0.1, "rad2/s", "0.50 ± 0.10 rad²/s"),
        (3.21e-7, 2e-8, "Hz/s", "(3.21 ± 0.20)×10⁻⁷ Hz/s"),
        (1.234e8, 2e6, "Hz", "(1.234 ± 0.020)×10⁸ Hz"),
        (3.25, None, "s", "3.25 s"),
        (3.25, 0.0, "s", "3.25 s"),
    ],
)
def test_the_value_ends_where_its_uncertainty_ends(value, u, unit, text):
    """Digits beyond the uncertainty claim a knowledge that is not there."""
    assert value_text(value, u, unit) == text


@given(
    st.floats(-1e6, 1e6, allow_nan=False),
    st.floats(1e-6, 1e5, allow_nan=False),
)
def test_rounding_moves_the_value_by_at_most_a_twentieth_of_u(value, u):
    """Two digits of u leave half a unit of the second digit: at most u/20."""
    number, spread = rounded_pair(value, u)
    assert abs(float(number) - value) <= 0.0501 * u
    assert abs(float(spread) - u) <= 0.0501 * u
    digits = spread.replace(".", "").lstrip("0")
    assert len(digits.rstrip("0")) <= 2


@pytest.mark.parametrize(("value", "u"), [(1.0, 0.0), (math.nan, 1.0), (1.0, math.inf)])
def test_rounding_refuses_what_has_no_last_place(value, u):
    """Without an uncertainty no digit is the last one."""
    with pytest.raises(ValueError, match="rounding needs"):
        rounded_pair(value, u)


def test_what_cannot_be_determined_says_so_with_its_reason_and_bound():
    """A missing number must never look like a number."""
    quantity = undetermined("Hz", "steady lock without slips", low=0.25)
    assert quantity_text(quantity) == (
        "cannot be determined: steady lock without slips; above 0.25 Hz (95 %)"
    )


def test_a_reason_with_line_breaks_is_written_in_one_line():
    """A table cell and a message stay one line."""
    assert "\n" not in quantity_text(undetermined("Hz", "no\nlock"))


@pytest.mark.parametrize(
    ("low", "high", "text"),
    [
        (0.291, 0.308, "0.2910 to 0.3080 Hz (95 %)"),
        (None, 0.5, "below 0.5 Hz (95 %)"),
        (0.5, None, "above 0.5 Hz (95 %)"),
        (None, None, ""),
        (0.5, 0.5, "0.5 to 0.5 Hz (95 %)"),
    ],
)
def test_an_interval_is_written_with_its_coverage(low, high, text):
    """An interval without coverage cannot be judged."""
    level = 0.95 if low is not None or high is not None else None
    assert (
        bounds_text(Quantity(value=0.3, u=0.1, unit="Hz", low=low, high=high, level=level)) == text
    )


@pytest.mark.parametrize(
    ("low", "high", "text"),
    [
        (0.5, 0.7, "0.5 to 0.7 Hz"),
        (0.5, None, "at least 0.5 Hz"),
        (None, 0.7, "at most 0.7 Hz"),
        (None, None, "no bound"),
    ],
)
def test_a_limit_is_written_in_words(low, high, text):
    """ "At least" cannot be misread as a range."""
    assert interval_text(low, high, "Hz") == text


def test_paper_shows_degrees_where_json_keeps_radians():
    """Engineers read phase in degrees; programs read one unit."""
    angle = Quantity(value=math.radians(12.25), u=math.radians(1.2), unit="rad")
    assert paper_text(angle) == "(12.2 ± 1.2)°"
    assert json_quantity(angle)["unit"] == "rad"


def test_an_angle_is_written_between_minus_180_and_180_degrees():
    """Unwrapped angles of many turns are not for reading."""
    assert angle_text(math.radians(350), math.radians(1.0)) == "(-10.0 ± 1.0)°"


def test_json_keeps_every_digit_and_an_interval_only_where_there_is_one():
    """Rounded JSON would make later judgements differ from the first."""
    assert json_quantity(Quantity(value=1 / 3, u=0.1, unit="Hz")) == {
        "value": 1 / 3,
        "u": 0.1,
        "unit": "Hz",
        "reason": None,
    }
    told = json_quantity(undetermined("Hz", "no beat", high=0.1))
    assert (told["value"], told["low"], told["high"], told["level"]) == (None, None, 0.1, 0.95)


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (None, "–"),
        (math.nan, "–"),
        (0.0, "0"),
        (-0.0, "0"),
        (25.123456789, "25.1235"),
        (1e-9, "1×10⁻⁹"),
        (2400440, "2400440"),
    ],
)
def test_a_plain_number_is_short_and_never_nan(value, text):
    """No cell of a table may read "nan"."""
    assert plain_number(value) == text


@pytest.mark.parametrize(
    ("probability", "text"),
    [
        (None, "–"),
        (1.0, "> 0.9999"),
        (0.0, "< 0.0001"),
        (0.9773, "0.977"),
        (0.99864, "0.9986"),
        (0.5, "0.500"),
    ],
)
def test_a_probability_is_never_written_as_certain(probability, text):
    """A Gaussian tail is not known to be zero."""
    assert probability_text(probability) == text


def test_expanded_uncertainty_carries_its_factor():
    """U without k says nothing."""
    assert expanded_text(0.6, 0.012, "Hz", 2.0) == "0.600 ± 0.012 Hz (k = 2)"
    assert expanded_text(1.0, 0.0, "1", 2.0) == "1"


def test_shares_and_units_as_paper_writes_them():
    """A pure number has no unit; powers are raised."""
    assert percent_text(0.95) == "95 %"
    assert percent_text(0.9973) == "99.73 %"
    assert (unit_text("1"), unit_text("m/s2"), unit_text("V")) == ("", "m/s²", "V")


@given(st.floats(allow_nan=False, allow_infinity=False), st.floats(0, 1e9))
def test_no_text_ever_holds_nan_or_inf(value, u):
    """Whatever the numbers are, the page stays readable."""
    assert not re.search("nan|inf", value_text(value, u, "Hz"))


def test_a_kept_number_shows_all_its_digits():
    """0.02 beside 0.014 in one budget would look like one digit less."""
    shown = [kept_number(value, 2) for value in (0.02, 0.0141, 1.0, 20.0, 3e-7, 0.0, None)]
    assert shown == ["0.020", "0.014", "1.0", "20", "3.0×10⁻⁷", "0", "–"]


def test_a_tiny_interval_is_not_written_with_more_digits_than_it_has():
    """Digits beyond the width of the interval promise what nobody measured."""
    told = bounds_text(
        Quantity(
            value=None, u=None, reason="too short", unit="Hz", low=0.0, high=6.49584e-16, level=0.95
        )
    )
    assert told == "0 to 6.5×10⁻¹⁶ Hz (95 %)"
