"""How a value, its uncertainty and its unit are written; the only place that formats numbers.

Two significant digits of the uncertainty, the value to the same decimal place (GUM 7.2.6).
A quantity that could not be determined is written as such with its reason, never as a number
or as NaN. JSON keeps every digit; the rounding here is for people.
"""

from __future__ import annotations

import math
from decimal import ROUND_HALF_EVEN, Decimal, localcontext
from typing import Any

from rig.angles import deg_from_rad, wrap_angle_rad
from rig.quantities import Quantity

U_DIGITS = 2  # GUM 7.2.6: two significant digits usually suffice
PLAIN_DIGITS = 6  # for a value without uncertainty, where no digit is known to be the last
_DOUBLE_DIGITS = 12  # a value with a far smaller uncertainty shows what a double holds safely
_NEGLIGIBLE = 10.0**-_DOUBLE_DIGITS
NOT_DETERMINED = "cannot be determined"

_PAPER_UNITS = {
    "1": "",
    "deg": "°",
    "rad2/s": "rad²/s",
    "rad^2/s": "rad²/s",
    "m/s2": "m/s²",
    "rad2": "rad²",
    "Hz2": "Hz²",
}
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def quantity_text(quantity: Quantity) -> str:
    """Return a quantity in one line: "25.1000 ± 0.0012 Hz", or why there is none.

    Parameters
    ----------
    quantity : Quantity; the uncertainty printed is the standard one (k = 1)

    Returns
    -------
    str, without line breaks
    """
    if quantity.value is None:
        return undetermined_text(quantity)
    return value_text(quantity.value, quantity.u, quantity.unit)


def paper_quantity(quantity: Quantity) -> Quantity:
    """Return the quantity as paper shows it: angles in degrees, everything else unchanged."""
    if quantity.unit != "rad":
        return quantity
    low, high = _deg(quantity.low), _deg(quantity.high)
    return Quantity(
        value=_deg(quantity.value),
        u=_deg(quantity.u),
        unit="deg",
        reason=quantity.reason,
        low=low,
        high=high,
        level=quantity.level,
    )


def paper_text(quantity: Quantity) -> str:
    """Return a quantity in one line with angles in degrees."""
    return quantity_text(paper_quantity(quantity))


def value_text(value: float, u: float | None, unit: str) -> str:
    """Return "value ± u unit", u to two significant digits and the value to the same place.

    Parameters
    ----------
    value : float, in ``unit``
    u : float or None, in ``unit``, >= 0; None or 0 leaves the uncertainty out
    unit : str, "1" or "" for a pure number

    Notes
    -----
    Below 1e-4 and from 1e7 on both are written with one common power of ten.
    """
    if not u:
        return with_unit(plain_number(value), unit)
    if u < _NEGLIGIBLE * abs(value):
        return with_unit(plain_number(value, _DOUBLE_DIGITS), unit)
    power = _common_power(max(abs(value), u))
    if power:
        place = last_place(u)
        number, spread = (_at_place(part, place, power) for part in (value, u))
        return with_unit(f"({number} ± {spread})×{_power_text(power)}", unit)
    number, spread = rounded_pair(value, u)
    if unit in ("deg", "°"):
        return f"({number} ± {spread})°"
    return with_unit(f"{number} ± {spread}", unit)


def expanded_text(value: float, expanded_u: float, unit: str, coverage_factor: float) -> str:
    """Return "value ± U unit (k = 2)"; an exact value, such as a count, has neither U nor k."""
    if expanded_u == 0.0:
        return value_text(value, None, unit)
    return f"{value_text(value, expanded_u, unit)} (k = {coverage_factor:g})"


def rounded_pair(value: float, u: float) -> tuple[str, str]:
    """Return value and uncertainty as digits that end at the same decimal place.

    Parameters
    ----------
    value, u : float, same unit, finite, u > 0

    Raises
    ------
    ValueError
        If u is not above 0 or a number is not finite.
    """
    if not (u > 0 and math.isfinite(u) and math.isfinite(value)):
        raise ValueError(f"rounding needs a finite value and u > 0, got {value!r} and {u!r}")
    place = last_place(u)
    return _at_place(value, place), _at_place(u, place)


def last_place(u: float) -> int:
    """Return the power of ten of the last digit kept for an uncertainty.

    0.00123 keeps two digits, so -4; 0.0996 rounds to 0.10, so -2.
    """
    spread = Decimal(repr(u))
    place = spread.adjusted() - (U_DIGITS - 1)
    rounded = spread.quantize(Decimal(1).scaleb(place), rounding=ROUND_HALF_EVEN)
    return rounded.adjusted() - (U_DIGITS - 1)


def plain_number(value: float | None, digits: int = PLAIN_DIGITS) -> str:
    """Return a number without uncertainty in at most ``digits`` significant digits.

    None becomes a dash, so that a table cell is never empty and never "nan".
    """
    if value is None or not math.isfinite(value):
        return "–"
    if value == 0:
        return "0"
    if abs(value) >= 10**digits and abs(value) < 1e9 and float(value).is_integer():
        return f"{value:.0f}"
    text = f"{value:.{digits}g}"
    if "e" not in text:
        return text
    number, power = text.split("e")
    return f"{number}×{_power_text(int(power))}"


