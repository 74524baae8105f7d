"""Reading the [[limit]] tables of a sweep file into limits, or refusing them in one line."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from difflib import get_close_matches
from typing import Any

from reports.decision import RULES, arc_width_rad
from reports.limited import LIMITED, SELECTORS, LimitedQuantity
from reports.records import Limit
from reports.selection import same_level
from reports.units import known_units, unit_factor
from rig.errors import LimitError
from rig.sweepfile import SweepPlan

KEYS = (
    "name",
    "quantity",
    "unit",
    "lower",
    "upper",
    "wanted",
    "level",
    "direction",
    "drive_hz",
    "file",
    "averaging_s",
    "rule",
    "guard_width",
    "risk",
)
DIRECTIONS = ("up", "down", "none")
_FULL_TURN = 2 * math.pi


def read_limits(tables: Sequence[Mapping[str, Any]], file: str) -> tuple[Limit, ...]:
    """Return the limits of a sweep file, typed and in the units that values are kept in.

    Parameters
    ----------
    tables : sequence of mappings, the raw [[limit]] tables in order
    file : str, name of the sweep file for messages

    Returns
    -------
    tuple of Limit; the ends of an angle's arc in rad, run through from lower to upper

    Raises
    ------
    LimitError
        If a key, quantity, unit, word or rule is not known, a number is missing or not
        finite, the ends are in the wrong order, or two limits share a name.
    """
    limits = tuple(
        _Table(file=file, number=number, raw=table).limit()
        for number, table in enumerate(tables, start=1)
    )
    names: dict[str, int] = {}
    for number, limit in enumerate(limits, start=1):
        if limit.name in names:
            raise LimitError(
                f"{file}: limits {names[limit.name]} and {number} are both named "
                f"'{limit.name}'. Give each its own name."
            )
        names[limit.name] = number
    return limits


def check_limits(limits: Sequence[Limit], plan: SweepPlan) -> None:
    """Refuse limits that no row of the sweep can answer to, before anything is measured.

    Parameters
    ----------
    limits : sequence of Limit
    plan : SweepPlan

    Raises
    ------
    LimitError
        If a limit asks for a level, direction or file that the table of points has not.
    """
    for limit in limits:
        levels = sorted({point.level for point in plan.points})
        if limit.level is not None and not any(same_level(limit.level, one) for one in levels):
            _refuse_absent(limit, plan, "level", limit.level, levels)
        ways = sorted({point.direction for point in plan.points})
        if limit.direction is not None and limit.direction not in ways:
            _refuse_absent(limit, plan, "direction", limit.direction, ways)
        entries = plan.free_running if _of_captures(limit) else plan.points
        files = [entry.file for entry in entries]
        if limit.file is not None and limit.file not in files:
            _refuse_absent(limit, plan, "file", limit.file, files)


def _of_captures(limit: Limit) -> bool:
    return LIMITED[limit.quantity].scope == "capture"


def _refuse_absent(
    limit: Limit, plan: SweepPlan, key: str, value: object, present: Iterable[object]
) -> None:
    listed = [f"{one:g}" if isinstance(one, float) else str(one) for one in present]
    shown = ", ".join(listed[:8]) + (" ..." if len(listed) > 8 else "")
    raise LimitError(
        f"{plan.path}: limit '{limit.name}': no point has {key} {value!r}. "
        f"Use one of: {shown or 'none'}."
    )


class _Table:
    """One raw table on its way to a limit; it knows how to name itself in a refusal."""

    def __init__(self, *, file: str, number: int, raw: Mapping[str, Any]) -> None:
        self.file = file
        self.raw = raw
        name = raw.get("name")
        self.place = (
            f"{file}: limit '{name}'" if isinstance(name, str) else f"{file}: limit {number}"
        )

    def limit(self) -> Limit:
        """Return the limit, every key checked."""
        self._check_keys()
        name = self._text("name", needed=True)
        quantity = self._choice("quantity", LIMITED, needed=True)
        spec = LIMITED[quantity]
        self._check_selectors(quantity, spec)
        unit, factor = self._unit(spec)
        rule = self._rule(spec)
        limit = Limit(
            name=name,
            quantity=quantity,
            unit=unit,
            lower=self._scaled("lower", factor),
            upper=self._scaled("upper", factor),
            level=self._number("level"),
            direction=self._choice("direction", DIRECTIONS) or None,
            rule=rule,  # type: ignore[arg-type]
            guard_width=self._scaled("guard_width", factor),
            risk=self._number("risk"),
            wanted=self._wanted(spec),
            circular=spec.circular,
            drive_from_hz=self._drive()[0],
            drive_to_hz=self._drive()[1],
            file=self._text("file") or None,
            averaging_s=self._averaging(quantity),
        )
        self._check_ends(limit, spec)
        self._check_rule(limit)
        return limit

    def _refuse(self, text: str) -> LimitError:
        return LimitError(f"{self.place}: {text}")

    def _check_keys(self) -> None:
        for key in self.raw:
            if key not in KEYS:
                near = get_close_matches(str(key), KEYS, n=1)
                hint = f" Did you mean '{near[0]}'?" if near else ""
                raise self._refuse(f"unknown key '{key}'.{hint} Known keys: {', '.join(KEYS)}.")

    def _text(self, key: str, *, needed: bool = False) -> str:
        value = self.raw.get(key)
        if value is None and not needed:
            return ""
        if not isinstance(value, str) or not value.strip():
            raise self._refuse(f"key '{key}' must be a text, got {value!r}")
        return value.strip()

    def _choice(self, key: str, known: Iterable[str], *, needed: bool = False) -> str:
        value = self._text(key, needed=needed)
        if value and value not in known:
            near = get_close_matches(value, list(known), n=1)
            hint = f" Did you mean '{near[0]}'?" if near else ""
            raise self._refuse(f"{key} '{value}' is not known.{hint} Known: {', '.join(known)}.")
        return value

    def _number(self, key: str) -> float | None:
        value = self.raw.get(key)
        if value is None:
            return None
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise self._refuse(f"key '{key}' must be a number, got {value!r}")
        if not math.isfinite(value):
            raise self._refuse(f"key '{key}' must be finite, got {value!r}")
        return float(value)

    def _scaled(self, key: str, factor: float) -> float | None:
        value = self._number(key)
        if value is not None and not math.isfinite(value * factor):
            raise self._refuse(f"key '{key}' is too large, got {value!r}")
        return None if value is None else value * factor

    def _unit(self, spec: LimitedQuantity) -> tuple[str, float]:
        """Return the unit that values are kept in and the factor from the stated one."""
        written = self._text("unit")
        if spec.words:
            if written:
                raise self._refuse(f"key 'unit' does not go with a word, got '{written}'")
            return "", 1.0
        if not spec.unit:
            return written, 1.0
        if not written:
            return spec.unit, 1.0
        factor = unit_factor(written, spec.unit)
        if factor is None:
            listed = ", ".join(known_units(spec.unit))
            raise self._refuse(f"unit '{written}' is not known here. Known: {listed}.")
        return spec.unit, factor

    def _rule(self, spec: LimitedQuantity) -> str:
        rule = self._choice("rule", RULES) or "guard"
        if spec.words and rule == "guard-width":
            raise self._refuse("rule 'guard-width' does not go with a word. Use 'guard'.")
        return rule

    def _wanted(self, spec: LimitedQuantity) -> str | None:
        if not spec.words:
            if "wanted" in self.raw:
                raise self._refuse("key 'wanted' goes with words only. Use lower and upper.")
            return None
        value = self._text("wanted")
        if not value:
            raise self._refuse(f"key 'wanted' is missing. Known words: {', '.join(spec.words)}.")
        if spec.words == ("n:m",):
            return self._order(value)
        return self._choice("wanted", spec.words)

    def _order(self, value: str) -> str:
        found = re.fullmatch(r"\s*([1-9]\d{0,3})\s*:\s*([1-9]\d{0,3})\s*", value, flags=re.ASCII)
        if found is None:
            raise self._refuse(f"wanted '{value}' must be a locking order n:m, such as 1:3")
        return f"{found[1]}:{found[2]}"

    def _drive(self) -> tuple[float | None, float | None]:
        value = self.raw.get("drive_hz")
        if value is None:
            return None, None
        ends = value if isinstance(value, list | tuple) else [value, value]
        numbers = [
            float(end)
            for end in ends
            if isinstance(end, int | float) and not isinstance(end, bool) and math.isfinite(end)
        ]
        if len(ends) != 2 or len(numbers) != 2 or not numbers[0] <= numbers[1]:
            raise self._refuse(f"key 'drive_hz' must be [low, high] in Hz, got {value!r}")
        return numbers[0], numbers[1]

    def _averaging(self, quantity: str) -> float | None:
        value = self._number("averaging_s")
        if not quantity.startswith("free_stability"):
            if value is not None:
                raise self._refuse(f"key 'averaging_s' does not go with '{quantity}'")
            return None
        if value is None or not value > 0:
            raise self._refuse(f"key 'averaging_s' must be above 0 s, got {value!r}")
        return value

    def _check_selectors(self, quantity: str, spec: LimitedQuantity) -> None:
        allowed = SELECTORS[spec.scope]
        for key in ("level", "direction", "drive_hz", "file"):
            if key in self.raw and key not in allowed:
                known = ", ".join(allowed) or "none: it belongs to the whole sweep"
                raise self._refuse(f"key '{key}' does not pick a '{quantity}'. Selectors: {known}.")

    def _check_ends(self, limit: Limit, spec: LimitedQuantity) -> None:
        ends = [key for key in ("lower", "upper") if key in self.raw]
        if spec.words:
            if ends:
                raise self._refuse(f"key '{ends[0]}' does not go with a word. Use wanted.")
            return
        if not ends:
            raise self._refuse("it needs lower, upper, or both")
        if spec.circular:
            self._check_arc(limit)
        elif limit.lower is not None and limit.upper is not None and limit.lower > limit.upper:
            raise self._refuse(
                f"lower must not be above upper, got {self.raw['lower']} and {self.raw['upper']}"
            )

    def _check_arc(self, limit: Limit) -> None:
        """Refuse an arc that is half open, empty, or the whole circle."""
        if limit.lower is None or limit.upper is None:
            raise self._refuse("an angle needs both lower and upper, the ends of an arc")
        if abs(limit.upper - limit.lower) >= _FULL_TURN or not arc_width_rad(
            limit.lower, limit.upper
        ):
            raise self._refuse(
                "lower and upper must be the ends of an arc of less than a turn, got "
                f"{self.raw['lower']} and {self.raw['upper']}"
            )

    def _check_rule(self, limit: Limit) -> None:
        """Refuse a rule without its number and a number without its rule."""
        for rule, key, fits, words in _RULE_NUMBERS:
            value = getattr(limit, key)
            if limit.rule != rule:
                if value is not None:
                    raise self._refuse(f"key '{key}' goes with rule '{rule}', got '{limit.rule}'")
            elif value is None or not fits(value):
                raise self._refuse(f"rule '{rule}' needs key '{key}' {words}, got {value!r}")


_RULE_NUMBERS: tuple[tuple[str, str, Callable[[float], bool], str], ...] = (
    ("guard-width", "guard_width", lambda value: value >= 0.0, "at or above 0"),
    ("risk", "risk", lambda value: 0.0 < value < 0.5, "above 0 and below 0.5"),
)
