"""Words of the command line."""

from __future__ import annotations

import pytest

from reports.options import UsageError, parse_band, parse_bands, parse_order, positive


@pytest.mark.parametrize(
    ("text", "order"), [("1:1", (1, 1)), ("2:1", (2, 1)), ("1:3", (1, 3)), ("find", None)]
)
def test_orders_are_read(text: str, order: tuple[int, int] | None) -> None:
    """n weighs the driven oscillator and comes first."""
    assert parse_order(text) == order


@pytest.mark.parametrize("text", ["", "1", "0:1", "1:-2", "a:b", "1:2:3", "1.5:1", "²:1"])
def test_a_wrong_order_is_refused_with_its_text(text: str) -> None:
    """The line must show what was typed."""
    with pytest.raises(UsageError, match="--order"):
        parse_order(text)


def test_one_band_serves_both_roles_and_two_are_reference_then_driven() -> None:
    """The order of roles is the same everywhere on the command line."""
    assert parse_bands([]) == (None, None)
    assert parse_bands(["1:2"]) == ((1.0, 2.0), (1.0, 2.0))
    assert parse_bands(["1:2", "3:4"]) == ((1.0, 2.0), (3.0, 4.0))


@pytest.mark.parametrize("text", ["", "5", "5:", "5:4", "-1:4", "nan:4", "1:inf", "a:b", "1:1"])
def test_a_wrong_band_is_refused(text: str) -> None:
    """A band that passes nothing must not reach the filter."""
    with pytest.raises(UsageError, match="--band"):
        parse_band(text)


def test_a_third_band_is_refused() -> None:
    """There are two roles."""
    with pytest.raises(UsageError, match="at most two"):
        parse_bands(["1:2", "1:2", "1:2"])


@pytest.mark.parametrize("value", [0.0, -5.0, float("nan"), float("inf")])
def test_a_number_that_must_be_positive_is_refused_with_its_value(value: float) -> None:
    """'rate must be above 0, got -5' says what to mend."""
    with pytest.raises(UsageError, match=f"--rate: must be above 0, got {value:g}"):
        positive("--rate", value)


def test_a_number_that_was_not_given_stays_away() -> None:
    """None means: the file decides."""
    assert positive("--rate", None) is None