def kept_number(value: float | None, digits: int) -> str:
    """Return a number in exactly ``digits`` significant digits, zeros at its end included."""
    if value is None or not math.isfinite(value) or value == 0:
        return plain_number(value)
    number, _, power = f"{value:#.{digits}g}".rstrip(".").partition("e")
    return f"{number}×{_power_text(int(power))}" if power else number


def with_unit(number: str, unit: str) -> str:
    """Return a number followed by its unit as paper writes it."""
    written = unit_text(unit)
    if written in ("°", ""):
        return number + written
    return f"{number} {written}"


def unit_text(unit: str) -> str:
    """Return a unit as paper writes it: rad²/s for rad2/s, nothing for a pure number."""
    return _PAPER_UNITS.get(unit, unit)


def undetermined_text(quantity: Quantity) -> str:
    """Return "cannot be determined: reason", with the bounds that may still be known."""
    bounds = bounds_text(quantity)
    told = f"{NOT_DETERMINED}: {one_line(quantity.reason or 'no reason recorded')}"
    return f"{told}; {bounds}" if bounds else told


def bounds_text(quantity: Quantity) -> str:
    """Return what an interval says: "0.5 to 0.7 Hz (95 %)", "above 0.5 Hz (95 %)", or ""."""
    if quantity.low is None and quantity.high is None:
        return ""
    cover = "" if quantity.level is None else f" ({percent_text(quantity.level)})"
    if quantity.high is None:
        return f"above {with_unit(plain_number(quantity.low), quantity.unit)}{cover}"
    if quantity.low is None:
        return f"below {with_unit(plain_number(quantity.high), quantity.unit)}{cover}"
    low, high = _interval_digits(quantity.low, quantity.high)
    return f"{low} to {with_unit(high, quantity.unit)}{cover}"


def interval_text(low: float | None, high: float | None, unit: str) -> str:
    """Return a limit or range as words: "0.5 to 0.7 Hz", "at least 0.5 Hz", "at most 0.7 Hz"."""
    if low is None and high is None:
        return "no bound"
    if high is None:
        return f"at least {with_unit(plain_number(low), unit)}"
    if low is None:
        return f"at most {with_unit(plain_number(high), unit)}"
    return f"{plain_number(low)} to {with_unit(plain_number(high), unit)}"


def percent_text(share: float) -> str:
    """Return a share as a percentage of at most four digits: "95 %", "99.73 %"."""
    return f"{share * 100:.4g} %"


def probability_text(probability: float | None) -> str:
    """Return a probability with as many digits as mean something; never plain 0 or 1.

    The Gaussian tails are not known to better than about 1 in 10 000, so beyond that only
    "> 0.9999" or "< 0.0001" is said.
    """
    if probability is None:
        return "–"
    if probability > 0.9999:
        return "> 0.9999"
    if probability < 0.0001:
        return "< 0.0001"
    digits = 4 if probability > 0.99 or probability < 0.01 else 3
    return f"{probability:.{digits}f}"


def angle_text(angle_rad: float, u_rad: float | None) -> str:
    """Return an angle in degrees, brought to -180 to 180 deg."""
    spread = None if u_rad is None else deg_from_rad(u_rad)
    return value_text(deg_from_rad(wrap_angle_rad(angle_rad)), spread, "deg")


def json_quantity(quantity: Quantity) -> dict[str, Any]:
    """Return a quantity as JSON holds it: every digit kept, null with a reason, no NaN.

    ``low``, ``high`` and ``level`` are there only where an interval is known.
    """
    told: dict[str, Any] = {
        "value": quantity.value,
        "u": quantity.u,
        "unit": quantity.unit,
        "reason": quantity.reason,
    }
    if quantity.low is not None or quantity.high is not None:
        told |= {"low": quantity.low, "high": quantity.high, "level": quantity.level}
    return told


def one_line(text: str) -> str:
    """Return a text with every run of white space, line breaks included, as one space."""
    return " ".join(text.split())


def _deg(angle_rad: float | None) -> float | None:
    return None if angle_rad is None else deg_from_rad(angle_rad)


def _at_place(value: float, place: int, power: int = 0) -> str:
    """Return value / 10**power rounded at the decimal place of ``value`` given."""
    exact = Decimal(repr(value))
    with localcontext() as context:
        context.prec = max(exact.adjusted() - place, 0) + 3  # all digits kept are exact
        rounded = exact.quantize(Decimal(1).scaleb(place), rounding=ROUND_HALF_EVEN)
        rounded = rounded.scaleb(-power)
    if rounded == 0:
        rounded = abs(rounded)  # "-0.00" says nothing that "0.00" does not
    return f"{rounded:f}"


def _common_power(size: float) -> int:
    """Return the power of ten to take out: 0 from 1e-4 up to 1e7, where plain digits read well."""
    if size == 0 or 1e-4 <= size < 1e7:
        return 0
    return math.floor(math.log10(size))


def _power_text(power: int) -> str:
    return "10" + str(power).translate(_SUPERSCRIPT)


def _interval_digits(low: float, high: float) -> tuple[str, str]:
    """Write both ends to two digits of the interval's half-width."""
    half = (high - low) / 2
    if not half > 0:
        return plain_number(low), plain_number(high)
    place = last_place(half)
    power = _common_power(max(abs(low), abs(high)))
    tail = f"×{_power_text(power)}" if power else ""
    first, last = (_at_place(end, place, power) + tail if end else "0" for end in (low, high))
    return first, last
