"""A value with its uncertainty, or the reason why there is none."""

from __future__ import annotations

import json
import math
from dataclasses import FrozenInstanceError

import numpy as np
import pytest

from rig.quantities import Quantity, undetermined


def test_a_value_carries_its_uncertainty_and_unit():
    """The plain case."""
    quantity = Quantity(value=1.5, u=0.2, unit="Hz")
    assert (quantity.value, quantity.u, quantity.unit) == (1.5, 0.2, "Hz")
    assert (quantity.reason, quantity.low, quantity.high, quantity.level) == (None,) * 4


def test_a_value_may_lack_an_uncertainty():
    """A stated number of a person has none; nothing may be invented for it."""
    assert Quantity(value=3.0, u=None, unit="V").u is None


def test_a_value_may_carry_a_reason_as_well():
    """A value with a caveat is a value."""
    assert Quantity(value=3.0, u=0.1, unit="V", reason="assumes free spread").value == 3.0


@pytest.mark.parametrize("field", ["value", "u", "low", "high", "level"])
@pytest.mark.parametrize("number", [math.nan, math.inf, -math.inf])
def test_what_is_not_finite_is_refused(field, number):
    """NaN is no result: "cannot be determined" has its own form."""
    words = {"value": 1.0, "u": 0.1, "unit": "Hz"} | {field: number}
    with pytest.raises(ValueError, match=f"quantity field '{field}' must be finite, got"):
        Quantity(**words)


def test_a_negative_uncertainty_is_refused():
    """It would shrink every interval built on it."""
    with pytest.raises(ValueError, match=r"standard uncertainty must be >= 0, got -0\.1"):
        Quantity(value=1.0, u=-0.1, unit="Hz")
    assert Quantity(value=1.0, u=0.0, unit="Hz").u == 0.0


@pytest.mark.parametrize("reason", [None, ""])
def test_no_value_needs_a_reason(reason):
    """A reader of a report must learn what to do about it."""
    with pytest.raises(ValueError, match="a quantity without a value needs a reason"):
        Quantity(value=None, u=None, unit="Hz", reason=reason)


def test_numpy_numbers_become_plain_ones():
    """A numpy scalar writes itself differently in text, and JSON refuses it."""
    quantity = Quantity(
        value=np.float32(0.5), u=np.float64(0.1), unit="Hz", low=np.float64(0.3), high=np.int64(1)
    )
    for name in ("value", "u", "low", "high"):
        assert type(getattr(quantity, name)) is float
    assert json.dumps(quantity.value) == "0.5"


def test_a_quantity_cannot_be_changed():
    """What was reported stays what was measured."""
    quantity = Quantity(value=1.0, u=0.1, unit="Hz")
    with pytest.raises(FrozenInstanceError):
        quantity.value = 2.0


def test_equal_quantities_are_equal():
    """Runs are compared field by field."""
    assert Quantity(value=1, u=0, unit="Hz") == Quantity(value=1.0, u=0.0, unit="Hz")
    assert Quantity(value=1.0, u=0.1, unit="Hz") != Quantity(value=1.0, u=0.1, unit="mHz")


@pytest.mark.parametrize(
    ("bounds", "level"),
    [({}, None), ({"low": 0.2}, 0.95), ({"high": 3.0}, 0.95), ({"low": 0.2, "high": 3.0}, 0.95)],
)
def test_undetermined_says_why_and_may_still_bound(bounds, level):
    """One number bounds the coupling of a quiet lock even where nothing fixes it."""
    quantity = undetermined("Hz", "no beat in 40 s", **bounds)
    assert (quantity.value, quantity.u, quantity.unit) == (None, None, "Hz")
    assert quantity.reason == "no beat in 40 s"
    assert (quantity.low, quantity.high) == (bounds.get("low"), bounds.get("high"))
    assert quantity.level == level
